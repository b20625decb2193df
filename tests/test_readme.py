"""README.md says what is true: its examples run, and it names what exists."""

from __future__ import annotations

import re
import shlex
from pathlib import Path

import pytest

from crossing.cli import fit as verb
from crossing.event import read_event
from crossing.inference import FLAGS, fit_crossing
from crossing.shooting.tracks.track_curve import TrackCurve

ROOT = Path(__file__).parent.parent
TEXT = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", TEXT, re.MULTILINE | re.DOTALL)


def test_it_starts_with_one_paragraph_and_the_two_commands() -> None:
    title, paragraph, heading, *_ = TEXT.split("\n\n")
    assert title.startswith("# ")
    assert not paragraph.startswith("#")
    assert heading == "## Two commands"
    first, second = blocks("sh")
    assert first.endswith("crossing fit demo_lightcurves/well_sampled.toml\n")
    assert second.endswith("-m pytest -q\n")
    for command in (first, second):
        assert command.count("\n") == 1
        assert shlex.split(command)[:6] == ["test", "-x", ".venv/bin/pip", "||", "python3", "-m"]


def test_the_event_and_its_light_curve_can_be_fitted(tmp_path: Path) -> None:
    (event,), (curve,) = blocks("toml"), blocks("csv")
    (tmp_path / "event.toml").write_text(event)
    (tmp_path / "knot.csv").write_text(curve)
    found = fit_crossing(read_event(tmp_path / "event.toml"), model="fold")
    assert len(found.rows) == 6
    assert found.radius_time_days is not None
    assert found.radius_rsun is None


def test_the_python_example_runs(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    code, _ = blocks("python")
    monkeypatch.chdir(ROOT)
    names: dict[str, object] = {}
    exec(compile(code, "README.md", "exec"), names)
    assert capsys.readouterr().out.endswith("Rsun\n")
    # 150 + 3 / sqrt(2e-4) J(0.65), with the peak J(0.652230) = 1.393119 of a uniform disc (Schneider & Weiss 1986)
    assert float(names["peak"]) == pytest.approx(150 + 3 / 2e-4**0.5 * 1.393119, rel=1e-4)  # type: ignore[arg-type]


def test_the_python_example_of_tracks_runs() -> None:
    _, code = blocks("python")
    names: dict[str, object] = {}
    exec(compile("import crossing\n" + code, "README.md", "exec"), names)
    curve = names["curve"]
    assert isinstance(curve, TrackCurve)
    assert not curve.flags
    # The macro magnification is 833; tracks of one Einstein radius scatter, but not by factors of three.
    assert 300 < curve.mean_magnification[0] < 2500


def test_it_names_every_flag_and_every_file() -> None:
    for name in (*FLAGS, *verb._FILES):
        assert f"`{name}`" in TEXT
