"""Whether the pieces of a lens map belong together: signs, axes, units and scale of shear and deflection."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product
from typing import Final, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from crossing.errors import InputError

__all__ = [
    "Fields",
    "MapQuality",
    "check_curl",
    "check_deflections",
    "check_shear",
    "jacobian_of_deflections",
    "turn_shear",
]

Array: TypeAlias = npt.NDArray[np.float64]

# Wrong signs leave half of the derivatives unexplained, another lens a third; finite differences of maps that belong
# together a few per cent at worst.
_MOST_MISFIT: Final = 0.15
_GOOD_MISFIT: Final = 0.05
_DEFLECTION_MISFIT: Final = 0.1
_STEPS: Final = (1, 4)
# Mass bends light towards itself; a lens may have patches of less than the mean density, but these are shallow.
_LEAST_KAPPA: Final = -0.05
_OWN_FACTOR: Final = 0.05
_LARGEST_KAPPA: Final = 100.0
_FLOAT32_ROUNDING: Final = 6e-8
_NOISE_MARGIN: Final = 30.0


class Fields(NamedTuple):
    """Convergence and shear on a grid, arrays of one shape (rows, columns); axis 1 is east, axis 2 north."""

    kappa: Array
    """Convergence."""
    gamma1: Array
    """Shear along east."""
    gamma2: Array
    """Shear along the diagonal of east and north."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MapQuality:
    """Figures of merit of a part of a map; None where it cannot say."""

    identity_misfit: float | None
    """Median misfit of d1 kappa = d1 gamma1 + d2 gamma2 and its twin, over the median size of these derivatives."""
    deflection_misfit: float | None
    """Median difference to the convergence and shear of the deflections, over the median size of both."""

    def to_dict(self) -> dict[str, float | None]:
        """Both figures by name."""
        return {"identity_misfit": self.identity_misfit, "deflection_misfit": self.deflection_misfit}


def turn_shear(gamma1: Array, gamma2: Array, axes: Array) -> tuple[Array, Array]:
    """Shear in the frame of east and north, from its components along `axes` (their directions as columns)."""
    (a, b), (c, d) = axes
    first = (a * a - b * b) * gamma1 + 2 * a * b * gamma2
    second = (a * c - b * d) * gamma1 + (a * d + b * c) * gamma2
    return first, second


def _slopes(values: Array, inverse: Array, step: int) -> tuple[Array, Array]:
    """Derivatives to east and north by central differences over `step` pixels each way, which the shape loses."""
    rows, columns = values[step:-step], values[:, step:-step]
    along_column = (rows[:, 2 * step :] - rows[:, : -2 * step]) / (2 * step)
    along_row = (columns[2 * step :] - columns[: -2 * step]) / (2 * step)
    return (
        along_column * inverse[0, 0] + along_row * inverse[1, 0],
        along_column * inverse[0, 1] + along_row * inverse[1, 1],
    )


def jacobian_of_deflections(alpha1: Array, alpha2: Array, inverse: Array) -> Fields:
    """Convergence and shear from deflections to east and north [arcsec], by differences of fourth order.

    Parameters
    ----------
    alpha1, alpha2 : ndarray, shape (rows, columns)
        Deflections.
    inverse : ndarray, shape (2, 2)
        Steps in column and row of one arcsec to east and north.

    Returns
    -------
    Fields
        Smaller by two pixels on each side.
    """

    def slopes(values: Array) -> tuple[Array, Array]:
        rows = values[2:-2]
        along_column = (rows[:, :-4] - rows[:, 4:] + 8 * (rows[:, 3:-1] - rows[:, 1:-3])) / 12
        columns = values[:, 2:-2]
        along_row = (columns[:-4] - columns[4:] + 8 * (columns[3:-1] - columns[1:-3])) / 12
        return (
            along_column * inverse[0, 0] + along_row * inverse[1, 0],
            along_column * inverse[0, 1] + along_row * inverse[1, 1],
        )

    xx, xy = slopes(alpha1)
    yx, yy = slopes(alpha2)
    return Fields((xx + yy) / 2, (xx - yy) / 2, (xy + yx) / 2)


def _identity_misfit(fields: Fields, inverse: Array) -> float | None:
    """The smaller misfit of near and of longer differences: these mind rounded numbers less, those small galaxies."""
    found = [_misfit_over(fields, inverse, step) for step in _STEPS]
    return min((one for one in found if one is not None), default=None)


def _misfit_over(fields: Fields, inverse: Array, step: int) -> float | None:
    (kx, ky), (g1x, g1y), (g2x, g2y) = (_slopes(one, inverse, step) for one in fields)
    size = float(np.median(sum(np.abs(one) for one in (kx, ky, g1x, g1y, g2x, g2y))))
    level = float(np.median(sum(np.abs(one) for one in fields)))
    noise = _FLOAT32_ROUNDING * level * float(np.abs(inverse).max()) / step
    if size <= _NOISE_MARGIN * noise:
        return None
    return float(np.median(np.hypot(kx - g1x - g2y, ky - g2x + g1y))) / size


def check_shear(
    kappa: Array, shear1: Array, shear2: Array, axes: dict[str, Array | None], chosen: str, inverse: Array
) -> float | None:
    """Misfit of the identities between the derivatives of convergence and shear.

    Parameters
    ----------
    kappa, shear1, shear2 : ndarray, shape (rows, columns)
        As they are in the files; all finite.
    axes : dict of str to ndarray
        Directions of the axes that the components may refer to, as columns, by the name of the choice; None: not
        possible for this map.
    chosen : str
        The choice that was made.
    inverse : ndarray, shape (2, 2)
        Steps in column and row of one arcsec to east and north.

    Returns
    -------
    float or None
        Median misfit over the median size of the derivatives; None where these are lost in rounding.

    Raises
    ------
    InputError
        If the identities fail; the message names the signs, or the axes, that would fit.
    """
    if np.median(np.abs(kappa)) > _LARGEST_KAPPA:
        raise InputError(
            f"convergence must be a number of order 1, got a median of {np.median(np.abs(kappa)):.3g}; divide it by "
            "the critical surface density"
        )

    def misfit(choice: str, first: int, second: int) -> float | None:
        directions = axes[choice]
        if directions is None:
            return None
        turned = turn_shear(first * shear1, second * shear2, directions)
        return _identity_misfit(Fields(kappa, *turned), inverse)

    own = misfit(chosen, 1, 1)
    if own is None or own < _GOOD_MISFIT:
        return own
    others = sorted((choice for choice in axes if choice != chosen), key=str)
    fitting = [
        (choice, first, second)
        for choice, (first, second) in product([chosen, *others], [(1, 1), (1, -1), (-1, 1), (-1, -1)])
        if (one := misfit(choice, first, second)) is not None and one < min(own / 3, _MOST_MISFIT)
    ]
    if fitting:
        raise InputError(f"convergence and shear contradict each other; {_advice(fitting, chosen)}")
    directions = axes[chosen]
    if directions is not None:
        own_frame = Fields(kappa, *turn_shear(shear1, shear2, directions))
        factor = _shear_factor(own_frame, inverse)
        scaled = _identity_misfit(
            own_frame._replace(gamma1=factor * own_frame[1], gamma2=factor * own_frame[2]), inverse
        )
        if abs(factor - 1) > _OWN_FACTOR and scaled is not None and scaled < min(own / 3, _MOST_MISFIT):
            raise InputError(
                f"convergence and shear contradict each other; {factor:.3g} times the shear would fit; check the "
                "source redshift that each is for"
            )
    if own > _MOST_MISFIT:
        raise InputError(
            f"convergence and shear must belong to one lens, but their derivatives differ by {own:.0%} whatever the "
            "signs; check the files"
        )
    return own


def _shear_factor(fields: Fields, inverse: Array) -> float:
    """What the shear must be multiplied by for its derivatives to be those of the convergence."""
    (kx, ky), (g1x, g1y), (g2x, g2y) = (_slopes(one, inverse, 1) for one in fields)
    along, across = g1x + g2y, g2x - g1y
    below = float(np.median(along**2 + across**2))
    return float(np.median(kx * along + ky * across)) / below if below > 0 else 1.0


def check_curl(
    deflection1: Array, deflection2: Array, axes: dict[str, Array | None], chosen: str, inverse: Array
) -> None:
    """Refuse deflections that no mass can have: they are a gradient, and towards mass.

    Parameters
    ----------
    deflection1, deflection2 : ndarray, shape (rows, columns)
        Along the axes of the choice [arcsec]; all finite.
    axes, chosen, inverse
        As for `check_shear`.

    Raises
    ------
    InputError
        If they have a curl, or point away from the mass; the message names the signs, or the axes, that would fit.
    """

    def curl(choice: str, first: int, second: int) -> tuple[float, float] | None:
        """Median of the curl over that of the derivatives, and median convergence."""
        directions = axes[choice]
        if directions is None:
            return None
        (a, b), (c, d) = directions
        one, two = first * deflection1, second * deflection2
        (xx, xy), (yx, yy) = (_slopes(part, inverse, 1) for part in (a * one + b * two, c * one + d * two))
        size = float(np.median(np.sqrt(xx**2 + xy**2 + yx**2 + yy**2)))
        level = float(np.median(np.hypot(one, two)))
        if size <= _NOISE_MARGIN * _FLOAT32_ROUNDING * level * float(np.abs(inverse).max()):
            return None
        return float(np.median(np.abs(xy - yx))) / size, float(np.median(xx + yy)) / 2

    own = curl(chosen, 1, 1)
    if own is None or (own[0] < _MOST_MISFIT and own[1] > _LEAST_KAPPA):
        return
    others = sorted((choice for choice in axes if choice != chosen), key=str)
    fitting = []
    for choice, (first, second) in product([chosen, *others], [(1, 1), (1, -1), (-1, 1), (-1, -1)]):
        one = curl(choice, first, second)
        if one is not None and one[0] < _GOOD_MISFIT and one[1] > 0:
            fitting.append((choice, first, second))
    problem = "have a curl" if own[0] >= _MOST_MISFIT else "point away from the mass"
    advice = _advice(fitting, chosen, "deflection") if fitting else "check their signs, axes and order"
    raise InputError(f"deflections must be the gradient of a potential, but {problem}; {advice}")


def _signed(first: int, second: int, what: str) -> str:
    return f"({'-' if first < 0 else '+'}{what}1, {'-' if second < 0 else '+'}{what}2)"


def _advice(fitting: list[tuple[str, int, int]], chosen: str, what: str = "shear") -> str:
    """What would make the components fit: other axes with the signs as they are before other signs."""
    plain = [f'axes = "{choice}"' for choice, first, second in fitting if (first, second) == (1, 1)]
    signs = [_signed(first, second, what) for choice, first, second in fitting if choice == chosen]
    parts = [f"the signs that would fit are {' and '.join(signs)}"] if signs else []
    parts += [f"{' or '.join(plain)} would fit"] if plain else []
    if not parts:
        choice, first, second = fitting[0]
        parts = [f'axes = "{choice}" with {_signed(first, second, what)} would fit']
    return "; ".join(parts)


def check_deflections(given: Fields, derived: Fields) -> float:
    """Difference between convergence and shear and those of the deflections, over their median size.

    Parameters
    ----------
    given, derived : Fields
        On the same grid, all finite; from the maps and from the deflections.

    Returns
    -------
    float
        Median difference over the median size.

    Raises
    ------
    InputError
        If they do not belong together; the message names the factor that would fit, if there is one.
    """

    def misfit(factor: float) -> float:
        apart = [one - factor * other for one, other in zip(given, derived, strict=True)]
        size = np.sqrt(sum(one**2 for one in given))
        return float(np.median(np.sqrt(sum(one**2 for one in apart))) / max(float(np.median(size)), 1e-12))

    own = misfit(1.0)
    if own < _DEFLECTION_MISFIT:
        return own
    above = sum(float(np.median(one * other)) for one, other in zip(given, derived, strict=True))
    below = sum(float(np.median(other * other)) for other in derived)
    factor = above / below if below > 0 else 0.0
    advice = "check their signs, axes and unit"
    if factor and misfit(factor) < _DEFLECTION_MISFIT:
        advice = f"{factor:.4g} times the deflections would fit; check deflection_unit and source_redshift"
    raise InputError(f"deflections must agree with convergence and shear, but differ by {own:.0%}; {advice}")
