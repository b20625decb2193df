"""Write the invented demo events whose macro lens is given by maps of two models, and by mirrored knots.

Everything here is made up, in the same scene as the events of make_demo.py. Run it again and the same files come out:

    python demo_lightcurves/make_macro_demo.py
"""

from __future__ import annotations

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
from make_demo import HERE, NOTE, SEED, START, Z_LENS, Z_SOURCE, Rows, Star, fold, observe, star_truth, write

from crossing.optics.macro.images import solve_images
from crossing.optics.macro.profiles import MassProfile, ProfileSum, Shear, SoftenedEllipsoid
from crossing.optics.macro.sky_frame import offsets_from_sky, sky_from_offsets
from crossing.optics.scales import LensScales

CENTRE = (151.2, -4.7)
"""RA, Dec [deg] of the invented cluster."""
PLACE = (-4.70, 11.82)
"""The event, east and north of it [arcsec]."""
PIXELS, SIDE = 176, 0.36
"""Pixels of the maps, and their side [arcsec]."""
Z_BIRCH = 2.0
"""Source redshift that the second model's deflections hold for."""
KNOTS = ((-5.9, 12.2), (-5.1, 12.05), (-3.4, 11.95))
"""One image of each knot [arcsec]."""
KNOT_ERROR = 0.02
GALAXY = (-15.0, 12.0)

ALDER = ProfileSum(
    parts=(
        SoftenedEllipsoid(einstein_radius=17.5, axis_ratio=0.7, core=3.0, angle=25.0),
        SoftenedEllipsoid(einstein_radius=3.4, axis_ratio=0.85, core=0.7, angle=80.0),
        Shear(gamma1=0.02, gamma2=0.015),
    ),
    centres=((0.0, 0.0), GALAXY, (0.0, 0.0)),
)
BIRCH = ProfileSum(
    parts=(
        SoftenedEllipsoid(einstein_radius=17.9, axis_ratio=0.78, core=4.5, angle=21.0),
        SoftenedEllipsoid(einstein_radius=3.0, axis_ratio=1.0, core=0.5, angle=0.0),
        Shear(gamma1=0.045, gamma2=0.03),
    ),
    centres=((0.3, -0.2), GALAXY, (0.0, 0.0)),
)
"""Two invented models of the cluster, both for the event's source."""

TWO_MODELS = """[macro]
position = [{position}]
position_error = "0.06 arcsec"

# Convergence and shear for D_ls/D_s = 1, three extensions of one file.
[[macro.maps]]
name = "Alder"
convergence = "two_models_alder.fits[CONVERGENCE]"
shear1 = "two_models_alder.fits[SHEAR1]"
shear2 = "two_models_alder.fits[SHEAR2]"
normalised = true

# Deflections for sources at another redshift, on pixels that are turned.
[[macro.maps]]
name = "Birch"
deflection1 = "two_models_birch.fits[1]"
deflection2 = "two_models_birch.fits[2]"
deflection_unit = "arcsec"
source_redshift = {redshift}"""

KNOT = """
[[macro.mirror_pairs]]
name = "{name}"
position1 = [{first}]
position2 = [{second}]
position_error = "{error} arcsec"
flux1 = {{value = "{flux1:.0f} nJy", error = "{error1:.0f} nJy"}}
flux2 = {{value = "{flux2:.0f} nJy", error = "{error2:.0f} nJy"}}"""


def place_text(x: float, y: float) -> str:
    """RA and Dec of an offset, as in event files."""
    ra, dec = sky_from_offsets(CENTRE, x, y)
    return f'"{float(ra):.7f} deg", "{float(dec):.7f} deg"'


def grid(rotation: float) -> tuple[fits.Header, np.ndarray, np.ndarray, np.ndarray]:
    """Header, east and north of all pixels [arcsec], and the directions of the pixel axes as columns."""
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = CENTRE
    wcs.wcs.crpix = [PIXELS / 2 + 0.5] * 2
    c, s = np.cos(np.radians(rotation)), np.sin(np.radians(rotation))
    axes = np.array([[-c, s], [s, c]])
    wcs.wcs.cd = axes * SIDE / 3600
    column, row = np.meshgrid(np.arange(PIXELS), np.arange(PIXELS))
    east, north = offsets_from_sky(CENTRE, *wcs.all_pix2world(column, row, 0))
    return wcs.to_header(), east, north, axes


def save(name: str, header: fits.Header, planes: dict[str, np.ndarray]) -> None:
    """Planes as float32 extensions of one file."""
    primary = fits.PrimaryHDU()
    primary.header["COMMENT"] = NOTE
    images = [fits.ImageHDU(plane.astype(">f4"), header, name=key) for key, plane in planes.items()]
    fits.HDUList([primary, *images]).writeto(HERE / name, overwrite=True)


def write_maps() -> None:
    """Convergence and shear of one model, deflections of the other."""
    event, far = LensScales(Z_LENS, Z_SOURCE), LensScales(Z_LENS, Z_BIRCH)
    ratio = event.D_ls / event.D_s
    header, x, y, axes = grid(0.0)
    shear1, shear2 = ALDER.shear(x, y, scale=1 / ratio)
    tensor = np.einsum("ji,jkab,kl->ilab", axes, np.array([[shear1, shear2], [shear2, -shear1]]), axes)
    planes = {"CONVERGENCE": ALDER.convergence(x, y, scale=1 / ratio), "SHEAR1": tensor[0, 0], "SHEAR2": tensor[0, 1]}
    save("two_models_alder.fits", header, planes)
    header, x, y, axes = grid(-25.0)
    deflection = np.array(BIRCH.deflection(x, y, scale=far.D_ls / far.D_s / ratio))
    first, second = np.einsum("ji,jab->iab", axes, deflection)
    save("two_models_birch.fits", header, {"DEFLECTION1": first, "DEFLECTION2": second})


def local_truth(model: MassProfile) -> dict:
    """What the closed forms say at the event; its mirror image is solved for."""
    x, y = PLACE
    lam_t, lam_r = (float(one) for one in model.eigenvalues(x, y))
    step = 1e-4
    slope = [
        float(model.eigenvalues(x + dx, y + dy)[0] - model.eigenvalues(x - dx, y - dy)[0]) / (2 * step)
        for dx, dy in ((step, 0.0), (0.0, step))
    ]
    angle = 0.5 * np.arctan2(*(float(one) for one in model.shear(x, y)[::-1]))
    along = abs(slope[0] * np.cos(angle) + slope[1] * np.sin(angle))
    source = tuple(float(one) for one in model.source_position(x, y))
    images = solve_images(model, source, 25.0)
    others = np.hypot(images.x - x, images.y - y)
    order = np.argsort(others)
    own, mirror = order[:2]
    days = LensScales(Z_LENS, Z_SOURCE).time_delay_factor * abs(images.arrival[own] - images.arrival[mirror])
    ra, dec = sky_from_offsets(CENTRE, images.x[mirror], images.y[mirror])
    return {
        "lam_t": lam_t,
        "lam_r": lam_r,
        "mu": 1 / (lam_t * lam_r),
        "gradient_per_arcsec": along,
        "mirror_position_deg": [float(ra), float(dec)],
        "pair_separation_arcsec": float(others[mirror]),
        "pair_delay_days": float(days),
    }


def knots(rng) -> tuple[str, dict]:
    """Mirrored knots behind the first model, with errors."""
    lines, separations = [], []
    for number, (x, y) in enumerate(KNOTS):
        source = tuple(float(one) for one in ALDER.source_position(x, y))
        images = solve_images(ALDER, source, 25.0)
        own, other = np.argsort(np.hypot(images.x - x, images.y - y))[:2]
        places = np.array([[images.x[k], images.y[k]] for k in (own, other)]) + KNOT_ERROR * rng.standard_normal((2, 2))
        flux = 9.0 * np.abs(images.mu[[own, other]]) * (1 + 0.06 * rng.standard_normal(2))
        text = KNOT.format(
            name=f"k{number + 1}",
            first=place_text(*places[0]),
            second=place_text(*places[1]),
            error=KNOT_ERROR,
            flux1=flux[0],
            flux2=flux[1],
            error1=0.06 * flux[0],
            error2=0.06 * flux[1],
        )
        if number == 0:
            size = float(np.sqrt(np.prod(np.abs(images.mu[[own, other]]))))
            text += f"\nmagnification = {{value = {size:.0f}, error = {0.2 * size:.0f}}}"
        lines.append(text)
        separations.append(float(np.hypot(images.x[own] - images.x[other], images.y[own] - images.y[other])))
    head = (
        f"[macro]\nposition = [{place_text(*PLACE)}]\ncentre = [{place_text(0.0, 0.0)}]\n"
        'position_error = "0.02 arcsec"\nmu_r = {value = 1.8, error = 0.2}'
    )
    return "\n".join([head, *lines]), {"knot_separations_arcsec": separations}


def two_models(rng) -> None:
    """Seven epochs of a star whose two lens models disagree by a factor of two in lam_t."""
    write_maps()
    star, caustic = Star(radius=130.0, temperature=13000.0, speed=600.0, peak=2800.0), 11.0
    rows = Rows()
    for epoch in (0.0, 4.1, 8.2, 10.3, 12.1, 15.9, 22.4):
        for k, band in enumerate(("short", "middle")):
            time = epoch + 0.03 * k
            observe(rng, rows, START + time, band, fold(star, band, time, caustic, 1))
    truth = star_truth(star, caustic, 1) | {"macro": {"Alder": local_truth(ALDER), "Birch": local_truth(BIRCH)}}
    write(
        "two_models",
        "Lantern arc, knot 4",
        rows,
        truth,
        file="two_models.ecsv",
        photometry='kind = "flux"\n',
        macro=TWO_MODELS.format(position=place_text(*PLACE), redshift=Z_BIRCH),
        script="make_macro_demo.py",
    )


def mirrored_knots(rng) -> None:
    """The same arc without a lens model: three knots on either side of the critical curve, and seven epochs."""
    macro, extra = knots(rng)
    star, caustic = Star(radius=170.0, temperature=10500.0, speed=640.0, peak=2400.0), 9.6
    rows = Rows()
    for epoch in (0.0, 4.6, 7.2, 8.8, 10.2, 12.1, 18.3):
        for k, band in enumerate(("middle", "long")):
            time = epoch + 0.03 * k
            observe(rng, rows, START + time, band, fold(star, band, time, caustic, -1))
    write(
        "mirrored_knots",
        "Lantern arc, knot 6",
        rows,
        star_truth(star, caustic, -1) | {"macro": local_truth(ALDER) | extra},
        file="mirrored_knots.ecsv",
        photometry='kind = "flux"\n',
        bands="middle long",
        macro=macro,
        script="make_macro_demo.py",
    )


def main() -> None:
    """Write both events, each from its own random stream."""
    for number, maker in enumerate((two_models, mirrored_knots)):
        maker(np.random.default_rng(np.random.SeedSequence(SEED, spawn_key=(100 + number,))))


if __name__ == "__main__":
    main()
