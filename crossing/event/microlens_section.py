"""``[[microlenses]]``: populations of point masses in the lens."""

from __future__ import annotations

from typing import Final

from crossing.errors import InputError
from crossing.event.parsers import POSITIVE, choice, number, pair, text, uncertain
from crossing.event.quantities import DIMENSIONLESS, MASS, MASS_TO_LIGHT, SURFACE_BRIGHTNESS, SURFACE_DENSITY
from crossing.event.records import DEFAULT_MASS_RANGE, MicrolensRecord
from crossing.event.tables import Table

__all__ = ["read_microlenses"]

_DENSITIES: Final = ("kappa_star", "surface_density", "surface_brightness")
_WITH_BRIGHTNESS: Final = ("band", "mass_to_light")
# Each mass function with the keys that describe it, all needed but the range.
_MASS_FUNCTIONS: Final[dict[str, tuple[str, ...]]] = {
    "kroupa": ("mass_range",),
    "salpeter": ("mass_range",),
    "chabrier": ("mass_range",),
    "power law": ("slope", "mass_range"),
    "log-normal": ("median_mass", "width_dex", "mass_range"),
    "single": ("mean_mass",),
}
_MASS_KEYS: Final = ("mass_range", "mean_mass", "slope", "median_mass", "width_dex")


def read_microlenses(root: Table) -> tuple[MicrolensRecord, ...]:
    """All populations of the file; a plain ``[microlenses]`` is a list of one."""
    return tuple(_read_population(table) for table in root.tables("microlenses"))


def _read_population(table: Table) -> MicrolensRecord:
    table.only("name", *_DENSITIES, *_WITH_BRIGHTNESS, "mass_function", *_MASS_KEYS)
    density = table.one_of(*_DENSITIES)
    for key in _WITH_BRIGHTNESS:
        if (key in table) != (density == "surface_brightness"):
            verb = "must go with surface_brightness; remove it" if key in table else "must be given; add it"
            raise table.error(verb, key)
    mass_function = _mass_function(table)
    mass_range = table.get("mass_range", _mass_range)
    if mass_range is None and mass_function != "single":
        mass_range = DEFAULT_MASS_RANGE
    return MicrolensRecord(
        name=table.get("name", text),
        kappa_star=table.get("kappa_star", uncertain(DIMENSIONLESS, POSITIVE)),
        surface_density=table.get("surface_density", uncertain(SURFACE_DENSITY, POSITIVE)),
        surface_brightness=table.get("surface_brightness", uncertain(SURFACE_BRIGHTNESS)),
        band=table.get("band", text),
        mass_to_light=table.get("mass_to_light", uncertain(MASS_TO_LIGHT, POSITIVE)),
        mass_function=mass_function,
        mass_range=mass_range,
        mean_mass=table.get("mean_mass", uncertain(MASS, POSITIVE)),
        slope=table.get("slope", number(DIMENSIONLESS)),
        median_mass=table.get("median_mass", number(MASS, POSITIVE)),
        width_dex=table.get("width_dex", number(DIMENSIONLESS, POSITIVE)),
    )


def _mass_function(table: Table) -> str:
    """Name of the mass function, whose keys are all there and no other's."""
    name = table.get("mass_function", choice(*_MASS_FUNCTIONS)) or ("single" if "mean_mass" in table else "kroupa")
    for key in _MASS_KEYS:
        needed = key in _MASS_FUNCTIONS[name]
        if key in table and not needed:
            raise table.error(f'must not go with mass_function = "{name}"; remove one of them', key)
        if needed and key not in table and key != "mass_range":
            raise table.error(f'must be given with mass_function = "{name}"; add it', key)
    return name


def _mass_range(raw: object) -> tuple[float, float]:
    mass = number(MASS, POSITIVE)
    low, high = pair(mass, mass, 'the lowest and highest mass, such as ["0.08 solMass", "1.5 solMass"]')(raw)
    if low >= high:
        raise InputError(f"must run from low to high, got {low:g} and {high:g} solMass; swap or widen them")
    return low, high
