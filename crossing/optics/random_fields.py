"""Exact laws of infinite random fields of point masses on a constant macro lens.

They hold for any masses, since the shear of such a field is a two-dimensional Cauchy law of scale kappa_star. Averages
are over the source plane, magnifications total over all micro-images. All functions broadcast.
"""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
import numpy.typing as npt
from scipy import special

from crossing.errors import InputError

__all__ = ["density_at_zero", "mean_magnification", "mean_minima", "star_cross_section", "tail_amplitude"]

Array: TypeAlias = npt.NDArray[np.float64]

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(96)


def _field(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, kappa_star: npt.ArrayLike) -> tuple[Array, Array, Array]:
    t, r, stars = np.broadcast_arrays(*(np.asarray(item, dtype=np.float64) for item in (lam_t, lam_r, kappa_star)))
    if not np.all(stars > 0):
        raise InputError(
            f"`kappa_star` must be positive, got {np.min(stars):g}; without stars there is no random field"
        )
    return t, r, stars


def mean_magnification(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike) -> Array:
    """Mean magnification, that of the macro image, 1 / |lam_t lam_r|.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, stars included.

    Returns
    -------
    ndarray
        Magnification, infinite on a critical curve.
    """
    with np.errstate(divide="ignore"):
        return np.asarray(1 / np.abs(np.multiply(lam_t, lam_r)))


def density_at_zero(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, kappa_star: npt.ArrayLike) -> Array:
    """Density at zero of the determinant of the lens map's Jacobian, over the image plane.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, stars included.
    kappa_star : array_like
        Convergence in stars, positive.

    Returns
    -------
    ndarray
        p_J(0) = kappa_star E(m) / (pi n sqrt(f)), with n = kappa_star**2 + (lam_t + kappa_star)**2, f the same with
        lam_r, m = 1 - n/f. It peaks at lam_t = -kappa_star, on the critical curve of the smooth part.

    Raises
    ------
    InputError
        If a convergence in stars is not positive.

    References
    ----------
    .. [1] Nityananda R., Ostriker J. P., 1984, J. Astrophys. Astron. 5, 235 (the law of the shear)
    """
    t, r, stars = _field(lam_t, lam_r, kappa_star)
    one, two = stars**2 + (t + stars) ** 2, stars**2 + (r + stars) ** 2
    near, far = np.minimum(one, two), np.maximum(one, two)
    return np.asarray(stars / np.pi * special.ellipe((far - near) / far) / (near * np.sqrt(far)))


def tail_amplitude(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, kappa_star: npt.ArrayLike) -> Array:
    """Amplitude C of the tail of magnifications of a point source, P(>mu) -> C / mu**2.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, stars included.
    kappa_star : array_like
        Convergence in stars, positive.

    Returns
    -------
    ndarray
        2 <mu> p_J(0), for any masses; infinite where <mu> is.

    Raises
    ------
    InputError
        If a convergence in stars is not positive.

    Notes
    -----
    It is also the integral of K**2 over the length of caustics per area of the source plane. Real stars are too large
    for the bare law: before it sets in, the disc saturates the weaker folds, and the pair has a background near <mu>.

    References
    ----------
    .. [1] Schneider P., 1987, ApJ 319, 9
    """
    return np.asarray(2 * mean_magnification(lam_t, lam_r) * density_at_zero(lam_t, lam_r, kappa_star))


def star_cross_section(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, mass: npt.ArrayLike = 1.0) -> Array:
    """Amplitude C of the cross-section of one star for high magnifications of a point, sigma(>mu) -> C / mu**2.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens.
    mass : array_like, optional
        Mass of the star [Msun].

    Returns
    -------
    ndarray
        C [theta_E**2 of one solar mass] = 2 mass E(m) / (s**2 l), with the smaller size s and the larger size l of the
        eigenvalues and m = 1 - (s/l)**2: the same for a minimum and a saddle. Infinite on a critical curve.

    Notes
    -----
    Few stars of convergence kappa_star make a tail kappa_star C / (pi |lam_t lam_r|) / mu**2, which is the limit of
    `tail_amplitude` for small kappa_star.

    References
    ----------
    .. [1] Chang K., Refsdal S., 1984, A&A 132, 168 (the lens; the integral along its critical curve is ours)
    """
    one, two, star = np.broadcast_arrays(np.abs(lam_t), np.abs(lam_r), np.asarray(mass, dtype=np.float64))
    small, large = np.minimum(one, two), np.maximum(one, two)
    with np.errstate(divide="ignore", invalid="ignore"):
        flattening = np.where(large > 0, 1 - (small / large) ** 2, 0.0)
        return np.asarray(2 * star * special.ellipe(flattening) / (small**2 * large))


def mean_minima(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, kappa_star: npt.ArrayLike) -> Array:
    """Mean number of micro-images that are minima of the arrival time, per source.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, stars included.
    kappa_star : array_like
        Convergence in stars, positive.

    Returns
    -------
    ndarray
        <mu> E[max(det, 0)], to 1e-10 (1e-7 for kappa_star below 1e-6); infinite where <mu> is. It
        counts all images with det > 0, which are minima as long as the smooth convergence is below 1.

    Raises
    ------
    InputError
        If a convergence in stars is not positive.

    Notes
    -----
    The integral of (k**2 - r**2) over the density of the total shear r, with k = 1 minus the smooth convergence, in the
    variable asinh((r - |gamma|) / kappa_star). Without macro shear it is <mu> (sqrt(k**2 + kappa_star**2) -
    kappa_star)**2.

    References
    ----------
    .. [1] Wambsganss J., Witt H. J., Schneider P., 1992, A&A 258, 591
    .. [2] Granot J., Schechter P. L., Wambsganss J., 2003, ApJ 583, 575
    """
    t, r, stars = _field(lam_t, lam_r, kappa_star)
    k, shear = np.abs((t + r) / 2 + stars)[..., None], np.abs(r - t)[..., None] / 2
    scale = stars[..., None]
    low, high = np.arcsinh(-shear / scale), np.arcsinh((k - shear) / scale)
    variable = low + (high - low) * (1 + _NODES) / 2
    radius = np.maximum(shear + scale * np.sinh(variable), 0.0)
    far, near = scale**2 + (radius + shear) ** 2, scale**2 + (radius - shear) ** 2
    density = 2 * scale / np.pi * radius * special.ellipe((far - near) / far) / (near * np.sqrt(far))
    inside = (k - radius) * (k + radius) * density * scale * np.cosh(variable)
    return np.asarray(mean_magnification(t, r) * np.sum(inside * _WEIGHTS * (high - low) / 2, axis=-1))
