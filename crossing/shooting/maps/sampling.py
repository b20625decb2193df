"""Light curves along straight lines over a map."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError

if TYPE_CHECKING:
    from astropy.table import QTable

    from crossing.shooting.maps.magnification_map import MagnificationMap

__all__ = ["bilinear", "sample_line"]

_MOST_SAMPLES = 10_000_000
# Rounding of an end that was meant to be on the edge [pixels].
_ROUNDING = 1e-9


def bilinear(image: NDArray[np.float64], column: NDArray[np.float64], row: NDArray[np.float64]) -> NDArray[np.float64]:
    """Interpolate an image at fractional (column, row), the centre of the first pixel being (0, 0).

    Parameters
    ----------
    image : (n_v, n_u) ndarray
        Values at pixel centres.
    column, row : (n,) ndarray
        Places; beyond the outermost centres the nearest value is taken.

    Returns
    -------
    (n,) ndarray
    """
    column = np.clip(column, 0.0, image.shape[1] - 1.0)
    row = np.clip(row, 0.0, image.shape[0] - 1.0)
    left = np.minimum(column.astype(np.int64), max(image.shape[1] - 2, 0))
    below = np.minimum(row.astype(np.int64), max(image.shape[0] - 2, 0))
    right, above = np.minimum(left + 1, image.shape[1] - 1), np.minimum(below + 1, image.shape[0] - 1)
    fu, fv = column - left, row - below
    low = image[below, left] * (1.0 - fu) + image[below, right] * fu
    high = image[above, left] * (1.0 - fu) + image[above, right] * fu
    return np.asarray(low * (1.0 - fv) + high * fv)


def sample_line(
    chart: MagnificationMap, start: tuple[float, float], end: tuple[float, float], samples: int | None
) -> QTable:
    """See `MagnificationMap.light_curve`."""
    from astropy import units
    from astropy.table import QTable

    ends = np.array([_on_map(chart, "start", start), _on_map(chart, "end", end)])
    length = float(np.hypot(*(ends[1] - ends[0])))
    if samples is None:
        samples = max(2, 1 + int(np.ceil(2.0 * length / chart.pixel_size)))
    if not 2 <= samples <= _MOST_SAMPLES:
        raise InputError(f"`samples` must be between 2 and {_MOST_SAMPLES}, got {samples}")
    position = np.linspace(0.0, 1.0, samples)
    u, v = (ends[0, axis] + position * (ends[1, axis] - ends[0, axis]) for axis in (0, 1))
    low_u, low_v = chart.center[0] - 0.5 * chart.width, chart.center[1] - 0.5 * chart.height
    column, row = (u - low_u) / chart.pixel_size - 0.5, (v - low_v) / chart.pixel_size - 0.5
    table = QTable({"position": position, "u": u, "v": v})
    if chart.days_per_einstein is not None:
        table["time"] = position * length * chart.days_per_einstein * units.d
    table["magnification"] = bilinear(chart.values, column, row)
    table.meta = {
        "start": [float(part) for part in ends[0]],
        "end": [float(part) for part in ends[1]],
        "source_radius": chart.source_radius,
        "limb_darkening": chart.limb_darkening,
        "images": chart.images,
    }
    return table


def _on_map(chart: MagnificationMap, name: str, point: tuple[float, float]) -> NDArray[np.float64]:
    place = np.asarray(point, dtype=np.float64)
    if place.shape != (2,):
        raise InputError(f"`{name}` must be a pair (u, v), got {point!r}")
    room = np.array([chart.width, chart.height]) / 2 + _ROUNDING * chart.pixel_size
    if not bool((np.abs(place - chart.center) <= room).all()):
        (u, v), (a, b) = chart.center, (chart.width / 2, chart.height / 2)
        raise InputError(
            f"`{name}` must be on the map, {u - a:g} to {u + a:g} by {v - b:g} to {v + b:g}, "
            f"got ({place[0]:g}, {place[1]:g}); make a larger map"
        )
    return place
