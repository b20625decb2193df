"""Critical curves followed from cell to cell, with the caustics that they map to.

A step is no longer than the radius of the cell it starts in: it cannot leave the arc of that cell for another one.

References
----------
.. [1] Witt H. J., 1990, A&A 236, 311
"""

from __future__ import annotations

import numpy as np

from crossing.shooting.caustics.critical import EMPTY, GAP, OUTSIDE, RADIUS, lens_state, locate, slopes
from crossing.shooting.compiled import kernel

__all__ = ["CLOSED", "COLUMNS", "CUSP", "ENDED", "LEFT", "LOST", "MET", "walk"]

COLUMNS = 6
"""Numbers of a vertex: x, y, u, v, whether it is a cusp, and whether it lies outside of the window."""
CUSP = 4

CLOSED = 0
"""The curve came back to its start."""
LEFT = 1
"""The curve left for cells that miss the window."""
ENDED = 2
"""The curve came to the edge of the region, of the stars' sheet, or to a cell that was given up."""
MET = 3
"""The curve ran into a cell that is another's."""
LOST = 4
"""The curve could not be followed."""
_GOING = -1

_CORRECTIONS = 8
_EXACT = 1e-10
_MOST_STEPS = 4_000_000
# A curve may leave the window's cells within this many radii of its start, which may lie outside of its own cell.
_FREE = 6.0
# Turning of the curve in a step [rad], which keeps the image plane's polyline smooth too.
_TURN = 0.25
_NOT_A_CUSP = 1e-9


@kernel
def _point(z, leaf, scene):
    """State of the walk at a point, all vectors as complex numbers.

    Source position; D and its gradient; tangent, with smaller D at its left, and its change along the curve; motion of
    the source position along the curve; null vector, up to a sign; cusp function and its change along the curve. That
    function is the cosine of the angle between null vector and gradient.
    """
    trace_z = complex(0.25 * scene[0][2], -0.25 * scene[0][3])
    place, half_trace, shear, shear_z, third = lens_state(z.real, z.imag, leaf, scene)
    det, det_z, det_zz, det_mixed = slopes(half_trace, shear, shear_z, third, trace_z)
    gradient = 2.0 * det_z.conjugate()
    tangent = 1j * gradient / abs(gradient)
    turned = 2.0 * (det_zz * tangent + det_mixed * tangent.conjugate()).conjugate()
    rate = turned / gradient
    bend = 1j * tangent * rate.imag
    motion = half_trace * tangent + (shear * tangent).conjugate()
    angle = -0.5 * np.angle(shear)
    null = complex(np.cos(angle), np.sin(angle))
    if half_trace > 0.0:
        null = 1j * null
    swing = -0.5 * ((shear_z * tangent + trace_z.conjugate() * tangent.conjugate()) / shear).imag
    direction = gradient / abs(gradient)
    cosine = null * direction.conjugate()
    # Both vectors turn: their angle changes at the difference of the rates.
    slope = -cosine.imag * (swing - rate.imag)
    return place, det, gradient, tangent, bend, motion, null, cosine.real, slope


@kernel
def _correct(z, leaf, scene, first, nodes, length, totals):
    """Move a point along the gradient onto the curve; it, its leaf and cell, its state, and whether that worked."""
    start, cell = z, EMPTY
    inside = scene[1][2]
    sheet = inside[leaf]
    state = _point(z, leaf, scene)
    for _ in range(_CORRECTIONS):
        totals[0] += 1
        shift = -state[1] * state[2] / abs(state[2]) ** 2
        size = abs(shift)
        if not size < length:
            return z, leaf, cell, state, False
        z += shift
        leaf, cell = locate(z.real, z.imag, scene, first, nodes)
        if leaf < 0:
            return z, leaf, cell, state, False
        if inside[leaf] != sheet or abs(z - start) > length:
            return z, -1, cell, state, False
        state = _point(z, leaf, scene)
        if size < _EXACT * length or size < 1e-15 * abs(z):
            return z, leaf, cell, state, True
    return z, leaf, cell, state, size < 1e-5 * length


@kernel
def _put(rows, count, z, state, cusp, window):
    if count == len(rows):
        rows = np.concatenate((rows, np.empty_like(rows)))
    place = state[0]
    rows[count, 0], rows[count, 1], rows[count, 2], rows[count, 3] = z.real, z.imag, place.real, place.imag
    rows[count, 4] = cusp
    rows[count, 5] = abs(place.real - window[0]) > window[2] or abs(place.imag - window[1]) > window[3]
    return rows, count + 1


@kernel
def _sag(one, two, step):
    """Largest distance of the caustic from its chord between two states."""
    chord = two[0] - one[0]
    size = abs(chord)
    if size == 0.0:
        return 0.25 * step * max(abs(one[5]), abs(two[5]))
    across = chord.conjugate() / size
    return 0.25 * step * max(abs((one[5] * across).imag), abs((two[5] * across).imag))


@kernel
def _hidden_cusps(one, two, step):
    """Whether the cusp function, of one sign at both ends of a step, comes close to zero between them."""
    a, b = one[7], two[7]
    a1, b1 = one[8] * step, two[8] * step
    if (one[6] * two[6].conjugate()).real < 0.0:
        b, b1 = -b, -b1
    if a < 0.0:
        a, b, a1, b1 = -a, -b, -a1, -b1
    if a1 >= 0.0 or b1 <= 0.0:
        return False
    for part in range(1, 8):
        s = part / 8.0
        t = 1.0 - s
        value = t * t * ((1.0 + 2.0 * s) * a + s * a1) + s * s * ((3.0 - 2.0 * s) * b - t * b1)
        if value < 0.3 * min(a, b):
            return True
    return False


@kernel
def _cusp_between(one, two):
    """Whether the null vector becomes tangent once between two states."""
    if abs(one[7]) < _NOT_A_CUSP and abs(two[7]) < _NOT_A_CUSP:
        return False
    sign = 1.0 if (one[6] * two[6].conjugate()).real >= 0.0 else -1.0
    return one[7] * two[7] * sign < 0.0


@kernel
def _find_cusp(z, leaf, state, step, direction, scene, first, nodes, totals):
    """Point of the curve, between `z` and one step ahead, where the null vector is tangent."""
    low, high, low_value = 0.0, step, state[7]
    at, best, best_state, good = 0.5 * step, z, state, False
    for _ in range(60):
        guess = z + direction * at * state[3] + 0.5 * at * at * state[4]
        found, _, _, there, fine = _correct(guess, leaf, scene, first, nodes, step, totals)
        if not fine:
            return best, best_state, good
        best, best_state, good = found, there, True
        value = there[7] if (there[6] * state[6].conjugate()).real >= 0.0 else -there[7]
        if value * low_value > 0.0:
            low, low_value = at, value
        else:
            high = at
        if abs(value) < 1e-12 or high - low < 1e-13 * step:
            break
        slope = there[8] if (there[6] * state[6].conjugate()).real >= 0.0 else -there[8]
        at -= direction * value / slope
        if not low < at < high:
            at = 0.5 * (low + high)
    return best, best_state, good


@kernel
def _passes(start, z, ahead):
    """Whether a step from `z` passes over the start; so near to a single step, it is on the same arc."""
    move, to = ahead - z, start - z
    along = (to * move.conjugate()).real
    length = abs(move)
    return 0.0 < along <= length * length and abs((to * move.conjugate()).imag) < 0.1 * length * length


@kernel
def walk(index, direction, scene, first, nodes, cells, owner, window, accuracy, totals):
    """Follow a critical curve from the arc of a cell, one way.

    Parameters
    ----------
    index : int
        Cell, whose owner the curve is.
    direction : float
        1 or -1: with smaller determinants at the left or at the right.
    scene : tuple
        See `crossing.shooting.caustics.critical.lens_state`.
    first, nodes, cells : ndarray
        Cells, see `crossing.shooting.caustics.critical.find_cells`; node of each leaf.
    owner : (c,) ndarray of int
        Curve of each cell, -1 without one; filled.
    window : (4,) ndarray
        Centre and half sizes of the window.
    accuracy : float
        Largest distance of the caustic from its polyline.
    totals : ndarray
        Added to.

    Returns
    -------
    rows : (n, COLUMNS) ndarray
        Vertices; the first is the cell's own point.
    status : int
        Why the curve ends.
    """
    rows, count, name = np.empty((256, COLUMNS)), 0, owner[index]
    reach = cells[index, RADIUS]
    start = complex(cells[index, RADIUS + 1], cells[index, RADIUS + 2])
    leaf, cell = locate(start.real, start.imag, scene, first, nodes)
    if leaf < 0:
        return rows[:0], ENDED
    z, leaf, cell, state, good = _correct(start, leaf, scene, first, nodes, 0.1 * reach, totals)
    if not good:
        return rows[:0], ENDED
    rows, count = _put(rows, 0, z, state, 0.0, window)
    start, travelled, radius, step, free = z, 0.0, reach, 0.5 * reach, _FREE * reach
    for number in range(_MOST_STEPS):
        if cell >= 0:
            radius = cells[cell, RADIUS]
            if owner[cell] < 0:
                owner[cell] = name
            elif owner[cell] != name:
                return rows[:count], MET
        elif cell == GAP:
            return rows[:count], ENDED
        elif cell == OUTSIDE and travelled > free:
            return rows[:count], LEFT
        smallest, step = 1e-6 * radius, min(step, radius)
        at, at_edge = z, False
        while True:
            if step < smallest:
                return rows[:count], ENDED if at_edge else LOST
            guess = z + direction * step * state[3] + 0.5 * step * step * state[4]
            new_leaf, _ = locate(guess.real, guess.imag, scene, first, nodes)
            if new_leaf < 0 or scene[1][2][new_leaf] != scene[1][2][leaf]:
                at_edge, step = True, 0.5 * step
                continue
            ahead, new_leaf, new_cell, there, good = _correct(guess, new_leaf, scene, first, nodes, 0.3 * step, totals)
            if not good:
                at_edge, step = new_leaf < 0, 0.5 * step
                continue
            turn, sag = abs(there[3] - state[3]), _sag(state, there, step)
            cusp = _cusp_between(state, there)
            if turn > 2.0 * _TURN or (not cusp and (sag > accuracy or _hidden_cusps(state, there, direction * step))):
                step *= 0.5
                continue
            break
        if cusp:
            at, there_too, good = _find_cusp(z, leaf, state, step, direction, scene, first, nodes, totals)
            if good:
                sag = max(_sag(state, there_too, abs(at - z)), _sag(there_too, there, abs(ahead - at)))
                if sag > accuracy and step > 1e-3 * radius:
                    step *= 0.5
                    continue
                rows, count = _put(rows, count, at, there_too, 1.0, window)
        if number > 2 and _passes(start, z, ahead):
            if rows[count - 1, CUSP] > 0.0 and abs(at - z) > abs(start - z):
                count -= 1
            rows, count = _put(rows, count, start, state, 0.0, window)
            rows[count - 1] = rows[0]
            return rows[:count], CLOSED
        rows, count = _put(rows, count, ahead, there, 0.0, window)
        travelled += step
        grow = min(np.sqrt(0.7 * accuracy / max(sag, 1e-300)), _TURN / max(turn, 1e-300), 4.0)
        z, leaf, cell, state = ahead, new_leaf, new_cell, there
        step *= min(max(0.9 * grow, 0.5), 2.0)
    return rows[:count], LOST
