"""A track over a star field, made ready: region of rays, boxes of stars, and the chords of the source's disc."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from crossing.shooting.field import StarField, deflection_reach, ray_region
from crossing.shooting.tracks.chord_sums import panel_rule
from crossing.shooting.tracks.fold_defects import folds_among
from crossing.shooting.tracks.lines import star_backgrounds, trace_boxes
from crossing.shooting.tree import build_tree, order_for

__all__ = ["Chord", "Panel", "TrackScene", "prepare_track"]

Array = NDArray[np.float64]
T = TypeVar("T")

# Share of the asked accuracy that may be lost beyond the region of rays.
_LOST_SHARE = 0.25
# Step of the curves for an accuracy of 1e-3; what polynomials between nodes miss goes with the eighth power.
_PACE = 0.15
_STARS_A_BOX = 3
# All lines are moved by this share of the radius, off the axis of fields that have one.
_OFF_AXIS = 1.7e-7
_TREE_MARGIN = 0.01
_SAFE_POLE = 4.0
_SAFE_PAIR = 5.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Chord:
    """Images of one line beside the track."""

    nodes: Array
    """(n, COLUMNS) nodes of the image curves."""
    starts: NDArray[np.int64]
    """(boxes + 1,) rows at which each box's nodes begin."""
    evaluations: int
    """Evaluations of the lens map."""
    faults: int
    """Boxes whose curves do not add up."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Panel:
    """Chords of a disc between two angles, in some boxes of the image plane."""

    low: float
    """First angle; the chord at the angle a is R sin(a) from the centre."""
    high: float
    """Last angle."""
    boxes: NDArray[np.int64]
    """(k,) boxes."""
    active: NDArray[np.bool_]
    """(k,) boxes that this panel still speaks for."""
    nodes: Array
    """(n, COLUMNS) nodes of all chords."""
    starts: NDArray[np.int64]
    """(chords, k + 1) rows at which a box's nodes begin."""
    half: Array
    """(chords,) half lengths."""
    weight: Array
    """(chords, RULES) weights, such that areas sum to a mean over the disc; see `panel_rule`."""
    distance: Array
    """(chords,) distances from the disc's centre."""
    folds: Array
    """(m, 5) folds on the middle chord, see `folds_among`; none unless the panel is the whole disc."""

    def without(self, boxes: NDArray[np.bool_]) -> Panel:
        """The same panel without some boxes."""
        return replace(self, active=self.active & ~boxes)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrackScene:
    """What all chords of a track share."""

    scene: tuple[Any, ...] = field(repr=False)
    """Field and tree, as kernels take them."""
    line: Array
    """(4,) direction and first point of the track."""
    length: float
    """Length of the track."""
    boxes: Array
    """(n, 4) boxes that fill the region of the image plane in which images are sought."""
    order: NDArray[np.int64]
    """Stars of the region, box by box."""
    begin: NDArray[np.int64]
    """(n + 1,) where each box's stars begin."""
    bends: Array
    """(2,) Laplacians of w and p."""
    ends: Array
    """(n, 4) of each star, see `follow`."""
    margin: float
    """Images are kept this far beyond both ends of the track."""
    pace: float
    """Step of the curves."""
    threads: int
    """Threads."""

    @property
    def all_boxes(self) -> NDArray[np.int64]:
        """Indices of all boxes."""
        return np.arange(len(self.boxes))

    def chord(self, h: float, boxes: NDArray[np.int64]) -> Chord:
        """Images, in some boxes, of the line at the distance h from the track."""
        limits = np.array([-self.margin, self.length + self.margin])
        h += _OFF_AXIS * self.margin
        nodes, starts, evaluations, faults = trace_boxes(
            boxes,
            self.boxes,
            self.order,
            self.begin,
            h,
            self.scene,
            self.line,
            self.bends,
            self.ends,
            limits,
            self.pace,
        )
        return Chord(nodes=nodes, starts=starts, evaluations=int(evaluations), faults=int(faults))

    def chords(self, distances: Sequence[float] | Array, boxes: NDArray[np.int64]) -> list[Chord]:
        """Images of several lines, by threads."""
        return self.share(lambda h: self.chord(float(h), boxes), list(distances))

    def share(self, work: Callable[[Any], T], items: Sequence[Any]) -> list[T]:
        """Results of independent pieces of work, by threads, in the order of the items."""
        if self.threads == 1 or len(items) == 1:
            return [work(item) for item in items]
        with ThreadPoolExecutor(self.threads) as pool:
            return list(pool.map(work, items))

    def panel(self, radius: float, low: float, high: float, boxes: NDArray[np.int64]) -> tuple[Panel, int, int]:
        """Chords of a disc between two angles; with the evaluations and the faults."""
        angle, rules = panel_rule(low, high)
        chords = self.chords(radius * np.sin(angle), boxes)
        offset = np.cumsum([0] + [len(chord.nodes) for chord in chords])[:-1]
        half = radius * np.cos(angle)
        middle = chords[len(chords) // 2]
        whole = high - low > 0.999 * np.pi
        panel = Panel(
            distance=radius * np.sin(angle),
            folds=folds_among(middle.nodes, middle.starts) if whole else np.empty((0, 5)),
            low=low,
            high=high,
            boxes=boxes,
            active=np.ones(len(boxes), dtype=np.bool_),
            nodes=np.concatenate([chord.nodes for chord in chords]),
            starts=np.array([chord.starts + first for chord, first in zip(chords, offset, strict=True)]),
            half=half,
            weight=rules * (half / (np.pi * radius**2))[:, None],
        )
        return panel, sum(chord.evaluations for chord in chords), sum(chord.faults for chord in chords)

    def far_images(self, position: Array) -> Array:
        """Magnification by images that the curves leave out, next to stars that the track passes far away.

        Notes
        -----
        A star of mass m that has to deflect by D has an image of the magnification (m/D^2)^2.
        """
        near, cut = self.ends[self.order], self.ends[self.order, 2]
        if not np.isfinite(cut).any():
            return np.zeros_like(position)
        mass = self.scene[5][2][self.order]
        grid = np.linspace(0.0, self.length, 65)
        total = np.zeros_like(grid)
        for i, p in enumerate(grid):
            along = np.abs(p - near[:, 0])
            far = along > cut
            total[i] = np.sum((mass[far] / (along[far] ** 2 + near[far, 1] ** 2)) ** 2)
        return np.interp(position, grid, total)


def prepare_track(
    stars: StarField,
    start: tuple[float, float],
    end: tuple[float, float],
    radius: float,
    smallest: float,
    accuracy: float,
    threads: int | None,
) -> TrackScene:
    """Region, tree and stars for a track.

    Parameters
    ----------
    stars : StarField
        The field.
    start, end : (float, float)
        Ends of the track in the source plane.
    radius, smallest : float
        Largest and smallest radius of the source.
    accuracy : float
        Relative accuracy of magnifications.
    threads : int or None
        Threads; all cores if None.
    """
    stars = _merged(stars)
    first, last = np.array(start), np.array(end)
    length = float(np.hypot(*(last - first)))
    a, b = (last - first) / length
    line = np.array([a, b, *first])
    lost = min(stars.lost_flux, _LOST_SHARE * accuracy)
    wide, high = _half_region(stars, first, last, radius, lost)
    region = (-wide, wide, -high, high)
    sheet = (stars.half_width, stars.half_height, stars.kappa_star) if stars.kappa_star > 0 else None
    # Leaves do not fit to each other better than their error, which must stay below a radius.
    order = order_for(min(1e-9, max(1e-13, 1e-2 * accuracy * smallest)))
    # Curves are followed a little past an edge before they are taken back to it.
    beyond = tuple((1.0 + _TREE_MARGIN) * edge + np.sign(edge) for edge in region)
    tree = build_tree(stars.x, stars.y, stars.mass, sheet, beyond, order)
    scene = (stars.lens_numbers, tree.arrays, tree.roots, tree.root_node, tree.children, stars.stars)
    boxes, held, begin = _boxes(stars, region)
    reach = deflection_reach(stars.kappa_star * stars.heavy_mass, lost) if stars.sheet else np.inf
    gx, gy = stars.gradient
    return TrackScene(
        scene=scene,
        line=line,
        length=length,
        boxes=boxes,
        order=held,
        begin=begin,
        bends=np.array([a * gy - b * gx, a * gx + b * gy]),
        ends=_ends(held, scene, line, reach),
        margin=1.01 * radius,
        pace=_PACE * min(1.0, (accuracy / 1e-3) ** 0.125),
        threads=threads or os.cpu_count() or 1,
    )


def _merged(stars: StarField) -> StarField:
    """The same field with stars that lie on each other made one: they have but one image curve."""
    if len(np.unique(stars.x)) == len(stars):
        return stars
    places, number = np.unique(np.stack([stars.x, stars.y]), axis=1, return_inverse=True)
    if places.shape[1] == len(stars):
        return stars
    mass = np.bincount(number.ravel(), weights=stars.mass)
    return StarField(
        places[0], places[1], mass, stars.kappa, stars.gamma, stars.half_width, stars.half_height, stars.gradient,
        sheet=stars.sheet, accuracy=stars.accuracy, lost_flux=stars.lost_flux,
    )  # fmt: skip


def _half_region(stars: StarField, first: Array, last: Array, radius: float, lost: float) -> tuple[float, float]:
    half = tuple(np.maximum(np.abs(first), np.abs(last)) + 1.1 * radius)
    if stars.sheet:
        return ray_region(stars.lens, half, deflection_reach(stars.kappa_star * stars.heavy_mass, lost))
    return stars.ray_region(half)


def _boxes(
    stars: StarField, region: tuple[float, float, float, float]
) -> tuple[Array, NDArray[np.int64], NDArray[np.int64]]:
    """Cut a region across its longer side into boxes of a few stars: boxes, stars by box, where each box begins."""
    inside = np.flatnonzero((np.abs(stars.x) < region[1]) & (np.abs(stars.y) < region[3]))
    along_x = region[1] >= region[3]
    place = (stars.x if along_x else stars.y)[inside]
    order = inside[np.argsort(place, kind="stable")]
    place = np.sort(place)
    begin = np.arange(0, len(order), _STARS_A_BOX)
    # Of the gaps near an even share the widest is cut: a star close to an edge costs steps.
    cuts = [region[0] if along_x else region[2]]
    firsts = [0]
    for low in begin[1:]:
        near = np.arange(max(firsts[-1] + 1, low - 1), min(len(order) - 1, low + 1) + 1)
        if len(near) == 0:
            continue
        gaps = place[near] - place[near - 1]
        best = int(near[np.argmax(gaps)])
        if gaps.max() > 0.0:
            firsts.append(best)
            cuts.append(0.5 * (place[best - 1] + place[best]))
    cuts.append(region[1] if along_x else region[3])
    boxes = np.empty((len(cuts) - 1, 4))
    boxes[:] = region
    first = 0 if along_x else 2
    boxes[:, first], boxes[:, first + 1] = cuts[:-1], cuts[1:]
    return boxes, order, np.append(firsts, len(order)).astype(np.int64)


def _ends(which: NDArray[np.int64], scene: tuple[Any, ...], line: Array, reach: float) -> Array:
    """Where each star's image is left to the closed form, and where its pole rules; see `follow`."""
    mass = scene[5][2]
    ends = np.full((len(mass), 4), np.inf)
    covered = np.empty((len(which), 3))
    star_backgrounds(which, scene, covered)
    u, v = covered[:, 0] - line[2], covered[:, 1] - line[3]
    ends[which, 0], ends[which, 1] = line[0] * u + line[1] * v, line[0] * v - line[1] * u
    ends[which, 3] = np.maximum(_SAFE_POLE * np.sqrt(mass[which]), _SAFE_PAIR * mass[which] / covered[:, 2])
    ends[which, 2] = np.maximum(reach, ends[which, 3])
    return ends
