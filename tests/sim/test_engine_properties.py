"""Laws that every run obeys, on networks of every kind: hypothesis looks for one that breaks them."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings

from sim import engines, reference
from sim.lowering import HOME_BED, TURNED_AWAY
from sim.record import FULL, GATE_STATES, INCOMING_CLOSED, OWN_CLOSED
from tests.builders import Case, Event, traced
from tests.judge import Account, Judge, differences
from tests.strategies import cases

RUNS = [engines.load(name).run for name in engines.ENGINES]
each_engine = pytest.mark.parametrize("run", RUNS, ids=engines.ENGINES)
many = settings(deadline=None, max_examples=120)
some = settings(deadline=None, max_examples=40)


def close(measured: np.ndarray, expected: np.ndarray) -> None:
    np.testing.assert_allclose(measured, expected, rtol=0, atol=1e-9)


def test_the_networks_are_various_enough_to_test_every_rule():
    seen: dict[str, int] = {}

    @settings(deadline=None, max_examples=500, derandomize=True, database=None)
    @given(cases())
    def look(case: Case) -> None:
        for what in found_in(case):
            seen[what] = seen.get(what, 0) + 1

    look()
    rare = {what: seen.get(what, 0) for what in EVERYTHING if seen.get(what, 0) < 5}
    assert not rare, rare


EVERYTHING = (
    *("arrival", "admission", "discharge", "transfer", "turned away", "review", "staffing"),
    *("own gate closes", "own gate opens", "incoming gate closes", "incoming gate opens"),
    *(
        "on the road at the start",
        "on the road at the end",
        "full behind an open gate",
        "closed with a free bed",
    ),
    *("closed to others only", "admitted at a closed gate", "turned away with no unit full"),
    *("more patients than staffed beds",),
    *("stay of 0", "tie", "five at once", "more than one period", "warm-up"),
)


def found_in(case: Case) -> set[str]:
    """What a run has to show, of all that rules are about."""
    log, record = traced(case)
    states = np.arange(GATE_STATES)
    own, incoming, full = (states & bit > 0 for bit in (OWN_CLOSED, INCOMING_CLOSED, FULL))
    times = [line[0] for line in log if line[1] in ("arrival", "discharge", "review")]
    shut = case.rules.own_closes == 0
    marks = {
        "on the road at the start": record.on_road_at_start.any(),
        "on the road at the end": record.on_road_at_end.any(),
        "full behind an open gate": record.gate_days[:, full & ~own].any(),
        "closed with a free bed": record.gate_days[:, own & ~full].any(),
        "closed to others only": record.gate_days[:, incoming & ~own].any(),
        "admitted at a closed gate": np.diagonal(record.admitted)[shut].any(),
        "turned away with no unit full": record.turned_away.any() and not record.gate_days[:, full].any(),
        "more patients than staffed beds": overfull(case, log),
        "stay of 0": (case.intake.drawn_stay == 0).any(),
        "tie": len(set(times)) < len(times),
        "five at once": any(times.count(time) >= 5 for time in set(times)),
        "more than one period": len(record.occupancy_days) > 1,
        "warm-up": case.network.edges[0] > 0,
    }
    return {line[1] for line in log} | {mark for mark, there in marks.items() if there}


def overfull(case: Case, log: list[Event]) -> bool:
    """Whether a unit ever had more patients than staffed beds."""
    occupied, left = [0] * len(case.network.beds), iter([])
    if case.intake.staffing is not None:
        left = iter(case.intake.staffing.beds.tolist())
    for _, kind, _, unit in log:
        occupied[unit] += (kind == "admission") - (kind == "discharge")
        if kind == "staffing" and occupied[unit] > next(left):
            return True
    return False


# --- the event log of the reference engine ----------------------------------------------------------------


@many
@given(cases())
def test_every_line_of_the_event_log_is_what_the_model_asks_for(case):
    log, _ = traced(case)
    Judge(case).follow(log)


@some
@given(cases())
def test_every_patient_goes_one_of_four_ways(case):
    log, _ = traced(case)
    story: dict[int, list[str]] = {}
    for _, kind, patient, _ in log:
        if patient >= 0:
            story.setdefault(patient, []).append(kind)
    whole = (
        ["arrival", "admission", "discharge"],
        ["arrival", "transfer", "admission", "discharge"],
        ["arrival", "turned away"],
    )
    # A run that ends early leaves the beginning of one of them.
    assert all(any(way[: len(told)] == told for way in whole) for told in story.values())
    assert len(story) == np.count_nonzero(case.intake.arrival < case.network.edges[-1])


@some
@given(cases())
def test_the_log_does_not_change_the_run(case):
    assert traced(case)[1].hash == reference.run(case.network, case.rules, case.intake).hash


# --- the record of any engine -----------------------------------------------------------------------------


@each_engine
@many
@given(case=cases())
def test_record_is_what_an_outsider_counts_in_the_event_log(run, case):
    log, _ = traced(case)
    assert differences(run(case.network, case.rules, case.intake), Account(case).of(log)) == []


@each_engine
@many
@given(case=cases())
def test_record_obeys_its_own_laws(run, case):
    record = run(case.network, case.rules, case.intake)
    assert record.faults(case.network.measured_days) == []
    came = record.arrived.sum() + record.on_road_at_start.sum()
    assert came == record.admitted.sum() + record.turned_away.sum() + record.on_road_at_end.sum()
    # Nobody waits at home: what each home saw arrive was admitted there, diverted, or turned away.
    kept = np.diagonal(record.admitted)
    np.testing.assert_array_equal(record.arrived, kept + record.diverted.sum(axis=1) + record.turned_away)
    # Each unit: on the road to it at the start, and sent to it since = came in, or still on the road.
    sent, came_in = record.diverted.sum(axis=0), record.admitted.sum(axis=0) - kept
    np.testing.assert_array_equal(record.on_road_at_start + sent, came_in + record.on_road_at_end)


@each_engine
@some
@given(case=cases())
def test_no_unit_holds_more_patients_than_beds(run, case):
    record = run(case.network, case.rules, case.intake)
    levels = np.arange(record.occupancy_days.shape[2])
    above = levels[None, :] > case.network.beds[:, None]
    assert not record.occupancy_days[:, above].any()
    assert (record.on_road_at_end <= case.network.beds).all()


@each_engine
@some
@given(case=cases())
def test_gates_follow_their_thresholds(run, case):
    rules, gate_days = case.rules, run(case.network, case.rules, case.intake).gate_days
    states = np.arange(GATE_STATES)
    own, incoming, full = (states & bit > 0 for bit in (OWN_CLOSED, INCOMING_CLOSED, FULL))
    for unit in range(len(case.network.beds)):
        if rules.own_closes[unit] == 0:  # never open
            assert not gate_days[unit, ~own].any()
        if rules.incoming_closes[unit] == 0:
            assert not gate_days[unit, ~incoming].any()
        waits = rules.reviews is not None and rules.reviews.reviewed[unit]
        if not waits and case.intake.staffing is None:  # a full unit is at or above every threshold
            assert not gate_days[unit, full & ~(own & incoming)].any()
            closes_when_full = rules.own_closes[unit] == case.network.beds[unit]
            if closes_when_full and rules.own_reopens[unit] == rules.own_closes[unit] - 1:
                assert not gate_days[unit, own & ~full].any()


@each_engine
@some
@given(case=cases())
def test_last_resorts(run, case):
    record = run(case.network, case.rules, case.intake)
    if case.rules.last_resort == TURNED_AWAY:  # a unit never open, and no soft closure, keeps nobody
        chances = case.rules.admit_while_closed
        shut = (case.rules.own_closes == 0) & (True if chances is None else chances == 0)
        assert not np.diagonal(record.admitted)[shut].any()
    if case.rules.last_resort == HOME_BED and not case.rules.incoming_closes.any():  # nobody takes transfers
        assert not record.diverted.any()


@each_engine
@some
@given(case=cases())
def test_a_run_is_a_pure_function(run, case):
    before = case.intake.hash
    first, second = (run(case.network, case.rules, case.intake) for _ in range(2))
    assert first.hash == second.hash
    assert dataclasses.replace(case.intake).hash == before  # a fresh copy: its hash is not remembered


@each_engine
@some
@given(case=cases())
def test_judged_periods_split_the_window_and_change_nothing_else(run, case):
    whole = dataclasses.replace(case.network, edges=case.network.edges[[0, -1]])
    split, together = run(case.network, case.rules, case.intake), run(whole, case.rules, case.intake)
    close(split.occupancy_days.sum(axis=0), together.occupancy_days[0])
    close(split.occupancy_days.sum(axis=(1, 2)), np.diff(case.network.edges) * len(case.network.beds))
    close(split.gate_days, together.gate_days)
    for name in ("arrived", "turned_away", "diverted", "admitted", "on_road_at_start", "on_road_at_end"):
        np.testing.assert_array_equal(getattr(split, name), getattr(together, name), err_msg=name)


@each_engine
@some
@given(case=cases())
def test_nothing_after_the_window_matters(run, case):
    before = case.intake.arrival < case.network.edges[-1]
    names = [field.name for field in dataclasses.fields(case.intake) if field.name != "staffing"]
    kept = {name: getattr(case.intake, name)[..., before] for name in names}
    cut = dataclasses.replace(case.intake, **kept)
    assert run(case.network, case.rules, cut).hash == run(case.network, case.rules, case.intake).hash
