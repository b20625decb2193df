"""Cost of magnification maps: area mapping against counting rays and against plain NumPy, at equal error.

    python tests/bench/bench_maps.py [--quick]

Side by side in one run, so that a noisy machine spoils the ratios as little as it can. Prints tables and never fails on
a time: set-up and rays against the number of stars, rays against the matrix product, maps against their rays, two
threads, equal error, and cost against pixels, macro magnification and accuracy. Errors are rms relative errors of
pixels against a map with a tenth of the error asked for, or less.
"""

# ruff: noqa: E402
from __future__ import annotations

import argparse
import os
import resource
import time

for _library in ("OPENBLAS", "MKL", "OMP"):
    os.environ[f"{_library}_NUM_THREADS"] = "1"  # before NumPy is there: its matrix product is for one core

import numpy as np

from crossing.shooting.compiled import kernel
from crossing.shooting.field import StarField
from crossing.shooting.maps.mapping import magnification_map
from crossing.shooting.rays import map_grid, scratch
from crossing.shooting.tree import Tree, build_tree, order_for

# Counting is tried with four times as many rays as long as it took less than this [s].
_LONG = 10.0
FIELDS = {
    "kappa = gamma = kappa_star = 0.4": (0.4, 0.4, 0.4),
    "mu = 833 (0.699, 0.299, 0.01)": (0.699, 0.299, 0.01),
}


def clock(function, *arguments, repeat: int = 1, **options):
    """Best time of some calls, and the last result."""
    best = np.inf
    for _ in range(repeat):
        start = time.perf_counter()
        result = function(*arguments, **options)
        best = min(best, time.perf_counter() - start)
    return best, result


def matrix_rate() -> float:
    """Floating-point operations per second of a NumPy matrix product on one thread."""
    size = 1200
    a = np.random.default_rng(0).random((size, size))
    return 2.0 * size**3 / clock(np.matmul, a, a, repeat=5)[0]


@kernel
def _shoot(leaves, lens, tree, stars, scale, side, work, u, v):
    centre, half = tree[0], tree[1]
    for leaf in leaves:
        x, y = centre[leaf, 0] - half[leaf, 0], centre[leaf, 1] - half[leaf, 1]
        dx, dy = 2.0 * half[leaf, 0] / side, 2.0 * half[leaf, 1] / side
        map_grid(lens, tree, leaf, stars, x, y, dx, dy, side, side, scale, work, u, v)


def ray_rate(field: StarField, side: int = 64, grids: int = 1000, tree: Tree | None = None) -> tuple[float, float]:
    """Rays per second on one core over whole leaves, and real floating-point operations per ray.

    Counted are additions, multiplications and divisions, each as one: two Horner chains (4 a term), 10 a near star, and
    each row's share of the shift of the series; not the copying, nor what is the same for all rays of a row.
    """
    if tree is None:
        tree = field.tree((-field.half_width, field.half_width, -field.half_height, field.half_height))
    order = tree.real.shape[1]
    work, u, v = scratch(order, side), np.empty((side, side)), np.empty((side, side))
    leaves = np.random.default_rng(1).integers(0, len(tree), grids)
    arguments = (field.lens_numbers, tree.arrays, field.stars, np.array([0.0, 0.0, 1.0]), side, work, u, v)
    _shoot(leaves[:1], *arguments)  # compiles
    near = np.diff(tree.near_start)[leaves].mean()
    shift = 2.0 * order * (order + 1) / side
    return grids * side**2 / clock(_shoot, leaves, *arguments, repeat=3)[0], 4.0 * (order - 1) + 10.0 * near + shift


def numpy_rays(field: StarField, rays: int = 20_000) -> float:
    """Seconds per ray of straight NumPy summation."""
    rng = np.random.default_rng(2)
    z = rng.uniform(-20, 20, rays) + 1j * rng.uniform(-5, 5, rays)
    star = field.x + 1j * field.y

    def shoot() -> None:
        for part in np.array_split(z, max(1, rays * len(field) // 2_000_000)):
            (field.mass / (part[:, None] - star)).sum(axis=1)

    return clock(shoot)[0] / rays


def relative(map_, reference) -> float:
    """Rms relative difference per pixel."""
    return float(np.sqrt(np.mean((map_.values / reference.values - 1.0) ** 2)))


def equal_error(name: str, field: StarField, pixels: int) -> None:
    """Area mapping at 0.1%, against what counting rays and NumPy need for the same error."""
    reference = magnification_map(field, width=10.0, pixels=pixels, accuracy=1e-4, error=False)
    for accuracy in (1e-2, 3e-3, 1e-3, 7e-4, 5e-4):
        spent, area = clock(magnification_map, field, width=10.0, pixels=pixels, accuracy=accuracy, error=False)
        error = relative(area, reference)
        print(
            f"{name:<34} area {accuracy:7.0e}: {spent:8.2f} s  error {100 * error:7.3f}%  "
            f"{area.rays / pixels**2:6.1f} rays/px"
        )
        if error <= 1e-3:
            break
    found, count, rays_time = [], 10.0, 0.0
    while len(found) < 2 or rays_time < _LONG:
        count *= 4.0
        rays_time, rays = clock(
            magnification_map, field, width=10.0, pixels=pixels, method="rays", rays_per_pixel=count, error=False
        )
        found.append(relative(rays, reference))
        print(f"{name:<34} rays {count:4.0f}/px: {rays_time:8.2f} s  error {100 * found[-1]:7.3f}%")
    # The error of a lattice of rays falls as N^-0.75 where the map is smooth over pixels: the kindest exponent.
    plain = numpy_rays(field) * rays.rays
    for label, power in (("as measured", np.log(found[-2] / found[-1]) / np.log(4.0)), ("at most", 0.75)):
        needed = (found[-1] / error) ** (1.0 / power)
        print(
            f"{name:<34} at the same error, error as N^-{power:.2f} ({label}): counting {rays_time * needed:.3g} s, "
            f"{rays_time * needed / spent:.3g} times; NumPy {plain * needed:.3g} s, {plain * needed / spent:.3g} times"
        )


def threads_and_rays(name: str, field: StarField, pixels: int) -> None:
    """Use of both cores, and the map against its rays alone."""
    options = {"width": 10.0, "pixels": pixels, "error": False}
    alone, area = clock(magnification_map, field, threads=1, **options)
    begun, start = time.process_time(), time.perf_counter()
    magnification_map(field, threads=2, **options)
    used, both = time.process_time() - begun, time.perf_counter() - start
    print(
        f"{name:<34} one thread {alone:.2f} s, two {both:.2f} s (speed-up {alone / both:.2f}); "
        f"processor time over two cores' wall time {50 * used / both:.0f}%"
    )
    rays = area.rays / ray_rate(field)[0]
    print(f"{name:<34} {area.rays:.3g} rays, 64 x 64 at a time: {rays:.2f} s; the map costs {alone / rays:.1f} times")


def ray_table(name: str, field: StarField) -> None:
    """Rays against the matrix product, measured one after the other."""
    rate, operations = ray_rate(field)
    product = matrix_rate()
    print(
        f"{name:<34} {rate:.3g} rays/s, {operations:.0f} operations each, {rate * operations / 1e9:.0f} Gflop/s, "
        f"{100 * rate * operations / product:.0f}% of the matrix product's {product / 1e9:.0f}"
    )


def pixel_table(field: StarField, sizes: tuple[int, ...]) -> None:
    """Cost against the number of pixels, at 0.1% and the same window."""
    for pixels in sizes:
        spent, area = clock(magnification_map, field, width=10.0, pixels=pixels, error=False)
        print(
            f"{pixels:5d}^2 pixels: {spent:7.2f} s, {1e6 * spent / pixels**2:6.2f} us/px, "
            f"{area.rays / pixels**2:6.1f} rays/px, {area.description['cells'] / pixels**2:6.1f} cells/px"
        )


def macro_table(pixels: int) -> None:
    """Cost against the macro magnification, at 0.1%."""
    for macro in (3.0, 30.0, 300.0, 3000.0):
        lam_r = 0.8
        lam_t = 1.0 / (macro * lam_r)
        field = StarField.draw(1 - 0.5 * (lam_t + lam_r), 0.5 * (lam_r - lam_t), 0.02, 5.0, seed=1)
        made, _ = clock(magnification_map, field, width=10.0, pixels=4, accuracy=0.1, error=False)
        spent, area = clock(magnification_map, field, width=10.0, pixels=pixels, error=False)
        print(
            f"mu = {macro:6.0f}: {len(field):7d} stars, first look and tree {made:5.2f} s, map {spent:7.2f} s, "
            f"{area.rays / pixels**2:6.1f} rays/px"
        )


def accuracy_table(name: str, field: StarField, pixels: int) -> None:
    """Cost and error reached against the accuracy asked for."""
    options = {"width": 10.0 * pixels / 1000, "pixels": pixels, "error": False}
    reference = magnification_map(field, accuracy=2e-5, **options)
    for accuracy in (1e-2, 1e-3, 1e-4):
        spent, area = clock(magnification_map, field, accuracy=accuracy, **options)
        print(
            f"{name:<34} accuracy {accuracy:.0e}: {spent:7.2f} s, {area.rays / pixels**2:6.1f} rays/px, "
            f"error reached {relative(area, reference):.1e}"
        )


def star_table(counts: tuple[int, ...]) -> None:
    """Set-up and rays against the number of stars."""
    lines, rates = [], {}
    StarField.draw(0.4, 0.4, 0.4, 1.0).tree((-1.0, 1.0, -1.0, 1.0))
    for count in counts:
        rng = np.random.default_rng(3)
        half = np.sqrt(np.pi * count / 0.1) / 2.0
        field = StarField(*rng.uniform(-half, half, (2, count)), 1.0, 0.2, 0.1, half, half)
        sheet = (half, half, field.kappa_star)
        made, tree = clock(build_tree, *field.stars, sheet, (-half, half, -half, half), order_for(1e-6))
        rates[count] = 1e9 / ray_rate(field, tree=tree)[0]
        lines.append((count, made, tree.nbytes / 2**20, len(tree)))
        del tree
    for count, made, held, leaves in lines:
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
        print(
            f"{count:9d} stars: tree {made:6.2f} s ({1e6 * made / count:5.1f} us a star), {held:6.0f} MiB, "
            f"{leaves} leaves; {rates[count]:.2f} ns a ray, {rates[count] / rates[1000]:.2f} of that at 1000"
        )
    print(f"largest memory of the whole process: {peak:.2f} GiB")


def main() -> None:
    """Run all parts."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="small sizes only")
    quick = parser.parse_args().quick
    pixels = 300 if quick else 1000
    # Before anything else, for its memory is the process's.
    star_table((100, 1000, 10_000, 100_000) if quick else (100, 1000, 10_000, 100_000, 1_000_000))
    fields = {name: StarField.draw(*numbers, 5.0, seed=1) for name, numbers in FIELDS.items()}
    for field in fields.values():
        magnification_map(field, width=10.0, pixels=16, accuracy=0.1)
        magnification_map(field, width=10.0, pixels=16, method="rays", rays_per_pixel=1.0)
    for part in (ray_table, lambda *one: threads_and_rays(*one, pixels), lambda *one: equal_error(*one, pixels)):
        for name, field in fields.items():
            part(name, field)
    pixel_table(next(iter(fields.values())), (125, 250) if quick else (250, 500, 1000, 2000))
    macro_table(100 if quick else 500)
    for name, field in fields.items():
        accuracy_table(name, field, 100 if quick else 250)


if __name__ == "__main__":
    main()
