"""Caustics of one star on a constant macro lens: areas, sizes and fold strengths in closed form.

The lens equation is that of a point mass with convergence and shear. Lengths are in Einstein radii of one solar mass,
u and x along the axis of lam_t; the closed forms hold while no other star is near and the macro lens does not change
over the caustic. All functions broadcast.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import pi
from typing import Final, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt
from scipy import special

from crossing.errors import InputError

__all__ = [
    "HalfSizes",
    "StarCaustic",
    "axis_fold_strength",
    "caustic_area",
    "caustic_half_sizes",
    "crossing_strength",
    "star_caustic",
]

Array: TypeAlias = npt.NDArray[np.float64]

# Shear over |1 - kappa| below which the elliptic form of the area cancels; the series is good to 1e-11 there.
_WEAK: Final = 3e-3
_CROSSING_POINTS: Final = 4001


class HalfSizes(NamedTuple):
    """Largest distances of a caustic from the star's place in the source plane [theta_E of one solar mass]."""

    u: Array
    """Along the axis of lam_t."""
    v: Array
    """Along the axis of lam_r."""


@dataclass(frozen=True, slots=True, kw_only=True)
class StarCaustic:
    """One half of the caustic of a star with shear; the other half is its mirror image through the star, (-u, -v).

    On the saddle side this is one of two closed triangles; otherwise it is half of one closed curve.
    """

    u: Array
    """Along the axis of lam_t [theta_E of one solar mass], shape (n,); the last point continues to the mirror image."""
    v: Array
    """Along the axis of lam_r, likewise."""
    strength: Array
    """Fold strength K at each point [theta_E**(1/2)]; infinite at a cusp, where the fold law has no room."""

    @property
    def length(self) -> float:
        """Length of the whole caustic, both halves, as a polyline [theta_E]."""
        return float(2 * np.sum(np.hypot(np.diff(self.u), np.diff(self.v))))

    def strength_quantile(self, share: npt.ArrayLike = 0.5, angle: float = 0.0) -> Array:
        """Quantiles of the fold strength over the crossings that parallel tracks meet.

        Parameters
        ----------
        share : array_like, optional
            Shares in 0..1 of the crossings with a weaker fold.
        angle : float, optional
            Direction of the tracks from the u axis [deg].

        Returns
        -------
        ndarray
            K [theta_E**(1/2)], shape of `share`. Every crossing counts once: pieces of the caustic weigh with their
            extent across the tracks.
        """
        across = np.abs(np.diff(self.v) * np.cos(np.radians(angle)) - np.diff(self.u) * np.sin(np.radians(angle)))
        # The harmonic mean stays finite next to a cusp.
        middle = 2 / (1 / self.strength[1:] + 1 / self.strength[:-1])
        order = np.argsort(middle)
        weight = across[order]
        reached = (np.cumsum(weight) - weight / 2) / np.sum(weight)
        return np.asarray(np.interp(np.asarray(share, dtype=np.float64), reached, middle[order]))


def _lens(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, mass: npt.ArrayLike) -> tuple[Array, Array, Array]:
    t, r, m = np.broadcast_arrays(*(np.asarray(item, dtype=np.float64) for item in (lam_t, lam_r, mass)))
    if np.any((t == 0) | (r == 0)):
        raise InputError(
            "`lam_t` and `lam_r` must not be zero, got 0; on the critical curve the caustic of one star has no end"
        )
    if np.any(m <= 0):
        raise InputError(f"`mass` must be positive, got {np.min(m):g} Msun; give the mass of the star")
    return t, r, m


def caustic_area(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, mass: npt.ArrayLike = 1.0) -> Array:
    """Area that the caustics of one star enclose.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, not zero, any parity.
    mass : array_like, optional
        Mass of the star [Msun].

    Returns
    -------
    ndarray
        Area [theta_E**2 of one solar mass]; of both triangles together on the saddle side.

    Raises
    ------
    InputError
        If an eigenvalue is zero or a mass not positive.

    Notes
    -----
    With k = (lam_t + lam_r)/2, g = |lam_r - lam_t|/2, S = |k| + g and the parameter m = 4 g |k| / S**2::

        A = | 4 S E(m) - 4 g**2 K(m) / S - 2 pi k [g < |k|] |

    from the contour integral along the critical curve 1/zbar**2 = g + k exp(i psi). At a maximum the curve may cross
    itself; the area is then the signed one.

    References
    ----------
    .. [1] Chang K., Refsdal S., 1984, A&A 132, 168
    .. [2] An J. H., Evans N. W., 2006, MNRAS 369, 317 (areas by another way)
    """
    t, r, m = _lens(lam_t, lam_r, mass)
    k, shear = (t + r) / 2, np.abs(r - t) / 2
    large, small = np.maximum(np.abs(t), np.abs(r)), np.minimum(np.abs(t), np.abs(r))
    rest = (small / large) ** 2
    full = 4 * large * special.ellipe(1 - rest) - 4 * shear**2 / large * special.ellipkm1(rest)
    area = np.abs(full - np.where(t * r > 0, 2 * pi * k, 0.0))
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = shear / np.abs(k)
        series = 1.5 * pi * shear * ratio * (1 + 5 / 16 * ratio**2)
    return np.asarray(m * np.where((k > 0) & (ratio < _WEAK), series, area))


def caustic_half_sizes(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, mass: npt.ArrayLike = 1.0) -> HalfSizes:
    """How far the caustics of one star reach from the place where the star itself would be seen.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, not zero; of a minimum or a saddle.
    mass : array_like, optional
        Mass of the star [Msun].

    Returns
    -------
    HalfSizes
        Largest |u| and |v|. With shear g at a minimum 2 g / sqrt(lam_r) and 2 g / sqrt(lam_t): the caustic is long
        across the stretched axis. At a saddle the place of the cusps, on and off the axis.

    Raises
    ------
    InputError
        If an eigenvalue is zero, both are negative, or a mass is not positive.

    References
    ----------
    .. [1] Chang K., Refsdal S., 1984, A&A 132, 168
    """
    t, r, m = _lens(lam_t, lam_r, mass)
    if np.any((t < 0) & (r < 0)):
        raise InputError("`lam_t` and `lam_r` must not both be negative here, got a maximum; use star_caustic")
    k, shear = (t + r) / 2, np.abs(r - t) / 2
    minimum = t * r > 0
    # The axis of the negative eigenvalue holds the triangles of a saddle, whichever of the two it is.
    along = 2 * shear / np.sqrt(np.where(minimum, r, np.maximum(t, r)))
    third = np.where(minimum, 0.0, (np.sqrt(np.maximum(4 * shear**2 - 3 * k**2, 0.0)) - k) / 2)
    turn = np.conj(k + third * np.exp(1j * pi / 3))
    with np.errstate(divide="ignore", invalid="ignore"):
        unit = turn / shear
        z = (shear - k * unit) ** -0.5
        tip = np.abs((k * z - shear * np.conj(z) - 1 / np.conj(z)).imag)
    across = np.where(minimum, 2 * shear / np.sqrt(np.abs(t)), tip)
    swapped = ~minimum & (t > 0)
    scale = np.sqrt(m)
    return HalfSizes(np.asarray(scale * np.where(swapped, across, along)), scale * np.where(swapped, along, across))


def star_caustic(lam_t: float, lam_r: float, mass: float = 1.0, points: int = 801) -> StarCaustic:
    """Trace the caustic of one star, with the strength of the fold at every point.

    Parameters
    ----------
    lam_t, lam_r : float
        Eigenvalues of the macro lens, not zero, neither equal nor opposite, any parity.
    mass : float, optional
        Mass of the star [Msun].
    points : int, optional
        Points along one half of the caustic.

    Returns
    -------
    StarCaustic
        Points and fold strengths. Lengths of the polyline are good to 1e-5 with the points of the default.

    Raises
    ------
    InputError
        If an eigenvalue is zero, the two are opposite or equal (no caustic, or a point), or the mass is not positive.

    Notes
    -----
    The critical curve is 1/zbar**2 = g + k exp(i psi). The points are uniform in the integral of dpsi |z|**2, which is
    an elliptic one, so they are as dense in the logarithm of the radius where lam_t is small. With the null direction e
    of the lens map, T = |e . grad det| / (2 |k|) and K = sqrt(2 / T) / (2 |k|), per distance along the normal.

    References
    ----------
    .. [1] Chang K., Refsdal S., 1984, A&A 132, 168
    .. [2] Schneider P., Ehlers J., Falco E. E., 1992, Gravitational Lenses, sec. 6.2
    """
    _lens(lam_t, lam_r, mass)
    k, shear = (lam_t + lam_r) / 2, (lam_r - lam_t) / 2
    if k == 0 or lam_t == lam_r > 0:
        raise InputError(
            f"`lam_t` must not be lam_r or -lam_r, got {lam_t:g} and {lam_r:g}; the caustic is a point or absent then"
        )
    small, large = sorted((abs(lam_t), abs(lam_r)))
    sine, cosine = _half_angles((small / large) ** 2, points)
    # g - |k| is one of the eigenvalues: written so, a small one keeps its digits.
    gap = small if lam_t * lam_r < 0 else -small
    w = gap + 2 * abs(k) * cosine * (cosine + 1j * sine)
    # The square root is followed around its branch point; turning by a quarter makes the shear positive.
    z = np.abs(w) ** -0.5 * np.exp(0.5j * np.unwrap(np.angle(w)))
    other = w - abs(shear)
    source = k * z - (abs(shear) + w) * np.conj(z)
    null = np.sqrt(-other / k)
    slope = np.abs(2 * np.real(np.conj(other) * -2 * np.conj(z) ** -3 * np.conj(null))) / abs(2 * k)
    with np.errstate(divide="ignore"):
        strength = np.sqrt(2 / slope) / abs(2 * k)
    turned = mass**0.5 * source * (1j if shear < 0 else 1)
    return StarCaustic(u=turned.real, v=turned.imag, strength=mass**0.25 * strength)


def _half_angles(rest: float, points: int) -> tuple[Array, Array]:
    """Sine and cosine of psi/2 from 0 to pi, uniform in the elliptic integral of parameter 1 - rest."""
    quarter = float(special.ellipkm1(rest))
    sine, cosine, _, _ = special.ellipj(np.linspace(0, quarter, points // 2 + 1), 1 - rest)
    sine[-1], cosine[-1] = 1.0, 0.0
    return np.concatenate([sine, sine[-2::-1]]), np.concatenate([cosine, -cosine[-2::-1]])


def axis_fold_strength(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, mass: npt.ArrayLike = 1.0) -> Array:
    """Strength of the inner fold of a star's caustic on the axis of lam_t, on the saddle side.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, lam_t < 0.
    mass : array_like, optional
        Mass of the star [Msun].

    Returns
    -------
    ndarray
        K = m**(1/4) / (|lam_t + lam_r| |lam_t|**(3/4)) [theta_E**(1/2) of one solar mass]. The whole inner edge of the
        triangle is within about 10% of it; the outer edges are 2 to 10 times weaker.

    Raises
    ------
    InputError
        If a lam_t is not negative (a minimum has no fold on the axis), lam_r is zero, or a mass not positive.

    References
    ----------
    .. [1] Chang K., Refsdal S., 1984, A&A 132, 168
    """
    t, r, m = _lens(lam_t, lam_r, mass)
    if np.any(t > 0):
        raise InputError(f"`lam_t` must be negative, got {np.max(t):g}; on the minimum side use crossing_strength")
    with np.errstate(divide="ignore"):
        return np.asarray(m**0.25 / (np.abs(t + r) * np.abs(t) ** 0.75))


def crossing_strength(
    lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, mass: npt.ArrayLike = 1.0, share: float = 0.5, angle: float = 0.0
) -> Array:
    """Quantile of the fold strength over the crossings of one star's caustics, the median by default.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, not zero, neither equal nor opposite, any parity.
    mass : array_like, optional
        Mass of the star [Msun].
    share : float, optional
        Share in 0..1 of the crossings with a weaker fold.
    angle : float, optional
        Direction of motion from the u axis [deg].

    Returns
    -------
    ndarray
        K [theta_E**(1/2) of one solar mass], good to 2e-3. At a minimum with lam_t far below lam_r, and for motion
        along u, the share is nearly the height of the track over that of the cusp on the v axis.

    Raises
    ------
    InputError
        As `star_caustic`.
    """
    t, r, m = _lens(lam_t, lam_r, mass)
    found = [
        float(star_caustic(float(a), float(b), points=_CROSSING_POINTS).strength_quantile(share, angle))
        for a, b in zip(t.flat, r.flat, strict=True)
    ]
    return np.asarray(m**0.25 * np.reshape(found, t.shape))
