"""What a forecast of event rates works with, the same for all segments of an arc."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.event import Campaign, require_campaign
from crossing.optics.motion import sample_effective_velocity
from crossing.optics.scales import LensScales
from crossing.population.detection_rule import DetectionRule, VisitFinder, detection_rule
from crossing.population.event_sample import EventSample
from crossing.population.fold_rates import StarKinds
from crossing.population.from_campaign import population_stars

if TYPE_CHECKING:
    from crossing.event import ScheduleRecord
    from crossing.population.arc_stars import ArcStars
    from crossing.population.segments import Segment

__all__ = ["DAYS_PER_YEAR", "FOLDS", "Level", "RatesTask", "SegmentDraw", "rates_task"]

Array = NDArray[np.float64]
Level: TypeAlias = Literal["folds", "tracks"]

DAYS_PER_YEAR: Final = 365.25
"""Days in a Julian year."""
FOLDS: Final = 16_384
"""Random surroundings of a fold ensemble."""

_SPEEDS: Final = 20_000
_SPEED_KEY, _STAR_KEY = 51, 52


@dataclass(frozen=True, slots=True, kw_only=True)
class SegmentDraw:
    """What one draw of the model says of one segment."""

    events: EventSample
    """Events."""
    lam_t: float
    """Eigenvalue along the stretch."""
    clipped: bool
    """Whether it was too close to zero to be used."""
    crowding: float
    """Share of the events that another one of the same star follows within `merge`."""
    found: Array | None
    """(n_visits,) events that each visit finds."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RatesTask:
    """What all segments share."""

    campaign: Campaign
    """The campaign."""
    scales: LensScales
    """Distances."""
    rule: DetectionRule
    """What counts as an event."""
    schedule: ScheduleRecord | None
    """Schedule whose visits count."""
    finder: VisitFinder | None
    """What its visits find."""
    darkening: float
    """Limb darkening."""
    speed: Array
    """(n_draws,) speeds [km/s]."""
    direction: Array
    """(n_draws,) directions of the motion from u to v [rad]."""
    efficiency: Array
    """(n_draws,) part of the events that survives vetting."""
    seed: int
    """Seed."""
    level: Level
    """``folds`` or ``tracks``."""
    tracks: int
    """Tracks for each segment."""
    threads: int | None
    """Threads for tracks that are missing."""

    @property
    def band(self) -> str:
        """Band of the peak brightness."""
        return next(iter(self.rule.limits))

    def stars(self, segment: Segment, draw: int | None) -> ArcStars:
        """Stars behind a segment; the same draw gives the same slope and dust to all."""
        campaign = self.campaign
        rng = None
        if draw is not None:
            rng = np.random.default_rng(np.random.SeedSequence(self.seed, spawn_key=(_STAR_KEY, draw)))
        record = segment.record
        return population_stars(campaign.population, record.surface_brightness, campaign.bands, self.scales, rng)

    def kinds(self, stars: ArcStars) -> StarKinds:
        """The stars in units of the Einstein radius."""
        function = stars.function
        return StarKinds(
            density=stars.density * function.number * self.scales.einstein_radius_arcsec**2,
            needed=self.rule.needed(stars.flux),
            radius=function.radius / self.scales.einstein_radius_source_rsun,
            flux=stars.flux[self.band],
            radius_rsun=function.radius,
            temperature=function.temperature,
            luminosity=function.luminosity,
        )


def rates_task(
    campaign: Campaign,
    *,
    schedule: str | None = None,
    draws: int = 64,
    seed: int = 0,
    level: Level = "folds",
    tracks: int = 16,
    threads: int | None = None,
) -> RatesTask:
    """What all segments of a campaign share: see `predict_rates`.

    Raises
    ------
    InputError
        If something is missing in the campaign, or a schedule is unknown.
    """
    purpose = "a forecast of rates"
    require_campaign(campaign, "lens", "source", "motion", "bands", "segments", "surface_brightness", purpose=purpose)
    if campaign.lens_redshift is None or campaign.source_redshift is None or campaign.motion is None:
        raise InputError("must be given for a forecast of rates; add redshifts and motion", source=campaign.path)
    chosen = _schedule(campaign, schedule)
    scales = LensScales(campaign.lens_redshift.central, campaign.source_redshift.central, campaign.cosmology)
    rule = detection_rule(campaign, chosen)
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(_SPEED_KEY,)))
    try:
        velocity = sample_effective_velocity(campaign.motion, scales, rng, _SPEEDS)
    except InputError as error:
        raise error.located(source=campaign.path) from None
    strata = (np.arange(draws) + 0.5) / draws
    angle = campaign.motion.angle
    told = np.pi * strata if angle is None else np.radians(angle.quantile(strata))
    darkening = next(
        (
            one.limb_darkening.central
            for name in rule.limits
            if (one := campaign.bands[name]).limb_darkening is not None
        ),
        0.0,
    )
    return RatesTask(
        campaign=campaign,
        scales=scales,
        rule=rule,
        schedule=chosen,
        finder=None if chosen is None else VisitFinder(chosen, rule.epochs, seed),
        darkening=darkening,
        speed=rng.permutation(np.quantile(np.hypot(*velocity.T), strata)),
        direction=rng.permutation(told),
        efficiency=rng.permutation(np.clip(campaign.detection.efficiency.quantile(strata), 0.0, 1.0)),
        seed=seed,
        level=level,
        tracks=tracks,
        threads=threads,
    )


def _schedule(campaign: Campaign, name: str | None) -> ScheduleRecord | None:
    if name is None:
        return campaign.schedules[0] if campaign.schedules else None
    for one in campaign.schedules:
        if one.name == name:
            return one
    known = ", ".join(one.name for one in campaign.schedules) or "none"
    raise InputError(f"`schedule` must be one of those of the file ({known}), got {name!r}", source=campaign.path)
