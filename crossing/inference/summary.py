"""Sum up the chosen model of a fit: samples, intervals, flags and what figures need."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from crossing.event import Event
from crossing.inference.draws import TIMELESS, Draws, joint_draws
from crossing.inference.estimates import Bound, Estimate, bound_of, edge_density, estimate
from crossing.inference.linear import LinearDraw
from crossing.inference.provenance import provenance
from crossing.inference.result import QUANTITIES, BandCurve, CrossingFit, FittedRow, MacroRadius, ModelScore
from crossing.inference.star import KM_PER_RSUN, SECONDS_PER_DAY, model_speeds, radius_drivers

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from crossing.inference.candidates import Candidate, Pooled
    from crossing.inference.colours import ColourGrid
    from crossing.inference.data import FitData
    from crossing.inference.priors import FitPriors
    from crossing.inference.star import RadiusDrivers
    from crossing.photometry import LightCurve

__all__ = ["summarise"]

_POOR_FIT = 1e-3
# A radius time is prior-driven when its 68% interval keeps this share of the prior's own.
_PRIOR_SHARE = 0.7
_CURVES = 400
_GRID = 500
_LEAST_EFFECTIVE = 100.0


def summarise(
    event: Event | LightCurve,
    curve: LightCurve,
    chosen: Pooled,
    pooled: Sequence[Pooled],
    grid: ColourGrid | None,
    priors: FitPriors,
    options: dict[str, Any],
    rng: np.random.Generator,
) -> CrossingFit:
    """Build the result of a fit from its chosen model.

    Parameters
    ----------
    event : Event or LightCurve
        What was fitted.
    curve : LightCurve
        Its light curve.
    chosen : Pooled
        The model that the estimates belong to.
    pooled : sequence of Pooled
        All models that were tried.
    grid : ColourGrid or None
        Blackbody fluxes in the bands.
    priors : FitPriors
        Priors of the fit.
    options : dict
        Options of the call, for the record.
    rng : numpy.random.Generator
        Source of random numbers.
    """
    leading = chosen.leading
    data = leading.linear.data
    draws = joint_draws(event, chosen, grid, priors, options["samples"], rng)
    estimates = _estimates(chosen, draws)
    flags = _flags(chosen, pooled, draws, estimates)
    drivers: RadiusDrivers | None = None
    macro_models: tuple[MacroRadius, ...] = ()
    speed = draws.normal_speed
    if isinstance(event, Event) and event.motion is not None and speed is not None:
        time = draws.columns["radius_time_days"]
        drivers = radius_drivers(time, speed, event.motion, draws.star.prior_shift, rng)
        macro_models = _macro_models(event, time, rng)
    height = np.zeros(len(draws.theta)) if leading.shape is None else leading.shape.height(draws.theta)
    return CrossingFit(
        event=event.name if isinstance(event, Event) else "light curve",
        model=chosen.name,
        orientation=_orientation(leading, draws),
        **{name: estimates.get(name) for name in QUANTITIES},
        amplitudes={
            band: estimate(height * draws.amplitude[:, k]) for k, band in enumerate(data.bands) if height.any()
        },
        levels={name: estimate(draws.level[:, k]) for k, name in enumerate(data.level_name)},
        chi2=leading.chi2,
        dof=leading.dof,
        p_value=leading.p_value,
        ln_evidence=chosen.ln_evidence,
        scores=_scores(pooled),
        scatter=dict(zip(_scatter_names(chosen), chosen.share, strict=True)),
        drivers=drivers,
        macro_models=macro_models,
        converged="not_converged" not in flags,
        flags=flags,
        effective_draws=draws.star.effective,
        priors=priors.to_dict(data),
        provenance=provenance(event, curve, options),
        best=_best(leading),
        rows=_rows(leading, data),
        curves=_curves(leading, draws, data) if leading.shape is not None else (),
        samples=draws.columns,
    )


def _estimates(chosen: Pooled, draws: Draws) -> dict[str, Estimate]:
    """Estimates by name, with the side that the data leave open."""
    shape = chosen.leading.shape
    side: Bound = "two-sided"
    if shape is not None and chosen.name not in TIMELESS:
        side = bound_of(draws.theta[:, 1], shape.ranges[1].low, shape.ranges[1].high)
    opposite: Bound = "lower" if side == "upper" else "upper" if side == "lower" else side
    sides = dict.fromkeys(("radius_time_days", "radius_rsun", "luminosity_lsun"), side)
    sides["peak_magnification"] = opposite
    return {
        name: estimate(draws.columns[name], sides.get(name, "two-sided"))
        for name in QUANTITIES
        if name in draws.columns
    }


def _flags(
    chosen: Pooled,
    pooled: Sequence[Pooled],
    draws: Draws,
    estimates: dict[str, Estimate],
) -> tuple[str, ...]:
    leading, flags = chosen.leading, []
    settled = all(part.complete for part in chosen.parts) and (leading.best is None or leading.best.success)
    if not settled or draws.star.effective < _LEAST_EFFECTIVE:
        flags.append("not_converged")
    if leading.shape is not None and leading.best is not None:
        # An optimum at an end of the durations is an unresolved crossing, which has a flag of its own.
        hit = [name for name in leading.best.at_bound if name != leading.shape.ranges[1].name]
        window = leading.shape.ranges[0]
        first, last = edge_density(draws.theta[:, 0], window.low, window.high)
        if hit or max(first, last) > 0.5:
            flags.append("at_bound")
    if leading.dof > 0 and leading.p_value < _POOR_FIT:
        flags.append("poor_fit")
    time = estimates.get("radius_time_days")
    if time is not None and leading.shape is not None:
        interval = float(np.log(time.high / time.low))
        if time.bound != "two-sided" or interval > _PRIOR_SHARE * 0.68 * leading.shape.ranges[1].width:
            flags.append("prior_driven")
    constant = next((one for one in pooled if one.name == "constant"), None)
    if constant is not None and constant.ln_evidence > chosen.ln_evidence - 1.0:
        flags.append("no_crossing")
    return tuple(flags)


def _orientation(leading: Candidate, draws: Draws) -> dict[str, float]:
    if leading.shape is None:
        return {}
    return {name: float(np.mean(draws.label == k)) for k, name in enumerate(leading.shape.labels)}


def _macro_models(event: Event, radius_time: NDArray[np.float64], rng: np.random.Generator) -> tuple[MacroRadius, ...]:
    if len(event.macro) < 2:
        return ()
    speeds = model_speeds(event, rng, len(radius_time)) or []
    if len(speeds) == 1:
        # The normals are isotropic for all of them: the same radius under every model.
        speeds = [(one.name or f"model {k + 1}", one.weight, speeds[0][2]) for k, one in enumerate(event.macro)]
    total = sum(weight for _, weight, _ in speeds)
    scale = radius_time * SECONDS_PER_DAY / KM_PER_RSUN
    return tuple(
        MacroRadius(name=name, weight=weight / total, radius_rsun=estimate(scale * draws))
        for name, weight, draws in speeds
    )


def _scores(pooled: Sequence[Pooled]) -> tuple[ModelScore, ...]:
    logs = np.array([one.ln_evidence for one in pooled])
    share = np.exp(logs - logs.max())
    share /= share.sum()
    scores = [
        ModelScore(
            model=one.name,
            ln_evidence=one.ln_evidence,
            probability=float(p),
            chi2=one.leading.chi2,
            dof=one.leading.dof,
            complete=all(part.complete for part in one.parts),
        )
        for one, p in zip(pooled, share, strict=True)
    ]
    return tuple(sorted(scores, key=lambda one: -one.ln_evidence))


def _scatter_names(chosen: Pooled) -> list[str]:
    return [f"{part.scatter:g}" for part in chosen.parts]


def _best(leading: Candidate) -> dict[str, float]:
    if leading.best is None or leading.shape is None:
        return {}
    names = [prior.name for prior in leading.shape.ranges]
    values = dict(zip(names, (float(x) for x in leading.best.theta), strict=True))
    values["time"] += leading.linear.data.time_zero
    return values | {"alternative": float(leading.best.label)}


def _best_draw(leading: Candidate) -> tuple[NDArray[np.float64], LinearDraw]:
    data = leading.linear.data
    if leading.best is None or leading.shape is None:
        shape = np.zeros((1, data.all_times.size))
        return shape, leading.linear.best(shape)
    return leading.shape.evaluate(leading.best.theta[None, :], leading.best.label), leading.best.linear


def _rows(leading: Candidate, data: FitData) -> tuple[FittedRow, ...]:
    """Observations above the fitted level, so that files with different references share one axis."""
    shape, draw = _best_draw(leading)
    n = data.time.size
    detected, limited = data.split(shape)
    plain = (
        np.concatenate([draw.amplitude[0, data.band], draw.amplitude[0, data.limit_band]])
        * shape[0, : n + len(data.limit)]
    )
    measured = np.concatenate(
        [draw.amplitude[0, data.band] * detected[0], draw.amplitude[0, data.limit_band] * limited[0]]
    )
    level = draw.level[0, np.concatenate([data.level, data.limit_level])] - (plain - measured)
    time = np.concatenate([data.time, data.limit_time]) + data.time_zero
    flux = np.concatenate([data.flux, data.limit]) - level
    error = np.concatenate([data.sigma, data.limit_sigma])
    band = np.concatenate([data.band, data.limit_band])
    is_limit = np.arange(len(time)) >= n
    return tuple(
        FittedRow(
            time_mjd=float(time[k]),
            band=data.bands[band[k]],
            flux=float(flux[k]),
            error=float(error[k]),
            is_upper_limit=bool(is_limit[k]),
            model=float(plain[k]),
            residual=float("nan") if is_limit[k] else float((flux[k] - plain[k]) / error[k]),
        )
        for k in np.argsort(time, kind="stable")
    )


def _curves(leading: Candidate, draws: Draws, data: FitData) -> tuple[BandCurve, ...]:
    shape = leading.shape
    if shape is None or leading.best is None:
        return ()
    first, last = data.span
    margin = 0.05 * (last - first) + 1.0
    plain = np.linspace(first - margin, last + margin, _GRID)
    # More points where the crossing is: the best fit's features, by their durations.
    near = leading.best.theta[0] + np.exp(leading.best.theta[1]) * np.linspace(-3.0, 3.0, _GRID)
    time = np.unique(np.concatenate([plain, near[(near > plain[0]) & (near < plain[-1])]]))
    step = max(1, len(draws.theta) // _CURVES)
    theta, label, amplitude = draws.theta[::step], draws.label[::step], draws.amplitude[::step]
    curves = []
    for band, name in enumerate(data.bands):
        flux = np.empty((len(theta), len(time)))
        for one in np.unique(label):
            mine = label == one
            flux[mine] = shape.curve(theta[mine], int(one), time, band) * amplitude[mine, band, None]
        best = shape.curve(leading.best.theta[None, :], leading.best.label, time, band)[0]
        curves.append(
            BandCurve(
                band=name,
                time_mjd=time + data.time_zero,
                best=best * leading.best.linear.amplitude[0, band],
                quantiles=np.percentile(flux, [2.5, 16.0, 50.0, 84.0, 97.5], axis=0),
            )
        )
    return tuple(curves)
