"""Posterior and evidence by nested sampling, for shapes with more than two parameters and to check the scan."""

from __future__ import annotations

import warnings
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from io import StringIO
from typing import TYPE_CHECKING

import dynesty
import numpy as np
from scipy.special import logsumexp

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from crossing.inference.linear import LinearPart
    from crossing.inference.priors import Range
    from crossing.inference.shapes import Shape

__all__ = ["Nested", "nested"]

# An evidence cannot exceed its highest likelihood: this far below the sum, in ln, an unfinished run does not matter.
_NEGLIGIBLE = 7.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Nested:
    """Weighted posterior samples of a shape, all discrete alternatives together."""

    ln_evidence: float
    """Natural log of the evidence, averaged over the alternatives."""
    ln_evidence_error: float
    """Its standard error as the sampler estimates it."""
    theta: NDArray[np.float64]
    """(n, n_parameters) samples."""
    label: NDArray[np.intp]
    """(n,) discrete alternatives."""
    weight: NDArray[np.float64]
    """(n,) weights, summing to 1."""
    best: NDArray[np.float64]
    """(n_parameters,) sample of highest likelihood."""
    best_label: int
    """Its discrete alternative."""
    evaluations: int
    """Number of shapes evaluated."""
    complete: bool
    """False where the call limit came before the evidence had settled, unless that alternative is out of the race."""

    def sample(self, size: int, rng: np.random.Generator) -> tuple[NDArray[np.float64], NDArray[np.intp]]:
        """Draw (size, n_parameters) parameters and their (size,) labels from the posterior."""
        pick = rng.choice(len(self.weight), size=size, p=self.weight)
        return self.theta[pick], self.label[pick]


class _Likelihood:
    """Log likelihood and prior transform of one alternative, as a picklable callable."""

    def __init__(self, shape: Shape, linear: LinearPart, label: int, box: Sequence[Range]) -> None:
        self.shape, self.linear, self.label, self.box = shape, linear, label, box

    def __call__(self, theta: NDArray[np.float64]) -> float:
        return float(self.linear.log_marginal(self.shape.evaluate(theta[None, :], self.label))[0])

    def prior(self, unit: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.array([prior.scale(u) for prior, u in zip(self.box, unit, strict=True)])


def nested(
    shape: Shape,
    linear: LinearPart,
    rng: np.random.Generator,
    *,
    box: Sequence[Range] | None = None,
    live_points: int = 250,
    precision: float = 0.2,
    most_calls: int = 150_000,
) -> Nested:
    """Sample a shape's posterior.

    Parameters
    ----------
    shape, linear
        The model's nonlinear and linear parts.
    rng : numpy.random.Generator
        Source of random numbers.
    box : sequence of Range, optional
        Part of the prior's ranges outside of which the likelihood is known to be negligible; the evidence stays that
        of the whole prior.
    live_points : int
        Points that explore the prior together.
    precision : float
        Share of the evidence, in ln units, that may be left when the sampler stops.
    most_calls : int
        Likelihood calls after which an alternative is given up as not converged.
    """
    inside = shape.ranges if box is None else tuple(box)
    shrunk = sum(float(np.log(part.width / whole.width)) for part, whole in zip(inside, shape.ranges, strict=True))
    runs = [
        _run(_Likelihood(shape, linear, label, inside), len(inside), rng, live_points, precision, most_calls)
        for label in range(len(shape.labels))
    ]
    log_z = np.array([run.logz[-1] for run in runs])
    total = float(logsumexp(log_z))
    log_weight = np.concatenate([run.logwt - total for run in runs])
    weight = np.exp(log_weight - logsumexp(log_weight))
    top = int(np.argmax([run.logl[-1] for run in runs]))
    share = np.exp(log_z - total)
    return Nested(
        ln_evidence=total + shrunk - float(np.log(len(runs))),
        ln_evidence_error=float(np.sqrt(sum((s * run.logzerr[-1]) ** 2 for s, run in zip(share, runs, strict=True)))),
        theta=np.concatenate([run.samples for run in runs]),
        label=np.concatenate([np.full(len(run.samples), k, dtype=np.intp) for k, run in enumerate(runs)]),
        weight=weight,
        best=np.asarray(runs[top].samples[-1], dtype=np.float64),
        best_label=top,
        evaluations=int(sum(np.sum(run.ncall) for run in runs)),
        complete=all(np.sum(run.ncall) < most_calls or run.logl[-1] < total - _NEGLIGIBLE for run in runs),
    )


def _run(
    likelihood: _Likelihood, n: int, rng: np.random.Generator, live_points: int, precision: float, most_calls: int
) -> dynesty.results.Results:
    # The sampler prints and dumps a traceback of its own when it is interrupted: the caller hears of it anyway.
    with warnings.catch_warnings(), redirect_stdout(StringIO()), redirect_stderr(StringIO()):
        # Running into the call limit is reported through `complete`.
        warnings.simplefilter("ignore", UserWarning)
        sampler = dynesty.NestedSampler(likelihood, likelihood.prior, n, nlive=live_points, rstate=rng, sample="rwalk")
        sampler.run_nested(dlogz=precision, maxcall=most_calls, print_progress=False)
    return sampler.results
