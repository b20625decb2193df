"""The uniform rectangle: listed values, an independent quadrature, its Taylor series."""

from __future__ import annotations

import numpy as np
import pytest
from twins import sheet_by_quadrature, sheet_part

from crossing.shooting.sheet import sheet_deflection, sheet_series

# Rectangle |x| < 2, |y| < 1 of convergence one. Computed apart from the closed form in real numbers, confirmed by polar
# quadrature; ten decimals.
LISTED = [
    ((0.3, 0.4), (0.1731227079, 0.5624483390)),
    ((1.0, -0.5), (0.5957495394, -0.6549866942)),
    ((-1.5, 0.2), (-1.0099289091, 0.2241825673)),
    ((-1.9, 0.99), (-1.0476667572, 0.9569675777)),
    ((2.0, 0.0), (1.5256728601, 0.0)),
    ((2.0, 1.0), (1.1026344693, 0.8468903615)),
    ((3.0, 0.5), (0.9089037829, 0.1807454589)),
    ((-5.0, 7.0), (-0.1682257496, 0.2419863379)),
    ((0.0, 3.0), (0.0, 0.7639977384)),
    ((-3.0, 0.0), (-0.9447783199, 0.0)),
]


@pytest.mark.parametrize(("point", "deflection"), LISTED)
def test_listed_values(point, deflection):
    assert np.array(sheet_deflection(*point, 2.0, 1.0)) == pytest.approx(np.array(deflection), abs=6e-11)


def test_square_at_corner_and_edge():
    """(ln 2 + pi/2)/pi and (ln 5 + 4 atan(1/2))/pi, by hand."""
    corner = sheet_deflection(1.0, 1.0, 1.0, 1.0)
    assert np.array(corner) == pytest.approx((np.log(2) + np.pi / 2) / np.pi, rel=1e-14)
    edge = sheet_deflection(1.0, 0.0, 1.0, 1.0)
    assert edge[0] == pytest.approx((np.log(5) + 4 * np.arctan(0.5)) / np.pi, rel=1e-14)


@pytest.mark.parametrize("size", [(2.0, 1.0), (1.0, 1.0), (200.0, 1.0), (0.5, 60.0)])
def test_against_quadrature(size):
    """The integral over directions knows nothing of the closed form, and is asked for 1e-12."""
    rng = np.random.default_rng(3)
    for x, y in rng.uniform(-1.7, 1.7, (12, 2)) * size:
        expected = sheet_by_quadrature(x, y, *size)
        assert np.array(sheet_deflection(x, y, *size)) == pytest.approx(np.array(expected), abs=1e-10)


def test_scales_with_convergence_and_broadcasts():
    x, y = np.linspace(-3, 3, 7)[:, None], np.linspace(-2, 2, 5)
    one, two = sheet_deflection(x, y, 2.0, 1.0)
    assert one.shape == two.shape == (7, 5)
    assert np.array(sheet_deflection(x, y, 2.0, 1.0, 0.3)) == pytest.approx(0.3 * np.array([one, two]), rel=1e-14)
    # Symmetric rectangle.
    assert one == pytest.approx(-one[::-1], abs=1e-15)
    assert two == pytest.approx(-two[:, ::-1], abs=1e-15)


def test_far_field():
    """A mass of 4 a b kappa / pi at the centre; the quadrupole is (a/r)^2 of it.

    Farther out the closed form is a small difference of terms like r ln r, whose rounding is a few 1e-16 of them.
    """
    angle = np.linspace(0, 6, 13)
    for distance, room in ((1e2, 2e-4), (1e4, 1e-7)):
        one, two = sheet_deflection(distance * np.cos(angle), distance * np.sin(angle), 2.0, 1.0)
        assert one * np.cos(angle) + two * np.sin(angle) == pytest.approx(8 / np.pi / distance, rel=room)


def series(x, y, a, b, kappa, count=32):
    real, imag = np.zeros(count), np.zeros(count)
    inside = abs(x) < a and abs(y) < b
    sheet_series(x, y, a, b, kappa, inside, count, real, imag)
    return real + 1j * imag, inside


def test_centre_derivatives():
    """d alpha_x/dx = (4/pi) atan(b/a), d alpha_y/dy = (4/pi) atan(a/b): an oblong sheet shears its centre."""
    terms, _ = series(0.0, 0.0, 2.0, 1.0, 1.0)
    along, across = 4 / np.pi * np.arctan(0.5), 4 / np.pi * np.arctan(2.0)
    assert (along, across) == pytest.approx((0.5903344706, 1.409665529), abs=5e-10)
    # The series holds minus the analytic part, whose derivative is (along - across) / 2 = -0.4096655294.
    assert terms[1] == pytest.approx(0.4096655294, abs=5e-11)
    assert terms[0] == 0


# Inside, near each edge and corner, outside on all sides and on the lines that prolong the edges.
CENTRES = [
    (0.0, 0.0), (1.0, -0.6), (-1.9, 0.1), (1.9, 0.97), (-1.7, -0.9), (2.5, 0.3), (-2.1, -0.4), (0.4, 1.2), (-1.0, -1.5),
    (3.0, 4.0), (-2.5, 1.5), (2.3, -1.2), (2.0, 1.7), (-2.0, -3.0), (4.0, 1.0), (-2.6, -1.0), (0.0, 2.0), (-5.0, 0.0),
]  # fmt: skip


@pytest.mark.parametrize("centre", CENTRES)
def test_series_against_deflection(centre):
    """Within 0.4 of the way to the nearest corner, 32 terms leave 0.4^32 = 2e-13."""
    a, b, kappa = 2.0, 1.0, 0.7
    x, y = centre
    terms, inside = series(x, y, a, b, kappa)
    reach = 0.4 * np.hypot(abs(x) - a, abs(y) - b)
    step = reach * np.exp(2j * np.pi * np.linspace(0, 1, 25)) * np.linspace(0, 1, 25)
    z = x + 1j * y + step
    if inside:  # stay there: the analytic part is another one beyond the edge
        step = step[(np.abs(z.real) <= a) & (np.abs(z.imag) <= b)]
    else:
        step = step[(np.abs(z.real) >= a) | (np.abs(z.imag) >= b)]
    z = x + 1j * y + step
    one, two = sheet_deflection(z.real, z.imag, a, b, kappa)
    expected = -(one - 1j * two) + (kappa * np.conj(z) if inside else 0)
    assert np.polyval(terms[::-1], step) == pytest.approx(expected, abs=1e-12)
    first, second = sheet_part(np.array(x + 1e-9), np.array(y + 1e-9), a, b)  # 1e-9: not on the line of an edge
    assert terms[1] == pytest.approx(-kappa * first, abs=1e-7)
    assert 2 * terms[2] == pytest.approx(-kappa * second, rel=1e-7, abs=1e-7)


def test_series_adds_to_what_is_there():
    real, imag = np.ones(8), np.full(8, 2.0)
    sheet_series(0.1, 0.2, 2.0, 1.0, 0.5, True, 8, real, imag)
    terms, _ = series(0.1, 0.2, 2.0, 1.0, 0.5, 8)
    assert real + 1j * imag == pytest.approx(1 + 2j + terms, rel=1e-15)
