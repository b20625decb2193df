"""Forecast of lensed-star events on an arc: how many, where, how bright and how long."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.population.event_sample import EventSample
from crossing.population.fold_rates import fold_events, fold_rate
from crossing.population.rates_summary import forecast
from crossing.population.rates_task import DAYS_PER_YEAR, FOLDS, Level, RatesTask, SegmentDraw, rates_task
from crossing.population.segments import Segment, caustics_of, prepare_segments
from crossing.population.track_calibration import (
    TRACK_LENGTH,
    TrackCalibration,
    calibrate,
    segment_cell,
    track_table,
)
from crossing.progress import track
from crossing.shooting.caustics.fold_ensemble import fold_ensemble
from crossing.shooting.library.ensemble import load_tracks
from crossing.shooting.library.library_files import TrackLibrary

if TYPE_CHECKING:
    from crossing.event import Campaign
    from crossing.population.rates_result import RatesForecast
    from crossing.shooting.library.library_cell import TrackCell

__all__ = ["RatesPlan", "plan_rates", "predict_rates"]

Array = NDArray[np.float64]

_EVENT_KEY: Final = 53
_ROWS: Final = 512
_SECONDS, _SECONDS_PER_EINSTEIN = 0.009, 2.5
_MOST_MERGED: Final = 0.4


class RatesPlan(NamedTuple):
    """What a forecast would take."""

    segments: int
    """Segments."""
    draws: int
    """Draws of the model."""
    visits: int
    """Visits of the schedule."""
    tracks: int
    """Tracks that the library does not hold yet."""
    seconds: float
    """About how long, on one core."""


def predict_rates(
    campaign: Campaign,
    *,
    schedule: str | None = None,
    level: Level = "folds",
    draws: int = 64,
    tracks: int = 16,
    beam: float = 0.1,
    seed: int = 0,
    threads: int | None = None,
) -> RatesForecast:
    """Forecast the lensed-star events of a campaign by the lengths and strengths of its caustics.

    Parameters
    ----------
    campaign : Campaign
        Redshifts, motion, bands with depths, segments with their surface brightness; a schedule tells what its visits
        find.
    schedule : str, optional
        Name of one of the schedules; the first if None.
    level : {"folds", "tracks"}, optional
        Folds alone, or calibrated on light curves of each segment's central lens, which the library of tracks keeps.
    draws : int, optional
        Draws of all that is uncertain.
    tracks : int, optional
        Tracks of four Einstein radii for each segment, at the level ``tracks``.
    beam : float, optional
        Full width at half maximum of the images [arcsec], for the flicker of a beam.
    seed : int, optional
        Seed.
    threads : int, optional
        Threads for tracks that are missing; all cores if None.

    Returns
    -------
    RatesForecast
        Numbers with their intervals, by segment and visit; what events and their stars are like; flags.

    Raises
    ------
    InputError
        If something is missing in the campaign, a schedule is unknown, or a number is out of range.

    Notes
    -----
    The rate of one star is that at which it crosses folds whose peak exceeds the mean magnification by what its light
    needs: speed x length of caustics per area, across the motion, with K J_peak / sqrt(R) > limit / flux.

    References
    ----------
    .. [1] Schneider P. & Weiss A., 1986, A&A 164, 237 (fold profile)
    .. [2] Nityananda R., Ostriker J. P., 1984, J. Astrophys. Astron. 5, 235 (shear of random fields)
    """
    if not 2 <= draws <= 10_000:
        raise InputError(f"`draws` must be between 2 and 10000, got {draws}; 64 is the default")
    if not 0 < beam < 10:
        raise InputError(f"`beam` must be between 0 and 10 arcsec, got {beam:g}; give the width of the images")
    if level not in ("folds", "tracks") or not 2 <= tracks <= 10_000:
        raise InputError(f"`level` must be folds or tracks, with 2 to 10000 `tracks`, got {level!r} and {tracks}")
    task = rates_task(campaign, schedule=schedule, draws=draws, seed=seed, level=level, tracks=tracks, threads=threads)
    segments = prepare_segments(campaign)
    _check_populations(campaign, segments)
    numbered = track(enumerate(segments), "segments", len(segments))
    drawn, calibrations = [], []
    for index, segment in numbered:
        calibrations.append(_calibration(task, segment))
        drawn.append(_segment_draws(task, index, segment, draws, calibrations[-1]))
    options = {"schedule": schedule, "level": level, "draws": draws, "tracks": tracks, "beam": beam, "seed": seed}
    return forecast(task, segments, drawn, calibrations, beam, options)


def plan_rates(
    campaign: Campaign, *, schedule: str | None = None, level: Level = "folds", draws: int = 64, tracks: int = 16
) -> RatesPlan:
    """What `predict_rates` would take.

    Raises
    ------
    InputError
        As `predict_rates`.
    """
    task = rates_task(campaign, schedule=schedule, draws=draws)
    segments = prepare_segments(campaign)
    visits = 0 if task.finder is None else len(task.finder.times)
    missing = 0
    if level == "tracks":
        library = TrackLibrary()
        for segment in segments:
            cell = _cell(task, segment)
            missing += 0 if cell is None else sum(not library.has(cell, number) for number in range(tracks))
    seconds = 2.0 + _SECONDS * len(segments) * draws * (1 + visits / 20_000)
    return RatesPlan(len(segments), draws, visits, missing, seconds + _SECONDS_PER_EINSTEIN * TRACK_LENGTH * missing)


def _check_populations(campaign: Campaign, segments: Sequence[Segment]) -> None:
    for one in segments:
        if not one.choices[0].populations and one.fold is None:
            raise InputError(
                "must have stars in front, or a gradient for the smooth caustic, got neither; add one of them",
                source=campaign.path,
                where=one.record.place,
            )


def _segment_draws(
    task: RatesTask, index: int, segment: Segment, draws: int, calibration: TrackCalibration | None
) -> list[SegmentDraw]:
    out = []
    for number, (choice, lens) in enumerate(segment.draws(draws, task.seed)):
        stars = task.kinds(task.stars(segment, number))
        caustics = caustics_of(segment, choice, lens, task.scales, FOLDS)
        rng = np.random.default_rng(np.random.SeedSequence(task.seed, spawn_key=(_EVENT_KEY, index, number)))
        years = task.scales.einstein_crossing_years(float(task.speed[number]))
        direction = float(task.direction[number])
        events = fold_events(
            caustics,
            stars,
            years,
            direction,
            segment=index,
            count=_ROWS,
            rng=rng,
            limb_darkening=task.darkening,
        )
        events = EventSample.join([events], float(task.efficiency[number]))
        if calibration is not None:
            events = replace(
                events, weight=calibration.rate * events.weight, duration=calibration.dwell * events.duration
            )
        found = None if task.finder is None else task.finder.found(events.duration, events.weight / DAYS_PER_YEAR)
        rates = fold_rate(caustics, stars, years, direction, task.darkening)
        number_of = stars.density * caustics.source_area / task.scales.einstein_radius_arcsec**2
        crowding = _crowding(rates, number_of, task.rule.merge)
        out.append(SegmentDraw(events=events, lam_t=lens.lam_t, clipped=lens.clipped, crowding=crowding, found=found))
    return out


def _angle(task: RatesTask) -> float | None:
    motion = task.campaign.motion
    return None if motion is None or motion.angle is None else float(np.radians(motion.angle.central))


def _cell(task: RatesTask, segment: Segment) -> TrackCell | None:
    """Tracks of the central lens, in the direction that is known or in all; None without stars."""
    _, central = segment.central(task.seed)
    return segment_cell(central.lens, central.populations, _angle(task)) if central.populations else None


def _calibration(task: RatesTask, segment: Segment) -> TrackCalibration | None:
    """What light curves of the central lens make of its folds."""
    cell = _cell(task, segment) if task.level == "tracks" else None
    if cell is None:
        return None
    choice, central = segment.central(task.seed)
    years, angle = task.scales.einstein_crossing_years(float(np.median(task.speed))), _angle(task)
    merge = min(task.rule.merge / DAYS_PER_YEAR / years, _MOST_MERGED * TRACK_LENGTH)
    tracks = load_tracks(cell, task.tracks, threads=task.threads)
    table = track_table(tracks, central.lens.magnification, merge, task.darkening)
    stars = task.kinds(task.stars(segment, None))
    rates = fold_rate(caustics_of(segment, choice, central, task.scales, FOLDS), stars, years, angle, task.darkening)
    inside = replace(stars, radius=np.clip(stars.radius, table.radii[0], table.radii[-1]))
    folds = fold_ensemble(central.lens, central.populations, FOLDS)
    return calibrate(table, folds, inside, rates, angle, task.darkening)


def _crowding(rates: Array, number: Array, merge: float) -> float:
    """Share of the events that another one of the same star follows within `merge`, were they independent."""
    some = (rates > 0) & (number > 0)
    follow = -np.expm1(-rates[some] / number[some] * merge / DAYS_PER_YEAR)
    return float((rates[some] * follow).sum() / rates[some].sum()) if some.any() else 0.0
