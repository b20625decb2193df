"""Weighted draws turned into medians with 68% intervals, also of numbers that may be infinite."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal, TypeAlias

import numpy as np
import numpy.typing as npt

__all__ = ["Interval", "axis_interval", "interval", "reciprocal", "weighted_quantiles"]

Array: TypeAlias = npt.NDArray[np.float64]

_SHARES = (0.16, 0.5, 0.84)


@dataclass(frozen=True, slots=True, kw_only=True)
class Interval:
    """Median and central 68% of a quantity, or a limit where it has no end on one side."""

    median: float
    """Median."""
    low: float | None
    """16th percentile; None where `bound` is ``upper``."""
    high: float | None
    """84th percentile; None where `bound` is ``lower``."""
    bound: Literal["two-sided", "upper", "lower"] = "two-sided"
    """``lower``: larger than `low` with a probability of 84%, and nothing more is known; ``upper``: the reverse."""

    def to_dict(self) -> dict[str, Any]:
        """As every estimate of the package."""
        return {"median": self.median, "low": self.low, "high": self.high, "bound": self.bound}


def weighted_quantiles(values: Array, weight: Array, shares: tuple[float, ...] = _SHARES) -> tuple[float, ...]:
    """Smallest values that at least the given shares of the weight do not exceed."""
    order = np.argsort(values, kind="stable")
    reached = np.cumsum(weight[order])
    # A share of the weight that rounding misses must not pick the next value.
    index = np.searchsorted(reached, np.array(shares) * reached[-1] * (1 - 1e-12))
    return tuple(float(values[order[k]]) for k in np.minimum(index, len(values) - 1))


def interval(values: Array, weight: Array) -> Interval | None:
    """Median and central 68% of the draws that are numbers; None if one of the three is not finite.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Draws; not a number where the quantity is not known.
    weight : ndarray, shape (n,)
        Their weights.
    """
    known = ~np.isnan(values)
    if not known.any():
        return None
    low, median, high = weighted_quantiles(values[known], weight[known])
    if not np.all(np.isfinite([low, median, high])):
        return None
    return Interval(median=median, low=low, high=high)


def reciprocal(values: Array, weight: Array) -> Interval | None:
    """Interval of 1/x from draws of x, which may pass through zero.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Draws of x.
    weight : ndarray, shape (n,)
        Their weights.

    Returns
    -------
    Interval or None
        Where the central 68% of x have one sign, the inverse of their ends. Otherwise 1/x has no end: the sign is that
        of the larger weight, the median that of its size, and the limit is exceeded in size with a probability of 84%.
        None where it is infinite for half of the weight or more.
    """
    known = ~np.isnan(values)
    if not known.any():
        return None
    values, weight = values[known], weight[known]
    low, median, high = weighted_quantiles(values, weight)
    if low * high > 0:
        return Interval(median=1 / median, low=1 / high, high=1 / low)
    middle, large = weighted_quantiles(np.abs(values), weight, (0.5, 0.84))
    if middle == 0:
        return None
    smallest, middle = 1 / large, 1 / middle
    if weight[values > 0].sum() >= weight[values < 0].sum():
        return Interval(median=middle, low=smallest, high=None, bound="lower")
    return Interval(median=-middle, low=None, high=-smallest, bound="upper")


def axis_interval(degrees: Array, weight: Array) -> Interval | None:
    """Interval of the direction of an axis without an arrow [deg]; its median lies between 0 and 180."""
    known = ~np.isnan(degrees)
    if not known.any():
        return None
    degrees, weight = degrees[known], weight[known]
    mean = np.degrees(np.angle(np.sum(weight * np.exp(2j * np.radians(degrees))))) / 2
    # Away from the mean by less than a right angle, so that quantiles do not wrap.
    low, median, high = weighted_quantiles((degrees - mean + 90) % 180 - 90, weight)
    turn = (mean + median) % 180 - median
    return Interval(median=turn + median, low=turn + low, high=turn + high)
