"""One number with its uncertainty, the same way everywhere."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr, ndtri

from crossing.errors import InputError

__all__ = ["FloatArray", "Shape", "Value"]

FloatArray = NDArray[np.float64]
Shape = Literal["exact", "normal", "uniform", "loguniform"]

# Draws stay this far from probabilities 0 and 1, where a normal quantile is infinite.
_EDGE = 1e-15


@dataclass(frozen=True, slots=True, kw_only=True)
class Value:
    """A number known exactly, as a normal distribution, or as a range.

    The unit is that of the record's field that holds it. Build one with `exact`, `normal`, `uniform` or
    `loguniform`.

    Raises
    ------
    InputError
        If the numbers are not finite, the error is not positive, or a range is empty or (log) not positive.
    """

    shape: Shape
    """``exact``, ``normal``, ``uniform`` or ``loguniform``."""
    a: float
    """The value (``exact``), the mean before truncation (``normal``), or the low end of the range."""
    b: float = 0.0
    """Nothing (``exact``), the standard deviation (``normal``), or the high end of the range."""
    lower: float = -math.inf
    """Where a normal distribution is cut off below, since physics allows nothing beyond."""
    upper: float = math.inf
    """Where a normal distribution is cut off above."""

    def __post_init__(self) -> None:
        if not (math.isfinite(self.a) and math.isfinite(self.b)):
            raise InputError(f"must be finite, got {self.a:g} and {self.b:g}")
        if self.shape == "normal":
            if self.b <= 0:
                raise InputError(f"error must be greater than 0, got {self.b:g}; give the bare value if it is exact")
            if not self.lower <= self.a <= self.upper:
                raise InputError(f"value must lie between {self.lower:g} and {self.upper:g}, got {self.a:g}")
        elif self.shape != "exact":
            if self.a >= self.b:
                raise InputError(f"low must be less than high, got {self.a:g} and {self.b:g}; swap or widen them")
            if self.shape == "loguniform" and self.a <= 0:
                raise InputError(f'low must be greater than 0 when scale = "log", got {self.a:g}')

    @classmethod
    def exact(cls, x: float) -> Value:
        """Return the number `x` without any uncertainty."""
        return cls(shape="exact", a=float(x))

    @classmethod
    def normal(cls, value: float, error: float, *, lower: float = -math.inf, upper: float = math.inf) -> Value:
        """Return a normal distribution, cut off at `lower` and `upper`."""
        return cls(shape="normal", a=float(value), b=float(error), lower=float(lower), upper=float(upper))

    @classmethod
    def uniform(cls, low: float, high: float) -> Value:
        """Return a distribution that is flat between `low` and `high`."""
        return cls(shape="uniform", a=float(low), b=float(high))

    @classmethod
    def loguniform(cls, low: float, high: float) -> Value:
        """Return a distribution whose logarithm is flat between those of `low` and `high`, both positive."""
        return cls(shape="loguniform", a=float(low), b=float(high))

    @property
    def is_exact(self) -> bool:
        """Whether there is no uncertainty."""
        return self.shape == "exact"

    @property
    def central(self) -> float:
        """The value, the midpoint of a range, or the geometric mean of a logarithmic one."""
        if self.shape == "uniform":
            return 0.5 * self.a + 0.5 * self.b
        if self.shape == "loguniform":
            return math.sqrt(self.a) * math.sqrt(self.b)
        return self.a

    @property
    def limits(self) -> tuple[float, float]:
        """Lowest and highest number that the value can take."""
        if self.shape == "exact":
            return self.a, self.a
        return (self.lower, self.upper) if self.shape == "normal" else (self.a, self.b)

    def quantile(self, p: ArrayLike) -> FloatArray:
        """Inverse of the cumulative distribution.

        Parameters
        ----------
        p : array_like
            Probabilities between 0 and 1, any shape.

        Returns
        -------
        ndarray
            Numbers in the unit of the value, of the shape of `p`.

        Raises
        ------
        InputError
            If a probability lies outside 0 to 1.
        """
        p = np.asarray(p, dtype=np.float64)
        if not np.all((p >= 0) & (p <= 1)):
            raise InputError("`p` must lie between 0 and 1")
        if self.shape == "exact":
            return np.full(p.shape, self.a)
        if self.shape == "uniform":
            return np.asarray(self.a * (1 - p) + self.b * p)
        if self.shape == "loguniform":
            return np.asarray(np.exp(math.log(self.a) * (1 - p) + math.log(self.b) * p))
        below, inside = self._mass()
        return np.asarray(np.clip(self.a + self.b * ndtri(below + inside * p), self.lower, self.upper))

    def sample(self, rng: np.random.Generator, size: int | tuple[int, ...]) -> FloatArray:
        """Draw independent numbers.

        Parameters
        ----------
        rng : numpy.random.Generator
            Source of randomness; an exact value leaves it untouched.
        size : int or tuple of int
            Shape of the result.

        Returns
        -------
        ndarray
            Numbers in the unit of the value.
        """
        if self.shape == "exact":
            return np.full(size, self.a)
        return self.quantile(rng.uniform(_EDGE, 1 - _EDGE, size))

    def log_density(self, x: ArrayLike) -> FloatArray:
        """Natural logarithm of the normalised probability density.

        Parameters
        ----------
        x : array_like
            Numbers in the unit of the value, any shape.

        Returns
        -------
        ndarray
            Log density per unit of the value; minus infinity where the value cannot be.

        Raises
        ------
        InputError
            If the value is exact: it has no density.
        """
        if self.shape == "exact":
            raise InputError("an exact value must not be asked for its density; treat it as a constant")
        x = np.asarray(x, dtype=np.float64)
        low, high = self.limits
        inside = (x >= low) & (x <= high)
        x = np.where(inside, x, self.central)
        if self.shape == "uniform":
            density = np.full(x.shape, -math.log(self.b - self.a))
        elif self.shape == "loguniform":
            density = -np.log(x) - math.log(math.log(self.b) - math.log(self.a))
        else:
            density = -0.5 * ((x - self.a) / self.b) ** 2 - math.log(self.b * math.sqrt(2 * math.pi) * self._mass()[1])
        return np.asarray(np.where(inside, density, -np.inf))

    def _mass(self) -> tuple[float, float]:
        """Probability of the whole normal distribution below `lower`, and between `lower` and `upper`."""
        below = float(ndtr((self.lower - self.a) / self.b))
        return below, float(ndtr((self.upper - self.a) / self.b)) - below

    def __str__(self) -> str:
        if self.shape == "exact":
            return f"{self.a:g}"
        if self.shape == "normal":
            return f"{self.a:g} +- {self.b:g}"
        return f"{self.a:g} to {self.b:g}" + (" (log)" if self.shape == "loguniform" else "")
