"""Payoffs that bend: beside the form for plain distances, by hand, and by coverage with an error planted.

Coverage is of made games: means of our own choosing plus normal noise, so that the truth is known.
"""

from __future__ import annotations

import numpy as np
import pytest

from analysis.confidence import jackknife
from analysis.contrasts import evidence_of, paired_costs, paired_distances, with_branches
from analysis.goals import goal_of, welfare_of
from analysis.payoffs import Profiles, simulated_table
from analysis.sets import confirmed, possible, regret_bounds
from tests.analysis.builders import memoryless

LEVEL = 0.05


def rng(seed=1):
    return np.random.default_rng(seed)


def pseudo(signed):
    """Jackknife pseudo-values of |mean|, (replications, cells)."""
    n = len(signed)
    return jackknife(np.abs(signed.mean(axis=0)), np.abs((signed.sum(axis=0) - signed) / (n - 1)))


def bent(signed):
    """One player's distances, (replications, cells), as the larger of two branches."""
    return with_branches(paired_costs(pseudo(signed)[:, None]), [np.stack([signed, -signed])])


def test_a_distance_as_two_branches_is_the_distance():
    signed = rng().normal(size=(20, 4)) + np.array([3.0, 0.5, -0.2, -1.0])
    one, other = bent(signed), paired_distances(signed[:, None])
    mine, theirs = (possible(each, LEVEL, rng()) for each in (one, other))
    assert mine.statistic == pytest.approx(theirs.statistic)
    assert mine.critical <= theirs.critical + 1e-12  # what is surely not the larger branch cannot err
    assert confirmed(one, 0.5, LEVEL).p == pytest.approx(confirmed(other, 0.5, LEVEL).p)
    for end in ("low", "high"):
        assert getattr(regret_bounds(one, LEVEL), end) == pytest.approx(
            getattr(regret_bounds(other, LEVEL), end)
        )
    assert one.costs == pytest.approx(other.costs)


def missed(evidence_from, experiments=200, replications=20):
    """How often C at LEVEL lacks one of two strategies that are equally far from the target, on either side of it."""
    noise = rng(7)
    off = np.array([1.0, -1.0]) / np.sqrt(replications)
    lost = 0
    for _ in range(experiments):
        common, own = noise.normal(size=(replications, 1)), noise.normal(size=(replications, 2))
        signed = off + np.sqrt(0.9) * common + np.sqrt(0.1) * own
        lost += not possible(evidence_from(signed), LEVEL, noise, draws=400).mask.all()
    return lost / experiments


def test_equilibria_near_a_bend_are_kept():
    """At most .05; more than .096 in 200 experiments has a chance below .003 if it is .05 (binomial)."""
    assert missed(bent) <= 0.096


def test_planted_pseudo_values_of_the_whole_lose_them():
    assert missed(lambda signed: paired_costs(pseudo(signed)[:, None])) > 0.2


def test_a_regret_near_a_bend_is_not_confirmed_too_often():
    """a is 1.5 standard errors off, b at the target: the regret of a is epsilon. False alarm as above, level .05."""
    noise, wrong, epsilon = rng(3), 0, 1.5 / np.sqrt(20)
    for _ in range(200):
        signed = noise.normal(size=(20, 2)) + np.array([epsilon, 0.0])
        wrong += confirmed(bent(signed), epsilon, LEVEL).mask[0]
    assert wrong / 200 <= 0.096


# ---- from goals ----

UNITS = (
    {"name": "A", "beds": 2, "per_day": 0.7, "target_utilisation": 0.5},
    {"name": "B", "beds": 6, "per_day": 1.6, "target_utilisation": 0.6},
)
ABOVE = {
    "kind": "target_utilisation",
    "shape": "above",
    "tie_breaker": {"measure": "closed_time", "weight": 0.1},
}


def sums(replications=12, cells=3):
    """Sums of runs of 10 days around both targets."""
    noise, days = rng(5), 10.0
    shape = (replications, cells, 2)
    beds = np.array([2.0, 6.0])
    shares = np.array([0.5, 0.6]) + noise.normal(0, 0.05, shape)
    counts = {
        name: noise.poisson(8, shape).astype(float)
        for name in ("turned_away", "diverted_out", "admitted", "arrived")
    }
    return counts | {
        "occupied_days": shares * beds * days,
        "bed_days": np.broadcast_to(beds * days, shape),
        "closed_days": noise.uniform(0, 3, shape),
        "closed_free_days": noise.uniform(0, 3, shape),
        "days": np.full(shape, days),
    }


@pytest.mark.parametrize(
    ("game", "branches"),
    [
        ({"goal": ABOVE}, (2, 2)),
        ({"players": [{"name": "both", "units": ["A", "B"]}]}, (4,)),
        ({"goal": {"kind": "weighted", "weights": {"target_distance": 1, "closed_fraction": 0.2}}}, (2, 2)),
    ],
)
def test_the_largest_branch_is_the_payoff(game, branches):
    scenario = memoryless(*UNITS, game=game)
    goal = goal_of(scenario)
    found, point = goal.branches(sums()), goal.estimate(sums())[0]
    assert tuple(len(one) for one in found) == branches
    for player, one in enumerate(found):
        assert one.mean(axis=1).max(axis=0) == pytest.approx(point[:, player])


def test_goals_without_a_bend_have_no_branches():
    assert goal_of(memoryless(*UNITS, game={"goal": {"kind": "turned_away"}})).branches(sums()) is None
    assert goal_of(memoryless(*UNITS)).branches(sums()) is None


def test_a_simulated_table_of_such_a_goal_is_judged_by_its_branches():
    scenario = memoryless(*UNITS, game={"players": [{"name": "both", "units": ["A", "B"]}]})
    profiles = Profiles(("both",), ((1, 2, 3),))
    table = simulated_table(profiles, goal_of(scenario), welfare_of(scenario), sums(), 0.95)
    evidence = evidence_of(table)
    assert evidence.branches[0].shape == (4, 12, 3)
    assert evidence.costs == pytest.approx(table.payoffs)
    assert possible(evidence, LEVEL, rng()).mask[np.argmin(table.payoffs[0])]
