"""The dust law against the table of its own paper."""

from __future__ import annotations

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.stars.extinction import dust_law, transmission

# Cardelli, Clayton & Mathis 1989, ApJ 345, 245, Table 3 (from memory): 1/wavelength, a, b, A/A(V) at R_V = 3.1.
TABLE = [
    (2.78, 0.9530, 1.9090, 1.569),
    (2.29, 0.9982, 1.0495, 1.337),
    (1.82, 1.0000, 0.0000, 1.000),
    (1.43, 0.8686, -0.3660, 0.751),
    (1.11, 0.6800, -0.6239, 0.479),
    (0.80, 0.4008, -0.3679, 0.282),
    (1 / 1.6, 0.2693, -0.2473, 0.190),
    (1 / 2.2, 0.1615, -0.1483, 0.114),
    (1 / 3.4, 0.0800, -0.0734, 0.056),
]


@pytest.mark.parametrize(("x", "a", "b", "ratio"), TABLE)
def test_table(x, a, b, ratio):
    # The paper gives x with two decimals, which moves the steep parts by up to 1e-3.
    assert dust_law(1 / x) == pytest.approx(ratio, abs=1e-3)
    # a and b apart, from two values of R_V.
    low, high = dust_law(1 / x, 1.0), dust_law(1 / x, 1e12)
    assert high == pytest.approx(a, abs=1e-3)
    assert low - high == pytest.approx(b, abs=2e-3)


def test_visual_band_is_the_unit():
    assert dust_law(1 / 1.82) == 1
    assert dust_law(1 / 1.82, 5.0) == 1


@pytest.mark.parametrize("x", [1.1, 3.3, 5.9, 8.0])
def test_pieces_join(x):
    # The published pieces meet within half a per cent.
    below, above = dust_law([1 / (x - 1e-9), 1 / (x + 1e-9)])
    assert above == pytest.approx(below, rel=5e-3)


def test_bump_and_far_ends():
    x = np.linspace(3.4, 9.9, 2000)
    bump = x[np.argmax(np.where(x < 6, dust_law(1 / x), 0))]
    assert bump == pytest.approx(4.6, abs=0.05)  # the 2175 Angstrom bump
    assert dust_law(10.0) == pytest.approx((0.574 - 0.527 / 3.1) * 0.1**1.61)
    assert dust_law(0.1) == pytest.approx(
        -1.073 - 0.628 * 2 + 0.137 * 4 - 0.07 * 8 + (13.67 + 8.514 - 1.68 + 2.992) / 3.1
    )
    assert np.isnan(dust_law(np.nan))


def test_transmission():
    np.testing.assert_allclose(transmission([0, 2.5]), [1, 0.1])


def test_bad_input():
    with pytest.raises(InputError, match=r"`wavelength_um` must be at least 0\.1, got 0\.05; no light arrives"):
        dust_law([0.5, 0.05])
    with pytest.raises(InputError, match=r"`r_v` must be positive, got 0; 3\.1 is the Galactic mean"):
        dust_law(0.5, 0.0)
