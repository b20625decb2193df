"""Stars and transients of an arc out of the records of a campaign file."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final, Literal

import numpy as np

from crossing.event import Value
from crossing.population.arc_stars import ArcStars, arc_stars
from crossing.population.luminosity import luminosity_function
from crossing.population.star_formation import ULTRAVIOLET_UM, star_formation_density
from crossing.population.transients import TransientRates, arc_transients
from crossing.stars.solar_light import SOLAR_RANGE_UM, luminosity_density

if TYPE_CHECKING:
    from crossing.event import BandRecord
    from crossing.event.campaign_records import PopulationRecord
    from crossing.optics.scales import LensScales

__all__ = ["DEFAULT_MASS_TO_LIGHT", "ArcMasses", "arc_masses", "population_stars", "population_transients"]

DEFAULT_MASS_TO_LIGHT: Final = 0.5
"""Mass over light of a star-forming galaxy in the visible at rest [Msun / Lsun]; 0.1 to 2 occur (from memory)."""
_VISIBLE_UM: Final = (0.35, SOLAR_RANGE_UM[1])
Origin = Literal["given", "from light", "unknown"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ArcMasses:
    """Star formation and stellar mass per area of the source plane."""

    star_formation: float
    """Star formation [Msun / (yr kpc2)]; 0 where unknown."""
    stellar_mass: float
    """Mass of living stars and remnants [Msun / pc2]; 0 where unknown."""
    star_formation_from: Origin
    """``given`` in the file, ``from light`` that is ultraviolet at rest, or ``unknown``."""
    stellar_mass_from: Origin
    """``given``, ``from light`` in the reddest band with a ratio of 0.5, or ``unknown``."""

    def to_dict(self) -> dict[str, Any]:
        """All fields by name."""
        return {
            "star_formation_msun_yr_kpc2": self.star_formation,
            "stellar_mass_msun_pc2": self.stellar_mass,
            "star_formation_from": self.star_formation_from,
            "stellar_mass_from": self.stellar_mass_from,
        }


def population_stars(
    record: PopulationRecord,
    surface_brightness: Mapping[str, Value],
    bands: Mapping[str, BandRecord],
    scales: LensScales,
    rng: np.random.Generator | None = None,
) -> ArcStars:
    """Stars behind the surface brightness of a segment.

    Parameters
    ----------
    record : PopulationRecord
        Stars of the arc.
    surface_brightness : mapping of str to Value
        Observed surface brightness of the segment by band [AB mag / arcsec2].
    bands : mapping of str to BandRecord
        Bands of the campaign.
    scales : LensScales
        Distances.
    rng : numpy.random.Generator, optional
        Draw slope, brightness, dust, extinction and fraction of the light from it; central values if None.

    Raises
    ------
    InputError
        As `arc_stars` and `luminosity_function`.
    """
    return arc_stars(
        surface_brightness,
        bands,
        scales.z_source,
        scales.luminosity_distance,
        luminosity_function(record, rng),
        light_fraction=record.light_fraction,
        dust=0.0 if record.dust is None else record.dust,
        reference=record.reference_band,
        rng=rng,
    )


def population_transients(
    record: PopulationRecord,
    surface_brightness: Mapping[str, Value],
    bands: Mapping[str, BandRecord],
    scales: LensScales,
    source_area_arcsec2: float,
) -> TransientRates:
    """Supernovae, outbursts and novae in a part of the source plane, by central values; see `arc_transients`.

    Parameters
    ----------
    record, surface_brightness, bands, scales
        As in `population_stars`.
    source_area_arcsec2 : float
        Area of the source plane [arcsec2].
    """
    masses = arc_masses(record, surface_brightness, bands, scales.z_source)
    area = source_area_arcsec2 * scales.kpc_per_arcsec_source**2
    return arc_transients(
        masses.star_formation * area, masses.stellar_mass * area * 1e6, scales.z_source, cosmology=scales.cosmology
    )


def arc_masses(
    record: PopulationRecord,
    surface_brightness: Mapping[str, Value],
    bands: Mapping[str, BandRecord],
    redshift: float,
) -> ArcMasses:
    """Star formation and stellar mass per area: as given, or from the light, by central values.

    Parameters
    ----------
    record : PopulationRecord
        Stars of the arc.
    surface_brightness : mapping of str to Value
        Observed surface brightness by band [AB mag / arcsec2].
    bands : mapping of str to BandRecord
        Bands of the campaign.
    redshift : float
        Redshift of the arc.
    """
    formation, mass = record.star_formation_density, record.stellar_mass_density
    light = {name: value.central for name, value in surface_brightness.items()}
    dust = 0.0 if record.dust is None else record.dust.central
    blue, red = (
        _bands_within(light, bands, redshift, ULTRAVIOLET_UM),
        _bands_within(light, bands, redshift, _VISIBLE_UM),
    )
    told_formation = formation.central if formation is not None else 0.0
    told_mass = mass.central if mass is not None else 0.0
    if formation is None and blue:
        band = blue[-1]
        told_formation = float(
            star_formation_density(
                light[band.name], band.wavelength, redshift, extinction_mag=band.extinction.central, dust=dust
            )
        )
    if mass is None and red:
        band = red[-1]
        told_mass = DEFAULT_MASS_TO_LIGHT * float(
            luminosity_density(light[band.name], band.wavelength, redshift, band.extinction.central)
        )
    return ArcMasses(
        star_formation=told_formation,
        stellar_mass=told_mass,
        star_formation_from=_origin(formation, blue),
        stellar_mass_from=_origin(mass, red),
    )


def _bands_within(
    light: Mapping[str, float], bands: Mapping[str, BandRecord], redshift: float, limits: tuple[float, float]
) -> list[BandRecord]:
    """Bands with light whose wavelength at rest lies within limits, the reddest last."""
    low, high = limits
    chosen = [bands[name] for name in light if low <= bands[name].wavelength / (1 + redshift) <= high]
    return sorted(chosen, key=lambda band: band.wavelength)


def _origin(given: Value | None, chosen: list[BandRecord]) -> Origin:
    if given is not None:
        return "given"
    return "from light" if chosen else "unknown"
