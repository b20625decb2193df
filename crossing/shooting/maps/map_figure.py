"""Draw a magnification map, its statistics, and networks of caustics, on one pair of axes each."""

from __future__ import annotations

from math import floor, log10
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.axis import Axis

    from crossing.shooting.caustics.network import CausticNetwork
    from crossing.shooting.maps.magnification_map import MagnificationMap
    from crossing.shooting.maps.statistics import MapStatistics

__all__ = ["figure_size", "nice_length", "plot_caustics", "plot_map", "plot_statistics"]

_COLOURS = "cividis"  # perceptually uniform, also for colour-blind readers
_MOST_PIXELS = 1500
_SHARES = (0.001, 0.999)
_BAR = 0.3
_WIDE = 1.2
_DAYS_PER_YEAR = 365.25
_CURVE, _CUSP, _OVER_MAP = "#0072B2", "#D55E00", "#D55E00"
_MOST_MARKS = 300


def plot_map(chart: MagnificationMap, ax: Axes | None = None, caustics: CausticNetwork | None = None) -> Axes:
    """Draw a map in colours of log magnification, with a colour bar and a bar of length.

    Parameters
    ----------
    chart : MagnificationMap
        Map.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.
    caustics : CausticNetwork, optional
        Caustics of the same field, drawn over the map.

    Returns
    -------
    matplotlib.axes.Axes
    """
    from matplotlib.colors import LogNorm

    if ax is None:
        from matplotlib.figure import Figure

        ax = Figure(figsize=figure_size(chart), layout="constrained").add_subplot()
    picture, width, height = _smaller(chart)
    low, high = _range(picture)
    left, bottom = chart.center[0] - 0.5 * chart.width, chart.center[1] - 0.5 * chart.height
    drawn = ax.imshow(
        np.maximum(picture, low),
        origin="lower",
        extent=(left, left + width, bottom, bottom + height),
        norm=LogNorm(low, high),
        cmap=_COLOURS,
        interpolation="nearest",
    )
    label = "magnification" if chart.images == 1 else "magnification of the pair"
    where = "bottom" if chart.width > _WIDE * chart.height else "right"  # along the longer side
    bar = ax.figure.colorbar(drawn, ax=ax, location=where, label=label, extend="both", aspect=35.0, pad=0.02)
    _plain_numbers(bar.ax.xaxis if where == "bottom" else bar.ax.yaxis)
    ax.set_xlabel(r"$u$  [$\theta_E$ of 1 M$_\odot$]")
    ax.set_ylabel(r"$v$  [$\theta_E$]")
    _scale_bar(chart, ax)
    if caustics is not None:
        _draw_curves(caustics, ax, "source", _OVER_MAP, 0.45)
        ax.set(xlim=(left, left + width), ylim=(bottom, bottom + height))
    return ax


def plot_caustics(
    network: CausticNetwork, ax: Axes | None = None, plane: Literal["source", "image"] = "source"
) -> Axes:
    """Draw caustics with their cusps, or critical curves.

    Parameters
    ----------
    network : CausticNetwork
        Curves.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.
    plane : {"source", "image"}
        Caustics in the source plane, or critical curves in the image plane.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    InputError
        If `plane` is neither.
    """
    if plane not in ("source", "image"):
        raise InputError(f"`plane` must be source or image, got {plane!r}")
    if ax is None:
        from matplotlib.figure import Figure

        wide = 7.0 if plane == "source" else 9.0
        ax = Figure(figsize=(wide, 6.0), layout="constrained").add_subplot()
    _draw_curves(network, ax, plane, _CURVE, 0.7)
    if plane == "image":  # a patch of the image plane may be hundreds of times longer than it is high
        ax.autoscale_view()
        ax.set(xlabel=r"$x$  [$\theta_E$ of 1 M$_\odot$]", ylabel=r"$y$  [$\theta_E$]")
        return ax
    u, v = network.center
    ax.set(
        xlim=(u - 0.5 * network.width, u + 0.5 * network.width),
        ylim=(v - 0.5 * network.height, v + 0.5 * network.height),
        xlabel=r"$u$  [$\theta_E$ of 1 M$_\odot$]",
        ylabel=r"$v$  [$\theta_E$]",
        aspect="equal",
    )
    return ax


def _draw_curves(
    network: CausticNetwork, ax: Axes, plane: Literal["source", "image"], colour: str, thickness: float
) -> None:
    from matplotlib.collections import LineCollection

    source = plane == "source"
    lines = [np.column_stack((one.u, one.v) if source else (one.x, one.y)) for one in network.curves]
    ax.add_collection(LineCollection(lines, colors=colour, linewidths=thickness))
    marks = [one.cusps if source else one.critical_cusps for one in network.curves]
    cusps = np.concatenate([np.empty((0, 2)), *marks])
    if 0 < len(cusps) <= _MOST_MARKS:
        ax.plot(cusps[:, 0], cusps[:, 1], ls="", marker="D", ms=3.0, mfc="none", mec=_CUSP, mew=0.8, label="cusps")


def figure_size(chart: MagnificationMap) -> tuple[float, float]:
    """Width and height of a figure [inch] that a map with its colour bar fills."""
    wide, tall = chart.width, chart.height
    scale = 5.2 / max(min(wide, tall), 0.45 * max(wide, tall))
    size = (max(scale * wide, 1.0), max(scale * tall, 1.0))
    return (size[0] + 0.8, size[1] + 1.5) if wide > _WIDE * tall else (size[0] + 1.7, size[1] + 0.7)


def _plain_numbers(axis: Axis) -> None:
    """Label a logarithmic axis at 1, 2 and 5 with numbers as they are spoken."""
    from matplotlib.ticker import FuncFormatter, LogLocator, NullLocator

    axis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.set_minor_locator(NullLocator())


def _smaller(chart: MagnificationMap) -> tuple[NDArray[np.float64], float, float]:
    """Image that a figure can show, by means over whole pixels, with the width and height that it covers."""
    step = -(-max(chart.values.shape) // _MOST_PIXELS)
    if step == 1:
        return chart.values, chart.width, chart.height
    rows, columns = (max(1, size // step) for size in chart.values.shape)
    whole = chart.values[: rows * step, : columns * step]
    picture = whole.reshape(rows, whole.shape[0] // rows, columns, whole.shape[1] // columns).mean(axis=(1, 3))
    return picture, chart.pixel_size * whole.shape[1], chart.pixel_size * whole.shape[0]


def _range(picture: NDArray[np.float64]) -> tuple[float, float]:
    """Magnifications at the ends of the colours: all but the rarest."""
    light = picture[picture > 0.0]
    if not light.size:
        return 0.1, 1.0
    low, high = (float(part) for part in np.quantile(light, _SHARES))
    return (low, high) if high > 1.05 * low else (low / 1.5, high * 1.5)


def nice_length(longest: float) -> float:
    """Largest of 1, 2 and 5 times a power of ten that is no longer than `longest`."""
    power = 10.0 ** floor(log10(longest))
    return max(part * power for part in (1.0, 2.0, 5.0) if part * power <= longest * (1.0 + 1e-12))


def _scale_bar(chart: MagnificationMap, ax: Axes) -> None:
    length = nice_length(_BAR * chart.width)
    text = rf"{length:g} $\theta_E$"
    if chart.days_per_einstein is not None:
        text += f" = {_duration(length * chart.days_per_einstein)}"
    left = chart.center[0] - 0.47 * chart.width
    low = chart.center[1] - 0.46 * chart.height
    for colour, thickness in (("black", 5.0), ("white", 2.5)):  # legible on dark and light ground
        ax.plot([left, left + length], [low, low], color=colour, lw=thickness, solid_capstyle="butt")
    box = {"facecolor": "black", "alpha": 0.55, "edgecolor": "none", "pad": 1.5}
    ax.annotate(text, (left, low), xytext=(0, 6), textcoords="offset points", color="white", fontsize="small", bbox=box)


def _duration(days: float) -> str:
    if days >= 2.0 * _DAYS_PER_YEAR:
        return f"{days / _DAYS_PER_YEAR:.3g} years"
    return f"{days:.3g} days" if days >= 2.0 else f"{24.0 * days:.3g} hours"


def plot_statistics(found: MapStatistics, ax: Axes | None = None) -> Axes:
    """Draw p(mu) per ln mu and P(>mu) with their standard errors.

    Parameters
    ----------
    found : MapStatistics
        Statistics of a map.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.

    Returns
    -------
    matplotlib.axes.Axes
    """
    if ax is None:
        from matplotlib.figure import Figure

        ax = Figure(figsize=(6.0, 4.2), layout="constrained").add_subplot()
    middle = np.sqrt(found.edges[:-1] * found.edges[1:])
    for x, y, error, colour, style, name in (
        (middle, found.density, found.density_error, "#0072B2", "-", r"$p(\mu)$ per $\ln\mu$"),
        (found.edges, found.exceeding, found.exceeding_error, "#D55E00", "--", r"$P(>\mu)$"),
    ):
        seen = y > 0.0
        spread = np.nan_to_num(error)
        ax.fill_between(x, y - spread, y + spread, where=seen, color=colour, alpha=0.25, lw=0)
        ax.plot(x[seen], y[seen], color=colour, ls=style, lw=1.4, label=name)
    if found.expected_mean is not None and np.isfinite(found.expected_mean):
        ax.axvline(found.expected_mean, color="0.5", lw=0.8, ls=":", label="mean over all fields")
    ax.set(xscale="log", yscale="log", xlabel="magnification", ylabel="share of the area")
    _plain_numbers(ax.xaxis)
    top = float(max(found.density.max(initial=0.0), found.exceeding.max(initial=0.0), 1e-6))
    ax.set_ylim(bottom=max(0.5 / found.pixels, 1e-7 * top), top=2.0 * top)
    ax.legend(frameon=False, fontsize="small")
    return ax
