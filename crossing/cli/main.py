"""Entry point of the command line: finds the verb, maps errors to exit statuses."""

from __future__ import annotations

import argparse
import io
import os
import sys
import traceback
from collections.abc import Sequence
from importlib import import_module
from typing import NoReturn

from crossing.errors import InputError

__all__ = ["DONE", "FAULT", "FLAGGED", "INTERRUPTED", "INVALID", "main"]

DONE, FAULT, INVALID, FLAGGED, INTERRUPTED = 0, 1, 2, 3, 130

# Verb, module and one line of help; modules are imported when their verb is called.
_VERBS = {
    "fit": ("crossing.cli.fit", "fit a caustic crossing to a light curve: radius, temperature, luminosity"),
    "library": ("crossing.cli.library", "list, fill or remove the tracks that are kept on disk"),
    "macro": ("crossing.cli.macro", "say what lens models tell at the event, and trace their critical curves"),
    "map": ("crossing.cli.map", "map the magnification of a random star field over the source plane"),
    "peak": ("crossing.cli.peak", "predict peak magnifications, their rates and durations"),
    "rates": ("crossing.cli.rates", "predict how many lensed-star events a programme will see on an arc"),
    "track": ("crossing.cli.track", "simulate light curves of the event's star on random tracks"),
}

# Read by linear-algebra libraries when they are loaded, which no verb has done before it runs.
_THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")

_DESCRIPTION = (
    "Single stars that cross micro-caustics behind galaxy clusters. Exit status: 0 done; 2 bad input; "
    "3 done, but the result is flagged as not to be trusted; 1 a fault of the program; 130 interrupted."
)


class _Parser(argparse.ArgumentParser):
    """Argument parser whose errors are a single line, and whose help starts with examples where there are some."""

    def format_help(self) -> str:
        usage, text = self.format_usage(), super().format_help()
        head, _, rest = text.removeprefix(usage).lstrip().partition("\n\n")
        return f"{head}\n\n{usage}\n{rest}" if head.startswith("examples:") else text

    def error(self, message: str) -> NoReturn:
        self.exit(INVALID, f"{self.prog}: {' '.join(message.split())}; see {self.prog} --help\n")


def _parser(verb: str | None) -> argparse.ArgumentParser:
    parser = _Parser(prog="crossing", description=_DESCRIPTION, allow_abbrev=False)
    parser.add_argument("--version", action="store_true", help="print the version and stop")
    verbs = parser.add_subparsers(dest="verb", metavar="VERB", parser_class=_Parser)
    for name, (module, summary) in _VERBS.items():
        child = verbs.add_parser(
            name, help=summary, formatter_class=argparse.RawDescriptionHelpFormatter, allow_abbrev=False
        )
        if name == verb:
            import_module(module).add_arguments(child)
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str, optional
        Words after ``crossing``; those of the process if None.

    Returns
    -------
    int
        Exit status.
    """
    words = list(sys.argv[1:] if arguments is None else arguments)
    verb = next((word for word in words if word in _VERBS), None)
    parser = _parser(verb)
    try:
        options = parser.parse_args(words)
    except SystemExit as stop:
        return int(stop.code or 0)
    if options.version:
        from importlib.metadata import version

        print(f"crossing {version('crossing')}")
        return DONE
    if options.verb is None:
        parser.print_help()
        return DONE
    return _run(options)


def _run(options: argparse.Namespace) -> int:
    from crossing.progress import quiet

    if options.threads is not None:
        os.environ.update(dict.fromkeys(_THREAD_VARIABLES, str(options.threads)))
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(errors="backslashreplace")  # names from files on terminals that cannot show them
    try:
        with quiet(options.quiet):
            status = int(import_module(_VERBS[options.verb][0]).run(options))
            sys.stdout.flush()
            return status
    except InputError as error:
        print(f"crossing {options.verb}: {error}", file=sys.stderr)
        return INVALID
    except KeyboardInterrupt:
        print(f"crossing {options.verb}: interrupted; nothing was written", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        # The reader of a pipe has left; keep the interpreter from complaining at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FAULT
    except Exception as error:  # a fault of the program: one line, unless more is asked for
        if os.environ.get("CROSSING_DEBUG"):
            traceback.print_exc()
        what = " ".join(f"{type(error).__name__}: {error}".split())
        print(
            f"crossing {options.verb}: fault of the program, please report it ({what}); "
            "CROSSING_DEBUG=1 shows where it happened",
            file=sys.stderr,
        )
        return FAULT
