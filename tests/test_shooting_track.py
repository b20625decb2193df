"""Light curves along tracks: closed forms, root solvers, and the folds of one star."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from disc_twin import one_star_disc
from numpy.typing import NDArray
from twins import one_star_images, star_images

from crossing.errors import InputError
from crossing.optics.fold import fold_profile
from crossing.shooting.caustics.folds import fold_quantities
from crossing.shooting.field import StarField
from crossing.shooting.tracks.images import count_images, image_magnifications
from crossing.shooting.tracks.track import track_crossings, track_magnification
from crossing.shooting.tracks.track_curve import TrackCurve

LENSES = [(0.005, 0.4), (0.1, 0.5), (-0.005, 0.4), (-0.1, 0.5)]


def one_star(lam_t: float, lam_r: float) -> StarField:
    kappa, gamma = 1.0 - 0.5 * (lam_t + lam_r), 0.5 * (lam_r - lam_t)
    return StarField([0.0], [0.0], [1.0], kappa, gamma, 10.0, 10.0, sheet=False, accuracy=1e-12)


def curve(field: StarField, start: complex, end: complex, radius: float, **more: Any) -> TrackCurve:
    return track_magnification(field, (start.real, start.imag), (end.real, end.imag), radius, threads=1, **more)


def places_of_interest(lam_t: float, lam_r: float) -> dict[str, complex]:
    """Cusp, a point of the fold, and wing of one star (Chang & Refsdal 1984)."""
    k, gamma = 0.5 * (lam_t + lam_r), 0.5 * (lam_r - lam_t)
    phi = 0.9 if lam_t > 0.0 else (0.15 if lam_t == -0.005 else 0.3)
    c = np.cos(2.0 * phi)
    square = (-gamma * c + np.sqrt(gamma**2 * c**2 + lam_t * lam_r)) / (lam_t * lam_r)
    if lam_t < 0.0:
        square = (-gamma * c - np.sqrt(gamma**2 * c**2 + lam_t * lam_r)) / (lam_t * lam_r)
    z = np.sqrt(square) * np.exp(1j * phi)
    fold = k * z - gamma * z.conjugate() - 1.0 / z.conjugate()
    return {"fold": complex(fold), "cusp": complex(2.0 * gamma / np.sqrt(lam_r)), "wing": 1.3 + 0.4j}


SHARES = np.array([0.3, 0.417, 0.47, 0.53, 0.565, 0.613, 0.75])


def errors(
    lens: tuple[float, float], middle: complex, angle: float, radius: float, accuracy: float
) -> NDArray[np.float64]:
    """Relative errors of a curve of ten radii around a place, against the root solver."""
    step = 5.0 * radius * np.exp(1j * angle)
    found = curve(one_star(*lens), middle - step, middle + step, radius, positions=SHARES, accuracy=accuracy)
    assert found.flags == ()
    expected = [one_star_disc(middle + (2.0 * share - 1.0) * step, radius, *lens) for share in SHARES]
    return np.asarray(found.magnification / expected - 1.0)


@pytest.mark.parametrize("radius", [1e-1, 1e-3])
@pytest.mark.parametrize("place", ["fold", "cusp", "wing"])
@pytest.mark.parametrize("lens", LENSES)
def test_a_disc_behind_one_star(lens: tuple[float, float], place: str, radius: float) -> None:
    middle = places_of_interest(*lens)[place]
    assert np.abs(errors(lens, middle, 0.647, radius, 1e-3)).max() < 1e-3


@pytest.mark.parametrize("lens", LENSES)
def test_a_small_disc_on_a_fold(lens: tuple[float, float]) -> None:
    # The root solver itself is good to some 1e-6 for so small a disc.
    assert np.abs(errors(lens, places_of_interest(*lens)["fold"], 0.647, 1e-5, 1e-3)).max() < 1e-3


@pytest.mark.parametrize("lens", [(0.1, 0.5), (-0.1, 0.5)])
def test_high_accuracy_is_met(lens: tuple[float, float]) -> None:
    for place in ("fold", "wing"):
        assert np.abs(errors(lens, places_of_interest(*lens)[place], 0.647, 1e-2, 1e-5)).max() < 1e-5


def counted_disc(middle: complex, radius: float, lam_t: float, lam_r: float) -> float:
    """Magnification of a disc behind one star by counting rays; in the middle of cells, so to some 3e-4.

    The root solver of `one_star_disc` does not hold at a cusp for radii of 1e-5: three roots in one.
    """
    k, gamma, size, fine = 0.5 * (lam_t + lam_r), 0.5 * (lam_r - lam_t), 0.5, 16
    axis = np.arange(-16.0, 16.0, size) + 0.5 * size
    z = (axis[:, None] + 1j * axis).ravel()

    def far(z: NDArray[np.complex128]) -> NDArray[np.float64]:
        return np.abs(k * z - gamma * z.conj() - 1.0 / z.conj() - middle)

    while True:
        diagonal = np.sqrt(0.5) * size
        steepest = abs(k) + abs(gamma) + 1.0 / np.maximum(np.abs(z) - diagonal, 1e-9) ** 2
        z = z[(far(z) < radius + steepest * diagonal) | (np.abs(z) < 2.0 * diagonal)]
        if size < 0.5 * radius:
            break
        size *= 0.5
        z = (z[:, None] + 0.5 * size * np.array([1 + 1j, 1 - 1j, -1 + 1j, -1 - 1j])).ravel()
    axis = size * ((np.arange(fine) + 0.5) / fine - 0.5)
    offsets = (axis[:, None] + 1j * axis).ravel()
    inside = sum(int((far(part[:, None] + offsets) < radius).sum()) for part in np.array_split(z, 1 + len(z) // 4000))
    return inside * (size / fine) ** 2 / (np.pi * radius**2)


@pytest.mark.parametrize("lens", [(0.1, 0.5), (-0.1, 0.5)])
def test_a_small_disc_on_a_cusp(lens: tuple[float, float]) -> None:
    middle, radius = places_of_interest(*lens)["cusp"], 1e-5
    # The counting agrees with the root solver where both hold.
    assert counted_disc(middle, 1e-3, *lens) == pytest.approx(one_star_disc(middle, 1e-3, *lens), rel=3e-4)
    for angle, shares in ((0.647, [0.417, 0.53]), (np.pi / 2.0, [0.5])):
        step = 5.0 * radius * np.exp(1j * angle)
        found = curve(one_star(*lens), middle - step, middle + step, radius, positions=shares)
        assert found.flags == ()
        expected = [counted_disc(middle + (2.0 * share - 1.0) * step, radius, *lens) for share in shares]
        assert found.magnification == pytest.approx(expected, rel=1.3e-3)


@pytest.mark.parametrize("radius", [1e-1, 1e-2, 1e-3, 1e-5])
@pytest.mark.parametrize("lens", [(-0.1, 0.5), (-0.005, 0.4)])
def test_tracks_tangent_to_the_fold_on_the_axis(lens: tuple[float, float], radius: float) -> None:
    # With the fold through the disc's middle its light would lie at the seam of two panels; and grazing the rim.
    for share in (0.0, 0.9):
        middle = complex(2.0 * np.sqrt(-lens[0]) + share * radius)
        assert np.abs(errors(lens, middle, np.pi / 2.0, radius, 1e-3)).max() < 1e-3


@pytest.mark.parametrize("lens", [(0.1, 0.5), (-0.1, 0.5)])
def test_high_accuracy_on_the_axis(lens: tuple[float, float]) -> None:
    places = [(places_of_interest(*lens)["cusp"], 0.0)]
    if lens[0] < 0.0:
        fold = complex(2.0 * np.sqrt(-lens[0]))
        places += [(fold, 0.0), (fold, np.pi / 2.0)]
    for middle, angle in places:
        for radius in (1e-2, 1e-3):
            assert np.abs(errors(lens, middle, angle, radius, 1e-5)).max() < 1e-5


@pytest.mark.parametrize("angle", [0.0, np.pi / 2.0])
def test_on_the_axis_of_a_cusp(angle: float) -> None:
    # Exact symmetry: along the axis the line itself is one, across it the chords on both sides are mirror images.
    for lens in ((0.1, 0.5), (-0.1, 0.5)):
        assert np.abs(errors(lens, places_of_interest(*lens)["cusp"], angle, 1e-2, 1e-3)).max() < 1e-3


def test_an_image_curve_that_leaves_the_region_for_a_moment_counts_once() -> None:
    # Regression only: curves that left the region and came back within a step were counted twice, 8% too bright.
    assert np.abs(errors((0.1, 0.5), 0.003 + 0.001j, 0.647, 1e-2, 1e-3)).max() < 1e-3


def test_steps_near_folds_of_symmetric_lines() -> None:
    # Regression only: where the curve is straight by symmetry its steps along itself were too long, 2.7% off.
    assert np.abs(errors((-0.1, 0.5), 2.0 * np.sqrt(0.1), 0.0, 1e-3, 1e-3)).max() < 1e-3


def point_lens() -> StarField:
    return StarField([0.0], [0.0], [1.0], 0.0, 0.0, 10.0, 10.0, sheet=False, accuracy=1e-12)


def test_point_lens_far_and_near() -> None:
    share = np.array([0.02, 0.1, 0.2, 0.45, 0.77, 0.9, 0.97, 0.985, 0.999])
    found = curve(point_lens(), -5 + 0.1j, 5 + 0.1j, 1e-4, positions=share, accuracy=1e-6)
    u = np.hypot(10.0 * share - 5.0, 0.1)
    # Paczynski (1986). The disc differs from a point by less than (R/u)^2.
    assert found.magnification == pytest.approx((u**2 + 2.0) / (u * np.sqrt(u**2 + 4.0)), rel=1e-6)
    assert found.flags == ()
    assert len(found.crossings) == 0


@pytest.mark.parametrize(
    ("distance", "radius", "darkening", "expected"),
    [
        # Uniform disc, Witt & Mao (1994): on the axis sqrt(1 + 4/R^2); at the rim and off the axis: derived, checked by
        # two quadratures to 1e-11.
        (0.0, 0.01, 0.0, 200.002499984),
        (0.0, 0.1, 0.0, 20.0249843945),
        (0.0, 1.0, 0.0, 2.23606797750),
        (0.1, 0.1, 0.0, 12.7747522446),
        (0.01, 0.01, 0.0, 127.328198520),
        (1.0, 1.0, 0.0, 1.63661977237),
        (0.05, 0.1, 0.0, 18.7138909041),
        (0.5, 0.1, 0.0, 2.19371740665),
        (1.0, 0.5, 0.0, 1.38100392790),
        # Limb-darkened on the axis: derived.
        (0.0, 0.1, 0.3, 20.8158818031),
        (0.0, 0.1, 0.6, 21.8045035637),
        (0.0, 0.1, 1.0, 23.5840227330),
        (0.0, 1.0, 0.5, 2.36831617259),
        (0.0, 1.0, 1.0, 2.56668846524),
    ],
)
def test_point_lens_and_a_disc(distance: float, radius: float, darkening: float, expected: float) -> None:
    middle = distance * np.exp(1.1j)
    step = 2.0 * np.exp(0.3j)
    for accuracy in (1e-3, 1e-5):
        found = curve(
            point_lens(),
            middle - step,
            middle + step,
            radius,
            positions=[0.5],
            limb_darkening=darkening,
            accuracy=accuracy,
        )
        assert found.magnification == pytest.approx([expected], rel=accuracy)
        assert found.flags == ()


# (lam_t, lam_r), height, abs(u) of the folds and their strength: derived, checked by an image solver to 1e-5.
FOLDS = [
    ((0.005, 0.4), 0.1 * 5.586143571, [0.2437551], [13.538065]),
    ((0.005, 0.4), 0.5 * 5.586143571, [0.0398675], [64.434269]),
    ((0.005, 0.4), 0.75 * 5.586143571, [0.0110736], [101.75498]),
    ((0.1, 0.5), 0.1 * 1.264911064, [0.3662610], [4.1280475]),
    ((0.1, 0.5), 0.25 * 1.264911064, [0.2327896], [4.9428085]),
    ((0.1, 0.5), 0.75 * 1.264911064, [0.0320375], [9.2655910]),
    ((-0.005, 0.4), 0.1 * 1.914864231, [0.1413381, 0.4162785], [134.77227, 8.0633681]),
    ((-0.005, 0.4), 0.5 * 1.914864231, [0.1392566, 0.1946575], [138.66341, 27.228200]),
    ((-0.005, 0.4), 0.75 * 1.914864231, [0.1362312, 0.1510004], [147.70147, 53.961864]),
]


@pytest.mark.parametrize(("lens", "height", "places", "strengths"), FOLDS)
def test_crossings_of_one_star(
    lens: tuple[float, float], height: float, places: list[float], strengths: list[float]
) -> None:
    found = track_crossings(one_star(*lens), (-1.0, height), (1.0, height))
    mirrored = [-place for place in places[::-1]] + places
    # Seven figures are given.
    assert 2.0 * found.position - 1.0 == pytest.approx(mirrored, abs=1.5e-7)
    assert found.strength == pytest.approx(strengths[::-1] + strengths, rel=2e-6)
    entering = [True, False] if len(places) == 1 else [True, False, True, False]
    assert found.entering.tolist() == entering


def test_fold_on_the_axis_of_a_saddle() -> None:
    for a, lam_r in ((0.005, 0.4), (0.1, 0.5)):
        # On the symmetry axis: K = 1 / (2 k a^(3/4)) at 2 sqrt(a), exactly (derived).
        found = track_crossings(one_star(-a, lam_r), (0.0, 0.0), (2.0 * np.sqrt(a) + 0.05, 0.0))
        assert found.place[0] == pytest.approx(2.0 * np.sqrt(a), rel=1e-9)
        assert found.strength[0] == pytest.approx(1.0 / ((lam_r - a) * a**0.75), rel=1e-6)
        assert found.angle[0] == pytest.approx(0.0, abs=1e-5)
        assert found.entering[0]


def test_angles_and_strengths_agree_with_the_lens_map() -> None:
    lens, direction = (0.1, 0.5), np.exp(0.4j)
    gamma, k = 0.2, 0.3
    phi = np.array([0.5, 0.9, 1.3])
    c = np.cos(2.0 * phi)
    square = (-gamma * c + np.sqrt(gamma**2 * c**2 + 0.05)) / 0.05
    z = np.sqrt(square) * np.exp(1j * phi)
    field = one_star(*lens)
    known = fold_quantities(field, z.real, z.imag)
    for i, point in enumerate(k * z - gamma * z.conj() - 1.0 / z.conj()):
        start, end = point - 0.01 * direction, point + 0.01 * direction
        found = track_crossings(field, (start.real, start.imag), (end.real, end.imag))
        nearest = int(np.argmin(np.abs(found.place - 0.01)))
        along = known.normal[i] @ [direction.real, direction.imag]
        # The line is off by 1e-10 at most; strengths vary over the size of the caustic.
        assert found.place[nearest] == pytest.approx(0.01, abs=1e-9)
        assert found.strength[nearest] == pytest.approx(known.strength[i], rel=1e-6)
        assert found.angle[nearest] == pytest.approx(np.arccos(abs(along)), abs=1e-6)
        assert bool(found.entering[nearest]) == (along > 0.0)


def test_disc_on_an_isolated_fold_converges() -> None:
    lens, height = (-0.005, 0.4), 0.5 * 1.914864231
    field, worst = one_star(*lens), []
    fold = track_crossings(field, (0.0, height), (0.17, height))
    assert len(fold) == 1
    x = np.array([-2.0, -0.9, -0.5, 0.0, 0.5, 0.9, 1.1, 2.0])
    for radius in (1e-2, 1e-3, 1e-4):
        shift = radius / np.cos(fold.angle[0])
        found = curve(field, 0.0 + 1j * height, 0.17 + 1j * height, radius,
            positions=(fold.place[0] + x * shift) / 0.17, accuracy=1e-4)  # fmt: skip
        closed = fold.background[0] + fold.strength[0] / np.sqrt(radius) * fold_profile(x)
        worst.append(np.abs(found.magnification / closed - 1.0).max())
    # What the closed form leaves out, the slopes of the background and of the fold's strength, goes with the radius.
    assert worst[2] < 3e-3
    assert worst[0] > 7.0 * worst[1] > 49.0 * worst[2]


def test_images_of_few_stars_are_the_roots_of_their_polynomial() -> None:
    rng = np.random.default_rng(7)
    for trial in range(60):
        n, lam_r = int(rng.integers(1, 4)), rng.uniform(0.2, 1.4)
        lam_t = min(rng.choice([-1.0, 1.0]) * 10.0 ** rng.uniform(-1.7, -0.1), 1.95 - lam_r)
        if trial % 9 == 0:  # a macro maximum
            lam_t, lam_r = -abs(lam_t), -lam_r
        kappa, gamma = 1.0 - 0.5 * (lam_t + lam_r), 0.5 * (lam_r - lam_t)
        mass = rng.uniform(0.1, 2.0, n)
        field = StarField(*rng.uniform(-1.0, 1.0, (2, n)), mass, kappa, gamma, 9.0, 9.0, sheet=False, accuracy=1e-10)
        u, v = rng.uniform(-2.0, 2.0, 2)
        found, expected = image_magnifications(field, u, v), star_images(u, v, field).magnification
        assert len(found) == len(expected)
        # Polynomials between nodes are good to 1e-6 away from folds; no position of these is nearer than 1e-3 to one.
        assert np.sort(found) == pytest.approx(np.sort(expected), rel=1e-4)
        # Index theorem: each star takes one from the macro image's parity.
        assert np.sign(found).sum() == np.sign(lam_t * lam_r) - n
        assert count_images(field, u, v) == len(expected)


@pytest.mark.parametrize("lens", LENSES)
def test_image_counts_by_region(lens: tuple[float, float]) -> None:
    # Chang & Refsdal (1984): 4 inside the caustics, else 2; a saddle's axis between its two triangles has 2.
    field = one_star(*lens)
    cusp, inner = (lens[1] - lens[0]) / np.sqrt(lens[1]), (2.0 * np.sqrt(-lens[0]) if lens[0] < 0.0 else 0.0)
    u = np.array([1e-4, 0.5 * (cusp + inner), 0.999 * cusp, 1.001 * cusp, 2.0])
    counts = count_images(field, u, 0.0)
    assert counts.tolist() == [2 if lens[0] < 0.0 else 4, 4, 4, 2, 2]
    twin = one_star_images(0.5 * (cusp + inner), 0.0, *lens)
    found = image_magnifications(field, 0.5 * (cusp + inner), 0.0)
    assert found == pytest.approx(twin.magnification[np.argsort(-np.abs(twin.magnification))], rel=1e-5)


def few_stars() -> StarField:
    rng = np.random.default_rng(3)
    return StarField(*rng.uniform(-8.0, 8.0, (2, 20)), 1.0, 0.55, 0.3, 12.0, 12.0, sheet=False)


def test_threads_change_nothing() -> None:
    field = few_stars()
    one, two = (
        track_magnification(field, (-1.0, 0.2), (1.0, 0.3), [1e-2, 1e-3], limb_darkening=[0.0, 0.5], threads=n)
        for n in (1, 2)
    )
    assert np.array_equal(one.position, two.position)
    assert np.array_equal(one.magnification, two.magnification)
    assert one.evaluations == two.evaluations


def test_sampling_follows_the_curve() -> None:
    field = few_stars()
    found = track_magnification(field, (-1.0, 0.2), (1.0, 0.3), 1e-2, threads=1)
    assert found.flags == ()
    middle = 0.5 * (found.position[1:] + found.position[:-1])[::7]
    between = track_magnification(field, (-1.0, 0.2), (1.0, 0.3), 1e-2, positions=middle, threads=1)
    straight = np.interp(middle, found.position, found.magnification)
    # Five times the accuracy is promised, and the accuracy itself comes on top of it.
    assert np.abs(straight / between.magnification - 1.0).max() < 7e-3


def test_a_track_backwards_and_in_pieces_is_the_same() -> None:
    field, share = few_stars(), np.linspace(0.05, 0.95, 19)
    whole = curve(field, -1 + 0.2j, 1 + 0.3j, 1e-2, positions=share)
    back = curve(field, 1 + 0.3j, -1 + 0.2j, 1e-2, positions=1.0 - share)
    piece = curve(field, -1 + 0.2j, 0.25j, 1e-2, positions=2.0 * share[:9])
    # Each is good to 1e-3.
    assert back.magnification == pytest.approx(whole.magnification, rel=2e-3)
    assert piece.magnification == pytest.approx(whole.magnification[:9], rel=2e-3)
    assert np.sort(back.crossings.place) == pytest.approx(np.sort(whole.length - whole.crossings.place), abs=1e-5)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"end": (-1.0, 0.0)}, r"`start` and `end` must differ"),
        ({"end": (np.nan, 0.0)}, r"`end` must be two finite numbers"),
        ({"start": (1.0,)}, r"`start` must be two finite numbers"),
        ({"radius": 0.0}, r"`radius` must be positive and finite"),
        ({"radius": [[1e-2]]}, r"`radius` must be a number or one-dimensional"),
        ({"radius": [1e-2, 1e-3], "limb_darkening": [0.0, 0.1, 0.2]}, r"must have the same shape"),
        ({"limb_darkening": 1.5}, r"`limb_darkening` must be between 0 and 1"),
        ({"positions": [0.0, 1.5]}, r"`positions` must be between 0"),
        ({"positions": []}, r"`positions` must be one-dimensional and not empty"),
        ({"accuracy": 1e-9}, r"`accuracy` must be between"),
    ],
)
def test_misuse_is_named(change: dict[str, Any], message: str) -> None:
    arguments: dict[str, Any] = {"start": (-1.0, 0.0), "end": (1.0, 0.0), "radius": 1e-2} | change
    with pytest.raises(InputError, match=message):
        track_magnification(one_star(0.1, 0.5), **arguments)


def test_positions_of_images_must_be_finite() -> None:
    with pytest.raises(InputError, match=r"`u`, `v` must be finite"):
        count_images(one_star(0.1, 0.5), [0.0, np.nan], 0.0)


def test_stars_on_each_other_are_one() -> None:
    share = np.linspace(0.1, 0.9, 5)
    together = StarField([0.0, 0.0, 1.0], [0.1, 0.1, 0.0], [0.5, 0.7, 1.0], 0.6, 0.2, 5.0, 5.0, sheet=False)
    single = StarField([0.0, 1.0], [0.1, 0.0], [1.2, 1.0], 0.6, 0.2, 5.0, 5.0, sheet=False)
    one, two = (curve(field, -1.0 + 0.1j, 1.0 + 0.2j, 1e-2, positions=share) for field in (together, single))
    assert one.magnification == pytest.approx(two.magnification, rel=1e-9)
    assert count_images(together, 0.3, 0.4) == count_images(single, 0.3, 0.4)


def test_no_star_at_all() -> None:
    field = StarField([], [], [], 0.7, 0.2, 5.0, 5.0, sheet=False)
    found = track_magnification(field, (-1.0, 0.0), (1.0, 0.5), 1e-2, threads=1)
    # The macro lens alone: 1 / abs(0.1 * 0.5).
    assert found.magnification == pytest.approx(np.full(len(found.position), 20.0), rel=1e-6)
    assert found.flags == ()
    assert count_images(field, 0.3, 0.1) == 1
