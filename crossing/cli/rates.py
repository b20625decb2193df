"""``crossing rates CAMPAIGN``: how many lensed-star events a programme will see, where, how bright and how long."""

from __future__ import annotations

import argparse
import math
import sys
from pathlib import Path
from typing import TYPE_CHECKING

from crossing.cli.options import add_shared, examples, json_text, out_folder

if TYPE_CHECKING:
    from crossing.event import Campaign

__all__ = ["add_arguments", "run"]

_FILES = ("rates.json", "segments.ecsv", "visits.ecsv", "arc.png")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Describe the verb and its options."""
    parser.description = examples(
        "crossing rates demo_lightcurves/campaign.toml",
        'crossing rates campaign.toml --schedule "deep pair" --json > rates.json',
    ) + (
        "\n\nFrom the surface brightness of an arc to its stars, and from its stars to events: expected events a year\n"
        "with what is uncertain in the model and what chance adds, segment by segment along the arc and visit by\n"
        "visit; how bright and how long events are, and which stars make them. As text, JSON, tables and a figure."
    )
    parser.add_argument("file", type=Path, metavar="CAMPAIGN", help="campaign file (TOML)")
    parser.add_argument("--schedule", metavar="NAME", help="schedule whose depth and visits count (default: the first)")
    parser.add_argument(
        "--level",
        choices=("folds", "tracks"),
        default="folds",
        help="folds of random fields alone, or calibrated on light curves that the library keeps (default: folds)",
    )
    parser.add_argument(
        "--tracks", type=_count, default=16, metavar="N", help="light curves for each segment (default: 16)"
    )
    parser.add_argument("--draws", type=_count, default=64, metavar="N", help="draws of the model (default: 64)")
    parser.add_argument(
        "--beam", type=_positive, default=0.1, metavar="W", help="width of the images [arcsec] (default: 0.1)"
    )
    parser.add_argument("--plan", action="store_true", help="print what the forecast would take, and stop")
    add_shared(parser, "rates")


def _positive(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not 0.0 < value < math.inf:
        raise argparse.ArgumentTypeError(f"must be a positive number, got {text[:40]!r}")
    return value


def _count(text: str) -> int:
    if not (text.isascii() and text.isdigit() and len(text) < 6 and 2 <= int(text) <= 10_000):
        raise argparse.ArgumentTypeError(f"must be a whole number from 2 to 10000, got {text[:40]!r}")
    return int(text)


def run(options: argparse.Namespace) -> int:
    """Run the verb; returns the exit status."""
    from crossing.event import read_campaign
    from crossing.outputs import OutputFolder

    campaign = read_campaign(options.file)
    if options.plan:
        return _tell_plan(options, campaign)
    folder = OutputFolder(out_folder(options, "rates"), "rates", overwrite=options.overwrite)
    folder.check(_FILES)

    from crossing.population.event_rates import predict_rates
    from crossing.report.rates import rates_figure, rates_text
    from crossing.report.tables import table_bytes

    result = predict_rates(
        campaign,
        schedule=options.schedule,
        level=options.level,
        draws=options.draws,
        tracks=options.tracks,
        beam=options.beam,
        seed=options.seed,
        threads=options.threads,
    )
    document = json_text(result.to_dict()) + "\n"
    names = [name for name in _FILES if name != "visits.ecsv" or result.visits is not None]
    with folder.transaction() as files:
        files.write_bytes("rates.json", document.encode())
        files.write_bytes("segments.ecsv", table_bytes(result.to_table()))
        if result.visits is not None:
            files.write_bytes("visits.ecsv", table_bytes(result.visits.to_table()))
        rates_figure(result).savefig(files.path("arc.png"), dpi=150, format="png")
    if options.json:
        sys.stdout.write(document)
    elif not options.quiet:
        print(rates_text(result))
        print(f"\nwritten to {folder.path}: {', '.join(names)}")
    if result.flags:
        reasons = "; ".join(f"{name}: {meaning}" for name, meaning in result.flag_meanings.items())
        print(f"crossing rates: {options.file}: done, but flagged: {reasons}", file=sys.stderr)
        return 3
    return 0


def _tell_plan(options: argparse.Namespace, campaign: Campaign) -> int:
    from crossing.population.event_rates import plan_rates

    plan = plan_rates(
        campaign, schedule=options.schedule, level=options.level, draws=options.draws, tracks=options.tracks
    )
    if options.json:
        sys.stdout.write(json_text({"verb": "rates", "plan": plan._asdict()}) + "\n")
    elif not options.quiet:
        print(
            f"about {plan.seconds:.2g} s: {plan.segments} segments, {plan.draws} draws of the model, "
            f"{plan.visits} visits, {plan.tracks} tracks to compute"
        )
    return 0
