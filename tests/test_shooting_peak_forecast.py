"""Forecasts of peaks: published worked numbers from event files, statistics of crossings, what is left out and why."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.event import Event, read_event
from crossing.optics.scales import LensScales
from crossing.shooting.peaks.peak_crossings import CrossingSample, pool_runs, weighted_quantiles
from crossing.shooting.peaks.peak_forecast import MAGNIFICATIONS, RADII_RSUN, forecast_peaks
from crossing.shooting.peaks.peak_lens import macro_choices, typical_mass
from crossing.shooting.peaks.peak_result import FLAGS, PeakForecast
from crossing.shooting.tracks.track_curve import Crossings
from crossing.stars.mass_functions import Population, kroupa, single

Writer = Callable[..., Event]

SADDLE = "[macro]\nmu_t = -100\nmu_r = 3\n"
ICARUS = "[lens]\nredshift = 0.544\n[source]\nredshift = 1.49\n"
HALF = "[lens]\nredshift = 0.5\n[source]\nredshift = 1.5\n"
STARS = '[[microlenses]]\nkappa_star = {}\nmass_function = "single"\nmean_mass = "{} solMass"\n'
FAST = '[motion]\nspeed = "1000 km / s"\nangle = "0 deg"\n'


@pytest.fixture
def event(tmp_path: Path) -> Writer:
    def write(*parts: str) -> Event:
        path = tmp_path / "event.toml"
        path.write_text('[event]\nname = "knot"\n' + "".join(parts))
        return read_event(path)

    return write


def told(strength: Any, **given: Any) -> Crossings:
    """Crossings of a track of 10 theta_E at even places."""
    strength = np.asarray(strength, dtype=np.float64)
    count = len(strength)
    place = (np.arange(count) + 0.5) * 10.0 / max(count, 1)
    columns = {
        "position": place / 10.0,
        "place": place,
        "strength": strength,
        "angle": np.zeros(count),
        "entering": np.arange(count) % 2 == 0,
        "background": np.full(count, 100.0),
    }
    return Crossings(**{**columns, **given})


@pytest.fixture
def fields(monkeypatch: pytest.MonkeyPatch) -> dict[str, Any]:
    """Let every track meet the same folds, without a field behind them; they may be changed in this dictionary."""
    given: dict[str, Any] = {"found": told([1.0, 2.0, 3.0, 4.0, 5.0]), "fields": []}

    def at_once(field: Any, start: Any, end: Any, accuracy: float = 1e-3, **_: Any) -> Crossings:
        given["fields"].append((field, start, end))
        length = np.hypot(end[0] - start[0], end[1] - start[1])
        found: Crossings = given["found"]
        return replace(found, place=found.position * length)

    monkeypatch.setattr("crossing.shooting.tracks.track.track_crossings", at_once)
    monkeypatch.setattr("crossing.shooting.peaks.peak_forecast.light_curve_examples", lambda *_: ())
    return given


# Published worked numbers, each from an event file through the whole forecast


@pytest.mark.parametrize(
    ("redshifts", "mass", "radius", "mu_t", "mu_r", "scaling", "exact"),
    [
        # Oguri et al. (2018) say about 4300; mu_t and mu_r are from memory, the digits from an independent computation.
        ((0.544, 1.49), 0.3, 180, 100, 3, 4339.4003, 6232.2704),
        # The inputs for which Venumadhav, Dai & Miralda-Escude (2017) say about 1e4; mu_t and mu_r as above.
        ((0.544, 1.49), 0.3, 10, 100, 3, 18410.5, 26441.3),
        # The same formulas elsewhere, by the same independent computation.
        ((0.5, 1.5), 1, 100, 200, 2.5, 11323.502, 15974.673),
        ((0.5, 1.5), 0.3, 100, 200, 2.5, 8380.3295, 11822.581),
        ((0.4, 1.0), 0.3, 100, 200, 2.5, 8283.373, 11685.799),
    ],
)
def test_peaks_at_the_caustic_of_one_star(
    redshifts: tuple[float, float],
    mass: float,
    radius: float,
    mu_t: float,
    mu_r: float,
    scaling: float,
    exact: float,
    event: Writer,
    fields: dict[str, Any],
) -> None:
    place = f"[lens]\nredshift = {redshifts[0]}\n[source]\nredshift = {redshifts[1]}\n"
    macro = f"[macro]\nmu_t = {-mu_t}\nmu_r = {mu_r}\n"
    found = forecast_peaks(event(place, macro, STARS.format(0.005, mass)), radii=[radius])
    (row,) = found.rows
    assert row.mu_peak_scaling == pytest.approx(scaling, rel=3e-6)  # six digits and more are listed
    assert row.mu_peak_isolated == pytest.approx(exact, rel=3e-6)
    assert row.mu_peak_isolated_range == pytest.approx((exact, exact), rel=3e-6)
    assert found.typical_mass == pytest.approx(mass, rel=1e-12)


@pytest.mark.parametrize(
    ("gradient", "peaks"),
    [(0.1, (3.595913e6, 1.137128e6, 3.595913e5)), (0.02, (8.040707e6, 2.542695e6, 8.040707e5))],
)
def test_peaks_at_the_smooth_fold(gradient: float, peaks: tuple[float, ...], event: Writer) -> None:
    # kappa = 0.83 on the critical curve, so mu_r = 1 / 0.34: computed apart from here.
    macro = f'[macro]\ncritical_distance = "0.1 arcsec"\ngradient = "{gradient} / arcsec"\nmu_r = {1 / 0.34!r}\n'
    found = forecast_peaks(event(HALF, macro), radii=[10, 100, 1000])
    assert [row.mu_peak_smooth for row in found.rows] == pytest.approx(list(peaks), rel=1e-6)
    assert (found.regime, found.overlap, found.band, found.sample) == ("smooth", False, None, None)
    assert found.absent["mu_peak_micro"] == "the event file has no [microlenses]"
    # A galaxy saturates at tens to hundreds, a star goes to thousands and more (common practice, no source).
    assert [one.radius_kpc for one in found.extended] == [0.1, 0.3, 1.0]
    assert all(30 < one.mu_peak_smooth < 400 for one in found.extended)


def test_the_corrugated_band(event: Writer, fields: dict[str, Any]) -> None:
    # kappa_star 0.01 makes a band of 0.2 arcsec (Venumadhav et al. 2017, abstract): a gradient of 0.1 per arcsec.
    macro = '[macro]\ncritical_distance = "0.2 arcsec"\ngradient = "0.1 / arcsec"\nmu_r = 3\n'
    found = forecast_peaks(event(HALF, macro, STARS.format(0.01, 0.3), FAST.replace("1000", "978")))
    assert found.band is not None
    assert found.band.width_arcsec == pytest.approx(0.2, rel=1e-12)
    # kappa_star^2 / (2 T) = 5e-4 arcsec at 8.682427 kpc per arcsec (astropy, Planck18)
    assert found.band.depth_pc == pytest.approx(4.3412, rel=1e-4)
    # The abstract's 20 pc in 2e4 yr are 978 km/s.
    assert found.band.years == pytest.approx(2e4 * found.band.depth_pc / 20, rel=1e-3)


@pytest.mark.parametrize(("radius", "hours"), [(10, 3.865), (100, 38.65)])
def test_duration_of_a_crossing(radius: float, hours: float, event: Writer, fields: dict[str, Any]) -> None:
    # 2 R / V at 1000 km/s, computed apart from here; the crossings of the stub are head on.
    found = forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1), FAST), radii=[radius])
    (row,) = found.rows
    assert row.crossing_days_head_on is not None
    assert row.crossing_days is not None
    assert 24 * row.crossing_days_head_on == pytest.approx(hours, rel=2e-4)
    assert 24 * row.crossing_days.median == pytest.approx(hours, rel=2e-4)


@pytest.mark.parametrize(
    ("lam_t", "threshold"),
    [(0.005, 0.003269487), (-0.005, 0.008215570)],  # pi |lam_t lam_r| / area, computed apart from here
)
def test_where_caustics_overlap(lam_t: float, threshold: float, event: Writer, fields: dict[str, Any]) -> None:
    macro = f"[macro]\nmu_t = {1 / lam_t}\nmu_r = 2.5\n"
    below, above = (
        forecast_peaks(event(HALF, macro, STARS.format(part * threshold, 1)), radii=[10]) for part in (0.9, 1.1)
    )
    assert below.overlap_kappa_star == pytest.approx(threshold, rel=1e-6)
    # On the saddle side kappa_star |mu_t| > 1 comes first.
    assert (below.regime, below.overlap) == (("isolated", False) if lam_t > 0 else ("saturated", True))
    assert above.overlap
    assert above.overlap_probability == 1.0


def test_the_published_threshold_in_surface_density(event: Writer, fields: dict[str, Any]) -> None:
    # Sigma_crit / mu_t = 22.671361 Msun / pc^2 at mu_t = 100 (Oguri et al. 2018; number computed apart from here)
    found = [
        forecast_peaks(event(HALF, SADDLE, f'[[microlenses]]\nsurface_density = "{one} solMass / pc2"\n'), radii=[10])
        for one in (22.6, 22.8)
    ]
    assert [one.regime for one in found] == ["isolated", "saturated"]
    assert [one.kappa_star > 0.01 for one in found] == [False, True]


# Statistics of the crossings


def test_rows_are_those_of_the_folds_that_are_met(event: Writer, fields: dict[str, Any]) -> None:
    found = forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1), FAST), radii=[30], magnifications=[800, 2000])
    (row,) = found.rows
    radius = 30 / LensScales(0.5, 1.5).einstein_radius_source_rsun
    peaks = 100 + 1.39311929653948 / np.sqrt(radius) * np.arange(1, 6)  # height of the profile: mpmath
    assert row.mu_peak_micro is not None
    assert row.mu_peak_micro.median == pytest.approx(peaks[2], rel=1e-9)
    # a fifth of the crossings at each peak
    assert (row.mu_peak_micro.low, row.mu_peak_micro.high) == pytest.approx((peaks[0], peaks[4]), rel=1e-9)
    # five folds in 10 theta_E, which take 159.9023 years at 1000 km/s (astropy)
    per_year = 5 / 159.9023
    for one in row.rates:
        assert one.rate == pytest.approx(per_year * np.mean(peaks > one.mu), rel=1e-5)
        assert one.per_einstein == pytest.approx(0.5 * np.mean(peaks > one.mu), rel=1e-9)
        assert one.error == pytest.approx(0.0, abs=1e-12)  # all tracks are alike
    assert found.crossings == 5 * found.tracks == 5 * 24  # the fewest tracks
    assert found.statistical_error == pytest.approx(0.0, abs=1e-9)
    assert found.flags == ()


def test_crossings_take_their_speed_in_proportion_to_it(event: Writer, fields: dict[str, Any]) -> None:
    motion = '[motion]\nspeed = {low = "100 km / s", high = "1000 km / s", scale = "log"}\n'
    found = forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1), motion), radii=[10])
    assert found.speed_kms is not None
    # v p(v) is flat for a log-uniform p: median 550, and the mean of p is 900 / ln 10; 2e4 draws are good to 1%
    assert found.speed_kms.median == pytest.approx(550, rel=0.02)
    assert found.mean_speed_kms == pytest.approx(900 / np.log(10), rel=0.01)
    days = found.rows[0].crossing_days
    assert days is not None
    assert days.median == pytest.approx(2 * 10 * 695700 / 550 / 86400, rel=0.03)


def test_oblique_crossings_take_longer(event: Writer, fields: dict[str, Any]) -> None:
    fields["found"] = told(np.ones(4), angle=np.full(4, np.pi / 3))
    found = forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1), FAST), radii=[10])
    row = found.rows[0]
    assert row.crossing_days is not None
    assert row.crossing_days_head_on is not None
    assert row.crossing_days.median == pytest.approx(2 * row.crossing_days_head_on, rel=1e-9)


def test_crowded_crossings_are_counted(event: Writer, fields: dict[str, Any]) -> None:
    # 1000 Rsun is 1.4e-3 theta_E: two of four folds are closer to each other than a diameter, on tracks of 10 theta_E
    fields["found"] = told(np.ones(4), position=np.array([0.1, 0.5, 0.5001, 0.9]))
    found = forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1)), radii=[1, 1000])
    assert [row.crowded for row in found.rows] == pytest.approx([0.0, 0.5])


def test_a_disc_smooths_the_background_beside_another_fold(event: Writer, fields: dict[str, Any]) -> None:
    background = np.array([100.0, 100.0, 1e9, 100.0])
    fields["found"] = told([1.0, 2.0, 4.0, 8.0], position=np.array([0.1, 0.5, 0.5001, 0.9]), background=background)
    found = forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1)), radii=[1, 1000])
    assert found.sample is not None
    small, large = (radius / LensScales(0.5, 1.5).einstein_radius_source_rsun for radius in (1, 1000))
    assert found.sample.peaks(small).max() > 1e9  # the folds are apart
    height = 1.39311929653948 / np.sqrt(large)
    # the usual background, the peaks of both neighbours and its own
    assert found.sample.peaks(large)[:4] == pytest.approx(100 + height * np.array([1, 2, 2 + 8 + 4, 8]))


def test_the_error_is_that_of_the_scatter_of_tracks(event: Writer, fields: dict[str, Any]) -> None:
    """Poisson numbers of folds with log-normal strengths: errors by the bootstrap against many repetitions."""
    rng = np.random.default_rng(5)
    choices = macro_choices(event(HALF, SADDLE, STARS.format(0.005, 1)))
    draws = choices[0].draws(1, 0)
    from crossing.shooting.peaks.peak_crossings import TrackRun

    def once() -> CrossingSample:
        runs = [
            TrackRun(
                draw=draws[0],
                start=(0.0, 0.0),
                end=(10.0, 0.0),
                length=10.0,
                crossings=told(rng.lognormal(0.0, 0.7, rng.poisson(20))),
            )
            for _ in range(40)
        ]
        return pool_runs([runs], [1.0])

    samples = [once() for _ in range(60)]
    peaks = [one.peaks(1e-4) for one in samples]
    quantiles = np.array([one.quantiles(values) for one, values in zip(samples, peaks, strict=True)])
    stated = np.mean([one.quantile_errors(values) for one, values in zip(samples, peaks, strict=True)], axis=0)
    actual = quantiles.std(axis=0) / quantiles.mean(axis=0)
    assert stated == pytest.approx(actual, rel=0.35)  # 60 repetitions give a scatter to 9%, at three sigma 28%
    densities = np.array([one.densities(values, [0.0]) for one, values in zip(samples, peaks, strict=True)])[:, :, 0]
    assert densities[:, 0].mean() == pytest.approx(2.0, rel=0.02)  # 20 in 10 theta_E; 2400 tracks
    assert densities[:, 1].mean() == pytest.approx(densities[:, 0].std(), rel=0.35)


def test_weighted_quantiles() -> None:
    assert weighted_quantiles(np.array([3.0]), np.array([2.0]), (0.16, 0.5)) == pytest.approx([3.0, 3.0])
    values = np.random.default_rng(1).normal(size=2001)
    assert weighted_quantiles(values, np.ones(2001), (0.5,)) == pytest.approx(np.median(values), abs=1e-9)
    assert np.isnan(weighted_quantiles(values, np.zeros(2001))).all()


# Real fields


@pytest.mark.parametrize(
    ("lam_t", "angle", "expected", "error"),
    [(0.005, 0, 14.7, 0.25), (0.005, 90, 3.4, 0.2), (-0.005, 0, 16.3, 0.24), (-0.005, 90, 3.3, 0.2)],
)
def test_crossings_per_einstein_radius(
    lam_t: float, angle: float, expected: float, error: float, event: Writer, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Against another Monte Carlo, of det = 0 over the image plane: 600 stars of one mass, 2.4e5 fields."""
    monkeypatch.setattr("crossing.shooting.peaks.peak_forecast.light_curve_examples", lambda *_: ())
    motion = FAST.replace('"0 deg"', f'"{angle} deg"')
    macro = f"[macro]\nmu_t = {1 / lam_t}\nmu_r = 2.5\n"
    found = forecast_peaks(event(HALF, macro, STARS.format(0.01, 1), motion), radii=[10], magnifications=[1])
    assert found.flags == ()
    years = found.years_per_einstein
    (rate,) = found.rows[0].rates
    assert years == pytest.approx(15.99023, rel=1e-5)  # at 1000 km/s (astropy)
    assert rate.rate is not None
    assert rate.error is not None
    assert rate.error < 0.05 * rate.rate
    assert rate.rate * years == pytest.approx(expected, abs=3 * np.hypot(error, rate.error * years))


def test_the_published_network(event: Writer, monkeypatch: pytest.MonkeyPatch) -> None:
    """Venumadhav, Dai & Miralda-Escude (2017), abstract: kappa_star 0.01, 6e4 crossings in 2e4 yr, 5 h and 1e4 each.

    The last two are for 10 Rsun. Their 20 pc in 2e4 yr are 978 km/s; redshifts, mass and mu_r are those of the similar
    example of Oguri et al. (2018), so that only the order of magnitude can agree.
    """
    monkeypatch.setattr("crossing.shooting.peaks.peak_forecast.light_curve_examples", lambda *_: ())
    rates = []
    for side in (1, -1):  # both images, half way through the band
        macro = f"[macro]\nmu_t = {200 * side}\nmu_r = 3\n"
        found = forecast_peaks(
            event(ICARUS, macro, STARS.format(0.01, 0.3), '[motion]\nspeed = "978 km / s"\n'),
            radii=[10],
            magnifications=[1],
        )
        assert found.regime == "saturated"
        (row,) = found.rows
        rates.append(row.rates[0].rate)
        assert row.mu_peak_micro is not None
        assert row.crossing_days is not None
        assert 0.3e4 < row.mu_peak_micro.median < 2e4
        assert 24 * row.crossing_days.median == pytest.approx(5, rel=0.3)
    assert 1 < sum(rate for rate in rates if rate is not None) < 6  # published: 3 a year


def test_strengths_have_the_sum_of_the_exact_tail(event: Writer, monkeypatch: pytest.MonkeyPatch) -> None:
    """The integral of K^2 over the length of caustics is the amplitude of the tail (Schneider 1987), for any masses."""
    monkeypatch.setattr("crossing.shooting.peaks.peak_forecast.light_curve_examples", lambda *_: ())
    macro = "[macro]\nmu_t = 200\nmu_r = 2.5\n"
    sample = forecast_peaks(event(HALF, macro, "[[microlenses]]\nkappa_star = 0.01\n"), radii=[10]).sample
    assert sample is not None
    # Tracks of all directions meet 2/pi of the length; 2 <mu> p_J(0) = 23973.66 (computed apart from here).
    total = np.pi / 2 * np.sum(sample.weight * sample.strength**2)
    assert total == pytest.approx(23973.66, rel=0.15)  # the scatter of tracks is 5%


def test_few_stars_are_as_single_ones(event: Writer) -> None:
    """Number and median strength of folds against the closed forms of one star (Chang & Refsdal 1984)."""
    macro = "[macro]\nmu_t = 20\nmu_r = 2.5\n"
    found = forecast_peaks(event(HALF, macro, STARS.format(0.001, 1), FAST), radii=[1, 10])
    assert found.regime == "isolated"
    # kappa_star / (pi lam_t lam_r) 8 gamma / sqrt(lam_t) = 0.0997
    assert found.crossings_per_einstein == pytest.approx(0.0997, rel=0.15)
    row = found.rows[0]
    assert row.mu_peak_micro is not None
    assert row.mu_peak_isolated is not None
    # The background is that of the other images, of the order of the mean of 50.
    assert row.mu_peak_micro.median - 50 == pytest.approx(row.mu_peak_isolated, rel=0.1)


def test_examples_are_folds_at_their_peak(event: Writer) -> None:
    """Light curves from the solver against the law of the fold with its listed strength and background."""
    macro = "[macro]\nmu_t = 200\nmu_r = 2.5\n"
    found = forecast_peaks(event(HALF, macro, STARS.format(0.01, 1), FAST), radii=[1], precision=0.5)
    assert [one.name for one in found.examples] == ["low (16%)", "median", "high (84%)"]
    for one in found.examples:
        # K^2 / R is large against all that bends the fold or changes the background within 1.4e-6 theta_E
        assert one.magnification.max() == pytest.approx(one.fold.max(), rel=0.02)


@pytest.mark.slow
def test_both_images_of_a_pair(event: Writer, monkeypatch: pytest.MonkeyPatch) -> None:
    """In one field, 58 theta_E inside the macro caustic, and each in fields of its own, 62 theta_E inside."""
    monkeypatch.setattr("crossing.shooting.peaks.peak_forecast.light_curve_examples", lambda *_: ())
    found = []
    for distance in (1.1e-4, 1.17e-4):
        place = f'caustic_distance = "{distance} arcsec"\ngradient = "0.1 / arcsec"'
        macro = f'[macro]\n{place}\nmu_r = 2.5\nside = "pair"\n'
        found.append(forecast_peaks(event(HALF, macro, STARS.format(0.01, 1), FAST), radii=[10], precision=0.15))
    near, far = found
    assert (near.images, far.images) == (2, 2)
    assert (near.flags, far.flags) == ((), ())
    assert near.crossings_per_einstein is not None
    assert far.crossings_per_einstein == pytest.approx(near.crossings_per_einstein, rel=0.2)
    one, other = near.rows[0].mu_peak_micro, far.rows[0].mu_peak_micro
    assert one is not None
    assert other is not None
    assert other.median == pytest.approx(one.median, rel=0.25)  # the precision asked for, twice


# Lenses


def test_draws_are_spread_evenly_over_the_lens(event: Writer) -> None:
    place = 'critical_distance = {value = "0.3 arcsec", error = "0.1 arcsec"}'
    macro = f'[macro]\n{place}\ngradient = "0.05 / arcsec"\nmu_r = 2\n'
    (choice,) = macro_choices(event(HALF, macro, "[[microlenses]]\nkappa_star = {low = 0.01, high = 0.02}\n"))
    assert not choice.certain
    draws = choice.draws(64, 3)
    lam_t = np.array([one.lam_t for one in draws])
    # 64 points of a sequence that fills evenly, off by half a step at most: 0.06 standard deviations
    assert lam_t.mean() == pytest.approx(0.015, abs=0.08 * 0.005)
    assert lam_t.std() == pytest.approx(0.005, rel=0.1)
    assert np.mean([one.kappa_star for one in draws]) == pytest.approx(0.015, rel=0.02)
    again = choice.draws(8, 3)
    assert [one.lam_t for one in again] == [one.lam_t for one in draws[:8]]
    assert [one.seed.spawn_key for one in again] == [one.seed.spawn_key for one in draws[:8]]
    assert [one.lam_t for one in choice.draws(8, 4)] != [one.lam_t for one in again]


def test_fields_keep_off_the_critical_curve(event: Writer, fields: dict[str, Any]) -> None:
    macro = '[macro]\ncritical_distance = "0 arcsec"\ngradient = "0.05 / arcsec"\nmu_r = 2\n'
    found = forecast_peaks(event(HALF, macro, STARS.format(0.01, 1)), radii=[10])
    assert {round(field.lens.lam_t, 12) for field, *_ in fields["fields"]} == {0.001, -0.001}
    assert set(found.flags) == {"clipped_lens", "near_macro_caustic"}
    assert found.flags[0] in found.flag_meanings
    assert found.regime == "saturated"
    row = found.rows[0]
    assert (row.mu_peak_isolated, row.mu_peak_scaling) == (None, None)
    assert found.absent["mu_peak_isolated"].startswith("on the critical curve")
    # |mu_r| kappa_star^(-3/4) (theta_E / R)^(1/2)
    radius = 10 / LensScales(0.5, 1.5).einstein_radius_source_rsun
    assert row.mu_peak_saturated == pytest.approx(2 * 0.01**-0.75 / np.sqrt(radius), rel=1e-9)


PAIR = '[macro]\ncaustic_distance = "{} arcsec"\ngradient = "0.1 / arcsec"\nmu_r = 2\nside = "pair"\n'


def test_a_pair_keeps_the_gradient(event: Writer, fields: dict[str, Any]) -> None:
    found = forecast_peaks(event(HALF, PAIR.format(1e-4), STARS.format(0.01, 1)), radii=[10])
    assert found.images == 2
    assert found.flags == ()
    field, start, end = fields["fields"][0]
    assert field.gradient[0] == pytest.approx(0.1 * 1.8835053e-6, rel=1e-6)
    assert np.hypot(end[0] - start[0], end[1] - start[1]) == pytest.approx(10.0)
    assert found.crossings_per_einstein == pytest.approx(0.5)


def test_images_far_apart_have_fields_of_their_own(event: Writer, fields: dict[str, Any]) -> None:
    found = forecast_peaks(event(HALF, PAIR.format(1e-3), STARS.format(0.01, 1)), radii=[10])
    assert found.images == 2
    lam_t = np.array([field.lens.lam_t for field, *_ in fields["fields"]])
    assert np.abs(lam_t) == pytest.approx(np.sqrt(2 * 0.1 * 1e-3))
    assert abs(np.sign(lam_t).sum()) <= 2  # both sides alike
    assert all(not any(field.gradient) for field, *_ in fields["fields"])
    # five folds in 10 theta_E for each image; the other image adds its mean, 1 / (lam_t lam_r)
    assert found.crossings_per_einstein == pytest.approx(1.0)
    radius = 10 / LensScales(0.5, 1.5).einstein_radius_source_rsun
    assert found.rows[0].mu_peak_micro is not None
    expected = 100 + 2 / np.sqrt(2e-4) + 3 * 1.39311929653948 / np.sqrt(radius)
    assert found.rows[0].mu_peak_micro.median == pytest.approx(expected)


def test_near_the_macro_caustic_tracks_of_a_pair_are_short(event: Writer, fields: dict[str, Any]) -> None:
    macro = '[macro]\ncaustic_distance = "2e-6 arcsec"\ngradient = "0.1 / arcsec"\nmu_r = 2\nside = "pair"\n'
    forecast_peaks(event(HALF, macro, STARS.format(0.0005, 1)), radii=[10])
    _, start, end = fields["fields"][0]
    # a quarter of the source's 1.06 theta_E and the band's 0.66 theta_E
    assert np.hypot(end[0] - start[0], end[1] - start[1]) == pytest.approx(0.5, abs=0.1)


def test_the_motion_s_angle_is_that_of_the_tracks(event: Writer, fields: dict[str, Any]) -> None:
    forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1), FAST.replace('"0 deg"', '"30 deg"')), radii=[10])
    for _, start, end in fields["fields"]:
        assert np.arctan2(end[1] - start[1], end[0] - start[0]) == pytest.approx(np.pi / 6)
    fields["fields"].clear()
    forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1)), radii=[10])
    angles = np.array([np.arctan2(end[1], end[0]) for _, _, end in fields["fields"]])
    assert abs(np.exp(2j * angles).mean()) < 0.2  # all directions alike; 24 random ones would have about 0.2


def test_typical_mass() -> None:
    assert typical_mass((Population(0.01, single(0.3)),)) == pytest.approx(0.3, rel=1e-12)
    both = (Population(0.01, kroupa()), Population(0.01, single(30.0)))
    assert 0.3 < typical_mass(both[:1]) < 0.6  # between the mean and <m^2>/<m> of the mass function
    assert typical_mass(both[:1]) < typical_mass(both) < 30


# Several macro models

TWO = """[[macro.models]]
name = "near"
mu_t = -100
mu_r = 3
weight = 3
[[macro.models]]
name = "far"
mu_t = -10
mu_r = 3
"""


def test_models_stand_beside_the_pooled_values(event: Writer, fields: dict[str, Any]) -> None:
    found = forecast_peaks(event(HALF, TWO, STARS.format(0.005, 1)), radii=[10, 100])
    near, far = found.models
    assert (near.name, near.weight, far.name, far.weight) == ("near", 0.75, "far", 0.25)
    assert (near.lam_t.median, far.lam_t.median) == pytest.approx((-0.01, -0.1))
    assert near.regime == "isolated"
    assert near.rows[0].mu_peak_isolated == pytest.approx(
        forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1)), radii=[10]).rows[0].mu_peak_isolated
    )
    assert found.rows[0].mu_peak_isolated_range is not None
    low, high = found.rows[0].mu_peak_isolated_range
    assert low == pytest.approx(far.rows[0].mu_peak_isolated, rel=0.3)
    assert high == pytest.approx(near.rows[0].mu_peak_isolated, rel=1e-9)
    # Rates add up by the weights. Five folds a track: near ones are 10 theta_E long; far ones as long as they would
    # meet 20 folds by 8 gamma / sqrt|lam_t| kappa_star / (pi |lam_t lam_r|) = 0.2617 per theta_E.
    assert near.rows[0].rates[0].per_einstein == pytest.approx(0.5)
    assert far.rows[0].rates[0].per_einstein == pytest.approx(5 / (20 / 0.2617), rel=1e-3)
    assert found.rows[0].rates[0].per_einstein == pytest.approx(0.75 * 0.5 + 0.25 * 5 * 0.2617 / 20, rel=1e-3)


# What is left out


def test_what_cannot_be_told_is_none_with_the_reason(event: Writer, fields: dict[str, Any]) -> None:
    found = forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1)))
    assert tuple(row.radius_rsun for row in found.rows) == RADII_RSUN
    row = found.rows[0]
    assert (row.mu_peak_smooth, row.crossing_days, row.crossing_days_head_on, found.band) == (None, None, None, None)
    assert row.rates[0].rate is None
    assert row.rates[0].per_einstein > 0
    assert (row.to_see, found.extended, found.years_per_einstein) == ((), (), None)
    assert set(found.absent) == {
        *("mu_peak_smooth", "extended", "band_width_arcsec", "crossing_days", "rate_per_year", "speed_kms", "to_see"),
    }


def test_tracks_that_meet_nothing(event: Writer, fields: dict[str, Any]) -> None:
    fields["found"] = told([])
    found = forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1), FAST), radii=[10], most_tracks=30)
    assert found.rows[0].mu_peak_micro is None
    assert found.rows[0].rates[0].rate == 0.0
    assert found.rows[0].crossing_days is not None  # from the closed form
    assert found.absent["mu_peak_micro"] == "the tracks met no fold"
    assert found.flags == ("few_crossings",)


def test_the_star_s_own_radius_and_what_it_takes_to_see_it(event: Writer, fields: dict[str, Any]) -> None:
    band = '[bands.f125w]\nwavelength = "1.25 um"\ndepth = "28.8862368 mag"\nlimb_darkening = 0.5\n'
    star = '[star]\nradius = "120 solRad"\ntemperature = "12000 K"\n'
    found = forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1), FAST, band, star))
    assert [row.radius_rsun for row in found.rows if row.star] == [120.0]
    assert (found.limb_darkening, found.limb_darkening_band) == (0.5, "f125w")
    row = next(row for row in found.rows if row.radius_rsun == 100.0)
    # 100 Rsun at 12,000 K and z = 1.5 have 28.8862368 mag at 1.25 um when magnified 1000 times (computed apart)
    assert row.to_see[0].mu == pytest.approx(1000, rel=1e-4)
    assert row.mu_peak_micro is not None
    # the limb-darkened profile's height, 1.41786808900 (mpmath)
    radius = 100 / LensScales(0.5, 1.5).einstein_radius_source_rsun
    assert row.mu_peak_micro.median == pytest.approx(100 + 3 * 1.417868089 / np.sqrt(radius), rel=1e-9)
    bright = forecast_peaks(event(HALF, SADDLE, band, '[star]\nluminosity = "186817.9759 solLum"\n'), radii=[100])
    assert bright.rows[0].to_see[0].mu == pytest.approx(1000, rel=1e-4)  # 12,000 K again, by Stefan-Boltzmann


# Results


@pytest.fixture
def whole(event: Writer, fields: dict[str, Any]) -> PeakForecast:
    return forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1), FAST))


def test_table_dictionary_figure_and_html(whole: PeakForecast) -> None:
    table = whole.to_table()
    assert len(table) == len(RADII_RSUN)
    assert str(table["crossing_days_median"].unit) == "d"
    assert str(table["rate_above_1000"].unit) == "1 / yr"
    document = whole.to_dict()
    assert document["verb"] == "peak"
    assert document["rows"][0]["mu_peak_micro"].keys() == {"median", "low", "high", "bound"}
    assert [one["mu"] for one in document["rows"][0]["rate_per_year"]] == list(MAGNIFICATIONS)
    assert "<table>" in whole._repr_html_()
    ax = whole.plot()
    assert ax.get_xlabel() == "magnification at the peak"
    assert len([line for line in ax.lines if len(line.get_xdata()) > 1]) == 5


def test_the_same_seed_gives_the_same_answer(event: Writer, fields: dict[str, Any]) -> None:
    one, two = (
        forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1), FAST), seed=4, threads=n).to_dict() for n in (1, 3)
    )
    assert one == two


@pytest.mark.parametrize(
    ("options", "says"),
    [
        ({"radii": [1, -2]}, r"`radii` must be positive numbers, got -2"),
        ({"radii": []}, r"`radii` must be positive numbers, got none"),
        ({"magnifications": [0]}, r"`magnifications` must be positive numbers, got 0"),
        ({"temperature": 0}, r"`temperature` must be positive numbers, got 0"),
        ({"precision": 0}, r"`precision` must be between 0\.005 and 0\.5, got 0"),
        ({"band": "blue"}, r"`band` must be one of the event's bands \(none\), got 'blue'"),
    ],
)
def test_bad_arguments(options: dict[str, Any], says: str, event: Writer, fields: dict[str, Any]) -> None:
    with pytest.raises(InputError, match=says):
        forecast_peaks(event(HALF, SADDLE, STARS.format(0.005, 1)), **options)


def test_events_without_what_is_needed(event: Writer) -> None:
    with pytest.raises(InputError, match=r"lens: must be given for a forecast of peaks"):
        forecast_peaks(event(SADDLE))
    with pytest.raises(InputError, match=r"macro: must be given for a forecast of peaks"):
        forecast_peaks(event(HALF))


def test_all_flags_are_explained() -> None:
    assert set(FLAGS) == {"few_crossings", "clipped_lens", "near_macro_caustic", "lost_images"}
