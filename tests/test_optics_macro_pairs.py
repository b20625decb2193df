"""Mirrored knots: the critical line between them and the distance of the event, by pulls over simulated pairs."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from macro_pairs import ORIGIN, PairSet, lens_set, local_set, sky

from crossing.errors import InputError
from crossing.event import MacroRecord, PairRecord, Value
from crossing.optics.macro.mirror_pairs import solve_pairs, state_at
from crossing.optics.macro.profiles import ProfileSum, Shear, SoftenedEllipsoid

exact = Value.exact
LENS = ProfileSum(
    parts=(
        SoftenedEllipsoid(einstein_radius=25.0, axis_ratio=0.7, core=3.0, angle=20.0),
        Shear(gamma1=0.04, gamma2=-0.02),
    )
)
# Rank of the truth among the draws of: distance, lam_t, gradient; then pulls of the line's direction and of the
# distance, and the misfit.
Judged = tuple[float, float, float, float, float, float]


def judge(simulated: PairSet, seed: int) -> Judged:
    solution = solve_pairs(simulated.record, seed=seed)
    draws = state_at(solution.folds, solution.place)
    distance = draws.lam_t / np.hypot(draws.gradient_x, draws.gradient_y)
    low, middle, high = np.percentile(distance, [15.865, 50, 84.135])
    turn = (solution.line.position_angle - simulated.line_angle + 90) % 180 - 90
    return (
        float(np.mean(distance < simulated.distance_perp)),
        float(np.mean(draws.lam_t < simulated.lam_t)),
        float(np.mean(draws.gradient_x < simulated.gradient)),
        turn / solution.line.position_angle_error,
        (middle - simulated.distance_perp) / (high - low) * 2,
        solution.line.chi2,
    )


def calibrated(found: list[Judged], slack: float = 0.0) -> None:
    """Ranks and pulls are what they must be, up to three standard errors of their number and `slack`."""
    ranks, pulls = np.array(found)[:, :3], np.array(found)[:, 3:5]
    n = len(found)
    for one in ranks.T:
        assert np.mean(np.abs(one - 0.5) < 0.34135) == pytest.approx(0.6827, abs=3 * np.sqrt(0.22 / n) + slack)
        assert np.mean(np.abs(one - 0.5) < 0.4772) > 0.9545 - 3 * np.sqrt(0.044 / n) - slack / 2
        assert one.mean() == pytest.approx(0.5, abs=3 * np.sqrt(1 / 12 / n) + slack)
    # The spread of n pulls is known to 1 / sqrt(2 n); tails of some posteriors add to it.
    np.testing.assert_allclose(pulls.mean(axis=0), 0, atol=3 / np.sqrt(n) + 2 * slack)
    np.testing.assert_allclose(pulls.std(axis=0), 1, atol=3 / np.sqrt(2 * n) + 0.1 + slack)


SETS: dict[str, Callable[[np.random.Generator], PairSet]] = {
    "two pairs, nothing else": lambda rng: local_set(rng, 2, 0.02, None, cubic=True),
    "three pairs with magnifications": lambda rng: local_set(rng, 3, 0.02, 0.2, cubic=True),
    "five sharp pairs": lambda rng: local_set(rng, 5, 0.01, 0.2, cubic=True),
}


@pytest.mark.parametrize("name", SETS)
def test_pulls(name):
    rng = np.random.default_rng(11)
    calibrated([judge(SETS[name](rng), seed) for seed in range(30)])


@pytest.mark.slow
@pytest.mark.parametrize("name", SETS)
def test_pulls_of_many_sets(name):
    rng = np.random.default_rng(12)
    calibrated([judge(SETS[name](rng), seed) for seed in range(300)])


def test_quadratic_lens():
    """Without third derivatives, which lenses around a centre have: within the priors, but at their edge."""
    rng = np.random.default_rng(13)
    calibrated([judge(local_set(rng, 3, 0.02, 0.2, cubic=False), seed) for seed in range(40)], slack=0.2)


@pytest.mark.parametrize(("count", "error"), [(3, 0.02), (5, 0.01)])
def test_profile(count, error):
    """Around the critical curve of an ellipsoid in shear, wherever it has a fold: gradients above 0.01 per arcsec."""
    rng = np.random.default_rng(14)
    found = []
    while len(found) < 30:
        simulated = lens_set(rng, LENS, rng.uniform(0, 2 * np.pi), count, error, 0.2)
        if simulated is not None and simulated.gradient > 0.01:
            found.append(judge(simulated, len(found)))
    # Its numbers are no draws from the priors: coverage may be off by a tenth.
    calibrated(found, slack=0.1)
    # Fewer than 2 count degrees of freedom are left by construction.
    assert np.mean([one[-1] for one in found]) < 2 * count


class TestOneSet:
    simulated = lens_set(np.random.default_rng(2), LENS, 0.9, 3, 0.01, 0.2)

    def test_central_values(self):
        solution = solve_pairs(self.simulated.record)
        state = solution.central
        assert state.lam_t == pytest.approx(self.simulated.lam_t, rel=0.5)
        assert np.sign(state.lam_t) == np.sign(self.simulated.lam_t)
        assert state.lam_r == pytest.approx(self.simulated.lam_r, rel=0.6)  # from a prior over a factor of four
        assert state.gradient[0] > 0
        assert solution.flags == ("mu_r_from_prior",)
        assert solution.line.distance_perp[1] == pytest.approx(abs(self.simulated.distance_perp), abs=0.05)
        assert set(solution.line.to_dict()) >= {"position_angle", "distance_perp", "chi2"}

    def test_same_seed_same_draws(self):
        one, two = (solve_pairs(self.simulated.record, seed=4).draw(np.random.default_rng(1), 50)[0] for _ in range(2))
        np.testing.assert_array_equal(one, two)

    def test_mu_r_and_gradient_as_given(self):
        pairs = tuple(replace(pair, magnification=None) for pair in self.simulated.record.mirror_pairs)
        record = replace(
            self.simulated.record,
            mirror_pairs=pairs,
            mu_r=Value.normal(1.4, 0.05, lower=0),
            gradient=(Value.normal(0.03, 0.002, lower=0), exact(0.0)),
        )
        solution = solve_pairs(record)
        assert solution.flags == ()
        assert np.median(solution.folds.gx) == pytest.approx(0.03, rel=0.1)  # the pairs have a say, too
        assert np.median(solution.folds.lam_r) == pytest.approx(1 / 1.4, rel=0.05)

    def test_magnification_sets_the_gradient(self):
        # Doubling all magnifications halves the gradient of lam_t, up to what the prior of mu_r says.
        pairs = self.simulated.record.mirror_pairs
        mu_r = Value.normal(1.4, 0.02, lower=0)
        rates = []
        for factor in (1.0, 2.0):
            scaled = tuple(
                replace(
                    one,
                    magnification=Value.normal(factor * one.magnification.a, factor * one.magnification.b / 5, lower=0),
                )
                for one in pairs
            )
            record = replace(self.simulated.record, mirror_pairs=scaled, mu_r=mu_r)
            rates.append(np.median(solve_pairs(record).folds.gx))
        assert rates[0] / rates[1] == pytest.approx(2, rel=0.15)

    def test_position_error_of_the_event_widens(self):
        sharp = solve_pairs(self.simulated.record)
        blurred = solve_pairs(replace(self.simulated.record, position_error=0.3))
        one, two = (found.draw(np.random.default_rng(1), 4000)[0].std() for found in (sharp, blurred))
        assert two > 1.3 * one

    def test_the_turn_of_the_stretch_tells_the_side(self):
        # An arc bends around the centre, so that sharp pairs tell where it is.
        solution = solve_pairs(replace(self.simulated.record, centre=None))
        assert "side_unknown" not in solution.flags
        assert solution.central.lam_t == pytest.approx(self.simulated.lam_t, rel=0.6)

    def test_fluxes(self):
        first, *others = self.simulated.record.mirror_pairs
        agreeing = replace(first, flux1=Value.normal(100, 5, lower=0), flux2=Value.normal(95, 5, lower=0))
        differing = replace(first, flux1=exact(100.0), flux2=exact(20.0))
        for pair, flagged in ((agreeing, False), (differing, True)):
            record = replace(self.simulated.record, mirror_pairs=(pair, *others))
            assert ("fluxes_disagree" in solve_pairs(record).flags) == flagged

    def test_a_wrong_pair_is_told(self):
        first, second, third = self.simulated.record.mirror_pairs
        moved = (third.second[0] + 0.35 / 3600, third.second[1] - 0.6 / 3600)
        record = replace(self.simulated.record, mirror_pairs=(first, second, replace(third, second=moved)))
        assert "not_mirrored" in solve_pairs(record).flags

    def test_assumed_error(self):
        pairs = tuple(replace(pair, position_error=None) for pair in self.simulated.record.mirror_pairs)
        assert "position_error_assumed" in solve_pairs(replace(self.simulated.record, mirror_pairs=pairs)).flags


class TestDegenerate:
    def record(self, *pairs, error=0.02, **options):
        found = tuple(PairRecord(first=sky(a), second=sky(b), position_error=error) for a, b in np.array(pairs, float))
        return MacroRecord(way="mirror_pairs", position=ORIGIN, mirror_pairs=found, **options)

    def test_one_pair(self):
        with pytest.raises(
            InputError, match=r"`mirror_pairs` must be two pairs or more with the position .*, got 1; add"
        ):
            solve_pairs(self.record([[-0.3, 0], [0.3, 0]]))

    def test_no_position(self):
        record = replace(self.record([[-0.3, 0], [0.3, 0]], [[-0.3, 1], [0.3, 1]]), position=None)
        with pytest.raises(InputError, match="must be two pairs or more with the position of the event, got 2; add"):
            solve_pairs(record)

    def test_identical_positions(self):
        with pytest.raises(
            InputError, match=r"further apart than 3 times the position error, got 0.03 arcsec .* pair 1"
        ):
            solve_pairs(self.record([[-0.3, 0], [0.3, 0]], [[-0.015, 1], [0.015, 1]]))

    def test_identical_midpoints(self):
        with pytest.raises(InputError, match=r"must have midpoints at different places, got all within 0.0\d* arcsec"):
            solve_pairs(self.record([[-0.3, 0], [0.3, 0]], [[-0.4, 0.01], [0.42, 0.01]]))

    def test_separations_along_the_line(self):
        with pytest.raises(
            InputError, match=r"separations that cross the line of their midpoints, got both within 0.\d"
        ):
            solve_pairs(self.record([[-0.3, 0], [0.3, 0]], [[1.7, 0], [2.3, 0.01]]))

    def test_parallel_separations_are_well_posed(self):
        solution = solve_pairs(self.record([[-0.3, 0], [0.3, 0]], [[-0.3, 1], [0.3, 1]]))
        assert solution.line.position_angle == pytest.approx(0, abs=2.0) or solution.line.position_angle > 178
        assert solution.line.stretch_angle == pytest.approx(90, abs=4.0)
        # The event sits on the line, half an error of a midpoint away or so.
        assert solution.line.distance_perp[1] < 0.02

    def test_both_sides_where_nothing_tells(self):
        record = replace(self.record([[-0.3, 0], [0.3, 0]], [[-0.3, 1], [0.3, 1]]), position=sky((-0.2, 0.5)))
        solution = solve_pairs(record)
        assert solution.flags == ("mu_r_from_prior", "gradient_from_prior", "side_unknown")
        # The pairs are symmetric; several hundred independent draws.
        assert np.mean(solution.draw(np.random.default_rng(1), 4000)[0] > 0) == pytest.approx(0.5, abs=0.1)
        for side, sign in (("minimum", 1), ("saddle", -1)):
            sided = solve_pairs(replace(record, side=side))
            assert "side_unknown" not in sided.flags
            assert np.all(sign * sided.draw(np.random.default_rng(1), 4000)[0] > 0)
            # lam_t = gradient x distance: 0.2 arcsec along the stretch, 0.07 per arcsec in the middle of the prior.
            assert sign * sided.central.lam_t == pytest.approx(0.2 * 0.07, rel=0.5)

    @pytest.mark.parametrize(
        ("place", "options"),
        [
            ((0.0, 0.5), {"mu_r": exact(-2.0)}),  # no minimum where lam_r < 0
            ((-0.6, 0.5), {"centre": sky(np.array([-20.0, 0.0]))}),  # on the saddle side, with the centre
        ],
    )
    def test_side_that_cannot_be(self, place, options):
        pairs = [[-0.3, 0], [0.3, 0]], [[-0.3, 1], [0.3, 1]]
        record = replace(self.record(*pairs, side="minimum", **options), position=sky(np.array(place)))
        with pytest.raises(
            InputError, match="`side` must agree with the pairs, mu_r and the centre, got minimum; change"
        ):
            solve_pairs(record)
