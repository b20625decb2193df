"""``crossing peak EVENT``: what peak magnifications to expect, how often, and for how long."""

from __future__ import annotations

import argparse
import math
import sys
from pathlib import Path

from crossing.cli.options import add_shared, examples, json_text, out_folder

__all__ = ["add_arguments", "run"]

_FILES = ("peak.json", "peaks.ecsv", "peaks.png")
_MOST_VALUES = 50


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Describe the verb and its options."""
    parser.description = examples(
        "crossing peak demo_lightcurves/well_sampled.toml",
        "crossing peak event.toml --radii 10 180 --temperature 12000 --json > peak.json",
    ) + (
        "\n\nPeak magnifications of stars at the place of an event: at the smooth macro fold, at the caustic of one\n"
        "star, and at the folds that random tracks through random star fields meet; how often a year peaks exceed\n"
        "a magnification; how long a crossing takes; how wide the band of micro-caustics is. As a table, JSON and\n"
        "a figure."
    )
    parser.add_argument("file", type=Path, metavar="EVENT", help="event file (TOML)")
    parser.add_argument(
        "--radii",
        type=_positive,
        nargs="+",
        metavar="R",
        help="stellar radii [Rsun] (default: 1 to 1000, and that of the event's star)",
    )
    parser.add_argument(
        "--magnifications",
        type=_positive,
        nargs="+",
        metavar="MU",
        help="magnifications whose rates are told (default: 300 to 30000)",
    )
    parser.add_argument("--temperature", type=_positive, metavar="T", help="temperature of the star [K], for its flux")
    parser.add_argument(
        "--band", metavar="NAME", help="band whose limb darkening is used (default: the first that has one)"
    )
    parser.add_argument(
        "--precision", type=_positive, default=0.05, metavar="E", help="statistical error to reach (default: 0.05)"
    )
    parser.add_argument("--tracks", type=_count, default=480, metavar="N", help="most tracks to follow (default: 480)")
    add_shared(parser, "peak")


def _positive(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not 0.0 < value < math.inf:
        raise argparse.ArgumentTypeError(f"must be a positive number, got {text[:40]!r}")
    return value


def _count(text: str) -> int:
    if not (text.isascii() and text.isdigit() and len(text) < 7 and int(text) >= 1):
        raise argparse.ArgumentTypeError(f"must be a whole number from 1 to 999999, got {text[:40]!r}")
    return int(text)


def run(options: argparse.Namespace) -> int:
    """Run the verb; returns the exit status."""
    from crossing.errors import InputError
    from crossing.event import read_event, require
    from crossing.outputs import OutputFolder

    event = read_event(options.file)
    require(event, "lens", "source", "macro", purpose="crossing peak")
    for name in ("radii", "magnifications"):
        given = getattr(options, name)
        if given is not None and len(given) > _MOST_VALUES:
            raise InputError(f"--{name} must be {_MOST_VALUES} numbers at most, got {len(given)}")
    folder = OutputFolder(out_folder(options, "peak"), "peak", overwrite=options.overwrite)
    folder.check(_FILES)

    from crossing.report.peak import peak_figure, peak_text
    from crossing.report.tables import table_bytes
    from crossing.shooting.peaks.peak_forecast import MAGNIFICATIONS, forecast_peaks

    result = forecast_peaks(
        event,
        radii=options.radii,
        magnifications=options.magnifications or MAGNIFICATIONS,
        band=options.band,
        temperature=options.temperature,
        precision=options.precision,
        most_tracks=options.tracks,
        seed=options.seed,
        threads=options.threads,
    )
    document = json_text(result.to_dict()) + "\n"
    with folder.transaction() as files:
        files.write_bytes("peak.json", document.encode())
        files.write_bytes("peaks.ecsv", table_bytes(result.to_table()))
        peak_figure(result).savefig(files.path("peaks.png"), dpi=150, format="png")
    if options.json:
        sys.stdout.write(document)
    elif not options.quiet:
        print(peak_text(result))
        print(f"\nwritten to {folder.path}: {', '.join(_FILES)}")
    if result.flags:
        reasons = "; ".join(f"{name}: {meaning}" for name, meaning in result.flag_meanings.items())
        print(f"crossing peak: {options.file}: done, but flagged: {reasons}", file=sys.stderr)
        return 3
    return 0
