"""What mirrored pairs say of the fold between them: the likelihood of a local lens."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt
from scipy.special import ndtr, ndtri

if TYPE_CHECKING:
    from crossing.event import Value

__all__ = [
    "Fold",
    "LogNormal",
    "PairData",
    "PairPriors",
    "fold_of",
    "log_posterior",
    "misfit",
    "outwardness",
]

Array: TypeAlias = npt.NDArray[np.float64]

# Change of the lens across the stretch that a symmetric arc does not have, in parts of the gradient of lam_t.
_ASYMMETRY: Final = 0.5
# A magnification without an error is hardly better than this; nor is the fold law.
_EXACT: Final = 0.05
# Spread of the curvature of critical curves [1/arcsec] where the cluster's centre is unknown, and of how far the turn
# of the stretch bends them by itself; for both common practice gives no source.
_LEAST_BEND: Final = 0.07
_TURNING: Final = 0.7
_TINY: Final = 1e-12
_SMALLEST: Final = 1e-300


@dataclass(frozen=True, slots=True, kw_only=True)
class PairData:
    """Positions of pairs in the tangent plane, east and north [arcsec]."""

    first: Array
    """One image of each pair, shape (pairs, 2)."""
    second: Array
    """The other image, shape (pairs, 2)."""
    error: Array
    """Standard deviation of each coordinate, shape (pairs,)."""
    magnification: tuple[Value | None, ...]
    """Unsigned magnification, geometric mean of both images."""

    @property
    def middle(self) -> Array:
        """Midpoints, shape (pairs, 2)."""
        return (self.first + self.second) / 2


class LogNormal(NamedTuple):
    """A positive number that is known to a factor."""

    median: float
    """Median."""
    dex: float
    """Standard deviation of its decimal logarithm."""

    def quantile(self, p: Array) -> Array:
        """Inverse of the cumulative distribution."""
        return np.asarray(self.median * 10 ** (self.dex * ndtri(p)))


@dataclass(frozen=True, slots=True, kw_only=True)
class PairPriors:
    """What is known beside the pairs."""

    mu_r: Value
    """Signed magnification across the stretch."""
    gradient: Value | LogNormal
    """Change of lam_t [1/arcsec]: along the stretch, or its whole size."""
    whole: bool
    """Whether it is its whole size."""
    outward: Array | None
    """Centre of the cluster, away from which lam_t grows, east and north [arcsec]; None if unknown."""

    def distance(self, data: PairData) -> float:
        """Distance of the pairs from the cluster's centre [arcsec]; infinite if it is unknown."""
        return np.inf if self.outward is None else float(np.hypot(*(data.middle.mean(axis=0) - self.outward)))


class Fold(NamedTuple):
    """Local lenses, fields of shape (n,); x is the stretch at the origin, towards larger lam_t.

    Notes
    -----
    The Jacobian's elements are xx = gx x + gy y + (qxx x**2 + 2 qxy x y + qyy y**2) / 2, xy = gy x + h y + qxy x**2 / 2
    + qyy x y and yy = lam_r + h x + qyy x**2 / 2: those of a potential.
    """

    angle: Array
    """Direction of x, from east towards north [rad]."""
    origin: Array
    """A point of the critical curve, east and north [arcsec], shape (n, 2)."""
    gx: Array
    """Change of lam_t along x [1/arcsec], positive."""
    gy: Array
    """Change of lam_t along y [1/arcsec]."""
    h: Array
    """Change of the off-diagonal element along y [1/arcsec]."""
    lam_r: Array
    """Eigenvalue across the stretch."""
    qxx: Array
    """Second derivative of the element xx along x [1/arcsec**2]."""
    qxy: Array
    """Along x and y."""
    qyy: Array
    """Along y."""

    def inside(self, place: Array) -> tuple[Array, Array]:
        """Coordinates (x, y) of places, east and north [arcsec] along their last axis; shapes broadcast."""
        c, s = np.cos(self.angle), np.sin(self.angle)
        offset = place - self.origin
        east, north = offset[..., 0], offset[..., 1]
        return c * east + s * north, c * north - s * east

    def jacobian(self, x: Array, y: Array) -> tuple[Array, Array, Array]:
        """Elements (xx, xy, yy) of the Jacobian at coordinates."""
        bend = self.qyy * x
        xx = self.gx * x + self.gy * y + (self.qxx * x / 2 + self.qxy * y) * x + self.qyy * y**2 / 2
        xy = (self.gy + self.qxy * x / 2) * x + (self.h + bend) * y
        return xx, xy, self.lam_r + (self.h + bend / 2) * x

    def source(self, x: Array, y: Array) -> tuple[Array, Array]:
        """Source position of coordinates, in the same frame [arcsec]."""
        u = self.gx * x**2 / 2 + self.gy * x * y + self.h * y**2 / 2
        v = self.lam_r * y + self.gy * x**2 / 2 + self.h * x * y
        cubic = self.qxx * x**3 / 6 + self.qxy * x**2 * y / 2 + self.qyy * x * y**2 / 2
        return u + cubic, v + self.qxy * x**3 / 6 + self.qyy * x**2 * y / 2


def fold_of(parameters: Array, data: PairData, priors: PairPriors) -> Fold:
    """Lenses of parameters.

    Parameters
    ----------
    parameters : ndarray, shape (n, 8)
        Direction of the stretch [rad]; angle from it to the critical curve [rad]; offset of the curve along the stretch
        from the mean midpoint [arcsec]; and five numbers that are standard normal before the data: of the gradient, of
        mu_r, of the asymmetry, and two of the curvature of the critical curve.
    data : PairData
        The pairs.
    priors : PairPriors
        Distributions of the gradient and mu_r, and the cluster's centre.

    Notes
    -----
    Where the stretch turns, with xy along the critical curve, the element xx must grow as xy**2 / yy for that curve to
    be straight; a purely quadratic lens has none of this, and the curve of a real one bends about its centre.
    """
    angle, tilt, offset, z_gradient, z_mu, z_asymmetry, z_bend, z_turn = parameters.T
    size = priors.gradient.quantile(_share(z_gradient))
    sine = np.where(np.abs(np.sin(tilt)) < _TINY, _TINY, np.sin(tilt))
    whole = size if priors.whole else size / np.abs(sine)
    gx, gy = whole * np.abs(sine), -whole * np.abs(sine) / sine * np.cos(tilt)
    lam_r = _inverse(priors.mu_r, z_mu)
    h = _ASYMMETRY * whole * z_asymmetry
    bend = -whole * (_LEAST_BEND * z_bend if priors.outward is None else (z_bend - 1) / priors.distance(data))
    turn = 2 * (1 + _TURNING * z_turn) / lam_r
    along = np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    return Fold(
        angle=angle,
        origin=data.middle.mean(axis=0) + offset[:, None] * along,
        gx=gx,
        gy=gy,
        h=h,
        lam_r=lam_r,
        qxx=turn * gy**2 + bend * np.cos(tilt) ** 2,
        qxy=turn * gy * h + bend * np.cos(tilt) * np.sin(tilt),
        qyy=turn * h**2 + bend * np.sin(tilt) ** 2,
    )


def _share(z: Array) -> Array:
    return np.clip(ndtr(z), 1e-12, 1 - 1e-12)


def _inverse(value: Value, z: Array) -> Array:
    """Inverse of a magnification: a normal error of it becomes one of its inverse."""
    if value.shape == "normal":
        return np.asarray(1 / value.a + value.b / value.a**2 * z)
    return np.asarray(1 / value.quantile(_share(z)))


def _pair_terms(fold: Fold, data: PairData) -> tuple[Array, Array, Array]:
    """Chi-squared of pairs, log of the determinants of their covariances, log |det A det A| of both images: (n, pairs).

    Notes
    -----
    The source positions of two images with the midpoint m and the separation d differ by A(m) d, and by the third
    derivatives times d**3 / 24, for a cubic lens exactly: this must vanish up to the errors of both positions, which A
    at each image takes to the source plane.
    """
    wide = Fold(*(one[:, None] for one in fold))
    one, two = wide.inside(data.first), wide.inside(data.second)
    xx, xy, yy = wide.jacobian((one[0] + two[0]) / 2, (one[1] + two[1]) / 2)
    dx, dy = two[0] - one[0], two[1] - one[1]
    u = xx * dx + xy * dy + dx * (wide.qxx * dx**2 + 3 * dy * (wide.qxy * dx + wide.qyy * dy)) / 24
    v = xy * dx + yy * dy + dx**2 * (wide.qxy * dx + 3 * wide.qyy * dy) / 24
    xx1, xy1, yy1 = wide.jacobian(*one)
    xx2, xy2, yy2 = wide.jacobian(*two)
    cross = xy1**2 + xy2**2
    uu, vv, uv = xx1**2 + xx2**2 + cross, cross + yy1**2 + yy2**2, xy1 * (xx1 + yy1) + xy2 * (xx2 + yy2)
    det = np.maximum(uu * vv - uv**2, _SMALLEST)
    chi2 = (vv * u**2 - 2 * uv * u * v + uu * v**2) / (det * data.error**2)
    dets = np.log(np.abs((xx1 * yy1 - xy1**2) * (xx2 * yy2 - xy2**2)) + _SMALLEST)
    return chi2, np.log(det) + 4 * np.log(data.error), dets


def misfit(fold: Fold, data: PairData) -> Array:
    """Chi-squared of all positions, shape (n,)."""
    return np.asarray(_pair_terms(fold, data)[0].sum(axis=1))


def log_posterior(parameters: Array, data: PairData, priors: PairPriors) -> Array:
    """Log of the posterior density, up to a constant, shape (n,).

    Notes
    -----
    Knots are as likely anywhere in the image plane; hence the determinants of both images.
    """
    with np.errstate(over="ignore", invalid="ignore"):
        fold = fold_of(parameters, data, priors)
        total = -np.sum(parameters[:, 3:] ** 2, axis=1) / 2
        chi2, covariance, dets = _pair_terms(fold, data)
        total = total + np.sum(dets - covariance - chi2, axis=1) / 2
        for k, value in enumerate(data.magnification):
            if value is not None:
                total = total + _log_magnification(value, dets[:, k])
    tilt = parameters[:, 1]
    good = (tilt > 0) & (tilt < np.pi) & np.isfinite(total)
    return np.where(good & (outwardness(fold, data, priors) >= 0), total, -np.inf)


def outwardness(fold: Fold, data: PairData, priors: PairPriors) -> Array:
    """Cosine between the gradient of lam_t and the direction away from the cluster's centre; 0 if that is unknown."""
    if priors.outward is None:
        return np.zeros_like(fold.gx)
    c, s = np.cos(fold.angle), np.sin(fold.angle)
    away = data.middle.mean(axis=0) - priors.outward
    along, across = c * away[0] + s * away[1], c * away[1] - s * away[0]
    return np.asarray((fold.gx * along + fold.gy * across) / np.hypot(fold.gx, fold.gy) / np.hypot(*away))


def _log_magnification(value: Value, dets: Array) -> Array:
    if value.shape in ("uniform", "loguniform"):
        return value.log_density(np.exp(-dets / 2))
    error = value.b if value.shape == "normal" else _EXACT * value.a
    return -0.5 * ((np.exp(dets / 2) - 1 / value.a) * value.a**2 / error) ** 2
