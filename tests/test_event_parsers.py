from __future__ import annotations

import datetime
import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from crossing.errors import InputError
from crossing.event import Value, parsers, wording
from crossing.event.parsers import FRACTION, NONZERO, NOT_NEGATIVE, POSITIVE, sky_position, uncertain
from crossing.event.quantities import ANGLE, DIMENSIONLESS


@pytest.mark.parametrize(
    ("bounds", "raw", "expected"),
    [
        (POSITIVE, 0.4, Value.exact(0.4)),
        (POSITIVE, {"value": 0.4, "error": 0.01}, Value.normal(0.4, 0.01, lower=0)),
        (POSITIVE, {"low": 0, "high": 2}, Value.uniform(0, 2)),
        (POSITIVE, {"low": 0.1, "high": 2, "scale": "log"}, Value.loguniform(0.1, 2)),
        (POSITIVE, {"low": 0.1, "high": 2, "scale": "linear"}, Value.uniform(0.1, 2)),
        (FRACTION, {"value": 0.9, "error": 0.3}, Value.normal(0.9, 0.3, lower=0, upper=1)),
        (NOT_NEGATIVE, {"value": 0, "error": 0.3}, Value.normal(0, 0.3, lower=0)),
        (NONZERO, {"value": -300, "error": 200}, Value.normal(-300, 200, upper=0)),
        (NONZERO, {"value": 300, "error": 200}, Value.normal(300, 200, lower=0)),
        (NONZERO, {"low": -300, "high": 0}, Value.uniform(-300, 0)),
    ],
)
def test_uncertain_values(bounds, raw, expected):
    assert uncertain(DIMENSIONLESS, bounds)(raw) == expected


def test_each_part_of_an_uncertain_value_has_its_own_unit():
    assert uncertain(ANGLE)({"value": "0.42 arcsec", "error": "50 mas"}) == Value.normal(0.42, 0.05)


@pytest.mark.parametrize(
    ("bounds", "raw", "where", "message"),
    [
        (POSITIVE, {}, None, "must hold low; write {value, error} or {low, high, scale}"),
        (POSITIVE, {"error": 1}, None, "must hold value"),
        (POSITIVE, {"low": 1}, None, "must hold high"),
        (POSITIVE, {"low": -1, "high": 1}, "low", "must be greater than 0, got -1"),
        (POSITIVE, {"value": 0, "error": 1}, "value", "must be greater than 0, got 0"),
        (FRACTION, {"low": 0.5, "high": 1.5}, "high", "must be at least 0 and at most 1, got 1.5"),
        (NONZERO, {"low": -1, "high": 1}, None, "must stay on one side of 0, got -1 to 1; cut the range there"),
        (NONZERO, 0, None, "must be different from 0, got 0"),
        (POSITIVE, {"value": 1, "err": 1}, "err", "is not a known key; the nearest known one is error"),
    ],
)
def test_uncertain_values_refused(bounds, raw, where, message):
    with pytest.raises(InputError, match=re.escape(message)) as caught:
        uncertain(DIMENSIONLESS, bounds)(raw)
    assert caught.value.where == where


@pytest.mark.parametrize(
    ("written", "expected"),
    [
        # 10h 0m 24s is 150.1 deg (15 deg an hour); 2d 12m is 2.2 deg.
        (["150.1 deg", "2.2 deg"], (150.1, 2.2)),
        (["10h00m24s", "+02d12m00s"], (150.1, 2.2)),
        (["10h 00m 24s", "-02d 12m 00s"], (150.1, -2.2)),
        (["9006 arcmin", "132 arcmin"], (150.1, 2.2)),
        (["150d06m", "-90 deg"], (150.1, -90.0)),
    ],
)
def test_sky_positions(written, expected):
    assert sky_position(written) == pytest.approx(expected, abs=1e-12)  # rounding of 360 deg in float64


@pytest.mark.parametrize(
    ("written", "where", "message"),
    [
        ("150.1 deg", None, "must be an array of two strings, [RA, Dec]"),
        (["150.1 deg"], None, "must be an array of two strings, [RA, Dec]"),
        (["150.1", "2.2 deg"], "[0]", 'must be a string with a unit such as "150.1 deg"'),
        (["10:00:24", "2.2 deg"], "[0]", "got '10:00:24'"),
        (["10h00m60s", "2.2 deg"], "[0]", "got '10h00m60s'"),
        (["150.1 kpc", "2.2 deg"], "[0]", "got '150.1 kpc'"),
        (["nan deg", "2.2 deg"], "[0]", "must be a string with a unit"),
        (["1e999 deg", "2.2 deg"], "[0]", "got '1e999 deg'"),
        (["360 deg", "2.2 deg"], "[0]", "must be a right ascension between 0 and 360 deg"),
        (["150.1 deg", "2h12m00s"], "[1]", "must be a declination in degrees"),
        (["150.1 deg", "-90.1 deg"], "[1]", "must be a declination between -90 and 90 deg"),
    ],
)
def test_sky_positions_refused(written, where, message):
    with pytest.raises(InputError, match=re.escape(message)) as caught:
        sky_position(written)
    assert caught.value.where == where


@settings(derandomize=True, deadline=None, max_examples=200)
@given(st.from_regex(r"\A[-+0-9hdms:. '\"°ra]{0,14}\Z"))
def test_any_angle_is_read_or_refused(text):
    try:
        ra, dec = sky_position([text, text])
    except InputError:
        return
    assert 0 <= ra < 360
    assert -90 <= dec <= 90


def test_epochs():
    assert parsers.epochs([59000, 59001.5]) == (59000.0, 59001.5)
    for raw in ([], 59000.0, [True], [-1], ["59000"], [float("nan")]):
        with pytest.raises(InputError, match="must be"):
            parsers.epochs(raw)


@pytest.mark.parametrize("name", ["F115", "i'", "α", "a" * 64])
def test_sane_names(name):
    assert parsers.is_name(name)


@pytest.mark.parametrize("name", ["", " ", "F115 ", "a" * 65, "a\tb", "a\x7fb", "a\u2028b", "a\u202eb"])
def test_insane_names(name):
    assert not parsers.is_name(name)


def test_hexadecimal_integers_beyond_what_python_prints_are_described():
    assert wording.describe(16**9999) == "an integer of more than 30 digits"


def test_nearest_ignores_case():
    assert wording.nearest("h0", ["H0", "Om0"]) == "H0"
    assert wording.nearest("\x00", ["H0"]) == "H0"


def test_far_keys_are_answered_with_all_known_ones():
    with pytest.raises(InputError, match=r"the nearest known one is .*; the keys known here are H0 and Om0"):
        wording.check_keys(["xyz"], ["H0", "Om0"])


@pytest.mark.parametrize(
    ("raw", "expected"),
    [
        (10**400, "an integer of more than 30 digits"),
        ("x" * 99, "'" + "x" * 60 + "...'"),
        ("\x1b", r"'\x1b'"),
        (datetime.time(1, 2), "the date or time 01:02:00"),
        (None, "a NoneType"),
        ({}, "a table"),
    ],
)
def test_descriptions_are_short_and_printable(raw, expected):
    assert wording.describe(raw) == expected
