"""Draws of everything that follows from the lens at the event: distances, mirror image, caustic, delay."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.optics.macro.state import LocalDraws, LocalState

if TYPE_CHECKING:
    from crossing.optics.macro.local_map import MapPoint
    from crossing.optics.macro.map_fold import FoldSolution

__all__ = ["FoldDraws", "fold_draws", "follow_map", "mostly_known", "state_draws"]

Array: TypeAlias = npt.NDArray[np.float64]

# The map tells the second order of what the linear expansion leaves out at one distance; it is not carried further.
_MOST_STEPS: Final = 2.0
_LEAST_FACTOR: Final = 0.2


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FoldDraws:
    """Draws of one macro model, arrays of shape (n,); not a number where a quantity is not known."""

    lam_t: Array
    """Eigenvalue along the stretch x."""
    lam_r: Array
    """Eigenvalue across it."""
    gradient_x: Array
    """Change of lam_t along x, which points to larger lam_t [1/arcsec]."""
    gradient_y: Array
    """Change of lam_t along y, a quarter turn from x, counted from east to north [1/arcsec]."""
    stretch_angle: Array
    """Position angle of x, from north to east [deg]."""
    critical_distance: Array
    """Distance to the critical curve along the stretch [arcsec], of lam_t's sign."""
    critical_distance_perp: Array
    """Shortest distance to it [arcsec], of lam_t's sign."""
    fold_strength: Array
    """K [arcsec**(1/2)]."""
    caustic_distance: Array
    """Distance of the source to the caustic [arcsec], > 0 where it has the pair."""
    mirror_x: Array
    """Mirror image less the event, along x [arcsec]."""
    mirror_y: Array
    """The same along y [arcsec]."""
    arrival: Array
    """Size of the difference of the pair's arrival times [arcsec**2]."""

    @property
    def separation(self) -> Array:
        """Distance between the images of the pair [arcsec]."""
        return np.hypot(self.mirror_x, self.mirror_y)

    @property
    def pair_magnification(self) -> Array:
        """Magnification of both images together by the law of the fold, K / sqrt(caustic distance)."""
        paired = ~np.isnan(self.mirror_x) & (self.caustic_distance > 0)
        return np.asarray(self.fold_strength / np.sqrt(np.where(paired, self.caustic_distance, np.nan)))

    @property
    def gradient_sky(self) -> tuple[Array, Array]:
        """Change of lam_t to east and north [1/arcsec]."""
        return self.to_sky(self.gradient_x, self.gradient_y)

    @property
    def mirror_sky(self) -> tuple[Array, Array]:
        """Mirror image less the event, to east and north [arcsec]."""
        return self.to_sky(self.mirror_x, self.mirror_y)

    @property
    def nearest_sky(self) -> tuple[Array, Array]:
        """Nearest point of the critical curve less the event, to east and north [arcsec]."""
        size = np.hypot(self.gradient_x, self.gradient_y)
        with np.errstate(divide="ignore", invalid="ignore"):
            step = -self.critical_distance_perp / size
        return self.to_sky(step * self.gradient_x, step * self.gradient_y)

    def to_sky(self, x: Array, y: Array) -> tuple[Array, Array]:
        """East and north of components along and across the stretch."""
        angle = np.radians(self.stretch_angle)
        s, c = np.sin(angle), np.cos(angle)
        return x * s - y * c, x * c + y * s


def state_draws(state: LocalState) -> LocalDraws:
    """Central values as a single draw."""
    gradient = state.gradient or (np.nan, np.nan)
    angle = np.nan if state.stretch_angle is None else state.stretch_angle
    return LocalDraws(*(np.array([one]) for one in (state.lam_t, state.lam_r, *gradient, angle)))


def fold_draws(local: LocalDraws) -> FoldDraws:
    """What follows from the lens at the event if lam_t changes linearly and lam_r not at all.

    Parameters
    ----------
    local : LocalDraws
        Eigenvalues, gradient and direction.

    Returns
    -------
    FoldDraws
        Of the same shape.

    Notes
    -----
    u = lam_t x + gx x**2/2 + gy x y and v = lam_r y + gy x**2/2: the mirror image is the other root, near
    x = -2 lam_t/gx; the arrival times differ by gx separation**3 / 12 along the stretch.
    """
    way = np.where(local.gradient_x < 0, -1.0, 1.0)
    gx, gy = way * local.gradient_x, way * local.gradient_y
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        rate = np.where(gx > 0, gx, np.nan)
        distance = local.lam_t / rate
        size = np.hypot(gx, gy)
        x, y = _mirror(local.lam_t, local.lam_r, rate, gy)
        return FoldDraws(
            lam_t=local.lam_t,
            lam_r=local.lam_r,
            gradient_x=gx,
            gradient_y=gy,
            stretch_angle=(local.stretch_angle + np.where(way < 0, 180.0, 0.0)) % 360,
            critical_distance=distance,
            critical_distance_perp=local.lam_t / np.where(size > 0, size, np.nan),
            fold_strength=np.sqrt(2 / rate) / np.abs(local.lam_r),
            caustic_distance=rate * distance**2 / 2,
            mirror_x=x,
            mirror_y=y,
            arrival=rate * np.abs(2 * distance) ** 3 / 12,
        )


def _mirror(lam_t: Array, lam_r: Array, gx: Array, gy: Array) -> tuple[Array, Array]:
    """The other root of both; without the bend across the stretch where they have none.

    With y = -gy x**2 / (2 lam_r) what is left is gy**2 / (2 lam_r) x**2 - gx x / 2 - lam_t = 0.
    """
    bend = gy**2 / (2 * lam_r)
    square = gx**2 / 4 + 4 * bend * lam_t
    x = -2 * lam_t / (gx / 2 + np.sqrt(np.where(square >= 0, square, gx**2 / 4)))
    return x, np.where(square >= 0, -gy * x**2 / (2 * lam_r), 0.0 * x)


def follow_map(draws: FoldDraws, point: MapPoint) -> FoldDraws:
    """Draws of the linear expansion, bent to what the map itself says at the position.

    Parameters
    ----------
    draws : FoldDraws
        Draws by the linear expansion at drawn positions.
    point : MapPoint
        The map at the stated position.

    Returns
    -------
    FoldDraws
        At the stated position the values are those of `point.best`. What the linear expansion leaves out is of the
        next order in the distance: its relative size grows with the distance, and vanishes on the critical curve.
    """
    here, best = fold_draws(_linear(point)), point.best
    if best is None:
        return draws
    steps = _steps(draws.critical_distance, here.critical_distance)
    steps_perp = _steps(draws.critical_distance_perp, here.critical_distance_perp)
    mirror = _mirror_shift(here, best, point)
    return FoldDraws(
        lam_t=draws.lam_t,
        lam_r=draws.lam_r,
        gradient_x=draws.gradient_x,
        gradient_y=draws.gradient_y,
        stretch_angle=draws.stretch_angle,
        critical_distance=_bent(draws.critical_distance, here.critical_distance, best.critical_distance, steps),
        critical_distance_perp=_bent(
            draws.critical_distance_perp, here.critical_distance_perp, best.critical_distance_perp, steps_perp
        ),
        fold_strength=_bent(draws.fold_strength, here.fold_strength, best.fold_strength, steps),
        caustic_distance=_bent(draws.caustic_distance, here.caustic_distance, best.caustic_distance, steps),
        mirror_x=draws.mirror_x + mirror[0] * steps**2,
        mirror_y=draws.mirror_y + mirror[1] * steps**2,
        arrival=_bent(draws.arrival, here.arrival, best.arrival, steps),
    )


def mostly_known(draws: FoldDraws) -> FoldDraws:
    """The draws, without quantities that are not known for most of them."""
    values = {one.name: getattr(draws, one.name) for one in fields(FoldDraws)}
    return FoldDraws(
        **{
            name: value if np.mean(np.isfinite(value)) > 0.5 else np.full_like(value, np.nan)
            for name, value in values.items()
        }
    )


def _steps(distance: Array, start: Array) -> Array:
    """Distances in units of that at the stated position."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.clip(np.where(start == 0, 0.0, distance / start), -_MOST_STEPS, _MOST_STEPS)


def _linear(point: MapPoint) -> LocalDraws:
    numbers = (point.lam_t, point.lam_r, *point.gradient, point.stretch_angle)
    return LocalDraws(*(np.array([one]) for one in numbers))


def _bent(values: Array, linear: Array, mapped: float | None, steps: Array) -> Array:
    """Values times a factor that is the map's over the linear one at the position, and 1 at distance 0."""
    if mapped is None or np.isnan(linear).any():
        return np.full_like(values, np.nan)
    if linear[0] == 0 or mapped == linear[0]:
        return values
    ratio = float(mapped / linear[0])
    factor = np.clip(1 + (ratio - 1) * steps, min(ratio, _LEAST_FACTOR), max(ratio, 1 / _LEAST_FACTOR))
    return np.asarray(values * factor)


def _mirror_shift(here: FoldDraws, best: FoldSolution, point: MapPoint) -> tuple[float, float]:
    """The map's mirror image less that of the linear expansion, along and across the stretch [arcsec]."""
    if best.mirror is None:
        return np.nan, np.nan
    angle = np.radians(_toward(point))
    s, c = np.sin(angle), np.cos(angle)
    east, north = best.mirror
    return east * s + north * c - float(here.mirror_x[0]), -east * c + north * s - float(here.mirror_y[0])


def _toward(point: MapPoint) -> float:
    """Position angle of the stretch's end at which lam_t is larger [deg]."""
    angle = np.radians(point.stretch_angle)
    rise = point.gradient_sky[0] * np.sin(angle) + point.gradient_sky[1] * np.cos(angle)
    return point.stretch_angle + (180.0 if rise < 0 else 0.0)
