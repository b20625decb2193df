"""``crossing fit``: its files, its JSON, who owns what, and what it says about bad input."""

from __future__ import annotations

import io
import json
import os
import re
import subprocess
import sys
import tomllib
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
from crossing.inference import CrossingFit, fit_crossing

HERE = Path(__file__).parent
DEMO = HERE.parent / "demo_lightcurves"
EVENT = str(DEMO / "four_epochs.toml")
FILES = {"fit.json", "parameters.ecsv", "samples.ecsv", "residuals.ecsv", "light_curve.png"}
LISTING = FILES | {".crossing-fit.json"}
BAD_EVENTS = sorted((HERE / "malformed" / "events").glob("*.toml"))
BAD_CURVES = HERE / "malformed" / "lightcurves"
EXPECT: dict[str, dict[str, Any]] = tomllib.loads((BAD_CURVES / "expect.toml").read_text(encoding="utf-8"))
# What outside checks read; the sample document holds more.
CONTRACT = {
    *("model", "caustic_time_mjd", "peak_time_mjd", "radius_time_days", "radius_rsun", "peak_magnification"),
    *("temperature_K", "luminosity_lsun", "chi2", "dof", "ln_evidence", "converged", "flags"),
}
BY_DATA = ("orientation", "amplitude_njy", "level_njy", "extra_scatter", "best_fit", "flag_meanings", "priors")

Captured = pytest.CaptureFixture[str]


@dataclass(frozen=True)
class Run:
    """A finished ``crossing fit EVENT --model fold --json``."""

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
    folder = tmp_path_factory.mktemp("fit") / "out"
    with redirect_stdout(io.StringIO()) as out, redirect_stderr(io.StringIO()) as err:
        status = main(["fit", EVENT, "--model", "fold", "--json", "--seed", "3", "--out", str(folder)])
    return Run(status=status, out=out.getvalue(), err=err.getvalue(), folder=folder)


@pytest.fixture(scope="module")
def fitted() -> CrossingFit:
    return fit_crossing(read_event(EVENT), model="constant")


@pytest.fixture
def quick(monkeypatch: pytest.MonkeyPatch, fitted: CrossingFit) -> CrossingFit:
    """A result without flags that every fit of the test gets at once."""
    result = replace(fitted, flags=())
    monkeypatch.setattr("crossing.inference.fit_crossing", lambda *_, **__: result)
    return result


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return tmp_path / "out"


def fit(folder: Path, *words: str, event: str = EVENT) -> int:
    return main(["fit", event, "--out", str(folder), *words])


def listing(folder: Path) -> set[str]:
    return {entry.name for entry in folder.iterdir()}


# Output


def test_json_is_one_strict_document_and_all_that_is_printed(done: Run) -> None:
    assert done.status == 0
    assert done.err == ""
    assert done.document["event"] == "Lantern arc, knot 5 (invented)"
    assert done.out == (done.folder / "fit.json").read_text(encoding="utf-8")
    assert done.out.isascii()


def test_the_files_are_there_and_can_be_read(done: Run) -> None:
    assert listing(done.folder) == LISTING
    parameters = QTable.read(done.folder / "parameters.ecsv")
    row = list(parameters["quantity"]).index("radius_rsun")
    assert parameters["median"][row] == done.document["radius_rsun"]["median"]
    samples = QTable.read(done.folder / "samples.ecsv")
    assert np.median(samples["radius_rsun"]) == pytest.approx(done.document["radius_rsun"]["median"], rel=1e-12)
    assert len(QTable.read(done.folder / "residuals.ecsv")) == 8  # four epochs in two bands
    assert (done.folder / "light_curve.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_the_document_keeps_to_the_contract(done: Run) -> None:
    sample = strict_json((HERE / "contract" / "fit.json").read_text(encoding="utf-8"))
    # Made by `crossing fit demo_lightcurves/well_sampled.toml --json`; to be made again only with a new version.
    assert sample.keys() >= CONTRACT
    assert sample["candidates"]
    assert differences(sample, done.document, free_keys=BY_DATA, optional=["limit_95"]) == []
    for name, value in done.document.items():
        if isinstance(value, dict) and "median" in value:
            assert value["low"] <= value["median"] <= value["high"], name
            assert value["bound"] in ("two-sided", "upper", "lower"), name


def test_the_document_says_where_it_comes_from(done: Run) -> None:
    told = done.document["provenance"]
    assert told["options"] == {"model": "fold", "colours": "free", "extra_scatter": False, "samples": 4000, "seed": 3}
    assert {"crossing", "numpy", "scipy", "astropy", "lmfit", "dynesty", "python"} <= told["versions"].keys()
    assert [Path(one["path"]).name for one in told["inputs"]] == ["four_epochs.toml", "four_epochs.csv"]
    assert all(re.fullmatch("[0-9a-f]{64}", one["sha256"]) for one in told["inputs"])


def test_several_macro_models_are_told_apart(folder: Path, tmp_path: Path, capsys: Captured) -> None:
    text = Path(EVENT).read_text(encoding="utf-8").replace('"four_epochs.csv"', f'"{DEMO / "four_epochs.csv"}"')
    models = "".join(
        f'[[macro.models]]\nname = "{name}"\nweight = {weight}\nmu_t = {mu_t}\nmu_r = 1.9\n\n'
        for name, weight, mu_t in (("A", 1, 150.0), ("B", 3, -300.0))
    )
    event = tmp_path / "two_models.toml"
    event.write_text(re.sub(r"\[macro\].*?\n\n", models, text, flags=re.DOTALL), encoding="utf-8")
    assert fit(folder, "--model", "fold", "--json", event=str(event)) == 0
    document = strict_json(capsys.readouterr().out)
    assert [(one["name"], one["weight"]) for one in document["models"]] == [("A", 0.25), ("B", 0.75)]
    for one in document["models"]:
        assert differences(document["radius_rsun"], one["radius_rsun"], optional=["limit_95"]) == []


def test_the_same_seed_gives_the_same_files(done: Run, folder: Path) -> None:
    # Bit for bit on one machine and one version, figure included.
    assert fit(folder, "--model", "fold", "--quiet", "--seed", "3") == 0
    for name in FILES:
        assert (folder / name).read_bytes() == (done.folder / name).read_bytes(), name


def test_quiet_prints_nothing(quick: CrossingFit, folder: Path, capsys: Captured) -> None:
    assert fit(folder, "--quiet") == 0
    assert capsys.readouterr() == ("", "")
    assert listing(folder) == LISTING


def test_without_options_a_summary_is_printed(quick: CrossingFit, folder: Path, capsys: Captured) -> None:
    assert fit(folder) == 0
    out, err = capsys.readouterr()
    assert out.startswith("Lantern arc, knot 5 (invented): constant\n")
    assert f"written to {folder}: fit.json, " in out
    assert "cautions:" in out
    assert err == ""


def test_names_that_a_terminal_cannot_show_are_no_fault(tmp_path: Path) -> None:
    text = Path(EVENT).read_text(encoding="utf-8").replace('"four_epochs.csv"', f'"{DEMO / "four_epochs.csv"}"')
    event = tmp_path / "event.toml"
    event.write_text(text.replace("Lantern", "\N{GREEK CAPITAL LETTER LAMDA}antern"), encoding="utf-8")
    words = [sys.executable, "-m", "crossing", "fit", str(event), "--model", "constant", "--out", str(tmp_path / "out")]
    environment = os.environ | {"PYTHONIOENCODING": "ascii"}
    found = subprocess.run(words, capture_output=True, text=True, env=environment)
    assert found.stdout.startswith(r"\u039bantern arc")
    assert found.returncode == 3  # a constant is no crossing's best description here, and the result says so
    assert found.stderr.count("\n") == 1


def test_the_default_folder_is_named_after_the_event(
    quick: CrossingFit, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(["fit", EVENT, "--quiet"]) == 0
    assert listing(tmp_path) == {"four_epochs_fit"}
    assert listing(tmp_path / "four_epochs_fit") == LISTING


def test_a_flagged_result_gives_3_and_says_why_in_one_line(
    quick: CrossingFit, folder: Path, capsys: Captured, monkeypatch: pytest.MonkeyPatch
) -> None:
    flagged = replace(quick, flags=("at_bound", "poor_fit"))
    monkeypatch.setattr("crossing.inference.fit_crossing", lambda *_, **__: flagged)
    assert fit(folder, "--json") == 3
    out, err = capsys.readouterr()
    assert strict_json(out)["flags"] == ["at_bound", "poor_fit"]
    assert err.count("\n") == 1
    assert err.startswith(f"crossing fit: {EVENT}: done, but flagged: at_bound: ")
    assert "; poor_fit: " in err
    assert listing(folder) == LISTING


@pytest.mark.skipif(sys.platform == "win32", reason="no pseudo-terminals")
@pytest.mark.parametrize("words", [[], ["--quiet"]], ids=["loud", "quiet"])
def test_progress_goes_to_a_terminal_only(words: list[str], folder: Path) -> None:
    import pty
    import termios

    ours, theirs = pty.openpty()
    termios.tcsetwinsize(theirs, (24, 80))
    command = [sys.executable, "-m", "crossing", "fit", EVENT, "--model", "fold", "--json", "--out", folder, *words]
    found = subprocess.run(command, stdout=subprocess.PIPE, stderr=theirs, timeout=120)
    os.close(theirs)
    shown = b""
    try:
        while part := os.read(ours, 65536):
            shown += part
    except OSError:  # how Linux says that the other end is closed
        pass
    os.close(ours)
    assert found.returncode == 0
    assert strict_json(found.stdout.decode())["verb"] == "fit"
    assert (b"scanning" in shown) == (not words)


# Whose file is it?


def test_a_second_run_replaces_the_first(quick: CrossingFit, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    assert fit(folder, "--quiet") == 0
    changed = replace(quick, event="another name")
    monkeypatch.setattr("crossing.inference.fit_crossing", lambda *_, **__: changed)
    assert fit(folder, "--quiet") == 0
    assert strict_json((folder / "fit.json").read_text())["event"] == "another name"
    assert listing(folder) == LISTING


@pytest.mark.parametrize("name", sorted(FILES))
def test_a_foreign_file_is_kept(name: str, folder: Path, capsys: Captured, monkeypatch: pytest.MonkeyPatch) -> None:
    def never(*_: object, **__: object) -> None:
        raise AssertionError("the refusal must come before the work")

    monkeypatch.setattr("crossing.inference.fit_crossing", never)
    folder.mkdir()
    (folder / name).write_text("notes of somebody")
    assert fit(folder) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    assert f"{folder / name}: is there already, and crossing fit did not write it" in err
    assert "--overwrite" in err
    assert (folder / name).read_text() == "notes of somebody"
    assert listing(folder) == {name}


def test_an_edited_file_is_kept_until_overwrite_says_so(quick: CrossingFit, folder: Path, capsys: Captured) -> None:
    assert fit(folder, "--quiet") == 0
    before = (folder / "light_curve.png").read_bytes()
    (folder / "fit.json").write_text("edited")
    (folder / "notes.txt").write_text("mine")
    assert fit(folder) == 2
    assert f"{folder / 'fit.json'}: was changed since crossing fit wrote it" in capsys.readouterr().err
    assert (folder / "fit.json").read_text() == "edited"
    assert (folder / "light_curve.png").read_bytes() == before
    assert fit(folder, "--quiet", "--overwrite") == 0
    assert strict_json((folder / "fit.json").read_text())["verb"] == "fit"
    assert (folder / "notes.txt").read_text() == "mine"


def test_an_interrupted_second_run_leaves_the_first_whole(
    quick: CrossingFit, folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    assert fit(folder, "--quiet") == 0
    before = {name: (folder / name).read_bytes() for name in LISTING}

    def interrupt(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("crossing.report.fit.fit_figure", interrupt)  # with four of the five files already made
    assert fit(folder, "--quiet") == 130
    assert {name: (folder / name).read_bytes() for name in listing(folder)} == before


def test_a_file_where_the_folder_should_be_is_refused(folder: Path, capsys: Captured) -> None:
    folder.write_text("a file")
    assert fit(folder / "deeper") == 2
    assert f"{folder}: must be a folder, got a file" in capsys.readouterr().err
    assert folder.read_text() == "a file"


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root may write everywhere")
def test_a_folder_without_permission_is_refused(folder: Path, capsys: Captured) -> None:
    folder.mkdir(mode=0o500)
    assert fit(folder) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert f"{folder}: cannot be written to; choose another folder with --out" in err
    assert listing(folder) == set()


# Bad input


def refusal(folder: Path, event: Path, capsys: Captured) -> str:
    """The one line about an event file that cannot be used; nothing else may come of it."""
    before = listing(folder.parent)
    status = fit(folder, event=str(event))
    out, err = capsys.readouterr()
    assert status == 2
    assert out == ""
    assert err.endswith("\n")
    assert err.count("\n") == 1
    assert err.startswith("crossing fit: ")
    assert listing(folder.parent) == before
    return err


@pytest.mark.parametrize("path", BAD_EVENTS, ids=lambda path: path.stem)
def test_malformed_events(path: Path, folder: Path, capsys: Captured) -> None:
    line = refusal(folder, path, capsys)
    assert line.startswith(f"crossing fit: {path}: ")
    for fragment in re.findall(r"^# expect: (.+)$", path.read_bytes().decode(errors="replace"), re.MULTILINE):
        assert fragment in line


@pytest.mark.parametrize("name", EXPECT)
def test_malformed_light_curves(name: str, folder: Path, capsys: Captured, tmp_path: Path) -> None:
    said = {key: value for key, value in EXPECT[name].items() if key not in ("says", "bands")}
    event = tmp_path / "event.toml"
    lines = ["[event]", 'name = "invented"', "[bands]", 'blue.wavelength = "0.9 um"', 'red.wavelength = "1.5 um"']
    lines += ["[photometry]", f"file = {json.dumps(str(BAD_CURVES / name))}"]
    lines += [f"{key} = {_toml(value)}" for key, value in said.items()]
    event.write_text("\n".join(lines), encoding="utf-8")
    line = refusal(folder, event, capsys)
    if name in ("wrong_mapping_key.csv", "reference_epochs_for_flux.csv"):  # refused with the event file already
        assert line.startswith(f"crossing fit: {event}: photometry.")
        return
    assert line.startswith(f"crossing fit: {BAD_CURVES / name}: ")
    for fragment in EXPECT[name]["says"]:
        assert fragment in line


def _toml(value: object) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key} = {json.dumps(item)}" for key, item in value.items()) + "}"
    return json.dumps(value)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (None, "must exist, got no such file"),
        ('[event]\nname = "a"\n[bands.red]\nwavelength = "1 um"\n', "photometry: must be given for crossing fit"),
        ('[event]\nname = "a"\n[photometry]\nfile = "no.csv"\n', "bands: must be given for crossing fit"),
    ],
)
def test_files_that_lack_something(text: str | None, says: str, folder: Path, tmp_path: Path, capsys: Captured) -> None:
    event = tmp_path / "event.toml"
    if text is not None:
        event.write_text(text)
    line = refusal(folder, event, capsys)
    assert line.startswith(f"crossing fit: {event}: ")
    assert says in line


def test_a_light_curve_that_is_not_there(folder: Path, tmp_path: Path, capsys: Captured) -> None:
    event = tmp_path / "event.toml"
    event.write_text('[event]\nname = "a"\n[bands.red]\nwavelength = "1 um"\n[photometry]\nfile = "no.csv"\n')
    assert refusal(folder, event, capsys) == f"crossing fit: {tmp_path / 'no.csv'}: there is no such file\n"


def test_a_light_curve_of_limits_only(folder: Path, tmp_path: Path, capsys: Captured) -> None:
    (tmp_path / "limits.csv").write_text(
        "time,band,flux [nJy],flux_err [nJy],is_upper_limit,limit_sigma\n61000,red,20,4,1,5\n61003,red,20,4,1,5\n"
    )
    event = tmp_path / "event.toml"
    event.write_text('[event]\nname = "a"\n[bands.red]\nwavelength = "1 um"\n[photometry]\nfile = "limits.csv"\n')
    assert "the light curve has no detection" in refusal(folder, event, capsys)


@pytest.mark.parametrize("model", ["fold", "constant"])
def test_one_point_is_answered_not_crashed(model: str, folder: Path, tmp_path: Path) -> None:
    (tmp_path / "one.csv").write_text("time,band,flux [nJy],flux_err [nJy]\n61000,red,20,4\n")
    event = tmp_path / "event.toml"
    event.write_text('[event]\nname = "a"\n[bands.red]\nwavelength = "1 um"\n[photometry]\nfile = "one.csv"\n')
    assert fit(folder, "--model", model, "--quiet", event=str(event)) == 3
