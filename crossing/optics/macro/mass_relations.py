"""Mass of a cluster from the velocity dispersion of its members, by published relations."""

from __future__ import annotations

from math import sqrt
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.constants import GM_SUN_OVER_C2, LIGHT_SPEED, MPC

__all__ = ["DEFAULT_RELATION", "MASS_RELATIONS", "PROJECTION_SCATTER", "Relation", "mass_from_dispersion"]

DEFAULT_RELATION: Final = "evrard 2008"
"""Relation where none is named."""
PROJECTION_SCATTER: Final = 0.12
"""Standard deviation of ln(dispersion) between lines of sight to one cluster (White, Cohn & Smit 2010, MNRAS 408, 1818,
from memory); carried for masses, beside the scatter of the relation itself."""


class Relation(NamedTuple):
    """A published relation between the mass M200c and the one-dimensional dispersion."""

    reference: str
    """Where it was published."""
    scatter: float
    """Standard deviation of ln(dispersion) at fixed mass."""
    slope: float
    """d ln(dispersion) / d ln(mass)."""
    amplitude: float | None
    """Dispersion [km/s] at h(z) M200c = 1e15 Msun; None for the closed forms."""
    closed: float | None
    """M200c 10 G H(z) / dispersion**3 of the closed forms."""


MASS_RELATIONS: Final[dict[str, Relation]] = {
    "evrard 2008": Relation("Evrard et al. 2008, ApJ 672, 122", 0.0426, 0.3361, 1082.9, None),
    # Scatter from memory.
    "munari 2013": Relation("Munari et al. 2013, MNRAS 430, 2638", 0.05, 0.364, 1177.0, None),
    "carlberg 1997": Relation("Carlberg et al. 1997, ApJ 478, 462", 0.0, 1 / 3, None, 3 * sqrt(3)),
    "isothermal": Relation("singular isothermal sphere, in closed form", 0.0, 1 / 3, None, 2 * sqrt(2)),
}
"""Relations by the name that event files give them."""


def mass_from_dispersion(
    dispersion: npt.ArrayLike, hubble: float, relation: str = DEFAULT_RELATION
) -> npt.NDArray[np.float64]:
    """Mass within 200 critical densities from the velocity dispersion along the line of sight.

    Parameters
    ----------
    dispersion : array_like
        One-dimensional dispersion [km/s].
    hubble : float
        Hubble constant at the cluster's redshift [km/(s Mpc)].
    relation : str
        Key of `MASS_RELATIONS`.

    Returns
    -------
    ndarray
        M200c [Msun], shape of `dispersion`.

    Raises
    ------
    InputError
        If the relation is unknown, or a number is not positive.

    Notes
    -----
    Evrard and Munari fit sigma = A (h(z) M200c / 1e15 Msun)**slope. The isothermal sphere has 2 sqrt(2) sigma**3 /
    (10 G H), and Carlberg's r200 = sqrt(3) sigma / (10 H) with M = 3 sigma**2 r / G has 3 sqrt(3) of the same.
    """
    if relation not in MASS_RELATIONS:
        raise InputError(f"`relation` must be one of {', '.join(MASS_RELATIONS)}, got {relation!r}; choose one")
    sigma = np.asarray(dispersion, dtype=np.float64)
    if not np.all(sigma > 0) or not hubble > 0:
        raise InputError("`dispersion` and `hubble` must be positive; give them in km/s and km/(s Mpc)")
    law = MASS_RELATIONS[relation]
    if law.amplitude is not None:
        return np.asarray(1e15 / (hubble / 100) * (sigma / law.amplitude) ** (1 / law.slope))
    return (law.closed or 1.0) * (1e3 * sigma) ** 3 / (10 * 1e3 * hubble / MPC * GM_SUN_OVER_C2 * LIGHT_SPEED**2)
