"""Magnification maps: one star against closed forms, area against rays, errors that hold, threads and checkpoints."""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np
import pytest
from twins import lens, one_star_images

from crossing.errors import InputError
from crossing.optics.point_lens import disc_on_axis, point_magnification
from crossing.shooting.field import StarField
from crossing.shooting.maps import mapping
from crossing.shooting.maps.mapping import magnification_map, plan_map
from crossing.stars.mass_functions import chabrier, kroupa, log_normal, power_law, salpeter, single


def one_star(lam_t=1.0, lam_r=1.0):
    """A solar mass at the origin in convergence and shear."""
    return StarField([0.0], [0.0], [1.0], *lens(lam_t, lam_r), 30.0, 30.0, sheet=False)


def total(u, v, lam_t, lam_r):
    """Magnification of a point source behind it, by the image solver."""
    return np.abs(one_star_images(u, v, lam_t, lam_r).magnification).sum()


# lam_t, lam_r, source, total magnification. Closed forms of Chang & Refsdal (1979, 1984): at the centre, halfway to the
# cusps of either axis, outside; on the saddle side halfway between fold and cusp, and between the two caustics.
POINTS = [
    (0.005, 0.4, (0.0, 0.0), 512.6582278),
    (0.005, 0.4, (0.6245498379 / 2, 0.0), 516.8776371),
    (0.005, 0.4, (0.0, 5.586143571 / 2), 850.2109705),
    (0.005, 0.4, (1.2 * 0.6245498379, 0.0), 505.82192),
    (0.1, 0.5, (0.0, 0.0), 30.0),
    (0.1, 0.5, (0.5656854249 / 2, 0.0), 100 / 3),
    (0.1, 0.5, (0.0, 1.264911064 / 2), 140 / 3),
    (0.1, 0.5, (1.2 * 0.5656854249, 0.0), 27.1044147),
    (-0.005, 0.4, ((0.1414213562 + 0.6403612262) / 2, 0.0), 556.4641248),
    (-0.005, 0.4, (0.0, 0.0), 6.172839506),
    (-0.1, 0.5, ((0.632455532 + 0.8485281374) / 2, 0.0), 70.35353507),
    (-0.1, 0.5, (0.0, 0.0), 10 / 3),
]


@pytest.mark.parametrize(("lam_t", "lam_r", "source", "expected"), POINTS)
def test_magnification_of_one_star(lam_t, lam_r, source, expected):
    """One pixel of 0.001 around each point, asked for 1e-4: curvature over the pixel is below that."""
    assert total(source[0] + 1e-9, source[1] + 1e-9, lam_t, lam_r) == pytest.approx(expected, rel=1e-6)
    found = magnification_map(one_star(lam_t, lam_r), source, 1e-3, 1, accuracy=1e-4)
    assert found.values[0, 0] == pytest.approx(expected, rel=5e-4)
    assert found.images == 1


# lam_t, lam_r, fold on the u axis at 2 sqrt(|lam_t|), its strength 1/(2 k |lam_t|^3/4).
@pytest.mark.parametrize(
    ("lam_t", "lam_r", "fold", "strength"),
    [(-0.005, 0.4, 0.1414213562, 134.6404025), (-0.1, 0.5, 0.632455532, 14.05853313)],
)
def test_inner_fold_of_a_saddle(lam_t, lam_r, fold, strength):
    """A strip of pixels across it: dark before, and K/sqrt(d) brighter within; the fold lies where it should."""
    pixel = fold / 2000
    found = magnification_map(
        one_star(lam_t, lam_r), (fold, 0.0), 100 * pixel, 100, accuracy=1e-4, height=pixel
    ).values[0]
    dark = np.array([total(u, 0.0, lam_t, lam_r) for u in fold + pixel * (np.arange(49) - 49.5)])
    assert found[:49] == pytest.approx(dark, abs=3e-4 * found.mean())  # 1e-4 of the mean is asked for
    # Pixel means of K/sqrt(d), d from the fold: 2 K (sqrt(d2) - sqrt(d1)) / (d2 - d1); the next order is sqrt(d/fold).
    # The strip's curvature moves the fold by less than 1% of a pixel.
    edges = pixel * np.arange(0, 51)
    expected = dark[-1] + 2 * strength * np.diff(np.sqrt(edges)) / pixel
    assert found[50:] == pytest.approx(expected, rel=0.05)


@pytest.mark.parametrize(("lam_t", "lam_r"), [(0.1, 0.5), (-0.1, 0.5), (0.005, 0.4), (-0.005, 0.4)])
def test_map_of_one_star_against_its_images(lam_t, lam_r):
    """Pixels off the caustic: means by 3 x 3 Gauss points of the image solver's total magnification.

    A pixel counts as off the caustic where all nine and the pixel's corners have as many images. 1e-3 of the mean is
    asked for; 5e-3 of it leaves room for the worst pixel.
    """
    found = magnification_map(one_star(lam_t, lam_r), (0.33, 0.21), 1.2, 12)
    node, weight = np.polynomial.legendre.leggauss(3)
    clear = 0
    for row, v in enumerate(found.v):
        for column, u in enumerate(found.u):
            du, half = found.pixel_size / 2 * node, found.pixel_size / 2
            inner = [[one_star_images(u + a, v + b, lam_t, lam_r).magnification for a in du] for b in du]
            corners = [one_star_images(u + a, v + b, lam_t, lam_r) for a in (half, -half) for b in (half, -half)]
            if len({len(m) for line in inner for m in line} | {len(m.magnification) for m in corners}) > 1:
                continue
            clear += 1
            mean = sum(weight[i] * weight[j] / 4 * np.abs(inner[i][j]).sum() for i in range(3) for j in range(3))
            # Close to the caustic three points are not enough: judge where the pixel is smooth.
            if np.ptp([np.abs(m).sum() for line in inner for m in line]) < 0.1 * mean:
                assert abs(found.values[row, column] - mean) < 5e-3 * max(mean, found.mean_magnification)
    assert clear > 70


def test_point_lens():
    """Paczynski's curve, off the centre; at the centre the mean of 1/u over a pixel, 4 asinh(1)/pixel."""
    found = magnification_map(one_star(), (0.0, 0.0), 4.02, 201, accuracy=3e-4)
    u, v = np.meshgrid(found.u, found.v)
    node, weight = np.polynomial.legendre.leggauss(4)
    expected = np.zeros_like(u)
    for a, wa in zip(node, weight, strict=True):
        for b, wb in zip(node, weight, strict=True):
            expected += wa * wb / 4 * point_magnification(np.hypot(u + 0.01 * a, v + 0.01 * b))
    away = np.hypot(u, v) > 0.03
    assert found.values[away] == pytest.approx(expected[away], rel=4e-3)  # 40,000 pixels, the worst of them
    assert np.sqrt(np.mean((found.values / expected - 1)[away] ** 2)) < 5e-4
    assert found.values[100, 100] == pytest.approx(4 * np.arcsinh(1.0) / 0.02, rel=3e-3)
    # Symmetric under all turns and mirrors.
    assert found.values == pytest.approx(found.values.T, rel=3e-3)
    assert found.values == pytest.approx(found.values[::-1], rel=3e-3)


def test_discs_behind_a_point_lens():
    """On the axis sqrt(1 + 4/rho^2); at (0.5, 0.1) and (1, 0.5) by numerical integration, ten digits.

    A hundred or more pixels a disc, whose sides cut through pixels with a gradient: 1e-3.
    """
    found = magnification_map(one_star(), (0.5, 0.0), 2.4, 480, accuracy=1e-3, height=2.4)
    for radius, at, expected in (
        (0.5, 0.0, float(disc_on_axis(0.5))),
        (0.1, 0.0, 20.0249843945),
        (0.1, 0.5, 2.19371740665),
        (0.5, 1.0, 1.38100392790),
    ):
        disc = found.convolve(radius)
        row = disc.values.shape[0] // 2
        line = 0.5 * (disc.values[row - 1] + disc.values[row])
        assert np.interp(at, disc.u, line) == pytest.approx(expected, rel=1e-3)


FIELDS = {
    "minimum": (lambda: StarField.draw(0.4, 0.4, 0.4, 3.0, seed=1), 6.0, 120),
    "saddle": (lambda: StarField.draw(*lens(-0.05, 0.5), 0.05, 2.0, kroupa(), seed=3), 4.0, 100),
    "macro": (lambda: StarField.draw(0.699, 0.299, 0.01, 2.0, salpeter(), seed=2), 4.0, 80),
}


@pytest.mark.parametrize("name", FIELDS)
def test_area_and_rays_agree_everywhere(name):
    """Every pixel within five standard errors: Poisson's of the rays expected in it, and the area map's.

    A lattice scatters less than Poisson, so that most pixels are well within: their rms is below one.
    """
    make, width, pixels = FIELDS[name]
    field = make()
    area = magnification_map(field, width=width, pixels=pixels, accuracy=2e-3)
    rays = magnification_map(field, width=width, pixels=pixels, method="rays", rays_per_pixel=200)
    poisson = np.sqrt(area.values * field.expected_mean / 200)
    ratio = (area.values - rays.values) / np.hypot(area.error, poisson)
    assert np.max(np.abs(ratio)) < 5
    assert np.sqrt(np.mean(ratio**2)) < 0.9
    assert np.mean(np.abs(ratio) > 3) < 0.0027  # as of a normal distribution
    assert rays.mean_magnification == pytest.approx(area.mean_magnification, rel=2e-3)
    assert area.values.min() > 0
    assert np.median(rays.error / poisson) == pytest.approx(1.0, abs=0.1)


def error_ratios(monkeypatch, field, width, pixels, accuracy):
    """Estimated errors over true ones, by a four times finer map that is 16 times as good: median, 99th percentile."""
    jobs, run = [], mapping._run

    def record(job, *arguments):
        jobs.append(job)
        return run(job, *arguments)

    monkeypatch.setattr(mapping, "_run", record)
    found = magnification_map(field, width=width, pixels=pixels, accuracy=accuracy)
    finer = replace(jobs[-1], step=jobs[-1].step / 4, tolerance=jobs[-1].tolerance / 16)
    true = np.abs(found.values - run(finer, 0, mapping.Keeper(None, 1.0, "", 24), 2)[0])
    return [np.percentile(found.error, part) / np.percentile(true, part) for part in (50, 99)]


@pytest.mark.parametrize("name", ["minimum", "saddle"])
def test_estimated_errors_hold(name, monkeypatch):
    """Right within a factor two, for a rough map."""
    make, width, _ = FIELDS[name]
    for ratio in error_ratios(monkeypatch, make(), width / 2, 30, 5e-3):
        assert 0.5 < ratio < 2


@pytest.mark.slow
@pytest.mark.parametrize("name", FIELDS)
@pytest.mark.parametrize("accuracy", [1e-2, 1e-3])
def test_estimated_errors_of_fine_maps_hold(name, accuracy, monkeypatch):
    """Right within a factor two; a minute or two each."""
    make, width, pixels = FIELDS[name]
    for ratio in error_ratios(monkeypatch, make(), width, pixels, accuracy):
        assert 0.5 < ratio < 2


def test_lost_flux_stays_below_its_bound():
    """A field that serves a wider region of rays than is then used: what the smaller one lacks, at 5e-4 and 5e-3."""
    for seed in (0, 1):
        field = StarField.draw(*lens(-0.2, 0.5), 0.05, 2.0, seed=seed, lost_flux=2e-5)
        whole = magnification_map(field, width=4.0, pixels=20, accuracy=2e-3, error=False).mean_magnification
        for bound in (5e-4, 5e-3):
            field.lost_flux = bound
            part = magnification_map(field, width=4.0, pixels=20, accuracy=2e-3, error=False).mean_magnification
            assert 0 < 1 - part / whole < bound


def test_threads_do_not_matter():
    """Bitwise, since shares are the same and are added in the same order."""
    field = FIELDS["saddle"][0]()
    for method in ("area", "rays"):
        one, *more = (
            magnification_map(field, width=2.0, pixels=40, method=method, threads=threads, accuracy=1e-2)
            for threads in (1, 2, 5)
        )
        for other in more:
            assert np.array_equal(one.values, other.values)
            assert np.array_equal(one.error, other.error)
            assert one.rays == other.rays


def test_nothing_asked_before_matters():
    """Leaves are those of the window, whatever the field was used for earlier."""
    first, second = FIELDS["saddle"][0](), FIELDS["saddle"][0]()
    second.source_position(1e4, 0.0)
    magnification_map(second, (3.0, 2.0), width=1.0, pixels=4, accuracy=1e-2)
    maps = [magnification_map(field, width=2.0, pixels=20, accuracy=1e-2).values for field in (first, second)]
    assert np.array_equal(*maps)


def test_fluxes_of_parts_add_up():
    """A window and its four quarters, in other pixels: the same light, to the accuracy that was asked for."""
    field = FIELDS["minimum"][0]()
    whole = magnification_map(field, width=4.0, pixels=40)
    blocks = whole.values.reshape(2, 20, 2, 20).mean(axis=(1, 3))
    for row, v in enumerate((-1.0, 1.0)):
        for column, u in enumerate((-1.0, 1.0)):
            part = magnification_map(field, (u, v), width=2.0, pixels=7)
            assert part.mean_magnification == pytest.approx(blocks[row, column], rel=1e-3)


class KilledError(Exception):
    """Stands for a kill."""


def test_checkpoint_gives_the_identical_map(tmp_path, monkeypatch):
    """Stopped again and again, the map is bitwise the undisturbed one, and finished shares are not redone."""
    field, path = FIELDS["saddle"][0](), tmp_path / "map.npz"
    options = {"width": 2.0, "pixels": 40, "accuracy": 1e-2}
    run, calls = mapping._Job.run, []

    def stopping(limit):
        def stop(job, *arguments):
            if len(calls) >= limit:
                raise KilledError
            calls.append(job)
            run(job, *arguments)

        return stop

    monkeypatch.setattr(mapping._Job, "run", stopping(1000))
    undisturbed = magnification_map(field, **options)
    shares = len(calls)
    assert shares >= 48  # two maps at least
    calls.clear()
    for limit in (5, 17, 30, shares - 4):
        monkeypatch.setattr(mapping._Job, "run", stopping(limit))
        with pytest.raises(KilledError):
            magnification_map(field, checkpoint=path, checkpoint_seconds=0.0, threads=1, **options)
        assert path.exists()
    monkeypatch.setattr(mapping._Job, "run", stopping(1000))
    resumed = magnification_map(field, checkpoint=path, checkpoint_seconds=0.0, threads=2, **options)
    assert np.array_equal(resumed.values, undisturbed.values)
    assert np.array_equal(resumed.error, undisturbed.error)
    assert resumed.rays == undisturbed.rays
    assert resumed.description == undisturbed.description
    assert len(calls) == shares
    assert not path.exists()


def test_checkpoints_of_other_maps_and_damaged_ones_are_not_used(tmp_path, monkeypatch):
    field, path = FIELDS["saddle"][0](), tmp_path / "map.npz"
    options = {"width": 2.0, "pixels": 20, "accuracy": 1e-2, "error": False}
    expected = magnification_map(field, **options)
    run, calls = mapping._Job.run, []

    def stop(job, *arguments):
        calls.append(job)
        if len(calls) > 9:
            raise KilledError
        run(job, *arguments)

    monkeypatch.setattr(mapping._Job, "run", stop)
    with pytest.raises(KilledError):
        magnification_map(field, checkpoint=path, checkpoint_seconds=0.0, threads=1, **(options | {"width": 2.1}))
    monkeypatch.setattr(mapping._Job, "run", run)
    whole = path.read_bytes()
    for damaged in (whole, whole[: len(whole) // 2], b"", b"no archive at all", whole[:-10] + b"0123456789"):
        path.write_bytes(damaged)
        found = magnification_map(field, checkpoint=path, **options)
        assert np.array_equal(found.values, expected.values)
        assert not path.exists()


def test_checkpoint_that_cannot_be_written(tmp_path):
    with pytest.raises(InputError, match="the checkpoint cannot be written"):
        magnification_map(
            one_star(0.1, 0.5),
            width=1.0,
            pixels=4,
            accuracy=1e-2,
            checkpoint=tmp_path / "no" / "map.npz",
            checkpoint_seconds=0.0,
        )
    assert list(tmp_path.iterdir()) == []


BAD = [
    ({"width": 0.0}, "`width` must be positive and finite, got 0"),
    ({"height": -1.0}, "`height` must be positive and finite, got -1"),
    ({"method": "inverse"}, "`method` must be area or rays, got 'inverse'"),
    ({"pixels": 0}, "`pixels` must be a whole number between 1 and 50000, got 0"),
    ({"pixels": 10.5}, "`pixels` must be a whole number between 1 and 50000, got 10.5"),
    ({"accuracy": 1e-9}, "`accuracy` must be between 1e-6 and 0.5, got 1e-09"),
    ({"rays_per_pixel": 0.0}, "`rays_per_pixel` must be between 0.01 and 1e6, got 0"),
    ({"pixels": 50000, "height": 100.0}, "the map needs .* GiB for 500000 x 50000 pixels; choose fewer pixels"),
]


@pytest.mark.parametrize(("options", "message"), BAD)
def test_bad_arguments(options, message):
    with pytest.raises(InputError, match=message):
        magnification_map(one_star(0.1, 0.5), **({"width": 10.0, "pixels": 10} | options))


def test_plan():
    """Rays within a factor two of what the map then shoots, stars as they are, seconds of the right order."""
    field = FIELDS["minimum"][0]()
    options = {"width": 6.0, "pixels": 100, "threads": 1}
    plan = plan_map(field, **options)
    start = time.perf_counter()
    found = magnification_map(field, **options)
    spent = time.perf_counter() - start
    assert plan.stars == len(field)
    assert found.rays / 2 < plan.rays < found.rays * 2
    assert spent / 30 < plan.seconds < 30 * spent  # other work may share the machine
    assert plan.bytes > 8 * 100 * 101


# lam_t, lam_r, kappa_star, masses, width of the window: mean magnification 3 to 3000, both parities.
ENSEMBLES = [
    (0.5, 2 / 3, 0.1, single(1.0), 160.0),
    (0.2, 1.0, 0.4, kroupa(), 80.0),
    (-0.2, 1.0, 0.3, salpeter(), 80.0),
    (0.05, 0.5, 0.02, chabrier(), 60.0),
    (-0.05, 0.5, 0.05, kroupa(), 60.0),
    (0.005, 0.4, 0.01, single(1.0), 60.0),
    (-0.005, 0.4, 0.003, kroupa(0.1, 100), 60.0),
    (1 / 1200, 0.4, 0.003, power_law(1.5, 0.1, 1.0), 60.0),
    (-1 / 1200, 0.4, 0.005, log_normal(0.3, 0.3), 60.0),
]


def mean_over_fields(lam_t, lam_r, kappa_star, masses, width, fields, seed):
    """Mean magnification over 1/abs(lam_t lam_r), and its standard error from field to field.

    Few and coarse pixels: what they share out wrongly, 1e-4, they do not lose.
    """
    found = []
    for number in range(fields):
        field = StarField.draw(*lens(lam_t, lam_r), kappa_star, width / 2, masses, seed=seed + number)
        chart = magnification_map(field, width=width, pixels=20, accuracy=1e-2, error=False)
        assert chart.expected_mean == pytest.approx(1 / abs(lam_t * lam_r), rel=1e-9)
        found.append(chart.mean_magnification / chart.expected_mean)
    return np.mean(found), np.std(found, ddof=1) / np.sqrt(fields)


@pytest.mark.parametrize("number", [3, 4, 5, 7])
def test_mean_magnification(number):
    """Small windows scatter: three standard errors, 1 to 3%."""
    mean, error = mean_over_fields(*ENSEMBLES[number][:4], 10.0, 5, 10 * number)
    assert error < 0.05
    assert abs(mean - 1) < 3 * error


@pytest.mark.slow
@pytest.mark.parametrize("number", range(len(ENSEMBLES)))
def test_mean_magnification_to_a_percent(number):
    """Three standard errors and 1%; a hundred seconds each, or less."""
    lam_t, _, kappa_star, _, _ = ENSEMBLES[number]
    fields = 6 if abs(lam_t) < 0.001 else 16 if kappa_star > 0.2 else 12
    mean, error = mean_over_fields(*ENSEMBLES[number], fields, 100 * number)
    assert error < 0.005
    assert abs(mean - 1) < min(3 * error, 0.01)


@pytest.mark.parametrize(("lam_t", "gradient"), [(0.0, 1e-4), (0.005, -1e-4)])
def test_mean_of_a_corrugated_macro_caustic(lam_t, gradient):
    """Stars leave the mean of the smooth pair as it is, two images at x = (-lam_t +- sqrt(lam_t^2 + 2 g u))/g.

    Within three standard errors of eight fields, and 1%.
    """
    found = []
    for seed in range(8):
        field = StarField.draw(*lens(lam_t, 0.4), 0.01, 10.0, kroupa(), gradient=gradient, seed=seed)
        chart = magnification_map(field, width=20.0, pixels=20, accuracy=1e-2, error=False)
        found.append(chart.mean_magnification)
    low, high = (np.sqrt(np.maximum(lam_t**2 + 2 * gradient * u, 0.0)) / abs(gradient) for u in (-10.0, 10.0))
    found = np.array(found) / (2 * abs(high - low) / 20 / 0.4)
    error = np.std(found, ddof=1) / np.sqrt(8)
    assert abs(np.mean(found) - 1) < min(3 * error, 0.01)
    assert chart.images == 2
    assert chart.expected_mean is None
