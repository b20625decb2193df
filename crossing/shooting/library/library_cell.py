"""What a library of tracks is made for: one macro lens with its stars, one kind of track."""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass, fields
from math import cos, inf, isfinite, pi, radians, sin
from typing import Any, Final

import numpy as np

from crossing.errors import InputError
from crossing.optics.local import LocalLens
from crossing.shooting.field import StarField
from crossing.shooting.from_event import LocalSetup
from crossing.stars.mass_functions import Population
from crossing.stars.mass_pieces import MassPiece

__all__ = ["FORMAT_VERSION", "NUMERICAL_VERSION", "RADII", "TrackCell"]

FORMAT_VERSION: Final = 1
"""Version of the files' layout."""
NUMERICAL_VERSION: Final = 1
"""To be raised whenever the same seed gives another curve, beyond the accuracy that was asked for."""
RADII: Final = tuple(float(f"{10.0**power:.6g}") for power in np.arange(-6.0, -1.9, 0.5))
"""Stellar radii of a library, two a decade [theta_E of one solar mass]."""

_LONGEST: Final = 200.0
_PURPOSE: Final = 71
# Fields serve the track's ends and the largest disc with a little to spare.
_SPARE: Final = 1.1


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackCell:
    """Everything that the tracks of one ensemble have in common.

    Raises
    ------
    InputError
        If a number is out of its range, or the populations hold more than the convergence.
    """

    kappa: float
    """Total convergence."""
    gamma: float
    """Shear."""
    populations: tuple[Population, ...]
    """Point masses."""
    gradient: tuple[float, float] | None = None
    """Change of lam_t per unit x and y [1/theta_E]; with it both images of a merging pair are in the field."""
    direction: float | None = None
    """Angle between the tracks and the u axis [rad]; None draws it anew for each track, isotropic."""
    length: float = 2.0
    """Length of each track [theta_E of one solar mass]."""
    middle: tuple[float, float] = (0.0, 0.0)
    """Point (u, v) about which the middles of the tracks lie."""
    scatter: tuple[float, float] = (0.0, 0.0)
    """Half sizes of the rectangle in which the middles lie; each track has its field, so only gradients need it."""
    accuracy: float = 2e-3
    """Relative accuracy of the curves at the library's own radii."""
    radii: tuple[float, ...] = RADII
    """(n_radius,) stellar radii, rising [theta_E]."""
    seed: int = 0
    """Root of the tracks' seeds."""

    def __post_init__(self) -> None:
        LocalLens(self.kappa, self.gamma, self.gradient)
        total = sum(part.kappa_star for part in self.populations)
        if not 0.0 < total <= self.kappa * (1.0 + 1e-9):
            raise InputError(
                f"`populations` must hold between 0 and kappa = {self.kappa:.4g} in sum, got {total:.4g}; change them"
            )
        if not 0.0 < self.length <= _LONGEST:
            raise InputError(f"`length` must be positive and at most {_LONGEST:g}, got {self.length:g}; shorten it")
        if self.direction is not None and not isfinite(self.direction):
            raise InputError(f"`direction` must be finite, got {self.direction:g}; give radians, or None")
        if not np.isfinite(self.middle + self.scatter).all() or min(self.scatter) < 0.0:
            raise InputError("`middle` must be finite and `scatter` zero or positive; give two numbers each")
        if not 1e-6 <= self.accuracy <= 0.1:
            raise InputError(f"`accuracy` must be between 1e-6 and 0.1, got {self.accuracy:g}; 0.002 is the default")
        low, high = self.radii[:1], self.radii[-1:]
        if not low or not 0.0 < low[0] <= high[0] < inf or (np.diff(self.radii) <= 0.0).any():
            raise InputError(f"`radii` must be positive and rising, got {self.radii}; sort them")
        if self.seed < 0:
            raise InputError(f"`seed` must be zero or positive, got {self.seed}; give a whole number")

    @classmethod
    def from_setup(cls, setup: LocalSetup, **options: Any) -> TrackCell:
        """Cell of an event.

        Parameters
        ----------
        setup : LocalSetup
            The event with its macro lens and populations.
        **options
            Other fields of the cell, such as `length` or `accuracy`.

        Notes
        -----
        The direction is that of ``motion.angle``, by its central value, or isotropic where the file does not say.
        """
        lens, motion = setup.lens, setup.event.motion
        angle = None if motion is None or motion.angle is None else radians(motion.angle.central)
        gradient = lens.gradient if isinstance(lens.gradient, tuple) else None
        told = {"direction": angle, "gradient": gradient, "populations": setup.populations, **options}
        return cls(kappa=lens.kappa, gamma=lens.gamma, **told)

    @property
    def kappa_star(self) -> float:
        """Convergence in all point masses."""
        return sum(part.kappa_star for part in self.populations)

    @property
    def parameters(self) -> dict[str, Any]:
        """Everything that the tracks depend on, as plain numbers, lists and texts."""
        populations = [
            {
                "kappa_star": float(part.kappa_star),
                "name": part.mass_function.name,
                "pieces": [_numbers(piece) for piece in part.mass_function.pieces],
            }
            for part in self.populations
        ]
        return {
            "kappa": float(self.kappa),
            "gamma": float(self.gamma),
            "populations": populations,
            "gradient": None if self.gradient is None else [float(one) for one in self.gradient],
            "direction": None if self.direction is None else float(self.direction),
            "length": float(self.length),
            "middle": [float(one) for one in self.middle],
            "scatter": [float(one) for one in self.scatter],
            "accuracy": float(self.accuracy),
            "radii": [float(one) for one in self.radii],
            "seed": int(self.seed),
        }

    @property
    def key(self) -> str:
        """Name of the cell: a digest of its parameters and of both versions."""
        versions = {"format": FORMAT_VERSION, "numerics": NUMERICAL_VERSION}
        text = json.dumps(self.parameters | versions, sort_keys=True, separators=(",", ":"), allow_nan=False)
        return hashlib.sha256(text.encode()).hexdigest()[:20]

    @property
    def words(self) -> str:
        """The parameters in a line of text."""
        lens = f"kappa {self.kappa:.6g}, gamma {self.gamma:.6g}"
        stars = "; ".join(f"kappa_star {part.kappa_star:.4g} ({part.mass_function})" for part in self.populations)
        slope = "" if self.gradient is None else f", gradient ({self.gradient[0]:.3g}, {self.gradient[1]:.3g})"
        way = "any direction" if self.direction is None else f"direction {np.degrees(self.direction):.4g} deg"
        return f"{lens}{slope}; {stars}; length {self.length:g}, {way}, accuracy {self.accuracy:g}"

    def place(self, index: int) -> tuple[StarField, tuple[float, float], tuple[float, float]]:
        """Star field, first and last point of a track.

        Parameters
        ----------
        index : int
            Number of the track, from 0. The same number gives the same field and track, always.

        Raises
        ------
        InputError
            If the field would not fit into memory, or lies on the critical curve.
        """
        rng = np.random.default_rng(np.random.SeedSequence(self.seed, spawn_key=(_PURPOSE, index, 0)))
        shift = rng.uniform(-1.0, 1.0, 2) * self.scatter
        drawn = rng.uniform(-pi, pi)
        angle = drawn if self.direction is None else self.direction
        middle, along = np.array(self.middle) + shift, np.array([cos(angle), sin(angle)])
        start, end = middle - 0.5 * self.length * along, middle + 0.5 * self.length * along
        window = np.maximum(np.abs(start), np.abs(end)) + _SPARE * self.radii[-1]
        stars = StarField.draw(
            self.kappa,
            self.gamma,
            None,
            (float(window[0]), float(window[1])),
            populations=self.populations,
            gradient=self.gradient,
            seed=np.random.SeedSequence(self.seed, spawn_key=(_PURPOSE, index, 1)),
        )
        return stars, (float(start[0]), float(start[1])), (float(end[0]), float(end[1]))


def _numbers(piece: MassPiece) -> dict[str, Any]:
    """Shape of a piece of a mass function, and every number in it: more than its own description holds."""
    told: Any = piece
    return {"shape": type(told).__name__} | {one.name: float(getattr(told, one.name)) for one in fields(told)}
