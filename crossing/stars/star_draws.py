"""Random stars out of the priors of an event file, below the upper limit of luminosities."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.event import StarRecord, Value
from crossing.stars.photosphere import luminosity_lsun, radius_from_luminosity, temperature_from_luminosity
from crossing.stars.upper_luminosity import log_allowed

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

__all__ = ["DEFAULT_LUMINOSITY", "DEFAULT_TEMPERATURE", "StarDraws", "draw_stars", "star_prior_texts"]

Array = NDArray[np.float64]

DEFAULT_TEMPERATURE: Final = Value.loguniform(3000.0, 40_000.0)
"""Temperature [K] where the file says nothing: red supergiants to O stars (a choice, no source)."""
DEFAULT_LUMINOSITY: Final = Value.loguniform(1e5, 10**6.7)
"""Luminosity [Lsun] where the file says nothing: stars that a caustic can lift into view (a choice, no source)."""

_POOL: Final = 20_000
# A luminosity given exactly beside radius and temperature is taken as known to one per cent.
_EXACT_WIDTH: Final = 0.01
# ln of the best weight in the pool below which the three numbers are called contradictory.
_HOPELESS: Final = -40.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StarDraws:
    """Random stars, tied by the law of Stefan and Boltzmann; arrays of shape (n,)."""

    radius: Array
    """Radius [nominal solar radii]."""
    temperature: Array
    """Effective temperature [K]."""
    luminosity: Array
    """Luminosity [nominal solar luminosities]."""

    def __len__(self) -> int:
        return len(self.radius)

    def to_dict(self) -> dict[str, list[float]]:
        """Columns as lists."""
        return {
            "radius_rsun": self.radius.tolist(),
            "temperature_K": self.temperature.tolist(),
            "luminosity_lsun": self.luminosity.tolist(),
        }

    def to_table(self) -> QTable:
        """One row a star."""
        from astropy.table import QTable

        return QTable(self.to_dict())

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw luminosity against temperature, hot stars at the left."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.0, 4.2), layout="constrained").add_subplot()
        ax.plot(self.temperature, self.luminosity, "o", color="#0072B2", ms=3.0, mec="none", alpha=0.6)
        ax.set(xscale="log", yscale="log", xlabel="temperature [K]", ylabel=r"luminosity [L$_\odot$]")
        ax.invert_xaxis()
        return ax


def draw_stars(record: StarRecord, rng: np.random.Generator, size: int) -> StarDraws:
    """Draw stars from the priors of an event file.

    Parameters
    ----------
    record : StarRecord
        Priors. Two of radius, temperature and luminosity make the third; with one, the temperature (or, if that is the
        one, the luminosity) is drawn from its default, and with none both are. Three are combined.
    rng : numpy.random.Generator
        Source of the draws.
    size : int
        Number of stars.

    Returns
    -------
    StarDraws
        Drawn with the probability that a star of such luminosity exists as a further weight.

    Raises
    ------
    InputError
        If no star fits the priors: they contradict each other, or lie far above the upper limit.

    References
    ----------
    .. [1] Humphreys R. M. & Davidson K., 1979, ApJ 232, 409
    """
    radius, temperature, luminosity = _pool(record, rng)
    log_weight = log_allowed(luminosity, temperature)
    if record.radius is not None and record.temperature is not None and record.luminosity is not None:
        log_weight = log_weight + _relative_density(record.luminosity, luminosity)
    top = float(np.max(log_weight))
    if not top > _HOPELESS:
        raise InputError(
            "must be possible together, got a luminosity that radius and temperature do not give, or far above that of "
            "any star; change one of them",
            where="star",
        )
    weight = np.exp(log_weight - top)
    pick = rng.choice(_POOL, size=size, p=weight / weight.sum())
    return StarDraws(radius=radius[pick], temperature=temperature[pick], luminosity=luminosity[pick])


def _pool(record: StarRecord, rng: np.random.Generator) -> tuple[Array, Array, Array]:
    if record.radius is not None and record.luminosity is not None and record.temperature is None:
        radius, luminosity = record.radius.sample(rng, _POOL), record.luminosity.sample(rng, _POOL)
        return radius, temperature_from_luminosity(luminosity, radius), luminosity
    temperature = (record.temperature or DEFAULT_TEMPERATURE).sample(rng, _POOL)
    if record.radius is not None:
        radius = record.radius.sample(rng, _POOL)
        return radius, temperature, luminosity_lsun(radius, temperature)
    luminosity = (record.luminosity or DEFAULT_LUMINOSITY).sample(rng, _POOL)
    return radius_from_luminosity(luminosity, temperature), temperature, luminosity


def _relative_density(prior: Value, values: Array) -> Array:
    """Log density of a prior, less that at its best."""
    if prior.is_exact:
        prior = Value.normal(prior.central, _EXACT_WIDTH * prior.central)
    density = np.asarray(prior.log_density(values))
    return density - float(prior.log_density(prior.limits[0] if prior.shape == "loguniform" else prior.central))


def star_prior_texts(record: StarRecord) -> dict[str, str]:
    """The priors that `draw_stars` uses, in words."""
    texts = {}
    for name, unit in (("radius", "Rsun"), ("temperature", "K"), ("luminosity", "Lsun")):
        value = getattr(record, name)
        if value is not None:
            texts[name] = f"{value} {unit} (event file)"
    if len(texts) < 2:
        if "temperature" not in texts:
            texts["temperature"] = f"{DEFAULT_TEMPERATURE} K (default)"
        if "radius" not in texts and "luminosity" not in texts:
            texts["luminosity"] = f"{DEFAULT_LUMINOSITY} Lsun (default)"
    texts["upper_luminosity"] = "soft limit (Humphreys & Davidson 1979)"
    return texts
