"""Numerical images against closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.optics.macro.images import solve_images
from crossing.optics.macro.profiles import PointMass, ProfileSum, Shear, SoftenedEllipsoid


def test_point_mass() -> None:
    """u = 0.5: Paczynski 1986, ApJ 304, 1 (from memory)."""
    images = solve_images(PointMass(einstein_radius=2.0), (1.0, 0.0), 6.0)
    np.testing.assert_allclose(images.x, [2 * 1.28077640640, -2 * 0.780776406404], rtol=1e-10)
    np.testing.assert_allclose(images.y, 0, atol=1e-10)
    np.testing.assert_allclose(images.mu, [1.59141031266, -0.591410312663], rtol=1e-9)
    # The Fermat potential of both: (u^2 + 2 -+ u sqrt(u^2+4))/4 - ln theta, Schneider, Ehlers & Falco 1992, sec. 8.1.2.
    u, root = 0.5, np.sqrt(4.25)
    expected = u * root / 2 + np.log((root + u) / (root - u))
    assert images.arrival[1] - images.arrival[0] == pytest.approx(4 * expected, rel=1e-10)


def test_isothermal_sphere() -> None:
    """Images at theta_E + beta and beta - theta_E, total magnification 2 theta_E/beta."""
    images = solve_images(SoftenedEllipsoid(einstein_radius=4.0), (0.6, 0.8), 9.0, scale=0.5)
    np.testing.assert_allclose(np.hypot(images.x, images.y), [3.0, 1.0], rtol=1e-10)
    assert np.abs(images.mu).sum() == pytest.approx(4.0, rel=1e-9)
    # Delay 2 theta_E beta: Schneider, Ehlers & Falco 1992, sec. 8.1.4 (from memory).
    assert np.diff(images.arrival) == pytest.approx(4.0, rel=1e-10)


@pytest.mark.parametrize("source", [(0.0, 0.1), (0.2, 0.1), (0.7, -0.3), (1.5, 2.0), (6.0, 1.0)])
def test_number_and_parities(source: tuple[float, float]) -> None:
    """A smooth lens has 2n + 1 images, one more of positive parity: Burke 1981, ApJ 244, L1 (from memory)."""
    profile = ProfileSum(
        parts=(SoftenedEllipsoid(einstein_radius=4.0, axis_ratio=0.6, core=0.3, angle=20), Shear(gamma1=0.06))
    )
    images = solve_images(profile, source, 12.0)
    assert np.sign(images.mu).sum() == 1
    assert len(images) % 2 == 1
    u, v = profile.source_position(images.x, images.y)
    np.testing.assert_allclose(np.stack([u, v]), np.array(source)[:, None] * np.ones(len(images)), atol=1e-9)
    assert images.mu[0] > 0  # the first to arrive is a minimum
    assert np.all(np.diff(images.arrival) >= 0)


def test_close_pair_is_resolved() -> None:
    """A relative 1e-7 inside the cusps of a point mass in shear, the close images are some 1e-3 apart."""
    profile = ProfileSum(parts=(PointMass(einstein_radius=1.0), Shear(gamma1=0.1)))
    # Cusps at 2 gamma/sqrt(lam): Chang & Refsdal 1979, Nature 282, 561 (from memory).
    for cusp in (np.array([0.2 / np.sqrt(1.1), 0.0]), np.array([0.0, 0.2 / np.sqrt(0.9)])):
        inside, outside = (solve_images(profile, tuple(f * cusp), 4.0) for f in (1 - 1e-7, 1 + 1e-7))
        assert (len(inside), len(outside)) == (4, 2)


def test_table() -> None:
    images = solve_images(PointMass(einstein_radius=2.0), (1.0, 0.0), 6.0)
    assert len(images.to_table()) == len(images) == 2
    assert images.to_dict()["mu"] == images.mu.tolist()


def test_no_field() -> None:
    with pytest.raises(InputError, match="`half_width` must be positive, got 0 arcsec"):
        solve_images(PointMass(einstein_radius=2.0), (1.0, 0.0), 0.0)
