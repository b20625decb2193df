"""Where a result comes from: versions, options and hashes of the inputs."""

from __future__ import annotations

import platform
from importlib.metadata import version
from typing import TYPE_CHECKING, Any

from crossing.event import Event

if TYPE_CHECKING:
    from crossing.photometry import LightCurve

__all__ = ["provenance"]

_PACKAGES = ("crossing", "numpy", "scipy", "astropy", "lmfit", "dynesty")


def provenance(event: Event | LightCurve, curve: LightCurve, options: dict[str, Any]) -> dict[str, Any]:
    """Versions of the packages that the numbers depend on, options with the seed, and SHA-256 of all inputs."""
    inputs = [{"path": str(path), "sha256": digest} for path, digest in curve.sources]
    if isinstance(event, Event):
        inputs.insert(0, {"path": str(event.path), "sha256": event.sha256})
    return {
        "versions": {"python": platform.python_version()} | {name: version(name) for name in _PACKAGES},
        "options": options,
        "inputs": inputs,
        "time_scale": curve.time_scale,
        "rows": len(curve),
        "rows_used": int(curve.used.sum()),
    }
