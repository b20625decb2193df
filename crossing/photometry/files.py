"""From a file to a raw table: ECSV, FITS and CSV are told apart by what they hold, not by their names alone."""

from __future__ import annotations

import csv
import hashlib
import io
from pathlib import Path
from typing import Final

import numpy as np

from crossing.errors import InputError
from crossing.photometry.rawtable import MAX_ROWS, RawColumn, RawTable, row_label, split_unit

__all__ = ["load_table", "read_csv"]

MAX_BYTES: Final = 64 * 1024 * 1024
_SUFFIXES: Final = {".ecsv": "ECSV", ".fits": "FITS", ".fit": "FITS", ".csv": "CSV"}
_PACKED: Final = {b"\x1f\x8b": "gzip", b"PK\x03\x04": "zip", b"BZh": "bzip2", b"\xfd7zXZ": "xz"}


def load_table(path: Path) -> tuple[RawTable, str]:
    """Read one file.

    Parameters
    ----------
    path : pathlib.Path
        The file.

    Returns
    -------
    table : RawTable
        Its cells.
    digest : str
        SHA-256 of the file, hexadecimal.

    Raises
    ------
    InputError
        If the file cannot be read, is too large, or is not a table in one of the three formats.
    """
    data = _read_bytes(path)
    form = _format(path, data)
    if form == "FITS":
        from crossing.photometry.astropy_files import read_fits  # CSV needs no astropy

        table = read_fits(data)
    else:
        text = _decode(data)
        if form == "ECSV":
            from crossing.photometry.astropy_files import read_ecsv

            table = read_ecsv(text)
        else:
            table = read_csv(text)
    if not table.n_rows:
        raise InputError("has a header and no data rows; a light curve needs at least one")
    return table, hashlib.sha256(data).hexdigest()


def _read_bytes(path: Path) -> bytes:
    try:
        if not path.exists():
            raise InputError("there is no such file")
        if not path.is_file():
            raise InputError("must be a file with a table, got a folder or a device")
        size = path.stat().st_size
        if size > MAX_BYTES:
            raise InputError(
                f"must be smaller than {MAX_BYTES >> 20} MiB to be a light curve, got {size >> 20} MiB; "
                "keep only the rows of this event"
            )
        return path.read_bytes()
    except InputError:
        raise
    except (OSError, ValueError) as error:
        raise InputError(f"cannot be read: {getattr(error, 'strerror', None) or error}") from error


def _format(path: Path, data: bytes) -> str:
    """Name of the file's format; its suffix must not contradict its content."""
    if not data.strip():
        raise InputError("is empty; a light curve needs a header line and at least one data row")
    for magic, name in _PACKED.items():
        if data.startswith(magic):
            raise InputError(f"is compressed ({name}); unpack it first")
    if data.startswith(b"SIMPLE  ="):
        return "FITS"
    if data.removeprefix(b"\xef\xbb\xbf").startswith(b"# %ECSV"):
        return "ECSV"
    form = _SUFFIXES.get(path.suffix.lower())
    if form == "FITS":
        raise InputError("is not a FITS file: it does not start with SIMPLE; check the file or its suffix")
    if form == "ECSV":
        raise InputError("is not an ECSV file: its first line must start with '# %ECSV'; name it .csv if it is CSV")
    if form is None:
        raise InputError(f"must be named .ecsv, .fits or .csv, got the suffix {path.suffix!r}")
    return form


def _decode(data: bytes) -> str:
    if b"\0" in data:
        raise InputError("is not a text file: it holds zero bytes; give ECSV, FITS or CSV")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise InputError(f"must be text in UTF-8, got other bytes in line {line}; give ECSV, FITS or CSV") from None


def read_csv(text: str) -> RawTable:
    """Table out of comma-separated text; semicolons and tabs are understood, lines with # skipped.

    Raises
    ------
    InputError
        If there is no header, a name stands twice, or a row has another number of cells than the header.
    """
    records = _records(text)
    if not records:
        raise InputError("holds only comments; a light curve needs a header line and at least one data row")
    header, rows = records[0], records[1:]
    if _is_number(header[0]):
        raise InputError("must start with a line of column names (not behind a #), got numbers", where="header")
    for index, row in enumerate(rows):
        if len(row) != len(header):
            raise InputError(
                f"must have {len(header)} cells as the header has, got {len(row)}; quote cells that hold commas",
                where=row_label(index),
            )
    columns = []
    for number, title in enumerate(header):
        name, unit = split_unit(title)
        values = np.array([row[number].strip() for row in rows], dtype=np.str_)
        columns.append(RawColumn(name=name, values=values, missing=values == "", unit=unit))
    return RawTable(columns=tuple(columns), n_rows=len(rows))


def _records(text: str) -> list[list[str]]:
    """Header and rows as lists of cells, without blank lines and comments."""
    lines = text.replace("\r\n", "\n").replace("\r", "\n").split("\n")
    lines = [line for line in lines if line.strip() and not line.lstrip().startswith("#")]
    if not lines:
        return []
    delimiter = max(",;\t", key=lines[0].count)
    try:
        records = list(csv.reader(io.StringIO("\n".join(lines), newline=""), delimiter=delimiter, strict=True))
    except csv.Error as error:
        raise InputError(f"is not readable as CSV: {error}; check its quotes") from None
    if len(records) > MAX_ROWS:
        raise InputError(f"must have at most {MAX_ROWS} rows to be a light curve; keep only the rows of this event")
    return [record for record in records if any(cell.strip() for cell in record)]


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True
