"""The macro lens from mirrored knots: the critical line between them, and the transient's distance to it."""

from __future__ import annotations

from dataclasses import dataclass
from math import degrees
from typing import TYPE_CHECKING, Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.pair_model import (
    Fold,
    LogNormal,
    PairData,
    PairPriors,
    fold_of,
    misfit,
    outwardness,
)
from crossing.optics.macro.pair_sampler import draw_folds
from crossing.optics.macro.sky_frame import offsets_from_sky, sky_from_offsets
from crossing.optics.macro.state import LocalDraws, LocalState

if TYPE_CHECKING:
    from crossing.event import Event, MacroRecord, Value
    from crossing.event.records import Position

__all__ = ["CriticalLine", "MirrorSolution", "mirror_solution", "solve_pairs", "state_at"]

Array: TypeAlias = npt.NDArray[np.float64]

# Common practice, no source: a third of a pixel of the sharpest images.
_POSITION_ERROR: Final = 0.03
_MU_R: Final = (1.0, 4.0)
_GRADIENTS: Final = (0.01, 0.5)
# Quantiles of a prior of this width [dex] around 1 / (distance from the cluster's centre).
_CENTRE_DEX: Final = 0.3
_FREE_DEX: Final = 1.0
_FREE_GRADIENT: Final = 0.07
_CLOSEST: Final = 3.0
_LEAST_SINE: Final = 0.1
_DRIFT: Final = 0.25
_SURE: Final = 0.02
_UNLIKELY: Final = 1e-3
_RULED_OUT: Final = 50.0
_FLUX_MODEL: Final = 0.2
_FLUX_SIGMAS: Final = 3.0
_POOR_ANGLE: Final = 30.0
_CLEARLY_INWARD: Final = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class CriticalLine:
    """The critical curve near the event, as a straight line; errors are standard deviations."""

    point: Position
    """A point of it, RA and Dec [deg]: the mean midpoint of the pairs, moved onto the line."""
    point_error: float
    """Error of that point across the line [arcsec]."""
    position_angle: float
    """Direction of the line, from north to east [deg], 0 to 180."""
    position_angle_error: float
    """Its error [deg]."""
    stretch_angle: float
    """Direction of the stretch there, from north to east [deg], 0 to 180."""
    stretch_angle_error: float
    """Its error [deg]."""
    distance_perp: tuple[float, float, float]
    """Shortest distance of the event to the critical curve [arcsec]: 16%, 50% and 84% of its size."""
    distance: tuple[float, float, float]
    """Distance along the stretch [arcsec]: 16%, 50% and 84% of its size."""
    chi2: float
    """Misfit of the pairs' positions and of the priors."""
    dof: int
    """Its degrees of freedom."""

    def to_dict(self) -> dict[str, Any]:
        """All fields by name."""
        return {name: getattr(self, name) for name in self.__dataclass_fields__}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MirrorSolution:
    """The lens at the event from mirrored knots: equal-weight draws of local lenses."""

    record: MacroRecord
    """What the event file says."""
    folds: Fold
    """Draws of the lens around the pairs."""
    place: Array
    """The event, east and north [arcsec] in the tangent plane at the pairs, shape (2,)."""
    line: CriticalLine
    """The critical line."""
    flags: tuple[str, ...]
    """Keys of `crossing.optics.macro.solutions.FLAGS`."""

    @property
    def name(self) -> str | None:
        """Name of the lens model."""
        return self.record.name

    @property
    def certain(self) -> bool:
        """Positions have errors."""
        return False

    @property
    def central(self) -> LocalState:
        """Medians of the draws on the likelier side of the critical curve."""
        draws = state_at(self.folds, self.place)
        positive = draws.lam_t > 0
        chosen = positive if np.mean(positive) >= 0.5 else ~positive
        turn = np.radians(draws.stretch_angle[chosen])
        middle = np.arctan2(np.sin(turn).mean(), np.cos(turn).mean())
        lam_t, lam_r, gx, gy = (float(np.median(one[chosen])) for one in draws[:4])
        return LocalState(
            lam_t=lam_t,
            lam_r=lam_r,
            gradient=(gx, gy),
            stretch_angle=float(np.degrees(middle)) % 360,
            images=2 if self.record.side == "pair" else 1,
        )

    def draw(self, rng: np.random.Generator, size: int) -> tuple[Array, Array]:
        """Eigenvalues (lam_t, lam_r), each of shape (size,)."""
        draws = self.draw_local(rng, size)
        return draws.lam_t, draws.lam_r

    def draw_local(self, rng: np.random.Generator, size: int) -> LocalDraws:
        """Eigenvalues with gradient and direction, over the posterior and the error of the event's position."""
        which = rng.integers(len(self.folds.gx), size=size)
        place = np.broadcast_to(self.place, (size, 2))
        if self.record.position_error is not None:
            place = place + self.record.position_error * rng.standard_normal((size, 2))
        return state_at(Fold(*(one[which] for one in self.folds)), place)


def state_at(fold: Fold, place: Array) -> LocalDraws:
    """The lens at a place, east and north [arcsec], of shape (2,) or (n, 2)."""
    x, y = fold.inside(place)
    xx, xy, yy = fold.jacobian(x, y)
    # Of the two eigenvectors that of the eigenvalue of smaller size, a small turn away from x.
    turn = np.arctan2(2 * xy, xx - yy) / 2 + np.where(xx + yy > 0, np.pi / 2, 0.0)
    turn = (turn + np.pi / 2) % np.pi - np.pi / 2
    c, s = np.cos(turn), np.sin(turn)
    lam_t = c**2 * xx + 2 * c * s * xy + s**2 * yy
    # Change of the Jacobian's elements along x and along y; that of xy along x is that of xx along y.
    xx_x, xx_y = fold.gx + fold.qxx * x + fold.qxy * y, fold.gy + fold.qxy * x + fold.qyy * y
    yy_x = fold.h + fold.qyy * x
    by_x, by_y = c**2 * xx_x + 2 * c * s * xx_y + s**2 * yy_x, c**2 * xx_y + 2 * c * s * yy_x
    along, across = c * by_x + s * by_y, c * by_y - s * by_x
    way = np.where(along < 0, -1.0, 1.0)
    angle = 90 - np.degrees(fold.angle + turn) + np.where(along < 0, 180.0, 0.0)
    return LocalDraws(lam_t, xx + yy - lam_t, way * along, way * across, angle % 360)


def mirror_solution(event: Event, record: MacroRecord) -> MirrorSolution:
    """The lens of an event between mirrored knots.

    Parameters
    ----------
    event : Event
        Not needed beyond its record, which holds all of it.
    record : MacroRecord
        With two or more pairs and the event's position.

    Returns
    -------
    MirrorSolution
        Central values and draws.

    Raises
    ------
    InputError
        As `solve_pairs`.
    """
    return solve_pairs(record)


def solve_pairs(record: MacroRecord, seed: int = 0) -> MirrorSolution:
    """Posterior of the fold between mirrored knots.

    Parameters
    ----------
    record : MacroRecord
        Two or more pairs and the event's position; optionally mu_r, the gradient along the stretch, the cluster's
        centre and the side of the event.
    seed : int
        Seed of the draws.

    Returns
    -------
    MirrorSolution
        Equal-weight draws.

    Raises
    ------
    InputError
        If there are fewer than two pairs, images of a pair or midpoints of pairs coincide within their errors, the
        separations run along the line of the midpoints, or the side contradicts the rest.

    Notes
    -----
    The midpoint of a mirrored pair lies on the critical curve, and its separation along the stretch: for a quadratic
    lens exactly. The next order, which bends real critical curves, is marginalised over. Positions fix the direction
    of the gradient of lam_t but not its size: that comes from a magnification mu, T = mu_r / (mu s) at the distance s
    from the curve, from a gradient that is given, or from a prior.
    """
    if len(record.mirror_pairs) < 2 or record.position is None:
        raise InputError(
            f"`mirror_pairs` must be two pairs or more with the position of the event, got "
            f"{len(record.mirror_pairs)}; add what is missing"
        )
    data, origin = _data(record)
    priors, flags = _priors(record, data, origin)
    start, width = _start(data)
    place = _offset(origin, record.position)
    rng = np.random.default_rng(seed)
    sided = record.side in ("minimum", "saddle")
    found = draw_folds(
        data,
        priors,
        rng,
        _orientations(start, data, priors),
        width,
        (lambda folds: _on_side(record, state_at(folds, place))) if sided else None,
    )
    folds = fold_of(found.parameters, data, priors)
    # The priors count as so many measurements as they have parameters.
    misfits = misfit(folds, data) + np.sum(found.parameters[:, 3:] ** 2, axis=1)
    right = _on_side(record, state_at(folds, place))
    chi2 = float(np.min(misfits[right], initial=np.inf))
    if sided and chi2 > _RULED_OUT:
        raise InputError(
            f"`side` must agree with the pairs, mu_r and the centre, got {record.side}; change one of them"
        )
    folds = Fold(*(one[right] for one in folds))
    line = _line(data, folds, place, origin, chi2)
    flags += _judged(record, data, folds, place, line, found.drift)
    return MirrorSolution(record=record, folds=folds, place=place, line=line, flags=tuple(flags))


def _offset(origin: Position, position: Position) -> Array:
    east, north = offsets_from_sky(origin, *position)
    return np.array([float(east), float(north)])


def _data(record: MacroRecord) -> tuple[PairData, Position]:
    pairs = record.mirror_pairs
    origin = pairs[0].first
    first, second = (np.array([_offset(origin, getattr(pair, key)) for pair in pairs]) for key in ("first", "second"))
    error = np.array([pair.position_error or record.position_error or _POSITION_ERROR for pair in pairs])
    data = PairData(first=first, second=second, error=error, magnification=tuple(pair.magnification for pair in pairs))
    apart = np.hypot(*(second - first).T)
    for k in np.flatnonzero(apart < _CLOSEST * error):
        raise InputError(
            f"`mirror_pairs` must have images further apart than {_CLOSEST:g} times the position error, got "
            f"{apart[k]:.3g} arcsec with {error[k]:.3g} in pair {k}; remove that pair"
        )
    spread = np.hypot(*(data.middle[:, None] - data.middle[None]).T).max()
    if spread < _CLOSEST * error.max() / np.sqrt(2):
        raise InputError(
            f"`mirror_pairs` must have midpoints at different places, got all within {spread:.3g} arcsec, through "
            "which any line passes; add a pair further away"
        )
    return data, origin


def _priors(record: MacroRecord, data: PairData, origin: Position) -> tuple[PairPriors, list[str]]:
    from crossing.event import Value

    flags = []
    if any(pair.position_error is None for pair in record.mirror_pairs) and record.position_error is None:
        flags.append("position_error_assumed")
    if record.mu_r is None:
        flags.append("mu_r_from_prior")
    centre = None if record.centre is None else _offset(origin, record.centre)
    measured = any(value is not None for value in data.magnification)
    whole = record.gradient is None
    if record.gradient is not None:
        gradient: Value | LogNormal = record.gradient[0]
    elif measured:
        gradient = LogNormal(_FREE_GRADIENT, _FREE_DEX)
    else:
        flags.append("gradient_from_prior")
        gradient = Value.loguniform(*_GRADIENTS)
        if centre is not None:
            gradient = LogNormal(1 / float(np.hypot(*(data.middle.mean(axis=0) - centre))), _CENTRE_DEX)
    mu_r = Value.loguniform(*_MU_R) if record.mu_r is None else record.mu_r
    return PairPriors(mu_r=mu_r, gradient=gradient, whole=whole, outward=centre), flags


def _start(data: PairData) -> tuple[Array, Array]:
    """Parameters of the straight line through the midpoints and of the mean separation, and how far they may be off.

    Raises
    ------
    InputError
        If the separations run along the line.
    """
    apart, middle = data.second - data.first, data.middle
    turn = np.arctan2(apart[:, 1], apart[:, 0])
    weight = np.hypot(*apart.T) ** 2 / data.error**2
    stretch = np.angle(np.sum(weight * np.exp(2j * turn))) / 2
    centred = (middle - middle.mean(axis=0)) / data.error[:, None]
    # The direction in which squares of distances from the line, in units of their errors, are least.
    _, _, axes = np.linalg.svd(centred)
    tilt = (np.arctan2(axes[0, 1], axes[0, 0]) - stretch) % np.pi
    if np.sin(tilt) < _LEAST_SINE:
        raise InputError(
            "`mirror_pairs` must have separations that cross the line of their midpoints, got both within "
            f"{degrees(min(tilt, np.pi - tilt)):.1f} degrees of each other; such pairs are no mirrored knots"
        )
    off = (middle - middle.mean(axis=0)) @ [-axes[0, 1], axes[0, 0]]
    extent = np.ptp((middle - middle.mean(axis=0)) @ axes[0])
    error = float(data.error.max())
    bend = np.abs(np.angle(np.exp(2j * (turn - stretch)))).max() / 2
    side = np.hypot(error, np.abs(off).max())
    width = [error / np.hypot(*apart.T).max() + bend, side / extent + bend, side / np.sin(tilt)]
    return np.array([stretch, tilt, *np.zeros(6)]), np.array([*(2 * one + 0.02 for one in width), *np.ones(5)])


def _orientations(start: Array, data: PairData, priors: PairPriors) -> list[Array]:
    """The start with x to either side, or only to that on which lam_t can be larger."""
    both = [start, start + np.pi * np.eye(len(start))[0]]
    cosine = outwardness(fold_of(np.array(both), data, priors), data, priors)
    return [one for one, outward in zip(both, cosine, strict=True) if outward > -_CLEARLY_INWARD]


def _on_side(record: MacroRecord, draws: LocalDraws) -> npt.NDArray[np.bool_]:
    """Whether the event is on the side of the critical curve that the file names."""
    if record.side not in ("minimum", "saddle"):
        return np.ones(draws.lam_t.shape, dtype=bool)
    product = draws.lam_t * draws.lam_r
    return (product < 0) if record.side == "saddle" else (product > 0) & (draws.lam_t > 0)


def _line(data: PairData, folds: Fold, place: Array, origin: Position, chi2: float) -> CriticalLine:
    draws = state_at(folds, place)
    size = np.abs(draws.lam_t)
    steepness = np.hypot(draws.gradient_x, draws.gradient_y)
    with np.errstate(divide="ignore"):
        along, across = size / draws.gradient_x, size / steepness
    middle = data.middle.mean(axis=0)
    there = state_at(folds, middle)
    angle = np.radians(90 - there.stretch_angle)
    mean, angle_error = _axis(angle + np.arctan2(there.gradient_x, -there.gradient_y))
    stretch, stretch_error = _axis(angle)
    normal = np.array([-np.sin(mean), np.cos(mean)])
    offsets = (folds.origin - middle) @ normal
    ra, dec = sky_from_offsets(origin, *(middle + np.median(offsets) * normal))
    low, high = np.percentile(offsets, [15.865, 84.135])
    return CriticalLine(
        point=(float(ra), float(dec)),
        point_error=float(high - low) / 2,
        position_angle=(90 - degrees(mean)) % 180,
        position_angle_error=angle_error,
        stretch_angle=(90 - degrees(stretch)) % 180,
        stretch_angle_error=stretch_error,
        distance_perp=_three(across),
        distance=_three(along),
        chi2=chi2,
        dof=2 * len(data.error) - 3,
    )


def _axis(angle: Array) -> tuple[float, float]:
    """Mean of directions without an arrow [rad], and their standard deviation [deg]."""
    mean = np.angle(np.exp(2j * angle).mean()) / 2
    return float(mean), float(np.degrees(np.std(np.angle(np.exp(2j * (angle - mean))) / 2)))


def _three(values: Array) -> tuple[float, float, float]:
    low, middle, high = (float(one) for one in np.percentile(values, [15.865, 50, 84.135]))
    return low, middle, high


def _judged(
    record: MacroRecord, data: PairData, folds: Fold, place: Array, line: CriticalLine, drift: float
) -> list[str]:
    """What makes the solution doubtful."""
    from scipy.stats import chi2

    flags = []
    if chi2.sf(line.chi2, line.dof) < _UNLIKELY:
        flags.append("not_mirrored")
    if line.position_angle_error > _POOR_ANGLE:
        flags.append("line_poorly_known")
    share = np.mean(state_at(folds, place).lam_t * np.sign(folds.lam_r) > 0)
    if record.centre is None and record.side in (None, "pair") and min(share, 1 - share) > _SURE:
        flags.append("side_unknown")
    if drift > _DRIFT:
        flags.append("draws_drift")
    for k, pair in enumerate(record.mirror_pairs):
        if pair.flux1 is None or pair.flux2 is None:
            continue
        # Over the two images of a fold the size of the determinant hardly changes.
        one, two = (_log_determinant(folds, image[k]) for image in (data.first, data.second))
        expected = two - one
        error = np.sqrt(_relative(pair.flux1) ** 2 + _relative(pair.flux2) ** 2 + _FLUX_MODEL**2 + np.var(expected))
        if abs(np.log(pair.flux1.central / pair.flux2.central) - np.median(expected)) > _FLUX_SIGMAS * error:
            flags.append("fluxes_disagree")
            break
    return flags


def _log_determinant(folds: Fold, place: Array) -> Array:
    xx, xy, yy = folds.jacobian(*folds.inside(place))
    return np.asarray(np.log(np.abs(xx * yy - xy**2)))


def _relative(value: Value) -> float:
    """Relative standard deviation of a flux."""
    if value.is_exact:
        return 0.0
    low, high = (float(one) for one in value.quantile([0.15865, 0.84135]))
    return (high - low) / 2 / value.central
