"""Named mass functions of the point masses in the lens."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from itertools import pairwise
from math import inf, isfinite, log
from typing import TYPE_CHECKING, Final

from crossing.errors import InputError
from crossing.event.records import DEFAULT_MASS_RANGE
from crossing.event.wording import listed
from crossing.stars.mass_distribution import MassFunction, Population
from crossing.stars.mass_pieces import LogNormalPiece, MassPiece, PointPiece, PowerLawPiece

if TYPE_CHECKING:
    from crossing.event import MicrolensRecord

__all__ = [
    # what they are
    "MassFunction",
    "Population",
    # makers
    "chabrier",
    "chabrier_2005",
    "from_record",
    "kroupa",
    "log_normal",
    "power_law",
    "salpeter",
    "single",
]

_LOW, _HIGH = DEFAULT_MASS_RANGE
_KROUPA_BREAKS: Final = (0.08, 0.5)
_KROUPA_SLOPES: Final = (0.3, 1.3, 2.3)
_SALPETER_SLOPE: Final = 2.35
_MOST_WIDTH_DEX: Final = 10.0
_LEAST_WIDENING: Final = 1e-3


def single(mass: float) -> MassFunction:
    """All stars of one `mass` [Msun].

    Raises
    ------
    InputError
        If the mass is not positive and finite.
    """
    if not 0 < mass < inf:
        raise InputError(f"`mass` must be positive, got {mass:g}; give it in solar masses")
    return MassFunction(name="single", pieces=(PointPiece(mass=float(mass)),))


def power_law(slope: float, low: float = _LOW, high: float = _HIGH) -> MassFunction:
    """Power law, dN/dm proportional to m**(-slope).

    Parameters
    ----------
    slope : float
        Slope; 2.35 is that of Salpeter.
    low, high : float, optional
        Lowest and highest mass [Msun].

    Raises
    ------
    InputError
        If the slope is not finite, or the range is empty or not positive.
    """
    if not isfinite(slope):
        raise InputError(f"`slope` must be finite, got {slope:g}; 2.35 is that of Salpeter")
    _check_range(low, high)
    return MassFunction(name="power law", pieces=_broken_power_law(low, high, (), (float(slope),)))


def salpeter(low: float = _LOW, high: float = _HIGH) -> MassFunction:
    """Mass function of Salpeter, slope 2.35.

    Parameters
    ----------
    low, high : float, optional
        Lowest and highest mass [Msun].

    Raises
    ------
    InputError
        If the range is empty or not positive.

    References
    ----------
    .. [1] Salpeter E. E., 1955, ApJ 121, 161
    """
    _check_range(low, high)
    return MassFunction(name="salpeter", pieces=_broken_power_law(low, high, (), (_SALPETER_SLOPE,)))


def kroupa(low: float = _LOW, high: float = _HIGH) -> MassFunction:
    """Mass function of Kroupa: slopes 0.3, 1.3 and 2.3 with breaks at 0.08 and 0.5 Msun.

    Parameters
    ----------
    low, high : float, optional
        Lowest and highest mass [Msun]; the paper starts at 0.01, below that its first slope is carried on.

    Raises
    ------
    InputError
        If the range is empty or not positive.

    References
    ----------
    .. [1] Kroupa P., 2001, MNRAS 322, 231, equation 2
    """
    _check_range(low, high)
    return MassFunction(name="kroupa", pieces=_broken_power_law(low, high, _KROUPA_BREAKS, _KROUPA_SLOPES))


def chabrier(low: float = _LOW, high: float = _HIGH) -> MassFunction:
    """Mass function of Chabrier (2003) for single stars of the Galactic disc.

    Parameters
    ----------
    low, high : float, optional
        Lowest and highest mass [Msun].

    Raises
    ------
    InputError
        If the range is empty or not positive.

    Notes
    -----
    dN/dlog10(m) = 0.158 exp[-(log10 m - log10 0.079)**2 / (2 0.69**2)] up to 1 Msun, 0.0443 m**-1.3 above. As
    published it jumps up by 0.46% at 1 Msun, and so it does here.

    References
    ----------
    .. [1] Chabrier G., 2003, PASP 115, 763, table 1
    """
    pieces = _log_normal_with_tail(low, high, 0.158, 0.079, 0.69, 0.0443, 1.3)
    return MassFunction(name="chabrier", pieces=pieces)


def chabrier_2005(low: float = _LOW, high: float = _HIGH) -> MassFunction:
    """Mass function of Chabrier (2005), the revision of the one for single stars.

    Parameters
    ----------
    low, high : float, optional
        Lowest and highest mass [Msun].

    Raises
    ------
    InputError
        If the range is empty or not positive.

    Notes
    -----
    dN/dlog10(m) = 0.093 exp[-(log10 m - log10 0.2)**2 / (2 0.55**2)] up to 1 Msun, 0.041 m**-1.35 above; down by 1.1%
    at 1 Msun, as published.

    References
    ----------
    .. [1] Chabrier G., 2005, in The Initial Mass Function 50 Years Later, ASSL 327, 41
    """
    pieces = _log_normal_with_tail(low, high, 0.093, 0.2, 0.55, 0.041, 1.35)
    return MassFunction(name="chabrier 2005", pieces=pieces)


def log_normal(median: float, width_dex: float, low: float = _LOW, high: float = _HIGH) -> MassFunction:
    """Log-normal distribution within a range.

    Parameters
    ----------
    median : float
        Median [Msun] in number, before the range cuts it; it may lie outside of the range.
    width_dex : float
        Standard deviation of log10(mass) [dex] before the range cuts it, at most 10.
    low, high : float, optional
        Lowest and highest mass [Msun].

    Raises
    ------
    InputError
        If the median or the width is not positive, the width is above 10 dex, or the range is empty or not positive.
    """
    if not 0 < median < inf:
        raise InputError(f"`median` must be positive, got {median:g}; give it in solar masses")
    if not 0 < width_dex <= _MOST_WIDTH_DEX:
        raise InputError(
            f"`width_dex` must be positive and at most {_MOST_WIDTH_DEX:g}, got {width_dex:g}; "
            "a wider one is a power law of slope 1"
        )
    _check_range(low, high)
    piece = LogNormalPiece(low=float(low), high=float(high), median=float(median), width_dex=float(width_dex))
    return MassFunction(name="log-normal", pieces=(piece,))


def from_record(record: MicrolensRecord) -> MassFunction:
    """Mass function of a population of an event file.

    Parameters
    ----------
    record : MicrolensRecord
        The population. An uncertain mass of ``single`` enters by its central value.

    Returns
    -------
    MassFunction
        The one that ``mass_function`` names, over ``mass_range`` (0.08 to 1.5 Msun where that is None).

    Raises
    ------
    InputError
        If the name is not known, a number that it needs is missing, or a number cannot be used.
    """
    low, high = record.mass_range or DEFAULT_MASS_RANGE
    mass = None if record.mean_mass is None else record.mean_mass.central
    makers: dict[str, Callable[[], MassFunction]] = {
        "single": lambda: single(_need(mass, "mean_mass", record)),
        "power law": lambda: power_law(_need(record.slope, "slope", record), low, high),
        "salpeter": lambda: salpeter(low, high),
        "kroupa": lambda: kroupa(low, high),
        "chabrier": lambda: chabrier(low, high),
        "log-normal": lambda: log_normal(
            _need(record.median_mass, "median_mass", record), _need(record.width_dex, "width_dex", record), low, high
        ),
    }
    if record.mass_function not in makers:
        raise InputError(f"`mass_function` must be {listed(makers)}, got {record.mass_function!r}; use one of these")
    return makers[record.mass_function]()


def _need(value: float | None, key: str, record: MicrolensRecord) -> float:
    if value is None:
        raise InputError(f'`{key}` must be given with mass_function = "{record.mass_function}"; add it')
    return value


def _check_range(low: float, high: float) -> None:
    if not 0 < low < high < inf:
        raise InputError(
            f"`low` and `high` must be solar masses with 0 < low < high, got {low:g} and {high:g}; swap or widen them"
        )
    if high - low < _LEAST_WIDENING * low:
        raise InputError(
            f"`high` must be at least 0.1% above `low`, got {low!r} and {high!r}; use a single mass instead"
        )


def _cut(low: float, high: float, breaks: Iterable[float]) -> list[tuple[float, float]]:
    """Ranges of all pieces between `breaks`, cut to the masses from `low` to `high`; empty ones have high <= low."""
    return [(max(a, low), min(b, high)) for a, b in pairwise((0.0, *breaks, inf))]


def _broken_power_law(
    low: float, high: float, breaks: tuple[float, ...], slopes: tuple[float, ...]
) -> tuple[MassPiece, ...]:
    """Power laws that are continuous at the `breaks`."""
    pieces, scale = [], 0.0
    for number, (a, b) in enumerate(_cut(float(low), float(high), breaks)):
        if number > 0:
            scale += (slopes[number] - slopes[number - 1]) * log(breaks[number - 1])
        if a < b:
            pieces.append(PowerLawPiece(low=a, high=b, slope=slopes[number], log_scale=scale))
    return tuple(pieces)


def _log_normal_with_tail(
    low: float, high: float, peak: float, median: float, width_dex: float, tail: float, tail_slope: float
) -> tuple[MassPiece, ...]:
    """Log-normal up to 1 Msun and a power law above, both by their published dN/dlog10(m)."""
    _check_range(low, high)
    (a, b), (c, d) = _cut(float(low), float(high), (1.0,))
    pieces: list[MassPiece] = []
    if a < b:
        pieces.append(LogNormalPiece(low=a, high=b, median=median, width_dex=width_dex, log_scale=log(peak)))
    if c < d:
        # dN/dm = dN/dlog10(m) / (m ln 10)
        pieces.append(PowerLawPiece(low=c, high=d, slope=tail_slope + 1, log_scale=log(tail / log(10))))
    return tuple(pieces)
