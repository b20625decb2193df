"""The linear part of every light-curve model: amplitudes and reference levels, integrated out.

A model flux is ``amplitude[channel] * shape + level``. Levels have Gaussian priors and are integrated in closed form;
amplitudes span decades, so they are integrated by quadrature in their logarithm under a log-uniform prior. Upper
limits enter as censored points.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import log_ndtr, ndtr, ndtri

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
_TAIL_NODES = 24
_LEGENDRE = tuple(
    (node, np.log(weight)) for node, weight in map(np.polynomial.legendre.leggauss, (_NODES, _TAIL_NODES))
)
_LEVEL_NODES = 12
_DRAW_NODES = 129
# Work arrays are cut to about this many numbers, to stay in cache and memory.
_CHUNK = 2_000_000


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
        self._limit_levels = np.unique(data.limit_level)

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
        if not len(self.data.limit):
            return self._log_total(sums, limits=False)
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

    def _log_total(self, sums: _Sums, *, limits: bool) -> NDArray[np.float64]:
        if self.colours is None:
            channels = [self._channel(sums, vector, limits) for vector in np.eye(self.data.n_bands)]
            return self._constant + np.sum(channels, axis=0)
        nodes = np.array([self._channel(sums, vector, limits) for vector in self.colours.ratio])
        return self._constant + log_sum(nodes.T + np.log(self.colours.weight))

    def log_constant(self) -> float:
        """Log likelihood of a constant source: levels alone."""
        no_shape = np.zeros((1, self.data.all_times.size))
        sums = self._sums(no_shape)
        every = np.ones(self.data.n_bands)
        return float(self._constant + self._log_factor(sums, every, np.zeros((1, 1)), limits=True)[0, 0])

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
        if self.colours is None:
            node = np.zeros(m, dtype=np.intp)
            columns = [self._draw_amplitude(sums, vector, rng) for vector in np.eye(self.data.n_bands)]
            amplitude = np.stack(columns, axis=1)
        else:
            log_nodes = np.array([self._channel(sums, vector) for vector in self.colours.ratio]).T
            log_nodes += np.log(self.colours.weight)
            cumulative = np.cumsum(np.exp(log_nodes - log_nodes.max(axis=1, keepdims=True)), axis=1)
            pick = rng.random(m) * cumulative[:, -1]
            node = np.minimum((cumulative < pick[:, None]).sum(axis=1), len(self.colours.weight) - 1)
            amplitude = np.empty((m, self.data.n_bands))
            for k in np.unique(node):
                mine = node == k
                vector = self.colours.ratio[k]
                amplitude[mine] = self._draw_amplitude(sums.rows(mine), vector, rng)[:, None] * vector
        return LinearDraw(amplitude=amplitude, level=self._draw_levels(sums, amplitude, rng), node=node)

    def best(self, shape: NDArray[np.float64], node: int | None = None) -> LinearDraw:
        """Least-squares amplitudes (never negative) and levels for the (m, n_all) shapes; limits are left aside."""
        sums = self._sums(shape)
        if self.colours is None:
            amplitude = np.divide(sums.beta, sums.alpha, out=np.zeros_like(sums.beta), where=sums.alpha > 0)
        else:
            vector = self.colours.ratio[node or 0]
            alpha, beta = sums.alpha @ vector**2, sums.beta @ vector
            amplitude = np.divide(beta, alpha, out=np.zeros_like(beta), where=alpha > 0)[:, None] * vector
        amplitude = np.clip(amplitude, 0.0, self.high)
        level = self._level_mean(sums, amplitude[:, self.data.level_band])
        level = np.where(self.data.level_nonnegative, np.maximum(level, 0.0), level)
        chosen = np.full(shape.shape[0], node or 0, dtype=np.intp)
        return LinearDraw(amplitude=amplitude, level=level, node=chosen)

    def model(self, shape: NDArray[np.float64], draw: LinearDraw) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Model fluxes (m, n) of the detections and (m, n_limits) of the limits [nJy]."""
        data = self.data
        detected, limited = data.split(shape)
        return (
            draw.amplitude[:, data.band] * detected + draw.level[:, data.level],
            draw.amplitude[:, data.limit_band] * limited + draw.level[:, data.limit_level],
        )

    # -- the pieces ----------------------------------------------------------------------------------------------

    def _sums(self, shape: NDArray[np.float64]) -> _Sums:
        detected, limited = self.data.split(shape)
        slope = detected @ self._weight
        cross = detected @ self._weight_flux
        square = detected**2 @ self._weight
        alpha = (square - slope**2 / self._precision) @ self._to_band
        beta = (cross - slope * self._flux_sum / self._precision) @ self._to_band
        # Rounding may leave a flat shape with a tiny negative curvature.
        alpha = np.where(alpha > 1e-12 * (square @ self._to_band), alpha, 0.0)
        return _Sums(alpha, beta, slope, limited)

    def _level_mean(self, sums: _Sums, amplitude: NDArray[np.float64]) -> NDArray[np.float64]:
        """Conditional mean of the levels for amplitudes (m, n_levels)."""
        return (self._flux_sum - amplitude * sums.slope) / self._precision

    def _channel(self, sums: _Sums, vector: NDArray[np.float64], limits: bool = True) -> NDArray[np.float64]:
        """Log of the likelihood ratio averaged over the amplitude of one channel, (m,)."""
        m = sums.alpha.shape[0]
        out = np.empty(m)
        limits = limits and bool(np.any(vector[self.data.limit_band] != 0.0))
        step = max(1, _CHUNK // (_NODES * (1 + _LEVEL_NODES * limits)))
        for start in range(0, m, step):
            part = slice(start, start + step)
            out[part] = self._channel_chunk(sums.rows(part), vector, limits)
        return out

    def _channel_chunk(self, sums: _Sums, vector: NDArray[np.float64], limits: bool) -> NDArray[np.float64]:
        ends = self._windows(sums, vector, limits)
        logs = []
        for (low, high), (node, log_node_weight) in zip(ends, _LEGENDRE, strict=False):
            half = 0.5 * (high - low)
            ln_amplitude = low[:, None] + half[:, None] * (node + 1.0)
            with np.errstate(divide="ignore"):
                log_weight = log_node_weight + np.log(half)[:, None]
            logs.append(self._log_amplitude(sums, vector, np.exp(ln_amplitude), limits) + log_weight)
        return log_sum(np.concatenate(logs, axis=1)) - np.log(np.log(self.high / self.low))

    def _windows(self, sums: _Sums, vector: NDArray[np.float64], limits: bool) -> list[tuple[NDArray[np.float64], ...]]:
        """Ranges of ln(amplitude) that hold the integral: the window of the data, and below it where limits pull."""
        alpha, beta = sums.alpha @ vector**2, sums.beta @ vector
        with np.errstate(divide="ignore", invalid="ignore"):
            centre, sigma = beta / alpha, alpha**-0.5
            upper = np.where(alpha > 0, np.maximum(centre, 0.0) + _WINDOW * sigma, self.high)
            lower = np.where(alpha > 0, centre - _WINDOW * sigma, self.low)
        # At least one e-fold stays in the window where the best amplitude lies outside the prior.
        high = np.log(np.clip(upper, self.low * np.e, self.high))
        low = np.log(np.clip(lower, self.low, self.high / np.e))
        windows: list[tuple[NDArray[np.float64], ...]] = [(low, high)]
        if limits:
            windows.append((np.full_like(low, np.log(self.low)), low))
        return windows

    def _log_amplitude(
        self, sums: _Sums, vector: NDArray[np.float64], amplitude: NDArray[np.float64], limits: bool
    ) -> NDArray[np.float64]:
        """Log likelihood ratio at the (m, k) amplitudes of one channel."""
        alpha, beta = sums.alpha @ vector**2, sums.beta @ vector
        gauss = amplitude * (beta[:, None] - 0.5 * alpha[:, None] * amplitude)
        return gauss + self._log_factor(sums, vector, amplitude, limits)

    def _log_factor(
        self, sums: _Sums, vector: NDArray[np.float64], amplitude: NDArray[np.float64], limits: bool
    ) -> NDArray[np.float64]:
        """What nonnegative levels and upper limits add to the Gaussian, (m, k), for the levels of one channel."""
        data = self.data
        out = np.zeros_like(amplitude)
        for k in map(int, np.flatnonzero(vector[data.level_band] != 0.0)):
            scale = vector[data.level_band[k]]
            slope = scale * sums.slope[:, k, None]
            mean = (self._flux_sum[k] - amplitude * slope) / self._precision[k]
            if data.level_nonnegative[k]:
                out += np.log(2.0) + log_ndtr(mean / self._spread[k])
            if limits and k in self._limit_levels:
                out += self._log_limits(sums, k, scale * amplitude, mean)
        return out

    def _level_nodes(self, k: int, mean: NDArray[np.float64], count: int) -> NDArray[np.float64]:
        """Equally probable values of level `k` given its conditional mean; a last axis of `count`."""
        quantile = (np.arange(count) + 0.5) / count
        if not self.data.level_nonnegative[k]:
            return mean[..., None] + self._spread[k] * ndtri(quantile)
        # Upper tail of the truncated Gaussian, kept accurate where the mean is far below zero.
        above = ndtr(mean / self._spread[k])[..., None]
        positive = mean[..., None] - self._spread[k] * ndtri(np.maximum(above * (1.0 - quantile), 1e-300))
        return np.maximum(positive, 0.0)

    def _log_limits(
        self, sums: _Sums, k: int, amplitude: NDArray[np.float64], mean: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Log probability of the non-detections that share level `k`, averaged over that level, (m, j)."""
        data = self.data
        level = self._level_nodes(k, mean, _LEVEL_NODES)
        logs = np.zeros_like(level)
        for row in np.flatnonzero(data.limit_level == k):
            model = (amplitude * sums.limits[:, row, None])[..., None] + level
            logs += log_ndtr((data.limit[row] - model) / data.limit_sigma[row])
        return log_sum(logs) - np.log(_LEVEL_NODES)

    def _draw_amplitude(
        self, sums: _Sums, vector: NDArray[np.float64], rng: np.random.Generator
    ) -> NDArray[np.float64]:
        m = sums.alpha.shape[0]
        out = np.empty(m)
        limits = bool(np.any(vector[self.data.limit_band] != 0.0))
        step = max(1, _CHUNK // (2 * _DRAW_NODES * (1 + _LEVEL_NODES * limits)))
        for start in range(0, m, step):
            part = slice(start, min(start + step, m))
            chunk = sums.rows(part)
            ends = self._windows(chunk, vector, limits)
            low, high = ends[-1][0], ends[0][1]
            ln_amplitude = np.linspace(ends[0][0], high, _DRAW_NODES, axis=1)
            if len(ends) > 1:
                below = np.linspace(low, ends[0][0], _DRAW_NODES // 2, endpoint=False, axis=1)
                ln_amplitude = np.concatenate([below, ln_amplitude], axis=1)
            density = self._log_amplitude(chunk, vector, np.exp(ln_amplitude), limits)
            density = np.exp(density - density.max(axis=1, keepdims=True))
            out[part] = np.exp(_draw_from_density(ln_amplitude, density, rng))
        return out

    def _draw_levels(
        self, sums: _Sums, amplitude: NDArray[np.float64], rng: np.random.Generator
    ) -> NDArray[np.float64]:
        data = self.data
        mean = self._level_mean(sums, amplitude[:, data.level_band])
        out = mean + self._spread * rng.standard_normal(mean.shape)
        for k in range(data.n_levels):
            limited = k in self._limit_levels
            if not limited and not data.level_nonnegative[k]:
                continue
            nodes = self._level_nodes(k, mean[:, k], 16 * _LEVEL_NODES)
            logs = np.zeros_like(nodes)
            for row in np.flatnonzero(data.limit_level == k):
                model = (amplitude[:, data.limit_band[row]] * sums.limits[:, row])[:, None] + nodes
                logs += log_ndtr((data.limit[row] - model) / data.limit_sigma[row])
            cumulative = np.cumsum(np.exp(logs - logs.max(axis=1, keepdims=True)), axis=1)
            pick = rng.random(len(nodes)) * cumulative[:, -1]
            index = np.minimum((cumulative < pick[:, None]).sum(axis=1), nodes.shape[1] - 1)
            out[:, k] = nodes[np.arange(len(nodes)), index]
        return out


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
