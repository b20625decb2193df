"""Where rays land: the lens map on small grids of the image plane, row by row.

Along a row the series of far stars is a polynomial with real argument, so that a ray costs two real Horner chains and a
few near stars. Rows are evaluated together and the loops run over rays: compilers turn both into vector code.
"""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel

__all__ = ["map_grid"]


@kernel
def _shift_rows(real, imag, offset, rows, u, v):
    """Series about a centre, moved by i * offset: u = -Re and v = Im as polynomials of the distance along the row."""
    order = len(real)
    for k in range(order):
        for r in range(rows):
            u[k, r] = -real[k]
            v[k, r] = imag[k]
    for i in range(order - 1):
        for k in range(order - 2, i - 1, -1):
            for r in range(rows):
                a, b = u[k + 1, r], v[k + 1, r]
                u[k, r] += offset[r] * b
                v[k, r] -= offset[r] * a


@kernel
def _row(distance, count, a, b, order, near_x, near_y, near_mass, near_count, u, v):
    """Polynomials a, b plus near stars at `count` distances along one row."""
    k = order - 8
    a0, a1, a2, a3, a4, a5, a6, a7 = a[k], a[k + 1], a[k + 2], a[k + 3], a[k + 4], a[k + 5], a[k + 6], a[k + 7]
    b0, b1, b2, b3, b4, b5, b6, b7 = b[k], b[k + 1], b[k + 2], b[k + 3], b[k + 4], b[k + 5], b[k + 6], b[k + 7]
    for j in range(count):
        x = distance[j]
        u[j] = ((((((a7 * x + a6) * x + a5) * x + a4) * x + a3) * x + a2) * x + a1) * x + a0
        v[j] = ((((((b7 * x + b6) * x + b5) * x + b4) * x + b3) * x + b2) * x + b1) * x + b0
    for k in range(order - 16, -1, -8):
        a0, a1, a2, a3, a4, a5, a6, a7 = a[k], a[k + 1], a[k + 2], a[k + 3], a[k + 4], a[k + 5], a[k + 6], a[k + 7]
        b0, b1, b2, b3, b4, b5, b6, b7 = b[k], b[k + 1], b[k + 2], b[k + 3], b[k + 4], b[k + 5], b[k + 6], b[k + 7]
        for j in range(count):
            x, s, t = distance[j], u[j], v[j]
            u[j] = (((((((s * x + a7) * x + a6) * x + a5) * x + a4) * x + a3) * x + a2) * x + a1) * x + a0
            v[j] = (((((((t * x + b7) * x + b6) * x + b5) * x + b4) * x + b3) * x + b2) * x + b1) * x + b0
    i = 0
    while i + 1 < near_count:
        # Two stars share one division.
        xa, ya, ma = near_x[i], near_y[i], near_mass[i]
        xb, yb, mb = near_x[i + 1], near_y[i + 1], near_mass[i + 1]
        for j in range(count):
            da, db = distance[j] - xa, distance[j] - xb
            sa, sb = da * da + ya * ya, db * db + yb * yb
            both = 1.0 / (sa * sb)
            qa, qb = ma * sb * both, mb * sa * both
            u[j] = u[j] - da * qa - db * qb
            v[j] = v[j] + ya * qa + yb * qb
        i += 2
    if i < near_count:
        xa, ya, ma = near_x[i], near_y[i], near_mass[i]
        for j in range(count):
            da = distance[j] - xa
            qa = ma / (da * da + ya * ya)
            u[j] = u[j] - da * qa
            v[j] = v[j] + ya * qa


@kernel
def map_grid(lens, tree, leaf, stars, x0, y0, dx, dy, nx, ny, scale, work, u, v):
    """Source positions of a grid of rays in one leaf.

    Parameters
    ----------
    lens : (5,) ndarray
        lam_t, lam_r, gradient along x and y, convergence of the stars' sheet.
    tree : tuple of ndarray
        See `Tree.arrays`.
    leaf : int
        The leaf whose series serves the grid.
    stars : (x, y, mass)
        All stars, arrays of shape (n,).
    x0, y0, dx, dy, nx, ny
        First ray, spacings and numbers of rays.
    scale : (3,) ndarray
        Positions are returned as (u - scale[0]) * scale[2], (v - scale[1]) * scale[2].
    work : (2 * order, >= ny) ndarray
        Scratch space.
    u, v : (>= ny, >= nx) ndarray
        Results.
    """
    centre, _, inside, real, imag, near_start, near = tree
    star_x, star_y, star_mass = stars
    order = real.shape[1]
    cx, cy = centre[leaf, 0], centre[leaf, 1]
    a, b = work[:order], work[order : 2 * order]
    distance, offset = np.empty(nx), np.empty(ny)
    row_a, row_b = np.empty(order), np.empty(order)
    start, count = near_start[leaf], near_start[leaf + 1] - near_start[leaf]
    near_x, near_y, near_mass, below = np.empty(count), np.empty(count), np.empty(count), np.empty(count)
    for i in range(count):
        star = near[start + i]
        near_x[i] = star_x[star] - cx
        near_y[i] = star_y[star]
        near_mass[i] = star_mass[star] * scale[2]
    for j in range(nx):
        distance[j] = x0 + j * dx - cx
    for r in range(ny):
        offset[r] = y0 + r * dy - cy
    _shift_rows(real[leaf], imag[leaf], offset, ny, a, b)
    sheet = lens[4] if inside[leaf] else 0.0
    lam_t, lam_r, gx, gy = lens[0] + sheet, lens[1] + sheet, lens[2], lens[3]
    for r in range(ny):
        y = cy + offset[r]
        for k in range(order):
            row_a[k], row_b[k] = a[k, r], b[k, r]
        row_a[0] += lam_t * cx + 0.5 * gx * cx * cx + gy * cx * y - scale[0]
        row_a[1] += lam_t + gx * cx + gy * y
        row_a[2] += 0.5 * gx
        row_b[0] += lam_r * y + 0.5 * gy * cx * cx - scale[1]
        row_b[1] += gy * cx
        row_b[2] += 0.5 * gy
        for k in range(order):
            row_a[k] *= scale[2]
            row_b[k] *= scale[2]
        for i in range(count):
            below[i] = near_y[i] - y
        _row(distance, nx, row_a, row_b, order, near_x, below, near_mass, count, u[r], v[r])
