"""Maps of a lens model on the sky, scaled to the source's redshift: read from FITS files, a cutout at a time."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Final, Literal, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.map_checks import (
    Fields,
    MapQuality,
    check_curl,
    check_deflections,
    check_shear,
    jacobian_of_deflections,
    turn_shear,
)
from crossing.optics.macro.map_files import MapPlane, open_plane
from crossing.optics.macro.sky_frame import MapWcs, SkyFrame
from crossing.optics.scales import LensScales

if TYPE_CHECKING:
    from crossing.event.records import MapRecord
    from crossing.optics.macro.map_patch import MapPatch

__all__ = ["LensMap", "read_lens_map"]

Array: TypeAlias = npt.NDArray[np.float64]
Sky: TypeAlias = tuple[float, float]
Pieces: TypeAlias = Literal["shear", "size of shear", "deflection"]

_SETS: Final[dict[Pieces, tuple[str, ...]]] = {
    "shear": ("convergence", "shear1", "shear2"),
    "size of shear": ("convergence", "shear", "deflection1", "deflection2"),
    "deflection": ("deflection1", "deflection2"),
}
_DEFLECTIONS: Final = ("deflection1", "deflection2")
_STENCIL: Final = 2
_STRIP_ROWS: Final = 256
_CHECK_PIXELS: Final = 128
_FEWEST_CHECKED: Final = 12
# Smallest distance of the position to the edge, or to pixels without a number, that derivatives need.
_EDGE_PIXELS: Final = 4
# Planes whose corners lie further apart than this are not on one grid [pixels].
_SAME_GRID: Final = 0.1


@dataclass(frozen=True, slots=True, kw_only=True)
class LensMap:
    """Convergence and shear (or deflections) of one lens model; pixels stay on the disk until they are asked for."""

    name: str
    """Name of the lens model."""
    pieces: Pieces
    """What convergence and shear are made of."""
    planes: dict[str, MapPlane]
    """Images by key."""
    wcs: MapWcs
    """Celestial coordinates, the same for all."""
    shape: tuple[int, int]
    """Rows and columns."""
    axes: Literal["pixel", "sky"]
    """Axes of the components of shear and deflection."""
    deflection_scale: float
    """Deflection of one unit of the files [arcsec]."""
    own_ratio: float
    """D_ls/D_s that the files hold for."""
    scales: LensScales
    """Distances of the event's lens and source."""

    @property
    def factor(self) -> float:
        """What multiplies convergence, shear and deflection of the files for the event's source."""
        return self.scales.D_ls / self.scales.D_s / self.own_ratio

    @property
    def margin(self) -> int:
        """Pixels along the edge that have no convergence and shear."""
        return 0 if self.pieces == "shear" else _STENCIL

    @property
    def centre(self) -> Sky:
        """RA, Dec [deg] of the map's centre."""
        ra, dec = self.wcs.to_sky((self.shape[1] - 1) / 2, (self.shape[0] - 1) / 2)
        return float(ra), float(dec)

    def for_source(self, redshift: float) -> LensMap:
        """The same lens for sources at another redshift."""
        return replace(self, scales=LensScales(self.scales.z_lens, redshift, self.scales.cosmology))

    def directions(self, frame: SkyFrame) -> Array:
        """Directions of the axes of components, as columns in the frame of east and north, shape (2, 2)."""
        return np.eye(2) if self.axes == "sky" else frame.axes

    def fields(self, rows: slice, columns: slice, frame: SkyFrame) -> Fields:
        """Convergence and shear of the files (before `factor`) in a part of the map, at least `margin` off its edge."""
        if self.pieces == "deflection":
            return self._of_deflections(rows, columns, frame)
        kappa = self.planes["convergence"].cutout(rows, columns)
        if self.pieces == "shear":
            first, second = (self.planes[key].cutout(rows, columns) for key in ("shear1", "shear2"))
            return Fields(kappa, *turn_shear(first, second, self.directions(frame)))
        derived = self._of_deflections(rows, columns, frame)
        length = np.hypot(derived.gamma1, derived.gamma2)
        size = self.planes["shear"].cutout(rows, columns) / np.where(length > 0, length, 1.0)
        return Fields(kappa, size * derived.gamma1, size * derived.gamma2)

    def whole(self, frame: SkyFrame) -> Fields:
        """Convergence and shear of the files (before `factor`) of all pixels but the `margin`."""
        rows, columns = (slice(self.margin, size - self.margin) for size in self.shape)
        shape = rows.stop - rows.start, columns.stop - columns.start
        result = Fields(*(np.empty(shape) for _ in range(3)))
        # Strips keep what is in between out of the memory, and most of it in the processor's cache.
        for start in range(rows.start, rows.stop, _STRIP_ROWS):
            strip = slice(start, min(start + _STRIP_ROWS, rows.stop))
            for target, part in zip(result, self.fields(strip, columns, frame), strict=True):
                target[strip.start - rows.start : strip.stop - rows.start] = part
        return result

    def deflections(self, rows: slice, columns: slice, frame: SkyFrame) -> tuple[Array, Array]:
        """Deflections of the files to east and north [arcsec], before `factor`."""
        first, second = (self.deflection_scale * self.planes[key].cutout(rows, columns) for key in _DEFLECTIONS)
        (a, b), (c, d) = self.directions(frame)
        return a * first + b * second, c * first + d * second

    def _of_deflections(self, rows: slice, columns: slice, frame: SkyFrame) -> Fields:
        wide, long = (slice(part.start - _STENCIL, part.stop + _STENCIL) for part in (columns, rows))
        return jacobian_of_deflections(*self.deflections(long, wide, frame), frame.inverse)

    def check(self, rows: slice, columns: slice, frame: SkyFrame) -> MapQuality:
        """Figures of merit of a part of the map; its pixels without a number are left out.

        Raises
        ------
        InputError
            If the pieces do not belong together; the message names the signs, axes or factor that would fit.
        """
        identity = agreement = None
        try:
            if self.pieces != "size of shear":
                raw = _finite_part([self.planes[key].cutout(rows, columns) for key in _SETS[self.pieces]])
                choices = {"pixel": _axes_or_none(frame), "sky": np.eye(2)}
                if raw and self.pieces == "deflection":
                    first, second = (self.deflection_scale * one for one in raw)
                    check_curl(first, second, choices, self.axes, frame.inverse)
                elif raw:
                    identity = check_shear(raw[0], raw[1], raw[2], choices, self.axes, frame.inverse)
            if self.pieces != "deflection" and all(key in self.planes for key in _DEFLECTIONS):
                inner = _shrink(rows, self.shape[0]), _shrink(columns, self.shape[1])
                pieces = _finite_part([*self.fields(*inner, frame), *self._of_deflections(*inner, frame)])
                if pieces:
                    agreement = check_deflections(Fields(*pieces[:3]), Fields(*pieces[3:]))
        except InputError as error:
            raise error.located(source=next(iter(self.planes.values())).text, where=self.name) from None
        return MapQuality(identity_misfit=identity, deflection_misfit=agreement)

    def frame_at(self, position: Sky) -> SkyFrame:
        """Tangent plane at a position [deg] well inside the map.

        Raises
        ------
        InputError
            If the position lies outside the map or too close to its edge.
        """
        column, row = self.wcs.to_pixel(*position)
        ny, nx = self.shape
        inside = min(column + 0.5, nx - 0.5 - column, row + 0.5, ny - 0.5 - row)
        where = f"RA {position[0]:.6f}, Dec {position[1]:.6f} deg"
        if not inside >= 0:
            raise InputError(f"`position` must lie on the map, got {where} outside of it; check both", source=self.name)
        need = _EDGE_PIXELS + self.margin
        if inside < need:
            raise InputError(
                f"`position` must lie {need} pixels or more from the edge of the map, got {where} at {inside:.1f}; "
                "give a larger map",
                source=self.name,
            )
        return self.wcs.frame_at(position)

    def patch(self, position: Sky, half_width: float) -> MapPatch:
        """Smooth interpolant of the map around a position.

        Parameters
        ----------
        position : (float, float)
            RA, Dec [deg].
        half_width : float
            How far it must reach each way [arcsec]; less where the map ends or has pixels without a number.

        Returns
        -------
        MapPatch
            Scaled to the event's source.

        Raises
        ------
        InputError
            If the position lies outside the map, or too close to its edge or to pixels without a number.
        """
        from crossing.optics.macro.map_patch import MapPatch

        frame = self.frame_at(position)
        reach = int(np.ceil(half_width * np.abs(frame.inverse).sum(axis=1).max())) + 1
        rows, columns = self.window(frame, max(reach, _EDGE_PIXELS))
        fields = self.fields(rows, columns, frame)
        room = _clear_pixels(fields, frame, rows, columns)
        if room < _EDGE_PIXELS:
            raise InputError(
                f"`position` must lie {_EDGE_PIXELS} pixels or more from pixels without a number, got RA "
                f"{position[0]:.6f}, Dec {position[1]:.6f} deg at {max(room, 0)}; give maps without holes there",
                source=self.name,
            )
        if room <= reach:
            smaller = self.window(frame, room)
            offset = smaller[0].start - rows.start, smaller[1].start - columns.start
            cut = tuple(slice(o, o + part.stop - part.start) for o, part in zip(offset, smaller, strict=True))
            rows, columns, fields = *smaller, Fields(*(one[cut] for one in fields))
        return MapPatch(fields, frame, (rows.start, columns.start), self.factor)

    def window(self, frame: SkyFrame, reach: int) -> tuple[slice, slice]:
        """Rows and columns within `reach` pixels of the frame's origin, kept off the map's edge."""
        centre = round(frame.pixel[1]), round(frame.pixel[0])
        rows, columns = (
            slice(max(middle - reach, self.margin), min(middle + reach + 1, size - self.margin))
            for middle, size in zip(centre, self.shape, strict=True)
        )
        return rows, columns


def _shrink(part: slice, size: int) -> slice:
    return slice(max(part.start, _STENCIL), min(part.stop, size - _STENCIL))


def _axes_or_none(frame: SkyFrame) -> Array | None:
    try:
        return frame.axes
    except InputError:
        return None


def _finite_part(arrays: list[Array]) -> list[Array]:
    """The arrays without the rows and columns that hold most of their gaps; none if little is left."""
    good = np.all(np.isfinite(arrays), axis=0)
    while not good.all():
        bad_rows, bad_columns = (~good).mean(axis=1), (~good).mean(axis=0)
        keep_rows, keep_columns = bad_rows < max(bad_rows.max(), 1e-9), bad_columns < max(bad_columns.max(), 1e-9)
        if bad_rows.max() >= bad_columns.max():
            keep_columns[:] = True
        else:
            keep_rows[:] = True
        keep = np.ix_(keep_rows, keep_columns)
        arrays, good = [one[keep] for one in arrays], good[keep]
        if min(good.shape) < _FEWEST_CHECKED:
            return []
    return arrays


def _clear_pixels(fields: Fields, frame: SkyFrame, rows: slice, columns: slice) -> int:
    """Pixels from the frame's origin to the nearest one without a number, the larger of the steps each way."""
    bad_rows, bad_columns = np.nonzero(~np.all(np.isfinite(fields), axis=0))
    if not bad_rows.size:
        return max(rows.stop - rows.start, columns.stop - columns.start)
    steps = np.maximum(
        np.abs(bad_rows + rows.start - round(frame.pixel[1])),
        np.abs(bad_columns + columns.start - round(frame.pixel[0])),
    )
    return int(steps.min()) - 1


def read_lens_map(record: MapRecord, scales: LensScales, *, check: bool = True) -> LensMap:
    """Open the maps of one lens model.

    Parameters
    ----------
    record : MapRecord
        What the event file says.
    scales : LensScales
        Lens and source of the event.
    check : bool
        Whether to compare the pieces with each other around the map's centre.

    Returns
    -------
    LensMap
        With headers read and compared.

    Raises
    ------
    InputError
        If pieces are missing, are no whole FITS images with celestial coordinates and known units, differ in shape or
        place, or contradict each other; or if the maps hold for sources in front of the lens.
    """
    pieces = _pieces(record.planes)
    planes = {key: open_plane(text) for key, text in record.planes.items()}
    first = next(iter(planes.values()))
    for plane in planes.values():
        _same_grid(first, plane)
    for key in planes.keys() - set(_DEFLECTIONS):
        planes[key].check_dimensionless()
    chart = LensMap(
        name=record.name or first.path.name,
        pieces=pieces,
        planes=planes,
        wcs=first.wcs,
        shape=first.shape,
        axes=record.axes,
        deflection_scale=_deflection_scale(record, planes),
        own_ratio=_own_ratio(record, scales),
        scales=scales,
    )
    if chart.axes == "pixel":
        _check_axes(chart)
    if check:
        frame = chart.wcs.frame_at(chart.centre)
        chart.check(*chart.window(frame, _CHECK_PIXELS), frame)
    return chart


def _check_axes(chart: LensMap) -> None:
    try:
        chart.directions(chart.wcs.frame_at(chart.centre))
    except InputError as error:
        raise error.located(source=chart.name) from None


def _pieces(planes: dict[str, str]) -> Pieces:
    """Which of the ways of giving a map this is."""
    for pieces, keys in _SETS.items():
        if all(key in planes for key in keys):
            if pieces == "deflection" and len(planes) > len(keys):
                break
            return pieces
    got = " + ".join(planes) or "nothing"
    raise InputError(
        f"must have convergence + shear1 + shear2, convergence + shear (its size) + deflection1 + deflection2, or "
        f"deflection1 + deflection2, got {got}; add what is missing",
        where="macro.maps",
    )


def _same_grid(first: MapPlane, other: MapPlane) -> None:
    if other.shape != first.shape:
        sizes = [f"{plane.shape[1]} x {plane.shape[0]}" for plane in (first, other)]
        raise InputError(
            f"must have the shape of {first.text}, {sizes[0]} pixels, got {sizes[1]}; resample one", source=other.text
        )
    if other is first:
        return
    ny, nx = first.shape
    corners = np.array([0, nx - 1, 0, nx - 1]), np.array([0, 0, ny - 1, ny - 1])
    ra, dec = other.wcs.to_sky(*corners)
    there = np.array([first.wcs.to_pixel(a, b) for a, b in zip(ra, dec, strict=True)]).T
    if not np.all(np.abs(there - np.array(corners)) < _SAME_GRID):
        raise InputError(f"must lie on the sky where {first.text} does; resample one of them", source=other.text)


def _deflection_scale(record: MapRecord, planes: dict[str, MapPlane]) -> float:
    """Arcseconds of one unit of the deflections."""
    from astropy.units import Unit

    if "deflection1" not in planes:
        return 1.0
    scales = []
    for key in _DEFLECTIONS:
        plane = planes[key]
        text = record.deflection_unit or plane.unit
        if not text:
            raise InputError(
                '`deflection_unit` must be given, since the file has no BUNIT; add deflection_unit = "arcsec"',
                source=plane.text,
            )
        unit = Unit(text, parse_strict="silent")
        if unit.is_equivalent("pix"):
            scales.append(_square_pixel(plane) * unit.to("pix"))
        elif unit.is_equivalent("arcsec"):
            scales.append(unit.to("arcsec"))
        else:
            raise InputError(
                f'deflection must be in an angle or in pixels, got the unit {text!r}; give deflection_unit = "arcsec"',
                source=plane.text,
            )
    if scales[0] != scales[1]:
        raise InputError("must have the unit of deflection1; give deflection_unit", source=planes["deflection2"].text)
    return float(scales[0])


def _square_pixel(plane: MapPlane) -> float:
    ra, dec = plane.wcs.to_sky((plane.shape[1] - 1) / 2, (plane.shape[0] - 1) / 2)
    sides = np.hypot(*plane.wcs.frame_at((float(ra), float(dec))).matrix)
    if abs(sides[0] / sides[1] - 1) > 1e-3:
        raise InputError("`deflection_unit` must be an angle where pixels are not square; convert", source=plane.text)
    return float(sides.mean())


def _own_ratio(record: MapRecord, scales: LensScales) -> float:
    """D_ls/D_s of the maps themselves."""
    where = "macro.maps.source_redshift"
    if record.normalised and record.source_redshift is not None:
        raise InputError("must not stand beside normalised = true; remove one", where=where)
    if record.normalised:
        return 1.0
    if record.source_redshift is None:
        raise InputError("must be given, unless normalised = true says that D_ls/D_s = 1; add it", where=where)
    if not record.source_redshift > scales.z_lens:
        raise InputError(
            f"must be larger than the lens redshift {scales.z_lens:g}, got {record.source_redshift:g}; check both",
            where=where,
        )
    own = LensScales(scales.z_lens, record.source_redshift, scales.cosmology)
    return own.D_ls / own.D_s
