"""Hours of the week in a unit that never fills, against the infinite-server system with a sinusoidal arrival rate.

Source: Eick, Massey & Whitt, "Mt/G/infinity queues with sinusoidal arrival rates", Management Science 39 (1993),
241-252 (abstract read, formulas from memory): a rate L + A sin(g t) and exponential stays of mean S give a mean
occupancy of L S + A S sin(g t - atan(g S)) / sqrt(1 + (g S)^2); for a day's rhythm and a mean of 3 days the factor is
.05297715 and the lag .24156448 days. Demand here is constant within an hour, which leaves of a sinusoid's first
harmonic sin(g/48)/(g/48), as does the mean over an hour; its higher harmonics (23 and more a day) are damped by another
factor of 23 and stay below .02 beds.

False alarms: the band holds all 168 hours with confidence 1 - 1e-6. Planted errors: no rhythm, and one 3 hours late.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

from analysis.hour_of_week import GRID, week_grid, week_of
from analysis.paths import measure_paths
from tests.outside.facts import network, patients_of

PER_DAY, SWING, STAY, REPLICATIONS = 30.0, 0.9, 3.0, 12
FACTOR, LAG_DAYS = 0.05297715, 0.24156448
DAY = 2 * np.pi
HOURS = np.arange(168)
SLACK = 0.02  # beds


def expected(factor=FACTOR, lag=LAG_DAYS):
    """Mean occupied in each hour of the week, (168,)."""
    flattened = (np.sin(DAY / 48) / (DAY / 48)) ** 2
    wave = np.sin(DAY * ((HOURS + 0.5) / 24 - lag))
    return PER_DAY * STAY * (1 + SWING * factor * flattened * wave)


@cache
def simulated():
    hours = list(1 + SWING * np.sin(DAY * (np.arange(24) + 0.5) / 24))
    stay = {"family": "exponential", "mean_days": STAY}
    scenario = network(
        [{"name": "A", "beds": 200}],
        [patients_of("A", PER_DAY, stay, hour_of_day=hours)],
        days=(63, 182),
        seed=31,
    )
    scenario = scenario.with_run(confidence=1 - 1e-6)
    paths = list(measure_paths(scenario, scenario.policy(), range(REPLICATIONS), {GRID: week_grid(scenario)}))
    assert not any(path.grids[GRID].turned_away.any() for path in paths)
    return week_of(paths, scenario).units["A"].hours


def misses(truth):
    return [
        hour for hour, one in enumerate(simulated()) if not one.low - SLACK <= truth[hour] <= one.high + SLACK
    ]


def test_factor_and_lag_are_the_published_formulas():
    assert pytest.approx(1 / np.hypot(1, DAY * STAY), rel=1e-6) == FACTOR
    assert np.arctan(DAY * STAY) / DAY == pytest.approx(LAG_DAYS, rel=1e-6)


def test_every_hour_of_the_week_is_where_theory_has_it():
    assert misses(expected()) == []


def daily_wave(means):
    """The first harmonic of a day over the week's hours, as a complex number."""
    return 2 / 168 * np.asarray(means) @ np.exp(-1j * DAY * (HOURS + 0.5) / 24)


def test_the_wave_of_the_means_is_the_theorys():
    """Its standard error over replications is .05 beds of 4.3; a quarter of a bed is five of them."""
    wave = daily_wave([one.mean for one in simulated()])
    assert abs(wave - daily_wave(expected())) < 0.25


@pytest.mark.parametrize("wrong", [{"factor": 0.0}, {"lag": LAG_DAYS + 0.125}])
def test_planted_no_rhythm_and_a_late_one_are_caught(wrong):
    wave = daily_wave([one.mean for one in simulated()])
    assert abs(wave - daily_wave(expected(**wrong))) > 0.25
