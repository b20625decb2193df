"""Point lens: closed forms against published values and a boundary integral."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad

from crossing.errors import InputError
from crossing.optics.point_lens import disc_on_axis, disc_on_rim, point_images, point_impact, point_magnification


# Paczynski 1986, ApJ 304, 1 (formulas from memory); checked with polynomial roots and Jacobians, 12 printed digits.
@pytest.mark.parametrize(
    ("u", "total", "outer", "inner", "mu_outer", "mu_inner"),
    [
        (0.001, 1000.000375, 1.000500125, -0.999500125, 500.5001875, -499.5001875),
        (0.01, 100.003749961, 1.00501249992, -0.995012499922, 50.5018749805, -49.5018749805),
        (0.1, 10.0374610057, 1.05124921973, -0.951249219725, 5.51873050286, -4.51873050286),
        (0.5, 2.18282062533, 1.28077640640, -0.780776406404, 1.59141031266, -0.591410312663),
        (1, 3 / math.sqrt(5), (1 + math.sqrt(5)) / 2, (1 - math.sqrt(5)) / 2, 1.17082039325, -0.17082039325),
        (1.5, 17 / 15, 2, -0.5, 16 / 15, -1 / 15),
        (2, 3 / (2 * math.sqrt(2)), 2.41421356237, -0.414213562373, 1.03033008589, -0.0303300858899),
    ],
)
def test_images(u, total, outer, inner, mu_outer, mu_inner):
    assert point_magnification(u) == pytest.approx(total, rel=1e-9)  # the first row has 10 digits
    images = point_images(u)
    np.testing.assert_allclose(images, (outer, inner, mu_outer, mu_inner), rtol=1e-9)
    assert images.mu_outer + images.mu_inner == pytest.approx(1)
    # Both solve the lens equation, and both magnifications are the inverse Jacobian.
    for position, mu in ((images.outer, images.mu_outer), (images.inner, images.mu_inner)):
        assert position - 1 / position == pytest.approx(u, rel=1e-12)
        assert mu == pytest.approx(1 / (1 - position**-4), rel=1e-9)


def test_limits():
    np.testing.assert_array_equal(point_magnification([0.0, np.inf, -1e200]), [np.inf, 1, 1])
    assert np.isnan(point_magnification(np.nan))
    assert point_magnification(-0.5) == point_magnification(0.5)


def test_inverse():
    # u**2 = 2A/sqrt(A**2-1) - 2, computed with 20 digits.
    np.testing.assert_allclose(
        point_impact([10, 100, 1000]), [0.100377440286, 0.0100003750242, 0.001000000375], rtol=1e-11
    )
    u = np.logspace(-6, 2, 50)
    # A - 1 = 2/u**4 far out, so rounding of A limits the inverse there.
    np.testing.assert_allclose(point_impact(point_magnification(u[u < 10])), u[u < 10], rtol=1e-9)


def test_uniform_disc():
    # Boundary integral with F(u) = u sqrt(u**2+4)/2 and two-dimensional quadrature agree with these to 1e-11.
    rho = [0.001, 0.01, 0.05, 0.1, 0.5, 1, 2]
    axis = [2000.00025, 200.002499984, 40.0124980475, 20.0249843945, 4.12310562562, 2.23606797750, 1.41421356237]
    np.testing.assert_allclose(disc_on_axis(rho), axis, rtol=1e-11)
    rim = {0.01: 127.328198520, 0.1: 12.7747522446, 0.5: 2.74907572124, 1: 1.63661977237}
    np.testing.assert_allclose(disc_on_rim(list(rim)), list(rim.values()), rtol=1e-11)


@pytest.mark.parametrize("rho", [0.05, 0.7, 3.0])
def test_rim_against_quadrature(rho):
    # Polar coordinates around the lens: the disc reaches from 0 to 2 rho cos(phi); A u du integrates to F.
    area, _ = quad(lambda p: (lambda r: r * math.hypot(r, 2) / 2)(2 * rho * math.cos(p)), -math.pi / 2, math.pi / 2)
    assert disc_on_rim(rho) == pytest.approx(area / (math.pi * rho**2), rel=1e-9)  # quadrature


def test_bad_input():
    for function in (disc_on_axis, disc_on_rim):
        with pytest.raises(InputError, match="`radius` must be positive, got 0; use point_magnification for a point"):
            function([0.1, 0.0])
    with pytest.raises(InputError, match=r"`magnification` must be above 1, got 0\.5; a point lens never dims"):
        point_impact([2.0, 0.5])
    with pytest.raises(InputError, match="`u` must be positive, got 0; at 0 the image is a ring"):
        point_images(0.0)
