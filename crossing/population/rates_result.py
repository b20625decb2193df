"""What a forecast of event rates says."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

from crossing.population.event_sample import EventSample
from crossing.population.transients import TransientRates
from crossing.shooting.peaks.peak_result import Spread

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.population.detection_rule import DetectionRule
    from crossing.population.from_campaign import ArcMasses
    from crossing.population.track_calibration import TrackCalibration

__all__ = [
    "CAUTIONS",
    "FLAGS",
    "TRACK_CAUTION",
    "Expectation",
    "Flicker",
    "RatesForecast",
    "SegmentRates",
    "VisitRates",
]

Array = NDArray[np.float64]

FLAGS: Final[dict[str, str]] = {
    "low_thresholds": "more than half of the events are changes of less than five times the mean magnification, where "
    "folds are not alone: numbers and durations are rough, and merge into flicker",
    "clipped_lens": "more than a tenth of the draws of the lens lie closer to the macro critical curve than lam_t that "
    "is constant over a segment can serve; the nearest allowed value was used there",
    "coarse_segments": "lam_t changes along a segment by more than it and kappa_star together; cut the arc finer there",
    "colours": "the stars' light misses the arc's by more than half a magnitude in a band: temperatures or dust are "
    "not those of the arc",
    "few_tracks": "the tracks hold too few excursions in a segment that matters (`calibration`); take more of them",
    "crowded": "one star's events follow each other within a few times `merge`: they are counted too often",
}
"""Flags that make a forecast untrustworthy, with what they mean."""

CAUTIONS: Final[tuple[str, ...]] = (
    "Every fold is taken as straight and alone, above the mean magnification. Where events need six times the mean or "
    "more, numbers agree with light curves to 10%; durations on the saddle side are too long by up to 1.5 at six "
    "times, 1.2 at twelve. Two folds that are crossed within `merge` count as two here.",
    "The limit is sharp. Noise lifts more events above it than it hides: nightly visits find up to 30% more.",
    "Counts are taken as Poisson; one star may make two events, and their variance is 1.1 to 1.25 times the mean.",
    "Each segment has one lam_t; kappa_star is the same along it. The lens's stars do not move.",
    "Speed, direction and surface brightness are taken as common to all segments, and so are errors of lens models.",
    "Stars are black bodies behind one screen of dust, single and spread evenly over a segment; their number follows "
    "from the light, and so from the faintest luminosity that counts as part of it.",
    "The flicker is that of excursions above twice the mean, of independent stars in one beam.",
    "Supernovae, outbursts and novae of the arc count once in each image that shows them.",
)
"""Limits of the claim, repeated in every output."""

TRACK_CAUTION: Final = (
    "Numbers and durations are those of folds times what light curves of the central lens make of them, on average "
    "over a segment's events; single durations and peaks are those of folds."
)
"""What stands in place of the first of them at the level ``tracks``."""

_COLOURS: Final = {"minimum": "#0072B2", "saddle": "#D55E00", "maximum": "#009E73", "critical": "#999999"}
_HATCHES: Final = {"minimum": "", "saddle": "///", "maximum": "...", "critical": "xx"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Expectation:
    """Expected number of events, and the numbers that may come."""

    expected: Spread
    """Expected number over what is uncertain in the model."""
    mean: float
    """Its mean."""
    poisson: tuple[float, float]
    """Central 68% of the counts if the median were true."""
    total: tuple[float, float]
    """Central 68% of the counts over model and chance."""

    @classmethod
    def of(cls, draws: Array, seed: int = 0) -> Expectation:
        """Expectation from equally probable expected numbers, shape (n,)."""
        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(41,)))
        low, middle, high = np.quantile(draws, (0.16, 0.5, 0.84))
        chance = np.quantile(rng.poisson(middle, 20_000), (0.16, 0.84), method="inverted_cdf")
        both = np.quantile(rng.poisson(np.repeat(draws, 400)), (0.16, 0.84), method="inverted_cdf")
        return cls(
            expected=Spread(median=float(middle), low=float(low), high=float(high)),
            mean=float(np.mean(draws)),
            poisson=(float(chance[0]), float(chance[1])),
            total=(float(both[0]), float(both[1])),
        )

    def to_dict(self) -> dict[str, Any]:
        """Estimate and intervals."""
        return {
            "expected_events": self.expected.to_dict(),
            "mean_events": self.mean,
            "interval_model": {"low": self.expected.low, "high": self.expected.high},
            "interval_poisson": {"low": self.poisson[0], "high": self.poisson[1]},
            "interval_total": {"low": self.total[0], "high": self.total[1]},
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class Flicker:
    """Persistent variability of one beam."""

    band: str
    """Band."""
    rms: float
    """Root mean square of its flux [nJy]."""
    significance: float
    """That over the noise of a visit."""

    def to_dict(self) -> dict[str, Any]:
        """All fields by name."""
        return {"band": self.band, "rms_njy": self.rms, "over_noise": self.significance}


@dataclass(frozen=True, slots=True, kw_only=True)
class SegmentRates:
    """Events of one segment."""

    name: str
    """Name."""
    side: str
    """``minimum``, ``saddle`` or ``maximum``, by the central lens."""
    lam_t: Spread
    """Eigenvalue along the stretch."""
    magnification: float
    """|mu| of the central lens."""
    kappa_star: float
    """Central convergence in stars."""
    distance: float | None
    """Distance of its centre to the critical curve along the stretch [arcsec], where the gradient is known."""
    length: float
    """Observed extent along the stretch [arcsec]."""
    area: float
    """Observed area [arcsec2]."""
    per_year: Expectation
    """Events above the limit in a year."""
    in_visit: Spread
    """Events in progress in a visit."""
    in_schedule: Spread | None
    """Events that the schedule finds."""
    threshold: Spread | None
    """Change of magnification over the mean that the events' stars need; None without events."""
    stars: float
    """Stars behind it that a magnification of 10,000 above the mean lifts over the limit, by central values."""
    flicker: tuple[Flicker, ...]
    """Persistent variability by band."""
    calibration: TrackCalibration | None
    """What light curves make of the folds' numbers; None at the level ``folds``."""
    residuals: dict[str, float]
    """Observed less predicted surface brightness of its stars [mag] by band."""

    @property
    def per_arcsec(self) -> float:
        """Median of the events a year over the length [1/arcsec]."""
        return self.per_year.expected.median / self.length

    def to_dict(self) -> dict[str, Any]:
        """All numbers."""
        return {
            "name": self.name,
            "side": self.side,
            "lam_t": self.lam_t.to_dict(),
            "magnification": self.magnification,
            "kappa_star": self.kappa_star,
            "critical_distance_arcsec": self.distance,
            "length_arcsec": self.length,
            "area_arcsec2": self.area,
            **self.per_year.to_dict(),
            "per_arcsec": self.per_arcsec,
            "in_one_visit": self.in_visit.to_dict(),
            "in_schedule": None if self.in_schedule is None else self.in_schedule.to_dict(),
            "threshold_over_mean": None if self.threshold is None else self.threshold.to_dict(),
            "stars_within_reach": self.stars,
            "flicker": [one.to_dict() for one in self.flicker],
            "calibration": None if self.calibration is None else self.calibration.to_dict(),
            "residuals_mag": dict(self.residuals),
        }


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class VisitRates:
    """What the visits of a schedule find."""

    schedule: str
    """Its name."""
    mjd: Array
    """(n,) moments of the visits [days]."""
    found: Array
    """(n,) events that each is expected to find, mean over the model."""
    season: Expectation
    """Events that all find together."""

    def to_dict(self) -> dict[str, Any]:
        """Schedule with its visits."""
        visits = [{"mjd": float(t), "events": float(x)} for t, x in zip(self.mjd, self.found, strict=True)]
        return {"name": self.schedule, **self.season.to_dict(), "visits": visits}

    def to_table(self) -> QTable:
        """One row a visit."""
        from astropy.table import QTable

        return QTable({"mjd": self.mjd, "events": self.found}, meta={"schedule": self.schedule})

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the events that are found by and by."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.0, 4.0), layout="constrained").add_subplot()
        ax.step(self.mjd, np.cumsum(self.found), where="post", color="#0072B2", marker=".")
        ax.set(xlabel="MJD", ylabel="events found, expected")
        return ax


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RatesForecast:
    """Forecast of the events of a campaign."""

    campaign: str
    """Name of the campaign."""
    level: str
    """How it was computed: ``folds``, or ``tracks``."""
    rule: DetectionRule
    """What counts as an event."""
    per_year: Expectation
    """Events above the limit in a year, whether a visit falls on them or not."""
    in_visit: Spread
    """Events in progress in a visit."""
    visits: VisitRates | None
    """What the schedule finds; None without one."""
    segments: tuple[SegmentRates, ...]
    """Segment by segment."""
    sides: dict[str, Spread]
    """Events in a year by side of the critical curve."""
    band: str
    """Band of peak brightnesses: the first that counts."""
    beam_arcsec: float
    """Full width at half maximum of the beam of the flicker [arcsec]."""
    sample: EventSample = field(repr=False)
    """The events, over all draws of the model."""
    speed_kms: Spread
    """Speed, weighted by crossings [km/s]."""
    transients: TransientRates
    """What else flares."""
    masses: ArcMasses
    """Star formation and stellar mass on which that rests, in the first segment; rates of what is unknown are zero."""
    draws: int
    """Draws of the model."""
    flags: tuple[str, ...]
    """What makes it untrustworthy; see `FLAGS`."""
    provenance: dict[str, Any] = field(repr=False)
    """Versions, options, inputs."""

    @property
    def status(self) -> str:
        """``ok``, or ``flagged``."""
        return "flagged" if self.flags else "ok"

    @property
    def flag_meanings(self) -> dict[str, str]:
        """Meaning of each flag that is raised."""
        return {name: FLAGS[name] for name in self.flags}

    @property
    def cautions(self) -> tuple[str, ...]:
        """Limits of the claim."""
        return CAUTIONS if self.level == "folds" else (TRACK_CAUTION, *CAUTIONS[1:])

    def peak_magnitude(self) -> Spread | None:
        """Highest change of flux of an event [AB mag]; `low` is the bright end."""
        from crossing.stars.photosphere import ab_magnitude

        if not self.sample.rate > 0:
            return None
        faint, middle, bright = (float(ab_magnitude(one)) for one in self.sample.quantiles("flux"))
        return Spread(median=middle, low=bright, high=faint)

    def distributions(self) -> dict[str, Spread | None]:
        """Spread over the events of what they and their stars are like."""
        names = {
            "peak_magnification": "magnification",
            "duration_days": "duration",
            "radius_rsun": "radius",
            "temperature_K": "temperature",
            "luminosity_lsun": "luminosity",
        }
        some = self.sample.rate > 0
        out: dict[str, Spread | None] = {"peak_magnitude": self.peak_magnitude()}
        return out | {key: Spread.of(self.sample.quantiles(one)) if some else None for key, one in names.items()}

    def to_dict(self) -> dict[str, Any]:
        """The whole document, JSON-able."""
        told = {name: None if one is None else one.to_dict() for name, one in self.distributions().items()}
        return {
            "campaign": self.campaign,
            "status": self.status,
            "flags": list(self.flags),
            "flag_meanings": self.flag_meanings,
            "level": self.level,
            "rule": self.rule.to_dict(),
            **self.per_year.to_dict(),
            "per_segment": [one.to_dict() for one in self.segments],
            "per_side": {name: one.to_dict() for name, one in self.sides.items()},
            "per_visit": {
                "in_progress": self.in_visit.to_dict(),
                "schedule": None if self.visits is None else self.visits.to_dict(),
            },
            "distributions": told,
            "types": self.sample.types(),
            "band": self.band,
            "beam_arcsec": self.beam_arcsec,
            "speed_kms": self.speed_kms.to_dict(),
            "transients": self.transients.to_dict(),
            "arc_masses": self.masses.to_dict(),
            "draws": self.draws,
            "cautions": list(self.cautions),
            "provenance": self.provenance,
        }

    def to_table(self) -> QTable:
        """One row a segment."""
        from astropy.table import QTable

        rows = []
        for one in self.segments:
            row: dict[str, Any] = {
                "segment": one.name,
                "side": one.side,
                "lam_t": one.lam_t.median,
                "magnification": one.magnification,
                "kappa_star": one.kappa_star,
                "critical_distance_arcsec": np.nan if one.distance is None else one.distance,
                "length_arcsec": one.length,
                "area_arcsec2": one.area,
            }
            for name in ("median", "low", "high"):
                row[f"events_per_year_{name}"] = getattr(one.per_year.expected, name)
            row["in_one_visit"] = one.in_visit.median
            row["in_schedule"] = np.nan if one.in_schedule is None else one.in_schedule.median
            rows.append(row)
        return QTable(
            rows=rows, meta={"campaign": self.campaign, "status": self.status, "cautions": list(self.cautions)}
        )

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the events a year and arcsecond along the arc, by side of the critical curve."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(6.4, 4.2), layout="constrained").add_subplot()
        known = all(one.distance is not None for one in self.segments)
        ends = np.cumsum([0.0, *(one.length for one in self.segments)])
        seen: set[str] = set()
        for number, one in enumerate(self.segments):
            middle = one.distance if known and one.distance is not None else 0.5 * (ends[number] + ends[number + 1])
            spread, colour = one.per_year.expected, _COLOURS[one.side]
            label = None if one.side in seen else one.side
            seen.add(one.side)
            ax.bar(
                middle,
                one.per_arcsec,
                0.96 * one.length,
                color=colour,
                alpha=0.45,
                hatch=_HATCHES[one.side],
                label=label,
            )
            ax.plot([middle, middle], [spread.low / one.length, spread.high / one.length], color="0.2", lw=1.2)
        if known:
            ax.axvline(0.0, color="0.2", ls=":", lw=1.0)
        ax.set_xlabel("distance to the critical curve [arcsec]" if known else "along the arc [arcsec]")
        ax.set_ylabel(r"events a year and arcsec (68% of the model)")
        ax.legend(title="side")
        return ax
