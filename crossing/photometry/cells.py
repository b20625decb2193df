"""Cells of a raw column turned into numbers, truth values or names; what cannot be is named by its row."""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.photometry.rawtable import RawColumn, row_label

__all__ = ["integers", "names", "numbers", "refuse_rows", "truths"]

_TRUE: Final = frozenset({"true", "t", "yes", "y", "1"})
_FALSE: Final = frozenset({"false", "f", "no", "n", "0"})


def refuse_rows(bad: NDArray[np.bool_], problem: str | Callable[[int], str]) -> None:
    """Refuse the first row that is `bad`, and say how many others are.

    Parameters
    ----------
    bad : ndarray of bool, shape (n,)
        Rows to refuse.
    problem : str or callable
        What is wrong, or a function of the zero-based row that says it.

    Raises
    ------
    InputError
        If any row is bad; its `where` is the row.
    """
    rows = np.flatnonzero(bad)
    if not rows.size:
        return
    first = int(rows[0])
    text = problem if isinstance(problem, str) else problem(first)
    others = f" ({rows.size - 1} more such row{'s' if rows.size > 2 else ''})" if rows.size > 1 else ""
    raise InputError(text + others, where=row_label(first))


def numbers(column: RawColumn) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Numbers of a column.

    Returns
    -------
    values : ndarray, shape (n,)
        The numbers, NaN where they are missing.
    missing : ndarray of bool, shape (n,)
        Which cells are empty or masked.

    Raises
    ------
    InputError
        If a cell is not a number; the row is named.
    """
    cells = _flat(column)
    missing = column.missing.copy()
    if cells.dtype.kind in "iuf":
        values = np.array(cells, dtype=np.float64)
    elif cells.dtype.kind == "U":
        values = np.full(cells.shape, np.nan)
        bad = np.zeros(cells.shape, dtype=np.bool_)
        for index in np.flatnonzero(~missing):
            try:
                values[index] = _number(str(cells[index]))
            except ValueError:
                bad[index] = True
        refuse_rows(bad, lambda i: f"{column.name} must be a number, got {_shown(cells[i])}")
    else:
        raise InputError(f"must hold numbers, got {cells.dtype.name}", where=f"column {column.name}")
    values[missing] = np.nan
    return values, missing


def truths(column: RawColumn) -> NDArray[np.bool_]:
    """Truth values of a column of booleans, of 0 and 1, or of words such as true and no.

    Raises
    ------
    InputError
        If a cell is anything else, or empty.
    """
    cells = _flat(column)
    hint = f"{column.name} must be true or false (or 1 or 0)"
    refuse_rows(column.missing, f"{hint}, got an empty cell")
    if cells.dtype.kind == "b":
        return np.array(cells, dtype=np.bool_)
    words = np.char.lower(np.char.strip(cells.astype(np.str_)))
    if cells.dtype.kind == "f":
        words = np.where(cells == 1, "1", np.where(cells == 0, "0", "?"))
    yes, no = np.isin(words, list(_TRUE)), np.isin(words, list(_FALSE))
    refuse_rows(~(yes | no), lambda i: f"{hint}, got {_shown(cells[i])}")
    return np.array(yes, dtype=np.bool_)


def names(column: RawColumn) -> NDArray[np.str_]:
    """Names of a column, without blanks around them.

    Raises
    ------
    InputError
        If a cell is empty or holds characters that cannot be printed.
    """
    cells = _flat(column)
    if cells.dtype.kind not in "Uiu":
        raise InputError(f"must hold names, got {cells.dtype.name}", where=f"column {column.name}")
    words = np.char.strip(cells.astype(np.str_))
    refuse_rows(column.missing | (words == ""), f"{column.name} must be a name, got an empty cell")
    unprintable = np.array([not word.isprintable() for word in words.tolist()], dtype=np.bool_)
    refuse_rows(unprintable, lambda i: f"{column.name} must be printable, got {_shown(words[i])}")
    return words


def integers(column: RawColumn) -> NDArray[np.int64]:
    """Whole numbers of a column.

    Raises
    ------
    InputError
        If a cell is anything else, or empty.
    """
    values, missing = numbers(column)
    bad = missing | ~np.isfinite(values) | (values != np.rint(values)) | (np.abs(values) > 2**53)
    refuse_rows(bad, lambda i: f"{column.name} must be a whole number, got {_shown(column.values[i])}")
    return values.astype(np.int64)


def _flat(column: RawColumn) -> NDArray[np.generic]:
    if column.values.ndim != 1:
        shape = " x ".join(str(size) for size in column.values.shape[1:])
        raise InputError(f"must have one value a row, got {shape} values", where=f"column {column.name}")
    return column.values


def _number(text: str) -> float:
    if "_" in text:
        raise ValueError(text)  # Python would take 1_000
    return float(text)


def _shown(cell: object) -> str:
    text = str(cell)
    return repr(text if len(text) <= 40 else text[:40] + "...")
