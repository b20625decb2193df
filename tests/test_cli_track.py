"""``crossing track``: its files, its JSON, that ``crossing fit`` reads them, and what it says of bad input."""

from __future__ import annotations

import io
import json
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.table import QTable
from documents import differences

from crossing.cli.main import main
from crossing.event import read_event
from crossing.photometry import read_lightcurve, read_photometry
from crossing.photometry.simulated import FLAGS, SimulatedEvent, simulate_event
from crossing.report.track import CAUTIONS, placing_text

HERE = Path(__file__).parent
EVENT = str(HERE.parent / "demo_lightcurves" / "well_sampled.toml")
SUMMARIES = {"track.json", "realisations.ecsv", "crossings.ecsv", ".crossing-track.json"}
SHORT = ("--duration", "40", "--cadence", "4", "--threads", "1")
# What outside checks read; the sample document holds more.
CONTRACT = {"files"}
FREE = ("flag_meanings", "versions", "priors", "limb_darkening", "flux_unlensed_njy", "peak_mag")

Captured = pytest.CaptureFixture[str]


@dataclass(frozen=True)
class Run:
    """A finished ``crossing track EVENT --json``."""

    status: int
    out: str
    err: str
    folder: Path

    @property
    def document(self) -> dict[str, Any]:
        return strict_json(self.out)


def strict_json(text: str) -> dict[str, Any]:
    def refuse(word: str) -> None:
        raise AssertionError(f"{word} is not JSON")

    document: dict[str, Any] = json.loads(text, parse_constant=refuse)
    return document


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> Run:
    folder = tmp_path_factory.mktemp("track") / "out"
    words = ["--realisations", "2", "--figures", "1", "--peak", "1000", "--seed", "1", "--json", "--out", str(folder)]
    with redirect_stdout(io.StringIO()) as out, redirect_stderr(io.StringIO()) as err:
        status = main(["track", EVENT, *SHORT, *words])
    return Run(status=status, out=out.getvalue(), err=err.getvalue(), folder=folder)


@pytest.fixture(scope="module")
def one(done: Run) -> SimulatedEvent:
    """A realisation to be shown instead of others, so that the tests of the command line need not wait."""
    from crossing.photometry.simulated import SimulationOptions
    from crossing.shooting.from_event import local_setup

    options = SimulationOptions(duration=40.0, cadence=4.0, peak=1000.0)
    return simulate_event(local_setup(read_event(EVENT)), options, number=0, seed=1, threads=1)


@pytest.fixture
def quick(monkeypatch: pytest.MonkeyPatch, one: SimulatedEvent) -> dict[str, Any]:
    """Simulate nothing: give the same realisation under other numbers; the arguments come back in this dictionary."""
    given: dict[str, Any] = {}

    def at_once(setup: Any, options: Any, *, number: int, seed: int, threads: int | None) -> SimulatedEvent:
        given.update(setup=setup, options=options, seed=seed, threads=threads)
        curve = replace(one.curve, flags=("lost",)) if given.get("bad") == number else replace(one.curve, flags=())
        return replace(one, number=number, curve=curve)

    monkeypatch.setattr("crossing.photometry.simulated.simulate_event", at_once)
    return given


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return tmp_path / "out"


def track(folder: Path, *words: str, event: str = EVENT) -> int:
    return main(["track", event, "--out", str(folder), *words])


def listing(folder: Path) -> set[str]:
    return {entry.name for entry in folder.iterdir()}


def own(*stems: str) -> set[str]:
    return {name for stem in stems for name in (f"event_{stem}.toml", f"light_curve_{stem}.ecsv", f"curve_{stem}.ecsv")}


# Output


def test_json_is_one_strict_document_and_all_that_is_printed(done: Run) -> None:
    assert done.out == (done.folder / "track.json").read_text(encoding="utf-8")
    assert done.out.isascii()
    flags = done.document["flags"]
    assert done.status == (3 if flags else 0)
    assert bool(done.err) == bool(flags)


def test_every_file_is_named_and_there(done: Run) -> None:
    assert listing(done.folder) == SUMMARIES | own("0", "1") | {"track_0.png"}
    files = [Path(name) for name in done.document["files"]]
    assert {path.name for path in files} == listing(done.folder) - {".crossing-track.json"}
    assert all(path.parent == done.folder for path in files)
    assert (done.folder / "track_0.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_the_document_keeps_to_the_contract(done: Run) -> None:
    # Made by `crossing track demo_lightcurves/well_sampled.toml --peak 1000 --seed 1 --json`; to be made again only
    # with a new version.
    sample = strict_json((HERE / "contract" / "track.json").read_text(encoding="utf-8"))
    assert sample.keys() >= CONTRACT
    assert differences(sample, done.document, free_keys=FREE, optional=[]) == []


def test_the_truth_is_told(done: Run) -> None:
    told = done.document
    assert told["placing"] == placing_text(1000.0)
    assert told["cautions"] == list(CAUTIONS)
    assert told["provenance"]["options"]["seed"] == 1
    assert told["provenance"]["inputs"][0]["path"] == EVENT
    assert [truth["number"] for truth in told["realisations"]] == [0, 1]
    for truth in told["realisations"]:
        middle = min(truth["crossings"], key=lambda item: abs(item["caustic_time_mjd"] - 61020.0))
        assert middle["caustic_time_mjd"] == pytest.approx(61020.0, abs=0.05)
        assert middle["peak_magnification"] >= 999.0
        assert truth["rows"] == 20
    table = QTable.read(done.folder / "realisations.ecsv")
    assert list(table["radius_rsun"]) == [truth["radius_rsun"] for truth in told["realisations"]]
    assert list(table["crossings"]) == [len(truth["crossings"]) for truth in told["realisations"]]
    assert "peak_mag_short" in table.colnames
    met = QTable.read(done.folder / "crossings.ecsv")
    assert len(met) == sum(table["crossings"])
    assert set(met["orientation"]) <= {"entering", "leaving"}


def test_curves_can_be_read(done: Run) -> None:
    for number in (0, 1):
        curve = QTable.read(done.folder / f"curve_{number}.ecsv")
        assert curve["mjd"][0].value == 61000.0
        assert curve["mjd"][-1].value == pytest.approx(61040.0)
        assert (curve["flux_short"] / curve["magnification_short"]).value == pytest.approx(
            curve.meta["flux_unlensed_njy"]["short"]
        )
        assert np.max(curve["magnification_short"]) == pytest.approx(curve.meta["peak_magnification"])


def test_the_event_file_stands_for_a_whole_event(done: Run) -> None:
    for truth in done.document["realisations"]:
        event = read_event(truth["event_file"])
        assert event.name == f"Lantern arc, knot 3 (invented) (simulated {truth['number']})"
        seen = read_photometry(event)
        assert len(seen) == truth["rows"]
        assert set(seen.bands) == {"short", "middle"}
        again = read_lightcurve(truth["light_curve_file"])
        assert np.array_equal(again.flux, seen.flux)


def test_fit_reads_it_unchanged(done: Run, folder: Path, capsys: Captured) -> None:
    truth = done.document["realisations"][0]
    status = main(["fit", truth["event_file"], "--model", "fold", "--json", "--out", str(folder)])
    found = strict_json(capsys.readouterr().out)
    assert status in (0, 3)
    middle = min(truth["crossings"], key=lambda item: abs(item["caustic_time_mjd"] - 61020.0))
    # a star of 231 Rsun at 401 km/s, seen at a S/N of 30: a fold that is well resolved
    assert found["orientation"][middle["orientation"]] > 0.99
    for name, true in (
        ("caustic_time_mjd", middle["caustic_time_mjd"]),
        ("radius_time_days", middle["radius_time_days"]),
        ("peak_time_mjd", truth["peak_time_mjd"]),
    ):
        estimate = found[name]
        width = estimate["high"] - estimate["low"]
        assert estimate["low"] - width < true < estimate["high"] + width  # within three standard deviations


# Options


def test_random_places_are_the_default(quick: dict[str, Any], folder: Path, capsys: Captured) -> None:
    assert track(folder, "--realisations", "2", "--figures", "0") == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert "2 simulated light curves" in out
    assert "Tracks lie at random" in out
    assert f"crossing fit {folder / 'event_0.toml'}" in out
    assert (quick["options"].peak, quick["options"].duration, quick["options"].limit_sigma) == (None, 100.0, None)
    assert listing(folder) == SUMMARIES | own("0", "1")


def test_options_arrive(quick: dict[str, Any], folder: Path) -> None:
    words = (
        "--peak --duration 50 --cadence 5 --start 59000 --limit-sigma 3 --accuracy 0.01 --seed 9 --threads 2 --quiet"
    )
    assert track(folder, *words.split(), "--figures", "0") == 0
    told = quick["options"]
    assert (told.peak, told.duration, told.cadence, told.start_mjd) == (0.0, 50.0, 5.0, 59000.0)
    assert (told.limit_sigma, told.accuracy, quick["seed"], quick["threads"]) == (3.0, 0.01, 9, 2)


def test_numbers_are_padded_and_long_lists_cut(quick: dict[str, Any], folder: Path, capsys: Captured) -> None:
    assert track(folder, "--realisations", "14", "--figures", "0", "--peak", "200") == 0
    out = capsys.readouterr().out
    assert "... and 2 more, in realisations.ecsv" in out
    assert "that peak at a magnification of 200 or more" in out
    assert {"event_00.toml", "event_13.toml"} <= listing(folder)
    assert 'file = "light_curve_07.ecsv"' in (folder / "event_07.toml").read_text()


def test_a_flagged_realisation_is_said_and_ends_with_three(
    quick: dict[str, Any], folder: Path, capsys: Captured
) -> None:
    quick["bad"] = 1
    assert track(folder, "--realisations", "3", "--figures", "0") == 3
    out, err = capsys.readouterr()
    assert f"flag curve_inaccurate: {FLAGS['curve_inaccurate']}" in out
    assert err.startswith(f"crossing track: {EVENT}: done, but flagged: curve_inaccurate: ")
    assert err.count("\n") == 1
    told = strict_json((folder / "track.json").read_text())
    assert [truth["status"] for truth in told["realisations"]] == ["ok", "curve_inaccurate", "ok"]
    assert told["status"] == "curve_inaccurate"


def test_a_plan_writes_nothing(quick: dict[str, Any], folder: Path, capsys: Captured) -> None:
    assert track(folder, "--plan", "--realisations", "10", "--json") == 0
    plan = strict_json(capsys.readouterr().out)["plan"]
    assert (plan["realisations"], plan["files"]) == (10, 3 + 30 + 3)
    assert track(folder, "--plan") == 0
    assert capsys.readouterr().out.startswith("about ")
    assert not folder.exists()


def test_a_second_run_may_replace_its_files_but_no_others(
    quick: dict[str, Any], folder: Path, capsys: Captured
) -> None:
    for _ in range(2):
        assert track(folder, "--figures", "0", "--quiet") == 0
    (folder / "event_0.toml").write_text("mine")
    assert track(folder, "--figures", "0", "--quiet") == 2
    assert "event_0.toml: was changed since crossing track wrote it" in capsys.readouterr().err
    assert (folder / "event_0.toml").read_text() == "mine"
    assert track(folder, "--figures", "0", "--quiet", "--overwrite") == 0


def test_an_interruption_leaves_nothing(
    quick: dict[str, Any], folder: Path, monkeypatch: pytest.MonkeyPatch, capsys: Captured
) -> None:
    def interrupt(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("crossing.report.track.realisations_table", interrupt)  # with most files already made
    assert track(folder, "--figures", "0") == 130
    assert capsys.readouterr() == ("", "crossing track: interrupted; nothing was written\n")
    assert not folder.exists()


# Bad input


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["--realisations", "0"], "--realisations: must be a whole number from 1 to 100000, got '0'"),
        (["--duration", "-5"], "--duration: must be a positive number, got '-5'"),
        (["--cadence", "0"], "--cadence: must be a positive number, got '0'"),
        (
            ["--peak", "high"],
            "--peak: must be a magnification, or come after the event file where it has none, got 'high'",
        ),
        (["--start", "nan"], "--start: must be a modified Julian date, got 'nan'"),
        (["--figures", "-1"], "--figures: must be a whole number from 0 to 100000, got '-1'"),
        (["--cadence", "200"], "`cadence` must be at most the duration, 100 days, got 200; lower it"),
    ],
    ids=lambda item: " ".join(item) if isinstance(item, list) else "",
)
def test_bad_options_are_refused(folder: Path, capsys: Captured, words: list[str], says: str) -> None:
    assert track(folder, *words) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert says in err
    assert not folder.exists()


def test_a_band_without_depth_is_named(tmp_path: Path, folder: Path, capsys: Captured) -> None:
    path = tmp_path / "event.toml"
    path.write_text(Path(EVENT).read_text().replace('depth = "28.7 mag"\n', ""))
    assert track(folder, event=str(path)) == 2
    assert f"crossing track: {path}: bands.middle.depth: must be given for crossing track" in capsys.readouterr().err
    assert not folder.exists()


def test_a_motion_too_fast_for_the_window_is_refused(folder: Path, capsys: Captured) -> None:
    assert track(folder, "--duration", "1e8", "--cadence", "1e4") == 2
    assert "`length` of a track must be at most 200 Einstein radii" in capsys.readouterr().err
    assert not folder.exists()
