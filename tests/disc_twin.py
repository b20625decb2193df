"""Disc behind one star in convergence and shear: its images' area as an integral along their rims, in long doubles.

Along the disc's rim the images are roots of a quartic. Their rims have the images at their left where the determinant
is positive, at their right where it is negative, so that the area is the integral of ``sign(det) Im(conj(z) dz) / 2``
over all of them, whatever caustics the disc lies on. Where the rim meets a caustic the integrand has a pole
of a square root.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.optimize import brentq, minimize_scalar

L, C = np.longdouble, np.clongdouble
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(20)
_WHOLE = 2.0 * L("3.14159265358979323846264338")


def _roots(zeta: Any, k: Any, gamma: Any) -> Any:
    """Roots (4, n) of the lens equation's quartic: see `twins.one_star_images`."""
    conj, one = zeta.conj(), np.ones_like(zeta)
    c = np.stack([
        k * k * gamma - gamma**3 + 0 * one,
        k * k * conj - 2 * gamma**2 * conj - zeta * k * gamma,
        -gamma * (conj**2 + 2 * gamma) - zeta * k * conj,
        -2 * gamma * conj - zeta * k,
        -gamma * one,
    ])  # fmt: skip
    companion = np.zeros((c.shape[1], 4, 4), complex)
    companion[:, 0] = -(c[1:] / c[0]).T
    companion[:, 1, 0] = companion[:, 2, 1] = companion[:, 3, 2] = 1.0
    roots = np.linalg.eigvals(companion).T.astype(C)
    for _ in range(8):
        value, slope = np.broadcast_to(c[0], roots.shape), np.zeros_like(roots)
        for part in c[1:]:
            slope, value = slope * roots + value, value * roots + part
        with np.errstate(all="ignore"):
            step = value / slope
        roots = roots - np.where(np.isfinite(step), step, 0.0)
    return roots


def _integrand(angle: Any, centre: complex, radius: float, k: Any, gamma: Any) -> Any:
    e = np.cos(angle) + 1j * np.sin(angle)
    zeta = C(centre) + L(radius) * e
    z = _roots(zeta, k, gamma)
    conj = z.conj()
    with np.errstate(all="ignore"):
        other = 1 / conj**2 - gamma
        off = np.abs(k * z - gamma * conj - 1 / conj - zeta)
    image = off < 1e-8 * (np.abs((k - gamma) * z) + 0.01)
    det, move = k * k - np.abs(other) ** 2, 1j * L(radius) * e
    with np.errstate(all="ignore"):
        ahead = (k * move - other * move.conj()) / det
        parts = np.where(image, np.sign(det) * (conj * ahead).imag, 0)
    return 0.5 * parts.sum(axis=0)


def _caustic(phi: Any, sign: int, k: Any, gamma: Any) -> Any:
    """Point of the caustic at the angle phi of the critical curve; not a number where there is none."""
    c = np.cos(2 * phi)
    with np.errstate(all="ignore"):
        square = (-gamma * c + sign * np.sqrt(gamma * gamma * c * c + k * k - gamma * gamma)) / (k * k - gamma * gamma)
        z = np.sqrt(np.where(square > 0.0, square, np.nan)) * (np.cos(phi) + 1j * np.sin(phi))
        return k * z - gamma * z.conj() - 1 / z.conj()


def _cuts(centre: complex, radius: float, k: Any, gamma: Any) -> Any:
    """Angles at which the rim crosses the caustic."""
    ranges = [(-np.pi + 1.2345e-5, np.pi + 1.2345e-5)]
    if k < gamma:
        wide = 0.5 * np.arccos(float(np.sqrt(gamma * gamma - k * k) / gamma))
        ranges = [(-wide, wide), (np.pi - wide, np.pi + wide)]
    found = []
    for low, high in ranges:
        # Denser towards the ends, where the two radii meet.
        grid = 0.5 * (low + high) + 0.5 * (high - low) * np.sin(np.linspace(-np.pi / 2, np.pi / 2, 4001)) * (1 - 1e-15)
        for sign in (1, -1):

            def gap(phi: Any, sign: int = sign) -> Any:
                return (np.abs(_caustic(L(1) * phi, sign, k, gamma) - C(centre)) - radius).astype(float)

            value = gap(grid)
            if not np.isfinite(value[1:-1]).all():
                continue
            turns = 1 + np.flatnonzero(np.diff(value)[:-1] * np.diff(value)[1:] <= 0)
            extra = []
            for i in turns:
                way = 1.0 if value[i] <= value[i - 1] else -1.0
                best = minimize_scalar(
                    lambda p, way=way, gap=gap: way * gap(p), bounds=(grid[i - 1], grid[i + 1]), method="bounded",
                    options={"xatol": 1e-13},
                )  # fmt: skip
                extra.append(best.x)
            points = np.sort(np.concatenate([grid, extra]))
            value = gap(points)
            for i in np.flatnonzero(value[:-1] * value[1:] < 0):
                found.append(
                    _polished(brentq(gap, points[i], points[i + 1], xtol=1e-15), sign, centre, radius, k, gamma)
                )
    return np.unique(np.array(found, dtype=L))


def _polished(phi: float, sign: int, centre: complex, radius: float, k: Any, gamma: Any) -> Any:
    """Angle on the rim of a crossing, by Newton's method in long doubles."""
    at, width = L(phi), L(1e-9)

    def gap(p: Any) -> Any:
        return np.abs(_caustic(p, sign, k, gamma) - C(centre)) ** 2 - L(radius) ** 2

    for _ in range(6):
        at = at - gap(at) * 2 * width / (gap(at + width) - gap(at - width))
    if not abs(at - phi) < 1e-6:
        at = L(phi)
    way = _caustic(at, sign, k, gamma) - C(centre)
    return np.arctan2(way.imag, way.real)


def one_star_disc(centre: complex, radius: float, lam_t: float, lam_r: float, tolerance: float = 1e-9) -> float:
    """Magnification of a uniform disc behind one star of a solar mass at the origin; lam_t and lam_r must differ."""
    k, gamma = (L(lam_t) + L(lam_r)) / 2, (L(lam_r) - L(lam_t)) / 2
    cuts = _cuts(centre, radius, k, gamma)
    cuts = cuts if len(cuts) else np.array([0.1], dtype=L)
    pieces = []
    for low, high in zip(cuts, np.append(cuts[1:], cuts[0] + _WHOLE), strict=True):
        middle = 0.5 * (low + high)
        pieces += [(low, middle - low, L(0), L(1)), (high, middle - high, L(0), L(1))]

    def integrals(parts: Any) -> Any:
        # The angle runs with the square of the variable, away from where the rim meets the caustic.
        start, span, low, high = (np.array(item, dtype=L)[:, None] for item in zip(*parts, strict=True))
        t = low + (high - low) * (1 + _NODES) / 2
        value = _integrand((start + span * t * t).ravel(), centre, radius, k, gamma).reshape(t.shape)
        return (value * np.abs(span) * t * _WEIGHTS * (high - low)).sum(axis=1)

    total, values = L(0), integrals(pieces)
    for _ in range(16):
        halves = [half for a, s, p, q in pieces for half in ((a, s, p, 0.5 * (p + q)), (a, s, 0.5 * (p + q), q))]
        finer = integrals(halves)
        both = finer[::2] + finer[1::2]
        bad = np.abs(both - values) > tolerance * np.abs(values).sum()
        total += both[~bad].sum()
        chosen = np.flatnonzero(np.repeat(bad, 2))
        pieces, values = [halves[i] for i in chosen], finer[chosen]
        if not bad.any():
            break
    return float((total + values.sum()) / (np.pi * L(radius) ** 2))
