"""Light curves in: from a file, or from all the files that an event names."""

from __future__ import annotations

import difflib
import math
import os
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.photometry.cells import integers, refuse_rows
from crossing.photometry.columns import VALUE_COLUMNS, pick_columns
from crossing.photometry.files import load_table
from crossing.photometry.flags import UNUSED, flag_bit
from crossing.photometry.lightcurve import LevelGroup, LightCurve, level_groups
from crossing.photometry.merge import merge_lightcurves
from crossing.photometry.rawtable import RawTable
from crossing.photometry.rows import Rows, clean_rows, refuse_twins
from crossing.photometry.times import SCALES, UNSPECIFIED
from crossing.photometry.writer import FORMAT_VERSION

if TYPE_CHECKING:
    from crossing.event import Event

__all__ = ["read_lightcurve", "read_photometry"]


def read_lightcurve(
    path: str | os.PathLike[str],
    *,
    kind: str = "flux",
    columns: Mapping[str, str] | None = None,
    reference_epochs: Sequence[float] = (),
    reference_err: float | None = None,
    limit_sigma: float | None = None,
    band: str | None = None,
) -> LightCurve:
    """Read the light curve in one ECSV, FITS or CSV file.

    Parameters
    ----------
    path : str or os.PathLike
        Table with one row an observation and the columns time (MJD or an astropy Time), band, flux and flux_err, or mag
        and mag_err (AB). Optional: is_upper_limit (the value is a limit then), limit_sigma, and excluded (the row is
        kept and not used). Other columns are left alone.
    kind : {"flux", "difference", "magnitude"}, optional
        What the values are. A file that the package wrote knows that itself.
    columns : mapping of str to str, optional
        Names in the file for columns that are called otherwise, each with an optional unit: ``{"flux": "f [uJy]"}``.
    reference_epochs : sequence of float, optional
        MJDs [d] of the image that differences are taken from; without them its level is free.
    reference_err : float, optional
        Noise of that image [nJy], shared by all rows.
    limit_sigma : float, optional
        Significance of the upper limits, for files without that column.
    band : str, optional
        Band of all rows, for files without that column.

    Returns
    -------
    LightCurve
        All rows of the file, sorted by time.

    Raises
    ------
    InputError
        If anything in the file cannot be used; the message names the file and the data row (counted from 1) or column.
    """
    said = {
        "kind": kind,
        "columns": {} if columns is None else columns,
        "reference_epochs": tuple(reference_epochs),
        "reference_err": reference_err,
        "limit_sigma": limit_sigma,
        "band": band,
    }
    return _read(Path(path), said, None)


def read_photometry(event: Event) -> LightCurve:
    """Read and merge all light curves that an event names.

    Parameters
    ----------
    event : Event
        Its ``photometry`` tables say which files, its ``bands`` which bands may occur.

    Returns
    -------
    LightCurve

    Raises
    ------
    InputError
        As `read_lightcurve` and `merge_lightcurves`, and for a band that the event does not know.
    """
    if not event.photometry:
        raise InputError("must name at least one light curve: add a [photometry] table", source=event.path)
    curves = []
    for record in event.photometry:
        said = {
            "kind": record.kind,
            "columns": record.columns,
            "reference_epochs": tuple(record.reference_epochs),
            "reference_err": record.reference_err,
            "limit_sigma": record.limit_sigma,
        }
        curves.append(_read(Path(record.path), said, tuple(event.bands)))
    return merge_lightcurves(curves)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Options:
    """What is said about a file beside the file; checked on creation."""

    kind: str
    columns: Mapping[str, str]
    reference_epochs: tuple[float, ...]
    reference_err: float | None
    limit_sigma: float | None
    band: str | None = None

    def __post_init__(self) -> None:
        if self.kind not in VALUE_COLUMNS:
            raise InputError(f"kind must be one of {', '.join(VALUE_COLUMNS)}, got {self.kind!r}")
        for name in ("reference_err", "limit_sigma"):
            value = getattr(self, name)
            if value is not None and not (math.isfinite(value) and value > 0):
                raise InputError(f"{name} must be positive and finite, got {value:g}")
        for epoch in self.reference_epochs:
            if not math.isfinite(epoch) or abs(epoch) > 200_000:
                raise InputError(f"reference_epochs must be MJDs, got {epoch:.10g}")
        if self.kind != "difference" and (self.reference_epochs or self.reference_err is not None):
            raise InputError(f'reference_epochs and reference_err need kind = "difference", got kind = "{self.kind}"')
        if self.reference_err is not None and not self.reference_epochs:
            raise InputError("reference_err must go with reference_epochs; give both, or neither for a free level")
        if self.band is not None and not (self.band.strip() and self.band.isprintable()):
            raise InputError(f"band must be a printable name, got {self.band!r}")

    @property
    def all_default(self) -> bool:
        """Whether nothing but the kind is said."""
        said = (self.columns, self.reference_epochs, self.reference_err, self.limit_sigma, self.band)
        return not any(said)


def _read(path: Path, said: Mapping[str, Any], known_bands: Collection[str] | None) -> LightCurve:
    try:
        options = _Options(**said)
        table, digest = load_table(path)
        read = _from_user if table.meta is None else _from_own
        return read(table, options, (str(path), digest), known_bands)
    except InputError as error:
        raise error.located(source=path) from None


def _from_user(
    table: RawTable, options: _Options, source: tuple[str, str], known_bands: Collection[str] | None
) -> LightCurve:
    columns = pick_columns(table, options.kind, options.columns, options.band)
    band = None if options.band is None else options.band.strip()
    rows = clean_rows(columns, options.kind, band=band, limit_sigma=options.limit_sigma)
    _check_bands(rows, known_bands)
    refuse_twins(rows, ~rows.excluded)
    level, levels = level_groups(
        rows.band, options.kind, options.reference_epochs, options.reference_err, source=source[0]
    )
    flags = np.where(rows.excluded, flag_bit("excluded"), 0)
    if options.kind == "magnitude":
        flags |= flag_bit("from_magnitude")
    n = table.n_rows
    extra = {"flags": flags, "level": level, "source": np.zeros(n, dtype=np.int64), "row": np.arange(1, n + 1)}
    return _sorted_curve(rows, extra, levels, rows.time_scale, (source,))


def _from_own(
    table: RawTable, options: _Options, source: tuple[str, str], known_bands: Collection[str] | None
) -> LightCurve:
    """Light curve out of a file that `LightCurve.write` made, perhaps edited by hand since."""
    if not options.all_default:
        raise InputError("was written by crossing and says all about itself; give nothing but its name (and its kind)")
    levels, sources, scale = _stored(table.meta or {})
    differences = [group.kind != "absolute" for group in levels]
    if options.kind != "flux" and not all(flag == (options.kind == "difference") for flag in differences):
        raise InputError(f'says itself what its fluxes are, and that is not kind = "{options.kind}"; leave kind out')
    rows = clean_rows(pick_columns(table, "flux", {}, None), "flux", limits_have_errors=True)
    _check_bands(rows, known_bands)
    by_name = {column.name: column for column in table.columns}
    absent = [name for name in ("flags", "level", "source", "row") if name not in by_name]
    if absent:
        raise InputError("was written by crossing and has lost this column", where=f"column {absent[0]}")
    extra = {name: integers(by_name[name]) for name in ("flags", "level", "source", "row")}
    known = np.array([group.band for group in levels], dtype=np.str_)
    level = extra["level"]
    refuse_rows((level < 0) | (level >= known.size), lambda i: f"level must be below {known.size}, got {level[i]}")
    refuse_rows(known[level] != rows.band, lambda i: f"band must be that of its level, {known[level[i]]}")
    refuse_rows(
        (extra["source"] < -1) | (extra["source"] >= len(sources)),
        lambda i: f"source must be below {len(sources)}, got {extra['source'][i]}",
    )
    # The column `excluded` is the one that people edit, so it has the last word.
    extra["flags"] = (extra["flags"] & ~flag_bit("excluded")) | np.where(rows.excluded, flag_bit("excluded"), 0)
    refuse_twins(rows, (extra["flags"] & UNUSED) == 0)
    return _sorted_curve(rows, extra, levels, scale, (*sources, source))


def _stored(meta: Mapping[str, Any]) -> tuple[tuple[LevelGroup, ...], tuple[tuple[str, str], ...], str]:
    """Levels, sources and time scale out of what was stored beside the columns."""
    try:
        version, scale = meta["version"], meta["time_scale"]
        levels = tuple(
            LevelGroup(
                band=str(item["band"]),
                kind=item["kind"],
                reference_epochs=tuple(float(epoch) for epoch in item["reference_epochs"]),
                reference_err=None if item["reference_err"] is None else float(item["reference_err"]),
                source=None if item["source"] is None else str(item["source"]),
            )
            for item in meta["levels"]
        )
        sources = tuple((str(item["path"]), str(item["sha256"])) for item in meta["sources"])
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise InputError(f"was written by crossing, and its notes are damaged: {error}", where="header") from None
    kinds = {group.kind for group in levels}
    if version != FORMAT_VERSION or scale not in {UNSPECIFIED, *SCALES} or kinds - {"free", "reference", "absolute"}:
        raise InputError(f"was written by another version of crossing (format {version})", where="header")
    return levels, sources, scale


def _check_bands(rows: Rows, known: Collection[str] | None) -> None:
    if known is None:
        return

    def problem(index: int) -> str:
        name = str(rows.band[index])
        near = difflib.get_close_matches(name, known, n=1, cutoff=0.6)
        hint = f"; the nearest one is {near[0]}" if near else f"; the event has {', '.join(known) or 'none'}"
        return f"band must be one of the event's [bands], got {name!r}{hint}"

    refuse_rows(~np.isin(rows.band, list(known)), problem)


def _sorted_curve(
    rows: Rows,
    extra: Mapping[str, NDArray[np.int64]],
    levels: tuple[LevelGroup, ...],
    scale: str,
    sources: tuple[tuple[str, str], ...],
) -> LightCurve:
    order = np.argsort(rows.time, kind="stable")
    return LightCurve(
        time=rows.time[order],
        band=rows.band[order],
        flux=rows.flux[order],
        flux_err=rows.flux_err[order],
        is_upper_limit=rows.is_upper_limit[order],
        **{name: array[order] for name, array in extra.items()},
        levels=levels,
        time_scale=scale,
        sources=sources,
    )
