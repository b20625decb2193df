"""Times of crossings."""

from __future__ import annotations

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.optics.durations import band_crossing_years, caustic_spacing_days, crossing_days
from crossing.optics.scales import LensScales

SCALES = LensScales(0.5, 1.5)


def test_crossing_of_a_disc():
    """3.865 h for 10 Rsun at 1000 km/s and ten times that for 100 Rsun, computed apart from here."""
    assert 24 * crossing_days([10, 100], 1000) == pytest.approx(np.array([3.865, 38.65]), rel=1e-5)
    assert crossing_days(10, 1000, 60.0) == pytest.approx(2 * crossing_days(10, 1000))
    # "5 h (R / 10 Rsun)" in the abstract of Venumadhav, Dai & Miralda-Escude (2017), at a speed not given there.
    assert 24 * crossing_days(10, 1000) == pytest.approx(5, rel=0.3)


def test_from_caustic_to_caustic():
    """15.99023 yr for theta_E at 1000 km/s, computed apart from here; over sqrt(mu_r) = sqrt(2.5)."""
    found = caustic_spacing_days(SCALES, 0.4, [1000, 500], 0.25)
    assert found / 365.25 == pytest.approx(15.99023 * np.sqrt(0.4) * np.array([0.5, 1.0]), rel=1e-6)


def test_crossing_of_the_band():
    """20 pc in 2e4 yr (abstract of Venumadhav et al. 2017) is 978 km/s."""
    depth = 0.02 / SCALES.kpc_per_arcsec_source
    assert band_crossing_years(depth, SCALES, 977.8) == pytest.approx(2e4, rel=1e-4)
    assert band_crossing_years(depth, SCALES, 977.8, [[0.0], [60.0]]).shape == (2, 1)


def test_refused():
    with pytest.raises(InputError, match="`speed_kms` must be positive, got 0; give the effective speed"):
        crossing_days(10, [1000, 0])
    with pytest.raises(InputError, match="`mass` must be positive, got 0"):
        caustic_spacing_days(SCALES, 0.4, 1000, 0.0)
