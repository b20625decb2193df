"""How a crossing fit is shown: one figure, one text, tables."""

from __future__ import annotations

from typing import TYPE_CHECKING

from crossing.inference.figure import STYLES, plot_light_curve
from crossing.inference.result import CAUTIONS, QUANTITIES

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from crossing.inference.result import CrossingFit

__all__ = ["fit_figure", "fit_text"]

_RESOLVED = 0.4


def fit_figure(fit: CrossingFit) -> Figure:
    """Light curve, residuals, and a close view of the crossing where it is short against the data."""
    from matplotlib.figure import Figure

    zoom = _zoom(fit)
    figure = Figure(figsize=(11.0 if zoom else 7.5, 5.4), layout="constrained")
    grid = figure.add_gridspec(2, 2 if zoom else 1, height_ratios=(3.2, 1.0))
    main = figure.add_subplot(grid[0, 0])
    plot_light_curve(fit, main)
    main.legend(loc="best", fontsize="small", frameon=False)
    main.set_title(f"{fit.event}: {_headline(fit)}", loc="left", fontsize="medium")
    main.tick_params(labelbottom=False)
    main.set_xlabel("")
    below = figure.add_subplot(grid[1, 0], sharex=main)
    _residuals(fit, below)
    if zoom:
        near = figure.add_subplot(grid[:, 1])
        plot_light_curve(fit, near)
        near.set_xlim(*zoom)
        near.set_title("the crossing (grey: the centre on the caustic, 68%)", loc="left", fontsize="medium")
        near.ticklabel_format(axis="x", useOffset=False)
        near.tick_params(axis="x", labelrotation=30)
    return figure


def _headline(fit: CrossingFit) -> str:
    found = fit.radius_rsun or fit.radius_time_days
    name, unit = ("R", "Rsun") if fit.radius_rsun is not None else ("radius time", "d")
    text = "" if found is None else f", {name} {found.text(unit)}"
    return f"{fit.model}{text}" + (f"  [{fit.status}]" if fit.flags else "")


def _zoom(fit: CrossingFit) -> tuple[float, float] | None:
    """Time range of the close view, if the crossing is short against the data."""
    if fit.peak_time_mjd is None or fit.radius_time_days is None:
        return None
    times = [row.time_mjd for row in fit.rows]
    spread = fit.peak_time_mjd.high - fit.peak_time_mjd.low
    width = max(4.0 * fit.radius_time_days.high, 2.0 * spread)
    if 2.0 * width > _RESOLVED * (max(times) - min(times)):
        return None
    return fit.peak_time_mjd.median - width, fit.peak_time_mjd.median + width


def _residuals(fit: CrossingFit, ax: Axes) -> None:
    bands = tuple(dict.fromkeys(row.band for row in fit.rows))
    for number, band in enumerate(bands):
        colour, marker, _ = STYLES[number % len(STYLES)]
        rows = [row for row in fit.rows if row.band == band and not row.is_upper_limit]
        time, residual = [row.time_mjd for row in rows], [row.residual for row in rows]
        ax.errorbar(time, residual, 1.0, fmt=marker, color=colour, mec="white", mew=0.5, ms=5.0, lw=0.9)
    ax.axhline(0.0, color="0.6", lw=0.6, zorder=0)
    ax.set_xlabel("time [MJD]")
    ax.set_ylabel("residual [sigma]")
    ax.ticklabel_format(axis="x", useOffset=False)


def fit_text(fit: CrossingFit) -> str:
    """Summary for a terminal: flags first, then estimates, models, drivers and cautions."""
    lines = [f"{fit.event}: {fit.model}"]
    lines += [f"  flag {name}: {meaning}" for name, meaning in fit.flag_meanings.items()]
    for name, (unit, meaning) in QUANTITIES.items():
        found = fit.estimates.get(name)
        if found is not None:
            digits = 9 if name.endswith("_mjd") else 3
            lines.append(f"  {name:<20} {found.text(unit, digits):<34} {meaning}")
    orientation = ", ".join(f"{name} {share:.3f}" for name, share in fit.orientation.items() if share > 0.0005)
    lines.append(f"  orientation          {orientation}")
    lines.append(f"  chi2                 {fit.chi2:.1f} for {fit.dof} degrees of freedom (p = {fit.p_value:.3g})")
    lines.append("  models (ln evidence, probability among them):")
    lines += [f"    {one.model:<10} {one.ln_evidence:10.2f}  {one.probability:.3f}" for one in fit.scores]
    if fit.drivers is not None:
        shares = fit.drivers
        lines.append(
            f"  the radius interval is driven by photometry {shares.photometry:.0%}, "
            f"speed {shares.speed:.0%}, angle to the caustic {shares.angle:.0%}"
        )
        lines.append(
            "  the star's own priors (upper luminosity, event file) multiply the median radius "
            f"by {shares.prior_shift:.2f}"
        )
    for model in fit.macro_models:
        lines.append(f"  {model.name} (weight {model.weight:.2f}): radius {model.radius_rsun.text('Rsun')}")
    lines.append("  priors:")
    lines += [f"    {name}: {text}" for name, text in fit.priors.items()]
    lines.append("  cautions:")
    lines += [f"    {text}" for text in CAUTIONS]
    return "\n".join(lines)
