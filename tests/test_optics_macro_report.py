"""Everything about the macro lens in one report: values by model and pooled, intervals, ways of giving the lens."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import crossing
from crossing.errors import InputError
from crossing.event import read_event
from crossing.optics.local import LocalLens
from crossing.optics.macro.halo_map import halo_map
from crossing.optics.macro.macro_describe import default_redshifts, describe_macro
from crossing.optics.macro.macro_draws import fold_draws
from crossing.optics.macro.macro_interval import axis_interval, interval, reciprocal, weighted_quantiles
from crossing.optics.macro.macro_report import FLAGS, NOTES, QUANTITIES, MacroReport
from crossing.optics.macro.profiles import SoftenedEllipsoid
from crossing.optics.macro.sky_frame import offsets_from_sky
from crossing.optics.macro.solutions import resolve
from crossing.optics.macro.state import LocalDraws
from crossing.optics.scales import LensScales

DEMO = Path(__file__).parent.parent / "demo_lightcurves"
SCENE = '[event]\nname = "knot"\n[lens]\nredshift = 0.43\n[source]\nredshift = 1.21\n'
ONES = np.ones(5)
HALO = (
    'axis_ratio = 0.7\nangle = "30 deg"\ncore = "2 arcsec"\nshear = 0.05\nshear_angle = "80 deg"\n'
    'centre = ["151.2 deg", "-4.7 deg"]\n'
)


def report(folder: Path, macro: str, scene: str = SCENE, **options: object) -> MacroReport:
    (folder / "event.toml").write_text(scene + macro)
    return describe_macro(read_event(folder / "event.toml"), **options)  # type: ignore[arg-type]


@pytest.fixture(scope="module")
def two_models() -> MacroReport:
    return describe_macro(read_event(DEMO / "two_models.toml"), 3)


@pytest.fixture(scope="module")
def knots() -> MacroReport:
    return describe_macro(read_event(DEMO / "mirrored_knots.toml"), 3)


def truth(name: str) -> dict[str, dict[str, float]]:
    found: dict[str, dict[str, float]] = json.loads((DEMO / f"{name}.truth.json").read_text())["macro"]
    return found


# Intervals


def test_weighted_quantiles_are_the_smallest_values_that_reach_the_share() -> None:
    values, weight = np.array([3.0, 1.0, 2.0]), np.array([0.25, 0.25, 0.5])
    assert weighted_quantiles(values, weight, (0.2, 0.25, 0.26, 0.75, 0.76)) == (1.0, 1.0, 2.0, 2.0, 3.0)


@settings(derandomize=True, deadline=None, max_examples=60)
@given(st.lists(st.floats(-10, 10).filter(lambda x: abs(x) > 1e-6), min_size=5, max_size=40))
def test_inverse_intervals_hold_what_they_say(numbers: list[float]) -> None:
    x = np.array(numbers)
    found = reciprocal(x, np.ones(len(x)))
    assert found is not None
    if found.bound == "two-sided":
        assert found.low is not None
        assert found.high is not None
        assert found.low <= found.median <= found.high
        assert found.low * found.high > 0
    else:
        limit = found.low if found.bound == "lower" else found.high
        assert limit is not None
        # At least 84% of the draws are this large in size, to one draw.
        assert np.mean(np.abs(1 / x) >= abs(limit) * (1 - 1e-12)) >= 0.84 - 1 / len(x)
        assert abs(found.median) >= abs(limit)


def test_no_draw_at_infinity_rules_the_interval() -> None:
    found = reciprocal(np.array([0.01, 0.01, 0.02, 0.02, 1e-9]), ONES)
    assert found is not None
    # 1/0.01 in the middle; the one outlier is beyond the 84th percentile's neighbour but not beyond bounds.
    assert found.median == pytest.approx(100.0)
    assert reciprocal(np.zeros(5), ONES) is None
    assert reciprocal(np.full(5, np.nan), ONES) is None
    assert interval(np.full(5, np.nan), ONES) is None


def test_axes_do_not_wrap() -> None:
    found = axis_interval(np.array([178.0, 179.0, 0.0, 1.0, 2.0]), ONES)
    assert found is not None
    assert found.median % 180 == pytest.approx(0.0, abs=1e-9)
    assert found.high is not None
    assert found.low is not None
    assert found.high - found.low == pytest.approx(4.0)


# The linear expansion


def test_fold_draws_keep_to_the_local_quadratic_lens() -> None:
    rng = np.random.default_rng(5)
    lam_t, lam_r, gx, gy = rng.normal(0, 0.02, 50), rng.uniform(0.4, 0.7, 50), rng.normal(0, 0.05, 50), 0.03
    draws = fold_draws(LocalDraws(lam_t, lam_r, gx, np.full(50, gy), np.full(50, 20.0)))
    x, y, g, h = draws.mirror_x, draws.mirror_y, draws.gradient_x, draws.gradient_y
    settled = y != 0
    assert settled.mean() > 0.8
    # The mirror image has the same source: u = v = 0 (derived here from the map in the notes of `fold_draws`).
    np.testing.assert_allclose((lam_t * x + g * x**2 / 2 + h * x * y)[settled], 0, atol=2e-5)
    np.testing.assert_allclose((lam_r * y + h * x**2 / 2)[settled], 0, atol=2e-5)
    np.testing.assert_allclose(draws.gradient_x * draws.critical_distance, lam_t, rtol=1e-12)
    assert np.all(draws.gradient_x >= 0)
    assert np.array_equal(np.sign(draws.critical_distance_perp), np.sign(lam_t))


def test_directions_on_the_sky() -> None:
    one = np.array([0.01]), np.array([0.6]), np.array([0.05]), np.array([0.02])
    east, north = fold_draws(LocalDraws(*one, np.array([90.0]))).gradient_sky
    # x points east, so that y, a quarter turn from there counted from east to north, points north.
    assert (float(east[0]), float(north[0])) == pytest.approx((0.05, 0.02))
    flipped = fold_draws(LocalDraws(one[0], one[1], -one[2], -one[3], np.array([270.0])))
    assert [float(part[0]) for part in flipped.gradient_sky] == pytest.approx([0.05, 0.02])


# Numbers


def test_kappa_and_gamma_alone(tmp_path: Path) -> None:
    found = report(tmp_path, "[macro]\nkappa = 0.7\ngamma = 0.28\n", '[event]\nname = "knot"\n')
    lens = LocalLens(0.7, 0.28)
    for name in ("lam_t", "lam_r", "mu_t", "mu_r", "mu"):
        value = getattr(found, name)
        assert value.median == value.low == value.high == pytest.approx(getattr(lens, name))
    assert (found.parity, found.images, found.flags) == ("minimum", 1, ())
    document = found.to_dict()
    assert document["critical_distance_arcsec"] is None
    assert document["absent"]["critical_distance_arcsec"].startswith("no gradient of lam_t is given")
    assert document["absent"]["einstein_radius_uas"].startswith("needs the redshifts of lens and source")
    absent = {key for name, (key, _) in QUANTITIES.items() if getattr(found, name) is None}
    assert absent <= document["absent"].keys()


@pytest.mark.parametrize(
    ("macro", "lam_t", "images"),
    [
        ('critical_distance = "0.3 arcsec"\ngradient = "0.05 / arcsec"\nmu_r = 1.9\n', 0.015, 1),
        ('critical_distance = "-0.3 arcsec"\ngradient = "0.05 / arcsec"\nmu_r = 1.9\n', -0.015, 1),
        (
            'caustic_distance = "0.00225 arcsec"\ngradient = "0.05 / arcsec"\nmu_r = 1.9\nside = "saddle"\n',
            -0.015,
            1,
        ),
        ('caustic_distance = "0.00225 arcsec"\ngradient = "0.05 / arcsec"\nmu_r = 1.9\nside = "pair"\n', 0.015, 2),
        ('kappa = 0.735\ngamma = 0.25\ngradient = "-0.05 / arcsec"\n', 0.015, 1),
    ],
)
def test_numbers_with_a_gradient(macro: str, lam_t: float, images: int, tmp_path: Path) -> None:
    found = report(tmp_path, f"[macro]\n{macro}")
    assert found.lam_t is not None
    assert found.gradient is not None
    assert found.critical_distance is not None
    assert found.caustic_distance is not None
    assert found.pair_magnification is not None
    assert found.fold_strength is not None
    assert found.lam_t.median == pytest.approx(lam_t)
    assert found.images == images
    # Both conventions at once: lam_t = gradient x distance, and > 0 on the minimum side.
    assert found.gradient.median * found.critical_distance.median == pytest.approx(lam_t)
    assert found.critical_distance.median == pytest.approx(np.sign(lam_t) * 0.3)
    # T s**2 / 2 = 0.05 * 0.09 / 2, and both images |mu_r| / (T s) each at the same distance s (Schneider et al. 1992).
    assert found.caustic_distance.median == pytest.approx(0.00225)
    assert found.lam_r is not None
    assert found.pair_magnification.median == pytest.approx(2 / (0.015 * found.lam_r.median), rel=1e-9)
    scales = LensScales(0.43, 1.21)
    assert found.pair_delay is not None
    assert found.pair_delay.median == pytest.approx(scales.time_delay_factor * 0.05 * 0.6**3 / 12)
    assert found.einstein_radius_uas == pytest.approx(scales.einstein_radius_uas)


def test_on_the_critical_curve_the_magnification_is_null_and_flagged(tmp_path: Path) -> None:
    found = report(tmp_path, '[macro]\nkappa = 0.7\ngamma = 0.3\ngradient = "0.05 / arcsec"\n')
    assert found.mu is None
    assert (found.parity, found.flags) == ("critical", ("mu_diverges",))
    assert found.absent["mu"] == "infinite on the critical curve"
    assert found.critical_distance is not None
    assert found.critical_distance.median == 0.0


@pytest.mark.parametrize(
    ("lam_t", "flags"), [(2e-6, ("on_critical_curve",)), (-2e-6, ("on_critical_curve",)), (2e-5, ())]
)
def test_next_to_the_critical_curve_the_magnification_is_flagged(
    tmp_path: Path, lam_t: float, flags: tuple[str, ...]
) -> None:
    found = report(tmp_path, f"[macro]\nmu_t = {1 / lam_t!r}\nmu_r = 2\n")
    assert found.flags == flags


def test_the_spread_is_in_lam_t_and_passes_through_zero(tmp_path: Path) -> None:
    found = report(
        tmp_path,
        '[macro]\ncritical_distance = {value = "0.05 arcsec", error = "0.1 arcsec"}\n'
        'gradient = "0.05 / arcsec"\nmu_r = 2\n',
    )
    assert "mu_diverges" in found.flags
    # A normal distribution is above zero by ndtr(0.5) = 0.6915; 16384 draws scatter by 0.0036.
    assert found.parity_probabilities["minimum"] == pytest.approx(0.6915, abs=0.015)
    assert found.parity_probabilities["saddle"] == pytest.approx(0.3085, abs=0.015)
    assert found.mu is not None
    assert (found.mu.bound, found.mu.high) == ("lower", None)
    assert found.magnification is not None
    # ndtr((q - 0.05) / 0.1) - ndtr((-q - 0.05) / 0.1) = 0.84 at q = 0.15758, solved here: |d| < q holds 84%.
    assert found.magnification.low == pytest.approx(2 / (0.05 * 0.15758), rel=0.02)
    assert found.lam_t is not None
    assert found.lam_t.median == pytest.approx(0.0025, abs=1.5e-4)


def test_one_outlier_does_not_rule(tmp_path: Path) -> None:
    models = [f"[[macro.models]]\nmu_t = {mu}\nmu_r = 2\n" for mu in (50, 55, 60, 65)]
    without = report(tmp_path, "".join(models))
    found = report(tmp_path, "".join(models) + "[[macro.models]]\nmu_t = 1e9\nmu_r = 2\n")
    assert without.lam_t is not None
    assert found.lam_t is not None
    assert found.lam_t.median == pytest.approx(without.lam_t.median, rel=0.1)
    assert found.mu is not None
    # The mean of mu would be 4e8.
    assert found.mu.median < 150
    assert "models_disagree" in found.notes


def test_weights_of_models_and_of_both_sides(tmp_path: Path) -> None:
    found = report(
        tmp_path,
        '[[macro.models]]\nname = "a"\nweight = 3\nmu_t = 50\nmu_r = 2\n'
        '[[macro.models]]\nname = "b"\nmu_t = -80\nmu_r = 2\n',
    )
    assert [(one.name, one.weight) for one in found.models] == [("a", 0.75), ("b", 0.25)]
    assert found.parity_probabilities == {"minimum": 0.75, "saddle": 0.25}
    assert found.parity == "minimum"
    # The 16th percentile of lam_t is that of the saddle: the magnification has no end.
    assert found.flags == ("mu_diverges",)


# Maps


def test_both_maps_tell_what_their_closed_forms_say(two_models: MacroReport) -> None:
    assert [one.name for one in two_models.models] == ["Alder", "Birch"]
    assert two_models.flags == ()
    assert set(two_models.notes) == {"models_disagree"}
    for model in two_models.models:
        true = truth("two_models")[model.name]
        point = model.point
        assert point is not None
        # Float32 pixels of 0.36 arcsec next to a galaxy: far coarser than those of the maps of models.
        assert point.lam_t == pytest.approx(true["lam_t"], abs=2e-4)
        assert point.lam_r == pytest.approx(true["lam_r"], rel=1e-3)
        assert point.gradient[0] == pytest.approx(true["gradient_per_arcsec"], rel=0.02)
        assert point.mirror_position is not None
        shift = np.hypot(*offsets_from_sky(tuple(true["mirror_position_deg"]), *point.mirror_position))  # type: ignore[arg-type]
        assert shift < 0.02
        assert point.pair_delay == pytest.approx(true["pair_delay_days"], rel=0.05)
        # Medians over a position error of 0.06 arcsec lie near the values at the position itself.
        assert model.lam_t is not None
        assert model.lam_t.median == pytest.approx(true["lam_t"], rel=0.03)
        assert model.pair_separation is not None
        assert model.pair_separation.median == pytest.approx(true["pair_separation_arcsec"], rel=0.03)


def test_draws_at_the_position_are_the_maps_own(tmp_path: Path) -> None:
    text = (DEMO / "two_models.toml").read_text().replace('position_error = "0.06 arcsec"\n', "")
    (tmp_path / "event.toml").write_text(text.replace('"two_models', f'"{DEMO}/two_models'))
    found = describe_macro(read_event(tmp_path / "event.toml"))
    for model in found.models:
        point, best = model.point, model.point and model.point.best
        assert point is not None
        assert best is not None
        assert best.mirror is not None
        assert "no_position_error" in model.notes
        wanted = {
            "critical_distance": best.critical_distance,
            "critical_distance_perp": best.critical_distance_perp,
            "fold_strength": best.fold_strength,
            "caustic_distance": best.caustic_distance,
            "mirror_east": best.mirror[0],
            "mirror_north": best.mirror[1],
            "pair_delay": point.pair_delay,
        }
        for name, value in wanted.items():
            # Differences of splines over 1e-3 pixels against their derivatives.
            assert getattr(model, name).median == pytest.approx(value, rel=1e-4), name


def test_pooled_values_lie_between_the_models(two_models: MacroReport) -> None:
    for name in ("lam_t", "critical_distance", "caustic_distance", "pair_delay"):
        medians = sorted(getattr(model, name).median for model in two_models.models)
        assert medians[0] <= getattr(two_models, name).median <= medians[1]
        assert getattr(two_models, name).low < medians[0] * 1.05
        assert getattr(two_models, name).high > medians[1] * 0.95


def test_farther_sources_have_larger_critical_curves(two_models: MacroReport) -> None:
    near, own, far = default_redshifts(LensScales(0.43, 1.21))
    assert near < own == 1.21 < far
    for curves in two_models.curves:
        areas = [sum(line.area for line in curves.of_source(z, "tangential")) for z in (near, own, far)]
        assert areas == sorted(areas)
    table = two_models.lines_table()
    assert table is not None
    assert {"model", "ra", "dec", "curve", "kind", "source_redshift"} <= set(table.colnames)
    assert set(table["model"]) == {"Alder", "Birch"}


def test_a_source_redshift_must_lie_behind_the_lens() -> None:
    event = read_event(DEMO / "two_models.toml")
    with pytest.raises(InputError, match=r"source redshifts must lie behind the lens at 0\.43, got 0\.3"):
        describe_macro(event, source_redshifts=[0.3, 2.0])
    with pytest.raises(InputError, match="source redshifts must be 20 at most, got 21"):
        describe_macro(event, source_redshifts=[1.0] * 21)


# A halo


def test_a_halo_is_rendered_and_its_fold_followed(tmp_path: Path) -> None:
    position = 'position = ["151.2014 deg", "-4.6967 deg"]\n'
    found = report(tmp_path, f'[macro]\nvelocity_dispersion = "900 km/s"\n{HALO}{position}')
    (model,) = found.models
    assert model.point is not None
    state = resolve(read_event(tmp_path / "event.toml"))[0].central
    # The map of 600 pixels against the closed form.
    assert model.point.lam_t == pytest.approx(state.lam_t, abs=1e-5)
    assert model.point.lam_r == pytest.approx(state.lam_r, rel=1e-5)
    assert found.curves[0].of_source(1.21, "tangential")
    assert model.dispersion is not None
    assert model.dispersion.median == 900.0


def test_a_rendered_halo_has_the_einstein_ring_of_its_formula(tmp_path: Path) -> None:
    found = report(
        tmp_path,
        '[macro]\nvelocity_dispersion = "900 km/s"\ncentre = ["151.2 deg", "-4.7 deg"]\n'
        'position = ["151.2 deg", "-4.6945 deg"]\n',
    )
    scales = LensScales(0.43, 1.21)
    # 4 pi (sigma/c)**2 D_ls/D_s of an isothermal sphere
    radius = 4 * np.pi * (900 / 299_792.458) ** 2 * scales.D_ls / scales.D_s * 206_264.806
    (line,) = found.curves[0].of_source(1.21, "tangential")
    assert np.hypot(line.x, line.y - 0.0).min() > 0
    assert np.sqrt(line.area / np.pi) == pytest.approx(radius, rel=1e-4)
    assert "round_halo" in found.notes
    assert found.critical_distance is None
    assert found.critical_distance_perp is not None
    assert found.critical_distance_perp.median == pytest.approx(19.8 - radius, rel=1e-3)
    assert found.absent["critical_distance_arcsec"].startswith("lam_t does not change along the stretch")


def test_the_profile_of_a_halo_is_what_its_solution_uses(tmp_path: Path) -> None:
    position = 'position = ["151.2014 deg", "-4.6967 deg"]\n'
    for extra in (HALO, 'profile = "nfw"\nconcentration = 5\nshear = 0.05\nshear_angle = "80 deg"\n' + HALO[-36:]):
        (tmp_path / "event.toml").write_text(f'{SCENE}[macro]\nvelocity_dispersion = "900 km/s"\n{extra}{position}')
        (solution,) = resolve(read_event(tmp_path / "event.toml"))
        x, y = solution.offset  # type: ignore[attr-defined]
        lam_t, lam_r = solution.profile.eigenvalues(x, y)  # type: ignore[attr-defined]
        assert float(lam_t) == pytest.approx(solution.central.lam_t, abs=1e-12)
        assert float(lam_r) == pytest.approx(solution.central.lam_r, abs=1e-12)


def test_halo_maps_hold_the_curves_of_the_farthest_sources(tmp_path: Path) -> None:
    (tmp_path / "event.toml").write_text(
        f'{SCENE}[macro]\nvelocity_dispersion = "900 km/s"\n{HALO}position = ["151.2014 deg", "-4.6967 deg"]\n'
    )
    (solution,) = resolve(read_event(tmp_path / "event.toml"))
    small, large = (halo_map(solution, scale) for scale in (1.0, 1.5))  # type: ignore[arg-type]
    assert large.frame_at(large.centre).pixel_size > small.frame_at(small.centre).pixel_size
    assert isinstance(solution.profile.parts[0], SoftenedEllipsoid)  # type: ignore[attr-defined]


# Mirrored knots


def test_mirrored_knots_hold_the_truth(knots: MacroReport) -> None:
    true = truth("mirrored_knots")
    (model,) = knots.models
    assert model.line is not None
    assert len(model.pairs) == 3
    assert knots.flags == ()
    for name, key in (("lam_t", "lam_t"), ("lam_r", "lam_r"), ("pair_separation", "pair_separation_arcsec")):
        value = getattr(knots, name)
        error = (value.high - value.low) / 2
        # Positions with errors and a lens that is not quadratic: within three standard deviations.
        assert abs(value.median - float(true[key])) < 3 * error, name  # type: ignore[arg-type]
    assert knots.mirror_position is not None
    place = tuple(true["mirror_position_deg"])
    assert np.hypot(*offsets_from_sky(place, *knots.mirror_position)) < 0.15  # type: ignore[arg-type]
    assert knots.lines_table() is None


# How a report shows itself


@pytest.mark.parametrize("name", ["two_models", "knots"])
def test_reports_show_themselves(name: str, request: pytest.FixtureRequest) -> None:
    found: MacroReport = request.getfixturevalue(name)
    document = found.to_dict()
    json.dumps(document, allow_nan=False)
    assert {"lam_t", "mu", "parity", "images", "mirror_position_deg"} <= document.keys()
    table = found.to_table()
    assert len(table) == len(found.models) + 1
    assert table["model"][-1] == "pooled"
    assert table["lam_t_median"][-1] == found.lam_t.median  # type: ignore[union-attr]
    assert str(table["critical_distance_arcsec_median"].unit) == "arcsec"
    assert "pooled" in found._repr_html_()
    axes = found.plot()
    assert axes.xaxis_inverted()
    assert axes.get_xlabel() == "east of the event [arcsec]"


def test_the_same_seed_gives_the_same_numbers(two_models: MacroReport) -> None:
    again = describe_macro(read_event(DEMO / "two_models.toml"), 3)
    assert again.to_dict() == two_models.to_dict()
    other = describe_macro(read_event(DEMO / "two_models.toml"), 4)
    assert other.lam_t != two_models.lam_t


def test_it_is_public() -> None:
    assert crossing.describe_macro is describe_macro
    assert not FLAGS.keys() & NOTES.keys()


def test_an_event_without_macro_lens(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="macro: must be given for this"):
        report(tmp_path, "")
