"""Distances and natural scales of a lens and a source at two redshifts."""

from __future__ import annotations

from dataclasses import dataclass, field
from math import pi, sqrt
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.constants import ARCSEC, AU, DAY, GM_SUN_OVER_C2, LIGHT_SPEED, MPC, PARSEC, R_SUN, YEAR

if TYPE_CHECKING:
    from astropy.cosmology import FLRW
    from astropy.units import Quantity

    from crossing.event import CosmologyRecord, Value

__all__ = ["LensScales", "ScaleDraws", "cosmology_from", "einstein_radius", "sample_scales"]

Array: TypeAlias = npt.NDArray[np.float64]

_UAS = 1e-6 * ARCSEC
_GRID_POINTS = 65


def cosmology_from(choice: CosmologyRecord | FLRW | str | None = None) -> FLRW:
    """Cosmology of a record, a name or an astropy object.

    Parameters
    ----------
    choice : CosmologyRecord, astropy.cosmology.FLRW, str or None
        A record with H0 and Om0 means a flat model with a cosmological constant and no radiation; None is Planck18.

    Returns
    -------
    astropy.cosmology.FLRW
        The cosmology.

    Raises
    ------
    InputError
        If a name is not one of astropy's, or only one of H0 and Om0 is given.
    """
    from astropy import cosmology

    if isinstance(choice, cosmology.FLRW):
        return choice
    H0, Om0 = getattr(choice, "H0", None), getattr(choice, "Om0", None)
    if H0 is not None and Om0 is not None:
        return cosmology.FlatLambdaCDM(H0=H0, Om0=Om0)
    if H0 is not None or Om0 is not None:
        raise InputError("`H0` and `Om0` must be given together, got one of them; add the other", where="cosmology")
    name = choice if isinstance(choice, str) else getattr(choice, "name", None) or "Planck18"
    if name not in cosmology.available:
        known = ", ".join(sorted(cosmology.available))
        raise InputError(f"`name` must be one of {known}, got {name!r}; or give H0 and Om0", where="cosmology.name")
    return getattr(cosmology, name)


def _distance_between(D_Ml: Any, D_Ms: Any, z_source: Any, curvature: float) -> Any:
    """Angular-diameter distance [Mpc] between two transverse comoving ones; `curvature` is Ok0 (H0/c)**2 [Mpc-2]."""
    bent = D_Ms * np.sqrt(1 + curvature * D_Ml**2) - D_Ml * np.sqrt(1 + curvature * D_Ms**2)
    return bent / (1 + z_source)


def _curvature(cosmology: FLRW) -> float:
    return float(cosmology.Ok0 / cosmology.hubble_distance.to_value("Mpc") ** 2)


def _check_redshifts(z_lens: float, z_source: float) -> None:
    if not 0 < z_lens < np.inf:
        raise InputError(f"lens redshift must be positive, got {z_lens:g}; give the cluster's redshift")
    if not z_lens < z_source < np.inf:
        raise InputError(
            f"source redshift must be larger than the lens redshift {z_lens:g}, got {z_source:g}; check which is which"
        )


@dataclass(frozen=True, slots=True)
class LensScales:
    """Distances and scales of one pair of redshifts.

    Parameters
    ----------
    z_lens, z_source : float
        Redshifts, 0 < z_lens < z_source.
    cosmology : CosmologyRecord, astropy.cosmology.FLRW, str or None
        Planck18 by default; see `cosmology_from`.

    Raises
    ------
    InputError
        If the redshifts are not in order.
    """

    z_lens: float
    """Redshift of the lens."""
    z_source: float
    """Redshift of the source."""
    cosmology: CosmologyRecord | FLRW | str | None = None
    """Cosmology, kept as it was given."""
    D_l: float = field(init=False)
    """Angular-diameter distance to the lens [Mpc]."""
    D_s: float = field(init=False)
    """Angular-diameter distance to the source [Mpc]."""
    D_ls: float = field(init=False)
    """Angular-diameter distance from the lens to the source [Mpc]."""

    def __post_init__(self) -> None:
        _check_redshifts(self.z_lens, self.z_source)
        model = cosmology_from(self.cosmology)
        D_Ml, D_Ms = (
            float(model.comoving_transverse_distance(z).to_value("Mpc")) for z in (self.z_lens, self.z_source)
        )
        object.__setattr__(self, "D_l", D_Ml / (1 + self.z_lens))
        object.__setattr__(self, "D_s", D_Ms / (1 + self.z_source))
        object.__setattr__(self, "D_ls", float(_distance_between(D_Ml, D_Ms, self.z_source, _curvature(model))))

    @property
    def luminosity_distance(self) -> float:
        """Luminosity distance to the source [Mpc]."""
        return self.D_s * (1 + self.z_source) ** 2

    @property
    def sigma_crit(self) -> float:
        """Critical surface density c**2 D_s / (4 pi G D_l D_ls) [Msun/pc**2]."""
        return self.D_s / (4 * pi * GM_SUN_OVER_C2 * self.D_l * self.D_ls * MPC) * PARSEC**2

    @property
    def einstein_radius_uas(self) -> float:
        """Angular Einstein radius of one solar mass [microarcsec]."""
        return sqrt(4 * GM_SUN_OVER_C2 * self.D_ls / (self.D_l * self.D_s * MPC)) / _UAS

    @property
    def einstein_radius_arcsec(self) -> float:
        """Angular Einstein radius of one solar mass [arcsec]."""
        return 1e-6 * self.einstein_radius_uas

    @property
    def einstein_radius_source_au(self) -> float:
        """Einstein radius of one solar mass in the source plane [au]."""
        return self.einstein_radius_uas * _UAS * self.D_s * MPC / AU

    @property
    def einstein_radius_lens_au(self) -> float:
        """Einstein radius of one solar mass in the lens plane [au]."""
        return self.einstein_radius_uas * _UAS * self.D_l * MPC / AU

    @property
    def einstein_radius_source_rsun(self) -> float:
        """Einstein radius of one solar mass in the source plane, in solar radii."""
        return self.einstein_radius_source_au * AU / R_SUN

    @property
    def rsun_arcsec(self) -> float:
        """Angle of one solar radius at the source [arcsec]."""
        return R_SUN / (self.D_s * MPC) / ARCSEC

    @property
    def kpc_per_arcsec_lens(self) -> float:
        """Length of one arcsecond in the lens plane [kpc]."""
        return self.D_l * ARCSEC * 1e3

    @property
    def kpc_per_arcsec_source(self) -> float:
        """Length of one arcsecond in the source plane [kpc]."""
        return self.D_s * ARCSEC * 1e3

    @property
    def time_delay_factor(self) -> float:
        """(1 + z_lens) D_l D_s / (c D_ls), for angles in arcseconds [day/arcsec**2]."""
        distance = (1 + self.z_lens) * self.D_l * self.D_s / self.D_ls * MPC
        return distance * ARCSEC**2 / (LIGHT_SPEED * DAY)

    @property
    def velocity_coefficients(self) -> tuple[float, float, float]:
        """Factors of the source's, the lens's and the observer's velocity in the effective one.

        Notes
        -----
        V = v_s / (1+z_s) - v_l / (1+z_l) D_s/D_l + v_o / (1+z_l) D_ls/D_l, in the source plane and per observer time.

        References
        ----------
        .. [1] Kayser R., Refsdal S., Stabell R., 1986, A&A 166, 36
        """
        source, lens, observer = _velocity_coefficients(self.z_lens, self.z_source, self.D_l, self.D_s, self.D_ls)
        return float(source), float(lens), float(observer)

    def einstein_crossing_years(self, speed_kms: float) -> float:
        """Years in which `speed_kms` [km/s, source plane, observer time] covers one Einstein radius."""
        return self.einstein_radius_source_au * AU / (1e3 * speed_kms * YEAR)


@dataclass(frozen=True, slots=True, kw_only=True)
class ScaleDraws:
    """Distances for draws of two uncertain redshifts, each of shape (size,)."""

    z_lens: Array
    """Redshift of the lens."""
    z_source: Array
    """Redshift of the source."""
    D_l: Array
    """Angular-diameter distance to the lens [Mpc]."""
    D_s: Array
    """Angular-diameter distance to the source [Mpc]."""
    D_ls: Array
    """Angular-diameter distance from the lens to the source [Mpc]."""

    @property
    def luminosity_distance(self) -> Array:
        """Luminosity distance to the source [Mpc], shape (size,)."""
        return np.asarray(self.D_s * (1 + self.z_source) ** 2)

    @property
    def einstein_radius_source_au(self) -> Array:
        """Einstein radius of one solar mass in the source plane [au], shape (size,)."""
        return np.asarray(np.sqrt(4 * GM_SUN_OVER_C2 * self.D_ls * self.D_s / self.D_l * MPC) / AU)

    @property
    def velocity_coefficients(self) -> tuple[Array, Array, Array]:
        """Factors of the source's, the lens's and the observer's velocity; see `LensScales`."""
        source, lens, observer = _velocity_coefficients(self.z_lens, self.z_source, self.D_l, self.D_s, self.D_ls)
        return np.asarray(source), np.asarray(lens), np.asarray(observer)


def _velocity_coefficients(z_lens: Any, z_source: Any, D_l: Any, D_s: Any, D_ls: Any) -> tuple[Any, Any, Any]:
    return 1 / (1 + z_source), -D_s / (D_l * (1 + z_lens)), D_ls / (D_l * (1 + z_lens))


def sample_scales(
    lens_redshift: Value,
    source_redshift: Value,
    rng: np.random.Generator,
    size: int,
    cosmology: CosmologyRecord | FLRW | str | None = None,
) -> ScaleDraws:
    """Distances for draws of uncertain redshifts, by interpolation on a grid of the comoving distance.

    Parameters
    ----------
    lens_redshift, source_redshift : Value
        The two redshifts.
    rng : numpy.random.Generator
        Source of the draws.
    size : int
        Number of draws.
    cosmology : CosmologyRecord, astropy.cosmology.FLRW, str or None
        Planck18 by default.

    Returns
    -------
    ScaleDraws
        Arrays of shape (size,). Pairs out of order (source not behind the lens) are drawn again.

    Raises
    ------
    InputError
        If hardly any pair of redshifts is in order.

    Notes
    -----
    The grid has 65 points, uniform in ln(1 + z); the cubic through them is good to better than 1e-6.
    """
    from scipy.interpolate import CubicSpline

    z_lens, z_source = _ordered_redshifts(lens_redshift, source_redshift, rng, size)
    model = cosmology_from(cosmology)
    if lens_redshift.is_exact and source_redshift.is_exact:
        one = LensScales(float(z_lens[0]), float(z_source[0]), model)
        D_l, D_s, D_ls = (np.full(size, distance) for distance in (one.D_l, one.D_s, one.D_ls))
        return ScaleDraws(z_lens=z_lens, z_source=z_source, D_l=D_l, D_s=D_s, D_ls=D_ls)
    # A little room at both ends keeps the grid from collapsing onto one redshift.
    grid = np.linspace(0.0, 1.01 * np.log1p(z_source.max()), _GRID_POINTS)
    distance = CubicSpline(grid, model.comoving_transverse_distance(np.expm1(grid)).to_value("Mpc"))
    D_Ml, D_Ms = distance(np.log1p(z_lens)), distance(np.log1p(z_source))
    D_ls = np.asarray(_distance_between(D_Ml, D_Ms, z_source, _curvature(model)))
    return ScaleDraws(z_lens=z_lens, z_source=z_source, D_l=D_Ml / (1 + z_lens), D_s=D_Ms / (1 + z_source), D_ls=D_ls)


def _ordered_redshifts(lens: Value, source: Value, rng: np.random.Generator, size: int) -> tuple[Array, Array]:
    z_lens, z_source = np.array(lens.sample(rng, size)), np.array(source.sample(rng, size))
    for _ in range(50):
        wrong = ~((z_lens > 0) & (z_lens < z_source))
        count = int(wrong.sum())
        if not count:
            return z_lens, z_source
        z_lens[wrong], z_source[wrong] = lens.sample(rng, count), source.sample(rng, count)
    raise InputError(
        f"source redshift must be larger than the lens redshift, got {source.central:g} behind {lens.central:g}; "
        "check which is which"
    )


def einstein_radius(
    mass: npt.ArrayLike | Quantity = 1.0,
    *,
    lens_redshift: float,
    source_redshift: float,
    cosmology: CosmologyRecord | FLRW | str | None = None,
) -> Quantity:
    """Angular Einstein radius of a point mass.

    Parameters
    ----------
    mass : array_like or Quantity, optional
        Mass; plain numbers are in solar masses.
    lens_redshift, source_redshift : float
        Redshifts, 0 < lens_redshift < source_redshift.
    cosmology : astropy.cosmology.FLRW, CosmologyRecord, str or None
        Planck18 by default.

    Returns
    -------
    astropy.units.Quantity
        sqrt(4 G M / c**2 D_ls / (D_l D_s)) [microarcsec], shape of `mass`.

    Raises
    ------
    InputError
        If a mass is negative, or the redshifts are not in order.

    Examples
    --------
    >>> print(f"{einstein_radius(lens_redshift=0.5, source_redshift=1.5):.4f}")
    1.8835 uarcsec
    """
    from astropy import units as u

    solar = np.asarray(u.Quantity(mass, u.Msun).value, dtype=np.float64)
    if np.any(solar < 0):
        raise InputError(f"`mass` must be zero or positive, got {np.min(solar):g} solMass; give its size")
    scale = LensScales(float(lens_redshift), float(source_redshift), cosmology).einstein_radius_uas
    return scale * np.sqrt(solar) * u.uarcsec
