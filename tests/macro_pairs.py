"""Mirrored knots of known lenses, with the errors of their positions: an exact quadratic lens and a mass profile."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq, fsolve

from crossing.event import MacroRecord, PairRecord, Value
from crossing.optics.macro.mirror_pairs import state_at
from crossing.optics.macro.pair_model import Fold
from crossing.optics.macro.profiles import MassProfile
from crossing.optics.macro.sky_frame import sky_from_offsets

ORIGIN = (150.1, 2.2)
"""RA, Dec [deg] that offsets are counted from."""
DISTANCE = 20.0
"""Distance of the cluster's centre [arcsec]."""
_LEAST_SEPARATION, _MOST_SEPARATION = 0.2, 2.0


@dataclass(frozen=True, kw_only=True)
class PairSet:
    """Simulated pairs and the truth at the event; offsets to east and north [arcsec]."""

    record: MacroRecord
    lam_t: float
    lam_r: float
    gradient: float
    """Along the stretch at the event."""
    distance_perp: float
    """Of the sign of lam_t, lam_t over the whole gradient there."""
    line_angle: float
    """Position angle of the critical curve at the mean midpoint [deg]."""


def sky(offset: np.ndarray) -> tuple[float, float]:
    """RA, Dec [deg] of an offset."""
    ra, dec = sky_from_offsets(ORIGIN, *offset)
    return float(ra), float(dec)


def records(
    rng: np.random.Generator, images: list[tuple[np.ndarray, np.ndarray, float]], error: float, mu_error: float | None
) -> tuple[PairRecord, ...]:
    """Pairs as observed; `mu_error` is relative."""
    out = []
    for first, second, mu in images:
        magnification = None
        if mu_error is not None:
            # A normal error of 1/mu, as magnifications of lens models have it.
            seen = mu / (1 + mu_error * rng.standard_normal())
            magnification = Value.normal(seen, mu_error / mu * seen**2, lower=0)
        a, b = (image + error * rng.standard_normal(2) for image in (first, second))
        out.append(PairRecord(first=sky(a), second=sky(b), position_error=error, magnification=magnification))
    return tuple(out)


def local_set(rng: np.random.Generator, pairs: int, error: float, mu_error: float | None, *, cubic: bool) -> PairSet:
    """Pairs of an exact local lens whose numbers are drawn from the solver's priors; else a quadratic one."""
    while True:
        angle, tilt = rng.uniform(0, 2 * np.pi), rng.uniform(0.5, np.pi - 0.5)
        size = 0.05 * 10 ** (0.3 * rng.standard_normal())
        gx, gy, h = size * np.sin(tilt), -size * np.cos(tilt), 0.5 * size * rng.standard_normal()
        lam_r = np.exp(-rng.uniform(0, np.log(4)))
        bend = -size / DISTANCE * rng.normal(-1, 1) if cubic else 0.0
        turn = 2 / lam_r * rng.normal(1, 0.7) if cubic else 0.0
        c, s = np.cos(tilt), np.sin(tilt)
        seconds = turn * gy**2 + bend * c**2, turn * gy * h + bend * c * s, turn * h**2 + bend * s**2
        numbers = [np.array([one]) for one in (gx, gy, h, lam_r, *seconds)]
        fold = Fold(np.array([angle]), np.zeros((1, 2)), *numbers)
        along = np.array([c, s])
        places = np.linspace(-1.2, 1.2, pairs) + rng.uniform(-0.2, 0.2, pairs)
        images = [_mate(*_laws(fold), t * along, rng.uniform(0.15, 0.5) * np.eye(2)[0]) for t in places]
        if all(images):
            break
    axes = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    event = axes @ (rng.uniform(-0.3, 0.3) * along + [rng.uniform(-0.4, 0.4), 0])
    slope = axes @ [gx, gy]
    truth = state_at(fold, event)
    lam_t, gradient, across = (float(one[0]) for one in (truth.lam_t, truth.gradient_x, truth.gradient_y))
    turned = [(axes @ a, axes @ b, mu) for a, b, mu in images]
    return PairSet(
        record=MacroRecord(
            way="mirror_pairs",
            position=sky(event),
            mirror_pairs=records(rng, turned, error, mu_error),
            centre=sky(-DISTANCE * slope / np.hypot(*slope)),
        ),
        lam_t=lam_t,
        lam_r=float(truth.lam_r[0]),
        gradient=gradient,
        distance_perp=lam_t / np.hypot(gradient, across),
        line_angle=_along_curve(*_turned(state_at(fold, _middle(turned)))),
    )


def _middle(images):
    return np.mean([(a + b) / 2 for a, b, _ in images], axis=0)


def _turned(state):
    """Gradient of lam_t to east and north."""
    angle = np.radians(90 - float(state.stretch_angle[0]))
    gx, gy = float(state.gradient_x[0]), float(state.gradient_y[0])
    return np.cos(angle) * gx - np.sin(angle) * gy, np.sin(angle) * gx + np.cos(angle) * gy


def _along_curve(east, north):
    """Position angle [deg] at right angles to a gradient."""
    return float(90 - np.degrees(np.arctan2(east, -north))) % 180


def _laws(fold):
    """Source position and determinant of the Jacobian of one local lens."""

    def determinant(z):
        xx, xy, yy = (float(one[0]) for one in fold.jacobian(*z))
        return xx * yy - xy**2

    return lambda z: np.array([float(one[0]) for one in fold.source(*z)]), determinant


def _mate(source, determinant, middle, half):
    """Both images of a knot, one of them given, and the mean of their magnifications; None without a second."""
    first = middle + half
    goal = source(first)
    found, _, good, _ = fsolve(
        lambda z: (source(z) - goal) / np.hypot(*(z - first)), middle - half, full_output=True, xtol=1e-13
    )
    apart = np.hypot(*(found - first))
    product = determinant(first) * determinant(found)
    if good != 1 or not _LEAST_SEPARATION < apart < _MOST_SEPARATION or product > 0:
        return None
    return first, found, 1 / np.sqrt(abs(product))


def lens_set(
    rng: np.random.Generator, profile: MassProfile, bearing: float, pairs: int, error: float, mu_error: float
) -> PairSet | None:
    """Pairs of a mass profile around its critical curve, at a direction from its centre [rad, from east to north].

    None where hardly any knot has a mate nearby.
    """
    outward = np.array([np.cos(bearing), np.sin(bearing)])
    across = np.array([-outward[1], outward[0]])

    def lam_t(z):
        # The tangential eigenvalue: the smaller one changes at the lens's centre to the other.
        return float(1 - profile.convergence(*z) - np.hypot(*profile.shear(*z)))

    def slope(z, step=1e-4):
        return np.array([lam_t(z + step * e) - lam_t(z - step * e) for e in np.eye(2)]) / (2 * step)

    def critical(t):
        foot = t * across
        r = brentq(lambda r: lam_t(foot + r * outward), 8.0, 60.0, xtol=1e-12)
        return foot + r * outward

    def stretch(z):
        return np.arctan2(*(float(one) for one in profile.shear(*z)[::-1])) / 2

    def direction(z):
        angle = stretch(z)
        return np.array([np.cos(angle), np.sin(angle)])

    images = []
    for _ in range(10 * pairs):
        k = len(images)
        if k == pairs:
            break
        middle = critical(2.4 * (k / (pairs - 1) - 0.5) + rng.uniform(-0.2, 0.2))
        pair = _mate(
            lambda z: np.array([float(one) for one in profile.source_position(*z)]),
            lambda z: float(np.prod(profile.eigenvalues(*z))),
            middle,
            rng.uniform(0.15, 0.5) * direction(middle),
        )
        if pair is not None:
            images.append(pair)
    if len(images) < pairs:
        return None
    foot = critical(rng.uniform(-0.8, 0.8))
    event = foot + rng.uniform(-0.5, 0.5) * direction(foot)
    value, gradient = lam_t(event), slope(event)
    return PairSet(
        record=MacroRecord(
            way="mirror_pairs",
            position=sky(event),
            mirror_pairs=records(rng, images, error, mu_error),
            centre=sky(np.zeros(2)),
        ),
        lam_t=value,
        lam_r=float(profile.eigenvalues(*event)[1]),
        gradient=abs(float(gradient @ direction(event))),
        distance_perp=value / float(np.hypot(*gradient)),
        line_angle=_along_curve(*slope(_middle(images))),
    )
