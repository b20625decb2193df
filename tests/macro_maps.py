"""Analytic lenses rendered as FITS maps, with the records of an event file about them."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS

from crossing.event.records import MapRecord
from crossing.optics.macro.profiles import MassProfile
from crossing.optics.macro.sky_frame import offsets_from_sky, sky_from_offsets

CENTRE = (64.0381, -24.0675)
"""RA, Dec [deg] of the rendered lenses."""


@dataclass(frozen=True, kw_only=True)
class Grid:
    """Pixels on the sky."""

    width: int = 300
    height: int = 300
    pixel: float = 0.05
    """Side along rows [arcsec]."""
    stretch: float = 1.0
    """Height over width of a pixel."""
    rotation: float = 0.0
    """From north to east [deg]."""
    flipped: bool = False
    """East to the right."""
    shift: tuple[float, float] = (0.31, -0.17)
    """Offset of the lens from the middle [pixel]; keeps singular centres off the pixels."""
    extra: dict[str, object] = field(default_factory=dict)

    def header(self) -> fits.Header:
        wcs = WCS(naxis=2)
        wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
        wcs.wcs.crval = CENTRE
        wcs.wcs.crpix = [self.width / 2 + 0.5 + self.shift[0], self.height / 2 + 0.5 + self.shift[1]]
        c, s = np.cos(np.radians(self.rotation)), np.sin(np.radians(self.rotation))
        side = self.pixel / 3600
        first = side if self.flipped else -side
        wcs.wcs.cd = [[c * first, s * side * self.stretch], [-s * first, c * side * self.stretch]]
        header = wcs.to_header()
        header.update(self.extra)
        return header

    def offsets(self) -> tuple[np.ndarray, np.ndarray]:
        """East and north [arcsec] of all pixels."""
        column, row = np.meshgrid(np.arange(self.width), np.arange(self.height))
        ra, dec = WCS(self.header()).all_pix2world(column, row, 0)
        return offsets_from_sky(CENTRE, ra, dec)

    def axes(self) -> np.ndarray:
        """Directions of the pixel axes (columns) in east and north."""
        c, s = np.cos(np.radians(self.rotation)), np.sin(np.radians(self.rotation))
        first = 1.0 if self.flipped else -1.0
        return np.array([[c * first, s], [-s * first, c]])


def components(profile: MassProfile, grid: Grid, *, axes: str = "pixel", scale: float = 1.0) -> dict[str, np.ndarray]:
    """Convergence, shear and deflection of every pixel, components along the pixel axes or east and north."""
    x, y = grid.offsets()
    turn = grid.axes() if axes == "pixel" else np.eye(2)
    g1, g2 = profile.shear(x, y, scale=scale)
    matrix = np.array([[g1, g2], [g2, -g1]])
    turned = np.einsum("ji,jkab,kl->ilab", turn, matrix, turn)
    alpha = np.einsum("ji,jab->iab", turn, np.array(profile.deflection(x, y, scale=scale)))
    kappa = profile.convergence(x, y, scale=scale)
    return {
        "convergence": kappa,
        "shear1": turned[0, 0],
        "shear2": turned[0, 1],
        "shear": np.hypot(g1, g2),
        "deflection1": alpha[0],
        "deflection2": alpha[1],
    }


def write_planes(
    folder: Path,
    planes: dict[str, np.ndarray],
    grid: Grid,
    keys: tuple[str, ...] = ("convergence", "shear1", "shear2"),
    stem: str = "",
    dtype: str = ">f4",
) -> dict[str, str]:
    """Write one FITS file a plane; their names by key."""
    names = {}
    for key in keys:
        path = folder / f"{stem}{key}.fits"
        fits.PrimaryHDU(planes[key].astype(dtype), grid.header()).writeto(path, overwrite=True)
        names[key] = str(path)
    return names


def record_of(planes: dict[str, str], **options: Any) -> MapRecord:
    """What an event file says about one lens model, for D_ls/D_s = 1 unless a redshift is given."""
    own = {"normalised": "source_redshift" not in options, "name": "model", "deflection_unit": "arcsec"}
    return MapRecord(planes=planes, **{**own, **options})


def rendered(
    folder: Path,
    profile: MassProfile,
    grid: Grid,
    keys: tuple[str, ...] = ("convergence", "shear1", "shear2"),
    *,
    axes: Literal["pixel", "sky"] = "pixel",
    scale: float = 1.0,
    **options: Any,
) -> MapRecord:
    """Render a lens, with its own numbers times `scale`, and say where it is."""
    planes = write_planes(folder, components(profile, grid, axes=axes, scale=scale), grid, keys)
    return record_of(planes, axes=axes, **options)


def sky(x: float, y: float) -> tuple[float, float]:
    """RA, Dec [deg] of an offset from the lens [arcsec]."""
    ra, dec = sky_from_offsets(CENTRE, x, y)
    return float(ra), float(dec)
