"""Simulated events for the tests of fits: folds with known truths and known noise."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from crossing.inference.candidates import linear_part
from crossing.inference.data import FitData, prepare
from crossing.inference.linear import LinearPart
from crossing.inference.priors import FitPriors
from crossing.inference.shapes import FoldShape
from crossing.optics.fold import fold_profile, profile_peak
from crossing.photometry import LightCurve

Array = NDArray[np.float64]

START = 61000.0


@dataclass(frozen=True)
class Fold:
    """Truth of a simulated crossing of one fold."""

    time: float
    """Time when the centre is on the caustic [d after START]."""
    radius_time: float
    """[d]"""
    label: int
    """0: entering, 1: leaving."""
    peak: float = 60.0
    """Highest flux above the level [nJy]."""
    level: float = 5.0
    """[nJy]"""

    def flux(self, time: Array) -> Array:
        """Fluxes without noise [nJy] at times in days after START."""
        x = (time - self.time) / self.radius_time * (1 if self.label == 0 else -1)
        return self.level + self.peak / profile_peak(0.0).height * fold_profile(x)


def light_curve(truth: Fold, time: Array, sigma: float, rng: np.random.Generator, bands: str = "a") -> LightCurve:
    """Noisy light curve, its epochs shared out among the bands in turn."""
    band = np.array([bands[k % len(bands)] for k in range(time.size)])
    flux = truth.flux(time) + sigma * rng.standard_normal(time.size)
    return LightCurve.from_arrays(START + time, band, flux, np.full(time.size, sigma))


def fold_problem(curve: LightCurve, priors: FitPriors | None = None) -> tuple[FitData, FoldShape, LinearPart]:
    """Data, shape and linear part of a fold fit."""
    chosen = priors or FitPriors()
    data = prepare(curve, {})
    return data, FoldShape(data, (chosen.window(data), chosen.log_range("radius_time"))), linear_part(data, chosen)


def well_observed(rng: np.random.Generator) -> tuple[Fold, LightCurve]:
    """An event with a peak S/N of 20 to 60 and ten epochs within three radius times, among 26 over a month."""
    truth = Fold(
        time=float(rng.uniform(11.0, 19.0)),
        radius_time=float(np.exp(rng.uniform(np.log(0.3), np.log(3.0)))),
        label=int(rng.integers(2)),
        level=float(rng.uniform(0.0, 30.0)),
    )
    near = truth.time + rng.uniform(-3.0, 3.0, 10) * truth.radius_time
    time = np.sort(np.concatenate([near, rng.uniform(0.0, 30.0, 16)]))
    return truth, light_curve(truth, time, truth.peak / float(rng.uniform(20.0, 60.0)), rng)
