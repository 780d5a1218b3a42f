"""The closure ledger: worked by hand on a tiny network, its signs, and a gate held open in either engine."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from analysis import ledger
from analysis.ledger import (
    BASE,
    Tracing,
    cases_without,
    closed_spans,
    closes_early,
    costs,
    held_open,
    ledger_document,
)
from sim import compiled, reference
from sim.intake import draw_intake
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.trace import Trace
from tests.analysis.builders import memoryless
from tests.builders import FOREVER, A, B, Patient, intake

RUN = {"seed": 3, "warm_up_days": 0.0, "measured_days": 10.0, "replications": 4}
HAND = memoryless(
    {"name": "A", "beds": 2, "per_day": 1.0, "closure_threshold": 1},
    {"name": "B", "beds": 2, "per_day": 1.0},
    run=RUN,
)
# A closes at 1. Patient 0 fills it until day 6. Patient 1 finds A closed and goes to B; with patient 2, B is full;
# patient 3 of B is asked of A, closed to others too, and finds no bed at home: turned away. Without A's closing
# patient 1 stays at A, and B has a bed for patient 3. Patient 4 comes when A is empty again: nobody is displaced.
PATIENTS = (
    Patient(1.0, A, 5.0), Patient(2.0, A, FOREVER), Patient(2.2, B, FOREVER), Patient(2.5, B, 1.0),
    Patient(7.0, A, 1.0),
)  # fmt: skip


@pytest.fixture(params=["reference", "compiled"])
def tracing(request, monkeypatch):
    """The hand-made patients in place of drawn ones, traced once."""
    monkeypatch.setattr(ledger, "draw_intake", lambda plan, replication: intake(*PATIENTS))
    found = Tracing(HAND, cases_without(HAND, HAND.policy()), request.param)
    found.trace(0)
    return found


def test_whom_a_closing_displaces_by_hand(tracing):
    rows = [(one.closes, one.home, one.without, one.now, one.patients) for one in tracing.displaced()]
    assert rows == [("A", "A", "A", "B", 1), ("A", "B", "B", "turned away", 1)]
    assert tracing.displaced()[0].a_year == pytest.approx(36.5)  # one in ten days


def test_one_closing_alone_by_hand(tracing):
    assert tracing.episodes("A", 0) == [(1.0, 6.0), (7.0, 8.0)] and tracing.episodes("B", 0) == [(2.2, 10.0)]
    first = tracing.episode("A", (1.0, 6.0), 0)
    # Patient 1 then stays at A, whose gate is closed again by day 7: patient 4 would go to B.
    expected = [(1, "A", "B"), (3, "B", "turned away"), (4, "B", "A")]
    assert [(one["patient"], one["without"], one["now"]) for one in first] == expected
    assert tracing.episode("A", (7.0, 8.0), 0) == []


def test_the_warm_ups_closings_and_patients_are_not_reckoned():
    trace = Trace(
        [(1.0, "own gate closes", -1, 0), (2.0, "own gate opens", -1, 0), (3.0, "own gate closes", -1, 0)]
    )
    assert list(closed_spans(trace, 0, 1.5, 10.0)) == [(3.0, 10.0)]
    assert list(closed_spans(trace, 1, 0.0, 10.0)) == []


def _random_case():
    scenario = memoryless(
        {"name": "A", "beds": 3, "per_day": 1.5, "closure_threshold": 2},
        {"name": "B", "beds": 4, "per_day": 1.5, "incoming_threshold": 2},
        run=RUN | {"measured_days": 60.0},
    )
    plan = plan_intake(scenario)
    return lower_network(scenario), lower_policy(scenario, scenario.policy()), draw_intake(plan, 0)


def test_a_span_without_patients_changes_no_bit():
    network, rules, drawn = _random_case()
    held, same = held_open(rules, drawn, A, (5.0, 5.0))
    assert reference.run(network, held, same).hash == reference.run(network, rules, drawn).hash


def test_both_engines_hold_the_gate_alike_and_it_matters():
    network, rules, drawn = _random_case()
    held, changed = held_open(rules, drawn, A, (5.0, 30.0))
    assert reference.run(network, held, changed).hash == compiled.run(network, held, changed).hash
    assert reference.run(network, held, changed).hash != reference.run(network, rules, drawn).hash


def test_planted_gate_that_nobody_passes_is_caught(monkeypatch):
    """With gate numbers left as drawn, the hand-worked episode displaces nobody."""
    monkeypatch.setattr(ledger, "draw_intake", lambda plan, replication: intake(*PATIENTS))
    monkeypatch.setattr(ledger, "held_open", lambda rules, drawn, unit, span: (rules, drawn))
    found = Tracing(HAND, cases_without(HAND, HAND.policy()), "reference")
    assert found.episode("A", (1.0, 6.0), 0) == []


def test_the_cases_switch_off_both_gates_of_one_unit():
    scenario = memoryless(
        {"name": "A", "beds": 5, "per_day": 1.0, "closure_threshold": 4, "incoming_threshold": 2},
        {"name": "B", "beds": 6, "per_day": 1.0, "incoming_threshold": 3},
    )
    base, without_a, without_b = cases_without(scenario, scenario.policy())
    assert base.name == BASE and closes_early(scenario, base.policy) == {"A": True, "B": True}
    rules = {name: (one.closure_threshold, one.incoming) for name, one in without_a.policy.units.items()}
    assert rules == {"A": (5, 5), "B": (6, 3)}
    assert without_b.policy.units["B"].incoming == 6 and without_b.policy.units["A"].incoming == 2


def _sums(turned_away, moved):
    return {
        "turned_away": np.array(turned_away, float), "diverted_out": np.array(moved, float),
        "days": np.full(np.shape(moved), 10.0),
    }  # fmt: skip


def test_the_matrix_by_hand():
    """Costs are with the closing less without it, a year; the network is the sum over homes."""
    with_it = _sums([[0, 3], [0, 5]], [[4, 1], [4, 1]])
    without_a = _sums([[0, 1], [0, 2]], [[1, 1], [2, 1]])
    found = costs(HAND, [with_it, without_a, with_it], 0.95, np.random.default_rng(1))
    means = {(one.closes, one.home, one.counted): one.a_year.mean for one in found}
    assert means["A", "B", "turned away"] == pytest.approx(2.5 * 36.5)
    assert means["A", "A", "moved"] == pytest.approx(2.5 * 36.5)
    assert means["A", "network", "turned away"] == pytest.approx(2.5 * 36.5)
    assert all(
        means["B", home, counted] == 0
        for home in ("A", "B", "network")
        for counted in ("moved", "turned away")
    )
    same = next(one for one in found if one.closes == "B")
    assert same.verdict == "cannot be told apart" and same.a_year.low is None


def test_the_document_says_who_pays():
    estimate = {"A": 10.0, "B": 0.0}
    rng = np.random.default_rng(2)
    noise = rng.normal(size=(30, 2))
    with_it, without = (
        _sums(np.zeros((30, 2)), 20 + noise),
        _sums(np.zeros((30, 2)), 20 + noise - [estimate["A"], 0]),
    )
    with_it["diverted_out"] = with_it["diverted_out"] + rng.normal(size=(30, 2))
    matrix = costs(HAND, [with_it, without, with_it], 0.95, rng)
    said = ledger_document(HAND, HAND.policy(), matrix, [], 0)["findings"]
    said = [one["statement"] for one in said]
    assert len(said) == 1 and "more of A's patients moved a year" in said[0] and "B's patients" not in said[0]
    nobody = dataclasses.replace(HAND.policy().with_thresholds({"A": 2}))
    assert "No unit closes early" in ledger_document(HAND, nobody, matrix, [], 0)["findings"][0]["statement"]
