"""Forecast of peak magnifications, their rates and durations for the star of an event, or for stars of any radius."""

from __future__ import annotations

import platform
from collections.abc import Sequence
from dataclasses import dataclass
from importlib.metadata import version
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.event import require
from crossing.optics.durations import crossing_days
from crossing.optics.motion import mean_normal_component, sample_effective_velocity, sample_normal_speed
from crossing.optics.scales import LensScales
from crossing.shooting.peaks.peak_crossings import (
    CrossingSample,
    TrackRun,
    gather_crossings,
    pool_runs,
    weighted_quantiles,
)
from crossing.shooting.peaks.peak_examples import light_curve_examples
from crossing.shooting.peaks.peak_lens import MacroChoice, macro_choices, typical_mass
from crossing.shooting.peaks.peak_place import Place, place_of
from crossing.shooting.peaks.peak_result import (
    BandSize,
    ExtendedRow,
    ModelForecast,
    PeakForecast,
    PeakRate,
    PeakRow,
    Spread,
    ToSee,
)
from crossing.stars.photosphere import temperature_from_luminosity
from crossing.stars.visibility import magnification_to_see

if TYPE_CHECKING:
    from crossing.event import Event

__all__ = ["MAGNIFICATIONS", "RADII_RSUN", "forecast_peaks"]

Array = NDArray[np.float64]

RADII_RSUN: Final = (1.0, 3.0, 10.0, 30.0, 100.0, 300.0, 1000.0)
"""Radii of a forecast that names none [Rsun]."""
MAGNIFICATIONS: Final = (300.0, 1000.0, 3000.0, 10000.0, 30000.0)
"""Magnifications whose rates are told."""

_GALAXIES_KPC: Final = (0.1, 0.3, 1.0)
_SPEEDS: Final = 20_000
_SPEED_KEY, _ANGLE_KEY = 2, 3
_PLACE_DRAWS: Final = 128
_CLIPPED: Final = 0.1
_CHANGE: Final = 0.2


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Task:
    """What all rows share."""

    event: Event
    scales: LensScales
    magnifications: tuple[float, ...]
    darkening: float
    temperature: float | None
    speeds: Array | None
    seed: int

    @property
    def mean_speed(self) -> float | None:
        """Mean speed [km/s]."""
        return None if self.speeds is None else float(self.speeds.mean())

    @property
    def speed(self) -> Spread | None:
        """Speeds by their share of crossings [km/s]."""
        return None if self.speeds is None else Spread.of(weighted_quantiles(self.speeds, self.speeds))

    @property
    def years(self) -> float | None:
        """Years per Einstein radius at the mean speed."""
        return None if self.mean_speed is None else self.scales.einstein_crossing_years(self.mean_speed)

    def einstein(self, radius_rsun: float) -> float:
        """Radius in Einstein radii of one solar mass."""
        return radius_rsun / self.scales.einstein_radius_source_rsun


def forecast_peaks(
    event: Event,
    *,
    radii: Sequence[float] | None = None,
    magnifications: Sequence[float] = MAGNIFICATIONS,
    band: str | None = None,
    temperature: float | None = None,
    precision: float = 0.05,
    most_tracks: int = 480,
    seed: int = 0,
    threads: int | None = None,
) -> PeakForecast:
    """Peak magnifications of stars at the place of an event, by closed forms and from random star fields.

    Parameters
    ----------
    event : Event
        The event, with redshifts and a macro lens. Without microlenses only smooth laws are told; without motion no
        times and rates; without a gradient neither smooth fold nor band.
    radii : sequence of float, optional
        Radii [Rsun]; 1 to 1000, and that of the event's star, if None.
    magnifications : sequence of float, optional
        Magnifications whose rates are told.
    band : str, optional
        Band whose limb darkening is taken; the first of the event that has one if None.
    temperature : float, optional
        Temperature [K] of the star, for what it takes to see it; that of the event if None.
    precision : float, optional
        Relative statistical error to reach, of the quantiles of the peaks and of the number of crossings.
    most_tracks : int, optional
        Most tracks to follow.
    seed : int, optional
        Seed.
    threads : int, optional
        Threads; all cores if None. The result does not depend on it.

    Returns
    -------
    PeakForecast
        Rows, models, regime, flags.

    Raises
    ------
    InputError
        If something is missing or not positive, or a band is not in the event.
    """
    require(event, "lens", "source", "macro", purpose="a forecast of peaks")
    sizes = _sizes(event, radii)
    darkening, darkened = _limb_darkening(event, band)
    task = _task(event, _positive("magnifications", magnifications), darkening, temperature, seed)
    choices = macro_choices(event)
    middle = task.einstein(sizes[len(sizes) // 2])
    runs: list[list[TrackRun]] = [[] for _ in choices]
    sample = None
    if choices[0].populations:
        runs, sample = gather_crossings(
            choices, radius=middle, precision=precision, most=most_tracks, seed=seed, threads=threads
        )
    places = [place_of(choice, task.scales, _PLACE_DRAWS, seed, darkening) for choice in choices]
    place = Place.pooled(places)
    error = None if sample is None else sample.worst_error(middle)
    options = {
        "radii": None if radii is None else list(sizes),
        "magnifications": list(task.magnifications),
        "band": band,
        "temperature": temperature,
        "precision": precision,
        "most_tracks": most_tracks,
        "seed": seed,
    }
    return PeakForecast(
        event=event.name,
        images=2 if choices[0].lens.gradient is not None else 1,
        lam_t=Spread.of(weighted_quantiles(place.lam_t, place.weight)),
        lam_r=Spread.of(weighted_quantiles(place.lam_r, place.weight)),
        kappa_star=choices[0].kappa_star,
        typical_mass=typical_mass(choices[0].populations) if choices[0].populations else None,
        regime=place.regime.name,
        sentence=place.sentence,
        regime_shares=place.regime_shares,
        overlap=place.overlap > 0.5,
        overlap_probability=place.overlap,
        overlap_kappa_star=place.median(place.overlap_kappa_star),
        band=_band(place, task),
        limb_darkening=darkening,
        limb_darkening_band=darkened,
        temperature_K=task.temperature,
        speed_kms=task.speed,
        mean_speed_kms=task.mean_speed,
        rsun_einstein=task.einstein(1.0),
        einstein_radius_uas=task.scales.einstein_radius_uas,
        years_per_einstein=task.years,
        rows=_rows(sizes, place, sample, task),
        models=_models(choices, places, runs, sizes, task) if len(choices) > 1 else (),
        extended=_extended(choices, task.scales),
        crossings=0 if sample is None else len(sample),
        tracks=sum(len(one) for one in runs),
        track_length=0.0 if sample is None else sample.length,
        crossings_per_einstein=None if sample is None else float(sample.weight.sum()),
        statistical_error=error,
        absent=_absent(place, sample, task),
        flags=_flags(place, runs, error, precision),
        provenance=_provenance(event, options),
        sample=sample,
        examples=light_curve_examples(runs, sample, *_shown(sizes, event, task), darkening),
    )


def _task(
    event: Event, magnifications: tuple[float, ...], darkening: float, temperature: float | None, seed: int
) -> _Task:
    if event.lens_redshift is None or event.source_redshift is None:
        raise InputError("must be given for a forecast of peaks; add both redshifts", source=event.path)
    if temperature is not None:
        _positive("temperature", [temperature])
    elif event.star.temperature is not None:
        temperature = event.star.temperature.central
    scales = LensScales(event.lens_redshift.central, event.source_redshift.central, event.cosmology)
    return _Task(
        event=event,
        scales=scales,
        magnifications=magnifications,
        darkening=darkening,
        temperature=temperature,
        speeds=_speeds(event, scales, seed),
        seed=seed,
    )


def _positive(name: str, values: Sequence[float]) -> tuple[float, ...]:
    found = tuple(sorted({float(one) for one in values}))
    if not found or not all(0.0 < one < np.inf for one in found):
        wrong = next((one for one in found if not 0.0 < one < np.inf), "none")
        raise InputError(f"`{name}` must be positive numbers, got {wrong}; leave the option out for its default")
    return found


def _sizes(event: Event, radii: Sequence[float] | None) -> tuple[float, ...]:
    if radii is not None:
        return _positive("radii", radii)
    return tuple(sorted({*RADII_RSUN, *(() if event.star.radius is None else (event.star.radius.central,))}))


def _limb_darkening(event: Event, band: str | None) -> tuple[float, str | None]:
    """Coefficient and the band that it belongs to."""
    known = {name: one.limb_darkening.central for name, one in event.bands.items() if one.limb_darkening is not None}
    if band is not None and band not in event.bands:
        names = ", ".join(event.bands) or "none"
        raise InputError(f"`band` must be one of the event's bands ({names}), got {band!r}", source=event.path)
    chosen = band if band is not None else next(iter(known), None)
    return (known[chosen], chosen) if chosen in known and chosen is not None else (0.0, None)


def _speeds(event: Event, scales: LensScales, seed: int) -> Array | None:
    if event.motion is None:
        return None
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(_SPEED_KEY,)))
    try:
        return np.asarray(np.hypot(*sample_effective_velocity(event.motion, scales, rng, _SPEEDS).T))
    except InputError as error:
        raise error.located(source=event.path) from None


def _rows(sizes: Sequence[float], place: Place, sample: CrossingSample | None, task: _Task) -> tuple[PeakRow, ...]:
    days = _days_per_rsun(place, sample, task)
    return tuple(_row(size, place, sample, days, task) for size in sizes)


def _row(size: float, place: Place, sample: CrossingSample | None, days: Array | None, task: _Task) -> PeakRow:
    radius = task.einstein(size)
    star = task.event.star.radius
    peaks = None if sample is None else sample.peaks(radius, task.darkening)
    micro, errors, crowded = _micro(sample, peaks, radius)
    return PeakRow(
        radius_rsun=size,
        star=star is not None and size == star.central,
        mu_peak_smooth=place.median(place.smooth / np.sqrt(size)),
        mu_peak_isolated=place.median(place.isolated / np.sqrt(radius)),
        mu_peak_isolated_range=place.range(place.isolated / np.sqrt(radius)),
        mu_peak_scaling=place.median(place.scaling / np.sqrt(radius)),
        mu_peak_saturated=place.median(place.saturated / np.sqrt(radius)),
        mu_peak_micro=micro,
        mu_peak_micro_error=errors,
        crossing_days=None if days is None else Spread.of(days, size),
        crossing_days_head_on=None if task.speed is None else float(crossing_days(size, task.speed.median)),
        crowded=crowded,
        rates=_rates(sample, peaks, task),
        to_see=_to_see(size, sample, peaks, task),
    )


def _micro(
    sample: CrossingSample | None, peaks: Array | None, radius: float
) -> tuple[Spread | None, tuple[float, float, float] | None, float | None]:
    """Peaks of the field, their statistical errors, and the share of crowded crossings."""
    if sample is None or peaks is None or not len(sample):
        return None, None, None
    low, median, high = sample.quantile_errors(peaks).tolist()
    crowded = float(sample.weight[sample.gap < 2.0 * radius].sum() / sample.weight.sum())
    return Spread.of(sample.quantiles(peaks)), (low, median, high), crowded


def _days_per_rsun(place: Place, sample: CrossingSample | None, task: _Task) -> Array | None:
    """16, 50 and 84% of the days from first to last touch, for one solar radius."""
    if task.speeds is None or task.event.motion is None:
        return None
    rng = np.random.default_rng(np.random.SeedSequence(task.seed, spawn_key=(_ANGLE_KEY,)))
    if sample is None or not len(sample):
        normal = mean_normal_component(place.median(place.lam_t) or 0.0, place.median(place.lam_r) or 1.0)
        speed = sample_normal_speed(task.event.motion, task.scales, rng, _SPEEDS, normal)
        return np.quantile(crossing_days(1.0, speed), (0.16, 0.5, 0.84))
    # A crossing takes its speed from v p(v); the tracks' crossings have the angles that tracks meet already.
    speed = rng.choice(task.speeds, _SPEEDS, p=task.speeds / task.speeds.sum())
    cosine = rng.choice(sample.cosine, _SPEEDS, p=sample.weight / sample.weight.sum())
    return np.quantile(crossing_days(1.0, speed) / np.maximum(cosine, 1e-12), (0.16, 0.5, 0.84))


def _rates(sample: CrossingSample | None, peaks: Array | None, task: _Task) -> tuple[PeakRate, ...]:
    if sample is None or peaks is None:
        return ()
    found, errors = sample.densities(peaks, task.magnifications)
    years = task.years
    return tuple(
        PeakRate(
            mu=mu,
            rate=None if years is None else float(density / years),
            error=None if years is None else float(error / years),
            per_einstein=float(density),
        )
        for mu, density, error in zip(task.magnifications, found, errors, strict=True)
    )


def _to_see(size: float, sample: CrossingSample | None, peaks: Array | None, task: _Task) -> tuple[ToSee, ...]:
    temperature, luminosity = task.temperature, task.event.star.luminosity
    if temperature is None and luminosity is not None:
        temperature = float(temperature_from_luminosity(luminosity.central, size))
    if temperature is None:
        return ()
    out = []
    for name, band in task.event.bands.items():
        if band.depth is None:
            continue
        mu = float(
            magnification_to_see(
                size,
                temperature,
                task.scales.z_source,
                band.depth,
                band.wavelength,
                band.width,
                10 ** (-0.4 * band.extinction.central),
                luminosity_distance_mpc=task.scales.luminosity_distance,
            )
        )
        rate = error = None
        if sample is not None and peaks is not None and task.years is not None:
            rate, error = (float(one[0] / task.years) for one in sample.densities(peaks, [mu]))
        out.append(ToSee(band=name, mu=mu, rate=rate, error=error))
    return tuple(out)


def _band(place: Place, task: _Task) -> BandSize | None:
    width, depth = place.median(place.band_width), place.median(place.band_depth)
    if width is None or depth is None or width == 0.0:
        return None
    years = None if task.speed is None else float(_band_years(depth, task, task.speed.median))
    return BandSize(
        width_arcsec=width, depth_arcsec=depth, depth_pc=1e3 * depth * task.scales.kpc_per_arcsec_source, years=years
    )


def _band_years(depth: float, task: _Task, speed: float) -> Any:
    from crossing.optics.durations import band_crossing_years

    return band_crossing_years(depth, task.scales, speed)


def _models(
    choices: Sequence[MacroChoice],
    places: Sequence[Place],
    runs: Sequence[Sequence[TrackRun]],
    sizes: Sequence[float],
    task: _Task,
) -> tuple[ModelForecast, ...]:
    out = []
    for choice, place, own in zip(choices, places, runs, strict=True):
        sample = pool_runs([own], [1.0]) if own else None
        out.append(
            ModelForecast(
                name=choice.name,
                weight=choice.weight,
                lam_t=Spread.of(weighted_quantiles(place.lam_t, place.weight)),
                lam_r=Spread.of(weighted_quantiles(place.lam_r, place.weight)),
                regime=place.regime.name,
                overlap=place.overlap > 0.5,
                band_width_arcsec=place.median(place.band_width),
                rows=_rows(sizes, place, sample, task),
            )
        )
    return tuple(out)


def _extended(choices: Sequence[MacroChoice], scales: LensScales) -> tuple[ExtendedRow, ...]:
    from crossing.optics.peaks import extended_peak

    folds = [(choice.fold, choice.weight) for choice in choices if choice.fold is not None]
    if not folds:
        return ()
    found = [extended_peak(_GALAXIES_KPC, fold, scales) for fold, _ in folds]
    weight = np.array([weight for _, weight in folds])
    return tuple(
        ExtendedRow(
            radius_kpc=size,
            mu_peak_smooth=float(weighted_quantiles(np.array([one.law[k] for one in found]), weight, (0.5,))[0]),
            mu_peak_within_reach=float(
                weighted_quantiles(np.array([one.within_reach[k] for one in found]), weight, (0.5,))[0]
            ),
        )
        for k, size in enumerate(_GALAXIES_KPC)
    )


def _absent(place: Place, sample: CrossingSample | None, task: _Task) -> dict[str, str]:
    """What could not be told, and why."""
    out: dict[str, str] = {}
    if place.median(place.smooth) is None:
        reason = "the macro lens has no gradient along the stretch in the event file"
        out |= dict.fromkeys(("mu_peak_smooth", "extended"), reason)
        out["band_width_arcsec"] = reason
    if not task.event.microlenses:
        reason = "the event file has no [microlenses]"
        names = ("mu_peak_isolated", "mu_peak_micro", "rate_per_year", "band_width_arcsec")
        out |= dict.fromkeys(names, reason)
    elif place.median(place.isolated) is None:
        critical = place.lam_t[0] == 0.0
        out["mu_peak_isolated"] = (
            "on the critical curve the caustic of one star has no end"
            if critical
            else "without shear the caustic of one star is a point, and at a maximum no closed form is used"
        )
    if sample is not None and not len(sample):
        out["mu_peak_micro"] = "the tracks met no fold"
    if task.speeds is None:
        reason = "the event file has no [motion]"
        out |= {name: reason for name in ("crossing_days", "rate_per_year", "speed_kms") if name not in out}
    if not any(one.depth is not None for one in task.event.bands.values()):
        out["to_see"] = "no band of the event file has a depth"
    elif task.temperature is None and task.event.star.luminosity is None:
        out["to_see"] = "the star's temperature is not known; give [star] temperature or luminosity, or --temperature"
    return out


def _flags(place: Place, runs: Sequence[Sequence[TrackRun]], error: float | None, precision: float) -> tuple[str, ...]:
    flags = []
    if error is not None and not error <= precision:
        flags.append("few_crossings")
    if place.share(place.clipped) > _CLIPPED:
        flags.append("clipped_lens")
    if place.share(place.macro_change > _CHANGE) > 0.5:
        flags.append("near_macro_caustic")
    if any(not run.complete for own in runs for run in own):
        flags.append("lost_images")
    return tuple(flags)


def _shown(sizes: Sequence[float], event: Event, task: _Task) -> tuple[float, float]:
    """Radius of the light curves that are shown: the star's, or the one closest to 100 Rsun; [Rsun] and [theta_E]."""
    star = event.star.radius.central if event.star.radius is not None else None
    size = star if star in sizes and star is not None else min(sizes, key=lambda one: abs(np.log(one / 100.0)))
    return size, task.einstein(size)


def _provenance(event: Event, options: dict[str, Any]) -> dict[str, Any]:
    packages = ("crossing", "numpy", "scipy", "astropy", "numba")
    return {
        "versions": {"python": platform.python_version()} | {name: version(name) for name in packages},
        "options": options,
        "inputs": [{"path": str(event.path), "sha256": event.sha256}],
    }
