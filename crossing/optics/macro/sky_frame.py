"""Sky, pixels and the tangent plane: what a celestial WCS says about the orientation and handedness of a map."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError

if TYPE_CHECKING:
    from astropy.io.fits import Header

__all__ = ["MapWcs", "SkyFrame", "offsets_from_sky", "read_wcs", "sky_from_offsets"]

Array: TypeAlias = npt.NDArray[np.float64]
Pair: TypeAlias = tuple[Array, Array]
Sky: TypeAlias = tuple[float, float]

_ARCSEC_PER_RADIAN = 206_264.806_247_096_36
# Axes that are further from a right angle than this have no frame of their own for components of shear.
_MOST_SKEW = 0.02
_MOST_UNEQUAL = 1e6


def sky_from_offsets(origin: Sky, east: npt.ArrayLike, north: npt.ArrayLike) -> Pair:
    """RA, Dec [deg] of places in the tangent plane at `origin` [deg], from offsets to east and north [arcsec]."""
    ra0, dec0 = np.radians(origin)
    xi, eta = (np.asarray(one, dtype=np.float64) / _ARCSEC_PER_RADIAN for one in (east, north))
    below = np.cos(dec0) - eta * np.sin(dec0)
    ra = ra0 + np.arctan2(xi, below)
    dec = np.arctan2(np.sin(dec0) + eta * np.cos(dec0), np.hypot(xi, below))
    return np.degrees(ra) % 360, np.degrees(dec)


def offsets_from_sky(origin: Sky, ra: npt.ArrayLike, dec: npt.ArrayLike) -> Pair:
    """Offsets to east and north [arcsec] in the tangent plane at `origin` [deg]; not a number beyond 90 degrees."""
    dec0 = np.radians(origin[1])
    turn = np.radians(np.asarray(ra, dtype=np.float64) - origin[0])
    dec = np.radians(np.asarray(dec, dtype=np.float64))
    depth = np.sin(dec0) * np.sin(dec) + np.cos(dec0) * np.cos(dec) * np.cos(turn)
    with np.errstate(divide="ignore", invalid="ignore"):
        east = np.where(depth > 0, np.cos(dec) * np.sin(turn) / depth, np.nan)
        north = np.cos(dec0) * np.sin(dec) - np.sin(dec0) * np.cos(dec) * np.cos(turn)
        north = np.where(depth > 0, north / depth, np.nan)
    return east * _ARCSEC_PER_RADIAN, north * _ARCSEC_PER_RADIAN


@dataclass(frozen=True, slots=True)
class MapWcs:
    """World coordinates of a map; RA and Dec are ICRS, whatever system the map itself uses."""

    wcs: Any
    """astropy's object for the two celestial axes."""
    frame: Any = None
    """The map's own system as an astropy frame, None where it is ICRS (or J2000, the same to 0.02 arcsec)."""

    def to_sky(self, column: npt.ArrayLike, row: npt.ArrayLike) -> Pair:
        """RA, Dec [deg] of pixels, whose first has its centre at (0, 0)."""
        ra, dec = self.wcs.all_pix2world(np.asarray(column, float), np.asarray(row, float), 0)
        if self.frame is not None:
            from astropy.coordinates import SkyCoord

            there = SkyCoord(ra, dec, unit="deg", frame=self.frame).icrs
            ra, dec = there.ra.deg, there.dec.deg
        return np.asarray(ra, dtype=np.float64), np.asarray(dec, dtype=np.float64)

    def to_pixel(self, ra: float, dec: float) -> Sky:
        """Column and row of a place on the sky [deg]; not numbers where it has none."""
        if self.frame is not None:
            from astropy.coordinates import SkyCoord

            there = SkyCoord(ra, dec, unit="deg", frame="icrs").transform_to(self.frame).spherical
            ra, dec = float(there.lon.deg), float(there.lat.deg)
        try:
            column, row = self.wcs.all_world2pix(ra, dec, 0)
        except Exception:  # astropy raises several classes of its own where distortions do not converge
            return np.nan, np.nan
        return float(column), float(row)

    def frame_at(self, position: Sky) -> SkyFrame:
        """Tangent plane at `position` [deg] and the linear way from it to pixels."""
        column, row = self.to_pixel(*position)
        steps = np.array([(0.5, 0.0), (-0.5, 0.0), (0.0, 0.5), (0.0, -0.5)])
        east, north = offsets_from_sky(position, *self.to_sky(column + steps[:, 0], row + steps[:, 1]))
        matrix = np.array([[east[0] - east[1], east[2] - east[3]], [north[0] - north[1], north[2] - north[3]]])
        return SkyFrame(origin=position, pixel=(column, row), matrix=matrix)


@dataclass(frozen=True, slots=True, kw_only=True)
class SkyFrame:
    """Tangent plane at a place: x to the east, y to the north [arcsec], and pixels as linear functions of them."""

    origin: Sky
    """RA, Dec [deg]."""
    pixel: Sky
    """Column and row of the origin."""
    matrix: Array
    """East and north [arcsec] (rows) of one step in column and row (columns), shape (2, 2)."""

    @property
    def inverse(self) -> Array:
        """Steps in column and row of one arcsec to east and north, shape (2, 2)."""
        return np.asarray(np.linalg.inv(self.matrix), dtype=np.float64)

    @property
    def pixel_size(self) -> float:
        """Side of a square as large as a pixel [arcsec]."""
        return float(np.sqrt(abs(np.linalg.det(self.matrix))))

    @property
    def axes(self) -> Array:
        """Directions of the pixel axes as columns of unit length, shape (2, 2).

        Raises
        ------
        InputError
            If they are not at right angles to each other.
        """
        units = self.matrix / np.hypot(*self.matrix)
        if abs(units[:, 0] @ units[:, 1]) > _MOST_SKEW:
            raise InputError('`axes` must be "sky" where pixel axes are not at right angles; give components to it')
        # The nearest orthogonal matrix, for axes that are not quite at right angles.
        left, _, right = np.linalg.svd(units)
        return np.asarray(left @ right)

    def to_pixel(self, x: npt.ArrayLike, y: npt.ArrayLike) -> Pair:
        """Column and row of offsets [arcsec]."""
        first, second = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
        (a, b), (c, d) = self.inverse
        return self.pixel[0] + a * first + b * second, self.pixel[1] + c * first + d * second

    def to_offsets(self, column: npt.ArrayLike, row: npt.ArrayLike) -> Pair:
        """Offsets [arcsec] of columns and rows."""
        first = np.asarray(column, dtype=np.float64) - self.pixel[0]
        second = np.asarray(row, dtype=np.float64) - self.pixel[1]
        (a, b), (c, d) = self.matrix
        return a * first + b * second, c * first + d * second

    def to_sky(self, x: npt.ArrayLike, y: npt.ArrayLike) -> Pair:
        """RA, Dec [deg] of offsets [arcsec]."""
        return sky_from_offsets(self.origin, x, y)


def read_wcs(header: Header) -> MapWcs:
    """Celestial coordinates of a FITS header.

    Raises
    ------
    InputError
        If there are none, or they are singular.
    """
    import warnings

    from astropy.wcs import WCS
    from astropy.wcs.utils import wcs_to_celestial_frame

    problem = "must have a celestial WCS (CTYPE, CRVAL, CRPIX, CD or CDELT), got {}; write one into the header"
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            wcs = WCS(header)
            if not wcs.has_celestial:
                raise InputError(problem.format("none"))
            wcs = wcs.celestial
            wcs.wcs.set()
            singular = not np.linalg.cond(wcs.pixel_scale_matrix) < _MOST_UNEQUAL
            frame = wcs_to_celestial_frame(wcs)
    except InputError:
        raise
    except Exception as error:  # astropy's WCS raises many classes for broken headers
        raise InputError(problem.format(f"a broken one ({str(error).strip().splitlines()[0]})")) from None
    if singular:
        raise InputError(problem.format("one whose pixels have no size"))
    plain = frame.name == "icrs" or (frame.name == "fk5" and frame.equinox.jyear == 2000.0)
    return MapWcs(wcs, None if plain else frame)
