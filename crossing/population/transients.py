"""What else flares: supernovae, outbursts and novae in the arc, in the lens's light and along the line of sight."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from math import inf
from typing import TYPE_CHECKING, Any, Final, Literal, TypeAlias

import numpy as np

from crossing.errors import InputError
from crossing.optics.constants import ARCSEC
from crossing.optics.scales import cosmology_from
from crossing.population.star_formation import collapses_per_mass, delayed_rate

if TYPE_CHECKING:
    from astropy.cosmology import FLRW
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.event import CosmologyRecord

__all__ = ["TransientRate", "TransientRates", "arc_transients", "field_transients", "lens_transients"]

Place: TypeAlias = Literal["arc", "lens", "field"]
Cosmology: TypeAlias = "CosmologyRecord | FLRW | str | None"

# Share of the mass of new stars that is given back for good: Madau & Dickinson 2014, ARA&A 52, 415, for the mass
# function of Chabrier (from memory).
_RETURNED: Final = 0.41
# First stars: the age of the universe at a redshift of 10.
_FIRST_REDSHIFT: Final = 10.0
# Core collapses. Measured at z < 0.08, 0.72e-4 / (yr Mpc3) (Strolger et al. 2015, ApJ 813, 93), over that predicted
# from star formation (0.0068 per Msun of Salpeter's, times 0.0150 Msun / (yr Mpc3)): 0.71. All stars above 8 Msun
# instead of those below 40: 1.09.
_COLLAPSE_RANGE: Final = (0.71, 1.09)
# Thermonuclear ones per 1000 Msun: 1 to 3 (Maoz & Mannucci 2012, PASA 29, 447), where 1.30 is the central value.
_THERMONUCLEAR_RANGE: Final = (1 / 1.30, 3 / 1.30)
# Eruptions of luminous stars and like events, over core collapses: 0.2 (Thompson et al. 2009, ApJ 705, 1364, from
# memory); between a few per cent and as many as supernovae.
_OUTBURSTS_PER_COLLAPSE: Final = 0.2
_OUTBURST_RANGE: Final = (0.25, 5.0)
# Novae: 65 +16 -15 a year in M31 (Darnley et al. 2006, MNRAS 369, 257) over its 1.1e11 Msun of stars (Tamm et al. 2012,
# A&A 546, A4); both from memory. Galaxies differ by a factor of three.
_NOVAE_PER_MASS: Final = 65 / 1.1e11
_NOVA_RANGE: Final = (1 / 3, 3.0)
# Thermonuclear supernovae per stellar mass in clusters at z = 0.5 to 0.9: 0.15 +0.14 -0.12 per 1e10 Msun and century
# (Sharon et al. 2010, ApJ 718, 876, from memory); 0.07 in nearby early-type galaxies (Mannucci et al. 2008, MNRAS 383,
# 1121), 0.50 in clusters at z > 0.9 (Barbary et al. 2012, ApJ 745, 32), all from memory.
_CLUSTER_PER_MASS: Final = 0.15e-12
_CLUSTER_RANGE: Final = (0.07 / 0.15, 0.50 / 0.15)
# Volumetric rates [1 / (yr Mpc3)]: core collapse as above, with the shape of the star formation history; thermonuclear
# 2.27e-5 (1 + z)**1.70 (Frohmaier et al. 2019, MNRAS 486, 2308, from memory; also 2.43 +- 0.29e-5
# at z = 0.073).
_COLLAPSE_VOLUMETRIC: Final = 0.72e-4
_COLLAPSE_REDSHIFT: Final = 0.05
_THERMONUCLEAR_VOLUMETRIC: Final = 2.27e-5
_THERMONUCLEAR_GROWTH: Final = 1.70

# Absolute magnitudes at maximum in B: Richardson et al. 2014, AJ 147, 118 (type Ia and II-P). Outbursts: Smith et al.
# 2011, MNRAS 415, 773, from -10 to -15; novae: in V, from -5 to -10; both from memory.
_PEAK: Final = {"supernova Ia": -19.25, "core-collapse supernova": -16.75, "outburst": -13.0, "nova": -7.5}


@dataclass(frozen=True, slots=True, kw_only=True)
class TransientRate:
    """How often one kind of transient happens."""

    name: str
    """Kind: ``core-collapse supernova``, ``supernova Ia``, ``outburst`` or ``nova``."""
    place: Place
    """``arc`` (lensed; every macro image shows it), ``lens`` (intracluster light), or ``field``."""
    rate_per_year: float
    """Events per year of the observer."""
    low: float
    """Low end of the published range, for exact masses and star formation [1 / yr]."""
    high: float
    """High end [1 / yr]."""
    peak_magnitude: float
    """Typical absolute magnitude at maximum; whether it is seen is for the reader to say."""
    source: str
    """Where the number comes from."""

    def to_dict(self) -> dict[str, Any]:
        """All fields by name."""
        return asdict(self)


@dataclass(frozen=True, slots=True, kw_only=True)
class TransientRates:
    """Rates of several kinds."""

    rates: tuple[TransientRate, ...]
    """One entry a kind and place."""

    def __add__(self, other: TransientRates) -> TransientRates:
        return TransientRates(rates=self.rates + other.rates)

    def total(self, *names: str, place: Place | None = None) -> float:
        """Events per year of the kinds `names` (all if none is named), at one place or at all."""
        return sum(
            rate.rate_per_year
            for rate in self.rates
            if (not names or rate.name in names) and place in (None, rate.place)
        )

    def to_dict(self) -> list[dict[str, Any]]:
        """One entry a rate."""
        return [rate.to_dict() for rate in self.rates]

    def to_table(self) -> QTable:
        """One row a rate."""
        from astropy.table import QTable

        return QTable(rows=self.to_dict())

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw every rate with its range, on a logarithmic axis."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(6.0, 0.5 + 0.4 * len(self.rates)), layout="constrained").add_subplot()
        markers, colours = (
            {"arc": "o", "lens": "s", "field": "^"},
            {"arc": "#0072B2", "lens": "#D55E00", "field": "0.4"},
        )
        for row, rate in enumerate(self.rates):
            if rate.rate_per_year > 0:
                ax.plot([rate.low, rate.high], [row, row], color=colours[rate.place], lw=1.5)
                ax.plot(rate.rate_per_year, row, marker=markers[rate.place], color=colours[rate.place])
        ax.set_yticks(range(len(self.rates)), [f"{rate.name} ({rate.place})" for rate in self.rates])
        ax.set(xscale="log", xlabel="events per year of the observer")
        ax.invert_yaxis()
        return ax


def arc_transients(
    star_formation: float,
    stellar_mass: float,
    redshift: float,
    *,
    mass_function: str = "kroupa",
    cosmology: Cosmology = None,
) -> TransientRates:
    """Supernovae, outbursts and novae in the part of a galaxy that an arc shows.

    Parameters
    ----------
    star_formation : float
        Star formation of that part, without magnification [Msun / yr].
    stellar_mass : float
        Its mass of living stars and remnants, without magnification [Msun].
    redshift : float
        Redshift of the arc: rates per year of the observer are smaller by 1 + z.
    mass_function : str, optional
        Mass function that both masses assume: ``salpeter``, ``kroupa`` or ``chabrier``.
    cosmology : CosmologyRecord, astropy.cosmology.FLRW, str or None
        Planck18 by default; the age of the universe bounds the delays.

    Returns
    -------
    TransientRates
        Each event counts once, however many images show it.

    Raises
    ------
    InputError
        If a number is negative, or the galaxy is at a redshift above 8.
    """
    _check("star_formation", star_formation, 0.0, inf)
    _check("stellar_mass", stellar_mass, 0.0, inf)
    _check("redshift", redshift, 0.0, 8.0)
    stretch = 1.0 + redshift
    model = cosmology_from(cosmology)
    age = float((model.age(redshift) - model.age(_FIRST_REDSHIFT)).to_value("Gyr"))
    collapses = star_formation * collapses_per_mass(mass_function) / stretch
    thermonuclear = delayed_rate(star_formation, stellar_mass / (1.0 - _RETURNED), min(age, 13.0)) / stretch
    return TransientRates(
        rates=(
            _rate(
                "core-collapse supernova",
                "arc",
                collapses,
                _COLLAPSE_RANGE,
                f"stars of 8 to 40 Msun of the {mass_function} mass function (Madau & Dickinson 2014); range: "
                "Strolger et al. 2015, and stars above 40 Msun",
            ),
            _rate(
                "supernova Ia",
                "arc",
                thermonuclear,
                _THERMONUCLEAR_RANGE,
                "delays as t^-1.12, 1.3 per 1000 Msun (Maoz, Mannucci & Brandt 2012); range: Maoz & Mannucci 2012",
            ),
            _rate(
                "outburst",
                "arc",
                collapses * _OUTBURSTS_PER_COLLAPSE,
                _OUTBURST_RANGE,
                "a fifth of the core collapses (Thompson et al. 2009, from memory); range: a choice",
            ),
            _novae("arc", stellar_mass / stretch),
        )
    )


def lens_transients(stellar_mass: float, redshift: float) -> TransientRates:
    """Supernovae and novae in the intracluster light in front of an arc; they are not lensed.

    Parameters
    ----------
    stellar_mass : float
        Mass of old stars in front of the arc [Msun]: kappa_star sigma_crit times area.
    redshift : float
        Redshift of the lens.

    Raises
    ------
    InputError
        If a number is negative, or the redshift is above 8.
    """
    _check("stellar_mass", stellar_mass, 0.0, inf)
    _check("redshift", redshift, 0.0, 8.0)
    mass = stellar_mass / (1.0 + redshift)
    source = "0.15 per 1e10 Msun and century in clusters (Sharon et al. 2010, from memory); range: other redshifts"
    return TransientRates(
        rates=(
            _rate("supernova Ia", "lens", mass * _CLUSTER_PER_MASS, _CLUSTER_RANGE, source),
            _novae("lens", mass),
        )
    )


def field_transients(
    area_arcsec2: float, redshifts: tuple[float, float], *, cosmology: Cosmology = None
) -> TransientRates:
    """Supernovae of unrelated galaxies along the line of sight, as in an average piece of the sky.

    Parameters
    ----------
    area_arcsec2 : float
        Area on the sky that is watched [arcsec2].
    redshifts : (float, float)
        Nearest and farthest redshift; one in front of the lens leaves all unlensed.
    cosmology : CosmologyRecord, astropy.cosmology.FLRW, str or None
        Planck18 by default.

    Returns
    -------
    TransientRates
        All that happen, whether bright enough to be seen or not.

    Raises
    ------
    InputError
        If the area is not positive, or the redshifts are not in order from 0 to 8.

    Notes
    -----
    Core collapses follow the star formation history psi(z) of [1]_ from the measured rate at z = 0.05; above z = 1.5
    that exceeds measured rates by up to 1.5.

    References
    ----------
    .. [1] Madau P. & Dickinson M., 2014, ARA&A 52, 415
    .. [2] Strolger L.-G. et al., 2015, ApJ 813, 93
    .. [3] Frohmaier C. et al., 2019, MNRAS 486, 2308
    """
    near, far = redshifts
    if not 0 < area_arcsec2 < inf:
        raise InputError(f"`area_arcsec2` must be positive, got {area_arcsec2:g}; give length times width")
    if not 0 <= near < far <= 8:
        raise InputError(f"`redshifts` must be in order from 0 to 8, got {near:g} and {far:g}; swap them")
    node, weight = np.polynomial.legendre.leggauss(64)
    z = 0.5 * (far + near) + 0.5 * (far - near) * node
    volume = cosmology_from(cosmology).differential_comoving_volume(z).to_value("Mpc3 / sr") * area_arcsec2 * ARCSEC**2
    per_rate = 0.5 * (far - near) * weight * volume / (1 + z)
    collapse = _COLLAPSE_VOLUMETRIC / _formation_history(_COLLAPSE_REDSHIFT) * _formation_history(z)
    thermonuclear = _THERMONUCLEAR_VOLUMETRIC * (1 + z) ** _THERMONUCLEAR_GROWTH
    return TransientRates(
        rates=(
            _rate(
                "core-collapse supernova",
                "field",
                float(per_rate @ collapse),
                (0.6, 1.4),
                "0.72e-4 / (yr Mpc3) nearby (Strolger et al. 2015), growing as star formation (Madau & Dickinson 2014)",
            ),
            _rate(
                "supernova Ia",
                "field",
                float(per_rate @ thermonuclear),
                (0.7, 1.3),
                "2.27e-5 (1+z)^1.70 / (yr Mpc3) (Frohmaier et al. 2019, from memory)",
            ),
        )
    )


def _formation_history(z: Any) -> Any:
    """Cosmic star formation [Msun / (yr Mpc3)], equation 15 of Madau & Dickinson 2014 (from memory)."""
    return 0.015 * (1 + z) ** 2.7 / (1 + ((1 + z) / 2.9) ** 5.6)


def _novae(place: Place, mass: float) -> TransientRate:
    source = "65 a year in M31 (Darnley et al. 2006) by 1.1e11 Msun (Tamm et al. 2012), from memory; range: galaxies"
    return _rate("nova", place, mass * _NOVAE_PER_MASS, _NOVA_RANGE, source)


def _rate(name: str, place: Place, rate: float, around: tuple[float, float], source: str) -> TransientRate:
    low, high = around
    return TransientRate(
        name=name,
        place=place,
        rate_per_year=rate,
        low=low * rate,
        high=high * rate,
        peak_magnitude=_PEAK[name],
        source=source,
    )


def _check(name: str, value: float, low: float, high: float) -> None:
    if not low <= value <= high or value == inf:
        bounds = "zero or positive" if high == inf else f"{low:g} to {high:g}"
        raise InputError(f"`{name}` must be {bounds}, got {value:g}; check its sign and unit")
