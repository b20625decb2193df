"""Joint posterior draws of a fit: the light curve's parameters and the star's."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from crossing.event import Event
from crossing.inference.star import KM_PER_RSUN, SECONDS_PER_DAY, StarSamples, star_samples

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from crossing.inference.candidates import Pooled
    from crossing.inference.colours import ColourGrid
    from crossing.inference.priors import FitPriors
    from crossing.photometry import LightCurve

__all__ = ["TIMELESS", "Draws", "joint_draws"]

TIMELESS = ("bump", "constant")
"""Models without a caustic time and a radius time."""

# Where the star's priors leave less than this share of the draws, this many times more are made.
_THIN = 0.25
_MORE = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class Draws:
    """Equal-weight draws of one model, all of the same length n."""

    theta: NDArray[np.float64]
    """(n, n_parameters) nonlinear parameters."""
    label: NDArray[np.intp]
    """(n,) discrete alternatives."""
    amplitude: NDArray[np.float64]
    """(n, n_bands) amplitudes [nJy]."""
    level: NDArray[np.float64]
    """(n, n_levels) reference levels [nJy]."""
    star: StarSamples
    """The star's properties."""
    columns: dict[str, NDArray[np.float64]]
    """Samples by the names of the results."""

    @property
    def normal_speed(self) -> NDArray[np.float64] | None:
        """(n,) speed along the caustic's normal [km/s], where the motion is known."""
        if "radius_rsun" not in self.columns:
            return None
        return self.columns["radius_rsun"] * KM_PER_RSUN / (self.columns["radius_time_days"] * SECONDS_PER_DAY)


def joint_draws(
    event: Event | LightCurve,
    chosen: Pooled,
    grid: ColourGrid | None,
    priors: FitPriors,
    size: int,
    rng: np.random.Generator,
) -> Draws:
    """Draw from the posterior of a model, weighted by what is known of stars.

    Parameters
    ----------
    event : Event or LightCurve
        What was fitted.
    chosen : Pooled
        The model.
    grid : ColourGrid or None
        Blackbody fluxes in the bands.
    priors : FitPriors
        Priors of the fit.
    size : int
        Number of draws.
    rng : numpy.random.Generator
        Source of random numbers.
    """
    draws = _draw(event, chosen, grid, priors, size, rng)
    if draws.star.effective < _THIN * size:
        many = _draw(event, chosen, grid, priors, _MORE * size, rng)
        draws = _take(many, rng.permutation(_MORE * size)[:size])
    return replace(draws, columns=_columns(chosen, draws))


def _draw(
    event: Event | LightCurve,
    chosen: Pooled,
    grid: ColourGrid | None,
    priors: FitPriors,
    size: int,
    rng: np.random.Generator,
) -> Draws:
    counts = rng.multinomial(size, np.array(chosen.share) / sum(chosen.share))
    parts = [part.sample(int(n), rng) for part, n in zip(chosen.parts, counts, strict=True) if n]
    theta = np.concatenate([one for one, _, _ in parts])
    draws = Draws(
        theta=theta,
        label=np.concatenate([label for _, label, _ in parts]),
        amplitude=np.concatenate([draw.amplitude for _, _, draw in parts]),
        level=np.concatenate([draw.level for _, _, draw in parts]),
        star=StarSamples(index=np.arange(size), effective=float(size)),
        columns={},
    )
    shape = chosen.leading.shape
    if not isinstance(event, Event) or shape is None:
        return draws
    star = star_samples(
        event,
        radius_time=None if chosen.name in TIMELESS else np.exp(theta[:, 1]),
        peak=shape.height(theta),
        amplitude=draws.amplitude,
        bands=[event.bands[band] for band in chosen.leading.linear.data.bands],
        grid=grid if event.source_redshift is not None else None,
        priors=priors,
        rng=rng,
    )
    # The star's own arrays are already in the order of its index.
    return replace(_take(draws, star.index), star=star)


def _take(draws: Draws, index: NDArray[np.intp]) -> Draws:
    return Draws(
        theta=draws.theta[index],
        label=draws.label[index],
        amplitude=draws.amplitude[index],
        level=draws.level[index],
        star=draws.star.take(index),
        columns={},
    )


def _columns(chosen: Pooled, draws: Draws) -> dict[str, NDArray[np.float64]]:
    """Samples by the names of the results."""
    shape, data = chosen.leading.shape, chosen.leading.linear.data
    columns: dict[str, NDArray[np.float64] | None] = {}
    if shape is not None and chosen.name not in TIMELESS:
        first, delay = draws.theta[:, 0] + data.time_zero, shape.second(draws.theta)
        columns["caustic_time_mjd"] = first
        columns["second_caustic_time_mjd"] = None if delay is None else first + delay
    if shape is not None:
        columns["peak_time_mjd"] = shape.peak(draws.theta, draws.label) + data.time_zero
    if shape is not None and chosen.name not in TIMELESS:
        columns["radius_time_days"] = np.exp(draws.theta[:, 1])
    columns |= {
        "radius_rsun": draws.star.radius,
        "peak_magnification": draws.star.peak_magnification,
        "temperature_K": draws.star.temperature,
        "luminosity_lsun": draws.star.luminosity,
    }
    columns |= {f"amplitude_{band}_njy": draws.amplitude[:, k] for k, band in enumerate(data.bands)}
    columns |= {f"level_{k}_njy": draws.level[:, k] for k in range(data.n_levels)}
    return {name: values for name, values in columns.items() if values is not None}
