"""Pieces that mass functions are made of: closed-form integrals, densities and quantiles.

All of it is in logarithms, so that no power and no range runs out of floating-point numbers on the way.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import log, pi
from typing import Final, Protocol, TypeAlias

import numpy as np
import numpy.typing as npt
from scipy.special import exprel, log_ndtr, ndtri_exp

from crossing.errors import InputError

__all__ = ["LogNormalPiece", "MassPiece", "PointPiece", "PowerLawPiece"]

Array: TypeAlias = npt.NDArray[np.float64]

_LN_10: Final = log(10)
_LN_ROOT_2PI: Final = log(2 * pi) / 2
# Below this exponent the plain form of a power law's quantile keeps its digits, above it the logarithmic one.
_SMALL_EXPONENT: Final = 1.0


class MassPiece(Protocol):
    """What a mass function needs of each of its pieces; N is a number of stars of any common scale."""

    @property
    def low(self) -> float:
        """Lowest mass [Msun]."""

    @property
    def high(self) -> float:
        """Highest mass [Msun]."""

    def log_integral(self, power: float) -> float:
        """ln of the integral of m**power dN over the piece."""

    def log_density(self, mass: Array) -> Array:
        """ln of dN/dm at masses [Msun] inside the piece."""

    def quantile(self, fraction: Array) -> Array:
        """Masses [Msun] below which the given fractions (0 to 1) of the piece's stars lie."""

    def to_dict(self) -> dict[str, object]:
        """Shape and parameters, JSON-able, without the scale of N."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PointPiece:
    """Stars of one mass."""

    mass: float
    """The mass [Msun]."""

    @property
    def low(self) -> float:
        """The mass [Msun]."""
        return self.mass

    @property
    def high(self) -> float:
        """The mass [Msun]."""
        return self.mass

    def log_integral(self, power: float) -> float:
        """power * ln(mass)."""
        return power * log(self.mass)

    def log_density(self, mass: Array) -> Array:
        """Refuse: there is no density.

        Raises
        ------
        InputError
            Always.
        """
        raise InputError("a single mass must not be asked for its density; treat it as a constant")

    def quantile(self, fraction: Array) -> Array:
        """The one mass [Msun], whatever the fraction."""
        return np.full(np.shape(fraction), self.mass)

    def to_dict(self) -> dict[str, object]:
        """Shape and parameter."""
        return {"shape": "single", "mass_msun": self.mass}


@dataclass(frozen=True, slots=True, kw_only=True)
class PowerLawPiece:
    """dN/dm = exp(log_scale) * m**(-slope).

    Notes
    -----
    With q = p + 1 - slope the integral of m**p dN from a to b is (b**q - a**q) / q, or ln(b/a) for q = 0. It is
    smooth through q = 0 as c**q L exprel(-abs(q) L), with L = ln(b/a), exprel(x) = (exp(x) - 1) / x, and c = b for
    q > 0, else a.
    """

    low: float
    """Lowest mass [Msun]."""
    high: float
    """Highest mass [Msun]."""
    slope: float
    """Slope; 2.35 is that of Salpeter."""
    log_scale: float = 0.0
    """ln(dN/dm) at 1 Msun."""

    @property
    def _log_width(self) -> float:
        # Keeps its digits when the two masses are close.
        return float(np.log1p((self.high - self.low) / self.low))

    def log_integral(self, power: float) -> float:
        """ln of the integral of m**power dN over the piece."""
        exponent, width = power + 1 - self.slope, self._log_width
        anchor = self.high if exponent > 0 else self.low
        return self.log_scale + exponent * log(anchor) + log(width) + log(exprel(-abs(exponent) * width))

    def log_density(self, mass: Array) -> Array:
        """ln of dN/dm at masses [Msun] inside the piece."""
        return np.asarray(self.log_scale - self.slope * np.log(mass))

    def quantile(self, fraction: Array) -> Array:
        """Masses [Msun] below which the given fractions of the piece's stars lie.

        Notes
        -----
        (m/a)**q = 1 - f + f (b/a)**q with q = 1 - slope, and ln(m/a) = f ln(b/a) for q = 0.
        """
        exponent = (1 - self.slope) * self._log_width
        if exponent == 0:
            step = fraction
        elif abs(exponent) < _SMALL_EXPONENT:
            step = np.log1p(fraction * np.expm1(exponent)) / exponent
        else:
            step = _log_mean(fraction, 0.0, exponent) / exponent
        return np.clip(self.low * np.exp(self._log_width * step), self.low, self.high)

    def to_dict(self) -> dict[str, object]:
        """Shape and parameters."""
        return {"shape": "power law", "mass_range_msun": [self.low, self.high], "slope": self.slope}


@dataclass(frozen=True, slots=True, kw_only=True)
class LogNormalPiece:
    """dN/dlog10(m) = exp(log_scale) * exp(-(log10 m - log10 median)**2 / (2 width_dex**2)).

    Notes
    -----
    With s = width_dex ln 10 and x = ln(m / median) / s the integral of m**p dN is
    exp(log_scale) sqrt(2 pi) width_dex median**p exp(p**2 s**2 / 2) [Phi(x_high - p s) - Phi(x_low - p s)], Phi the
    normal distribution (1 + erf(x / sqrt 2)) / 2.
    """

    low: float
    """Lowest mass [Msun]."""
    high: float
    """Highest mass [Msun]."""
    median: float
    """Median [Msun] in number before the range cuts it."""
    width_dex: float
    """Standard deviation of log10(mass) [dex] before the range cuts it."""
    log_scale: float = 0.0
    """ln(dN/dlog10 m) at the median."""

    @property
    def _sigma(self) -> float:
        return self.width_dex * _LN_10

    def _limits(self, shift: float = 0.0) -> tuple[float, float, bool]:
        """Ends in standard deviations less `shift`, mirrored to the side where Phi is small, and whether they were."""
        low, high = (log(mass / self.median) / self._sigma - shift for mass in (self.low, self.high))
        return (-high, -low, True) if low + high > 0 else (low, high, False)

    def log_integral(self, power: float) -> float:
        """ln of the integral of m**power dN over the piece."""
        shift = power * self._sigma
        low, high, _ = self._limits(shift)
        at_low, at_high = float(log_ndtr(low)), float(log_ndtr(high))
        with np.errstate(divide="ignore"):  # a piece as narrow as rounding holds no stars
            inside = float(np.log(-np.expm1(at_low - at_high)))
        scale = self.log_scale + _LN_ROOT_2PI + log(self.width_dex)
        return scale + power * log(self.median) + shift**2 / 2 + at_high + inside

    def log_density(self, mass: Array) -> Array:
        """ln of dN/dm at masses [Msun] inside the piece."""
        x = np.log(mass / self.median) / self._sigma
        return np.asarray(self.log_scale - x**2 / 2 - np.log(mass * _LN_10))

    def quantile(self, fraction: Array) -> Array:
        """Masses [Msun] below which the given fractions of the piece's stars lie: Phi is linear in the fraction."""
        low, high, mirrored = self._limits()
        share = 1 - fraction if mirrored else fraction
        x = ndtri_exp(_log_mean(share, float(log_ndtr(low)), float(log_ndtr(high))))
        # Where Phi is within rounding of 1 its quantile is infinite.
        x = np.clip(x, low, high)
        mass = self.median * np.exp(self._sigma * (-x if mirrored else x))
        return np.clip(mass, self.low, self.high)

    def to_dict(self) -> dict[str, object]:
        """Shape and parameters."""
        return {
            "shape": "log-normal",
            "mass_range_msun": [self.low, self.high],
            "median_mass_msun": self.median,
            "width_dex": self.width_dex,
        }


def _log_mean(fraction: Array, at_zero: float, at_one: float) -> Array:
    """ln((1 - f) exp(at_zero) + f exp(at_one))."""
    with np.errstate(divide="ignore"):
        return np.logaddexp(np.log1p(-fraction) + at_zero, np.log(fraction) + at_one)
