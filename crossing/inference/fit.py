"""Fit a crossing to a light curve: which model, and what it says of the star."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from crossing.errors import InputError
from crossing.event import Event, require
from crossing.inference.candidates import Candidate, Pooled, constant_fit, fit_nested, fit_scan, linear_part
from crossing.inference.colours import ColourGrid, colour_grid, tie
from crossing.inference.data import FitData, prepare
from crossing.inference.linear import Colours, log_sum
from crossing.inference.priors import FitPriors, Range
from crossing.inference.shapes import BinaryShape, BumpShape, FoldShape, PairShape
from crossing.inference.summary import summarise
from crossing.optics.scales import cosmology_from
from crossing.photometry import LightCurve, read_photometry
from crossing.stars.limb_darkening import band_limb_darkening

if TYPE_CHECKING:
    from collections.abc import Callable

    from crossing.inference.result import CrossingFit

__all__ = ["MODELS", "fit_crossing"]

MODELS = ("auto", "fold", "pair", "bump", "binary", "constant")
"""Models that `fit_crossing` takes; ``auto`` tries constant, fold, bump and pair."""

_AUTO = ("constant", "fold", "bump", "pair")
_SCATTERS = (0.0, 0.5, 1.0, 2.0, 4.0)
_TYPICAL_TEMPERATURE = 10_000.0
# Models whose ln evidences differ by less are not told apart; the simplest of them is taken.
_INDISTINCT = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class _Setting:
    """What all models of one fit share."""

    data: FitData
    priors: FitPriors
    grid: ColourGrid | None
    colours: Colours | None
    rng: np.random.Generator


def fit_crossing(
    event: Event | LightCurve,
    *,
    model: str = "auto",
    colours: Literal["free", "blackbody"] = "free",
    extra_scatter: bool = False,
    priors: FitPriors | None = None,
    samples: int = 4000,
    seed: int = 0,
) -> CrossingFit:
    """Fit fold-caustic crossings to a light curve.

    Parameters
    ----------
    event : Event or LightCurve
        An event with photometry and bands; or a bare light curve, which gives times and fluxes but no star.
    model : {"auto", "fold", "pair", "bump", "binary", "constant"}
        Model; ``auto`` takes the simplest of constant, fold, bump and pair whose evidence is within 1 of the best.
    colours : {"free", "blackbody"}
        Whether each band has its own amplitude, or all are tied by one blackbody temperature.
    extra_scatter : bool
        Marginalise over additional scatter of 0 to 4 median errors.
    priors : FitPriors, optional
        Ranges of the priors.
    samples : int
        Number of posterior samples.
    seed : int
        Seed of the random numbers.

    Returns
    -------
    CrossingFit
        Estimates, evidences, flags and samples.

    Raises
    ------
    InputError
        If the light curve has no detection, or a model needs what the event does not give.

    References
    ----------
    .. [1] Schneider P. & Weiss A., 1986, A&A 164, 237 (the fold law for a disc)
    """
    _check_options(model, colours, samples)
    curve = read_photometry(event) if isinstance(event, Event) else event
    priors = priors or FitPriors()
    rng = np.random.default_rng(seed)
    data = prepare(curve, _limb_darkening(event))
    grid = _grid(event, data, priors)
    if colours == "blackbody" and grid is None:
        raise InputError("a blackbody needs the bands' wavelengths; give an event file", where="colours")
    tied = tie(grid) if colours == "blackbody" and grid is not None else None
    setting = _Setting(data=data, priors=priors, grid=grid, colours=tied, rng=rng)
    names = _AUTO if model == "auto" else tuple(dict.fromkeys(("constant", model)))
    pooled: list[Pooled] = []
    for name in names:
        # A model that was asked for by name is sampled well whatever the others do.
        rival = max((one.ln_evidence for one in pooled), default=-np.inf) if model == "auto" else -np.inf
        pooled.append(_pool(name, setting, _SCATTERS if extra_scatter else (0.0,), rival))
    options: dict[str, Any] = {
        "model": model,
        "colours": colours,
        "extra_scatter": extra_scatter,
        "samples": samples,
        "seed": seed,
    }
    chosen = _simplest(pooled) if model == "auto" else pooled[-1]
    return summarise(event, curve, chosen, pooled, grid, priors, options, rng)


def _simplest(pooled: list[Pooled]) -> Pooled:
    """The simplest model that the evidence does not tell from the best."""
    best = max(one.ln_evidence for one in pooled)
    return next(one for one in pooled if one.ln_evidence > best - _INDISTINCT)


def _check_options(model: str, colours: str, samples: int) -> None:
    if model not in MODELS:
        raise InputError(f"`model` must be one of {', '.join(MODELS)}, got {model!r}")
    if colours not in ("free", "blackbody"):
        raise InputError(f"`colours` must be free or blackbody, got {colours!r}")
    if not 100 <= samples <= 1_000_000:
        raise InputError(f"`samples` must be between 100 and 1000000, got {samples}")


def _limb_darkening(event: Event | LightCurve) -> dict[str, float]:
    """Coefficient of each band: the user's, or that of a grey atmosphere at the star's likely temperature."""
    if not isinstance(event, Event):
        return {}
    require(event, "bands", "photometry")
    prior = event.star.temperature
    temperature = _TYPICAL_TEMPERATURE if prior is None else prior.central
    redshift = 0.0 if event.source_redshift is None else event.source_redshift.central
    return {name: float(band_limb_darkening(band, temperature, redshift)) for name, band in event.bands.items()}


def _grid(event: Event | LightCurve, data: FitData, priors: FitPriors) -> ColourGrid | None:
    if not isinstance(event, Event):
        return None
    redshift, distance = 0.0, 1.0
    if event.source_redshift is not None:
        redshift = event.source_redshift.central
        distance = float(cosmology_from(event.cosmology).luminosity_distance(redshift).value)
    return colour_grid([event.bands[name] for name in data.bands], redshift, distance, priors)


def _pool(name: str, setting: _Setting, scatters: tuple[float, ...], rival: float) -> Pooled:
    builder = _BUILDERS[name]
    parts = tuple(builder(setting.data.with_scatter(scatter), setting, rival) for scatter in scatters)
    logs = np.array([part.ln_evidence for part in parts])
    total = float(log_sum(logs))
    return Pooled(
        name=name,
        ln_evidence=total - float(np.log(len(parts))),
        parts=parts,
        share=tuple(float(x) for x in np.exp(logs - total)),
    )


def _constant(data: FitData, setting: _Setting, rival: float) -> Candidate:
    return constant_fit(linear_part(data, setting.priors))


def _fold(data: FitData, setting: _Setting, rival: float) -> Candidate:
    priors = setting.priors
    shape = FoldShape(data, (priors.window(data), priors.log_range("radius_time")))
    return fit_scan(shape, linear_part(data, priors, setting.colours))


def _bump(data: FitData, setting: _Setting, rival: float) -> Candidate:
    priors = setting.priors
    shape = BumpShape(data, (priors.window(data), priors.log_range("bump_time")))
    return fit_scan(shape, linear_part(data, priors, setting.colours))


def _pair(data: FitData, setting: _Setting, rival: float) -> Candidate:
    priors = setting.priors
    window = priors.window(data)
    separation = priors.log_range("separation")
    longest = Range(name=separation.name, low=separation.low, high=min(separation.high, float(np.log(window.width))))
    ranges = (window, priors.log_range("radius_time"), longest, priors.log_range("strength_ratio"))
    return fit_nested(PairShape(data, ranges), linear_part(data, priors, setting.colours), setting.rng, rival)


def _binary(data: FitData, setting: _Setting, rival: float) -> Candidate:
    priors = setting.priors
    if setting.grid is None:
        raise InputError("the binary model needs the bands' wavelengths; give an event file", where="model")
    delay = Range(name="delay", low=-priors.delay, high=priors.delay)
    temperature = priors.log_range("temperature")
    ranges = (
        priors.window(data),
        priors.log_range("radius_time"),
        delay,
        priors.log_range("radius_ratio"),
        temperature,
        temperature,
    )
    one_amplitude = Colours(ratio=np.ones((1, data.n_bands)), weight=np.ones(1))
    shape = BinaryShape(data, ranges, setting.grid.spectrum)
    return fit_nested(shape, linear_part(data, priors, one_amplitude), setting.rng, rival)


_BUILDERS: dict[str, Callable[[FitData, _Setting, float], Candidate]] = {
    "constant": _constant,
    "fold": _fold,
    "bump": _bump,
    "pair": _pair,
    "binary": _binary,
}
