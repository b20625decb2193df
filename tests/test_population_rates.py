"""Event rates by the lengths of caustics: closed limits, scalings, and what the visits of a schedule find."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from campaigns import campaign_text, write_campaign

from crossing.errors import InputError
from crossing.event import LineRecord, MacroRecord, ScheduleRecord, Value, visit_times
from crossing.optics.fold import fold_profile, profile_peak
from crossing.optics.local import LocalLens
from crossing.optics.random_fields import density_at_zero, tail_amplitude
from crossing.optics.scales import LensScales
from crossing.optics.star_caustic import star_caustic
from crossing.population.detection_rule import VisitFinder, detection_rule
from crossing.population.event_rates import plan_rates, predict_rates
from crossing.population.event_sample import EventSample
from crossing.population.fold_rates import StarKinds, flicker_variance, fold_events, fold_rate
from crossing.population.from_campaign import population_stars
from crossing.population.rates_result import Expectation
from crossing.population.segments import Caustics, cut_line
from crossing.shooting.caustics.fold_ensemble import FoldEnsemble, fold_ensemble
from crossing.stars.mass_functions import Population, single

SCALES = LensScales(0.43, 1.21)
SPEED = 700.0
SADDLE = '[[segments]]\nkappa = {kappa}\ngamma = {gamma}\nlength = "0.4 arcsec"\nwidth = "0.3 arcsec"\n' + (
    'surface_brightness = {{red = "25 mag / arcsec2"}}\n'
)
STARS = '[[microlenses]]\nkappa_star = {}\nmean_mass = "1 solMass"\n'


def saddle(kappa_star: float = 0.01, lam_t: float = -0.02) -> str:
    """Segment at lam_r = 0.4 behind stars of one solar mass."""
    kappa, gamma = 1 - (lam_t + 0.4) / 2, (0.4 - lam_t) / 2
    return SADDLE.format(kappa=kappa, gamma=gamma) + STARS.format(kappa_star)


def smooth(distance: float = 0.0, length: float = 0.4) -> str:
    """Segment of a smooth lens, with a gradient."""
    return (
        f'[[segments]]\ncritical_distance = "{distance} arcsec"\ngradient = "0.05 / arcsec"\nmu_r = 2\n'
        f'length = "{length} arcsec"\nwidth = "0.3 arcsec"\nsurface_brightness = {{red = "25 mag / arcsec2"}}\n'
    )


def caustics_from(found: FoldEnsemble) -> Caustics:
    """Caustics of one theta_E^2 of the source plane."""
    order = np.argsort(found.strength)[::-1]
    columns = (found.strength[order], found.length[order], found.normal[order])
    return Caustics(*columns, background=found.background, source_area=SCALES.einstein_radius_arcsec**2)


def kinds(needed: list[float], radius: list[float]) -> StarKinds:
    """One star of each kind per theta_E^2."""
    one = np.ones(len(needed))
    return StarKinds(
        density=one,
        needed=np.array(needed),
        radius=np.array(radius),
        flux=one,
        radius_rsun=one,
        temperature=1e4 * one,
        luminosity=1e5 * one,
    )


# No stars in front: the smooth caustic


def test_stars_that_drift_across_the_smooth_caustic(tmp_path: Path) -> None:
    """Derived here: density x caustic length x speed, of stars with L^-2 and peak flux ~ L R^-1/2 ~ L^(3/4).

    The caustic behind a segment that the critical curve crosses is |lam_r| x width long. Cells of 0.05 dex in
    luminosity are what it takes them by: 1% where they end.
    """
    campaign = write_campaign(tmp_path, campaign_text(smooth(), depth="27 mag"))
    result = predict_rates(campaign, draws=2)
    segment = campaign.segments[0]
    stars = population_stars(campaign.population, segment.surface_brightness, campaign.bands, SCALES)
    # one star of 1e5 Lsun, its flux and radius from the cell that holds it
    function = stars.function
    cell = int(np.argmin(np.abs(function.luminosity - 1e5)))
    strength = np.sqrt(2 / 0.05) * 2.0  # sqrt(2/T) mu_r [arcsec^(1/2)]
    radius = function.radius[cell] * SCALES.rsun_arcsec
    peak = stars.flux["red"][cell] * strength * profile_peak(0.0).height / np.sqrt(radius)
    limit = detection_rule(campaign, None).limits["red"]
    faintest = function.luminosity[cell] * (limit / peak) ** (4 / 3)
    years = SCALES.einstein_crossing_years(SPEED)
    sweep = 0.5 * 0.3 * SCALES.einstein_radius_arcsec / years  # arcsec2 of the source plane a year
    expected = stars.density * float(function.share_above(faintest)) * sweep
    assert result.per_year.expected.median == pytest.approx(expected, rel=0.06)
    # brightness: number above F goes as F^(-4/3) below the brightest
    bright = [result.sample.weight[result.sample.flux > factor * limit].sum() for factor in (2.0, 8.0)]
    above = [float(function.share_above(faintest * factor ** (4 / 3))) for factor in (2.0, 8.0)]
    assert bright[1] / bright[0] == pytest.approx(above[1] / above[0], rel=0.08)  # cells
    # time above the limit: rate x width of the profile over speed
    assert result.sample.in_progress > 0
    assert result.segments[0].flicker == ()


@pytest.mark.parametrize(("distance", "share"), [(0.0, 1.0), (0.1, 1.0), (0.2, 0.5), (-0.2, 0.5), (0.21, 0.0)])
def test_the_smooth_caustic_belongs_to_the_segments_on_the_critical_curve(
    distance: float, share: float, tmp_path: Path
) -> None:
    """Two segments that meet there have half of it each."""
    whole = predict_rates(write_campaign(tmp_path, campaign_text(smooth())), draws=2)
    found = predict_rates(write_campaign(tmp_path, campaign_text(smooth(distance))), draws=2)
    # lam_r is 0.5 at the segment's centre
    assert found.per_year.mean == pytest.approx(share * whole.per_year.mean, rel=1e-6)
    assert (len(found.sample) > 0) == (share > 0)


# Dilute stars


def test_dilute_stars_against_the_caustic_of_one() -> None:
    """Crossings of strong folds along u: density of lenses times the extent of one caustic (Chang & Refsdal 1984).

    5%: the noise of the draws, and neighbours at kappa_star = 2e-4 of 0.1.
    """
    kappa_star, lens = 2e-4, LocalLens.from_eigenvalues(0.1, 0.5)
    one = star_caustic(0.1, 0.5)
    middle = 2 / (1 / one.strength[1:] + 1 / one.strength[:-1])
    found = caustics_from(fold_ensemble(lens, [Population(kappa_star, single(1.0))], draws=65_536))
    radius = 1e-5
    for quantile in (0.2, 0.5, 0.8):
        strength = float(one.strength_quantile(quantile))
        needed = strength * profile_peak(0.0).height / np.sqrt(radius)
        rate = fold_rate(found, kinds([needed], [radius]), years=1.0, direction=0.0)[0]
        # lenses per area of the source plane: their density in the image plane times the magnification
        extent = 2 * np.abs(np.diff(one.v))[middle > strength].sum()
        assert rate == pytest.approx(kappa_star / np.pi * lens.magnification * extent, rel=0.05)


# Rates and dwell times


@pytest.mark.parametrize("direction", [None, 0.3, np.pi / 2])
def test_instantaneous_probability_is_rate_times_mean_dwell(direction: float | None) -> None:
    """Of the same folds: P(>mu) by widths and lengths, over the directions that tracks meet; sampling of 2e5."""
    ensemble = fold_ensemble(LocalLens.from_eigenvalues(-0.005, 0.4), [Population(0.01, single(1.0))])
    found, years = caustics_from(ensemble), 3.0
    for needed, radius in ((3000.0, 2e-4), (8000.0, 2e-5)):
        stars = kinds([needed], [radius])
        sample = fold_events(found, stars, years, direction, segment=0, count=200_000, rng=np.random.default_rng(1))
        assert sample.rate == pytest.approx(float(fold_rate(found, stars, years, direction)[0]), rel=1e-9)
        exact = float(ensemble.exceedance(ensemble.background + needed, radius))
        # few strong folds that are crossed at a grazing angle last long: 3%
        assert sample.in_progress == pytest.approx(exact, rel=0.03)
        assert np.all(sample.magnification > ensemble.background + needed)


def test_the_sample_holds_kinds_by_their_rates() -> None:
    ensemble = fold_ensemble(LocalLens.from_eigenvalues(0.005, 0.4), [Population(0.01, single(1.0))])
    found = caustics_from(ensemble)
    stars = kinds([1000.0, 4000.0, 1e9], [1e-4, 1e-4, 1e-4])
    stars = replace(stars, luminosity=np.array([1.0, 2.0, 3.0]))
    rates = fold_rate(found, stars, 2.0, 0.0)
    sample = fold_events(found, stars, 2.0, 0.0, segment=7, count=4000, rng=np.random.default_rng(1))
    assert rates[2] == 0.0
    share = sample.weight[sample.luminosity == 2.0].sum() / sample.rate
    assert share == pytest.approx(rates[1] / rates.sum(), abs=1e-3)  # systematic: one row at most
    assert set(sample.segment) == {7}


def test_flicker_against_the_moment_and_a_direct_integral() -> None:
    """Sum over folds of the integral of (K J)^2 / R where it exceeds the background, by fine steps: 2%, bins of K."""
    ensemble = fold_ensemble(LocalLens.from_eigenvalues(-0.02, 0.4), [Population(0.01, single(1.0))], draws=4096)
    found = caustics_from(ensemble)
    for radius in (1e-5, 1e-3):
        x = np.concatenate([np.linspace(-1, 3, 4001), 3 * np.geomspace(1, 1e5, 8001)[1:]])
        j, step = np.asarray(fold_profile(0.5 * (x[1:] + x[:-1]))), np.diff(x)
        height = found.strength[:, None] * j / np.sqrt(radius)
        direct = (np.where(height > found.background, height**2, 0.0) @ step * radius) @ found.length
        assert flicker_variance(found, np.array([radius]), 1.0)[0] == pytest.approx(direct, rel=0.02)


# Scalings


@pytest.mark.parametrize(("slope", "power"), [(1.6, -0.6 * 4 / 3), (2.0, -4 / 3), (2.3, -1.3 * 4 / 3)])
def test_rate_against_depth(slope: float, power: float, tmp_path: Path) -> None:
    """Derived here: with stars of one temperature K needed ~ F L^(-3/4), so that the rate goes as F^(-(s-1) 4/3).

    For point sources, whose peaks would not end, counts of stars give F^-(s-1); small folds of large stars steepen it.
    It holds while neither end of the luminosities counts: 4% between 25 and 26 mag, over 16 decades.
    """
    rates = []
    for depth in ("25 mag", "26 mag"):
        text = campaign_text(saddle(), depth=depth, slope=slope, luminosities=("1e-5 solLum", "1e11 solLum"))
        campaign = write_campaign(tmp_path, text)
        stars = population_stars(campaign.population, campaign.segments[0].surface_brightness, campaign.bands, SCALES)
        # the upper limit of luminosities is no part of this law
        function = type(stars.function).power_law(slope, (1e-5, 1e11), Value.exact(12_000.0), upper_limit=False)
        one = stars.flux["red"][0] / stars.function.luminosity[0]
        radius = function.radius / SCALES.einstein_radius_source_rsun
        limit = detection_rule(campaign, None).limits["red"]
        kind = replace(
            kinds([1.0] * len(radius), radius.tolist()),
            needed=limit / (one * function.luminosity),
            density=function.number,
        )
        lens = LocalLens.from_eigenvalues(-0.02, 0.4)
        found = caustics_from(fold_ensemble(lens, [Population(0.01, single(1.0))]))
        rates.append(fold_rate(found, kind, 1.0, 0.0).sum())
    measured = np.log(rates[1] / rates[0]) / np.log(10**-0.4)
    assert measured == pytest.approx(power, rel=0.04)


def test_rate_against_kappa_star_saturates(tmp_path: Path) -> None:
    """Proportional to it where caustics are apart; less once they overlap. Independent caustics count too many.

    Too many by 1 to 3 is what is reported of networks near |lam_t| = kappa_star (from memory, no source).
    """
    lens, found = LocalLens.from_eigenvalues(0.02, 0.4), []
    one = star_caustic(0.02, 0.4)
    radius, strength = 1e-5, float(one.strength_quantile(0.3))
    stars = kinds([strength * profile_peak(0.0).height / np.sqrt(radius)], [radius])
    extent = 2 * np.abs(np.diff(one.v)).sum() * 0.7
    densities = np.array([1e-4, 1e-3, 1e-2, 5e-2])
    for kappa_star in densities:
        caustics = caustics_from(fold_ensemble(lens, [Population(kappa_star, single(1.0))], draws=32_768))
        found.append(fold_rate(caustics, stars, 1.0, 0.0)[0])
    over = densities / np.pi * lens.magnification * extent / np.array(found)
    assert over[0] == pytest.approx(1.0, abs=0.08)  # noise of the draws, and overlap of the first order
    assert np.all(np.diff(over) > 0)
    assert 1.1 < over[2] < 3.0


def test_moment_of_lengths(tmp_path: Path) -> None:
    """Of what a segment uses: the sum of length x K^2 over its area is 2 <mu> p(det = 0), by Schneider (1987)."""
    from crossing.population.segments import caustics_of, prepare_segments

    campaign = write_campaign(tmp_path, campaign_text(saddle()))
    (segment,) = prepare_segments(campaign)
    found = caustics_of(segment, *segment.draws(1, 0)[0], SCALES, 16_384)
    area = found.source_area / SCALES.einstein_radius_arcsec**2
    assert found.source_area == pytest.approx(0.12 * 0.02 * 0.4)
    moment = float((found.length * found.strength**2).sum()) / area
    assert moment == pytest.approx(float(tail_amplitude(-0.02, 0.4, 0.01)), rel=0.02)


# Visits


def test_what_visits_find_against_counting() -> None:
    """Begins of excursions drawn at random, counted visit by visit; errors of 2e5 of them."""
    schedule = ScheduleRecord(name="a", start=60_000.0, cadence=7.0, number=9, gaps=((60_020.0, 60_047.0),))
    times, rng = visit_times(schedule), np.random.default_rng(3)
    duration = np.array([1.0, 5.0, 12.0, 60.0])
    weight = np.array([4.0, 3.0, 2.0, 1.0])
    for epochs in (1, 2, 3):
        found = VisitFinder(schedule, epochs).found(duration, weight)
        counted = np.zeros(len(times))
        for length, share in zip(duration, weight, strict=True):
            low, high = times[0] - length, times[-1]
            begins = rng.uniform(low, high, 200_000)
            inside = (times >= begins[:, None]) & (times <= begins[:, None] + length)
            enough = np.cumsum(inside, axis=1) >= epochs
            first = np.argmax(enough & inside, axis=1)[enough.any(axis=1)]
            counted += share * (high - low) / 200_000 * np.bincount(first, minlength=len(times))
        assert found == pytest.approx(counted, rel=0.02, abs=0.03)


def test_lost_visits_and_nothing_to_find() -> None:
    schedule = ScheduleRecord(name="a", start=60_000.0, cadence=10.0, number=4000, loss=0.25)
    found = VisitFinder(schedule, 1, seed=2).found([1.0], [0.1])
    assert found.sum() == pytest.approx(0.75 * 4000 * 0.1, rel=0.02)  # 8 x 4000 visits
    assert VisitFinder(schedule, 1).found([], []).sum() == 0.0
    assert VisitFinder(ScheduleRecord(name="b", epochs=(1.0, 2.0)), 3).found([100.0], [1.0]).sum() == 0.0


def test_the_rule(tmp_path: Path) -> None:
    """28.7 mag at 5 sigma is 12.0 nJy (AB: 10^(-0.4 (28.7 - 31.4))); the template adds its noise in quadrature."""
    more = '[detection]\nsignificance = 6\nreference_depth = {red = "28.7 mag"}\n'
    campaign = write_campaign(tmp_path, campaign_text(saddle(), more=more))
    sigma = 10 ** (-0.4 * (28.7 - 31.4)) / 5
    assert detection_rule(campaign, None).limits["red"] == pytest.approx(6 * np.sqrt(2) * sigma, rel=1e-4)
    more = '[detection]\nreference = "previous"\n[[schedules]]\nepochs = [60000]\ndepth = {red = "27.7 mag"}\n'
    campaign = write_campaign(tmp_path, campaign_text(saddle(), more=more))
    limit = 5 * np.sqrt(2) * sigma * 10**0.4
    rule = detection_rule(campaign, campaign.schedules[0])
    assert rule.limits["red"] == pytest.approx(limit, rel=1e-4)
    two = replace(rule, limits={"red": 10.0, "blue": 30.0}, required=2)
    flux = {"red": np.array([1.0, 0.0]), "blue": np.array([1.0, 2.0])}
    assert two.needed(flux).tolist() == [30.0, np.inf]
    assert replace(two, required=1).needed(flux).tolist() == [10.0, 15.0]


# Forecasts


def test_a_forecast_adds_up(tmp_path: Path) -> None:
    more = '[[schedules]]\nname = "b"\nstart = 2030-01-01\ncadence = "1 d"\nnumber = 366\n'
    two = saddle() + saddle(lam_t=0.02).replace(STARS.format(0.01), "")
    result = predict_rates(write_campaign(tmp_path, campaign_text(two, more=more)), draws=8)
    each = sum(one.per_year.mean for one in result.segments)
    assert result.per_year.mean == pytest.approx(each, rel=1e-9)
    assert result.sample.rate == pytest.approx(each, rel=1e-9)
    assert result.sides.keys() == {"saddle", "minimum"}
    assert result.visits is not None
    # each night, for a year: what is above for a day or longer is found, and the first night finds what is on
    assert result.visits.found.sum() == pytest.approx(result.visits.season.mean, rel=1e-9)
    assert 0.5 * each < result.visits.season.mean < each + result.in_visit.median + 1e-9
    assert result.visits.found[5] < each / 365.25 * (1 + 1e-9)
    document = result.to_dict()
    assert document["expected_events"]["bound"] == "two-sided"
    assert len(document["per_segment"]) == len(result.to_table()) == 2
    assert sum(document["types"].values()) == pytest.approx(1.0)


def test_seed_and_draws(tmp_path: Path) -> None:
    campaign = write_campaign(tmp_path, campaign_text(saddle()))
    one, same, other = (predict_rates(campaign, draws=4, seed=seed) for seed in (1, 1, 2))
    assert one.to_dict() == same.to_dict()
    assert one.per_year.mean == pytest.approx(other.per_year.mean, rel=1e-12)  # all is exact, the lengths too
    assert plan_rates(campaign, draws=4).segments == 1


def test_uncertain_motion_and_light_widen_the_interval(tmp_path: Path) -> None:
    exact = predict_rates(write_campaign(tmp_path, campaign_text(saddle())), draws=16)
    assert exact.per_year.expected.low == pytest.approx(exact.per_year.expected.high, rel=1e-9)
    free = campaign_text(saddle(), motion='speed = {value = "700 km / s", error = "150 km / s"}')
    wide = predict_rates(write_campaign(tmp_path, free), draws=64)
    # the direction alone: normals lie along u, |cos| falls below 0.25 in 16% of directions
    assert wide.per_year.expected.low < 0.5 * wide.per_year.expected.high
    # the mean over directions is that of isotropic ones, 2/pi of the length
    assert wide.per_year.mean / exact.per_year.mean == pytest.approx(2 / np.pi / 0.94, rel=0.08)


def test_expectation_of_counts() -> None:
    """Poisson about 9.0: 16 and 84% are 6 and 12 (cumulated 0.116, 0.207; 0.803, 0.876). A spread widens the whole."""
    found = Expectation.of(np.full(10, 9.0))
    assert (found.poisson, found.total) == ((6.0, 12.0), (6.0, 12.0))
    wide = Expectation.of(np.geomspace(3.0, 27.0, 101))
    assert wide.expected.median == pytest.approx(9.0)
    assert wide.total[0] < 6.0 < 12.0 < wide.total[1]


def test_no_events_at_all(tmp_path: Path) -> None:
    result = predict_rates(write_campaign(tmp_path, campaign_text(smooth(5.0))), draws=2)
    assert result.per_year.mean == 0.0
    assert set(result.distributions().values()) == {None}
    assert EventSample.join([]).types()["B"] == 0.0


def test_a_line_is_cut() -> None:
    """Two arcseconds north, then one west at declination 60: six pieces of half an arcsecond."""
    line = LineRecord(
        points=((10.0, 60.0), (10.0, 60.0 + 2 / 3600), (10.0 - 1 / 3600 / 0.5, 60.0 + 2 / 3600)),
        step=0.52,
        width=0.3,
        macro=(MacroRecord(way="maps", position=(0.0, 0.0)),),
    )
    pieces = cut_line(line)
    assert [one.length for one in pieces] == pytest.approx([0.5] * 6, rel=1e-4)
    places = [one.macro[0].position for one in pieces]
    assert places[0] == pytest.approx((10.0, 60.0 + 0.25 / 3600), abs=1e-8)
    assert places[5] == pytest.approx((10.0 - 0.75 / 3600 / 0.5, 60.0 + 2 / 3600), abs=1e-8)
    with pytest.raises(InputError, match=r"line.step: must leave at most 400 segments"):
        cut_line(replace(line, step=0.001))


@pytest.mark.parametrize(
    ("change", "match"),
    [
        (("[motion]", "[cosmology]\nname = 'Planck15'\n[motion]"), None),
        (('depth = "28.7 mag"\n', ""), "bands: must have a depth in at least 1 of the bands that count, got 0"),
        (('[motion]\nspeed = "700 km / s"\nangle = "0 deg"\n', ""), "motion: must be given for a forecast of rates"),
        (('surface_brightness = {red = "25 mag / arcsec2"}\n', ""), "surface_brightness: must be given for a forecast"),
        ((STARS.format(0.01), ""), "must have stars in front, or a gradient for the smooth caustic"),
    ],
)
def test_what_must_be_there(change: tuple[str, str], match: str | None, tmp_path: Path) -> None:
    text = campaign_text(saddle()).replace(*change)
    campaign = write_campaign(tmp_path, text)
    if match is None:
        assert predict_rates(campaign, draws=2).per_year.mean > 0
        return
    with pytest.raises(InputError, match=match):
        predict_rates(campaign, draws=2)


@pytest.mark.parametrize(
    ("options", "match"),
    [
        ({"draws": 1}, "`draws` must be between 2 and 10000, got 1"),
        ({"beam": 0.0}, "`beam` must be between 0 and 10 arcsec, got 0"),
        ({"schedule": "late"}, r"`schedule` must be one of those of the file \(none\), got 'late'"),
    ],
)
def test_bad_arguments(options: dict[str, Any], match: str, tmp_path: Path) -> None:
    with pytest.raises(InputError, match=match):
        predict_rates(write_campaign(tmp_path, campaign_text(saddle())), **options)


def test_where_events_happen() -> None:
    """Time above a threshold by lam_t, against the exact law p(det = 0), centred on -kappa_star (Schneider 1987).

    Per area of the image plane, 3000 above the mean. A point follows the law: 2 p / 3000^2. A disc of 2e-4 saturates
    the weak folds of the minimum side: the peak stays, to the step of the grid, and the sides differ by more. Counted
    from zero, the threshold is nearer to the mean close to the curve, and the peak moves towards it.
    """
    grid = np.concatenate([np.arange(-0.05, -0.001, 0.0025), np.arange(0.0025, 0.051, 0.0025)])
    point, disc, total = np.empty((3, len(grid)))
    for k, lam_t in enumerate(grid):
        one = fold_ensemble(LocalLens.from_eigenvalues(lam_t, 0.4), [Population(0.01, single(1.0))])
        point[k] = float(one.exceedance(one.background + 3000.0, 1e-10)) / one.background
        disc[k] = float(one.exceedance(one.background + 3000.0, 2e-4)) / one.background
        total[k] = float(one.exceedance(3000.0, 2e-4)) / one.background
    law = np.asarray(density_at_zero(grid, 0.4, 0.01))
    assert grid[np.argmax(law)] == pytest.approx(-0.01, abs=1e-6)
    assert point == pytest.approx(2 * law / 3000.0**2, rel=0.01)  # the draws' noise is scaled out
    assert grid[np.argmax(disc)] == pytest.approx(-0.01, abs=0.0026)
    sides, exact = (one[grid < 0].sum() / one[grid > 0].sum() for one in (disc, law))
    assert exact < sides < 2 * exact
    assert -0.01 < grid[np.argmax(total)] < 0
