"""Excursions of a light curve above a level: where they begin and end, how high they go, which of them count as one."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError

__all__ = ["Excursions", "excursions"]

Array = NDArray[np.float64]


class Excursions(NamedTuple):
    """Stretches of a curve above a level, arrays of shape (n,), in the order of the curve."""

    start: Array
    """Where the curve rises through the level, or where it begins above it."""
    end: Array
    """Where it falls through the level for the last time before the next excursion, or where it ends."""
    above: Array
    """Length above the level; shorter than ``end - start`` where excursions were merged."""
    peak: Array
    """Highest value."""
    peak_place: Array
    """Where it is reached."""
    whole: NDArray[np.bool_]
    """Whether both its ends lie on the curve."""


def excursions(place: ArrayLike, value: ArrayLike, level: float, merge: float = 0.0) -> Excursions:
    """Excursions of a curve, straight between its points, above a level.

    Parameters
    ----------
    place : array_like, shape (m,)
        Places or times, rising.
    value : array_like, shape (m,)
        Curve.
    level : float
        Level; a value that only touches it is not above it.
    merge : float
        Excursions whose gap is at most this are one.

    Returns
    -------
    Excursions
        With as many rows as there are excursions.

    Raises
    ------
    InputError
        If there are fewer than two points, or places do not rise.
    """
    x, y = np.asarray(place, dtype=np.float64), np.asarray(value, dtype=np.float64)
    if x.ndim != 1 or x.shape != y.shape or len(x) < 2 or not np.all(np.diff(x) > 0):
        raise InputError("`place` and `value` must be two or more points in rising order, one value each; sort them")
    over = y > level
    turn = np.flatnonzero(over[1:] != over[:-1])
    with np.errstate(divide="ignore", invalid="ignore"):
        cut = x[turn] + (level - y[turn]) / (y[turn + 1] - y[turn]) * (x[turn + 1] - x[turn])
    rises = over[turn + 1]
    begin, first = cut[rises], turn[rises] + 1
    finish, last = cut[~rises], turn[~rises]
    if over[0]:
        begin, first = np.append(x[0], begin), np.append(0, first)
    if over[-1]:
        finish, last = np.append(finish, x[-1]), np.append(last, len(x) - 1)
    if not len(begin):
        none = np.empty(0)
        return Excursions(none, none, none, none, none, np.empty(0, dtype=bool))
    heads = np.flatnonzero(np.append(True, begin[1:] - finish[:-1] > merge))
    tails = np.append(heads[1:], len(begin)) - 1
    peak = np.array([first[a] + np.argmax(y[first[a] : last[b] + 1]) for a, b in zip(heads, tails, strict=True)])
    return Excursions(
        start=begin[heads],
        end=finish[tails],
        above=np.add.reduceat(finish - begin, heads),
        peak=y[peak],
        peak_place=x[peak],
        whole=~((over[0] & (heads == 0)) | (over[-1] & (tails == len(begin) - 1))),
    )
