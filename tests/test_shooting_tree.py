"""Local series of far stars: against straight summation, the leaves as a partition, odd arrangements of stars."""

from __future__ import annotations

import numpy as np
import pytest
from twins import conjugate_sums, sheet_part

from crossing.shooting.sheet import sheet_deflection
from crossing.shooting.tree import BLOCK, RATIO, build_tree, evaluate, order_for


def draw(count, aspect, seed=0, kappa_star=0.1):
    """Stars of unequal masses in a rectangle, `aspect` times wider than high."""
    rng = np.random.default_rng(seed)
    mass = rng.uniform(0.1, 1.9, count)
    half_height = np.sqrt(np.pi * mass.sum() / kappa_star / aspect) / 2
    half_width = half_height * aspect
    stars = (rng.uniform(-half_width, half_width, count), rng.uniform(-half_height, half_height, count), mass)
    return stars, (half_width, half_height, kappa_star)


def points(sheet, count, seed=1):
    """Some inside the rectangle, some around it."""
    rng = np.random.default_rng(seed)
    x = np.concatenate([rng.uniform(-1, 1, count), rng.uniform(-2, 2, count)]) * sheet[0]
    y = np.concatenate([rng.uniform(-1, 1, count), rng.uniform(-3, 3, count)]) * sheet[1]
    return x, y


def values(tree, stars, x, y):
    """(3, n) conjugate deflection and two derivatives, and the leaves."""
    out = np.empty((len(x), 7))
    evaluate(x, y, tree.arrays, tree.roots, tree.root_node, tree.children, stars, out)
    return np.ascontiguousarray(out[:, :6]).view(np.complex128).T, out[:, 6].astype(int)


def grow(stars, sheet, accuracy=1e-6, region=None):
    return build_tree(
        *stars, sheet, region or (-2 * sheet[0], 2 * sheet[0], -3 * sheet[1], 3 * sheet[1]), order_for(accuracy)
    )


def test_order_follows_the_bound():
    assert [order_for(accuracy) for accuracy in (1e-6, 1e-9, 1e-30)] == [24, 32, 64]
    for accuracy in (1e-2, 1e-4, 1e-6, 1e-9, 1e-12):
        order = order_for(accuracy)
        assert order % BLOCK == 0
        assert 0.5 * order * (order - 1) * RATIO ** (2 - order) <= accuracy


@pytest.mark.parametrize("accuracy", [1e-6, 1e-9])
@pytest.mark.parametrize("aspect", [1, 200])
@pytest.mark.parametrize("count", [10, 1000, pytest.param(100_000, marks=pytest.mark.slow)])
def test_against_straight_summation(count, aspect, accuracy):
    """Errors of all three, at 200 points, are below what was asked for, as the bound says."""
    stars, sheet = draw(count, aspect)
    x, y = points(sheet, 100)
    expected = conjugate_sums(x, y, stars)
    wide = (-2 * sheet[0], 2 * sheet[0], -3 * sheet[1], 3 * sheet[1])
    bare, _ = values(build_tree(*stars, None, wide, order_for(accuracy)), stars, x, y)
    assert np.max(np.abs(bare / expected - 1)) < accuracy
    rest, left = less_sheet(grow(stars, sheet, accuracy), stars, sheet, x, y)
    assert np.max(np.abs(rest - left) / scale(left)) < accuracy


def test_a_hundred_thousand_stars():
    """The quick one of the four cases above with as many."""
    stars, sheet = draw(100_000, 200)
    rest, left = less_sheet(grow(stars, sheet), stars, sheet, *points(sheet, 30))
    assert np.max(np.abs(rest - left) / scale(left)) < 1e-6


def less_sheet(tree, stars, sheet, x, y):
    """Value and two derivatives of what the sheet leaves: by series, and by straight summation; (3, n) each."""
    found, leaf = values(tree, stars, x, y)
    inside = tree.inside[leaf]
    assert np.array_equal(inside, (np.abs(x) < sheet[0]) & (np.abs(y) < sheet[1]))
    found[0] -= sheet[2] * inside * (x - 1j * y)
    one, two = sheet_deflection(x, y, *sheet)
    left = conjugate_sums(x, y, stars)
    left[0] -= one - 1j * two
    left[1:] -= sheet[2] * sheet_part(x, y, *sheet[:2])
    return found, left


def scale(left):
    """What errors are relative to: the value itself, or its median size where stars and sheet nearly cancel."""
    return np.maximum(np.abs(left), np.median(np.abs(left), axis=1, keepdims=True))


@pytest.mark.parametrize("aspect", [1, 200])
def test_leaves_fill_the_region_and_list_all_near_stars(aspect):
    stars, sheet = draw(300, aspect)
    tree = grow(stars, sheet)
    assert np.sum(4 * tree.half[:, 0] * tree.half[:, 1]) == pytest.approx(4 * 2 * sheet[0] * 3 * sheet[1], rel=1e-12)
    x, y = points(sheet, 500)
    _, leaf = values(tree, stars, x, y)
    assert np.all(np.abs(x - tree.centre[leaf, 0]) <= tree.half[leaf, 0] * (1 + 1e-12))
    assert np.all(np.abs(y - tree.centre[leaf, 1]) <= tree.half[leaf, 1] * (1 + 1e-12))
    distance = np.hypot(stars[0][:, None] - tree.centre[:, 0], stars[1][:, None] - tree.centre[:, 1])
    near = distance < RATIO * np.hypot(*tree.half.T)
    assert np.array_equal(near.sum(axis=0), np.diff(tree.near_start))
    for number in range(0, len(tree), 97):
        listed = tree.near[tree.near_start[number] : tree.near_start[number + 1]]
        assert sorted(listed) == list(np.flatnonzero(near[:, number]))


def test_outside_of_the_region_there_is_no_leaf():
    stars, sheet = draw(20, 1)
    tree = grow(stars, sheet, region=(-1.0, 2.0, -1.0, 1.0))
    _, leaf = values(tree, stars, np.array([-1.0, 2.0, 2.1, -1.1, 0.0]), np.array([1.0, -1.0, 0.0, 0.0, 1.5]))
    assert np.array_equal(leaf >= 0, [True, True, False, False, False])


def test_cost_is_linear_in_the_stars():
    """Leaves and near stars per star do not grow: a few leaves, each with a few stars."""
    leaves = []
    for count in (300, 3000, 30000):
        stars, sheet = draw(count, 4)
        tree = grow(stars, sheet, region=(-sheet[0], sheet[0], -sheet[1], sheet[1]))
        leaves.append(len(tree) / count)
        assert len(tree.near) / len(tree) < 8
    assert max(leaves) < 6
    assert tree.nbytes < 3000 * 30000


def check(stars, sheet, x, y, accuracy=1e-9):
    tree = grow(stars, sheet, accuracy)
    found, left = less_sheet(tree, stars, sheet, x, y)
    assert np.max(np.abs(found - left) / scale(left)) < accuracy
    return tree


def test_no_star_at_all():
    nothing = np.empty(0)
    tree = build_tree(nothing, nothing, nothing, None, (-1.0, 1.0, -2.0, 2.0), 8)
    assert len(tree) == 1
    out, leaf = values(tree, (nothing, nothing, nothing), np.array([0.3]), np.array([-1.5]))
    assert np.array_equal(out, np.zeros((3, 1)))
    assert leaf == 0


@pytest.mark.parametrize("count", [2, 5, 40])
def test_stars_on_top_of_one_another(count):
    """No cut parts them; the cells around them still end."""
    stars = (np.full(count, 0.3), np.full(count, -0.2), np.linspace(1, 2, count))
    sheet = (4.0, 3.0, np.pi * stars[2].sum() / 48)
    x, y = points(sheet, 50)
    x[0], y[0] = 0.3 + 1e-7, -0.2
    tree = check(stars, sheet, x, y)
    assert len(tree) < 5000


def test_close_pairs_and_unequal_masses():
    """Separations down to 1e-9 and masses from 1e-3 to 1e3."""
    rng = np.random.default_rng(5)
    x, y, mass = rng.uniform(-5, 5, 40), rng.uniform(-3, 3, 40), 10 ** rng.uniform(-3, 3, 40)
    stars = (np.concatenate([x, x + 1e-9]), np.concatenate([y, y]), np.concatenate([mass, mass[::-1]]))
    sheet = (5.1, 3.1, np.pi * stars[2].sum() / (4 * 5.1 * 3.1))
    check(stars, sheet, *points(sheet, 100))


def test_stars_on_edges_corners_and_points_beside_them():
    a, b = 3.0, 2.0
    stars = (np.array([a, -a, a, 0.0, a, -a, 1.0]), np.array([b, -b, 0.0, b, -b, b, 1.0]), np.full(7, 1.0))
    sheet = (a, b, np.pi * 7 / (4 * a * b))
    corners = np.array([(a, b), (-a, b), (a, -b), (a, 0), (0, b), (-a, 0.3)])
    for offset in (1e-3, 1e-6):
        for way in ((1, 1), (1, -1), (-1, 1), (-1, -1)):
            check(stars, sheet, *(corners + offset * np.array(way)).T)
