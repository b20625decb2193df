"""Parsers of what only campaign files hold: names of parts, whole numbers, dates, and one value for each band."""

from __future__ import annotations

import datetime
import re
from collections.abc import Iterable
from typing import Final, TypeVar

from crossing.errors import InputError
from crossing.event.parsers import Parser, is_name, mjd, text
from crossing.event.tables import Table
from crossing.event.wording import describe, nearest

__all__ = ["different", "known", "label", "moment", "per_band", "whole"]

T = TypeVar("T")

_MJD_ZERO: Final = datetime.datetime(1858, 11, 17)
_DATE: Final = re.compile(r"\d{4}-\d\d-\d\d(?:[T ].+)?")


def label(raw: object) -> str:
    """Short printable name without space at its ends.

    Raises
    ------
    InputError
        If `raw` is anything else.
    """
    name = text(raw)
    if not is_name(name):
        raise InputError(f"must be at most 64 characters without space at its ends, got {describe(name)}")
    return name


def whole(low: int, high: int) -> Parser[int]:
    """Return a parser of a whole number from `low` to `high`."""

    def parse(raw: object) -> int:
        if not isinstance(raw, int) or isinstance(raw, bool) or not low <= raw <= high:
            raise InputError(f"must be a whole number from {low} to {high}, got {describe(raw)}")
        return raw

    return parse


def moment(raw: object) -> float:
    """MJD [days] from a number, a TOML date, or a string with one; dates are UTC where they do not say otherwise.

    Raises
    ------
    InputError
        If `raw` is neither, or lies before 1858 or far in the future.
    """
    found = _from_iso(raw) if isinstance(raw, str) else raw
    if isinstance(found, datetime.datetime):
        if found.tzinfo is not None:
            found = found.astimezone(datetime.UTC).replace(tzinfo=None)
        return mjd((found - _MJD_ZERO) / datetime.timedelta(days=1))
    if isinstance(found, datetime.date):
        return mjd((found - _MJD_ZERO.date()).days)
    if isinstance(found, int | float) and not isinstance(found, bool):
        return mjd(found)
    raise InputError(f'must be an MJD such as 61000.0, or a date such as "2027-01-15", got {describe(raw)}')


def _from_iso(raw: str) -> datetime.datetime | None:
    try:
        return datetime.datetime.fromisoformat(raw) if _DATE.fullmatch(raw) else None
    except ValueError:  # the 30th of February
        return None


def per_band(table: Table, key: str, read: Parser[T]) -> dict[str, T]:
    """Values by band under `key`; empty if it is not there.

    Raises
    ------
    InputError
        If `key` holds no table of at least one band, or what `read` complains about.
    """
    if key not in table:
        return {}
    raw = table.get(key, lambda raw: raw)
    inner = table.table(key) if isinstance(raw, dict) and raw else None
    if inner is None:
        raise table.error(f"must be a table with a value for each band, {{BAND = ...}}, got {describe(raw)}", key)
    return {band: inner.need(band, read) for band in inner}


def known(table: Table, key: str, what: str, names: Iterable[str]) -> str | None:
    """Name under `key`, one of `names`, or None if it is not there.

    Raises
    ------
    InputError
        If it is another name, with the nearest one.
    """
    names = tuple(names)
    name = table.get(key, text)
    if name is None or name in names:
        return name
    remedy = f"the nearest is {describe(nearest(name, names))}" if names else "there are none"
    raise table.error(f"must name {what} of this file, got {describe(name)}; {remedy}", key)


def different(tables: Iterable[Table], names: Iterable[str]) -> None:
    """Refuse two tables of the same name.

    Raises
    ------
    InputError
        For the second of them.
    """
    seen: set[str] = set()
    for table, name in zip(tables, names, strict=True):
        if name in seen:
            raise table.error(f"must differ from the other names, got {describe(name)} twice; rename one", "name")
        seen.add(name)
