"""A run's output files: written whole or not at all, and never over a file that somebody else wrote."""

from __future__ import annotations

import errno
import hashlib
import json
import os
import re
import secrets
import sys
import time
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Final

from crossing.errors import InputError

__all__ = ["OutputFiles", "OutputFolder", "write_whole"]

_NO_SPACE: Final = frozenset({errno.ENOSPC, errno.EDQUOT, errno.EFBIG})
_LOCK_SECONDS: Final = 20.0


class OutputFiles:
    """Files of one run under temporary names; made by `OutputFolder.transaction`, never by hand.

    Attributes
    ----------
    written : tuple of pathlib.Path
        Final paths, filled once the transaction has ended well.
    """

    def __init__(self, folder: Path) -> None:
        self.written: tuple[Path, ...] = ()
        self._folder = folder
        self._token = secrets.token_hex(6)
        self._temporary: dict[str, Path] = {}

    def path(self, name: str) -> Path:
        """Temporary path to write `name` to; it has the same suffix, and must exist when the transaction ends."""
        _require_plain(name)
        # The suffix stays last, because writers of figures and tables choose their format by it.
        return self._temporary.setdefault(name, self._folder / f".crossing-{self._token}-{name}")

    def write_bytes(self, name: str, data: bytes) -> None:
        """Write `data` to the output file `name`."""
        self.path(name).write_bytes(data)


class OutputFolder:
    """Folder for the output files of one command.

    Parameters
    ----------
    path : str or os.PathLike
        The folder; made when the files are written, if it is not there.
    command : str
        Name of the command, such as ``fit``: letters, digits, ``_`` and ``-``.
    overwrite : bool, optional
        Replace whatever file is in the way.

    Notes
    -----
    ``.crossing-<command>.json`` in the folder lists name and SHA-256 of what the command wrote. A second run may
    replace those files while they are unchanged, and no others. While files are being replaced the list holds both
    the old and the new digest, so that a run killed half way does not lock the user out of the next one.
    """

    def __init__(self, path: str | os.PathLike[str], command: str, overwrite: bool = False) -> None:
        if not re.fullmatch(r"[A-Za-z0-9_-]+", command):
            raise ValueError(f"command must be letters, digits, _ and -, got {command!r}")
        self.path = Path(path)
        self.command = command
        self.overwrite = overwrite
        self._manifest = self.path / f".crossing-{command}.json"

    def check(self, names: Iterable[str]) -> None:
        """Refuse, before the work starts, what could not be written at its end; changes nothing on disk.

        Parameters
        ----------
        names : iterable of str
            Plain file names that the run is going to write.

        Raises
        ------
        InputError
            If the folder cannot be made or written to, or a file is in the way that this command did not write or
            that was changed since.
        """
        with _one_line_errors(self.path, lambda error: True):
            parent = self.path
            while not os.path.lexists(parent):
                parent = parent.parent
            if not parent.is_dir():
                raise InputError("must be a folder, got a file; choose another one with --out", source=parent)
            if not os.access(parent, os.W_OK | os.X_OK):
                raise InputError("cannot be written to; choose another folder with --out", source=parent)
            self._check_targets(names, self._read_manifest())

    @contextmanager
    def transaction(self) -> Iterator[OutputFiles]:
        """Collect files under temporary names and, if the block ends well, put them all in place.

        Yields
        ------
        OutputFiles
            Takes the files through ``write_bytes(name, data)`` and ``path(name)``.

        Raises
        ------
        InputError
            As `check`, and if the disk is full or a file cannot be written. No file of this run is left then, except
            when the system itself refuses in the middle of the final renaming: whole new files are then beside whole
            old ones.
        """
        with _one_line_errors(self.path, self._is_ours):
            made = _make_folder(self.path)
            files = OutputFiles(self.path)
            try:
                yield files
                self._commit(files)
            finally:
                for temporary in files._temporary.values():
                    temporary.unlink(missing_ok=True)
                _remove_empty(made)

    def _is_ours(self, error: OSError) -> bool:
        """Whether `error` is about writing here, rather than about something else that the work ran into."""
        if error.errno in _NO_SPACE:
            return True
        if error.filename is None:
            return False
        path = Path(os.fsdecode(error.filename))
        return path == self.path or path.name.startswith(".crossing-")

    def _commit(self, files: OutputFiles) -> None:
        absent = [name for name, temporary in files._temporary.items() if not temporary.is_file()]
        if absent:
            raise RuntimeError(f"asked for a path and wrote nothing there: {', '.join(absent)}")
        for temporary in files._temporary.values():
            _sync(temporary)
        digests = {name: _digest(temporary) for name, temporary in files._temporary.items()}
        with _locked(self.path):
            before = self._read_manifest()
            self._check_targets(digests, before)
            both = {name: [*before.get(name, []), digest] for name, digest in digests.items()}
            self._write_manifest({**before, **both})
            for name, temporary in files._temporary.items():
                os.replace(temporary, self.path / name)
            self._write_manifest({**before, **{name: [digest] for name, digest in digests.items()}})
        files.written = tuple(self.path / name for name in digests)

    def _check_targets(self, names: Iterable[str], known: Mapping[str, list[str]]) -> None:
        for name in names:
            _require_plain(name)
            target = self.path / name
            if target.is_dir() and not target.is_symlink():
                raise InputError("is a folder where a file must go; move it or choose another --out", source=target)
            if self.overwrite or not os.path.lexists(target):
                continue
            if name not in known or target.is_symlink():
                problem = f"is there already, and crossing {self.command} did not write it"
            elif _digest(target) not in known[name]:
                problem = f"was changed since crossing {self.command} wrote it"
            else:
                continue
            raise InputError(f"{problem}; choose another --out, or say --overwrite to replace it", source=target)

    def _read_manifest(self) -> dict[str, list[str]]:
        try:
            content = json.loads(self._manifest.read_text(encoding="utf-8"))
            return {str(name): [str(digest) for digest in digests] for name, digests in content["files"].items()}
        except FileNotFoundError:
            return {}
        except (ValueError, TypeError, KeyError, AttributeError, RecursionError):
            if self.overwrite:
                return {}
            raise InputError(
                f"is not the list of outputs that crossing {self.command} keeps; move it or say --overwrite",
                source=self._manifest,
            ) from None

    def _write_manifest(self, known: Mapping[str, list[str]]) -> None:
        content = {"command": self.command, "files": dict(sorted(known.items()))}
        write_whole(self._manifest, (json.dumps(content, indent=1) + "\n").encode(), overwrite=True)


def write_whole(path: str | os.PathLike[str], data: bytes, *, overwrite: bool = False) -> None:
    """Write one file whole or not at all, through a temporary file beside it.

    Parameters
    ----------
    path : str or os.PathLike
        File to write; its folder must be there.
    data : bytes
        The whole content.
    overwrite : bool, optional
        Replace a file that is there.

    Raises
    ------
    InputError
        If a file is there and `overwrite` does not say so, or if the file cannot be written.
    """
    target = Path(path)
    with _one_line_errors(target, lambda error: True):
        if not overwrite and os.path.lexists(target):
            raise InputError("is there already; choose another name or say overwrite=True", source=target)
        temporary = target.with_name(f".crossing-{secrets.token_hex(6)}-{target.name}")
        try:
            temporary.write_bytes(data)
            _sync(temporary)
            os.replace(temporary, target)
        finally:
            temporary.unlink(missing_ok=True)


def _require_plain(name: str) -> None:
    if name in {"", ".", ".."} or name.startswith(".crossing-") or Path(name).name != name:
        raise ValueError(f"name must be a plain file name, got {name!r}")


def _digest(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _sync(path: Path) -> None:
    """Force a file onto the disk: renaming first would leave an empty file after a power cut."""
    with path.open("rb+") as stream:
        os.fsync(stream.fileno())


def _make_folder(path: Path) -> list[Path]:
    """Make a folder with its parents; the new ones are returned, innermost first."""
    made: list[Path] = []
    missing = path
    while not os.path.lexists(missing):
        made.append(missing)
        missing = missing.parent
    path.mkdir(parents=True, exist_ok=True)
    return made


def _remove_empty(folders: Iterable[Path]) -> None:
    """Take back the folders that a failed run made; those that hold something stay."""
    with suppress(OSError):
        for folder in folders:
            folder.rmdir()


@contextmanager
def _one_line_errors(place: Path, ours: Callable[[OSError], bool]) -> Iterator[None]:
    """Turn an `OSError` about output files into an `InputError` that says what to do."""
    try:
        yield
    except OSError as error:
        if not ours(error):
            raise
        source = _readable_name(error, place)
        if error.errno in _NO_SPACE:
            problem = "the disk is full; free some space or choose another folder with --out"
        elif error.errno in {errno.EACCES, errno.EPERM, errno.EROFS}:
            problem = "cannot be written: permission denied; choose another folder with --out"
        else:
            problem = f"cannot be written: {error.strerror or error}; choose another folder with --out"
        raise InputError(problem, source=source) from error


def _readable_name(error: OSError, place: Path) -> str:
    """The file that `error` is about, under the name the user knows."""
    name = str(place) if error.filename is None else os.fsdecode(error.filename)
    return re.sub(r"\.crossing-[0-9a-f]{12}-", "", name)


@contextmanager
def _locked(folder: Path) -> Iterator[None]:
    """Let one run at a time rename its files in `folder`.

    The lock is on the folder itself, so that none is left behind; where a system cannot do that, atomic renaming
    alone keeps every file whole.
    """
    if sys.platform == "win32":
        yield
        return
    import fcntl

    handle = os.open(folder, os.O_RDONLY)
    try:
        deadline = time.monotonic() + _LOCK_SECONDS
        while True:
            try:
                fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
                break
            except BlockingIOError:
                if time.monotonic() > deadline:
                    raise InputError("another run is writing here; wait for it to end", source=folder) from None
                time.sleep(0.02)
            except OSError:
                break
        yield
    finally:
        os.close(handle)
