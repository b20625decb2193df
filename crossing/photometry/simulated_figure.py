"""Draw a simulated event: its noiseless curves and what was measured, on one pair of axes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Final

import numpy as np

from crossing.stars.photosphere import ab_magnitude

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from crossing.photometry.simulated import SimulatedEvent

__all__ = ["draw_fluxes", "draw_magnitudes"]

# Okabe & Ito's colours with a marker and a line style each, so that colour never carries the meaning alone.
_STYLES: Final = (
    ("#0072B2", "o", "-"),
    ("#D55E00", "s", "--"),
    ("#009E73", "^", "-."),
    ("#CC79A7", "D", ":"),
    ("#E69F00", "v", (0, (5, 1, 1, 1))),
    ("#56B4E9", "P", (0, (3, 1, 1, 1, 1, 1))),
)
_SEEN: Final = 3.0
_MANY: Final = 80
_MAGNITUDES: Final = 2.5 / np.log(10.0)


def _axes(ax: Axes | None) -> Axes:
    if ax is not None:
        return ax
    from matplotlib.figure import Figure

    return Figure(figsize=(8.0, 4.0), layout="constrained").add_subplot()


def draw_magnitudes(event: SimulatedEvent, ax: Axes | None = None) -> Axes:
    """Draw AB magnitudes against days; measurements below three standard errors as limits at that level.

    Parameters
    ----------
    event : SimulatedEvent
        The event.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.

    Returns
    -------
    matplotlib.axes.Axes
    """
    ax, start, seen = _axes(ax), event.options.start_mjd, event.light_curve
    small = 4.0 if event.options.duration / event.options.cadence < _MANY else 2.0
    for number, (band, flux) in enumerate(zip(event.bands, event.flux, strict=True)):
        colour, marker, line = _STYLES[number % len(_STYLES)]
        ax.plot(event.time - start, ab_magnitude(flux), color=colour, ls=line, lw=1.2, label=band)
        mine = seen.band == band
        time, level = seen.time[mine] - start, _SEEN * seen.flux_err[mine]
        bright = ~seen.is_upper_limit[mine] & (seen.flux[mine] > level)
        if bright.any():
            value, error = seen.flux[mine][bright], seen.flux_err[mine][bright]
            ax.errorbar(
                time[bright], ab_magnitude(value), _MAGNITUDES * error / value,
                fmt=marker, color=colour, mec="white", mew=0.5, ms=5.0, lw=0.9,
            )  # fmt: skip
        ax.plot(time[~bright], ab_magnitude(level[~bright]), ls="", marker=11, color=colour, ms=small, alpha=0.6)
    ax.set(xlabel=f"days after MJD {start:g}", ylabel="AB magnitude")
    ax.set_xlim(0.0, event.options.duration)
    ax.invert_yaxis()
    return ax


def draw_fluxes(event: SimulatedEvent, ax: Axes | None = None, window: tuple[float, float] | None = None) -> Axes:
    """Draw flux densities against days, with the fold crossings of the star's centre as vertical lines.

    Parameters
    ----------
    event : SimulatedEvent
        The event.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.
    window : (float, float), optional
        First and last day to show, from the begin of the light curve; all of it if None.

    Returns
    -------
    matplotlib.axes.Axes
    """
    ax, start, seen = _axes(ax), event.options.start_mjd, event.light_curve
    for number, (band, flux) in enumerate(zip(event.bands, event.flux, strict=True)):
        colour, marker, line = _STYLES[number % len(_STYLES)]
        ax.plot(event.time - start, flux, color=colour, ls=line, lw=1.2, label=band)
        rows = (seen.band == band) & ~seen.is_upper_limit
        ax.errorbar(
            seen.time[rows] - start, seen.flux[rows], seen.flux_err[rows],
            fmt=marker, color=colour, mec="white", mew=0.5, ms=5.0, lw=0.9,
        )  # fmt: skip
        rows = (seen.band == band) & seen.is_upper_limit
        ax.plot(seen.time[rows] - start, seen.flux[rows], ls="", marker=11, color=colour, ms=4.0, alpha=0.6)
    low, high = (0.0, event.options.duration) if window is None else window
    met = event.curve.crossings
    place = event.options.duration * met.position
    inside = (place >= low) & (place <= high)
    for entering, style, name in ((True, "-", "entering"), (False, "--", "leaving")):
        for k, day in enumerate(place[inside & (met.entering == entering)]):
            ax.axvline(day, color="0.45", ls=style, lw=0.9, zorder=0, label=f"fold, {name}" if k == 0 else None)
    ax.set(
        xlabel=f"days after MJD {start:g}", ylabel="flux density [nJy]", xlim=(low, high), ylim=_span(event, low, high)
    )
    return ax


def _span(event: SimulatedEvent, low: float, high: float) -> tuple[float, float]:
    """Fluxes between which everything lies that is seen in some days, with room."""
    start, seen = event.options.start_mjd, event.light_curve
    curve, rows = (
        event.flux[:, (event.time >= start + low) & (event.time <= start + high)],
        (seen.time >= start + low) & (seen.time <= start + high),
    )
    error = np.where(seen.is_upper_limit, 0.0, seen.flux_err)
    values = np.concatenate([curve.ravel(), (seen.flux + error)[rows], (seen.flux - error)[rows]])
    room = 0.06 * (values.max() - values.min())
    return float(values.min() - room), float(values.max() + room)
