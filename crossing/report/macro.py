"""How the macro lens at an event is shown: two figures, one text."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING, Final

import numpy as np

from crossing.optics.macro.macro_figure import plot_caustics, plot_field, plot_fold, plot_lam_t, plot_nearby
from crossing.optics.macro.macro_report import CAUTIONS, NOTES

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.figure import Figure

    from crossing.optics.macro.macro_interval import Interval
    from crossing.optics.macro.macro_report import MacroReport, MacroValues, ModelReport

__all__ = ["caustics_figure", "macro_figure", "macro_text"]

_WIDTH = 118
_PANEL = (4.5, 4.8)
# Panels of fixed shape are laid out without regard to a title of two lines.
_BELOW_TITLE = 0.96
_ROWS: Final[tuple[tuple[str, str, str], ...]] = (
    ("lam_t, along the stretch", "lam_t", ""),
    ("lam_r, across it", "lam_r", ""),
    ("kappa", "kappa", ""),
    ("gamma", "gamma", ""),
    ("magnification mu (signed)", "mu", ""),
    ("  mu_t", "mu_t", ""),
    ("  mu_r", "mu_r", ""),
    ("critical curve, along the stretch", "critical_distance", '"'),
    ("critical curve, nearest", "critical_distance_perp", '"'),
    ("gradient of lam_t, along", "gradient", ' /"'),
    ("gradient of lam_t, across", "gradient_across", ' /"'),
    ("direction of the stretch (N to E)", "stretch_angle", " deg"),
    ("fold strength K", "fold_strength", ' "^(1/2)'),
    ("source inside the caustic", "caustic_distance", '"'),
    ("mirror image at", "pair_separation", '"'),
    ("both images together", "pair_magnification", ""),
    ("delay of the pair", "pair_delay", " d"),
)


def macro_figure(report: MacroReport) -> Figure:
    """The field with its critical curves, the surroundings of the event, and how well lam_t is known."""
    from matplotlib.figure import Figure

    near = any(model.critical_distance_perp is not None for model in report.models)
    plots = [plot_field] * bool(report.curves) + [plot_nearby] * near + [plot_lam_t]
    figure = Figure(figsize=(_PANEL[0] * len(plots), _PANEL[1]), layout="constrained")
    for axes, plot in zip(figure.subplots(1, len(plots), squeeze=False)[0], plots, strict=True):
        plot(report, axes)
    status = f"  [{report.status}]" if report.flags else ""
    _entitle(figure, f"{report.event}: macro lens{status}")
    return figure


def caustics_figure(report: MacroReport) -> Figure | None:
    """The source plane: all caustics, and the fold next to the source; None where neither is known."""
    from matplotlib.figure import Figure

    fold = any(model.caustic_distance is not None for model in report.models)
    plots = [plot_caustics] * bool(report.curves) + [plot_fold] * fold
    if not plots:
        return None
    figure = Figure(figsize=(_PANEL[0] * len(plots), _PANEL[1]), layout="constrained")
    for axes, plot in zip(figure.subplots(1, len(plots), squeeze=False)[0], plots, strict=True):
        plot(report, axes)
    redshift = "" if report.source_redshift is None else f", sources at z = {report.source_redshift:g}"
    _entitle(figure, f"{report.event}{redshift}")
    return figure


def _entitle(figure: Figure, text: str) -> None:
    """Put a line above the title of the first panel, which a title of the whole figure would run into."""
    engine, first = figure.get_layout_engine(), figure.axes[0]
    if engine is not None:
        engine.set(rect=(0, 0, 1, _BELOW_TITLE))  # type: ignore[call-arg]
    first.set_title(f"{text}\n{first.get_title(loc='left')}", loc="left", fontsize="medium")


def macro_text(report: MacroReport) -> str:
    """Summary for a terminal: flags first, then the place, the numbers, the models and what limits them."""
    lines = [f"{report.event}: macro lens"]
    for name, meaning in report.flag_meanings.items():
        lines += _wrapped(f"flag {name}: {meaning}", 2)
    lines += [*_place(report), "", *_numbers(report)]
    for model in report.models:
        lines += _model(model, alone=len(report.models) == 1)
    if report.curves:
        lines += ["", *_curves(report)]
    if report.absent:
        lines += ["", "  not told:"]
        for reason, names in _by_reason(report.absent).items():
            lines += _wrapped(f"{', '.join(names)}: {reason}", 4)
    if report.notes:
        lines += ["", "  notes:"]
        for name in report.notes:
            lines += _wrapped(f"{name}: {NOTES[name]}", 4)
    lines += ["", "  cautions:"]
    for text in CAUTIONS:
        lines += _wrapped(text, 4)
    return "\n".join(lines)


def _wrapped(text: str, indent: int) -> list[str]:
    """Lines of a sentence, those after the first further in."""
    first, rest = " " * indent, " " * (indent + 2)
    return textwrap.wrap(text, _WIDTH, initial_indent=first, subsequent_indent=rest, break_long_words=False)


def _place(report: MacroReport) -> list[str]:
    lines = []
    if report.position is not None:
        error = "" if report.position_error is None else f" +- {report.position_error:g} arcsec"
        lines.append(f"  position             RA {report.position[0]:.6f}, Dec {report.position[1]:.6f} deg{error}")
    if report.lens_redshift is not None and report.source_redshift is not None:
        lines.append(f"  redshifts            lens {report.lens_redshift:g}, source {report.source_redshift:g}")
    if report.einstein_radius_uas is not None and report.einstein_radius_source_au is not None:
        lines.append(
            f"  Einstein radius      {report.einstein_radius_uas:.4g} microarcsec, "
            f"{report.einstein_radius_source_au:.0f} au at the source (one solar mass)"
        )
    sides = ", ".join(f"{name} {_share(share)}" for name, share in report.parity_probabilities.items())
    pair = f"the merging pair; lam_t, mu and parity are the {report.parity}'s"
    images = "one image" if report.images == 1 else pair
    return [*lines, f"  parity               {report.parity} ({sides}); for {images}"]


def _share(value: float) -> str:
    return f"{value:.3g}" if 0.001 <= value <= 0.999 or value in (0.0, 1.0) else ("<0.001" if value < 0.5 else ">0.999")


def _numbers(report: MacroReport) -> list[str]:
    """A row a quantity; a column for all models pooled and one for each of them."""
    several = len(report.models) > 1
    columns: list[tuple[str, MacroValues]] = [("pooled" if several else "median (16% to 84%)", report)]
    if several:
        columns += [(f"{model.name} ({model.weight:.2f})", model) for model in report.models[:4]]
    rows = []
    for text, name, unit in _ROWS:
        cells = [_interval(getattr(values, name), unit) for _, values in columns]
        if any(cell != "-" for cell in cells):
            rows.append((text, *cells))
    lines = _table(("", *(name for name, _ in columns)), rows)
    for title, place in (("mirror image", report.mirror_position), ("nearest critical point", report.critical_point)):
        if place is not None:
            whose = " by the likeliest model" if several else ""
            lines.append(f"    {title}{whose}: RA {place[0]:.6f}, Dec {place[1]:.6f} deg")
    if several and len(report.models) > 4:
        lines.append(f"    and {len(report.models) - 4} more models in macro.json and macro.ecsv")
    return lines


def _model(model: ModelReport, *, alone: bool) -> list[str]:
    """What a model says beyond the numbers: validity of the linear expansion, quality of the map, critical line."""
    found = []
    point, line = model.point, model.line
    if point is not None and point.linear_error is not None:
        valid = "holds" if point.linear_is_valid else "does not hold, and the map's own values are used"
        found.append(f"the linear expansion is off by {100 * point.linear_error:.2g}%: it {valid}")
    elif point is not None:
        found.append("the linear expansion cannot be compared with the map here")
    if point is not None:
        quality = point.quality
        for name, value in (("identities", quality.identity_misfit), ("deflections", quality.deflection_misfit)):
            if value is not None:
                found.append(f"misfit of the map's {name} {value:.1g}")
    if line is not None:
        found.append(
            f"critical line through RA {line.point[0]:.6f}, Dec {line.point[1]:.6f} deg (+- {line.point_error:.2g} "
            f"arcsec across), position angle {line.position_angle:.1f} +- {line.position_angle_error:.1f} deg, "
            f"chi2 {line.chi2:.1f} of {line.dof}"
        )
    if model.dispersion is not None:
        found.append(f"velocity dispersion {_interval(model.dispersion, ' km/s')}")
    if model.mass is not None:
        found.append(f"M200c {model.mass:.2g} Msun")
    found += [f"{kind} {name}" for kind, names in (("flag", model.flags), ("note", model.notes)) for name in names]
    if not found:
        return []
    head = "" if alone else f"{model.name}: "
    return ["", *_wrapped(f"{head}{'; '.join(found)}", 2)]


def _curves(report: MacroReport) -> list[str]:
    lines = ["  Critical curves, enclosed area [arcsec2] of the tangential ones (o: open at the map's edge):"]
    redshifts = sorted({line.source_redshift for found in report.curves for line in found.lines})
    rows = []
    for found in report.curves:
        cells = []
        for redshift in redshifts:
            own = found.of_source(redshift, "tangential")
            area = f"{sum(line.area for line in own):.4g}" if own else "none"
            cells.append(area + (" o" if any(not line.closed for line in own) else ""))
        rows.append((found.name, *cells))
    return lines + _table(("", *(f"z = {one:g}" for one in redshifts)), rows)


def _by_reason(absent: dict[str, str]) -> dict[str, list[str]]:
    out: dict[str, list[str]] = {}
    for name, reason in absent.items():
        out.setdefault(reason, []).append(name)
    return out


def _table(head: Sequence[str], body: Sequence[Sequence[str]]) -> list[str]:
    """Lines with the first column to the left, the others to the right."""
    width = [max(len(row[k]) for row in (head, *body)) for k in range(len(head))]
    lines = []
    for first, *others in (head, *body):
        cells = [first.ljust(width[0]), *(cell.rjust(size) for cell, size in zip(others, width[1:], strict=True))]
        lines.append("    " + "  ".join(cells))
    return lines


def _interval(value: Interval | None, unit: str) -> str:
    if value is None:
        return "-"
    if value.low is None or value.high is None:
        limit = value.high if value.low is None else value.low
        return f"{'<' if value.low is None else '>'} {_round(limit or 0.0)}{unit} (84%)"
    if np.isclose(value.low, value.high, rtol=1e-9):
        return f"{_round(value.median)}{unit}"
    return f"{_round(value.median)}{unit} ({_round(value.low)} to {_round(value.high)})"


def _round(value: float) -> str:
    """Three digits, without an exponent where a number can be read without."""
    return f"{float(f'{value:.3g}'):.0f}" if 100.0 <= abs(value) < 1e8 else f"{value:.3g}"
