"""Critical curves and caustics of a star field as polylines inside a window of the source plane."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.shooting.caustics.critical import TOTALS, find_cells
from crossing.shooting.caustics.critical_walk import CLOSED, COLUMNS, CUSP, LOST, MET, walk
from crossing.shooting.caustics.folds import fold_points
from crossing.shooting.compiled import announce_compilation
from crossing.shooting.tree import Tree, evaluate

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.shooting.field import StarField

__all__ = ["FLAGS", "CausticCurve", "CausticNetwork", "trace_caustics"]

FLAGS: Final[dict[str, str]] = {
    "cells_given_up": "critical curves meet at a point, or shrink to one, to within rounding; they end there",
    "curve_lost": "a critical curve could not be followed to its end; its caustic has a gap",
}
"""Flags that make a network untrustworthy, with what they mean."""

_ACCURACY = 1e-4
_MARGIN = 8.0
_OUT = 5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CausticCurve:
    """A piece of a caustic inside the window and its critical curve, vertex by vertex [theta_E of 1 Msun]."""

    x: NDArray[np.float64] = field(repr=False)
    """(n,) critical curve in the image plane, with smaller determinants at its left."""
    y: NDArray[np.float64] = field(repr=False)
    u: NDArray[np.float64] = field(repr=False)
    """(n,) caustic in the source plane."""
    v: NDArray[np.float64] = field(repr=False)
    strength: NDArray[np.float64] = field(repr=False)
    """(n,) strength K of the fold [theta_E^(1/2)]; very large or infinite at cusps."""
    closed: bool
    """Whether the curve is whole; its last vertex then equals the first."""
    cusps: NDArray[np.float64]
    """(m, 2) cusps (u, v) in the source plane."""
    critical_cusps: NDArray[np.float64]
    """(m, 2) the same in the image plane."""

    def __len__(self) -> int:
        return len(self.u)

    @property
    def length(self) -> float:
        """Length in the source plane [theta_E]."""
        return float(np.hypot(np.diff(self.u), np.diff(self.v)).sum())

    @property
    def area(self) -> float:
        """Area that the caustic encloses [theta_E^2], signed: positive anticlockwise; NaN unless closed."""
        if not self.closed:
            return float("nan")
        u, v = self.u - self.u[0], self.v - self.v[0]
        return float(0.5 * (u[:-1] * v[1:] - u[1:] * v[:-1]).sum())


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CausticNetwork:
    """All caustics of a star field inside a window of the source plane."""

    curves: tuple[CausticCurve, ...] = field(repr=False)
    """Whole curves, and pieces that end at the window's edge."""
    center: tuple[float, float]
    """Middle of the window (u, v) [theta_E]."""
    width: float
    """Size along u [theta_E]."""
    height: float
    """Size along v [theta_E]."""
    accuracy: float
    """Largest distance of a caustic from its polyline [theta_E]."""
    evaluations: int
    """How often the lens map was evaluated."""
    flags: tuple[str, ...]
    """Names in `FLAGS` that apply."""

    def __len__(self) -> int:
        return len(self.curves)

    @property
    def status(self) -> str:
        """``ok``, or the flags that apply."""
        return ", ".join(self.flags) or "ok"

    @property
    def cusps(self) -> NDArray[np.float64]:
        """(m, 2) cusps (u, v) of all curves."""
        return np.concatenate([np.empty((0, 2)), *(curve.cusps for curve in self.curves)])

    def length(self) -> float:
        """Total length of the caustics in the window [theta_E]."""
        return float(sum(curve.length for curve in self.curves))

    def crossings(self, start: tuple[float, float], end: tuple[float, float]) -> NDArray[np.float64]:
        """Where a straight line of the window crosses caustics, as sorted fractions of it.

        Parameters
        ----------
        start, end : (float, float)
            Ends (u, v) of the line [theta_E].
        """
        du, dv = end[0] - start[0], end[1] - start[1]
        square = du**2 + dv**2
        if not 0.0 < square < np.inf:
            raise InputError(f"`start` and `end` must be finite and apart, got {start} and {end}")
        found = [np.empty(0)]
        for curve in self.curves:
            along = ((curve.u - start[0]) * du + (curve.v - start[1]) * dv) / square
            across = ((curve.v - start[1]) * du - (curve.u - start[0]) * dv) / square
            at = np.flatnonzero((across[:-1] < 0.0) != (across[1:] < 0.0))
            share = across[at] / (across[at] - across[at + 1])
            found.append(along[at] + share * (along[at + 1] - along[at]))
        places = np.sort(np.concatenate(found))
        return places[(places >= 0.0) & (places <= 1.0)]

    def to_table(self) -> QTable:
        """One row a vertex: curve, x, y, u, v, strength, cusp; whether each curve is closed is in the meta data."""
        from astropy.table import QTable

        names = ("x", "y", "u", "v", "strength")
        columns: dict[str, Any] = {
            "curve": np.repeat(np.arange(len(self.curves)), [len(curve) for curve in self.curves])
        }
        for name in names:
            columns[name] = np.concatenate([np.empty(0), *(getattr(curve, name) for curve in self.curves)])
        columns["cusp"] = np.concatenate([np.empty(0, dtype=bool), *(_is_cusp(curve) for curve in self.curves)])
        return QTable(columns, meta={**self.to_dict(), "closed": [curve.closed for curve in self.curves]})

    def to_dict(self) -> dict[str, Any]:
        """Everything but the vertices, as JSON can hold it."""
        return {
            "status": self.status,
            "flags": list(self.flags),
            "flag_meanings": {name: FLAGS[name] for name in self.flags},
            "center": list(self.center),
            "width": self.width,
            "height": self.height,
            "accuracy": self.accuracy,
            "curves": len(self.curves),
            "closed_curves": sum(curve.closed for curve in self.curves),
            "cusps": len(self.cusps),
            "vertices": sum(len(curve) for curve in self.curves),
            "length": self.length(),
            "length_per_area": self.length() / (self.width * self.height),
            "evaluations": self.evaluations,
        }

    def plot(self, ax: Axes | None = None, plane: Literal["source", "image"] = "source") -> Axes:
        """Draw the caustics with their cusps, or the critical curves.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw; a new figure if None.
        plane : {"source", "image"}
            Caustics in the source plane, or critical curves in the image plane.
        """
        from crossing.shooting.maps.map_figure import plot_caustics

        return plot_caustics(self, ax, plane)


def trace_caustics(
    field: StarField,
    center: tuple[float, float] = (0.0, 0.0),
    width: float = 10.0,
    *,
    height: float | None = None,
    accuracy: float | None = None,
) -> CausticNetwork:
    """Trace all caustics inside a window of the source plane, and their critical curves.

    Parameters
    ----------
    field : StarField
        Lenses.
    center : (float, float)
        Middle of the window (u, v), in Einstein radii of one solar mass.
    width : float
        Width of the window along u.
    height : float, optional
        Height along v; square if None.
    accuracy : float, optional
        Largest distance of a caustic from its polyline [theta_E]; 1e-4 of the width if None.

    Returns
    -------
    CausticNetwork
        Polylines in both planes, clipped to the window.

    Raises
    ------
    InputError
        If the window or the accuracy makes no sense.

    Notes
    -----
    The image plane is searched cell by cell with bounds on the derivatives of the map: no cell is passed over unless
    it has no critical points or its image misses the window, and no cell that is kept holds two arcs. What is searched
    is the field's `ray_region`; beyond it lie only the tiny curves between close pairs of stars whose deflection is
    huge. Curves end where the stars' sheet does, for the determinant jumps there. Ends at the window's edge are
    interpolated between vertices.

    References
    ----------
    .. [1] Witt H. J., 1990, A&A 236, 311
    """
    high = width if height is None else height
    fine = _ACCURACY * width if accuracy is None else accuracy
    _check(center, width, high, fine)
    margin = _MARGIN * fine
    half_x, half_y = field.ray_region((0.5 * width + margin, 0.5 * high + margin), center)
    tree = field.tree((-half_x, half_x, -half_y, half_y), exact=True)
    announce_compilation(find_cells)
    window = np.array([center[0], center[1], 0.5 * width, 0.5 * high])
    walks, totals, lost = _walks(field, tree, window, fine)
    curves = [
        _curve(field, tree, piece, closed)
        for rows, is_closed in walks
        for piece, closed in _clip(rows, is_closed, window)
    ]
    found = {"cells_given_up": totals[1] > 0, "curve_lost": lost}
    return CausticNetwork(
        curves=tuple(curves),
        center=(float(center[0]), float(center[1])),
        width=float(width),
        height=float(high),
        accuracy=float(fine),
        evaluations=int(totals[0]) + sum(len(curve) for curve in curves),
        flags=tuple(name for name in FLAGS if found[name]),
    )


def _check(center: tuple[float, float], width: float, height: float, accuracy: float) -> None:
    if not (np.shape(center) == (2,) and np.isfinite(center).all()):
        raise InputError(f"`center` must be two finite numbers (u, v), got {center!r}")
    for name, value in (("width", width), ("height", height), ("accuracy", accuracy)):
        if not (np.isfinite(value) and value > 0.0):
            raise InputError(f"`{name}` must be positive and finite, got {value}")
    if not 1e-9 * max(width, height) <= accuracy <= 0.1 * max(width, height):
        raise InputError(
            f"`accuracy` must be between 1e-9 and 0.1 of the window's size, got {accuracy:g} for {width:g}; it is a "
            "length in the source plane"
        )


def _walks(
    field: StarField, tree: Tree, window: NDArray[np.float64], accuracy: float
) -> tuple[list[tuple[NDArray[np.float64], bool]], NDArray[np.float64], bool]:
    """Vertices of every curve with whether it is closed, counted totals, and whether one was lost."""
    scene = (field.lens_numbers, tree.arrays, tree.roots, tree.root_node, tree.children, field.stars)
    wide = window + np.array([0.0, 0.0, 1.0, 1.0]) * _MARGIN * accuracy
    leaves, totals = np.arange(len(tree), dtype=np.int64), np.zeros(TOTALS)
    nodes, cells = find_cells(leaves, scene, np.hypot(tree.real, tree.imag), wide, totals)
    owner = np.full(len(cells), -1, dtype=np.int64)
    walks: list[tuple[NDArray[np.float64], bool]] = []
    lost = False
    for index in range(len(cells)):
        if owner[index] >= 0:
            continue
        owner[index] = index
        rest = (scene, leaves, nodes, cells, owner, window, accuracy, totals)
        ahead, status = walk(index, 1.0, *rest)
        if status == CLOSED:
            walks.append((ahead, True))
            continue
        back, other = walk(index, -1.0, *rest)
        if not len(ahead) and not len(back):  # its point lies beyond the edge of the region, or of the sheet
            owner[index] = -1
            continue
        lost |= LOST in (status, other)
        joined = _join(ahead, status, back, other)
        if joined is not None:
            walks.append((joined, False))
    return walks, totals, lost


def _join(ahead: NDArray[np.float64], status: int, back: NDArray[np.float64], other: int) -> NDArray[np.float64] | None:
    """Both ways of a curve as one; None if it is known already.

    Where it met the cell of another curve, that one had been left at a point outside of the window: what lies between
    there and the meeting is cut off. Without a vertex outside of the window, both are the same curve.
    """
    rows = np.concatenate([back[:0:-1], ahead if len(ahead) else back[:1]])
    outside = np.flatnonzero(rows[:, _OUT])
    if MET in (status, other) and not len(outside):
        return None
    first = outside[0] if other == MET else 0
    last = outside[-1] if status == MET else len(rows) - 1
    return rows[first : last + 1] if last > first else None


def _clip(
    rows: NDArray[np.float64], closed: bool, window: NDArray[np.float64]
) -> list[tuple[NDArray[np.float64], bool]]:
    """Pieces of a polyline inside the window, with whether each is a whole closed curve."""
    outside = rows[:, _OUT] > 0.0
    if not outside.any():
        return [(rows, closed)]
    if closed:
        first = int(np.argmax(outside))
        rows = np.concatenate([rows[first:-1], rows[: first + 1]])
    enter, leave = _inside_shares(rows[:, 2:4], window)
    pieces: list[tuple[NDArray[np.float64], bool]] = []
    kept = np.flatnonzero(enter < leave)
    for run in np.split(kept, np.flatnonzero((np.diff(kept) > 1) | (leave[kept[:-1]] < 1.0)) + 1):
        if not len(run):
            continue
        one, last = run[0], run[-1]
        piece = [_between(rows, one, enter[one]), rows[one + 1 : last + 1], _between(rows, last, leave[last])]
        pieces.append((np.concatenate(piece), False))
    return pieces


def _between(rows: NDArray[np.float64], segment: int, share: float) -> NDArray[np.float64]:
    """(1, COLUMNS) vertex at a share of a segment."""
    one, two = rows[segment], rows[segment + 1]
    vertex = one + share * (two - one)
    vertex[CUSP] = one[CUSP] if share == 0.0 else two[CUSP] if share == 1.0 else 0.0
    return vertex.reshape(1, COLUMNS)


def _inside_shares(
    places: NDArray[np.float64], window: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Shares of each segment at which it enters and leaves the window; the former is the larger if it misses it."""
    start, move = places[:-1] - window[:2], np.diff(places, axis=0)
    enter, leave = np.zeros(len(move)), np.ones(len(move))
    for axis in range(2):
        for side in (1.0, -1.0):
            room, speed = window[2 + axis] - side * start[:, axis], side * move[:, axis]
            with np.errstate(divide="ignore", invalid="ignore"):
                share = room / speed
            enter = np.where(speed < 0.0, np.maximum(enter, share), enter)
            leave = np.where(speed > 0.0, np.minimum(leave, share), leave)
            leave = np.where((speed == 0.0) & (room < 0.0), -1.0, leave)
    return enter, leave


def _curve(field: StarField, tree: Tree, rows: NDArray[np.float64], closed: bool) -> CausticCurve:
    x, y = np.ascontiguousarray(rows[:, 0]), np.ascontiguousarray(rows[:, 1])
    series = np.empty((len(rows), 7))
    evaluate(x, y, tree.arrays, tree.roots, tree.root_node, tree.children, field.stars, series)
    inside = tree.inside[series[:, 6].astype(np.int64)].astype(np.float64)
    folds = fold_points(x, y, series, inside, field.lens_numbers)
    # The first vertex of a closed curve is not counted twice.
    marks = rows[: len(rows) - closed, CUSP] > 0.0
    at = np.flatnonzero(marks)
    return CausticCurve(
        x=x,
        y=y,
        u=rows[:, 2].copy(),
        v=rows[:, 3].copy(),
        strength=folds.strength,
        closed=closed,
        cusps=rows[at, 2:4].copy(),
        critical_cusps=rows[at, 0:2].copy(),
    )


def _is_cusp(curve: CausticCurve) -> NDArray[np.bool_]:
    marks = np.zeros(len(curve), dtype=bool)
    for x, y in curve.critical_cusps:
        marks |= (curve.x == x) & (curve.y == y)
    return marks
