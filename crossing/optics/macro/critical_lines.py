"""Critical curves of a lens map and their caustics, for any list of source redshifts."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.grid_lines import GridLine, Kind, sample_grid, zero_lines
from crossing.optics.macro.lens_map import LensMap
from crossing.optics.macro.map_checks import Fields
from crossing.optics.macro.sky_frame import SkyFrame, offsets_from_sky

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

__all__ = ["CriticalLine", "CriticalLines", "critical_lines"]

Array: TypeAlias = npt.NDArray[np.float64]
Sky: TypeAlias = tuple[float, float]

# Straight ways from the reference to a curve, whose median fixes where its caustic lies.
_WAYS = 9
_NODES, _WEIGHTS = (np.array([-np.sqrt(0.6), 0.0, np.sqrt(0.6)]), np.array([5.0, 8.0, 5.0]) / 18)


@dataclass(frozen=True, slots=True, kw_only=True)
class CriticalLine:
    """One critical curve and its caustic; arrays of shape (vertices,)."""

    curve: int
    """Number of the curve, from 1."""
    kind: Kind
    """Whether images are stretched along the curve (tangential) or across it."""
    source_redshift: float
    """Redshift of the sources."""
    closed: bool
    """Whether the last vertex is the first again; open ones end at the map's edge or at missing pixels."""
    ra: Array
    """Right ascension [deg]."""
    dec: Array
    """Declination [deg]."""
    x: Array
    """Offset to the east of the reference [arcsec]."""
    y: Array
    """Offset to the north of the reference [arcsec]."""
    caustic_x: Array
    """Offset of the caustic to the east of the reference's source [arcsec]."""
    caustic_y: Array
    """Offset of the caustic to the north of the reference's source [arcsec]."""

    @property
    def area(self) -> float:
        """Enclosed part of the image plane [arcsec**2]; the ends of an open curve are joined."""
        return abs(float(np.sum(self.x * np.roll(self.y, -1) - self.y * np.roll(self.x, -1)))) / 2


@dataclass(frozen=True, slots=True, kw_only=True)
class CriticalLines:
    """Critical curves of one lens model."""

    name: str
    """Name of the lens model."""
    reference: Sky
    """RA, Dec [deg] that offsets count from."""
    lines: tuple[CriticalLine, ...]
    """Curves by source redshift, tangential before radial, the longest first."""

    def of_source(self, redshift: float, kind: Kind | None = None) -> tuple[CriticalLine, ...]:
        """Curves for one of the redshifts, of one kind or of both."""
        return tuple(
            line for line in self.lines if line.source_redshift == redshift and (kind is None or line.kind == kind)
        )

    def to_table(self) -> QTable:
        """One row a vertex: curve, kind, source_redshift, ra, dec and the caustic's offsets."""
        from astropy import units as u
        from astropy.table import QTable

        counts = [len(line.ra) for line in self.lines]
        scalars = {name: [getattr(line, name) for line in self.lines] for name in ("curve", "kind", "source_redshift")}
        dtypes = {"curve": np.int64, "kind": np.str_, "source_redshift": np.float64}
        columns: dict[str, Any] = {
            name: np.repeat(np.array(values, dtype=dtypes[name]), counts) for name, values in scalars.items()
        }
        for name, unit in (("ra", u.deg), ("dec", u.deg), ("caustic_x", u.arcsec), ("caustic_y", u.arcsec)):
            columns[name] = np.concatenate([np.empty(0), *(getattr(line, name) for line in self.lines)]) * unit
        return QTable(
            columns, meta={"model": self.name, "reference_ra": self.reference[0], "reference_dec": self.reference[1]}
        )

    def to_dict(self) -> dict[str, Any]:
        """Curves as lists of RA and Dec [deg]."""
        return {
            "name": self.name,
            "reference_deg": list(self.reference),
            "curves": [
                {
                    "curve": line.curve,
                    "kind": line.kind,
                    "source_redshift": line.source_redshift,
                    "closed": line.closed,
                    "ra_deg": line.ra.tolist(),
                    "dec_deg": line.dec.tolist(),
                }
                for line in self.lines
            ],
        }

    def plot(self, ax: Axes | None = None, *, plane: Literal["image", "source"] = "image") -> Axes:
        """Draw the critical curves, or in the source plane the caustics, with east to the left.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw; a figure of its own otherwise.
        plane : str
            ``image`` or ``source``.

        Returns
        -------
        matplotlib.axes.Axes
            Where it was drawn.
        """
        from matplotlib.figure import Figure

        axes: Axes = Figure(figsize=(6, 6), layout="constrained").add_subplot() if ax is None else ax
        redshifts = sorted({line.source_redshift for line in self.lines})
        shown: set[float] = set()
        for line in self.lines:
            style = redshifts.index(line.source_redshift)
            axes.plot(
                line.x if plane == "image" else line.caustic_x,
                line.y if plane == "image" else line.caustic_y,
                color=f"C{style}",
                linestyle=("-", "--", "-.", ":")[style % 4],
                linewidth=1.4 if line.kind == "tangential" else 0.8,
                label=None if line.source_redshift in shown else f"source at z = {line.source_redshift:g}",
            )
            shown.add(line.source_redshift)
        axes.set_xlabel("east of the reference [arcsec]")
        axes.set_ylabel("north of the reference [arcsec]")
        axes.set_aspect("equal")
        if not axes.xaxis_inverted():
            axes.invert_xaxis()
        if shown:
            axes.legend(frameon=False)
        return axes


def critical_lines(lens_map: LensMap, redshifts: Sequence[float], reference: Sky | None = None) -> CriticalLines:
    """Critical curves and caustics of a lens map.

    Parameters
    ----------
    lens_map : LensMap
        The map; it is read whole.
    redshifts : sequence of float
        Redshifts of the sources, behind the lens.
    reference : (float, float), optional
        RA, Dec [deg] that offsets count from; its source is the origin of the source plane. Default: the map's centre.

    Returns
    -------
    CriticalLines
        Curves of four vertices and more.

    Raises
    ------
    InputError
        If a redshift is not behind the lens, or the map cannot be read.

    Notes
    -----
    Deflections are not needed: along a critical curve the caustic follows from the Jacobian, dbeta = A dtheta, and from
    the reference to the curve along straight lines. The misfit at the end of a closed curve is spread over it.
    """
    sources = [lens_map.for_source(float(z)) for z in redshifts]
    if not sources:
        raise InputError("`redshifts` must hold at least one, got none; give those of the sources")
    frame = lens_map.wcs.frame_at(lens_map.centre if reference is None else reference)
    margin = lens_map.margin
    fields = lens_map.whole(frame)
    factors = [one.factor for one in sources]
    lines: list[CriticalLine] = []
    kinds: tuple[Kind, ...] = ("tangential", "radial")
    by_kind = {kind: zero_lines(fields, factors, kind) for kind in kinds}
    for number, source in enumerate(sources):
        for kind, found in by_kind.items():
            for line in found[number]:
                place = _Place(fields, frame, margin, source, lens_map)
                lines.append(place.critical_line(line, kind, len(lines) + 1))
    return CriticalLines(name=lens_map.name, reference=frame.origin, lines=tuple(lines))


@dataclass(frozen=True, slots=True)
class _Place:
    """What turns lines of pixels into curves on the sky and in the source plane."""

    fields: Fields
    frame: SkyFrame
    margin: int
    source: LensMap
    lens_map: LensMap

    def critical_line(self, line: GridLine, kind: Kind, number: int) -> CriticalLine:
        ra, dec = self.lens_map.wcs.to_sky(line.column + self.margin, line.row + self.margin)
        x, y = offsets_from_sky(self.frame.origin, ra, dec)
        caustic_x, caustic_y = self._caustic(line)
        return CriticalLine(
            curve=number,
            kind=kind,
            source_redshift=self.source.scales.z_source,
            closed=line.closed,
            ra=ra,
            dec=dec,
            x=x,
            y=y,
            caustic_x=caustic_x,
            caustic_y=caustic_y,
        )

    def _caustic(self, line: GridLine) -> tuple[Array, Array]:
        """The Jacobian's integral along the curve, put where straight ways from the reference say."""
        steps = _filled(self._steps(line.column[:-1], line.row[:-1], line.column[1:], line.row[1:], 1))
        along = np.concatenate([np.zeros((2, 1)), np.cumsum(steps, axis=1)], axis=1)
        if line.closed:
            along -= along[:, -1:] * np.linspace(0, 1, along.shape[1])
        some = np.unique(np.linspace(0, len(line.column) - 1, _WAYS).astype(int))
        origin = self.frame.pixel[0] - self.margin, self.frame.pixel[1] - self.margin
        column, row = line.column[some], line.row[some]
        panels = int(np.ceil(np.max(np.hypot(column - origin[0], row - origin[1])))) + 1
        straight = self._steps(np.full_like(column, origin[0]), np.full_like(row, origin[1]), column, row, panels)
        apart = (straight - along[:, some])[:, np.all(np.isfinite(straight), axis=0)]
        offset = np.median(apart, axis=1) if apart.size else np.zeros(2)
        return along[0] + offset[0], along[1] + offset[1]

    def _steps(self, column0: Array, row0: Array, column1: Array, row1: Array, panels: int) -> Array:
        """Source positions of ends less those of starts [arcsec] along straight lines, shape (2, lines)."""
        d_column, d_row = column1 - column0, row1 - row0
        (a, b), (c, d) = self.frame.matrix
        dx, dy = a * d_column + b * d_row, c * d_column + d * d_row
        t = ((np.arange(panels) + 0.5)[:, None] / panels + _NODES / (2 * panels)).ravel()[:, None]
        weight = np.tile(_WEIGHTS / panels, panels)[:, None]
        column, row = column0 + t * d_column, row0 + t * d_row
        kappa, g1, g2 = (self.source.factor * sample_grid(one, column, row) for one in self.fields)
        step_x, step_y = (1 - kappa - g1) * dx - g2 * dy, -g2 * dx + (1 - kappa + g1) * dy
        return np.stack([np.sum(weight * step_x, axis=0), np.sum(weight * step_y, axis=0)])


def _filled(steps: Array) -> Array:
    """Steps along a curve, those next to missing pixels taken from the nearest others, shape (2, steps)."""
    good = np.all(np.isfinite(steps), axis=0)
    if good.all():
        return steps
    if not good.any():
        return np.zeros_like(steps)
    index = np.arange(steps.shape[1])
    return np.stack([np.interp(index, index[good], one[good]) for one in steps])
