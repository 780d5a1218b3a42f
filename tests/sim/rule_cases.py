"""What every declared rule must bring to the tests: itself in a scenario, a hand-worked log, a planted fault."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import pytest

from sim import reference
from sim.lowering import ANY_BED, NOBODY, TURNED_AWAY
from tests.builders import FOREVER, A, B, Case, Event, Patient, both_gates, intake, network, rules

Patch = pytest.MonkeyPatch


@dataclass(frozen=True)
class RuleCase:
    """One rule's share of the tests.

    on, off: keys of a scenario, by table (`unit`, `diversion`), that put the rule in force, and that name it
    but leave it out of force. case, log: a tiny network and its event log, worked by hand. plant: breaks the
    reference engine's implementation. in_force: whether a random case uses the rule. chain_refuses: whether
    the exact chain must refuse the scenario `on`.
    """

    on: dict[str, str]
    off: dict[str, str]
    case: Case
    log: Sequence[Event]
    plant: Callable[[Patch], None]
    in_force: Callable[[Case], bool]
    chain_refuses: bool = False
    needs: dict[str, str] = field(default_factory=dict)


def hand(beds: Sequence[int], *patients: Patient, staffing=None, extra_days: float = 0.0, **by) -> Case:
    """A network of these beds measured over 10 days, with rules and patients."""
    of = network(beds, extra_days=extra_days)
    return Case(of, rules(of, **by), intake(*patients, staffing=staffing))


def _incoming_ignored(patch: Patch) -> None:
    patch.setattr(
        reference.Unit,
        "incoming_open",
        property(lambda unit: unit.own_open, lambda unit, _: None),
        raising=False,
    )


def _gap_ignored(patch: Patch) -> None:
    set_gates = reference.Unit.set_gates

    def with_a_gap_of_one(unit):
        unit.own_reopens, unit.incoming_reopens = unit.own_closes - 1, unit.incoming_closes - 1
        set_gates(unit)

    patch.setattr(reference.Unit, "set_gates", with_a_gap_of_one)


def _soft_for_nobody(patch: Patch) -> None:
    patch.setattr(
        reference.Unit, "admit_while_closed", property(lambda _: 0.0, lambda unit, _: None), raising=False
    )


def _always_turned_away(patch: Patch) -> None:
    patch.setattr(reference.Model, "last_resort", lambda model, home: None)


def _arrives_at_once(patch: Patch) -> None:
    def straight_to_bed(model, patient, unit):
        model.note("transfer", patient, unit.place)
        model.occupy(patient, unit, model.stay[unit.stay_class][patient])

    patch.setattr(reference.Model, "transfer", straight_to_bed)


def _gates_never_wait(patch: Patch) -> None:
    patch.setattr(reference.Model, "load_changed", lambda model, unit: model.set_gates(unit))


def _beds_never_fall(patch: Patch) -> None:
    changes = reference.Model.staffing_changes

    def kept(model):
        for unit in model.units:  # whatever is set, the beds stay
            unit.__class__ = type(
                "UnitOfFixedBeds",
                (reference.Unit,),
                {"beds": property(lambda _, n=unit.beds: n, lambda *_: None)},
            )
        yield from changes(model)

    patch.setattr(reference.Model, "staffing_changes", kept)


CASES = {
    "incoming thresholds": RuleCase(
        on={"unit": "incoming_threshold = 1"},
        off={"unit": "incoming_threshold = 4"},
        # B (2 beds) takes others' patients only while empty; A never takes anybody.
        case=hand(
            [1, 2], Patient(1.0, B, FOREVER), Patient(2.0, A), own=[0, 2], incoming=[0, 1], last_resort=TURNED_AWAY
        ),
        log=[
            (1.0, "arrival", 0, B), (1.0, "admission", 0, B), (1.0, "incoming gate closes", NOBODY, B),
            (2.0, "arrival", 1, A), (2.0, "turned away", 1, A),
        ],  # fmt: skip
        plant=_incoming_ignored,
        in_force=lambda case: bool((case.rules.incoming_closes < case.rules.own_closes).any()),
    ),
    "reopening gap": RuleCase(
        on={"unit": "closure_threshold = 3, reopening_gap = 3"},
        off={"unit": "closure_threshold = 3, reopening_gap = 1"},
        needs={"unit": "closure_threshold = 3"},
        # Closed at 2, and at 1 still closed: only empty does it reopen.
        case=hand(
            [2], Patient(1.0, stay=1.0), Patient(1.5, stay=2.5), Patient(3.0), Patient(5.0, stay=FOREVER), gap=2,
            last_resort=TURNED_AWAY,
        ),
        log=[
            (1.0, "arrival", 0, A), (1.0, "admission", 0, A),
            (1.5, "arrival", 1, A), (1.5, "admission", 1, A), *both_gates(1.5, "closes", A),
            (2.0, "discharge", 0, A),
            (3.0, "arrival", 2, A), (3.0, "turned away", 2, A),
            (4.0, "discharge", 1, A), *both_gates(4.0, "opens", A),
            (5.0, "arrival", 3, A), (5.0, "admission", 3, A),
        ],  # fmt: skip
        plant=_gap_ignored,
        in_force=lambda case: bool((case.rules.own_closes - case.rules.own_reopens > 1).any()),
    ),
    "soft closure": RuleCase(
        on={"unit": "closure_threshold = 2, admit_while_closed = 0.5"},
        off={"unit": "closure_threshold = 2, admit_while_closed = 0"},
        needs={"unit": "closure_threshold = 2"},
        # Never open: the first patient's gate number is below 0.5, the second's is not.
        case=hand(
            [2], Patient(1.0, stay=FOREVER, gate=0.4), Patient(2.0, gate=0.6), own=0, admit_while_closed=0.5,
            last_resort=TURNED_AWAY,
        ),
        log=[
            (1.0, "arrival", 0, A), (1.0, "admission", 0, A),
            (2.0, "arrival", 1, A), (2.0, "turned away", 1, A),
        ],  # fmt: skip
        plant=_soft_for_nobody,
        in_force=lambda case: case.rules.admit_while_closed is not None,
    ),
    "last resort": RuleCase(
        on={"unit": "closure_threshold = 1", "diversion": 'when_all_closed = "any_bed"'},
        off={"unit": "closure_threshold = 1", "diversion": 'when_all_closed = "home_bed"'},
        needs={"unit": "closure_threshold = 1"},
        # Both units are closed; A's one bed goes first, then B's.
        case=hand([1, 1], Patient(1.0, A, FOREVER), Patient(2.0, A, FOREVER), own=[0, 0], last_resort=ANY_BED),
        log=[
            (1.0, "arrival", 0, A), (1.0, "admission", 0, A),
            (2.0, "arrival", 1, A), (2.0, "transfer", 1, B), (2.0, "admission", 1, B),
        ],  # fmt: skip
        plant=_always_turned_away,
        in_force=lambda case: case.rules.last_resort == ANY_BED,
    ),
    "transfers": RuleCase(
        on={"diversion": 'delay = { family = "constant", mean_hours = 12 }, extra_days = 0.5'},
        off={"diversion": "extra_days = 0.0"},
        # Half a day on the road, a stay of 1 and 0.25 days more; B's gates close with the reservation.
        case=hand([1, 1], Patient(1.0, A, 1.0, delay=0.5), extra_days=0.25, own=[0, 1]),
        log=[
            (1.0, "arrival", 0, A), (1.0, "transfer", 0, B), *both_gates(1.0, "closes", B),
            (1.5, "admission", 0, B),
            (2.75, "discharge", 0, B), *both_gates(2.75, "opens", B),
        ],  # fmt: skip
        plant=_arrives_at_once,
        in_force=lambda case: bool(case.intake.delay.any() or case.network.extra_days),
        chain_refuses=True,
    ),
    "reviews": RuleCase(
        on={"unit": "closure_threshold = 2, review_hours = 12"},
        off={"unit": "closure_threshold = 2, review_hours = 0"},
        needs={"unit": "closure_threshold = 2"},
        # Threshold 1 of 2 beds, reviews at 2, 4, 6 and 8 days: the second patient finds the gate still open.
        case=hand(
            [2], Patient(0.5, stay=FOREVER), Patient(1.0, stay=2.0), Patient(3.5), own=1, review_hours=48,
            last_resort=TURNED_AWAY,
        ),
        log=[
            (0.5, "arrival", 0, A), (0.5, "admission", 0, A),
            (1.0, "arrival", 1, A), (1.0, "admission", 1, A),
            (2.0, "review", NOBODY, A), *both_gates(2.0, "closes", A),
            (3.0, "discharge", 1, A),
            (3.5, "arrival", 2, A), (3.5, "turned away", 2, A),
            (4.0, "review", NOBODY, A), (6.0, "review", NOBODY, A), (8.0, "review", NOBODY, A),
        ],  # fmt: skip
        plant=_gates_never_wait,
        in_force=lambda case: case.rules.reviews is not None,
        chain_refuses=True,
    ),
    "beds out of use": RuleCase(
        on={
            "unit": "out_of_use = [{ from_day = 10, days = 15, beds = 3 }, "
            "{ per_year = 30, mean_days = 3, beds = 1 }]"
        },
        off={"unit": "out_of_use = [{ per_year = 0, mean_days = 3, beds = 1 }]"},
        # Two beds, both taken; one falls away at 2.0: nobody leaves, and the bed that empties at 3.0 is not staffed.
        case=hand(
            [2], Patient(1.0, stay=2.0), Patient(1.5, stay=FOREVER), Patient(3.5), Patient(5.0, stay=FOREVER),
            staffing=[(2.0, A, 1), (4.0, A, 2)], last_resort=TURNED_AWAY,
        ),
        log=[
            (1.0, "arrival", 0, A), (1.0, "admission", 0, A),
            (1.5, "arrival", 1, A), (1.5, "admission", 1, A), *both_gates(1.5, "closes", A),
            (2.0, "staffing", NOBODY, A),
            (3.0, "discharge", 0, A), *both_gates(3.0, "opens", A),
            (3.5, "arrival", 2, A), (3.5, "turned away", 2, A),
            (4.0, "staffing", NOBODY, A),
            (5.0, "arrival", 3, A), (5.0, "admission", 3, A), *both_gates(5.0, "closes", A),
        ],  # fmt: skip
        plant=_beds_never_fall,
        in_force=lambda case: case.intake.staffing is not None,
        chain_refuses=True,
    ),
}  # fmt: skip
