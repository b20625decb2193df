"""All images of a point: where the image curves of a line through it have the point's place along the line."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError
from crossing.shooting.compiled import announce_compilation, kernel
from crossing.shooting.field import StarField
from crossing.shooting.tracks.chord_sums import _polynomials, _share, _slope
from crossing.shooting.tracks.lines import trace_boxes
from crossing.shooting.tracks.track_scene import TrackScene, prepare_track

__all__ = ["count_images", "image_magnifications"]

Array = NDArray[np.float64]

_STEP, _P, _AREA = 0, 1, 5
# Direction of the lines [rad]: along no axis that a field may have.
_DIRECTION = 0.7310585786
_ACCURACY = 1e-6


@kernel
def _signed_magnifications(nodes, p, out):
    """Signed magnifications of the images at p, into `out` as far as there is room; their number."""
    first, second, count = np.empty(7), np.empty(7), 0
    for i in range(len(nodes) - 1):
        if nodes[i, _STEP] == 0.0:
            continue
        one, two = nodes[i], nodes[i + 1]
        # Of the ends the lower one belongs to the piece.
        if not min(one[_P], two[_P]) <= p < max(one[_P], two[_P]):
            continue
        if count < len(out):
            _polynomials(one, two, first, second)
            share, _ = _share(first, p - one[_P], 0.5)
            slope = _slope(first, share)
            out[count] = abs(_slope(second, share)) / slope if slope != 0.0 else np.inf
        count += 1
    return count


def image_magnifications(field: StarField, u: float, v: float) -> Array:
    """Magnifications of all images of a point source.

    Parameters
    ----------
    field : StarField
        Stars and macro lens.
    u, v : float
        The source's position [Einstein radii of one solar mass].

    Returns
    -------
    (n,) ndarray
        Magnifications with the sign of their parity, the brightest first. The faint image beside each star outside the
        region of rays is left out: none for isolated stars.

    Raises
    ------
    InputError
        If a coordinate is not finite.
    """
    point = np.array([u, v], dtype=np.float64)
    _check(point)
    scene = _scene(field, point[None])
    return _images(scene, point)


def count_images(field: StarField, u: ArrayLike, v: ArrayLike) -> int | NDArray[np.int64]:
    """Number of images of point sources.

    Parameters
    ----------
    field : StarField
        Stars and macro lens.
    u, v : array_like
        Positions of the sources [Einstein radii of one solar mass]; they broadcast.

    Returns
    -------
    int or ndarray of int
        Images, the faint ones beside all stars of the field included. Those of positive parity less those of negative
        parity are the macro image's parity less the stars, unless there is a gradient.

    Raises
    ------
    InputError
        If a coordinate is not finite.
    """
    one, two = np.broadcast_arrays(np.asarray(u, dtype=np.float64), np.asarray(v, dtype=np.float64))
    points = np.stack([one.ravel(), two.ravel()], axis=1)
    _check(points)
    if len(points) == 0:
        return np.zeros(one.shape, dtype=np.int64)
    scene = _scene(field, points)
    beyond = len(scene.scene[5][0]) - len(scene.order)
    counts = np.array([len(_images(scene, point)) + beyond for point in points], dtype=np.int64)
    return int(counts[0]) if one.ndim == 0 else counts.reshape(one.shape)


def _check(points: Array) -> None:
    if not np.isfinite(points).all():
        raise InputError("`u`, `v` must be finite, got a value that is not")


def _scene(field: StarField, points: Array) -> TrackScene:
    """Scene of a track across all points, that leaves no image to a closed form."""
    announce_compilation(trace_boxes)
    low, high = points.min(axis=0), points.max(axis=0)
    half = max(0.5 * float(np.hypot(*(high - low))), 1e-6)
    along = half * np.array([np.cos(_DIRECTION), np.sin(_DIRECTION)])
    first, last = 0.5 * (low + high) - along, 0.5 * (low + high) + along
    scene = prepare_track(field, tuple(first), tuple(last), half, half, _ACCURACY, 1)
    ends = scene.ends.copy()
    ends[:, 2] = np.inf
    return replace(scene, ends=ends)


def _images(scene: TrackScene, point: Array) -> Array:
    a, b, *first = scene.line
    du, dv = point - first
    along, across = a * du + b * dv, a * dv - b * du
    nodes = trace_boxes(
        scene.all_boxes, scene.boxes, scene.order, scene.begin, across, scene.scene, scene.line, scene.bends,
        scene.ends, np.array([along, along]), scene.pace,
    )[0]  # fmt: skip
    out = np.empty(max(16, 2 * len(nodes)))
    found = out[: _signed_magnifications(nodes, along, out)]
    return found[np.argsort(-np.abs(found), kind="stable")]
