"""Events as a weighted sample: one row an event, each standing for so many a year."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

__all__ = ["TEMPERATURE_CLASSES", "EventSample"]

Array = NDArray[np.float64]

TEMPERATURE_CLASSES: Final = (
    ("O", 30_000.0),
    ("B", 10_000.0),
    ("A", 7500.0),
    ("F", 6000.0),
    ("G", 5200.0),
    ("K", 3700.0),
    ("M", 0.0),
)
"""Types of stars by their lowest temperature [K] (common practice; from memory, no source)."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EventSample:
    """Events; arrays of shape (n,)."""

    weight: Array
    """Events per year that it stands for."""
    segment: NDArray[np.intp]
    """Number of the segment."""
    duration: Array
    """Time above the limit [days]."""
    magnification: Array
    """Magnification at the peak."""
    needed: Array
    """Change of magnification that the star needs to be detected, over the mean magnification."""
    flux: Array
    """Highest change of flux [nJy], in the first band that counts."""
    radius: Array
    """Radius of the star [Rsun]."""
    temperature: Array
    """Its effective temperature [K]."""
    luminosity: Array
    """Its luminosity [Lsun]."""

    def __len__(self) -> int:
        return len(self.weight)

    @classmethod
    def join(cls, parts: Sequence[EventSample], factor: float = 1.0) -> EventSample:
        """All rows of several samples, their weights times a factor."""
        columns = {}
        for one in fields(cls):
            empty = np.empty(0, dtype=np.intp if one.name == "segment" else np.float64)
            columns[one.name] = np.concatenate([empty, *(getattr(part, one.name) for part in parts)])
        columns["weight"] = columns["weight"] * factor
        return cls(**columns)

    @property
    def rate(self) -> float:
        """Events per year."""
        return float(self.weight.sum())

    @property
    def in_progress(self) -> float:
        """Events above the limit at any moment: rate times mean duration."""
        return float(self.weight @ self.duration) / 365.25

    def quantiles(self, column: str, shares: Sequence[float] = (0.16, 0.5, 0.84)) -> Array:
        """Quantiles of a column over the events; NaN without events."""
        from crossing.shooting.peaks.peak_crossings import weighted_quantiles

        if not self.rate > 0:
            return np.full(len(shares), np.nan)
        return np.asarray(weighted_quantiles(getattr(self, column), self.weight, tuple(shares)))

    def types(self) -> dict[str, float]:
        """Share of the events by type of star."""
        out, left = {}, np.ones(len(self), dtype=bool)
        for name, lowest in TEMPERATURE_CLASSES:
            chosen = left & (self.temperature >= lowest)
            out[name] = float(self.weight[chosen].sum() / self.rate) if self.rate > 0 else 0.0
            left &= ~chosen
        return out

    def to_dict(self) -> dict[str, Any]:
        """Sums and types, not the rows."""
        return {"events": len(self), "rate_per_year": self.rate, "in_progress": self.in_progress, "types": self.types()}

    def to_table(self) -> QTable:
        """One row an event."""
        from astropy.table import QTable

        return QTable({one.name: getattr(self, one.name) for one in fields(self)})

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the events per year whose peaks are brighter than a flux."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.0, 4.0), layout="constrained").add_subplot()
        order = np.argsort(self.flux)[::-1]
        ax.plot(self.flux[order], np.cumsum(self.weight[order]), color="#0072B2")
        ax.set(xscale="log", yscale="log", xlabel="highest change of flux [nJy]", ylabel="events a year that exceed it")
        return ax
