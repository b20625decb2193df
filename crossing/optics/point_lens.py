"""Closed forms of a single point lens; lengths in units of its Einstein radius."""

from __future__ import annotations

from typing import NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError

__all__ = ["PointImages", "disc_on_axis", "disc_on_rim", "point_images", "point_impact", "point_magnification"]

Array: TypeAlias = npt.NDArray[np.float64]
_FAR = 1e100


class PointImages(NamedTuple):
    """The two images of a point source."""

    outer: Array
    """Position of the minimum, on the source's side [theta_E]."""
    inner: Array
    """Position of the saddle, on the other side [theta_E]."""
    mu_outer: Array
    """Signed magnification of the minimum, above 1."""
    mu_inner: Array
    """Signed magnification of the saddle, below 0; the two sum to 1."""


def point_magnification(u: npt.ArrayLike) -> Array:
    """Total magnification of a point source, (u**2 + 2) / (u sqrt(u**2 + 4)).

    Parameters
    ----------
    u : array_like
        Distance of the source from the lens [theta_E], of either sign.

    Returns
    -------
    ndarray
        Magnification; infinite at u = 0, 1 far away.

    References
    ----------
    .. [1] Paczynski B., 1986, ApJ 304, 1
    """
    distance = np.minimum(np.abs(np.asarray(u, dtype=np.float64)), _FAR)
    with np.errstate(divide="ignore"):
        return np.asarray((distance + 2 / distance) / np.hypot(distance, 2))


def point_impact(magnification: npt.ArrayLike) -> Array:
    """Distance at which a point source is magnified by a given factor, the inverse of `point_magnification`.

    Parameters
    ----------
    magnification : array_like
        Total magnification A > 1.

    Returns
    -------
    ndarray
        u >= 0 [theta_E], from u**2 = 2 A / sqrt(A**2 - 1) - 2.

    Raises
    ------
    InputError
        If a magnification is not above 1.
    """
    total = np.asarray(magnification, dtype=np.float64)
    if np.any(total <= 1):
        raise InputError(f"`magnification` must be above 1, got {np.min(total):g}; a point lens never dims")
    root = np.sqrt((total - 1) * (total + 1))
    # 2 (A - root)/root, with A - root = 1/(A + root): no cancellation at high magnification.
    return np.asarray(np.sqrt(2 / (root * (total + root))))


def point_images(u: npt.ArrayLike) -> PointImages:
    """Positions and magnifications of the two images of a point source.

    Parameters
    ----------
    u : array_like
        Position of the source, u > 0 [theta_E].

    Returns
    -------
    PointImages
        Arrays of the shape of `u`.

    Raises
    ------
    InputError
        If a position is not positive: at 0 the image is a ring.
    """
    position = np.asarray(u, dtype=np.float64)
    if np.any(position <= 0):
        raise InputError(f"`u` must be positive, got {np.min(position):g}; at 0 the image is a ring")
    outer = np.asarray((position + np.hypot(position, 2)) / 2)
    total = point_magnification(position)
    # |mu_inner| = (A - 1)/2 = 1/(outer**4 - 1) exactly; this form keeps its digits when the saddle is faint.
    faint = np.asarray(1 / (outer**4 - 1))
    return PointImages(outer, np.asarray(-1 / outer), np.asarray((total + 1) / 2), -faint)


def disc_on_axis(radius: npt.ArrayLike) -> Array:
    """Magnification of a uniform disc centred behind the lens, sqrt(1 + 4 / rho**2).

    Parameters
    ----------
    radius : array_like
        Radius rho > 0 of the disc [theta_E].

    Returns
    -------
    ndarray
        Magnification.

    Raises
    ------
    InputError
        If a radius is not positive.
    """
    rho = _positive(radius)
    return np.asarray(np.hypot(rho, 2) / rho)


def disc_on_rim(radius: npt.ArrayLike) -> Array:
    """Magnification of a uniform disc whose rim touches the line of sight to the lens.

    Parameters
    ----------
    radius : array_like
        Radius rho > 0 of the disc [theta_E].

    Returns
    -------
    ndarray
        Magnification, (2/rho + (1 + rho**2)/rho**2 [pi/2 + asin((rho**2 - 1)/(rho**2 + 1))]) / pi.

    Raises
    ------
    InputError
        If a radius is not positive.

    References
    ----------
    .. [1] Witt H. J., Mao S., 1994, ApJ 430, 505
    """
    rho = _positive(radius)
    # pi/2 + asin((rho**2 - 1)/(rho**2 + 1)) = 2 atan(rho), which keeps its digits for small discs.
    return np.asarray(2 / np.pi * (1 / rho + (1 + 1 / rho**2) * np.arctan(rho)))


def _positive(radius: npt.ArrayLike) -> Array:
    rho = np.asarray(radius, dtype=np.float64)
    if np.any(rho <= 0):
        raise InputError(f"`radius` must be positive, got {np.min(rho):g}; use point_magnification for a point")
    return rho
