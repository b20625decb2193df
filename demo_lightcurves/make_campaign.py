"""Write the demo campaign: the arc of the demo events, in eight segments about its critical curve, for three seasons.

Run it from anywhere: ``python make_campaign.py``. Everything is invented: no real cluster, arc, star or survey.
"""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path

import numpy as np

HERE = Path(__file__).parent
SEED = 20_310
GRADIENT = 0.045
"""Change of lam_t per arcsecond along the arc, as in the events."""
EDGES = (-1.6, -0.8, -0.4, -0.2, 0.0, 0.2, 0.4, 0.8, 1.6)
"""Ends of the segments [arcsec], counted along the stretch from the critical curve; the saddle side is negative."""

HEAD = f"""# Invented for demonstration: no real cluster, arc, star or survey.
# Written by make_campaign.py.

[campaign]
name = "Lantern arc (invented)"

[lens]
redshift = 0.43

[source]
redshift = 1.21

# Shared by all segments; each has its own distance to the critical curve.
[macro]
gradient = "{GRADIENT} / arcsec"
mu_r = 1.9

[[microlenses]]
surface_density = {{value = "21 solMass / pc2", error = "6 solMass / pc2"}}
mass_function = "kroupa"

[motion]
lens_spread = "420 km / s"
source_spread = "230 km / s"
position = ["151.2 deg", "-4.7 deg"]

[bands.middle]
wavelength = "1.15 um"
width = "0.26 um"
depth = "28.7 mag"
limb_darkening = 0.35
extinction = "0.052 mag"

[bands.long]
wavelength = "1.54 um"
width = "0.3 um"
depth = "28.5 mag"
limb_darkening = 0.35
extinction = "0.039 mag"

[population]
slope = {{value = 2.0, error = 0.15}}
luminosity_range = ["1e2 solLum", "5e6 solLum"]
temperature = {{low = "4000 K", high = "30000 K", scale = "log"}}
reference_band = "middle"
dust = "0.2 mag"
star_formation_density = "0.08 solMass / (yr kpc2)"
"""

TAIL = """
[[schedules]]
name = "two seasons"
start = 2030-01-10
cadence = "12 d"
number = 24
gaps = [[2030-06-05, 2030-11-20]]

[[schedules]]
name = "deep pair"
epochs = [2030-01-10, 2030-12-02]
depth = {middle = "29.5 mag", long = "29.3 mag"}

[detection]
significance = 5
bands = ["middle", "long"]
reference_depth = {middle = "29.4 mag", long = "29.2 mag"}
"""


def segment(number: int, low: float, high: float, brightness: float) -> str:
    """Table of one segment."""
    side = "saddle" if high <= 0 else "minimum"
    return (
        f'\n[[segments]]\nname = "{side} {number}"\n'
        f'critical_distance = {{value = "{0.5 * (low + high):.2f} arcsec", error = "0.05 arcsec"}}\n'
        f'length = "{high - low:.2f} arcsec"\nwidth = "0.28 arcsec"\n'
        f'surface_brightness = {{middle = {{value = "{brightness:.2f} mag / arcsec2", error = "0.08 mag / arcsec2"}}, '
        f'long = "{brightness - 0.1:.2f} mag / arcsec2"}}\n'
    )


def main() -> None:
    """Write the file."""
    rng = np.random.default_rng(SEED)
    # A knot fades away from the critical curve; mirrored segments show the same part of the source.
    fading = {k: 24.6 + 0.25 * k + 0.1 * rng.standard_normal() for k in range(1, 5)}
    parts = []
    for index, (low, high) in enumerate(pairwise(EDGES)):
        number = 4 - index if index < 4 else index - 3
        parts.append(segment(number, low, high, fading[number]))
    (HERE / "campaign.toml").write_text(HEAD + "".join(parts) + TAIL, encoding="utf-8")


if __name__ == "__main__":
    main()
