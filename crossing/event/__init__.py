"""Event files: read strictly into plain records, from which each layer builds its own objects."""

from __future__ import annotations

from crossing.event.reader import read_event, require
from crossing.event.records import (
    BandRecord,
    CosmologyRecord,
    CounterpartRecord,
    Event,
    MacroRecord,
    MicrolensRecord,
    MotionRecord,
    PhotometryRecord,
    StarRecord,
)
from crossing.event.values import Value

__all__ = [
    "BandRecord",
    "CosmologyRecord",
    "CounterpartRecord",
    "Event",
    "MacroRecord",
    "MicrolensRecord",
    "MotionRecord",
    "PhotometryRecord",
    "StarRecord",
    "Value",
    "read_event",
    "require",
]
