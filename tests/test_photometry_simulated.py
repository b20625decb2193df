"""Simulated events: fluxes, noise, limits, the truth that is told, and that realisations are independent."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.event import read_event
from crossing.optics.scales import LensScales
from crossing.photometry.simulated import FLAGS, SimulatedEvent, SimulationOptions, check_depths, simulate_event
from crossing.photometry.simulated_figure import draw_fluxes, draw_magnitudes
from crossing.shooting.from_event import LocalSetup, local_setup
from crossing.shooting.tracks.track import track_magnification
from crossing.stars.photosphere import ab_magnitude, blackbody_flux_njy

HEAD = '[event]\nname = "knot"\n[lens]\nredshift = 0.5\n[source]\nredshift = 1.5\n'
LENS = (
    "[macro]\nkappa = 0.7\ngamma = 0.25\n[[microlenses]]\nkappa_star = 0.01\n"
    'mass_function = "single"\nmean_mass = "1 solMass"\n'
)
MOTION = '[motion]\nspeed = "1000 km / s"\n'
STAR = '[star]\nradius = "200 solRad"\ntemperature = "12000 K"\n'
RED = '[bands.red]\nwavelength = "1.5 um"\ndepth = "27 mag"\ndepth_sigma = 10\nlimb_darkening = 0.2\n'
BLUE = '[bands.blue]\nwavelength = "0.8 um"\nwidth = "0.2 um"\ndepth = "28 mag"\nextinction = "0.5 mag"\n'
CROSSING = SimulationOptions(duration=40.0, cadence=0.25, peak=500.0)


def make(folder: Path, *parts: str) -> LocalSetup:
    (folder / "event.toml").write_text("".join(parts or (HEAD, LENS, MOTION, STAR, RED, BLUE)))
    return local_setup(read_event(folder / "event.toml"))


@pytest.fixture(scope="module")
def setup(tmp_path_factory: pytest.TempPathFactory) -> LocalSetup:
    return make(tmp_path_factory.mktemp("simulated"))


@pytest.fixture(scope="module")
def event(setup: LocalSetup) -> SimulatedEvent:
    return simulate_event(setup, CROSSING, number=1, seed=4, threads=1)


# The noiseless curve


def test_the_unmagnified_fluxes_are_those_of_a_blackbody(event: SimulatedEvent) -> None:
    distance = LensScales(0.5, 1.5).luminosity_distance
    red = blackbody_flux_njy(200.0, 12_000.0, 1.5, 1.5, luminosity_distance_mpc=distance)
    blue = blackbody_flux_njy(200.0, 12_000.0, 1.5, 0.8, 0.2, luminosity_distance_mpc=distance) * 10 ** (-0.4 * 0.5)
    assert event.bands == ("red", "blue")
    assert event.star.flux == pytest.approx([float(red), float(blue)], rel=1e-12)
    assert event.star.radius_einstein == pytest.approx(200.0 / LensScales(0.5, 1.5).einstein_radius_source_rsun)
    assert event.star.limb_darkening[0] == 0.2
    assert 0.2 < event.star.limb_darkening[1] < 0.8  # by the grey atmosphere, bluer and so darker


def test_fluxes_follow_the_magnification_of_each_band(event: SimulatedEvent) -> None:
    assert event.flux == pytest.approx(event.star.flux[:, None] * event.magnification, rel=1e-12)
    assert event.magnification.shape == (2, len(event.time))
    middle = event.curve.limb_darkening[list(event.row)]
    assert middle == pytest.approx(event.star.limb_darkening)


def test_straight_lines_between_the_points_are_as_good_as_asked(event: SimulatedEvent) -> None:
    position = np.linspace(0.0, 1.0, 97)
    exact = track_magnification(
        event.track.stars,
        event.track.start,
        event.track.end,
        event.star.radius_einstein,
        position,
        0.2,
        1e-5,
        threads=1,
    ).magnification
    lines = np.interp(position, event.curve.position, event.magnification[0])
    assert lines == pytest.approx(exact, rel=1.5 * CROSSING.accuracy)  # the middle of a step is not always its worst


def test_the_track_is_as_long_as_the_motion_says(event: SimulatedEvent) -> None:
    # 40 days at 1000 km/s, in km over the Einstein radius in km: 1 au = 1.495978707e8 km (IAU 2012)
    length = 40 * 86400 * 1000 / (LensScales(0.5, 1.5).einstein_radius_source_au * 1.495978707e8)
    assert event.curve.length == pytest.approx(length, rel=1e-9)
    assert (event.time[0], event.time[-1]) == (61000.0, 61040.0)


def test_the_crossing_in_the_middle_is_told(event: SimulatedEvent) -> None:
    told = min(event.crossings(), key=lambda one: abs(one["caustic_time_mjd"] - 61020.0))
    assert told["caustic_time_mjd"] == pytest.approx(61020.0, abs=0.01)
    assert told["peak_magnification"] > 499.0
    # R / v_perp: 200 x 695,700 km over 1000 km/s times the cosine
    days = 200.0 * 695_700.0 / 1000.0 / 86400.0 / np.cos(np.radians(told["normal_angle_deg"]))
    assert told["radius_time_days"] == pytest.approx(days, rel=1e-6)
    if len(event.crossings()) == 1:  # a fold by itself: the closed form is good to some per cent of the rise
        assert event.peak[1][0] == pytest.approx(told["peak_magnification"], rel=0.1)
        assert abs(event.peak[0] - 61020.0) < told["radius_time_days"]


# What is measured


def test_noise_is_that_of_the_depth(event: SimulatedEvent) -> None:
    seen = event.light_curve
    assert len(seen) == 2 * 160  # 40 days by 0.25 in two bands
    assert np.diff(np.unique(seen.time)) == pytest.approx(0.25)
    # AB 31.4 is 1 nJy: 27 mag over 10, and 28 mag over the default of 5
    depths = (10 ** (0.4 * 4.4) / 10.0, 10 ** (0.4 * 3.4) / 5.0)
    for k, (band, sigma) in enumerate(zip(event.bands, depths, strict=True)):
        rows = seen.band == band
        assert seen.flux_err[rows] == pytest.approx(sigma, rel=1e-3)
        pull = (seen.flux[rows] - np.interp(seen.time[rows], event.time, event.flux[k])) / seen.flux_err[rows]
        assert abs(pull.mean()) < 4 / np.sqrt(160)
        assert 0.75 < pull.std() < 1.25  # 0.056 is one standard error of it
    assert not seen.is_upper_limit.any()
    assert event.detections == int((seen.flux > 3 * seen.flux_err).sum())


def test_faint_measurements_become_limits(setup: LocalSetup, event: SimulatedEvent) -> None:
    cut = simulate_event(setup, replace(CROSSING, limit_sigma=4.0), number=1, seed=4, threads=1)
    old, new = event.light_curve, cut.light_curve
    assert np.array_equal(new.is_upper_limit, old.flux < 4.0 * old.flux_err)
    assert new.is_upper_limit.any()
    kept = ~new.is_upper_limit
    assert np.array_equal(new.flux[kept], old.flux[kept])
    assert new.flux[~kept] == pytest.approx(4.0 * old.flux_err[~kept])


# Realisations


def test_a_realisation_depends_on_its_seed_and_number_alone(setup: LocalSetup, event: SimulatedEvent) -> None:
    short = replace(CROSSING, cadence=10.0)
    same = simulate_event(setup, short, number=1, seed=4, threads=2)
    assert same.track.start == event.track.start
    # sums over threads may differ in their last digits
    assert same.magnification == pytest.approx(event.magnification, rel=1e-10)
    for number, seed in ((2, 4), (1, 5)):
        other = simulate_event(setup, replace(short, peak=None), number=number, seed=seed, threads=1)
        assert other.track.field_seed != event.track.field_seed
        assert other.motion.direction != event.motion.direction


def test_random_places_are_mostly_quiet(setup: LocalSetup) -> None:
    options = SimulationOptions(duration=10.0, cadence=5.0)
    met = [len(simulate_event(setup, options, number=k, threads=1).curve.crossings) for k in range(6)]
    assert sum(count == 0 for count in met) >= 4


def test_flags(setup: LocalSetup, event: SimulatedEvent) -> None:
    hopeless = simulate_event(setup, replace(CROSSING, peak=1e9), seed=1, threads=1)
    assert "no_such_crossing" in hopeless.flags
    assert "no_such_crossing" in hopeless.status
    bad = replace(event, curve=replace(event.curve, flags=("something",)))
    assert bad.flags == ("curve_inaccurate",)
    assert set(FLAGS) == {"no_such_crossing", "curve_inaccurate"}
    assert replace(event, curve=replace(event.curve, flags=())).status == "ok"


# What it shows


def test_table_and_truth(event: SimulatedEvent) -> None:
    table = event.to_table()
    assert table.colnames[:4] == ["mjd", "day", "u", "v"]
    assert table["mag_blue"] == pytest.approx(ab_magnitude(event.flux[1]))
    assert str(table["flux_red"].unit) == "nJy"
    assert (table["u"][-1], table["v"][-1]) == pytest.approx(event.track.end)
    told = event.to_dict()
    assert table.meta["radius_rsun"] == told["radius_rsun"] == 200.0
    assert told["speed_km_s"] == pytest.approx(1000.0)
    assert told["peak_mag"]["blue"] == pytest.approx(float(table["mag_blue"][np.argmax(event.magnification[0])]))
    assert "200.0" in event._repr_html_()


def test_figures(event: SimulatedEvent) -> None:
    magnitudes = event.plot()
    low, high = magnitudes.get_ylim()
    assert low > high  # faint is down
    assert draw_magnitudes(event, magnitudes) is magnitudes
    fluxes = draw_fluxes(event, window=(18.0, 22.0))
    assert fluxes.get_xlim() == (18.0, 22.0)
    labels = fluxes.get_legend_handles_labels()[1]
    assert labels[:2] == ["red", "blue"]
    assert any(text.startswith("fold, ") for text in labels)


# Bad input


@pytest.mark.parametrize(
    ("given", "says"),
    [
        ({"duration": 0.0}, r"`duration` must be positive and finite, got 0"),
        ({"cadence": float("inf")}, r"`cadence` must be positive and finite, got inf"),
        ({"cadence": 101.0}, r"`cadence` must be at most the duration, 100 days, got 101; lower it"),
        ({"cadence": 1e-4}, r"`cadence` must give at most 100000 visits, got 1e\+06; raise it"),
        ({"peak": -1.0}, r"`peak` must be a magnification, zero or more, got -1"),
        ({"limit_sigma": 0.0}, r"`limit_sigma` must be positive and finite, got 0"),
        ({"accuracy": 0.5}, r"`accuracy` must be between 1e-5 and 0.1, got 0.5"),
    ],
    ids=lambda item: next(iter(item)) if isinstance(item, dict) else "",
)
def test_options_out_of_range(given: dict[str, Any], says: str) -> None:
    with pytest.raises(InputError, match=says):
        SimulationOptions(**given)


@pytest.mark.parametrize(
    ("parts", "says"),
    [
        ((HEAD, LENS, MOTION), r"event.toml: bands: must be given for crossing track; add"),
        ((HEAD, LENS, RED), r"event.toml: motion: must be given for crossing track; add"),
        (
            (HEAD, LENS, MOTION, RED, '[bands.far]\nwavelength = "4 um"\n'),
            r'event.toml: bands.far.depth: must be given for crossing track, .* add depth = "... mag"',
        ),
    ],
    ids=["bands", "motion", "depth"],
)
def test_what_an_event_file_must_have(tmp_path: Path, parts: tuple[str, ...], says: str) -> None:
    with pytest.raises(InputError, match=says):
        check_depths(make(tmp_path, *parts).event)


def test_stars_that_cannot_be_are_refused(tmp_path: Path) -> None:
    impossible = '[star]\nradius = "2000 solRad"\ntemperature = "30000 K"\n'
    with pytest.raises(InputError, match=r"event.toml: star: must be possible together"):
        simulate_event(make(tmp_path, HEAD, LENS, MOTION, impossible, RED))
