"""Counting rays: the classical map, kept as the independent check of area mapping."""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel
from crossing.shooting.rays import map_grid, scratch

__all__ = ["count_leaves"]

_TILE = 128


@kernel
def count_leaves(leaves, lens, tree, stars, scale, step_x, step_y, out, tally):
    """Add one to the pixel in which each ray of a common lattice lands.

    Parameters
    ----------
    leaves : (m,) ndarray
        Indices of the leaves whose rays are shot.
    lens, tree, stars, scale
        See `map_grid`.
    step_x, step_y : float
        Spacings of the lattice, whose rays sit at half-integer multiples of them.
    out : (rows, columns) ndarray
        Added to.
    tally : (3,) ndarray
        The first entry is raised by the number of rays.
    """
    centre, half, real = tree[0], tree[1], tree[3]
    work = scratch(real.shape[1], _TILE)
    u, v = np.empty((_TILE, _TILE)), np.empty((_TILE, _TILE))
    rows, columns = out.shape
    for leaf in leaves:
        first_x = np.ceil((centre[leaf, 0] - half[leaf, 0]) / step_x - 0.5)
        first_y = np.ceil((centre[leaf, 1] - half[leaf, 1]) / step_y - 0.5)
        count_x = int(np.ceil((centre[leaf, 0] + half[leaf, 0]) / step_x - 0.5) - first_x)
        count_y = int(np.ceil((centre[leaf, 1] + half[leaf, 1]) / step_y - 0.5) - first_y)
        for row in range(0, count_y, _TILE):
            for column in range(0, count_x, _TILE):
                nx, ny = min(_TILE, count_x - column), min(_TILE, count_y - row)
                x0, y0 = (first_x + column + 0.5) * step_x, (first_y + row + 0.5) * step_y
                map_grid(lens, tree, leaf, stars, x0, y0, step_x, step_y, nx, ny, scale, work, u, v)
                tally[0] += nx * ny
                for i in range(ny):
                    for j in range(nx):
                        a, b = u[i, j], v[i, j]
                        if a >= 0.0 and b >= 0.0 and a < columns and b < rows:
                            out[int(b), int(a)] += 1.0
