"""Magnification maps: what is read off them, on maps whose answers have closed forms; and their files."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.optics.fold import fold_profile
from crossing.shooting.maps.convolution import disc_weights
from crossing.shooting.maps.magnification_map import FLAGS, MagnificationMap
from crossing.shooting.maps.map_figure import nice_length
from crossing.shooting.maps.sampling import bilinear
from crossing.shooting.maps.statistics import block_error

STRENGTH = 3.0
FIELD = {"kappa": 0.7, "gamma": 0.25, "kappa_star": 0.05, "stars": 421, "seed": {"entropy": "7", "spawn_key": []}}


def make(values: Any, width: float = 6.0, **changes: Any) -> MagnificationMap:
    rows, columns = np.shape(values)
    given_values: dict[str, Any] = {
        "values": values,
        "center": (0.0, 0.0),
        "width": width,
        "height": width * rows / columns,
        "method": "area",
        "accuracy": 1e-3,
        "error_estimate": 8e-4,
        "rays": 12345,
    }
    return MagnificationMap(**(given_values | changes))


def fold_map(columns: int = 1200, rows: int = 300, low: float = -1.0, width: float = 6.0) -> MagnificationMap:
    """Straight fold along v at u = 0: mu = K / sqrt(u) inside, nothing outside; exact means over pixels."""
    edges = low + width * np.arange(columns + 1) / columns
    row = np.diff(2 * STRENGTH * np.sqrt(np.maximum(edges, 0.0))) * columns / width
    return make(np.tile(row, (rows, 1)), width, center=(low + width / 2, 0.0))


def full_map(rng: np.random.Generator) -> MagnificationMap:
    values = rng.lognormal(5.0, 1.0, (30, 70))
    return make(
        values,
        width=7.0 / 3.0,
        center=(0.1, -2.0 / 3.0),
        error=values * 1e-3,
        images=2,
        expected_mean=1 / 3,
        description={"field": FIELD, "call": [1, "two", None, 0.1]},
        parsec_per_einstein=0.0166,
        days_per_einstein=11272.3,
    )


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20)


# The map itself


def test_coordinates_are_pixel_centres() -> None:
    found = make(np.ones((2, 4)), width=8.0, center=(1.0, -3.0))
    assert found.u.tolist() == [-2.0, 0.0, 2.0, 4.0]
    assert found.v.tolist() == [-4.0, -2.0]
    assert (found.pixels, found.pixel_size, found.height) == ((4, 2), 2.0, 4.0)
    assert found.mean_magnification == 1.0


def test_arrays_are_native_contiguous_floats_and_taken_over() -> None:
    foreign = np.arange(6.0).reshape(2, 3).astype(">f8").T
    found = make(foreign, width=2.0)
    assert found.values.dtype == np.float64
    assert found.values.dtype.isnative
    assert found.values.flags.c_contiguous
    own = np.ones((2, 3))
    assert make(own).values is own


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"values": np.ones(3)}, r"`values` must be an image \[v, u\], got the shape \(3,\)"),
        ({"values": np.ones((0, 3))}, "`values` must be an image"),
        ({"values": np.array([[1.0, np.nan]])}, "`values` must be finite"),
        ({"error": np.array([[1.0, np.inf]])}, "`error` must be finite"),
        ({"error": np.ones((2, 2))}, r"`error` must have the shape of `values`, got \(2, 2\) for \(1, 2\)"),
        ({"height": 3.0}, "`height` must make square pixels, got 2 x 3 in 2 x 1 pixels; give 1"),
        ({"width": -1.0}, "`width` must be positive and finite, got -1.0"),
        ({"height": np.nan}, "`height` must be positive and finite"),
    ],
)
def test_what_makes_no_map_is_refused(changes: dict[str, Any], says: str) -> None:
    sound: dict[str, Any] = {"values": np.ones((1, 2)), "center": (0.0, 0.0), "width": 2.0, "height": 1.0}
    with pytest.raises(InputError, match=says):
        MagnificationMap(**(sound | {"method": "area", "accuracy": 1e-3, "error_estimate": 0.0} | changes))


def test_flags() -> None:
    sound = make(np.ones((2, 2)))
    assert (sound.flags, sound.status) == ((), "ok")
    coarse = replace(sound, error_estimate=2.1e-3)
    assert (coarse.flags, coarse.status) == (("accuracy_not_reached",), "accuracy_not_reached")
    assert replace(coarse, method="rays").flags == ()  # which aims at a number of rays
    assert replace(sound, error_estimate=float("nan")).flags == ()  # not estimated
    varied = replace(sound, description={"event": {"macro_change": 0.11}})
    assert varied.flags == ("macro_varies",)
    assert varied.to_dict()["flag_meanings"] == {"macro_varies": FLAGS["macro_varies"]}
    assert replace(sound, description={"event": {"macro_change": None}}).flags == ()


def test_dictionary_table_and_html(rng: np.random.Generator) -> None:
    found = full_map(rng)
    told = found.to_dict()
    assert json.loads(json.dumps(told)) == told
    assert (told["kappa"], told["stars"], told["images"], told["pixels"]) == (0.7, 421, 2, [70, 30])
    table = found.to_table()
    values = dict(zip(table["quantity"], table["value"], strict=True))
    assert values["mean_magnification"] == found.values.mean()
    assert values["days_per_einstein"] == 11272.3
    page = found._repr_html_()
    assert page.startswith("<div><p>magnification map, 70 x 30 pixels, area, a merging pair</p><table>")
    assert page.count("<tr>") == len(table)
    assert "<strong>macro_varies</strong>" in replace(found, description={"event": {"macro_change": 9}})._repr_html_()


# Discs


@pytest.mark.parametrize("limb_darkening", [0.0, 0.6, 1.0])
@pytest.mark.parametrize("radius", [2.0, 2.3, 3.5, 7.77])
def test_weights_of_pixels_against_straight_summation(radius: float, limb_darkening: float) -> None:
    weights = disc_weights(radius, limb_darkening)
    fine, count = 300, len(weights)
    grid = (np.arange(count * fine) + 0.5) / fine - count / 2
    square = (grid[:, None] ** 2 + grid[None, :] ** 2) / radius**2
    light = np.where(square < 1.0, 1.0 - limb_darkening * (1.0 - np.sqrt(np.maximum(1.0 - square, 0.0))), 0.0)
    summed = light.reshape(count, fine, count, fine).mean(axis=(1, 3))
    # A rim through a pixel of 300 x 300 points is off by about 300**-1.5 of it.
    assert np.abs(weights - summed / summed.sum()).max() < 2e-4 / radius**2
    assert weights[0].max() > 0.0  # no empty border


@settings(derandomize=True, deadline=None, max_examples=60)
@given(radius=st.floats(0.05, 200.0), limb_darkening=st.floats(0.0, 1.0))
def test_weights_are_shares(radius: float, limb_darkening: float) -> None:
    weights = disc_weights(radius, limb_darkening)
    assert weights.sum() == pytest.approx(1.0, abs=1e-12)
    assert weights.min() >= 0.0
    # Corner integrals are differences of numbers of order one: 1e-15 each, against pixels of 1/radius**2.
    for turned in (weights.T, weights[::-1], weights[:, ::-1]):
        np.testing.assert_allclose(turned, weights, rtol=0, atol=1e-14)


@pytest.mark.parametrize(
    ("limb_darkening", "height", "place"),
    # Peaks of the fold profile: 20-digit maximum of the elliptic integrals; (4/5) (3/2)^(3/2) at 1/2 for u = 1.
    [(0.0, 1.39311929653948, 0.652229531969941), (0.5, 1.41786808900, 0.576260652261), (1.0, 1.46969384566991, 0.5)],
)
@pytest.mark.parametrize("radius", [0.1, 0.2, 0.5])
def test_a_disc_on_a_fold_gives_its_profile(radius: float, limb_darkening: float, height: float, place: float) -> None:
    disc = fold_map().convolve(radius, limb_darkening)
    scale, pixels = STRENGTH / np.sqrt(radius), radius / disc.pixel_size
    exact = scale * fold_profile(disc.u / radius, limb_darkening)
    row = disc.values[len(disc.values) // 2]
    np.testing.assert_allclose(disc.values, np.broadcast_to(row, disc.values.shape), rtol=1e-9, atol=1e-12)
    # The pixel blurs the kinks at -1 and 1 by a fraction of itself; and the disc's middle, where the caustic's peak is
    # spread over one pixel, by its power 3/2.
    assert np.abs(row - exact).max() < 0.25 / pixels * exact.max()
    assert row.max() / scale == pytest.approx(height, rel=0.3 / pixels**1.5)
    assert disc.u[row.argmax()] / radius == pytest.approx(place, abs=1.0 / pixels)
    far = disc.u > 4 * radius
    np.testing.assert_allclose(row[far], exact[far], rtol=0.01 / pixels**2)


def test_the_map_of_a_disc_is_trimmed_to_where_all_of_it_is_known() -> None:
    point = fold_map()
    disc = point.convolve(0.1)
    lost = 20  # pixels, a radius on either side: one less than twice 20.5 rounded up
    assert disc.pixels == (1200 - 2 * lost, 300 - 2 * lost)
    assert disc.pixel_size == pytest.approx(point.pixel_size, rel=1e-14)
    np.testing.assert_allclose(disc.u, point.u[lost:-lost], atol=1e-12)
    np.testing.assert_allclose(disc.v, point.v[lost:-lost], atol=1e-12)
    assert (disc.source_radius, disc.limb_darkening, disc.center) == (0.1, 0.0, point.center)
    assert disc.values.min() >= 0.0


def test_errors_of_pixels_are_averaged(rng: np.random.Generator) -> None:
    point = make(np.full((120, 120), 10.0), error=np.full((120, 120), 0.5), error_estimate=0.05)
    disc = point.convolve(10 * point.pixel_size)
    noise = point.convolve(10 * point.pixel_size)
    assert disc.error is not None
    # Independent errors on n pixels of equal weight: 1/sqrt(n), and the rim changes that by little.
    assert disc.error[3, 4] == pytest.approx(0.5 / np.sqrt(np.pi * 100), rel=0.02)
    assert disc.error_estimate == pytest.approx(disc.error[3, 4] / 10.0)
    noisy = replace(point, values=10.0 + 0.5 * rng.standard_normal((120, 120))).convolve(10 * point.pixel_size)
    assert (noisy.values - noise.values).std() == pytest.approx(disc.error[3, 4], rel=0.3)  # some 25 discs side by side
    assert replace(point, error=None).convolve(10 * point.pixel_size).error_estimate == pytest.approx(
        0.05 * disc.error[3, 4] / 0.5
    )


def test_bands_of_rows_do_not_show(monkeypatch: pytest.MonkeyPatch, rng: np.random.Generator) -> None:
    point = make(rng.lognormal(3.0, 1.0, (97, 60)))
    whole = point.convolve(4.4 * point.pixel_size).values
    monkeypatch.setattr("crossing.shooting.maps.convolution._LEAST_BAND", 1)
    monkeypatch.setattr("crossing.shooting.maps.convolution._BAND", 1)
    np.testing.assert_allclose(point.convolve(4.4 * point.pixel_size).values, whole, rtol=1e-10)


@pytest.mark.parametrize(
    ("radius", "limb_darkening", "says"),
    [
        (0.009, 0.0, "`radius` must be at least 2 pixels of 0.005, got 0.009; make a finer map, or follow a track"),
        (np.nan, 0.0, "`radius` must be at least 2 pixels"),
        (0.8, 0.0, "`radius` must leave room for the disc on the map, got 0.8 of 6 x 1.5; make a larger map"),
        (0.1, 1.1, "`limb_darkening` must be between 0 and 1, got 1.1"),
    ],
)
def test_discs_that_do_not_fit_the_map(radius: float, limb_darkening: float, says: str) -> None:
    with pytest.raises(InputError, match=says):
        fold_map().convolve(radius, limb_darkening)


def test_a_disc_is_not_convolved_twice() -> None:
    with pytest.raises(InputError, match="the map is that of a disc of"):
        fold_map().convolve(0.1).convolve(0.1)


# Statistics


def test_statistics_of_a_fold() -> None:
    # Area with K / sqrt(d) > mu is K^2/mu^2 of the depth 5; per ln mu it is twice that.
    found = fold_map(columns=5000, rows=8, low=0.0, width=5.0).statistics(np.geomspace(2.0, 40.0, 9))
    np.testing.assert_allclose(found.exceeding, STRENGTH**2 / found.edges**2 / 5.0, atol=1 / 5000)
    middle = STRENGTH**2 / 5.0 * -np.diff(found.edges**-2) / np.diff(np.log(found.edges))
    np.testing.assert_allclose(found.density, middle, atol=1 / 5000 / np.log(found.edges[1] / found.edges[0]))
    assert found.mean == pytest.approx(2 * STRENGTH / np.sqrt(5.0), rel=1e-12)
    assert found.below + (found.density * np.diff(np.log(found.edges))).sum() + found.above == pytest.approx(1.0)


def test_default_bins_hold_every_lit_pixel(rng: np.random.Generator) -> None:
    values = rng.lognormal(4.0, 1.0, (64, 64))
    values[:16] = 0.0
    found = make(values).statistics()
    assert (len(found.density), found.below, found.above) == (50, 0.25, 0.0)
    assert found.edges[0] == pytest.approx(values[values > 0].min())
    assert found.exceeding[0] == 0.75
    flat = make(np.full((9, 5), 7.0)).statistics(3)
    assert (flat.mean, flat.mean_error, flat.below, flat.above) == (7.0, 0.0, 0.0, 0.0)


@pytest.mark.parametrize(
    ("bins", "says"),
    [
        (0, "`bins` must be a whole number from 1 to 100000, or edges, got 0"),
        (2.5, "`bins` must be a whole number"),
        ([1.0], "`bins` must be two or more edges"),
        ([0.0, 1.0], "`bins` must be two or more edges, positive"),
        ([2.0, 1.0], "increasing"),
        ([1.0, np.nan], "`bins` must be two or more edges"),
    ],
)
def test_bins_that_cannot_be_used(bins: Any, says: str) -> None:
    with pytest.raises(InputError, match=says):
        make(np.ones((4, 4))).statistics(bins)


def test_a_dark_map_needs_edges() -> None:
    dark = make(np.zeros((4, 4)))
    with pytest.raises(InputError, match="must be edges for a map without light"):
        dark.statistics()
    assert dark.statistics([1.0, 2.0]).below == 1.0


def test_one_pixel_has_no_error() -> None:
    found = make(np.ones((1, 1)), width=1.0).statistics(2)
    assert np.isnan(found.mean_error)
    assert np.isnan(found.exceeding_error).all()


def test_errors_of_uncorrelated_pixels(rng: np.random.Generator) -> None:
    found = make(rng.normal(50.0, 5.0, (160, 160))).statistics([40.0, 50.0, 60.0])
    # The largest of four estimates of one number, the coarsest from 7 degrees of freedom: up to twice as large.
    assert 0.9 < found.mean_error / (5.0 / 160) < 2.0
    assert 0.9 < found.exceeding_error[1] / (0.5 / 160) < 2.0
    assert 0.9 < found.density_error[0] * np.log(50 / 40) / (np.sqrt(0.477 * 0.523) / 160) < 2.0


@pytest.mark.parametrize(
    ("shape", "patch"),
    [
        *(((160, 160), patch) for patch in [(1, 1), (20, 20), (160, 1), (160, 4), (160, 20), (4, 160)]),
        *(((1, 160), (1, length)) for length in (1, 20)),
        ((40, 24), (40, 1)),
    ],
    ids=str,
)
def test_errors_hold_for_correlated_pixels(shape: tuple[int, int], patch: tuple[int, int]) -> None:
    rng = np.random.default_rng(5)
    pulls = []
    for _ in range(60):
        coarse = rng.normal(0.0, 1.0, (shape[0] // patch[0], shape[1] // patch[1]))
        found = make(100.0 + np.kron(coarse, np.ones(patch)), width=float(shape[1])).statistics([99.0, 101.0])
        pulls.append((found.mean - 100.0) / found.mean_error)
    # Patches as large as a block, or as long as the map, must not make the errors too small. Eight of them leave 7
    # degrees of freedom: a spread of sqrt(7/5) = 1.18, known to a tenth from 60 maps.
    assert np.std(pulls) < 1.42


def test_block_errors_by_hand() -> None:
    blocks = np.array([[1.0, 3.0], [1.0, 3.0]])
    # Whole columns, 1 and 3: mean 2, standard error sqrt(2)/sqrt(2) = 1; single blocks would say sqrt(4/3)/2.
    assert block_error(blocks, np.ones((2, 2))) == pytest.approx(1.0)
    assert block_error(np.array([[1.0, 3.0]]), np.array([[3.0, 1.0]])) == pytest.approx(np.sqrt(2 * 2 * 1.5**2) / 4)
    assert np.isnan(block_error(np.array([[1.0]]), np.ones((1, 1))))


def test_statistics_as_table_and_dictionary() -> None:
    found = fold_map().statistics(12)
    table = found.to_table()
    assert len(table) == 12
    assert table.meta["mean"] == found.mean
    assert (table["mu_high"][:-1] == table["mu_low"][1:]).all()
    told = found.to_dict()
    assert json.loads(json.dumps(told)) == told
    assert told["exceeding"][0] == table["exceeding"][0]


# Light curves


def test_a_light_curve_is_linear_between_pixel_centres() -> None:
    rows, columns = 30, 40
    plane = make(np.add.outer(2.0 * np.arange(rows), 3.0 * np.arange(columns)) + 5.0, width=4.0)
    found = plane.light_curve((-1.9, -1.3), (1.9, 1.3), samples=11)
    assert found.colnames == ["position", "u", "v", "magnification"]
    assert found["position"].tolist() == pytest.approx(np.linspace(0, 1, 11).tolist())
    exact = 5.0 + 3.0 * ((found["u"] + 2.0) / 0.1 - 0.5) + 2.0 * ((found["v"] + 1.5) / 0.1 - 0.5)
    np.testing.assert_allclose(found["magnification"], exact, rtol=1e-12)


def test_time_runs_where_the_motion_is_known() -> None:
    found = make(np.ones((10, 10)), days_per_einstein=100.0).light_curve((-3.0, 0.0), (0.0, 0.0))
    assert len(found) == 1 + 2 * 5
    assert found["time"].unit == "d"
    assert found["time"][-1].value == pytest.approx(300.0)


def test_a_light_curve_over_a_fold() -> None:
    disc = fold_map().convolve(0.2)
    found = disc.light_curve((-0.5, -0.3), (2.0, 0.4), samples=300)
    exact = STRENGTH / np.sqrt(0.2) * fold_profile(np.asarray(found["u"]) / 0.2)
    assert np.abs(found["magnification"] - exact).max() < 0.25 / 40 * exact.max()  # as the map: 40 pixels a radius


def test_edges_and_single_rows_take_the_nearest_value(rng: np.random.Generator) -> None:
    image = rng.random((1, 5))
    column = np.array([-0.5, 0.0, 0.5, 4.0, 4.5])
    found = bilinear(image, column, np.array([-0.5, 0.5, 0.0, 0.0, 0.2]))
    assert found.tolist() == pytest.approx([image[0, 0], image[0, 0], image[0, :2].mean(), image[0, 4], image[0, 4]])


@pytest.mark.parametrize(
    ("start", "end", "samples", "says"),
    [
        ((-3.1, 0.0), (0.0, 0.0), None, r"`start` must be on the map, -3 to 3 by -3 to 3, got \(-3.1, 0\)"),
        ((0.0, 0.0), (0.0, np.nan), None, "`end` must be on the map"),
        ((0.0, 0.0), (0.0, 1.0, 2.0), None, r"`end` must be a pair \(u, v\)"),
        ((0.0, 0.0), (0.0, 1.0), 1, "`samples` must be between 2 and 10000000, got 1"),
    ],
)
def test_lines_that_leave_the_map(start: Any, end: Any, samples: int | None, says: str) -> None:
    with pytest.raises(InputError, match=says):
        make(np.ones((10, 10))).light_curve(start, end, samples)


# Files


def same(one: MagnificationMap, other: MagnificationMap) -> bool:
    def arrays(found: MagnificationMap) -> list[NDArray[np.float64]]:
        return [found.values] + ([] if found.error is None else [found.error])

    equal = [np.array_equal(a, b) for a, b in zip(arrays(one), arrays(other), strict=True)]
    sizes = ((found.center, found.width, found.height) for found in (one, other))
    return all(equal) and len(set(sizes)) == 1 and one.to_dict() == other.to_dict()


def test_a_file_loses_nothing(tmp_path: Path, rng: np.random.Generator) -> None:
    for number, found in enumerate((full_map(rng), make(np.ones((3, 5))), fold_map().convolve(0.1, 0.4))):
        before = found.values.copy()
        found.write(tmp_path / f"{number}.fits")
        assert np.array_equal(found.values, before)  # turned around while it was written
        back = MagnificationMap.read(tmp_path / f"{number}.fits")
        assert same(found, back)
        assert back.values.dtype.isnative
        assert back.values.flags.writeable


def test_what_is_not_known_comes_back_as_such(tmp_path: Path) -> None:
    make(np.ones((3, 5)), error_estimate=float("nan"), expected_mean=float("inf")).write(tmp_path / "a.fits")
    back = MagnificationMap.read(tmp_path / "a.fits")
    assert np.isnan(back.error_estimate)
    assert back.expected_mean == np.inf


def test_cards_and_coordinates(tmp_path: Path, rng: np.random.Generator) -> None:
    found = full_map(rng)
    found.write(tmp_path / "map.fits")
    with fits.open(tmp_path / "map.fits") as units:
        units.verify("exception")
        assert [unit.name for unit in units] == ["PRIMARY", "ERROR", "PROVENANCE"]
        assert units[0].data.dtype == ">f8"
        header = units[0].header
        assert (header["KAPPA"], header["GAMMA"], header["KAPPASTR"], header["NSTARS"]) == (0.7, 0.25, 0.05, 421)
        assert (header["SEED"], header["METHOD"], header["IMAGES"], header["NRAYS"]) == ("7", "area", 2, 12345)
        assert (header["ACCURACY"], header["ERREST"], header["EXPMEAN"]) == (1e-3, 8e-4, 1 / 3)
        assert (header["EINSTPC"], header["EINSTDAY"]) == (0.0166, 11272.3)
        assert json.loads(units["PROVENANCE"].data["json"][0])["description"]["call"] == [1, "two", None, 0.1]
        corners = [[0, 0], [69, 29]]
        exact = np.array([[found.u[0], found.v[0]], [found.u[-1], found.v[-1]]])
        np.testing.assert_allclose(WCS(header).all_pix2world(corners, 0), exact, rtol=1e-12)
        parsec = WCS(header, key="A")
        assert [str(unit) for unit in parsec.wcs.cunit] == ["pc", "pc"]
        np.testing.assert_allclose(parsec.all_pix2world(corners, 0), 0.0166 * exact, rtol=1e-12)
        np.testing.assert_allclose(WCS(units["ERROR"].header).all_pix2world(corners, 0), exact, rtol=1e-12)


def test_files_are_not_overwritten_unawares(tmp_path: Path) -> None:
    path = tmp_path / "map.fits"
    make(np.ones((3, 5))).write(path)
    with pytest.raises(InputError, match=r"map\.fits: is there already; choose another name or say overwrite=True"):
        make(np.zeros((3, 5))).write(path)
    assert MagnificationMap.read(path).mean_magnification == 1.0
    make(np.zeros((3, 5))).write(path, overwrite=True)
    assert MagnificationMap.read(path).mean_magnification == 0.0
    with pytest.raises(InputError, match=r"nowhere/map\.fits: cannot be written: No such file"):
        make(np.ones((3, 5))).write(tmp_path / "nowhere" / "map.fits")
    assert [entry.name for entry in tmp_path.iterdir()] == ["map.fits"]


def test_an_interruption_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "map.fits"
    make(np.ones((3, 5))).write(path)

    def interrupt(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("crossing.shooting.maps.map_files.os.fsync", interrupt)
    with pytest.raises(KeyboardInterrupt):
        make(np.zeros((3, 5))).write(path, overwrite=True)
    assert MagnificationMap.read(path).mean_magnification == 1.0
    assert [entry.name for entry in tmp_path.iterdir()] == ["map.fits"]


def test_other_files_are_refused_in_one_line(tmp_path: Path) -> None:
    make(np.ones((30, 50)), error=np.ones((30, 50))).write(tmp_path / "map.fits")
    whole = (tmp_path / "map.fits").read_bytes()
    contents = {
        "empty": b"",
        "text": b"no FITS file\n",
        "short": whole[:2000],
        "cut": whole[: len(whole) // 2],
        "no_provenance": whole[: whole.index(b"XTENSION= 'BINTABLE'") // 2880 * 2880],
        "newer": whole.replace(b'{"version": 1', b'{"version": 2'),
        "damaged": whole.replace(b'{"version": 1', b'{"version"; 1'),
        "field_gone": whole.replace(b'"width"', b'"wodth"'),
        "integers": whole.replace(b"BITPIX  =                  -64", b"BITPIX  =                   64", 1),
        "one_axis": whole.replace(b"NAXIS   =                    2", b"NAXIS   =                    1", 1),
    }
    for name, content in contents.items():
        path = tmp_path / name
        path.write_bytes(content)
        with pytest.raises(InputError) as caught:
            MagnificationMap.read(path)
        assert str(caught.value).startswith(f"{path}: "), name
        assert "\n" not in str(caught.value), name
    with pytest.raises(InputError, match="must exist, got no such file"):
        MagnificationMap.read(tmp_path / "gone.fits")
    with pytest.raises(InputError, match="must have the layout 1, got 2; update crossing"):
        MagnificationMap.read(tmp_path / "newer")
    with pytest.raises(InputError, match="declares more data than the file holds; it is truncated"):
        MagnificationMap.read(tmp_path / "cut")
    with pytest.raises(InputError, match="its images are not of 64-bit floats"):
        MagnificationMap.read(tmp_path / "integers")


# Figures


@pytest.mark.parametrize("shape", [(80, 80), (3, 400), (400, 3), (40, 100), (1, 1), (1600, 12)], ids=str)
def test_figures_of_maps_of_any_shape(shape: tuple[int, int], rng: np.random.Generator, tmp_path: Path) -> None:
    found = make(rng.lognormal(5.0, 1.0, shape), width=float(shape[1]), days_per_einstein=0.3, images=2)
    axes = found.plot()
    axes.figure.savefig(tmp_path / "a.png", dpi=40)
    image = axes.images[0]
    assert max(image.get_array().shape) <= 1500
    left, right, low, _ = image.get_extent()
    assert right - left == pytest.approx(shape[1], rel=0.3)
    assert low == pytest.approx(-found.height / 2)
    assert any("theta_E" in text.get_text() for text in axes.texts)
    statistics = found.statistics(5).plot()
    statistics.figure.savefig(tmp_path / "b.png", dpi=40)
    assert statistics.get_xlabel() == "magnification"


def test_dark_maps_can_be_drawn() -> None:
    make(np.zeros((4, 4))).plot().figure.draw_without_rendering()
    half = np.zeros((6, 6))
    half[:, 3:] = 5.0
    make(half, days_per_einstein=4000.0).plot().figure.draw_without_rendering()


@pytest.mark.parametrize(
    ("longest", "found"), [(1.0, 1.0), (0.99, 0.5), (2.4, 2.0), (0.3, 0.2), (7e3, 5e3), (5e-4, 5e-4)]
)
def test_nice_lengths(longest: float, found: float) -> None:
    assert nice_length(longest) == pytest.approx(found)
