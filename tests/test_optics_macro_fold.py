"""The fold next to a critical curve: local reports from maps against exact images of lenses with real folds."""

from __future__ import annotations

from math import cos, hypot, pi, sin, sqrt
from typing import NamedTuple

import numpy as np
import pytest
from macro_maps import Grid, rendered, sky
from scipy.optimize import brentq, minimize_scalar

from crossing.optics.macro.images import ImageTable, solve_images
from crossing.optics.macro.lens_map import LensMap, read_lens_map
from crossing.optics.macro.local_map import MapPoint, local_solution
from crossing.optics.macro.profiles import MassProfile, NFWSphere, ProfileSum, Shear, SoftenedEllipsoid
from crossing.optics.scales import LensScales

SCALES = LensScales(0.5, 1.5)
RATIO = SCALES.D_ls / SCALES.D_s
FIELD = 12.0
# The isothermal sphere is none of them: its caustic is a point and its fold strength vanishes.
LENSES = {
    "ellipsoid in shear": ProfileSum(
        parts=(
            SoftenedEllipsoid(einstein_radius=8.0, axis_ratio=0.7, core=0.8, angle=27.0),
            Shear(gamma1=0.05, gamma2=0.04),
        )
    ),
    "NFW in shear": ProfileSum(parts=(NFWSphere(kappa_s=0.9, r_s=8.0), Shear(gamma1=-0.1, gamma2=0.06))),
}


class Fold(NamedTuple):
    """Exact geometry at a critical point of a profile."""

    x: float
    y: float
    along: tuple[float, float]
    """Unit vector of the stretch, towards larger lam_t."""
    rate: float
    """Change of lam_t along it [1/arcsec]."""
    lam_r: float


def critical_radius(profile: MassProfile, direction: float, kind: str) -> float:
    """Distance [arcsec] of the critical curve from the centre in a direction [rad]."""
    sign = 1 if kind == "tangential" else -1

    def eigenvalue(r: float) -> float:
        x, y = r * cos(direction), r * sin(direction)
        kappa = float(profile.convergence(x, y, scale=RATIO))
        return 1 - kappa - sign * float(np.hypot(*profile.shear(x, y, scale=RATIO)))

    return float(brentq(eigenvalue, 0.05, 10.0, xtol=1e-14))


def stretch_angle(profile: MassProfile, x: float, y: float) -> float:
    """Direction of the stretch from east to north [rad]."""
    g1, g2 = (float(one) for one in profile.shear(x, y, scale=RATIO))
    return float(np.arctan2(g2, g1)) / 2 + (pi / 2 if profile.convergence(x, y, scale=RATIO) > 1 else 0)


def exact_fold(profile: ProfileSum, direction: float, kind: str) -> Fold:
    """Critical point in a direction [rad] from the centre."""
    r = critical_radius(profile, direction, kind)
    x, y = r * cos(direction), r * sin(direction)
    angle = stretch_angle(profile, x, y)
    along, h = np.array([cos(angle), sin(angle)]), 1e-5
    ahead, behind = (float(profile.eigenvalues(x + s * along[0], y + s * along[1], scale=RATIO)[0]) for s in (h, -h))
    rate = (ahead - behind) / (2 * h)
    if rate < 0:
        along, rate = -along, -rate
    lam_r = float(profile.eigenvalues(x, y, scale=RATIO)[1])
    return Fold(x, y, (float(along[0]), float(along[1])), rate, lam_r)


# Tangential and radial critical curves, in directions away from cusps.
FOLDS = {
    ("ellipsoid in shear", "tangential"): 1.2,
    ("ellipsoid in shear", "radial"): 0.3,
    ("NFW in shear", "tangential"): 0.6,
    ("NFW in shear", "radial"): 2.0,
}


@pytest.fixture(scope="module", params=list(FOLDS), ids=" ".join)
def case(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> tuple[ProfileSum, LensMap, Fold]:
    profile = LENSES[request.param[0]]
    grid = Grid(width=400, height=380, rotation=21.0, flipped=True)
    lens_map = read_lens_map(rendered(tmp_path_factory.mktemp("map"), profile, grid), SCALES)
    return profile, lens_map, exact_fold(profile, FOLDS[request.param], request.param[1])


def pair_of(profile: ProfileSum, x: float, y: float, mirror: tuple[float, float]) -> tuple[ImageTable, int, int]:
    """Exact images of the source at (x, y); the one there, and the one next to where the mirror image should be."""
    source = tuple(float(one) for one in profile.source_position(x, y, scale=RATIO))
    images = solve_images(profile, source, FIELD, scale=RATIO)  # type: ignore[arg-type]
    here = int(np.argmin(np.hypot(images.x - x, images.y - y)))
    there = int(np.argmin(np.hypot(images.x - x - mirror[0], images.y - y - mirror[1])))
    return images, here, there


# Two decades of distance, both sides; 0.002 arcsec is 1/25 of a pixel.
DISTANCES = [-0.2, -0.06, -0.02, -0.006, -0.002, 0.002, 0.006, 0.02, 0.06, 0.2]


@pytest.mark.parametrize("distance", DISTANCES)
def test_pair_against_exact_images(case: tuple[ProfileSum, LensMap, Fold], distance: float) -> None:
    """Separation, flux ratio and delay of the pair by the map against numerical images and the Fermat potential."""
    profile, lens_map, fold = case
    x, y = (c + distance * a for c, a in zip((fold.x, fold.y), fold.along, strict=True))
    point = local_solution(lens_map, sky(x, y))
    found = point.mapped
    assert found is not None
    assert found.mirror is not None
    images, here, there = pair_of(profile, x, y, found.mirror)
    assert here != there
    exact = hypot(images.x[there] - images.x[here], images.y[there] - images.y[here])
    # Splines of float32 pixels: 1e-8 in lam_t, over a gradient near 0.1 per arcsec 1e-7 arcsec; radial curves are
    # resolved by some ten pixels only, which leaves some 1e-4 of the gradient.
    assert found.separation == pytest.approx(exact, rel=2e-3, abs=2e-6)
    assert found.flux_ratio == pytest.approx(abs(images.mu[there] / images.mu[here]), rel=5e-3)
    delay = SCALES.time_delay_factor * abs(images.arrival[there] - images.arrival[here])
    # Arrival times of order 50 arcsec^2 in double precision: 1e-14 arcsec^2.
    assert point.pair_delay == pytest.approx(delay, rel=5e-3, abs=SCALES.time_delay_factor * 2e-13)
    assert found.critical_distance == pytest.approx(exact_distance(profile, x, y, distance), rel=2e-3, abs=2e-6)
    assert point.lam_t * float(lens_map.patch(sky(x, y), 2.0).eigenvalues(*found.mirror)[0]) < 0


@pytest.mark.parametrize("distance", [-0.02, 0.02])
def test_strength_and_depth(case: tuple[ProfileSum, LensMap, Fold], distance: float) -> None:
    """K = sqrt(2/T)/abs(lam_r) and d = T s^2/2: Schneider, Ehlers & Falco 1992, sec. 6.2."""
    profile, lens_map, fold = case
    x, y = (c + distance * a for c, a in zip((fold.x, fold.y), fold.along, strict=True))
    point = local_solution(lens_map, sky(x, y))
    found = point.mapped
    assert found is not None
    assert found.fold_strength == pytest.approx(sqrt(2 / fold.rate) / abs(fold.lam_r), rel=0.03)
    # The exact distance: to the nearest of the exact caustic's points around the fold.
    assert found.caustic_distance == pytest.approx(exact_depth(profile, fold, (x, y)), rel=0.01)
    assert point.linear is not None
    assert point.linear.caustic_distance == pytest.approx(found.caustic_distance, rel=0.2)


def exact_distance(profile: ProfileSum, x: float, y: float, about: float) -> float:
    """Distance to the critical curve along the stretch at a place, of the sign of lam_t."""
    angle = stretch_angle(profile, x, y)

    def lam_t(t: float) -> float:
        return float(profile.eigenvalues(x + t * cos(angle), y + t * sin(angle), scale=RATIO)[0])

    ways = [(0.0, 3 * about), (0.0, -3 * about)]
    bracket = next(one for one in ways if lam_t(one[0]) * lam_t(one[1]) < 0)
    return float(np.sign(lam_t(0.0))) * abs(float(brentq(lam_t, *bracket, xtol=1e-14)))


def exact_depth(profile: ProfileSum, fold: Fold, place: tuple[float, float]) -> float:
    """Distance of a source to the caustic around the fold."""
    source = np.array(profile.source_position(*place, scale=RATIO))
    middle, kind = np.arctan2(fold.y, fold.x), "tangential" if fold.lam_r > 0 else "radial"

    def distance(angle: float) -> float:
        one = exact_fold(profile, angle, kind)
        return float(np.hypot(*(np.array(profile.source_position(one.x, one.y, scale=RATIO)) - source)))

    around = middle - 0.03, middle + 0.03
    return float(minimize_scalar(distance, bounds=around, method="bounded", options={"xatol": 1e-9}).fun)


def test_fold_law_against_exact_images(case: tuple[ProfileSum, LensMap, Fold]) -> None:
    """mu_pair sqrt(d) tends to the map's fold strength as the source nears the caustic."""
    profile, lens_map, fold = case
    point = local_solution(lens_map, sky(fold.x + 1e-3 * fold.along[0], fold.y + 1e-3 * fold.along[1]))
    assert point.best is not None
    strength = point.best.fold_strength
    edge = np.array(profile.source_position(fold.x, fold.y, scale=RATIO))
    errors = []
    for depth in (1e-4, 1e-5, 1e-6):
        source = edge + depth * np.array(fold.along)  # the caustic's normal is the stretch
        images = solve_images(profile, (float(source[0]), float(source[1])), FIELD, scale=RATIO)
        closest = np.argsort(np.hypot(images.x - fold.x, images.y - fold.y))[:2]
        pair = np.abs(images.mu[closest]).sum()
        errors.append(abs(pair * sqrt(depth) / strength - 1))
        assert images.mu[closest].prod() < 0
    assert errors[-1] < 0.01  # terms of relative order sqrt(d)
    assert errors[0] < 0.1
    assert errors[-1] < errors[0] + 1e-3
    without = edge - 1e-4 * np.array(fold.along)
    outside = solve_images(profile, (float(without[0]), float(without[1])), FIELD, scale=RATIO)
    assert len(outside) == len(images) - 2


def test_linear_law_converges(case: tuple[ProfileSum, LensMap, Fold]) -> None:
    """The error of the linear expansion falls in proportion to the distance, and says when it is above a tenth."""
    _, lens_map, fold = case
    errors = []
    for distance in (0.2, 0.02, 0.002):
        x, y = (c + distance * a for c, a in zip((fold.x, fold.y), fold.along, strict=True))
        point = local_solution(lens_map, sky(x, y))
        assert point.linear_error is not None
        assert ("nonlinear" in point.flags) == (point.linear_error > 0.1) != point.linear_is_valid
        assert point.best is point.mapped
        errors.append(point.linear_error)
    assert errors[0] / errors[1] == pytest.approx(10, rel=0.5)
    assert errors[1] / errors[2] == pytest.approx(10, rel=0.3)


def test_delay_of_the_linear_law(case: tuple[ProfileSum, LensMap, Fold]) -> None:
    """(1+z) D_l D_s/(c D_ls) T separation^3/12: check against the exact images next to the fold."""
    profile, lens_map, fold = case
    x, y = (c + 0.02 * a for c, a in zip((fold.x, fold.y), fold.along, strict=True))
    point = local_solution(lens_map, sky(x, y))
    assert point.linear is not None
    assert point.linear.arrival is not None
    assert point.mapped is not None
    images, here, there = pair_of(profile, x, y, point.mapped.mirror or (0, 0))
    exact = abs(images.arrival[there] - images.arrival[here])
    assert point.linear.arrival == pytest.approx(exact, rel=0.15)  # third powers of a per cent or two


def test_two_decades_follow_the_fold_law(case: tuple[ProfileSum, LensMap, Fold]) -> None:
    """Separation goes as sqrt(d), delay as d^(3/2), between 0.002 and 0.02 arcsec from the critical curve."""
    _, lens_map, fold = case
    points: list[MapPoint] = []
    for distance in (0.002, 0.02):
        x, y = (c + distance * a for c, a in zip((fold.x, fold.y), fold.along, strict=True))
        points.append(local_solution(lens_map, sky(x, y)))
    first, second = (point.mapped for point in points)
    assert first is not None
    assert second is not None
    depths = np.log(second.caustic_distance / first.caustic_distance)
    assert np.log(second.separation / first.separation) / depths == pytest.approx(0.5, abs=0.01)  # type: ignore[operator]
    assert np.log(second.arrival / first.arrival) / depths == pytest.approx(1.5, abs=0.02)  # type: ignore[operator]


def test_on_the_critical_curve(case: tuple[ProfileSum, LensMap, Fold]) -> None:
    _, lens_map, fold = case
    point = local_solution(lens_map, sky(fold.x, fold.y))
    assert abs(point.lam_t) < 1e-4
    assert point.best is not None
    assert abs(point.best.critical_distance) < 1e-3
    assert point.pair_delay == pytest.approx(0, abs=1e-3)
    assert point.best.fold_strength == pytest.approx(sqrt(2 / fold.rate) / abs(fold.lam_r), rel=0.01)


def test_place_without_mirror_image(tmp_path_factory: pytest.TempPathFactory) -> None:
    """A source outside the caustics has one image; the report says so and keeps what holds."""
    profile = LENSES["ellipsoid in shear"]
    lens_map = read_lens_map(rendered(tmp_path_factory.mktemp("far"), profile, Grid(width=400, height=400)), SCALES)
    x, y = 6.0, 6.0
    source = tuple(float(one) for one in profile.source_position(x, y, scale=RATIO))
    assert len(solve_images(profile, source, FIELD, scale=RATIO)) == 1  # type: ignore[arg-type]
    point = local_solution(lens_map, sky(x, y))
    assert point.flags
    assert point.mapped is None or point.mapped.mirror is None
    assert point.critical_point is not None


def test_merging_pair_and_its_end() -> None:
    """A source that approaches a fold from inside: its pair merges as sqrt(d); beyond, both are gone."""
    profile = LENSES["ellipsoid in shear"]
    fold = exact_fold(profile, 1.2, "tangential")
    edge = np.array(profile.source_position(fold.x, fold.y, scale=RATIO))
    separations = []
    for depth in (4e-3, 1e-3, 2.5e-4):
        source = edge + depth * np.array(fold.along)
        images = solve_images(profile, (float(source[0]), float(source[1])), FIELD, scale=RATIO)
        assert len(images) == 5
        one, two = np.argsort(np.hypot(images.x - fold.x, images.y - fold.y))[:2]
        separations.append(hypot(images.x[one] - images.x[two], images.y[one] - images.y[two]))
    assert separations[0] / separations[1] == pytest.approx(2, rel=0.05)
    assert separations[1] / separations[2] == pytest.approx(2, rel=0.03)
    beyond = edge - 1e-3 * np.array(fold.along)
    assert len(solve_images(profile, (float(beyond[0]), float(beyond[1])), FIELD, scale=RATIO)) == 3


def test_three_images_near_a_cusp() -> None:
    """On the axis of an ellipsoid, inside the cusp: a middle image between two others, signed magnifications near 0."""
    profile = SoftenedEllipsoid(einstein_radius=8.0, axis_ratio=0.7, core=0.8)
    x = critical_radius(profile, 0.0, "tangential")
    cusp = float(profile.source_position(x, 0.0, scale=RATIO)[0])
    inward = -np.sign(cusp)
    images = solve_images(profile, (cusp + 1e-3 * inward, 0.0), FIELD, scale=RATIO)
    close = np.flatnonzero(np.hypot(images.x - x, images.y) < 1.5)
    assert len(close) == 3
    middle = close[np.argmin(np.abs(images.y[close]))]
    outer = [one for one in close if one != middle]
    assert images.mu[outer].prod() > 0
    assert images.mu[middle] * images.mu[outer[0]] < 0
    # Schneider & Weiss 1992 (from memory): the three sum to zero to leading order.
    assert abs(images.mu[close].sum()) < 0.05 * np.abs(images.mu[close]).sum()
    assert len(solve_images(profile, (cusp - 1e-3 * inward, 0.0), FIELD, scale=RATIO)) == len(images) - 2


@pytest.fixture(scope="module")
def plain(tmp_path_factory: pytest.TempPathFactory) -> tuple[ProfileSum, LensMap]:
    """An ellipsoid whose axes are east and north, with cusps on both."""
    profile = ProfileSum(parts=(SoftenedEllipsoid(einstein_radius=8.0, axis_ratio=0.7, core=0.8),))
    return profile, read_lens_map(
        rendered(tmp_path_factory.mktemp("cusp"), profile, Grid(width=400, height=400)), SCALES
    )


@pytest.mark.parametrize(
    ("direction", "distance", "images"), [(0.0, 0.1, 1), (0.0, 0.3, 1), (pi / 2, -0.1, 3), (pi / 2, -0.3, 3)]
)
def test_report_near_a_cusp(plain: tuple[ProfileSum, LensMap], direction: float, distance: float, images: int) -> None:
    """The nearest point of the caustic is the cusp's tip: no fold law, and the report says so."""
    profile, lens_map = plain
    r = critical_radius(profile, direction, "tangential")
    tip = profile.source_position(r * cos(direction), r * sin(direction), scale=RATIO)
    x, y = (r + distance) * cos(direction) + 1e-4, (r + distance) * sin(direction) + 1e-4
    source = profile.source_position(x, y, scale=RATIO)
    exact = solve_images(profile, (float(source[0]), float(source[1])), FIELD, scale=RATIO)
    assert len(exact) == images
    point = local_solution(lens_map, sky(x, y))
    assert "near_cusp" in point.flags
    assert not point.linear_is_valid
    assert ("no_mirror_on_map" in point.flags) == (images == 1)
    assert point.mapped is not None
    depth = float(np.hypot(source[0] - tip[0], source[1] - tip[1])) * (1 if images == 3 else -1)
    # To the nearest vertex of the critical curve: the square of a pixel over the size of the lens.
    assert point.mapped.caustic_distance == pytest.approx(depth, rel=2e-3)
    assert (point.mirror_position is None) == (images == 1) == (point.pair_delay is None)


def test_magnification_falls_with_the_distance_ratio() -> None:
    """Outside the critical curve of the farthest source, nearer sources are magnified less."""
    profile = LENSES["NFW in shear"]
    ratios = [LensScales(0.5, z).D_ls / LensScales(0.5, z).D_s for z in (0.7, 1.0, 1.5, 3.0, 9.0)]
    mu = []
    for ratio in ratios:
        lam_t, lam_r = profile.eigenvalues(9.0, 3.0, scale=ratio)
        mu.append(float(1 / (lam_t * lam_r)))
    assert np.all(np.diff(ratios) > 0)
    assert np.all(np.diff(mu) > 0)
    assert mu[0] > 1
