"""Effective velocities, and the speed along the normal given a crossing."""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import SkyCoord
from scipy import stats

from crossing.errors import InputError
from crossing.event import MotionRecord, Value
from crossing.optics.motion import (
    DIPOLE_SPEED,
    ISOTROPIC,
    caustic_stretch,
    effective_velocity,
    mean_normal_component,
    observer_velocity,
    sample_effective_velocity,
    sample_normal_speed,
)
from crossing.optics.scales import LensScales, ScaleDraws, sample_scales

SIZE = 40_000
# Where the observer moves straight towards or away, so that only the peculiar velocities are left.
DIPOLE = (167.941903, -6.944260)
# Five standard errors of a mean over SIZE draws that scatter by as much as themselves.
SAMPLING = 5 / math.sqrt(SIZE)


# Kayser, Refsdal & Stabell 1986 (formula from memory, derived again in comoving coordinates), Planck18 distances.
@pytest.mark.parametrize(
    ("redshifts", "factors", "velocity", "speed"),
    [
        ((0.5, 1.5), (0.4, -0.92009035, 0.52009035), (592.05420996, -328.03613997), 676.8573680),
        ((0.4, 1.0), (0.5, -1.0610504, 0.56105039), (686.63023285, -374.42015523), 782.0815363),
    ],
)
def test_published_form(redshifts, factors, velocity, speed):
    np.testing.assert_allclose(LensScales(*redshifts).velocity_coefficients, factors, rtol=1e-7)  # printed digits
    z_lens, z_source = redshifts
    value = effective_velocity(
        (300.0, 0.0), (-400, 300), (200, -100) * u.km / u.s, lens_redshift=z_lens, source_redshift=z_source
    )
    assert value.unit == u.km / u.s
    np.testing.assert_allclose(value.value, velocity, rtol=1e-9)
    assert np.hypot(*value.value) == pytest.approx(speed, rel=1e-9)


def test_comoving_derivation():
    # In a flat universe the line of sight meets the source plane at v_s - [v_o + (v_l - v_o) chi_s / chi_l].
    scales = LensScales(0.5, 1.5)
    ratio = scales.D_s * 2.5 / (scales.D_l * 1.5)
    source, lens, observer = 300.0, -400.0, 200.0
    expected = (source - (observer + (lens - observer) * ratio)) / 2.5
    value = effective_velocity(*([v, 0] for v in (source, lens, observer)), lens_redshift=0.5, source_redshift=1.5)
    assert value[0].value == pytest.approx(expected, rel=1e-12)


def test_velocities_broadcast():
    many = np.ones((7, 2)) * u.m / u.s
    value = effective_velocity(many, np.zeros(2), np.zeros((3, 1, 2)), lens_redshift=0.5, source_redshift=1.5)
    assert value.shape == (3, 7, 2)
    assert value[0, 0, 0].value == pytest.approx(0.4e-3)
    with pytest.raises(InputError, match=r"`lens` must have two components in its last axis, got shape \(3,\)"):
        effective_velocity([1, 2], [1, 2, 3], [1, 2], lens_redshift=0.5, source_redshift=1.5)


# Dipole of Planck 2018; the components agree with 369.82 sin(separation).
@pytest.mark.parametrize(
    ("position", "east", "north"),
    [
        ((177.39875, 22.39853), -60.317428, -179.323138),
        ((64.0381, -24.0675), 356.351048, -76.799945),
        ((39.9714, -1.5822), 289.400651, -50.931927),
    ],
)
def test_observer_velocity(position, east, north):
    velocity = observer_velocity(*position)
    np.testing.assert_allclose(velocity, (east, north), rtol=1e-6)  # the dipole's position is rounded to 1e-6 deg
    dipole = SkyCoord(l=264.021 * u.deg, b=48.253 * u.deg, frame="galactic").icrs
    separation = dipole.separation(SkyCoord(*position, unit="deg")).rad
    assert math.hypot(*velocity) == pytest.approx(DIPOLE_SPEED * math.sin(separation), rel=1e-7)


def test_speed_alone_has_any_direction():
    motion = MotionRecord(speed=Value.exact(700.0))
    velocity = sample_effective_velocity(motion, None, np.random.default_rng(1), SIZE)
    np.testing.assert_allclose(np.hypot(*velocity.T), 700)
    assert np.abs(velocity.mean(axis=0)).max() < 700 * SAMPLING


def test_angle_turns_the_velocity():
    motion = MotionRecord(speed=Value.exact(700.0), angle=Value.exact(30.0))
    velocity = sample_effective_velocity(motion, None, np.random.default_rng(1), 3)
    np.testing.assert_allclose(velocity, [[700 * math.sqrt(3) / 2, 350]] * 3, rtol=1e-12)


def test_peculiar_velocities_and_observer():
    scales = LensScales(0.5, 1.5)
    position = (64.0381, -24.0675)
    motion = MotionRecord(lens_spread=Value.exact(250.0), source_spread=Value.exact(300.0), position=position)
    velocity = sample_effective_velocity(motion, scales, np.random.default_rng(1), SIZE)
    source, lens, observer = scales.velocity_coefficients
    spread = math.hypot(source * 300, lens * 250)
    np.testing.assert_allclose(velocity.std(axis=0), spread, rtol=SAMPLING)
    expected = observer * np.array(observer_velocity(*position))
    np.testing.assert_allclose(velocity.mean(axis=0), expected, atol=spread * SAMPLING)


def test_draws_of_distances():
    draws = sample_scales(Value.exact(0.5), Value.normal(1.5, 0.05), np.random.default_rng(1), 100)
    motion = MotionRecord(lens_spread=Value.exact(250.0), source_spread=Value.uniform(200, 300), position=DIPOLE)
    assert isinstance(draws, ScaleDraws)
    assert sample_effective_velocity(motion, draws, np.random.default_rng(1), 100).shape == (100, 2)
    assert sample_normal_speed(motion, draws, np.random.default_rng(1), 500).shape == (500,)


class TestNormalSpeed:
    def test_one_speed_any_angle(self):
        # sin(angle) is uniform: p(v) = v / (V sqrt(V**2 - v**2)), with the mean pi/4 V.
        motion = MotionRecord(speed=Value.exact(1000.0))
        speed = sample_normal_speed(motion, None, np.random.default_rng(1), SIZE)
        result = stats.kstest(speed / 1000, lambda v: 1 - np.sqrt(1 - np.clip(v, 0, 1) ** 2))
        assert result.pvalue > 1e-3
        assert speed.mean() == pytest.approx(1000 * math.pi / 4, rel=SAMPLING)

    def test_gaussian_velocities_give_a_rayleigh_law(self):
        # v p(v) of a half-normal v_perp is Rayleigh's law; the median grows by 1.7 against the unweighted one.
        scales = LensScales(0.5, 1.5)
        motion = MotionRecord(lens_spread=Value.exact(250.0), source_spread=Value.exact(0.0), position=DIPOLE)
        speed = sample_normal_speed(motion, scales, np.random.default_rng(2), SIZE)
        sigma = 250 * abs(scales.velocity_coefficients[1])
        # The pool of 4e4 speeds scatters itself, hence twice the sampling error.
        assert np.mean(speed) == pytest.approx(sigma * math.sqrt(math.pi / 2), rel=2 * SAMPLING)
        median = sigma * math.sqrt(2 * math.log(2))
        assert np.median(speed) == pytest.approx(median, rel=2 * SAMPLING)
        assert median / stats.halfnorm.median(scale=sigma) == pytest.approx(1.746, abs=1e-3)

    def test_speeds_count_in_proportion(self):
        # Uniform V on 0..1000: the mean of the size-biased law is 2/3 of the top; times pi/4 for the angle.
        motion = MotionRecord(speed=Value.uniform(0.0, 1000.0))
        speed = sample_normal_speed(motion, None, np.random.default_rng(3), SIZE)
        assert speed.mean() == pytest.approx(1000 * 2 / 3 * math.pi / 4, rel=2 * SAMPLING)

    @pytest.mark.parametrize("angle", [0.0, 35.0, 90.0, -145.0])
    @pytest.mark.parametrize("mean_normal", [ISOTROPIC, 0.736, 0.94])
    def test_known_angle_against_pieces_of_an_ellipse(self, angle, mean_normal):
        # Slow twin: a polygon for the ellipse, each side weighted by its length times |cos| to the motion.
        stretch = caustic_stretch(mean_normal)
        theta = np.linspace(0, 2 * math.pi, 20_001)
        du, dv = np.diff(np.cos(theta)), np.diff(stretch * np.sin(theta))
        length = np.hypot(du, dv)
        assert np.average(np.abs(dv) / length, weights=length) == pytest.approx(mean_normal, abs=1e-6)
        along = (math.cos(math.radians(angle)), math.sin(math.radians(angle)))
        cosine = np.abs(dv * along[0] - du * along[1]) / length
        expected = np.average(cosine, weights=length * cosine)
        motion = MotionRecord(speed=Value.exact(1000.0), angle=Value.exact(angle))
        speed = sample_normal_speed(motion, None, np.random.default_rng(4), SIZE, mean_normal)
        assert speed.mean() == pytest.approx(1000 * expected, rel=SAMPLING)
        assert np.all((speed > 0) & (speed <= 1000 * (1 + 1e-12)))

    def test_uncertain_angle_prefers_the_normals(self):
        # Along u nearly all of the caustic length is met, along v a small part: angles near 0 count more.
        at, wide = (
            sample_normal_speed(
                MotionRecord(speed=Value.exact(1.0), angle=angle), None, np.random.default_rng(5), SIZE, 0.94
            ).mean()
            for angle in (Value.exact(0.0), Value.uniform(-90.0, 90.0))
        )
        # Any direction at all: the normals do not matter, and the mean is pi/4.
        assert wide == pytest.approx(math.pi / 4, rel=2 * SAMPLING)
        assert at > 0.95

    def test_same_seed_same_draws(self):
        motion = MotionRecord(speed=Value.loguniform(100, 2000), angle=Value.normal(20, 5))
        one, two = (sample_normal_speed(motion, None, np.random.default_rng(7), 50, 0.9) for _ in range(2))
        np.testing.assert_array_equal(one, two)


def test_mean_normal_component():
    assert mean_normal_component(0.8, 0.8) == pytest.approx(2 / math.pi)
    assert mean_normal_component(0.3, 0.7) == pytest.approx(0.736)
    assert mean_normal_component(-0.3, 0.7) == mean_normal_component(0.3, 0.7)
    assert mean_normal_component(0.0, 0.4) == mean_normal_component(0.001, 0.4) == pytest.approx(0.936)
    assert mean_normal_component(0.1, 0.0) == pytest.approx(2 / math.pi)


def test_stretched_normals_agree_with_both_measured_axes():
    # Random star fields at lam = (+-0.005, 0.4): L = 15.8, 17.3; crossings along v 3.4 and 3.3 per theta_E (+-5%).
    for along_u, along_v in ((14.7 / 15.8, 3.4 / 15.8), (16.3 / 17.3, 3.3 / 17.3)):
        assert along_u / caustic_stretch(along_u) == pytest.approx(along_v, rel=0.2)  # errors of the measurement
    # kappa = 0.5, gamma = kappa_star = 0.2: L = 1.114, along u 0.820, along v 0.600 (+-3%).
    assert 0.736 / caustic_stretch(0.736) == pytest.approx(0.600 / 1.114, rel=0.1)


@pytest.mark.parametrize("mean_normal", [0.5, 1.0])
def test_bad_mean_normal(mean_normal):
    with pytest.raises(InputError, match=r"`mean_normal` must be between 2/pi and 0\.9999, got"):
        caustic_stretch(mean_normal)


def test_unknown_motion():
    rng = np.random.default_rng(1)
    with pytest.raises(InputError, match="motion: must give the speed, or lens_spread, source_spread and position"):
        sample_normal_speed(MotionRecord(lens_spread=Value.exact(1.0)), LensScales(0.5, 1.5), rng, 3)
    spreads = MotionRecord(lens_spread=Value.exact(1.0), source_spread=Value.exact(1.0), position=DIPOLE)
    with pytest.raises(InputError, match="motion: needs the redshifts of lens and source, or give the speed itself"):
        sample_normal_speed(spreads, None, rng, 3)
    with pytest.raises(InputError, match="motion: must not be zero for a crossing to happen; give a positive speed"):
        sample_normal_speed(MotionRecord(speed=Value.exact(0.0)), None, rng, 3)
