"""All images of a source behind mass profiles, found numerically."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.profiles import MassProfile

if TYPE_CHECKING:
    from astropy.table import QTable

__all__ = ["ImageTable", "solve_images"]

Array: TypeAlias = npt.NDArray[np.float64]

_CELLS = 120
_LEVELS = 5
_MOST_CELLS = 400_000
_NEWTON_STEPS = 60
# The linear map of a cell is trusted up to this factor for what its corners reach.
_CURVATURE_MARGIN = 1.6
_SAME = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class ImageTable:
    """Images of one point source, the first to arrive first; arrays of shape (images,)."""

    x: Array
    """Position [arcsec]."""
    y: Array
    """Position [arcsec]."""
    lam_t: Array
    """Eigenvalue of smaller size there."""
    lam_r: Array
    """The other one."""
    arrival: Array
    """Arrival time [arcsec**2]; times `LensScales.time_delay_factor` in days."""

    @property
    def mu(self) -> Array:
        """Signed magnification."""
        return np.asarray(1 / (self.lam_t * self.lam_r))

    def __len__(self) -> int:
        return len(self.x)

    def to_dict(self) -> dict[str, Any]:
        """Positions, magnifications and arrival times as lists."""
        return {name: getattr(self, name).tolist() for name in ("x", "y", "mu", "arrival")}

    def to_table(self) -> QTable:
        """One row an image."""
        from astropy import units as u
        from astropy.table import QTable

        columns = {"x": self.x * u.arcsec, "y": self.y * u.arcsec, "mu": self.mu}
        return QTable({**columns, "arrival": self.arrival * u.arcsec**2})


def solve_images(
    profile: MassProfile,
    source: tuple[float, float],
    half_width: float,
    *,
    scale: float = 1.0,
    cells: int = _CELLS,
) -> ImageTable:
    """Images of a point source inside a square around the origin.

    Parameters
    ----------
    profile : MassProfile
        The lens.
    source : (float, float)
        Position of the source [arcsec].
    half_width : float
        Half the side of the square [arcsec].
    scale : float
        Distance ratio; see `MassProfile`.
    cells : int
        Cells a side to begin with. Those that may hold an image are cut into nine, five times, and Newton's method
        starts from what is left: pairs that lie closer than 1e-9 of the square count as one image.

    Returns
    -------
    ImageTable
        The images; those at singular centres are none.

    Raises
    ------
    InputError
        If the square has no size.
    """
    if not half_width > 0:
        raise InputError(f"`half_width` must be positive, got {half_width:g} arcsec; give the size of the field")
    size = 2 * half_width / cells
    ticks = (np.arange(cells) + 0.5) * size - half_width
    x, y = (one.ravel() for one in np.meshgrid(ticks, ticks))
    for _ in range(_LEVELS):
        keep = _may_hold(profile, source, x, y, size, scale)
        x, y = x[keep], y[keep]
        if not x.size or 9 * x.size > _MOST_CELLS:
            break
        size /= 3
        shift_x, shift_y = (one.ravel() * size for one in np.meshgrid([-1, 0, 1], [-1, 0, 1]))
        x, y = (x[:, None] + shift_x).ravel(), (y[:, None] + shift_y).ravel()
    x, y = _polish(profile, source, x, y, scale)
    inside = (np.abs(x) <= half_width) & (np.abs(y) <= half_width)
    x, y = _distinct(x[inside], y[inside], _SAME * half_width)
    lam_t, lam_r = profile.eigenvalues(x, y, scale=scale)
    arrival = profile.fermat_potential(x, y, source, scale=scale)
    order = np.argsort(arrival)
    return ImageTable(x=x[order], y=y[order], lam_t=lam_t[order], lam_r=lam_r[order], arrival=arrival[order])


def _may_hold(
    profile: MassProfile, source: tuple[float, float], x: Array, y: Array, size: float, scale: float
) -> npt.NDArray[np.bool_]:
    """Cells whose image may reach the source: the largest eigenvalue bounds how far a corner goes."""
    u, v = profile.source_position(x, y, scale=scale)
    _, lam_r = profile.eigenvalues(x, y, scale=scale)
    reach = _CURVATURE_MARGIN * np.maximum(np.abs(lam_r), 0.5) * size / np.sqrt(2)
    return ~(np.hypot(u - source[0], v - source[1]) > reach)


def _polish(profile: MassProfile, source: tuple[float, float], x: Array, y: Array, scale: float) -> tuple[Array, Array]:
    """Newton's method from every start; the ones that do not settle are dropped."""
    step = np.full_like(x, np.inf)
    with np.errstate(all="ignore"):
        for _ in range(_NEWTON_STEPS):
            u, v = profile.source_position(x, y, scale=scale)
            xx, xy, yy = profile.jacobian(x, y, scale=scale)
            det = xx * yy - xy**2
            du, dv = source[0] - u, source[1] - v
            step_x, step_y = (yy * du - xy * dv) / det, (xx * dv - xy * du) / det
            step = np.hypot(step_x, step_y)
            # Long steps near critical curves would leap to other images.
            short = np.minimum(1.0, 0.3 * (1 + np.hypot(x, y)) / np.maximum(step, 1e-300))
            x, y = x + short * step_x, y + short * step_y
        u, v = profile.source_position(x, y, scale=scale)
        good = (np.hypot(u - source[0], v - source[1]) < 1e-12 * (1 + np.hypot(x, y))) & (step < 1e-9)
    return x[good], y[good]


def _distinct(x: Array, y: Array, tolerance: float) -> tuple[Array, Array]:
    """One of each group of places that are the same to `tolerance`."""
    kept: list[int] = []
    for index in range(len(x)):
        if all(abs(x[index] - x[one]) > tolerance or abs(y[index] - y[one]) > tolerance for one in kept):
            kept.append(index)
    return x[kept], y[kept]
