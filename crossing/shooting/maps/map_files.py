"""Magnification maps as FITS files: linear coordinates, the essentials as cards, full provenance as JSON in a table."""

from __future__ import annotations

import json
import os
import secrets
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from importlib.metadata import version
from pathlib import Path
from typing import Any, Final

import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.shooting.maps.magnification_map import MagnificationMap

__all__ = ["FORMAT_VERSION", "read_map", "write_hdus", "write_map"]

FORMAT_VERSION: Final = 1
"""Version of the layout; a reader refuses those it does not know."""

_PROVENANCE: Final = "PROVENANCE"
_ERROR: Final = "ERROR"
_FIELDS: Final = (
    *("center", "width", "height", "method", "accuracy", "error_estimate", "images", "expected_mean", "rays"),
    *("description", "parsec_per_einstein", "days_per_einstein", "source_radius", "limb_darkening"),
)
# Cards of the primary header: keyword, key of the field's description, comment.
_CARDS: Final = (
    ("KAPPA", "kappa", "total convergence"),
    ("GAMMA", "gamma", "shear, u along the axis of 1-kappa-gamma"),
    ("KAPPASTR", "kappa_star", "convergence in point masses"),
    ("NSTARS", "stars", "number of point masses"),
)


def write_map(chart: MagnificationMap, path: str | os.PathLike[str], *, overwrite: bool = False) -> None:
    """See `MagnificationMap.write`."""
    target = Path(path)
    if not overwrite and os.path.lexists(target):
        raise InputError("is there already; choose another name or say overwrite=True", source=target)
    # A map may fill much of the memory: it is streamed to the disk, not made in memory first.
    temporary = target.with_name(f".crossing-{secrets.token_hex(6)}-{target.name}")
    try:
        write_hdus(chart, temporary)
        with temporary.open("rb+") as stream:
            os.fsync(stream.fileno())
        os.replace(temporary, target)
    except OSError as error:
        raise InputError(
            f"cannot be written: {error.strerror or error}; choose another place", source=target
        ) from error
    finally:
        temporary.unlink(missing_ok=True)


def write_hdus(chart: MagnificationMap, path: Path) -> None:
    """Write the FITS file of a map straight to a path where nothing is yet."""
    primary = fits.PrimaryHDU(chart.values)
    _coordinates(primary.header, chart, "", 1.0)
    if chart.parsec_per_einstein is not None:
        _coordinates(primary.header, chart, "A", chart.parsec_per_einstein)
    _essentials(primary.header, chart)
    units: list[Any] = [primary]
    if chart.error is not None:
        error = fits.ImageHDU(chart.error, name=_ERROR)
        _coordinates(error.header, chart, "", 1.0)
        units.append(error)
    text = json.dumps({"version": FORMAT_VERSION, **{name: getattr(chart, name) for name in _FIELDS}})
    column = fits.Column(name="json", format=f"{len(text)}A", array=[text])
    units.append(fits.BinTableHDU.from_columns([column], name=_PROVENANCE))
    fits.HDUList(units).writeto(path)


def _coordinates(header: fits.Header, chart: MagnificationMap, letter: str, scale: float) -> None:
    """Linear coordinates of the pixel centres: Einstein radii of one solar mass, or `scale` parsec each."""
    header[f"WCSNAME{letter}"] = "parsec at the source" if letter else "Einstein radii of one solar mass"
    for axis, (name, middle, count) in enumerate(zip("UV", chart.center, chart.pixels, strict=True), start=1):
        header[f"CTYPE{axis}{letter}"] = name
        if letter:
            header[f"CUNIT{axis}{letter}"] = "pc"
        header[f"CRPIX{axis}{letter}"] = (count + 1) / 2
        header[f"CRVAL{axis}{letter}"] = middle * scale
        header[f"CDELT{axis}{letter}"] = chart.pixel_size * scale


def _essentials(header: fits.Header, chart: MagnificationMap) -> None:
    header["OBJECT"] = "magnification map"
    header["CREATOR"] = f"crossing {version('crossing')}"
    of_field = chart.description.get("field", {})
    for keyword, key, comment in _CARDS:
        _card(header, keyword, of_field.get(key), comment)
    seed = of_field.get("seed")
    _card(header, "SEED", seed.get("entropy") if isinstance(seed, dict) else seed, "seed of the star field")
    _card(header, "METHOD", chart.method, "area mapping, or counting rays")
    _card(header, "ACCURACY", chart.accuracy, "relative rms error per pixel asked for")
    _card(header, "ERREST", chart.error_estimate, "estimated relative rms error per pixel")
    _card(header, "MEANMAG", chart.mean_magnification, "mean magnification of the map")
    _card(header, "EXPMEAN", chart.expected_mean, "mean over infinitely many fields")
    _card(header, "IMAGES", chart.images, "macro images that it is the total of")
    _card(header, "NRAYS", chart.rays, "rays that were shot")
    _card(header, "SRCRAD", chart.source_radius, "radius of the disc source [Einstein radii]")
    _card(header, "LIMBDARK", chart.limb_darkening, "its linear limb darkening")
    _card(header, "EINSTPC", chart.parsec_per_einstein, "[pc] Einstein radius at the source")
    _card(header, "EINSTDAY", chart.days_per_einstein, "[d] time to move by one Einstein radius")
    header["COMMENT"] = f"All of the provenance is JSON in the extension {_PROVENANCE}."


def _card(header: fits.Header, keyword: str, value: Any, comment: str) -> None:
    """Add a card where its value is known and FITS can hold it; the JSON holds it anyway."""
    if isinstance(value, float) and not np.isfinite(value):
        return
    if isinstance(value, int) and abs(value) >= 2**63:
        value = str(value)
    if value is None or not isinstance(value, str | int | float) or len(str(value)) > 40:
        return
    header[keyword] = (value, comment)


def read_map(path: str | os.PathLike[str]) -> MagnificationMap:
    """See `MagnificationMap.read`."""
    source = Path(path)
    if not source.exists():
        raise InputError("must exist, got no such file", source=source)
    try:
        with _one_line(), fits.open(source, memmap=False) as units:
            _check_whole(units, source.stat().st_size)
            if _PROVENANCE not in units:
                raise InputError(f"is not a magnification map: it has no extension {_PROVENANCE}")
            found = json.loads(str(units[_PROVENANCE].data["json"][0]))
            if found["version"] != FORMAT_VERSION:
                raise InputError(f"must have the layout {FORMAT_VERSION}, got {found['version']!r}; update crossing")
            told = {name: found[name] for name in _FIELDS}
            error = _native(units[_ERROR].data) if _ERROR in units else None
            return MagnificationMap(values=_native(units[0].data), error=error, **told)
    except InputError as error:
        raise error.located(source=source) from None


def _check_whole(units: fits.HDUList, size: int) -> None:
    for unit in units:
        if unit.fileinfo()["datLoc"] + unit.size > size:
            raise InputError("declares more data than the file holds; it is truncated")


def _native(image: Any) -> NDArray[np.float64]:
    """A big-endian image turned around in place."""
    if not isinstance(image, np.ndarray) or image.dtype != np.dtype(">f8"):
        raise InputError("is not a magnification map: its images are not of 64-bit floats")
    return image.byteswap(inplace=True).view(np.float64)


@contextmanager
def _one_line() -> Iterator[None]:
    """Turn any complaint about a damaged file into an `InputError`, and keep warnings off the screen."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    except InputError:
        raise
    except Exception as error:
        # Damaged files make the reader raise nearly every kind of exception; few of them mean anything to a user.
        told = str(error)[:160] if isinstance(error, OSError) else "its structure is damaged"
        raise InputError(f"is not a readable magnification map: {told}; check that the file is whole") from error
