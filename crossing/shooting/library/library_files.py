"""Where a library of tracks lies on disk: one folder a cell, one file a track, written whole or not at all.

No file is ever changed, and a track is the same whoever computes it, so that processes need not know of each other: the
last one to rename its file wins, with the same content.
"""

from __future__ import annotations

import errno
import json
import os
import re
import secrets
import shutil
import time
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

from crossing.errors import InputError
from crossing.shooting.library.library_cell import FORMAT_VERSION, NUMERICAL_VERSION, TrackCell
from crossing.shooting.library.library_track import LibraryTrack

__all__ = ["CellRecord", "TrackLibrary", "library_folder"]

_VARIABLE: Final = "CROSSING_LIBRARY"
_ABOUT: Final = "cell.json"
_TEMPORARY: Final = ".crossing-"
_KEY: Final = re.compile("[0-9a-f]{20}")
_STALE_SECONDS: Final = 86400.0
_FULL: Final = frozenset({errno.ENOSPC, errno.EDQUOT, errno.EFBIG})


def library_folder() -> Path | None:
    """Folder of the library: CROSSING_LIBRARY, else ``crossing/tracks`` in the user's cache; None without a home."""
    if chosen := os.environ.get(_VARIABLE, "").strip():
        return Path(chosen).expanduser()
    cache = os.environ.get("XDG_CACHE_HOME", "").strip()
    # The convention has relative paths ignored.
    if cache and Path(cache).is_absolute():
        return Path(cache) / "crossing" / "tracks"
    try:
        return Path.home() / ".cache" / "crossing" / "tracks"
    except RuntimeError:
        return None


@dataclass(frozen=True, slots=True, kw_only=True)
class CellRecord:
    """A cell as it lies on disk."""

    key: str
    """Name of its folder."""
    words: str
    """What it is for."""
    tracks: int
    """Tracks that are there."""
    bytes: int
    """Size of all of its files."""
    created: float
    """When it was begun [seconds since 1970]."""
    changed: float
    """When a track was last added."""
    current: bool
    """Whether this version would make the same tracks; others are of no use to it."""

    def to_dict(self) -> dict[str, Any]:
        """Everything, JSON-able, with the age in days."""
        return {
            "key": self.key,
            "cell": self.words,
            "tracks": self.tracks,
            "bytes": self.bytes,
            "age_days": max(0.0, time.time() - self.created) / 86400.0,
            "current": self.current,
        }


@dataclass
class TrackLibrary:
    """Tracks on disk, or in memory where no folder can be written.

    Parameters
    ----------
    folder : pathlib.Path or None
        Folder of the library; that of `library_folder` if left out. None keeps tracks in memory only.
    """

    folder: Path | None = field(default_factory=library_folder)
    """Where it lies; None in memory."""
    fallback: str | None = None
    """Why tracks are kept in memory, a line of text; None while they are kept on disk."""

    def __post_init__(self) -> None:
        self._memory: dict[tuple[str, int], LibraryTrack] = {}
        if self.folder is None:
            self.fallback = "there is no folder for the library of tracks, so tracks are kept in memory only"

    def prepare(self, cell: TrackCell) -> None:
        """Make a cell's folder and say in it what it is; go over to memory if that cannot be done.

        Raises
        ------
        InputError
            If the disk is full.
        """
        if self.folder is None or self.fallback is not None:
            return
        place = self.folder / cell.key
        about = {
            "format": FORMAT_VERSION,
            "numerics": NUMERICAL_VERSION,
            "words": cell.words,
            "parameters": cell.parameters,
        }
        try:
            place.mkdir(parents=True, exist_ok=True)
            if _read_about(place) != about:
                _write(place / _ABOUT, (json.dumps(about, indent=1) + "\n").encode())
            _sweep(place)
        except OSError as error:
            self._refused(error)

    def has(self, cell: TrackCell, index: int) -> bool:
        """Whether a track is there; it may yet turn out to be damaged."""
        if (cell.key, index) in self._memory:
            return True
        return self.folder is not None and _path(self.folder, cell, index).exists()

    def load(self, cell: TrackCell, index: int) -> LibraryTrack | None:
        """Track of a cell, None if it is not there.

        Raises
        ------
        InputError
            If its file is damaged.
        """
        if (found := self._memory.get((cell.key, index))) is not None:
            return found
        if self.folder is None:
            return None
        path = _path(self.folder, cell, index)
        try:
            data = path.read_bytes()
        except (FileNotFoundError, NotADirectoryError):
            return None
        except OSError as error:
            raise InputError(f"cannot be read: {error.strerror or error}", source=path) from None
        try:
            return LibraryTrack.from_bytes(data, cell, index)
        except InputError as error:
            raise error.located(source=path) from None

    def keep(self, cell: TrackCell, track: LibraryTrack) -> bool:
        """Keep a track; whether it is new.

        Raises
        ------
        InputError
            If the disk is full.
        """
        if self.folder is None or self.fallback is not None:
            self._memory[cell.key, track.index] = track
            return True
        path = _path(self.folder, cell, track.index)
        try:
            new = not path.exists()
            try:
                _write(path, track.to_bytes(cell))
            except FileNotFoundError:
                # Somebody removed the cell meanwhile.
                self.prepare(cell)
                _write(path, track.to_bytes(cell))
        except OSError as error:
            self._refused(error)
            self._memory[cell.key, track.index] = track
            return True
        return new

    def cells(self) -> list[CellRecord]:
        """All cells on disk, the newest first."""
        found = [record for path in self._folders() if (record := _record(path)) is not None]
        return sorted(found, key=lambda record: (-record.changed, record.key))

    def remove(self, key: str) -> CellRecord:
        """Take a cell away.

        Parameters
        ----------
        key : str
            Its key, or the first letters of it.

        Raises
        ------
        InputError
            If there is no such cell, or several, or it cannot be removed.
        """
        chosen = [record for record in self.cells() if record.key.startswith(key)] if key else []
        if len(chosen) != 1 or self.folder is None:
            count = "no cell" if not chosen else f"{len(chosen)} cells"
            raise InputError(
                f"`key` must be that of one cell, got {key!r}, which fits {count}; `crossing library` lists them",
                source=self.folder,
            )
        for left in self.folder.glob(f"{_TEMPORARY}*"):
            shutil.rmtree(left, ignore_errors=True)
        place = self.folder / chosen[0].key
        # Under another name first, so that no half of a cell can be met.
        aside = place.with_name(f"{_TEMPORARY}{secrets.token_hex(6)}-{place.name}")
        try:
            os.replace(place, aside)
            shutil.rmtree(aside)
        except OSError as error:
            raise InputError(f"cannot be removed: {error.strerror or error}", source=place) from None
        return chosen[0]

    def _folders(self) -> Iterator[Path]:
        if self.folder is None or not self.folder.is_dir():
            return
        with suppress(OSError):
            yield from (path for path in self.folder.iterdir() if not path.name.startswith(_TEMPORARY))

    def _refused(self, error: OSError) -> None:
        """Go over to memory, unless the disk is full: that can be helped."""
        if error.errno in _FULL:
            raise InputError(
                f"the disk is full; free some space, remove cells with `crossing library --remove`, or set {_VARIABLE} "
                "to another folder; what was complete is kept",
                source=self.folder,
            ) from error
        reason = error.strerror or str(error)
        self.fallback = f"{self.folder} cannot be written ({reason.lower()}), so new tracks are kept in memory only"


def _path(folder: Path, cell: TrackCell, index: int) -> Path:
    return folder / cell.key / f"track_{index:06d}.npz"


def _write(path: Path, data: bytes) -> None:
    """Write a file under another name and rename it; raises OSError."""
    temporary = path.with_name(f"{_TEMPORARY}{secrets.token_hex(6)}-{path.name}")
    try:
        with temporary.open("wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        os.replace(temporary, path)
    finally:
        with suppress(OSError):
            temporary.unlink(missing_ok=True)


def _sweep(place: Path) -> None:
    """Remove what killed processes left half-written long ago."""
    for path in place.glob(f"{_TEMPORARY}*"):
        with suppress(OSError):
            if time.time() - path.stat().st_mtime > _STALE_SECONDS:
                path.unlink()


def _read_about(place: Path) -> dict[str, Any]:
    """What a cell says of itself; nothing if that is missing or damaged."""
    try:
        about = json.loads((place / _ABOUT).read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        return {}
    return about if isinstance(about, dict) else {}


def _record(place: Path) -> CellRecord | None:
    """What lies in a folder; None if that is no cell."""
    if not _KEY.fullmatch(place.name):
        return None
    about = _read_about(place)
    versions = (about.get("format"), about.get("numerics"))
    try:
        changed = place.stat().st_mtime
        sizes = [(path.name, path.stat()) for path in place.iterdir()]
    except OSError:
        return None
    tracks = [stat for name, stat in sizes if name.startswith("track_")]
    created = min((stat.st_mtime for _, stat in sizes), default=changed)
    return CellRecord(
        key=place.name,
        words=str(about.get("words", "its description is damaged")),
        tracks=len(tracks),
        bytes=sum(stat.st_size for _, stat in sizes),
        created=created,
        changed=max((stat.st_mtime for stat in tracks), default=created),
        current=versions == (FORMAT_VERSION, NUMERICAL_VERSION),
    )
