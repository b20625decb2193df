"""Mass profiles against tables, numerical differentiation and integration."""

from __future__ import annotations

from math import hypot, pi, sqrt

import numpy as np
import pytest
from scipy.integrate import dblquad, quad

from crossing.errors import InputError
from crossing.optics.macro.profiles import (
    MassProfile,
    NFWSphere,
    PointMass,
    ProfileSum,
    Shear,
    SoftenedEllipsoid,
    UniformSheet,
    isothermal_einstein_radius,
    stretch_eigenvalues,
)
from crossing.optics.scales import LensScales

ELLIPSOID = SoftenedEllipsoid(einstein_radius=3.0, axis_ratio=0.6, core=0.4, angle=27.0)
PROFILES: dict[str, MassProfile] = {
    "sphere": SoftenedEllipsoid(einstein_radius=2.0),
    "sphere with core": SoftenedEllipsoid(einstein_radius=2.0, core=0.3),
    "almost a sphere": SoftenedEllipsoid(einstein_radius=2.0, axis_ratio=1 - 1e-10, core=0.3),
    "singular ellipsoid": SoftenedEllipsoid(einstein_radius=3.0, axis_ratio=0.5, angle=-40.0),
    "ellipsoid": ELLIPSOID,
    "NFW": NFWSphere(kappa_s=0.4, r_s=2.2),
    "point": PointMass(einstein_radius=1.5),
    "shear": Shear(gamma1=0.1, gamma2=-0.07),
    "sheet": UniformSheet(kappa=0.3),
    "sum": ProfileSum(
        parts=(ELLIPSOID, Shear(gamma1=0.05), PointMass(einstein_radius=0.3)), centres=((0, 0), (0, 0), (2.0, 1.0))
    ),
}
each_profile = pytest.mark.parametrize("profile", PROFILES.values(), ids=list(PROFILES))
RNG = np.random.default_rng(5)
X, Y = RNG.uniform(-6, 6, (2, 60))
X, Y = np.compress(np.hypot(X, Y) > 1, (X, Y), axis=1)  # differences of steep cusps are rough

# Bartelmann 1996 and Wright & Brainerd 2000 in the form kappa = 2 ks F, alpha = 4 ks r_s g/x; the numbers were computed
# from the formulas with 30 digits and checked by line-of-sight integrals: x, kappa/ks, alpha/(ks r_s), gamma/ks.
NFW_TABLE = [
    (0.01, 8.597974398, 0.0959734203923, 0.9993676416),
    (0.1, 4.057176060, 0.502795052033, 0.97077446),
    (0.5, 1.388511980, 1.07518105186, 0.7618501234),
    (1.0, 0.6666666667, 1.22741127776, 0.5607446111),
    (2.0, 0.2636001413, 1.20919957616, 0.3409996468),
    (5.0, 0.06003871299, 0.956660940758, 0.1312934752),
    (10.0, 0.01721608553, 0.702896671469, 0.05307358162),
]
# Same source: M200c, c, redshifts, r200 [Mpc], ks, r_s, Einstein radius [arcsec], kappa and mu_r there.
NFW_MASSES = [
    (1e15, 5, (0.5, 1.5), 1.75464343, 0.29738302, 55.782690, 13.516710, 0.73299124, 1.87259777),
    (2e15, 6, (0.4, 1.0), 2.30079653, 0.36128792, 69.203045, 23.579060, 0.69499181, 1.63930024),
    (1.5e15, 7, (0.544, 1.49), 1.97320758, 0.53938854, 42.906493, 26.238116, 0.61737573, 1.30676500),
]
# 4 pi (sigma/c)**2 D_ls/D_s in Planck18, computed with astropy's distances.
ISOTHERMAL = [
    (1000.0, (0.5, 1.5), 16.30203838),
    (1000.0, (0.4, 1.0), 15.24963503),
    (1000.0, (0.544, 1.49), 15.30533060),
    (250.0, (0.5, 1.5), 1.01887740),
]


@each_profile
def test_derivatives_of_the_potential(profile: MassProfile) -> None:
    # Central differences of step h err by h^2/6 of third derivatives (of order 1 here) and by rounding 1e-15/h.
    h = 1e-4
    ax, ay = profile.deflection(X, Y, scale=0.7)
    for step, component in (((h, 0), ax), ((0, h), ay)):
        rise = profile.potential(X + step[0], Y + step[1], scale=0.7) - profile.potential(
            X - step[0], Y - step[1], scale=0.7
        )
        np.testing.assert_allclose(rise / (2 * h), component, rtol=1e-6, atol=1e-7)


@each_profile
def test_derivatives_of_the_deflection(profile: MassProfile) -> None:
    h = 1e-4
    east, west = profile.deflection(X + h, Y, scale=0.7), profile.deflection(X - h, Y, scale=0.7)
    north, south = profile.deflection(X, Y + h, scale=0.7), profile.deflection(X, Y - h, scale=0.7)
    xx, yx = ((a - b) / (2 * h) for a, b in zip(east, west, strict=True))
    xy, yy = ((a - b) / (2 * h) for a, b in zip(north, south, strict=True))
    g1, g2 = profile.shear(X, Y, scale=0.7)
    tolerance = {"rtol": 2e-6, "atol": 1e-6}
    np.testing.assert_allclose((xx + yy) / 2, profile.convergence(X, Y, scale=0.7), **tolerance)
    np.testing.assert_allclose((xx - yy) / 2, g1, **tolerance)
    np.testing.assert_allclose(xy, g2, **tolerance)
    np.testing.assert_allclose(yx, g2, **tolerance)


def test_deflection_is_the_integral_of_the_convergence() -> None:
    """Independent of all derivatives: the deflection is the sum over the mass, on rings around the place."""
    x0, y0 = 1.3, -0.8

    def ring(phi: float, r: float) -> float:
        # The excess over the mirrored direction makes the integral over the radius converge.
        there = float(ELLIPSOID.convergence(x0 - r * np.cos(phi), y0 - r * np.sin(phi)))
        return there * np.cos(phi) / pi

    near = dblquad(ring, 0, 40, 0, 2 * pi, epsabs=1e-6, epsrel=1e-6)[0]
    far = quad(lambda r: quad(ring, 0, 2 * pi, args=(r,))[0], 40, 4000, limit=200)[0]
    # What lies beyond 4000 arcsec falls as 1/r, a relative 1e-3 of a term that itself is x0/r.
    assert near + far == pytest.approx(float(ELLIPSOID.deflection(x0, y0)[0]), abs=1e-3)


def test_circular_limits() -> None:
    """Closed forms of the isothermal sphere with core: alpha = b r/(s + sqrt(s^2+r^2)) (derived here)."""
    b, s = 2.0, 0.3
    r = np.hypot(X, Y)
    expected = b * r / (s + np.hypot(s, r))
    for profile in (PROFILES["sphere with core"], PROFILES["almost a sphere"]):
        np.testing.assert_allclose(np.hypot(*profile.deflection(X, Y)), expected, rtol=1e-9)
    # Just above and below the switch to the series of a round lens.
    close = [SoftenedEllipsoid(einstein_radius=b, axis_ratio=sqrt(1 - e**2), core=s) for e in (0.99e-4, 1.01e-4)]
    np.testing.assert_allclose(close[0].deflection(X, Y), close[1].deflection(X, Y), rtol=1e-9)


@pytest.mark.parametrize(("theta", "mu"), [(20, -4), (24.9, -249), (25.1, 251), (26, 26), (30, 6), (50, 2)])
def test_isothermal_magnification(theta: float, mu: float) -> None:
    """mu = 1/(1 - 25/theta): Schneider, Ehlers & Falco 1992, sec. 8.1.4 (from memory)."""
    lam_t, lam_r = SoftenedEllipsoid(einstein_radius=25.0).eigenvalues(theta * 0.6, theta * 0.8)
    assert 1 / (lam_t * lam_r) == pytest.approx(mu, rel=1e-10)


def test_isothermal_ellipse_keeps_its_area() -> None:
    """Mean convergence within the isodensity line of mean radius b is 1, whatever the axis ratio."""
    singular = SoftenedEllipsoid(einstein_radius=3.0, axis_ratio=0.5)

    def kappa(phi: float, r: float) -> float:
        return float(singular.convergence(r * np.cos(phi) / sqrt(0.5), r * np.sin(phi) * sqrt(0.5))) * r

    assert dblquad(kappa, 0, 3.0, 0, 2 * pi)[0] / (9 * pi) == pytest.approx(1, rel=1e-8)


@pytest.mark.parametrize(("x", "kappa", "alpha", "gamma"), NFW_TABLE)
def test_nfw_table(x: float, kappa: float, alpha: float, gamma: float) -> None:
    profile = NFWSphere(kappa_s=1.0, r_s=3.0)
    place = 3 * x * 0.6, 3 * x * 0.8
    assert float(profile.convergence(*place)) == pytest.approx(kappa, rel=1e-9)
    assert hypot(*profile.deflection(*place)) == pytest.approx(3 * alpha, rel=1e-9)
    assert hypot(*profile.shear(*place)) == pytest.approx(gamma, rel=1e-9)


@pytest.mark.parametrize("switch", [1e-3, 0.95, 1.05])
def test_nfw_is_smooth_where_series_take_over(switch: float) -> None:
    profile = NFWSphere(kappa_s=1.0, r_s=1.0)
    below, above = switch * (1 - 1e-12), switch * (1 + 1e-12)
    # The closed forms lose digits to cancellation: the potential of 2e-6 out of terms near 30 leaves 1e-8.
    for method in (profile.convergence, lambda x, y: profile.deflection(x, y)[0], profile.potential):
        assert float(method(below, 0.0)) == pytest.approx(float(method(above, 0.0)), rel=3e-8)


@pytest.mark.parametrize(("mass", "c", "redshifts", "r200", "kappa_s", "r_s", "theta", "kappa", "mu_r"), NFW_MASSES)
def test_nfw_of_a_mass(
    mass: float,
    c: float,
    redshifts: tuple[float, float],
    r200: float,
    kappa_s: float,
    r_s: float,
    theta: float,
    kappa: float,
    mu_r: float,
) -> None:
    scales = LensScales(*redshifts)
    profile = NFWSphere.of_mass(mass, c, scales)
    assert profile.kappa_s == pytest.approx(kappa_s, rel=1e-6)  # constants of nature enter at 1e-7
    assert profile.r_s == pytest.approx(r_s, rel=1e-6)
    assert profile.r_s * c * scales.kpc_per_arcsec_lens / 1e3 == pytest.approx(r200, rel=1e-6)
    assert float(profile.deflection(theta, 0.0)[0]) == pytest.approx(theta, rel=1e-5)
    assert float(profile.convergence(theta, 0.0)) == pytest.approx(kappa, rel=1e-6)
    lam_t, lam_r = profile.eigenvalues(theta, 0.0)
    assert abs(lam_t) < 1e-6
    assert 1 / lam_r == pytest.approx(mu_r, rel=1e-6)


@pytest.mark.parametrize(("dispersion", "redshifts", "theta"), ISOTHERMAL)
def test_isothermal_einstein_radius(dispersion: float, redshifts: tuple[float, float], theta: float) -> None:
    assert isothermal_einstein_radius(dispersion, LensScales(*redshifts)) == pytest.approx(theta, rel=1e-8)


def test_point_mass_images() -> None:
    """Images of u = 0.5 and their magnifications: Paczynski 1986, ApJ 304, 1 (from memory)."""
    point = PointMass(einstein_radius=2.0)
    for theta, mu in ((1.28077640640, 1.59141031266), (-0.780776406404, -0.591410312663)):
        assert float(point.source_position(2 * theta, 0.0)[0]) == pytest.approx(1.0, rel=1e-10)
        lam_t, lam_r = point.eigenvalues(2 * theta, 0.0)
        assert 1 / (lam_t * lam_r) == pytest.approx(mu, rel=1e-9)


def test_sum_and_scale() -> None:
    total = PROFILES["sum"]
    parts = [ELLIPSOID.deflection(X, Y), Shear(gamma1=0.05).deflection(X, Y)]
    parts.append(PointMass(einstein_radius=0.3).deflection(X - 2, Y - 1))
    np.testing.assert_allclose(total.deflection(X, Y), np.sum(parts, axis=0), rtol=1e-12)
    np.testing.assert_allclose(total.shear(X, Y, scale=0.5), 0.5 * np.array(total.shear(X, Y)), rtol=1e-12)
    alone = ProfileSum(parts=(ELLIPSOID,))
    np.testing.assert_array_equal(alone.potential(X, Y), ELLIPSOID.potential(X, Y))


def test_eigenvalues_name_the_stretch() -> None:
    lam_t, lam_r = stretch_eigenvalues([0.7, 1.6, 1.0], [0.25, -0.5, 0.1])
    np.testing.assert_allclose(lam_t, [0.05, -0.1, -0.1], atol=1e-12)
    np.testing.assert_allclose(lam_r, [0.55, -1.1, 0.1], atol=1e-12)


def test_centres() -> None:
    assert np.isinf(SoftenedEllipsoid(einstein_radius=1.0).convergence(0, 0))
    assert SoftenedEllipsoid(einstein_radius=1.0).deflection(0, 0) == (0, 0)
    assert np.isfinite(ELLIPSOID.shear(0, 0)).all()
    assert np.isinf(PointMass(einstein_radius=1.0).convergence(0, 0))
    assert NFWSphere(kappa_s=1, r_s=1).deflection(0, 0) == (0, 0)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: SoftenedEllipsoid(einstein_radius=-1), "`einstein_radius` must be positive, got -1"),
        (lambda: SoftenedEllipsoid(einstein_radius=1, axis_ratio=1.2), "`axis_ratio` must be above 0 and at most 1"),
        (lambda: SoftenedEllipsoid(einstein_radius=1, core=-1), "`core` must be zero or positive, got -1"),
        (lambda: SoftenedEllipsoid(einstein_radius=1, angle=np.inf), "`angle` must be finite, got inf"),
        (lambda: NFWSphere(kappa_s=0, r_s=1), "`kappa_s` must be positive, got 0"),
        (lambda: NFWSphere.of_mass(1e15, np.nan, LensScales(0.5, 1.5)), "`concentration` must be positive, got nan"),
        (lambda: PointMass(einstein_radius=0), "`einstein_radius` must be positive"),
        (lambda: ProfileSum(parts=()), "`parts` must hold at least one profile"),
        (lambda: ProfileSum(parts=(ELLIPSOID,), centres=((0, 0), (1, 1))), "`centres` must be as many as the 1 parts"),
        (lambda: isothermal_einstein_radius(0, LensScales(0.5, 1.5)), "`dispersion` must be positive"),
    ],
)
def test_bad_input(make: object, message: str) -> None:
    with pytest.raises(InputError, match=message):
        make()  # type: ignore[operator]
