"""From the file to the records."""

from __future__ import annotations

import hashlib
import os
import re
import stat
import tomllib
from pathlib import Path
from typing import Final

from crossing.errors import InputError
from crossing.event.checks import check_band_names, check_kappa_star, check_order
from crossing.event.macro_section import read_macro
from crossing.event.microlens_section import read_microlenses
from crossing.event.photometry_section import read_counterpart, read_photometry_tables
from crossing.event.records import Event
from crossing.event.sections import read_bands, read_cosmology, read_header, read_motion, read_redshift, read_star
from crossing.event.tables import Table

__all__ = ["build_event", "load_toml", "read_event", "require"]

_LARGEST: Final = 1 << 20  # bytes; an event file has some thousand
_TOML_PLACE: Final = re.compile(r"(.*?)\s*\(at (?:line (\d+), column (\d+)|end of document)\)", re.DOTALL)
_SECTIONS: Final = (
    *("event", "lens", "source", "cosmology", "macro", "microlenses", "motion", "star"),
    *("bands", "photometry", "counterpart"),
)
_CAMPAIGN_SECTIONS: Final = ("campaign", "segments", "line", "population", "schedules", "detection", "observed")
_REMEDIES: Final = {
    "lens": ("lens_redshift", "add [lens] with redshift = ..."),
    "source": ("source_redshift", "add [source] with redshift = ..."),
    "macro": ("macro", "add [macro] with kappa and gamma, or another way"),
    "microlenses": ("microlenses", "add [[microlenses]] with kappa_star"),
    "motion": ("motion", 'add [motion] with speed = "... km / s"'),
    "bands": ("bands", 'add [bands.NAME] with wavelength = "... um" for each band'),
    "photometry": ("photometry", 'add [photometry] with file = "..."'),
    "counterpart": ("counterpart", "add [counterpart] with file, limit or earlier"),
}


def read_event(path: str | os.PathLike[str]) -> Event:
    """Read an event file.

    Parameters
    ----------
    path : str or os.PathLike
        TOML file; relative paths in it start from its own folder. Files that it names are not opened.

    Returns
    -------
    Event
        Its contents, units stripped; sections that it lacks are empty. See `require`.

    Raises
    ------
    InputError
        If the file cannot be read, is not TOML, or holds anything that is unknown, missing, of the wrong type or
        unit, or physically impossible; one line that names the file and the key.
    """
    root, sha256 = load_toml(Path(path))
    return build_event(root, sha256)


def build_event(root: Table, sha256: str) -> Event:
    """Event out of the table of a whole file.

    Raises
    ------
    InputError
        As `read_event`.
    """
    for key in root:
        if key in _CAMPAIGN_SECTIONS:
            raise root.error("belongs in a campaign file; give this file to `crossing rates`", key)
    root.only(*_SECTIONS)
    name, mode = read_header(root)
    event = Event(
        name=name,
        mode=mode,
        path=root.source,
        sha256=sha256,
        lens_redshift=read_redshift(root, "lens"),
        source_redshift=read_redshift(root, "source"),
        cosmology=read_cosmology(root),
        macro=read_macro(root),
        microlenses=read_microlenses(root),
        motion=read_motion(root),
        star=read_star(root),
        bands=read_bands(root),
        photometry=read_photometry_tables(root),
        counterpart=read_counterpart(root),
    )
    check_order(root, event.lens_redshift, event.source_redshift)
    check_kappa_star(root, event.macro, event.microlenses)
    check_band_names(root, event.bands, event.microlenses, event.counterpart)
    return event


def require(event: Event, *sections: str, purpose: str = "this") -> None:
    """Insist on sections that an event file may otherwise lack.

    Parameters
    ----------
    event : Event
        The event.
    *sections : str
        Names as in the file: ``lens``, ``source``, ``macro``, ``microlenses``, ``motion``, ``bands``,
        ``photometry`` or ``counterpart``.
    purpose : str
        What needs them, for the message, such as ``crossing fit``.

    Raises
    ------
    InputError
        For the first section that is missing, with what to add.
    """
    for section in sections:
        attribute, remedy = _REMEDIES[section]
        if getattr(event, attribute) in (None, (), {}):
            raise InputError(f"must be given for {purpose}; {remedy}", source=event.path, where=section)


def load_toml(path: Path) -> tuple[Table, str]:
    """Read a TOML file as a whole.

    Parameters
    ----------
    path : Path
        The file.

    Returns
    -------
    root : Table
        Its top table.
    sha256 : str
        Hexadecimal SHA-256 of its bytes.

    Raises
    ------
    InputError
        If the file cannot be read, is larger than 1 MiB, is not UTF-8, or is not TOML; with line and column.
    """
    raw = _read_bytes(path)
    try:
        text = raw.decode("utf-8-sig")  # some editors put a byte order mark in front
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise InputError(
            "must be text in UTF-8; save it again in that encoding", source=path, where=f"line {line}"
        ) from None
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise _toml_error(path, text, str(error)) from None
    except RecursionError:
        raise InputError("must not nest arrays or tables hundreds of levels deep; flatten it", source=path) from None
    except ValueError:
        # Decimal integers of more than some thousand digits, which Python refuses to convert.
        raise InputError("must not hold integers of thousands of digits; shorten them", source=path) from None
    return Table(data, source=path), hashlib.sha256(raw).hexdigest()


def _read_bytes(path: Path) -> bytes:
    try:
        if not stat.S_ISREG(path.stat().st_mode):
            raise InputError("must be a regular file, got a folder or a device; give a TOML file", source=path)
        with path.open("rb") as handle:
            raw = handle.read(_LARGEST + 1)
    except InputError:
        raise
    except FileNotFoundError:
        raise InputError("must exist, got no such file; check the path", source=path) from None
    except (OSError, ValueError) as error:  # ValueError: a path with a null character
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(f"must be readable, got {reason!r}; check the path and its permissions", source=path) from None
    if len(raw) > _LARGEST:
        raise InputError("must be at most 1 MiB long; give a TOML file, not a data table", source=path)
    return raw


def _toml_error(path: Path, text: str, message: str) -> InputError:
    """Problem with its line and column, also where the parser only says "end of document"."""
    match = _TOML_PLACE.fullmatch(message)
    problem, line, column = match.groups() if match else (message, None, None)
    if line is None:
        line, column = text.count("\n") + 1, len(text) - text.rfind("\n")
    return InputError(f"{problem}; correct the TOML there", source=path, where=f"line {line}, column {column}")
