"""Colours of blackbody stars: tables against the photosphere, and temperatures recovered."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.cosmology import Planck18

from crossing.errors import InputError
from crossing.event import BandRecord, Value
from crossing.inference.colours import ColourGrid, colour_grid, tie
from crossing.inference.priors import FitPriors
from crossing.stars.extinction import dust_law, transmission
from crossing.stars.photosphere import blackbody_flux_njy

REDSHIFT = 1.2
DISTANCE = float(Planck18.luminosity_distance(REDSHIFT).value)
BANDS = (
    BandRecord(name="blue", wavelength=0.6, width=0.2),
    BandRecord(name="middle", wavelength=1.1, extinction=Value.exact(0.2)),
    BandRecord(name="red", wavelength=2.0, width=0.5),
)
PRIORS = FitPriors()


@pytest.fixture(scope="module")
def grid() -> ColourGrid:
    return colour_grid(BANDS, REDSHIFT, DISTANCE, PRIORS)


def exact_flux(temperature: float, k: int) -> float:
    band = BANDS[k]
    flux = blackbody_flux_njy(1.0, temperature, REDSHIFT, band.wavelength, band.width, luminosity_distance_mpc=DISTANCE)
    return float(flux * transmission(band.extinction.central))


def test_nodes_are_stars_behind_dust(grid: ColourGrid) -> None:
    for node in (0, 7, 100, len(grid.weight) - 1):
        for k, band in enumerate(BANDS):
            host = transmission(grid.dust[node] * dust_law(band.wavelength / (1 + REDSHIFT)))
            # The same formula evaluated elsewhere; logarithms cost a digit.
            expected = np.log(exact_flux(float(grid.temperature[node]), k) * host)
            assert grid.ln_flux[node, k] == pytest.approx(expected, rel=1e-12)


def test_nodes_represent_the_priors(grid: ColourGrid) -> None:
    assert grid.weight.sum() == pytest.approx(1.0, abs=1e-12)
    temperatures = np.unique(grid.temperature)
    np.testing.assert_allclose(np.diff(np.log(temperatures)), np.log(20.0) / (len(temperatures) - 1), rtol=1e-9)
    assert (temperatures[0], temperatures[-1]) == pytest.approx(PRIORS.temperature)
    dust = np.unique(grid.dust)
    # Medians of slices of the same probability: those of an exponential with mean 0.3.
    np.testing.assert_allclose(
        1 - np.exp(-dust / PRIORS.host_dust), (np.arange(dust.size) + 0.5) / dust.size, rtol=1e-12
    )
    assert len(grid.temperature) == temperatures.size * dust.size


def test_spectrum_between_the_nodes(grid: ColourGrid) -> None:
    temperature = np.geomspace(2600.0, 49_000.0, 77)
    found = grid.spectrum.flux(np.log(temperature))
    exact = np.array([[exact_flux(float(one), k) for k in range(3)] for one in temperature])
    # Linear in ln T over steps of 6%: at most an eighth of the step squared times the curvature, hv/kT = 20 at the blue
    # end of the coldest star.
    hot = temperature > 5000.0
    np.testing.assert_allclose(found[hot], exact[hot], rtol=0.005)
    np.testing.assert_allclose(found, exact, rtol=0.02)


def test_tied_bands_take_the_ratios_of_the_photosphere(grid: ColourGrid) -> None:
    tied = tie(grid)
    assert tied.weight.sum() == pytest.approx(1.0, abs=1e-12)
    assert tied.ratio.shape == (len(tied.weight), 3)
    np.testing.assert_allclose(tied.ratio.max(axis=1), 1.0, rtol=1e-12)
    nodes = np.exp(grid.ln_flux - grid.ln_flux.max(axis=1, keepdims=True))
    distance = np.abs(tied.ratio[:, None, :] - nodes[None, :, :]).max(axis=2).min(axis=1)
    # Every one is a node of the grid.
    assert distance.max() < 1e-12


def test_hotter_is_bluer(grid: ColourGrid) -> None:
    colour = grid.spectrum.ln_flux[:, 0] - grid.spectrum.ln_flux[:, 2]
    assert np.all(np.diff(colour) > 0)


def test_without_a_redshift_temperatures_are_the_observers() -> None:
    here = colour_grid(BANDS[:2], 0.0, 1.0, PRIORS)
    stretched = colour_grid(
        tuple(
            BandRecord(name=band.name, wavelength=2 * band.wavelength, extinction=band.extinction)
            for band in BANDS[1:2]
        ),
        1.0,
        1.0,
        PRIORS,
    )
    # (1 + z) pi B_nu((1 + z) nu): the band at twice the wavelength is twice as bright.
    np.testing.assert_allclose(stretched.spectrum.ln_flux[:, 0], here.spectrum.ln_flux[:, 1] + np.log(2.0), rtol=1e-10)


def test_fluxes_that_vanish_stay_finite() -> None:
    """100 K at the Lyman limit: hv/kT above 1400."""
    hard = (BandRecord(name="x", wavelength=0.41), BandRecord(name="red", wavelength=2.0))
    found = colour_grid(hard, 3.0, 1e4, FitPriors(temperature=(100.0, 50_000.0)))
    assert np.all(np.isfinite(found.ln_flux))
    assert np.all(np.isfinite(tie(found).ratio))


def test_a_band_beyond_the_lyman_limit_is_named() -> None:
    hard = (BandRecord(name="far blue", wavelength=0.2), BandRecord(name="red", wavelength=2.0))
    with pytest.raises(InputError, match=r"bands.far blue.wavelength over 1 \+ z: .* must be at least 0.1, got 0.0909"):
        colour_grid(hard, REDSHIFT, DISTANCE, PRIORS)
