"""Draw a forecast of peaks: how often they exceed a magnification, and light curves around some crossings."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from crossing.shooting.peaks.peak_result import PeakForecast

__all__ = ["plot_examples", "plot_peaks"]

Array = NDArray[np.float64]

# Okabe & Ito's colours with a line style each, so that colour never carries the meaning alone.
_STYLES: Final[tuple[tuple[str, Any], ...]] = (
    ("#0072B2", "-"),
    ("#D55E00", "--"),
    ("#009E73", "-."),
    ("#CC79A7", ":"),
    ("#E69F00", (0, (5, 1, 1, 1))),
)
_MOST_CURVES: Final = 5
_DAYS_PER_YEAR: Final = 365.25
_FEWEST: Final = 5


def plot_peaks(forecast: PeakForecast, ax: Axes | None = None) -> Axes:
    """Draw how many peaks a year, or an Einstein radius, exceed a magnification; a curve for each of a few radii.

    Parameters
    ----------
    forecast : PeakForecast
        Forecast.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.

    Returns
    -------
    matplotlib.axes.Axes
    """
    if ax is None:
        from matplotlib.figure import Figure

        ax = Figure(figsize=(6.0, 4.4), layout="constrained").add_subplot()
    sample, years = forecast.sample, forecast.years_per_einstein
    ax.set(xscale="log", yscale="log", xlabel="magnification at the peak")
    ax.set_ylabel("peaks above it per Einstein radius" if years is None else "peaks above it per year")
    if sample is None or not len(sample):
        _closed_forms(forecast, ax)
        return ax
    per_year, network = 1.0 / (years or 1.0), forecast.regime == "saturated"
    lowest = float(np.sort(sample.weight)[:_FEWEST].sum()) * per_year
    for row, (colour, style) in zip(_chosen(forecast), _STYLES, strict=False):
        peaks = sample.peaks(_einstein(forecast, row.radius_rsun), forecast.limb_darkening)
        order = np.argsort(peaks)[::-1]
        rate = np.cumsum(sample.weight[order]) * per_year
        ax.plot(peaks[order], rate, color=colour, ls=style, lw=1.5, label=f"{row.radius_rsun:g}")
        single = row.mu_peak_saturated if network else row.mu_peak_isolated
        if single is not None:
            height = max(float(np.interp(single, peaks[order][::-1], rate[::-1])), lowest)
            ax.plot(single, height, marker="v", ms=7.0, color=colour, mec="white", clip_on=False)
    top = float(sample.weight.sum()) * per_year
    ax.set_ylim(lowest, 2.0 * top)
    ax.plot([], [], ls="", marker="v", color="0.4", label="network, scaling" if network else "one star, closed form")
    ax.legend(title=r"radius [R$_\odot$]", fontsize="small", title_fontsize="small", frameon=False)
    return ax


def _closed_forms(forecast: PeakForecast, ax: Axes) -> None:
    """Without star fields there is the smooth fold, against the radius."""
    known = [(row.radius_rsun, row.mu_peak_smooth) for row in forecast.rows if row.mu_peak_smooth is not None]
    if known:
        ax.plot(*np.transpose(known), color=_STYLES[0][0], marker="o", lw=1.4)
        ax.set(xlabel=r"radius [R$_\odot$]", ylabel="peak at the smooth fold")
    else:
        ax.text(
            0.5, 0.5, "nothing to show:\nno stars and no gradient", ha="center", va="center", transform=ax.transAxes
        )


def _chosen(forecast: PeakForecast) -> list[Any]:
    """At most five rows, spread over the radii, the star's among them."""
    rows = forecast.rows
    picked = {round(float(one)) for one in np.linspace(0, len(rows) - 1, min(_MOST_CURVES, len(rows)))}
    star = next((number for number, row in enumerate(rows) if row.star), None)
    if star is not None and star not in picked:
        picked.remove(min(picked, key=lambda number: abs(number - star)))
        picked.add(star)
    return [rows[number] for number in sorted(picked)]


def _einstein(forecast: PeakForecast, radius_rsun: float) -> float:
    return radius_rsun * forecast.rsun_einstein


def plot_examples(forecast: PeakForecast, ax: Axes | None = None) -> Axes:
    """Draw the light curves around some crossings, with the law of one straight fold.

    Parameters
    ----------
    forecast : PeakForecast
        Forecast.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.

    Returns
    -------
    matplotlib.axes.Axes
    """
    if ax is None:
        from matplotlib.figure import Figure

        ax = Figure(figsize=(6.0, 4.4), layout="constrained").add_subplot()
    years, top = forecast.years_per_einstein, 0.0
    scale = 1e3 if years is None else _DAYS_PER_YEAR * years
    for one, (colour, style) in zip(forecast.examples, _STYLES, strict=False):
        ax.plot(scale * one.offset, one.fold, color="0.75", lw=3.0, zorder=1)
        ax.plot(scale * one.offset, one.magnification, color=colour, ls=style, lw=1.4, label=one.name)
        top = max(top, float(one.magnification.max()))
    ax.plot([], [], color="0.75", lw=3.0, label="one straight fold")
    if top > 0.0:
        ax.set_yscale("log")
        _plain_numbers(ax)
    ax.set_xlabel(
        r"way since the fold [$10^{-3}\,\theta_E$]" if years is None else "days since the fold, at the mean speed"
    )
    ax.set_ylabel("magnification")
    ax.legend(fontsize="small", frameon=False)
    return ax


def _plain_numbers(ax: Axes) -> None:
    """Label the vertical axis at 1, 2 and 5 with numbers as they are spoken."""
    from matplotlib.ticker import FuncFormatter, LogLocator, NullLocator

    ax.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    ax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    ax.yaxis.set_minor_locator(NullLocator())
