"""Flux densities in nJy out of whatever unit the file has, or out of AB magnitudes."""

from __future__ import annotations

import warnings
from typing import Final

import numpy as np
from astropy import units as u
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.photometry.cells import refuse_rows
from crossing.photometry.rawtable import RawColumn
from crossing.stars.photosphere import flux_njy_from_magnitude

__all__ = ["MAX_MAG_ERR", "flux_factor", "fluxes_from_magnitudes", "require_ab"]

FloatArray = NDArray[np.float64]

MAX_MAG_ERR: Final = 0.5
"""A larger error [mag] is a signal-to-noise below 2.2, where magnitudes no longer say what was measured."""

_MAGNITUDES: Final = (-30.0, 60.0)
_AB_NAMES: Final = frozenset({"mag", "mag(ab)", "abmag", "ab", "ab mag", "mag ab"})
_UNIT_ADVICE: Final = 'write it into the header, as in "{name} [nJy]", or say columns = {{{name} = "{name} [nJy]"}}'


def flux_factor(column: RawColumn, default: str | None = None) -> float:
    """Factor from the unit of a column to nJy.

    Parameters
    ----------
    column : RawColumn
        Fluxes or their errors.
    default : str, optional
        Unit to take if the column has none.

    Raises
    ------
    InputError
        If there is no unit, or it is not one of flux density per frequency.
    """
    where, text = f"column {column.name}", column.unit or default
    if text is None:
        raise InputError("must have a unit; " + _UNIT_ADVICE.format(name=column.name), where=where)
    unit = _unit(text)
    if unit is None:
        raise InputError(f"must have a unit of flux density such as nJy, got {text!r}, which is not known", where=where)
    if not isinstance(unit, u.UnitBase) or unit.is_equivalent(u.mag):
        raise InputError(
            f'must be a flux density, got {text!r}; for AB magnitudes say kind = "magnitude" and name the columns mag '
            "and mag_err",
            where=where,
        )
    if unit.is_equivalent(u.erg / u.s / u.cm**2 / u.AA):
        raise InputError(f"must be a flux density per frequency such as nJy, got {text!r} per wavelength", where=where)
    factor = float(unit.to(u.nJy)) if unit.is_equivalent(u.nJy) else 0.0
    if not 0.0 < factor < np.inf:
        raise InputError(f"must have a unit of flux density such as nJy, got {text!r}", where=where)
    # Rounded, so that 0.03 uJy are 30 nJy and not 29.999999999999996.
    return float(f"{factor:.14g}")


def _unit(text: str) -> u.UnitBase | None:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # several slashes are discouraged, not wrong
        try:
            return u.Unit(text)
        except (ValueError, TypeError, ArithmeticError, RecursionError):
            return None


def require_ab(column: RawColumn) -> None:
    """Refuse a column of magnitudes whose unit says that they are not AB.

    Raises
    ------
    InputError
        For any unit but none, ``mag`` or ``mag(AB)``.
    """
    if column.unit is not None and column.unit.lower() not in _AB_NAMES:
        raise InputError(
            f'must be AB magnitudes, got the unit {column.unit!r}; convert them, or say kind = "flux" for fluxes',
            where=f"column {column.name}",
        )


def fluxes_from_magnitudes(
    mag: FloatArray, mag_err: FloatArray, is_upper_limit: NDArray[np.bool_], usable: NDArray[np.bool_]
) -> tuple[FloatArray, FloatArray]:
    """Flux densities and errors out of AB magnitudes.

    Parameters
    ----------
    mag, mag_err : ndarray, shape (n,)
        AB magnitudes and their errors.
    is_upper_limit : ndarray of bool, shape (n,)
        Rows where `mag` is a limit; their errors are not looked at.
    usable : ndarray of bool, shape (n,)
        Rows to check; the others may hold anything and give NaN then.

    Returns
    -------
    flux, flux_err : ndarray, shape (n,)
        Flux densities and errors [nJy].

    Raises
    ------
    InputError
        If a magnitude is out of range, or an error too large to be one of a detection.

    Notes
    -----
    The error is ``flux_err = flux mag_err ln(10) / 2.5``, the inverse of how magnitude errors are made from fluxes. It
    is not good for faint sources, whose magnitude errors are refused.
    """
    low, high = _MAGNITUDES
    refuse_rows(
        usable & ~((mag > low) & (mag < high)),
        lambda i: (
            f"mag must be an AB magnitude between {low:g} and {high:g}, got {mag[i]:g}; give a non-detection "
            "as an upper limit"
        ),
    )
    detected = usable & ~is_upper_limit
    refuse_rows(
        detected & (mag_err > MAX_MAG_ERR),
        lambda i: (
            f"mag_err must be at most {MAX_MAG_ERR:g} mag, got {mag_err[i]:g}; give such a row as flux and "
            "flux_err, or as an upper limit"
        ),
    )
    with np.errstate(all="ignore"):
        flux = flux_njy_from_magnitude(mag)
        return flux, flux * mag_err * (np.log(10.0) / 2.5)
