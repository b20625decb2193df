"""One track of a library: what is left of its curves once the folds are taken out, at a few radii, and the folds.

The magnification by a fold, ``K / sqrt(R) J(d/R)``, is known for every radius from the list of crossings. What is left
of a curve is smooth: few points hold it, and it hardly changes from one radius to the next.
"""

from __future__ import annotations

import io
import zlib
from dataclasses import dataclass
from typing import Final
from zipfile import BadZipFile

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.optics.fold_table import fold_table
from crossing.shooting.field import StarField
from crossing.shooting.library.library_cell import TrackCell
from crossing.shooting.tracks.track import track_crossings, track_magnification
from crossing.shooting.tracks.track_curve import Crossings

__all__ = ["LibraryTrack", "compute_track"]

Array = NDArray[np.float64]

# Positions of a curve around a crossing, in radii along the normal: dense where the profile bends, and growing by a
# constant factor inside.
_AROUND: Final = np.concatenate([[-1.5], np.linspace(-1.0, 1.6, 53)])
_GROWTH: Final = 1.2
_STEEPEST: Final = 0.02
# Where a curve is needed that no crossing told of: positions at least.
_EVEN: Final = 65
# Positions around a crossing with which the sampling begins, and between all of them [theta_E].
_SEEDS: Final = np.array([-1.3, -1.0, -0.8, -0.4, 0.0, 0.4, 0.8, 1.0, 1.2, 1.6, 2.5, 5.0])
_SPACING: Final = 0.004
_ROUNDS: Final = 4
# Share of the positions that may be left to be halved: each round follows all images anew, for few of them too.
_FEW: Final = 0.01
# Share of the accuracy that straight lines may take, first where positions are chosen, then where they are thinned.
_SHARE: Final = 0.5
_PIECES: Final = 6
# In radii: places closer than this hold nothing.
_FINEST: Final = 0.05
_FOLDS: Final = ("place", "strength", "angle", "entering", "background")
_CHUNK: Final = 4096


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LibraryTrack:
    """Curves of one track, for any radius in the range of the library."""

    index: int
    """Number of the track in its cell."""
    start: tuple[float, float]
    """First point (u, v) of the track [theta_E]."""
    end: tuple[float, float]
    """Last point."""
    radii: Array
    """(n_radius,) radii at which curves were computed, rising."""
    begin: NDArray[np.int64]
    """(n_radius + 1,) where the points of each radius begin."""
    place: Array
    """(m,) distances from the start of the track [theta_E], rising for each radius."""
    rest: NDArray[np.float32]
    """(m,) magnification less that of all folds that the track meets; straight lines lie between."""
    crossings: Crossings
    """Folds that the track meets."""
    evaluations: int
    """Evaluations of the lens map."""
    flags: tuple[str, ...]
    """What is wrong; empty if all is well."""

    @property
    def length(self) -> float:
        """Length of the track [theta_E]."""
        return float(np.hypot(self.end[0] - self.start[0], self.end[1] - self.start[1]))

    def at(self, radius: float, place: Array, limb_darkening: float = 0.0) -> Array:
        """Magnification of a disc.

        Parameters
        ----------
        radius : float
            Its radius [theta_E], within the library's range.
        place : (n,) ndarray
            Distances from the start of the track [theta_E].
        limb_darkening : float
            Coefficient of the linear law.

        Notes
        -----
        What is left without the folds is interpolated in the root of the radius, in which the next term of a fold is
        straight. It is that of a uniform disc: for a darkened one, of the disc with the same second moment.
        """
        value = _fold_light(self.crossings, radius, place, limb_darkening)
        low, share = self._bracket(radius, limb_darkening)
        for number, weight in ((low, 1.0 - share), (low + 1, share)):
            if weight:
                rows = self._rows(number)
                value += weight * np.interp(place, self.place[rows], self.rest[rows])
        return value

    def curve(self, radius: float, limb_darkening: float = 0.0) -> tuple[Array, Array]:
        """Places (n,) and magnifications (n,) of a disc, close enough for straight lines between.

        Parameters
        ----------
        radius : float
            Its radius [theta_E], within the library's range.
        limb_darkening : float
            Coefficient of the linear law.
        """
        low, share = self._bracket(radius, limb_darkening)
        numbers = [number for number, weight in ((low, 1.0 - share), (low + 1, share)) if weight]
        crossings = self.crossings
        wide = radius / np.maximum(np.cos(crossings.angle), _STEEPEST)
        steps = int(np.ceil(np.log(max(self.length / (radius * _AROUND[-1]), 1.0)) / np.log(_GROWTH)))
        ahead = np.append(_AROUND, _AROUND[-1] * _GROWTH ** np.arange(1, steps + 1))
        around = (crossings.place + np.where(crossings.entering, wide, -wide) * ahead[:, None]).ravel()
        held = [self.place[self._rows(number)] for number in numbers]
        place = np.unique(np.concatenate([around, np.linspace(0.0, self.length, _EVEN), *held]))
        place = place[(place >= 0.0) & (place <= self.length)]
        return place, self.at(radius, place, limb_darkening)

    def _rows(self, number: int) -> slice:
        return slice(int(self.begin[number]), int(self.begin[number + 1]))

    def _bracket(self, radius: float, limb_darkening: float) -> tuple[int, float]:
        """Index of the computed radius below, and the weight of the next."""
        radii = self.radii
        # A radius that was computed may come back with a rounding error.
        if not radii[0] * (1.0 - 1e-9) <= radius <= radii[-1] * (1.0 + 1e-9):
            raise InputError(
                f"`radius` must lie in the library's range, {radii[0]:g} to {radii[-1]:g} Einstein radii, got "
                f"{radius:g}; make a cell with other radii"
            )
        if limb_darkening:
            inner = 1.0 - limb_darkening
            moment = (inner / 4.0 + limb_darkening * 2.0 / 15.0) / (inner / 2.0 + limb_darkening / 3.0)
            radius = max(radius * float(np.sqrt(2.0 * moment)), float(radii[0]))
        low = int(np.clip(np.searchsorted(radii, radius, side="right") - 1, 0, max(len(radii) - 2, 0)))
        if len(radii) == 1:
            return 0, 0.0
        share = (np.sqrt(radius) - np.sqrt(radii[low])) / (np.sqrt(radii[low + 1]) - np.sqrt(radii[low]))
        return low, float(np.clip(share, 0.0, 1.0))

    def to_bytes(self, cell: TrackCell) -> bytes:
        """The file that keeps the track."""
        stream = io.BytesIO()
        np.savez_compressed(
            stream,
            key=np.array(cell.key),
            index=np.array(self.index),
            ends=np.array([*self.start, *self.end]),
            begin=self.begin,
            place=self.place,
            rest=self.rest,
            evaluations=np.array(self.evaluations),
            flags=np.array("\n".join(self.flags)),
            **{f"fold_{name}": getattr(self.crossings, name) for name in _FOLDS},
        )
        return stream.getvalue()

    @classmethod
    def from_bytes(cls, data: bytes, cell: TrackCell, index: int) -> LibraryTrack:
        """Track out of its file.

        Parameters
        ----------
        data : bytes
            The whole file.
        cell : TrackCell
            The cell to which it must belong.
        index : int
            The number that it must have.

        Raises
        ------
        InputError
            If it is damaged, or another track.
        """
        try:
            with np.load(io.BytesIO(data), allow_pickle=False) as archive:
                held = {name: archive[name] for name in archive.files}
            if (str(held["key"]), int(held["index"])) != (cell.key, index):
                raise InputError("is another track")
            return cls._from_arrays(held, cell, index)
        except InputError:
            raise
        except (OSError, ValueError, EOFError, KeyError, IndexError, NotImplementedError, BadZipFile, zlib.error):
            raise InputError("is damaged") from None

    @classmethod
    def _from_arrays(cls, held: dict[str, NDArray[np.generic]], cell: TrackCell, index: int) -> LibraryTrack:
        ends = [float(one) for one in held["ends"].astype(np.float64)]
        flags = str(held["flags"])
        folds = {name: held[f"fold_{name}"] for name in _FOLDS}
        return cls(
            index=index,
            start=(ends[0], ends[1]),
            end=(ends[2], ends[3]),
            radii=np.array(cell.radii),
            begin=held["begin"].astype(np.int64),
            place=held["place"].astype(np.float64),
            rest=held["rest"].astype(np.float32),
            crossings=Crossings(position=folds["place"].astype(np.float64) / cell.length, **folds),  # type: ignore[arg-type]
            evaluations=int(held["evaluations"]),
            flags=tuple(flags.split("\n")) if flags else (),
        )


def compute_track(cell: TrackCell, index: int) -> LibraryTrack:
    """Compute a track of a cell; one thread, nothing is read or written.

    Parameters
    ----------
    cell : TrackCell
        What to compute.
    index : int
        Number of the track: the same one gives the same track, whoever computes it.
    """
    stars, start, end = cell.place(index)
    # Strengths and places serve all radii, so they must be good for the smallest.
    crossings = track_crossings(stars, start, end, min(cell.accuracy, 1e-3))
    sampler = _Sampler(cell=cell, stars=stars, start=start, end=end, crossings=crossings)
    # From large discs to small ones: where the rest of one bends, that of the next does.
    curves: list[tuple[Array, Array]] = []
    for radius in reversed(cell.radii):
        curves.insert(0, sampler.curve(radius, curves[0][0] if curves else np.empty(0)))
    return LibraryTrack(
        index=index,
        start=start,
        end=end,
        radii=np.array(cell.radii),
        begin=np.cumsum([0, *(len(place) for place, _ in curves)]).astype(np.int64),
        place=np.concatenate([place for place, _ in curves]),
        rest=np.concatenate([rest for _, rest in curves]).astype(np.float32),
        crossings=crossings,
        evaluations=sampler.evaluations,
        flags=tuple(reversed(sampler.flags)),
    )


@dataclass
class _Sampler:
    """Curves of one track, sampled where what is left without the folds bends."""

    cell: TrackCell
    stars: StarField
    start: tuple[float, float]
    end: tuple[float, float]
    crossings: Crossings

    def __post_init__(self) -> None:
        self.evaluations = 0
        self.flags: list[str] = []

    def curve(self, radius: float, hints: Array) -> tuple[Array, Array]:
        """Places and rests of one radius, no more than straight lines between them need; starts with places of others.

        Notes
        -----
        Positions are chosen here, not by `track_magnification`: curves of small discs need them by the ten thousand,
        what is left of them by the hundred; and the beginning is dense enough to meet the cusps beside the track.
        """
        length, tolerance = self.cell.length, self.cell.accuracy
        wide = radius / np.maximum(np.cos(self.crossings.angle), _STEEPEST)
        around = (self.crossings.place + np.where(self.crossings.entering, wide, -wide) * _SEEDS[:, None]).ravel()
        even = np.linspace(0.0, length, int(np.ceil(length / _SPACING)) + 1)
        fresh = np.concatenate([around, hints])
        fresh = np.unique(np.concatenate([fresh[(fresh > 0.0) & (fresh < length)], even[1:-1]]))
        apart = np.diff(np.floor(fresh / (_FINEST * radius)), prepend=-1.0) > 0.0
        fresh = np.concatenate([even[:1], fresh[apart], even[-1:]])
        place, values = fresh[:0], fresh[:0]
        flags: tuple[str, ...] = ()
        for _ in range(_ROUNDS):
            found = track_magnification(
                self.stars, self.start, self.end, radius,
                positions=fresh / length, accuracy=tolerance, threads=1,
            )  # fmt: skip
            self.evaluations += found.evaluations
            flags += found.flags
            order = np.argsort(np.concatenate([place, fresh]), kind="stable")
            place = np.concatenate([place, fresh])[order]
            values = np.concatenate([values, found.magnification])[order]
            rest = values - _fold_light(self.crossings, radius, place)
            fresh = _between(place, rest, _SHARE * tolerance * values, _FINEST * radius)
            if len(fresh) <= _FEW * len(place):
                break
        self.flags += [f"radius {radius:g}: {flag}" for flag in dict.fromkeys(flags)]
        kept = _bends(place, rest, _SHARE * tolerance * values)
        return place[kept], rest[kept]


def _fold_light(crossings: Crossings, radius: float, place: Array, limb_darkening: float = 0.0) -> Array:
    """Magnification (n,) by all folds of a track, each straight and of one strength throughout."""
    value, table = np.zeros(len(place)), fold_table()
    cosine = np.where(crossings.entering, 1.0, -1.0) * np.cos(crossings.angle)
    for first in range(0, len(place), _CHUNK):
        part = place[first : first + _CHUNK]
        distance = cosine[:, None] * (part - crossings.place[:, None]) / radius
        # No matrix product: its last digits differ from machine to machine.
        value[first : first + _CHUNK] = (crossings.strength[:, None] * table.profile(distance, limb_darkening)).sum(
            axis=0
        )
    return np.asarray(value / np.sqrt(radius))


def _between(place: Array, value: Array, tolerance: Array, least: float) -> Array:
    """Places between those at which straight lines seem to miss the curve by more than the tolerance."""
    step = np.diff(place)
    second = np.abs(np.diff(np.diff(value) / step)) / (0.5 * (step[1:] + step[:-1]))
    bend = np.maximum(np.append(second, 0.0), np.insert(second, 0, 0.0))
    pieces = np.ceil(np.sqrt(bend * step**2 / 8.0 / np.minimum(tolerance[1:], tolerance[:-1])))
    pieces = np.minimum(np.minimum(pieces, _PIECES), np.maximum(np.floor(step / least), 1.0)).astype(np.int64)
    which = np.repeat(np.arange(len(step)), pieces - 1)
    number = np.arange(len(which)) - np.repeat(np.cumsum(pieces - 1) - (pieces - 1), pieces - 1) + 1
    return np.asarray(place[which] + step[which] * number / pieces[which])


def _bends(place: Array, value: Array, tolerance: Array) -> NDArray[np.int64]:
    """Indices of points such that straight lines between them meet all others within the tolerance."""
    keep = np.zeros(len(place), dtype=np.bool_)
    keep[[0, -1]] = True
    while True:
        held = np.flatnonzero(keep)
        miss = np.abs(np.interp(place, place[held], value[held]) - value) / tolerance
        miss[held] = 0.0
        worst = np.maximum.reduceat(miss, held[:-1])
        if worst.max() <= 1.0:
            return held
        own = np.repeat(worst, np.diff(held))
        keep[:-1] |= (miss[:-1] == own) & (own > 1.0)
