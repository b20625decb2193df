"""Motion of the source across the caustics: effective velocities and the speed along a caustic's normal.

The caustics are those of a frozen star field: the random motions of the lens's stars move a caustic only through their
shear, and are not added.
"""

from __future__ import annotations

from functools import cache
from math import pi
from typing import TYPE_CHECKING, Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt
from scipy import special
from scipy.optimize import brentq

from crossing.errors import InputError
from crossing.optics.scales import LensScales, ScaleDraws

if TYPE_CHECKING:
    from astropy.cosmology import FLRW
    from astropy.units import Quantity

    from crossing.event import CosmologyRecord, MotionRecord

__all__ = [
    "DIPOLE_SPEED",
    "ISOTROPIC",
    "caustic_stretch",
    "effective_velocity",
    "mean_normal_component",
    "observer_velocity",
    "sample_effective_velocity",
    "sample_normal_speed",
]

Array: TypeAlias = npt.NDArray[np.float64]

DIPOLE_SPEED: Final = 369.82
"""Speed of the Sun against the cosmic microwave background [km/s] (Planck Collaboration 2020, A&A 641, A1)."""
_DIPOLE_ICRS: Final = np.radians([167.941903, -6.944260])
"""Right ascension and declination of Galactic l = 264.021, b = 48.253 deg (same paper), turned to ICRS with astropy."""

ISOTROPIC: Final = 2 / pi
"""Mean |n_u| of normals without a preferred direction."""

# (|lam_t / lam_r|, mean |n_u| per caustic length) measured on random star fields of 600 stars, 2.4e5 fields each, about
# 2 per cent errors: kappa = kappa_star = 0.2 without shear (the exact 2/pi is kept), kappa = 0.5, gamma = kappa_star =
# 0.2, and the mean of lam_t = +-0.005 at lam_r = 0.4, kappa_star = 0.01 (0.930 and 0.942).
_MEASURED_NORMALS: Final = ((0.0125, 0.936), (3 / 7, 0.736), (1.0, ISOTROPIC))
_POOL: Final = 50_000


def observer_velocity(ra_deg: float, dec_deg: float) -> tuple[float, float]:
    """Transverse velocity of the observer against the microwave background, at a position on the sky.

    Parameters
    ----------
    ra_deg, dec_deg : float
        ICRS position [deg].

    Returns
    -------
    tuple of float
        Components towards east and north [km/s]. The Earth's orbital motion (30 km/s) is not included.
    """
    ra, dec = np.radians([ra_deg, dec_deg])
    dipole_ra, dipole_dec = _DIPOLE_ICRS
    east = DIPOLE_SPEED * np.cos(dipole_dec) * np.sin(dipole_ra - ra)
    along = np.cos(dipole_dec) * np.sin(dec) * np.cos(dipole_ra - ra)
    return float(east), float(DIPOLE_SPEED * (np.sin(dipole_dec) * np.cos(dec) - along))


def effective_velocity(
    source: npt.ArrayLike | Quantity,
    lens: npt.ArrayLike | Quantity,
    observer: npt.ArrayLike | Quantity,
    *,
    lens_redshift: float,
    source_redshift: float,
    cosmology: CosmologyRecord | FLRW | str | None = None,
) -> Quantity:
    """Effective transverse velocity in the source plane, per unit of the observer's time.

    Parameters
    ----------
    source, lens, observer : array_like or Quantity, shape (..., 2)
        Transverse peculiar velocities of the three; plain numbers are in km/s. They broadcast.
    lens_redshift, source_redshift : float
        Redshifts, 0 < lens_redshift < source_redshift.
    cosmology : astropy.cosmology.FLRW, CosmologyRecord, str or None
        Planck18 by default.

    Returns
    -------
    astropy.units.Quantity, shape (..., 2)
        v_s / (1+z_s) - v_l / (1+z_l) D_s/D_l + v_o / (1+z_l) D_ls/D_l [km/s].

    Raises
    ------
    InputError
        If the last axis of a velocity has not length 2, or the redshifts are not in order.

    References
    ----------
    .. [1] Kayser R., Refsdal S., Stabell R., 1986, A&A 166, 36
    """
    from astropy import units as u

    velocities = {"source": source, "lens": lens, "observer": observer}
    stripped = [_vector(u.Quantity(velocity, u.km / u.s).value, what) for what, velocity in velocities.items()]
    factors = LensScales(float(lens_redshift), float(source_redshift), cosmology).velocity_coefficients
    return sum(factor * velocity for factor, velocity in zip(factors, stripped, strict=True)) * (u.km / u.s)


def _vector(value: Any, what: str) -> Array:
    array = np.asarray(value, dtype=np.float64)
    if array.ndim == 0 or array.shape[-1] != 2:
        raise InputError(f"`{what}` must have two components in its last axis, got shape {array.shape}; give (x, y)")
    return array


def sample_effective_velocity(
    motion: MotionRecord, scales: LensScales | ScaleDraws | None, rng: np.random.Generator, size: int
) -> Array:
    """Draws of the effective velocity before any weighting by crossings.

    Parameters
    ----------
    motion : MotionRecord
        A speed, or the two spreads and the position.
    scales : LensScales, ScaleDraws or None
        Distances; with draws of them, their number must be `size`. Not needed with a speed.
    rng : numpy.random.Generator
        Source of the draws.
    size : int
        Number of draws.

    Returns
    -------
    ndarray, shape (size, 2)
        Velocity [km/s] in the source plane, per observer time. With a known angle the components are along the x axis
        (of lam_t) and across it. Without, they are east and north for spreads, and of random direction for a speed.

    Raises
    ------
    InputError
        If neither a speed nor all of spreads, position and redshifts are known.
    """
    if motion.speed is not None:
        velocity = _turned(motion.speed.sample(rng, size), rng.uniform(0, 2 * pi, size))
    else:
        velocity = _peculiar(motion, scales, rng, size)
    if motion.angle is not None:
        velocity = _turned(np.hypot(*velocity.T), np.radians(motion.angle.sample(rng, size)))
    return velocity


def _turned(speed: Array, direction: Array) -> Array:
    return np.asarray(speed[:, None] * np.stack([np.cos(direction), np.sin(direction)], axis=-1))


def _peculiar(
    motion: MotionRecord, scales: LensScales | ScaleDraws | None, rng: np.random.Generator, size: int
) -> Array:
    if motion.lens_spread is None or motion.source_spread is None or motion.position is None:
        raise InputError("must give the speed, or lens_spread, source_spread and position", where="motion")
    if scales is None:
        raise InputError("needs the redshifts of lens and source, or give the speed itself", where="motion")
    source, lens, observer = (np.reshape(factor, (-1, 1)) for factor in scales.velocity_coefficients)
    normal = rng.standard_normal((2, size, 2))
    own = source * motion.source_spread.sample(rng, size)[:, None] * normal[0]
    cluster = lens * motion.lens_spread.sample(rng, size)[:, None] * normal[1]
    return np.asarray(own + cluster + observer * np.array(observer_velocity(*motion.position)))


def sample_normal_speed(
    motion: MotionRecord,
    scales: LensScales | ScaleDraws | None,
    rng: np.random.Generator,
    size: int,
    mean_normal: float = ISOTROPIC,
) -> Array:
    """Draws of the speed along the caustic's normal, given that a crossing has happened.

    Parameters
    ----------
    motion : MotionRecord
        A speed, or the two spreads and the position; and an angle from the x axis where it is known.
    scales : LensScales, ScaleDraws or None
        Distances; not needed with a speed.
    rng : numpy.random.Generator
        Source of the draws.
    size : int
        Number of draws.
    mean_normal : float, optional
        Mean |n_u| of the caustics' normals per unit of their length, from 2/pi (isotropic) to below 1; it matters only
        with a known angle. See `mean_normal_component`.

    Returns
    -------
    ndarray, shape (size,)
        v_perp > 0 [km/s] from p(v_perp | crossing), which is proportional to v_perp p(v_perp).

    Raises
    ------
    InputError
        If the motion is not known, or all of its speeds are zero.

    Notes
    -----
    The rate of crossings is the caustic length times |V . n|, so a speed counts in proportion to itself, and a normal
    in proportion to |cos| of its angle to the motion. Without a known angle that makes sin(angle) uniform in -1..1.

    With a known angle the normals are those of isotropic curves stretched q times along v: the normals of an ellipse.
    A straight track then meets them as it meets the ellipse, uniform in the impact parameter.
    """
    pool = max(_POOL, size)
    drawn = np.sort(np.hypot(*sample_effective_velocity(motion, _thinned(scales, rng, pool), rng, pool).T))
    if not drawn[-1] > 0:
        raise InputError("must not be zero for a crossing to happen; give a positive speed", where="motion")
    speed = _weighted_draws(drawn, drawn, rng, size)
    sine = rng.uniform(-1, 1, size)
    if motion.angle is None:
        return np.asarray(speed * np.sqrt(1 - sine**2))
    stretch = caustic_stretch(mean_normal)
    angles = np.sort(np.radians(motion.angle.sample(rng, pool)))
    angle = _weighted_draws(angles, np.hypot(np.sin(angles), stretch * np.cos(angles)), rng, size)
    # On the circle that the ellipse becomes when v is shrunk, the normal is the track's direction turned by asin(sine).
    track = np.arctan2(np.sin(angle) / stretch, np.cos(angle)) + np.arcsin(sine)
    normal_u, normal_v = np.cos(track), np.sin(track) / stretch
    cosine = (normal_u * np.cos(angle) + normal_v * np.sin(angle)) / np.hypot(normal_u, normal_v)
    return np.asarray(speed * np.abs(cosine))


def _thinned(
    scales: LensScales | ScaleDraws | None, rng: np.random.Generator, size: int
) -> LensScales | ScaleDraws | None:
    """As many draws of the distances as the pool has, taken with replacement."""
    if not isinstance(scales, ScaleDraws):
        return scales
    pick = rng.integers(0, scales.D_l.size, size)
    return ScaleDraws(
        z_lens=scales.z_lens[pick],
        z_source=scales.z_source[pick],
        D_l=scales.D_l[pick],
        D_s=scales.D_s[pick],
        D_ls=scales.D_ls[pick],
    )


def _weighted_draws(ordered: Array, weights: Array, rng: np.random.Generator, size: int) -> Array:
    """Continuous draws from weighted, sorted samples, by inverting their interpolated cumulative distribution."""
    middle = np.cumsum(weights) - weights / 2
    return np.interp(rng.uniform(0, weights.sum(), size), middle, ordered)


@cache
def caustic_stretch(mean_normal: float) -> float:
    """Axis ratio q >= 1 of the ellipse whose normals have a given mean |n_u| per length, 1 / E(1 - 1/q**2).

    Parameters
    ----------
    mean_normal : float
        Mean |n_u|, from 2/pi (circle) to below 1.

    Returns
    -------
    float
        Length along v over length along u. The mean |n_v| is `mean_normal` / q.

    Raises
    ------
    InputError
        If the mean is outside that range.
    """
    if not ISOTROPIC - 1e-9 <= mean_normal <= 0.9999:
        raise InputError(f"`mean_normal` must be between 2/pi and 0.9999, got {mean_normal:g}; 2/pi is isotropic")

    def excess(log_stretch: float) -> float:
        return 1 / float(special.ellipe(-np.expm1(-2 * log_stretch))) - mean_normal

    if excess(0.0) >= 0:
        return 1.0
    return float(np.exp(brentq(excess, 0.0, 10.0, xtol=1e-12)))


def mean_normal_component(lam_t: float, lam_r: float) -> float:
    """Mean |n_u| of the micro-caustics' normals near a macro image, per unit of caustic length.

    Parameters
    ----------
    lam_t, lam_r : float
        Eigenvalues of the macro image, |lam_t| <= |lam_r|.

    Returns
    -------
    float
        From 2/pi (no preferred direction) to 0.936 (lam_t towards 0).

    Notes
    -----
    Interpolated in ln|lam_t / lam_r| between three measured values; the dependence on kappa_star is left out, and the
    normals of sparse lenses are more aligned than this by about 0.05.
    """
    ratio, measured = np.array(_MEASURED_NORMALS).T
    floor = float(ratio[0])
    asked = abs(lam_t) / abs(lam_r) if lam_r != 0 else 1.0
    return float(np.interp(np.log(max(asked, floor)), np.log(ratio), measured))
