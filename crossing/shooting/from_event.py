"""Star fields out of event files: which macro lens, which populations, and what lengths mean in parsec and days."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from crossing.errors import InputError
from crossing.event import Event, require
from crossing.optics.local import LocalLens, LocalModel, local_lenses
from crossing.optics.motion import sample_effective_velocity
from crossing.optics.scales import LensScales
from crossing.shooting.field import StarField
from crossing.stars.intracluster import StellarConvergence, stellar_convergence
from crossing.stars.mass_functions import Population, from_record

if TYPE_CHECKING:
    from crossing.shooting.maps.magnification_map import MagnificationMap

__all__ = ["LocalSetup", "local_setup"]

_AU_PER_PARSEC: Final = 206264.80624709636
_DAYS_PER_YEAR: Final = 365.25
_SPEED_DRAWS: Final = 10_000
_ROUNDING: Final = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class LocalSetup:
    """What an event file says of the lens at its place, by central values, in Einstein radii of one solar mass."""

    event: Event
    """The event."""
    model: int
    """Index of the macro model in ``event.macro``."""
    name: str | None
    """Name of the macro model."""
    lens: LocalLens
    """The macro lens; its gradient is kept for a merging pair only."""
    gradient: tuple[float, float] | None
    """Change of lam_t per unit x and y, where it is known, whether it is kept or not [1/theta_E]."""
    populations: tuple[Population, ...]
    """Point masses."""
    densities: tuple[StellarConvergence, ...]
    """Their convergences with errors, in the same order."""
    parsec_per_einstein: float | None
    """Einstein radius in the source plane [pc], where redshifts are known."""
    days_per_einstein: float | None
    """Days in which the source moves by one Einstein radius at its median speed, where the motion is known."""

    @property
    def kappa_star(self) -> float:
        """Convergence in all point masses."""
        return sum(part.kappa_star for part in self.populations)

    def draw(self, window: tuple[float, float], seed: int) -> StarField:
        """Draw a star field that serves a window of the source plane about the origin.

        Parameters
        ----------
        window : (float, float)
            Half sizes of the window along u and v.
        seed : int
            Seed.

        Raises
        ------
        InputError
            If the field would not fit into memory, or lies on the critical curve.
        """
        lens = self.lens
        try:
            return StarField.draw(
                lens.kappa, lens.gamma, None, window, populations=self.populations, gradient=lens.gradient, seed=seed
            )
        except InputError as error:
            raise error.located(source=self.event.path) from None

    def macro_change(self, half_width: float, half_height: float) -> float | None:
        """Relative change of lam_t from the middle of a window to its corner, where the field leaves it out.

        Notes
        -----
        By the smooth lens: du = lam_t dx and dv = lam_r dy.
        """
        if self.gradient is None or self.lens.gradient is not None:
            return None
        along = abs(self.gradient[0]) * half_width / self.lens.lam_t**2
        across = abs(self.gradient[1]) * half_height / abs(self.lens.lam_t * self.lens.lam_r)
        return along + across

    def label(self, chart: MagnificationMap, options: dict[str, Any]) -> MagnificationMap:
        """Map with the event's scales and provenance.

        Parameters
        ----------
        chart : MagnificationMap
            Map of a field of this event.
        options : dict
            How it was asked for, for the provenance.
        """
        about = {
            "name": self.event.name,
            "macro_model": self.model,
            "macro_name": self.name,
            "macro_models": len(self.event.macro),
            "macro_change": self.macro_change(0.5 * chart.width, 0.5 * chart.height),
        }
        inputs = [{"path": str(self.event.path), "sha256": self.event.sha256}]
        return replace(
            chart,
            parsec_per_einstein=self.parsec_per_einstein,
            days_per_einstein=self.days_per_einstein,
            description={**chart.description, "event": about, "options": options, "inputs": inputs},
        )


def local_setup(event: Event, *, model: int | None = None, pair: bool | None = None) -> LocalSetup:
    """Lens, populations and scales of an event, by their central values.

    Parameters
    ----------
    event : Event
        The event, with a macro lens and microlenses.
    model : int, optional
        Index of one of several macro models; that of the largest weight if None.
    pair : bool, optional
        Keep the gradient, so that both images of a merging pair are in the field. If None, what the event file means:
        true with ``side = "pair"`` only.

    Raises
    ------
    InputError
        If something that is needed is missing, or the populations do not fit into the macro lens.
    """
    require(event, "macro", "microlenses", purpose="star fields")
    models = local_lenses(event)
    if model is None:
        model = max(range(len(models)), key=lambda index: models[index].weight)
    if not 0 <= model < len(models):
        raise InputError(
            f"must have the model that is asked for, 0 to {len(models) - 1}, got {model}",
            source=event.path,
            where="macro.models",
        )
    scales = _scales(event)
    lens, gradient = _macro_lens(event, model, models[model], pair)
    densities = _densities(event, scales)
    return LocalSetup(
        event=event,
        model=model,
        name=event.macro[model].name,
        lens=lens,
        gradient=gradient,
        populations=_populations(event, lens.kappa, densities),
        densities=densities,
        parsec_per_einstein=None if scales is None else scales.einstein_radius_source_au / _AU_PER_PARSEC,
        days_per_einstein=_days_per_einstein(event, scales),
    )


def _scales(event: Event) -> LensScales | None:
    if event.lens_redshift is None or event.source_redshift is None:
        return None
    return LensScales(event.lens_redshift.central, event.source_redshift.central, event.cosmology)


def _macro_lens(
    event: Event, index: int, model: LocalModel, pair: bool | None
) -> tuple[LocalLens, tuple[float, float] | None]:
    """Lens of the field, with the gradient for a pair and without it for one image; and the gradient by itself."""
    # A lens keeps its gradient as a pair of numbers.
    gradient = model.lens.gradient if isinstance(model.lens.gradient, tuple) else None
    if pair is None:
        pair = model.fold is not None and model.fold.images == 2
    if pair and (gradient is None or gradient[0] == 0.0):
        raise InputError(
            "must have a gradient along x, and redshifts to turn it into Einstein radii, for both images of a pair; "
            "add them, or map one image",
            source=event.path,
            where="macro" if len(event.macro) == 1 else f"macro.models[{index}]",
        )
    return LocalLens(model.lens.kappa, model.lens.gamma, gradient if pair else None), gradient


def _densities(event: Event, scales: LensScales | None) -> tuple[StellarConvergence, ...]:
    found = []
    for index, record in enumerate(event.microlenses):
        if record.kappa_star is None and scales is None:
            require(
                event, "lens", "source", purpose="surface_brightness" if record.band is not None else "surface_density"
            )
        try:
            found.append(stellar_convergence(record, scales, event.bands))
        except InputError as error:
            raise error.located(source=event.path, where=_place(event, index)) from None
    return tuple(found)


def _populations(event: Event, kappa: float, densities: tuple[StellarConvergence, ...]) -> tuple[Population, ...]:
    found = []
    for index, (record, density) in enumerate(zip(event.microlenses, densities, strict=True)):
        try:
            found.append(Population(density.central, from_record(record)))
        except InputError as error:
            raise error.located(source=event.path, where=_place(event, index)) from None
    total = sum(part.kappa_star for part in found)
    if total > kappa * (1.0 + _ROUNDING):
        raise InputError(
            f"must not hold more than the macro lens, kappa = {kappa:.4g}, got {total:.4g} in sum; lower the densities",
            source=event.path,
            where="microlenses",
        )
    return tuple(found)


def _place(event: Event, index: int) -> str:
    return "microlenses" if len(event.microlenses) == 1 else f"microlenses[{index}]"


def _days_per_einstein(event: Event, scales: LensScales | None) -> float | None:
    if event.motion is None or scales is None:
        return None
    velocity = sample_effective_velocity(event.motion, scales, np.random.default_rng(0), _SPEED_DRAWS)
    speed = float(np.median(np.hypot(*velocity.T)))
    return scales.einstein_crossing_years(speed) * _DAYS_PER_YEAR if speed > 0.0 else None
