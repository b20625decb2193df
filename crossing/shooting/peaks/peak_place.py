"""Closed forms at the place of an event, over the spread of its macro lenses."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from crossing.optics.peaks import isolated_peak, saturated_peak, scaling_peak, smooth_peak
from crossing.optics.regimes import (
    Regime,
    band_depth,
    band_half_width,
    name_regimes,
    overlap_convergence,
    regime,
    smooth_limit,
)
from crossing.optics.scales import LensScales
from crossing.shooting.peaks.peak_crossings import weighted_quantiles
from crossing.shooting.peaks.peak_lens import MacroChoice, typical_mass

__all__ = ["Place", "place_of"]

Array = NDArray[np.float64]

_CERTAIN = 0.995


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Place:
    """Possible lenses, each with what closed forms say; all arrays have the shape (n,), NaN where they say nothing."""

    weight: Array
    """Weights of the lenses."""
    lam_t: Array
    """Eigenvalue along the stretch."""
    lam_r: Array
    """Eigenvalue across it."""
    kappa_star: Array
    """Convergence in point masses."""
    clipped: Array
    """1 where the star field has a larger |lam_t|, else 0."""
    macro_change: Array
    """Relative change of lam_t within one theta_E of the source's path that the star field leaves out."""
    smooth: Array
    """Peak at the smooth fold of a star of one solar radius."""
    isolated: Array
    """Peak at one star's caustic of a disc of radius one theta_E."""
    scaling: Array
    """The same by the published scaling."""
    saturated: Array
    """The same in a network of caustics."""
    overlap_kappa_star: Array
    """Convergence at which single caustics would just cover the source plane."""
    smooth_below: Array
    """Convergence up to which the macro fold stays smooth."""
    band_width: Array
    """Full width of the corrugated band on the sky [arcsec]."""
    band_depth: Array
    """Its depth in the source plane [arcsec]."""

    @classmethod
    def pooled(cls, places: Sequence[Place]) -> Place:
        """All lenses of several places."""
        joined: dict[str, Any] = {
            one.name: np.concatenate([getattr(place, one.name) for place in places]) for one in fields(cls)
        }
        return cls(**joined)

    def median(self, values: Array) -> float | None:
        """Weighted median of what is known; None if nothing is."""
        known = np.isfinite(values)
        return float(weighted_quantiles(values[known], self.weight[known], (0.5,))[0]) if known.any() else None

    def range(self, values: Array) -> tuple[float, float] | None:
        """Central 68% of what is known; None if nothing is."""
        known = np.isfinite(values)
        if not known.any():
            return None
        low, high = weighted_quantiles(values[known], self.weight[known], (0.16, 0.84))
        return float(low), float(high)

    def share(self, condition: Array | NDArray[np.bool_]) -> float:
        """Share of the weight for which a condition holds."""
        return float(self.weight[np.asarray(condition, dtype=np.bool_)].sum() / self.weight.sum())

    @property
    def names(self) -> NDArray[np.str_]:
        """Regime of each lens."""
        return name_regimes(self.kappa_star, self.lam_t, self.lam_r, self.smooth_below)

    @property
    def regime_shares(self) -> dict[str, float]:
        """Probability of each regime that has one."""
        names = self.names
        shares = {name: self.share(names == name) for name in ("smooth", "isolated", "overlapping", "saturated")}
        return {name: share for name, share in shares.items() if share > 0.0}

    @property
    def overlap(self) -> float:
        """Probability that micro-caustics overlap."""
        return self.share(np.isin(self.names, ("overlapping", "saturated")))

    @property
    def regime(self) -> Regime:
        """The most probable regime, for the lens closest to the medians among those that have it."""
        shares, names = self.regime_shares, self.names
        best = max(shares, key=lambda name: shares[name])
        away = np.abs(self.lam_t - (self.median(self.lam_t) or 0.0)) / (np.ptp(self.lam_t) or 1.0)
        away += np.abs(self.kappa_star - (self.median(self.kappa_star) or 0.0)) / (np.ptp(self.kappa_star) or 1.0)
        one = int(np.argmin(np.where(names == best, away, np.inf)))
        numbers = (self.kappa_star, self.lam_t, self.lam_r, self.smooth_below)
        return regime(*(float(part[one]) for part in numbers))

    @property
    def sentence(self) -> str:
        """The regime in words, with the probabilities where it is not certain."""
        found, shares = self.regime, self.regime_shares
        if shares[found.name] >= _CERTAIN:
            return found.sentence
        listed = ", ".join(f"{name} {share:.2f}" for name, share in shares.items())
        return f"{found.sentence} (Over the spread of lens models and stars: {listed}.)"


def place_of(choice: MacroChoice, scales: LensScales, count: int, seed: int, limb_darkening: float) -> Place:
    """Closed forms for one macro model.

    Parameters
    ----------
    choice : MacroChoice
        The model.
    scales : LensScales
        Distances.
    count : int
        Number of draws, where something is uncertain.
    seed : int
        Seed of the draws.
    limb_darkening : float
        Coefficient of the disc.
    """
    draws = choice.draws(1 if choice.certain else count, seed)
    lam_t, lam_r = np.array([one.lam_t for one in draws]), np.array([one.lens.lam_r for one in draws])
    kappa_star = np.array([one.kappa_star for one in draws])
    nothing = np.full(len(draws), np.nan)
    mass = typical_mass(choice.populations) if choice.populations else None
    smooth, below, width, depth, change = nothing, np.zeros(len(draws)), nothing, nothing, np.zeros(len(draws))
    if choice.fold is not None:
        fold, theta_E = choice.fold, scales.einstein_radius_arcsec
        smooth = np.full(len(draws), float(smooth_peak(1.0, fold.strength, scales, limb_darkening)))
        below = np.full(len(draws), float(smooth_limit(fold.rate, theta_E, mass or 1.0)))
        width = 2.0 * band_half_width(kappa_star, np.hypot(*fold.gradient))
        depth = band_depth(kappa_star, fold.rate)
        if choice.lens.gradient is None:
            with np.errstate(divide="ignore"):
                change = fold.rate * theta_E / lam_t**2
    return Place(
        weight=np.full(len(draws), choice.weight / len(draws)),
        lam_t=lam_t,
        lam_r=lam_r,
        kappa_star=kappa_star,
        clipped=np.array([float(one.clipped) for one in draws]),
        macro_change=change,
        smooth=smooth,
        isolated=nothing if mass is None else _isolated(lam_t, lam_r, mass, limb_darkening),
        scaling=nothing if mass is None else scaling_peak(1.0, lam_t, lam_r, mass),
        saturated=nothing if mass is None else saturated_peak(1.0, kappa_star, lam_r, mass),
        overlap_kappa_star=_overlap(lam_t, lam_r),
        smooth_below=below,
        band_width=nothing if mass is None else width,
        band_depth=nothing if mass is None else depth,
    )


def _isolated(lam_t: Array, lam_r: Array, mass: float, limb_darkening: float) -> Array:
    """Peaks where one star has a regular caustic; NaN elsewhere."""
    out = np.full(len(lam_t), np.nan)
    regular = (lam_t != 0.0) & (np.abs(lam_t) != np.abs(lam_r)) & ((lam_t > 0.0) | (lam_r > 0.0))
    out[regular] = isolated_peak(1.0, lam_t[regular], lam_r[regular], mass, limb_darkening)
    return out


def _overlap(lam_t: Array, lam_r: Array) -> Array:
    out = np.full(len(lam_t), np.nan)
    out[lam_t != 0.0] = overlap_convergence(lam_t[lam_t != 0.0], lam_r[lam_t != 0.0])
    return out
