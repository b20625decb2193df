"""How simulated events are shown: one figure each, one text, tables of all."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, Final

import numpy as np

from crossing.photometry.simulated import FLAGS
from crossing.photometry.simulated_figure import draw_fluxes, draw_magnitudes
from crossing.shooting.maps.map_figure import plot_map
from crossing.shooting.tracks.track_figure import draw_path

if TYPE_CHECKING:
    from collections.abc import Sequence

    from astropy.table import QTable
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from crossing.photometry.simulated import SimulatedEvent
    from crossing.shooting.caustics.network import CausticNetwork
    from crossing.shooting.maps.magnification_map import MagnificationMap

__all__ = ["CAUTIONS", "crossings_table", "placing_text", "realisations_table", "track_figure", "track_text"]

CAUTIONS: Final[tuple[str, ...]] = (
    "Macro lens, densities and redshifts enter by their central values; their uncertainties are not in the spread of "
    "the realisations.",
    "Stars are single blackbodies without dust in their galaxy; the stars of the lens do not move.",
    "The noise is Gaussian, from the depths of the bands, and does not grow with the flux.",
)
"""Limits of the claim, repeated in every output."""

_LISTED: Final = 12
_ZOOM_SHARE: Final = 0.6
# On a map that is larger than the one near the track by this factor, the frame alone says where it is.
_ARROW: Final = 10.0


def placing_text(peak: float | None) -> str:
    """How the places of the tracks were chosen, in words."""
    if peak is None:
        return "Tracks lie at random, whether something happens or not: most short light curves are quiet."
    which = "" if peak == 0.0 else f" that peak at a magnification of {peak:g} or more"
    return (
        f"In the middle of each light curve is a fold crossing, chosen evenly out of those of a random track{which}; "
        "speeds and directions are those of stars that cross. Rates must not be read off such a sample."
    )


def track_figure(event: SimulatedEvent, around: Sequence[tuple[MagnificationMap, CausticNetwork]]) -> Figure:
    """Magnitudes of the whole light curve, fluxes around its highest peak, and the track over two maps around it."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(12.0, 9.4), layout="constrained")
    grid = figure.add_gridspec(2, 2, height_ratios=(1.0, 1.3))
    whole = draw_magnitudes(event, figure.add_subplot(grid[0, 0]))
    whole.legend(loc="best", fontsize="small", frameon=False)
    whole.set_title("noiseless curves and measurements", loc="left", fontsize="medium")
    low, high = _zoom(event)
    near = draw_fluxes(event, figure.add_subplot(grid[0, 1]), (low, high))
    near.legend(loc="best", fontsize="small", frameon=False)
    near.set_title("around the highest peak", loc="left", fontsize="medium")
    whole.axvspan(low, high, color="0.85", alpha=0.5, lw=0, zorder=0)
    for column, (chart, network) in enumerate(around):
        panel = plot_map(chart, figure.add_subplot(grid[1, column]), network)
        panel.locator_params(nbins=5)
        if chart.width < _ARROW * around[0][0].width:
            draw_path(event.curve, panel, marks=column == 0)
        title = "the track; magnification of a point and caustics" if column == 0 else "its surroundings"
        panel.set_title(title, loc="left", fontsize="medium")
        if column > 0:
            _frame(panel, around[0][0])
    figure.suptitle(_title(event), x=0.01, ha="left", fontsize="large")
    return figure


def _frame(ax: Axes, inner: MagnificationMap) -> None:
    """Outline of another map."""
    from matplotlib.patches import Rectangle

    corner = (inner.center[0] - 0.5 * inner.width, inner.center[1] - 0.5 * inner.height)
    for colour, thickness in (("black", 2.6), ("white", 1.2)):  # legible on dark and light ground
        ax.add_patch(Rectangle(corner, inner.width, inner.height, fill=False, edgecolor=colour, lw=thickness))


def _title(event: SimulatedEvent) -> str:
    star, mark = event.star, f"  [{event.status}]" if event.flags else ""
    return (
        f"{event.event}, realisation {event.number}: R {star.radius:.3g} Rsun, T {star.temperature:.3g} K, "
        f"{event.motion.speed:.3g} km/s, highest magnification {event.peak[1][0]:.4g}{mark}"
    )


def _zoom(event: SimulatedEvent) -> tuple[float, float]:
    """Days around the highest point: some radius times of the crossing nearest to it."""
    day = event.peak[0] - event.options.start_mjd
    met, duration = event.crossings(), event.options.duration
    if not met:
        return 0.0, duration
    nearest = min(met, key=lambda one: abs(one["caustic_time_mjd"] - event.peak[0]))
    half = min(max(5.0 * nearest["radius_time_days"], 2.0 * event.options.cadence), 0.5 * _ZOOM_SHARE * duration)
    low = min(max(day - half, 0.0), duration - 2.0 * half)
    return low, low + 2.0 * half


def realisations_table(truths: Sequence[dict[str, Any]]) -> QTable:
    """One row a realisation, from what `SimulatedEvent.to_dict` gives; a column a band where there are several."""
    from astropy.table import QTable

    columns: dict[str, list[Any]] = {}
    for truth in truths:
        for key, value in truth.items():
            if isinstance(value, dict):
                for band, item in value.items():
                    columns.setdefault(f"{key}_{band}", []).append(item)
            elif key == "crossings":
                columns.setdefault("crossings", []).append(len(value))
            elif key != "flags":
                columns.setdefault(key, []).append(value)
    return QTable(columns)


def crossings_table(truths: Sequence[dict[str, Any]]) -> QTable:
    """One row a fold crossing of a realisation."""
    from astropy.table import QTable

    names = (
        *("caustic_time_mjd", "orientation", "radius_time_days", "normal_angle_deg", "strength"),
        *("background", "peak_magnification"),
    )
    rows = [(truth["number"], one) for truth in truths for one in truth["crossings"]]
    kinds = {"orientation": np.str_}
    table = QTable({"realisation": np.array([number for number, _ in rows], dtype=np.int64)})
    for name in names:
        table[name] = np.array([one[name] for _, one in rows], dtype=kinds.get(name, np.float64))
    return table


def track_text(name: str, truths: Sequence[dict[str, Any]], peak: float | None, priors: dict[str, str]) -> str:
    """Summary for a terminal: flags first, then the realisations and what limits them."""
    flags = dict.fromkeys(flag for truth in truths for flag in truth["flags"])
    lines = [f"{name}: {len(truths)} simulated light curve{'s' * (len(truths) > 1)}"]
    lines += [f"  flag {flag}: {FLAGS[flag]}" for flag in flags]
    lines.append("    no   R [Rsun]     T [K]   v [km/s]   highest mu   mag then   folds   seen/rows")
    for truth in truths[:_LISTED]:
        lines.append(
            f"  {truth['number']:>4} {truth['radius_rsun']:>10.4g} {truth['temperature_K']:>9.4g} "
            f"{truth['speed_km_s']:>10.4g} {truth['peak_magnification']:>12.4g} "
            f"{min(truth['peak_mag'].values()):>10.2f} {len(truth['crossings']):>7} "
            f"{truth['detections']:>7}/{truth['rows']}"
        )
    if len(truths) > _LISTED:
        lines.append(f"  ... and {len(truths) - _LISTED} more, in realisations.ecsv")
    if len(truths) > 1:
        highest = np.sort([truth["peak_magnification"] for truth in truths])
        lines.append(f"  highest magnifications: median {np.median(highest):.4g}, largest {highest[-1]:.4g}")
    lines.append(f"  {placing_text(peak)}")
    lines.append("  priors of the star:")
    lines += [f"    {key}: {text}" for key, text in priors.items()]
    lines.append("  cautions:")
    lines += [f"    {text}" for text in CAUTIONS]
    return "\n".join(lines)
