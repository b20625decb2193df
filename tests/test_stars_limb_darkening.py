"""The grey atmosphere's limb darkening."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import trapezoid

from crossing.errors import InputError
from crossing.event import BandRecord, Value
from crossing.stars.limb_darkening import _grey_intensities, band_limb_darkening, default_limb_darkening


def test_all_wavelengths_together_are_the_eddington_law():
    # Integrated over frequency, I(mu) is proportional to mu + 2/3: coefficient 3/5 exactly.
    ratio = np.linspace(0.01, 45, 4000)
    intensity = trapezoid(ratio[:, None] ** 3 * _grey_intensities(ratio, [0.1, 0.5, 1.0]), ratio, axis=0)
    np.testing.assert_allclose(intensity / intensity[-1], (np.array([0.1, 0.5, 1.0]) + 2 / 3) / (5 / 3), rtol=1e-4)


def test_coefficients():
    # The Sun in the visual: measured 0.6 to 0.65 (from memory); the grey value must come within 0.1.
    assert default_limb_darkening(0.55, 5772.0) == pytest.approx(0.62, abs=0.1)
    cool, hot = default_limb_darkening(0.6, 3600.0), default_limb_darkening(0.6, 15000.0)
    assert 0.7 < cool <= 1
    assert 0.2 < hot < 0.5
    # Redder light, weaker darkening; a redshift moves it to the blue.
    values = default_limb_darkening(np.array([0.4, 0.8, 1.6, 5.0]), 8000.0)
    assert np.all(np.diff(values) < 0)
    assert default_limb_darkening(1.2, 9000.0, 1.0) == default_limb_darkening(0.6, 9000.0)


def test_extremes_stay_within_bounds():
    values = default_limb_darkening(np.array([[1e-3], [1e6]]), np.array([100.0, 1e6]))
    assert values.shape == (2, 2)
    assert np.all((values >= 0) & (values <= 1))
    # Long waves: B is proportional to T, so the coefficient is that of (tau + 2/3)**(1/4).
    assert default_limb_darkening(1e6, 1e4) == pytest.approx(0.17, abs=0.03)


def test_band():
    band = BandRecord(name="a", wavelength=1.2)
    assert band_limb_darkening(band, 9000.0, 1.0) == default_limb_darkening(1.2, 9000.0, 1.0)
    given = BandRecord(name="a", wavelength=1.2, limb_darkening=Value.uniform(0.2, 0.4))
    np.testing.assert_allclose(band_limb_darkening(given, np.array([5e3, 1e4])), [0.3, 0.3])


def test_bad_input():
    with pytest.raises(InputError, match="`temperature_K` must be positive, got 0; check the unit"):
        default_limb_darkening(1.0, [5000.0, 0.0])
    with pytest.raises(InputError, match="`wavelength_um` must be positive, got -1; check the unit"):
        default_limb_darkening(-1.0, 5000.0)
