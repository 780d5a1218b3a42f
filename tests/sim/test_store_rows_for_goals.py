"""What a stored run is enough for: every payoff that a goal may ask for, from the bytes alone, with no new run.

What it is not enough for: periods other than those that the run judged (they are part of its key), and anything about
single patients, such as waiting or the order of events.
"""

from __future__ import annotations

import numpy as np
import pytest

from sim.intake import draw_intake
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.record import INCOMING_CLOSED, OWN_CLOSED
from sim.reference import run
from sim.replicate import replicate
from sim.resuming import Job
from sim.scenario import parse_scenario
from sim.store import Store
from sim.store_rows import Key, cell_hash
from sim.trace import Trace
from tests.endurance import SCENARIO as TEXT

SCENARIO = parse_scenario(TEXT)
POLICY = SCENARIO.policy().with_thresholds({"Ashgill": 1, "Norbeck": 2})


@pytest.fixture(scope="module")
def kept(tmp_path_factory):
    """A run as the store gives it back."""
    with Store(tmp_path_factory.mktemp("r"), write=True) as store:
        job = Job(store, SCENARIO, [POLICY], 1, fingerprint="here")
        for reply in replicate(SCENARIO, [POLICY], [0]):
            job.keep(reply, "reference")
        return store.get(Key(job.scenario, cell_hash(lower_policy(SCENARIO, POLICY)), 0)).record


@pytest.fixture(scope="module")
def events():
    """The same run's events, to count by."""
    network, trace = lower_network(SCENARIO), Trace()
    run(network, lower_policy(SCENARIO, POLICY), draw_intake(plan_intake(SCENARIO), 0), trace=trace)
    return [event for event in trace.events if event[0] >= network.edges[0]]


def counted(events, kind):
    return np.array([sum(event[1] == kind and event[3] == unit for event in events) for unit in range(2)])


def test_counts_by_home_and_unit_are_those_of_the_events(kept, events):
    assert counted(events, "arrival").tolist() == kept.arrived.tolist()
    assert counted(events, "turned away").tolist() == kept.turned_away.tolist()
    assert kept.diverted.sum() == sum(kind == "transfer" for _, kind, _, _ in events) > 0
    assert counted(events, "admission").tolist() == kept.admitted.sum(axis=0).tolist()


def test_the_distribution_of_occupancy_gives_utilisation_and_any_level(kept):
    """Time above any level, its variance, and utilisation, for goals with other targets or shapes."""
    days = kept.occupancy_days.sum(axis=0)
    assert days.sum(axis=1) == pytest.approx([56, 56])
    mean, beds = days @ np.arange(days.shape[1]) / 56, np.array([2, 3])
    assert np.all((mean / beds > 0) & (mean / beds < 1))
    full = np.array([days[unit, beds[unit]] for unit in range(2)])
    assert full == pytest.approx(
        kept.gate_days[:, 4:].sum(axis=1)
    )  # two ways to the time that a unit is full


def test_gates_tell_refusals_of_own_and_of_others_apart_and_a_free_bed_behind_them(kept):
    for bit in (OWN_CLOSED, INCOMING_CLOSED):
        closed = kept.gate_days[:, [state for state in range(8) if state & bit]].sum(axis=1)
        free = kept.gate_days[:, [state for state in range(4) if state & bit]].sum(axis=1)
        assert np.all((free > 0) & (free <= closed) & (closed < 56))
    thresholds, days = [1, 2], kept.occupancy_days.sum(axis=0)
    own = kept.gate_days[:, [1, 3, 5, 7]].sum(axis=1)
    above = [days[unit, thresholds[unit] :].sum() for unit in range(2)]
    assert own == pytest.approx(
        above
    )  # without hysteresis and delay the gate is closed from the threshold on
