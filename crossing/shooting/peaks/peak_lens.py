"""Macro lenses, stars and directions for a forecast of peaks: what one event file leaves open, drawn."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from crossing.optics.local import FoldGeometry, LocalLens, local_lenses, sample_eigenvalues
from crossing.optics.macro.solutions import resolve
from crossing.shooting.from_event import local_setup

if TYPE_CHECKING:
    from crossing.event import Event
    from crossing.stars.intracluster import StellarConvergence
    from crossing.stars.mass_functions import Population

__all__ = ["LensDraw", "MacroChoice", "macro_choices", "typical_mass"]

Array = NDArray[np.float64]

_POOL: Final = 4096
# Fields of constant lam_t grow as 1/|lam_t|; closer to zero than this share of kappa_star the network looks the same.
_SMALLEST_SHARE: Final = 0.1
_SMALLEST: Final = 1e-4
# Distance to the macro caustic [theta_E] beyond which the images of a pair have a field each: all that their tracks
# meet is so close to each image that lam_t changes there by 5% at most, and a common field would be huge.
_APART: Final = 60.0
_LEAST_DENSITY: Final = 0.05
_ALL_STARS: Final = 0.999
_ROUNDING: Final = 1e-12
_LENS_KEY, _FIELD_KEY = 0, 1


class LensDraw(NamedTuple):
    """One possible lens, with the direction of motion and the seed of its star field."""

    lens: LocalLens
    """Macro lens of the field; a gradient only where both images of a pair are meant."""
    lam_t: float
    """Eigenvalue along the stretch as it was drawn, closer to zero than that of the field may be."""
    populations: tuple[Population, ...]
    """Point masses."""
    angle: float
    """Direction of the motion from the u axis [rad]."""
    seed: np.random.SeedSequence
    """Seed of the star field."""
    images: int = 1
    """Macro images that this one stands for: 2 where it is one of a pair far from the macro caustic."""

    @property
    def mirror(self) -> float:
        """Mean magnification of the macro image that is not in the field."""
        return self.lens.magnification if self.images == 2 else 0.0

    @property
    def clipped(self) -> bool:
        """Whether |lam_t| was smaller than that of a field of constant lam_t can be."""
        return abs(abs(self.lens.lam_t) - abs(self.lam_t)) > _ROUNDING

    @property
    def kappa_star(self) -> float:
        """Convergence in all point masses."""
        return sum(part.kappa_star for part in self.populations)


@dataclass(frozen=True, slots=True, kw_only=True)
class MacroChoice:
    """One macro model of an event, by its central values; and draws of all that is uncertain."""

    event: Event
    """The event."""
    index: int
    """Index in ``event.macro``."""
    name: str
    """Name of the macro model."""
    weight: float
    """Its weight; those of an event sum to 1."""
    lens: LocalLens
    """Macro lens; a gradient only where both images of a pair are meant."""
    fold: FoldGeometry | None
    """The smooth fold, where the gradient is known."""
    populations: tuple[Population, ...]
    """Point masses; empty where the file has none."""
    densities: tuple[StellarConvergence, ...]
    """Their convergences with errors, in the same order."""

    @property
    def kappa_star(self) -> float:
        """Convergence in all point masses."""
        return sum(part.kappa_star for part in self.populations)

    @property
    def certain(self) -> bool:
        """Whether all draws have the same eigenvalues and stars."""
        exact = all(density.is_exact for density in self.densities)
        return exact and resolve(self.event)[self.index].certain

    def draws(self, count: int, seed: int) -> tuple[LensDraw, ...]:
        """Possible lenses, spread evenly over what is uncertain.

        Parameters
        ----------
        count : int
            Number of draws; fewer are the first ones of more.
        seed : int
            Seed.

        Returns
        -------
        tuple of LensDraw
            Of equal weight.

        Notes
        -----
        The spread is carried in lam_t: the draws are ordered by it and picked by a scrambled Halton sequence, whose
        other axes are the direction, the side for pairs far from the macro caustic, and the densities.
        """
        from scipy.stats import qmc

        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(_LENS_KEY, self.index)))
        alone = replace(self.event, macro=(self.event.macro[self.index],))
        pool = sample_eigenvalues(alone, rng, _POOL)
        order = np.argsort(pool.lam_t, kind="stable")
        points = qmc.Halton(3 + len(self.populations), scramble=True, rng=rng).random(count)
        picked = order[np.minimum((points[:, 0] * _POOL).astype(np.intp), _POOL - 1)]
        angles = self._angles(points[:, 1])
        out = []
        for number, (which, angle) in enumerate(zip(picked, angles, strict=True)):
            lam_t = float(pool.lam_t[which])
            lens, images = self._lens(lam_t, float(pool.lam_r[which]), 1.0 if points[number, 2] < 0.5 else -1.0)
            root = np.random.SeedSequence(seed, spawn_key=(_FIELD_KEY, self.index, number))
            stars = self._stars(points[number, 3:], lens.kappa)
            out.append(LensDraw(lens, lam_t, stars, float(angle), root, images))
        return tuple(out)

    def _angles(self, share: Array) -> Array:
        angle = self.event.motion.angle if self.event.motion is not None else None
        return 2.0 * np.pi * share if angle is None else np.radians(angle.quantile(share))

    def _lens(self, lam_t: float, lam_r: float, side: float) -> tuple[LocalLens, int]:
        """Lens of the field, and the images that it stands for; `side` is taken where there are two."""
        gradient = self.lens.gradient
        if isinstance(gradient, tuple):
            if lam_t**2 < 2.0 * abs(gradient[0]) * _APART:
                return LocalLens.from_eigenvalues(lam_t, lam_r, gradient), 1
            return LocalLens.from_eigenvalues(side * abs(lam_t), lam_r), 2
        floor = max(_SMALLEST, _SMALLEST_SHARE * self.kappa_star)
        if abs(lam_t) < floor:
            lam_t = float(np.copysign(floor, lam_t if lam_t != 0.0 else side))
        return LocalLens.from_eigenvalues(lam_t, lam_r), 1

    def _stars(self, shares: Array, kappa: float) -> tuple[Population, ...]:
        found = []
        for part, density, share in zip(self.populations, self.densities, shares, strict=True):
            ratio = float(density.quantile(share)) / density.central
            found.append(replace(part, kappa_star=part.kappa_star * max(ratio, _LEAST_DENSITY)))
        total = sum(part.kappa_star for part in found)
        if total > _ALL_STARS * kappa and total > self.kappa_star:
            shrink = max(_ALL_STARS * kappa, self.kappa_star) / total
            found = [replace(part, kappa_star=part.kappa_star * shrink) for part in found]
        return tuple(found)


def macro_choices(event: Event) -> tuple[MacroChoice, ...]:
    """All macro models of an event.

    Parameters
    ----------
    event : Event
        The event, with a macro lens; without microlenses only smooth laws can be used.

    Raises
    ------
    InputError
        If a record cannot be turned into a lens, or the populations do not fit into it.
    """
    out = []
    for index, model in enumerate(local_lenses(event)):
        setup = local_setup(event, model=index) if event.microlenses else None
        lens = LocalLens(model.lens.kappa, model.lens.gamma) if setup is None else setup.lens
        out.append(
            MacroChoice(
                event=event,
                index=index,
                name=event.macro[index].name or f"model {index}",
                weight=model.weight,
                lens=lens,
                fold=model.fold,
                populations=() if setup is None else setup.populations,
                densities=() if setup is None else setup.densities,
            )
        )
    return tuple(out)


def typical_mass(populations: tuple[Population, ...]) -> float:
    """Mass [Msun] whose m**(1/4) is the mean over crossings of single stars' caustics.

    Parameters
    ----------
    populations : tuple of Population
        Point masses, at least one.

    Notes
    -----
    A star's caustic is as wide as sqrt(m), and its fold strength goes as m**(1/4).
    """
    width = sum(part.density * part.mass_function.moment(0.5) for part in populations)
    strength = sum(part.density * part.mass_function.moment(0.75) for part in populations)
    return float((strength / width) ** 4)
