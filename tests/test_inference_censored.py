"""Gaussians under one-sided constraints against sums over dense grids."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import log_ndtr

from crossing.inference.censored import constrain

Array = NDArray[np.float64]


def dense(upper: Array, softness: Array, wall: float | None) -> tuple[float, float, float]:
    """Log of the integral, mean and standard deviation."""
    low = wall if wall is not None else min(-9.0, upper.min() - 40.0)
    x = np.unique(np.concatenate([np.linspace(low, low + 60.0, 60_001), low + np.geomspace(1e-6, 60.0, 4001)]))
    logs = -0.5 * x**2 - 0.5 * np.log(2 * np.pi) + log_ndtr((upper[:, None] - x) / softness[:, None]).sum(axis=0)
    density = np.exp(logs - logs.max())
    total = np.trapezoid(density, x)
    mean = np.trapezoid(density * x, x) / total
    return (
        float(np.log(total) + logs.max()),
        float(mean),
        float(np.sqrt(np.trapezoid(density * (x - mean) ** 2, x) / total)),
    )


def cases(count: int, walled: bool, low: float, high: float) -> list[tuple[Array, Array, float | None]]:
    rng = np.random.default_rng([count, walled, int(-low)])
    made = []
    for _ in range(20):
        n = int(rng.integers(1, count + 1))
        upper, softness = rng.uniform(low, high, n), np.exp(rng.uniform(np.log(0.1), np.log(3.0), n))
        made.append((upper, softness, float(rng.uniform(-6.0, min(1.0, upper.min() + 3.0))) if walled else None))
    return made


# (most limits, wall, lowest, highest limit): typical and at worst; the module states some 0.01, and 0.1 at worst.
@pytest.mark.parametrize("walled", [False, True])
@pytest.mark.parametrize("ends", [(-1.0, 4.0), (-5.0, 0.0)])
@pytest.mark.parametrize("count", [3, 12])
def test_mass_and_moments(count: int, ends: tuple[float, float], walled: bool) -> None:
    errors, moments = [], []
    for upper, softness, wall in cases(count, walled, *ends):
        mass, mean, deviation = constrain(upper, softness, None if wall is None else np.array(wall))
        expected = dense(upper, softness, wall)
        errors.append(float(mass) - expected[0])
        moments.append([(float(mean) - expected[1]) / expected[2], float(deviation) / expected[2] - 1.0])
    assert np.max(np.abs(errors)) < 0.1
    assert np.sqrt(np.mean(np.square(errors))) < 0.04
    # Draws take only the range from them: 8 deviations either side.
    assert np.max(np.abs(moments)) < 0.3


@pytest.mark.parametrize("upper", [-30.0, -3.0, 0.0, 2.0])
@pytest.mark.parametrize("softness", [0.01, 1.0, 10.0])
def test_one_limit_is_exact(upper: float, softness: float) -> None:
    mass, mean, _ = constrain(np.array([upper]), np.array([softness]))
    width = np.hypot(1.0, softness)
    u = upper / width
    # Convolution of a normal density and a cumulative one; and the mean from its derivative.
    assert mass == pytest.approx(log_ndtr(u), rel=1e-12, abs=1e-12)
    hazard = np.exp(-0.5 * u**2 - log_ndtr(u)) / np.sqrt(2 * np.pi)
    assert mean == pytest.approx(-hazard / width, rel=1e-9)


@pytest.mark.parametrize("wall", [-8.0, 0.0, 3.0, 30.0])
def test_the_wall_alone(wall: float) -> None:
    mass, mean, deviation = constrain(np.empty(0), np.empty(0), np.array(wall))
    assert mass == pytest.approx(log_ndtr(-wall), rel=1e-12, abs=1e-12)
    # Inverse Mills ratio; the variance from it loses digits as 1e-16 wall^4.
    hazard = np.exp(-0.5 * wall**2 - log_ndtr(-wall)) / np.sqrt(2 * np.pi)
    assert mean == pytest.approx(hazard, rel=1e-9)
    assert deviation**2 == pytest.approx(1.0 + wall * hazard - hazard**2, rel=1e-6)


def test_nothing_in_the_way() -> None:
    mass, mean, deviation = constrain(np.full((2, 3), 60.0), np.ones(3), np.full(2, -60.0))
    np.testing.assert_allclose([mass, mean, deviation], [[0, 0], [0, 0], [1, 1]], atol=1e-14)


@pytest.mark.parametrize("distance", [1e3, 1e6, 1e12, 1e200])
def test_hopeless_constraints_stay_finite(distance: float) -> None:
    upper = np.array([[-distance, -0.5 * distance], [distance, distance]])
    mass, mean, deviation = constrain(upper, np.array([0.1, 1.0]), np.array([0.0, 2.0 * distance]))
    assert np.all(np.isfinite([mass, mean, deviation]))
    assert np.all(mass < -1e5)


def test_a_rough_answer_is_near() -> None:
    upper = np.linspace(-3.0, 3.0, 40)[:, None] + np.array([0.0, 0.5, 1.0])
    fine, rough = (constrain(upper, np.full(3, 0.5), np.full(40, -1.0), rough=rough)[0] for rough in (False, True))
    # Good enough to find the peak's neighbours 30 units down.
    np.testing.assert_allclose(rough, fine, atol=3.0)
