"""Upper luminosities against the values that the literature quotes."""

import numpy as np
import pytest

from crossing.stars.photosphere import radius_from_luminosity
from crossing.stars.upper_luminosity import log_allowed, upper_log_luminosity


@pytest.mark.parametrize(
    ("temperature", "log_limit"), [(3600.0, 5.8), (12_000.0, 5.8), (25_000.0, 6.5), (40_000.0, 6.5)]
)
def test_corners(temperature, log_limit):
    # Humphreys & Davidson 1979; the hot corner is from memory
    assert upper_log_luminosity(temperature) == pytest.approx(log_limit, rel=1e-12)


def test_rises_between_the_corners():
    limit = upper_log_luminosity(np.geomspace(12_000, 25_000, 9))
    assert (np.diff(limit) > 0).all()


def test_radius_at_the_cool_limit():
    # log L = 5.8 at 3600 K is 2041.96 Rsun (Stefan-Boltzmann with the IAU 2015 nominal values)
    assert radius_from_luminosity(10**5.8, 3600.0) == pytest.approx(2041.9644, rel=1e-7)


def test_soft_edge():
    assert np.exp(log_allowed(10**5.8, 5000.0)) == pytest.approx(0.5, rel=1e-12)
    assert np.exp(log_allowed(10**4.0, 5000.0)) == pytest.approx(1.0, abs=1e-15)
    # one decade above is five widths: Phi(-5) = 2.8665e-7 (normal table)
    assert np.exp(log_allowed(10**6.8, 5000.0)) == pytest.approx(2.8665e-7, rel=1e-4)
