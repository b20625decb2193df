"""Area mapping: every cell of the image plane laid, as two mapped triangles, over the source pixels that it covers.

A mapped triangle of image area A and signed source area S has the density A/|S|. Its coverage of pixels is exact: each
directed edge adds its area to the right, times A/S, to one buffer, and a running sum along the rows finishes the map.
Cells whose map is too curved for triangles, or that hold a star, are cut finer until they are good or off the window.
"""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel
from crossing.shooting.maps.edges import add_edge, add_edges, add_points
from crossing.shooting.rays import VECTOR, map_grid, scratch

__all__ = ["LOOK", "TILE", "deposit_leaves"]

LOOK = 8
"""Cells on a side in the first look at a leaf."""
TILE = 64
"""Most cells on a side that are mapped in one go."""
# A look pushes at most LOOK^2 boxes, a tile at most TILE^2 of its cells, and each level is finished before the next.
_STACK = 200_000
_MOST_FINER = 64
# Cells of a leaf's own grid may sag this much more than asked before they are cut: neighbours of equal size have no gap
# between them, so that their errors cancel where those of a cut cell do not.
_SLACK = 4.0
_PIECES = 4
# Lagrange weights of four nodes, at points on the first, second and third of the three stretches between them.
_CUBIC = np.array(
    [
        [
            [
                -(t - 1.0) * (t - 2.0) * (t - 3.0) / 6.0,
                t * (t - 2.0) * (t - 3.0) / 2.0,
                -t * (t - 1.0) * (t - 3.0) / 2.0,
                t * (t - 1.0) * (t - 2.0) / 6.0,
            ]
            for t in stretch + np.arange(_PIECES + 1) / _PIECES
        ]
        for stretch in range(3)
    ]
)
_HIGHEST_WEIGHT = 1.5
_SHARE = 0.1
# A triangle that would be magnified more than this is laid down as points along itself: see the design of the sum.
_MOST_DENSITY = 1e6


@kernel
def deposit_leaves(leaves, lens, tree, stars, scale, spacing, tolerance, mean, buffer, tally):
    """Map leaves and lay them over the buffer.

    Parameters
    ----------
    leaves : (m,) ndarray
        Indices of the leaves to map.
    lens, tree, stars, scale
        See `map_grid`; scale holds the lower left corner of the window and the pixels per unit.
    spacing : float
        Largest size of a cell.
    tolerance : float
        Sag of a triangle's edge against the true map that is allowed, times the density over its mean [pixels].
    mean : float
        Mean magnification, to which densities are compared.
    buffer : (rows, columns + 1) ndarray
        Added to.
    tally : (3,) ndarray
        Added to: rays, cells laid down, cells given up at the smallest size.

    Notes
    -----
    Boxes and cells that wait are on one stack. Each is looked at or mapped, and what is not good enough goes back in
    smaller parts.
    """
    centre, half, _, real, _, near_start, near_all = tree
    side = TILE + 1
    work = scratch(real.shape[1], side)
    wide = side + VECTOR - 1
    u, v = np.empty((side, wide)), np.empty((side, wide))
    one, two = np.empty((side, side)), np.empty((side, side))
    forced, state = np.zeros((side, side), dtype=np.bool_), np.zeros((LOOK, LOOK), dtype=np.int8)
    good = np.zeros((side + 1, side + 1), dtype=np.bool_)
    line = np.empty((2, _PIECES + 1))
    edges, weight = np.empty((2, 3 * side * side), dtype=np.int64), np.empty(3 * side * side)
    pixel, flat = np.empty((side, wide), dtype=np.int64), buffer.reshape(-1)
    stack = np.empty((_STACK, 7))
    escape = np.empty(len(stars[0]))
    rows, columns = buffer.shape[0], buffer.shape[1] - 1
    for leaf in leaves:
        near = near_all[near_start[leaf] : near_start[leaf + 1]]
        _escapes(escape, lens, tree, leaf, stars, near, scale, rows, columns)
        # Entries with zero cells are boxes to be looked at, from which tiles come; a leaf is the first one.
        stack[0, 0], stack[0, 1] = centre[leaf, 0] - half[leaf, 0], centre[leaf, 1] - half[leaf, 1]
        stack[0, 2], stack[0, 3], stack[0, 4] = 2 * half[leaf, 0], 2 * half[leaf, 1], 0
        depth = 1
        while depth > 0:
            depth -= 1
            x0, y0, across, up = stack[depth, 0], stack[depth, 1], stack[depth, 2], stack[depth, 3]
            nx, ny, allowed = int(stack[depth, 4]), int(stack[depth, 5]), stack[depth, 6]
            if nx == 0:
                hx, hy = across / LOOK, up / LOOK
                map_grid(lens, tree, leaf, stars, x0, y0, hx, hy, LOOK + 1, LOOK + 1, scale, work, u, v)
                tally[0] += (LOOK + 1) ** 2
                _mark_stars(forced, LOOK, LOOK, x0, y0, hx, hy, stars, near)
                area, bend = 0.5 * hx * hy * scale[2] ** 2, _bend(lens, hx, hy, scale[2])
                finer = _plan(forced, state, u, v, spacing / max(hx, hy), area, max(hx / hy, hy / hx), bend, tolerance,
                    mean, rows, columns)  # fmt: skip
                depth = _push_tiles(stack, depth, state, x0, y0, across, up, spacing, finer)
                continue
            hx, hy = across / nx, up / ny
            map_grid(lens, tree, leaf, stars, x0, y0, hx, hy, nx + 1, ny + 1, scale, work, u, v)
            tally[0] += (nx + 1) * (ny + 1)
            _mark_stars(forced, nx, ny, x0, y0, hx, hy, stars, near)
            area = 0.5 * hx * hy * scale[2] ** 2
            box = (x0, y0, hx, hy, _bend(lens, hx, hy, scale[2]))
            depth = _sort_cells(
                stack, depth, forced, good, u, v, nx, ny, box, area, mean, tolerance, allowed, stars, near, escape,
                rows, columns, 1e-12 * half[leaf, 0], tally,
            )  # fmt: skip
            _pixels(pixel, u, v, nx, ny, rows, columns)
            tally[1] += _densities(buffer, flat, nx, ny, u, v, pixel, good, one, two, area, line, allowed < _SLACK)
            _edges(buffer, nx, ny, u, v, pixel, good, one, two, line, allowed < _SLACK, edges, weight)


@kernel
def _bend(lens, hx, hy, per_unit):
    """The gradient's part of a cell's sag [pixels], which its twist does not show."""
    return 0.125 * np.hypot(lens[2], lens[3]) * hx * (hx + 2.0 * hy) * per_unit


@kernel
def _sag(u, v, i, j, aspect, bend):
    """How far the true map may be from the straight edges of a cell [pixels].

    The second derivatives of an analytic deflection are equally large in all directions; a cell's twist gives them.
    """
    twist_u = u[i, j] - u[i, j + 1] - u[i + 1, j] + u[i + 1, j + 1]
    twist_v = v[i, j] - v[i, j + 1] - v[i + 1, j] + v[i + 1, j + 1]
    return 0.25 * np.sqrt(twist_u * twist_u + twist_v * twist_v) * aspect + bend


@kernel
def _need(u, v, i, j, sag, area, tolerance):
    """How much finer than allowed a cell should be, squared: one or less is good enough.

    What a misplaced edge spoils goes with the density of the cell beside it, so that the hugely spread neighbourhoods
    of stars may be coarse; but no edge may sag by more than a share of the cell's own extent.
    """
    d1u, d1v = u[i + 1, j + 1] - u[i, j], v[i + 1, j + 1] - v[i, j]
    d2u, d2v = u[i + 1, j] - u[i, j + 1], v[i + 1, j] - v[i, j + 1]
    covered = 0.5 * abs(d1u * d2v - d1v * d2u)
    extent = np.sqrt(max(d1u * d1u + d1v * d1v, d2u * d2u + d2v * d2v))
    flux = min(2.0 * area / max(covered, 1e-300), _HIGHEST_WEIGHT)
    return max(sag * flux / tolerance, min(sag, 1e9) / (_SHARE * extent + 1e-3))


@kernel
def _misses(u, v, i, j, margin, rows, columns):
    """Whether a cell lands beside the window."""
    if min(u[i, j], u[i, j + 1], u[i + 1, j], u[i + 1, j + 1]) - margin > columns:
        return True
    if max(u[i, j], u[i, j + 1], u[i + 1, j], u[i + 1, j + 1]) + margin < 0:
        return True
    if min(v[i, j], v[i, j + 1], v[i + 1, j], v[i + 1, j + 1]) - margin > rows:
        return True
    return max(v[i, j], v[i, j + 1], v[i + 1, j], v[i + 1, j + 1]) + margin < 0


@kernel
def _plan(forced, state, u, v, cell, area, aspect, bend, tolerance, mean, rows, columns):
    """How many times finer than `spacing` most of a leaf should be, from a first look; state says what matters."""
    hits = 0
    needs = np.empty(LOOK * LOOK)
    for i in range(LOOK):
        for j in range(LOOK):
            state[i, j] = 0
            if forced[i, j]:
                forced[i, j] = False
                state[i, j] = 1
                continue
            sag = _sag(u, v, i, j, aspect, bend)
            if not _misses(u, v, i, j, 4.0 * sag, rows, columns):
                state[i, j] = 1
                needs[hits] = _need(u, v, i, j, sag, area / mean, tolerance)
                hits += 1
    # Need goes with the square of a cell's size.
    cell = min(1.0, cell)
    refine = 1
    if hits:
        typical = np.sort(needs[:hits])[int(0.75 * (hits - 1))] * cell * cell
        while typical > 1.0 and refine < _MOST_FINER:
            typical *= 0.25
            refine *= 2
    return refine


@kernel
def _push_tiles(stack, depth, state, x0, y0, wide, high, spacing, refine):
    """Cut a box into tiles of a common grid, and keep those that hold a part that matters.

    Where the tiles would be smaller than the cells of the look, these are looked at more closely instead.
    """
    nx, ny = max(4, int(np.ceil(wide / spacing))) * refine, max(4, int(np.ceil(high / spacing))) * refine
    across, up = (nx + TILE - 1) // TILE, (ny + TILE - 1) // TILE
    nx, ny = (nx + across - 1) // across, (ny + up - 1) // up
    if across > LOOK or up > LOOK:
        across, up, nx, ny = LOOK, LOOK, 0, 0
    for i in range(up):
        for j in range(across):
            matters = False
            for row in range(i * LOOK // up, min(LOOK, ((i + 1) * LOOK + up - 1) // up)):
                for column in range(j * LOOK // across, min(LOOK, ((j + 1) * LOOK + across - 1) // across)):
                    matters = matters or state[row, column] > 0
            if matters:
                stack[depth, 0], stack[depth, 1] = x0 + j * wide / across, y0 + i * high / up
                stack[depth, 2], stack[depth, 3] = wide / across, high / up
                stack[depth, 4], stack[depth, 5], stack[depth, 6] = nx, ny, _SLACK
                depth += 1
    return depth


@kernel
def _sort_cells(
    stack, depth, forced, good, u, v, nx, ny, box, area, mean, tolerance, allowed, stars, near, escape, rows, columns,
    smallest, tally,
):  # fmt: skip
    """Which cells of a block are good enough to be laid down; those to be cut finer go on the stack.

    `good` has a border of one cell that stays false: good[i + 1, j + 1] is cell (i, j).
    """
    x0, y0, hx, hy, bend = box
    aspect = max(hx / hy, hy / hx)
    good[0 : ny + 2, 0 : nx + 2] = False
    for i in range(ny):
        for j in range(nx):
            cuts = 0
            if forced[i, j]:
                forced[i, j] = False
                if _thrown_off(x0 + j * hx, y0 + i * hy, hx, hy, stars, near, escape):
                    continue
                cuts = 8
                if hx < smallest:
                    tally[2] += 1
                    continue
            else:
                sag = _sag(u, v, i, j, aspect, bend)
                if _misses(u, v, i, j, 4.0 * sag, rows, columns):
                    continue
                need = _need(u, v, i, j, sag, area / mean, tolerance)
                if need > allowed:
                    cuts = 4
                    while need > cuts * cuts and cuts < 32:
                        cuts *= 2
            if cuts and depth == len(stack):
                tally[2] += 1
            elif cuts:
                stack[depth, 0], stack[depth, 1] = x0 + j * hx, y0 + i * hy
                stack[depth, 2], stack[depth, 3] = hx, hy
                stack[depth, 4], stack[depth, 5], stack[depth, 6] = cuts, cuts, 2.0
                depth += 1
            else:
                good[i + 1, j + 1] = True
    return depth


@kernel
def _curve(line, u, v, i, j, along_row, n):
    """Points on the mapped edge that starts at node (i, j): cubic interpolation through four nodes of its line."""
    k = j if along_row else i
    first = min(max(k - 1, 0), n - 3)
    down, right = (0, 1) if along_row else (1, 0)
    row, column = (i, first) if along_row else (first, j)
    line[0, 0], line[1, 0] = u[i, j], v[i, j]
    line[0, _PIECES], line[1, _PIECES] = u[i + down, j + right], v[i + down, j + right]
    line[:, 1:_PIECES] = 0.0
    for node in range(4):
        a, b = u[row, column], v[row, column]
        for piece in range(1, _PIECES):
            weight = _CUBIC[k - first, piece, node]
            line[0, piece] += weight * a
            line[1, piece] += weight * b
        row, column = row + down, column + right


@kernel
def _bulge(line, u, v, i, j, along_row, n):
    """Signed area between the curve of an edge and its chord, positive to the right of the chord."""
    _curve(line, u, v, i, j, along_row, n)
    x0, y0 = line[0, 0], line[1, 0]
    total = 0.0
    for piece in range(1, _PIECES):
        total += (line[0, piece] - x0) * (line[1, piece + 1] - y0) - (line[0, piece + 1] - x0) * (line[1, piece] - y0)
    return 0.5 * total


@kernel
def _pixels(pixel, u, v, nx, ny, rows, columns):
    """Place in the flat buffer of the pixel that each corner lands in, negative beside the window."""
    for i in range(ny + 1):
        for j in range(nx + 1):
            inside = u[i, j] >= 0.0 and u[i, j] < columns and v[i, j] >= 0.0 and v[i, j] < rows
            pixel[i, j] = int(v[i, j]) * (columns + 1) + int(u[i, j]) if inside else -1


@kernel
def _densities(buffer, flat, nx, ny, u, v, pixel, good, one, two, area, line, straight):
    """Image area over signed source area of the two triangles of every good cell; returns the number of good cells.

    Cells that land in one pixel are laid down at once, and have no edges. Edges towards cells that are not good follow
    the curve, so that cells of different sizes meet without gaps.
    """
    laid = 0
    for i in range(ny):
        for j in range(nx):
            one[i, j] = 0.0
            two[i, j] = 0.0
            if not good[i + 1, j + 1]:
                continue
            laid += 1
            place = pixel[i, j]
            if place >= 0 and place == pixel[i, j + 1] and place == pixel[i + 1, j] and place == pixel[i + 1, j + 1]:
                flat[place] += 2.0 * area
                flat[place + 1] -= 2.0 * area
                continue
            ax, ay, bx, by = u[i, j], v[i, j], u[i, j + 1], v[i, j + 1]
            cx, cy, dx, dy = u[i + 1, j + 1], v[i + 1, j + 1], u[i + 1, j], v[i + 1, j]
            lower = 0.5 * ((bx - ax) * (cy - ay) - (cx - ax) * (by - ay))
            upper = 0.5 * ((cx - ax) * (dy - ay) - (dx - ax) * (cy - ay))
            extra_lower, extra_upper = 0.0, 0.0
            if not (good[i, j + 1] or (straight and i == 0)):
                extra_lower += _bulge(line, u, v, i, j, True, nx)
            if not (good[i + 1, j + 2] or (straight and j == nx - 1)):
                extra_lower += _bulge(line, u, v, i, j + 1, False, ny)
            if not (good[i + 2, j + 1] or (straight and i == ny - 1)):
                extra_upper -= _bulge(line, u, v, i + 1, j, True, nx)
            if not (good[i + 1, j] or (straight and j == 0)):
                extra_upper -= _bulge(line, u, v, i, j, False, ny)
            # A triangle that is thinner than its edges are curved has no density worth the name.
            if abs(lower) * _MOST_DENSITY > area and abs(extra_lower) < 0.5 * abs(lower):
                one[i, j] = area / (lower + extra_lower)
            else:
                add_points(buffer, ax, ay, bx, by, cx, cy, area)
            if abs(upper) * _MOST_DENSITY > area and abs(extra_upper) < 0.5 * abs(upper):
                two[i, j] = area / (upper + extra_upper)
            else:
                add_points(buffer, ax, ay, cx, cy, dx, dy, area)
    return laid


@kernel
def _open_edge(buffer, line, u, v, i, j, along_row, n, weight):
    """Add an edge as its curve."""
    _curve(line, u, v, i, j, along_row, n)
    for piece in range(_PIECES):
        add_edge(buffer, line[0, piece], line[1, piece], line[0, piece + 1], line[1, piece + 1], weight)


@kernel
def _edges(buffer, nx, ny, u, v, pixel, good, one, two, line, straight, edges, weight):
    """Every edge of a block once, with the difference of the densities on its two sides.

    Edges between good cells are listed first: lists are made without a branch, and laid down in one loop.
    """
    side, first, second, count = u.shape[1], edges[0], edges[1], 0
    for i in range(ny + 1):
        for j in range(nx):
            below, above = good[i, j + 1], good[i + 1, j + 1]
            w = (one[i, j] if above else 0.0) - (two[i - 1, j] if below else 0.0)
            first[count], second[count], weight[count] = i * side + j, i * side + j + 1, w
            closed = (above and below) or (straight and (i == 0 or i == ny))
            count += closed and w != 0.0
            if w != 0.0 and not closed:
                _open_edge(buffer, line, u, v, i, j, True, nx, w)
    for i in range(ny):
        for j in range(nx + 1):
            left, right = good[i + 1, j], good[i + 1, j + 1]
            w = (one[i, j - 1] if left else 0.0) - (two[i, j] if right else 0.0)
            first[count], second[count], weight[count] = i * side + j, (i + 1) * side + j, w
            closed = (left and right) or (straight and (j == 0 or j == nx))
            count += closed and w != 0.0
            if w != 0.0 and not closed:
                _open_edge(buffer, line, u, v, i, j, False, ny, w)
        for j in range(nx):
            w = two[i, j] - one[i, j]
            first[count], second[count], weight[count] = i * side + j, (i + 1) * side + j + 1, w
            count += w != 0.0
    add_edges(buffer, u.reshape(-1), v.reshape(-1), pixel.reshape(-1), first, second, weight, count)


@kernel
def _mark_stars(forced, nx, ny, x0, y0, hx, hy, stars, near):
    """Mark the cells that hold a near star, or have one closer than half a cell."""
    for slot in range(len(near)):
        column, row = (stars[0][near[slot]] - x0) / hx, (stars[1][near[slot]] - y0) / hy
        if column < -0.5 or column > nx + 0.5 or row < -0.5 or row > ny + 0.5:
            continue
        for i in range(max(0, int(np.floor(row - 0.5))), min(ny, int(np.floor(row + 0.5)) + 1)):
            for j in range(max(0, int(np.floor(column - 0.5))), min(nx, int(np.floor(column + 0.5)) + 1)):
                forced[i, j] = True


@kernel
def _escapes(escape, lens, tree, leaf, stars, near, scale, rows, columns):
    """Distance from each near star within which its deflection throws every ray beyond the window."""
    centre, _, inside, real, imag, _, _ = tree
    star_x, star_y, star_mass = stars
    sheet = lens[4] if inside[leaf] else 0.0
    for slot in range(len(near)):
        star = near[slot]
        x, y = star_x[star], star_y[star]
        z = complex(x - centre[leaf, 0], y - centre[leaf, 1])
        total = 0j
        for k in range(real.shape[1] - 1, -1, -1):
            total = total * z + complex(real[leaf, k], imag[leaf, k])
        for other in range(len(near)):
            if other != slot:
                dx, dy = x - star_x[near[other]], y - star_y[near[other]]
                square = dx * dx + dy * dy
                if square > 0.0:
                    total += star_mass[near[other]] * complex(dx, -dy) / square
        u = (lens[0] + sheet) * x + 0.5 * lens[2] * x * x + lens[3] * x * y - total.real
        v = (lens[1] + sheet) * y + 0.5 * lens[3] * x * x + total.imag
        u, v = (u - scale[0]) * scale[2], (v - scale[1]) * scale[2]
        away = np.hypot(max(abs(u), abs(columns - u)), max(abs(v), abs(rows - v))) / scale[2]
        # The last term leaves room for what the rest of the map changes over that distance.
        escape[slot] = star_mass[star] / (away + 2.0 * np.sqrt(star_mass[star]))


@kernel
def _thrown_off(x, y, hx, hy, stars, near, escape):
    """Whether all of a cell lies so close to a star that it misses the window."""
    for slot in range(len(near)):
        star = near[slot]
        far_x = max(abs(stars[0][star] - x), abs(stars[0][star] - x - hx))
        far_y = max(abs(stars[1][star] - y), abs(stars[1][star] - y - hy))
        if far_x * far_x + far_y * far_y < escape[slot] * escape[slot]:
            return True
    return False
