"""The nested sampler on Gaussians whose evidence is known."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from crossing.inference.nested import Nested, nested
from crossing.inference.priors import Range

Array = NDArray[np.float64]

RANGES = tuple(Range(name=f"p{k}", low=-10.0, high=10.0) for k in range(3))
MEAN, SIGMA = np.array([1.0, -2.0, 0.5]), np.array([0.3, 1.0, 0.5])


class Model:
    """A normalised Gaussian in three parameters that stands for the shape and for the linear part."""

    name, ranges = "invented", RANGES

    def __init__(self, *shares: float) -> None:
        self.shares, self.labels = shares, tuple(f"label {k}" for k in range(len(shares)))

    def evaluate(self, theta: Array, label: int) -> Array:
        return np.column_stack([theta, np.full(len(theta), self.shares[label])])

    def log_marginal(self, rows: Array) -> Array:
        x = (rows[:, :3] - MEAN) / SIGMA
        return np.asarray(np.log(rows[:, 3]) - 0.5 * (x**2).sum(axis=1) - np.log(SIGMA * np.sqrt(2 * np.pi)).sum())


def run(model: Model, **more: object) -> Nested:
    return nested(model, model, np.random.default_rng(1), **more)  # type: ignore[arg-type]


@pytest.fixture(scope="module")
def two() -> Nested:
    return run(Model(0.8, 0.2), live_points=150)


def test_evidence(two: Nested) -> None:
    assert two.complete
    # Density of the uniform prior, halved by the two labels; within three of the sampler's errors of about 0.2.
    assert 0.05 < two.ln_evidence_error < 0.3
    assert two.ln_evidence == pytest.approx(-3 * np.log(20.0) - np.log(2.0), abs=3 * two.ln_evidence_error)


def test_posterior(two: Nested) -> None:
    assert two.weight.sum() == pytest.approx(1.0, abs=1e-12)
    theta, label = two.sample(5000, np.random.default_rng(2))
    # Effective samples: some 1000.
    np.testing.assert_allclose((theta.mean(axis=0) - MEAN) / SIGMA, 0.0, atol=0.15)
    np.testing.assert_allclose(theta.std(axis=0) / SIGMA, 1.0, atol=0.12)
    # Each label's evidence is good to 0.25 in its logarithm, hence the share of 0.2 to 0.06.
    assert np.mean(label == 1) == pytest.approx(0.2, abs=0.12)
    assert np.abs((two.best - MEAN) / SIGMA).max() < 0.5
    assert two.best_label == 0


def test_a_box_changes_nothing_but_the_effort(two: Nested) -> None:
    box = [Range(name="", low=m - 5 * s, high=m + 5 * s) for m, s in zip(MEAN, SIGMA, strict=True)]
    found = run(Model(0.8, 0.2), live_points=150, box=box)
    assert found.complete
    assert found.ln_evidence == pytest.approx(-3 * np.log(20.0) - np.log(2.0), abs=3 * found.ln_evidence_error)
    assert found.ln_evidence_error < two.ln_evidence_error
    assert found.evaluations < two.evaluations
    assert np.all(np.abs(found.theta - MEAN) <= 5 * SIGMA)


def test_the_call_limit_is_told_and_kept_quiet(capsys: pytest.CaptureFixture[str]) -> None:
    found = run(Model(1.0), live_points=50, most_calls=400)
    assert not found.complete
    assert capsys.readouterr() == ("", "")


def test_the_same_stream_gives_the_same_numbers() -> None:
    first, second = (run(Model(1.0), live_points=30) for _ in range(2))
    np.testing.assert_array_equal(first.theta, second.theta)
    assert first.ln_evidence == second.ln_evidence
