"""``[[schedules]]``: when the arc is visited, and how deep."""

from __future__ import annotations

from itertools import pairwise
from typing import Final

import numpy as np

from crossing.errors import InputError
from crossing.event.campaign_parsers import different, label, moment, per_band, whole
from crossing.event.campaign_records import Campaign, ScheduleRecord
from crossing.event.parsers import FRACTION, POSITIVE, Bounds, array, number, pair
from crossing.event.quantities import DIMENSIONLESS, DURATION, EXPOSURE, FLUX
from crossing.event.records import DEFAULT_SIGMA
from crossing.event.tables import Table
from crossing.event.values import FloatArray

__all__ = ["read_schedules", "visit_noise", "visit_times"]

_REGULAR: Final = ("start", "cadence", "number")
_MOST_VISITS: Final = 100_000
_CADENCES: Final = Bounds(low=1e-5, high=1e5)  # a second to centuries [days]
# Visits that fall on the end of a gap up to the rounding of start + k cadence count as after it.
_ROUNDING: Final = 1e-9


def read_schedules(root: Table) -> tuple[ScheduleRecord, ...]:
    """All schedules of the file; a plain ``[schedules]`` is a list of one.

    Raises
    ------
    InputError
        If anything in them is unknown, missing, of the wrong type or unit, or impossible.
    """
    tables = root.tables("schedules")
    schedules = tuple(_read_schedule(table, f"schedule {index + 1}") for index, table in enumerate(tables))
    different(tables, [schedule.name for schedule in schedules])
    return schedules


def _read_schedule(table: Table, default_name: str) -> ScheduleRecord:
    table.only("name", *_REGULAR, "gaps", "epochs", "depth", "depth_sigma", "loss", "exposure")
    given = [key for key in (*_REGULAR, "gaps") if key in table]
    missing = [key for key in _REGULAR if key not in table]
    if "epochs" in table and given:
        raise table.error(f"must not stand beside epochs, which say it all; remove {given[0]} or epochs", given[0])
    if "epochs" not in table and missing:
        way = "start, cadence and number, or epochs = [...] alone"
        raise table.error(f"must be given when epochs are not; write {way}", missing[0])
    if "depth_sigma" in table and "depth" not in table:
        raise table.error("must go with depth; add the depth or remove depth_sigma", "depth_sigma")
    return ScheduleRecord(
        name=table.get("name", label) or default_name,
        start=table.get("start", moment),
        cadence=table.get("cadence", number(DURATION, _CADENCES)),
        number=table.get("number", whole(1, _MOST_VISITS)),
        gaps=tuple(sorted(table.get("gaps", array(_gap, "of gaps, [[from, to], ...]")) or ())),
        epochs=table.get("epochs", _epochs) or (),
        depth=per_band(table, "depth", number(FLUX, POSITIVE)),
        depth_sigma=table.get("depth_sigma", number(DIMENSIONLESS, POSITIVE)) or DEFAULT_SIGMA,
        loss=table.get("loss", number(DIMENSIONLESS, FRACTION)) or 0.0,
        exposure=table.get("exposure", number(EXPOSURE, POSITIVE)),
    )


def _gap(raw: object) -> tuple[float, float]:
    first, last = pair(moment, moment, 'the first and last MJD or date, such as ["2027-02-01", "2027-05-15"]')(raw)
    if first >= last:
        raise InputError(f"must run forward in time, got MJD {first:g} and {last:g}; swap or widen them")
    return first, last


def _epochs(raw: object) -> tuple[float, ...]:
    visits = sorted(array(moment, "of at least one MJD or date")(raw))
    if len(visits) > _MOST_VISITS:
        raise InputError(f"must hold at most {_MOST_VISITS} visits, got {len(visits)}; split the schedule")
    for earlier, later in pairwise(visits):
        if earlier == later:
            raise InputError(f"must hold each visit once, got MJD {later:g} twice; remove one")
    return tuple(visits)


def visit_times(schedule: ScheduleRecord) -> FloatArray:
    """Times of all visits of a schedule, none of them lost yet.

    Parameters
    ----------
    schedule : ScheduleRecord
        A regular cadence or explicit epochs. Regular visits that fall into a gap, its beginning included, are left out
        and do not count towards their number: the cadence goes on behind the gap.

    Returns
    -------
    ndarray
        MJDs [days], shape (n_visits,), increasing.
    """
    if schedule.start is None or schedule.cadence is None or schedule.number is None:
        return np.array(schedule.epochs, dtype=np.float64)
    runs: list[FloatArray] = []
    index, left = 0, schedule.number
    for first, last in (*schedule.gaps, (np.inf, np.inf)):
        # All visits before this gap, then on to the first one behind it.
        before = left if np.isinf(first) else min(left, max(0, _steps(schedule, first) - index))
        runs.append(schedule.start + schedule.cadence * np.arange(index, index + before, dtype=np.float64))
        left -= before
        if left == 0:
            break
        index = max(index + before, _steps(schedule, last))
    return np.concatenate(runs)


def _steps(schedule: ScheduleRecord, mjd: float) -> int:
    """Number of cadences from the start to the first visit that is not before `mjd`; negative if that came earlier."""
    start, cadence = schedule.start or 0.0, schedule.cadence or 1.0
    return int(np.ceil((mjd - start) / cadence - _ROUNDING))


def visit_noise(campaign: Campaign, schedule: ScheduleRecord) -> dict[str, float]:
    """Noise of one visit in each band that it observes.

    Parameters
    ----------
    campaign : Campaign
        Its bands' own depths serve where the schedule has none.
    schedule : ScheduleRecord
        One of its schedules.

    Returns
    -------
    dict
        Standard deviation of the flux [nJy] by band: depth over its significance.
    """
    if schedule.depth:
        return {name: depth / schedule.depth_sigma for name, depth in schedule.depth.items()}
    bands = campaign.bands.values()
    return {band.name: band.depth / band.depth_sigma for band in bands if band.depth is not None}
