"""Stars of the lens: their convergence from intracluster light or from a surface density, with its error."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import log
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError
from crossing.event import Value
from crossing.stars.solar_light import luminosity_density

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.event import BandRecord, MicrolensRecord
    from crossing.optics.scales import LensScales

__all__ = ["StellarConvergence", "stellar_convergence"]

Array = NDArray[np.float64]

# Equally probable numbers that stand for a product of uncertain factors: its quantiles hold to 0.1% between 0.001 and
# 0.999, and stop there.
_LEVELS: Final = 512
_LN_PER_MAG: Final = 0.4 * log(10.0)
_ONE_SIGMA: Final = (0.1586552539314571, 0.5, 0.8413447460685429)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StellarConvergence:
    """Convergence in one population of point masses, known with an error."""

    way: str
    """What the file gives: ``kappa_star``, ``surface_density`` or ``surface_brightness``."""
    central: float
    """Convergence from central values."""
    mass_function: str
    """Mass function of the population, which the ratio of mass to light is taken to assume."""
    sigma_crit: float | None = None
    """Critical surface density [Msun / pc2], where it was needed."""
    light: float | None = None
    """Surface density of light [Lsun / pc2 at the rest wavelength], where it was needed."""
    value: Value | None = None
    """Distribution of the given density, unless it comes from light."""
    table: Array | None = None
    """(n,) equally probable convergences, rising, for one that comes from light with an error."""

    @property
    def is_exact(self) -> bool:
        """Whether there is no uncertainty."""
        return self.table is None and (self.value is None or self.value.is_exact)

    @property
    def surface_density(self) -> float | None:
        """Surface density [Msun / pc2] from central values, where the critical one is known."""
        return None if self.sigma_crit is None else self.central * self.sigma_crit

    def quantile(self, p: ArrayLike) -> Array:
        """Inverse of the cumulative distribution of the convergence.

        Parameters
        ----------
        p : array_like
            Probabilities between 0 and 1, any shape.

        Returns
        -------
        ndarray
            Convergences.
        """
        p = np.asarray(p, dtype=np.float64)
        if self.table is not None:
            return np.asarray(np.interp(p, _middles(len(self.table)), self.table))
        if self.value is None or self.value.is_exact:
            return np.full(p.shape, self.central)
        return np.asarray(self.value.quantile(p) * (self.central / self.value.central))

    def sample(self, rng: np.random.Generator, size: int) -> Array:
        """Draw `size` convergences; an exact one leaves `rng` untouched."""
        return np.full(size, self.central) if self.is_exact else self.quantile(rng.uniform(0.0, 1.0, size))

    def to_dict(self) -> dict[str, Any]:
        """All numbers, JSON-able, with the 68% interval."""
        low, median, high = self.quantile(_ONE_SIGMA).tolist()
        return {
            "way": self.way,
            "mass_function": self.mass_function,
            "kappa_star": {"median": median, "low": low, "high": high, "bound": "two-sided"},
            "surface_density_msun_pc2": self.surface_density,
            "light_lsun_pc2": self.light,
            "sigma_crit_msun_pc2": self.sigma_crit,
        }

    def to_table(self) -> QTable:
        """Quantiles of the convergence."""
        from astropy.table import QTable

        levels = np.array([0.025, *_ONE_SIGMA, 0.975])
        return QTable({"probability": levels, "kappa_star": self.quantile(levels)})

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the cumulative distribution."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.0, 4.0), layout="constrained").add_subplot()
        levels = _middles(200)
        ax.plot(self.quantile(levels), levels, color="#0072B2")
        ax.axvline(self.central, color="#D55E00", ls="--", label="central values")
        ax.set(xlabel=r"$\kappa_\star$", ylabel="cumulative probability", ylim=(0.0, 1.0))
        ax.legend()
        return ax


def stellar_convergence(
    record: MicrolensRecord, scales: LensScales | None = None, bands: Mapping[str, BandRecord] | None = None
) -> StellarConvergence:
    """Convergence of a population of an event or campaign file, whichever way it is given.

    Parameters
    ----------
    record : MicrolensRecord
        The population.
    scales : LensScales, optional
        Distances; not needed where ``kappa_star`` is given.
    bands : mapping of str to BandRecord, optional
        Bands by name, for a surface brightness: its wavelength and Galactic extinction.

    Returns
    -------
    StellarConvergence
        With the errors of surface brightness, extinction and ratio of mass to light, or of the given density. Errors of
        the redshifts are not in it.

    Raises
    ------
    InputError
        If no density is given, redshifts or the band are missing, or the band does not see old stars.

    Notes
    -----
    The ratio of mass to light is that at the rest wavelength of the band, for the population's own mass function, and
    counts what weighs today: living stars and remnants (see `crossing.stars.remnants` for other conventions). All of
    the mass is then in the population's mass function.
    """
    if record.kappa_star is not None:
        value = record.kappa_star
        return StellarConvergence(
            way="kappa_star", central=value.central, value=value, mass_function=record.mass_function
        )
    way = "surface_density" if record.surface_density is not None else "surface_brightness"
    if scales is None:
        raise InputError(f"`{way}` needs the redshifts of lens and source; add them")
    if record.surface_density is not None:
        return StellarConvergence(
            way=way,
            central=record.surface_density.central / scales.sigma_crit,
            sigma_crit=scales.sigma_crit,
            value=record.surface_density,
            mass_function=record.mass_function,
        )
    return _from_light(record, scales, bands or {})


def _from_light(record: MicrolensRecord, scales: LensScales, bands: Mapping[str, BandRecord]) -> StellarConvergence:
    brightness, ratio = record.surface_brightness, record.mass_to_light
    if brightness is None or ratio is None:
        raise InputError(
            "must hold kappa_star, surface_density, or surface_brightness with band and mass_to_light; add one"
        )
    if record.band is None or record.band not in bands:
        raise InputError(f"`band` must be one of the bands of the file, got {record.band!r}; describe it in [bands]")
    band = bands[record.band]
    light = float(
        luminosity_density(brightness.central, band.wavelength, scales.z_lens, band.extinction.central).item()
    )
    central = light * ratio.central / scales.sigma_crit
    terms = [
        -_LN_PER_MAG * (_spread(brightness) - brightness.central),
        _LN_PER_MAG * (_spread(band.extinction) - band.extinction.central),
        np.log(_spread(ratio) / ratio.central),
    ]
    return StellarConvergence(
        way="surface_brightness",
        central=central,
        sigma_crit=scales.sigma_crit,
        light=light,
        table=_product(central, [term for term in terms if len(term) > 1]),
        mass_function=record.mass_function,
    )


def _middles(count: int) -> Array:
    """Probabilities in the middle of `count` equal shares."""
    return (np.arange(count) + 0.5) / count


def _spread(value: Value) -> Array:
    """Equally probable numbers of a value; one where it is exact."""
    return value.quantile(_middles(1 if value.is_exact else _LEVELS))


def _product(central: float, terms: list[Array]) -> Array | None:
    """Equally probable values of `central` times the exponentials of independent `terms`."""
    if not terms:
        return None
    total = terms[0]
    for term in terms[1:]:
        total = np.sort(np.add.outer(total, term), axis=None).reshape(_LEVELS, -1).mean(axis=1)
    return np.asarray(central * np.exp(np.sort(total)))
