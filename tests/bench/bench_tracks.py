"""Cost of light curves along tracks: evaluations of the lens map, a count free of noise, and time.

    python tests/bench/bench_tracks.py [--quick]

Prints one table and never fails on a time. Deviations are against a run at a hundredth of the accuracy.
"""

from __future__ import annotations

import argparse
import time

import numpy as np

from crossing.shooting.field import StarField
from crossing.shooting.maps.mapping import magnification_map
from crossing.shooting.tracks.track import track_crossings, track_magnification


def clock(function, *arguments, **options):
    """Seconds of a call, and its result."""
    start = time.perf_counter()
    result = function(*arguments, **options)
    return time.perf_counter() - start, result


def radii_table(length: float, radii: tuple[float, ...]) -> None:
    """A track through the mu = 833 field at several radii."""
    field = StarField.draw(0.699, 0.299, 0.01, 0.5 * length, seed=1)
    ends = (-0.5 * length, 0.0), (0.5 * length, 0.0)
    # The first call compiles or loads the kernels.
    track_magnification(field, (0.0, 0.0), (0.01, 0.0), 1e-3, limb_darkening=0.5)
    spent, crossings = clock(track_crossings, field, *ends)
    print(f"mu = 833, {length:g} theta_E, {len(field)} stars: the centre's {len(crossings)} crossings in {spent:.2f} s")
    print(
        f"{'radius':>8} {'evaluations':>12} {'seconds':>8} {'positions':>10} {'mean':>7} {'highest':>8} "
        f"{'deviation':>10}"
    )
    first = None
    for radius in radii:
        spent, curve = clock(track_magnification, field, *ends, radius)
        some = np.random.default_rng(0).choice(curve.position, min(300, len(curve.position)), replace=False)
        asked = track_magnification(field, *ends, radius, positions=some)
        close = track_magnification(field, *ends, radius, positions=some, accuracy=1e-5)
        worst = np.abs(asked.magnification / close.magnification - 1.0).max()
        first = first or (radius, curve.evaluations)
        print(
            f"{radius:8.0e} {curve.evaluations:12.3g} {spent:8.2f} {len(curve.position):10d} "
            f"{curve.mean_magnification[0]:7.1f} {curve.magnification.max():8.0f} {worst:10.1e}  "
            f"grows as R^{np.log(curve.evaluations / first[1]) / np.log(radius / first[0] * (1 - 1e-12)):.2f}"
            f"{' '.join(('', *curve.flags))}"
        )


def corrugated_table(half_length: float, gradient: float) -> None:
    """A track across the corrugated macro caustic, from far outside to far inside."""
    spent, field = clock(StarField.draw, 0.7, 0.3, 0.01, (half_length, 0.1), gradient=gradient, seed=1)
    drawn = spent
    spent, curve = clock(track_magnification, field, (-half_length, 0.0), (half_length, 0.0), 1e-2)
    inside = curve.position > 0.55
    u = (2.0 * curve.position[inside] - 1.0) * half_length
    smooth = 2.0 / 0.6 / np.sqrt(2.0 * gradient * u)
    ratio = np.trapezoid(curve.magnification[inside], u) / np.trapezoid(smooth, u)
    print(
        f"gradient {gradient:.1e}, u from {-half_length:g} to {half_length:g}, {len(field)} stars: drawn in "
        f"{drawn:.1f} s, "
        f"{curve.evaluations:.3g} evaluations, {spent:.1f} s, mean over the smooth law {ratio:.3f}"
        f"{' '.join(('', *curve.flags))}"
    )


def against_map(radius: float, length: float) -> None:
    """The same curve read from the coarsest sufficient map: its cost by a small one's time a pixel.

    A disc of n pixels a radius comes out of a map within 0.2 n^(-3/2) of its peak on a fold: 34 pixels for 1e-3.
    """
    field = StarField.draw(0.699, 0.299, 0.01, 0.5 * length, seed=1)
    spent, _ = clock(track_magnification, field, (-0.5 * length, 0.0), (0.5 * length, 0.0), radius)
    side, pixel = 1000, radius / 34.0
    part, _ = clock(magnification_map, field, width=side * pixel, pixels=side, accuracy=3e-3, error=False)
    needed = part * length / (side * pixel) * (2.2 * 34.0) / side
    print(
        f"radius {radius:.0e}, {length:g} theta_E: track {spent:.2f} s; a band of map 75 pixels wide {needed:.3g} s, "
        f"{needed / spent:.2g} times"
    )


def main() -> None:
    """Run all parts."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="a short track and two radii only")
    options = parser.parse_args()
    if options.quick:
        radii_table(1.0, (1e-3, 1e-5))
        return
    radii_table(10.0, (1e-2, 1e-3, 1e-4, 1e-5, 1e-6))
    against_map(1e-4, 10.0)
    corrugated_table(60.0, 4.8e-7)


if __name__ == "__main__":
    main()
