"""Distances, Einstein radii and time delays against independent numbers."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy import cosmology
from astropy import units as u
from astropy.cosmology import FlatLambdaCDM, LambdaCDM, Planck18

from crossing.errors import InputError
from crossing.event import CosmologyRecord, Value
from crossing.optics.constants import GM_SUN_OVER_C2, R_SUN
from crossing.optics.scales import LensScales, cosmology_from, einstein_radius, sample_scales

# Planck18, computed with astropy's distances from the formulas of the docstrings; 8 printed digits or more.
PRINTED = 1e-7
EXPECTED = {
    (0.5, 1.5): {
        "D_l": 1297.611089858,
        "D_s": 1790.879162608,
        "D_ls": 1012.312508693,
        "luminosity_distance": 11192.9947663,
        "sigma_crit": 2267.1361,
        "einstein_radius_uas": 1.8835053,
        "einstein_radius_source_au": 3373.1305,
        "einstein_radius_lens_au": 2444.0574,
        "kpc_per_arcsec_lens": 6.290996,
        "kpc_per_arcsec_source": 8.682427,
        "time_delay_factor": 96.416935,
    },
    (0.4, 1.0): {
        "D_l": 1142.949110112,
        "D_s": 1697.817235576,
        "D_ls": 897.752858497,
        "luminosity_distance": 6791.2689423,
        "sigma_crit": 2751.5518,
        "einstein_radius_uas": 1.9410399,
        "einstein_radius_source_au": 3295.5309,
        "einstein_radius_lens_au": 2218.5098,
        "kpc_per_arcsec_lens": 5.541174,
        "kpc_per_arcsec_source": 8.23125,
        "time_delay_factor": 84.733453,
    },
}
ASTROPY_DATA = Path(cosmology.__file__).parent / "_src" / "tests" / "flrw" / "data"


@pytest.mark.parametrize("redshifts", EXPECTED)
def test_planck_scales(redshifts):
    scales = LensScales(*redshifts)
    for name, expected in EXPECTED[redshifts].items():
        assert getattr(scales, name) == pytest.approx(expected, rel=PRINTED), name


def test_other_scales():
    scales = LensScales(0.5, 1.5)
    assert scales.einstein_crossing_years(1000.0) == pytest.approx(15.99023, rel=1e-6)  # 7 printed digits
    assert LensScales(0.4, 1.0).einstein_crossing_years(1000.0) == pytest.approx(15.62237, rel=1e-6)
    # 100 solar radii at z = 1.5 against the Einstein radius of one solar mass: 1.3786799e-4.
    assert 100 / scales.einstein_radius_source_rsun == pytest.approx(1.3786799e-4, rel=PRINTED)
    assert 100 * scales.rsun_arcsec == pytest.approx(2.5967510e-10, rel=PRINTED)
    assert scales.einstein_radius_arcsec == 1e-6 * scales.einstein_radius_uas
    assert pytest.approx(R_SUN) == 6.957e8  # IAU 2015 B3, Prsa et al. 2016
    assert pytest.approx(1476.6250380501, rel=1e-13) == GM_SUN_OVER_C2


@pytest.mark.parametrize(
    ("redshifts", "expected"), [((0.5, 1.5), 1.9154036), ((0.4, 1.0), 1.9741945), ((0.544, 1.49), 1.8160736)]
)
def test_einstein_radius_in_another_cosmology(redshifts, expected):
    # FlatLambdaCDM(70, 0.3), computed apart.
    record = CosmologyRecord(name=None, H0=70.0, Om0=0.3)
    assert LensScales(*redshifts, record).einstein_radius_uas == pytest.approx(expected, rel=PRINTED)


def test_einstein_radius_quantity():
    value = einstein_radius([0.0, 1.0, 0.3] * u.Msun, lens_redshift=0.544, source_redshift=1.49)
    assert value.unit == u.uarcsec
    assert value[2].value == pytest.approx(0.97816414, rel=PRINTED)  # Planck18, computed apart
    assert value[0] == 0
    assert einstein_radius(lens_redshift=0.5, source_redshift=1.5, cosmology="Planck18").isscalar
    grams = einstein_radius(1.988409870698051e33 * u.g, lens_redshift=0.5, source_redshift=1.5)
    assert grams.value == pytest.approx(1.8835053, rel=1e-4)  # astropy's kilogram per solar mass depends on G
    with pytest.raises(InputError, match="`mass` must be zero or positive, got -1 solMass; give its size"):
        einstein_radius([1.0, -1.0], lens_redshift=0.5, source_redshift=1.5)


# Distances of the icosmo calculator that astropy ships with its tests (H0 = 70).
@pytest.mark.parametrize(("file", "Om0", "Ode0"), [("flat", 0.3, 0.7), ("open", 0.3, 0.1), ("closed", 2.0, 0.1)])
def test_distances_against_icosmo(file, Om0, Ode0):
    path = ASTROPY_DATA / f"cosmo_{file}.ecsv"
    if not path.exists():
        pytest.skip("this astropy keeps its test data elsewhere")
    lines = [line for line in path.read_text().splitlines() if not line.startswith("#")]
    assert lines[0].split() == ["redshift", "dm", "da", "dl"]
    redshift, _, angular, luminosity = np.array([line.split() for line in lines[1:]], dtype=float).T
    model = LambdaCDM(H0=70, Om0=Om0, Ode0=Ode0, Tcmb0=0)
    for z, D_A, D_L in zip(redshift, angular, luminosity, strict=True):
        if z > 0.01:
            scales = LensScales(z / 2, z, model)
            assert scales.D_s == pytest.approx(D_A, rel=1e-6)  # printed digits
            assert scales.luminosity_distance == pytest.approx(D_L, rel=1e-6)


def test_distance_at_redshift_one():
    # FlatLCDM(70, 0.27): D_A and D_L of the iCosmos calculator, quoted in astropy's tests.
    scales = LensScales(0.3, 1.0, FlatLambdaCDM(70, 0.27))
    assert scales.D_s == pytest.approx(1682.3994, rel=1e-6)
    assert scales.luminosity_distance == pytest.approx(6729.5976, rel=1e-6)


@pytest.mark.parametrize("Ode0", [0.7, 0.1, 0.95])
def test_distance_between_in_curved_space(Ode0):
    # Independent: the comoving distance itself through sin, sinh or the flat limit.
    model = LambdaCDM(H0=70, Om0=0.3, Ode0=Ode0, Tcmb0=0)
    chi = (model.comoving_distance([0.5, 1.5]) @ np.array([-1, 1])) / model.hubble_distance
    chi = chi.to_value(u.dimensionless_unscaled)
    curvature = model.Ok0
    root = np.sqrt(abs(curvature))
    bent = chi if root < 1e-6 else np.sinh(root * chi) / root if curvature > 0 else np.sin(root * chi) / root
    expected = float(bent * model.hubble_distance.to_value("Mpc") / 2.5)
    assert LensScales(0.5, 1.5, model).D_ls == pytest.approx(expected, rel=1e-12)


def test_cosmology_from():
    assert cosmology_from(None) is Planck18
    assert cosmology_from("Planck18") is Planck18
    assert cosmology_from(CosmologyRecord()) is Planck18
    assert cosmology_from(Planck18) is Planck18
    model = cosmology_from(CosmologyRecord(name=None, H0=70.0, Om0=0.3))
    assert (model.H0.value, model.Om0) == (70, 0.3)
    with pytest.raises(InputError, match=r"`name` must be one of .*Planck18.*, got 'Planck99'; or give H0 and Om0"):
        cosmology_from("Planck99")
    with pytest.raises(InputError, match="`H0` and `Om0` must be given together"):
        cosmology_from(CosmologyRecord(name=None, H0=70.0))


@pytest.mark.parametrize(
    ("redshifts", "message"),
    [
        ((0.0, 1.0), "lens redshift must be positive, got 0"),
        ((np.nan, 1.0), "lens redshift must be positive, got nan"),
        ((1.0, 0.5), "source redshift must be larger than the lens redshift 1, got 0.5; check which is which"),
        ((0.5, 0.5), "source redshift must be larger than the lens redshift 0.5, got 0.5"),
        ((0.5, np.inf), "source redshift must be larger than the lens redshift 0.5, got inf"),
    ],
)
def test_redshifts_out_of_order(redshifts, message):
    with pytest.raises(InputError, match=message):
        LensScales(*redshifts)


class TestDraws:
    lens = Value.normal(0.5, 0.01)
    source = Value.uniform(1.2, 1.8)

    def test_interpolated_distances(self):
        draws = sample_scales(self.lens, self.source, np.random.default_rng(1), 50)
        for i in range(0, 50, 7):
            exact = LensScales(float(draws.z_lens[i]), float(draws.z_source[i]))
            for name in ("D_l", "D_s", "D_ls", "luminosity_distance", "einstein_radius_source_au"):
                assert getattr(draws, name)[i] == pytest.approx(getattr(exact, name), rel=1e-6), name
            coefficients = [factor[i] for factor in draws.velocity_coefficients]
            np.testing.assert_allclose(coefficients, exact.velocity_coefficients, rtol=1e-6)

    def test_exact_redshifts(self):
        draws = sample_scales(Value.exact(0.5), Value.exact(1.5), np.random.default_rng(1), 3)
        np.testing.assert_array_equal(draws.D_ls, LensScales(0.5, 1.5).D_ls)

    def test_order_is_kept(self):
        draws = sample_scales(Value.uniform(0.4, 0.8), Value.uniform(0.5, 0.9), np.random.default_rng(1), 2000)
        assert np.all(draws.z_source > draws.z_lens)
        assert draws.z_lens.shape == (2000,)
        with pytest.raises(
            InputError, match=r"source redshift must be larger than the lens redshift, got 0\.3 behind 0\.5"
        ):
            sample_scales(Value.exact(0.5), Value.exact(0.3), np.random.default_rng(1), 10)

    def test_same_seed_same_draws(self):
        one, two = (sample_scales(self.lens, self.source, np.random.default_rng(7), 20) for _ in range(2))
        np.testing.assert_array_equal(one.D_ls, two.D_ls)
