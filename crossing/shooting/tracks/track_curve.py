"""What comes of a track: its light curve, and the folds that it meets."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from crossing.shooting.tracks.chord_sums import backgrounds

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

__all__ = ["Crossings", "TrackCurve"]

Array = NDArray[np.float64]

_STEP, _P, _AREA, _TURN = 0, 1, 5, 8


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Crossings:
    """Folds that the centre of the source meets, in the order of their places."""

    position: Array
    """(n,) share of the track, 0 to 1."""
    place: Array
    """(n,) distance from the start of the track [theta_E]."""
    strength: Array
    """(n,) K: the pair is magnified K / sqrt(d) at the distance d along the caustic's normal [theta_E^(1/2)]."""
    angle: Array
    """(n,) angle between the track and the caustic's normal, 0 to pi/2 [rad]."""
    entering: NDArray[np.bool_]
    """(n,) whether the pair is there after the crossing."""
    background: Array
    """(n,) magnification of a point at the fold by all other images that the track's line has."""

    def __len__(self) -> int:
        return len(self.place)

    @classmethod
    def from_nodes(cls, nodes: Array, length: float) -> Crossings:
        """Crossings among the nodes of the track's own line.

        Parameters
        ----------
        nodes : (n, COLUMNS) ndarray
            See `trace_curves`.
        length : float
            Length of the track.

        Notes
        -----
        Where p turns, ``p = p0 + p'' t^2 / 2`` and the area grows by ``A = 1/|G|^2`` per t: both images together have
        the magnification ``A sqrt(2 / |p''|) / sqrt(|p - p0|)`` along the track, and the normal's share of the track's
        direction makes K of it.
        """
        rows = np.flatnonzero((nodes[:, _TURN] != 0.0) & (nodes[:, _P] >= 0.0) & (nodes[:, _P] <= length))
        rows = rows[np.argsort(nodes[rows, _P], kind="stable")]
        found, background = nodes[rows], np.empty(len(rows))
        backgrounds(nodes, rows, background)
        tangent = np.abs(found[:, _TURN + 1])
        cosine = 1.0 / np.hypot(1.0, tangent)
        return cls(
            position=found[:, _P] / length,
            place=found[:, _P].copy(),
            strength=found[:, _AREA] * np.sqrt(2.0 / np.abs(found[:, _P + 2])) * np.sqrt(cosine),
            angle=np.arctan(tangent),
            entering=found[:, _P + 2] > 0.0,
            background=background,
        )

    def to_dict(self) -> dict[str, Any]:
        """Columns as lists."""
        return {
            "position": self.position.tolist(),
            "place_einstein": self.place.tolist(),
            "strength": self.strength.tolist(),
            "angle_rad": self.angle.tolist(),
            "entering": self.entering.tolist(),
            "background": self.background.tolist(),
        }

    def to_table(self) -> QTable:
        """One row a crossing."""
        from astropy.table import QTable

        return QTable(self.to_dict())


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrackCurve:
    """Light curve of a disc, or of several, along a straight track."""

    position: Array
    """(n_position,) share of the track, 0 to 1."""
    magnification: Array
    """(n_position,) or (n_radius, n_position), total and unsigned."""
    radius: Array
    """(n_radius,) radii of the discs [theta_E of one solar mass]."""
    limb_darkening: Array
    """(n_radius,) coefficients of the linear law."""
    start: tuple[float, float]
    """First point (u, v) of the track."""
    end: tuple[float, float]
    """Last point."""
    accuracy: float
    """Relative accuracy that was asked for."""
    crossings: Crossings
    """Folds that the centre of the disc meets."""
    evaluations: int
    """Evaluations of the lens map."""
    images: int
    """Macro images whose light is summed: 1, or 2 in a field with a gradient."""
    flags: tuple[str, ...]
    """What is wrong; empty if all is well."""

    @property
    def length(self) -> float:
        """Length of the track [theta_E]."""
        return float(np.hypot(self.end[0] - self.start[0], self.end[1] - self.start[1]))

    @property
    def status(self) -> str:
        """``ok``, or ``flagged``."""
        return "flagged" if self.flags else "ok"

    @property
    def mean_magnification(self) -> Array:
        """(n_radius,) mean over the track, by straight lines between sorted positions."""
        order = np.argsort(self.position)
        x, values = self.position[order], np.atleast_2d(self.magnification)[:, order]
        return np.asarray(np.trapezoid(values, x, axis=1) / (x[-1] - x[0]) if len(x) > 1 else values[:, 0])

    def to_dict(self) -> dict[str, Any]:
        """Everything, as plain numbers and lists."""
        return {
            "start": list(self.start),
            "end": list(self.end),
            "radius": self.radius.tolist(),
            "limb_darkening": self.limb_darkening.tolist(),
            "accuracy": self.accuracy,
            "images": self.images,
            "evaluations": self.evaluations,
            "status": self.status,
            "flags": list(self.flags),
            "position": self.position.tolist(),
            "magnification": self.magnification.tolist(),
            "crossings": self.crossings.to_dict(),
        }

    def to_table(self) -> QTable:
        """One row a position: share of the track, u, v, and a magnification for each radius."""
        from astropy.table import QTable

        table = QTable({"position": self.position})
        for axis, name in enumerate("uv"):
            table[name] = self.start[axis] + self.position * (self.end[axis] - self.start[axis])
        values = np.atleast_2d(self.magnification)
        for row, values_row in enumerate(values):
            table["magnification" if len(values) == 1 else f"magnification_{row}"] = values_row
        table.meta.update({key: value for key, value in self.to_dict().items() if np.ndim(value) < 1})
        table.meta["radius"] = self.radius.tolist()
        return table

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw magnification against the place on the track, with marks where the centre crosses folds."""
        from crossing.shooting.tracks.track_figure import draw_track

        return draw_track(self, ax)

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>{radius:.3g}</td><td>{mean:.4g}</td><td>{peak:.4g}</td></tr>"
            for radius, mean, peak in zip(
                self.radius, self.mean_magnification, np.atleast_2d(self.magnification).max(axis=1), strict=True
            )
        )
        return (
            f"<p>{self.status}{''.join(': ' + flag for flag in self.flags)}; {len(self.crossings)} fold crossings of "
            f"the centre, {self.evaluations:.3g} evaluations</p><table><tr><th>radius [&theta;<sub>E</sub>]</th>"
            f"<th>mean</th><th>highest</th></tr>{rows}</table>"
        )
