"""Intervals, limits, and which of them a posterior is."""

from __future__ import annotations

import json

import numpy as np
import pytest

from crossing.inference.estimates import Estimate, bound_of, edge_density, estimate

RNG = np.random.default_rng(0)
# Regularly spaced, so that percentiles are known exactly.
UNIFORM = np.linspace(0.0, 100.0, 10_001)


def test_percentiles() -> None:
    found = estimate(UNIFORM)
    assert (found.low, found.median, found.high) == pytest.approx((16.0, 50.0, 84.0), abs=1e-9)
    assert (found.bound, found.limit) == ("two-sided", None)


@pytest.mark.parametrize(("bound", "limit"), [("upper", 95.0), ("lower", 5.0)])
def test_one_sided_limits(bound: str, limit: float) -> None:
    found = estimate(UNIFORM, bound)  # type: ignore[arg-type]
    assert found.limit == pytest.approx(limit, abs=1e-9)
    assert found.median == pytest.approx(50.0, abs=1e-9)


def test_a_single_value() -> None:
    found = estimate(np.full(200, 3.5))
    assert (found.low, found.median, found.high) == (3.5, 3.5, 3.5)


def test_dictionary_has_a_limit_only_where_there_is_one() -> None:
    assert estimate(UNIFORM).to_dict().keys() == {"median", "low", "high", "bound"}
    document = estimate(UNIFORM, "upper").to_dict()
    assert document["limit_95"] == pytest.approx(95.0)
    assert json.loads(json.dumps(document)) == document


@pytest.mark.parametrize(
    ("found", "text"),
    [
        (Estimate(median=12.34, low=10.0, high=15.0), "12.3 (+2.7 -2.3) d"),
        (Estimate(median=1.0, low=0.5, high=2.0, bound="upper", limit=3.21), "< 3.21 d (95%)"),
        (Estimate(median=1.0, low=0.5, high=2.0, bound="lower", limit=0.321), "> 0.321 d (95%)"),
    ],
)
def test_text(found: Estimate, text: str) -> None:
    assert found.text("d") == text
    assert found.text() == text.replace(" d", "")


# Which side is open: samples within a prior from 0 to 1


@pytest.mark.parametrize(
    ("samples", "bound"),
    [
        (np.linspace(0.45, 0.55, 500), "two-sided"),
        (np.linspace(0.0, 1.0, 5000), "two-sided"),  # the prior itself: neither side is closed
        (np.linspace(0.0, 0.4, 5000), "upper"),
        (np.linspace(0.6, 1.0, 5000), "lower"),
        (np.abs(RNG.normal(0.0, 0.1, 5000)), "upper"),
        (0.3 + 0.05 * RNG.normal(size=5000), "two-sided"),
    ],
)
def test_open_sides(samples: np.ndarray, bound: str) -> None:
    assert bound_of(samples, 0.0, 1.0) == bound


def test_edge_density() -> None:
    # 24 bins: all of the samples in the first, a tenth as many in the last.
    samples = np.concatenate([np.full(1000, 0.01), np.full(100, 0.99)])
    assert edge_density(samples, 0.0, 1.0) == pytest.approx((1.0, 0.1))
    assert edge_density(np.array([5.0]), 0.0, 1.0) == (0.0, 0.0)
