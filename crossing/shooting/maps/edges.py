"""Edges of mapped triangles laid over pixels: each adds the area to its right to a buffer that running sums finish."""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel

__all__ = ["add_edge", "add_points", "running_sum"]


@kernel
def add_edge(buffer, x0, y0, x1, y1, weight):
    """Add one directed edge, in pixels, to the buffer that the running sum turns into covered area times weight."""
    rows, columns = buffer.shape[0], buffer.shape[1] - 1
    if y0 == y1 or weight == 0.0:
        return
    if y0 < y1:
        weight = -weight
    else:
        x0, y0, x1, y1 = x1, y1, x0, y0
    if y1 <= 0.0 or y0 >= rows or (x0 >= columns and x1 >= columns):
        return
    slope = (x1 - x0) / (y1 - y0)
    if y0 >= 0.0 and y1 < rows and min(x0, x1) >= 0.0 and max(x0, x1) < columns:
        _inner_edge(buffer, x0, y0, x1, y1, slope, weight)
        return
    y, x = y0, x0
    if y < 0.0:
        x -= y * slope
        y = 0.0
    top = min(y1, float(rows))
    row = int(y)
    while y < top:
        y_next = min(row + 1.0, top)
        x_next = x1 if y_next == y1 else x0 + (y_next - y0) * slope
        _row_piece(buffer, row, columns, min(x, x_next), max(x, x_next), weight * (y_next - y))
        x, y = x_next, y_next
        row += 1


@kernel
def _inner_edge(buffer, x0, y0, x1, y1, slope, weight):
    """An edge that runs upwards inside the window."""
    row, last = int(y0), int(y1)
    y, x = y0, x0
    while True:
        if row == last:
            y_next, x_next = y1, x1
        else:
            y_next = row + 1.0
            x_next = x0 + (y_next - y0) * slope
        low, high = (x, x_next) if x < x_next else (x_next, x)
        part = weight * (y_next - y)
        column, end = int(low), int(high)
        if column == end:
            right = part * (0.5 * (low + high) - column)
            buffer[row, column] += part - right
            buffer[row, column + 1] += right
        else:
            # The parts of both sides of a column's edge; all but the first and the last column are crossed fully.
            per_column = part / (high - low)
            piece = per_column * (column + 1.0 - low)
            right = piece * 0.5 * (1.0 + low - column)
            buffer[row, column] += piece - right
            carried = right
            for middle in range(column + 1, end):
                buffer[row, middle] += carried + 0.5 * per_column
                carried = 0.5 * per_column
            piece = per_column * (high - end)
            right = piece * 0.5 * (high - end)
            buffer[row, end] += carried + piece - right
            buffer[row, end + 1] += right
        if row == last:
            return
        y, x = y_next, x_next
        row += 1


@kernel
def _row_piece(buffer, row, columns, low, high, part):
    """An edge piece inside one row, from column coordinate `low` to `high`, standing for the height `part`."""
    if high <= 0.0:
        buffer[row, 0] += part
        return
    if low >= columns:
        return
    if low >= 0.0:
        column = int(low)
        if high <= column + 1.0:
            middle = 0.5 * (low + high) - column
            buffer[row, column] += part * (1.0 - middle)
            buffer[row, column + 1] += part * middle
            return
    per_column = part / (high - low)
    if low < 0.0:
        buffer[row, 0] -= low * per_column
        low = 0.0
    high = min(high, float(columns))
    column = int(low)
    while low < high:
        end = min(column + 1.0, high)
        piece, middle = per_column * (end - low), 0.5 * (low + end) - column
        buffer[row, column] += piece * (1.0 - middle)
        buffer[row, column + 1] += piece * middle
        low = end
        column += 1


@kernel
def add_points(buffer, ax, ay, bx, by, cx, cy, area):
    """Lay the area of a degenerate triangle down as points along its longest edge."""
    lab = (bx - ax) ** 2 + (by - ay) ** 2
    lbc = (cx - bx) ** 2 + (cy - by) ** 2
    lca = (ax - cx) ** 2 + (ay - cy) ** 2
    if lbc >= lab and lbc >= lca:
        ax, ay, bx, by = bx, by, cx, cy
    elif lca >= lab:
        bx, by = cx, cy
    length = np.sqrt(max(lab, lbc, lca))
    count = min(1 + int(2.0 * length), 100_000)
    for i in range(count):
        f = (i + 0.5) / count
        column, row = np.floor(ax + f * (bx - ax)), np.floor(ay + f * (by - ay))
        if 0 <= row < buffer.shape[0] and 0 <= column < buffer.shape[1] - 1:
            buffer[int(row), int(column)] += area / count
            buffer[int(row), int(column) + 1] -= area / count


@kernel
def running_sum(buffer, out, factor):
    """Turn the buffer into the map, row by row."""
    for row in range(out.shape[0]):
        total = 0.0
        for column in range(out.shape[1]):
            total += buffer[row, column]
            out[row, column] = total * factor
