"""Draw what an ensemble of tracks says: how often a star is magnified how much."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from crossing.shooting.library.ensemble import TrackEnsemble

__all__ = ["draw_ensemble"]

# Okabe & Ito's colours with a line style each, so that colour never carries the meaning alone.
_STYLES = (("#0072B2", "-"), ("#D55E00", "--"), ("#009E73", "-."), ("#CC79A7", ":"))
_LEVELS = 200


def draw_ensemble(ensemble: TrackEnsemble, ax: Axes | None = None) -> Axes:
    """Draw the share of the tracks above a magnification, for up to four radii of the library.

    Parameters
    ----------
    ensemble : TrackEnsemble
        The tracks.
    ax : matplotlib.axes.Axes, optional
        Where to draw; a new figure if None.

    Returns
    -------
    matplotlib.axes.Axes
    """
    if ax is None:
        from matplotlib.figure import Figure

        ax = Figure(figsize=(6.0, 4.0), layout="constrained").add_subplot()
    radii = ensemble.cell.radii
    chosen = np.unique(np.linspace(0, len(radii) - 1, len(_STYLES)).astype(int))
    for (colour, line), radius in zip(_STYLES, np.array(radii)[chosen], strict=False):
        curves = [track.curve(float(radius)) for track in ensemble.tracks]
        # Each point stands for half the way to its neighbours.
        weight = np.concatenate([np.gradient(place) for place, _ in curves] or [np.ones(1)])
        values = np.concatenate([value for _, value in curves] or [np.ones(1)])
        order = np.argsort(values)
        above = 1.0 - np.cumsum(weight[order]) / weight.sum()
        level = np.geomspace(values.min(), values.max(), _LEVELS)
        ax.plot(level, np.interp(level, values[order], above), color=colour, ls=line, label=rf"$R$ = {radius:.3g}")
    ax.set(xscale="log", yscale="log", ylim=(1e-5, 1.2))
    ax.set_xlabel("magnification")
    ax.set_ylabel("share of the tracks above it")
    ax.legend(frameon=False, fontsize="small", title=r"radius [$\theta_E$ of 1 M$_\odot$]")
    return ax
