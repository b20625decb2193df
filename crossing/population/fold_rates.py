"""Events out of the lengths and strengths of caustics: each fold is crossed alone, at once its peak is known."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np
from numpy.typing import NDArray

from crossing.optics.fold import fold_profile, profile_peak
from crossing.population.event_sample import EventSample
from crossing.shooting.caustics.fold_ensemble import fold_width

if TYPE_CHECKING:
    from crossing.population.segments import Caustics

__all__ = ["StarKinds", "flicker_variance", "fold_events", "fold_rate"]

Array = NDArray[np.float64]

_DAYS_PER_YEAR: Final = 365.25
_BINS: Final = 160
_STEEPEST: Final = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StarKinds:
    """Kinds of stars behind a segment; arrays of shape (n,)."""

    density: Array
    """Stars per area of the source plane [1/theta_E^2]."""
    needed: Array
    """Change of magnification at which they are detected."""
    radius: Array
    """Radius [theta_E]."""
    flux: Array
    """Flux without magnification in the first band that counts [nJy]."""
    radius_rsun: Array
    """Radius [Rsun]."""
    temperature: Array
    """Effective temperature [K]."""
    luminosity: Array
    """Luminosity [Lsun]."""


def fold_rate(
    caustics: Caustics, stars: StarKinds, years: float, direction: float | None, limb_darkening: float = 0.0
) -> Array:
    """Crossings per year whose peak exceeds what each kind of star needs.

    Parameters
    ----------
    caustics : Caustics
        Caustics behind the segment.
    stars : StarKinds
        Stars.
    years : float
        Years in which a star moves by one theta_E.
    direction : float or None
        Angle of the motion from u to v [rad]; the mean over all directions if None.
    limb_darkening : float
        Linear coefficient.

    Returns
    -------
    ndarray, shape (n,)
        density x speed x length of caustics, across the motion, with K J_peak / sqrt(R) > needed.
    """
    total = _crossed(caustics, direction)
    return np.asarray(stars.density / years * total[_places(caustics, stars, limb_darkening)])


def fold_events(
    caustics: Caustics,
    stars: StarKinds,
    years: float,
    direction: float | None,
    *,
    segment: int,
    count: int,
    rng: np.random.Generator,
    limb_darkening: float = 0.0,
) -> EventSample:
    """Sample of the events behind a segment; the sum of its weights is that of `fold_rate`, exactly.

    Parameters
    ----------
    caustics, stars, years, direction, limb_darkening
        As in `fold_rate`; with a random direction each crossing has an angle of its own.
    segment : int
        Number of the segment.
    count : int
        Number of rows; none if nothing can happen.
    rng : numpy.random.Generator
        Source of the draws.
    """
    total = _crossed(caustics, direction)
    places = _places(caustics, stars, limb_darkening)
    rates = stars.density / years * total[places]
    if not rates.sum() > 0:
        count = 0
    sums = np.cumsum(rates)
    kind = np.searchsorted(sums, (rng.random() + np.arange(count)) / max(count, 1) * (sums[-1] if len(sums) else 0.0))
    kind = np.minimum(kind, max(len(rates) - 1, 0))
    # One in each of as many equal parts, so that weak and strong folds come in their shares.
    share = (rng.permutation(count) + rng.random(count)) / max(count, 1)
    fold = np.searchsorted(total, share * total[places[kind]], side="right") - 1
    fold = np.clip(fold, 0, max(len(caustics.strength) - 1, 0))
    # Angles between motion and normal that a crossing has if all directions are alike: sin uniform.
    cosine = (
        np.sqrt(1.0 - rng.uniform(0.0, 1.0, count) ** 2)
        if direction is None
        else np.abs(np.cos(caustics.normal[fold] - direction))
    )
    root, strength = np.sqrt(stars.radius[kind]), caustics.strength[fold]
    above = strength * profile_peak(limb_darkening).height / root
    width = fold_width(stars.needed[kind] * root / np.maximum(strength, 1e-300), limb_darkening) * stars.radius[kind]
    return EventSample(
        weight=np.full(count, float(rates.sum()) / max(count, 1)),
        segment=np.full(count, segment, dtype=np.intp),
        duration=width * years * _DAYS_PER_YEAR / np.maximum(cosine, _STEEPEST),
        magnification=caustics.background + above,
        needed=stars.needed[kind] / max(caustics.background, 1.0),
        flux=above * stars.flux[kind],
        radius=stars.radius_rsun[kind],
        temperature=stars.temperature[kind],
        luminosity=stars.luminosity[kind],
    )


def flicker_variance(caustics: Caustics, radius: Array, area_einstein: float, limb_darkening: float = 0.0) -> Array:
    """Variance of the magnification of discs by what exceeds twice the mean.

    Parameters
    ----------
    caustics : Caustics
        Caustics behind a segment, with a background.
    radius : ndarray, shape (n,)
        Radii [theta_E].
    area_einstein : float
        Area of the source plane that holds the caustics [theta_E^2].
    limb_darkening : float
        Linear coefficient.

    Returns
    -------
    ndarray, shape (n,)
        Sum over the folds of K^2 times the integral of J(x)^2 where K J / sqrt(R) exceeds the background, per area.

    Notes
    -----
    The variance of a point diverges as the logarithm of the highest magnification; the disc ends it.
    """
    if not len(caustics.strength) or not caustics.background > 0:
        return np.zeros(len(radius))
    level, inside = _square_above(limb_darkening)
    grid = np.geomspace(radius.min(), radius.max() * (1 + 1e-9), 24)
    edges = np.geomspace(caustics.strength[-1], caustics.strength[0] * (1 + 1e-12), _BINS + 1)
    moment, _ = np.histogram(caustics.strength, edges, weights=caustics.length * caustics.strength**2)
    asked = caustics.background * np.sqrt(grid)[:, None] / np.sqrt(edges[1:] * edges[:-1])
    # J falls as x**(-1/2) far inside, where its square gives one logarithm.
    found = np.interp(asked, level, inside, right=0.0) + np.where(
        asked < level[0], 2.0 * np.log(level[0] / np.maximum(asked, 1e-300)), 0.0
    )
    return np.asarray(np.interp(np.log(radius), np.log(grid), found @ moment / area_einstein))


def _square_above(limb_darkening: float) -> tuple[Array, Array]:
    """Levels a of the fold profile, rising, and the integral of J^2 where J > a."""
    peak = profile_peak(limb_darkening)
    x = np.concatenate([np.linspace(-1.0, 3.0, 4001), 3.0 * np.geomspace(1.0, 1e4, 4001)[1:]])
    j = np.asarray(fold_profile(x, limb_darkening))
    step = np.diff(x)
    middle = 0.5 * (j[1:] + j[:-1])
    level = np.geomspace(0.02, peak.height, 300)
    order = np.argsort(middle)
    sums = np.cumsum((middle**2 * step)[order][::-1])[::-1]
    place = np.searchsorted(middle[order], level)
    return level, np.append(sums, 0.0)[place]


def _crossed(caustics: Caustics, direction: float | None) -> Array:
    """Length of caustics across the motion, of the strongest so many folds; shape (n + 1,)."""
    share = 2.0 / np.pi if direction is None else np.abs(np.cos(caustics.normal - direction))
    return np.concatenate([[0.0], np.cumsum(caustics.length * share)])


def _places(caustics: Caustics, stars: StarKinds, limb_darkening: float) -> NDArray[np.intp]:
    """How many of the strongest folds each kind of star needs to look at."""
    weakest = stars.needed * np.sqrt(stars.radius) / profile_peak(limb_darkening).height
    return np.searchsorted(-caustics.strength, -weakest, side="left")
