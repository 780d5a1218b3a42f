"""Length-of-stay families against scipy.stats, mpmath, matrix exponentials, integrals and sums by hand."""

import math
import pickle

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from scipy.linalg import expm

from sim.stays import (
    Constant,
    Coxian,
    Distribution,
    Empirical,
    Erlang,
    Exponential,
    Gamma,
    Hyperexponential,
    Lognormal,
    Mixture,
    Weibull,
)

SMOOTH = {
    "exponential": Exponential(3.9),
    "erlang": Erlang(4.0, 3),
    "gamma": Gamma(3.0, 0.5),
    "spread gamma": Gamma(3.0, 1.3),
    "narrow gamma": Gamma(3.0, 0.02),
    "weibull": Weibull(3.0, 0.6),
    "heavy weibull": Weibull(3.0, 2.5),
    "lognormal": Lognormal(3.9, 1.4),
    "hyperexponential": Hyperexponential(3.0, 2.0),
    "coxian": Coxian((2.0, 0.5, 0.1), (0.6, 0.3)),
    "nearly equal coxian": Coxian((2.0, 2.0000001, 1.9999), (0.9, 0.7)),
    "stiff coxian": Coxian((500.0, 0.01), (0.3,)),
    "smooth mixture": Mixture(((3.0, Gamma(1.0, 0.1)), (1.0, Lognormal(6.0, 0.8)))),
}
STEPPED = {
    "constant": Constant(2.5),
    "zero": Constant(0.0),
    "empirical": Empirical((4.0, 1.0, 0.5, 1.0, 9.0)),
    "mixture with steps": Mixture(
        ((0.3, Constant(0.0)), (0.2, Empirical((1.0, 2.0, 7.0))), (0.5, Lognormal(3.0, 1.2)))
    ),
    "nested mixture": Mixture(
        ((2.0, Mixture(((1.0, Constant(2.5)), (1.0, Coxian((2.0, 0.5), (0.5,)))))), (1.0, Weibull(3.0, 0.7)))
    ),
}
FAMILIES = SMOOTH | STEPPED
COXIANS = [family for family in SMOOTH.values() if isinstance(family, Coxian)]
LOWEST, HIGHEST = 2.0**-53, 1.0 - 2.0**-53
GRID = np.array([LOWEST, 1e-9, 1e-3, 0.05, 0.2, 0.4999, 0.5, 0.7, 0.95, 0.999, 1.0 - 1e-9, HIGHEST])

each_family = pytest.mark.parametrize("family", FAMILIES.values(), ids=FAMILIES.keys())
each_smooth = pytest.mark.parametrize("family", SMOOTH.values(), ids=SMOOTH.keys())
uniform = st.floats(LOWEST, HIGHEST)


# --- reference distributions: scipy.stats (Virtanen et al., "SciPy 1.0", 2020) ---------------------------

_WEIBULL = stats.weibull_min(1.7, scale=2.2)
_SIGMA = math.sqrt(math.log(1 + 1.4**2))
REFERENCES = [
    (Exponential(3.9), stats.expon(scale=3.9)),
    (Erlang(4.0, 3), stats.erlang(3, scale=4.0 / 3)),
    (Gamma(3.0, 0.5), stats.gamma(4.0, scale=0.75)),
    (Gamma(3.0, 2.0), stats.gamma(0.25, scale=12.0)),
    (Weibull(_WEIBULL.mean(), _WEIBULL.std() / _WEIBULL.mean()), _WEIBULL),
    (Lognormal(3.9, 1.4), stats.lognorm(_SIGMA, scale=3.9 * math.exp(-(_SIGMA**2) / 2))),
    (Hyperexponential(3.0, 1.0), stats.expon(scale=3.0)),
    (Coxian((2.0, 2.0, 2.0), (1.0, 1.0)), stats.erlang(3, scale=0.5)),
    (Coxian((0.25,), ()), stats.expon(scale=4.0)),
]


@pytest.mark.parametrize(("family", "reference"), REFERENCES, ids=lambda value: type(value).__name__)
def test_family_equals_its_reference_distribution(family, reference):
    low, high = GRID[GRID < 0.5], GRID[GRID >= 0.5]
    assert family.quantile(low) == pytest.approx(reference.ppf(low), rel=1e-11)
    assert family.quantile(high) == pytest.approx(reference.isf(1.0 - high), rel=1e-11)
    x = reference.ppf([0.001, 0.3, 0.5, 0.8, 0.9999])
    assert family.cdf(x) == pytest.approx(reference.cdf(x), rel=1e-11)
    assert family.survival(x) == pytest.approx(reference.sf(x), rel=1e-11)
    assert family.mean() == pytest.approx(reference.mean(), rel=1e-12)
    assert family.cv() == pytest.approx(reference.std() / reference.mean(), rel=1e-12)
    assert family.median() == pytest.approx(reference.median(), rel=1e-12)


def test_lognormal_of_the_anzics_units():
    # Mean 3.4 and median 1.8 days: stays in Australian and New Zealand units 2008-09, BMC Medical Research
    # Methodology 2012, 12:68. A lognormal with both has sigma^2 = 1.272 and cv 1.60 (computed independently).
    family = Lognormal(3.4, math.sqrt(math.exp(1.272) - 1.0))
    assert family.cv() == pytest.approx(1.60, abs=0.005)
    assert family.median() == pytest.approx(1.8, abs=0.001)


# --- distribution functions in 40 digits: mpmath, and formulas written out ------------------------------


def _gamma_survival(shape, scale):
    return lambda x: mpmath.gammainc(shape, mpmath.mpf(x) / scale, regularized=True)


def _coxian_survival(rates, goes_on):
    size = len(rates)
    generator = mpmath.zeros(size)
    for phase, rate in enumerate(rates):
        generator[phase, phase] = -mpmath.mpf(rate)
        if phase + 1 < size:
            generator[phase, phase + 1] = mpmath.mpf(rate) * mpmath.mpf(goes_on[phase])
    return lambda x: sum(mpmath.expm(generator * mpmath.mpf(x))[0, phase] for phase in range(size))


def _hyperexponential_survival(mean, cv):
    root = mpmath.sqrt((mpmath.mpf(cv) ** 2 - 1) / (mpmath.mpf(cv) ** 2 + 1))
    shares = ((1 + root) / 2, (1 - root) / 2)
    return lambda x: sum(p * mpmath.exp(-2 * p * mpmath.mpf(x) / mean) for p in shares)


PRECISE = [
    (Gamma(3.0, 0.5), _gamma_survival(4, mpmath.mpf("0.75"))),
    (Gamma(3.0, 2.0), _gamma_survival(mpmath.mpf("0.25"), 12)),
    (Erlang(4.0, 50), _gamma_survival(50, mpmath.mpf("0.08"))),
    (Hyperexponential(3.0, 2.0), _hyperexponential_survival(3, 2.0)),
    (Hyperexponential(3.0, 50.0), _hyperexponential_survival(3, 50.0)),
    *((family, _coxian_survival(family.rates, family.goes_on)) for family in COXIANS),
]


@pytest.mark.parametrize(("family", "survival"), PRECISE, ids=lambda value: repr(value)[:40])
def test_quantiles_are_right_to_twelve_digits_in_both_tails(family, survival):
    with mpmath.workdps(40):
        for u in (LOWEST, 1e-6, 0.3, 0.5, 0.97, HIGHEST):
            x = float(family.quantile(u))
            # Bracketed to 1e-12: the exact distribution function passes u between the two.
            assert survival(x * (1 - 1e-12)) > 1 - mpmath.mpf(u) > survival(x * (1 + 1e-12))


# --- Coxian and hyperexponential by other roads -----------------------------------------------------------


@pytest.mark.parametrize("family", [SMOOTH["coxian"], SMOOTH["stiff coxian"], Coxian((3.0,) * 9, (0.8,) * 8)])
def test_coxian_follows_its_generator(family):
    # scipy.linalg.expm (Al-Mohy & Higham 2009) of the generator, and moments from its inverse.
    generator = np.diag(-np.array(family.rates)) + np.diag(family.rates[:-1] * np.array(family.goes_on), 1)
    for x in (0.01, 0.7, 3.0, 20.0):
        assert family.survival(x) == pytest.approx(expm(generator * x)[0].sum(), rel=1e-11)
        assert family.cdf(x) == pytest.approx(1.0 - expm(generator * x)[0].sum(), rel=1e-9)
    spent = np.linalg.inv(-generator)
    mean, second = spent[0].sum(), 2 * (spent @ spent)[0].sum()
    assert family.mean() == pytest.approx(mean, rel=1e-12)
    assert family.cv() == pytest.approx(math.sqrt(second - mean**2) / mean, rel=1e-12)


def test_order_of_certain_phases_does_not_matter():
    there, back = Coxian((3.0, 0.2, 40.0), (1.0, 1.0)), Coxian((40.0, 3.0, 0.2), (1.0, 1.0))
    assert there.quantile(GRID) == pytest.approx(back.quantile(GRID), rel=1e-12)
    assert there.mean() == pytest.approx(1 / 3 + 5 + 1 / 40, rel=1e-14)


def test_balanced_means_by_hand():
    # cv^2 = 1.25: sqrt((1.25 - 1) / (1.25 + 1)) = 1/3, so p = 2/3 and 1/3, with means 9/2 and 9 for mean 6.
    (p, short), (q, long) = Hyperexponential(6.0, math.sqrt(1.25)).phases
    assert (p, short, q, long) == pytest.approx((2 / 3, 4.5, 1 / 3, 9.0), rel=1e-14)
    assert p * short == pytest.approx(q * long, rel=1e-14)
    assert 2 * (p * short**2 + q * long**2) / 36 - 1 == pytest.approx(1.25, rel=1e-13)


# --- steps by hand -----------------------------------------------------------------------------------------


def test_empirical_by_hand():
    family = Empirical((4.0, 1.0, 0.5, 1.0, 9.0))
    u = [LOWEST, 0.1999, 0.2, 0.3999, 0.4, 0.6, 0.7999, 0.8, HIGHEST]
    assert family.quantile(u).tolist() == [0.5, 0.5, 1.0, 1.0, 1.0, 4.0, 4.0, 9.0, 9.0]
    assert family.cdf([0.4, 0.5, 1.0, 8.9, 9.0]).tolist() == [0.0, 0.2, 0.6, 0.8, 1.0]
    assert (family.mean(), family.median()) == (3.1, 1.0)
    # Squares 16 + 1 + 0.25 + 1 + 81 = 99.25; 99.25 / 5 - 3.1^2 = 10.24 = 3.2^2.
    assert family.cv() == pytest.approx(3.2 / 3.1, rel=1e-14)
    assert Empirical((1.0, 2.0)).median() == 2.0


@given(st.lists(st.floats(0.0, 1e4), min_size=1, max_size=30), uniform)
def test_empirical_is_sorted_floor_n_u(values, u):
    rank = min(math.floor(len(values) * u), len(values) - 1)
    assert Empirical(tuple(values)).quantile(u) == sorted(values)[rank]


def test_no_delay_for_a_quarter_by_hand():
    family = Mixture(((1.0, Constant(0.0)), (3.0, Exponential(2.0))))
    # F(x) = 1/4 + 3/4 (1 - exp(-x / 2)): the inverse is 0 up to 1/4, then -2 log((1 - u) / 0.75).
    assert family.quantile([LOWEST, 0.1, 0.25]).tolist() == [0.0, 0.0, 0.0]
    u = np.array([0.3, 0.5, 0.9, 1 - 2.0**-40])
    assert family.quantile(u) == pytest.approx(-2 * np.log((1 - u) / 0.75), rel=1e-13)
    assert (family.cdf(-1.0), family.cdf(0.0), family.mean()) == (0.0, 0.25, 1.5)
    # Second moment 0.75 * 2 * 2^2 = 6, variance 6 - 2.25.
    assert family.cv() == pytest.approx(math.sqrt(3.75) / 1.5, rel=1e-14)


def test_step_inside_a_smooth_part_by_hand():
    family = Mixture(((0.5, Constant(2.0)), (0.5, Exponential(2.0))))
    # Before the step F(2-) = (1 - 1/e) / 2 = 0.316, at the step 0.816; beyond, F = 1 - exp(-x / 2) / 2.
    before = (1 - math.exp(-1)) / 2
    assert family.quantile([before + 1e-9, 0.5, before + 0.5 - 1e-9]).tolist() == [2.0, 2.0, 2.0]
    assert family.quantile(0.2) == pytest.approx(-2 * math.log(0.6), rel=1e-13)
    assert family.quantile(0.9) == pytest.approx(-2 * math.log(0.2), rel=1e-13)


def test_mixture_of_steps_alone_by_hand():
    family = Mixture(((1.0, Constant(3.0)), (3.0, Empirical((1.0, 2.0, 3.0, 9.0)))))
    # F: 3/16 at 1, 6/16 at 2, 13/16 at 3, 1 at 9; where F equals u the inverse stays on the step.
    u = [LOWEST, 3 / 16, 0.2, 6 / 16, 0.4, 13 / 16, 0.82, HIGHEST]
    assert family.quantile(u).tolist() == [1.0, 1.0, 2.0, 2.0, 3.0, 3.0, 9.0, 9.0]


def test_step_far_in_the_tail_by_hand():
    family = Mixture(((1.0, Constant(1.0)), (1e-15, Constant(2.0))))
    # 9 and 10 times 2^-53 are 0.999e-15 and 1.11e-15, either side of the share that stays longer than 1.
    assert family.quantile([1 - 9 * 2.0**-53, 1 - 10 * 2.0**-53]).tolist() == [2.0, 1.0]


@settings(max_examples=50, deadline=None)
@given(uniform, st.sampled_from([name for name in FAMILIES if "mixture" in name]))
def test_mixture_quantile_is_the_smallest_time_that_reaches_u(u, name):
    family = FAMILIES[name]
    x = float(family.quantile(u))
    sooner, later = x * (1 - 1e-12), x * (1 + 1e-12)
    if u < 0.5:
        assert family.cdf(later) >= u * (1 - 1e-15)
        assert x == 0.0 or family.cdf(sooner) <= u * (1 + 1e-15)
    else:
        assert family.survival(later) <= (1 - u) * (1 + 1e-15)
        assert x == 0.0 or family.survival(sooner) >= (1 - u) * (1 - 1e-15)


def test_mixture_keeps_normalised_weights_and_ignores_parts_of_none():
    family = Mixture(((3.0, Exponential(1.0)), (1.0, Constant(2.0)), (0.0, Constant(99.0))))
    assert [weight for weight, _ in family.parts] == [0.75, 0.25, 0.0]
    assert family.quantile(HIGHEST) < 40.0
    alone, mixed = Gamma(3.0, 0.5), Mixture(((0.7, Gamma(3.0, 0.5)),))
    assert mixed.quantile(GRID) == pytest.approx(alone.quantile(GRID), rel=1e-12)


# --- what every family owes --------------------------------------------------------------------------------


def _panels(edges):
    """Gauss-Legendre points and weights on each interval between edges."""
    points, weights = np.polynomial.legendre.leggauss(24)
    half = np.diff(edges) / 2
    return (edges[:-1, None] + half[:, None] * (points + 1)).ravel(), (half[:, None] * weights).ravel()


# Where the distribution functions of the stepped families step.
STEPS = np.array([0.0, 0.5, 1.0, 2.0, 2.5, 4.0, 7.0, 9.0])


def _moment(family, power):
    return family.mean() ** power * (1 + (power - 1) * family.cv() ** 2)


@each_family
@pytest.mark.parametrize("power", [1, 2])
def test_moments_are_integrals_of_the_survival_function(family, power):
    far = 3.0 * float(family.quantile(HIGHEST)) + 10.0
    x, weight = _panels(np.unique(np.concatenate([np.geomspace(1e-14, far, 400), STEPS])))
    integral = np.sum(weight * power * x ** (power - 1) * family.survival(x))
    assert integral == pytest.approx(_moment(family, power), rel=1e-8, abs=1e-300)


@each_family
@pytest.mark.parametrize("power", [1, 2])
def test_moments_are_integrals_of_the_quantile_function(family, power):
    # Over the hazard -log(1 - u) up to 36.5, in panels that break where the quantile jumps or bends.
    reached = family.survival(np.concatenate([STEPS, np.nextafter(STEPS, -1.0)]))
    edges = [
        [0.0],
        np.geomspace(1e-12, 36.5, 300),
        np.linspace(0.0, 2.0, 2001),
        -np.log(reached[reached > 1e-15]),
    ]
    hazard, weight = _panels(np.unique(np.concatenate(edges)))
    stays = family.quantile(np.clip(-np.expm1(-hazard), LOWEST, HIGHEST))
    integral = np.sum(weight * np.exp(-hazard) * stays**power)
    assert integral == pytest.approx(_moment(family, power), rel=1e-7, abs=1e-300)


@each_smooth
def test_distribution_function_undoes_the_quantile(family):
    x = family.quantile(GRID)
    assert family.cdf(x)[GRID < 0.5] == pytest.approx(GRID[GRID < 0.5], rel=1e-10)
    assert family.survival(x)[GRID >= 0.5] == pytest.approx(1 - GRID[GRID >= 0.5], rel=1e-10)
    assert family.quantile(family.cdf(x[3:8])) == pytest.approx(x[3:8], rel=1e-11)


@each_family
def test_distribution_function_at_its_ends(family):
    assert family.cdf([-1.0, math.inf]) == pytest.approx([0.0, 1.0], abs=1e-15)
    assert family.survival([-1.0, math.inf]) == pytest.approx([1.0, 0.0], abs=1e-15)
    assert isinstance(family, Distribution)
    assert family.median() == family.quantile(0.5)


@settings(max_examples=200, deadline=None)
@given(uniform, uniform, st.sampled_from(list(FAMILIES)))
def test_quantile_rises_with_u(one, other, name):
    low, high = FAMILIES[name].quantile(sorted([one, other]))
    slack = 0.0 if name in ("constant", "zero", "empirical") else 1e-13
    assert 0.0 <= low <= high * (1.0 + slack) < math.inf


@each_family
def test_a_stay_does_not_depend_on_the_others_in_the_array(family):
    rng = np.random.default_rng(20240607)
    u = np.concatenate([(rng.integers(0, 2**52, 2000) + 0.5) * 2.0**-52, [LOWEST, HIGHEST]])
    together = family.quantile(u)
    alone = np.array([family.quantile(value) for value in u[-60:]])
    order = rng.permutation(u.size)
    assert np.array_equal(together[-60:], alone)
    assert np.array_equal(family.quantile(u[order]), together[order])
    assert np.array_equal(family.quantile(u[3::7]), together[3::7])
    assert np.array_equal(family.quantile(u.reshape(-1, 2)), together.reshape(-1, 2))
    assert np.array_equal(pickle.loads(pickle.dumps(family)).quantile(u), together)


EXTREME = [
    *(make(3.0, cv) for make in (Gamma, Weibull, Lognormal) for cv in (0.001, 20.0)),
    Hyperexponential(3.0, 1e5),
    Coxian((1e15, 1.0), (0.5,)),
]


@pytest.mark.parametrize("family", EXTREME, ids=repr)
def test_extreme_families_stay_finite(family):
    stays = family.quantile(GRID)
    assert np.all(np.isfinite(stays)) and np.all(stays >= 0.0) and np.all(np.diff(stays) >= 0.0)
    assert stays[0] < family.mean() < stays[-1] < 1e12


@pytest.mark.parametrize(
    "make",
    [
        lambda: Constant(-1.0),
        lambda: Exponential(0.0),
        lambda: Exponential(math.nan),
        lambda: Erlang(1.0, 0),
        lambda: Erlang(1.0, 2.5),
        lambda: Gamma(3.0, 0.0),
        lambda: Weibull(math.inf, 1.0),
        lambda: Lognormal("3", 1.0),
        lambda: Hyperexponential(3.0, 0.99),
        lambda: Coxian((), ()),
        lambda: Coxian((1.0, 2.0), ()),
        lambda: Coxian((1.0, 0.0), (0.5,)),
        lambda: Coxian((1.0, 2.0), (1.5,)),
        lambda: Empirical(()),
        lambda: Empirical((1.0, -2.0)),
        lambda: Mixture(()),
        lambda: Mixture(((0.0, Constant(1.0)),)),
        lambda: Mixture(((-1.0, Constant(1.0)), (2.0, Constant(2.0)))),
        lambda: Mixture(((1.0, 3.0),)),
        lambda: Exponential(1.0).quantile(0.0),
        lambda: Exponential(1.0).quantile([0.5, 1.0]),
        lambda: Exponential(1.0).quantile(math.nan),
    ],
)
def test_bad_arguments_are_refused(make):
    with pytest.raises(ValueError, match="must|need"):
        make()


def test_constructors_take_mean_and_cv_by_name():
    assert Gamma(mean=3, cv=0.5) == Gamma(3.0, 0.5)
    assert Erlang(mean=3, stages=2).cv() == pytest.approx(math.sqrt(0.5))
    assert hash(Coxian(rates=[1.0, 2.0], goes_on=[0.5])) == hash(Coxian((1.0, 2.0), (0.5,)))
