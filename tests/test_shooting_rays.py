"""Rays on a grid: against straight summation and against the point-by-point evaluation of the same leaves."""

from __future__ import annotations

import numpy as np
import pytest
from twins import source_positions

from crossing.shooting.field import StarField
from crossing.shooting.rays import VECTOR, map_grid, scratch


def field(gradient=None, accuracy=1e-9, seed=2):
    rng = np.random.default_rng(seed)
    mass = rng.uniform(0.2, 2.0, 150)
    half = (20.0, np.pi * mass.sum() / (4 * 20 * 0.3))
    x, y = rng.uniform(-half[0], half[0], 150), rng.uniform(-half[1], half[1], 150)
    return StarField(x, y, mass, 0.5, 0.35, *half, gradient, accuracy=accuracy)


def grid(stars, tree, leaf, nx, ny, scale, part=1.0):
    """A grid over a share of a leaf: positions, and where they land."""
    size = 2 * part * tree.half[leaf]
    x0, y0 = tree.centre[leaf] - tree.half[leaf]
    dx, dy = size[0] / max(1, nx - 1), size[1] / max(1, ny - 1)
    room = (nx + VECTOR - 1) // VECTOR * VECTOR
    u, v = np.full((ny + 2, room + 3), np.nan), np.full((ny + 2, room + 3), np.nan)
    work = scratch(tree.real.shape[1], max(nx, ny))
    map_grid(stars.lens_numbers, tree.arrays, leaf, stars.stars, x0, y0, dx, dy, nx, ny, scale, work, u, v)
    assert np.isnan(u[ny:]).all()
    assert np.isnan(v[:, room:]).all()
    x, y = np.meshgrid(x0 + dx * np.arange(nx), y0 + dy * np.arange(ny))
    return x, y, u[:ny, :nx], v[:ny, :nx]


PLAIN = np.array([0.0, 0.0, 1.0])


@pytest.mark.parametrize("gradient", [None, 2e-3, (1e-3, -3e-3)])
def test_against_straight_summation(gradient):
    """Leaves inside and outside of the rectangle, with even and odd numbers of near stars; 1e-9 is asked for."""
    stars = field(gradient)
    tree = stars.tree((-30.0, 30.0, -12.0, 12.0))
    seen = set()
    for leaf in range(0, len(tree), 7):
        x, y, u, v = grid(stars, tree, leaf, 5, 4, PLAIN, 0.9)
        expected = source_positions(stars, x.ravel(), y.ravel())
        # Errors count against the deflection, which is of the order of one.
        assert u.ravel() == pytest.approx(expected[0], rel=1e-9, abs=1e-9)
        assert v.ravel() == pytest.approx(expected[1], rel=1e-9, abs=1e-9)
        seen.add((bool(tree.inside[leaf]), int(tree.near_start[leaf + 1] - tree.near_start[leaf]) % 2))
    assert seen == {(True, 0), (True, 1), (False, 0), (False, 1)}


@pytest.mark.parametrize("accuracy", [1e-2, 1e-6, 1e-9, 1e-13])
def test_same_as_point_by_point(accuracy):
    """Orders 16 to 48: only rounding differs, since both use the same series; 1e-12 of positions up to 20."""
    stars = field((1e-3, 2e-3), accuracy)
    tree = stars.tree((-20.0, 20.0, -stars.half_height, stars.half_height))  # what source_position asks for, too
    for leaf in range(0, len(tree), 29):
        x, y, u, v = grid(stars, tree, leaf, 9, 9, PLAIN, 0.999)
        expected = stars.source_position(x[1:, 1:], y[1:, 1:])
        assert u[1:, 1:] == pytest.approx(expected[0], rel=1e-12, abs=1e-11)
        assert v[1:, 1:] == pytest.approx(expected[1], rel=1e-12, abs=1e-11)


@pytest.mark.parametrize("shape", [(1, 1), (1, 7), (64, 1), (65, 65)])
def test_shapes_and_pixels(shape):
    """Positions in pixels are (u - low) * pixels per unit."""
    stars = field()
    tree = stars.tree((-20.0, 20.0, -9.0, 9.0))
    leaf = len(tree) // 2
    plain = grid(stars, tree, leaf, *shape, PLAIN)
    scaled = grid(stars, tree, leaf, *shape, np.array([-3.0, 2.0, 50.0]))
    assert scaled[2] == pytest.approx((plain[2] + 3.0) * 50, rel=1e-12, abs=1e-10)
    assert scaled[3] == pytest.approx((plain[3] - 2.0) * 50, rel=1e-12, abs=1e-10)


def test_smooth_map():
    """Without stars the map is the quadratic one of the definition, to rounding."""
    nothing = np.empty(0)
    smooth = StarField(nothing, nothing, nothing, 0.3, 0.2, 5.0, 5.0, (0.01, -0.02))
    tree = smooth.tree((-5.0, 4.0, -3.0, 6.0))
    x, y, u, v = grid(smooth, tree, 0, 8, 8, PLAIN)
    assert u == pytest.approx(0.5 * x + 0.005 * x**2 - 0.02 * x * y, rel=1e-13, abs=1e-13)
    assert v == pytest.approx(0.9 * y - 0.01 * x**2, rel=1e-13, abs=1e-13)
