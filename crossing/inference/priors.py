"""Priors of a crossing fit: explicit, physical, and printed with every result."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from crossing.errors import InputError
from crossing.stars.upper_luminosity import SOFTNESS_DEX

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from crossing.inference.data import FitData

__all__ = ["FitPriors", "Range"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Range:
    """Uniform prior of one parameter of a shape (which may be a logarithm)."""

    name: str
    """What the parameter is, with ``ln`` in front of a logarithm."""
    low: float
    """Lower end."""
    high: float
    """Upper end."""

    @property
    def width(self) -> float:
        """Length of the range."""
        return self.high - self.low

    def scale(self, unit: NDArray[np.float64]) -> NDArray[np.float64]:
        """Parameter values at the fractions `unit` of the range."""
        return self.low + self.width * unit


@dataclass(frozen=True, slots=True, kw_only=True)
class FitPriors:
    """Ranges of the priors, all uniform in the quantity or its logarithm.

    Notes
    -----
    The default radius times are those of stars of 1 to 1000 solar radii at effective speeds of 2000 to 100 km/s.
    """

    radius_time: tuple[float, float] = (0.004, 80.0)
    """Radius time [d], log-uniform."""
    time_margin: float | None = None
    """How far beyond the data the caustic may be crossed [d]; a quarter of the span, at least 5 d, if None."""
    amplitude: tuple[float, float] = (0.01, 100.0)
    """Amplitude, log-uniform, from a multiple of the smallest error to one of the largest flux spread."""
    strength_ratio: tuple[float, float] = (0.2, 5.0)
    """Ratio of the second fold's strength to the first's in a pair, log-uniform."""
    separation: tuple[float, float] = (0.05, 1000.0)
    """Time between the two folds of a pair [d], log-uniform; cut at the length of the time window."""
    bump_time: tuple[float, float] = (0.05, 300.0)
    """Crossing time of a smooth bump [d], log-uniform."""
    temperature: tuple[float, float] = (2500.0, 50000.0)
    """Blackbody-equivalent temperature [K], log-uniform."""
    radius_ratio: tuple[float, float] = (0.1, 1.0)
    """Radius of a binary's fainter star over that of its primary, log-uniform."""
    delay: float = 30.0
    """Largest delay between the two stars of a binary, either way [d], uniform."""
    host_dust: float = 0.3
    """Mean of the exponential prior of the dust in the star's galaxy, A(V) [mag] (Cardelli et al. 1989, R_V = 3.1)."""
    model_error: float = 0.15
    """How far a star's colours are from a blackbody's, Gaussian, per band [mag] (common practice, no source)."""

    def __post_init__(self) -> None:
        for name in ("radius_time", "amplitude", "strength_ratio", "separation", "bump_time", "temperature"):
            low, high = getattr(self, name)
            if not (0.0 < low < high < np.inf):
                msg = f"`{name}` must be a range of positive numbers, low before high, got ({low}, {high})"
                raise InputError(msg, where="priors")
        for name in ("host_dust", "model_error", "delay"):
            if not 0.0 < getattr(self, name) < np.inf:
                msg = f"`{name}` must be a positive number, got {getattr(self, name)}"
                raise InputError(msg, where="priors")

    def window(self, data: FitData) -> Range:
        """Range of times at which a caustic may be crossed."""
        first, last = data.span
        margin = max(0.25 * (last - first), 5.0) if self.time_margin is None else self.time_margin
        return Range(name="time", low=first - margin, high=last + margin)

    def log_range(self, name: str) -> Range:
        """Range of the natural logarithm of one of the fields."""
        low, high = getattr(self, name)
        return Range(name=f"ln {name}", low=float(np.log(low)), high=float(np.log(high)))

    def amplitude_range(self, data: FitData) -> tuple[float, float]:
        """Lowest and highest amplitude in nJy."""
        spread = float(np.ptp(data.flux)) + float(np.max(np.abs(data.flux)))
        return self.amplitude[0] * float(data.sigma.min()), self.amplitude[1] * max(spread, float(data.sigma.max()))

    def to_dict(self, data: FitData) -> dict[str, Any]:
        """The priors in words, with the numbers that they have for these data."""
        window, amplitude = self.window(data), self.amplitude_range(data)
        zero = data.time_zero
        return {
            "caustic_time_mjd": f"uniform {zero + window.low:.3f} to {zero + window.high:.3f}",
            "radius_time_days": _log_uniform(self.radius_time),
            "amplitude_njy": _log_uniform(amplitude),
            "orientation": "entering and leaving equally probable",
            "pair_separation_days": _log_uniform((self.separation[0], min(self.separation[1], window.width))),
            "pair_strength_ratio": _log_uniform(self.strength_ratio),
            "bump_time_days": _log_uniform(self.bump_time),
            "temperature_K": _log_uniform(self.temperature),
            "host_dust_a_v_mag": f"exponential, mean {self.host_dust:g} (Cardelli, Clayton & Mathis 1989, R_V = 3.1)",
            "upper_luminosity": f"log L/Lsun below 5.8 (cool) to 6.5 (hot), soft by {SOFTNESS_DEX:g} dex "
            "(Humphreys & Davidson 1979), where colours and motion are known",
            "blackbody_model_error_mag": f"Gaussian, {self.model_error:g} a band",
            "reference_levels": "Gaussian, flat over the data (free), non-negative (total fluxes), or the noise of "
            "the reference image",
        }


def _log_uniform(ends: tuple[float, float]) -> str:
    return f"log-uniform {ends[0]:.4g} to {ends[1]:.4g}"
