"""Star fields: the lens map against straight summation and closed forms, drawing, and the statistics of random fields.

Statistics are judged by their own scatter from field to field: within three standard errors, and within 1% where there
are enough fields for that (slow).
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import ellipe, exp1
from twins import (
    conjugate_sums,
    density_at_zero,
    disc_characteristic,
    lens,
    mean_minima,
    sheet_part,
    source_positions,
)

from crossing.errors import InputError
from crossing.shooting.field import StarField, deflection_reach
from crossing.shooting.sheet import sheet_deflection
from crossing.stars.mass_functions import Population, kroupa, salpeter, single

NOTHING = np.empty(0)


def field(gradient=None, accuracy=1e-9, sheet=True):
    rng = np.random.default_rng(2)
    mass = rng.uniform(0.2, 2.0, 150)
    half = (20.0, np.pi * mass.sum() / (4 * 20 * 0.3))
    x, y = rng.uniform(-half[0], half[0], 150), rng.uniform(-half[1], half[1], 150)
    return StarField(x, y, mass, 0.5, 0.35, *half, gradient, accuracy=accuracy, sheet=sheet)


@pytest.mark.parametrize("gradient", [None, 2e-3, (1e-3, -3e-3)])
@pytest.mark.parametrize("sheet", [True, False])
def test_lens_map_against_straight_summation(gradient, sheet):
    """Positions, deflections and Jacobians, inside and outside of the rectangle; an accuracy of 1e-9 is asked for."""
    stars = field(gradient, sheet=sheet)
    rng = np.random.default_rng(3)
    x, y = rng.uniform(-60, 60, (20, 15)), rng.uniform(-30, 30, (20, 15))
    expected = source_positions(stars, x, y)
    found = stars.source_position(x, y)
    gx, gy = stars.gradient
    alpha = stars.deflection(x, y)
    for axis, smooth in enumerate((0.15 * x + gx * x**2 / 2 + gy * x * y, 0.85 * y + gy * x**2 / 2)):
        assert found[axis] == pytest.approx(expected[axis], rel=1e-9, abs=1e-9)
        assert alpha[axis] == pytest.approx(smooth - expected[axis], abs=1e-9)
    jacobian = stars.jacobian(x, y)
    assert jacobian.shape == (20, 15, 2, 2)
    first = conjugate_sums(x, y, stars.stars)[1].reshape(x.shape)
    inside = (np.abs(x) < stars.half_width) & (np.abs(y) < stars.half_height)
    first -= stars.kappa_star * sheet_part(x, y, stars.half_width, stars.half_height)[0]
    matter = stars.kappa_star * inside
    one = 0.15 + matter + gx * x + gy * y - first.real
    two = 0.85 + matter + first.real
    both = first.imag + gy * x
    scale = 1 + np.abs(first)
    for row, column, value in ((0, 0, one), (0, 1, both), (1, 0, both), (1, 1, two)):
        assert np.max(np.abs(jacobian[..., row, column] - value) / scale) < 1e-9


def test_jacobian_is_that_of_the_map():
    """Central differences over 1e-5 leave 1e-10 times third derivatives."""
    stars = field((1e-3, -3e-3))
    rng = np.random.default_rng(4)
    x, y = rng.uniform(-25, 25, 50), rng.uniform(-9, 9, 50)
    jacobian, step = stars.jacobian(x, y), 1e-5
    for axis in range(2):
        dx, dy = step * (axis == 0), step * (axis == 1)
        ahead, behind = stars.source_position(x + dx, y + dy), stars.source_position(x - dx, y - dy)
        for row in range(2):
            assert (ahead[row] - behind[row]) / (2 * step) == pytest.approx(jacobian[:, row, axis], rel=1e-5, abs=1e-6)


def test_numbers_in_numbers_out():
    stars = field()
    u, v = stars.source_position(1.0, 2.0)
    assert np.shape(u) == np.shape(v) == ()
    assert stars.jacobian(1.0, 2.0).shape == (2, 2)
    assert stars.deflection(np.zeros((3, 1)), np.zeros(4))[0].shape == (3, 4)
    assert stars.source_position(NOTHING, NOTHING)[0].shape == (0,)
    assert len(stars) == 150
    assert repr(stars).startswith("StarField(150 stars, kappa=0.5, gamma=0.35, kappa_star=0.3")


def test_on_a_star_nothing_is_finite():
    stars = StarField([0.0, 3.0], [0.0, 1.0], 1.0, 0.5, 0.2, 10.0, 10.0)
    assert np.isnan(stars.deflection([0.0, 1.0], [0.0, 1.0])[0]).tolist() == [True, False]
    assert np.isnan(stars.jacobian(3.0, 1.0)).all()


# lam_t, gradient: one side of the fold, on it, the critical curve at an angle to the stretch and along it.
BENT = [
    (0.02, 1e-3),
    (0.0, (1e-4, 0.0)),
    (0.0, (1e-4, 5e-5)),
    (0.02, (1e-3, 5e-3)),
    (0.0, (1e-6, 1e-3)),
    (-0.01, (0.0, 1e-3)),
]


@pytest.mark.parametrize(("lam_t", "gradient"), BENT)
def test_region_of_rays_holds_the_pair(lam_t, gradient):
    """All of the smooth map's images of the window and its surroundings, and not much else."""
    field = StarField(NOTHING, NOTHING, NOTHING, *lens(lam_t, 0.4), 1.0, 1.0, gradient)
    wide, high = field.ray_region((5.0, 7.0))
    x, y = np.meshgrid(np.linspace(-3 * wide, 3 * wide, 1201), np.linspace(-3 * high, 3 * high, 1201))
    u, v = field.source_position(x, y)
    lands = (np.abs(u) < 5.0) & (np.abs(v) < 7.0)
    assert 0.9 * wide < np.max(np.abs(x[lands])) < 1.02 * wide
    assert 0.3 * high < np.max(np.abs(y[lands])) < 1.02 * high


def test_third_image_of_a_bent_map_is_left_out():
    """At x = gx lam_r / gy^2 = 10000 the quadratic map has a further image, where it is no map of the lens any more."""
    stars = StarField.draw(*lens(0.0, 0.4), 0.01, 5.0, gradient=(1e-5, -2e-5), seed=1)
    assert stars.half_width < 2000


def test_isolated_star_with_gradient():
    """Rays from beyond the region miss the window, which holds the pair and the star's own images."""
    star = StarField([3.0], [-1.0], [4.0], *lens(0.0, 0.4), 1.0, 1.0, 1e-3, sheet=False)
    wide, high = star.ray_region((2.0, 2.0))
    x, y = np.meshgrid(np.linspace(-3 * wide, 3 * wide, 801), np.linspace(-3 * high, 3 * high, 801))
    u, v = star.source_position(x, y)
    lands = (np.abs(u) < 2.0) & (np.abs(v) < 2.0)
    assert lands.any()
    assert np.max(np.abs(x[lands])) < wide
    assert np.max(np.abs(y[lands])) < high


def test_input_arrays_are_copied():
    x = np.array([1.0, 2.0])
    stars = StarField(x, x, 1.0, 0.5, 0.2, 10.0, 10.0)
    before = stars.source_position(0.0, 0.0)
    x[:] = 5.0
    assert np.array_equal(stars.source_position(0.0, 0.0), before)
    assert np.array_equal(stars.mass, [1.0, 1.0])


def test_smooth_field():
    smooth = StarField(NOTHING, NOTHING, NOTHING, 1.0, 0.5, 2.0, 2.0)
    assert (smooth.lens.lam_t, smooth.lens.lam_r) == (-0.5, 0.5)
    assert smooth.expected_mean == 4.0
    assert smooth.heavy_mass == 0.0
    u, v = smooth.source_position(3.0, 5.0)
    assert (u, v) == (-1.5, 2.5)


def test_images_and_expected_mean():
    assert (field().images, field(1e-3).images, field((0.0, 0.0)).images) == (1, 2, 1)
    assert field().expected_mean == pytest.approx(1 / (0.15 * 0.85), rel=1e-12)
    assert field(1e-3).expected_mean is None
    assert field(sheet=False).expected_mean is None


BAD = [
    (([1.0], [1.0], [-1.0], 0.5, 0.2, 10, 10), "`mass` must be positive, got -1"),
    (([1.0], [math.nan], [1.0], 0.5, 0.2, 10, 10), "`y` must be finite, got a value that is not at star 0"),
    (([1.0, 2.0], [1.0], [1.0, 2.0, 3.0], 0.5, 0.2, 10, 10), "`x`, `y`, `mass` must have the same shape"),
    (([[1.0]], [[1.0]], 1.0, 0.5, 0.2, 10, 10), "must be one-dimensional"),
    (([11.0], [1.0], [1.0], 0.5, 0.2, 10, 10), "must lie in the rectangle, 1 stars do not"),
    (([1.0], [1.0], [1.0], 0.5, 0.2, 0.0, 10), "`half_width` must be positive"),
    (([1.0], [1.0], [1.0], math.inf, 0.2, 10, 10), "`kappa` must be finite"),
    (([1.0], [1.0], [100.0], 0.5, 0.2, 10, 10), "`kappa` must be at least the 0.785398 that is in stars, got 0.5"),
]


@pytest.mark.parametrize(("arguments", "message"), BAD)
def test_bad_fields(arguments, message):
    with pytest.raises(InputError, match=message):
        StarField(*arguments)


def test_bad_accuracy_and_points():
    with pytest.raises(InputError, match=r"`accuracy` must be between 1e-14 and 1e-2, got 0\.1"):
        StarField([1.0], [1.0], 1.0, 0.5, 0.2, 10, 10, accuracy=0.1)
    with pytest.raises(InputError, match="`lost_flux` must be between 1e-12 and 1, got 0"):
        StarField([1.0], [1.0], 1.0, 0.5, 0.2, 10, 10, lost_flux=0.0)
    with pytest.raises(InputError, match="`x`, `y` must be finite"):
        field().deflection(math.nan, 0.0)


TWO = (Population(0.03, kroupa()), Population(0.02, single(30.0)))


def test_drawn_convergence_is_exact():
    """Of each population and in total, whatever the masses."""
    for populations in ((Population(0.05, salpeter()),), TWO):
        stars = StarField.draw(0.6, 0.3, None, 3.0, populations=populations, seed=1)
        assert stars.kappa_star == pytest.approx(0.05, rel=1e-13)
        area = 4 * stars.half_width * stars.half_height
        counts = [part["stars"] for part in stars.description["populations"]]
        assert sum(counts) == len(stars)
        for part, masses in zip(populations, np.split(stars.mass, np.cumsum(counts)[:-1]), strict=True):
            assert np.pi * masses.sum() / area == pytest.approx(part.kappa_star, rel=1e-12)
            low, high = part.mass_function.mass_range
            assert np.sum(masses < low) <= 1  # the last one is what is missing
            assert masses.max() <= high
        assert np.all(np.abs(stars.x) <= stars.half_width)
        assert np.all(np.abs(stars.y) <= stars.half_height)


def test_same_seed_same_field():
    one, two = (StarField.draw(0.6, 0.3, 0.1, 1.0, kroupa(), seed=5) for _ in range(2))
    assert np.array_equal(one.x, two.x)
    assert np.array_equal(one.mass, two.mass)
    sequence = np.random.SeedSequence(5)
    assert np.array_equal(StarField.draw(0.6, 0.3, 0.1, 1.0, kroupa(), seed=sequence).y, one.y)
    assert sequence.n_children_spawned == 0
    other = StarField.draw(0.6, 0.3, 0.1, 1.0, kroupa(), seed=sequence.spawn(1)[0])
    assert not np.array_equal(other.x[:10], one.x[:10])
    assert other.description["seed"] == {"entropy": "5", "spawn_key": [0]}


def test_draw_refuses():
    with pytest.raises(InputError, match="either `kappa_star` or `populations`"):
        StarField.draw(0.6, 0.3, None, 1.0)
    with pytest.raises(InputError, match=r"must sum to between 0 and kappa, got 0\.7 of 0\.6"):
        StarField.draw(0.6, 0.3, 0.7, 1.0)
    with pytest.raises(InputError, match="lie on the critical curve; without a gradient"):
        StarField.draw(0.75, 0.25, 0.1, 1.0)
    with pytest.raises(InputError, match=r"needs about .* stars and .* GiB, more than fits"):
        StarField.draw(*lens(2e-4, 0.4), 0.3, 100.0, kroupa())


def test_small_eigenvalues_and_gradients_are_drawn():
    """|lam_t| down to 2e-4, either sign; lam_t = 0 with a gradient, whose strip ends where u is out of reach."""
    for lam_t in (2e-4, -2e-4):
        stars = StarField.draw(*lens(lam_t, 0.4), 0.003, 0.5, seed=1)
        assert stars.half_width > (0.5 + deflection_reach(0.003, 5e-4)) / 2e-4
    stars = StarField.draw(*lens(0.0, 0.4), 0.01, 5.0, gradient=1e-5, seed=1)
    u, _ = stars.source_position(stars.ray_region((5.0, 5.0))[0], 0.0)
    assert u == pytest.approx(5 + deflection_reach(0.01, 5e-4), abs=1.0)  # the stars' own deflection is left


def determinant(stars, x, y):
    jacobian = stars.jacobian(x, y)
    return jacobian[..., 0, 0] * jacobian[..., 1, 1] - jacobian[..., 0, 1] ** 2


class Star(NamedTuple):
    """One star of a solar mass at the origin."""

    lam_t: float
    lam_r: float
    length: float
    area: float
    cusps: tuple[tuple[float, float], ...]


# Chang & Refsdal (1979, 1984), An & Evans (2006): cusps in closed form, length and area by integrals over the closed
# form of the critical curve; confirmed by an image solver. Ten digits.
ONE_STAR = [
    Star(0.005, 0.4, 22.98326893, 1.921764846, ((0.6245498379, 0.0), (0.0, 5.586143571))),
    Star(0.1, 0.5, 5.830807759, 0.7491071360, ((0.5656854249, 0.0), (0.0, 1.264911064))),
    Star(-0.005, 0.4, 15.92329093, 0.7647899647, ((0.6403612262, 0.0), (0.1306751708, 1.914864231))),
    Star(-0.1, 0.5, 2.672162324, 0.07059654067, ((0.8485281374, 0.0), (0.6131551023, 0.2824816757))),
]


def critical_curves(lam_t, lam_r, count=20001):
    """r(phi) of one star in convergence and shear, closed curves."""
    gamma, phi = (lam_r - lam_t) / 2, np.linspace(0, 2 * np.pi, count)
    if lam_t * lam_r > 0:
        square = (-gamma * np.cos(2 * phi) + np.sqrt(gamma**2 * np.cos(2 * phi) ** 2 + lam_t * lam_r)) / (lam_t * lam_r)
        return [np.sqrt(square) * np.exp(1j * phi)]
    # Two closed curves around the x axis: both roots, between the angles where they meet. Cosine steps, for the ends.
    end = 0.5 * np.arccos(np.sqrt(-lam_t * lam_r) / gamma)
    phi = -end * np.cos(np.linspace(0, np.pi, count))
    root = np.sqrt(np.maximum(gamma**2 * np.cos(2 * phi) ** 2 + lam_t * lam_r, 0.0))
    out = np.sqrt((-gamma * np.cos(2 * phi) - root) / (lam_t * lam_r)) * np.exp(1j * phi)
    back = np.sqrt((-gamma * np.cos(2 * phi) + root) / (lam_t * lam_r)) * np.exp(1j * phi)
    loop = np.concatenate([out, back[::-1]])
    return [loop, -loop]


@pytest.mark.parametrize("star", ONE_STAR)
def test_one_star_in_shear_and_convergence(star):
    """On the critical curve in closed form the determinant vanishes; it maps to the caustic with the listed numbers."""
    field = StarField([0.0], [0.0], [1.0], *lens(star.lam_t, star.lam_r), 30.0, 30.0, sheet=False)
    length = area = 0.0
    tips = []
    for curve in critical_curves(star.lam_t, star.lam_r):
        assert np.max(np.abs(determinant(field, curve.real, curve.imag))) < 1e-9
        u, v = field.source_position(curve.real, curve.imag)
        length += np.sum(np.hypot(np.diff(u), np.diff(v)))
        area += abs(0.5 * np.sum(u[:-1] * np.diff(v) - v[:-1] * np.diff(u)))
        tips += [complex(a, b) for a, b in zip(u, v, strict=True)]
    # A chord is short of its arc by (1/20000)^2 of it, more at the cusps.
    assert length == pytest.approx(star.length, rel=1e-6)
    assert area == pytest.approx(star.area, rel=1e-6)
    for u, v in star.cusps:
        for cusp in {complex(a * u, b * v) for a in (1, -1) for b in (1, -1)}:
            assert np.min(np.abs(np.array(tips) - cusp)) < 1e-6
    assert np.max(np.abs(np.array(tips).imag)) == pytest.approx(max(v for _, v in star.cusps), rel=1e-6)


def test_determinant_of_one_star():
    """lam_t lam_r + 2 gamma cos(2 phi)/r^2 - 1/r^4."""
    field = StarField([0.0], [0.0], [1.0], *lens(0.1, 0.5), 30.0, 30.0, sheet=False)
    r, phi = np.geomspace(1e-4, 20, 40)[:, None], np.linspace(0, 6, 11)
    expected = 0.05 + 0.4 * np.cos(2 * phi) / r**2 - 1 / r**4
    assert determinant(field, r * np.cos(phi), r * np.sin(phi)) == pytest.approx(expected, rel=1e-12, abs=1e-12)


def near_zero(kappa, kappa_star, gamma, room):
    """Probability that the determinant of a random field is within `room` of zero."""
    k = 1 - kappa + kappa_star

    def ring(r):
        a = kappa_star**2 + (r + gamma) ** 2
        return 2 * kappa_star / np.pi * r * ellipe(4 * r * gamma / a) / ((a - 4 * r * gamma) * np.sqrt(a))

    found = quad(ring, np.sqrt(k**2 - room), np.sqrt(k**2 + room), epsrel=1e-10)[0]
    assert found / (2 * room) == pytest.approx(density_at_zero(kappa - kappa_star, kappa_star, gamma), rel=0.01)
    return found


def strip_statistics(lam_t, lam_r, kappa_star, masses, window, room, fields, lines, seed):
    """Density of det = 0 along random lines and mean number of minima, over their closed forms: means and errors."""
    kappa, gamma = lens(lam_t, lam_r)
    found = []
    for number in range(fields):
        stars = StarField.draw(kappa, gamma, kappa_star, window, masses, seed=seed + number)
        wide, high = stars.ray_region((window, window))
        rng = np.random.default_rng(seed + number)
        # Lines of the strip's height, in every direction, about its middle.
        angle, start = rng.uniform(0, np.pi, (lines, 1)), rng.uniform(-wide + high, wide - high, (lines, 1))
        along = rng.uniform(-0.5, 0.5, (lines, 150)) * high
        x, y = start + along * np.cos(angle), rng.uniform(-0.4, 0.4, (lines, 1)) * high + along * np.sin(angle)
        value = determinant(stars, x, y)
        found.append((np.mean(np.abs(value) < room), np.mean(np.maximum(value, 0.0))))
    density, minima = np.array(found).T
    density /= near_zero(kappa, kappa_star, gamma, room)
    minima /= abs(lam_t * lam_r) * mean_minima(kappa - kappa_star, kappa_star, gamma)
    return [(part.mean(), part.std(ddof=1) / np.sqrt(fields)) for part in (density, minima)]


# lam_t, lam_r, kappa_star, masses, half size of the window, room around zero, seed.
STRIPS = [
    (0.005, 0.4, 0.01, single(1.0), 20.0, 5e-4, 1000),
    (-0.005, 0.4, 0.01, kroupa(), 20.0, 5e-4, 2000),
    (0.1, 0.5, 0.2, kroupa(), 20.0, 5e-3, 3000),
    (0.001, 0.4, 0.003, single(1.0), 10.0, 2e-4, 4000),
]


@pytest.mark.parametrize("strip", STRIPS)
def test_determinant_and_minima(strip):
    """Three standard errors, which are about 2% with ten fields."""
    for mean, error in strip_statistics(*strip[:-1], 10, 800, strip[-1]):
        assert error < 0.05
        assert abs(mean - 1) < 3 * error


@pytest.mark.slow
@pytest.mark.parametrize("strip", STRIPS)
def test_determinant_and_minima_to_a_percent(strip):
    """Three standard errors and 1%."""
    for mean, error in strip_statistics(*strip[:-1], 150, 3000, strip[-1]):
        assert error < 0.005
        assert abs(mean - 1) < min(3 * error, 0.01)


def test_closed_forms_of_random_fields():
    """kappa_smooth, kappa_star, gamma, p_J(0), <n_min>: by Hankel integrals and Monte Carlo apart from here."""
    for smooth, stars, gamma, density, minima in (
        (0.0, 0.1, 0.0, 0.04925926684, 1.011114182),
        (0.0, 0.4, 0.0, 0.1600821881, 1.273260086),
        (0.3, 0.2, 0.2, 0.3013688864, 1.215277167),
        (0.7875, 0.01, 0.1975, 23.97366390, 3.347165153),
        (0.7925, 0.01, 0.2025, 62.19436536, 1.944621935),
    ):
        assert density_at_zero(smooth, stars, gamma) == pytest.approx(density, rel=1e-9)
        assert mean_minima(smooth, stars, gamma) == pytest.approx(minima, rel=1e-9)
    # c(u) of Katz, Balbus & Paczynski (1986), by oscillatory quadrature.
    expected = [0.999713944758668, 0.982905854673729, 0.772891982500935, -0.0822415032287739]
    assert disc_characteristic(np.array([0.01, 0.1, 0.5, 2.0])) == pytest.approx(np.array(expected), abs=1e-14)


def disc_deflections(fields, count=100, seed=7):
    """Deflection at the centre of a disc of stars with convergence one."""
    rng = np.random.default_rng(seed)
    radius, found = np.sqrt(count), np.empty((fields, 2))
    for number in range(fields):
        z = radius * np.sqrt(rng.random(count)) * np.exp(2j * np.pi * rng.random(count))
        stars = StarField(z.real, z.imag, 1.0, 0.0, 0.0, 1.0, 1.0, sheet=False)
        found[number] = stars.deflection(0.0, 0.0)
    return found


def check_disc(found, count=100):
    for wave in (0.3, 0.7, 1.5):
        expected = disc_characteristic(wave / np.sqrt(count)) ** count
        phases = np.exp(1j * wave * found)  # both axes follow the same law
        error = np.sqrt((1 - expected**2) / len(found))
        assert np.all(np.abs(phases.mean(axis=0) - expected) < 3.5 * error)
    # P(<1), P(<3) and the median from the listed inversion of the characteristic function.
    size = np.hypot(*found.T)
    for limit, expected in ((1.0, 0.132731), (3.0, 0.681705), (2.27001, 0.5)):
        assert abs(np.mean(size < limit) - expected) < 3 * np.sqrt(expected * (1 - expected) / len(found))


def test_deflection_statistics():
    check_disc(disc_deflections(500))


@pytest.mark.slow
def test_deflection_statistics_of_many_fields():
    """Errors of the characteristic function are 0.7%."""
    check_disc(disc_deflections(20_000))


def rectangle_characteristic(wave, point, half, mass):
    """E[exp(i k alpha_x)] for one star anywhere in a rectangle: the disc's integral in every direction's own length."""
    angle = (np.arange(4000) + 0.5) * np.pi / 2000
    step = np.stack([np.cos(angle), np.sin(angle)])
    with np.errstate(divide="ignore"):
        reach = ((np.sign(step) * half[:, None] - point[:, None]) / step).min(axis=0)
    q = -mass[:, None] * wave * step[0]
    a = np.abs(q) / reach
    part = reach**2 / 2 * np.exp(1j * a) * (1 + 1j * a) - q**2 / 2 * exp1(-1j * a)
    return np.where(q < 0, part.conj(), part).sum(axis=1) * np.pi / 2000 / (4 * half[0] * half[1])


def drawn_deflections(fields, points, waves, seed):
    """Differences of mean phases from their expectation, over their standard errors; (waves, points)."""
    phases, expected = [], []
    for number in range(fields):
        stars = StarField.draw(0.45, 0.2, 0.1, 0.5, kroupa(), seed=seed + number, lost_flux=0.03)
        half = np.array([stars.half_width, stars.half_height])
        alpha = stars.deflection(*(points * half).T)[0]
        phases.append(np.exp(1j * waves[:, None] * alpha))
        if number == 0:
            masses = np.linspace(0.0, 1.5, 200)[1:]
            tables = [[rectangle_characteristic(k, p * half, half, masses) for p in points] for k in waves]
            sheet = sheet_deflection(*(points * half).T, *half, stars.kappa_star)[0]
        expected.append(
            [
                [
                    np.prod(np.interp(stars.mass, masses, table)) * np.exp(-1j * k * s)
                    for table, s in zip(row, sheet, strict=True)
                ]
                for k, row in zip(waves, tables, strict=True)
            ]
        )
    mean, expected = np.mean(phases, axis=0), np.mean(expected, axis=0)
    return np.abs(mean - expected) / np.sqrt((1 - np.abs(expected) ** 2) / fields)


def test_deflections_of_drawn_fields():
    """The same law in an oblong field of unequal masses, less its sheet; at its centre, on its way out, in a corner."""
    points = np.array([[0.0, 0.0], [0.6, -0.3], [0.97, 0.95]])
    ratio = drawn_deflections(200, points, np.array([0.3, 1.0, 2.0]), 100)
    # Of nine complex numbers with unit variance.
    assert np.max(ratio) < 3.5
    assert np.sqrt(np.mean(ratio**2)) < 1.7
