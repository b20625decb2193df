"""Times of caustic crossings in closed form; speeds are effective ones, in the source plane per observer's time.

All functions broadcast. The caustics are straight and do not move.
"""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.constants import ARCSEC, DAY, MPC, R_SUN, YEAR
from crossing.optics.scales import LensScales

__all__ = ["band_crossing_years", "caustic_spacing_days", "crossing_days"]

Array: TypeAlias = npt.NDArray[np.float64]


def _normal_speed(speed_kms: npt.ArrayLike, angle: npt.ArrayLike = 0.0) -> Array:
    speed = np.asarray(speed_kms, dtype=np.float64)
    if not np.all(speed > 0):
        raise InputError(f"`speed_kms` must be positive, got {np.min(speed):g}; give the effective speed")
    return np.asarray(speed * np.abs(np.cos(np.radians(angle))))


def crossing_days(radius_rsun: npt.ArrayLike, speed_kms: npt.ArrayLike, angle: npt.ArrayLike = 0.0) -> Array:
    """Days that a disc takes to pass over a fold, from the first touch to the last.

    Parameters
    ----------
    radius_rsun : array_like
        Radius of the star [nominal solar radii].
    speed_kms : array_like
        Effective speed [km/s].
    angle : array_like, optional
        Angle between the motion and the caustic's normal [deg].

    Returns
    -------
    ndarray
        2 R / (V |cos(angle)|) [day]: two radius times.

    Raises
    ------
    InputError
        If a speed is not positive.
    """
    return np.asarray(2 * np.asarray(radius_rsun) * R_SUN / (1e3 * _normal_speed(speed_kms, angle) * DAY))


def caustic_spacing_days(
    scales: LensScales, lam_r: npt.ArrayLike, speed_kms: npt.ArrayLike, mass: npt.ArrayLike = 1.0
) -> Array:
    """Typical days between two crossings of one star's caustic by motion along the stretch.

    Parameters
    ----------
    scales : LensScales
        Distances.
    lam_r : array_like
        Eigenvalue across the stretch.
    speed_kms : array_like
        Effective speed [km/s].
    mass : array_like, optional
        Mass of the star [Msun].

    Returns
    -------
    ndarray
        theta_E D_s / (sqrt(|mu_r|) V) [day]: the half width of the caustic of an isolated star near the macro critical
        curve. In a network the crossings are more frequent.

    Raises
    ------
    InputError
        If a speed or a mass is not positive.

    References
    ----------
    .. [1] Oguri M., Diego J. M., Kaiser N., Kelly P. L., Broadhurst T., 2018, PRD 97, 023518
    """
    star = np.asarray(mass, dtype=np.float64)
    if not np.all(star > 0):
        raise InputError(f"`mass` must be positive, got {np.min(star):g} Msun; give the mass of the star")
    years = scales.einstein_crossing_years(1.0) * np.sqrt(star * np.abs(lam_r)) / _normal_speed(speed_kms)
    return np.asarray(years * YEAR / DAY)


def band_crossing_years(
    depth_arcsec: npt.ArrayLike, scales: LensScales, speed_kms: npt.ArrayLike, angle: npt.ArrayLike = 0.0
) -> Array:
    """Years that a source takes to cross the corrugated band of micro-caustics along a smooth caustic.

    Parameters
    ----------
    depth_arcsec : array_like
        Depth of the band in the source plane [arcsec], as `regimes.band_depth`.
    scales : LensScales
        Distances.
    speed_kms : array_like
        Effective speed [km/s].
    angle : array_like, optional
        Angle between the motion and the normal of the macro caustic [deg].

    Returns
    -------
    ndarray
        Time [yr].

    Raises
    ------
    InputError
        If a speed is not positive.

    References
    ----------
    .. [1] Venumadhav T., Dai L., Miralda-Escude J., 2017, ApJ 850, 49
    """
    depth = np.asarray(depth_arcsec) * ARCSEC * scales.D_s * MPC
    return np.asarray(depth / (1e3 * _normal_speed(speed_kms, angle) * YEAR))
