"""Posterior samples turned into intervals, and into one-sided limits where that is all the data give."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

Bound = Literal["two-sided", "upper", "lower"]
"""Which side of an interval the data close."""

__all__ = ["Bound", "Estimate", "bound_of", "edge_density", "estimate"]

# A posterior that is at an end of its prior still this share as dense as at its peak is not bounded on that side.
_OPEN_END = 0.1
_BINS = 24


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """A 68% interval with its median, and a limit where one side is open."""

    median: float
    """Posterior median."""
    low: float
    """16th percentile."""
    high: float
    """84th percentile."""
    bound: Bound = "two-sided"
    """``upper``: the data give an upper limit only, and median and low depend on the prior; ``lower``: the reverse."""
    limit: float | None = None
    """The one-sided 95% limit where `bound` is not two-sided."""

    def to_dict(self) -> dict[str, Any]:
        """Plain dictionary; `limit_95` only where there is one."""
        out: dict[str, Any] = {"median": self.median, "low": self.low, "high": self.high, "bound": self.bound}
        if self.limit is not None:
            out["limit_95"] = self.limit
        return out

    def text(self, unit: str = "", digits: int = 3) -> str:
        """One line for tables: an interval, or the limit."""
        tail = f" {unit}" if unit else ""
        if self.limit is not None:
            sign = "<" if self.bound == "upper" else ">"
            return f"{sign} {self.limit:.{digits}g}{tail} (95%)"
        return f"{self.median:.{digits}g} (+{self.high - self.median:.2g} -{self.median - self.low:.2g}){tail}"


def edge_density(samples: NDArray[np.float64], low: float, high: float) -> tuple[float, float]:
    """Density of samples in the first and last bin of a range, over that in the densest bin."""
    counts, _ = np.histogram(samples, bins=_BINS, range=(low, high))
    top = max(int(counts.max()), 1)
    return float(counts[0] / top), float(counts[-1] / top)


def estimate(samples: NDArray[np.float64], bound: Literal["two-sided", "upper", "lower"] = "two-sided") -> Estimate:
    """Summarise samples.

    Parameters
    ----------
    samples : (n,) ndarray
        Equal-weight posterior samples.
    bound : {"two-sided", "upper", "lower"}
        Which side the data leave open, see `bound_of`.
    """
    low, median, high = np.percentile(samples, [16.0, 50.0, 84.0])
    limit = None
    if bound != "two-sided":
        limit = float(np.percentile(samples, 95.0 if bound == "upper" else 5.0))
    return Estimate(median=float(median), low=float(low), high=float(high), bound=bound, limit=limit)


def bound_of(samples: NDArray[np.float64], low: float, high: float) -> Bound:
    """Whether samples within a uniform prior from `low` to `high` pile up at one of its ends."""
    first, last = edge_density(samples, low, high)
    if first > _OPEN_END and last <= _OPEN_END:
        return "upper"
    if last > _OPEN_END and first <= _OPEN_END:
        return "lower"
    return "two-sided"
