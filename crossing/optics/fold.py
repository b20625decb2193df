"""Magnification of a source that crosses a straight fold caustic.

A point source at the distance d inside a fold is magnified by K / sqrt(d) on top of the images that do not take part.
Averaged over a disc of radius R this becomes K / sqrt(R) J(d/R), with one universal profile J for each law of the
surface brightness. Distances are measured along the caustic's normal and grow towards the side with two more images.
"""

from __future__ import annotations

from functools import cache
from math import pi, sqrt
from typing import Final, NamedTuple, TypeAlias, overload

import numpy as np
import numpy.typing as npt
from scipy import special
from scipy.optimize import brentq

from crossing.errors import InputError

__all__ = [
    "GAUSSIAN_PEAK",
    "ProfilePeak",
    "fold_magnification",
    "fold_profile",
    "gaussian_profile",
    "limb_mixing",
    "point_profile",
    "profile_peak",
]

Array: TypeAlias = npt.NDArray[np.float64]

ONSET: Final = 0.125
"""Below 1 + x = ONSET the elliptic form of the uniform disc would cancel; its power series is used."""
FAR: Final = 4.0
"""Above x = FAR the series in 1/x**2 is used, for the same reason."""
GAUSSIAN_CENTRE: Final = 0.1
GAUSSIAN_FAR: Final = 20.0
GAUSSIAN_NOTHING: Final = -40.0


def _hypergeometric(a: float, b: float, c: float, terms: int) -> Array:
    """Coefficients of the power series of 2F1(a, b; c; z), lowest power first."""
    n = np.arange(terms - 1)
    return np.concatenate([[1.0], np.cumprod((a + n) * (b + n) / ((c + n) * (1 + n)))])


# Both have |z| <= 1/16 where they are used, so the first neglected term is below 1e-17 of the sum.
ONSET_SERIES: Final = _hypergeometric(-0.5, 1.5, 2.0, 13)
FAR_SERIES: Final = _hypergeometric(0.25, 0.75, 2.0, 13)
_ORDERS: Final = np.arange(16)
_GAUSSIAN_CENTRE_SERIES: Final = (
    2 ** (_ORDERS / 2 - 0.75) * special.gamma(_ORDERS / 2 + 0.25) / special.factorial(_ORDERS) / sqrt(2 * pi)
)
_GAUSSIAN_FAR_SERIES: Final = special.poch(0.5, 2 * _ORDERS[:9]) / (2.0 ** _ORDERS[:9] * special.factorial(_ORDERS[:9]))


class ProfilePeak(NamedTuple):
    """Where a fold profile is highest."""

    position: float
    """Distance of the source's centre inside the caustic, in radii (in sigmas for a Gaussian)."""
    height: float
    """Value of the profile there."""


GAUSSIAN_PEAK: Final = ProfilePeak(0.76495086738976, 1.02113658466115)
"""Peak of `gaussian_profile`, the root of D_{1/2}(-x) = 0 (computed with 30 digits)."""


def _horner(z: Array, coefficients: Array) -> Array:
    value = np.full_like(z, coefficients[-1])
    for coefficient in coefficients[-2::-1]:
        value *= z
        value += coefficient
    return value


def _uniform(x: Array, onset: Array, beyond: Array) -> Array:
    """Profile of the uniform disc up to x = FAR, from x, 1 + x and x - 1, each given without cancellation."""
    value = np.where(np.isnan(x), np.nan, 0.0)
    part = (onset > 0) & (onset < ONSET)
    value[part] = sqrt(2) * onset[part] * _horner(onset[part] / 2, ONSET_SERIES)
    part = (onset >= ONSET) & (beyond < 0)
    m, m1 = onset[part] / 2, -beyond[part] / 2
    value[part] = 8 * sqrt(2) / (3 * pi) * (x[part] * special.ellipe(m) + m1 * special.ellipkm1(m1))
    value[beyond == 0] = 8 * sqrt(2) / (3 * pi)
    part = (beyond > 0) & (x <= FAR)
    over, under = onset[part], beyond[part]
    bracket = x[part] * special.ellipe(2 / over) - under * special.ellipkm1(under / over)
    value[part] = 8 / (3 * pi) * np.sqrt(over) * bracket
    return value


def _limb(x: Array, onset: Array, beyond: Array) -> Array:
    """Profile of a disc as bright as sqrt(1 - r**2) (coefficient 1) up to x = FAR."""
    onset, beyond = np.clip(onset, 0.0, FAR + 1), np.clip(beyond, 0.0, FAR - 1)
    inner, outer = np.sqrt(onset), np.sqrt(beyond)
    # The textbook's sum of two 3/2 powers cancels like x**3; it factors into this form, which does not.
    outside = 1.6 * (2 + 2 * beyond + 3 * inner * outer) / np.maximum(inner + outer, 1.0) ** 3
    return np.where(x > 1, outside, 0.4 * onset * inner * (5 - 2 * onset))


def _far_shape(x: Array, mixing: Array) -> Array:
    """J(x) sqrt(x) for x >= FAR, up to and including infinity."""
    inverse = 1 / x
    limb = 1.6 * (2 + 3 * np.sqrt(1 - inverse**2)) / (np.sqrt(1 + inverse) + np.sqrt(1 - inverse)) ** 3
    return np.asarray((1 - mixing) * _horner(inverse**2, FAR_SERIES) + mixing * limb)


def _near(x: Array, onset: Array, beyond: Array, mixing: Array) -> Array:
    """J(x) up to x = FAR, zero above."""
    value = _uniform(x, onset, beyond)
    if np.any(mixing != 0):
        value = np.where(x > FAR, 0.0, (1 - mixing) * value + mixing * _limb(x, onset, beyond))
    return value


def _plain(value: Array) -> float | Array:
    return float(value) if value.ndim == 0 else value


def limb_mixing(limb_darkening: npt.ArrayLike) -> Array:
    """Weight of the fully limb-darkened profile, G = 2 u / (3 - u).

    Parameters
    ----------
    limb_darkening : array_like
        Linear coefficient u in 0..1, any shape.

    Returns
    -------
    ndarray
        G in 0..1, same shape: J_u = (1 - G) J_0 + G J_1.

    Raises
    ------
    InputError
        If a coefficient is outside 0..1.
    """
    u = np.asarray(limb_darkening, dtype=np.float64)
    wrong = (u < 0) | (u > 1)
    if np.any(wrong):
        raise InputError(
            f"`limb_darkening` must be between 0 and 1, got {u[wrong].flat[0]:g}; use 0 for a uniform disc"
        )
    mixing: Array = np.asarray(2 * u / (3 - u))
    return mixing


@overload
def fold_profile(x: float, limb_darkening: float = 0.0) -> float: ...
@overload
def fold_profile(x: npt.ArrayLike, limb_darkening: npt.ArrayLike = 0.0) -> Array: ...
def fold_profile(x: npt.ArrayLike, limb_darkening: npt.ArrayLike = 0.0) -> float | Array:
    """Fold profile J of a disc with linear limb darkening.

    Parameters
    ----------
    x : array_like
        Distance of the disc's centre inside the caustic, in radii; -1 is the first touch, zero magnification below.
    limb_darkening : array_like, optional
        Linear coefficient u in 0..1 of I = I0 [1 - u (1 - cos theta)]; broadcasts with `x`.

    Returns
    -------
    float or ndarray
        J, so that the magnification is background + K / sqrt(R) J. A float where all arguments are scalars. NaN where
        `x` is NaN.

    Raises
    ------
    InputError
        If a limb-darkening coefficient is outside 0..1.

    Notes
    -----
    The relative error is below 1e-10 for any double x above -1; what limits callers near the onset is the rounding of
    x itself. `fold_magnification` avoids that.

    For the uniform disc, with s = 1 + x::

        s < 1/8      J = sqrt(2) s 2F1(-1/2, 3/2; 2; s/2)
        x < 1        J = 8 sqrt(2)/(3 pi) [x E(m) + (1-x)/2 K(m)],        m = (1+x)/2
        x > 1        J = 8/(3 pi) sqrt(1+x) [x E(p) - (x-1) K(p)],        p = 2/(1+x)
        x > 4        J = x**(-1/2) 2F1(1/4, 3/4; 2; 1/x**2)

    and for u = 1, with a = sqrt(x+1), b = sqrt(x-1)::

        x < 1        J = 2/5 s**(3/2) (5 - 2 s)
        x > 1        J = 8/5 (2 x + 3 a b) / (a + b)**3

    References
    ----------
    .. [1] Schneider P., Weiss A., 1986, A&A 164, 237
    .. [2] Gould A., Andronov N., 1999, ApJ 516, 236
    """
    position, mixing = np.broadcast_arrays(np.asarray(x, dtype=np.float64), limb_mixing(limb_darkening))
    far = np.maximum(position, FAR)
    near = _near(position, 1 + position, position - 1, mixing)
    return _plain(np.where(position > FAR, _far_shape(far, mixing) / np.sqrt(far), near))


@overload
def point_profile(x: float) -> float: ...
@overload
def point_profile(x: npt.ArrayLike) -> Array: ...
def point_profile(x: npt.ArrayLike) -> float | Array:
    """Fold profile of a point source, x**(-1/2) inside, zero outside, infinite on the caustic.

    Parameters
    ----------
    x : array_like
        Distance inside the caustic, in any unit of length.

    Returns
    -------
    float or ndarray
        The profile in that unit to the power -1/2; NaN where `x` is NaN.
    """
    position = np.asarray(x, dtype=np.float64)
    with np.errstate(divide="ignore"):
        return _plain(np.asarray(np.where(position < 0, 0.0, np.abs(position) ** -0.5)))


@overload
def gaussian_profile(x: float) -> float: ...
@overload
def gaussian_profile(x: npt.ArrayLike) -> Array: ...
def gaussian_profile(x: npt.ArrayLike) -> float | Array:
    """Fold profile of a round Gaussian source.

    Parameters
    ----------
    x : array_like
        Distance of the centre inside the caustic in units of the Gaussian's sigma (per axis).

    Returns
    -------
    float or ndarray
        J_g, so that the magnification is background + K / sqrt(sigma) J_g; NaN where `x` is NaN.

    Notes
    -----
    J_g(x) = 2**(-1/2) exp(-x**2/4) D_{-1/2}(-x) with the parabolic cylinder function D, here by Bessel functions of
    order 1/4, by its power series near 0 and by its asymptotic series above x = 20.
    """
    position = np.asarray(x, dtype=np.float64)
    value = np.where(np.isnan(position), np.nan, 0.0)
    part = np.abs(position) < GAUSSIAN_CENTRE
    value[part] = np.exp(-(position[part] ** 2) / 2) * _horner(position[part], _GAUSSIAN_CENTRE_SERIES)
    part = (position <= -GAUSSIAN_CENTRE) & (position > GAUSSIAN_NOTHING)
    q = position[part] ** 2 / 4
    value[part] = np.sqrt(-position[part] / pi) / 2 * np.exp(-2 * q) * special.kve(0.25, q)
    part = (position >= GAUSSIAN_CENTRE) & (position <= GAUSSIAN_FAR)
    q = position[part] ** 2 / 4
    bessel = 2 * special.ive(0.25, q) + sqrt(2) / pi * np.exp(-2 * q) * special.kve(0.25, q)
    value[part] = np.sqrt(pi * position[part] / 8) * bessel
    part = position > GAUSSIAN_FAR
    value[part] = _horner(position[part] ** -2, _GAUSSIAN_FAR_SERIES) / np.sqrt(position[part])
    return _plain(value)


@overload
def fold_magnification(
    distance: float, radius: float, strength: float = 1.0, background: float = 0.0, limb_darkening: float = 0.0
) -> float: ...
@overload
def fold_magnification(
    distance: npt.ArrayLike,
    radius: npt.ArrayLike,
    strength: npt.ArrayLike = 1.0,
    background: npt.ArrayLike = 0.0,
    limb_darkening: npt.ArrayLike = 0.0,
) -> Array: ...
def fold_magnification(
    distance: npt.ArrayLike,
    radius: npt.ArrayLike,
    strength: npt.ArrayLike = 1.0,
    background: npt.ArrayLike = 0.0,
    limb_darkening: npt.ArrayLike = 0.0,
) -> float | Array:
    """Magnification of a disc near a straight fold caustic.

    Parameters
    ----------
    distance : array_like
        Distance of the disc's centre from the caustic along its normal, positive inside (two more images).
    radius : array_like
        Radius of the disc in the same unit of length; 0 is a point source.
    strength : array_like, optional
        Fold strength K, in that unit to the power 1/2.
    background : array_like, optional
        Magnification of all images that do not take part in the fold.
    limb_darkening : array_like, optional
        Linear coefficient in 0..1.

    Returns
    -------
    float or ndarray
        ``background + strength / sqrt(radius) * J(distance / radius)``; all arguments broadcast, and a float is
        returned where all are scalars. Infinite for a point source on the caustic. NaN where an argument is NaN.

    Raises
    ------
    InputError
        If a radius is negative or infinite, or a limb-darkening coefficient outside 0..1.

    Examples
    --------
    >>> round(fold_magnification(0.652, 1.0), 4)
    1.3931

    References
    ----------
    .. [1] Schneider P., Weiss A., 1986, A&A 164, 237
    """
    size = np.asarray(radius, dtype=np.float64)
    wrong = (size < 0) | np.isinf(size)
    if np.any(wrong):
        raise InputError(
            f"`radius` must be zero or positive and finite, got {size[wrong].flat[0]:g}; use 0 for a point"
        )
    arguments = (distance, size, strength, background, limb_mixing(limb_darkening))
    d, r, k, mu0, mixing = np.broadcast_arrays(*(np.asarray(argument, dtype=np.float64) for argument in arguments))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        # d + r and d - r are exact where they are small, so dividing last keeps 1 + x and x - 1 accurate.
        x, onset, beyond = d / r, (d + r) / r, (d - r) / r
        near = _near(x, onset, beyond, mixing) / np.sqrt(r)
        far = _far_shape(np.maximum(x, FAR), mixing) / np.sqrt(np.abs(d))
        shape = np.where(x > FAR, far, near)
        point = np.where(d < 0, 0.0, np.abs(d) ** -0.5) + 0 * mixing
        shape = np.where(r == 0, point, shape)
        return _plain(np.asarray(mu0 + np.where((k == 0) & ~np.isnan(shape), 0.0, k * shape)))


@cache
def profile_peak(limb_darkening: float = 0.0) -> ProfilePeak:
    """Peak of the fold profile of a disc.

    Parameters
    ----------
    limb_darkening : float, optional
        Linear coefficient in 0..1.

    Returns
    -------
    ProfilePeak
        Position in radii inside the caustic, and height: (0.652230, 1.393119) for a uniform disc.

    Raises
    ------
    InputError
        If the coefficient is outside 0..1.
    """
    mixing = float(limb_mixing(limb_darkening))

    def slope(x: float) -> float:
        m = (1 + x) / 2
        uniform = 4 * sqrt(2) / pi * (float(special.ellipe(m)) - float(special.ellipk(m)) / 2)
        return (1 - mixing) * uniform + mixing * sqrt(1 + x) * (1 - 2 * x)

    position = float(brentq(slope, 0.4, 0.7, xtol=1e-15, rtol=1e-14))
    return ProfilePeak(position, fold_profile(position, float(limb_darkening)))
