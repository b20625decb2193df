"""What counts as an event: flux limits by band, and which visits find an excursion."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import hypot, inf, sqrt
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError
from crossing.event import visit_noise, visit_times

if TYPE_CHECKING:
    from crossing.event import Campaign, ScheduleRecord

__all__ = ["DetectionRule", "VisitFinder", "detection_rule"]

Array = NDArray[np.float64]

_MASKS: Final = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class DetectionRule:
    """Changes of flux that make an event."""

    limits: dict[str, float]
    """Smallest change of flux that is significant [nJy], by band that counts."""
    noise: dict[str, float]
    """Standard deviation of that change [nJy], by band."""
    required: int
    """How many of the bands must show it in the same visit."""
    epochs: int
    """How many visits must show it."""
    merge: float
    """Excursions closer than this are one event [days]."""

    def needed(self, flux: Mapping[str, Array]) -> Array:
        """Change of magnification that stars need.

        Parameters
        ----------
        flux : mapping of str to ndarray, shape (n,)
            Flux densities without magnification [nJy], by band.

        Returns
        -------
        ndarray, shape (n,)
            Changes of magnification; infinite for stars that send no light.
        """
        with np.errstate(divide="ignore"):
            each = [np.where(flux[band] > 0, limit / flux[band], inf) for band, limit in self.limits.items()]
        return np.asarray(np.sort(each, axis=0)[self.required - 1])

    def to_dict(self) -> dict[str, Any]:
        """Limits and numbers."""
        return {
            "limits_njy": dict(self.limits),
            "noise_njy": dict(self.noise),
            "bands_required": self.required,
            "epochs": self.epochs,
            "merge_days": self.merge,
        }


def detection_rule(campaign: Campaign, schedule: ScheduleRecord | None) -> DetectionRule:
    """Rule of a campaign at the depth of a schedule.

    Parameters
    ----------
    campaign : Campaign
        The campaign.
    schedule : ScheduleRecord or None
        One of its schedules; the bands' own depths if None.

    Raises
    ------
    InputError
        If no band has a depth, or fewer have one than the rule requires.
    """
    told = campaign.detection
    if schedule is not None:
        noise = visit_noise(campaign, schedule)
    else:
        noise = {one.name: one.depth / one.depth_sigma for one in campaign.bands.values() if one.depth is not None}
    noise = {band: sigma for band, sigma in noise.items() if not told.bands or band in told.bands}
    if len(noise) < told.bands_required:
        raise InputError(
            f"must have a depth in at least {told.bands_required} of the bands that count, got {len(noise)}; "
            "add depth to [bands.NAME] or to the schedule",
            source=campaign.path,
            where="bands" if schedule is None else "schedules",
        )
    if told.reference == "previous":
        noise = {band: sqrt(2.0) * sigma for band, sigma in noise.items()}
    else:
        template = {band: depth / told.reference_depth_sigma for band, depth in told.reference_depth.items()}
        noise = {band: hypot(sigma, template.get(band, 0.0)) for band, sigma in noise.items()}
    return DetectionRule(
        limits={band: told.significance * sigma for band, sigma in noise.items()},
        noise=noise,
        required=told.bands_required,
        epochs=told.epochs,
        merge=told.merge,
    )


class VisitFinder:
    """How many excursions each visit of a schedule is the one to find.

    Parameters
    ----------
    schedule : ScheduleRecord
        Visits, of which a part may be lost at random: means over a few draws of that are taken.
    epochs : int
        Visits in an excursion that it takes.
    seed : int
        Seed of the lost visits.

    Notes
    -----
    An excursion of duration D that begins at s has been seen often enough at the visit t_i if s <= t_(i-n+1) and
    s + D >= t_i. Of all begins those count for the visit that did not count for an earlier one: their measure is
    min(D - (t_i - t_(i-n+1)), t_(i-n+1) - t_(i-n)) where that is positive, with no bound by the gap for the first.
    """

    def __init__(self, schedule: ScheduleRecord, epochs: int, seed: int = 0) -> None:
        self.times: Array = visit_times(schedule)
        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(31,)))
        count = len(self.times)
        kept = (
            [rng.random(count) >= schedule.loss for _ in range(_MASKS)]
            if schedule.loss
            else [np.ones(count, dtype=bool)]
        )
        self._visits = [np.flatnonzero(one) for one in kept]
        self._epochs = epochs

    @property
    def days(self) -> float:
        """From the first to the last visit [days]."""
        return float(self.times[-1] - self.times[0])

    def found(self, duration: ArrayLike, weight: ArrayLike) -> Array:
        """Excursions found by each visit.

        Parameters
        ----------
        duration : array_like, shape (n,)
            Durations above the limit [days].
        weight : array_like, shape (n,)
            Excursions per day that each stands for.

        Returns
        -------
        ndarray, shape (n_visits,)
            Expected numbers; their sum is what the schedule finds.
        """
        order = np.argsort(duration)
        length, share = np.asarray(duration, dtype=np.float64)[order], np.asarray(weight, dtype=np.float64)[order]
        out = np.zeros(len(self.times))
        if not len(length):
            return out
        for chosen in self._visits:
            if len(chosen) < self._epochs:
                continue
            times = self.times[chosen]
            span = times[self._epochs - 1 :] - times[: len(times) - self._epochs + 1]
            gap = np.append(inf, np.diff(times[: len(times) - self._epochs + 1]))
            out[chosen[self._epochs - 1 :]] += _mean_below(length, share, span + gap) - _mean_below(length, share, span)
        return out / len(self._visits)


def _mean_below(length: Array, share: Array, bound: Array) -> Array:
    """Sum of share times the smaller of length and bound, for each bound; lengths are in order."""
    below = np.concatenate([[0.0], np.cumsum(share * length)])
    above = np.concatenate([[0.0], np.cumsum(share)])
    place = np.searchsorted(length, bound)
    rest = above[-1] - above[place]
    return below[place] + np.where(rest > 0, rest, 0.0) * np.where(np.isfinite(bound), bound, 0.0)
