"""Options that all verbs share, and how results leave the program."""

from __future__ import annotations

import argparse
import json
import math
from pathlib import Path
from typing import Any

__all__ = ["add_shared", "examples", "json_text", "out_folder"]


def examples(*lines: str) -> str:
    """Description of a verb that starts with its examples."""
    return "examples:\n" + "\n".join(f"  {line}" for line in lines)


def add_shared(parser: argparse.ArgumentParser, verb: str) -> None:
    """Add the options of every verb.

    Parameters
    ----------
    parser : argparse.ArgumentParser
        Parser of the verb.
    verb : str
        Its name, for the default output folder.
    """
    group = parser.add_argument_group("shared options")
    group.add_argument("--out", type=_folder, metavar="DIR", help=f"folder for the output files (default: NAME_{verb})")
    group.add_argument("--seed", type=_count, default=0, metavar="N", help="seed of the random numbers (default: 0)")
    group.add_argument("--json", action="store_true", help="print one JSON document on standard output, and no more")
    group.add_argument("--quiet", action="store_true", help="no progress, no summary")
    group.add_argument("--threads", type=_positive, metavar="N", help="threads to use at most (default: all cores)")
    group.add_argument("--overwrite", action="store_true", help="replace files that this command did not write")


def _folder(text: str) -> Path:
    if not text.strip():
        raise argparse.ArgumentTypeError("must be the name of a folder, got nothing")
    return Path(text)


def _count(text: str) -> int:
    return _whole(text, 0)


def _positive(text: str) -> int:
    return _whole(text, 1)


def _whole(text: str, least: int) -> int:
    if not (text.isascii() and text.isdigit() and len(text) < 40 and int(text) >= least):
        raise argparse.ArgumentTypeError(f"must be a whole number, {least} or more, got {text[:40]!r}")
    return int(text)


def out_folder(options: argparse.Namespace, verb: str) -> Path:
    """Where the output files go: ``--out``, or a folder named after the input file."""
    chosen: Path | None = options.out
    return chosen if chosen is not None else Path(f"{options.file.stem}_{verb}")


def json_text(document: Any) -> str:
    """Strict JSON: numbers that are not finite become null; ASCII, so that every terminal can print it."""
    return json.dumps(_finite(document), indent=2, allow_nan=False)


def _finite(item: Any) -> Any:
    if isinstance(item, dict):
        return {str(key): _finite(value) for key, value in item.items()}
    if isinstance(item, (list, tuple)):
        return [_finite(value) for value in item]
    if isinstance(item, float) and not math.isfinite(item):
        return None
    return item
