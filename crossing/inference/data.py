"""A light curve prepared for fitting: plain arrays, relative times, and the priors of its reference levels."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from crossing.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from crossing.photometry import LevelGroup, LightCurve

__all__ = ["FitData", "prepare"]

# A free level is given a Gaussian prior this many times wider than the spread of its fluxes: flat where it matters,
# and the same for every model, so that it cancels between their evidences.
_LEVEL_WIDTH = 10.0


@dataclass(frozen=True, slots=True, kw_only=True)
class FitData:
    """Observations of one event as the fits use them.

    Rows are detections first, then upper limits; fluxes are nJy, times are days since `time_zero`.
    """

    time_zero: float
    """MJD of the time zero."""
    bands: tuple[str, ...]
    """Names of the bands, in the order of the band indices."""
    limb_darkening: NDArray[np.float64]
    """(n_bands,) linear limb-darkening coefficients."""
    time: NDArray[np.float64]
    """(n,) times of the detections [d]."""
    flux: NDArray[np.float64]
    """(n,) fluxes [nJy]."""
    sigma: NDArray[np.float64]
    """(n,) noise of each row alone, without the part shared through a reference image [nJy]."""
    band: NDArray[np.intp]
    """(n,) band index."""
    level: NDArray[np.intp]
    """(n,) index of the reference level."""
    limit_time: NDArray[np.float64]
    """(n_limits,) times of the upper limits [d]."""
    limit: NDArray[np.float64]
    """(n_limits,) upper limits [nJy]."""
    limit_sigma: NDArray[np.float64]
    """(n_limits,) noise behind each limit [nJy]."""
    limit_band: NDArray[np.intp]
    """(n_limits,) band index."""
    limit_level: NDArray[np.intp]
    """(n_limits,) index of the reference level."""
    level_band: NDArray[np.intp]
    """(n_levels,) band index of each reference level."""
    level_width: NDArray[np.float64]
    """(n_levels,) standard deviation of the level's Gaussian prior about zero [nJy]."""
    level_nonnegative: NDArray[np.bool_]
    """(n_levels,) whether the level cannot be negative (total fluxes)."""
    level_name: tuple[str, ...]
    """Names of the reference levels, for tables."""
    reference_time: NDArray[np.float64]
    """(n_reference,) reference epochs of all levels [d]."""
    reference_level: NDArray[np.intp]
    """(n_reference,) the level that each reference epoch belongs to."""
    scatter: float = 0.0
    """Extra scatter that `sigma` and `limit_sigma` contain, in median errors of each band."""

    @property
    def n_bands(self) -> int:
        """Number of bands with at least one row."""
        return len(self.bands)

    @property
    def n_levels(self) -> int:
        """Number of reference levels."""
        return len(self.level_name)

    @property
    def all_times(self) -> NDArray[np.float64]:
        """Times of detections, limits and reference epochs, in this order [d]."""
        return np.concatenate([self.time, self.limit_time, self.reference_time])

    @property
    def all_bands(self) -> NDArray[np.intp]:
        """Band index of every entry of `all_times`."""
        return np.concatenate([self.band, self.limit_band, self.level_band[self.reference_level]])

    @property
    def span(self) -> tuple[float, float]:
        """First and last time of any row [d]."""
        times = np.concatenate([self.time, self.limit_time])
        return float(times.min()), float(times.max())

    def split(self, shape: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Turn model shapes at `all_times` into shapes as measured: (detections, limits).

        Where the reference image holds the star itself, what is measured is the change since the reference epochs:
        the mean of the shape over them is taken off.
        """
        n, n_limits = self.time.size, self.limit_time.size
        detected, limited = shape[..., :n], shape[..., n : n + n_limits]
        if not self.reference_time.size:
            return detected, limited
        member = np.zeros((self.reference_time.size, self.n_levels))
        member[np.arange(self.reference_time.size), self.reference_level] = 1.0
        member /= np.maximum(member.sum(axis=0), 1.0)
        reference = shape[..., n + n_limits :] @ member
        return detected - reference[..., self.level], limited - reference[..., self.limit_level]

    def with_scatter(self, factor: float) -> FitData:
        """The same data with an extra scatter of `factor` times each band's median error, added in quadrature."""
        if factor == 0.0:
            return self
        extra = np.array([np.median(self.sigma[self.band == b]) if (self.band == b).any() else 0.0
                          for b in range(self.n_bands)])  # fmt: skip
        sigma = np.hypot(self.sigma, factor * extra[self.band])
        limit_sigma = np.hypot(self.limit_sigma, factor * extra[self.limit_band])
        return replace(self, sigma=sigma, limit_sigma=limit_sigma, scatter=factor)


def _level_prior(
    group: LevelGroup, flux: NDArray[np.float64], error: NDArray[np.float64]
) -> tuple[float, NDArray[np.float64]]:
    """Prior width of a level and the errors of its rows without the noise that they share (both nJy)."""
    if group.kind != "reference":
        spread = float(np.ptp(flux)) + float(np.max(np.abs(flux))) + float(np.median(error))
        return _LEVEL_WIDTH * spread, error
    shared = group.reference_err
    if shared is None:
        # A difference of one image and a mean of k like it has the variance s^2 (1 + 1/k): the shared part is its
        # 1/(k+1)th. The smallest error is taken, so that no row is left with less than nothing of its own.
        shared = float(error.min()) / np.sqrt(len(group.reference_epochs) + 1.0)
    if shared >= error.min():
        msg = (
            f"reference_err must be smaller than every flux_err of band {group.band}, which contains it, got "
            f"{shared:.3g} nJy against {error.min():.3g} nJy"
        )
        raise InputError(msg, source=group.source, where="photometry.reference_err")
    return float(shared), np.sqrt(error**2 - shared**2)


def _check_rows(curve: LightCurve, rows: NDArray[np.bool_]) -> None:
    """Light curves out of files are checked by the reader; others may hold anything."""
    good = np.isfinite(curve.flux) & np.isfinite(curve.flux_err) & (curve.flux_err > 0.0)
    wrong = np.flatnonzero(rows & ~good)
    if wrong.size:
        k = wrong[0]
        msg = (
            f"flux must be finite and flux_err a positive number, got {curve.flux[k]:g} and {curve.flux_err[k]:g} nJy "
            f"at MJD {curve.time[k]:.5f}; correct the row or leave it out"
        )
        raise InputError(msg, where="photometry")


def prepare(curve: LightCurve, limb_darkening: Mapping[str, float]) -> FitData:
    """Arrange the used rows of a light curve for fitting.

    Parameters
    ----------
    curve : LightCurve
        Observations; rows that are excluded stay out.
    limb_darkening : mapping of str to float
        Linear coefficient of each band, in the order that the fit keeps; a band that is missing is taken as uniform.

    Raises
    ------
    InputError
        If no used row is a detection, or one has a flux or an error that no likelihood can take.
    """
    rows = curve.used
    _check_rows(curve, rows)
    detected, limited = rows & ~curve.is_upper_limit, rows & curve.is_upper_limit
    if not detected.any():
        raise InputError("the light curve has no detection; give at least one measured flux", where="photometry")
    present = set(map(str, curve.band[rows]))
    bands = tuple(name for name in dict.fromkeys([*limb_darkening, *map(str, curve.band[rows])]) if name in present)
    numbers = np.array([bands.index(str(name)) if str(name) in bands else -1 for name in curve.band], dtype=np.intp)
    kept = [k for k in range(len(curve.levels)) if (curve.level[rows] == k).any()]
    renumber = np.full(len(curve.levels), -1, dtype=np.intp)
    renumber[kept] = np.arange(len(kept))
    level = renumber[curve.level]
    error = curve.flux_err.astype(np.float64)
    width = np.empty(len(kept))
    for new, old in enumerate(kept):
        members = rows & (level == new)
        width[new], error[members] = _level_prior(curve.levels[old], curve.flux[members], error[members])
    groups = [curve.levels[old] for old in kept]
    epochs = [(new, epoch) for new, group in enumerate(groups) for epoch in group.reference_epochs]
    time_zero = float(np.floor(np.median(curve.time[detected])))
    return FitData(
        time_zero=time_zero,
        bands=bands,
        limb_darkening=np.array([float(limb_darkening.get(name, 0.0)) for name in bands]),
        time=curve.time[detected] - time_zero,
        flux=curve.flux[detected],
        sigma=error[detected],
        band=numbers[detected],
        level=level[detected],
        limit_time=curve.time[limited] - time_zero,
        limit=curve.flux[limited],
        limit_sigma=error[limited],
        limit_band=numbers[limited],
        limit_level=level[limited],
        level_band=np.array([bands.index(group.band) for group in groups], dtype=np.intp),
        level_width=width,
        level_nonnegative=np.array([group.kind == "absolute" for group in groups]),
        level_name=tuple(f"{group.band} ({group.kind})" for group in groups),
        reference_time=np.array([epoch - time_zero for _, epoch in epochs]),
        reference_level=np.array([new for new, _ in epochs], dtype=np.intp),
    )
