"""What a rule of chords gets wrong next to a straight fold, from the closed form of a disc on one.

Where the end of a chord meets a fold, its light has a square root's kink in the chord's place, and no rule of few
points likes that. Across a small disc a fold is nearly straight and evenly strong; the error of the rule on that fold
is known, and is taken off. What then remains goes with the bend of the fold over the disc.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from crossing.optics.fold_table import fold_table

__all__ = ["fold_defects", "folds_among"]

Array = NDArray[np.float64]

_STEP, _P, _AREA, _TURN = 0, 1, 5, 8
_REACH = 3.0
_STEEPEST = 10.0


def folds_among(nodes: Array, starts: NDArray[np.int64]) -> Array:
    """Folds on one chord.

    Parameters
    ----------
    nodes : (n, COLUMNS) ndarray
        Nodes of the chord.
    starts : (boxes + 1,) ndarray
        Rows at which each box begins.

    Returns
    -------
    (m, 5) ndarray
        Box, place p, 1 or -1 as the pair is beyond or before it, strength along the track, slope dp/dw of the caustic.
    """
    rows = np.flatnonzero(nodes[:, _TURN] != 0.0)
    found = nodes[rows]
    box = np.searchsorted(starts, rows, side="right") - 1
    strength = found[:, _AREA] * np.sqrt(2.0 / np.abs(found[:, _P + 2]))
    return np.stack([box, found[:, _P], np.sign(found[:, _P + 2]), strength, found[:, _TURN + 1]], axis=1)


def fold_defects(
    folds: Array, radius: float, distance: Array, half: Array, weight: Array, boxes: int, place: Array
) -> tuple[NDArray[np.int64], NDArray[np.int64], Array]:
    """Closed form less rule, for the folds of each box, at the places of the disc that are near enough.

    Parameters
    ----------
    folds : (m, 5) ndarray
        Of `folds_among`, box after box.
    radius : float
        Radius of the disc.
    distance, half, weight : (chords,), (chords,) and (chords, k) ndarray
        Distances of the chords from the middle, their half lengths, and the weights of the rules: the first is for
        the light, the others are zero where it is smooth.
    boxes : int
        Number of boxes.
    place : (n,) ndarray
        Places of the disc, rising.

    Returns
    -------
    begin : (boxes + 1,) ndarray
        Where the entries of each box begin.
    index : (m,) ndarray
        Places.
    defect : (k, m) ndarray
        To be added to the sums of the rules.
    """
    folds = folds[np.abs(folds[:, 4]) < _STEEPEST]
    wide = radius * np.hypot(1.0, folds[:, 4])
    first = np.searchsorted(place, folds[:, 1] - _REACH * wide)
    count = np.searchsorted(place, folds[:, 1] + _REACH * wide) - first
    which = np.repeat(np.arange(len(folds)), count)
    index = np.arange(len(which)) - np.repeat(np.cumsum(count) - count, count) + first[which]
    _, at, side, strength, slope = folds[which].T
    ahead = side * (place[index] - at)
    defect = np.zeros((weight.shape[1], len(which)))
    defect[0] = strength / np.sqrt(wide[which]) * fold_table().uniform(ahead / wide[which])
    for h, size, shares in zip(distance, half, weight, strict=True):
        beyond = ahead - side * slope * h
        light = 2.0 * strength * (np.sqrt(np.maximum(beyond + size, 0.0)) - np.sqrt(np.maximum(beyond - size, 0.0)))
        defect -= shares[:, None] * light
    begin = np.searchsorted(folds[which, 0], np.arange(boxes + 1))
    return begin, index, defect
