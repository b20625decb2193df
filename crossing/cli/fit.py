"""``crossing fit EVENT``: fit a caustic crossing to a light curve."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

from crossing.cli.options import add_shared, examples, json_text, out_folder

__all__ = ["add_arguments", "run"]

_FILES = ("fit.json", "parameters.ecsv", "samples.ecsv", "residuals.ecsv", "light_curve.png")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Describe the verb and its options."""
    parser.description = examples(
        "crossing fit demo_lightcurves/well_sampled.toml",
        "crossing fit event.toml --model pair --seed 7 --out night_3 --json > fit.json",
    ) + (
        "\n\nFits a fold-caustic crossing to the photometry of an event file and gives the star's radius,\n"
        "temperature and luminosity where the file says enough, as tables, samples, JSON and a figure."
    )
    parser.add_argument("file", type=Path, metavar="EVENT", help="event file (TOML)")
    parser.add_argument(
        "--model",
        default="auto",
        choices=("auto", "fold", "pair", "bump", "binary", "constant"),
        help="light-curve model; auto takes the likeliest of constant, fold, bump and pair (default: auto)",
    )
    parser.add_argument(
        "--colours",
        default="free",
        choices=("free", "blackbody"),
        help="each band with its own amplitude, or all tied by one temperature (default: free)",
    )
    parser.add_argument("--extra-scatter", action="store_true", help="marginalise over scatter beyond the errors")
    add_shared(parser, "fit")


def run(options: argparse.Namespace) -> int:
    """Run the verb; returns the exit status."""
    from crossing.event import read_event, require
    from crossing.outputs import OutputFolder

    event = read_event(options.file)
    require(event, "bands", "photometry", purpose="crossing fit")
    folder = OutputFolder(out_folder(options, "fit"), "fit", overwrite=options.overwrite)
    folder.check(_FILES)

    from crossing.inference import fit_crossing
    from crossing.report.fit import fit_figure, fit_text
    from crossing.report.tables import table_bytes

    result = fit_crossing(
        event,
        model=options.model,
        colours=options.colours,
        extra_scatter=options.extra_scatter,
        seed=options.seed,
    )
    document = json_text(result.to_dict()) + "\n"
    with folder.transaction() as files:
        files.write_bytes("fit.json", document.encode())
        files.write_bytes("parameters.ecsv", table_bytes(result.to_table()))
        files.write_bytes("samples.ecsv", table_bytes(result.samples_table()))
        files.write_bytes("residuals.ecsv", table_bytes(result.rows_table()))
        fit_figure(result).savefig(files.path("light_curve.png"), dpi=150, format="png")
    if options.json:
        sys.stdout.write(document)
    elif not options.quiet:
        print(fit_text(result))
        print(f"\nwritten to {folder.path}: {', '.join(_FILES)}")
    if result.flags:
        reasons = "; ".join(f"{name}: {meaning}" for name, meaning in result.flag_meanings.items())
        print(f"crossing fit: {options.file}: done, but flagged: {reasons}", file=sys.stderr)
        return 3
    return 0
