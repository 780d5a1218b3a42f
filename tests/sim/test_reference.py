"""The rules of a network, one by one: a tiny network, its hand-worked event log, and what is measured of it.

Units are A, B, C. A line of a log is (time in days, what happened, patient or NOBODY, unit). Where nothing
else is said, gates act at once, a gap is 1, units ask each other in turn, and a patient's own bed is the last
resort. Every expected line and number was worked out on paper from the rules. The order of events and the
measured window are in `test_event_order.py`.
"""

from __future__ import annotations

import pytest

from sim.lowering import ANY_BED, HOME_BED, NOBODY, TURNED_AWAY
from tests.builders import FOREVER, A, B, C, Patient, both_gates, gate_days, network, play, rules

# --- gates ------------------------------------------------------------------------------------------------


def test_own_gate_closes_at_k_and_reopens_at_k_less_the_gap():
    four_beds = network([4])
    log, record = play(
        four_beds,
        rules(four_beds, own=3, gap=2, last_resort=TURNED_AWAY),
        Patient(0.0, stay=4.0),  # 0: leaves at 4
        Patient(1.0, stay=2.0),  # 1: leaves at 3
        Patient(2.0, stay=3.0),  # 2: load 3, closes; leaves at 5
        Patient(2.5),  # 3: one bed is free, but the gate is closed
        Patient(3.5),  # 4: load 2 is neither 3 nor 3 - 2 = 1: still closed
        Patient(4.5, stay=1.0),  # 5: open again since load was 1
    )
    assert log == [
        (0.0, "arrival", 0, A),
        (0.0, "admission", 0, A),
        (1.0, "arrival", 1, A),
        (1.0, "admission", 1, A),
        (2.0, "arrival", 2, A),
        (2.0, "admission", 2, A),
        *both_gates(2.0, "closes", A),
        (2.5, "arrival", 3, A),
        (2.5, "turned away", 3, A),
        (3.0, "discharge", 1, A),
        (3.5, "arrival", 4, A),
        (3.5, "turned away", 4, A),
        (4.0, "discharge", 0, A),
        *both_gates(4.0, "opens", A),
        (4.5, "arrival", 5, A),
        (4.5, "admission", 5, A),
        (5.0, "discharge", 2, A),
        (5.5, "discharge", 5, A),
    ]
    # Occupied: 1 in [0,1), 2 in [1,2), 3 in [2,3), 2 in [3,4), 1 in [4,4.5), 2 in [4.5,5), 1 in [5,5.5), 0.
    assert record.occupancy_days.tolist() == [[[4.5, 2.0, 2.5, 1.0, 0.0]]]
    assert record.gate_days.tolist() == [gate_days(open=8.0, oi=2.0)]  # closed with a free bed in [2,4)
    assert (record.arrived.tolist(), record.admitted.tolist(), record.turned_away.tolist()) == (
        [6],
        [[4]],
        [2],
    )


def test_a_gap_above_the_threshold_reopens_only_an_empty_unit():
    two_beds = network([2])
    log, _ = play(two_beds, rules(two_beds, own=2, gap=5), Patient(0.0, stay=3.0), Patient(1.0, stay=1.0))
    assert log[4:] == [
        *both_gates(1.0, "closes", A),
        (2.0, "discharge", 1, A),  # load 1, above max(0, 2 - 5) = 0
        (3.0, "discharge", 0, A),
        *both_gates(3.0, "opens", A),
    ]


def test_a_unit_closes_to_others_before_its_own_patients():
    net = network([3, 1], edges=(0.0, 4.0))
    log, record = play(
        net,
        rules(net, incoming=[1, 1], last_resort=TURNED_AWAY),
        Patient(0.0, A, FOREVER),  # A: load 1, closed to others
        Patient(1.0, B, FOREVER),  # B: full
        Patient(2.0, B),  # A has two free beds, but not for others
        Patient(3.0, A, FOREVER),  # A takes its own
    )
    assert log == [
        (0.0, "arrival", 0, A),
        (0.0, "admission", 0, A),
        (0.0, "incoming gate closes", NOBODY, A),
        (1.0, "arrival", 1, B),
        (1.0, "admission", 1, B),
        *both_gates(1.0, "closes", B),
        (2.0, "arrival", 2, B),
        (2.0, "turned away", 2, B),
        (3.0, "arrival", 3, A),
        (3.0, "admission", 3, A),
    ]
    assert record.gate_days.tolist() == [gate_days(i=4.0), gate_days(open=1.0, oif=3.0)]
    assert record.turned_away.tolist() == [0, 1]


def test_a_threshold_of_0_is_closed_from_the_start_and_for_ever():
    net = network([2, 2], edges=(0.0, 4.0))
    log, record = play(
        net,
        rules(net, own=[0, 2], incoming=[0, 1]),
        Patient(1.0, A, FOREVER),  # to B, which closes to others at 1
        Patient(2.0, A, 1.0),  # nobody takes them: the own bed as last resort
        Patient(2.5, A, 1.0),  # likewise; A is full now
    )
    assert log == [
        (1.0, "arrival", 0, A),
        (1.0, "transfer", 0, B),
        (1.0, "admission", 0, B),
        (1.0, "incoming gate closes", NOBODY, B),
        (2.0, "arrival", 1, A),
        (2.0, "admission", 1, A),
        (2.5, "arrival", 2, A),
        (2.5, "admission", 2, A),
        (3.0, "discharge", 1, A),  # empty or not, the gates of A never move
        (3.5, "discharge", 2, A),
    ]
    assert record.gate_days.tolist() == [gate_days(oi=3.5, oif=0.5), gate_days(open=1.0, i=3.0)]


def test_soft_closure_admits_gate_numbers_below_the_chance():
    net = network([3])
    log, _ = play(
        net,
        rules(net, own=1, admit_while_closed=0.3, last_resort=TURNED_AWAY),
        Patient(0.0, stay=FOREVER, gate=0.99),  # open: the gate number does not matter
        Patient(1.0, stay=FOREVER, gate=0.29),  # closed, admitted
        Patient(2.0, stay=FOREVER, gate=0.3),  # not below 0.3
        Patient(3.0, stay=FOREVER, gate=0.01),  # admitted; full now
        Patient(4.0, stay=FOREVER, gate=0.01),  # no rule puts a patient where no bed is free
    )
    assert [line[1:3] for line in log if line[1] in ("admission", "turned away")] == [
        ("admission", 0), ("admission", 1), ("turned away", 2), ("admission", 3), ("turned away", 4)
    ]  # fmt: skip


# --- reviews ----------------------------------------------------------------------------------------------


def test_with_reviews_gates_move_only_then_after_discharges_and_before_new_arrivals():
    net = network([2], edges=(0.0, 3.5))
    log, record = play(
        net,
        rules(net, own=1, review_hours=24, last_resort=TURNED_AWAY),
        Patient(0.5, stay=1.5),  # 0: load 1 = k, but the gate waits for the review
        Patient(0.75, stay=0.5),  # 1: so this one is admitted too; full
        Patient(1.0),  # 2: at the time of the review, which goes first
        Patient(2.0, stay=FOREVER),  # 3: discharge of 0, review, arrival
    )
    assert log == [
        (0.5, "arrival", 0, A),
        (0.5, "admission", 0, A),
        (0.75, "arrival", 1, A),
        (0.75, "admission", 1, A),
        (1.0, "review", NOBODY, A),
        *both_gates(1.0, "closes", A),
        (1.0, "arrival", 2, A),
        (1.0, "turned away", 2, A),
        (1.25, "discharge", 1, A),
        (2.0, "discharge", 0, A),
        (2.0, "review", NOBODY, A),
        *both_gates(2.0, "opens", A),
        (2.0, "arrival", 3, A),
        (2.0, "admission", 3, A),
        (3.0, "review", NOBODY, A),
        *both_gates(3.0, "closes", A),
    ]
    # Open [0,.75), full though open [.75,1), closed and full [1,1.25), closed with a free bed [1.25,2),
    # open [2,3), closed with a free bed [3,3.5).
    assert record.gate_days.tolist() == [gate_days(open=1.75, f=0.25, oif=0.25, oi=1.25)]


def test_an_open_but_full_home_goes_straight_to_the_referral_order():
    net = network([1, 1], edges=(0.0, 1.0))
    log, _ = play(
        net,
        rules(net, review_hours=[24, 0], admit_while_closed=1.0),
        Patient(0.25, A, FOREVER),  # A is full, its gate open: no review yet
        Patient(0.5, A, FOREVER),  # to B
        Patient(0.75, A, FOREVER),  # B is full, and A's own bed is taken
    )
    assert log == [
        (0.25, "arrival", 0, A),
        (0.25, "admission", 0, A),
        (0.5, "arrival", 1, A),
        (0.5, "transfer", 1, B),
        (0.5, "admission", 1, B),
        *both_gates(0.5, "closes", B),
        (0.75, "arrival", 2, A),
        (0.75, "turned away", 2, A),
    ]


# --- where a patient goes ---------------------------------------------------------------------------------


def test_units_are_asked_in_turn_from_the_next_one():
    net = network([1, 1, 1])
    log, record = play(net, rules(net), *(Patient(float(day), B, FOREVER) for day in range(4)))
    took = [(kind, unit) for _, kind, _, unit in log if kind in ("admission", "turned away")]
    assert took == [("admission", B), ("admission", C), ("admission", A), ("turned away", B)]
    assert record.diverted.tolist() == [[0, 0, 0], [1, 0, 1], [0, 0, 0]]


@pytest.mark.parametrize(
    ("order", "went"), [([C, A], [B, C, A]), ([A, C], [B, A, C]), ([C], [B, C, None]), ([], [B, None, None])]
)
def test_a_referral_order_says_who_is_asked_and_when(order, went):
    net = network([1, 1, 1])
    by = rules(net, asks=[[], order, []])
    log, _ = play(net, by, *(Patient(float(day), B, FOREVER) for day in range(3)))
    ends = [(kind, unit) for _, kind, _, unit in log if kind in ("admission", "turned away")]
    assert [unit if kind == "admission" else None for kind, unit in ends] == went


@pytest.mark.parametrize(
    ("last_resort", "ways"),
    [
        (TURNED_AWAY, ["turned away", "turned away", "turned away"]),
        (HOME_BED, [("admission", A), "turned away", "turned away"]),
        (ANY_BED, [("admission", A), ("transfer", B), ("transfer", B)]),
    ],
)
def test_when_all_are_closed_the_last_resort_decides(last_resort, ways):
    # A takes nobody by choice, nor does B take others; A has one bed, B three.
    net = network([1, 3], edges=(0.0, 4.0))
    by = rules(net, own=[0, 3], incoming=[0, 0], last_resort=last_resort)
    log, _ = play(net, by, *(Patient(float(day), A, FOREVER) for day in range(3)))
    said = [line for line in log if line[1] != "arrival"]
    decided = [line for line in said if not (line[1] == "admission" and line[3] == B)]
    assert [line[1] if line[1] == "turned away" else (line[1], line[3]) for line in decided] == ways


def test_any_bed_asks_open_gates_before_closed_ones_and_the_own_bed_before_others():
    # B is closed to others and comes first in the order; C is open.
    net = network([2, 2, 1])
    by = rules(net, own=[0, 2, 1], incoming=[0, 0, 1], last_resort=ANY_BED)
    log, _ = play(net, by, *(Patient(float(day), A, FOREVER) for day in range(6)))
    ends = [(kind, unit) for _, kind, _, unit in log if kind in ("admission", "turned away")]
    assert ends == [("admission", unit) for unit in (C, A, A, B, B)] + [("turned away", A)]


# --- transfers --------------------------------------------------------------------------------------------


def test_a_transfer_reserves_the_bed_until_the_patient_is_there():
    net = network([1, 2], edges=(0.0, 5.0), extra_days=0.5)
    log, record = play(
        net,
        rules(net, incoming=[1, 1]),
        Patient(0.0, A, FOREVER),
        Patient(1.0, A, stay=2.0, delay=0.5),  # to B: load 1, so B closes to others at the decision
        Patient(1.25, B, FOREVER),  # B: load 2, full with one bed occupied and one reserved
        Patient(1.375, B),  # no bed is free at either unit
    )
    assert log == [
        (0.0, "arrival", 0, A),
        (0.0, "admission", 0, A),
        *both_gates(0.0, "closes", A),
        (1.0, "arrival", 1, A),
        (1.0, "transfer", 1, B),
        (1.0, "incoming gate closes", NOBODY, B),
        (1.25, "arrival", 2, B),
        (1.25, "admission", 2, B),
        (1.25, "own gate closes", NOBODY, B),
        (1.375, "arrival", 3, B),
        (1.375, "turned away", 3, B),
        (1.5, "admission", 1, B),  # reservation to occupation: no gate moves
        (4.0, "discharge", 1, B),  # 1.5 + stay 2 + 0.5 extra days
        (4.0, "own gate opens", NOBODY, B),  # load 1 <= 2 - 1; for others it would have to be 0
    ]
    # B: nobody in [0,1.25), though a bed is reserved; 1 in [1.25,1.5); 2 in [1.5,4); 1 in [4,5).
    assert record.occupancy_days[0].tolist() == [[0.0, 5.0, 0.0], [1.25, 1.25, 2.5]]
    assert record.gate_days[B].tolist() == gate_days(open=1.0, i=0.25 + 1.0, oif=2.75)
    assert record.diverted.tolist() == [[0, 1], [0, 0]]
    assert record.admitted.tolist() == [[1, 1], [0, 1]]


def test_a_transfer_without_delay_acts_at_once():
    net = network([1, 1])
    log, _ = play(net, rules(net), Patient(0.0, A, FOREVER), Patient(1.0, A, stay=1.0, delay=0.0))
    assert log[4:] == [
        (1.0, "arrival", 1, A),
        (1.0, "transfer", 1, B),
        (1.0, "admission", 1, B),
        *both_gates(1.0, "closes", B),
        (2.0, "discharge", 1, B),
        *both_gates(2.0, "opens", B),
    ]


def test_the_treating_unit_stretches_the_stay_and_a_transfer_adds_gate_days():
    net = network([1, 2], extra_days=0.25, stay_class=[0, 1])  # stays in B last twice as long
    patients = (Patient(0.0, A, stay=4.0), Patient(1.0, A, stay=1.5), Patient(2.0, B, stay=1.5))
    log, _ = play(net, rules(net), *patients, stay_factors=(1.0, 2.0))
    left = {patient: time for time, kind, patient, _ in log if kind == "discharge"}
    # At home in A: 0 + 4. Transferred to B: 1 + 2 x 1.5 + 0.25. At home in B: 2 + 2 x 1.5.
    assert left == {0: 4.0, 1: 4.25, 2: 5.0}
