"""From radius times and colours to the star."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy import units as u
from astropy.constants import R_sun
from astropy.cosmology import Planck18
from numpy.typing import NDArray

from crossing.event import BandRecord, Event, MacroRecord, MotionRecord, StarRecord, Value
from crossing.inference.colours import ColourGrid, colour_grid
from crossing.inference.priors import FitPriors
from crossing.inference.star import (
    KM_PER_RSUN,
    SECONDS_PER_DAY,
    StarSamples,
    model_speeds,
    normal_speed,
    radius_drivers,
    star_samples,
)
from crossing.optics.fold import profile_peak
from crossing.stars.extinction import transmission
from crossing.stars.photosphere import blackbody_flux_njy, luminosity_lsun

Array = NDArray[np.float64]

N = 20_000
SPEED = 700.0
REDSHIFT = 1.2
DISTANCE = float(Planck18.luminosity_distance(REDSHIFT).value)
BANDS = tuple(BandRecord(name=name, wavelength=where) for name, where in (("blue", 0.7), ("middle", 1.1), ("red", 2.0)))
# Colours that count: blackbodies to a percent, hardly any dust.
EXACT = FitPriors(model_error=0.01, host_dust=1e-4)


def event(**more: Any) -> Event:
    motion = more.pop("motion", MotionRecord(speed=Value.exact(SPEED)))
    return Event(name="invented", path=Path("invented.toml"), sha256="", motion=motion, **more)


def grid(priors: FitPriors = EXACT) -> ColourGrid:
    return colour_grid(BANDS, REDSHIFT, DISTANCE, priors)


def amplitudes(radius: float, temperature: float, magnification: float) -> Array:
    """(3,) fluxes [nJy] of a star."""
    one = [
        blackbody_flux_njy(radius, temperature, REDSHIFT, band.wavelength, luminosity_distance_mpc=DISTANCE)
        for band in BANDS
    ]
    return magnification * np.array(one, dtype=float)


def samples(one: Event, radius_time: Array | None = None, amplitude: Array | None = None, **more: Any) -> StarSamples:
    n = len(radius_time) if radius_time is not None else N
    given: dict[str, Any] = {
        "radius_time": radius_time,
        "peak": np.full(n, 1.4),
        "amplitude": np.ones((n, 1)) if amplitude is None else np.broadcast_to(amplitude, (n, len(amplitude))).copy(),
        "bands": BANDS[:1],
        "grid": None,
        "priors": EXACT,
        "rng": np.random.default_rng(3),
    }
    return star_samples(one, **(given | more))


# Radii


def test_constants() -> None:
    assert (1 * u.d).to_value(u.s) == SECONDS_PER_DAY
    # Nominal solar radius (IAU 2015 Resolution B3).
    assert R_sun.to_value(u.km) == KM_PER_RSUN


def test_radius_is_speed_times_time() -> None:
    time = np.exp(np.random.default_rng(1).normal(0.3, 0.4, N))
    found = samples(event(), time)
    assert found.radius is not None
    np.testing.assert_array_equal(found.index, np.arange(N))
    speed = (found.radius * u.R_sun / (time * u.d)).to_value(u.km / u.s)
    assert speed.max() <= SPEED * (1 + 1e-12)
    # Isotropic and weighted by itself: v sqrt(1 - s^2) with s uniform has the mean v pi/4; three standard errors.
    assert speed.mean() == pytest.approx(SPEED * np.pi / 4, abs=3 * 0.223 * SPEED / np.sqrt(N))
    assert found.effective == pytest.approx(N)
    assert found.prior_shift == 1.0
    assert found.temperature is None


def test_without_motion_there_is_no_radius() -> None:
    found = samples(event(motion=None), np.ones(N))
    assert found.radius is None
    assert normal_speed(event(motion=None), np.random.default_rng(0), 10) is None


def test_without_a_radius_time_there_is_no_radius() -> None:
    assert samples(event()).radius is None


@pytest.mark.parametrize(
    ("prior", "mean", "deviation"),
    [
        (Value.uniform(60.0, 140.0), 100.0, 80.0 / np.sqrt(12)),
        (Value.normal(90.0, 5.0), 90.0, 5.0),
        (Value.loguniform(50.0, 200.0), 150.0 / np.log(4.0), np.sqrt(18_750 / np.log(4.0) - (150 / np.log(4.0)) ** 2)),
    ],
    ids=["uniform", "normal", "log-uniform"],
)
def test_a_prior_of_the_radius_takes_over(prior: Value, mean: float, deviation: float) -> None:
    """Radius times that are log-uniform over decades say nothing: what is left is the prior itself."""
    time = np.exp(np.random.default_rng(1).uniform(np.log(1e-3), np.log(1e3), 20 * N))
    found = samples(event(star=StarRecord(radius=prior)), time)
    assert found.radius is not None
    # Effective draws: a few thousand, hence three standard errors of 2% of a deviation.
    assert found.effective > 2000
    assert found.radius.mean() == pytest.approx(mean, abs=0.06 * deviation)
    assert found.radius.std() == pytest.approx(deviation, rel=0.06)


def test_an_exact_radius_is_taken_to_a_percent() -> None:
    time = np.exp(np.random.default_rng(1).uniform(np.log(0.1), np.log(10.0), 10 * N))
    found = samples(event(star=StarRecord(radius=Value.exact(100.0))), time)
    assert found.radius is not None
    assert found.radius.mean() == pytest.approx(100.0, rel=0.005)
    assert found.radius.std() == pytest.approx(1.0, rel=0.15)


def test_a_radius_prior_measures_the_radius_time() -> None:
    """Draws are kept together: with an exact star the time is the radius over the speed."""
    time = np.exp(np.random.default_rng(1).uniform(np.log(0.1), np.log(10.0), 10 * N))
    found = samples(event(star=StarRecord(radius=Value.exact(100.0))), time)
    assert found.radius is not None
    speed = found.radius * KM_PER_RSUN / (time[found.index] * SECONDS_PER_DAY)
    assert speed.max() <= SPEED * (1 + 1e-12)
    assert found.prior_shift == pytest.approx(
        np.median(found.radius) / np.median(samples(event(), time).radius), rel=1e-9
    )


# Colours


@pytest.mark.parametrize("temperature", [4200.0, 9000.0, 21_000.0])
def test_temperature_of_a_blackbody(temperature: float) -> None:
    found = samples(event(motion=None), amplitude=amplitudes(80.0, temperature, 1.0), bands=BANDS, grid=grid())
    assert found.temperature is not None
    # A percent of model error a band over a factor of three in wavelength; grid steps are 6%.
    assert np.median(found.temperature) == pytest.approx(temperature, rel=0.03)
    assert np.std(np.log(found.temperature)) < 0.05
    assert found.radius is None
    assert found.luminosity is None


def test_default_priors_hold_the_truth_loosely() -> None:
    found = samples(
        event(motion=None),
        amplitude=amplitudes(80.0, 9000.0, 1.0),
        bands=BANDS,
        grid=grid(FitPriors()),
        priors=FitPriors(),
    )
    assert found.temperature is not None
    low, high = np.percentile(found.temperature, [2.5, 97.5])
    assert low < 9000.0 < high
    # 0.15 mag a band: tens of percent.
    assert 0.05 < np.std(np.log(found.temperature)) < 0.5


def test_magnification_at_the_peak() -> None:
    """Amplitude times height of the shape, over the unlensed flux of the star that radius and colours give."""
    peak = profile_peak(0.0).height
    amplitude = amplitudes(1.0, 9000.0, 1.0) * 1e5
    found = samples(event(), np.full(N, 1.0), amplitude=amplitude, bands=BANDS, grid=grid(), peak=np.full(N, peak))
    assert found.radius is not None
    assert found.temperature is not None
    assert found.peak_magnification is not None
    assert found.luminosity is not None
    unlensed = np.array(
        [amplitudes(r, t, 1.0)[1] for r, t in zip(found.radius[:50], found.temperature[:50], strict=True)]
    )
    # Three bands of 1% model error each, steps in temperature of 6% against the slope of the flux.
    np.testing.assert_allclose(found.peak_magnification[:50] * unlensed, peak * amplitude[1], rtol=0.15)
    np.testing.assert_allclose(found.luminosity, luminosity_lsun(found.radius, found.temperature), rtol=1e-12)


def test_one_band_has_no_colour_but_a_prior_helps() -> None:
    one = colour_grid(BANDS[:1], REDSHIFT, DISTANCE, EXACT)
    bare = samples(event(), np.ones(N), grid=one)
    assert bare.temperature is None
    told = samples(event(star=StarRecord(temperature=Value.normal(9000.0, 500.0))), np.ones(N), grid=one)
    assert told.temperature is not None
    # Steps of 6% smear 500 K to 530 K; the luminosity limit bites a little.
    assert np.mean(told.temperature) == pytest.approx(9000.0, abs=60.0)
    assert np.std(told.temperature) == pytest.approx(530.0, rel=0.1)


def test_extinction_of_uncertain_size_widens_the_temperature() -> None:
    def found(extinction: Value) -> Array:
        bands = (BandRecord(name="blue", wavelength=0.7, extinction=extinction), BANDS[1])
        dimmed = amplitudes(80.0, 9000.0, 1.0)[:2] * np.array([float(transmission(extinction.central)), 1.0])
        colours = colour_grid(bands, REDSHIFT, DISTANCE, EXACT)
        result = samples(event(motion=None), amplitude=dimmed, bands=bands, grid=colours).temperature
        assert result is not None
        return result

    sure, unsure = found(Value.exact(0.4)), found(Value.normal(0.4, 0.1))
    for one in (sure, unsure):
        assert np.median(one) == pytest.approx(9000.0, rel=0.03)
    assert np.std(unsure) > 2.0 * np.std(sure)


def test_stars_beyond_the_upper_luminosity_are_rare() -> None:
    """3000 Rsun at 9000 K would be log L = 7.7."""
    time = np.exp(np.random.default_rng(1).uniform(np.log(1.0), np.log(100.0), N))
    found = samples(event(), time, amplitude=amplitudes(80.0, 9000.0, 1.0), bands=BANDS, grid=grid())
    assert found.luminosity is not None
    # 5.8 for cool stars, soft by 0.2 dex: five widths above.
    assert np.log10(found.luminosity).max() < 6.8
    assert found.prior_shift < 0.7


def test_a_prior_of_the_luminosity_counts() -> None:
    time = np.exp(np.random.default_rng(1).uniform(np.log(0.01), np.log(10.0), N))
    star = StarRecord(luminosity=Value.normal(1e5, 1e4))
    found = samples(event(star=star), time, amplitude=amplitudes(80.0, 9000.0, 1.0), bands=BANDS, grid=grid())
    assert found.luminosity is not None
    # The temperature within its grid step of 6% moves it by 7% more.
    assert np.mean(found.luminosity) == pytest.approx(1e5, rel=0.02)
    assert np.std(found.luminosity) < 2e4


# Macro alternatives


def macros() -> tuple[MacroRecord, ...]:
    return tuple(
        MacroRecord(way="mu_t+mu_r", mu_t=Value.exact(mu_t), mu_r=Value.exact(2.0), weight=weight, name=name)
        for mu_t, weight, name in ((300.0, 1.0, "near"), (3.0, 3.0, None))
    )


def test_alternatives_differ_where_the_angle_is_known() -> None:
    across = MotionRecord(speed=Value.exact(SPEED), angle=Value.exact(90.0))
    speeds = model_speeds(event(motion=across, macro=macros()), np.random.default_rng(0), N)
    assert speeds is not None
    assert [(name, weight) for name, weight, _ in speeds] == [("near", 0.25), ("model 2", 0.75)]
    # Near the critical curve the normals lie along u: motion along v meets them at a slant.
    assert speeds[0][2].mean() < 0.8 * speeds[1][2].mean()
    pooled = normal_speed(event(motion=across, macro=macros()), np.random.default_rng(0), N)
    assert pooled is not None
    expected = 0.25 * speeds[0][2].mean() + 0.75 * speeds[1][2].mean()
    assert pooled.mean() == pytest.approx(expected, abs=3 * pooled.std() / np.sqrt(N) * 2)


def test_without_an_angle_the_macro_model_does_not_matter() -> None:
    speeds = model_speeds(event(macro=macros()), np.random.default_rng(0), N)
    assert speeds is not None
    assert len(speeds) == 1


# What drives the radius


@pytest.mark.parametrize("spread", [1e-6, 0.3, 2.0])
@pytest.mark.parametrize("speed", [Value.exact(SPEED), Value.normal(SPEED, 150.0), Value.loguniform(70.0, 7000.0)])
def test_drivers_sum_to_one(spread: float, speed: Value) -> None:
    rng = np.random.default_rng(0)
    motion = MotionRecord(speed=speed)
    drawn = normal_speed(event(motion=motion), rng, N)
    assert drawn is not None
    shares = radius_drivers(np.exp(rng.normal(0.0, spread, N)), drawn, motion, 0.8, rng)
    parts = np.array([shares.photometry, shares.speed, shares.angle])
    assert parts.sum() == pytest.approx(1.0, abs=1e-12)
    assert np.all(parts >= 0.0)
    assert shares.prior_shift == 0.8
    if spread < 1e-3:
        assert shares.photometry < 1e-6
    if spread > 1.0:
        # 4 of variance against 1.3 at most.
        assert shares.photometry > 0.7
    if speed.is_exact:
        # Nothing but sampling noise of the two sets of angles.
        assert shares.speed < 0.1
