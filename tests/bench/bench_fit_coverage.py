"""Coverage of fitted radius times and radii on simulated events whose truths are drawn from the printed priors.

    python tests/bench/bench_fit_coverage.py [--events 200] [--workers 2] [--regime sparse]

Prints one table: how often the 68% and 95% intervals hold the truth, the median offset in half-widths of the 68%
interval, and the share of events that end as one-sided limits. Selection uses the simulated data only, so that it
does not spoil the calibration. Never fails on a number.
"""

from __future__ import annotations

import argparse
import multiprocessing
import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np

EVENT = """
[event]
name = "simulated"

[motion]
speed = {value = "700 km / s", error = "200 km / s"}

[bands.short]
wavelength = "0.9 um"
limb_darkening = 0.4

[bands.long]
wavelength = "1.5 um"
limb_darkening = 0.3

[photometry]
file = "rows.csv"
kind = "flux"
"""
LIMB = {"short": 0.4, "long": 0.3}
SIGMA = 2.5
# Reference levels are drawn flat up to this [nJy], as the fit's prior has them.
HIGHEST_LEVEL = 300.0
SECONDS_PER_DAY, KM_PER_RSUN = 86400.0, 695_700.0


@dataclass(frozen=True)
class Regime:
    """How events are observed, and which of them count; the selection sees nothing but the simulated fluxes."""

    epochs: int
    span: float
    """Length of the monitoring [d]."""
    signal: tuple[float, float]
    """Range of the peak-to-peak flux over the error."""
    high_rows: int
    """Least number of rows above half of the peak-to-peak flux."""


REGIMES = {
    "well-sampled": Regime(epochs=30, span=40.0, signal=(15.0, 60.0), high_rows=8),
    "sparse": Regime(epochs=6, span=30.0, signal=(8.0, 60.0), high_rows=1),
}


def simulate(regime: Regime, rng: np.random.Generator) -> tuple[dict[str, float], list[tuple[float, str, float]]]:
    """Truth, from the fit's own priors, and rows of one event that passes the selection."""
    from crossing.inference.priors import FitPriors
    from crossing.optics.fold_table import fold_table

    low, high = np.log(FitPriors().radius_time)
    while True:
        times = np.sort(rng.uniform(0.0, regime.span, regime.epochs))
        margin = max(0.25 * (times[-1] - times[0]), 5.0)
        caustic = rng.uniform(times[0] - margin, times[-1] + margin)
        radius_time, sign = np.exp(rng.uniform(low, high)), rng.choice([-1.0, 1.0])
        rows, signal, high_rows, amplitudes = [], 0.0, 0, []
        for band in LIMB:
            amplitude = np.exp(rng.uniform(np.log(0.025), np.log(6e4)))
            profile = fold_table().profile(sign * (times - caustic) / radius_time, LIMB[band])
            amplitudes.append(amplitude)
            level = rng.uniform(0.0, HIGHEST_LEVEL)
            flux = level + amplitude * profile + SIGMA * rng.standard_normal(regime.epochs)
            signal = max(signal, float(np.ptp(flux)) / SIGMA)
            high_rows += int((flux > flux.min() + 0.5 * np.ptp(flux)).sum()) if np.ptp(flux) > 8 * SIGMA else 0
            rows += [(time, band, value) for time, value in zip(times, flux, strict=True)]
        # The fit's prior of the amplitude takes its range from the fluxes: truths outside of it are none of its own.
        flux = np.array([value for _, _, value in rows])
        most = FitPriors().amplitude[1] * (np.ptp(flux) + np.abs(flux).max())
        if min(amplitudes) < FitPriors().amplitude[0] * SIGMA or max(amplitudes) > most:
            continue
        if regime.signal[0] < signal < regime.signal[1] and high_rows >= regime.high_rows:
            return {"caustic": caustic, "radius_time": radius_time, "sign": sign}, rows


def one(task: tuple[str, int]) -> dict[str, float]:
    """Simulate and fit one event."""
    from crossing import fit_crossing, read_event
    from crossing.inference.star import normal_speed

    name, number = task
    rng = np.random.default_rng(np.random.SeedSequence(31, spawn_key=(list(REGIMES).index(name), number)))
    truth, rows = simulate(REGIMES[name], rng)
    with tempfile.TemporaryDirectory() as folder:
        lines = [f"{60000 + time:.6f},{band},{flux:.6f},{SIGMA}" for time, band, flux in rows]
        Path(folder, "rows.csv").write_text("time,band,flux [nJy],flux_err [nJy]\n" + "\n".join(lines) + "\n")
        Path(folder, "event.toml").write_text(EVENT)
        event = read_event(Path(folder, "event.toml"))
        fit = fit_crossing(event, model="fold", seed=number)
    speed = float(normal_speed(event, rng, 1)[0])
    radius = truth["radius_time"] * SECONDS_PER_DAY * speed / KM_PER_RSUN
    out = {
        "one_sided": float(fit.radius_time_days.bound != "two-sided"),
        "flagged": float(bool(fit.flags)),
        "orientation": float(fit.orientation["entering" if truth["sign"] > 0 else "leaving"]),
    }
    for key, value in (("radius_time_days", truth["radius_time"]), ("radius_rsun", radius)):
        low, low68, median, high68, high = np.percentile(np.log(fit.samples[key]), [2.5, 16, 50, 84, 97.5])
        log_truth = np.log(value)
        out |= {
            f"{key}_68": float(low68 <= log_truth <= high68),
            f"{key}_95": float(low <= log_truth <= high),
            f"{key}_offset": float((median - log_truth) / (0.5 * (high68 - low68))),
        }
    return out


def main() -> None:
    """Run the regimes and print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--events", type=int, default=200)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--regime", choices=tuple(REGIMES), action="append")
    options = parser.parse_args()
    print(
        f"{'regime':<14}{'quantity':<18}{'68%':>7}{'95%':>7}{'offset':>9}{'one-sided':>11}{'flagged':>9}{'orient.':>9}"
    )
    with multiprocessing.get_context("spawn").Pool(options.workers) as pool:
        for name in options.regime or REGIMES:
            found = pool.map(one, [(name, number) for number in range(options.events)], chunksize=4)
            mean = {key: float(np.mean([row[key] for row in found])) for key in found[0]}
            for key in ("radius_time_days", "radius_rsun"):
                offset = float(np.median([row[f"{key}_offset"] for row in found]))
                print(
                    f"{name:<14}{key:<18}{mean[f'{key}_68']:7.3f}{mean[f'{key}_95']:7.3f}{offset:9.3f}"
                    f"{mean['one_sided']:11.3f}{mean['flagged']:9.3f}{mean['orientation']:9.3f}",
                    flush=True,
                )
    print(f"{options.events} events a regime; sampling error of a share near 0.68: {0.466 / options.events**0.5:.3f}")


if __name__ == "__main__":
    main()
