"""Folds of random star fields without a star field: their strengths, directions and lengths, straight from the law.

A point of the image plane is critical where the shear of the stars has one of the values on a circle. The strongest
star is put where it brings the shear there, all others are drawn; what is drawn does not depend on the macro lens, so
that one set of draws serves every place on an arc.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Any, Final, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError
from crossing.optics.fold import fold_profile, profile_peak
from crossing.optics.local import LocalLens
from crossing.optics.random_fields import density_at_zero
from crossing.stars.mass_functions import Population

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

__all__ = ["FoldEnsemble", "fold_ensemble", "fold_width"]

Array = NDArray[np.float64]

# Stars whose shear is summed one by one; that of all weaker ones is normal, kappa_star / sqrt(2 number) a component.
_STARS: Final = 256
_DRAWS: Final = 16_384
_KEPT: Final = 8
_WIDTHS: Final = 400
# An eigenvalue that is zero up to the rounding of decimal numbers such as 1 - 0.8 - 0.2.
_ROUNDING: Final = 1e-12


class _Others(NamedTuple):
    """Draws of all stars but the strongest, for kappa_star = 1; arrays of shape (n,)."""

    shear: NDArray[np.complex128]
    """Sum of m / conj(z)**2."""
    slope: NDArray[np.complex128]
    """Sum of 2 m / conj(z)**3."""
    strongest: Array
    """Largest size of a term of `shear`."""
    mass: Array
    """Mass of the star that is put [Msun]."""
    turn: Array
    """Uniform numbers between 0 and 1: where on the circle."""
    side: Array
    """-1 or 1: on which of two opposite places the star is put."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FoldEnsemble:
    """Folds of random fields at one macro lens; arrays of shape (n,), lengths in Einstein radii of one solar mass."""

    lens: LocalLens
    """Macro lens."""
    kappa_star: float
    """Convergence in stars."""
    strength: Array = field(repr=False)
    """K of ``K / sqrt(distance)`` [theta_E^(1/2)]."""
    normal: Array = field(repr=False)
    """Angle of the caustic's normal, to the side with two more images, from u to v [rad]."""
    length: Array = field(repr=False)
    """Length of caustics that it stands for, per area of the source plane [1/theta_E]."""
    critical_density: float
    """Density at zero of the determinant by these draws, before lengths were scaled to the closed form of it."""

    def __len__(self) -> int:
        return len(self.strength)

    @property
    def total_length(self) -> float:
        """Length of caustics per area of the source plane [1/theta_E]."""
        return float(self.length.sum())

    @property
    def background(self) -> float:
        """Magnification beside a fold, about the mean one."""
        return self.lens.magnification

    def crossings(self, direction: float | None = None) -> Array:
        """Crossings per length of a straight track that every fold stands for [1/theta_E], shape (n,).

        Parameters
        ----------
        direction : float, optional
            Angle of the track from u to v [rad]; the mean over all directions if None.
        """
        share = 2.0 / np.pi if direction is None else np.abs(np.cos(self.normal - direction))
        return self.length * share

    def peaks(self, radius: float, limb_darkening: float = 0.0, background: float | None = None) -> Array:
        """Peak magnifications of a disc of `radius` [theta_E] at the folds, shape (n,)."""
        if not radius > 0:
            raise InputError(f"`radius` must be positive, got {radius:g}; a point has no finite peak")
        beside = self.background if background is None else background
        return np.asarray(beside + self.strength * profile_peak(limb_darkening).height / np.sqrt(radius))

    def crossing_rate(
        self,
        magnification: ArrayLike,
        radius: float,
        *,
        direction: float | None = None,
        limb_darkening: float = 0.0,
        background: float | None = None,
    ) -> Array:
        """Fold crossings whose peak exceeds a magnification, per length of a straight track [1/theta_E].

        Parameters
        ----------
        magnification : array_like
            Thresholds.
        radius : float
            Radius of the star [theta_E].
        direction : float, optional
            Angle of the track from u to v [rad]; the mean over all directions if None.
        limb_darkening : float
            Linear coefficient.
        background : float, optional
            Magnification beside the folds; the mean one if None.

        Returns
        -------
        ndarray
            Of the shape of `magnification`.
        """
        peaks = self.peaks(radius, limb_darkening, background)
        order = np.argsort(peaks)[::-1]
        total = np.concatenate([[0.0], np.cumsum(self.crossings(direction)[order])])
        place = np.searchsorted(-peaks[order], -np.asarray(magnification, dtype=np.float64), side="left")
        return np.asarray(total[place])

    def exceedance(
        self,
        magnification: ArrayLike,
        radius: float,
        *,
        limb_darkening: float = 0.0,
        background: float | None = None,
    ) -> Array:
        """Share of the source plane, or of the time, in which the magnification of a disc exceeds a value.

        Parameters
        ----------
        magnification : array_like
            Values, well above the background: each fold is taken as isolated.
        radius : float
            Radius of the disc [theta_E].
        limb_darkening : float
            Linear coefficient.
        background : float, optional
            Magnification beside the folds; the mean one if None.

        Returns
        -------
        ndarray
            P(>mu), of the shape of `magnification`: the integral of the length of caustics times the width over which
            ``background + K J(d/R) / sqrt(R)`` exceeds it.
        """
        beside = self.background if background is None else background
        above = np.atleast_1d(np.asarray(magnification, dtype=np.float64)) - beside
        if not np.all(above > 0):
            raise InputError(f"`magnification` must exceed the background {beside:.4g}, got {np.min(above) + beside:g}")
        needed = above[:, None] * np.sqrt(radius) / self.strength
        out = (fold_width(needed, limb_darkening) * radius) @ self.length
        return np.asarray(out.reshape(np.shape(magnification)))

    def to_dict(self) -> dict[str, Any]:
        """Lens and sums."""
        return {
            "lam_t": self.lens.lam_t,
            "lam_r": self.lens.lam_r,
            "kappa_star": self.kappa_star,
            "folds": len(self),
            "caustic_length_per_area": self.total_length,
            "critical_density": self.critical_density,
        }

    def to_table(self) -> QTable:
        """One row a fold: strength, normal, length."""
        from astropy.table import QTable

        return QTable({"strength": self.strength, "normal": self.normal, "length": self.length})

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the length of caustics stronger than K."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.0, 4.0), layout="constrained").add_subplot()
        order = np.argsort(self.strength)[::-1]
        ax.plot(self.strength[order], np.cumsum(self.length[order]), color="#0072B2")
        ax.set(xscale="log", yscale="log", xlabel=r"strength $K$  [$\theta_E^{1/2}$]")
        ax.set_ylabel(r"caustics stronger than $K$, length per area  [1/$\theta_E$]")
        return ax


def fold_ensemble(
    lens: LocalLens, populations: Sequence[Population], draws: int = _DRAWS, seed: int = 0
) -> FoldEnsemble:
    """Folds of random star fields, without making one.

    Parameters
    ----------
    lens : LocalLens
        Macro lens, all convergence included; a gradient is left out.
    populations : sequence of Population
        Point masses.
    draws : int
        Number of random surroundings.
    seed : int
        Seed; equal numbers give the same surroundings at every macro lens, so that differences are sharp.

    Returns
    -------
    FoldEnsemble
        Folds with their lengths; those that cannot be are left out.

    Raises
    ------
    InputError
        If there are no stars, more than the macro lens holds, or no critical point is possible.

    Notes
    -----
    With k = 1 - kappa + kappa_star, S the sum of m / conj(z)**2 and z counted from the point, the point is critical
    where S = gamma - k exp(i phi). Sizes of the stars' shears are kappa_star / E, with E the arrival times of a Poisson
    process of unit rate, and masses weighted by themselves. Given all stars but the strongest, the shear of this one
    must be s, whose density is kappa_star / (2 pi abs(s)**3); and delta(det) leaves d(phi)/2. The null vector is
    e = exp(i phi/2), the other eigenvalue 2 k, the change of the vanishing one T = abs(Re(F exp(-3 i phi/2))) with F
    the sum of 2 m / conj(z)**3: K = sqrt(2/T) / (2 abs(k)), and the caustics' length per area of the source plane is
    <mu> E[4 k**2 T delta(det)], so that the integral of K**2 over it is 2 <mu> p(det = 0). Lengths are scaled by the
    closed form of that density over what the draws give, which takes most of their noise out.

    References
    ----------
    .. [1] Nityananda R., Ostriker J. P., 1984, J. Astrophys. Astron. 5, 235 (shear of random fields)
    .. [2] Witt H. J., Kayser R., Refsdal S., 1993, A&A 268, 501 (rates of caustic crossings)
    """
    kappa_star = sum(part.kappa_star for part in populations)
    if not kappa_star > 0:
        raise InputError(f"`populations` must hold stars, got kappa_star = {kappa_star:g}; a smooth lens has one fold")
    k, gamma = 1.0 - lens.kappa + kappa_star, lens.gamma
    if lens.kappa < kappa_star * (1 - 1e-9):
        raise InputError(f"`populations` must not exceed kappa = {lens.kappa:g}, got {kappa_star:g}; lower one of them")
    if k == 0 or min(abs(lens.lam_t), abs(lens.lam_r)) < _ROUNDING:
        raise InputError("`lens` must have a finite magnification and a smooth part below 1; move it off the curve")
    # Only the shares of the populations matter to them, so that an uncertain density draws them once.
    shares = tuple(replace(part, kappa_star=round(part.kappa_star / kappa_star, 12)) for part in populations)
    others = _others(shares, draws, seed)
    # Of the circle the part that is closest to no shear counts most.
    middle = 0.0 if gamma / k >= 0 else np.pi
    width = min(1.0, (abs(abs(k) - abs(gamma)) + kappa_star) / (2 * abs(k)))
    tangent = np.tan(np.pi * (others.turn - 0.5))
    phi = middle + 2 * np.arctan(width * tangent)
    density = (1 + (width * tangent) ** 2) / (2 * np.pi * width * (1 + tangent**2))
    shear = gamma - k * np.exp(1j * phi) - kappa_star * others.shear
    size = np.abs(shear)
    weight = np.where(size > kappa_star * others.strongest, kappa_star / (4 * np.pi * size**3 * density * draws), 0.0)
    chosen = weight > 0
    if not chosen.any():
        raise InputError(f"`draws` must be more: none of {draws} surroundings can be critical")
    phi, weight = phi[chosen], weight[chosen]
    near = others.side[chosen] * np.sqrt(others.mass[chosen] / shear[chosen])
    slope = kappa_star**1.5 * others.slope[chosen] + 2 * others.mass[chosen] / near**3
    change = np.real(slope * np.exp(-1.5j * phi))
    steep = np.abs(change)
    found, exact = float(weight.sum()), float(density_at_zero(lens.lam_t, lens.lam_r, kappa_star))
    return FoldEnsemble(
        lens=lens,
        kappa_star=kappa_star,
        strength=np.sqrt(2 / steep) / (2 * abs(k)),
        normal=np.angle(np.sign(change) * np.exp(0.5j * phi)),
        length=lens.magnification * 4 * k**2 * steep * weight * (exact / found),
        critical_density=found,
    )


@lru_cache(maxsize=_KEPT)
def _others(populations: tuple[Population, ...], draws: int, seed: int) -> _Others:
    rng = np.random.default_rng(np.random.SeedSequence(entropy=seed, spawn_key=(7, draws)))
    arrival = rng.exponential(size=(draws, _STARS)).cumsum(axis=1)
    turn = rng.uniform(0.0, 2 * np.pi, (draws, _STARS))
    mass = _masses(populations, (draws, _STARS + 1), rng)
    faint = rng.standard_normal((draws, 2)) / np.sqrt(2 * _STARS)
    once = np.exp(1j * turn)
    twice = once * once
    shear = (twice / arrival).sum(axis=1) + faint[:, 0] + 1j * faint[:, 1]
    slope = 2 * (once * twice / (arrival * np.sqrt(arrival * mass[:, 1:]))).sum(axis=1)
    # One in each of as many equal parts of the circle, in any order.
    circle = (rng.permutation(draws) + rng.random(draws)) / draws
    side = rng.choice([-1.0, 1.0], draws)
    return _Others(shear, slope, 1 / arrival[:, 0], mass[:, 0], circle, side)


def _masses(populations: tuple[Population, ...], shape: tuple[int, int], rng: np.random.Generator) -> Array:
    """Masses of stars chosen by their share of the convergence: weighted by mass."""
    shares = np.array([part.kappa_star for part in populations])
    which = rng.choice(len(shares), size=shape, p=shares / shares.sum())
    out = np.empty(shape)
    for number, part in enumerate(populations):
        function = part.mass_function
        chosen = which == number
        low, high = function.mass_range
        if low == high:
            out[chosen] = low
            continue
        # By the cumulative sum of mass over quantiles of number; a fine grid in the logarithm of mass.
        grid = np.geomspace(low, high, 4096)
        density = function.pdf(grid) * grid**2
        steps = 0.5 * (density[1:] + density[:-1])
        total = np.concatenate([[0.0], np.cumsum(steps)])
        out[chosen] = np.exp(np.interp(rng.random(int(chosen.sum())), total / total[-1], np.log(grid)))
    return out


def fold_width(level: ArrayLike, limb_darkening: float = 0.0) -> Array:
    """Width over which the profile of a fold exceeds a level.

    Parameters
    ----------
    level : array_like
        Levels of J, positive: needed magnification above the background times sqrt(R) / K.
    limb_darkening : float
        Linear coefficient.

    Returns
    -------
    ndarray
        Widths in radii of the disc, of the shape of `level`; 0 above the peak.
    """
    asked = np.asarray(level, dtype=np.float64)
    known, width = _widths(limb_darkening)
    found = np.interp(asked, known, width, right=0.0)
    return np.where(asked < known[0], 1.0 / np.maximum(asked, 1e-300) ** 2, found)


@lru_cache(maxsize=64)
def _widths(limb_darkening: float) -> tuple[Array, Array]:
    """Levels of the fold profile, rising, and the width [R] over which it exceeds them."""
    peak = profile_peak(limb_darkening)
    rise = np.linspace(-1.0, peak.position, _WIDTHS)
    fall = peak.position + np.geomspace(1e-6, 1e4, 8 * _WIDTHS)
    up, down = np.asarray(fold_profile(rise, limb_darkening)), np.asarray(fold_profile(fall, limb_darkening))
    level = np.geomspace(down[-1], peak.height * (1 - 1e-9), 4 * _WIDTHS)
    return level, np.interp(level, down[::-1], fall[::-1]) - np.interp(level, up, rise)
