"""Edges of mapped triangles laid over pixels: each adds the area to its right to a buffer that running sums finish."""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel

__all__ = ["add_edge", "add_edges", "add_points", "running_sum"]


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
def add_edges(buffer, u, v, pixel, first, second, weight, count):
    """Add many edges between corners of a block.

    Parameters
    ----------
    buffer : (rows, columns + 1) ndarray
        Added to.
    u, v, pixel : (n,) ndarray
        Corners, and their places in the flat buffer; negative beside the window.
    first, second, weight : (>= count,) ndarray
        Ends of the edges, and weights.
    count : int
        Number of edges.
    """
    flat, stride = buffer.reshape(-1), buffer.shape[1]
    for edge in range(count):
        a, b, w = first[edge], second[edge], weight[edge]
        x0, y0, x1, y1 = u[a], v[a], u[b], v[b]
        place = pixel[a]
        if place < 0 or pixel[b] < 0:
            add_edge(buffer, x0, y0, x1, y1, w)
            continue
        column = int(x0)
        if place == pixel[b]:
            part = w * (y0 - y1)
            right = part * (0.5 * (x0 + x1) - column)
            flat[place] += part - right
            flat[place + 1] += right
            continue
        if y0 > y1:
            x0, y0, x1, y1, w = x1, y1, x0, y0, -w
            place, column = pixel[b], int(x0)
        end = int(x1)
        if column == end:
            _in_column(flat, stride, place, column, x0, y0, x1, y1, -w)
        else:
            _across(flat, stride, x0, y0, x1, y1, -w)


@kernel
def _in_column(flat, stride, place, column, x0, y0, x1, y1, weight):
    """Add an edge that runs upwards within one column, through two or more rows."""
    row, last = int(y0), int(y1)
    slope = (x1 - x0) / (y1 - y0)
    part = weight * (row + 1 - y0)
    right = part * (x0 + 0.5 * (row + 1 - y0) * slope - column)
    flat[place] += part - right
    flat[place + 1] += right
    offset = x0 + (0.5 - y0) * slope - column
    for between in range(row + 1, last):
        place += stride
        right = weight * (offset + between * slope)
        flat[place] += weight - right
        flat[place + 1] += right
    place, part = place + stride, weight * (y1 - last)
    right = part * (x1 - 0.5 * (y1 - last) * slope - column)
    flat[place] += part - right
    flat[place + 1] += right


@kernel
def _across(flat, stride, x0, y0, x1, y1, weight):
    """Add an edge that runs upwards through two or more rows and columns."""
    row, last, column = int(y0), int(y1), int(x0)
    slope, y, x = (x1 - x0) / (y1 - y0), y0, x0
    for between in range(row, last + 1):
        y_next = between + 1.0 if between < last else y1
        x_next = x0 + (y_next - y0) * slope if between < last else x1
        end, start, part = int(x_next), between * stride, weight * (y_next - y)
        if column == end:
            right = part * (0.5 * (x + x_next) - column)
            flat[start + column] += part - right
            flat[start + column + 1] += right
        elif column < end:
            _in_row(flat, start, column, end, x, x_next, part)
        else:
            _in_row(flat, start, end, column, x_next, x, part)
        y, x, column = y_next, x_next, end


@kernel
def _in_row(flat, start, column, end, x0, x1, part):
    """Add a piece of an edge from left to right within one row, which stands for the signed height `part`."""
    # The parts of both sides of a column's edge; all but the first and the last column are crossed fully.
    per_column = part / (x1 - x0)
    piece = per_column * (column + 1 - x0)
    carried = piece * 0.5 * (1.0 + x0 - column)
    flat[start + column] += piece - carried
    for middle in range(column + 1, end):
        flat[start + middle] += carried + 0.5 * per_column
        carried = 0.5 * per_column
    piece = per_column * (x1 - end)
    right = piece * 0.5 * (x1 - end)
    flat[start + end] += carried + piece - right
    flat[start + end + 1] += right


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
