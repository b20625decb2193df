"""Maps, velocity dispersions and mirrored knots in event files; what is malformed stands in the corpus."""

from __future__ import annotations

import pickle
import tomllib
from pathlib import Path

import pytest

from crossing.event import HaloRecord, MacroRecord, MapRecord, MembersRecord, PairRecord, Value, read_event
from crossing.event.rewriting import rewritten_event

exact = Value.exact
POSITION = 'position = ["150.1 deg", "2.2 deg"]\n'
CENTRE = 'centre = ["150.1 deg", "2.21 deg"]\n'
SHEARS = 'convergence = "k.fits[KAPPA]"\nshear1 = "/there/g1.fits"\nshear2 = "sub/g2.fits"\n'


def write(folder: Path, macro: str) -> Path:
    path = folder / "event.toml"
    path.write_text(f'[event]\nname = "knot"\n\n{macro}')
    return path


def read(folder: Path, macro: str) -> tuple[MacroRecord, ...]:
    event = read_event(write(folder, macro))
    assert pickle.loads(pickle.dumps(event)) == event
    return event.macro


def test_each_lens_model_with_maps_is_an_alternative(tmp_path):
    first, second = read(
        tmp_path,
        f'[macro]\n{POSITION}position_error = "50 mas"\n'
        f'[[macro.maps]]\nname = "A"\nweight = 3\n{SHEARS}source_redshift = 2\nrealisations = "many/*_{{plane}}.fits"\n'
        '[[macro.maps]]\ndeflection1 = "x.fits"\ndeflection2 = "y.fits"\ndeflection_unit = "pixel"\nnormalised = true\n'
        'axes = "sky"\n',
    )
    planes = {
        "convergence": f"{tmp_path}/k.fits[KAPPA]",
        "shear1": "/there/g1.fits",
        "shear2": f"{tmp_path}/sub/g2.fits",
    }
    chart = MapRecord(planes=planes, name="A", source_redshift=2.0, realisations=f"{tmp_path}/many/*_{{plane}}.fits")
    assert first == MacroRecord(
        way="maps", name="A", weight=0.75, position=(150.1, 2.2), position_error=pytest.approx(0.05), maps=(chart,)
    )
    assert first.place == "macro.maps[0]"
    (chart,) = second.maps
    assert chart == MapRecord(
        planes={"deflection1": f"{tmp_path}/x.fits", "deflection2": f"{tmp_path}/y.fits"},
        deflection_unit="pixel",
        normalised=True,
        axes="sky",
    )
    assert (second.name, second.weight, second.place) == (None, 0.25, "macro.maps[1]")


def test_maps_may_stand_beside_other_models(tmp_path):
    macro = read(
        tmp_path,
        "[[macro.models]]\nkappa = 0.6\ngamma = 0.3\nweight = 2\n"
        f'[[macro.models]]\nname = "pair"\nweight = 4\n{POSITION}'
        f"[[macro.models.maps]]\n{SHEARS}normalised = true\n[[macro.models.maps]]\n{SHEARS}normalised = true\n",
    )
    assert [(model.way, model.name, model.weight) for model in macro] == [
        ("kappa+gamma", None, 2.0),
        ("maps", "pair", 2.0),
        ("maps", "pair", 2.0),
    ]
    assert macro[2].place == "macro.models[1].maps[1]"


@pytest.mark.parametrize(
    ("keys", "halo"),
    [
        (
            'velocity_dispersion = {value = "900 km / s", error = "80 km / s"}',
            HaloRecord(dispersion=Value.normal(900, 80, lower=0)),
        ),
        (
            'velocity_dispersion = "900 km / s"\naxis_ratio = {low = 0.6, high = 0.9}\nangle = "30 deg"\n'
            'core = "2 arcsec"\nshear = 0.05\nshear_angle = "-20 deg"',
            HaloRecord(
                dispersion=exact(900),
                axis_ratio=Value.uniform(0.6, 0.9),
                angle=exact(30),
                core=exact(2),
                shear=exact(0.05),
                shear_angle=exact(-20),
            ),
        ),
        (
            'velocity_dispersion = "900 km / s"\nprofile = "nfw"\nconcentration = 5\nmass_relation = "munari 2013"',
            HaloRecord(dispersion=exact(900), profile="nfw", concentration=exact(5), mass_relation="munari 2013"),
        ),
    ],
)
def test_velocity_dispersion(tmp_path, keys, halo):
    (model,) = read(tmp_path, f"[macro]\n{POSITION}{CENTRE}{keys}\n")
    assert model == MacroRecord(way="velocity_dispersion", position=(150.1, 2.2), centre=(150.1, 2.21), halo=halo)


def test_members_in_place_of_their_dispersion(tmp_path):
    macro = f'[macro]\n{POSITION}{CENTRE}members = {{file = "m.ecsv", columns = {{redshift = "z"}}}}\n'
    (model,) = read(tmp_path, macro)
    assert model.halo == HaloRecord(members=MembersRecord(path=tmp_path / "m.ecsv", columns={"redshift": "z"}))
    text = rewritten_event(write(tmp_path, macro), suffix="", photometry={"file": "a.csv"})
    assert tomllib.loads(text)["macro"]["members"] == {"file": str(tmp_path / "m.ecsv"), "columns": {"redshift": "z"}}


def test_mirror_pairs(tmp_path):
    (model,) = read(
        tmp_path,
        f'[macro]\n{POSITION}{CENTRE}mu_r = {{value = 1.5, error = 0.2}}\ngradient = "0.1 / arcsec"\nside = "saddle"\n'
        '[[macro.mirror_pairs]]\nname = "b"\n'
        'position1 = ["150.1 deg", "2.2 deg"]\nposition2 = ["150.2 deg", "2.2 deg"]\n'
        'position_error = "20 mas"\nflux1 = {value = "110 nJy", error = "5 nJy"}\nflux2 = "100 nJy"\n'
        'magnification = {low = 30, high = 100, scale = "log"}\n'
        '[[macro.mirror_pairs]]\nposition1 = ["150.1 deg", "2.3 deg"]\nposition2 = ["150.2 deg", "2.3 deg"]\n',
    )
    assert model.mirror_pairs == (
        PairRecord(
            name="b",
            first=(150.1, 2.2),
            second=(150.2, 2.2),
            position_error=pytest.approx(0.02),
            flux1=Value.normal(110, 5, lower=0),
            flux2=exact(100),
            magnification=Value.loguniform(30, 100),
        ),
        PairRecord(first=(150.1, 2.3), second=(150.2, 2.3)),
    )
    assert (model.mu_r, model.gradient) == (Value.normal(1.5, 0.2, lower=0), (exact(0.1), exact(0)))
    assert (model.side, model.centre, model.place) == ("saddle", (150.1, 2.21), "macro")
