"""Magnification at which a star reaches a survey's depth."""

from __future__ import annotations

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.optics.scales import LensScales
from crossing.stars.photosphere import flux_njy_from_magnitude
from crossing.stars.visibility import magnification_to_see

# Radius [Rsun], temperature [K], redshift, wavelength [um], magnification, flux [nJy]: by astropy's black body and
# Planck18 distances, apart from here.
FLUXES = [
    (100, 12000, 1.5, 1.25, 1, 0.010127571),
    (100, 12000, 1.5, 1.25, 1000, 10.127571),
    (180, 11000, 1.49, 1.25, 4300, 112.59241),
    (100, 12000, 1.0, 0.8, 1000, 22.584372),
    (800, 3600, 1.0, 1.6, 1000, 23.42925),
    (50, 20000, 0.94, 0.606, 1000, 28.311546),
]


@pytest.mark.parametrize("row", FLUXES)
def test_listed_fluxes(row):
    radius, temperature, redshift, wavelength, mu, flux = row
    distance = LensScales(0.1, redshift).luminosity_distance
    found = magnification_to_see(radius, temperature, redshift, flux, wavelength, luminosity_distance_mpc=distance)
    assert found == pytest.approx(mu, rel=1e-6)


def test_blue_supergiant_at_a_usual_depth():
    """36.386 mag without magnification (by astropy, apart from here) to 28 mag: a factor of 2262."""
    distance = LensScales(0.5, 1.5).luminosity_distance
    depth = flux_njy_from_magnitude([28.0, 29.0])
    found = magnification_to_see(100, 12000, 1.5, depth, 1.25, luminosity_distance_mpc=distance)
    assert found == pytest.approx(10 ** (0.4 * (36.3862368 - np.array([28.0, 29.0]))), rel=1e-6)


def test_dust_and_broadcasting():
    distance = LensScales(0.5, 1.5).luminosity_distance
    plain = magnification_to_see([[10], [100]], [5e3, 1e4, 2e4], 1.5, 5.0, 1.25, 0.3, luminosity_distance_mpc=distance)
    dusty = magnification_to_see(
        [[10], [100]], [5e3, 1e4, 2e4], 1.5, 5.0, 1.25, 0.3, 0.5, luminosity_distance_mpc=distance
    )
    assert plain.shape == (2, 3)
    assert dusty == pytest.approx(2 * plain)
    assert plain[0] == pytest.approx(100 * plain[1])
    assert magnification_to_see(10, 10.0, 1.5, 5.0, 0.1, luminosity_distance_mpc=distance) == np.inf


def test_refused():
    with pytest.raises(InputError, match="`depth_njy` must be positive, got 0; give the depth"):
        magnification_to_see(100, 1e4, 1.5, [5.0, 0.0], 1.25, luminosity_distance_mpc=1e4)
