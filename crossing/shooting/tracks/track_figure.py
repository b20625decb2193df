"""Draw a light curve along a track, and the track itself in the source plane."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, Final

import numpy as np

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from crossing.shooting.tracks.track_curve import TrackCurve

__all__ = ["draw_path", "draw_track"]

# Okabe & Ito's colours with a line style each, so that colour never carries the meaning alone.
_STYLES: Final = (
    ("#0072B2", "-"),
    ("#D55E00", "--"),
    ("#009E73", "-."),
    ("#CC79A7", ":"),
    ("#E69F00", (0, (5, 1, 1, 1))),
    ("#56B4E9", (0, (3, 1, 1, 1, 1, 1))),
)
_PATH: Final = "#D55E00"
_MOST_MARKS: Final = 200


def draw_track(curve: TrackCurve, ax: Axes | None = None) -> Axes:
    """Draw magnification against the place on the track, with marks where the centre crosses folds.

    Parameters
    ----------
    curve : TrackCurve
        The light curve.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.

    Returns
    -------
    matplotlib.axes.Axes
    """
    if ax is None:
        from matplotlib.figure import Figure

        ax = Figure(figsize=(8.0, 4.0), layout="constrained").add_subplot()
    order = np.argsort(curve.position, kind="stable")
    place, values = curve.length * curve.position[order], np.atleast_2d(curve.magnification)[:, order]
    few = len(place) < 60 and len(place) > 0
    for number, (radius, darkening, row) in enumerate(zip(curve.radius, curve.limb_darkening, values, strict=True)):
        colour, line = _STYLES[number % len(_STYLES)]
        label = rf"$R$ = {radius:.3g} $\theta_E$" + (f", limb {darkening:g}" if darkening else "")
        ax.plot(place, row, color=colour, ls=line, lw=1.2, marker="." if few else None, label=label)
    ax.set(yscale="log", xlim=(0.0, curve.length))
    _mark_crossings(curve, ax)
    ax.set_xlabel(r"distance along the track  [$\theta_E$ of 1 M$_\odot$]")
    ax.set_ylabel("magnification" if curve.images == 1 else "magnification of the pair")
    ax.legend(frameon=False, fontsize="small")
    return ax


def _mark_crossings(curve: TrackCurve, ax: Axes) -> None:
    """Triangles along the lower edge: up where the pair appears, down where it vanishes."""
    met = curve.crossings
    if len(met) > _MOST_MARKS:
        return
    for entering, marker, name in ((True, "^", "entering"), (False, "v", "leaving")):
        place = met.place[met.entering == entering]
        if len(place):
            ax.plot(
                place, np.full(len(place), 0.03), ls="", marker=marker, ms=5.0, mfc="none" if entering else "0.35",
                mec="0.35", transform=ax.get_xaxis_transform(), label=f"fold, {name}", clip_on=False,
            )  # fmt: skip


def draw_path(curve: TrackCurve, ax: Axes, *, marks: bool = True) -> Axes:
    """Draw a track in the source plane as an arrow, with triangles where its centre crosses folds.

    Parameters
    ----------
    curve : TrackCurve
        The light curve.
    ax : matplotlib.axes.Axes
        Axes of the source plane, with their limits set.
    marks : bool
        Whether to draw the triangles.

    Returns
    -------
    matplotlib.axes.Axes
    """
    from matplotlib.patheffects import withStroke

    start, end = np.array(curve.start), np.array(curve.end)
    arrow: dict[str, Any] = {
        "arrowstyle": "-|>",
        "color": _PATH,
        "lw": 1.6,
        "shrinkA": 0.0,
        "shrinkB": 0.0,
        "mutation_scale": 9.0,
    }
    arrow["path_effects"] = [withStroke(linewidth=3.4, foreground="white")]  # legible on dark and light ground
    ax.annotate("", xy=tuple(end), xytext=tuple(start), arrowprops=arrow)
    if not marks:
        return ax
    met = curve.crossings
    for entering, marker in ((True, "^"), (False, "v")):
        places = start + np.outer(met.position[met.entering == entering], end - start)
        ax.plot(places[:, 0], places[:, 1], ls="", marker=marker, ms=5.0, mfc="white", mec="black", mew=0.8, zorder=5)
    return ax
