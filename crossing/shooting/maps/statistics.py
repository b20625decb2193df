"""One-point statistics of a magnification map, with errors that know that its pixels are correlated."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.shooting.maps.magnification_map import MagnificationMap

__all__ = ["BLOCKS", "MapStatistics", "block_error", "map_statistics"]

BLOCKS = 8
"""Blocks on a side that errors are estimated from."""

_MOST_BINS = 100_000


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MapStatistics:
    """Mean and distribution of the magnification over a map.

    Notes
    -----
    Standard errors come from the scatter between blocks of the map: 8 x 8 and 4 x 4 of them and 8 strips along either
    axis, whichever scatter most. Against the scatter between fields (five kinds, maps of 10 to 30 theta_E) they come
    out between 0.7 times and, where the macro image is bright and the map much larger than the stars' deflections, 3.7
    times. What varies on the scale of the whole map is beyond them; for a mean that matters, take several fields.
    In the map of a merging pair, what the macro lens changes across it counts as scatter.
    """

    mean: float
    """Mean magnification."""
    mean_error: float
    """Its standard error; NaN for a single pixel."""
    expected_mean: float | None
    """Mean over infinitely many fields, where it is known."""
    edges: NDArray[np.float64]
    """(n + 1,) edges of the bins in magnification."""
    density: NDArray[np.float64]
    """(n,) p(mu) per ln mu: share of the area in the bin over its width in ln mu."""
    density_error: NDArray[np.float64]
    """(n,) standard errors."""
    exceeding: NDArray[np.float64]
    """(n + 1,) P(>mu): share of the area above each edge."""
    exceeding_error: NDArray[np.float64]
    """(n + 1,) standard errors."""
    below: float
    """Share of the area below the first edge."""
    above: float
    """Share of the area at or above the last edge."""
    pixels: int
    """Number of pixels."""

    def to_table(self) -> QTable:
        """One row a bin: mu_low, mu_high, density per ln mu, P(>mu_low), and their standard errors."""
        from astropy.table import QTable

        return QTable(
            {
                "mu_low": self.edges[:-1],
                "mu_high": self.edges[1:],
                "density": self.density,
                "density_error": self.density_error,
                "exceeding": self.exceeding[:-1],
                "exceeding_error": self.exceeding_error[:-1],
            },
            meta={
                "mean": self.mean,
                "mean_error": self.mean_error,
                "expected_mean": self.expected_mean,
                "below": self.below,
                "above": self.above,
                "pixels": self.pixels,
                "density": "share of the area per unit of ln mu",
                "exceeding": "share of the area above mu_low",
            },
        )

    def to_dict(self) -> dict[str, Any]:
        """All numbers, as JSON can hold them."""
        return {
            "mean": self.mean,
            "mean_error": self.mean_error,
            "expected_mean": self.expected_mean,
            "edges": self.edges.tolist(),
            "density": self.density.tolist(),
            "density_error": self.density_error.tolist(),
            "exceeding": self.exceeding.tolist(),
            "exceeding_error": self.exceeding_error.tolist(),
            "below": self.below,
            "above": self.above,
            "pixels": self.pixels,
        }

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw p(mu) and P(>mu) with their errors.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw; a new figure if None.
        """
        from crossing.shooting.maps.map_figure import plot_statistics

        return plot_statistics(self, ax)


def map_statistics(chart: MagnificationMap, bins: int | Sequence[float] | NDArray[np.float64] = 50) -> MapStatistics:
    """See `MagnificationMap.statistics`."""
    edges = _edges(chart.values, bins)
    shares, means, weights = _by_blocks(chart.values, edges)
    total = weights.sum()
    share = (shares * weights[..., None]).sum(axis=(0, 1)) / total
    mean = float((means * weights).sum() / total)
    # shares: below the first edge, in each bin, at or above the last edge
    width = np.diff(np.log(edges))
    tails = np.cumsum(shares[..., ::-1], axis=-1)[..., ::-1][..., 1:]
    return MapStatistics(
        mean=mean,
        mean_error=float(block_error(means, weights)),
        expected_mean=chart.expected_mean,
        edges=edges,
        density=share[1:-1] / width,
        density_error=block_error(shares[..., 1:-1], weights) / width,
        exceeding=np.cumsum(share[::-1])[::-1][1:],
        exceeding_error=block_error(tails, weights),
        below=float(share[0]),
        above=float(share[-1]),
        pixels=chart.values.size,
    )


def block_error(blocks: NDArray[np.float64], weights: NDArray[np.float64]) -> NDArray[np.float64]:
    """Standard error of the mean of blocks that may be correlated with their neighbours.

    Parameters
    ----------
    blocks : (rows, columns, ...) ndarray
        Means over blocks.
    weights : (rows, columns) ndarray
        Their areas.

    Returns
    -------
    ndarray of the remaining shape
        The largest of the errors from single blocks, from 2 x 2 of them together, and from whole rows and columns of
        them; NaN where there is one block.
    """
    rows, columns = weights.shape
    found = [np.full(blocks.shape[2:], np.nan)]
    for tall, wide in ((1, 1), (2, 2), (rows, 1), (1, columns)):
        starts = np.arange(0, rows, tall), np.arange(0, columns, wide)
        if len(starts[0]) * len(starts[1]) < 2:
            continue
        area = np.add.reduceat(np.add.reduceat(weights, starts[0], axis=0), starts[1], axis=1)
        weighted = blocks * weights.reshape(weights.shape + (1,) * (blocks.ndim - 2))
        mean = np.add.reduceat(np.add.reduceat(weighted, starts[0], axis=0), starts[1], axis=1)
        found.append(_spread(mean, area))
    return np.asarray(np.fmax.reduce(found))


def _spread(sums: NDArray[np.float64], area: NDArray[np.float64]) -> NDArray[np.float64]:
    """Standard error of the overall mean from independent blocks with the given sums and areas."""
    count, total = area.size, area.sum()
    overall = sums.sum(axis=(0, 1)) / total
    excess = sums - area.reshape(area.shape + (1,) * (sums.ndim - 2)) * overall
    return np.asarray(np.sqrt((excess**2).sum(axis=(0, 1)) * count / (count - 1)) / total)


def _edges(values: NDArray[np.float64], bins: int | Sequence[float] | NDArray[np.float64]) -> NDArray[np.float64]:
    if np.ndim(bins) == 0:
        if not isinstance(bins, int | np.integer) or not 1 <= bins <= _MOST_BINS:
            raise InputError(f"`bins` must be a whole number from 1 to {_MOST_BINS}, or edges, got {bins!r}")
        high = float(values.max())
        low = float(np.min(values, where=values > 0.0, initial=high))
        if not high > 0.0:
            raise InputError(f"`bins` must be edges for a map without light, got {bins}; give their magnifications")
        # The highest pixel belongs into the last bin, and a map of one value into the only one that it needs.
        low, high = (low, high * (1.0 + 1e-9)) if high > low * (1.0 + 1e-6) else (low * 0.99, high * 1.01)
        return np.geomspace(low, high, int(bins) + 1)
    edges = np.asarray(bins, dtype=np.float64)
    if (
        edges.ndim != 1
        or len(edges) < 2
        or not (edges[0] > 0.0 and (np.diff(edges) > 0.0).all() and edges[-1] < np.inf)
    ):
        raise InputError("`bins` must be two or more edges, positive, finite and increasing, got others; sort them")
    return edges


def _by_blocks(
    values: NDArray[np.float64], edges: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Shares in bins (rows, columns, n + 2), means (rows, columns) and sizes of the blocks of a map."""
    rows, columns = (min(BLOCKS, size) for size in values.shape)
    v_cuts = [size * values.shape[0] // rows for size in range(rows + 1)]
    u_cuts = [size * values.shape[1] // columns for size in range(columns + 1)]
    shares = np.empty((rows, columns, len(edges) + 1))
    means, weights = np.empty((rows, columns)), np.empty((rows, columns))
    for i in range(rows):
        for j in range(columns):
            block = values[v_cuts[i] : v_cuts[i + 1], u_cuts[j] : u_cuts[j + 1]]
            slot = np.searchsorted(edges, block.ravel(), side="right")
            shares[i, j] = np.bincount(slot, minlength=len(edges) + 1) / block.size
            means[i, j], weights[i, j] = block.mean(), block.size
    return shares, means, weights
