"""Event files out of event files: the same lens, star and bands, with another name and other photometry."""

from __future__ import annotations

import json
import re
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Final

from crossing.errors import InputError
from crossing.event.reader import load_toml

__all__ = ["rewritten_event", "toml_text"]

_LONGEST_NAME: Final = 64
_BARE_KEY: Final = re.compile(r"[A-Za-z0-9_-]+")
# A quantity with its uncertainty stays on one line.
_VALUE_KEYS: Final = frozenset({"value", "error", "low", "high", "scale"})
# Paths that a macro model may hold; relative ones start from the folder of the file they stand in.
_PATH_KEYS: Final = ("file", "convergence", "shear1", "shear2", "shear", "deflection1", "deflection2", "realisations")


def rewritten_event(path: Path, *, suffix: str, photometry: Mapping[str, Any], comment: Iterable[str] = ()) -> str:
    """Text of an event file like another one, but with photometry of its own.

    Parameters
    ----------
    path : Path
        The event file to start from.
    suffix : str
        What to add to the event's name; the name is cut where both together are too long.
    photometry : mapping
        The new ``[photometry]``.
    comment : iterable of str
        Lines for the top of the file.

    Returns
    -------
    str
        TOML. ``[counterpart]`` is left out, since it belongs to the old photometry; paths of maps become absolute.

    Raises
    ------
    InputError
        If the file cannot be read any more.
    """
    root, _ = load_toml(path)
    data: dict[str, Any] = {key: root.get(key, lambda raw: raw) for key in root}
    event = data.get("event")
    if not isinstance(event, dict):
        raise InputError('must be given; add [event] with name = "..."', source=path, where="event")
    name = str(event.get("name", ""))[: _LONGEST_NAME - len(suffix)].rstrip() + suffix
    data = {key: value for key, value in data.items() if key not in ("photometry", "counterpart")}
    data["event"] = {**event, "name": name}
    if isinstance(data.get("macro"), dict):
        data["macro"] = _rebased(data["macro"], path.parent.absolute())
    data["photometry"] = dict(photometry)
    lines = [f"# {' '.join(line.split())}" for line in comment]
    return "\n".join(lines) + "\n\n" * bool(lines) + toml_text(data)


def _rebased(macro: Mapping[str, Any], folder: Path) -> dict[str, Any]:
    """A macro model whose paths no longer depend on where the file stands."""
    out: dict[str, Any] = {}
    for key, value in macro.items():
        if key in ("maps", "models", "members") and isinstance(value, (dict, list)):
            tables = value if isinstance(value, list) else [value]
            rebased = [_rebased(table, folder) if isinstance(table, dict) else table for table in tables]
            out[key] = rebased if isinstance(value, list) else rebased[0]
        else:
            out[key] = str(folder / value) if key in _PATH_KEYS and isinstance(value, str) else value
    return out


def toml_text(data: Mapping[str, Any]) -> str:
    """TOML of nested tables, lists, strings, numbers and booleans.

    Parameters
    ----------
    data : mapping
        What `tomllib` would read back from the text.
    """
    return "\n".join(_table(data, "")).lstrip("\n") + "\n"


def _table(data: Mapping[str, Any], place: str) -> list[str]:
    lines = [f"{_key(key)} = {_inline(value)}" for key, value in data.items() if not _is_section(value)]
    for key, value in data.items():
        if not _is_section(value):
            continue
        inner = f"{place}.{_key(key)}" if place else _key(key)
        for one in value if isinstance(value, list) else [value]:
            header = f"[[{inner}]]" if isinstance(value, list) else f"[{inner}]"
            # A table that holds nothing but tables is named by them.
            plain = isinstance(value, dict) and one and all(map(_is_section, one.values()))
            lines += _table(one, inner) if plain else ["", header, *_table(one, inner)]
    return lines


def _is_section(value: Any) -> bool:
    """Whether a value gets a header of its own: a table, or a list of tables, that is no quantity."""
    if isinstance(value, list):
        return bool(value) and all(isinstance(item, dict) and _is_section(item) for item in value)
    return isinstance(value, dict) and not (value and value.keys() <= _VALUE_KEYS)


def _key(key: str) -> str:
    return key if _BARE_KEY.fullmatch(key) else _inline(key)


def _inline(value: Any) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{_key(key)} = {_inline(item)}" for key, item in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(_inline(item) for item in value) + "]"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):  # JSON's escapes are TOML's, but for this character
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    return str(value) if isinstance(value, int) else repr(value)
