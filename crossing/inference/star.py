"""From what a fit measures to the star: radius, temperature, luminosity and the magnification that is needed."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.special import logsumexp

from crossing.event import MotionRecord, Value
from crossing.optics.local import local_lenses
from crossing.optics.motion import mean_normal_component, sample_normal_speed
from crossing.optics.scales import sample_scales
from crossing.stars.photosphere import luminosity_lsun
from crossing.stars.upper_luminosity import log_allowed

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from crossing.event import BandRecord, Event
    from crossing.inference.colours import ColourGrid
    from crossing.inference.priors import FitPriors

__all__ = [
    "KM_PER_RSUN",
    "SECONDS_PER_DAY",
    "RadiusDrivers",
    "StarSamples",
    "model_speeds",
    "normal_speed",
    "radius_drivers",
    "star_samples",
]

SECONDS_PER_DAY = 86400.0
KM_PER_RSUN = 695_700.0
_LN_PER_MAG = 0.4 * np.log(10.0)
_EXACT_PRIOR_WIDTH = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class StarSamples:
    """Draws of the star, aligned with a chosen subset of the fit's draws."""

    index: NDArray[np.intp]
    """(n,) which of the fit's draws each of these belongs to."""
    radius: NDArray[np.float64] | None = None
    """(n,) radius [Rsun], if the motion is known."""
    temperature: NDArray[np.float64] | None = None
    """(n,) blackbody-equivalent temperature [K], if colours or a prior give it."""
    luminosity: NDArray[np.float64] | None = None
    """(n,) luminosity [Lsun]."""
    peak_magnification: NDArray[np.float64] | None = None
    """(n,) magnification at the peak that the fluxes require."""
    effective: float
    """Effective number of the fit's draws that carry the weight."""
    prior_shift: float = 1.0
    """Median radius over what it would be without the star's own priors."""

    def take(self, index: NDArray[np.intp]) -> StarSamples:
        """The draws at some places only."""
        chosen: dict[str, Any] = {
            name: None if (values := getattr(self, name)) is None else values[index]
            for name in ("radius", "temperature", "luminosity", "peak_magnification")
        }
        return replace(self, index=self.index[index], **chosen)


@dataclass(frozen=True, slots=True, kw_only=True)
class RadiusDrivers:
    """Shares of the variance of ln(radius), summing to 1, and what the star's own priors do to it."""

    photometry: float
    """The radius time."""
    speed: float
    """The size of the effective velocity."""
    angle: float
    """The angle between motion and caustic normal."""
    prior_shift: float
    """Median radius over what it would be without the star's own priors (upper luminosity, event file)."""


def normal_speed(event: Event, rng: np.random.Generator, size: int) -> NDArray[np.float64] | None:
    """Draws of the speed along the caustic normal given a crossing [km/s], pooled over the macro alternatives.

    Returns
    -------
    (size,) ndarray or None
        None if the event file says nothing of the motion.
    """
    speeds = model_speeds(event, rng, size)
    if speeds is None:
        return None
    weight = np.array([weight for _, weight, _ in speeds])
    pick = rng.choice(len(speeds), size=size, p=weight / weight.sum())
    return np.stack([draws for _, _, draws in speeds])[pick, np.arange(size)]


def model_speeds(
    event: Event, rng: np.random.Generator, size: int
) -> list[tuple[str, float, NDArray[np.float64]]] | None:
    """Speeds along the caustic normal for each macro alternative: (name, weight, draws [km/s])."""
    motion = event.motion
    if motion is None:
        return None
    scales = None
    if event.lens_redshift is not None and event.source_redshift is not None:
        scales = sample_scales(event.lens_redshift, event.source_redshift, rng, size, event.cosmology)
    if motion.angle is None or not event.macro:
        # Without a known angle the normals are isotropic whatever the macro lens.
        return [("", 1.0, sample_normal_speed(motion, scales, rng, size))]
    alternatives = []
    for number, model in enumerate(local_lenses(event)):
        mean_normal = mean_normal_component(model.lens.lam_t, model.lens.lam_r)
        name = event.macro[number].name or f"model {number + 1}"
        alternatives.append((name, model.weight, sample_normal_speed(motion, scales, rng, size, mean_normal)))
    return alternatives


def radius_drivers(
    radius_time: NDArray[np.float64],
    speed: NDArray[np.float64],
    motion: MotionRecord,
    prior_shift: float,
    rng: np.random.Generator,
) -> RadiusDrivers:
    """Split the variance of ln(radius) into photometry, speed and angle.

    Notes
    -----
    The part of the angle is what remains of the spread of the normal speed when the speed itself is taken as exact.
    """
    photometry, moving = float(np.var(np.log(radius_time))), float(np.var(np.log(speed)))
    fixed = MotionRecord(speed=Value.exact(float(np.median(speed))), angle=motion.angle)
    angle = min(float(np.var(np.log(sample_normal_speed(fixed, None, rng, 4000)))), moving)
    total = photometry + moving
    return RadiusDrivers(
        photometry=photometry / total,
        speed=(moving - angle) / total,
        angle=angle / total,
        prior_shift=prior_shift,
    )


def star_samples(
    event: Event,
    *,
    radius_time: NDArray[np.float64] | None,
    peak: NDArray[np.float64],
    amplitude: NDArray[np.float64],
    bands: Sequence[BandRecord],
    grid: ColourGrid | None,
    priors: FitPriors,
    rng: np.random.Generator,
) -> StarSamples:
    """Draw the star's properties given draws of a fit.

    Parameters
    ----------
    event : Event
        Motion, redshifts and priors of the star.
    radius_time : (n,) ndarray or None
        Radius times [d]; None for shapes that have none.
    peak : (n,) ndarray
        Highest value of the shape, so that ``peak * amplitude`` is the flux that the crossing adds.
    amplitude : (n, n_bands) ndarray
        Amplitudes [nJy].
    bands : sequence of BandRecord
        Bands in the order of the amplitudes.
    grid : ColourGrid, optional
        Blackbody fluxes; None where the redshift is not known.
    priors : FitPriors
        Model error of a blackbody.
    rng : numpy.random.Generator
        Source of random numbers.

    Notes
    -----
    The draws of ln(amplitude) have a flat prior, so they stand for the likelihood of the colours. A node of temperature
    and dust gets the weight of its distance from them, the common scale integrated out; radius, temperature and
    luminosity priors of the event file weigh the draws in the same step.
    """
    n = len(peak)
    speed = normal_speed(event, rng, n)
    radius = None
    log_weight = np.zeros(n)
    if speed is not None and radius_time is not None:
        radius = radius_time * SECONDS_PER_DAY * speed / KM_PER_RSUN
        log_weight += _log_prior(event.star.radius, radius)
    if grid is None or (len(bands) < 2 and event.star.temperature is None):
        index, effective = _resample(log_weight, rng)
        kept = None if radius is None else radius[index]
        return StarSamples(index=index, radius=kept, effective=effective, prior_shift=_shift(radius, kept))
    node_weight, scale = _colour_weights(event, amplitude, bands, grid, priors, rng)
    if radius is not None:
        luminosity = luminosity_lsun(radius[:, None], grid.temperature[None, :])
        node_weight = node_weight + _log_prior(event.star.luminosity, luminosity)
        node_weight = node_weight + log_allowed(luminosity, grid.temperature[None, :])
    index, effective = _resample(log_weight + np.asarray(logsumexp(node_weight, axis=1)), rng)
    node = _pick_nodes(node_weight[index], rng)
    temperature = grid.temperature[node] * np.exp(rng.uniform(-0.5, 0.5, n) * _log_step(grid))
    ln_scale = scale[index, node] + priors.model_error * _LN_PER_MAG / np.sqrt(len(bands)) * rng.standard_normal(n)
    chosen = None if radius is None else radius[index]
    return StarSamples(
        index=index,
        radius=chosen,
        temperature=temperature,
        luminosity=None if chosen is None else luminosity_lsun(chosen, temperature),
        peak_magnification=None if chosen is None else peak[index] * np.exp(ln_scale) / chosen**2,
        effective=effective,
        prior_shift=_shift(radius, chosen),
    )


def _shift(before: NDArray[np.float64] | None, after: NDArray[np.float64] | None) -> float:
    return 1.0 if before is None or after is None else float(np.median(after) / np.median(before))


def _colour_weights(
    event: Event,
    amplitude: NDArray[np.float64],
    bands: Sequence[BandRecord],
    grid: ColourGrid,
    priors: FitPriors,
    rng: np.random.Generator,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Log weight and best common ln scale of every colour node for every draw, both (n, n_nodes)."""
    ln_amplitude = np.log(amplitude)
    for k, band in enumerate(bands):
        if not band.extinction.is_exact:
            extra = band.extinction.sample(rng, len(amplitude)) - band.extinction.central
            ln_amplitude[:, k] += _LN_PER_MAG * extra
    error = priors.model_error * _LN_PER_MAG
    mean = ln_amplitude.mean(axis=1)[:, None] - grid.ln_flux.mean(axis=1)[None, :]
    # sum of squared residuals about their mean, without an array of draws x nodes x bands
    data = ln_amplitude - ln_amplitude.mean(axis=1, keepdims=True)
    model = grid.ln_flux - grid.ln_flux.mean(axis=1, keepdims=True)
    square = (data**2).sum(axis=1)[:, None] + (model**2).sum(axis=1)[None, :] - 2.0 * data @ model.T
    log_weight = -0.5 * square / error**2 + np.log(grid.weight) + _log_prior(event.star.temperature, grid.temperature)
    return log_weight, mean


def _log_prior(prior: Value | None, values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Log of a prior relative to the log-uniform one that the draws already have; zeros without a prior."""
    if prior is None:
        return np.zeros_like(values)
    if prior.is_exact:
        prior = Value.normal(prior.central, _EXACT_PRIOR_WIDTH * abs(prior.central))
    return np.asarray(prior.log_density(values)) + np.log(values)


def _log_step(grid: ColourGrid) -> float:
    """Spacing of the grid's temperatures in ln T."""
    nodes = grid.spectrum.ln_temperature
    return float(nodes[1] - nodes[0])


def _resample(log_weight: NDArray[np.float64], rng: np.random.Generator) -> tuple[NDArray[np.intp], float]:
    """Indices of as many draws as there are weights, and how many draws carry the weight."""
    top = float(np.max(log_weight))
    if not np.isfinite(top):
        return np.arange(len(log_weight)), 0.0
    weight = np.exp(log_weight - top)
    weight /= weight.sum()
    effective = float(1.0 / (weight**2).sum())
    if np.ptp(log_weight) == 0.0:
        return np.arange(len(log_weight)), effective
    # Systematic resampling: no more copies of a draw than its weight asks for.
    points = (np.arange(len(weight)) + rng.random()) / len(weight)
    return np.minimum(np.searchsorted(np.cumsum(weight), points), len(weight) - 1), effective


def _pick_nodes(log_weight: NDArray[np.float64], rng: np.random.Generator) -> NDArray[np.intp]:
    cumulative = np.cumsum(np.exp(log_weight - log_weight.max(axis=1, keepdims=True)), axis=1)
    pick = rng.random(len(log_weight)) * cumulative[:, -1]
    return np.minimum((cumulative < pick[:, None]).sum(axis=1), log_weight.shape[1] - 1)
