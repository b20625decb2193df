"""Realisations of a lens model: many sets of maps that wildcards name."""

from __future__ import annotations

import glob
import os
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from crossing.errors import InputError
from crossing.optics.macro.lens_map import LensMap, read_lens_map
from crossing.optics.macro.map_files import split_plane
from crossing.optics.scales import LensScales

if TYPE_CHECKING:
    from crossing.event.records import MapRecord

__all__ = ["read_realisations", "realisation_files"]


def realisation_files(record: MapRecord) -> list[Path]:
    """Files that the wildcards of a record name, of all planes, in the order of their names."""
    if record.realisations is None:
        return []
    paths = {split_plane(text)[0] for text in record.planes.values()}
    return sorted({Path(name) for path in paths for name in glob.glob(_pattern(record.realisations, path))})


def read_realisations(record: MapRecord, scales: LensScales) -> Iterator[LensMap]:
    """Open the realisations of one lens model, one after the other and without reading their pixels.

    Parameters
    ----------
    record : MapRecord
        What the event file says. The wildcards name one file a realisation, whose extensions and layers are those of
        the planes; or, where the planes are in several files, ``{plane}`` in it stands for the stem of each of these.
    scales : LensScales
        Lens and source of the event.

    Yields
    ------
    LensMap
        In the order of their names.

    Raises
    ------
    InputError
        If no file fits, the planes have different numbers of files, or a file is bad.
    """
    if record.realisations is None:
        return
    pattern = record.realisations
    split = {key: split_plane(text) for key, text in record.planes.items()}
    if "{plane}" not in pattern and len({path for path, _, _ in split.values()}) > 1:
        raise InputError(
            "must hold {plane}, which stands for the stem of each plane's file, since the planes are in several files; "
            "add it",
            where="macro.maps.realisations",
        )
    files = {key: sorted(glob.glob(_pattern(pattern, path))) for key, (path, _, _) in split.items()}
    counts = {key: len(found) for key, found in files.items()}
    if not min(counts.values()) or len(set(counts.values())) > 1:
        got = ", ".join(f"{count} of {key}" for key, count in counts.items())
        raise InputError(
            f"must name as many files for every plane, got {got} with {pattern}; check the wildcards",
            where="macro.maps.realisations",
        )
    for number in range(next(iter(counts.values()))):
        planes = {key: files[key][number] + _suffix(text) for key, text in record.planes.items()}
        name = f"{record.name or 'map'} {number + 1}"
        one = replace(record, planes=planes, name=name, realisations=None)
        yield read_lens_map(one, scales, check=False)


def _pattern(pattern: str, path: Path) -> str:
    stem = path.name.removesuffix(".gz").rsplit(".", 1)[0]
    return pattern.replace("{plane}", glob.escape(stem))


def _suffix(text: str) -> str:
    return "" if os.path.exists(text) or not text.endswith("]") else text[text.rindex("[") :]
