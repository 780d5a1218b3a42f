"""Errors planted in the engine and in the draws, each caught by a check that has a name.

Every test shows first that the program as it is passes the check, then that the planted error fails it. The
checks are the judge and the accountant of `tests/judge.py`, and two of the draws at the end of this file.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import HealthCheck, Phase, find, settings

import sim.intake
from sim import reference
from sim.demand import WeeklyPattern
from sim.intake import Intake, draw_intake
from sim.lowering import ANY_BED, HOME_BED, TURNED_AWAY, GroupDraws, IntakePlan
from sim.stays import Constant, Exponential
from tests.builders import FOREVER, A, B, C, Case, Patient, intake, network, rules, traced
from tests.judge import Account, Judge, RuleBroken, differences
from tests.strategies import cases

Patch = pytest.MonkeyPatch


def faults(case: Case) -> str:
    """What the judge and the accountant find in the engine's run: nothing, or the broken rule and how."""
    try:
        log, record = traced(case)
        Judge(case).follow(log)
    except RuleBroken as broken:
        return str(broken)
    except IndexError as crash:  # more patients than the tables have room for
        return f"crash: {crash}"
    return "; ".join(differences(record, Account(case).of(log)))


# --- the errors -------------------------------------------------------------------------------------------


def arrivals_ahead_of_discharges(patch: Patch) -> None:
    patch.setattr(reference, "NEW_ARRIVAL", 5)


def reviews_after_new_arrivals(patch: Patch) -> None:
    patch.setattr(reference, "REVIEW", 60)


def transfers_arrive_ahead_of_discharges(patch: Patch) -> None:
    patch.setattr(reference, "TRANSFER_ARRIVAL", 5)


def latest_of_an_instant_first(patch: Patch) -> None:
    at = reference.Calendar.at

    def at_counted_backwards(calendar, time, kind, sequence, *actions):
        event = at(calendar, time, kind, (1 << 39) - sequence, *actions)
        event._value = sequence  # it still means the same patient or unit
        return event

    patch.setattr(reference.Calendar, "at", at_counted_backwards)


def stay_of_the_patient_before(patch: Patch) -> None:
    _after_init(
        patch, reference.Model, lambda model: setattr(model, "stay", [row[:1] + row for row in model.stay])
    )


def stay_of_the_home_unit(patch: Patch) -> None:
    _after_init(patch, reference.Unit, lambda unit: setattr(unit, "stay_class", 0))


def extra_days_forgotten(patch: Patch) -> None:
    _after_init(
        patch,
        reference.Model,
        lambda model: setattr(model, "network", dataclasses.replace(model.network, extra_days=0.0)),
    )


def gate_closes_one_too_late(patch: Patch) -> None:
    _gates(patch, closes=lambda load, k: load > k, reopens=lambda load, level: load <= level)


def gate_reopens_one_too_late(patch: Patch) -> None:
    _gates(patch, closes=lambda load, k: load >= k, reopens=lambda load, level: load < level or load == 0)


def gates_ignore_reserved_beds(patch: Patch) -> None:
    patch.setattr(reference.Unit, "load", property(lambda unit: unit.occupied))


def reserved_bed_given_away(patch: Patch) -> None:
    patch.setattr(reference.Unit, "has_free_bed", property(lambda unit: unit.occupied < unit.beds))


def reserved_counted_as_occupied(patch: Patch) -> None:
    def count_load(tally, unit, now):
        if tally.open:
            tally.occupancy_days[tally.period, unit.place, unit.load] += (
                now - tally.occupied_since[unit.place]
            )
            tally.occupied_since[unit.place] = now

    patch.setattr(reference.Tally, "occupied_changes", count_load)


def referral_order_backwards(patch: Patch) -> None:
    _after_init(patch, reference.Unit, lambda unit: unit.asks.reverse())


def own_gate_asked_for_transfers(patch: Patch) -> None:
    _after_init(patch, reference.Unit, lambda unit: setattr(unit, "incoming_closes", unit.own_closes))


def soft_closure_includes_its_bound(patch: Patch) -> None:
    _after_init(
        patch,
        reference.Unit,
        lambda unit: setattr(unit, "admit_while_closed", np.nextafter(unit.admit_while_closed, 2)),
    )


def last_resort_skips_the_own_bed(patch: Patch) -> None:
    def elsewhere(model, home):
        if model.rules.last_resort != ANY_BED:
            return None
        return next((model.units[place] for place in home.asks if model.units[place].has_free_bed), None)

    patch.setattr(reference.Model, "last_resort", elsewhere)


def warm_up_not_cut(patch: Patch) -> None:
    def note_the_road_only(tally, now):
        tally.on_road_at_start = np.array([unit.reserved for unit in tally.units], np.int64)

    _after_init(patch, reference.Tally, lambda tally: setattr(tally, "open", True))
    patch.setattr(reference.Tally, "begin", note_the_road_only)


def counted_by_treating_unit(patch: Patch) -> None:
    count = reference.Tally.count
    patch.setattr(
        reference.Tally, "count", lambda tally, counts, *place: count(tally, counts, *reversed(place))
    )


def _after_init(patch: Patch, kind: type, change: Callable) -> None:
    """Has `change` done to every new object of that kind."""
    init = kind.__init__

    def init_and_change(self, *arguments, **named):
        init(self, *arguments, **named)
        change(self)

    patch.setattr(kind, "__init__", init_and_change)


def _gates(patch: Patch, *, closes: Callable, reopens: Callable) -> None:
    def set_gates(unit):
        for gate in ("own", "incoming"):
            if closes(unit.load, getattr(unit, f"{gate}_closes")):
                setattr(unit, f"{gate}_open", False)
            elif reopens(unit.load, getattr(unit, f"{gate}_reopens")):
                setattr(unit, f"{gate}_open", True)

    patch.setattr(reference.Unit, "set_gates", set_gates)


# --- small networks that bring them to light --------------------------------------------------------------


def case(beds, *patients: Patient, of=None, stay_factors=(1.0,), **by) -> Case:
    net = network(beds, **(of or {}))
    return Case(net, rules(net, **by), intake(*patients, stay_factors=stay_factors))


ONE_AFTER_THE_OTHER = case([1], Patient(0.0), Patient(1.0, stay=2.0))
FULL_HOME = case([1, 2, 1], *(Patient(float(day), A, FOREVER) for day in range(4)))
REVIEWED = case(
    [2], Patient(0.5, stay=FOREVER), Patient(1.0), own=1, review_hours=24, last_resort=TURNED_AWAY
)
TIE = case([2], Patient(0.0, stay=2.0), Patient(1.0, stay=1.0))
RESERVED = case(
    [1, 2, 5],
    *(Patient(0.0, A, FOREVER), Patient(1.0, A, delay=1.5), Patient(1.5, B, FOREVER), Patient(2.0, B)),
    asks=[[B], [], []],
)
CLOSES_AT_TWO = case([3], *(Patient(float(day), stay=2.5) for day in range(4)), own=2)
ON_THE_ROAD = case(
    [1, 2],
    *(Patient(0.0, A, 3.0), Patient(1.0, A, 1.0, delay=1.5), Patient(1.5, B, 1.0), Patient(2.0, B, 1.0)),
    of={"edges": (0.75, 6.0), "extra_days": 0.5, "stay_class": [0, 1]},
    stay_factors=(1.0, 2.0),
)  # fmt: skip
SOFT = case(
    [2],
    Patient(0.0, stay=FOREVER),
    Patient(1.0, gate=0.5),
    own=1,
    admit_while_closed=0.5,
    last_resort=TURNED_AWAY,
)
LAST_RESORT = case([1, 1], Patient(0.0, A), own=[0, 0], last_resort=HOME_BED)
CLOSED_TO_OTHERS = case(
    [1, 2], Patient(0.0, B, FOREVER), Patient(0.5, A, FOREVER), Patient(1.0, A), incoming=[1, 1]
)
CHANGING_PLACES = case(
    [1, 1, 2], Patient(0.0, A, 2.0), Patient(1.0, A, 1.0, delay=1.0), Patient(1.0, C), Patient(2.0, B)
)

PLANTED = [
    (arrivals_ahead_of_discharges, ONE_AFTER_THE_OTHER, "next event"),
    (reviews_after_new_arrivals, REVIEWED, "next event"),
    (transfers_arrive_ahead_of_discharges, CHANGING_PLACES, "next event"),
    (latest_of_an_instant_first, TIE, "next event"),
    (stay_of_the_patient_before, ONE_AFTER_THE_OTHER, "next event"),
    (stay_of_the_home_unit, ON_THE_ROAD, "next event"),
    (extra_days_forgotten, ON_THE_ROAD, "next event"),
    (gate_closes_one_too_late, CLOSES_AT_TWO, "gates"),
    (gate_reopens_one_too_late, CLOSES_AT_TWO, "gates"),
    (gates_ignore_reserved_beds, ON_THE_ROAD, "gates"),
    (reserved_bed_given_away, RESERVED, "decision"),
    (reserved_counted_as_occupied, ON_THE_ROAD, "occupancy_days"),
    (referral_order_backwards, FULL_HOME, "decision"),
    (own_gate_asked_for_transfers, CLOSED_TO_OTHERS, "gates"),
    (soft_closure_includes_its_bound, SOFT, "decision"),
    (last_resort_skips_the_own_bed, LAST_RESORT, "decision"),
    (warm_up_not_cut, ON_THE_ROAD, "occupancy_days"),
    (counted_by_treating_unit, ON_THE_ROAD, "diverted"),
]
NAMES = [plant.__name__ for plant, _, _ in PLANTED]


@pytest.mark.parametrize(("plant", "case", "rule"), PLANTED, ids=NAMES)
def test_planted_error_in_the_engine_is_caught(plant, case, rule, monkeypatch):
    assert faults(case) == ""
    plant(monkeypatch)
    assert faults(case).startswith(rule)


@pytest.mark.parametrize("plant", [plant for plant, _, _ in PLANTED], ids=NAMES)
def test_random_networks_bring_every_planted_error_to_light(plant, monkeypatch):
    plant(monkeypatch)
    quick = settings(
        max_examples=2000, phases=[Phase.generate], derandomize=True, database=None, deadline=None,
        suppress_health_check=list(HealthCheck),
    )  # fmt: skip
    assert faults(find(cases(), lambda case: bool(faults(case)), settings=quick)) != ""


def test_the_records_own_laws_see_a_warm_up_that_is_not_cut(monkeypatch):
    days = ON_THE_ROAD.network.measured_days
    assert traced(ON_THE_ROAD)[1].faults(days) == []
    warm_up_not_cut(monkeypatch)
    assert any("do not add up" in fault for fault in traced(ON_THE_ROAD)[1].faults(days))


# --- the draws --------------------------------------------------------------------------------------------

SOME, MORE = (GroupDraws(name, A, 3.0, WeeklyPattern(), Exponential(2.0)) for name in ("some", "more"))
PLAN = IntakePlan(7, (SOME,), (1.0,), Constant(6.0), horizon_days=50.0)


def same_with_another_group() -> bool:
    """Whether the patients of a group stay bit for bit the same when another group is put before it."""
    alone, together = draw_intake(PLAN, 0), draw_intake(dataclasses.replace(PLAN, groups=(MORE, SOME)), 0)
    theirs = together.group == 1
    return all(
        np.array_equal(getattr(alone, name), getattr(together, name)[..., theirs])
        for name in ("arrival", "drawn_stay", "stay", "delay", "gate")
    )


def test_streams_consumed_in_turn_are_caught(monkeypatch):
    assert same_with_another_group()
    streams: dict[tuple[int, int], sim.intake.UniformSource] = {}
    addressed = sim.intake.uniforms
    monkeypatch.setattr(
        sim.intake,
        "uniforms",
        lambda seed, replication, group, purpose: streams.setdefault(
            (seed, replication), addressed(seed, replication, "everybody", 1)
        ),
    )
    assert not same_with_another_group()


def test_a_delay_in_hours_taken_as_days_is_caught(monkeypatch):
    def six_hours_on_the_road(drawn: Intake) -> bool:
        return len(drawn) > 50 and bool(np.all(drawn.delay == 0.25))

    assert six_hours_on_the_road(draw_intake(PLAN, 0))
    as_it_is = sim.intake._draw_group

    def without_the_division(*arguments):
        *others, delay, gate = as_it_is(*arguments)
        return (*others, delay * 24, gate)

    monkeypatch.setattr(sim.intake, "_draw_group", without_the_division)
    assert not six_hours_on_the_road(draw_intake(PLAN, 0))
