"""Batch means: by hand, their coverage on a queue that was studied before, and what is said of dependent batches."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from analysis.batch_means import GRID as BATCHES
from analysis.batch_means import batch_document, batch_grid, batch_means, lag1_correlation
from analysis.paths import measure_paths
from tests.analysis.builders import memoryless


def test_by_hand():
    found = batch_means(np.array([1.0, 3.0, 2.0, 4.0, 5.0]), 0.9)
    half = stats.t.isf(0.05, 4) * np.sqrt(2.5 / 5)
    assert (found.estimate.low, found.estimate.mean, found.estimate.high) == pytest.approx(
        (3 - half, 3, 3 + half)
    )
    assert found.batches == 5
    assert found.lag1_correlation == pytest.approx((-2 * 0 + 0 * -1 + -1 * 1 + 1 * 2) / 10)


def test_doubt_begins_above_a_tenth():
    assert batch_means(np.arange(10.0), 0.9).is_doubtful  # a trend
    assert not batch_means(np.array([1.0, -1.0] * 5), 0.9).is_doubtful
    assert lag1_correlation(np.full(6, 0.1)) is None and not batch_means(np.full(6, 0.1), 0.9).is_doubtful


def test_one_batch_is_refused():
    with pytest.raises(ValueError, match="at least 2 batches"):
        batch_means(np.array([1.0]), 0.9)


def delays(customers, runs, seed):
    """Delays in M/M/1, rho .8, arrivals at rate 1, from an empty start: (runs, customers) (Lindley)."""
    rng = np.random.default_rng(seed)
    between, service = rng.exponential(1.0, (runs, customers)), rng.exponential(0.8, (runs, customers))
    delay = np.zeros((runs, customers))
    for one in range(1, customers):
        delay[:, one] = np.maximum(0.0, delay[:, one - 1] + service[:, one - 1] - between[:, one])
    return delay


# Coverage of nominal 90 % intervals of the steady mean delay 3.2: from 4,000 runs of another program's simulation (s.e.
# .007); Law and Kelton's table, as remembered, says .690 .598 .490 and .798 .803 .753 from 400 runs.
COVERAGE = {
    (320, 5): 0.661,
    (320, 10): 0.580,
    (320, 20): 0.478,
    (2560, 5): 0.828,
    (2560, 10): 0.807,
    (2560, 20): 0.773,
}
RUNS = 1500


@pytest.fixture(scope="module")
def long_runs():
    return {customers: delays(customers, RUNS, 5) for customers in (320, 2560)}


def covered(series, count):
    found = [batch_means(one, 0.9).estimate for one in series.reshape(len(series), count, -1).mean(axis=2)]
    return np.mean([one.low <= 3.2 <= one.high for one in found])


@pytest.mark.parametrize(("customers", "count"), COVERAGE)
def test_coverage_on_a_queue_is_what_others_found(customers, count, long_runs):
    """Both sides' errors together are .015; 4.5 of them: a false alarm in 1e-5 for all six."""
    assert covered(long_runs[customers], count) == pytest.approx(COVERAGE[customers, count], abs=0.067)


def test_planted_single_observations_as_batches_are_caught(long_runs):
    assert covered(long_runs[2560], 2560) < COVERAGE[2560, 20] - 0.3


def test_correlated_batches_are_told(long_runs):
    short = long_runs[2560].reshape(RUNS, 160, -1).mean(axis=2)
    assert np.mean([batch_means(one, 0.9).is_doubtful for one in short[:100]]) > 0.9


def one_unit(**run):
    return memoryless({"name": "A", "beds": 3, "per_day": 1.0}, run={"seed": 2, "warm_up_days": 14, **run})


def test_batches_are_at_least_eight_mean_stays_and_thirty_at_most():
    assert batch_grid(one_unit(measured_days=79.0)) is None
    assert len(batch_grid(one_unit(measured_days=80.0)).slots) == 5
    long = batch_grid(one_unit(measured_days=2000.0))
    assert len(long.slots) == 30 and long.edges[[0, -1]] == pytest.approx([14, 2014])


def test_a_run_of_the_program_is_measured_whole():
    scenario = one_unit(measured_days=400.0)
    grid = batch_grid(scenario)
    [path] = measure_paths(scenario, scenario.policy(), [0], {BATCHES: grid})
    found = batch_document(path, scenario, grid)
    unit = found["units"]["A"]
    assert found["batches"] == 25 and found["batch_days"] == pytest.approx(16.0)
    assert unit["admissions_per_day"]["mean"] == pytest.approx(path.grids[BATCHES].admitted.sum() / 400)
    assert found["network"]["throughput_per_day"] == unit["admissions_per_day"]
    rare = found["units"]["A"]["turned_away_per_day"]
    assert 0 <= rare["low"] <= rare["mean"]
    assert unit["mean_occupied"]["low"] < unit["mean_occupied"]["mean"] < unit["mean_occupied"]["high"]
    # Erlang loss, 3 beds and 2 offered: blocking 4/19 (textbook), so 2 x 15/19 = 1.579 occupied.
    assert unit["mean_occupied"]["mean"] == pytest.approx(2 * 15 / 19, abs=0.25)
