"""Blackbody stars against published constants and astropy's own blackbody."""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy import units as u
from astropy.modeling.physical_models import BlackBody
from scipy.integrate import quad

from crossing.errors import InputError
from crossing.optics.constants import L_SUN, R_SUN, STEFAN_BOLTZMANN
from crossing.optics.scales import LensScales
from crossing.stars.photosphere import (
    ab_magnitude,
    blackbody_flux_njy,
    flux_njy_from_magnitude,
    luminosity_lsun,
    radius_from_luminosity,
    temperature_from_luminosity,
)


def distance(redshift: float) -> float:
    return LensScales(redshift / 2, redshift).luminosity_distance


def test_nominal_sun():
    # IAU 2015 B3 (Prsa et al. 2016): the nominal values do not close exactly.
    assert pytest.approx(5.6703744191844e-8, rel=1e-13) == STEFAN_BOLTZMANN
    assert luminosity_lsun(1.0, 5772.0) == pytest.approx(0.99999762360, rel=1e-10)
    # Bolometric magnitude, zero point 3.0128e28 W (IAU 2015 B2).
    assert -2.5 * math.log10(L_SUN / 3.0128e28) == pytest.approx(4.7399959339, rel=1e-10)


@pytest.mark.parametrize(
    ("radius", "temperature", "luminosity"),
    [
        (10, 10000, 900.9354550),
        (50, 20000, 360374.1820),
        (100, 12000, 186817.9759),
        (180, 11000, 427375.3103),
        (300, 8000, 332120.8461),
        (800, 3600, 96846.43873),
    ],
)
def test_stefan_boltzmann(radius, temperature, luminosity):
    # Computed apart from the nominal values; 10 printed digits.
    assert luminosity_lsun(radius, temperature) == pytest.approx(luminosity, rel=5e-10)
    assert radius_from_luminosity(luminosity, temperature) == pytest.approx(radius, rel=5e-10)
    assert temperature_from_luminosity(luminosity, radius) == pytest.approx(temperature, rel=5e-10)


def test_upper_luminosities():
    # log L = 5.5 (Davies, Crowther & Beasor 2018) and 5.8 (Humphreys & Davidson 1979): radii computed apart.
    logarithm, temperature = np.array([[5.5], [5.8]]), np.array([3600, 12000])
    expected = [[1445.6001, 130.10400], [2041.9644, 183.77679]]
    np.testing.assert_allclose(radius_from_luminosity(10**logarithm, temperature), expected, rtol=5e-8)


# F = mu (1+z) pi R**2 B_nu / d_L**2 with Planck18, checked through absolute magnitudes; 8 printed digits.
STARS = [
    (100, 12000, 1.5, 1.25, 1, 0.010127571, 36.3862368),
    (100, 12000, 1.5, 1.25, 1000, 10.127571, 28.8862368),
    (180, 11000, 1.49, 1.25, 4300, 112.59241, 26.2712272),
    (100, 12000, 1.0, 0.8, 1000, 22.584372, 28.0154800),
    (800, 3600, 1.0, 1.6, 1000, 23.42925, 27.9756040),
    (50, 20000, 0.94, 0.606, 1000, 28.311546, 27.7700910),
]


@pytest.mark.parametrize(("radius", "temperature", "z", "wavelength", "mu", "flux", "magnitude"), STARS)
def test_flux_and_magnitude(radius, temperature, z, wavelength, mu, flux, magnitude):
    d_L = distance(z)
    value = blackbody_flux_njy(radius, temperature, z, wavelength, magnification=mu, luminosity_distance_mpc=d_L)
    assert value == pytest.approx(flux, rel=1e-7)
    assert ab_magnitude(value) == pytest.approx(magnitude, abs=1e-7)
    # Independently with astropy, in the star's frame.
    surface = BlackBody(temperature * u.K)(wavelength / (1 + z) * u.um).to_value("W / (m2 Hz sr)")
    angle = radius * R_SUN / (d_L * u.Mpc).to_value("m")
    assert value == pytest.approx(mu * (1 + z) * math.pi * angle**2 * surface * 1e35, rel=1e-8)


@pytest.mark.parametrize(("wavelength", "width"), [(1.25, 0.3), (0.6, 0.5), (1.5, 2.9)])
def test_band(wavelength, width):
    # AB magnitudes weight by photons: the mean of F_nu over ln(wavelength).
    def flux(at, wide=None):
        return float(blackbody_flux_njy(100, 12000, 1.5, at, wide, luminosity_distance_mpc=1e4))

    low, high = wavelength - width / 2, wavelength + width / 2
    mean = quad(lambda x: flux(math.exp(x)), math.log(low), math.log(high))[0] / math.log(high / low)
    # Eight nodes: 1e-8 for usual bands, a few per cent only where the band reaches down to 0.05 um.
    tolerance = 1e-8 if width < 0.9 * wavelength else 0.05
    assert flux(wavelength, width) == pytest.approx(mean, rel=tolerance)
    assert flux(wavelength, 1e-4) == pytest.approx(flux(wavelength), rel=1e-7)
    assert flux(wavelength, 0.0) == flux(wavelength)


def test_broadcast_and_cold_stars():
    flux = blackbody_flux_njy(
        np.ones(3), np.array([[1.0], [5000.0]]), 1.0, 1.0, 0.2, magnification=100.0, luminosity_distance_mpc=7000.0
    )
    assert flux.shape == (2, 3)
    assert np.all(flux[0] == 0)  # a star of 1 K: the exponential overflows to no light, without a warning
    assert np.all(flux[1] > 0)


def test_magnitudes():
    # 1 microjansky is 23.9 AB; 3630.780548 Jy is magnitude 0 (zero point 48.6).
    assert ab_magnitude(1000.0) == pytest.approx(23.9, abs=1e-12)
    assert ab_magnitude(3630.780548e9) == pytest.approx(0, abs=1e-9)
    np.testing.assert_array_equal(ab_magnitude([0.0, -1.0]), [np.inf, np.nan])
    np.testing.assert_allclose(flux_njy_from_magnitude(ab_magnitude([0.01, 3.0, 1e9])), [0.01, 3.0, 1e9], rtol=1e-13)


def test_bad_bands():
    with pytest.raises(InputError, match="`wavelength_um` must be positive, got 0; give it in micrometres"):
        blackbody_flux_njy(1, 5000, 1, 0.0, luminosity_distance_mpc=1.0)
    with pytest.raises(InputError, match="`width_um` must be positive and below twice the wavelength, got 2; give"):
        blackbody_flux_njy(1, 5000, 1, 1.0, 2.0, luminosity_distance_mpc=1.0)
