"""Draws from the posterior of the fold between mirrored pairs."""

from __future__ import annotations

from collections.abc import Callable
from typing import Final, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.optics.macro.pair_model import Fold, PairData, PairPriors, fold_of, log_posterior

__all__ = ["FoldDraws", "draw_folds"]

Array: TypeAlias = npt.NDArray[np.float64]
_Density: TypeAlias = Callable[[Array], Array]

_TAIL: Final = 5.0
_ROUNDS: Final = 16
_DRAWS: Final = 2000
_LEAST_EFFECTIVE: Final = 200.0
_WIDER: Final = 1.3
# How far the origin may lie from the mean midpoint, in parts of the extent of all images: the quadratic lens has
# another branch of its critical curve further away.
_REACH: Final = 0.5
_WALKERS: Final = 512
_BURN: Final = 50
_STEPS: Final = 48
_EVERY: Final = 3
_WHOLE_STEPS: Final = 0.15
_JITTER: Final = 1e-3


class FoldDraws(NamedTuple):
    """Draws of equal weight."""

    parameters: Array
    """See `crossing.optics.macro.pair_model.fold_of`, shape (draws, 8)."""
    accepted: float
    """Share of the steps that were taken."""
    drift: float
    """Largest change of a mean over the second half of the draws, in standard deviations."""


def draw_folds(
    data: PairData,
    priors: PairPriors,
    rng: np.random.Generator,
    starts: list[Array],
    width: Array,
    allowed: Callable[[Fold], npt.NDArray[np.bool_]] | None = None,
) -> FoldDraws:
    """Draws of the posterior.

    Parameters
    ----------
    data : PairData
        The pairs.
    priors : PairPriors
        What else is known.
    rng : numpy.random.Generator
        Source of the draws.
    starts : list of ndarray, shape (8,)
        Parameters to begin with, one for each direction of x that is possible.
    width : ndarray, shape (8,)
        How far they may be off.
    allowed : callable, optional
        Which of many lenses can be.

    Returns
    -------
    FoldDraws
        Equal-weight draws; of lenses that cannot be where none can.

    Notes
    -----
    Importance sampling from Student distributions that take the moments of their own draws finds the posterior;
    a population of walkers that steps along differences of its own members then fills it, tails and both signs
    included.

    References
    ----------
    .. [1] Cappe O., Guillin A., Marin J.-M., Robert C. P., 2004, J. Comput. Graph. Stat. 13, 907
    .. [2] ter Braak C. J. F., 2006, Stat. Comput. 16, 239
    """
    reach = _REACH * float(np.ptp(np.concatenate([data.first, data.second]), axis=0).max())

    def log_density(parameters: Array) -> Array:
        near = np.abs(parameters[:, 2]) <= reach
        # The same lens comes again with every turn.
        away = np.stack([np.abs(parameters[:, 0] - one[0]) for one in starts]).min(axis=0)
        near &= away <= np.pi / 2
        if allowed is not None:
            near &= allowed(fold_of(parameters, data, priors))
        return np.where(near, log_posterior(parameters, data, priors), -np.inf)

    found = [_located(log_density, rng, one, width) for one in starts]
    draws = np.concatenate([one[0] for one in found])
    weight, _ = _tempered(np.concatenate([one[1] for one in found]))
    walkers = draws[rng.choice(len(draws), size=_WALKERS, p=weight)]
    return _stepped(log_density, rng, walkers)


def _located(log_density: _Density, rng: np.random.Generator, start: Array, width: Array) -> tuple[Array, Array]:
    """Draws near the posterior, and the log of their weights."""
    mean, spread = start, np.diag(width**2)
    for _ in range(_ROUNDS):
        draws, own = _student(mean, spread, rng, _DRAWS)
        log_weight = log_density(draws) - own
        if not np.isfinite(log_weight).any():
            break
        weight, power = _tempered(log_weight)
        if power == 1.0:
            break
        mean = weight @ draws
        apart = draws - mean
        spread = _WIDER**2 * (weight[:, None] * apart).T @ apart + np.diag((1e-4 * width) ** 2)
    return draws, log_weight


def _student(mean: Array, spread: Array, rng: np.random.Generator, size: int) -> tuple[Array, Array]:
    """Draws of a multivariate Student distribution and their log density."""
    root = np.linalg.cholesky(spread)
    normal, scale = rng.standard_normal((size, len(mean))), rng.chisquare(_TAIL, size) / _TAIL
    steps = normal / np.sqrt(scale)[:, None]
    density = -(_TAIL + len(mean)) / 2 * np.log1p(np.sum(steps**2, axis=1) / _TAIL)
    return mean + steps @ root.T, density - np.sum(np.log(np.diag(root)))


def _tempered(log_weight: Array) -> tuple[Array, float]:
    """Normalised weights, and the power that flattens them until enough draws carry them."""
    if not np.isfinite(log_weight).any():
        return np.full(len(log_weight), 1 / len(log_weight)), 0.0
    power = 1.0
    while True:
        weight = np.exp(power * (log_weight - log_weight.max()))
        weight /= weight.sum()
        if 1 / np.sum(weight**2) >= _LEAST_EFFECTIVE or power < 1e-4:
            return np.asarray(weight), power
        power *= 0.7


def _stepped(log_density: _Density, rng: np.random.Generator, walkers: Array) -> FoldDraws:
    """Draws of walkers, each half of which steps along differences between members of the other."""
    half, dimensions = _WALKERS // 2, walkers.shape[1]
    step = 2.38 / np.sqrt(2 * dimensions)
    jitter = _JITTER * walkers.std(axis=0)
    value = log_density(walkers)
    kept, taken = [], 0
    for turn in range(_BURN + _STEPS):
        for mine, other in ((slice(0, half), slice(half, None)), (slice(half, None), slice(0, half))):
            a, b = rng.integers(half, size=(2, half))
            # Whole differences jump between the two directions of x.
            length = np.where(rng.random(half) < _WHOLE_STEPS, 1.0, step * rng.uniform(0.5, 1.2, half))
            along = walkers[other][a] - walkers[other][b]
            trial = walkers[mine] + length[:, None] * along + jitter * rng.standard_normal((half, dimensions))
            new = log_density(trial)
            with np.errstate(invalid="ignore"):
                good = np.log(rng.random(half)) < new - value[mine]
            walkers[mine] = np.where(good[:, None], trial, walkers[mine])
            value[mine] = np.where(good, new, value[mine])
            taken += int(good.sum())
        if turn >= _BURN and (turn - _BURN) % _EVERY == 0:
            kept.append(walkers.copy())
    early, late = (np.concatenate(part) for part in (kept[: len(kept) // 2], kept[len(kept) // 2 :]))
    spread = np.where(early.std(axis=0) > 0, early.std(axis=0), 1.0)
    drift = float(np.max(np.abs(late.mean(axis=0) - early.mean(axis=0)) / spread))
    return FoldDraws(np.concatenate(kept), taken / (_WALKERS * (_BURN + _STEPS)), drift)
