"""Random tracks: how motions are drawn, where tracks lie, and tracks that are put on a crossing."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.event import read_event
from crossing.optics.motion import caustic_stretch, mean_normal_component
from crossing.shooting.from_event import LocalSetup, local_setup
from crossing.shooting.tracks.random_track import TrackMotion, draw_motion, map_widths, place_track, surroundings
from crossing.shooting.tracks.track import track_crossings, track_magnification

HEAD = '[event]\nname = "knot"\n'
REDSHIFTS = "[lens]\nredshift = 0.5\n[source]\nredshift = 1.5\n"
LENS = (
    "[macro]\nkappa = 0.7\ngamma = 0.25\n[[microlenses]]\nkappa_star = 0.01\n"
    'mass_function = "single"\nmean_mass = "1 solMass"\n'
)
MOTION = TrackMotion(speed=1000.0, direction=0.4, days_per_einstein=5000.0)


@pytest.fixture
def setup(tmp_path: Path) -> Any:
    def make(*parts: str) -> LocalSetup:
        (tmp_path / "event.toml").write_text(HEAD + "".join(parts))
        return local_setup(read_event(tmp_path / "event.toml"))

    return make


def rng(seed: int = 1) -> np.random.Generator:
    return np.random.default_rng(seed)


# Motions


def motions(setup: LocalSetup, *, crossing: bool, size: int = 600) -> tuple[np.ndarray, np.ndarray]:
    found = [draw_motion(setup, rng(seed), crossing=crossing) for seed in range(size)]
    return np.array([one.speed for one in found]), np.array([one.direction for one in found])


def test_a_fast_star_crosses_more_often(setup: Any) -> None:
    event = setup(REDSHIFTS, LENS, '[motion]\nspeed = {low = "500 km / s", high = "1500 km / s"}\n')
    plain, _ = motions(event, crossing=False)
    met, _ = motions(event, crossing=True)
    # means of a uniform speed, 1000, and of one weighted by itself, 1000 + var/mean; errors of 600 draws are 12 km/s
    assert plain.mean() == pytest.approx(1000.0, abs=45.0)
    assert met.mean() == pytest.approx(1000.0 + 1000.0**2 / 12 / 1000.0, abs=45.0)


def test_directions_that_cross_more_caustics_count_for_more(setup: Any) -> None:
    event = setup(REDSHIFTS, LENS, '[motion]\nspeed = "800 km / s"\n')
    _, plain = motions(event, crossing=False)
    _, met = motions(event, crossing=True)
    stretch = caustic_stretch(mean_normal_component(event.lens.lam_t, event.lens.lam_r))
    angle = np.linspace(-np.pi, np.pi, 2001)[:-1]
    weight = np.hypot(np.sin(angle), stretch * np.cos(angle))
    # the error of the mean of |cos| over 600 draws is 0.013
    assert np.abs(np.cos(plain)).mean() == pytest.approx(2 / np.pi, abs=0.05)
    assert np.abs(np.cos(met)).mean() == pytest.approx(np.average(np.abs(np.cos(angle)), weights=weight), abs=0.05)


def test_a_known_direction_is_kept_and_that_of_spreads_is_random(setup: Any) -> None:
    known = setup(REDSHIFTS, LENS, '[motion]\nspeed = "800 km / s"\nangle = "30 deg"\n')
    found = draw_motion(known, rng(), crossing=True)
    assert np.degrees(found.direction) == pytest.approx(30.0)
    assert found.days_per_einstein == pytest.approx(known.days_per_einstein, rel=1e-12)
    spreads = '[motion]\nlens_spread = "0 km / s"\nsource_spread = "0 km / s"\nposition = ["10 deg", "0 deg"]\n'
    _, direction = motions(setup(REDSHIFTS, LENS, spreads), crossing=False, size=200)
    assert np.abs(np.exp(1j * direction).mean()) < 0.25  # 0.07 expected


@pytest.mark.parametrize(
    ("parts", "says"),
    [
        ((LENS, '[motion]\nspeed = "1 km / s"\n'), r"lens: must be given for crossing track"),
        ((REDSHIFTS, LENS), r"motion: must be given for crossing track"),
    ],
    ids=["redshifts", "motion"],
)
def test_what_is_missing_is_named(setup: Any, parts: tuple[str, ...], says: str) -> None:
    with pytest.raises(InputError, match=says):
        draw_motion(setup(*parts), rng(), crossing=False)


# Places


def test_a_random_track_lies_where_its_field_serves(setup: Any) -> None:
    event = setup(REDSHIFTS, LENS)
    for seed in range(5):
        track = place_track(event, MOTION, 0.3, rng(seed))
        step = np.subtract(track.end, track.start)
        assert np.hypot(*step) == pytest.approx(0.3)
        assert np.arctan2(step[1], step[0]) == pytest.approx(0.4)
        middle = 0.5 * np.add(track.start, track.end)
        assert np.abs(middle).max() <= 0.5
        served = np.array(track.stars.description["window_half"])
        assert (np.abs(middle) + 0.5 * map_widths(0.3)[-1] <= served + 1e-12).all()
        assert (track.found, track.fields_tried) == (True, 1)


def test_the_same_seed_gives_the_same_track(setup: Any) -> None:
    event = setup(REDSHIFTS, LENS)
    one, same, other = (place_track(event, MOTION, 0.01, rng(seed), peak=0.0) for seed in (3, 3, 4))
    assert (one.start, one.field_seed) == (same.start, same.field_seed)
    assert np.array_equal(one.stars.x, same.stars.x)
    assert one.field_seed != other.field_seed


@pytest.mark.parametrize("peak", [0.0, 300.0])
def test_a_crossing_lies_in_the_middle(setup: Any, peak: float) -> None:
    event, radius = setup(REDSHIFTS, LENS), 1e-3
    for seed in range(3):
        track = place_track(event, MOTION, 0.01, rng(seed), peak=peak, radius=radius, limb_darkening=0.3)
        met = track_crossings(track.stars, track.start, track.end)
        at = int(np.argmin(np.abs(met.position - 0.5)))
        # the line of the search and that of the check are off the middle by a share of their smallest radius
        assert met.position[at] == pytest.approx(0.5, abs=1e-3)
        assert track.found
        if peak:  # the disc itself must shine so, at an accuracy of one per cent
            around = np.linspace(0.0, 1.0, 41)
            light = track_magnification(track.stars, track.start, track.end, radius, around, 0.3, 0.01).magnification
            assert light.max() >= 0.97 * peak


def test_if_no_crossing_is_high_enough_the_highest_is_taken(setup: Any) -> None:
    event = setup(REDSHIFTS, LENS)
    track = place_track(event, MOTION, 0.01, rng(2), peak=1e9)
    assert (track.found, 1 <= track.fields_tried <= 8) == (False, True)
    met = track_crossings(track.stars, track.start, track.end)
    assert np.abs(met.position - 0.5).min() < 1e-3


def test_without_stars_there_is_no_crossing_to_be_found(setup: Any) -> None:
    event = setup(REDSHIFTS, LENS.replace("0.01\n", "1e-9\n"))
    track = place_track(event, MOTION, 0.01, rng(2), peak=0.0)
    assert not track.found


def test_a_track_that_is_too_long_is_refused(setup: Any) -> None:
    with pytest.raises(
        InputError, match=r"`length` of a track must be at most 200 Einstein radii, got 1e\+03; shorten"
    ):
        place_track(setup(REDSHIFTS, LENS), MOTION, 1000.0, rng())


# Surroundings


def test_map_and_caustics_around_a_track(setup: Any) -> None:
    track = place_track(setup(REDSHIFTS, LENS), MOTION, 0.1, rng(1), peak=0.0)
    middle = (0.5 * (track.start[0] + track.end[0]), 0.5 * (track.start[1] + track.end[1]))
    chart, network = surroundings(track, middle, map_widths(0.1)[-1], 5000.0, pixels=40)
    assert chart.pixels == (40, 40)
    assert (chart.center, chart.days_per_einstein) == (middle, 5000.0)
    assert chart.width == pytest.approx(0.8)
    assert len(network) > 0
    assert len(network.crossings(track.start, track.end)) == len(track_crossings(track.stars, track.start, track.end))


def test_sizes_of_maps() -> None:
    assert map_widths(0.01) == (pytest.approx(0.016), 0.6)
    assert map_widths(0.1) == pytest.approx((0.16, 0.8))
    assert map_widths(1.0) == pytest.approx((1.6, 8.0))
    assert map_widths(100.0) == (160.0,)
