"""Excursions of a light curve above a level."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from crossing.errors import InputError
from crossing.shooting.tracks.excursions import excursions


def test_two_triangles() -> None:
    """By hand: rises through 1 at 0.5 and 4.25, falls at 1.5 and 5.5."""
    found = excursions([0, 1, 2, 4, 5, 6], [0, 2, 0, 0, 4, 0 - 2.0], 1.0)
    assert found.start == pytest.approx([0.5, 4.25])
    assert found.end == pytest.approx([1.5, 5.5])
    assert found.above == pytest.approx([1.0, 1.25])
    assert found.peak == pytest.approx([2.0, 4.0])
    assert found.peak_place == pytest.approx([1.0, 5.0])
    assert found.whole.tolist() == [True, True]


@pytest.mark.parametrize(("merge", "count"), [(0.0, 3), (1.0, 2), (2.4, 2), (2.5, 1), (100.0, 1)])
def test_close_ones_are_one(merge: float, count: int) -> None:
    """Gaps of exactly 1.0 and 2.5; a gap as long as `merge` is bridged."""
    place = [0.0, 1.0, 2.0, 3.0, 4.0, 5.0, 7.5, 8.5, 9.5]
    value = [0.0, 2.0, 1.0, 1.0, 2.0, 1.0, 1.0, 3.0, 0.0]
    found = excursions(place, value, 1.0, merge)
    assert len(found.start) == count
    assert found.above.sum() == pytest.approx(0.5 + 1 + 1 + 1 + 1 + 2 / 3)
    assert found.peak[-1] == 3.0


def test_cut_by_the_ends() -> None:
    found = excursions([0, 1, 2, 3], [2, 0, 0, 2], 1.0)
    assert (found.start[0], found.end[-1]) == (0.0, 3.0)
    assert found.whole.tolist() == [False, False]
    assert excursions([0, 1], [2, 3], 1.0).whole.tolist() == [False]
    assert len(excursions([0, 1], [0, 1], 1.0).start) == 0
    assert excursions([0, 1, 2], [0, 2, 0], 1.0).whole.tolist() == [True]


@given(
    st.lists(st.floats(-3, 3), min_size=2, max_size=40),
    st.floats(-2, 2),
    st.floats(0, 3),
)
def test_lengths_and_order(values: list[float], level: float, merge: float) -> None:
    """Against a fine grid: the length above the level, to a step for each crossing; ends in order, gaps longer."""
    place = np.arange(len(values), dtype=float)
    found = excursions(place, values, level, merge)
    fine = np.linspace(0, place[-1], 20_001)
    share = np.mean(np.interp(fine, place, values) > level) * place[-1]
    assert found.above.sum() == pytest.approx(share, abs=len(values) * 2 * place[-1] / 20_000 + 1e-9)
    assert np.all(found.end >= found.start)
    assert np.all(found.start[1:] - found.end[:-1] > merge)
    assert np.all(found.peak > level)


def test_bad_curves() -> None:
    for place, value in (([0], [1]), ([0, 0], [1, 2]), ([1, 0], [1, 2]), ([0, 1], [1, 2, 3])):
        with pytest.raises(InputError, match="must be two or more points in rising order"):
            excursions(place, value, 1.0)
