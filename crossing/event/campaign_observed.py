"""``[observed]``: how many events a season brought, and where, how bright and when, if that is known."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Final

from crossing.errors import InputError
from crossing.event.campaign_parsers import known, moment, whole
from crossing.event.campaign_records import ObservedEventRecord, ObservedRecord, ScheduleRecord, SegmentRecord
from crossing.event.parsers import POSITIVE, array, sky_position, text, uncertain
from crossing.event.quantities import FLUX
from crossing.event.records import Position
from crossing.event.tables import Table
from crossing.event.values import Value
from crossing.event.wording import describe, listed, nearest

__all__ = ["read_observed"]

_LISTS: Final = ("positions", "brightnesses")
_MOST: Final = 1_000_000


def read_observed(
    root: Table, segments: Sequence[SegmentRecord], schedules: Sequence[ScheduleRecord], bands: Sequence[str]
) -> ObservedRecord | None:
    """``[observed]``, or None.

    Parameters
    ----------
    root : Table
        The whole file.
    segments : sequence of SegmentRecord
        The segments; empty with a line.
    schedules : sequence of ScheduleRecord
        The schedules.
    bands : sequence of str
        Names of the bands; a brightness without a band belongs to the only one.

    Returns
    -------
    ObservedRecord or None
        What was found.

    Raises
    ------
    InputError
        If neither a count nor events are given, they disagree, or anything is unknown or impossible.
    """
    table = root.table("observed")
    if table is None:
        return None
    table.only("count", "events", *_LISTS, "band", "schedule")
    events = _read_events(table, [segment.name for segment in segments], bands)
    if any(event.position is not None for event in events):
        _check_places(root, table, segments)
    count = table.get("count", whole(0, _MOST))
    if count is None and not events:
        raise table.error("must be given; add the number of events (0 if there were none), or list them", "count")
    if events and count not in (None, len(events)):
        problem = f"must be the number of events that are listed ({len(events)}), got {count}; list all or none"
        raise table.error(problem, "count")
    schedule = known(table, "schedule", "a schedule", [schedule.name for schedule in schedules])
    return ObservedRecord(count=count or len(events), events=events, schedule=schedule)


def _read_events(table: Table, segments: Sequence[str], bands: Sequence[str]) -> tuple[ObservedEventRecord, ...]:
    lists = [key for key in _LISTS if key in table]
    band = table.get("band", text)
    if "events" not in table:
        return tuple(_with_band(event, table, band, bands) for event in _from_lists(table, lists, segments))
    if lists:
        raise table.error("must not stand beside events, which hold them; remove one of them", lists[0])
    return tuple(_with_band(_read_event(one, segments), one, band, bands) for one in table.tables("events"))


def _check_places(root: Table, observed: Table, segments: Sequence[SegmentRecord]) -> None:
    """Refuse events at positions on the sky where segments have none."""
    key = "events" if "events" in observed else "positions"
    for segment in segments:
        if any(model.position is None for model in segment.macro):
            problem = (
                f"must name segments, since {describe(segment.name)} has no position itself; add that or name them"
            )
            raise observed.error(problem, key)
    if not segments and "line" not in root:
        raise observed.error("must go with [[segments]] or [line]; add them, or give count alone", key)


def _read_event(table: Table, segments: Sequence[str]) -> ObservedEventRecord:
    table.only("segment", "position", "brightness", "band", "time")
    if "segment" in table and "position" in table:
        raise table.error("must not stand beside segment; remove one of them", "position")
    if "band" in table and "brightness" not in table:
        raise table.error("must go with brightness; add the brightness or remove band", "band")
    return ObservedEventRecord(
        segment=known(table, "segment", "a segment", segments),
        position=table.get("position", sky_position),
        brightness=table.get("brightness", uncertain(FLUX, POSITIVE)),
        band=table.get("band", text),
        time=table.get("time", moment),
    )


def _from_lists(table: Table, lists: Sequence[str], segments: Sequence[str]) -> tuple[ObservedEventRecord, ...]:
    """Events out of parallel arrays; where only one of them is given, the other is not known."""

    def where(raw: object) -> str | Position:
        if not isinstance(raw, str):
            return sky_position(raw)
        if raw not in segments:
            remedy = f"the nearest is {describe(nearest(raw, segments))}" if segments else "there are none"
            raise InputError(f"must name a segment of this file, or be [RA, Dec], got {describe(raw)}; {remedy}")
        return raw

    nothing = "; write count = 0 alone if there were none"
    positions = table.get("positions", array(where, f"of the segment or [RA, Dec] of each event{nothing}"))
    brightnesses = table.get("brightnesses", array(uncertain(FLUX, POSITIVE), f"of the flux of each event{nothing}"))
    lengths = [len(found) for found in (positions, brightnesses) if found is not None]
    if len(set(lengths)) > 1:
        raise table.error(f"must be as long as positions ({lengths[0]}), got {lengths[1]}; list all events", lists[1])
    events = max(lengths, default=0)
    return tuple(
        _plain_event(place, flux)
        for place, flux in zip(positions or [None] * events, brightnesses or [None] * events, strict=True)
    )


def _plain_event(place: str | Position | None, flux: Value | None) -> ObservedEventRecord:
    if isinstance(place, str):
        return ObservedEventRecord(segment=place, brightness=flux)
    return ObservedEventRecord(position=place, brightness=flux)


def _with_band(
    event: ObservedEventRecord, place: Table, default: str | None, bands: Sequence[str]
) -> ObservedEventRecord:
    """The event with the band of its brightness filled in."""
    if event.brightness is None or event.band is not None:
        return event
    band = default or (bands[0] if len(bands) == 1 else None)
    if band is None:
        got = f"got {listed(map(describe, bands), 'and')}" if bands else "got no bands"
        raise place.error(f"must be given with a brightness, unless the file has one band only, {got}; add it", "band")
    return replace(event, band=band)
