"""The ways of ``[macro]`` that need more than numbers: maps, the motion of the cluster's members, mirrored knots."""

from __future__ import annotations

from pathlib import Path
from typing import Final, Literal, cast

from crossing.errors import InputError
from crossing.event.parsers import (
    ANY,
    NOT_NEGATIVE,
    POSITIVE,
    Bounds,
    choice,
    flag,
    number,
    sky_position,
    text,
    uncertain,
)
from crossing.event.quantities import ANGLE, DEGREES, DIMENSIONLESS, DISPERSION, FLUX
from crossing.event.records import HaloRecord, MapRecord, MassRelation, MembersRecord, PairRecord
from crossing.event.tables import Table
from crossing.event.wording import describe, listed

__all__ = ["HALO_KEYS", "read_halo", "read_maps", "read_pairs"]

HALO_KEYS: Final = (
    *("velocity_dispersion", "members", "profile", "axis_ratio", "core", "angle", "shear", "shear_angle"),
    *("concentration", "mass_relation"),
)
"""Keys of ``[macro]`` that say what a cluster's mass follows from."""

_PLANES: Final = ("convergence", "shear1", "shear2", "shear", "deflection1", "deflection2")
_SETS: Final = (
    ("convergence", "shear1", "shear2"),
    ("convergence", "shear1", "shear2", "deflection1", "deflection2"),
    ("convergence", "shear", "deflection1", "deflection2"),
    ("deflection1", "deflection2"),
)
_RELATIONS: Final = ("evrard 2008", "munari 2013", "carlberg 1997", "isothermal")
_MEMBER_COLUMNS: Final = ("velocity", "velocity_err", "redshift")
_SHAPE_KEYS: Final = {"isothermal": ("axis_ratio", "core", "angle"), "nfw": ("concentration", "mass_relation")}
_RATIO: Final = Bounds(low=0, high=1, open_low=True)
_SMALL_SHEAR: Final = Bounds(low=0, high=1)
_FEWEST_PAIRS: Final = 2


def read_maps(macro: Table) -> tuple[tuple[MapRecord, float], ...]:
    """Maps of all lens models under ``maps``, each with its weight among them.

    Raises
    ------
    InputError
        If a table holds no complete set of maps, or does not say which sources they hold for.
    """
    found = []
    for table in macro.tables("maps"):
        table.only(
            *("name", "weight", *_PLANES, "deflection_unit"),
            *("source_redshift", "normalised", "axes", "realisations"),
        )
        found.append((_read_map(table), table.get("weight", number(DIMENSIONLESS, POSITIVE)) or 1.0))
    return tuple(found)


def _read_map(table: Table) -> MapRecord:
    planes = {key: _path(table, key) for key in _PLANES if key in table}
    if tuple(planes) not in _SETS:
        got = listed(planes, "and") if planes else "none of them"
        raise table.error(
            "must have convergence, shear1 and shear2; or convergence, shear (its size), deflection1 and deflection2; "
            f"or deflection1 and deflection2; got {got}; add or remove maps"
        )
    if "deflection_unit" in table and "deflection1" not in planes:
        raise table.error("must go with deflection1 and deflection2; add them or remove it", "deflection_unit")
    normalised = table.get("normalised", flag) or False
    redshift = table.get("source_redshift", number(DIMENSIONLESS, POSITIVE))
    if normalised and redshift is not None:
        raise table.error("must not stand beside normalised = true; remove one of them", "source_redshift")
    if not normalised and redshift is None:
        raise table.error(
            "must be given, unless normalised = true says that the maps hold for D_ls/D_s = 1; add one of them",
            "source_redshift",
        )
    return MapRecord(
        planes=planes,
        name=table.get("name", text),
        deflection_unit=table.get("deflection_unit", _angle_unit),
        source_redshift=redshift,
        normalised=normalised,
        axes=cast(Literal["pixel", "sky"], table.get("axes", choice("pixel", "sky")) or "pixel"),
        realisations=_path(table, "realisations") if "realisations" in table else None,
    )


def _path(table: Table, key: str) -> str:
    """Absolute name of a file, whatever stands in brackets behind it."""
    return str((table.source.parent / table.need(key, text)).absolute())


def _angle_unit(raw: object) -> str:
    from astropy.units import Unit, UnrecognizedUnit

    name = text(raw).strip()
    unit = Unit(name, parse_strict="silent")
    known = not isinstance(unit, UnrecognizedUnit)
    if not known or not (unit.is_equivalent("arcsec") or unit.is_equivalent("pix")):
        raise InputError(f'must be an angle such as "arcsec", or "pixel", got {describe(raw)}')
    return name


def read_halo(table: Table) -> HaloRecord:
    """Mass of the cluster from the keys of ``[macro]``.

    Raises
    ------
    InputError
        If both or none of dispersion and members are given, or a key does not go with the profile.
    """
    table.one_of("velocity_dispersion", "members")
    profile = table.get("profile", choice("isothermal", "nfw")) or "isothermal"
    for other, keys in _SHAPE_KEYS.items():
        for key in keys:
            if other != profile and key in table:
                raise table.error(
                    f'must go with profile = "{other}", got "{profile}"; change profile or remove it', key
                )
    for key, needed in (("angle", "axis_ratio"), ("axis_ratio", "angle"), ("shear_angle", "shear")):
        if key in table and needed not in table:
            raise table.error(f"must go with {needed}; add it or remove {key}", key)
    if "shear" in table and "shear_angle" not in table:
        raise table.error("must go with shear_angle, in which it stretches images; add it or remove shear", "shear")
    return HaloRecord(
        dispersion=table.get("velocity_dispersion", uncertain(DISPERSION, POSITIVE)),
        members=_read_members(table),
        profile=cast(Literal["isothermal", "nfw"], profile),
        axis_ratio=table.get("axis_ratio", uncertain(DIMENSIONLESS, _RATIO)),
        core=table.get("core", uncertain(ANGLE, NOT_NEGATIVE)),
        angle=table.get("angle", uncertain(DEGREES, ANY)),
        shear=table.get("shear", uncertain(DIMENSIONLESS, _SMALL_SHEAR)),
        shear_angle=table.get("shear_angle", uncertain(DEGREES, ANY)),
        concentration=table.get("concentration", uncertain(DIMENSIONLESS, POSITIVE)),
        mass_relation=cast(MassRelation | None, table.get("mass_relation", choice(*_RELATIONS))),
    )


def _read_members(macro: Table) -> MembersRecord | None:
    table = macro.table("members")
    if table is None:
        return None
    table.only("file", "columns")
    table.need("file", text)
    columns: dict[str, str] = {}
    names = table.table("columns")
    if names is not None:
        names.only(*_MEMBER_COLUMNS)
        columns = {key: names.need(key, text) for key in names}
        if "velocity" in columns and "redshift" in columns:
            raise names.error("must not stand beside redshift; give one of them", "velocity")
    return MembersRecord(path=cast(Path, table.file("file", text)), columns=columns)


def read_pairs(macro: Table) -> tuple[PairRecord, ...]:
    """Mirrored knots under ``mirror_pairs``.

    Raises
    ------
    InputError
        If there is one pair only, or both images of a pair are at the same place.
    """
    tables = macro.tables("mirror_pairs")
    if len(tables) < _FEWEST_PAIRS:
        raise macro.error(
            "must be two pairs or more, got 1, through which any line passes; add another [[macro.mirror_pairs]]",
            "mirror_pairs",
        )
    return tuple(_read_pair(table) for table in tables)


def _read_pair(table: Table) -> PairRecord:
    table.only("name", "position1", "position2", "position_error", "flux1", "flux2", "magnification")
    first, second = (table.need(key, sky_position) for key in ("position1", "position2"))
    if first == second:
        raise table.error("must differ from position1, got the same place; give the other image", "position2")
    for key, other in (("flux1", "flux2"), ("flux2", "flux1")):
        if key in table and other not in table:
            raise table.error(f"must go with {other}; add it or remove {key}", key)
    return PairRecord(
        first=first,
        second=second,
        name=table.get("name", text),
        position_error=table.get("position_error", number(ANGLE, POSITIVE)),
        flux1=table.get("flux1", uncertain(FLUX, POSITIVE)),
        flux2=table.get("flux2", uncertain(FLUX, POSITIVE)),
        magnification=table.get("magnification", uncertain(DIMENSIONLESS, POSITIVE)),
    )
