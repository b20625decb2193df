"""Reddening by dust: the Galactic mean law, also the named law of the host's dust."""

from __future__ import annotations

from typing import Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError

__all__ = ["DEFAULT_R_V", "SHORTEST_WAVELENGTH", "dust_law", "transmission"]

Array: TypeAlias = npt.NDArray[np.float64]

DEFAULT_R_V: Final = 3.1
"""Ratio of total to selective extinction of the diffuse Galactic medium."""
SHORTEST_WAVELENGTH: Final = 0.1
"""The law's short end [um]."""

# Polynomials in y = 1/lambda - 1.82, lowest power first: equations 3a and 3b of the paper.
_OPTICAL_A: Final = (1.0, 0.17699, -0.50447, -0.02427, 0.72085, 0.01979, -0.77530, 0.32999)
_OPTICAL_B: Final = (0.0, 1.41338, 2.28305, 1.07233, -5.38434, -0.62251, 5.30260, -2.09002)


def dust_law(wavelength_um: npt.ArrayLike, r_v: float = DEFAULT_R_V) -> Array:
    """Extinction relative to the V band, A(lambda) / A(V), of Cardelli, Clayton and Mathis.

    Parameters
    ----------
    wavelength_um : array_like
        Wavelength where the dust is [um]: observed for Galactic dust, over (1 + z) for the host's.
    r_v : float, optional
        A(V) / E(B-V).

    Returns
    -------
    ndarray
        A(lambda) / A(V). Beyond 3.3 um the infrared power law (exponent -1.61) is carried on.

    Raises
    ------
    InputError
        If a wavelength is below 0.1 um, or `r_v` is not positive.

    References
    ----------
    .. [1] Cardelli J. A., Clayton G. C., Mathis J. S., 1989, ApJ 345, 245
    """
    wavelength = np.asarray(wavelength_um, dtype=np.float64)
    if np.any(wavelength < SHORTEST_WAVELENGTH):
        raise InputError(
            f"`wavelength_um` must be at least {SHORTEST_WAVELENGTH:g}, got {np.min(wavelength):g}; "
            "no light arrives from beyond the Lyman limit"
        )
    if not r_v > 0:
        raise InputError(f"`r_v` must be positive, got {r_v:g}; 3.1 is the Galactic mean")
    x = 1 / wavelength
    parts = [x < 1.1, x < 3.3, x < 8]
    a = np.select(parts, [0.574 * x**1.61, _optical(x, _OPTICAL_A), _ultraviolet_a(x)], _far_a(x))
    b = np.select(parts, [-0.527 * x**1.61, _optical(x, _OPTICAL_B), _ultraviolet_b(x)], _far_b(x))
    return np.asarray(np.where(np.isnan(x), np.nan, a + b / r_v))


def _optical(x: Array, coefficients: tuple[float, ...]) -> Array:
    return np.asarray(np.polynomial.polynomial.polyval(x - 1.82, coefficients))


def _ultraviolet_a(x: Array) -> Array:
    beyond = np.maximum(x - 5.9, 0.0)
    return np.asarray(1.752 - 0.316 * x - 0.104 / ((x - 4.67) ** 2 + 0.341) + _bend(beyond, -0.04473, -0.009779))


def _ultraviolet_b(x: Array) -> Array:
    beyond = np.maximum(x - 5.9, 0.0)
    return np.asarray(-3.090 + 1.825 * x + 1.206 / ((x - 4.62) ** 2 + 0.263) + _bend(beyond, 0.2130, 0.1207))


def _bend(beyond: Array, square: float, cube: float) -> Array:
    return np.asarray(square * beyond**2 + cube * beyond**3)


def _far_a(x: Array) -> Array:
    return np.asarray(np.polynomial.polynomial.polyval(x - 8, (-1.073, -0.628, 0.137, -0.070)))


def _far_b(x: Array) -> Array:
    return np.asarray(np.polynomial.polynomial.polyval(x - 8, (13.670, 4.257, -0.420, 0.374)))


def transmission(extinction_mag: npt.ArrayLike) -> Array:
    """Share of the light that comes through, 10**(-0.4 A).

    Parameters
    ----------
    extinction_mag : array_like
        Extinction A [mag].

    Returns
    -------
    ndarray
        Factor on the flux.
    """
    return np.asarray(10 ** (-0.4 * np.asarray(extinction_mag, dtype=np.float64)))
