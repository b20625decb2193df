"""Luminosity functions of the stars of an arc: a power law with temperatures, or a table of kinds of stars."""

from __future__ import annotations

from dataclasses import dataclass
from math import inf, isfinite
from typing import TYPE_CHECKING, Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.event import Value
from crossing.event.campaign_records import DEFAULT_SLOPE
from crossing.population.star_table import read_star_table
from crossing.stars.photosphere import radius_from_luminosity
from crossing.stars.star_draws import DEFAULT_TEMPERATURE, StarDraws
from crossing.stars.upper_luminosity import log_allowed

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.event.campaign_records import PopulationRecord

__all__ = ["DEFAULT_LUMINOSITY_RANGE", "LuminosityFunction", "luminosity_function"]

Array: TypeAlias = npt.NDArray[np.float64]

DEFAULT_LUMINOSITY_RANGE: Final = (10.0, 10**6.7)
"""Luminosities [Lsun] of the stars that make an arc's light (a choice, no source; see `LuminosityFunction`)."""

_MOST_DRAWN: Final = 5_000_000
# Share of the outermost cells of a normal distribution that is left out of them: uniform cells have its width then.
_TAIL: Final = 0.1


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LuminosityFunction:
    """Stars by luminosity and temperature, in cells of shape (n,).

    Made by `power_law` or `table`.

    Notes
    -----
    Within a cell the number goes as L**(-slope), and ln T is uniform. The lower end of the luminosities matters where
    stars are counted by their light: with a slope of 2 each decade holds the same light, and the number of bright stars
    in an arc of given light goes as 1 / ln(high / low).
    """

    slope: float
    """Slope s of dN/dL = L^-s within a cell."""
    luminosity_low: Array
    """Lower ends of the cells [Lsun]."""
    luminosity_high: Array
    """Upper ends [Lsun]; equal to the lower ones in a table."""
    temperature_low: Array
    """Lower ends [K]."""
    temperature_high: Array
    """Upper ends [K]; equal to the lower ones in a table."""
    number: Array
    """Share of the stars in each cell; the sum is 1."""
    description: str
    """What it is, in words."""

    @classmethod
    def power_law(
        cls,
        slope: float = DEFAULT_SLOPE,
        limits: tuple[float, float] = DEFAULT_LUMINOSITY_RANGE,
        temperature: Value = DEFAULT_TEMPERATURE,
        *,
        upper_limit: bool = True,
        per_decade: int = 20,
        temperatures: int = 16,
    ) -> LuminosityFunction:
        """Power law in luminosity with one distribution of temperatures.

        Parameters
        ----------
        slope : float, optional
            Slope s of dN/dL = L^-s.
        limits : (float, float), optional
            Lowest and highest luminosity [Lsun].
        temperature : Value, optional
            Distribution of the stars' effective temperatures [K].
        upper_limit : bool, optional
            Thin out the stars above the upper limit of luminosities for their temperature, soft by 0.2 dex.
        per_decade, temperatures : int, optional
            Cells per decade of luminosity, and equally probable ones in temperature (one where it is exact).

        Returns
        -------
        LuminosityFunction
            Temperature runs fastest.

        Raises
        ------
        InputError
            If the slope is not finite, the limits are out of order, a temperature is not positive, or no stars are left
            below the upper limit.

        References
        ----------
        .. [1] Humphreys R. M. & Davidson K., 1979, ApJ 232, 409
        """
        low, high = limits
        if not isfinite(slope):
            raise InputError(f"`slope` must be finite, got {slope:g}; 2 gives equal light per decade")
        if not 0 < low < high < inf:
            raise InputError(
                f"`limits` must be solar luminosities, 0 < low < high, got {low:g} and {high:g}; swap them"
            )
        cells = max(1, round(per_decade * np.log10(high / low)))
        edges = np.geomspace(low, high, cells + 1)
        hot = _temperature_edges(temperature, temperatures)
        first, second = (np.repeat(part, len(hot) - 1) for part in (edges[:-1], edges[1:]))
        cold, warm = (np.tile(part, cells) for part in (hot[:-1], hot[1:]))
        number = (first / low) ** (1.0 - slope) * _integral(-slope, second / first)
        if upper_limit:
            number = number * np.exp(log_allowed(np.sqrt(first * second), np.sqrt(cold * warm)))
        if not np.sum(number) > 1e-300:
            raise InputError(
                f"`limits` must leave stars below the upper luminosity limit, got {low:g} and {high:g} Lsun"
            )
        return cls(
            slope=float(slope),
            luminosity_low=first,
            luminosity_high=second,
            temperature_low=cold,
            temperature_high=warm,
            number=number / np.sum(number),
            description=f"dN/dL = L^-{slope:g}, {low:.4g} to {high:.4g} Lsun, temperature {temperature} K"
            + (", below the upper luminosity limit" if upper_limit else ""),
        )

    @classmethod
    def table(cls, luminosity: npt.ArrayLike, temperature: npt.ArrayLike, number: npt.ArrayLike) -> LuminosityFunction:
        """Kinds of stars with one luminosity and one temperature each.

        Parameters
        ----------
        luminosity : array_like, shape (n,)
            Luminosities [Lsun].
        temperature : array_like, shape (n,)
            Effective temperatures [K].
        number : array_like, shape (n,)
            Relative numbers; their sum does not matter.

        Raises
        ------
        InputError
            If the shapes differ, or a luminosity or temperature is not positive, or a number is negative, or all are 0.
        """
        stars = [np.array(column, dtype=np.float64) for column in (luminosity, temperature, number)]
        if len({column.shape for column in stars}) > 1 or stars[0].ndim != 1 or not stars[0].size:
            shapes = ", ".join(str(column.shape) for column in stars)
            raise InputError(f"`luminosity`, `temperature` and `number` must have one shape (n,), got {shapes}")
        for name, column in (("luminosity", stars[0]), ("temperature", stars[1])):
            if not np.all((column > 0) & np.isfinite(column)):
                raise InputError(f"`{name}` must be positive, got {np.min(column):g}; remove that row")
        if not np.all((stars[2] >= 0) & np.isfinite(stars[2])) or not np.sum(stars[2]) > 0:
            raise InputError(f"`number` must be zero or positive and not all zero, got {np.min(stars[2]):g}; check it")
        return cls(
            slope=0.0,
            luminosity_low=stars[0],
            luminosity_high=stars[0],
            temperature_low=stars[1],
            temperature_high=stars[1],
            number=stars[2] / np.sum(stars[2]),
            description=f"table of {len(stars[0])} kinds of stars",
        )

    @property
    def luminosity(self) -> Array:
        """Mean luminosity of the stars of each cell [Lsun], so that sums of light are exact."""
        return self.cell_moment(1.0)

    @property
    def temperature(self) -> Array:
        """Effective temperature in the middle of each cell [K]."""
        return np.asarray(np.sqrt(self.temperature_low * self.temperature_high))

    @property
    def radius(self) -> Array:
        """Radius of each cell's mean luminosity and temperature [nominal solar radii]."""
        return radius_from_luminosity(self.luminosity, self.temperature)

    def moment(self, power: float) -> float:
        """Mean of L**`power` over the stars [Lsun**power], exact within cells."""
        return float(self.number @ self.cell_moment(power))

    def cell_moment(self, power: float) -> Array:
        """Mean of L**`power` over the stars of each cell [Lsun**power], shape (n,)."""
        low, high = self.luminosity_low, self.luminosity_high
        ratio = np.where(high > low, high / low, 2.0)
        mean = _integral(power - self.slope, ratio) / _integral(-self.slope, ratio)
        return np.asarray(low**power * np.where(high > low, mean, 1.0))

    def share_above(self, luminosity: npt.ArrayLike) -> Array:
        """Share of the stars above a luminosity.

        Parameters
        ----------
        luminosity : array_like
            Luminosities [Lsun], any shape.

        Returns
        -------
        ndarray
            Shares of the number, shape of `luminosity`.
        """
        return np.asarray(self.share_of_cells_above(np.asarray(luminosity, dtype=np.float64)[..., None]) @ self.number)

    def share_of_cells_above(self, luminosity: npt.ArrayLike) -> Array:
        """Share of each cell's own stars above a luminosity.

        Parameters
        ----------
        luminosity : array_like
            Luminosities [Lsun] that broadcast against (n,), one or one a cell; leading axes are kept.

        Returns
        -------
        ndarray
            Shares, 0 to 1, last axis (n,); a star exactly there counts.
        """
        bound = np.asarray(luminosity, dtype=np.float64)
        low, high = self.luminosity_low, self.luminosity_high
        wide = high > low
        ratio = np.where(wide, high / low, 2.0)
        inside = np.clip(np.maximum(bound, 0.0) / low, 1.0, ratio)
        below = _integral(-self.slope, inside) / _integral(-self.slope, ratio)
        return np.where(wide, 1.0 - below, np.asarray(bound <= low, dtype=np.float64))

    def brightest(self, total: float, p: npt.ArrayLike = 0.5) -> Array:
        """Quantiles of the luminosity of the brightest of the stars of an arc.

        Parameters
        ----------
        total : float
            Expected number of stars; the actual one is Poisson.
        p : array_like, optional
            Probabilities, 0 < p < 1.

        Returns
        -------
        ndarray
            Luminosities [Lsun], from exp(-total share_above(L)) = p; 0 where there is no star at all so often.

        Raises
        ------
        InputError
            If the number is not positive, or a probability lies outside 0 to 1.
        """
        if not 0 < total < inf:
            raise InputError(f"`total` must be positive, got {total:g}; give the expected number of stars")
        p = np.asarray(p, dtype=np.float64)
        if not np.all((p > 0) & (p < 1)):
            raise InputError("`p` must lie between 0 and 1, ends excluded; 0.5 gives the median")
        grid = np.unique(np.concatenate([self.luminosity_low, self.luminosity_high]))
        above, wanted = total * self.share_above(grid), -np.log(p)
        # The last edge above which as many stars as that are expected, or more.
        index = np.searchsorted(-above, -wanted, side="right") - 1
        edge = np.clip(index, 0, max(len(grid) - 2, 0))
        found = grid[np.clip(index, 0, None)]
        if np.any(self.luminosity_high > self.luminosity_low):
            share = np.clip((above[edge] - wanted) / (above[edge] - above[edge + 1]), 0.0, 1.0)
            found = _draw_power_law(self.slope, grid[edge], grid[edge + 1], share)
        return np.where(index >= 0, found, 0.0)

    def draw(self, total: float, rng: np.random.Generator, *, faintest: float = 0.0) -> StarDraws:
        """Draw the stars of an arc one by one.

        Parameters
        ----------
        total : float
            Expected number of stars of all luminosities.
        rng : numpy.random.Generator
            Source of the draws.
        faintest : float, optional
            Leave out stars below this luminosity [Lsun].

        Returns
        -------
        StarDraws
            As many as a Poisson number says, cell by cell: the few brightest come with their own luck.

        Raises
        ------
        InputError
            If the number is negative, or more than five million stars are expected.
        """
        if not 0 <= total < inf:
            raise InputError(f"`total` must be zero or positive, got {total:g}; give the expected number of stars")
        share = self.share_of_cells_above(faintest)
        expected = total * self.number * share
        if np.sum(expected) > _MOST_DRAWN:
            raise InputError(
                f"`faintest` must leave at most {_MOST_DRAWN:,} stars, got {np.sum(expected):.3g} expected; raise it"
            )
        cell = np.repeat(np.arange(len(expected)), rng.poisson(expected))
        low = np.clip(faintest, self.luminosity_low, self.luminosity_high)[cell]
        luminosity = _draw_power_law(self.slope, low, self.luminosity_high[cell], rng.random(len(cell)))
        mix = rng.random(len(cell))
        temperature = self.temperature_low[cell] ** (1 - mix) * self.temperature_high[cell] ** mix
        return StarDraws(
            radius=radius_from_luminosity(luminosity, temperature), temperature=temperature, luminosity=luminosity
        )

    def to_table(self) -> QTable:
        """One row a cell."""
        from astropy.table import QTable

        return QTable(
            {
                "luminosity_lsun": self.luminosity,
                "temperature_K": self.temperature,
                "radius_rsun": self.radius,
                "number": self.number,
            }
        )

    def to_dict(self) -> dict[str, Any]:
        """What it is, and its mean luminosity."""
        return {
            "description": self.description,
            "slope": self.slope,
            "cells": len(self.number),
            "luminosity_range_lsun": [float(self.luminosity_low.min()), float(self.luminosity_high.max())],
            "mean_luminosity_lsun": self.moment(1.0),
        }

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the share of the stars above each luminosity."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.0, 4.0), layout="constrained").add_subplot()
        grid = np.geomspace(0.999 * self.luminosity_low.min(), self.luminosity_high.max(), 300)
        share = self.share_above(grid)
        ax.plot(grid[share > 0], share[share > 0], color="#0072B2")
        ax.set(xscale="log", yscale="log", xlabel=r"luminosity [L$_\odot$]", ylabel="share of the stars above")
        return ax


def luminosity_function(record: PopulationRecord, rng: np.random.Generator | None = None) -> LuminosityFunction:
    """Luminosity function of a campaign file.

    Parameters
    ----------
    record : PopulationRecord
        Stars of the arc. Without a range or temperatures, the defaults of `LuminosityFunction.power_law` hold.
    rng : numpy.random.Generator, optional
        Draw an uncertain slope from it; the central value if None.

    Raises
    ------
    InputError
        If the table cannot be read, or the numbers cannot be used.
    """
    if record.path is not None:
        try:
            return LuminosityFunction.table(*read_star_table(record.path, record.columns))
        except InputError as error:
            raise error.located(source=record.path) from None
    slope = record.slope or Value.exact(DEFAULT_SLOPE)
    return LuminosityFunction.power_law(
        slope.central if rng is None else float(slope.sample(rng, 1)[0]),
        record.luminosity_range or DEFAULT_LUMINOSITY_RANGE,
        record.temperature or DEFAULT_TEMPERATURE,
    )


def _temperature_edges(temperature: Value, cells: int) -> Array:
    """Edges of equally probable cells; an exact temperature is one cell without width."""
    if temperature.is_exact:
        edges = np.full(2, temperature.central)
    else:
        edges = temperature.quantile(np.linspace(0.0, 1.0, cells + 1))
        if temperature.shape == "normal":
            edges[[0, -1]] = temperature.quantile([_TAIL / cells, 1.0 - _TAIL / cells])
    if not edges[0] > 0:
        raise InputError(f"`temperature` must be positive, got {temperature} K; cut its range")
    return edges


def _integral(power: float, ratio: npt.ArrayLike) -> Array:
    """Integral of x**power from 1 to `ratio`, without loss where power is close to -1."""
    log_ratio = np.log(np.asarray(ratio, dtype=np.float64))
    slope = power + 1.0
    return np.asarray(log_ratio if abs(slope) < 1e-12 else np.expm1(slope * log_ratio) / slope)


def _draw_power_law(slope: float, low: Array, high: Array, share: Array) -> Array:
    """Luminosities between `low` and `high` of which a share of the stars is fainter."""
    log_ratio = np.log(high / low)
    power = 1.0 - slope
    if abs(power) < 1e-12:
        return np.asarray(low * np.exp(share * log_ratio))
    return np.asarray(low * np.exp(np.log1p(share * np.expm1(power * log_ratio)) / power))
