"""A magnification map of the source plane, and what can be read off it."""

from __future__ import annotations

import json
import os
from dataclasses import dataclass, field
from html import escape
from math import isclose, isfinite
from typing import TYPE_CHECKING, Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.shooting.caustics.network import CausticNetwork
    from crossing.shooting.maps.statistics import MapStatistics

__all__ = ["FLAGS", "MagnificationMap"]

FLAGS: Final[dict[str, str]] = {
    "accuracy_not_reached": "the estimated error per pixel is more than twice the accuracy asked for",
    "macro_varies": "lam_t changes by more than a tenth across the map; keep the gradient, or make the map smaller",
}
"""Flags that make a map untrustworthy, with what they mean."""

_MOST_ERROR = 2.0
_MOST_CHANGE = 0.1
_SQUARE = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MagnificationMap:
    """Magnification of a rectangle of the source plane, in Einstein radii of one solar mass.

    Notes
    -----
    A pixel holds the mean over its own area. Arrays are taken over without a copy where they are contiguous float64.
    """

    values: NDArray[np.float64] = field(repr=False)
    """(n_v, n_u) unsigned magnification, total over micro-images, by rows of v."""
    center: tuple[float, float]
    """Centre (u, v) [theta_E]."""
    width: float
    """Size along u [theta_E]; pixels are square."""
    height: float
    """Size along v [theta_E]."""
    method: Literal["area", "rays"]
    """How it was made: area mapping, or counting rays."""
    accuracy: float
    """Relative error per pixel that was asked for; area mapping aims at it, counting rays does not."""
    error_estimate: float
    """Estimated relative error per pixel, rms over the map; NaN where none was made."""
    error: NDArray[np.float64] | None = field(default=None, repr=False)
    """(n_v, n_u) estimated standard error per pixel, or None."""
    images: Literal[1, 2] = 1
    """Macro images that the magnification is the total of: one, or a merging pair."""
    expected_mean: float | None = None
    """Mean over infinitely many fields, 1/abs((1-kappa)^2 - gamma^2); None where the macro lens is not constant."""
    rays: int = 0
    """Rays that were shot."""
    description: dict[str, Any] = field(default_factory=dict, repr=False)
    """Provenance: field, call, versions; what JSON can hold."""
    parsec_per_einstein: float | None = None
    """Einstein radius of one solar mass in the source plane [pc], where redshifts are known."""
    days_per_einstein: float | None = None
    """Days in which the source moves by one Einstein radius, where its motion is known."""
    source_radius: float = 0.0
    """Radius of the disc that the map was convolved with [theta_E]; 0 for a point source."""
    limb_darkening: float = 0.0
    """Linear coefficient of that disc."""

    def __post_init__(self) -> None:
        values = _image("values", self.values)
        for name in ("width", "height"):
            if not 0.0 < getattr(self, name) < np.inf:
                raise InputError(f"`{name}` must be positive and finite, got {getattr(self, name)}")
        per_pixel = self.width / values.shape[1]
        if not isclose(per_pixel, self.height / values.shape[0], rel_tol=_SQUARE):
            raise InputError(
                f"`height` must make square pixels, got {self.width:g} x {self.height:g} in {values.shape[1]} x "
                f"{values.shape[0]} pixels; give {per_pixel * values.shape[0]:g}"
            )
        error = None if self.error is None else _image("error", self.error)
        if error is not None and error.shape != values.shape:
            raise InputError(f"`error` must have the shape of `values`, got {error.shape} for {values.shape}")
        object.__setattr__(self, "values", values)
        object.__setattr__(self, "error", error)
        object.__setattr__(self, "center", (float(self.center[0]), float(self.center[1])))
        # What FITS brings back later is what is held now: lists in place of tuples, and nothing that JSON cannot hold.
        object.__setattr__(self, "description", json.loads(json.dumps(self.description)))

    @property
    def pixels(self) -> tuple[int, int]:
        """Number of pixels along u and v."""
        return self.values.shape[1], self.values.shape[0]

    @property
    def pixel_size(self) -> float:
        """Side of a pixel [theta_E]."""
        return self.width / self.pixels[0]

    @property
    def u(self) -> NDArray[np.float64]:
        """(n_u,) centres of the columns [theta_E]."""
        return _centres(self.center[0], self.width, self.values.shape[1])

    @property
    def v(self) -> NDArray[np.float64]:
        """(n_v,) centres of the rows [theta_E]."""
        return _centres(self.center[1], self.height, self.values.shape[0])

    @property
    def mean_magnification(self) -> float:
        """Mean over the map."""
        return float(self.values.mean())

    @property
    def flags(self) -> tuple[str, ...]:
        """Names in `FLAGS` that apply."""
        # Counting rays aims at a number of rays; and where no error was estimated it is not known.
        change = self.description.get("event", {}).get("macro_change")
        found = {
            "accuracy_not_reached": self.method == "area" and self.error_estimate > _MOST_ERROR * self.accuracy,
            "macro_varies": change is not None and change > _MOST_CHANGE,
        }
        return tuple(name for name in FLAGS if found[name])

    @property
    def status(self) -> str:
        """``ok``, or the flags that apply."""
        return ", ".join(self.flags) or "ok"

    def write(self, path: str | os.PathLike[str], overwrite: bool = False) -> None:
        """Write the map to a FITS file, whole or not at all; `read` gets it back without loss.

        Parameters
        ----------
        path : str or os.PathLike
            File to write.
        overwrite : bool
            Replace a file that is there.

        Raises
        ------
        InputError
            If a file is there and `overwrite` does not say so, or if it cannot be written.

        Notes
        -----
        The primary image holds the values with linear coordinates in Einstein radii, and as ``A`` in parsec where
        that is known; an image extension ``ERROR`` the errors; a table extension ``PROVENANCE`` the rest as JSON.
        """
        from crossing.shooting.maps.map_files import write_map

        write_map(self, path, overwrite=overwrite)

    @classmethod
    def read(cls, path: str | os.PathLike[str]) -> MagnificationMap:
        """Read a map that `write` has written.

        Raises
        ------
        InputError
            If the file is not such a map, or is damaged.
        """
        from crossing.shooting.maps.map_files import read_map

        return read_map(path)

    def statistics(self, bins: int | Sequence[float] | NDArray[np.float64] = 50) -> MapStatistics:
        """Mean, p(mu) per ln mu and P(>mu), each with a standard error; see `MapStatistics`.

        Parameters
        ----------
        bins : int or sequence of float
            Number of bins, equal in ln mu over the range of the map; or their edges.

        Raises
        ------
        InputError
            If the edges are not positive and increasing.
        """
        from crossing.shooting.maps.statistics import map_statistics

        return map_statistics(self, bins)

    def convolve(self, radius: float, limb_darkening: float = 0.0) -> MagnificationMap:
        """Map of a disc source in place of a point: smaller by a band in which the disc would leave the map.

        Parameters
        ----------
        radius : float
            Radius of the disc [theta_E], at least two pixels.
        limb_darkening : float
            Linear coefficient u in 0..1 of I = I0 [1 - u (1 - cos theta)].

        Raises
        ------
        InputError
            If the disc is too small for the pixels or too large for the map, or has been convolved already.

        Notes
        -----
        Each pixel counts by the exact integral of the disc's brightness over it. Pixel errors are taken as independent;
        those of area mapping partly cancel between neighbours, so that the error is an upper one.
        """
        from crossing.shooting.maps.convolution import convolve_map

        return convolve_map(self, radius, limb_darkening)

    def light_curve(self, start: tuple[float, float], end: tuple[float, float], samples: int | None = None) -> QTable:
        """Magnification along a straight line, interpolated between pixel centres (bilinear).

        Parameters
        ----------
        start, end : (float, float)
            Ends (u, v) of the line [theta_E], on the map.
        samples : int, optional
            Number of points, evenly spaced with both ends; two a pixel if None.

        Returns
        -------
        astropy.table.QTable
            position (fraction of the line, 0 to 1), u, v, magnification; and time [d] from the start where the motion
            is known.

        Raises
        ------
        InputError
            If the line leaves the map, or has less than two samples.
        """
        from crossing.shooting.maps.sampling import sample_line

        return sample_line(self, start, end, samples)

    def plot(self, ax: Axes | None = None, caustics: CausticNetwork | None = None) -> Axes:
        """Draw the map in colours of log magnification, with a bar in Einstein radii and days where these are known.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw; a new figure if None.
        caustics : CausticNetwork, optional
            Caustics of the same field, drawn over the map.
        """
        from crossing.shooting.maps.map_figure import plot_map

        return plot_map(self, ax, caustics)

    def to_dict(self) -> dict[str, Any]:
        """Everything but the arrays, as JSON can hold it."""
        of_field = self.description.get("field", {})
        return {
            "status": self.status,
            "flags": list(self.flags),
            "flag_meanings": {name: FLAGS[name] for name in self.flags},
            "mean_magnification": self.mean_magnification,
            "expected_mean": self.expected_mean,
            "error_estimate": self.error_estimate,
            "images": self.images,
            "center": list(self.center),
            "width": self.width,
            "height": self.height,
            "pixels": list(self.pixels),
            "method": self.method,
            "accuracy": self.accuracy,
            "rays": self.rays,
            **{name: of_field.get(name) for name in ("kappa", "gamma", "kappa_star", "stars")},
            "source_radius": self.source_radius,
            "limb_darkening": self.limb_darkening,
            "parsec_per_einstein": self.parsec_per_einstein,
            "days_per_einstein": self.days_per_einstein,
            "provenance": self.description,
        }

    def to_table(self) -> QTable:
        """The numbers of the map as a table: quantity, value, unit, meaning."""
        from astropy.table import QTable

        rows = self._rows()
        return QTable(
            {
                "quantity": np.array([row[0] for row in rows], dtype=str),
                "value": np.array([row[1] for row in rows], dtype=float),
                "unit": np.array([row[2] for row in rows], dtype=str),
                "meaning": np.array([row[3] for row in rows], dtype=str),
            },
            meta={"status": self.status, "method": self.method, "images": self.images},
        )

    def _rows(self) -> list[tuple[str, float, str, str]]:
        rows = [
            ("mean_magnification", self.mean_magnification, "", "mean over the map"),
            ("expected_mean", self.expected_mean, "", "mean over infinitely many fields"),
            ("error_estimate", self.error_estimate, "", "relative error per pixel, rms over the map"),
            ("width", self.width, "theta_E", "size along u"),
            ("height", self.height, "theta_E", "size along v"),
            ("pixel_size", self.pixel_size, "theta_E", "side of a pixel"),
            ("source_radius", self.source_radius, "theta_E", "disc that the map was convolved with"),
            ("parsec_per_einstein", self.parsec_per_einstein, "pc", "Einstein radius of one solar mass at the source"),
            ("days_per_einstein", self.days_per_einstein, "d", "time in which the source moves by it"),
            ("rays", float(self.rays), "", "rays that were shot"),
        ]
        return [(name, value, unit, meaning) for name, value, unit, meaning in rows if value is not None]

    def _repr_html_(self) -> str:
        flag = "".join(f"<p><strong>{escape(name)}</strong>: {escape(FLAGS[name])}</p>" for name in self.flags)
        head = (
            f"<p>magnification map, {self.pixels[0]} x {self.pixels[1]} pixels, {escape(self.method)}, "
            f"{'one macro image' if self.images == 1 else 'a merging pair'}</p>"
        )
        rows = "".join(
            f"<tr><th style='text-align:left'>{name}</th><td>{value:.6g} {unit}</td><td>{meaning}</td></tr>"
            for name, value, unit, meaning in self._rows()
        )
        return f"<div>{flag}{head}<table>{rows}</table></div>"


def _image(name: str, values: Any) -> NDArray[np.float64]:
    """A finite two-dimensional image as contiguous native float64."""
    image = np.ascontiguousarray(values, dtype=np.float64)
    if image.ndim != 2 or image.size == 0:
        raise InputError(f"`{name}` must be an image [v, u], got the shape {np.shape(values)}")
    # The sum is finite only if every pixel is, and needs no array of its own.
    if not isfinite(float(image.sum())):
        raise InputError(f"`{name}` must be finite, got a pixel that is not, or a sum too large")
    return image


def _centres(middle: float, size: float, count: int) -> NDArray[np.float64]:
    return middle + size * ((np.arange(count) + 0.5) / count - 0.5)
