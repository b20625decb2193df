"""Event and campaign files: read strictly into plain records, from which each layer builds its own objects."""

from __future__ import annotations

from crossing.event.campaign_reader import read_campaign, require_campaign, segment_event
from crossing.event.campaign_records import (
    Campaign,
    DetectionRecord,
    LineRecord,
    ObservedEventRecord,
    ObservedRecord,
    PopulationRecord,
    ScheduleRecord,
    SegmentRecord,
)
from crossing.event.campaign_schedules import visit_noise, visit_times
from crossing.event.reader import read_event, require
from crossing.event.records import (
    BandRecord,
    CosmologyRecord,
    CounterpartRecord,
    Event,
    HaloRecord,
    MacroRecord,
    MapRecord,
    MembersRecord,
    MicrolensRecord,
    MotionRecord,
    PairRecord,
    PhotometryRecord,
    StarRecord,
)
from crossing.event.values import Value

__all__ = [
    "BandRecord",
    "Campaign",
    "CosmologyRecord",
    "CounterpartRecord",
    "DetectionRecord",
    "Event",
    "HaloRecord",
    "LineRecord",
    "MacroRecord",
    "MapRecord",
    "MembersRecord",
    "MicrolensRecord",
    "MotionRecord",
    "ObservedEventRecord",
    "ObservedRecord",
    "PairRecord",
    "PhotometryRecord",
    "PopulationRecord",
    "ScheduleRecord",
    "SegmentRecord",
    "StarRecord",
    "Value",
    "read_campaign",
    "read_event",
    "require",
    "require_campaign",
    "segment_event",
    "visit_noise",
    "visit_times",
]
