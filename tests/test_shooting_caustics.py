"""Critical curves and caustics: closed forms of one star, counting laws of many, brute force, and ensembles."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from crossing.errors import InputError
from crossing.shooting.caustics.folds import fold_quantities
from crossing.shooting.caustics.network import FLAGS, CausticCurve, CausticNetwork, trace_caustics
from crossing.shooting.field import StarField
from crossing.shooting.maps.mapping import magnification_map


def one_star(lam_t: float, lam_r: float) -> StarField:
    """A star of one solar mass at the origin; the series are exact to 1e-12."""
    kappa, gamma = 1.0 - 0.5 * (lam_t + lam_r), 0.5 * (lam_r - lam_t)
    return StarField([0.0], [0.0], [1.0], kappa, gamma, 10.0, 10.0, sheet=False, accuracy=1e-12)


def determinant(field: StarField, x: Any, y: Any) -> NDArray[np.float64]:
    jacobian = field.jacobian(x, y)
    return np.asarray(jacobian[..., 0, 0] * jacobian[..., 1, 1] - jacobian[..., 0, 1] ** 2)


# (lam_t, lam_r), number of curves, their total length and area: derived, and checked by quadrature of the closed form.
ONE_STAR = [
    ((0.005, 0.4), 1, 22.98326893, 1.921764846),
    ((0.1, 0.5), 1, 5.830807759, 0.7491071360),
    ((-0.005, 0.4), 2, 15.92329093, 0.7647899647),
    ((-0.1, 0.5), 2, 2.672162324, 0.07059654067),
]


@pytest.mark.parametrize(("lens", "count", "length", "area"), ONE_STAR)
def test_length_and_area_of_a_single_star(lens: tuple[float, float], count: int, length: float, area: float) -> None:
    accuracy = 1e-6
    found = trace_caustics(one_star(*lens), width=12.0, accuracy=accuracy)
    assert found.flags == ()
    assert len(found) == count
    assert all(curve.closed for curve in found.curves)
    # Chords are too short by (8/3) sag^2 / chord each, and their area is off by less than the sag times the length.
    assert found.length() == pytest.approx(length, rel=1e-5)
    assert found.length() < length
    assert sum(abs(curve.area) for curve in found.curves) == pytest.approx(area, abs=accuracy * length)


@pytest.mark.parametrize(
    ("lens", "cusps"),
    # (2 gamma / sqrt(lam_r), 0) and (0, 2 gamma / sqrt(lam_t)), Chang & Refsdal (1984); off the axes: derived.
    [
        ((0.005, 0.4), [(0.6245498379, 0.0), (0.0, 5.586143571)]),
        ((0.1, 0.5), [(0.5656854249, 0.0), (0.0, 1.264911064)]),
        ((-0.005, 0.4), [(0.6403612262, 0.0), (0.1306751708, 1.914864231)]),
        ((-0.1, 0.5), [(0.8485281374, 0.0), (0.6131551023, 0.2824816757)]),
    ],
)
def test_cusps_of_a_single_star(lens: tuple[float, float], cusps: list[tuple[float, float]]) -> None:
    found = trace_caustics(one_star(*lens), width=12.0)
    expected = {(round(a * u, 8) + 0.0, round(b * v, 8) + 0.0) for u, v in cusps for a in (1, -1) for b in (1, -1)}
    assert len(found.cusps) == len(expected)
    for cusp in expected:
        # Cusps are located by root finding, whatever the accuracy of the polyline; the references have ten digits.
        assert np.abs(found.cusps - np.array(cusp)).max(axis=1).min() < 2e-8
    for curve in found.curves:
        assert len(curve.cusps) == (4 if lens[0] > 0.0 else 3)


def test_projected_length_of_a_single_star() -> None:
    # Closed integrals: 8 gamma / sqrt(lam_r) along u, 8 gamma / sqrt(lam_t) along v (derived).
    (curve,) = trace_caustics(one_star(0.1, 0.5), width=3.0).curves
    # The caustic turns at its cusps only, which are vertices: nothing is lost between vertices.
    assert np.abs(np.diff(curve.u)).sum() == pytest.approx(8.0 * 0.2 / np.sqrt(0.5), rel=1e-9)
    assert np.abs(np.diff(curve.v)).sum() == pytest.approx(8.0 * 0.2 / np.sqrt(0.1), rel=1e-9)


def test_crossings_and_strengths_along_a_line() -> None:
    # Half-way up the saddle's caustic: derived, and checked against an image solver.
    found = trace_caustics(one_star(-0.005, 0.4), width=12.0, accuracy=1e-6)
    height = 0.5 * 1.914864231
    shares = found.crossings((-1.0, height), (1.0, height))
    # Six decimals, with the sag of the polyline of 1e-6 along a nearly vertical caustic.
    assert 2.0 * shares - 1.0 == pytest.approx([-0.1946575, -0.1392566, 0.1392566, 0.1946575], abs=5e-6)
    strengths = [np.interp(0.0, curve.v[near] - height, curve.strength[near]) for curve, near in _inner(found, height)]
    # Linear between vertices.
    assert strengths == pytest.approx([138.66341] * 2, rel=1e-3)
    assert len(found.crossings((-1.0, 3.0), (1.0, 3.0))) == 0
    with pytest.raises(InputError, match=r"`start` and `end` must be finite and apart"):
        found.crossings((1.0, 1.0), (1.0, 1.0))


def _inner(found: CausticNetwork, height: float) -> list[tuple[CausticCurve, NDArray[np.int64]]]:
    """Curves with the two vertices at either side of a height, on their inner fold."""
    pairs = []
    for curve in found.curves:
        at = np.flatnonzero((curve.v[:-1] < height) != (curve.v[1:] < height))
        inner = at[np.argmin(np.abs(curve.u[at]))]
        pair = np.array([inner, inner + 1])
        pairs.append((curve, pair[np.argsort(curve.v[pair])]))
    return pairs


def test_the_caustic_of_a_star_without_shear_is_a_point() -> None:
    found = trace_caustics(one_star(0.5, 0.5), width=2.0)
    (curve,) = found.curves
    # The critical curve is the Einstein ring, here of radius 1 / sqrt(lam) (Einstein 1936), to the series' rounding.
    assert np.hypot(curve.x, curve.y) == pytest.approx(np.sqrt(2.0), rel=1e-9)
    assert found.length() < 1e-9
    assert len(curve.cusps) == 0
    assert found.flags == ()


def test_curves_have_smaller_determinants_at_their_left() -> None:
    field = one_star(0.1, 0.5)
    (curve,) = trace_caustics(field, width=3.0).curves
    x, y = 0.5 * (curve.x[1:] + curve.x[:-1]), 0.5 * (curve.y[1:] + curve.y[:-1])
    dx, dy = np.diff(curve.x), np.diff(curve.y)
    assert (determinant(field, x - dy, y + dx) < determinant(field, x + dy, y - dx)).all()


def random_field(seed: int) -> StarField:
    """1 to 11 isolated stars, loose or in a tight clump, in a field of any parity."""
    rng = np.random.default_rng(seed)
    count, size = int(rng.integers(1, 12)), rng.choice([0.3, 1.0, 3.0, 10.0])
    lam_r = rng.uniform(0.3, 1.5)
    lam_t = min(rng.choice([-1.0, 1.0]) * 10.0 ** rng.uniform(-2.3, -0.2), 1.98 - lam_r)
    if seed % 10 == 0:  # a macro maximum
        lam_t, lam_r = -abs(lam_t), -lam_r
    kappa, gamma = 1.0 - 0.5 * (lam_t + lam_r), 0.5 * (lam_r - lam_t)
    mass = rng.uniform(0.1, 2.0, count) * rng.choice([1.0, 1.0, 0.01])
    return StarField(*rng.uniform(-size, size, (2, count)), mass, kappa, gamma, 20.0, 20.0, sheet=False, accuracy=1e-10)


@settings(deadline=None, derandomize=True, max_examples=60)
@given(seed=st.integers(0, 10**9))
def test_critical_curves_of_n_stars_wind_2n_times(seed: int) -> None:
    """On a critical curve p = k e^(i phi); every phase has 2n solutions, roots of a polynomial (Witt 1990)."""
    field = random_field(seed)
    # All of the plane that matters: close pairs deflect by hundreds.
    found = trace_caustics(field, width=4000.0, accuracy=1e-2)
    assert found.flags == ()
    winding = 0.0
    for curve in found.curves:
        assert curve.closed
        jacobian = field.jacobian(curve.x, curve.y)
        phase = np.unwrap(np.angle(0.5 * (jacobian[:, 0, 0] - jacobian[:, 1, 1]) + 1j * jacobian[:, 0, 1]))
        winding += (phase[-1] - phase[0]) / (2.0 * np.pi)
    assert winding == pytest.approx(2.0 * len(field), abs=1e-9)


FIELDS: dict[str, Any] = {
    "minimum": {"kappa": 0.7975, "gamma": 0.1975, "kappa_star": 0.01},
    "saddle": {"kappa": 0.8025, "gamma": 0.2025, "kappa_star": 0.01},
    "dense": {"kappa": 0.5, "gamma": 0.2, "kappa_star": 0.2},
    "maximum": {"kappa": 1.6, "gamma": 0.1, "kappa_star": 0.3},
    "macro caustic": {"kappa": 0.7, "gamma": 0.3, "kappa_star": 0.01, "gradient": 4.8e-6},
    "wide macro caustic": {"kappa": 0.7, "gamma": 0.3, "kappa_star": 0.01, "gradient": 5.965378757109762e-05},
    "curved macro caustic": {"kappa": 0.7, "gamma": 0.3, "kappa_star": 0.05, "gradient": (1e-3, 5e-4)},
}


@pytest.mark.parametrize("name", FIELDS)
def test_no_critical_point_is_missed_or_made_up(name: str) -> None:
    """Sign changes of the determinant along lines of the image plane, by brute force."""
    field = StarField.draw(**FIELDS[name], window=3.0, seed=7)
    found = trace_caustics(field, (0.7, -0.6), 4.0, height=2.5)
    assert found.flags == ()
    rng = np.random.default_rng(2)
    counted = 0
    for x, y in _points_that_land(field, found, rng, 20):
        angle, share = rng.uniform(-0.3, 0.3), np.linspace(-40.0, 40.0, 80_001)
        # Nearly along the stretched axis, where lines stay in the window's preimage.
        cosine, sine = np.cos(angle), np.sin(angle)
        values = determinant(field, x + share * cosine, y + share * sine)
        at = np.flatnonzero((values[:-1] < 0.0) != (values[1:] < 0.0))
        brute = share[at] - values[at] * (share[1] - share[0]) / (values[at + 1] - values[at])
        traced = _on_line(found, x, y, cosine, sine)
        # The image plane's polyline may be off by its own sag, and nearly along the line.
        counted += _each_has_a_partner(field, found, brute, traced, (x, y, cosine, sine), inner=3.0)
        _each_has_a_partner(field, found, traced, brute, (x, y, cosine, sine), inner=6.0)
    assert counted >= 10


def _points_that_land(
    field: StarField, found: CausticNetwork, rng: np.random.Generator, count: int
) -> NDArray[np.float64]:
    wide, high = field.ray_region((0.5 * found.width, 0.5 * found.height), found.center)
    x, y = rng.uniform(-wide, wide, 200_000), rng.uniform(-high, high, 200_000)
    return np.column_stack((x, y))[np.flatnonzero(_lands(field, found, x, y, 0.0))[:count]]


def _lands(field: StarField, found: CausticNetwork, x: Any, y: Any, inner: float) -> NDArray[np.bool_]:
    u, v = field.source_position(x, y)
    room = inner * found.accuracy
    inside = (abs(u - found.center[0]) < 0.5 * found.width - room) & (
        abs(v - found.center[1]) < 0.5 * found.height - room
    )
    return np.asarray(inside)


def _on_line(found: CausticNetwork, x: float, y: float, cosine: float, sine: float) -> NDArray[np.float64]:
    places = [np.empty(0)]
    for curve in found.curves:
        along = (curve.x - x) * cosine + (curve.y - y) * sine
        across = (curve.y - y) * cosine - (curve.x - x) * sine
        at = np.flatnonzero((across[:-1] < 0.0) != (across[1:] < 0.0))
        places.append(along[at] + across[at] / (across[at] - across[at + 1]) * (along[at + 1] - along[at]))
    return np.concatenate(places)


def _each_has_a_partner(
    field: StarField,
    found: CausticNetwork,
    these: NDArray[np.float64],
    those: NDArray[np.float64],
    line: tuple[float, float, float, float],
    inner: float,
) -> int:
    x, y, cosine, sine = line
    these = these[np.abs(these) < 39.0]
    these = these[_lands(field, found, x + these * cosine, y + these * sine, inner)]
    for place in these:
        assert np.abs(those - place).min(initial=np.inf) < 0.05
    return len(these)


@pytest.mark.parametrize(
    ("name", "seed", "center", "width"),
    [
        ("saddle", 11, (0.3, 0.2), 1.5),
        ("minimum", 12, (-0.8, 0.5), 0.8),
        ("dense", 15, (0.6, 0.6), 2.4),
        ("curved macro caustic", 14, (0.5, -0.3), 1.6),
        # Here a long arc leaves the small window and comes back, and was once taken for one already known.
        ("wide macro caustic", 909343617, (-0.04443942, -0.25239767), 1.9103259378342052),
    ],
)
def test_a_part_of_the_window_gives_a_part_of_the_network(
    name: str, seed: int, center: tuple[float, float], width: float
) -> None:
    """Other windows make other cells: what is found in both is the same."""
    field = StarField.draw(**FIELDS[name], window=3.0, seed=seed)
    whole, part = trace_caustics(field, width=4.0, accuracy=3e-4), trace_caustics(field, center, width, accuracy=3e-4)
    rng, wrong, counted = np.random.default_rng(5), 0, 0
    for _ in range(40):
        start, end = 0.48 * width * rng.uniform(-1.0, 1.0, (2, 2)) + np.array(center)
        one, two = whole.crossings(tuple(start), tuple(end)), part.crossings(tuple(start), tuple(end))
        wrong += len(one) != len(two)
        counted += len(two)
        if len(one) == len(two) > 0:
            # Along a line that grazes a caustic, small shifts across are large along it.
            assert np.median(np.abs(one - two)) < 1e-3 / np.hypot(*(end - start))
    # A line may graze a caustic, or end on one, to within the accuracy.
    assert wrong <= 1
    assert counted > 10
    for curve in part.curves:
        away = np.abs(np.column_stack((curve.u, curve.v)) - np.array(center))
        assert (away <= 0.5 * width * (1.0 + 1e-12)).all()
        if not curve.closed:
            assert away[[0, -1]].max(axis=1) == pytest.approx([0.5 * width] * 2, abs=1e-12)


def test_the_sag_is_below_the_accuracy() -> None:
    field = StarField.draw(0.5, 0.2, 0.2, window=3.0, seed=4)
    coarse, fine = trace_caustics(field, width=5.0, accuracy=5e-3), trace_caustics(field, width=5.0, accuracy=1e-5)
    assert len(fine) == len(coarse) > 3
    start = np.concatenate([np.column_stack((curve.u, curve.v))[:-1] for curve in coarse.curves])
    move = np.concatenate([np.diff(np.column_stack((curve.u, curve.v)), axis=0) for curve in coarse.curves])
    square = np.maximum((move**2).sum(axis=1), 1e-300)
    for curve in fine.curves:
        for point in np.column_stack((curve.u, curve.v))[::20]:
            share = np.clip(((point - start) * move).sum(axis=1) / square, 0.0, 1.0)
            assert np.hypot(*(point - start - share[:, None] * move).T).min() < 5e-3


def test_vertices_and_cusps_are_on_the_curve() -> None:
    field = StarField.draw(0.5, 0.2, 0.2, window=3.0, seed=4, accuracy=1e-9)
    found = trace_caustics(field, width=5.0)
    assert len(found.cusps) > 10
    for curve in found.curves:
        inner = slice(1, -1)  # ends are interpolated
        folds = fold_quantities(field, curve.x[inner], curve.y[inner])
        # Corrected to 1e-10 of a step, and to the field's accuracy across leaves.
        assert np.abs(folds.determinant).max() < 1e-7
        assert folds.u == pytest.approx(curve.u[inner], abs=1e-7)
        plain = folds.change > 1e-3
        assert curve.strength[inner][plain] == pytest.approx(folds.strength[plain], rel=1e-4)
        for x, y in curve.critical_cusps:
            assert fold_quantities(field, x, y).change < 1e-6
            (at,) = np.flatnonzero((curve.x == x) & (curve.y == y))[:1]
            if 0 < at < len(curve) - 1:
                before = (curve.u[at] - curve.u[at - 1]) * (curve.u[at + 1] - curve.u[at])
                assert before + (curve.v[at] - curve.v[at - 1]) * (curve.v[at + 1] - curve.v[at]) < 0.0


def test_smooth_macro_caustic() -> None:
    # u = g x^2/2, v = lam_r y: the critical curve is x = 0, the caustic u = 0, K = sqrt(2/g)/lam_r (derived).
    field = StarField([], [], [], 0.7, 0.3, 100.0, 100.0, gradient=1e-3)
    found = trace_caustics(field, (1.0, 0.0), 6.0, height=3.0)
    (curve,) = found.curves
    assert np.abs(curve.u).max() < 1e-9
    assert found.length() == pytest.approx(3.0, rel=1e-12)
    assert curve.strength == pytest.approx(np.sqrt(2e3) / 0.6, rel=1e-9)
    assert not curve.closed
    # With a gradient across, det = (gx x + gy y) lam_r - gy^2 x^2.
    field = StarField([], [], [], 0.7, 0.3, 100.0, 100.0, gradient=(1e-3, 2e-3))
    (curve,) = trace_caustics(field, width=4.0).curves
    assert np.abs((1e-3 * curve.x + 2e-3 * curve.y) * 0.6 - 4e-6 * curve.x**2)[1:-1].max() < 1e-12


def test_nothing_to_find() -> None:
    empty = StarField([], [], [], 0.5, 0.2, 10.0, 10.0)
    found = trace_caustics(empty)
    assert (len(found), found.length(), found.cusps.shape, found.status) == (0, 0.0, (0, 2), "ok")
    assert len(found.to_table()) == 0
    assert len(trace_caustics(one_star(0.1, 0.5), center=(30.0, 0.0), width=2.0)) == 0


def test_curves_that_meet_are_cut_there_and_flagged() -> None:
    # Two stars of half a solar mass 2 theta_E apart, without shear: f' = -1 and f'' = 0 in the middle, so that the
    # critical curves of the two touch there.
    apart, touching = (
        trace_caustics(StarField([-1.0, 1.0 + gap], [0.0, 0.0], 0.5, 0.0, 0.0, 5.0, 5.0, sheet=False), width=6.0)
        for gap in (1e-7, 0.0)
    )
    assert (len(apart), apart.flags, [curve.closed for curve in apart.curves]) == (2, (), [True, True])
    assert touching.flags == ("cells_given_up",)
    assert [curve.closed for curve in touching.curves] == [False, False]
    # The difference goes as the root of the gap: 1.5e-3 here.
    assert touching.length() == pytest.approx(apart.length(), abs=3e-3)


def test_stars_on_one_spot_are_one() -> None:
    one = trace_caustics(StarField([1.0], [0.2], [1.0], 0.5, 0.2, 5.0, 5.0, sheet=False), width=6.0)
    two = trace_caustics(StarField([1.0, 1.0], [0.2, 0.2], 0.5, 0.5, 0.2, 5.0, 5.0, sheet=False), width=6.0)
    assert two.flags == ()
    # The same curves, from other starts.
    assert two.length() == pytest.approx(one.length(), rel=1e-4)


def test_the_same_again_whatever_the_field_was_asked_before() -> None:
    field = StarField.draw(0.5, 0.2, 0.2, window=3.0, seed=4)
    first = trace_caustics(field, width=4.0)
    field.jacobian(field.half_width, 0.0)
    again = trace_caustics(field, width=4.0)
    assert first.to_dict() == again.to_dict()
    assert np.array_equal(first.to_table()["u"], again.to_table()["u"])


def test_tables_dictionaries_and_figures() -> None:
    field = StarField.draw(0.5, 0.2, 0.2, window=3.0, seed=4)
    found = trace_caustics(field, width=5.0)
    table, content = found.to_table(), found.to_dict()
    assert table.colnames == ["curve", "x", "y", "u", "v", "strength", "cusp"]
    assert len(table) == content["vertices"]
    # The last vertex of a closed curve repeats the first, which may be a cusp.
    assert content["cusps"] <= table["cusp"].sum() <= content["cusps"] + content["closed_curves"]
    assert table.meta["closed"] == [curve.closed for curve in found.curves]
    assert content["length_per_area"] == pytest.approx(found.length() / 25.0)
    assert content["evaluations"] > content["vertices"]
    assert np.isnan(next(curve.area for curve in found.curves if not curve.closed))
    for plane in ("source", "image"):
        axes = found.plot(plane=plane)
        assert found.plot(axes, plane=plane) is axes
    chart = magnification_map(field, width=5.0, pixels=50, error=False)
    axes = chart.plot(caustics=found)
    assert axes.get_xlim() == (-2.5, 2.5)
    assert len(axes.collections) == len(chart.plot().collections) + 1
    with pytest.raises(InputError, match=r"`plane` must be source or image, got 'lens'"):
        found.plot(plane="lens")  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"width": 0.0}, r"`width` must be positive and finite, got 0\.0"),
        ({"height": np.inf}, r"`height` must be positive and finite, got inf"),
        ({"accuracy": -1.0}, r"`accuracy` must be positive and finite, got -1\.0"),
        ({"accuracy": 3.0}, r"`accuracy` must be between 1e-9 and 0\.1 of the window's size, got 3 for 10"),
        ({"center": (0.0, np.nan)}, r"`center` must be two finite numbers \(u, v\)"),
        ({"center": (1.0, 2.0, 3.0)}, r"`center` must be two finite numbers \(u, v\)"),
    ],
)
def test_bad_windows(arguments: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError, match=message):
        trace_caustics(one_star(0.1, 0.5), **arguments)


def test_flags_are_explained() -> None:
    found = trace_caustics(one_star(0.1, 0.5), width=3.0)
    flagged = CausticNetwork(
        **{name: getattr(found, name) for name in CausticNetwork.__dataclass_fields__ if name != "flags"},
        flags=tuple(FLAGS),
    )
    assert flagged.status == "cells_given_up, curve_lost"
    assert flagged.to_dict()["flag_meanings"] == FLAGS


# kappa, gamma, kappa_star: caustic length per source area, crossings per unit length of a line along u and along v,
# with standard errors (statistical). A Monte Carlo of the integral <mu> E[2k abs(e . grad J) delta(J)] over
# 2.4e5 random fields of 600 stars (Witt, Kayser & Refsdal 1993, from memory; derived).
ENSEMBLES = [
    pytest.param((0.2, 0.0, 0.2), 20.0, 10, ((0.329, 0.011), (0.209, 0.006), (0.209, 0.006)), id="isotropic"),
    pytest.param((0.5, 0.2, 0.2), 15.0, 10, ((1.114, 0.031), (0.820, 0.023), (0.600, 0.021)), id="dense"),
    pytest.param(
        (0.7975, 0.1975, 0.01), 10.0, 30, ((15.8, 0.3), (14.7, 0.25), (3.4, 0.2)), id="minimum", marks=pytest.mark.slow
    ),
    pytest.param(
        (0.8025, 0.2025, 0.01), 10.0, 30, ((17.3, 0.3), (16.3, 0.24), (3.3, 0.2)), id="saddle", marks=pytest.mark.slow
    ),
]


@pytest.mark.parametrize(("lens", "width", "count", "expected"), ENSEMBLES)
def test_length_per_area_in_ensembles(
    lens: tuple[float, float, float], width: float, count: int, expected: tuple[tuple[float, float], ...]
) -> None:
    rows = []
    for seed in range(count):
        found = trace_caustics(StarField.draw(*lens, window=0.5 * width, seed=seed), width=width)
        assert found.flags == ()
        # A line along u is crossed by the projection of the caustics on v, and the other way round.
        rows.append(
            (
                found.length(),
                sum(np.abs(np.diff(curve.v)).sum() for curve in found.curves),
                sum(np.abs(np.diff(curve.u)).sum() for curve in found.curves),
            )
        )
    values = np.array(rows) / width**2
    error = values.std(axis=0, ddof=1) / np.sqrt(count)
    for mean, own, (reference, theirs) in zip(values.mean(axis=0), error, expected, strict=True):
        assert abs(mean - reference) < 3.0 * np.hypot(own, theirs)
