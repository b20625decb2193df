"""Star fields out of event files: lens, populations and scales."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.event import read_event
from crossing.optics.scales import LensScales
from crossing.shooting.from_event import LocalSetup, local_setup
from crossing.shooting.maps.magnification_map import MagnificationMap
from crossing.shooting.peaks.peak_lens import macro_choices

HEAD = '[event]\nname = "knot"\n'
REDSHIFTS = "[lens]\nredshift = 0.5\n[source]\nredshift = 1.5\n"
MACRO = "[macro]\nkappa = 0.7\ngamma = 0.25\n"
STARS = "[[microlenses]]\nkappa_star = 0.05\n"
FOLD = '[macro]\ncaustic_distance = "2e-6 arcsec"\ngradient = "0.1 / arcsec"\nmu_r = 2\n'


@pytest.fixture
def event(tmp_path: Path) -> Any:
    def read(*parts: str, **options: Any) -> LocalSetup:
        path = tmp_path / "event.toml"
        path.write_text(HEAD + "".join(parts))
        return local_setup(read_event(path), **options)

    return read


def chart(size: float) -> MagnificationMap:
    return MagnificationMap(
        values=np.ones((4, 4)),
        center=(0, 0),
        width=size,
        height=size,
        method="area",
        accuracy=1e-3,
        error_estimate=1e-4,
    )


def test_the_smallest_event(event: Any) -> None:
    setup = event(MACRO, STARS)
    assert (setup.lens.kappa, setup.lens.gamma, setup.lens.gradient) == pytest.approx((0.7, 0.25, None))
    assert setup.kappa_star == 0.05
    assert setup.populations[0].mass_function.name == "kroupa"
    assert (setup.parsec_per_einstein, setup.days_per_einstein, setup.gradient) == (None, None, None)
    assert setup.macro_change(5.0, 5.0) is None


def test_surface_brightness_and_its_error_in_draws(event: Any) -> None:
    """26 mag/arcsec2 at 1.25 um: Sun's 4.5 at 0.833 um, by hand; an error of 0.2 mag spreads draws by 20%."""
    light = (
        '[bands.red]\nwavelength = "1.25 um"\n[[microlenses]]\nband = "red"\nmass_to_light = "2 solMass / solLum"\n'
        'surface_brightness = {value = "26 mag / arcsec2", error = "0.2 mag / arcsec2"}\n'
    )
    setup = event(REDSHIFTS, MACRO, light)
    by_hand = 2 * 10 ** (-0.4 * (26 - 4.51 - 21.572)) * 1.5**3 / 2267.1361
    assert setup.kappa_star == pytest.approx(by_hand, rel=0.01)  # the Sun's magnitude to 0.01
    (choice,) = macro_choices(setup.event)
    assert not choice.certain
    drawn = np.log([draw.kappa_star for draw in choice.draws(200, 1)])
    # Halton points fill the axis evenly; 200 of them leave a few per cent.
    assert np.std(drawn) == pytest.approx(0.4 * np.log(10) * 0.2, rel=0.05)
    assert np.mean(drawn) == pytest.approx(np.log(setup.kappa_star), abs=0.01)


def test_surface_density_over_the_critical_one(event: Any) -> None:
    # Sigma_crit of Planck18 at 0.5 and 1.5 is 2267.1361 Msun/pc^2: 22.671361 at mu_t = 100, in the working sheet of
    # numbers (astropy distances, c^2 D_s / (4 pi G D_l D_ls)).
    stars = '[[microlenses]]\nsurface_density = "22.671361 solMass / pc2"\nmass_function = "salpeter"\n'
    dark = '[[microlenses]]\nkappa_star = 0.02\nmean_mass = "30 solMass"\n'
    setup = event(REDSHIFTS, MACRO, stars, dark)
    assert [part.kappa_star for part in setup.populations] == pytest.approx([0.01, 0.02], rel=1e-6)
    assert [part.mass_function.name for part in setup.populations] == ["salpeter", "single"]
    assert setup.kappa_star == pytest.approx(0.03, rel=1e-6)


def test_lengths_in_parsec_and_days(event: Any) -> None:
    scales = LensScales(0.5, 1.5)
    setup = event(REDSHIFTS, MACRO, STARS, '[motion]\nspeed = "1000 km / s"\n')
    # theta_E = 1.8835053 microarcsec (working sheet) at D_s of the source
    radius = scales.D_s * 1e6 * np.radians(1.8835053e-6 / 3600)
    assert setup.parsec_per_einstein == pytest.approx(radius, rel=1e-7)
    # 1 pc = 3.0856775814913673e13 km (IAU 2015)
    days = radius * 3.0856775814913673e13 / 1000 / 86400
    assert setup.days_per_einstein == pytest.approx(days, rel=1e-7)
    spread = event(
        *(REDSHIFTS, MACRO, STARS),
        '[motion]\nlens_spread = "400 km / s"\nsource_spread = "200 km / s"\nposition = ["10 deg", "0 deg"]\n',
    )
    assert 0.3 < spread.days_per_einstein / days < 5.0


def test_the_field_is_that_of_the_event(event: Any) -> None:
    setup = event(MACRO, STARS)
    field, again, other = (setup.draw((2.0, 1.0), seed) for seed in (4, 4, 5))
    assert field.kappa_star == pytest.approx(0.05, rel=1e-9)
    assert (field.kappa, field.gamma, field.images) == (0.7, 0.25, 1)
    assert np.array_equal(field.x, again.x)
    assert not np.array_equal(field.x[:9], other.x[:9])
    assert field.mass.min() > 0.0


def test_the_likeliest_macro_model_is_taken(event: Any) -> None:
    models = "".join(
        f'[[macro.models]]\nname = "{name}"\nkappa = {kappa}\ngamma = 0.2\nweight = {weight}\n'
        for name, kappa, weight in (("A", 0.6, 1), ("B", 0.7, 3), ("C", 0.75, 2))
    )
    assert (event(models, STARS).model, event(models, STARS).name) == (1, "B")
    assert event(models, STARS, model=0).lens.kappa == pytest.approx(0.6)
    for wrong in (3, -1):
        with pytest.raises(InputError, match=rf"event.toml: macro.models: must have .*, 0 to 2, got {wrong}"):
            event(models, STARS, model=wrong)


def test_one_image_has_no_gradient_and_a_pair_has(event: Any) -> None:
    one = event(REDSHIFTS, FOLD, 'side = "minimum"\n', STARS)
    both = event(REDSHIFTS, FOLD, 'side = "pair"\n', STARS)
    per_einstein = 0.1 * 1.8835053e-6
    assert one.gradient == both.gradient == pytest.approx((per_einstein, 0.0), rel=1e-7)
    assert one.lens.gradient is None
    assert both.lens.gradient == both.gradient
    assert event(REDSHIFTS, FOLD, 'side = "minimum"\n', STARS, pair=True).lens.gradient == one.gradient
    assert event(REDSHIFTS, FOLD, 'side = "pair"\n', STARS, pair=False).lens.gradient is None
    assert both.macro_change(1.0, 1.0) is None


def test_change_of_the_macro_lens_across_a_map(event: Any) -> None:
    setup = event(REDSHIFTS, FOLD, 'side = "minimum"\n', STARS)
    # u = lam_t x + g x^2 / 2: exact solution for the stretch at a small step from the middle
    lam, g, du = setup.lens.lam_t, setup.gradient[0], 1e-3
    exact = np.sqrt(lam**2 + 2 * g * du) / lam - 1
    assert setup.macro_change(du, 0.0) == pytest.approx(exact, rel=1e-2)  # to first order in it
    assert setup.macro_change(2 * du, 5.0) == pytest.approx(2 * setup.macro_change(du, 0.0))
    oblique = event(
        REDSHIFTS, FOLD.replace('"0.1 / arcsec"', '["0.1 / arcsec", "0.2 / arcsec"]'), 'side = "minimum"\n', STARS
    )
    slope = oblique.macro_change(0.0, 1.0) * abs(oblique.lens.lam_t)
    assert slope == pytest.approx(oblique.gradient[1] / oblique.lens.lam_r)


def test_a_labelled_map_says_where_it_comes_from(event: Any) -> None:
    setup = event(REDSHIFTS, FOLD, 'side = "minimum"\n', STARS, '[motion]\nspeed = "1000 km / s"\n')
    found = setup.label(chart(2.0), {"seed": 3})
    assert found.parsec_per_einstein == setup.parsec_per_einstein
    assert found.days_per_einstein == setup.days_per_einstein
    told = found.description
    assert told["event"] == {
        "name": "knot",
        "macro_model": 0,
        "macro_name": None,
        "macro_models": 1,
        "macro_change": setup.macro_change(1.0, 1.0),
    }
    assert told["options"] == {"seed": 3}
    assert told["inputs"] == [{"path": str(setup.event.path), "sha256": setup.event.sha256}]
    # The flag is for a change by more than a tenth from the middle to the edge.
    for change, flags in ((0.09, ()), (0.11, ("macro_varies",))):
        width = 2 * change * setup.lens.lam_t**2 / setup.gradient[0]
        assert setup.label(chart(width), {}).flags == flags


@pytest.mark.parametrize(
    ("parts", "options", "says"),
    [
        ((STARS,), {}, "macro: must be given for star fields"),
        ((MACRO,), {}, "microlenses: must be given for star fields; add"),
        (
            (MACRO, '[[microlenses]]\nsurface_density = "20 solMass / pc2"\n'),
            {},
            "lens: must be given for surface_density; add",
        ),
        (
            (
                MACRO,
                STARS,
                '[bands.red]\nwavelength = "1 um"\n[[microlenses]]\nsurface_brightness = "26 mag / arcsec2"\n'
                'band = "red"\nmass_to_light = "2 solMass / solLum"\n',
            ),
            {},
            "lens: must be given for surface_brightness; add",
        ),
        (
            (
                REDSHIFTS,
                MACRO,
                STARS,
                '[bands.far]\nwavelength = "8 um"\n[[microlenses]]\nsurface_brightness = "26 mag / arcsec2"\n'
                'band = "far"\nmass_to_light = "2 solMass / solLum"\n',
            ),
            {},
            r"microlenses\[1\]: `rest_wavelength_um` must be 0.3 to 3.5, got",
        ),
        (
            (REDSHIFTS, MACRO, '[[microlenses]]\nsurface_density = "1700 solMass / pc2"\n'),
            {},
            "microlenses: must not hold more than the macro lens, kappa = 0.7, got 0.7498 in sum; lower the densities",
        ),
        ((MACRO, STARS), {"pair": True}, "macro: must have a gradient along x, and redshifts"),
        ((FOLD, 'side = "pair"\n', STARS), {}, "macro: must have a gradient along x, and redshifts"),
    ],
)
def test_what_is_missing_is_said(event: Any, parts: tuple[str, ...], options: dict[str, Any], says: str) -> None:
    with pytest.raises(InputError, match=says) as caught:
        event(*parts, **options)
    assert "event.toml: " in str(caught.value)


@pytest.mark.parametrize(
    ("macro", "window", "says"),
    [
        (FOLD.replace('caustic_distance = "2e-6', 'critical_distance = "0'), 1.0, r"event.toml: .*critical curve"),
        ("[macro]\nkappa = 0.7\ngamma = 0.2999\n", 1e5, r"event.toml: the window needs about .* stars"),
    ],
)
def test_fields_that_cannot_be_drawn(event: Any, macro: str, window: float, says: str) -> None:
    with pytest.raises(InputError, match=says):
        event(REDSHIFTS, macro, STARS).draw((window, window), 0)
