"""Fold rates of a segment, calibrated on its light curves: how many excursions and how much time above the limit."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

from crossing.population.track_rates import track_rate
from crossing.shooting.library.library_cell import RADII, TrackCell

if TYPE_CHECKING:
    from crossing.optics.local import LocalLens
    from crossing.population.fold_rates import StarKinds
    from crossing.shooting.caustics.fold_ensemble import FoldEnsemble
    from crossing.shooting.library.ensemble import TrackEnsemble
    from crossing.stars.mass_functions import Population

__all__ = ["TRACK_LENGTH", "TrackCalibration", "TrackTable", "calibrate", "segment_cell", "track_table"]

Array = NDArray[np.float64]

TRACK_LENGTH: Final = 4.0
"""Length of the tracks of a segment [theta_E]."""
# Levels over the mean, half a factor of two apart: from flicker to what few stars need.
_LEVELS: Final = 1.0 + np.geomspace(0.25, 512.0, 23)
_FEWEST: Final = 10


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrackTable:
    """Excursions of the light curves of an ensemble, by radius and level."""

    radii: Array
    """(n,) radii [theta_E]."""
    levels: Array
    """(m,) levels over the mean magnification."""
    rate: Array
    """(n, m) excursions per length [1/theta_E]."""
    share: Array
    """(n, m) share of the length above the level."""
    count: NDArray[np.intp]
    """(n, m) excursions that were counted."""


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackCalibration:
    """What light curves make of the rates of folds, over the events of one segment."""

    rate: float
    """Excursions over fold crossings."""
    share: float
    """Time above the limit over what isolated folds have."""
    error: float
    """Relative statistical error of the first, by the number of excursions that the tracks hold."""
    covered: float
    """Part of the events in the range where the tracks hold ten excursions or more; the rest is left as it is."""

    @property
    def dwell(self) -> float:
        """Factor of the mean duration."""
        return self.share / self.rate if self.rate > 0 else 1.0

    def to_dict(self) -> dict[str, Any]:
        """All numbers."""
        return {"rate": self.rate, "share": self.share, "error": self.error, "covered": self.covered}


def segment_cell(
    lens: LocalLens, populations: Sequence[Population], direction: float | None, radii: tuple[float, ...] = RADII
) -> TrackCell:
    """Cell of the library for one segment; a direction of None draws one for each track."""
    return TrackCell(
        kappa=lens.kappa,
        gamma=lens.gamma,
        populations=tuple(populations),
        direction=direction,
        length=TRACK_LENGTH,
        radii=radii,
    )


def track_table(ensemble: TrackEnsemble, mean: float, merge: float, limb_darkening: float = 0.0) -> TrackTable:
    """Excursions at all radii of an ensemble.

    Parameters
    ----------
    ensemble : TrackEnsemble
        Tracks.
    mean : float
        Mean magnification.
    merge : float
        Excursions whose gap is at most this are one [theta_E].
    limb_darkening : float, optional
        Linear coefficient.
    """
    radii = np.array(ensemble.cell.radii)
    found = [
        track_rate(ensemble, float(radius), list(mean * _LEVELS), merge=merge, limb_darkening=limb_darkening)
        for radius in radii
    ]
    return TrackTable(
        radii=radii,
        levels=_LEVELS,
        rate=np.array([[one.rate for one in row] for row in found]),
        share=np.array([[one.share for one in row] for row in found]),
        count=np.array([[one.count for one in row] for row in found], dtype=np.intp),
    )


def calibrate(
    table: TrackTable,
    ensemble: FoldEnsemble,
    stars: StarKinds,
    rates: Array,
    direction: float | None,
    limb_darkening: float = 0.0,
) -> TrackCalibration:
    """Excursions of light curves over folds, summed over the stars of a segment.

    Parameters
    ----------
    table : TrackTable
        Excursions of tracks in this direction.
    ensemble : FoldEnsemble
        Folds of the same lens.
    stars : StarKinds
        Stars.
    rates : ndarray, shape (n,)
        What folds give for each kind of star; in any unit.
    direction : float or None
        Direction of the tracks [rad].
    limb_darkening : float, optional
        Linear coefficient.

    Notes
    -----
    Both are tables over the radii and levels of the library, taken at the nearest radius and level of each kind of
    star: their ratio changes slowly. Where the tracks hold fewer than ten excursions the ratio is taken as 1.
    """
    mean = ensemble.background
    folds = np.array(
        [
            ensemble.crossing_rate(
                mean * table.levels, float(radius), direction=direction, limb_darkening=limb_darkening
            )
            for radius in table.radii
        ]
    )
    widths = np.array(
        [
            ensemble.exceedance(mean * table.levels, float(radius), limb_darkening=limb_darkening)
            for radius in table.radii
        ]
    )
    row = _nearest(np.log(table.radii), np.log(stars.radius))
    with np.errstate(divide="ignore"):
        column = _nearest(np.log(table.levels - 1.0), np.log(stars.needed / mean))
    enough = (table.count[row, column] >= _FEWEST) & (folds[row, column] > 0) & (stars.needed < mean * table.levels[-1])
    time = rates * widths[row, column] / np.maximum(folds[row, column], 1e-300)
    ratio = np.where(enough, table.rate[row, column] / np.maximum(folds[row, column], 1e-300), 1.0)
    stay = np.where(enough, table.share[row, column] / np.maximum(widths[row, column], 1e-300), 1.0)
    total = rates.sum()
    if not total > 0 or not time.sum() > 0:
        return TrackCalibration(rate=1.0, share=1.0, error=0.0, covered=0.0)
    noise = np.where(enough, 1.0 / np.sqrt(np.maximum(table.count[row, column], 1)), 0.0)
    return TrackCalibration(
        rate=float(rates @ ratio / total),
        share=float(time @ stay / time.sum()),
        error=float(rates @ noise / total),
        covered=float(rates[enough].sum() / total),
    )


def _nearest(grid: Array, value: Array) -> NDArray[np.intp]:
    """Index of the nearest of rising values."""
    place = np.clip(np.searchsorted(grid, value), 1, len(grid) - 1)
    return place - (value - grid[place - 1] < grid[place] - value)
