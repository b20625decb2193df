"""Mass profiles with closed forms for potential, deflection, convergence and shear; angles in arcseconds."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from math import cos, inf, isfinite, log, pi, radians, sin, sqrt
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.constants import ARCSEC, GM_SUN_OVER_C2, LIGHT_SPEED, MPC

if TYPE_CHECKING:
    from crossing.optics.scales import LensScales

__all__ = [
    "MassProfile",
    "NFWSphere",
    "PointMass",
    "ProfileSum",
    "Shear",
    "SoftenedEllipsoid",
    "UniformSheet",
    "isothermal_einstein_radius",
    "stretch_eigenvalues",
]

Array: TypeAlias = npt.NDArray[np.float64]
Pair: TypeAlias = tuple[Array, Array]

# Below this ratio to the scale radius a series is better than the closed form, which loses its digits.
_NFW_SMALL = 1e-3
_NFW_NEAR_ONE = 0.05
_SERIES_TERMS = 12
_ROUND = 1e-4


def stretch_eigenvalues(kappa: npt.ArrayLike, gamma: npt.ArrayLike) -> Pair:
    """Eigenvalues (lam_t, lam_r) of the lens's Jacobian, |lam_t| <= |lam_r|, from convergence and size of the shear."""
    rest, size = 1 - np.asarray(kappa, dtype=np.float64), np.abs(np.asarray(gamma, dtype=np.float64))
    size = np.where(rest < 0, -size, size)
    return np.asarray(rest - size), np.asarray(rest + size)


def _positive(name: str, value: float, *, or_zero: bool = False) -> None:
    if not (isfinite(value) and (value >= 0 if or_zero else value > 0)):
        raise InputError(f"`{name}` must be {'zero or ' if or_zero else ''}positive, got {value:g}; give its size")


class MassProfile(ABC):
    """A distribution of mass in the lens plane, seen from its centre.

    Notes
    -----
    Every method takes positions `x`, `y` [arcsec], broadcasts them, and multiplies by `scale`: the distance ratio
    D_ls/D_s of the source over that which the profile's own numbers hold for. With the potential psi,
    deflection = grad psi, convergence = (psi_xx + psi_yy)/2, shear = ((psi_xx - psi_yy)/2, psi_xy).

    References
    ----------
    .. [1] Schneider P., Ehlers J., Falco E. E., 1992, Gravitational Lenses, ch. 5 and 8
    """

    __slots__ = ()

    @abstractmethod
    def potential(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Deflection potential [arcsec**2]."""

    @abstractmethod
    def deflection(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the deflection [arcsec]."""

    @abstractmethod
    def convergence(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Convergence."""

    @abstractmethod
    def shear(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the shear."""

    def source_position(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Source [arcsec] that has an image at (x, y)."""
        first, second = _coordinates(x, y)
        ax, ay = self.deflection(first, second, scale=scale)
        return first - ax, second - ay

    def jacobian(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> tuple[Array, Array, Array]:
        """Elements (xx, xy, yy) of the Jacobian of `source_position`."""
        kappa, (g1, g2) = self.convergence(x, y, scale=scale), self.shear(x, y, scale=scale)
        return 1 - kappa - g1, -g2, 1 - kappa + g1

    def eigenvalues(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Eigenvalues (lam_t, lam_r) of the Jacobian, |lam_t| <= |lam_r|."""
        return stretch_eigenvalues(self.convergence(x, y, scale=scale), np.hypot(*self.shear(x, y, scale=scale)))

    def fermat_potential(
        self, x: npt.ArrayLike, y: npt.ArrayLike, source: tuple[float, float], *, scale: float = 1.0
    ) -> Array:
        """Arrival time [arcsec**2] of an image of `source` [arcsec]; times `LensScales.time_delay_factor` in days."""
        first, second = _coordinates(x, y)
        path = ((first - source[0]) ** 2 + (second - source[1]) ** 2) / 2
        return path - self.potential(first, second, scale=scale)


def _radial_shear(x: Array, y: Array, minus_tangential: Array) -> Pair:
    """Shear of a round lens from kappa - mean kappa."""
    with np.errstate(divide="ignore", invalid="ignore"):
        square = x**2 + y**2
        return minus_tangential * (x**2 - y**2) / square, minus_tangential * 2 * x * y / square


def _coordinates(x: npt.ArrayLike, y: npt.ArrayLike) -> Pair:
    first, second = np.broadcast_arrays(np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64))
    return first, second


@dataclass(frozen=True, slots=True, kw_only=True)
class SoftenedEllipsoid(MassProfile):
    """Isothermal ellipsoid with elliptical isodensity lines and an optional core.

    Notes
    -----
    kappa = b / (2 sqrt(core**2 + q X**2 + Y**2 / q)) with X along the major axis. Without a core the mean convergence
    within the isodensity line of mean radius b is 1.

    References
    ----------
    .. [1] Kassiola A., Kovner I., 1993, ApJ 417, 450
    .. [2] Kormann R., Schneider P., Bartelmann M., 1994, A&A 284, 285
    """

    einstein_radius: float
    """Einstein radius b of the profile without a core [arcsec]."""
    axis_ratio: float = 1.0
    """Minor over major axis q of the isodensity lines."""
    core: float = 0.0
    """Core radius [arcsec], as geometric mean of its half axes."""
    angle: float = 0.0
    """Direction of the major axis, from x towards y [deg]."""

    def __post_init__(self) -> None:
        _positive("einstein_radius", self.einstein_radius)
        _positive("core", self.core, or_zero=True)
        if not 0 < self.axis_ratio <= 1:
            raise InputError(f"`axis_ratio` must be above 0 and at most 1, got {self.axis_ratio:g}; give minor/major")
        if not isfinite(self.angle):
            raise InputError(f"`angle` must be finite, got {self.angle:g}; give degrees")

    def _turned(self, x: npt.ArrayLike, y: npt.ArrayLike) -> Pair:
        c, s = cos(radians(self.angle)), sin(radians(self.angle))
        first, second = _coordinates(x, y)
        return c * first + s * second, c * second - s * first

    def _radii(self, X: Array, Y: Array) -> tuple[Array, Array, Array]:
        """Elliptical radius, and the two denominators of the deflection."""
        core, q = self.core / sqrt(self.axis_ratio), self.axis_ratio
        radius = np.sqrt(q**2 * (core**2 + X**2) + Y**2)
        return radius, radius + core, radius + q**2 * core

    def _own_deflection(self, X: Array, Y: Array) -> Pair:
        e = sqrt(1 - self.axis_ratio**2)
        _, along, across = self._radii(X, Y)
        with np.errstate(divide="ignore", invalid="ignore"):
            s, t = (np.where(below > 0, above / below, 0.0) for above, below in ((X, along), (Y, across)))
        if e < _ROUND:
            aX, aY = s * (1 - (e * s) ** 2 / 3), t * (1 + (e * t) ** 2 / 3)
        else:
            aX, aY = np.arctan(e * s) / e, np.arctanh(e * t) / e
        strength = self.einstein_radius * sqrt(self.axis_ratio)
        return strength * aX, strength * aY

    def potential(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Deflection potential [arcsec**2], 0 at the centre."""
        X, Y = self._turned(x, y)
        aX, aY = self._own_deflection(X, Y)
        psi = X * aX + Y * aY
        if self.core > 0:
            q, core = self.axis_ratio, self.core / sqrt(self.axis_ratio)
            _, along, _ = self._radii(X, Y)
            rise = np.log(np.hypot(along, sqrt(1 - q**2) * X)) - log((1 + q) * core)
            psi = psi - self.einstein_radius * sqrt(q) * core * rise
        return scale * psi

    def deflection(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the deflection [arcsec]; 0 at the centre."""
        aX, aY = self._own_deflection(*self._turned(x, y))
        c, s = scale * cos(radians(self.angle)), scale * sin(radians(self.angle))
        return c * aX - s * aY, s * aX + c * aY

    def convergence(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Convergence; infinite at the centre where there is no core."""
        X, Y = self._turned(x, y)
        radius = np.sqrt(self.core**2 + self.axis_ratio * X**2 + Y**2 / self.axis_ratio)
        with np.errstate(divide="ignore"):
            return np.asarray(scale * self.einstein_radius / (2 * radius))

    def shear(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the shear; not a number at a centre without core."""
        X, Y = self._turned(x, y)
        radius, along, across = self._radii(X, Y)
        e2, strength = 1 - self.axis_ratio**2, scale * self.einstein_radius * sqrt(self.axis_ratio)
        with np.errstate(divide="ignore", invalid="ignore"):
            dX, dY = self.axis_ratio**2 * X / radius, Y / radius
            first = strength / (1 + e2 * (X / along) ** 2)
            psi_XX, psi_XY = first * (1 - X * dX / along) / along, -first * X * dY / along**2
            psi_YY = strength / (1 - e2 * (Y / across) ** 2) * (1 - Y * dY / across) / across
        c, s = cos(2 * radians(self.angle)), sin(2 * radians(self.angle))
        g1, g2 = (psi_XX - psi_YY) / 2, psi_XY
        return c * g1 - s * g2, s * g1 + c * g2


def _nfw_mean(x: Array) -> Array:
    """g(x) / x**2, a quarter of the mean convergence within x over kappa_s."""
    log_half = np.log(x / 2)
    small = -log_half / 2 - 0.25 - x**2 * (3 * log_half / 8 + 7 / 32)
    return np.where(x < _NFW_SMALL, small, (log_half + _nfw_arc(x)) / x**2)


def _nfw_arc(x: Array) -> Array:
    """arccosh(1/x) / sqrt(1 - x**2), continued to arccos(1/x) / sqrt(x**2 - 1) beyond 1."""
    with np.errstate(divide="ignore", invalid="ignore"):
        inside = np.arccosh(1 / np.minimum(x, 1)) / np.sqrt(1 - np.minimum(x, 1) ** 2)
        outside = np.arccos(1 / np.maximum(x, 1)) / np.sqrt(np.maximum(x, 1) ** 2 - 1)
    w = (1 - x) / (1 + x)
    near = (1 + w) * sum(w**n / (2 * n + 1) for n in range(_SERIES_TERMS))
    return np.where(np.abs(x - 1) < _NFW_NEAR_ONE, near, np.where(x < 1, inside, outside))


def _nfw_density(x: Array) -> Array:
    """F(x) = (1 - arc) / (x**2 - 1), half the convergence over kappa_s."""
    w = (1 - x) / (1 + x)
    near = (1 + w) ** 2 * sum(w ** (n - 1) * n / (4 * n**2 - 1) for n in range(1, _SERIES_TERMS))
    with np.errstate(divide="ignore", invalid="ignore"):
        plain = (1 - _nfw_arc(x)) / (x**2 - 1)
    return np.where(np.abs(x - 1) < _NFW_NEAR_ONE, near, plain)


@dataclass(frozen=True, slots=True, kw_only=True)
class NFWSphere(MassProfile):
    """Sphere with the density of Navarro, Frenk and White.

    References
    ----------
    .. [1] Bartelmann M., 1996, A&A 313, 697
    .. [2] Wright C. O., Brainerd T. G., 2000, ApJ 534, 34
    """

    kappa_s: float
    """rho_s r_s / Sigma_cr."""
    r_s: float
    """Scale radius [arcsec]."""

    def __post_init__(self) -> None:
        _positive("kappa_s", self.kappa_s)
        _positive("r_s", self.r_s)

    @classmethod
    def of_mass(cls, mass: float, concentration: float, scales: LensScales) -> NFWSphere:
        """Sphere of the mass [Msun] within 200 critical densities, for a pair of redshifts.

        Parameters
        ----------
        mass : float
            M200c [Msun].
        concentration : float
            r200c / r_s.
        scales : LensScales
            Distances; the critical density is that at the lens, in the same cosmology.

        Returns
        -------
        NFWSphere
            With its own numbers for the source of `scales`.

        Raises
        ------
        InputError
            If the mass or the concentration is not positive.
        """
        from crossing.optics.scales import cosmology_from

        _positive("mass", mass)
        _positive("concentration", concentration)
        hubble = float(cosmology_from(scales.cosmology).H(scales.z_lens).to_value("1/s"))
        # r200**3 = G M / (100 H**2), with lengths in Mpc.
        r200 = (GM_SUN_OVER_C2 * LIGHT_SPEED**2 * mass / (100 * hubble**2)) ** (1 / 3) / MPC
        r_s = r200 / concentration
        inner = mass / (4 * pi * (log(1 + concentration) - concentration / (1 + concentration)))
        return cls(kappa_s=inner / r_s**2 * 1e-12 / scales.sigma_crit, r_s=r_s / scales.D_l / ARCSEC)

    def _ratio(self, x: npt.ArrayLike, y: npt.ArrayLike) -> tuple[Array, Array, Array]:
        first, second = _coordinates(x, y)
        return first, second, np.maximum(np.hypot(first, second) / self.r_s, 1e-150)

    def potential(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Deflection potential [arcsec**2], 0 at the centre."""
        _, _, r = self._ratio(x, y)
        with np.errstate(invalid="ignore"):
            arc = np.where(r < 1, -(np.arccosh(1 / np.minimum(r, 1)) ** 2), np.arccos(1 / np.maximum(r, 1)) ** 2)
        small = -(r**2) * (np.log(r / 2) / 4 + r**2 * (3 * np.log(r / 2) + 1) / 32)
        height = np.where(r < _NFW_SMALL, small, (np.log(r / 2) ** 2 + arc) / 2)
        return scale * 4 * self.kappa_s * self.r_s**2 * height

    def deflection(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the deflection [arcsec]."""
        first, second, r = self._ratio(x, y)
        mean = 4 * scale * self.kappa_s * _nfw_mean(r)
        return mean * first, mean * second

    def convergence(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Convergence, 2 kappa_s F."""
        return 2 * scale * self.kappa_s * _nfw_density(self._ratio(x, y)[2])

    def shear(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the shear, of size kappa_s (4 g / x**2 - 2 F)."""
        first, second, r = self._ratio(x, y)
        return _radial_shear(first, second, scale * self.kappa_s * (2 * _nfw_density(r) - 4 * _nfw_mean(r)))


@dataclass(frozen=True, slots=True, kw_only=True)
class PointMass(MassProfile):
    """A point mass."""

    einstein_radius: float
    """Einstein radius [arcsec]."""

    def __post_init__(self) -> None:
        _positive("einstein_radius", self.einstein_radius)

    def potential(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Deflection potential [arcsec**2], 0 at 1 arcsec."""
        with np.errstate(divide="ignore"):
            return np.asarray(scale * self.einstein_radius**2 * np.log(np.hypot(*_coordinates(x, y))))

    def deflection(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the deflection [arcsec]; not a number at the centre."""
        first, second = _coordinates(x, y)
        with np.errstate(divide="ignore", invalid="ignore"):
            mean = scale * self.einstein_radius**2 / (first**2 + second**2)
            return mean * first, mean * second

    def convergence(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Convergence: 0, and infinite at the centre."""
        return np.where(np.hypot(*_coordinates(x, y)) > 0, 0.0, inf)

    def shear(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the shear; not a number at the centre."""
        first, second = _coordinates(x, y)
        with np.errstate(divide="ignore"):
            return _radial_shear(first, second, -scale * self.einstein_radius**2 / (first**2 + second**2))


@dataclass(frozen=True, slots=True, kw_only=True)
class Shear(MassProfile):
    """Constant external shear."""

    gamma1: float = 0.0
    """Shear along x."""
    gamma2: float = 0.0
    """Shear along the diagonal of x and y."""

    def potential(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Deflection potential [arcsec**2], 0 at the centre."""
        first, second = _coordinates(x, y)
        return np.asarray(scale * (self.gamma1 * (first**2 - second**2) / 2 + self.gamma2 * first * second))

    def deflection(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the deflection [arcsec]."""
        first, second = _coordinates(x, y)
        g1, g2 = scale * self.gamma1, scale * self.gamma2
        return g1 * first + g2 * second, g2 * first - g1 * second

    def convergence(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Convergence: 0."""
        return np.zeros_like(_coordinates(x, y)[0])

    def shear(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the shear."""
        shape = _coordinates(x, y)[0].shape
        return np.full(shape, scale * self.gamma1), np.full(shape, scale * self.gamma2)


@dataclass(frozen=True, slots=True, kw_only=True)
class UniformSheet(MassProfile):
    """Constant convergence."""

    kappa: float
    """Convergence."""

    def potential(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Deflection potential [arcsec**2], 0 at the centre."""
        first, second = _coordinates(x, y)
        return np.asarray(scale * self.kappa * (first**2 + second**2) / 2)

    def deflection(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the deflection [arcsec]."""
        first, second = _coordinates(x, y)
        return scale * self.kappa * first, scale * self.kappa * second

    def convergence(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Convergence."""
        return np.full(_coordinates(x, y)[0].shape, scale * self.kappa)

    def shear(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the shear: 0."""
        zero = np.zeros_like(_coordinates(x, y)[0])
        return zero, zero.copy()


@dataclass(frozen=True, slots=True, kw_only=True)
class ProfileSum(MassProfile):
    """Several profiles, each at its own centre."""

    parts: tuple[MassProfile, ...]
    """The profiles."""
    centres: tuple[tuple[float, float], ...] = ()
    """Their centres [arcsec]; empty: all at the origin."""

    def __post_init__(self) -> None:
        if not self.parts:
            raise InputError("`parts` must hold at least one profile, got none; add one")
        if self.centres and len(self.centres) != len(self.parts):
            raise InputError(
                f"`centres` must be as many as the {len(self.parts)} parts, got {len(self.centres)}; give one a part"
            )

    def _seen(self, x: npt.ArrayLike, y: npt.ArrayLike) -> list[tuple[MassProfile, Array, Array]]:
        first, second = _coordinates(x, y)
        centres = self.centres or ((0.0, 0.0),) * len(self.parts)
        return [(part, first - x0, second - y0) for part, (x0, y0) in zip(self.parts, centres, strict=True)]

    def potential(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Deflection potential [arcsec**2]."""
        return np.asarray(sum(part.potential(a, b, scale=scale) for part, a, b in self._seen(x, y)))

    def deflection(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the deflection [arcsec]."""
        each = [part.deflection(a, b, scale=scale) for part, a, b in self._seen(x, y)]
        return np.asarray(sum(one[0] for one in each)), np.asarray(sum(one[1] for one in each))

    def convergence(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Array:
        """Convergence."""
        return np.asarray(sum(part.convergence(a, b, scale=scale) for part, a, b in self._seen(x, y)))

    def shear(self, x: npt.ArrayLike, y: npt.ArrayLike, *, scale: float = 1.0) -> Pair:
        """Both components of the shear."""
        each = [part.shear(a, b, scale=scale) for part, a, b in self._seen(x, y)]
        return np.asarray(sum(one[0] for one in each)), np.asarray(sum(one[1] for one in each))


def isothermal_einstein_radius(dispersion: float, scales: LensScales) -> float:
    """Einstein radius 4 pi (sigma/c)**2 D_ls/D_s [arcsec] of an isothermal sphere of dispersion sigma [km/s]."""
    _positive("dispersion", dispersion)
    return 4 * pi * (1e3 * dispersion / LIGHT_SPEED) ** 2 * scales.D_ls / scales.D_s / ARCSEC
