"""The linear part of every light-curve model: amplitudes and reference levels, integrated out.

A model flux is ``amplitude[channel] * shape + level``. Levels have Gaussian priors and are integrated in closed form;
amplitudes span decades, so they are integrated by quadrature in their logarithm under a log-uniform prior. Upper
limits enter as censored points.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import log_ndtr

from crossing.inference.censored import constrain

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from crossing.inference.data import FitData

__all__ = ["Colours", "LinearDraw", "LinearPart", "log_sum"]

# Gauss-Legendre nodes in ln(amplitude) and the half-width, in standard deviations, of the window that they cover.
_NODES = 40
_WINDOW = 7.5
# Shapes this far below the best, in ln likelihood, carry no weight; how many are looked at to know the best.
_HOPELESS = 60.0
_FIRST_LOOK = 16
_NODE, _WEIGHT = np.polynomial.legendre.leggauss(_NODES)
# Where limits bend the likelihood, its peak is looked for at so many amplitudes over the prior and over the window of
# the detections; the integral runs between the neighbours of those that are less than _DEPTH below the best.
_LOOK, _LOOK_CLOSER = 24, 8
_DEPTH = 30.0
_DRAW_NODES = 129
# Half-width of the window that levels are drawn from, in standard deviations.
_DRAW_WINDOW = 8.0
# Work arrays are cut to about this many numbers, to stay in the processor's caches.
_CHUNK = 200_000


def log_sum(logs: NDArray[np.float64]) -> NDArray[np.float64]:
    """Log of the sum of exponentials along the last axis; several times faster than SciPy's on small arrays."""
    top = logs.max(axis=-1, keepdims=True)
    return np.asarray(np.log(np.exp(logs - top).sum(axis=-1)) + top[..., 0])


@dataclass(frozen=True, slots=True, kw_only=True)
class Colours:
    """Amplitude ratios that tie the bands together, as weighted nodes."""

    ratio: NDArray[np.float64]
    """(n_nodes, n_bands) amplitude of each band for unit common amplitude."""
    weight: NDArray[np.float64]
    """(n_nodes,) prior weights, summing to 1."""


@dataclass(frozen=True, slots=True, kw_only=True)
class LinearDraw:
    """Amplitudes and levels drawn from, or best for, given shapes."""

    amplitude: NDArray[np.float64]
    """(m, n_bands) flux per unit of the shape [nJy]."""
    level: NDArray[np.float64]
    """(m, n_levels) reference levels [nJy]."""
    node: NDArray[np.intp]
    """(m,) colour node of each draw (zero where bands are free)."""


@dataclass(frozen=True, slots=True)
class _Sums:
    """Sufficient statistics of m shapes: levels integrated out, (m, n_bands) or (m, n_levels)."""

    alpha: NDArray[np.float64]
    beta: NDArray[np.float64]
    slope: NDArray[np.float64]
    limits: NDArray[np.float64]

    def rows(self, index: slice | NDArray[np.intp] | NDArray[np.bool_]) -> _Sums:
        return _Sums(self.alpha[index], self.beta[index], self.slope[index], self.limits[index])


class LinearPart:
    """Marginal likelihood, draws and optimum of amplitudes and levels for given model shapes.

    Parameters
    ----------
    data : FitData
        Observations.
    low, high : float
        Range of the log-uniform prior of an amplitude [nJy].
    colours : Colours, optional
        Ties the bands to one amplitude; without it every band has its own.

    Notes
    -----
    With weights ``w = 1/sigma^2`` and a level prior N(0, tau^2), the level's conditional is Gaussian with precision
    ``q = sum w + 1/tau^2`` and mean ``(sum w f - A sum w h)/q``, and the likelihood of an amplitude A is
    ``exp(-(alpha A^2 - 2 beta A + gamma)/2)`` with ``alpha = sum w h^2 - (sum w h)^2/q``, and so on.
    """

    def __init__(self, data: FitData, *, low: float, high: float, colours: Colours | None = None) -> None:
        self.data, self.low, self.high, self.colours = data, low, high, colours
        weight = data.sigma**-2.0
        member = np.zeros((data.time.size, data.n_levels))
        member[np.arange(data.time.size), data.level] = 1.0
        self._to_band = np.zeros((data.n_levels, data.n_bands))
        self._to_band[np.arange(data.n_levels), data.level_band] = 1.0
        self._weight = weight[:, None] * member
        self._weight_flux = data.flux[:, None] * self._weight
        self._flux_sum = self._weight_flux.sum(axis=0)
        self._precision = self._weight.sum(axis=0) + data.level_width**-2.0
        self._spread = self._precision**-0.5
        gamma = (data.flux**2 * weight).sum() - (self._flux_sum**2 / self._precision).sum()
        norm = np.log(data.sigma * np.sqrt(2 * np.pi)).sum() + 0.5 * np.log(self._precision * data.level_width**2).sum()
        self._constant = -0.5 * gamma - norm
        self._limit_levels = frozenset(int(k) for k in data.limit_level)
        self._log_range = float(np.log(np.log(high / low)))
        # One row a channel of amplitude: each band its own, or the bands in fixed ratios.
        self._channels = np.eye(data.n_bands) if colours is None else colours.ratio

    def log_marginal(self, shape: NDArray[np.float64]) -> NDArray[np.float64]:
        """Log likelihood of shapes, amplitudes and levels integrated out.

        Parameters
        ----------
        shape : (m, n_all) ndarray
            Model shapes at ``data.all_times``.

        Returns
        -------
        (m,) ndarray
            Natural logarithms. Where there are limits, shapes that lie more than `_HOPELESS` below the best of the call
            keep the value without the limits' factor (never above one), cut at that depth.
        """
        sums = self._sums(shape)
        if not self._limit_levels or len(shape) <= _FIRST_LOOK:
            return self._log_total(sums, limits=True)
        value = self._log_total(sums, limits=False)
        first = np.argsort(value)[::-1][:_FIRST_LOOK]
        exact = self._log_total(sums.rows(first), limits=True)
        floor = float(exact.max()) - _HOPELESS
        hopeful = value > floor
        hopeful[first] = False
        value = np.minimum(value, floor)
        value[hopeful] = self._log_total(sums.rows(hopeful), limits=True)
        value[first] = exact
        return value

    def log_constant(self) -> float:
        """Log likelihood of a constant source: levels alone."""
        sums = self._sums(np.zeros((1, self.data.all_times.size)))
        every = np.ones((1, self.data.n_bands))
        return float(self._constant + self._log_factor(sums, every, np.zeros((1, 1, 1)), limits=True)[0, 0, 0])

    def draw_constant(self, size: int, rng: np.random.Generator) -> LinearDraw:
        """Draw the levels of a constant source: amplitudes are zero."""
        sums = self._sums(np.zeros((size, self.data.all_times.size)))
        amplitude = np.zeros((size, self.data.n_bands))
        level = self._draw_levels(sums, amplitude, rng)
        return LinearDraw(amplitude=amplitude, level=level, node=np.zeros(size, dtype=np.intp))

    def draw(self, shape: NDArray[np.float64], rng: np.random.Generator) -> LinearDraw:
        """Draw amplitudes and levels from their posterior, one for each of the (m, n_all) shapes."""
        m = shape.shape[0]
        sums = self._sums(shape)
        node = np.zeros(m, dtype=np.intp)
        if self.colours is None:
            amplitude = self._draw_amplitudes(sums, self._channels, rng)
        else:
            log_nodes = self._log_channels(sums, self._channels, limits=True) + np.log(self.colours.weight)
            cumulative = np.cumsum(np.exp(log_nodes - log_nodes.max(axis=1, keepdims=True)), axis=1)
            pick = rng.random(m) * cumulative[:, -1]
            node = np.minimum((cumulative < pick[:, None]).sum(axis=1), len(self.colours.weight) - 1)
            amplitude = np.empty((m, self.data.n_bands))
            for k in np.unique(node):
                mine, channel = node == k, self._channels[k : k + 1]
                amplitude[mine] = self._draw_amplitudes(sums.rows(mine), channel, rng) * channel
        return LinearDraw(amplitude=amplitude, level=self._draw_levels(sums, amplitude, rng), node=node)

    def best(self, shape: NDArray[np.float64]) -> LinearDraw:
        """Least-squares amplitudes (never negative), levels and colour nodes for (m, n_all) shapes; no limits."""
        pinned = np.zeros((len(shape), self.data.n_levels), dtype=np.bool_)
        # Levels that come out negative and must not be are held at zero, and the rest is solved again.
        for _ in range(2):
            amplitude, node, level = self._solve(shape, pinned)
            negative = self.data.level_nonnegative & (level < 0.0) & ~pinned
            if not negative.any():
                break
            pinned |= negative
        level = np.where(self.data.level_nonnegative, np.maximum(level, 0.0), level)
        return LinearDraw(amplitude=amplitude, level=np.where(pinned, 0.0, level), node=node)

    def _solve(
        self, shape: NDArray[np.float64], pinned: NDArray[np.bool_]
    ) -> tuple[NDArray[np.float64], NDArray[np.intp], NDArray[np.float64]]:
        """Amplitudes, colour nodes and levels of least squares, without the `pinned` levels (m, n_levels)."""
        sums = self._sums(shape, pinned)
        node = np.zeros(len(shape), dtype=np.intp)
        if self.colours is None:
            amplitude = _peak(sums.alpha, sums.beta)
        else:
            alpha, beta = sums.alpha @ (self._channels**2).T, sums.beta @ self._channels.T
            common = _peak(alpha, beta)
            # By how much each node lowers chi-squared, halved.
            node = np.argmax(common * (beta - 0.5 * alpha * common), axis=1)
            amplitude = np.take_along_axis(common, node[:, None], axis=1) * self._channels[node]
        amplitude = np.minimum(amplitude, self.high)
        return amplitude, node, self._level_mean(sums, amplitude[:, self.data.level_band])

    def model(self, shape: NDArray[np.float64], draw: LinearDraw) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Model fluxes (m, n) of the detections and (m, n_limits) of the limits [nJy]."""
        data = self.data
        detected, limited = data.split(shape)
        return (
            draw.amplitude[:, data.band] * detected + draw.level[:, data.level],
            draw.amplitude[:, data.limit_band] * limited + draw.level[:, data.limit_level],
        )

    # -- the pieces ----------------------------------------------------------------------------------------------

    def _sums(self, shape: NDArray[np.float64], pinned: NDArray[np.bool_] | None = None) -> _Sums:
        """Sufficient statistics; levels that are `pinned` (m, n_levels) stay at zero."""
        detected, limited = self.data.split(shape)
        slope = detected @ self._weight
        cross = detected @ self._weight_flux
        square = detected**2 @ self._weight
        spread2 = 1.0 / self._precision if pinned is None else ~pinned / self._precision
        alpha = (square - slope**2 * spread2) @ self._to_band
        beta = (cross - slope * self._flux_sum * spread2) @ self._to_band
        # Rounding may leave a flat shape with a tiny negative curvature.
        alpha = np.where(alpha > 1e-12 * (square @ self._to_band), alpha, 0.0)
        return _Sums(alpha, beta, slope, limited)

    def _level_mean(self, sums: _Sums, amplitude: NDArray[np.float64]) -> NDArray[np.float64]:
        """Conditional mean of the levels for amplitudes (m, n_levels)."""
        return (self._flux_sum - amplitude * sums.slope) / self._precision

    def _log_total(self, sums: _Sums, *, limits: bool) -> NDArray[np.float64]:
        logs = self._log_channels(sums, self._channels, limits)
        if self.colours is None:
            return self._constant + logs.sum(axis=1)
        return self._constant + log_sum(logs + np.log(self.colours.weight))

    def _log_channels(self, sums: _Sums, channels: NDArray[np.float64], limits: bool) -> NDArray[np.float64]:
        """Log of the likelihood ratio averaged over the amplitude of every channel, (m, n_channels)."""
        m = sums.alpha.shape[0]
        limits = limits and bool(self._limit_levels)
        step = max(1, self._chunk(limits) // (_NODES * len(channels)))
        if m <= step:
            return self._log_channels_chunk(sums, channels, limits)
        starts = range(0, m, step)
        return np.concatenate(
            [self._log_channels_chunk(sums.rows(slice(i, i + step)), channels, limits) for i in starts]
        )

    def _chunk(self, limits: bool) -> int:
        """How many amplitudes are worked on at a time."""
        return _CHUNK // (8 * self.data.limit.size) if limits else _CHUNK

    def _log_channels_chunk(self, sums: _Sums, channels: NDArray[np.float64], limits: bool) -> NDArray[np.float64]:
        alpha, beta = sums.alpha @ (channels**2).T, sums.beta @ channels.T
        low, high = self._window(sums, channels, alpha, beta, limits)
        half = 0.5 * (high - low)
        amplitude = np.exp(low[..., None] + half[..., None] * (_NODE + 1.0))
        value = self._log_amplitude(sums, channels, alpha, beta, amplitude, limits)
        return log_sum(value + np.log(_WEIGHT)) + np.log(half) - self._log_range

    def _window(
        self,
        sums: _Sums,
        channels: NDArray[np.float64],
        alpha: NDArray[np.float64],
        beta: NDArray[np.float64],
        limits: bool,
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Range of ln(amplitude) that holds the integral, both ends (m, n_channels)."""
        known = alpha > 0
        sigma = np.where(known, alpha, 1.0) ** -0.5
        centre = beta * sigma**2
        upper = np.where(known, np.maximum(centre, 0.0) + _WINDOW * sigma, self.high)
        lower = np.where(known, centre - _WINDOW * sigma, self.low)
        # At least one e-fold stays in the window where the best amplitude lies outside the prior.
        high = np.log(np.minimum(np.maximum(upper, self.low * np.e), self.high))
        low = np.log(np.minimum(np.maximum(lower, self.low), self.high / np.e))
        if not limits:
            return low, high
        # The likelihood is log-concave in amplitude and levels: its one peak is between the neighbours of the best.
        whole = np.linspace(np.log(self.low), np.log(self.high), _LOOK)
        closer = np.linspace(low, high, _LOOK_CLOSER, axis=-1)
        tried = np.sort(np.concatenate([np.broadcast_to(whole, (*low.shape, _LOOK)), closer], axis=-1), axis=-1)
        value = self._log_amplitude(sums, channels, alpha, beta, np.exp(tried), limits=True, rough=True)
        good = value > value.max(axis=-1, keepdims=True) - _DEPTH
        last = tried.shape[-1] - 1
        below = np.maximum(np.argmax(good, axis=-1) - 1, 0)
        above = np.minimum(last - np.argmax(good[..., ::-1], axis=-1) + 1, last)
        ends = np.take_along_axis(tried, np.stack([below, above], axis=-1), axis=-1)
        return ends[..., 0], ends[..., 1]

    def _log_amplitude(
        self,
        sums: _Sums,
        channels: NDArray[np.float64],
        alpha: NDArray[np.float64],
        beta: NDArray[np.float64],
        amplitude: NDArray[np.float64],
        limits: bool,
        rough: bool = False,
    ) -> NDArray[np.float64]:
        """Log likelihood ratio at amplitudes (m, n_channels, n_nodes)."""
        gauss = amplitude * (beta[..., None] - 0.5 * alpha[..., None] * amplitude)
        return gauss + self._log_factor(sums, channels, amplitude, limits, rough)

    def _log_factor(
        self,
        sums: _Sums,
        channels: NDArray[np.float64],
        amplitude: NDArray[np.float64],
        limits: bool,
        rough: bool = False,
    ) -> NDArray[np.float64]:
        """What nonnegative levels and upper limits add to the Gaussian, shaped as `amplitude`."""
        data = self.data
        out = np.zeros_like(amplitude)
        for k in range(data.n_levels):
            limited = limits and k in self._limit_levels
            if not limited and not data.level_nonnegative[k]:
                continue
            ratio = channels[:, data.level_band[k]]
            mine = np.flatnonzero(ratio)
            flux = amplitude[:, mine] * ratio[mine, None]
            mean = (self._flux_sum[k] - flux * sums.slope[:, k, None, None]) / self._precision[k]
            if data.level_nonnegative[k]:
                out[:, mine] += np.log(2.0)
            if limited:
                out[:, mine] += constrain(*self._constraints(sums, k, flux, mean), rough=rough)[0]
            else:
                out[:, mine] += log_ndtr(mean / self._spread[k])
        return out

    def _constraints(
        self, sums: _Sums, k: int, flux: NDArray[np.float64], mean: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64] | None]:
        """What bounds level `k`, in its standard deviations from its conditional mean: see `constrain`.

        `flux` and `mean` are (m, ...) fluxes for a unit of shape and means of the level.
        """
        data, spread = self.data, self._spread[k]
        mine = np.flatnonzero(data.limit_level == k)
        slope = sums.limits[:, mine].reshape(len(mean), *[1] * (mean.ndim - 1), mine.size)
        upper = (data.limit[mine] - flux[..., None] * slope - mean[..., None]) / spread
        return upper, data.limit_sigma[mine] / spread, -mean / spread if data.level_nonnegative[k] else None

    def _draw_amplitudes(
        self, sums: _Sums, channels: NDArray[np.float64], rng: np.random.Generator
    ) -> NDArray[np.float64]:
        """One amplitude a channel for each shape, (m, n_channels)."""
        m = sums.alpha.shape[0]
        limits = bool(self._limit_levels)
        step = max(1, self._chunk(limits) // (_DRAW_NODES * len(channels)))
        parts = []
        for start in range(0, m, step):
            chunk = sums.rows(slice(start, start + step))
            alpha, beta = chunk.alpha @ (channels**2).T, chunk.beta @ channels.T
            ln_amplitude = np.linspace(*self._window(chunk, channels, alpha, beta, limits), _DRAW_NODES, axis=-1)
            density = self._log_amplitude(chunk, channels, alpha, beta, np.exp(ln_amplitude), limits)
            density = np.exp(density - density.max(axis=-1, keepdims=True))
            count = ln_amplitude.shape[-1]
            drawn = _draw_from_density(ln_amplitude.reshape(-1, count), density.reshape(-1, count), rng)
            parts.append(np.exp(drawn).reshape(alpha.shape))
        return np.concatenate(parts) if parts else np.empty((0, len(channels)))

    def _draw_levels(
        self, sums: _Sums, amplitude: NDArray[np.float64], rng: np.random.Generator
    ) -> NDArray[np.float64]:
        data = self.data
        mean = self._level_mean(sums, amplitude[:, data.level_band])
        out = mean + self._spread * rng.standard_normal(mean.shape)
        for k in range(data.n_levels):
            if k not in self._limit_levels and not data.level_nonnegative[k]:
                continue
            out[:, k] = self._draw_constrained(sums, k, amplitude[:, data.level_band[k]], mean[:, k], rng)
        return out

    def _draw_constrained(
        self, sums: _Sums, k: int, flux: NDArray[np.float64], mean: NDArray[np.float64], rng: np.random.Generator
    ) -> NDArray[np.float64]:
        """One value of a bounded level for each of the (m,) amplitudes and conditional means."""
        upper, softness, wall = self._constraints(sums, k, flux, mean)
        _, centre, deviation = constrain(upper, softness, wall)
        low, high = centre - _DRAW_WINDOW * deviation, centre + _DRAW_WINDOW * deviation
        if wall is not None:
            low, high = np.maximum(low, wall), np.maximum(high, wall + deviation)
        x = np.linspace(low, high, _DRAW_NODES, axis=-1)
        logs = -0.5 * x**2 + log_ndtr((upper[:, None, :] - x[..., None]) / softness).sum(axis=-1)
        drawn = _draw_from_density(x, np.exp(logs - logs.max(axis=1, keepdims=True)), rng)
        return np.asarray(mean + self._spread[k] * drawn)


def _peak(alpha: NDArray[np.float64], beta: NDArray[np.float64]) -> NDArray[np.float64]:
    """Where ``beta A - alpha A^2/2`` is largest, A not negative; zero where nothing depends on A."""
    return np.divide(np.maximum(beta, 0.0), alpha, out=np.zeros_like(beta), where=alpha > 0)


def _draw_from_density(
    x: NDArray[np.float64], density: NDArray[np.float64], rng: np.random.Generator
) -> NDArray[np.float64]:
    """One draw a row from densities that are piecewise linear between the nodes `x`, both (m, n)."""
    piece = 0.5 * (density[:, 1:] + density[:, :-1]) * np.diff(x, axis=1)
    cumulative = np.cumsum(piece, axis=1)
    pick = rng.random(len(x)) * cumulative[:, -1]
    index = np.minimum((cumulative < pick[:, None]).sum(axis=1), piece.shape[1] - 1)
    row = np.arange(len(x))
    left, right = x[row, index], x[row, index + 1]
    p, q = density[row, index], density[row, index + 1]
    # Inverse of the linear density within the piece.
    u = rng.random(len(x))
    mixed = np.sqrt(np.maximum(p * p + u * (q * q - p * p), 0.0))
    fraction = np.where(p + mixed > 0, u * (p + q) / np.maximum(p + mixed, 1e-300), u)
    return left + np.clip(fraction, 0.0, 1.0) * (right - left)
