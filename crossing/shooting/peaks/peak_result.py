"""What a forecast of peak magnifications says, row by row."""

from __future__ import annotations

from dataclasses import dataclass, field
from html import escape
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

from crossing.shooting.peaks.peak_crossings import CrossingSample

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

__all__ = [
    "CAUTIONS",
    "FLAGS",
    "BandSize",
    "Example",
    "ExtendedRow",
    "ModelForecast",
    "PeakForecast",
    "PeakRate",
    "PeakRow",
    "Spread",
    "ToSee",
]

Array = NDArray[np.float64]

FLAGS: Final[dict[str, str]] = {
    "few_crossings": "the tracks met too few folds for the asked precision (`statistical_error`); allow more of them",
    "clipped_lens": "more than a tenth of the lens's uncertainty lies closer to the macro critical curve than a field "
    'of constant lam_t can serve; its nearest allowed value was used there; side = "pair" keeps the gradient',
    "near_macro_caustic": "the macro lens changes by more than a fifth within one Einstein radius of the source's "
    'path, and the field leaves that out; side = "pair" keeps it',
    "lost_images": "the solver lost images on some tracks, whose backgrounds may be too low",
}
"""Flags that make a forecast untrustworthy, with what they mean."""

CAUTIONS: Final[tuple[str, ...]] = (
    "Each fold is taken as straight and alone at its peak; `crowded` is the share of crossings with another fold "
    "within one diameter, whose peaks are rough and light curves not single folds.",
    "Rates count every fold crossing above the magnification once, at the mean speed; two folds close to each other "
    "count twice, smooth bumps at cusps that the centre misses do not count. A peak includes its background, which may "
    "be most of it near the macro critical curve.",
    "Closed forms leave out the images that take no part; a smooth fold hardly exists behind intracluster stars.",
    "Redshifts and the gradient enter by their central values; of a merging pair more than 60 Einstein radii inside "
    "the macro caustic, each image has fields of its own, and the other one adds its mean.",
    "Wave optics (0.003-0.016 solar radii at 1 micron) is negligible for stars; the lens's stars do not move.",
)
"""Limits of the claim, repeated in every output."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Spread:
    """Median and central 68% of a distribution."""

    median: float
    """Median."""
    low: float
    """16th percentile."""
    high: float
    """84th percentile."""

    @classmethod
    def of(cls, quantiles: Array, factor: float = 1.0) -> Spread:
        """Spread from the 16, 50 and 84% quantiles, times a factor."""
        low, median, high = (float(factor * one) for one in quantiles)
        return cls(median=median, low=low, high=high)

    def to_dict(self) -> dict[str, Any]:
        """As every estimate of the package."""
        return {"median": self.median, "low": self.low, "high": self.high, "bound": "two-sided"}


@dataclass(frozen=True, slots=True, kw_only=True)
class PeakRate:
    """How often peaks exceed a magnification."""

    mu: float
    """Magnification."""
    rate: float | None
    """Crossings per year above it, at the mean speed; None without motion."""
    error: float | None
    """Statistical standard error of the rate [1/yr]."""
    per_einstein: float
    """Crossings above it per Einstein radius of track."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ToSee:
    """What it takes to see a star in one band."""

    band: str
    """Band."""
    mu: float
    """Magnification at which the star reaches the depth."""
    rate: float | None
    """Peaks per year that reach it; None without motion or stars of the lens."""
    error: float | None
    """Statistical standard error of the rate [1/yr]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PeakRow:
    """Forecast for one stellar radius."""

    radius_rsun: float
    """Radius [Rsun]."""
    star: bool
    """Whether it is that of the event's star."""
    mu_peak_smooth: float | None
    """Peak at the smooth macro fold, both images; None without a gradient."""
    mu_peak_isolated: float | None
    """Peak of the pair at the caustic of one star of typical mass; None without stars."""
    mu_peak_isolated_range: tuple[float, float] | None
    """Central 68% of it over the spread of the macro lens."""
    mu_peak_scaling: float | None
    """The same by the published scaling |mu_r| |mu_t|^(3/4) (theta_E / R)^(1/2)."""
    mu_peak_saturated: float | None
    """The published scaling where stars overlap, with kappa_star in place of |lam_t|."""
    mu_peak_micro: Spread | None
    """Peaks of the field's own fold crossings, background included."""
    mu_peak_micro_error: tuple[float, float, float] | None
    """Relative statistical errors of its 16, 50 and 84% quantiles."""
    crossing_days: Spread | None
    """Days from first to last touch, speeds and angles by their share of crossings."""
    crossing_days_head_on: float | None
    """Days for motion along the normal at the median speed."""
    crowded: float | None
    """Share of crossings with another fold within one diameter."""
    rates: tuple[PeakRate, ...]
    """Rates above the magnifications."""
    to_see: tuple[ToSee, ...]
    """What it takes to see the star, band by band."""

    def to_dict(self) -> dict[str, Any]:
        """JSON of one row."""
        micro, days = self.mu_peak_micro, self.crossing_days
        return {
            "radius_rsun": self.radius_rsun,
            "star": self.star,
            "mu_peak_smooth": self.mu_peak_smooth,
            "mu_peak_isolated": self.mu_peak_isolated,
            "mu_peak_isolated_range": None
            if self.mu_peak_isolated_range is None
            else list(self.mu_peak_isolated_range),
            "mu_peak_scaling": self.mu_peak_scaling,
            "mu_peak_saturated": self.mu_peak_saturated,
            "mu_peak_micro": None if micro is None else micro.to_dict(),
            "mu_peak_micro_error": None if self.mu_peak_micro_error is None else list(self.mu_peak_micro_error),
            "crossing_days": None if days is None else days.to_dict(),
            "crossing_days_head_on": self.crossing_days_head_on,
            "crowded": self.crowded,
            "rate_per_year": [
                {"mu": one.mu, "rate": one.rate, "error": one.error, "per_einstein": one.per_einstein}
                for one in self.rates
            ],
            "to_see": [{"band": one.band, "mu": one.mu, "rate": one.rate, "error": one.error} for one in self.to_see],
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class ExtendedRow:
    """A source of galactic size at the same smooth caustic."""

    radius_kpc: float
    """Radius [kpc]."""
    mu_peak_smooth: float
    """Highest mean magnification of a uniform disc by the law of the fold."""
    mu_peak_within_reach: float
    """The same of the part within the law's reach alone."""


@dataclass(frozen=True, slots=True, kw_only=True)
class BandSize:
    """The corrugated band of micro-caustics along the macro critical curve."""

    width_arcsec: float
    """Full width on the sky, across the critical curve [arcsec]."""
    depth_arcsec: float
    """Depth in the source plane, along the normal of the macro caustic [arcsec]."""
    depth_pc: float
    """The same [pc]."""
    years: float | None
    """Years that the source takes through it, along the normal, at the median speed."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelForecast:
    """Forecast by one of several macro models."""

    name: str
    """Name."""
    weight: float
    """Weight, normalised."""
    lam_t: Spread
    """Eigenvalue along the stretch."""
    lam_r: Spread
    """Eigenvalue across it."""
    regime: str
    """Regime of the micro-caustics."""
    overlap: bool
    """Whether micro-caustics overlap."""
    band_width_arcsec: float | None
    """Full width of the corrugated band [arcsec]."""
    rows: tuple[PeakRow, ...]
    """One row a radius."""

    def to_dict(self) -> dict[str, Any]:
        """JSON of one model."""
        return {
            "name": self.name,
            "weight": self.weight,
            "lam_t": self.lam_t.to_dict(),
            "lam_r": self.lam_r.to_dict(),
            "regime": self.regime,
            "overlap": self.overlap,
            "band_width_arcsec": self.band_width_arcsec,
            "rows": [row.to_dict() for row in self.rows],
        }


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Example:
    """Light curve around one crossing of a simulated track."""

    name: str
    """Which one it is."""
    offset: Array = field(repr=False)
    """(n,) way of the centre since it was on the fold [theta_E]."""
    magnification: Array = field(repr=False)
    """(n,) total magnification of the disc."""
    fold: Array = field(repr=False)
    """(n,) the same by the law of one straight fold."""
    radius_rsun: float
    """Radius of the disc [Rsun]."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PeakForecast:
    """Result of `forecast_peaks`."""

    event: str
    """Name of the event."""
    images: int
    """Macro images meant: 1, or 2 for a merging pair."""
    lam_t: Spread
    """Eigenvalue along the stretch, over macro models and their spread."""
    lam_r: Spread
    """Eigenvalue across it."""
    kappa_star: float
    """Convergence in point masses."""
    typical_mass: float | None
    """Mass [Msun] of the isolated star."""
    regime: str
    """Most probable of ``smooth``, ``isolated``, ``overlapping``, ``saturated``."""
    sentence: str
    """The same in words."""
    regime_shares: dict[str, float]
    """Probability of each regime over the spread of lens and stars."""
    overlap: bool
    """Whether micro-caustics overlap here: a probability above one half."""
    overlap_probability: float
    """That probability."""
    overlap_kappa_star: float | None
    """kappa_star at which single caustics would just cover the source plane, median."""
    band: BandSize | None
    """The corrugated band; None without gradient or stars."""
    limb_darkening: float
    """Coefficient used."""
    limb_darkening_band: str | None
    """Band it belongs to; None for a uniform disc."""
    temperature_K: float | None
    """Temperature of the star for `to_see`; None where it follows from luminosity and radius, or is not known."""
    speed_kms: Spread | None
    """Effective speed, by share of crossings [km/s]."""
    mean_speed_kms: float | None
    """Mean effective speed, to which the rates belong [km/s]."""
    rsun_einstein: float
    """One solar radius at the source, in Einstein radii of one solar mass."""
    einstein_radius_uas: float
    """Angular Einstein radius of one solar mass [microarcsec]."""
    years_per_einstein: float | None
    """Years per Einstein radius at the mean speed."""
    rows: tuple[PeakRow, ...]
    """One row a radius."""
    models: tuple[ModelForecast, ...]
    """The same for each macro model, where there are several."""
    extended: tuple[ExtendedRow, ...]
    """Sources of galactic size; empty without a gradient."""
    crossings: int
    """Fold crossings that were used."""
    tracks: int
    """Tracks, each in a field of its own."""
    track_length: float
    """Their length [theta_E]."""
    crossings_per_einstein: float | None
    """Mean number of fold crossings per Einstein radius of track."""
    statistical_error: float | None
    """Largest relative standard error among quantiles and number of crossings, at the middle radius."""
    absent: dict[str, str]
    """What could not be told, and why."""
    flags: tuple[str, ...]
    """Names in `FLAGS` that apply."""
    provenance: dict[str, Any]
    """Versions, options and input hashes."""
    sample: CrossingSample | None = field(repr=False)
    """All crossings."""
    examples: tuple[Example, ...] = field(repr=False)
    """Light curves around a few of them."""

    @property
    def status(self) -> str:
        """``ok``, or the flags that apply."""
        return ", ".join(self.flags) or "ok"

    @property
    def flag_meanings(self) -> dict[str, str]:
        """The flags that apply, with what they mean."""
        return {name: FLAGS[name] for name in self.flags}

    def to_dict(self) -> dict[str, Any]:
        """The JSON document of ``crossing peak``."""
        band, names = self.band, ("typical_mass", "einstein_radius_uas", "years_per_einstein", "mean_speed_kms")
        return {
            "verb": "peak",
            "event": self.event,
            "status": self.status,
            "flags": list(self.flags),
            "flag_meanings": self.flag_meanings,
            "regime": self.regime,
            "sentence": self.sentence,
            "regime_shares": self.regime_shares,
            "overlap": self.overlap,
            "overlap_probability": self.overlap_probability,
            "overlap_kappa_star": self.overlap_kappa_star,
            "band_width_arcsec": None if band is None else band.width_arcsec,
            "band_depth_arcsec": None if band is None else band.depth_arcsec,
            "band_depth_pc": None if band is None else band.depth_pc,
            "band_crossing_years": None if band is None else band.years,
            "images": self.images,
            "lam_t": self.lam_t.to_dict(),
            "lam_r": self.lam_r.to_dict(),
            "kappa_star": self.kappa_star,
            **{name: getattr(self, name) for name in names},
            "speed_kms": None if self.speed_kms is None else self.speed_kms.to_dict(),
            "limb_darkening": self.limb_darkening,
            "limb_darkening_band": self.limb_darkening_band,
            "temperature_K": self.temperature_K,
            "rows": [row.to_dict() for row in self.rows],
            "models": [model.to_dict() for model in self.models],
            "extended": [
                {
                    "radius_kpc": one.radius_kpc,
                    "mu_peak_smooth": one.mu_peak_smooth,
                    "mu_peak_within_reach": one.mu_peak_within_reach,
                }
                for one in self.extended
            ],
            "crossings": self.crossings,
            "tracks": self.tracks,
            "track_length": self.track_length,
            "crossings_per_einstein": self.crossings_per_einstein,
            "statistical_error": self.statistical_error,
            "absent": self.absent,
            "cautions": list(CAUTIONS),
            "provenance": self.provenance,
        }

    def to_table(self) -> QTable:
        """One row a radius; rates in columns named after their magnification."""
        from astropy.table import QTable

        plain = ("mu_peak_smooth", "mu_peak_isolated", "mu_peak_scaling", "mu_peak_saturated")
        columns: dict[str, Any] = {"radius_rsun": [row.radius_rsun for row in self.rows]}
        columns |= {name: [_number(getattr(row, name)) for row in self.rows] for name in plain}
        for name in ("mu_peak_micro", "crossing_days"):
            for part in ("median", "low", "high"):
                columns[f"{name}_{part}"] = [_number(getattr(getattr(row, name), part, None)) for row in self.rows]
        columns["crowded"] = [_number(row.crowded) for row in self.rows]
        for k, one in enumerate(self.rows[0].rates):
            columns[f"rate_above_{one.mu:g}"] = [_number(row.rates[k].rate) for row in self.rows]
        for k, seen in enumerate(self.rows[0].to_see):
            columns[f"mu_to_see_{seen.band}"] = [_number(row.to_see[k].mu) for row in self.rows]
        table = QTable(columns)
        table["radius_rsun"].unit = "solRad"
        for name in table.colnames:
            unit = {"crossing_days": "d", "rate_above": "1 / yr"}.get(name.rsplit("_", 1)[0])
            if unit is not None:
                table[name].unit = unit
        table.meta = {"event": self.event, "status": self.status, "regime": self.sentence, "cautions": list(CAUTIONS)}
        return table

    def plot(self, ax: Axes | None = None) -> Axes:
        """Rate of peaks above a magnification, a curve for each of a few radii.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw; a new figure if None.
        """
        from crossing.shooting.peaks.peak_figure import plot_peaks

        return plot_peaks(self, ax)

    def _repr_html_(self) -> str:
        flag = "".join(f"<p><strong>{escape(name)}</strong>: {escape(FLAGS[name])}</p>" for name in self.flags)
        rows = "".join(
            f"<tr><td>{row.radius_rsun:g}</td><td>{_cell(row.mu_peak_smooth)}</td><td>{_cell(row.mu_peak_isolated)}</td>"
            f"<td>{_cell(getattr(row.mu_peak_micro, 'median', None))}</td>"
            f"<td>{_cell(getattr(row.crossing_days, 'median', None))}</td></tr>"
            for row in self.rows
        )
        return (
            f"<div>{flag}<p>{escape(self.event)}: {escape(self.sentence)}</p><table><tr><th>R [Rsun]</th>"
            f"<th>smooth fold</th><th>one star</th><th>star field, median</th><th>crossing [d]</th></tr>"
            f"{rows}</table></div>"
        )


def _number(value: float | None) -> float:
    return float("nan") if value is None else float(value)


def _cell(value: float | None) -> str:
    return "-" if value is None else f"{value:.3g}"
