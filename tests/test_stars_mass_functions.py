"""Mass functions: moments against a table and against quadrature, quantiles and draws, populations, bad arguments."""

from __future__ import annotations

import json
import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mp, mpf, ncdf
from scipy.integrate import quad
from scipy.stats import kstest

from crossing.errors import InputError
from crossing.event import MicrolensRecord, Value
from crossing.event.microlens_section import _MASS_FUNCTIONS
from crossing.stars.mass_functions import (
    Population,
    chabrier,
    chabrier_2005,
    from_record,
    kroupa,
    log_normal,
    power_law,
    salpeter,
    single,
)

thorough = settings(derandomize=True, deadline=None, max_examples=60)

# Range, maker, <m>, <m^2>, <m^1/2>, <m^2>/<m>, <m^1/2>^2/<m>: computed apart from the published formulas, by closed
# forms and by quadrature; 10 printed digits, 7 in the last column.
MOMENTS = [
    (0.08, 1.5, salpeter, 0.2018170493, 0.07753103348, 0.4200631456, 0.3841649344, 0.8743218),
    (0.08, 1.5, kroupa, 0.3250684183, 0.1829740613, 0.5290350721, 0.5628786156, 0.8609822),
    (0.08, 1.5, chabrier, 0.3265700381, 0.1891197833, 0.5286824714, 0.5791094138, 0.8558812),
    (0.08, 1.5, chabrier_2005, 0.3761701022, 0.2351325022, 0.5705183263, 0.6250696182, 0.8652765),
    (0.1, 1.5, salpeter, 0.2424823536, 0.1026305877, 0.4639709636, 0.4232497176, 0.8877721),
    (0.1, 1.5, kroupa, 0.3582679404, 0.2076290125, 0.5614516340, 0.5795355629, 0.8798664),
    (0.1, 1.5, chabrier, 0.3589742571, 0.2138792177, 0.5600649179, 0.5958065612, 0.8738028),
    (0.1, 100, salpeter, 0.3513687796, 1.830453549, 0.5008732231, 5.209494001, 0.7139905),
    (0.1, 100, kroupa, 0.6377124413, 5.058980577, 0.6499776665, 7.933012199, 0.6624788),
    (0.1, 100, chabrier, 0.6713105284, 5.636689836, 0.6591273474, 8.396546155, 0.6471653),
]


@pytest.mark.parametrize(("low", "high", "maker", "mean", "square", "root", "ratio", "root_ratio"), MOMENTS)
def test_table_of_moments(low, high, maker, mean, square, root, ratio, root_ratio):
    function = maker(low, high)
    assert function.mean == pytest.approx(mean, rel=5e-10)
    assert function.moment(2) == pytest.approx(square, rel=5e-10)
    assert function.moment(0.5) == pytest.approx(root, rel=5e-10)
    assert function.moment(2) / function.mean == pytest.approx(ratio, rel=5e-10)
    assert function.moment(0.5) ** 2 / function.mean == pytest.approx(root_ratio, rel=1e-7)
    assert function.moment(0) == 1


def broken(mass):
    """dN/dlog10(m) of Kroupa (2001), continuous."""
    if mass < 0.08:
        return mass**0.7
    middle = 0.08 ** (1.3 - 0.3) * mass**-0.3
    return middle if mass < 0.5 else middle * 0.5 / mass


def bell(mass, peak, median, width):
    return peak * math.exp(-(math.log10(mass / median) ** 2) / (2 * width**2))


# dN/dlog10(m) as published, with the masses at which it breaks.
PUBLISHED = {
    "salpeter": (salpeter, lambda m: m**-1.35, ()),
    "kroupa": (kroupa, broken, (0.08, 0.5)),
    "chabrier": (chabrier, lambda m: bell(m, 0.158, 0.079, 0.69) if m <= 1 else 0.0443 * m**-1.3, (1.0,)),
    "chabrier 2005": (chabrier_2005, lambda m: bell(m, 0.093, 0.2, 0.55) if m <= 1 else 0.041 * m**-1.35, (1.0,)),
}


def integral(density, low, high, breaks=(), power=0.0):
    """Integral of m**power dN for dN/dlog10(m) = `density`, piece by piece in ln(m)."""
    edges = [math.log(m) for m in (low, *(b for b in breaks if low < b < high), high)]

    def integrand(x):
        return math.exp(power * x) * density(math.exp(x)) / math.log(10)

    return sum(quad(integrand, a, b, epsabs=0, epsrel=1e-12, limit=200)[0] for a, b in pairwise(edges))


lows = st.floats(-3, 1.5).map(lambda x: 10**x)
ratios = st.floats(0.01, 4).map(lambda x: 10**x)
powers = st.floats(-3, 3) | st.sampled_from([0, 1, 2, 0.5, -1, 0.35, 1.35, 0.3, 1.3])


@pytest.mark.parametrize("name", PUBLISHED)
@thorough
@given(low=lows, ratio=ratios, power=powers)
def test_published_functions_by_quadrature(name, low, ratio, power):
    maker, density, breaks = PUBLISHED[name]
    function, high = maker(low, low * ratio), low * ratio
    assert function.mass_range == (low, high)
    number = integral(density, low, high, breaks)
    expected = integral(density, low, high, breaks, power) / number
    assert function.moment(power) == pytest.approx(expected, rel=1e-10)  # quadrature is asked for 1e-12
    mass = low * ratio ** np.array([0.03, 0.4, 0.77])
    np.testing.assert_allclose(function.pdf(mass), [density(m) / (m * math.log(10) * number) for m in mass], rtol=1e-10)
    # The quantile undoes the integral.
    for p in (0.02, 0.5, 0.9):
        part = integral(density, low, float(function.quantile(p)), breaks)
        assert part / number == pytest.approx(p, rel=1e-9)  # a narrow range: masses rounded to 1e-16, cut into 1e-2


@thorough
@given(slope=st.floats(-4, 6) | st.sampled_from([0, 1, 2, 3, 1.5, 1 + 1e-9]), low=lows, ratio=ratios, power=powers)
def test_power_laws_by_quadrature(slope, low, ratio, power):
    function, high = power_law(slope, low, low * ratio), low * ratio
    number = integral(lambda m: m ** (1 - slope), low, high)
    expected = integral(lambda m: m ** (1 - slope), low, high, power=power) / number
    assert function.moment(power) == pytest.approx(expected, rel=1e-10)
    for p in (0.02, 0.5, 0.9):
        part = integral(lambda m: m ** (1 - slope), low, float(function.quantile(p)))
        assert part / number == pytest.approx(p, rel=1e-9)


@thorough
@given(median=lows, width=st.floats(0.1, 2), low=lows, ratio=ratios, power=powers)
def test_log_normals_by_quadrature(median, width, low, ratio, power):
    function, high = log_normal(median, width, low, low * ratio), low * ratio
    # Scaled to the largest value in the range, since 35 widths from the median nothing is left of it.
    exponent = math.log10(min(max(median, low), high) / median) ** 2 / (2 * width**2)

    def density(mass):
        return math.exp(exponent - math.log10(mass / median) ** 2 / (2 * width**2))

    peak = [min(max(median * 10 ** (k * width**2 * math.log(10)), low), high) for k in (0, power)]
    breaks = sorted({*peak, *(peak[0] * 10 ** (n * width / 3) for n in range(-9, 10))})
    number = integral(density, low, high, breaks)
    assert function.moment(power) == pytest.approx(integral(density, low, high, breaks, power) / number, rel=1e-9)
    for p in (0.02, 0.5, 0.9):
        part = integral(density, low, float(function.quantile(p)), breaks)
        assert part / number == pytest.approx(p, rel=1e-8)


def test_logarithmic_cases():
    # q = p + 1 - slope = 0 by hand, and its neighbours: no digits are lost around it.
    ln = math.log(100)
    assert power_law(2, 0.1, 10).mean == pytest.approx(ln / (10 - 0.1), rel=1e-14)
    assert power_law(1, 0.1, 10).mean == pytest.approx((10 - 0.1) / ln, rel=1e-14)
    assert power_law(1, 0.1, 10).moment(-1) == pytest.approx((10 - 0.1) / ln, rel=1e-14)
    for offset in (1e-14, 1e-11, 1e-8):
        # d ln<m>/d slope is of order 1.
        assert power_law(2 + offset, 0.1, 10).mean == pytest.approx(ln / (10 - 0.1), rel=10 * offset)
        p = np.linspace(0, 1, 11)
        np.testing.assert_allclose(power_law(1 + offset, 0.1, 10).quantile(p), 0.1 * 100**p, rtol=10 * offset + 1e-15)
    np.testing.assert_allclose(power_law(1, 0.1, 10).quantile([0, 0.5, 1]), [0.1, 1, 10], rtol=1e-15)


def test_uncut_log_normal():
    # A range 12 widths to each side: the moments of the whole distribution, median**p exp(p**2 s**2 / 2).
    function, s = log_normal(0.3, 0.2, 0.3 * 10**-2.4, 0.3 * 10**2.4), 0.2 * math.log(10)
    for power in (-2, -1, 0.5, 1, 2):
        assert function.moment(power) == pytest.approx(0.3**power * math.exp(power**2 * s**2 / 2), rel=1e-13)
    assert function.quantile(0.5) == pytest.approx(0.3, rel=1e-13)


@pytest.mark.parametrize(("median", "side"), [(1e-6, -1), (1e5, 1)])
def test_log_normal_far_from_its_median(median, side):
    """Where Phi itself underflows, against numbers of 40 digits."""
    function = log_normal(median, 0.05, 0.08, 1.5)
    mass = function.quantile(0.3)
    with mp.workdps(40):
        s = mpf(0.05) * mp.log(10)
        low, high, at = (mp.log(mpf(float(m)) / mpf(median)) / s for m in (0.08, 1.5, mass))

        def between(a, b):  # by the small tail of either side
            return side * (ncdf(side * b) - ncdf(side * a))

        mean = mpf(median) * mp.exp(s**2 / 2) * between(low - s, high - s) / between(low, high)
        reached = between(low, at) / between(low, high)
    # ln Phi is about -5000 there: rounding leaves 1e-12, and 1e-10 where the quantile stands at the 70th width.
    assert function.mean == pytest.approx(float(mean), rel=1e-11)
    assert float(reached) == pytest.approx(0.3, rel=1e-9)


def test_extreme_powers():
    for function in (
        kroupa(0.01, 100),
        chabrier(0.01, 100),
        log_normal(0.2, 0.6, 0.01, 100),
        power_law(-40, 0.01, 100),
    ):
        # High powers see the ends only: <m^p>^(1/p) goes to them, without running out of numbers on the way.
        assert function.moment(150) ** (1 / 150) == pytest.approx(100, rel=0.15)
        if function.name != "power law":
            assert function.moment(-150) ** (-1 / 150) == pytest.approx(0.01, rel=0.15)
        for power in (1e4, -1e4, np.float64(1e4)):
            with pytest.raises(InputError, match=r"`power` must keep the moment below 1e308, got -?10000; take one"):
                function.moment(power)


def test_single_mass_is_exact():
    function = single(0.3)
    assert function.mass_range == (0.3, 0.3)
    assert function.mean == 0.3
    assert [function.moment(p) for p in (0, 2, 0.5, -1)] == [1, 0.3**2, 0.3**0.5, 0.3**-1]
    np.testing.assert_array_equal(function.sample((2, 3), np.random.default_rng(1)), np.full((2, 3), 0.3))
    with pytest.raises(InputError, match="a single mass must not be asked for its density; treat it as a constant"):
        function.pdf(0.3)


def test_density_is_normalised_and_ends():
    function = chabrier(0.08, 20)
    inside = sum(quad(function.pdf, a, b, epsrel=1e-11)[0] for a, b in ((0.08, 0.3), (0.3, 1), (1, 4), (4, 20)))
    assert inside == pytest.approx(1, rel=1e-10)
    np.testing.assert_array_equal(function.pdf([0.0799, 20.01, -1, 0]), 0)
    assert np.isnan(function.pdf(np.nan))
    assert np.all(function.pdf([[0.08, 1], [2, 20]]) > 0)
    # The published jump: 0.04409583 below 1 Msun, 0.0443 above (2005: 0.04147388, 0.041), computed apart.
    step = np.nextafter(1, 2)
    assert chabrier().pdf(step) / chabrier().pdf(1.0) == pytest.approx(0.0443 / 0.04409583, rel=1e-7)
    assert chabrier_2005().pdf(step) / chabrier_2005().pdf(1.0) == pytest.approx(0.041 / 0.04147388, rel=1e-7)
    # Kroupa's is continuous.
    for mass in (0.08, 0.5):
        below, above = kroupa(0.01, 2).pdf([mass, np.nextafter(mass, 2)])
        assert above == pytest.approx(below, rel=1e-12)


@pytest.mark.parametrize(
    ("maker", "low", "high", "count"),
    [
        (kroupa, 0.01, 0.07, 1),
        (kroupa, 0.08, 0.5, 1),
        (kroupa, 0.08, 0.6, 2),
        (kroupa, 0.6, 9, 1),
        (kroupa, 0.01, 9, 3),
        (chabrier, 0.1, 1, 1),
        (chabrier, 1, 9, 1),
        (chabrier, 0.1, 9, 2),
        (chabrier, np.nextafter(1, 0), 2, 2),
    ],
)
def test_pieces_are_those_of_the_range(maker, low, high, count):
    function = maker(low, high)
    assert function.mass_range == (low, high)
    pieces = function.to_dict()["pieces"]
    assert len(pieces) == count
    assert sum(piece["share"] for piece in pieces) == pytest.approx(1, abs=1e-14)
    masses = function.quantile(np.linspace(0, 1, 1001))
    assert (masses[0], masses[-1]) == pytest.approx((low, high), rel=1e-14)
    assert np.all((masses >= low) & (masses <= high))
    assert np.all(np.diff(masses) > 0)


@pytest.mark.parametrize("name", PUBLISHED)
def test_draws_of_published_functions(name):
    maker, density, breaks = PUBLISHED[name]
    low, high = 0.05, 30.0
    function = maker(low, high)
    masses = function.sample(20_000, np.random.default_rng(20_25))
    # The law by quadrature between 400 masses; interpolation errs by 1e-5, the draws by 1/sqrt(20000) = 7e-3.
    grid = np.geomspace(low, high, 401)
    law = np.cumsum([0, *(integral(density, a, b, breaks) for a, b in pairwise(grid))])
    assert kstest(masses, lambda m: np.interp(np.log(m), np.log(grid), law / law[-1])).pvalue > 0.01
    scatter = math.sqrt((function.moment(2) - function.mean**2) / masses.size)
    assert abs(masses.mean() - function.mean) < 4 * scatter
    np.testing.assert_array_equal(masses, function.sample(20_000, np.random.default_rng(20_25)))


def test_draws_of_parametrised_functions():
    masses = power_law(1.0, 0.1, 10).sample(20_000, np.random.default_rng(3))
    assert kstest(np.log10(masses), "uniform", args=(-1, 2)).pvalue > 0.01
    masses = log_normal(0.3, 0.2, 0.3e-3, 300).sample((200, 100), np.random.default_rng(4))
    assert masses.shape == (200, 100)
    assert kstest(np.log10(masses / 0.3).ravel() / 0.2, "norm").pvalue > 0.01  # cut only at 15 widths


def test_population_density():
    # n = kappa_star / (pi <m>), and the mean mass of the table.
    assert Population(0.01, kroupa()).density == pytest.approx(0.01 / (math.pi * 0.3250684183), rel=5e-10)
    assert Population(0.4, single(1.0)).density == pytest.approx(0.4 / math.pi, rel=1e-15)
    assert Population(0.4, single(1.0)).total_mass(10 * math.pi) == pytest.approx(4, rel=1e-15)


@thorough
@given(
    function=st.sampled_from([single(0.3), kroupa(), salpeter(0.1, 100), chabrier()]),
    kappa_star=st.floats(1e-3, 0.5),
    area=st.floats(0, 5).map(lambda x: 10**x),
    seed=st.integers(0, 2**32),
)
def test_drawn_mass_is_the_nearest(function, kappa_star, area, seed):
    population = Population(kappa_star, function)
    masses = population.draw_masses(area, np.random.default_rng(seed))
    missing = population.total_mass(area) - masses.sum()
    assert abs(missing) <= 0.5 * function.mass_range[1] * (1 + 1e-9)
    if masses.size:
        # Without the last star it would be further away (or, by rounding, just as far).
        assert abs(missing) <= abs(missing + masses[-1]) + 1e-9


def test_drawn_masses_follow_the_function():
    population, rng = Population(0.1, kroupa()), np.random.default_rng(7)
    area = 2000 / population.density
    patches = [population.draw_masses(area, rng) for _ in range(50)]
    # The number scatters with the variance of a renewal process, n var(m) / <m>^2; the stop adds of order one star.
    spread = math.sqrt(2000 * (population.mass_function.moment(2) / population.mass_function.mean**2 - 1) / 50)
    assert abs(np.mean([patch.size for patch in patches]) - 2000) < 4 * spread + 1
    draws = np.concatenate(patches)
    direct = population.mass_function.sample(100_000, rng)
    assert kstest(draws, direct).pvalue > 0.01


def test_heavy_tail_needs_more_than_one_helping():
    class Misers(np.random.Generator):
        """Draws nothing but the lightest stars."""

        def random(self, size=None, dtype=np.float64, out=None):
            return np.zeros(size)

    masses = Population(0.1, salpeter(0.1, 100)).draw_masses(1000.0, Misers(np.random.PCG64(1)))
    assert masses.sum() == pytest.approx(100 / math.pi, abs=0.05)


def test_records():
    assert from_record(MicrolensRecord()) == kroupa()
    assert from_record(MicrolensRecord(mass_function="salpeter", mass_range=(0.1, 100))) == salpeter(0.1, 100)
    assert from_record(MicrolensRecord(mass_function="chabrier", mass_range=None)) == chabrier()
    assert from_record(MicrolensRecord(mass_function="power law", slope=1.8)) == power_law(1.8)
    record = MicrolensRecord(mass_function="log-normal", median_mass=0.2, width_dex=0.6, mass_range=(0.05, 3))
    assert from_record(record) == log_normal(0.2, 0.6, 0.05, 3)
    for mass in (Value.exact(0.6), Value.loguniform(0.3, 1.2), Value.normal(0.6, 0.1)):
        record = MicrolensRecord(mass_function="single", mass_range=None, mean_mass=mass)
        assert from_record(record).mean == pytest.approx(0.6, rel=1e-14)


def test_every_name_of_event_files_is_known():
    fields = {"slope": 2.0, "median_mass": 0.2, "width_dex": 0.5, "mean_mass": Value.exact(1.0)}
    for name, keys in _MASS_FUNCTIONS.items():
        given_fields = {key: fields[key] for key in keys if key in fields}
        assert from_record(MicrolensRecord(mass_function=name, **given_fields)).name == name
    with pytest.raises(InputError) as caught:
        from_record(MicrolensRecord(mass_function="flat"))
    listed = str(caught.value).partition(" must be ")[2].partition(", got")[0].replace(" or ", ", ").split(", ")
    assert set(listed) == set(_MASS_FUNCTIONS)


def test_descriptions():
    for function in (single(0.3), kroupa(0.01, 2), chabrier(), log_normal(0.2, 0.6)):
        document = json.loads(json.dumps(Population(0.1, function).to_dict()))
        assert document["kappa_star"] == 0.1
        assert document["mass_function"]["name"] == function.name
        assert document["mass_function"]["mean_mass_msun"] == function.mean
    assert kroupa(0.01, 2).to_dict()["pieces"][2] == {
        "shape": "power law",
        "mass_range_msun": [0.5, 2.0],
        "slope": 2.3,
        "share": pytest.approx(integral(broken, 0.5, 2) / integral(broken, 0.01, 2, (0.08, 0.5)), rel=1e-10),
    }
    assert str(kroupa()) == "kroupa, 0.08 to 1.5 Msun (mean 0.325)"
    assert str(single(0.3)) == "single, 0.3 Msun"


@pytest.mark.parametrize("maker", [salpeter, kroupa, chabrier, chabrier_2005, lambda *r: power_law(2, *r)])
def test_bad_ranges(maker):
    for low, high in ((1.5, 0.08), (0, 1), (-1, 1), (1, 1), (0.1, math.inf), (math.nan, 1), (0.1, math.nan)):
        with pytest.raises(
            InputError, match=r"`low` and `high` must be solar masses with 0 < low < high, got .*; swap"
        ):
            maker(low, high)
    with pytest.raises(InputError, match=r"`high` must be at least 0.1% above `low`, got 1.0 and 1.0005; use a single"):
        maker(1.0, 1.0005)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: single(0.0), "`mass` must be positive, got 0; give it in solar masses"),
        (lambda: single(math.inf), "`mass` must be positive, got inf"),
        (lambda: power_law(math.nan), "`slope` must be finite, got nan; 2.35 is that of Salpeter"),
        (lambda: log_normal(0.0, 0.5), "`median` must be positive, got 0; give it in solar masses"),
        (
            lambda: log_normal(0.2, 0.0),
            "`width_dex` must be positive and at most 10, got 0; a wider one is a power law",
        ),
        (
            lambda: log_normal(0.2, 11),
            "`width_dex` must be positive and at most 10, got 11; a wider one is a power law",
        ),
        (lambda: log_normal(0.2, 0.5, 2, 1), "`low` and `high` must be solar masses with 0 < low < high, got 2 and 1"),
        (lambda: kroupa().moment(math.nan), "`power` must be finite, got nan; 1 gives the mean"),
        (lambda: kroupa().quantile([0.5, 1.5]), "`p` must lie between 0 and 1, got 1.5; give probabilities"),
        (lambda: kroupa().quantile(math.nan), "`p` must lie between 0 and 1, got nan; give probabilities"),
        (lambda: Population(0.0, kroupa()), "`kappa_star` must be positive, got 0; leave out an empty population"),
        (lambda: Population(math.nan, kroupa()), "`kappa_star` must be positive, got nan"),
        (lambda: Population(0.1, kroupa()).total_mass(-1.0), "`area` must be positive, got -1; give it in squared"),
        (
            lambda: from_record(MicrolensRecord(mass_function="power law")),
            '`slope` must be given with mass_function = "power law"; add it',
        ),
        (
            lambda: from_record(MicrolensRecord(mass_function="single")),
            '`mean_mass` must be given with mass_function = "single"; add it',
        ),
        (
            lambda: from_record(MicrolensRecord(mass_function="log-normal", median_mass=0.2)),
            '`width_dex` must be given with mass_function = "log-normal"; add it',
        ),
        (
            lambda: from_record(MicrolensRecord(mass_function="flat")),
            "`mass_function` must be single, .* or log-normal, got 'flat'; use one of these",
        ),
    ],
)
def test_bad_arguments(call, message):
    with pytest.raises(InputError, match=message):
        call()
