"""Every way of giving the macro lens, brought to the steps that use it; and knots taken back through the lens."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from macro_maps import CENTRE, Grid, components, rendered, sky, write_planes

from crossing.cli.main import main
from crossing.errors import InputError
from crossing.event import Event, MacroRecord, MapRecord, Value, read_event
from crossing.inference.star import model_speeds
from crossing.optics.local import local_lenses, sample_eigenvalues
from crossing.optics.macro.intrinsic import intrinsic_knot
from crossing.optics.macro.map_solution import map_solution
from crossing.optics.macro.profiles import ProfileSum, Shear, SoftenedEllipsoid
from crossing.optics.macro.solutions import FLAGS, resolve
from crossing.optics.scales import LensScales
from crossing.shooting.from_event import local_setup
from crossing.shooting.peaks.peak_lens import macro_choices

exact = Value.exact
SCALES = LensScales(0.5, 1.5)
RATIO = SCALES.D_ls / SCALES.D_s
OFFSET = (3.1, 2.3)


def lens(radius: float = 6.0) -> ProfileSum:
    parts = (SoftenedEllipsoid(einstein_radius=radius, axis_ratio=0.7, core=0.6, angle=30.0), Shear(gamma1=0.03))
    return ProfileSum(parts=parts)


def event(*records: MacroRecord, path: str = "event.toml", source: Value | None = None) -> Event:
    return Event(
        name="invented",
        path=Path(path),
        sha256="",
        lens_redshift=exact(0.5),
        source_redshift=source or exact(1.5),
        macro=records,
    )


def mapped(chart: MapRecord, **options) -> MacroRecord:
    return MacroRecord(way="maps", position=sky(*OFFSET), maps=(chart,), place="macro.maps[0]", **options)


@pytest.fixture(scope="module")
def chart(tmp_path_factory) -> MapRecord:
    folder = tmp_path_factory.mktemp("maps")
    profile, grid = lens(), Grid(width=220, height=240, rotation=25.0, flipped=True)
    main_map = rendered(folder, profile, grid)
    for number, radius in enumerate((5.6, 5.8, 6.2, 6.4)):
        write_planes(folder, components(lens(radius), grid), grid, stem=f"r{number}_")
    return replace(main_map, realisations=str(folder / "r?_{plane}.fits"))


class TestMaps:
    def test_central_values(self, chart):
        (model,) = local_lenses(event(mapped(replace(chart, realisations=None))))
        lam_t, lam_r = (float(one) for one in lens().eigenvalues(*OFFSET, scale=RATIO))
        # float32 pixels of 0.05 arcsec through cubic splines.
        assert model.lens.lam_t == pytest.approx(lam_t, abs=1e-4)
        assert model.lens.lam_r == pytest.approx(lam_r, abs=1e-4)
        assert model.fold is not None
        assert model.fold.images == 1
        state = resolve(event(mapped(replace(chart, realisations=None))))[0].central
        angle = np.radians(90 - state.stretch_angle)
        a, b = 1e-3 * np.cos(angle), 1e-3 * np.sin(angle)
        east, north = OFFSET
        for part, (x, y) in zip(state.gradient, ((a, b), (-b, a)), strict=True):
            ahead, behind = (float(lens().eigenvalues(east + k * x, north + k * y, scale=RATIO)[0]) for k in (1, -1))
            assert part == pytest.approx((ahead - behind) / 2e-3, rel=0.01)  # derivative of a spline
        assert model.lens.gradient == pytest.approx(np.array(state.gradient) * SCALES.einstein_radius_arcsec)

    def test_one_map_without_errors_is_certain(self, chart):
        made = event(mapped(replace(chart, realisations=None)))
        assert resolve(made)[0].certain
        draws = sample_eigenvalues(made, np.random.default_rng(1), 50)
        np.testing.assert_allclose(draws.lam_t, local_lenses(made)[0].lens.lam_t, rtol=1e-12)

    def test_error_of_the_position(self, chart):
        record = mapped(replace(chart, realisations=None), position_error=0.05)
        state = resolve(event(record))[0].central
        lam_t = sample_eigenvalues(event(record), np.random.default_rng(1), 20_000).lam_t
        # |grad lam_t| times the error of each coordinate; the map is not quite linear on it.
        assert lam_t.std() == pytest.approx(0.05 * np.hypot(*state.gradient), rel=0.05)
        assert not resolve(event(record))[0].certain

    def test_realisations(self, chart):
        draws = resolve(event(mapped(chart)))[0].draw_local(np.random.default_rng(1), 4000)
        expected = [float(lens(r).eigenvalues(*OFFSET, scale=RATIO)[0]) for r in (5.6, 5.8, 6.2, 6.4)]
        found, counts = np.unique(draws.lam_t, return_counts=True)
        np.testing.assert_allclose(found, np.sort(expected), atol=1e-4)
        # A quarter each: five standard errors.
        np.testing.assert_allclose(counts / 4000, 0.25, atol=5 * np.sqrt(0.1875 / 4000))

    def test_uncertain_redshift_of_the_source(self, chart):
        record = mapped(replace(chart, realisations=None))
        uncertain = event(record, source=Value.normal(1.5, 0.1))
        lam_t = sample_eigenvalues(uncertain, np.random.default_rng(1), 4000).lam_t
        ends = []
        for z in (1.4, 1.6):
            far = LensScales(0.5, z)
            ends.append(float(lens().eigenvalues(*OFFSET, scale=far.D_ls / far.D_s)[0]))
        # One standard deviation each way, to the error of 4000 draws.
        assert lam_t.std() == pytest.approx(abs(ends[1] - ends[0]) / 2, rel=0.06)

    def test_alternatives_keep_their_weights(self, chart):
        one = mapped(replace(chart, realisations=None), weight=1.0)
        other = MacroRecord(way="kappa+gamma", kappa=exact(0.7), gamma=exact(0.2), weight=3.0)
        models = local_lenses(event(one, other))
        assert [model.weight for model in models] == [0.25, 0.75]
        assert sample_eigenvalues(event(one, other), np.random.default_rng(1), 4000).model.mean() == pytest.approx(
            0.75, abs=5 * np.sqrt(0.1875 / 4000)
        )

    def test_kept_until_a_file_changes(self, chart, tmp_path):
        grid = Grid(width=120, height=120)
        record = mapped(rendered(tmp_path, lens(), grid), name="kept")
        record = replace(record, position=sky(1.5, 1.0))
        first = resolve(event(record))[0]
        assert resolve(event(record))[0] is first
        rendered(tmp_path, lens(5.0), grid)
        assert resolve(event(record))[0].central.lam_t != first.central.lam_t

    def test_kept_until_a_realisation_changes(self, tmp_path):
        grid = Grid(width=120, height=120)
        own = rendered(tmp_path, lens(), grid)
        write_planes(tmp_path, components(lens(5.8), grid), grid, stem="r0_")
        chart = replace(own, realisations=str(tmp_path / "r?_{plane}.fits"))
        record = replace(mapped(chart, name="kept"), position=sky(1.5, 1.0))
        first = resolve(event(record))[0]
        assert resolve(event(record))[0] is first
        write_planes(tmp_path, components(lens(6.4), grid), grid, stem="r1_")
        assert len(resolve(event(record))[0].realisations) == 2

    def test_bad_input(self, chart):
        single = replace(chart, realisations=None)
        nowhere = replace(single, planes={**single.planes, "shear1": "/nowhere/g1.fits"})
        with pytest.raises(InputError, match=r"nowhere/g1\.fits"):
            local_lenses(event(mapped(nowhere)))
        with pytest.raises(
            InputError,
            match=r"event\.toml: macro\.maps\[0\]: `position_error` must keep the position on .* \d+ of 500 drawn",
        ):
            sample_eigenvalues(event(mapped(single, position_error=5.0)), np.random.default_rng(1), 500)
        with pytest.raises(InputError, match=r"event\.toml: macro\.maps\[0\]: must go with the redshifts of lens and"):
            local_lenses(replace(event(mapped(single)), source_redshift=None))
        with pytest.raises(InputError, match="must hold the maps of one lens model and the position; read the event"):
            map_solution(event(), MacroRecord(way="maps", maps=(single, single), position=CENTRE))
        with pytest.raises(InputError, match=r"`position` must lie on the map, got RA .* outside"):
            local_lenses(event(replace(mapped(single), position=sky(60.0, 0.0))))


def test_certainty_of_numbers():
    gradient = (Value.normal(0.05, 0.01), exact(0.0))
    base = {"way": "kappa+gamma", "kappa": exact(0.7), "gamma": exact(0.2)}
    one, two = resolve(event(MacroRecord(**base), MacroRecord(**base, gradient=gradient)))
    assert (one.certain, two.certain) == (True, False)
    assert (one.flags, one.name) == ((), None)
    draws = two.draw_local(np.random.default_rng(1), 4000)
    assert draws.gradient_x.std() == pytest.approx(0.01, rel=0.1)
    assert np.all(draws.gradient_y == 0)
    assert np.all(np.isnan(one.draw_local(np.random.default_rng(1), 3).gradient_x))
    assert [choice.certain for choice in macro_choices(event(MacroRecord(**base)))] == [True]


def test_every_flag_has_a_meaning():
    assert all(text and not text.endswith(".") for text in FLAGS.values())


class TestIntrinsic:
    record = MacroRecord(
        way="mu_t+mu_r", mu_t=exact(20.0), mu_r=exact(2.0), gradient=(exact(0.1), exact(0.0)), name="A"
    )

    def test_by_one_exact_lens(self):
        knot = intrinsic_knot(event(self.record), flux=exact(400.0), along=exact(0.2), across=exact(0.1))
        assert knot.flux.median == pytest.approx(400 / 40)
        assert knot.along.median == pytest.approx(0.2 / 20)
        assert knot.across.median == pytest.approx(0.1 / 2)
        pc = 1e3 * SCALES.kpc_per_arcsec_source * np.sqrt(0.01 * 0.05)
        assert knot.radius_pc.median == pytest.approx(pc)
        assert knot.models == ()
        assert knot.to_table()["flux"][0] == knot.flux.median
        assert json.loads(json.dumps(knot.to_dict()))["name"] == "A"

    def test_image_across_the_critical_curve(self):
        # |lam_t + T x| = |0.1 x| over |x| < 0.6: its mean is 0.03; with lam_t = 0.05 at the middle, (T**2 s**2 ...)/2.
        on = replace(self.record, way="critical_distance", mu_t=None, critical_distance=exact(0.0))
        assert intrinsic_knot(event(on), along=exact(0.6)).along.median == pytest.approx(0.6 * 0.03)
        knot = intrinsic_knot(event(self.record), along=exact(0.6))
        x = np.linspace(-0.6, 0.6, 200_001)
        assert knot.along.median == pytest.approx(0.6 * np.mean(np.abs(0.05 + 0.1 * x)), rel=1e-5)

    def test_spread_stays_finite_on_the_critical_curve(self):
        record = replace(self.record, way="critical_distance", mu_t=None, critical_distance=Value.normal(0.0, 0.2))
        knot = intrinsic_knot(event(record), flux=Value.normal(400, 40, lower=0))
        # |lam_t| is half-normal with 0.02: its median is 0.6745 of that.
        assert knot.flux.median == pytest.approx(400 * 0.5 * 0.02 * 0.6745, rel=0.06)
        assert knot.flux.high < 400 * 0.5 * 0.02 * 2

    def test_pooled_over_models(self):
        other = replace(self.record, name="B", mu_t=exact(40.0), weight=3.0)
        knot = intrinsic_knot(event(self.record, other), flux=exact(400.0))
        assert [one.name for one in knot.models] == ["A", "B"]
        assert [one.flux.median for one in knot.models] == pytest.approx([10, 5])
        assert knot.flux.median == pytest.approx(5)
        assert knot.flux.high == pytest.approx(10)
        assert knot.along is None
        assert len(knot.to_table()) == 3

    def test_elsewhere_on_the_map(self, chart):
        record = mapped(replace(chart, realisations=None))
        place = (2.9, 1.7)
        knot = intrinsic_knot(event(record), flux=exact(1.0), position=sky(*place))
        expected = abs(float(np.prod(lens().eigenvalues(*place, scale=RATIO))))
        assert knot.flux.median == pytest.approx(expected, abs=2e-4)

    def test_bad_input(self):
        with pytest.raises(InputError, match="macro: must be given for this; add kappa and gamma"):
            intrinsic_knot(event())
        with pytest.raises(InputError, match="`position` must be given for models to hold elsewhere; add it, or leave"):
            intrinsic_knot(event(self.record), position=CENTRE)
        with pytest.raises(InputError, match="must say how the lens changes, got numbers for one place; leave out"):
            intrinsic_knot(event(replace(self.record, position=CENTRE)), position=CENTRE)


WAYS = {
    "velocity_dispersion": 'velocity_dispersion = {value = "900 km / s", error = "40 km / s"}\n'
    'centre = ["150.1 deg", "2.195 deg"]\naxis_ratio = 0.7\nangle = "40 deg"\n',
    "mirror_pairs": 'centre = ["150.1 deg", "2.195 deg"]\n'
    + "".join(
        f'[[macro.mirror_pairs]]\nposition1 = ["{150.1 + a / 3600:.7f} deg", "{2.2 + b / 3600:.7f} deg"]\n'
        f'position2 = ["{150.1 - a / 3600:.7f} deg", "{2.2 + (b + 0.2) / 3600:.7f} deg"]\nposition_error = "20 mas"\n'
        "magnification = {value = 30, error = 8}\n"
        for a, b in ((0.4, 0.1), (0.5, 1.2))
    ),
}


@pytest.mark.parametrize("way", [*WAYS, "maps"])
def test_commands_take_every_way(way, chart, tmp_path, capsys):
    place = 'position = ["150.1 deg", "2.2 deg"]\nposition_error = "50 mas"\n'
    macro = WAYS.get(way)
    if macro is None:
        ra, dec = sky(*OFFSET)
        place = f'position = ["{ra:.8f} deg", "{dec:.8f} deg"]\nposition_error = "50 mas"\n'
        macro = "[[macro.maps]]\nnormalised = true\n" + "".join(
            f'{key} = "{name}"\n' for key, name in chart.planes.items()
        )
    path = tmp_path / "event.toml"
    path.write_text(
        '[event]\nname = "invented"\n[lens]\nredshift = 0.5\n[source]\nredshift = 1.5\n'
        f"[macro]\n{place}{macro}\n[[microlenses]]\nkappa_star = 0.005\n"
        '[motion]\nspeed = "500 km / s"\nangle = "20 deg"\n'
    )
    made = read_event(path)
    draws = sample_eigenvalues(made, np.random.default_rng(1), 500)
    assert np.all(np.isfinite(draws.lam_t))
    assert np.std(draws.lam_t) > 1e-4
    # What maps, tracks and the library start from, and what a fit needs of the macro lens.
    assert np.isfinite(local_setup(made).lens.kappa)
    ((_, weight, speeds),) = model_speeds(made, np.random.default_rng(1), 200)
    assert weight == 1
    assert np.all(speeds > 0)
    status = main(["peak", str(path), "--out", str(tmp_path / "out"), "--precision", "0.5", "--tracks", "24", "--json"])
    assert status in (0, 3)
    rows = json.loads(capsys.readouterr().out)["rows"]
    assert all(row["mu_peak_smooth"] for row in rows)
