"""Plain records of what an event file says: units are stripped, nothing is computed."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Final, Literal

from crossing.event.values import Value

__all__ = [
    "DEFAULT_MASS_RANGE",
    "DEFAULT_SIGMA",
    "BandRecord",
    "CosmologyRecord",
    "CounterpartRecord",
    "Event",
    "HaloRecord",
    "MacroRecord",
    "MapRecord",
    "MassRelation",
    "MembersRecord",
    "MicrolensRecord",
    "MotionRecord",
    "PairRecord",
    "PhotometryRecord",
    "Position",
    "StarRecord",
    "Way",
]

DEFAULT_SIGMA: Final = 5.0
"""Significance of depths and limits whose significance is not given (common practice)."""
DEFAULT_MASS_RANGE: Final = (0.08, 1.5)
"""Masses [Msun] of the stars that still shine in an old population (common practice)."""
Position = tuple[float, float]
"""Right ascension and declination [deg]."""
MassRelation = Literal["evrard 2008", "munari 2013", "carlberg 1997", "isothermal"]
"""Named relations between the mass of a cluster and the velocity dispersion of its members."""
Way = Literal[
    "kappa+gamma",
    "mu_t+mu_r",
    "critical_distance",
    "caustic_distance",
    "maps",
    "velocity_dispersion",
    "mirror_pairs",
]
"""Ways of giving the macro lens."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CosmologyRecord:
    """A flat cosmology: a name that astropy knows, or its two numbers."""

    name: str | None = "Planck18"
    """Name of one of astropy's realizations, or None if the numbers are given."""
    H0: float | None = None
    """Hubble constant [km / (s Mpc)]."""
    Om0: float | None = None
    """Matter density today, in critical densities."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MapRecord:
    """Maps of one lens model; none of the files is opened yet."""

    planes: dict[str, str]
    """Names of files, with an optional plane of the file in brackets, by key: ``convergence``, ``shear1``, ``shear2``,
    ``shear`` (its size), ``deflection1``, ``deflection2``."""
    name: str | None = None
    """Name of the lens model."""
    deflection_unit: str | None = None
    """Unit of the deflections: an angle or ``pixel``; None: what the files say."""
    source_redshift: float | None = None
    """Redshift of the sources that the maps hold for; None where `normalised`."""
    normalised: bool = False
    """Whether they hold for D_ls/D_s = 1."""
    axes: Literal["pixel", "sky"] = "pixel"
    """Axes of the components of shear and deflection: those of the pixels, or east and north."""
    realisations: str | None = None
    """Names of further realisations of the model, with wildcards."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PairRecord:
    """Two images of one knot, mirrored across the critical curve."""

    first: Position
    """Position of one image [deg]."""
    second: Position
    """Position of the other image [deg]."""
    name: str | None = None
    """Name of the knot."""
    position_error: float | None = None
    """Standard deviation of each coordinate of both positions [arcsec]."""
    flux1: Value | None = None
    """Flux of the first image [nJy]."""
    flux2: Value | None = None
    """Flux of the second image [nJy]."""
    magnification: Value | None = None
    """Unsigned magnification of either image, the geometric mean of both."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MembersRecord:
    """A table of line-of-sight velocities of a cluster's members; not yet opened."""

    path: Path
    """The table."""
    columns: dict[str, str] = field(default_factory=dict)
    """Names of its columns, for those that differ from ``velocity``, ``velocity_err`` and ``redshift``."""


@dataclass(frozen=True, slots=True, kw_only=True)
class HaloRecord:
    """Mass of a cluster from the motion of its members; its dispersion or their table is given."""

    dispersion: Value | None = None
    """Velocity dispersion along the line of sight [km/s]."""
    members: MembersRecord | None = None
    """Members whose dispersion is to be taken."""
    profile: Literal["isothermal", "nfw"] = "isothermal"
    """Shape of the mass."""
    axis_ratio: Value | None = None
    """Minor over major axis of the isothermal ellipsoid; None: round."""
    core: Value | None = None
    """Core radius of the isothermal ellipsoid [arcsec]."""
    angle: Value | None = None
    """Position angle of its major axis, from north to east [deg]."""
    shear: Value | None = None
    """Size of an external shear, for the event's source."""
    shear_angle: Value | None = None
    """Position angle of the direction in which that shear stretches images, from north to east [deg]."""
    concentration: Value | None = None
    """r200c / r_s of the NFW sphere."""
    mass_relation: MassRelation | None = None
    """Relation that gives the mass of the NFW sphere; None: its default."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MacroRecord:
    """One way of giving the macro lens at the event; what the way does not use is None."""

    way: Way
    """Which of the fields are given."""
    name: str | None = None
    """Name of the lens model, where there are several."""
    weight: float = 1.0
    """Relative weight among several models, not normalised; greater than 0."""
    kappa: Value | None = None
    """Total convergence."""
    gamma: Value | None = None
    """Shear, of either sign."""
    mu_t: Value | None = None
    """Signed magnification along the stretch direction, 1 / lam_t."""
    mu_r: Value | None = None
    """Signed magnification across it, 1 / lam_r."""
    critical_distance: Value | None = None
    """Distance to the critical curve along the stretch direction [arcsec], > 0 on the minimum side."""
    gradient: tuple[Value, Value] | None = None
    """Change of lam_t per unit x and y [1 / arcsec]; a scalar in the file is its x component."""
    fold_strength: Value | None = None
    """Strength K of the macro fold [arcsec^(1/2)]."""
    caustic_distance: Value | None = None
    """Distance of the source to the macro caustic, inside it [arcsec]."""
    side: Literal["minimum", "saddle", "pair"] | None = None
    """Which image of the merging pair is meant, with `caustic_distance` or `mirror_pairs`."""
    position: Position | None = None
    """Position of the event [deg]."""
    position_error: float | None = None
    """Standard deviation of each coordinate of the position [arcsec]."""
    centre: Position | None = None
    """Centre of the cluster [deg]."""
    maps: tuple[MapRecord, ...] = ()
    """The maps: one lens model, since several become as many alternatives."""
    halo: HaloRecord | None = None
    """The cluster's mass, with `velocity_dispersion`."""
    mirror_pairs: tuple[PairRecord, ...] = ()
    """Mirrored knots, two or more."""
    place: str | None = field(default=None, compare=False)
    """Key of the file that holds it, for messages."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MicrolensRecord:
    """One population of point masses; exactly one of the three densities is given."""

    name: str | None = None
    """What the file calls the population."""
    kappa_star: Value | None = None
    """Convergence in these point masses."""
    surface_density: Value | None = None
    """Their surface mass density [Msun / pc2]."""
    surface_brightness: Value | None = None
    """Observed surface brightness of their light [AB mag / arcsec2]."""
    band: str | None = None
    """Band of the surface brightness, one of the event's bands."""
    mass_to_light: Value | None = None
    """Mass-to-light ratio in that band [Msun / Lsun]."""
    mass_function: str = "kroupa"
    """``single``, ``power law``, ``salpeter``, ``kroupa``, ``chabrier`` or ``log-normal``."""
    mass_range: tuple[float, float] | None = DEFAULT_MASS_RANGE
    """Lowest and highest mass [Msun]; None for ``single``."""
    mean_mass: Value | None = None
    """The one mass of ``single`` [Msun], else None."""
    slope: float | None = None
    """Slope s of a ``power law``, dN/dm = m^-s (Salpeter: 2.35), else None."""
    median_mass: float | None = None
    """Median of a ``log-normal`` [Msun] in number, before the range cuts it, else None."""
    width_dex: float | None = None
    """Standard deviation of log10(mass) of a ``log-normal`` [dex], else None."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MotionRecord:
    """Motion of the source across the caustics: its speed, or the two spreads and the position."""

    speed: Value | None = None
    """Effective speed in the source plane per observer time [km/s]."""
    lens_spread: Value | None = None
    """One-dimensional dispersion of the lens's peculiar velocity [km/s]."""
    source_spread: Value | None = None
    """One-dimensional dispersion of the source's peculiar velocity [km/s]."""
    position: Position | None = None
    """Position on the sky [deg] from which the observer's part follows."""
    angle: Value | None = None
    """Direction of the effective velocity, counted from the x axis [deg]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class StarRecord:
    """Priors of the star; what is not given is None."""

    radius: Value | None = None
    """Radius [Rsun]."""
    temperature: Value | None = None
    """Effective temperature [K]."""
    luminosity: Value | None = None
    """Bolometric luminosity [Lsun]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class BandRecord:
    """A photometric band."""

    name: str
    """Name, as in the light curves."""
    wavelength: float
    """Effective wavelength [um]."""
    width: float | None = None
    """Full width [um], less than twice the wavelength."""
    depth: float | None = None
    """Faintest flux density that a visit detects [nJy], at `depth_sigma`."""
    depth_sigma: float = DEFAULT_SIGMA
    """Significance of `depth`."""
    limb_darkening: Value | None = None
    """Linear coefficient of limb darkening, 0 to 1."""
    extinction: Value = field(default_factory=lambda: Value.exact(0.0))
    """Galactic extinction [mag]."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PhotometryRecord:
    """One table of observed fluxes."""

    path: Path
    """The table; not yet opened."""
    kind: Literal["flux", "difference", "magnitude"] = "flux"
    """What its numbers are."""
    reference_epochs: tuple[float, ...] = ()
    """MJDs [days] of the images that difference fluxes refer to; empty: the reference level is free."""
    reference_err: float | None = None
    """Noise of the reference image [nJy], shared by all differences."""
    limit_sigma: float | None = None
    """Significance of its upper limits."""
    columns: dict[str, str] = field(default_factory=dict)
    """Names of its columns, for those that differ from ``time``, ``band``, ``flux``, ..."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CounterpartRecord:
    """What is known at the position of the mirror image, and what was seen there or here before."""

    path: Path | None = None
    """Light curve at the mirror position; not yet opened."""
    limit: float | None = None
    """Upper limit there [nJy], at `limit_sigma`."""
    limit_sigma: float = DEFAULT_SIGMA
    """Significance of `limit`."""
    band: str | None = None
    """Band of the limit, one of the event's bands."""
    earlier: tuple[float, ...] = ()
    """MJDs [days] of earlier detections."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Event:
    """All that an event file says."""

    name: str
    """Name of the event."""
    mode: Literal["transient", "persistent"] = "transient"
    """``persistent``: the reference contains the star, and dips count."""
    path: Path
    """The file, as it was asked for."""
    sha256: str
    """Hexadecimal SHA-256 of the file's bytes."""
    lens_redshift: Value | None = None
    """Redshift of the lens."""
    source_redshift: Value | None = None
    """Redshift of the source."""
    cosmology: CosmologyRecord = field(default_factory=CosmologyRecord)
    """Cosmology for all distances."""
    macro: tuple[MacroRecord, ...] = ()
    """The macro lens: none, one, or several alternatives."""
    microlenses: tuple[MicrolensRecord, ...] = ()
    """Populations of point masses; their convergences add up."""
    motion: MotionRecord | None = None
    """Motion across the caustics."""
    star: StarRecord = field(default_factory=StarRecord)
    """Priors of the star."""
    bands: dict[str, BandRecord] = field(default_factory=dict)
    """Bands by name."""
    photometry: tuple[PhotometryRecord, ...] = ()
    """Light curves of the event."""
    counterpart: CounterpartRecord | None = None
    """The mirror image and earlier detections."""
