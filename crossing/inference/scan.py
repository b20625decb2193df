"""Dense scan of a time and a duration: global search, posterior and evidence in one go.

The plane of (time, ln duration) is cut into cells that follow the epochs, and cells are split wherever they hold, or
may hold, a noticeable share of the posterior. Nothing can get stuck: every cell of the prior is looked at.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import logsumexp

from crossing.inference.linear import log_sum
from crossing.progress import track

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from crossing.inference.linear import LinearPart
    from crossing.inference.priors import Range
    from crossing.inference.shapes import Shape

    Evaluate = Callable[[NDArray[np.float64], int], NDArray[np.float64]]
    Start = tuple[NDArray[np.float64], int]
    Peaks = Callable[[NDArray[np.float64], NDArray[np.intp], NDArray[np.float64]], Sequence[Start]]

__all__ = ["Scan", "evaluator", "first_cells", "scan"]

_STRIP = 0.25
_BASE_CELLS = 48
_GAUSS = 1.0 / np.sqrt(3.0)
# A cell is split while it may hold more than this share of the posterior and varies by more than _FLAT inside.
_SHARE = 1.0 / 3000.0
_FLAT = 0.15
_MAX_ROUNDS = 40
_MAX_CELLS = 60_000
_CHUNK = 1_500_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Scan:
    """Posterior of a two-parameter shape as weighted cells."""

    ln_evidence: float
    """Natural log of the evidence."""
    theta: NDArray[np.float64]
    """(n, 2) centres of the sub-cells: time [d], ln duration."""
    half: NDArray[np.float64]
    """(n, 2) half sizes of the sub-cells."""
    label: NDArray[np.intp]
    """(n,) discrete alternative of each sub-cell."""
    weight: NDArray[np.float64]
    """(n,) posterior probability of each sub-cell, summing to 1."""
    best: NDArray[np.float64]
    """(2,) parameters of the best point met."""
    best_label: int
    """Its discrete alternative."""
    evaluations: int
    """Number of shapes evaluated."""
    complete: bool
    """False where the scan stopped at its limits before every cell was fine enough."""

    def sample(self, size: int, rng: np.random.Generator) -> tuple[NDArray[np.float64], NDArray[np.intp]]:
        """Draw (size, 2) parameters and their (size,) labels from the posterior."""
        pick = rng.choice(len(self.weight), size=size, p=self.weight)
        jitter = rng.uniform(-1.0, 1.0, size=(size, 2))
        return self.theta[pick] + jitter * self.half[pick], self.label[pick]


def evaluator(shape: Shape, linear: LinearPart) -> Evaluate:
    """Log likelihood of parameters (m, n) under one label, in chunks that fit in memory."""
    n_all = max(1, linear.data.all_times.size)

    def evaluate(theta: NDArray[np.float64], label: int) -> NDArray[np.float64]:
        step = max(1, _CHUNK // n_all)
        parts = [
            linear.log_marginal(shape.evaluate(theta[start : start + step], label))
            for start in range(0, len(theta), step)
        ]
        return np.concatenate(parts) if parts else np.empty(0)

    return evaluate


def first_cells(
    times: NDArray[np.float64], window: Range, duration: Range, features: NDArray[np.float64]
) -> NDArray[np.float64]:
    """First cells (n, 4): time low and high, ln duration low and high.

    Times are cut where an epoch in `times` meets one of the shape's `features` (in durations after its time), and at a
    plain grid.
    """
    epochs = np.unique(times)
    base = np.linspace(window.low, window.high, _BASE_CELLS + 1)
    strips = np.linspace(duration.low, duration.high, int(np.ceil(duration.width / _STRIP)) + 1)
    finest = 0.8 * float(np.diff(np.sort(features)).min())
    cells = []
    for low, high in pairwise(strips):
        length = np.exp(0.5 * (low + high))
        edges = np.concatenate([base, (epochs[:, None] - length * features).ravel()])
        edges = np.sort(edges[(edges >= window.low) & (edges <= window.high)])
        edges = _thin(edges, finest * length)
        pair = np.stack([edges[:-1], edges[1:]], axis=1)
        cells.append(np.column_stack([pair, np.full(len(pair), low), np.full(len(pair), high)]))
    return np.concatenate(cells)


def _thin(edges: NDArray[np.float64], least: float) -> NDArray[np.float64]:
    """Drop edges closer than `least` to the one kept before them; both ends stay."""
    bins = np.floor((edges - edges[0]) / least).astype(np.int64)
    keep = np.concatenate([[True], np.diff(bins) > 0])
    kept = edges[keep]
    if kept[-1] < edges[-1]:
        kept = np.append(kept, edges[-1])
    return kept


def _points(cells: NDArray[np.float64]) -> NDArray[np.float64]:
    """The (n, 4, 2) Gauss points of cells (n, 4)."""
    centre = 0.5 * (cells[:, (0, 2)] + cells[:, (1, 3)])
    half = 0.5 * (cells[:, (1, 3)] - cells[:, (0, 2)])
    corner = _GAUSS * np.array([[-1.0, -1.0], [-1.0, 1.0], [1.0, -1.0], [1.0, 1.0]])
    points: NDArray[np.float64] = centre[:, None, :] + half[:, None, :] * corner
    return points


def _quarter(cells: NDArray[np.float64]) -> NDArray[np.float64]:
    """Split every cell in four."""
    t0, t1, d0, d1 = cells.T
    tm, dm = 0.5 * (t0 + t1), 0.5 * (d0 + d1)
    return np.concatenate(
        [np.column_stack(part) for part in ((t0, tm, d0, dm), (t0, tm, dm, d1), (tm, t1, d0, dm), (tm, t1, dm, d1))]
    )


def _area(cells: NDArray[np.float64]) -> NDArray[np.float64]:
    area: NDArray[np.float64] = (cells[:, 1] - cells[:, 0]) * (cells[:, 3] - cells[:, 2])
    return area


class _Cells:
    """Cells of all labels with the log likelihood at their Gauss points."""

    def __init__(self) -> None:
        self.cells = np.empty((0, 4))
        self.label = np.empty(0, dtype=np.intp)
        self.values = np.empty((0, 4))
        self.hint = np.empty(0)

    def add(self, cells: NDArray[np.float64], label: int, values: NDArray[np.float64]) -> None:
        self.cells = np.concatenate([self.cells, cells])
        self.label = np.concatenate([self.label, np.full(len(cells), label, dtype=np.intp)])
        self.values = np.concatenate([self.values, values])
        self.hint = np.concatenate([self.hint, np.full(len(cells), -np.inf)])

    def drop(self, mask: NDArray[np.bool_]) -> None:
        keep = ~mask
        self.cells, self.label, self.values = self.cells[keep], self.label[keep], self.values[keep]
        self.hint = self.hint[keep]

    def mark(self, peaks: Sequence[tuple[NDArray[np.float64], int, float]]) -> None:
        """Tell cells that hold an optimum, or touch it, so that they are split until they resolve it."""
        self.hint[:] = -np.inf
        margin = 0.3 * (self.cells[:, (1, 3)] - self.cells[:, (0, 2)])
        low, high = self.cells[:, (0, 2)] - margin, self.cells[:, (1, 3)] + margin
        for theta, label, value in peaks:
            holds = ((low <= theta) & (theta <= high)).all(axis=1) & (self.label == label)
            self.hint[holds] = np.maximum(self.hint[holds], value)

    def log_mass(self) -> NDArray[np.float64]:
        """Log of likelihood times area of each cell."""
        return log_sum(self.values) - np.log(4.0) + np.log(_area(self.cells))

    def to_split(self) -> NDArray[np.bool_]:
        """Cells that may hold a noticeable share of the posterior and are not flat inside."""
        log_total = float(logsumexp(self.log_mass()))
        top, bottom = self.values.max(axis=1), self.values.min(axis=1)
        spread = np.minimum(np.maximum(top, self.hint) - bottom, 1e4)
        # Linear extrapolation from the Gauss points to the corners bounds what a smooth peak can reach.
        reach = np.maximum(top + np.minimum(0.4 * (top - bottom), 8.0), self.hint)
        potential = reach + np.log(_area(self.cells)) - log_total
        mask: NDArray[np.bool_] = (potential > np.log(_SHARE)) & (spread > _FLAT)
        return mask


def scan(
    evaluate: Evaluate,
    starts: Sequence[NDArray[np.float64]],
    prior_area: float,
    peaks: Peaks,
    what: str,
) -> Scan:
    """Integrate a likelihood over its two parameters and discrete labels.

    Parameters
    ----------
    evaluate : callable
        ``evaluate(theta (m, 2), label) -> (m,)`` log likelihoods.
    starts : sequence of (n, 4) ndarray
        First cells of each label, which together fill the prior.
    prior_area : float
        Area of the prior in the plane of both parameters.
    peaks : callable
        Given the centres (n, 2), labels and log likelihoods of the first cells, returns refined optima
        ``(theta, label)``.
    what : str
        Name of the model, for the progress bar.
    """
    store, evaluations = _Cells(), 0
    centres, labels, first = [], [], []
    for label, cells in enumerate(starts):
        centre = 0.5 * (cells[:, (0, 2)] + cells[:, (1, 3)])
        value = evaluate(centre, label)
        evaluations += len(centre)
        centres.append(centre)
        labels.append(np.full(len(centre), label, dtype=np.intp))
        first.append(value)
        # One point a cell is enough to see which of the first cells matter; the split looks closer.
        store.add(cells, label, np.repeat(value[:, None], 4, axis=1))
    found = peaks(np.concatenate(centres), np.concatenate(labels), np.concatenate(first))
    optima = [(theta, label, float(evaluate(theta[None, :], label)[0])) for theta, label in found]
    complete, most = False, len(store.cells) + _MAX_CELLS
    for number in track(range(_MAX_ROUNDS), f"scanning {what}"):
        store.mark(optima)
        split = store.to_split() if number else _worth_a_look(store, optima)
        if not split.any():
            complete = True
            break
        if len(store.cells) + 3 * int(split.sum()) > most:
            break
        chosen, chosen_label = store.cells[split], store.label[split]
        store.drop(split)
        for label in np.unique(chosen_label):
            parts = _quarter(chosen[chosen_label == label])
            points = _points(parts)
            values = evaluate(points.reshape(-1, 2), int(label)).reshape(-1, 4)
            evaluations += values.size
            store.add(parts, int(label), values)
    return _finish(store, optima, prior_area * len(starts), evaluations, complete)


def _worth_a_look(store: _Cells, optima: Sequence[tuple[NDArray[np.float64], int, float]]) -> NDArray[np.bool_]:
    """First cells to split: those that may reach the best point, and those that hold an optimum.

    Neighbours in the list are neighbours in time; their differences tell how far a cell may rise from its centre.
    """
    value = store.values[:, 0]
    top = max([float(value.max()), *(peak for _, _, peak in optima)])
    step = np.abs(np.diff(value))
    rise = np.maximum(np.append(step, 0.0), np.append(0.0, step))
    near: NDArray[np.bool_] = value + np.maximum(1.5 * rise, 10.0) > top - 20.0
    return near | np.isfinite(store.hint)


def _finish(
    store: _Cells,
    optima: Sequence[tuple[NDArray[np.float64], int, float]],
    prior_area: float,
    evaluations: int,
    complete: bool,
) -> Scan:
    log_mass = store.values + np.log(_area(store.cells))[:, None] - np.log(4.0)
    log_total = float(logsumexp(log_mass))
    weight = np.exp(log_mass - log_total).ravel()
    quarter = np.array([[-0.5, -0.5], [-0.5, 0.5], [0.5, -0.5], [0.5, 0.5]])
    centre = 0.5 * (store.cells[:, (0, 2)] + store.cells[:, (1, 3)])
    half = 0.5 * (store.cells[:, (1, 3)] - store.cells[:, (0, 2)])
    theta = (centre[:, None, :] + half[:, None, :] * quarter).reshape(-1, 2)
    keep = weight > 1e-9 * weight.max()
    top = np.unravel_index(int(np.argmax(store.values)), store.values.shape)
    best, best_label = _points(store.cells[top[0]][None])[0, top[1]], int(store.label[top[0]])
    best_value = float(store.values[top])
    for peak, label, value in optima:
        if value >= best_value:
            best, best_label, best_value = peak, label, value
    return Scan(
        ln_evidence=log_total - float(np.log(prior_area)),
        theta=theta[keep],
        half=np.repeat(0.5 * half, 4, axis=0)[keep],
        label=np.repeat(store.label, 4)[keep],
        weight=weight[keep] / weight[keep].sum(),
        best=best,
        best_label=best_label,
        evaluations=evaluations,
        complete=complete,
    )
