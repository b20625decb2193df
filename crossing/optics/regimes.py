"""Which law the micro-caustics obey at a place of the macro image, and how wide their band along the critical curve is.

All functions broadcast, except the one that speaks.
"""

from __future__ import annotations

from math import pi
from typing import Literal, NamedTuple, TypeAlias, cast

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.star_caustic import caustic_area

__all__ = [
    "Regime",
    "RegimeName",
    "band_depth",
    "band_half_width",
    "caustic_coverage",
    "name_regimes",
    "overlap_convergence",
    "regime",
    "saturation",
    "smooth_limit",
]

Array: TypeAlias = npt.NDArray[np.float64]
RegimeName: TypeAlias = Literal["smooth", "isolated", "overlapping", "saturated"]


class Regime(NamedTuple):
    """What the micro-caustics are like at one place."""

    name: RegimeName
    """Keyword."""
    sentence: str
    """The same in words."""
    saturation: float
    """kappa_star / |lam_t|."""
    coverage: float
    """Share of the source plane that single caustics would cover, overlaps counted again."""


def _convergence(kappa_star: npt.ArrayLike) -> Array:
    value = np.asarray(kappa_star, dtype=np.float64)
    if not np.all(value >= 0):
        raise InputError(f"`kappa_star` must be zero or positive, got {np.min(value):g}; 0 means no stars")
    return value


def saturation(kappa_star: npt.ArrayLike, lam_t: npt.ArrayLike) -> Array:
    """Measure of overlap kappa_star |mu_t|; the caustics form one network above 1.

    Parameters
    ----------
    kappa_star : array_like
        Convergence in stars.
    lam_t : array_like
        Eigenvalue along the stretch.

    Returns
    -------
    ndarray
        kappa_star / |lam_t|, infinite on the critical curve.

    Raises
    ------
    InputError
        If a convergence is negative.

    References
    ----------
    .. [1] Oguri M., Diego J. M., Kaiser N., Kelly P. L., Broadhurst T., 2018, PRD 97, 023518
    """
    stars = _convergence(kappa_star)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(stars == 0, 0.0, stars / np.abs(lam_t)))


def overlap_convergence(lam_t: npt.ArrayLike, lam_r: npt.ArrayLike) -> Array:
    """Convergence in stars whose caustics, were they independent, would just cover the source plane.

    Parameters
    ----------
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, not zero.

    Returns
    -------
    ndarray
        pi |lam_t lam_r| / A with the area A of one star's caustic (`caustic_area`), for any masses. Infinite where
        the caustic is a point.

    Raises
    ------
    InputError
        If an eigenvalue is zero.
    """
    with np.errstate(divide="ignore"):
        return np.asarray(pi * np.abs(np.multiply(lam_t, lam_r)) / caustic_area(lam_t, lam_r))


def caustic_coverage(kappa_star: npt.ArrayLike, lam_t: npt.ArrayLike, lam_r: npt.ArrayLike) -> Array:
    """Share of the source plane inside single caustics, overlaps counted again: kappa_star / `overlap_convergence`.

    Parameters
    ----------
    kappa_star : array_like
        Convergence in stars.
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens; lam_t = 0 gives infinity.

    Returns
    -------
    ndarray
        Coverage.

    Raises
    ------
    InputError
        If a convergence is negative, or lam_r is zero.
    """
    stars, t, r = np.broadcast_arrays(_convergence(kappa_star), np.asarray(lam_t, float), np.asarray(lam_r, float))
    critical = t == 0
    single = np.asarray(stars / overlap_convergence(np.where(critical, r, t), r))
    return np.asarray(np.where(critical & (stars > 0), np.inf, single))


def smooth_limit(
    rate: npt.ArrayLike, theta_E: npt.ArrayLike = 1.0, mass: npt.ArrayLike = 1.0, radius: npt.ArrayLike = 0.0
) -> Array:
    """Convergence in stars up to which a smooth fold stays one.

    Parameters
    ----------
    rate : array_like
        T, the change of lam_t along the stretch, per unit of length.
    theta_E : array_like, optional
        Einstein radius of one solar mass in that unit.
    mass : array_like, optional
        Typical mass of the stars [Msun].
    radius : array_like, optional
        Radius of the source in that unit; a source wider than the band averages it out.

    Returns
    -------
    ndarray
        The larger of (T theta_E sqrt(mass) / 2)**(2/3) and sqrt(2 T radius).

    Raises
    ------
    InputError
        If a rate is not positive.

    Notes
    -----
    In order of magnitude only. Below the first, lam_t grows to kappa_star within a star's own stretch
    theta_E / sqrt(kappa_star), so that hardly a star lies in the band; the peaks of a network would also exceed that of
    the fold it comes from. Below the second the band is no deeper than the source's radius. The first agrees with the
    published kappa_star of about 10**-4.5 for clusters [1]_.

    References
    ----------
    .. [1] Venumadhav T., Dai L., Miralda-Escude J., 2017, ApJ 850, 49
    """
    change = np.asarray(rate, dtype=np.float64)
    if not np.all(change > 0):
        raise InputError(f"`rate` must be positive, got {np.min(change):g}; give the size of the gradient along x")
    lone = (change * np.asarray(theta_E) * np.sqrt(mass) / 2) ** (2 / 3)
    return np.asarray(np.maximum(lone, np.sqrt(2 * change * np.asarray(radius))))


def band_half_width(kappa_star: npt.ArrayLike, gradient_size: npt.ArrayLike) -> Array:
    """Half the width of the corrugated band along the macro critical curve, perpendicular to it.

    Parameters
    ----------
    kappa_star : array_like
        Convergence in stars.
    gradient_size : array_like
        |grad lam_t|, per unit of length.

    Returns
    -------
    ndarray
        kappa_star / |grad lam_t| in that unit: there |lam_t| < kappa_star.

    Raises
    ------
    InputError
        If a convergence is negative.

    References
    ----------
    .. [1] Oguri M., Diego J. M., Kaiser N., Kelly P. L., Broadhurst T., 2018, PRD 97, 023518
    """
    return np.asarray(_convergence(kappa_star) / np.asarray(gradient_size))


def band_depth(kappa_star: npt.ArrayLike, rate: npt.ArrayLike) -> Array:
    """Depth of the corrugated band in the source plane, along the normal of the macro caustic.

    Parameters
    ----------
    kappa_star : array_like
        Convergence in stars.
    rate : array_like
        T, the change of lam_t along the stretch, per unit of length.

    Returns
    -------
    ndarray
        kappa_star**2 / (2 T) in that unit: the source distance of the images at |lam_t| = kappa_star.

    Raises
    ------
    InputError
        If a convergence is negative.

    References
    ----------
    .. [1] Venumadhav T., Dai L., Miralda-Escude J., 2017, ApJ 850, 49
    """
    return np.asarray(_convergence(kappa_star) ** 2 / (2 * np.asarray(rate)))


def name_regimes(
    kappa_star: npt.ArrayLike, lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, smooth_below: npt.ArrayLike = 0.0
) -> npt.NDArray[np.str_]:
    """Keywords of the regimes, for arrays; see `regime`.

    Parameters
    ----------
    kappa_star : array_like
        Convergence in stars.
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens.
    smooth_below : array_like, optional
        Convergence in stars up to which the macro fold stays smooth, from `smooth_limit`.

    Returns
    -------
    ndarray of str
        ``smooth``, ``saturated``, ``overlapping`` or ``isolated``, the first that holds.

    Raises
    ------
    InputError
        If a convergence is negative, or lam_r is zero.
    """
    stars = _convergence(kappa_star)
    conditions = (
        stars <= np.asarray(smooth_below),
        saturation(stars, lam_t) > 1,
        caustic_coverage(stars, lam_t, lam_r) >= 1,
    )
    return np.select(np.broadcast_arrays(*conditions), ["smooth", "saturated", "overlapping"], "isolated")


def regime(kappa_star: float, lam_t: float, lam_r: float, smooth_below: float = 0.0) -> Regime:
    """Say which law the micro-caustics obey at one place.

    Parameters
    ----------
    kappa_star : float
        Convergence in stars.
    lam_t, lam_r : float
        Eigenvalues of the macro lens.
    smooth_below : float, optional
        Convergence in stars up to which the macro fold stays smooth, from `smooth_limit`.

    Returns
    -------
    Regime
        Keyword, sentence, and the two measures of overlap.

    Raises
    ------
    InputError
        If the convergence is negative, or lam_r is zero.
    """
    name = cast("RegimeName", name_regimes(kappa_star, lam_t, lam_r, smooth_below).item())
    measure, coverage = float(saturation(kappa_star, lam_t)), float(caustic_coverage(kappa_star, lam_t, lam_r))
    if name == "smooth":
        sentence = "There are no stars here: the macro caustic is smooth."
        if kappa_star > 0:
            sentence = (
                f"The stars (kappa_star = {kappa_star:.2g}) are too few to break up the macro caustic, which takes "
                f"more than about {smooth_below:.2g}: its peak is nearly that of a smooth fold."
            )
    elif name == "saturated":
        sentence = (
            f"The micro-caustics form one network, since kappa_star = {kappa_star:.2g} is larger than |lam_t| = "
            f"{abs(lam_t):.2g}: peaks no longer grow towards the macro critical curve."
        )
    elif name == "overlapping":
        sentence = (
            f"The micro-caustics overlap: singly they would cover the source plane {coverage:.2g} times, so closed "
            "forms for one star are a rough guide."
        )
    else:
        sentence = (
            f"The micro-caustics are mostly isolated: they cover a share of {coverage:.2g} of the source plane, and "
            "the closed forms for one star hold."
        )
    return Regime(name, sentence, measure, coverage)
