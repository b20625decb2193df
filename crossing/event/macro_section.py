"""``[macro]``: the macro lens at the event, given in exactly one way or as several alternatives."""

from __future__ import annotations

from dataclasses import replace
from typing import Final, Literal, cast

from crossing.errors import InputError
from crossing.event.macro_ways import HALO_KEYS, read_halo, read_maps, read_pairs
from crossing.event.parsers import (
    ANY,
    NONZERO,
    NOT_NEGATIVE,
    POSITIVE,
    Parser,
    choice,
    number,
    pair,
    sky_position,
    text,
    uncertain,
)
from crossing.event.quantities import ANGLE, DIMENSIONLESS, FOLD_STRENGTH, GRADIENT
from crossing.event.records import MacroRecord, Way
from crossing.event.tables import Table
from crossing.event.values import Value
from crossing.event.wording import listed

__all__ = ["read_macro", "read_macro_model"]

# Keys that say which way is meant.
_LEADS: Final[dict[str, tuple[str, ...]]] = {
    "kappa+gamma": ("kappa", "gamma"),
    "mu_t+mu_r": ("mu_t",),
    "critical_distance": ("critical_distance",),
    "caustic_distance": ("caustic_distance",),
    "maps": ("maps",),
    "velocity_dispersion": ("velocity_dispersion", "members"),
    "mirror_pairs": ("mirror_pairs",),
}
_NEEDS: Final[dict[str, tuple[str, ...]]] = {
    "kappa+gamma": ("kappa", "gamma"),
    "mu_t+mu_r": ("mu_t", "mu_r"),
    "critical_distance": ("critical_distance", "gradient", "mu_r"),
    "caustic_distance": ("caustic_distance", "mu_r", "side"),
    "maps": ("maps", "position"),
    "velocity_dispersion": ("centre", "position"),
    "mirror_pairs": ("mirror_pairs", "position"),
}
_MAY: Final[dict[str, tuple[str, ...]]] = {
    "kappa+gamma": ("gradient",),
    "mu_t+mu_r": ("gradient",),
    "caustic_distance": ("gradient", "fold_strength"),
    "velocity_dispersion": HALO_KEYS,
    "mirror_pairs": ("mu_r", "gradient", "side", "centre"),
}
_ALWAYS: Final = ("position", "position_error")
_OF_ALTERNATIVES: Final = ("name", "weight")
_KNOWN: Final = tuple(dict.fromkeys(key for keys in (*_NEEDS.values(), *_MAY.values(), _ALWAYS) for key in keys))
_SERVING: Final = (
    "kappa + gamma, mu_t + mu_r, critical_distance + gradient + mu_r, caustic_distance + (gradient or fold_strength) "
    "+ mu_r + side, or with position one of [[macro.maps]], velocity_dispersion + centre, and [[macro.mirror_pairs]]"
)
# An eigenvalue that is zero up to the rounding of decimal numbers such as 1 - 0.7 - 0.3.
_ROUNDING: Final = 1e-12


def read_macro(root: Table) -> tuple[MacroRecord, ...]:
    """All macro models of the file: none, those of ``[macro]``, or those of ``[[macro.models]]``."""
    table = root.table("macro")
    if table is None:
        return ()
    if "models" not in table:
        table.only(*_KNOWN, "models")
        return read_macro_model(table)
    for key in table:
        if key != "models" and key in _KNOWN:
            raise table.error("must not stand beside [[macro.models]]; move it into each of them", key)
    table.only("models", *_KNOWN)
    models = table.tables("models")
    for model in models:
        model.only(*_KNOWN, *_OF_ALTERNATIVES)
    return tuple(record for model in models for record in read_macro_model(model))


def read_macro_model(table: Table) -> tuple[MacroRecord, ...]:
    """Macro models of a table whose keys are known to be spelt right: one, or one for each lens model with maps.

    Raises
    ------
    InputError
        If the model is not given in exactly one way, a key of that way is missing, or a number is impossible.
    """
    way = _way_of(table)
    distance_way = way in ("critical_distance", "caustic_distance", "mirror_pairs")
    model = MacroRecord(
        way=cast(Way, way),
        name=table.get("name", text),
        weight=table.get("weight", number(DIMENSIONLESS, POSITIVE)) or 1.0,
        kappa=table.get("kappa", uncertain(DIMENSIONLESS, NOT_NEGATIVE)),
        gamma=table.get("gamma", uncertain(DIMENSIONLESS)),
        mu_t=table.get("mu_t", uncertain(DIMENSIONLESS, NONZERO)),
        mu_r=table.get("mu_r", uncertain(DIMENSIONLESS, NONZERO)),
        critical_distance=table.get("critical_distance", uncertain(ANGLE)),
        # A distance is positive on the minimum side, where lam_t > 0: the gradient along it must be positive too.
        gradient=table.get("gradient", _gradient(positive=distance_way)),
        fold_strength=table.get("fold_strength", uncertain(FOLD_STRENGTH, POSITIVE)),
        caustic_distance=table.get("caustic_distance", uncertain(ANGLE, POSITIVE)),
        side=cast(Literal["minimum", "saddle", "pair"] | None, table.get("side", choice("minimum", "saddle", "pair"))),
        position=table.get("position", sky_position),
        position_error=table.get("position_error", number(ANGLE, POSITIVE)),
        centre=table.get("centre", sky_position),
        halo=read_halo(table) if way == "velocity_dispersion" else None,
        mirror_pairs=read_pairs(table) if way == "mirror_pairs" else (),
        place=table.where,
    )
    if model.position_error is not None and model.position is None:
        raise table.error("must go with position; add the position or remove position_error", "position_error")
    _check_eigenvalues(table, model)
    return _each_map(table, model) if way == "maps" else (model,)


def _each_map(table: Table, model: MacroRecord) -> tuple[MacroRecord, ...]:
    """One alternative for each lens model that has maps; together they weigh as much as their common model."""
    maps = read_maps(table)
    total = sum(weight for _, weight in maps)
    places = [inner.where for inner in table.tables("maps")]
    return tuple(
        replace(model, name=chart.name or model.name, weight=model.weight * weight / total, maps=(chart,), place=place)
        for (chart, weight), place in zip(maps, places, strict=True)
    )


def _way_of(table: Table) -> str:
    """Name of the one way that the table follows, all of whose keys are there and none of another's."""
    ways = [way for way, leads in _LEADS.items() if any(lead in table for lead in leads)]
    if len(ways) != 1:
        got = f"{listed(ways, 'and')}; remove all but one" if ways else f"none; write {_SERVING}"
        raise table.error(f"must be given in exactly one way, got {got}")
    way = ways[0]
    lead = next(key for key in _LEADS[way] if key in table)
    for key in _NEEDS[way]:
        if key not in table:
            raise table.error(f"must be given with {lead}; add it, or give {_SERVING}", key)
    if way == "caustic_distance":
        table.one_of("gradient", "fold_strength")
    if way == "mirror_pairs" and isinstance(table.get("gradient", lambda raw: raw), list):
        raise table.error(
            "must be one number along the stretch beside mirror_pairs, got an array; give one", "gradient"
        )
    allowed = (*_NEEDS[way], *_MAY.get(way, ()), *_ALWAYS, *_OF_ALTERNATIVES)
    for key in table:
        if key not in allowed:
            raise table.error(f"must not stand beside {listed(_NEEDS[way], 'and')}; remove it", key)
    return way


def _gradient(*, positive: bool) -> Parser[tuple[Value, Value]]:
    """Parser of a scalar gradient (along x) or an array of its x and y components."""
    along_x = uncertain(GRADIENT, POSITIVE if positive else ANY)
    both = pair(along_x, uncertain(GRADIENT), "the gradient along x and y")

    def parse(raw: object) -> tuple[Value, Value]:
        gx, gy = both(raw) if isinstance(raw, list) else (along_x(raw), Value.exact(0.0))
        if gx == gy == Value.exact(0.0):
            raise InputError("must be different from 0; remove it if it is not known")
        return gx, gy

    return parse


def _check_eigenvalues(table: Table, model: MacroRecord) -> None:
    """Refuse a point exactly on a critical curve, unless a gradient leads away from it."""
    if model.kappa is None or model.gamma is None or not (model.kappa.is_exact and model.gamma.is_exact):
        return
    lam_t = 1 - model.kappa.a - model.gamma.a
    lam_r = 1 - model.kappa.a + model.gamma.a
    if abs(lam_r) < _ROUNDING:
        raise table.error("must not be 1 + gamma, where the radial magnification is infinite; change one", "kappa")
    if abs(lam_t) < _ROUNDING and model.gradient is None:
        raise table.error("must not be 1 - gamma, where the magnification is infinite; add a gradient", "kappa")
