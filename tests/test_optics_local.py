"""The local macro lens and the geometry of a smooth fold."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import trapezoid
from scipy.optimize import fsolve

from crossing.errors import InputError
from crossing.event import Event, MacroRecord, Value
from crossing.optics.local import FoldGeometry, LocalLens, local_lenses, sample_eigenvalues
from crossing.optics.scales import LensScales

exact = Value.exact


def event(*records, redshifts=(0.5, 1.5)):
    lens, source = (None if z is None else exact(z) for z in redshifts)
    return Event(
        name="invented",
        path=Path("event.toml"),
        sha256="",
        lens_redshift=lens,
        source_redshift=source,
        macro=tuple(MacroRecord(**record) for record in records),
    )


class TestLocalLens:
    def test_eigenvalues(self):
        lens = LocalLens(0.7975, 0.1975)
        assert lens.lam_t == pytest.approx(0.005)
        assert lens.lam_r == pytest.approx(0.4)
        assert lens.mu_t == pytest.approx(200)
        assert lens.mu_r == pytest.approx(2.5)
        assert lens.mu == lens.magnification == pytest.approx(500)

    @pytest.mark.parametrize(
        ("lam_t", "lam_r", "parity"),
        [
            (0.1, 0.5, "minimum"),
            (-0.1, 0.5, "saddle"),
            (0.1, -0.5, "saddle"),
            (-0.1, -0.5, "maximum"),
            (0.0, 0.5, "critical"),
        ],
    )
    def test_parity(self, lam_t, lam_r, parity):
        lens = LocalLens.from_eigenvalues(lam_t, lam_r)
        assert lens.parity == parity
        assert parity == "critical" or lens.mu == pytest.approx(1 / (lam_t * lam_r))
        assert lens.magnification == abs(lens.mu)

    def test_on_the_critical_curve(self):
        lens = LocalLens(0.75, 0.25)
        assert lens.lam_t == 0
        assert (lens.mu_t, lens.mu, lens.magnification) == (math.inf, math.inf, math.inf)
        assert lens.mu_r == 2

    def test_gradient(self):
        assert LocalLens(0.5, 0.2).gradient is None
        assert LocalLens(0.5, 0.2, 1e-3).gradient == (1e-3, 0.0)
        assert LocalLens(0.5, 0.2, (1e-3, -2e-3)).gradient == (1e-3, -2e-3)
        assert LocalLens(0.5, 0.2, np.array([1.0, 2.0])).gradient == (1.0, 2.0)

    @pytest.mark.parametrize("gradient", [(1.0, 2.0, 3.0), math.nan, [[1.0, 2.0]]])
    def test_bad_gradient(self, gradient):
        with pytest.raises(InputError, match=r"`gradient` must be a finite number or a pair, got .*; give g or"):
            LocalLens(0.5, 0.2, gradient)

    def test_bad_numbers(self):
        with pytest.raises(InputError, match="`kappa` must be finite, got nan; give a number"):
            LocalLens(math.nan, 0.2)
        with pytest.raises(InputError, match="`gamma` must be finite, got inf"):
            LocalLens(0.5, math.inf)

    def test_frozen(self):
        with pytest.raises(AttributeError):
            LocalLens(0.5, 0.2).kappa = 1.0


class TestFoldGeometry:
    # kappa0 = 0.83 on the critical curve, T = 0.1 per arcsec.
    fold = FoldGeometry(gradient=(0.1, 0.0), mu_r=1 / (2 * 0.17))

    def test_strength_and_smooth_peak(self):
        # Schneider, Ehlers & Falco 1992 sec. 6.2 (from memory, derived again); Planck18 distances, z = 0.5 and 1.5.
        scales = LensScales(0.5, 1.5)
        assert self.fold.strength == pytest.approx(13.1533, rel=1e-5)  # printed digits
        for radius, peak in ((10, 3.595913e6), (100, 1.137128e6), (1000, 3.595913e5)):
            assert self.fold.smooth_peak(radius * scales.rsun_arcsec) == pytest.approx(peak, rel=3e-7)
        slow = FoldGeometry(gradient=(0.02, 0.0), mu_r=self.fold.mu_r)
        for radius, peak in ((10, 8.040707e6), (100, 2.542695e6), (1000, 8.040707e5)):
            assert slow.smooth_peak(radius * scales.rsun_arcsec) == pytest.approx(peak, rel=3e-7)
        # The factor for u = 0.5 is 1.417868.
        ratio = self.fold.smooth_peak(1e-9, 0.5) / self.fold.smooth_peak(1e-9)
        assert ratio == pytest.approx(1.41786808900 / 1.39311929654, rel=1e-11)

    @pytest.mark.parametrize(
        ("redshifts", "separation", "seconds"),
        [
            ((0.5, 1.5), 0.01, 0.069420193),
            ((0.5, 1.5), 0.1, 69.420193),
            ((0.5, 1.5), 1.0, 69420.193),
            ((0.4, 1.0), 1.0, 61008.086),
        ],
    )
    def test_pair_delay(self, redshifts, separation, seconds):
        # c dt = (1+z) D_l D_s / D_ls T separation**3 / 12 (same source); the other form is (4/3) d s.
        scales = LensScales(*redshifts)
        caustic_distance = self.fold.caustic_distance(separation / 2)
        assert self.fold.image_separation(caustic_distance) == pytest.approx(separation, rel=1e-14)
        delay = self.fold.pair_delay(caustic_distance, scales)
        assert delay * 86400 == pytest.approx(seconds, rel=1e-7)  # printed digits
        assert delay == pytest.approx(scales.time_delay_factor * 4 / 3 * caustic_distance * separation / 2, rel=1e-13)

    def test_delay_is_the_difference_of_the_potential(self):
        # Arrival time along the stretch at the fold: (x - u)**2/2 - psi with u = T x**2/2, so dt/dx = u(x) - d.
        d, T = 1e-3, self.fold.rate
        x = np.linspace(-1, 1, 2001) * self.fold.image_offset(d)
        time = trapezoid(T * x**2 / 2 - d, x)
        delay = self.fold.pair_delay(d, LensScales(0.5, 1.5)) / LensScales(0.5, 1.5).time_delay_factor
        assert abs(time) == pytest.approx(delay, rel=1e-6)  # trapezium of 2000 steps

    def test_distances(self):
        fold = FoldGeometry(gradient=(0.03, 0.04), mu_r=2.0)
        assert fold.critical_distance(-0.006) == pytest.approx(-0.2)
        assert fold.critical_distance_perp(-0.006) == pytest.approx(-0.12)
        assert fold.image_offset(fold.caustic_distance(0.2)) == pytest.approx(0.2)
        # Each image has 1 / (lam_r g d_perp), both together K / sqrt(d).
        assert fold.magnification(fold.caustic_distance(0.2)) == pytest.approx(2 / (0.5 * 0.05 * 0.12))
        assert fold.magnification(0.0) == math.inf
        assert fold.magnification(-1.0) == 0

    @pytest.mark.parametrize("gy", [0.0, 0.02])
    def test_against_the_quadratic_map(self, gy):
        # u = g x**2/2 + gy x y, v = lam_r y + gy x**2/2: both images found numerically, det of the Jacobian summed.
        gx, lam_r, d = 0.03, 0.5, 1e-7
        fold = FoldGeometry(gradient=(gx, gy), mu_r=1 / lam_r)
        total = 0.0
        for sign in (-1, 1):
            offset = sign * fold.image_offset(d)
            start = [offset, -gy * offset**2 / (2 * lam_r)]
            x, y = fsolve(
                lambda z: [gx * z[0] ** 2 / 2 + gy * z[0] * z[1] - d, lam_r * z[1] + gy * z[0] ** 2 / 2],
                start,
                xtol=1e-13,
            )
            assert x == pytest.approx(offset, rel=1e-3)  # the next order of the map is of the size of x
            total += 1 / abs((gx * x + gy * y) * lam_r - (gy * x) ** 2)
        assert total == pytest.approx(fold.magnification(d), rel=1e-3)

    def test_bad_input(self):
        with pytest.raises(InputError, match="`gradient` must have an x component, got 0"):
            FoldGeometry(gradient=(0.0, 0.1), mu_r=2.0)
        with pytest.raises(InputError, match="caustic distance must be zero or positive, got -1 arcsec; outside"):
            self.fold.image_offset(-1.0)
        with pytest.raises(InputError, match="`radius` must be positive, got 0 arcsec; a point has no finite peak"):
            self.fold.smooth_peak(0.0)


class TestRecords:
    def test_kappa_and_gamma(self):
        (model,) = local_lenses(event({"way": "kappa+gamma", "kappa": exact(0.7), "gamma": exact(0.29)}))
        assert model.weight == 1
        assert model.lens.mu_t == pytest.approx(100)
        assert model.fold is None
        assert model.lens.gradient is None

    def test_magnifications(self):
        (model,) = local_lenses(event({"way": "mu_t+mu_r", "mu_t": exact(-100), "mu_r": exact(2.5)}))
        assert model.lens.mu == pytest.approx(-250)
        assert model.lens.parity == "saddle"

    @pytest.mark.parametrize(("distance", "parity"), [(0.12, "minimum"), (-0.12, "saddle")])
    def test_critical_distance(self, distance, parity):
        record = {
            "way": "critical_distance",
            "critical_distance": exact(distance),
            "gradient": (exact(0.05), exact(0.01)),
            "mu_r": exact(2.0),
        }
        (model,) = local_lenses(event(record))
        assert model.lens.lam_t == pytest.approx(0.05 * distance)
        assert model.lens.mu_r == pytest.approx(2)
        assert model.lens.parity == parity
        assert model.fold.gradient == (0.05, 0.01)
        assert model.fold.images == 1
        # Per theta_E in Python: 1.8835053 microarcsec at z = 0.5 and 1.5.
        assert model.lens.gradient == pytest.approx((0.05 * 1.8835053e-6, 0.01 * 1.8835053e-6), rel=1e-7)
        (unknown,) = local_lenses(event(record, redshifts=(0.5, None)))
        assert unknown.lens.gradient is None
        assert unknown.fold == model.fold

    @pytest.mark.parametrize(("side", "sign", "images"), [("minimum", 1, 1), ("saddle", -1, 1), ("pair", 1, 2)])
    def test_caustic_distance(self, side, sign, images):
        record = {"way": "caustic_distance", "caustic_distance": exact(1e-4), "mu_r": exact(2.5), "side": side}
        by_gradient, by_strength = local_lenses(
            event(
                record | {"gradient": (exact(0.05), exact(0.0))},
                # K = sqrt(2/T) mu_r
                record | {"fold_strength": exact(math.sqrt(2 / 0.05) * 2.5)},
            )
        )
        for model in (by_gradient, by_strength):
            assert model.weight == 0.5
            assert model.lens.lam_t == pytest.approx(sign * math.sqrt(2 * 0.05 * 1e-4))
            assert model.fold.gradient[0] == pytest.approx(0.05)
            assert model.fold.images == images
            # The pair's total is twice this image.
            assert model.fold.magnification(1e-4) == pytest.approx(2 * model.lens.magnification)

    def test_radial_arc(self):
        record = {
            "way": "caustic_distance",
            "caustic_distance": exact(1e-4),
            "gradient": (exact(0.05), exact(0.0)),
            "mu_r": exact(-2.5),
        }
        (model,) = local_lenses(event(record | {"side": "saddle"}))
        assert model.lens.parity == "saddle"
        assert model.fold.strength > 0
        with pytest.raises(
            InputError, match=r"event\.toml: macro: `side` must be saddle or pair where mu_r is negative"
        ):
            local_lenses(event(record | {"side": "minimum"}))

    def test_weights(self):
        one = {"way": "kappa+gamma", "kappa": exact(0.7), "gamma": exact(0.2)}
        models = local_lenses(event(one | {"weight": 1.0}, one | {"weight": 3.0}))
        assert [model.weight for model in models] == [0.25, 0.75]
        assert local_lenses(event()) == ()

    def test_unreadable_records(self):
        with pytest.raises(InputError, match=r"event\.toml: macro: `gamma` must be given for this way"):
            local_lenses(event({"way": "kappa+gamma", "kappa": exact(0.7)}))
        good = {"way": "kappa+gamma", "kappa": exact(0.7), "gamma": exact(0.2)}
        ranged = {"way": "mu_t+mu_r", "mu_t": Value.uniform(-10, 20), "mu_r": exact(2.0)}
        for call in (local_lenses, lambda e: sample_eigenvalues(e, np.random.default_rng(1), 100)):
            with pytest.raises(InputError, match=r"macro\.models\[1\]: `mu_t` must keep one sign, got -10 to 20; give"):
                call(event(good, ranged))
        with pytest.raises(InputError, match="`maps` must hold what it is made of, got numbers alone; read the event"):
            local_lenses(event({"way": "maps", "mu_r": exact(2.0)}))


class TestDraws:
    def draw(self, *records, size=20_000):
        return sample_eigenvalues(event(*records), np.random.default_rng(1), size)

    def test_exact_records_repeat_the_central_values(self):
        gradient = (exact(0.05), exact(0.0))
        records = (
            {"way": "kappa+gamma", "kappa": exact(0.7), "gamma": exact(0.29)},
            {"way": "mu_t+mu_r", "mu_t": exact(-100), "mu_r": exact(2.5)},
            {
                "way": "critical_distance",
                "critical_distance": exact(-0.1),
                "gradient": gradient,
                "mu_r": exact(2.0),
            },
            {
                "way": "caustic_distance",
                "caustic_distance": exact(1e-4),
                "gradient": gradient,
                "mu_r": exact(2.0),
                "side": "saddle",
            },
            {
                "way": "caustic_distance",
                "caustic_distance": exact(1e-4),
                "fold_strength": exact(10.0),
                "mu_r": exact(2.0),
                "side": "pair",
            },
        )
        draws = self.draw(*records, size=200)
        for index, model in enumerate(local_lenses(event(*records))):
            chosen = draws.model == index
            assert chosen.any()
            np.testing.assert_allclose(draws.lam_t[chosen], model.lens.lam_t, rtol=1e-12)
            np.testing.assert_allclose(draws.lam_r[chosen], model.lens.lam_r, rtol=1e-12)

    def test_error_of_a_magnification_is_carried_in_lam_t(self):
        record = {"way": "mu_t+mu_r", "mu_t": Value.normal(100, 80), "mu_r": exact(2.5)}
        lam_t = self.draw(record).lam_t
        # First order: sigma(1/mu) = sigma/mu**2. Five standard errors of 2e4 draws.
        assert lam_t.mean() == pytest.approx(0.01, abs=5 * 0.008 / math.sqrt(20_000))
        assert lam_t.std() == pytest.approx(0.008, rel=5 / math.sqrt(40_000))
        assert (lam_t < 0).any()

    def test_range_of_a_magnification(self):
        lam_t = self.draw({"way": "mu_t+mu_r", "mu_t": Value.loguniform(50, 200), "mu_r": exact(2.5)}).lam_t
        assert lam_t.min() >= 1 / 200
        assert lam_t.max() <= 1 / 50
        assert np.median(lam_t) == pytest.approx(0.01, rel=0.02)  # the median inverts exactly; sampling error 1%

    def test_distance_may_reach_both_sides(self):
        record = {
            "way": "critical_distance",
            "critical_distance": Value.normal(0.1, 0.2),
            "gradient": (exact(0.05), exact(0.0)),
            "mu_r": exact(2.0),
        }
        lam_t = self.draw(record).lam_t
        assert lam_t.std() == pytest.approx(0.05 * 0.2, rel=5 / math.sqrt(40_000))
        assert 0.25 < np.mean(lam_t < 0) < 0.37  # Phi(-1/2) = 0.309

    def test_alternatives_by_weight(self):
        one = {"way": "kappa+gamma", "kappa": exact(0.7), "gamma": exact(0.2)}
        draws = self.draw(one | {"weight": 1.0}, one | {"weight": 3.0})
        assert draws.model.mean() == pytest.approx(0.75, abs=5 * math.sqrt(0.1875 / 20_000))

    def test_no_macro_lens(self):
        with pytest.raises(InputError, match="macro: must be given for this; add kappa and gamma"):
            self.draw()
