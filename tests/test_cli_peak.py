"""``crossing peak``: its files, its JSON, its text, and what it says about bad input."""

from __future__ import annotations

import io
import json
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from astropy.table import QTable
from documents import differences

from crossing.cli.main import main
from crossing.shooting.peaks.peak_result import CAUTIONS

HERE = Path(__file__).parent
EVENT = str(HERE.parent / "demo_lightcurves" / "well_sampled.toml")
FILES = {"peak.json", "peaks.ecsv", "peaks.png"}
LISTING = FILES | {".crossing-peak.json"}
QUICK = ("--precision", "0.5", "--tracks", "24", "--temperature", "12000")
# What outside checks read; the sample document holds more.
CONTRACT = {"rows", "overlap", "band_width_arcsec"}
ROW = {"radius_rsun", "mu_peak_smooth", "mu_peak_isolated", "mu_peak_micro", "crossing_days", "rate_per_year"}

Captured = pytest.CaptureFixture[str]


@dataclass(frozen=True)
class Run:
    """A finished ``crossing peak EVENT --json``."""

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


def run(folder: Path, *words: str) -> Run:
    with redirect_stdout(io.StringIO()) as out, redirect_stderr(io.StringIO()) as err:
        status = main(["peak", *words, "--out", str(folder)])
    return Run(status=status, out=out.getvalue(), err=err.getvalue(), folder=folder)


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run(tmp_path_factory.mktemp("peak") / "out", EVENT, *QUICK, "--json", "--seed", "3")


@pytest.fixture(scope="module")
def told(tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run(tmp_path_factory.mktemp("peak") / "out", EVENT, *QUICK, "--seed", "3")


def listing(folder: Path) -> set[str]:
    return {entry.name for entry in folder.iterdir()}


def write_event(folder: Path, *parts: str) -> str:
    text = '[event]\nname = "knot"\n[lens]\nredshift = 0.43\n[source]\nredshift = 1.21\n'
    (folder / "event.toml").write_text(text + "".join(parts))
    return str(folder / "event.toml")


# Output


def test_json_is_one_strict_document_and_all_that_is_printed(done: Run) -> None:
    assert done.err == ""
    assert done.status == 0
    assert done.document["event"] == "Lantern arc, knot 3 (invented)"
    assert done.out == (done.folder / "peak.json").read_text(encoding="utf-8")
    assert done.out.isascii()


def test_the_files_are_there_and_can_be_read(done: Run) -> None:
    assert listing(done.folder) == LISTING
    table = QTable.read(done.folder / "peaks.ecsv")
    rows = done.document["rows"]
    assert list(table["radius_rsun"].value) == [row["radius_rsun"] for row in rows]
    assert list(table["mu_peak_micro_median"]) == [row["mu_peak_micro"]["median"] for row in rows]
    assert (done.folder / "peaks.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_the_document_keeps_to_the_contract(done: Run) -> None:
    sample = strict_json((HERE / "contract" / "peak.json").read_text(encoding="utf-8"))
    # Made by `crossing peak demo_lightcurves/well_sampled.toml --temperature 12000 --json`; to be made again only with
    # a new version.
    assert sample.keys() >= CONTRACT
    assert sample["rows"][0].keys() >= ROW
    free = ("flag_meanings", "versions", "absent", "regime_shares")
    assert differences(sample, done.document, free_keys=free, optional=[]) == []


def test_the_numbers_make_sense(done: Run) -> None:
    document = done.document
    # mu_r = 1.9, gradient 0.045 per arcsec: K = sqrt(2 / T) mu_r = 12.667 arcsec^(1/2); J_peak of limb darkening 0.35
    # about 1.408; 1 Rsun at redshift 1.21 is 2.63e-12 arcsec (astropy, Planck18)
    assert document["rows"][0]["mu_peak_smooth"] == pytest.approx(1.408 * 12.667 / 2.63e-12**0.5, rel=0.01)
    for one, other in zip(document["rows"], document["rows"][1:], strict=False):
        assert one["mu_peak_micro"]["median"] > other["mu_peak_micro"]["median"]
        assert one["mu_peak_isolated"] > other["mu_peak_isolated"]
        ratio = other["radius_rsun"] / one["radius_rsun"]
        assert other["crossing_days"]["median"] / one["crossing_days"]["median"] == pytest.approx(ratio)
    for row in document["rows"]:
        rates = [one["rate"] for one in row["rate_per_year"]]
        assert rates == sorted(rates, reverse=True)
        # the field's own peaks and the closed form are alike where caustics are mostly isolated
        assert 0.2 < row["mu_peak_micro"]["median"] / row["mu_peak_isolated"] < 5
        assert row["crossing_days"]["low"] > 0.0
    assert document["images"] == 1
    assert document["crossings"] > 100


def test_the_text_has_the_table_and_the_limits(told: Run) -> None:
    assert told.status == 0
    assert "Peak magnifications:" in told.out
    assert "Peaks per year above a magnification (~: statistical error above 30%):" in told.out
    assert "corrugated band" in told.out
    assert "highest magnification of a uniform disc at the same smooth fold" in told.out
    plain = " ".join(told.out.split())
    assert all(text in plain for text in CAUTIONS)
    assert max(map(len, told.out.split("\nwritten to")[0].splitlines())) <= 132
    assert f"written to {told.folder}: peak.json, peaks.ecsv, peaks.png" in told.out


def test_quiet_says_nothing(tmp_path: Path) -> None:
    event = write_event(tmp_path, "[macro]\nkappa = 0.6\ngamma = 0.3\n")
    found = run(tmp_path / "out", event, "--quiet")
    assert (found.status, found.out, found.err) == (0, "", "")


def test_an_event_without_stars_gradient_and_motion(tmp_path: Path) -> None:
    event = write_event(tmp_path, "[macro]\nkappa = 0.6\ngamma = 0.3\n")
    found = run(tmp_path / "out", event, "--json")
    assert found.status == 0
    document = found.document
    assert document["band_width_arcsec"] is None
    assert document["overlap"] is False
    assert {row["mu_peak_smooth"] for row in document["rows"]} == {None}
    assert {row["mu_peak_micro"] for row in document["rows"]} == {None}
    assert document["absent"]["mu_peak_smooth"].startswith("the macro lens has no gradient")
    assert document["absent"]["mu_peak_micro"] == "the event file has no [microlenses]"
    text = run(tmp_path / "out", event).out
    assert "not told:" in text


def test_several_models_are_beside_the_pooled_values(tmp_path: Path) -> None:
    models = "".join(f'[[macro.models]]\nname = "{n}"\nmu_t = {t}\nmu_r = 2\n' for n, t in (("a", 20), ("b", -20)))
    event = write_event(tmp_path, models, "[[microlenses]]\nkappa_star = 0.01\n")
    found = run(tmp_path / "out", event, "--json", "--tracks", "24", "--precision", "0.5", "--radii", "10", "30")
    assert [one["name"] for one in found.document["models"]] == ["a", "b"]
    assert [len(one["rows"]) for one in found.document["models"]] == [2, 2]
    assert found.document["models"][0]["lam_t"]["median"] == pytest.approx(0.05)


def test_flags_give_status_three(tmp_path: Path) -> None:
    event = write_event(tmp_path, "[macro]\nkappa = 0.6\ngamma = 0.2\n[[microlenses]]\nkappa_star = 0.001\n")
    found = run(tmp_path / "out", event, "--tracks", "24", "--precision", "0.005")
    assert found.status == 3
    assert "flag few_crossings: " in found.out
    assert found.err.startswith(f"crossing peak: {event}: done, but flagged: few_crossings: ")
    assert found.err.count("\n") == 1


# Bad input


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["--radii", "0"], "argument --radii: must be a positive number, got '0'"),
        (["--radii", "ten"], "argument --radii: must be a positive number, got 'ten'"),
        (["--magnifications", "inf"], "argument --magnifications: must be a positive number, got 'inf'"),
        (["--temperature", "-5"], "argument --temperature: must be a positive number, got '-5'"),
        (["--tracks", "0"], "argument --tracks: must be a whole number from 1 to 999999, got '0'"),
        (["--precision", "0.9"], "`precision` must be between 0.005 and 0.5, got 0.9"),
        (["--band", "blue"], "`band` must be one of the event's bands (short, middle), got 'blue'"),
        (["--radii", *map(str, range(1, 60))], "--radii must be 50 numbers at most, got 59"),
    ],
)
def test_bad_options(words: list[str], says: str, tmp_path: Path, capsys: Captured) -> None:
    assert main(["peak", EVENT, "--out", str(tmp_path / "out"), *words]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert says in err
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ('[event]\nname = "a"\n[macro]\nkappa = 0.6\ngamma = 0.3\n', "lens: must be given for crossing peak"),
        ('[event]\nname = "a"\n[lens]\nredshift = 0.5\n', "source: must be given for crossing peak"),
        ('[event]\nname = "a"\n[lens]\nredshift = 0.5\n[source]\nredshift = 1\n', "macro: must be given"),
    ],
)
def test_events_without_what_is_needed(text: str, says: str, tmp_path: Path, capsys: Captured) -> None:
    (tmp_path / "event.toml").write_text(text)
    assert main(["peak", str(tmp_path / "event.toml"), "--out", str(tmp_path / "out")]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert says in err
    assert listing(tmp_path) == {"event.toml"}


def test_a_foreign_file_is_kept(tmp_path: Path, capsys: Captured) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "peaks.png").write_text("notes of somebody")
    assert main(["peak", EVENT, "--out", str(tmp_path / "out")]) == 2
    assert "is there already, and crossing peak did not write it" in capsys.readouterr().err
    assert listing(tmp_path / "out") == {"peaks.png"}
