"""Simulated events: a star on a random track, its fluxes in the event's bands, and what a survey would measure."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.event import Event, require
from crossing.optics.fold import profile_peak
from crossing.optics.scales import LensScales
from crossing.photometry.lightcurve import LightCurve
from crossing.shooting.from_event import LocalSetup
from crossing.shooting.tracks.random_track import RandomTrack, TrackMotion, draw_motion, event_scales, place_track
from crossing.shooting.tracks.track import track_magnification
from crossing.shooting.tracks.track_curve import TrackCurve
from crossing.stars.extinction import transmission
from crossing.stars.limb_darkening import band_limb_darkening
from crossing.stars.photosphere import ab_magnitude, blackbody_flux_njy
from crossing.stars.star_draws import draw_stars

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

__all__ = ["FLAGS", "SimulatedEvent", "SimulatedStar", "SimulationOptions", "check_depths", "simulate_event"]

Array = NDArray[np.float64]

FLAGS: Final[dict[str, str]] = {
    "curve_inaccurate": "the magnification does not reach the accuracy that was asked for, or an image was lost",
    "no_such_crossing": "no fold crossing that peaks as high as asked for was found; the highest is in the middle",
}
"""Flags that make a simulated event untrustworthy, with what they mean."""

# What the random numbers of a realisation are for: the second word of its spawn keys.
_STAR, _MOTION, _PLACE, _NOISE = range(4)
_MOST_EPOCHS: Final = 100_000
# Straight lines between the points of a curve are good to this many times the accuracy of the points.
_LINES: Final = 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulationOptions:
    """How events are simulated and observed."""

    duration: float = 100.0
    """Length of the light curve [d]."""
    cadence: float = 2.0
    """Time between two visits, each in all bands [d]."""
    start_mjd: float = 61000.0
    """Begin of the light curve [MJD]."""
    peak: float | None = None
    """Put a fold crossing in the middle at this magnification or above; random places if None."""
    limit_sigma: float | None = None
    """Write measurements below so many standard errors as upper limits; none if None."""
    accuracy: float = 1e-3
    """Relative accuracy of the noiseless curve, straight lines between its points included."""

    def __post_init__(self) -> None:
        for name in ("duration", "cadence"):
            if not 0.0 < getattr(self, name) < np.inf:
                raise InputError(f"`{name}` must be positive and finite, got {getattr(self, name):g}; give it in days")
        if self.cadence > self.duration:
            raise InputError(
                f"`cadence` must be at most the duration, {self.duration:g} days, got {self.cadence:g}; lower it"
            )
        if self.duration / self.cadence > _MOST_EPOCHS:
            raise InputError(
                f"`cadence` must give at most {_MOST_EPOCHS} visits, got {self.duration / self.cadence:.3g}; raise it"
            )
        if self.peak is not None and not 0.0 <= self.peak < np.inf:
            raise InputError(f"`peak` must be a magnification, zero or more, got {self.peak:g}")
        if self.limit_sigma is not None and not 0.0 < self.limit_sigma < np.inf:
            raise InputError(f"`limit_sigma` must be positive and finite, got {self.limit_sigma:g}")
        if not 1e-5 <= self.accuracy <= 0.1:
            raise InputError(f"`accuracy` must be between 1e-5 and 0.1, got {self.accuracy:g}")


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedStar:
    """The star of a simulated event."""

    radius: float
    """Radius [nominal solar radii]."""
    temperature: float
    """Temperature of its blackbody [K]."""
    luminosity: float
    """Luminosity [nominal solar luminosities]."""
    radius_einstein: float
    """Radius [theta_E of one solar mass, in the source plane]."""
    flux: Array
    """(n_bands,) unmagnified flux densities, Galactic extinction applied [nJy]."""
    limb_darkening: Array
    """(n_bands,) linear coefficients."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SimulatedEvent:
    """One realisation of an event: star, motion, star field, noiseless curve and observed light curve."""

    event: str
    """Name of the event that it is a realisation of."""
    number: int
    """Number of the realisation, from 0."""
    bands: tuple[str, ...]
    """Names of the bands."""
    options: SimulationOptions
    """How it was simulated and observed."""
    star: SimulatedStar
    """The star."""
    motion: TrackMotion
    """Its motion."""
    track: RandomTrack = field(repr=False)
    """Where it moves, with the star field."""
    curve: TrackCurve = field(repr=False)
    """Magnification along the track, a row for each different limb darkening."""
    row: tuple[int, ...]
    """(n_bands,) row of `curve` for each band."""
    light_curve: LightCurve = field(repr=False)
    """What the survey measured."""

    @property
    def time(self) -> Array:
        """(n,) times of the points of the noiseless curve [MJD]."""
        return np.asarray(self.options.start_mjd + self.options.duration * self.curve.position)

    @property
    def magnification(self) -> Array:
        """(n_bands, n) magnification."""
        return np.asarray(np.atleast_2d(self.curve.magnification)[list(self.row)])

    @property
    def flux(self) -> Array:
        """(n_bands, n) noiseless flux densities [nJy]."""
        return np.asarray(self.star.flux[:, None] * self.magnification)

    @property
    def peak(self) -> tuple[float, Array]:
        """Time [MJD] of the highest point in the first band, and the (n_bands,) magnifications then."""
        at = int(np.argmax(self.magnification[0]))
        return float(self.time[at]), self.magnification[:, at]

    @property
    def detections(self) -> int:
        """Measurements above three standard errors."""
        seen = ~self.light_curve.is_upper_limit & (self.light_curve.flux > 3.0 * self.light_curve.flux_err)
        return int(np.count_nonzero(seen))

    @property
    def flags(self) -> tuple[str, ...]:
        """Names in `FLAGS` that apply."""
        found = {"curve_inaccurate": bool(self.curve.flags), "no_such_crossing": not self.track.found}
        return tuple(name for name, applies in found.items() if applies)

    @property
    def status(self) -> str:
        """``ok``, or the flags that apply."""
        return ", ".join(self.flags) or "ok"

    def crossings(self) -> list[dict[str, Any]]:
        """The folds that the star's centre meets: times, radius times and peaks as single folds (first band)."""
        met = self.curve.crossings
        per_day = self.motion.days_per_einstein
        height = profile_peak(float(self.star.limb_darkening[0])).height / np.sqrt(self.star.radius_einstein)
        with np.errstate(divide="ignore"):
            radius_time = self.star.radius_einstein * per_day / np.cos(met.angle)
        return [
            {
                "caustic_time_mjd": self.options.start_mjd + self.options.duration * float(met.position[k]),
                "orientation": "entering" if met.entering[k] else "leaving",
                "radius_time_days": float(radius_time[k]),
                "normal_angle_deg": float(np.degrees(met.angle[k])),
                "strength": float(met.strength[k]),
                "background": float(met.background[k]),
                "peak_magnification": float(met.background[k] + met.strength[k] * height),
            }
            for k in range(len(met))
        ]

    def to_dict(self) -> dict[str, Any]:
        """The truth behind the light curve, as plain numbers and lists."""
        peak_time, peak = self.peak
        magnified = ab_magnitude(self.star.flux * peak)
        return {
            "number": self.number,
            "status": self.status,
            "flags": list(self.flags),
            "radius_rsun": self.star.radius,
            "temperature_K": self.star.temperature,
            "luminosity_lsun": self.star.luminosity,
            "radius_einstein": self.star.radius_einstein,
            "limb_darkening": dict(zip(self.bands, self.star.limb_darkening.tolist(), strict=True)),
            "flux_unlensed_njy": dict(zip(self.bands, self.star.flux.tolist(), strict=True)),
            "speed_km_s": self.motion.speed,
            "direction_deg": float(np.degrees(self.motion.direction)),
            "days_per_einstein": self.motion.days_per_einstein,
            "start_einstein": list(self.track.start),
            "end_einstein": list(self.track.end),
            "field_seed": self.track.field_seed,
            "fields_tried": self.track.fields_tried,
            "stars": len(self.track.stars),
            "peak_time_mjd": peak_time,
            "peak_magnification": float(peak[0]),
            "peak_mag": dict(zip(self.bands, magnified.tolist(), strict=True)),
            "mean_magnification": float(self.curve.mean_magnification[0]),
            "rows": len(self.light_curve),
            "detections": self.detections,
            "crossings": self.crossings(),
            "evaluations": self.curve.evaluations,
        }

    def to_table(self) -> QTable:
        """Noiseless curve, one row a point: time, place, and magnification, flux and AB magnitude of each band."""
        from astropy import units
        from astropy.table import QTable

        table = QTable({"mjd": self.time * units.d, "day": (self.time - self.options.start_mjd) * units.d})
        for axis, name in enumerate("uv"):
            ends = self.track.start[axis], self.track.end[axis]
            table[name] = ends[0] + self.curve.position * (ends[1] - ends[0])
        for band, magnification, flux in zip(self.bands, self.magnification, self.flux, strict=True):
            table[f"magnification_{band}"] = magnification
            table[f"flux_{band}"] = flux * units.nJy
            table[f"mag_{band}"] = ab_magnitude(flux)
        table.meta = {"event": self.event} | {
            key: value for key, value in self.to_dict().items() if not isinstance(value, list)
        }
        return table

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the noiseless curves and the measurements in AB magnitudes against days."""
        from crossing.photometry.simulated_figure import draw_magnitudes

        return draw_magnitudes(self, ax)

    def _repr_html_(self) -> str:
        told = self.to_dict()
        names = ("status", "radius_rsun", "temperature_K", "speed_km_s", "peak_time_mjd", "peak_magnification")
        rows = "".join(f"<tr><th>{name}</th><td>{told[name]}</td></tr>" for name in names)
        return f"<table>{rows}</table>"


def check_depths(event: Event) -> None:
    """Insist on what a simulation needs of an event file.

    Raises
    ------
    InputError
        If a section is missing, or a band has no depth, from which the noise follows.
    """
    require(event, "lens", "source", "macro", "microlenses", "motion", "bands", purpose="crossing track")
    for name, band in event.bands.items():
        if band.depth is None:
            raise InputError(
                'must be given for crossing track, whose noise it sets; add depth = "... mag"',
                source=event.path,
                where=f"bands.{name}.depth",
            )


def simulate_event(
    setup: LocalSetup,
    options: SimulationOptions | None = None,
    *,
    number: int = 0,
    seed: int = 0,
    threads: int | None = None,
) -> SimulatedEvent:
    """Simulate one realisation of an event.

    Parameters
    ----------
    setup : LocalSetup
        The event with its macro lens and populations.
    options : SimulationOptions, optional
        How it is simulated and observed.
    number : int
        Number of the realisation; each has its own star, motion, star field and noise.
    seed : int
        Seed; the same seed and number give the same realisation, whatever others are made.
    threads : int, optional
        Threads; all cores if None.

    Raises
    ------
    InputError
        If the event file lacks something, its priors of the star contradict each other, or the track is too long.

    Notes
    -----
    Random: star, motion, star field, place, limb darkening and extinction within their errors, noise. By their central
    values: redshifts, macro lens and densities of microlenses. Stars are blackbodies without dust in their galaxy. The
    noise is that of the depth, Gaussian and independent of the flux.
    """
    chosen = options or SimulationOptions()
    event = setup.event
    check_depths(event)
    scales = event_scales(event)
    star = _star(event, scales, _stream(seed, number, _STAR))
    motion = draw_motion(setup, _stream(seed, number, _MOTION), crossing=chosen.peak is not None)
    track = place_track(
        setup,
        motion,
        chosen.duration / motion.days_per_einstein,
        _stream(seed, number, _PLACE),
        peak=chosen.peak,
        radius=star.radius_einstein,
        limb_darkening=float(star.limb_darkening[0]),
    )
    darkening, row = np.unique(star.limb_darkening, return_inverse=True)
    curve = track_magnification(
        track.stars,
        track.start,
        track.end,
        np.full(len(darkening), star.radius_einstein),
        limb_darkening=darkening,
        accuracy=chosen.accuracy / _LINES,
        threads=threads,
    )
    rows = tuple(int(one) for one in row)
    magnification = np.atleast_2d(curve.magnification)[list(rows)]
    return SimulatedEvent(
        event=event.name,
        number=number,
        bands=tuple(event.bands),
        options=chosen,
        star=star,
        motion=motion,
        track=track,
        curve=curve,
        row=rows,
        light_curve=_observe(event, chosen, star, curve.position, magnification, _stream(seed, number, _NOISE)),
    )


def _stream(seed: int, number: int, purpose: int) -> np.random.Generator:
    return np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(number, purpose)))


def _star(event: Event, scales: LensScales, rng: np.random.Generator) -> SimulatedStar:
    try:
        drawn = draw_stars(event.star, rng, 1)
    except InputError as error:
        raise error.located(source=event.path) from None
    radius, temperature = float(drawn.radius[0]), float(drawn.temperature[0])
    flux, darkening = [], []
    for band in event.bands.values():
        bare = blackbody_flux_njy(
            radius,
            temperature,
            scales.z_source,
            band.wavelength,
            band.width,
            luminosity_distance_mpc=scales.luminosity_distance,
        )
        flux.append(float(bare) * float(transmission(band.extinction.sample(rng, 1))[0]))
        if band.limb_darkening is None:
            darkening.append(float(band_limb_darkening(band, temperature, scales.z_source)))
        else:
            darkening.append(float(band.limb_darkening.sample(rng, 1)[0]))
    return SimulatedStar(
        radius=radius,
        temperature=temperature,
        luminosity=float(drawn.luminosity[0]),
        radius_einstein=radius / scales.einstein_radius_source_rsun,
        flux=np.array(flux),
        limb_darkening=np.array(darkening),
    )


def _observe(
    event: Event,
    options: SimulationOptions,
    star: SimulatedStar,
    position: Array,
    magnification: Array,
    rng: np.random.Generator,
) -> LightCurve:
    """Visits at a regular cadence from a random phase on, each in all bands."""
    visits = options.cadence * np.arange(rng.random(), options.duration / options.cadence)
    order = np.argsort(position, kind="stable")
    columns: list[list[Array]] = [[], [], [], []]
    for k, (name, band) in enumerate(event.bands.items()):
        curve = np.interp(visits / options.duration, position[order], magnification[k][order])
        sigma = np.full(visits.shape, (band.depth or np.nan) / band.depth_sigma)
        flux = star.flux[k] * curve + sigma * rng.standard_normal(visits.shape)
        for column, values in zip(columns, (visits, np.full(visits.shape, name), flux, sigma), strict=True):
            column.append(values)
    time, names, flux, sigma = (np.concatenate(column) for column in columns)
    limit = np.zeros(flux.shape, dtype=np.bool_)
    if options.limit_sigma is not None:
        limit = flux < options.limit_sigma * sigma
        flux = np.where(limit, options.limit_sigma * sigma, flux)
    return LightCurve.from_arrays(options.start_mjd + time, names, flux, sigma, is_upper_limit=limit)
