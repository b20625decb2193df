"""Overlap of micro-caustics, the band along the macro critical curve, and the words for them."""

from __future__ import annotations

import re

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.optics.peaks import saturated_peak
from crossing.optics.regimes import (
    band_depth,
    band_half_width,
    caustic_coverage,
    name_regimes,
    overlap_convergence,
    regime,
    saturation,
    smooth_limit,
)
from crossing.optics.scales import LensScales

SCALES = LensScales(0.5, 1.5)


class TestOverlap:
    def test_listed_convergences(self):
        """From areas of traced caustics, computed apart from here and good to 4e-8."""
        found = overlap_convergence([0.005, -0.005], 0.4)
        assert found == pytest.approx(np.array([0.003269487, 0.008215570]), rel=2e-7)
        assert caustic_coverage(2 * found, [0.005, -0.005], 0.4) == pytest.approx(2.0)

    def test_surface_density(self):
        """Sigma_cr / mu_t = 22.671361 Msun/pc**2 at mu_t = 100, computed apart from here."""
        stars = 22.671361 / SCALES.sigma_crit
        assert saturation(stars, -0.01) == pytest.approx(1.0, rel=1e-7)

    def test_edges(self):
        assert saturation([0.01, 0.0], 0.0).tolist() == [np.inf, 0.0]
        assert caustic_coverage([0.01, 0.0], 0.0, 0.4).tolist() == [np.inf, 0.0]
        assert overlap_convergence(0.4, 0.4) == np.inf
        assert caustic_coverage(np.zeros((2, 1)), [0.1, 0.2, 0.3], 0.4).shape == (2, 3)


class TestBand:
    def test_published_network(self):
        """kappa_star = 0.01: 20 pc deep, 0.2" on the sky (abstract of Venumadhav et al. 2017), to a factor of 2.

        Both follow from one gradient of 0.02 to 0.05 per arcsec, which is not in the abstract.
        """
        rate = 0.03
        assert 0.1 < band_half_width(0.01, rate) < 0.4
        assert 10 < 1e3 * band_depth(0.01, rate) * SCALES.kpc_per_arcsec_source < 40

    def test_depth_is_where_the_images_leave_the_band(self):
        """Images at s along the stretch with lam_t = T s = kappa_star, source at T s**2 / 2."""
        stars, rate = np.array([1e-3, 1e-2]), 0.05
        s = band_half_width(stars, rate)
        assert band_depth(stars, rate) == pytest.approx(rate * s**2 / 2)


class TestSmoothLimit:
    def test_published_limit(self):
        """About 10**-4.5 (abstract of Venumadhav et al. 2017): an order of magnitude, and so is ours."""
        found = smooth_limit(0.1, SCALES.einstein_radius_arcsec, 0.3)
        assert 10**-5 < found < 10**-4

    def test_peaks_meet_there(self):
        """A network at the limit has the peaks K / sqrt(R) of the smooth fold, both without the profile's height."""
        rate = np.array([1e-7, 5e-6])
        limit = smooth_limit(rate, mass=0.3)
        assert saturated_peak(1e-5, limit, 0.4, 0.3) == pytest.approx(np.sqrt(2 / rate) / 0.4 / np.sqrt(1e-5))

    def test_wide_sources_average_the_band(self):
        radius = 0.3
        limit = smooth_limit(1e-6, radius=radius)
        assert band_depth(limit, 1e-6) == pytest.approx(radius)
        assert smooth_limit(1e-6, radius=[0.0, 1e-9]) == pytest.approx(np.full(2, smooth_limit(1e-6)))


class TestWords:
    @pytest.mark.parametrize(
        ("arguments", "name", "words"),
        [
            ((0.0, 0.005, 0.4), "smooth", "There are no stars here"),
            ((1e-5, 0.005, 0.4, 2e-5), "smooth", r"kappa_star = 1e-05\) are too few .* more than about 2e-05"),
            ((0.001, 0.005, 0.4), "isolated", "mostly isolated: they cover a share of 0.31"),
            ((0.004, 0.005, 0.4), "overlapping", "cover the source plane 1.2 times"),
            ((0.004, -0.005, 0.4), "isolated", "a share of 0.49"),
            ((0.01, -0.005, 0.4), "saturated", r"kappa_star = 0.01 is larger than \|lam_t\| = 0.005"),
            ((0.01, 0.0, 0.4), "saturated", r"\|lam_t\| = 0:"),
        ],
    )
    def test_sentences(self, arguments, name, words):
        found = regime(*arguments)
        assert found.name == name == name_regimes(*arguments).item()
        assert re.search(words, found.sentence)
        assert found.saturation == saturation(*arguments[:2])
        assert found.coverage == caustic_coverage(*arguments[:3])

    def test_arrays(self):
        found = name_regimes([0.0, 0.001, 0.004, 0.01], 0.005, 0.4)
        assert found.tolist() == ["smooth", "isolated", "overlapping", "saturated"]
        assert name_regimes(0.01, [[0.0], [0.1]], [0.3, 0.4, 0.5]).shape == (2, 3)


def test_refused():
    with pytest.raises(InputError, match="`kappa_star` must be zero or positive, got -1; 0 means no stars"):
        saturation([0.1, -1.0], 0.1)
    with pytest.raises(InputError, match="`rate` must be positive, got 0; give the size"):
        smooth_limit(0.0)
