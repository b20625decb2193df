"""Laying triangles over pixels: against polygon clipping, smooth maps in closed form, and not one ray's area lost."""

from __future__ import annotations

import numpy as np
import pytest
from twins import cover, lens, one_star_images

from crossing.shooting.field import StarField
from crossing.shooting.maps.area import deposit_leaves
from crossing.shooting.maps.edges import add_edge, add_points, running_sum
from crossing.shooting.maps.mapping import magnification_map
from crossing.stars.mass_functions import kroupa

NOTHING = np.empty(0)


def lay(points, rows, columns, weight=1.0):
    """A polygon's edges, summed up along the rows."""
    buffer, out = np.zeros((rows, columns + 1)), np.empty((rows, columns))
    for (x0, y0), (x1, y1) in zip(points, [*points[1:], points[0]], strict=True):
        add_edge(buffer, x0, y0, x1, y1, weight)
    running_sum(buffer, out, 1.0)
    return out


def oriented(triangle):
    """+1 if the corners run from x towards y, else -1."""
    (ax, ay), (bx, by), (cx, cy) = triangle
    return np.sign((bx - ax) * (cy - ay) - (cx - ax) * (by - ay))


@pytest.mark.parametrize("spread", [0.3, 3.0, 30.0])
def test_triangles_against_clipping(spread):
    """Inside pixels, over many, over the window's sides and all of it: exact but for rounding, 1e-13 per unit."""
    rng = np.random.default_rng(1)
    for _ in range(200):
        triangle = rng.uniform(-1, 6, 2) + rng.uniform(-spread, spread, (3, 2))
        found = lay([tuple(point) for point in triangle], 4, 5)
        assert found == pytest.approx(oriented(triangle) * cover(triangle, 4, 5), abs=1e-12)


@pytest.mark.parametrize(
    "triangle",
    [
        [(1, 1), (3, 1), (1, 3)],  # on pixel corners, level and upright edges
        [(0, 0), (5, 0), (5, 4)],  # along the window's sides
        [(2, 0), (2, 4), (4, 2)],
        [(-3, 2), (8, 2), (2, 9)],  # level edge through the window
        [(-1, -1), (-1, 9), (-2, 3)],  # beside the window
        [(9, 0), (9, 9), (7, 3)],
        [(1, -5), (3, -5), (2, -1)],
        [(1.5, 1.5), (1.5, 1.5), (3, 3)],  # no area
    ],
)
def test_triangles_on_the_lattice(triangle):
    for turn in (triangle, triangle[::-1]):
        assert lay(turn, 4, 5) == pytest.approx(oriented(turn) * cover(np.array(turn), 4, 5), abs=1e-14)


def test_neighbours_leave_no_gap():
    """A fan of triangles around a point covers its outline once, whatever lies in between."""
    rng = np.random.default_rng(4)
    outline = [(0.3, 0.2), (5.7, 0.1), (6.2, 4.9), (-0.5, 5.3)]
    for _ in range(20):
        middle = tuple(rng.uniform(-9, 9, 2))
        fan = sum(lay([outline[i], outline[(i + 1) % 4], middle], 6, 6) for i in range(4))
        assert fan == pytest.approx(lay(outline, 6, 6), abs=1e-13)


def test_degenerate_triangles_keep_their_area():
    """Points along the longest side; what is beside the window is left out."""
    buffer, out = np.zeros((4, 6)), np.empty((4, 5))
    for corners in ((0.5, 0.5, 4.5, 3.5, 2.5, 2.0), (2.5, 2.0, 0.5, 0.5, 4.5, 3.5), (4.5, 3.5, 2.5, 2.0, 0.5, 0.5)):
        buffer[:] = 0.0
        add_points(buffer, *corners, 3.0)
        running_sum(buffer, out, 1.0)
        assert out.sum() == pytest.approx(3.0, rel=1e-15)
        assert out.max() < 1.2  # three or four pixels share it
    buffer[:] = 0.0
    add_points(buffer, -4.0, 1.5, 4.0, 1.5, 0.0, 1.5, 3.4)
    running_sum(buffer, out, 1.0)
    assert out.sum() == pytest.approx(9 * 0.2, rel=1e-15)  # 17 points, 9 of them at 0 or to the right
    assert np.count_nonzero(out.sum(axis=1)) == 1


def test_running_sum_scales():
    out = np.empty((2, 3))
    running_sum(np.array([[1.0, -2.0, 3.0, 9.0], [0.0, 1.0, 1.0, 9.0]]), out, 2.0)
    assert np.array_equal(out, [[2.0, -2.0, 4.0], [0.0, 2.0, 4.0]])


SMOOTH = [(0.7, 0.3), (0.2, 0.4), (-0.05, 0.4), (-0.5, -0.3), (0.002, 0.4), (-0.3, 0.02)]


@pytest.mark.parametrize(("lam_t", "lam_r"), SMOOTH)
def test_constant_magnification(lam_t, lam_r):
    """1/|lam_t lam_r| in every pixel: a linear map is what triangles stand for."""
    field = StarField(NOTHING, NOTHING, NOTHING, *lens(lam_t, lam_r), 1.0, 1.0)
    found = magnification_map(field, center=(3.0, -1.0), width=2.0, pixels=30, height=1.0)
    assert found.values == pytest.approx(1 / abs(lam_t * lam_r), rel=1e-10)
    assert found.error_estimate < 1e-10


FOLDS = [
    (0.0, 1e-3, 0.0, 10.0),
    (0.02, 1e-3, 100.0, 10.0),  # far inside
    (0.03, -1e-3, 0.0, 10.0),  # near the window's right side
    (0.0, 1e-5, 0.0, 60.0),
    (0.01, 0.1, 1.0, 4.0),
]


@pytest.mark.parametrize(("lam_t", "gradient", "middle", "width"), FOLDS)
def test_smooth_fold(lam_t, gradient, middle, width):
    """Pixel means of a quadratic map: u has the images x = (-lam_t +- sqrt(lam_t^2 + 2 g u)) / g, both counted.

    A thousandth is asked for as rms; pixels of the fold and their neighbours may be three times off.
    """
    field = StarField(NOTHING, NOTHING, NOTHING, *lens(lam_t, 0.4), 1.0, 1.0, gradient)
    found = magnification_map(field, center=(middle, 0.0), width=width, pixels=47)
    edges = np.linspace(middle - width / 2, middle + width / 2, 48)
    root = np.sqrt(np.maximum(lam_t**2 + 2 * gradient * edges, 0.0)) / abs(gradient)
    expected = 2 * np.abs(np.diff(root)) / np.diff(edges) / 0.4
    dark = expected == 0
    assert np.max(np.abs(found.values[:, dark]), initial=0.0) < 1e-9 * expected.max()
    ratio = found.values[:, ~dark] / expected[~dark]
    assert np.sqrt(np.mean((ratio - 1) ** 2)) < 1.2e-3
    assert np.max(np.abs(ratio - 1)) < 3e-3
    assert found.images == 2


def arrived(field, leaves, low, pixel, rows, columns, spacing=0.2):
    """Image area that is laid down in a window."""
    tree = field.tree((-20.0, 30.0, -11.0, 12.0))
    buffer, tally, out = np.zeros((rows, columns + 1)), np.zeros(3), np.empty((rows, columns))
    scale = np.array([*low, 1 / pixel])
    deposit_leaves(leaves, field.lens_numbers, tree.arrays, field.stars, scale, spacing, 1e-3, 5.0, buffer, tally)
    running_sum(buffer, out, pixel**2)
    assert out.min() > -1e-9
    assert tally[2] == 0
    return out.sum()


@pytest.mark.parametrize(("pixel", "rows", "columns"), [(200.0, 1, 1), (0.5, 400, 400), (1.7, 118, 118)])
def test_all_area_arrives(pixel, rows, columns):
    """A hot pixel that gets everything, and windows that nothing misses: the leaves' area, to 3e-12: rounding of 1e-16.

    Leaves next to a star are left out, whose images have no bounds.
    """
    field = StarField.draw(0.4, 0.4, 0.4, 3.0, kroupa(), seed=3)
    tree = field.tree((-20.0, 30.0, -11.0, 12.0))
    away = np.abs(np.stack(field.stars[:2])[:, None] - tree.centre.T[:, :, None]) - tree.half.T[:, :, None]
    clear = np.flatnonzero(np.hypot(*np.maximum(away, 0.0)).min(axis=1) > 0.05)
    assert len(clear) > 100
    expected = np.sum(4 * tree.half[clear, 0] * tree.half[clear, 1])
    assert arrived(field, clear, (-100.0, -100.0), pixel, rows, columns) == pytest.approx(expected, rel=3e-12)


def test_stars_lose_only_what_they_throw_out():
    """Around each star the area inside mass / distance misses the window: pi (mass / 500)^2 or so of it each."""
    field = StarField.draw(0.4, 0.4, 0.4, 3.0, kroupa(), seed=3)
    tree = field.tree((-20.0, 30.0, -11.0, 12.0))
    found = arrived(field, np.arange(len(tree)), (-500.0, -500.0), 10.0, 100, 100)
    x, y, mass = field.stars
    inside = (x > -20) & (x < 30) & (y > -11) & (y < 12)
    lost = np.pi * np.sum((mass[inside] / 500) ** 2)
    assert lost / 2 < 50 * 23 - found < lost


def test_tiny_windows_far_from_large_leaves():
    """A window a million times smaller than the leaf that it is seen through once ran over the stack of tiles."""
    field = StarField([0.0], [0.0], [1.0], 0.7, 0.2, 10.0, 10.0, sheet=False)
    images = one_star_images(3.0, 1.0, 0.1, 0.5)
    for width in (1e-3, 1e-6):
        found = magnification_map(field, center=(3.0, 1.0), width=width, pixels=2)
        assert found.values == pytest.approx(np.abs(images.magnification).sum(), rel=2e-3)
