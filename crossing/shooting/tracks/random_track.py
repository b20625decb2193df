"""Random tracks of an event's star: its own motion and star field, placed at random or on a fold that it meets."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from crossing.errors import InputError
from crossing.event import Event, require
from crossing.optics.fold import profile_peak
from crossing.optics.motion import caustic_stretch, mean_normal_component, sample_effective_velocity
from crossing.optics.scales import LensScales
from crossing.progress import track as progress
from crossing.shooting.from_event import LocalSetup
from crossing.shooting.tracks.track import track_crossings, track_magnification

if TYPE_CHECKING:
    from crossing.shooting.caustics.network import CausticNetwork
    from crossing.shooting.field import StarField
    from crossing.shooting.maps.magnification_map import MagnificationMap

Point = tuple[float, float]

__all__ = ["RandomTrack", "TrackMotion", "draw_motion", "event_scales", "map_widths", "place_track", "surroundings"]

_DAYS_PER_YEAR: Final = 365.25
_POOL: Final = 10_000
_SCATTER: Final = 0.5
"""Half size of the square of the source plane in which the middles of tracks lie [theta_E]."""
SEARCH_LENGTH: Final = 4.0
"""Length of the tracks on which crossings are looked for [theta_E]."""
_MOST_FIELDS: Final = 8
_MOST_CHECKS: Final = 12
_CHECK_ACCURACY: Final = 0.01
# Places around a crossing where the disc's peak is looked for, in radii along the normal.
_AROUND: Final = np.linspace(-1.3, 1.3, 14)
_LONGEST: Final = 200.0
_MAP_ACCURACY: Final = 0.02
# A map near the track, in lengths of it, and a wide one, in sizes of the first and between limits [theta_E].
_NEAR, _FAR, _LEAST_FAR, _MOST_FAR = 1.6, 5.0, 0.6, 8.0


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackMotion:
    """How fast and in which direction a source moves."""

    speed: float
    """Effective speed in the source plane per observer time [km/s]."""
    direction: float
    """Angle from the u axis [rad]."""
    days_per_einstein: float
    """Days in which the source moves by one Einstein radius of one solar mass."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RandomTrack:
    """Where a source moves over which star field."""

    stars: StarField = field(repr=False)
    """The star field."""
    field_seed: int
    """Seed of the field."""
    start: tuple[float, float]
    """First point (u, v) of the track [theta_E]."""
    end: tuple[float, float]
    """Last point."""
    fields_tried: int = 1
    """How many fields were searched for a crossing, this one included."""
    found: bool = True
    """Whether the crossing in the middle peaks as high as was asked for; true where none was asked for."""


def event_scales(event: Event) -> LensScales:
    """Distances by the central redshifts of an event.

    Raises
    ------
    InputError
        If a redshift is missing.
    """
    require(event, "lens", "source", purpose="crossing track")
    if event.lens_redshift is None or event.source_redshift is None:
        raise InputError("must have the redshifts of lens and source; add them", source=event.path)
    return LensScales(event.lens_redshift.central, event.source_redshift.central, event.cosmology)


def draw_motion(setup: LocalSetup, rng: np.random.Generator, *, crossing: bool) -> TrackMotion:
    """Draw a motion from the event file.

    Parameters
    ----------
    setup : LocalSetup
        The event with its macro lens.
    rng : numpy.random.Generator
        Source of the draws.
    crossing : bool
        Draw from the motions of stars that cross a caustic: those that meet more caustics count for more.

    Raises
    ------
    InputError
        If the motion is not known, or is zero.

    Notes
    -----
    A speed meets caustics in proportion to itself, and a direction in proportion to the width of the caustics across
    it: that of an ellipse stretched along v, as in `crossing.optics.motion.sample_normal_speed`. Spreads of velocities
    come without the angle between north and the u axis, so their direction is random.
    """
    event = setup.event
    require(event, "motion", purpose="crossing track")
    scales = event_scales(event)
    motion = event.motion
    if motion is None:
        raise InputError("must be given; add it", source=event.path, where="motion")
    velocity = sample_effective_velocity(motion, scales, rng, _POOL)
    speed, direction = np.hypot(*velocity.T), np.arctan2(velocity[:, 1], velocity[:, 0])
    if motion.angle is None:
        direction = rng.uniform(-np.pi, np.pi, _POOL)
    if not speed.max() > 0.0:
        raise InputError("must not be zero for a track; give a positive speed", source=event.path, where="motion")
    weight = speed.copy() if crossing else (speed > 0.0).astype(np.float64)
    if crossing:
        stretch = caustic_stretch(mean_normal_component(setup.lens.lam_t, setup.lens.lam_r))
        weight *= np.hypot(np.sin(direction), stretch * np.cos(direction))
    pick = int(rng.choice(_POOL, p=weight / weight.sum()))
    return TrackMotion(
        speed=float(speed[pick]),
        direction=float(direction[pick]),
        days_per_einstein=scales.einstein_crossing_years(float(speed[pick])) * _DAYS_PER_YEAR,
    )


def place_track(
    setup: LocalSetup,
    motion: TrackMotion,
    length: float,
    rng: np.random.Generator,
    *,
    peak: float | None = None,
    radius: float = 1e-3,
    limb_darkening: float = 0.0,
) -> RandomTrack:
    """Draw a star field and put a track on it.

    Parameters
    ----------
    setup : LocalSetup
        The event with its macro lens and populations.
    motion : TrackMotion
        Direction of the track.
    length : float
        Its length [theta_E].
    rng : numpy.random.Generator
        Source of seeds and places.
    peak : float, optional
        If given, the middle of the track is put on a fold crossing, one out of those on a longer track at which the
        disc is magnified at least so much; zero takes any. If None, the place is random.
    radius, limb_darkening : float
        The disc, for `peak` [theta_E].

    Raises
    ------
    InputError
        If the track is too long, or the field would not fit into memory.

    Notes
    -----
    If no crossing of a field peaks high enough the next field is searched, up to 8 of them; if none does in any of
    them, the highest of all is taken and `RandomTrack.found` says so. Crossings whose closed form, background +
    J_peak K / sqrt(R), is high enough are looked at in a random order, until the disc's own light is so as well.
    """
    if not 0.0 < length <= _LONGEST:
        raise InputError(
            f"`length` of a track must be at most {_LONGEST:g} Einstein radii, got {length:.3g}; shorten the duration",
            source=setup.event.path,
        )
    along = np.array([np.cos(motion.direction), np.sin(motion.direction)])
    search = 0.0 if peak is None else max(SEARCH_LENGTH, length)
    half = 0.5 * np.maximum(np.abs(along) * (length + search), map_widths(length)[-1]) + _SCATTER
    window = (float(half[0]), float(half[1]))
    best: tuple[float, RandomTrack] | None = None
    tries = range(1 if peak is None else _MOST_FIELDS)
    for number in progress(tries, "star fields") if peak is not None else tries:
        seed = int(rng.integers(0, 2**63))
        middle = rng.uniform(-_SCATTER, _SCATTER, 2)
        stars = setup.draw(window, seed)
        height = 0.0
        if peak is not None:
            ends = _pair(middle - 0.5 * search * along), _pair(middle + 0.5 * search * along)
            chosen, height = _choose(stars, *ends, (radius, limb_darkening), peak, rng)
            middle = middle + (chosen - 0.5) * search * along
        placed = RandomTrack(
            stars=stars,
            field_seed=seed,
            start=_pair(middle - 0.5 * length * along),
            end=_pair(middle + 0.5 * length * along),
            fields_tried=number + 1,
            found=peak is None or (height > 0.0 and height >= peak),
        )
        if placed.found:
            return placed
        if best is None or height > best[0]:
            best = (height, placed)
    if best is None:
        raise InputError("`peak` needs at least one star field")
    return best[1]


def _choose(
    stars: StarField, start: Point, end: Point, disc: tuple[float, float], peak: float, rng: np.random.Generator
) -> tuple[float, float]:
    """Position and height of a crossing on a track at which the disc is magnified enough, else of the best one met."""
    met = track_crossings(stars, start, end)
    if len(met) == 0:
        return 0.5, 0.0
    heights = met.background + met.strength * profile_peak(disc[1]).height / np.sqrt(disc[0])
    if peak == 0.0:
        chosen = int(rng.integers(len(met)))
        return float(met.position[chosen]), float(heights[chosen])
    high = np.flatnonzero(heights >= peak)
    tries = rng.permutation(high)[:_MOST_CHECKS] if len(high) else [int(np.argmax(heights))]
    best = 0.5, 0.0
    for k in tries:
        # Beside a cusp or another fold the disc falls short of the closed form, or rises above it.
        step = disc[0] / max(float(np.cos(met.angle[k])), 0.1) / np.hypot(end[0] - start[0], end[1] - start[1])
        around = np.clip(met.position[k] + step * _AROUND, 0.0, 1.0)
        curve = track_magnification(stars, start, end, disc[0], around, disc[1], _CHECK_ACCURACY)
        height = float(np.max(curve.magnification))
        if height > best[1]:
            best = float(met.position[k]), height
        if height >= peak:
            break
    return best


def _pair(point: Any) -> tuple[float, float]:
    return float(point[0]), float(point[1])


def map_widths(length: float) -> tuple[float, ...]:
    """Sizes of the squares around a track that its field serves for maps, the last one the largest [theta_E].

    Parameters
    ----------
    length : float
        Length of the track [theta_E].
    """
    near = _NEAR * length
    far = max(near, min(max(_LEAST_FAR, _FAR * near), _MOST_FAR))
    return (near, far) if far > 2.0 * near else (near,)


def surroundings(
    track: RandomTrack,
    center: tuple[float, float],
    width: float,
    days_per_einstein: float | None = None,
    *,
    pixels: int = 300,
    threads: int | None = None,
) -> tuple[MagnificationMap, CausticNetwork]:
    """Map and caustics of a square around a point of a track.

    Parameters
    ----------
    track : RandomTrack
        The track with its field.
    center : (float, float)
        Middle of the square.
    width : float
        Its size [theta_E]; see `map_widths`.
    days_per_einstein : float, optional
        Days in which the source moves by one Einstein radius, for the bar of length.
    pixels : int
        Pixels a side.
    threads : int, optional
        Threads; all cores if None.
    """
    from crossing.shooting.caustics.network import trace_caustics
    from crossing.shooting.maps.mapping import magnification_map

    chart = magnification_map(track.stars, center, width, pixels, accuracy=_MAP_ACCURACY, threads=threads)
    return replace(chart, days_per_einstein=days_per_einstein), trace_caustics(track.stars, center, width)
