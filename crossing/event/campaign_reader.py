"""From a campaign file to its records."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Final

from crossing.errors import InputError
from crossing.event.campaign_checks import check_campaign
from crossing.event.campaign_macro import check_shared_macro
from crossing.event.campaign_observed import read_observed
from crossing.event.campaign_records import Campaign, SegmentRecord
from crossing.event.campaign_schedules import read_schedules
from crossing.event.campaign_sections import read_campaign_name, read_detection, read_population
from crossing.event.campaign_segments import read_line, read_segments
from crossing.event.checks import check_order
from crossing.event.reader import load_toml
from crossing.event.records import Event
from crossing.event.sections import read_bands, read_cosmology, read_motion, read_redshift
from crossing.event.tables import Table

__all__ = ["build_campaign", "read_campaign", "require_campaign", "segment_event"]

_EVENT_SECTIONS: Final = ("event", "star", "photometry", "counterpart")
_SECTIONS: Final = (
    *("campaign", "lens", "source", "cosmology", "macro", "microlenses", "motion", "bands", "segments", "line"),
    *("population", "schedules", "detection", "observed"),
)
_REMEDIES: Final = {
    "lens": ("lens_redshift", "add [lens] with redshift = ..."),
    "source": ("source_redshift", "add [source] with redshift = ..."),
    "motion": ("motion", 'add [motion] with speed = "... km / s"'),
    "bands": ("bands", 'add [bands.NAME] with wavelength = "... um" for each band'),
    "segments": ("parts", "add [[segments]] with kappa, gamma, length, width, surface_brightness and kappa_star"),
    "schedules": ("schedules", "add [[schedules]] with start, cadence and number, or with epochs"),
    "observed": ("observed", "add [observed] with count = ..."),
}


def read_campaign(path: str | os.PathLike[str]) -> Campaign:
    """Read a campaign file.

    Parameters
    ----------
    path : str or os.PathLike
        TOML file; relative paths in it start from its own folder. Files that it names are not opened.

    Returns
    -------
    Campaign
        Its contents, units stripped; sections that it lacks are empty. See `require_campaign`.

    Raises
    ------
    InputError
        If the file cannot be read, is not TOML, or holds anything that is unknown, missing, of the wrong type or
        unit, or physically impossible; one line that names the file and the key.
    """
    root, sha256 = load_toml(Path(path))
    return build_campaign(root, sha256)


def build_campaign(root: Table, sha256: str) -> Campaign:
    """Campaign out of the table of a whole file.

    Raises
    ------
    InputError
        As `read_campaign`.
    """
    for key in root:
        if key in _EVENT_SECTIONS:
            raise root.error("belongs in an event file; give this file to `crossing fit`, or remove it", key)
    root.only(*_SECTIONS)
    check_shared_macro(root)
    name = read_campaign_name(root)
    bands = read_bands(root)
    segments = read_segments(root)
    schedules = read_schedules(root)
    campaign = Campaign(
        name=name,
        path=root.source,
        sha256=sha256,
        lens_redshift=read_redshift(root, "lens"),
        source_redshift=read_redshift(root, "source"),
        cosmology=read_cosmology(root),
        motion=read_motion(root),
        bands=bands,
        segments=segments,
        line=read_line(root),
        population=read_population(root),
        schedules=schedules,
        detection=read_detection(root),
        observed=read_observed(root, segments, schedules, tuple(bands)),
    )
    check_order(root, campaign.lens_redshift, campaign.source_redshift)
    check_campaign(root, campaign)
    return campaign


def require_campaign(campaign: Campaign, *sections: str, purpose: str = "this") -> None:
    """Insist on sections that a campaign file may otherwise lack.

    Parameters
    ----------
    campaign : Campaign
        The campaign.
    *sections : str
        Names as in the file: ``lens``, ``source``, ``motion``, ``bands``, ``segments`` (or a line), ``schedules`` or
        ``observed``; or ``surface_brightness``, which all segments must have.
    purpose : str
        What needs them, for the message, such as ``crossing rates``.

    Raises
    ------
    InputError
        For the first section that is missing, with what to add.
    """
    for section in sections:
        if section == "surface_brightness":
            for part in campaign.parts:
                if not part.surface_brightness:
                    problem = f'must be given for {purpose}; add surface_brightness = {{BAND = "... mag / arcsec2"}}'
                    raise InputError(problem, source=campaign.path, where=f"{part.place}.surface_brightness")
            continue
        attribute, remedy = _REMEDIES[section]
        if not getattr(campaign, attribute):
            raise InputError(f"must be given for {purpose}; {remedy}", source=campaign.path, where=section)


def segment_event(campaign: Campaign, segment: SegmentRecord) -> Event:
    """Event that happens in one segment, for all that works with the lens and the motion of an event.

    Parameters
    ----------
    campaign : Campaign
        The campaign.
    segment : SegmentRecord
        One of its segments, or one that was cut from its line.

    Returns
    -------
    Event
        With the segment's name, macro lens and point masses; it has no photometry.
    """
    return Event(
        name=segment.name,
        path=campaign.path,
        sha256=campaign.sha256,
        lens_redshift=campaign.lens_redshift,
        source_redshift=campaign.source_redshift,
        cosmology=campaign.cosmology,
        macro=segment.macro,
        microlenses=segment.microlenses,
        motion=campaign.motion,
        bands=campaign.bands,
    )
