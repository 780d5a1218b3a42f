"""Payoff tables: laid out in scenario order, filled in any order, from complete replications only."""

import numpy as np
import pytest

from analysis.goals import TargetGoal, Welfare
from analysis.payoffs import Profiles, TableSums, exact_table, profiles_of, simulated_table
from sim.replicate import Failure, Run
from tests.analysis.builders import memoryless, record

DAYS = 10.0
THREE = Profiles(("A", "B", "C"), ((1, 2), (1, 2, 3), (4, 9)))  # shape (2, 3, 2)
UNITS = (
    {"name": "A", "beds": 2, "per_day": 1.0, "target_utilisation": 0.5},
    {"name": "B", "beds": 3, "per_day": 1.0, "target_utilisation": 0.5},
    {"name": "C", "beds": 9, "per_day": 1.0, "target_utilisation": 0.5},
)
SCENARIO = memoryless(*UNITS, run={"measured_days": DAYS})
GOAL = TargetGoal(np.array([0.0, 0.0, 0.0]), "absolute", 365.0)


def utilisation_of(thresholds):
    """An invented, lopsided dependence: no two players' payoffs can be mistaken for each other's."""
    a, b, c = thresholds
    return [(a + 2 * b) / 100, (3 * b + 5 * c) / 100, (7 * c + 11 * a) / 100]


def exact_cells():
    for profile in np.ndindex(THREE.shape):
        thresholds = list(THREE.thresholds(profile).values())
        yield [
            {
                "utilisation": utilisation,
                "turned_away_per_day": 0.1 * place,
                "diverted_out_per_day": 0.2,
                "admissions_per_day": thresholds[place],
                "arrivals_per_day": 1.0,
                "closed_with_free_bed_fraction": 0.3,
            }
            for place, utilisation in enumerate(utilisation_of(thresholds))
        ]


# ---- axes ----


def test_cells_are_numbered_with_the_last_players_choice_fastest():
    base = SCENARIO.policy()
    listed = [policy.thresholds for policy in THREE.policies(base)]
    assert len(listed) == THREE.cells == 12
    assert listed[:3] == [{"A": 1, "B": 1, "C": 4}, {"A": 1, "B": 1, "C": 9}, {"A": 1, "B": 2, "C": 4}]
    for cell, profile in enumerate(np.ndindex(THREE.shape)):
        assert listed[cell] == THREE.thresholds(profile)


def test_a_cells_incoming_threshold_follows_and_other_rules_stay():
    base = SCENARIO.policy()
    policy = next(iter(THREE.policies(base)))
    assert policy.units["A"].incoming == 1 and policy.units["C"].incoming == 4
    assert policy.when_all_closed == base.when_all_closed
    assert policy.units["C"].referral_order == base.units["C"].referral_order


def test_the_axes_are_the_scenarios_strategies_with_every_threshold_from_1_by_default():
    scenario = memoryless(*UNITS, game={"strategies": {"C": {"values": [9, 4]}, "B": {"from": 0, "to": 2}}})
    assert profiles_of(scenario) == Profiles(("A", "B", "C"), ((1, 2), (0, 1, 2), (9, 4)))


# ---- from exact measures ----


def test_each_players_payoffs_lie_along_the_axes_in_scenario_order():
    table = exact_table(THREE, GOAL, Welfare("throughput"), list(exact_cells()))
    assert table.payoffs.shape == (3, 2, 3, 2) and table.replicates is None
    for profile in np.ndindex(THREE.shape):
        thresholds = tuple(THREE.thresholds(profile).values())
        assert table.payoffs[(slice(None), *profile)] == pytest.approx(utilisation_of(thresholds))
        assert table.welfare[profile] == sum(thresholds)


def test_a_loss_weighs_transfers():
    table = exact_table(THREE, GOAL, Welfare("loss", 0.5), list(exact_cells()))
    assert table.welfare == pytest.approx(np.full(THREE.shape, 0.0 + 0.1 + 0.2 + 0.5 * 3 * 0.2))


# ---- from replications ----


def run(replication, cell):
    """A run whose numbers tell its address: occupied beds by cell, patients turned away by replication."""
    a, b, c = (cell + replication) % 3, cell % 4, cell % 10
    occupancy = np.zeros((1, 3, 10))
    for unit, level in enumerate((a, b, c)):
        occupancy[0, unit, level] = DAYS
    admitted = np.diag([10 + replication, 20, cell])
    return Run(
        replication, cell, record(occupancy, turned_away=[replication, 0, cell], admitted=admitted), ""
    )


def filled(runs, cells=12, replications=3):
    sums = TableSums(SCENARIO, cells, replications)
    for reply in runs:
        sums.add(reply)
    return sums


ALL = [[run(replication, cell)] for replication in range(3) for cell in range(12)]


def test_runs_may_arrive_in_any_order_and_in_any_blocks():
    inward = filled(ALL).sums()
    blocks = [[run(r, cell) for cell in range(first, first + 4)] for first in (8, 0, 4) for r in (2, 0, 1)]
    for other in (filled(reversed(ALL)).sums(), filled(blocks).sums()):
        assert other.keys() == inward.keys()
        assert all(np.array_equal(other[name], inward[name]) for name in inward)


def test_sums_stand_at_their_replication_and_cell():
    sums = filled(ALL).sums()
    assert sums["turned_away"].shape == (3, 12, 3)
    assert sums["turned_away"][2, 7].tolist() == [2, 0, 7]
    assert sums["occupied_days"][1, 5].tolist() == [0, DAYS, 5 * DAYS]
    assert sums["period_occupied_days"].shape == (3, 12, 1, 3)
    assert sums["bed_days"][0, 0].tolist() == [20, 30, 90]


def test_a_replication_without_all_its_cells_is_left_out_of_every_cell():
    """So that every contrast is between runs that met the same patients."""
    missing = [reply for reply in ALL if (reply[0].replication, reply[0].cell) != (1, 4)]
    sums = filled(missing)
    assert sums.complete.tolist() == [0, 2]
    assert sums.sums()["turned_away"][:, 0, 0].tolist() == [0, 2]
    assert not any(np.isnan(values).any() for values in sums.sums().values())


def test_failures_are_kept_and_counted_as_settled():
    failure = Failure(4021, 1, (4, 5), "Traceback ...\nZeroDivisionError: oh")
    sums = TableSums(SCENARIO, 12, 3)
    assert sums.add(failure) == 2 and sums.add([run(0, 0), run(0, 1), run(0, 2)]) == 3
    assert sums.failures == [failure]
    assert len(sums.complete) == 0
    assert set(sums.record_hashes) == {(0, 0), (0, 1), (0, 2)}


def test_a_simulated_table_is_laid_out_like_an_exact_one():
    table = simulated_table(THREE, GOAL, Welfare("throughput"), filled(ALL).sums(), 0.95)
    assert table.replications == 3 and table.replicates.shape == (3, 3, 2, 3, 2)
    for cell, profile in enumerate(np.ndindex(THREE.shape)):
        mean_of_a = sum((cell + replication) % 3 for replication in range(3)) / 3 / 2
        expected = [mean_of_a, cell % 4 / 3, cell % 10 / 9]
        assert table.payoffs[(slice(None), *profile)] == pytest.approx(expected)
        assert np.all(table.low[(slice(None), *profile)] <= np.add(expected, 1e-12))
        assert np.all(table.high[(slice(None), *profile)] >= np.subtract(expected, 1e-12))
        assert table.welfare[profile] == pytest.approx((31 + cell) / DAYS)
        treated = [(30 + replication + cell) / DAYS for replication in range(3)]
        assert table.welfare_replicates[(slice(None), *profile)] == pytest.approx(treated)


def test_outcomes_stand_beside_the_table_by_cell_and_unit():
    outcomes = simulated_table(THREE, GOAL, Welfare("loss", 0.5), filled(ALL).sums(), 0.95).outcomes
    assert outcomes.turned_away[7] == pytest.approx(
        [0.1, 0.0, 0.7]
    )  # mean of 0, 1, 2 over 10 days; 7 over 10
    assert outcomes.admitted[7] == pytest.approx([1.1, 2, 0.7])
    assert outcomes.utilisation[7, 2] == pytest.approx(7 / 9)


def test_the_squared_goal_keeps_judged_periods_by_cell():
    """Two periods of 5 days, one unit of 2 beds, two cells: utilisations .5, 1 and 0, 1; target .5."""
    scenario = memoryless(UNITS[0], run={"measured_days": DAYS})
    sums = TableSums(scenario, 2, 2)
    levels = {0: (1, 2), 1: (0, 2)}
    for replication, cell in np.ndindex(2, 2):
        occupancy = np.zeros((2, 1, 3))
        for period, level in enumerate(levels[cell]):
            occupancy[period, 0, level] = 5.0
        sums.add([Run(replication, cell, record(occupancy), "")])
    goal = TargetGoal(np.array([0.5]), "squared", 5.0)
    table = simulated_table(Profiles(("A",), ((1, 2),)), goal, Welfare("throughput"), sums.sums(), 0.95)
    assert table.payoffs == pytest.approx(np.array([[0.125, 0.25]]))
