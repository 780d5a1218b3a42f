"""The advice on the warm-up: the rule on made series, and networks that settle, settle late, or cannot tell."""

from __future__ import annotations

import numpy as np
import pytest

from analysis.paths import measure_paths
from analysis.warm_up import GRID, LEAST_WEEKS, advise_warm_up, mser5, start_grid
from tests.analysis.builders import memoryless


def test_the_cut_of_a_made_series():
    """100 observations of 10, then 400 of 0: the cut is after 20 batches, observation 100, exactly."""
    cut = mser5(np.r_[np.full(100, 10.0), np.zeros(400)])
    assert cut.observations == 100 and not cut.rejected


def test_a_cut_in_the_second_half_is_rejected():
    cut = mser5(np.r_[np.full(300, 10.0), np.zeros(200)])
    assert cut.observations == 300 and cut.rejected
    assert mser5(np.linspace(0, 1, 500)).rejected  # never settles


def test_a_series_without_a_start_is_not_cut():
    assert mser5(np.zeros(500)).observations == 0


def test_what_follows_the_last_whole_batch_is_left_out():
    series = np.r_[np.full(100, 10.0), np.zeros(400)]
    assert mser5(np.r_[series, 1e6]) == mser5(series)


def test_the_least_squared_error_over_cuts_written_plainly():
    series = np.random.default_rng(4).normal(size=400) + 8 * np.exp(-np.arange(400) / 20)
    means = [np.mean(series[5 * j : 5 * j + 5]) for j in range(80)]
    costs = [sum((z - np.mean(means[d:])) ** 2 for z in means[d:]) / (80 - d) ** 2 for d in range(76)]
    assert mser5(series).observations == 5 * int(np.argmin(costs)) > 0


def test_a_short_series_is_refused():
    with pytest.raises(ValueError, match="fewer than 10 batches"):
        mser5(np.zeros(49))


def advice(*, stay_days=2.0, replications=8, **run):
    scenario = memoryless(
        {"name": "A", "beds": 30, "per_day": 10.0 / stay_days}, {"name": "B", "beds": 99, "per_day": 50.0 / stay_days},
        stay_days=stay_days, run={"seed": 8, "warm_up_days": 21, "measured_days": 364, **run},
    )  # fmt: skip
    grid = start_grid(scenario)
    paths = [] if grid is None else list(
        measure_paths(scenario, scenario.policy(), range(replications), {GRID: grid})
    )  # fmt: skip
    return advise_warm_up(paths, scenario)


def test_short_stays_settle_within_the_warm_up():
    found = advice()
    assert found.days is not None and found.days % 7 == 0
    assert found.mean_stays_days == 10 <= found.days <= 21
    assert found.is_met and found.notice is None
    assert len(found.path["A"]) == int(385 / 1.4)


def test_long_stays_ask_for_a_longer_warm_up():
    found = advice(stay_days=20.0)
    assert found.days >= 100 and found.is_met is False
    assert "run.warm_up_days is 21" in found.notice and f"{found.days:g}" in found.notice


def test_a_run_that_never_settles_has_no_advice():
    """Stays of 400 days in a year: the path still climbs at the end."""
    found = advice(stay_days=400.0)
    assert found.days is None and found.is_met is None
    assert None in found.cut_days.values() and "second half" in found.notice


def test_a_run_of_less_than_ten_weeks_is_too_short():
    found = advice(warm_up_days=7, measured_days=7 * LEAST_WEEKS - 8)
    assert found.days is None and "too short" in found.reason and found.to_dict()["path"] == {}
