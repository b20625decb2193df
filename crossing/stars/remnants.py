"""Old populations: the mass in dead stars, and what another mass function does to a ratio of mass to light."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.event.wording import listed
from crossing.stars.mass_distribution import MassFunction
from crossing.stars.mass_functions import chabrier, chabrier_2005, kroupa, salpeter

__all__ = ["TURN_OFF", "remnant_mass", "remnant_share", "scaled_mass_to_light"]

Array: TypeAlias = npt.NDArray[np.float64]

TURN_OFF: Final = 0.95
"""Mass [Msun] of the stars that die at an age of some 10 Gyr (from memory)."""
_BIRTH_RANGE: Final = (0.1, 100.0)
_NEUTRON_STARS, _BLACK_HOLES = 8.5, 40.0
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(48)
_MAKERS: Final[dict[str, Callable[[float, float], MassFunction]]] = {
    "salpeter": salpeter,
    "kroupa": kroupa,
    "chabrier": chabrier,
    "chabrier 2005": chabrier_2005,
}


def remnant_mass(birth_mass: npt.ArrayLike) -> Array:
    """Mass of what a dead star leaves.

    Parameters
    ----------
    birth_mass : array_like
        Mass at birth [Msun].

    Returns
    -------
    ndarray
        White dwarf of 0.077 m + 0.48 below 8.5 Msun (at most the star's own mass), neutron star of 1.4 below 40, black
        hole of m/2 above [Msun]. The numbers are from memory.

    References
    ----------
    .. [1] Renzini A. & Ciotti L., 1993, ApJ 416, L49
    """
    mass = np.asarray(birth_mass, dtype=np.float64)
    dwarf = np.minimum(0.077 * mass + 0.48, mass)
    return np.where(mass < _NEUTRON_STARS, dwarf, np.where(mass < _BLACK_HOLES, 1.4, 0.5 * mass))


def remnant_share(mass_function: str = "kroupa", turn_off: float = TURN_OFF) -> float:
    """Share of an old population's mass that is in remnants.

    Parameters
    ----------
    mass_function : str, optional
        ``kroupa``, ``salpeter``, ``chabrier`` or ``chabrier 2005``, from 0.1 to 100 Msun at birth.
    turn_off : float, optional
        Lowest mass of the dead [Msun].

    Returns
    -------
    float
        Mass of remnants over that of living stars and remnants.

    Raises
    ------
    InputError
        If the name is not known, or the turn-off lies outside the masses.
    """
    living, dead = _masses(mass_function, turn_off)
    return dead / (living + dead)


def scaled_mass_to_light(ratio: float, assumed: str, wanted: str, turn_off: float = TURN_OFF) -> float:
    """Ratio of mass to light of the same light under another mass function.

    Parameters
    ----------
    ratio : float
        Mass of living stars and remnants over light [Msun / Lsun].
    assumed, wanted : str
        Mass function that the ratio was made with, and that of the result; as in `remnant_share`.
    turn_off : float, optional
        Mass [Msun] of the stars that shine.

    Returns
    -------
    float
        Ratio [Msun / Lsun]. Giants give nearly all of the light of an old population: it goes with the number of stars
        at the turn-off.

    Raises
    ------
    InputError
        If a name is not known, or the turn-off lies outside the masses.
    """
    per_giant = [
        sum(_masses(name, turn_off)) / float(_maker(name)(*_BIRTH_RANGE).pdf(turn_off)) for name in (assumed, wanted)
    ]
    return ratio * per_giant[1] / per_giant[0]


def _maker(name: str) -> Callable[[float, float], MassFunction]:
    if name not in _MAKERS:
        raise InputError(f"`mass_function` must be {listed(_MAKERS)}, got {name!r}; use one of these")
    return _MAKERS[name]


def _masses(name: str, turn_off: float) -> tuple[float, float]:
    """Mass [Msun] of the living and of the dead, per star that was born."""
    low, high = _BIRTH_RANGE
    if not low < turn_off < _NEUTRON_STARS:
        raise InputError(
            f"`turn_off` must be {low:g} to {_NEUTRON_STARS:g} Msun, got {turn_off:g}; old stars have 0.95"
        )
    function = _maker(name)(low, high)
    # Cut where the integrands bend: at breaks of mass functions and between kinds of remnants.
    cuts = sorted({low, turn_off, *(piece.high for piece in function.pieces), _NEUTRON_STARS, _BLACK_HOLES})
    living = dead = 0.0
    for a, b in pairwise(cuts):
        width = np.log(b / a)
        mass = np.sqrt(a * b) * np.exp(0.5 * width * _NODES)
        number = 0.5 * width * _WEIGHTS * mass * function.pdf(mass)
        if b <= turn_off:
            living += float(number @ mass)
        else:
            dead += float(number @ remnant_mass(mass))
    return living, dead
