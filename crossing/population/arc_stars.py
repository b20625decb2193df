"""The stars behind an arc's light: how many of which kind, from its surface brightness."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import inf
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError
from crossing.event import Value
from crossing.stars.extinction import dust_law, transmission
from crossing.stars.photosphere import ab_magnitude, blackbody_flux_njy, flux_njy_from_magnitude

if TYPE_CHECKING:
    from astropy.table import QTable
    from matplotlib.axes import Axes

    from crossing.event import BandRecord
    from crossing.population.luminosity import LuminosityFunction
    from crossing.stars.star_draws import StarDraws

__all__ = ["ArcStars", "arc_stars", "source_area", "star_fluxes"]

Array: TypeAlias = npt.NDArray[np.float64]
Number: TypeAlias = Value | float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ArcStars:
    """Stars per area of the source plane, in the cells of a luminosity function.

    Notes
    -----
    Lensing conserves surface brightness: it is the same in the arc as in the source. A piece of the arc shows
    area / |mu| of the source plane, with density area / |mu| stars in it, each |mu| times as bright.
    """

    function: LuminosityFunction
    """Kinds of stars and their shares."""
    density: float
    """Stars of all kinds per area of the source plane [1 / arcsec2]."""
    flux: dict[str, Array]
    """Observed flux density of one star of each cell without magnification, dimmed by all dust [nJy], by band."""
    observed: dict[str, float]
    """Surface brightness of the arc [AB mag / arcsec2] that was used, by band."""
    reference: str
    """Band whose surface brightness gave the density."""
    light_fraction: float
    """Part of the light in that band that these stars make."""
    dust: float
    """A(V) of the dust in the arc's galaxy [mag]."""

    def expected(self, area: float, magnification: float) -> Array:
        """Expected stars of each cell in a piece of the arc.

        Parameters
        ----------
        area : float
            Observed area [arcsec2].
        magnification : float
            Magnification of either sign.

        Returns
        -------
        ndarray
            Expected numbers, shape (n,).
        """
        return np.asarray(self.density * source_area(area, magnification) * self.function.number)

    def flux_moment(self, band: str, power: float = 1.0) -> float:
        """Sum of flux**`power` over the stars of an area of the source plane.

        Parameters
        ----------
        band : str
            Band.
        power : float, optional
            1 gives the light of these stars, 2 what its fluctuations go with.

        Returns
        -------
        float
            Sum [nJy**power / arcsec2], of stars without magnification.
        """
        function = self.function
        spread = function.cell_moment(power) / function.luminosity**power
        return float(self.density * (function.number @ (spread * self._flux(band) ** power)))

    def number_above(self, band: str, flux: npt.ArrayLike) -> Array:
        """Stars whose flux without magnification lies above a bound.

        Parameters
        ----------
        band : str
            Band.
        flux : array_like
            Flux densities [nJy], any shape; depth / magnification gives the stars that are seen.

        Returns
        -------
        ndarray
            Stars per area of the source plane [1 / arcsec2], shape of `flux`.
        """
        one = self._flux(band)
        with np.errstate(divide="ignore"):
            ratio = np.where(one > 0, np.asarray(flux, dtype=np.float64)[..., None] / one, inf)
        share = self.function.share_of_cells_above(ratio * self.function.luminosity)
        return np.asarray(self.density * (share @ self.function.number))

    def predicted(self, band: str) -> float:
        """Surface brightness [AB mag / arcsec2] in a band, if these stars make the same part of the light in all."""
        return float(ab_magnitude(self.flux_moment(band) / self.light_fraction))

    def residuals(self) -> dict[str, float]:
        """Observed less predicted surface brightness [mag], by band; zero in the reference band.

        Notes
        -----
        Several tenths say that temperatures or dust are not those of the arc.
        """
        return {band: value - self.predicted(band) for band, value in self.observed.items()}

    def draw(self, area: float, magnification: float, rng: np.random.Generator, *, faintest: float = 0.0) -> StarDraws:
        """Draw the stars in a piece of the arc, above a luminosity [Lsun]; see `LuminosityFunction.draw`."""
        total = self.density * source_area(area, magnification)
        return self.function.draw(total, rng, faintest=faintest)

    def to_table(self) -> QTable:
        """One row a cell: star, stars per area of the source plane, flux by band."""
        from astropy import units as u

        table = self.function.to_table()
        table["number"] = self.density * self.function.number / u.arcsec**2
        table.rename_column("number", "density")
        for band, flux in self.flux.items():
            table[f"flux_{band}"] = flux * u.nJy
        return table

    def to_dict(self) -> dict[str, Any]:
        """Numbers of the whole, JSON-able."""
        return {
            "stars": self.function.to_dict(),
            "density_per_arcsec2": self.density,
            "reference_band": self.reference,
            "light_fraction": self.light_fraction,
            "dust_mag": self.dust,
            "observed_mag_arcsec2": dict(self.observed),
            "residuals_mag": self.residuals(),
        }

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the stars per area above each flux without magnification, a line a band."""
        if ax is None:
            from matplotlib.figure import Figure

            ax = Figure(figsize=(5.5, 4.0), layout="constrained").add_subplot()
        colours, styles = ("#0072B2", "#D55E00", "#009E73", "#CC79A7"), ("-", "--", "-.", ":")
        for index, (band, flux) in enumerate(self.flux.items()):
            top = flux.max()
            grid = np.geomspace(1e-6 * top, top, 200)
            number = self.number_above(band, grid)
            ax.plot(grid[number > 0], number[number > 0], color=colours[index % 4], ls=styles[index % 4], label=band)
        ax.set(
            xscale="log", yscale="log", xlabel="flux without magnification [nJy]", ylabel="stars above [arcsec$^{-2}$]"
        )
        ax.legend(title="band")
        return ax

    def _flux(self, band: str) -> Array:
        if band not in self.flux:
            raise InputError(f"`band` must be one of {', '.join(self.flux)}, got {band!r}; describe it in [bands]")
        return self.flux[band]


def arc_stars(
    surface_brightness: Mapping[str, Number],
    bands: Mapping[str, BandRecord],
    redshift: float,
    luminosity_distance_mpc: float,
    function: LuminosityFunction,
    *,
    light_fraction: Number = 1.0,
    dust: Number = 0.0,
    reference: str | None = None,
    rng: np.random.Generator | None = None,
) -> ArcStars:
    """Stars of an arc, as many as its surface brightness needs.

    Parameters
    ----------
    surface_brightness : mapping of str to Value or float
        Observed surface brightness of the arc by band [AB mag / arcsec2], as it arrives.
    bands : mapping of str to BandRecord
        All bands in which fluxes are wanted; their Galactic extinction dims the stars as it dimmed the arc.
    redshift : float
        Redshift of the arc.
    luminosity_distance_mpc : float
        Luminosity distance [Mpc].
    function : LuminosityFunction
        Kinds of stars.
    light_fraction : Value or float, optional
        Part of the light in the reference band that comes from these stars, the rest being from fainter ones or gas.
    dust : Value or float, optional
        A(V) of the dust in the arc's galaxy [mag], with the Galactic mean law; it dims all stars alike.
    reference : str, optional
        Band that fixes the number; the first of `surface_brightness` if None.
    rng : numpy.random.Generator, optional
        Draw all that is uncertain from it; central values if None.

    Returns
    -------
    ArcStars
        With surface brightness [nJy / arcsec2] x light_fraction = density x mean flux of a star.

    Raises
    ------
    InputError
        If no surface brightness is given, the reference band has none, a band is not described, a number cannot be, or
        the stars send no light through the band.

    References
    ----------
    .. [1] Cardelli J. A., Clayton G. C., Mathis J. S., 1989, ApJ 345, 245
    """
    if not surface_brightness:
        raise InputError("`surface_brightness` must hold a band, got none; it fixes the number of stars")
    reference = reference or next(iter(surface_brightness))
    unknown = [name for name in surface_brightness if name not in bands]
    if reference not in surface_brightness or unknown:
        wanted = unknown[0] if unknown else reference
        place = "bands" if unknown else "surface_brightness"
        raise InputError(f"`{place}` must hold the band {wanted!r}, got {', '.join(bands)}; add it")
    observed = {name: _number(value, rng) for name, value in surface_brightness.items()}
    part, reddening = _number(light_fraction, rng), _number(dust, rng)
    if not 0 < part <= 1:
        raise InputError(f"`light_fraction` must be between 0 and 1, got {part:g}; 1 leaves no light to other sources")
    if not 0 <= reddening < inf:
        raise InputError(f"`dust` must be zero or positive, got {reddening:g}; give A(V) in magnitudes")
    flux = {
        name: star_fluxes(function, band, redshift, luminosity_distance_mpc, dust=reddening, rng=rng)
        for name, band in bands.items()
    }
    mean = float(function.number @ flux[reference])
    if not mean > 0:
        raise InputError(f"`reference` must be a band in which the stars shine, got {reference!r}; take a redder one")
    return ArcStars(
        function=function,
        density=float(flux_njy_from_magnitude(observed[reference])) * part / mean,
        flux=flux,
        observed=observed,
        reference=reference,
        light_fraction=part,
        dust=reddening,
    )


def star_fluxes(
    function: LuminosityFunction,
    band: BandRecord,
    redshift: float,
    luminosity_distance_mpc: float,
    *,
    dust: float = 0.0,
    rng: np.random.Generator | None = None,
) -> Array:
    """Observed flux densities of stars without magnification: black bodies behind their own and the Galaxy's dust.

    Parameters
    ----------
    function : LuminosityFunction
        Kinds of stars.
    band : BandRecord
        Band with its Galactic extinction.
    redshift : float
        Redshift of the stars.
    luminosity_distance_mpc : float
        Luminosity distance [Mpc].
    dust : float, optional
        A(V) of the dust in their galaxy [mag].
    rng : numpy.random.Generator, optional
        Draw an uncertain Galactic extinction from it.

    Returns
    -------
    ndarray
        Flux of a star of each cell's mean luminosity [nJy], shape (n,).
    """
    bare = blackbody_flux_njy(
        function.radius,
        function.temperature,
        redshift,
        band.wavelength,
        band.width,
        luminosity_distance_mpc=luminosity_distance_mpc,
    )
    host = dust * float(dust_law(band.wavelength / (1 + redshift))) if dust else 0.0
    return np.asarray(bare * transmission(host + _number(band.extinction, rng)))


def source_area(area: float, magnification: float) -> float:
    """Area of the source plane that a piece of the arc shows.

    Parameters
    ----------
    area : float
        Observed area [arcsec2].
    magnification : float
        Magnification of either sign.

    Returns
    -------
    float
        area / |mu| [arcsec2].

    Raises
    ------
    InputError
        If the area is not positive, or the magnification is zero or not finite.
    """
    if not 0 < area < inf:
        raise InputError(f"`area` must be positive, got {area:g}; give length times width")
    if not 0 < abs(magnification) < inf:
        raise InputError(f"`magnification` must be finite and not zero, got {magnification:g}; cut the arc finer there")
    return area / abs(magnification)


def _number(value: Number, rng: np.random.Generator | None) -> float:
    if not isinstance(value, Value):
        return float(value)
    return value.central if rng is None else float(value.sample(rng, 1)[0])
