"""Stars behind a surface brightness: against astropy's black bodies, and against counting star by star."""

from __future__ import annotations

import numpy as np
import pytest
from astropy import constants, units
from astropy.cosmology import Planck18
from astropy.modeling.models import BlackBody
from scipy.integrate import quad

from crossing.errors import InputError
from crossing.event import BandRecord, Value
from crossing.event.campaign_records import PopulationRecord
from crossing.optics.scales import LensScales
from crossing.population.arc_stars import arc_stars, source_area, star_fluxes
from crossing.population.from_campaign import arc_masses, population_stars, population_transients
from crossing.population.luminosity import LuminosityFunction

SCALES = LensScales(0.5, 1.5)
BANDS = {
    "green": BandRecord(name="green", wavelength=0.6, width=0.2, extinction=Value.exact(0.08)),
    "infrared": BandRecord(name="infrared", wavelength=1.25),
}
FUNCTION = LuminosityFunction.power_law(2.0, (1e2, 10**6.5), Value.loguniform(4000.0, 30_000.0))


def stars(brightness: dict[str, Value | float], function: LuminosityFunction = FUNCTION, **options):
    return arc_stars(brightness, BANDS, 1.5, SCALES.luminosity_distance, function, **options)


def test_one_kind_of_star_against_astropy() -> None:
    """24.5 mag/arcsec2 of stars of 30,000 Lsun and 9000 K at z = 1.5: flux of one by astropy's BlackBody, Planck18."""
    kind = LuminosityFunction.table([3e4], [9000.0], [1.0])
    frequency = 2.5 * constants.c / (1.25 * units.um)
    radius2 = 3e4 * units.L_sun / (4 * np.pi * constants.sigma_sb * (9000 * units.K) ** 4)
    intensity = BlackBody(temperature=9000 * units.K)(frequency) * units.sr
    flux = 2.5 * np.pi * intensity * radius2 / Planck18.luminosity_distance(1.5) ** 2
    wanted = 10 ** (-0.4 * (24.5 - 31.4)) / flux.to_value(units.nJy)
    found = stars({"infrared": 24.5}, kind)
    assert found.density == pytest.approx(wanted, rel=1e-5)  # constants of other editions
    assert found.residuals() == {"infrared": pytest.approx(0.0, abs=1e-10)}


def test_sum_over_the_law_against_a_quadrature() -> None:
    """Mean flux of L^-2 at one temperature: flux of a Sun's luminosity times the mean luminosity, by scipy."""
    function = LuminosityFunction.power_law(2.0, (1e2, 1e6), Value.exact(9000.0), upper_limit=False)
    one = LuminosityFunction.table([1.0], [9000.0], [1.0])
    flux = star_fluxes(one, BANDS["green"], 1.5, SCALES.luminosity_distance)[0]
    light = quad(lambda x: np.exp(-x), np.log(1e2), np.log(1e6))[0]  # L^-2 dL in ln L
    mean = flux * np.log(1e4) / light
    found = stars({"green": 25.0}, function)
    assert found.density * mean == pytest.approx(10 ** (-0.4 * (25.0 - 31.4)), rel=1e-9)
    assert found.flux_moment("green", 2.0) == pytest.approx(found.density * flux**2 * (1e6 - 1e2) / light, rel=1e-9)


def test_cells_are_fine_enough() -> None:
    fine = LuminosityFunction.power_law(
        2.0, (1e2, 10**6.5), Value.loguniform(4000.0, 30_000.0), per_decade=80, temperatures=64
    )
    for band in BANDS:
        assert stars({band: 25.0}).density == pytest.approx(stars({band: 25.0}, fine).density, rel=3e-3)


@pytest.mark.parametrize("magnification", [40.0, -300.0])
def test_stars_of_a_piece_make_its_light(magnification: float) -> None:
    """Count, magnify and add up the stars of a piece of the arc: its observed flux comes back."""
    found = stars({"infrared": 24.0}, light_fraction=0.7)
    expected = found.expected(0.3, magnification)
    light = abs(magnification) * float(expected @ found.flux["infrared"])
    assert light == pytest.approx(0.7 * 0.3 * 10 ** (-0.4 * (24.0 - 31.4)), rel=1e-10)
    drawn = found.draw(0.3, magnification, np.random.default_rng(2), faintest=1e4)
    wanted = np.sum(expected * FUNCTION.share_of_cells_above(1e4))
    assert abs(len(drawn) - wanted) < 4 * np.sqrt(wanted)


def test_dust_of_both_galaxies() -> None:
    """Dust dims star and arc alike; the same light then needs more stars, by the extinction in the band."""
    plain, dusty = stars({"green": 25.0}), stars({"green": 25.0}, dust=0.5)
    # 0.24 um at rest: A / A(V) = 2.5 by the mean law of Cardelli, Clayton & Mathis 1989 (figure 1, read by eye: 10%).
    assert 2.5 * np.log10(dusty.density / plain.density) == pytest.approx(0.5 * 2.5, rel=0.1)
    assert dusty.density * dusty.flux["green"] == pytest.approx(plain.density * plain.flux["green"])
    clear = {**BANDS, "green": BandRecord(name="green", wavelength=0.6, width=0.2)}
    bare = arc_stars({"green": 25.0}, clear, 1.5, SCALES.luminosity_distance, FUNCTION)
    assert plain.density / bare.density == pytest.approx(10 ** (0.4 * 0.08))


def test_numbers_by_flux() -> None:
    """Stars above a flux, against cells counted one by one; half a decade deeper, more of them."""
    found = stars({"infrared": 24.0})
    flux = found.flux["infrared"]
    bound = np.array([1e-4, 3e-4, 1e-3])
    counted = [found.density * np.sum(FUNCTION.number[flux > x]) for x in bound]
    assert found.number_above("infrared", bound) == pytest.approx(counted, rel=0.02)  # cells of 0.05 dex cut in two
    assert found.number_above("infrared", 0.0) == pytest.approx(found.density)
    drawn = FUNCTION.draw(2e6, np.random.default_rng(8), faintest=1e4)
    one = arc_stars({"infrared": 24.0}, BANDS, 1.5, SCALES.luminosity_distance, FUNCTION)
    kinds = LuminosityFunction.table(drawn.luminosity, drawn.temperature, np.ones(len(drawn)))
    bright = star_fluxes(kinds, BANDS["infrared"], 1.5, SCALES.luminosity_distance) > 3e-3
    share = float(one.number_above("infrared", 3e-3)) / one.density
    assert abs(np.sum(bright) - 2e6 * share) < 4 * np.sqrt(2e6 * share)


def test_two_bands_test_the_colour() -> None:
    found = stars({"green": 25.0, "infrared": 25.0}, reference="infrared")
    again = stars({"green": found.predicted("green"), "infrared": 25.0}, reference="infrared")
    assert again.residuals() == {"green": pytest.approx(0.0, abs=1e-9), "infrared": pytest.approx(0.0, abs=1e-9)}
    assert found.residuals()["green"] == pytest.approx(25.0 - found.predicted("green"))


def test_errors_are_drawn() -> None:
    rng = np.random.default_rng(4)
    brightness = {"green": Value.normal(25.0, 0.1)}
    drawn = [stars(brightness, light_fraction=Value.uniform(0.5, 1.0), rng=rng).density for _ in range(300)]
    spread = np.log(drawn)
    # Variance of ln of a number uniform from 0.5 to 1: 0.0391 (by quadrature, here).
    moments = [quad(lambda x, n=n: 2 * np.log(x) ** n, 0.5, 1.0)[0] for n in (1, 2)]
    wanted = np.sqrt((0.4 * np.log(10) * 0.1) ** 2 + moments[1] - moments[0] ** 2)
    assert np.std(spread) == pytest.approx(wanted, rel=0.17)  # 300 draws: 4 sigma
    assert stars(brightness).density == stars({"green": 25.0}).density


def test_from_the_records_of_a_campaign() -> None:
    record = PopulationRecord(
        luminosity_range=(1e2, 10**6.5), temperature=Value.loguniform(4000.0, 30_000.0), light_fraction=Value.exact(0.8)
    )
    brightness = {"green": Value.exact(25.0), "infrared": Value.exact(25.3)}
    found = population_stars(record, brightness, BANDS, SCALES)
    assert found.density == pytest.approx(0.8 * stars({"green": 25.0}).density)
    assert found.reference == "green"
    # 0.24 and 0.5 um at rest: both can be told from the light.
    masses = arc_masses(record, brightness, BANDS, 1.5)
    assert (masses.star_formation_from, masses.stellar_mass_from) == ("from light", "from light")
    assert masses.star_formation > 0
    given = PopulationRecord(star_formation_density=Value.exact(0.2), stellar_mass_density=Value.exact(50.0))
    assert arc_masses(given, {}, BANDS, 1.5).to_dict() == {
        "star_formation_msun_yr_kpc2": 0.2,
        "stellar_mass_msun_pc2": 50.0,
        "star_formation_from": "given",
        "stellar_mass_from": "given",
    }
    assert arc_masses(PopulationRecord(), {}, BANDS, 1.5).star_formation_from == "unknown"
    # 1 arcsec2 is 8.682427**2 kpc2 (astropy, Planck18); 0.0101 collapses per Msun (Kroupa), over 1 + z.
    rates = population_transients(given, {}, BANDS, SCALES, 1.0)
    wanted = 0.2 * 8.682427**2 * 0.01013837671 / 2.5
    assert rates.total("core-collapse supernova") == pytest.approx(wanted, rel=1e-6)


def test_what_a_result_tells() -> None:
    found = stars({"infrared": 24.0})
    told = found.to_dict()
    assert told["reference_band"] == "infrared"
    assert told["density_per_arcsec2"] == found.density
    assert found.to_table()["flux_green"].unit == "nJy"
    assert len(found.plot().lines) == 2


def test_refused() -> None:
    with pytest.raises(InputError, match="`surface_brightness` must hold a band, got none"):
        stars({})
    with pytest.raises(InputError, match="`bands` must hold the band 'blue', got green, infrared; add it"):
        stars({"blue": 25.0})
    with pytest.raises(InputError, match="`surface_brightness` must hold the band 'infrared'"):
        stars({"green": 25.0}, reference="infrared")
    with pytest.raises(InputError, match=r"`light_fraction` must be between 0 and 1, got 1.5"):
        stars({"green": 25.0}, light_fraction=1.5)
    with pytest.raises(InputError, match=r"`dust` must be zero or positive, got -0.1"):
        stars({"green": 25.0}, dust=-0.1)
    with pytest.raises(InputError, match="`reference` must be a band in which the stars shine, got 'green'"):
        stars({"green": 25.0}, LuminosityFunction.table([1.0], [10.0], [1.0]))
    with pytest.raises(InputError, match="`band` must be one of green, infrared, got 'red'"):
        stars({"green": 25.0}).number_above("red", 1.0)
    with pytest.raises(InputError, match="`area` must be positive, got 0"):
        source_area(0.0, 10.0)
    with pytest.raises(InputError, match="`magnification` must be finite and not zero, got inf"):
        source_area(1.0, float("inf"))
