"""Library of tracks: same seeds same tracks, radii between, and what disks, kills and neighbours do to the files."""

from __future__ import annotations

import errno
import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from documents import differences

from crossing.cli.main import main
from crossing.errors import InputError
from crossing.event import read_event
from crossing.shooting.from_event import local_setup
from crossing.shooting.library import library_files
from crossing.shooting.library.ensemble import BETWEEN_RADII_ERROR, TrackEnsemble, load_tracks
from crossing.shooting.library.library_cell import RADII, TrackCell
from crossing.shooting.library.library_files import TrackLibrary, library_folder
from crossing.shooting.library.library_track import LibraryTrack, compute_track
from crossing.shooting.tracks.track import track_magnification
from crossing.stars.mass_functions import Population, kroupa, single

HERE = Path(__file__).parent
EVENT = str(HERE.parent / "demo_lightcurves" / "well_sampled.toml")
STARS = (Population(0.03, single(1.0)),)
# Few stars and large discs: a tenth of a second a track.
SMALL = TrackCell(kappa=0.45, gamma=0.2, populations=STARS, length=1.0, radii=(1e-3, 10**-2.5, 1e-2), accuracy=5e-3)
# With folds on two of the first five tracks.
FOLDED = replace(SMALL, kappa=0.6, gamma=0.3, populations=(Population(0.05, single(1.0)),), accuracy=2e-3)
# mu = 833: 1/|0.301^2 - 0.299^2| = 1/0.0012.
HIGH = TrackCell(kappa=0.699, gamma=0.299, populations=(Population(0.01, single(1.0)),))
CODE = """
import sys
from test_shooting_library import SMALL
from crossing.shooting.library.ensemble import load_tracks
print(load_tracks(SMALL, int(sys.argv[1]), threads=1).computed)
"""

Captured = pytest.CaptureFixture[str]


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    place = tmp_path / "tracks"
    monkeypatch.setenv("CROSSING_LIBRARY", str(place))
    return place


@pytest.fixture(scope="module")
def fresh() -> tuple[LibraryTrack, ...]:
    """Tracks that have never been on a disk."""
    return tuple(compute_track(SMALL, index) for index in range(6))


@pytest.fixture(scope="module")
def folded() -> tuple[LibraryTrack, ...]:
    return tuple(compute_track(FOLDED, index) for index in (0, 4))


def assert_same(found: LibraryTrack, expected: LibraryTrack) -> None:
    assert (found.index, found.start, found.end, found.flags) == (
        expected.index,
        expected.start,
        expected.end,
        expected.flags,
    )
    for name in ("radii", "begin", "place", "rest"):
        np.testing.assert_array_equal(getattr(found, name), getattr(expected, name))
    for name in ("place", "strength", "angle", "entering", "background"):
        np.testing.assert_array_equal(getattr(found.crossings, name), getattr(expected.crossings, name))


def process(count: int) -> subprocess.Popen[str]:
    path = os.pathsep.join([str(HERE), os.environ.get("PYTHONPATH", "")])
    return subprocess.Popen(
        [sys.executable, "-c", CODE, str(count)],
        env={**os.environ, "PYTHONPATH": path},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def files(folder: Path, pattern: str = "track_*.npz") -> list[Path]:
    return sorted((folder / SMALL.key).glob(pattern))


def test_same_seeds_same_tracks_from_anywhere(folder: Path, fresh: tuple[LibraryTrack, ...]) -> None:
    told: list[tuple[int, int]] = []
    first = load_tracks(SMALL, 2, progress=lambda done, of: told.append((done, of)))
    assert (first.computed, first.notes, told) == (2, (), [(1, 2), (2, 2)])
    # A partial ensemble is completed; what is there is not computed again, whatever the number of threads.
    more = load_tracks(SMALL, 4, threads=3)
    assert (len(more), more.computed) == (4, 2)
    assert load_tracks(SMALL, 3).computed == 0
    for found, expected in zip(more.tracks, fresh, strict=False):
        assert_same(found, expected)
    assert len(files(folder)) == 4
    assert (replace(SMALL, seed=1).place(0)[0].x[:3] != SMALL.place(0)[0].x[:3]).all()


def test_curves_against_direct_ones(folded: tuple[LibraryTrack, ...]) -> None:
    """At the library's radii within four times its accuracy: both curves, choice of places, thinning; between, 5%."""
    assert [len(track.crossings) for track in folded] == [2, 1]
    for track in folded:
        stars, start, end = FOLDED.place(track.index)
        for radius, limit in ((1e-3, 4.0), (10**-2.5, 4.0), (10**-2.75, 25.0)):
            direct = track_magnification(stars, start, end, radius, accuracy=FOLDED.accuracy)
            served = track.at(radius, direct.position * track.length)
            assert np.abs(served / direct.magnification - 1.0).max() < limit * FOLDED.accuracy
            place, values = track.curve(radius)
            lines = np.interp(direct.position * track.length, place, values)
            # Straight lines of the curve add a little.
            assert np.abs(lines / direct.magnification - 1.0).max() < (limit + 4.0) * FOLDED.accuracy
            assert np.trapezoid(values, place) / track.length == pytest.approx(direct.mean_magnification[0], rel=5e-3)


def test_darkened_discs(folded: tuple[LibraryTrack, ...]) -> None:
    track = folded[0]
    stars, start, end = FOLDED.place(0)
    direct = track_magnification(stars, start, end, 10**-2.5, limb_darkening=0.6, accuracy=FOLDED.accuracy)
    served = track.at(10**-2.5, direct.position * track.length, 0.6)
    assert np.abs(served / direct.magnification - 1.0).max() < 0.05


@pytest.mark.slow
def test_stated_error_between_radii() -> None:
    """At mu = 833 on both sides, at the last of the stated radii, where it is largest."""
    stated, miss = BETWEEN_RADII_ERROR[-1], []
    radius = stated["radius"]
    for index in range(6):
        side = {} if index % 2 == 0 else {"kappa": 0.701, "gamma": 0.301}
        cell = replace(HIGH, radii=RADII[-2:], **side)
        track = compute_track(cell, index)
        stars, start, end = cell.place(index)
        direct = track_magnification(stars, start, end, radius, positions=np.linspace(0.0, 1.0, 4001), accuracy=1e-3)
        miss.append(track.at(radius, direct.position * track.length) / direct.magnification - 1.0)
    error = np.abs(np.concatenate(miss))
    assert np.sqrt(np.mean(error**2)) < stated["rms"]
    assert np.quantile(error, 0.99) < stated["most"]


def test_radius_out_of_range(fresh: tuple[LibraryTrack, ...]) -> None:
    for radius in (9e-4, 0.02):
        with pytest.raises(InputError, match=r"`radius` must lie in the library's range, 0.001 to 0.01"):
            fresh[0].at(radius, np.zeros(1))


def test_ensemble(folder: Path, fresh: tuple[LibraryTrack, ...]) -> None:
    ensemble = TrackEnsemble(cell=SMALL, tracks=fresh)
    np.testing.assert_array_equal(ensemble.magnification(1e-3, 1)[1], fresh[1].curve(1e-3)[1])
    assert len(ensemble.crossings) == len(ensemble.crossing_track) == sum(len(one.crossings) for one in fresh)
    of_third = ensemble.crossings.strength[ensemble.crossing_track == 2]
    np.testing.assert_array_equal(of_third, fresh[2].crossings.strength)
    statistics = ensemble.statistics
    assert (statistics.tracks, statistics.length) == (6, 6.0)
    # 1/|0.55^2 - 0.2^2|; six tracks of one Einstein radius scatter by tens of per cent.
    assert statistics.expected_mean == pytest.approx(1.0 / 0.2625)
    assert (np.abs(statistics.mean_magnification - 1.0 / 0.2625) < 5.0 * statistics.mean_error).all()
    assert json.loads(json.dumps(ensemble.to_dict()))["key"] == SMALL.key
    assert len(ensemble.to_table()) == 6
    assert ensemble.plot().get_xlabel() == "magnification"
    windows = ensemble.sample(np.random.default_rng(1), [1e-3, 2e-3, 1e-2], 3, span=0.4)
    values = windows.magnification([0.0, 0.1, 0.4])
    assert values.shape == (3, 3)
    one = fresh[int(windows.track[1])].at(2e-3, windows.offset[1] + np.array([0.0, 0.1, 0.4]))
    np.testing.assert_array_equal(values[1], one)
    with pytest.raises(InputError, match=r"`steps` must keep windows on their tracks of 1 Einstein radii"):
        windows.magnification([1.5])
    with pytest.raises(InputError, match=r"`span` must be between 0 and the tracks' 1 Einstein radii, got 2"):
        ensemble.sample(np.random.default_rng(1), 1e-3, 3, span=2.0)
    with pytest.raises(InputError, match="`sample` needs at least one track"):
        TrackEnsemble(cell=SMALL, tracks=()).sample(np.random.default_rng(1), 1e-3, 3)
    with pytest.raises(InputError, match="`count` must be zero or positive, got -1"):
        load_tracks(SMALL, -1)


@pytest.mark.parametrize(
    "change",
    [
        {"kappa": 0.46}, {"gamma": 0.21}, {"gradient": (1e-3, 0.0)}, {"direction": 0.0}, {"direction": 0.1},
        {"length": 1.1}, {"middle": (0.1, 0.0)}, {"scatter": (0.0, 0.1)}, {"accuracy": 1e-3}, {"radii": (1e-3, 1e-2)},
        {"seed": 1}, {"populations": (Population(0.031, single(1.0)),)},
        {"populations": (Population(0.03, single(1.1)),)},
        {"populations": (Population(0.03, kroupa()),)}, {"populations": (Population(0.03, kroupa(0.08, 2.0)),)},
        {"populations": (Population(0.015, single(1.0)), Population(0.015, single(1.0)))},
    ],
    ids=str,
)  # fmt: skip
def test_key_changes_with_each_parameter(change: dict[str, Any]) -> None:
    assert replace(SMALL, **change).key != SMALL.key


def test_key_changes_with_versions_and_with_nothing_else(monkeypatch: pytest.MonkeyPatch) -> None:
    again = replace(SMALL, populations=(Population(0.03, single(1)),), length=1)
    key = SMALL.key
    assert again.key == key
    for name in ("FORMAT_VERSION", "NUMERICAL_VERSION"):
        with monkeypatch.context() as patch:
            patch.setattr(f"crossing.shooting.library.library_cell.{name}", 99)
            assert again.key != key


def test_regression_of_the_numbers(folded: tuple[LibraryTrack, ...]) -> None:
    """Direct values at accuracy 1e-5 (regression only). If tracks change beyond theirs, raise NUMERICAL_VERSION."""
    found = folded[0].at(1e-2, np.array([0.1, 0.35, 0.8]))
    np.testing.assert_allclose(found, [30.478, 29.121, 84.225], rtol=2 * FOLDED.accuracy)


def test_cell_of_an_event() -> None:
    setup = local_setup(read_event(EVENT))
    cell = TrackCell.from_setup(setup, length=1.5)
    assert (cell.kappa, cell.gamma, cell.populations) == (setup.lens.kappa, setup.lens.gamma, setup.populations)
    assert (cell.length, cell.direction, cell.gradient, cell.radii) == (1.5, None, None, RADII)
    assert len(RADII) == 9
    assert (RADII[0], RADII[-1]) == (1e-6, 1e-2)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"populations": ()}, r"`populations` must hold between 0 and kappa = 0.45 in sum, got 0"),
        ({"length": 0.0}, "`length` must be positive and at most 200, got 0"),
        ({"direction": np.inf}, "`direction` must be finite, got inf"),
        ({"scatter": (-1.0, 0.0)}, "`scatter` zero or positive"),
        ({"accuracy": 0.5}, "`accuracy` must be between 1e-6 and 0.1, got 0.5"),
        ({"radii": ()}, "`radii` must be positive and rising"),
        ({"radii": (1e-2, 1e-3)}, "`radii` must be positive and rising"),
        ({"seed": -1}, "`seed` must be zero or positive, got -1"),
    ],
)
def test_bad_cells(change: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError, match=message):
        replace(SMALL, **change)


def test_two_processes_at_once(folder: Path, fresh: tuple[LibraryTrack, ...]) -> None:
    both = [process(6), process(6)]
    told = [one.communicate(timeout=300) for one in both]
    assert [one.returncode for one in both] == [0, 0], told
    assert sum(int(out) for out, _ in told) >= 6
    ensemble = load_tracks(SMALL, 6)
    assert (ensemble.computed, ensemble.notes) == (0, ())
    for found, expected in zip(ensemble.tracks, fresh, strict=True):
        assert_same(found, expected)
    assert files(folder, ".crossing-*") == []


def test_killed_in_the_middle(folder: Path, fresh: tuple[LibraryTrack, ...]) -> None:
    running = process(1000)
    deadline = time.monotonic() + 300.0
    while len(files(folder)) < 2 and time.monotonic() < deadline and running.poll() is None:
        time.sleep(0.01)
    running.send_signal(signal.SIGKILL)
    running.communicate()
    assert len(files(folder)) >= 2
    ensemble = load_tracks(SMALL, 6)
    assert ensemble.computed <= 4
    assert ensemble.notes == ()
    for found, expected in zip(ensemble.tracks, fresh, strict=True):
        assert_same(found, expected)


def test_what_a_kill_leaves_is_swept_up_later(folder: Path) -> None:
    load_tracks(SMALL, 1)
    old, new = (folder / SMALL.key / f".crossing-{name}-track_000001.npz" for name in ("old", "new"))
    for path in (old, new):
        path.write_bytes(b"half")
    os.utime(old, (time.time() - 2e5, time.time() - 2e5))
    load_tracks(SMALL, 2)
    assert (old.exists(), new.exists()) == (False, True)
    assert TrackLibrary().cells()[0].tracks == 2


def _truncate(path: Path) -> None:
    path.write_bytes(path.read_bytes()[:-200])


def _empty(path: Path) -> None:
    path.write_bytes(b"")


def _flip(path: Path) -> None:
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 0xFF
    path.write_bytes(bytes(data))


def _other(path: Path) -> None:
    path.write_bytes(path.with_name("track_000000.npz").read_bytes())


@pytest.mark.parametrize("damage", [_truncate, _empty, _flip, _other])
def test_damaged_file(folder: Path, fresh: tuple[LibraryTrack, ...], damage: Callable[[Path], None]) -> None:
    load_tracks(SMALL, 2)
    damage(files(folder)[1])
    said: list[str] = []
    ensemble = load_tracks(SMALL, 2, say=said.append)
    assert ensemble.computed == 1
    assert tuple(said) == ensemble.notes
    assert len(said) == 1
    assert said[0].startswith(f"{files(folder)[1]}: is ")
    assert said[0].endswith("it is computed anew")
    assert_same(ensemble.tracks[1], fresh[1])
    assert load_tracks(SMALL, 2).notes == ()


def test_damaged_description(folder: Path) -> None:
    load_tracks(SMALL, 1)
    (folder / SMALL.key / "cell.json").write_text("{")
    (record,) = TrackLibrary().cells()
    assert (record.words, record.current, record.tracks) == ("its description is damaged", False, 1)
    load_tracks(SMALL, 2)
    (record,) = TrackLibrary().cells()
    assert (record.words, record.current, record.tracks) == (SMALL.words, True, 2)


def test_cell_that_is_removed_while_it_is_filled(folder: Path) -> None:
    def remove(done: int, count: int) -> None:
        if done == 1:
            TrackLibrary().remove(SMALL.key)

    ensemble = load_tracks(SMALL, 4, progress=remove, threads=1)
    assert (len(ensemble), ensemble.notes) == (4, ())
    (record,) = TrackLibrary().cells()
    assert record.words == SMALL.words
    assert 1 <= record.tracks <= 3


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EDQUOT])
def test_disk_full(folder: Path, monkeypatch: pytest.MonkeyPatch, number: int) -> None:
    load_tracks(SMALL, 1)

    def full(handle: int) -> None:
        raise OSError(number, os.strerror(number))

    with monkeypatch.context() as patch:
        patch.setattr(library_files.os, "fsync", full)
        with pytest.raises(InputError, match=r"tracks: the disk is full; free some space, remove cells with") as caught:
            load_tracks(SMALL, 3)
    assert "\n" not in str(caught.value)
    assert [path.name for path in files(folder, "*") + files(folder, ".*")] == ["cell.json", "track_000000.npz"]
    assert load_tracks(SMALL, 3).computed == 2


def test_no_place_to_write(folder: Path, monkeypatch: pytest.MonkeyPatch, fresh: tuple[LibraryTrack, ...]) -> None:
    folder.write_text("a file where the folder should be")
    library = TrackLibrary()
    ensemble = load_tracks(SMALL, 2, library=library)
    assert len(ensemble.notes) == 1
    assert ensemble.notes[0].startswith(f"{folder} cannot be written (")
    assert ensemble.notes[0].endswith("new tracks are kept in memory only")
    assert_same(ensemble.tracks[1], fresh[1])
    assert load_tracks(SMALL, 2, library=library).computed == 0


def test_library_that_can_only_be_read(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    load_tracks(SMALL, 1)

    def refused(path: Path, data: bytes) -> None:
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), str(path))

    monkeypatch.setattr(library_files, "_write", refused)
    ensemble = load_tracks(SMALL, 2)
    assert (ensemble.computed, len(ensemble.notes)) == (1, 1)
    assert "permission denied" in ensemble.notes[0]


def test_where_the_library_lies(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    for name in ("CROSSING_LIBRARY", "XDG_CACHE_HOME"):
        monkeypatch.delenv(name, raising=False)
    monkeypatch.setenv("HOME", str(tmp_path))
    assert library_folder() == tmp_path / ".cache" / "crossing" / "tracks"
    monkeypatch.setenv("XDG_CACHE_HOME", "relative")
    assert library_folder() == tmp_path / ".cache" / "crossing" / "tracks"
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    assert library_folder() == tmp_path / "cache" / "crossing" / "tracks"
    monkeypatch.setenv("CROSSING_LIBRARY", str(tmp_path / "own"))
    assert library_folder() == tmp_path / "own"

    def homeless() -> Path:
        raise RuntimeError("Could not determine home directory.")

    monkeypatch.delenv("CROSSING_LIBRARY")
    monkeypatch.delenv("XDG_CACHE_HOME")
    monkeypatch.setattr(Path, "home", homeless)
    assert "there is no folder for the library of tracks" in (TrackLibrary().fallback or "")


def test_listing_and_removal(folder: Path) -> None:
    assert TrackLibrary().cells() == []
    other = replace(SMALL, seed=1)
    load_tracks(SMALL, 2)
    load_tracks(other, 1)
    (folder / "not-a-cell").mkdir()
    found = {record.key: record for record in TrackLibrary().cells()}
    assert {key: record.tracks for key, record in found.items()} == {SMALL.key: 2, other.key: 1}
    record = found[SMALL.key]
    assert record.words == SMALL.words
    assert record.bytes == sum(path.stat().st_size for path in files(folder, "*"))
    assert record.current
    assert 0.0 <= record.to_dict()["age_days"] < 1.0
    with pytest.raises(InputError, match="`key` must be that of one cell, got 'x', which fits no cell"):
        TrackLibrary().remove("x")
    assert TrackLibrary().remove(SMALL.key[:8]).tracks == 2
    assert [one.key for one in TrackLibrary().cells()] == [other.key]
    assert sorted(path.name for path in folder.iterdir()) == sorted([other.key, "not-a-cell"])


def test_command(folder: Path, tmp_path: Path, capsys: Captured) -> None:
    assert main(["library"]) == 0
    assert capsys.readouterr().out == f"no tracks in {folder}\n"
    load_tracks(SMALL, 1)
    load_tracks(replace(SMALL, seed=1), 1)
    assert main(["library"]) == 0
    text = capsys.readouterr().out
    assert f"{SMALL.key}       1 " in text
    assert "kappa 0.45, gamma 0.2; kappa_star 0.03 (single, 1 Msun); length 1, any direction, accuracy 0.005" in text
    assert main(["library", "--remove", SMALL.key, "--json", "--out", str(tmp_path / "out")]) == 0
    told = json.loads(capsys.readouterr().out)
    assert [one["key"] for one in told["removed"]] == [SMALL.key]
    assert [one["tracks"] for one in told["cells"]] == [1]
    assert json.loads((tmp_path / "out" / "library.json").read_text()) == told
    assert main(["library", "--remove", "--all"]) == 0
    assert "no tracks in" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["--remove"], "`--remove` must have keys or --all"),
        (["--remove", "a", "--all"], "`--remove` must have keys or --all"),
        (["--all"], "`--all` must go with --remove"),
        (["--fill", EVENT, "--remove", "a"], "`--fill` and `--remove` must not be given at once"),
        (["--tracks", "3"], "`--tracks` must go with --fill"),
        (["--remove", "a"], "which fits no cell"),
        (["--fill", EVENT, "--tracks", "0"], "must be a whole number from 1 to 1000000, got '0'"),
        (["--fill", EVENT, "--length", "-1"], "must be a positive number, got '-1'"),
    ],
)
def test_bad_commands(folder: Path, capsys: Captured, words: list[str], message: str) -> None:
    assert main(["library", *words]) == 2
    told = capsys.readouterr()
    assert message in told.err
    assert (told.err.count("\n"), told.out) == (1, "")


def test_interrupted_filling(folder: Path, monkeypatch: pytest.MonkeyPatch, capsys: Captured) -> None:
    def interrupt(*arguments: Any, **options: Any) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("crossing.shooting.library.ensemble.load_tracks", interrupt)
    assert main(["library", "--fill", EVENT]) == 130
    assert capsys.readouterr().err == "crossing library: interrupted; tracks that were complete are kept\n"


def test_filling_by_command(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: Captured, fresh: tuple[LibraryTrack, ...]
) -> None:
    event = tmp_path / "event.toml"
    event.write_text('[event]\nname = "k"\n[macro]\nkappa = 0.45\ngamma = 0.2\n[[microlenses]]\nkappa_star = 0.1\n')
    # The library's nine radii take a while; three will do here.
    monkeypatch.setattr(
        "crossing.shooting.library.library_cell.TrackCell.from_setup", lambda setup, **told: replace(SMALL, **told)
    )
    words = ["library", "--fill", str(event), "--tracks", "2", "--accuracy", "0.005", "--out", str(tmp_path / "out")]
    assert main(words) == 0
    assert f"{SMALL.key}: 2 tracks, 2 of them new; mean magnification" in capsys.readouterr().out
    assert sorted(path.name for path in (tmp_path / "out").glob("[!.]*")) == ["library.json", "tracks.png"]
    assert main([*words, "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["filled"]["computed"] == 0
    sample = json.loads((HERE / "contract" / "library.json").read_text(encoding="utf-8"))
    assert differences(sample, told, optional=("removed",)) == []
    folder.rename(tmp_path / "moved")
    folder.write_text("in the way")
    assert main(words) == 2
    assert "set CROSSING_LIBRARY to a folder that can be written" in capsys.readouterr().err
