"""The upper limit of stellar luminosities, as a soft prior."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import log_ndtr

__all__ = ["SOFTNESS_DEX", "log_allowed", "upper_log_luminosity"]

SOFTNESS_DEX: Final = 0.2
"""Width of the limit [dex]: a star this much above it is still met, rarely."""
_COOL, _HOT = (12_000.0, 5.8), (25_000.0, 6.5)


def upper_log_luminosity(temperature_K: ArrayLike) -> NDArray[np.float64]:
    """log10 of the highest luminosity [Lsun] at a temperature [K].

    Notes
    -----
    5.8 below 12,000 K, rising linearly in log T to 6.5 at 25,000 K and constant above: the corners are from memory. The
    cool side is measured between 5.5 and 5.8, depending on the galaxy [2]_.

    References
    ----------
    .. [1] Humphreys R. M. & Davidson K., 1979, ApJ 232, 409
    .. [2] Davies B., Crowther P. A. & Beasor E. R., 2018, MNRAS 478, 3138
    """
    log_temperature = np.log10(np.asarray(temperature_K, dtype=np.float64))
    return np.interp(log_temperature, np.log10([_COOL[0], _HOT[0]]), [_COOL[1], _HOT[1]])


def log_allowed(luminosity_lsun: ArrayLike, temperature_K: ArrayLike) -> NDArray[np.float64]:
    """Natural log of the probability that a star of this luminosity and temperature exists; arguments broadcast."""
    room = upper_log_luminosity(temperature_K) - np.log10(np.asarray(luminosity_lsun, dtype=np.float64))
    return np.asarray(log_ndtr(room / SOFTNESS_DEX))
