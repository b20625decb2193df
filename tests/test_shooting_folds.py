"""Fold strengths, normals and sides against closed forms and against the map itself."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from crossing.errors import InputError
from crossing.shooting.caustics.folds import fold_quantities
from crossing.shooting.field import StarField

# A single star with shear, as (lam_t, lam_r).
MINIMA = ((0.005, 0.4), (0.1, 0.5))
SADDLES = ((-0.005, 0.4), (-0.1, 0.5))


def one_star(lam_t: float, lam_r: float, mass: float = 1.0) -> StarField:
    """A star of the mass at the origin; the series are exact to 1e-12."""
    kappa, gamma = 1.0 - 0.5 * (lam_t + lam_r), 0.5 * (lam_r - lam_t)
    return StarField([0.0], [0.0], [mass], kappa, gamma, 10.0, 10.0, sheet=False, accuracy=1e-12)


def critical_point(angle: float, lam_t: float, lam_r: float, branch: float) -> tuple[float, float]:
    """Critical curve of a star of one solar mass in polar form (Chang & Refsdal 1979; from memory, checked there)."""
    turned = 0.5 * (lam_r - lam_t) * np.cos(2.0 * angle)
    square = (-turned + branch * np.sqrt(turned**2 + lam_t * lam_r)) / (lam_t * lam_r)
    return float(np.sqrt(square) * np.cos(angle)), float(np.sqrt(square) * np.sin(angle))


def folds_at(height: float, lam_t: float, lam_r: float) -> list[tuple[float, float]]:
    """(abs(y1), K) of all folds with y1 > 0 or < 0 at the height y2, from the closed form of the critical curve."""
    field = one_star(lam_t, lam_r)
    gamma, product = 0.5 * (lam_r - lam_t), lam_t * lam_r
    # A saddle's curves lie within an angle of the x axis, where the root is real.
    widest = np.pi / 2.0 if product > 0.0 else 0.5 * np.arccos(np.sqrt(-product) / gamma) * (1.0 - 1e-12)
    found = []
    for branch in (1.0,) if product > 0.0 else (1.0, -1.0):

        def offset(angle: float, branch: float = branch) -> float:
            x, y = critical_point(angle, lam_t, lam_r, branch)
            return float(lam_r * y - y / (x * x + y * y)) - height

        angles = np.linspace(-widest, widest, 4001)
        values = np.array([offset(angle) for angle in angles])
        for i in np.flatnonzero(values[:-1] * values[1:] < 0.0):
            angle = brentq(offset, angles[i], angles[i + 1], xtol=1e-14)
            folds = fold_quantities(field, *critical_point(angle, lam_t, lam_r, branch))
            found.append((abs(float(folds.u)), float(folds.strength)))
    return sorted(found)


@pytest.mark.parametrize(
    ("lens", "strength"),
    # Derived: K = 1 / (2 k a^(3/4)), k = 1 - kappa, a = abs(lam_t).
    [((-0.005, 0.4), 134.6404025), ((-0.1, 0.5), 14.05853313)],
)
def test_inner_fold_of_a_saddle(lens: tuple[float, float], strength: float) -> None:
    side = np.array([1.0, -1.0])
    found = fold_quantities(one_star(*lens), side / np.sqrt(-lens[0]), 0.0)
    # The references have ten digits.
    assert found.strength == pytest.approx(strength, rel=1e-9)
    assert found.u == pytest.approx(-2.0 * side * np.sqrt(-lens[0]), rel=1e-12)
    assert found.lam_perp == pytest.approx(lens[0] + lens[1], rel=1e-12)
    assert np.abs(found.determinant).max() < 1e-15
    # On the axis, images on it exist beyond this distance only (the root of a quadratic): away from the middle.
    assert found.normal == pytest.approx(np.stack([-side, 0.0 * side], axis=-1), abs=1e-12)


# (lam_t, lam_r), height in units of the cusp's, and (abs(y1), K): derived, and checked against an image solver.
TABLE = [
    ((0.005, 0.4), 5.586143571, 0.1, 0.2437551, 13.538065),
    ((0.005, 0.4), 5.586143571, 0.25, 0.1120264, 31.592970),
    ((0.005, 0.4), 5.586143571, 0.5, 0.0398675, 64.434269),
    ((0.005, 0.4), 5.586143571, 0.75, 0.0110736, 101.75498),
    ((0.1, 0.5), 1.264911064, 0.1, 0.3662610, 4.1280475),
    ((0.1, 0.5), 1.264911064, 0.25, 0.2327896, 4.9428085),
    ((0.1, 0.5), 1.264911064, 0.5, 0.1042543, 6.7013432),
    ((0.1, 0.5), 1.264911064, 0.75, 0.0320375, 9.2655910),
    ((-0.005, 0.4), 1.914864231, 0.1, 0.1413381, 134.77227),
    ((-0.005, 0.4), 1.914864231, 0.1, 0.4162785, 8.0633681),
    ((-0.005, 0.4), 1.914864231, 0.25, 0.1408970, 135.49787),
    ((-0.005, 0.4), 1.914864231, 0.25, 0.2909024, 13.196532),
    ((-0.005, 0.4), 1.914864231, 0.5, 0.1392566, 138.66341),
    ((-0.005, 0.4), 1.914864231, 0.5, 0.1946575, 27.228200),
    ((-0.005, 0.4), 1.914864231, 0.75, 0.1362312, 147.70147),
    ((-0.005, 0.4), 1.914864231, 0.75, 0.1510004, 53.961864),
]


@pytest.mark.parametrize(("lens", "cusp", "share", "distance", "strength"), TABLE)
def test_folds_along_a_caustic(
    lens: tuple[float, float], cusp: float, share: float, distance: float, strength: float
) -> None:
    found = folds_at(share * cusp, *lens)
    place, value = min(found, key=lambda fold: abs(fold[0] - distance))
    # The references have seven decimals and eight digits.
    assert place == pytest.approx(distance, abs=1e-7)
    assert value == pytest.approx(strength, rel=1e-6)


def test_cusps_have_no_bound() -> None:
    # Both cusps of the minimum's caustic on the axes: x = 1/sqrt(lam_r), y = 1/sqrt(lam_t).
    lens = MINIMA[1]
    found = fold_quantities(one_star(*lens), [1.0 / np.sqrt(lens[1]), 0.0], [0.0, 1.0 / np.sqrt(lens[0])])
    assert (found.strength > 1e6).all()
    assert (found.change < 1e-12).all()


@settings(deadline=None, derandomize=True, max_examples=40)
@given(
    seed=st.integers(0, 10**6),
    gradient=st.sampled_from([None, (0.02, 0.01), (0.0, -0.03)]),
    kappa=st.sampled_from([0.5, 1.7]),
)
def test_the_pair_appears_on_the_side_of_the_normal(
    seed: int, gradient: tuple[float, float] | None, kappa: float
) -> None:
    rng = np.random.default_rng(seed)
    field = StarField(*rng.uniform(-3.0, 3.0, (2, 6)), rng.uniform(0.3, 1.0, 6), kappa, 0.2, 4.0, 4.0, gradient,
                      sheet=bool(seed % 2) and kappa > 1.0, accuracy=1e-12)  # fmt: skip
    x, y = critical_by_bisection(field, rng)
    found = fold_quantities(field, x, y)
    kept = found.change > 1e-2 * np.median(found.change)  # not next to a cusp, where the next order takes over
    step = 1e-4 / (1.0 + found.change)
    for sign in (1.0, -1.0):
        u, v = field.source_position(x + sign * step * found.normal[:, 0], y + sign * step * found.normal[:, 1])
        inward = (u - found.u) * found.normal[:, 0] + (v - found.v) * found.normal[:, 1]
        # A displacement s along the null vector lands T s^2 / 2 inside; the next order is a share of about s T, and the
        # points are critical to 1e-13.
        assert inward[kept] == pytest.approx(0.5 * (found.change * step**2)[kept], rel=0.2, abs=1e-12)
    # Along the curve's normal, the determinant changes sign: one image of the pair has either parity.
    assert np.abs(found.determinant).max() < 1e-9 * max(1.0, float(np.abs(found.lam_perp).max()))
    assert np.hypot(found.normal[:, 0], found.normal[:, 1]) == pytest.approx(1.0)


def critical_by_bisection(field: StarField, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Points where the determinant changes its sign along random lines."""
    ends = rng.uniform(-3.5, 3.5, (4, 400))
    low, high = np.zeros(400), np.ones(400)

    def determinant(share: np.ndarray) -> np.ndarray:
        x, y = ends[0] + share * (ends[2] - ends[0]), ends[1] + share * (ends[3] - ends[1])
        return np.asarray(np.linalg.det(field.jacobian(x, y)))

    first = determinant(low)
    change = first * determinant(high) < 0.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        same = determinant(middle) * first > 0.0
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    share = low[change]
    return ends[0, change] + share * (ends[2] - ends[0])[change], ends[1, change] + share * (ends[3] - ends[1])[change]


def test_shapes_tables_and_figure() -> None:
    field = one_star(*SADDLES[1])
    x = np.full((2, 3), 1.0 / np.sqrt(0.1))
    found = fold_quantities(field, x, 0.0)
    assert found.strength.shape == (2, 3)
    assert found.normal.shape == (2, 3, 2)
    table = found.to_table()
    assert len(table) == 6
    assert set(table.colnames) == {
        *("x", "y", "u", "v", "strength", "lam_perp", "change", "determinant", "normal_u", "normal_v")
    }
    assert found.to_dict()["strength"] == pytest.approx([14.05853313] * 6, rel=1e-9)
    assert fold_quantities(field, 3.0, 0.5).strength.shape == ()
    axes = found.plot()
    assert found.plot(axes) is axes


def test_points_must_be_finite() -> None:
    with pytest.raises(InputError, match=r"`x`, `y` must be finite"):
        fold_quantities(one_star(*MINIMA[0]), [1.0, np.nan], 0.0)
