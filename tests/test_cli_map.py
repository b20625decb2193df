"""``crossing map``: its files, its JSON, plans, interruptions, and what it says about bad input."""

from __future__ import annotations

import io
import json
import os
import re
import signal
import subprocess
import sys
import time
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.table import QTable
from documents import differences

from crossing.cli import map as verb
from crossing.cli.main import main
from crossing.errors import InputError
from crossing.report.map import CAUTIONS
from crossing.shooting.maps.magnification_map import FLAGS, MagnificationMap

HERE = Path(__file__).parent
EVENT = str(HERE.parent / "demo_lightcurves" / "well_sampled.toml")
FILES = {"map.fits", "map.json", "statistics.ecsv", "map.png"}
LISTING = FILES | {".crossing-map.json"}
SMALL = ("--width", "4", "--height", "3", "--pixels", "40", "--accuracy", "0.02")
# What outside checks read; the sample document holds more.
CONTRACT = {"file", "mean_magnification", "error_estimate", "images"}

Captured = pytest.CaptureFixture[str]


@dataclass(frozen=True)
class Run:
    """A finished ``crossing map EVENT --json``."""

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
    folder = tmp_path_factory.mktemp("map") / "out"
    with redirect_stdout(io.StringIO()) as out, redirect_stderr(io.StringIO()) as err:
        status = main(["map", EVENT, *SMALL, "--json", "--seed", "3", "--out", str(folder)])
    return Run(status=status, out=out.getvalue(), err=err.getvalue(), folder=folder)


@pytest.fixture
def quick(monkeypatch: pytest.MonkeyPatch) -> dict[str, Any]:
    """Make every map of the test at once, with what is in this dictionary; the arguments come back in it."""
    given: dict[str, Any] = {"error_estimate": 1e-4}

    def at_once(field: Any, **asked: Any) -> MagnificationMap:
        given["asked"] = asked
        rows = max(1, round(asked["height"] / asked["width"] * asked["pixels"]))
        values = np.random.default_rng(1).lognormal(4.0, 0.5, (rows, asked["pixels"]))
        return MagnificationMap(
            values=values,
            center=(0.0, 0.0),
            width=asked["width"],
            height=asked["width"] * rows / asked["pixels"],
            method=asked["method"],
            accuracy=asked["accuracy"],
            error_estimate=given["error_estimate"],
            images=field.images,
            expected_mean=field.expected_mean,
        )

    monkeypatch.setattr("crossing.shooting.maps.mapping.magnification_map", at_once)
    return given


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return tmp_path / "out"


def draw_map(folder: Path, *words: str, event: str = EVENT) -> int:
    return main(["map", event, "--out", str(folder), *SMALL, *words])


def listing(folder: Path) -> set[str]:
    return {entry.name for entry in folder.iterdir()}


def write_event(folder: Path, macro: str, *rest: str) -> str:
    text = '[event]\nname = "knot"\n[lens]\nredshift = 0.43\n[source]\nredshift = 1.21\n' + macro
    (folder / "event.toml").write_text(text + "".join(rest or ("[[microlenses]]\nkappa_star = 0.02\n",)))
    return str(folder / "event.toml")


# Output


def test_json_is_one_strict_document_and_all_that_is_printed(done: Run) -> None:
    assert done.err == ""
    assert done.status == 0
    assert done.document["event"] == "Lantern arc, knot 3 (invented)"
    assert done.out == (done.folder / "map.json").read_text(encoding="utf-8")
    assert done.out.isascii()


def test_the_files_are_there_and_can_be_read(done: Run) -> None:
    assert listing(done.folder) == LISTING
    assert done.document["file"] == str(done.folder / "map.fits")
    found = MagnificationMap.read(done.document["file"])
    assert found.pixels == (40, 30)
    assert (found.width, found.height, found.center) == (4.0, 3.0, (0.0, 0.0))
    assert found.mean_magnification == done.document["mean_magnification"]
    assert found.description == done.document["provenance"]
    assert found.error is not None
    table = QTable.read(done.folder / "statistics.ecsv")
    assert table["exceeding"][0] == pytest.approx(1.0, rel=1e-14)  # a sum of pixels' shares
    # the same sum in another order
    assert table.meta["mean"] == pytest.approx(done.document["mean_magnification"], rel=1e-12)
    assert (done.folder / "map.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_the_document_keeps_to_the_contract(done: Run) -> None:
    sample = strict_json((HERE / "contract" / "map.json").read_text(encoding="utf-8"))
    # Made by `crossing map demo_lightcurves/well_sampled.toml --json`; to be made again only with a new version.
    assert sample.keys() >= CONTRACT
    assert differences(sample, done.document, free_keys=["flag_meanings", "versions"], optional=[]) == []


def test_the_numbers_are_those_of_the_event(done: Run) -> None:
    told = done.document
    # 1 / (0.32 x 0.045) x 1.9, from the event file
    assert told["expected_mean"] == pytest.approx(1.9 / (0.32 * 0.045), rel=1e-9)
    assert told["kappa_star"] == pytest.approx(0.0084536, rel=1e-4)  # regression only: 21 Msun/pc^2 over Sigma_crit
    assert 0.5 < told["mean_magnification"] / told["expected_mean"] < 2.0  # one field of a small window
    assert told["statistics"]["mean"] == pytest.approx(told["mean_magnification"], rel=1e-12)  # another order of sums
    assert (told["images"], told["method"], told["pixels"], told["stars"] > 100) == (1, "area", [40, 30], True)
    assert told["cautions"] == list(CAUTIONS)


def test_the_document_says_where_it_comes_from(done: Run) -> None:
    told = done.document["provenance"]
    assert told["options"] == {
        "width": 4.0,
        "height": 3.0,
        "pixels": 40,
        "method": "area",
        "accuracy": 0.02,
        "seed": 3,
        "model": None,
        "pair": None,
    }
    assert {"crossing", "numpy", "numba"} <= told["versions"].keys()
    assert [Path(one["path"]).name for one in told["inputs"]] == ["well_sampled.toml"]
    assert re.fullmatch("[0-9a-f]{64}", told["inputs"][0]["sha256"])
    assert told["field"]["seed"]["entropy"] == "3"
    assert told["field"]["populations"][0]["mass_function"] == "kroupa"


def test_the_same_seed_gives_the_same_files(done: Run, folder: Path, tmp_path: Path) -> None:
    # With one thread as with all; the JSON differs in the folder that it names.
    assert draw_map(folder, "--quiet", "--seed", "3", "--threads", "1") == 0
    for name in FILES - {"map.json"}:
        assert (folder / name).read_bytes() == (done.folder / name).read_bytes(), name
    again = strict_json((folder / "map.json").read_text())
    assert again | {"file": ""} == done.document | {"file": ""}
    assert draw_map(tmp_path / "other", "--quiet", "--seed", "4") == 0
    other = MagnificationMap.read(tmp_path / "other" / "map.fits")
    assert not np.array_equal(other.values, MagnificationMap.read(folder / "map.fits").values)


def test_rays_agree_with_areas(done: Run, folder: Path) -> None:
    assert draw_map(folder, "--quiet", "--seed", "3", "--method", "rays") == 0
    counted = MagnificationMap.read(folder / "map.fits")
    area = MagnificationMap.read(done.folder / "map.fits")
    assert counted.method == "rays"
    # 50 rays a pixel, 60,000 in all; errors of single pixels are those that the maps state.
    assert counted.mean_magnification == pytest.approx(area.mean_magnification, rel=0.01)
    assert counted.error is not None
    assert area.error is not None
    pulls = (counted.values - area.values) / np.hypot(counted.error, area.error)
    assert np.sqrt(np.mean(pulls**2)) < 1.5


def test_caustics_are_traced_if_asked_for(quick: dict[str, Any], folder: Path, capsys: Captured) -> None:
    assert draw_map(folder, "--caustics", "--json") == 0
    assert listing(folder) == LISTING | {"caustics.ecsv"}
    found = strict_json(capsys.readouterr().out)["caustics"]
    table = QTable.read(folder / "caustics.ecsv")
    assert len(table) == found["vertices"] > 0
    assert found["status"] == "ok"
    half = 0.5 * quick["asked"]["width"]
    assert np.abs(table["u"]).max() <= half * (1.0 + 1e-12)
    # Without, there are none.
    assert draw_map(folder) == 0
    assert listing(folder) >= LISTING
    assert "caustics  " not in capsys.readouterr().out
    assert draw_map(folder, "--caustics") == 0
    assert "caustics  " in capsys.readouterr().out


def test_quiet_prints_nothing(quick: dict[str, Any], folder: Path, capsys: Captured) -> None:
    assert draw_map(folder, "--quiet") == 0
    assert capsys.readouterr() == ("", "")
    assert listing(folder) == LISTING


def test_without_options_a_summary_is_printed(quick: dict[str, Any], folder: Path, capsys: Captured) -> None:
    assert draw_map(folder) == 0
    out, err = capsys.readouterr()
    assert out.startswith("Lantern arc, knot 3 (invented): magnification map\n")
    assert f"written to {folder}: map.fits, " in out
    assert "cautions:" in out
    assert "pc at the source" in out
    assert "days per Einstein radius" in out
    assert "macro model" not in out
    assert err == ""


def test_the_default_map_and_its_folder(quick: dict[str, Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(["map", EVENT, "--quiet", "--threads", "1"]) == 0
    assert listing(tmp_path) == {"well_sampled_map"}
    asked = quick["asked"]
    assert asked.pop("checkpoint") == Path("well_sampled_map") / ".crossing-map-checkpoint.npz"
    assert asked == {"width": 10.0, "height": 10.0, "pixels": 1000, "method": "area", "accuracy": 1e-3, "threads": 1}


def test_a_flagged_map_gives_3_and_says_why_in_one_line(quick: dict[str, Any], folder: Path, capsys: Captured) -> None:
    quick["error_estimate"] = 0.041
    assert draw_map(folder, "--json") == 3
    out, err = capsys.readouterr()
    assert strict_json(out)["flags"] == ["accuracy_not_reached"]
    assert err == f"crossing map: {EVENT}: done, but flagged: accuracy_not_reached: {FLAGS['accuracy_not_reached']}\n"
    assert listing(folder) == LISTING
    quick["error_estimate"] = float("nan")
    assert draw_map(folder, "--json") == 0
    assert strict_json(capsys.readouterr().out)["error_estimate"] is None


def test_one_of_several_macro_models(quick: dict[str, Any], folder: Path, tmp_path: Path, capsys: Captured) -> None:
    models = "".join(
        f'[[macro.models]]\nname = "{name}"\nkappa = {kappa}\ngamma = 0.2\nweight = {weight}\n'
        for name, kappa, weight in (("A", 0.6, 1), ("B", 0.7, 3))
    )
    event = write_event(tmp_path, models)
    assert draw_map(folder, event=event) == 0
    assert "macro model          1 (B) of 2" in capsys.readouterr().out
    assert draw_map(folder, "--model", "0", "--json", event=event) == 0
    told = strict_json(capsys.readouterr().out)
    assert told["expected_mean"] == pytest.approx(1 / (0.4**2 - 0.2**2))
    assert told["provenance"]["event"]["macro_name"] == "A"
    assert draw_map(folder, "--model", "2", event=event) == 2
    assert "macro.models: must have the model that is asked for, 0 to 1, got 2" in capsys.readouterr().err


def test_a_merging_pair(folder: Path, tmp_path: Path, capsys: Captured) -> None:
    macro = '[macro]\ncaustic_distance = "2e-6 arcsec"\ngradient = "2000 / arcsec"\nmu_r = 2\nside = "pair"\n'
    event = write_event(tmp_path, macro)
    assert draw_map(folder, "--json", event=event) == 0
    told = strict_json(capsys.readouterr().out)
    assert (told["images"], told["expected_mean"]) == (2, None)
    # Smooth fold: K / sqrt(d), K = 2 sqrt(2 / g), with g per theta_E and d from the caustic, averaged over the window.
    field = MagnificationMap.read(folder / "map.fits")
    gradient = told["provenance"]["field"]["gradient"][0]
    depth = 0.5 * (1 - told["kappa"] - told["gamma"]) ** 2 / gradient
    edges = np.maximum(depth + np.array([-2.0, 2.0]), 0.0)
    smooth = 2 * np.sqrt(2 / gradient) * np.diff(2 * np.sqrt(edges))[0] / 4.0
    assert field.mean_magnification == pytest.approx(smooth, rel=0.15)  # one field of a window of 4 x 3


@pytest.mark.skipif(sys.platform == "win32", reason="no pseudo-terminals")
@pytest.mark.parametrize("words", [[], ["--quiet"]], ids=["loud", "quiet"])
def test_plan_and_progress_go_to_a_terminal_only(words: list[str], folder: Path) -> None:
    import pty
    import termios

    ours, theirs = pty.openpty()
    termios.tcsetwinsize(theirs, (24, 80))
    command = [sys.executable, "-m", "crossing", "map", EVENT, *SMALL, "--json", "--out", str(folder), *words]
    found = subprocess.run(command, stdout=subprocess.PIPE, stderr=theirs, timeout=300)
    os.close(theirs)
    shown = b""
    try:
        while part := os.read(ours, 65536):
            shown += part
    except OSError:  # how Linux says that the other end is closed
        pass
    os.close(ours)
    assert found.returncode == 0
    assert strict_json(found.stdout.decode())["verb"] == "map"
    assert (b"crossing map: about " in shown) == (not words)
    assert (b"mapping" in shown) == (not words)


# Plans


def test_a_plan_is_printed_and_nothing_written(
    tmp_path: Path, capsys: Captured, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(["map", EVENT, *SMALL, "--plan"]) == 0
    out, err = capsys.readouterr()
    assert re.fullmatch(r"about \S+ s and \S+ GiB, \d+ stars, \S+ rays\n", out)
    assert err == ""
    assert main(["map", EVENT, *SMALL, "--plan", "--json"]) == 0
    told = strict_json(capsys.readouterr().out)
    assert told.keys() == {"verb", "plan"}
    assert told["plan"].keys() == {"stars", "leaves", "rays", "seconds", "bytes"}
    assert told["plan"]["stars"] > 100
    assert listing(tmp_path) == set()


# Interruptions

# Runs the verb with a checkpoint after every share, and says when the first one is there.
SLOW = """
import sys, threading, time
import crossing.shooting.maps.mapping as mapping
made = mapping.magnification_map
def slowed(field, *, checkpoint, **asked):
    def watch():
        while not checkpoint.exists():
            time.sleep(0.002)
        print("checkpoint", file=sys.stderr, flush=True)
    threading.Thread(target=watch, daemon=True).start()
    return made(field, checkpoint=checkpoint, checkpoint_seconds=0.0, **asked)
mapping.magnification_map = slowed
from crossing.cli.main import main
sys.exit(main(sys.argv[1:]))
"""
LONG = ("--width", "6", "--pixels", "500", "--seed", "5", "--threads", "1")


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    folder = tmp_path_factory.mktemp("undisturbed")
    assert main(["map", EVENT, *LONG, "--quiet", "--out", str(folder)]) == 0
    return (folder / "map.fits").read_bytes()


def stopped(folder: Path, how: int) -> tuple[int, str]:
    """Status and last words of a run that is stopped after its first checkpoint."""
    words = ["map", EVENT, *LONG, "--quiet", "--out", str(folder)]
    with subprocess.Popen([sys.executable, "-c", SLOW, *words], stderr=subprocess.PIPE, text=True) as process:
        assert process.stderr is not None
        assert process.stderr.readline() == "checkpoint\n"
        process.send_signal(how)
        _, err = process.communicate(timeout=120)
    return process.returncode, err


@pytest.mark.skipif(sys.platform == "win32", reason="no such signal")
def test_ctrl_c_keeps_a_checkpoint_that_the_same_command_takes_up(folder: Path, undisturbed: bytes) -> None:
    status, err = stopped(folder, signal.SIGINT)
    checkpoint = folder / ".crossing-map-checkpoint.npz"
    assert status == 130
    assert (
        err == f"crossing map: interrupted; {checkpoint} keeps what is done, and the same command goes on from there\n"
    )
    assert listing(folder) == {checkpoint.name}
    assert main(["map", EVENT, *LONG, "--quiet", "--out", str(folder)]) == 0
    assert (folder / "map.fits").read_bytes() == undisturbed
    assert listing(folder) == LISTING


@pytest.mark.skipif(sys.platform == "win32", reason="no such signal")
def test_kill_leaves_a_checkpoint_too(folder: Path, undisturbed: bytes) -> None:
    status, _ = stopped(folder, signal.SIGKILL)
    assert status == -signal.SIGKILL
    assert ".crossing-map-checkpoint.npz" in listing(folder)
    start = time.monotonic()
    assert main(["map", EVENT, *LONG, "--quiet", "--out", str(folder)]) == 0
    assert time.monotonic() - start < 300.0
    assert (folder / "map.fits").read_bytes() == undisturbed
    assert {name for name in listing(folder) if not name.endswith(".tmp")} == LISTING


@pytest.mark.parametrize("error", [KeyboardInterrupt, InputError("no"), RuntimeError("no")], ids=repr)
def test_without_a_checkpoint_nothing_is_left(
    error: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: Captured
) -> None:
    def stop(*_: object, **__: object) -> None:
        raise error

    monkeypatch.setattr("crossing.shooting.maps.mapping.magnification_map", stop)
    status = draw_map(tmp_path / "deep" / "out")
    assert status == (130 if error is KeyboardInterrupt else 2 if isinstance(error, InputError) else 1)
    assert capsys.readouterr().err.count("\n") == 1
    assert listing(tmp_path) == set()


# Whose file is it?


@pytest.mark.parametrize("name", sorted(FILES))
def test_a_foreign_file_is_kept(name: str, folder: Path, capsys: Captured, monkeypatch: pytest.MonkeyPatch) -> None:
    def never(*_: object, **__: object) -> None:
        raise AssertionError("the refusal must come before the work")

    monkeypatch.setattr("crossing.shooting.maps.mapping.magnification_map", never)
    folder.mkdir()
    (folder / name).write_text("notes of somebody")
    assert draw_map(folder) == 2
    assert f"{folder / name}: is there already, and crossing map did not write it" in capsys.readouterr().err
    assert listing(folder) == {name}


def test_a_second_run_replaces_the_first(quick: dict[str, Any], folder: Path) -> None:
    assert draw_map(folder, "--quiet") == 0
    assert draw_map(folder, "--quiet", "--pixels", "50") == 0
    assert MagnificationMap.read(folder / "map.fits").pixels[0] == 50
    assert listing(folder) == LISTING


# Bad input


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["--width", "0"], "argument --width: must be a positive number, got '0'"),
        (["--height", "ten"], "argument --height: must be a positive number, got 'ten'"),
        (["--accuracy", "inf"], "argument --accuracy: must be a positive number, got 'inf'"),
        (["--pixels", "0"], "argument --pixels: must be a whole number from 1 to 50000, got '0'"),
        (["--pixels", "1e3"], "argument --pixels: must be a whole number from 1 to 50000, got '1e3'"),
        (["--model", "-1"], "argument --model: must be a whole number, 0 or more, got '-1'"),
        (["--method", "area2"], "argument --method: invalid choice: 'area2'"),
    ],
)
def test_bad_options(words: list[str], says: str, folder: Path, capsys: Captured) -> None:
    assert main(["map", EVENT, "--out", str(folder), *words]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert says in err
    assert not folder.exists()


@pytest.mark.parametrize(
    ("macro", "rest", "words", "says"),
    [
        ("", (), [], "macro: must be given for crossing map"),
        ("[macro]\nkappa = 0.5\ngamma = 0.3\n", ("",), [], "microlenses: must be given for crossing map"),
        (
            "[macro]\nkappa = 0.5\ngamma = 0.3\n",
            (
                '[bands.red]\nwavelength = "1 um"\n[microlenses]\nsurface_brightness = "15 mag / arcsec2"\n',
                'band = "red"\nmass_to_light = "2 solMass / solLum"\n',
            ),
            [],
            "microlenses: must not hold more than the macro lens",
        ),
        ("[macro]\nkappa = 0.5\ngamma = 0.3\n", (), ["--pair"], "macro: must have a gradient along x"),
        ("[macro]\nkappa = 0.7\ngamma = 0.2999\n", (), ["--width", "1e6"], "event.toml: the window needs about"),
        ("[macro]\nkappa = 0.5\ngamma = 0.3\n", (), ["--accuracy", "0.9"], "`accuracy` must be between"),
    ],
)
def test_events_that_make_no_map(
    macro: str, rest: tuple[str, ...], words: list[str], says: str, folder: Path, tmp_path: Path, capsys: Captured
) -> None:
    assert draw_map(folder, *words, event=write_event(tmp_path, macro, *rest)) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert err.startswith("crossing map: ")
    assert says in err
    assert not folder.exists()


# The manual


def test_readme_names_every_file_and_flag() -> None:
    text = (HERE.parent / "README.md").read_text(encoding="utf-8")
    for name in (*FLAGS, *verb._FILES):
        assert f"`{name}`" in text
