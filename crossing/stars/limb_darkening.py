"""A default for the linear limb darkening of a star, from the grey atmosphere."""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.constants import BOLTZMANN, LIGHT_SPEED, PLANCK

if TYPE_CHECKING:
    from crossing.event import BandRecord

__all__ = ["band_limb_darkening", "default_limb_darkening"]

Array: TypeAlias = npt.NDArray[np.float64]

# ln(h nu / k T): from far in the Rayleigh-Jeans side to where the coefficient has reached its bound of 1.
_GRID: Final = np.linspace(-3.0, 3.5, 131)
_DEPTHS: Final = 60
_ANGLES: Final = 24


def default_limb_darkening(
    wavelength_um: npt.ArrayLike, temperature_K: npt.ArrayLike, redshift: npt.ArrayLike = 0.0
) -> Array:
    """Linear limb-darkening coefficient of a grey atmosphere.

    Parameters
    ----------
    wavelength_um : array_like
        Observed wavelength [um].
    temperature_K : array_like
        Effective temperature [K].
    redshift : array_like, optional
        Redshift of the star; the three broadcast.

    Returns
    -------
    ndarray
        Coefficient u, from 0.15 (far infrared) to 1 (far ultraviolet of cool stars). Rough: detailed atmospheres
        differ by 0.1 to 0.2 (from memory).

    Raises
    ------
    InputError
        If a wavelength or a temperature is not positive.

    Notes
    -----
    T(tau)**4 = 3/4 T_eff**4 (tau + 2/3), a source function B_nu(T(tau)), no dependence of the opacity on wavelength.
    The result depends on h nu / (k T_eff) alone. The line I = I0 [1 - u (1 - cos theta)] keeps the central intensity
    and the flux, F / (pi I0) = 1 - u/3. All wavelengths together give exactly 3/5.

    References
    ----------
    .. [1] Mihalas D., 1978, Stellar Atmospheres, ch. 3
    """
    wavelength, temperature = np.asarray(wavelength_um, dtype=np.float64), np.asarray(temperature_K, dtype=np.float64)
    for name, values in (("wavelength_um", wavelength), ("temperature_K", temperature)):
        if np.any(values <= 0):
            raise InputError(f"`{name}` must be positive, got {np.min(values):g}; check the unit")
    ratio = PLANCK * LIGHT_SPEED * (1 + np.asarray(redshift)) / (1e-6 * wavelength * BOLTZMANN * temperature)
    return np.asarray(np.interp(np.log(ratio), _GRID, _grey_table()))


def band_limb_darkening(band: BandRecord, temperature_K: npt.ArrayLike, redshift: npt.ArrayLike = 0.0) -> Array:
    """Coefficient of a band: the user's central value where there is one, else the default.

    Parameters
    ----------
    band : BandRecord
        Band with its observed wavelength.
    temperature_K : array_like
        Effective temperature [K].
    redshift : array_like, optional
        Redshift of the star.

    Returns
    -------
    ndarray
        Coefficient u in 0..1, of the arguments' common shape.
    """
    if band.limb_darkening is None:
        return default_limb_darkening(band.wavelength, temperature_K, redshift)
    return np.full(np.broadcast_shapes(np.shape(temperature_K), np.shape(redshift)), band.limb_darkening.central)


def _grey_intensities(ratio: npt.ArrayLike, cosines: npt.ArrayLike) -> Array:
    """Emergent intensities for h nu / (k T_eff), shape (n_ratio, n_cosine), without the common factor nu**3."""
    depth, weight = np.polynomial.laguerre.laggauss(_DEPTHS)
    temperature = (0.75 * (np.multiply.outer(np.asarray(cosines), depth) + 2 / 3)) ** 0.25
    exponent = np.multiply.outer(np.asarray(ratio), 1 / temperature)
    return np.asarray(np.sum(weight / np.expm1(exponent), axis=-1))


@cache
def _grey_table() -> Array:
    ratio = np.exp(_GRID)
    node, weight = np.polynomial.legendre.leggauss(_ANGLES)
    cosine = (node + 1) / 2
    flux = _grey_intensities(ratio, cosine) @ (weight * cosine)
    centre = _grey_intensities(ratio, [1.0])[:, 0]
    return np.clip(3 * (1 - flux / centre), 0.0, 1.0)
