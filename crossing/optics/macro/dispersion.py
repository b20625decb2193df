"""The macro lens of a cluster of which only the velocity dispersion is known."""

from __future__ import annotations

from dataclasses import dataclass, field
from math import pi, sqrt
from typing import TYPE_CHECKING, Final, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.constants import ARCSEC, GM_SUN_OVER_C2, LIGHT_SPEED, MPC
from crossing.optics.macro.mass_relations import (
    DEFAULT_RELATION,
    MASS_RELATIONS,
    PROJECTION_SCATTER,
    mass_from_dispersion,
)
from crossing.optics.macro.members import read_members
from crossing.optics.macro.profiles import MassProfile, NFWSphere, ProfileSum, Shear, SoftenedEllipsoid
from crossing.optics.macro.sky_frame import offsets_from_sky
from crossing.optics.macro.state import STENCIL, LocalDraws, LocalState, central_state, local_draws
from crossing.optics.scales import LensScales, cosmology_from, sample_scales

if TYPE_CHECKING:
    from crossing.event import Event, HaloRecord, MacroRecord, Value

__all__ = ["HaloSolution", "halo_solution"]

Array: TypeAlias = npt.NDArray[np.float64]

_STEP: Final = 1e-3
# Axis ratios are told apart to this, far less than anyone knows them.
_SAME_RATIO: Final = 1e-3
_CENTRE: Final = 2e-3
_FEW: Final = 15
_CONCENTRATIONS: Final = (3.0, 8.0)


class _Parameters(NamedTuple):
    """Numbers of a halo, each of shape (size,)."""

    strength: Array
    """Einstein radius [arcsec], or kappa_s."""
    scale: Array
    """Core radius, or scale radius [arcsec]."""
    axis_ratio: Array
    """Minor over major axis."""
    angle: Array
    """Direction of the major axis from east towards north [rad]."""
    gamma1: Array
    """External shear along east."""
    gamma2: Array
    """External shear along the diagonal."""


@dataclass(frozen=True, slots=True, kw_only=True)
class HaloSolution:
    """The lens at the event by a profile whose mass follows from the velocity dispersion."""

    event: Event
    """The event, for its redshifts and cosmology."""
    record: MacroRecord
    """What the event file says."""
    dispersion: Value
    """Velocity dispersion [km/s]."""
    flags: tuple[str, ...] = ()
    """Keys of `crossing.optics.macro.solutions.FLAGS`."""
    scales: LensScales = field(init=False)
    """Distances at the central redshifts."""

    def __post_init__(self) -> None:
        lens, source = self.event.lens_redshift, self.event.source_redshift
        if lens is None or source is None:
            raise InputError("must go with the redshifts of lens and source; add [lens] and [source]")
        object.__setattr__(self, "scales", LensScales(lens.central, source.central, self.event.cosmology))

    @property
    def name(self) -> str | None:
        """Name of the lens model."""
        return self.record.name

    @property
    def halo(self) -> HaloRecord:
        """What the event file says of the cluster."""
        if self.record.halo is None:
            raise InputError("`velocity_dispersion` must be given for this way of saying the macro lens; add it")
        return self.record.halo

    @property
    def certain(self) -> bool:
        """Whether all draws are the same."""
        halo = self.halo
        values = (
            *(self.dispersion, halo.axis_ratio, halo.core, halo.angle, halo.shear, halo.shear_angle),
            *(self.event.lens_redshift, self.event.source_redshift),
        )
        return (
            halo.profile == "isothermal"
            and self.record.position_error is None
            and all(value is None or value.is_exact for value in values)
        )

    @property
    def offset(self) -> tuple[float, float]:
        """East and north of the event from the cluster's centre [arcsec]."""
        if self.record.centre is None or self.record.position is None:
            raise InputError("`centre` and `position` must be given with velocity_dispersion; add them")
        east, north = offsets_from_sky(self.record.centre, *self.record.position)
        return float(east), float(north)

    @property
    def mass(self) -> float | None:
        """Central M200c [Msun] of the NFW sphere, None for the isothermal ellipsoid."""
        if self.halo.profile != "nfw":
            return None
        relation = self.halo.mass_relation or DEFAULT_RELATION
        return float(mass_from_dispersion(self.dispersion.central, self._hubble(self.scales.z_lens), relation))

    @property
    def central(self) -> LocalState:
        """The lens by central values."""
        one = np.ones(1)
        scales = self.scales
        own = self._parameters(None, 1, scales.D_l * one, scales.D_s * one, scales.D_ls * one, scales.z_lens * one)
        east, north = self.offset
        return central_state(self._at(own, east * one, north * one))

    @property
    def profile(self) -> ProfileSum:
        """Mass around the cluster's centre by central values, external shear included, for the event's source."""
        one, far = np.ones(1), self.scales
        own = self._parameters(None, 1, far.D_l * one, far.D_s * one, far.D_ls * one, far.z_lens * one)
        strength, scale, axis_ratio, angle, gamma1, gamma2 = (float(part[0]) for part in own)
        turn = float(np.degrees(angle))
        body: MassProfile
        if self.halo.profile == "nfw":
            body = NFWSphere(kappa_s=strength, r_s=scale)
        else:
            body = SoftenedEllipsoid(einstein_radius=strength, axis_ratio=axis_ratio, core=scale, angle=turn)
        return ProfileSum(parts=(body, Shear(gamma1=gamma1, gamma2=gamma2)))

    def draw(self, rng: np.random.Generator, size: int) -> tuple[Array, Array]:
        """Eigenvalues (lam_t, lam_r), each of shape (size,)."""
        draws = self.draw_local(rng, size)
        return draws.lam_t, draws.lam_r

    def draw_local(self, rng: np.random.Generator, size: int) -> LocalDraws:
        """Eigenvalues with gradient and direction, over all that is uncertain, redshifts and position included."""
        lens, source = self.event.lens_redshift, self.event.source_redshift
        if lens is None or source is None or size == 0:
            return LocalDraws(*np.empty((5, 0)))
        far = sample_scales(lens, source, rng, size, self.event.cosmology)
        own = self._parameters(rng, size, far.D_l, far.D_s, far.D_ls, far.z_lens)
        east, north = (np.full(size, one) for one in self.offset)
        if self.record.position_error is not None:
            shift = self.record.position_error * rng.standard_normal((2, size))
            east, north = east + shift[0], north + shift[1]
        return self._at(own, east, north)

    def _hubble(self, redshift: float) -> float:
        return float(cosmology_from(self.event.cosmology).H(redshift).to_value("km/(s Mpc)"))

    def _parameters(
        self, rng: np.random.Generator | None, size: int, D_l: Array, D_s: Array, D_ls: Array, z_lens: Array
    ) -> _Parameters:
        halo = self.halo

        def value(given: Value | None, default: float) -> Array:
            if given is None:
                return np.full(size, default)
            return np.full(size, given.central) if rng is None else given.sample(rng, size)

        sigma = value(self.dispersion, 0.0)
        shear, toward = value(halo.shear, 0.0), np.radians(90 - value(halo.shear_angle, 0.0))
        if halo.profile == "nfw":
            strength, scale = self._sphere(rng, sigma, value(_concentration(halo), 5.0), D_l, D_s, D_ls, z_lens)
        else:
            strength = 4 * pi * (1e3 * sigma / LIGHT_SPEED) ** 2 * D_ls / D_s / ARCSEC
            scale = value(halo.core, 0.0)
        return _Parameters(
            strength=strength,
            scale=scale,
            axis_ratio=value(halo.axis_ratio, 1.0),
            angle=np.radians(90 - value(halo.angle, 0.0)),
            gamma1=shear * np.cos(2 * toward),
            gamma2=shear * np.sin(2 * toward),
        )

    def _sphere(
        self,
        rng: np.random.Generator | None,
        sigma: Array,
        concentration: Array,
        D_l: Array,
        D_s: Array,
        D_ls: Array,
        z_lens: Array,
    ) -> tuple[Array, Array]:
        """kappa_s and scale radius [arcsec], as `NFWSphere.of_mass`."""
        relation = self.halo.mass_relation or DEFAULT_RELATION
        if rng is not None:
            # A dispersion that is high by chance stands for less mass.
            spread = sqrt(MASS_RELATIONS[relation].scatter ** 2 + PROJECTION_SCATTER**2)
            sigma = sigma * np.exp(spread * rng.standard_normal(len(sigma)))
        grid, where = np.unique(np.round(z_lens, 4), return_inverse=True)
        hubble = np.array([self._hubble(z) for z in grid])[where]
        # Every relation goes as 1 / H at fixed dispersion.
        mass = mass_from_dispersion(sigma, 1.0, relation) / hubble
        r200 = (GM_SUN_OVER_C2 * LIGHT_SPEED**2 * mass / (100 * (1e3 * hubble / MPC) ** 2)) ** (1 / 3) / MPC
        r_s = r200 / concentration
        inner = mass / (4 * pi * (np.log1p(concentration) - concentration / (1 + concentration)))
        sigma_crit = D_s / (4 * pi * GM_SUN_OVER_C2 * D_l * D_ls * MPC)
        return inner / (r_s * MPC) ** 2 / sigma_crit, r_s / D_l / ARCSEC

    def _at(self, own: _Parameters, east: Array, north: Array) -> LocalDraws:
        steps = _STEP * np.array(STENCIL)
        x, y = east[:, None] + steps[:, 0], north[:, None] + steps[:, 1]
        if self.halo.profile == "nfw":
            sphere = NFWSphere(kappa_s=1.0, r_s=1.0)
            u, v, strength = x / own.scale[:, None], y / own.scale[:, None], own.strength[:, None]
            kappa, (g1, g2) = strength * sphere.convergence(u, v), sphere.shear(u, v)
            g1, g2 = strength * g1, strength * g2
        else:
            kappa, g1, g2 = _ellipsoid(own, x, y)
        return local_draws(kappa, g1 + own.gamma1[:, None], g2 + own.gamma2[:, None], _STEP)


def _ellipsoid(own: _Parameters, x: Array, y: Array) -> tuple[Array, Array, Array]:
    """Convergence and shear of isothermal ellipsoids at places of shape (size, 5), each with parameters of its own.

    Notes
    -----
    The closed forms take one shape at a time, but scale with the Einstein radius, with the core, and turn with the
    angle; only the axis ratio is left.
    """
    unit = np.where(own.scale > 0, own.scale, 1.0)[:, None]
    c, s = np.cos(own.angle)[:, None], np.sin(own.angle)[:, None]
    u, v = (c * x + s * y) / unit, (c * y - s * x) / unit
    kappa, first, second = np.empty_like(u), np.empty_like(u), np.empty_like(u)
    ratio = np.clip(np.round(own.axis_ratio / _SAME_RATIO) * _SAME_RATIO, _SAME_RATIO, 1.0)
    if np.ptp(own.axis_ratio) == 0:
        ratio = own.axis_ratio
    shapes = np.column_stack([ratio, own.scale > 0])
    for one in np.unique(shapes, axis=0):
        these = np.all(shapes == one, axis=1)
        body = SoftenedEllipsoid(einstein_radius=1.0, axis_ratio=float(one[0]), core=float(one[1]))
        kappa[these] = body.convergence(u[these], v[these])
        first[these], second[these] = body.shear(u[these], v[these])
    strength = own.strength[:, None] / unit
    c2, s2 = np.cos(2 * own.angle)[:, None], np.sin(2 * own.angle)[:, None]
    return strength * kappa, strength * (c2 * first - s2 * second), strength * (s2 * first + c2 * second)


def _concentration(halo: HaloRecord) -> Value:
    """Concentration of the NFW sphere; common practice without a source where the file has none."""
    from crossing.event import Value

    return Value.loguniform(*_CONCENTRATIONS) if halo.concentration is None else halo.concentration


def halo_solution(event: Event, record: MacroRecord) -> HaloSolution:
    """The lens of an event whose macro lens follows from a velocity dispersion.

    Parameters
    ----------
    event : Event
        The event, for its redshifts and cosmology.
    record : MacroRecord
        With `velocity_dispersion` or the table of members, centre and position.

    Returns
    -------
    HaloSolution
        Central values and draws.

    Raises
    ------
    InputError
        If the redshifts are missing, the event is at the very centre, or the table of members cannot be used.
    """
    from crossing.event import Value

    halo, flags = record.halo, []
    if halo is None:
        raise InputError("`velocity_dispersion` must be given for this way of saying the macro lens; add it")
    dispersion = halo.dispersion
    if dispersion is None and halo.members is not None and event.lens_redshift is not None:
        found = read_members(halo.members, event.lens_redshift.central)
        dispersion = Value.normal(found.dispersion, found.error, lower=0)
        if found.members < _FEW:
            flags.append("few_members")
    if dispersion is None:
        raise InputError("must go with the redshifts of lens and source; add [lens] and [source]")
    if halo.profile == "nfw" and halo.concentration is None:
        flags.append("concentration_from_prior")
    if (halo.axis_ratio is None or halo.axis_ratio == Value.exact(1.0)) and halo.shear is None:
        flags.append("round_halo")
    solution = HaloSolution(event=event, record=record, dispersion=dispersion, flags=tuple(flags))
    if np.hypot(*solution.offset) < _CENTRE:
        raise InputError("`position` must differ from the cluster's centre, got the same place; give the event's")
    return solution
