"""Writing light curves and reading them back: ECSV and FITS lose nothing, CSV says what it loses."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy import units as u
from astropy.io import fits
from astropy.table import QTable
from astropy.time import Time
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from crossing.errors import InputError
from crossing.photometry import FLAGS, LevelGroup, LightCurve, flag_bit, merge_lightcurves, read_lightcurve
from crossing.photometry.astropy_files import META_KEY
from crossing.photometry.times import SCALES

ARRAYS = ("time", "band", "flux", "flux_err", "is_upper_limit", "flags", "level", "source", "row")

band_names = st.text(st.characters(min_codepoint=33, max_codepoint=126), min_size=1, max_size=8) | st.sampled_from(
    ["nan", "true", "1", "None", "a b", '"', "#1", "x,y", "~", "[1]"]
)
# astropy's two-part Julian Dates resolve 1e-16 d: not enough for doubles below MJD 1, in the year 1858
times = st.floats(2100.0, 1e5)
sizes = st.floats(1e-6, 1e12)


@st.composite
def curves(draw: st.DrawFn) -> LightCurve:
    names = draw(st.lists(band_names, min_size=1, max_size=3, unique=True))
    levels = []
    for name in names:
        kind: Any = draw(st.sampled_from(["absolute", "free", "reference"]))
        epochs = tuple(draw(st.lists(times, min_size=1, max_size=3))) if kind == "reference" else ()
        error = draw(st.none() | sizes) if kind == "reference" else None
        path = None if kind == "absolute" else draw(st.text(st.characters(exclude_categories=("Cs",)), max_size=10))
        levels.append(LevelGroup(band=name, kind=kind, reference_epochs=epochs, reference_err=error, source=path))
    n = draw(st.integers(1, 6))
    level = np.array(draw(st.lists(st.integers(0, len(levels) - 1), min_size=n, max_size=n)))
    limit = np.array(draw(st.lists(st.booleans(), min_size=n, max_size=n)))
    flags = np.array(draw(st.lists(st.integers(0, sum(flag.bit for flag in FLAGS)), min_size=n, max_size=n)))
    # distinct fluxes, because the same observation twice is refused
    flux = np.array(draw(st.lists(sizes, min_size=n, max_size=n, unique=True)))
    flux = np.where(limit, flux, flux * np.array(draw(st.lists(st.sampled_from([-1.0, 1.0]), min_size=n, max_size=n))))
    error = np.array(draw(st.lists(sizes, min_size=n, max_size=n)))
    hidden = (flags & flag_bit("excluded")) != 0
    if draw(st.booleans()):
        flux, error = np.where(hidden, np.nan, flux), np.where(hidden, np.nan, error)
    sources = (("dir/a b.csv", "0" * 64), ("b.ecsv", "f" * 64))
    return LightCurve(
        time=np.sort(draw(st.lists(times, min_size=n, max_size=n))),
        band=np.array(names)[level],
        flux=flux,
        flux_err=error,
        is_upper_limit=limit,
        flags=flags,
        level=level,
        levels=tuple(levels),
        time_scale=draw(st.sampled_from(["unspecified", *SCALES])),
        sources=sources,
        source=np.array(draw(st.lists(st.integers(-1, 1), min_size=n, max_size=n))),
        row=np.array(draw(st.lists(st.integers(0, 10**6), min_size=n, max_size=n))),
    )


@pytest.mark.parametrize("form", ["ecsv", "fits"])
@settings(derandomize=True, deadline=None, max_examples=80, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(curve=curves())
def test_nothing_is_lost(tmp_path: Path, form: str, curve: LightCurve) -> None:
    path = tmp_path / f"curve.{form}"
    curve.write(path, overwrite=True)
    back = read_lightcurve(path)
    for name in ARRAYS:
        np.testing.assert_array_equal(getattr(back, name), getattr(curve, name), err_msg=name)
    assert back.levels == curve.levels
    assert back.time_scale == curve.time_scale
    assert back.sources[:-1] == curve.sources
    assert back.sources[-1][0] == str(path)


def example() -> LightCurve:
    return LightCurve.from_arrays(
        [60000.25, 60001.5, 60002.0], ["red", "blue", "red"], [10.0, -2.0, 30.0], [1.0, 1.0, 6.0],
        is_upper_limit=[False, False, True], time_scale="tdb",
    )  # fmt: skip


def test_table_with_units(tmp_path: Path) -> None:
    table = example().to_table()
    assert isinstance(table, QTable)
    assert isinstance(table["time"], Time)
    assert table["time"].scale == "tdb"
    assert table["flux"].unit == u.nJy
    assert [flag["name"] for flag in table.meta[META_KEY]["flags"]] == [flag.name for flag in FLAGS]
    bare = replace(example(), time_scale="unspecified").to_table()
    assert bare["time"].unit == u.d


@pytest.mark.parametrize("form", ["ecsv", "fits"])
def test_other_programs_can_read_it(tmp_path: Path, form: str) -> None:
    path = tmp_path / f"curve.{form}"
    example().write(path)
    table = QTable.read(path, hdu=1, astropy_native=True) if form == "fits" else QTable.read(path)
    assert table["flux"].to_value(u.uJy).tolist() == [0.01, -0.002, 0.03]
    assert table["time"].mjd.tolist() == [60000.25, 60001.5, 60002.0]
    if form == "fits":
        with fits.open(path) as units:
            assert json.loads(units["CROSSING"].data["json"][0])["time_scale"] == "tdb"


def test_writing_is_reproducible(tmp_path: Path) -> None:
    for form in ("ecsv", "fits", "csv"):
        example().write(tmp_path / f"a.{form}")
        example().write(tmp_path / f"b.{form}")
        assert (tmp_path / f"a.{form}").read_bytes() == (tmp_path / f"b.{form}").read_bytes()


def test_a_hand_made_exclusion_counts(tmp_path: Path) -> None:
    path = tmp_path / "curve.ecsv"
    example().write(path)
    text = path.read_text()
    assert "60001.5 blue -2.0 1.0 False False 0" in text
    path.write_text(text.replace("60001.5 blue -2.0 1.0 False False 0", "60001.5 blue -2.0 1.0 False True 0"))
    assert read_lightcurve(path).used.tolist() == [True, False, True]


def test_a_merged_curve_with_a_duplicate_comes_back(tmp_path: Path) -> None:
    curve = merge_lightcurves([example(), example().select([True, False, False])])
    assert curve.counts()["duplicate"] == 1
    for form in ("ecsv", "fits", "csv"):
        curve.write(tmp_path / f"curve.{form}")
        assert read_lightcurve(tmp_path / f"curve.{form}").used.tolist() == curve.used.tolist()


def test_csv_for_other_programs(tmp_path: Path) -> None:
    path = tmp_path / "curve.csv"
    example().write(path)
    assert path.read_text().splitlines() == [
        "time [MJD TDB],band,flux [nJy],flux_err [nJy],is_upper_limit,limit_sigma,excluded",
        "60000.25,red,10.0,1.0,0,,0",
        "60001.5,blue,-2.0,1.0,0,,0",
        "60002.0,red,30.0,,1,5.0,0",
    ]
    back = read_lightcurve(path)
    for name in ("time", "band", "flux", "flux_err", "is_upper_limit", "level"):
        np.testing.assert_array_equal(getattr(back, name), getattr(example(), name))
    assert back.time_scale == "tdb"


def test_what_csv_cannot_hold(tmp_path: Path) -> None:
    other = LightCurve.from_arrays([60005.0], "red", [1.0], [1.0], kind="difference", time_scale="tdb")
    path = tmp_path / "curve.csv"
    with pytest.raises(InputError, match=r"curve\.csv: CSV cannot hold levels of several files; write ECSV or FITS"):
        merge_lightcurves([example(), other]).write(path)
    with pytest.raises(InputError, match="CSV cannot hold levels of several files"):
        merge_lightcurves([other, other]).write(path)
    other.write(path)
    assert read_lightcurve(path, kind="difference").levels[0].kind == "free"


def test_names_beyond_ascii(tmp_path: Path) -> None:
    curve = LightCurve.from_arrays([60000.0], "Hα", [1.0], [1.0])
    with pytest.raises(InputError, match=r"curve\.fits: FITS tables hold ASCII only, got the band 'Hα'; write ECSV"):
        curve.write(tmp_path / "curve.fits")
    for form in ("ecsv", "csv"):
        curve.write(tmp_path / f"curve.{form}")
        assert read_lightcurve(tmp_path / f"curve.{form}").band.tolist() == ["Hα"]


def test_refusals(tmp_path: Path) -> None:
    curve = example()
    with pytest.raises(InputError, match=r"must be named \.ecsv, \.fits or \.csv, got the suffix '\.txt'"):
        curve.write(tmp_path / "curve.txt")
    with pytest.raises(InputError, match="the light curve has no rows to write"):
        curve.select(curve.flux > 1e9).write(tmp_path / "curve.ecsv")
    assert list(tmp_path.iterdir()) == []
    (tmp_path / "curve.ecsv").write_text("precious")
    with pytest.raises(InputError, match=r"curve\.ecsv: is there already"):
        curve.write(tmp_path / "curve.ecsv")
    assert (tmp_path / "curve.ecsv").read_text() == "precious"
