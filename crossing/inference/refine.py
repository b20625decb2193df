"""Least squares from many starts: amplitudes and levels are solved for, times and durations are searched."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import lmfit
import numpy as np
from scipy.special import log_ndtr

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from crossing.inference.linear import LinearDraw, LinearPart
    from crossing.inference.priors import Range
    from crossing.inference.shapes import Shape

__all__ = ["Optimum", "choose_starts", "least_squares", "optima"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Optimum:
    """A local minimum of chi-squared."""

    theta: NDArray[np.float64]
    """(n,) nonlinear parameters."""
    error: NDArray[np.float64] | None
    """(n,) standard errors, or None where the curvature is singular."""
    label: int
    """Discrete alternative of the shape."""
    chi2: float
    """Chi-squared of the detections, plus minus twice the log probability of the limits."""
    linear: LinearDraw
    """Best amplitudes and levels."""
    success: bool
    """Whether the minimiser stopped at a minimum."""
    at_bound: tuple[str, ...]
    """Names of the parameters that stopped at an end of their range."""


def residuals(
    theta: NDArray[np.float64], label: int, shape: Shape, linear: LinearPart
) -> tuple[NDArray[np.float64], LinearDraw]:
    """Normalised residuals of the best amplitudes and levels for one parameter vector, limits last."""
    rows = shape.evaluate(theta[None, :], label)
    best = linear.best(rows)
    detected, limited = linear.model(rows, best)
    data = linear.data
    tail = np.sqrt(-2.0 * log_ndtr((data.limit - limited[0]) / data.limit_sigma))
    return np.concatenate([(data.flux - detected[0]) / data.sigma, tail]), best


def least_squares(theta: NDArray[np.float64], label: int, shape: Shape, linear: LinearPart) -> Optimum:
    """Minimise chi-squared from one start.

    Parameters
    ----------
    theta : (n,) ndarray
        Start; pulled inside the prior's ranges.
    label : int
        Discrete alternative, kept fixed.
    shape, linear
        The model's nonlinear and linear parts.
    """
    ranges = shape.ranges
    parameters = lmfit.Parameters()
    for k, (value, prior) in enumerate(zip(theta, ranges, strict=True)):
        edge = 1e-6 * prior.width
        start = float(np.clip(value, prior.low + edge, prior.high - edge))
        parameters.add(f"p{k}", value=start, min=prior.low, max=prior.high)

    def objective(values: lmfit.Parameters) -> NDArray[np.float64]:
        vector = np.array([values[f"p{k}"].value for k in range(len(ranges))])
        return residuals(vector, label, shape, linear)[0]

    # A flat chi-squared has no covariance: its square root is NaN, which `error` answers with None.
    with np.errstate(invalid="ignore"):
        fitted = lmfit.minimize(
            objective, parameters, method="least_squares", scale_covar=False, max_nfev=400, xtol=1e-8, ftol=1e-8
        )
    best = np.array([fitted.params[f"p{k}"].value for k in range(len(ranges))])
    stderr = [fitted.params[f"p{k}"].stderr for k in range(len(ranges))]
    error = None if any(value is None or not np.isfinite(value) for value in stderr) else np.array(stderr)
    values, draw = residuals(best, label, shape, linear)
    return Optimum(
        theta=best,
        error=error,
        label=label,
        chi2=float(values @ values),
        linear=draw,
        success=bool(fitted.success),
        at_bound=_bounds_hit(best, ranges),
    )


def _bounds_hit(theta: NDArray[np.float64], ranges: Sequence[Range]) -> tuple[str, ...]:
    return tuple(
        prior.name
        for value, prior in zip(theta, ranges, strict=True)
        if min(value - prior.low, prior.high - value) < 1e-3 * prior.width
    )


def choose_starts(
    theta: NDArray[np.float64], label: NDArray[np.intp], value: NDArray[np.float64], per_label: int = 8
) -> list[tuple[NDArray[np.float64], int]]:
    """Pick distinct starts, best first: each further than about a duration from the better ones of its label.

    Parameters
    ----------
    theta : (m, 2) ndarray
        Times and ln durations.
    label, value : (m,) ndarray
        Discrete alternatives and log likelihoods.
    per_label : int
        How many starts each alternative gets.
    """
    starts: list[tuple[NDArray[np.float64], int]] = []
    for one in np.unique(label):
        mine = np.flatnonzero(label == one)
        order = mine[np.argsort(value[mine])[::-1]]
        kept: list[NDArray[np.float64]] = []
        for index in order[:4000]:
            point = theta[index]
            if all(_apart(point, other) for other in kept):
                kept.append(point)
            if len(kept) == per_label:
                break
        starts += [(point, int(one)) for point in kept]
    return starts


def _apart(one: NDArray[np.float64], other: NDArray[np.float64]) -> bool:
    length = np.exp(0.5 * (one[1] + other[1]))
    return bool(abs(one[0] - other[0]) > 1.5 * length or abs(one[1] - other[1]) > 0.7)


def optima(starts: Sequence[tuple[NDArray[np.float64], int]], shape: Shape, linear: LinearPart) -> list[Optimum]:
    """Distinct local minima reached from all starts, best first."""
    found = sorted((least_squares(theta, label, shape, linear) for theta, label in starts), key=lambda o: o.chi2)
    distinct: list[Optimum] = []
    for one in found:
        same = (one.label == other.label and not _differs(one, other) for other in distinct)
        if not any(same):
            distinct.append(one)
    return distinct


def _differs(one: Optimum, other: Optimum) -> bool:
    length = np.exp(other.theta[1])
    return bool(abs(one.theta[0] - other.theta[0]) > 0.02 * length or abs(one.theta[1] - other.theta[1]) > 0.02)
