"""Malformed light curves: each is refused in one line that names the file, the row or column, and what to do."""

from __future__ import annotations

import tomllib
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest

from crossing.errors import InputError
from crossing.photometry import LightCurve, read_lightcurve, read_photometry

CORPUS = Path(__file__).parent / "malformed" / "lightcurves"
EXPECT: dict[str, dict[str, Any]] = tomllib.loads((CORPUS / "expect.toml").read_text(encoding="utf-8"))


def read(path: Path, options: dict[str, Any]) -> LightCurve:
    if "bands" not in options:
        return read_lightcurve(path, **options)
    record = SimpleNamespace(
        path=path, kind="flux", columns={}, reference_epochs=(), reference_err=None, limit_sigma=None
    )
    bands = dict.fromkeys(options["bands"])
    event: Any = SimpleNamespace(path=Path("event.toml"), photometry=(record,), bands=bands)
    return read_photometry(event)


def test_the_corpus_is_complete() -> None:
    assert {path.name for path in CORPUS.iterdir()} == {*EXPECT, "expect.toml"}
    assert len(EXPECT) >= 25


@pytest.mark.parametrize("name", EXPECT)
def test_malformed(name: str) -> None:
    options = dict(EXPECT[name])
    fragments = options.pop("says")
    with pytest.raises(InputError, match=r"lightcurves.*: ") as caught:
        read(CORPUS / name, options)
    message = str(caught.value)
    assert message.startswith(f"{CORPUS / name}: ")
    assert "\n" not in message
    for fragment in fragments:
        assert fragment in message
