"""ECSV and FITS tables through astropy; whatever it has to say becomes one line."""

from __future__ import annotations

import csv
import io
import itertools
import json
import re
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any, Final

import numpy as np
from astropy.io import fits
from astropy.table import Column, Table
from astropy.table.meta import get_header_from_yaml
from astropy.time import Time
from astropy.units import Quantity
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.photometry.rawtable import MAX_ROWS, RawColumn, RawTable, row_label, split_unit
from crossing.photometry.times import UNSPECIFIED, offline

__all__ = ["META_EXTENSION", "META_KEY", "read_ecsv", "read_fits"]

META_KEY: Final = "crossing_lightcurve"
"""Key of an ECSV header under which `LightCurve.write` keeps what does not fit into columns."""
META_EXTENSION: Final = "CROSSING"
"""Name of the FITS extension with the same as JSON in its only cell: FITS cards hold no nested data."""

MAX_COLUMNS: Final = 999
"""As the FITS standard has it."""

_TIME_CARD: Final = re.compile(r"TIMESYS|(MJD|JD|DATE)REF[IF]?|(TCTYP|TCUNI|TRPOS)[0-9]+")
_TABLES: Final = (fits.BinTableHDU, fits.TableHDU)


def read_ecsv(text: str) -> RawTable:
    """Table out of ECSV text; values that numpy cannot convert are named by row.

    Raises
    ------
    InputError
        If the header or the cells are damaged.
    """
    lines = text.replace("\r\n", "\n").split("\n")
    with _one_line("has a damaged ECSV header"):
        header = get_header_from_yaml([line[2:] for line in lines if line.startswith("# ")])
        columns = [(column["name"], column["datatype"]) for column in header["datatype"]]
        delimiter = header.get("delimiter", " ")
    if not all(isinstance(text, str) for text in (delimiter, *itertools.chain(*columns))):
        raise InputError("must name columns, types and delimiter in words", where="header")
    _refuse_twice([name for name, _ in columns])
    try:
        with _one_line("is not a readable ECSV table"):
            table = Table.read(lines, format="ascii.ecsv")
    except InputError:
        _name_bad_cell(lines, columns, delimiter)
        raise
    meta = table.meta.get(META_KEY)
    return _raw_table(table, meta if isinstance(meta, dict) else None)


def _name_bad_cell(lines: list[str], columns: list[tuple[str, str]], delimiter: str) -> None:
    """Say which row of a refused ECSV table is to blame, if that can be found out."""
    body = [line for line in lines if line.strip() and not line.startswith("#")]
    with _one_line("is not a readable ECSV table"):
        records = list(csv.reader(io.StringIO("\n".join(body)), delimiter=delimiter))
    for index, row in enumerate(records[1:]):
        if len(row) != len(columns):
            raise InputError(f"must have {len(columns)} cells, got {len(row)}", where=row_label(index))
        for cell, (name, kind) in zip(row, columns, strict=True):
            if kind.startswith(("float", "int", "uint")) and cell and not _converts(cell, kind):
                raise InputError(f"{name} must be a number ({kind}), got {cell[:60]!r}", where=row_label(index))
            if kind == "bool" and cell and cell not in {"True", "False"}:
                raise InputError(f"{name} must be True or False, got {cell[:60]!r}", where=row_label(index))


def _converts(cell: str, kind: str) -> bool:
    try:
        float(cell) if kind.startswith("float") else int(cell)
    except ValueError:
        return False
    return True


def read_fits(data: bytes) -> RawTable:
    """The only table of a FITS file.

    Raises
    ------
    InputError
        If there is no table, or more than one, or the headers promise more than the file holds.
    """
    with _one_line("is not a readable FITS file"), fits.open(io.BytesIO(data), memmap=False) as units:
        tables = []
        for unit in units:
            place = unit.fileinfo()
            if place["datLoc"] + unit.size > len(data):
                raise InputError(f"declares {unit.size} bytes of data that the file does not hold; it is truncated")
            if isinstance(unit, _TABLES) and unit.name != META_EXTENSION:
                tables.append(unit)
        if not tables:
            raise InputError("has no table; give a FITS file with a binary table extension")
        if len(tables) > 1:
            raise InputError(f"must hold one table, got {len(tables)}; save the light curve in a file of its own")
        _check_header(tables[0].header)
        timed = _is_timed(tables[0].header)
        table = Table.read(tables[0], format="fits", astropy_native=timed, mask_invalid=False)
        meta = json.loads(str(units[META_EXTENSION].data["json"][0])) if META_EXTENSION in units else None
        return _raw_table(table, meta if isinstance(meta, dict) else None, stated=_stated_scales(tables[0].header))


def _check_header(header: fits.Header) -> None:
    if header["TFIELDS"] > MAX_COLUMNS:
        raise InputError(f"must have at most {MAX_COLUMNS} columns, got {header['TFIELDS']}")
    if header["NAXIS2"] > MAX_ROWS:
        raise InputError(f"must have at most {MAX_ROWS} rows to be a light curve, got {header['NAXIS2']}")
    _refuse_twice([str(header.get(f"TTYPE{number}", "")).strip() for number in range(1, header["TFIELDS"] + 1)])


def _refuse_twice(names: list[str]) -> None:
    """Refuse names that stand twice, because astropy would rename one of them."""
    for name, count in Counter(names).items():
        if name and count > 1:
            raise InputError(f"the name {name!r} stands twice; rename one column", where="header")


def _is_timed(header: fits.Header) -> bool:
    """Whether the header says anything about times: without, astropy would take days to be UTC."""
    return any(_TIME_CARD.fullmatch(key) for key in header)


def _stated_scales(header: fits.Header) -> frozenset[str]:
    """Columns whose time scale the header states: astropy takes UTC where it does not."""
    numbers = range(1, header["TFIELDS"] + 1)
    return frozenset(
        str(header.get(f"TTYPE{number}", "")).strip()
        for number in numbers
        if "TIMESYS" in header or f"TCTYP{number}" in header
    )


@contextmanager
def _one_line(what: str) -> Iterator[None]:
    """Turn any complaint of a foreign parser into an `InputError`, and keep its warnings off the screen."""
    try:
        with offline():
            yield
    except InputError:
        raise
    except Exception as error:
        # Damaged files make these parsers raise nearly every kind of exception; few of them mean anything to a user.
        told = (
            str(error)[:160] if isinstance(error, ValueError | OSError | AssertionError) else "its structure is damaged"
        )
        raise InputError(f"{what}: {told or type(error).__name__}; check that the file is whole") from error


def _raw_table(table: Table, meta: dict[str, Any] | None, stated: frozenset[str] | None = None) -> RawTable:
    if len(table) > MAX_ROWS:
        raise InputError(f"must have at most {MAX_ROWS} rows to be a light curve, got {len(table)}")
    columns = tuple(_raw_column(table, name, stated) for name in table.colnames)
    return RawTable(columns=columns, n_rows=len(table), meta=meta)


def _raw_column(table: Table, name: str, stated: frozenset[str] | None) -> RawColumn:
    column = table[name]
    title, unit = split_unit(name)
    if not isinstance(column, Time | Column | Quantity):
        # A mixin such as a sky position: no column that a light curve is made of.
        nothing = np.zeros(len(table), dtype=np.bool_)
        return RawColumn(name=title, values=nothing.astype(np.object_), missing=nothing)
    missing = np.broadcast_to(np.asarray(getattr(column, "mask", False), dtype=np.bool_), column.shape)
    if isinstance(column, Time):
        scale = column.scale if stated is None or name in stated else UNSPECIFIED
        return RawColumn(name=title, values=_plain(column.mjd), missing=missing, scale=scale)
    own = None if column.unit is None or not str(column.unit) else str(column.unit)
    if unit is not None and own is not None and unit != own:
        raise InputError(f"says the unit {unit} in its name and {own} beside it; keep one", where=f"column {title}")
    return RawColumn(name=title, values=_plain(column.value), missing=missing, unit=own or unit)


def _plain(cells: Any) -> NDArray[Any]:
    """Cells as a contiguous native array without mask; bytes become text."""
    values = np.asarray(np.ma.getdata(getattr(cells, "unmasked", cells)))
    if values.dtype.kind == "S":
        values = np.char.decode(values, "utf-8")
    return np.ascontiguousarray(values, dtype=values.dtype.newbyteorder("="))
