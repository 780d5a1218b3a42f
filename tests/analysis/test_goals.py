"""What players pursue, |E U - T| or E (U over a period - T)^2, and what the network values, by hand."""

import math

import numpy as np
import pytest

from analysis.goals import TargetGoal, Welfare, goal_of, welfare_of
from sim.errors import ScenarioError
from tests.analysis.builders import memoryless

T_975_2 = 4.302653  # Student's t, 2 degrees of freedom, .975 (standard tables)


def goal(targets, shape="absolute", judged_days=10.0):
    return TargetGoal(np.array(targets), shape, judged_days)


def utilisations(*rows, beds=10.0):
    """Sums of one cell over 20 days: a row a replication, a utilisation a unit."""
    values = np.array(rows, float)[:, None, :]
    return {"occupied_days": values * beds * 20, "bed_days": np.full(values.shape, beds * 20)}


def periods(*replications, beds=10.0, judged=10.0, days=20.0):
    """Sums of one cell and one unit: utilisation of every judged period, a row a replication."""
    values = np.array(replications, float)[:, None, :, None]
    shape = (len(replications), 1, 1)
    staffed = np.full(values.shape, beds * judged)
    return {
        "period_occupied_days": values * staffed,
        "period_bed_days": staffed,
        "days": np.full(shape, days),
    }


# ---- the distance of mean utilisation from the target ----


def test_exact_payoffs_are_distances_from_each_units_own_target():
    utilisation = np.array([[0.6, 0.9], [0.7, 0.8]])  # (cells, units)
    expected = [[0.1, 0.1], [0.0, 0.0]]
    assert goal([0.7, 0.8]).exact({"utilisation": utilisation}) == pytest.approx(
        np.array(expected), abs=1e-12
    )


def test_it_is_the_mean_that_is_judged_not_every_replication():
    """Replications .6 and .8 around a target of .7: the mean is on it, though each is .1 away."""
    point, _ = goal([0.7]).estimate(utilisations([0.6], [0.8]))
    assert point == pytest.approx(np.array([[0.0]]), abs=1e-12)


def test_away_from_the_target_pseudo_values_are_the_replications_own_distances():
    """There |mean - T| is linear, and a linear statistic's pseudo-values are its observations."""
    point, pseudo = goal([0.5, 0.9]).estimate(utilisations([0.6, 0.7], [0.7, 0.6], [0.8, 0.8]))
    assert point == pytest.approx(np.array([[0.2, 0.2]]))
    assert pseudo[:, 0, 0] == pytest.approx([0.1, 0.2, 0.3])
    assert pseudo[:, 0, 1] == pytest.approx([0.2, 0.3, 0.1])


def test_pseudo_values_across_the_target_by_hand():
    """.66, .70, .71 around .7: the mean .69 is .01 away; less one of them .705, .685, .68: .005, .015, .02.

    Pseudo-values 3 x .01 - 2 x those: .02, 0, -.01.
    """
    point, pseudo = goal([0.7]).estimate(utilisations([0.66], [0.70], [0.71]))
    assert point == pytest.approx(np.array([[0.01]]))
    assert pseudo[:, 0, 0] == pytest.approx([0.02, 0.0, -0.01])


def test_one_replication_gives_its_own_distance():
    point, pseudo = goal([0.7]).estimate(utilisations([0.66]))
    assert point == pytest.approx(np.array([[0.04]])) and pseudo == pytest.approx(np.array([[[0.04]]]))
    low, high = goal([0.7]).interval(utilisations([0.66]), 0.95)
    assert np.isnan(low).all() and np.isnan(high).all()


def test_the_interval_of_the_distance_by_hand():
    """.60, .62, .64: mean .62, standard error .02 / sqrt(3); a target above them all."""
    low, high = goal([0.9]).interval(utilisations([0.60], [0.62], [0.64]), 0.95)
    half = T_975_2 * 0.02 / math.sqrt(3)
    assert low[0, 0] == pytest.approx(0.28 - half, abs=1e-6)
    assert high[0, 0] == pytest.approx(0.28 + half, abs=1e-6)


@pytest.mark.parametrize("target", [0.58, 0.62, 0.66])
def test_with_the_target_inside_the_interval_the_distance_may_be_nought(target):
    low, high = goal([target]).interval(utilisations([0.60], [0.62], [0.64]), 0.95)
    half = T_975_2 * 0.02 / math.sqrt(3)
    assert low[0, 0] == 0
    assert high[0, 0] == pytest.approx(abs(0.62 - target) + half, abs=1e-6)


# ---- the squared distance of a judged period's utilisation ----


def test_the_squared_goal_by_hand():
    """Periods of 10 days, target .7: replication one .6 and .8 (mean square .01), two .7 and .9 (.02)."""
    point, values = goal([0.7], shape="squared").estimate(periods([0.6, 0.8], [0.7, 0.9]))
    assert values[:, 0, 0] == pytest.approx([0.01, 0.02])
    assert point == pytest.approx(np.array([[0.015]]))


def test_the_spread_of_a_single_period_counts():
    """A unit on target on average pays for its spread: (E U - T)^2 alone would be nought."""
    point, _ = goal([0.7], shape="squared").estimate(periods([0.6, 0.8], [0.6, 0.8]))
    assert point == pytest.approx(np.array([[0.01]]))


def test_what_is_left_beyond_the_whole_periods_is_not_judged():
    """25 days hold two periods of 10; the third column is the rest."""
    sums = periods([0.6, 0.8, 0.1], days=25.0)
    point, _ = goal([0.7], shape="squared").estimate(sums)
    assert point == pytest.approx(np.array([[0.01]]))


def test_a_squared_goal_is_never_below_nought():
    low, high = goal([0.7], shape="squared").interval(periods([0.7, 0.7], [0.7, 0.9], [0.7, 0.7]), 0.95)
    assert low[0, 0] == 0 and high[0, 0] > 0.02


# ---- the network's welfare ----


def test_throughput_is_a_gain_and_loss_a_cost():
    rates = {"throughput": np.array([4.0]), "turned_away": np.array([0.5]), "transfers": np.array([1.5])}
    throughput, loss = Welfare("throughput"), Welfare("loss", transfer_weight=0.2)
    assert (throughput.sense, throughput.value(**rates)) == ("gain", [4.0])
    assert loss.sense == "cost" and loss.value(**rates) == pytest.approx([0.8])
    assert Welfare("loss").value(**rates) == [0.5]


# ---- from a scenario ----

UNITS = (
    {"name": "A", "beds": 4, "per_day": 1.0, "target_utilisation": 0.6},
    {"name": "B", "beds": 6, "per_day": 1.0},
)


def test_a_goal_needs_every_units_target_and_names_those_without():
    with pytest.raises(ScenarioError) as error:
        goal_of(memoryless(*UNITS))
    assert [fault.key for fault in error.value.faults] == ["units.B.target_utilisation"]
    assert "--target" in error.value.faults[0].remedy


def test_a_goal_has_the_scenarios_targets_in_file_order():
    units = (UNITS[0], UNITS[1] | {"target_utilisation": 0.7})
    found = goal_of(memoryless(*units, game={"goal": {"shape": "squared", "judged_over_days": 30.0}}))
    assert found.targets.tolist() == [0.6, 0.7]
    assert (found.shape, found.judged_days, found.sense) == ("squared", 30.0, "cost")


@pytest.mark.parametrize(
    ("game", "expected"),
    [
        ({}, Welfare("throughput")),
        ({"welfare": {"kind": "loss", "transfer_weight": 0.3}}, Welfare("loss", 0.3)),
        ({"welfare": {"kind": "loss"}}, Welfare("loss", 0.0)),
    ],
)
def test_the_welfare_is_the_games_and_throughput_by_default(game, expected):
    assert welfare_of(memoryless(*UNITS, game=game)) == expected
