from __future__ import annotations

import copy
import hashlib
import os
import pickle
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from crossing.errors import InputError
from crossing.event import (
    BandRecord,
    CosmologyRecord,
    CounterpartRecord,
    Event,
    MacroRecord,
    MicrolensRecord,
    MotionRecord,
    PhotometryRecord,
    StarRecord,
    Value,
    read_event,
    require,
)
from crossing.event.reader import build_event
from crossing.event.tables import Table

FULL = """
[event]
name = "invented arc, knot B"
mode = "persistent"

[lens]
redshift = 0.4

[source]
redshift = {value = 0.9, error = 0.02}

[cosmology]
H0 = "70 km / (s Mpc)"
Om0 = 0.3

[[macro.models]]
name = "A"
weight = 2
mu_t = {low = 100.0, high = 400.0, scale = "log"}
mu_r = 1.4

[[macro.models]]
name = "B"
critical_distance = {value = "-0.42 arcsec", error = "0.1 arcsec"}
gradient = ["0.05 / arcsec", "0.01 / arcsec"]
mu_r = 1.5
position = ["10h00m24s", "+02d12m00s"]
position_error = "50 mas"

[[microlenses]]
kappa_star = {low = 0.005, high = 0.02, scale = "log"}
mass_function = "salpeter"
mass_range = ["0.1 solMass", "1.2 solMass"]

[[microlenses]]
name = "remnants"
surface_density = "2 solMass / pc2"
mean_mass = "0.6 solMass"

[[microlenses]]
surface_brightness = "27.0 mag / arcsec2"
band = "F115"
mass_to_light = {value = 2.0, error = 0.5}
mass_function = "log-normal"
median_mass = "0.2 solMass"
width_dex = 0.6

[motion]
lens_spread = "500 km / s"
source_spread = {value = "300 km / s", error = "50 km / s"}
position = ["150.1 deg", "2.2 deg"]
angle = "30 deg"

[star]
radius = {low = "10 solRad", high = "800 solRad", scale = "log"}
temperature = "12000 K"
luminosity = "1e5 solLum"

[bands.F115]
wavelength = "1.15 um"
width = "0.26 um"
depth = "28.9 mag"
depth_sigma = 3
limb_darkening = 0.4
extinction = {value = "0.02 mag", error = "0.01 mag"}

[bands.i]
wavelength = "755 nm"

[[photometry]]
file = "knot.ecsv"

[[photometry]]
file = "sub/difference.csv"
kind = "difference"
reference_epochs = [59000, 59010.5]
reference_err = "3 nJy"
limit_sigma = 3
columns = {time = "MJD", flux_err = "e_flux", excluded = "bad", limit_sigma = "n_sigma"}

[counterpart]
limit = "23.9 mag"
band = "i"
earlier = [57000.25]
"""
MINIMAL = '[event]\nname = "knot"\n'


def write(folder: Path, text: str | bytes) -> Path:
    path = folder / "event.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def read(folder: Path, text: str) -> Event:
    return read_event(write(folder, text))


def test_every_section_of_a_full_file(tmp_path):
    path = write(tmp_path, FULL)
    event = read_event(str(path))
    assert (event.name, event.mode, event.path) == ("invented arc, knot B", "persistent", path)
    assert event.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert event.lens_redshift == Value.exact(0.4)
    assert event.source_redshift == Value.normal(0.9, 0.02, lower=0)
    assert event.cosmology == CosmologyRecord(name=None, H0=70.0, Om0=0.3)
    assert event.macro == (
        MacroRecord(way="mu_t+mu_r", name="A", weight=2.0, mu_t=Value.loguniform(100, 400), mu_r=Value.exact(1.4)),
        MacroRecord(
            way="critical_distance",
            name="B",
            critical_distance=Value.normal(-0.42, 0.1),
            gradient=(Value.exact(0.05), Value.exact(0.01)),
            mu_r=Value.exact(1.5),
            position=pytest.approx((150.1, 2.2), abs=1e-12),  # rounding of hours to degrees
            position_error=pytest.approx(0.05, rel=1e-14),  # one division by 1000
        ),
    )
    assert event.microlenses == (
        MicrolensRecord(kappa_star=Value.loguniform(0.005, 0.02), mass_function="salpeter", mass_range=(0.1, 1.2)),
        MicrolensRecord(
            name="remnants",
            surface_density=Value.exact(2.0),
            mass_function="single",
            mass_range=None,
            mean_mass=Value.exact(0.6),
        ),
        MicrolensRecord(
            surface_brightness=Value.exact(27.0),
            band="F115",
            mass_to_light=Value.normal(2.0, 0.5, lower=0),
            mass_function="log-normal",
            median_mass=0.2,
            width_dex=0.6,
        ),
    )
    assert event.motion == MotionRecord(
        lens_spread=Value.exact(500.0),
        source_spread=Value.normal(300.0, 50.0, lower=0),
        position=(150.1, 2.2),
        angle=Value.exact(30.0),
    )
    assert event.star == StarRecord(
        radius=Value.loguniform(10, 800), temperature=Value.exact(12000.0), luminosity=Value.exact(1e5)
    )
    assert event.bands == {
        "F115": BandRecord(
            name="F115",
            wavelength=1.15,
            width=0.26,
            depth=pytest.approx(10.0, rel=1e-13),  # 31.4 - 28.9 = 2.5 mag above 1 nJy
            depth_sigma=3.0,
            limb_darkening=Value.exact(0.4),
            extinction=Value.normal(0.02, 0.01, lower=0),
        ),
        "i": BandRecord(name="i", wavelength=pytest.approx(0.755, rel=1e-14)),
    }
    assert event.photometry == (
        PhotometryRecord(path=tmp_path / "knot.ecsv"),
        PhotometryRecord(
            path=tmp_path / "sub/difference.csv",
            kind="difference",
            reference_epochs=(59000.0, 59010.5),
            reference_err=3.0,
            limit_sigma=3.0,
            columns={"time": "MJD", "flux_err": "e_flux", "excluded": "bad", "limit_sigma": "n_sigma"},
        ),
    )
    assert event.counterpart == CounterpartRecord(limit=pytest.approx(1000.0), band="i", earlier=(57000.25,))
    assert pickle.loads(pickle.dumps(event)) == event


def test_defaults_of_a_minimal_file(tmp_path):
    event = read(tmp_path, MINIMAL)
    assert event == Event(name="knot", path=event.path, sha256=event.sha256)
    assert event.cosmology.name == "Planck18"
    assert event.mode == "transient"
    assert event.bands == {}


@pytest.mark.parametrize(
    ("macro", "expected"),
    [
        (
            "kappa = {value = 0.7, error = 0.02}\ngamma = 0.3",
            MacroRecord(way="kappa+gamma", kappa=Value.normal(0.7, 0.02, lower=0), gamma=Value.exact(0.3)),
        ),
        (
            'kappa = 0.7\ngamma = 0.3\ngradient = "-0.05 / arcsec"',
            MacroRecord(
                way="kappa+gamma",
                kappa=Value.exact(0.7),
                gamma=Value.exact(0.3),
                gradient=(Value.exact(-0.05), Value.exact(0.0)),
            ),
        ),
        (
            "mu_t = {value = -300.0, error = 200.0}\nmu_r = 1.4",
            MacroRecord(way="mu_t+mu_r", mu_t=Value.normal(-300, 200, upper=0), mu_r=Value.exact(1.4)),
        ),
        (
            'caustic_distance = "2 arcsec"\nfold_strength = "0.8 arcsec(1/2)"\nmu_r = 1.4\nside = "saddle"',
            MacroRecord(
                way="caustic_distance",
                caustic_distance=Value.exact(2.0),
                fold_strength=Value.exact(0.8),
                mu_r=Value.exact(1.4),
                side="saddle",
            ),
        ),
    ],
)
def test_ways_of_the_macro_lens(tmp_path, macro, expected):
    assert read(tmp_path, f"{MINIMAL}[macro]\n{macro}\n").macro == (expected,)


def test_plain_tables_are_lists_of_one(tmp_path):
    event = read(tmp_path, MINIMAL + '[microlenses]\nkappa_star = 0.01\n[photometry]\nfile = "/data/a.csv"\n')
    assert event.microlenses == (MicrolensRecord(kappa_star=Value.exact(0.01)),)
    assert event.microlenses[0].mass_range == (0.08, 1.5)
    assert event.photometry[0].path == Path("/data/a.csv")


@pytest.mark.parametrize("name", ["Planck18", "WMAP9"])
def test_named_cosmologies(tmp_path, name):
    assert read(tmp_path, f'{MINIMAL}[cosmology]\nname = "{name}"\n').cosmology == CosmologyRecord(name=name)


@pytest.mark.parametrize(
    ("macro", "kappa"),
    [
        # kappa = 1 - (lam_t + lam_r) / 2 with lam = 1 / mu, or lam_t = gradient x distance.
        ("kappa = 0.4\ngamma = 0.3", 0.4),
        ("mu_t = 5.0\nmu_r = 1.0", 0.4),
        ('critical_distance = "2 arcsec"\ngradient = "0.1 / arcsec"\nmu_r = 1.0', 0.4),
    ],
)
def test_stars_must_not_outweigh_the_lens(tmp_path, macro, kappa):
    text = f"{MINIMAL}[[microlenses]]\nkappa_star = 0.1\n[[microlenses]]\nkappa_star = %s\n[macro]\n{macro}\n"
    assert len(read(tmp_path, text % 0.3).microlenses) == 2  # the sum may equal kappa, up to rounding
    with pytest.raises(InputError, match=rf"kappa_star above kappa \({kappa}\) in sum, got 0.41"):
        read(tmp_path, text % 0.31)


def test_unknown_kappa_is_not_compared_with_the_stars(tmp_path):
    macro = 'caustic_distance = "2 mas"\nfold_strength = "0.8 arcsec(1/2)"\nmu_r = 1.4\nside = "pair"'
    event = read(tmp_path, f"{MINIMAL}[microlenses]\nkappa_star = 2.0\n[macro]\n{macro}\n")
    assert event.microlenses[0].kappa_star == Value.exact(2.0)


def test_stars_are_compared_with_every_model(tmp_path):
    models = "[[macro.models]]\nkappa = 0.6\ngamma = 0.3\n[[macro.models]]\nkappa = 0.3\ngamma = 0.6\n"
    with pytest.raises(InputError, match=r"microlenses: must not have kappa_star above kappa of macro.models\[1\]"):
        read(tmp_path, f"{MINIMAL}[microlenses]\nkappa_star = 0.4\n{models}")


def test_mirror_position_or_earlier_detections_alone(tmp_path):
    event = read(tmp_path, MINIMAL + "[counterpart]\nearlier = [57000.0]\n")
    assert event.counterpart == CounterpartRecord(earlier=(57000.0,))
    event = read(tmp_path, MINIMAL + '[counterpart]\nfile = "mirror.ecsv"\n')
    assert event.counterpart == CounterpartRecord(path=tmp_path / "mirror.ecsv")
    with pytest.raises(InputError, match="counterpart: must hold exactly one of file and limit, got file and limit"):
        read(tmp_path, MINIMAL + '[counterpart]\nfile = "m.ecsv"\nlimit = "28 mag"\nband = "i"\nearlier = [57000.0]\n')


def test_byte_order_mark_and_foreign_line_ends(tmp_path):
    path = write(tmp_path, b"\xef\xbb\xbf" + MINIMAL.replace("\n", "\r\n").encode())
    assert read_event(path).name == "knot"


def test_require(tmp_path):
    event = read(tmp_path, MINIMAL + '[bands.i]\nwavelength = "755 nm"\n')
    require(event, "bands")
    with pytest.raises(
        InputError, match=r"event.toml: photometry: must be given for crossing fit; add \[photometry\] with"
    ):
        require(event, "bands", "photometry", purpose="crossing fit")
    for section in ("lens", "source", "macro", "microlenses", "motion", "counterpart"):
        with pytest.raises(
            InputError, match=rf"event.toml: {section}: must be given for this; add \[+{section}\]+ with"
        ):
            require(event, section)
    assert require(read(tmp_path, FULL), "lens", "source", "macro", "microlenses", "motion", "counterpart") is None


def test_missing_file(tmp_path):
    with pytest.raises(InputError, match=r"nowhere.toml: must exist, got no such file; check the path"):
        read_event(tmp_path / "nowhere.toml")


def test_file_as_folder(tmp_path):
    path = write(tmp_path, MINIMAL)
    with pytest.raises(InputError, match=r"event.toml/x: must be readable, got 'Not a directory'"):
        read_event(path / "x")


def test_folder(tmp_path):
    with pytest.raises(InputError, match="must be a regular file, got a folder or a device"):
        read_event(tmp_path)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="needs named pipes")
def test_pipe_is_not_waited_for(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(InputError, match="must be a regular file"):
        read_event(tmp_path / "pipe")


def test_unreadable_file(tmp_path, monkeypatch):
    def denied(*args: object, **kwargs: object) -> None:
        raise PermissionError(13, "Permission denied")

    path = write(tmp_path, MINIMAL)
    monkeypatch.setattr(Path, "open", denied)  # file modes do not stop a super-user
    with pytest.raises(InputError, match=r"event.toml: must be readable, got 'Permission denied'; check the path"):
        read_event(path)


def test_null_character_in_the_path():
    with pytest.raises(InputError, match="must be readable, got 'embedded null byte'"):
        read_event("a\0b.toml")


def test_too_large(tmp_path):
    path = write(tmp_path, MINIMAL.encode() + b"#" * (1 << 20))
    with pytest.raises(InputError, match="must be at most 1 MiB long; give a TOML file, not a data table"):
        read_event(path)


def test_end_of_document_has_a_line_and_column(tmp_path):
    with pytest.raises(InputError, match=r"event.toml: line 4, column 7: .*; correct the TOML there"):
        read(tmp_path, MINIMAL + "[lens]\nreds =")


def test_import_leaves_out_the_slow_parts_of_astropy():
    code = "import sys, crossing.event; print({'astropy.cosmology', 'astropy.coordinates'} & set(sys.modules))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60)
    assert done.stdout.strip() == "set()"


def leaves(data: object, path: tuple[object, ...] = ()) -> list[tuple[object, ...]]:
    """Paths of all that stands in a nested document, tables themselves included."""
    items = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    inside = [leaf for key, inner in items for leaf in leaves(inner, (*path, key))]
    return [path, *inside] if path else inside


VALID = tomllib.loads(FULL)
ODD = st.one_of(
    st.sampled_from(
        [True, 0, -1, 1e308, -1e308, 5e-324, float("nan"), float("inf"), 10**400, "", "\0", [], {}, [[]], [{}]]
    ),
    st.sampled_from(["1 um", "0 nJy", "-1 mag", "3 arcsec", "1e308 solRad", "1e-320 K", "pair", "i", "single"]),
    st.dictionaries(
        st.sampled_from(["value", "error", "low", "high", "scale"]), st.sampled_from([0, 1, -1, "1 K", "log"])
    ),
)


@settings(derandomize=True, deadline=None, max_examples=400)
@given(st.lists(st.tuples(st.sampled_from(leaves(VALID)), ODD, st.booleans()), min_size=1, max_size=2))
def test_any_change_of_a_valid_file_is_read_or_refused_in_one_line(changes):
    data = copy.deepcopy(VALID)
    for path, odd, delete in changes:
        inner = data
        try:
            for key in path[:-1]:
                inner = inner[key]
            inner[path[-1]]
        except (KeyError, IndexError, TypeError):
            continue  # an earlier change removed it
        if delete:
            del inner[path[-1]]
        else:
            inner[path[-1]] = odd
    try:
        outcome = build_event(Table(data, source=Path("event.toml")), "0" * 64)
    except InputError as error:
        outcome = str(error)
    assert isinstance(outcome, Event) or (outcome.startswith("event.toml: ") and outcome.isprintable())
