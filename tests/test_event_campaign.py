"""Campaign files: what is read, what segments share, when visits fall; what is malformed stands in the corpus."""

from __future__ import annotations

import copy
import hashlib
import math
import pickle
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest
from astropy.time import Time
from hypothesis import given, settings
from hypothesis import strategies as st

import crossing
from crossing.errors import InputError
from crossing.event import (
    Campaign,
    DetectionRecord,
    LineRecord,
    MacroRecord,
    MapRecord,
    MicrolensRecord,
    ObservedEventRecord,
    ObservedRecord,
    PopulationRecord,
    ScheduleRecord,
    SegmentRecord,
    Value,
    macro_section,
    read_campaign,
    require_campaign,
    segment_event,
    visit_noise,
    visit_times,
)
from crossing.event.campaign_macro import MACRO_KEYS
from crossing.event.campaign_parsers import moment
from crossing.event.campaign_reader import build_campaign
from crossing.event.parsers import uncertain
from crossing.event.quantities import FLUX
from crossing.event.tables import Table

exact = Value.exact
CORPUS = sorted((Path(__file__).parent / "malformed" / "campaigns").glob("*.toml"))

FULL = """
[campaign]
name = "invented arc, next season"

[lens]
redshift = 0.4

[source]
redshift = {value = 0.9, error = 0.02}

[motion]
speed = {low = "300 km / s", high = "1500 km / s"}

[bands.blue]
wavelength = "0.87 um"
depth = "28.9 mag"
depth_sigma = 10

[bands.red]
wavelength = "1.54 um"

[macro]
mu_r = 1.5
gradient = "0.1 / arcsec"

[[microlenses]]
mass_function = "salpeter"
kappa_star = 0.02

[[microlenses]]
name = "compact"
kappa_star = 0.001
mean_mass = "30 solMass"

[[segments]]
name = "inner"
critical_distance = {value = "0.1 arcsec", error = "0.05 arcsec"}
length = "0.2 arcsec"
width = "300 mas"
surface_brightness = {blue = {value = "25.3 mag / arcsec2", error = "0.1 mag / arcsec2"}, red = "25 mag / arcsec2"}
kappa_star = {low = 0.005, high = 0.02, scale = "log"}

[[segments]]
length = "0.2 arcsec"
width = "0.3 arcsec"
macro = {mu_t = -100.0, mu_r = 1.4}
surface_brightness = {blue = "25.5 mag / arcsec2"}

[population]
slope = {value = 2.0, error = 0.2}
luminosity_range = ["1e3 solLum", "1e6 solLum"]
temperature = {low = "4000 K", high = "30000 K", scale = "log"}
light_fraction = {low = 0.3, high = 0.9}
reference_band = "blue"
dust = "0.2 mag"
star_formation_density = "0.1 solMass / (yr kpc2)"
stellar_mass_density = "100 solMass / pc2"

[[schedules]]
name = "nightly"
start = 2027-01-15
cadence = "24 h"
number = 30
gaps = [["2027-02-01", "2027-02-11"], [61430, 61431.5]]
depth = {blue = "28.4 mag", red = "10 nJy"}
depth_sigma = 4
loss = 0.2
exposure = "45 min"

[[schedules]]
epochs = [61500.5, "2027-01-15T06:00:00"]

[detection]
significance = 4
epochs = 2
bands = ["blue", "red"]
bands_required = 2
reference_epochs = [61000]
reference_depth = {blue = "29.9 mag"}
reference_depth_sigma = 3
merge = "2 wk"
efficiency = {value = 0.9, error = 0.05}
follow_up_delay = "2 d"

[observed]
schedule = "nightly"

[[observed.events]]
segment = "inner"
brightness = {value = "26.4 mag", error = "0.1 mag"}
band = "blue"
time = 61433.2

[[observed.events]]
segment = "segment 2"
"""
MINIMAL = '[campaign]\nname = "arc"\n'
SIZE = 'length = "0.2 arcsec"\nwidth = "0.3 arcsec"\n'
SEGMENT = f"[[segments]]\nkappa = 0.7\ngamma = 0.29\n{SIZE}"
MAPS = '[[macro.maps]]\ndeflection1 = "x.fits"\ndeflection2 = "y.fits"\nnormalised = true\n'


def read(folder: Path, text: str) -> Campaign:
    path = folder / "campaign.toml"
    path.write_text(text)
    campaign = read_campaign(str(path))
    assert pickle.loads(pickle.dumps(campaign)) == campaign
    return campaign


def test_the_lens_side_of_a_full_file(tmp_path):
    campaign = read(tmp_path, FULL)
    path = tmp_path / "campaign.toml"
    assert (campaign.name, campaign.path) == ("invented arc, next season", path)
    assert campaign.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert (campaign.lens_redshift, campaign.source_redshift) == (exact(0.4), Value.normal(0.9, 0.02, lower=0))
    assert campaign.motion is not None
    assert campaign.motion.speed == Value.uniform(300, 1500)
    assert list(campaign.bands) == ["blue", "red"]
    compact = MicrolensRecord(
        name="compact", kappa_star=exact(0.001), mass_function="single", mass_range=None, mean_mass=exact(30)
    )
    assert campaign.segments == (
        SegmentRecord(
            name="inner",
            macro=(
                MacroRecord(
                    way="critical_distance",
                    critical_distance=Value.normal(0.1, 0.05),
                    gradient=(exact(0.1), exact(0)),
                    mu_r=exact(1.5),
                ),
            ),
            length=0.2,
            width=pytest.approx(0.3, rel=1e-14),  # one division by 1000
            surface_brightness={"blue": Value.normal(25.3, 0.1), "red": exact(25)},
            microlenses=(
                MicrolensRecord(kappa_star=Value.loguniform(0.005, 0.02), mass_function="salpeter"),
                compact,
            ),
        ),
        SegmentRecord(
            name="segment 2",
            macro=(
                MacroRecord(
                    way="mu_t+mu_r", mu_t=exact(-100), mu_r=exact(1.4), gradient=(exact(0.1), exact(0))
                ),  # the shared gradient
            ),
            length=0.2,
            width=0.3,
            surface_brightness={"blue": exact(25.5)},
            microlenses=(MicrolensRecord(kappa_star=exact(0.02), mass_function="salpeter"), compact),
        ),
    )
    assert [segment.place for segment in campaign.segments] == ["segments[0]", "segments[1]"]
    assert [segment.macro[0].place for segment in campaign.segments] == ["segments[0]", "segments[1].macro"]
    assert campaign.parts == campaign.segments


def test_the_observers_side_of_a_full_file(tmp_path):
    campaign = read(tmp_path, FULL)
    assert campaign.population == PopulationRecord(
        slope=Value.normal(2.0, 0.2),
        luminosity_range=(1e3, 1e6),
        temperature=Value.loguniform(4000, 30000),
        light_fraction=Value.uniform(0.3, 0.9),
        reference_band="blue",
        dust=exact(0.2),
        star_formation_density=exact(0.1),
        stellar_mass_density=exact(100),
    )
    assert campaign.schedules == (
        ScheduleRecord(
            name="nightly",
            start=61420.0,  # 15 January 2027
            cadence=1.0,
            number=30,
            gaps=((61430.0, 61431.5), (61437.0, 61447.0)),
            depth={"blue": pytest.approx(10**1.2, rel=1e-13), "red": 10.0},  # 31.4 - 28.4 = 3 mag above 1 nJy
            depth_sigma=4.0,
            loss=0.2,
            exposure=pytest.approx(0.75, rel=1e-14),
        ),
        ScheduleRecord(name="schedule 2", epochs=(61420.25, 61500.5)),
    )
    assert campaign.detection == DetectionRecord(
        significance=4.0,
        epochs=2,
        bands=("blue", "red"),
        bands_required=2,
        reference_epochs=(61000.0,),
        reference_depth={"blue": pytest.approx(10**0.6, rel=1e-13)},
        reference_depth_sigma=3.0,
        merge=14.0,
        efficiency=Value.normal(0.9, 0.05, lower=0, upper=1),
        follow_up_delay=2.0,
    )
    assert campaign.observed is not None
    first, second = campaign.observed.events
    assert (campaign.observed.count, campaign.observed.schedule) == (2, "nightly")
    assert (first.segment, first.position, first.band, first.time) == ("inner", None, "blue", 61433.2)
    # 31.4 - 26.4 = 5 mag above 1 nJy; 0.1 mag are 0.04 ln 10 of it, up to the rounding of a power.
    assert (first.brightness.a, first.brightness.b) == (pytest.approx(100.0), pytest.approx(4 * math.log(10)))
    assert second == ObservedEventRecord(segment="segment 2")


def test_defaults_of_a_minimal_file(tmp_path):
    campaign = read(tmp_path, MINIMAL)
    assert campaign == Campaign(name="arc", path=campaign.path, sha256=campaign.sha256)
    assert campaign.cosmology.name == "Planck18"
    assert campaign.parts == ()
    assert campaign.population.slope == exact(2)
    assert (campaign.detection.significance, campaign.detection.merge) == (5.0, 30.0)
    assert crossing.read_campaign is read_campaign


def test_a_table_of_stars_in_place_of_a_law(tmp_path):
    population = (
        '[population]\nfile = "sub/stars.ecsv"\ncolumns = {number = "N"}\ndust = {low = "0 mag", high = "1 mag"}\n'
    )
    assert read(tmp_path, MINIMAL + population).population == PopulationRecord(
        path=tmp_path / "sub/stars.ecsv", columns={"number": "N"}, slope=None, dust=Value.uniform(0, 1)
    )


def test_the_keys_of_macro_are_those_of_event_files():
    assert set(MACRO_KEYS) == set(macro_section._KNOWN)


@pytest.mark.parametrize(
    ("shared", "own", "expected"),
    [
        # What a segment does not say comes from [macro],
        ("kappa = 0.7\ngamma = 0.3", "gamma = 0.28", {"kappa": exact(0.7), "gamma": exact(0.28)}),
        ("kappa = 0.7\ngamma = 0.29", "", {"kappa": exact(0.7), "gamma": exact(0.29)}),
        # but only what belongs to the segment's way.
        (
            'mu_r = 1.5\ngradient = "0.1 / arcsec"\ncritical_distance = "1 arcsec"',
            "kappa = 0.7\ngamma = 0.28",
            {"kappa": exact(0.7), "gamma": exact(0.28), "gradient": (exact(0.1), exact(0))},
        ),
        ("kappa = 0.7\ngamma = 0.29", "mu_t = 50.0\nmu_r = 1.2", {"mu_t": exact(50), "mu_r": exact(1.2)}),
        (
            'side = "saddle"\nmu_r = 1.5\nfold_strength = "1 arcsec(1/2)"',
            'caustic_distance = "1 mas"\nside = "minimum"',
            {
                "caustic_distance": Value.exact(1e-3),
                "mu_r": exact(1.5),
                "side": "minimum",
                "fold_strength": exact(1),
            },
        ),
    ],
)
def test_what_segments_share(tmp_path, shared, own, expected):
    (segment,) = read(tmp_path, f"{MINIMAL}[macro]\n{shared}\n[[segments]]\n{SIZE}{own}\n").segments
    (record,) = segment.macro
    assert {key: getattr(record, key) for key in expected} == expected
    assert record == MacroRecord(way=record.way, **expected)


def test_maps_are_shared_and_positions_are_not(tmp_path):
    position = 'position = ["150.1 deg", "2.2 deg"]\n'
    campaign = read(tmp_path, f"{MINIMAL}[macro]\n{MAPS}{MAPS}[segments]\n{SIZE}{position}")
    chart = MapRecord(
        planes={f"deflection{i}": f"{tmp_path}/{axis}.fits" for i, axis in ((1, "x"), (2, "y"))}, normalised=True
    )
    assert (
        campaign.segments[0].macro == (MacroRecord(way="maps", maps=(chart,), weight=0.5, position=(150.1, 2.2)),) * 2
    )


def test_alternatives(tmp_path):
    first, second, third = read(
        tmp_path,
        f'{MINIMAL}[[macro.models]]\nname = "A"\nweight = 2\nmu_r = 1.5\nmu_t = 50.0\n'
        f"[[macro.models]]\nmu_r = 1.4\nmu_t = 80.0\n"
        f"[[segments]]\n{SIZE}mu_r = 1.3\n"
        f"[[segments]]\n{SIZE}kappa = 0.7\ngamma = 0.28\n"
        f"[[segments]]\n{SIZE}[[segments.macro.models]]\nkappa = 0.7\ngamma = 0.28\nweight = 3\n"
        f"[[segments.macro.models]]\nkappa = 0.7\ngamma = 0.32\n",
    ).segments
    # The segment's own number replaces that of every alternative.
    assert [(record.name, record.weight, record.mu_t, record.mu_r) for record in first.macro] == [
        ("A", 2.0, exact(50), exact(1.3)),
        (None, 1.0, exact(80), exact(1.3)),
    ]
    assert [(record.way, record.weight) for record in second.macro] == [("kappa+gamma", 1.0)]
    assert [(record.gamma, record.weight) for record in third.macro] == [(exact(0.28), 3.0), (exact(0.32), 1.0)]


def test_line(tmp_path):
    campaign = read(
        tmp_path,
        f'{MINIMAL}[bands.i]\nwavelength = "755 nm"\n[microlenses]\nkappa_star = 0.01\n[macro]\n{MAPS}'
        '[line]\npoints = [["150.1 deg", "2.2 deg"], ["150.1002 deg", "2.2 deg"]]\nstep = "0.1 arcsec"\n'
        'width = "0.3 arcsec"\nsurface_brightness = {i = "25 mag / arcsec2"}\nsurface_density = "12 solMass / pc2"\n'
        '[observed]\npositions = [["150.1001 deg", "2.2 deg"]]\nbrightnesses = ["27.4 mag"]\n',
    )
    assert campaign.line == LineRecord(
        points=((150.1, 2.2), (150.1002, 2.2)),
        step=0.1,
        width=0.3,
        macro=campaign.line.macro,
        surface_brightness={"i": exact(25)},
        microlenses=(MicrolensRecord(surface_density=exact(12)),),
    )
    assert [(record.way, record.position) for record in campaign.line.macro] == [("maps", (150.1, 2.2))]
    assert campaign.parts == (campaign.line,)
    (event,) = campaign.observed.events
    assert (event.position, event.band, event.brightness.a) == ((150.1001, 2.2), "i", pytest.approx(10**1.6))
    require_campaign(campaign, "segments", "surface_brightness")


def test_stars_in_front_of_a_segment(tmp_path):
    shared = '[[microlenses]]\nsurface_density = "5 solMass / pc2"\nmass_range = ["0.1 solMass", "1 solMass"]\n'
    own = 'microlenses = [{kappa_star = 0.1, mean_mass = "30 solMass"}]\n'
    densities = ("", "kappa_star = 0.02\n", "kappa_star = 0.0\n", own)
    segments = read(tmp_path, MINIMAL + shared + "".join(SEGMENT + density for density in densities)).segments
    stars = MicrolensRecord(surface_density=exact(5), mass_range=(0.1, 1.0))
    assert [segment.microlenses for segment in segments] == [
        (stars,),
        (MicrolensRecord(kappa_star=exact(0.02), mass_range=(0.1, 1.0)),),
        (),
        (MicrolensRecord(kappa_star=exact(0.1), mass_function="single", mass_range=None, mean_mass=exact(30)),),
    ]
    # Without shared ones a density alone means the default mass function, and nothing at all a smooth lens.
    first, second = read(tmp_path, f"{MINIMAL}{SEGMENT}kappa_star = 0.02\n{SEGMENT}").segments
    assert (first.microlenses, second.microlenses) == ((MicrolensRecord(kappa_star=exact(0.02)),), ())
    # The shared density may be missing where each segment has one.
    (only,) = read(
        tmp_path, f'{MINIMAL}[microlenses]\nmass_function = "salpeter"\n{SEGMENT}kappa_star = 0.02\n'
    ).segments
    assert only.microlenses == (MicrolensRecord(kappa_star=exact(0.02), mass_function="salpeter"),)


@pytest.mark.parametrize(
    ("observed", "expected"),
    [
        ("count = 0", ObservedRecord(count=0)),
        ("count = 7", ObservedRecord(count=7)),
        (
            'positions = ["segment 1", "segment 1"]',
            ObservedRecord(count=2, events=(ObservedEventRecord(segment="segment 1"),) * 2),
        ),
        (
            'count = 1\nband = "i"\nbrightnesses = ["50 nJy"]',
            ObservedRecord(count=1, events=(ObservedEventRecord(brightness=exact(50), band="i"),)),
        ),
    ],
)
def test_observed(tmp_path, observed, expected):
    bands = '[bands.i]\nwavelength = "755 nm"\n[bands.z]\nwavelength = "900 nm"\n'
    assert read(tmp_path, f"{MINIMAL}{bands}{SEGMENT}[observed]\n{observed}\n").observed == expected


@pytest.mark.parametrize(
    ("raw", "expected"),
    [
        ({"value": "100 nJy", "error": "0.1 mag"}, Value.normal(100, 4 * math.log(10))),
        ({"value": "26.4 mag", "error": "5 nJy"}, Value.normal(100, 5)),
        ({"low": "26.4 mag", "high": "23.9 mag"}, Value.loguniform(100, 1000)),
        ({"low": "23.9 mag", "high": "26.4 mag", "scale": "linear"}, Value.loguniform(100, 1000)),
        ({"low": "26.4 mag", "high": "1 uJy"}, Value.uniform(100, 1000)),
    ],
)
def test_uncertain_magnitudes(raw, expected):
    found = uncertain(FLUX)(raw)
    # 26.4 and 23.9 mag are 100 and 1000 nJy, up to the rounding of a power.
    assert (found.shape, found.a, found.b) == (
        expected.shape,
        pytest.approx(expected.a, rel=1e-12),
        pytest.approx(expected.b, rel=1e-12),
    )


@pytest.mark.parametrize(
    ("toml", "utc"),
    [
        ("2027-01-15", "2027-01-15T00:00:00"),
        ('"2027-01-15"', "2027-01-15T00:00:00"),
        ("2027-01-15T18:30:00", "2027-01-15T18:30:00"),
        ('"2027-01-15 18:30"', "2027-01-15T18:30:00"),
        ("2027-01-15T18:30:00+02:00", "2027-01-15T16:30:00"),
        ('"1999-12-31T12:00:00Z"', "1999-12-31T12:00:00"),
    ],
)
def test_dates_against_astropy(toml, utc):
    mjd = moment(tomllib.loads(f"t = {toml}")["t"])
    assert mjd == pytest.approx(Time(utc, scale="utc").mjd, abs=1e-9)  # both are sums of floats near 6e4


@pytest.mark.parametrize(
    ("gaps", "expected"),
    [
        ((), [0, 2, 4, 6, 8]),
        (((3.0, 5.0),), [0, 2, 6, 8, 10]),
        (((4.0, 6.0),), [0, 2, 6, 8, 10]),  # a gap's beginning belongs to it, its end does not
        (((-5.0, -1.0), (100.0, 200.0)), [0, 2, 4, 6, 8]),
        (((-5.0, 3.0), (4.0, 7.0), (5.0, 6.5)), [8, 10, 12, 14, 16]),
        (((-1.0, 1.0), (9.0, 9.5)), [2, 4, 6, 8, 10]),
    ],
)
def test_visits_go_on_behind_gaps(gaps, expected):
    gaps = tuple((61000 + first, 61000 + last) for first, last in gaps)
    visits = visit_times(ScheduleRecord(name="s", start=61000.0, cadence=2.0, number=5, gaps=gaps))
    np.testing.assert_array_equal(visits - 61000, expected)


@settings(derandomize=True, deadline=None, max_examples=100)
@given(
    st.integers(1, 200),
    st.sampled_from([0.1, 0.7, 1.0, 3.3, 50.0]),
    st.lists(st.tuples(st.floats(-50, 300), st.floats(0.01, 100)), max_size=4),
)
def test_visits_against_a_plain_loop(number, cadence, gaps):
    gaps = tuple(sorted((61000 + first, 61000 + first + length) for first, length in gaps))
    visits = visit_times(ScheduleRecord(name="s", start=61000.0, cadence=cadence, number=number, gaps=gaps))
    loop, k = [], 0
    while len(loop) < number:
        mjd = 61000 + k * cadence
        # Rounding: visit_times takes visits within 1e-9 cadences before an edge as on it.
        if not any(first - 1e-9 * cadence <= mjd < last - 1e-9 * cadence for first, last in gaps):
            loop.append(mjd)
        k += 1
    np.testing.assert_array_equal(visits, loop)


def test_a_gap_of_many_visits_takes_no_time():
    schedule = ScheduleRecord(name="s", start=0.0, cadence=1e-5, number=3, gaps=((1e-5, 9e5),))
    np.testing.assert_allclose(visit_times(schedule), [0, 9e5, 9e5 + 1e-5], rtol=1e-15)  # one rounding of 9e5


def test_explicit_visits_and_their_noise(tmp_path):
    campaign = read(tmp_path, FULL)
    nightly, other = campaign.schedules
    np.testing.assert_array_equal(visit_times(other), [61420.25, 61500.5])
    assert visit_noise(campaign, nightly) == {"blue": pytest.approx(10**1.2 / 4), "red": 2.5}
    assert visit_noise(campaign, other) == {"blue": pytest.approx(1.0)}  # 10 nJy at 10 sigma; red has no depth


def test_the_event_of_a_segment(tmp_path):
    campaign = read(tmp_path, FULL)
    segment = campaign.segments[0]
    event = segment_event(campaign, segment)
    assert (event.name, event.path, event.sha256) == ("inner", campaign.path, campaign.sha256)
    assert (event.macro, event.microlenses) == (segment.macro, segment.microlenses)
    for part in ("lens_redshift", "source_redshift", "cosmology", "motion", "bands"):
        assert getattr(event, part) is getattr(campaign, part)


def test_require(tmp_path):
    campaign = read(tmp_path, MINIMAL + SEGMENT)
    require_campaign(campaign, "segments")
    with pytest.raises(
        InputError,
        match=r"campaign.toml: segments\[0\].surface_brightness: must be given for crossing rates; add surface_bright",
    ):
        require_campaign(campaign, "surface_brightness", purpose="crossing rates")
    for section in ("lens", "source", "motion", "bands", "schedules", "observed"):
        with pytest.raises(InputError, match=rf"campaign.toml: {section}: must be given for this; add \[+{section}"):
            require_campaign(campaign, section)
    with pytest.raises(InputError, match=r"campaign.toml: segments: must be given for this; add \[\[segments\]\]"):
        require_campaign(read(tmp_path, MINIMAL), "surface_brightness", "segments")
    sections = ("lens", "source", "motion", "bands", "segments", "schedules", "observed", "surface_brightness")
    require_campaign(read(tmp_path, FULL), *sections)


def test_the_corpus_says_what_it_expects():
    assert len(CORPUS) >= 100
    assert all(expected_fragments(path) for path in CORPUS)


def expected_fragments(path: Path) -> list[str]:
    return re.findall(r"^# expect: (.+)$", path.read_text(), re.MULTILINE)


@pytest.mark.parametrize("path", CORPUS, ids=lambda path: path.stem)
def test_one_line_names_file_and_key(path):
    fragments = expected_fragments(path)
    with pytest.raises(InputError, match=re.escape(f"{path}: {fragments[0]}")) as caught:
        read_campaign(path)
    line = str(caught.value)
    assert line.isprintable()
    assert len(line) < 800 + len(str(path))  # a segment has some fifty keys, all listed beside a strange one
    for fragment in fragments:
        assert fragment in line


def test_too_many_explicit_visits(tmp_path):
    visits = ",".join(map(str, range(100_001)))
    with pytest.raises(InputError, match=r"schedules.epochs: must hold at most 100000 visits, got 100001; split"):
        read(tmp_path, f"{MINIMAL}[schedules]\nepochs = [{visits}]\n")


def test_reading_leaves_out_the_slow_parts_of_astropy(tmp_path):
    (tmp_path / "c.toml").write_text(FULL)
    code = (
        "import sys, crossing.event; crossing.event.read_campaign(sys.argv[1]); "
        "print({'astropy.cosmology', 'astropy.coordinates', 'astropy.time'} & set(sys.modules))"
    )
    command = [sys.executable, "-c", code, str(tmp_path / "c.toml")]
    done = subprocess.run(command, capture_output=True, text=True, check=True, timeout=60)
    assert done.stdout.strip() == "set()"


def leaves(data: object, path: tuple[object, ...] = ()) -> list[tuple[object, ...]]:
    """Paths of all that stands in a nested document, tables themselves included."""
    items = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    inside = [leaf for key, inner in items for leaf in leaves(inner, (*path, key))]
    return [path, *inside] if path else inside


VALID = tomllib.loads(FULL)
ODD = st.one_of(
    st.sampled_from([True, 0, -1, 1e308, 5e-324, float("nan"), float("inf"), 10**400, "", "\0", [], {}, [[]], [{}]]),
    st.sampled_from(
        ["1 um", "0 nJy", "-1 mag", "3 arcsec", "1e308 d", "1e-320 K", "pair", "blue", "inner", "2027-13-01"]
    ),
    st.dictionaries(
        st.sampled_from(["value", "error", "low", "high", "scale"]), st.sampled_from([0, 1, -1, "1 K", "2 mag", "log"])
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
        outcome = build_campaign(Table(data, source=Path("campaign.toml")), "0" * 64)
    except InputError as error:
        outcome = str(error)
    if isinstance(outcome, Campaign):
        assert all(np.all(np.diff(visit_times(schedule)) > 0) for schedule in outcome.schedules)
    else:
        assert outcome.startswith("campaign.toml: ")
        assert outcome.isprintable()
