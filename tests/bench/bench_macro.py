"""Time and memory of a 4000 x 4000 lens map, read, scaled, contoured and asked: run by hand, never fails on time.

python tests/bench/bench_macro.py [PIXELS]
"""

from __future__ import annotations

import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent.parent))

from macro_maps import Grid, components, record_of, sky, write_planes

from crossing.optics.macro.profiles import NFWSphere, ProfileSum, Shear, SoftenedEllipsoid

GOAL_SECONDS, GOAL_BYTES = 5.0, 2 * 2**30
REDSHIFTS = (1.0, 1.5, 6.0)
CLUSTER = ProfileSum(
    parts=(
        SoftenedEllipsoid(einstein_radius=28.0, axis_ratio=0.7, core=3.0, angle=35.0),
        NFWSphere(kappa_s=0.05, r_s=60.0),
        Shear(gamma1=0.04, gamma2=-0.03),
        *(
            SoftenedEllipsoid(einstein_radius=0.4 + 0.05 * n, core=0.1, axis_ratio=0.8, angle=20.0 * n)
            for n in range(8)
        ),
    ),
    centres=((0, 0), (0, 0), (0, 0), *((6.0 * n - 20, 17.0 - 5.3 * n) for n in range(8))),
)
SETS = {
    "convergence and shear": ("convergence", "shear1", "shear2"),
    "deflections": ("deflection1", "deflection2"),
    "convergence, size of shear, deflections": ("convergence", "shear", "deflection1", "deflection2"),
}


def peak_memory() -> int:
    """Most memory that this process ever held [bytes]; Linux alone keeps a parent's out of it."""
    status = Path("/proc/self/status")
    if status.exists():
        line = next(line for line in status.read_text().splitlines() if line.startswith("VmHWM"))
        return int(line.split()[1]) * 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024


def measure(folder: Path, keys: tuple[str, ...]) -> None:
    """All of it in a process of its own, whose memory is then its own too."""
    from crossing.optics.macro.critical_lines import critical_lines
    from crossing.optics.macro.lens_map import read_lens_map
    from crossing.optics.macro.local_map import local_solution
    from crossing.optics.scales import LensScales

    record = record_of({key: str(folder / f"{key}.fits") for key in keys})
    start = time.perf_counter()
    lens_map = read_lens_map(record, LensScales(0.4, 1.5))
    opened = time.perf_counter()
    curves = critical_lines(lens_map, REDSHIFTS)
    traced = time.perf_counter()
    lines = curves.of_source(1.5, "tangential")[0]
    point = local_solution(lens_map, sky(float(lines.x[40]) + 0.2, float(lines.y[40]) + 0.1))
    done = time.perf_counter()
    memory = peak_memory()
    print(
        f"  open and check {opened - start:5.2f} s, curves {traced - opened:5.2f} s ({len(curves.lines)} of them), "
        f"local report {done - traced:5.2f} s: {done - start:5.2f} s of {GOAL_SECONDS:g}, "
        f"{memory / 2**30:4.2f} GiB of {GOAL_BYTES / 2**30:g}; mu {point.mu:.1f}, flags {point.flags}"
    )


def main() -> None:
    if len(sys.argv) > 2:
        measure(Path(sys.argv[1]), tuple(sys.argv[2:]))
        return
    pixels = int(sys.argv[1]) if len(sys.argv) == 2 else 4000
    with tempfile.TemporaryDirectory() as name:
        grid = Grid(width=pixels, height=pixels)
        keys = tuple(dict.fromkeys(key for keys in SETS.values() for key in keys))
        write_planes(Path(name), components(CLUSTER, grid), grid, keys)
        for title, chosen in SETS.items():
            print(f"{pixels} x {pixels}, {title}", flush=True)
            subprocess.run([sys.executable, __file__, name, *chosen], check=True)


if __name__ == "__main__":
    main()
