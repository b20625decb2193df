"""Folds of random fields by the law of the shear: densities, lengths, rates and tails."""

from __future__ import annotations

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.optics.fold import fold_profile, profile_peak
from crossing.optics.local import LocalLens
from crossing.optics.random_fields import density_at_zero, tail_amplitude
from crossing.shooting.caustics.fold_ensemble import FoldEnsemble, fold_ensemble
from crossing.shooting.field import StarField
from crossing.shooting.tracks.track import track_crossings
from crossing.stars.mass_functions import Population, kroupa, single

MINIMUM, SADDLE = LocalLens(0.7975, 0.1975), LocalLens(0.8025, 0.2025)  # lam_t = +-0.005, lam_r = 0.4


def stars(kappa_star: float = 0.01, mass: float = 1.0) -> list[Population]:
    return [Population(kappa_star, single(mass))]


@pytest.fixture(scope="module")
def minimum() -> FoldEnsemble:
    return fold_ensemble(MINIMUM, stars())


@pytest.mark.parametrize(
    ("lens", "kappa_star"),
    [
        (MINIMUM, 0.01),
        (SADDLE, 0.01),
        (LocalLens(0.5, 0.2), 0.2),
        (LocalLens(0.2, 0.0), 0.2),
        (LocalLens(1.3, 0.1), 0.1),
    ],
)
def test_density_of_critical_points(lens: LocalLens, kappa_star: float) -> None:
    """Against the closed form by the law of Nityananda & Ostriker (1984); three errors of the mean of ten sets.

    Each set of 4096 is good to a tenth: a few surroundings with weak strongest stars count for many.
    """
    sets = [fold_ensemble(lens, stars(kappa_star), draws=4096, seed=seed).critical_density for seed in range(10)]
    exact = float(density_at_zero(lens.lam_t, lens.lam_r, kappa_star))
    assert abs(np.mean(sets) - exact) < 3 * np.std(sets, ddof=1) / np.sqrt(10)
    assert np.std(sets, ddof=1) < 0.12 * exact


@pytest.mark.parametrize("lens", [MINIMUM, SADDLE])
def test_moment_is_the_amplitude_of_the_tail(lens: LocalLens) -> None:
    """The integral of K**2 over the length is 2 <mu> p(det = 0): Schneider (1987); exact up to rounding."""
    found = fold_ensemble(lens, stars())
    moment = float((found.length * found.strength**2).sum())
    assert moment == pytest.approx(float(tail_amplitude(lens.lam_t, lens.lam_r, 0.01)), rel=1e-10)


@pytest.mark.parametrize(
    ("kappa_smooth", "kappa_star", "gamma", "length", "along_u", "along_v"),
    # Monte Carlo of 2.4e5 fields of 600 stars: length per area, crossings per theta_E along u and v, with errors.
    [
        (0.0, 0.2, 0.0, (0.329, 0.011), (0.209, 0.006), (0.209, 0.006)),
        (0.3, 0.2, 0.2, (1.114, 0.031), (0.820, 0.023), (0.600, 0.021)),
        (0.7875, 0.01, 0.1975, (15.8, 0.3), (14.7, 0.25), (3.4, 0.2)),
        (0.7925, 0.01, 0.2025, (17.3, 0.3), (16.3, 0.24), (3.3, 0.2)),
    ],
)
def test_lengths_and_rates(kappa_smooth, kappa_star, gamma, length, along_u, along_v) -> None:
    """Within three of the errors given, and 2% for the noise of the draws."""
    found = fold_ensemble(LocalLens(kappa_smooth + kappa_star, gamma), stars(kappa_star))
    rates = (found.total_length, found.crossings(0.0).sum(), found.crossings(np.pi / 2).sum())
    for value, (expected, error) in zip(rates, (length, along_u, along_v), strict=True):
        assert abs(value - expected) < 3 * error + 0.02 * expected


def test_mean_direction(minimum: FoldEnsemble) -> None:
    """Mean over directions is 2/pi of the length (a needle on lines); normals lie along u at such a place."""
    over = np.mean([minimum.crossings(angle).sum() for angle in np.linspace(0, np.pi, 64, endpoint=False)])
    assert minimum.crossings().sum() == pytest.approx(over, rel=1e-3)
    assert minimum.crossings(0.0).sum() / minimum.total_length == pytest.approx(0.94, abs=0.01)  # mean |n_u| on tracks


@pytest.mark.parametrize(
    ("lens", "measured"),
    # Ratio of P(>mu) to the bare law at mu = 3000, 4000, 5000, R = 2e-4: 20 tracks of 10 theta_E each, +-5%.
    [(MINIMUM, (1.48, 1.21, 0.99)), (SADDLE, (1.38, 1.27, 1.22))],
)
def test_tail_of_a_disc(lens: LocalLens, measured: tuple[float, ...]) -> None:
    """Within 15% of what was measured on tracks: backgrounds scatter about the mean that is taken here."""
    found = fold_ensemble(lens, stars())
    mu = np.array([3000.0, 4000.0, 5000.0])
    ratio = found.exceedance(mu, 2e-4) * mu**2 / tail_amplitude(lens.lam_t, lens.lam_r, 0.01)
    assert ratio == pytest.approx(np.array(measured), rel=0.15)


def test_exceedance_of_a_small_disc_is_the_law_above_the_background(minimum: FoldEnsemble) -> None:
    """A point has P(>mu) = C / (mu - background)**2; a disc of 1e-9 still has it at such magnifications, to 2e-3."""
    mu = np.array([2000.0, 5000.0, 10_000.0])
    law = tail_amplitude(MINIMUM.lam_t, MINIMUM.lam_r, 0.01) / (mu - minimum.background) ** 2
    assert minimum.exceedance(mu, 1e-9) == pytest.approx(law, rel=2e-3)


def test_exceedance_against_a_direct_sum(minimum: FoldEnsemble) -> None:
    """The width over which one fold's light exceeds a level, by counting fine steps: 1% of the sum."""
    radius, mu = 2e-4, 4000.0
    steps = np.geomspace(1e-3, 1e3, 20_001)
    edges = np.concatenate([np.linspace(-1, 1e-3, 2001)[:-1], steps])
    profile = np.asarray(fold_profile(0.5 * (edges[1:] + edges[:-1])))
    level = (mu - minimum.background) * np.sqrt(radius) / minimum.strength
    width = np.array([np.diff(edges)[profile > one].sum() for one in level]) * radius
    assert minimum.exceedance(mu, radius) == pytest.approx(float(width @ minimum.length), rel=0.01)


def test_rate_of_peaks(minimum: FoldEnsemble) -> None:
    radius = 1e-4
    peaks = minimum.background + minimum.strength * profile_peak(0.0).height / np.sqrt(radius)
    assert minimum.peaks(radius) == pytest.approx(peaks, rel=1e-12)
    found = minimum.crossing_rate([0.0, 3000.0, 1e9], radius, direction=0.0)
    assert found == pytest.approx([minimum.crossings(0.0).sum(), minimum.crossings(0.0)[peaks > 3000].sum(), 0.0])


def test_rate_and_strengths_against_tracks_through_fields_of_mixed_masses() -> None:
    """Crossings and their median strength along 24 tracks of 20 theta_E: within three errors, and 2% of the draws."""
    lens, mixed = LocalLens(0.79, 0.19), [Population(0.008, kroupa()), Population(0.004, single(20.0))]
    counts, strengths = [], []
    for seed in range(24):
        field = StarField.draw(lens.kappa, lens.gamma, None, (10.2, 0.2), populations=mixed, seed=seed)
        met = track_crossings(field, (-10.0, 0.0), (10.0, 0.0))
        counts.append(len(met) / 20.0)
        strengths.append(np.median(met.strength))
    found = fold_ensemble(lens, mixed)
    rate = found.crossings(0.0)
    error = np.std(counts, ddof=1) / np.sqrt(24)
    assert abs(rate.sum() - np.mean(counts)) < 3 * error + 0.02 * rate.sum()
    order = np.argsort(found.strength)
    median = found.strength[order][np.searchsorted(np.cumsum(rate[order]), 0.5 * rate.sum())]
    spread = np.std(strengths, ddof=1) / np.sqrt(24)
    assert abs(median - np.mean(strengths)) < 3 * spread + 0.02 * median


def test_lengths_scale_with_the_unit_of_mass() -> None:
    """All masses four times as large: lengths twice, so half the length of caustics per area."""
    one, four = (fold_ensemble(MINIMUM, stars(mass=mass)) for mass in (1.0, 4.0))
    assert four.length == pytest.approx(one.length / 2, rel=1e-10)
    assert four.strength == pytest.approx(one.strength * np.sqrt(2), rel=1e-10)


def test_the_same_numbers_give_the_same_folds(minimum: FoldEnsemble) -> None:
    again = fold_ensemble(MINIMUM, stars())
    assert np.array_equal(again.length, minimum.length)
    assert not np.array_equal(fold_ensemble(MINIMUM, stars(), seed=1).length[:50], minimum.length[:50])


def test_shown(minimum: FoldEnsemble) -> None:
    assert len(minimum.to_table()) == len(minimum)
    assert minimum.to_dict()["folds"] == len(minimum)
    assert minimum.plot().get_xscale() == "log"


def test_bad_arguments(minimum: FoldEnsemble) -> None:
    with pytest.raises(InputError, match="must hold stars"):
        fold_ensemble(MINIMUM, [])
    with pytest.raises(InputError, match="must not exceed kappa"):
        fold_ensemble(LocalLens(0.005, 0.0), stars())
    with pytest.raises(InputError, match="must have a finite magnification"):
        fold_ensemble(LocalLens(0.8, 0.2), stars())
    with pytest.raises(InputError, match="must be positive, got 0"):
        minimum.peaks(0.0)
    with pytest.raises(InputError, match="must exceed the background 500"):
        minimum.exceedance(400.0, 1e-4)
