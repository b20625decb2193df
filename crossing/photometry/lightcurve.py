"""Observations of one event: times, bands, fluxes, limits, and what the fluxes are measured from."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any, Final, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.photometry.flags import FLAGS, UNUSED
from crossing.photometry.times import SCALES, UNSPECIFIED
from crossing.photometry.writer import build_table, write_table

if TYPE_CHECKING:
    from astropy.table import QTable

__all__ = ["LevelGroup", "LightCurve", "level_groups"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
_ARRAYS: Final = ("time", "band", "flux", "flux_err", "is_upper_limit", "flags", "level", "source", "row")


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelGroup:
    """Rows whose fluxes are measured from one common level.

    Notes
    -----
    absolute
        Total fluxes; one group a band, whatever the number of files.
    reference
        Differences from an image taken at `reference_epochs`: the level is the event's own mean flux then, and the
        noise of that image is shared by all rows. One group for each file and band.
    free
        Differences from an image about which nothing is known. One group for each file and band.
    """

    band: str
    """Name of the band."""
    kind: Literal["free", "reference", "absolute"]
    """What the level is."""
    reference_epochs: tuple[float, ...] = ()
    """MJDs [d] of the reference image; only for kind ``reference``."""
    reference_err: float | None = None
    """Noise of the reference image [nJy], if it is known."""
    source: str | None = None
    """File of the rows; None for absolute levels, which files share."""

    def __post_init__(self) -> None:
        if not self.band or self.band != self.band.strip() or not self.band.isprintable():
            raise ValueError(f"band must be a printable name without blanks around it, got {self.band!r}")


def _absent() -> IntArray:
    return np.empty(0, dtype=np.int64)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LightCurve:
    """Light curve with one row an observation, sorted by time; arrays are read-only.

    Raises
    ------
    ValueError
        If the arrays differ in length, times are unsorted or not finite or in an unknown scale, or a level is not in
        `levels` or has another band than its row.
    """

    time: FloatArray
    """(n,) MJD [d] in `time_scale`."""
    band: NDArray[np.str_]
    """(n,) names of the bands."""
    flux: FloatArray
    """(n,) flux densities [nJy]; for an upper limit the limit itself. NaN only in excluded rows."""
    flux_err: FloatArray
    """(n,) standard errors [nJy]; for an upper limit the limit divided by its significance."""
    is_upper_limit: NDArray[np.bool_]
    """(n,) whether the row is an upper limit."""
    flags: IntArray
    """(n,) bitmask; see `crossing.photometry.FLAGS`."""
    level: IntArray
    """(n,) index into `levels`."""
    levels: tuple[LevelGroup, ...]
    """What the fluxes are measured from."""
    time_scale: str = "unspecified"
    """Scale of the times as the files state it (``utc``, ``tdb``, ...), or ``unspecified`` for bare MJDs."""
    sources: tuple[tuple[str, str], ...] = ()
    """(path, SHA-256) of every file that was read."""
    source: IntArray = field(default_factory=_absent)
    """(n,) index into `sources`, -1 for rows from no file (the default)."""
    row: IntArray = field(default_factory=_absent)
    """(n,) number of the data row in its file, from 1; 0 for rows from no file (the default)."""

    def __post_init__(self) -> None:
        n = np.size(self.time)
        if n:
            for name, default in (("source", -1), ("row", 0)):
                if not np.size(getattr(self, name)):
                    object.__setattr__(self, name, np.full(n, default))
        kinds = (np.float64, np.str_, np.float64, np.float64, np.bool_, *[np.int64] * 4)
        for name, kind in zip(_ARRAYS, kinds, strict=True):
            array: NDArray[Any] = np.array(getattr(self, name), dtype=kind)
            if array.shape != (n,):
                raise ValueError(f"{name} must have the shape ({n},) of time, got {array.shape}")
            array.flags.writeable = False
            object.__setattr__(self, name, array)
        if not np.all(np.isfinite(self.time)) or np.any(np.diff(self.time) < 0):
            raise ValueError("time must be finite and sorted; sort the rows, or use LightCurve.from_arrays")
        if self.time_scale not in {UNSPECIFIED, *SCALES}:
            raise ValueError(f"time_scale must be {UNSPECIFIED} or one of {', '.join(SCALES)}, got {self.time_scale!r}")
        if n and not (self.level.min() >= 0 and self.level.max() < len(self.levels)):
            raise ValueError(f"level must be an index into the {len(self.levels)} levels")
        if n and np.any(np.array([group.band for group in self.levels])[self.level] != self.band):
            raise ValueError("band must be that of the row's level")

    @classmethod
    def from_arrays(
        cls,
        time: ArrayLike,
        band: ArrayLike,
        flux: ArrayLike,
        flux_err: ArrayLike,
        *,
        is_upper_limit: ArrayLike = False,
        kind: str = "flux",
        reference_epochs: Sequence[float] = (),
        reference_err: float | None = None,
        time_scale: str = "unspecified",
    ) -> LightCurve:
        """Light curve from arrays in any order of time, with the levels that follow from `kind`.

        Parameters
        ----------
        time : array_like, shape (n,)
            MJD [d].
        band : array_like of str, shape (n,) or ()
            Names of the bands.
        flux, flux_err : array_like, shape (n,)
            Flux densities and their errors [nJy]; for an upper limit, the limit and the limit over its significance.
        is_upper_limit : array_like of bool, shape (n,) or (), optional
            Which rows are upper limits.
        kind : {"flux", "difference"}, optional
            Whether fluxes are total ones or differences.
        reference_epochs : sequence of float, optional
            MJDs [d] of the reference image of differences.
        reference_err : float, optional
            Noise of the reference image [nJy].
        time_scale : str, optional
            Scale of `time`.

        Returns
        -------
        LightCurve
        """
        if kind not in {"flux", "difference"}:
            raise ValueError(f"kind must be flux or difference, got {kind!r}; convert magnitudes first")
        times = np.asarray(time, dtype=np.float64)
        bands = np.broadcast_to(np.asarray(band, dtype=np.str_), times.shape)
        level, levels = level_groups(bands, kind, reference_epochs, reference_err)
        order = np.argsort(times, kind="stable")
        return cls(
            time=times[order],
            band=bands[order],
            flux=np.asarray(flux, dtype=np.float64)[order],
            flux_err=np.asarray(flux_err, dtype=np.float64)[order],
            is_upper_limit=np.broadcast_to(np.asarray(is_upper_limit, dtype=np.bool_), times.shape)[order],
            flags=np.zeros(times.shape, dtype=np.int64),
            level=level[order],
            levels=levels,
            time_scale=time_scale,
        )

    def __len__(self) -> int:
        return int(self.time.size)

    def __repr__(self) -> str:
        counts = ", ".join(f"{number} {what.replace('_', ' ')}" for what, number in self.counts().items() if number)
        return f"<LightCurve {'/'.join(self.bands)}: {counts or '0 rows'}>"

    @property
    def used(self) -> NDArray[np.bool_]:
        """(n,) whether a row takes part in fits: neither excluded nor a duplicate."""
        return np.asarray((self.flags & UNUSED) == 0, dtype=np.bool_)

    @property
    def bands(self) -> tuple[str, ...]:
        """Names of the bands, by first observation."""
        return tuple(dict.fromkeys(self.band.tolist()))

    def counts(self) -> dict[str, int]:
        """Number of rows, of rows used, of upper limits among those, and of rows with each flag."""
        flagged = {flag.name: int(np.count_nonzero(self.flags & flag.bit)) for flag in FLAGS}
        limits = int(np.count_nonzero(self.is_upper_limit & self.used))
        return {"rows": len(self), "used": int(np.count_nonzero(self.used)), "upper_limits": limits, **flagged}

    def select(self, mask: ArrayLike) -> LightCurve:
        """Rows where `mask` (n,) is true; the levels stay, so that their indices keep their meaning."""
        rows = np.asarray(mask)
        if rows.dtype != np.bool_ or rows.shape != self.time.shape:
            raise ValueError(f"mask must be boolean with shape {self.time.shape}, got {rows.dtype} {rows.shape}")
        return replace(self, **{name: getattr(self, name)[rows] for name in _ARRAYS})

    def to_table(self) -> QTable:
        """Table with units, an astropy Time column if the scale is known, and everything else in its ``meta``."""
        return build_table(self)

    def to_dict(self) -> dict[str, object]:
        """Plain lists and numbers, ready for JSON; NaN becomes None."""
        columns = {
            name: [None if value != value else value for value in getattr(self, name).tolist()] for name in _ARRAYS
        }
        levels = [
            {name: getattr(group, name) for name in LevelGroup.__dataclass_fields__}
            | {"reference_epochs": list(group.reference_epochs)}
            for group in self.levels
        ]
        sources = [{"path": path, "sha256": digest} for path, digest in self.sources]
        return {**columns, "levels": levels, "time_scale": self.time_scale, "sources": sources}

    def write(self, path: str | os.PathLike[str], *, overwrite: bool = False) -> None:
        """Write to ECSV, FITS or CSV, by the suffix of `path`; see `crossing.photometry.writer.write_table`."""
        write_table(self, path, overwrite=overwrite)

    def _repr_html_(self) -> str:
        return str(self.to_table()._repr_html_())


def level_groups(
    band: NDArray[np.str_],
    kind: str,
    reference_epochs: Sequence[float] = (),
    reference_err: float | None = None,
    source: str | None = None,
) -> tuple[IntArray, tuple[LevelGroup, ...]]:
    """Levels of the rows of one file.

    Parameters
    ----------
    band : ndarray of str, shape (n,)
        Names of the bands.
    kind : {"flux", "magnitude", "difference"}
        What the numbers of the file are.
    reference_epochs, reference_err, source
        As in `LevelGroup`; only differences have them.

    Returns
    -------
    level : ndarray of int, shape (n,)
        Index of each row's level.
    levels : tuple of LevelGroup
        One a band, sorted by name.
    """
    names, level = np.unique(band, return_inverse=True)
    if kind != "difference":
        return level.astype(np.int64), tuple(LevelGroup(band=str(name), kind="absolute") for name in names)
    epochs = tuple(float(epoch) for epoch in reference_epochs)
    groups = tuple(
        LevelGroup(
            band=str(name),
            kind="reference" if epochs else "free",
            reference_epochs=epochs,
            reference_err=reference_err,
            source=source,
        )
        for name in names
    )
    return level.astype(np.int64), groups
