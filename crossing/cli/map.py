"""``crossing map EVENT``: a magnification map of the event's star field."""

from __future__ import annotations

import argparse
import math
import sys
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING

from crossing.cli.options import add_shared, examples, json_text, out_folder

if TYPE_CHECKING:
    from crossing.outputs import OutputFolder
    from crossing.shooting.caustics.network import CausticNetwork
    from crossing.shooting.field import StarField
    from crossing.shooting.maps.magnification_map import MagnificationMap
    from crossing.shooting.maps.mapping import MapPlan

__all__ = ["add_arguments", "run"]

_FILES = ("map.fits", "map.json", "statistics.ecsv", "map.png")
_CAUSTICS = "caustics.ecsv"
_CHECKPOINT = ".crossing-map-checkpoint.npz"
_MOST_PIXELS = 50_000


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Describe the verb and its options."""
    parser.description = examples(
        "crossing map demo_lightcurves/well_sampled.toml",
        "crossing map event.toml --width 40 --height 5 --pixels 4000 --plan",
    ) + (
        "\n\nDraws a random star field from the event's macro lens and microlenses and maps its magnification over\n"
        "the source plane, as a FITS file, statistics, JSON and a figure. Lengths are Einstein radii of one solar\n"
        "mass. After an interruption the same command goes on where it stopped."
    )
    parser.add_argument("file", type=Path, metavar="EVENT", help="event file (TOML)")
    parser.add_argument("--width", type=_size, default=10.0, metavar="W", help="size along u (default: 10)")
    parser.add_argument("--height", type=_size, metavar="H", help="size along v (default: as the width)")
    parser.add_argument("--pixels", type=_pixels, default=1000, metavar="N", help="pixels along u (default: 1000)")
    parser.add_argument(
        "--method",
        default="area",
        choices=("area", "rays"),
        help="area mapping, or counting rays as an independent check (default: area)",
    )
    parser.add_argument(
        "--accuracy", type=_size, default=1e-3, metavar="E", help="relative error per pixel to aim at (default: 0.001)"
    )
    parser.add_argument(
        "--model", type=_index, metavar="N", help="which of several macro models, from 0 (default: the likeliest)"
    )
    parser.add_argument(
        "--pair",
        action="store_true",
        default=None,
        help='keep the macro gradient, to map both images of a merging pair (default with side = "pair" only)',
    )
    parser.add_argument(
        "--caustics", action="store_true", help="trace the caustics too: over the map, and as a table (caustics.ecsv)"
    )
    parser.add_argument("--plan", action="store_true", help="print what the map would take, and stop")
    add_shared(parser, "map")


def _size(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not 0.0 < value < math.inf:
        raise argparse.ArgumentTypeError(f"must be a positive number, got {text[:40]!r}")
    return value


def _pixels(text: str) -> int:
    if not (text.isascii() and text.isdigit() and len(text) < 10 and 1 <= int(text) <= _MOST_PIXELS):
        raise argparse.ArgumentTypeError(f"must be a whole number from 1 to {_MOST_PIXELS}, got {text[:40]!r}")
    return int(text)


def _index(text: str) -> int:
    if not (text.isascii() and text.isdigit() and len(text) < 10):
        raise argparse.ArgumentTypeError(f"must be a whole number, 0 or more, got {text[:40]!r}")
    return int(text)


def run(options: argparse.Namespace) -> int:
    """Run the verb; returns the exit status."""
    from crossing.cli.main import INTERRUPTED
    from crossing.event import read_event, require
    from crossing.outputs import OutputFolder

    event = read_event(options.file)
    require(event, "macro", "microlenses", purpose="crossing map")
    folder = OutputFolder(out_folder(options, "map"), "map", overwrite=options.overwrite)
    if not options.plan:
        folder.check(_files(options))

    from crossing.report.map import plan_text
    from crossing.shooting.from_event import local_setup
    from crossing.shooting.maps.mapping import magnification_map, plan_map

    setup = local_setup(event, model=options.model, pair=options.pair)
    height = options.width if options.height is None else options.height
    field = setup.draw((0.5 * options.width, 0.5 * height), options.seed)
    asked = {
        "width": options.width,
        "height": height,
        "pixels": options.pixels,
        "method": options.method,
        "accuracy": options.accuracy,
    }
    if options.plan or (sys.stderr.isatty() and not options.quiet):
        plan = plan_map(field, **asked, threads=options.threads)
        if options.plan:
            return _tell_plan(options, plan)
        print(f"crossing map: {plan_text(plan)}", file=sys.stderr)
    checkpoint = folder.path / _CHECKPOINT
    try:
        with _made(folder.path):
            chart = magnification_map(field, **asked, threads=options.threads, checkpoint=checkpoint)
    except KeyboardInterrupt:
        if not checkpoint.exists():
            raise
        print(
            f"crossing map: interrupted; {checkpoint} keeps what is done, and the same command goes on from there",
            file=sys.stderr,
        )
        return INTERRUPTED
    asked |= {"seed": options.seed, "model": options.model, "pair": options.pair}
    return _deliver(options, folder, setup.label(chart, asked), _traced(options, field, chart))


def _files(options: argparse.Namespace) -> tuple[str, ...]:
    return (*_FILES, _CAUSTICS) if options.caustics else _FILES


def _traced(options: argparse.Namespace, field: StarField, chart: MagnificationMap) -> CausticNetwork | None:
    from crossing.shooting.caustics.network import trace_caustics

    return trace_caustics(field, chart.center, chart.width, height=chart.height) if options.caustics else None


def _tell_plan(options: argparse.Namespace, plan: MapPlan) -> int:
    from dataclasses import asdict

    from crossing.report.map import plan_text

    if options.json:
        document = {"verb": "map", "plan": asdict(plan)}
        sys.stdout.write(json_text(document) + "\n")
    else:
        print(plan_text(plan))
    return 0


@contextmanager
def _made(path: Path) -> Iterator[None]:
    """Make a folder for the checkpoint, and take it back where nothing was left in it."""
    made = [place for place in (path, *path.parents) if not place.exists()]
    path.mkdir(parents=True, exist_ok=True)
    try:
        yield
    finally:
        with suppress(OSError):
            for place in made:
                place.rmdir()


def _deliver(
    options: argparse.Namespace, folder: OutputFolder, chart: MagnificationMap, network: CausticNetwork | None
) -> int:
    """Write the files and tell what is in them; returns the exit status."""
    from crossing.report.map import CAUTIONS, map_figure, map_text
    from crossing.report.tables import table_bytes
    from crossing.shooting.caustics.network import FLAGS as CAUSTIC_FLAGS
    from crossing.shooting.maps.magnification_map import FLAGS
    from crossing.shooting.maps.map_files import write_hdus

    found = chart.statistics()
    content = {
        "verb": "map",
        "event": chart.description["event"]["name"],
        "file": str(folder.path / "map.fits"),
        **chart.to_dict(),
        "statistics": found.to_dict(),
        "cautions": list(CAUTIONS),
    }
    if network is not None:
        content["caustics"] = network.to_dict()
    document = json_text(content) + "\n"
    with folder.transaction() as files:
        write_hdus(chart, files.path("map.fits"))
        files.write_bytes("map.json", document.encode())
        files.write_bytes("statistics.ecsv", table_bytes(found.to_table()))
        if network is not None:
            files.write_bytes(_CAUSTICS, table_bytes(network.to_table()))
        map_figure(chart, found, network).savefig(files.path("map.png"), dpi=150, format="png")
    if options.json:
        sys.stdout.write(document)
    elif not options.quiet:
        print(map_text(chart, found, network))
        print(f"\nwritten to {folder.path}: {', '.join(_files(options))}")
    flags = {name: FLAGS[name] for name in chart.flags}
    flags |= {} if network is None else {name: CAUSTIC_FLAGS[name] for name in network.flags}
    if flags:
        reasons = "; ".join(f"{name}: {meaning}" for name, meaning in flags.items())
        print(f"crossing map: {options.file}: done, but flagged: {reasons}", file=sys.stderr)
        return 3
    return 0
