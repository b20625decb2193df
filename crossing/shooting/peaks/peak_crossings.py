"""Fold crossings along many random tracks through many random fields, and what their weighted statistics say."""

from __future__ import annotations

import os
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.optics.fold import profile_peak
from crossing.shooting.field import StarField
from crossing.shooting.peaks.peak_lens import LensDraw, MacroChoice

if TYPE_CHECKING:
    from crossing.shooting.tracks.track_curve import Crossings

__all__ = [
    "SHARES",
    "CrossingSample",
    "TrackRun",
    "gather_crossings",
    "in_order",
    "lay_track",
    "pool_runs",
    "run_track",
    "weighted_quantiles",
]

Array = NDArray[np.float64]

SHARES: Final = (0.16, 0.5, 0.84)
"""Shares of the low, median and high value of an estimate."""

_SHORTEST, _LONGEST = 10.0, 100.0
_FOLDS_A_TRACK: Final = 20.0
_LEAST_HALF: Final = 0.05
# Far below the statistical errors.
_ACCURACY, _LOST_FLUX = 1e-2, 2e-3
_BATCH: Final = 24
_FEWEST: Final = 24
_GROUP: Final = 4
_BOOTSTRAPS: Final = 100
_BOOTSTRAP_SEED: Final = 20260


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrackRun:
    """One track through one field."""

    draw: LensDraw
    """The lens."""
    start: tuple[float, float]
    """First point (u, v) [theta_E of one solar mass]."""
    end: tuple[float, float]
    """Last point."""
    length: float
    """Length [theta_E]."""
    crossings: Crossings
    """Folds that it meets."""

    @property
    def complete(self) -> bool:
        """Whether all backgrounds are known."""
        return bool(np.isfinite(self.crossings.background).all())


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CrossingSample:
    """Fold crossings of random tracks; a crossing weighs 1/length of its track, so that weights sum to a rate.

    Notes
    -----
    The lenses and directions are spread evenly, not drawn independently. So the tracks are put in their order, and
    statistical errors follow from how much neighbours differ.
    """

    strength: Array = field(repr=False)
    """(n,) fold strengths K [theta_E^(1/2)]."""
    background: Array = field(repr=False)
    """(n,) magnification of the images that take no part."""
    cosine: Array = field(repr=False)
    """(n,) cosine of the angle between motion and normal."""
    gap: Array = field(repr=False)
    """(n,) distance along the track to the nearest other fold [theta_E]."""
    usual: Array = field(repr=False)
    """(n,) median background of the crossings of the same track."""
    beside: Array = field(repr=False)
    """(n,) sum of the strengths of the folds before and after it on the track [theta_E^(1/2)]."""
    weight: Array = field(repr=False)
    """(n,) crossings per theta_E of track; they sum to their mean number per theta_E."""
    track: NDArray[np.intp] = field(repr=False)
    """(n,) track of each crossing."""
    tracks: tuple[int, ...]
    """Number of tracks of each macro model, in order."""
    length: float
    """Length of all tracks [theta_E]."""

    def __len__(self) -> int:
        return len(self.strength)

    def peaks(self, radius: float, limb_darkening: float = 0.0) -> Array:
        """(n,) peak magnifications of a disc of a radius [theta_E]: background + J_peak K / sqrt(radius).

        Notes
        -----
        The background is that of a point, which has no bound beside another fold. Where one is within a diameter, it is
        at most the usual one and what the folds beside it give a disc.
        """
        per_strength = profile_peak(limb_darkening).height / np.sqrt(radius)
        bound = self.usual + per_strength * self.beside
        near = self.gap < 2.0 * radius
        background = np.where(near, np.minimum(self.background, bound), self.background)
        return np.asarray(background + per_strength * self.strength)

    def quantiles(self, values: Array, shares: Sequence[float] = SHARES) -> Array:
        """Quantiles of one value a crossing, each crossing counted once."""
        if not len(self):
            return np.full(len(shares), np.nan)
        return weighted_quantiles(values, self.weight, shares)

    def quantile_errors(self, values: Array) -> Array:
        """(3,) relative standard errors of the 16, 50 and 84% quantiles, from a bootstrap over tracks."""
        if not len(self):
            return np.full(3, np.inf)
        order = np.argsort(values, kind="stable")
        ordered, weight, track = values[order], self.weight[order], self.track[order]
        found = [weighted_quantiles(ordered, weight * count[track], SHARES, ordered=True) for count in self._counts()]
        kept = [one for one in found if np.isfinite(one).all()]
        # A group's scatter about its own mean is too small by this.
        return np.asarray(np.sqrt(_GROUP / (_GROUP - 1.0)) * np.std(kept, axis=0) / np.mean(kept, axis=0))

    def densities(self, values: Array, above: Sequence[float]) -> tuple[Array, Array]:
        """Crossings per theta_E whose value exceeds each threshold, with standard errors from the scatter of tracks."""
        found, errors = np.zeros(len(above)), np.zeros(len(above))
        for k, threshold in enumerate(above):
            each = np.bincount(self.track, self.weight * (values > threshold), sum(self.tracks)).astype(np.float64)
            found[k], errors[k] = each.sum(), np.sqrt(self._variance(each))
        return found, errors

    def _variance(self, each: Array) -> float:
        """Variance of the sum of the tracks' shares, from differences of neighbours in the order of their lenses."""
        parts = np.split(each, np.cumsum(self.tracks)[:-1])
        return float(sum(len(part) * np.mean(np.diff(part) ** 2) / 2.0 for part in parts if len(part) > 1))

    def _counts(self) -> NDArray[np.int64]:
        """(bootstraps, tracks) how often each track is taken, out of groups of neighbours."""
        rng = np.random.default_rng(_BOOTSTRAP_SEED)
        sizes = [len(group) for count in self.tracks for group in np.array_split(np.arange(count), -(-count // _GROUP))]
        parts = [rng.multinomial(size, np.full(size, 1.0 / size), _BOOTSTRAPS) for size in sizes]
        return np.concatenate(parts, axis=1)

    def worst_error(self, radius: float) -> float:
        """Largest relative error among the three quantiles of the peaks of a disc and the number of crossings."""
        peaks = self.peaks(radius)
        density, error = self.densities(peaks, [0.0])
        if not density[0] > 0.0:
            return float("inf")
        return float(max(error[0] / density[0], self.quantile_errors(peaks).max()))


def weighted_quantiles(values: Array, weight: Array, shares: Sequence[float] = SHARES, ordered: bool = False) -> Array:
    """Quantiles of weighted values; NaN without weight.

    Parameters
    ----------
    values, weight : (n,) ndarray
        Values and their weights.
    shares : sequence of float, optional
        Shares in 0..1.
    ordered : bool, optional
        Whether the values are sorted.
    """
    if not ordered:
        order = np.argsort(values, kind="stable")
        values, weight = values[order], weight[order]
    total = weight.sum()
    if not total > 0.0:
        return np.full(len(shares), np.nan)
    return np.interp(np.asarray(shares) * total, np.cumsum(weight) - 0.5 * weight, values)


def lay_track(draw: LensDraw) -> tuple[StarField, tuple[float, float], tuple[float, float]]:
    """Star field of a draw, and the ends of the track through its middle.

    Parameters
    ----------
    draw : LensDraw
        Lens, stars, direction and seed.

    Raises
    ------
    InputError
        If the field would not fit into memory.
    """
    lens = draw.lens
    length = float(np.clip(_FOLDS_A_TRACK / max(_expected(draw), 1e-9), _SHORTEST, _LONGEST))
    if lens.gradient is not None:
        # The macro magnification is to change little along the track, or what is met depends on where it lies.
        length = min(length, _calm_length(draw))
    u, v = 0.5 * length * np.cos(draw.angle), 0.5 * length * np.sin(draw.angle)
    window = (max(abs(u), _LEAST_HALF), max(abs(v), _LEAST_HALF))
    stars = StarField.draw(
        lens.kappa,
        lens.gamma,
        None,
        window,
        populations=draw.populations,
        gradient=lens.gradient,
        seed=draw.seed,
        lost_flux=_LOST_FLUX,
    )
    return stars, (float(-u), float(-v)), (float(u), float(v))


def _expected(draw: LensDraw) -> float:
    """Folds per theta_E along u, were the caustics of all stars independent; near the macro caustic fewer are met.

    Notes
    -----
    A star's caustic at a minimum has the extent 8 gamma / sqrt(lam_t) along v, each piece counted; the stars behind one
    squared theta_E of the source plane number kappa_star / (pi |lam_t lam_r|). Without macro shear there is that of
    the other stars, of the order of kappa_star.
    """
    lens = draw.lens
    if lens.lam_t == 0.0:
        return np.inf
    per_area = draw.kappa_star / (np.pi * abs(lens.lam_t * lens.lam_r))
    return float(per_area * 8.0 * max(abs(lens.gamma), draw.kappa_star) / np.sqrt(abs(lens.lam_t)))


def _calm_length(draw: LensDraw) -> float:
    """A quarter of the distance to the macro caustic and of the band's depth [theta_E], and not below 0.5."""
    rate = abs(draw.lens.gradient[0]) if isinstance(draw.lens.gradient, tuple) else 0.0
    return max(0.25 * (draw.lens.lam_t**2 + draw.kappa_star**2) / (2.0 * rate), 0.5) if rate > 0.0 else _LONGEST


def run_track(draw: LensDraw) -> TrackRun:
    """Draw the field of a draw and list the folds along its track."""
    from crossing.shooting.tracks.track import track_crossings

    stars, start, end = lay_track(draw)
    length = float(np.hypot(end[0] - start[0], end[1] - start[1]))
    return TrackRun(
        draw=draw, start=start, end=end, length=length, crossings=track_crossings(stars, start, end, _ACCURACY)
    )


def gather_crossings(
    choices: Sequence[MacroChoice],
    *,
    radius: float,
    precision: float,
    most: int,
    seed: int,
    threads: int | None = None,
) -> tuple[list[list[TrackRun]], CrossingSample]:
    """Run tracks through random fields of all macro models until the statistics are as good as asked.

    Parameters
    ----------
    choices : sequence of MacroChoice
        Macro models with stars.
    radius : float
        Radius [theta_E] of the disc whose peaks are looked at.
    precision : float
        Relative standard error to reach, of the 16, 50 and 84% quantiles of the peaks and of the number of crossings.
    most : int
        Most tracks, in all models together.
    seed : int
        Seed.
    threads : int, optional
        Threads; all cores if None. The result does not depend on it.

    Returns
    -------
    runs : list of list of TrackRun
        Tracks of each macro model.
    sample : CrossingSample
        All crossings, macro models by their weights.

    Raises
    ------
    InputError
        If the precision is not between 0.005 and 0.5.
    """
    from crossing.progress import track

    if not 0.005 <= precision <= 0.5:
        raise InputError(f"`precision` must be between 0.005 and 0.5, got {precision:g}; 0.05 is enough for planning")
    each = max(most // len(choices), _FEWEST)
    draws = [choice.draws(each, seed) for choice in choices]
    runs: list[list[TrackRun]] = [[] for _ in choices]
    batch = max(_BATCH // len(choices), 4)
    with ThreadPoolExecutor(threads or os.cpu_count() or 1) as pool:
        for first in track(range(0, each, batch), "tracks", total=-(-each // batch)):
            todo = [(model, one) for model in range(len(choices)) for one in draws[model][first : first + batch]]
            try:
                found = list(pool.map(run_track, [one for _, one in todo]))
            except InputError as error:
                raise error.located(source=choices[0].event.path) from None
            for (model, _), run in zip(todo, found, strict=True):
                runs[model].append(run)
            sample = pool_runs(runs, [choice.weight for choice in choices])
            if len(runs[0]) >= _FEWEST and sample.worst_error(radius) <= precision:
                break
    return runs, sample


def in_order(runs: Sequence[Sequence[TrackRun]]) -> list[TrackRun]:
    """All tracks, those of each macro model by lam_t and then direction: the order in a `CrossingSample`."""
    return [run for model in runs for run in sorted(model, key=lambda run: (run.draw.lam_t, run.draw.angle % np.pi))]


def pool_runs(runs: Sequence[Sequence[TrackRun]], weights: Sequence[float]) -> CrossingSample:
    """Crossings of the tracks of several macro models, by the weights of these.

    Parameters
    ----------
    runs : sequence of sequence of TrackRun
        Tracks of each model, at least one.
    weights : sequence of float
        Weights of the models; they are normalised.
    """
    total = sum(weights)
    flat = in_order(runs)
    mirror = [np.full(len(run.crossings), run.draw.mirror) for run in flat]
    share = [weight / (total * len(model)) for model, weight in zip(runs, weights, strict=True) for _ in model]
    count = [len(run.crossings) for run in flat]
    found = [run.crossings for run in flat]
    return CrossingSample(
        strength=_joined([one.strength for one in found]),
        background=_joined([one.background for one in found]) + _joined(mirror),
        cosine=_joined([np.cos(one.angle) for one in found]),
        gap=_joined([_gaps(one.place) for one in found]),
        usual=_joined([_usual(one.background) for one in found]) + _joined(mirror),
        beside=_joined([_beside(one.strength) for one in found]),
        weight=np.repeat([run.draw.images * part / run.length for part, run in zip(share, flat, strict=True)], count),
        track=np.repeat(np.arange(len(flat)), count),
        tracks=tuple(len(model) for model in runs),
        length=sum(run.length for run in flat),
    )


def _joined(parts: Sequence[Array]) -> Array:
    return np.concatenate([np.asarray(part, dtype=np.float64) for part in parts])


def _gaps(place: Array) -> Array:
    steps = np.concatenate([[np.inf], np.diff(place), [np.inf]])
    return np.minimum(steps[:-1], steps[1:])[: len(place)]


def _usual(background: Array) -> Array:
    return np.full(len(background), np.median(background)) if len(background) else background


def _beside(strength: Array) -> Array:
    padded = np.concatenate([[0.0], strength, [0.0]])
    return padded[:-2] + padded[2:]
