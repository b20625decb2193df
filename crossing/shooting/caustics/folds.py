"""What the lens map says of a fold: strength, normal, and the side with the two extra images."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.shooting.field import StarField

__all__ = ["FoldPoints", "fold_points", "fold_quantities"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FoldPoints:
    """Folds at points of a critical curve, in Einstein radii of one solar mass; arrays share one shape."""

    x: NDArray[np.float64] = field(repr=False)
    """Critical points in the image plane [theta_E]."""
    y: NDArray[np.float64] = field(repr=False)
    u: NDArray[np.float64] = field(repr=False)
    """Where they map to, points of the caustic [theta_E]."""
    v: NDArray[np.float64] = field(repr=False)
    strength: NDArray[np.float64]
    """K of ``K / sqrt(distance)`` [theta_E^(1/2)]; infinite at a cusp."""
    normal: NDArray[np.float64] = field(repr=False)
    """(..., 2) unit normal of the caustic in the source plane, to the side with two more images."""
    lam_perp: NDArray[np.float64] = field(repr=False)
    """Eigenvalue of the Jacobian that does not vanish, signed."""
    change: NDArray[np.float64] = field(repr=False)
    """T, change of the vanishing eigenvalue along the normal [1/theta_E]; zero at a cusp, never negative."""
    determinant: NDArray[np.float64] = field(repr=False)
    """Determinant of the Jacobian: zero but for how far the points are from the critical curve."""

    def to_table(self) -> QTable:
        """One row a point: x, y, u, v, strength, normal_u, normal_v, lam_perp, change, determinant."""
        from astropy.table import QTable

        names = ("x", "y", "u", "v", "strength", "lam_perp", "change", "determinant")
        columns = {name: np.ravel(getattr(self, name)) for name in names}
        columns["normal_u"], columns["normal_v"] = np.ravel(self.normal[..., 0]), np.ravel(self.normal[..., 1])
        return QTable(columns)

    def to_dict(self) -> dict[str, Any]:
        """All columns of the table as lists."""
        table = self.to_table()
        return {name: table[name].tolist() for name in table.colnames}

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the points in the source plane, with their normals.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw; a new figure if None.
        """
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.0, 4.5), layout="constrained").add_subplot()
        ax.quiver(self.u, self.v, self.normal[..., 0], self.normal[..., 1], color="#0072B2", width=0.004)
        ax.plot(np.ravel(self.u), np.ravel(self.v), "o", color="#D55E00", ms=3.0)
        ax.set(xlabel=r"$u$  [$\theta_E$ of 1 M$_\odot$]", ylabel=r"$v$  [$\theta_E$]")
        return ax


def fold_quantities(field: StarField, x: ArrayLike, y: ArrayLike) -> FoldPoints:
    """Folds at critical points given in the image plane.

    Parameters
    ----------
    field : StarField
        Lenses.
    x, y : array_like
        Points on a critical curve, in Einstein radii of one solar mass; they broadcast, and are taken as they are.

    Returns
    -------
    FoldPoints
        Strengths, normals and what they follow from.

    Raises
    ------
    InputError
        If a coordinate is not finite.

    Notes
    -----
    Let e be the unit null vector of the Jacobian A, which is symmetric, lam_perp its other eigenvalue, and T the change
    of the vanishing one along e, the third derivative of the potential along e. Images at the offsets +-s along e have
    the source s^2 T/2 inside of the caustic along e, and 1/(abs(lam_perp) T s) each for a magnification: the pair has
    ``K / sqrt(d)`` with ``K = sqrt(2/T) / abs(lam_perp)``, and the normal is the e for which T is positive.

    References
    ----------
    .. [1] Schneider P., Ehlers J. & Falco E. E., 1992, Gravitational Lenses, section 6.2
    """
    one, two = np.broadcast_arrays(np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64))
    if not (np.isfinite(one).all() and np.isfinite(two).all()):
        raise InputError("`x`, `y` must be finite, got a value that is not; give critical points")
    series, inside = field._series(one, two)
    return fold_points(one, two, series, inside, field.lens_numbers)


def fold_points(
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    series: NDArray[np.float64],
    inside: NDArray[np.float64],
    lens: NDArray[np.float64],
) -> FoldPoints:
    """Folds from the series of the deflection at the points.

    Parameters
    ----------
    x, y : (...) ndarray
        Critical points.
    series : (..., 7) ndarray
        What `crossing.shooting.tree.evaluate` gives.
    inside : (...) ndarray
        1 inside the rectangle of the stars' sheet, else 0.
    lens : (5,) ndarray
        `StarField.lens_numbers`.
    """
    gx, gy, sheet = lens[2], lens[3], lens[4] * inside
    lam_t, lam_r = lens[0] + sheet, lens[1] + sheet
    u = lam_t * x + 0.5 * gx * x**2 + gy * x * y - series[..., 0]
    v = lam_r * y + 0.5 * gy * x**2 + series[..., 1]
    half, mixed = 0.5 * (lam_t - lam_r + gx * x + gy * y) - series[..., 2], gy * x + series[..., 3]
    trace = lam_t + lam_r + gx * x + gy * y
    # Twice the angle of the null vector: opposite the eigenvector that goes with the trace.
    turned = 0.5 * np.arctan2(mixed, half) + np.where(trace > 0.0, 0.5 * np.pi, 0.0)
    ex, ey = np.cos(turned), np.sin(turned)
    third_x, third_y = series[..., 4], series[..., 5]
    along = ex**3 * (gx - third_x) + 3.0 * ex**2 * ey * (gy + third_y) + 3.0 * ex * ey**2 * third_x - ey**3 * third_y
    change = np.abs(along)
    sign = np.where(along < 0.0, -1.0, 1.0)
    with np.errstate(divide="ignore"):
        strength = np.sqrt(2.0 / change) / np.abs(trace)
    return FoldPoints(
        x=x,
        y=y,
        u=u,
        v=v,
        strength=strength,
        normal=np.stack([sign * ex, sign * ey], axis=-1),
        lam_perp=trace,
        change=change,
        determinant=0.25 * trace**2 - half**2 - mixed**2,
    )
