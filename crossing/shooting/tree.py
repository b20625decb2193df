"""Cells of the image plane in which the deflection of all far stars is one Taylor series.

The conjugate deflection of a point mass, m / (z - z_i), is analytic away from it. A cell keeps the summed series of all
stars that are at least `RATIO` of its half-diagonals away, and lists the nearer ones. Cells are made from the root
downward: a child shifts its parent's series and adds the stars that have just become far, N log N in all. They are
walked through twice, first for their shape alone, so that the second walk writes the leaves where they stay.
"""

from __future__ import annotations

import itertools
import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from crossing.shooting.compiled import strict_kernel
from crossing.shooting.sheet import sheet_series

__all__ = ["BLOCK", "RATIO", "Tree", "build_tree", "evaluate", "order_for"]

RATIO = 2.5
"""Distance, in half-diagonals of a cell, beyond which a star is far."""
BLOCK = 8
"""Orders are multiples of this, for the kernels' inner loops."""

# A cell with no more near stars than this is a leaf; one this deep is a leaf whatever it holds.
_MOST_NEAR = 10
_DEPTH = 120
# Regions are cut into more parts while there are more stars than this to each, for threads.
_SINGLE_PART = 10_000
_MOST_PARTS = 16
_CURVE = 1024
# Stars whose powers are added side by side.
_LANES = 16
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
    rank = _along_curve(x, y)
    stars = (x[rank], y[rank], mass[rank])
    parts = _cut(region, sheet)
    while len(parts) < _MOST_PARTS and len(x) > _SINGLE_PART * len(parts):
        parts = [half for part in parts for half in _halves(part)]
    a, b, kappa = (1.0, 1.0, 0.0) if sheet is None else sheet
    smallest = np.array([_LARGEST_POWER ** (-1.0 / order), _CORNER_SIZE * np.hypot(a, b)])
    roots = np.array([part[:4] for part in parts])
    boxes = [
        np.array([0.5 * (r[0] + r[1]), 0.5 * (r[2] + r[3]), 0.5 * (r[1] - r[0]), 0.5 * (r[3] - r[2])]) for r in roots
    ]
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        shapes = list(pool.map(lambda box: _shape(stars[0], stars[1], box, (a, b, kappa > 0.0), smallest), boxes))
        nodes = np.concatenate([[0], np.cumsum([len(shape[0]) for shape in shapes])]).astype(np.int64)
        leaves = np.concatenate([[0], np.cumsum([len(shape[1]) for shape in shapes])]).astype(np.int64)
        start = np.concatenate([[0], np.cumsum(np.concatenate([shape[1] for shape in shapes]))]).astype(np.int64)
        n = int(leaves[-1])
        tree = Tree(
            centre=np.empty((n, 2)),
            half=np.empty((n, 2)),
            real=np.empty((n, order)),
            imag=np.empty((n, order)),
            inside=np.repeat([part[4] and kappa > 0.0 for part in parts], np.diff(leaves)),
            near_start=start,
            near=np.empty(start[-1], dtype=np.int64),
            roots=roots,
            root_node=nodes[:-1].copy(),
            children=np.concatenate(
                [
                    np.where(shape[0] >= 0, shape[0] + node, shape[0] - leaf)
                    for shape, node, leaf in zip(shapes, nodes[:-1], leaves[:-1], strict=True)
                ]
            ),
        )
        binomials = _binomials(order)

        def fill(number: int) -> None:
            own = slice(leaves[number], leaves[number + 1])
            arrays = (tree.centre[own], tree.half[own], tree.real[own], tree.imag[own])
            near = (start[leaves[number] : leaves[number + 1] + 1], tree.near)
            _fill(*stars, boxes[number], shapes[number][0], binomials, rank, *arrays, *near)
            if kappa > 0.0:
                _add_sheet(tree.centre[own], a, b, kappa, parts[number][4], tree.real[own], tree.imag[own])

        list(pool.map(fill, range(len(parts))))
    return tree


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


_Part = tuple[float, float, float, float, bool]


def _halves(part: _Part) -> tuple[_Part, _Part]:
    """A part cut across its longer side, as boxes are."""
    x0, x1, y0, y1, inside = part
    if x1 - x0 >= y1 - y0:
        return (x0, 0.5 * (x0 + x1), y0, y1, inside), (0.5 * (x0 + x1), x1, y0, y1, inside)
    return (x0, x1, y0, 0.5 * (y0 + y1), inside), (x0, x1, 0.5 * (y0 + y1), y1, inside)


def _along_curve(x: NDArray[np.float64], y: NDArray[np.float64]) -> NDArray[np.int64]:
    """Indices that sort stars along a curve that keeps neighbours together: memory is then read in order."""
    key = np.zeros(len(x), dtype=np.int64)
    for shift, values in enumerate((x, y)):
        width = np.ptp(values) if len(x) else 0.0
        cell = ((values - values.min()) * (_CURVE - 1) / width).astype(np.int64) if width > 0.0 else key * 0
        for bit in range(10):
            key |= ((cell >> bit) & 1) << (2 * bit + shift)
    return np.argsort(key, kind="stable")


def _binomials(order: int) -> NDArray[np.float64]:
    """Binomial coefficients n over k, [n, k]."""
    table = np.zeros((order, order))
    table[:, 0] = 1.0
    for n in range(1, order):
        table[n, 1:] = table[n - 1, 1:] + table[n - 1, :-1]
    return table


@strict_kernel
def _enlarged(array, size):
    larger = np.empty((size, *array.shape[1:]), dtype=array.dtype)
    larger[: len(array)] = array
    return larger


@strict_kernel
def _keep_near(x, y, box, lists, first, last):
    """Append to `lists` from `last` on those of its stars first:last that are near a box; return the new end."""
    cx, cy = box[0], box[1]
    far2 = RATIO * RATIO * (box[2] ** 2 + box[3] ** 2)
    end = last
    for slot in range(first, last):
        star = lists[slot]
        dx, dy = x[star] - cx, y[star] - cy
        lists[end] = star
        end += dx * dx + dy * dy < far2
    return end


@strict_kernel
def _child_box(box, side, out):
    """The lower or the upper half of a box, across its longer side; returns the axis."""
    out[:] = box
    axis = 0 if box[2] >= box[3] else 1
    out[2 + axis] *= 0.5
    out[axis] += (2.0 * side - 1.0) * out[2 + axis]
    return axis


@strict_kernel
def _shape(x, y, root, corner, smallest):
    """Cut a box until no leaf has many near stars: `children` (see `Tree`) and the numbers of near stars."""
    a, b, has_sheet = corner
    boxes, node = np.empty((_DEPTH + 2, 4)), np.zeros(_DEPTH + 2, dtype=np.int64)
    begin, side = np.zeros(_DEPTH + 3, dtype=np.int64), np.zeros(_DEPTH + 2, dtype=np.int64)
    lists = np.empty(4 * len(x) + 64, dtype=np.int64)
    children, counts = np.empty((1024, 2), dtype=np.int64), np.empty(1024, dtype=np.int64)
    for star in range(len(x)):
        lists[star] = star
    boxes[0] = root
    begin[1] = len(x)
    begin[2] = _keep_near(x, y, root, lists, 0, len(x))
    leaves, nodes, depth = 0, 1, 0
    entering = True
    while depth >= 0:
        # The near stars of the box at `depth` are lists[begin[depth + 1] : begin[depth + 2]].
        if entering:
            hx, hy = boxes[depth, 2], boxes[depth, 3]
            radius = np.hypot(hx, hy)
            count = begin[depth + 2] - begin[depth + 1]
            split = count > _MOST_NEAR
            if has_sheet:
                # The sheet's series converges up to the nearest corner: cells shrink towards it.
                away = np.hypot(abs(boxes[depth, 0]) - a, abs(boxes[depth, 1]) - b)
                split |= away < RATIO * radius and radius > smallest[1]
            if not split or radius <= smallest[0] or depth == _DEPTH:
                children[node[depth]] = -1 - leaves
                if leaves == len(counts):
                    counts = _enlarged(counts, 2 * leaves)
                counts[leaves] = count
                leaves += 1
                depth -= 1
                entering = False
                continue
            if nodes + 2 > len(children):
                children = _enlarged(children, 2 * len(children))
            children[node[depth], 0], children[node[depth], 1] = nodes, nodes + 1
            nodes += 2
            side[depth] = 0
        elif side[depth] == 2:
            depth -= 1
            continue
        _child_box(boxes[depth], side[depth], boxes[depth + 1])
        node[depth + 1] = children[node[depth], side[depth]]
        first, last = begin[depth + 1], begin[depth + 2]
        if 2 * last - first > len(lists):
            lists = _enlarged(lists, 2 * len(lists) + last)
        begin[depth + 3] = _keep_near(x, y, boxes[depth + 1], lists, first, last)
        side[depth] += 1
        depth += 1
        entering = True
    return children[:nodes].copy(), counts[:leaves].copy()


@strict_kernel
def _add_far(x, y, mass, box, lists, first, last, real, imag, lanes, sums):
    """Add those of the stars first:last that are far from a box to its series, and append the others; the new end."""
    cx, cy = box[0], box[1]
    far2 = RATIO * RATIO * (box[2] ** 2 + box[3] ** 2)
    end, held, groups = last, 0, 0
    for slot in range(first, last):
        star = lists[slot]
        dx, dy = x[star] - cx, y[star] - cy
        square = dx * dx + dy * dy
        if square < far2:
            lists[end] = star
            end += 1
            continue
        # m / (z - z_i) = -m sum_k (z - c)^k / (z_i - c)^(k+1)
        ir, ii = dx / square, -dy / square
        lanes[held], lanes[_LANES + held] = ir, ii
        lanes[2 * _LANES + held], lanes[3 * _LANES + held] = -mass[star] * ir, -mass[star] * ii
        held += 1
        if held == _LANES:
            if groups == 0:
                sums[:] = 0.0
            _add_powers(lanes, sums)
            held, groups = 0, groups + 1
    for lane in range(held):
        ir, ii = lanes[lane], lanes[_LANES + lane]
        tr, ti = lanes[2 * _LANES + lane], lanes[3 * _LANES + lane]
        for k in range(len(real)):
            real[k] += tr
            imag[k] += ti
            tr, ti = tr * ir - ti * ii, tr * ii + ti * ir
    if groups:
        for k in range(len(real)):
            for lane in range(_LANES):
                real[k] += sums[k, lane]
                imag[k] += sums[k, _LANES + lane]
    return end


@strict_kernel
def _add_powers(lanes, sums):
    """Add the terms of some stars side by side, as vectors."""
    for k in range(len(sums)):
        part = sums[k]
        for i in range(_LANES):
            a, b, c, d = lanes[i], lanes[_LANES + i], lanes[2 * _LANES + i], lanes[3 * _LANES + i]
            part[i] += c
            part[_LANES + i] += d
            lanes[2 * _LANES + i] = c * a - d * b
            lanes[3 * _LANES + i] = c * b + d * a


@strict_kernel
def _shift(real, imag, shift, axis, binomials, new_real, new_imag):
    """Series about a centre moved by `shift` along x (axis 0) or y."""
    order = len(real)
    new_real[:] = 0.0
    new_imag[:] = 0.0
    power, a, b = 1.0, 1.0, 0.0
    for n in range(order):
        # Coefficients in units of the shift, which is multiplied by i along y.
        p, q = power * (a * real[n] - b * imag[n]), power * (a * imag[n] + b * real[n])
        for k in range(order):
            new_real[k] += binomials[n, k] * p
            new_imag[k] += binomials[n, k] * q
        power *= shift
        if axis == 1:
            a, b = -b, a
    power, a, b = 1.0, 1.0, 0.0
    for k in range(order):
        p, q = new_real[k] * power, new_imag[k] * power
        new_real[k], new_imag[k] = a * p - b * q, a * q + b * p
        power /= shift
        if axis == 1:
            a, b = b, -a


@strict_kernel
def _fill(x, y, mass, root, children, binomials, rank, centre, half, leaf_real, leaf_imag, near_start, near):
    """Walk through the boxes as `_shape` cut them, with their series, and write the leaves."""
    order = len(binomials)
    boxes, node = np.empty((_DEPTH + 2, 4)), np.zeros(_DEPTH + 2, dtype=np.int64)
    begin, side = np.zeros(_DEPTH + 3, dtype=np.int64), np.zeros(_DEPTH + 2, dtype=np.int64)
    real, imag = np.zeros((_DEPTH + 2, order)), np.zeros((_DEPTH + 2, order))
    lanes, sums = np.empty(4 * _LANES), np.empty((order, 2 * _LANES))
    lists = np.empty(4 * len(x) + 64, dtype=np.int64)
    for star in range(len(x)):
        lists[star] = star
    boxes[0] = root
    begin[1] = len(x)
    begin[2] = _add_far(x, y, mass, root, lists, 0, len(x), real[0], imag[0], lanes, sums)
    depth = 0
    while depth >= 0:
        here = children[node[depth]]
        if here[0] < 0:
            leaf = -1 - here[0]
            centre[leaf], half[leaf] = boxes[depth, :2], boxes[depth, 2:]
            leaf_real[leaf], leaf_imag[leaf] = real[depth], imag[depth]
            for slot in range(begin[depth + 2] - begin[depth + 1]):
                near[near_start[leaf] + slot] = rank[lists[begin[depth + 1] + slot]]
        if here[0] < 0 or side[depth] == 2:
            side[depth] = 0
            depth -= 1
            continue
        axis = _child_box(boxes[depth], side[depth], boxes[depth + 1])
        node[depth + 1] = here[side[depth]]
        moved = boxes[depth + 1, axis] - boxes[depth, axis]
        _shift(real[depth], imag[depth], moved, axis, binomials, real[depth + 1], imag[depth + 1])
        first, last = begin[depth + 1], begin[depth + 2]
        if 2 * last - first > len(lists):
            lists = _enlarged(lists, 2 * len(lists) + last)
        begin[depth + 3] = _add_far(
            x, y, mass, boxes[depth + 1], lists, first, last, real[depth + 1], imag[depth + 1], lanes, sums
        )  # fmt: skip
        side[depth] += 1
        depth += 1


@strict_kernel
def _add_sheet(centre, a, b, kappa, inside, real, imag):
    for cell in range(len(centre)):
        sheet_series(centre[cell, 0], centre[cell, 1], a, b, kappa, inside, real.shape[1], real[cell], imag[cell])


@strict_kernel
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


@strict_kernel
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
