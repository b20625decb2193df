"""The macro lens at one place: eigenvalues, magnification, parity; and the geometry of a smooth fold around it."""

from __future__ import annotations

from dataclasses import dataclass
from math import hypot, inf, isfinite, sqrt
from typing import TYPE_CHECKING, Literal, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.optics.fold import profile_peak
from crossing.optics.scales import LensScales

if TYPE_CHECKING:
    from crossing.event import Event
    from crossing.optics.macro.state import LocalState

__all__ = ["EigenvalueDraws", "FoldGeometry", "LocalLens", "LocalModel", "local_lenses", "sample_eigenvalues"]

Array: TypeAlias = npt.NDArray[np.float64]
Parity: TypeAlias = Literal["minimum", "saddle", "maximum", "critical"]


def _inverse(eigenvalue: float) -> float:
    return inf if eigenvalue == 0 else 1 / eigenvalue


@dataclass(frozen=True, slots=True)
class LocalLens:
    """Smooth macro lens at one place of the image plane.

    Parameters
    ----------
    kappa : float
        Total convergence.
    gamma : float
        Shear; the x axis is that of lam_t = 1 - kappa - gamma.
    gradient : float or (float, float), optional
        Change of lam_t per theta_E along x and y; one number means (g, 0). It is kept as a pair.

    Raises
    ------
    InputError
        If a number is not finite, or the gradient is neither a number nor a pair.
    """

    kappa: float
    """Total convergence."""
    gamma: float
    """Shear, of either sign."""
    gradient: float | tuple[float, float] | None = None
    """Change of lam_t per unit x and y [1/theta_E of one solar mass], a pair, or None."""

    def __post_init__(self) -> None:
        for name in ("kappa", "gamma"):
            if not isfinite(getattr(self, name)):
                raise InputError(f"`{name}` must be finite, got {getattr(self, name):g}; give a number")
        if self.gradient is not None:
            parts = np.atleast_1d(np.asarray(self.gradient, dtype=np.float64))
            if parts.shape not in ((1,), (2,)) or not np.all(np.isfinite(parts)):
                raise InputError(
                    f"`gradient` must be a finite number or a pair, got {self.gradient}; give g or (gx, gy)"
                )
            pair = (float(parts[0]), float(parts[1]) if parts.size == 2 else 0.0)
            object.__setattr__(self, "gradient", pair)

    @classmethod
    def from_eigenvalues(
        cls, lam_t: float, lam_r: float, gradient: float | tuple[float, float] | None = None
    ) -> LocalLens:
        """Lens with the given eigenvalues of its Jacobian."""
        return cls(1 - (lam_t + lam_r) / 2, (lam_r - lam_t) / 2, gradient)

    @property
    def lam_t(self) -> float:
        """Eigenvalue 1 - kappa - gamma, along x."""
        return 1 - self.kappa - self.gamma

    @property
    def lam_r(self) -> float:
        """Eigenvalue 1 - kappa + gamma, along y."""
        return 1 - self.kappa + self.gamma

    @property
    def mu_t(self) -> float:
        """Signed stretch along x, 1 / lam_t; infinite on the critical curve."""
        return _inverse(self.lam_t)

    @property
    def mu_r(self) -> float:
        """Signed stretch along y, 1 / lam_r; infinite on the critical curve."""
        return _inverse(self.lam_r)

    @property
    def mu(self) -> float:
        """Signed magnification; infinite on the critical curve."""
        return _inverse(self.lam_t * self.lam_r)

    @property
    def magnification(self) -> float:
        """Size of the magnification, |mu|."""
        return abs(self.mu)

    @property
    def parity(self) -> Parity:
        """Kind of stationary point of the arrival time: ``critical`` where an eigenvalue vanishes."""
        if self.lam_t == 0 or self.lam_r == 0:
            return "critical"
        if self.lam_t * self.lam_r < 0:
            return "saddle"
        return "minimum" if self.lam_t > 0 else "maximum"


@dataclass(frozen=True, slots=True, kw_only=True)
class FoldGeometry:
    """A smooth fold, its critical curve crossed along the stretch direction x; angles in arcseconds.

    Notes
    -----
    With T = |gradient along x| and mu_r = 1 / (2 (1 - kappa)) on the critical curve, a source at the distance d inside
    the caustic has two images at x = +-sqrt(2 d / T) along the stretch, each magnified mu_r / (T x).

    References
    ----------
    .. [1] Schneider P., Ehlers J., Falco E. E., 1992, Gravitational Lenses, sec. 6.2
    """

    gradient: tuple[float, float]
    """Change of lam_t per unit x and y [1/arcsec]; its x component is not zero."""
    mu_r: float
    """Signed magnification across the stretch."""
    images: Literal[1, 2] = 1
    """Number of macro images that are meant: one of the merging pair, or both."""

    def __post_init__(self) -> None:
        if self.gradient[0] == 0:
            raise InputError("`gradient` must have an x component, got 0; a critical curve along x makes no fold")

    @property
    def rate(self) -> float:
        """T, the change of lam_t along the stretch [1/arcsec]."""
        return abs(self.gradient[0])

    @property
    def strength(self) -> float:
        """K = sqrt(2/T) |mu_r| [arcsec**(1/2)]: the pair's total magnification is K / sqrt(d)."""
        return sqrt(2 / self.rate) * abs(self.mu_r)

    def critical_distance(self, lam_t: float) -> float:
        """Distance to the critical curve along the stretch [arcsec], with the sign that `lam_t` gives it."""
        return lam_t / self.gradient[0]

    def critical_distance_perp(self, lam_t: float) -> float:
        """Shortest distance to the critical curve [arcsec], with the sign of `critical_distance`."""
        return lam_t / hypot(*self.gradient) * (1 if self.gradient[0] > 0 else -1)

    def caustic_distance(self, critical_distance: float) -> float:
        """Distance of the source inside the caustic [arcsec], T s**2 / 2."""
        return self.rate * critical_distance**2 / 2

    def image_offset(self, caustic_distance: float) -> float:
        """Distance of either image from the critical curve along the stretch [arcsec], sqrt(2 d / T)."""
        if caustic_distance < 0:
            raise InputError(
                f"caustic distance must be zero or positive, got {caustic_distance:g} arcsec; outside are no images"
            )
        return sqrt(2 * caustic_distance / self.rate)

    def image_separation(self, caustic_distance: float) -> float:
        """Distance between the two images [arcsec]."""
        return 2 * self.image_offset(caustic_distance)

    def magnification(self, caustic_distance: float) -> float:
        """Total magnification of the two images of a point."""
        return self.strength / sqrt(caustic_distance) if caustic_distance > 0 else inf if caustic_distance == 0 else 0.0

    def pair_delay(self, caustic_distance: float, scales: LensScales) -> float:
        """Days by which the saddle image follows the minimum image, (1+z) D_l D_s/(c D_ls) T separation**3 / 12."""
        return scales.time_delay_factor * self.rate * self.image_separation(caustic_distance) ** 3 / 12

    def smooth_peak(self, radius: float, limb_darkening: float = 0.0) -> float:
        """Highest magnification of a disc of angular `radius` [arcsec] that crosses the smooth caustic."""
        if not radius > 0:
            raise InputError(f"`radius` must be positive, got {radius:g} arcsec; a point has no finite peak")
        return profile_peak(limb_darkening).height * self.strength / sqrt(radius)


class LocalModel(NamedTuple):
    """One of the alternatives for the macro lens at the event."""

    weight: float
    """Share of this alternative; the weights of an event sum to 1."""
    lens: LocalLens
    """The lens at its central values; with a gradient per theta_E where gradient and redshifts are known."""
    fold: FoldGeometry | None
    """The fold in arcseconds, where the gradient (or the fold strength) is known."""


class EigenvalueDraws(NamedTuple):
    """Draws of the macro lens over its alternatives and their uncertainties, each of shape (size,)."""

    lam_t: Array
    """Eigenvalue along the stretch."""
    lam_r: Array
    """Eigenvalue across it."""
    model: npt.NDArray[np.intp]
    """Index of the alternative in ``event.macro``."""


def local_lenses(event: Event) -> tuple[LocalModel, ...]:
    """Alternatives for the macro lens of an event, at their central values.

    Parameters
    ----------
    event : Event
        The event; only its macro records, redshifts and cosmology are read.

    Returns
    -------
    tuple of LocalModel
        In the order of ``event.macro``; empty where the event has none. For ``side = "pair"`` the lens is the one at
        the minimum image, and the fold says that two images are meant.

    Raises
    ------
    InputError
        If a record cannot be turned into a lens; the message names the key.
    """
    # The ways of giving a macro lens build on what stands above.
    from crossing.optics.macro.solutions import located, resolve

    theta_E = None
    if event.lens_redshift is not None and event.source_redshift is not None:
        scales = LensScales(event.lens_redshift.central, event.source_redshift.central, event.cosmology)
        theta_E = scales.einstein_radius_arcsec
    total = sum(record.weight for record in event.macro)
    models = []
    for index, solution in enumerate(resolve(event)):
        with located(event, index):
            models.append(_central_model(solution.central, event.macro[index].weight / total, theta_E))
    return tuple(models)


def sample_eigenvalues(event: Event, rng: np.random.Generator, size: int) -> EigenvalueDraws:
    """Draws of the macro eigenvalues: an alternative by its weight, then its own uncertain numbers.

    Parameters
    ----------
    event : Event
        The event; it must have a macro lens.
    rng : numpy.random.Generator
        Source of the draws.
    size : int
        Number of draws.

    Returns
    -------
    EigenvalueDraws
        Arrays of shape (size,).

    Raises
    ------
    InputError
        If the event has no macro lens, or a record cannot be turned into one.

    Notes
    -----
    The spread is carried in the eigenvalues. A normal error of a magnification becomes a normal one of its inverse, so
    that a lens model close to the critical curve spreads over both of its sides.
    """
    from crossing.optics.macro.solutions import located, resolve

    if not event.macro:
        raise InputError("must be given for this; add kappa and gamma, or another of its ways", where="macro")
    weights = np.array([record.weight for record in event.macro])
    model = rng.choice(len(weights), size=size, p=weights / weights.sum())
    lam_t, lam_r = np.empty(size), np.empty(size)
    for index, solution in enumerate(resolve(event)):
        chosen = model == index
        with located(event, index):
            lam_t[chosen], lam_r[chosen] = solution.draw(rng, int(chosen.sum()))
    return EigenvalueDraws(lam_t, lam_r, model)


def _central_model(state: LocalState, weight: float, theta_E: float | None) -> LocalModel:
    lam_t, lam_r, gradient = state.lam_t, state.lam_r, state.gradient
    if gradient is None:
        return LocalModel(weight, LocalLens.from_eigenvalues(lam_t, lam_r), None)
    per_theta_E = None if theta_E is None else (gradient[0] * theta_E, gradient[1] * theta_E)
    lens = LocalLens.from_eigenvalues(lam_t, lam_r, per_theta_E)
    if gradient[0] == 0 or lam_r == 0:
        return LocalModel(weight, lens, None)
    return LocalModel(weight, lens, FoldGeometry(gradient=gradient, mu_r=1 / lam_r, images=state.images))
