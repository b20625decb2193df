"""Macro lens of a segment: its own keys, and those that it shares with the others through ``[macro]``."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Final

from crossing.event.macro_section import read_macro, read_macro_model
from crossing.event.macro_ways import HALO_KEYS
from crossing.event.records import MacroRecord, Position
from crossing.event.tables import Table

__all__ = ["MACRO_KEYS", "check_shared_macro", "read_line_macro", "read_segment_macro"]

# What says which way is meant, and what else the way may use.
_WAYS: Final[dict[tuple[str, ...], tuple[str, ...]]] = {
    ("kappa", "gamma"): ("gradient",),
    ("mu_t",): ("mu_r", "gradient"),
    ("critical_distance",): ("gradient", "mu_r"),
    ("caustic_distance",): ("mu_r", "side", "gradient", "fold_strength"),
    ("maps",): (),
    ("velocity_dispersion", "members"): ("centre", *HALO_KEYS),
    ("mirror_pairs",): ("mu_r", "gradient", "side", "centre"),
}
_ALWAYS: Final = ("position", "position_error")
_OF_ALTERNATIVES: Final = ("name", "weight")
_OF_LINES: Final = ("maps", "velocity_dispersion", "members", "mirror_pairs")

MACRO_KEYS: Final = tuple(
    dict.fromkeys((*(key for lead, others in _WAYS.items() for key in (*lead, *others)), *_ALWAYS))
)
"""Keys of one macro model."""


class _Layered(Table):
    """A table with keys of another one that it does not hold itself; problems name where the key stands."""

    __slots__ = ("_elsewhere",)

    def __init__(self, own: Table, shared: Table, keys: tuple[str, ...]) -> None:
        inherited = [key for key in shared if key in keys and key not in own]
        self._elsewhere = {key: shared.place(key) for key in inherited}
        super().__init__(_raw(own, own) | _raw(shared, inherited), source=own.source, where=own.where)

    def place(self, key: str) -> str:
        """Dotted path of `key` within the file."""
        return self._elsewhere.get(key) or super().place(key)


def check_shared_macro(root: Table) -> None:
    """Refuse keys of ``[macro]`` that nobody would read.

    Raises
    ------
    InputError
        For the first of them.
    """
    shared = root.table("macro")
    if shared is None:
        return
    shared.only(*MACRO_KEYS, "models")
    if "models" not in shared:
        return
    for key in shared:
        if key != "models":
            raise shared.error("must not stand beside [[macro.models]]; move it into each of them", key)
    for model in shared.tables("models"):
        model.only(*MACRO_KEYS, *_OF_ALTERNATIVES)


def read_segment_macro(root: Table, segment: Table) -> tuple[MacroRecord, ...]:
    """Macro lens of one segment: one record, or one for each alternative.

    Notes
    -----
    The segment's keys stand beside its length, or in a table ``macro``. Those that it lacks come from ``[macro]``, as
    far as they belong to the way that the segment follows; with ``[[macro.models]]`` there are as many alternatives,
    unless the segment follows a way of its own.

    Raises
    ------
    InputError
        If the lens is not given in exactly one way, holds both images of a pair, or a number is impossible.
    """
    own = segment.table("macro")
    if own is None:
        own = Table(_raw(segment, MACRO_KEYS), source=segment.source, where=segment.where)
    else:
        for key in MACRO_KEYS:
            if key in segment:
                raise segment.error("must not stand beside macro; move it into that table", key)
        if "models" in own:
            return _single_images(own, read_macro(segment))
        own.only(*MACRO_KEYS)
    found = tuple(record for layer in _layers(own, root.table("macro")) for record in read_macro_model(layer))
    return _single_images(own, found)


def _single_images(own: Table, records: tuple[MacroRecord, ...]) -> tuple[MacroRecord, ...]:
    """The records, none of which holds both images of the pair."""
    for record in records:
        if record.side == "pair":
            problem = 'must be "minimum" or "saddle" in a campaign, got "pair"; give each image a segment of its own'
            raise own.error(problem, "side")
    return records


def _layers(own: Table, shared: Table | None) -> list[Table]:
    """The segment's keys on top of what it shares, one table for each alternative."""
    ways = [lead for lead in _WAYS if any(key in own for key in lead)]
    if shared is None or len(ways) > 1 or (ways and "models" in shared):
        return [own]
    if ways:
        return [_Layered(own, shared, (*ways[0], *_WAYS[ways[0]], *_ALWAYS))]
    return [_Layered(own, model, (*MACRO_KEYS, *_OF_ALTERNATIVES)) for model in _alternatives(shared)]


def _alternatives(shared: Table | None) -> list[Table]:
    if shared is None:
        return []
    return shared.tables("models") if "models" in shared else [shared]


def read_line_macro(root: Table, line: Table, start: Position) -> tuple[MacroRecord, ...]:
    """Shared macro lens at the start of ``[line]`` [deg].

    Raises
    ------
    InputError
        If there is none, it does not give a lens at any place on the sky, or anything in it is impossible.
    """
    models = _alternatives(root.table("macro"))
    if not models or not all(any(lead in model for lead in _OF_LINES) for model in models):
        ways = "[[macro.maps]], velocity_dispersion or [[macro.mirror_pairs]]"
        raise line.error(f"must go with a lens that is known everywhere; add {ways} without position")
    for model in models:
        if "position" in model:
            raise model.error("must not be given with [line], whose points say where; remove it", "position")
    place = Table({"position": [f"{angle!r} deg" for angle in start]}, source=line.source, where=line.where)
    layers = [_Layered(place, model, (*MACRO_KEYS, *_OF_ALTERNATIVES)) for model in models]
    return _single_images(line, tuple(record for layer in layers for record in read_macro_model(layer)))


def _raw(table: Table, keys: Iterable[str]) -> dict[str, object]:
    """What `table` holds under those `keys` that it has, as written."""
    return {key: table.get(key, lambda raw: raw) for key in keys if key in table}
