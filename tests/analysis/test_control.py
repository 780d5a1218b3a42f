"""Central control against exhaustive enumeration, trunk reservation, the chain and a plain network.

What is known. One unit, one rate, groups of different worth: the best rule is a threshold in the number of
free beds for each group, lower worth never admitted with fewer free beds than higher, and the worthiest
always (trunk reservation: Miller, "A queueing reward system with several customer classes", Management
Science 1969; Lippman, "Applying a new device in the optimization of exponential queuing systems", Operations
Research 1975; both from memory). The other checks are computed independently, in `control_cases`.
"""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.chain import ChainTooLarge, OutOfScope, solve
from analysis.control import best_control, solver, states
from analysis.control.display import rule_maps
from analysis.control.rule import worth
from analysis.control.solver import RELATIVE, gain_of, optimum
from analysis.control.states import NO_STATE, control_problem
from sim.errors import RunError
from sim.scenario import Scenario
from tests.analysis.control_cases import (
    CLOSE,
    LOSS,
    THROUGHPUT,
    TINY,
    WELFARES,
    Plain,
    as_plain,
    erlang_loss,
    network,
)

# ---- against every deterministic stationary rule, one by one ----


BEST = {}


def best_of_all(name, welfare):
    """The enumerated optimum, once for every test."""
    key = name, welfare
    if key not in BEST:
        BEST[key] = Plain(TINY[name], WELFARES[welfare]).best()
    return BEST[key]


EVERY = [(name, welfare) for name in TINY for welfare in WELFARES]


@pytest.mark.parametrize(("name", "welfare"), EVERY)
def test_no_rule_of_all_is_better_and_the_rule_given_is_as_good(name, welfare):
    scenario, value = TINY[name], WELFARES[welfare]
    result = best_control(scenario, scenario.policy(), value)
    sign = 1 if value.sense == "gain" else -1
    low, high = sorted((sign * result.welfare.low, sign * result.welfare.high))
    assert high - low <= RELATIVE * result.problem.arrivals_per_day
    assert low - 1e-12 <= best_of_all(name, welfare) <= high + 1e-12
    plain = Plain(scenario, value)
    assert plain.gain(as_plain(plain, result)) == pytest.approx(best_of_all(name, welfare), abs=CLOSE)


@pytest.mark.parametrize(("close", "tie"), [(0.05, 0.0), (1e-12, 0.3)])
@pytest.mark.parametrize("name", TINY)
def test_bounds_hold_however_early_the_iteration_stops(monkeypatch, name, close, tie):
    """Stopped early, or with a tie so wide that the rule is a poor one: still between the bounds."""
    for limit, value in {"RELATIVE": 9.0, "CLOSE": close, "TIE": tie}.items():
        monkeypatch.setattr(solver, limit, value)
    monkeypatch.setattr(solver, "DIRECT", 0)
    monkeypatch.setattr(solver, "SWEEPS", 1)
    result = best_control(TINY[name], TINY[name].policy(), LOSS)
    low, high = -result.welfare.high, -result.welfare.low
    plain = Plain(TINY[name], LOSS)
    own = plain.gain(as_plain(plain, result))
    assert low - 1e-12 <= own <= best_of_all(name, "loss") + 1e-12 <= high + 2e-12
    assert high - low > 1e-3 and (tie == 0 or own < best_of_all(name, "loss") - 1e-4)


def without(stream, *choices):
    """A stream that forgot some choices, by number, wherever another is left."""
    after = stream.after.copy()
    for choice in choices:
        others = np.delete(after, choice, axis=0)
        after[choice, (others >= 0).any(axis=0)] = NO_STATE
    return replace(stream, after=after)


PLANTED = {  # what is done to the problem, or to the worth
    "no transfers": ("equal stays", "throughput", lambda s: without(s, 1), None),
    "nobody refused with a free bed": ("unequal stays", "throughput", lambda s: without(s, -1), None),
    "own beds forgotten": ("equal stays", "loss", lambda s: without(s, 0), None),
    "transfers are a gain": ("equal stays", "loss", None, lambda w: np.array([w[0], -w[1], w[2]])),
    "the worse is better": ("slower elsewhere", "throughput", None, lambda w: -w),
}


@pytest.mark.parametrize("error", PLANTED)
def test_a_planted_error_is_seen_by_the_enumeration(error):
    name, welfare, of_stream, of_worth = PLANTED[error]
    scenario = TINY[name]
    problem = control_problem(scenario, scenario.policy())
    wrong = replace(problem, streams=tuple(map(of_stream or (lambda s: s), problem.streams)))
    rewards = [(of_worth or (lambda w: w))(worth(s, WELFARES[welfare])) for s in problem.streams]
    assert abs(optimum(wrong, rewards).gain.middle - best_of_all(name, welfare)) > 1e-3


# ---- trunk reservation ----


def reserved(beds, per_day, mean, rewards, limits):
    """Gain a day of one unit where group i is admitted while fewer than limits[i] beds are occupied."""
    weight = [1.0]
    for occupied in range(beds):
        arrivals = sum(rate for rate, limit in zip(per_day, limits, strict=True) if occupied < limit)
        weight.append(weight[-1] * arrivals * mean / (occupied + 1))
    share = np.array(weight) / sum(weight)
    rows = zip(per_day, rewards, limits, strict=True)
    return sum(rate * reward * share[:limit].sum() for rate, reward, limit in rows)


def one_unit(beds, per_day, mean):
    scenario = network((beds,), [("A", rate, mean) for rate in per_day])
    return control_problem(scenario, scenario.policy())


def check_trunk_reservation(beds, per_day, mean, rewards):
    """The best of all reservations is the best of all rules, and the rule found is one of them, nested."""
    problem = one_unit(beds, per_day, mean)
    found = optimum(problem, [np.array([reward, 0.0]) for reward in rewards])
    others = itertools.product(range(beds + 1), repeat=len(rewards) - 1)
    best = max(reserved(beds, per_day, mean, rewards, (beds, *limits)) for limits in others)
    assert found.gain.low - 1e-10 <= best <= found.gain.high + 1e-10
    admitted = found.rule[:, np.argsort(problem.patients.sum(axis=1))] == 0
    limits = admitted.sum(axis=1)
    assert (admitted == (np.arange(beds + 1) < limits[:, None])).all()
    assert list(limits) == sorted(limits, reverse=True) and limits[0] == beds
    assert reserved(beds, per_day, mean, rewards, limits) == pytest.approx(best, rel=1e-7)
    return list(limits)


def test_beds_are_kept_back_from_those_who_count_for_less():
    kept = [
        check_trunk_reservation(10, (2.0, 2.0), 3.0, (1.0, reward))[1] for reward in (1.0, 0.5, 0.2, 0.05)
    ]
    assert kept[0] == 10 and kept == sorted(kept, reverse=True) and kept[-1] < kept[1] < 10


@settings(max_examples=30, deadline=None, derandomize=True)
@given(
    beds=st.integers(1, 7),
    per_day=st.lists(st.floats(0.1, 4.0), min_size=2, max_size=3),
    worths=st.lists(st.floats(0.05, 1.0), min_size=2, max_size=2),
)
def test_trunk_reservation_is_best_for_any_worths(beds, per_day, worths):
    rewards = [1.0, *sorted(worths, reverse=True)][: len(per_day)]
    check_trunk_reservation(beds, per_day, 2.0, rewards)


def test_worths_exchanged_are_no_trunk_reservation():
    """Planted: where the groups' worths are exchanged, the check fails."""
    with pytest.raises(AssertionError):
        check_trunk_reservation(6, (2.0, 2.0), 3.0, (0.2, 1.0))


# ---- fixed thresholds are one of the rules ----


def rule_of_thresholds(problem, policy):
    """What a policy without hysteresis and soft closures decides, as numbers of choices."""
    occupied = {name: problem.occupied(name) for name in problem.beds}
    rule = np.empty((len(problem.streams), problem.states), dtype=np.int64)
    for row, stream in enumerate(problem.streams):
        for state in range(problem.states):
            load = {name: int(values[state]) for name, values in occupied.items()}
            rule[row, state] = stream.choices.index(_decided(stream, policy, load, problem.beds))
    return rule


def _decided(stream, policy, load, beds):
    home, order = stream.home, stream.choices[1:-1]
    if load[home] < policy.units[home].closure_threshold:
        return home
    for unit in order:
        if load[unit] < policy.units[unit].incoming:
            return unit
    if policy.when_all_closed != "turned_away" and load[home] < beds[home]:
        return home
    if policy.when_all_closed == "any_bed":
        return next((unit for unit in order if load[unit] < beds[unit]), None)
    return None


def three_units(resort):
    return network(
        (2, 3, 2),
        [("A", 0.8, 2.0), ("B", 1.1, 2.0), ("C", 0.5, 5.0), ("A", 0.2, 5.0)],
        orders=("CB", None, "A"), factors=(1.0, 1.3, 1.0), resort=resort,
        closure_threshold=(2, 2, 1), incoming_threshold=(1, 2, 1),
    )  # fmt: skip


@pytest.mark.parametrize("resort", ["turned_away", "home_bed", "any_bed"])
@pytest.mark.parametrize("welfare", WELFARES)
def test_fixed_thresholds_have_the_welfare_that_the_chain_gives_them(resort, welfare):
    scenario, value = three_units(resort), WELFARES[welfare]
    problem = control_problem(scenario, scenario.policy())
    rewards = [worth(stream, value) for stream in problem.streams]
    chain = solve(scenario, scenario.policy()).network
    expected = value.value(chain.throughput_per_day, chain.turned_away_per_day, chain.transfers_per_day)
    sign = 1 if value.sense == "gain" else -1
    gain = gain_of(problem, rule_of_thresholds(problem, scenario.policy()), rewards)
    assert sign * gain.middle == pytest.approx(float(expected), abs=1e-9)
    assert optimum(problem, rewards).gain.high >= gain.low
    other = scenario.policy().with_thresholds({"B": 3})  # planted: another threshold, another welfare
    assert abs(gain_of(problem, rule_of_thresholds(problem, other), rewards).middle - gain.middle) > 1e-6


@settings(max_examples=40, deadline=None, derandomize=True)
@given(name=st.sampled_from(sorted(TINY)), seed=st.integers(0, 10**6))
def test_any_rule_has_the_gain_of_the_plain_network_and_none_beats_the_bound(name, seed):
    scenario, rng = TINY[name], np.random.default_rng(seed)
    result = best_control(scenario, scenario.policy(), LOSS)
    problem = result.problem
    allowed = [np.argsort(rng.random(s.after.shape) - (s.after >= 0), axis=0)[0] for s in problem.streams]
    gain = gain_of(problem, np.array(allowed), [worth(stream, LOSS) for stream in problem.streams])
    plain = Plain(scenario, LOSS)
    assert gain.low - 1e-12 <= plain.gain(as_plain(plain, replace(result, rule=np.array(allowed))))
    assert plain.gain(as_plain(plain, replace(result, rule=np.array(allowed)))) <= gain.high + 1e-12
    assert gain.low <= -result.welfare.low


def test_what_comes_with_the_rule_adds_up():
    """Patients conserved, and Little's law: occupied beds are admissions times the one mean stay."""
    scenario = network((3, 4), [("A", 1.4, 2.0), ("B", 1.9, 2.0)])
    result = best_control(scenario, scenario.policy(), LOSS)
    outcome = result.outcome
    away, moved = sum(outcome.turned_away_per_day.values()), sum(outcome.diverted_out_per_day.values())
    assert result.welfare.middle == pytest.approx(away + 0.4 * moved, abs=CLOSE)
    occupied = 3 * outcome.utilisation["A"] + 4 * outcome.utilisation["B"]
    assert outcome.throughput_per_day == pytest.approx(occupied / 2.0, abs=CLOSE)
    assert outcome.throughput_per_day == pytest.approx(3.3 - away, abs=CLOSE)
    for home, refused in outcome.refused_with_free_bed_per_day.items():
        assert refused <= outcome.turned_away_per_day[home] + CLOSE


# ---- bounds, limits, refusals ----


def test_sweeps_and_elimination_find_the_same(monkeypatch):
    problem = control_problem(three_units("home_bed"), three_units("home_bed").policy())
    rewards = [worth(stream, LOSS) for stream in problem.streams]
    by_elimination = optimum(problem, rewards)
    monkeypatch.setattr(solver, "DIRECT", 0)
    by_sweeps = optimum(problem, rewards)
    assert by_sweeps.gain.middle == pytest.approx(by_elimination.gain.middle, abs=1e-9)
    assert (by_sweeps.rule == by_elimination.rule).all()


def test_bounds_that_do_not_meet_are_refused(monkeypatch):
    monkeypatch.setattr(solver, "MOST_ROUNDS", 1)
    scenario = TINY["equal stays"]
    with pytest.raises(RunError, match="a day apart"):
        best_control(scenario, scenario.policy(), THROUGHPUT)


def test_very_different_stays_still_meet():
    """Stays of 0.2 and 60 days, where steps of a uniformised chain would take very long."""
    scenario = network((4, 4), [("A", 15.0, 0.2), ("B", 0.1, 60.0)])
    result = best_control(scenario, scenario.policy(), LOSS)
    assert 0 < result.welfare.high - result.welfare.low <= RELATIVE * 15.1


def test_what_the_chain_refuses_is_refused_here():
    scenario = TINY["equal stays"]
    with pytest.raises(OutOfScope, match="review"):
        control_problem(scenario, scenario.policy().with_rule("review_hours", {"A": 8.0}))


def test_stays_in_phases_are_refused_whatever_the_chain_models(monkeypatch):
    monkeypatch.setattr(states, "refusals", lambda *_: ())
    stay = {"family": "erlang", "mean_days": 2.0, "stages": 2}
    tree = {
        "schema": 1,
        "units": [{"name": "A", "beds": 2}],
        "patients": [{"group": "g", "home": "A", "per_day": 1.0, "stay": stay}],
    }
    scenario = Scenario.model_validate(tree)
    with pytest.raises(OutOfScope, match="exponential"):
        control_problem(scenario, scenario.policy())
    control_problem(scenario.exponential(), scenario.policy())


def test_a_unit_that_nobody_reaches_stays_empty():
    scenario = network((2, 3), [("A", 1.0, 2.0)], orders=((), None))
    result = best_control(scenario, scenario.policy(), THROUGHPUT)
    assert result.outcome.utilisation["B"] == 0 and result.problem.states == 3 and not rule_maps(result)
    assert result.welfare.middle == pytest.approx(1 - erlang_loss(2.0, 2), abs=CLOSE)


def test_a_network_too_large_is_refused_before_it_is_built():
    scenario = network((60, 60, 60), [("A", 20.0, 2.0), ("B", 20.0, 2.0)])
    with pytest.raises(ChainTooLarge, match="226,981 states"):
        control_problem(scenario, scenario.policy())
