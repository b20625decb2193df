"""Times of observation: MJD in the scale that the file states, and never anything that needs a download."""

from __future__ import annotations

import re
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.photometry.cells import numbers, refuse_rows
from crossing.photometry.rawtable import RawColumn

__all__ = ["SCALES", "UNSPECIFIED", "offline", "read_times", "to_tdb"]

UNSPECIFIED: Final = "unspecified"
SCALES: Final = ("utc", "tai", "tt", "tdb", "tcb", "tcg", "ut1", "local")
_TDB_REACHABLE: Final = ("utc", "tai", "tt", "tdb", "tcb", "tcg")

_UNIT: Final = re.compile(r"(?:MJD|d|days?)?\s*(?P<scale>[A-Za-z0-9]*)", re.IGNORECASE)
_JULIAN: Final = 2_400_000.5
_FIRST_JD, _LAST_MJD = 2_400_000.0, 200_000.0
_YEARS: Final = (1900.0, 2100.0)


@contextmanager
def offline() -> Iterator[None]:
    """Keep astropy from downloading tables of the Earth's rotation or of leap seconds, and from warning about them."""
    from astropy.utils import iers

    with iers.conf.set_temp("auto_download", False), warnings.catch_warnings():
        warnings.simplefilter("ignore")
        yield


def read_times(column: RawColumn) -> tuple[NDArray[np.float64], str]:
    """Times of a column.

    Parameters
    ----------
    column : RawColumn
        The time column; its unit may be empty, ``d`` or ``MJD``, with a scale behind it (``MJD TDB``).

    Returns
    -------
    time : ndarray, shape (n,)
        MJD [d], not converted.
    scale : str
        One of `SCALES`, or ``unspecified``.

    Raises
    ------
    InputError
        If a time is missing, not finite, or plainly not an MJD.
    """
    scale = column.scale or _scale_of_unit(column)
    time, missing = numbers(column)
    refuse_rows(missing, "time is missing; remove the row or fill it in")
    refuse_rows(~np.isfinite(time), lambda i: f"time must be a finite MJD, got {time[i]:g}")
    refuse_rows(
        (time >= _FIRST_JD) & (time < _FIRST_JD + _LAST_MJD),
        lambda i: f"time must be MJD, got {time[i]:.10g}, which looks like a Julian Date; subtract {_JULIAN}",
    )
    refuse_rows(np.abs(time) > _LAST_MJD, lambda i: f"time must be MJD in days, got {time[i]:.10g}")
    if np.all((time >= _YEARS[0]) & (time < _YEARS[1])):
        raise InputError(
            f"must be MJD, got {time.min():g} to {time.max():g}, which look like years or a shortened Julian Date",
            where=f"column {column.name}",
        )
    return time, scale


def _scale_of_unit(column: RawColumn) -> str:
    match = _UNIT.fullmatch(column.unit or "")
    scale = match["scale"].lower() if match else ""
    if match is None or (scale and scale not in SCALES):
        raise InputError(
            f'must be MJD in days, got the unit {column.unit!r}; write "time [MJD]" or, with a scale, "time [MJD TDB]"',
            where=f"column {column.name}",
        )
    return scale or UNSPECIFIED


def to_tdb(time: NDArray[np.float64], scale: str) -> NDArray[np.float64]:
    """MJDs [d] in Barycentric Dynamical Time, for an observer at the Earth's centre.

    Raises
    ------
    InputError
        If `scale` cannot be converted without tables of the Earth's rotation, or is not known.
    """
    if scale not in _TDB_REACHABLE:
        raise InputError(f"times in the scale {scale} cannot be converted to TDB; give all files in one scale")
    if scale == "tdb":
        return time
    from astropy.time import Time

    with offline():
        return np.asarray(Time(time, format="mjd", scale=scale).tdb.mjd, dtype=np.float64)
