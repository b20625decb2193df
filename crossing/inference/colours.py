"""Colours of blackbody stars in the bands of an event: what temperature the amplitudes ask for."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from crossing.errors import InputError
from crossing.inference.linear import Colours
from crossing.stars.extinction import dust_law, transmission
from crossing.stars.photosphere import blackbody_flux_njy

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from crossing.event import BandRecord
    from crossing.inference.priors import FitPriors

__all__ = ["ColourGrid", "Spectrum", "colour_grid", "tie"]

_TEMPERATURES = 48
_DUSTS = 6


@dataclass(frozen=True, slots=True, kw_only=True)
class Spectrum:
    """Unlensed fluxes of a star of one solar radius through the bands, against temperature; no host dust."""

    ln_temperature: NDArray[np.float64]
    """(n,) ln of the temperature [K]."""
    ln_flux: NDArray[np.float64]
    """(n, n_bands) ln of the flux density [nJy], Galactic extinction applied."""

    def flux(self, ln_temperature: NDArray[np.float64]) -> NDArray[np.float64]:
        """Flux densities (m, n_bands) [nJy] at (m,) values of ln temperature."""
        columns = [np.interp(ln_temperature, self.ln_temperature, column) for column in self.ln_flux.T]
        return np.exp(np.stack(columns, axis=-1))


@dataclass(frozen=True, slots=True, kw_only=True)
class ColourGrid:
    """Nodes of temperature and host dust with their prior weights and unlensed fluxes."""

    temperature: NDArray[np.float64]
    """(n,) blackbody-equivalent temperature [K]."""
    dust: NDArray[np.float64]
    """(n,) A(V) in the star's galaxy [mag]."""
    weight: NDArray[np.float64]
    """(n,) prior weights, summing to 1."""
    ln_flux: NDArray[np.float64]
    """(n, n_bands) ln of the flux density of a star of one solar radius, unlensed, behind all dust [nJy]."""
    spectrum: Spectrum
    """The same without host dust, against temperature alone."""


def colour_grid(
    bands: Sequence[BandRecord],
    redshift: float,
    luminosity_distance_mpc: float,
    priors: FitPriors,
) -> ColourGrid:
    """Tabulate blackbody fluxes over the priors of temperature and host dust.

    Parameters
    ----------
    bands : sequence of BandRecord
        Bands in the order of the fit.
    redshift : float
        Redshift of the star; zero gives temperatures in the observer's frame.
    luminosity_distance_mpc : float
        Luminosity distance [Mpc].
    priors : FitPriors
        Range of temperatures and mean host dust.

    Raises
    ------
    InputError
        If a band lies beyond the Lyman limit of the star's galaxy.

    Notes
    -----
    Temperatures are equally spaced in their logarithm; the exponential prior of the dust is represented by the medians
    of slices of equal probability.
    """
    ln_temperature = np.linspace(np.log(priors.temperature[0]), np.log(priors.temperature[1]), _TEMPERATURES)
    temperature = np.exp(ln_temperature)
    dust = -priors.host_dust * np.log1p(-(np.arange(_DUSTS) + 0.5) / _DUSTS)
    plain = np.empty((_TEMPERATURES, len(bands)))
    curve = np.empty(len(bands))
    for k, band in enumerate(bands):
        flux = blackbody_flux_njy(
            1.0, temperature, redshift, band.wavelength, band.width, luminosity_distance_mpc=luminosity_distance_mpc
        )
        plain[:, k] = np.log(np.maximum(flux * transmission(band.extinction.central), 1e-300))
        try:
            curve[k] = float(dust_law(band.wavelength / (1.0 + redshift)))
        except InputError as error:
            raise error.located(where=f"bands.{band.name}.wavelength over 1 + z") from None
    reddened = plain[:, None, :] + np.log(transmission(dust[:, None] * curve))[None, :, :]
    count = _TEMPERATURES * _DUSTS
    return ColourGrid(
        temperature=np.repeat(temperature, _DUSTS),
        dust=np.tile(dust, _TEMPERATURES),
        weight=np.full(count, 1.0 / count),
        ln_flux=reddened.reshape(count, len(bands)),
        spectrum=Spectrum(ln_temperature=ln_temperature, ln_flux=plain),
    )


def tie(grid: ColourGrid) -> Colours:
    """Amplitude ratios of a fit whose bands share one blackbody: every second temperature, two amounts of dust."""
    chosen = np.concatenate([np.arange(k * _DUSTS + 1, (k + 1) * _DUSTS, 3) for k in range(0, _TEMPERATURES, 2)])
    ratio = np.exp(grid.ln_flux[chosen] - grid.ln_flux[chosen].max(axis=1, keepdims=True))
    return Colours(ratio=ratio, weight=np.full(len(chosen), 1.0 / len(chosen)))
