"""The game solved by the exact chain, against a loop of its own, simulation, and what is known of such games.

What is known: with `any_bed` and equal stays, closing early costs nothing (any free bed is found, so patients
are lost only when every bed is taken, whatever the thresholds: pooling); with the other last resorts the
price of anarchy falls to 1 as the targets rise, for then nobody gains by closing early; the own utilisation
never falls in the own threshold; and best replies never fall in the other's threshold (with strictly rising
utilisations; Topkis 1979, Milgrom and Roberts 1990, from memory).
"""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.chain import OutOfScope, solve
from analysis.equilibria import best_responses, regrets
from analysis.exact_tables import solve_cells
from analysis.games import analyse
from analysis.goals import goal_of, welfare_of
from analysis.payoffs import TableSums, exact_table, profiles_of, simulated_table
from sim.replicate import replicate
from tests.analysis.builders import memoryless

RESORTS = ("turned_away", "home_bed", "any_bed")
TOLERANCE = 1e-9


def two_units(*, beds=(3, 4), per_day=(0.9, 1.1), targets=(0.55, 0.6), resort="home_bed", **tables):
    units = [
        {"name": name, "beds": b, "per_day": rate, "target_utilisation": target}
        for name, b, rate, target in zip("AB", beds, per_day, targets, strict=True)
    ]
    return memoryless(*units, diversion={"when_all_closed": resort}, **tables)


def exact_game(scenario, **how):
    profiles = profiles_of(scenario)
    cells = dict(solve_cells(scenario, profiles.policies(scenario.policy())))
    units = [cells[cell] for cell in range(profiles.cells)]
    return analyse(exact_table(profiles, goal_of(scenario), welfare_of(scenario), units), **how)


# ---- against a loop of its own ----


def solved_apart(thresholds, **network):
    """Utilisations and the network's rates where the file itself, not a policy, sets the thresholds."""
    scenario = two_units(**network)
    units = [
        unit.model_copy(update={"closure_threshold": k})
        for unit, k in zip(scenario.units, thresholds, strict=True)
    ]
    scenario = scenario.model_copy(update={"units": tuple(units)})
    result = solve(scenario, scenario.policy())
    return [result.units[name].utilisation for name in "AB"], result.network


@pytest.mark.parametrize("resort", RESORTS)
def test_every_number_of_the_game_can_be_had_cell_by_cell(resort):
    game = exact_game(two_units(resort=resort))
    cells = list(itertools.product(range(1, 4), range(1, 5)))
    solved = {cell: solved_apart(cell, resort=resort) for cell in cells}
    cost = {cell: [abs(u - t) for u, t in zip(solved[cell][0], (0.55, 0.6), strict=True)] for cell in cells}
    throughput = {cell: solved[cell][1].throughput_per_day for cell in cells}
    for a, b in cells:
        assert game.table.payoffs[:, a - 1, b - 1] == pytest.approx(cost[a, b], abs=1e-12)
        assert game.table.welfare[a - 1, b - 1] == pytest.approx(throughput[a, b], abs=1e-12)
    stable = [
        (a, b)
        for a, b in cells
        if all(cost[a, b][0] <= cost[other, b][0] + TOLERANCE for other in range(1, 4))
        and all(cost[a, b][1] <= cost[a, other][1] + TOLERANCE for other in range(1, 5))
    ]
    assert [tuple(one.thresholds.values()) for one in game.equilibria] == stable and stable
    best, worst = max(throughput.values()), min(throughput[cell] for cell in stable)
    assert game.cost.price_of_anarchy.mean == pytest.approx(best / worst, abs=1e-12)
    assert game.cost.lost_per_year.mean == pytest.approx(365 * (best - worst), abs=1e-9)
    for one in game.equilibria:
        assert one.verdict == "exact" and all(0 <= r.mean <= TOLERANCE for r in one.regret.values())


def test_what_stands_beside_a_ratio_is_that_profiles_own():
    place = exact_game(two_units()).place((0, 2))
    utilisations, network = solved_apart((1, 3))
    assert place.thresholds == {"A": 1, "B": 3}
    assert list(place.utilisation.values()) == pytest.approx(utilisations)
    assert place.throughput_per_day == pytest.approx(network.throughput_per_day)
    assert sum(place.turned_away_per_day.values()) == pytest.approx(network.turned_away_per_day)
    assert sum(place.diverted_out_per_day.values()) == pytest.approx(network.transfers_per_day)


def test_worker_processes_change_nothing():
    scenario = two_units()
    policies = list(profiles_of(scenario).policies(scenario.policy()))
    assert dict(solve_cells(scenario, policies, workers=2)) == dict(solve_cells(scenario, policies))


def test_a_scenario_out_of_scope_is_refused_at_once():
    scenario = two_units()
    reviewed = scenario.policy().with_rule("review_hours", {"A": 8.0})
    with pytest.raises(OutOfScope, match="review"):
        next(solve_cells(scenario, [reviewed]))


# ---- against simulation ----


def test_the_simulated_game_is_close_to_the_exact_one():
    """Every payoff within its interval: 24 at 1 - 1e-4 / 24 each: a false-alarm rate of at most 1e-4.

    The sets (10 replications) miss a true equilibrium or confirm a false one with a chance of at most .05.
    """
    run = {"seed": 8, "warm_up_days": 28.0, "measured_days": 280.0, "replications": 10}
    scenario = two_units(run=run)
    profiles = profiles_of(scenario)
    sums = TableSums(scenario, profiles.cells, 10)
    policies = list(profiles.policies(scenario.policy()))
    for reply in replicate(scenario, policies, range(10), engine="reference"):
        sums.add(reply)
    exact = exact_game(scenario).table
    table = simulated_table(profiles, exact.goal, exact.welfare_goal, sums.sums(), 1 - 1e-4 / 24)
    assert np.all(table.low <= exact.payoffs) and np.all(exact.payoffs <= table.high)
    assert np.abs(table.payoffs - exact.payoffs).max() < 0.05
    other = exact_game(two_units(per_day=(1.2, 1.4))).table  # a third more patients: this must not fit
    assert not np.all((table.low <= other.payoffs) & (other.payoffs <= table.high))
    estimated = analyse(table)
    assert {one.verdict for one in estimated.equilibria} <= {"possible", "confirmed"}
    found = exact_game(scenario)
    assert all(estimated.possible[one.profile] for one in found.equilibria)
    regret = regrets(exact.payoffs, "cost").max(axis=0)
    assert np.all(regret[estimated.confirmed] <= estimated.sets.confirmed.epsilon)
    for one in estimated.equilibria:
        assert all(r.low <= r.mean <= r.high for r in one.regret.values())


# ---- what is known of such games ----


@pytest.mark.parametrize("targets", [(0.3, 0.35), (0.5, 0.6), (0.8, 0.7)])
def test_with_any_bed_and_equal_stays_selfishness_costs_nothing(targets):
    game = exact_game(two_units(targets=targets, resort="any_bed"))
    assert game.cost.price_of_anarchy.mean == pytest.approx(1, abs=1e-9)
    assert np.ptp(game.table.welfare) < 1e-9 and len(game.cost.optimum) == game.table.profiles.cells


@pytest.mark.parametrize("resort", ["turned_away", "home_bed"])
def test_the_price_of_anarchy_falls_to_1_as_the_targets_rise(resort):
    prices = [
        exact_game(two_units(per_day=(1.4, 1.8), targets=(t, t), resort=resort)).cost.price_of_anarchy.mean
        for t in (0.4, 0.5, 0.6, 0.7, 0.8, 0.95)
    ]
    assert prices[0] > 1.01
    assert prices[-1] == pytest.approx(1, abs=1e-9)
    assert all(later <= earlier + 1e-9 for earlier, later in itertools.pairwise(prices))


def test_at_low_demand_with_home_bed_selfishness_costs_nothing():
    game = exact_game(two_units(per_day=(0.05, 0.05)))
    assert game.cost.price_of_anarchy.mean == pytest.approx(1, abs=1e-6)


def test_the_verdict_turns_at_the_weight_named():
    """Open units turn fewer away but move more: just below the weight they win, just above it they do not."""
    game = exact_game(two_units(per_day=(1.4, 1.8), targets=(0.4, 0.4)))
    outcomes, shape = game.table.outcomes, game.table.profiles.shape
    away, moved = (
        rates.sum(axis=-1).reshape(shape) for rates in (outcomes.turned_away, outcomes.diverted_out)
    )
    fewest, worst = np.unravel_index(np.argmin(away), shape), game.cost.worst
    for weight, wins in ((0.99 * game.turning.weight, True), (1.01 * game.turning.weight, False)):
        loss = away + weight * moved
        assert (loss[fewest] < loss[worst]) == wins


RATES = st.floats(0.1, 2.0)
NETWORKS = st.fixed_dictionaries(
    {
        "beds": st.tuples(st.integers(1, 3), st.integers(1, 3)),
        "per_day": st.tuples(RATES, RATES),
        "targets": st.tuples(st.floats(0.2, 0.95), st.floats(0.2, 0.95)),
        "resort": st.sampled_from(RESORTS),
    }
)


@settings(max_examples=40, deadline=None)
@given(NETWORKS)
def test_own_utilisation_never_falls_in_the_own_threshold(network):
    utilisation = exact_utilisations(two_units(**network))
    for player in range(2):
        assert np.all(np.diff(utilisation[player], axis=player) >= -1e-12)


def exact_utilisations(scenario):
    """(units, *shape), from the table's outcomes."""
    table = exact_game(scenario).table
    return table.by_player(table.outcomes.utilisation)


@settings(max_examples=40, deadline=None)
@given(NETWORKS)
def test_best_replies_never_fall_as_the_other_unit_opens(network):
    game = exact_game(two_units(**network))
    for player in range(2):
        replies = [
            reply.best for reply in best_responses(game.table.payoffs, "cost") if reply.player == player
        ]
        for before, after in itertools.pairwise(replies):
            assert min(after) >= min(before) and max(after) >= max(before)


@settings(max_examples=25, deadline=None)
@given(NETWORKS)
def test_there_is_a_pure_equilibrium_and_no_price_below_1(network):
    game = exact_game(two_units(**network))
    assert game.equilibria
    assert game.cost.price_of_anarchy.mean >= game.cost.price_of_stability.mean >= 1


# ---- tolerance ----


def test_a_wider_tolerance_lists_more_equilibria_but_leaves_the_optimum_alone():
    """The tolerance is in the goal's unit; the optimum's ties are ties of welfare."""
    scenario = two_units(per_day=(1.4, 1.8), targets=(0.4, 0.45))
    narrow, wide = exact_game(scenario), exact_game(scenario, tolerance=0.05)
    assert {one.profile for one in narrow.equilibria} < {one.profile for one in wide.equilibria}
    assert wide.cost.optimum == narrow.cost.optimum and len(wide.cost.optimum) < wide.table.profiles.cells
    assert all(r.mean <= 0.05 for one in wide.equilibria for r in one.regret.values())
    assert wide.cost.price_of_anarchy.mean >= narrow.cost.price_of_anarchy.mean
    assert wide.cost.price_of_stability.mean >= 1
