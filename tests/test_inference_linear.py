"""Marginal likelihoods, draws and optima of amplitudes and levels against sums over dense grids."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import nnls
from scipy.special import log_ndtr, logsumexp
from scipy.stats import multivariate_normal

from crossing.inference.data import FitData, prepare
from crossing.inference.linear import Colours, LinearPart, log_sum
from crossing.photometry import LightCurve

Array = NDArray[np.float64]

START = 61000.0
TIME = np.array([0.0, 3.0, 5.0, 6.0, 8.0, 12.0, 20.0])
NOISE = 3.0
LOW, HIGH = 0.03, 2e4
# Error of 40 Gauss-Legendre nodes in ln(amplitude), as tests/bench/bench_amplitude_quadrature.py measures it: 6e-4.
QUADRATURE = 1e-3
# Upper limits are averaged over their level by moment matching; crossing/inference/censored.py states some 0.01.
CENSORED = 0.03


def bumps(centres: tuple[float, ...], time: Array = TIME, width: float = 2.0) -> Array:
    """Shapes (m, n): any smooth curve will do."""
    return np.stack([np.exp(-(((time - centre) / width) ** 2)) for centre in centres])


def curve(flux: Array, error: Array | float = NOISE, *, band: object = "a", **more: object) -> FitData:
    errors = np.broadcast_to(error, TIME.shape)
    return prepare(LightCurve.from_arrays(START + TIME, band, flux, errors, **more), {})  # type: ignore[arg-type]


def noisy(level: float, height: float, seed: int = 1) -> Array:
    return level + height * bumps((5.5,))[0] + NOISE * np.random.default_rng(seed).standard_normal(TIME.size)


def all_times(shape: Array, data: FitData) -> Array:
    """Shapes given in the order of TIME, in the order of detections, then limits, then reference epochs."""
    times = data.all_times + data.time_zero - START
    return np.stack([np.interp(times, TIME, row) for row in shape])


def log_density(data: FitData, shape: Array, amplitude: Array, level: Array) -> Array:
    """Log of likelihood and level priors, one shape (n_all,), amplitudes (..., n_bands), levels (..., n_levels)."""
    detected, limited = data.split(shape)
    model = amplitude[..., data.band] * detected + level[..., data.level]
    out = (-0.5 * ((data.flux - model) / data.sigma) ** 2 - np.log(data.sigma * np.sqrt(2 * np.pi))).sum(axis=-1)
    change = amplitude[..., data.limit_band] * limited + level[..., data.limit_level]
    out += log_ndtr((data.limit - change) / data.limit_sigma).sum(axis=-1)
    prior = -0.5 * (level / data.level_width) ** 2 - np.log(data.level_width * np.sqrt(2 * np.pi))
    return out + (prior + np.log(2.0) * data.level_nonnegative).sum(axis=-1)


def level_grid(data: FitData, flux: Array, count: int = 361) -> Array:
    """Grid of levels that holds whatever the data leave of them; closer where limits are sharp."""
    low = 0.0 if data.level_nonnegative[0] else float(min(flux.min(), 0.0)) - 15 * NOISE
    return np.unique(np.concatenate([np.linspace(low, 12.0, count), np.linspace(12.0, flux.max() + 15 * NOISE, count)]))


def grid_posterior(data: FitData, shape: Array, *, count: int = 801) -> tuple[Array, Array, Array]:
    """ln amplitudes (k,), levels (j,) and log of the joint density (k, j), for one band with one level."""
    ln_amplitude = np.linspace(np.log(LOW), np.log(HIGH), count)
    level = level_grid(data, np.concatenate([data.flux, data.limit]))
    a, b = np.meshgrid(np.exp(ln_amplitude), level, indexing="ij")
    return ln_amplitude, level, log_density(data, shape, a[..., None], b[..., None])


def log_integral(logs: Array, *axes: Array) -> float:
    """Log of the integral by the trapezoidal rule, the last axis first."""
    top = float(logs.max())
    value = np.exp(logs - top)
    for axis in axes[::-1]:
        value = np.trapezoid(value, axis, axis=-1)
    return float(np.log(value)) + top


def brute(data: FitData, shape: Array) -> float:
    """Log likelihood of one shape of a curve with one band and one level."""
    ln_amplitude, level, logs = grid_posterior(data, shape)
    return log_integral(logs, ln_amplitude, level) - float(np.log(np.log(HIGH / LOW)))


def test_log_sum() -> None:
    logs = np.random.default_rng(0).normal(0, 400, (3, 4, 5))
    # Rounding only.
    np.testing.assert_allclose(log_sum(logs), logsumexp(logs, axis=-1), rtol=1e-14)


# Marginal likelihoods


@pytest.mark.parametrize("kind", ["flux", "difference"])
@pytest.mark.parametrize(("level", "height"), [(0.0, 60.0), (20.0, 60.0), (0.0, 6.0), (1.0, 0.0)])
def test_one_band_against_a_dense_sum(kind: str, level: float, height: float) -> None:
    data = curve(noisy(level, height), kind=kind)
    shape = all_times(bumps((5.5, 4.5, 9.0, 19.0)), data)
    found = LinearPart(data, low=LOW, high=HIGH).log_marginal(shape)
    expected = [brute(data, row) for row in shape]
    np.testing.assert_allclose(found, expected, atol=QUADRATURE)


def test_free_bands_are_independent() -> None:
    band = np.array(["a", "b", "a", "b", "a", "a", "b"])
    flux = noisy(5.0, 40.0)
    shape = bumps((5.5, 10.0))
    together = LinearPart(curve(flux, band=band), low=LOW, high=HIGH).log_marginal(shape)
    apart = 0.0
    for name in "ab":
        mine = band == name
        data = prepare(LightCurve.from_arrays(START + TIME[mine], "a", flux[mine], np.full(mine.sum(), NOISE)), {})
        apart = apart + LinearPart(data, low=LOW, high=HIGH).log_marginal(shape[:, mine])
    # The same numbers in another order of summation.
    np.testing.assert_allclose(together, apart, rtol=1e-11)


def test_bands_in_fixed_ratios_against_a_dense_sum() -> None:
    band = np.array(["a", "b", "a", "b", "a", "a", "b"])
    data = curve(noisy(5.0, 40.0) * np.where(band == "a", 1.0, 0.6), band=band)
    colours = Colours(ratio=np.array([[1.0, 0.5], [0.4, 1.0], [1.0, 0.05]]), weight=np.array([0.2, 0.3, 0.5]))
    shape = bumps((5.5, 4.0))
    found = LinearPart(data, low=LOW, high=HIGH, colours=colours).log_marginal(shape)
    # Nothing is left beyond these ends: 40 +- 3 nJy in band a, levels of 5 +- 2 nJy.
    ln_amplitude = np.linspace(np.log(2.0), np.log(2e3), 201)
    level = np.linspace(0.0, 40.0, 81)
    a, one, two = np.meshgrid(np.exp(ln_amplitude), level, level, indexing="ij")
    for row, value in zip(shape, found, strict=True):
        nodes = []
        for ratio, weight in zip(colours.ratio, colours.weight, strict=True):
            logs = log_density(data, row, a[..., None] * ratio, np.stack([one, two], axis=-1))
            nodes.append(log_integral(logs, ln_amplitude, level, level) + np.log(weight))
        # The levels' grid is coarse: the trapezoidal rule at the wall of level 0 is good to (step/error)^2/12 = 0.002.
        assert value == pytest.approx(float(logsumexp(nodes) - np.log(np.log(HIGH / LOW))), abs=5e-3)


@pytest.mark.parametrize("reference_err", [None, 1.2])
def test_reference_levels_are_shared_noise(reference_err: float | None) -> None:
    epochs = (START + 6.0, START + 7.0, START + 12.0)
    flux = noisy(-30.0, 60.0)
    data = curve(flux, kind="difference", reference_epochs=epochs, reference_err=reference_err)
    assert data.reference_time.size == 3
    shape = bumps((5.5, 4.5, 12.0), data.all_times + data.time_zero - START)
    found = LinearPart(data, low=LOW, high=HIGH).log_marginal(shape)
    # s / sqrt(k + 1) of a difference between one image and the mean of k images like it.
    shared = NOISE / 2.0 if reference_err is None else reference_err
    covariance = np.diag(np.full(TIME.size, NOISE**2 - shared**2)) + shared**2
    ln_amplitude = np.linspace(np.log(LOW), np.log(HIGH), 20_001)
    for row, value in zip(shape, found, strict=True):
        change = row[: TIME.size] - row[TIME.size :].mean()
        model = np.exp(ln_amplitude)[:, None] * change
        logs = multivariate_normal(np.zeros(TIME.size), covariance).logpdf(flux - model)
        expected = log_integral(logs, ln_amplitude) - np.log(np.log(HIGH / LOW))
        assert value == pytest.approx(expected, abs=QUADRATURE)


LIMITS = {
    "at both ends": (np.array([1, 0, 0, 0, 0, 0, 1], dtype=bool), 9.0, NOISE),
    "deep": (np.array([1, 1, 0, 0, 0, 1, 1], dtype=bool), 1.5, 0.5),
    "all but one": (np.arange(7) != 2, 9.0, NOISE),
}


# One detection does not bound a free level from below: the grids would have to reach to its prior's ends.
LIMITED = [
    (case, kind) for case in LIMITS for kind in ("flux", "difference") if (case, kind) != ("all but one", "difference")
]


@pytest.mark.parametrize("height", [15.0, 60.0])
@pytest.mark.parametrize(("case", "kind"), LIMITED)
def test_limits_against_a_dense_sum(case: str, height: float, kind: str) -> None:
    limit, where, sigma = LIMITS[case]
    flux, error = np.where(limit, where, noisy(0.0, height)), np.where(limit, sigma, NOISE)
    data = curve(flux, error, is_upper_limit=limit, kind=kind)
    shape = all_times(bumps((5.5, 4.5, 10.0)), data)
    found = LinearPart(data, low=LOW, high=HIGH).log_marginal(shape)
    expected = [brute(data, row) for row in shape]
    np.testing.assert_allclose(found, expected, atol=CENSORED)


def test_limits_with_bands_in_fixed_ratios() -> None:
    limit = np.array([1, 0, 0, 0, 0, 0, 1], dtype=bool)
    data = curve(np.where(limit, 9.0, noisy(0.0, 40.0)), is_upper_limit=limit)
    shape = all_times(bumps((5.5, 9.0)), data)
    ratio = np.array([[1.0], [0.2]])
    tied = LinearPart(data, low=LOW, high=HIGH, colours=Colours(ratio=ratio, weight=np.array([0.5, 0.5])))
    one, other = (LinearPart(data, low=LOW * r, high=HIGH * r).log_marginal(shape) for r in ratio[:, 0])
    # A node with the ratio r is a free band whose amplitudes are r times as high.
    np.testing.assert_allclose(tied.log_marginal(shape), np.logaddexp(one, other) - np.log(2.0), atol=CENSORED)


@pytest.mark.parametrize("kind", ["flux", "difference"])
def test_a_band_with_limits_only_does_not_favour_a_model(kind: str) -> None:
    """Its error is large, because the prior of the level is much wider than the limits, but all models share it."""
    band = np.array(["a", "b", "a", "b", "a", "a", "b"])
    limit = band == "b"
    data = curve(np.where(limit, 9.0, noisy(0.0, 30.0)), band=band, is_upper_limit=limit, kind=kind)
    alone = prepare(
        LightCurve.from_arrays(START + TIME[~limit], "a", data.flux, data.sigma, kind=kind), {}
    )  # band a without band b
    shape = bumps((5.5, 4.5))
    both, one = LinearPart(data, low=LOW, high=HIGH), LinearPart(alone, low=LOW, high=HIGH)
    # In band b: the level's prior below the limits, for amplitudes that leave them room.
    width = float(data.level_width[1])
    level = np.linspace(0.0 if kind == "flux" else -8 * width, 9.0 + 10 * NOISE, 40_001)
    prior = -0.5 * (level / width) ** 2 - np.log(width * np.sqrt(2 * np.pi)) + np.log(2.0) * (kind == "flux")
    nothing = log_integral(prior + 3 * log_ndtr((9.0 - level) / NOISE), level)
    constant = both.log_constant() - one.log_constant()
    # Three limits that end at one place, 60 times as sharp as the prior: up to 0.3 by crossing/inference/censored.py.
    assert constant == pytest.approx(nothing, abs=0.25)
    ordered = np.concatenate([shape[:, ~limit], shape[:, limit]], axis=1)
    ln_amplitude = np.linspace(np.log(LOW), np.log(HIGH), 101)
    for row, change in zip(ordered, both.log_marginal(ordered) - one.log_marginal(shape[:, ~limit]), strict=True):
        logs = np.array(
            [
                log_integral(prior + log_ndtr((9.0 - a * row[4:, None] - level) / NOISE).sum(0), level)
                for a in np.exp(ln_amplitude)
            ]
        )
        expected = log_integral(logs, ln_amplitude) - np.log(np.log(HIGH / LOW))
        assert change - constant == pytest.approx(expected - nothing, abs=CENSORED)


@pytest.mark.parametrize("kind", ["flux", "difference"])
@pytest.mark.parametrize("limits", [None, *LIMITS])
def test_constant_against_a_dense_sum(limits: str | None, kind: str) -> None:
    limit, where, sigma = (np.zeros(7, dtype=bool), 0.0, 1.0) if limits is None else LIMITS[limits]
    flux, error = np.where(limit, where, noisy(4.0, 15.0)), np.where(limit, sigma, NOISE)
    data = curve(flux, error, is_upper_limit=limit, kind=kind)
    level = level_grid(data, flux, 8001)
    logs = log_density(data, np.zeros(TIME.size), np.zeros((level.size, 1)), level[:, None])
    found = LinearPart(data, low=LOW, high=HIGH).log_constant()
    # In closed form without limits.
    assert found == pytest.approx(log_integral(logs, level), abs=1e-6 if limits is None else CENSORED)


def test_a_constant_is_a_shape_of_no_height() -> None:
    data = curve(noisy(4.0, 15.0))
    linear = LinearPart(data, low=LOW, high=HIGH)
    flat = linear.log_marginal(np.full((1, 7), 1e-12))[0]
    assert flat == pytest.approx(linear.log_constant(), abs=1e-6)


def test_scaling_all_fluxes_scales_the_likelihood() -> None:
    """Fluxes of 1e-6 and 1e9 nJy are as good as any."""
    flux, shape = noisy(5.0, 40.0), bumps((5.5, 9.0))
    plain = LinearPart(curve(flux), low=LOW, high=HIGH).log_marginal(shape)
    for scale in (1e-8, 1e8):
        scaled = LinearPart(curve(flux * scale, NOISE * scale), low=LOW * scale, high=HIGH * scale)
        # Rounding of ln(scale) times the number of points.
        np.testing.assert_allclose(scaled.log_marginal(shape), plain - 7 * np.log(scale), rtol=1e-10)


def test_company_does_not_matter() -> None:
    limit = LIMITS["at both ends"][0]
    data = curve(np.where(limit, 9.0, noisy(0.0, 60.0)), is_upper_limit=limit)
    linear = LinearPart(data, low=LOW, high=HIGH)
    shape = all_times(bumps(tuple(np.linspace(-5.0, 25.0, 400))), data)
    together = linear.log_marginal(shape)
    alone = np.array([linear.log_marginal(row[None, :])[0] for row in shape])
    good = alone > alone.max() - 55.0
    assert 5 < good.sum() < 300
    np.testing.assert_allclose(together[good], alone[good], atol=CENSORED)
    # The others are cut at 60 below the best, which they never exceed.
    assert np.all(together[~good] < alone.max() - 50.0)


# Draws


def worst_distance(draws: Array, axis: Array, density: Array) -> float:
    """Largest distance between the cumulative distributions of draws and of a density on a grid."""
    cumulative = np.concatenate([[0.0], np.cumsum(0.5 * (density[1:] + density[:-1]) * np.diff(axis))])
    expected = np.interp(np.sort(draws), axis, cumulative / cumulative[-1])
    steps = np.arange(draws.size + 1) / draws.size
    return float(max(np.max(steps[1:] - expected), np.max(expected - steps[:-1])))


@pytest.mark.parametrize(("limits", "kind"), [(None, "flux"), (None, "difference"), *LIMITED])
@pytest.mark.parametrize("height", [5.0, 60.0])
def test_draws_follow_the_posterior(limits: str | None, height: float, kind: str) -> None:
    limit, where, sigma = (np.zeros(7, dtype=bool), 0.0, 1.0) if limits is None else LIMITS[limits]
    flux, error = np.where(limit, where, noisy(1.0, height)), np.where(limit, sigma, NOISE)
    data = curve(flux, error, is_upper_limit=limit, kind=kind)
    shape = all_times(bumps((5.0,)), data)
    size = 4000
    drawn = LinearPart(data, low=LOW, high=HIGH).draw(np.repeat(shape, size, axis=0), np.random.default_rng(2))
    ln_amplitude, level, logs = grid_posterior(data, shape[0])
    joint = np.exp(logs - logs.max())
    # One in a hundred sets of 4000 exact draws is further off: 1.63/sqrt(n); the grids add less than 0.005.
    bound = 1.63 / np.sqrt(size) + 0.005
    assert worst_distance(np.log(drawn.amplitude[:, 0]), ln_amplitude, np.trapezoid(joint, level, axis=1)) < bound
    assert worst_distance(drawn.level[:, 0], level, np.trapezoid(joint, ln_amplitude, axis=0)) < bound
    assert np.all(drawn.amplitude > 0)
    assert kind == "difference" or np.all(drawn.level >= 0)


def test_draws_choose_colours_by_their_evidence() -> None:
    band = np.array(["a", "b", "a", "b", "a", "a", "b"])
    data = curve(noisy(5.0, 40.0) * np.where(band == "a", 1.0, 0.6), band=band)
    ratios, weight = np.array([[1.0, 0.5], [1.0, 0.75], [0.4, 1.0]]), np.array([0.2, 0.3, 0.5])
    shape, size = bumps((5.5,)), 4000
    linear = LinearPart(data, low=LOW, high=HIGH, colours=Colours(ratio=ratios, weight=weight))
    drawn = linear.draw(np.repeat(shape, size, axis=0), np.random.default_rng(2))
    single = [
        LinearPart(data, low=LOW, high=HIGH, colours=Colours(ratio=row[None, :], weight=np.ones(1))) for row in ratios
    ]
    logs = np.array([one.log_marginal(shape)[0] for one in single]) + np.log(weight)
    share = np.exp(logs - logsumexp(logs))
    assert 0.1 < share[0] < 0.9
    # Three standard errors of a share of 4000 draws.
    np.testing.assert_allclose(np.bincount(drawn.node, minlength=3) / size, share, atol=3 * 0.5 / np.sqrt(size))
    np.testing.assert_allclose(
        drawn.amplitude[:, 1] / drawn.amplitude[:, 0], ratios[drawn.node, 1] / ratios[drawn.node, 0]
    )


@pytest.mark.parametrize("limits", [None, *LIMITS])
def test_draws_of_a_constant(limits: str | None) -> None:
    limit, where, sigma = (np.zeros(7, dtype=bool), 0.0, 1.0) if limits is None else LIMITS[limits]
    flux, error = np.where(limit, where, noisy(4.0, 0.0)), np.where(limit, sigma, NOISE)
    data = curve(flux, error, is_upper_limit=limit)
    size = 4000
    drawn = LinearPart(data, low=LOW, high=HIGH).draw_constant(size, np.random.default_rng(3))
    level = level_grid(data, flux, 8001)
    logs = log_density(data, np.zeros(TIME.size), np.zeros((level.size, 1)), level[:, None])
    # As above.
    assert worst_distance(drawn.level[:, 0], level, np.exp(logs - logs.max())) < 1.63 / np.sqrt(size) + 0.005
    assert not drawn.amplitude.any()


# Least squares


def design(data: FitData, shape: Array) -> tuple[Array, Array]:
    """Matrix and right side of weighted least squares in amplitudes, then levels, with the levels' priors."""
    detected, _ = data.split(shape)
    columns = [np.where(data.band == b, detected, 0.0) / data.sigma for b in range(data.n_bands)]
    columns += [(data.level == k) / data.sigma for k in range(data.n_levels)]
    prior = np.concatenate([np.zeros((data.n_levels, data.n_bands)), np.diag(1.0 / data.level_width)], axis=1)
    return np.concatenate([np.stack(columns, axis=1), prior]), np.concatenate(
        [data.flux / data.sigma, np.zeros(data.n_levels)]
    )


@pytest.mark.parametrize("more", [{}, {"reference_epochs": (START + 6.0, START + 12.0)}], ids=["free", "reference"])
def test_best_is_least_squares(more: dict[str, object]) -> None:
    band = np.array(["a", "b", "a", "b", "a", "a", "b"])
    data = curve(noisy(-20.0, 40.0), band=band, kind="difference", **more)
    shape = bumps((5.5, 7.0), data.all_times + data.time_zero - START)
    found = LinearPart(data, low=LOW, high=HIGH).best(shape)
    for k, row in enumerate(shape):
        expected = np.linalg.lstsq(*design(data, row), rcond=None)[0]
        assert np.all(expected[:2] > 0)
        # Rounding only.
        np.testing.assert_allclose(found.amplitude[k], expected[:2], rtol=1e-9)
        np.testing.assert_allclose(found.level[k], expected[2:], rtol=1e-9)


@pytest.mark.parametrize("level", [-4.0, 0.0, 20.0])
def test_best_keeps_total_fluxes_from_being_negative(level: float) -> None:
    data = curve(noisy(level, 40.0))
    shape = bumps((5.5, 4.0, 9.0, 19.0))
    linear = LinearPart(data, low=LOW, high=HIGH)
    found = linear.best(shape)
    for k, row in enumerate(shape):
        expected, _ = nnls(*design(data, row))
        np.testing.assert_allclose([found.amplitude[k, 0], found.level[k, 0]], expected, rtol=1e-7, atol=1e-7)
    detected, limited = linear.model(shape, found)
    np.testing.assert_allclose(detected, found.amplitude * shape + found.level, rtol=1e-14)
    assert limited.shape == (4, 0)


def test_best_chooses_the_colour() -> None:
    """Every node is solved for: a fit with tied bands must not be judged by its coldest star."""
    band = np.array(["a", "b", "a", "b", "a", "a", "b"])
    data = curve(noisy(5.0, 40.0) * np.where(band == "a", 1.0, 0.6), band=band)
    ratios = np.array([[0.05, 1.0], [1.0, 0.6], [1.0, 0.1]])
    shape = bumps((5.5, 7.0))
    found = LinearPart(data, low=LOW, high=HIGH, colours=Colours(ratio=ratios, weight=np.full(3, 1 / 3))).best(shape)
    for k, row in enumerate(shape):
        matrix, right = design(data, row)
        tried = []
        for ratio in ratios:
            tied = np.concatenate([(matrix[:, :2] @ ratio)[:, None], matrix[:, 2:]], axis=1)
            solution, norm = nnls(tied, right)
            tried.append((norm, solution))
        best = int(np.argmin([norm for norm, _ in tried]))
        assert found.node[k] == best
        np.testing.assert_allclose(found.amplitude[k], tried[best][1][0] * ratios[best], rtol=1e-7)
        np.testing.assert_allclose(found.level[k], tried[best][1][1:], rtol=1e-7, atol=1e-7)


def test_best_of_a_shape_that_is_not_there() -> None:
    data = curve(noisy(5.0, 0.0))
    found = LinearPart(data, low=LOW, high=HIGH).best(np.zeros((2, 7)))
    assert not found.amplitude.any()
    # Weighted mean; the prior's width is hundreds of errors.
    np.testing.assert_allclose(found.level[:, 0], data.flux.mean(), rtol=1e-3)
