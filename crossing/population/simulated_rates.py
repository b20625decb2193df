"""Simulated seasons: stars on pieces of tracks, visited night by night with noise, and the events that are counted."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.progress import track as progress_bar

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.population.fold_rates import StarKinds
    from crossing.shooting.library.ensemble import TrackEnsemble

__all__ = ["SimulatedSeasons", "count_events", "simulate_seasons"]

Array = NDArray[np.float64]

_DAYS_PER_YEAR: Final = 365.25
_BATCH: Final = 512
_LONGEST_SHARE: Final = 0.5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SimulatedSeasons:
    """Events counted in simulated seasons."""

    counts: NDArray[np.int64]
    """(n_seasons,) events of each."""
    stars: NDArray[np.int64]
    """(n_seasons,) stars that were followed in each."""
    peak: Array
    """(n_events,) highest measured change of magnification, in units of what the star needs."""
    visits: NDArray[np.int64]
    """(n_events,) visits that show it."""

    @property
    def mean(self) -> float:
        """Mean number of events of a season."""
        return float(self.counts.mean())

    @property
    def error(self) -> float:
        """Its standard error, from the scatter of the seasons."""
        return float(self.counts.std(ddof=1) / np.sqrt(len(self.counts)))

    def to_dict(self) -> dict[str, Any]:
        """Counts and means."""
        return {"mean": self.mean, "error": self.error, "counts": self.counts.tolist()}

    def to_table(self) -> QTable:
        """One row a season."""
        from astropy.table import QTable

        return QTable({"events": self.counts, "stars": self.stars})

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw how many seasons have how many events, beside a Poisson distribution of the same mean."""
        from scipy.stats import poisson

        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.0, 4.0), layout="constrained").add_subplot()
        number = np.arange(self.counts.max() + 2)
        ax.bar(number, np.bincount(self.counts, minlength=len(number)), color="#0072B2", alpha=0.5, label="seasons")
        ax.plot(number, len(self.counts) * poisson.pmf(number, self.mean), color="#D55E00", marker="o", label="Poisson")
        ax.set(xlabel="events of a season", ylabel="seasons")
        ax.legend()
        return ax


def simulate_seasons(
    ensemble: TrackEnsemble,
    stars: StarKinds,
    area: float,
    times: Array,
    years: float,
    *,
    mean: float,
    seasons: int,
    seed: int,
    significance: float | None = 5.0,
    epochs: int = 1,
    merge: float = 30.0,
    limb_darkening: float = 0.0,
    progress: Callable[[int, int], None] | None = None,
) -> SimulatedSeasons:
    """Count the events of seasons, star by star and visit by visit.

    Parameters
    ----------
    ensemble : TrackEnsemble
        Tracks, in the direction of the motion and longer than a season.
    stars : StarKinds
        Stars; those that need an infinite magnification are left out.
    area : float
        Area of the source plane [theta_E^2].
    times : ndarray, shape (n_visits,)
        Moments of the visits, rising [days].
    years : float
        Years in which a star moves by one theta_E.
    mean : float
        Magnification that the template shows.
    seasons : int
        How many.
    seed : int
        Seed of stars, places and noise.
    significance : float or None, optional
        Of the change that stars need, in units of the noise of a visit; no noise if None.
    epochs : int, optional
        Visits that must show an event.
    merge : float, optional
        Excursions closer than this are one event [days].
    limb_darkening : float, optional
        Linear coefficient.
    progress : callable, optional
        Called as ``progress(done, seasons)``; a bar on a terminal if None.

    Returns
    -------
    SimulatedSeasons
        Counts.

    Raises
    ------
    InputError
        If a season takes more than half of a track.
    """
    span = float(times[-1] - times[0]) / _DAYS_PER_YEAR / years
    if not span <= _LONGEST_SHARE * ensemble.cell.length:
        raise InputError(
            f"`times` must take at most half of the tracks' {ensemble.cell.length:g} Einstein radii, got {span:.3g}; "
            "take longer tracks or fewer seasons in one"
        )
    steps = (times - times[0]) / _DAYS_PER_YEAR / years
    expected = np.where(np.isfinite(stars.needed), stars.density, 0.0) * area
    counts, followed = np.zeros(seasons, dtype=np.int64), np.zeros(seasons, dtype=np.int64)
    peaks: list[float] = []
    visits: list[int] = []
    roots = np.random.SeedSequence(seed, spawn_key=(61,)).spawn(seasons)
    bar = range(seasons) if progress is not None else progress_bar(range(seasons), "seasons", seasons)
    for season in bar:
        rng = np.random.default_rng(roots[season])
        kind = np.repeat(np.arange(len(expected)), rng.poisson(expected))
        followed[season] = len(kind)
        for begin in range(0, len(kind), _BATCH):
            part = kind[begin : begin + _BATCH]
            radius = np.clip(stars.radius[part], ensemble.cell.radii[0], ensemble.cell.radii[-1])
            windows = ensemble.sample(rng, radius, len(part), span)
            change = (windows.magnification(steps, limb_darkening) - mean) / stars.needed[part][:, None]
            if significance is not None:
                change += rng.standard_normal(change.shape) / significance
            for row in change[(change > 1.0).any(axis=1)]:
                found = count_events(times, row, epochs, merge)
                counts[season] += len(found)
                peaks += [one[0] for one in found]
                visits += [one[1] for one in found]
        if progress is not None:
            progress(season + 1, seasons)
    return SimulatedSeasons(
        counts=counts, stars=followed, peak=np.array(peaks), visits=np.array(visits, dtype=np.int64)
    )


def count_events(times: Array, change: Array, epochs: int, merge: float) -> list[tuple[float, int]]:
    """Events of one star: visits above the limit, those closer than `merge` together.

    Parameters
    ----------
    times : ndarray, shape (n,)
        Moments [days].
    change : ndarray, shape (n,)
        Measured changes over what is needed.
    epochs : int
        Visits that an event must have.
    merge : float
        Longest gap within one event [days].

    Returns
    -------
    list of (float, int)
        Highest change and number of visits of each event.
    """
    above = np.flatnonzero(change > 1.0)
    if not len(above):
        return []
    groups = np.split(above, np.flatnonzero(np.diff(times[above]) > merge) + 1)
    return [(float(change[one].max()), len(one)) for one in groups if len(one) >= epochs]
