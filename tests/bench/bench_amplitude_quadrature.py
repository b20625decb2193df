"""Error of the amplitude quadrature in ln likelihood against a dense sum: run by hand, never fails.

python tests/bench/bench_amplitude_quadrature.py
"""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np
from scipy.special import log_ndtr, logsumexp

from crossing.inference.data import FitData, prepare
from crossing.inference.linear import LinearPart
from crossing.inference.priors import FitPriors
from crossing.photometry import read_lightcurve

CASES = 60
DENSE = 400_001
NOISE = 3.0
START = 61000.0
BUMPS = ((15.0, 4.0), (14.0, 2.0), (17.0, 8.0), (5.0, 1.0))
"""Centre and width of the shapes that are tried; the first one is the truth."""


def shapes(time: np.ndarray) -> np.ndarray:
    return np.stack([np.exp(-(((time - centre) / width) ** 2)) + 1e-3 for centre, width in BUMPS])


def simulate(rng: np.random.Generator, kind: str, folder: Path) -> FitData:
    time = np.sort(rng.uniform(0, 30, int(rng.integers(2, 40))))
    level = -8.0 if kind == "difference" else rng.choice([0.0, 0.5, 5.0, 50.0])
    flux = 10 ** rng.uniform(-0.5, 3) * NOISE * shapes(time)[0] + NOISE * rng.standard_normal(time.size) + level
    rows = [f"{START + when},b,{value},{NOISE}" for when, value in zip(time, flux, strict=True)]
    path = folder / "curve.csv"
    path.write_text("\n".join(["time,band,flux [nJy],flux_err [nJy]", *rows]))
    return prepare(read_lightcurve(path, kind=kind), {})


def dense(data: FitData, shape: np.ndarray, low: float, high: float) -> float:
    """Ln likelihood with the amplitude summed over a dense grid of its logarithm, for one band with one level."""
    ln_a = np.linspace(np.log(low), np.log(high), DENSE)
    a, w, f = np.exp(ln_a), data.sigma**-2.0, data.flux
    precision = w.sum() + data.level_width[0] ** -2.0
    mean = ((w * f).sum() - a * (w * shape).sum()) / precision
    chi2 = (w * f * f).sum() - 2 * a * (w * f * shape).sum() + a**2 * (w * shape**2).sum() - precision * mean**2
    value = -0.5 * chi2 - np.log(data.sigma * np.sqrt(2 * np.pi)).sum()
    value -= 0.5 * np.log(precision * data.level_width[0] ** 2)
    if data.level_nonnegative[0]:
        value += np.log(2.0) + log_ndtr(mean * np.sqrt(precision))
    value[[0, -1]] -= np.log(2.0)
    return float(logsumexp(value) + np.log(ln_a[1] - ln_a[0]) - np.log(np.log(high / low)))


def main() -> None:
    rng = np.random.default_rng(1)
    for kind, name in (("difference", "free level"), ("flux", "level not negative")):
        worst = {True: 0.0, False: 0.0}
        for _ in range(CASES):
            with tempfile.TemporaryDirectory() as folder:
                data = simulate(rng, kind, Path(folder))
            low, high = FitPriors().amplitude_range(data)
            tried = shapes(data.time + data.time_zero - START)
            found = LinearPart(data, low=low, high=high).log_marginal(tried)
            exact = np.array([dense(data, shape, low, high) for shape in tried])
            for one, other in zip(found, exact, strict=True):
                good = bool(other > exact.max() - 20)
                worst[good] = max(worst[good], abs(one - other))
        print(f"{name:<20} shapes within 20 of the best: {worst[True]:.1e}; others: {worst[False]:.1e}")


if __name__ == "__main__":
    main()
