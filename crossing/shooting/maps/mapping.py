"""Magnification maps of a window of the source plane."""

from __future__ import annotations

import hashlib
import os
import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, replace
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.progress import track
from crossing.shooting.compiled import announce_compilation
from crossing.shooting.maps.area import deposit_leaves
from crossing.shooting.maps.checkpoint import Keeper
from crossing.shooting.maps.counting import count_leaves
from crossing.shooting.maps.edges import running_sum
from crossing.shooting.maps.magnification_map import MagnificationMap

if TYPE_CHECKING:
    from crossing.shooting.field import StarField
    from crossing.shooting.tree import Tree

__all__ = ["MapPlan", "magnification_map", "plan_map"]

# The image plane is cut into this many shares whatever the number of threads, and their maps are added in order.
_BLOCKS = 24
# A check map with a tolerance this much larger tells the error of the map, which goes about as the tolerance.
_COARSER = 4.0
_ERROR_POWER = 1.0
_MOST_PASSES = 3
# An error that exceeds the accuracy by less than this is let pass.
_SLACK = 1.2
_LARGEST_STEP = 30.0
# Sag times density that gives about the relative error 1, and the largest cell in pixels; see DEVELOPERS.md.
_TOLERANCE = 0.42
_LARGEST_CELL = 16.0
_CHECKPOINT_SECONDS = 15.0


@dataclass(frozen=True, slots=True, kw_only=True)
class MapPlan:
    """What a map will take, estimated from a sample of its leaves."""

    stars: int
    """Number of stars."""
    leaves: int
    """Number of leaves of the tree."""
    rays: float
    """Number of rays."""
    seconds: float
    """Time on the threads asked for [s], the tree already made."""
    bytes: int
    """Memory for the tree, the map and its buffers."""


@dataclass(frozen=True, slots=True)
class _Job:
    """One pass over all leaves."""

    field: StarField
    tree: Tree
    scale: NDArray[np.float64]
    shape: tuple[int, int]
    method: str
    step: float
    tolerance: float
    mean: float

    def run(self, leaves: NDArray[np.int64], out: NDArray[np.float64], tally: NDArray[np.float64]) -> None:
        """Map some leaves into a buffer; serial, without the interpreter's lock."""
        lens, tree, stars = self.field.lens_numbers, self.tree.arrays, self.field.stars
        if self.method == "area":
            deposit_leaves(leaves, lens, tree, stars, self.scale, self.step, self.tolerance, self.mean, out, tally)
        else:
            # As the image of a pixel is stretched, so is the lattice: else rows of rays would be wider than pixels.
            narrow, wide = (max(abs(lam), self.field.kappa_star, 1e-3) for lam in lens[:2])
            across = float(np.sqrt(wide / narrow))
            count_leaves(leaves, lens, tree, stars, self.scale, self.step * across, self.step / across, out, tally)

    @property
    def buffer_shape(self) -> tuple[int, int]:
        """Area mapping needs a column more, for the running sum."""
        return (self.shape[0], self.shape[1] + (self.method == "area"))


def magnification_map(
    field: StarField,
    center: tuple[float, float] = (0.0, 0.0),
    width: float = 10.0,
    pixels: int = 500,
    method: Literal["area", "rays"] = "area",
    accuracy: float = 1e-3,
    *,
    height: float | None = None,
    threads: int | None = None,
    error: bool = True,
    rays_per_pixel: float = 50.0,
    checkpoint: Path | None = None,
    checkpoint_seconds: float = _CHECKPOINT_SECONDS,
) -> MagnificationMap:
    """Magnification of point sources over a window of the source plane, averaged over pixels.

    Parameters
    ----------
    field : StarField
        Lenses.
    center : (float, float)
        Middle of the window (u, v), in Einstein radii of one solar mass.
    width : float
        Width of the window along u.
    pixels : int
        Pixels along u; they are square.
    method : {"area", "rays"}
        Area mapping, or counting rays as an independent check.
    accuracy : float
        Relative error per pixel that area mapping aims at, rms over the map.
    height : float, optional
        Height of the window along v; square if None.
    threads : int, optional
        Threads; all cores if None. They do not change the result.
    error : bool
        Whether to estimate the error of every pixel from a second, coarser map (a third of the time on top), and to
        make a finer one where that says that the accuracy was missed.
    rays_per_pixel : float
        Mean number of rays a pixel, for counting.
    checkpoint : pathlib.Path, optional
        File in which the state is kept from time to time and from which the same call goes on; removed at the end.
    checkpoint_seconds : float
        Least time between two writings of it.

    Returns
    -------
    MagnificationMap
        Unsigned magnifications, summed over all micro-images.

    Raises
    ------
    InputError
        If the window or the number of pixels makes no sense, or the map does not fit into memory.
    """
    _check(width, height, pixels, method, accuracy, rays_per_pixel)
    high = width if height is None else height
    rows = max(1, round(pixels * high / width))
    high = rows * width / pixels
    region = _region(field, center, width, high)
    tree = field.tree(region, exact=True)
    announce_compilation(deposit_leaves)
    job = _job(field, tree, center, width, pixels, rows, method, accuracy, rays_per_pixel)
    keeper = Keeper(checkpoint, checkpoint_seconds, _key(field, job, error), _BLOCKS)
    count = _threads(threads, job)
    spread: NDArray[np.float64] | None = None
    if error and method == "area":
        values, spread, tally = _settle(job, accuracy, keeper, count)
    else:
        values, tally = _run(job, 0, keeper, count)
        if method == "rays":
            spread = _counting_error(values, job)
    keeper.remove()
    return MagnificationMap(
        values=values,
        center=(float(center[0]), float(center[1])),
        width=float(width),
        height=float(high),
        method=method,
        accuracy=accuracy,
        error=spread,
        error_estimate=_relative(spread, values),
        images=field.images,
        expected_mean=field.expected_mean,
        rays=int(tally[0]),
        description=_description(field, tally),
    )


def _settle(
    job: _Job, accuracy: float, keeper: Keeper, threads: int
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Maps of growing fineness until the difference of the last two says that the accuracy is reached.

    Returns the last map, the estimated error of each pixel, and the tally of all passes.
    """
    previous, tally = _run(_coarser(job, _COARSER), 0, keeper, threads)
    ratio, number = _COARSER, 1
    while True:
        values, part = _run(job, number, keeper, threads)
        tally = tally + part
        # The error goes as a power of the tolerance: this much of the difference of two maps is the finer one's.
        spread = np.subtract(values, previous, out=previous)
        np.abs(spread, out=spread)
        spread /= np.sqrt(1.0 + ratio ** (2.0 * _ERROR_POWER))
        reached = _relative(spread, values)
        if not reached > _SLACK * accuracy or number == _MOST_PASSES:
            return values, spread, tally
        ratio = _step(reached, accuracy)
        job, previous, number = _coarser(job, 1.0 / ratio), values, number + 1


def _step(reached: float, accuracy: float) -> float:
    """How much smaller the tolerance must be."""
    return float(min((reached / (0.75 * accuracy)) ** (1.0 / _ERROR_POWER), _LARGEST_STEP))


def _coarser(job: _Job, factor: float) -> _Job:
    """The same job with a tolerance that is larger by a factor; lengths go with its root."""
    return replace(job, step=job.step * factor**0.5, tolerance=job.tolerance * factor)


def _counting_error(values: NDArray[np.float64], job: _Job) -> NDArray[np.float64]:
    """Poisson error of counted rays: an upper bound, for a lattice is more even than chance."""
    ray = (job.step * job.scale[2]) ** 2
    return np.asarray(np.sqrt(np.maximum(values, ray) * ray))


def plan_map(
    field: StarField,
    center: tuple[float, float] = (0.0, 0.0),
    width: float = 10.0,
    pixels: int = 500,
    method: Literal["area", "rays"] = "area",
    accuracy: float = 1e-3,
    *,
    height: float | None = None,
    threads: int | None = None,
    error: bool = True,
    rays_per_pixel: float = 50.0,
) -> MapPlan:
    """Estimate what `magnification_map` with the same arguments takes, by mapping a sample of the leaves."""
    _check(width, height, pixels, method, accuracy, rays_per_pixel)
    high = width if height is None else height
    rows = max(1, round(pixels * high / width))
    tree = field.tree(_region(field, center, width, high), exact=True)
    announce_compilation(deposit_leaves)
    job = _job(field, tree, center, width, pixels, rows, method, accuracy, rays_per_pixel)
    rays, seconds = _sample_cost(job, accuracy, error and method == "area")
    count = _threads(threads, job)
    held = int(np.prod(job.buffer_shape)) * 8
    return MapPlan(
        stars=len(field),
        leaves=len(tree),
        rays=rays,
        seconds=seconds / count,
        bytes=tree.nbytes + held * (count + 2),
    )


def _sample_cost(job: _Job, accuracy: float, settle: bool) -> tuple[float, float]:
    """Rays and seconds on one thread for a whole map, from every twentieth leaf or so; `settle` as `_settle` goes."""
    leaves = len(job.tree)
    stride = max(1, min(20, leaves // 400))
    sample = np.arange(stride // 2, leaves, stride, dtype=np.int64)
    buffer, tally, finer, finer_seconds = np.zeros(job.buffer_shape), np.zeros(3), np.zeros(3), 0.0
    job.run(sample[:0], buffer, tally)
    start = time.perf_counter()
    if settle:
        _coarser(job, _COARSER).run(sample, buffer, tally)
        np.negative(buffer, out=buffer)
    job.run(sample, buffer, tally)
    seconds = time.perf_counter() - start
    if settle:
        # Errors of leaves are independent; they count more where a map is darker than its mean, as saddles often are.
        running_sum(buffer, buffer[:, :-1], 1.0)
        spread = float(np.sqrt(np.mean(buffer[:, :-1] ** 2) * leaves / len(sample))) / job.mean
        darker = 3.0 if job.field.lens.parity == "saddle" else 1.5
        reached = darker * spread / (1.0 + _COARSER ** (2.0 * _ERROR_POWER)) ** 0.5
        if reached > _SLACK * accuracy:
            start = time.perf_counter()
            _coarser(job, 1.0 / _step(reached, accuracy)).run(sample[::4], buffer, finer)
            finer_seconds = (time.perf_counter() - start) * len(sample) / len(sample[::4])
            finer *= len(sample) / len(sample[::4])
    share = leaves / len(sample)
    return float((tally[0] + finer[0]) * share), (seconds + finer_seconds) * share


def _check(
    width: float, height: float | None, pixels: int, method: str, accuracy: float, rays_per_pixel: float
) -> None:
    for name, value in (("width", width), ("height", width if height is None else height), ("accuracy", accuracy)):
        if not (np.isfinite(value) and value > 0.0):
            raise InputError(f"`{name}` must be positive and finite, got {value}")
    if method not in ("area", "rays"):
        raise InputError(f"`method` must be area or rays, got {method!r}")
    if int(pixels) != pixels or not 1 <= pixels <= 50_000:
        raise InputError(f"`pixels` must be a whole number between 1 and 50000, got {pixels}")
    if not 1e-6 <= accuracy <= 0.5:
        raise InputError(f"`accuracy` must be between 1e-6 and 0.5, got {accuracy:g}")
    if not 0.01 <= rays_per_pixel <= 1e6:
        raise InputError(f"`rays_per_pixel` must be between 0.01 and 1e6, got {rays_per_pixel:g}")


def _region(
    field: StarField, center: tuple[float, float], width: float, height: float
) -> tuple[float, float, float, float]:
    half_x, half_y = field.ray_region((0.5 * width, 0.5 * height), center)
    return (-half_x, half_x, -half_y, half_y)


def _job(
    field: StarField,
    tree: Tree,
    center: tuple[float, float],
    width: float,
    pixels: int,
    rows: int,
    method: str,
    accuracy: float,
    rays_per_pixel: float,
) -> _Job:
    pixel = width / pixels
    scale = np.array([center[0] - 0.5 * width, center[1] - 0.5 * rows * pixel, 1.0 / pixel])
    mean = field.lens.magnification
    if not np.isfinite(mean) or field.images == 2:
        # Near the critical curve the window's own scale sets the mean: sqrt(2 / (g u)) / lam_r halfway up.
        gradient = max(abs(field.gradient[0]), 1e-300)
        mean = 2.0 / (abs(field.lens.lam_r) * np.sqrt(2.0 * gradient * max(width, 1.0)))
    if method == "rays":
        return _Job(
            field, tree, scale, (rows, pixels), method, pixel * float(np.sqrt(mean / rays_per_pixel)), 0.0, mean
        )
    step = _LARGEST_CELL * pixel / max(abs(field.lens.lam_r), field.kappa_star, 0.1)
    return _Job(field, tree, scale, (rows, pixels), method, step, _TOLERANCE * accuracy, max(mean, 1.0))


def _threads(threads: int | None, job: _Job) -> int:
    """Threads to use: as asked for, as many as there are cores, and no more than there is memory for buffers."""
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    wanted = cores if threads is None else max(1, threads)
    pages = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") if hasattr(os, "sysconf") else 8 << 30
    held = 8 * int(np.prod(job.buffer_shape))
    if 3 * held > 0.8 * pages:
        raise InputError(
            f"the map needs {3 * held / 2**30:.1f} GiB for {job.shape[0]} x {job.shape[1]} pixels; choose fewer pixels"
        )
    return int(max(1, min(wanted, 0.8 * pages // held - 2)))


def _run(job: _Job, number: int, keeper: Keeper, threads: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Map all leaves: shares in threads, each into a buffer of its own, added up in a fixed order."""
    total, tally, first = keeper.restore(number, job.buffer_shape)
    order = np.arange(len(job.tree), dtype=np.int64)
    spare = [np.zeros(job.buffer_shape) for _ in range(min(threads, _BLOCKS - first))]
    lock = threading.Lock()

    def work(block: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        with lock:
            buffer = spare.pop()
        part = np.zeros(3)
        job.run(order[block::_BLOCKS], buffer, part)
        return buffer, part

    done = first
    try:
        with _pool(len(spare)) as submit:
            pending: list[Future[Any]] = []
            ahead = first
            for block in track(range(first, _BLOCKS), f"mapping, pass {number + 1}"):
                while ahead < _BLOCKS and len(pending) < threads:
                    pending.append(submit(work, ahead))
                    ahead += 1
                buffer, part = pending.pop(0).result()
                total += buffer
                tally += part
                done = block + 1
                buffer[:] = 0.0
                with lock:
                    spare.append(buffer)
                keeper.save(number, total, tally, done)
    except KeyboardInterrupt:
        keeper.interrupt(number, total, tally, done, first)
        raise
    spare.clear()
    keeper.save(number, total, tally, _BLOCKS, force=True)
    return _finish(job, total), tally


def _finish(job: _Job, total: NDArray[np.float64]) -> NDArray[np.float64]:
    if job.method == "rays":
        return np.asarray(total * (job.step * job.scale[2]) ** 2)
    out = total[:, :-1].copy() if total.size < 1e7 else total[:, :-1]
    running_sum(total, out, 1.0)
    return np.ascontiguousarray(out)


@contextmanager
def _pool(workers: int) -> Iterator[Callable[..., Future[Any]]]:
    """Threads that are not waited for when something interrupts the work."""
    pool = ThreadPoolExecutor(max_workers=max(1, workers))
    try:
        yield pool.submit
    except BaseException:
        pool.shutdown(wait=True, cancel_futures=True)
        raise
    pool.shutdown()


def _relative(error: NDArray[np.float64] | None, values: NDArray[np.float64]) -> float:
    if error is None:
        return float("nan")
    # Pixels that are nearly dark, beyond a macro caustic, would drown all others. Row by row: maps may be large.
    floor, total, count = 0.01 * values.mean(), 0.0, 0
    for row, wrong in zip(values, error, strict=True):
        known = row > floor
        total += float(((wrong[known] / row[known]) ** 2).sum())
        count += int(known.sum())
    return float(np.sqrt(total / count)) if count else float("nan")


def _description(field: StarField, tally: NDArray[np.float64]) -> dict[str, Any]:
    return {
        "field": {
            "kappa": field.kappa,
            "gamma": field.gamma,
            "kappa_star": field.kappa_star,
            "gradient": list(field.gradient),
            "half_width": field.half_width,
            "half_height": field.half_height,
            "stars": len(field),
            "sheet": field.sheet,
            **field.description,
        },
        "cells": int(tally[1]),
        "cells_given_up": int(tally[2]),
        "versions": {name: version(name) for name in ("crossing", "numpy", "numba")},
    }


def _key(field: StarField, job: _Job, error: bool) -> str:
    """Digest of everything that the map depends on."""
    digest = hashlib.sha256()
    for array in (field.x, field.y, field.mass, field.lens_numbers, job.scale, job.tree.centre):
        digest.update(np.ascontiguousarray(array).tobytes())
    numbers = (field.half_width, field.half_height, field.accuracy, job.shape, job.step, job.tolerance, job.mean)
    digest.update(repr((*numbers, job.method, error, _BLOCKS, version("crossing"))).encode())
    return digest.hexdigest()
