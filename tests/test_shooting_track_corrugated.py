"""Tracks through the whole corrugated macro caustic, against the scalings of its network.

Venumadhav, Dai & Miralda-Escude (2017, ApJ 850, 49) and Oguri et al. (2018, PRD 97, 023518): where abs(lam_t), which
is sqrt(2 g u) at the distance u inside the macro caustic of a gradient g, is below kappa_star, the stars' caustics
overlap. The depth of that band is D = kappa_star^2 / (2 g), peaks in it are about mu_r kappa_star^(-3/4) R^(-1/2).
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from twins import lens

from crossing.optics.fold import profile_peak
from crossing.optics.peaks import saturated_peak
from crossing.shooting.field import StarField
from crossing.shooting.tracks.track import track_crossings, track_magnification

Array = NDArray[np.float64]

MU_R, GRADIENT = 1.0 / 0.6, 4.8e-6
OUTSIDE, INSIDE = 20.0, 60.0


def field_of(kappa_star: float, gradient: float, seed: int) -> StarField:
    return StarField.draw(*lens(0.0, 0.6), kappa_star, (INSIDE + 2.0, 0.1), gradient=gradient, seed=seed)


def crossings_of(kappa_star: float, gradient: float, count: int) -> tuple[list[Array], list[Array]]:
    """Places u and strengths of the crossings of some tracks."""
    found = [
        track_crossings(field_of(kappa_star, gradient, seed), (-OUTSIDE, 0.0), (INSIDE, 0.0)) for seed in range(count)
    ]
    return [one.place - OUTSIDE for one in found], [one.strength for one in found]


def rate(places: list[Array], low: float, high: float) -> tuple[float, float]:
    """Crossings per Einstein radius between two places, and the standard error from the scatter of tracks."""
    counts = np.array([((one > low) & (one <= high)).sum() / (high - low) for one in places])
    return float(counts.mean()), float(counts.std() / np.sqrt(len(counts) - 1))


# kappa_star, gradient, tracks: depths D of 10.4, 9.4, 9.4, 1.04 and 0.94 Einstein radii.
CELLS = [(0.01, GRADIENT, 24), (0.003, 4.8e-7, 24), (0.03, 4.8e-5, 24), (0.01, 4.8e-5, 100), (0.003, GRADIENT, 100)]
# Bins of u/D, and the rate times sqrt(kappa_star u/D) there: measured, of all cells together.
SCALED = [(0.1, 0.3, 1.59), (0.3, 1.0, 1.57), (1.0, 2.5, 1.42), (2.5, 6.0, 1.25), (6.0, 16.0, 1.03), (16.0, 50.0, 0.78)]


@pytest.mark.slow
@pytest.mark.parametrize(("kappa_star", "gradient", "count"), CELLS)
def test_depth_of_the_band_and_strengths(kappa_star: float, gradient: float, count: int) -> None:
    depth = kappa_star**2 / (2.0 * gradient)
    places, strengths = crossings_of(kappa_star, gradient, count)
    for low, high, expected in SCALED:
        # Deflections smear the caustic by some tenths of an Einstein radius.
        if low * depth < 0.6 or high * depth > INSIDE:
            continue
        found, error = rate(places, low * depth, high * depth)
        scale = np.sqrt(kappa_star) * (low * high) ** 0.25
        # One function of u/D for all: beside lam_r, and in deflections, kappa_star counts to some percent.
        assert abs(found * scale - expected) < 0.06 * expected + 3.0 * error * scale
        # Isolated stars: (4/pi) kappa_star / lam_t^(3/2) on the side of minima, 0.685 times that on that of saddles
        # (Chang & Refsdal 1984, lam_t << lam_r). They are too many by 2.1 to 1.6 in the band, by 1.2 far inside.
        isolated = 1.685 * 4.0 / np.pi * (low * high) ** (-3.0 / 8.0) / np.sqrt(kappa_star)
        assert 1.05 < isolated / found < 2.2
    place, strength = np.concatenate(places), np.concatenate(strengths)
    assert place.min() > -2.0
    inside = (place > 0.6) & (place < max(depth, 1.5))
    scaled = strength[inside] / (MU_R * kappa_star**-0.75)
    # The scaling is that of a star's strongest fold: the median crossing has a third of it, one in six 0.8 of it.
    assert 0.25 < np.median(scaled) < 0.42
    assert 0.65 < np.percentile(scaled, 84.0) < 1.0


@pytest.mark.slow
def test_band_ends_where_the_rate_falls_faster() -> None:
    # In the band the rate goes as u^-1/2, with the mean magnification; far inside it as u^-3/4.
    places, _ = crossings_of(0.01, GRADIENT, 24)
    depth = 0.01**2 / (2.0 * GRADIENT)
    flat = rate(places, 0.8, 0.35 * depth)[0] / rate(places, 0.35 * depth, depth)[0]
    smooth = (np.sqrt(0.35 * depth) - np.sqrt(0.8)) / (0.35 * depth - 0.8)
    smooth /= (np.sqrt(depth) - np.sqrt(0.35 * depth)) / (0.65 * depth)
    assert flat == pytest.approx(smooth, rel=0.1)
    shallow, _ = crossings_of(0.01, 10.0 * GRADIENT, 60)
    ratio = rate(shallow, 6.0, 15.0)[0] / rate(shallow, 24.0, 60.0)[0]
    slope = np.log(ratio) / np.log(4.0)
    assert slope == pytest.approx(0.75, abs=0.12)


@pytest.mark.slow
def test_peaks_of_discs() -> None:
    kappa_star, height = 0.01, profile_peak(0.0).height
    radii, quantiles = (1e-4, 1e-5), []
    for radius in radii:
        peaks, expected, means = [], [], []
        for seed in range(4):
            curve = track_magnification(
                field_of(kappa_star, GRADIENT, seed), (-OUTSIDE, 0.0), (INSIDE, 0.0), radius, accuracy=1e-2, threads=1
            )
            assert curve.flags == ()
            u, folds = curve.position * (OUTSIDE + INSIDE) - OUTSIDE, curve.crossings
            for place, angle in zip(folds.place - OUTSIDE, folds.angle, strict=True):
                first, last = np.searchsorted(u, place + np.array([-1.2, 1.2]) * radius / max(np.cos(angle), 0.05))
                peaks.append(curve.magnification[first : last + 1].max())
            expected.append(folds.background + height * folds.strength / np.sqrt(radius))
            # Outside of the caustic hardly any light is left.
            assert curve.magnification[u < -3.0].max() < 20.0
            inside = u > 1.0
            smooth = 2.0 * MU_R / np.sqrt(2.0 * GRADIENT) * 2.0 * (np.sqrt(INSIDE) - 1.0) / (INSIDE - 1.0)
            means.append(np.trapezoid(curve.magnification[inside], u[inside]) / (u[-1] - u[inside][0]) / smooth)
        assert np.mean(means) == pytest.approx(1.0, abs=0.03)
        scaled = np.percentile(peaks, [50.0, 84.0]) / float(saturated_peak(radius, kappa_star, 0.6))
        quantiles.append(scaled)
        # Peaks are those of the folds that the centre meets, one by one.
        for share in (16.0, 50.0, 84.0):
            assert np.percentile(peaks, share) == pytest.approx(
                np.percentile(np.concatenate(expected), share), rel=0.03
            )
        # 0.45 is 1.39, the height of a disc's peak, times the median strength; 84% is where the scaling is.
        assert 0.35 < scaled[0] < 0.6
        assert 0.9 < scaled[1] < 1.3
    # R^-1/2, but for the background, which counts the more the larger the disc.
    assert quantiles[1] == pytest.approx(quantiles[0], rel=0.15)
    assert (quantiles[1] < quantiles[0]).all()
