"""Starlight in solar units: the Sun's magnitude at any wavelength, and what a surface brightness means in light."""

from __future__ import annotations

from math import log10
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError
from crossing.optics.constants import ARCSEC

__all__ = ["SOLAR_RANGE_UM", "luminosity_density", "solar_ab_magnitude"]

Array = NDArray[np.float64]

# AB magnitude of the Sun at 10 pc through top-hat bands 15% wide (weighted by photons), by wavelength [um]: integrals
# over the extraterrestrial spectrum of ASTM G173-03 (Gueymard 2004, Solar Energy 76, 423).
_SUN: Final = (
    (0.300, 7.44),
    (0.320, 6.92),
    (0.340, 6.59),
    (0.360, 6.35),
    (0.380, 6.09),
    (0.400, 5.78),
    (0.425, 5.44),
    (0.450, 5.21),
    (0.475, 5.05),
    (0.500, 4.96),
    (0.550, 4.80),
    (0.600, 4.67),
    (0.650, 4.60),
    (0.700, 4.56),
    (0.800, 4.51),
    (0.900, 4.50),
    (1.000, 4.50),
    (1.200, 4.53),
    (1.400, 4.59),
    (1.600, 4.66),
    (1.800, 4.82),
    (2.000, 5.00),
    (2.250, 5.20),
    (2.500, 5.41),
    (3.000, 5.76),
    (3.500, 6.05),
)
SOLAR_RANGE_UM: Final = (_SUN[0][0], _SUN[-1][0])
"""Rest wavelengths [um] at which light can be told in solar units."""
# Magnitude per arcsec2 of one absolute magnitude per pc2: 5 lg of (1 pc at 10 pc in arcsec).
_PER_SQUARE_PARSEC: Final = -5.0 * log10(10.0 * ARCSEC)


def solar_ab_magnitude(rest_wavelength_um: ArrayLike) -> Array:
    """Absolute AB magnitude of the Sun in a broad band.

    Parameters
    ----------
    rest_wavelength_um : array_like
        Wavelength [um], 0.3 to 3.5.

    Returns
    -------
    ndarray
        Magnitude of the Sun at 10 pc through a band some 15% wide; 0.02 mag by interpolation, more where a band is much
        wider or narrower below 0.45 um.

    Raises
    ------
    InputError
        If a wavelength lies outside the range.

    References
    ----------
    .. [1] Gueymard C. A., 2004, Solar Energy 76, 423
    """
    wavelength = np.asarray(rest_wavelength_um, dtype=np.float64)
    low, high = SOLAR_RANGE_UM
    wrong = ~((wavelength >= low) & (wavelength <= high))
    if np.any(wrong):
        raise InputError(
            f"`rest_wavelength_um` must be {low:g} to {high:g}, got {wavelength[wrong].flat[0]:g}; "
            "take a band in which old stars shine"
        )
    lengths, magnitudes = np.array(_SUN).T
    return np.asarray(np.interp(np.log(wavelength), np.log(lengths), magnitudes))


def luminosity_density(
    surface_brightness: ArrayLike, wavelength_um: float, redshift: ArrayLike, extinction_mag: ArrayLike = 0.0
) -> Array:
    """Light per area of what has a surface brightness.

    Parameters
    ----------
    surface_brightness : array_like
        Observed surface brightness [AB mag / arcsec2].
    wavelength_um : float
        Observed wavelength of the band [um].
    redshift : array_like
        Redshift of the light.
    extinction_mag : array_like, optional
        Galactic extinction in the band [mag].

    Returns
    -------
    ndarray
        Surface density of light [Lsun / pc2], in units of the Sun's light at the rest wavelength,
        `wavelength_um` / (1 + z): the ratio of mass to light that goes with it is that of this rest wavelength.

    Raises
    ------
    InputError
        If the redshift is negative, or the rest wavelength lies outside 0.3 to 3.5 um.

    Notes
    -----
    Bolometric surface brightness is dimmed by (1 + z)**4. AB magnitudes are per unit frequency, and the band receives
    1/(1 + z) of the bandwidth that was sent, so that (1 + z)**3 remains:
    L = 10**(-0.4 (SB - A - M_sun - 21.572)) (1 + z)**3.

    References
    ----------
    .. [1] Tolman R. C., 1930, PNAS 16, 511
    """
    stretch = 1.0 + np.asarray(redshift, dtype=np.float64)
    if not np.all(stretch >= 1.0):
        raise InputError(f"`redshift` must be zero or positive, got {np.min(stretch) - 1:g}; give that of the light")
    sun = solar_ab_magnitude(wavelength_um / stretch)
    bare = np.asarray(surface_brightness, dtype=np.float64) - np.asarray(extinction_mag, dtype=np.float64)
    return np.asarray(10.0 ** (-0.4 * (bare - sun - _PER_SQUARE_PARSEC)) * stretch**3)
