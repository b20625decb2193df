"""Draw the macro lens at an event: the field, its surroundings, the source plane and how well lam_t is known."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.optics.macro.sky_frame import offsets_from_sky

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from crossing.optics.macro.critical_lines import CriticalLine
    from crossing.optics.macro.macro_interval import Interval
    from crossing.optics.macro.macro_report import MacroReport, ModelReport

__all__ = ["on_sky", "plot_caustics", "plot_field", "plot_fold", "plot_lam_t", "plot_nearby", "shown_models"]

Array: TypeAlias = npt.NDArray[np.float64]

# Okabe & Ito's colours with a line style and a marker each, so that colour never carries the meaning alone.
_STYLES: Final[tuple[tuple[str, Any, str], ...]] = (
    ("#0072B2", "-", "o"),
    ("#D55E00", "--", "s"),
    ("#009E73", "-.", "^"),
    ("#CC79A7", (0, (5, 1, 1, 1, 1, 1)), "D"),
    ("#E69F00", (0, (2, 1)), "v"),
)
_NEAR: Final[tuple[str, Any]] = ("#0072B2", (0, (4, 1.5)))
_FAR: Final[tuple[str, Any]] = ("#D55E00", (0, (6, 1.5, 1, 1.5)))
_OTHER_MODELS: Final[tuple[str, Any]] = ("0.55", (0, (1, 1.2)))
_MOST_MODELS: Final = 5
_BINS: Final = 40
_VIEW: Final = 1.45
_LEAST_VIEW: Final = 0.02
_FOLD_VIEW: Final = 2.6
# Circles smaller than this part of the view are hidden behind the star.
_SEEN: Final = 0.05
# Smallest share of the axis of lam_t on either side of the critical curve, where the side's name stands.
_SIDE_ROOM: Final = 0.24
_TICKS: Final = 9


def _axes(ax: Axes | None, size: tuple[float, float] = (5.2, 4.8)) -> Axes:
    if ax is not None:
        return ax
    from matplotlib.figure import Figure

    return Figure(figsize=size, layout="constrained").add_subplot()


def shown_models(report: MacroReport) -> tuple[ModelReport, ...]:
    """The models that a figure has room for, the ones of largest weight, in their own order."""
    heaviest = sorted(report.models, key=lambda model: -model.weight)[:_MOST_MODELS]
    return tuple(model for model in report.models if any(model is one for one in heaviest))


def on_sky(report: MacroReport) -> bool:
    """Whether the direction of the stretch on the sky is known."""
    return any(model.stretch_angle is not None for model in report.models)


def _sky_axes(axes: Axes, of: str = "") -> None:
    axes.set_xlabel(f"east{of} [arcsec]")
    axes.set_ylabel(f"north{of} [arcsec]")
    axes.set_aspect("equal")
    if not axes.xaxis_inverted():
        axes.invert_xaxis()


def _square(axes: Axes, half: float, *, inverted: bool) -> None:
    axes.set_xlim((half, -half) if inverted else (-half, half))
    axes.set_ylim(-half, half)
    axes.set_aspect("equal")


def _frame_all(axes: Axes, lines: list[tuple[Array, Array]]) -> None:
    """Square limits, east to the left, around all lines and the origin."""
    x, y = (np.concatenate([np.zeros(1), *(line[k] for line in lines)]) for k in (0, 1))
    middle = (x.min() + x.max()) / 2, (y.min() + y.max()) / 2
    half = 0.53 * max(np.ptp(x), np.ptp(y), 1e-6)
    axes.set_xlim(middle[0] + half, middle[0] - half)
    axes.set_ylim(middle[1] - half, middle[1] + half)


def _legend(axes: Axes) -> None:
    axes.legend(frameon=False, fontsize="small", loc="upper center", bbox_to_anchor=(0.5, -0.13), ncols=2)


# The whole field


def plot_field(report: MacroReport, ax: Axes | None = None) -> Axes:
    """Draw critical curves of the likeliest model for all source redshifts, and of the others for the event's.

    Parameters
    ----------
    report : MacroReport
        With critical curves.
    ax : matplotlib.axes.Axes, optional
        Where to draw, in arcseconds from the event; a new figure if None.
    """
    axes = _axes(ax)
    best = max(report.models, key=lambda model: model.weight)
    main = next((one for one in report.curves if one.name == best.name), report.curves[0])
    own = report.source_redshift
    redshifts = sorted({line.source_redshift for line in main.lines})
    for redshift in redshifts:
        colour, style, width = _own_or_other(redshift, own)
        label = f"source at z = {redshift:g}" + (" (the event's)" if redshift == own else "")
        for number, line in enumerate(main.of_source(redshift)):
            axes.plot(line.x, line.y, color=colour, linestyle=style, linewidth=width, label=None if number else label)
    others = [found for found in report.curves if found is not main]
    label = "the event's, other models" if len(others) > 1 else "".join(f"the event's, {one.name}" for one in others)
    for line in (line for found in others for line in found.of_source(own or 0.0)):
        axes.plot(line.x, line.y, color=_OTHER_MODELS[0], linestyle=_OTHER_MODELS[1], linewidth=1.2, label=label)
        label = ""
    axes.plot(0, 0, "*", color="k", markerfacecolor="w", markersize=11, label="event", zorder=5)
    _sky_axes(axes, " of the event")
    _frame_all(axes, [(line.x, line.y) for found in report.curves for line in found.lines])
    _legend(axes)
    axes.set_title(f"critical curves by {main.name}", loc="left", fontsize="medium")
    return axes


def _own_or_other(redshift: float, own: float | None) -> tuple[str, Any, float]:
    """Colour, style and width of curves for the event's sources, nearer or farther ones."""
    if own is None or redshift == own:
        return "k", "-", 1.6
    return (*(_NEAR if redshift < own else _FAR), 1.1)


# The surroundings of the event


def plot_nearby(report: MacroReport, ax: Axes | None = None) -> Axes:
    """Draw critical curves, stretch and mirror image around the event, by each model.

    Parameters
    ----------
    report : MacroReport
        Report.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None. Axes are east and north where the direction of the stretch is known, else
        along and across the stretch; without a gradient it is the distribution of lam_t.
    """
    models = [model for model in shown_models(report) if model.critical_distance_perp is not None]
    if not models:
        return plot_lam_t(report, ax)
    axes, sky = _axes(ax), on_sky(report)
    half = max(_VIEW * max(_reach(model) for model in models), 3 * (report.position_error or 0.0), _LEAST_VIEW)
    knots = [pair for model in models for pair in _knots(report, model)]
    half = max([half, *(1.1 * float(np.abs(pair).max()) for pair in knots)])
    for number, pair in enumerate(knots):
        label = None if number else "mirrored knots"
        axes.plot(*pair.T, color="0.45", marker=".", markersize=5, linewidth=0.7, label=label, zorder=2)
    for model, (colour, style, marker) in zip(models, _STYLES, strict=False):
        _stretch(axes, model, half, sky, colour if len(models) > 1 else "0.5", first=model is models[0])
        lines = _curves_of(report, model)
        label = f"critical curve, {model.name}" if len(models) > 1 else "critical curve"
        if lines:
            for number, line in enumerate(lines):
                text = None if number else label
                axes.plot(line.x, line.y, color=colour, linestyle=style, linewidth=1.5, label=text)
        else:
            axes.plot(*_straight(model, half, sky), color=colour, linestyle=style, linewidth=1.5, label=label)
        _mirror(axes, model, sky, colour, marker, len(models) > 1)
    axes.plot(0, 0, "*", color="k", markerfacecolor="w", markersize=12, label="event", zorder=5)
    if (report.position_error or 0.0) > _SEEN * half and report.position_error is not None:
        turn = np.linspace(0, 2 * np.pi, 90)
        circle = report.position_error * np.cos(turn), report.position_error * np.sin(turn)
        axes.plot(*circle, color="k", linewidth=0.8, label="position error")
    if sky:
        _sky_axes(axes, " of the event")
    else:
        axes.set(xlabel="along the stretch [arcsec]", ylabel="across the stretch [arcsec]")
    _square(axes, half, inverted=sky)
    _legend(axes)
    axes.set_title("around the event", loc="left", fontsize="medium")
    return axes


def _reach(model: ModelReport) -> float:
    """How far from the event the mirror image or else the critical curve may be [arcsec]."""
    separation, perp = model.pair_separation, model.critical_distance_perp
    ends = [abs(one) for one in (separation.high, separation.median) if one] if separation is not None else []
    return max(ends, default=2 * abs(perp.median) if perp is not None else _LEAST_VIEW)


def _curves_of(report: MacroReport, model: ModelReport) -> tuple[CriticalLine, ...]:
    for found in report.curves:
        if model.point is not None and found.name == model.point.name and report.source_redshift is not None:
            return found.of_source(report.source_redshift)
    return ()


def _frame(model: ModelReport, sky: bool) -> tuple[Array, Array]:
    """Unit vectors along and across the stretch, towards larger lam_t."""
    if not sky or model.stretch_angle is None:
        return np.array([1.0, 0.0]), np.array([0.0, 1.0])
    angle = np.radians(model.stretch_angle.median)
    along = np.array([np.sin(angle), np.cos(angle)])
    slope = np.array([getattr(one, "median", 0.0) for one in (model.gradient_east, model.gradient_north)])
    along = -along if along @ slope < 0 else along
    return along, np.array([-along[1], along[0]])


def _median(value: Interval | None, default: float = 0.0) -> float:
    return default if value is None else value.median


def _stretch(axes: Axes, model: ModelReport, half: float, sky: bool, colour: str, *, first: bool) -> None:
    along, _ = _frame(model, sky)
    ends = np.array([[-2 * half], [2 * half]]) * along
    label = "stretch" if first else None
    axes.plot(*ends.T, color=colour, linestyle=(0, (1, 2)), linewidth=1.0, zorder=1, label=label)


def _straight(model: ModelReport, half: float, sky: bool) -> tuple[Array, Array]:
    """The critical curve of the linear expansion: lam_t + gx x + gy y = 0."""
    along, across = _frame(model, sky)
    slope = np.array([_median(model.gradient), _median(model.gradient_across)])
    size = float(np.hypot(*slope))
    foot = -_median(model.critical_distance_perp) * slope / size
    t = np.array([-3 * half, 3 * half])
    x, y = foot[0] - slope[1] / size * t, foot[1] + slope[0] / size * t
    first, second = along[:, None] * x + across[:, None] * y
    return first, second


def _mirror(axes: Axes, model: ModelReport, sky: bool, colour: str, marker: str, several: bool) -> None:
    """The mirror image with its 68% intervals."""
    label = f"mirror image, {model.name}" if several else "mirror image"
    style: dict[str, Any] = {"color": colour, "marker": marker, "markerfacecolor": "w", "markersize": 6, "zorder": 4}
    if sky and model.mirror_east is not None and model.mirror_north is not None:
        x, y = model.mirror_east, model.mirror_north
        axes.errorbar(
            x.median,
            y.median,
            xerr=_errors(x),
            yerr=_errors(y),
            linestyle="none",
            elinewidth=0.9,
            label=label,
            **style,
        )
    elif not sky and model.critical_distance is not None:
        x = model.critical_distance
        axes.errorbar(
            -2 * x.median, 0.0, xerr=2 * _errors(x)[::-1], linestyle="none", elinewidth=0.9, label=label, **style
        )


def _errors(value: Interval) -> Array:
    low = value.median if value.low is None else value.low
    high = value.median if value.high is None else value.high
    return np.array([[value.median - low], [high - value.median]])


# How well lam_t is known


def plot_lam_t(report: MacroReport, ax: Axes | None = None) -> Axes:
    """Draw the distribution of lam_t by each model, and where the critical curve is.

    Parameters
    ----------
    report : MacroReport
        Report.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.
    """
    axes = _axes(ax, (4.6, 4.0))
    models = shown_models(report)
    values = np.concatenate([model.draws.lam_t for model in models])
    low, high = (float(one) for one in np.percentile(values, [0.2, 99.8]))
    reach = 1.1 * max(abs(low), abs(high), 1e-4)
    low, high = min(1.1 * low, -_SIDE_ROOM * reach), max(1.1 * high, _SIDE_ROOM * reach)
    top = 0.0
    for model, (colour, style, _) in zip(models, _STYLES, strict=False):
        draws = model.draws.lam_t
        label = model.name if len(models) > 1 else None
        if np.ptp(draws) == 0:
            axes.axvline(float(draws[0]), color=colour, linestyle=style, linewidth=1.6, label=label)
            continue
        first, last = (float(one) for one in np.percentile(draws, [0.1, 99.9]))
        edges = np.linspace(first, last, _BINS + 1)
        density = np.histogram(draws, edges)[0] / len(draws) * model.weight / (edges[1] - edges[0])
        axes.stairs(density, edges, color=colour, linestyle=style, linewidth=1.5, label=label)
        top = max(top, float(density.max()))
    axes.set_xlim(low, high)
    axes.set_ylim(0, 1.22 * top if top > 0 else 1)
    axes.axvline(0, color="k", linewidth=0.9)
    axes.axvspan(low, 0, color="0.93", zorder=0)
    sides = ("saddle", "minimum") if report.lam_r is None or report.lam_r.median > 0 else ("maximum", "saddle")
    for side, way, where in zip(sides, (-1, 1), ("right", "left"), strict=True):
        share = report.parity_probabilities.get(side, 0.0)
        text = f"{side} {share:.2g}" if 0.01 < share < 0.99 else side
        place = 0.015 * way * (high - low)
        axes.text(place, 0.97, text, ha=where, va="top", transform=axes.get_xaxis_transform(), fontsize="small")
    axes.set_title("how well lam_t is known", loc="left", fontsize="medium")
    axes.set_xlabel(r"$\lambda_t$ at the event (0: critical curve)")
    axes.set_ylabel("probability density" if top > 0 else "")
    if top == 0:
        axes.set_yticks([])
    if len(models) > 1:
        _legend(axes)
    return axes


# The source plane


def plot_caustics(report: MacroReport, ax: Axes | None = None) -> Axes:
    """Draw the caustics of all models for the event's source redshift, and the source.

    Parameters
    ----------
    report : MacroReport
        With critical curves.
    ax : matplotlib.axes.Axes, optional
        Where to draw, in arcseconds from the source of the event; a new figure if None.
    """
    axes = _axes(ax)
    models = [model for model in shown_models(report) if _curves_of(report, model)]
    for model, (colour, style, _) in zip(models, _STYLES, strict=False):
        for number, line in enumerate(_curves_of(report, model)):
            width = 1.4 if line.kind == "tangential" else 0.8
            label = None if number else model.name
            axes.plot(line.caustic_x, line.caustic_y, color=colour, linestyle=style, linewidth=width, label=label)
    axes.plot(0, 0, "*", color="k", markerfacecolor="w", markersize=11, label="source of the event", zorder=5)
    _sky_axes(axes, " of the source")
    _frame_all(axes, [(one.caustic_x, one.caustic_y) for model in models for one in _curves_of(report, model)])
    _legend(axes)
    axes.set_title("caustics (thin: radial)", loc="left", fontsize="medium")
    return axes


def plot_fold(report: MacroReport, ax: Axes | None = None) -> Axes:
    """Draw the caustic next to the source by the local quadratic lens of each model.

    Parameters
    ----------
    report : MacroReport
        Report of models with a gradient.
    ax : matplotlib.axes.Axes, optional
        Where to draw, in arcseconds from the source of the event; a new figure if None.
    """
    axes, sky = _axes(ax), on_sky(report)
    models = [model for model in shown_models(report) if model.caustic_distance is not None]
    half = max((_FOLD_VIEW * _depth(model) for model in models), default=1.0)
    unit, name = (1e3, "mas") if half < 0.5 else (1.0, "arcsec")
    for model, (colour, style, _) in zip(models, _STYLES, strict=False):
        u, v = _local_caustic(model, 3 * half)
        along, across = _frame(model, sky)
        x, y = along[:, None] * u + across[:, None] * v
        label = f"caustic, {model.name}" if len(models) > 1 else "caustic"
        axes.plot(unit * x, unit * y, color=colour, linestyle=style, linewidth=1.6, label=label)
        # Sources with the pair lie towards larger lam_t: ticks tell that side.
        shown = np.flatnonzero((np.abs(x) < half) & (np.abs(y) < half))
        for k in shown[np.linspace(0, len(shown) - 1, _TICKS, dtype=np.intp)] if len(shown) else ():
            ends = np.array([[x[k], y[k]], [x[k], y[k]] + 0.035 * half * along])
            axes.plot(*(unit * ends).T, color=colour, linewidth=1.0)
    axes.plot(0, 0, "*", color="k", markerfacecolor="w", markersize=12, label="source of the event", zorder=5)
    if sky:
        axes.set(xlabel=f"east of the source [{name}]", ylabel=f"north of the source [{name}]")
    else:
        axes.set(xlabel=f"along the stretch [{name}]", ylabel=f"across the stretch [{name}]")
    _square(axes, unit * half, inverted=sky)
    _legend(axes)
    axes.set_title("next to the source (ticks: the side with the pair)", loc="left", fontsize="medium")
    return axes


def _depth(model: ModelReport) -> float:
    return max(abs(_median(model.caustic_distance)), 1e-9)


def _local_caustic(model: ModelReport, half: float) -> tuple[Array, Array]:
    """Caustic of u = lam_t x + gx x**2/2 + gy x y, v = lam_r y + gy x**2/2 around the source."""
    gx, gy, lam_r = _median(model.gradient), _median(model.gradient_across), _median(model.lam_r, 1.0)
    lam_t = _median(model.lam_t)
    y = np.linspace(-half / abs(lam_r), half / abs(lam_r), 1201)
    x = -(lam_t + gy * y) / gx
    return lam_t * x + gx * x**2 / 2 + gy * x * y, lam_r * y + gy * x**2 / 2


def _knots(report: MacroReport, model: ModelReport) -> list[Array]:
    """Mirrored knots, each as its two images' east and north from the event [arcsec], shape (2, 2)."""
    position = report.position
    if position is None:
        return []
    return [np.array([offsets_from_sky(position, *place) for place in pair]) for pair in model.pairs]
