"""Physical constants, SI unless a name says otherwise: IAU nominal solar values and exact SI definitions."""

from __future__ import annotations

from math import pi
from typing import Final

__all__ = [
    "ARCSEC",
    "AU",
    "BOLTZMANN",
    "DAY",
    "GM_SUN_OVER_C2",
    "LIGHT_SPEED",
    "L_SUN",
    "MPC",
    "PARSEC",
    "PLANCK",
    "R_SUN",
    "STEFAN_BOLTZMANN",
    "YEAR",
]

# Exact by the definition of the SI (2019).
LIGHT_SPEED: Final = 299_792_458.0
PLANCK: Final = 6.626_070_15e-34
BOLTZMANN: Final = 1.380_649e-23
STEFAN_BOLTZMANN: Final = 2 * pi**5 * BOLTZMANN**4 / (15 * PLANCK**3 * LIGHT_SPEED**2)

# IAU 2015 Resolution B3: Prsa et al. 2016, AJ 152, 41.
R_SUN: Final = 6.957e8
L_SUN: Final = 3.828e26
GM_SUN_OVER_C2: Final = 1.327_124_4e20 / LIGHT_SPEED**2

# IAU 2012 Resolution B2 and the parsec that follows from it.
AU: Final = 149_597_870_700.0
PARSEC: Final = AU * 648_000 / pi
MPC: Final = 1e6 * PARSEC

ARCSEC: Final = pi / 648_000
DAY: Final = 86_400.0
YEAR: Final = 365.25 * DAY
