"""Distributions of a chain at given times: against scipy, 50-digit arithmetic and two states by hand."""

import mpmath
import numpy as np
import pytest
from scipy import stats
from scipy.linalg import expm

from analysis.chain import uniformisation
from analysis.chain.gth import Transitions, band_of, stationary
from analysis.chain.uniformisation import distributions, poisson_window

DIGITS = 50


# ---- Poisson weights ----


@pytest.mark.parametrize("mean", [0.0, 1e-9, 0.3, 1.0, 30.0, 9_876.5, 1e6])
def test_poisson_weights_are_those_of_scipy_within_their_bound(mean):
    window = poisson_window(mean)
    chances = stats.poisson.pmf(np.arange(window.first, window.last + 1), mean)
    outside = stats.poisson.cdf(window.first - 1, mean) + stats.poisson.sf(window.last, mean)
    assert outside <= uniformisation.TAIL
    assert window.weight.sum() == pytest.approx(1.0, abs=1e-13)
    # scipy's own chances are right to about 1e-16 times the size of their logarithms' terms.
    assert np.abs(window.weight - chances).sum() <= window.error + 1e-15 * (1 + mean * np.log(mean + 1))
    assert window.beyond(0) == pytest.approx(1.0) and window.beyond(window.last + 1) == 0.0


def test_poisson_weights_against_50_digits():
    with mpmath.workdps(DIGITS):
        for mean in (0.7, 47.3, 3_000.25):
            window, exact = poisson_window(mean), mpmath.mpf(mean)
            chance = exact**window.first * mpmath.exp(-exact) / mpmath.factorial(window.first)
            error = mpmath.mpf(0)
            for place, weight in enumerate(window.weight):
                error += abs(chance - mpmath.mpf(float(weight)))
                chance *= exact / (window.first + place + 1)
            assert error <= window.error < 1e-11


# ---- small chains ----


def chain_of(rates):
    """Transitions from a dense matrix of rates, its diagonal ignored."""
    origin, target = np.nonzero(rates * (1 - np.eye(len(rates))))
    return Transitions(origin, target, rates[origin, target], len(rates))


def generator(rates):
    off = rates * (1 - np.eye(len(rates)))
    return off - np.diag(off.sum(axis=1))


def in_50_digits(rates, start, days):
    """The distribution after so many days, by 50-digit arithmetic, from the rates as floats."""
    states = len(rates)
    with mpmath.workdps(DIGITS):
        exact = mpmath.matrix(states, states)
        for i in range(states):
            for j in range(states):
                if i != j:
                    exact[i, j] = mpmath.mpf(float(rates[i, j]))
                    exact[i, i] -= exact[i, j]
        row = mpmath.matrix([[mpmath.mpf(float(p)) for p in start]])
        return row * mpmath.expm(exact * mpmath.mpf(days), method="taylor")


def error_against_50_digits(found, exact):
    with mpmath.workdps(DIGITS):
        return float(sum(abs(mpmath.mpf(float(p)) - exact[0, place]) for place, p in enumerate(found)))


@pytest.mark.parametrize(("up", "down"), [(1.0, 2.0), (0.001, 5.0), (40.0, 40.0)])
def test_two_states_by_hand(up, down):
    days = [0.0, 0.01, 0.5, 3.0, 400.0]
    moves = Transitions(np.array([0, 1]), np.array([1, 0]), np.array([up, down]), 2)
    found = distributions(moves, np.array([1.0, 0.0]), days)
    both = up + down
    by_hand = np.array([(down + up * np.exp(-both * t)) / both for t in days])
    assert (np.abs(found.probability[:, 0] - by_hand) <= found.error_bound + 1e-15).all()
    assert (found.error_bound < 1e-10).all()


def random_rates(rng, states, spread):
    """Rates over `spread` powers of ten, about half of them none, a ring kept so that all is reached."""
    rates = 10.0 ** rng.uniform(-spread / 2, spread / 2, (states, states)) * (
        rng.random((states, states)) < 0.5
    )
    ring = np.roll(np.eye(states), 1, axis=1)
    return np.where((ring > 0) & (rates == 0), 1.0, rates)


@pytest.mark.parametrize("seed", range(12))
def test_random_chains_against_scipys_matrix_exponential(seed):
    rng = np.random.default_rng(seed)
    rates = random_rates(rng, states=int(rng.integers(2, 15)), spread=3)
    start = rng.dirichlet(np.ones(len(rates)))
    moves, days = chain_of(rates), [0.05, 1.0, 6.0]
    settled = stationary(moves, band_of(moves))
    for long_run in (None, settled):
        found = distributions(moves, start, days, long_run=long_run)
        for time, probability, bound in zip(days, found.probability, found.error_bound, strict=True):
            exact = start @ expm(generator(rates) * time)
            assert np.abs(probability - exact).sum() <= bound + 1e-11


def checked(seed):
    """A random stiff chain: steps saved by knowing its long run, and errors against 50 digits with their bounds."""
    rng = np.random.default_rng(seed)
    rates = random_rates(rng, states=5, spread=4)
    start, moves, days = rng.dirichlet(np.ones(5)), chain_of(rates), [0.003, 0.4, 200.0]
    settled = stationary(moves, band_of(moves))
    found = [distributions(moves, start, days, long_run=long_run) for long_run in (None, settled)]
    saved = found[0].steps - found[1].steps
    return saved, [
        (error_against_50_digits(one, in_50_digits(rates, start, time)), bound)
        for each in found
        for time, one, bound in zip(days, each.probability, each.error_bound, strict=True)
    ]


def test_the_error_bound_is_honest_and_of_use():
    """No slack here: the reference has 50 digits."""
    for seed in range(6):
        saved, errors = checked(seed)
        assert all(error <= bound < 1e-9 for error, bound in errors)
        assert saved > 1_000, "the chain must also be met after it has settled"


def test_a_bound_that_forgets_what_was_cut_off_is_found_out(monkeypatch):
    """A planted error: a wide tail left out, and the bound of a narrow one."""
    narrow = uniformisation.TAIL
    monkeypatch.setattr(uniformisation, "TAIL", 1e-3)
    honest = uniformisation.PoissonWindow.error.fget
    assert all(error <= bound for error, bound in checked(0)[1])
    monkeypatch.setattr(
        uniformisation.PoissonWindow, "error", property(lambda w: honest(w) - 2e-3 + 2 * narrow)
    )
    assert any(error > bound for error, bound in checked(0)[1])


@pytest.mark.parametrize("slack", [0.0, 1e-6])
def test_a_wrong_long_run_widens_the_bound_and_never_breaks_it(slack):
    """Planted: a chain that starts in what it is told is its long run, right or a little wrong."""
    rates = np.array([[0.0, 1.0, 0.0], [2.0, 0.0, 3.0], [0.5, 1.0, 0.0]])
    moves = chain_of(rates)
    told = stationary(moves, band_of(moves)) + slack * np.array([1.0, -1.0, 0.0])
    found = distributions(moves, told, [0.5, 20.0], long_run=told)
    assert found.steps == 0
    for time, one, bound in zip([0.5, 20.0], found.probability, found.error_bound, strict=True):
        error = error_against_50_digits(one, in_50_digits(rates, told, time))
        assert error <= bound
        assert (error > 1e-7) == (bound > 1e-7) == (slack > 0)
