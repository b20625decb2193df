"""Cells of the image plane in which the deflection of all far stars is one Taylor series.

The conjugate deflection of a point mass, m / (z - z_i), is analytic away from it. A cell keeps the summed series of all
stars that are at least `RATIO` of its half-diagonals away, and lists the nearer ones. Cells are made from the root
downward: a child shifts its parent's series and adds the stars that have just become far, N log N in all.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from crossing.shooting.compiled import kernel
from crossing.shooting.sheet import sheet_series

__all__ = ["BLOCK", "RATIO", "Tree", "build_tree", "evaluate", "order_for"]

RATIO = 2.5
"""Distance, in half-diagonals of a cell, beyond which a star is far."""
BLOCK = 8
"""Orders are multiples of this, for the kernels' inner loops."""

# A cell with no more near stars than this is a leaf; one this deep is a leaf whatever it holds.
_MOST_NEAR = 6
_DEPTH = 120
_CORNER_SIZE = 1e-9
# Powers of the inverse size of a cell must stay numbers: smaller cells would have no series.
_LARGEST_POWER = 1e280


def order_for(accuracy: float) -> int:
    """Number of terms whose truncation leaves second derivatives with the relative error `accuracy`.

    Notes
    -----
    A star at the distance d of a cell with half-diagonal R adds the error ``(m/d^3) p (p-1)/2 (R/d)^(p-2)`` to the
    second derivative ``2 m/d^3``, and less to the deflection and its first derivative; d/R is at least `RATIO`.
    """
    count = BLOCK
    while 0.5 * count * (count - 1) * RATIO ** -(count - 2) > accuracy and count < 64:
        count += BLOCK
    return count


@dataclass(frozen=True, slots=True, kw_only=True)
class Tree:
    """Leaves that fill a rectangle of the image plane, in Einstein radii of one solar mass."""

    centre: NDArray[np.float64]
    """(n, 2) centres."""
    half: NDArray[np.float64]
    """(n, 2) half sizes."""
    real: NDArray[np.float64]
    """(n, order) real parts of the series of the far stars and the sheet, about the centre."""
    imag: NDArray[np.float64]
    """(n, order) imaginary parts."""
    inside: NDArray[np.bool_]
    """(n,) whether the leaf lies in the star rectangle."""
    near_start: NDArray[np.int64]
    """(n + 1,) where the leaf's near stars begin in `near`."""
    near: NDArray[np.int64]
    """Indices of near stars."""
    roots: NDArray[np.float64]
    """(r, 4) boxes x_low, x_high, y_low, y_high from which the leaves were cut."""
    root_node: NDArray[np.int64]
    """(r,) their nodes."""
    children: NDArray[np.int64]
    """(n_nodes, 2) nodes of the lower and the upper half across the longer side; a leaf has -1 - its index twice."""

    def __len__(self) -> int:
        return len(self.centre)

    @property
    def arrays(self) -> tuple[NDArray[Any], ...]:
        """What the kernels take: centre, half, inside, real, imag, near_start, near."""
        return (self.centre, self.half, self.inside, self.real, self.imag, self.near_start, self.near)

    @property
    def nbytes(self) -> int:
        """Memory of all arrays."""
        return sum(array.nbytes for array in (*self.arrays, self.children))


def build_tree(
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    mass: NDArray[np.float64],
    sheet: tuple[float, float, float] | None,
    region: tuple[float, float, float, float],
    order: int,
) -> Tree:
    """Make the leaves of a region.

    Parameters
    ----------
    x, y, mass : (n,) ndarray
        Stars.
    sheet : (half_width, half_height, kappa) or None
        Rectangle whose mean sheet is taken out, with the convergence of the stars.
    region : (x_low, x_high, y_low, y_high)
        Part of the image plane to fill; it is cut at the edges of the rectangle.
    order : int
        Terms of the series, a multiple of `BLOCK`.
    """
    parts = [_build_part(x, y, mass, sheet, part, order) for part in _cut(region, sheet)]
    if len(parts) == 1:
        return parts[0]
    starts, nodes, roots = [np.zeros(1, dtype=np.int64)], [], []
    offset = leaf_offset = node_offset = 0
    for part in parts:
        starts.append(part.near_start[1:] + offset)
        nodes.append(np.where(part.children >= 0, part.children + node_offset, part.children - leaf_offset))
        roots.append(node_offset)
        offset += int(part.near_start[-1])
        leaf_offset += len(part)
        node_offset += len(part.children)
    return Tree(
        centre=np.concatenate([part.centre for part in parts]),
        half=np.concatenate([part.half for part in parts]),
        real=np.concatenate([part.real for part in parts]),
        imag=np.concatenate([part.imag for part in parts]),
        inside=np.concatenate([part.inside for part in parts]),
        near_start=np.concatenate(starts),
        near=np.concatenate([part.near for part in parts]),
        roots=np.concatenate([part.roots for part in parts]),
        root_node=np.array(roots, dtype=np.int64),
        children=np.concatenate(nodes),
    )


def _cut(
    region: tuple[float, float, float, float], sheet: tuple[float, float, float] | None
) -> list[tuple[float, float, float, float, bool]]:
    """Parts of the region that lie wholly inside or outside the star rectangle."""
    if sheet is None:
        return [(*region, False)]
    x_cuts = _between(region[0], region[1], sheet[0])
    y_cuts = _between(region[2], region[3], sheet[1])
    parts = []
    for x0, x1 in itertools.pairwise(x_cuts):
        for y0, y1 in itertools.pairwise(y_cuts):
            inside = abs(0.5 * (x0 + x1)) < sheet[0] and abs(0.5 * (y0 + y1)) < sheet[1]
            parts.append((x0, x1, y0, y1, inside))
    return parts


def _between(low: float, high: float, edge: float) -> list[float]:
    return [low, *(cut for cut in (-edge, edge) if low < cut < high), high]


def _build_part(
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    mass: NDArray[np.float64],
    sheet: tuple[float, float, float] | None,
    part: tuple[float, float, float, float, bool],
    order: int,
) -> Tree:
    x0, x1, y0, y1, inside = part
    a, b, kappa = (1.0, 1.0, 0.0) if sheet is None else sheet
    level: _Level = (
        np.array([[0.5 * (x0 + x1), 0.5 * (y0 + y1)]]),
        np.array([[0.5 * (x1 - x0), 0.5 * (y1 - y0)]]),
        np.zeros((1, order)),
        np.zeros((1, order)),
        np.array([0, len(x)], dtype=np.int64),
        np.arange(len(x), dtype=np.int64),
    )
    level = _settle(x, y, mass, *level)
    leaves, nodes, leaf_count, node_count = [], [], 0, 1
    for depth in range(_DEPTH + 1):
        split = _to_split(level, a, b, kappa > 0.0) if depth < _DEPTH else np.zeros(len(level[0]), np.bool_)
        leaves.append(_select(level, ~split))
        children = np.empty((len(split), 2), dtype=np.int64)
        children[~split] = -1 - (leaf_count + np.arange((~split).sum()))[:, None]
        children[split] = node_count + np.arange(2 * split.sum()).reshape(-1, 2)
        nodes.append(children)
        leaf_count, node_count = leaf_count + int((~split).sum()), node_count + 2 * int(split.sum())
        if not split.any():
            break
        level = _halve(x, y, mass, *_select(level, split))
    joined = _join(leaves)
    if kappa > 0.0:
        _add_sheet(joined[0], a, b, kappa, inside, joined[2], joined[3])
    return Tree(
        centre=joined[0],
        half=joined[1],
        real=joined[2],
        imag=joined[3],
        inside=np.full(len(joined[0]), inside and kappa > 0.0),
        near_start=joined[4],
        near=joined[5],
        roots=np.array([part[:4]]),
        root_node=np.zeros(1, dtype=np.int64),
        children=np.concatenate(nodes),
    )


_Level = tuple[
    NDArray[np.float64],
    NDArray[np.float64],
    NDArray[np.float64],
    NDArray[np.float64],
    NDArray[np.int64],
    NDArray[np.int64],
]
"""Cells of one generation: centre, half, real, imag, near_start, near."""


def _join(leaves: list[_Level]) -> _Level:
    counts = np.concatenate([np.diff(level[4]) for level in leaves])
    start = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    return (
        np.concatenate([level[0] for level in leaves]),
        np.concatenate([level[1] for level in leaves]),
        np.concatenate([level[2] for level in leaves]),
        np.concatenate([level[3] for level in leaves]),
        start,
        np.concatenate([level[5] for level in leaves]),
    )


def _select(level: _Level, mask: NDArray[np.bool_]) -> _Level:
    centre, half, real, imag, start, near = level
    counts = np.diff(start)
    keep = np.repeat(mask, counts)
    new_start = np.concatenate([[0], np.cumsum(counts[mask])]).astype(np.int64)
    return centre[mask], half[mask], real[mask], imag[mask], new_start, near[keep]


def _to_split(level: _Level, a: float, b: float, has_sheet: bool) -> NDArray[np.bool_]:
    centre, half, start = level[0], level[1], level[4]
    radius = np.hypot(half[:, 0], half[:, 1])
    split: NDArray[np.bool_] = np.diff(start) > _MOST_NEAR
    order = level[2].shape[1]
    if has_sheet:
        # The sheet's series converges up to the nearest corner: cells shrink towards it.
        corner = np.hypot(np.abs(centre[:, 0]) - a, np.abs(centre[:, 1]) - b)
        split |= (corner < RATIO * radius) & (radius > _CORNER_SIZE * np.hypot(a, b))
    return split & (radius > _LARGEST_POWER ** (-1.0 / order))


@kernel
def _settle(x, y, mass, centre, half, real, imag, start, near):
    """Move stars of the near lists that are far into the series."""
    n, order = real.shape
    kept = np.empty_like(near)
    new_start = np.zeros(n + 1, dtype=np.int64)
    total = 0
    for cell in range(n):
        cx, cy = centre[cell, 0], centre[cell, 1]
        far2 = RATIO * RATIO * (half[cell, 0] ** 2 + half[cell, 1] ** 2)
        for slot in range(start[cell], start[cell + 1]):
            star = near[slot]
            dx, dy = x[star] - cx, y[star] - cy
            square = dx * dx + dy * dy
            if square < far2:
                kept[total] = star
                total += 1
                continue
            # m / (z - z_i) = -m sum_k (z - c)^k / (z_i - c)^(k+1)
            ir, ii = dx / square, -dy / square
            tr, ti = -mass[star] * ir, -mass[star] * ii
            for k in range(order):
                real[cell, k] += tr
                imag[cell, k] += ti
                tr, ti = tr * ir - ti * ii, tr * ii + ti * ir
        new_start[cell + 1] = total
    return centre, half, real, imag, new_start, kept[:total].copy()


@kernel
def _halve(x, y, mass, centre, half, real, imag, start, near):
    """Cut cells across their longer side: both halves get the shifted series and the near stars, then settle."""
    n, order = real.shape
    child_centre, child_half = np.empty((2 * n, 2)), np.empty((2 * n, 2))
    child_real, child_imag = np.empty((2 * n, order)), np.empty((2 * n, order))
    child_start = np.zeros(2 * n + 1, dtype=np.int64)
    child_near = np.empty(2 * len(near), dtype=np.int64)
    total = 0
    for cell in range(n):
        along_x = half[cell, 0] >= half[cell, 1]
        for side in range(2):
            child = 2 * cell + side
            sign = 2.0 * side - 1.0
            for axis in range(2):
                child_half[child, axis] = half[cell, axis]
                child_centre[child, axis] = centre[cell, axis]
            axis = 0 if along_x else 1
            child_half[child, axis] *= 0.5
            shift = sign * child_half[child, axis]
            child_centre[child, axis] += shift
            for k in range(order):
                child_real[child, k] = real[cell, k]
                child_imag[child, k] = imag[cell, k]
            for i in range(order - 1):
                for k in range(order - 2, i - 1, -1):
                    if along_x:
                        child_real[child, k] += shift * child_real[child, k + 1]
                        child_imag[child, k] += shift * child_imag[child, k + 1]
                    else:
                        child_real[child, k] -= shift * child_imag[child, k + 1]
                        child_imag[child, k] += shift * child_real[child, k + 1]
            for slot in range(start[cell], start[cell + 1]):
                child_near[total] = near[slot]
                total += 1
            child_start[child + 1] = total
    return _settle(x, y, mass, child_centre, child_half, child_real, child_imag, child_start, child_near)


@kernel
def _add_sheet(centre, a, b, kappa, inside, real, imag):
    for cell in range(len(centre)):
        sheet_series(centre[cell, 0], centre[cell, 1], a, b, kappa, inside, real.shape[1], real[cell], imag[cell])


@kernel
def evaluate(x, y, tree, roots, root_node, children, stars, out):
    """Series at points: conjugate deflection of stars less sheet, its first two derivatives, and the leaf, in `out`.

    Parameters
    ----------
    x, y : (m,) ndarray
        Points.
    tree : tuple of ndarray
        See `Tree.arrays`.
    roots, root_node, children : ndarray
        See `Tree`.
    stars : (x, y, mass)
        Arrays of shape (n,).
    out : (m, 7) ndarray
        Real and imaginary parts of the value, first and second derivative; index of the leaf, -1 outside.
    """
    centre, _, _, real, imag, near_start, near = tree
    star_x, star_y, star_mass = stars
    for i in range(len(x)):
        leaf = _find(x[i], y[i], roots, root_node, children)
        out[i, 6] = leaf
        if leaf < 0:
            continue
        z = complex(x[i] - centre[leaf, 0], y[i] - centre[leaf, 1])
        value, first, second = 0j, 0j, 0j
        for k in range(real.shape[1] - 1, -1, -1):
            second = second * z + 2.0 * first
            first = first * z + value
            value = value * z + complex(real[leaf, k], imag[leaf, k])
        for slot in range(near_start[leaf], near_start[leaf + 1]):
            star = near[slot]
            dx, dy = x[i] - star_x[star], y[i] - star_y[star]
            square = dx * dx + dy * dy
            # Real quotients are not a number on a star; a complex one would be an error.
            inverse = complex(dx / square, -dy / square)
            part = star_mass[star] * inverse
            value += part
            first -= part * inverse
            second += 2.0 * part * inverse * inverse
        out[i, 0], out[i, 1] = value.real, value.imag
        out[i, 2], out[i, 3] = first.real, first.imag
        out[i, 4], out[i, 5] = second.real, second.imag


@kernel
def _find(x, y, roots, root_node, children):
    """Leaf that holds a point, by halving the root as the tree was made; -1 outside."""
    for root in range(len(roots)):
        x0, x1, y0, y1 = roots[root, 0], roots[root, 1], roots[root, 2], roots[root, 3]
        if x < x0 or x > x1 or y < y0 or y > y1:
            continue
        node = root_node[root]
        cx, cy, hx, hy = 0.5 * (x0 + x1), 0.5 * (y0 + y1), 0.5 * (x1 - x0), 0.5 * (y1 - y0)
        while children[node, 0] >= 0:
            if hx >= hy:
                side = 1 if x > cx else 0
                hx *= 0.5
                cx += hx if side else -hx
            else:
                side = 1 if y > cy else 0
                hy *= 0.5
                cy += hy if side else -hy
            node = children[node, side]
        return -1 - children[node, 0]
    return -1
