"""Checks that need more than one section of an event file."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from crossing.errors import InputError
from crossing.event.records import BandRecord, CounterpartRecord, MacroRecord, MicrolensRecord
from crossing.event.tables import Table
from crossing.event.values import Value
from crossing.event.wording import describe, listed, nearest, quoted_key

__all__ = ["check_band", "check_band_names", "check_kappa_star", "check_order"]

# Decimal numbers such as 0.1 + 0.2 may exceed their sum by rounding.
_ROUNDING = 1e-12


def check_order(root: Table, lens: Value | None, source: Value | None) -> None:
    """Refuse a source in front of the lens: centre against centre, and for ranges end against end."""
    if lens is None or source is None:
        return
    furthest = lens.central if lens.shape == "normal" else lens.limits[1]
    closest = source.central if source.shape == "normal" else source.limits[0]
    if closest <= furthest:
        problem = f"must be greater than lens.redshift ({lens}), got {source}; the source lies behind the lens"
        raise InputError(problem, source=root.source, where="source.redshift")


def check_kappa_star(root: Table, macro: Sequence[MacroRecord], microlenses: Sequence[MicrolensRecord]) -> None:
    """Refuse more convergence in point masses than there is in total, central values against each other."""
    total = sum(lens.kappa_star.central for lens in microlenses if lens.kappa_star is not None)
    for index, model in enumerate(macro):
        kappa = _central_kappa(model)
        if kappa is not None and total > kappa + _ROUNDING:
            name = "kappa" if len(macro) == 1 else f"kappa of macro.models[{index}]"
            problem = (
                f"must not have kappa_star above {name} ({kappa:g}) in sum, got {total:g}; lower one or raise kappa"
            )
            raise InputError(problem, source=root.source, where="microlenses")


def _central_kappa(model: MacroRecord) -> float | None:
    """Total convergence of a model, 1 - (lam_t + lam_r) / 2, from central values, or None if they do not tell."""
    if model.kappa is not None:
        return model.kappa.central
    if model.mu_r is None:
        return None
    if model.mu_t is not None:
        lam_t = 1 / model.mu_t.central
    elif model.critical_distance is not None and model.gradient is not None:
        lam_t = model.critical_distance.central * model.gradient[0].central
    else:
        return None
    return 1 - (lam_t + 1 / model.mu_r.central) / 2


def check_band_names(
    root: Table,
    bands: Mapping[str, BandRecord],
    microlenses: Sequence[MicrolensRecord],
    counterpart: CounterpartRecord | None,
) -> None:
    """Refuse bands that are used but not described in ``[bands]``."""
    places = root.tables("microlenses")
    used = [(table.place("band"), lens.band) for table, lens in zip(places, microlenses, strict=True)]
    used.append(("counterpart.band", counterpart.band if counterpart is not None else None))
    for place, name in used:
        if name is not None:
            check_band(root, bands, name, place)


def check_band(root: Table, bands: Mapping[str, BandRecord], name: str, place: str) -> None:
    """Refuse the band `name`, written at `place`, if it is not described in ``[bands]``."""
    if name in bands:
        return
    problem = f"must be a band of this file, got {describe(name)}; "
    if bands:
        problem += f"the nearest is {describe(nearest(name, bands))} out of {listed(map(describe, bands), 'and')}"
    else:
        problem += f"add [bands.{quoted_key(name)}] with its wavelength"
    raise InputError(problem, source=root.source, where=place)
