"""Deflection of a uniform rectangular sheet: what a rectangle of stars has in the mean.

The rectangle is |x| < a, |y| < b with convergence kappa. The conjugate deflection alpha_x - i alpha_y is analytic up to
a term kappa conj(z) inside: it is a Taylor series like that of far stars.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.shooting.compiled import strict_kernel

__all__ = ["sheet_deflection", "sheet_series"]


def sheet_deflection(
    x: ArrayLike, y: ArrayLike, half_width: float, half_height: float, kappa: float = 1.0
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Deflection of the sheet, everywhere.

    Parameters
    ----------
    x, y : array_like
        Positions.
    half_width, half_height : float
        Half sizes a, b of the rectangle.
    kappa : float
        Its convergence.

    Returns
    -------
    tuple of ndarray
        Deflection along x and y, in the unit of the positions.

    Notes
    -----
    With F(X, Y) = (Y/2) ln(X^2 + Y^2) + X arctan(Y/X), alpha_x is kappa/pi times the double difference of F over the
    edges, and alpha_y the same with F(Y, X). Textbook potential theory.
    """
    x, y = np.broadcast_arrays(np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64))
    first, second = np.zeros(x.shape), np.zeros(x.shape)
    for sign_x in (1.0, -1.0):
        for sign_y in (1.0, -1.0):
            to_x, to_y = x + sign_x * half_width, y + sign_y * half_height
            first += sign_x * sign_y * _edge(to_x, to_y)
            second += sign_x * sign_y * _edge(to_y, to_x)
    return kappa / np.pi * first, kappa / np.pi * second


def _edge(one: NDArray[np.float64], two: NDArray[np.float64]) -> NDArray[np.float64]:
    square = one**2 + two**2
    with np.errstate(divide="ignore", invalid="ignore"):
        angle = np.where(one == 0.0, 0.0, one * np.arctan(two / one))
        return np.where(square == 0.0, 0.0, 0.5 * two * np.log(square)) + angle


@strict_kernel
def _edge_value(one: float, two: float) -> float:
    square = one * one + two * two
    value = 0.0
    if square > 0.0:
        value = 0.5 * two * np.log(square)
    if one != 0.0:
        value += one * np.arctan(two / one)
    return value


@strict_kernel
def _angle(one: float, two: float) -> float:
    if one != 0.0:
        return np.arctan(two / one)
    return 0.5 * np.pi if two > 0.0 else (-0.5 * np.pi if two < 0.0 else 0.0)


@strict_kernel
def sheet_series(
    x: float,
    y: float,
    a: float,
    b: float,
    kappa: float,
    inside: bool,
    count: int,
    real: NDArray[np.float64],
    imag: NDArray[np.float64],
) -> None:
    """Subtract the sheet from a series: Taylor coefficients at (x, y) of the analytic part of its conjugate deflection.

    Inside, the analytic part is what remains without ``kappa * conj(z)``. The series converges up to the nearest
    corner.
    """
    scale = kappa / np.pi
    a1 = a2 = a1x = a2y = cross = 0.0
    for i in range(2):
        sign_x = 1.0 - 2.0 * i
        for j in range(2):
            sign_y = 1.0 - 2.0 * j
            sign = sign_x * sign_y
            one, two = x + sign_x * a, y + sign_y * b
            a1 += sign * _edge_value(one, two)
            a2 += sign * _edge_value(two, one)
            a1x += sign * _angle(one, two)
            a2y += sign * _angle(two, one)
            square = one * one + two * two
            if square > 0.0:
                cross += sign * 0.5 * np.log(square)
                # second derivative of -i Z (log Z - 1) is -i/Z; each further one brings -(k-2)/Z, over k!
                inverse = complex(one, -two) / square
                power = -1j * scale * sign * inverse
                for k in range(2, count):
                    term = power / (k * (k - 1.0))
                    real[k] -= term.real
                    imag[k] -= term.imag
                    power *= -inverse
    value = complex(scale * a1, -scale * a2)
    if inside:
        value -= kappa * complex(x, -y)
    real[0] -= value.real
    imag[0] -= value.imag
    if count > 1:
        real[1] -= 0.5 * scale * (a1x - a2y)
        imag[1] += scale * cross
