"""Star formation behind an arc's ultraviolet light, and the supernovae that a mass of new stars makes."""

from __future__ import annotations

from collections.abc import Callable
from math import log, pi
from typing import Final

import numpy as np
from numpy.polynomial.legendre import leggauss
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError
from crossing.event.wording import listed
from crossing.optics.constants import ARCSEC, PARSEC
from crossing.stars.extinction import dust_law
from crossing.stars.mass_functions import MassFunction, chabrier, kroupa, salpeter

__all__ = ["ULTRAVIOLET_UM", "collapses_per_mass", "delayed_rate", "star_formation_density"]

Array = NDArray[np.float64]

ULTRAVIOLET_UM: Final = (0.12, 0.32)
"""Rest wavelengths [um] whose light tells the star formation of the last 100 Myr."""
# Msun/yr per erg/s/Hz for the mass function of Salpeter, 0.1-100 Msun; and what the others take off it: Madau &
# Dickinson 2014, ARA&A 52, 415 (from memory). Kennicutt 1998, ARA&A 36, 189 has 1.4e-28.
_PER_ULTRAVIOLET: Final = 1.15e-28
_RELATIVE: Final = {"salpeter": 1.0, "kroupa": 0.67, "chabrier": 0.63}
_MAKERS: Final[dict[str, Callable[[float, float], MassFunction]]] = {
    "salpeter": salpeter,
    "kroupa": kroupa,
    "chabrier": chabrier,
}
_BIRTH_RANGE: Final = (0.1, 100.0)
_COLLAPSING: Final = (8.0, 40.0)

# Maoz, Mannucci & Brandt 2012, MNRAS 426, 3282: thermonuclear supernovae per mass formed between 40 Myr and 13.7 Gyr,
# and the slope of their delays.
_THERMONUCLEAR_PER_MASS: Final = 1.30e-3
_DELAY_SLOPE: Final = -1.12
_FIRST_GYR, _LAST_GYR = 0.04, 13.7


def star_formation_density(
    surface_brightness: ArrayLike,
    wavelength_um: float,
    redshift: float,
    *,
    extinction_mag: float = 0.0,
    dust: float = 0.0,
    mass_function: str = "kroupa",
) -> Array:
    """Star formation per area of the source plane from ultraviolet light.

    Parameters
    ----------
    surface_brightness : array_like
        Observed surface brightness of the arc [AB mag / arcsec2]; lensing does not change it.
    wavelength_um : float
        Observed wavelength [um]; 0.12 to 0.32 at rest.
    redshift : float
        Redshift of the arc.
    extinction_mag : float, optional
        Galactic extinction in the band [mag].
    dust : float, optional
        A(V) of the dust in the arc's galaxy [mag].
    mass_function : str, optional
        ``salpeter``, ``kroupa`` or ``chabrier``, from 0.1 to 100 Msun.

    Returns
    -------
    ndarray
        Star formation [Msun / (yr kpc2)], for a rate that was steady for 100 Myr; a factor of 2 for young arcs.

    Raises
    ------
    InputError
        If the band is not ultraviolet at rest, or the name is not known.

    Notes
    -----
    Per area, L_nu = 4 pi I_nu (1 + z)**3, with I_nu the observed intensity freed from dust.

    References
    ----------
    .. [1] Madau P. & Dickinson M., 2014, ARA&A 52, 415
    """
    _maker(mass_function)
    rest = wavelength_um / (1.0 + redshift)
    low, high = ULTRAVIOLET_UM
    if not low <= rest <= high:
        raise InputError(f"`wavelength_um` must be {low:g} to {high:g} um at rest, got {rest:.3g}; take another band")
    absorbed = extinction_mag + dust * float(dust_law(rest))
    intensity = 10.0 ** (-0.4 * (np.asarray(surface_brightness, np.float64) - absorbed + 48.6)) / ARCSEC**2
    per_area = 4.0 * pi * intensity * (1.0 + redshift) ** 3 * (1e2 * 1e3 * PARSEC) ** 2
    return np.asarray(_PER_ULTRAVIOLET * _RELATIVE[mass_function] * per_area)


def collapses_per_mass(mass_function: str = "kroupa", masses: tuple[float, float] = _COLLAPSING) -> float:
    """Core collapses per mass of new stars.

    Parameters
    ----------
    mass_function : str, optional
        ``salpeter``, ``kroupa`` or ``chabrier``, from 0.1 to 100 Msun.
    masses : (float, float), optional
        Lowest and highest mass of stars that end so [Msun]; 8 to 40 as in [1]_.

    Returns
    -------
    float
        Number [1 / Msun].

    Raises
    ------
    InputError
        If the name is not known, or the masses lie outside of 1 to 100 Msun.

    References
    ----------
    .. [1] Madau P. & Dickinson M., 2014, ARA&A 52, 415
    """
    low, high = masses
    if not 1.0 <= low < high <= _BIRTH_RANGE[1]:
        raise InputError(f"`masses` must be within 1 to 100 Msun, got {low:g} and {high:g}; 8 and 40 are usual")
    function = _maker(mass_function)(*_BIRTH_RANGE)
    node, weight = leggauss(24)
    width = 0.5 * log(high / low)
    mass = np.sqrt(low * high) * np.exp(width * node)
    return float(width * (weight @ (mass * function.pdf(mass)))) / function.mean


def delayed_rate(star_formation: float, mass_formed: float, age_gyr: float) -> float:
    """Thermonuclear supernovae of a population with steady star formation upon an old stock.

    Parameters
    ----------
    star_formation : float
        Star formation [Msun / yr].
    mass_formed : float
        Mass of all stars ever formed [Msun].
    age_gyr : float
        Time since the first stars [Gyr].

    Returns
    -------
    float
        Rate [1 / yr]: that of steady star formation until the mass is made up, or for all of the time and a burst at
        its beginning for the rest of the mass.

    Raises
    ------
    InputError
        If a number is negative, or the time lies outside of 0.04 to 13.7 Gyr.

    References
    ----------
    .. [1] Maoz D., Mannucci F., Brandt T. D., 2012, MNRAS 426, 3282
    """
    for name, value in (("star_formation", star_formation), ("mass_formed", mass_formed)):
        if not value >= 0:
            raise InputError(f"`{name}` must be zero or positive, got {value:g}; check its sign")
    if not _FIRST_GYR < age_gyr <= _LAST_GYR:
        raise InputError(f"`age_gyr` must be {_FIRST_GYR:g} to {_LAST_GYR:g}, got {age_gyr:g}; give it in Gyr")
    power = _DELAY_SLOPE + 1.0
    scale = _THERMONUCLEAR_PER_MASS * power / (_LAST_GYR**power - _FIRST_GYR**power)
    steady = min(age_gyr, 1e-9 * mass_formed / star_formation) if star_formation else 0.0
    recent = 0.0
    if steady > _FIRST_GYR:
        recent = star_formation * scale * (steady**power - _FIRST_GYR**power) / power
    old = max(mass_formed - 1e9 * steady * star_formation, 0.0)
    return recent + old * scale * age_gyr**_DELAY_SLOPE * 1e-9


def _maker(name: str) -> Callable[[float, float], MassFunction]:
    if name not in _MAKERS:
        raise InputError(f"`mass_function` must be {listed(_MAKERS)}, got {name!r}; use one of these")
    return _MAKERS[name]
