"""Central control against exhaustive enumeration, against what is known of it, and against the exact game.

What is known. One unit, one rate, groups of different worth: the best rule is a threshold in the number of
free beds for each group, lower worth never admitted with fewer free beds than higher, and the worthiest
always (trunk reservation: Miller, "A queueing reward system with several customer classes", Management
Science 1969; Lippman, "Applying a new device in the optimization of exponential queuing systems", Operations
Research 1975; both from memory). Patients treated, equal stays, every bed within everybody's reach: the units
pool, and Erlang's loss formula (1917) gives the best throughput. No fixed thresholds beat control, and no
equilibrium beats the best fixed thresholds.
"""

from __future__ import annotations

import itertools
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.chain import ChainTooLarge, OutOfScope, solve
from analysis.control import Bounds, best_control, compared, solver, states
from analysis.control.display import rule_frame, rule_maps
from analysis.control.rule import worth
from analysis.control.solver import RELATIVE, gain_of, optimum
from analysis.control.states import NO_STATE, control_problem
from analysis.exact_tables import solve_cells
from analysis.games import analyse
from analysis.goals import Welfare, goal_of, welfare_of
from analysis.payoffs import exact_table, profiles_of
from sim.errors import RunError
from sim.scenario import Scenario
from tests.analysis.builders import memoryless

THROUGHPUT, LOSS = Welfare("throughput"), Welfare("loss", 0.4)
CLOSE = 1e-8  # of the numbers below, which are all near 1


def network(beds, patients, *, orders=None, factors=None, game=None, resort="home_bed", **keys):
    """Units A, B, ... ; patients: (home, arrivals a day, mean stay in days) of each group."""
    names = "ABCD"[: len(beds)]
    units = [{"name": name, "beds": b} for name, b in zip(names, beds, strict=True)]
    for place, unit in enumerate(units):
        unit |= {} if orders is None or orders[place] is None else {"referral_order": list(orders[place])}
        unit |= {} if factors is None else {"stay_factor": factors[place]}
        unit |= {key: values[place] for key, values in keys.items()}
    groups = [
        {"group": f"g{place}", "home": home, "per_day": rate, "stay": _stay(mean)}
        for place, (home, rate, mean) in enumerate(patients)
    ]
    tables = {"diversion": {"when_all_closed": resort}} | ({} if game is None else {"game": game})
    return Scenario.model_validate({"schema": 1, "units": units, "patients": groups, **tables})


def _stay(mean):
    return {"family": "exponential", "mean_days": mean}


# ---- against every deterministic stationary rule, one by one ----


class Plain:
    """A tiny network in dictionaries: a state holds each unit's patients by mean stay."""

    def __init__(self, scenario, welfare):
        self.scenario, self.welfare = scenario, welfare
        self.units = {unit.name: unit for unit in scenario.units}
        self.means = sorted({group.mean_stay_days for group in scenario.patients})
        per_unit = [
            [
                c
                for c in itertools.product(range(unit.beds + 1), repeat=len(self.means))
                if sum(c) <= unit.beds
            ]
            for unit in scenario.units
        ]
        self.states = list(itertools.product(*per_unit))
        self.decisions = {
            (state, group.group): self.options(state, group)
            for state in self.states
            for group in scenario.patients
        }

    def options(self, state, group):
        free = {
            n for n, patients in zip(self.units, state, strict=True) if sum(patients) < self.units[n].beds
        }
        reach = [group.home, *self.scenario.policy().units[group.home].referral_order]
        return [unit for unit in reach if unit in free] + [None]

    def changed(self, state, unit, mean, change):
        counts = [list(patients) for patients in state]
        counts[list(self.units).index(unit)][self.means.index(mean)] += change
        return tuple(map(tuple, counts))

    def gain(self, rule):
        """Long-run welfare a day of a rule {(state, group): unit or None}, more being better."""
        place = {state: index for index, state in enumerate(self.states)}
        flow, reward = np.zeros((len(place), len(place))), np.zeros(len(place))
        for state, here in place.items():
            for group in self.scenario.patients:
                unit = rule[state, group.group]
                reward[here] += group.per_day * self.value(group.home, unit)
                if unit is not None:
                    flow[here, place[self.changed(state, unit, group.mean_stay_days, +1)]] += group.per_day
            for name, patients in zip(self.units, state, strict=True):
                for mean, number in zip(self.means, patients, strict=True):
                    if number:
                        rate = number / (mean * self.units[name].stay_factor)
                        flow[here, place[self.changed(state, name, mean, -1)]] += rate
        balance = flow - np.diag(flow.sum(axis=1))
        balance[:, 0] = 1.0
        return np.linalg.solve(balance.T, np.eye(len(place))[0]) @ reward

    def value(self, home, unit):
        if self.welfare.kind == "throughput":
            return float(unit is not None)
        return -1.0 if unit is None else -self.welfare.transfer_weight * (unit != home)

    def best(self):
        """The largest gain of all deterministic stationary rules; decisions with one option are not chosen."""
        rules = itertools.product(*self.decisions.values())
        return max(self.gain(dict(zip(self.decisions, rule, strict=True))) for rule in rules)


TINY = {
    "equal stays": network((1, 2), [("A", 0.9, 2.0), ("B", 1.4, 2.0)]),
    "unequal stays": network((1, 1), [("A", 0.9, 1.0), ("B", 0.5, 6.0)]),
    "slower elsewhere": network((1, 1), [("A", 1.2, 1.0), ("B", 0.7, 1.0)], factors=(1.0, 2.5)),
    "one road only": network((1, 2), [("A", 0.9, 2.0), ("B", 1.8, 2.0)], orders=(None, ())),
}
WELFARES = {"throughput": THROUGHPUT, "loss": LOSS}
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


def as_plain(plain, result):
    """The rule as the file gives it: a row a state, an action a group."""
    frame = rule_frame(result)
    assert len(frame) == result.problem.states
    rule = {}
    for _, row in frame.iterrows():
        counts = [[0] * len(plain.means) for _ in plain.units]
        for column in (name for name in row.index if name.startswith("occupied ")):
            unit, _, stay = column.removeprefix("occupied ").partition(", mean stay ")
            mean = float(stay.removesuffix(" days") or plain.means[0])
            counts[list(plain.units).index(unit)][plain.means.index(mean)] = row[column]
        for group in plain.scenario.patients:
            action = row[f"action {group.group}"]
            rule[tuple(map(tuple, counts)), group.group] = None if action == "turned away" else action
    return rule


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


# ---- beside the exact game ----


def exact_game(scenario):
    profiles = profiles_of(scenario)
    cells = dict(solve_cells(scenario, profiles.policies(scenario.policy())))
    units = [cells[cell] for cell in range(profiles.cells)]
    return analyse(exact_table(profiles, goal_of(scenario), welfare_of(scenario), units))


def beside(scenario):
    result = best_control(scenario, scenario.policy(), welfare_of(scenario))
    return compared(result, exact_game(scenario))


@settings(max_examples=20, deadline=None, derandomize=True)
@given(
    beds=st.tuples(st.integers(1, 3), st.integers(1, 4)),
    rates=st.tuples(st.floats(0.2, 2.5), st.floats(0.2, 2.5)),
    means=st.sampled_from([(2.0, 2.0), (1.0, 4.0)]),
    targets=st.tuples(st.floats(0.2, 0.9), st.floats(0.2, 0.9)),
    resort=st.sampled_from(["turned_away", "home_bed", "any_bed"]),
    weight=st.sampled_from([None, 0.0, 0.3, 1.2]),
)
def test_control_beats_fixed_thresholds_and_these_beat_equilibria(
    beds, rates, means, targets, resort, weight
):
    welfare = {"kind": "throughput"} if weight is None else {"kind": "loss", "transfer_weight": weight}
    patients = [(home, rate, mean) for home, rate, mean in zip("AB", rates, means, strict=True)]
    found = beside(
        network(beds, patients, game={"welfare": welfare}, resort=resort, target_utilisation=targets)
    )
    sign = 1 if weight is None else -1
    ends = [sign * found.control.low, sign * found.control.high]
    assert max(ends) >= sign * found.best_static - 1e-12
    assert 0 <= found.static_thresholds.low <= found.static_thresholds.high
    if found.worst_equilibrium is None:
        assert found.selfishness is None
        return
    assert sign * found.best_static >= sign * found.best_equilibrium >= sign * found.worst_equilibrium
    steps = found.static_thresholds.middle + found.selfishness
    assert steps == pytest.approx(sum(ends) / 2 - sign * found.worst_equilibrium, abs=CLOSE)


def test_an_answer_below_fixed_thresholds_is_never_handed_out():
    """Planted: bounds moved down by a thousandth of a patient."""
    scenario = memoryless(
        {"name": "A", "beds": 2, "per_day": 0.8, "target_utilisation": 0.6},
        {"name": "B", "beds": 2, "per_day": 0.9, "target_utilisation": 0.6},
        diversion={"when_all_closed": "any_bed"},
    )
    result, game = best_control(scenario, scenario.policy(), THROUGHPUT), exact_game(scenario)
    compared(result, game)
    lower = replace(result, welfare=Bounds(result.welfare.low - 1e-3, result.welfare.high - 1e-3))
    with pytest.raises(RunError, match="fixed thresholds beat"):
        compared(lower, game)


def erlang_loss(offered, beds):
    """Share of arrivals turned away by Erlang's formula, by its recursion over the beds."""
    share = 1.0
    for bed in range(1, beds + 1):
        share = offered * share / (bed + offered * share)
    return share


def test_units_that_pool_leave_control_nothing_to_gain():
    scenario = network(
        (3, 4), [("A", 1.2, 2.0), ("B", 1.6, 2.0)], resort="any_bed", target_utilisation=(0.5, 0.5)
    )
    found = beside(scenario)
    pooled = 2.8 * (1 - erlang_loss(2.8 * 2.0, 7))
    assert found.control.low - 1e-12 <= pooled <= found.control.high + 1e-12
    assert found.static_thresholds.high <= 1e-8 and found.selfishness == pytest.approx(0, abs=1e-8)
    assert [one.rows for one in rule_maps(found.result)] == [
        ("HHHHH",) * 3 + ("BBBB-",),
        ("HHHHA",) * 3 + ("HHHH-",),
    ]


def test_control_gains_where_transfers_cost_and_where_stays_differ():
    """Outside pooling there is something to gain: neither step of the split is nought by construction."""
    costly = network(
        (3, 4), [("A", 1.6, 2.0), ("B", 2.1, 2.0)], target_utilisation=(0.5, 0.5),
        game={"welfare": {"kind": "loss", "transfer_weight": 0.4}},
    )  # fmt: skip
    slow = network((3, 3), [("A", 1.8, 1.0), ("B", 0.4, 8.0)], target_utilisation=(0.5, 0.5))
    for scenario in (costly, slow):
        assert beside(scenario).static_thresholds.low > 1e-3
    refused = best_control(slow, slow.policy(), THROUGHPUT).outcome.refused_with_free_bed_per_day
    assert refused["A"] == pytest.approx(0, abs=CLOSE) and refused["B"] > 0.01


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


# ---- the map ----


@pytest.mark.parametrize(
    ("names", "letters"), [(("Ewe", "Tern"), "TE"), (("Tern", "Teal"), "21"), (("Hay", "Ewe"), "E1")]
)
def test_letters_of_the_map_mean_one_thing_each(names, letters):
    units = [{"name": name, "beds": 2, "per_day": 1.0} for name in names]
    scenario = memoryless(*units)
    maps = rule_maps(best_control(scenario, scenario.policy(), THROUGHPUT))
    for one, letter, other in zip(maps, letters, reversed(names), strict=True):
        assert one.letters == {"H": one.home, letter: other, "-": "turned away"}
    assert [row[0] for row in maps[0].rows] == ["H", "H", letters[0]]


def test_groups_alike_share_a_map_and_others_have_none():
    same = network((1, 1), [("A", 0.5, 2.0), ("B", 0.5, 2.0), ("A", 0.1, 2.0)])
    maps = rule_maps(best_control(same, same.policy(), THROUGHPUT))
    assert [one.groups for one in maps] == [("g0", "g2"), ("g1",)]
    for scenario in (TINY["unequal stays"], three_units("home_bed")):
        assert rule_maps(best_control(scenario, scenario.policy(), THROUGHPUT)) == []


# ---- the command ----


def test_the_document_splits_the_loss(call, two):
    status, document = call("game", two, "--exact", "--control", "--target", "0.3")
    control = document["control"]
    assert status == 0 and control["states"] == 12
    assert control["best_static_welfare"] == pytest.approx(document["optimum"]["welfare"])
    assert control["static_thresholds"]["per_day"]["low"] >= 0
    selfish = control["selfishness"]
    assert selfish["per_year"] == pytest.approx(document["lost_per_year"]) and selfish["per_day"] > 0
    assert selfish["per_year"] == pytest.approx(365 * selfish["per_day"])
    assert [len(one["rows"]) for one in control["maps"]] == [3, 3]
    assert "control" not in call("game", two, "--exact")[1]


def test_the_rule_is_shown_and_written(show, three, two, tmp_path):
    status, text, _ = show("game", two, "--exact", "--control", "--out", tmp_path / "out")
    assert status == 0 and "Best rule for A emergencies (home A): H A, B B=b, - turned away" in text
    assert "2 B B B -" in text
    written = (tmp_path / "out" / "control.csv").read_text(encoding="utf-8").splitlines()
    assert written[0] == "occupied A,occupied B=b,action A emergencies,action B emergencies"
    assert len(written) == 13 and written[-1] == "2,3,turned away,turned away"
    assert "--out writes it to control.csv" in show("game", three, "--exact", "--control")[1]


def test_an_earlier_rule_is_kept_apart(show, two, tmp_path):
    show("game", two, "--exact", "--control", "--out", tmp_path / "out")
    show("game", two, "--exact", "--out", tmp_path / "out")
    assert not (tmp_path / "out" / "control.csv").exists()
    assert (tmp_path / "out" / "earlier" / "1" / "control.csv").exists()


def test_control_needs_the_exact_game(show, two):
    status, text, said = show("game", two, "--control")
    assert status == 2 and not text and "--control: needs --exact" in said


def test_no_equilibrium_leaves_selfishness_open():
    """An empty list of equilibria gives a reason, never a number."""
    scenario = TINY["equal stays"]
    result = best_control(scenario, scenario.policy(), THROUGHPUT)
    table = SimpleNamespace(welfare=np.array([[1.0, 1.1]]), welfare_goal=THROUGHPUT)
    game = SimpleNamespace(table=table, cost=SimpleNamespace(best=None, worst=None))
    tree = compared(result, game).to_dict()
    assert tree["selfishness"] is None and tree["reason"] == "selfishness: no equilibrium is listed"
