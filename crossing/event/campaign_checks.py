"""Checks that need more than one section of a campaign file."""

from __future__ import annotations

from collections.abc import Iterator

from crossing.errors import InputError
from crossing.event.campaign_records import Campaign
from crossing.event.checks import check_band
from crossing.event.parsers import text
from crossing.event.tables import Table
from crossing.event.wording import describe, quoted_key

__all__ = ["check_campaign"]


def check_campaign(root: Table, campaign: Campaign) -> None:
    """Refuse bands that are not described, and depths or brightnesses that are missing.

    Raises
    ------
    InputError
        For the first of them.
    """
    for band, place in _bands_used(root, campaign):
        check_band(root, campaign.bands, band, place)
    _check_reference_band(root, campaign)
    _check_depths(root, campaign)


def _bands_used(root: Table, campaign: Campaign) -> Iterator[tuple[str, str]]:
    """Every band that is named outside ``[bands]``, and where."""
    for table in root.tables("microlenses"):
        if (band := table.get("band", text)) is not None:
            yield band, table.place("band")
    for part in campaign.parts:
        yield from ((band, f"{part.place}.surface_brightness.{quoted_key(band)}") for band in part.surface_brightness)
        yield from ((lens.band, f"{part.place}.microlenses") for lens in part.microlenses if lens.band is not None)
    if campaign.population.reference_band is not None:
        yield campaign.population.reference_band, "population.reference_band"
    for table, schedule in zip(root.tables("schedules"), campaign.schedules, strict=True):
        yield from ((band, f"{table.place('depth')}.{quoted_key(band)}") for band in schedule.depth)
    detection = campaign.detection
    yield from ((band, f"detection.bands[{index}]") for index, band in enumerate(detection.bands))
    yield from ((band, f"detection.reference_depth.{quoted_key(band)}") for band in detection.reference_depth)
    if campaign.observed is not None:
        yield from ((event.band, "observed.band") for event in campaign.observed.events if event.band is not None)


def _check_reference_band(root: Table, campaign: Campaign) -> None:
    """Refuse a segment whose brightness is not known in the band that fixes the number of stars."""
    band = campaign.population.reference_band
    for part in campaign.parts:
        if band is not None and part.surface_brightness and band not in part.surface_brightness:
            problem = f"must hold the reference band of [population], {describe(band)}; add it or change reference_band"
            raise InputError(problem, source=root.source, where=f"{part.place}.surface_brightness")


def _check_depths(root: Table, campaign: Campaign) -> None:
    """Refuse a schedule of which nobody knows how deep it goes."""
    if any(band.depth is not None for band in campaign.bands.values()):
        return
    for table, schedule in zip(root.tables("schedules"), campaign.schedules, strict=True):
        if not schedule.depth:
            problem = 'must be given where no band has a depth; add depth = {BAND = "... mag"} here or to the bands'
            raise table.error(problem, "depth")
