"""A halo rendered as the map of a lens model, so that all that works on maps works on it."""

from __future__ import annotations

from dataclasses import dataclass
from math import hypot
from pathlib import Path
from typing import TYPE_CHECKING, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.optics.macro.lens_map import LensMap
from crossing.optics.macro.map_files import MapPlane
from crossing.optics.macro.sky_frame import MapWcs, offsets_from_sky

if TYPE_CHECKING:
    from crossing.optics.macro.dispersion import HaloSolution
    from crossing.optics.macro.profiles import MassProfile

__all__ = ["halo_map"]

Array: TypeAlias = npt.NDArray[np.float64]

_PIXELS: Final = 600
_ROOM: Final = 1.7
_SMALLEST_HALF: Final = 2.0
_RADII: Final = (0.05, 500.0, 400)


@dataclass(frozen=True, slots=True, kw_only=True)
class _RenderedPlane(MapPlane):
    """Pixels that are in memory."""

    values: Array

    def cutout(self, rows: slice, columns: slice) -> Array:
        return np.ascontiguousarray(self.values[rows, columns])


def halo_map(solution: HaloSolution, scale: float = 1.0) -> LensMap:
    """Convergence and shear of a halo's central values on a grid around the cluster's centre.

    Parameters
    ----------
    solution : HaloSolution
        The halo.
    scale : float
        D_ls/D_s of the farthest sources whose critical curves the map must hold, over that of the event's.

    Returns
    -------
    LensMap
        600 pixels a side, for the event's source and any other; no pixel's centre is the cluster's.
    """
    from astropy.wcs import WCS

    profile, centre = solution.profile, solution.record.centre or (0.0, 0.0)
    half = max(_ROOM * max(_critical_radius(profile, scale), hypot(*solution.offset)), _SMALLEST_HALF)
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = centre
    wcs.wcs.crpix = [_PIXELS / 2 + 0.5] * 2
    wcs.wcs.cdelt = [-2 * half / _PIXELS / 3600, 2 * half / _PIXELS / 3600]
    column, row = np.meshgrid(np.arange(_PIXELS), np.arange(_PIXELS))
    east, north = offsets_from_sky(centre, *wcs.all_pix2world(column, row, 0))
    kappa, (gamma1, gamma2) = profile.convergence(east, north), profile.shear(east, north)
    name, shape = solution.name or "halo", (_PIXELS, _PIXELS)
    planes: dict[str, MapPlane] = {
        key: _RenderedPlane(
            text=name, path=Path(name), hdu=0, layer=None, shape=shape, wcs=MapWcs(wcs), unit="", values=values
        )
        for key, values in (("convergence", kappa), ("shear1", gamma1), ("shear2", gamma2))
    }
    return LensMap(
        name=name,
        pieces="shear",
        planes=planes,
        wcs=MapWcs(wcs),
        shape=shape,
        axes="sky",
        deflection_scale=1.0,
        own_ratio=solution.scales.D_ls / solution.scales.D_s,
        scales=solution.scales,
    )


def _critical_radius(profile: MassProfile, scale: float) -> float:
    """Largest radius [arcsec] that the deflection still reaches, along two axes; 0 where there is none."""
    radius = np.geomspace(*_RADII)
    along, across = profile.deflection(radius, 0.0, scale=scale)[0], profile.deflection(0.0, radius, scale=scale)[1]
    within = radius[np.maximum(along, across) > radius]
    return float(within.max()) if within.size else 0.0
