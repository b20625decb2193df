"""What a table file holds before anything is known about its meaning: columns of cells, with units as text."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError

__all__ = ["MAX_ROWS", "RawColumn", "RawTable", "row_label", "split_unit"]

MAX_ROWS: Final = 1_000_000
"""More rows than this are no light curve, but a slip or an attack."""

_WITH_UNIT: Final = re.compile(r"\s*(?P<name>[^\[\]]*?)\s*\[(?P<unit>[^\[\]]*)\]\s*")


@dataclass(frozen=True, slots=True, kw_only=True)
class RawColumn:
    """One column of a file."""

    name: str
    """Name as the user sees it, without a ``[unit]`` behind it."""
    values: NDArray[Any]
    """(n,) cells: numbers, booleans or text; any other shape is refused when the column is needed."""
    missing: NDArray[np.bool_]
    """(n,) which cells are empty or masked."""
    unit: str | None = None
    """Unit as text."""
    scale: str | None = None
    """Time scale, if the file says that the column is a time; the values are MJD then."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RawTable:
    """One table of a file."""

    columns: tuple[RawColumn, ...]
    """Columns in the order of the file."""
    n_rows: int
    """Number of data rows."""
    meta: dict[str, Any] | None = None
    """What `LightCurve.write` stored beside the columns, if it wrote the file."""


def row_label(index: int) -> str:
    """Name of the data row with the zero-based `index`, as the user counts."""
    return f"data row {index + 1} (counting from 1)"


def split_unit(text: str) -> tuple[str, str | None]:
    """Split ``flux [nJy]`` into name and unit.

    Raises
    ------
    InputError
        If there is a bracket and nothing in it.
    """
    match = _WITH_UNIT.fullmatch(text)
    if match is None:
        return text.strip(), None
    if not match["unit"].strip():
        raise InputError(f"must have a unit between the brackets, got {text.strip()!r}", where="header")
    return match["name"], match["unit"].strip()
