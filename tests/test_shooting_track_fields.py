"""Tracks over random fields: means, rates of crossings, tails, and the corrugated macro caustic."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from twins import lens

from crossing.optics.fold import fold_profile
from crossing.optics.random_fields import mean_magnification, tail_amplitude
from crossing.shooting.field import StarField
from crossing.shooting.maps.mapping import magnification_map
from crossing.shooting.tracks.track import track_crossings, track_magnification
from crossing.shooting.tracks.track_curve import TrackCurve

# kappa, gamma of mu = 833 on both sides, lam_r = 0.6.
SIDES = [(0.699, 0.299), (0.701, 0.301)]


def tracks(side: tuple[float, float], count: int, length: float, radius: list[float]) -> list[TrackCurve]:
    curves = []
    for seed in range(count):
        field = StarField.draw(*side, 0.01, (0.5 * length + 0.1, 0.1), seed=seed)
        curves.append(track_magnification(field, (-0.5 * length, 0.0), (0.5 * length, 0.0), radius, threads=1))
    return curves


def crossings_a_length(kappa: float, kappa_star: float, gamma: float, count: int, along_u: bool) -> tuple[float, float]:
    """Mean number of crossings per Einstein radius, and its standard error."""
    numbers = []
    for seed in range(count):
        half = (5.2, 0.2) if along_u else (0.2, 5.2)
        field = StarField.draw(kappa, gamma, kappa_star, half, seed=seed)
        end = (5.0, 0.0) if along_u else (0.0, 5.0)
        numbers.append(len(track_crossings(field, (-end[0], -end[1]), end)) / 10.0)
    return float(np.mean(numbers)), float(np.std(numbers) / np.sqrt(count - 1))


@pytest.mark.parametrize(
    ("cell", "along_u", "expected", "error"),
    # Monte Carlo over 20 tracks of 10 theta_E each, from another solver; the last two of more.
    [
        ((0.7875, 0.01, 0.1975), True, 14.7, 0.25),
        ((0.7875, 0.01, 0.1975), False, 3.4, 0.2),
        ((0.7925, 0.01, 0.2025), True, 16.3, 0.25),
        ((0.7925, 0.01, 0.2025), False, 3.3, 0.2),
        ((0.5, 0.2, 0.2), True, 0.820, 0.02),
        ((0.5, 0.2, 0.2), False, 0.600, 0.02),
    ],
)
def test_rate_of_crossings(cell: tuple[float, float, float], along_u: bool, expected: float, error: float) -> None:
    kappa, kappa_star, gamma = cell
    found, spread = crossings_a_length(kappa + kappa_star if kappa > 0.6 else kappa, kappa_star, gamma, 12, along_u)
    assert abs(found - expected) < 3.5 * np.hypot(spread, error)


@pytest.mark.parametrize("lam_t", [0.05, -0.05])
def test_a_curve_agrees_with_a_map_of_the_same_field(lam_t: float) -> None:
    field = StarField.draw(*lens(lam_t, 0.5), 0.05, (0.75, 0.35), seed=4)
    pixels = 256
    chart = magnification_map(field, width=0.5, pixels=pixels, accuracy=1e-3, threads=1)
    radius, share = 0.06, np.linspace(0.1, 0.9, 9)
    found = track_magnification(field, (-0.2, 0.03), (0.2, -0.05), radius, positions=share, threads=1)
    centre = (np.arange(pixels) + 0.5) / pixels * 0.5 - 0.25
    u, v = np.meshgrid(centre, centre)
    expected = []
    for one in share:
        # A soft rim, a pixel wide, for the pixels that it cuts.
        inside = np.clip((radius - np.hypot(u + 0.2 - 0.4 * one, v - 0.03 + 0.08 * one)) * pixels / 0.5 + 0.5, 0.0, 1.0)
        expected.append((chart.values * inside).sum() / inside.sum())
    # The map's own accuracy, that of the sums at the rim, and the flux that each leaves out.
    assert found.magnification == pytest.approx(expected, rel=4e-3)
    assert found.flags == ()


def test_gradient_tracks_at_any_angle_agree_with_a_map() -> None:
    # With a gradient w is not harmonic on tracks that are not along u, and no proof says that all images are found.
    kappa, gamma = lens(0.0, 0.6)
    field = StarField.draw(kappa, gamma, 0.02, (1.1, 1.1), gradient=(2e-3, 1e-3), seed=2)
    pixels = 200
    chart = magnification_map(field, width=2.0, pixels=pixels, accuracy=1e-3, threads=1)
    centre = (np.arange(pixels) + 0.5) / pixels * 2.0 - 1.0
    u, v = np.meshgrid(centre, centre)
    share = np.array([0.1, 0.4, 0.6, 0.9])
    for angle in (0.3, 1.2, np.pi / 2.0, 2.6):
        end = 0.7 * np.array([np.cos(angle), np.sin(angle)])
        found = track_magnification(field, tuple(-end), tuple(end), 0.2, positions=share, threads=1)
        assert found.flags == ()
        expected = []
        for one in share:
            at = (2.0 * one - 1.0) * end
            inside = np.clip((0.2 - np.hypot(u - at[0], v - at[1])) * pixels / 2.0 + 0.5, 0.0, 1.0)
            expected.append((chart.values * inside).sum() / inside.sum())
        assert found.magnification == pytest.approx(expected, rel=6e-3)


@pytest.mark.slow
@pytest.mark.parametrize("side", SIDES)
def test_mean_along_long_tracks(side: tuple[float, float]) -> None:
    # Discs side by side but for gaps: what is between them is as good a sample.
    means = []
    for seed in range(16):
        field = StarField.draw(*side, 0.01, (10.5, 0.3), seed=seed)
        found = track_magnification(
            field, (-10.0, 0.0), (10.0, 0.0), 1e-2, positions=np.linspace(0.0, 1.0, 2001), accuracy=3e-3, threads=1
        )
        assert found.flags == ()
        means.append(found.magnification.mean())
    theory = float(mean_magnification(1.0 - side[0] - side[1], 1.0 - side[0] + side[1]))
    error = np.std(means) / np.sqrt(len(means) - 1)
    assert error < 0.01 * theory
    assert abs(np.mean(means) - theory) < max(0.01 * theory, 2.5 * error)


@pytest.mark.slow
def test_mean_across_the_corrugated_caustic() -> None:
    kappa, gamma = lens(0.0, 0.6)
    gradient, means = 4.8e-7, []
    for seed in range(4):
        field = StarField.draw(kappa, gamma, 0.01, (60.0, 0.2), gradient=gradient, seed=seed)
        found = track_magnification(
            field, (5.0, 0.0), (60.0, 0.0), 1e-2, positions=np.linspace(0.0, 1.0, 3001), accuracy=3e-3, threads=1
        )
        assert found.flags == ()
        # The smooth pair, 2 mu_r / sqrt(2 g u), averaged over the track.
        smooth = 2.0 / 0.6 * np.sqrt(2.0 / gradient) * (np.sqrt(60.0) - np.sqrt(5.0)) / 55.0
        means.append(found.mean_magnification[0] / smooth)
    assert np.mean(means) == pytest.approx(1.0, abs=0.01)


def exceedance(curve: TrackCurve, row: int, level: float) -> float:
    """Share of a track on which the magnification is above a level, by straight lines."""
    x, y = curve.position, np.atleast_2d(curve.magnification)[row]
    low, high = np.minimum(y[1:], y[:-1]), np.maximum(y[1:], y[:-1])
    share = np.clip((high - level) / np.maximum(high - low, 1e-12), 0.0, 1.0)
    return float((np.diff(x) * np.where(low > level, 1.0, share)).sum())


def fold_ensemble(curves: list[TrackCurve], radius: float, level: float) -> float:
    """Share above a level if each crossing were a fold on its own background, from the crossings of the centre."""
    x = np.concatenate([np.linspace(-1.0, 6.0, 4001), np.geomspace(6.0, 1e4, 2000)[1:]])
    profile, share = fold_profile(x), 0.0
    step: NDArray[np.float64] = np.gradient(x)
    for curve in curves:
        folds = curve.crossings
        for strength, background, angle in zip(folds.strength, folds.background, folds.angle, strict=True):
            wide = (
                step[background + strength / np.sqrt(radius) * profile > level].sum()
                * radius
                / max(np.cos(angle), 0.01)
            )
            share += min(float(wide), 5.0) / curve.length
    return share / len(curves)


@pytest.mark.slow
@pytest.mark.parametrize("side", SIDES)
def test_tail_of_magnifications(side: tuple[float, float]) -> None:
    radii = [1e-3, 1e-4, 1e-6]
    curves = tracks(side, 12, 10.0, radii)
    theory = float(mean_magnification(1.0 - side[0] - side[1], 1.0 - side[0] + side[1]))
    for row, radius in enumerate(radii[:2]):
        level = 6.5 * theory
        found = float(np.mean([exceedance(curve, row, level) for curve in curves]))
        assert found == pytest.approx(fold_ensemble(curves, radius, level), rel=0.15)
    level = 60.0 * theory
    found = float(np.mean([exceedance(curve, 2, level) for curve in curves]))
    # Around the fold the background is some two means, which counts as (1 - 2/60)^-2.
    bare = float(tail_amplitude(1.0 - side[0] - side[1], 1.0 - side[0] + side[1], 0.01)) / level**2
    assert found == pytest.approx(bare, rel=0.25)
