"""The macro lens at the event from maps of a lens model, its realisations, and the error of the position."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.macro.lens_map import LensMap, read_lens_map
from crossing.optics.macro.map_patch import MapPatch
from crossing.optics.macro.map_realisations import read_realisations
from crossing.optics.macro.state import STENCIL, LocalDraws, LocalState, central_state, local_draws
from crossing.optics.scales import LensScales, sample_scales

if TYPE_CHECKING:
    from crossing.event import Event, MacroRecord

__all__ = ["MapSolution", "map_solution"]

Array: TypeAlias = npt.NDArray[np.float64]

# Positions are drawn within so many standard deviations, for maps end somewhere.
_MOST_SIGMAS: Final = 4.0
_LEAST_PIXELS: Final = 8
# Step of the differences in pixels: splines through pixels are smooth on it.
_STEP_PIXELS: Final = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class MapSolution:
    """The lens at the event by one lens model with maps."""

    event: Event
    """The event, for its redshifts and cosmology."""
    record: MacroRecord
    """What the event file says."""
    lens_map: LensMap
    """The maps."""
    patch: MapPatch
    """Their interpolant around the event."""
    realisations: tuple[MapPatch, ...] = ()
    """Interpolants of further realisations of the model, of equal weight; draws come from them where there are any."""
    flags: tuple[str, ...] = ()
    """Keys of `crossing.optics.macro.solutions.FLAGS`."""

    @property
    def name(self) -> str | None:
        """Name of the lens model."""
        return self.record.name

    @property
    def certain(self) -> bool:
        """Whether all draws are the same."""
        redshifts = (self.event.lens_redshift, self.event.source_redshift)
        exact = all(value is None or value.is_exact for value in redshifts)
        return exact and not self.realisations and self.record.position_error is None

    @property
    def central(self) -> LocalState:
        """The lens by the model's own maps at the stated position."""
        return central_state(_at(self.patch, np.zeros(1), np.zeros(1), np.ones(1)))

    def draw(self, rng: np.random.Generator, size: int) -> tuple[Array, Array]:
        """Eigenvalues (lam_t, lam_r), each of shape (size,)."""
        draws = self.draw_local(rng, size)
        return draws.lam_t, draws.lam_r

    def draw_local(self, rng: np.random.Generator, size: int) -> LocalDraws:
        """Eigenvalues with gradient and direction, over realisations, positions and redshifts.

        Raises
        ------
        InputError
            If positions within their error lie off the map.
        """
        east, north = np.zeros(size), np.zeros(size)
        if self.record.position_error is not None:
            east, north = self.record.position_error * _within(rng, size)
        ratio = self._ratio(rng, size)
        patches = self.realisations or (self.patch,)
        which = rng.integers(len(patches), size=size) if len(patches) > 1 else np.zeros(size, dtype=np.intp)
        out = np.empty((len(LocalDraws._fields), size))
        for number in np.unique(which):
            these = which == number
            out[:, these] = _at(patches[number], east[these], north[these], ratio[these])
        lost = ~np.isfinite(out[0])
        if lost.any():
            raise InputError(
                f"`position_error` must keep the position on the map, got {self.record.position_error:g} arcsec, with "
                f"{lost.sum()} of {size} drawn positions off it; give a larger map or a smaller error"
            )
        return LocalDraws(*out)

    def _ratio(self, rng: np.random.Generator, size: int) -> Array:
        """D_ls/D_s of uncertain redshifts over that of the central ones."""
        lens, source = self.event.lens_redshift, self.event.source_redshift
        if lens is None or source is None or size == 0 or (lens.is_exact and source.is_exact):
            return np.ones(size)
        far, scales = sample_scales(lens, source, rng, size, self.event.cosmology), self.lens_map.scales
        return np.asarray(far.D_ls / far.D_s / (scales.D_ls / scales.D_s))


def _within(rng: np.random.Generator, size: int) -> Array:
    """Standard normal offsets, shape (2, size), none longer than some standard deviations."""
    # The squared length of a pair of normals is exponential: its quantile, cut at the end.
    share = rng.random(size) * -np.expm1(-(_MOST_SIGMAS**2) / 2)
    length, angle = np.sqrt(-2 * np.log1p(-share)), 2 * np.pi * rng.random(size)
    return np.stack([length * np.cos(angle), length * np.sin(angle)])


def _at(patch: MapPatch, east: Array, north: Array, ratio: Array) -> LocalDraws:
    step = _STEP_PIXELS * patch.frame.pixel_size
    places = step * np.array(STENCIL)
    fields = patch.at(east[:, None] + places[:, 0], north[:, None] + places[:, 1])
    return local_draws(
        ratio[:, None] * fields.kappa, ratio[:, None] * fields.gamma1, ratio[:, None] * fields.gamma2, step
    )


def map_solution(event: Event, record: MacroRecord) -> MapSolution:
    """The lens of an event by the maps of one lens model.

    Parameters
    ----------
    event : Event
        The event, for its redshifts and cosmology.
    record : MacroRecord
        With maps of one lens model, and the position.

    Returns
    -------
    MapSolution
        Central values and draws.

    Raises
    ------
    InputError
        If the redshifts are missing, a file is bad, or the position is not well inside the maps.
    """
    lens, source = event.lens_redshift, event.source_redshift
    if lens is None or source is None:
        raise InputError("must go with the redshifts of lens and source; add [lens] and [source]")
    if len(record.maps) != 1 or record.position is None:
        raise InputError("must hold the maps of one lens model and the position; read the event from its file")
    scales = LensScales(lens.central, source.central, event.cosmology)
    own = read_lens_map(record.maps[0], scales)
    several = list(read_realisations(record.maps[0], scales))
    return MapSolution(
        event=event,
        record=record,
        lens_map=own,
        patch=_patch(own, record),
        realisations=tuple(_patch(one, record) for one in several),
    )


def _patch(lens_map: LensMap, record: MacroRecord) -> MapPatch:
    position = record.position or lens_map.centre
    pixel = lens_map.frame_at(position).pixel_size
    reach = _MOST_SIGMAS * (record.position_error or 0.0) + _LEAST_PIXELS * pixel
    return lens_map.patch(position, reach)
