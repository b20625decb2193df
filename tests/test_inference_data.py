"""From a light curve to what the fits work on."""

from __future__ import annotations

import re

import numpy as np
import pytest
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.inference.data import FitData, prepare
from crossing.inference.priors import FitPriors
from crossing.photometry import LightCurve

TIME = 61000.0 + np.array([0.0, 1.0, 3.0, 4.5, 9.0])
FLUX = np.array([5.0, -2.0, 8.0, 30.0, 11.0])
ERROR = np.array([3.0, 2.0, 2.5, 4.0, 3.0])


def curve(band: object = "a", **more: object) -> LightCurve:
    return LightCurve.from_arrays(TIME, band, FLUX, ERROR, **more)  # type: ignore[arg-type]


def times(data: FitData) -> NDArray[np.float64]:
    return data.time + data.time_zero


def test_rows_in_order_with_relative_times() -> None:
    data = prepare(curve(), {"a": 0.3})
    np.testing.assert_array_equal(times(data), TIME)
    # A whole number near the middle, so that no digit is lost.
    assert data.time_zero == 61003.0
    np.testing.assert_array_equal(data.flux, FLUX)
    np.testing.assert_array_equal(data.sigma, ERROR)
    assert data.span == (-3.0, 6.0)
    assert (data.n_bands, data.n_levels, data.limit.size, data.reference_time.size) == (1, 1, 0, 0)
    np.testing.assert_array_equal(data.limb_darkening, [0.3])


def test_limits_stand_apart() -> None:
    limit = np.array([True, False, False, False, True])
    data = prepare(curve(is_upper_limit=limit), {})
    np.testing.assert_array_equal(times(data), TIME[~limit])
    np.testing.assert_array_equal(data.limit, FLUX[limit])
    np.testing.assert_array_equal(data.limit_sigma, ERROR[limit])
    np.testing.assert_array_equal(data.all_times + data.time_zero, np.concatenate([TIME[~limit], TIME[limit]]))
    # Of all rows, limits too.
    assert data.span == (TIME[0] - data.time_zero, TIME[-1] - data.time_zero)


def test_bands_are_ordered_as_the_event_file_and_absent_ones_dropped() -> None:
    band = np.array(["z", "a", "z", "a", "z"])
    data = prepare(curve(band), {"unseen": 0.1, "z": 0.2, "a": 0.5})
    assert data.bands == ("z", "a")
    np.testing.assert_array_equal(data.band, [0, 1, 0, 1, 0])
    np.testing.assert_array_equal(data.limb_darkening, [0.2, 0.5])
    assert [data.bands[k] for k in data.level_band] == ["a", "z"]
    np.testing.assert_array_equal(data.level_band[data.level], data.band)


def test_a_band_without_limb_darkening_is_uniform() -> None:
    np.testing.assert_array_equal(prepare(curve(), {}).limb_darkening, [0.0])


def test_excluded_rows_stay_out() -> None:
    whole = curve(np.array(["a", "b", "a", "a", "a"]))
    flags = np.array([1, 1, 0, 0, 0])
    excluded = LightCurve(
        time=whole.time,
        band=whole.band,
        flux=np.where(flags, np.nan, whole.flux),
        flux_err=whole.flux_err,
        is_upper_limit=whole.is_upper_limit,
        flags=flags,
        level=whole.level,
        levels=whole.levels,
    )
    data = prepare(excluded, {})
    np.testing.assert_array_equal(times(data), TIME[2:])
    assert data.bands == ("a",)
    assert data.level_name == ("a (absolute)",)
    assert np.all(np.isfinite(data.level_width))


# Levels


@pytest.mark.parametrize(("kind", "nonnegative"), [("flux", True), ("difference", False)])
def test_levels_without_a_reference_are_flat_over_the_data(kind: str, nonnegative: bool) -> None:
    data = prepare(curve(kind=kind), {})
    # Ten times range, largest size and median error together: 32 + 30 + 3.
    assert data.level_width == pytest.approx([650.0])
    assert data.level_nonnegative.tolist() == [nonnegative]


def test_the_noise_of_the_reference_is_shared() -> None:
    data = prepare(curve(kind="difference", reference_epochs=(61020.0, 61021.0, 61022.0)), {})
    # 1/sqrt(k + 1) of the smallest error: with k images like this one in the mean, s^2 (1 + 1/k) is the error squared.
    assert data.level_width == pytest.approx([2.0 / np.sqrt(4.0)])
    np.testing.assert_allclose(data.sigma, np.sqrt(ERROR**2 - 1.0), rtol=1e-14)
    np.testing.assert_array_equal(data.reference_time + data.time_zero, [61020.0, 61021.0, 61022.0])
    # Outside of the window in which a caustic is looked for.
    assert data.span == (TIME[0] - data.time_zero, TIME[-1] - data.time_zero)


def test_the_noise_of_the_reference_can_be_given() -> None:
    data = prepare(curve(kind="difference", reference_epochs=(61020.0,), reference_err=1.5), {})
    assert data.level_width == pytest.approx([1.5])
    np.testing.assert_allclose(data.sigma, np.sqrt(ERROR**2 - 1.5**2), rtol=1e-14)


def test_the_shared_noise_is_that_of_each_band() -> None:
    band = np.array(["a", "b", "a", "b", "a"])
    data = prepare(curve(band, kind="difference", reference_epochs=(61020.0,)), {})
    assert data.level_width == pytest.approx([2.5 / np.sqrt(2.0), 2.0 / np.sqrt(2.0)])
    assert data.reference_level.tolist() == [0, 1]


@pytest.mark.parametrize("reference_err", [2.0, 50.0])
def test_shared_noise_above_the_errors_is_refused(reference_err: float) -> None:
    told = f"reference_err must be smaller than every flux_err of band a, which contains it, got {reference_err:g} nJy"
    with pytest.raises(InputError, match=told):
        prepare(curve(kind="difference", reference_epochs=(61020.0,), reference_err=reference_err), {})


def test_split_takes_the_reference_off() -> None:
    limit = np.array([False, False, False, True, False])
    band = np.array(["a", "b", "a", "b", "a"])
    data = prepare(curve(band, kind="difference", reference_epochs=(61020.0, 61021.0), is_upper_limit=limit), {})
    shape = np.arange(2.0 * data.all_times.size).reshape(2, -1) ** 2
    detected, limited = data.split(shape)
    reference = {0: shape[:, 5:7].mean(axis=1), 1: shape[:, 7:9].mean(axis=1)}
    for k, level in enumerate(data.level):
        np.testing.assert_allclose(detected[:, k], shape[:, k] - reference[int(level)], rtol=1e-14)
    np.testing.assert_allclose(limited[:, 0], shape[:, 4] - reference[1], rtol=1e-14)


def test_split_of_other_kinds_changes_nothing() -> None:
    data = prepare(curve(), {})
    shape = np.random.default_rng(0).normal(size=(3, 5))
    detected, limited = data.split(shape)
    np.testing.assert_array_equal(detected, shape)
    assert limited.shape == (3, 0)


# Scatter


def test_scatter_is_added_in_quadrature_by_band() -> None:
    band = np.array(["a", "b", "a", "b", "a"])
    limit = np.array([True, False, False, False, False])
    data = prepare(curve(band, is_upper_limit=limit), {})
    wide = data.with_scatter(2.0)
    # Medians of the detections: 2.75 in band a, 3 in band b.
    extra = np.array([2.75, 3.0])
    np.testing.assert_allclose(wide.sigma, np.hypot(data.sigma, 2.0 * extra[data.band]), rtol=1e-14)
    np.testing.assert_allclose(wide.limit_sigma, np.hypot(3.0, 5.5), rtol=1e-14)
    assert wide.scatter == 2.0
    assert data.with_scatter(0.0) is data


def test_scatter_where_a_band_has_limits_only() -> None:
    limit = np.array([True, False, True, False, True])
    data = prepare(curve(np.where(limit, "b", "a"), is_upper_limit=limit), {})
    np.testing.assert_array_equal(data.with_scatter(1.0).limit_sigma, data.limit_sigma)


# Refusals


def test_no_detection_is_refused() -> None:
    with pytest.raises(InputError, match="the light curve has no detection; give at least one measured flux"):
        prepare(curve(is_upper_limit=True), {})


@pytest.mark.parametrize(("flux", "error"), [(np.nan, 1.0), (np.inf, 1.0), (5.0, 0.0), (5.0, -2.0), (5.0, np.nan)])
@pytest.mark.parametrize("limit", [False, True])
def test_numbers_that_no_likelihood_can_take_are_refused(flux: float, error: float, limit: bool) -> None:
    rows = LightCurve.from_arrays(
        [61000.0, 61001.5, 61003.0], "a", [1.0, flux, 3.0], [1.0, error, 1.0], is_upper_limit=[False, limit, False]
    )
    told = f"flux must be finite and flux_err a positive number, got {flux:g} and {error:g} nJy at MJD 61001.50000"
    with pytest.raises(InputError, match=re.escape(told)):
        prepare(rows, {})
    prepare(rows.select(np.array([True, False, True])), {})


def test_an_empty_light_curve_is_refused() -> None:
    empty = LightCurve.from_arrays([], "a", [], [])
    with pytest.raises(InputError, match="no detection"):
        prepare(empty, {})


# Priors that follow the data


def test_amplitude_prior_spans_from_the_smallest_error_to_the_largest_range() -> None:
    # 0.01 of 2 nJy and 100 times range and largest size, 32 + 30 nJy.
    assert FitPriors().amplitude_range(prepare(curve(), {})) == pytest.approx((0.02, 6200.0))


def test_priors_in_words_have_the_numbers_of_the_data() -> None:
    told = FitPriors().to_dict(prepare(curve(), {}))
    assert told["caustic_time_mjd"] == "uniform 60995.000 to 61014.000"
    assert told["amplitude_njy"] == "log-uniform 0.02 to 6200"
    assert told["radius_time_days"] == "log-uniform 0.004 to 80"
    assert told["pair_separation_days"] == "log-uniform 0.05 to 19"


@pytest.mark.parametrize(
    "name", ["radius_time", "amplitude", "strength_ratio", "separation", "bump_time", "temperature"]
)
@pytest.mark.parametrize("ends", [(0.0, 1.0), (2.0, 1.0), (1.0, 1.0), (1.0, np.inf), (np.nan, 1.0)])
def test_ranges_must_be_ranges(name: str, ends: tuple[float, float]) -> None:
    with pytest.raises(InputError, match=f"`{name}` must be a range of positive numbers, low before high, got"):
        FitPriors(**{name: ends})  # type: ignore[arg-type]


@pytest.mark.parametrize("name", ["host_dust", "model_error", "delay"])
@pytest.mark.parametrize("value", [0.0, -1.0, np.inf, np.nan])
def test_widths_must_be_positive(name: str, value: float) -> None:
    with pytest.raises(InputError, match=f"`{name}` must be a positive number, got"):
        FitPriors(**{name: value})
