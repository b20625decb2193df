"""Figures of tracks: what is drawn for one disc, for several, and over a map."""

from __future__ import annotations

import numpy as np
import pytest
from matplotlib.figure import Figure

from crossing.shooting.tracks.track_curve import Crossings, TrackCurve
from crossing.shooting.tracks.track_figure import draw_path, draw_track


def curve(radii: int = 1, images: int = 1) -> TrackCurve:
    met = Crossings(
        position=np.array([0.25, 0.75]),
        place=np.array([0.5, 1.5]),
        strength=np.array([1.0, 2.0]),
        angle=np.array([0.1, 0.2]),
        entering=np.array([True, False]),
        background=np.array([5.0, 6.0]),
    )
    position = np.array([1.0, 0.0, 0.5])  # as asked for, which need not be sorted
    values = np.array([[3.0, 1.0, 2.0]]) * (1.0 + np.arange(radii))[:, None]
    return TrackCurve(
        position=position,
        magnification=values[0] if radii == 1 else values,
        radius=0.1 * (1.0 + np.arange(radii)),
        limb_darkening=np.linspace(0.0, 0.5, radii),
        start=(0.0, 1.0),
        end=(2.0, 1.0),
        accuracy=1e-3,
        crossings=met,
        evaluations=10,
        images=images,  # type: ignore[arg-type]
        flags=(),
    )


def test_lines_run_along_the_track_in_order() -> None:
    ax = curve().plot()
    x, y = ax.lines[0].get_data()
    assert (list(x), list(y)) == ([0.0, 1.0, 2.0], [1.0, 2.0, 3.0])
    assert (ax.get_xlim(), ax.get_yscale()) == ((0.0, 2.0), "log")
    assert ax.get_ylabel() == "magnification"


def test_crossings_are_marked_by_direction() -> None:
    handles, labels = curve().plot().get_legend_handles_labels()
    marks = dict(zip(labels, handles, strict=True))
    assert list(marks["fold, entering"].get_xdata()) == [0.5]
    assert list(marks["fold, leaving"].get_xdata()) == [1.5]
    assert marks["fold, entering"].get_marker() != marks["fold, leaving"].get_marker()


def test_several_discs_differ_in_more_than_colour() -> None:
    ax = draw_track(curve(3, images=2))
    styles = {(line.get_color(), line.get_linestyle()) for line in ax.lines[:3]}
    assert len(styles) == len({style for _, style in styles}) == 3
    assert "limb 0.25" in ax.get_legend_handles_labels()[1][1]
    assert ax.get_ylabel() == "magnification of the pair"


@pytest.mark.parametrize("marks", [True, False])
def test_the_path_over_a_map(marks: bool) -> None:
    ax = Figure().add_subplot()
    ax.set(xlim=(-1.0, 3.0), ylim=(0.0, 2.0))
    assert draw_path(curve(), ax, marks=marks) is ax
    places = [tuple(xy) for line in ax.lines for xy in np.column_stack(line.get_data())]
    assert places == ([(0.5, 1.0), (1.5, 1.0)] if marks else [])
    assert (ax.get_xlim(), ax.get_ylim()) == ((-1.0, 3.0), (0.0, 2.0))
    ax.figure.canvas.draw()
