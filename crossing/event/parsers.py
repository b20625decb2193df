"""Parsers of single values: each takes what TOML delivered and returns a checked plain value.

A parser raises `InputError` with the problem alone; the table that called it adds file and key.
"""

from __future__ import annotations

import math
import unicodedata
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final, TypeVar

from astropy.units import UnitsError

from crossing.errors import InputError
from crossing.event.quantities import DIMENSIONLESS, EXTINCTION, Measure
from crossing.event.values import Value
from crossing.event.wording import check_keys, describe, listed, nearest

__all__ = [
    "ANY",
    "FRACTION",
    "NONZERO",
    "NOT_NEGATIVE",
    "POSITIVE",
    "Bounds",
    "Parser",
    "array",
    "choice",
    "epochs",
    "flag",
    "is_name",
    "mjd",
    "number",
    "pair",
    "sky_position",
    "text",
    "uncertain",
]

T = TypeVar("T")
Parser = Callable[[object], T]

_MJD_LAST = 1e6
_PER_MAGNITUDE = 0.4 * math.log(10)  # relative change of a flux, for small errors
_LONGEST_NAME = 64


@dataclass(frozen=True, slots=True, kw_only=True)
class Bounds:
    """What physics allows a number to be."""

    low: float = -math.inf
    high: float = math.inf
    open_low: bool = False
    """Whether `low` itself is forbidden."""
    nonzero: bool = False
    """Whether 0 is forbidden, and a distribution keeps to one side of it."""

    def check(self, x: float, raw: object, *, closed: bool = False) -> None:
        """Refuse `x`, written as `raw`, if it is outside; with `closed` the forbidden end itself is allowed.

        Raises
        ------
        InputError
            If `x` is outside.
        """
        too_low = x <= self.low if self.open_low and not closed else x < self.low
        if too_low or x > self.high or (self.nonzero and x == 0 and not closed):
            raise InputError(f"must be {self._words()}, got {describe(raw)}")

    def around(self, x: float) -> tuple[float, float]:
        """Limits of a distribution whose centre is `x`."""
        if self.nonzero:
            return (0.0, self.high) if x > 0 else (self.low, 0.0)
        return self.low, self.high

    def _words(self) -> str:
        if self.nonzero:
            return "different from 0"
        above = f"{'greater than' if self.open_low else 'at least'} {self.low:g}"
        return f"{above} and at most {self.high:g}" if math.isfinite(self.high) else above


ANY: Final = Bounds()
POSITIVE: Final = Bounds(low=0, open_low=True)
NOT_NEGATIVE: Final = Bounds(low=0)
FRACTION: Final = Bounds(low=0, high=1)
NONZERO: Final = Bounds(nonzero=True)


def number(measure: Measure = DIMENSIONLESS, bounds: Bounds = ANY) -> Parser[float]:
    """Return a parser of one number without uncertainty, in the unit of `measure`."""

    def parse(raw: object) -> float:
        x = measure.read(raw)
        bounds.check(x, raw)
        return x

    return parse


def uncertain(measure: Measure = DIMENSIONLESS, bounds: Bounds = ANY) -> Parser[Value]:
    """Return a parser of a bare value, {value, error} or {low, high, scale}, in the unit of `measure`.

    Where fluxes may be magnitudes, an error in magnitudes is a relative one, and a range of magnitudes, in either
    order, is flat in them.
    """

    def parse(raw: object) -> Value:
        if not isinstance(raw, dict):
            return Value.exact(number(measure, bounds)(raw))
        check_keys(raw, ("value", "error", "low", "high", "scale"))
        if "value" in raw or "error" in raw:
            return _normal(raw, measure, bounds)
        return _range(raw, measure, bounds)

    return parse


def _part(raw: dict[str, object], key: str, read: Parser[T]) -> T:
    if key not in raw:
        raise InputError(f"must hold {key}; write {{value, error}} or {{low, high, scale}}")
    try:
        return read(raw[key])
    except InputError as error:
        raise InputError(error.problem, where=key) from None


def _normal(raw: dict[str, object], measure: Measure, bounds: Bounds) -> Value:
    stray = [key for key in raw if key not in ("value", "error")]
    if stray:
        raise InputError(
            f"must not mix {stray[0]} with value and error; write {{value, error}} or {{low, high, scale}}"
        )
    value = _part(raw, "value", number(measure, bounds))
    if measure.is_magnitude(raw.get("error")):
        error = abs(value) * _PER_MAGNITUDE * _part(raw, "error", number(EXTINCTION, POSITIVE))
    else:
        error = _part(raw, "error", number(measure, POSITIVE))
    low, high = bounds.around(value)
    return Value.normal(value, error, lower=low, upper=high)


def _range(raw: dict[str, object], measure: Measure, bounds: Bounds) -> Value:
    def end(written: object) -> float:
        x = measure.read(written)
        bounds.check(x, written, closed=True)
        return x

    low = _part(raw, "low", end)
    high = _part(raw, "high", end)
    scale = _part(raw, "scale", choice("linear", "log")) if "scale" in raw else "linear"
    if measure.is_magnitude(raw["low"]) and measure.is_magnitude(raw["high"]):
        if scale == "log":
            raise InputError("scale must not go with magnitudes, which are logarithms already; remove it")
        low, high, scale = min(low, high), max(low, high), "log"
    value = Value.loguniform(low, high) if scale == "log" else Value.uniform(low, high)
    if bounds.nonzero and low < 0 < high:
        raise InputError(f"must stay on one side of 0, got {value}; cut the range there")
    return value


def text(raw: object) -> str:
    """Non-empty string without control characters.

    Raises
    ------
    InputError
        If `raw` is anything else.
    """
    if not isinstance(raw, str):
        raise InputError(f"must be a string in quotes, got {describe(raw)}")
    if not raw.strip() or _has_controls(raw):
        raise InputError(f"must be a non-empty string without control characters, got {describe(raw)}")
    return raw


def is_name(raw: str) -> bool:
    """Whether `raw` can name a band or an event: short, printable, no space at its ends."""
    return 0 < len(raw) <= _LONGEST_NAME and raw == raw.strip() and not _has_controls(raw)


def _has_controls(raw: str) -> bool:
    # Categories "C": control, format, surrogate and unassigned characters; "Zl", "Zp": separators of lines.
    return any(unicodedata.category(character)[0] == "C" or character in "\u2028\u2029" for character in raw)


def flag(raw: object) -> bool:
    """Return true or false as written.

    Raises
    ------
    InputError
        If `raw` is anything else.
    """
    if not isinstance(raw, bool):
        raise InputError(f"must be true or false, got {describe(raw)}")
    return raw


def choice(*options: str) -> Parser[str]:
    """Return a parser of one word out of `options`."""

    def parse(raw: object) -> str:
        if isinstance(raw, str) and raw in options:
            return raw
        hint = f"; the nearest is {nearest(raw, options)}" if isinstance(raw, str) and raw else ""
        quoted = listed(f'"{option}"' for option in options)
        raise InputError(f"must be {quoted}, got {describe(raw)}{hint}")

    return parse


def _items(raw: object, what: str, count: int | None = None) -> list[object]:
    if not isinstance(raw, list) or not raw or (count is not None and len(raw) != count):
        raise InputError(f"must be an array {what}, got {describe(raw)}")
    return raw


def _item(items: list[object], index: int, read: Parser[T]) -> T:
    try:
        return read(items[index])
    except InputError as error:
        inner = error.where or ""
        dot = "." if inner and not inner.startswith("[") else ""
        raise InputError(error.problem, where=f"[{index}]{dot}{inner}") from None


def pair(first: Parser[T], second: Parser[T], what: str) -> Parser[tuple[T, T]]:
    """Return a parser of an array of two, one parser for each; `what` describes the array."""

    def parse(raw: object) -> tuple[T, T]:
        items = _items(raw, f"of two, {what}", 2)
        return _item(items, 0, first), _item(items, 1, second)

    return parse


def array(read: Parser[T], what: str) -> Parser[tuple[T, ...]]:
    """Return a parser of a non-empty array of entries for `read`; `what` describes the array."""

    def parse(raw: object) -> tuple[T, ...]:
        items = _items(raw, what)
        return tuple(_item(items, index, read) for index in range(len(items)))

    return parse


def epochs(raw: object) -> tuple[float, ...]:
    """Non-empty array of MJDs [days].

    Raises
    ------
    InputError
        If `raw` is no array, or an entry is no plausible MJD.
    """
    return array(mjd, "of at least one MJD")(raw)


def mjd(raw: object) -> float:
    """MJD [days].

    Raises
    ------
    InputError
        If `raw` is no plausible MJD.
    """
    days = DIMENSIONLESS.read(raw)
    if not 0 <= days <= _MJD_LAST:
        hint = "; subtract 2400000.5 from a JD" if days > _MJD_LAST else ""
        raise InputError(f"must be an MJD between 0 and 1e6, got {describe(raw)}{hint}")
    return days


def sky_position(raw: object) -> tuple[float, float]:
    """Right ascension and declination [deg] from an array of two strings with units.

    Raises
    ------
    InputError
        If `raw` is no such array, or an angle cannot be read or is out of range.
    """
    items = _items(raw, 'of two strings, [RA, Dec], such as ["150.1 deg", "+2.2 deg"]', 2)
    return _item(items, 0, _right_ascension), _item(items, 1, _declination)


def _right_ascension(raw: object) -> float:
    degrees, _ = _angle(raw, "10h00m24s")
    if not 0 <= degrees < 360:
        raise InputError(f"must be a right ascension between 0 and 360 deg, got {describe(raw)}")
    return degrees


def _declination(raw: object) -> float:
    degrees, unit = _angle(raw, "+02d12m00s")
    if unit == "hourangle":
        raise InputError(f'must be a declination in degrees such as "+02d12m00s", not in hours, got {describe(raw)}')
    if not -90 <= degrees <= 90:
        raise InputError(f"must be a declination between -90 and 90 deg, got {describe(raw)}")
    return degrees


def _angle(raw: object, example: str) -> tuple[float, str]:
    # A third of a second of imports that events without a position need not pay.
    from astropy.coordinates import Angle, IllegalMinuteWarning, IllegalSecondWarning

    refusal = InputError(f'must be a string with a unit such as "150.1 deg" or "{example}", got {describe(raw)}')
    if not isinstance(raw, str) or len(raw) > _LONGEST_NAME:
        raise refusal
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error", IllegalMinuteWarning)
            warnings.simplefilter("error", IllegalSecondWarning)
            angle = Angle(raw)
            degrees, unit = float(angle.deg), str(angle.unit)
    except (ValueError, TypeError, ArithmeticError, UnitsError, Warning):
        raise refusal from None
    return degrees, unit
