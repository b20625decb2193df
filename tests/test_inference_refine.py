"""Least squares from many starts: is the best minimum found, are its errors honest, is the orientation right?"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray
from simulated import Fold, fold_problem, light_curve, well_observed

from crossing.inference.candidates import Candidate, fit_scan
from crossing.inference.refine import Optimum, choose_starts, least_squares, optima
from crossing.inference.scan import evaluator, first_cells

Array = NDArray[np.float64]

QUICK, MANY = 40, 400


@dataclass(frozen=True)
class Fitted:
    """A simulated event, its fit, and what least squares finds when it starts at the truth."""

    truth: Fold
    fit: Candidate
    from_truth: Optimum

    @property
    def best(self) -> Optimum:
        assert self.fit.best is not None
        return self.fit.best

    @property
    def true_theta(self) -> Array:
        return np.array([self.truth.time + 61000.0 - self.fit.linear.data.time_zero, np.log(self.truth.radius_time)])


def simulate(number: int) -> Fitted:
    truth, curve = well_observed(np.random.default_rng([17, number]))
    data, shape, linear = fold_problem(curve)
    start = np.array([truth.time + 61000.0 - data.time_zero, np.log(truth.radius_time)])
    return Fitted(truth=truth, fit=fit_scan(shape, linear), from_truth=least_squares(start, truth.label, shape, linear))


@pytest.fixture(scope="module")
def events() -> list[Fitted]:
    return [simulate(number) for number in range(QUICK)]


@pytest.fixture(scope="module")
def many(events: list[Fitted]) -> list[Fitted]:
    return events + [simulate(number) for number in range(QUICK, MANY)]


def check_search(events: list[Fitted]) -> None:
    worse = [one.best.chi2 - one.from_truth.chi2 for one in events]
    # 0.01 in chi-squared is a hundredth of what one standard error costs.
    assert max(worse) < 0.01
    assert all(one.fit.complete and one.best.success for one in events)


def check_orientation(events: list[Fitted], wrong: int) -> None:
    assert sum(one.best.label != one.truth.label for one in events) <= wrong
    drawn = [one.fit.sample(200, np.random.default_rng(1))[1] for one in events]
    # The posterior must not be sure of the wrong one more often than that either.
    assert sum(np.mean(label != one.truth.label) > 0.5 for label, one in zip(drawn, events, strict=True)) <= wrong


def pulls(events: list[Fitted]) -> Array:
    """(fit - truth) / error of time and ln radius time, (n, 2), where there are errors and the side is right."""
    kept = [one for one in events if one.best.error is not None and one.best.label == one.truth.label]
    assert len(kept) > 0.9 * len(events)
    return np.array([(one.best.theta - one.true_theta) / one.best.error for one in kept])


def check_pulls(found: Array) -> None:
    """Centre and width of the errors of least squares.

    Local curvature now and then misjudges a minimum by far: the median and half the distance of the 16th and 84th
    percentiles are looked at, whose standard errors for n unit normals are 1.25/sqrt(n) and 1.3/sqrt(2 n).
    """
    n = len(found)
    low, middle, high = np.percentile(found, [16.0, 50.0, 84.0], axis=0)
    assert np.all(np.abs(middle) < 3.0 * 1.25 / np.sqrt(n) + 0.05)
    assert np.all(np.abs(0.5 * (high - low) - 1.0) < 3.0 * 1.3 / np.sqrt(2 * n) + 0.1)


def check_posterior(events: list[Fitted]) -> None:
    """(mean - truth) / deviation of the posterior of time and ln radius time, where the side is right."""
    found = []
    for one in events:
        theta, label, _ = one.fit.sample(1000, np.random.default_rng(2))
        mine = theta[label == one.truth.label]
        if len(mine) > 500:
            found.append((mine.mean(axis=0) - one.true_theta) / mine.std(axis=0))
    pull = np.array(found)
    n = len(pull)
    assert n >= 0.95 * len(events)
    # Three standard errors of the mean and of the standard deviation of n unit normals; the simulation's priors are
    # narrower than the fit's, which makes pulls a little narrower.
    assert np.all(np.abs(pull.mean(axis=0)) < 3.0 / np.sqrt(n) + 0.05)
    assert np.all(np.abs(pull.std(axis=0) - 0.95) < 3.0 / np.sqrt(2 * n) + 0.1)


def test_a_start_at_the_truth_finds_nothing_better(events: list[Fitted]) -> None:
    check_search(events)


def test_orientation(events: list[Fitted]) -> None:
    # 1 in 100 is allowed: two or more of 40 have a probability of 6%.
    check_orientation(events, wrong=1)


def test_pulls(events: list[Fitted]) -> None:
    check_pulls(pulls(events))
    check_posterior(events)


def test_chi_squared_is_that_of_the_truth_less_the_parameters(events: list[Fitted]) -> None:
    excess = np.array([(one.fit.chi2 - one.fit.dof) / np.sqrt(2.0 * one.fit.dof) for one in events])
    # Three standard errors of a mean of 40 unit normals; levels near zero cost less than a parameter each.
    assert abs(excess.mean()) < 3.0 / np.sqrt(len(events)) + 0.1
    p_values = np.array([one.fit.p_value for one in events])
    # Below once in a thousand fits of true models; 40 of them are looked at.
    assert p_values.min() > 0.001


@pytest.mark.slow
def test_400_events(many: list[Fitted]) -> None:
    check_search(many)
    check_orientation(many, wrong=8)  # right in 392 of 400
    check_pulls(pulls(many))
    check_posterior(many)


# The pieces


def problem() -> tuple[Fold, Candidate]:
    truth = Fold(time=15.0, radius_time=1.2, label=1)
    curve = light_curve(truth, np.linspace(0.3, 29.0, 25), 2.0, np.random.default_rng(4))
    _, shape, linear = fold_problem(curve)
    return truth, fit_scan(shape, linear)


def test_residuals_of_the_optimum_are_its_chi_squared() -> None:
    truth, fit = problem()
    best, data = fit.best, fit.linear.data
    assert best is not None
    assert fit.shape is not None
    rows = fit.shape.evaluate(best.theta[None, :], best.label)
    model = fit.linear.model(rows, best.linear)[0][0]
    assert best.chi2 == pytest.approx((((data.flux - model) / data.sigma) ** 2).sum(), rel=1e-12)
    assert best.label == truth.label
    assert not best.at_bound
    # A minimum: a hundredth of an error to either side is no lower.
    assert best.error is not None
    for step in np.concatenate([np.diag(best.error), -np.diag(best.error)]) * 0.3:
        other = fit.shape.evaluate((best.theta + step)[None, :], best.label)
        moved = fit.linear.model(other, fit.linear.best(other))[0][0]
        assert (((data.flux - moved) / data.sigma) ** 2).sum() > best.chi2


def test_errors_are_those_of_the_curvature() -> None:
    _, fit = problem()
    best, data = fit.best, fit.linear.data
    assert best is not None
    assert best.error is not None
    assert fit.shape is not None

    def normalised(theta: Array) -> Array:
        rows = fit.shape.evaluate(theta[None, :], best.label)
        return (fit.linear.model(rows, fit.linear.best(rows))[0][0] - data.flux) / data.sigma

    steps = 1e-4 * best.error
    columns = [
        (normalised(best.theta + step) - normalised(best.theta - step)) / (2 * step.sum()) for step in np.diag(steps)
    ]
    jacobian = np.stack(columns, axis=1)
    expected = np.sqrt(np.diag(np.linalg.inv(jacobian.T @ jacobian)))
    # One-sided differences with steps of 1e-8 against central ones.
    np.testing.assert_allclose(best.error, expected, rtol=0.01)


def test_every_start_is_kept_inside_the_prior() -> None:
    _, fit = problem()
    assert fit.shape is not None
    for theta in ([1e6, 50.0], [-1e6, -50.0]):
        found = least_squares(np.array(theta), 0, fit.shape, fit.linear)
        for value, prior in zip(found.theta, fit.shape.ranges, strict=True):
            assert prior.low <= value <= prior.high


def test_a_minimum_at_the_end_of_the_range_says_so() -> None:
    truth = Fold(time=15.0, radius_time=1e-4, label=0, level=0.0)
    curve = light_curve(truth, np.linspace(0.3, 29.0, 25), 2.0, np.random.default_rng(4))
    _, shape, linear = fold_problem(curve)
    found = least_squares(np.array([0.5, shape.ranges[1].low]), 0, shape, linear)
    assert found.at_bound == (shape.ranges[1].name,)


def test_starts_are_apart_and_from_every_label() -> None:
    rng = np.random.default_rng(0)
    theta = np.column_stack([rng.uniform(-10, 10, 5000), rng.uniform(-4, 3, 5000)])
    label = rng.integers(2, size=5000).astype(np.intp)
    value = rng.normal(size=5000)
    starts = choose_starts(theta, label, value)
    assert [one for _, one in starts] == [0] * 8 + [1] * 8
    for k in (0, 1):
        mine = [point for point, one in starts if one == k]
        assert np.array_equal(mine[0], theta[label == k][np.argmax(value[label == k])])
        for i, point in enumerate(mine):
            for other in mine[:i]:
                length = np.exp(0.5 * (point[1] + other[1]))
                assert abs(point[0] - other[0]) > 1.5 * length or abs(point[1] - other[1]) > 0.7


def test_optima_are_distinct_and_sorted() -> None:
    _, fit = problem()
    shape, linear = fit.shape, fit.linear
    assert shape is not None
    times = linear.data.time
    theta, label = [], []
    for number in (0, 1):
        cells = first_cells(times, shape.ranges[0], shape.ranges[1], shape.features(number))
        theta.append(0.5 * (cells[:, (0, 2)] + cells[:, (1, 3)]))
        label.append(np.full(len(cells), number))
    value = np.concatenate(
        [evaluator(shape, linear)(points, int(k[0])) for points, k in zip(theta, label, strict=True)]
    )
    starts = choose_starts(np.concatenate(theta), np.concatenate(label), value)
    found = optima(starts * 2, shape, linear)
    assert len(found) <= len(starts)
    assert [one.chi2 for one in found] == sorted(one.chi2 for one in found)
    assert fit.chi2 == pytest.approx(found[0].chi2, abs=1e-4)
