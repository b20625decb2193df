"""Flags of the rows of a light curve: the one source of their names, bits and meanings."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

__all__ = ["FLAGS", "UNUSED", "RowFlag", "flag_bit", "flag_names"]


@dataclass(frozen=True, slots=True, kw_only=True)
class RowFlag:
    """One bit of the bitmask `LightCurve.flags`."""

    name: str
    """Word that tables and messages use."""
    bit: int
    """Value of the bit, a power of two; never given to another flag later."""
    meaning: str
    """One sentence for the reader of a table."""
    unused: bool
    """Whether a row with this flag stays out of every fit."""


FLAGS: Final = (
    RowFlag(name="excluded", bit=1, meaning="The file says not to use this row.", unused=True),
    RowFlag(
        name="duplicate",
        bit=2,
        meaning="Another file has the same observation (time, band and flux); that one is used.",
        unused=True,
    ),
    RowFlag(
        name="from_magnitude",
        bit=4,
        meaning="The flux was converted from an AB magnitude, its error to first order.",
        unused=False,
    ),
)

UNUSED: Final = sum(flag.bit for flag in FLAGS if flag.unused)
"""Bits of the flags that keep a row out of every fit."""


def flag_bit(name: str) -> int:
    """Bit of the flag called `name`; KeyError if there is none."""
    return {flag.name: flag.bit for flag in FLAGS}[name]


def flag_names(flags: int) -> tuple[str, ...]:
    """Names of the bits that are set in `flags`."""
    return tuple(flag.name for flag in FLAGS if flags & flag.bit)
