"""Luminosity functions: closed forms of power laws, the upper limit against a quadrature, Poisson draws, tables."""

from __future__ import annotations

from math import exp, log
from pathlib import Path

import numpy as np
import pytest
from astropy.table import QTable
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import dblquad
from scipy.stats import chi2, kstest

from crossing.errors import InputError
from crossing.event import Value
from crossing.event.campaign_records import PopulationRecord
from crossing.population.luminosity import LuminosityFunction, luminosity_function
from crossing.stars.upper_luminosity import log_allowed


def pure(slope: float = 2.0, limits: tuple[float, float] = (10.0, 1e6)) -> LuminosityFunction:
    return LuminosityFunction.power_law(slope, limits, Value.exact(1e4), upper_limit=False)


def integral(power: float, low: float, high: float) -> float:
    """Of L**power dL, by hand."""
    return log(high / low) if power == -1 else (high ** (power + 1) - low ** (power + 1)) / (power + 1)


@pytest.mark.parametrize("slope", [0.0, 1.0, 1.5, 2.0, 2.5, 3.0])
@pytest.mark.parametrize("power", [-1.0, 0.0, 0.5, 1.0, 2.0])
def test_moments_in_closed_form(slope: float, power: float) -> None:
    exact = integral(power - slope, 10.0, 1e6) / integral(-slope, 10.0, 1e6)
    assert pure(slope).moment(power) == pytest.approx(exact, rel=1e-10)  # exact within cells: rounding only


@settings(derandomize=True, deadline=None, max_examples=50)
@given(st.floats(0.5, 3.5), st.floats(1.0, 8.0))
def test_number_above_in_closed_form(slope: float, lg: float) -> None:
    found = float(pure(slope).share_above(10**lg))
    exact = integral(-slope, 10**lg, 1e6) / integral(-slope, 10.0, 1e6) if lg < 6 else 0.0
    assert found == pytest.approx(exact, rel=1e-8, abs=1e-12)


def test_equal_light_per_decade() -> None:
    """With a slope of 2, stars above 1e5 Lsun hold one of five decades' light."""
    function = pure()
    light = function.number * function.luminosity
    assert np.sum(light[function.luminosity_low >= 0.99e5]) / np.sum(light) == pytest.approx(0.2, rel=1e-10)


def test_upper_limit_against_a_quadrature() -> None:
    """Mean luminosity of L^-2 times the soft limit, temperatures uniform in ln T (scipy's double integral)."""
    low, high, cold, hot = 1e3, 10**6.7, 3000.0, 40_000.0

    def weight(ln_t: float, ln_l: float, power: float) -> float:
        return exp(ln_l * (power - 1.0) + float(log_allowed(exp(ln_l), exp(ln_t))))

    sums = [
        dblquad(weight, log(low), log(high), log(cold), log(hot), args=(power,), epsrel=1e-5)[0] for power in (0.0, 1.0)
    ]
    found = LuminosityFunction.power_law(2.0, (low, high), Value.loguniform(cold, hot))
    # The limit is that of the middle of cells of 0.05 dex, a quarter of its softness.
    assert found.moment(1.0) == pytest.approx(sums[1] / sums[0], rel=2e-3)
    finer = LuminosityFunction.power_law(2.0, (low, high), Value.loguniform(cold, hot), per_decade=80, temperatures=64)
    assert finer.moment(1.0) == pytest.approx(sums[1] / sums[0], rel=2e-4)


def test_cool_stars_are_fainter_at_the_top() -> None:
    function = LuminosityFunction.power_law(2.0, (1e3, 10**6.7), Value.loguniform(3000.0, 40_000.0))
    top = function.luminosity_low > 10**6.2
    cool, hot = (
        np.sum(function.number[top & part]) for part in (function.temperature < 12e3, function.temperature > 25e3)
    )
    assert cool < 0.05 * hot


@pytest.mark.parametrize("total", [0.5, 30.0, 1e5])
def test_brightest_star_in_closed_form(total: float) -> None:
    """P(brightest < L) = exp(-N(>L)), N(>L) = N (1/L - 1/high) / (1/low - 1/high) for a slope of 2, by hand."""
    function, low, high = pure(), 10.0, 1e6
    p = np.array([0.02, 0.3, 0.7, 0.95])
    inverse = -np.log(p) / total * (1 / low - 1 / high) + 1 / high
    exact = np.where(-np.log(p) > total, 0.0, 1 / inverse)
    assert function.brightest(total, p) == pytest.approx(exact, rel=1e-9)


def test_brightest_of_a_table() -> None:
    table = LuminosityFunction.table([1e4, 1e6], [1e4, 2e4], [9.0, 1.0])
    # 10 stars: one bright on average, so that none is there with 1/e = 0.368; no star at all with exp(-10).
    assert table.brightest(10.0, [1e-5, 0.36, 0.38]).tolist() == [0.0, 1e4, 1e6]


def test_draws_are_poisson_and_follow_the_law() -> None:
    function, rng = pure(2.2, (100.0, 1e6)), np.random.default_rng(11)
    total, bound = 3e5, 1e4
    stars = function.draw(total, rng, faintest=bound)
    exact = integral(-2.2, bound, 1e6) / integral(-2.2, 100.0, 1e6)
    assert abs(len(stars) - total * exact) < 4 * np.sqrt(total * exact)
    below = [integral(-2.2, bound, x) / integral(-2.2, bound, 1e6) for x in stars.luminosity]
    assert kstest(below, "uniform").pvalue > 0.01
    assert np.all(stars.temperature == pytest.approx(1e4))
    counts = np.array([len(function.draw(2000.0, rng, faintest=bound)) for _ in range(400)])
    # Variance over mean of a Poisson number: chi-squared with 399 degrees of freedom, between its 0.1% tails.
    assert chi2.ppf(0.001, 399) < 399 * counts.var(ddof=1) / counts.mean() < chi2.ppf(0.999, 399)


def test_drawn_temperatures_follow_their_distribution() -> None:
    function = LuminosityFunction.power_law(2.0, (10.0, 1e4), Value.normal(9000.0, 1500.0), upper_limit=False)
    stars = function.draw(20_000.0, np.random.default_rng(3))
    # Sixteen cells, uniform in ln T within: 3% of the width.
    assert stars.temperature.mean() == pytest.approx(9000.0, abs=50.0)
    assert stars.temperature.std() == pytest.approx(1500.0, rel=0.03)


def test_table_keeps_its_kinds() -> None:
    table = LuminosityFunction.table([1e5, 3e5], [5000.0, 20_000.0], [3.0, 1.0])
    assert table.moment(1.0) == pytest.approx(1.5e5)
    assert table.moment(2.0) == pytest.approx((3 * 1e10 + 9e10) / 4)
    assert table.share_above([1e5, 1.1e5, 3e5, 4e5]).tolist() == [1.0, 0.25, 0.25, 0.0]
    drawn = table.draw(400.0, np.random.default_rng(1))
    assert set(drawn.luminosity.tolist()) == {1e5, 3e5}
    # 100 Rsun at 12,000 K has 186817.976 Lsun (Stefan-Boltzmann with IAU 2015 values, apart from here).
    assert LuminosityFunction.table([186817.9759], [12_000.0], [1]).radius == pytest.approx([100.0], rel=1e-8)


def test_from_a_record(tmp_path: Path) -> None:
    plain = luminosity_function(PopulationRecord())
    assert (plain.slope, len(plain.number)) == (2.0, 114 * 16)
    record = PopulationRecord(slope=Value.normal(2.0, 0.2), luminosity_range=(1e3, 1e6), temperature=Value.exact(1e4))
    assert luminosity_function(record).slope == 2.0
    slopes = [luminosity_function(record, np.random.default_rng(seed)).slope for seed in range(30)]
    assert 0.12 < np.std(slopes) < 0.3
    path = tmp_path / "stars.ecsv"
    QTable({"L": [3e4, 1e5], "T_eff": [1e4, 2e4], "number": [2.0, 1.0]}, units={"T_eff": "K", "L": "solLum"}).write(
        path
    )
    table = luminosity_function(
        PopulationRecord(path=path, columns={"luminosity": "L", "temperature": "T_eff"}, slope=None)
    )
    assert table.moment(1.0) == pytest.approx(1.6e5 / 3)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (None, "stars.csv: must exist, got no such file; check population.file"),
        ("luminosity,temperature\n1,2\n", r"stars.csv: must have a column 'number', got luminosity, temperature"),
        ("luminosity,temperature,number\n1e4,hot,1\n", r"column 'temperature' must hold numbers in K; convert it"),
        ("luminosity,temperature,number\n1e4,,1\n", r"column 'temperature' must be full, got an empty cell"),
        ("luminosity,temperature,number\n-1,5000,1\n", r"stars.csv: `luminosity` must be positive, got -1"),
    ],
)
def test_tables_that_cannot_be_used(tmp_path: Path, text: str | None, says: str) -> None:
    path = tmp_path / "stars.csv"
    if text is not None:
        path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=says):
        luminosity_function(PopulationRecord(path=path, slope=None))


def test_what_a_result_tells() -> None:
    function = pure()
    assert function.to_dict()["luminosity_range_lsun"] == pytest.approx([10.0, 1e6])
    assert len(function.to_table()) == len(function.number)
    assert function.plot().get_ylabel() == "share of the stars above"


def test_refused() -> None:
    power_law, table = LuminosityFunction.power_law, LuminosityFunction.table
    with pytest.raises(InputError, match="`slope` must be finite, got nan; 2 gives equal light"):
        power_law(float("nan"))
    with pytest.raises(InputError, match="`limits` must be solar luminosities, 0 < low < high, got 100 and 10"):
        power_law(2.0, (100.0, 10.0))
    with pytest.raises(InputError, match="`limits` must leave stars below the upper luminosity limit"):
        power_law(2.0, (1e15, 1e16))
    with pytest.raises(InputError, match="`temperature` must be positive, got 3000 "):
        power_law(2.0, temperature=Value.normal(3000.0, 3000.0))
    with pytest.raises(InputError, match=r"must have one shape \(n,\), got \(1,\), \(2,\), \(1,\)"):
        table([1.0], [1.0, 2.0], [1.0])
    with pytest.raises(InputError, match="`number` must be zero or positive and not all zero, got 0"):
        table([1.0], [1.0], [0.0])
    with pytest.raises(InputError, match="`total` must be zero or positive, got -1"):
        pure().draw(-1.0, np.random.default_rng(0))
    with pytest.raises(InputError, match=r"`faintest` must leave at most 5,000,000 stars, got 1e\+09 expected"):
        pure().draw(1e9, np.random.default_rng(0))
    with pytest.raises(InputError, match="`total` must be positive, got 0"):
        pure().brightest(0.0)
    with pytest.raises(InputError, match="`p` must lie between 0 and 1, ends excluded"):
        pure().brightest(1.0, 1.0)
