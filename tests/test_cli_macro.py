"""``crossing macro``: its files, its JSON, its text, its figures, and what it says about bad input."""

from __future__ import annotations

import io
import json
import shutil
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import QTable
from documents import differences

from crossing.cli.main import main
from crossing.event import read_event
from crossing.optics.macro.macro_describe import describe_macro
from crossing.optics.macro.macro_report import CAUTIONS
from crossing.report.macro import caustics_figure, macro_figure, macro_text

HERE = Path(__file__).parent
DEMO = HERE.parent / "demo_lightcurves"
MAPS = str(DEMO / "two_models.toml")
KNOTS = str(DEMO / "mirrored_knots.toml")
FILES = {"macro.json", "macro.ecsv", "critical_lines.ecsv", "macro.png", "caustics.png"}
SCENE = '[event]\nname = "knot"\n[lens]\nredshift = 0.43\n[source]\nredshift = 1.21\n'
# What outside checks read; the sample document holds more.
CONTRACT = {
    *("lam_t", "lam_r", "mu_t", "mu_r", "mu", "parity", "images", "critical_distance_arcsec"),
    *("critical_distance_perp_arcsec", "gradient_per_arcsec", "fold_strength_arcsec_half", "caustic_distance_arcsec"),
    *("mirror_position_deg", "pair_delay_days", "einstein_radius_uas", "einstein_radius_source_au", "models"),
}

Captured = pytest.CaptureFixture[str]


@dataclass(frozen=True)
class Run:
    """A finished ``crossing macro EVENT``."""

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
        status = main(["macro", *words, "--out", str(folder)])
    return Run(status=status, out=out.getvalue(), err=err.getvalue(), folder=folder)


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run(tmp_path_factory.mktemp("macro") / "out", MAPS, "--json", "--source-redshifts", "0.9", "3")


@pytest.fixture(scope="module")
def told(tmp_path_factory: pytest.TempPathFactory) -> Run:
    return run(tmp_path_factory.mktemp("macro") / "out", KNOTS)


def listing(folder: Path) -> set[str]:
    return {entry.name for entry in folder.iterdir()}


def write_event(folder: Path, macro: str, scene: str = SCENE) -> str:
    (folder / "event.toml").write_text(scene + macro)
    return str(folder / "event.toml")


# Output


def test_json_is_one_strict_document_and_all_that_is_printed(done: Run) -> None:
    assert (done.status, done.err) == (0, "")
    assert done.document["event"] == "Lantern arc, knot 4 (invented)"
    assert done.out == (done.folder / "macro.json").read_text(encoding="utf-8")
    assert done.out.isascii()


def test_the_files_are_there_and_can_be_read(done: Run) -> None:
    assert listing(done.folder) == FILES | {".crossing-macro.json"}
    table = QTable.read(done.folder / "macro.ecsv")
    assert list(table["model"]) == ["Alder", "Birch", "pooled"]
    assert table["lam_t_median"][2] == done.document["lam_t"]["median"]
    lines = QTable.read(done.folder / "critical_lines.ecsv")
    assert sorted(set(lines["source_redshift"])) == [0.9, 1.21, 3.0]
    assert {str(lines[name].unit) for name in ("ra", "dec")} == {"deg"}
    for name in ("macro.png", "caustics.png"):
        assert (done.folder / name).read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_the_document_keeps_to_the_contract(done: Run) -> None:
    sample = strict_json((HERE / "contract" / "macro.json").read_text(encoding="utf-8"))
    # Made by `crossing macro demo_lightcurves/two_models.toml --json`; to be made again only with a new version.
    assert sample.keys() >= CONTRACT
    assert sample["lam_t"].keys() == {"median", "low", "high", "bound"}
    assert [one["name"] for one in sample["models"]] == ["Alder", "Birch"]
    free = ("flag_meanings", "notes", "versions", "absent", "parity_probabilities")
    found = differences(sample, done.document, free_keys=free)
    # The second model has deflections alone, which have no shear to compare with.
    assert [text for text in found if "quality" not in text] == []


def test_the_text_has_flags_numbers_models_and_limits(told: Run, tmp_path: Path) -> None:
    assert (told.status, told.err) == (0, "")
    plain = " ".join(told.out.split())
    assert "critical line through RA 151.19" in plain
    assert "critical curve, along the stretch" in plain
    assert all(text in plain for text in CAUTIONS)
    assert max(map(len, told.out.split("\nwritten to")[0].splitlines())) <= 132
    assert f"written to {told.folder}: macro.json, macro.ecsv, macro.png, caustics.png" in told.out
    several = run(tmp_path / "out", MAPS)
    plain = " ".join(several.out.split())
    assert "Alder (0.50) Birch (0.50)" in plain
    assert "Alder: the linear expansion is off by" in plain
    assert "models_disagree: models differ in lam_t" in plain


def test_an_event_of_numbers_alone(tmp_path: Path) -> None:
    event = write_event(tmp_path, "[macro]\nkappa = 0.7\ngamma = 0.28\n", '[event]\nname = "knot"\n')
    found = run(tmp_path / "out", event, "--json")
    assert (found.status, found.err) == (0, "")
    assert listing(tmp_path / "out") == {"macro.json", "macro.ecsv", "macro.png", ".crossing-macro.json"}
    document = found.document
    # 1 - 0.7 -+ 0.28
    assert document["lam_t"]["median"] == pytest.approx(0.02)
    assert document["lam_r"]["median"] == pytest.approx(0.58)
    assert document["pair_delay_days"] is None
    assert document["absent"]["pair_delay_days"]
    assert "not told:" in run(tmp_path / "out", event).out


def test_flags_give_status_three(tmp_path: Path) -> None:
    event = write_event(
        tmp_path, '[macro]\ncritical_distance = {value = "0.02 arcsec", error = "0.1 arcsec"}\n'
        'gradient = "0.05 / arcsec"\nmu_r = 2\n'
    )  # fmt: skip
    found = run(tmp_path / "out", event)
    assert found.status == 3
    assert found.out.splitlines()[1].startswith("  flag mu_diverges: the event may lie on either side")
    assert found.err.startswith(f"crossing macro: {event}: done, but flagged: mu_diverges: ")
    assert found.err.count("\n") == 1
    assert "magnification mu (signed) > " in " ".join(found.out.split())


def test_quiet_says_nothing(tmp_path: Path) -> None:
    event = write_event(tmp_path, "[macro]\nkappa = 0.6\ngamma = 0.3\n")
    found = run(tmp_path / "out", event, "--quiet")
    assert (found.status, found.out, found.err) == (0, "", "")


# Figures


@pytest.mark.parametrize(("path", "panels"), [(MAPS, 3), (KNOTS, 2), (str(DEMO / "four_epochs.toml"), 2)])
def test_figures_label_what_they_show(path: str, panels: int) -> None:
    report = describe_macro(read_event(Path(path)))
    figure, caustics = macro_figure(report), caustics_figure(report)
    assert len(figure.axes) == panels
    assert caustics is not None
    for axes in (*figure.axes, *caustics.axes):
        assert axes.get_xlabel()
        assert axes.get_ylabel()
        # East is to the left wherever axes are on the sky.
        assert axes.xaxis_inverted() == axes.get_xlabel().startswith("east")
        labels = [line.get_label() for line in axes.lines if not str(line.get_label()).startswith("_")]
        assert len(labels) == len(set(labels))
        shown = [(line.get_linestyle(), line.get_marker(), line.get_color()) for line in axes.lines if line.get_label()]
        assert len(set(shown)) > 0
    assert report.event in figure.axes[0].get_title(loc="left")


def test_the_field_shows_the_events_source_a_nearer_and_a_farther_one() -> None:
    figure = macro_figure(describe_macro(read_event(Path(MAPS))))
    labels = [str(line.get_label()) for line in figure.axes[0].lines]
    for text in ("source at z = 0.82", "source at z = 1.21 (the event's)", "source at z = 2.77", "event"):
        assert text in labels


def test_many_models_and_long_lists_stay_readable(tmp_path: Path) -> None:
    models = "".join(f'[[macro.models]]\nname = "m{k}"\nmu_t = {40 + k}\nmu_r = 2\n' for k in range(9))
    report = describe_macro(read_event(Path(write_event(tmp_path, models))))
    assert "and 5 more models in macro.json and macro.ecsv" in macro_text(report)
    assert len(macro_figure(report).axes[0].get_legend().get_texts()) == 5  # type: ignore[union-attr]


# Bad input


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["--source-redshifts", "0"], "argument --source-redshifts: must be a positive number, got '0'"),
        (["--source-redshifts", "far"], "argument --source-redshifts: must be a positive number, got 'far'"),
        (["--source-redshifts", "0.2"], "source redshifts must lie behind the lens at 0.43, got 0.2; remove it"),
    ],
)
def test_bad_options(words: list[str], says: str, tmp_path: Path, capsys: Captured) -> None:
    assert main(["macro", MAPS, "--out", str(tmp_path / "out"), *words]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert says in err
    assert not (tmp_path / "out").exists()


def copied(folder: Path) -> Path:
    for path in DEMO.glob("two_models*"):
        shutil.copy(path, folder / path.name)
    return folder / "two_models.toml"


def spoil(path: Path, name: str, change: str) -> None:
    """Damage the maps of one model in one way."""
    with fits.open(path.parent / name, mode="update") as hdus:
        image = hdus[1]
        if change == "no WCS":
            for key in [
                key
                for key in image.header
                if key.startswith(("CTYPE", "CRVAL", "CRPIX", "CD1", "CD2", "CDELT", "PC1", "PC2", "CUNIT"))
            ]:
                del image.header[key]
        elif change == "unit":
            image.header["BUNIT"] = "solMass / pc2"
        elif change == "border":
            image.data = np.where(np.hypot(*np.indices(image.data.shape) - 88) < 30, image.data, np.nan)
        elif change == "shape":
            image.data = image.data[:, :-3].copy()
        elif change == "sign":
            image.data = -image.data


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ("no WCS", "must have a celestial WCS"),
        ("unit", "BUNIT must be empty for convergence and shear"),
        ("border", "pixels without a number"),
        ("shape", "must have the shape of"),
        ("truncated", "is truncated"),
        ("missing", "does not exist"),
        ("outside", "`position` must lie on the map"),
        ("edge", "pixels or more from the edge of the map"),
        ("in front", "must be greater than lens.redshift"),
    ],
)
def test_bad_maps_are_one_line(change: str, says: str, tmp_path: Path, capsys: Captured) -> None:
    event = copied(tmp_path)
    chart, text = tmp_path / "two_models_alder.fits", event.read_text()
    if change == "truncated":
        chart.write_bytes(chart.read_bytes()[:200_000])
    elif change == "missing":
        chart.unlink()
    elif change == "outside":
        event.write_text(text.replace('["151.1986900 deg"', '["152.3 deg"', 1))
    elif change == "edge":
        event.write_text(text.replace('"151.1986900 deg", "-4.6967167 deg"', '"151.2 deg", "-4.6913 deg"', 1))
    elif change == "in front":
        event.write_text(text.replace("redshift = 1.21", "redshift = 0.41", 1))
    else:
        spoil(event, chart.name, change)
    assert main(["macro", str(event), "--out", str(tmp_path / "out")]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert err.startswith("crossing macro: ")
    assert says in err
    assert not (tmp_path / "out").exists()


def test_an_event_without_macro_lens(tmp_path: Path, capsys: Captured) -> None:
    assert main(["macro", write_event(tmp_path, ""), "--out", str(tmp_path / "out")]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert "macro: must be given for crossing macro" in err


def test_a_foreign_file_is_kept(tmp_path: Path, capsys: Captured) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "macro.png").write_text("notes of somebody")
    assert main(["macro", MAPS, "--out", str(tmp_path / "out")]) == 2
    assert "is there already, and crossing macro did not write it" in capsys.readouterr().err
    assert listing(tmp_path / "out") == {"macro.png"}


# The demo events in later steps


@pytest.mark.parametrize("name", ["two_models", "mirrored_knots"])
def test_the_demo_events_can_be_fitted(name: str) -> None:
    from crossing import fit_crossing

    truth = json.loads((DEMO / f"{name}.truth.json").read_text())
    fit = fit_crossing(read_event(DEMO / f"{name}.toml"), model="fold")
    assert fit.flags == ()
    for key in ("caustic_time_mjd", "radius_time_days", "radius_rsun"):
        # 4000 samples reach four standard deviations.
        assert fit.samples[key].min() <= truth[key] <= fit.samples[key].max(), key


@pytest.mark.parametrize("name", ["two_models", "mirrored_knots"])
def test_peaks_carry_the_spread_of_the_demo_events(name: str) -> None:
    from crossing import forecast_peaks

    event = read_event(DEMO / f"{name}.toml")
    peaks, report = forecast_peaks(event, radii=[100.0], precision=0.5, most_tracks=16), describe_macro(event)
    assert len(peaks.models) == (len(report.models) if len(report.models) > 1 else 0)
    assert report.lam_t is not None
    # The same distribution from other draws, which differ by a tenth of its width.
    width = float(report.lam_t.high or 0.0) - float(report.lam_t.low or 0.0)
    for part in ("low", "median", "high"):
        assert getattr(peaks.lam_t, part) == pytest.approx(getattr(report.lam_t, part), abs=0.1 * width)
