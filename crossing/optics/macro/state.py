"""The macro lens at one place, as numbers and as draws: what every way of giving it comes down to."""

from __future__ import annotations

from typing import Literal, NamedTuple, Protocol, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.optics.macro.profiles import stretch_eigenvalues

__all__ = ["STENCIL", "LocalDraws", "LocalState", "MacroSolution", "central_state", "local_draws"]

Array: TypeAlias = npt.NDArray[np.float64]

STENCIL: tuple[tuple[float, float], ...] = ((0.0, 0.0), (1.0, 0.0), (-1.0, 0.0), (0.0, 1.0), (0.0, -1.0))
"""Places for `local_draws`: the middle, then one step to east, west, north and south."""

# Differences of closed forms are good to this part of the whole gradient; less along the stretch is nothing.
_NO_CHANGE = 1e-6


class LocalState(NamedTuple):
    """Central values of the lens at the event; angles in arcseconds and degrees."""

    lam_t: float
    """Eigenvalue along the stretch x."""
    lam_r: float
    """Eigenvalue across it."""
    gradient: tuple[float, float] | None = None
    """Change of lam_t per arcsec along x and y, where it is known."""
    stretch_angle: float | None = None
    """Position angle of x, from north to east [deg], where it is known; y lies a quarter turn from it, counted from
    east to north."""
    images: Literal[1, 2] = 1
    """Number of macro images that are meant."""


class LocalDraws(NamedTuple):
    """Draws of the lens at the event, each of shape (size,); not a number where a quantity is not known."""

    lam_t: Array
    """Eigenvalue along the stretch x."""
    lam_r: Array
    """Eigenvalue across it."""
    gradient_x: Array
    """Change of lam_t along x [1/arcsec]."""
    gradient_y: Array
    """Change of lam_t along y [1/arcsec]."""
    stretch_angle: Array
    """Position angle of x, from north to east [deg]."""


class MacroSolution(Protocol):
    """One alternative for the macro lens of an event, however it was given."""

    @property
    def name(self) -> str | None:
        """Name of the lens model."""

    @property
    def certain(self) -> bool:
        """Whether all draws are the same."""

    @property
    def flags(self) -> tuple[str, ...]:
        """What is to be known about it: keys of `crossing.optics.macro.solutions.FLAGS`."""

    @property
    def central(self) -> LocalState:
        """The lens by central values."""

    def draw(self, rng: np.random.Generator, size: int) -> tuple[Array, Array]:
        """Eigenvalues (lam_t, lam_r), each of shape (size,)."""

    def draw_local(self, rng: np.random.Generator, size: int) -> LocalDraws:
        """Eigenvalues with gradient and direction."""


def local_draws(kappa: Array, gamma1: Array, gamma2: Array, step: float) -> LocalDraws:
    """Eigenvalues, gradient and stretch from convergence and shear at the places of `STENCIL`.

    Parameters
    ----------
    kappa, gamma1, gamma2 : ndarray, shape (..., 5)
        Fields; shear components refer to east (x) and north (y).
    step : float
        Step of the stencil [arcsec].

    Returns
    -------
    LocalDraws
        Of shape (...); x points to larger lam_t.
    """
    lam_t, lam_r = stretch_eigenvalues(kappa, np.hypot(gamma1, gamma2))
    east, north = (lam_t[..., 1] - lam_t[..., 2]) / (2 * step), (lam_t[..., 3] - lam_t[..., 4]) / (2 * step)
    angle = np.arctan2(gamma2[..., 0], gamma1[..., 0]) / 2 + np.where(kappa[..., 0] > 1, np.pi / 2, 0.0)
    c, s = np.cos(angle), np.sin(angle)
    along, across = c * east + s * north, c * north - s * east
    way = np.where(along < 0, -1.0, 1.0)
    along = np.where(np.abs(along) < _NO_CHANGE * np.hypot(along, across), 0.0, along)
    return LocalDraws(
        lam_t=lam_t[..., 0],
        lam_r=lam_r[..., 0],
        gradient_x=way * along,
        gradient_y=way * across,
        stretch_angle=np.degrees(np.arctan2(way * c, way * s)) % 360,
    )


def central_state(draws: LocalDraws, images: Literal[1, 2] = 1) -> LocalState:
    """The first draw as central values; without a gradient where it is not finite."""
    gx, gy = float(draws.gradient_x[0]), float(draws.gradient_y[0])
    angle = float(draws.stretch_angle[0])
    return LocalState(
        lam_t=float(draws.lam_t[0]),
        lam_r=float(draws.lam_r[0]),
        gradient=(gx, gy) if np.isfinite(gx) and np.isfinite(gy) else None,
        stretch_angle=angle if np.isfinite(angle) else None,
        images=images,
    )
