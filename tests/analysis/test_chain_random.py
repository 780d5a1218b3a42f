"""The exact chain against a second construction, written plainly and apart, on random small networks.

The second construction follows the rules patient by patient: it counts patients by group (not by rate), walks
from state to state in a dictionary, and solves the dense balance equations by elimination with pivoting.
"""

import dataclasses
import json

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from analysis.chain import chain_size, network_states, routing, solve, unit_states
from sim.errors import RunError
from sim.scenario import Scenario

MOST_STATES = 700
RESORTS = ["turned_away", "home_bed", "any_bed"]


def as_scenario(plain):
    stays = [{"family": "exponential", "mean_days": mean} for _, _, mean in plain["patients"]]
    groups = [
        {"group": f"group {place}", "home": home, "per_day": per_day, "stay": stays[place]}
        for place, (home, per_day, _) in enumerate(plain["patients"])
    ]
    diversion = {"when_all_closed": plain["resort"]}
    return Scenario.model_validate(
        {"schema": 1, "units": plain["units"], "patients": groups, "diversion": diversion}
    )


def solved(plain):
    scenario = as_scenario(plain)
    return solve(scenario, scenario.policy())


class Plain:
    """A network by its rules alone; a state holds each unit's patients by group and its two gates."""

    def __init__(self, plain):
        self.units = {unit["name"]: unit for unit in plain["units"]}
        self.names = list(self.units)
        self.patients, self.resort = plain["patients"], plain["resort"]

    def own_threshold(self, name):
        return self.units[name].get("closure_threshold", self.units[name]["beds"])

    def incoming_threshold(self, name):
        own = self.own_threshold(name)
        return min(own, self.units[name].get("incoming_threshold", own))

    def asked(self, home):
        place = self.names.index(home)
        return self.units[home].get("referral_order", self.names[place + 1 :] + self.names[:place])

    def gate(self, name, threshold, load, was_open):
        if threshold == 0 or load >= threshold:
            return False
        if load <= max(0, threshold - self.units[name].get("reopening_gap", 1)):
            return True
        return was_open

    def start(self):
        nobody = (0,) * len(self.patients)
        return tuple((nobody, self.own_threshold(n) > 0, self.incoming_threshold(n) > 0) for n in self.names)

    def changed(self, state, name, group, change):
        place = self.names.index(name)
        patients, own, incoming = state[place]
        patients = tuple(count + change * (kind == group) for kind, count in enumerate(patients))
        own = self.gate(name, self.own_threshold(name), sum(patients), own)
        incoming = self.gate(name, self.incoming_threshold(name), sum(patients), incoming)
        return (*state[:place], (patients, own, incoming), *state[place + 1 :])

    def free(self, state, name):
        return sum(state[self.names.index(name)][0]) < self.units[name]["beds"]

    def own_open(self, state, name):
        return state[self.names.index(name)][1]

    def incoming_open(self, state, name):
        return state[self.names.index(name)][2]

    def chances(self, state, home):
        """Where a patient of `home` goes: (unit or None, chance), in the order of the rules."""
        soft = self.units[home].get("admit_while_closed", 0.0)
        if self.own_open(state, home) and self.free(state, home):
            return [(home, 1.0)]
        if not self.free(state, home):
            soft = 0.0
        return [(home, soft), (self.diverted(state, home), 1.0 - soft)]

    def diverted(self, state, home):
        for other in self.asked(home):
            if self.incoming_open(state, other) and self.free(state, other):
                return other
        if self.resort != "turned_away" and self.free(state, home):
            return home
        if self.resort == "any_bed":
            for other in self.asked(home):
                if self.free(state, other):
                    return other
        return None

    def events(self, state):
        """(next state, rate, home, unit) of every admission, and of every discharge with home None."""
        for group, (home, per_day, mean) in enumerate(self.patients):
            for unit, chance in self.chances(state, home):
                if unit is not None and chance > 0:
                    yield self.changed(state, unit, group, +1), per_day * chance, home, unit
            for place, unit in enumerate(self.names):
                here = state[place][0][group]
                if here:
                    rate = here / (mean * self.units[unit].get("stay_factor", 1.0))
                    yield self.changed(state, unit, group, -1), rate, None, unit


def walked(network):
    """Every state that can be reached, with its events; None where there are too many."""
    states, ahead = {network.start(): 0}, [network.start()]
    events = []
    for state in ahead:
        for target, rate, home, unit in network.events(state):
            if target not in states:
                if len(states) >= MOST_STATES:
                    return None
                states[target] = len(states)
                ahead.append(target)
            events.append((states[state], states[target], rate, home, unit))
    return list(states), events


def dense_distribution(states, events):
    matrix = np.zeros((len(states), len(states)))
    for origin, target, rate, _, _ in events:
        matrix[target, origin] += rate
        matrix[origin, origin] -= rate
    matrix[0] = 1.0
    right = np.zeros(len(states))
    right[0] = 1.0
    return np.linalg.solve(matrix, right)


def plain_measures(network, states, events, probability):
    """The tree of measures that the program's own result should equal."""
    admitted = {(home, unit): 0.0 for home in network.names for unit in network.names}
    for origin, _, rate, home, unit in events:
        if home is not None:
            admitted[home, unit] += probability[origin] * rate
    units = {}
    for place, name in enumerate(network.names):
        beds = network.units[name]["beds"]
        load = np.array([sum(state[place][0]) for state in states])
        own = np.array([state[place][1] for state in states])
        incoming = np.array([state[place][2] for state in states])
        arrived = sum(per_day for home, per_day, _ in network.patients if home == name)
        out = sum(admitted[name, other] for other in network.names if other != name)
        lost = arrived - out - admitted[name, name]
        units[name] = {
            "utilisation": probability @ load / beds,
            "mean_occupied": probability @ load,
            "full_fraction": probability @ (load == beds),
            "closed_fraction": probability @ ~own,
            "incoming_closed_fraction": probability @ ~incoming,
            "closed_with_free_bed_fraction": probability @ (~own & (load < beds)),
            "occupancy": [probability @ (load == level) for level in range(beds + 1)],
            "admissions_per_day": sum(admitted[other, name] for other in network.names),
            "diverted_out_per_day": out,
            "diverted_in_per_day": sum(admitted[other, name] for other in network.names if other != name),
            "turned_away_per_day": lost,
            "arrivals_per_day": arrived,
            "moved_share": out / arrived if arrived else None,
            "turned_away_share": lost / arrived if arrived else None,
        }
    return units


def largest_gap(result, expected):
    """The largest difference of any measure of any unit; both must tell the same measures."""
    found = result.to_dict()["units"]
    assert found.keys() == expected.keys()
    gap = 0.0
    for name, measures in expected.items():
        assert found[name].keys() == measures.keys()
        for key, value in measures.items():
            assert (found[name][key] is None) == (value is None)
            if value is not None:
                gap = max(gap, np.abs(np.subtract(found[name][key], value)).max())
    return gap


def plainly(plain):
    """The measures by the second construction; None where it would have too many states."""
    network = Plain(plain)
    walk = walked(network)
    if walk is None:
        return None
    return plain_measures(network, *walk, dense_distribution(*walk))


@st.composite
def units_of(draw, names, name):
    beds = draw(st.integers(1, 4 if len(names) < 3 else 3))
    unit = {"name": name, "beds": beds}
    if draw(st.booleans()):
        unit["closure_threshold"] = draw(st.integers(0, beds))
    if draw(st.booleans()):
        unit["incoming_threshold"] = draw(st.integers(0, unit.get("closure_threshold", beds)))
    unit["reopening_gap"] = draw(st.integers(1, 4))
    unit["admit_while_closed"] = draw(st.sampled_from([0.0, 0.0, 0.35, 1.0]))
    unit["stay_factor"] = draw(st.sampled_from([1.0, 1.0, 0.6, 1.7]))
    if draw(st.booleans()):
        others = draw(st.permutations([other for other in names if other != name]))
        unit["referral_order"] = others[: draw(st.integers(0, len(others)))]
    return unit


@st.composite
def networks(draw):
    names = ["Ashgill", "Norbeck", "Cotterdale"][: draw(st.integers(1, 3))]
    units = [draw(units_of(names, name)) for name in names]
    rate, mean = st.sampled_from([0.3, 1.1, 2.7, 6.0]), st.sampled_from([0.2, 1.0, 1.0, 3.1])
    patients = draw(st.lists(st.tuples(st.sampled_from(names), rate, mean), min_size=1, max_size=3))
    return {"units": units, "patients": patients, "resort": draw(st.sampled_from(RESORTS))}


@given(networks())
@settings(max_examples=120, derandomize=True, deadline=None)
def test_random_networks_agree_with_the_plain_construction(plain):
    expected = plainly(plain)
    assume(expected is not None)
    assert largest_gap(solved(plain), expected) < 1e-10


@given(networks())
@settings(max_examples=60, derandomize=True, deadline=None)
def test_nobody_is_lost_and_little_holds(plain):
    scenario = as_scenario(plain)
    result = solve(scenario, scenario.policy())
    units, network = result.units.values(), result.network
    for unit in units:
        treated_of_home = unit.arrivals_per_day - unit.turned_away_per_day - unit.diverted_out_per_day
        assert treated_of_home == pytest.approx(unit.admissions_per_day - unit.diverted_in_per_day, abs=1e-12)
        assert sum(unit.occupancy) == pytest.approx(1.0, rel=1e-12)
    treated = sum(unit.admissions_per_day for unit in units)
    moved = sum(unit.diverted_in_per_day for unit in units)
    assert network.throughput_per_day == pytest.approx(treated, rel=1e-12)
    assert network.transfers_per_day == pytest.approx(moved, rel=1e-12)
    assert network.arrivals_per_day == pytest.approx(treated + network.turned_away_per_day, rel=1e-12)
    assert result.states <= chain_size(scenario, scenario.policy())
    json.dumps(result.to_dict(), allow_nan=False)


@given(networks(), st.sampled_from([0.4, 1.0, 2.5]))
@settings(max_examples=60, derandomize=True, deadline=None)
def test_little_where_all_stays_share_a_mean(plain, mean):
    plain["patients"] = [(home, per_day, mean) for home, per_day, _ in plain["patients"]]
    for place, unit in enumerate(solved(plain).units.values()):
        stay = mean * plain["units"][place]["stay_factor"]
        assert unit.mean_occupied == pytest.approx(unit.admissions_per_day * stay, rel=1e-12)


# Every rule matters here: gates of both kinds, a gap, soft closure, three units and two mean stays.
RULES = {
    "units": [
        {"name": "Ashgill", "beds": 3, "closure_threshold": 2, "admit_while_closed": 0.3},
        {"name": "Norbeck", "beds": 2, "incoming_threshold": 1, "reopening_gap": 2},
        {"name": "Cotterdale", "beds": 2, "closure_threshold": 1},
    ],
    "patients": [("Ashgill", 2.1, 1.0), ("Norbeck", 1.4, 1.3)],
    "resort": "home_bed",
}


@pytest.fixture
def fresh_unit_states():
    """Unit states are remembered; a planted error must neither meet old ones nor leave its own behind."""
    unit_states.unit_states.cache_clear()
    yield
    unit_states.unit_states.cache_clear()


@pytest.mark.usefixtures("fresh_unit_states")
class TestPlantedErrors:
    """A chain with one wrong rule, still a chain that passes its own certificate, must be found out."""

    def gap(self, plain=RULES):
        return largest_gap(solved(plain), plainly(plain))

    def test_none(self):
        assert self.gap() < 1e-12

    def test_gate_off_by_one(self, monkeypatch):
        right = unit_states.UnitSpace._gate
        early = lambda self, load, threshold, was_open: right(self, load, threshold - 1, was_open)  # noqa: E731
        monkeypatch.setattr(unit_states.UnitSpace, "_gate", early)
        assert self.gap() > 1e-3

    def test_gate_that_lets_too_many_in_leaves_the_states(self, monkeypatch):
        right = unit_states.UnitSpace._gate
        late = lambda self, load, threshold, was_open: right(self, load, threshold + 1, was_open)  # noqa: E731
        monkeypatch.setattr(unit_states.UnitSpace, "_gate", late)
        with pytest.raises(RunError, match="placed a patient in Cotterdale where it has no state for one"):
            solved(RULES)

    def test_gap_ignored(self, monkeypatch):
        monkeypatch.setattr(unit_states.UnitSpace, "_gate", lambda self, load, threshold, _: load < threshold)
        assert self.gap() > 1e-3

    def wrong_home(self, monkeypatch, change):
        def split(home, rules, resort, doors):
            return routing.split_arrivals(home, *change(rules, resort), doors)

        monkeypatch.setattr(network_states, "split_arrivals", split)

    def test_wrong_referral_order(self, monkeypatch):
        def turned(rules, resort):
            return dataclasses.replace(rules, referral_order=rules.referral_order[::-1]), resort

        self.wrong_home(monkeypatch, turned)
        assert self.gap() > 1e-3

    def test_soft_closure_ignored(self, monkeypatch):
        def hard(rules, resort):
            return dataclasses.replace(rules, admit_while_closed=0.0), resort

        self.wrong_home(monkeypatch, hard)
        assert self.gap() > 1e-3

    def test_wrong_last_resort(self, monkeypatch):
        self.wrong_home(monkeypatch, lambda rules, resort: (rules, "turned_away"))
        assert self.gap() > 1e-3

    def test_incoming_gate_taken_for_the_own_one(self, monkeypatch):
        right = network_states.Doors
        wrong = lambda free, own, incoming: right(free, own, own)  # noqa: E731
        monkeypatch.setattr(network_states, "Doors", wrong)
        assert self.gap() > 1e-3

    def test_stays_of_two_means_taken_for_one(self):
        blurred = {**RULES, "patients": [(home, per_day, 1.1) for home, per_day, _ in RULES["patients"]]}
        assert largest_gap(solved(blurred), plainly(RULES)) > 1e-3
