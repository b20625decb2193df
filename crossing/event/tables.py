"""Strict reading of one TOML table: known keys only, every problem with its file and key."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import TypeVar

from crossing.errors import InputError
from crossing.event.parsers import Parser
from crossing.event.wording import check_keys, describe, listed, quoted_key

__all__ = ["Table"]

T = TypeVar("T")


class Table:
    """One table of a TOML file.

    Parameters
    ----------
    data : mapping
        The parsed table.
    source : Path
        The file, for messages and for relative paths.
    where : str
        Dotted path of the table within the file; empty for the file itself. Arrays of tables count from 0:
        ``photometry[1]`` is the second.
    """

    __slots__ = ("_data", "source", "where")

    def __init__(self, data: Mapping[str, object], *, source: Path, where: str = "") -> None:
        self._data = data
        self.source = source
        self.where = where

    def __contains__(self, key: str) -> bool:
        return key in self._data

    def __iter__(self) -> Iterator[str]:
        return iter(self._data)

    def place(self, key: str) -> str:
        """Dotted path of `key` within the file."""
        return f"{self.where}.{quoted_key(key)}" if self.where else quoted_key(key)

    def error(self, problem: str, key: str | None = None) -> InputError:
        """Error about `key`, or about the table as a whole."""
        return InputError(problem, source=self.source, where=self.place(key) if key is not None else self.where)

    def only(self, *known: str) -> None:
        """Refuse all keys but `known`.

        Raises
        ------
        InputError
            For the first other key, with the nearest known one.
        """
        try:
            check_keys(self._data, known)
        except InputError as error:
            prefix = f"{self.where}." if self.where else ""
            raise InputError(error.problem, source=self.source, where=f"{prefix}{error.where}") from None

    def get(self, key: str, parse: Parser[T]) -> T | None:
        """Parsed value of `key`, or None if the table does not hold it.

        Raises
        ------
        InputError
            What `parse` complains about, with file and key.
        """
        if key not in self._data:
            return None
        try:
            return parse(self._data[key])
        except InputError as error:
            inner = str(error.where or "")
            dot = "." if inner and not inner.startswith("[") else ""
            raise InputError(error.problem, source=self.source, where=f"{self.place(key)}{dot}{inner}") from None

    def need(self, key: str, parse: Parser[T]) -> T:
        """Parsed value of a `key` that must be there.

        Raises
        ------
        InputError
            If the key is missing, or what `parse` complains about.
        """
        found = self.get(key, parse)
        if found is None:
            raise self.error(f"must be given; add {quoted_key(key)} = ...", key)
        return found

    def table(self, key: str) -> Table | None:
        """Table under `key`, or None.

        Raises
        ------
        InputError
            If `key` holds anything else.
        """
        if key not in self._data:
            return None
        inner = self._data[key]
        if not isinstance(inner, dict):
            raise self.error(f"must be one table, [{self.place(key)}], got {describe(inner)}", key)
        return Table(inner, source=self.source, where=self.place(key))

    def tables(self, key: str) -> list[Table]:
        """Tables under `key`: an array of them, or a plain one, which is a list of one; empty if there is none.

        Raises
        ------
        InputError
            If `key` holds anything else.
        """
        inner = self._data.get(key, {})
        place = self.place(key)
        if isinstance(inner, dict):
            return [Table(inner, source=self.source, where=place)] if key in self._data else []
        if not isinstance(inner, list) or not inner or not all(isinstance(item, dict) for item in inner):
            raise self.error(f"must be one table [{place}] or several [[{place}]], got {describe(inner)}", key)
        return [Table(item, source=self.source, where=f"{place}[{index}]") for index, item in enumerate(inner)]

    def one_of(self, *keys: str) -> str:
        """Name of the only one of `keys` that is there.

        Raises
        ------
        InputError
            If none is there, or several.
        """
        found = [key for key in keys if key in self._data]
        if len(found) != 1:
            got = "none of them" if not found else f"{listed(found, 'and')}; remove all but one"
            raise self.error(f"must hold exactly one of {listed(keys, 'and')}, got {got}")
        return found[0]

    def file(self, key: str, parse: Parser[str]) -> Path | None:
        """Path under `key`, relative ones taken from the folder of the file itself, or None."""
        name = self.get(key, parse)
        return None if name is None else self.source.parent / name
