"""Paths from traces: by hand, against records, and whatever engine or workers ran them."""

from __future__ import annotations

import numpy as np
import pytest

from analysis.measures import unit_sums
from analysis.paths import (
    Grid,
    binned,
    even_bins,
    happened,
    hours_of_week,
    measure_paths,
    occupied_by_replication,
)
from sim.replicate import Failure
from sim.trace import Trace
from sim.workers import local_workers
from tests.analysis.builders import memoryless
from tests.outside.facts import records_of

BY_HAND = [
    (0.5, "arrival", 0, 0),
    (0.5, "admission", 0, 0),
    (1.0, "admission", 1, 1),
    (1.25, "admission", 2, 0),
    (2.0, "turned away", 3, 0),
    (2.0, "own gate closes", -1, 0),
    (2.5, "discharge", 0, 0),
    (2.5, "admission", 4, 0),
    (3.0, "discharge", 1, 1),
]


def test_by_hand():
    units = happened(Trace(BY_HAND), 2)
    found = binned(units, even_bins(0.0, 4.0, 1.0))
    assert found.occupied == pytest.approx(np.array([[0.5, 1.75, 2.0, 2.0], [0, 1, 1, 0]]))
    assert found.admitted.tolist() == [[1, 1, 1, 0], [0, 1, 0, 0]]
    assert found.turned_away.tolist() == [[0, 0, 1, 0], [0, 0, 0, 0]]


def test_bins_of_one_slot_are_averaged():
    units = happened(Trace(BY_HAND), 2)
    found = binned(units, Grid(np.array([0.0, 1.0, 2.0, 4.0]), np.array([0, 1, 0])))
    assert found.occupied == pytest.approx(np.array([[4.5 / 3, 1.75], [1 / 3, 1.0]]))


def test_a_unit_where_nothing_happens_stays_empty():
    found = binned(happened(Trace([]), 1), even_bins(0.0, 2.0, 1.0))
    assert not found.occupied.any() and found.admitted.tolist() == [[0, 0]]


def test_only_whole_bins_count_and_a_window_without_one_is_refused():
    assert even_bins(1.0, 4.5, 1.0).edges.tolist() == [1, 2, 3, 4]
    assert len(even_bins(0.0, 854.0, 1.4).slots) == 610
    with pytest.raises(ValueError, match="no bin of 7 days"):
        even_bins(0.0, 6.0, 7.0)


def test_hours_of_the_week_begin_on_monday_wherever_the_window_does():
    grid = hours_of_week(2.5 / 24, 7 + 2.5 / 24)
    assert grid.slots[0] == 2 and grid.slots[-1] == 2 and len(grid.slots) == 169
    assert grid.days == pytest.approx(np.full(168, 1 / 24))
    with pytest.raises(ValueError, match="less than a week"):
        hours_of_week(0.0, 6.9)


SCENARIO = memoryless({"name": "A", "beds": 2, "per_day": 1.0}, {"name": "B", "beds": 3, "per_day": 1.2},
                      run={"measured_days": 28, "warm_up_days": 14, "seed": 3})  # fmt: skip
WINDOW = {"week": hours_of_week(14, 42), "days": even_bins(14, 42, 1.0)}


def paths(**how):
    return list(measure_paths(SCENARIO, SCENARIO.policy(), range(4), WINDOW, **how))


def test_paths_add_up_to_the_records():
    sums = unit_sums(records_of(SCENARIO, replications=4), np.array([2.0, 3.0]), 28.0)
    for grid in WINDOW:
        mean = occupied_by_replication(paths(), grid).mean(axis=2)
        assert mean == pytest.approx(sums["occupied_days"] / 28, rel=1e-11)
        for name, total in (("admitted", "admitted"), ("turned_away", "turned_away")):
            counts = [getattr(one.grids[grid], name).sum(axis=1) for one in paths()]
            assert np.array_equal(counts, sums[total])


def test_engines_and_workers_change_nothing():
    expected = occupied_by_replication(paths(), "week")
    for how in ({"engine": "compiled"}, {"workers": local_workers(2)}):
        assert np.array_equal(occupied_by_replication(paths(**how), "week"), expected)


def test_a_replication_that_fails_costs_only_itself():
    numbers = [0, -1, 2]  # there is no stream at -1
    found = list(measure_paths(SCENARIO, SCENARIO.policy(), numbers, WINDOW))
    assert [isinstance(one, Failure) for one in found] == [False, True, False]
    assert found[1].replication == -1 and found[1].traceback
