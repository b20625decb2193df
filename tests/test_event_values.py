from __future__ import annotations

import math
import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from crossing.errors import InputError
from crossing.event import Value

ALL = {
    "normal": Value.normal(0.4, 0.1),
    "cut normal": Value.normal(0.4, 0.3, lower=0.0),
    "fraction": Value.normal(0.9, 0.3, lower=0.0, upper=1.0),
    "uniform": Value.uniform(-2.0, 3.0),
    "loguniform": Value.loguniform(1e-3, 20.0),
}
each = pytest.mark.parametrize("value", ALL.values(), ids=ALL.keys())


@pytest.mark.parametrize(
    ("value", "central", "limits", "text"),
    [
        (Value.exact(0.7), 0.7, (0.7, 0.7), "0.7"),
        (Value.normal(0.7, 0.02), 0.7, (-math.inf, math.inf), "0.7 +- 0.02"),
        (Value.normal(0.7, 0.02, lower=0), 0.7, (0, math.inf), "0.7 +- 0.02"),
        (Value.uniform(1, 3), 2.0, (1, 3), "1 to 3"),
        (Value.loguniform(1, 9), 3.0, (1, 9), "1 to 9 (log)"),
    ],
)
def test_summary(value, central, limits, text):
    assert value.central == pytest.approx(central, rel=1e-15)  # one square root each
    assert value.limits == limits
    assert str(value) == text
    assert value.is_exact == (value.shape == "exact")


def test_exact_value_is_a_constant():
    value = Value.exact(0.4)
    rng = np.random.default_rng(1)
    state = rng.bit_generator.state
    assert np.array_equal(value.sample(rng, (2, 3)), np.full((2, 3), 0.4))
    assert rng.bit_generator.state == state
    assert np.array_equal(value.quantile([0.1, 0.9]), [0.4, 0.4])
    with pytest.raises(InputError, match="exact value must not be asked for its density"):
        value.log_density(0.4)


@each
def test_density_is_the_slope_of_the_cumulative_distribution(value):
    p = np.linspace(0.01, 0.99, 99)
    step = 1e-5
    slope = (value.quantile(p + step) - value.quantile(p - step)) / (2 * step)
    # Central differences: the error is step^2 times a third derivative of order 1e4 near the ends.
    assert np.allclose(np.exp(value.log_density(value.quantile(p))) * slope, 1, rtol=1e-5)


@each
def test_draws_follow_the_quantiles(value):
    draws = value.sample(np.random.default_rng(20), 4000)
    grid = np.linspace(0, 1, 2001)[1:-1]
    cumulative = np.interp(draws, value.quantile(grid), grid)
    assert stats.kstest(cumulative, "uniform").pvalue > 0.01  # fixed seed: no luck involved
    low, high = value.limits
    assert draws.min() >= low
    assert draws.max() <= high


@each
def test_density_vanishes_outside(value):
    low, high = value.limits
    outside = np.array([x for x in (low - 1, high + 1) if math.isfinite(x)])
    assert np.all(np.isneginf(value.log_density(outside)))


def test_normal_density_agrees_with_scipy():
    x = np.linspace(0, 1, 11)
    assert np.allclose(Value.normal(0.4, 0.1).log_density(x), stats.norm.logpdf(x, 0.4, 0.1), rtol=1e-13)
    cut = stats.truncnorm(-0.4 / 0.3, np.inf, 0.4, 0.3)
    assert np.allclose(ALL["cut normal"].log_density(x), cut.logpdf(x), rtol=1e-12)  # two routes to one integral


def test_ends_of_ranges_are_their_extreme_quantiles():
    for value in (ALL["uniform"], ALL["loguniform"]):
        assert np.allclose(value.quantile([0, 1]), value.limits, rtol=1e-14)  # exp(log(x)) rounds


@settings(derandomize=True, deadline=None)
@given(
    st.floats(-1e6, 1e6),
    st.floats(1e-9, 1e6),
    st.lists(st.floats(0, 1), min_size=2, max_size=9),
    st.sampled_from("nul"),
)
def test_quantiles_rise_and_stay_inside(start, width, p, shape):
    if shape == "n":
        value = Value.normal(start, width, lower=start - width)
    elif shape == "u":
        value = Value.uniform(start, start + width + 1e-3)
    else:
        value = Value.loguniform(width, 2 * width)
    quantiles = value.quantile(np.sort(p))
    # Neighbouring probabilities may swap by rounding.
    slack = 1e-9 * (abs(start) + width)
    assert np.all(np.diff(quantiles[np.isfinite(quantiles)]) >= -slack)
    assert np.all((quantiles >= value.limits[0] - slack) & (quantiles <= value.limits[1] + slack))


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Value.exact(math.nan), "must be finite, got nan"),
        (lambda: Value.uniform(0, math.inf), "must be finite, got 0 and inf"),
        (lambda: Value.normal(1, 0), "error must be greater than 0, got 0; give the bare value"),
        (lambda: Value.normal(-1, 1, lower=0), "value must lie between 0 and inf, got -1"),
        (lambda: Value.uniform(2, 2), "low must be less than high, got 2 and 2; swap or widen"),
        (lambda: Value.loguniform(0, 2), r'low must be greater than 0 when scale = "log", got 0'),
        (lambda: Value.uniform(0, 1).quantile(1.5), "`p` must lie between 0 and 1"),
        (lambda: Value.uniform(0, 1).quantile(math.nan), "`p` must lie between 0 and 1"),
    ],
)
def test_impossible_values_are_refused(make, message):
    with pytest.raises(InputError, match=message):
        make()


def test_values_travel_between_processes():
    assert pickle.loads(pickle.dumps(ALL["fraction"])) == ALL["fraction"]
