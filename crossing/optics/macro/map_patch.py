"""Smooth interpolant of convergence and shear around a place, and what follows along lines through it."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.optics.macro.map_checks import Fields
from crossing.optics.macro.profiles import stretch_eigenvalues
from crossing.optics.macro.sky_frame import SkyFrame

if TYPE_CHECKING:
    from scipy.interpolate import NdBSpline

__all__ = ["MapPatch", "Stretch"]

Array: TypeAlias = npt.NDArray[np.float64]
Pair: TypeAlias = tuple[Array, Array]

_ORDER = 3
# Three nodes integrate the spline's pieces exactly; a panel is at most a pixel long.
_NODES, _WEIGHTS = (np.array([-np.sqrt(0.6), 0.0, np.sqrt(0.6)]), np.array([5.0, 8.0, 5.0]) / 9)


class Stretch(NamedTuple):
    """Eigenvalues of the Jacobian at places, how they change, and the stretched direction; arrays of one shape."""

    lam_t: Array
    """Eigenvalue of smaller size."""
    lam_r: Array
    """The other one."""
    angle: Array
    """Direction of the stretch from east towards north [rad]."""
    slope_t: Pair
    """Change of lam_t to east and north [1/arcsec]."""
    slope_r: Pair
    """Change of lam_r to east and north [1/arcsec]."""


class MapPatch:
    """Cubic splines through a part of a map, in the tangent plane at its origin: x east, y north [arcsec].

    Parameters
    ----------
    fields : Fields
        Convergence and shear of pixels, all finite, shape (rows, columns).
    frame : SkyFrame
        Origin, and pixels as functions of offsets.
    first : (int, int)
        Row and column of the first pixel in the map.
    factor : float
        What multiplies the fields.

    Notes
    -----
    Places outside the pixels' centres give numbers that are not any.
    """

    __slots__ = ("_last", "_splines", "fields", "first", "frame")

    def __init__(self, fields: Fields, frame: SkyFrame, first: tuple[int, int], factor: float) -> None:
        self.fields = Fields(*(factor * one for one in fields))
        self.frame = frame
        self.first = first
        self._last = tuple(start + size - 1 for start, size in zip(first, fields.kappa.shape, strict=True))
        self._splines: tuple[NdBSpline, ...] | None = None

    def contains(self, x: npt.ArrayLike, y: npt.ArrayLike) -> npt.NDArray[np.bool_]:
        """Whether places lie within the patch."""
        column, row = self.frame.to_pixel(x, y)
        return (row >= self.first[0]) & (row <= self._last[0]) & (column >= self.first[1]) & (column <= self._last[1])

    @property
    def reach(self) -> float:
        """Radius [arcsec] of the largest circle around the origin inside the patch."""
        column, row = self.frame.pixel
        steps = (
            min(row - self.first[0], self._last[0] - row) / np.hypot(*self.frame.inverse[1]),
            min(column - self.first[1], self._last[1] - column) / np.hypot(*self.frame.inverse[0]),
        )
        return float(min(steps))

    def _spline(self) -> tuple[NdBSpline, ...]:
        if self._splines is None:
            from scipy.interpolate import NdBSpline, RectBivariateSpline

            rows, columns = (np.arange(a, b + 1.0) for a, b in zip(self.first, self._last, strict=True))
            found = []
            for one in self.fields:
                u, v, c = RectBivariateSpline(rows, columns, one, kx=_ORDER, ky=_ORDER, s=0).tck
                # Of the two classes this one has derivatives at a few places without going through all pieces.
                shape = (len(u) - _ORDER - 1, len(v) - _ORDER - 1)
                found.append(NdBSpline((u, v), np.reshape(c, shape), _ORDER))
            self._splines = tuple(found)
        return self._splines

    def _values(self, x: npt.ArrayLike, y: npt.ArrayLike, along_row: int = 0, along_column: int = 0) -> list[Array]:
        """Derivatives of convergence and shear in pixels."""
        column, row = self.frame.to_pixel(x, y)
        gone = ~self.contains(x, y)
        place, order = np.stack([row, column], axis=-1), (along_row, along_column)
        return [np.where(gone, np.nan, spline(place, nu=order)) for spline in self._spline()]

    def at(self, x: npt.ArrayLike, y: npt.ArrayLike) -> Fields:
        """Convergence and shear at places [arcsec]."""
        return Fields(*self._values(x, y))

    def eigenvalues(self, x: npt.ArrayLike, y: npt.ArrayLike) -> Pair:
        """Eigenvalues (lam_t, lam_r) at places [arcsec], |lam_t| <= |lam_r|; not numbers outside the patch."""
        kappa, g1, g2 = self.at(x, y)
        return stretch_eigenvalues(kappa, np.hypot(g1, g2))

    def jacobian(self, x: npt.ArrayLike, y: npt.ArrayLike) -> tuple[Array, Array, Array]:
        """Elements (xx, xy, yy) of the Jacobian of the lens map."""
        kappa, g1, g2 = self.at(x, y)
        return 1 - kappa - g1, -g2, 1 - kappa + g1

    def stretch(self, x: npt.ArrayLike, y: npt.ArrayLike) -> Stretch:
        """Eigenvalues, their gradients and the stretched direction at places [arcsec]."""
        kappa, g1, g2 = self.at(x, y)
        rows, columns = self._values(x, y, along_row=1), self._values(x, y, along_column=1)
        inverse = self.frame.inverse
        east, north = (
            [c * inverse[0, axis] + r * inverse[1, axis] for c, r in zip(columns, rows, strict=True)] for axis in (0, 1)
        )
        size = np.hypot(g1, g2)
        side = np.where(kappa > 1, -1.0, 1.0)
        with np.errstate(divide="ignore", invalid="ignore"):
            rise = [(g1 * one[1] + g2 * one[2]) / size for one in (east, north)]
        lam_t, lam_r = stretch_eigenvalues(kappa, size)
        return Stretch(
            lam_t=lam_t,
            lam_r=lam_r,
            angle=np.arctan2(g2, g1) / 2 + np.where(side < 0, np.pi / 2, 0.0),
            slope_t=(-east[0] - side * rise[0], -north[0] - side * rise[1]),
            slope_r=(-east[0] + side * rise[0], -north[0] + side * rise[1]),
        )

    def source_step(
        self, x: npt.ArrayLike, y: npt.ArrayLike, start: tuple[npt.ArrayLike, npt.ArrayLike] = (0.0, 0.0)
    ) -> tuple[Array, Array, Array]:
        """What lies between a start and places, from the Jacobian along straight lines.

        Parameters
        ----------
        x, y : array_like
            Places [arcsec].
        start : (array_like, array_like)
            Where the lines begin [arcsec].

        Returns
        -------
        step_x, step_y : ndarray
            Source positions of the places less that of the start [arcsec].
        arrival : ndarray
            Arrival time of the places less that of the start [arcsec**2], for the source of the start.

        Notes
        -----
        With the displacement L and the Jacobian A along the line, the source moves by the integral of A L over
        0 < t < 1. The gradient of the arrival time of one source is the source position of a place less that source, so
        its change is the integral of (1 - t) L A L.
        """
        x0, y0, x, y = np.broadcast_arrays(*(np.asarray(one, dtype=np.float64) for one in (*start, x, y)))
        dx, dy = x - x0, y - y0
        longest = float(np.max(np.hypot(dx, dy), initial=0.0)) / self.frame.pixel_size
        panels = int(np.clip(np.ceil(1.5 * longest), 2, 4000))
        edges = (np.arange(panels) + 0.5)[:, None] / panels
        t = (edges + _NODES / (2 * panels)).ravel()
        weight = np.tile(_WEIGHTS, panels) / (2 * panels)
        steps = (slice(None), *((None,) * x.ndim))
        t, weight = t[steps], weight[steps]
        xx, xy, yy = self.jacobian(x0 + t * dx, y0 + t * dy)
        step_x, step_y = xx * dx + xy * dy, xy * dx + yy * dy
        arrival = np.sum(weight * (1 - t) * (step_x * dx + step_y * dy), axis=0)
        return np.sum(weight * step_x, axis=0), np.sum(weight * step_y, axis=0), arrival
