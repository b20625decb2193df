"""Several light curves in one: levels, duplicates and time scales."""

from __future__ import annotations

import socket
from pathlib import Path
from typing import Any, NoReturn

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.photometry import LightCurve, merge_lightcurves, read_lightcurve

HEADER = "time,band,flux [nJy],flux_err [nJy]\n"


def read(tmp_path: Path, name: str, text: str, header: str = HEADER, **options: Any) -> LightCurve:
    (tmp_path / name).write_text(header + text)
    return read_lightcurve(tmp_path / name, **options)


def test_absolute_levels_are_shared_and_differences_are_not(tmp_path: Path) -> None:
    a = read(tmp_path, "a.csv", "60003,red,1,1\n60001,blue,2,1\n")
    b = read(tmp_path, "b.csv", "60002,red,3,1\n60000,green,4,1\n")
    c = read(tmp_path, "c.csv", "60004,red,5,1\n", kind="difference")
    d = read(tmp_path, "d.csv", "60005,red,6,1\n", kind="difference", reference_epochs=[59000.0])
    curve = merge_lightcurves([a, b, c, d])
    assert curve.flux.tolist() == [4.0, 2.0, 3.0, 1.0, 5.0, 6.0]
    names = [(curve.levels[k].band, curve.levels[k].kind) for k in curve.level]
    assert names == [
        ("green", "absolute"), ("blue", "absolute"), ("red", "absolute"), ("red", "absolute"),
        ("red", "free"), ("red", "reference"),
    ]  # fmt: skip
    assert curve.level[2] == curve.level[3]
    assert len(curve.levels) == 5
    assert curve.source.tolist() == [1, 0, 1, 0, 2, 3]
    assert merge_lightcurves([a]) is a
    with pytest.raises(InputError, match="curves must hold at least one light curve"):
        merge_lightcurves([])


def test_an_observation_in_two_files_counts_once(tmp_path: Path) -> None:
    a = read(tmp_path, "a.csv", "60001,red,1,1\n60002,red,2,1\n")
    b = read(tmp_path, "b.csv", "60002,red,2,1\n60002,red,2.5,1\n60002,blue,2,1\n60003,red,3,1\n")
    curve = merge_lightcurves([a, b])
    assert curve.counts()["duplicate"] == 1
    assert (curve.source[~curve.used], curve.row[~curve.used]) == (1, 1)
    assert curve.used.sum() == 5


def test_the_copy_of_an_excluded_row_is_used(tmp_path: Path) -> None:
    header = HEADER.strip() + ",excluded\n"
    a = read(tmp_path, "a.csv", "60002,red,2,1,1\n60001,red,1,1,0\n", header=header)
    b = read(tmp_path, "b.csv", "60002,red,2,1\n")
    curve = merge_lightcurves([a, b])
    assert curve.counts()["duplicate"] == 0
    assert curve.used.tolist() == [True, False, True]


def test_one_difference_file_twice_is_refused(tmp_path: Path) -> None:
    a = read(tmp_path, "a.csv", "60001,red,1,1\n", kind="difference")
    with pytest.raises(InputError, match=r"a\.csv: its differences in band red are read twice; name it once"):
        merge_lightcurves([a, a])


def test_bands_side_by_side_in_one_file(tmp_path: Path) -> None:
    header = "time,r [nJy],er,b [nJy],eb\n"
    parts = [
        read(tmp_path, "wide.csv", "60001,1,1,2,1\n", header=header, kind="difference", band=name,
             columns={"flux": name, "flux_err": f"e{name}"})
        for name in "rb"
    ]  # fmt: skip
    curve = merge_lightcurves(parts)
    assert len(curve.levels) == 2
    assert len(curve.sources) == 1
    assert curve.source.tolist() == [0, 0]


def with_scale(tmp_path: Path, name: str, scale: str) -> LightCurve:
    return read(tmp_path, name, "60000,red,1,1\n", header=HEADER.replace("time", f"time [MJD {scale}]"))


def test_scales_are_brought_to_tdb_without_a_network(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*args: object, **kwargs: object) -> NoReturn:
        raise AssertionError("a network was asked for")

    monkeypatch.setattr(socket, "socket", refuse)
    utc, tt, tdb = (with_scale(tmp_path, f"{scale}.csv", scale) for scale in ("UTC", "TT", "TDB"))
    curve = merge_lightcurves([utc, tt, tdb])
    assert curve.time_scale == "tdb"
    seconds = np.sort((curve.time - 60000.0) * 86400.0)
    # TT - TAI = 32.184 s and TAI - UTC = 37 s since 2017 (IERS Bulletin C 52); |TDB - TT| < 2 ms. A double near
    # MJD 60000 resolves 0.6 microseconds.
    np.testing.assert_allclose(seconds, [0.0, 0.0, 69.184], atol=2e-3)


def test_one_scale_is_left_alone(tmp_path: Path) -> None:
    a, b = with_scale(tmp_path, "a.csv", "UT1"), with_scale(tmp_path, "b.csv", "UT1")
    curve = merge_lightcurves([a, b])
    assert curve.time_scale == "ut1"
    assert curve.time.tolist() == [60000.0, 60000.0]


@pytest.mark.parametrize("scale", ["UT1", "LOCAL"])
def test_scales_that_cannot_be_converted(tmp_path: Path, scale: str) -> None:
    curves = [with_scale(tmp_path, "a.csv", "UTC"), with_scale(tmp_path, "b.csv", scale)]
    with pytest.raises(InputError, match=rf"b\.csv: times in the scale {scale.lower()} cannot be converted to TDB"):
        merge_lightcurves(curves)


def test_bare_times_beside_a_scale(tmp_path: Path) -> None:
    curves = [with_scale(tmp_path, "a.csv", "UTC"), with_scale(tmp_path, "b.csv", "")]
    with pytest.raises(InputError, match=r'b\.csv: must say its time scale.*\(utc\); write "time \[MJD UTC\]"'):
        merge_lightcurves(curves)
