"""Critical curves and caustics from rendered maps against closed forms."""

from __future__ import annotations

from math import pi
from pathlib import Path

import numpy as np
import pytest
from astropy import units as u
from hypothesis import given
from hypothesis import strategies as st
from macro_maps import CENTRE, Grid, components, record_of, rendered, sky, write_planes

from crossing.errors import InputError
from crossing.optics.macro.critical_lines import CriticalLines, critical_lines
from crossing.optics.macro.grid_lines import sample_grid, zero_lines
from crossing.optics.macro.lens_map import read_lens_map
from crossing.optics.macro.map_checks import Fields
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
LENSES: dict[str, MassProfile] = {
    "isothermal sphere": SoftenedEllipsoid(einstein_radius=9.0),
    "ellipsoid with core": SoftenedEllipsoid(einstein_radius=8.0, axis_ratio=0.7, core=0.8, angle=27.0),
    "point mass": ProfileSum(parts=(PointMass(einstein_radius=6.0), UniformSheet(kappa=0.2))),
    "NFW in shear": ProfileSum(parts=(NFWSphere(kappa_s=0.8, r_s=10.0), Shear(gamma1=0.05, gamma2=-0.08))),
}
GRIDS = {
    "plain": Grid(width=440, height=430),
    "all": Grid(width=440, height=360, rotation=-64.0, flipped=True, stretch=1.25),
}
REDSHIFTS = (0.9, 1.5, 4.0)
ASKED = 0.1
"""Largest distance to the exact curve that is asked for [pixel]."""


def ratio_of(redshift: float) -> float:
    scales = LensScales(0.5, redshift)
    return scales.D_ls / scales.D_s


def distance_to_curve(profile: MassProfile, x: np.ndarray, y: np.ndarray, kind: str, scale: float) -> np.ndarray:
    """First-order distance of places to the curve where their eigenvalue vanishes [arcsec]."""
    sign, h = (1 if kind == "tangential" else -1), 1e-5

    def eigenvalue(a: np.ndarray, b: np.ndarray) -> np.ndarray:
        return 1 - profile.convergence(a, b, scale=scale) - sign * np.hypot(*profile.shear(a, b, scale=scale))

    slope = np.hypot(eigenvalue(x + h, y) - eigenvalue(x - h, y), eigenvalue(x, y + h) - eigenvalue(x, y - h)) / (2 * h)
    return np.abs(eigenvalue(x, y)) / slope


@pytest.mark.parametrize("name", LENSES)
@pytest.mark.parametrize("grid", GRIDS.values(), ids=list(GRIDS))
def test_curves_within_a_tenth_of_a_pixel(tmp_path: Path, name: str, grid: Grid) -> None:
    profile = LENSES[name]
    lines = critical_lines(read_lens_map(rendered(tmp_path, profile, grid), SCALES), REDSHIFTS, CENTRE)
    for redshift in REDSHIFTS:
        kinds = [line.kind for line in lines.of_source(redshift)]
        # A singular sphere has no radial curve, nor has a point mass; its pixel at the centre may look like one.
        assert kinds.count("tangential") == 1
        assert name in ("isothermal sphere", "point mass") or kinds.count("radial") == 1
    for line in lines.lines:
        if name == "isothermal sphere" and line.kind == "radial":
            continue
        assert line.closed
        off = distance_to_curve(profile, line.x, line.y, line.kind, ratio_of(line.source_redshift))
        assert off.max() < ASKED * grid.pixel
        # What is reached: fourth order in the pixel, where the lens is smooth.
        assert np.median(off) < 1e-3 * grid.pixel


def test_einstein_radius_and_caustic_of_the_isothermal_sphere(tmp_path: Path) -> None:
    """A circle of radius theta_E D_ls/D_s whose caustic is a point at the centre."""
    lens_map = read_lens_map(rendered(tmp_path, LENSES["isothermal sphere"], GRIDS["plain"]), SCALES)
    lines = critical_lines(lens_map, REDSHIFTS, CENTRE)
    for redshift in REDSHIFTS:
        (line,) = lines.of_source(redshift, "tangential")
        radius = 9.0 * ratio_of(redshift)
        assert np.hypot(line.x, line.y) == pytest.approx(radius, abs=1e-4)
        assert line.area == pytest.approx(pi * radius**2, rel=1e-3)
        # The reference is the singular centre itself, so that only the size of the caustic is meaningful.
        assert np.ptp(line.caustic_x) < 1e-3
        assert np.ptp(line.caustic_y) < 1e-3


@pytest.mark.parametrize("keys", [("convergence", "shear1", "shear2"), ("deflection1", "deflection2")], ids=len)
def test_caustics(tmp_path: Path, keys: tuple[str, ...]) -> None:
    profile, reference = LENSES["ellipsoid with core"], (2.0, -3.0)
    lens_map = read_lens_map(rendered(tmp_path, profile, GRIDS["all"], keys), SCALES)
    lines = critical_lines(lens_map, REDSHIFTS, sky(*reference))
    assert len(lines.lines) == 2 * len(REDSHIFTS)
    for line in lines.lines:
        scale = ratio_of(line.source_redshift)
        x, y = offsets_from_sky(CENTRE, line.ra, line.dec)
        here = profile.source_position(x, y, scale=scale)
        origin = profile.source_position(*reference, scale=scale)
        off = np.hypot(here[0] - origin[0] - line.caustic_x, here[1] - origin[1] - line.caustic_y)
        assert off.max() < 0.01 * 0.05  # a hundredth of a pixel


def test_nearer_sources_have_smaller_curves(tmp_path: Path) -> None:
    """The farther the source, the larger the critical curve (common practice, no source)."""
    redshifts = (0.7, 1.0, 1.5, 3.0, 9.0)
    for name, profile in LENSES.items():
        lens_map = read_lens_map(rendered(tmp_path, profile, GRIDS["plain"]), SCALES)
        lines = critical_lines(lens_map, redshifts)
        areas = [
            lines.of_source(z, "tangential")[0].area if lines.of_source(z, "tangential") else 0.0 for z in redshifts
        ]
        assert np.all(np.diff(areas) > 0), name
    # For a point mass in a sheet kappa the radius is theta_E sqrt(r/(1 - r kappa)), with the distance ratio r.
    lens_map = read_lens_map(rendered(tmp_path, LENSES["point mass"], GRIDS["plain"]), SCALES)
    for z in redshifts:
        (line,) = critical_lines(lens_map, [z]).of_source(z, "tangential")
        expected = 36 * ratio_of(z) / (1 - 0.2 * ratio_of(z))
        assert line.area / pi == pytest.approx(expected, rel=1e-3)


@pytest.mark.parametrize("keys", [("convergence", "shear1", "shear2"), ("deflection1", "deflection2")], ids=len)
def test_errors_fall_with_the_pixel(tmp_path: Path, keys: tuple[str, ...]) -> None:
    profile = LENSES["ellipsoid with core"]
    errors = []
    for pixel in (0.4, 0.2, 0.1):
        grid = Grid(width=round(22 / pixel), height=round(22 / pixel), pixel=pixel)
        planes = write_planes(tmp_path, components(profile, grid), grid, keys, dtype=">f8")
        lines = critical_lines(read_lens_map(record_of(planes), SCALES), [1.5], CENTRE)
        (line,) = lines.of_source(1.5, "tangential")
        off = distance_to_curve(profile, line.x, line.y, "tangential", ratio_of(1.5))
        errors.append(float(np.sqrt(np.mean(off**2))))
    assert errors[0] / errors[1] > 10  # 16 in the limit of fourth order
    assert errors[1] / errors[2] > 12


def field_lines(tmp_path: Path) -> CriticalLines:
    return critical_lines(read_lens_map(rendered(tmp_path, LENSES["NFW in shear"], GRIDS["all"]), SCALES), [1.0, 1.5])


def test_table_and_dict(tmp_path: Path) -> None:
    lines = field_lines(tmp_path)
    table = lines.to_table()
    assert table["ra"].unit == u.deg
    assert table["caustic_x"].unit == u.arcsec
    assert len(table) == sum(len(line.ra) for line in lines.lines)
    assert set(table["kind"]) == {"tangential", "radial"}
    assert list(np.unique(table["curve"])) == [line.curve for line in lines.lines]
    path = tmp_path / "curves.ecsv"
    table.write(path)
    first = lines.to_dict()["curves"][0]
    assert first["ra_deg"] == table["ra"][table["curve"] == 1].value.tolist()


def test_plot(tmp_path: Path) -> None:
    lines = field_lines(tmp_path)
    for plane in ("image", "source"):
        ax = lines.plot(plane=plane)  # type: ignore[arg-type]
        assert len(ax.lines) == len(lines.lines)
        assert ax.xaxis_inverted()
        labels = {text.get_text() for text in ax.get_legend().get_texts()}
        assert labels == {"source at z = 1", "source at z = 1.5"}
        styles = {line.get_linestyle() for line in ax.lines}
        assert len(styles) == 2  # never by colour alone


def test_curves_cut_by_missing_pixels_stay_open(tmp_path: Path) -> None:
    grid, profile = GRIDS["plain"], LENSES["ellipsoid with core"]
    planes = components(profile, grid)
    planes["convergence"][:, 200:260] = np.nan
    lines = critical_lines(read_lens_map(record_of(write_planes(tmp_path, planes, grid)), SCALES), [1.5], sky(-4, 0))
    assert len(lines.of_source(1.5, "tangential")) == 2
    for line in lines.lines:
        assert not line.closed
        assert np.all(np.isfinite(line.caustic_x))
        off = distance_to_curve(profile, *offsets_from_sky(CENTRE, line.ra, line.dec), line.kind, ratio_of(1.5))
        assert off.max() < ASKED * grid.pixel


def test_no_curves(tmp_path: Path) -> None:
    lens_map = read_lens_map(rendered(tmp_path, UniformSheet(kappa=0.3), Grid(width=64, height=64)), SCALES)
    lines = critical_lines(lens_map, [1.5])
    assert lines.lines == ()
    assert len(lines.to_table()) == 0
    assert lines.plot().get_legend() is None


@given(st.lists(st.floats(-1, 1), min_size=16, max_size=16), st.floats(1.1, 3.9), st.floats(1.1, 4.9))
def test_sampling_is_exact_for_cubics(terms: list[float], column: float, row: float) -> None:
    polynomial = np.polynomial.polynomial.polyval2d
    x, y = np.meshgrid(np.arange(6.0), np.arange(7.0))
    coefficients = np.reshape(terms, (4, 4))
    found = sample_grid(polynomial(x, y, coefficients), np.array(column), np.array(row))
    # Values reach 5^3 6^3; rounding is 1e-16 of that times a few.
    assert found == pytest.approx(polynomial(column, row, coefficients), abs=1e-8)


def test_sampling_outside_gives_no_number() -> None:
    assert np.all(np.isnan(sample_grid(np.ones((5, 5)), np.array([-0.1, 2.0]), np.array([1.0, 4.1]))))


def test_lines_of_a_plane_wave() -> None:
    """kappa = x/10 without shear has both eigenvalues zero at x = 10."""
    x, _ = np.meshgrid(np.arange(20.0), np.arange(18.0))
    zero = np.zeros_like(x)
    for kind in ("tangential", "radial"):
        (lines,) = zero_lines(Fields(x / 9.7, zero, zero), [1.0], kind)  # type: ignore[arg-type]
        (line,) = lines
        assert line.column == pytest.approx(9.7, abs=1e-12)
        assert not line.closed


def test_bad_redshifts(tmp_path: Path) -> None:
    lens_map = read_lens_map(rendered(tmp_path, UniformSheet(kappa=0.3), Grid(width=64, height=64)), SCALES)
    with pytest.raises(InputError, match=r"source redshift must be larger than the lens redshift 0\.5, got 0\.4"):
        critical_lines(lens_map, [1.5, 0.4])
    with pytest.raises(InputError, match="`redshifts` must hold at least one"):
        critical_lines(lens_map, [])
