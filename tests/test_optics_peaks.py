"""Peaks at smooth folds, at single micro-caustics and in networks, against published worked numbers."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from crossing.errors import InputError
from crossing.optics.local import FoldGeometry
from crossing.optics.peaks import (
    disc_peak,
    extended_peak,
    isolated_peak,
    saturated_peak,
    scaling_peak,
    smooth_peak,
)
from crossing.optics.scales import LensScales
from crossing.optics.star_caustic import axis_fold_strength, crossing_strength

SCALES = LensScales(0.5, 1.5)


def fold(rate, mu_r=1 / 0.34):
    """mu_r = 1 / (2 (1 - kappa)) with kappa = 0.83 on the critical curve."""
    return FoldGeometry(gradient=(rate, 0.0), mu_r=mu_r)


class TestSmooth:
    def test_listed_peaks(self):
        """kappa = 0.83, redshifts 0.5 and 1.5: computed apart from here."""
        steep, flat = fold(0.1), fold(0.02)
        assert steep.strength == pytest.approx(13.1533, rel=5e-6)
        radius = np.array([10, 100, 1000])
        found = smooth_peak(radius, steep.strength, SCALES)
        assert found == pytest.approx(np.array([3.595913e6, 1.137128e6, 3.595913e5]), rel=1e-6)
        found = smooth_peak(radius, flat.strength, SCALES)
        assert found == pytest.approx(np.array([8.040707e6, 2.542695e6, 8.040707e5]), rel=1e-6)
        assert found[0] == pytest.approx(flat.smooth_peak(10 * SCALES.rsun_arcsec), rel=1e-12)

    def test_published_order_of_magnitude(self):
        """About 1e6 (10 Rsun / R)**(1/2): abstract of Venumadhav, Dai & Miralda-Escude (2017); their lens differs."""
        assert 1e6 < smooth_peak(10, fold(0.1).strength, SCALES) < 1e7

    def test_limb_darkening(self):
        """Peaks of the profile by mpmath: 1.39311929654, 1.41786808900, 1.46969384567."""
        found = disc_peak(4.0, [[2.0], [4.0]], 10.0, [0.0, 0.5, 1.0])
        assert found.shape == (2, 3)
        heights = np.array([1.39311929654, 1.41786808900, 1.46969384567])
        assert found == pytest.approx(10 + np.outer([1, 2], heights), rel=1e-11)


class TestExtended:
    @pytest.mark.parametrize(("rate", "large", "small"), [(0.1, 54, 171), (0.02, 121, 382)])
    def test_galaxies_saturate_at_tens_to_hundreds(self, rate, large, small):
        """Tens is common practice (no source); the numbers are the law, derived here, all within its reach."""
        found = extended_peak([1.0, 0.1], fold(rate), SCALES)
        assert found.law == pytest.approx(np.array([large, small]), rel=0.01)
        assert found.within_reach == pytest.approx(found.law, rel=1e-9)
        assert smooth_peak(100, fold(rate).strength, SCALES) > 1e3 * found.law[1]

    def test_reach(self):
        """Images at s = lam_r / T, where |lam_t| = lam_r = 0.34 and each is magnified lam_r**(-2)."""
        lens = fold(0.1)
        found = extended_peak(1.0, lens, SCALES)
        depth = found.reach_kpc / SCALES.kpc_per_arcsec_source
        assert lens.image_offset(depth) == pytest.approx(3.4)
        assert lens.magnification(depth) == pytest.approx(2 / 0.34**2)

    def test_part_within_reach(self):
        """Chords of the disc by plain quadrature."""
        lens, size = fold(0.1), 10.0
        found = extended_peak([size, 1e4], lens, SCALES)
        R, reach = size / SCALES.kpc_per_arcsec_source, found.reach_kpc / SCALES.kpc_per_arcsec_source

        def piece(d):
            return 2 * np.sqrt(R**2 - (d - 0.652229531969941 * R) ** 2) / (np.pi * R**2) * lens.magnification(d)

        assert found.within_reach[0] == pytest.approx(quad(piece, 0, reach)[0], rel=1e-7)
        assert found.within_reach[0] < 0.7 * found.law[0]
        assert found.within_reach[1] < 0.01


class TestIsolated:
    # z_l, z_s, mass, radius [Rsun], mu_t, mu_r, theta_E [uas], rho, scaling, exact fold on the axis: computed apart
    # from here; rho is in Einstein radii of that mass.
    TABLE = (
        (0.5, 1.5, 1.0, 100, 200, 2.5, 1.8835053, 1.3786799e-4, 11323.502, 15974.673),
        (0.5, 1.5, 0.3, 100, 200, 2.5, 1.0316384, 2.5171136e-4, 8380.3295, 11822.581),
        (0.4, 1.0, 0.3, 100, 200, 2.5, 1.0631513, 2.5763839e-4, 8283.373, 11685.799),
        (0.544, 1.49, 0.3, 180, 100, 3.0, 0.97816414, 4.7795067e-4, 4339.4003, 6232.2704),
    )

    @pytest.mark.parametrize("row", TABLE)
    def test_listed_peaks(self, row):
        z_lens, z_source, mass, radius, mu_t, mu_r, einstein, rho, simple, exact = row
        scales = LensScales(z_lens, z_source)
        assert scales.einstein_radius_uas * np.sqrt(mass) == pytest.approx(einstein, rel=1e-7)
        size = radius / scales.einstein_radius_source_rsun
        assert size / np.sqrt(mass) == pytest.approx(rho, rel=1e-7)
        assert scaling_peak(size, 1 / mu_t, 1 / mu_r, mass) == pytest.approx(simple, rel=1e-7)
        assert isolated_peak(size, -1 / mu_t, 1 / mu_r, mass) == pytest.approx(exact, rel=1e-7)

    def test_published_peak(self):
        """About 4300 for 0.3 Msun and 180 Rsun (abstract of Oguri et al. 2018); mu_t = 100, mu_r = 3 from memory."""
        scales = LensScales(0.544, 1.49)
        assert scaling_peak(180 / scales.einstein_radius_source_rsun, 0.01, 1 / 3, 0.3) == pytest.approx(4300, rel=0.01)

    def test_published_peaks_of_a_network(self):
        """About 1e4 for 10 Rsun (abstract of Venumadhav et al. 2017); 18410.5 and 26441.3 computed apart from here."""
        scales = LensScales(0.544, 1.49)
        size = 10 / scales.einstein_radius_source_rsun
        assert scaling_peak(size, 0.01, 1 / 3, 0.3) == pytest.approx(18410.5, rel=1e-5)
        assert isolated_peak(size, -0.01, 1 / 3, 0.3) == pytest.approx(26441.3, rel=1e-5)
        assert saturated_peak(size, 0.01, 1 / 3, 0.3) == pytest.approx(18410.5, rel=1e-5)
        assert 0.5e4 < saturated_peak(size, 0.01, 1 / 3, 0.3) < 2e4

    def test_ratio_to_the_scaling(self):
        """Exactly 1.393119 lam_r / (lam_r + lam_t) on the saddle side."""
        lam_t = -np.array([0.2, 0.01, 1e-5])
        ratio = isolated_peak(1e-4, lam_t, 0.4, 0.3) / scaling_peak(1e-4, lam_t, 0.4, 0.3)
        assert ratio == pytest.approx(1.39311929653948 * 0.4 / (0.4 + lam_t), rel=1e-12)

    def test_sides(self):
        found = isolated_peak([1e-4, 4e-4], [[-0.005], [0.005]], 0.4, limb_darkening=1.0)
        expected = 1.46969384566991 * np.array([[axis_fold_strength(-0.005, 0.4)], [crossing_strength(0.005, 0.4)]])
        assert found == pytest.approx(expected / [1e-2, 2e-2], rel=1e-12)
        # Median folds of a minimum are about half as strong as a saddle's inner edge.
        assert found[0, 0] / found[1, 0] == pytest.approx(2.09, abs=0.02)

    def test_fourth_root_of_mass(self):
        for lam_t in (-0.005, 0.005):
            assert isolated_peak(1e-4, lam_t, 0.4, 16.0) == pytest.approx(2 * isolated_peak(1e-4, lam_t, 0.4))
        assert saturated_peak(1e-4, 0.01, 0.4, 16.0, 1.5) == pytest.approx(3 * saturated_peak(1e-4, 0.01, 0.4))


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: disc_peak([1.0, 0.0], 1.0), "`radius` must be positive, got 0; a point has no finite peak"),
        (lambda: disc_peak(1.0, 1.0, 0.0, 1.5), "`limb_darkening` must be between 0 and 1"),
        (lambda: smooth_peak(-1.0, 1.0, SCALES), "`radius` must be positive"),
        (lambda: extended_peak(0.0, fold(0.1), SCALES), "`radius_kpc` must be positive, got 0"),
        (lambda: scaling_peak(1e-4, 0.1, 0.4, 0.0), "`mass` must be positive, got 0"),
        (lambda: saturated_peak(1e-4, 0.0, 0.4), "`kappa_star` must be positive, got 0; without stars"),
        (lambda: isolated_peak(1e-4, 0.0, 0.4), "must not be zero"),
    ],
)
def test_refused(call, message):
    with pytest.raises(InputError, match=message):
        call()
