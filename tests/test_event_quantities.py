from __future__ import annotations

import math
import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from crossing.errors import InputError
from crossing.event import quantities as q
from crossing.event.quantities import Measure

ALL = [measure for measure in vars(q).values() if isinstance(measure, Measure)]


@pytest.mark.parametrize("measure", [m for m in ALL if m.unit], ids=lambda m: m.unit)
def test_examples_in_messages_can_be_read(measure):
    assert measure.read(measure.example) > 0


@pytest.mark.parametrize(
    ("measure", "written", "expected"),
    [
        # Conversions of one SI prefix or of 60 arcsec to the arcmin: exact but for rounding.
        (q.ANGLE, "420 mas", 0.42),
        (q.ANGLE, "1 arcmin", 60.0),
        (q.ANGLE, " .42arcsec ", 0.42),
        (q.GRADIENT, "0.05 / arcsec", 0.05),
        (q.GRADIENT, "0.05 1/arcsec", 0.05),
        (q.GRADIENT, "3 arcmin-1", 0.05),
        (q.FOLD_STRENGTH, "0.8 arcsec(1/2)", 0.8),
        (q.FOLD_STRENGTH, "0.8 arcsec**(1/2)", 0.8),
        (q.FOLD_STRENGTH, "0.1 arcmin^(0.5)", 0.1 * 60**0.5),
        (q.HUBBLE, "70 km/s/Mpc", 70.0),
        (q.HUBBLE, "70 km s-1 Mpc-1", 70.0),
        (q.DISPERSION, "6e5 m/s", 600.0),
        (q.SURFACE_DENSITY, "12 Msun/pc2", 12.0),
        (q.SURFACE_DENSITY, "12e6 solMass / kpc^2", 12.0),
        (q.SURFACE_BRIGHTNESS, "27.0 mag / arcsec2", 27.0),
        (q.WAVELENGTH, "11500 Angstrom", 1.15),
        (q.WAVELENGTH, "1150 nm", 1.15),
        (q.TEMPERATURE, "12 kK", 12000.0),
        (q.RADIUS, "300 R_sun", 300.0),
        # IAU 2015 nominal solar radius, 695,700 km (Prsa et al. 2016).
        (q.RADIUS, "695700 km", 1.0),
        (q.MASS_TO_LIGHT, "2 Msun / Lsun", 2.0),
        (q.MASS_TO_LIGHT, 2, 2.0),
        (q.EXTINCTION, "120 mmag", 0.12),
        (q.DIMENSIONLESS, 3, 3.0),
        (q.FLUX, "20 nJy", 20.0),
        (q.FLUX, "0.02 uJy", 20.0),
        # 1 uJy is 23.9 mag AB, 3 mag are a factor of 10^1.2 (Pogson).
        (q.FLUX, "23.9 mag", 1000.0),
        (q.FLUX, "28.4 mag", 10**1.2),
        (q.FLUX, "28.4 mag(AB)", 10**1.2),
    ],
)
def test_reading(measure, written, expected):
    assert measure.read(written) == pytest.approx(expected, rel=1e-13)


@pytest.mark.parametrize(
    ("measure", "written", "message"),
    [
        (q.WAVELENGTH, 1.15, 'must be a string with a unit (um) such as "1.15 um", got 1.15'),
        (q.WAVELENGTH, True, 'must be a string with a unit (um) such as "1.15 um", got true'),
        (q.WAVELENGTH, ["1.15 um"], 'such as "1.15 um", got an array of 1'),
        (q.WAVELENGTH, "1.15", "got '1.15'"),
        (q.WAVELENGTH, "um", "got 'um'"),
        (q.WAVELENGTH, "", "got ''"),
        (q.WAVELENGTH, "nan um", "got 'nan um'"),
        (q.WAVELENGTH, "1e999 um", "must be finite, got inf"),
        (q.WAVELENGTH, "1.15 um um", "got '1.15 um um'"),
        (q.WAVELENGTH, "1 2 um", "got '1 2 um'"),
        (q.WAVELENGTH, "1,15 um", "got '1,15 um'"),
        (q.WAVELENGTH, "1.15 furlong", "got '1.15 furlong'"),
        (q.WAVELENGTH, "1.15 m(1/0)", "got '1.15 m(1/0)'"),
        (q.WAVELENGTH, "1.15 " + "u" * 200, "got '1.15 uuu"),
        (q.WAVELENGTH, "10h00m24s", "got '10h00m24s'"),
        (q.WAVELENGTH, "٣ um", "got '٣ um'"),
        (q.FLUX, "28.4 mag(ST)", "(nJy or AB mag)"),
        (q.FLUX, "28.4 mag / arcsec2", "(nJy or AB mag)"),
        (q.FLUX, "2840 mag", "must be an AB magnitude between -100 and 100, got 2840 mag"),
        (q.EXTINCTION, "0.1 mag(AB)", "got '0.1 mag(AB)'"),
        (q.DIMENSIONLESS, "0.7", "must be a plain number such as 0.7, got '0.7'; remove the quotes"),
        (q.DIMENSIONLESS, False, "must be a plain number such as 0.7, got false"),
        (q.DIMENSIONLESS, 10**400, "must be finite, got an integer of more than 30 digits"),
        (q.DIMENSIONLESS, float("inf"), "must be finite, got inf"),
        (q.MASS_TO_LIGHT, True, "must be a string with a unit (solMass / solLum)"),
    ],
)
def test_refusals_say_what_to_write(measure, written, message):
    with pytest.raises(InputError, match=re.escape(message)):
        measure.read(written)


@settings(derandomize=True, deadline=None, max_examples=300)
@given(st.sampled_from(ALL), st.from_regex(r"\A[0-9.]{1,4} ?[a-zA-Z0-9 /*^().,_-]{0,12}\Z") | st.text(max_size=30))
def test_any_text_is_read_or_refused(measure, text):
    try:
        number = measure.read(text)
    except InputError as error:
        number, refusal = 0.0, str(error)
    else:
        refusal = ""
    assert math.isfinite(number)
    assert refusal.isprintable()
