"""``crossing track EVENT``: simulated light curves of the event's star."""

from __future__ import annotations

import argparse
import math
import sys
import time
from pathlib import Path
from typing import TYPE_CHECKING, Any

from crossing.cli.options import add_shared, examples, json_text, out_folder

if TYPE_CHECKING:
    from crossing.event import Event
    from crossing.outputs import OutputFiles, OutputFolder
    from crossing.photometry.simulated import SimulatedEvent, SimulationOptions
    from crossing.shooting.from_event import LocalSetup

__all__ = ["add_arguments", "run"]

_SUMMARIES = ("track.json", "realisations.ecsv", "crossings.ecsv")
_MOST = 100_000


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Describe the verb and its options."""
    parser.description = examples(
        "crossing track demo_lightcurves/well_sampled.toml --peak",
        "crossing track event.toml --realisations 20 --duration 365 --cadence 5 --limit-sigma 3",
    ) + (
        "\n\nDraws stars, motions and star fields from an event file and follows each star's light through its field:\n"
        "noiseless curves, light curves as a survey would measure them, and an event file for each, which\n"
        "`crossing fit` reads. Tracks lie at random unless --peak puts a fold crossing into the middle."
    )
    parser.add_argument("file", type=Path, metavar="EVENT", help="event file (TOML); its photometry is not used")
    parser.add_argument(
        "--realisations", type=_number, default=1, metavar="N", help="how many light curves to simulate (default: 1)"
    )
    parser.add_argument(
        "--duration", type=_positive, default=100.0, metavar="D", help="length of the light curves [d] (default: 100)"
    )
    parser.add_argument(
        "--cadence", type=_positive, default=2.0, metavar="D", help="days between visits in all bands (default: 2)"
    )
    parser.add_argument("--start", type=_mjd, default=61000.0, metavar="MJD", help="begin (default: MJD 61000)")
    parser.add_argument(
        "--peak",
        type=_level,
        nargs="?",
        const=0.0,
        metavar="MU",
        help="put a fold crossing into the middle: any, or one that peaks at a magnification of at least MU",
    )
    parser.add_argument(
        "--limit-sigma",
        type=_positive,
        metavar="S",
        help="write measurements below S standard errors as upper limits (default: all as fluxes)",
    )
    parser.add_argument(
        "--accuracy", type=_positive, default=1e-3, metavar="E", help="relative, of the curves (default: 0.001)"
    )
    parser.add_argument(
        "--figures", type=_whole, default=3, metavar="N", help="draw the first N realisations (default: 3)"
    )
    parser.add_argument(
        "--model", type=_whole, metavar="N", help="which of several macro models, from 0 (default: the likeliest)"
    )
    parser.add_argument(
        "--pair",
        action="store_true",
        default=None,
        help='both images of a merging pair in one (default with side = "pair" only)',
    )
    parser.add_argument("--plan", action="store_true", help="simulate two, print what all would take, and stop")
    add_shared(parser, "track")


def _real(text: str, low: float, what: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not low <= value < math.inf or (what == "a positive number" and value == 0.0):
        raise argparse.ArgumentTypeError(f"must be {what}, got {text[:40]!r}")
    return value


def _positive(text: str) -> float:
    return _real(text, 0.0, "a positive number")


def _level(text: str) -> float:
    return _real(text, 0.0, "a magnification, or come after the event file where it has none")


def _mjd(text: str) -> float:
    return _real(text, -1e6, "a modified Julian date")


def _whole(text: str, least: int = 0) -> int:
    if not (text.isascii() and text.isdigit() and len(text) < 10 and least <= int(text) <= _MOST):
        raise argparse.ArgumentTypeError(f"must be a whole number from {least} to {_MOST}, got {text[:40]!r}")
    return int(text)


def _number(text: str) -> int:
    return _whole(text, 1)


def run(options: argparse.Namespace) -> int:
    """Run the verb; returns the exit status."""
    from crossing.event import read_event
    from crossing.outputs import OutputFolder

    event = read_event(options.file)
    folder = OutputFolder(out_folder(options, "track"), "track", overwrite=options.overwrite)
    if not options.plan:
        folder.check(_names(options))

    from crossing.photometry.simulated import SimulationOptions, check_depths
    from crossing.shooting.from_event import local_setup

    check_depths(event)
    chosen = SimulationOptions(
        duration=options.duration,
        cadence=options.cadence,
        start_mjd=options.start,
        peak=options.peak,
        limit_sigma=options.limit_sigma,
        accuracy=options.accuracy,
    )
    setup = local_setup(event, model=options.model, pair=options.pair)
    if options.plan:
        return _plan(options, setup, chosen)
    return _deliver(options, folder, setup, chosen)


def _stem(options: argparse.Namespace, number: int) -> str:
    return f"{number:0{len(str(options.realisations - 1))}d}"


def _names(options: argparse.Namespace) -> list[str]:
    """Every file that the run writes."""
    names = list(_SUMMARIES)
    for number in range(options.realisations):
        names += _own_names(options, number)
    return names


def _own_names(options: argparse.Namespace, number: int) -> list[str]:
    """Files of one realisation."""
    stem = _stem(options, number)
    names = [f"event_{stem}.toml", f"light_curve_{stem}.ecsv", f"curve_{stem}.ecsv"]
    return [*names, f"track_{stem}.png"] if number < options.figures else names


def _simulate(options: argparse.Namespace, setup: LocalSetup, chosen: SimulationOptions, number: int) -> SimulatedEvent:
    from crossing.photometry.simulated import simulate_event

    return simulate_event(setup, chosen, number=number, seed=options.seed, threads=options.threads)


def _plan(options: argparse.Namespace, setup: LocalSetup, chosen: SimulationOptions) -> int:
    first = _simulate(options, setup, chosen, 0)
    begin = time.perf_counter()
    _simulate(options, setup, chosen, 1)  # the first one has loaded the kernels
    seconds = (time.perf_counter() - begin) * options.realisations
    plan = {
        "realisations": options.realisations,
        "seconds": seconds,
        "stars": len(first.track.stars),
        "track_einstein": first.curve.length,
        "files": len(_names(options)),
    }
    if options.json:
        sys.stdout.write(json_text({"verb": "track", "plan": plan}) + "\n")
    else:
        print(
            f"about {seconds:.2g} s and {plan['files']} files, with {plan['stars']} stars a field and tracks of "
            f"{plan['track_einstein']:.2g} Einstein radii, if all go like the first; figures come on top"
        )
    return 0


def _deliver(options: argparse.Namespace, folder: OutputFolder, setup: LocalSetup, chosen: SimulationOptions) -> int:
    """Simulate, write the files and tell what is in them; returns the exit status."""
    from crossing.photometry.simulated import FLAGS
    from crossing.progress import track as progress
    from crossing.report.tables import table_bytes
    from crossing.report.track import crossings_table, realisations_table, track_text
    from crossing.stars.star_draws import star_prior_texts

    truths: list[dict[str, Any]] = []
    with folder.transaction() as files:
        for number in progress(range(options.realisations), "realisations"):
            found = _simulate(options, setup, chosen, number)
            _write_one(options, files, setup, found)
            truths.append(found.to_dict() | _paths(options, folder, number))
        priors = star_prior_texts(setup.event.star)
        document = json_text(_document(options, folder, setup, truths, priors)) + "\n"
        files.write_bytes("track.json", document.encode())
        files.write_bytes("realisations.ecsv", table_bytes(realisations_table(truths)))
        files.write_bytes("crossings.ecsv", table_bytes(crossings_table(truths)))
    if options.json:
        sys.stdout.write(document)
    elif not options.quiet:
        print(track_text(setup.event.name, truths, options.peak, priors))
        print(f"\nwritten to {folder.path}: {len(_names(options))} files; fit one with")
        print(f"  crossing fit {truths[0]['event_file']}")
    flags = dict.fromkeys(flag for truth in truths for flag in truth["flags"])
    if flags:
        reasons = "; ".join(f"{flag}: {FLAGS[flag]}" for flag in flags)
        print(f"crossing track: {options.file}: done, but flagged: {reasons}", file=sys.stderr)
        return 3
    return 0


def _paths(options: argparse.Namespace, folder: OutputFolder, number: int) -> dict[str, Any]:
    event, light_curve, curve = (str(folder.path / name) for name in _own_names(options, number)[:3])
    return {"event_file": event, "light_curve_file": light_curve, "curve_file": curve}


def _write_one(options: argparse.Namespace, files: OutputFiles, setup: LocalSetup, found: SimulatedEvent) -> None:
    """Event file, light curve, noiseless curve and, for the first ones, the figure."""
    from crossing.event.rewriting import rewritten_event
    from crossing.report.tables import table_bytes
    from crossing.report.track import track_figure
    from crossing.shooting.tracks.random_track import map_widths, surroundings

    event, light_curve, curve, *figure = _own_names(options, found.number)
    files.write_bytes(event, rewritten_event(
        setup.event.path,
        suffix=f" (simulated {found.number})",
        photometry={"file": light_curve, "kind": "flux"},
        comment=(
            f"Simulated by `crossing track` from {setup.event.path.name}: seed {options.seed}, realisation "
            f"{found.number}.",
            "The truth is in track.json.",
        ),
    ).encode())  # fmt: skip
    files.write_bytes(light_curve, table_bytes(found.light_curve.to_table()))
    files.write_bytes(curve, table_bytes(found.to_table()))
    if figure:
        middle = (0.5 * (found.track.start[0] + found.track.end[0]), 0.5 * (found.track.start[1] + found.track.end[1]))
        per_day, threads = found.motion.days_per_einstein, options.threads
        widths = map_widths(found.curve.length)
        around = [surroundings(found.track, middle, width, per_day, threads=threads) for width in widths]
        track_figure(found, around).savefig(files.path(figure[0]), dpi=150, format="png")


def _document(
    options: argparse.Namespace,
    folder: OutputFolder,
    setup: LocalSetup,
    truths: list[dict[str, Any]],
    priors: dict[str, str],
) -> dict[str, Any]:
    from crossing.photometry.simulated import FLAGS
    from crossing.report.track import CAUTIONS, placing_text

    event: Event = setup.event
    flags = list(dict.fromkeys(flag for truth in truths for flag in truth["flags"]))
    asked = ("realisations", "duration", "cadence", "start", "peak", "limit_sigma", "accuracy", "model", "pair", "seed")
    return {
        "verb": "track",
        "event": event.name,
        "files": [str(folder.path / name) for name in _names(options)],
        "status": ", ".join(flags) or "ok",
        "flags": flags,
        "flag_meanings": {flag: FLAGS[flag] for flag in flags},
        "images": 1 if setup.lens.gradient is None else 2,
        "kappa": setup.lens.kappa,
        "gamma": setup.lens.gamma,
        "kappa_star": setup.kappa_star,
        "parsec_per_einstein": setup.parsec_per_einstein,
        "days_per_einstein": setup.days_per_einstein,
        "placing": placing_text(options.peak),
        "realisations": truths,
        "priors": priors,
        "cautions": list(CAUTIONS),
        "provenance": {
            "versions": _versions(),
            "options": {name: getattr(options, name) for name in asked},
            "macro_model": setup.model,
            "macro_name": setup.name,
            "macro_models": len(event.macro),
            "inputs": [{"path": str(event.path), "sha256": event.sha256}],
        },
    }


def _versions() -> dict[str, str]:
    from importlib.metadata import version

    return {name: version(name) for name in ("crossing", "numpy", "numba")}
