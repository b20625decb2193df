"""How a forecast of peaks is shown: one figure, one text."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

import numpy as np

from crossing.shooting.peaks.peak_figure import plot_examples, plot_peaks
from crossing.shooting.peaks.peak_result import CAUTIONS

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.figure import Figure

    from crossing.shooting.peaks.peak_result import PeakForecast, PeakRow, Spread

__all__ = ["peak_figure", "peak_text"]

_UNCERTAIN = 0.3
_WIDTH = 118


def peak_figure(forecast: PeakForecast) -> Figure:
    """How often peaks exceed a magnification, and light curves around a few crossings."""
    from matplotlib.figure import Figure

    both = bool(forecast.examples)
    figure = Figure(figsize=(11.0 if both else 6.4, 4.6), layout="constrained")
    axes = figure.subplots(1, 2 if both else 1, squeeze=False)[0]
    plot_peaks(forecast, axes[0])
    status = f"  [{forecast.status}]" if forecast.flags else ""
    axes[0].set_title(f"{forecast.event}: {forecast.regime}{status}", loc="left", fontsize="medium")
    if both:
        plot_examples(forecast, axes[1])
        size = forecast.examples[0].radius_rsun
        axes[1].set_title(rf"simulated crossings, {size:.3g} R$_\odot$", loc="left", fontsize="medium")
    return figure


def peak_text(forecast: PeakForecast) -> str:
    """Summary for a terminal: flags first, then the place, the table and what limits it."""
    lines = [f"{forecast.event}: peak magnifications"]
    for name, meaning in forecast.flag_meanings.items():
        lines += _wrapped(f"flag {name}: {meaning}", 2)
    lines += _place(forecast)
    lines += ["", *_peaks(forecast)]
    lines += _rates(forecast) + _seen(forecast) + _models(forecast) + _extended(forecast)
    if forecast.absent:
        lines += ["", "  not told:"]
        lines += [f"    {', '.join(names)}: {reason}" for reason, names in _by_reason(forecast.absent).items()]
    lines += ["", "  cautions:"]
    for text in CAUTIONS:
        lines += _wrapped(text, 4)
    return "\n".join(lines)


def _wrapped(text: str, indent: int) -> list[str]:
    """Lines of a sentence, those after the first further in."""
    first, rest = " " * indent, " " * (indent + 2)
    return textwrap.wrap(text, _WIDTH, initial_indent=first, subsequent_indent=rest, break_long_words=False)


def _place(forecast: PeakForecast) -> list[str]:
    images = "one macro image" if forecast.images == 1 else "the merging pair"
    lines = [
        *_wrapped(forecast.sentence, 2),
        f"  macro lens           lam_t {_spread(forecast.lam_t)}, lam_r {_spread(forecast.lam_r)}; for {images}",
        f"  stars                kappa_star {forecast.kappa_star:.3g}"
        + ("" if forecast.typical_mass is None else f", an isolated one has {forecast.typical_mass:.2g} Msun"),
    ]
    if forecast.band is not None:
        band = forecast.band
        years = "" if band.years is None else f", {_round(band.years)} years to cross"
        lines.append(
            f'  corrugated band      {band.width_arcsec:.3g}" wide on the sky, {band.depth_pc:.3g} pc deep at the '
            f"source{years}"
        )
    if forecast.speed_kms is not None:
        lines.append(
            f"  motion               {_spread(forecast.speed_kms)} km/s (by share of crossings), "
            f"{forecast.years_per_einstein:.3g} years per Einstein radius at the mean speed"
        )
    name = forecast.limb_darkening_band
    discs = "uniform" if name is None else f"limb darkening {forecast.limb_darkening:.2g}, that of {name}"
    lines.append(f"  discs                {discs}")
    if forecast.tracks:
        found = forecast.crossings_per_einstein or 0.0
        lines.append(
            f"  statistics           {forecast.crossings} fold crossings of {forecast.tracks} tracks, {found:.3g} per "
            f"Einstein radius, good to {100 * (forecast.statistical_error or 0.0):.1f}%"
        )
    return lines


def _peaks(forecast: PeakForecast) -> list[str]:
    rows, network = forecast.rows, forecast.regime == "saturated"
    scaling = "network scaling" if network else "scaling"
    head = ("R [Rsun]", "smooth fold", "one star", scaling, "star field: median (16-84%)", "crossing [d]", "crowded")
    body = [
        (
            _radius(row),
            _cell(row.mu_peak_smooth),
            _cell(row.mu_peak_isolated),
            _cell(row.mu_peak_saturated if network else row.mu_peak_scaling),
            _interval(row.mu_peak_micro),
            _interval(row.crossing_days),
            "-" if row.crowded is None else f"{row.crowded:.2f}",
        )
        for row in rows
    ]
    lines = ["  Peak magnifications:", *_table(head, body)]
    if any(row.star for row in rows):
        lines.append("    * the event's star")
    return lines


def _radius(row: PeakRow) -> str:
    return f"{row.radius_rsun:.4g}" + ("*" if row.star else "")


def _rates(forecast: PeakForecast) -> list[str]:
    rows = forecast.rows
    if not rows[0].rates:
        return []
    per_year = rows[0].rates[0].rate is not None
    head = ("R [Rsun]", *(f"> {one.mu:g}" for one in rows[0].rates))
    body = [
        (
            _radius(row),
            *(_rate(one.rate, one.error) if per_year else _rate(one.per_einstein, None) for one in row.rates),
        )
        for row in rows
    ]
    unit = "year" if per_year else "Einstein radius of track"
    return ["", f"  Peaks per {unit} above a magnification (~: statistical error above 30%):", *_table(head, body)]


def _seen(forecast: PeakForecast) -> list[str]:
    rows = forecast.rows
    if not rows[0].to_see:
        return []
    head = ["R [Rsun]"]
    for one in rows[0].to_see:
        head += [f"{one.band}: magnification", "peaks a year"]
    body = []
    for row in rows:
        cells = [_radius(row)]
        for one in row.to_see:
            cells += [_cell(one.mu), _rate(one.rate, one.error)]
        body.append(cells)
    told = "" if forecast.temperature_K is None else f" of {forecast.temperature_K:.0f} K"
    return ["", f"  What it takes to see a star{told} at the depth of each band:", *_table(head, body)]


def _models(forecast: PeakForecast) -> list[str]:
    if not forecast.models:
        return []
    middle = len(forecast.rows) // 2
    size = forecast.rows[middle].radius_rsun
    head = ("macro model", "weight", "lam_t", "regime", "band", f"field at {size:g} Rsun", "one star", "smooth fold")
    body = [
        (
            one.name,
            f"{one.weight:.2f}",
            _spread(one.lam_t),
            one.regime,
            "-" if one.band_width_arcsec is None else f'{one.band_width_arcsec:.3g}"',
            _interval(one.rows[middle].mu_peak_micro),
            _cell(one.rows[middle].mu_peak_isolated),
            _cell(one.rows[middle].mu_peak_smooth),
        )
        for one in forecast.models
    ]
    return ["", "  Macro models apart:", *_table(head, body)]


def _extended(forecast: PeakForecast) -> list[str]:
    if not forecast.extended:
        return []
    found = ", ".join(f"{one.radius_kpc:g} kpc: {_cell(one.mu_peak_smooth)}" for one in forecast.extended)
    return ["", f"  For comparison, highest magnification of a uniform disc at the same smooth fold: {found}"]


def _by_reason(absent: dict[str, str]) -> dict[str, list[str]]:
    out: dict[str, list[str]] = {}
    for name, reason in absent.items():
        out.setdefault(reason, []).append(name)
    return out


def _table(head: Sequence[str], body: Sequence[Sequence[str]]) -> list[str]:
    width = [max(len(row[k]) for row in (head, *body)) for k in range(len(head))]
    return [
        "    " + "  ".join(cell.rjust(size) for cell, size in zip(row, width, strict=True)) for row in (head, *body)
    ]


def _spread(one: Spread) -> str:
    if np.isclose(one.low, one.high, rtol=1e-9):
        return _round(one.median)
    return f"{_round(one.median)} ({_round(one.low)} to {_round(one.high)})"


def _interval(one: Spread | None) -> str:
    if one is None:
        return "-"
    return f"{_round(one.median)} ({_round(one.low)}-{_round(one.high)})"


def _cell(value: float | None) -> str:
    return "-" if value is None or not np.isfinite(value) else _round(value)


def _rate(value: float | None, error: float | None) -> str:
    if value is None:
        return "-"
    if value == 0.0:
        return "0"
    return ("~" if error is not None and error > _UNCERTAIN * value else "") + f"{value:.2g}"


def _round(value: float) -> str:
    """Three digits, without an exponent where a number can be read without."""
    return f"{float(f'{value:.3g}'):.0f}" if 100.0 <= abs(value) < 1e8 else f"{value:.3g}"
