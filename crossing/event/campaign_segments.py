"""``[[segments]]`` and ``[line]``: where the arc is, how bright, and which stars of the lens lie in front of it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from crossing.errors import InputError
from crossing.event.campaign_macro import MACRO_KEYS, read_line_macro, read_segment_macro
from crossing.event.campaign_parsers import different, label, per_band
from crossing.event.campaign_records import LineRecord, SegmentRecord
from crossing.event.checks import check_kappa_star
from crossing.event.microlens_section import read_microlenses
from crossing.event.parsers import NOT_NEGATIVE, POSITIVE, array, number, sky_position, uncertain
from crossing.event.quantities import ANGLE, DIMENSIONLESS, SURFACE_BRIGHTNESS, SURFACE_DENSITY
from crossing.event.records import MacroRecord, MicrolensRecord, Position
from crossing.event.tables import Table
from crossing.event.values import Value
from crossing.event.wording import listed

__all__ = ["read_line", "read_segments"]

_STARS: Final = ("kappa_star", "surface_density", "microlenses")
_OTHER_DENSITIES: Final = ("kappa_star", "surface_density", "surface_brightness", "band", "mass_to_light")


def read_segments(root: Table) -> tuple[SegmentRecord, ...]:
    """All segments of the file; a plain ``[segments]`` is a list of one.

    Raises
    ------
    InputError
        If anything in them is unknown, missing, of the wrong type or unit, or physically impossible.
    """
    tables = root.tables("segments")
    segments = tuple(_read_segment(root, table, f"segment {index + 1}") for index, table in enumerate(tables))
    different(tables, [segment.name for segment in segments])
    return segments


def _read_segment(root: Table, table: Table, default_name: str) -> SegmentRecord:
    table.only("name", "length", "width", "surface_brightness", *_STARS, "macro", *MACRO_KEYS)
    macro = read_segment_macro(root, table)
    microlenses = _read_stars(root, table)
    _check_kappa(table, macro, microlenses)
    return SegmentRecord(
        name=table.get("name", label) or default_name,
        macro=macro,
        length=table.need("length", number(ANGLE, POSITIVE)),
        width=table.need("width", number(ANGLE, POSITIVE)),
        surface_brightness=_read_brightness(table),
        microlenses=microlenses,
        place=table.where,
    )


def read_line(root: Table) -> LineRecord | None:
    """``[line]``, or None.

    Raises
    ------
    InputError
        If there are segments as well, or as `read_segments`.
    """
    table = root.table("line")
    if table is None:
        return None
    if "segments" in root:
        raise table.error("must not stand beside [[segments]], which would count the arc twice; remove one of them")
    table.only("points", "step", "width", "surface_brightness", *_STARS)
    points = table.need(
        "points", array(sky_position, 'of two or more positions, such as [["150.1 deg", "2.2 deg"], ...]')
    )
    if len(points) == 1:
        raise table.error("must be an array of two or more positions, got 1; add the end of the line", "points")
    _check_points(table, points)
    macro = read_line_macro(root, table, points[0])
    microlenses = _read_stars(root, table)
    _check_kappa(table, macro, microlenses)
    return LineRecord(
        points=points,
        step=table.need("step", number(ANGLE, POSITIVE)),
        width=table.need("width", number(ANGLE, POSITIVE)),
        macro=macro,
        surface_brightness=_read_brightness(table),
        microlenses=microlenses,
        place=table.where,
    )


def _check_points(table: Table, points: Sequence[Position]) -> None:
    for index in range(1, len(points)):
        if points[index] == points[index - 1]:
            problem = "must differ from the point before it; remove one of them"
            raise InputError(problem, source=table.source, where=f"{table.place('points')}[{index}]")


def _read_brightness(table: Table) -> dict[str, Value]:
    return per_band(table, "surface_brightness", uncertain(SURFACE_BRIGHTNESS))


def _read_stars(root: Table, table: Table) -> tuple[MicrolensRecord, ...]:
    """Populations of point masses: the shared ones, these with another density of the first, or the table's own."""
    given = [key for key in _STARS if key in table]
    if len(given) > 1:
        raise table.error(f"must hold at most one of {listed(_STARS, 'and')}, got {listed(given, 'and')}; remove one")
    if not given:
        return read_microlenses(root)
    if given == ["microlenses"]:
        return read_microlenses(table)
    # Here, so that a problem with the density names the segment, and one with the mass function the shared table.
    kappa_star = table.get("kappa_star", uncertain(DIMENSIONLESS, NOT_NEGATIVE))
    table.get("surface_density", uncertain(SURFACE_DENSITY, POSITIVE))
    no_stars = kappa_star == Value.exact(0.0)
    density = {given[0]: 1.0 if no_stars else table.get(given[0], lambda raw: raw)}
    populations = [{key: shared.get(key, lambda raw: raw) for key in shared} for shared in root.tables("microlenses")]
    first = {key: raw for key, raw in (populations or [{}])[0].items() if key not in _OTHER_DENSITIES}
    plain = isinstance(root.get("microlenses", lambda raw: raw), dict)
    merged = first | density if plain else [first | density, *populations[1:]]
    records = read_microlenses(Table({"microlenses": merged}, source=root.source))
    return records[1:] if no_stars else records


def _check_kappa(table: Table, macro: Sequence[MacroRecord], microlenses: Sequence[MicrolensRecord]) -> None:
    try:
        check_kappa_star(table, macro, microlenses)
    except InputError as error:
        raise table.error(error.problem) from None
