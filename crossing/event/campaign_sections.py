"""``[campaign]``, ``[population]`` and ``[detection]``; all functions take the table of the whole file."""

from __future__ import annotations

from typing import Final, Literal, cast

from crossing.errors import InputError
from crossing.event.campaign_parsers import label, moment, per_band, whole
from crossing.event.campaign_records import DEFAULT_MERGE, DEFAULT_SLOPE, DetectionRecord, PopulationRecord
from crossing.event.parsers import NOT_NEGATIVE, POSITIVE, Bounds, array, choice, number, pair, text, uncertain
from crossing.event.quantities import (
    DIMENSIONLESS,
    DURATION,
    EXTINCTION,
    FLUX,
    LUMINOSITY,
    STAR_FORMATION_DENSITY,
    SURFACE_DENSITY,
    TEMPERATURE,
)
from crossing.event.records import DEFAULT_SIGMA
from crossing.event.tables import Table
from crossing.event.values import Value
from crossing.event.wording import describe

__all__ = ["read_campaign_name", "read_detection", "read_population"]

_PART: Final = Bounds(low=0, high=1, open_low=True)
_LAW: Final = ("slope", "luminosity_range", "temperature")
_COLUMNS: Final = ("luminosity", "temperature", "number")
_MOST: Final = 1000


def read_campaign_name(root: Table) -> str:
    """Name of ``[campaign]``.

    Raises
    ------
    InputError
        If there is none.
    """
    table = root.table("campaign")
    if table is None:
        raise root.error('must be given; add [campaign] with name = "..."', "campaign")
    table.only("name")
    return table.need("name", label)


def read_population(root: Table) -> PopulationRecord:
    """``[population]``: stars of the arc.

    Raises
    ------
    InputError
        If anything in it is unknown, of the wrong type or unit, or physically impossible, or if a table of stars stands
        beside a law.
    """
    table = root.table("population")
    if table is None:
        return PopulationRecord()
    table.only(
        *("file", "columns", *_LAW, "light_fraction", "reference_band", "dust"),
        *("star_formation_density", "stellar_mass_density"),
    )
    for key in _LAW:
        if "file" in table and key in table:
            raise table.error(f"must not stand beside file, whose table says it; remove {key} or file", key)
    if "columns" in table and "file" not in table:
        raise table.error("must go with file; add the table or remove columns", "columns")
    slope = table.get("slope", uncertain(DIMENSIONLESS))
    return PopulationRecord(
        path=table.file("file", text),
        columns=_read_columns(table),
        slope=None if "file" in table else slope or Value.exact(DEFAULT_SLOPE),
        luminosity_range=table.get("luminosity_range", _luminosity_range),
        temperature=table.get("temperature", uncertain(TEMPERATURE, POSITIVE)),
        light_fraction=table.get("light_fraction", uncertain(DIMENSIONLESS, _PART)) or Value.exact(1.0),
        reference_band=table.get("reference_band", text),
        dust=table.get("dust", uncertain(EXTINCTION, NOT_NEGATIVE)),
        star_formation_density=table.get("star_formation_density", uncertain(STAR_FORMATION_DENSITY, NOT_NEGATIVE)),
        stellar_mass_density=table.get("stellar_mass_density", uncertain(SURFACE_DENSITY, NOT_NEGATIVE)),
    )


def _luminosity_range(raw: object) -> tuple[float, float]:
    luminosity = number(LUMINOSITY, POSITIVE)
    what = 'the lowest and highest luminosity, such as ["1e3 solLum", "1e6 solLum"]'
    low, high = pair(luminosity, luminosity, what)(raw)
    if low >= high:
        raise InputError(f"must run from low to high, got {low:g} and {high:g} solLum; swap or widen them")
    return low, high


def _read_columns(population: Table) -> dict[str, str]:
    table = population.table("columns")
    if table is None:
        return {}
    table.only(*_COLUMNS)
    columns = {key: table.need(key, text) for key in table}
    for key, name in columns.items():
        if (twin := next(other for other, taken in columns.items() if taken == name)) != key:
            raise table.error(f"must name another column than {twin}, got {describe(name)} for both", key)
    return columns


def read_detection(root: Table) -> DetectionRecord:
    """``[detection]``: what counts as an event.

    Raises
    ------
    InputError
        If anything in it is unknown, of the wrong type or unit, or impossible.
    """
    table = root.table("detection")
    if table is None:
        return DetectionRecord()
    table.only(
        *("significance", "epochs", "bands", "bands_required", "reference", "reference_epochs", "reference_depth"),
        *("reference_depth_sigma", "merge", "efficiency", "follow_up_delay"),
    )
    reference = table.get("reference", choice("template", "previous")) or "template"
    for key in ("reference_epochs", "reference_depth", "reference_depth_sigma"):
        if key in table and reference != "template":
            raise table.error(f'must go with reference = "template", got "{reference}"; change it or remove {key}', key)
    if "reference_depth_sigma" in table and "reference_depth" not in table:
        raise table.error("must go with reference_depth; add the depth or remove it", "reference_depth_sigma")
    sigma = number(DIMENSIONLESS, POSITIVE)
    merge = table.get("merge", number(DURATION, NOT_NEGATIVE))
    return DetectionRecord(
        significance=table.get("significance", sigma) or DEFAULT_SIGMA,
        epochs=table.get("epochs", whole(1, _MOST)) or 1,
        bands=_read_bands(table),
        bands_required=_bands_required(table),
        reference=cast(Literal["template", "previous"], reference),
        reference_epochs=table.get("reference_epochs", array(moment, "of at least one MJD or date")) or (),
        reference_depth=per_band(table, "reference_depth", number(FLUX, POSITIVE)),
        reference_depth_sigma=table.get("reference_depth_sigma", sigma) or DEFAULT_SIGMA,
        merge=DEFAULT_MERGE if merge is None else merge,
        efficiency=table.get("efficiency", uncertain(DIMENSIONLESS, _PART)) or Value.exact(1.0),
        follow_up_delay=table.get("follow_up_delay", number(DURATION, NOT_NEGATIVE)),
    )


def _read_bands(table: Table) -> tuple[str, ...]:
    bands = table.get("bands", array(text, "of the names of one or more bands")) or ()
    for index, name in enumerate(bands):
        if name in bands[:index]:
            raise table.error(f"must name each band once, got {describe(name)} twice; remove one", "bands")
    return bands


def _bands_required(table: Table) -> int:
    required = table.get("bands_required", whole(1, _MOST)) or 1
    bands = _read_bands(table)
    if bands and required > len(bands):
        problem = f"must be at most the number of bands ({len(bands)}), got {required}; lower it or add bands"
        raise table.error(problem, "bands_required")
    return required
