"""Several light curves of one event put together."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from crossing.errors import InputError
from crossing.photometry.flags import flag_bit
from crossing.photometry.lightcurve import LevelGroup, LightCurve
from crossing.photometry.rows import earlier_twin
from crossing.photometry.times import UNSPECIFIED, to_tdb

__all__ = ["merge_lightcurves"]


def merge_lightcurves(curves: Sequence[LightCurve]) -> LightCurve:
    """One light curve out of several.

    Parameters
    ----------
    curves : sequence of LightCurve
        At least one.

    Returns
    -------
    LightCurve
        All rows, sorted by time. Absolute levels of one band become one; the others stay apart. A row that an earlier
        curve has as well (level, time and flux) is kept with the flag ``duplicate``.

    Raises
    ------
    InputError
        If a file of differences comes twice, or time scales differ and cannot be converted to TDB.
    """
    if not curves:
        raise InputError("curves must hold at least one light curve, got none")
    if len(curves) == 1:
        return curves[0]
    times, scale = _common_times(curves)
    levels: list[LevelGroup] = []
    sources: list[tuple[str, str]] = []
    level, source = [], []
    for curve in curves:
        new_levels = [_add_level(levels, group) for group in curve.levels]
        new_sources = [_add(sources, item) for item in curve.sources]
        level.append(np.array(new_levels, dtype=np.int64)[curve.level])
        source.append(np.array([*new_sources, -1], dtype=np.int64)[curve.source])
    joined = {name: np.concatenate([getattr(curve, name) for curve in curves]) for name in
              ("band", "flux", "flux_err", "is_upper_limit", "flags", "row")}  # fmt: skip
    joined |= {"time": times, "level": np.concatenate(level), "source": np.concatenate(source)}
    joined["flags"] = _flag_twins(joined, np.concatenate([curve.used for curve in curves]))
    order = np.argsort(times, kind="stable")
    return LightCurve(
        **{name: array[order] for name, array in joined.items()},
        levels=tuple(levels),
        sources=tuple(sources),
        time_scale=scale,
    )


def _common_times(curves: Sequence[LightCurve]) -> tuple[np.ndarray, str]:
    scales = {curve.time_scale for curve in curves}
    if len(scales) == 1:
        return np.concatenate([curve.time for curve in curves]), scales.pop()
    if UNSPECIFIED in scales:
        bare = next(curve for curve in curves if curve.time_scale == UNSPECIFIED)
        others = ", ".join(sorted(scales - {UNSPECIFIED}))
        raise InputError(
            f'must say its time scale, because another file does ({others}); write "time [MJD UTC]" or the like',
            source=_file_of(bare),
        )
    parts = []
    for curve in curves:
        try:
            parts.append(to_tdb(curve.time, curve.time_scale))
        except InputError as error:
            raise error.located(source=_file_of(curve)) from None
    return np.concatenate(parts), "tdb"


def _file_of(curve: LightCurve) -> str | None:
    return curve.sources[-1][0] if curve.sources else None


def _add(items: list[tuple[str, str]], item: tuple[str, str]) -> int:
    if item not in items:
        items.append(item)
    return items.index(item)


def _add_level(levels: list[LevelGroup], group: LevelGroup) -> int:
    """Index of a level among those so far; only absolute ones are shared between curves."""
    if group.kind == "absolute" and group in levels:
        return levels.index(group)
    if group.source is not None and any((old.source, old.band) == (group.source, group.band) for old in levels):
        raise InputError(f"its differences in band {group.band} are read twice; name it once", source=group.source)
    levels.append(group)
    return len(levels) - 1


def _flag_twins(rows: dict[str, np.ndarray], usable: np.ndarray) -> np.ndarray:
    columns = (rows["time"], rows["level"], rows["flux"], rows["is_upper_limit"])
    twins = earlier_twin(zip(*(column.tolist() for column in columns), strict=True), usable)
    return np.where(twins >= 0, rows["flags"] | flag_bit("duplicate"), rows["flags"])
