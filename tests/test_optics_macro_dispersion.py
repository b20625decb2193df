"""The lens from a velocity dispersion: mass relations, members, isothermal and NFW profiles at the event."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.stats import biweight_scale

from crossing.errors import InputError
from crossing.event import Event, HaloRecord, MacroRecord, MembersRecord, Value
from crossing.optics.local import local_lenses, sample_eigenvalues
from crossing.optics.macro.dispersion import halo_solution
from crossing.optics.macro.mass_relations import MASS_RELATIONS, PROJECTION_SCATTER, mass_from_dispersion
from crossing.optics.macro.members import member_dispersion, read_members
from crossing.optics.macro.profiles import NFWSphere, ProfileSum, Shear, SoftenedEllipsoid
from crossing.optics.macro.sky_frame import sky_from_offsets
from crossing.optics.scales import LensScales, cosmology_from

exact = Value.exact
CENTRE = (150.1, 2.2)
SHEARED = {"shear": exact(0.05), "shear_angle": exact(-20.0)}


def event(halo, offset=(20.0, 14.0), redshifts=(0.5, 1.5), **options) -> Event:
    lens, source = (None if z is None else z if isinstance(z, Value) else exact(z) for z in redshifts)
    ra, dec = sky_from_offsets(CENTRE, *offset)
    record = MacroRecord(
        way="velocity_dispersion",
        centre=CENTRE,
        position=(float(ra), float(dec)),
        halo=HaloRecord(**({"dispersion": exact(1000.0)} | halo)),
        **options,
    )
    path = Path("event.toml")
    return Event(name="x", path=path, sha256="", lens_redshift=lens, source_redshift=source, macro=(record,))


class TestRelations:
    @pytest.mark.parametrize(
        ("relation", "at_rest", "at_half"),
        [
            # M200c [Msun] of 1000 km/s, Planck18, z = 0 and 0.5, computed apart from this package. The closed forms:
            # singular isothermal sphere (derived here too) and Carlberg et al. 1997 (from memory); the fits: Evrard et
            # al. 2008 and Munari et al. 2013 (from memory).
            ("isothermal", 9.71967875e14, 7.37032556e14),
            ("carlberg 1997", 1.78561901e15, 1.35401526e15),
            ("evrard 2008", 1.166157e15, 8.842842e14),
            ("munari 2013", 9.445548e14, 7.162455e14),
        ],
    )
    def test_mass_of_a_dispersion(self, relation, at_rest, at_half):
        for z, mass in ((0.0, at_rest), (0.5, at_half)):
            hubble = cosmology_from().H(z).value
            # Printed digits, and the sixth digit of the gravitational constant in the closed forms.
            assert mass_from_dispersion(1000.0, hubble, relation) == pytest.approx(mass, rel=2e-6)

    @pytest.mark.parametrize("relation", MASS_RELATIONS)
    def test_slope(self, relation):
        ratio = mass_from_dispersion(1100.0, 70.0, relation) / mass_from_dispersion(1000.0, 70.0, relation)
        assert ratio == pytest.approx(1.1 ** (1 / MASS_RELATIONS[relation].slope), rel=1e-12)

    def test_bad_input(self):
        with pytest.raises(InputError, match=r"`relation` must be one of evrard 2008, .*, got 'x'; choose one"):
            mass_from_dispersion(1000.0, 70.0, "x")
        with pytest.raises(InputError, match="`dispersion` and `hubble` must be positive; give them in km/s"):
            mass_from_dispersion([1000.0, 0.0], 70.0)


class TestMembers:
    def test_against_astropy(self):
        v = np.random.default_rng(3).normal(50, 900, 40)
        found = member_dispersion(v)
        assert found.dispersion == float(biweight_scale(v))
        assert found.members == 40
        # A normal sample of n members has a relative error near 1 / sqrt(2 n); the biweight's is a little larger.
        assert 0.7 < found.error / found.dispersion * np.sqrt(80) < 1.8

    def test_measuring_errors_are_taken_out(self):
        v = np.random.default_rng(3).normal(0, 900, 400)
        raw, freed = member_dispersion(v), member_dispersion(v, 300.0)
        assert freed.dispersion == pytest.approx(np.sqrt(raw.dispersion**2 - 300**2))
        assert freed.error == pytest.approx(raw.error * raw.dispersion / freed.dispersion)

    @pytest.mark.parametrize("interlopers", [0, 2])
    def test_pulls(self, interlopers):
        rng = np.random.default_rng(8)
        pulls = []
        for _ in range(300):
            v = np.concatenate([rng.normal(0, 1000, 40), rng.uniform(-9000, 9000, interlopers)])
            found = member_dispersion(v)
            pulls.append((found.dispersion - 1000) / found.error)
        # 300 pulls: their mean is known to 0.06, their spread to 4%. Samples of 40 err low by a small part of their
        # error, and the jackknife of a robust scale is good to a tenth or so; a few interlopers bias it little.
        assert np.mean(pulls) == pytest.approx(0.0, abs=0.35)
        assert np.std(pulls) == pytest.approx(1.0, abs=0.2)

    @pytest.mark.parametrize(
        ("velocity", "err", "message"),
        [
            ([1.0, 2.0, 3.0, 4.0], None, "`velocity` must hold at least 5 members, got 4; give the dispersion"),
            ([1.0, 2.0, 3.0, 4.0, np.nan], None, "`velocity` must be finite, got nan; remove that member"),
            ([700.0] * 9, None, "`velocity` must differ between members, got 700 for most; check the column"),
            (
                [-1.0, 0.0, 1.0, 2.0, 3.0],
                60.0,
                r"`velocity_err` must be smaller than the scatter .* km/s, got 60; check",
            ),
        ],
    )
    def test_bad_velocities(self, velocity, err, message):
        with pytest.raises(InputError, match=message):
            member_dispersion(velocity, err)

    def test_tables(self, tmp_path):
        rng = np.random.default_rng(5)
        v = rng.normal(0, 900, 60)
        redshift = 0.5 + 1.5 * v / 299792.458
        (tmp_path / "v.csv").write_text("velocity,velocity_err\n" + "".join(f"{one},50\n" for one in v))
        (tmp_path / "z.csv").write_text("name,z\n" + "".join(f"a,{one:.12f}\n" for one in redshift))
        by_velocity = read_members(MembersRecord(path=tmp_path / "v.csv"), 0.5)
        by_redshift = read_members(MembersRecord(path=tmp_path / "z.csv", columns={"redshift": "z"}), 0.5)
        assert by_velocity.dispersion == pytest.approx(np.sqrt(biweight_scale(v) ** 2 - 50**2))
        assert by_redshift.dispersion == pytest.approx(biweight_scale(v), rel=1e-7)  # digits of the redshifts
        assert set(by_velocity.to_dict()) == set(by_velocity.to_table().colnames)

    def test_a_named_column_counts_first(self, tmp_path):
        v = np.random.default_rng(5).normal(0, 900, 60)
        redshift = 0.5 + 1.5 * v / 299792.458
        # Recession velocities stand beside the redshifts that are asked for.
        rows = "".join(f"{299792.458 * one:.6f},{one:.12f}\n" for one in redshift)
        (tmp_path / "z.csv").write_text(f"velocity,z\n{rows}")
        found = read_members(MembersRecord(path=tmp_path / "z.csv", columns={"redshift": "z"}), 0.5)
        assert found.dispersion == pytest.approx(biweight_scale(v), rel=1e-7)

    @pytest.mark.parametrize(
        ("text", "message"),
        [
            (None, "m.csv: must exist, got no such file; check members.file"),
            ("a,b\n1,2\n", "m.csv: must have a column 'velocity' or 'redshift', got a, b; name it under columns"),
            ("velocity\nfast\n", "m.csv: column 'velocity' must hold numbers in km/s; convert it"),
            ('velocity,n\n"",1\n3,2\n', "m.csv: column 'velocity' must be full, got an empty cell; remove that member"),
            (
                "velocity\n" + "".join(f"{90000 + 700 * k}\n" for k in range(9)),
                "m.csv: must hold velocities with respect to the cluster, got 92800 km/s on the whole; give them",
            ),
            ("", "m.csv: must be a table with a header, in CSV, ECSV or FITS; convert it"),
        ],
    )
    def test_bad_tables(self, tmp_path, text, message):
        path = tmp_path / "m.csv"
        if text is not None:
            path.write_text(text)
        with pytest.raises(InputError, match=message):
            read_members(MembersRecord(path=path), 0.5)


class TestIsothermal:
    @pytest.mark.parametrize(
        ("sigma", "redshifts", "radius"),
        [
            # 4 pi (sigma/c)**2 D_ls/D_s [arcsec], Planck18, computed apart from this package.
            (1000.0, (0.5, 1.5), 16.30203838),
            (1000.0, (0.4, 1.0), 15.24963503),
            (1000.0, (0.544, 1.49), 15.30533060),
            (250.0, (0.5, 1.5), 1.01887740),
        ],
    )
    def test_sphere(self, sigma, redshifts, radius):
        (model,) = local_lenses(event({"dispersion": exact(sigma)}, (0.0, 1.2 * radius), redshifts))
        # mu = 1 / (1 - theta_E / theta) = 6, all of it along the stretch.
        assert model.lens.mu_t == pytest.approx(6, rel=1e-7)
        assert model.lens.mu_r == pytest.approx(1, rel=1e-9)
        assert model.fold is None  # lam_t does not change along the stretch

    def test_ellipsoid_in_shear(self):
        halo = {"axis_ratio": exact(0.7), "angle": exact(35.0), "core": exact(2.0), **SHEARED}
        solution = halo_solution(made := event(halo), made.macro[0])
        scales = LensScales(0.5, 1.5)
        turn = np.radians(2 * (90 + 20))
        lens = ProfileSum(
            parts=(
                SoftenedEllipsoid(einstein_radius=16.30203838, axis_ratio=0.7, core=2.0, angle=90 - 35),
                Shear(gamma1=0.05 * np.cos(turn), gamma2=0.05 * np.sin(turn)),
            )
        )
        east, north = solution.offset
        assert (east, north) == pytest.approx((20, 14), abs=1e-9)
        lam_t, lam_r = (float(one) for one in lens.eigenvalues(east, north))
        state = solution.central
        assert (state.lam_t, state.lam_r) == pytest.approx((lam_t, lam_r), rel=1e-8)  # digits of the radius
        # Gradient along the stretch by the profile's own eigenvalues, half a milliarcsecond each way.
        angle = np.radians(90 - state.stretch_angle)
        for part, (a, b) in zip(
            state.gradient, ((np.cos(angle), np.sin(angle)), (-np.sin(angle), np.cos(angle))), strict=True
        ):
            ahead, behind = (float(lens.eigenvalues(east + k * a, north + k * b)[0]) for k in (5e-4, -5e-4))
            assert part == pytest.approx((ahead - behind) / 1e-3, rel=1e-5, abs=1e-9)
        assert state.gradient[0] > 0
        assert scales.z_lens == solution.scales.z_lens
        assert solution.flags == ()

    def test_spread_of_the_dispersion(self):
        uncertain = event({"dispersion": Value.normal(1000, 50, lower=0)}, (0.0, 20.0))
        lam_t = sample_eigenvalues(uncertain, np.random.default_rng(1), 20_000).lam_t
        # lam_t = 1 - theta_E/theta with theta_E as sigma**2. Five standard errors of 2e4 draws, and the second order.
        assert lam_t.std() == pytest.approx(2 * 0.05 * 16.302 / 20, rel=5 / np.sqrt(40_000) + 0.01)
        assert not halo_solution(uncertain, uncertain.macro[0]).certain

    def test_draws_of_exact_numbers_repeat_the_centre(self):
        halo = {"axis_ratio": exact(0.7), "angle": exact(35.0), **SHEARED}
        solution = halo_solution(made := event(halo), made.macro[0])
        draws, state = solution.draw_local(np.random.default_rng(1), 5), solution.central
        assert solution.certain
        np.testing.assert_allclose(draws.lam_t, state.lam_t, rtol=1e-12)
        np.testing.assert_allclose(draws.gradient_y, state.gradient[1], rtol=1e-9)

    def test_all_that_is_uncertain_is_drawn(self):
        halo = {
            "axis_ratio": Value.uniform(0.6, 0.8),
            "angle": Value.normal(35.0, 5.0),
            "core": Value.uniform(0.0, 2.0),
            **SHEARED,
        }
        made = event(halo, redshifts=(0.5, Value.normal(1.5, 0.1)), position_error=0.2)
        draws = halo_solution(made, made.macro[0]).draw_local(np.random.default_rng(1), 500)
        assert all(np.all(np.isfinite(one)) for one in draws)
        assert np.all(np.abs(draws.lam_t) <= np.abs(draws.lam_r))
        assert len(np.unique(draws.lam_t)) == 500


class TestNFW:
    # Planck18, M200c, computed apart from this package: scale radius, kappa_s, Einstein radius, kappa and mu_r there.
    @pytest.mark.parametrize(
        ("mass", "concentration", "redshifts", "theta_E", "kappa", "mu_r"),
        [
            (1e15, 5.0, (0.5, 1.5), 13.516710, 0.73299124, 1.87259777),
            (2e15, 6.0, (0.4, 1.0), 23.579060, 0.69499181, 1.63930024),
            (1.5e15, 7.0, (0.544, 1.49), 26.238116, 0.61737573, 1.30676500),
        ],
    )
    def test_on_the_einstein_radius(self, mass, concentration, redshifts, theta_E, kappa, mu_r):
        hubble = cosmology_from().H(redshifts[0]).value
        # The dispersion that Evrard's relation gives to this mass.
        sigma = 1082.9 * (hubble / 100 * mass / 1e15) ** 0.3361
        halo = {"dispersion": exact(sigma), "profile": "nfw", "concentration": exact(concentration)}
        (model,) = local_lenses(made := event(halo, (theta_E, 0.0), redshifts))
        assert halo_solution(made, made.macro[0]).mass == pytest.approx(mass, rel=1e-9)
        assert model.lens.lam_t == pytest.approx(0, abs=2e-6)  # printed digits, and those of the mass of the Sun
        assert model.lens.kappa == pytest.approx(kappa, rel=2e-6)
        assert model.lens.mu_r == pytest.approx(mu_r, rel=1e-5)

    def test_draws_scatter_about_the_sphere_of_the_central_mass(self):
        halo = {"profile": "nfw", "concentration": exact(5.0)}
        solution = halo_solution(made := event(halo), made.macro[0])
        sphere = NFWSphere.of_mass(solution.mass, 5.0, solution.scales)
        lam_t, lam_r = sphere.eigenvalues(*solution.offset)
        assert solution.central[:2] == pytest.approx((float(lam_t), float(lam_r)), rel=1e-7)
        draws = solution.draw_local(np.random.default_rng(2), 20_000)
        law = MASS_RELATIONS["evrard 2008"]
        spread = np.hypot(law.scatter, PROJECTION_SCATTER) / law.slope
        # The masses at one standard deviation bound 68% of lam_t, which falls with the mass here.
        ends = [
            float(NFWSphere.of_mass(solution.mass * np.exp(k * spread), 5.0, solution.scales).eigenvalues(20, 14)[0])
            for k in (1, -1)
        ]
        # Five standard errors of a quantile of 2e4 draws are 2% of the width.
        np.testing.assert_allclose(np.percentile(draws.lam_t, [15.865, 84.135]), ends, atol=0.02 * np.ptp(ends))
        assert not solution.certain

    def test_concentration_from_its_prior(self):
        made = event({"profile": "nfw"})
        assert "concentration_from_prior" in halo_solution(made, made.macro[0]).flags


def test_few_members_of_a_round_halo(tmp_path):
    path = tmp_path / "m.csv"
    path.write_text("velocity\n" + "".join(f"{v}\n" for v in np.random.default_rng(1).normal(0, 900, 12)))
    made = event({"dispersion": None, "members": MembersRecord(path=path)})
    solution = halo_solution(made, made.macro[0])
    assert solution.flags == ("few_members", "round_halo")
    assert solution.dispersion.shape == "normal"


def test_bad_input():
    with pytest.raises(InputError, match=r"event\.toml: macro: must go with the redshifts of lens and source; add"):
        local_lenses(event({}, redshifts=(0.5, None)))
    with pytest.raises(
        InputError, match=r"macro: `position` must differ from the cluster's centre, got the same place"
    ):
        local_lenses(event({}, (0.0, 0.0)))
