"""Fields of point masses under macro convergence and shear, and their lens map."""

from __future__ import annotations

import itertools
import os
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from crossing.errors import InputError
from crossing.optics.local import LocalLens
from crossing.shooting.tree import Tree, build_tree, evaluate, order_for

if TYPE_CHECKING:
    from crossing.stars.mass_functions import MassFunction, Population

__all__ = ["StarField"]

_LOST_FLUX = 5e-4
_SHEAR_REACH = 5.0
_BYTES_PER_STAR = 900.0
_MOST_STARS = 20_000_000


class StarField:
    """Point masses that fill a rectangle of the image plane, on top of smooth matter and shear.

    Parameters
    ----------
    x, y : array_like, shape (n,)
        Positions, in Einstein radii of one solar mass; x is the axis of lam_t.
    mass : array_like, shape (n,) or ()
        Masses [Msun], positive.
    kappa, gamma : float
        Total convergence and shear. The mean sheet of the stars over the rectangle is taken out, so that kappa holds
        all matter, inside the rectangle and beyond.
    half_width, half_height : float
        The rectangle is ``|x| < half_width``, ``|y| < half_height``.
    gradient : float or (float, float), optional
        Change of lam_t per unit x and y; see Notes.
    sheet : bool
        False leaves the sheet in: isolated lenses, and kappa, gamma are the smooth field around them.
    accuracy : float
        Relative accuracy of deflections and their derivatives against straight summation.
    lost_flux : float
        Share of a window's flux that may come from beyond the region of rays; see `ray_region`.
    description : dict, optional
        What the field was drawn from, for provenance.

    Raises
    ------
    InputError
        If an array is not finite, a mass is not positive, a star lies outside the rectangle, or the stars hold more
        convergence than kappa.

    Notes
    -----
    ``u = lam_t x + gx x^2/2 + gy x y - alpha_x`` and ``v = lam_r y + gy x^2/2 - alpha_y``, where alpha is the
    deflection of the stars less that of a uniform rectangle of the same mean density.
    """

    def __init__(
        self,
        x: ArrayLike,
        y: ArrayLike,
        mass: ArrayLike,
        kappa: float,
        gamma: float,
        half_width: float,
        half_height: float,
        gradient: float | tuple[float, float] | None = None,
        *,
        sheet: bool = True,
        accuracy: float = 1e-6,
        lost_flux: float = _LOST_FLUX,
        description: dict[str, Any] | None = None,
    ) -> None:
        self.x, self.y, self.mass = _stars(x, y, mass)
        self.kappa, self.gamma = _finite("kappa", kappa), _finite("gamma", gamma)
        self.half_width, self.half_height = _positive("half_width", half_width), _positive("half_height", half_height)
        self.lens = LocalLens(self.kappa, self.gamma, gradient)
        self.gradient = (0.0, 0.0) if self.lens.gradient is None else _pair(self.lens.gradient)
        self.sheet = sheet
        if not 1e-14 <= accuracy <= 1e-2:
            raise InputError(f"`accuracy` must be between 1e-14 and 1e-2, got {accuracy:g}")
        self.accuracy = accuracy
        if not 1e-12 <= lost_flux < 1.0:
            raise InputError(f"`lost_flux` must be between 1e-12 and 1, got {lost_flux:g}")
        self.lost_flux = lost_flux
        outside = (np.abs(self.x) > half_width) | (np.abs(self.y) > half_height)
        if sheet and outside.any():
            raise InputError(
                f"`x`, `y` must lie in the rectangle, {int(outside.sum())} stars do not; give a larger half_width or "
                "half_height, or sheet=False"
            )
        area = 4.0 * self.half_width * self.half_height
        self.kappa_star = float(np.pi * self.mass.sum() / area) if sheet else 0.0
        if self.kappa_star > self.kappa * (1.0 + 1e-9) + 1e-12:
            raise InputError(
                f"`kappa` must be at least the {self.kappa_star:.6g} that is in stars, got {self.kappa:g}; it is the "
                "total convergence"
            )
        self.description = description or {"stars": "given one by one"}
        self._tree: Tree | None = None
        self._region: tuple[float, float, float, float] | None = None

    def __repr__(self) -> str:
        return (
            f"StarField({len(self.x)} stars, kappa={self.kappa:g}, gamma={self.gamma:g}, "
            f"kappa_star={self.kappa_star:g}, half_width={self.half_width:g}, half_height={self.half_height:g})"
        )

    def __len__(self) -> int:
        return len(self.x)

    @property
    def images(self) -> Literal[1, 2]:
        """Macro images whose micro-images are in the field: 2 with a gradient, where a pair merges, else 1."""
        return 2 if any(self.gradient) else 1

    @property
    def expected_mean(self) -> float | None:
        """Mean magnification 1/abs((1-kappa)^2 - gamma^2), where the macro lens is constant and the stars fill it."""
        return self.lens.magnification if self.images == 1 and self.sheet else None

    @property
    def heavy_mass(self) -> float:
        """<m^2>/<m> [Msun], which sets the tail of the deflections."""
        return float((self.mass**2).sum() / self.mass.sum()) if len(self.mass) else 0.0

    @classmethod
    def draw(
        cls,
        kappa: float,
        gamma: float,
        kappa_star: float | None,
        window: float | tuple[float, float],
        mass_function: MassFunction | None = None,
        populations: Sequence[Population] | None = None,
        gradient: float | tuple[float, float] | None = None,
        seed: int | np.random.SeedSequence = 0,
        *,
        accuracy: float = 1e-6,
        lost_flux: float = _LOST_FLUX,
    ) -> StarField:
        """Draw a random field that serves a window of the source plane.

        Parameters
        ----------
        kappa, gamma : float
            Total convergence and shear.
        kappa_star : float or None
            Convergence in stars; None with `populations`.
        window : float or (float, float)
            Half sizes of the source-plane window to be served, along u and v, about the origin.
        mass_function : MassFunction, optional
            Masses of the stars; one solar mass if None.
        populations : sequence of Population, optional
            Several populations, each with its own convergence and mass function, in place of the two above.
        gradient : float or (float, float), optional
            Change of lam_t per unit x and y.
        seed : int or numpy.random.SeedSequence
            Seed; the same one gives the same field.
        accuracy : float
            See the class.
        lost_flux : float
            Share of the window's flux that may come from beyond the region of rays.

        Returns
        -------
        StarField
            Its kappa_star is that asked for: the last star of each population gets the mass that is missing.

        Raises
        ------
        InputError
            If the convergences do not fit together or the stars would not fit into memory.
        """
        from crossing.stars.mass_functions import Population, single

        if (kappa_star is None) == (populations is None):
            raise InputError("give either `kappa_star` or `populations`")
        if populations is None:
            populations = [Population(kappa_star or 0.0, mass_function or single(1.0))]
        total = sum(part.kappa_star for part in populations)
        if not 0.0 <= total <= kappa * (1.0 + 1e-12):
            raise InputError(f"the populations' kappa_star must sum to between 0 and kappa, got {total:g} of {kappa:g}")
        half = (float(window), float(window)) if np.ndim(window) == 0 else (float(window[0]), float(window[1]))  # type: ignore[index, arg-type]
        heavy = sum(
            part.kappa_star * part.mass_function.moment(2) / part.mass_function.moment(1) for part in populations
        )
        lens = LocalLens(kappa, gamma, gradient)
        reach = ray_region(lens, half, deflection_reach(heavy, lost_flux))
        margin = _SHEAR_REACH * np.sqrt(heavy) / total if total > 0 else 1.0
        half_width, half_height = reach[0] + margin, reach[1] + margin
        area = 4.0 * half_width * half_height
        expected = sum(part.kappa_star * area / (np.pi * part.mass_function.moment(1)) for part in populations)
        _check_memory(expected)
        root = seed if isinstance(seed, np.random.SeedSequence) else np.random.SeedSequence(seed)
        masses = []
        for number, part in enumerate(populations):
            rng = np.random.default_rng(np.random.SeedSequence(root.entropy, spawn_key=(*root.spawn_key, 0, number)))
            masses.append(_masses(part, area, rng))
        mass = np.concatenate(masses) if masses else np.empty(0)
        rng = np.random.default_rng(np.random.SeedSequence(root.entropy, spawn_key=(*root.spawn_key, 1)))
        x, y = rng.uniform(-half_width, half_width, len(mass)), rng.uniform(-half_height, half_height, len(mass))
        description = {
            "seed": {"entropy": str(root.entropy), "spawn_key": list(root.spawn_key)},
            "window_half": list(half),
            "lost_flux": lost_flux,
            "populations": [
                {"kappa_star": part.kappa_star, "mass_function": part.mass_function.name, "stars": len(one)}
                for part, one in zip(populations, masses, strict=True)
            ],
        }
        return cls(
            x, y, mass, kappa, gamma, half_width, half_height, gradient,
            accuracy=accuracy, lost_flux=lost_flux, description=description,
        )  # fmt: skip

    def ray_region(self, half: tuple[float, float], center: tuple[float, float] = (0.0, 0.0)) -> tuple[float, float]:
        """Half sizes of the part of the image plane whose rays may land in a window of the source plane.

        Parameters
        ----------
        half : (float, float)
            Half sizes of the window.
        center : (float, float)
            Its centre.
        """
        size = (half[0] + abs(center[0]), half[1] + abs(center[1]))
        if self.sheet:
            return ray_region(self.lens, size, deflection_reach(self.kappa_star * self.heavy_mass, self.lost_flux))
        return _isolated_region(self, size)

    def tree(self, region: tuple[float, float, float, float], *, exact: bool = False) -> Tree:
        """Leaves that cover at least a region (x_low, x_high, y_low, y_high); kept for the next call.

        With `exact` they cover no more than it, so that they do not depend on what was asked for before.
        """
        held = self._region
        if self._tree is None or held is None or (held != region if exact else not _covers(held, region)):
            if held is not None and not exact:
                low, high = np.minimum(held, region), np.maximum(held, region)
                region = (float(low[0]), float(high[1]), float(low[2]), float(high[3]))
            sheet = (self.half_width, self.half_height, self.kappa_star) if self.kappa_star > 0 else None
            self._tree = build_tree(self.x, self.y, self.mass, sheet, region, order_for(self.accuracy))
            self._region = region
        return self._tree

    @property
    def stars(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """(x, y, mass): what the kernels take."""
        return (self.x, self.y, self.mass)

    @property
    def lens_numbers(self) -> NDArray[np.float64]:
        """(5,) lam_t, lam_r, gradient along x and y, convergence of the stars' sheet: what the kernels take."""
        return np.array([self.lens.lam_t, self.lens.lam_r, *self.gradient, self.kappa_star])

    def source_position(self, x: ArrayLike, y: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Where rays through image-plane points land: (u, v), broadcast over x and y."""
        x, y = _points(x, y)
        ax, ay = self.deflection(x, y)
        gx, gy = self.gradient
        u = self.lens.lam_t * x + 0.5 * gx * x**2 + gy * x * y - ax
        return u, self.lens.lam_r * y + 0.5 * gy * x**2 - ay

    def deflection(self, x: ArrayLike, y: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Deflection (alpha_x, alpha_y) of the stars less their mean sheet; broadcasts; not finite on a star."""
        x, y = _points(x, y)
        series, inside = self._series(x, y)
        sheet = self.kappa_star * inside
        return series[..., 0] - sheet * x, -series[..., 1] - sheet * y

    def jacobian(self, x: ArrayLike, y: ArrayLike) -> NDArray[np.float64]:
        """Jacobian d(u, v)/d(x, y), shape (..., 2, 2)."""
        x, y = _points(x, y)
        series, inside = self._series(x, y)
        sheet, (gx, gy) = self.kappa_star * inside, self.gradient
        out = np.empty((*x.shape, 2, 2))
        out[..., 0, 0] = self.lens.lam_t + sheet + gx * x + gy * y - series[..., 2]
        out[..., 0, 1] = out[..., 1, 0] = gy * x + series[..., 3]
        out[..., 1, 1] = self.lens.lam_r + sheet + series[..., 2]
        return out

    def _series(
        self, x: NDArray[np.float64], y: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Value and derivatives of the tree's series, (..., 7), and whether points are inside the sheet."""
        if not (np.isfinite(x).all() and np.isfinite(y).all()):
            raise InputError("`x`, `y` must be finite")
        flat_x, flat_y = np.ascontiguousarray(x.ravel()), np.ascontiguousarray(y.ravel())
        wide, high = self.half_width, self.half_height
        region = (
            float(min(flat_x.min(initial=0.0), -wide)),
            float(max(flat_x.max(initial=0.0), wide)),
            float(min(flat_y.min(initial=0.0), -high)),
            float(max(flat_y.max(initial=0.0), high)),
        )
        tree = self.tree(region)
        out = np.empty((flat_x.size, 7))
        evaluate(flat_x, flat_y, tree.arrays, tree.roots, tree.root_node, tree.children, self.stars, out)
        inside = tree.inside[out[:, 6].astype(np.int64)].astype(np.float64)
        return out.reshape((*x.shape, 7)), inside.reshape(x.shape)


def deflection_reach(heavy_kappa: float, lost_flux: float) -> float:
    """Deflection that only the share `lost_flux` of the rays exceeds.

    Notes
    -----
    From the tail P(>alpha) = kappa_star <m^2>/<m> / alpha^2, whose factor is `heavy_kappa`.

    References
    ----------
    .. [1] Katz N., Balbus S. & Paczynski B., 1986, ApJ 306, 2
    """
    return float(np.sqrt(heavy_kappa / lost_flux))


def ray_region(lens: LocalLens, half: tuple[float, float], reach: float) -> tuple[float, float]:
    """Half sizes of the image-plane region from which rays may land in a window, for deflections up to `reach`."""
    gx, gy = (0.0, 0.0) if lens.gradient is None else _pair(lens.gradient)
    far_u, far_v = half[0] + reach, half[1] + reach
    if lens.lam_r == 0.0 or (lens.lam_t == 0.0 and gx == gy == 0.0):
        raise InputError("`kappa`, `gamma` lie on the critical curve; without a gradient the field would be endless")
    wide = _furthest_root(lens, gx, gy, far_u, far_v)
    return wide, (far_v + 0.5 * abs(gy) * wide**2) / abs(lens.lam_r)


def _furthest_root(lens: LocalLens, gx: float, gy: float, far_u: float, far_v: float) -> float:
    """Largest abs(x) from which the smooth map reaches abs(u) <= far_u within abs(v) <= far_v.

    With y = (v - gy x^2/2) / lam_r, u is a cubic in x. Without its cubic term it has the merging pair alone; with it, a
    third image that is far off, beyond where a local map holds, unless gx is so small that the three are one group.
    """
    if gx == gy == 0.0:
        return far_u / abs(lens.lam_t)
    furthest = []
    for third in (0.0, -0.5 * gy**2 / lens.lam_r):
        found = [0.0 if third or gx else np.inf]
        for sign_u, sign_v in itertools.product((1.0, -1.0), repeat=2):
            shifted = lens.lam_t + sign_v * gy * far_v / lens.lam_r
            roots = np.roots([third, 0.5 * gx, shifted, -sign_u * far_u])
            found += [abs(root.real) for root in roots if abs(root.imag) < 1e-6 * abs(root)]
        furthest.append(max(found))
    return float(min(furthest)) if gy != 0.0 else float(furthest[0])


def _isolated_region(field: StarField, half: tuple[float, float]) -> tuple[float, float]:
    """Beyond this the stars' whole mass cannot bring a ray back into the window."""
    mass = float(field.mass.sum())
    if any(field.gradient):
        # Farther than sqrt(mass) from all stars, no deflection exceeds sqrt(mass).
        wide, high = ray_region(field.lens, half, np.sqrt(mass))
        far_x, far_y = (float(np.abs(stars).max(initial=0.0) + np.sqrt(mass)) for stars in (field.x, field.y))
        return max(wide, far_x), max(high, far_y)
    sizes = []
    for lam, stars, size in ((field.lens.lam_t, field.x, half[0]), (field.lens.lam_r, field.y, half[1])):
        if lam == 0.0:
            raise InputError(
                "`kappa`, `gamma` lie on the critical curve; without a gradient the field would be endless"
            )
        extent = float(np.abs(stars).max(initial=0.0))
        far = size + abs(lam) * extent
        sizes.append(extent + (far + np.sqrt(far**2 + 4.0 * abs(lam) * mass)) / (2.0 * abs(lam)))
    return sizes[0], sizes[1]


def _masses(part: Population, area: float, rng: np.random.Generator) -> NDArray[np.float64]:
    """Masses that make up a population's convergence exactly; the last one is what is missing."""
    wanted = part.kappa_star * area / np.pi
    if wanted <= 0.0:
        return np.empty(0)
    mean = part.mass_function.moment(1)
    drawn = part.mass_function.sample(int(wanted / mean + 6.0 * np.sqrt(wanted / mean) + 20), rng)
    while drawn.sum() < wanted:
        drawn = np.concatenate([drawn, part.mass_function.sample(len(drawn) // 4 + 20, rng)])
    before = np.concatenate([[0.0], np.cumsum(drawn)])
    count = int(np.searchsorted(before, wanted)) - 1
    missing = wanted - before[count]
    if missing <= 1e-12 * wanted:
        return np.asarray(drawn[:count])
    return np.append(drawn[:count], missing)


def _check_memory(stars: float) -> None:
    held = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") if hasattr(os, "sysconf") else 8 << 30
    needed = stars * _BYTES_PER_STAR
    if stars > _MOST_STARS or needed > 0.6 * held:
        raise InputError(
            f"the window needs about {stars:.3g} stars and {needed / 2**30:.3g} GiB, more than fits; "
            "choose a smaller window, a larger lam_t, or a smaller kappa_star"
        )


def _covers(held: tuple[float, float, float, float], region: tuple[float, float, float, float]) -> bool:
    return held[0] <= region[0] and held[1] >= region[1] and held[2] <= region[2] and held[3] >= region[3]


def _pair(gradient: Any) -> tuple[float, float]:
    return (float(gradient), 0.0) if np.ndim(gradient) == 0 else (float(gradient[0]), float(gradient[1]))


def _points(x: ArrayLike, y: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    one, two = np.broadcast_arrays(np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64))
    return one, two


def _stars(x: ArrayLike, y: ArrayLike, mass: ArrayLike) -> tuple[NDArray[np.float64], ...]:
    arrays = [np.atleast_1d(np.asarray(item, dtype=np.float64)) for item in (x, y, mass)]
    try:
        arrays = [np.array(item, order="C") for item in np.broadcast_arrays(*arrays)]
    except ValueError:
        shapes = ", ".join(str(item.shape) for item in arrays)
        raise InputError(f"`x`, `y`, `mass` must have the same shape, got {shapes}") from None
    if arrays[0].ndim != 1:
        raise InputError(f"`x`, `y`, `mass` must be one-dimensional, got shape {arrays[0].shape}")
    for name, item in zip(("x", "y", "mass"), arrays, strict=True):
        if not np.isfinite(item).all():
            raise InputError(
                f"`{name}` must be finite, got a value that is not at star {int(np.argmin(np.isfinite(item)))}"
            )
    if (arrays[2] <= 0.0).any():
        raise InputError(f"`mass` must be positive, got {arrays[2].min():g}")
    return tuple(arrays)


def _finite(name: str, value: float) -> float:
    if not np.isfinite(value):
        raise InputError(f"`{name}` must be finite, got {value}")
    return float(value)


def _positive(name: str, value: float) -> float:
    if not 0.0 < value < np.inf:
        raise InputError(f"`{name}` must be positive and finite, got {value}")
    return float(value)
