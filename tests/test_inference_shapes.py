"""Light-curve shapes in their limits, and what they say of their own peaks."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from crossing.inference.colours import Spectrum
from crossing.inference.data import FitData, prepare
from crossing.inference.priors import FitPriors, Range
from crossing.inference.shapes import BinaryShape, BumpShape, FoldShape, PairShape, Shape
from crossing.optics.fold import fold_profile, profile_peak
from crossing.optics.point_lens import point_magnification
from crossing.photometry import LightCurve

Array = NDArray[np.float64]

LIMB = 0.4
# Error that the fit's table of fold profiles may have.
TABLE = 1e-7


def made(time: Array, limb: dict[str, float] | None = None) -> FitData:
    band = np.where(np.arange(time.size) % 2 == 0, "a", "b")
    one = np.ones(time.size)
    return prepare(LightCurve.from_arrays(61000.0 + time, band, one, one), limb or {"a": LIMB, "b": LIMB})


def ranges(count: int) -> tuple[Range, ...]:
    return tuple(Range(name=f"p{k}", low=-10.0, high=10.0) for k in range(count))


def spectrum(slope: float = 1.0) -> Spectrum:
    """Invented: the flux of band a is T^2, that of band b is T^(2 - slope)."""
    ln_temperature = np.linspace(np.log(2500.0), np.log(50_000.0), 200)
    ln_flux = ln_temperature[:, None] * np.array([2.0, 2.0 - slope])
    return Spectrum(ln_temperature=ln_temperature, ln_flux=ln_flux)


@pytest.fixture
def data() -> FitData:
    return made(np.linspace(0.0, 40.0, 42))


def every_shape(data: FitData) -> list[tuple[Shape, Array]]:
    """Each shape with parameters (1, n) whose peak is that of one isolated crossing."""
    return [
        (FoldShape(data, ranges(2)), np.array([[0.3, 0.2]])),
        (PairShape(data, ranges(4)), np.array([[0.3, -0.9, 6.0, 0.4]])),
        (PairShape(data, ranges(4)), np.array([[0.3, -0.9, 6.0, -0.4]])),
        (BumpShape(data, ranges(2)), np.array([[0.3, 0.2]])),
        (BinaryShape(data, ranges(6), spectrum()), np.array([[0.3, 0.2, 3.0, -9.0, 9.0, 9.0]])),
    ]


def test_fold_is_the_profile(data: FitData) -> None:
    shape = FoldShape(data, ranges(2))
    for label, sign in enumerate((1.0, -1.0)):
        found = shape.evaluate(np.array([[1.7, 0.3], [-4.0, -1.2]]), label)
        for row, (time, ln_duration) in zip(found, [(1.7, 0.3), (-4.0, -1.2)], strict=True):
            expected = fold_profile(sign * (data.time - time) / np.exp(ln_duration), LIMB)
            np.testing.assert_allclose(row, expected, rtol=TABLE, atol=1e-15)
    assert shape.labels == ("entering", "leaving")


def test_bands_keep_their_own_limb_darkening() -> None:
    data = made(np.linspace(0.0, 40.0, 42), {"a": 0.0, "b": 0.8})
    found = FoldShape(data, ranges(2)).evaluate(np.array([[1.7, 1.3]]), 0)[0]
    x = (data.time - 1.7) / np.exp(1.3)
    for band, limb in enumerate((0.0, 0.8)):
        mine = data.band == band
        np.testing.assert_allclose(found[mine], fold_profile(x[mine], limb), rtol=TABLE, atol=1e-15)


def test_leaving_is_entering_backwards(data: FitData) -> None:
    shape, offset = FoldShape(data, ranges(2)), np.linspace(-9.0, 9.0, 50)
    theta = np.array([[2.0, 0.5]])
    entering = shape.curve(theta, 0, 2.0 + offset, 0)
    np.testing.assert_allclose(entering, shape.curve(theta, 1, 2.0 - offset, 0), rtol=1e-12)


def test_curve_and_evaluate_agree(data: FitData) -> None:
    for shape, theta in every_shape(data):
        for label in range(len(shape.labels)):
            whole = shape.evaluate(theta, label)
            assert whole.shape == (1, data.all_times.size)
            for band in (0, 1):
                mine = data.all_bands == band
                np.testing.assert_array_equal(shape.curve(theta, label, data.all_times[mine], band), whole[:, mine])


def test_shapes_are_evaluated_at_limits_and_reference_epochs_too() -> None:
    time = np.linspace(0.0, 20.0, 9)
    limit = np.arange(9) < 3
    curve = LightCurve.from_arrays(
        61000.0 + time,
        "a",
        np.ones(9),
        np.ones(9),
        is_upper_limit=limit,
        kind="difference",
        reference_epochs=(60990.0,),
    )
    data = prepare(curve, {})
    found = FoldShape(data, ranges(2)).evaluate(np.array([[-3.0, 0.0]]), 1)[0]
    at = np.concatenate([time[~limit], time[:3], [-10.0]]) + 61000.0 - data.time_zero
    np.testing.assert_allclose(found, fold_profile(-(at + 3.0)), rtol=TABLE, atol=1e-15)


# Limits


@pytest.mark.parametrize("ln_ratio", [-0.7, 0.0, 0.7])
def test_a_wide_pair_is_two_folds(data: FitData, ln_ratio: float) -> None:
    pair, fold = PairShape(data, ranges(4)), FoldShape(data, ranges(2))
    radius_time, separation = 0.5, 2e4
    theta = np.array([[-2.0, np.log(radius_time), np.log(separation), ln_ratio]])
    near = np.linspace(-3.0, 10.0, 400) * radius_time
    # The other fold's share is of the order of near/separation here.
    first = fold.curve(np.array([[-2.0, np.log(radius_time)]]), 0, -2.0 + near, 0)
    np.testing.assert_allclose(pair.curve(theta, 0, -2.0 + near, 0), first, atol=1e-3)
    at_second = separation - 2.0
    second = np.exp(ln_ratio) * fold.curve(np.array([[at_second, np.log(radius_time)]]), 1, at_second - near, 0)
    np.testing.assert_allclose(pair.curve(theta, 0, at_second - near, 0), second, atol=1e-3)
    assert pair.second(theta) == pytest.approx(separation, rel=1e-12)


def test_a_pair_adds_nothing_outside(data: FitData) -> None:
    theta = np.array([[0.0, np.log(0.5), np.log(8.0), 0.3]])
    outside = np.array([-0.51, -3.0, 8.51, 30.0])
    assert not PairShape(data, ranges(4)).curve(theta, 0, outside, 0).any()


def test_an_equal_pair_is_symmetric(data: FitData) -> None:
    theta = np.array([[0.0, np.log(0.5), np.log(8.0), 0.0]])
    time = np.linspace(-1.0, 9.0, 101)
    found = PairShape(data, ranges(4)).curve(theta, 0, time, 0)[0]
    np.testing.assert_allclose(found, found[::-1], rtol=1e-9, atol=1e-12)


def test_a_bump_is_a_point_lens(data: FitData) -> None:
    bump = BumpShape(data, ranges(2))
    time = np.linspace(-40.0, 40.0, 301)
    for label, impact in enumerate(bump.impacts):
        found = bump.curve(np.array([[1.0, np.log(3.0)]]), label, time, 0)[0]
        u = np.hypot(impact, (time - 1.0) / 3.0)
        expected = (point_magnification(u) - 1) / (point_magnification(impact) - 1)
        # Far out the magnification less one has lost digits to the one.
        np.testing.assert_allclose(found, expected, rtol=1e-9, atol=1e-13)
    assert bump.labels == ("impact 0.05", "impact 0.15", "impact 0.3", "impact 0.6", "impact 1")
    assert bump.second(np.zeros((1, 2))) is None


def test_a_binary_with_a_tiny_companion_is_one_star(data: FitData) -> None:
    binary, fold = BinaryShape(data, ranges(6), spectrum()), FoldShape(data, ranges(2))
    hot = np.log(20_000.0)
    theta = np.array([[1.0, 0.4, -5.0, np.log(1e-5), hot, hot]])
    for label in (0, 1):
        alone = fold.evaluate(theta[:, :2], label)
        found = binary.evaluate(theta, label)
        # The companion: ratio^1.5 of the amplitude.
        np.testing.assert_allclose(found[:, data.band == 0], alone[:, data.band == 0], atol=1e-6)
        # Band b in units of band a: T^(2-1)/T^2.
        np.testing.assert_allclose(found[:, data.band == 1] * 20_000.0, alone[:, data.band == 1], atol=1e-5)


def test_twins_at_one_place_are_twice_one_star(data: FitData) -> None:
    binary, fold = BinaryShape(data, ranges(6), spectrum(slope=0.0)), FoldShape(data, ranges(2))
    theta = np.array([[1.0, 0.4, 0.0, 0.0, 9.0, 9.0]])
    np.testing.assert_allclose(binary.evaluate(theta, 0), 2 * fold.evaluate(theta[:, :2], 0), rtol=1e-12)


def test_the_companion_is_late_small_and_of_its_own_colour(data: FitData) -> None:
    binary, fold = BinaryShape(data, ranges(6), spectrum()), FoldShape(data, ranges(2))
    cool, warm = np.log(5000.0), np.log(8000.0)
    theta = np.array([[1.0, 0.4, 3.0, np.log(0.5), warm, cool]])
    primary = fold.evaluate(theta[:, :2], 0)
    secondary = fold.evaluate(np.array([[4.0, 0.4 + np.log(0.5)]]), 0)
    share = 0.5**1.5 * np.where(data.band == 0, (5000.0 / 8000.0) ** 2, 5000.0 / 8000.0)
    expected = np.where(data.band == 0, 1.0, 1.0 / 8000.0) * (primary + share * secondary)
    # Linear interpolation of ln flux, which is linear here.
    np.testing.assert_allclose(binary.evaluate(theta, 0), expected, rtol=1e-6, atol=1e-15)
    assert binary.second(theta) == pytest.approx(3.0)


# Peaks


@pytest.mark.parametrize("number", range(5))
def test_peak_and_height_against_a_dense_curve(data: FitData, number: int) -> None:
    shape, theta = every_shape(data)[number]
    for label in range(len(shape.labels)):
        said = float(shape.peak(theta, np.array([label]))[0])
        around = said + np.linspace(-8.0, 8.0, 160_001)
        found = shape.curve(theta, label, around, 0)[0]
        # The curve is flat at its top, within a step of 1e-4 d; a pair's other fold moves it by 1e-3 of a radius time.
        assert around[np.argmax(found)] == pytest.approx(said, abs=2e-3)
        assert shape.height(theta)[0] == pytest.approx(found.max(), rel=2e-3)
        far = shape.curve(theta, label, np.linspace(-1000.0, 1000.0, 100_001), 0)[0]
        assert far.max() <= found.max() * (1 + 1e-6)


def test_height_of_a_fold_is_the_profiles() -> None:
    data = made(np.linspace(0.0, 40.0, 42), {"a": 0.0, "b": 0.0})
    # check: 1.393119 at 0.652230 (uniform disc)
    shape = FoldShape(data, ranges(2))
    assert shape.height(np.zeros((3, 2))) == pytest.approx([1.393119] * 3, abs=1e-6)
    assert shape.peak(np.array([[2.0, np.log(3.0)]]), np.array([1])) == pytest.approx(2.0 - 3 * 0.652230, abs=3e-6)


def test_height_takes_the_mean_limb_darkening() -> None:
    data = made(np.linspace(0.0, 40.0, 42), {"a": 0.2, "b": 0.6})
    assert FoldShape(data, ranges(2)).height(np.zeros((1, 2)))[0] == pytest.approx(profile_peak(0.4).height, rel=1e-12)


# What the scan is told


def test_features_are_where_the_shape_bends(data: FitData) -> None:
    """Between neighbouring features a fold rises or falls by less than half of its peak."""
    fold = FoldShape(data, ranges(2))
    for label in (0, 1):
        marks = np.sort(fold.features(label))
        value = fold.curve(np.zeros((1, 2)), label, marks, 0)[0]
        assert np.abs(np.diff(value)).max() < 0.5 * profile_peak(LIMB).height
    bump = BumpShape(data, ranges(2))
    for label in range(len(bump.impacts)):
        value = bump.curve(np.zeros((1, 2)), label, np.sort(bump.features(label)), 0)[0]
        assert np.abs(np.diff(value)).max() < 0.55


def test_ranges_come_from_the_priors(data: FitData) -> None:
    priors = FitPriors(time_margin=3.0, radius_time=(0.1, 10.0))
    window = priors.window(data)
    assert (window.low + data.time_zero, window.high + data.time_zero) == pytest.approx((60997.0, 61043.0))
    assert priors.log_range("radius_time").width == pytest.approx(np.log(100.0))
    assert priors.log_range("radius_time").scale(np.array([0.0, 1.0])) == pytest.approx(np.log([0.1, 10.0]))
    widest = replace(priors, time_margin=None)
    # A quarter of the span, at least 5 d.
    assert widest.window(data).width == pytest.approx(60.0)
