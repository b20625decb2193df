"""Cost of magnification maps: area mapping against counting rays and against plain NumPy, at equal error.

    python tests/bench/bench_maps.py [--quick]

Side by side in one run, so that a noisy machine spoils the ratios as little as it can. Prints one table and never fails
on a time. Errors are rms relative errors per pixel against a map with a tenth of the error asked for.
"""

from __future__ import annotations

import argparse
import time

import numpy as np

from crossing.shooting.field import StarField
from crossing.shooting.mapping import magnification_map
from crossing.shooting.rays import map_grid
from crossing.shooting.tree import build_tree, order_for

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


def ray_rate(field: StarField, side: int = 64, grids: int = 4000) -> tuple[float, float]:
    """Rays per second on one core, and floating-point operations per ray (a division counts as one)."""
    tree = field.tree((-field.half_width, field.half_width, -field.half_height, field.half_height))
    order = tree.real.shape[1]
    work, u, v = np.empty((2 * order, side)), np.empty((side, side)), np.empty((side, side))
    scale, lens = np.array([0.0, 0.0, 1.0]), field.lens_numbers
    leaves = np.random.default_rng(1).integers(0, len(tree), grids)

    def shoot() -> None:
        for leaf in leaves:
            x, y = tree.centre[leaf] - tree.half[leaf]
            dx, dy = 2 * tree.half[leaf] / side
            map_grid(lens, tree.arrays, leaf, field.stars, x, y, dx, dy, side, side, scale, work, u, v)

    near = np.diff(tree.near_start)[leaves].mean()
    shift = 2.0 * order**2 / side
    return grids * side**2 / clock(shoot, repeat=3)[0], 4.0 * (order - 1) + 9.0 * near + shift


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
    for accuracy in (1e-2, 3e-3, 1e-3, 5e-4):
        spent, area = clock(magnification_map, field, width=10.0, pixels=pixels, accuracy=accuracy, error=False)
        error = relative(area, reference)
        print(
            f"{name:<34} area {accuracy:7.0e}: {spent:8.2f} s  error {100 * error:7.3f}%  "
            f"{area.rays / pixels**2:6.1f} rays/px"
        )
        if error < 1.3e-3:
            break
    for count in (10.0, 40.0):
        rays_time, rays = clock(
            magnification_map, field, width=10.0, pixels=pixels, method="rays", rays_per_pixel=count, error=False
        )
        rays_error = relative(rays, reference)
        print(f"{name:<34} rays {count:4.0f}/px: {rays_time:8.2f} s  error {100 * rays_error:7.3f}%")
    # The error of counting rays falls as N^-0.7 to N^-0.75 (grid of rays): the kinder exponent is taken.
    needed = (rays_error / error) ** (1.0 / 0.75)
    print(
        f"{name:<34} counting at the same error: {rays_time * needed:10.3g} s, ratio {rays_time * needed / spent:9.3g}"
    )
    plain = numpy_rays(field) * rays.rays * needed
    print(f"{name:<34} straight NumPy:             {plain:10.3g} s, ratio {plain / spent:9.3g}")


def main() -> None:
    """Run all parts."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="small sizes only")
    options = parser.parse_args()
    pixels = 300 if options.quick else 1000
    fields = {name: StarField.draw(*numbers, 5.0, seed=1) for name, numbers in FIELDS.items()}
    for field in fields.values():
        magnification_map(field, width=10.0, pixels=16, accuracy=0.1)
        magnification_map(field, width=10.0, pixels=16, method="rays", rays_per_pixel=1.0)
    for name, field in fields.items():
        equal_error(name, field, pixels)
    for name, field in fields.items():
        spent, area = clock(magnification_map, field, width=10.0, pixels=pixels, error=False, threads=1)
        both, _ = clock(magnification_map, field, width=10.0, pixels=pixels, error=False, threads=2)
        print(f"{name:<34} one thread {spent:.2f} s, two {both:.2f} s: both cores used to {50 * spent / both:.0f}%")
        rays = area.rays / ray_rate(field, grids=500)[0]
        print(f"{name:<34} its {area.rays:.3g} rays alone {rays:.2f} s: the map costs {spent / rays:.1f} times that")
    for name, field in fields.items():
        rate, operations = ray_rate(field, grids=500 if options.quick else 3000)
        product = matrix_rate()
        print(
            f"{name:<34} {rate:.3g} rays/s a core, {operations:.0f} operations each: "
            f"{100 * rate * operations / product:.0f}% of the matrix product's {product / 1e9:.0f} Gflop/s"
        )
    for count in (100, 1000, 10_000, 100_000) + (() if options.quick else (1_000_000,)):
        rng = np.random.default_rng(3)
        half = np.sqrt(np.pi * count / 0.1) / 2.0
        field = StarField(*rng.uniform(-half, half, (2, count)), 1.0, 0.2, 0.1, half, half)
        region = (-half, half, -half, half)
        sheet = (half, half, field.kappa_star)
        made, tree = clock(build_tree, *field.stars, sheet, region, order_for(1e-6))
        rate, _ = ray_rate(field, grids=500)
        print(
            f"{count:9d} stars: tree {made:6.2f} s, {tree.nbytes / 2**20:7.0f} MiB, {len(tree)} leaves, "
            f"{1e9 / rate:.1f} ns a ray"
        )


if __name__ == "__main__":
    main()
