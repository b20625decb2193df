"""Values per second of the fold profiles on one core, and the error of the table: run by hand, never fails on time.

python tests/bench/bench_fold_profile.py
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np

from crossing.optics.fold import fold_profile, gaussian_profile
from crossing.optics.fold_table import fold_table

SIZE = 2_000_000


def rate(function: Callable[[np.ndarray], np.ndarray], x: np.ndarray) -> float:
    """Best of five, in millions of values a second of processor time."""
    best = np.inf
    for _ in range(5):
        start = time.process_time()
        function(x)
        best = min(best, time.process_time() - start)
    return x.size / best / 1e6


def main() -> None:
    table = fold_table()
    rng = np.random.default_rng(1)
    samples = {
        "-1 < x < 1": rng.uniform(-1, 1, SIZE),
        "-2 < x < 6": rng.uniform(-2, 6, SIZE),
        "normal, sigma 100": rng.normal(0, 100, SIZE),
    }
    print(f"{'x':<20}{'profile':<16}{'exact, 1e6/s':>14}{'table, 1e6/s':>14}{'table error':>14}{'relative':>12}")
    for name, x in samples.items():
        for u in (0.0, 0.5, 1.0):
            exact, fast = fold_profile(x, u), table.profile(x, u)
            error = np.abs(fast - exact)
            relative = np.max(error / np.where(exact > 0, exact, 1))
            exact_rate = rate(lambda x, u=u: fold_profile(x, u), x[: SIZE // 10])
            table_rate = rate(lambda x, u=u: table.profile(x, u), x)
            print(f"{name:<20}{f'u = {u}':<16}{exact_rate:14.1f}{table_rate:14.1f}{error.max():14.1e}{relative:12.1e}")
        print(f"{name:<20}{'Gaussian':<16}{rate(gaussian_profile, x[: SIZE // 10]):14.1f}{'-':>14}{'-':>14}{'-':>12}")


if __name__ == "__main__":
    main()
