"""Single stars that cross micro-caustics behind galaxy clusters: from light curves to radii, verdicts and plans.

Everything public can be imported from here; a name loads its layer when it is first used.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOME = {
    # files
    "read_campaign": "crossing.event",
    "read_event": "crossing.event",
    "read_lightcurve": "crossing.photometry",
    # optics
    "LocalLens": "crossing.optics.local",
    "describe_macro": "crossing.optics.macro.macro_describe",
    "effective_velocity": "crossing.optics.motion",
    "einstein_radius": "crossing.optics.scales",
    "fold_magnification": "crossing.optics.fold",
    "intrinsic_knot": "crossing.optics.macro.intrinsic",
    # star fields
    "MagnificationMap": "crossing.shooting.maps.magnification_map",
    "StarField": "crossing.shooting.field",
    "TrackCurve": "crossing.shooting.tracks.track_curve",
    "count_images": "crossing.shooting.tracks.images",
    "forecast_peaks": "crossing.shooting.peaks.peak_forecast",
    "load_tracks": "crossing.shooting.library.ensemble",
    "magnification_map": "crossing.shooting.maps.mapping",
    "trace_caustics": "crossing.shooting.caustics.network",
    "track_crossings": "crossing.shooting.tracks.track",
    "track_magnification": "crossing.shooting.tracks.track",
    # rates
    "predict_rates": "crossing.population.event_rates",
    # inference
    "FitPriors": "crossing.inference",
    "fit_crossing": "crossing.inference",
    # errors
    "CrossingError": "crossing.errors",
    "InputError": "crossing.errors",
}

__all__ = [
    "CrossingError",
    "FitPriors",
    "InputError",
    "LocalLens",
    "MagnificationMap",
    "StarField",
    "TrackCurve",
    "count_images",
    "describe_macro",
    "effective_velocity",
    "einstein_radius",
    "fit_crossing",
    "fold_magnification",
    "forecast_peaks",
    "intrinsic_knot",
    "load_tracks",
    "magnification_map",
    "predict_rates",
    "read_campaign",
    "read_event",
    "read_lightcurve",
    "trace_caustics",
    "track_crossings",
    "track_magnification",
]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        value = getattr(import_module(_HOME[name]), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'crossing' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])
