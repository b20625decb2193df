"""Exact laws of random star fields against values computed by Hankel integrals and Monte Carlo apart from here."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from twins import density_at_zero as plain_density
from twins import mean_minima as plain_minima

from crossing.errors import InputError
from crossing.optics.random_fields import (
    density_at_zero,
    mean_magnification,
    mean_minima,
    star_cross_section,
    tail_amplitude,
)

# kappa_smooth, kappa_star, gamma, <mu>, p_J(0), mu**2 P(>mu), <n_min>.
FIELDS = np.array(
    [
        (0, 0.1, 0, 1.234567901, 0.04925926684, 0.1216278194, 1.011114182),
        (0, 0.2, 0, 1.5625, 0.09428660343, 0.2946456357, 1.050122561),
        (0, 0.4, 0, 2.777777778, 0.1600821881, 0.8893454894, 1.273260086),
        (0.3, 0.2, 0.2, 4.761904762, 0.3013688864, 2.870179870, 1.215277167),
        (0.7875, 0.01, 0.1975, 500, 23.97366390, 23973.66390, 3.347165153),
        (0.7925, 0.01, 0.2025, 500, 62.19436536, 62194.36536, 1.944621935),
    ]
)


def test_listed_fields():
    smooth, stars, gamma, mean, density, tail, minima = FIELDS.T
    lens = 1 - smooth - stars - gamma, 1 - smooth - stars + gamma
    assert mean_magnification(*lens) == pytest.approx(mean, rel=1e-9)
    assert density_at_zero(*lens, stars) == pytest.approx(density, rel=1e-9)
    assert tail_amplitude(*lens, stars) == pytest.approx(tail, rel=1e-9)
    assert mean_minima(*lens, stars) == pytest.approx(minima, rel=1e-9)


def test_strip_of_crossings_is_centred_on_the_smooth_critical_curve():
    """Values at lam_r = 0.4, kappa_star = 0.01, computed apart from here; the peak is at lam_t = -kappa_star."""
    lam_t = np.array([-0.05, -0.02, -0.01, 0, 0.01, 0.02, 0.05])
    expected = [4.639177658, 38.90491346, 77.71963018, 38.90491346, 15.61034554, 7.841067085, 2.162566762]
    assert density_at_zero(lam_t, 0.4, 0.01) == pytest.approx(np.array(expected), rel=1e-9)
    # Across the strip from lam_t = -0.3 to 0.3, computed apart from here to three digits: nearly 1 / lam_r whatever
    # kappa_star is.
    expected = {0.001: 2.49, 0.003: 2.48, 0.01: 2.42, 0.03: 2.25}
    for stars, total in expected.items():
        found = quad(lambda t, k=stars: float(density_at_zero(t, 0.4, k)), -0.3, 0.3, points=[-stars])[0]
        assert found == pytest.approx(total, abs=0.006)


def test_cauchy_without_shear():
    """kappa_star / [(1 - kappa_star)**2 (1 + kappa_star**2)**(3/2)], and the minima without shear."""
    stars = np.array([1e-3, 0.1, 0.5, 0.9])
    expected = stars / ((1 - stars) ** 2 * (1 + stars**2) ** 1.5)
    assert tail_amplitude(1 - stars, 1 - stars, stars) == pytest.approx(expected, rel=1e-12)
    minima = (np.sqrt(1 + stars**2) - stars) ** 2 / (1 - stars) ** 2
    assert mean_minima(1 - stars, 1 - stars, stars) == pytest.approx(minima, rel=1e-10)


def test_largest_share_of_minima():
    """Granot, Schechter & Wambsganss (2003) give 0.306 for the largest <n>/<mu>, at kappa_smooth = 0."""
    stars, gamma = 0.378950, 0.621050
    lens = 1 - stars - gamma, 1 - stars + gamma
    # <mu> is infinite at the very place, so a little beside it.
    share = mean_minima(lens[0] + 1e-7, lens[1], stars) / mean_magnification(lens[0] + 1e-7, lens[1])
    assert share == pytest.approx(0.3061359488, rel=1e-6)


def test_one_star():
    """C for eigenvalues of either sign, computed as a contour integral apart from here; pi / k**3 without shear."""
    found = star_cross_section([0.005, -0.005, 0.1, -0.1, 1.0], [0.4, 0.4, 0.5, 0.5, 1.0])
    expected = [200082.3218, 200082.3218, 420.2008908, 420.2008908, np.pi]
    assert found == pytest.approx(np.array(expected), rel=1e-9)
    assert star_cross_section(0.1, 0.5, 0.3) == pytest.approx(0.3 * 420.2008908, rel=1e-9)


def test_dilute_limit():
    """Few stars act one by one; corrections are of order kappa_star / lam_t."""
    lam_t, lam_r = np.array([0.1, -0.1, 0.3]), np.array([0.5, 0.5, -0.4])
    single = 1e-6 / (np.pi * np.abs(lam_t * lam_r)) * star_cross_section(lam_t, lam_r)
    assert tail_amplitude(lam_t, lam_r, 1e-6) == pytest.approx(single, rel=1e-4)


@settings(max_examples=25, derandomize=True, deadline=None)
@given(
    smooth=st.floats(0, 0.95),
    stars=st.floats(0.01, 0.5),
    gamma=st.floats(-1, 1).filter(lambda g: abs(g) > 1e-3),
)
def test_against_plain_twins(smooth, stars, gamma):
    """The twins integrate over direction and size of the shear; theirs is a relative error of 1e-9."""
    lam_t, lam_r = 1 - smooth - stars - gamma, 1 - smooth - stars + gamma
    assert density_at_zero(lam_t, lam_r, stars) == pytest.approx(plain_density(smooth, stars, abs(gamma)), rel=1e-9)
    if abs(lam_t * lam_r) > 1e-6:
        found = mean_minima(lam_t, lam_r, stars) / mean_magnification(lam_t, lam_r)
        expected = plain_minima(smooth, stars, abs(gamma)) * abs(lam_t * lam_r)
        assert found == pytest.approx(expected, rel=1e-7, abs=1e-14)


def test_broadcasting_and_edges():
    assert mean_minima(np.full((2, 1), 0.005), 0.4, [0.01, 0.02, 0.03]).shape == (2, 3)
    assert mean_magnification(0.0, 0.4) == np.inf
    assert tail_amplitude(0.0, 0.4, 0.01) == np.inf
    assert star_cross_section(0.0, 0.4) == np.inf
    with pytest.raises(InputError, match="`kappa_star` must be positive, got 0; without stars"):
        density_at_zero(0.1, 0.4, [0.1, 0.0])
