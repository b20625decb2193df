"""Rates of other transients, against published rates and closed forms."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.cosmology import Planck18
from hypothesis import given, settings
from hypothesis import strategies as st

from crossing.errors import InputError
from crossing.population.star_formation import collapses_per_mass, delayed_rate, star_formation_density
from crossing.population.transients import arc_transients, field_transients, lens_transients


@pytest.mark.parametrize(
    ("name", "masses", "number"),
    # Closed forms of the mass functions, checked by quadrature apart from here; 0.0068 is in Madau & Dickinson 2014.
    [
        ("salpeter", (8.0, 40.0), 0.006801487664),
        ("kroupa", (8.0, 40.0), 0.01013837671),
        ("chabrier", (8.0, 40.0), 0.010766332),
        ("salpeter", (8.0, 100.0), 0.007421779933),
        ("kroupa", (8.0, 100.0), 0.01113195925),
        ("chabrier", (8.0, 100.0), 0.011821455),
    ],
)
def test_collapses_per_mass(name: str, masses: tuple[float, float], number: float) -> None:
    assert collapses_per_mass(name, masses) == pytest.approx(number, rel=1e-6)


def test_delays_of_a_burst() -> None:
    # 2.105207e-13 / (yr Msun) after 1 Gyr for a slope of -1.12 and 1.30 per 1000 Msun (derived apart from here).
    assert delayed_rate(0.0, 1e9, 1.0) == pytest.approx(2.105207e-13 * 1e9, rel=1e-6)


def test_all_delays_together_give_the_published_number() -> None:
    """Steady star formation for 13.7 Gyr: 1.30 per 1000 Msun (Maoz, Mannucci & Brandt 2012)."""
    assert delayed_rate(2.0, 2.0 * 13.7e9, 13.7) == pytest.approx(2.0 * 1.30e-3, rel=1e-12)


@settings(derandomize=True, deadline=None, max_examples=60)
@given(st.floats(0.01, 100.0), st.floats(1e6, 1e11), st.floats(0.5, 13.0))
def test_steady_formation_upon_a_stock(formation: float, mass: float, age: float) -> None:
    """Between nothing and the whole DTD of the mass; grows with the mass."""
    rate = delayed_rate(formation, mass, age)
    assert 0.0 <= rate <= 1.30e-3 * formation + mass * 1.0e-12
    assert delayed_rate(formation, 2 * mass, age) >= rate


def test_star_formation_from_ultraviolet_light() -> None:
    """Against Kennicutt 1998, 1.4e-28 Msun/yr per erg/s/Hz for Salpeter (23% above the later calibration).

    One square kpc with 1e27 erg/s/Hz at z = 1.5, as magnitudes by distance and angle (astropy, Planck18).
    """
    flux = 1e27 * 2.5 / (4 * np.pi * Planck18.luminosity_distance(1.5).to_value("cm") ** 2)
    area = Planck18.arcsec_per_kpc_proper(1.5).value ** 2
    brightness = -2.5 * np.log10(flux) - 48.6 + 2.5 * np.log10(area)
    found = float(star_formation_density(brightness, 0.5, 1.5, mass_function="salpeter"))
    assert found == pytest.approx(1.15e-28 * 1e27, rel=1e-4)  # two editions of the parsec and of angles
    assert found == pytest.approx(1.4e-28 * 1e27, rel=0.25)
    kroupa = float(star_formation_density(brightness, 0.5, 1.5))
    # Collapses per light depend on the mass function hardly at all: both count massive stars.
    assert kroupa * collapses_per_mass() == pytest.approx(found * collapses_per_mass("salpeter"), rel=0.01)
    dusty = float(star_formation_density(brightness, 0.5, 1.5, extinction_mag=0.1, dust=0.0))
    assert dusty / kroupa == pytest.approx(10**0.04)
    assert float(star_formation_density(brightness, 0.5, 1.5, dust=0.3)) > 1.5 * kroupa


def test_galaxy_like_ours() -> None:
    """The Galaxy, 1.65 Msun/yr and 6.1e10 Msun: 2.3 core collapses, 0.54 type Ia a century (Li et al. 2011; memory)."""
    rates = arc_transients(1.65, 6.1e10, 0.0)
    assert rates.total("core-collapse supernova") == pytest.approx(0.023, rel=0.4)
    assert rates.total("supernova Ia") == pytest.approx(0.0054, rel=1.0)
    assert rates.total("nova") == pytest.approx(50.0, rel=0.6)  # 50 +31 -23 a year in the Galaxy (Shafter 2017; memory)


def test_time_dilation() -> None:
    here, there = arc_transients(1.0, 0.0, 0.0), arc_transients(1.0, 0.0, 1.5)
    assert here.total("core-collapse supernova") == pytest.approx(2.5 * there.total("core-collapse supernova"))
    assert here.total("outburst") == pytest.approx(0.2 * here.total("core-collapse supernova"))


def test_intracluster_light() -> None:
    # 0.15 per 1e10 Msun and century of the cluster (Sharon et al. 2010; memory): 1.5e-3 / 1.5 per observer's year.
    rates = lens_transients(1e10, 0.5)
    assert rates.total("supernova Ia") == pytest.approx(1.0e-3)
    assert all(rate.low < rate.rate_per_year < rate.high for rate in rates.rates)
    assert rates.total(place="arc") == 0.0


def test_field() -> None:
    """A shell so thin that nothing evolves: rate times volume, by astropy's shells; and additive over redshift."""
    area = 3600.0
    shell = (Planck18.comoving_volume(0.051) - Planck18.comoving_volume(0.049)).to_value("Mpc3")
    share = area / (4 * np.pi * (180 * 3600 / np.pi) ** 2)
    thin = field_transients(area, (0.049, 0.051))
    assert thin.total("core-collapse supernova") == pytest.approx(0.72e-4 * shell * share / 1.05, rel=1e-4)
    # 2.43 +- 0.29e-5 (Frohmaier et al. 2019).
    assert thin.total("supernova Ia") / (shell * share / 1.05) == pytest.approx(2.43e-5, abs=0.29e-5)
    parts = field_transients(area, (0.0, 0.4)) + field_transients(area, (0.4, 2.0))
    assert parts.total() == pytest.approx(field_transients(area, (0.0, 2.0)).total(), rel=1e-8)
    # Strolger et al. 2015: 3.7e-4 / (yr Mpc3) at z of 2 and more; growth with star formation overshoots by up to half.
    far = field_transients(area, (1.99, 2.01))
    volume = (Planck18.comoving_volume(2.01) - Planck18.comoving_volume(1.99)).to_value("Mpc3") * share / 3.0
    assert 1.0 < far.total("core-collapse supernova") / (3.71e-4 * volume) < 1.6


def test_what_a_result_tells() -> None:
    rates = arc_transients(1.0, 1e9, 1.0) + lens_transients(1e8, 0.4) + field_transients(100.0, (0.0, 0.4))
    told = rates.to_dict()
    assert {entry["place"] for entry in told} == {"arc", "lens", "field"}
    assert all(entry["source"] for entry in told)
    assert len(rates.to_table()) == len(told) == 8
    assert len(rates.plot().get_yticklabels()) == 8
    assert rates.total("nova") == pytest.approx(rates.total("nova", place="arc") + rates.total("nova", place="lens"))


@pytest.mark.parametrize(
    ("call", "says"),
    [
        (lambda: arc_transients(-1.0, 1e9, 1.0), "`star_formation` must be zero or positive, got -1"),
        (lambda: arc_transients(1.0, float("inf"), 1.0), "`stellar_mass` must be zero or positive, got inf"),
        (lambda: arc_transients(1.0, 1e9, 9.0), "`redshift` must be 0 to 8, got 9"),
        (
            lambda: arc_transients(1.0, 1e9, 1.0, mass_function="flat"),
            "must be salpeter, kroupa or chabrier, got 'flat'",
        ),
        (lambda: field_transients(0.0, (0.0, 1.0)), "`area_arcsec2` must be positive, got 0"),
        (lambda: field_transients(1.0, (1.0, 0.5)), "`redshifts` must be in order from 0 to 8, got 1 and 0.5"),
        (lambda: star_formation_density(25.0, 1.6, 1.0), "`wavelength_um` must be 0.12 to 0.32 um at rest, got 0.8"),
        (lambda: collapses_per_mass(masses=(0.5, 8.0)), "`masses` must be within 1 to 100 Msun, got 0.5 and 8"),
        (lambda: delayed_rate(1.0, -1.0, 1.0), "`mass_formed` must be zero or positive, got -1"),
        (lambda: delayed_rate(1.0, 1.0, 0.01), "`age_gyr` must be 0.04 to 13.7, got 0.01"),
    ],
)
def test_refused(call, says: str) -> None:
    with pytest.raises(InputError, match=says):
        call()
