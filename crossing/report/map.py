"""How a magnification map is shown: one figure, one text."""

from __future__ import annotations

from typing import TYPE_CHECKING, Final

from crossing.shooting.caustics.network import FLAGS as CAUSTIC_FLAGS
from crossing.shooting.maps.magnification_map import FLAGS
from crossing.shooting.maps.map_figure import figure_size, plot_map, plot_statistics

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from crossing.shooting.caustics.network import CausticNetwork
    from crossing.shooting.maps.magnification_map import MagnificationMap
    from crossing.shooting.maps.mapping import MapPlan
    from crossing.shooting.maps.statistics import MapStatistics

__all__ = ["CAUTIONS", "map_figure", "map_text", "plan_text"]

CAUTIONS: Final[tuple[str, ...]] = (
    "This is one random field; another seed gives another map, and small maps scatter by several percent in the mean.",
    "Macro lens, densities and redshifts enter by their central values; their uncertainties are not in the map.",
    "The stars do not move.",
)
"""Limits of the claim, repeated in every output."""


_WIDE: Final = 1.9
_PANEL: Final = (5.4, 4.2)


def map_figure(chart: MagnificationMap, found: MapStatistics, network: CausticNetwork | None = None) -> Figure:
    """The map, with its caustics where they are given, and beside it the distribution of its magnifications."""
    from matplotlib.figure import Figure

    width, height = figure_size(chart)
    if chart.width > _WIDE * chart.height:  # one above the other
        figure = Figure(figsize=(width, height + _PANEL[1]), layout="constrained")
        left, right = figure.subplots(2, 1, height_ratios=(height, _PANEL[1]))
    else:
        figure = Figure(figsize=(width + _PANEL[0], height), layout="constrained")
        left, right = figure.subplots(1, 2, width_ratios=(width, _PANEL[0]))
    plot_map(chart, left, network)
    plot_statistics(found, right)
    name = chart.description.get("event", {}).get("name")
    left.set_title("magnification map" if name is None else name, loc="left", fontsize="medium")
    right.set_title(f"mean {_mean(chart, found)}" + _warning(chart), loc="left", fontsize="medium")
    return figure


def _mean(chart: MagnificationMap, found: MapStatistics) -> str:
    if chart.images == 2:  # the macro lens itself changes across it, which is no error of the mean
        return f"{found.mean:.4g}"
    text = f"{found.mean:.4g} +- {found.mean_error:.2g}"
    return text if chart.expected_mean is None else f"{text} (all fields: {chart.expected_mean:.4g})"


def _warning(chart: MagnificationMap) -> str:
    return f"  [{chart.status}]" if chart.flags else ""


def map_text(chart: MagnificationMap, found: MapStatistics, network: CausticNetwork | None = None) -> str:
    """Summary for a terminal: flags first, then the lens, the map and what limits it."""
    told, event = chart.description.get("field", {}), chart.description.get("event", {})
    lines = [f"{event.get('name', 'star field')}: magnification map"]
    lines += [f"  flag {name}: {FLAGS[name]}" for name in chart.flags]
    if event.get("macro_models", 1) > 1:
        name = event["macro_name"] or "without a name"
        lines.append(f"  macro model          {event['macro_model']} ({name}) of {event['macro_models']}")
    if told:
        lines.append(
            f"  lens                 kappa {told['kappa']:.4g}, gamma {told['gamma']:.4g}, in stars "
            f"{told['kappa_star']:.4g}; {told['stars']} stars"
        )
    lines += [
        f"  images               {'one macro image' if chart.images == 1 else 'both of a merging pair'}",
        f"  mean magnification   {_mean(chart, found)}",
        f"  error per pixel      {chart.error_estimate:.2g} (relative, rms; {chart.method})",
        f"  map                  {chart.width:g} x {chart.height:g} Einstein radii of one solar mass, "
        f"{chart.pixels[0]} x {chart.pixels[1]} pixels",
    ]
    if network is not None:
        lines += [f"  flag {name}: {CAUSTIC_FLAGS[name]}" for name in network.flags]
        per_area = network.length() / (network.width * network.height)
        lines.append(
            f"  caustics             {len(network)} curves, {len(network.cusps)} cusps, {per_area:.4g} Einstein radii "
            "long per unit area"
        )
    if chart.parsec_per_einstein is not None:
        lines.append(f"  Einstein radius      {chart.parsec_per_einstein:.4g} pc at the source")
    if chart.days_per_einstein is not None:
        lines.append(f"  motion               {chart.days_per_einstein:.4g} days per Einstein radius (median speed)")
    lines.append("  cautions:")
    lines += [f"    {text}" for text in CAUTIONS]
    return "\n".join(lines)


def plan_text(plan: MapPlan) -> str:
    """One line about what a map will take."""
    return f"about {plan.seconds:.2g} s and {plan.bytes / 2**30:.2g} GiB, {plan.stars} stars, {plan.rays:.2g} rays"
