"""Distributions of the masses of stars, and populations of them with a convergence."""

from __future__ import annotations

from dataclasses import dataclass
from math import exp, inf, isfinite, pi, sqrt
from typing import TypeAlias

import numpy as np
import numpy.typing as npt
from scipy.special import logsumexp

from crossing.errors import InputError
from crossing.stars.mass_pieces import MassPiece

__all__ = ["MassFunction", "Population"]

Array: TypeAlias = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class MassFunction:
    """Distribution of the masses of stars, by number.

    Made by the functions of `crossing.stars.mass_functions`.

    Notes
    -----
    Moments and quantiles are closed forms (see `crossing.stars.mass_pieces`), exact to about 1e-12.
    """

    name: str
    """Name, as event files say it."""
    pieces: tuple[MassPiece, ...]
    """Adjoining pieces of one common scale, from low to high masses."""

    @property
    def mass_range(self) -> tuple[float, float]:
        """Lowest and highest mass [Msun]; the same twice for a single mass."""
        return self.pieces[0].low, self.pieces[-1].high

    @property
    def mean(self) -> float:
        """Mean mass [Msun]."""
        return self.moment(1)

    def moment(self, power: float) -> float:
        """Mean of mass**power.

        Parameters
        ----------
        power : float
            Any real number.

        Returns
        -------
        float
            Moment [Msun**power].

        Raises
        ------
        InputError
            If `power` is not finite, or so far from 0 that the moment is no floating-point number.
        """
        if not isfinite(power):
            raise InputError(f"`power` must be finite, got {power:g}; 1 gives the mean")
        power = float(power)  # NumPy's would warn where Python's raises
        try:
            value = exp(self._log_total(power) - self._log_total(0))
            # What it cannot leave; makes a single mass exact, too.
            low, high = sorted(mass**power for mass in self.mass_range)
        except OverflowError:
            raise InputError(f"`power` must keep the moment below 1e308, got {power:g}; take one closer to 0") from None
        return min(max(value, low), high)

    def pdf(self, mass: npt.ArrayLike) -> Array:
        """Probability density by number.

        Parameters
        ----------
        mass : array_like
            Masses [Msun], any shape.

        Returns
        -------
        ndarray
            Density [1 / Msun] with integral 1, zero outside the range; at a break, that of the piece below.

        Raises
        ------
        InputError
            For a single mass, which has none.
        """
        mass = np.asarray(mass, dtype=np.float64)
        low, high = self.mass_range
        inside = (mass >= low) & (mass <= high)
        known = np.where(inside, mass, low)
        index = np.searchsorted([piece.high for piece in self.pieces[:-1]], known, side="left")
        density = np.choose(index, [piece.log_density(known) for piece in self.pieces])
        value = np.where(inside, np.exp(density - self._log_total(0)), 0.0)
        return np.asarray(np.where(np.isnan(mass), np.nan, value))

    def quantile(self, p: npt.ArrayLike) -> Array:
        """Inverse of the cumulative distribution by number.

        Parameters
        ----------
        p : array_like
            Probabilities between 0 and 1, any shape.

        Returns
        -------
        ndarray
            Masses [Msun], within the range.

        Raises
        ------
        InputError
            If a probability lies outside 0 to 1.
        """
        p = np.asarray(p, dtype=np.float64)
        if not np.all((p >= 0) & (p <= 1)):
            raise InputError(f"`p` must lie between 0 and 1, got {p[~((p >= 0) & (p <= 1))][0]:g}; give probabilities")
        edges = np.concatenate([[0.0], np.cumsum(self._shares())])
        index = np.searchsorted(edges[1:-1], p, side="right")
        masses = np.empty(p.shape)
        for number, piece in enumerate(self.pieces):
            chosen = index == number
            if np.any(chosen):
                fraction = (p[chosen] - edges[number]) / (edges[number + 1] - edges[number])
                masses[chosen] = piece.quantile(np.clip(fraction, 0.0, 1.0))
        return masses

    def sample(self, size: int | tuple[int, ...], rng: np.random.Generator) -> Array:
        """Draw independent masses by the inverse of the cumulative distribution.

        Parameters
        ----------
        size : int or tuple of int
            Shape of the result.
        rng : numpy.random.Generator
            Source of randomness; every mass takes one number of it, also a single one.

        Returns
        -------
        ndarray
            Masses [Msun].
        """
        return self.quantile(rng.random(size))

    def to_dict(self) -> dict[str, object]:
        """Everything that defines it, JSON-able: the pieces with their shares of the stars, and the mean."""
        pieces = [{**piece.to_dict(), "share": share} for piece, share in zip(self.pieces, self._shares(), strict=True)]
        return {
            "name": self.name,
            "mass_range_msun": list(self.mass_range),
            "mean_mass_msun": self.mean,
            "pieces": pieces,
        }

    def __str__(self) -> str:
        low, high = self.mass_range
        if low == high:
            return f"{self.name}, {low:g} Msun"
        return f"{self.name}, {low:g} to {high:g} Msun (mean {self.mean:.3g})"

    def _log_total(self, power: float) -> float:
        """ln of the integral of m**power over all pieces."""
        return float(logsumexp([piece.log_integral(power) for piece in self.pieces]))

    def _shares(self) -> list[float]:
        """Fraction of the stars in each piece."""
        total = self._log_total(0)
        return [exp(piece.log_integral(0) - total) for piece in self.pieces]


@dataclass(frozen=True, slots=True)
class Population:
    """Point masses with a convergence.

    Parameters
    ----------
    kappa_star : float
        Convergence in these point masses, positive.
    mass_function : MassFunction
        Distribution of their masses.

    Raises
    ------
    InputError
        If `kappa_star` is not positive and finite.
    """

    kappa_star: float
    """Convergence in these point masses."""
    mass_function: MassFunction
    """Distribution of their masses."""

    def __post_init__(self) -> None:
        if not 0 < self.kappa_star < inf:
            raise InputError(f"`kappa_star` must be positive, got {self.kappa_star:g}; leave out an empty population")

    @property
    def density(self) -> float:
        """Stars per squared Einstein radius of 1 Msun, kappa_star / (pi <m>)."""
        return self.kappa_star / (pi * self.mass_function.mean)

    def total_mass(self, area: float) -> float:
        """Mass [Msun] in an `area` [theta_E(1 Msun)**2], kappa_star area / pi."""
        if not 0 < area < inf:
            raise InputError(f"`area` must be positive, got {area:g}; give it in squared Einstein radii of 1 Msun")
        return self.kappa_star * area / pi

    def draw_masses(self, area: float, rng: np.random.Generator) -> Array:
        """Draw the stars of a patch: as many as bring the total mass closest to the expected one.

        Parameters
        ----------
        area : float
            Area of the patch [theta_E(1 Msun)**2].
        rng : numpy.random.Generator
            Source of randomness.

        Returns
        -------
        ndarray
            Masses [Msun] in random order, shape (n,); n may be 0 where the patch should hold less than half a star.
            Their sum is within half the highest mass of ``total_mass(area)``, so that the convergence is exact over
            the area pi sum(m) / kappa_star.

        Raises
        ------
        InputError
            If `area` is not positive.

        Notes
        -----
        A fixed number of stars would leave the total mass to the luck of the few heaviest, and two populations could
        not both be exact over one area. What stopping does to the moments is of the order of one star among all.
        """
        target, function = self.total_mass(area), self.mass_function
        expected = target / function.mean
        # Three standard deviations more than the expected number rarely need a second helping.
        extra = 3 * sqrt(expected * function.moment(2)) / function.mean
        masses = function.sample(int(expected + extra) + 2, rng)
        while masses.sum() < target:
            masses = np.concatenate([masses, function.sample(int(extra) + 2, rng)])
        total = np.cumsum(masses)
        last = min(int(np.searchsorted(total, target)), len(total) - 1)
        below = total[last] - masses[last]
        return masses[: last + (total[last] - target < target - below)]

    def to_dict(self) -> dict[str, object]:
        """Everything that defines it, JSON-able."""
        return {"kappa_star": self.kappa_star, "mass_function": self.mass_function.to_dict()}
