"""What happens first at one instant, and what counts in the measured window: hand-worked event logs.

Read `test_reference.py` first; the conventions are the same.
"""

from __future__ import annotations

import csv

from sim import reference
from sim.lowering import NOBODY
from sim.trace import Trace
from tests.builders import FOREVER, A, B, C, Patient, both_gates, gate_days, intake, network, play, rules

# --- the order of events ----------------------------------------------------------------------------------


def test_a_stay_of_0_frees_the_bed_before_the_next_arrival_of_the_same_instant():
    net = network([1])
    log, record = play(net, rules(net), Patient(1.0, stay=0.0), Patient(1.0, stay=0.0))
    # The discharge, scheduled for now, runs before the new arrival that was due all along.
    one = [(1.0, "arrival", 0, A), (1.0, "admission", 0, A), *both_gates(1.0, "closes", A)]
    one += [(1.0, "discharge", 0, A), *both_gates(1.0, "opens", A)]
    assert log == one + [
        (time, kind, 1 if patient == 0 else patient, unit) for time, kind, patient, unit in one
    ]
    assert record.admitted.tolist() == [[2]]
    assert record.occupancy_days.tolist() == [[[10.0, 0.0]]]


def test_at_one_instant_discharge_then_transfer_arrival_then_review_then_new_arrival():
    net = network([1, 2], edges=(0.0, 3.0))
    log, _ = play(
        net,
        rules(net, own=[1, 2], review_hours=[0, 48]),
        Patient(0.0, A, FOREVER),
        Patient(0.5, B, stay=1.5),  # leaves B at 2
        Patient(1.0, A, stay=0.0, delay=1.0),  # reaches B at 2, and leaves at once
        Patient(2.0, B, FOREVER),
    )
    assert [line for line in log if line[0] == 2.0] == [
        (2.0, "discharge", 1, B),
        (2.0, "admission", 2, B),
        (
            2.0,
            "discharge",
            2,
            B,
        ),  # scheduled for now: before the review, although a discharge is an earlier kind
        (2.0, "review", NOBODY, B),
        (2.0, "arrival", 3, B),
        (2.0, "admission", 3, B),
    ]


def test_at_one_instant_and_kind_the_patients_index_decides_not_who_was_scheduled_first():
    net = network([1, 2, 2], edges=(0.0, 4.0))
    log, _ = play(
        net,
        rules(net, asks=[[B, C], [], []]),
        Patient(0.0, A, FOREVER),
        Patient(0.25, A, stay=1.0, delay=1.75),  # 1: reaches B at 2, leaves at 3, which is known only at 2
        Patient(0.5, A, stay=1.0, delay=1.5),  # 2: reaches B at 2 too
        Patient(1.0, C, stay=2.0),  # 3: leaves at 3, known at 1
        Patient(3.0, C),  # 4 and 5: one instant, in the order of the intake
        Patient(3.0, A),
    )
    at = [(time, kind, patient) for time, kind, patient, _ in log if patient != NOBODY]
    assert [line for line in at if line[0] in (2.0, 3.0)] == [
        (2.0, "admission", 1),
        (2.0, "admission", 2),
        (3.0, "discharge", 1),
        (3.0, "discharge", 2),
        (3.0, "discharge", 3),
        (3.0, "arrival", 4),
        (3.0, "admission", 4),
        (3.0, "arrival", 5),
        (3.0, "transfer", 5),
        (3.0, "admission", 5),
    ]


def test_reviews_of_one_instant_go_by_unit():
    net = network([1, 1, 1], edges=(0.0, 1.25))
    log, _ = play(net, rules(net, review_hours=[24, 12, 6]))
    assert [(time, unit) for time, _, _, unit in log] == [
        (0.25, C), (0.5, B), (0.5, C), (0.75, C), (1.0, A), (1.0, B), (1.0, C)
    ]  # fmt: skip


# --- the measured window ----------------------------------------------------------------------------------


def test_an_event_at_the_start_counts_and_one_at_the_end_does_not_happen():
    net = network([2], edges=(1.0, 3.0))  # measured in [1, 3)
    log, record = play(
        net,
        rules(net),
        Patient(0.5, stay=0.5),  # leaves at 1: occupied in the warm-up only
        Patient(1.0, stay=2.0),  # arrives at the start; the discharge would be at 3
        Patient(3.0),  # would arrive at the end
    )
    assert log == [
        (0.5, "arrival", 0, A),
        (0.5, "admission", 0, A),
        (1.0, "discharge", 0, A),
        (1.0, "arrival", 1, A),
        (1.0, "admission", 1, A),
    ]
    assert (record.arrived.tolist(), record.admitted.tolist()) == ([1], [[1]])
    assert record.occupancy_days.tolist() == [[[0.0, 2.0, 0.0]]]


def test_patients_on_the_road_at_the_windows_edges():
    net = network([1, 5], edges=(1.0, 4.0))
    _, record = play(
        net,
        rules(net),
        Patient(0.0, A, FOREVER),
        Patient(0.25, A, FOREVER, delay=0.5),  # there in the warm-up: nothing of it counts
        Patient(0.5, A, FOREVER, delay=0.5),  # decided in the warm-up, there at the very start: an admission
        Patient(0.5, A, FOREVER, delay=1.0),  # likewise, there at 1.5
        Patient(2.0, A, FOREVER, delay=1.0),  # both within
        Patient(3.0, A, FOREVER, delay=1.0),  # decided within, due at the very end: still on the road
    )
    assert record.on_road_at_start.tolist() == [0, 2]
    assert record.on_road_at_end.tolist() == [0, 1]
    assert record.arrived.tolist() == [2, 0]
    assert record.diverted.tolist() == [[0, 2], [0, 0]]
    assert record.admitted.tolist() == [[0, 3], [0, 0]]
    # B: 2 from the start, 3 from 1.5, 4 from 3; the road occupies no bed.
    assert record.occupancy_days[0, B].tolist() == [0.0, 0.0, 0.5, 1.5, 1.0, 0.0]
    assert record.gate_days[B].tolist() == gate_days(open=2.0, oif=1.0)  # reserved beds fill B from 3 on


def test_integrals_are_cut_at_the_edges_of_the_window_and_of_judged_periods():
    net = network([2], edges=(1.0, 2.0, 4.5, 5.0))
    _, record = play(net, rules(net, own=1, gap=1), Patient(0.5, stay=2.0), Patient(3.0, stay=FOREVER))
    # Occupied: 1 in [0.5,2.5), 0 in [2.5,3), 1 from 3 on.
    assert record.occupancy_days.tolist() == [[[0.0, 1.0, 0.0]], [[0.5, 2.0, 0.0]], [[0.0, 0.5, 0.0]]]
    assert record.gate_days.tolist() == [gate_days(open=0.5, oi=3.5)]  # closed [1,2.5) and [3,5)
    assert record.arrived.tolist() == [1]


def test_a_units_integral_is_added_to_only_when_its_own_value_changes():
    net = network([2, 1, 1], edges=(0.0, 0.9))
    # What happens at B and C must not cut A's time in three pieces.
    assert 0.2 + (0.3 - 0.2) + (0.9 - 0.3) > 0.9
    log, record = play(net, rules(net), Patient(0.2, B, FOREVER), Patient(0.3, C, FOREVER))
    assert [line[3] for line in log if line[1] == "admission"] == [B, C]
    assert record.occupancy_days[0, A, 0] == 0.9
    assert record.gate_days[A, 0] == 0.9
    # Nor must an admission that leaves A open cut the time that A has been open in two.
    assert 0.2 + (0.9 - 0.2) < 0.9
    _, record = play(net, rules(net), Patient(0.2, A, FOREVER))
    assert record.gate_days[A, 0] == 0.9


def test_an_empty_intake_measures_an_empty_network():
    net = network([2, 1], edges=(0.0, 7.0))
    log, record = play(net, rules(net, own=[2, 0]))
    assert log == []
    assert record.occupancy_days.tolist() == [[[7.0, 0.0, 0.0], [7.0, 0.0, 0.0]]]
    assert record.gate_days.tolist() == [gate_days(open=7.0), gate_days(oi=7.0)]


# --- the trace as a file ----------------------------------------------------------------------------------


def test_a_trace_is_written_as_csv_with_names_and_full_precision(tmp_path):
    net = network([1], edges=(0.0, 1.0))
    trace = Trace()
    reference.run(net, rules(net), intake(Patient(1 / 3, stay=0.1)), trace=trace)
    trace.write(tmp_path / "trace.csv", net.unit_names)
    with (tmp_path / "trace.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.reader(file))
    assert rows[:4] == [
        ["time", "kind", "patient", "unit"],
        [repr(1 / 3), "arrival", "0", "A"],
        [repr(1 / 3), "admission", "0", "A"],
        [repr(1 / 3), "own gate closes", "", "A"],
    ]
    assert [float(row[0]) for row in rows[1:]] == [line[0] for line in trace.events]
    assert float(rows[5][0]) == 1 / 3 + 0.1 and rows[5][1] == "discharge"
