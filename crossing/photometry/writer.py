"""Light curves out: ECSV and FITS without loss, CSV for other programs."""

from __future__ import annotations

import csv
import io
import json
import os
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from astropy import units as u
from astropy.io import fits
from astropy.table import QTable
from astropy.time import Time

from crossing.errors import InputError
from crossing.outputs import write_whole
from crossing.photometry.astropy_files import META_EXTENSION, META_KEY
from crossing.photometry.flags import FLAGS, flag_bit
from crossing.photometry.times import UNSPECIFIED, offline

if TYPE_CHECKING:
    from crossing.photometry.lightcurve import LightCurve

__all__ = ["FORMAT_VERSION", "build_table", "write_table"]

FORMAT_VERSION = 1
"""Version of what is stored beside the columns; a reader refuses those it does not know."""


def build_table(curve: LightCurve) -> QTable:
    """Table of a light curve with units; its ``meta`` holds levels, sources, scale and the meaning of the flags."""
    time = curve.time * u.d
    if curve.time_scale != UNSPECIFIED:
        with offline():
            time = Time(curve.time, format="mjd", scale=curve.time_scale)
    columns = {
        "time": time,
        "band": np.array(curve.band),
        "flux": curve.flux * u.nJy,
        "flux_err": curve.flux_err * u.nJy,
        "is_upper_limit": np.array(curve.is_upper_limit),
        "excluded": (curve.flags & flag_bit("excluded")) != 0,
        "flags": np.array(curve.flags),
        "level": np.array(curve.level),
        "source": np.array(curve.source),
        "row": np.array(curve.row),
    }
    return QTable(columns, meta={META_KEY: _meta(curve)})


def _meta(curve: LightCurve) -> dict[str, Any]:
    levels = [
        {
            "band": group.band,
            "kind": group.kind,
            "reference_epochs": list(group.reference_epochs),
            "reference_err": group.reference_err,
            "source": group.source,
        }
        for group in curve.levels
    ]
    return {
        "version": FORMAT_VERSION,
        "time_scale": curve.time_scale,
        "levels": levels,
        "sources": [{"path": path, "sha256": digest} for path, digest in curve.sources],
        "flags": [{"name": flag.name, "bit": flag.bit, "meaning": flag.meaning} for flag in FLAGS],
    }


def write_table(curve: LightCurve, path: str | os.PathLike[str], *, overwrite: bool = False) -> None:
    """Write a light curve whole or not at all.

    Parameters
    ----------
    curve : LightCurve
        What to write; at least one row.
    path : str or os.PathLike
        File ending in .ecsv, .fits or .csv. The first two lose nothing. CSV holds no levels and no origin of the rows;
        rows that are not used become ``excluded``.
    overwrite : bool, optional
        Replace a file that is there.

    Raises
    ------
    InputError
        If the format cannot hold the light curve, or the file cannot be written.
    """
    makers = {".ecsv": _ecsv, ".fits": _fits, ".fit": _fits, ".csv": _csv}
    suffix = Path(path).suffix.lower()
    if suffix not in makers:
        raise InputError(f"must be named .ecsv, .fits or .csv, got the suffix {suffix!r}", source=path)
    if not len(curve):
        raise InputError("the light curve has no rows to write", source=path)
    try:
        data = makers[suffix](curve)
    except InputError as error:
        raise error.located(source=path) from None
    write_whole(path, data, overwrite=overwrite)


def _ecsv(curve: LightCurve) -> bytes:
    stream = io.StringIO()
    with offline():
        build_table(curve).write(stream, format="ascii.ecsv")
    return stream.getvalue().encode()


def _fits(curve: LightCurve) -> bytes:
    foreign = [name for name in curve.bands if not name.isascii()]
    if foreign:
        raise InputError(f"FITS tables hold ASCII only, got the band {foreign[0]!r}; write ECSV")
    table = build_table(curve)
    text = json.dumps(table.meta.pop(META_KEY))
    stream = io.BytesIO()
    with offline():
        rows = fits.table_to_hdu(table, name="LIGHTCURVE")
        notes = fits.BinTableHDU.from_columns(
            [fits.Column(name="json", format=f"{len(text)}A", array=[text])], name=META_EXTENSION
        )
        fits.HDUList([fits.PrimaryHDU(), rows, notes]).writeto(stream)
    return stream.getvalue()


def _csv(curve: LightCurve) -> bytes:
    kinds = {group.kind == "absolute" for group in curve.levels}
    if len(kinds) > 1 or len({group.band for group in curve.levels}) < len(curve.levels):
        raise InputError("CSV cannot hold levels of several files; write ECSV or FITS")
    scale = "" if curve.time_scale == UNSPECIFIED else f" {curve.time_scale.upper()}"
    stream = io.StringIO(newline="")
    writer = csv.writer(stream, lineterminator="\n")
    names = ("band", "flux [nJy]", "flux_err [nJy]", "is_upper_limit", "limit_sigma", "excluded")
    writer.writerow([f"time [MJD{scale}]", *names])
    limit = curve.is_upper_limit
    with np.errstate(all="ignore"):
        sigma = np.where(limit, curve.flux / curve.flux_err, np.nan)
    error = np.where(limit, np.nan, curve.flux_err)
    columns = (curve.time, curve.band, curve.flux, error, limit.astype(np.int64), sigma, (~curve.used).astype(np.int64))
    for row in zip(*(column.tolist() for column in columns), strict=True):
        writer.writerow(["" if cell != cell else cell for cell in row])
    return stream.getvalue().encode()
