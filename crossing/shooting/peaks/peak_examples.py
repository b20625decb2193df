"""Light curves around a few of the crossings behind a forecast of peaks."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np

from crossing.optics.fold import fold_magnification
from crossing.shooting.peaks.peak_crossings import SHARES, CrossingSample, TrackRun, in_order, lay_track
from crossing.shooting.peaks.peak_result import Example

__all__ = ["light_curve_examples"]

_HALF_RADII: Final = 12.0
_POSITIONS: Final = 321
_LEAST_COSINE: Final = 0.3
_UNFIT: Final = 1e3
_NAMES: Final = ("low (16%)", "median", "high (84%)")


def light_curve_examples(
    runs: Sequence[Sequence[TrackRun]],
    sample: CrossingSample | None,
    radius_rsun: float,
    radius: float,
    limb_darkening: float,
) -> tuple[Example, ...]:
    """Light curves of a disc at crossings of low, median and high peak.

    Parameters
    ----------
    runs : sequence of sequence of TrackRun
        Tracks of each macro model.
    sample : CrossingSample or None
        Their crossings.
    radius_rsun : float
        Radius of the disc [Rsun].
    radius : float
        The same [theta_E].
    limb_darkening : float
        Coefficient of the linear law.

    Returns
    -------
    tuple of Example
        Three, or none without crossings.
    """
    if sample is None or not len(sample):
        return ()
    flat = in_order(runs)
    first = np.concatenate([[0], np.cumsum([len(run.crossings) for run in flat])])
    peaks = sample.peaks(radius, limb_darkening)
    # Oblique passages are long and would hide the others in one figure; crowded ones stand for themselves alone.
    unfit = np.where((sample.cosine >= _LEAST_COSINE) & (sample.gap > 2.0 * radius), 0.0, _UNFIT)
    out = []
    for name, wanted in zip(_NAMES, sample.quantiles(peaks, SHARES), strict=True):
        chosen = int(np.argmin(np.abs(np.log(peaks / wanted)) + unfit))
        track = int(sample.track[chosen])
        out.append(_example(name, flat[track], chosen - int(first[track]), radius_rsun, radius, limb_darkening))
    return tuple(out)


def _example(
    name: str, run: TrackRun, number: int, radius_rsun: float, radius: float, limb_darkening: float
) -> Example:
    from crossing.shooting.tracks.track import track_magnification

    stars, start, end = lay_track(run.draw)
    found = run.crossings
    place, angle = float(found.place[number]), float(found.angle[number])
    half = _HALF_RADII * radius / np.cos(angle)
    way = np.array([place - half, place + half])
    one, two = (
        (start[0] + part / run.length * (end[0] - start[0]), start[1] + part / run.length * (end[1] - start[1]))
        for part in way.tolist()
    )
    positions = np.linspace(0.0, 1.0, _POSITIONS)
    curve = track_magnification(stars, one, two, radius, positions=positions, limb_darkening=limb_darkening)
    offset = (2.0 * positions - 1.0) * half
    inward = 1.0 if found.entering[number] else -1.0
    law = fold_magnification(
        inward * offset * np.cos(angle),
        radius,
        strength=float(found.strength[number]),
        background=float(found.background[number]) + run.draw.mirror,
        limb_darkening=limb_darkening,
    )
    return Example(
        name=name,
        offset=offset,
        magnification=curve.magnification + run.draw.mirror,
        fold=np.asarray(law),
        radius_rsun=radius_rsun,
    )
