"""Local quantities from rendered float32 maps against the closed forms that they were rendered from."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from macro_maps import CENTRE, Grid, components, record_of, rendered, sky, write_planes

from crossing.optics.local import FoldGeometry
from crossing.optics.macro.images import solve_images
from crossing.optics.macro.lens_map import LensMap, read_lens_map
from crossing.optics.macro.local_map import local_solution
from crossing.optics.macro.map_patch import MapPatch
from crossing.optics.macro.profiles import (
    MassProfile,
    NFWSphere,
    PointMass,
    ProfileSum,
    Shear,
    SoftenedEllipsoid,
    UniformSheet,
)
from crossing.optics.macro.sky_frame import offsets_from_sky
from crossing.optics.scales import LensScales

SCALES = LensScales(0.5, 1.5)
RATIO = SCALES.D_ls / SCALES.D_s
ELLIPSOID = SoftenedEllipsoid(einstein_radius=8.0, axis_ratio=0.7, core=0.8, angle=27.0)
LENSES: dict[str, MassProfile] = {
    "isothermal sphere": SoftenedEllipsoid(einstein_radius=9.0),
    "ellipsoid with core": ELLIPSOID,
    "point mass": ProfileSum(parts=(PointMass(einstein_radius=6.0), UniformSheet(kappa=0.2))),
    "NFW": NFWSphere(kappa_s=0.7, r_s=10.0),
    "shear sheet": ProfileSum(parts=(UniformSheet(kappa=0.55), Shear(gamma1=0.2, gamma2=-0.3))),
    "ellipsoid in shear": ProfileSum(parts=(ELLIPSOID, Shear(gamma1=0.05, gamma2=0.04))),
}
GRIDS = {
    "plain": Grid(width=400, height=400),
    "rotated": Grid(width=430, height=400, rotation=37.0),
    "flipped": Grid(width=400, height=410, flipped=True),
    "all": Grid(width=420, height=340, rotation=-64.0, flipped=True, stretch=1.25),
}
SHEAR = ("convergence", "shear1", "shear2")
DEFLECTIONS = ("deflection1", "deflection2")
SIZE = ("convergence", "shear", *DEFLECTIONS)

# What is asked of maps with pixels of 0.05 arcsec.
MU_ERROR, LAM_T_ERROR, GRADIENT_ERROR = 0.01, 1e-4, 0.03
# Rounding of float32: 3e-8 of values near 1 over 0.1 arcsec; of deflections near 10 arcsec, 5e-7 over 0.1 arcsec twice.
ROUNDING = {SHEAR: 3e-6, SIZE: 3e-4, DEFLECTIONS: 6e-4}


def exact_slope(profile: MassProfile, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Change of lam_t to east and north by central differences; these err by h^2/6 of third derivatives."""
    h = 1e-4

    def lam_t(a: np.ndarray, b: np.ndarray) -> np.ndarray:
        return profile.eigenvalues(a, b, scale=RATIO)[0]

    return np.array([lam_t(x + h, y) - lam_t(x - h, y), lam_t(x, y + h) - lam_t(x, y - h)]) / (2 * h)


def places() -> np.ndarray:
    """Offsets [arcsec] within 7 arcsec and outside 0.5 (ten pixels), where singular centres are not resolved."""
    x, y = np.random.default_rng(3).uniform(-7, 7, (2, 4000))
    return np.compress(np.hypot(x, y) > 0.5, (x, y), axis=1)


def check_patch(profile: MassProfile, patch: MapPatch, rounding: float) -> None:
    x, y = places()
    lam_t, lam_r = profile.eigenvalues(x, y, scale=RATIO)
    found_t, found_r = patch.eigenvalues(x, y)
    away = np.abs(lam_t) >= 0.01
    np.testing.assert_allclose((found_t * found_r)[away], (lam_t * lam_r)[away], rtol=MU_ERROR)
    np.testing.assert_allclose(found_t[~away], lam_t[~away], atol=LAM_T_ERROR)
    # Where the shear vanishes lam_t has a ridge, on whose other side differences may fall.
    smooth = np.hypot(*profile.shear(x, y, scale=RATIO)) > 0.02
    slope = exact_slope(profile, x, y)[:, smooth]
    error = np.hypot(*(np.array(patch.stretch(x, y).slope_t)[:, smooth] - slope))
    # Deep inside the isothermal sphere lam_t is 1 everywhere: there its error is judged by the gradient of lam_r.
    other = np.hypot(*np.array(patch.stretch(x, y).slope_r)[:, smooth])
    assert np.all(error <= GRADIENT_ERROR * np.hypot(*slope) + 1e-3 * other + rounding)


@pytest.mark.parametrize("profile", LENSES.values(), ids=list(LENSES))
@pytest.mark.parametrize("grid", GRIDS.values(), ids=list(GRIDS))
def test_eigenvalues_and_gradient(tmp_path: Path, profile: MassProfile, grid: Grid) -> None:
    lens_map = read_lens_map(rendered(tmp_path, profile, grid), SCALES)
    check_patch(profile, lens_map.patch(CENTRE, 30.0), ROUNDING[SHEAR])


@pytest.mark.parametrize("keys", [DEFLECTIONS, SIZE], ids=["deflections", "size of shear"])
@pytest.mark.parametrize("grid", [GRIDS["plain"], GRIDS["all"]], ids=["plain", "all"])
@pytest.mark.parametrize("name", ["ellipsoid in shear", "NFW"])
def test_maps_with_deflections(tmp_path: Path, keys: tuple[str, ...], grid: Grid, name: str) -> None:
    lens_map = read_lens_map(rendered(tmp_path, LENSES[name], grid, keys), SCALES)
    check_patch(LENSES[name], lens_map.patch(CENTRE, 30.0), ROUNDING[keys])


@pytest.mark.parametrize("keys", [SHEAR, DEFLECTIONS], ids=["shear", "deflections"])
def test_components_on_the_sky(tmp_path: Path, keys: tuple[str, ...]) -> None:
    profile = LENSES["ellipsoid in shear"]
    lens_map = read_lens_map(rendered(tmp_path, profile, GRIDS["all"], keys, axes="sky"), SCALES)
    check_patch(profile, lens_map.patch(CENTRE, 30.0), ROUNDING[keys])


@pytest.mark.parametrize("keys", [SHEAR, DEFLECTIONS], ids=["shear", "deflections"])
def test_errors_fall_with_the_pixel(tmp_path: Path, keys: tuple[str, ...]) -> None:
    """Cubic splines err by the fourth power of the pixel, their derivatives by the third."""
    profile = LENSES["ellipsoid in shear"]
    x, y = places()
    x, y = np.compress(np.hypot(x, y) > 2, (x, y), axis=1)
    errors = []
    for pixel in (0.4, 0.2, 0.1):
        grid = Grid(width=round(20 / pixel), height=round(20 / pixel), pixel=pixel)
        planes = write_planes(tmp_path, components(profile, grid), grid, keys, dtype=">f8")
        patch = read_lens_map(record_of(planes), SCALES).patch(CENTRE, 30.0)
        value = np.abs(patch.eigenvalues(x, y)[0] - profile.eigenvalues(x, y, scale=RATIO)[0])
        slope = np.hypot(*(np.array(patch.stretch(x, y).slope_t) - exact_slope(profile, x, y)))
        errors.append((np.sqrt(np.mean(value**2)), np.sqrt(np.mean(slope**2))))
    falls = np.array(errors)[:-1] / np.array(errors)[1:]
    assert np.all(falls[:, 0] > 11)  # 16 in the limit
    assert np.all(falls[:, 1] > 6)  # 8 in the limit
    assert errors[-1][0] < 1e-5


@pytest.fixture(scope="module", params=GRIDS.values(), ids=list(GRIDS))
def lens_map(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> LensMap:
    choice = rendered(tmp_path_factory.mktemp("map"), LENSES["ellipsoid in shear"], request.param)
    return read_lens_map(choice, SCALES)


@pytest.mark.parametrize(("x", "y"), [(2.5, 3.1), (-4.0, 1.0), (0.3, -3.6)])
def test_local_solution(lens_map: LensMap, x: float, y: float) -> None:
    """The report at a point: orientation, signs and the frame of the stretch."""
    profile = LENSES["ellipsoid in shear"]
    point = local_solution(lens_map, sky(x, y))
    lam_t, lam_r = profile.eigenvalues(x, y, scale=RATIO)
    g1, g2 = profile.shear(x, y, scale=RATIO)
    assert point.lam_t == pytest.approx(float(lam_t), abs=1e-6)
    assert point.lam_r == pytest.approx(float(lam_r), abs=1e-6)
    assert point.mu == pytest.approx(float(1 / (lam_t * lam_r)), rel=1e-4)
    assert (point.mu_t, point.mu_r) == pytest.approx((1 / point.lam_t, 1 / point.lam_r))
    assert point.kappa == pytest.approx(float(profile.convergence(x, y, scale=RATIO)), abs=1e-6)
    assert 1 - point.kappa - point.gamma == pytest.approx(point.lam_t)
    # The eigenvector of A = 1 - kappa - (g1, g2; g2, -g1) lies at half the phase of the shear, from east to north.
    angle = (90 - np.degrees(np.arctan2(g2, g1)) / 2) % 180
    assert point.stretch_angle == pytest.approx(float(angle), abs=0.01)
    slope = exact_slope(profile, np.float64(x), np.float64(y))
    assert point.gradient_sky == pytest.approx(tuple(slope), rel=1e-3, abs=1e-5)
    assert point.gradient[0] >= 0
    assert np.hypot(*point.gradient) == pytest.approx(np.hypot(*slope), rel=1e-3)
    assert point.parity == ("minimum" if lam_t > 0 else "saddle")
    geometry = point.fold_geometry
    assert isinstance(geometry, FoldGeometry)
    assert point.linear is not None
    assert geometry.critical_distance(point.lam_t) == pytest.approx(point.linear.critical_distance)
    assert geometry.strength == pytest.approx(point.linear.fold_strength)
    assert geometry.caustic_distance(point.linear.critical_distance) == pytest.approx(point.linear.caustic_distance)


def test_frame_of_the_gradient(lens_map: LensMap) -> None:
    """lam_t grows along the first axis; the second is a quarter turn on, counted from east to north."""
    x, y = 2.9, 2.9
    point = local_solution(lens_map, sky(x, y))
    along = np.array([np.sin(np.radians(point.stretch_angle)), np.cos(np.radians(point.stretch_angle))])
    along *= np.sign(along @ point.gradient_sky)
    across = np.array([-along[1], along[0]])
    step = 1e-3
    for direction, component in zip((along, across), point.gradient, strict=True):
        moved = local_solution(lens_map, sky(x + step * direction[0], y + step * direction[1]))
        # Second derivatives near 0.1 per arcsec^2 over the step.
        assert (moved.lam_t - point.lam_t) / step == pytest.approx(component, rel=5e-3, abs=1e-4)


def test_mirror_image_on_every_grid(lens_map: LensMap) -> None:
    profile, x, y = LENSES["ellipsoid in shear"], 2.55, 3.2
    point = local_solution(lens_map, sky(x, y))
    source = tuple(float(one) for one in profile.source_position(x, y, scale=RATIO))
    images = solve_images(profile, source, 12.0, scale=RATIO)
    assert point.mapped is not None
    mirror = np.array(point.mapped.mirror)
    # A tenth of a thousandth of a pixel.
    assert np.hypot(images.x - x - mirror[0], images.y - y - mirror[1]).min() < 1e-5
    ra, dec = point.mirror_position or (np.nan, np.nan)
    assert offsets_from_sky(CENTRE, ra, dec) == (pytest.approx(x + mirror[0]), pytest.approx(y + mirror[1]))


@pytest.mark.parametrize("distance", [0.0, 0.02, 0.3, -0.2])
def test_nearest_critical_point(lens_map: LensMap, distance: float) -> None:
    """No vertex of the curve, but its nearest point: as far away as the perpendicular distance says."""
    point = local_solution(lens_map, sky(3.4 + distance * 0.6, 3.0 + distance * 0.8))
    assert point.best is not None
    assert point.critical_point is not None
    there = np.array(offsets_from_sky(point.position, *point.critical_point))
    assert np.hypot(*there) == pytest.approx(abs(point.best.critical_distance_perp), abs=1e-6)
    lam_t, _ = LENSES["ellipsoid in shear"].eigenvalues(*offsets_from_sky(CENTRE, *point.critical_point), scale=RATIO)
    assert float(lam_t) == pytest.approx(0, abs=1e-6)


def test_report_as_dict_and_table(lens_map: LensMap) -> None:
    point = local_solution(lens_map, sky(2.55, 3.2))
    report: dict[str, Any] = point.to_dict()
    assert report["critical_distance_arcsec"] == point.best.critical_distance  # type: ignore[union-attr]
    assert report["mirror_position_deg"] == list(point.mirror_position or ())
    assert report["quality"]["identity_misfit"] < 0.01
    assert report["linear"]["mirror"] == point.linear.mirror  # type: ignore[union-attr]
    ax = point.plot()
    assert {text.get_text() for text in ax.get_legend().get_texts()} >= {"position", "mirror image", "stretch"}
    assert ax.xaxis_inverted()
    table = point.to_table()
    assert len(table) == 1
    assert table["lam_t"][0] == point.lam_t


def test_place_without_critical_curve(tmp_path: Path) -> None:
    grid = Grid(width=120, height=120)
    sheet = read_lens_map(rendered(tmp_path, LENSES["shear sheet"], grid), SCALES)
    point = local_solution(sheet, CENTRE)
    assert point.flags[-1] == "no_critical_curve"
    # What the linear expansion says is not on the map at all.
    assert (point.linear is not None) == ("not_followed" in point.flags)
    assert point.critical_point is None
    assert point.mapped is None
    assert point.quality.identity_misfit is None  # derivatives are lost in rounding


def test_maps_for_a_stated_redshift(tmp_path: Path) -> None:
    """The same lens written for sources at z = 3 and for D_ls/D_s = 1."""
    grid, profile = Grid(width=200, height=200), LENSES["NFW"]
    at_three = LensScales(0.5, 3.0)
    plain = read_lens_map(rendered(tmp_path, profile, grid), SCALES)
    folder = tmp_path / "three"
    folder.mkdir()
    scale = at_three.D_ls / at_three.D_s
    choice = rendered(folder, profile, grid, scale=scale, source_redshift=3.0)
    stated = read_lens_map(choice, SCALES)
    x, y = 2.0, 1.0
    found = [one.patch(CENTRE, 4).eigenvalues(x, y) for one in (plain, stated)]
    np.testing.assert_allclose(found[0], found[1], atol=1e-6)
    assert stated.for_source(3.0).factor == pytest.approx(1)


def test_units_of_deflections(tmp_path: Path) -> None:
    grid, profile = Grid(width=200, height=200, pixel=0.1), LENSES["NFW"]
    planes = components(profile, grid)
    expected = profile.eigenvalues(2.0, 1.0, scale=RATIO)
    for unit, size in (("arcsec", 1.0), ("arcmin", 60.0), ("pixel", 0.1), ("deg", 3600.0)):
        written = {key: planes[key] / size for key in DEFLECTIONS}
        names = write_planes(tmp_path, written, grid, DEFLECTIONS)
        patch = read_lens_map(record_of(names, deflection_unit=unit), SCALES).patch(CENTRE, 4)
        np.testing.assert_allclose(patch.eigenvalues(2.0, 1.0), expected, atol=1e-4)  # rounding of float32


def test_unit_in_the_header(tmp_path: Path) -> None:
    grid = Grid(width=200, height=200, pixel=0.1, extra={"BUNIT": "arcmin"})
    planes = components(LENSES["NFW"], grid)
    names = write_planes(tmp_path, {key: planes[key] / 60 for key in DEFLECTIONS}, grid, DEFLECTIONS)
    lens_map = read_lens_map(record_of(names, deflection_unit=None), SCALES)
    assert lens_map.deflection_scale == 60


def test_figure_of_merit_of_deflections(tmp_path: Path) -> None:
    lens_map = read_lens_map(rendered(tmp_path, LENSES["NFW"], GRIDS["plain"], (*SHEAR, *DEFLECTIONS)), SCALES)
    point = local_solution(lens_map, sky(2.0, 1.0))
    assert point.quality.deflection_misfit is not None
    assert point.quality.deflection_misfit < 1e-3
    assert lens_map.pieces == "shear"


def test_patch_outside_gives_no_numbers(tmp_path: Path) -> None:
    patch = read_lens_map(rendered(tmp_path, LENSES["NFW"], Grid(width=100, height=100)), SCALES).patch(CENTRE, 1.0)
    assert np.isnan(patch.eigenvalues(30.0, 0.0)[0])
    assert patch.reach == pytest.approx(1.0, abs=0.15)  # whole pixels and one more


def test_missing_pixels_far_away_do_not_matter(tmp_path: Path) -> None:
    grid = Grid(width=240, height=240)
    planes = components(LENSES["ellipsoid in shear"], grid)
    for key in SHEAR:
        planes[key][:30] = np.nan
        planes[key][:, 200:] = np.nan
    lens_map = read_lens_map(record_of(write_planes(tmp_path, planes, grid)), SCALES)
    point = local_solution(lens_map, sky(1.0, 1.0))
    expected = LENSES["ellipsoid in shear"].eigenvalues(1.0, 1.0, scale=RATIO)
    np.testing.assert_allclose((point.lam_t, point.lam_r), expected, atol=1e-5)
