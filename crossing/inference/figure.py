"""Draw a fitted light curve on one pair of axes."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from crossing.inference.result import CrossingFit

__all__ = ["STYLES", "plot_light_curve"]

# Okabe & Ito's colours with a marker and a line style each, so that colour never carries the meaning alone.
STYLES = (
    ("#0072B2", "o", "-"),
    ("#D55E00", "s", "--"),
    ("#009E73", "^", "-."),
    ("#CC79A7", "D", ":"),
    ("#E69F00", "v", (0, (5, 1, 1, 1))),
    ("#56B4E9", "P", (0, (3, 1, 1, 1, 1, 1))),
)


def plot_light_curve(fit: CrossingFit, ax: Axes | None = None, *, bands: tuple[str, ...] | None = None) -> Axes:
    """Data with limits and the posterior band of the model, above the fitted reference level.

    Parameters
    ----------
    fit : CrossingFit
        Result.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.
    bands : tuple of str, optional
        Bands to draw; all if None.

    Returns
    -------
    matplotlib.axes.Axes
    """
    if ax is None:
        from matplotlib.figure import Figure

        ax = Figure(figsize=(7.0, 4.2), layout="constrained").add_subplot()
    every = tuple(dict.fromkeys(row.band for row in fit.rows))
    for number, band in enumerate(every):
        if bands is None or band in bands:
            _draw_band(fit, ax, band, *STYLES[number % len(STYLES)])
    for when in (fit.caustic_time_mjd, fit.second_caustic_time_mjd):
        if when is None:
            continue
        ax.axvspan(when.low, when.high, color="0.8", alpha=0.5, lw=0, zorder=0)
        ax.axvline(when.median, color="0.4", lw=0.8, zorder=0)
    ax.axhline(0.0, color="0.6", lw=0.6, zorder=0)
    ax.set_xlabel("time [MJD]")
    ax.set_ylabel("flux above level [nJy]")
    ax.ticklabel_format(axis="x", useOffset=False)
    return ax


def _draw_band(fit: CrossingFit, ax: Axes, band: str, colour: str, marker: str, line: object) -> None:
    for curve in fit.curves:
        if curve.band == band:
            ax.fill_between(curve.time_mjd, curve.quantiles[0], curve.quantiles[4], color=colour, alpha=0.12, lw=0)
            ax.fill_between(curve.time_mjd, curve.quantiles[1], curve.quantiles[3], color=colour, alpha=0.25, lw=0)
            ax.plot(curve.time_mjd, curve.quantiles[2], color=colour, ls=line, lw=1.2)
    seen = [row for row in fit.rows if row.band == band and not row.is_upper_limit]
    limits = [row for row in fit.rows if row.band == band and row.is_upper_limit]
    ax.errorbar(
        [row.time_mjd for row in seen],
        [row.flux for row in seen],
        [row.error for row in seen],
        fmt=marker,
        color=colour,
        mec="white",
        mew=0.5,
        ms=5.5,
        lw=1.0,
        label=band,
    )
    if limits:
        top = np.array([row.flux for row in limits])
        drop = 0.8 * np.array([row.error for row in limits])
        time = [row.time_mjd for row in limits]
        ax.errorbar(time, top, drop, uplims=True, fmt="_", color=colour, lw=0.9, ms=7)
