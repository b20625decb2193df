"""Magnification of a disc out of a map for a point: convolution with the exact weight of every pixel."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError

if TYPE_CHECKING:
    from crossing.shooting.maps.magnification_map import MagnificationMap

__all__ = ["LEAST_PIXELS", "convolve_map", "disc_weights"]

LEAST_PIXELS = 2.0
"""Smallest radius in pixels; below that the pixels' own size shapes the result."""

# Rows that are transformed together, in kernels: bounds the memory at little cost.
_BAND = 4
_LEAST_BAND = 256


def disc_weights(radius: float, limb_darkening: float = 0.0) -> NDArray[np.float64]:
    """Share of a disc's light that falls on each pixel around the one that its centre is in the middle of.

    Parameters
    ----------
    radius : float
        Radius [pixels].
    limb_darkening : float
        Linear coefficient u in 0..1.

    Returns
    -------
    ndarray, shape (2 n + 1, 2 n + 1)
        Shares, n = ceil(radius - 1/2); they sum to 1.

    Notes
    -----
    With F the light in the corner 0 < x < X, 0 < y < Y, a pixel's share is the double difference of F at its corners.
    For a uniform disc F is an area. For I = sqrt(1 - r^2) it is a part of a ball, with Z = sqrt(1 - X^2 - Y^2):
    ``3 F = X Y Z + X (3-X^2)/2 atan(Y/Z) + Y (3-Y^2)/2 atan(X/Z) - atan(X Y/Z)``; beyond the rim Z stays 0.
    """
    reach = max(0, int(np.ceil(radius - 0.5)))
    edges = np.clip((np.arange(-reach, reach + 2) - 0.5) / radius, -1.0, 1.0)
    X, Y = np.abs(edges)[None, :], np.abs(edges)[:, None]
    corner = (1.0 - limb_darkening) * _flat_corner(X, Y) + limb_darkening * _ball_corner(X, Y)
    signed = np.sign(edges)[None, :] * np.sign(edges)[:, None] * corner
    weights = np.maximum(np.diff(np.diff(signed, axis=0), axis=1), 0.0)  # rounding at the rim
    return np.asarray(weights / weights.sum())


def _flat_corner(X: NDArray[np.float64], Y: NDArray[np.float64]) -> NDArray[np.float64]:
    """Area of the unit disc in 0 < x < X, 0 < y < Y, for X, Y in 0..1."""
    beyond = np.pi / 4 - _segment(X) - _segment(Y)
    return np.where(X**2 + Y**2 <= 1.0, X * Y, beyond)


def _segment(t: NDArray[np.float64]) -> NDArray[np.float64]:
    """Area of the quarter disc with x > t."""
    return np.asarray(0.5 * (np.arccos(t) - t * np.sqrt(1.0 - t**2)))


def _ball_corner(X: NDArray[np.float64], Y: NDArray[np.float64]) -> NDArray[np.float64]:
    """Integral of sqrt(1 - r^2) over 0 < x < X, 0 < y < Y, for X, Y in 0..1."""
    Z = np.sqrt(np.maximum(1.0 - X**2 - Y**2, 0.0))
    sides = X * (3.0 - X**2) * np.arctan2(Y, Z) + Y * (3.0 - Y**2) * np.arctan2(X, Z)
    return np.asarray((X * Y * Z + 0.5 * sides - np.arctan2(X * Y, Z)) / 3.0)


def convolve_map(point: MagnificationMap, radius: float, limb_darkening: float) -> MagnificationMap:
    """See `MagnificationMap.convolve`."""
    _check(point, radius, limb_darkening)
    weights = disc_weights(radius / point.pixel_size, limb_darkening)
    lost = len(weights) - 1
    rows, columns = point.values.shape
    if lost >= min(rows, columns):
        raise InputError(
            f"`radius` must leave room for the disc on the map, got {radius:g} of {point.width:g} x {point.height:g}; "
            "make a larger map"
        )
    squared = weights**2
    error = None if point.error is None else np.sqrt(_convolved(point.error**2, squared))
    values = _convolved(point.values, weights)
    estimate = point.error_estimate * float(np.sqrt(squared.sum()))
    if error is not None and (values > 0.0).any():
        estimate = float(np.sqrt(np.mean((error[values > 0.0] / values[values > 0.0]) ** 2)))
    return replace(
        point,
        values=values,
        error=error,
        error_estimate=estimate,
        width=point.pixel_size * (columns - lost),
        height=point.pixel_size * (rows - lost),
        source_radius=radius,
        limb_darkening=limb_darkening,
    )


def _check(point: MagnificationMap, radius: float, limb_darkening: float) -> None:
    if point.source_radius > 0.0:
        raise InputError(f"the map is that of a disc of {point.source_radius:g} already; take the map of a point")
    if not LEAST_PIXELS * point.pixel_size <= radius < np.inf:
        raise InputError(
            f"`radius` must be at least {LEAST_PIXELS:g} pixels of {point.pixel_size:g}, got {radius:g}; "
            "make a finer map, or follow a track"
        )
    if not 0.0 <= limb_darkening <= 1.0:
        raise InputError(f"`limb_darkening` must be between 0 and 1, got {limb_darkening:g}")


def _convolved(image: NDArray[np.float64], weights: NDArray[np.float64]) -> NDArray[np.float64]:
    """Convolve where the kernel lies wholly on the image, in bands of rows; nothing falls below zero."""
    from scipy.signal import oaconvolve

    lost = len(weights) - 1
    out = np.empty((image.shape[0] - lost, image.shape[1] - lost))
    band = max(_LEAST_BAND, _BAND * len(weights))
    for start in range(0, len(out), band):
        stop = min(start + band, len(out))
        # Fourier transforms leave rounding of either sign where the map is nearly dark.
        np.maximum(oaconvolve(image[start : stop + lost], weights, mode="valid"), 0.0, out=out[start:stop])
    return out
