"""Where rays land: the lens map on small grids of the image plane.

Along a row the series of far stars is a polynomial with real argument, so that a ray costs two real Horner chains and a
few near stars. A grid much smaller than its leaf has a short series of its own, which most near stars join, too. Loops
run over rays, in whole vectors: compilers turn them into vector code.
"""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel
from crossing.shooting.tree import RATIO

__all__ = ["VECTOR", "map_grid", "scratch"]

VECTOR = 8
"""Rays of a row come in multiples of this; arrays of results must have room for them."""
# Terms of the series of a small grid, and its rays that are evaluated together.
_FEW = 8
_CHUNK = 128


@kernel
def scratch(order, side):
    """Work space of `map_grid` for series of `order` terms and grids of up to `side` rays a side.

    Two series of `order` rows, four rows for points, and binom(k + m, m) in row k and column m of the rest.
    """
    work = np.empty((3 * order + 4, max(_CHUNK, side + VECTOR, order + 4)))
    binomial = work[2 * order + 4 :]
    for k in range(order):
        for m in range(order + 4):
            binomial[k, m] = binomial[k, m - 1] + binomial[k - 1, m] if k > 0 and m > 0 else 1.0
    return work


@kernel
def _rows(real, imag, scale, offset, rows, work):
    """Series about a centre, times scale, on rows at i * offset: -Re and Im as polynomials of the distance along a row.

    Term k of a row is a polynomial of its offset, with the coefficients binom(k + m, m) c_(k + m) i^m.
    """
    order = len(real)
    a, b, binomial = work[:order], work[order : 2 * order], work[2 * order + 4 :]
    re, im = np.zeros(order + 4), np.zeros(order + 4)
    for n in range(order):
        re[n], im[n] = scale * real[n], scale * imag[n]
    for k in range(order):
        for r in range(rows):
            a[k, r] = 0.0
            b[k, r] = 0.0
        for m in range((order - k - 1) // 4 * 4, -1, -4):
            n = k + m
            f0, f1, f2, f3 = binomial[k, m], binomial[k, m + 1], binomial[k, m + 2], binomial[k, m + 3]
            a0, a1, a2, a3 = -f0 * re[n], f1 * im[n + 1], f2 * re[n + 2], -f3 * im[n + 3]
            b0, b1, b2, b3 = f0 * im[n], f1 * re[n + 1], -f2 * im[n + 2], -f3 * re[n + 3]
            for r in range(rows):
                y, s, t = offset[r], a[k, r], b[k, r]
                a[k, r] = (((s * y + a3) * y + a2) * y + a1) * y + a0
                b[k, r] = (((t * y + b3) * y + b2) * y + b1) * y + b0


@kernel
def _row(distance, count, a, b, order, r, u, v):
    """Polynomials of row r at `count` distances along it."""
    k = order - 8
    a0, a1, a2, a3, a4, a5, a6, a7 = _eight(a, k, r)
    b0, b1, b2, b3, b4, b5, b6, b7 = _eight(b, k, r)
    for j in range(count):
        x = distance[j]
        u[r, j] = ((((((a7 * x + a6) * x + a5) * x + a4) * x + a3) * x + a2) * x + a1) * x + a0
        v[r, j] = ((((((b7 * x + b6) * x + b5) * x + b4) * x + b3) * x + b2) * x + b1) * x + b0
    for k in range(order - 16, -1, -8):
        a0, a1, a2, a3, a4, a5, a6, a7 = _eight(a, k, r)
        b0, b1, b2, b3, b4, b5, b6, b7 = _eight(b, k, r)
        for j in range(count):
            x, s, t = distance[j], u[r, j], v[r, j]
            u[r, j] = (((((((s * x + a7) * x + a6) * x + a5) * x + a4) * x + a3) * x + a2) * x + a1) * x + a0
            v[r, j] = (((((((t * x + b7) * x + b6) * x + b5) * x + b4) * x + b3) * x + b2) * x + b1) * x + b0


@kernel
def _eight(a, k, r):
    return a[k, r], a[k + 1, r], a[k + 2, r], a[k + 3, r], a[k + 4, r], a[k + 5, r], a[k + 6, r], a[k + 7, r]


@kernel
def _add_near_row(distance, count, near, near_count, y, r, u, v):
    """Subtract the deflection by stars (x, y, mass) from row r, which is at the height y."""
    i = 0
    while i + 3 < near_count:
        # Four stars share one division.
        xa, ya, ma = near[0, i], near[1, i] - y, near[2, i]
        xb, yb, mb = near[0, i + 1], near[1, i + 1] - y, near[2, i + 1]
        xc, yc, mc = near[0, i + 2], near[1, i + 2] - y, near[2, i + 2]
        xd, yd, md = near[0, i + 3], near[1, i + 3] - y, near[2, i + 3]
        for j in range(count):
            da, db, dc, dd = distance[j] - xa, distance[j] - xb, distance[j] - xc, distance[j] - xd
            sa, sb, sc, sd = da * da + ya * ya, db * db + yb * yb, dc * dc + yc * yc, dd * dd + yd * yd
            ab, cd = sa * sb, sc * sd
            each = 1.0 / (ab * cd)
            u[r, j] -= ((ma * da * sb + mb * db * sa) * cd + (mc * dc * sd + md * dd * sc) * ab) * each
            v[r, j] += ((ma * ya * sb + mb * yb * sa) * cd + (mc * yc * sd + md * yd * sc) * ab) * each
        i += 4
    while i < near_count:
        xa, ya, ma = near[0, i], near[1, i] - y, near[2, i]
        xb, yb, mb = (near[0, i + 1], near[1, i + 1] - y, near[2, i + 1]) if i + 1 < near_count else (0.0, 1.0, 0.0)
        for j in range(count):
            da, db = distance[j] - xa, distance[j] - xb
            sa, sb = da * da + ya * ya, db * db + yb * yb
            each = 1.0 / (sa * sb)
            u[r, j] -= (ma * da * sb + mb * db * sa) * each
            v[r, j] += (ma * ya * sb + mb * yb * sa) * each
        i += 2


@kernel
def _add_near(x, y, count, near_x, near_y, near_mass, near_count, u, v):
    """Subtract the deflection by near stars at `count` points."""
    i = 0
    while i + 1 < near_count:
        # Two stars share one division.
        xa, ya, ma = near_x[i], near_y[i], near_mass[i]
        xb, yb, mb = near_x[i + 1], near_y[i + 1], near_mass[i + 1]
        for j in range(count):
            da, db = x[j] - xa, x[j] - xb
            ea, eb = y[j] - ya, y[j] - yb
            sa, sb = da * da + ea * ea, db * db + eb * eb
            both = 1.0 / (sa * sb)
            qa, qb = ma * sb * both, mb * sa * both
            u[j] = u[j] - da * qa - db * qb
            v[j] = v[j] - ea * qa - eb * qb
        i += 2
    if i < near_count:
        xa, ya, ma = near_x[i], near_y[i], near_mass[i]
        for j in range(count):
            da, ea = x[j] - xa, y[j] - ya
            qa = ma / (da * da + ea * ea)
            u[j] = u[j] - da * qa
            v[j] = v[j] - ea * qa


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
    work : ndarray
        See `scratch`.
    u, v : (>= ny, >= nx) ndarray
        Results; rows have room for a multiple of `VECTOR`.
    """
    centre, half, inside, real, imag, near_start, near = tree
    order = real.shape[1]
    across, up = 0.5 * (nx - 1) * dx, 0.5 * (ny - 1) * dy
    x, y = x0 + across - centre[leaf, 0], y0 + up - centre[leaf, 1]
    # Distance of far stars, in sizes of the grid, beyond which few terms are as good as the leaf's many are for it.
    size = np.hypot(across, up)
    worst = 0.5 * order * (order - 1) * RATIO ** -(order - 2)
    reach = size * (0.5 * _FEW * (_FEW - 1) / worst) ** (1.0 / (_FEW - 2))
    sheet = lens[4] if inside[leaf] else 0.0
    own = near[near_start[leaf] : near_start[leaf + 1]]
    if order > _FEW and reach < RATIO * np.hypot(half[leaf, 0], half[leaf, 1]) - np.hypot(x, y):
        box = (centre[leaf, 0] + x, centre[leaf, 1] + y, x0, y0, dx, dy)
        _small(lens, sheet, real[leaf], imag[leaf], x, y, stars, own, reach, box, nx, ny, scale, work, u, v)
    else:
        _large(lens, sheet, real[leaf], imag[leaf], centre[leaf], stars, own, x0, y0, dx, dy, nx, ny, scale, work, u, v)


@kernel
def _large(lens, sheet, real, imag, centre, stars, own, x0, y0, dx, dy, nx, ny, scale, work, u, v):
    """A grid by the leaf's own series."""
    order, count = len(real), len(own)
    cx, cy = centre[0], centre[1]
    a, b, distance, offset = work[:order], work[order : 2 * order], work[2 * order], work[2 * order + 1]
    near = np.empty((3, count))
    for i in range(count):
        near[0, i] = stars[0][own[i]] - cx
        near[1, i] = stars[1][own[i]] - cy
        near[2, i] = stars[2][own[i]] * scale[2]
    whole, rows = (nx + VECTOR - 1) // VECTOR * VECTOR, (ny + VECTOR - 1) // VECTOR * VECTOR
    for j in range(whole):
        distance[j] = x0 + j * dx - cx
    for r in range(rows):
        offset[r] = y0 + r * dy - cy
    _rows(real, imag, scale[2], offset, rows, work)
    lam_t, lam_r, gx, gy = lens[0] + sheet, lens[1] + sheet, lens[2], lens[3]
    for r in range(ny):
        y = cy + offset[r]
        a[0, r] += scale[2] * (lam_t * cx + 0.5 * gx * cx * cx + gy * cx * y - scale[0])
        a[1, r] += scale[2] * (lam_t + gx * cx + gy * y)
        a[2, r] += scale[2] * 0.5 * gx
        b[0, r] += scale[2] * (lam_r * y + 0.5 * gy * cx * cx - scale[1])
        b[1, r] += scale[2] * gy * cx
        b[2, r] += scale[2] * 0.5 * gy
        _row(distance, whole, a, b, order, r, u, v)
        _add_near_row(distance, whole, near, count, offset[r], r, u, v)


@kernel
def _short_series(real, imag, x, y, a, b):
    """First terms of a series about a point at (x, y) from its centre."""
    a[:] = 0.0
    b[:] = 0.0
    for n in range(len(real) - 1, -1, -1):
        for k in range(len(a) - 1, 0, -1):
            a[k], b[k] = a[k] * x - b[k] * y + a[k - 1], a[k] * y + b[k] * x + b[k - 1]
        a[0], b[0] = a[0] * x - b[0] * y + real[n], a[0] * y + b[0] * x + imag[n]


@kernel
def _small(lens, sheet, real, imag, x, y, stars, own, reach, box, nx, ny, scale, work, u, v):
    """A grid much smaller than its leaf: a short series about its own centre, for all stars beyond `reach`, too."""
    cx, cy, x0, y0, dx, dy = box
    series, near = np.empty((2, _FEW)), np.empty((3, len(own)))
    a, b = series[0], series[1]
    _short_series(real, imag, x, y, a, b)
    count = 0
    for star in own:
        dist_x, dist_y = stars[0][star] - cx, stars[1][star] - cy
        square = dist_x * dist_x + dist_y * dist_y
        if square < reach * reach:
            near[0, count], near[1, count], near[2, count] = dist_x, dist_y, stars[2][star] * scale[2]
            count += 1
            continue
        ir, ii = dist_x / square, -dist_y / square
        tr, ti = -stars[2][star] * ir, -stars[2][star] * ii
        for k in range(_FEW):
            a[k] += tr
            b[k] += ti
            tr, ti = tr * ir - ti * ii, tr * ii + ti * ir
    lam_t, lam_r, gx, gy = lens[0] + sheet, lens[1] + sheet, lens[2], lens[3]
    # The smooth map about the centre, but for its second derivatives, is a0, ax x + ay y and b0, bx x + by y.
    smooth = (
        scale[2] * (lam_t * cx + 0.5 * gx * cx * cx + gy * cx * cy - scale[0]),
        scale[2] * (lam_t + gx * cx + gy * cy),
        scale[2] * gy * cx,
        scale[2] * (lam_r * cy + 0.5 * gy * cx * cx - scale[1]),
        scale[2] * lam_r,
        scale[2] * 0.5 * gx,
        scale[2] * gy,
    )
    for k in range(_FEW):
        a[k] *= -scale[2]
        b[k] *= scale[2]
    first = 2 * len(real)
    px, py, line_u, line_v = work[first], work[first + 1], work[first + 2], work[first + 3]
    held, row, column = 0, 0, 0
    for r in range(ny):
        for j in range(nx):
            px[held], py[held] = x0 + j * dx - cx, y0 + r * dy - cy
            held += 1
            if held < _CHUNK and (r < ny - 1 or j < nx - 1):
                continue
            whole = (held + VECTOR - 1) // VECTOR * VECTOR
            px[held:whole] = px[0]
            py[held:whole] = py[0]
            _short(px, py, whole, a, b, smooth, line_u, line_v)
            _add_near(px, py, whole, near[0], near[1], near[2], count, line_u, line_v)
            for i in range(held):
                u[row, column], v[row, column] = line_u[i], line_v[i]
                column += 1
                if column == nx:
                    row, column = row + 1, 0
            held = 0


@kernel
def _short(px, py, count, a, b, smooth, u, v):
    """A series of `_FEW` terms, a = -Re and b = Im, and the smooth map at `count` points."""
    u0, ux, uy, v0, vy, half_gx, gy = smooth
    a0, a1, a2, a3, a4, a5, a6, a7 = a[0], a[1], a[2], a[3], a[4], a[5], a[6], a[7]
    b0, b1, b2, b3, b4, b5, b6, b7 = b[0], b[1], b[2], b[3], b[4], b[5], b[6], b[7]
    u0, v0 = u0 + a0, v0 + b0
    for j in range(count):
        x, y = px[j], py[j]
        # -conj of the series: (s - i t)(x - i y) and so on, with t = Im.
        s, t = a7 * x + b7 * y + a6, b7 * x - a7 * y + b6
        s, t = s * x + t * y + a5, t * x - s * y + b5
        s, t = s * x + t * y + a4, t * x - s * y + b4
        s, t = s * x + t * y + a3, t * x - s * y + b3
        s, t = s * x + t * y + a2, t * x - s * y + b2
        s, t = s * x + t * y + a1, t * x - s * y + b1
        u[j] = s * x + t * y + u0 + (ux + half_gx * x + gy * y) * x + uy * y
        v[j] = t * x - s * y + v0 + vy * y + (uy + 0.5 * gy * x) * x
