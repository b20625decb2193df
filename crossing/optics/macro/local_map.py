"""Everything that a lens map says at one position: magnification, stretch, gradient, fold, mirror image and delay."""

from __future__ import annotations

from dataclasses import dataclass
from math import atan2, cos, degrees, hypot, inf, radians, sin
from typing import TYPE_CHECKING, Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.grid_lines import Kind, zero_lines
from crossing.optics.macro.lens_map import LensMap
from crossing.optics.macro.map_checks import MapQuality
from crossing.optics.macro.map_fold import (
    FoldSolution,
    LocalStretch,
    linear_fold,
    local_stretch,
    mapped_fold,
    nearest_critical,
)
from crossing.optics.macro.map_patch import MapPatch
from crossing.optics.macro.sky_frame import SkyFrame, offsets_from_sky, sky_from_offsets

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.optics.local import FoldGeometry, LocalLens, Parity

__all__ = ["FLAGS", "MapPoint", "local_solution"]

Array: TypeAlias = npt.NDArray[np.float64]
Sky: TypeAlias = tuple[float, float]

FLAGS: Final[dict[str, str]] = {
    "nonlinear": "the linear expansion of lam_t is off by more than a tenth; the values come from the map itself",
    "no_mirror_on_map": "the source has no mirror image by the map, or none within it",
    "not_followed": "the critical curve or the caustic is too far away or not on the map; the values are the linear "
    "expansion's",
    "no_curve_along_stretch": "the line along the stretch does not meet the critical curve, as near a cusp",
    "near_cusp": "the nearest point of the caustic is a cusp, where there is no fold law and images come in threes",
    "no_critical_curve": "the map has no critical curve of this kind",
    "no_fold": "lam_t does not change along the stretch, so that there is no fold",
}
"""What is to be known about a point, with what it means."""

LINEAR_TOLERANCE: Final = 0.1
"""Relative error of the linear expansion above which it counts as invalid."""

_FIRST_REACH: Final = 96
_LARGEST_PATCH: Final = 640
_REACH_FACTOR: Final = 3.5
_MOST_ALONG: Final = 4.0
# Closer to the critical curve than this part of a pixel, float32 maps do not tell the two images apart.
_TOUCHING: Final = 1e-4


@dataclass(frozen=True, slots=True, kw_only=True)
class MapPoint:
    """The lens of one map at one position, for the event's source."""

    name: str
    """Name of the lens model."""
    position: Sky
    """RA, Dec [deg]."""
    kappa: float
    """Convergence."""
    lam_t: float
    """Eigenvalue along the stretch, the smaller in size."""
    lam_r: float
    """Eigenvalue across it."""
    stretch_angle: float
    """Position angle of the stretch, from north to east [deg], 0 to 180."""
    gradient: tuple[float, float]
    """Change of lam_t per arcsec along the stretch (>= 0) and across it; the second axis lies a quarter turn from the
    first, counted from east to north."""
    gradient_sky: tuple[float, float]
    """The same to east and north [1/arcsec]."""
    critical_point: Sky | None
    """RA, Dec [deg] of the nearest point of the critical curve; None where there is none."""
    linear: FoldSolution | None
    """The fold by the linear expansion of lam_t at the position."""
    mapped: FoldSolution | None
    """The fold by the map itself."""
    linear_error: float | None
    """Largest relative error of the linear distance, mirror offset and caustic distance; None where unknown."""
    time_delay_factor: float
    """Days of one arcsec**2 of arrival time."""
    quality: MapQuality
    """How well the pieces of the map agree here."""
    flags: tuple[str, ...]
    """Keys of `FLAGS`."""

    @property
    def gamma(self) -> float:
        """Shear, of the sign that makes lam_t = 1 - kappa - gamma."""
        return (self.lam_r - self.lam_t) / 2

    @property
    def lens(self) -> LocalLens:
        """Convergence and shear as a local lens, without the gradient."""
        from crossing.optics.local import LocalLens

        return LocalLens.from_eigenvalues(self.lam_t, self.lam_r)

    @property
    def mu_t(self) -> float:
        """Signed stretch along x; infinite on the critical curve."""
        return self.lens.mu_t

    @property
    def mu_r(self) -> float:
        """Signed stretch across it."""
        return self.lens.mu_r

    @property
    def mu(self) -> float:
        """Signed magnification."""
        return self.lens.mu

    @property
    def parity(self) -> Parity:
        """Kind of image: ``minimum``, ``saddle``, ``maximum`` or ``critical``."""
        return self.lens.parity

    @property
    def linear_is_valid(self) -> bool:
        """Whether the linear expansion is known to be good to a tenth."""
        return self.linear_error is not None and "nonlinear" not in self.flags

    @property
    def best(self) -> FoldSolution | None:
        """The fold by the map where it holds it, else by the linear expansion."""
        return self.mapped or self.linear

    @property
    def fold_geometry(self) -> FoldGeometry | None:
        """The linear fold with the gradient at the position, for simulations of the merging pair."""
        if self.gradient[0] == 0 or self.lam_r == 0:
            return None
        from crossing.optics.local import FoldGeometry

        return FoldGeometry(gradient=self.gradient, mu_r=1 / self.lam_r)

    @property
    def mirror_position(self) -> Sky | None:
        """RA, Dec [deg] of the mirror image."""
        if self.best is None or self.best.mirror is None:
            return None
        ra, dec = sky_from_offsets(self.position, *self.best.mirror)
        return float(ra), float(dec)

    @property
    def pair_delay(self) -> float | None:
        """Days by which the saddle image follows the minimum (or the maximum the saddle)."""
        arrival = None if self.best is None else self.best.arrival
        return None if arrival is None else self.time_delay_factor * arrival

    def to_dict(self) -> dict[str, Any]:
        """All quantities by name; angles in arcsec and positions in degrees."""
        best = self.best
        fold = {
            "critical_distance_arcsec": best and best.critical_distance,
            "critical_distance_perp_arcsec": best and best.critical_distance_perp,
            "fold_strength_arcsec_half": best and best.fold_strength,
            "caustic_distance_arcsec": best and best.caustic_distance,
            "pair_separation_arcsec": best and best.separation,
            "pair_flux_ratio": best and best.flux_ratio,
        }
        return {
            "name": self.name,
            "position_deg": list(self.position),
            **{key: getattr(self, key) for key in ("kappa", "gamma", "lam_t", "lam_r", "mu_t", "mu_r", "mu", "parity")},
            "stretch_angle_deg": self.stretch_angle,
            "gradient_per_arcsec": list(self.gradient),
            "gradient_sky_per_arcsec": list(self.gradient_sky),
            "critical_point_deg": self.critical_point and list(self.critical_point),
            **fold,
            "mirror_position_deg": self.mirror_position and list(self.mirror_position),
            "pair_delay_days": self.pair_delay,
            "linear": self.linear and self.linear.to_dict(),
            "linear_error": self.linear_error,
            "linear_is_valid": self.linear_is_valid,
            "quality": self.quality.to_dict(),
            "flags": list(self.flags),
        }

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the position, its mirror image, the stretch and the nearest critical point, with east to the left.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw, in arcseconds from the position; a figure of its own otherwise.

        Returns
        -------
        matplotlib.axes.Axes
            Where it was drawn.
        """
        from matplotlib.figure import Figure

        axes: Axes = Figure(figsize=(6, 6), layout="constrained").add_subplot() if ax is None else ax
        mirror = None if self.best is None else self.best.mirror
        length = 1.0 if mirror is None else max(1.5 * hypot(*mirror), 0.1)
        east, north = sin(radians(self.stretch_angle)), cos(radians(self.stretch_angle))
        ends = [-length * east, length * east], [-length * north, length * north]
        axes.plot(*ends, color="0.5", linestyle=":", label="stretch", zorder=1)
        axes.plot(0, 0, "*", color="k", markersize=11, label="position")
        if mirror is not None:
            axes.plot(*mirror, "o", color="k", markerfacecolor="none", label="mirror image")
        if self.critical_point is not None:
            x, y = offsets_from_sky(self.position, *self.critical_point)
            axes.plot(x, y, "+", color="k", markersize=9, label="nearest critical point")
        axes.set_xlabel("east of the position [arcsec]")
        axes.set_ylabel("north of the position [arcsec]")
        axes.set_aspect("equal")
        if not axes.xaxis_inverted():
            axes.invert_xaxis()
        axes.legend(frameon=False)
        return axes

    def to_table(self) -> QTable:
        """One row with the scalar quantities."""
        from astropy.table import QTable

        row = {
            key: np.nan if value is None else value
            for key, value in self.to_dict().items()
            if not isinstance(value, list | dict)
        }
        return QTable(rows=[row])


def local_solution(lens_map: LensMap, position: Sky) -> MapPoint:
    """What a lens map says at a position.

    Parameters
    ----------
    lens_map : LensMap
        The map; only a part around the position is read.
    position : (float, float)
        RA, Dec [deg].

    Returns
    -------
    MapPoint
        Eigenvalues, gradient and fold; see there.

    Raises
    ------
    InputError
        If the position lies outside the map, or too close to its edge or to pixels without a number; or if the pieces
        of the map contradict each other around it.
    """
    frame = lens_map.frame_at(position)
    quality = lens_map.check(*lens_map.window(frame, _FIRST_REACH), frame)
    small = lens_map.patch(position, _FIRST_REACH * frame.pixel_size)
    here = local_stretch(small)
    linear = linear_fold(here)
    kind: Kind = "radial" if here.kappa > 1 else "tangential"
    line = _critical_line(lens_map, frame, kind)
    flags = [] if linear is not None else ["no_fold"]
    nearest: Sky | None = None
    mapped: FoldSolution | None = None
    if line is None:
        flags += ["not_followed"] * (linear is not None) + ["no_critical_curve"]
    else:
        closest = _closest(small, line)
        ra, dec = frame.to_sky(*closest)
        nearest = float(ra), float(dec)
        touching = hypot(*closest) < _TOUCHING * frame.pixel_size
        mapped = linear if touching else _mapped(lens_map, position, here, line, small)
        flags += _shortcomings(mapped)
    error = _linear_error(linear, mapped)
    if (error is not None and error > LINEAR_TOLERANCE) or {"no_curve_along_stretch", "near_cusp"} & set(flags):
        flags.insert(0, "nonlinear")
    return MapPoint(
        name=lens_map.name,
        position=position,
        kappa=here.kappa,
        lam_t=here.lam_t,
        lam_r=here.lam_r,
        stretch_angle=degrees(atan2(here.direction[0], here.direction[1])) % 180,
        gradient=here.gradient,
        gradient_sky=here.slope,
        critical_point=nearest,
        linear=linear,
        mapped=mapped,
        linear_error=error,
        time_delay_factor=lens_map.scales.time_delay_factor,
        quality=quality,
        flags=tuple(flags),
    )


def _shortcomings(mapped: FoldSolution | None) -> list[str]:
    """Flags of what the map does not say."""
    if mapped is None:
        return ["not_followed"]
    missing = {"no_curve_along_stretch": mapped.critical_distance, "no_mirror_on_map": mapped.mirror}
    return ["near_cusp"] * mapped.nearest_is_cusp + [flag for flag, value in missing.items() if value is None]


def _critical_line(lens_map: LensMap, frame: SkyFrame, kind: Kind) -> Array | None:
    """Vertices of the critical curve around the position [arcsec], from ever larger parts of the map."""
    reach = _FIRST_REACH
    while True:
        rows, columns = lens_map.window(frame, reach)
        (lines,) = zero_lines(lens_map.fields(rows, columns, frame), [lens_map.factor], kind)
        whole = rows.stop - rows.start >= lens_map.shape[0] - 2 * lens_map.margin
        whole &= columns.stop - columns.start >= lens_map.shape[1] - 2 * lens_map.margin
        if lines:
            column = np.concatenate([line.column for line in lines]) + columns.start
            row = np.concatenate([line.row for line in lines]) + rows.start
            steps = np.hypot(column - frame.pixel[0], row - frame.pixel[1])
            if steps.min() <= reach or whole:
                return np.column_stack(frame.to_offsets(column, row))
        elif whole:
            return None
        reach *= 3


def _closest(patch: MapPatch, line: Array) -> Array:
    """The critical point that is nearest to the position, the nearest vertex where it lies outside the patch."""
    vertex = line[int(np.argmin(np.hypot(*line.T)))]
    found = nearest_critical(patch, vertex[None, :]) if patch.contains(*vertex) else None
    # Steps of the search that lead to another branch of the curve are not wanted.
    near = found is not None and hypot(found[0] - vertex[0], found[1] - vertex[1]) < 2 * patch.frame.pixel_size
    return np.array(found) if near else vertex


def _mapped(lens_map: LensMap, position: Sky, here: LocalStretch, line: Array, small: MapPatch) -> FoldSolution | None:
    """The fold by the map, in a patch as large as the pair needs."""
    nearest, pixel = float(np.hypot(*line.T).min()), small.frame.pixel_size
    along = abs(here.lam_t) / here.gradient[0] if here.gradient[0] > 0 else inf
    # The pair may lie far along a critical curve that is near, but then the larger patch is slow.
    wanted = {_REACH_FACTOR * nearest, _REACH_FACTOR * min(max(along, nearest), _MOST_ALONG * nearest)}
    found = None
    for reach in sorted({float(np.clip(one / pixel, _FIRST_REACH, _LARGEST_PATCH)) for one in wanted}):
        try:
            patch = small if reach == _FIRST_REACH else lens_map.patch(position, reach * pixel)
        except InputError:
            break
        inside = line[patch.contains(*line.T)]
        found = (mapped_fold(patch, here, inside) if len(inside) else None) or found
        if found is not None and found.mirror is not None:
            break
    return found


def _linear_error(linear: FoldSolution | None, mapped: FoldSolution | None) -> float | None:
    """Largest relative error of the linear values that the map can judge."""
    if linear is None or mapped is None or linear.critical_distance is None or mapped.critical_distance is None:
        return None
    if mapped is linear:
        return 0.0
    errors = [
        abs(linear.critical_distance / mapped.critical_distance - 1),
        abs(linear.caustic_distance / mapped.caustic_distance - 1),
    ]
    if linear.mirror is not None and mapped.mirror is not None:
        shift = hypot(linear.mirror[0] - mapped.mirror[0], linear.mirror[1] - mapped.mirror[1])
        errors.append(shift / hypot(*mapped.mirror))
    return max(errors)
