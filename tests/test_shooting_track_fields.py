"""Tracks over random fields: means, rates of crossings, maps of the same field."""

from __future__ import annotations

import numpy as np
import pytest
from twins import lens

from crossing.optics.random_fields import mean_magnification
from crossing.shooting.field import StarField
from crossing.shooting.maps.mapping import magnification_map
from crossing.shooting.tracks.track import track_crossings, track_magnification

# kappa, gamma of mu = 833 on both sides, lam_r = 0.6.
SIDES = [(0.699, 0.299), (0.701, 0.301)]


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


def test_turns_next_to_a_cusp_are_told_apart() -> None:
    # Regression only: pairs of folds within one step of a curve were passed over, 8% off beside this cusp.
    field = StarField.draw(*lens(0.005, 0.4), 0.01, (5.1, 0.1), seed=13)
    places = [0.38748236801, 0.38748241801]
    coarse, fine = (
        track_magnification(field, (-5.0, 0.0), (5.0, 0.0), 2e-5, positions=places, accuracy=one, threads=1)
        for one in (1e-2, 1e-5)
    )
    assert coarse.flags == fine.flags == ()
    assert coarse.magnification == pytest.approx(fine.magnification, rel=1e-2)


def test_stars_next_to_the_edges_of_boxes_are_no_fault() -> None:
    # Regression only: their curves left a box and came back, and were counted twice or missed (61 boxes here).
    field = StarField.draw(0.4, 0.4, 0.4, (0.6, 0.1), seed=1)
    found = track_magnification(field, (-0.5, 0.0), (0.5, 0.0), 1e-2, positions=np.linspace(0.0, 1.0, 50), threads=1)
    assert found.flags == ()


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
