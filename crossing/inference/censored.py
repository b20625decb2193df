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
_ROOT_2 = np.sqrt(2.0)
# Above this many standard deviations a constraint is met for sure, and below, `erfcx` does not overflow.
_CERTAIN = 25.0
# Constraints further off, in standard deviations, are as hopeless, and would drown the others in rounding.
_FAR = 1e6


def constrain(upper: Floats, softness: Floats, wall: Floats | None = None) -> tuple[Floats, Floats, Floats]:
    """Integral and moments of a standard normal density times one-sided constraints.

    Parameters
    ----------
    upper : (..., n) ndarray
        Where each upper limit lies, in standard deviations from the mean.
    softness : (n,) ndarray
        Standard error of each limit, in the same unit, positive.
    wall : (...) ndarray, optional
        Hard lower end.

    Returns
    -------
    log_mass, mean, deviation : (...) ndarrays
        Natural log of ``integral of N(x) prod Phi((upper - x)/softness)`` above the wall, and the mean and standard
        deviation of that product.

    Notes
    -----
    Expectation propagation: every constraint is replaced by the Gaussian that gives the right mean and variance in the
    presence of all others, in turn, until nothing changes. Exact for one constraint; the error of the log is some 0.01,
    and below 0.1 where limits and wall leave a narrow gap.

    References
    ----------
    .. [1] Minka T. P., 2001, Proc. 17th Conf. Uncertainty in Artificial Intelligence, 362
    """
    count = upper.shape[-1]
    walls = [] if wall is None else [(np.clip(wall, -_FAR, _FAR), 0.0, -1.0)]
    edges = np.clip(upper, -_FAR, _FAR)
    sites = [*walls, *((edges[..., k], float(softness[k]), 1.0) for k in range(count))]
    shape = np.broadcast_shapes(upper.shape[:-1], () if wall is None else wall.shape)
    tau, nu = np.ones(shape), np.zeros(shape)
    # Precision, precision times mean, and log scale of the Gaussian that stands for each constraint.
    parts = [(np.zeros(shape), np.zeros(shape), np.zeros(shape)) for _ in sites]
    total = np.zeros(shape)
    for _ in range(_MOST_SWEEPS):
        for k, (edge, soft, sign) in enumerate(sites):
            own_tau, own_nu, _ = parts[k]
            # No constraint widens the Gaussian; rounding may say otherwise.
            tau_rest, nu_rest = np.maximum(tau - own_tau, 1.0), nu - own_nu
            tau, nu, log_scale = _with_site(tau_rest, nu_rest, edge, soft, sign)
            parts[k] = (tau - tau_rest, nu - nu_rest, log_scale)
        before = total
        total = 0.5 * (nu**2 / tau - np.log(tau)) + sum(scale for _, _, scale in parts)
        if len(sites) < 2 or float(np.max(np.abs(total - before), initial=0.0)) < _SETTLED:
            break
    return total, nu / tau, tau**-0.5


def _with_site(tau: Floats, nu: Floats, edge: Floats, soft: float, sign: float) -> tuple[Floats, Floats, Floats]:
    """Precision and precision times mean of a Gaussian cut at `edge`, and the log scale of what cuts it."""
    variance = 1.0 / tau
    mean = nu * variance
    width2 = variance + soft**2
    width = np.sqrt(width2)
    u = np.minimum(sign * (edge - mean) / width, _CERTAIN)
    scaled = erfcx(u / -_ROOT_2)
    log_mass = np.log(0.5 * scaled) - 0.5 * u**2
    hazard = np.sqrt(2.0 / np.pi) / scaled
    # Rounding must not take more of the variance than a cut can.
    left = np.maximum(1.0 - variance / width2 * hazard * (u + hazard), 0.3 / (1.0 + u**2))
    new_tau = tau / left
    new_nu = (mean - sign * variance * hazard / width) * new_tau
    return new_tau, new_nu, log_mass - 0.5 * (new_nu**2 / new_tau - nu**2 / tau - np.log(new_tau / tau))
