"""Light in solar units, remnants, and the convergence of stars from surface brightness or surface density."""

from __future__ import annotations

from math import log

import numpy as np
import pytest
from astropy import units as u
from astropy.cosmology import Planck18

from crossing.errors import InputError
from crossing.event import BandRecord, MicrolensRecord, Value
from crossing.optics.scales import LensScales
from crossing.stars.intracluster import stellar_convergence
from crossing.stars.photosphere import ab_magnitude, blackbody_flux_njy
from crossing.stars.remnants import remnant_mass, remnant_share, scaled_mass_to_light
from crossing.stars.solar_light import luminosity_density, solar_ab_magnitude

SCALES = LensScales(0.4, 1.0)
BANDS = {"red": BandRecord(name="red", wavelength=1.0, extinction=Value.exact(0.1))}


def from_light(brightness: Value, ratio: Value, bands: dict[str, BandRecord] = BANDS):
    record = MicrolensRecord(surface_brightness=brightness, band="red", mass_to_light=ratio)
    return stellar_convergence(record, SCALES, bands)


@pytest.mark.parametrize(
    ("wavelength", "magnitude"),
    # Willmer 2018, ApJS 236, 47: AB magnitudes of the Sun in ugriz, B, V, J, H and Ks (from memory).
    [
        (0.355, 6.39),
        (0.477, 5.11),
        (0.623, 4.65),
        (0.763, 4.53),
        (0.905, 4.50),
        (0.440, 5.31),
        (0.550, 4.80),
        (1.235, 4.54),
        (1.662, 4.66),
        (2.159, 5.08),
    ],
)
def test_sun_against_published_magnitudes(wavelength: float, magnitude: float) -> None:
    # Filters are not top-hats 15% wide; 0.07 mag in the wiggles of H and Ks, 0.04 elsewhere.
    assert float(solar_ab_magnitude(wavelength)) == pytest.approx(magnitude, abs=0.07)


def test_sun_against_a_black_body() -> None:
    """Within 0.1 mag of 5772 K from 0.5 to 1.25 um; brighter by 0.2 mag at 1.6 um, the minimum of opacity."""
    wavelength = np.array([0.5, 0.6, 0.7, 0.8, 0.9, 1.0, 1.25])
    flux = [blackbody_flux_njy(1.0, 5772.0, 0.0, w, luminosity_distance_mpc=1e-5) for w in wavelength]
    assert np.max(np.abs(solar_ab_magnitude(wavelength) - ab_magnitude(flux))) < 0.1
    dark = float(ab_magnitude(blackbody_flux_njy(1.0, 5772.0, 0.0, 1.6, luminosity_distance_mpc=1e-5)))
    assert dark - float(solar_ab_magnitude(1.6)) == pytest.approx(0.2, abs=0.05)


def test_light_against_suns_that_are_counted() -> None:
    """A square parsec of n Suns at z = 0.4: their flux by distance, over the angle that it fills (astropy)."""
    z, n, observed = 0.4, 3.7, 1.12
    area = (1 * u.pc / Planck18.angular_diameter_distance(z)).to_value(u.arcsec, u.dimensionless_angles()) ** 2
    absolute = float(solar_ab_magnitude(observed / (1 + z))) - 2.5 * np.log10(n)
    magnitude = absolute + Planck18.distmod(z).value - 2.5 * np.log10(1 + z)
    found = luminosity_density(magnitude + 2.5 * np.log10(area) + 0.3, observed, z, 0.3)
    assert float(found) == pytest.approx(n, rel=1e-10)  # rounding only


def test_nearby_light_has_the_textbook_constant() -> None:
    # 27 mag/arcsec2 in V is 10**(-0.4 (27 - 21.572 - 4.80)) Lsun/pc2 (Binney & Merrifield 1998, eq. 1.23, from memory).
    assert float(luminosity_density(27.0, 0.55, 0.0)) == pytest.approx(10 ** (-0.4 * (27 - 21.572 - 4.80)), rel=1e-3)


def test_remnants() -> None:
    # Renzini & Ciotti 1993: a star of 5 Msun leaves 0.865, one of 20 leaves 1.4, one of 60 leaves 30.
    assert remnant_mass([0.3, 5.0, 20.0, 60.0]) == pytest.approx([0.3, 0.865, 1.4, 30.0])

    # Salpeter by hand: integrals of powers between 0.1, 0.95, 8.5, 40 and 100 Msun (derived here).
    def integral(power: float, low: float, high: float) -> float:
        return (high**power - low**power) / power

    living = integral(-0.35, 0.1, 0.95)
    dead = 0.077 * integral(-0.35, 0.95, 8.5) + 0.48 * integral(-1.35, 0.95, 8.5)
    dead += 1.4 * integral(-1.35, 8.5, 40) + 0.5 * integral(-0.35, 40, 100)
    assert remnant_share("salpeter") == pytest.approx(dead / (living + dead), rel=1e-9)
    # Steep mass functions hold little mass in massive stars.
    assert remnant_share("salpeter") < remnant_share("kroupa") < remnant_share("chabrier")


def test_other_mass_functions() -> None:
    """Madau & Dickinson 2014, ARA&A 52, 415: mass by 0.66 to Kroupa's, by 0.61 to Chabrier's (from memory).

    Theirs hold for populations that still form stars, with more mass loss; hence 10%.
    """
    assert scaled_mass_to_light(4.0, "salpeter", "kroupa") == pytest.approx(4 * 0.66, rel=0.1)
    assert scaled_mass_to_light(4.0, "salpeter", "chabrier") == pytest.approx(4 * 0.61, rel=0.1)
    there = scaled_mass_to_light(4.0, "kroupa", "chabrier")
    assert scaled_mass_to_light(there, "chabrier", "kroupa") == pytest.approx(4.0)
    with pytest.raises(InputError, match=r"`mass_function` must be .*, got 'single'"):
        remnant_share("single")
    with pytest.raises(InputError, match=r"`turn_off` must be 0.1 to 8.5 Msun, got 20; old stars have 0.95"):
        remnant_share(turn_off=20.0)


def test_densities_that_are_given() -> None:
    given = stellar_convergence(MicrolensRecord(kappa_star=Value.normal(0.01, 0.002)))
    assert (given.central, given.is_exact, given.surface_density) == (0.01, False, None)
    assert given.quantile([0.5, 0.8413447461]) == pytest.approx([0.01, 0.012])
    # Planck18: Sigma_cr(0.4, 1.0) = 2751.5518 Msun/pc2 (astropy distances, apart from here).
    dense = stellar_convergence(MicrolensRecord(surface_density=Value.uniform(20.0, 40.0)), SCALES)
    assert dense.quantile([0.0, 0.5, 1.0]) == pytest.approx(np.array([20.0, 30.0, 40.0]) / 2751.5518, rel=1e-7)
    assert dense.surface_density == pytest.approx(30.0)
    exact = stellar_convergence(MicrolensRecord(kappa_star=Value.exact(0.02)))
    rng = np.random.default_rng(1)
    assert exact.is_exact
    assert exact.sample(rng, 3).tolist() == [0.02] * 3
    assert rng.random() == np.random.default_rng(1).random()


def test_from_brightness_by_hand() -> None:
    """26.5 mag/arcsec2 at 1 um (0.714 um at z = 0.4, where the Sun has 4.553), A = 0.1, M/L = 2 (derived here)."""
    found = from_light(Value.exact(26.5), Value.exact(2.0))
    sun = 4.56 + (4.51 - 4.56) * log(1 / 1.4 / 0.7) / log(0.8 / 0.7)
    light = 10 ** (-0.4 * (26.4 - sun - 21.5721256)) * 1.4**3
    assert found.light == pytest.approx(light, rel=1e-6)
    assert found.central == pytest.approx(2 * light / 2751.5518, rel=1e-6)
    assert found.is_exact
    assert found.quantile(0.9) == pytest.approx(found.central)


def test_errors_are_carried() -> None:
    """Normal in magnitudes and log-uniform ratio: the spread in ln kappa_star is the root of the summed squares."""
    bands = {"red": BandRecord(name="red", wavelength=1.0, extinction=Value.normal(0.1, 0.05))}
    found = from_light(Value.normal(26.5, 0.2), Value.loguniform(1.0, 4.0), bands)
    drawn = np.log(found.sample(np.random.default_rng(5), 200_000) / found.central)
    spread = np.sqrt((0.4 * log(10)) ** 2 * (0.2**2 + 0.05**2) + log(4.0) ** 2 / 12)
    assert np.std(drawn) == pytest.approx(spread, rel=0.006)  # 200,000 draws: 0.2%; the table's ends: 0.3%
    assert np.mean(drawn) == pytest.approx(0.0, abs=4 * spread / np.sqrt(200_000))
    one = from_light(Value.normal(26.5, 0.2), Value.exact(2.0))
    assert one.quantile(0.8413447461) / one.central == pytest.approx(10 ** (0.4 * 0.2), rel=1e-3)
    assert np.all(np.diff(found.quantile(np.linspace(0, 1, 99))) > 0)


def test_what_a_result_tells() -> None:
    found = from_light(Value.normal(26.5, 0.2), Value.exact(2.0))
    told = found.to_dict()
    assert told["way"] == "surface_brightness"
    assert told["kappa_star"]["low"] < told["kappa_star"]["median"] < told["kappa_star"]["high"]
    assert len(found.to_table()) == 5
    assert found.plot().get_ylabel() == "cumulative probability"


def test_typical_cluster_light() -> None:
    """Stars of 27 mag/arcsec2 weigh a few Msun/pc2: kappa_star of a few thousandths, as such arcs have."""
    assert 5e-4 < from_light(Value.exact(27.0), Value.exact(2.0)).central < 5e-3


@pytest.mark.parametrize(
    ("record", "scales", "bands", "says"),
    [
        ({"surface_density": Value.exact(3.0)}, None, None, "`surface_density` needs the redshifts"),
        ({"surface_brightness": Value.exact(26.0)}, None, None, "`surface_brightness` needs the redshifts"),
        ({}, SCALES, None, "must hold kappa_star, surface_density, or surface_brightness"),
        (
            {"surface_brightness": Value.exact(26.0), "band": "blue", "mass_to_light": Value.exact(2.0)},
            SCALES,
            BANDS,
            "`band` must be one of the bands of the file, got 'blue'; describe it",
        ),
        (
            {"surface_brightness": Value.exact(26.0), "band": "uv", "mass_to_light": Value.exact(2.0)},
            SCALES,
            {"uv": BandRecord(name="uv", wavelength=0.3)},
            "`rest_wavelength_um` must be 0.3 to 3.5, got 0.214",
        ),
    ],
)
def test_refused(record, scales, bands, says) -> None:
    with pytest.raises(InputError, match=says):
        stellar_convergence(MicrolensRecord(**record), scales, bands)


def test_negative_redshift() -> None:
    with pytest.raises(InputError, match=r"`redshift` must be zero or positive, got -0.5"):
        luminosity_density(26.0, 1.0, -0.5)
