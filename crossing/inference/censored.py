"""A Gaussian that meets one-sided constraints: how much of it is left, and where.

A reference level is Gaussian given the detections on it. Each upper limit multiplies it by a cumulative normal, and a
total flux cannot be negative; the product has no closed form.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.special import erfcx

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["constrain"]

_MOST_SWEEPS = 6
_SETTLED = 0.01
_ROOT_HALF = np.sqrt(0.5)
_HAZARD = np.sqrt(2.0 / np.pi)
# Above this many standard deviations a constraint is met for sure, and below, `erfcx` does not overflow.
_CERTAIN = 25.0
# Constraints further off, in standard deviations, are as hopeless, and would drown the others in rounding.
_FAR = 1e6
_LEAST_VARIANCE = 1e-9


def constrain(
    upper: Floats, softness: Floats, wall: Floats | None = None, *, rough: bool = False
) -> tuple[Floats, Floats, Floats]:
    """Integral and moments of a standard normal density times one-sided constraints.

    Parameters
    ----------
    upper : (..., n) ndarray
        Where each upper limit lies, in standard deviations from the mean.
    softness : (n,) ndarray
        Standard error of each limit, in the same unit, positive.
    wall : (...) ndarray, optional
        Hard lower end.
    rough : bool
        Stop after two passes over the constraints.

    Returns
    -------
    log_mass, mean, deviation : (...) ndarrays
        Natural log of ``integral of N(x) prod Phi((upper - x)/softness) dx`` above the wall, and the mean and standard
        deviation of that product.

    Notes
    -----
    Expectation propagation [1]_: every constraint is replaced by the Gaussian that gives the right mean and variance in
    the presence of all others, in turn, until nothing changes. Exact for one constraint. The error of the log is some
    0.01, below 0.1 where limits and wall leave a narrow gap, and up to 0.3 where many limits alone, all much sharper
    than the Gaussian, end at one place.

    References
    ----------
    .. [1] Minka T. P., 2001, Proc. 17th Conf. Uncertainty in Artificial Intelligence, 362
    """
    sites = [] if wall is None else [(np.clip(wall, -_FAR, _FAR), 0.0, -1.0)]
    edges = np.clip(upper, -_FAR, _FAR)
    sites += [(edges[..., k], float(soft) ** 2, 1.0) for k, soft in enumerate(softness)]
    shape = edges.shape[:-1]
    tau, nu, total = np.ones(shape), np.zeros(shape), np.zeros(shape)
    # Precision, precision times mean, and log scale of the Gaussian that stands for each constraint.
    parts = [(np.zeros(shape), np.zeros(shape), np.zeros(shape)) for _ in sites]
    for sweep in range(2 if rough else _MOST_SWEEPS):
        for k, site in enumerate(sites):
            # No constraint widens the Gaussian; rounding may say otherwise.
            tau_rest, nu_rest = np.maximum(tau - parts[k][0], 1.0), nu - parts[k][1]
            tau, nu, log_scale = _with_site(tau_rest, nu_rest, *site)
            parts[k] = (tau - tau_rest, nu - nu_rest, log_scale)
        before = total
        total = 0.5 * (nu**2 / tau - np.log(tau)) + sum(scale for _, _, scale in parts)
        if len(sites) < 2 or (sweep and float(np.max(np.abs(total - before), initial=0.0)) < _SETTLED):
            break
    return total, nu / tau, tau**-0.5


def _with_site(tau: Floats, nu: Floats, edge: Floats, soft2: float, sign: float) -> tuple[Floats, Floats, Floats]:
    """Precision and precision times mean of a Gaussian cut at `edge`, and the log scale of what cuts it."""
    variance = 1.0 / tau
    width2 = variance + soft2
    scale = sign / np.sqrt(width2)
    u = np.minimum((edge - nu * variance) * scale, _CERTAIN)
    scaled = erfcx(u * -_ROOT_HALF)
    hazard = _HAZARD / scaled
    left = np.maximum(1.0 - variance / width2 * hazard * (u + hazard), _LEAST_VARIANCE)
    new_tau, new_nu = tau / left, (nu - hazard * scale) / left
    log_mass = np.log(0.5 * scaled) - 0.5 * u * u
    return new_tau, new_nu, log_mass - 0.5 * (new_nu**2 / new_tau - nu**2 * variance + np.log(left))
