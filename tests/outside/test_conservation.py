"""What no rule can change: Little's law, and nobody is lost, in a network with every rule at work.

Little, "A proof for the queuing formula L = lambda W", Operations Research 9 (1961), 383-387 (from memory):
the mean number of patients in beds is admissions a day times mean stay, in each unit and for any rules,
because no rule looks at a stay before the patient is in bed. Beds held for patients on the road are no part
of it.

False alarms: fewer than 50 facts, 1 in 40,000 for the file (see `facts.py`). Planted errors: a mean stay 3 %
off, the road counted as time in bed, the extra days of a transfer or a unit's stay factor forgotten.
"""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from tests.outside.facts import differs, network, patients_of, records_of, refuted

UNITS = [
    {
        "name": "Fenwick", "beds": 8, "closure_threshold": 7, "incoming_threshold": 6, "stay_factor": 1.25,
        "admit_while_closed": 0.3,
    },
    {"name": "Hollin", "beds": 12, "closure_threshold": 11, "reopening_gap": 2, "stay_factor": 0.8},
    {
        "name": "Marsett", "beds": 16, "review_hours": 8, "closure_threshold": 15,
        "referral_order": ["Fenwick", "Hollin"],
    },
]  # fmt: skip
DAY_OF_WEEK = [1.2, 1.1, 1.0, 1.0, 1.1, 0.8, 0.8]
HOUR_OF_DAY = [1] * 8 + [3] * 10 + [2] * 6
# Home -> arrivals a day and stay.
GROUPS = {
    "Fenwick": (2.2, {"family": "lognormal", "mean_days": 3.0, "cv": 1.2}),
    "Hollin": (4.0, {"family": "gamma", "mean_days": 2.5, "cv": 0.8}),
    "Marsett": (5.5, {"family": "weibull", "mean_days": 3.0, "cv": 1.3}),
}
MEAN_STAY = np.array([stay["mean_days"] for _, stay in GROUPS.values()])
STAY_FACTOR = np.array([unit.get("stay_factor", 1.0) for unit in UNITS])
EXTRA_DAYS, ROAD_HOURS = 0.5, 12.0
BEDS = np.array([unit["beds"] for unit in UNITS])
DAYS = (126, 364)


@pytest.fixture(scope="module", params=["turned_away", "home_bed", "any_bed"])
def simulated(request):
    """The network under one last resort, and its records."""
    rhythm = {"day_of_week": DAY_OF_WEEK, "hour_of_day": HOUR_OF_DAY}
    patients = [patients_of(home, per_day, stay, **rhythm) for home, (per_day, stay) in GROUPS.items()]
    road = {"delay": {"family": "gamma", "mean_hours": ROAD_HOURS, "cv": 0.6}, "extra_days": EXTRA_DAYS}
    scenario = network(UNITS, patients, days=DAYS, resort=request.param, **road)
    return scenario, records_of(scenario)


def occupied_days(record):
    """Bed days used, (units,)."""
    days = record.occupancy_days.sum(axis=0)
    return days @ np.arange(days.shape[1])


def days_owed(record, mean_stay=MEAN_STAY, factor=STAY_FACTOR, extra_days=EXTRA_DAYS):
    """Bed days that the admitted patients need on average, (units,), by home and treating unit."""
    each = np.outer(mean_stay, factor) + extra_days * (1 - np.eye(len(factor)))
    return (record.admitted * each).sum(axis=0)


def little_broken(records, **belief):
    """The units, or "network", in which Little's law does not hold under these beliefs."""
    gaps = np.array([occupied_days(record) - days_owed(record, **belief) for record in records])
    places = {unit["name"]: gaps[:, place] for place, unit in enumerate(UNITS)} | {
        "network": gaps.sum(axis=1)
    }
    return [place for place, values in places.items() if differs(values)]


class TestLittle:
    def test_every_unit_and_the_network(self, simulated):
        _, records = simulated
        assert not little_broken(records)

    def test_a_mean_stay_three_per_cent_off_is_refuted(self, simulated):
        _, records = simulated
        assert little_broken(records, mean_stay=1.03 * MEAN_STAY)

    def test_forgotten_extra_days_are_refuted(self, simulated):
        _, records = simulated
        assert little_broken(records, extra_days=0.0)

    def test_the_road_counted_as_time_in_bed_is_refuted(self, simulated):
        _, records = simulated
        assert little_broken(records, extra_days=EXTRA_DAYS + ROAD_HOURS / 24)

    def test_a_stay_factor_of_the_home_instead_of_the_unit_is_refuted(self, simulated):
        _, records = simulated
        by_home = MEAN_STAY * STAY_FACTOR
        assert little_broken(records, mean_stay=by_home, factor=np.ones(len(UNITS)))


class TestNobodyIsLost:
    """Identities of every replication, exact to the patient."""

    def test_every_arrival_has_one_fate(self, simulated):
        for record in simulated[1]:
            came_in = record.arrived.sum() + record.on_road_at_start.sum()
            assert came_in == record.admitted.sum() + record.turned_away.sum() + record.on_road_at_end.sum()
            at_home = record.arrived - record.turned_away - record.diverted.sum(axis=1)
            assert np.array_equal(at_home, np.diagonal(record.admitted))

    def test_every_transfer_arrives_or_is_on_the_road(self, simulated):
        for record in simulated[1]:
            arrived = record.admitted.sum(axis=0) - np.diagonal(record.admitted)
            decided = record.diverted.sum(axis=0)
            assert np.array_equal(decided + record.on_road_at_start, arrived + record.on_road_at_end)

    def test_transfers_go_only_where_they_are_referred(self, simulated):
        order = [[other != home for other in range(len(UNITS))] for home in range(len(UNITS))]
        for record in simulated[1]:
            assert not record.diverted[~np.array(order)].any()
            assert record.diverted[np.array(order)].all()  # every rule of diversion is at work

    def test_no_more_patients_than_beds_at_any_time(self, simulated):
        for record in simulated[1]:
            beyond = np.arange(record.occupancy_days.shape[2]) > BEDS[:, None]
            assert not record.occupancy_days.sum(axis=0)[beyond].any()
            assert record.occupancy_days.sum(axis=(0, 2)) == pytest.approx(DAYS[1], rel=1e-12)

    def test_a_patient_too_many_is_noticed(self, simulated):
        _, (record, *_) = simulated
        one = np.array([1, 0, 0])
        assert not record.faults(DAYS[1])
        assert dataclasses.replace(record, turned_away=record.turned_away + one).faults(DAYS[1])
        assert dataclasses.replace(record, admitted=record.admitted + np.diag(one)).faults(DAYS[1])


class TestFlows:
    """Means over replications against what the scenario itself fixes."""

    def test_arrivals_are_those_of_the_scenario(self, simulated):
        scenario, records = simulated
        facts = {(name, "arrivals_per_day"): per_day for name, (per_day, _) in GROUPS.items()}
        facts["network", "arrivals_per_day"] = sum(per_day for per_day, _ in GROUPS.values())
        assert not refuted(facts, scenario, records=records)
        assert refuted({place: 1.03 * value for place, value in facts.items()}, scenario, records=records)

    def test_throughput_is_what_arrives_and_is_not_turned_away(self, simulated):
        """Transfers on the road at the two ends of the window cancel on average."""
        _, records = simulated
        missing = [
            record.arrived.sum() - record.turned_away.sum() - record.admitted.sum() for record in records
        ]
        assert not differs(np.array(missing))
