"""Whole fits: truths of the demo events, flags, options, and what must not matter."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from simulated import START, Fold, light_curve

from crossing import fit_crossing, read_event
from crossing.errors import InputError
from crossing.event import Event
from crossing.inference import FLAGS, MODELS, CrossingFit, FitPriors
from crossing.photometry import LightCurve

DEMO = Path(__file__).parent.parent / "demo_lightcurves"
CROSSINGS = ("well_sampled", "four_epochs", "pair", "difference", "faint")
SPEED = '[motion]\nspeed = {value = "700 km / s", error = "150 km / s"}\n'
REDSHIFTS = "[lens]\nredshift = 0.43\n[source]\nredshift = 1.21\n"


def truth_of(name: str) -> dict[str, Any]:
    found: dict[str, Any] = json.loads((DEMO / f"{name}.truth.json").read_text(encoding="utf-8"))
    return found


def assert_holds(fit: CrossingFit, name: str, truth: float) -> None:
    low, high = np.percentile(fit.samples[name], [0.15, 99.85])
    assert low <= truth <= high, name


def write_event(folder: Path, more: str, curve: LightCurve) -> Event:
    """An event file beside its light curve."""
    curve.write(folder / "curve.ecsv")
    bands = "".join(f'[bands.{band}]\nwavelength = "{0.7 + 0.5 * k} um"\n' for k, band in enumerate(curve.bands))
    text = f'[event]\nname = "invented"\n{more}\n{bands}[photometry]\nfile = "curve.ecsv"\n'
    (folder / "event.toml").write_text(text, encoding="utf-8")
    return read_event(folder / "event.toml")


def two_bands(seed: int = 1, sigma: float = 3.0, **truth: Any) -> LightCurve:
    given = {"time": 12.0, "radius_time": 1.2, "label": 0} | truth
    return light_curve(Fold(**given), np.linspace(0.2, 25.0, 24), sigma, np.random.default_rng(seed), "ab")


# Truths


@pytest.mark.slow
@pytest.mark.parametrize("name", CROSSINGS)
def test_demo_events_are_recovered(name: str) -> None:
    fit, truth = fit_crossing(read_event(DEMO / f"{name}.toml")), truth_of(name)
    assert fit.model == truth["model"]
    for key in ("caustic_time_mjd", "radius_time_days", "peak_time_mjd", "radius_rsun"):
        assert_holds(fit, key, truth[key])
    if truth["model"] == "pair":
        assert_holds(fit, "second_caustic_time_mjd", truth["second_caustic_time_mjd"])
    else:
        assert max(fit.orientation, key=lambda one: fit.orientation[one]) == truth["orientation"]
    assert set(fit.flags) <= {"prior_driven"}


@pytest.mark.slow
def test_the_impostor_is_not_taken_for_a_crossing() -> None:
    assert "poor_fit" in fit_crossing(read_event(DEMO / "impostor.toml")).flags


def test_a_simulated_fold_is_recovered() -> None:
    fit = fit_crossing(two_bands(label=1), model="fold")
    assert fit.flags == ()
    assert fit.orientation["leaving"] > 0.99
    assert_holds(fit, "caustic_time_mjd", START + 12.0)
    assert_holds(fit, "radius_time_days", 1.2)
    assert_holds(fit, "amplitude_a_njy", 60.0 / 1.393119)
    assert_holds(fit, "level_0_njy", 5.0)
    for estimate in fit.amplitudes.values():
        # The peak itself: five of its errors.
        assert estimate.median == pytest.approx(60.0, abs=5 * 0.5 * (estimate.high - estimate.low))


# What must not matter


def test_the_order_of_the_rows_does_not_matter() -> None:
    curve = two_bands()
    order = np.random.default_rng(0).permutation(len(curve))
    mixed = LightCurve.from_arrays(curve.time[order], curve.band[order], curve.flux[order], curve.flux_err[order])
    first, second = (fit_crossing(rows, model="fold", seed=2) for rows in (curve, mixed))
    # All times differ: the rows come back in one order.
    assert first.to_dict() == second.to_dict()


def test_the_order_of_simultaneous_rows_hardly_matters() -> None:
    time = np.repeat(np.linspace(0.0, 24.0, 13), 2)
    band = np.tile(["a", "b"], 13)
    flux = Fold(12.0, 1.2, 0).flux(time) + 3.0 * np.random.default_rng(4).standard_normal(26)
    order = np.argsort(np.tile([1, 0], 13) + 2 * np.repeat(np.arange(13), 2))
    fits = [
        fit_crossing(LightCurve.from_arrays(START + time[k], band[k], flux[k], np.full(26, 3.0)), model="fold")
        for k in (np.arange(26), order)
    ]
    # Bands in another order: the same sums, other random numbers, whose share of an interval is 1/sqrt(4000).
    assert fits[0].ln_evidence == pytest.approx(fits[1].ln_evidence, abs=1e-3)
    assert fits[0].chi2 == pytest.approx(fits[1].chi2, abs=1e-3)
    one, two = (fit.radius_time_days for fit in fits)
    assert one is not None
    assert two is not None
    assert one.median == pytest.approx(two.median, abs=0.1 * (one.high - one.low))


def test_the_seed_decides() -> None:
    curve = two_bands()
    first, same, other = (fit_crossing(curve, model="fold", seed=seed) for seed in (3, 3, 4))
    assert first.to_dict() == same.to_dict()
    for name, values in first.samples.items():
        np.testing.assert_array_equal(values, same.samples[name])
    assert not np.array_equal(first.samples["radius_time_days"], other.samples["radius_time_days"])
    # The scan has no random numbers.
    assert first.ln_evidence == other.ln_evidence


@pytest.mark.parametrize("factor", [1e-7, 1e8])
def test_the_unit_of_flux_does_not_matter(factor: float) -> None:
    curve = two_bands()
    scaled = LightCurve.from_arrays(curve.time, curve.band, factor * curve.flux, factor * curve.flux_err)
    plain, other = (fit_crossing(rows, model="fold") for rows in (curve, scaled))
    assert other.chi2 == pytest.approx(plain.chi2, rel=1e-6)
    assert other.ln_evidence == pytest.approx(plain.ln_evidence - len(curve) * math.log(factor), rel=1e-6)
    # Sampling noise only.
    assert other.radius_time_days is not None
    assert plain.radius_time_days is not None
    assert other.radius_time_days.median == pytest.approx(plain.radius_time_days.median, rel=0.02)


# What there is


def test_a_bare_light_curve_works() -> None:
    fit = fit_crossing(two_bands(), model="fold")
    assert fit.event == "light curve"
    assert fit.radius_time_days is not None
    assert fit.radius_rsun is None
    assert fit.temperature_K is None
    assert fit.drivers is None
    assert fit.macro_models == ()
    json.dumps(fit.to_dict(), allow_nan=False)


def test_macro_alternatives_are_told(tmp_path: Path) -> None:
    macro = (
        '[[macro.models]]\nname = "A"\nmu_t = 150\nmu_r = 1.9\n[[macro.models]]\nweight = 3\nmu_t = -3\nmu_r = 1.9\n'
    )
    event = write_event(tmp_path, REDSHIFTS + macro + SPEED + 'angle = "85 deg"\n', two_bands())
    fit = fit_crossing(event, model="fold")
    models = fit.to_dict()["models"]
    assert [(one["name"], one["weight"]) for one in models] == [("A", 0.25), ("model 2", 0.75)]
    # Nearly along the caustics of the first, whose normals lie along x.
    assert models[0]["radius_rsun"]["median"] < models[1]["radius_rsun"]["median"]
    low, high = models[0]["radius_rsun"]["median"], models[1]["radius_rsun"]["median"]
    assert fit.radius_rsun is not None
    assert 0.8 * low < fit.radius_rsun.median < 1.2 * high


def test_an_event_gives_the_star(tmp_path: Path) -> None:
    fit = fit_crossing(write_event(tmp_path, REDSHIFTS + SPEED, two_bands()), model="fold")
    for name in ("radius_rsun", "temperature_K", "luminosity_lsun", "peak_magnification"):
        estimate = fit.estimates[name]
        assert estimate is not None
        assert estimate.low < estimate.median < estimate.high
    assert fit.drivers is not None
    assert fit.drivers.photometry + fit.drivers.speed + fit.drivers.angle == pytest.approx(1.0, abs=1e-12)
    assert fit.macro_models == ()
    # 700 km/s isotropic, a radius time known to 10%: the motion is what is not known.
    assert fit.drivers.photometry < 0.3


@pytest.mark.parametrize("model", ["constant", "fold", "bump"])
def test_every_number_is_finite(model: str) -> None:
    fit = fit_crossing(two_bands(), model=model)

    def numbers(item: object) -> Iterator[float]:
        if isinstance(item, dict):
            for one in item.values():
                yield from numbers(one)
        elif isinstance(item, list | tuple):
            for one in item:
                yield from numbers(one)
        elif isinstance(item, float):
            yield item

    assert all(map(math.isfinite, numbers(fit.to_dict())))
    assert all(np.all(np.isfinite(values)) for values in fit.samples.values())
    assert set(fit.flags) <= set(FLAGS)


# Flags: each by a case, and not by its opposite


def test_nothing_happened() -> None:
    rng = np.random.default_rng(5)
    time = np.linspace(0.0, 30.0, 20)
    curve = LightCurve.from_arrays(START + time, "a", 10 + rng.standard_normal(20), np.ones(20))
    assert "no_crossing" in fit_crossing(curve, model="fold").flags
    assert fit_crossing(curve, model="constant").flags == ("no_crossing",)
    assert "no_crossing" not in fit_crossing(two_bands(), model="fold").flags


def test_a_crossing_that_is_not_resolved_is_prior_driven() -> None:
    curve = light_curve(
        Fold(time=12.3, radius_time=0.1, label=0, peak=120.0), np.arange(26.0), 3.0, np.random.default_rng(6)
    )
    fit = fit_crossing(curve, model="fold")
    assert "prior_driven" in fit.flags
    assert fit.radius_time_days is not None
    assert fit.radius_time_days.bound == "upper"
    assert fit.radius_time_days.limit is not None
    assert fit.radius_time_days.limit > 0.1
    # What is reported depends on the shortest radius time of the prior, and the limit much less.
    shorter = fit_crossing(curve, model="fold", priors=FitPriors(radius_time=(0.0004, 80.0)))
    assert shorter.radius_time_days is not None
    assert shorter.radius_time_days.median < 0.6 * fit.radius_time_days.median


def test_a_crossing_before_the_data_is_at_a_bound() -> None:
    time = np.arange(25.0)
    flux = 100.0 * np.exp(-time / 10.0) + 3.0 * np.random.default_rng(7).standard_normal(25)
    assert (
        "at_bound"
        in fit_crossing(LightCurve.from_arrays(START + time, "a", flux, np.full(25, 3.0)), model="fold").flags
    )


def test_errors_too_small_are_a_poor_fit_that_scatter_mends() -> None:
    curve = two_bands(sigma=3.0)
    bold = LightCurve.from_arrays(curve.time, curve.band, curve.flux, curve.flux_err / 3.0)
    assert "poor_fit" in fit_crossing(bold, model="fold").flags
    mended = fit_crossing(bold, model="fold", extra_scatter=True)
    assert mended.flags == ()
    # sqrt(3^2 - 1) = 2.8 errors are missing: neither none nor a half.
    assert mended.scatter["0"] + mended.scatter["0.5"] < 1e-3
    assert sum(mended.scatter.values()) == pytest.approx(1.0, abs=1e-12)
    assert_holds(mended, "radius_time_days", 1.2)
    plain = fit_crossing(curve, model="fold", extra_scatter=True)
    assert plain.scatter["0"] + plain.scatter["0.5"] > 0.5


def test_a_fold_is_no_bump() -> None:
    assert "poor_fit" in fit_crossing(two_bands(), model="bump").flags


def test_a_star_that_the_motion_excludes_has_not_converged(tmp_path: Path) -> None:
    star = '[star]\nradius = "0.01 solRad"\n'
    fit = fit_crossing(write_event(tmp_path, REDSHIFTS + SPEED + star, two_bands()), model="fold")
    assert "not_converged" in fit.flags
    assert not fit.converged
    assert fit.effective_draws < 100


# Options


@pytest.mark.parametrize(
    ("options", "told"),
    [
        ({"model": "parabola"}, "`model` must be one of auto, fold, pair, bump, binary, constant, got 'parabola'"),
        ({"model": ""}, "`model` must be one of"),
        ({"colours": "grey"}, "`colours` must be free or blackbody, got 'grey'"),
        ({"samples": 99}, "`samples` must be between 100 and 1000000, got 99"),
        ({"samples": 10_000_000}, "`samples` must be between 100 and 1000000, got 10000000"),
        ({"colours": "blackbody"}, "colours: a blackbody needs the bands' wavelengths; give an event file"),
        ({"model": "binary"}, "model: the binary model needs the bands' wavelengths; give an event file"),
    ],
)
def test_options_are_checked(options: dict[str, Any], told: str) -> None:
    with pytest.raises(InputError, match=told):
        fit_crossing(two_bands(), **options)


def test_models_are_what_auto_and_the_command_line_offer() -> None:
    assert MODELS == ("auto", "fold", "pair", "bump", "binary", "constant")


def test_samples_are_as_many_as_asked_for() -> None:
    fit = fit_crossing(two_bands(), model="fold", samples=777)
    assert {values.shape for values in fit.samples.values()} == {(777,)}
    assert fit.provenance["options"]["samples"] == 777


def test_priors_can_be_narrowed() -> None:
    priors = FitPriors(radius_time=(1.0, 1.5), time_margin=2.0)
    fit = fit_crossing(two_bands(), model="fold", priors=priors)
    found = fit.samples["radius_time_days"]
    assert found.min() >= 1.0
    assert found.max() <= 1.5
    assert fit.priors["radius_time_days"] == "log-uniform 1 to 1.5"
    # A prior that is 24 times narrower in its logarithm raises the evidence by ln 24, less what it cuts off.
    wide = fit_crossing(two_bands(), model="fold", priors=FitPriors(time_margin=2.0))
    share = np.mean((wide.samples["radius_time_days"] > 1.0) & (wide.samples["radius_time_days"] < 1.5))
    gain = np.log(share * np.log(20_000.0) / np.log(1.5))
    assert fit.ln_evidence - wide.ln_evidence == pytest.approx(gain, abs=0.05)
