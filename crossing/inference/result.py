"""What a crossing fit found, as plain frozen data."""

from __future__ import annotations

from dataclasses import dataclass, field
from html import escape
from typing import TYPE_CHECKING, Any, Final

import numpy as np

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes
    from numpy.typing import NDArray

    from crossing.inference.estimates import Estimate
    from crossing.inference.star import RadiusDrivers

__all__ = ["CAUTIONS", "FLAGS", "QUANTITIES", "BandCurve", "CrossingFit", "FittedRow", "MacroRadius", "ModelScore"]

FLAGS: Final[dict[str, str]] = {
    "not_converged": "the search or the integration stopped before it had settled; give more data or another model",
    "at_bound": "the best fit sits at an end of a prior's range; widen the range or doubt the model",
    "poor_fit": "no model describes the data (chi-squared too large); check the errors, or allow extra scatter",
    "prior_driven": "the radius time depends on its prior: the crossing is not resolved by these epochs",
    "no_crossing": "a constant source explains the data as well; there may be no event",
}
"""Flags that make a result untrustworthy, with what they mean."""

QUANTITIES: Final[dict[str, tuple[str, str]]] = {
    "caustic_time_mjd": ("d", "time when the star's centre is on the caustic (MJD)"),
    "second_caustic_time_mjd": ("d", "the same at the second fold of a pair, or for a binary's second star (MJD)"),
    "peak_time_mjd": ("d", "time of highest flux (MJD)"),
    "radius_time_days": ("d", "time in which the star's centre moves one radius along the caustic's normal"),
    "radius_rsun": ("solRad", "radius of the star"),
    "peak_magnification": ("", "magnification by the crossing pair at the peak that the fluxes require"),
    "temperature_K": ("K", "blackbody-equivalent temperature"),
    "luminosity_lsun": ("solLum", "bolometric luminosity"),
}
"""Estimated quantities in the order of every table: unit and meaning."""

CAUTIONS: Final[tuple[str, ...]] = (
    "The folds are taken as isolated and straight; in a network of caustics, simulated tracks are the better model.",
    "The lens is frozen: motions of its stars during the event are left out.",
    "The radius scales with the speed along the caustic's normal, which is a prior, not a measurement.",
    "The temperature is that of a blackbody with the same colours.",
    "A fit supports, and does not replace, expert judgement before scarce telescope time is spent.",
)
"""Limits of the claim, repeated in every output."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelScore:
    """How one model fared."""

    model: str
    """Name."""
    ln_evidence: float
    """Natural log of the evidence."""
    probability: float
    """Posterior probability among the models that were tried, equal before."""
    chi2: float
    """Chi-squared of the best fit."""
    dof: int
    """Degrees of freedom."""
    complete: bool
    """Whether the integration settled."""


@dataclass(frozen=True, slots=True, kw_only=True)
class FittedRow:
    """One observation beside the best fit."""

    time_mjd: float
    """Time [MJD]."""
    band: str
    """Band."""
    flux: float
    """Flux, or limit, above the fitted level [nJy]."""
    error: float
    """Its standard error [nJy]."""
    is_upper_limit: bool
    """Whether it is a limit."""
    model: float
    """Best-fit flux above the level [nJy]."""
    residual: float
    """(flux - model) / error; NaN for a limit."""


@dataclass(frozen=True, slots=True, kw_only=True)
class BandCurve:
    """Posterior band of the model in one filter, above the reference level."""

    band: str
    """Band."""
    time_mjd: NDArray[np.float64]
    """(n,) times [MJD]."""
    best: NDArray[np.float64]
    """(n,) best fit [nJy]."""
    quantiles: NDArray[np.float64]
    """(5, n) 2.5, 16, 50, 84 and 97.5 percentiles [nJy]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MacroRadius:
    """Radius of the star under one of several macro models."""

    name: str
    """Name of the macro model."""
    weight: float
    """Its weight, normalised."""
    radius_rsun: Estimate
    """Radius [Rsun]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CrossingFit:
    """Result of `fit_crossing`."""

    event: str
    """Name of the event, or of the light curve."""
    model: str
    """Model that the estimates belong to."""
    orientation: dict[str, float]
    """Probability of each orientation (or other discrete alternative) of the model."""
    caustic_time_mjd: Estimate | None
    """Time when the star's centre is on the caustic; the first one of a pair [MJD]."""
    second_caustic_time_mjd: Estimate | None
    """The same at the second fold of a pair, or for the second star of a binary [MJD]."""
    peak_time_mjd: Estimate | None
    """Time of highest flux [MJD]."""
    radius_time_days: Estimate | None
    """Time in which the star's centre moves one radius along the caustic's normal [d]."""
    radius_rsun: Estimate | None
    """Radius [Rsun]; needs the motion."""
    peak_magnification: Estimate | None
    """Magnification by the crossing pair at the peak that the fluxes require; needs motion, colours and redshift."""
    temperature_K: Estimate | None
    """Blackbody-equivalent temperature [K]; needs two bands, or a prior."""
    luminosity_lsun: Estimate | None
    """Bolometric luminosity [Lsun]."""
    amplitudes: dict[str, Estimate]
    """Flux that the crossing adds at its peak, per band [nJy]."""
    levels: dict[str, Estimate]
    """Reference levels [nJy]."""
    chi2: float
    """Chi-squared of the best fit."""
    dof: int
    """Degrees of freedom."""
    p_value: float
    """Probability of a larger chi-squared."""
    ln_evidence: float
    """Natural log of the model's evidence."""
    scores: tuple[ModelScore, ...]
    """All models that were tried, best first."""
    scatter: dict[str, float]
    """Posterior probability of each extra scatter, in median errors."""
    drivers: RadiusDrivers | None
    """What the radius interval is driven by."""
    macro_models: tuple[MacroRadius, ...]
    """Radius under each macro model where several were given."""
    converged: bool
    """Whether search and integration settled."""
    flags: tuple[str, ...]
    """Names in `FLAGS` that apply."""
    effective_draws: float
    """Effective number of draws behind the star's properties."""
    priors: dict[str, str]
    """Priors in words."""
    provenance: dict[str, Any]
    """Versions, seed and input hashes."""
    best: dict[str, float]
    """Best-fit nonlinear parameters."""
    rows: tuple[FittedRow, ...] = field(repr=False)
    """The observations."""
    curves: tuple[BandCurve, ...] = field(repr=False)
    """Posterior bands for figures."""
    samples: dict[str, NDArray[np.float64]] = field(repr=False)
    """Equal-weight posterior samples by name."""

    @property
    def status(self) -> str:
        """``ok``, or the flags that apply."""
        return ", ".join(self.flags) or "ok"

    @property
    def flag_meanings(self) -> dict[str, str]:
        """The flags that apply, with what they mean."""
        return {name: FLAGS[name] for name in self.flags}

    @property
    def estimates(self) -> dict[str, Estimate | None]:
        """The estimates by the names in `QUANTITIES`; None where data or event file do not give one."""
        return {name: getattr(self, name) for name in QUANTITIES}

    def to_dict(self) -> dict[str, Any]:
        """The JSON document of ``crossing fit``."""
        estimates = {name: None if one is None else one.to_dict() for name, one in self.estimates.items()}
        return {
            "verb": "fit",
            "event": self.event,
            "status": self.status,
            "converged": self.converged,
            "flags": list(self.flags),
            "flag_meanings": self.flag_meanings,
            "model": self.model,
            "orientation": self.orientation,
            **estimates,
            "amplitude_njy": {band: one.to_dict() for band, one in self.amplitudes.items()},
            "level_njy": {name: one.to_dict() for name, one in self.levels.items()},
            "chi2": self.chi2,
            "dof": self.dof,
            "p_value": self.p_value,
            "ln_evidence": self.ln_evidence,
            "candidates": [
                {
                    "model": score.model,
                    "ln_evidence": score.ln_evidence,
                    "probability": score.probability,
                    "chi2": score.chi2,
                    "dof": score.dof,
                    "complete": score.complete,
                }
                for score in self.scores
            ],
            "extra_scatter": self.scatter,
            "best_fit": self.best,
            "radius_drivers": None
            if self.drivers is None
            else {
                "photometry": self.drivers.photometry,
                "speed": self.drivers.speed,
                "angle": self.drivers.angle,
                "prior_shift": self.drivers.prior_shift,
            },
            "models": [
                {"name": one.name, "weight": one.weight, "radius_rsun": one.radius_rsun.to_dict()}
                for one in self.macro_models
            ],
            "effective_draws": self.effective_draws,
            "priors": self.priors,
            "cautions": list(CAUTIONS),
            "provenance": self.provenance,
        }

    def to_table(self) -> QTable:
        """Estimates as a table: quantity, median, low, high, bound, 95% limit, unit, meaning."""
        from astropy.table import QTable

        names = [name for name in QUANTITIES if self.estimates.get(name) is not None]
        found = [one for name in names if (one := self.estimates[name]) is not None]
        table = QTable(
            {
                "quantity": np.array(names, dtype=str),
                "median": np.array([one.median for one in found], dtype=float),
                "low": np.array([one.low for one in found], dtype=float),
                "high": np.array([one.high for one in found], dtype=float),
                "bound": np.array([one.bound for one in found], dtype=str),
                "limit_95": np.array([np.nan if one.limit is None else one.limit for one in found], dtype=float),
                "unit": np.array([QUANTITIES[name][0] for name in names], dtype=str),
                "meaning": np.array([QUANTITIES[name][1] for name in names], dtype=str),
            }
        )
        table.meta = {"event": self.event, "model": self.model, "status": self.status, "cautions": list(CAUTIONS)}
        return table

    def samples_table(self) -> QTable:
        """Posterior samples, one column a quantity."""
        from astropy.table import QTable

        table = QTable(dict(self.samples))
        table.meta = {"event": self.event, "model": self.model, "status": self.status}
        return table

    def rows_table(self) -> QTable:
        """Observations beside the best fit: time, band, flux above the level, error, limit, model, residual."""
        from astropy.table import QTable

        names = ("time_mjd", "band", "flux", "error", "is_upper_limit", "model", "residual")
        table = QTable({name: [getattr(row, name) for row in self.rows] for name in names})
        for name in ("flux", "error", "model"):
            table[name].unit = "nJy"
        table.meta = {"event": self.event, "model": self.model, "status": self.status}
        return table

    def plot(self, ax: Axes | None = None) -> Axes:
        """Light curve with the posterior band of the model.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw; a new figure if None.
        """
        from crossing.inference.figure import plot_light_curve

        return plot_light_curve(self, ax)

    def _repr_html_(self) -> str:
        flag = "".join(f"<p><strong>{escape(name)}</strong>: {escape(FLAGS[name])}</p>" for name in self.flags)
        rows = "".join(
            f"<tr><th style='text-align:left'>{escape(name)}</th><td>{escape(one.text(QUANTITIES[name][0]))}</td></tr>"
            for name in QUANTITIES
            if (one := self.estimates.get(name)) is not None
        )
        head = f"<p>{escape(self.event)}: {escape(self.model)}, chi2 {self.chi2:.1f} for {self.dof} dof</p>"
        return f"<div>{flag}{head}<table>{rows}</table></div>"
