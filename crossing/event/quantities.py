"""Strings with units, turned into plain numbers in one fixed unit at the door."""

from __future__ import annotations

import math
import re
import warnings
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

from astropy import units as u

from crossing.errors import InputError
from crossing.event.wording import describe

__all__ = [
    "AB_ZERO_POINT",
    "ANGLE",
    "DEGREES",
    "DIMENSIONLESS",
    "DISPERSION",
    "DURATION",
    "EXPOSURE",
    "EXTINCTION",
    "FLUX",
    "FOLD_STRENGTH",
    "GRADIENT",
    "HUBBLE",
    "LUMINOSITY",
    "MASS",
    "MASS_TO_LIGHT",
    "RADIUS",
    "STAR_FORMATION_DENSITY",
    "SURFACE_BRIGHTNESS",
    "SURFACE_DENSITY",
    "TEMPERATURE",
    "WAVELENGTH",
    "Measure",
]

AB_ZERO_POINT: Final = 31.4
"""AB magnitude of 1 nJy, from m = -2.5 log10(F / (erg/s/cm2/Hz)) - 48.6 (Oke & Gunn 1983, ApJ 266, 713)."""
_QUANTITY = re.compile(r"([+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?)\s*(.*)", re.DOTALL)
# A unit that starts with a number is a slip such as "1 2 um"; only "0.5 1/arcsec" makes sense.
_STRAY_NUMBER = re.compile(r"(?!1\s*/)[0-9.,]")
_LONGEST = 100


@dataclass(frozen=True, slots=True, kw_only=True)
class Measure:
    """A kind of number that a file can hold: its unit inside the package, and how it may be written.

    Notes
    -----
    A measure without a unit takes plain numbers; one with a unit takes strings that astropy can parse.
    """

    unit: str
    """Unit of the number that `read` returns; empty for dimensionless ones."""
    example: str
    """How to write it, for messages."""
    plain: bool = False
    """Whether a plain number in `unit` is taken as well."""
    ab: bool = False
    """Whether AB magnitudes are taken as well; they become flux densities in nJy."""

    def read(self, raw: object) -> float:
        """Finite number in `unit`.

        Raises
        ------
        InputError
            If `raw` is of the wrong type, cannot be parsed, has the wrong unit, or is not finite.
        """
        if isinstance(raw, int | float) and not isinstance(raw, bool) and (self.plain or not self.unit):
            return _finite(raw)
        if isinstance(raw, str) and self.unit:
            return self._from_text(raw.strip())
        if not self.unit:
            hint = "; remove the quotes" if isinstance(raw, str) else ""
            raise InputError(f"must be a plain number such as {self.example}, got {describe(raw)}{hint}")
        raise self._refusal(raw)

    def is_magnitude(self, raw: object) -> bool:
        """Whether `raw` is written in magnitudes and the measure takes them."""
        match = _QUANTITY.fullmatch(raw.strip()) if self.ab and isinstance(raw, str) and len(raw) <= _LONGEST else None
        return match is not None and _unit(match[2]) in (u.mag, u.ABmag)

    def _refusal(self, raw: object) -> InputError:
        kinds = f"{self.unit} or AB mag" if self.ab else self.unit
        return InputError(f'must be a string with a unit ({kinds}) such as "{self.example}", got {describe(raw)}')

    def _from_text(self, text: str) -> float:
        match = _QUANTITY.fullmatch(text)
        if match is None or len(text) > _LONGEST or _STRAY_NUMBER.match(match[2]):
            raise self._refusal(text)
        number = _finite(float(match[1]))
        unit = _unit(match[2])
        if unit is None:
            raise self._refusal(text)
        if self.ab and (unit == u.mag or unit == u.ABmag):
            return _njy_from_ab(number)
        # Logarithmic units such as mag(AB) would be converted by a non-linear law, of which `to` returns one value.
        if not isinstance(unit, u.UnitBase) or not unit.is_equivalent(self.unit):
            raise self._refusal(text)
        return _finite(number * float(unit.to(self.unit)))


@lru_cache(maxsize=256)
def _unit(text: str) -> u.UnitBase | u.function.FunctionUnitBase | None:
    """Astropy unit, or None if `text` is not one."""
    if not text:
        return None
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", u.UnitsWarning)  # "km / s / Mpc" is discouraged, not wrong
        try:
            return u.Unit(text)
        except (ValueError, TypeError, ArithmeticError, u.UnitsError):
            return None


def _finite(raw: float) -> float:
    try:
        number = float(raw)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise InputError(f"must be finite, got {describe(raw)}")
    return number


def _njy_from_ab(magnitude: float) -> float:
    if abs(magnitude) > 100:
        raise InputError(f"must be an AB magnitude between -100 and 100, got {magnitude:g} mag")
    return float(10.0 ** (0.4 * (AB_ZERO_POINT - magnitude)))


DIMENSIONLESS: Final = Measure(unit="", example="0.7")
ANGLE: Final = Measure(unit="arcsec", example="0.42 arcsec")
DEGREES: Final = Measure(unit="deg", example="30 deg")
GRADIENT: Final = Measure(unit="1 / arcsec", example="0.05 / arcsec")
FOLD_STRENGTH: Final = Measure(unit="arcsec(1/2)", example="0.8 arcsec(1/2)")
DISPERSION: Final = Measure(unit="km / s", example="600 km / s")
HUBBLE: Final = Measure(unit="km / (Mpc s)", example="70 km / (s Mpc)")
SURFACE_DENSITY: Final = Measure(unit="solMass / pc2", example="12 solMass / pc2")
SURFACE_BRIGHTNESS: Final = Measure(unit="mag / arcsec2", example="27.0 mag / arcsec2")
# In solar units of the band itself, so that a plain number says the same.
MASS_TO_LIGHT: Final = Measure(unit="solMass / solLum", example="2.0 solMass / solLum", plain=True)
MASS: Final = Measure(unit="solMass", example="0.3 solMass")
RADIUS: Final = Measure(unit="solRad", example="200 solRad")
TEMPERATURE: Final = Measure(unit="K", example="12000 K")
LUMINOSITY: Final = Measure(unit="solLum", example="1e5 solLum")
DURATION: Final = Measure(unit="d", example="2 d")
EXPOSURE: Final = Measure(unit="h", example="1.5 h")
STAR_FORMATION_DENSITY: Final = Measure(unit="solMass / (yr kpc2)", example="0.1 solMass / (yr kpc2)")
WAVELENGTH: Final = Measure(unit="um", example="1.15 um")
FLUX: Final = Measure(unit="nJy", example="28.4 mag", ab=True)
EXTINCTION: Final = Measure(unit="mag", example="0.12 mag")
