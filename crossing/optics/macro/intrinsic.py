"""Back through the lens: what a knot of the arc is without magnification, with the spread of the lens models."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.solutions import located, resolve
from crossing.optics.macro.state import LocalDraws
from crossing.optics.scales import LensScales

if TYPE_CHECKING:
    from astropy.table import QTable

    from crossing.event import Event, Value
    from crossing.event.records import Position

__all__ = ["IntrinsicKnot", "Spread", "intrinsic_knot"]

Array: TypeAlias = npt.NDArray[np.float64]

_DRAWS = 4096
_SHARES = (15.865, 50.0, 84.135)


class Spread(NamedTuple):
    """A quantity with its 68% interval."""

    low: float
    """Its 16% quantile."""
    median: float
    """Its median."""
    high: float
    """Its 84% quantile."""


@dataclass(frozen=True, slots=True, kw_only=True)
class IntrinsicKnot:
    """A knot of the arc in its source plane, by one lens model or pooled over all."""

    name: str | None
    """Name of the lens model; None where they are pooled, or it has none."""
    weight: float
    """Share of the model."""
    demagnification: Spread
    """1 / |mu|, the mean over the knot: what turns observed fluxes into intrinsic ones."""
    flux: Spread | None
    """Intrinsic flux, in the unit of the observed one."""
    along: Spread | None
    """Intrinsic half-size along the stretch [arcsec]."""
    across: Spread | None
    """Intrinsic half-size across it [arcsec]."""
    radius_pc: Spread | None
    """Geometric mean of both half-sizes [pc]; None without redshifts."""
    models: tuple[IntrinsicKnot, ...] = ()
    """The same by each lens model, where there are several."""

    def to_dict(self) -> dict[str, Any]:
        """All fields by name."""
        out: dict[str, Any] = {"name": self.name, "weight": self.weight}
        for key in ("demagnification", "flux", "along", "across", "radius_pc"):
            value = getattr(self, key)
            out[key] = None if value is None else value._asdict()
        return {**out, "models": [one.to_dict() for one in self.models]}

    def to_table(self) -> QTable:
        """Medians with their intervals, one row a model, the pooled one first."""
        from astropy.table import QTable

        rows = []
        for one in (self, *self.models):
            row: dict[str, Any] = {"name": one.name or "", "weight": one.weight}
            for key in ("demagnification", "flux", "along", "across", "radius_pc"):
                value = getattr(one, key) or Spread(np.nan, np.nan, np.nan)
                row |= {key: value.median, f"{key}_low": value.low, f"{key}_high": value.high}
            rows.append(row)
        return QTable(rows=rows)


def intrinsic_knot(
    event: Event,
    *,
    flux: Value | None = None,
    along: Value | None = None,
    across: Value | None = None,
    position: Position | None = None,
    seed: int = 0,
) -> IntrinsicKnot:
    """Intrinsic flux and size of a knot from the observed ones.

    Parameters
    ----------
    event : Event
        The event, with a macro lens.
    flux : Value, optional
        Observed flux of one image of the knot, in any unit.
    along, across : Value, optional
        Its observed half-sizes along the stretch and across it [arcsec], without the blur of the telescope.
    position : (float, float), optional
        Where it is, RA and Dec [deg]; the place of the event if None.
    seed : int
        Seed of the draws.

    Returns
    -------
    IntrinsicKnot
        Pooled over the lens models by their weights, and by each of them.

    Raises
    ------
    InputError
        If the event has no macro lens, or a position is given and a lens model does not say where it holds.

    Notes
    -----
    The spread is carried in lam_t, which has no pole. An image that reaches across the critical curve is the fold of
    its source: |lam_t| is then averaged over it, lam_t growing linearly by the gradient.
    """
    if not event.macro:
        raise InputError("must be given for this; add kappa and gamma, or another of its ways", where="macro")
    if position is not None:
        event = _moved(event, position)
    weights = np.array([record.weight for record in event.macro])
    weights = weights / weights.sum()
    scales = None
    if event.lens_redshift is not None and event.source_redshift is not None:
        scales = LensScales(event.lens_redshift.central, event.source_redshift.central, event.cosmology)
    quantities = []
    for index, solution in enumerate(resolve(event)):
        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(index,)))
        with located(event, index):
            quantities.append(_quantities(solution.draw_local(rng, _DRAWS), rng, flux, along, across, scales))
    names = [record.name for record in event.macro]
    models = tuple(
        _knot(one, None, name, float(share)) for one, name, share in zip(quantities, names, weights, strict=True)
    )
    if len(models) == 1:
        return models[0]
    pooled = {key: np.concatenate([one[key] for one in quantities]) for key in quantities[0]}
    share = np.repeat(weights / _DRAWS, _DRAWS)
    return replace(_knot(pooled, share, None, 1.0), models=models)


def _moved(event: Event, position: Position) -> Event:
    for index, record in enumerate(event.macro):
        if record.position is None:
            with located(event, index):
                raise InputError("`position` must be given for models to hold elsewhere; add it, or leave it out here")
        if not (record.maps or record.halo or record.mirror_pairs):
            with located(event, index):
                raise InputError("must say how the lens changes, got numbers for one place; leave out the position")
    return replace(event, macro=tuple(replace(record, position=position) for record in event.macro))


def _quantities(
    draws: LocalDraws,
    rng: np.random.Generator,
    flux: Value | None,
    along: Value | None,
    across: Value | None,
    scales: LensScales | None,
) -> dict[str, Array]:
    size = len(draws.lam_t)
    lam_t, lam_r = np.abs(draws.lam_t), np.abs(draws.lam_r)
    out: dict[str, Array] = {}
    length = None if along is None else along.sample(rng, size)
    if length is not None:
        # Mean of |lam_t + T x| over the image |x| < length.
        reach = np.nan_to_num(np.abs(draws.gradient_x)) * length
        with np.errstate(divide="ignore", invalid="ignore"):
            lam_t = np.where(reach > lam_t, (lam_t**2 + reach**2) / (2 * reach), lam_t)
        out["along"] = lam_t * length
    out["demagnification"] = lam_t * lam_r
    if flux is not None:
        out["flux"] = flux.sample(rng, size) * out["demagnification"]
    if across is not None:
        out["across"] = lam_r * across.sample(rng, size)
    if length is not None and across is not None and scales is not None:
        out["radius_pc"] = 1e3 * scales.kpc_per_arcsec_source * np.sqrt(out["along"] * out["across"])
    return out


def _knot(found: dict[str, Array], share: Array | None, name: str | None, weight: float) -> IntrinsicKnot:
    def spread(key: str) -> Spread | None:
        if key not in found:
            return None
        if share is None:
            return Spread(*(float(one) for one in np.percentile(found[key], _SHARES)))
        order = np.argsort(found[key])
        cumulative = np.cumsum(share[order]) - share[order] / 2
        return Spread(*(float(one) for one in np.interp(np.array(_SHARES) / 100, cumulative, found[key][order])))

    return IntrinsicKnot(
        name=name,
        weight=weight,
        demagnification=spread("demagnification") or Spread(np.nan, np.nan, np.nan),
        flux=spread("flux"),
        along=spread("along"),
        across=spread("across"),
        radius_pc=spread("radius_pc"),
    )
