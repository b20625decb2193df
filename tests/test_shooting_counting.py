"""Counting rays: against a plain histogram of rays that were mapped by straight summation."""

from __future__ import annotations

import numpy as np
import pytest
from twins import lens, source_positions

from crossing.shooting.field import StarField
from crossing.shooting.maps.counting import count_leaves
from crossing.shooting.maps.mapping import magnification_map
from crossing.stars.mass_functions import kroupa

REGION = (-6.0, 7.0, -5.0, 4.0)


def lattice(step, low, high):
    """Half-integer multiples of the step in a range."""
    number = np.arange(np.floor(low / step) - 1, np.ceil(high / step) + 1) + 0.5
    return number[(number * step >= low) & (number * step < high)] * step


def count(field, steps, low, pixel, shape, region=REGION):
    tree = field.tree(region)
    out, tally = np.zeros(shape), np.zeros(3)
    scale = np.array([*low, 1 / pixel])
    count_leaves(np.arange(len(tree)), field.lens_numbers, tree.arrays, field.stars, scale, *steps, out, tally)
    return out, tally[0]


@pytest.mark.parametrize("steps", [(0.31, 0.31), (0.137, 0.137), (0.4, 0.05)])
def test_against_a_histogram(steps):
    """The same rays in the same pixels; one in a million may sit on a pixel's side, here none does."""
    field = StarField.draw(0.4, 0.3, 0.3, 1.0, kroupa(), seed=6)
    field = StarField(field.x, field.y, field.mass, 0.4, 0.3, field.half_width, field.half_height, (0.01, -0.02))
    found, rays = count(field, steps, (-3.0, -2.0), 0.4, (10, 15))
    x, y = np.meshgrid(lattice(steps[0], *REGION[:2]), lattice(steps[1], *REGION[2:]))
    assert rays == x.size
    u, v = source_positions(field, x.ravel(), y.ravel())
    expected, _, _ = np.histogram2d(v, u, bins=[-2.0 + 0.4 * np.arange(11), -3.0 + 0.4 * np.arange(16)])
    assert np.array_equal(found, expected)
    assert 0 < found.sum() < rays


def test_every_ray_is_counted():
    """A hot pixel that nothing misses."""
    field = StarField.draw(0.4, 0.3, 0.3, 1.0, kroupa(), seed=6)
    found, rays = count(field, (0.05, 0.04), (-1e9, -1e9), 2e9, (1, 1))
    assert found[0, 0] == rays == len(lattice(0.05, *REGION[:2])) * len(lattice(0.04, *REGION[2:]))


def test_leaves_narrower_than_the_lattice_and_tiles_wider():
    """Leaves around stars may hold no ray at all; a star-free leaf holds many tiles of them."""
    field = StarField([0.1, 0.1], [0.2, 0.20001], [1.0, 1.0], 0.5, 0.2, 5.0, 5.0, sheet=False)
    for step in (3.0, 0.004):
        _, rays = count(field, (step, step), (-1.0, -1.0), 0.1, (20, 20), (-2.0, 2.0, -2.0, 2.0))
        assert rays == len(lattice(step, -2.0, 2.0)) ** 2


def test_constant_magnification():
    """1/(lam_t lam_r) in every pixel, within the one row and column of rays that a lattice may gain or lose."""
    field = StarField(np.empty(0), np.empty(0), np.empty(0), *lens(0.7, 0.3), 1.0, 1.0)
    found = magnification_map(field, width=2.0, pixels=20, method="rays", rays_per_pixel=1e4)
    assert found.values == pytest.approx(1 / 0.21, rel=0.03)
    assert found.mean_magnification == pytest.approx(1 / 0.21, rel=2e-3)
    assert np.all(found.error > 0)


def test_stretched_images():
    """At lam_t = 0.002 a pixel's image is 300 times longer than high: rows of a square lattice would miss whole pixels.

    Poisson's error of 100 rays is 10%, and a lattice does better.
    """
    field = StarField(np.empty(0), np.empty(0), np.empty(0), *lens(0.002, 0.6), 1.0, 1.0)
    found = magnification_map(field, width=4.0, pixels=40, method="rays", rays_per_pixel=100)
    assert found.values == pytest.approx(1 / 0.0012, rel=0.3)
    assert np.std(found.values) * 0.0012 < 0.1
