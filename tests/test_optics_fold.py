"""Fold profiles against mpmath at 40 digits, published numbers, and particles at a caustic."""

from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from crossing.errors import InputError
from crossing.optics.fold import (
    GAUSSIAN_PEAK,
    fold_magnification,
    fold_profile,
    gaussian_profile,
    limb_mixing,
    point_profile,
    profile_peak,
)

# Relative accuracy asked for; what is reached is 1e-14.
ASKED = 1e-10

POSITIONS = np.concatenate(
    [
        -1 + np.logspace(-12, math.log10(2), 120),
        1 - np.logspace(-16, -1, 40),
        1 + np.logspace(-15.6, 8, 160),
        [-0.875, -0.8750001, 0.0, 1.0, 4.0, 4.0000001, 300.0, 1e-300],
    ]
)


def exact_uniform(x: float) -> mp.mpf:
    """Hypergeometric forms of the strip integral of the disc, valid on either side of the rim."""
    x = mp.mpf(x)
    if x <= 1:
        return mp.sqrt(2) * (1 + x) * mp.hyp2f1(-0.5, 1.5, 2, (1 + x) / 2)
    return mp.hyp2f1(0.25, 0.75, 2, 1 / x**2) / mp.sqrt(x)


def exact_limb(x: float) -> mp.mpf:
    """The textbook's difference of two powers, with digits to spare for its cancellation."""
    x = mp.mpf(x)
    three_halves = mp.mpf(3) / 2
    value = (1 + x) ** three_halves * (3 - 2 * x)
    if x > 1:
        value += (x - 1) ** three_halves * (3 + 2 * x)
    return value * 2 / 5


def strip_integral(x: float, weight: str) -> mp.mpf:
    """Integral over strips of the disc, by quadrature; t = cos(phi) outside, t = -1 + (1+x) sin(phi)**2 inside."""
    x = mp.mpf(x)

    def strip(t: mp.mpf) -> mp.mpf:
        inside = 1 - t**2
        return 2 / mp.pi * mp.sqrt(inside) if weight == "uniform" else 3 * inside / 4

    if x > 1:
        return mp.quad(lambda p: strip(mp.cos(p)) * mp.sin(p) / mp.sqrt(x - mp.cos(p)), [0, 0.1, 1, mp.pi])
    onset = 1 + x
    return mp.quad(lambda p: strip(onset * mp.sin(p) ** 2 - 1) * 2 * mp.sqrt(onset) * mp.sin(p), [0, mp.pi / 2])


@pytest.fixture(autouse=True)
def _digits():
    with mp.workdps(80):
        yield


@pytest.mark.parametrize(("limb_darkening", "exact"), [(0.0, exact_uniform), (1.0, exact_limb)])
def test_profile_has_the_accuracy_asked_for(limb_darkening, exact):
    values = fold_profile(POSITIONS, limb_darkening)
    errors = [abs(mp.mpf(float(v)) / exact(float(x)) - 1) for v, x in zip(values, POSITIONS, strict=True)]
    assert max(errors) < ASKED


@pytest.mark.parametrize("u", [0.3, 0.6])
def test_profile_with_limb_darkening_is_the_mixture(u):
    G = mp.mpf(2) * mp.mpf(u) / (3 - mp.mpf(u))
    values = fold_profile(POSITIONS[::5], u)
    for value, x in zip(values, POSITIONS[::5], strict=True):
        exact = (1 - G) * exact_uniform(float(x)) + G * exact_limb(float(x))
        assert abs(mp.mpf(float(value)) / exact - 1) < ASKED


@pytest.mark.parametrize("x", [-0.99, -0.5, 0.2, 0.9, 1.1, 2.0, 30.0])
@pytest.mark.parametrize(("weight", "u"), [("uniform", 0.0), ("limb", 1.0)])
def test_profile_equals_the_strip_integral(x, weight, u):
    with mp.workdps(30):
        exact = strip_integral(x, weight)
    assert abs(mp.mpf(fold_profile(x, u)) / exact - 1) < 1e-13  # a few roundings


# Schneider & Weiss 1986, A&A 164, 237, formulas from memory; numbers computed with 40 digits.
@pytest.mark.parametrize(
    ("x", "uniform", "limb"),
    [
        (-0.9, 0.138741462673, 0.0607157310752),
        (-0.5, 0.636921769131, 0.565685424949),
        (0, 1.11283578890, 1.2),
        (0.5, 1.37407107543, 1.46969384567),
        (0.75, 1.38368115971, 1.38901943831),
        (1, 1.20042175488, 1.13137084990),
        (2, 0.725420619231, 0.721539030917),
        (3, 0.583622939399, 0.582337649086),
        (10, 0.316525316011, 0.316465681416),
    ],
)
def test_tabulated_profiles(x, uniform, limb):
    assert fold_profile(float(x)) == pytest.approx(uniform, rel=1e-11)  # 12 printed digits
    assert fold_profile(float(x), 1.0) == pytest.approx(limb, rel=1e-11)


def test_two_dimensional_quadrature():
    # Brightness-weighted mean of (x - t)**(-1/2) over the disc in two dimensions, computed for x = 0.3, u = 0.5.
    assert fold_profile(0.3, 0.5) == pytest.approx(1.349837461, rel=1e-9)  # 10 printed digits


def test_integral_of_the_profile():
    total, _ = quad(fold_profile, -1, 5, points=[1.0], epsabs=1e-12)
    assert total == pytest.approx(4.46651037955, rel=1e-11)  # computed with 40 digits


# Peaks computed with 40 digits; u = 0 and u = 1 have closed conditions, K = 2E and x = 1/2.
@pytest.mark.parametrize(
    ("u", "position", "height"),
    [
        (0.0, 0.652229531969941, 1.39311929653948),
        (0.1, 0.637643528639, 1.39657376648),
        (0.2, 0.622647547922, 1.40068868244),
        (0.3, 0.607346755284, 1.40554685041),
        (0.5, 0.576260652261, 1.41786808900),
        (0.6, 0.560679458023, 1.42554661864),
        (0.7, 0.545193739151, 1.43440497929),
        (0.8, 0.529879122513, 1.44459313907),
        (1.0, 0.5, 1.46969384566991),
    ],
)
def test_peaks(u, position, height):
    peak = profile_peak(u)
    assert peak.position == pytest.approx(position, abs=2e-12)  # printed digits
    assert peak.height == pytest.approx(height, rel=1e-11)
    assert fold_profile(peak.position + np.array([-1e-3, 1e-3]), u).max() < peak.height


def test_outside_rim_and_tails():
    assert fold_profile(-1.0) == 0
    assert fold_profile(1.0) == pytest.approx(8 * math.sqrt(2) / (3 * math.pi), rel=1e-15)
    ends = [-math.inf, -1e300, -1.0000001, math.inf, 1e300]
    for u in (0.0, 0.4, 1.0):
        np.testing.assert_allclose(fold_profile(ends, u), [0, 0, 0, 0, 1e-150], rtol=1e-14)
    # Leading terms at the onset, and three terms far inside.
    assert fold_profile(-1 + 2**-40) == pytest.approx(math.sqrt(2) * 2**-40, rel=1e-11)
    assert fold_profile(-1 + 2**-40, 1.0) == pytest.approx(2 * 2**-60, rel=1e-11)
    assert fold_profile(300.0) * math.sqrt(300) == pytest.approx(1 + 3 / 32 / 9e4 + 35 / 1024 / 81e8, rel=1e-15)


def test_rim_keeps_its_logarithmic_slope():
    # J(1 - y) - J(1) = (sqrt(2)/pi) y [ln(1/|y|) + c] on both sides with the same c: difference of decades gives ln 10.
    y = 1e-6
    for sign in (1, -1):
        near, far = (fold_profile(1 - sign * step) - fold_profile(1.0) for step in (y, 10 * y))
        assert sign * (10 * near - far) / (10 * y) == pytest.approx(math.sqrt(2) / math.pi * math.log(10), rel=1e-4)


def test_scalars_arrays_and_nan():
    assert isinstance(fold_profile(0.5), float)
    assert isinstance(fold_magnification(0.5, 1), float)
    assert math.isnan(fold_profile(math.nan))
    assert math.isnan(fold_profile(0.5, math.nan))
    assert fold_profile([[0.1], [0.2]], [0.0, 0.5, 1.0]).shape == (2, 3)
    values = fold_magnification([np.nan, 0.5, 1.0], [[0.1], [0.0]], 2.0, 5.0)
    assert values.shape == (2, 3)
    np.testing.assert_array_equal(np.isnan(values), [[True, False, False]] * 2)
    for position in range(5):
        arguments = [1.0, 0.1, 1.0, 0.0, 0.0]
        arguments[position] = math.nan
        assert math.isnan(fold_magnification(*arguments))


def test_magnification_of_discs_and_points():
    assert fold_magnification(0.3, 0.5, 7.0, 100.0) == pytest.approx(100 + 7 / math.sqrt(0.5) * fold_profile(0.6))
    assert fold_magnification(0.04, 0.0, 3.0, 2.0) == pytest.approx(2 + 3 / 0.2)
    assert fold_magnification(-0.04, 0.0, 3.0, 2.0) == 2
    assert fold_magnification(0.0, 0.0) == math.inf
    assert fold_magnification(0.0, 0.0, 0.0, 3.0) == 3
    # A disc shrinks to a point without a jump, down to subnormal radii.
    for radius in (1e-12, 1e-200, 5e-324):
        assert fold_magnification(0.04, radius, limb_darkening=0.5) == pytest.approx(5, rel=1e-14)


def test_magnification_near_the_onset_does_not_cancel():
    # 1 + d/R would lose seven digits here; (d + R)/R is exact to rounding.
    radius = 0.3
    distance = -radius * (1 - 1e-9)
    onset = (mp.mpf(distance) + mp.mpf(radius)) / mp.mpf(radius)
    exact = mp.sqrt(2) * onset * mp.hyp2f1(-0.5, 1.5, 2, onset / 2) / mp.sqrt(mp.mpf(radius))
    assert abs(mp.mpf(fold_magnification(distance, radius)) / exact - 1) < 1e-14


@settings(derandomize=True, deadline=None, max_examples=200)
@given(st.floats(-3, 1e6), st.floats(1e-6, 1e6), st.floats(0, 1))
def test_magnification_scales_with_length(x, scale, u):
    one = fold_magnification(x, 1.0, limb_darkening=u)
    assert fold_magnification(x * scale, scale, limb_darkening=u) * math.sqrt(scale) == pytest.approx(
        one,
        rel=1e-9,
        abs=1e-14,  # x * scale / scale may round x by one part in 1e16
    )
    assert one >= 0


@pytest.mark.parametrize("radius", [-0.1, math.inf, [1.0, -2.0]])
def test_bad_radius(radius):
    with pytest.raises(InputError, match=r"`radius` must be zero or positive and finite, got (-0\.1|inf|-2); use 0"):
        fold_magnification(1.0, radius)


@pytest.mark.parametrize("u", [-0.01, 1.5, [0.1, -2.0]])
def test_bad_limb_darkening(u):
    for call in (lambda: fold_profile([0.0, 0.1], u), lambda: fold_magnification([1.0, 2.0], 1.0, limb_darkening=u)):
        with pytest.raises(InputError, match=r"`limb_darkening` must be between 0 and 1, got (-0\.01|1\.5|-2); use 0"):
            call()
    with pytest.raises(InputError, match="`limb_darkening` must be between 0 and 1"):
        profile_peak(1.01)


def test_mixing():
    # G = 2u/(3-u): closed form.
    np.testing.assert_allclose(limb_mixing([0, 0.5, 1]), [0, 0.4, 1], rtol=1e-15)


def test_point_profile():
    np.testing.assert_array_equal(point_profile([-1, 0, 0.25, np.inf]), [0, np.inf, 2, 0])
    assert math.isnan(point_profile(math.nan))
    assert point_profile(4.0) == 0.5


def test_gaussian_profile_against_parabolic_cylinders():
    positions = np.concatenate([np.linspace(-30, 30, 121), [0.1, -0.1, 0.0999, 20.001, 1e3, 1e8, 1e-200]])
    with mp.workdps(40):
        for value, x in zip(gaussian_profile(positions), positions, strict=True):
            exact = mp.exp(-(mp.mpf(float(x)) ** 2) / 4) * mp.pcfd(-0.5, -mp.mpf(float(x))) / mp.sqrt(2)
            assert abs(mp.mpf(float(value)) / exact - 1) < ASKED


def test_gaussian_profile_numbers():
    # Computed with 30 digits from D_{-1/2}; the value at 0 is Gamma(1/4) / (2**(3/4) sqrt(2 pi)).
    positions = [-2.0, -1.0, 0.0, 0.5, 1.0, 2.0, 3.0, 5.0]
    values = [
        0.0632165164329,
        0.359643705398,
        0.860039987325,
        1.00222738687,
        1.00798907841,
        0.796023378818,
        0.611962541501,
        0.454643767962,
    ]
    np.testing.assert_allclose(gaussian_profile(positions), values, rtol=1e-11)
    assert gaussian_profile(GAUSSIAN_PEAK.position) == pytest.approx(GAUSSIAN_PEAK.height, rel=1e-14)
    around = gaussian_profile(GAUSSIAN_PEAK.position + np.array([-1e-5, 1e-5]))
    assert np.all(around < GAUSSIAN_PEAK.height)
    np.testing.assert_array_equal(gaussian_profile([-50, -np.inf, np.inf, np.nan]), [0, 0, 0, np.nan])


def test_half_light_radii():
    # Peaks in units of the half-light radius, R/sqrt(2) and sigma sqrt(2 ln 2): closed forms of the two peaks.
    assert profile_peak(0.0).height / 2**0.25 == pytest.approx(1.17146902248, rel=1e-11)
    assert GAUSSIAN_PEAK.height * (2 * math.log(2)) ** 0.25 == pytest.approx(1.10802025695, rel=1e-11)


class TestParticlesAtACaustic:
    """A cold sheet x = q - t sin(q) folds at t > 1 (Zel'dovich 1970, A&A 5, 84); a velocity dispersion smooths it."""

    t = 1.5
    sigma = 1e-4
    q_fold = -math.acos(1 / 1.5)

    @property
    def x_fold(self) -> float:
        return self.q_fold - self.t * math.sin(self.q_fold)

    @property
    def strength(self) -> float:
        return math.sqrt(2 / math.sqrt(self.t**2 - 1))

    def test_fold_of_the_cold_sheet(self):
        # Closed forms: caustic where 1 = t cos(q), x'' = sqrt(t**2 - 1).
        assert self.q_fold == pytest.approx(-0.8410686706, abs=1e-10)
        assert self.x_fold == pytest.approx(0.2769653182, abs=1e-10)
        assert self.strength == pytest.approx(1.337480610, rel=1e-9)
        # Two streams at the distance d inside, found by Newton's method: 1.338179 at d = 1e-3.
        total = 0.0
        for sign in (-1, 1):
            q = self.q_fold + sign * math.sqrt(2e-3 / math.sqrt(self.t**2 - 1))
            for _ in range(50):
                q -= (q - self.t * math.sin(q) - self.x_fold + 1e-3) / (1 - self.t * math.cos(q))
            total += 1 / abs(1 - self.t * math.cos(q))
        assert total * math.sqrt(1e-3) == pytest.approx(1.338179, rel=1e-6)

    def density(self, x: np.ndarray) -> np.ndarray:
        """Particles per length of the two merging streams: an even sheet, each particle smeared by its velocity."""
        q = np.linspace(self.q_fold - 0.3, self.q_fold + 0.3, 400_001)
        smear = self.sigma * self.t
        offset = (x[:, None] - (q - self.t * np.sin(q))) / smear
        inside = np.exp(-(offset**2) / 2).sum(axis=1) * (q[1] - q[0])
        return inside / (math.sqrt(2 * math.pi) * smear)

    def test_density_with_dispersion(self):
        smear = self.sigma * self.t
        depth = np.array([-2.0, -1.0, 0.0, GAUSSIAN_PEAK.position, 2.0, 10.0])
        expected = self.strength / math.sqrt(smear) * gaussian_profile(depth)
        # The next order of the fold adds 0.52 d (1.338179 / 1.337481 above), 8e-4 at the deepest point here.
        np.testing.assert_allclose(self.density(self.x_fold - depth * smear), expected, rtol=1e-3)

    def test_peak_of_the_density(self):
        smear = self.sigma * self.t
        assert GAUSSIAN_PEAK.height * self.strength / math.sqrt(smear) == pytest.approx(111.513052, rel=1e-8)
        peak = self.density(np.array([self.x_fold - GAUSSIAN_PEAK.position * smear]))[0]
        assert peak == pytest.approx(111.519730, rel=1e-7)  # computed by quadrature, 9 printed digits
