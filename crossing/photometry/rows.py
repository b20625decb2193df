"""Rows of one file, checked one by one: nothing is dropped, and what cannot be used is named."""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.photometry.cells import names, numbers, refuse_rows, truths
from crossing.photometry.columns import VALUE_COLUMNS
from crossing.photometry.fluxes import flux_factor, fluxes_from_magnitudes, require_ab
from crossing.photometry.rawtable import RawColumn, row_label
from crossing.photometry.times import read_times

__all__ = ["Rows", "clean_rows", "earlier_twin", "refuse_twins"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

_SMALLEST, _LARGEST = 1e-20, 1e20
_LIMIT_ADVICE: Final = "say limit_sigma = 5 (or what it is) beside the file's name, or add a column limit_sigma"


@dataclass(frozen=True, slots=True, kw_only=True)
class Rows:
    """Rows of one file in its own order; fields as in `LightCurve`."""

    time: FloatArray
    time_scale: str
    band: NDArray[np.str_]
    flux: FloatArray
    flux_err: FloatArray
    is_upper_limit: BoolArray
    excluded: BoolArray


def clean_rows(
    columns: Mapping[str, RawColumn],
    kind: str,
    *,
    band: str | None = None,
    limit_sigma: float | None = None,
    limits_have_errors: bool = False,
) -> Rows:
    """Turn raw columns into rows in fixed units.

    Parameters
    ----------
    columns : mapping of str to RawColumn
        As `pick_columns` gives them.
    kind : {"flux", "difference", "magnitude"}
        What the numbers are.
    band : str, optional
        Band of all rows, if there is no such column.
    limit_sigma : float, optional
        Significance of upper limits that have none of their own.
    limits_have_errors : bool, optional
        Take the errors of limits as they stand, which is so in files that the package wrote itself.

    Raises
    ------
    InputError
        If a cell cannot be used; its `where` is the data row or the column.
    """
    time, scale = read_times(columns["time"])
    n = time.size
    bands = np.full(n, band) if band is not None else names(columns["band"])
    limit = truths(columns["is_upper_limit"]) if "is_upper_limit" in columns else np.zeros(n, dtype=np.bool_)
    excluded = truths(columns["excluded"]) if "excluded" in columns else np.zeros(n, dtype=np.bool_)
    usable = ~excluded
    flux, flux_err = _values(columns, kind, limit, usable)
    if not limits_have_errors:
        with np.errstate(all="ignore"):
            flux_err = np.where(limit, flux / _limit_sigmas(columns, limit, usable, limit_sigma), flux_err)
    _check_range(flux, flux_err, limit, usable)
    flux[~np.isfinite(flux)] = np.nan
    flux_err[~np.isfinite(flux_err)] = np.nan
    return Rows(
        time=time, time_scale=scale, band=bands, flux=flux, flux_err=flux_err, is_upper_limit=limit, excluded=excluded
    )


def _values(
    columns: Mapping[str, RawColumn], kind: str, limit: BoolArray, usable: BoolArray
) -> tuple[FloatArray, FloatArray]:
    """Fluxes and errors [nJy]; errors of limits may still be anything."""
    value_name, error_name = VALUE_COLUMNS[kind]
    value_column, error_column = columns[value_name], columns.get(error_name)
    factor, error_factor = _factors(value_column, error_column, kind)
    value, missing = numbers(value_column)
    advice = "; remove the row, mark it as excluded, or give it as an upper limit"
    refuse_rows(usable & missing, f"{value_name} is missing{advice}")
    refuse_rows(usable & ~np.isfinite(value), lambda i: f"{value_name} must be finite, got {value[i]:g}{advice}")
    error, lacking = np.full(value.size, np.nan), np.ones(value.size, dtype=np.bool_)
    if error_column is not None:
        error, lacking = numbers(error_column)
    elif np.any(usable & ~limit):
        problem = f'is missing; every detection needs an error; say columns = {{{error_name} = "ITS NAME"}}'
        raise InputError(problem, where=f"column {error_name}")
    needed = usable & ~limit
    refuse_rows(needed & lacking, f"{error_name} is missing; every detection needs an error")
    refuse_rows(
        needed & ~((error > 0) & np.isfinite(error)),
        lambda i: f"{error_name} must be positive and finite, got {error[i]:g}; correct it or mark the row as excluded",
    )
    if kind == "magnitude":
        return fluxes_from_magnitudes(value, error, limit, usable)
    with np.errstate(over="ignore"):
        return value * factor, error * error_factor


def _factors(value: RawColumn, error: RawColumn | None, kind: str) -> tuple[float, float]:
    """Factors of value and error to nJy; 1 for magnitudes, whose units are only checked."""
    if kind == "magnitude":
        for column in (value, error):
            if column is not None:
                require_ab(column)
        return 1.0, 1.0
    return flux_factor(value), 1.0 if error is None else flux_factor(error, value.unit)


def _limit_sigmas(
    columns: Mapping[str, RawColumn], limit: BoolArray, usable: BoolArray, default: float | None
) -> FloatArray:
    """(n,) significance of each upper limit, from its own column or for all of them."""
    sigma = np.full(limit.size, np.nan if default is None else default)
    if "limit_sigma" in columns:
        own, missing = numbers(columns["limit_sigma"])
        sigma = np.where(missing, sigma, own)
    needed = limit & usable
    refuse_rows(needed & np.isnan(sigma), f"is an upper limit without its significance; {_LIMIT_ADVICE}")
    refuse_rows(
        needed & ~((sigma > 0) & np.isfinite(sigma)),
        lambda i: f"limit_sigma must be positive and finite, got {sigma[i]:g}",
    )
    return sigma


def _check_range(flux: FloatArray, flux_err: FloatArray, limit: BoolArray, usable: BoolArray) -> None:
    refuse_rows(
        usable & limit & ~(flux > 0), lambda i: f"an upper limit must be positive, got {flux[i]:g} nJy; give its size"
    )
    refuse_rows(
        usable & ~((np.abs(flux) <= _LARGEST) & (flux_err >= _SMALLEST) & (flux_err <= _LARGEST)),
        lambda i: (
            f"flux and error must be between {_SMALLEST:g} and {_LARGEST:g} nJy in size, got {flux[i]:g} and "
            f"{flux_err[i]:g} nJy; check the unit"
        ),
    )


def earlier_twin(keys: Iterable[tuple[Hashable, ...]], usable: BoolArray) -> NDArray[np.int64]:
    """(n,) index of the first usable row with the same key, or -1 where there is none before."""
    seen: dict[tuple[Hashable, ...], int] = {}
    twins = [seen.setdefault(key, row) if usable[row] else row for row, key in enumerate(keys)]
    first = np.array(twins, dtype=np.int64)
    return np.where(first == np.arange(first.size), -1, first)


def refuse_twins(rows: Rows, usable: BoolArray) -> None:
    """Refuse a file with one observation twice: it would count double.

    Raises
    ------
    InputError
        Naming both rows.
    """
    columns = (rows.time, rows.band, rows.flux, rows.is_upper_limit)
    twins = earlier_twin(zip(*(column.tolist() for column in columns), strict=True), usable)
    refuse_rows(
        twins >= 0,
        lambda i: (
            f"is the same observation as {row_label(int(twins[i]))}: time, band and flux agree; remove one, mark "
            "one as excluded, or give their times with more digits"
        ),
    )
