"""The macro lens from numbers alone: eigenvalues, magnifications, or distances to the critical curve or caustic."""

from __future__ import annotations

from dataclasses import dataclass
from math import sqrt
from typing import TYPE_CHECKING, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.state import LocalDraws, LocalState

if TYPE_CHECKING:
    from crossing.event import MacroRecord, Value

__all__ = ["GivenSolution"]

Array: TypeAlias = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class GivenSolution:
    """The lens at the event as its file states it in numbers.

    Notes
    -----
    A normal error of a magnification becomes a normal one of its inverse, so that a lens model close to the critical
    curve spreads over both of its sides.
    """

    record: MacroRecord
    """What the event file says."""

    @property
    def name(self) -> str | None:
        """Name of the lens model."""
        return self.record.name

    @property
    def flags(self) -> tuple[str, ...]:
        """Nothing needs to be known about it."""
        return ()

    @property
    def certain(self) -> bool:
        """Whether all draws are the same."""
        record = self.record
        values = (
            *(record.kappa, record.gamma, record.mu_t, record.mu_r, record.critical_distance, record.caustic_distance),
            *(record.fold_strength, *(record.gradient or ())),
        )
        return all(value is None or value.is_exact for value in values)

    @property
    def central(self) -> LocalState:
        """The lens by central values."""
        lam_t, lam_r = _central_eigenvalues(self.record)
        gradient = _central_gradient(self.record, lam_r)
        return LocalState(lam_t, lam_r, gradient, images=2 if self.record.side == "pair" else 1)

    def draw(self, rng: np.random.Generator, size: int) -> tuple[Array, Array]:
        """Eigenvalues (lam_t, lam_r), each of shape (size,)."""
        drawn = _draw(self.record, rng, size)
        return drawn.lam_t, drawn.lam_r

    def draw_local(self, rng: np.random.Generator, size: int) -> LocalDraws:
        """Eigenvalues with the gradient, where it is known."""
        drawn = _draw(self.record, rng, size)
        unknown = np.full(size, np.nan)
        along, across = drawn.gradient, unknown
        if self.record.gradient is not None:
            along = self.record.gradient[0].sample(rng, size) if along is None else along
            across = self.record.gradient[1].sample(rng, size)
        elif along is not None:
            across = np.zeros(size)
        return LocalDraws(drawn.lam_t, drawn.lam_r, unknown if along is None else along, across, unknown)


class _Drawn(NamedTuple):
    lam_t: Array
    lam_r: Array
    gradient: Array | None


def _need(value: Value | None, key: str) -> Value:
    if value is None:
        raise InputError(f"`{key}` must be given for this way of saying the macro lens; add it")
    return value


def _central_gradient(record: MacroRecord, lam_r: float) -> tuple[float, float] | None:
    if record.gradient is not None:
        return record.gradient[0].central, record.gradient[1].central
    if record.fold_strength is not None:
        return 2 / (record.fold_strength.central * lam_r) ** 2, 0.0
    return None


def _central_eigenvalues(record: MacroRecord) -> tuple[float, float]:
    if record.way == "kappa+gamma":
        kappa, gamma = _need(record.kappa, "kappa").central, _need(record.gamma, "gamma").central
        return 1 - kappa - gamma, 1 - kappa + gamma
    lam_r = 1 / _magnification(record.mu_r, "mu_r").central
    if record.way == "mu_t+mu_r":
        return 1 / _magnification(record.mu_t, "mu_t").central, lam_r
    if record.way == "critical_distance":
        gradient = _need(record.gradient[0] if record.gradient else None, "gradient")
        return gradient.central * _need(record.critical_distance, "critical_distance").central, lam_r
    if record.way == "caustic_distance":
        gradient_x = (_central_gradient(record, lam_r) or (_need(None, "gradient").central,))[0]
        distance = _need(record.caustic_distance, "caustic_distance").central
        return _side_sign(record, lam_r) * sqrt(2 * abs(gradient_x) * distance), lam_r
    raise InputError(f"`{record.way}` must hold what it is made of, got numbers alone; read the event from its file")


def _draw(record: MacroRecord, rng: np.random.Generator, size: int) -> _Drawn:
    if record.way == "kappa+gamma":
        kappa = _need(record.kappa, "kappa").sample(rng, size)
        gamma = _need(record.gamma, "gamma").sample(rng, size)
        return _Drawn(1 - kappa - gamma, 1 - kappa + gamma, None)
    lam_r = _inverse_draws(_magnification(record.mu_r, "mu_r"), rng, size)
    if record.way == "mu_t+mu_r":
        return _Drawn(_inverse_draws(_magnification(record.mu_t, "mu_t"), rng, size), lam_r, None)
    if record.gradient is not None:
        gradient = record.gradient[0].sample(rng, size)
    elif record.way == "caustic_distance":
        gradient = 2 / (_need(record.fold_strength, "fold_strength").sample(rng, size) * lam_r) ** 2
    else:
        gradient = _need(None, "gradient").sample(rng, size)
    if record.way == "critical_distance":
        distance = _need(record.critical_distance, "critical_distance").sample(rng, size)
        return _Drawn(gradient * distance, lam_r, gradient)
    distance = _need(record.caustic_distance, "caustic_distance").sample(rng, size)
    sign = _side_sign(record, _central_eigenvalues(record)[1])
    return _Drawn(sign * np.sqrt(2 * np.abs(gradient) * np.maximum(distance, 0.0)), lam_r, gradient)


def _magnification(value: Value | None, key: str) -> Value:
    """Return the value of a magnification, none of whose central or range values may be zero."""
    given = _need(value, key)
    ranged = given.shape in ("uniform", "loguniform")
    if given.central == 0 or (ranged and given.a * given.b <= 0):
        raise InputError(f"`{key}` must keep one sign, got {given}; give the distance to the critical curve instead")
    return given


def _inverse_draws(value: Value, rng: np.random.Generator, size: int) -> Array:
    if value.shape != "normal":
        return np.asarray(1 / value.sample(rng, size))
    return np.asarray(1 / value.a + value.b / value.a**2 * rng.standard_normal(size))


def _side_sign(record: MacroRecord, lam_r: float) -> int:
    """Sign of lam_t at the image that `side` names."""
    if lam_r > 0:
        return -1 if record.side == "saddle" else 1
    if record.side == "minimum":
        raise InputError(f"`side` must be saddle or pair where mu_r is negative, got minimum with mu_r = {1 / lam_r:g}")
    return 1
