"""How much time averages vary: closed forms, brute force on small chains, and the simulator's own intervals."""

import math

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from scipy import stats
from scipy.linalg import eigvals

from analysis.chain import Limits, OutOfScope, solve, variance
from analysis.chain.variance import TimeAverage, asymptotic_variances
from analysis.planning import half_width_of
from analysis.simulation import summarise
from sim.errors import RunError
from sim.replicate import replicate
from tests.analysis.builders import memoryless
from tests.analysis.test_chain_random import RULES, Plain, as_scenario, networks, walked

SHARES = (
    "utilisation", "mean_occupied", "full_fraction", "closed_fraction", "closed_with_free_bed_fraction",
    "incoming_closed_fraction",
)  # fmt: skip
COUNTS = ("admissions_per_day", "diverted_out_per_day", "diverted_in_per_day", "turned_away_per_day")


def one_unit(beds, per_day, stay_days, **keys):
    """The variances of a single unit that keeps all its patients or turns them away."""
    unit, lost = {"name": "Ewe", "beds": beds, "per_day": per_day, **keys}, {"when_all_closed": "turned_away"}
    scenario = memoryless(unit, stay_days=stay_days, diversion=lost)
    return asymptotic_variances(scenario, scenario.policy()).units["Ewe"]


# ---- closed forms ----


@pytest.mark.parametrize(("per_day", "stay_days"), [(3.0, 2.0), (0.5, 9.0), (20.0, 0.2)])
def test_a_unit_with_plenty_of_beds(per_day, stay_days):
    """M/M/infinity: covariance at lag s is a exp(-mu s), so the variance is 2 a / mu = 2 lambda / mu^2 (Whitt 1989,
    "Planning queueing simulations"; from memory); its admissions are Poisson, so vary by lambda a day."""
    unit = one_unit(60, per_day, stay_days)
    assert unit["mean_occupied"].mean == pytest.approx(per_day * stay_days, rel=1e-12)
    assert unit["mean_occupied"].variance == pytest.approx(2 * per_day * stay_days**2, rel=1e-10)
    assert unit["utilisation"].variance == pytest.approx(2 * per_day * stay_days**2 / 60**2, rel=1e-10)
    assert unit["admissions_per_day"].variance == pytest.approx(per_day, rel=1e-10)


@pytest.mark.parametrize(("lam", "mu"), [(3.0, 0.5), (0.2, 1.0), (1.0, 1.0)])
def test_one_bed_by_hand(lam, mu):
    """M/M/1/1. Occupied: two states, 2 lam mu / (lam + mu)^3. Admissions: a renewal process whose gaps are a stay and
    a wait, so var / mean^3 (Cox, Renewal Theory, 1962). Turned away: Poisson while occupied, so the two-state
    modulated index 1 + 2 lam mu / (lam + mu)^2 (Heffes & Lucantoni 1986). All from memory."""
    unit, both = one_unit(1, lam, 1 / mu), lam + mu
    assert unit["utilisation"].variance == pytest.approx(2 * lam * mu / both**3, rel=1e-12)
    assert unit["full_fraction"] == unit["utilisation"]
    gap_mean, gap_variance = 1 / lam + 1 / mu, 1 / lam**2 + 1 / mu**2
    assert unit["admissions_per_day"].mean == pytest.approx(1 / gap_mean, rel=1e-12)
    assert unit["admissions_per_day"].variance == pytest.approx(gap_variance / gap_mean**3, rel=1e-12)
    lost = lam**2 / both
    assert unit["turned_away_per_day"].mean == pytest.approx(lost, rel=1e-12)
    assert unit["turned_away_per_day"].variance == pytest.approx(
        lost * (1 + 2 * lam * mu / both**2), rel=1e-12
    )


def test_what_never_changes_does_not_vary():
    """A unit that is always closed: nobody is in it, and all of its Poisson arrivals are turned away or moved."""
    units = [
        {"name": "Ewe", "beds": 3, "closure_threshold": 0, "per_day": 3.0},
        {"name": "Tern", "beds": 2, "per_day": 1.1},
    ]
    scenario = memoryless(*units, stay_days=2.0, diversion={"when_all_closed": "turned_away"})
    found = asymptotic_variances(scenario, scenario.policy())
    assert found.units["Ewe"]["closed_fraction"] == TimeAverage(1.0, pytest.approx(0.0, abs=1e-12))
    assert found.units["Ewe"]["utilisation"] == TimeAverage(0.0, 0.0)
    assert found.units["Ewe"]["turned_away_per_day"].variance > found.units["Ewe"]["turned_away_per_day"].mean
    alone = one_unit(3, 3.0, 2.0, closure_threshold=0)
    assert alone["turned_away_per_day"] == TimeAverage(3.0, pytest.approx(3.0))


def erlang(beds, load):
    """The rates of Erlang's loss system, stays of a day, as a dense generator."""
    rates = np.diag(np.full(beds, float(load)), 1) + np.diag(np.arange(1.0, beds + 1), -1)
    return rates - np.diag(rates.sum(axis=1))


@pytest.mark.parametrize(("beds", "load"), [(3, 2.0), (10, 8.0), (20, 25.0)])
def test_erlangs_loss_system_by_its_fundamental_matrix_and_by_its_spectrum(beds, load):
    """Two other ways: the fundamental matrix (Kemeny & Snell 1960), and, as the chain is reversible, the sum over its
    eigenvalues of squared coefficients of the reward, 2 c^2 / eigenvalue."""
    rates = erlang(beds, load)
    weights = np.array([load**n / math.factorial(n) for n in range(beds + 1)])
    pi, unit = weights / weights.sum(), one_unit(beds, load, 1.0)
    root = np.sqrt(pi)
    values, vectors = np.linalg.eigh(-(root[:, None] * rates / root))
    fundamental = np.linalg.inv(np.outer(np.ones(beds + 1), pi) - rates)
    for name, reward in (
        ("mean_occupied", np.arange(beds + 1.0)),
        ("full_fraction", 1.0 * (np.arange(beds + 1) == beds)),
    ):
        centred = reward - pi @ reward
        coefficients = (vectors.T @ (root * centred))[1:]
        assert unit[name].variance == pytest.approx(2 * (pi * centred) @ fundamental @ centred, rel=1e-9)
        assert unit[name].variance == pytest.approx(2 * (coefficients**2 / values[1:]).sum(), rel=1e-9)


# ---- brute force on networks ----


def growth(rates, reward, marked, tilt):
    """The rate at which E exp(tilt x total) grows: the largest eigenvalue of the tilted generator."""
    tilted = rates + tilt * np.diag(reward) + np.expm1(tilt) * marked
    return eigvals(tilted).real.max()


def curvature(rates, reward, marked, step):
    """Its second derivative at 0, the variance of the total a day, by differences of fourth order."""
    f = {k: growth(rates, reward, marked, k * step) for k in (-2, -1, 0, 1, 2)}
    return (-f[-2] + 16 * f[-1] - 30 * f[0] + 16 * f[1] - f[2]) / (12 * step**2)


class Plainly:
    """The variances of a plain network, from its generator and nothing of the program's."""

    def __init__(self, plain):
        self.network = Plain(plain)
        self.states, self.events = walked(self.network)
        self.rates = self.marked(lambda home, unit: True)
        self.rates -= np.diag(self.rates.sum(axis=1))

    def marked(self, counts):
        """The rates of the events for which `counts(home, unit)` holds; a discharge has no home."""
        matrix = np.zeros((len(self.states), len(self.states)))
        for origin, target, rate, home, unit in self.events:
            matrix[origin, target] += rate * counts(home, unit)
        return matrix

    def lost(self, homes):
        """The rates of patients turned away, who move nothing."""
        found = [
            sum(
                per_day * chance
                for home, per_day, _ in self.network.patients
                for unit, chance in self.network.chances(state, home)
                if unit is None and home in homes
            )
            for state in self.states
        ]
        return np.diag(np.array(found, float))

    def accrued(self, name):
        """The rewards of one unit that accrue with time."""
        place = self.network.names.index(name)
        load = np.array([sum(state[place][0]) for state in self.states])
        own = np.array([state[place][1] for state in self.states])
        incoming = np.array([state[place][2] for state in self.states])
        beds = self.network.units[name]["beds"]
        full = load == beds
        return dict(zip(SHARES, (load / beds, load, full, ~own, ~own & ~full, ~incoming), strict=True))

    def unit(self, name):
        """measure -> variance."""
        none = np.zeros(len(self.states))
        found = {
            m: curvature(self.rates, 1.0 * reward, 0 * self.rates, 0.01)
            for m, reward in self.accrued(name).items()
        }
        marked = (
            self.marked(lambda home, unit: home is not None and unit == name),
            self.marked(lambda home, unit: home == name != unit),
            self.marked(lambda home, unit: home is not None and unit == name != home),
            self.lost([name]),
        )
        return found | {
            m: curvature(self.rates, none, each, 0.01) for m, each in zip(COUNTS, marked, strict=True)
        }


NETWORKS = {
    "two stays in one unit, and a gap": {
        "units": [
            {"name": "Ewe", "beds": 3, "closure_threshold": 2, "reopening_gap": 2},
            {"name": "Tern", "beds": 2, "incoming_threshold": 1, "admit_while_closed": 0.3},
        ],
        "patients": [("Ewe", 1.6, 1.0), ("Tern", 1.2, 0.6)],
        "resort": "home_bed",
    },
    "turned away": {
        "units": [{"name": "Ewe", "beds": 3, "closure_threshold": 2}, {"name": "Tern", "beds": 4}],
        "patients": [("Ewe", 2.0, 1.0), ("Tern", 2.5, 1.0)],
        "resort": "turned_away",
    },
}


@pytest.mark.parametrize("which", NETWORKS)
def test_every_measure_of_a_network_by_the_growth_of_its_generating_function(which):
    """The variance of any total is the second derivative of its cumulant rate, an eigenvalue: no Poisson equation."""
    scenario, plainly = as_scenario(NETWORKS[which]), Plainly(NETWORKS[which])
    found = asymptotic_variances(scenario, scenario.policy())
    for name, unit in found.units.items():
        expected = plainly.unit(name)
        assert set(unit) == set(expected)
        for measure, average in unit.items():
            assert average.variance == pytest.approx(expected[measure], rel=1e-4, abs=1e-6), (name, measure)
    homes = plainly.network.names
    totals = {
        "throughput_per_day": plainly.marked(lambda home, unit: home is not None),
        "transfers_per_day": plainly.marked(lambda home, unit: home is not None and home != unit),
        "turned_away_per_day": plainly.lost(homes),
    }
    assert set(found.network) == set(totals)
    for measure, marked in totals.items():
        expected = curvature(plainly.rates, np.zeros(len(plainly.states)), marked, 0.01)
        assert found.network[measure].variance == pytest.approx(expected, rel=1e-4), measure


@given(networks())
@settings(
    max_examples=30, derandomize=True, deadline=None, suppress_health_check=[HealthCheck.filter_too_much]
)
def test_random_networks_by_the_growth_of_their_generating_functions(plain):
    walk = walked(Plain(plain))
    assume(walk is not None and len(walk[0]) < 50)
    scenario, plainly = as_scenario(plain), Plainly(plain)
    for name, unit in asymptotic_variances(scenario, scenario.policy()).units.items():
        expected = plainly.unit(name)
        for measure, average in unit.items():
            assert average.variance == pytest.approx(expected[measure], rel=1e-4, abs=1e-5), (name, measure)


def test_the_means_are_those_of_the_exact_measures():
    scenario = as_scenario(RULES)
    found, exact = asymptotic_variances(scenario, scenario.policy()), solve(scenario, scenario.policy())
    assert found.states == exact.states
    for name, unit in found.units.items():
        assert {m: one.mean for m, one in unit.items()} == pytest.approx(
            {m: getattr(exact.units[name], m) for m in unit}, rel=1e-12, abs=1e-15
        )
    for measure, one in found.network.items():
        assert one.mean == pytest.approx(getattr(exact.network, measure), rel=1e-12)


def test_what_is_out_of_scope_is_refused():
    scenario = as_scenario(RULES)
    slow = scenario.model_copy(
        update={"diversion": scenario.diversion.model_copy(update={"extra_days": 1.0})}
    )
    with pytest.raises(OutOfScope, match="extra_days"):
        asymptotic_variances(slow, slow.policy(), limits=Limits())


class TestCertificates:
    """Planted errors of the solver must not be handed on."""

    def spoilt(self, monkeypatch, spoil):
        right = variance._bias
        monkeypatch.setattr(variance, "_bias", lambda *arguments: spoil(right(*arguments)))
        scenario = as_scenario(RULES)
        return asymptotic_variances(scenario, scenario.policy())

    def test_none(self, monkeypatch):
        assert self.spoilt(monkeypatch, lambda bias: bias).states > 1

    def test_a_solution_a_little_off(self, monkeypatch):
        rng = np.random.default_rng(1)
        with pytest.raises(RunError, match="admissions and discharges"):
            self.spoilt(monkeypatch, lambda bias: bias * (1 + 1e-4 * rng.standard_normal(bias.shape)))

    def test_a_wrong_distribution(self, monkeypatch):
        scenario = as_scenario(RULES)
        chain, probability = variance.settled(scenario, scenario.policy(), Limits())
        monkeypatch.setattr(variance, "settled", lambda *_: (chain, probability[::-1]))
        with pytest.raises(RunError, match="Poisson's equation"):
            asymptotic_variances(scenario, scenario.policy())


# ---- the simulator ----

REPLICATIONS, DAYS, CONFIDENCE = 1_500, 400.0, 0.95
FALSE_ALARM_RATE = 0.001  # of all tests of the simulator's intervals together, were they exactly chi-squared
# A run of 400 mean stays is not infinitely long: its variance differs by about a stay in 400, hence this allowance.
FINITE = 0.02


@pytest.fixture(scope="module")
def measured():
    """Two units' intervals from the simulator, and what the chain says of their time averages."""
    units = [
        {"name": "Ewe", "beds": 4, "closure_threshold": 3, "per_day": 3.0},
        {"name": "Tern", "beds": 6, "per_day": 4.0},
    ]
    run = {"seed": 77, "warm_up_days": 14, "measured_days": DAYS, "replications": REPLICATIONS}
    scenario = memoryless(*units, stay_days=1.0, run=run, diversion={"when_all_closed": "turned_away"})
    policy = scenario.policy()
    runs = list(replicate(scenario, [policy], range(REPLICATIONS), engine="compiled"))
    records = [one.record for reply in runs for one in reply]
    return summarise(records, scenario, confidence=CONFIDENCE), asymptotic_variances(scenario, policy)


def refused(measured, wrong=lambda average: average.variance):
    """The measures whose simulated interval is too wide or too narrow for the variance that is claimed.

    (R - 1) (half-width / expected half-width)^2 has a chi-squared distribution with R - 1 degrees of freedom.
    """
    simulated, found = measured
    pairs = [(simulated.units[name][m], one) for name, unit in found.units.items() for m, one in unit.items()]
    pairs += [(simulated.network[m], one) for m, one in found.network.items()]
    pairs = [(estimate, one) for estimate, one in pairs if one.mean > 0]
    degrees = REPLICATIONS - 1
    tail = FALSE_ALARM_RATE / len(pairs) / 2
    low, high = stats.chi2.ppf([tail, 1 - tail], degrees)
    off = 0
    for estimate, one in pairs:
        claimed = half_width_of(math.sqrt(wrong(one) / DAYS), REPLICATIONS, CONFIDENCE)
        spread = degrees * ((estimate.high - estimate.low) / 2 / claimed) ** 2
        off += not low * (1 - FINITE) <= spread <= high * (1 + FINITE)
    return off, len(pairs)


def test_the_simulators_intervals_are_as_wide_as_the_chain_says(measured):
    """False-alarm rate 0.001 over all measures (Bonferroni), fixed seed."""
    off, tested = refused(measured)
    assert off == 0 and tested == 21


def test_wrong_variances_are_refused(measured):
    """Planted: a factor 2 forgotten; and counts taken for Poisson, which those that closures make are not."""
    off, tested = refused(measured, lambda one: one.variance / 2)
    assert off == tested
    off, _ = refused(measured, lambda one: TimeAverage(one.mean, one.mean).variance)
    assert off >= 14
    off, tested = refused(measured, lambda one: one.variance * 1.25)
    assert off == tested


def test_the_means_lie_in_the_simulators_intervals(measured):
    """With 20 measures at 95 % each, 6 or more misses have a chance below 0.001 were they independent."""
    simulated, found = measured
    misses = sum(
        not simulated.units[name][m].low <= one.mean <= simulated.units[name][m].high
        for name, unit in found.units.items()
        for m, one in unit.items()
    )
    assert misses < 6
