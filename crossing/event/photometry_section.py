"""``[photometry]`` and ``[counterpart]``: which tables hold the light curves, and what their numbers are."""

from __future__ import annotations

from pathlib import Path
from typing import Final, Literal, cast

from crossing.event.parsers import POSITIVE, choice, epochs, number, text
from crossing.event.quantities import DIMENSIONLESS, FLUX
from crossing.event.records import DEFAULT_SIGMA, CounterpartRecord, PhotometryRecord
from crossing.event.tables import Table

__all__ = ["read_counterpart", "read_photometry_tables"]

_OPTIONAL_COLUMNS: Final = ("is_upper_limit", "excluded", "limit_sigma")
_FLUX_COLUMNS: Final = ("time", "band", "flux", "flux_err", *_OPTIONAL_COLUMNS)
_MAGNITUDE_COLUMNS: Final = ("time", "band", "mag", "mag_err", *_OPTIONAL_COLUMNS)


def read_photometry_tables(root: Table) -> tuple[PhotometryRecord, ...]:
    """All light curves of the file; a plain ``[photometry]`` is a list of one."""
    return tuple(_read_photometry(table) for table in root.tables("photometry"))


def _read_photometry(table: Table) -> PhotometryRecord:
    table.only("file", "kind", "reference_epochs", "reference_err", "limit_sigma", "columns")
    table.need("file", text)
    kind = table.get("kind", choice("flux", "difference", "magnitude")) or "flux"
    reference_epochs = table.get("reference_epochs", epochs) or ()
    reference_err = table.get("reference_err", number(FLUX, POSITIVE))
    for key in ("reference_epochs", "reference_err"):
        if key in table and kind != "difference":
            raise table.error(f'must go with kind = "difference", got kind = "{kind}"; change kind or remove it', key)
    if reference_err is not None and not reference_epochs:
        raise table.error("must go with reference_epochs; add them or remove reference_err", "reference_err")
    return PhotometryRecord(
        path=cast(Path, table.file("file", text)),
        kind=cast(Literal["flux", "difference", "magnitude"], kind),
        reference_epochs=reference_epochs,
        reference_err=reference_err,
        limit_sigma=table.get("limit_sigma", number(DIMENSIONLESS, POSITIVE)),
        columns=_read_columns(table, kind),
    )


def _read_columns(photometry: Table, kind: str) -> dict[str, str]:
    table = photometry.table("columns")
    if table is None:
        return {}
    table.only(*(_MAGNITUDE_COLUMNS if kind == "magnitude" else _FLUX_COLUMNS))
    columns = {key: table.need(key, text) for key in table}
    for key, name in columns.items():
        twin = next(other for other, taken in columns.items() if taken == name)
        if twin != key:
            raise table.error(f"must name another column than {twin}, got {name!r} for both", key)
    return columns


def read_counterpart(root: Table) -> CounterpartRecord | None:
    """``[counterpart]``: a light curve or a limit at the mirror position, and earlier detections."""
    table = root.table("counterpart")
    if table is None:
        return None
    table.only("file", "limit", "limit_sigma", "band", "earlier")
    if "earlier" not in table or ("file" in table and "limit" in table):
        table.one_of("file", "limit")
    for key in ("band", "limit_sigma"):
        if key in table and "limit" not in table:
            raise table.error(f"must go with limit; add the limit or remove {key}", key)
    if "limit" in table and "band" not in table:
        raise table.error("must be given with limit; add the band of the limit", "band")
    return CounterpartRecord(
        path=table.file("file", text),
        limit=table.get("limit", number(FLUX, POSITIVE)),
        limit_sigma=table.get("limit_sigma", number(DIMENSIONLESS, POSITIVE)) or DEFAULT_SIGMA,
        band=table.get("band", text),
        earlier=table.get("earlier", epochs) or (),
    )
