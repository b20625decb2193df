"""Light of a disc from the image curves of chords: the image area between the ends of each chord.

Between two nodes p and the area are polynomials of degree seven in the share of the step, through three derivatives at
both ends. Where a chord ends inside a step, the share is found by Newton's method.
"""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel
from crossing.shooting.tracks.image_curves import quadrature

__all__ = ["RULES", "add_chord", "backgrounds", "panel_rule", "sum_panel"]

RULES = 4
"""Sums over the chords of a panel: the light, and three that tell its error."""

_STEP, _P, _AREA, _TURN = 0, 1, 5, 8

# Kronrod's rule of 15 points and the Gauss rule of 7 that it holds: positive halves, from the middle outwards.
_POINTS = (
    0.0, 0.207784955007898467600689403773245, 0.405845151377397166906606412076961, 0.586087235467691130294144691693020,
    0.741531185599394439863864773280788, 0.864864423359769072789712788640926, 0.949107912342758524526189684047851,
    0.991455371120812639206854697526329,
)  # fmt: skip
_KRONROD = (
    0.209482141084727828012999174891714, 0.204432940075298892414161999234649, 0.190350578064785409913256402421014,
    0.169004726639267902826583426598550, 0.140653259715525918745189590510238, 0.104790010322250183839876322541518,
    0.063092092629978553290700663189204, 0.022935322010529224963732008058970,
)  # fmt: skip
_GAUSS = (
    0.417959183673469387755102040816327, 0.381830050505118944950369775488975, 0.279705391489276667901467771423780,
    0.129484966168869693270611432679082,
)  # fmt: skip

# The area is taken as a polynomial of p where the speeds of p at both ends are in this ratio at least, and where it is
# right to this share; for so few chords it is not worth the while.
_EVEN = 0.3
_DIRECT = 1e-7
_FEW = 2

# Nodes and weights of the substitution share = sin^2(angle / 2), which takes away the square roots at a chord's ends.
_ROOTS, _WEIGHTS = np.polynomial.legendre.leggauss(10)


def _null_rules() -> np.ndarray:
    """Rules (3, 15) on the points of Kronrod's rule that are zero for polynomials of degrees up to 13, 12 and 11.

    The first is Kronrod's rule less Gauss's; all have its norm and are orthogonal, so that a light curve's kink which
    one of them does not see is seen by another (Berntsen & Espelid 1991, ACM TOMS 17, 233).
    """
    positive = np.array(_POINTS)
    gauss = np.zeros(8)
    gauss[::2] = _GAUSS
    even = [np.array(_KRONROD) - gauss]
    # On the positive half, an even rule counts its points twice but for the middle.
    double = np.array([1.0] + 7 * [2.0])
    powers = double * positive ** np.arange(0, 11, 2)[:, None]
    even.append(_orthogonal_to(np.vstack([powers, double * even[0]]), double))
    odd = np.append(0.0, np.linalg.svd(positive[1:] ** np.arange(1, 12, 2)[:, None])[2][-1])
    mirror = np.concatenate([np.arange(7, 0, -1), np.arange(8)])
    side = np.where(np.arange(15) < 7, -1.0, 1.0)
    rules = np.stack([even[0][mirror], side * odd[mirror], even[1][mirror]])
    return np.asarray(rules * (np.linalg.norm(rules[0]) / np.linalg.norm(rules, axis=1))[:, None])


def _orthogonal_to(rows: np.ndarray, scale: np.ndarray) -> np.ndarray:
    """The vector that all rows are orthogonal to; the rows are scaled for better numbers."""
    return np.asarray(np.linalg.svd(rows / np.sqrt(scale))[2][-1] / np.sqrt(scale))


_NULL = _null_rules()


def panel_rule(low: float, high: float) -> tuple[np.ndarray, np.ndarray]:
    """Angles of the chords of a panel, and weights of Kronrod's rule and of three that are zero for smooth light.

    Parameters
    ----------
    low, high : float
        Ends of the panel; the chord at the angle a is at the distance R sin(a) from the disc's centre.

    Returns
    -------
    angles : (15,) ndarray
        Rising.
    weights : (15, RULES) ndarray
        Kronrod's rule, and the null rules, whose largest sum is the error.
    """
    positive = np.array(_POINTS)
    middle, half = 0.5 * (low + high), 0.5 * (high - low)
    angles = middle + half * np.concatenate([-positive[:0:-1], positive])
    kronrod = np.array(_KRONROD)[np.concatenate([np.arange(7, 0, -1), np.arange(8)])]
    return angles, half * np.vstack([kronrod, _NULL]).T


@kernel
def _septic(step, end, a1, a2, a3, b1, b2, b3, out):
    """Polynomial of a piece in the share of its step: three Taylor terms, and four that reach the other end.

    The value is zero at the start and `end` at the end; a and b are the derivatives at both.
    """
    a1, a2, a3 = a1 * step, 0.5 * a2 * step * step, a3 * step * step * step / 6.0
    d0 = end - a1 - a2 - a3
    d1 = b1 * step - a1 - 2.0 * a2 - 3.0 * a3
    d2 = 0.5 * b2 * step * step - a2 - 3.0 * a3
    d3 = b3 * step * step * step / 6.0 - a3
    out[0], out[1], out[2] = a1, a2, a3
    out[3] = d0
    out[4] = d1 - 4.0 * d0
    out[5] = d2 - 4.0 * d1 + 10.0 * d0
    out[6] = d3 - 4.0 * d2 + 10.0 * d1 - 20.0 * d0


@kernel
def _value(c, t):
    x = t - 1.0
    return t * (c[0] + t * (c[1] + t * (c[2] + t * (c[3] + x * (c[4] + x * (c[5] + x * c[6]))))))


@kernel
def _slope(c, t):
    x = t - 1.0
    tail = c[3] + x * (c[4] + x * (c[5] + x * c[6]))
    tail1 = c[4] + x * (2.0 * c[5] + x * 3.0 * c[6])
    return c[0] + t * (2.0 * c[1] + t * (3.0 * c[2] + t * (4.0 * tail + t * tail1)))


@kernel
def _share(c, wanted, guess):
    """Share at which the polynomial, monotonic from 0 to its end, has the wanted value; and its slope there."""
    c0, c1, c2, c3, c4, c5, c6 = c[0], c[1], c[2], c[3], c[4], c[5], c[6]
    rising = c0 + c1 + c2 + c3 > 0.0
    low, high, t = 0.0, 1.0, min(max(guess, 0.0), 1.0)
    slope = 0.0
    for _ in range(60):
        x = t - 1.0
        tail = c3 + x * (c4 + x * (c5 + x * c6))
        tail1 = c4 + x * (2.0 * c5 + x * 3.0 * c6)
        miss = t * (c0 + t * (c1 + t * (c2 + t * tail))) - wanted
        slope = c0 + t * (2.0 * c1 + t * (3.0 * c2 + t * (4.0 * tail + t * tail1)))
        if (miss < 0.0) == rising:
            low = t
        else:
            high = t
        new = t - miss / slope
        if not low <= new <= high:
            new = 0.5 * (low + high)
        # What is left after a step goes with its square, over the distance of a turning point at an end.
        if abs(new - t) <= 1e-6 * min(new, 1.0 - new) or high - low < 1e-14:
            return new, slope
        t = new
    return t, slope


@kernel
def _rounded(p, area, low, high, offset, half):
    """Area between two shares, weighted with sqrt(half^2 - distance^2) from the chord's middle."""
    total = 0.0
    for k in range(len(_ROOTS)):
        angle = 0.5 * np.pi * (1.0 + _ROOTS[k])
        t = low + (high - low) * np.sin(0.5 * angle) ** 2
        distance = _value(p, t) - offset
        weight = 0.25 * np.pi * _WEIGHTS[k] * (high - low) * np.sin(angle)
        total += weight * _slope(area, t) * np.sqrt(max(half * half - distance * distance, 0.0))
    return abs(total)


@kernel
def _polynomials(one, two, p, area):
    """p and the area as polynomials of the share of a step."""
    step = one[_STEP]
    whole = quadrature(step, one[_AREA], two[_AREA], one[_AREA + 1], two[_AREA + 1], one[_AREA + 2], two[_AREA + 2])
    _septic(step, two[_P] - one[_P], one[_P + 1], one[_P + 2], one[_P + 3], two[_P + 1], two[_P + 2], two[_P + 3], p)
    _septic(step, whole, one[_AREA], one[_AREA + 1], one[_AREA + 2], two[_AREA], two[_AREA + 1], two[_AREA + 2], area)


@kernel
def _area_along(one, two, p, area, out):
    """The area as a polynomial of p itself, if it is one: where p runs evenly enough. Returns whether."""
    a, b = one[_P + 1], two[_P + 1]
    if a * b <= 0.0 or not _EVEN < a / b < 1.0 / _EVEN:
        return False
    a1, b1 = one[_AREA] / a, two[_AREA] / b
    a2, b2 = (one[_AREA + 1] - a1 * one[_P + 2]) / (a * a), (two[_AREA + 1] - b1 * two[_P + 2]) / (b * b)
    a3 = (one[_AREA + 2] - 3.0 * a2 * a * one[_P + 2] - a1 * one[_P + 3]) / (a * a * a)
    b3 = (two[_AREA + 2] - 3.0 * b2 * b * two[_P + 2] - b1 * two[_P + 3]) / (b * b * b)
    whole, length = _value(area, 1.0), two[_P] - one[_P]
    _septic(length, whole, a1, a2, a3, b1, b2, b3, out)
    for t in (0.25, 0.5, 0.75):
        if abs(_value(out, _value(p, t) / length) - _value(area, t)) > _DIRECT * abs(whole):
            return False
    return True


@kernel
def _add_inside(along, begin, length, position, half, weight, out, first, last):
    """Add chords that lie wholly inside a piece, by the area as a polynomial of p."""
    c0, c1, c2, c3, c4, c5, c6 = along[0], along[1], along[2], along[3], along[4], along[5], along[6]
    inverse = 1.0 / length
    for j in range(first, last):
        t = (position[j] + half - begin) * inverse
        x = t - 1.0
        high = t * (c0 + t * (c1 + t * (c2 + t * (c3 + x * (c4 + x * (c5 + x * c6))))))
        t = (position[j] - half - begin) * inverse
        x = t - 1.0
        low = t * (c0 + t * (c1 + t * (c2 + t * (c3 + x * (c4 + x * (c5 + x * c6))))))
        part = abs(high - low)
        for rule in range(RULES):
            out[j, rule] += weight[rule] * part


@kernel
def _add_ends(one, p, area, rising, position, half, darkened, weight, rounded_weight, out, rounded_out, first, last):
    """Add chords of which a piece may hold a part, by the shares of its step at their ends."""
    low, high = (one[_P], one[_P] + _value(p, 1.0)) if rising else (one[_P] + _value(p, 1.0), one[_P])
    guess_low, guess_high, low_slope, high_slope = 0.5, 0.5, np.inf, np.inf
    for j in range(first, last):
        begin, end = position[j] - half, position[j] + half
        t_low, t_high = (0.0, 1.0) if rising else (1.0, 0.0)
        moved = position[j] - position[max(j - 1, first)]
        if begin > low:
            guess_low, low_slope = _share(p, begin - one[_P], guess_low + moved / low_slope)
            t_low = guess_low
        if end < high:
            guess_high, high_slope = _share(p, end - one[_P], guess_high + moved / high_slope)
            t_high = guess_high
        part = abs(_value(area, t_high) - _value(area, t_low))
        for rule in range(RULES):
            out[j, rule] += weight[rule] * part
        if darkened:
            part = _rounded(p, area, t_low, t_high, position[j] - one[_P], half)
            rounded_out[j] += rounded_weight * part


@kernel
def add_chord(nodes, start, stop, position, half, darkened, weight, rounded_weight, out, rounded_out):
    """Add the image area of one chord, at many positions of the disc, from some nodes.

    Parameters
    ----------
    nodes : (n, COLUMNS) ndarray
        Of `trace_curves`.
    start, stop : int
        Which rows.
    position : (m,) ndarray
        Where the disc's centre is, rising.
    half : float
        Half the length of the chord.
    darkened : bool
        Whether `rounded_out` is wanted.
    weight : (RULES,) ndarray
        Factors of the area.
    rounded_weight : float
        Factor of the area weighted with ``sqrt(half^2 - distance^2)``.
    out, rounded_out : (m, RULES) and (m,) ndarray
        Added to.
    """
    p, area, along = np.empty(7), np.empty(7), np.empty(7)
    for i in range(start, stop):
        if nodes[i, _STEP] == 0.0:
            continue
        one, two = nodes[i], nodes[i + 1]
        low, high = min(one[_P], two[_P]), max(one[_P], two[_P])
        first = np.searchsorted(position, low - half)
        last = np.searchsorted(position, high + half)
        if first == last or low == high:
            continue
        _polynomials(one, two, p, area)
        rising = two[_P] > one[_P]
        begin, end = first, first
        if last - first > _FEW and not darkened and _area_along(one, two, p, area, along):
            begin = max(first, np.searchsorted(position, low + half))
            end = max(begin, np.searchsorted(position, high - half))
            _add_inside(along, one[_P], two[_P] - one[_P], position, half, weight, out, begin, end)
        for low_row, high_row in ((first, begin), (end, last)):
            _add_ends(one, p, area, rising, position, half, darkened, weight, rounded_weight, out, rounded_out, low_row,
                high_row)  # fmt: skip


@kernel
def _mark_restless(nodes, start, stop, position, radius, limit, restless):
    """Mark positions of the disc at which the density of some piece is not the same all over the disc.

    The mean over a disc differs from the value in the middle by an eighth of the square of its radius, times the second
    derivative along the track and as much across. Where a curve enters or leaves the box within the disc, it may be in
    this box on some chords and in the next on others: there both must be summed in the same way.
    """
    p, area, along = np.empty(7), np.empty(7), np.empty(7)
    for i in range(start, stop):
        one = nodes[i]
        if one[_STEP] == 0.0 or i == start or nodes[i - 1, _STEP] == 0.0:
            restless[np.searchsorted(position, one[_P] - radius) : np.searchsorted(position, one[_P] + radius)] = True
        if one[_STEP] == 0.0:
            continue
        two = nodes[i + 1]
        low, high = min(one[_P], two[_P]), max(one[_P], two[_P])
        first, last = np.searchsorted(position, low - radius), np.searchsorted(position, high + radius)
        if first == last:
            continue
        _polynomials(one, two, p, area)
        calm = _area_along(one, two, p, area, along)
        if calm:
            length = two[_P] - one[_P]
            bend = 6.0 * max(abs(along[2]), abs(_third(along))) / abs(length) ** 3
            density = min(one[_AREA] / abs(one[_P + 1]), two[_AREA] / abs(two[_P + 1]))
            calm = bend * radius * radius / 8.0 < limit * density
        if not calm:
            restless[first:last] = True


@kernel
def _third(c):
    """A sixth of the third derivative of a polynomial of `_septic` at its end."""
    return c[2] + 4.0 * c[3] + 6.0 * c[4] + 4.0 * c[5] + c[6]


@kernel
def _add_calm(nodes, start, stop, position, half, weight, radius, limit, restless, darkened, out, rounded_out):
    """Add a box by its middle chord, where that stands for all of the disc; where it does not, mark the position.

    The outermost chords must agree, too: a curve may be out of the box on some chords and in on others.
    """
    calm = np.flatnonzero(~restless)
    if len(calm) == 0:
        return
    place, middle, unused = position[calm], len(half) // 2, np.zeros(0)
    density = np.zeros((3, len(calm), RULES))
    chords = (0, middle, len(half) - 1)
    for i in range(3):
        k = chords[i]
        single = np.zeros(RULES)
        single[0] = 0.5 / half[k]
        add_chord(nodes, start[k], stop[k], place, half[k], False, single, 0.0, density[i], unused)
    share = 2.0 * (weight[:, 0] * half).sum()
    # The same for a disc of the density one whose light is weighted.
    rounded_share = 0.5 * np.pi * (weight[:, 0] * half * half).sum() / radius
    for j in range(len(calm)):
        value = density[1, j, 0]
        if abs(0.5 * (density[0, j, 0] + density[2, j, 0]) - value) > 4.0 * limit * value:
            restless[calm[j]] = True
            continue
        out[0, calm[j]] += share * value
        if darkened:
            rounded_out[calm[j]] += rounded_share * value


@kernel
def sum_panel(
    nodes, starts, active, position, half, radius, limit, darkened, weight, defects, budget, out, rounded_out, worst
):  # fmt: skip
    """Add a panel of chords, box by box, and what its null rules give.

    Parameters
    ----------
    nodes : (n, COLUMNS) ndarray
        Of all chords.
    starts : (chords, boxes + 1) ndarray
        Rows at which the nodes of each box begin, in each chord.
    active : (boxes,) ndarray of bool
        Which boxes to add.
    position : (m,) ndarray
        Where the disc's centre is, rising.
    half : (chords,) ndarray
        Half lengths of the chords.
    radius : float
        Radius of the disc.
    limit : float
        Where the density of a box's images bends by less than this share over the disc, the middle chord stands for it.
    darkened : bool
        Whether `rounded_out` is wanted.
    weight : (chords, RULES) ndarray
        Factors of the chords' areas.
    defects : tuple of ndarray
        Of `fold_defects`.
    budget : (m,) ndarray
        Error that is allowed at each position.
    out : (RULES, m) ndarray
        Light, and the null rules' sums, which are of either sign: where a curve wanders out of one box into the next,
        those of both cancel. Added to.
    rounded_out : (m,) or (0,) ndarray
        Sum of the chords' areas weighted with ``sqrt(half^2 - distance^2) / radius``. Added to.
    worst : (boxes,) ndarray
        Set to the largest error of each box, in budgets.
    """
    size = len(position)
    for box in range(len(active)):
        if not active[box]:
            continue
        restless = np.zeros(size, dtype=np.bool_)
        for chord in range(len(half)):
            _mark_restless(nodes, starts[chord, box], starts[chord, box + 1], position, radius, limit, restless)
        _add_calm(nodes, starts[:, box], starts[:, box + 1], position, half, weight, radius, limit, restless, darkened,
            out, rounded_out)  # fmt: skip
        todo = np.flatnonzero(restless)
        worst[box] = 0.0
        if len(todo) == 0:
            continue
        part, rounded, place = np.zeros((len(todo), RULES)), np.zeros(len(todo)), position[todo]
        for chord in range(len(half)):
            add_chord(nodes, starts[chord, box], starts[chord, box + 1], place, half[chord], darkened,
                weight[chord], weight[chord, 0] / radius, part, rounded)  # fmt: skip
        begin, index, defect = defects
        for i in range(begin[box], begin[box + 1]):
            slot = np.searchsorted(todo, index[i])
            if slot < len(todo) and todo[slot] == index[i]:
                part[slot] += defect[:, i]
        for i in range(len(todo)):
            out[:, todo[i]] += part[i]
            worst[box] = max(worst[box], np.abs(part[i, 1:]).max() / budget[todo[i]])
        if darkened:
            rounded_out[todo] += rounded


@kernel
def backgrounds(nodes, folds, out):
    """Magnification of a point at each fold of its line, by all images but the pair that is made there.

    Parameters
    ----------
    nodes : (n, COLUMNS) ndarray
        Nodes of the line.
    folds : (m,) ndarray
        Rows of the folds.
    out : (m,) ndarray
        Filled.
    """
    p, area = np.empty(7), np.empty(7)
    place = nodes[folds, _P]
    order = np.argsort(place)
    place = place[order]
    out[:] = 0.0
    for i in range(len(nodes) - 1):
        if nodes[i, _STEP] == 0.0:
            continue
        one, two = nodes[i], nodes[i + 1]
        first = np.searchsorted(place, min(one[_P], two[_P]))
        last = np.searchsorted(place, max(one[_P], two[_P]))
        if first == last:
            continue
        _polynomials(one, two, p, area)
        for j in range(first, last):
            row = folds[order[j]]
            if i == row or i + 1 == row:
                continue
            t, slope = _share(p, place[j] - one[_P], 0.5)
            if slope != 0.0:
                out[order[j]] += abs(_slope(area, t) / slope)
