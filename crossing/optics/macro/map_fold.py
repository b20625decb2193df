"""The fold next to a place of a map: by the linear expansion of lam_t, and by the map itself."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass
from math import cos, hypot, isfinite, sin, sqrt
from typing import Any, Final, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.optics.macro.map_patch import MapPatch, Stretch

__all__ = ["FoldSolution", "LocalStretch", "linear_fold", "local_stretch", "mapped_fold", "nearest_critical"]

Array: TypeAlias = npt.NDArray[np.float64]
Point: TypeAlias = tuple[float, float]

_RAY_STEP: Final = 0.25
_GRID: Final = 61
_RESIDUAL: Final = 1e-8
_CONVERGED: Final = 1e-12
_NEWTON_STEPS: Final = 40
_HALVINGS: Final = 12
# Central differences over this step [arcsec] err by its square: far less than Newton's method minds.
_DIFFERENCE: Final = 1e-5
_PICARD_STEPS: Final = 40


@dataclass(frozen=True, slots=True, kw_only=True)
class FoldSolution:
    """Where the critical curve, the caustic and the mirror image lie; offsets from the position, x east, y north."""

    critical_distance: float | None
    """Distance to the critical curve along the stretch [arcsec], of lam_t's sign; None where that line misses it."""
    critical_distance_perp: float
    """Shortest distance to it [arcsec], of the same sign."""
    fold_strength: float
    """K [arcsec**(1/2)]: a source at the distance d inside the caustic has a pair of magnification K / sqrt(d)."""
    caustic_distance: float
    """Distance of the source to the caustic [arcsec], > 0 on the side that has the pair."""
    mirror: Point | None
    """Offset of the other image of the pair [arcsec]; None where there is none, or none on the map."""
    flux_ratio: float | None
    """Magnification of the other image over that of the one at the position, sizes of both."""
    arrival: float | None
    """Difference of the two arrival times [arcsec**2], its size."""
    nearest_is_cusp: bool = False
    """Whether the nearest point of the caustic is a cusp: the strength is then that of the nearest critical point."""

    @property
    def separation(self) -> float | None:
        """Distance between the two images [arcsec]."""
        return None if self.mirror is None else hypot(*self.mirror)

    def to_dict(self) -> dict[str, Any]:
        """All fields by name."""
        return asdict(self)


class LocalStretch(NamedTuple):
    """The lens at the position, in the frame of the stretch; angles in arcseconds."""

    kappa: float
    """Convergence."""
    lam_t: float
    """Eigenvalue along the stretch, the smaller in size."""
    lam_r: float
    """Eigenvalue across it."""
    direction: Point
    """Unit vector of the stretch (east, north), towards larger lam_t."""
    gradient: Point
    """Change of lam_t along the stretch and a right angle from it, counted from east to north [1/arcsec]."""
    slope: Point
    """Change of lam_t to east and north [1/arcsec]."""


def local_stretch(patch: MapPatch) -> LocalStretch:
    """The lens at the origin of a patch."""
    found = Stretch(*patch.stretch(0.0, 0.0))
    slope = float(found.slope_t[0]), float(found.slope_t[1])
    direction = cos(float(found.angle)), sin(float(found.angle))
    along = slope[0] * direction[0] + slope[1] * direction[1]
    if along < 0:
        direction, along = (-direction[0], -direction[1]), -along
    across = -slope[0] * direction[1] + slope[1] * direction[0]
    return LocalStretch(
        kappa=float(patch.at(0.0, 0.0).kappa),
        lam_t=float(found.lam_t),
        lam_r=float(found.lam_r),
        direction=direction,
        gradient=(along, across),
        slope=slope,
    )


def linear_fold(here: LocalStretch) -> FoldSolution | None:
    """The fold if lam_t changed linearly and lam_r not at all; None where lam_t does not change along the stretch.

    Notes
    -----
    u = lam_t x + gx x**2/2 + gy x y and v = lam_r y + gy x**2/2 have their other root near x = -2 lam_t/gx. The size of
    the arrival-time difference is T separation**3 / 12 with T = gx.
    """
    gx, gy = here.gradient
    if not gx > 0 or here.lam_r == 0:
        return None
    distance = here.lam_t / gx
    x, y = -2 * distance, 0.0
    for _ in range(_PICARD_STEPS):
        y = -gy * x**2 / (2 * here.lam_r)
        x = -2 * (here.lam_t + gy * y) / gx
        if not abs(x) <= 20 * abs(distance):
            x, y = -2 * distance, 0.0
            break
    (a, b), rate = here.direction, gx
    return FoldSolution(
        critical_distance=distance,
        critical_distance_perp=here.lam_t / hypot(gx, gy),
        fold_strength=sqrt(2 / rate) / abs(here.lam_r),
        caustic_distance=rate * distance**2 / 2,
        mirror=(a * x - b * y, b * x + a * y),
        flux_ratio=1.0,
        arrival=rate * abs(2 * distance) ** 3 / 12,
    )


def mapped_fold(patch: MapPatch, here: LocalStretch, line: Array) -> FoldSolution | None:
    """The fold from the map's own values.

    Parameters
    ----------
    patch : MapPatch
        The map around the position.
    here : LocalStretch
        The lens at the position.
    line : ndarray, shape (vertices, 2)
        Offsets of vertices of the critical curve within the patch [arcsec], to begin with.

    Returns
    -------
    FoldSolution or None
        None where the nearest point of the critical curve or of the caustic is not within the patch.
    """
    nearest, tip = nearest_critical(patch, line), _nearest_in_source(patch, line)
    if nearest is None or tip is None:
        return None
    along, fold = _critical_along(patch, here), _fold_point(patch, tip)
    guesses = [2 * np.array(one) for one in (fold, nearest) if one is not None]
    linear = linear_fold(here)
    if linear is not None:
        guesses.append(np.array(linear.mirror))
    other = _mirror(patch, here, guesses)
    ratio = arrival = None
    if other is not None:
        lam_t, lam_r = (float(one) for one in patch.eigenvalues(*other))
        ratio = abs(here.lam_t * here.lam_r / (lam_t * lam_r))
        arrival = abs(float(patch.source_step(*other)[2]))
    sign = 1 if here.lam_t > 0 else -1
    return FoldSolution(
        critical_distance=None if along is None else sign * along,
        critical_distance_perp=sign * hypot(*nearest),
        fold_strength=_strength(patch, nearest if fold is None else fold),
        caustic_distance=_depth(patch, tip, has_pair=other is not None) if fold is None else _depth(patch, fold),
        mirror=other,
        flux_ratio=ratio,
        arrival=arrival,
        nearest_is_cusp=fold is None,
    )


def _strength(patch: MapPatch, place: Point) -> float:
    """K = sqrt(2/T) / abs(lam_r) at a critical point."""
    there = patch.stretch(*place)
    return sqrt(2 / abs(_rate(there))) / abs(float(there.lam_r))


def _rate(there: Stretch) -> float:
    return cos(float(there.angle)) * float(there.slope_t[0]) + sin(float(there.angle)) * float(there.slope_t[1])


def _depth(patch: MapPatch, place: Point, *, has_pair: bool | None = None) -> float:
    """Distance of the source from the caustic at a critical point, > 0 on the side of the pair.

    Sources of pairs lie towards larger lam_t of a fold; at a cusp it is told whether there is one.
    """
    u, v, _ = (float(one) for one in patch.source_step(*place))
    if has_pair is not None:
        return hypot(u, v) if has_pair else -hypot(u, v)
    there = patch.stretch(*place)
    across = cos(float(there.angle)) * u + sin(float(there.angle)) * v
    return -across if _rate(there) > 0 else across


def _critical_along(patch: MapPatch, here: LocalStretch) -> float | None:
    """Distance to the critical curve along the line of the stretch [arcsec], downhill if it is there."""
    from scipy.optimize import brentq

    step = _RAY_STEP * patch.frame.pixel_size
    distances = np.arange(0, 1.5 * patch.reach, step)
    downhill = -1 if here.lam_t > 0 else 1
    found: list[float] = []
    for way in (downhill, -downhill):
        a, b = way * here.direction[0], way * here.direction[1]
        values = patch.eigenvalues(a * distances, b * distances)[0] * np.sign(here.lam_t)
        crossing = np.flatnonzero((values[1:] <= 0) & (values[:-1] > 0))
        if crossing.size:
            start = distances[crossing[0]]

            def lam_t(t: float, a: float = a, b: float = b) -> float:
                return float(patch.eigenvalues(a * t, b * t)[0])

            found.append(way * downhill * float(brentq(lam_t, start, start + step, xtol=1e-13)))
    return min(found, key=abs) if found else None


def nearest_critical(patch: MapPatch, line: Array) -> Point | None:
    """Critical point nearest to the origin [arcsec], from vertices of the curve; None if it is not in the patch."""
    best = line[np.argmin(np.hypot(*line.T))]

    def misfit(c: Array) -> list[float]:
        there = patch.stretch(*c)
        gx, gy = (float(one) for one in there.slope_t)
        return [float(there.lam_t) / hypot(gx, gy), float(c[0] * gy - c[1] * gx) / hypot(gx, gy)]

    return _settled(misfit, best, patch)


def _nearest_in_source(patch: MapPatch, line: Array) -> Point | None:
    """The vertex of the critical curve whose caustic is nearest to the source of the origin."""
    u, v, _ = patch.source_step(*line.T)
    distance = np.hypot(u, v)
    if not np.isfinite(distance).any():
        return None
    best = line[np.nanargmin(distance)]
    return float(best[0]), float(best[1])


def _fold_point(patch: MapPatch, start: Point) -> Point | None:
    """The critical point whose caustic is nearest to the source of the origin; None where this is a cusp."""

    def misfit(c: Array) -> list[float]:
        there = patch.stretch(*c)
        u, v, _ = patch.source_step(*c)
        gx, gy = (float(one) for one in there.slope_t)
        # The caustic's normal is the stretch: what is left across it must vanish.
        across = -sin(float(there.angle)) * float(u) + cos(float(there.angle)) * float(v)
        return [float(there.lam_t) / hypot(gx, gy), across / float(there.lam_r)]

    return _settled(misfit, np.array(start), patch)


def _settled(misfit: Callable[[Array], list[float]], start: Array, patch: MapPatch) -> Point | None:
    """Root near a start by Newton's method with ever shorter steps, if it stays within the patch."""
    here, value = np.asarray(start, dtype=np.float64), np.array(misfit(start))
    if not np.all(np.isfinite(value)):
        return None
    for _ in range(_NEWTON_STEPS):
        if np.max(np.abs(value)) < _CONVERGED:
            break
        sides = [np.subtract(misfit(here + step), misfit(here - step)) for step in _DIFFERENCE * np.eye(2)]
        slope = np.column_stack(sides) / (2 * _DIFFERENCE)
        if not np.all(np.isfinite(slope)) or np.linalg.det(slope) == 0:
            return None
        step = -np.linalg.solve(slope, value)
        for shorter in 0.5 ** np.arange(_HALVINGS):
            after = np.array(misfit(here + shorter * step))
            if np.linalg.norm(after) < np.linalg.norm(value):
                break
        else:
            break
        here, value = here + shorter * step, after
    good = np.max(np.abs(value)) < _RESIDUAL and bool(patch.contains(*here))
    return (float(here[0]), float(here[1])) if good else None


def _mirror(patch: MapPatch, here: LocalStretch, guesses: list[Array]) -> Point | None:
    """Offset of the nearest image of opposite parity that the same source has."""
    found = [one for guess in guesses if (one := _mirror_near(patch, here, guess)) is not None]
    if not found:
        start = _mirror_from_grid(patch, here, guesses[0])
        return None if start is None else _mirror_near(patch, here, np.array(start))
    return min(found, key=lambda one: hypot(*one))


def _mirror_near(patch: MapPatch, here: LocalStretch, start: Array) -> Point | None:
    """The image of opposite parity to which a start leads."""
    if not hypot(*start) > 0:
        return None

    def misfit(end: Array) -> list[float]:
        u, v, _ = patch.source_step(*end)
        # Over the distance: the origin itself is a root that is not wanted.
        return [float(u) / hypot(*end), float(v) / hypot(*end)]

    found = _settled(misfit, start, patch)
    if found is None:
        return None
    lam_t, lam_r = patch.eigenvalues(*found)
    opposite = isfinite(float(lam_t)) and float(lam_t * lam_r) * here.lam_t * here.lam_r < 0
    return found if opposite else None


def _mirror_from_grid(patch: MapPatch, here: LocalStretch, guess: Array) -> Point | None:
    """Start for the mirror image: the grid point of opposite parity whose source comes nearest, by its own size."""
    ticks = np.linspace(-1, 1, _GRID) * 0.98 * patch.reach
    zero = np.zeros_like(ticks)
    middle = _GRID // 2
    up = np.cumsum([patch.source_step(zero[1:], ticks[1:], (zero[1:], ticks[:-1]))[:2]], axis=-1)[0]
    column = np.concatenate([np.zeros((2, 1)), up], axis=1)
    column -= column[:, middle : middle + 1]
    x, y = np.meshgrid(ticks, ticks)
    right = np.cumsum(np.asarray(patch.source_step(x[:, 1:], y[:, 1:], (x[:, :-1], y[:, :-1]))[:2]), axis=-1)
    source = np.concatenate([np.zeros((2, _GRID, 1)), right], axis=2)
    source += column[:, :, None] - source[:, :, middle : middle + 1]
    lam_t, lam_r = patch.eigenvalues(x, y)
    opposite = lam_t * lam_r * here.lam_t * here.lam_r < 0
    reach = np.abs(lam_r) * (ticks[1] - ticks[0])
    close = opposite & (np.hypot(*source) < reach)
    if not close.any():
        return None
    apart = np.where(close, np.hypot(x - guess[0], y - guess[1]), np.inf)
    row, col = np.unravel_index(int(np.argmin(apart)), apart.shape)
    return float(x[row, col]), float(y[row, col])
