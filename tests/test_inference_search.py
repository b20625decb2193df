"""The scan of a fold: evidence, posterior and search against independent ways."""

import numpy as np
import pytest
from scipy.integrate import dblquad, quad
from scipy.special import log_ndtr

from crossing.errors import InputError
from crossing.inference.candidates import fit_scan, linear_part
from crossing.inference.data import prepare
from crossing.inference.estimates import bound_of, estimate
from crossing.inference.linear import LinearPart
from crossing.inference.nested import nested
from crossing.inference.priors import FitPriors, Range
from crossing.inference.refine import least_squares
from crossing.inference.scan import first_cells, scan
from crossing.inference.shapes import BumpShape, FoldShape, PairShape
from crossing.optics.fold import profile_peak
from crossing.optics.fold_table import fold_table
from crossing.optics.point_lens import point_magnification
from crossing.photometry import LightCurve

PRIORS = FitPriors()


def curve(n=24, caustic=11.0, radius_time=2.0, sign=1, signal=30.0, seed=1, **options):
    rng = np.random.default_rng(seed)
    time = np.linspace(0.0, 25.0, n)
    flux = 8.0 + signal / 1.393 * fold_table().uniform(sign * (time - caustic) / radius_time) + rng.standard_normal(n)
    return LightCurve.from_arrays(60000.0 + time, "short", flux, np.ones(n), **options)


def fold(data):
    return FoldShape(data, (PRIORS.window(data), PRIORS.log_range("radius_time")))


@pytest.mark.parametrize("kind", ["flux", "difference"])
def test_marginal_likelihood_against_quadrature(kind):
    data = prepare(curve(n=8, kind=kind), {})
    low, high = 0.5, 200.0
    linear = LinearPart(data, low=low, high=high)
    shape = fold(data).evaluate(np.array([[11.0 + 60000 - data.time_zero, np.log(2.0)]]), 0)
    best = linear.best(shape)
    reference = -0.5 * (((data.flux - linear.model(shape, best)[0][0]) / data.sigma) ** 2).sum()
    width = data.level_width[0]

    def density(level, ln_amplitude):
        model = np.exp(ln_amplitude) * shape[0] + level
        chi2 = (((data.flux - model) / data.sigma) ** 2).sum()
        prior = np.exp(-0.5 * (level / width) ** 2) / (width * np.sqrt(2 * np.pi)) * (2.0 if kind == "flux" else 1.0)
        return np.exp(-0.5 * chi2 - reference) * prior

    peak, level = np.log(best.amplitude[0, 0]), best.level[0, 0]
    floor = max(0.0, level - 8.0) if kind == "flux" else level - 8.0
    value, _ = dblquad(density, peak - 1.0, peak + 1.0, floor, level + 8.0, epsabs=0.0, epsrel=1e-8)
    norm = np.log(data.sigma * np.sqrt(2 * np.pi)).sum() + np.log(np.log(high / low))
    # dblquad's own tolerance, and the 40-node rule's: a few 1e-6
    assert linear.log_marginal(shape)[0] == pytest.approx(np.log(value) + reference - norm, abs=1e-4)


def test_upper_limits_are_censored_points():
    time = np.array([0.0, 5.0, 6.0, 9.0])
    limit = np.array([True, False, False, True])
    rows = LightCurve.from_arrays(
        60000 + time, "a", [4.0, 20.0, 22.0, 12.0], [1.3, 1.0, 1.0, 4.0], is_upper_limit=limit, kind="difference"
    )
    data = prepare(rows, {})
    linear = LinearPart(data, low=1.0, high=100.0)
    shape = fold(data).evaluate(np.array([[5.2 + 60000 - data.time_zero, np.log(1.0)]]), 0)
    detected, limited = data.split(shape)
    width = data.level_width[0]

    def over_level(amplitude):
        def density(level):
            chi2 = (((data.flux - amplitude * detected[0] - level) / data.sigma) ** 2).sum()
            room = (data.limit - amplitude * limited[0] - level) / data.limit_sigma
            return np.exp(-0.5 * chi2 - 0.5 * (level / width) ** 2 + log_ndtr(room).sum())

        return quad(density, -60.0, 60.0, points=[-20.0, 0.0, 20.0], limit=400)[0]

    value = quad(lambda ln_a: over_level(np.exp(ln_a)), 0.0, np.log(100.0), limit=400)[0]
    norm = np.log(data.sigma * np.sqrt(2 * np.pi)).sum() + np.log(width * np.sqrt(2 * np.pi)) + np.log(np.log(100.0))
    # the level is averaged over twelve equally probable values where there are limits: good to a few hundredths
    assert linear.log_marginal(shape)[0] == pytest.approx(np.log(value) - norm, abs=0.05)


def test_scan_integrates_a_gaussian():
    window, duration = Range(name="time", low=-20.0, high=20.0), Range(name="ln", low=-5.0, high=4.0)
    mean, sigma = np.array([3.0, 0.5]), np.array([0.02, 0.05])

    def evaluate(theta, label):
        return -0.5 * (((theta - mean) / sigma) ** 2).sum(axis=1) - 1e3 * label

    cells = [first_cells(np.arange(-10.0, 10.0), window, duration, np.array([-1.0, 0.0, 1.0, 3.0]))] * 2
    result = scan(evaluate, cells, window.width * duration.width, lambda *_: [(mean, 0)], "test")
    exact = np.log(2 * np.pi * sigma.prod() / (window.width * duration.width * 2))
    assert result.complete
    # cells are split until they hold 1/3000 of the posterior: a percent or two of the evidence
    assert result.ln_evidence == pytest.approx(exact, abs=0.03)
    theta, label = result.sample(20_000, np.random.default_rng(0))
    assert (label == 0).all()
    assert theta.mean(axis=0) == pytest.approx(mean, abs=0.002)
    assert theta.std(axis=0) == pytest.approx(sigma, rel=0.05)


@pytest.mark.parametrize("points", [80, pytest.param(500, marks=pytest.mark.slow)])
def test_scan_agrees_with_nested_sampling(points):
    data = prepare(curve(n=16, signal=15.0), {})
    shape, linear = fold(data), linear_part(data, PRIORS)
    found = fit_scan(shape, linear)
    other = nested(shape, linear, np.random.default_rng(3), live_points=points, precision=0.05)
    assert found.complete
    assert other.complete
    assert abs(found.ln_evidence - other.ln_evidence) < 0.2 + 2.0 * other.ln_evidence_error
    one, two = (part.sample(4000, np.random.default_rng(4))[0] for part in (found.posterior, other))
    # the sampler's few hundred effective samples put its medians within a fifth of a standard deviation
    assert (np.abs(np.median(one, axis=0) - np.median(two, axis=0)) < 0.3 * one.std(axis=0)).all()


@pytest.mark.parametrize("seed", range(6))
def test_search_is_not_beaten_by_a_start_at_the_truth(seed):
    rng = np.random.default_rng(seed)
    sign, radius_time, caustic = rng.choice([1, -1]), rng.uniform(0.8, 4.0), rng.uniform(6.0, 20.0)
    data = prepare(curve(n=40, caustic=caustic, radius_time=radius_time, sign=sign, seed=seed), {})
    shape, linear = fold(data), linear_part(data, PRIORS)
    found = fit_scan(shape, linear)
    label = 0 if sign > 0 else 1
    truth = np.array([60000.0 + caustic - data.time_zero, np.log(radius_time)])
    assert found.best.label == label
    assert found.chi2 <= least_squares(truth, label, shape, linear).chi2 + 0.01
    assert abs(found.best.theta[0] - truth[0]) < 5.0 * found.best.error[0]


def test_pair_is_two_folds_when_they_are_far_apart():
    data = prepare(curve(), {})
    window = PRIORS.window(data)
    shape = PairShape(data, (window, PRIORS.log_range("radius_time"), window, window))
    time = np.linspace(-3.0, 3.0, 61)
    theta = np.array([[0.0, np.log(1.0), np.log(1e6), np.log(0.5)]])
    first = shape.curve(theta, 0, time, 0)[0]
    # the other fold is a million days away: its factor differs from one by 3e-6
    assert first == pytest.approx(fold_table().uniform(time), abs=2e-3)
    second = shape.curve(theta, 0, time + 1e6, 0)[0]
    assert second == pytest.approx(0.5 * fold_table().uniform(-time), abs=2e-3)
    assert shape.height(theta)[0] == pytest.approx(profile_peak().height, rel=1e-9)


def test_bump_is_a_point_lens():
    data = prepare(curve(), {})
    shape = BumpShape(data, (PRIORS.window(data), PRIORS.log_range("bump_time")))
    time = np.linspace(-40.0, 40.0, 81)
    value = shape.curve(np.array([[0.0, np.log(10.0)]]), 2, time, 0)[0]
    impact = shape.impacts[2]
    exact = (point_magnification(np.hypot(impact, time / 10.0)) - 1) / (point_magnification(impact) - 1)
    assert value == pytest.approx(exact, rel=1e-10)


def test_reference_noise_is_shared():
    rows = curve(n=10, kind="difference", reference_epochs=(60000.5, 60001.5))
    data = prepare(rows, {})
    # unit errors, two reference epochs: the shared part is 1/sqrt(3), the own part sqrt(2/3)
    assert data.level_width == pytest.approx([3**-0.5], rel=1e-12)
    assert data.sigma == pytest.approx(np.full(10, np.sqrt(2 / 3)), rel=1e-12)
    with pytest.raises(InputError, match="reference_err must be smaller than every flux_err"):
        prepare(curve(n=10, kind="difference", reference_epochs=(60000.5,), reference_err=2.0), {})


def test_no_detection_is_refused():
    rows = LightCurve.from_arrays([60000.0, 60001.0], "a", [3.0, 3.0], [1.0, 1.0], is_upper_limit=True)
    with pytest.raises(InputError, match="no detection"):
        prepare(rows, {})


def test_estimates_and_limits():
    samples = np.random.default_rng(0).normal(5.0, 1.0, 100_000)
    found = estimate(samples)
    assert (found.low, found.median, found.high) == pytest.approx((4.0055, 5.0, 5.9945), abs=0.02)
    flat = np.random.default_rng(0).uniform(0.0, 4.0, 10_000)
    assert bound_of(flat, 0.0, 10.0) == "upper"
    assert bound_of(10.0 - flat, 0.0, 10.0) == "lower"
    assert bound_of(samples, 0.0, 10.0) == "two-sided"
    assert "< " in estimate(flat, "upper").text("d")
