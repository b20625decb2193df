"""The tail of a map's statistics: an ensemble of folds on a background, smeared over pixels.

A fold of strength K gives P(>mu) the width over which K/sqrt(d), averaged over a pixel, exceeds mu less the background.
With L(K) the length of caustics per area, the integral of L K^2 is the exact amplitude 2 <mu> p_J(0), which the
densities of the determinant in test_shooting_field.py confirm. Here L(K) is taken from the critical curves of the very
window of the map, so that no scatter between fields is left; what is left is that folds bend, end in cusps and overlap.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import pytest
from twins import density_at_zero

from crossing.shooting.field import StarField
from crossing.shooting.maps.mapping import magnification_map
from crossing.shooting.tree import evaluate


class Folds(NamedTuple):
    """Pieces of caustic: length per area of the window, strength, angle of the normal."""

    length: np.ndarray
    strength: np.ndarray
    angle: np.ndarray


def folds_of(field, half, step):
    """Pieces in a square window, from a grid of rays: each counts by a smooth delta function of the determinant.

    A critical curve's piece ds has the caustic's length 2 k |e.grad det|/|grad det| ds, with e its null direction, and
    K = sqrt(2/T)/(2 k), T = |e.grad det|/(2 k), where 2 k is the trace of the Jacobian.
    """
    wide, high = field.ray_region((half, half))
    tree = field.tree((-wide, wide, -high, high))
    k, gamma = 1 - field.kappa + field.kappa_star, field.gamma
    parts = []
    for rows in np.array_split(np.arange(-high, high, step), 20):
        x, y = (np.ascontiguousarray(item.ravel()) for item in np.meshgrid(np.arange(-wide, wide, step), rows))
        out = np.empty((x.size, 7))
        evaluate(x, y, tree.arrays, tree.roots, tree.root_node, tree.children, field.stars, out)
        _, _, a, b, c, d, _ = out.T
        det = (k - gamma - a) * (k + gamma + a) - b**2
        slope_x, slope_y = -2 * c * (gamma + a) - 2 * b * d, 2 * d * (gamma + a) - 2 * b * c
        slope = np.hypot(slope_x, slope_y)
        near = np.abs(det) < 1.5 * step * slope
        u, v = field.source_position(x[near], y[near])
        near[near] = (np.abs(u) < half) & (np.abs(v) < half)
        a, b, slope_x, slope_y, slope, det = (item[near] for item in (a, b, slope_x, slope_y, slope, det))
        one, two = k + gamma + a, -b
        other = np.abs(one) < np.abs(k - gamma - a)
        one[other], two[other] = b[other], -(k - gamma - a)[other]
        along = np.abs(one * slope_x + two * slope_y) / np.hypot(one, two)
        delta = (1 + np.cos(np.pi * det / slope / (1.5 * step))) / (3 * step)
        length = step**2 * delta * 2 * k * along / slope / (2 * half) ** 2
        parts.append((length, np.sqrt(4 * k / along) / (2 * k), np.arctan2(two, one)))
    return Folds(*(np.concatenate(item) for item in zip(*parts, strict=True)))


LEVELS = np.linspace(0.05, 1.8, 141)
ANGLES = np.linspace(0.0, np.pi / 4, 7)


def smeared_widths():
    """Width in pixels over which 1/sqrt(d), averaged over a turned pixel, exceeds a level, times level^2."""
    x = np.concatenate([np.linspace(-1.5, 5.0, 6501), np.geomspace(5.0, 500.0, 4000)[1:]])
    table = np.empty((len(ANGLES), len(LEVELS)))
    for row, angle in enumerate(ANGLES):
        a, b = np.cos(angle), max(np.sin(angle), 1e-3)
        # The second integral of 1/sqrt(d), differenced over the pixel's extent along both sides.
        second = [4 / 3 * np.maximum(x + s, 0.0) ** 1.5 for s in ((a + b) / 2, (a - b) / 2, (b - a) / 2, -(a + b) / 2)]
        mean = (second[0] - second[1] - second[2] + second[3]) / (a * b)
        table[row] = [np.gradient(x)[mean > level].sum() * level**2 for level in LEVELS]
    return table


def expected_tail(folds, table, excess, pixel):
    """P(mu > background + excess)."""
    level = excess * np.sqrt(pixel) / folds.strength
    turn = np.mod(folds.angle, np.pi / 2)
    row = np.rint(np.minimum(turn, np.pi / 2 - turn) / ANGLES[1]).astype(int)
    width = np.ones_like(level)
    for number in range(len(ANGLES)):
        width[row == number] = np.interp(level[row == number], LEVELS, table[number], left=1.0, right=0.0)
    return np.sum(folds.length * width * pixel / level**2)


# kappa, kappa_star, gamma, half size of the window, pixels along it.
CASES = [(0.2, 0.2, 0.0, 3.0, 6000), (0.5, 0.2, 0.2, 2.0, 4000)]


def measured_over_expected(case, seeds, levels, share=1):
    kappa, kappa_star, gamma, half, pixels = case
    table, found, expected, amplitude = smeared_widths(), 0.0, 0.0, []
    for seed in seeds:
        field = StarField.draw(kappa, gamma, kappa_star, half, seed=seed, lost_flux=0.02)
        chart = magnification_map(field, width=2 * half, pixels=pixels // share, accuracy=3e-3, error=False)
        found = found + chart.statistics(bins=levels).exceeding
        folds = folds_of(field, half, 0.01)
        amplitude.append(np.sum(folds.length * folds.strength**2))
        excess = levels - chart.expected_mean
        expected = expected + np.array([expected_tail(folds, table, one, chart.pixel_size) for one in excess])
    theory = 2 / abs((1 - kappa) ** 2 - gamma**2) * density_at_zero(kappa - kappa_star, kappa_star, gamma)
    return found / expected, np.mean(amplitude) / theory


def test_tail_of_one_map():
    """Levels from 6 to 16 times the mean magnification; the folds of this one window within 20%."""
    ratio, amplitude = measured_over_expected(CASES[0], [2], 1.5625 * np.array([6.0, 10.0, 16.0]), share=2)
    assert ratio == pytest.approx(1.0, abs=0.2)
    assert 0.5 < amplitude < 2  # one window holds a few caustics


@pytest.mark.slow
@pytest.mark.parametrize("case", CASES)
def test_tail_of_several_maps(case):
    """Within 10%, cusps and the spread of the background being what is left."""
    mean = 1 / abs((1 - case[0]) ** 2 - case[2] ** 2)
    ratio, amplitude = measured_over_expected(case, range(2, 8), mean * np.array([6.0, 10.0, 16.0]))
    assert ratio == pytest.approx(1.0, abs=0.1)
    assert amplitude == pytest.approx(1.0, abs=0.35)  # six small windows
