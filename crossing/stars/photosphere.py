"""Stars as blackbodies: radius, temperature and luminosity, and the flux that arrives through a band."""

from __future__ import annotations

from math import log, pi
from typing import Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.event.quantities import AB_ZERO_POINT
from crossing.optics.constants import BOLTZMANN, L_SUN, LIGHT_SPEED, MPC, PLANCK, R_SUN, STEFAN_BOLTZMANN

__all__ = [
    "ab_magnitude",
    "blackbody_flux_njy",
    "flux_njy_from_magnitude",
    "luminosity_lsun",
    "radius_from_luminosity",
    "temperature_from_luminosity",
]

Array: TypeAlias = npt.NDArray[np.float64]

_NJY: Final = 1e-35
_SUN: Final = 4 * pi * R_SUN**2 * STEFAN_BOLTZMANN / L_SUN
# Photon-weighted mean over a top-hat: a blackbody is so smooth that eight points reach 1e-8 in bands 80% wide.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(8)


def luminosity_lsun(radius_rsun: npt.ArrayLike, temperature_K: npt.ArrayLike) -> Array:
    """Bolometric luminosity by the law of Stefan and Boltzmann.

    Parameters
    ----------
    radius_rsun : array_like
        Radius [nominal solar radii].
    temperature_K : array_like
        Effective temperature [K]; broadcasts.

    Returns
    -------
    ndarray
        Luminosity [nominal solar luminosities].

    References
    ----------
    .. [1] Prsa A. et al., 2016, AJ 152, 41 (IAU 2015 Resolution B3)
    """
    radius, temperature = np.asarray(radius_rsun, dtype=np.float64), np.asarray(temperature_K, dtype=np.float64)
    return np.asarray(_SUN * radius**2 * temperature**4)


def radius_from_luminosity(luminosity_lsun: npt.ArrayLike, temperature_K: npt.ArrayLike) -> Array:
    """Radius of a star of given luminosity and temperature.

    Parameters
    ----------
    luminosity_lsun : array_like
        Luminosity [nominal solar luminosities].
    temperature_K : array_like
        Effective temperature [K]; broadcasts.

    Returns
    -------
    ndarray
        Radius [nominal solar radii].
    """
    luminosity, temperature = np.asarray(luminosity_lsun, dtype=np.float64), np.asarray(temperature_K, dtype=np.float64)
    return np.asarray(np.sqrt(luminosity / _SUN) / temperature**2)


def temperature_from_luminosity(luminosity_lsun: npt.ArrayLike, radius_rsun: npt.ArrayLike) -> Array:
    """Effective temperature of a star of given luminosity and radius.

    Parameters
    ----------
    luminosity_lsun : array_like
        Luminosity [nominal solar luminosities].
    radius_rsun : array_like
        Radius [nominal solar radii]; broadcasts.

    Returns
    -------
    ndarray
        Temperature [K].
    """
    luminosity, radius = np.asarray(luminosity_lsun, dtype=np.float64), np.asarray(radius_rsun, dtype=np.float64)
    return np.asarray((luminosity / (_SUN * radius**2)) ** 0.25)


def _planck(frequency: Array, temperature: Array) -> Array:
    """Specific intensity B_nu [W m-2 Hz-1 sr-1]."""
    with np.errstate(over="ignore"):
        return np.asarray(
            2 * PLANCK * frequency**3 / LIGHT_SPEED**2 / np.expm1(PLANCK * frequency / (BOLTZMANN * temperature))
        )


def blackbody_flux_njy(
    radius_rsun: npt.ArrayLike,
    temperature_K: npt.ArrayLike,
    redshift: npt.ArrayLike,
    wavelength_um: float,
    width_um: float | None = None,
    magnification: npt.ArrayLike = 1.0,
    *,
    luminosity_distance_mpc: npt.ArrayLike,
) -> Array:
    """Flux density of a blackbody star through a band; all array arguments broadcast.

    Parameters
    ----------
    radius_rsun : array_like
        Radius [nominal solar radii].
    temperature_K : array_like
        Temperature [K], positive.
    redshift : array_like
        Redshift of the star.
    wavelength_um : float
        Observed wavelength [um]: the band's centre.
    width_um : float, optional
        Full width [um] of a top-hat band around it; monochromatic without.
    magnification : array_like, optional
        Magnification.
    luminosity_distance_mpc : array_like
        Luminosity distance [Mpc].

    Returns
    -------
    ndarray
        F_nu = mu (1+z) pi R**2 B_nu(T, (1+z) nu) / d_L**2 [nJy]; through a band, its mean weighted by photons, as
        AB magnitudes are defined.

    Raises
    ------
    InputError
        If the wavelength is not positive, or the band is as wide as twice its wavelength.
    """
    wavelengths, weights = _band_nodes(wavelength_um, width_um)
    radius, temperature, stretch, mu, distance = np.broadcast_arrays(
        *(
            np.asarray(item, dtype=np.float64)
            for item in (radius_rsun, temperature_K, redshift, magnification, luminosity_distance_mpc)
        )
    )
    stretch = 1 + stretch
    intensity = np.zeros(radius.shape)
    for wavelength, weight in zip(wavelengths, weights, strict=True):
        intensity += weight * _planck(stretch * LIGHT_SPEED / (wavelength * 1e-6), temperature)
    return np.asarray(mu * stretch * pi * (radius * R_SUN / (distance * MPC)) ** 2 * intensity / _NJY)


def _band_nodes(wavelength: float, width: float | None) -> tuple[Array, Array]:
    """Wavelengths [um] and weights (sum 1) for a photon-weighted mean over a top-hat, uniform in ln(wavelength)."""
    if not wavelength > 0:
        raise InputError(f"`wavelength_um` must be positive, got {wavelength:g}; give it in micrometres")
    if width is None or width == 0:
        return np.array([wavelength]), np.array([1.0])
    if not 0 < width < 2 * wavelength:
        raise InputError(
            f"`width_um` must be positive and below twice the wavelength, got {width:g}; give the full width"
        )
    low, high = log(wavelength - width / 2), log(wavelength + width / 2)
    return np.exp((low + high) / 2 + (high - low) / 2 * _NODES), _WEIGHTS / 2


def ab_magnitude(flux_njy: npt.ArrayLike) -> Array:
    """AB magnitude of a flux density.

    Parameters
    ----------
    flux_njy : array_like
        Flux density [nJy].

    Returns
    -------
    ndarray
        Magnitude; infinite for zero flux, NaN for a negative one.
    """
    flux = np.asarray(flux_njy, dtype=np.float64)
    with np.errstate(divide="ignore"):
        return np.asarray(AB_ZERO_POINT - 2.5 * np.log10(np.where(flux < 0, np.nan, flux)))


def flux_njy_from_magnitude(magnitude: npt.ArrayLike) -> Array:
    """Flux density of an AB magnitude.

    Parameters
    ----------
    magnitude : array_like
        AB magnitude.

    Returns
    -------
    ndarray
        Flux density [nJy].
    """
    return np.asarray(10 ** (0.4 * (AB_ZERO_POINT - np.asarray(magnitude, dtype=np.float64))))
