"""Ensembles of random tracks, computed once and kept: light curves at any stellar radius, for one macro lens."""

from __future__ import annotations

import secrets
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import FIRST_COMPLETED, ThreadPoolExecutor, wait
from dataclasses import dataclass, field, fields
from os import cpu_count
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError
from crossing.optics.local import LocalLens
from crossing.progress import track as progress_bar
from crossing.shooting.library.library_cell import TrackCell
from crossing.shooting.library.library_files import TrackLibrary
from crossing.shooting.library.library_track import LibraryTrack, compute_track
from crossing.shooting.tracks.track_curve import Crossings

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

__all__ = ["BETWEEN_RADII_ERROR", "EnsembleStatistics", "TrackEnsemble", "TrackWindows", "load_tracks"]

Array = NDArray[np.float64]

BETWEEN_RADII_ERROR: Final = (
    {"radius": 10**-3.75, "rms": 0.005, "most": 0.002},
    {"radius": 10**-3.25, "rms": 0.006, "most": 0.005},
    {"radius": 10**-2.75, "rms": 0.01, "most": 0.025},
    {"radius": 10**-2.25, "rms": 0.015, "most": 0.06},
)
"""Relative error of curves half way between the radii of a library of two a decade: rms over tracks, and what 99% of
their length stay below, measured at a mean magnification of 833, both sides; smaller discs are better still. At cusps,
and where only the rim of the disc meets a caustic, it can be 0.3. With four radii a decade it is half as large."""


@dataclass(frozen=True, slots=True, kw_only=True)
class EnsembleStatistics:
    """What the tracks of an ensemble are like in the mean."""

    tracks: int
    """Number of tracks."""
    length: float
    """Length of all together [theta_E]."""
    radius: Array
    """(n_radius,) radii of the library [theta_E]."""
    mean_magnification: Array
    """(n_radius,) mean over all tracks."""
    mean_error: Array
    """(n_radius,) its standard error, from the scatter between tracks; NaN for a single one."""
    highest: Array
    """(n_radius,) highest magnification."""
    expected_mean: float | None
    """Mean by the macro lens; None with a gradient."""
    crossings_per_einstein: float
    """Folds that a track meets in one theta_E."""
    flagged: int
    """Tracks that are flagged."""

    def to_dict(self) -> dict[str, Any]:
        """Everything, as plain numbers and lists."""
        told = {one.name: getattr(self, one.name) for one in fields(self)}
        return {name: value.tolist() if isinstance(value, np.ndarray) else value for name, value in told.items()}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrackWindows:
    """Random pieces of tracks, each with a stellar radius of its own."""

    ensemble: TrackEnsemble = field(repr=False)
    """Where they come from."""
    track: NDArray[np.int64]
    """(n,) number of the track."""
    offset: Array
    """(n,) where on it the window begins [theta_E]."""
    radius: Array
    """(n,) radius of the star [theta_E]."""

    def __len__(self) -> int:
        return len(self.track)

    def magnification(self, steps: ArrayLike, limb_darkening: float = 0.0) -> Array:
        """Magnification in each window.

        Parameters
        ----------
        steps : array_like, shape (m,) or (n, m)
            Distances from the begin of the window [theta_E], the same for all or for each its own.
        limb_darkening : float
            Coefficient of the linear law.

        Returns
        -------
        ndarray, shape (n, m)
            Magnifications.

        Raises
        ------
        InputError
            If a window would leave its track.
        """
        place = self.offset[:, None] + np.atleast_2d(np.asarray(steps, dtype=np.float64))
        length = self.ensemble.cell.length
        if place.size and not -1e-9 * length <= place.min() <= place.max() <= length * (1.0 + 1e-9):
            raise InputError(
                f"`steps` must keep windows on their tracks of {length:g} Einstein radii, got places from "
                f"{place.min():.4g} to {place.max():.4g}; draw them with a larger span"
            )
        tracks = self.ensemble.tracks
        rows = [
            tracks[number].at(float(radius), one, limb_darkening)
            for number, radius, one in zip(self.track, self.radius, place, strict=True)
        ]
        return np.array(rows).reshape(place.shape)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrackEnsemble:
    """Random tracks over random star fields of one cell."""

    cell: TrackCell
    """What they have in common."""
    tracks: tuple[LibraryTrack, ...] = field(repr=False)
    """The tracks, by their numbers."""
    computed: int = 0
    """How many of them were computed for this call; the others came from the library."""
    notes: tuple[str, ...] = ()
    """What was amiss with the library: damaged files, no place to write; a line each."""

    def __len__(self) -> int:
        return len(self.tracks)

    @property
    def flags(self) -> tuple[str, ...]:
        """What is wrong with tracks; empty if all is well."""
        return tuple(f"track {one.index}: {flag}" for one in self.tracks for flag in one.flags)

    @property
    def status(self) -> str:
        """``ok``, or ``flagged``."""
        return "flagged" if self.flags else "ok"

    def magnification(self, radius: float, track: int, limb_darkening: float = 0.0) -> tuple[Array, Array]:
        """Curve of a disc on one track.

        Parameters
        ----------
        radius : float
            Radius of the disc [theta_E], within the range of the library.
        track : int
            Number of the track.
        limb_darkening : float
            Coefficient of the linear law.

        Returns
        -------
        place, magnification : ndarray, shape (n,)
            Distances from the start of the track [theta_E], and magnifications there, close enough for straight lines.

        Raises
        ------
        InputError
            If the radius is out of range.
        """
        return self.tracks[track].curve(radius, limb_darkening)

    def sample(self, rng: np.random.Generator, radius: ArrayLike, n: int, span: float = 0.0) -> TrackWindows:
        """Draw random windows, uniform over tracks and places.

        Parameters
        ----------
        rng : numpy.random.Generator
            Source of the draws.
        radius : float or array_like, shape (n,)
            Radius of the star, for all windows or for each its own [theta_E].
        n : int
            How many.
        span : float
            Length of a window [theta_E]: it stays on its track.

        Raises
        ------
        InputError
            If the windows are longer than the tracks, or there are no tracks.
        """
        length = self.cell.length
        if not 0.0 <= span <= length:
            raise InputError(
                f"`span` must be between 0 and the tracks' {length:g} Einstein radii, got {span:g}; make a cell of "
                "longer tracks"
            )
        if not self.tracks:
            raise InputError("`sample` needs at least one track; load some")
        return TrackWindows(
            ensemble=self,
            track=rng.integers(0, len(self.tracks), n),
            offset=rng.uniform(0.0, length - span, n),
            radius=np.broadcast_to(np.asarray(radius, dtype=np.float64), (n,)).copy(),
        )

    @property
    def crossings(self) -> Crossings:
        """Folds of all tracks, one track after the other; see `crossing_track`."""
        found = [one.crossings for one in self.tracks]
        return Crossings(
            **{
            one.name: np.concatenate([getattr(part, one.name) for part in found] or [np.empty(0)])
            for one in fields(Crossings)
        })  # fmt: skip

    @property
    def crossing_track(self) -> NDArray[np.int64]:
        """(n,) place in `tracks` of the track to which each of the `crossings` belongs."""
        return np.repeat(np.arange(len(self.tracks)), [len(one.crossings) for one in self.tracks]).astype(np.int64)

    @property
    def statistics(self) -> EnsembleStatistics:
        """Means over the ensemble, at the library's own radii."""
        radii, length = np.array(self.cell.radii), self.cell.length
        means = np.full((len(self.tracks), len(radii)), np.nan)
        highest = np.full(len(radii), -np.inf)
        for row, track in enumerate(self.tracks):
            for column, radius in enumerate(radii):
                place, values = track.curve(float(radius))
                means[row, column] = np.trapezoid(values, place) / length
                highest[column] = max(highest[column], values.max())
        count = len(self.tracks)
        scatter = means.std(axis=0, ddof=1) / np.sqrt(count) if count > 1 else np.full(len(radii), np.nan)
        lens = LocalLens(self.cell.kappa, self.cell.gamma)
        return EnsembleStatistics(
            tracks=count,
            length=count * length,
            radius=radii,
            mean_magnification=means.mean(axis=0) if count else means.sum(axis=0) * np.nan,
            mean_error=scatter,
            highest=highest,
            expected_mean=lens.magnification if self.cell.gradient is None else None,
            crossings_per_einstein=len(self.crossing_track) / max(count * length, 1e-300),
            flagged=sum(bool(track.flags) for track in self.tracks),
        )

    def to_dict(self) -> dict[str, Any]:
        """Cell, statistics and what was amiss, JSON-able; not the curves."""
        return {
            "key": self.cell.key,
            "cell": self.cell.words,
            "parameters": self.cell.parameters,
            "computed": self.computed,
            "statistics": self.statistics.to_dict(),
            "between_radii_error": [dict(row) for row in BETWEEN_RADII_ERROR],
            "status": self.status,
            "flags": list(self.flags),
            "notes": list(self.notes),
        }

    def to_table(self) -> QTable:
        """One row a track: number, ends, folds met, points kept and flags."""
        from astropy.table import QTable

        columns: dict[str, list[Any]] = {
            "track": [one.index for one in self.tracks],
            "start": [one.start for one in self.tracks],
            "end": [one.end for one in self.tracks],
            "crossings": [len(one.crossings) for one in self.tracks],
            "points": [len(one.place) for one in self.tracks],
            "evaluations": [one.evaluations for one in self.tracks],
            "flags": ["; ".join(one.flags) for one in self.tracks],
        }
        return QTable(columns, meta={"key": self.cell.key, "cell": self.cell.words})

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw how much of the tracks lies above a magnification, for a few radii."""
        from crossing.shooting.library.library_figure import draw_ensemble

        return draw_ensemble(self, ax)


def load_tracks(
    cell: TrackCell,
    count: int,
    *,
    progress: Callable[[int, int], None] | None = None,
    threads: int | None = None,
    library: TrackLibrary | None = None,
    say: Callable[[str], None] | None = None,
) -> TrackEnsemble:
    """Tracks of a cell out of the library; those that are missing are computed and kept.

    Parameters
    ----------
    cell : TrackCell
        What the tracks have in common.
    count : int
        How many: those numbered 0 to ``count - 1``. The same cell and count give the same tracks, wherever they were
        computed.
    progress : callable, optional
        Called as ``progress(done, count)`` after each track; a bar on a terminal if None.
    threads : int, optional
        Tracks that are computed side by side; all cores if None.
    library : TrackLibrary, optional
        Where tracks are kept; the user's own if None.
    say : callable, optional
        Called with each of the notes, as soon as there is something to tell.

    Returns
    -------
    TrackEnsemble
        The tracks.

    Raises
    ------
    InputError
        If `count` is negative, the disk is full, or a field cannot be drawn. Tracks that are complete by then are kept.

    Notes
    -----
    Each track is a file that is written whole, as soon as it is complete: an interrupted call, or a killed one, loses
    the tracks in work and no more. Two processes may fill a cell at once; when one of them notices, it goes on
    elsewhere in the list.
    """
    if count < 0:
        raise InputError(f"`count` must be zero or positive, got {count}; say how many tracks")
    filler = _Filler(cell, library if library is not None else TrackLibrary(), say)
    found = filler.run(count, threads or cpu_count() or 1, progress)
    return TrackEnsemble(
        cell=cell,
        tracks=tuple(found[index] for index in range(count)),
        computed=filler.computed,
        notes=tuple(filler.notes),
    )


class _Filler:
    """Fills one cell."""

    def __init__(self, cell: TrackCell, library: TrackLibrary, say: Callable[[str], None] | None) -> None:
        self.cell, self.library, self._say = cell, library, say
        self.notes: list[str] = []
        self.computed = 0
        self._todo: list[int] = []
        self._lock = threading.Lock()

    def run(self, count: int, threads: int, progress: Callable[[int, int], None] | None) -> dict[int, LibraryTrack]:
        """All tracks up to a count, by their numbers."""
        found = {index: track for index in range(count) if (track := self._load(index)) is not None}
        self._todo = [index for index in range(count) if index not in found]
        if not self._todo:
            return found
        self.library.prepare(self.cell)
        self._tell_fallback()
        finished = self._work(len(self._todo), threads)
        for track in finished if progress is not None else progress_bar(finished, "tracks", len(self._todo)):
            found[track.index] = track
            if progress is not None:
                progress(len(found), count)
        return found

    def _work(self, number: int, threads: int) -> Iterator[LibraryTrack]:
        """Tracks as they are finished. What has been begun is finished and kept when something fails."""
        with ThreadPoolExecutor(max(1, min(threads, number))) as pool:
            waiting = {pool.submit(self._next) for _ in range(number)}
            try:
                while waiting:
                    done, waiting = wait(waiting, return_when=FIRST_COMPLETED)
                    for one in done:
                        yield one.result()
            finally:
                for one in waiting:
                    one.cancel()

    def _next(self) -> LibraryTrack:
        """Compute the next track of the list, unless somebody else has done so meanwhile."""
        with self._lock:
            index = self._todo.pop(0)
        if self.library.has(self.cell, index) and (ready := self._load(index)) is not None:
            return ready
        track = compute_track(self.cell, index)
        new = self.library.keep(self.cell, track)
        with self._lock:
            self.computed += 1
            if not new and self._todo:
                # Another process is at the same place of the list.
                turn = secrets.randbelow(len(self._todo))
                self._todo = self._todo[turn:] + self._todo[:turn]
        self._tell_fallback()
        return track

    def _load(self, index: int) -> LibraryTrack | None:
        try:
            return self.library.load(self.cell, index)
        except InputError as error:
            self._note(f"{error}; it is computed anew")
            return None

    def _tell_fallback(self) -> None:
        if self.library.fallback is not None:
            self._note(self.library.fallback)

    def _note(self, text: str) -> None:
        with self._lock:
            if text in self.notes:
                return
            self.notes.append(text)
        if self._say is not None:
            self._say(text)
