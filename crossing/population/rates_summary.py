"""From the draws of all segments to a forecast of event rates."""

from __future__ import annotations

import platform
from collections.abc import Sequence
from dataclasses import replace
from importlib.metadata import version
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

from crossing.population.event_sample import EventSample
from crossing.population.fold_rates import StarKinds, flicker_variance
from crossing.population.from_campaign import ArcMasses, arc_masses, population_transients
from crossing.population.rates_result import Expectation, Flicker, RatesForecast, SegmentRates, VisitRates
from crossing.population.rates_task import FOLDS, RatesTask, SegmentDraw
from crossing.population.segments import Caustics, Segment, caustics_of, total_area
from crossing.population.transients import TransientRates, field_transients, lens_transients
from crossing.shooting.peaks.peak_crossings import weighted_quantiles
from crossing.shooting.peaks.peak_result import Spread

if TYPE_CHECKING:
    from crossing.event import Campaign
    from crossing.population.arc_stars import ArcStars
    from crossing.population.track_calibration import TrackCalibration

__all__ = ["forecast"]

Array = NDArray[np.float64]

# Above which share, or below which number, a forecast is flagged.
_LOW, _HALF, _CLIPPED, _COLOUR, _CROWDED, _POOR = 5.0, 0.5, 0.1, 0.5, 0.3, 0.15
_REACH: Final = 1e4
_SQUARE_ARCSEC_PER_BEAM: Final = np.pi / (4.0 * np.log(2.0))
_PC2: Final = 1e6


def forecast(
    task: RatesTask,
    segments: Sequence[Segment],
    drawn: list[list[SegmentDraw]],
    calibrations: Sequence[TrackCalibration | None],
    beam: float,
    options: dict[str, Any],
) -> RatesForecast:
    """Forecast out of the draws of all segments.

    Parameters
    ----------
    task : RatesTask
        What they share.
    segments : sequence of Segment
        The segments.
    drawn : list of list of SegmentDraw
        For each segment its draws; equal numbers belong together.
    calibrations : sequence of TrackCalibration or None
        What light curves make of each segment's folds.
    beam : float
        Full width at half maximum of the images [arcsec].
    options : dict
        How it was asked for, for the provenance.
    """
    draws = len(drawn[0])
    rates = np.array([[one.events.rate for one in row] for row in drawn])
    progress = np.array([[one.events.in_progress for one in row] for row in drawn])
    found = None
    if task.finder is not None:
        found = np.array([[one.found for one in row] for row in drawn])
    sample = EventSample.join([one.events for row in drawn for one in row], 1.0 / draws)
    told = tuple(
        replace(
            _segment(task, segment, drawn[k], rates[k], progress[k], None if found is None else found[k], beam),
            calibration=calibrations[k],
        )
        for k, segment in enumerate(segments)
    )
    sides = np.array([one.side for one in told])
    return RatesForecast(
        campaign=task.campaign.name,
        level=task.level,
        rule=task.rule,
        per_year=Expectation.of(rates.sum(axis=0), task.seed),
        in_visit=_spread(progress.sum(axis=0)),
        visits=_visits(task, found),
        segments=told,
        sides={str(side): _spread(rates[sides == side].sum(axis=0)) for side in dict.fromkeys(sides)},
        band=task.band,
        beam_arcsec=beam,
        sample=sample,
        speed_kms=Spread.of(weighted_quantiles(task.speed, task.speed)),
        transients=_transients(task, segments),
        masses=_masses(task, segments[0]),
        draws=draws,
        flags=_flags(task, segments, drawn, told),
        provenance=_provenance(task.campaign, options),
    )


def _spread(draws: Array) -> Spread:
    return Spread.of(np.quantile(draws, (0.16, 0.5, 0.84)))


def _visits(task: RatesTask, found: Array | None) -> VisitRates | None:
    if task.finder is None or task.schedule is None or found is None:
        return None
    return VisitRates(
        schedule=task.schedule.name,
        mjd=task.finder.times,
        found=found.sum(axis=0).mean(axis=0),
        season=Expectation.of(found.sum(axis=(0, 2)), task.seed),
    )


def _segment(
    task: RatesTask,
    segment: Segment,
    drawn: list[SegmentDraw],
    rates: Array,
    progress: Array,
    found: Array | None,
    beam: float,
) -> SegmentRates:
    choice = segment.choices[0]
    lens, fold = choice.lens, segment.fold
    central = task.stars(segment, None)
    kinds = task.kinds(central)
    caustics = caustics_of(segment, *segment.central(task.seed), task.scales, FOLDS)
    events = EventSample.join([one.events for one in drawn])
    return SegmentRates(
        name=segment.record.name,
        side=str(lens.parity),
        lam_t=_spread(np.array([one.lam_t for one in drawn])),
        magnification=lens.magnification,
        kappa_star=choice.kappa_star,
        distance=None if fold is None else lens.lam_t / fold.rate,
        length=segment.record.length,
        area=segment.area,
        per_year=Expectation.of(rates, task.seed),
        in_visit=_spread(progress),
        in_schedule=None if found is None else _spread(found.sum(axis=1)),
        threshold=Spread.of(events.quantiles("needed")) if events.rate > 0 else None,
        stars=float(kinds.density[kinds.needed < _REACH].sum() * caustics.source_area)
        / task.scales.einstein_radius_arcsec**2,
        flicker=_flicker(task, central, kinds, caustics, beam),
        calibration=None,
        residuals=central.residuals(),
    )


def _flicker(
    task: RatesTask, stars: ArcStars, kinds: StarKinds, caustics: Caustics, beam: float
) -> tuple[Flicker, ...]:
    if not caustics.source_area > 0:
        return ()
    unit = task.scales.einstein_radius_arcsec
    variance = flicker_variance(caustics, kinds.radius, caustics.source_area / unit**2, task.darkening)
    number = kinds.density / unit**2 * _SQUARE_ARCSEC_PER_BEAM * beam**2 / max(caustics.background, 1.0)
    out = []
    for band, limit in task.rule.limits.items():
        rms = float(np.sqrt(number @ (stars.flux[band] ** 2 * variance)))
        noise = limit / task.campaign.detection.significance
        out.append(Flicker(band=band, rms=rms, significance=rms / noise))
    return tuple(out)


def _transients(task: RatesTask, segments: Sequence[Segment]) -> TransientRates:
    """Of the arc by the magnification of each segment, of the stars in front of it, and of the field up to the lens."""
    found = TransientRates(rates=())
    campaign, scales = task.campaign, task.scales
    each = []
    mass = 0.0
    for segment in segments:
        lens = segment.choices[0].lens
        area = segment.area / lens.magnification if np.isfinite(lens.magnification) else 0.0
        each.append(
            population_transients(campaign.population, segment.record.surface_brightness, campaign.bands, scales, area)
        )
        mass += segment.choices[0].kappa_star * scales.sigma_crit * segment.area
    found += _summed(each)
    if mass > 0:
        found += lens_transients(mass * scales.kpc_per_arcsec_lens**2 * _PC2, scales.z_lens)
    return found + field_transients(total_area(segments), (0.0, scales.z_lens), cosmology=scales.cosmology)


def _masses(task: RatesTask, segment: Segment) -> ArcMasses:
    campaign = task.campaign
    return arc_masses(campaign.population, segment.record.surface_brightness, campaign.bands, task.scales.z_source)


def _summed(parts: Sequence[TransientRates]) -> TransientRates:
    out = list(parts[0].rates)
    for part in parts[1:]:
        out = [
            replace(a, rate_per_year=a.rate_per_year + b.rate_per_year, low=a.low + b.low, high=a.high + b.high)
            for a, b in zip(out, part.rates, strict=True)
        ]
    return TransientRates(rates=tuple(out))


def _flags(
    task: RatesTask,
    segments: Sequence[Segment],
    drawn: list[list[SegmentDraw]],
    told: Sequence[SegmentRates],
) -> tuple[str, ...]:
    every = [one for row in drawn for one in row]
    events = EventSample.join([one.events for one in every])
    flags = []
    if events.weight[events.needed < _LOW].sum() > _HALF * events.rate:
        flags.append("low_thresholds")
    if np.mean([one.clipped for one in every]) > _CLIPPED:
        flags.append("clipped_lens")
    if any(segment.choices[0].populations and segment.coarseness() > 1.0 for segment in segments):
        flags.append("coarse_segments")
    if any(abs(value) > _COLOUR for one in told for value in one.residuals.values()):
        flags.append("colours")
    if sum(one.crowding * one.events.rate for one in every) > _CROWDED * events.rate:
        flags.append("crowded")
    total = sum(one.per_year.mean for one in told)
    poor = [
        one.per_year.mean
        for one in told
        if one.calibration is not None and (one.calibration.error > _POOR or one.calibration.covered < _HALF)
    ]
    if sum(poor) > _POOR * total:
        flags.append("few_tracks")
    return tuple(flags)


def _provenance(campaign: Campaign, options: dict[str, Any]) -> dict[str, Any]:
    packages = ("crossing", "numpy", "scipy", "astropy")
    return {
        "versions": {"python": platform.python_version()} | {name: version(name) for name in packages},
        "options": options,
        "inputs": [{"path": str(campaign.path), "sha256": campaign.sha256}],
    }
