"""Bad maps are answered by one line that names the file or the key; signs, axes and units that would fit are named."""

from __future__ import annotations

import gzip
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS
from macro_maps import CENTRE, Grid, components, record_of, rendered, sky, write_planes

from crossing.errors import InputError
from crossing.event.records import MapRecord
from crossing.optics.macro.critical_lines import critical_lines
from crossing.optics.macro.lens_map import read_lens_map
from crossing.optics.macro.local_map import local_solution
from crossing.optics.macro.map_files import open_plane, split_plane
from crossing.optics.macro.map_realisations import read_realisations
from crossing.optics.macro.profiles import NFWSphere, ProfileSum, Shear, SoftenedEllipsoid
from crossing.optics.macro.sky_frame import offsets_from_sky, read_wcs, sky_from_offsets
from crossing.optics.scales import LensScales

SCALES = LensScales(0.5, 1.5)
PROFILE = ProfileSum(
    parts=(
        SoftenedEllipsoid(einstein_radius=6.0, axis_ratio=0.7, core=0.8, angle=27.0),
        Shear(gamma1=0.05, gamma2=0.04),
    )
)
GRID = Grid(width=120, height=110, pixel=0.15, rotation=20.0)
SHEAR = ("convergence", "shear1", "shear2")
DEFLECTIONS = ("deflection1", "deflection2")
ALL = (*SHEAR, "shear", *DEFLECTIONS)


@pytest.fixture
def record(tmp_path: Path) -> MapRecord:
    return rendered(tmp_path, PROFILE, GRID)


@pytest.fixture
def everything(tmp_path: Path) -> dict[str, str]:
    return write_planes(tmp_path, components(PROFILE, GRID), GRID, ALL)


def rewrite(path: str, change: Any) -> None:
    """Change the header or the data of a file."""
    with fits.open(path) as hdus:
        header, data = hdus[0].header.copy(), np.array(hdus[0].data)
    data = change(header, data)
    fits.PrimaryHDU(data, header).writeto(path, overwrite=True)


def fails(record: MapRecord, message: str, source: str | None = None) -> None:
    with pytest.raises(InputError, match=message) as caught:
        local_solution(read_lens_map(record, SCALES), CENTRE)
    text = str(caught.value)
    assert "\n" not in text
    assert source is None or source in text


def drop_wcs(header: fits.Header, data: np.ndarray) -> np.ndarray:
    for key in [key for key in header if key.startswith(("CTYPE", "CRVAL", "CRPIX", "CD", "PC", "CUNIT"))]:
        del header[key]
    return data


def set_card(key: str, value: Any) -> Any:
    def change(header: fits.Header, data: np.ndarray) -> np.ndarray:
        header[key] = value
        return data

    return change


def singular(header: fits.Header, data: np.ndarray) -> np.ndarray:
    drop_wcs(header, data)
    header.update({"CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CD1_1": 1e-5, "CD1_2": 1e-5})
    header.update({"CD2_1": 1e-5, "CD2_2": 1e-5})
    return data


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (drop_wcs, r"must have a celestial WCS \(CTYPE, CRVAL, CRPIX, CD or CDELT\), got none; write one"),
        (singular, "must have a celestial WCS .*, got (a broken one|one whose pixels)"),
        (set_card("CTYPE1", "DEC--TAN"), "must have a celestial WCS .*, got"),
        (set_card("BUNIT", "Msun / kpc2"), r"BUNIT must be empty for convergence and shear, got 'Msun / kpc2'; divide"),
        (set_card("BUNIT", "arcsec"), "BUNIT must be empty for convergence and shear, got 'arcsec'"),
        (set_card("BUNIT", "1e9"), "BUNIT must be empty for convergence and shear"),
        (set_card("BUNIT", "nonsense"), "BUNIT must be empty for convergence and shear, got 'nonsense'"),
        (lambda header, data: data * 1e9, r"convergence must be a number of order 1, got a median of .*e\+0"),
        (lambda header, data: data[:-1], r"must have the shape of .*, 120 x (109|110) pixels, got 120 x (109|110)"),
        (lambda header, data: data[0], "must be an image of two axes|must have a celestial WCS|must hold an image"),
        (lambda header, data: data[None], r"must be an image of two axes, got 3; name a layer of a cube as file\.fits"),
        (lambda header, data: data[:8, :8], "must have 16 pixels or more a side, got 8 x 8|must have the shape of"),
        (set_card("CRVAL1", CENTRE[0] + 0.01), "must lie on the sky where .* does; resample one of them"),
    ],
)
def test_bad_images(record: MapRecord, change: Any, message: str) -> None:
    rewrite(record.planes["convergence"], change)
    fails(record, message, source="convergence.fits")


def test_common_words_for_no_unit_are_taken(record: MapRecord) -> None:
    for word in ("", "dimensionless", "kappa", "None"):
        rewrite(record.planes["convergence"], set_card("BUNIT", word))
        read_lens_map(record, SCALES)


def test_truncated_file(record: MapRecord) -> None:
    path = Path(record.planes["shear2"])
    path.write_bytes(path.read_bytes()[: 2880 * 8])
    fails(record, r"is truncated: 120 x 110 pixels need 52800 bytes, got \d+; copy it again", source="shear2.fits")


def test_truncated_compressed_file(record: MapRecord) -> None:
    path = Path(record.planes["shear2"])
    packed = path.with_suffix(".fits.gz")
    packed.write_bytes(gzip.compress(path.read_bytes())[:-2000])
    fails(replace(record, planes={**record.planes, "shear2": str(packed)}), "is not a whole FITS file|is truncated")


def test_compressed_file(record: MapRecord) -> None:
    path = Path(record.planes["shear2"])
    packed = path.with_suffix(".fits.gz")
    packed.write_bytes(gzip.compress(path.read_bytes()))
    plain = local_solution(read_lens_map(record, SCALES), sky(1, 1))
    zipped = replace(record, planes={**record.planes, "shear2": str(packed)})
    assert local_solution(read_lens_map(zipped, SCALES), sky(1, 1)) == plain


def test_huge_declared_size(record: MapRecord) -> None:
    """A header that asks for terabytes must not be believed, nor memory be set aside for it."""
    path = Path(record.planes["convergence"])
    before = path.read_bytes()
    for side, message in (
        (400_000, "is truncated: 400000 x 400000 pixels need 640000000000 bytes, got 54720"),
        (2_000_000_000, "is not a whole FITS file"),
    ):
        data = before
        for key, size in (("NAXIS1", 120), ("NAXIS2", 110)):
            old = f"{key:<8}= {size:>20}".encode()
            assert old in data
            data = data.replace(old, f"{key:<8}= {side:>20}".encode())
        path.write_bytes(data)
        fails(record, message, source="convergence.fits")
        path.with_suffix(".fits.gz").write_bytes(gzip.compress(data))
        planes = {key: str(path.with_suffix(".fits.gz")) for key in SHEAR}
        fails(replace(record, planes=planes), r"must have 1e\+10 pixels or less, got|is not a whole FITS file")


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "is not a whole FITS file"),
        (b"SIMPLE  =                    T", "is not a whole FITS file"),
        (b"not a FITS file at all\n" * 200, "is not a whole FITS file"),
    ],
)
def test_no_fits_file(record: MapRecord, content: bytes, message: str) -> None:
    Path(record.planes["convergence"]).write_bytes(content)
    fails(record, message, source="convergence.fits")


def test_missing_file_and_folder(record: MapRecord, tmp_path: Path) -> None:
    fails(
        replace(record, planes={**record.planes, "shear1": str(tmp_path / "no.fits")}), "does not exist; check its name"
    )
    fails(replace(record, planes={**record.planes, "shear1": str(tmp_path)}), "cannot be read: Is a directory")


def test_border_without_numbers(record: MapRecord) -> None:
    def border(header: fits.Header, data: np.ndarray) -> np.ndarray:
        data[:, :40] = np.nan
        return data

    for key in SHEAR:
        rewrite(record.planes[key], border)
    lens_map = read_lens_map(record, SCALES)
    local_solution(lens_map, CENTRE)
    frame = lens_map.wcs.frame_at(CENTRE)
    for column, room in ((42.0, 2), (20.0, 0)):
        x, y = frame.to_offsets(column, 50.0)
        message = f"`position` must lie 4 pixels or more from pixels without a number, got RA .* deg at {room};"
        with pytest.raises(InputError, match=f"model: {message}"):
            local_solution(lens_map, sky(float(x), float(y)))


def test_nothing_but_missing_pixels(record: MapRecord) -> None:
    for key in SHEAR:
        rewrite(record.planes[key], lambda header, data: np.full_like(data, np.nan))
    fails(record, "`position` must lie 4 pixels or more from pixels without a number")
    assert critical_lines(read_lens_map(record, SCALES), [1.5]).lines == ()


def test_infinite_pixels_count_as_missing(record: MapRecord) -> None:
    def spike(header: fits.Header, data: np.ndarray) -> np.ndarray:
        data[55, 60] = np.inf
        return data

    rewrite(record.planes["convergence"], spike)
    lens_map = read_lens_map(record, SCALES)
    frame = lens_map.wcs.frame_at(CENTRE)
    x, y = frame.to_offsets(61.0, 55.0)
    with pytest.raises(InputError, match="from pixels without a number"):
        local_solution(lens_map, sky(float(x), float(y)))
    x, y = frame.to_offsets(72.0, 55.0)
    assert np.isfinite(local_solution(lens_map, sky(float(x), float(y))).lam_t)


@pytest.mark.parametrize(
    ("column", "row", "message"),
    [
        (-30.0, 50.0, r"model: `position` must lie on the map, got RA .*, Dec .* deg outside of it; check both"),
        (60.0, 111.0, "`position` must lie on the map"),
        (
            1.0,
            50.0,
            r"`position` must lie 4 pixels or more from the edge of the map, got .* at 1\.5; give a larger map",
        ),
        (60.0, 109.4, r"`position` must lie 4 pixels or more from the edge of the map, got .* at 0\.1"),
    ],
)
def test_position_outside_or_on_the_edge(record: MapRecord, column: float, row: float, message: str) -> None:
    lens_map = read_lens_map(record, SCALES)
    x, y = lens_map.wcs.frame_at(CENTRE).to_offsets(column, row)
    with pytest.raises(InputError, match=message):
        local_solution(lens_map, sky(float(x), float(y)))


def test_position_on_the_other_side_of_the_sky(record: MapRecord) -> None:
    with pytest.raises(InputError, match="`position` must lie on the map"):
        local_solution(read_lens_map(record, SCALES), ((CENTRE[0] + 180) % 360, -CENTRE[1]))


def test_deflections_need_two_pixels_more(everything: dict[str, str]) -> None:
    lens_map = read_lens_map(record_of({key: everything[key] for key in DEFLECTIONS}), SCALES)
    x, y = lens_map.wcs.frame_at(CENTRE).to_offsets(5.0, 50.0)
    with pytest.raises(InputError, match=r"must lie 6 pixels or more from the edge of the map, got .* at 5\.5"):
        local_solution(lens_map, sky(float(x), float(y)))


@pytest.mark.parametrize(
    ("keys", "got"),
    [
        (("convergence", "shear1"), r"convergence \+ shear1"),
        (("convergence", "shear"), r"convergence \+ shear"),
        (("shear1", "shear2"), r"shear1 \+ shear2"),
        (("deflection1",), "deflection1"),
        (("convergence", *DEFLECTIONS), r"convergence \+ deflection1 \+ deflection2"),
        ((), "nothing"),
    ],
)
def test_missing_pieces(everything: dict[str, str], keys: tuple[str, ...], got: str) -> None:
    planes = {key: everything[key] for key in keys}
    fails(record_of(planes), rf"must have convergence \+ shear1 \+ shear2, .*, got {got}; add what is missing")


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"source_redshift": 0.5}, r"source_redshift: must be larger than the lens redshift 0\.5, got 0\.5"),
        ({"source_redshift": 0.3}, r"source_redshift: must be larger than the lens redshift 0\.5, got 0\.3"),
        ({"normalised": False}, "source_redshift: must be given, unless normalised = true says"),
        ({"normalised": True, "source_redshift": 2.0}, "source_redshift: must not stand beside normalised = true"),
    ],
)
def test_redshifts(everything: dict[str, str], options: dict[str, Any], message: str) -> None:
    fails(record_of({key: everything[key] for key in SHEAR}, **options), message)


@pytest.mark.parametrize(
    ("unit", "message"),
    [
        (None, r"`deflection_unit` must be given, since the file has no BUNIT; add deflection_unit = \"arcsec\""),
        ("km", "deflection must be in an angle or in pixels, got the unit 'km'; give deflection_unit"),
        ("arcsek", "deflection must be in an angle or in pixels, got the unit 'arcsek'"),
    ],
)
def test_units_of_deflections(everything: dict[str, str], unit: str | None, message: str) -> None:
    fails(record_of({key: everything[key] for key in DEFLECTIONS}, deflection_unit=unit), message)


def test_pixels_that_are_not_square_are_no_unit(tmp_path: Path) -> None:
    record = rendered(tmp_path, PROFILE, replace(GRID, stretch=1.2), DEFLECTIONS, deflection_unit="pixel")
    fails(record, "`deflection_unit` must be an angle where pixels are not square")


@pytest.mark.parametrize(
    ("signs", "message"),
    [
        ((1, -1), r"the signs that would fit are \(\+shear1, -shear2\)"),
        ((-1, 1), r"the signs that would fit are \(-shear1, \+shear2\)"),
        ((-1, -1), r"the signs that would fit are \(-shear1, -shear2\)"),
    ],
)
@pytest.mark.parametrize(
    "grid", [GRID, replace(GRID, flipped=True, stretch=1.3, rotation=-70)], ids=["plain", "turned"]
)
def test_wrong_signs_are_named(tmp_path: Path, signs: tuple[int, int], message: str, grid: Grid) -> None:
    planes = components(PROFILE, grid)
    for key, sign in zip(("shear1", "shear2"), signs, strict=True):
        planes[key] = sign * planes[key]
    fails(
        record_of(write_planes(tmp_path, planes, grid)),
        f"model: convergence and shear contradict each other; {message}",
    )


def test_wrong_axes_are_named(tmp_path: Path) -> None:
    grid = replace(GRID, rotation=50.0)
    for right, wrong in (("sky", "pixel"), ("pixel", "sky")):
        planes = write_planes(tmp_path, components(PROFILE, grid, axes=right), grid)
        assert read_lens_map(record_of(planes, axes=right), SCALES)
        fails(record_of(planes, axes=wrong), f'contradict each other; axes = "{right}" would fit')


def test_wrong_axes_of_a_flipped_map_are_also_a_sign(tmp_path: Path) -> None:
    """North up, east left: components along east differ from those along columns by the sign of the second."""
    grid = replace(GRID, rotation=0.0)
    planes = write_planes(tmp_path, components(PROFILE, grid, axes="sky"), grid)
    fails(
        record_of(planes),
        r"the signs that would fit are \(\+shear1, -shear2\); axes = \"sky\" would fit",
    )


def test_rounded_numbers_are_no_wrong_signs(tmp_path: Path) -> None:
    """Maps written with three digits have rough derivatives, but belong together; wrong signs show all the same."""
    planes = {key: np.round(data, 3) for key, data in components(PROFILE, GRID).items()}
    lens_map = read_lens_map(record_of(write_planes(tmp_path, planes, GRID)), SCALES)
    assert local_solution(lens_map, CENTRE).quality.identity_misfit < 0.05  # type: ignore[operator]
    planes["shear2"] *= -1
    fails(record_of(write_planes(tmp_path, planes, GRID)), r"the signs that would fit are \(\+shear1, -shear2\)")


def test_shear_of_another_lens(tmp_path: Path) -> None:
    planes = components(PROFILE, GRID)
    other = components(NFWSphere(kappa_s=0.5, r_s=3.0), replace(GRID, shift=(20.0, 12.0)))
    planes["shear1"], planes["shear2"] = other["shear1"], other["shear2"]
    fails(
        record_of(write_planes(tmp_path, planes, GRID)), "convergence and shear must belong to one lens, but their der"
    )


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda alpha: (alpha[0] * 20, alpha[1] * 20), r"differ by \d+%; 0\.05 times the deflections would fit"),
        (lambda alpha: (-alpha[0], -alpha[1]), "-1 times the deflections would fit"),
        (lambda alpha: (alpha[1], -alpha[0]), "check their signs, axes and unit"),
    ],
)
@pytest.mark.parametrize("keys", [SHEAR, ("convergence", "shear")], ids=["shear", "size"])
def test_deflections_of_another_lens(tmp_path: Path, keys: tuple[str, ...], change: Any, message: str) -> None:
    planes = components(PROFILE, GRID)
    planes["deflection1"], planes["deflection2"] = change([planes[key] for key in DEFLECTIONS])
    record = record_of(write_planes(tmp_path, planes, GRID, (*keys, *DEFLECTIONS)))
    fails(record, f"deflections must agree with convergence and shear, but {'' if keys == SHEAR else '.*'}")
    if keys == SHEAR:
        fails(record, message)


def test_shear_for_another_source(tmp_path: Path) -> None:
    """The identities know no scale but that of both together: the factor between them is named."""
    planes = components(PROFILE, GRID)
    for factor, fits_ in ((2.0, r"0\.5 times"), (0.5, "2 times")):
        wrong = {**planes, **{key: factor * planes[key] for key in ("shear1", "shear2")}}
        fails(record_of(write_planes(tmp_path, wrong, GRID)), f"contradict each other; {fits_} the shear would fit")


@pytest.mark.parametrize(
    ("signs", "message"),
    [
        ((1, -1), r"have a curl; the signs that would fit are \(\+deflection1, -deflection2\)"),
        ((-1, 1), r"have a curl; the signs that would fit are \(-deflection1, \+deflection2\)"),
        ((-1, -1), r"point away from the mass; the signs that would fit are \(-deflection1, -deflection2\)"),
    ],
)
@pytest.mark.parametrize(
    "grid", [GRID, replace(GRID, flipped=True, stretch=1.3, rotation=-70)], ids=["plain", "turned"]
)
def test_wrong_signs_of_deflections_are_named(tmp_path: Path, signs: tuple[int, int], message: str, grid: Grid) -> None:
    planes = components(PROFILE, grid)
    for key, sign in zip(DEFLECTIONS, signs, strict=True):
        planes[key] = sign * planes[key]
    fails(record_of(write_planes(tmp_path, planes, grid, DEFLECTIONS)), f"gradient of a potential, but {message}")


def test_wrong_axes_of_deflections_are_named(tmp_path: Path) -> None:
    for right, wrong in (("sky", "pixel"), ("pixel", "sky")):
        planes = write_planes(tmp_path, components(PROFILE, GRID, axes=right), GRID, DEFLECTIONS)
        assert read_lens_map(record_of(planes, axes=right), SCALES)
        fails(record_of(planes, axes=wrong), f'have a curl; axes = "{right}" would fit')


def test_swapped_deflections(tmp_path: Path) -> None:
    grid = replace(GRID, rotation=35.0)
    names = write_planes(tmp_path, components(PROFILE, grid), grid, DEFLECTIONS)
    swapped = {"deflection1": names["deflection2"], "deflection2": names["deflection1"]}
    fails(record_of(swapped), "gradient of a potential, but")


def test_skewed_pixels_need_sky_axes(record: MapRecord) -> None:
    def skew(header: fits.Header, data: np.ndarray) -> np.ndarray:
        header["PC1_2"] = 0.5
        header["PC1_1"], header["PC2_1"], header["PC2_2"] = -1.0, 0.0, 1.0
        header["CDELT1"], header["CDELT2"] = GRID.pixel / 3600, GRID.pixel / 3600
        return data

    for key in SHEAR:
        rewrite(record.planes[key], skew)
    fails(record, '`axes` must be "sky" where pixel axes are not at right angles')


def test_planes_of_one_file(tmp_path: Path, everything: dict[str, str]) -> None:
    """By name, by number, and as layers of a cube; the WCS in the primary header alone."""
    planes = components(PROFILE, GRID)
    header = GRID.header()
    named = [fits.ImageHDU(planes[key].astype(">f4"), header, name=key.upper()) for key in SHEAR]
    fits.HDUList([fits.PrimaryHDU(), *named]).writeto(tmp_path / "named.fits")
    bare = [fits.ImageHDU(planes[key].astype(">f4")) for key in SHEAR]
    fits.HDUList([fits.PrimaryHDU(header=header), *bare]).writeto(tmp_path / "bare.fits")
    cube = np.stack([planes[key] for key in SHEAR]).astype(">f4")
    wide = header.copy()
    wide["CTYPE3"] = "PLANE"
    fits.PrimaryHDU(cube, wide).writeto(tmp_path / "cube.fits")
    expected = local_solution(read_lens_map(record_of({key: everything[key] for key in SHEAR}), SCALES), CENTRE)
    for file, suffixes in (
        ("named", ["convergence", "SHEAR1", "Shear2"]),
        ("named", ["1", "2", "3"]),
        ("bare", ["1", "2", "3"]),
        ("cube", ["0,1", "0,2", "0,3"]),
    ):
        texts = {key: f"{tmp_path}/{file}.fits[{suffix}]" for key, suffix in zip(SHEAR, suffixes, strict=True)}
        assert local_solution(read_lens_map(record_of(texts), SCALES), CENTRE) == expected


@pytest.mark.parametrize(
    ("suffix", "message"),
    [
        ("[MASS]", "has no image 'MASS'; its images are 0 PRIMARY"),
        ("[7]", "has no image '7'"),
        ("[0,1]", r"must be an image of two axes, got 2; name a layer of a cube as file\.fits\[0,1\]"),
    ],
)
def test_unknown_planes(record: MapRecord, suffix: str, message: str) -> None:
    planes = {**record.planes, "convergence": record.planes["convergence"] + suffix}
    fails(replace(record, planes=planes), message)


def test_layers_count_from_one(record: MapRecord, tmp_path: Path) -> None:
    fits.PrimaryHDU(np.zeros((3, 110, 120), ">f4"), GRID.header()).writeto(tmp_path / "cube.fits")
    for layer in (0, 4):
        planes = {**record.planes, "convergence": f"{tmp_path}/cube.fits[0,{layer}]"}
        fails(replace(record, planes=planes), rf"layer must be 1 to 3, got {layer}; layers count from 1")


def test_brackets_that_belong_to_the_name(record: MapRecord, tmp_path: Path) -> None:
    odd = tmp_path / "kappa[1]"
    odd.write_bytes(Path(record.planes["convergence"]).read_bytes())
    assert split_plane(str(odd)) == (odd, None, None)
    assert open_plane(str(odd)).shape == (110, 120)


def test_scaled_integers(record: MapRecord) -> None:
    path = record.planes["convergence"]
    expected = open_plane(path).whole()
    hdu = fits.PrimaryHDU(fits.getdata(path), fits.getheader(path))
    hdu.scale("int32", bscale=1e-6, bzero=0.5)
    hdu.writeto(path, overwrite=True)
    found = open_plane(path).whole()
    assert found.dtype == np.float64
    assert found.dtype.isnative
    np.testing.assert_allclose(found, expected, atol=1e-6)


def test_realisations_in_folders(tmp_path: Path) -> None:
    """One folder a realisation, the planes in files of the same names; only headers are read at first."""
    expected = []
    for number in (1, 2, 3):
        folder = tmp_path / f"map{number}"
        folder.mkdir()
        profile = ProfileSum(parts=(PROFILE, NFWSphere(kappa_s=0.05 * number, r_s=5.0)))
        record = rendered(folder, profile, GRID)
        expected.append(profile.eigenvalues(2.0, 1.0, scale=SCALES.D_ls / SCALES.D_s))
    record = replace(record, realisations=f"{tmp_path}/map*/{{plane}}.fits")
    maps = list(read_realisations(record, SCALES))
    assert [one.name for one in maps] == ["model 1", "model 2", "model 3"]
    for one, values in zip(maps, expected, strict=True):
        # Cubic splines over pixels of 0.15 arcsec.
        np.testing.assert_allclose(one.patch(CENTRE, 3.0).eigenvalues(2.0, 1.0), values, atol=1e-4)


def test_realisations_of_one_file_each(tmp_path: Path) -> None:
    planes = components(PROFILE, GRID)
    for number in range(4):
        hdus = [fits.ImageHDU(planes[key].astype(">f4"), GRID.header(), name=key) for key in SHEAR]
        fits.HDUList([fits.PrimaryHDU(), *hdus]).writeto(tmp_path / f"chain_{number}.fits")
    record = record_of({key: f"{tmp_path}/chain_0.fits[{key}]" for key in SHEAR})
    maps = list(read_realisations(replace(record, realisations=f"{tmp_path}/chain_*.fits"), SCALES))
    assert len(maps) == 4
    assert maps[3].planes["shear1"].path.name == "chain_3.fits"


@pytest.mark.parametrize(
    ("pattern", "message"),
    [
        ("none/{plane}.fits", "must name as many files for every plane, got 0 of convergence, 0 of shear1"),
        ("*.fits", "must hold {plane}, which stands for the stem of each plane's file"),
    ],
)
def test_bad_realisations(record: MapRecord, tmp_path: Path, pattern: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        list(read_realisations(replace(record, realisations=f"{tmp_path}/{pattern}"), SCALES))
    assert list(read_realisations(record, SCALES)) == []


def test_unequal_realisations(record: MapRecord, tmp_path: Path) -> None:
    for key in ("convergence", "convergence", "shear1"):
        Path(tmp_path / f"{key}_1.fits").write_bytes(Path(record.planes[key]).read_bytes())
    with pytest.raises(InputError, match="got 1 of convergence, 1 of shear1, 0 of shear2"):
        list(read_realisations(replace(record, realisations=f"{tmp_path}/{{plane}}_*.fits"), SCALES))


def test_other_coordinate_systems(tmp_path: Path) -> None:
    """The same lens on a galactic map: positions are ICRS all the same."""
    from astropy.coordinates import SkyCoord

    centre = SkyCoord(*CENTRE, unit="deg").galactic
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["GLON-TAN", "GLAT-TAN"]
    wcs.wcs.crval, wcs.wcs.crpix = [centre.l.deg, centre.b.deg], [60.5, 55.5]
    wcs.wcs.cdelt = [-0.15 / 3600, 0.15 / 3600]
    header = wcs.to_header()
    chart = read_wcs(header)
    column, row = np.meshgrid(np.arange(120), np.arange(110))
    x, y = offsets_from_sky(CENTRE, *chart.to_sky(column, row))
    kappa, (g1, g2) = PROFILE.convergence(x, y), PROFILE.shear(x, y)
    planes = {}
    for key, data in zip(SHEAR, (kappa, g1, g2), strict=True):
        planes[key] = str(tmp_path / f"{key}.fits")
        fits.PrimaryHDU(data.astype(">f4"), header).writeto(planes[key])
    lens_map = read_lens_map(record_of(planes, axes="sky"), SCALES)
    found = lens_map.patch(CENTRE, 3.0).eigenvalues(2.0, 1.0)
    np.testing.assert_allclose(found, PROFILE.eigenvalues(2.0, 1.0, scale=SCALES.D_ls / SCALES.D_s), atol=1e-4)
    assert chart.to_pixel(*chart.to_sky(20.0, 30.0)) == pytest.approx((20.0, 30.0), abs=1e-6)


def test_tangent_plane() -> None:
    """There and back, and against the definition at the pole: offsets of tan(distance)."""
    x, y = np.random.default_rng(1).uniform(-300, 300, (2, 20))
    for origin in (CENTRE, (10.0, 89.99), (0.001, -45.0)):
        assert offsets_from_sky(origin, *sky_from_offsets(origin, x, y)) == (pytest.approx(x), pytest.approx(y))
    _, dec = sky_from_offsets((0.0, 90.0), 3600.0, 0.0)
    assert 90 - dec == pytest.approx(np.degrees(np.arctan(np.radians(1.0))), rel=1e-10)
    assert np.isnan(offsets_from_sky(CENTRE, CENTRE[0] + 180, 0.0)[0])
