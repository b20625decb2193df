"""Plain records of what a campaign file says: units are stripped, nothing is computed."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Final, Literal

from crossing.event.records import (
    DEFAULT_SIGMA,
    BandRecord,
    CosmologyRecord,
    MacroRecord,
    MicrolensRecord,
    MotionRecord,
    Position,
)
from crossing.event.values import Value

__all__ = [
    "DEFAULT_MERGE",
    "DEFAULT_SLOPE",
    "Campaign",
    "DetectionRecord",
    "LineRecord",
    "ObservedEventRecord",
    "ObservedRecord",
    "PopulationRecord",
    "ScheduleRecord",
    "SegmentRecord",
]

DEFAULT_SLOPE: Final = 2.0
"""Slope s of the luminosity function dN/dL = L^-s, equal light per decade (common practice for young arcs)."""
DEFAULT_MERGE: Final = 30.0
"""Excursions closer than this [days] are one event: months part the passages of different caustics (chosen here)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SegmentRecord:
    """A piece of the arc in one macro image."""

    name: str
    """Name, unlike those of the other segments."""
    macro: tuple[MacroRecord, ...]
    """Macro lens at its centre: one, or several alternatives."""
    length: float
    """Observed extent along the stretch direction [arcsec]."""
    width: float
    """Observed extent across it [arcsec]."""
    surface_brightness: dict[str, Value] = field(default_factory=dict)
    """Observed surface brightness of the arc by band [AB mag / arcsec2]."""
    microlenses: tuple[MicrolensRecord, ...] = ()
    """Populations of point masses in front of it; their convergences add up."""
    place: str | None = field(default=None, compare=False)
    """Key of the file that holds it, for messages."""


@dataclass(frozen=True, slots=True, kw_only=True)
class LineRecord:
    """A line along the arc, to be cut into segments whose macro lenses follow from the shared ``[macro]``."""

    points: tuple[Position, ...]
    """Corners of the line [deg], two or more."""
    step: float
    """Length of a segment [arcsec]."""
    width: float
    """Observed extent of the arc across the line [arcsec]."""
    macro: tuple[MacroRecord, ...]
    """The shared macro lens, at the first of the points; `position` is to be replaced by that of each segment."""
    surface_brightness: dict[str, Value] = field(default_factory=dict)
    """As in `SegmentRecord`, the same all along."""
    microlenses: tuple[MicrolensRecord, ...] = ()
    """As in `SegmentRecord`, the same all along."""
    place: str | None = field(default="line", compare=False)
    """Key of the file that holds it, for messages."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PopulationRecord:
    """Stars of the arc: a luminosity function with temperatures, or a table of both."""

    path: Path | None = None
    """Table of stars with columns ``luminosity``, ``temperature`` and ``number``; not yet opened."""
    columns: dict[str, str] = field(default_factory=dict)
    """Names of its columns, for those that differ."""
    slope: Value | None = field(default_factory=lambda: Value.exact(DEFAULT_SLOPE))
    """Slope s of dN/dL = L^-s; None with a table."""
    luminosity_range: tuple[float, float] | None = None
    """Lowest and highest luminosity [Lsun]; None: not given."""
    temperature: Value | None = None
    """Distribution of effective temperatures among the stars [K]; None: not given."""
    light_fraction: Value = field(default_factory=lambda: Value.exact(1.0))
    """Part of the arc's light, in the reference band, that comes from these stars; the rest has fainter sources."""
    reference_band: str | None = None
    """Band whose surface brightness fixes their number; None: not given."""
    dust: Value | None = None
    """A(V) of the dust in the arc's galaxy [mag]; None: not given."""
    star_formation_density: Value | None = None
    """Star formation per area of the source plane [Msun / (yr kpc2)]."""
    stellar_mass_density: Value | None = None
    """Stellar mass per area of the source plane [Msun / pc2]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ScheduleRecord:
    """Visits: a regular cadence with gaps, or explicit epochs. See `crossing.event.visit_times`."""

    name: str
    """Name, unlike those of the other schedules."""
    start: float | None = None
    """MJD of the first visit [days]; None with `epochs`."""
    cadence: float | None = None
    """Time from visit to visit [days]; None with `epochs`."""
    number: int | None = None
    """Number of visits outside the gaps; None with `epochs`."""
    gaps: tuple[tuple[float, float], ...] = ()
    """MJDs between which there are no visits [days], in order of time."""
    epochs: tuple[float, ...] = ()
    """MJDs of explicit visits [days], in order of time."""
    depth: dict[str, float] = field(default_factory=dict)
    """Depth of a visit by band [nJy]; empty: every band that has a depth of its own."""
    depth_sigma: float = DEFAULT_SIGMA
    """Significance of `depth`."""
    loss: float = 0.0
    """Part of the visits that weather or the scheduling takes away, at random."""
    exposure: float | None = None
    """Time that one visit costs in all its bands [hours]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class DetectionRecord:
    """What counts as an event."""

    significance: float = DEFAULT_SIGMA
    """Significance of the change of flux against the reference, in an epoch."""
    epochs: int = 1
    """Number of visits that must show it."""
    bands: tuple[str, ...] = ()
    """Bands in which it counts; empty: all that are observed."""
    bands_required: int = 1
    """Number of these bands that must show it in the same visit."""
    reference: Literal["template", "previous"] = "template"
    """Flux that a visit is compared with: a template's, or the previous visit's."""
    reference_epochs: tuple[float, ...] = ()
    """MJDs of the template's images [days]; empty: the template shows the mean flux."""
    reference_depth: dict[str, float] = field(default_factory=dict)
    """Depth of the template by band [nJy]; bands that are left out have no noise in it."""
    reference_depth_sigma: float = DEFAULT_SIGMA
    """Significance of `reference_depth`."""
    merge: float = DEFAULT_MERGE
    """Excursions closer than this are one event [days]."""
    efficiency: Value = field(default_factory=lambda: Value.exact(1.0))
    """Part of the detectable events that survives the vetting of candidates."""
    follow_up_delay: float | None = None
    """Time from a detection to the first follow-up [days]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ObservedEventRecord:
    """One observed event."""

    segment: str | None = None
    """Segment in which it happened."""
    position: Position | None = None
    """Where it happened [deg]."""
    brightness: Value | None = None
    """Highest flux seen above the reference [nJy]."""
    band: str | None = None
    """Band of the brightness."""
    time: float | None = None
    """MJD of that visit [days]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ObservedRecord:
    """What a season brought."""

    count: int
    """Number of events, also where they are not listed."""
    events: tuple[ObservedEventRecord, ...] = ()
    """The events, all or none of them."""
    schedule: str | None = None
    """Schedule under which they were found; None: not given."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Campaign:
    """All that a campaign file says."""

    name: str
    """Name of the campaign."""
    path: Path
    """The file, as it was asked for."""
    sha256: str
    """Hexadecimal SHA-256 of the file's bytes."""
    lens_redshift: Value | None = None
    """Redshift of the lens."""
    source_redshift: Value | None = None
    """Redshift of the source."""
    cosmology: CosmologyRecord = field(default_factory=CosmologyRecord)
    """Cosmology for all distances."""
    motion: MotionRecord | None = None
    """Motion across the caustics."""
    bands: dict[str, BandRecord] = field(default_factory=dict)
    """Bands by name."""
    segments: tuple[SegmentRecord, ...] = ()
    """Segments of the arc; none where there is a line."""
    line: LineRecord | None = None
    """Line to be cut into segments."""
    population: PopulationRecord = field(default_factory=PopulationRecord)
    """Stars of the arc."""
    schedules: tuple[ScheduleRecord, ...] = ()
    """Schedules to be compared."""
    detection: DetectionRecord = field(default_factory=DetectionRecord)
    """What counts as an event."""
    observed: ObservedRecord | None = None
    """What was found."""

    @property
    def parts(self) -> tuple[SegmentRecord | LineRecord, ...]:
        """Segments, or the line, or nothing."""
        return self.segments if self.line is None else (self.line,)
