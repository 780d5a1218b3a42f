"""Aligned targets: against brute force on the exact chain, by hand, and by how often a simulated statement errs."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from analysis.alignment import (
    Advice,
    Answer,
    Delta,
    Loss,
    Ruler,
    answer_of,
    combinations,
    highest_utilisation,
    is_exponential,
    level_of,
    losses_of,
    row_of,
    tried,
    turning_of,
    whole,
)
from analysis.alignment_document import alignment_document
from analysis.chain import solve
from analysis.confidence import Estimate
from analysis.exact_tables import solve_cells
from analysis.games import Place
from analysis.payoffs import TableSums
from analysis.settings import Grid
from analysis.sweeping import EXACT, SIMULATED, Filled, networks_of
from sim.replicate import Share, replicate_shares
from tests.analysis.builders import memoryless
from tests.analysis.test_settings import realistic

TARGETS = (0.4, 0.55, 0.6, 0.65, 0.7, 0.8)
DEMANDS = (1.1, 1.2)
DELTA = Delta(share=0.01)


def pair(**tables):
    units = (
        {"name": "A", "beds": 3, "per_day": 1.05, "target_utilisation": 0.5},
        {"name": "B", "beds": 4, "per_day": 1.4, "target_utilisation": 0.5},
    )
    run = {"warm_up_days": 14, "measured_days": 84, "replications": 12, "seed": 1}
    return memoryless(*units, **({"run": run} | tables))


def exactly(scenario, demands=DEMANDS):
    found = []
    for network in networks_of(scenario, scenario.policy(), Grid(demands).settings()):
        cells = dict(solve_cells(network.scenario, network.policies))
        found.append(Filled(network, cells=[cells[place] for place in range(network.profiles.cells)]))
    return found


def simulated(scenario, demands=DEMANDS):
    found = []
    for network in networks_of(scenario, scenario.policy(), Grid(demands).settings(), SIMULATED):
        count = scenario.run.replications
        sums = TableSums(network.scenario, network.profiles.cells, count)
        share = [Share(tuple(range(network.profiles.cells)), range(count))]
        for reply in replicate_shares(network.scenario, network.policies, share, engine="compiled"):
            sums.add(reply)
        found.append(Filled(network, sums=sums.sums()))
    return found


def row(filled, targets=TARGETS, *, per_unit=False, weights=(), delta=DELTA, confidence=0.95):
    tries = combinations(targets, 2, per_unit=per_unit)
    ruler = Ruler(delta, level_of(confidence, len(tries)), confidence, 1e-9)
    return row_of("as in the file", filled, list(tried(filled, tries, weights, ruler)), weights)


# ---- exact, against brute force ----


def brute_force(scenario, targets, demands, share):
    """Which (A, B) targets hold: every profile solved alone, equilibria and losses by plain loops."""
    holding = []
    tables = {}
    for demand in demands:
        network = scenario.with_demand(demand)
        tables[demand] = {
            (a, b): solve(network, network.policy().with_thresholds({"A": a, "B": b}))
            for a, b in itertools.product(range(1, 4), range(1, 5))
        }
    for pair_of_targets in targets:
        good = True
        for demand, table in tables.items():
            use = {
                at: [result.units[name].utilisation for name in ("A", "B")] for at, result in table.items()
            }
            treated = {at: result.network.throughput_per_day for at, result in table.items()}
            cost = {
                at: [abs(mine - aim) for mine, aim in zip(use[at], pair_of_targets, strict=True)]
                for at in table
            }
            stable = [
                (a, b)
                for a, b in table
                if all(cost[a, b][0] <= cost[x, b][0] + 1e-9 for x in range(1, 4))
                and all(cost[a, b][1] <= cost[a, y][1] + 1e-9 for y in range(1, 5))
            ]
            arrivals = demand * (1.05 + 1.4)
            lost = max(treated.values()) - min(treated[at] for at in stable) if stable else np.inf
            reached = all(
                max(mine[place] for mine in use.values()) >= pair_of_targets[place] for place in (0, 1)
            )
            good = good and lost <= share * arrivals and reached
        if good:
            holding.append(pair_of_targets)
    return holding


def test_the_exact_answer_is_brute_forces():
    scenario = pair()
    common = brute_force(scenario, [(target, target) for target in TARGETS], DEMANDS, 0.01)
    found = row(exactly(scenario)).answer
    assert common and found.lowest == (common[0],)
    assert common[0] != (TARGETS[0],) * 2, "an answer at the lowest target would say nothing"


def test_targets_by_unit_are_brute_forces_too():
    scenario, targets = pair(), (0.55, 0.6, 0.65, 0.7)
    holding = brute_force(scenario, list(itertools.product(targets, repeat=2)), DEMANDS, 0.01)
    minimal = {
        one
        for one in holding
        if not any(other != one and other[0] <= one[0] and other[1] <= one[1] for other in holding)
    }
    found = row(exactly(scenario), targets, per_unit=True).answer
    assert set(found.lowest) == minimal and minimal
    means = [(3 * a + 4 * b) / 7 for a, b in found.lowest]
    assert means == sorted(means), "by the mean over beds"


def test_with_throughput_the_answer_is_about_the_busiest_units_utilisation():
    """A known truth of this game: nobody need be told to run fuller than they are when nobody closes early."""
    targets = tuple(k / 50 for k in range(15, 38))
    found = row(exactly(pair()), targets, delta=Delta(None, 0.5))
    busiest = found.busiest
    assert busiest.demand == 1.2 and found.answer.lowest[0][0] == pytest.approx(
        busiest.utilisation, abs=0.061
    )
    document = alignment_document([found], targets, DEMANDS, Delta(None, 0.5), 0.01, per_unit=False)
    said = " ".join(document["statements"] + document["notes"])
    assert "not a reason to run fuller" in said and "busiest unit" in said
    assert "optimal occupancy" not in said.lower() and "optimum occupancy" not in said.lower()


def test_targets_out_of_reach_are_no_answer():
    scenario = pair()
    found = row(exactly(scenario, (0.3,)), (0.9, 0.95))
    assert found.answer.lowest == () and "out of some unit's reach" in found.answer.reason
    assert {loss.verdict for loss in found.losses} == {"out of reach"}
    assert all(loss.is_near for loss in found.losses), "near, and still no answer"


def test_the_advice_turns_where_transfers_weigh_enough():
    weights = tuple(k / 10 for k in range(11))
    found = row(exactly(pair()), weights=weights)
    assert [one.weight for one in found.advice] == list(weights)
    assert found.advice[0].answer.lowest == found.answer.lowest, "at weight 0 refusals alone count"
    turned = turning_of(found.advice)
    at = weights.index(turned.weight)
    assert turned.answer.lowest != found.answer.lowest
    assert all(one.answer.lowest == found.answer.lowest for one in found.advice[:at])


# ---- by hand ----


PLACE = Place({}, {}, {}, {}, {}, 1.0)


def loss(target, demand, high, *, possible=1, beyond=()):
    return Loss(
        (target, target),
        demand,
        EXACT,
        possible,
        Estimate(high, high, high),
        10.0,
        tuple(beyond),
        PLACE,
        PLACE,
    )


def test_an_answer_holds_at_every_demand():
    losses = [loss(0.6, 0.9, 5), loss(0.6, 1.1, 11), loss(0.7, 0.9, 0), loss(0.7, 1.1, 10)]
    assert answer_of(losses, (3, 4)) == Answer(((0.7, 0.7),))
    assert answer_of([*losses, loss(0.5, 0.9, 0), loss(0.5, 1.1, 0)], (3, 4)).not_above == ((0.6, 0.6),)
    assert "at no target" in answer_of(losses[:2], (3, 4)).reason


def test_higher_targets_that_do_not_hold_are_told_of():
    losses = [loss(0.5, 1.0, 0), loss(0.6, 1.0, 11), loss(0.7, 1.0, 0), loss(0.8, 1.0, 0, beyond=("A",))]
    found = answer_of(losses, (3, 4))
    assert found.lowest == ((0.5, 0.5),) and found.not_above == ((0.6, 0.6), (0.8, 0.8))


def test_no_equilibrium_is_not_near():
    assert loss(0.6, 1.0, 0, possible=0).verdict == "no equilibrium"
    unknown = Loss((0.6, 0.6), 1.0, SIMULATED, 3, Estimate(0.0), 10.0, (), PLACE, PLACE)
    assert unknown.verdict == "not shown" and not unknown.holds


def test_delta_at_a_demand():
    """2.45 patients a day arrive, so 1 % of them are 8.94 a year."""
    assert Delta(share=0.01).at(pair()) == pytest.approx(0.01 * 365 * 2.45)
    assert Delta(share=0.01).at(pair().with_demand(2.0)) == pytest.approx(0.02 * 365 * 2.45)
    assert Delta(None, 25.0).at(pair()) == 25.0


def test_turning_without_a_turn():
    same = Answer(((0.6, 0.6),))
    assert turning_of([Advice(0.0, same), Advice(1.0, same)]) is None and turning_of([]) is None


def test_an_interruption_leaves_whole_sets_of_targets():
    assert whole([[1], [2], [3], [4], [5]], 2) == [[1], [2], [3], [4]] and whole([[1]], 2) == []


def test_what_is_exponential_already():
    assert is_exponential(pair()) and not is_exponential(realistic())


def test_reach_is_a_lower_limit():
    scenario = pair(run={"warm_up_days": 14, "measured_days": 112, "replications": 16, "seed": 3})
    [truth], [estimate] = exactly(scenario, (1.0,)), simulated(scenario, (1.0,))
    exact, limit = highest_utilisation(truth, 0.01), highest_utilisation(estimate, 0.01)
    assert (limit < exact).all() and (limit > exact - 0.1).all()


# ---- simulated statements: how often they err ----


def errors(experiments):
    """Of simulated alignments of one network: how many state something false, and how many have an estimated loss
    below the true one by more than a patient a year at some target and demand."""
    scenario = pair()
    truth = {(one.targets, one.demand): one for one in row(exactly(scenario)).losses}
    holds = {targets for targets, _ in truth if all(truth[targets, demand].holds for demand in DEMANDS)}
    false, covered, planted = 0, 0, 0
    for seed in range(experiments):
        found = row(simulated(scenario.with_run(seed=seed)))
        mine = {(one.targets, one.demand): one for one in found.losses}
        stated = {targets for targets, _ in mine if all(mine[targets, demand].holds for demand in DEMANDS)}
        false += not stated <= holds
        covered += all(one.lost.high >= truth[at].lost.mean - 1e-9 for at, one in mine.items())
        planted += any((one.lost.mean or 0) < truth[at].lost.mean - 1 for at, one in mine.items())
    return false, covered, planted


def test_a_simulated_statement_holds_as_often_as_it_says():
    """Twenty experiments at 95 %: more than 4 false statements, or fewer than 14 times all upper ends at once (95 % at
    either demand, so 90 % at both), have a chance below 0.003 each in a correct program. Planted: the
    estimated table's own loss, without possible equilibria and their upper ends, is too low in most experiments."""
    false, covered, planted = errors(20)
    assert false <= 4 and covered >= 14
    assert planted > 10, "the plug-in would pass this test too"


def test_a_simulated_answer_is_not_below_the_exact_one():
    scenario = pair(run={"warm_up_days": 14, "measured_days": 364, "replications": 24, "seed": 8})
    exact, found = row(exactly(scenario)).answer.lowest[0], row(simulated(scenario)).answer.lowest
    assert found and found[0] >= exact


def test_runs_of_another_demand_are_caught():
    """Planted: the runs are of 0.6 times the demand that they are said to be of; the statement is then false."""
    scenario = pair(run={"warm_up_days": 14, "measured_days": 364, "replications": 24, "seed": 8})
    wrong = simulated(scenario, tuple(0.6 * demand for demand in DEMANDS))
    [truth] = row(exactly(scenario)).answer.lowest
    found = row(wrong).answer.lowest
    assert not found or found[0] < truth


def test_one_more_target_costs_level():
    assert level_of(0.95, 10) == pytest.approx(0.005)
    [filled] = simulated(pair(), (1.2,))
    few, many = (
        losses_of(filled, (0.5, 0.5), (None,), Ruler(DELTA, level, 0.95, 1e-9))[0] for level in (0.05, 0.0005)
    )
    assert many.lost.high > few.lost.high and many.possible >= few.possible
