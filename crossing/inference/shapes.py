"""Light-curve shapes: what a crossing looks like before it has a brightness.

Every model is a function of a few nonlinear parameters that gives the flux in units of its amplitude. For a fold the
unit is ``F0 K / sqrt(R)`` with F0 the unlensed flux, so that the shape is the fold profile J(d/R).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Protocol

import numpy as np

from crossing.optics.fold import profile_peak
from crossing.optics.fold_table import fold_table

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from crossing.inference.colours import Spectrum
    from crossing.inference.data import FitData
    from crossing.inference.priors import Range

__all__ = ["BinaryShape", "BumpShape", "FoldShape", "PairShape", "Shape"]
_FOLD_FEATURES = np.array([-1.2, -0.9, -0.6, -0.3, 0.0, 0.3, 0.6, 0.85, 1.0, 1.15, 1.5, 2.2, 3.5, 6.0, 12.0, 30.0])
_BUMP_FEATURES = np.array([-8.0, -3.0, -1.5, -0.7, 0.0, 0.7, 1.5, 3.0, 8.0])


class Shape(Protocol):
    """What the searches ask of a model."""

    @property
    def name(self) -> str:
        """Name of the model, as in the results."""

    @property
    def labels(self) -> tuple[str, ...]:
        """Discrete alternatives of the model, equally probable beforehand."""

    @property
    def ranges(self) -> tuple[Range, ...]:
        """Priors of the nonlinear parameters; the first two are a time and the logarithm of a duration."""

    def features(self, label: int) -> NDArray[np.float64]:
        """Where the shape bends, in durations after its time: the scan's first cells follow them."""

    def evaluate(self, theta: NDArray[np.float64], label: int) -> NDArray[np.float64]:
        """Shapes (m, n_all) at ``data.all_times`` for parameters (m, n_parameters)."""

    def curve(
        self, theta: NDArray[np.float64], label: int, time: NDArray[np.float64], band: int
    ) -> NDArray[np.float64]:
        """Shapes (m, n) at any times [d] in one band, for figures."""

    def peak(self, theta: NDArray[np.float64], label: NDArray[np.intp]) -> NDArray[np.float64]:
        """Times of highest flux [d] for parameters (m, n_parameters)."""

    def height(self, theta: NDArray[np.float64]) -> NDArray[np.float64]:
        """Highest value of the shape for parameters (m, n_parameters)."""

    def second(self, theta: NDArray[np.float64]) -> NDArray[np.float64] | None:
        """Time from the first crossing to the second [d], where the model has one."""


@dataclass(frozen=True, slots=True)
class _Timed:
    """Shared by all shapes: the data's times, bands and limb darkening, and the priors of the parameters."""

    data: FitData
    ranges: tuple[Range, ...]

    def evaluate(self, theta: NDArray[np.float64], label: int) -> NDArray[np.float64]:
        """Shapes (m, n_all) at ``data.all_times``."""
        return self.at(theta, label, self.data.all_times, self.data.all_bands)

    def curve(
        self, theta: NDArray[np.float64], label: int, time: NDArray[np.float64], band: int
    ) -> NDArray[np.float64]:
        """Shapes (m, n) at any times in one band."""
        return self.at(theta, label, time, np.full(time.size, band, dtype=np.intp))

    def at(
        self, theta: NDArray[np.float64], label: int, time: NDArray[np.float64], band: NDArray[np.intp]
    ) -> NDArray[np.float64]:
        """Shapes (m, n) at times [d] observed in the bands of the given indices."""
        raise NotImplementedError

    def features(self, label: int) -> NDArray[np.float64]:
        """Bends of a fold: onset, rise, peak, rim and the slow decline, mirrored where it is left."""
        return _FOLD_FEATURES if label == 0 else -_FOLD_FEATURES

    def second(self, theta: NDArray[np.float64]) -> NDArray[np.float64] | None:
        """No second crossing."""
        return None

    def height(self, theta: NDArray[np.float64]) -> NDArray[np.float64]:
        """Peak of the fold profile, for the bands' mean limb darkening."""
        return np.full(len(theta), profile_peak(float(np.mean(self.data.limb_darkening))).height)

    @property
    def _peak_offset(self) -> float:
        """Where the fold profile peaks, in radii, for the bands' mean limb darkening."""
        return profile_peak(float(np.mean(self.data.limb_darkening))).position


@dataclass(frozen=True, slots=True)
class FoldShape(_Timed):
    """One fold: caustic time [d], ln of the radius time [d]; entering or leaving."""

    name: str = field(default="fold", init=False)
    labels: tuple[str, ...] = field(default=("entering", "leaving"), init=False)

    def at(
        self, theta: NDArray[np.float64], label: int, time: NDArray[np.float64], band: NDArray[np.intp]
    ) -> NDArray[np.float64]:
        """Fold profile at ``x = +-(t - caustic_time) / radius_time``."""
        sign = 1.0 if label == 0 else -1.0
        x = (time - theta[:, :1]) * (sign * np.exp(-theta[:, 1:2]))
        return fold_table().profile(x, self.data.limb_darkening[band])

    def peak(self, theta: NDArray[np.float64], label: NDArray[np.intp]) -> NDArray[np.float64]:
        """The disc's centre is 0.65 radii inside the caustic when the flux is highest."""
        return theta[:, 0] + np.where(label == 0, 1.0, -1.0) * self._peak_offset * np.exp(theta[:, 1])


@dataclass(frozen=True, slots=True)
class PairShape(_Timed):
    """Two folds, entered and left: first caustic time, ln radius time, ln separation, ln strength ratio.

    Notes
    -----
    The images that the first fold makes die at the second. Between the folds each term is therefore
    ``J(x) sqrt(distance to the other fold / separation)``: exact for isolated folds (separation much larger than
    the radius time), and a template, not a solution, where the disc touches both.
    """

    name: str = field(default="pair", init=False)
    labels: tuple[str, ...] = field(default=("entering then leaving",), init=False)

    def at(
        self, theta: NDArray[np.float64], label: int, time: NDArray[np.float64], band: NDArray[np.intp]
    ) -> NDArray[np.float64]:
        """Sum of both folds' profiles, the second scaled by the strength ratio."""
        first, radius_time = theta[:, :1], np.exp(theta[:, 1:2])
        separation, ratio = np.exp(theta[:, 2:3]), np.exp(theta[:, 3:4])
        inside = (time - first) / separation
        limb = self.data.limb_darkening[band]
        enter = fold_table().profile((time - first) / radius_time, limb) * np.sqrt(np.clip(1.0 - inside, 0.0, 1.0))
        leave = fold_table().profile((first + separation - time) / radius_time, limb) * np.sqrt(
            np.clip(inside, 0.0, 1.0)
        )
        return enter + ratio * leave

    def peak(self, theta: NDArray[np.float64], label: NDArray[np.intp]) -> NDArray[np.float64]:
        """Peak of the stronger of the two folds."""
        offset = self._peak_offset * np.exp(theta[:, 1])
        second = theta[:, 0] + np.exp(theta[:, 2]) - offset
        return np.where(theta[:, 3] > 0.0, second, theta[:, 0] + offset)

    def second(self, theta: NDArray[np.float64]) -> NDArray[np.float64] | None:
        """The separation of the folds."""
        return np.exp(theta[:, 2])

    def height(self, theta: NDArray[np.float64]) -> NDArray[np.float64]:
        """Peak of the stronger fold."""
        peak = profile_peak(float(np.mean(self.data.limb_darkening))).height
        return np.asarray(peak * np.exp(np.maximum(theta[:, 3], 0.0)))


@dataclass(frozen=True, slots=True)
class BumpShape(_Timed):
    """A smooth bump, for passages outside a cusp: time of closest approach, ln of the crossing time; impact labels.

    Notes
    -----
    The shape is that of a point lens, ``(u^2+2)/(u sqrt(u^2+4)) - 1``, scaled to one at its peak (Paczynski 1986).
    """

    impacts: tuple[float, ...] = (0.05, 0.15, 0.3, 0.6, 1.0)
    name: str = field(default="bump", init=False)

    @property
    def labels(self) -> tuple[str, ...]:
        """Impact parameters, as text."""
        return tuple(f"impact {u:g}" for u in self.impacts)

    def at(
        self, theta: NDArray[np.float64], label: int, time: NDArray[np.float64], band: NDArray[np.intp]
    ) -> NDArray[np.float64]:
        """Excess magnification of a point lens over its peak."""
        impact = self.impacts[label]
        u2 = impact**2 + ((time - theta[:, :1]) * np.exp(-theta[:, 1:2])) ** 2
        return _excess(u2) / _excess(np.float64(impact**2))

    def features(self, label: int) -> NDArray[np.float64]:
        """Bends of a smooth bump, in crossing times scaled by the impact parameter."""
        return self.impacts[label] * _BUMP_FEATURES

    def peak(self, theta: NDArray[np.float64], label: NDArray[np.intp]) -> NDArray[np.float64]:
        """Closest approach."""
        return theta[:, 0]

    def height(self, theta: NDArray[np.float64]) -> NDArray[np.float64]:
        """One, by the scaling."""
        return np.ones(len(theta))


def _excess(u2: NDArray[np.float64] | np.float64) -> NDArray[np.float64]:
    """Point-lens magnification minus one, without cancellation far out."""
    root = np.sqrt(u2 * (u2 + 4.0))
    return np.asarray(4.0 / (root * (u2 + 2.0 + root)))


@dataclass(frozen=True, slots=True)
class BinaryShape(_Timed):
    """Two stars of a binary crossing one fold: the second is delayed, with its own radius and temperature.

    Parameters are the primary's caustic time, ln radius time, delay of the secondary [d], ln of the radius ratio,
    and ln of both temperatures [K].

    Notes
    -----
    On one fold a star's amplitude goes as its unlensed flux over the root of its radius, hence the secondary's
    share in a band is ``ratio**1.5 * B(T2)/B(T1)``. The amplitude is that of the primary in the first band: the bands
    are tied by the temperatures, so that the linear part has one amplitude for all of them.
    """

    spectrum: Spectrum
    name: str = field(default="binary", init=False)
    labels: tuple[str, ...] = field(default=("entering", "leaving"), init=False)

    def at(
        self, theta: NDArray[np.float64], label: int, time: NDArray[np.float64], band: NDArray[np.intp]
    ) -> NDArray[np.float64]:
        """Fold profiles of both stars, in units of the primary's amplitude in the first band."""
        sign = 1.0 if label == 0 else -1.0
        first, radius_time, delay, ratio = theta[:, :1], np.exp(theta[:, 1:2]), theta[:, 2:3], np.exp(theta[:, 3:4])
        one, two = self.spectrum.flux(theta[:, 4]), self.spectrum.flux(theta[:, 5])
        limb = self.data.limb_darkening[band]
        primary = fold_table().profile(sign * (time - first) / radius_time, limb)
        secondary = fold_table().profile(sign * (time - first - delay) / (radius_time * ratio), limb)
        unit = one[:, :1]
        return (one / unit)[:, band] * primary + ratio**1.5 * (two / unit)[:, band] * secondary

    def peak(self, theta: NDArray[np.float64], label: NDArray[np.intp]) -> NDArray[np.float64]:
        """Peak of the primary."""
        return theta[:, 0] + np.where(label == 0, 1.0, -1.0) * self._peak_offset * np.exp(theta[:, 1])

    def second(self, theta: NDArray[np.float64]) -> NDArray[np.float64] | None:
        """The delay of the secondary."""
        return theta[:, 2]
