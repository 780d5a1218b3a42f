"""By how much the shape of the stay matters to two units, beyond its mean; the chain against the simulation.

Figures said to be computed here are the chain's own, kept so that a change is seen.
"""

import numpy as np
import pytest

from analysis.chain import solve
from analysis.confidence import mean_estimate
from analysis.measures import unit_sums
from analysis.verification import verify
from sim.replicate import replicate
from tests.analysis.test_chain_phases import coxian, erlang, exponential, hyperexponential, network, solved

OF_ONE_MEAN = {
    "exponential": exponential(2.0),
    "erlang": erlang(2.0, 3),
    "hyperexponential": hyperexponential(2.0, 3.0),
}
# A closes to its own at one patient; and: both reopen only when empty.
CLOSES_EARLY = [{"name": "A", "beds": 3, "closure_threshold": 1}, {"name": "B", "beds": 3}], "any_bed"
REOPENS_EMPTY = [{"name": name, "beds": 3, "reopening_gap": 3} for name in "AB"], "turned_away"
REPLICATIONS = 60


def two_units(rules, stay):
    units, resort = rules
    run = {"warm_up_days": 100.0, "measured_days": 2000.0, "seed": 4021}
    return network(units, [("A", 1.5, stay), ("B", 0.7, stay)], resort, run=run)


@pytest.fixture(scope="module")
def simulated():
    """Records by rules and stay; the same uniforms behind the patients of every one."""

    def records(rules, stay):
        scenario = two_units(rules, stay)
        replies = replicate(scenario, [scenario.policy()], range(REPLICATIONS), engine="compiled")
        return [reply[0].record for reply in replies]

    both = {"early": CLOSES_EARLY, "empty": REOPENS_EMPTY}
    return {
        (key, name): records(rules, stay) for key, rules in both.items() for name, stay in OF_ONE_MEAN.items()
    }


def closed_with_a_free_bed(records):
    """Of A, a replication's share of time each."""
    return unit_sums(records, np.array([3.0, 3.0]), 2000.0)["closed_free_days"][:, 0] / 2000.0


@pytest.mark.parametrize(
    ("key", "rules", "figures"),
    [
        ("early", CLOSES_EARLY, (0.66592, 0.65918, 0.67343)),
        ("empty", REOPENS_EMPTY, (0.51079, 0.40718, 0.64941)),
    ],
)
def test_two_units_are_sensitive_and_the_simulation_says_so_too(simulated, key, rules, figures):
    """A's time closed with a free bed rises with the variability of the stay.

    Each simulated difference to exponential stays, paired by common random numbers, must hold the chain's and
    exclude 0 (Student, 4 comparisons: a correct chain and engine fail with a chance of at most 1 %).
    """
    exact = {
        name: solve(two_units(rules, stay), two_units(rules, stay).policy())
        .units["A"].closed_with_free_bed_fraction
        for name, stay in OF_ONE_MEAN.items()
    }  # fmt: skip
    assert tuple(exact.values()) == pytest.approx(figures, abs=5e-6)
    assert exact["erlang"] < exact["exponential"] < exact["hyperexponential"]
    plain = closed_with_a_free_bed(simulated[key, "exponential"])
    for name in ("erlang", "hyperexponential"):
        paired = mean_estimate(closed_with_a_free_bed(simulated[key, name]) - plain, 0.99, comparisons=4)
        difference = exact[name] - exact["exponential"]
        assert paired.low <= difference <= paired.high
        assert paired.low > 0 or paired.high < 0


@pytest.mark.parametrize(("key", "rules"), [("early", CLOSES_EARLY), ("empty", REOPENS_EMPTY)])
@pytest.mark.parametrize(
    ("name", "wrong"),
    [("erlang", coxian([1.5, 1.5, 1.3], [1.0, 1.0])), ("hyperexponential", hyperexponential(2.2, 3.0))],
)
def test_every_measure_agrees_with_the_simulation_and_a_wrong_phase_rate_is_caught(
    simulated, key, rules, name, wrong
):
    """False-alarm rate at most 1 % each, over all measures.

    Planted: one of three rates of an Erlang stay off by 13 %, or both of a hyperexponential one by 10 %.
    """
    scenario, other = two_units(rules, OF_ONE_MEAN[name]), two_units(rules, wrong)
    records = simulated[key, name]
    assert verify(records, solve(scenario, scenario.policy()), scenario).agrees
    assert not verify(records, solve(other, other.policy()), scenario).agrees


# ---- many stages tend to a stay that never varies ----


def refused_share_of_constant_stays(per_day, stay_days, steps=400):
    """One unit of 3 beds that reopens only when empty, its stays all of one length.

    From the arrivals alone: let the last two patients have come x days apart, both still here. The next one
    within D - x days is the third and closes the unit for D days; between D - x and D there are again two,
    that far apart; later, the unit is empty. The chance of closing and the mean time to empty solve linear
    integral equations in x, here by the trapezoidal rule; a cycle begins with an arrival to the empty unit.
    """
    x = np.linspace(0, stay_days, steps + 1)
    density = per_day * np.exp(-per_day * x)
    weights = np.full((steps + 1, steps + 1), stay_days / steps)
    weights[:, -1] /= 2
    inside = np.arange(steps + 1)[None, :] - (steps - np.arange(steps + 1)[:, None])
    weights = np.where(inside < 0, 0, np.where(inside == 0, weights / 2, weights)) * density
    weights[0] = 0  # no room between D and D
    rest = stay_days - x
    third = -np.expm1(-per_day * rest)
    until = (1 - np.exp(-per_day * rest) * (1 + per_day * rest)) / per_day + stay_days * third
    later = np.exp(-per_day * stay_days) * stay_days
    system = np.eye(steps + 1) - weights
    closing = np.linalg.solve(system, third)
    lasting = np.linalg.solve(system, until + weights @ x + later)
    from_one = weights[-1]  # x = D: any time up to D makes two
    closes = from_one @ closing
    cycle = 1 / per_day + from_one @ (x + lasting) + later
    return closes * stay_days / cycle


def test_erlang_stays_of_many_stages_tend_to_constant_ones():
    """The error falls like 1 / stages, so twice the finer less the coarser answer is nearer than either."""
    unit = [{"name": "A", "beds": 3, "reopening_gap": 3}]
    limit = refused_share_of_constant_stays(1.0, 2.0)
    share = {k: solved(unit, [("A", 1.0, erlang(2.0, k))]).units["A"].turned_away_share for k in (8, 16)}
    coarse, fine = (share[k] - limit for k in (8, 16))
    assert coarse > fine > 0 and coarse / fine == pytest.approx(2.0, abs=0.25)
    assert abs(2 * share[16] - share[8] - limit) < fine / 3
