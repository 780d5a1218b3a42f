"""Measures from records written down by hand: two units over ten days, every number worked out beside it."""

import dataclasses

import numpy as np
import pytest

from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES, combine, network_sums, unit_sums
from sim.record import FULL, INCOMING_CLOSED, OWN_CLOSED
from tests.analysis.builders import record

BEDS, DAYS = np.array([2.0, 3.0]), 10.0


def gates(**days):
    """Days by gate state, from names to days."""
    states = {"open": 0, "incoming_closed": INCOMING_CLOSED, "closed_free": OWN_CLOSED | INCOMING_CLOSED,
              "full_open": FULL, "full_closed": OWN_CLOSED | INCOMING_CLOSED | FULL}  # fmt: skip
    row = np.zeros(8)
    for name, value in days.items():
        row[states[name]] = value
    return row


HAND_MADE = record(
    [
        [[1.0, 2.0, 1.0, 0.0], [0.0, 1.0, 2.0, 1.0]],  # the first 4 days: days with 0, 1, 2, 3 beds occupied
        [[0.0, 3.0, 3.0, 0.0], [2.0, 2.0, 1.0, 1.0]],  # the other 6
    ],
    gate_days=[
        gates(open=1, incoming_closed=2, closed_free=3, full_open=1.5, full_closed=2.5),
        gates(open=8, full_closed=2),
    ],
    arrived=[8, 12],
    turned_away=[1, 2],
    diverted=[[0, 3], [1, 0]],
    admitted=[[4, 2], [1, 9]],  # a patient of the first unit is on the road to the second at the end
    on_road_at_end=[0, 1],
)
EXPECTED = {
    "utilisation": (13 / 20, 15 / 30),  # occupied days 4 + 9 and 8 + 7
    "mean_occupied": (1.3, 1.5),
    "full_fraction": (0.4, 0.2),
    "closed_fraction": (0.55, 0.2),
    "closed_with_free_bed_fraction": (0.3, 0.0),
    "incoming_closed_fraction": (0.75, 0.2),
    "arrivals_per_day": (0.8, 1.2),
    "admissions_per_day": (0.5, 1.1),  # by treating unit: columns of `admitted`
    "diverted_out_per_day": (0.3, 0.1),  # by home: rows of `diverted`
    "diverted_in_per_day": (0.1, 0.2),  # arrived by transfer: the one on the road is not in yet
    "turned_away_per_day": (0.1, 0.2),
    "moved_share": (3 / 8, 1 / 12),
    "turned_away_share": (1 / 8, 2 / 12),
}


@pytest.fixture
def sums():
    return unit_sums([HAND_MADE], BEDS, DAYS)


def test_the_hand_made_record_is_sound():
    assert HAND_MADE.faults(DAYS) == []


@pytest.mark.parametrize("measure", UNIT_MEASURES, ids=lambda measure: measure.name)
def test_a_units_measure_by_hand(sums, measure):
    assert combine(measure, sums)[0] == pytest.approx(EXPECTED[measure.name])


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        ("throughput_per_day", 1.6),
        ("transfers_per_day", 0.4),
        ("turned_away_per_day", 0.3),
        ("arrivals_per_day", 2.0),
    ],
)
def test_a_network_measure_by_hand(sums, name, expected):
    measure = {measure.name: measure for measure in NETWORK_MEASURES}[name]
    assert combine(measure, network_sums(sums)) == pytest.approx([expected])


def test_the_names_are_those_that_other_programs_rely_on():
    unit = {
        "utilisation",
        "mean_occupied",
        "full_fraction",
        "closed_fraction",
        "closed_with_free_bed_fraction",
    }
    unit |= {"admissions_per_day", "diverted_out_per_day", "diverted_in_per_day", "turned_away_per_day"}
    assert unit | {"moved_share", "turned_away_share"} <= {measure.name for measure in UNIT_MEASURES}
    network = {"throughput_per_day", "transfers_per_day", "turned_away_per_day"}
    assert network <= {measure.name for measure in NETWORK_MEASURES}


def test_occupied_days_are_kept_by_judged_period(sums):
    assert sums["period_occupied_days"][0].tolist() == [[4, 8], [9, 7]]
    assert sums["occupied_days"][0].tolist() == [13, 15]
    assert sums["occupancy_days"][0].tolist() == [[1, 5, 4, 0], [2, 3, 3, 2]]


def test_sums_have_a_row_a_replication_and_a_column_a_unit():
    idle = dataclasses.replace(HAND_MADE, turned_away=np.array([0, 0]))
    sums = unit_sums([HAND_MADE, idle, HAND_MADE], BEDS, DAYS)
    assert sums["turned_away"].tolist() == [[1, 2], [0, 0], [1, 2]]
    assert {values.shape[:1] for values in sums.values()} == {(3,)}
    assert network_sums(sums)["turned_away"].tolist() == [3, 0, 3]


def test_a_share_of_no_arrivals_is_not_a_number(sums):
    share = next(measure for measure in UNIT_MEASURES if measure.name == "moved_share")
    assert np.isnan(combine(share, sums | {"arrived": np.zeros((1, 2))})).all()


def test_full_and_closed_are_told_apart():
    """A unit may be full with its gate open (between reviews) and closed with a bed free."""
    full_but_open = record([[[0, 0, 10.0]]], gate_days=[gates(full_open=10)])
    closed_but_free = record([[[10.0, 0, 0]]], gate_days=[gates(closed_free=10)])
    names = ("full_fraction", "closed_fraction", "closed_with_free_bed_fraction")
    measures = {measure.name: measure for measure in UNIT_MEASURES}
    sums = unit_sums([full_but_open, closed_but_free], np.array([2.0]), DAYS)
    assert [combine(measures[name], sums)[:, 0].tolist() for name in names] == [[1, 0], [0, 1], [0, 1]]
