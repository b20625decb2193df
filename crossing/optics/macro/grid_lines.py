"""Lines on the pixels of a map where an eigenvalue vanishes, to a small part of a pixel."""

from __future__ import annotations

from typing import Literal, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.optics.macro.map_checks import Fields

__all__ = ["GridLine", "Kind", "sample_grid", "zero_lines"]

Array: TypeAlias = npt.NDArray[np.float64]
Kind: TypeAlias = Literal["tangential", "radial"]

_POLISH_STEPS = 4
_ON_LINE = 1e-9


class GridLine(NamedTuple):
    """A polyline in pixels."""

    column: Array
    """Columns of its vertices."""
    row: Array
    """Rows of its vertices."""

    @property
    def closed(self) -> bool:
        """Whether the last vertex is the first again."""
        return bool(self.column[0] == self.column[-1] and self.row[0] == self.row[-1])


def _weights(t: Array) -> Array:
    """Weights of cubic interpolation between the nodes -1, 0, 1, 2, shape (4, ...)."""
    return np.stack(
        [
            -t * (t - 1) * (t - 2) / 6,
            (t + 1) * (t - 1) * (t - 2) / 2,
            -(t + 1) * t * (t - 2) / 2,
            (t + 1) * t * (t - 1) / 6,
        ]
    )


def _cells(place: Array, size: int) -> tuple[npt.NDArray[np.intp], Array]:
    """First of four nodes around places, and where they lie between the second and the third."""
    start = np.clip(np.floor(np.nan_to_num(place)).astype(np.intp) - 1, 0, size - 4)
    return start, place - start - 1


def sample_grid(values: Array, column: Array, row: Array) -> Array:
    """Cubic interpolation through the sixteen pixels around places; not a number outside or near such pixels.

    Parameters
    ----------
    values : ndarray, shape (rows, columns)
        Pixels, four or more a side.
    column, row : ndarray
        Places in pixels, of one shape.

    Returns
    -------
    ndarray
        Values, shape of `column`.
    """
    first_row, t = _cells(row, values.shape[0])
    first_column, s = _cells(column, values.shape[1])
    along_row, along_column = _weights(t), _weights(s)
    total = np.zeros(np.shape(column))
    for j in range(4):
        for i in range(4):
            total += along_row[j] * along_column[i] * values[first_row + j, first_column + i]
    inside = (row >= 0) & (row <= values.shape[0] - 1) & (column >= 0) & (column <= values.shape[1] - 1)
    return np.where(inside, total, np.nan)


def zero_lines(fields: Fields, factors: list[float], kind: Kind) -> list[list[GridLine]]:
    """Lines where 1 - factor (kappa +- |gamma|) = 0, the sign + for the tangential ones.

    Parameters
    ----------
    fields : Fields
        Convergence and shear, arrays of shape (rows, columns); pixels without numbers make gaps.
    factors : list of float
        What multiplies the fields, one set of lines each.
    kind : str
        ``tangential`` or ``radial``.

    Returns
    -------
    list of list of GridLine
        Lines by factor, the longest first.

    Notes
    -----
    Marching squares find the lines to second order in the pixel. Each vertex lies on an edge between two pixels, and is
    then moved along it to the root of the cubic through four, which is of fourth order.
    """
    from contourpy import contour_generator

    sign = 1.0 if kind == "tangential" else -1.0
    height = np.hypot(fields.gamma1, fields.gamma2)
    height *= sign
    height += fields.kappa
    levels = [1 / factor for factor in factors]
    # Outside the box that holds all pixels above the lowest level there is nothing to be found.
    box = _box(height >= min(levels))
    if box is None:
        return [[] for _ in levels]
    generator = contour_generator(z=height[box], name="serial")
    first = np.array([box[1].start, box[0].start])
    result = []
    for level in levels:
        raw = [np.asarray(line) + first for line in generator.lines(level) if len(line) > 3]
        lines = [_polished(fields, sign, level, line) for line in raw]
        result.append(sorted(lines, key=lambda line: -len(line.column)))
    return result


def _box(wanted: npt.NDArray[np.bool_]) -> tuple[slice, slice] | None:
    """Rows and columns around all that is wanted, and one more pixel on each side."""
    rows, columns = (np.flatnonzero(wanted.any(axis=axis)) for axis in (1, 0))
    if not rows.size:
        return None
    return (
        slice(max(int(rows[0]) - 1, 0), int(rows[-1]) + 2),
        slice(max(int(columns[0]) - 1, 0), int(columns[-1]) + 2),
    )


def _polished(fields: Fields, sign: float, level: float, line: Array) -> GridLine:
    """Move vertices along the edges of cells to where the interpolated height has its level."""
    column, row = line[:, 0].copy(), line[:, 1].copy()
    for across in (False, True):
        fixed, moving = (column, row) if across else (row, column)
        size = fields.kappa.shape[0 if across else 1]
        on_edge = (np.abs(fixed - np.round(fixed)) < _ON_LINE) & (np.abs(moving - np.round(moving)) > _ON_LINE)
        on_edge &= (moving > 1) & (moving < size - 2)
        still, start = np.round(fixed[on_edge]).astype(np.intp), np.floor(moving[on_edge]).astype(np.intp)
        nodes = start + np.arange(-1, 3)[:, None]
        values = [one[nodes, still] if across else one[still, nodes] for one in fields]
        moving[on_edge] = start + _root(values, sign, level, moving[on_edge] - start)
    if line[0, 0] == line[-1, 0] and line[0, 1] == line[-1, 1]:
        column[-1], row[-1] = column[0], row[0]
    return GridLine(column, row)


def _root(values: list[Array], sign: float, level: float, t: Array) -> Array:
    """Root between 0 and 1 of the height through four nodes, from a good start."""

    def height(t: Array) -> Array:
        weights = _weights(t)
        kappa, g1, g2 = (np.sum(weights * one, axis=0) for one in values)
        return kappa + sign * np.hypot(g1, g2) - level

    step = 1e-5
    here = t
    for _ in range(_POLISH_STEPS):
        with np.errstate(divide="ignore", invalid="ignore"):
            slope = (height(here + step) - height(here - step)) / (2 * step)
            here = np.clip(here - height(here) / slope, 0.0, 1.0)
    # Where the cubic has no root in the cell, or a pixel is missing, the straight line stays.
    good = np.abs(height(here)) <= np.abs(height(t))
    return np.where(good, here, t)
