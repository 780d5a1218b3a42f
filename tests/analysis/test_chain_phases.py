"""Stays of exponential phases: exact counts of patients by phase, against constructions made apart from them.

The plain construction of `test_chain_random` is carried on to phases here: it counts patients by group and
phase, takes each family from its definition as a start vector and a matrix of rates, merges nothing, and
shares no code with the program.
"""

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from analysis.chain import chain_size, layout, phases, solve
from sim.scenario import Scenario
from tests.analysis.test_chain_random import (
    RESORTS,
    Plain,
    dense_distribution,
    largest_gap,
    plain_measures,
    walked,
)


def exponential(mean):
    return {"family": "exponential", "mean_days": mean}


def erlang(mean, stages):
    return {"family": "erlang", "mean_days": mean, "stages": stages}


def hyperexponential(mean, cv):
    return {"family": "hyperexponential", "mean_days": mean, "cv": cv}


def coxian(rates, goes_on):
    return {"family": "coxian", "rates_per_day": rates, "goes_on": goes_on}


def mixture(*parts):
    """parts: (weight, stay)."""
    return {"family": "mixture", "parts": [{**stay, "weight": weight} for weight, stay in parts]}


def network(units, patients, resort="turned_away", **tables):
    """A scenario of units (tables of the file) and patients (home, arrivals a day, stay)."""
    groups = [
        {"group": f"group {place}", "home": home, "per_day": per_day, "stay": stay}
        for place, (home, per_day, stay) in enumerate(patients)
    ]
    described = {"units": units, "patients": groups, "diversion": {"when_all_closed": resort}}
    return Scenario.model_validate({"schema": 1, **described, **tables})


def solved(*description, **more):
    scenario = network(*description, **more)
    return solve(scenario, scenario.policy())


# ---- the same network, phase by phase ----


def phases_by_definition(stay):
    """(start vector, matrix of rates a day between phases, rates of discharge) of a stay."""
    family = stay["family"]
    if family == "mixture":
        total = sum(part["weight"] for part in stay["parts"])
        parts = [(part["weight"] / total, phases_by_definition(part)) for part in stay["parts"]]
        start = np.concatenate([weight * start for weight, (start, _, _) in parts])
        between = np.zeros((len(start), len(start)))
        first = 0
        for _, (_, rates, _) in parts:
            between[first : first + len(rates), first : first + len(rates)] = rates
            first += len(rates)
        return start, between, np.concatenate([out for _, (_, _, out) in parts])
    if family == "hyperexponential":  # balanced means: p / rate is the same for both phases
        square = stay["cv"] ** 2
        p = (1 + math.sqrt((square - 1) / (square + 1))) / 2
        start = np.array([p, 1 - p])
        return start, np.zeros((2, 2)), 2 * start / stay["mean_days"]
    if family == "coxian":
        rates, goes_on = np.array(stay["rates_per_day"]), np.array([*stay["goes_on"], 0.0])
    else:
        stages = stay.get("stages", 1)
        rates = np.full(stages, stages / stay["mean_days"])
        goes_on = np.array([1.0] * (stages - 1) + [0.0])
    between = np.diag((rates * goes_on)[:-1], k=1)
    return np.eye(len(rates))[0], between, rates * (1 - goes_on)


class PlainPhases(Plain):
    """The plain network, its patients counted by group and phase."""

    def __init__(self, plain):
        super().__init__(plain)
        self.stays = [phases_by_definition(stay) for _, _, stay in self.patients]
        self.kinds = [(g, n) for g, (start, _, _) in enumerate(self.stays) for n in range(len(start))]

    def start(self):
        nobody = (0,) * len(self.kinds)
        return tuple((nobody, own, incoming) for _, own, incoming in super().start())

    def events(self, state):
        for kind, (group, phase) in enumerate(self.kinds):
            home, per_day, _ = self.patients[group]
            start, between, out = self.stays[group]
            for unit, chance in self.chances(state, home):
                if unit is not None and chance * start[phase] > 0:
                    rate = per_day * chance * start[phase]
                    yield self.changed(state, unit, kind, +1), rate, home, unit
            for place, unit in enumerate(self.names):
                here = state[place][0][kind] / self.units[unit].get("stay_factor", 1.0)
                if here:
                    gone = self.changed(state, unit, kind, -1)
                    yield gone, here * out[phase], None, unit
                    for after in np.flatnonzero(between[phase]):
                        other = self.moved(state, place, kind, self.kinds.index((group, after)))
                        yield other, here * between[phase, after], None, unit

    def moved(self, state, place, before, after):
        patients, own, incoming = state[place]
        patients = list(patients)
        patients[before] -= 1
        patients[after] += 1
        return (*state[:place], (tuple(patients), own, incoming), *state[place + 1 :])


def plainly(plain):
    """The measures by the plain construction; None where it would have too many states."""
    described = PlainPhases(plain)
    walk = walked(described)
    if walk is None:
        return None
    return plain_measures(described, *walk, dense_distribution(*walk))


STAYS = st.sampled_from(
    [
        exponential(1.0),
        erlang(2.0, 2),
        erlang(1.2, 3),
        hyperexponential(1.5, 2.0),
        coxian([1.0, 3.0], [0.4]),
        coxian([2.0, 2.0, 0.5], [1.0, 0.3]),
        mixture((2, exponential(1.0)), (1, erlang(2.0, 2))),
    ]
)


@st.composite
def networks(draw):
    names = ["Ashgill", "Norbeck"][: draw(st.integers(1, 2))]
    units = []
    for name in names:
        beds = draw(st.integers(1, 4 - len(names)))
        closes = draw(st.integers(0, beds))
        unit = {"name": name, "beds": beds, "closure_threshold": closes}
        unit["incoming_threshold"] = draw(st.integers(0, closes))
        unit["reopening_gap"] = draw(st.integers(1, 3))
        unit["admit_while_closed"] = draw(st.sampled_from([0.0, 0.0, 0.35]))
        unit["stay_factor"] = draw(st.sampled_from([1.0, 0.6, 1.7]))
        unit["referral_order"] = [n for n in names if n != name] if draw(st.integers(0, 3)) else []
        units.append(unit)
    patient = st.tuples(st.sampled_from(names), st.sampled_from([0.3, 1.1, 2.7]), STAYS)
    patients = draw(st.lists(patient, min_size=1, max_size=2))
    return {"units": units, "patients": patients, "resort": draw(st.sampled_from(RESORTS))}


@given(networks())
@settings(max_examples=80, derandomize=True, deadline=None)
def test_random_networks_agree_with_the_plain_construction(plain):
    expected = plainly(plain)
    assume(expected is not None)
    assert largest_gap(solved(*plain.values()), expected) < 1e-10


# Two kinds of phases, a share of them in common, stay factors, a gate with a gap, an incoming threshold.
RULES = {
    "units": [
        {"name": "Ashgill", "beds": 2, "closure_threshold": 2, "incoming_threshold": 1, "stay_factor": 1.7},
        {"name": "Norbeck", "beds": 2, "reopening_gap": 2, "admit_while_closed": 0.3},
    ],
    "patients": [("Ashgill", 1.1, coxian([2.0, 0.5], [0.6])), ("Norbeck", 1.4, exponential(2.0))],
    "resort": "home_bed",
}


class TestPlantedErrors:
    """A chain with one wrong phase, still a chain that passes its own certificate, must be found out."""

    def gap(self):
        return largest_gap(solved(*RULES.values()), plainly(RULES))

    def book(self, monkeypatch, wrong):
        right = phases.PhaseBook.number
        changed = lambda book, mean, onward: right(book, *wrong(mean, onward))  # noqa: E731
        monkeypatch.setattr(phases.PhaseBook, "number", changed)

    def test_none(self):
        assert self.gap() < 1e-12

    def test_a_phase_a_tenth_too_long(self, monkeypatch):
        self.book(monkeypatch, lambda mean, onward: (mean * (1.1 if onward else 1.0), onward))
        assert self.gap() > 1e-3

    def test_nobody_goes_on(self, monkeypatch):
        self.book(monkeypatch, lambda mean, onward: (mean, {}))
        assert self.gap() > 1e-3

    def test_everybody_goes_on(self, monkeypatch):
        self.book(monkeypatch, lambda mean, onward: (mean, dict.fromkeys(onward, 1.0)))
        assert self.gap() > 1e-3

    def test_phases_of_one_length_taken_for_one(self, monkeypatch):
        """Mean length alone does not make two phases one: here the Coxian's second, and its first."""
        rules = {**RULES, "patients": [("Ashgill", 1.1, coxian([0.5, 0.5], [0.6])), *RULES["patients"][1:]]}
        assert largest_gap(solved(*rules.values()), plainly(rules)) < 1e-12
        self.book(monkeypatch, lambda mean, onward: (mean, {}))
        assert largest_gap(solved(*rules.values()), plainly(rules)) > 1e-3

    def test_the_stay_factor_left_out(self, monkeypatch):
        right = layout._unit_layout
        plain = lambda policy, book, demand, unit: right(  # noqa: E731
            policy, book, demand, unit.model_copy(update={"stay_factor": 1.0})
        )
        monkeypatch.setattr(layout, "_unit_layout", plain)
        assert self.gap() > 1e-3


# ---- phases that coincide are counted together ----


def places(patients, beds=4):
    """States of one unit by the chain's bound and by its own count."""
    scenario = network([{"name": "A", "beds": beds}], [("A", 0.5, stay) for stay in patients])
    states = solve(scenario, scenario.policy()).states
    assert chain_size(scenario, scenario.policy()) == states
    return states


@pytest.mark.parametrize(
    ("stays", "distinct"),
    [
        ([exponential(2.0)] * 3, 1),
        ([exponential(0.1), erlang(0.3, 3)], 3),  # 0.3 / 3 is not quite 0.1
        ([erlang(2.0, 2), erlang(3.0, 3), exponential(1.0)], 3),
        ([erlang(2.0, 2), erlang(4.0, 2)], 4),
        ([hyperexponential(2.0, 1.0), exponential(2.0)], 1),
        ([coxian([0.5, 7.0], [0.0]), exponential(2.0)], 1),
        ([coxian([1.0, 1.0], [0.3]), erlang(2.0, 2)], 3),  # one future in common, one not
        ([mixture((1, erlang(2.0, 2)), (3, exponential(1.0)))], 2),
        ([{"family": "gamma", "mean_days": 2.0, "cv": 1.0}, exponential(2.0)], 1),
    ],
)
def test_phases_of_one_length_and_future_are_one(stays, distinct):
    """4 beds and n phases have C(4 + n, n) states."""
    assert places(stays) == math.comb(4 + distinct, distinct)


def test_only_the_phases_of_patients_who_can_come_are_counted():
    """B refers nobody and takes nobody, so that its Erlang patients cost A nothing."""
    units = [{"name": "A", "beds": 3, "referral_order": []}, {"name": "B", "beds": 2, "referral_order": []}]
    scenario = network(units, [("A", 1.0, exponential(1.0)), ("B", 1.0, erlang(1.0, 3))])
    assert chain_size(scenario, scenario.policy()) == 4 * math.comb(2 + 3, 3)


def test_a_stay_of_many_stages_is_counted():
    assert places([erlang(1.0, 200)], beds=1) == 201


# ---- one unit is insensitive, two are not ----

FAMILIES = {
    "exponential": exponential(1.6),
    "erlang": erlang(1.6, 3),
    "hyperexponential": hyperexponential(1.6, 2.5),
    "coxian": coxian([2.0, 0.5], [0.55]),
    "mixture": mixture((3, erlang(0.8, 2)), (1, exponential(4.0))),
}


def erlang_b(beds, offered):
    """Erlang's loss formula by its recursion, Erlang (1917)."""
    blocked = 1.0
    for busy in range(1, beds + 1):
        blocked = offered * blocked / (busy + offered * blocked)
    return blocked


@pytest.mark.parametrize("stay", FAMILIES.values(), ids=FAMILIES)
def test_a_unit_alone_depends_on_the_mean_stay_only(stay):
    """Erlang B whatever the stay: Sevastyanov, Theory of Probability and its Applications 2 (1957), from memory."""
    measures = solved([{"name": "A", "beds": 5}], [("A", 2.5, stay)]).units["A"]
    weights = np.cumprod([1.0] + [4.0 / busy for busy in range(1, 6)])
    np.testing.assert_allclose(measures.occupancy, weights / weights.sum(), rtol=1e-10, atol=0)
    assert measures.turned_away_share == pytest.approx(erlang_b(5, 4.0), rel=1e-10)


def test_a_pool_of_two_units_depends_on_the_mean_stay_only_as_a_whole():
    """Patients are lost only where every bed is taken, so the pool is one loss system; who is moved is not.

    Computed here: A's patients moved, .26414 with exponential stays, .26437 with Erlang, .26391 with
    hyperexponential ones of the same mean.
    """
    units = [{"name": "A", "beds": 2}, {"name": "B", "beds": 2}]
    stays = exponential(2.0), erlang(2.0, 3), hyperexponential(2.0, 3.0)
    results = [solved(units, [("A", 1.5, stay), ("B", 0.4, stay)]) for stay in stays]
    lost = [result.network.turned_away_per_day / 1.9 for result in results]
    assert lost == pytest.approx([erlang_b(4, 3.8)] * 3, rel=1e-10)
    moved = [result.units["A"].moved_share for result in results]
    assert moved == pytest.approx([0.26414, 0.26437, 0.26391], abs=5e-6)
