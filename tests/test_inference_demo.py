"""The demo events, fitted as a user would, against the truth that is written beside them."""

import json
from pathlib import Path

import numpy as np
import pytest

from crossing import FitPriors, fit_crossing, read_event
from crossing.errors import InputError
from crossing.inference.result import FLAGS, QUANTITIES
from crossing.photometry import LightCurve, read_photometry

CASES = [("four_epochs", "fold"), ("difference", "fold"), ("faint", "fold"), ("pair", "pair")]
DEMO = Path(__file__).parent.parent / "demo_lightcurves"


def load(name):
    return read_event(DEMO / f"{name}.toml"), json.loads((DEMO / f"{name}.truth.json").read_text())


def holds(samples, truth):
    """Whether the samples reach the truth: 4000 of them span four sigma, which all comparisons here should keep."""
    return samples.min() <= truth <= samples.max()


@pytest.fixture(scope="module")
def well_sampled():
    event, truth = load("well_sampled")
    return fit_crossing(event, model="fold"), truth


def test_well_sampled_fold_is_recovered(well_sampled):
    fit, truth = well_sampled
    assert fit.model == truth["model"]
    assert fit.orientation[truth["orientation"]] > 0.999
    assert fit.flags == ()
    for name in ("caustic_time_mjd", "peak_time_mjd", "radius_time_days", "radius_rsun", "temperature_K"):
        assert holds(fit.samples[name], truth[name]), name
    assert holds(fit.samples["peak_magnification"], truth["peak_magnification"])
    assert sum((fit.drivers.photometry, fit.drivers.speed, fit.drivers.angle)) == pytest.approx(1.0, abs=1e-12)


def test_results_show_themselves(well_sampled):
    fit, _ = well_sampled
    document = fit.to_dict()
    json.dumps(document, allow_nan=False)
    assert set(QUANTITIES) <= set(document)
    assert len(fit.to_table()) == sum(one is not None for one in fit.estimates.values())
    assert len(fit.rows_table()) == 60
    assert "Lantern" in fit._repr_html_()
    axes = fit.plot()
    assert axes.get_ylabel().endswith("[nJy]")


@pytest.mark.parametrize(("name", "model"), CASES)
def test_other_crossings_are_recovered(name, model):
    event, truth = load(name)
    fit = fit_crossing(event, model=model)
    assert fit.scores[0].model == model
    for key in ("caustic_time_mjd", "radius_time_days", "radius_rsun"):
        assert holds(fit.samples[key], truth[key]), key
    if model == "pair":
        assert holds(fit.samples["second_caustic_time_mjd"], truth["second_caustic_time_mjd"])
    else:
        assert fit.orientation[truth["orientation"]] > 0.5


def test_faint_event_gives_a_limit_and_says_so():
    fit = fit_crossing(load("faint")[0], model="fold")
    assert fit.radius_time_days.bound == "upper"
    assert "prior_driven" in fit.flags
    assert fit.radius_rsun.limit > fit.radius_rsun.high


def test_impostor_is_a_poor_fit():
    event, _ = load("impostor")
    fit = fit_crossing(event, model="fold")
    assert "poor_fit" in fit.flags
    assert "poor_fit" not in fit_crossing(event, model="fold", extra_scatter=True).flags


def test_same_seed_same_result_and_row_order_does_not_matter():
    event, _ = load("four_epochs")
    one, two = fit_crossing(event, model="fold", seed=3), fit_crossing(event, model="fold", seed=3)
    assert one.to_dict() == two.to_dict()
    curve = read_photometry(event)
    order = np.random.default_rng(0).permutation(len(curve))
    mixed = LightCurve.from_arrays(curve.time[order], curve.band[order], curve.flux[order], curve.flux_err[order])
    plain = LightCurve.from_arrays(curve.time, curve.band, curve.flux, curve.flux_err)
    evidence = [fit_crossing(rows, model="fold").ln_evidence for rows in (plain, mixed)]
    # only the order of sums differs
    assert evidence[0] == pytest.approx(evidence[1], abs=1e-6)


def test_bare_light_curve_gives_times_but_no_star():
    fit = fit_crossing(read_photometry(load("four_epochs")[0]), model="fold")
    assert fit.radius_time_days is not None
    assert fit.radius_rsun is None
    assert fit.temperature_K is None


def test_constant_source_is_no_crossing():
    rng = np.random.default_rng(5)
    curve = LightCurve.from_arrays(60000.0 + np.arange(20), "a", 10 + rng.standard_normal(20), np.ones(20))
    fit = fit_crossing(curve, model="fold")
    assert "no_crossing" in fit.flags
    assert set(fit.flags) <= set(FLAGS)


def test_blackbody_ties_the_bands():
    event, truth = load("four_epochs")
    fit = fit_crossing(event, model="fold", colours="blackbody")
    assert holds(fit.samples["radius_time_days"], truth["radius_time_days"])


@pytest.mark.slow
def test_binary_runs_on_a_single_star_and_is_not_preferred():
    event, _ = load("well_sampled")
    single, double = (fit_crossing(event, model=model) for model in ("fold", "binary"))
    assert double.ln_evidence < single.ln_evidence + 1.0


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"model": "parabola"}, "`model` must be one of"),
        ({"colours": "grey"}, "`colours` must be free or blackbody"),
        ({"samples": 10}, "`samples` must be between"),
    ],
)
def test_options_are_checked(options, words):
    with pytest.raises(InputError, match=words):
        fit_crossing(load("four_epochs")[0], **options)


def test_priors_are_checked():
    with pytest.raises(InputError, match="`radius_time` must be a range"):
        FitPriors(radius_time=(3.0, 1.0))
