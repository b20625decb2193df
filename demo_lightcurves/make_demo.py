"""Write the invented demo events: one arc, six light curves, each with its truth beside it.

Everything here is made up: no real cluster, arc, star or survey. Run it again and the same files come out:

    python demo_lightcurves/make_demo.py

The events with maps of lens models and with mirrored knots are written by make_macro_demo.py.
"""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from astropy import units as u
from astropy.cosmology import Planck18
from astropy.table import QTable

from crossing.optics.fold import fold_profile, profile_peak
from crossing.stars.photosphere import blackbody_flux_njy

HERE = Path(__file__).parent
SEED = 20260
START = 61000.0
Z_LENS, Z_SOURCE = 0.43, 1.21
BANDS = {"short": (0.87, 0.22, 28.6), "middle": (1.15, 0.26, 28.7), "long": (1.54, 0.30, 28.5)}
"""Pivot wavelength and width [um], and 5-sigma depth of a visit [AB mag]."""
LIMB = 0.35
NOTE = "invented for demonstration; no real cluster, arc, star or survey"

SCENE = f"""# Invented for demonstration: no real cluster, arc, star or survey.
# Written by {{script}}; the truth is in {{name}}.truth.json.

[event]
name = "{{title}} (invented)"

[lens]
redshift = {Z_LENS}

[source]
redshift = {Z_SOURCE}

{{macro}}

[[microlenses]]
surface_density = {{{{value = "21 solMass / pc2", error = "6 solMass / pc2"}}}}
mass_function = "kroupa"

[motion]
lens_spread = "420 km / s"
source_spread = "230 km / s"
position = ["151.2 deg", "-4.7 deg"]
"""

MACRO = """[macro]
critical_distance = {value = "0.32 arcsec", error = "0.12 arcsec"}
gradient = "0.045 / arcsec"
mu_r = 1.9"""


@dataclass
class Star:
    """An invented star on the arc."""

    radius: float
    temperature: float
    speed: float
    """Speed along the caustic's normal [km/s]."""
    peak: float
    """Magnification by the crossing pair at the peak."""

    @property
    def radius_time(self) -> float:
        """Radius time [d]."""
        return self.radius * 695_700.0 / self.speed / 86400.0

    def amplitude(self, band: str) -> float:
        """Flux per unit of the fold profile [nJy]."""
        wavelength, width, _ = BANDS[band]
        distance = Planck18.luminosity_distance(Z_SOURCE).value
        flux = blackbody_flux_njy(
            self.radius, self.temperature, Z_SOURCE, wavelength, width, luminosity_distance_mpc=distance
        )
        return float(flux) * self.peak / profile_peak(LIMB).height


@dataclass
class Rows:
    """A light curve in the making."""

    time: list[float] = field(default_factory=list)
    band: list[str] = field(default_factory=list)
    flux: list[float] = field(default_factory=list)
    error: list[float] = field(default_factory=list)
    limit: list[bool] = field(default_factory=list)

    def add(self, time: float, band: str, flux: float, error: float, limit: bool = False) -> None:
        """Add one row."""
        self.time.append(round(time, 4))
        self.band.append(band)
        self.flux.append(round(flux, 3))
        self.error.append(round(error, 3))
        self.limit.append(limit)


def noise(band: str) -> float:
    """Standard error of a visit [nJy]."""
    return float((BANDS[band][2] * u.ABmag).to_value(u.nJy)) / 5.0


def fold(star: Star, band: str, time: float, caustic: float, sign: int) -> float:
    """Flux that one fold adds [nJy]."""
    return star.amplitude(band) * float(fold_profile(sign * (time - caustic) / star.radius_time, LIMB))


def observe(rng, rows: Rows, time: float, band: str, flux: float) -> None:
    """Add a noisy measurement."""
    sigma = noise(band) * rng.uniform(0.9, 1.2)
    rows.add(time, band, flux + sigma * rng.standard_normal(), sigma)


def write(
    name: str,
    title: str,
    rows: Rows,
    truth: dict,
    *,
    file: str,
    photometry: str,
    bands: str = "short middle",
    macro: str = MACRO,
    script: str = "make_demo.py",
) -> None:
    """Write the event file, its light curve and its truth."""
    lines = [SCENE.format(name=name, title=title, macro=macro, script=script)]
    for band in bands.split():
        wavelength, width, depth = BANDS[band]
        lines.append(
            f'[bands.{band}]\nwavelength = "{wavelength} um"\nwidth = "{width} um"\n'
            f'depth = "{depth} mag"\nlimb_darkening = {LIMB}\nextinction = "{0.06 / wavelength:.3f} mag"\n'
        )
    lines.append(f'[photometry]\nfile = "{file}"\n{photometry}')
    (HERE / f"{name}.toml").write_text("\n".join(lines))
    order = np.argsort(rows.time, kind="stable")
    table = QTable()
    table["time"] = np.array(rows.time)[order]
    table["band"] = np.array(rows.band)[order]
    unit = None if file.endswith(".csv") else u.nJy
    suffix = " [nJy]" if file.endswith(".csv") else ""
    table[f"flux{suffix}"] = np.array(rows.flux)[order] * (unit or 1.0)
    table[f"flux_err{suffix}"] = np.array(rows.error)[order] * (unit or 1.0)
    if any(rows.limit):
        table["is_upper_limit"] = np.array(rows.limit)[order]
    if not file.endswith(".csv"):
        table.meta["note"] = NOTE
    form = {"ecsv": "ascii.ecsv", "csv": "ascii.csv", "fits": "fits"}[file.rsplit(".", 1)[1]]
    table.write(HERE / file, format=form, overwrite=True)
    (HERE / f"{name}.truth.json").write_text(json.dumps({"note": NOTE, "seed": SEED} | truth, indent=2) + "\n")


def star_truth(star: Star, caustic: float, sign: int, model: str = "fold") -> dict:
    """What `crossing fit` should find."""
    offset = profile_peak(LIMB).position
    return {
        "model": model,
        "orientation": "entering" if sign > 0 else "leaving",
        "caustic_time_mjd": START + caustic,
        "peak_time_mjd": START + caustic + sign * offset * star.radius_time,
        "radius_time_days": star.radius_time,
        "radius_rsun": star.radius,
        "temperature_K": star.temperature,
        "normal_speed_km_s": star.speed,
        "peak_magnification": star.peak,
    }


def well_sampled(rng) -> None:
    """A blue supergiant leaves a fold; sixty points, dense after the alert."""
    star, caustic = Star(radius=160.0, temperature=12500.0, speed=560.0, peak=2600.0), 17.4
    rows = Rows()
    epochs = np.concatenate([np.arange(0.0, 12.0, 1.5), np.arange(12.0, 23.0, 0.75), np.arange(23.0, 40.0, 2.4)])
    for epoch in epochs[:30]:
        for k, band in enumerate(("short", "middle")):
            time = epoch + 0.02 * k + rng.uniform(-0.1, 0.1)
            observe(rng, rows, START + time, band, 9.0 + fold(star, band, time, caustic, -1))
    write(
        "well_sampled",
        "Lantern arc, knot 3",
        rows,
        star_truth(star, caustic, -1) | {"level_njy": 9.0},
        file="well_sampled.ecsv",
        photometry='kind = "flux"\n',
    )


def four_epochs(rng) -> None:
    """Four epochs in two bands: all that most events ever get."""
    star, caustic = Star(radius=110.0, temperature=15000.0, speed=620.0, peak=3300.0), 9.2
    rows = Rows()
    for epoch in (0.0, 8.4, 10.9, 17.0):
        for k, band in enumerate(("short", "long")):
            time = epoch + 0.03 * k
            observe(rng, rows, START + time, band, fold(star, band, time, caustic, 1))
    write(
        "four_epochs",
        "Lantern arc, knot 5",
        rows,
        star_truth(star, caustic, 1),
        file="four_epochs.csv",
        photometry='kind = "flux"\n',
        bands="short long",
    )


def pair(rng) -> None:
    """A star enters a caustic and leaves it 19 days later."""
    star, first, second, ratio = Star(radius=140.0, temperature=11000.0, speed=900.0, peak=3000.0), 8.5, 27.5, 0.7
    rows = Rows()
    for epoch in np.arange(0.0, 40.0, 1.3):
        for k, band in enumerate(("middle", "long")):
            time = epoch + 0.02 * k + rng.uniform(-0.2, 0.2)
            share = (time - first) / (second - first)
            flux = fold(star, band, time, first, 1) * np.sqrt(np.clip(1 - share, 0, 1))
            flux += ratio * fold(star, band, time, second, -1) * np.sqrt(np.clip(share, 0, 1))
            observe(rng, rows, START + time, band, 6.0 + flux)
    truth = star_truth(star, first, 1, "pair") | {
        "second_caustic_time_mjd": START + second,
        "strength_ratio": ratio,
        "level_njy": 6.0,
    }
    write(
        "pair",
        "Lantern arc, knot 2",
        rows,
        truth,
        file="pair.fits",
        photometry='kind = "flux"\n',
        bands="middle long",
    )


def difference(rng) -> None:
    """Difference fluxes against a reference that holds the declining star: negative before the rise, with limits."""
    star, caustic = Star(radius=210.0, temperature=9000.0, speed=700.0, peak=2100.0), 24.0
    reference, rows = (26.0, 27.0, 28.0), Rows()
    share = {band: noise(band) / np.sqrt(3.0) for band in ("short", "middle")}
    common = {band: share[band] * rng.standard_normal() for band in share}
    for epoch in np.arange(0.0, 60.0, 2.6):
        for k, band in enumerate(("short", "middle")):
            time = epoch + 0.02 * k + rng.uniform(-0.3, 0.3)
            level = np.mean([fold(star, band, when, caustic, 1) for when in reference])
            sigma = noise(band) * rng.uniform(0.9, 1.2)
            flux = fold(star, band, time, caustic, 1) - level - common[band] + sigma * rng.standard_normal()
            total = float(np.hypot(sigma, share[band]))
            poor = rng.random() < 0.15
            if poor and flux < 9.0 * total:
                rows.add(START + time, band, 9.0 * total, 3.0 * total, limit=True)
            else:
                rows.add(START + time, band, flux, total)
    epochs = ", ".join(f"{START + when:.1f}" for when in reference)
    write(
        "difference",
        "Lantern arc, knot 7",
        rows,
        star_truth(star, caustic, 1),
        file="difference.ecsv",
        photometry=f'kind = "difference"\nreference_epochs = [{epochs}]\nlimit_sigma = 3\n',
    )


def impostor(rng) -> None:
    """Not a crossing: rises in a fortnight, fades and reddens like a supernova."""
    rows = Rows()
    for epoch in np.arange(0.0, 90.0, 5.0):
        for k, band in enumerate(("short", "long")):
            time = epoch + 0.02 * k + rng.uniform(-0.4, 0.4)
            fall = {"short": 24.0, "long": 46.0}[band]
            shape = np.exp(-(time - 22.0) / fall) / (1 + np.exp(-(time - 22.0) / 5.5))
            observe(rng, rows, START + time, band, {"short": 75.0, "long": 95.0}[band] * shape)
    write(
        "impostor",
        "Lantern arc, knot 9",
        rows,
        {"model": "supernova-like transient (Bazin et al. 2009 shape)", "fall_days": {"short": 24.0, "long": 46.0}},
        file="impostor.ecsv",
        photometry='kind = "flux"\n',
        bands="short long",
    )


def faint(rng) -> None:
    """Barely above the noise: a crossing, but nobody could swear to it."""
    star, caustic = Star(radius=60.0, temperature=14000.0, speed=500.0, peak=4600.0), 12.0
    rows = Rows()
    for epoch in np.arange(0.0, 30.0, 4.0):
        for k, band in enumerate(("short", "middle")):
            time = epoch + 0.02 * k + rng.uniform(-0.3, 0.3)
            observe(rng, rows, START + time, band, fold(star, band, time, caustic, -1))
    write(
        "faint",
        "Lantern arc, knot 11",
        rows,
        star_truth(star, caustic, -1),
        file="faint.csv",
        photometry='kind = "flux"\n',
    )


def main() -> None:
    """Write all events, each from its own random stream."""
    makers = (well_sampled, four_epochs, pair, difference, impostor, faint)
    for number, maker in enumerate(makers):
        maker(np.random.default_rng(np.random.SeedSequence(SEED, spawn_key=(number,))))


if __name__ == "__main__":
    main()
