"""Random stars: what the priors say, what ties the three numbers, and the upper limit."""

from __future__ import annotations

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.event import StarRecord, Value
from crossing.stars.photosphere import luminosity_lsun
from crossing.stars.star_draws import DEFAULT_LUMINOSITY, DEFAULT_TEMPERATURE, draw_stars, star_prior_texts
from crossing.stars.upper_luminosity import upper_log_luminosity

RADIUS, TEMPERATURE, LUMINOSITY = Value.normal(100.0, 10.0), Value.normal(12_000.0, 500.0), Value.loguniform(1e5, 3e5)


def draws(size: int = 4000, **given: Value) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    found = draw_stars(StarRecord(**given), np.random.default_rng(5), size)
    assert len(found) == size
    # the law that ties them, to rounding
    assert np.allclose(luminosity_lsun(found.radius, found.temperature), found.luminosity, rtol=1e-12, atol=0.0)
    return found.radius, found.temperature, found.luminosity


def test_two_numbers_make_the_third() -> None:
    radius, temperature, luminosity = draws(radius=RADIUS, temperature=TEMPERATURE)
    # standard errors of 4000 draws are 0.16 Rsun and 8 K; the upper limit (5.8 dex, against 5.27) takes nothing away
    assert radius.mean() == pytest.approx(100.0, abs=0.8)
    assert temperature.mean() == pytest.approx(12_000.0, abs=40.0)
    radius, temperature, luminosity = draws(radius=RADIUS, luminosity=LUMINOSITY)
    assert luminosity.min() > 0.999e5
    assert radius.std() == pytest.approx(10.0, rel=0.1)
    radius, temperature, luminosity = draws(temperature=TEMPERATURE, luminosity=LUMINOSITY)
    assert luminosity.max() < 3.001e5
    assert temperature.std() == pytest.approx(500.0, rel=0.1)


def test_defaults_fill_what_is_missing() -> None:
    for given in ({}, {"radius": RADIUS}, {"luminosity": LUMINOSITY}):
        _, temperature, _ = draws(**given)
        low, high = DEFAULT_TEMPERATURE.limits
        assert low <= temperature.min()
        assert temperature.max() <= high
    _, _, luminosity = draws(temperature=TEMPERATURE)
    assert luminosity.min() >= DEFAULT_LUMINOSITY.limits[0]


def test_no_star_is_far_above_the_upper_limit() -> None:
    _, temperature, luminosity = draws()
    above = np.log10(luminosity) - upper_log_luminosity(temperature)
    assert above.max() < 4 * 0.2  # the limit is soft by 0.2 dex
    assert (above > 0.0).mean() < 0.15
    _, hot, _ = draws(radius=Value.exact(300.0))
    # 300 Rsun reach log L = 5.8 at 9,400 K: (300^2 (T/5772)^4 = 6.3e5), and 6.5 at 14,100 K
    assert hot.max() < 16_000.0


def test_exact_numbers_stay() -> None:
    radius, temperature, _ = draws(size=3, radius=Value.exact(80.0), temperature=Value.exact(9000.0))
    assert set(radius) == {80.0}
    assert set(temperature) == {9000.0}


@pytest.mark.parametrize("luminosity", [Value.uniform(1e5, 2e5), Value.loguniform(1e5, 2e5), Value.exact(1.5e5)])
def test_three_are_combined(luminosity: Value) -> None:
    wide = {"radius": Value.loguniform(30.0, 300.0), "temperature": Value.loguniform(5000.0, 20_000.0)}
    *_, found = draws(luminosity=luminosity, **wide)
    if luminosity.is_exact:
        assert np.log(found).std() == pytest.approx(0.01, rel=0.2)  # taken as known to one per cent
        assert np.median(found) == pytest.approx(1.5e5, rel=0.005)
    else:
        assert found.min() >= 1e5
        assert found.max() <= 2e5


@pytest.mark.parametrize(
    "given",
    [
        {"radius": Value.exact(1.0), "temperature": Value.exact(5772.0), "luminosity": Value.exact(1e5)},
        {"radius": Value.exact(2000.0), "temperature": Value.exact(30_000.0)},
    ],
    ids=["contradictory", "too bright"],
)
def test_impossible_stars_are_refused(given: dict[str, Value]) -> None:
    with pytest.raises(InputError, match=r"star: must be possible together, .*; change one of them"):
        draws(**given)


def test_the_priors_in_words() -> None:
    assert set(star_prior_texts(StarRecord())) == {"temperature", "luminosity", "upper_luminosity"}
    told = star_prior_texts(StarRecord(radius=RADIUS))
    assert told["radius"] == "100 +- 10 Rsun (event file)"
    assert told["temperature"].endswith("K (default)")
    assert "luminosity" not in told
    assert "temperature" not in star_prior_texts(StarRecord(radius=RADIUS, luminosity=LUMINOSITY))


def test_table_and_figure() -> None:
    found = draw_stars(StarRecord(), np.random.default_rng(1), 20)
    assert found.to_table().colnames == list(found.to_dict()) == ["radius_rsun", "temperature_K", "luminosity_lsun"]
    ax = found.plot()
    assert ax.get_xlim()[0] > ax.get_xlim()[1]
    assert found.plot(ax) is ax
