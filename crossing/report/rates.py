"""How a forecast of event rates is shown: one figure, one text."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.figure import Figure

    from crossing.population.rates_result import Expectation, RatesForecast
    from crossing.shooting.peaks.peak_result import Spread

__all__ = ["rates_figure", "rates_text"]

_WIDTH = 118
_UNITS = {
    "peak_magnitude": "highest change of flux [AB mag]",
    "peak_magnification": "peak magnification",
    "duration_days": "days above the limit",
    "radius_rsun": "star's radius [Rsun]",
    "temperature_K": "temperature [K]",
    "luminosity_lsun": "luminosity [Lsun]",
}


def rates_figure(forecast: RatesForecast) -> Figure:
    """Events along the arc, and how many are brighter than a flux."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(11.0, 4.6), layout="constrained")
    along, bright = figure.subplots(1, 2, width_ratios=(1.4, 1.0))
    forecast.plot(along)
    status = f"  [{forecast.status}]" if forecast.flags else ""
    along.set_title(f"{forecast.campaign}{status}", loc="left", fontsize="medium")
    if forecast.sample.rate > 0:
        forecast.sample.plot(bright)
        bright.set_title(f"all segments, {forecast.band}", loc="left", fontsize="medium")
    else:
        bright.set_axis_off()
        bright.text(0.5, 0.5, "no events", ha="center", va="center")
    return figure


def rates_text(forecast: RatesForecast) -> str:
    """Summary for a terminal: flags first, then numbers, segments, what events are like and what limits it all."""
    lines = [f"{forecast.campaign}: lensed-star events"]
    for name, meaning in forecast.flag_meanings.items():
        lines += _wrapped(f"flag {name}: {meaning}", 2)
    limits = ", ".join(f"{band} {limit:.3g} nJy" for band, limit in forecast.rule.limits.items())
    lines += [
        f"  counts as an event   a change of {limits}; in {forecast.rule.required} band(s) of "
        f"{forecast.rule.epochs} visit(s)",
        f"  events a year        {_expectation(forecast.per_year)}",
        f"  in progress          {_spread(forecast.in_visit)} in any one visit",
    ]
    if forecast.visits is not None:
        number = len(forecast.visits.mjd)
        lines.append(f"  schedule             {_expectation(forecast.visits.season)}")
        lines.append(f'                       found by the {number} visits of "{forecast.visits.schedule}"')
    lines.append(f"  level                {forecast.level}")
    lines.append(f"  motion               {_spread(forecast.speed_kms)} km/s (by share of crossings)")
    lines += ["", "  Along the arc (68% of the model):", *_segments(forecast)]
    lines += ["", f"  Events are like this (68% of them; brightness in {forecast.band}):"]
    for name, one in forecast.distributions().items():
        lines.append(f"    {_UNITS[name]:33s} {'-' if one is None else _spread(one)}")
    types = ", ".join(f"{name} {100 * share:.0f}%" for name, share in forecast.sample.types().items() if share > 0.005)
    lines.append(f"    {'types of stars':33s} {types or '-'}")
    lines += _others(forecast)
    lines += ["", "  cautions:"]
    for text in forecast.cautions:
        lines += _wrapped(text, 4)
    return "\n".join(lines)


def _segments(forecast: RatesForecast) -> list[str]:
    head = (
        "segment",
        "side",
        "lam_t",
        "|mu|",
        "events a year",
        "per arcsec",
        "in a visit",
        "scheduled",
        "flicker/noise",
        "tracks/folds",
    )
    body = [
        (
            one.name,
            one.side,
            _round(one.lam_t.median),
            _round(one.magnification),
            _spread(one.per_year.expected),
            _round(one.per_arcsec),
            _round(one.in_visit.median),
            "-" if one.in_schedule is None else _round(one.in_schedule.median),
            "-" if not one.flicker else _round(max(part.significance for part in one.flicker)),
            "-" if one.calibration is None else f"{one.calibration.rate:.2f}",
        )
        for one in forecast.segments
    ]
    body += [("all", side, "", "", _spread(one), "", "", "", "", "") for side, one in forecast.sides.items()]
    width = [max(len(row[k]) for row in (head, *body)) for k in range(len(head))]
    return [
        "    " + "  ".join(cell.rjust(size) for cell, size in zip(row, width, strict=True)) for row in (head, *body)
    ]


def _others(forecast: RatesForecast) -> list[str]:
    lines = ["", "  What else flares there, a year (published range), bright enough or not:"]
    for one in forecast.transients.rates:
        if one.rate_per_year > 0:
            lines.append(
                f"    {one.name + ' (' + one.place + ')':33s} {one.rate_per_year:.2g} ({one.low:.2g} to {one.high:.2g})"
            )
    masses = forecast.masses
    unknown = [
        name
        for name, origin in (
            ("star formation", masses.star_formation_from),
            ("stellar mass", masses.stellar_mass_from),
        )
        if origin == "unknown"
    ]
    if unknown:
        lines.append(f"    not told: what follows from the arc's {' and '.join(unknown)}; give it under population")
    return lines


def _expectation(one: Expectation) -> str:
    parts: Sequence[str] = (
        _spread(one.expected),
        f"counts {one.poisson[0]:.0f} to {one.poisson[1]:.0f} by chance alone",
        f"{one.total[0]:.0f} to {one.total[1]:.0f} in all",
    )
    return ", ".join(parts)


def _wrapped(text: str, indent: int) -> list[str]:
    first, rest = " " * indent, " " * (indent + 2)
    return textwrap.wrap(text, _WIDTH, initial_indent=first, subsequent_indent=rest, break_long_words=False)


def _spread(one: Spread) -> str:
    return f"{_round(one.median)} ({_round(one.low)} to {_round(one.high)})"


def _round(value: float) -> str:
    """Three digits, without an exponent where a number can be read without."""
    return f"{float(f'{value:.3g}'):.0f}" if 100.0 <= abs(value) < 1e8 else f"{value:.3g}"
