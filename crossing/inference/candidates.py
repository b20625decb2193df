"""One candidate model of a light curve: searched, integrated, and ready to be sampled."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2 as chi2_law
from scipy.stats.qmc import Sobol

from crossing.inference.linear import LinearPart
from crossing.inference.nested import Nested, nested
from crossing.inference.priors import Range
from crossing.inference.refine import Optimum, choose_starts, least_squares, optima
from crossing.inference.scan import Scan, evaluator, first_cells, scan

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from crossing.inference.data import FitData
    from crossing.inference.linear import Colours, LinearDraw
    from crossing.inference.priors import FitPriors
    from crossing.inference.shapes import Shape

__all__ = ["Candidate", "Pooled", "constant_fit", "fit_nested", "fit_scan", "linear_part"]

# Local minima whose chi-squared is this much above the best need no cells of their own.
_RELEVANT = 60.0
# First look of the sampled shapes: 2**14 points; how far below the best, in ln likelihood, nothing matters any more.
_LOOK_BITS = 14
_NEGLIGIBLE = 20.0
_BOX_ERRORS = 10.0
_TOUCH = 1e-3
# Live points of a quick run, good to about 0.5 in ln evidence, and what counts as clearly worse.
_QUICK_POINTS = 100
_CLEARLY_WORSE = 4.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidate:
    """A model with its posterior."""

    name: str
    """Name of the model."""
    ln_evidence: float
    """Natural log of the evidence."""
    chi2: float
    """Chi-squared at the best fit, limits included."""
    dof: int
    """Detections minus fitted parameters."""
    complete: bool
    """Whether the integration reached its accuracy."""
    shape: Shape | None = None
    """Nonlinear part; None for a constant source."""
    linear: LinearPart
    """Linear part."""
    posterior: Scan | Nested | None = None
    """Samples of the nonlinear parameters; None for a constant source."""
    best: Optimum | None = None
    """Best fit; None for a constant source."""
    distinct: tuple[Optimum, ...] = ()
    """All local minima that were found, best first."""

    @property
    def scatter(self) -> float:
        """Extra scatter that was added to the errors, in median errors of each band."""
        return self.linear.data.scatter

    @property
    def p_value(self) -> float:
        """Probability of a larger chi-squared if the model is true."""
        return float(chi2_law.sf(self.chi2, max(self.dof, 1)))

    def sample(self, size: int, rng: np.random.Generator) -> tuple[NDArray[np.float64], NDArray[np.intp], LinearDraw]:
        """Draw nonlinear parameters (size, n), labels (size,), amplitudes and levels."""
        if self.shape is None or self.posterior is None:
            shape = np.zeros((size, self.linear.data.all_times.size))
            return np.empty((size, 0)), np.zeros(size, dtype=np.intp), self.linear.draw_constant(size, rng)
        theta, label = self.posterior.sample(size, rng)
        shape = np.empty((size, self.linear.data.all_times.size))
        for one in np.unique(label):
            shape[label == one] = self.shape.evaluate(theta[label == one], int(one))
        return theta, label, self.linear.draw(shape, rng)


@dataclass(frozen=True, slots=True, kw_only=True)
class Pooled:
    """One model over all values of the extra scatter that were tried."""

    name: str
    """Name of the model."""
    ln_evidence: float
    """Natural log of the evidence, averaged over the scatters."""
    parts: tuple[Candidate, ...]
    """The model for each scatter."""
    share: tuple[float, ...]
    """Posterior probability of each scatter."""

    @property
    def leading(self) -> Candidate:
        """The part with the largest share."""
        return self.parts[int(np.argmax(self.share))]


def _degrees(data: FitData, n_nonlinear: int, n_amplitudes: int) -> int:
    return int(data.time.size - n_nonlinear - n_amplitudes - data.n_levels)


def constant_fit(linear: LinearPart) -> Candidate:
    """A source that does not change."""
    data = linear.data
    no_shape = np.zeros((1, data.all_times.size))
    draw = linear.best(no_shape)
    detected, _ = linear.model(no_shape, draw)
    chi2 = float((((data.flux - detected[0]) / data.sigma) ** 2).sum())
    return Candidate(
        name="constant",
        ln_evidence=linear.log_constant(),
        chi2=chi2,
        dof=_degrees(data, 0, 0),
        complete=True,
        linear=linear,
    )


def fit_scan(shape: Shape, linear: LinearPart) -> Candidate:
    """Integrate a two-parameter shape over its whole prior."""
    data, (window, duration) = linear.data, shape.ranges
    found: list[Optimum] = []

    def peaks(
        theta: NDArray[np.float64], label: NDArray[np.intp], value: NDArray[np.float64]
    ) -> Sequence[tuple[NDArray[np.float64], int]]:
        found.extend(optima(choose_starts(theta, label, value), shape, linear))
        near = [one for one in found if one.chi2 < found[0].chi2 + _RELEVANT]
        return [(one.theta, one.label) for one in near]

    times = np.concatenate([data.time, data.limit_time])
    starts = [first_cells(times, window, duration, shape.features(label)) for label in range(len(shape.labels))]
    result = scan(evaluator(shape, linear), starts, window.width * duration.width, peaks, shape.name)
    # The scan may have met a better point than least squares did: start once more from there.
    again = least_squares(result.best, result.best_label, shape, linear)
    ranked = sorted([*found, again], key=lambda one: one.chi2)
    return _candidate(shape, linear, result, ranked)


def fit_nested(shape: Shape, linear: LinearPart, rng: np.random.Generator, rival: float = -np.inf) -> Candidate:
    """Sample a shape of any number of parameters: a first look over the whole prior, least squares, then dynesty.

    Parameters
    ----------
    shape, linear
        The model's nonlinear and linear parts.
    rng : numpy.random.Generator
        Source of random numbers.
    rival : float
        ln evidence of another model: where a quick run falls clearly short of it, that run is all that is made.
    """
    theta, label, value = _first_look(shape, linear, rng)
    found = optima(choose_starts(theta, label, value, per_label=6), shape, linear)
    box = _box(shape, theta, value, found, evaluator(shape, linear))
    if rival > -np.inf:
        result = nested(shape, linear, rng, box=box, live_points=_QUICK_POINTS, precision=0.5)
        if not _touches(result, box, shape.ranges) and result.ln_evidence < rival - _CLEARLY_WORSE:
            return _candidate(shape, linear, result, found)
    result = nested(shape, linear, rng, box=box)
    if _touches(result, box, shape.ranges):
        result = nested(shape, linear, rng)
    again = least_squares(result.best, result.best_label, shape, linear)
    return _candidate(shape, linear, result, sorted([*found, again], key=lambda one: one.chi2))


def _first_look(
    shape: Shape, linear: LinearPart, rng: np.random.Generator
) -> tuple[NDArray[np.float64], NDArray[np.intp], NDArray[np.float64]]:
    """Quasi-random points over the prior of every label: parameters, labels and log likelihoods."""
    evaluate = evaluator(shape, linear)
    theta, label, value = [], [], []
    for number in range(len(shape.labels)):
        unit = Sobol(len(shape.ranges), seed=rng).random_base2(_LOOK_BITS)
        points = np.stack([prior.scale(column) for prior, column in zip(shape.ranges, unit.T, strict=True)], axis=1)
        theta.append(points)
        label.append(np.full(len(points), number, dtype=np.intp))
        value.append(evaluate(points, number))
    return np.concatenate(theta), np.concatenate(label), np.concatenate(value)


def _box(
    shape: Shape,
    theta: NDArray[np.float64],
    value: NDArray[np.float64],
    found: Sequence[Optimum],
    evaluate: Callable[[NDArray[np.float64], int], NDArray[np.float64]],
) -> list[Range]:
    """Part of the prior that holds every optimum that matters, ten standard errors wide, and every good point met."""
    heights = np.array([float(evaluate(one.theta[None, :], one.label)[0]) for one in found])
    top = max(float(heights.max()), float(value.max()))
    low = [prior.high for prior in shape.ranges]
    high = [prior.low for prior in shape.ranges]
    for one, height in zip(found, heights, strict=True):
        if height < top - _NEGLIGIBLE:
            continue
        error = one.error if one.error is not None else np.full(len(low), np.inf)
        low = list(np.minimum(low, one.theta - _BOX_ERRORS * error))
        high = list(np.maximum(high, one.theta + _BOX_ERRORS * error))
    good = theta[value > top - _NEGLIGIBLE]
    if len(good):
        margin = 0.05 * np.array([prior.width for prior in shape.ranges])
        low, high = list(np.minimum(low, good.min(axis=0) - margin)), list(np.maximum(high, good.max(axis=0) + margin))
    return [
        Range(name=prior.name, low=max(float(one), prior.low), high=min(float(two), prior.high))
        for prior, one, two in zip(shape.ranges, low, high, strict=True)
    ]


def _touches(result: Nested, box: Sequence[Range], ranges: Sequence[Range]) -> bool:
    """Whether the posterior reaches an end of the box that is not one of the prior's."""
    for column, part, whole in zip(result.theta.T, box, ranges, strict=True):
        edge = 0.02 * part.width
        below = float(result.weight[column < part.low + edge].sum())
        above = float(result.weight[column > part.high - edge].sum())
        if (part.low > whole.low and below > _TOUCH) or (part.high < whole.high and above > _TOUCH):
            return True
    return False


def _candidate(shape: Shape, linear: LinearPart, posterior: Scan | Nested, ranked: Sequence[Optimum]) -> Candidate:
    n_amplitudes = linear.data.n_bands if linear.colours is None else 1
    n_nonlinear = len(shape.ranges) + (linear.colours is not None and len(linear.colours.weight) > 1)
    return Candidate(
        name=shape.name,
        ln_evidence=posterior.ln_evidence,
        chi2=ranked[0].chi2,
        dof=_degrees(linear.data, n_nonlinear, n_amplitudes),
        complete=posterior.complete,
        shape=shape,
        linear=linear,
        posterior=posterior,
        best=ranked[0],
        distinct=tuple(ranked),
    )


def linear_part(data: FitData, priors: FitPriors, colours: Colours | None = None) -> LinearPart:
    """Linear part with the amplitude range that the priors give these data."""
    low, high = priors.amplitude_range(data)
    return LinearPart(data, low=low, high=high, colours=colours)
