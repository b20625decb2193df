"""The fast profiles against the exact ones."""

from __future__ import annotations

import numpy as np
import pytest

from crossing.errors import InputError
from crossing.optics.fold import fold_profile
from crossing.optics.fold_table import fold_table

# Bound asked for; the table reaches 1e-9.
ASKED = 1e-7


@pytest.fixture(scope="module")
def positions() -> np.ndarray:
    return np.concatenate(
        [
            -1 + np.logspace(-12, 1, 20_001),
            1 + np.logspace(-14, 8, 20_001),
            1 - np.logspace(-14, 0.3, 20_001),
            np.linspace(-1.2, 5, 50_001),
            [-1.0, 1.0, 4.0],
        ]
    )


@pytest.mark.parametrize("u", [0.0, 0.5, 1.0])
def test_error(positions, u):
    exact, fast = fold_profile(positions, u), fold_table().profile(positions, u)
    assert np.all(np.abs(fast - exact) < ASKED)
    assert np.all(np.abs(fast - exact) <= ASKED * exact)


def test_parts(positions):
    table = fold_table()
    np.testing.assert_array_equal(table.profile(positions), table.uniform(positions))
    np.testing.assert_allclose(table.limb(positions), fold_profile(positions, 1.0), rtol=1e-13)


def test_ends_and_nan():
    ends = np.array([-np.inf, -1e300, -1.0, np.inf, 1e300, np.nan])
    for values in (fold_table().uniform(ends), fold_table().limb(ends), fold_table().profile(ends, 0.3)):
        np.testing.assert_allclose(values, [0, 0, 0, 0, 1e-150, np.nan], rtol=1e-13)


def test_shapes():
    table = fold_table()
    assert table.uniform(0.3).shape == ()
    assert table.uniform(np.zeros((2, 0, 3))).shape == (2, 0, 3)
    assert table.profile(np.zeros((2, 1)), np.array([0.0, 0.5, 1.0])).shape == (2, 3)
    assert table.profile(np.zeros(2), np.zeros((3, 1))).shape == (3, 2)
    # Non-contiguous input and more values than one block.
    x = np.linspace(-2, 6, 20_002).reshape(2, -1).T
    np.testing.assert_array_equal(table.uniform(x), table.uniform(x.copy()))


def test_shared():
    assert fold_table() is fold_table()


def test_bad_limb_darkening():
    with pytest.raises(InputError, match="`limb_darkening` must be between 0 and 1, got 2"):
        fold_table().profile(0.0, 2.0)
