"""Images of a straight line of the source plane, followed from star to star.

Along a line, p runs with the track and w is the distance from it. The images of the line w = h are curves of the image
plane. Between folds w is harmonic but for the stars, where it has poles: an image curve can neither close on itself nor
end but at a star or at infinity, and one begins at every star. All images are therefore on the curves that begin at the
stars, and on those that come in from outside. Nothing is singular on them: where p turns, the line crosses a caustic.

The parameter t of a curve z(t) has ``dz/dt = 1/G``, ``G = w_y + i w_x``, so that ``dp/dt = det / |G|^2``, and the image
area per unit w that lies between two points is the integral of ``1/|G|^2``.

References
----------
.. [1] Witt H. J., 1993, ApJ 403, 530
.. [2] Lewis G. F., Miralda-Escude J., Richardson D. C. & Wambsganss J., 1993, MNRAS 261, 647
"""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel
from crossing.shooting.tracks.turns import stop_at, turning_share
from crossing.shooting.tree import RATIO, _find

__all__ = ["COLUMNS", "EXITED", "LOST", "clearance", "follow", "leaf_at", "line_state", "outside", "quadrature"]

COLUMNS = 10
"""Numbers of a node: step to the next node; p and its three derivatives; three derivatives of the area; whether p turns
here, and then the caustic's slope dp/dw."""
EXITED = -1
"""A curve left the region."""
LOST = -2
"""A curve could not be followed."""
_GOING = -3

_STEP, _P, _AREA, _TURN = 0, 1, 5, 8
_MOST_CORRECTIONS = 6
# Shifts below this share of the lengths over which the map bends are made by its derivatives.
_CLOSE = 4e-3
_SMALLEST = 1e-12
_AT_THE_SEAM = 1e-11
_MOST_STEPS = 1_000_000
_MOST_TRIES = 40


@kernel
def line_state(x, y, leaf, scene, line):
    """Lens map at a point, along and across a line.

    Parameters
    ----------
    x, y : float
        Point of the image plane.
    leaf : int
        Leaf of the tree whose series is used; the point is in it or just beyond its edge.
    scene : tuple
        Lens numbers, arrays of the tree, its roots, their nodes, its children, and the stars.
    line : (4,) ndarray
        Cosine and sine of the line's direction, and a point (u, v) on it.

    Returns
    -------
    tuple
        The leaf; p, w; G, H = dG/dz, dH/dz; P = p_x - i p_y, Q = dP/dz, dQ/dz.
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
    u = (lens[0] + sheet) * x + 0.5 * gx * x * x + gy * x * y - value.real - line[2]
    v = (lens[1] + sheet) * y + 0.5 * gy * x * x + value.imag - line[3]
    u_x = lens[0] + sheet + gx * x + gy * y - first.real
    u_y = gy * x + first.imag
    v_y = lens[1] + sheet + first.real
    a, b = line[0], line[1]
    big_g = complex(-b * u_y + a * v_y, -b * u_x + a * u_y)
    big_p = complex(a * u_x + b * u_y, -(a * u_y + b * v_y))
    turned, along = complex(a, b), complex(a, b)
    big_h = turned * second + complex(-b * gy, 0.5 * (a * gy - b * gx))
    big_q = -along * second + complex(0.5 * (a * gx + b * gy), -a * gy)
    return leaf, a * u + b * v, a * v - b * u, big_g, big_h, turned * third, big_p, big_q, -along * third


@kernel
def leaf_at(z, scene):
    """Leaf of the tree that holds a point, -1 outside."""
    return _find(z.real, z.imag, scene[2], scene[3], scene[4])


@kernel
def quadrature(step, first_a, first_b, second_a, second_b, third_a, third_b):
    """Integral over a step of a function known by its value and two derivatives at both ends; error of order 7."""
    return step * (
        0.5 * (first_a + first_b) + step * (0.1 * (second_a - second_b) + step / 120.0 * (third_a + third_b))
    )


@kernel
def _derivatives(big_g, big_h, big_h1, bend):
    """First three derivatives of z along the curve; `bend` is the Laplacian of w."""
    z1 = 1.0 / big_g
    g1 = big_h * z1 + 0.5j * bend * z1.conjugate()
    z2 = -g1 * z1 * z1
    g2 = big_h1 * z1 * z1 + big_h * z2 + 0.5j * bend * z2.conjugate()
    z3 = (-g2 + 2.0 * g1 * g1 * z1) * z1 * z1
    return z1, z2, z3


@kernel
def _node(row, p, z1, z2, z3, big_p, big_q, big_q1, bend):
    """Fill a node's p, area and their derivatives; `bend` is the Laplacian of p."""
    p1 = big_q * z1 + 0.5 * bend * z1.conjugate()
    p2 = big_q1 * z1 * z1 + big_q * z2 + 0.5 * bend * z2.conjugate()
    row[_P] = p
    row[_P + 1] = (big_p * z1).real
    row[_P + 2] = (p1 * z1 + big_p * z2).real
    row[_P + 3] = (p2 * z1 + 2.0 * p1 * z2 + big_p * z3).real
    row[_AREA] = (z1 * z1.conjugate()).real
    row[_AREA + 1] = 2.0 * (z1.conjugate() * z2).real
    row[_AREA + 2] = 2.0 * (z1.conjugate() * z3).real + 2.0 * (z2 * z2.conjugate()).real
    row[_TURN] = row[_TURN + 1] = 0.0


@kernel
def _correct(z, leaf, h, scene, line, bends, length):
    """Move a point across the curve until it is on w = h; evaluations, state and shift from the first point.

    One leaf's series serves all evaluations: between leaves the map jumps by its error, and there would be no point.
    The last shift is small enough for the derivatives to give the state behind it.
    """
    first, scale = z, abs(line[2]) + abs(line[3]) + abs(h) + abs(z)
    for count in range(1, _MOST_CORRECTIONS + 1):
        state = line_state(z.real, z.imag, leaf, scene, line)
        shift = 1j * (h - state[2]) / state[3]
        size = abs(shift)
        if not size < 2.0 * length:
            return count, z, state, 0.0, False
        bend = max(size * abs(state[4]), size * np.sqrt(abs(state[5] * state[3])))
        # Where w is flat, rounding is all that is left.
        if (size < _CLOSE * length and bend < _CLOSE * abs(state[3])) or (
            size < 1e-15 * abs(z) or abs(h - state[2]) < 1e-15 * scale
        ):
            left = 0.5 * (state[4] * shift * shift).imag + 0.25 * bends[0] * size * size
            shift -= 1j * left / state[3]
            return count, z + shift, _moved(state, shift, bends), abs(z + shift - first), True
        z += shift
    return _MOST_CORRECTIONS, z, state, abs(z - first), False


@kernel
def _moved(state, shift, bends):
    """State of the map a small shift away, by its derivatives there."""
    leaf, p, w, big_g, big_h, big_h1, big_p, big_q, big_q1 = state
    square, size = 0.5 * shift * shift, 0.25 * abs(shift) ** 2
    return (
        leaf,
        p + (big_p * shift + big_q * square).real + bends[1] * size,
        w + (big_g * shift + big_h * square).imag + bends[0] * size,
        big_g + big_h * shift + big_h1 * square + 0.5j * bends[0] * shift.conjugate(),
        big_h + big_h1 * shift,
        big_h1,
        big_p + big_q * shift + big_q1 * square + 0.5 * bends[1] * shift.conjugate(),
        big_q + big_q1 * shift,
        big_q1,
    )


@kernel
def _true_step(guess, ahead, a1, b1, a2, b2, a3, b3):
    """Step of the parameter between two points whose difference is `ahead`, from the derivatives at both."""
    towards = (a1 + b1).conjugate()
    step = guess
    for _ in range(4):
        miss = (towards * (ahead - quadrature(step, a1, b1, a2, b2, a3, b3))).real
        slope = (towards * (0.5 * (a1 + b1) + 0.2 * step * (a2 - b2) + step * step / 40.0 * (a3 + b3))).real
        if slope == 0.0:
            return np.nan
        step += miss / slope
    return step


@kernel
def _set_fold(row, state):
    """Make a node that of a fold, where the gradients of p and w are parallel: their ratio is the caustic's slope."""
    row[_P + 1] = 0.0
    row[_TURN] = 1.0
    row[_TURN + 1] = (1j * state[6] / state[3]).real


@kernel
def _to_fold(z, leaf, h, scene, line, bends, row, length):
    """Point of the curve, near z, where p turns; fills the node."""
    count = 0
    for _ in range(8):
        used, z, state, _, good = _correct(z, leaf, h, scene, line, bends, length)
        count += used
        if not good:
            return count, z, state, False
        z1, z2, z3 = _derivatives(state[3], state[4], state[5], bends[0])
        _node(row, state[1], z1, z2, z3, state[6], state[7], state[8], bends[1])
        if row[_P + 2] == 0.0:
            return count, z, state, False
        step = -row[_P + 1] / row[_P + 2]
        if abs(step * z1) < 1e-9 * length:
            _set_fold(row, state)
            return count, z, state, True
        limit = 0.5 * length / abs(z1)
        step = min(max(step, -limit), limit)
        z += step * (z1 + 0.5 * step * z2)
    return count, z, state, False


@kernel
def outside(z, box):
    """Whether a point is beyond the edges of a box, by more than rounding."""
    slack = 1e-11 * (1.0 + abs(z))
    x, y = z.real, z.imag
    return x < box[0] - slack or x > box[1] + slack or y < box[2] - slack or y > box[3] + slack


@kernel
def _dips(low, high, here, speed_here, there, speed_there):
    """Whether a coordinate that turns within a step, between its values and slopes at both ends, leaves an interval."""
    if speed_here * speed_there >= 0.0:
        return False
    # The cubic's slope is zero at the share t, taken from the root that does not cancel.
    c2, c3 = 3.0 * (there - here) - 2.0 * speed_here - speed_there, 2.0 * (here - there) + speed_here + speed_there
    root = np.sqrt(max(c2 * c2 - 3.0 * c3 * speed_here, 0.0))
    t = -speed_here / (c2 + (root if speed_here < 0.0 else -root))
    furthest = here + t * (speed_here + t * (c2 + t * c3))
    return furthest < low or furthest > high


@kernel
def _leaves_between(z, a1, ahead, b1, step, box):
    """Whether a curve leaves a box and is back within a step: its other end would be met twice."""
    return _dips(box[0], box[1], z.real, step * a1.real, ahead.real, step * b1.real) or _dips(
        box[2], box[3], z.imag, step * a1.imag, ahead.imag, step * b1.imag
    )


@kernel
def _ending(z, p, slope, scene, leaf, ends, p_low, box):
    """Star of the box at whose pole the curve has all but ended, or `_GOING`."""
    near_start, near = scene[1][5], scene[1][6]
    star_x, star_y, star_mass = scene[5]
    if slope >= 0.0:
        return _GOING
    for slot in range(near_start[leaf], near_start[leaf + 1]):
        star = near[slot]
        place = complex(star_x[star], star_y[star])
        behind = ends[star, 0] - p
        if star_mass[star] < abs(z - place) * ends[star, 3] or behind < ends[star, 3] or outside(place, box):
            continue
        if p < p_low or behind > ends[star, 2]:
            return star
    return _GOING


@kernel
def clearance(z, scene, leaf):
    """Distance within which there is no star."""
    centre, half, _, _, _, near_start, near = scene[1]
    star_x, star_y, _ = scene[5]
    radius = np.sqrt(half[leaf, 0] ** 2 + half[leaf, 1] ** 2)
    nearest = RATIO * radius - abs(z - complex(centre[leaf, 0], centre[leaf, 1]))
    for slot in range(near_start[leaf], near_start[leaf + 1]):
        star = near[slot]
        nearest = min(nearest, abs(z - complex(star_x[star], star_y[star])))
    return nearest


@kernel
def _furthest_edge(z, box):
    """Edge of a box that a point is furthest beyond."""
    return np.argmax(np.array([box[0] - z.real, z.real - box[1], box[2] - z.imag, z.imag - box[3]]))


@kernel
def _land(z, state, leaf, h, scene, line, bends, box, length):
    """Move a point of the curve beyond the edges of a box back along the curve onto the edge."""
    edge = _furthest_edge(z, box)
    count, moved = 0, 0.0
    for _ in range(12):
        z1, z2, _ = _derivatives(state[3], state[4], state[5], bends[0])
        gap, speed = (box[edge] - z.real, z1.real) if edge < 2 else (box[edge] - z.imag, z1.imag)
        if abs(gap) <= 1e-12 * (1.0 + abs(z)):
            if not outside(z, box):
                return count, z, state, moved, True
            # It came over another edge before, next to a corner.
            edge = _furthest_edge(z, box)
            continue
        if abs(gap) > length * abs(speed) / abs(z1) * 4.0:
            break
        step = gap / speed
        moved += step
        used, z, state, _, good = _correct(z + step * (z1 + 0.5 * step * z2), leaf, h, scene, line, bends, length)
        count += used
        if not good:
            break
    return count, z, state, moved, False


@kernel
def _arrive(ahead, state, leaf, h, scene, line, bends, box, length, allowed):
    """Put a predicted point on the curve; or, if the curve leaves the box before, the point where it does."""
    if leaf < 0:
        return 0, ahead, state, 0.0, False, False
    used, ahead, state, miss, good = _correct(ahead, leaf, h, scene, line, bends, length)
    if not (good and miss < allowed * length and outside(ahead, box)):
        return used, ahead, state, 0.0, False, good and miss < allowed * length
    more, ahead, state, moved, good = _land(ahead, state, leaf, h, scene, line, bends, box, length)
    # Further on is where it comes back.
    return used + more, ahead, state, moved, True, good and moved <= 0.0


@kernel
def _reach(z, scene, leaf, a1, a2, a3):
    """Step at which the curve's series stops converging, about."""
    reach = min(2.0 * abs(a1) / max(abs(a2), 1e-300), np.sqrt(6.0 * abs(a1) / max(abs(a3), 1e-300)))
    return min(reach, 2.0 * clearance(z, scene, leaf) / abs(a1))


@kernel
def _longest(step, reach, pace, a1, a4):
    """Longest next step: by the reach, the step before, and the fourth derivative as it was there."""
    return min(pace * reach, 2.0 * step, (4.0 * pace * abs(a1) / max(abs(a4), 1e-300)) ** (1.0 / 3.0))


@kernel
def follow(z, length, h, scene, line, bends, ends, limits, box, pace, nodes, count, room):
    """Follow one curve in the direction of rising t, to a star or to the edge of a box.

    Parameters
    ----------
    z : complex
        Start, close to the curve.
    length : float
        How close.
    h : float
        The curve is w = h.
    scene, line
        See `line_state`.
    bends : (2,) ndarray
        Laplacian of w and of p: what the gradient adds.
    ends : (n, 4) ndarray
        Of each star: p and w of the point that it covers; abs(p) from there beyond which its image is left to a closed
        form; deflection beyond which its pole rules.
    limits : (2,) ndarray
        Range of p in which nodes are kept.
    box : (4,) ndarray
        x_low, x_high, y_low, y_high.
    pace : float
        Step as a share of the distance at which the curve's series stops converging.
    nodes : (k, COLUMNS) ndarray
        Nodes are written from row `count`; a step of zero ends a run.
    count, room : int
        Rows taken, and rows that may be.

    Returns
    -------
    count : int
        Rows taken; at `room` the rest was not kept.
    end : int
        Star where the curve ended, `EXITED` or `LOST`.
    z : complex
        Where that was.
    evaluations : int
        Evaluations of the lens map.
    """
    here, there, fold = np.zeros(COLUMNS), np.zeros(COLUMNS), np.zeros(COLUMNS)
    leaf = leaf_at(z, scene)
    if leaf < 0:
        return count, LOST, z, 0
    total, z, state, _, good = _correct(z, leaf, h, scene, line, bends, length)
    if not good or outside(z, box):  # of a star next to the edge
        return count, EXITED if good else LOST, z, total
    a1, a2, a3 = _derivatives(state[3], state[4], state[5], bends[0])
    _node(here, state[1], a1, a2, a3, state[6], state[7], state[8], bends[1])
    g_here = state[3]
    step, reach, beside, running, tries, a4 = np.inf, 0.0, False, False, 0, 0j
    end = _ending(z, here[_P], here[_P + 1], scene, leaf, ends, limits[0], box)
    for _ in range(_MOST_STEPS):
        if end != _GOING:
            break
        if tries == 0:
            beside = here[_P] < limits[0] or here[_P] > limits[1]
            reach = _reach(z, scene, leaf, a1, a2, a3)
            step = _longest(step, (1.5 if beside else 1.0) * reach, pace, a1, a4)
        length = abs(a1) * step
        if tries > _MOST_TRIES or not length > _SMALLEST * (abs(z) + 1e-3):
            return count, LOST, z, total
        tries += 1
        ahead = z + step * (a1 + step * (0.5 * a2 + step / 6.0 * (a3 + 0.25 * step * a4)))
        leaf_ahead = leaf_at(ahead, scene)
        used, ahead, state, moved, leaving, good = _arrive(
            ahead, state, leaf_ahead, h, scene, line, bends, box, length, 0.1 * pace
        )
        total, guess = total + used, step + moved
        if not good or (state[3] * g_here.conjugate()).real < 0.5 * abs(state[3]) * abs(g_here):
            step *= 0.5
            continue
        b1, b2, b3 = _derivatives(state[3], state[4], state[5], bends[0])
        seam = length <= _AT_THE_SEAM * (1.0 + abs(z))
        if not seam and not leaving and _leaves_between(z, a1, ahead, b1, step, box):
            step *= 0.5
            continue
        true = _true_step(guess, ahead - z, a1, b1, a2, b2, a3, b3)
        _node(there, state[1], b1, b2, b3, state[6], state[7], state[8], bends[1])
        if not (abs(true - guess) < 0.1 * pace * guess and abs(b3 - a3) * true**3 < 4.8 * pace * length):
            step *= 0.5
            continue
        share = stop_at(here, there, true)
        if share < 1.0 and not seam:
            # Too close to an end it would be met again.
            step = share * true if 0.02 < share < 0.98 else 0.5 * step
            continue
        if beside and step > pace * reach and _touches(here, there, limits):
            step = pace * reach
            continue
        if here[_P + 1] * there[_P + 1] < 0.0:
            share = turning_share(here, there, true)
            middle = z + share * true * (a1 + share * true * (0.5 * a2 + share * true / 6.0 * a3))
            used, middle, state_f, good = _to_fold(middle, leaf, h, scene, line, bends, fold, length)
            total += used
            c1, c2, c3 = _derivatives(state_f[3], state_f[4], state_f[5], bends[0])
            before = _true_step(share * true, middle - z, a1, c1, a2, c2, a3, c3)
            after = _true_step((1.0 - share) * true, ahead - middle, c1, b1, c2, b2, c3, b3)
            if good and 0.0 < before < true and 0.0 < after < true:
                count, running = _keep(nodes, count, room, here, fold, before, limits, running)
                count, running = _keep(nodes, count, room, fold, there, after, limits, running)
            elif not seam:
                step *= 0.5
                continue
            else:
                # The fold is in the jump between two leaves.
                _set_fold(there, state)
                count, running = _keep(nodes, count, room, here, there, true, limits, running)
        else:
            count, running = _keep(nodes, count, room, here, there, true, limits, running)
        here[:] = there
        a4, a3, g_here, tries = (b3 - a3) / true, b3, state[3], 0
        z, a1, a2, leaf, step = ahead, b1, b2, leaf_ahead, true
        end = EXITED if leaving else _ending(z, here[_P], here[_P + 1], scene, leaf, ends, limits[0], box)
    if running and count < room:
        nodes[count] = here
        nodes[count, _STEP] = 0.0
        count += 1
    return count, LOST if end == _GOING else end, z, total


@kernel
def _touches(one, two, limits):
    """Whether p is in its range between two nodes."""
    return min(one[_P], two[_P]) <= limits[1] and max(one[_P], two[_P]) >= limits[0]


@kernel
def _keep(nodes, count, room, one, two, step, limits, running):
    """Keep a node whose step ahead touches the range of p; close the run where it does not."""
    touches = _touches(one, two, limits)
    if (touches or running) and count < room:
        nodes[count] = one
        nodes[count, _STEP] = step if touches else 0.0
        count += 1
    return count, touches
