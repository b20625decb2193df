"""Cells of the image plane through which a critical curve may run, each with no more than one.

The determinant of the lens map is ``D = t^2 - |p|^2`` with half the trace t and ``p = P - f'``: f' is the derivative of
the conjugate deflection, analytic away from the stars, and t and P are linear in the position. Bounds on f'' and f'''
over a disc, from the leaf's series and its near stars, say for a cell that D has no zero in it, that its image misses
the window, or that the gradient of D keeps its direction so well over the disc of twice the cell's radius that all
critical points of the cell lie on one arc. Cells of which nothing can be said are cut in two.

References
----------
.. [1] Witt H. J., 1990, A&A 236, 311
"""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel
from crossing.shooting.tree import _find

__all__ = ["EMPTY", "GAP", "OUTSIDE", "RADIUS", "TOTALS", "find_cells", "lens_state", "locate", "slopes"]

EMPTY = -1
"""Code of a cell without critical points."""
OUTSIDE = -2
"""Code of a cell whose image misses the window."""
GAP = -3
"""Code of a cell that was given up."""
_FIRST = -4
RADIUS = 2
"""Column of a cell's radius; before it its centre, after it a critical point of its arc."""
TOTALS = 2
"""Numbers that are counted: evaluations of the lens map, cells given up."""

# The direction of the gradient may change by 45 degrees at most (sine 0.707): arcs then stay in the larger disc.
_CONE = 0.7
_DEPTH = 90
_NEAR_STAR = 8.0
# Relative change of the determinant over a cell below which its rounding decides.
_ROUNDING = 1e-12
# Share of a leaf's radius up to which its series stands for the field with the accuracy that was asked for.
_SERIES_REACH = 1.2


@kernel
def lens_state(x, y, leaf, scene):
    """Lens map at a point of a leaf.

    Parameters
    ----------
    x, y : float
        Point of the image plane.
    leaf : int
        Its leaf.
    scene : tuple
        Lens numbers, arrays of the tree, its roots, their nodes, its children, and the stars.

    Returns
    -------
    tuple
        Source position u + i v; t, p; dp/dz and f'''.
    """
    lens, tree, _, _, _, stars = scene
    centre, _, inside, real, imag, near_start, near = tree
    star_x, star_y, star_mass = stars
    z = complex(x - centre[leaf, 0], y - centre[leaf, 1])
    value, first, second, third = 0j, 0j, 0j, 0j
    for k in range(real.shape[1] - 1, -1, -1):
        third = third * z + 3.0 * second
        second = second * z + 2.0 * first
        first = first * z + value
        value = value * z + complex(real[leaf, k], imag[leaf, k])
    for slot in range(near_start[leaf], near_start[leaf + 1]):
        star = near[slot]
        dx, dy = x - star_x[star], y - star_y[star]
        square = dx * dx + dy * dy
        inverse = complex(dx / square, -dy / square)
        part = star_mass[star] * inverse
        value += part
        part *= inverse
        first -= part
        part *= inverse
        second += 2.0 * part
        third -= 6.0 * part * inverse
    sheet = lens[4] if inside[leaf] else 0.0
    gx, gy = lens[2], lens[3]
    lam_t, lam_r = lens[0] + sheet, lens[1] + sheet
    u = lam_t * x + 0.5 * gx * x * x + gy * x * y - value.real
    v = lam_r * y + 0.5 * gy * x * x + value.imag
    tilt = gx * x + gy * y
    half_trace = 0.5 * (lam_t + lam_r + tilt)
    shear = complex(0.5 * (lens[0] - lens[1] + tilt), -gy * x) - first
    return complex(u, v), half_trace, shear, complex(0.25 * gx, -0.75 * gy) - second, third


@kernel
def slopes(half_trace, shear, shear_z, third, trace_z):
    """D, and its derivatives by z, twice by z, and by z and its conjugate; `trace_z` is dt/dz."""
    back = shear.conjugate()
    det = half_trace * half_trace - (shear * back).real
    det_z = 2.0 * half_trace * trace_z - shear_z * back - shear * trace_z.conjugate()
    det_zz = 2.0 * trace_z * trace_z + third * back - 2.0 * shear_z * trace_z.conjugate()
    det_mixed = (trace_z * trace_z.conjugate()).real - (shear_z * shear_z.conjugate()).real
    return det, det_z, det_zz, det_mixed


@kernel
def _bounds(x, y, radius, leaf, scene, sizes):
    """Bounds on abs(f'') and abs(f''') over a disc, but for the star nearest to its centre, and that star, -1 if none.

    Infinite where the disc holds another star.
    """
    centre, _, _, _, _, near_start, near = scene[1]
    star_x, star_y, star_mass = scene[5]
    far = np.hypot(x - centre[leaf, 0], y - centre[leaf, 1]) + radius
    value, first, second, third = 0.0, 0.0, 0.0, 0.0
    for k in range(sizes.shape[1] - 1, -1, -1):
        third = third * far + 3.0 * second
        second = second * far + 2.0 * first
        first = first * far + value
        value = value * far + sizes[leaf, k]
    nearest, closest = -1, np.inf
    for slot in range(near_start[leaf], near_start[leaf + 1]):
        star = near[slot]
        distance = np.hypot(x - star_x[star], y - star_y[star])
        if distance < closest:
            nearest, closest = star, distance
    for slot in range(near_start[leaf], near_start[leaf + 1]):
        star = near[slot]
        if star == nearest:
            continue
        distance = np.hypot(x - star_x[star], y - star_y[star]) - radius
        if distance <= 0.0:
            return np.inf, np.inf, nearest, closest
        cube = distance * distance * distance
        second += 2.0 * star_mass[star] / cube
        third += 6.0 * star_mass[star] / (cube * distance)
    return second, third, nearest, closest


@kernel
def _with_star(second, third, mass, distance):
    """The same bounds with the nearest star, which is at least at `distance` from the disc."""
    if distance <= 0.0:
        return np.inf, np.inf
    cube = distance * distance * distance
    return second + 2.0 * mass / cube, third + 6.0 * mass / (cube * distance)


@kernel
def _judge(x, y, half_x, half_y, leaf, scene, sizes, window, row):
    """Code of a cell, 1 if it holds one arc (then in `row`), or 0 if it is to be cut; evaluations."""
    lens = scene[0]
    star_x, star_y, star_mass = scene[5]
    radius = np.hypot(half_x, half_y)
    tilt = 0.25 * np.hypot(lens[2], lens[3])
    trace_z, swing = complex(0.25 * lens[2], -0.25 * lens[3]), tilt + np.hypot(0.25 * lens[2], 0.75 * lens[3])
    rest2, rest3, star, closest = _bounds(x, y, radius, leaf, scene, sizes)
    mass = star_mass[star] if star >= 0 else 0.0
    if closest <= radius:
        # A star is in the disc, or at its rim: near enough to it, its own shear exceeds all else.
        x_off, y_off = x, y
        if closest < 0.1 * radius:
            x_off, y_off = x + 0.37 * half_x, y + 0.41 * half_y
        _, half_trace, shear, _, _ = lens_state(x_off, y_off, leaf, scene)
        dx, dy = x_off - star_x[star], y_off - star_y[star]
        alone = complex(dx, -dy) / (dx * dx + dy * dy)
        rest = abs(shear - mass * alone * alone) + 2.0 * radius * (rest2 + swing)
        own = mass / (closest + radius) ** 2
        return (EMPTY if own > rest + abs(half_trace) + 4.0 * radius * tilt else 0), 1
    second, third = _with_star(rest2, rest3, mass, closest - radius)
    place, half_trace, shear, shear_z, f3 = lens_state(x, y, leaf, scene)
    second = min(second, abs(shear_z) + 3.0 * tilt + radius * third)
    if abs(abs(shear) - abs(half_trace)) > radius * (second + swing + 2.0 * tilt):
        return EMPTY, 1
    bend = 0.5 * radius * radius * (second + 12.0 * tilt)
    across = half_x * abs(half_trace + shear.real) + half_y * abs(shear.imag) + bend
    along = half_x * abs(shear.imag) + half_y * abs(half_trace - shear.real) + bend
    if abs(place.real - window[0]) > window[2] + across or abs(place.imag - window[1]) > window[3] + along:
        return OUTSIDE, 1
    # Over the disc of twice the radius:
    reach = 2.0 * radius
    centre, half = scene[1][0], scene[1][1]
    away = np.hypot(x - centre[leaf, 0], y - centre[leaf, 1]) + reach
    if closest <= reach or away > _SERIES_REACH * np.hypot(half[leaf, 0], half[leaf, 1]):
        return 0, 1
    rest2, rest3, star, closest = _bounds(x, y, reach, leaf, scene, sizes)
    second, third = _with_star(rest2, rest3, mass, closest - reach)
    second = min(second, abs(shear_z) + 3.0 * tilt + reach * third)
    most = second + 3.0 * tilt
    largest = abs(shear) + reach * (second + swing)
    change = 3.0 * tilt * tilt + third * largest + 2.0 * most * tilt + most * most
    det, det_z, _, _ = slopes(half_trace, shear, shear_z, f3, trace_z)
    steep = abs(det_z)
    if not reach * change <= _CONE * steep:
        largest = 2.0 * reach * (steep + reach * change)
        return (GAP if largest < _ROUNDING * (half_trace * half_trace + abs(shear) ** 2) else 0), 1
    if abs(det) > 2.0 * steep * (1.0 + _CONE) * reach:
        return EMPTY, 1
    found, used = _on_line(complex(x, y), det_z, reach, leaf, scene, row)
    row[0], row[1], row[RADIUS] = x, y, radius
    return (1 if found else EMPTY), 1 + used


@kernel
def _on_line(z, det_z, reach, leaf, scene, row):
    """Zero of D on the line through a cell's centre along the gradient there, on which D is monotonic; evaluations."""
    trace_z = complex(0.25 * scene[0][2], -0.25 * scene[0][3])
    ahead = det_z.conjugate() / abs(det_z)
    low, high, at = -reach, reach, 0.0
    for count in range(1, 60):
        point = z + at * ahead
        # The leaf's own series: beyond the edge of the stars' sheet it goes on as if that did.
        _, half_trace, shear, shear_z, f3 = lens_state(point.real, point.imag, leaf, scene)
        det, slope, _, _ = slopes(half_trace, shear, shear_z, f3, trace_z)
        if det > 0.0:
            high = at
        else:
            low = at
        shift = -det / (2.0 * (slope * ahead).real)
        if abs(shift) < 1e-9 * reach:
            row[RADIUS + 1], row[RADIUS + 2] = point.real, point.imag
            return True, count
        at += shift
        if at <= low or at >= high:
            if high == reach and at >= reach and low > 0.99 * reach:
                return False, count
            if low == -reach and at <= -reach and high < -0.99 * reach:
                return False, count
            at = 0.5 * (max(low, -reach) + min(high, reach))
    return False, 60


@kernel
def find_cells(leaves, scene, sizes, window, totals):
    """Cut leaves into cells until each is empty, outside, or holds one arc of a critical curve.

    Parameters
    ----------
    leaves : (m,) ndarray of int
        Leaves to search, the m first nodes of the result.
    scene : tuple
        See `lens_state`.
    sizes : (n, order) ndarray
        Absolute values of the leaves' series.
    window : (4,) ndarray
        Centre (u, v) and half sizes of the window, with a margin.
    totals : (TOTALS,) ndarray
        Added to.

    Returns
    -------
    nodes : (k,) ndarray of int
        First of the two nodes that a cell was cut into across its longer side, or a code; -4 - i for the cell i.
    cells : (c, 5) ndarray
        Centre, radius, and a critical point (x, y) on the arc.
    """
    centre, half = scene[1][0], scene[1][1]
    nodes, cells = np.empty(2 * len(leaves) + 64, dtype=np.int64), np.empty((1024, 5))
    node_count, cell_count = len(leaves), 0
    stack = np.empty((2 * _DEPTH + 8, 4))
    stacked = np.empty((2 * _DEPTH + 8, 2), dtype=np.int64)
    for i in range(len(leaves)):
        leaf = leaves[i]
        stack[0, :2], stack[0, 2:] = centre[leaf], half[leaf]
        stacked[0, 0], stacked[0, 1] = i, 0
        top = 1
        while top > 0:
            top -= 1
            x, y, half_x, half_y = stack[top, 0], stack[top, 1], stack[top, 2], stack[top, 3]
            node, depth = stacked[top, 0], stacked[top, 1]
            if cell_count == len(cells):
                cells = np.concatenate((cells, np.empty_like(cells)))
            if node_count + 2 > len(nodes):
                nodes = np.concatenate((nodes, np.empty_like(nodes)))
            code, used = _judge(x, y, half_x, half_y, leaf, scene, sizes, window, cells[cell_count])
            totals[0] += used
            if code == 0 and depth == _DEPTH:
                # Stars on one spot cannot be told apart, and need not be: the determinant is far from zero there.
                _, _, _, closest = _bounds(x, y, 0.0, leaf, scene, sizes)
                code = GAP if closest > _NEAR_STAR * np.hypot(half_x, half_y) else EMPTY
            if code < 0:
                totals[1] += code == GAP
                nodes[node] = code
            elif code == 1:
                nodes[node] = _FIRST - cell_count
                cell_count += 1
            else:
                nodes[node] = node_count
                for side in range(2):
                    wide = half_x >= half_y
                    sign = 2.0 * side - 1.0
                    stack[top, 2], stack[top, 3] = (0.5 * half_x, half_y) if wide else (half_x, 0.5 * half_y)
                    stack[top, 0] = x + sign * 0.5 * half_x if wide else x
                    stack[top, 1] = y if wide else y + sign * 0.5 * half_y
                    stacked[top, 0], stacked[top, 1] = node_count + side, depth + 1
                    top += 1
                node_count += 2
    return nodes[:node_count].copy(), cells[:cell_count].copy()


@kernel
def locate(x, y, scene, first, nodes):
    """Leaf of a point, -1 outside of all, and code of its cell, or the cell's index.

    `first` holds for each leaf its node, -1 for leaves that were not searched.
    """
    leaf = _find(x, y, scene[2], scene[3], scene[4])
    if leaf < 0:
        return leaf, OUTSIDE
    if first[leaf] < 0:
        return leaf, OUTSIDE
    centre, half = scene[1][0], scene[1][1]
    cx, cy, hx, hy = centre[leaf, 0], centre[leaf, 1], half[leaf, 0], half[leaf, 1]
    node = nodes[first[leaf]]
    while node >= 0:
        if hx >= hy:
            side = 1 if x > cx else 0
            hx *= 0.5
            cx += hx if side else -hx
        else:
            side = 1 if y > cy else 0
            hy *= 0.5
            cy += hy if side else -hy
        node = nodes[node + side]
    return leaf, (_FIRST - node if node <= _FIRST else node)
