"""Tables of kinds of stars: luminosity, temperature and number."""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError

if TYPE_CHECKING:
    from astropy.table import Table

__all__ = ["read_star_table"]

Array = NDArray[np.float64]

_UNITS: Final = {"luminosity": "solLum", "temperature": "K", "number": ""}


def read_star_table(path: Path, columns: Mapping[str, str] | None = None) -> tuple[Array, Array, Array]:
    """Read a table of kinds of stars.

    Parameters
    ----------
    path : Path
        CSV, ECSV, FITS or VOTable.
    columns : mapping of str to str, optional
        Names of the columns, for those that differ from ``luminosity``, ``temperature`` and ``number``.

    Returns
    -------
    luminosity, temperature, number : ndarray, shape (n,)
        Luminosities [Lsun], temperatures [K] and relative numbers; columns without a unit are in these.

    Raises
    ------
    InputError
        If the file cannot be read, lacks a column, or has cells that are empty or no numbers.
    """
    table = _read(path)
    found = []
    for key, unit in _UNITS.items():
        name = (columns or {}).get(key, key)
        if name not in table.colnames:
            raise InputError(
                f"must have a column {name!r}, got {', '.join(table.colnames)}; name it under columns", source=path
            )
        found.append(_column(table, name, unit, path))
    return found[0], found[1], found[2]


def _read(path: Path) -> Table:
    from astropy.table import Table

    if not path.is_file():
        raise InputError("must exist, got no such file; check population.file", source=path)
    kind = None if path.suffix.lower() in (".fits", ".fit", ".vot", ".xml") else "ascii"
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return Table.read(path, format=kind)
    except Exception as error:  # astropy's readers raise many classes for broken files
        reason = " ".join(str(error).split())[:120]
        problem = f"must be a table that can be read, got {reason!r}; give CSV, ECSV or FITS"
        raise InputError(problem, source=path) from None


def _column(table: Table, name: str, unit: str, path: Path) -> Array:
    from astropy import units as u

    column = table[name]
    if hasattr(column, "mask") and np.any(column.mask):
        raise InputError(f"column {name!r} must be full, got an empty cell; remove that row", source=path)
    try:
        values = u.Quantity(column) if column.unit is not None else u.Quantity(np.asarray(column, np.float64), unit)
        return np.asarray(values.to_value(unit), dtype=np.float64)
    except (ValueError, TypeError, u.UnitsError):
        raise InputError(f"column {name!r} must hold numbers in {unit or 'no unit'}; convert it", source=path) from None
