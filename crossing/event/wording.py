"""Words of the error messages: what was found in the file, and which key was probably meant."""

from __future__ import annotations

import datetime
import difflib
import re
from collections.abc import Iterable

from crossing.errors import InputError

__all__ = ["check_keys", "describe", "listed", "nearest", "quoted_key"]

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]{1,64}")
_LONGEST = 60


def describe(raw: object) -> str:
    """Short printable description of a value out of a TOML file, for "got ..."."""
    if isinstance(raw, bool):
        return "true" if raw else "false"
    if isinstance(raw, int):
        # Python refuses to print integers of thousands of digits, which hexadecimal TOML integers can have.
        return str(raw) if abs(raw) < 10**30 else "an integer of more than 30 digits"
    if isinstance(raw, float):
        return repr(raw)
    if isinstance(raw, str):
        return repr(raw if len(raw) <= _LONGEST else raw[:_LONGEST] + "...")
    if isinstance(raw, list):
        return f"an array of {len(raw)}"
    if isinstance(raw, dict):
        return "a table"
    if isinstance(raw, datetime.date | datetime.time):
        return f"the date or time {raw.isoformat()}"
    return f"a {type(raw).__name__}"


def quoted_key(key: str) -> str:
    """Key as it stands in a dotted path: bare where TOML allows that, else quoted and free of control characters."""
    return key if _BARE_KEY.fullmatch(key) else describe(key)


def listed(words: Iterable[str], last: str = "or") -> str:
    """``a, b or c``."""
    words = list(words)
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} {last} {words[-1]}"


def nearest(word: str, known: Iterable[str]) -> str:
    """Word of `known` that looks most like `word`, whatever the case of its letters."""
    by_lower = {item.lower(): item for item in known}
    return by_lower[difflib.get_close_matches(word.lower()[:64], by_lower, n=1, cutoff=0.0)[0]]


def check_keys(found: Iterable[str], known: Iterable[str]) -> None:
    """Refuse keys that nobody would read.

    Raises
    ------
    InputError
        For the first key of `found` that is not in `known`; its `where` is that key.
    """
    known = tuple(known)
    for key in found:
        if key not in known:
            closest = nearest(key, known)
            alike = difflib.SequenceMatcher(a=key.lower()[:64], b=closest.lower()).ratio() >= 0.6
            others = "" if alike or len(known) == 1 else f"; the keys known here are {listed(known, 'and')}"
            raise InputError(f"is not a known key; the nearest known one is {closest}{others}", where=quoted_key(key))
