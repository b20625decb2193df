"""Small campaign files for tests of event rates."""

from __future__ import annotations

from pathlib import Path

from crossing.event import Campaign, read_campaign

__all__ = ["ARC", "campaign_text", "write_campaign"]

ARC = '[lens]\nredshift = 0.43\n[source]\nredshift = 1.21\n[bands.red]\nwavelength = "1.25 um"\n'


def campaign_text(
    segments: str,
    *,
    depth: str = "28.7 mag",
    slope: float = 2.0,
    luminosities: tuple[str, str] = ("1e2 solLum", "1e6 solLum"),
    motion: str = 'speed = "700 km / s"\nangle = "0 deg"',
    more: str = "",
) -> str:
    """Campaign with one band, black bodies of 12,000 K and a known motion."""
    low, high = luminosities
    return (
        f'[campaign]\nname = "test arc"\n{ARC}depth = "{depth}"\n[motion]\n{motion}\n[population]\nslope = {slope}\n'
        f'luminosity_range = ["{low}", "{high}"]\ntemperature = "12000 K"\n{segments}{more}'
    )


def write_campaign(folder: Path, text: str) -> Campaign:
    """Write a campaign file and read it."""
    path = folder / "campaign.toml"
    path.write_text(text, encoding="utf-8")
    return read_campaign(path)
