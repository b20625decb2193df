"""Caustics of one star with shear: areas, lengths, cusps fold strengths, against closed forms and an image solver."""

from __future__ import annotations

import numpy as np
import pytest
from twins import one_star_images

from crossing.errors import InputError
from crossing.optics.star_caustic import (
    axis_fold_strength,
    caustic_area,
    caustic_half_sizes,
    crossing_strength,
    star_caustic,
)

# lam_t, lam_r, length, area, |u| and |v| of the farthest cusps: computed with a traced polygon, apart from here. The
# areas of a polygon are good to 4e-8 only.
LENSES = [
    (0.005, 0.4, 22.98326893, 1.921764846, 0.6245498379, 5.586143571),
    (0.1, 0.5, 5.830807759, 0.7491071360, 0.5656854249, 1.264911064),
    (-0.005, 0.4, 15.92329093, 0.7647899647, 0.6403612262, 1.914864231),
    (-0.1, 0.5, 2.672162324, 0.07059654067, 0.8485281374, 0.2824816757),
]


def contour_area(lam_t, lam_r, points=40_000):
    """Area from the contour integral itself; the trapezoidal rule is exact to rounding on a periodic curve."""
    k, shear = (lam_t + lam_r) / 2, (lam_r - lam_t) / 2
    turn = k * np.exp(2j * np.pi * np.arange(points) / points)
    z = np.conj((shear + turn) ** -0.5)
    slope_conj = -0.5 * np.conj(z) ** 3 * 1j * turn
    source = k * z - shear * np.conj(z) - 1 / np.conj(z)
    slope = k * np.conj(slope_conj) + turn * slope_conj
    return abs(np.mean((np.conj(source) * slope).imag)) * 2 * np.pi


class TestShape:
    @pytest.mark.parametrize("row", LENSES)
    def test_listed_values(self, row):
        lam_t, lam_r, length, area, u, v = row
        assert caustic_area(lam_t, lam_r) == pytest.approx(area, rel=5e-8)
        assert star_caustic(lam_t, lam_r, points=4001).length == pytest.approx(length, rel=2e-6)
        assert star_caustic(lam_t, lam_r).length == pytest.approx(length, rel=3e-5)
        size = caustic_half_sizes(lam_t, lam_r)
        assert (size.u, size.v) == pytest.approx((u, v), rel=1e-9)

    @pytest.mark.parametrize(
        "lens", [row[:2] for row in LENSES] + [(-0.1, -0.5), (-0.3, -0.5), (0.2, -0.3), (0.3, 0.31)]
    )
    def test_area_is_the_contour_integral(self, lens):
        assert caustic_area(*lens) == pytest.approx(contour_area(*lens), rel=1e-10)

    def test_weak_shear(self):
        """Area 3/2 pi gamma**2, length 12 gamma; ratios at gamma = 0.01 computed apart from here."""
        assert caustic_area(0.99, 1.01) / (1.5 * np.pi * 1e-4) == pytest.approx(1.0000313, abs=2e-7)
        assert star_caustic(0.99, 1.01, points=4001).length / 0.12 == pytest.approx(1.0000486, abs=1e-6)
        # Either side of the place where the series takes over: the two forms agree to the rounding of the other.
        for shear in (2.99e-3, 3.01e-3):
            area = 1.5 * np.pi * shear**2 * (1 + 5 / 16 * shear**2)
            assert caustic_area(1 - shear, 1 + shear) == pytest.approx(area, rel=2e-10)
        assert caustic_area(1.0, 1.0) == 0

    @pytest.mark.parametrize("lens", [(0.005, 0.4), (-0.1, 0.5), (-0.31, 0.5), (0.1, -0.5), (0.3, -0.31), (-1e-6, 0.4)])
    def test_half_sizes_hold_the_curve(self, lens):
        curve, size = star_caustic(*lens), caustic_half_sizes(*lens)
        assert np.abs(curve.u).max() == pytest.approx(size.u, rel=3e-5)
        assert np.abs(curve.v).max() == pytest.approx(size.v, rel=3e-5)

    def test_mass_scales_everything(self):
        one, four = star_caustic(-0.005, 0.4), star_caustic(-0.005, 0.4, 4.0)
        assert four.u == pytest.approx(2 * one.u)
        assert four.strength == pytest.approx(np.sqrt(2) * one.strength)
        assert caustic_area(-0.005, 0.4, 4.0) == pytest.approx(4 * caustic_area(-0.005, 0.4))
        assert caustic_half_sizes(-0.005, 0.4, 4.0).v == pytest.approx(2 * caustic_half_sizes(-0.005, 0.4).v)
        assert crossing_strength(0.1, 0.5, 16.0) == pytest.approx(2 * crossing_strength(0.1, 0.5))

    def test_half_sizes_near_the_critical_curve(self):
        """sqrt(mu_t)/mu_r along v and mu_r**(-1/2) along u, to the first order in lam_t / lam_r."""
        size = caustic_half_sizes([1e-5, 1e-7], 0.4)
        assert size.u == pytest.approx(np.sqrt(0.4), rel=3e-5)
        assert size.v == pytest.approx(0.4 / np.sqrt([1e-5, 1e-7]), rel=3e-5)


class TestStrength:
    def test_axis_fold(self):
        """Listed values, computed from the closed form and by an image solver apart from here."""
        assert axis_fold_strength([-0.005, -0.1], [0.4, 0.5]) == pytest.approx(np.array([134.6404025, 14.05853313]))
        curve = star_caustic(-0.005, 0.4)
        middle = curve.strength.size // 2
        assert curve.u[middle] == pytest.approx(0.1414213562 * np.sign(curve.u[middle]), rel=1e-9)
        assert curve.strength[middle] == pytest.approx(134.6404025, rel=1e-9)

    @pytest.mark.parametrize(
        ("lens", "height", "folds"),
        [
            # v over that of the cusp, (|u|, K): solved for apart from here.
            ((0.005, 0.4), 0.1, [(0.2437551, 13.538065)]),
            ((0.005, 0.4), 0.75, [(0.0110736, 101.75498)]),
            ((0.1, 0.5), 0.25, [(0.2327896, 4.9428085)]),
            ((-0.005, 0.4), 0.1, [(0.1413381, 134.77227), (0.4162785, 8.0633681)]),
            ((-0.005, 0.4), 0.5, [(0.1392566, 138.66341), (0.1946575, 27.228200)]),
        ],
    )
    def test_off_the_axis(self, lens, height, folds):
        curve = star_caustic(*lens, points=20_001)
        rise = np.abs(curve.v) - height * caustic_half_sizes(*lens).v
        at = np.flatnonzero(np.diff(np.sign(rise)))
        share = rise[at] / (rise[at] - rise[at + 1])
        u = np.abs(curve.u[at] + share * (curve.u[at + 1] - curve.u[at]))
        strength = curve.strength[at] + share * (curve.strength[at + 1] - curve.strength[at])
        for where, expected in folds:
            nearest = np.argmin(np.abs(u - where))
            # Linear between points 5e-4 of the curve apart.
            assert u[nearest] == pytest.approx(where, rel=1e-4)
            assert strength[nearest] == pytest.approx(expected, rel=1e-4)

    @pytest.mark.parametrize("lens", [(0.1, 0.5), (-0.1, 0.5)])
    def test_against_images(self, lens):
        """Total magnification on either side of the caustic; the pair's is K / sqrt(d), other images hardly change."""
        curve, distance = star_caustic(*lens, points=401), 1e-6
        for at in (60, 110, 150):
            along = complex(curve.u[at + 1] - curve.u[at - 1], curve.v[at + 1] - curve.v[at - 1])
            normal = 1j * along / abs(along) * distance
            place = complex(curve.u[at], curve.v[at])
            sides = [
                np.abs(one_star_images((place + s * normal).real, (place + s * normal).imag, *lens).magnification).sum()
                for s in (1, -1)
            ]
            # Chords of the caustic are off its tangent by 1e-4, and the next order is of relative size sqrt(d).
            assert abs(sides[0] - sides[1]) * np.sqrt(distance) == pytest.approx(curve.strength[at], rel=5e-3)

    def test_crossings(self):
        """Near the critical curve a minimum's track along u meets a fold as strong as its height says; values above.

        Weaker by 3e-4 at a quarter of the height, since K rises again towards the cusp on the u axis.
        """
        assert crossing_strength(0.005, 0.4) == pytest.approx(64.434269, rel=5e-4)
        assert crossing_strength([0.005, 0.05], 0.4, share=0.25)[0] == pytest.approx(31.592970, rel=1e-3)
        inner = axis_fold_strength(-0.005, 0.4)
        assert crossing_strength(-0.005, 0.4, share=0.5) == pytest.approx(inner, rel=0.03)
        assert crossing_strength(-0.005, 0.4, share=0.1) < 0.2 * inner
        assert crossing_strength(-0.005, 0.4, angle=90.0) < crossing_strength(-0.005, 0.4)

    def test_scaling_near_the_critical_curve(self):
        """K grows as mu_r mu_t**(3/4): towards lam_t = 0 the closed form is the scaling itself."""
        lam_t = np.array([-1e-4, -1e-6])
        assert axis_fold_strength(lam_t, 0.4) == pytest.approx(np.abs(lam_t) ** -0.75 / 0.4, rel=3e-4)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: caustic_area(0.0, 0.4), "must not be zero, got 0"),
        (lambda: caustic_area(0.1, 0.4, [1.0, -1.0]), "`mass` must be positive, got -1"),
        (lambda: caustic_half_sizes(-0.1, -0.4), "must not both be negative here, got a maximum"),
        (lambda: star_caustic(-0.4, 0.4), "`lam_t` must not be lam_r or -lam_r, got -0.4 and 0.4"),
        (lambda: star_caustic(0.4, 0.4), "the caustic is a point"),
        (lambda: axis_fold_strength([-0.1, 0.1], 0.4), "`lam_t` must be negative, got 0.1"),
    ],
)
def test_refused(call, message):
    with pytest.raises(InputError, match=message):
        call()
