"""Segments of an arc: cut from a line where need be, each with draws of its lens, its area and its caustics."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import cos, hypot, radians
from typing import TYPE_CHECKING, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.event import Campaign, LineRecord, SegmentRecord, segment_event
from crossing.population.arc_stars import source_area
from crossing.shooting.caustics.fold_ensemble import fold_ensemble
from crossing.shooting.peaks.peak_lens import LensDraw, MacroChoice, macro_choices

if TYPE_CHECKING:
    from crossing.optics.local import FoldGeometry
    from crossing.optics.scales import LensScales

__all__ = ["Caustics", "Segment", "campaign_segments", "caustics_of", "cut_line", "prepare_segments", "total_area"]

Array = NDArray[np.float64]

_MOST: Final = 400
# A segment that touches the critical curve with its end, up to the rounding of the file, has half of it.
_TOUCH: Final = 1e-6
# As near to the critical curve as draws of the lens come.
_CLOSEST, _CLOSEST_SHARE = 1e-4, 0.1


class Caustics(NamedTuple):
    """Caustics behind one segment; arrays of shape (n,), the strongest first."""

    strength: Array
    """K of ``K / sqrt(distance)`` [theta_E^(1/2)]."""
    length: Array
    """Length in the part of the source plane that the segment shows [theta_E]."""
    normal: Array
    """Angle of the normal from u to v [rad]."""
    background: float
    """Magnification beside them."""
    source_area: float
    """Area of the source plane whose stars the segment shows [arcsec2]; 0 for those of a smooth fold alone."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Segment:
    """A segment with all its macro models."""

    record: SegmentRecord
    """What the file says."""
    choices: tuple[MacroChoice, ...]
    """Its macro models."""

    @property
    def area(self) -> float:
        """Observed area [arcsec2]."""
        return self.record.length * self.record.width

    @property
    def fold(self) -> FoldGeometry | None:
        """Smooth fold of the first of its macro models, where the gradient is known."""
        return self.choices[0].fold

    def draws(self, count: int, seed: int) -> list[tuple[MacroChoice, LensDraw]]:
        """Possible lenses of equal weight; equal numbers of different segments belong together."""
        weights = np.array([choice.weight for choice in self.choices])
        which = np.searchsorted(np.cumsum(weights) / weights.sum(), (np.arange(count) + 0.5) / count)
        which = np.minimum(which, len(weights) - 1)
        out: list[tuple[MacroChoice, LensDraw]] = []
        for index, choice in enumerate(self.choices):
            out += [(choice, one) for one in choice.draws(int((which == index).sum()), seed)]
        return out

    def central(self, seed: int) -> tuple[MacroChoice, LensDraw]:
        """Lens at the central values of the first macro model; a draw where that is too close to the critical curve."""
        choice = self.choices[0]
        if abs(choice.lens.lam_t) < max(_CLOSEST, _CLOSEST_SHARE * choice.kappa_star):
            return self.draws(1, seed)[0]
        return choice, LensDraw(choice.lens, choice.lens.lam_t, choice.populations, 0.0, np.random.SeedSequence(seed))

    def coarseness(self) -> float:
        """Change of lam_t over the segment's length, over |lam_t| and kappa_star together; 0 where it is not known."""
        choice = self.choices[0]
        if choice.fold is None:
            return 0.0
        scale = abs(choice.lens.lam_t) + choice.kappa_star
        return choice.fold.rate * self.record.length / scale if scale > 0 else np.inf


def campaign_segments(campaign: Campaign) -> tuple[SegmentRecord, ...]:
    """Segments of a campaign, cut from its line if it has one."""
    return campaign.segments if campaign.line is None else cut_line(campaign.line)


def prepare_segments(campaign: Campaign) -> tuple[Segment, ...]:
    """All segments with their macro models.

    Raises
    ------
    InputError
        If a macro lens cannot be built, or the stars do not fit into it; the message names the segment.
    """
    out = []
    for record in campaign_segments(campaign):
        try:
            out.append(Segment(record=record, choices=macro_choices(segment_event(campaign, record))))
        except InputError as error:
            place = ".".join(part for part in (record.place, error.where) if part)
            raise InputError(error.problem, source=campaign.path, where=place or None) from None
    return tuple(out)


def cut_line(line: LineRecord) -> tuple[SegmentRecord, ...]:
    """Segments of equal length along a line, about as long as its `step`.

    Parameters
    ----------
    line : LineRecord
        Line along the arc.

    Returns
    -------
    tuple of SegmentRecord
        The macro record of each has the position of its centre.

    Raises
    ------
    InputError
        If there would be more than 400.

    Notes
    -----
    Distances are those of the plane that touches the sky at the first point: good to 1e-5 within an arcminute.
    """
    start = np.array(line.points[0])
    scale = np.array([3600.0 * cos(radians(start[1])), 3600.0])
    turn = (np.array(line.points) - start + np.array([180.0, 0.0])) % 360.0 - np.array([180.0, 0.0])
    turn[:, 1] = np.array(line.points)[:, 1] - start[1]
    corners = turn * scale
    along = np.concatenate([[0.0], np.cumsum([hypot(*step) for step in np.diff(corners, axis=0)])])
    number = max(1, round(along[-1] / line.step))
    if number > _MOST:
        raise InputError(f"must leave at most {_MOST} segments, got {number}; raise it", where="line.step")
    middle = (np.arange(number) + 0.5) * along[-1] / number
    places = np.stack([np.interp(middle, along, axis) for axis in corners.T], axis=1) / scale + start
    return tuple(
        SegmentRecord(
            name=f"segment {index + 1}",
            macro=tuple(replace(one, position=(float(ra), float(dec))) for one in line.macro),
            length=float(along[-1] / number),
            width=line.width,
            surface_brightness=line.surface_brightness,
            microlenses=line.microlenses,
            place=line.place,
        )
        for index, (ra, dec) in enumerate(places)
    )


def caustics_of(segment: Segment, choice: MacroChoice, draw: LensDraw, scales: LensScales, folds: int) -> Caustics:
    """Caustics behind a segment for one draw of its lens.

    Parameters
    ----------
    segment : Segment
        The segment.
    choice : MacroChoice
        The macro model of the draw.
    draw : LensDraw
        The lens.
    scales : LensScales
        Distances.
    folds : int
        Random surroundings of the fold ensemble.

    Notes
    -----
    Without stars of the lens there is only the smooth macro caustic, and only behind the segments that the critical
    curve runs through: it is abs(lam_r) times as long as they are wide, with its normal along u.
    """
    unit = scales.einstein_radius_arcsec
    if draw.populations:
        found = fold_ensemble(draw.lens, draw.populations, folds)
        order = np.argsort(found.strength)[::-1]
        area = source_area(segment.area, draw.lens.magnification)
        return Caustics(
            strength=found.strength[order],
            length=found.length[order] * area / unit**2,
            normal=found.normal[order],
            background=found.background,
            source_area=area,
        )
    share = 0.0 if choice.fold is None else _share_of_curve(draw.lam_t / choice.fold.rate, segment.record.length)
    if choice.fold is None or share == 0.0:
        none = np.empty(0)
        return Caustics(none, none, none, draw.lens.magnification, source_area(segment.area, draw.lens.magnification))
    across = share * abs(draw.lens.lam_r) * segment.record.width / unit
    return Caustics(np.array([choice.fold.strength / np.sqrt(unit)]), np.array([across]), np.zeros(1), 0.0, 0.0)


def _share_of_curve(distance: float, length: float) -> float:
    """Share of the critical curve that a segment has: all, half at its end, nothing beyond."""
    beyond = abs(distance) - 0.5 * length
    if abs(beyond) <= _TOUCH * length:
        return 0.5
    return 1.0 if beyond < 0 else 0.0


def total_area(segments: Sequence[Segment]) -> float:
    """Observed area of all segments [arcsec2]."""
    return sum(segment.area for segment in segments)
