"""Where p turns between two nodes of an image curve: by its slope as a quintic, from three derivatives at both."""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel

__all__ = ["stop_at", "turning_share"]

_P = 1
# Looks at the slope within a step, and the share of what it is around them below which its least is all but zero.
_LOOKS = 8
_SLOW = 0.1


@kernel
def _slope(one, two, step, t):
    """Slope of p a share t of the step ahead."""
    a, a1, a2 = one[_P + 1], one[_P + 2] * step, 0.5 * one[_P + 3] * step * step
    d = two[_P + 1] - a - a1 - a2
    d1 = two[_P + 2] * step - a1 - 2.0 * a2
    d2 = 0.5 * two[_P + 3] * step * step - a2
    c3, c4, c5 = 10.0 * d - 4.0 * d1 + d2, -15.0 * d + 7.0 * d1 - 2.0 * d2, 6.0 * d - 3.0 * d1 + d2
    return a + t * (a1 + t * (a2 + t * (c3 + t * (c4 + t * c5))))


@kernel
def stop_at(one, two, step):
    """Share of a step at which one more node is needed to tell turns of p apart; 1 if none is.

    Next to a cusp p turns twice within little, or all but does: pieces of curves that hold much of the light.

    Parameters
    ----------
    one, two : (COLUMNS,) ndarray
        Nodes at both ends, see `image_curves.follow`.
    step : float
        The step between them.
    """
    if one[_P + 1] == 0.0 or two[_P + 1] == 0.0:
        return 1.0
    slope, turns, first = np.empty(_LOOKS + 1), 0, 0
    for k in range(_LOOKS + 1):
        slope[k] = _slope(one, two, step, k / _LOOKS)
        if k > 0 and slope[k] * slope[k - 1] <= 0.0:
            if turns > 0:
                return 0.5 * (first + k - 1) / _LOOKS
            turns, first = turns + 1, k
    for k in range(_LOOKS + 1):
        low, high = max(k - 1, 0), min(k + 1, _LOOKS)
        around = min(slope[low] * slope[k], slope[high] * slope[k])
        if (
            around < slope[k] * slope[k]
            or (k == 0 and one[_P + 2] * slope[0] >= 0.0)
            or (k == _LOOKS and two[_P + 2] * slope[_LOOKS] <= 0.0)
        ):
            continue
        share = _slowest(one, two, step, low / _LOOKS, high / _LOOKS)
        if _slope(one, two, step, share) * slope[k] < _SLOW * around:
            return share
    return 1.0


@kernel
def _slowest(one, two, step, low, high):
    """Share, between two, at which the slope is closest to zero or furthest beyond it."""
    sign = np.sign(_slope(one, two, step, 0.5 * (low + high)))
    for _ in range(20):
        left, right = low + 0.382 * (high - low), low + 0.618 * (high - low)
        if _slope(one, two, step, left) * sign < _slope(one, two, step, right) * sign:
            high = right
        else:
            low = left
    return 0.5 * (low + high)


@kernel
def turning_share(one, two, step):
    """Share of a step at which the slope vanishes; it has opposite signs at the ends.

    Parameters
    ----------
    one, two, step
        See `stop_at`.
    """
    low, high = 0.0, 1.0
    for _ in range(40):
        middle = 0.5 * (low + high)
        if _slope(one, two, step, middle) * one[_P + 1] > 0.0:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)
