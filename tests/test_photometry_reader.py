"""Reading light curves: units, magnitudes, limits, exclusions, times, column names and events."""

from __future__ import annotations

import io
import os
import warnings
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import SkyCoord
from astropy.io import fits
from astropy.table import MaskedColumn, QTable, Table
from astropy.time import Time

from crossing.errors import InputError
from crossing.event import read_event
from crossing.photometry import LevelGroup, LightCurve, astropy_files, flag_bit, read_lightcurve, read_photometry
from crossing.photometry import files as files_module

HEADER = "time,band,flux [nJy],flux_err [nJy]\n"


def read_text(tmp_path: Path, text: str, name: str = "curve.csv", **options: Any) -> LightCurve:
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return read_lightcurve(path, **options)


def table(**changes: Any) -> QTable:
    columns = {
        "time": np.array([60002.0, 60001.0]) * u.d,
        "band": ["red", "blue"],
        "flux": np.array([20.0, -1.0]) * u.nJy,
        "flux_err": np.array([2.0, 1.0]) * u.nJy,
    }
    return QTable({**columns, **changes})


def test_csv(tmp_path: Path) -> None:
    curve = read_text(tmp_path, "# notes\n" + HEADER + "60002,red,20,2\n\n# more\n60001, blue ,-1.0,1\n")
    assert curve.time.tolist() == [60001.0, 60002.0]
    assert curve.band.tolist() == ["blue", "red"]
    assert curve.flux.tolist() == [-1.0, 20.0]
    assert curve.row.tolist() == [2, 1]
    assert curve.source.tolist() == [0, 0]
    assert curve.time_scale == "unspecified"
    assert [group.kind for group in curve.levels] == ["absolute", "absolute"]
    path, digest = curve.sources[0]
    assert path == str(tmp_path / "curve.csv")
    assert len(digest) == 64


@pytest.mark.parametrize(("mark", "end"), [(";", "\n"), ("\t", "\r\n"), (",", "\r")])
def test_csv_dialects(tmp_path: Path, mark: str, end: str) -> None:
    text = (HEADER + '60001,"red",20,2\n').replace(",", mark).replace("\n", end)
    path = tmp_path / "curve.csv"
    path.write_bytes(b"\xef\xbb\xbf" + text.encode())  # with the mark that some spreadsheets put first
    assert read_lightcurve(path).flux.tolist() == [20.0]


@pytest.mark.parametrize(
    ("unit", "factor"),
    [
        ("nJy", 1.0),
        ("uJy", 1e3),
        ("µJy", 1e3),
        ("mJy", 1e6),
        ("Jy", 1e9),
        ("erg/s/cm2/Hz", 1e32),  # 1 Jy = 1e-23 erg/s/cm2/Hz (definition)
        ("erg s-1 cm-2 Hz-1", 1e32),
        ("W / (m2 Hz)", 1e35),  # 1 Jy = 1e-26 W/m2/Hz (definition)
        ("1e-29 erg/s/cm2/Hz", 1e3),
    ],
)
def test_flux_units(tmp_path: Path, unit: str, factor: float) -> None:
    text = f"time,band,flux [{unit}],flux_err [{unit}]\n60000,red,{2 / factor!r},{0.5 / factor!r}\n"
    curve = read_text(tmp_path, text)
    # one rounding each in dividing and in multiplying
    np.testing.assert_allclose([curve.flux[0], curve.flux_err[0]], [2.0, 0.5], rtol=4e-16)


def test_units_of_two_columns(tmp_path: Path) -> None:
    own = read_text(tmp_path, "time,band,flux [uJy],flux_err [nJy]\n60000,red,0.03,2\n")
    assert (own.flux[0], own.flux_err[0]) == (30.0, 2.0)
    shared = read_text(tmp_path, "time,band,flux [uJy],flux_err\n60000,red,0.03,0.002\n")
    assert (shared.flux[0], shared.flux_err[0]) == (30.0, 2.0)


def test_mapping_gives_names_and_units(tmp_path: Path) -> None:
    text = "mjd,filter,f,df\n60000,red,0.03,0.002\n"
    columns = {"time": "mjd", "band": "filter", "flux": "f [uJy]", "flux_err": "df"}
    curve = read_text(tmp_path, text, columns=columns)
    assert (curve.flux[0], curve.flux_err[0], curve.band[0]) == (30.0, 2.0, "red")
    same = read_text(tmp_path, text.replace("f,df", "f [uJy],df"), columns=columns)
    assert same.flux[0] == 30.0


def test_names_match_whatever_their_case(tmp_path: Path) -> None:
    assert read_text(tmp_path, "MJD,Band,Flux [nJy],FLUX_ERR\n6e4,r,1,1\n", columns={"time": "mjd"}).flux[0] == 1.0
    both = read_text(tmp_path, "time,band,flux [nJy],FLUX [nJy],flux_err\n60000,r,1,2,1\n")
    assert both.flux[0] == 1.0
    with pytest.raises(InputError, match="the name 'flux' stands 2 times"):
        read_text(tmp_path, "time,band,Flux [nJy],FLUX [nJy],flux_err\n60000,r,1,2,1\n")
    with pytest.raises(InputError, match="one column of the file stands for two"):
        read_text(tmp_path, HEADER + "60000,r,1,2\n", columns={"flux_err": "flux"})


def test_band_for_all_rows(tmp_path: Path) -> None:
    text = "time,flux [nJy],flux_err [nJy]\n60000,1,1\n60001,2,1\n"
    assert read_text(tmp_path, text, band=" red ").band.tolist() == ["red", "red"]
    with pytest.raises(InputError, match="column band: is in the file; do not give band = 'red' as well"):
        read_text(tmp_path, HEADER + "60000,red,1,1\n", band="red")


def test_extra_columns_are_left_alone(tmp_path: Path) -> None:
    curve = read_text(tmp_path, HEADER.strip() + ",airmass,note\n60000,red,1,1,high,\n")
    assert curve.flux[0] == 1.0


def test_magnitudes(tmp_path: Path) -> None:
    curve = read_text(
        tmp_path, "time,band,mag,mag_err [mag]\n60000,red,23.9,0.1\n60001,red,28.9,0.05\n", kind="magnitude"
    )
    # 23.9 mag AB is 1 uJy (Oke & Gunn 1983); the zero point is exact to 1e-4 and written alike on both sides
    np.testing.assert_allclose(curve.flux, [1000.0, 10.0], rtol=1e-12)
    # sigma_m = 2.5/ln(10) sigma_F/F = 1.0857 sigma_F/F (first order, textbook)
    np.testing.assert_allclose(curve.flux_err / curve.flux, np.array([0.1, 0.05]) / 1.0857362047581296, rtol=1e-12)
    assert np.all(curve.flags & flag_bit("from_magnitude"))
    assert curve.levels == (LevelGroup(band="red", kind="absolute"),)


def test_magnitudes_agree_with_astropy(tmp_path: Path) -> None:
    mags = QTable(
        {"time": [60000.0, 60001.0], "band": ["r", "r"], "mag": [24.0, 27.5] * u.ABmag, "mag_err": [0.1, 0.2]}
    )
    mags["mag_err"].unit = u.mag
    path = tmp_path / "mags.ecsv"
    mags.write(path)
    curve = read_lightcurve(path, kind="magnitude")
    # astropy writes the AB zero point as 10^(48.6/-2.5) erg/s/cm2/Hz, the same law; only roundings differ
    np.testing.assert_allclose(curve.flux, mags["mag"].to_value(u.nJy), rtol=1e-12)


def test_magnitude_limits_need_no_error(tmp_path: Path) -> None:
    text = "time,band,mag,mag_err,is_upper_limit\n60000,red,28.9,,1\n60001,red,28,0.1,0\n"
    curve = read_text(tmp_path, text, kind="magnitude", limit_sigma=5)
    np.testing.assert_allclose([curve.flux[0], curve.flux_err[0]], [10.0, 2.0], rtol=1e-12)
    alone = read_text(tmp_path, "time,band,mag,is_upper_limit\n60000,red,28.9,1\n", kind="magnitude", limit_sigma=5)
    assert alone.is_upper_limit.tolist() == [True]


@pytest.mark.parametrize("words", [("true", "false"), ("T", "F"), ("1", "0"), ("yes", "no"), ("True", "False")])
def test_upper_limits(tmp_path: Path, words: tuple[str, str]) -> None:
    text = HEADER.strip() + f",is_upper_limit\n60000,red,15,,{words[0]}\n60001,red,20,2,{words[1]}\n"
    curve = read_text(tmp_path, text, limit_sigma=3)
    assert curve.is_upper_limit.tolist() == [True, False]
    assert curve.flux.tolist() == [15.0, 20.0]
    assert curve.flux_err.tolist() == [5.0, 2.0]


def test_significance_of_each_limit(tmp_path: Path) -> None:
    text = HEADER.strip() + ",is_upper_limit,limit_sigma\n60000,red,15,-99,1,3\n60001,red,20,nan,1,\n60002,red,9,1,0,\n"
    curve = read_text(tmp_path, text, limit_sigma=5)
    assert curve.flux_err.tolist() == [5.0, 4.0, 1.0]
    with pytest.raises(InputError, match=r"data row 2 .*is an upper limit without its significance"):
        read_text(tmp_path, text)
    with pytest.raises(InputError, match=r"data row 1 .*limit_sigma must be positive and finite, got -3"):
        read_text(tmp_path, text.replace("1,3\n", "1,-3\n"), limit_sigma=5)


def test_all_rows_may_be_limits(tmp_path: Path) -> None:
    curve = read_text(tmp_path, "time,band,flux [nJy],is_upper_limit\n60000,r,15,1\n60001,r,20,1\n", limit_sigma=5)
    assert curve.counts()["upper_limits"] == 2


def test_excluded_rows_are_kept_and_not_used(tmp_path: Path) -> None:
    text = HEADER.strip() + ",excluded\n60000,red,nan,-99,1\n60001,red,20,2,0\n60002,red,,,1\n60001,red,20,2,1\n"
    curve = read_text(tmp_path, text)
    assert curve.used.tolist() == [False, True, False, False]
    assert curve.counts() == {
        "rows": 4,
        "used": 1,
        "upper_limits": 0,
        "excluded": 3,
        "duplicate": 0,
        "from_magnitude": 0,
    }
    assert np.isnan(curve.flux[0])
    everything = read_text(tmp_path, HEADER.strip() + ",excluded\n60000,red,1,1,1\n")
    assert everything.counts()["used"] == 0


def test_excluded_magnitudes_may_be_anything(tmp_path: Path) -> None:
    text = "time,band,mag,mag_err,excluded\n60000,red,-9999,99,1\n60001,red,28,0.1,0\n"
    curve = read_text(tmp_path, text, kind="magnitude")
    assert np.isnan(curve.flux[0])
    assert curve.used.tolist() == [False, True]


def test_differences(tmp_path: Path) -> None:
    text = HEADER + "60000,red,-20,2\n60001,blue,5,2\n"
    free = read_text(tmp_path, text, kind="difference")
    path = str(tmp_path / "curve.csv")
    assert free.levels == tuple(LevelGroup(band=name, kind="free", source=path) for name in ("blue", "red"))
    tied = read_text(tmp_path, text, kind="difference", reference_epochs=[59000.0, 59001.0], reference_err=1.5)
    assert tied.levels[0] == LevelGroup(
        band="blue", kind="reference", reference_epochs=(59000.0, 59001.0), reference_err=1.5, source=path
    )


@pytest.mark.parametrize(
    ("options", "says"),
    [
        ({"kind": "fluxes"}, "kind must be one of flux, difference, magnitude, got 'fluxes'"),
        ({"limit_sigma": 0}, "limit_sigma must be positive and finite, got 0"),
        ({"limit_sigma": float("nan")}, "limit_sigma must be positive and finite, got nan"),
        ({"reference_err": 1.0}, 'reference_epochs and reference_err need kind = "difference"'),
        ({"reference_err": 1.0, "kind": "difference"}, "reference_err must go with reference_epochs"),
        ({"reference_epochs": [2460000.5], "kind": "difference"}, "reference_epochs must be MJDs, got 2460000.5"),
        ({"band": " "}, "band must be a printable name"),
        ({"columns": {"flux": ""}}, "must be the name of a column of the file, got ''"),
    ],
)
def test_options(tmp_path: Path, options: dict[str, Any], says: str) -> None:
    with pytest.raises(InputError, match=says) as caught:
        read_text(tmp_path, HEADER + "60000,red,1,1\n", **options)
    assert str(caught.value).startswith(str(tmp_path))


@pytest.mark.parametrize("form", ["ecsv", "fits"])
def test_quantity_tables(tmp_path: Path, form: str) -> None:
    path = tmp_path / f"curve.{form}"
    table(flux=np.array([0.02, -0.001]) * u.uJy).write(path)
    curve = read_lightcurve(path)
    assert curve.flux.tolist() == [-1.0, 20.0]
    assert curve.band.tolist() == ["blue", "red"]
    assert curve.time_scale == "unspecified"
    assert curve.flux.dtype.isnative
    assert curve.flux.flags.c_contiguous


@pytest.mark.parametrize("form", ["ecsv", "fits"])
@pytest.mark.parametrize("scale", ["utc", "tdb", "tt", "tai", "tcb", "ut1"])
def test_astropy_times_keep_their_scale(tmp_path: Path, form: str, scale: str) -> None:
    mjd = np.array([60002.123456789, 60001.0])
    path = tmp_path / f"curve.{form}"
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # astropy on observatories, when it writes
        table(time=Time(mjd, format="mjd", scale=scale)).write(path)
    curve = read_lightcurve(path)
    assert curve.time_scale == scale
    assert curve.time.tolist() == sorted(mjd.tolist())


def test_calendar_times_in_ecsv(tmp_path: Path) -> None:
    path = tmp_path / "curve.ecsv"
    table(time=Time(["2023-02-26T00:00:00", "2023-02-25T12:00:00"], scale="utc")).write(path)
    # MJD 60000 is 2023 February 25.0 (Astronomical Almanac)
    assert read_lightcurve(path).time.tolist() == [60000.5, 60001.0]


@pytest.mark.parametrize(
    ("header", "scale"), [("time [MJD TDB]", "tdb"), ("time [d]", "unspecified"), ("time [UTC]", "utc")]
)
def test_csv_time_scales(tmp_path: Path, header: str, scale: str) -> None:
    assert read_text(tmp_path, HEADER.replace("time", header) + "60000,r,1,1\n").time_scale == scale


def test_fits_times_with_a_reference_date(tmp_path: Path) -> None:
    columns = [
        fits.Column("TIME", "D", unit="d", array=[1500.25, 1500.5]),
        fits.Column("band", "1A", array=["r", "r"]),
        fits.Column("flux", "D", unit="nJy", array=[1.0, 2.0]),
        fits.Column("flux_err", "D", unit="nJy", array=[1.0, 1.0]),
    ]
    hdu = fits.BinTableHDU.from_columns(columns)
    hdu.header["TIMESYS"] = "TDB"
    hdu.header["MJDREF"] = 58000.0
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(tmp_path / "curve.fits")
    curve = read_lightcurve(tmp_path / "curve.fits")
    assert curve.time.tolist() == [59500.25, 59500.5]
    assert curve.time_scale == "tdb"


def test_masked_and_integer_columns_of_fits(tmp_path: Path) -> None:
    path = tmp_path / "curve.fits"
    plain = Table(table())
    plain["is_upper_limit"] = np.array([1, 0], dtype=np.int16)
    plain["flux"] = MaskedColumn([20, -1], mask=[False, True], fill_value=-999, unit=u.nJy)
    plain.write(path)
    with pytest.raises(InputError, match=r"data row 2 .*flux is missing"):
        read_lightcurve(path, limit_sigma=5)
    plain["excluded"] = [False, True]
    plain.write(path, overwrite=True)
    curve = read_lightcurve(path, limit_sigma=5)
    assert curve.is_upper_limit.tolist() == [False, True]
    assert curve.used.tolist() == [False, True]


def test_format_follows_the_content(tmp_path: Path) -> None:
    stream = io.StringIO()
    table().write(stream, format="ascii.ecsv")
    assert len(read_text(tmp_path, stream.getvalue(), name="curve.csv")) == 2
    assert len(read_text(tmp_path, stream.getvalue(), name="curve.txt")) == 2


def test_files_that_cannot_be_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with pytest.raises(InputError, match=r"no\.csv: there is no such file"):
        read_lightcurve(tmp_path / "no.csv")
    with pytest.raises(InputError, match="must be a file with a table, got a folder or a device"):
        read_lightcurve(tmp_path)
    with pytest.raises(InputError, match="got a folder or a device"):
        read_lightcurve(os.devnull)
    with pytest.raises(InputError, match=r"cannot be read|there is no such file"):
        read_lightcurve("a\0b.csv")
    huge = tmp_path / "huge.csv"
    with huge.open("wb") as stream:
        stream.truncate(files_module.MAX_BYTES + 1)  # a hole, not real bytes
    with pytest.raises(InputError, match=r"huge\.csv: must be smaller than 64 MiB"):
        read_lightcurve(huge)

    def fail(path: Path) -> bytes:
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(Path, "read_bytes", fail)
    path = tmp_path / "locked.csv"
    path.write_text(HEADER)
    with pytest.raises(InputError, match=r"locked\.csv: cannot be read: Permission denied"):
        read_lightcurve(path)


def test_columns_of_other_kinds_are_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "curve.ecsv"
    rows = table(position=SkyCoord([1.0, 2.0], [3.0, 4.0], unit="deg"), excluded=np.array([1.0, 0.0]), band=[115, 200])
    rows.write(path)
    curve = read_lightcurve(path)
    assert curve.band.tolist() == ["200", "115"]
    assert curve.used.tolist() == [True, False]
    table(excluded=np.array([0.5, 0.0])).write(path, overwrite=True)
    with pytest.raises(InputError, match=r"data row 1 .*excluded must be true or false \(or 1 or 0\), got '0.5'"):
        read_lightcurve(path)


def test_masked_times(tmp_path: Path) -> None:
    path = tmp_path / "curve.ecsv"
    time = Time(np.ma.array([60002.0, 60001.0], mask=[False, True]), format="mjd", scale="tdb")
    table(time=time).write(path)
    with pytest.raises(InputError, match=r"data row 2 .*time is missing"):
        read_lightcurve(path)


def test_too_many_rows(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(files_module, "MAX_ROWS", 2)
    monkeypatch.setattr(astropy_files, "MAX_ROWS", 1)
    table().write(tmp_path / "curve.ecsv")
    with pytest.raises(InputError, match="must have at most 1 rows"):
        read_lightcurve(tmp_path / "curve.ecsv")
    with pytest.raises(InputError, match="must have at most 2 rows"):
        read_text(tmp_path, HEADER + "60000,r,1,1\n60001,r,1,1\n60002,r,1,1\n")


def test_same_time_and_band_with_other_flux_is_allowed(tmp_path: Path) -> None:
    assert len(read_text(tmp_path, HEADER + "60000,r,1,1\n60000,r,2,1\n60000,b,1,1\n")) == 3
    with pytest.raises(InputError, match=r"data row 3 .*same observation as data row 1"):
        read_text(tmp_path, HEADER + "60000,r,1,1\n60000,r,2,1\n60000,r,1,5\n")


EVENT = """
[event]
name = "two files"
[bands.red]
wavelength = "1.5 um"
[bands.blue]
wavelength = "1.0 um"
[[photometry]]
file = "total.csv"
[[photometry]]
file = "difference.csv"
kind = "difference"
reference_epochs = [59000.0]
reference_err = "1.5 nJy"
limit_sigma = 5
columns = { time = "mjd", flux = "d [uJy]", flux_err = "e" }
"""


def write_event(tmp_path: Path, difference: str) -> Path:
    (tmp_path / "event.toml").write_text(EVENT)
    (tmp_path / "total.csv").write_text(HEADER + "60000,red,1,1\n60003,blue,2,1\n")
    (tmp_path / "difference.csv").write_text("mjd,band,d,e,is_upper_limit\n" + difference)
    return tmp_path / "event.toml"


def test_photometry_of_an_event(tmp_path: Path) -> None:
    path = write_event(tmp_path, "60001,red,-0.01,0.002,0\n60002,red,0.01,,1\n")
    curve = read_photometry(read_event(path))
    assert curve.time.tolist() == [60000.0, 60001.0, 60002.0, 60003.0]
    assert curve.flux.tolist() == [1.0, -10.0, 10.0, 2.0]
    assert curve.flux_err.tolist() == [1.0, 2.0, 2.0, 1.0]
    assert [curve.levels[k].kind for k in curve.level] == ["absolute", "reference", "reference", "absolute"]
    assert curve.levels[curve.level[1]].reference_err == 1.5
    assert [Path(source).name for source, _ in curve.sources] == ["total.csv", "difference.csv"]
    assert curve.source.tolist() == [0, 1, 1, 0]
    assert curve.row.tolist() == [1, 1, 2, 2]


def test_bands_of_an_event(tmp_path: Path) -> None:
    path = write_event(tmp_path, "60001,red,-0.01,0.002,0\n60002,rde,0.01,0.002,0\n")
    says = r"difference\.csv: data row 2 .*band must be one of the event's \[bands\], got 'rde'; the nearest one is red"
    with pytest.raises(InputError, match=says):
        read_photometry(read_event(path))
    write_event(tmp_path, "60001,green,-0.01,0.002,0\n")
    with pytest.raises(InputError, match=r"got 'green'; the event has red, blue"):
        read_photometry(read_event(path))


def test_an_event_without_photometry(tmp_path: Path) -> None:
    path = tmp_path / "event.toml"
    path.write_text('[event]\nname = "bare"\n')
    with pytest.raises(InputError, match=r"event\.toml: must name at least one light curve: add a \[photometry\]"):
        read_photometry(read_event(path))
