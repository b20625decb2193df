"""Light curve of a disc along a track, straight from the star field.

The disc is cut into chords along the track. All images of a chord's line are followed as curves (`image_curves`), and
what they hold between the chord's ends is the light of the chord. Chords are laid by Kronrod's rule in the angle across
the disc, and for those curves for which that is not enough - where a caustic runs along the track, or has its cusp in
the disc - on halves of the range, as often as needed.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError
from crossing.shooting.compiled import announce_compilation
from crossing.shooting.field import StarField
from crossing.shooting.tracks.chord_sums import RULES, sum_panel
from crossing.shooting.tracks.fold_defects import fold_defects
from crossing.shooting.tracks.lines import trace_boxes
from crossing.shooting.tracks.track_curve import Crossings, TrackCurve
from crossing.shooting.tracks.track_scene import Panel, TrackScene, prepare_track

__all__ = ["track_crossings", "track_magnification"]

Array = NDArray[np.float64]

_DEEPEST = 40
_MOST_PANELS = 4000
# Where panels are cut: not at the middle, where a caustic that the track touches would lie between the halves, unseen.
_CUT = 0.47
# Boxes that a thread sums at a time.
_SHARE = 64
# Curves whose own error is this share of what is allowed are halved; if that is not enough, those of smaller shares.
_FIRST_SHARE = 0.5
_LAST_SHARE = 1e-3
_MOST_ROUNDS = 40
_MOST_POSITIONS = 1_000_000
# The centre's line is moved by this share of the smallest radius, off the symmetry of fields that have one.
_OFF_CENTRE = 1.37e-4
_POINT = 1e-6
# Of panels with a kink one in a hundred is wrong by more than this times the largest of its null rules.
_SAFETY = 1.25
# One chord stands for the disc where the density bends by less than this share of the accuracy.
_CALM = 0.1
# First positions are no farther apart than this [theta_E]: bumps of cusps that the centre misses are not much narrower.
_EVEN = 0.004
# Positions around a crossing, in radii along the normal.
_AROUND = np.array([-1.5, -1.0, -0.9, -0.7, -0.4, 0.0, 0.3, 0.5, 0.65, 0.8, 1.0, 1.1, 1.3, 1.7, 2.5, 4.0, 8.0])


def track_magnification(
    field: StarField,
    start: tuple[float, float],
    end: tuple[float, float],
    radius: float | Sequence[float] | Array,
    positions: ArrayLike | None = None,
    limb_darkening: float | Sequence[float] | Array = 0.0,
    accuracy: float = 1e-3,
    *,
    threads: int | None = None,
) -> TrackCurve:
    """Magnification of a disc that moves along a straight track.

    Parameters
    ----------
    field : StarField
        Stars and macro lens.
    start, end : (float, float)
        Ends (u, v) of the track in the source plane [Einstein radii of one solar mass].
    radius : float or array_like, shape (n_radius,)
        Radius of the disc, or several [same unit].
    positions : array_like, shape (n_position,), optional
        Where along the track, 0 at the start to 1 at the end. If None, points are put where the curve bends, so that
        straight lines between them are good to five times `accuracy`.
    limb_darkening : float or array_like, shape (n_radius,)
        Coefficient of the linear law, 0 to 1, of each disc.
    accuracy : float
        Relative accuracy, 1e-7 to 1e-1.
    threads : int, optional
        Threads; all cores if None. The result does not depend on it.

    Returns
    -------
    TrackCurve
        Magnification, shape (n_radius, n_position), or (n_position,) for one radius; the folds that the centre of the
        disc meets; flags.

    Raises
    ------
    InputError
        If the ends coincide, or a number is out of its range.

    References
    ----------
    .. [1] Witt H. J., 1993, ApJ 403, 530
    .. [2] Lewis G. F., Miralda-Escude J., Richardson D. C. & Wambsganss J., 1993, MNRAS 261, 647
    """
    first, last = _point("start", start), _point("end", end)
    if first == last:
        raise InputError(f"`start` and `end` must differ, got {first} twice; give a track of some length")
    radii, darkening = _discs(radius, limb_darkening)
    fractions = None if positions is None else _fractions(positions)
    _check_accuracy(accuracy)
    announce_compilation(trace_boxes)
    scene = prepare_track(field, first, last, float(radii.max()), float(radii.min()), accuracy, threads)
    centre = scene.chord(_OFF_CENTRE * float(radii.min()), scene.all_boxes)
    crossings = Crossings.from_nodes(centre.nodes, scene.length)
    sizes = np.unique(radii)
    discs = [_Disc(scene, float(size), bool(darkening[radii == size].any()), accuracy) for size in sizes]
    if fractions is None:
        place, followed = _adaptive(discs, crossings, scene.length, max(5.0 * accuracy, 1e-4))
        order = np.arange(len(place))
    else:
        order, followed = np.argsort(fractions, kind="stable"), True
        place = fractions[order] * scene.length
    settled = [disc.settle(place) for disc in discs]
    light = [disc.light(place) if disc.darkened else (one[1], one[1]) for disc, one in zip(discs, settled, strict=True)]
    values = np.empty((len(radii), len(place)))
    for row, (size, darkened) in enumerate(zip(radii, darkening, strict=True)):
        uniform, rounded = light[int(np.searchsorted(sizes, size))]
        values[row, order] = ((1.0 - darkened) * uniform + darkened * rounded) / (1.0 - darkened / 3.0)
    place_out = np.empty_like(place)
    place_out[order] = place
    return TrackCurve(
        position=place_out / scene.length,
        magnification=values[0] if np.ndim(radius) == 0 and np.ndim(limb_darkening) == 0 else values,
        radius=radii,
        limb_darkening=darkening,
        start=first,
        end=last,
        accuracy=accuracy,
        crossings=crossings,
        evaluations=centre.evaluations + sum(disc.evaluations for disc in discs),
        images=field.images,
        flags=_flags(centre.faults + sum(disc.faults for disc in discs), all(one[0] for one in settled), followed),
    )


def track_crossings(
    field: StarField, start: tuple[float, float], end: tuple[float, float], accuracy: float = 1e-3
) -> Crossings:
    """Folds that a point meets on a straight track: what a light curve's peaks come from, at a hundredth of its cost.

    Parameters
    ----------
    field : StarField
        Stars and macro lens.
    start, end : (float, float)
        Ends (u, v) of the track in the source plane [Einstein radii of one solar mass].
    accuracy : float
        Relative accuracy, 1e-7 to 1e-1.

    Raises
    ------
    InputError
        If the ends coincide, or a number is out of its range.
    """
    first, last = _point("start", start), _point("end", end)
    if first == last:
        raise InputError(f"`start` and `end` must differ, got {first} twice; give a track of some length")
    _check_accuracy(accuracy)
    announce_compilation(trace_boxes)
    scene = prepare_track(field, first, last, _POINT, _POINT, accuracy, 1)
    return Crossings.from_nodes(scene.chord(_OFF_CENTRE * _POINT, scene.all_boxes).nodes, scene.length)


@dataclass
class _Disc:
    """One radius: its panels, and what they cost."""

    scene: TrackScene
    radius: float
    darkened: bool
    accuracy: float

    def __post_init__(self) -> None:
        self.evaluations = 0
        self.faults = 0
        self.panels: list[Panel] = []
        self._add(-0.5 * np.pi, 0.5 * np.pi, self.scene.all_boxes)

    def _add(self, low: float, high: float, boxes: NDArray[np.int64]) -> Panel:
        panel, evaluations, faults = self.scene.panel(self.radius, low, high, boxes)
        self.evaluations += evaluations
        self.faults += faults
        self.panels.append(panel)
        return panel

    def _sum(self, panel: Panel, place: Array, budget: Array, darkened: bool) -> tuple[Array, Array, Array]:
        """Light of a panel and its null rules, (RULES, m); weighted light; each box's largest error in budgets."""
        worst = np.zeros(len(panel.boxes))
        begin, index, defect = fold_defects(
            panel.folds, self.radius, panel.distance, panel.half, panel.weight, len(panel.boxes), place
        )

        def part(boxes: slice) -> tuple[Array, Array]:
            out, rounded = np.zeros((RULES, len(place))), np.zeros(len(place) if darkened else 0)
            sum_panel(
                panel.nodes, panel.starts[:, boxes.start : boxes.stop + 1], panel.active[boxes], place, panel.half,
                self.radius, _CALM * self.accuracy, darkened, panel.weight,
                (begin[boxes.start : boxes.stop + 1], index, defect), budget, out, rounded, worst[boxes],
            )  # fmt: skip
            return out, rounded

        # Parts of a fixed size, summed in their order: the same for any number of threads.
        count = len(panel.boxes)
        parts = list(self.scene.share(part, [slice(i, min(i + _SHARE, count)) for i in range(0, count, _SHARE)]))
        out, rounded = parts[0]
        for more, darker in parts[1:]:
            out += more
            rounded += darker
        return out, rounded, worst

    def light(self, place: Array) -> tuple[Array, Array]:
        """Magnification of the uniform and of the fully darkened profile (times 2/3) at sorted places."""
        far = self.scene.far_images(place)
        uniform, rounded = far.copy(), (2.0 / 3.0 * far if self.darkened else np.zeros_like(place))
        for panel in self.panels:
            out, dark, _ = self._sum(panel, place, np.ones_like(place), self.darkened)
            uniform += out[0]
            if self.darkened:
                rounded += dark
        return uniform, rounded

    def settle(self, place: Array) -> tuple[bool, Array]:
        """Halve panels until the error is below the accuracy at all sorted places; whether it is, and the light."""
        sums = [self._sum(panel, place, np.ones_like(place), False)[0] for panel in self.panels]
        far, share = self.scene.far_images(place), _FIRST_SHARE
        while True:
            light = far + sum(one[0] for one in sums)
            allowed = self.accuracy / _SAFETY * light
            bad = sum(np.abs(one[1:]).max(axis=0) for one in sums) > allowed
            if not bad.any():
                return True, light
            worst = [self._sum(panel, place[bad], allowed[bad], False)[2] for panel in self.panels]
            taken, new = self._halve([one > share for one in worst])
            if taken:
                for number, panel in taken:
                    sums[number] -= self._sum(panel, place, allowed, False)[0]
                sums += [self._sum(panel, place, allowed, False)[0] for panel in new]
            elif share > _LAST_SHARE:
                share *= 0.3
            else:
                return False, light

    def _halve(self, chosen: Sequence[NDArray[np.bool_]]) -> tuple[list[tuple[int, Panel]], list[Panel]]:
        """Replace the chosen boxes' part of each panel by two halves; what was taken from which, and what is new."""
        taken: list[tuple[int, Panel]] = []
        new: list[Panel] = []
        if 2 * sum(bool(one.any()) for one in chosen) + len(self.panels) > _MOST_PANELS:
            return taken, new
        for number, (panel, boxes) in enumerate(zip(list(self.panels), chosen, strict=True)):
            if not boxes.any() or panel.high - panel.low < np.pi * 2.0**-_DEEPEST:
                continue
            middle = panel.low + _CUT * (panel.high - panel.low)
            for low, high in ((panel.low, middle), (middle, panel.high)):
                new.append(self._add(low, high, panel.boxes[boxes]))
            taken.append((number, panel.without(~boxes)))
            self.panels[number] = panel.without(boxes)
        return taken, new


def _adaptive(discs: Sequence[_Disc], crossings: Crossings, length: float, tolerance: float) -> tuple[Array, bool]:
    """Places along the track at which straight lines follow the curves of all discs, and whether they do."""
    smallest = min(disc.radius for disc in discs)
    seeds = [np.linspace(0.0, length, int(np.clip(length / _EVEN, 33, _MOST_POSITIONS // 10)))]
    for disc in discs:
        seen = crossings.strength / np.sqrt(disc.radius) > tolerance * crossings.background
        side = np.where(crossings.entering, 1.0, -1.0) / np.maximum(np.cos(crossings.angle), 0.02)
        seeds.append((crossings.place[seen, None] + disc.radius * side[seen, None] * _AROUND).ravel())
    place = _thinned(np.concatenate(seeds), length, 0.02 * smallest)
    values = np.stack([disc.light(place)[0] for disc in discs])
    todo = np.ones(len(place) - 1, dtype=np.bool_)
    for _ in range(_MOST_ROUNDS):
        index = np.flatnonzero(todo & (np.diff(place) > 0.04 * smallest))
        if len(index) == 0:
            return place, True
        if len(place) + len(index) > _MOST_POSITIONS:
            break
        middle = 0.5 * (place[index] + place[index + 1])
        found = np.stack([disc.light(middle)[0] for disc in discs])
        straight = 0.5 * (values[:, index] + values[:, index + 1])
        bent = (np.abs(found - straight) > tolerance * found).any(axis=0)
        # Where the middle lies on the line both halves are done; else both are looked at again.
        place = np.insert(place, index + 1, middle)
        values = np.insert(values, index + 1, found, axis=1)
        todo = np.zeros(len(place) - 1, dtype=np.bool_)
        shifted = index + np.arange(len(index))
        todo[shifted] = todo[shifted + 1] = bent
    return place, False


def _thinned(place: Array, length: float, spacing: float) -> Array:
    """Sorted places within the track, none closer than the spacing to the one before."""
    place = np.sort(place[(place >= 0.0) & (place <= length)])
    kept = np.concatenate([[True], np.diff(place // spacing) > 0])
    return np.unique(np.concatenate([[0.0], place[kept], [length]]))


def _flags(faults: int, settled: bool, followed: bool) -> tuple[str, ...]:
    flags = []
    if faults:
        flags.append(f"images may be missing: image curves do not add up in {faults} places")
    if not settled:
        flags.append("accuracy not met at some positions")
    if not followed:
        flags.append("sampling stopped before straight lines follow the curve")
    return tuple(flags)


def _point(name: str, point: Any) -> tuple[float, float]:
    value = np.asarray(point, dtype=np.float64)
    if value.shape != (2,) or not np.isfinite(value).all():
        raise InputError(f"`{name}` must be two finite numbers (u, v), got {point!r}")
    return float(value[0]), float(value[1])


def _discs(radius: Any, limb_darkening: Any) -> tuple[Array, Array]:
    try:
        radii, darkening = np.broadcast_arrays(
            np.atleast_1d(np.asarray(radius, dtype=np.float64)), np.asarray(limb_darkening, dtype=np.float64)
        )
    except ValueError:
        raise InputError("`radius` and `limb_darkening` must have the same shape, or one of them be a number") from None
    if radii.ndim != 1 or radii.size == 0:
        raise InputError(f"`radius` must be a number or one-dimensional, got shape {np.shape(radius)}")
    if not ((radii > 0.0) & np.isfinite(radii)).all():
        raise InputError(f"`radius` must be positive and finite, got {radii.min():g}")
    if not ((darkening >= 0.0) & (darkening <= 1.0)).all():
        raise InputError(f"`limb_darkening` must be between 0 and 1, got {limb_darkening!r}")
    return np.array(radii), np.array(darkening)


def _check_accuracy(accuracy: float) -> None:
    if not 1e-7 <= accuracy <= 0.1:
        raise InputError(f"`accuracy` must be between 1e-7 and 0.1, got {accuracy:g}")


def _fractions(positions: ArrayLike) -> Array:
    value = np.asarray(positions, dtype=np.float64)
    if value.ndim != 1 or value.size == 0:
        raise InputError(f"`positions` must be one-dimensional and not empty, got shape {value.shape}")
    if not ((value >= 0.0) & (value <= 1.0)).all():
        raise InputError("`positions` must be between 0 (start of the track) and 1 (its end); divide by its length")
    return value
