"""Slow, plain twins of the star-field kernels and closed forms of lensing, used by tests alone."""

from __future__ import annotations

from itertools import pairwise
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.special import ellipe

from crossing.shooting.field import StarField

Array = NDArray[np.float64]


def lens(lam_t: float, lam_r: float) -> tuple[float, float]:
    """(kappa, gamma) of the eigenvalues."""
    return 1 - (lam_t + lam_r) / 2, (lam_r - lam_t) / 2


def conjugate_sums(x: Array, y: Array, stars: tuple[Array, Array, Array], block: int = 100) -> NDArray[np.complex128]:
    """Conjugate deflection of point masses and its first two derivatives, (3, n), summed star by star."""
    z, star = np.ravel(x) + 1j * np.ravel(y), stars[0] + 1j * stars[1]
    out = np.empty((3, z.size), dtype=np.complex128)
    for start in range(0, z.size, block):
        inverse = 1 / (z[start : start + block, None] - star)
        out[0, start : start + block] = inverse @ stars[2]
        out[1, start : start + block] = -(inverse**2) @ stars[2]
        out[2, start : start + block] = 2 * inverse**3 @ stars[2]
    return out


def sheet_part(x: Array, y: Array, half_width: float, half_height: float) -> NDArray[np.complex128]:
    """First and second derivative, (2, n), of the analytic part of the sheet's conjugate deflection, convergence one.

    Points must not lie on the edges.
    """
    d_xx, d_xy, d_yy, third = np.zeros((4, *np.shape(x)), dtype=np.complex128)
    for side, edge in ((1, x + half_width), (-1, x - half_width)):
        for end, corner in ((1, y + half_height), (-1, y - half_height)):
            d_xx += side * end * np.arctan(corner / edge)
            d_xy += side * end * 0.5 * np.log(edge**2 + corner**2)
            d_yy += side * end * np.arctan(edge / corner)
            third += side * end * (-corner - 1j * edge) / (edge**2 + corner**2)
    return np.array([(d_xx - d_yy) / 2 - 1j * d_xy, third]) / np.pi


def sheet_by_quadrature(x: float, y: float, half_width: float, half_height: float) -> tuple[float, float]:
    """Deflection of a rectangle of convergence one as an integral over the directions in which it is seen."""

    def chord(angle: float) -> float:
        low, high = 0.0, np.inf
        for at, step, half in ((x, np.cos(angle), half_width), (y, np.sin(angle), half_height)):
            if step == 0.0:
                if abs(at) > half:
                    return 0.0
                continue
            ends = sorted(((-half - at) / step, (half - at) / step))
            low, high = max(low, ends[0]), min(high, ends[1])
        return max(0.0, high - low)

    corners = [np.arctan2(b - y, a - x) for a in (-half_width, half_width) for b in (-half_height, half_height)]
    cuts = np.sort(np.concatenate([[-np.pi, np.pi], corners]))
    parts = [
        sum(
            quad(lambda t, f=f: f(t) * chord(t), a, b, epsabs=1e-12, epsrel=1e-11, limit=200)[0]
            for a, b in pairwise(cuts)
        )
        for f in (np.cos, np.sin)
    ]
    return -parts[0] / np.pi, -parts[1] / np.pi


def source_positions(field: StarField, x: Array, y: Array) -> tuple[Array, Array]:
    """Lens map by straight summation; the sheet by its closed form in real numbers."""
    from crossing.shooting.sheet import sheet_deflection

    sums = conjugate_sums(x, y, field.stars)[0].reshape(np.shape(x))
    sheet = sheet_deflection(x, y, field.half_width, field.half_height, field.kappa_star)
    gx, gy = field.gradient
    u = field.lens.lam_t * x + gx * x**2 / 2 + gy * x * y - (sums.real - sheet[0])
    v = field.lens.lam_r * y + gy * x**2 / 2 - (-sums.imag - sheet[1])
    return u, v


def cover(triangle: Array, rows: int, columns: int) -> Array:
    """Area of every pixel that a triangle (3, 2) covers, by clipping it at the pixel's four sides."""
    out = np.zeros((rows, columns))
    for row in range(rows):
        for column in range(columns):
            shape = [tuple(point) for point in triangle]
            for axis, low, sign in ((0, column, 1), (0, column + 1, -1), (1, row, 1), (1, row + 1, -1)):
                shape = _cut(shape, axis, low, sign)
            out[row, column] = _area(shape)
    return out


def _cut(shape: list[Any], axis: int, at: float, sign: int) -> list[Any]:
    kept = []
    for i, here in enumerate(shape):
        before = shape[i - 1]
        a, b = sign * (before[axis] - at), sign * (here[axis] - at)
        if (a < 0) != (b < 0):
            f = a / (a - b)
            kept.append(tuple(before[k] + f * (here[k] - before[k]) for k in range(2)))
        if b >= 0:
            kept.append(here)
    return kept


def _area(shape: list[Any]) -> float:
    return 0.5 * abs(sum(a[0] * b[1] - a[1] * b[0] for a, b in zip(shape, shape[1:] + shape[:1], strict=True)))


class Images(NamedTuple):
    """Images of one source behind one star: positions and signed magnifications."""

    position: NDArray[np.complex128]
    magnification: Array


def one_star_images(u: float, v: float, lam_t: float, lam_r: float) -> Images:
    """Images behind one star of a solar mass in convergence and shear, from the lens equation as a quartic."""
    kappa, gamma = lens(lam_t, lam_r)
    k, zeta = 1 - kappa, complex(u, v)
    # With W = conj(zeta) z + gamma z^2 + 1 = k z conj(z): k^2 z^3 (conj(zeta) + gamma z) - gamma W^2 - zeta k z W = 0.
    w = np.poly1d([gamma, np.conj(zeta), 1.0])
    z = np.poly1d([1.0, 0.0])
    quartic = k**2 * z**3 * np.poly1d([gamma, np.conj(zeta)]) - gamma * w * w - zeta * k * z * w
    found = []
    for root in quartic.roots:
        for _ in range(3):
            miss = zeta - (k * root - gamma * np.conj(root) - 1 / np.conj(root))
            other = -gamma + 1 / np.conj(root) ** 2
            root += (k * miss - other * np.conj(miss)) / (k**2 - abs(other) ** 2)
        if abs(zeta - (k * root - gamma * np.conj(root) - 1 / np.conj(root))) < 1e-8:
            found.append(root)
    position = np.array(found)
    near = np.abs(position[:, None] - position) < 1e-6 * np.abs(position)
    position = position[[not near[i, :i].any() for i in range(len(position))]]
    return Images(position, 1 / (k**2 - abs(gamma - 1 / np.conj(position) ** 2) ** 2))


def density_at_zero(kappa_smooth: float, kappa_star: float, gamma: float) -> float:
    """Density of the determinant of a random field at zero; shear of the stars by Nityananda & Ostriker (1984)."""
    k = 1 - kappa_smooth
    near, far = kappa_star**2 + (k - gamma) ** 2, kappa_star**2 + (k + gamma) ** 2
    return float(kappa_star / np.pi * ellipe(4 * k * gamma / far) / (near * np.sqrt(far)))


def mean_minima(kappa_smooth: float, kappa_star: float, gamma: float) -> float:
    """Mean number of minima per source, <mu> E[(det A)+], from the density of the shear by polar quadrature."""
    k = 1 - kappa_smooth

    def ring(r: float) -> float:
        """Density of |gamma + S| = r times 2 pi r."""
        a = kappa_star**2 + r**2 + gamma**2
        f = quad(lambda t: (a - 2 * r * gamma * np.cos(t)) ** -1.5, 0, np.pi, epsabs=0, epsrel=1e-11, limit=200)[0]
        return float(kappa_star / np.pi * r * f)

    points = [p for p in (gamma, max(0.0, gamma - kappa_star), gamma + kappa_star) if 0 < p < k]
    total = quad(lambda r: (k**2 - r**2) * ring(r), 0, k, points=points, epsabs=0, epsrel=1e-10, limit=400)[0]
    return float(total / abs((k - kappa_star) ** 2 - gamma**2))


def disc_characteristic(u: Array) -> Array:
    """c(u) = 2 u^2 int_u^inf J0(s) s^-3 ds of one star in a disc (Katz, Balbus & Paczynski 1986), u = k/R; series."""
    u = np.asarray(u, dtype=np.float64)
    out = 1 - u**2 / 2 * (1 - np.euler_gamma + np.log(2 / u))
    term = u**2 / 4
    for n in range(2, 60):
        term = term * (u / 2) ** 2 / n**2
        out -= (-1.0) ** n * term / (n - 1)
    return out


def star_images(u: float, v: float, field: StarField) -> Images:
    """Images behind a few isolated stars in convergence and shear: the lens equation as a polynomial of (n + 1)^2.

    With conj(z) = W/(k P), where P is the product of (z - z_i), the equation for z alone is multiplied with W - k P
    conj(z_i) for every star (Witt 1990).
    """
    k, gamma, zeta = 1 - field.kappa, field.gamma, complex(u, v)
    star = field.x + 1j * field.y
    whole = np.poly1d(star, r=True)
    others = [np.poly1d(np.delete(star, i), r=True) for i in range(len(star))]
    w = np.poly1d([gamma, np.conj(zeta)]) * whole
    for mass, other in zip(field.mass, others, strict=True):
        w = w + mass * other
    factors = [w - k * np.conj(one) * whole for one in star]
    product = np.poly1d([1.0])
    for factor in factors:
        product = product * factor
    total = (np.poly1d([k, -zeta]) * k * whole - gamma * w) * product
    for i, mass in enumerate(field.mass):
        rest = np.poly1d([mass])
        for j, factor in enumerate(factors):
            rest = rest * factor if j != i else rest
        total = total - rest * k * whole * k * whole
    z = total.roots

    def terms(z: NDArray[np.complex128]) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
        inverse = 1 / (np.conj(z)[:, None] - np.conj(star))
        return zeta - (k * z - gamma * np.conj(z) - inverse @ field.mass), -gamma + inverse**2 @ field.mass

    for _ in range(20):
        miss, other = terms(z)
        step = (k * miss - other * np.conj(miss)) / (k**2 - np.abs(other) ** 2)
        # A root that is no image must not be sent off to where another image is: steps are short.
        z = z + step * np.minimum(1.0, 0.05 / np.maximum(np.abs(step), 1e-300))
    miss, _ = terms(z)
    z = z[np.abs(miss) < 1e-9]
    near = np.abs(z[:, None] - z) < 1e-6 * (1e-3 + np.abs(z))
    z = z[[not near[i, :i].any() for i in range(len(z))]]
    return Images(z, 1 / (k**2 - np.abs(terms(z)[1]) ** 2))
