"""Whether the search of a fold fit can be trusted: orientation, wrong minima, agreement with nested sampling, speed.

    python tests/bench/bench_fit_search.py [--events 400] [--nested 5]

Events have a peak signal to noise of 20 or more and at least ten points within three radius times of the caustic.
Prints the number with the right orientation, the number whose best chi-squared a start at the truth undercuts, the
agreement of scan and dynesty, and the time of one least-squares fit of 120 points. Never fails on a number.
"""

from __future__ import annotations

import argparse
import time

import numpy as np

from crossing.inference.candidates import fit_scan, linear_part
from crossing.inference.data import FitData, prepare
from crossing.inference.nested import nested
from crossing.inference.priors import FitPriors
from crossing.inference.refine import least_squares
from crossing.inference.shapes import FoldShape
from crossing.optics.fold_table import fold_table
from crossing.photometry import LightCurve


def simulate(rng: np.random.Generator, points: int = 60) -> tuple[FitData, np.ndarray, int]:
    """Data, true parameters (time since the data's zero, ln radius time) and orientation of one event."""
    while True:
        time_ = np.sort(rng.uniform(0.0, 40.0, points))
        radius_time, caustic, label = (
            np.exp(rng.uniform(np.log(0.8), np.log(6.0))),
            rng.uniform(5.0, 35.0),
            rng.integers(2),
        )
        if (np.abs(time_ - caustic) < 3.0 * radius_time).sum() < 10:
            continue
        signal = rng.uniform(20.0, 60.0)
        shape = fold_table().uniform((1 - 2 * label) * (time_ - caustic) / radius_time)
        flux = 8.0 + signal / 1.393 * shape + rng.standard_normal(points)
        band = np.where(np.arange(points) % 2, "short", "long")
        curve = LightCurve.from_arrays(60000.0 + time_, band, flux, np.ones(points))
        data = prepare(curve, {})
        return data, np.array([60000.0 + caustic - data.time_zero, np.log(radius_time)]), int(label)


def main() -> None:
    """Run the checks and print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--events", type=int, default=400)
    parser.add_argument("--nested", type=int, default=5)
    options = parser.parse_args()
    priors = FitPriors()
    right = undercut = complete = 0
    gaps = []
    for number in range(options.events):
        rng = np.random.default_rng(np.random.SeedSequence(77, spawn_key=(number,)))
        data, truth, label = simulate(rng)
        shape = FoldShape(data, (priors.window(data), priors.log_range("radius_time")))
        linear = linear_part(data, priors)
        found = fit_scan(shape, linear)
        at_truth = least_squares(truth, label, shape, linear)
        right += found.best is not None and found.best.label == label
        undercut += at_truth.chi2 < found.chi2 - 0.01
        complete += found.complete
        if number < options.nested:
            other = nested(shape, linear, rng, live_points=1000, precision=0.01)
            one, two = found.posterior.sample(4000, rng)[0], other.sample(4000, rng)[0]
            shift = np.abs(np.median(one, axis=0) - np.median(two, axis=0)) / one.std(axis=0)
            gaps.append((abs(found.ln_evidence - other.ln_evidence), other.ln_evidence_error, shift.max()))
    print(f"right orientation               {right} of {options.events}")
    print(f"start at the truth found better {undercut} of {options.events}")
    print(f"scan complete                   {complete} of {options.events}")
    for gap, error, shift in gaps:
        print(f"scan - dynesty: ln evidence {gap:.3f} (dynesty's error {error:.3f}), medians within {shift:.2f} sigma")
    data, truth, label = simulate(np.random.default_rng(5), points=120)
    shape = FoldShape(data, (priors.window(data), priors.log_range("radius_time")))
    linear = linear_part(data, priors)
    start = time.perf_counter()
    least_squares(truth + np.array([0.5, 0.3]), label, shape, linear)
    print(f"least squares, 120 points       {time.perf_counter() - start:.3f} s")
    start = time.perf_counter()
    fit_scan(shape, linear)
    print(f"whole scan, 120 points          {time.perf_counter() - start:.3f} s")


if __name__ == "__main__":
    main()
