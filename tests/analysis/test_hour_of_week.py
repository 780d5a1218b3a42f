"""Hours of the week: the bands hold all 168 points as often as they say, and points by themselves do not."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from analysis.confidence import critical_value
from analysis.hour_of_week import BONFERRONI, GRID, RESAMPLED, critical_of, week_grid, week_of
from analysis.measures import unit_sums
from analysis.paths import Binned, Path, measure_paths
from analysis.simultaneous import studentise
from tests.analysis.builders import memoryless
from tests.outside.facts import records_of

HOURS = np.arange(168)
NEAR = np.exp(-np.minimum(HOURS, 168 - HOURS) / 12)  # weights of noise that carries over about 12 hours
EXPERIMENTS, DRAWS = 200, 200
# Measured on 400 weeks with 500 draws: .97 at 20 replications, .93 to .96 at 40, .49 pointwise. At a true coverage of
# .95 fewer than .90 of 200 has a probability of 1e-3, and the seeds are fixed.
LEAST = 0.90


def weeks(rng, replications, shape=None):
    """Independent weeks of mean 0 whose neighbouring hours go together, (replications, 168).

    shape: of gamma noise (skew 2 / sqrt(shape)); normal without.
    """
    size = (replications, 168)
    noise = rng.normal(size=size) if shape is None else (rng.gamma(shape, size=size) - shape) / np.sqrt(shape)
    return np.fft.irfft(np.fft.rfft(noise) * np.fft.rfft(NEAR), 168)


def coverage(replications, critical, *, shape=None):
    rng, held = np.random.default_rng(21), 0
    for _ in range(EXPERIMENTS):
        values = weeks(rng, replications, shape)
        parts = studentise(values)
        held += np.all(np.abs(parts.mean) <= critical(values, rng) * parts.error)
    return held / EXPERIMENTS


def ours(values, rng):
    return critical_of(values, 0.95, rng, draws=DRAWS)[0]


@pytest.mark.parametrize(("replications", "shape"), [(10, None), (20, None), (40, 1.0)])
def test_bands_hold_all_hours_at_once(replications, shape):
    assert coverage(replications, ours, shape=shape) >= LEAST


def test_planted_bands_of_single_hours_are_caught():
    assert coverage(20, lambda values, rng: critical_value(0.95, 19)) < LEAST - 0.2


def test_bands_are_narrower_than_bonferronis():
    values = weeks(np.random.default_rng(5), 40)
    found, method = critical_of(values, 0.95, np.random.default_rng(6))
    assert method == RESAMPLED
    assert critical_value(0.95, 39) < found < critical_value(0.95, 39, comparisons=168)


def test_one_point_needs_about_students_value():
    values = np.random.default_rng(7).normal(size=(60, 1))
    found, _ = critical_of(values, 0.95, np.random.default_rng(8), draws=20_000)
    assert found == pytest.approx(stats.t.isf(0.025, 59), abs=0.15)


def test_fewer_than_20_replications_and_points_that_hardly_move_get_bonferronis():
    rng = np.random.default_rng(9)
    few = critical_of(weeks(rng, 19), 0.95, rng)
    assert few == (critical_value(0.95, 18, comparisons=168), BONFERRONI)
    rare = weeks(rng, 30)
    rare[:, 5] = np.eye(30)[0]  # moves in one replication only: most resamples are without spread there
    assert critical_of(rare, 0.95, rng) == (critical_value(0.95, 29, comparisons=168), BONFERRONI)


def test_points_that_never_move_need_no_band():
    still = weeks(np.random.default_rng(10), 30)
    still[:, 5] = 2.0
    assert critical_of(still, 0.95, np.random.default_rng(11))[1] == RESAMPLED
    assert critical_of(np.ones((30, 168)), 0.95, np.random.default_rng(11)) == (0.0, RESAMPLED)


SCENARIO = memoryless({"name": "A", "beds": 2, "per_day": 1.0}, {"name": "B", "beds": 3, "per_day": 1.2},
                      run={"measured_days": 28, "warm_up_days": 14, "seed": 3})  # fmt: skip


def found(replications):
    grids = {GRID: week_grid(SCENARIO)}
    return week_of(list(measure_paths(SCENARIO, SCENARIO.policy(), range(replications), grids)), SCENARIO)


def test_the_week_averages_to_the_mean_occupied():
    week = found(5).to_dict()
    sums = unit_sums(records_of(SCENARIO, replications=5), np.array([2.0, 3.0]), 28.0)
    for place, (name, beds) in enumerate({"A": 2, "B": 3}.items()):
        hours = week["hour_of_week"][name]
        assert [one["hour"] for one in hours] == list(range(168))
        assert all(0 <= one["low"] <= one["mean"] <= one["high"] <= beds for one in hours)
        mean = sums["occupied_days"][:, place].mean() / 28
        assert np.mean([one["mean"] for one in hours]) == pytest.approx(mean, rel=1e-9)
    assert week["hour_of_week_basis"]["method"] == {"A": BONFERRONI, "B": BONFERRONI}


def test_the_band_is_the_critical_value_times_the_error():
    values = 50 + weeks(np.random.default_rng(12), 25)
    big = memoryless({"name": "A", "beds": 99, "per_day": 1.0})
    paths = [Path(n, {GRID: Binned(one[None], one[None], one[None])}) for n, one in enumerate(values)]
    band = week_of(paths, big).units["A"]
    error = values.std(axis=0, ddof=1) / 5
    widths = [(one.high - one.low) / 2 for one in band.hours] / error
    assert band.method == RESAMPLED and widths == pytest.approx(np.full(168, widths[0]))
    assert 2.5 < widths[0] < critical_value(0.95, 24, comparisons=168)
    assert week_of(paths[::-1], big) == week_of(paths, big)  # whatever order they came in


def test_one_replication_has_no_band_and_says_so():
    week = found(1)
    assert week.units["A"].method is None
    assert week.units["A"].hours[3].low is None and week.units["A"].hours[3].reason
