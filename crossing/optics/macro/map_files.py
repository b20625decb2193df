"""Planes of lens maps in FITS files: where they are, what they declare, and cutouts of them."""

from __future__ import annotations

import os
import re
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.sky_frame import MapWcs, read_wcs

if TYPE_CHECKING:
    from astropy.io.fits import Header

__all__ = ["MapPlane", "open_plane", "split_plane"]

Array: TypeAlias = npt.NDArray[np.float64]

_SUFFIX: Final = re.compile(r"^(?P<file>.+)\[(?P<hdu>[^\[\],]*)(?:,(?P<layer>\d+))?\]$")
# What people write into BUNIT of a quantity that has no unit.
_NO_UNIT: Final = frozenset(
    {"", "1", "none", "dimensionless", "unitless", "no unit", "kappa", "gamma", "convergence", "shear", "n/a"}
)
_PLAIN_FILES: Final = (".fits", ".fit", ".fts")
_FEWEST_PIXELS: Final = 16
_MOST_PIXELS: Final = 10_000_000_000


def split_plane(text: str) -> tuple[Path, str | None, int | None]:
    """File, extension and layer of a plane's name.

    Parameters
    ----------
    text : str
        ``file.fits``; ``file.fits[NAME]`` or ``file.fits[2]`` for an extension by its EXTNAME or number (0 is the
        primary one); ``file.fits[NAME,3]`` for the third layer of a cube, whose first is 1.

    Returns
    -------
    path : Path
        The file.
    extension : str or None
        Name or number; None is the first that holds an image.
    layer : int or None
        Layer of a cube, from 1.
    """
    match = None if os.path.exists(text) else _SUFFIX.match(text)
    if match is None:
        return Path(text), None, None
    layer = match["layer"]
    return Path(match["file"]), match["hdu"].strip() or None, None if layer is None else int(layer)


@dataclass(frozen=True, slots=True, kw_only=True)
class MapPlane:
    """One image of a FITS file, opened anew for every cutout."""

    text: str
    """Its name as it was given."""
    path: Path
    """The file."""
    hdu: int
    """Number of the header and data unit."""
    layer: int | None
    """Layer of a cube, from 0."""
    shape: tuple[int, int]
    """Rows and columns."""
    wcs: MapWcs
    """Celestial coordinates."""
    unit: str
    """BUNIT, stripped; empty where there is none."""

    def cutout(self, rows: slice, columns: slice) -> Array:
        """Part of the image as native float64, shape (rows, columns).

        Raises
        ------
        InputError
            If the file cannot be read any more, or ends before this part.
        """
        where = (rows, columns) if self.layer is None else (self.layer, rows, columns)
        with _fits(self.path, self.text) as hdus:
            data = np.asarray(hdus[self.hdu].section[where])
        expected = tuple(len(range(*cut.indices(size))) for cut, size in zip((rows, columns), self.shape, strict=True))
        if data.shape != expected:
            raise InputError("is truncated; copy it again", source=self.text)
        return np.ascontiguousarray(data, dtype=np.float64)

    def whole(self) -> Array:
        """The whole image as native float64."""
        return self.cutout(slice(0, self.shape[0]), slice(0, self.shape[1]))

    def check_dimensionless(self) -> None:
        """Raise an InputError if BUNIT says that this is no convergence or shear."""
        from astropy.units import Unit

        if self.unit.lower() in _NO_UNIT:
            return
        unit = Unit(self.unit, parse_strict="silent")
        if unit.is_equivalent("") and getattr(unit, "scale", None) is not None and unit.to("") == 1:
            return
        raise InputError(
            f"BUNIT must be empty for convergence and shear, got {self.unit!r}; divide by the critical surface density",
            source=self.text,
        )


def open_plane(text: str) -> MapPlane:
    """Find an image and read its header; its pixels stay on the disk.

    Parameters
    ----------
    text : str
        See `split_plane`.

    Returns
    -------
    MapPlane
        The image.

    Raises
    ------
    InputError
        If the file is missing, is no FITS file, has no such image, is shorter than it declares, or has no celestial
        WCS.
    """
    path, extension, layer = split_plane(text)
    with _fits(path, text) as hdus:
        number = _find(hdus, extension, text)
        header = hdus[number].header
        shape = tuple(int(size) for size in hdus[number].shape)
        if len(shape) == 3 and layer is not None:
            if not 1 <= layer <= shape[0]:
                raise InputError(f"layer must be 1 to {shape[0]}, got {layer}; layers count from 1", source=text)
        elif len(shape) != 2 or layer is not None:
            raise InputError(
                f"must be an image of two axes, got {len(shape)}; name a layer of a cube as file.fits[0,1]", source=text
            )
        if min(shape[-2:]) < _FEWEST_PIXELS:
            got = f"{shape[-1]} x {shape[-2]}"
            raise InputError(f"must have {_FEWEST_PIXELS} pixels or more a side, got {got}; cut out more", source=text)
        _check_length(path, hdus, number, shape, text)
        if shape[-1] * shape[-2] > _MOST_PIXELS:
            got = f"{shape[-1]} x {shape[-2]}"
            raise InputError(f"must have {_MOST_PIXELS:.0e} pixels or less, got {got}; check the header", source=text)
        wcs = _wcs_of(hdus, number, text)
        unit = str(header.get("BUNIT", "")).strip()
    index = None if layer is None else layer - 1
    size = shape[-2], shape[-1]
    return MapPlane(text=text, path=path, hdu=number, layer=index, shape=size, wcs=wcs, unit=unit)


def _wcs_of(hdus: Any, number: int, text: str) -> MapWcs:
    """WCS of an extension, or that of the primary header which some files keep for all."""
    headers: list[Header] = [hdus[number].header]
    if number and "CTYPE1" not in headers[0]:
        headers.append(hdus[0].header)
    try:
        return read_wcs(headers[-1])
    except InputError as error:
        raise error.located(source=text) from None


def _find(hdus: Any, extension: str | None, text: str) -> int:
    """Number of the wanted image."""
    images = {number: hdu for number, hdu in enumerate(hdus) if hdu.is_image and len(hdu.shape) >= 2}
    names = ", ".join(f"{number} {hdu.name}".strip() for number, hdu in images.items()) or "none"
    if extension is None:
        if not images:
            raise InputError("must hold an image, got none; name another file", source=text)
        return next(iter(images))
    for number, hdu in images.items():
        if extension == str(number) or (hdu.name and hdu.name.upper() == extension.upper()):
            return number
    raise InputError(f"has no image {extension!r}; its images are {names}", source=text)


def _check_length(path: Path, hdus: Any, number: int, shape: tuple[int, ...], text: str) -> None:
    """Refuse a file that is shorter than its header says, before any memory is set aside."""
    if path.suffix.lower() not in _PLAIN_FILES or not hasattr(hdus[number], "fileinfo"):
        return
    place = hdus[number].fileinfo()
    start = None if place is None else place.get("datLoc")
    if start is None:
        return
    compressed = type(hdus[number]).__name__ == "CompImageHDU"
    declared = 0 if compressed else abs(int(hdus[number].header["BITPIX"])) // 8 * int(np.prod(shape, dtype=object))
    length = path.stat().st_size
    if length < start + declared:
        size = " x ".join(str(one) for one in reversed(shape))
        raise InputError(
            f"is truncated: {size} pixels need {declared} bytes, got {max(length - start, 0)}; copy it again",
            source=text,
        )


@contextmanager
def _fits(path: Path, text: str) -> Iterator[Any]:
    """The units of a FITS file; whatever goes wrong is one line that names the file."""
    from astropy.io import fits

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            # Sections read no more than they need also without a memory map, which scaled integers forbid.
            with fits.open(path, memmap=False, mode="readonly") as hdus:
                yield hdus
    except InputError:
        raise
    except FileNotFoundError:
        raise InputError("does not exist; check its name and folder", source=text) from None
    except (PermissionError, IsADirectoryError) as error:
        raise InputError(f"cannot be read: {error.strerror}; name a readable FITS file", source=text) from None
    except MemoryError:
        raise InputError("declares more pixels than the memory holds; cut out the cluster", source=text) from None
    except Exception as error:  # astropy raises many classes for broken files
        reason = (str(error).strip() or type(error).__name__).splitlines()[0]
        raise InputError(f"is not a whole FITS file ({reason}); copy it again", source=text) from None
