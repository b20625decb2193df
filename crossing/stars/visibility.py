"""How much a star must be magnified to be seen."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.stars.photosphere import blackbody_flux_njy

__all__ = ["magnification_to_see"]

Array: TypeAlias = npt.NDArray[np.float64]


def magnification_to_see(
    radius_rsun: npt.ArrayLike,
    temperature_K: npt.ArrayLike,
    redshift: npt.ArrayLike,
    depth_njy: npt.ArrayLike,
    wavelength_um: float,
    width_um: float | None = None,
    transmission: npt.ArrayLike = 1.0,
    *,
    luminosity_distance_mpc: npt.ArrayLike,
) -> Array:
    """Magnification at which a blackbody star reaches the depth of a band; all array arguments broadcast.

    Parameters
    ----------
    radius_rsun : array_like
        Radius [nominal solar radii].
    temperature_K : array_like
        Temperature [K], positive.
    redshift : array_like
        Redshift of the star.
    depth_njy : array_like
        Faintest flux density that is detected [nJy], at the significance that is wanted.
    wavelength_um : float
        Observed wavelength [um]: the band's centre.
    width_um : float, optional
        Full width [um] of a top-hat band around it; monochromatic without.
    transmission : array_like, optional
        Share of the light that dust lets through, in 0..1.
    luminosity_distance_mpc : array_like
        Luminosity distance [Mpc].

    Returns
    -------
    ndarray
        Depth over unmagnified flux, to be compared with the total magnification; infinite where the star sends no light
        through the band.

    Raises
    ------
    InputError
        If a depth is not positive, or the band is not one (see `blackbody_flux_njy`).
    """
    depth = np.asarray(depth_njy, dtype=np.float64)
    if not np.all(depth > 0):
        raise InputError(f"`depth_njy` must be positive, got {np.min(depth):g}; give the depth of the survey")
    bare = blackbody_flux_njy(
        radius_rsun,
        temperature_K,
        redshift,
        wavelength_um,
        width_um,
        transmission,
        luminosity_distance_mpc=luminosity_distance_mpc,
    )
    with np.errstate(divide="ignore"):
        return np.asarray(depth / bare)
