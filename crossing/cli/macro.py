"""``crossing macro EVENT``: what the lens models say at the event, and their critical curves."""

from __future__ import annotations

import argparse
import math
import sys
from pathlib import Path

from crossing.cli.options import add_shared, examples, json_text, out_folder

__all__ = ["add_arguments", "run"]

_FILES = ("macro.json", "macro.ecsv", "critical_lines.ecsv", "macro.png", "caustics.png")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Describe the verb and its options."""
    parser.description = examples(
        "crossing macro demo_lightcurves/two_models.toml",
        "crossing macro event.toml --source-redshifts 1 2 6 --json > macro.json",
    ) + (
        "\n\nThe macro lens at an event, from lens maps, a velocity dispersion, mirrored knots or numbers:\n"
        "eigenvalues, magnification, parity, distances to critical curve and caustic, mirror image and delay, by\n"
        "each model and pooled; critical curves for any source redshift. As tables, JSON and two figures."
    )
    parser.add_argument("file", type=Path, metavar="EVENT", help="event file (TOML)")
    parser.add_argument(
        "--source-redshifts",
        type=_positive,
        nargs="+",
        metavar="Z",
        help="further redshifts of critical curves (default: one nearer and one farther than the event's)",
    )
    add_shared(parser, "macro")


def _positive(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not 0.0 < value < math.inf:
        raise argparse.ArgumentTypeError(f"must be a positive number, got {text[:40]!r}")
    return value


def run(options: argparse.Namespace) -> int:
    """Run the verb; returns the exit status."""
    from crossing.event import read_event, require
    from crossing.outputs import OutputFolder

    event = read_event(options.file)
    require(event, "macro", purpose="crossing macro")
    folder = OutputFolder(out_folder(options, "macro"), "macro", overwrite=options.overwrite)
    folder.check(_FILES)

    from crossing.optics.macro.macro_describe import describe_macro
    from crossing.report.macro import caustics_figure, macro_figure, macro_text
    from crossing.report.tables import table_bytes

    report = describe_macro(event, options.seed, source_redshifts=options.source_redshifts)
    document = json_text(report.to_dict()) + "\n"
    lines, caustics = report.lines_table(), caustics_figure(report)
    with folder.transaction() as files:
        files.write_bytes("macro.json", document.encode())
        files.write_bytes("macro.ecsv", table_bytes(report.to_table()))
        macro_figure(report).savefig(files.path("macro.png"), dpi=150, format="png")
        if lines is not None:
            files.write_bytes("critical_lines.ecsv", table_bytes(lines))
        if caustics is not None:
            caustics.savefig(files.path("caustics.png"), dpi=150, format="png")
    if options.json:
        sys.stdout.write(document)
    elif not options.quiet:
        print(macro_text(report))
        print(f"\nwritten to {folder.path}: {', '.join(path.name for path in files.written)}")
    if report.flags:
        reasons = "; ".join(f"{name}: {meaning}" for name, meaning in report.flag_meanings.items())
        print(f"crossing macro: {options.file}: done, but flagged: {reasons}", file=sys.stderr)
        return 3
    return 0
