"""The short sections of an event file, one function each; all take the table of the whole file."""

from __future__ import annotations

from typing import Literal, cast

from crossing.event.parsers import (
    FRACTION,
    NOT_NEGATIVE,
    POSITIVE,
    Bounds,
    choice,
    is_name,
    number,
    sky_position,
    text,
    uncertain,
)
from crossing.event.quantities import (
    DEGREES,
    DIMENSIONLESS,
    DISPERSION,
    EXTINCTION,
    FLUX,
    HUBBLE,
    LUMINOSITY,
    RADIUS,
    TEMPERATURE,
    WAVELENGTH,
)
from crossing.event.records import DEFAULT_SIGMA, BandRecord, CosmologyRecord, MotionRecord, StarRecord
from crossing.event.tables import Table
from crossing.event.values import Value
from crossing.event.wording import describe

__all__ = ["read_bands", "read_cosmology", "read_header", "read_motion", "read_redshift", "read_star"]


def read_header(root: Table) -> tuple[str, Literal["transient", "persistent"]]:
    """Name and mode of ``[event]``."""
    table = root.table("event")
    if table is None:
        raise root.error('must be given; add [event] with name = "..."', "event")
    table.only("name", "mode")
    name = table.need("name", text)
    if not is_name(name):
        raise table.error(f"must be at most 64 characters without space at its ends, got {describe(name)}", "name")
    mode = table.get("mode", choice("transient", "persistent")) or "transient"
    return name, cast(Literal["transient", "persistent"], mode)


def read_redshift(root: Table, section: str) -> Value | None:
    """Redshift of ``[lens]`` or ``[source]``."""
    table = root.table(section)
    if table is None:
        return None
    table.only("redshift")
    return table.need("redshift", uncertain(DIMENSIONLESS, POSITIVE))


def read_cosmology(root: Table) -> CosmologyRecord:
    """``[cosmology]``: a name, or H0 and Om0."""
    table = root.table("cosmology")
    if table is None:
        return CosmologyRecord()
    table.only("name", "H0", "Om0")
    if "H0" not in table and "Om0" not in table:
        return CosmologyRecord(name=table.need("name", _known_cosmology))
    if "name" in table:
        raise table.error("must be either name, or H0 and Om0, got both; remove one of them")
    H0 = table.need("H0", number(HUBBLE, POSITIVE))
    Om0 = table.need("Om0", number(DIMENSIONLESS, Bounds(low=0, high=1, open_low=True)))
    return CosmologyRecord(name=None, H0=H0, Om0=Om0)


def _known_cosmology(raw: object) -> str:
    if raw == "Planck18":
        return "Planck18"
    from astropy.cosmology import available  # half a second that the default need not pay

    return choice(*available)(raw)


def read_motion(root: Table) -> MotionRecord | None:
    """``[motion]``: the effective speed, or two velocity spreads and a position."""
    table = root.table("motion")
    if table is None:
        return None
    table.only("speed", "lens_spread", "source_spread", "position", "angle")
    spreads = ("lens_spread", "source_spread", "position")
    given = [key for key in spreads if key in table]
    missing = [key for key in spreads if key not in table]
    if "speed" in table and given:
        raise table.error(f"must not go with speed, which includes it; remove {given[0]} or speed", given[0])
    if "speed" not in table and missing:
        way = 'speed = "..." alone, or lens_spread, source_spread and position'
        raise table.error(f"must be given when speed is not; write {way}", missing[0])
    return MotionRecord(
        speed=table.get("speed", uncertain(DISPERSION, POSITIVE)),
        lens_spread=table.get("lens_spread", uncertain(DISPERSION, NOT_NEGATIVE)),
        source_spread=table.get("source_spread", uncertain(DISPERSION, NOT_NEGATIVE)),
        position=table.get("position", sky_position),
        angle=table.get("angle", uncertain(DEGREES)),
    )


def read_star(root: Table) -> StarRecord:
    """``[star]``: priors of radius, temperature and luminosity."""
    table = root.table("star")
    if table is None:
        return StarRecord()
    table.only("radius", "temperature", "luminosity")
    return StarRecord(
        radius=table.get("radius", uncertain(RADIUS, POSITIVE)),
        temperature=table.get("temperature", uncertain(TEMPERATURE, POSITIVE)),
        luminosity=table.get("luminosity", uncertain(LUMINOSITY, POSITIVE)),
    )


def read_bands(root: Table) -> dict[str, BandRecord]:
    """``[bands.NAME]``: every band by its name."""
    bands = root.table("bands")
    if bands is None:
        return {}
    for name in bands:
        if not is_name(name):
            problem = "must be named by 1 to 64 printable characters without space at the ends; rename the band"
            raise bands.error(problem, name)
    return {name: _read_band(table, name) for name in bands if (table := bands.table(name)) is not None}


def _read_band(table: Table, name: str) -> BandRecord:
    table.only("wavelength", "width", "depth", "depth_sigma", "limb_darkening", "extinction")
    wavelength = table.need("wavelength", number(WAVELENGTH, POSITIVE))
    width = table.get("width", number(WAVELENGTH, POSITIVE))
    if width is not None and width >= 2 * wavelength:
        problem = (
            f"must be less than twice the wavelength ({2 * wavelength:g} um), got {width:g} um; give the full width"
        )
        raise table.error(problem, "width")
    if "depth_sigma" in table and "depth" not in table:
        raise table.error("must go with depth; add the depth or remove depth_sigma", "depth_sigma")
    return BandRecord(
        name=name,
        wavelength=wavelength,
        width=width,
        depth=table.get("depth", number(FLUX, POSITIVE)),
        depth_sigma=table.get("depth_sigma", number(DIMENSIONLESS, POSITIVE)) or DEFAULT_SIGMA,
        limb_darkening=table.get("limb_darkening", uncertain(DIMENSIONLESS, FRACTION)),
        extinction=table.get("extinction", uncertain(EXTINCTION, NOT_NEGATIVE)) or Value.exact(0.0),
    )
