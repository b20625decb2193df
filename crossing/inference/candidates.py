"""One candidate model of a light curve: searched, integrated, and ready to be sampled."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.stats import chi2 as chi2_law

from crossing.inference.linear import LinearPart
from crossing.inference.nested import Nested, nested
from crossing.inference.refine import Optimum, choose_starts, least_squares, optima
from crossing.inference.scan import Scan, evaluator, first_cells, scan

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from crossing.inference.data import FitData
    from crossing.inference.linear import Colours, LinearDraw
    from crossing.inference.priors import FitPriors
    from crossing.inference.shapes import Shape

__all__ = ["Candidate", "constant_fit", "fit_nested", "fit_scan", "linear_part"]

# Local minima whose chi-squared is this much above the best need no cells of their own.
_RELEVANT = 60.0


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


def fit_nested(shape: Shape, linear: LinearPart, rng: np.random.Generator) -> Candidate:
    """Sample a shape of any number of parameters."""
    result = nested(shape, linear, rng)
    starts = [(result.best, result.best_label)]
    heavy = np.argsort(result.weight)[::-1]
    starts += [(result.theta[k], int(result.label[k])) for k in heavy[:: max(1, len(heavy) // 6)][:6]]
    return _candidate(shape, linear, result, optima(starts, shape, linear))


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
