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
    from crossing.event import Event, MacroRecord, Value

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
    theta_E = None
    if event.lens_redshift is not None and event.source_redshift is not None:
        scales = LensScales(event.lens_redshift.central, event.source_redshift.central, event.cosmology)
        theta_E = scales.einstein_radius_arcsec
    total = sum(record.weight for record in event.macro)
    models = []
    for index, record in enumerate(event.macro):
        try:
            models.append(_central_model(record, record.weight / total, theta_E))
        except InputError as error:
            raise error.located(source=event.path, where=_key(event, index)) from None
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
    if not event.macro:
        raise InputError("must be given for this; add kappa and gamma, or another of its ways", where="macro")
    weights = np.array([record.weight for record in event.macro])
    model = rng.choice(len(weights), size=size, p=weights / weights.sum())
    lam_t, lam_r = np.empty(size), np.empty(size)
    for index, record in enumerate(event.macro):
        chosen = model == index
        try:
            lam_t[chosen], lam_r[chosen] = _draw(record, rng, int(chosen.sum()))
        except InputError as error:
            raise error.located(source=event.path, where=_key(event, index)) from None
    return EigenvalueDraws(lam_t, lam_r, model)


def _key(event: Event, index: int) -> str:
    return "macro" if len(event.macro) == 1 else f"macro.models[{index}]"


def _need(value: Value | None, key: str) -> Value:
    if value is None:
        raise InputError(f"`{key}` must be given for this way of saying the macro lens; add it")
    return value


def _central_model(record: MacroRecord, weight: float, theta_E: float | None) -> LocalModel:
    lam_t, lam_r = _central_eigenvalues(record)
    gradient = _central_gradient(record, lam_r)
    if gradient is None:
        return LocalModel(weight, LocalLens.from_eigenvalues(lam_t, lam_r), None)
    per_theta_E = None if theta_E is None else (gradient[0] * theta_E, gradient[1] * theta_E)
    lens = LocalLens.from_eigenvalues(lam_t, lam_r, per_theta_E)
    if gradient[0] == 0 or lam_r == 0:
        return LocalModel(weight, lens, None)
    images: Literal[1, 2] = 2 if record.side == "pair" else 1
    return LocalModel(weight, lens, FoldGeometry(gradient=gradient, mu_r=1 / lam_r, images=images))


def _central_gradient(record: MacroRecord, lam_r: float) -> tuple[float, float] | None:
    if record.gradient is not None:
        return record.gradient[0].central, record.gradient[1].central
    if record.fold_strength is not None:
        return 2 / (record.fold_strength.central * lam_r) ** 2, 0.0
    return None


def _central_eigenvalues(record: MacroRecord) -> tuple[float, float]:
    if record.way == "kappa+gamma":
        kappa, gamma = _need(record.kappa, "kappa").central, _need(record.gamma, "gamma").central
        return 1 - kappa - gamma, 1 - kappa + gamma
    lam_r = 1 / _magnification(record.mu_r, "mu_r").central
    if record.way == "mu_t+mu_r":
        return 1 / _magnification(record.mu_t, "mu_t").central, lam_r
    if record.way == "critical_distance":
        gradient = _need(record.gradient[0] if record.gradient else None, "gradient")
        return gradient.central * _need(record.critical_distance, "critical_distance").central, lam_r
    if record.way == "caustic_distance":
        gradient_x = (_central_gradient(record, lam_r) or (_need(None, "gradient").central,))[0]
        distance = _need(record.caustic_distance, "caustic_distance").central
        return _side_sign(record, lam_r) * sqrt(2 * abs(gradient_x) * distance), lam_r
    raise InputError(f"`{record.way}` must wait for a later version, which reads maps; give kappa and gamma instead")


def _draw(record: MacroRecord, rng: np.random.Generator, size: int) -> tuple[Array, Array]:
    if record.way == "kappa+gamma":
        kappa = _need(record.kappa, "kappa").sample(rng, size)
        gamma = _need(record.gamma, "gamma").sample(rng, size)
        return 1 - kappa - gamma, 1 - kappa + gamma
    lam_r = _inverse_draws(_magnification(record.mu_r, "mu_r"), rng, size)
    if record.way == "mu_t+mu_r":
        return _inverse_draws(_magnification(record.mu_t, "mu_t"), rng, size), lam_r
    if record.gradient is not None:
        gradient = record.gradient[0].sample(rng, size)
    elif record.way == "caustic_distance":
        gradient = 2 / (_need(record.fold_strength, "fold_strength").sample(rng, size) * lam_r) ** 2
    else:
        gradient = _need(None, "gradient").sample(rng, size)
    if record.way == "critical_distance":
        return gradient * _need(record.critical_distance, "critical_distance").sample(rng, size), lam_r
    distance = _need(record.caustic_distance, "caustic_distance").sample(rng, size)
    sign = _side_sign(record, _central_eigenvalues(record)[1])
    return sign * np.sqrt(2 * np.abs(gradient) * np.maximum(distance, 0.0)), lam_r


def _magnification(value: Value | None, key: str) -> Value:
    """Return the value of a magnification, none of whose central or range values may be zero."""
    given = _need(value, key)
    ranged = given.shape in ("uniform", "loguniform")
    if given.central == 0 or (ranged and given.a * given.b <= 0):
        raise InputError(f"`{key}` must keep one sign, got {given}; give the distance to the critical curve instead")
    return given


def _inverse_draws(value: Value, rng: np.random.Generator, size: int) -> Array:
    if value.shape != "normal":
        return np.asarray(1 / value.sample(rng, size))
    return np.asarray(1 / value.a + value.b / value.a**2 * rng.standard_normal(size))


def _side_sign(record: MacroRecord, lam_r: float) -> int:
    """Sign of lam_t at the image that `side` names."""
    if lam_r > 0:
        return -1 if record.side == "saddle" else 1
    if record.side == "minimum":
        raise InputError(f"`side` must be saddle or pair where mu_r is negative, got minimum with mu_r = {1 / lam_r:g}")
    return 1
