"""Highest magnifications of a source at a caustic, in closed form.

Three caustics are meant: the fold of a smooth macro lens, the caustic of one star on a constant macro lens, and the
network of caustics where the stars overlap. All peaks are those of the images that merge; what else there is of images
adds its magnification as a background. All functions broadcast.
"""

from __future__ import annotations

from typing import NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.fold import profile_peak
from crossing.optics.local import FoldGeometry
from crossing.optics.scales import LensScales
from crossing.optics.star_caustic import axis_fold_strength, crossing_strength

__all__ = [
    "ExtendedPeak",
    "disc_peak",
    "extended_peak",
    "isolated_peak",
    "saturated_peak",
    "scaling_peak",
    "smooth_peak",
]

Array: TypeAlias = npt.NDArray[np.float64]

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(32)


class ExtendedPeak(NamedTuple):
    """Magnification of a large uniform disc at a smooth fold, and how far the fold's law can be trusted for it."""

    law: Array
    """Highest magnification by the law of the fold, mean over the disc."""
    within_reach: Array
    """The same, of the part of the disc within the law's reach alone: a lower bound where the two differ."""
    reach_kpc: float
    """Distance inside the caustic [kpc, source plane] at which |lam_t| of the images has grown to |lam_r|."""


def _positive(name: str, value: npt.ArrayLike, hint: str) -> Array:
    array = np.asarray(value, dtype=np.float64)
    if not np.all(array > 0):
        raise InputError(f"`{name}` must be positive, got {array[~(array > 0)].flat[0]:g}; {hint}")
    return array


def _heights(limb_darkening: npt.ArrayLike) -> Array:
    asked = np.asarray(limb_darkening, dtype=np.float64)
    heights = [profile_peak(coefficient).height for coefficient in asked.ravel().tolist()]
    return np.reshape(np.asarray(heights, dtype=np.float64), asked.shape)


def disc_peak(
    radius: npt.ArrayLike,
    strength: npt.ArrayLike,
    background: npt.ArrayLike = 0.0,
    limb_darkening: npt.ArrayLike = 0.0,
) -> Array:
    """Highest magnification of a disc that crosses a straight fold.

    Parameters
    ----------
    radius : array_like
        Radius of the disc, in any unit of length.
    strength : array_like
        Fold strength K, in that unit to the power 1/2.
    background : array_like, optional
        Magnification of the images that take no part.
    limb_darkening : array_like, optional
        Linear coefficient in 0..1.

    Returns
    -------
    ndarray
        background + J_peak K / sqrt(radius); J_peak is 1.393119 for a uniform disc.

    Raises
    ------
    InputError
        If a radius is not positive, or a coefficient outside 0..1.

    References
    ----------
    .. [1] Schneider P., Weiss A., 1986, A&A 164, 237
    """
    size = _positive("radius", radius, "a point has no finite peak")
    return np.asarray(background + _heights(limb_darkening) * np.asarray(strength) / np.sqrt(size))


def smooth_peak(
    radius_rsun: npt.ArrayLike, strength_arcsec: npt.ArrayLike, scales: LensScales, limb_darkening: npt.ArrayLike = 0.0
) -> Array:
    """Highest magnification of a star that crosses the fold of a smooth macro lens; both images of the pair.

    Parameters
    ----------
    radius_rsun : array_like
        Radius of the star [nominal solar radii].
    strength_arcsec : array_like
        Fold strength K = |mu_r| sqrt(2 / T) [arcsec**(1/2)], as `FoldGeometry.strength`.
    scales : LensScales
        Distances.
    limb_darkening : array_like, optional
        Linear coefficient in 0..1.

    Returns
    -------
    ndarray
        Magnification, of order 1e6 for 10 solar radii.

    Raises
    ------
    InputError
        As `disc_peak`.

    Notes
    -----
    Stars of the lens, hardly ever absent, break such a fold up: see `regimes.smooth_limit`.

    References
    ----------
    .. [1] Miralda-Escude J., 1991, ApJ 379, 94
    .. [2] Venumadhav T., Dai L., Miralda-Escude J., 2017, ApJ 850, 49
    """
    return disc_peak(np.asarray(radius_rsun) * scales.rsun_arcsec, strength_arcsec, 0.0, limb_darkening)


def extended_peak(radius_kpc: npt.ArrayLike, fold: FoldGeometry, scales: LensScales) -> ExtendedPeak:
    """Highest magnification of a uniform disc of galactic size at the fold of a smooth macro lens.

    Parameters
    ----------
    radius_kpc : array_like
        Radius in the source plane [kpc].
    fold : FoldGeometry
        The fold.
    scales : LensScales
        Distances.

    Returns
    -------
    ExtendedPeak
        Mean magnification by the law, the part of it within the law's reach, and that reach.

    Raises
    ------
    InputError
        If a radius is not positive.

    Notes
    -----
    The law takes lam_t = T s and a constant lam_r. At the source distance d = lam_r**2 / (2 T) inside the caustic the
    images have |lam_t| = |lam_r| and the law gives 2 mu_r**2; beyond it the macro lens itself must be used. A disc is
    placed where the law's mean is highest, its centre 0.652 radii inside. Its stars and gas feel the breaking up of the
    caustic by stars of the lens only on scales far below such radii.

    References
    ----------
    .. [1] Schneider P., Ehlers J., Falco E. E., 1992, Gravitational Lenses, sec. 6.2 and 6.4
    """
    radius = _positive("radius_kpc", radius_kpc, "a point has no finite peak") / scales.kpc_per_arcsec_source
    reach = 1 / (2 * fold.rate * fold.mu_r**2)
    position = profile_peak(0.0).position
    scale = fold.strength / np.sqrt(radius)
    # Depth d / R = (1 + position) sin(phi)**2 makes the mean of d**(-1/2) over chords a smooth integral.
    deepest = np.arcsin(np.sqrt(np.minimum(reach / ((1 + position) * radius), 1.0)))
    phi = deepest[..., None] * (1 + _NODES) / 2
    chords = np.cos(phi) ** 2 * np.sqrt(1 - position + (1 + position) * np.sin(phi) ** 2)
    inner = 4 / np.pi * (1 + position) * np.sum(chords * _WEIGHTS, axis=-1) * deepest / 2
    return ExtendedPeak(
        disc_peak(radius, fold.strength), np.asarray(scale * inner), float(reach * scales.kpc_per_arcsec_source)
    )


def scaling_peak(radius: npt.ArrayLike, lam_t: npt.ArrayLike, lam_r: npt.ArrayLike, mass: npt.ArrayLike = 1.0) -> Array:
    """Peak at the caustic of one star, by the scaling that is used in the literature.

    Parameters
    ----------
    radius : array_like
        Radius of the disc [theta_E of one solar mass].
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens; only their sizes matter.
    mass : array_like, optional
        Mass of the star [Msun].

    Returns
    -------
    ndarray
        |mu_r| |mu_t|**(3/4) (theta_E / radius)**(1/2), with theta_E = sqrt(mass).

    Raises
    ------
    InputError
        If a radius or a mass is not positive.

    Notes
    -----
    The profile's peak of 1.39 is not in it, and lam_r / (lam_r + lam_t) is taken as 1: `isolated_peak` is larger by
    both. It describes the inner edge on the saddle side; on the minimum side most folds are weaker by 1.3 to 10.

    References
    ----------
    .. [1] Oguri M., Diego J. M., Kaiser N., Kelly P. L., Broadhurst T., 2018, PRD 97, 023518
    """
    size, star = _positive("radius", radius, "a point has no finite peak"), _positive("mass", mass, "give its size")
    with np.errstate(divide="ignore"):
        return np.asarray(np.abs(lam_t) ** -0.75 / np.abs(lam_r) * star**0.25 / np.sqrt(size))


def isolated_peak(
    radius: npt.ArrayLike,
    lam_t: npt.ArrayLike,
    lam_r: npt.ArrayLike,
    mass: npt.ArrayLike = 1.0,
    limb_darkening: npt.ArrayLike = 0.0,
) -> Array:
    """Peak of a disc at the caustic of one star on a constant macro lens.

    Parameters
    ----------
    radius : array_like
        Radius of the disc [theta_E of one solar mass], small against the caustic.
    lam_t, lam_r : array_like
        Eigenvalues of the macro lens, not zero, neither equal nor opposite.
    mass : array_like, optional
        Mass of the star [Msun].
    limb_darkening : array_like, optional
        Linear coefficient in 0..1.

    Returns
    -------
    ndarray
        J_peak K / sqrt(radius), without a background. For lam_t < 0 with K of the inner fold on the axis, exact; for
        lam_t > 0 with the median K over the crossings of tracks along the stretch.

    Raises
    ------
    InputError
        If a radius or a mass is not positive, or the eigenvalues have no regular caustic.

    References
    ----------
    .. [1] Chang K., Refsdal S., 1984, A&A 132, 168
    """
    size, t, r, star = np.broadcast_arrays(
        *(np.asarray(item, dtype=np.float64) for item in (radius, lam_t, lam_r, mass))
    )
    strength, saddle = np.empty(t.shape), t < 0
    strength[saddle] = axis_fold_strength(t[saddle], r[saddle], star[saddle])
    strength[~saddle] = crossing_strength(t[~saddle], r[~saddle], star[~saddle])
    return disc_peak(size, strength, 0.0, limb_darkening)


def saturated_peak(
    radius: npt.ArrayLike,
    kappa_star: npt.ArrayLike,
    lam_r: npt.ArrayLike,
    mass: npt.ArrayLike = 1.0,
    factor: npt.ArrayLike = 1.0,
) -> Array:
    """Typical peak in the network of overlapping caustics, where |lam_t| < kappa_star.

    Parameters
    ----------
    radius : array_like
        Radius of the disc [theta_E of one solar mass].
    kappa_star : array_like
        Convergence in stars.
    lam_r : array_like
        Eigenvalue across the stretch.
    mass : array_like, optional
        Typical mass of the stars [Msun].
    factor : array_like, optional
        Calibration; 1 gives the scaling of the paper.

    Returns
    -------
    ndarray
        factor |mu_r| kappa_star**(-3/4) (theta_E / radius)**(1/2), with theta_E = sqrt(mass): the scaling of one star
        at |lam_t| = kappa_star.

    Raises
    ------
    InputError
        If a radius, a convergence or a mass is not positive.

    References
    ----------
    .. [1] Oguri M., Diego J. M., Kaiser N., Kelly P. L., Broadhurst T., 2018, PRD 97, 023518
    """
    convergence = _positive("kappa_star", kappa_star, "without stars there is no network")
    return np.asarray(np.asarray(factor) * scaling_peak(radius, convergence, lam_r, mass))
