"""``crossing rates``: its files, its JSON, its text, and what it says about bad input."""

from __future__ import annotations

import io
import json
import subprocess
import sys
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from astropy.table import QTable
from campaigns import campaign_text, write_campaign
from documents import differences

from crossing.cli.main import main
from crossing.population.rates_result import CAUTIONS

HERE = Path(__file__).parent
DEMO = HERE.parent / "demo_lightcurves"
CAMPAIGN = str(DEMO / "campaign.toml")
FILES = {"rates.json", "segments.ecsv", "visits.ecsv", "arc.png", ".crossing-rates.json"}
QUICK = ("--draws", "12")
# What outside checks read; the sample document holds more.
CONTRACT = {"expected_events", "interval_model", "interval_poisson", "per_segment", "per_visit"}
SEGMENT = (
    '[[segments]]\nkappa = 0.81\ngamma = 0.21\nlength = "0.4 arcsec"\nwidth = "0.3 arcsec"\nkappa_star = 0.01\n'
    + ('surface_brightness = {red = "25 mag / arcsec2"}\n')
)

Captured = pytest.CaptureFixture[str]


@dataclass(frozen=True)
class Run:
    """A finished ``crossing rates CAMPAIGN``."""

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
        status = main(["rates", *words, "--out", str(folder)])
    return Run(status=status, out=out.getvalue(), err=err.getvalue(), folder=folder)


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run(tmp_path_factory.mktemp("rates") / "out", CAMPAIGN, *QUICK, "--json")


def test_the_files_and_the_document(done: Run) -> None:
    assert (done.status, done.err) == (0, "")
    assert {entry.name for entry in done.folder.iterdir()} == FILES
    assert done.out == (done.folder / "rates.json").read_text(encoding="utf-8")
    assert done.out.isascii()
    table = QTable.read(done.folder / "segments.ecsv")
    rows = done.document["per_segment"]
    assert list(table["segment"]) == [row["name"] for row in rows]
    assert list(table["events_per_year_median"]) == [row["expected_events"]["median"] for row in rows]
    visits = QTable.read(done.folder / "visits.ecsv")
    assert len(visits) == len(done.document["per_visit"]["schedule"]["visits"]) == 24
    assert (done.folder / "arc.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_the_document_keeps_to_the_contract(done: Run) -> None:
    sample = strict_json((HERE / "contract" / "rates.json").read_text(encoding="utf-8"))
    # Made by `crossing rates demo_lightcurves/campaign.toml --json`; to be made again only with a new version.
    assert sample.keys() >= CONTRACT
    free = ("flag_meanings", "versions", "residuals_mag", "limits_njy", "noise_njy", "per_side", "types")
    assert differences(sample, done.document, free_keys=free, optional=[]) == []


def test_the_numbers_make_sense(done: Run) -> None:
    """Most events are on the saddle side: det = 0 is likeliest at lam_t = -kappa_star, 0.19 arcsec from the curve."""
    document = done.document
    rates = {row["name"]: row["expected_events"]["median"] for row in document["per_segment"]}
    assert rates["saddle 1"] > 1.5 * rates["minimum 1"]
    assert document["per_side"]["saddle"]["median"] > document["per_side"]["minimum"]["median"]
    total, model, chance = (document[key] for key in ("expected_events", "interval_model", "interval_poisson"))
    assert model["low"] == total["low"] < total["median"] < total["high"] == model["high"]
    assert chance["low"] < total["median"] < chance["high"]
    assert document["interval_total"]["high"] >= chance["high"]
    assert document["per_visit"]["in_progress"]["median"] < total["median"]
    assert 1e3 < document["distributions"]["peak_magnification"]["median"] < 1e5


def test_the_text_has_the_numbers_and_the_limits(tmp_path: Path) -> None:
    told = run(tmp_path / "out", CAMPAIGN, *QUICK, "--schedule", "deep pair")
    assert told.status == 0
    assert 'found by the 2 visits of "deep pair"' in told.out
    assert "Along the arc (68% of the model):" in told.out
    plain = " ".join(told.out.split())
    assert all(text in plain for text in CAUTIONS)
    assert max(map(len, told.out.split("\nwritten to")[0].splitlines())) <= 132
    assert f"written to {told.folder}: rates.json, segments.ecsv, visits.ecsv, arc.png" in told.out


def test_plan_writes_nothing(tmp_path: Path) -> None:
    told = run(tmp_path / "out", CAMPAIGN, "--plan")
    assert told.status == 0
    assert "8 segments, 64 draws of the model, 24 visits" in told.out
    assert run(tmp_path / "out", CAMPAIGN, "--plan", "--json").document["plan"]["segments"] == 8
    assert not (tmp_path / "out").exists()


def test_without_a_schedule_and_quiet(tmp_path: Path) -> None:
    write_campaign(tmp_path, campaign_text(SEGMENT))
    found = run(tmp_path / "out", str(tmp_path / "campaign.toml"), "--quiet", "--draws", "2")
    assert (found.status, found.out, found.err) == (0, "", "")
    assert {entry.name for entry in found.folder.iterdir()} == FILES - {"visits.ecsv"}


def test_flags_give_status_three(tmp_path: Path) -> None:
    """Three arcseconds with one lam_t that changes by 0.15 there, over 0.005 and kappa_star = 0.01."""
    lens = 'critical_distance = "0.1 arcsec"\ngradient = "0.05 / arcsec"\nmu_r = 2\n'
    coarse = SEGMENT.replace("kappa = 0.81\ngamma = 0.21\n", lens).replace("0.4 arcsec", "3 arcsec")
    write_campaign(tmp_path, campaign_text(coarse))
    found = run(tmp_path / "out", str(tmp_path / "campaign.toml"), "--draws", "2")
    assert found.status == 3
    assert "flag coarse_segments: " in found.out
    assert found.err.startswith(f"crossing rates: {tmp_path / 'campaign.toml'}: done, but flagged: coarse_segments: ")
    assert found.err.count("\n") == 1


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["--draws", "1"], "argument --draws: must be a whole number from 2 to 10000, got '1'"),
        (["--beam", "0"], "argument --beam: must be a positive number, got '0'"),
        (["--schedule", "late"], "`schedule` must be one of those of the file (two seasons, deep pair), got 'late'"),
    ],
)
def test_bad_options(words: list[str], says: str, tmp_path: Path, capsys: Captured) -> None:
    assert main(["rates", CAMPAIGN, "--out", str(tmp_path / "out"), *words]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert says in err
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("cut", "says"),
    [
        ("[lens]\nredshift = 0.43\n", "lens: must be given for a forecast of rates"),
        ("kappa_star = 0.01\n", "segments[0]: must have stars in front, or a gradient"),
    ],
)
def test_campaigns_without_what_is_needed(cut: str, says: str, tmp_path: Path, capsys: Captured) -> None:
    (tmp_path / "campaign.toml").write_text(campaign_text(SEGMENT).replace(cut, ""))
    assert main(["rates", str(tmp_path / "campaign.toml"), "--out", str(tmp_path / "out")]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert says in err
    assert {entry.name for entry in tmp_path.iterdir()} == {"campaign.toml"}


def test_the_demo_is_what_its_script_writes(tmp_path: Path) -> None:
    script = tmp_path / "make_campaign.py"
    script.write_bytes((DEMO / "make_campaign.py").read_bytes())
    subprocess.run([sys.executable, str(script)], check=True)
    assert (tmp_path / "campaign.toml").read_bytes() == (DEMO / "campaign.toml").read_bytes()
