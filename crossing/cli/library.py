"""``crossing library``: what tracks are kept, how large and how old they are; fill a cell, remove cells."""

from __future__ import annotations

import argparse
import math
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

from crossing.cli.options import examples, json_text
from crossing.errors import InputError

if TYPE_CHECKING:
    from crossing.shooting.library.ensemble import TrackEnsemble
    from crossing.shooting.library.library_files import CellRecord, TrackLibrary

__all__ = ["add_arguments", "run"]

_INTERRUPTED = 130
_MOST = 1_000_000


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Describe the verb and its options."""
    parser.description = examples(
        "crossing library --fill demo_lightcurves/well_sampled.toml --tracks 300",
        "crossing library --remove --all",
    ) + (
        "\n\nTracks over random star fields are computed once and kept, for all commands that compare light curves\n"
        "with them. They lie in CROSSING_LIBRARY, else in crossing/tracks of the user's cache (XDG_CACHE_HOME or\n"
        "~/.cache). Without options, lists what is there; what is removed is computed anew when it is needed."
    )
    parser.add_argument("--fill", type=Path, metavar="EVENT", help="compute the tracks of an event file (TOML)")
    parser.add_argument("--tracks", type=_count, metavar="N", help="with --fill: how many (default: 300)")
    parser.add_argument(
        "--length", type=_positive, metavar="L", help="with --fill: of each, in Einstein radii (default: 2)"
    )
    parser.add_argument("--accuracy", type=_positive, metavar="E", help="with --fill: relative (default: 0.002)")
    parser.add_argument("--model", type=_number, metavar="N", help="with --fill: which of several macro models, from 0")
    parser.add_argument(
        "--pair",
        action="store_true",
        default=None,
        help='with --fill: both images of a merging pair in one (default with side = "pair" only)',
    )
    parser.add_argument("--remove", nargs="*", metavar="KEY", help="remove cells; the first letters of a key will do")
    parser.add_argument("--all", action="store_true", help="with --remove: every cell")
    group = parser.add_argument_group("shared options")
    group.add_argument("--seed", type=_number, metavar="N", help="with --fill: root of the tracks' seeds (default: 0)")
    group.add_argument("--out", type=Path, metavar="DIR", help="folder for library.json, with --fill also a figure")
    group.add_argument("--json", action="store_true", help="print one JSON document on standard output, and no more")
    group.add_argument("--quiet", action="store_true", help="no progress, no summary")
    group.add_argument("--threads", type=_count, metavar="N", help="threads to use at most (default: all cores)")
    group.add_argument("--overwrite", action="store_true", help="replace files that this command did not write")


def _positive(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not 0.0 < value < math.inf:
        raise argparse.ArgumentTypeError(f"must be a positive number, got {text[:40]!r}")
    return value


def _number(text: str, least: int = 0) -> int:
    if not (text.isascii() and text.isdigit() and len(text) < 10 and least <= int(text) <= _MOST):
        raise argparse.ArgumentTypeError(f"must be a whole number from {least} to {_MOST}, got {text[:40]!r}")
    return int(text)


def _count(text: str) -> int:
    return _number(text, 1)


def run(options: argparse.Namespace) -> int:
    """Run the verb; returns the exit status."""
    _check(options)
    from crossing.outputs import OutputFolder
    from crossing.shooting.library.library_files import TrackLibrary

    names = ["library.json", *(["tracks.png"] if options.fill is not None else [])]
    folder = None
    if options.out is not None:
        folder = OutputFolder(options.out, "library", overwrite=options.overwrite)
        folder.check(names)
    library = TrackLibrary()
    document: dict[str, Any] = {"verb": "library", "folder": None if library.folder is None else str(library.folder)}
    ensemble = None
    if options.fill is not None:
        try:
            ensemble = _fill(options, library)
        except KeyboardInterrupt:
            print("crossing library: interrupted; tracks that were complete are kept", file=sys.stderr)
            return _INTERRUPTED
        document["filled"] = ensemble.to_dict()
    if options.remove is not None:
        document["removed"] = [record.to_dict() for record in _remove(options, library)]
    records = library.cells()
    document["cells"] = [record.to_dict() for record in records]
    document["bytes"] = sum(record.bytes for record in records)
    text = json_text(document) + "\n"
    if folder is not None:
        with folder.transaction() as files:
            files.write_bytes("library.json", text.encode())
            if ensemble is not None:
                ensemble.plot().figure.savefig(files.path("tracks.png"), dpi=150, format="png")  # type: ignore[union-attr]
    if options.json:
        sys.stdout.write(text)
    elif not options.quiet:
        print(_text(document, records))
    return _status(options, ensemble)


def _status(options: argparse.Namespace, ensemble: TrackEnsemble | None) -> int:
    if ensemble is None or not ensemble.flags:
        return 0
    told = f"{ensemble.statistics.flagged} of {len(ensemble)} tracks, the first is {ensemble.flags[0]}"
    print(f"crossing library: {options.fill}: done, but flagged: {told}", file=sys.stderr)
    return 3


def _check(options: argparse.Namespace) -> None:
    if options.remove is not None and bool(options.remove) == options.all:
        raise InputError("`--remove` must have keys or --all; `crossing library` lists the keys")
    if options.all and options.remove is None:
        raise InputError("`--all` must go with --remove; add it, or leave --all out")
    if options.fill is not None and options.remove is not None:
        raise InputError("`--fill` and `--remove` must not be given at once; run them one after the other")
    only = ("tracks", "length", "accuracy", "model", "pair", "seed")
    stray = [name for name in only if getattr(options, name) is not None]
    if stray and options.fill is None:
        raise InputError(f"`--{stray[0]}` must go with --fill; add --fill EVENT")


def _fill(options: argparse.Namespace, library: TrackLibrary) -> TrackEnsemble:
    """Compute what is missing of an event's cell."""
    from crossing.event import read_event
    from crossing.shooting.from_event import local_setup
    from crossing.shooting.library.ensemble import load_tracks
    from crossing.shooting.library.library_cell import TrackCell

    setup = local_setup(read_event(options.fill), model=options.model, pair=options.pair)
    told = {name: getattr(options, name) for name in ("length", "accuracy", "seed")}
    cell = TrackCell.from_setup(setup, **{name: value for name, value in told.items() if value is not None})
    library.prepare(cell)
    if library.fallback is not None:
        raise InputError(f"{library.fallback}; set CROSSING_LIBRARY to a folder that can be written")
    return load_tracks(cell, options.tracks or 300, threads=options.threads, library=library, say=_say)


def _say(text: str) -> None:
    print(f"crossing library: {text}", file=sys.stderr)


def _remove(options: argparse.Namespace, library: TrackLibrary) -> list[CellRecord]:
    keys = [record.key for record in library.cells()] if options.all else options.remove
    return [library.remove(key) for key in keys]


def _text(document: dict[str, Any], records: list[CellRecord]) -> str:
    lines = []
    if (filled := document.get("filled")) is not None:
        found = filled["statistics"]
        lines.append(
            f"{filled['key']}: {found['tracks']} tracks, {filled['computed']} of them new; mean magnification "
            f"{found['mean_magnification'][0]:.4g}, {found['crossings_per_einstein']:.3g} folds per Einstein radius\n"
        )
    removed = document.get("removed", [])
    lines += [f"removed {one['key']}: {one['tracks']} tracks, {_size(one['bytes'])}" for one in removed]
    if not records:
        return "\n".join([*lines, f"no tracks in {document['folder']}"])
    lines.append(f"{'key':<20}  {'tracks':>6}  {'size':>8}  {'age':>8}  cell")
    for record in records:
        told = record.to_dict()
        old = "" if record.current else " (of another version: of no use now)"
        lines.append(
            f"{record.key}  {record.tracks:>6}  {_size(record.bytes):>8}  {_age(told['age_days']):>8}  {record.words}"
            + old
        )
    lines.append(
        f"{len(records)} cell{'s' if len(records) > 1 else ''}, {_size(document['bytes'])} in {document['folder']}"
    )
    return "\n".join(lines)


def _size(count: float) -> str:
    for unit in ("B", "kB", "MB"):
        if count < 1000.0:
            return f"{count:.3g} {unit}"
        count /= 1000.0
    return f"{count:.3g} GB"


def _age(days: float) -> str:
    minutes = days * 1440.0
    if minutes < 120.0:
        return f"{minutes:.0f} min"
    return f"{minutes / 60.0:.0f} h" if days < 2.0 else f"{days:.0f} d"
