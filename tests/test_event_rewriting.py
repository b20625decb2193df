"""Event files out of event files: what is kept, what is not, and that any TOML survives being written."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from crossing.errors import InputError
from crossing.event import read_event
from crossing.event.rewriting import rewritten_event, toml_text

DEMO = Path(__file__).parent.parent / "demo_lightcurves"
NEW = {"file": "new.ecsv", "kind": "flux"}
KEPT = ("lens_redshift", "source_redshift", "cosmology", "macro", "microlenses", "motion", "star", "bands", "mode")

words = st.text(st.characters(exclude_categories=["Cs"]), max_size=8)
scalars = st.one_of(st.booleans(), st.integers(-(2**63), 2**63 - 1), st.floats(allow_nan=False), words)
values = st.recursive(
    scalars,
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(words, inner, max_size=3)),
    max_leaves=12,
)


@settings(derandomize=True, deadline=None)
@given(st.dictionaries(words, values, max_size=4))
def test_everything_comes_back(data: dict[str, Any]) -> None:
    assert tomllib.loads(toml_text(data)) == data


@pytest.mark.parametrize(
    "path", sorted(set(DEMO.glob("*.toml")) - {DEMO / "campaign.toml"}), ids=lambda path: path.stem
)
def test_demo_events_keep_all_but_name_and_photometry(path: Path, tmp_path: Path) -> None:
    copy = tmp_path / "copy.toml"
    copy.write_text(rewritten_event(path, suffix=" (2)", photometry=NEW, comment=["one\nline"]))
    old, new = read_event(path), read_event(copy)
    assert [getattr(new, key) for key in KEPT] == [getattr(old, key) for key in KEPT]
    assert new.name == f"{old.name} (2)"
    assert [(one.path, one.kind) for one in new.photometry] == [(tmp_path / "new.ecsv", "flux")]
    assert copy.read_text().startswith("# one line\n\n[event]\n")
    assert "[bands]\n" not in copy.read_text()


def write(folder: Path, text: str) -> Path:
    path = folder / "event.toml"
    path.write_text(text)
    return path


def test_the_counterpart_goes_and_long_names_are_cut(tmp_path: Path) -> None:
    path = write(
        tmp_path, f'[event]\nname = "{"x" * 64}"\n[counterpart]\nearlier = [1.0]\n[[photometry]]\nfile = "a"\n'
    )
    told = tomllib.loads(rewritten_event(path, suffix=" (simulated 1)", photometry=NEW))
    assert told == {"event": {"name": "x" * 50 + " (simulated 1)"}, "photometry": NEW}


def test_models_and_quantities_keep_their_form(tmp_path: Path) -> None:
    path = write(
        tmp_path,
        '[event]\nname = "a"\n[macro]\n[[macro.models]]\nname = "one"\nkappa = {value = 0.5, error = 0.1}\n'
        'gamma = 0.2\ngradient = [{low = "1 / arcsec", high = "2 / arcsec"}, "1 / arcsec"]\n'
        "[[macro.models]]\nkappa = 0.4\ngamma = 0.1\n",
    )
    text = rewritten_event(path, suffix="", photometry=NEW)
    assert text.count("[[macro.models]]") == 2
    assert "kappa = {value = 0.5, error = 0.1}" in text
    assert tomllib.loads(text)["macro"] == tomllib.loads(path.read_text())["macro"]


def test_paths_of_maps_become_absolute(tmp_path: Path) -> None:
    path = write(
        tmp_path,
        '[event]\nname = "a"\n[macro]\nposition = ["1 deg", "2 deg"]\n[[macro.maps]]\nname = "m"\n'
        'convergence = "k.fits"\nshear1 = "/there/g.fits"\n',
    )
    (told,) = tomllib.loads(rewritten_event(path, suffix="", photometry=NEW))["macro"]["maps"]
    assert told == {"name": "m", "convergence": str(tmp_path / "k.fits"), "shear1": "/there/g.fits"}


def test_a_file_without_an_event_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"event.toml: event: must be given; add \[event\]"):
        rewritten_event(write(tmp_path, "[lens]\nredshift = 0.4\n"), suffix="", photometry=NEW)
