"""Events out of light curves on random tracks: excursions above a level, however many folds have made them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.shooting.tracks.excursions import excursions

if TYPE_CHECKING:
    from collections.abc import Sequence

    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.shooting.library.ensemble import TrackEnsemble

__all__ = ["TrackRate", "track_rate"]

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrackRate:
    """How often, and for how long, the light curves of an ensemble exceed a level."""

    level: float
    """Magnification."""
    radius: float
    """Radius of the disc [theta_E]."""
    rate: float
    """Excursions that begin, per length of track [1/theta_E]."""
    error: float
    """Its standard error, from the scatter between tracks; NaN for a single one."""
    count: int
    """How many were counted."""
    share: float
    """Share of the length that lies above the level."""
    share_error: float
    """Its standard error."""
    dwell: Array
    """(count,) lengths above the level of those that begin and end on their track [theta_E]."""
    peak: Array
    """(count,) their highest magnifications."""

    @property
    def mean_dwell(self) -> float:
        """Mean length of an excursion [theta_E]: share over rate, which the ends of tracks do not bias."""
        return self.share / self.rate if self.rate > 0 else 0.0

    def to_dict(self) -> dict[str, Any]:
        """Rates and shares, not the single excursions."""
        return {
            "level": self.level,
            "radius": self.radius,
            "rate": self.rate,
            "error": self.error,
            "count": self.count,
            "share": self.share,
            "share_error": self.share_error,
            "mean_dwell": self.mean_dwell,
        }

    def to_table(self) -> QTable:
        """One row a whole excursion."""
        from astropy.table import QTable

        return QTable({"dwell": self.dwell, "peak": self.peak})

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw how many of the whole excursions last longer than a length."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.0, 4.0), layout="constrained").add_subplot()
        order = np.sort(self.dwell)
        ax.step(order, np.arange(len(order), 0, -1), where="pre", color="#0072B2")
        ax.set(xscale="log", yscale="log", xlabel=r"length above the level [$\theta_E$]", ylabel="excursions that last")
        return ax


def track_rate(
    ensemble: TrackEnsemble, radius: float, levels: Sequence[float], *, merge: float = 0.0, limb_darkening: float = 0.0
) -> tuple[TrackRate, ...]:
    """Excursions of the light curves of an ensemble above levels.

    Parameters
    ----------
    ensemble : TrackEnsemble
        Random tracks.
    radius : float
        Radius of the disc [theta_E], in the range of the library.
    levels : sequence of float
        Magnifications.
    merge : float, optional
        Excursions whose gap is at most this are one [theta_E].
    limb_darkening : float, optional
        Linear coefficient.

    Returns
    -------
    tuple of TrackRate
        One a level.

    Raises
    ------
    InputError
        If there are no tracks, `merge` does not leave most of their length, or the radius is out of range.

    Notes
    -----
    An excursion belongs to the place where it begins. What begins within `merge` of the start of a track may go on with
    one before it, so only the rest of the track counts.
    """
    if not len(ensemble):
        raise InputError("`ensemble` must hold tracks, got none; load some")
    length = ensemble.cell.length
    if not 0.0 <= merge < 0.5 * length:
        raise InputError(f"`merge` must be between 0 and half a track of {length:g}, got {merge:g}; take longer tracks")
    counts, shares = np.zeros((len(ensemble), len(levels))), np.zeros((len(ensemble), len(levels)))
    dwell: list[list[Array]] = [[] for _ in levels]
    peak: list[list[Array]] = [[] for _ in levels]
    for number in range(len(ensemble)):
        place, value = ensemble.magnification(radius, number, limb_darkening)
        for column, level in enumerate(levels):
            found = excursions(place, value, level, merge)
            begun = found.start > max(merge, float(place[0]))
            counts[number, column] = begun.sum()
            shares[number, column] = found.above.sum() / length
            dwell[column].append(found.above[found.whole])
            peak[column].append(found.peak[found.whole])
    rates = counts / (length - merge)
    many = len(ensemble) > 1
    return tuple(
        TrackRate(
            level=float(level),
            radius=radius,
            rate=float(rates[:, k].mean()),
            error=float(rates[:, k].std(ddof=1) / np.sqrt(len(ensemble))) if many else float("nan"),
            count=int(counts[:, k].sum()),
            share=float(shares[:, k].mean()),
            share_error=float(shares[:, k].std(ddof=1) / np.sqrt(len(ensemble))) if many else float("nan"),
            dwell=np.concatenate(dwell[k]),
            peak=np.concatenate(peak[k]),
        )
        for k, level in enumerate(levels)
    )
