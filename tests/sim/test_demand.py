"""The weekly pattern by hand, and arrival times against the unit Poisson process."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from sim.demand import WeeklyPattern, arrival_times

QUIET_WEEKENDS = WeeklyPattern(day_of_week=(1.0, 1.0, 1.0, 1.0, 1.0, 0.5, 0.5))
AFTERNOONS = WeeklyPattern(hour_of_day=(0.0,) * 12 + (3.0,) * 12)
WORKING_HOURS = WeeklyPattern(
    hour_of_day=(0.0,) * 8 + (2.0,) * 9 + (0.0,) * 7, day_of_week=(1.0,) * 5 + (0.0,) * 2
)
UNEVEN = WeeklyPattern(
    hour_of_day=tuple(1.0 + 0.6 * math.sin(2 * math.pi * (hour - 9) / 24) for hour in range(24)),
    day_of_week=(1.3, 1.1, 1.0, 1.0, 1.1, 0.6, 0.5),
)
PATTERNS = [QUIET_WEEKENDS, AFTERNOONS, WORKING_HOURS, UNEVEN]
WEEK = np.arange(168) / 24

each_pattern = pytest.mark.parametrize(
    "pattern", PATTERNS, ids=["weekends", "afternoons", "working hours", "uneven"]
)
weights = st.floats(0.0, 10.0)
patterns = st.builds(
    WeeklyPattern,
    st.none() | st.lists(weights, min_size=24, max_size=24).filter(any).map(tuple),
    st.none() | st.lists(weights, min_size=7, max_size=7).filter(any).map(tuple),
)


def stream(seed):
    """Numbers of one stream, (i + 1/2) / 2^52, however many are asked for at a time."""
    bits = np.random.Philox(seed)
    return lambda n: ((bits.random_raw(n) >> np.uint64(12)).astype(float) + 0.5) * 2.0**-52


# --- the pattern, by hand ----------------------------------------------------------------------------------


def test_quiet_weekends_by_hand():
    # Weights add up to 6 of 7: a weekday has rate 7/6, a weekend day 7/12.
    assert QUIET_WEEKENDS.rate([0.0, 4.999, 5.0, 6.9, 7.0]) == pytest.approx(
        [7 / 6, 7 / 6, 7 / 12, 7 / 12, 7 / 6]
    )
    assert QUIET_WEEKENDS.cumulative([0.0, 1.0, 5.0, 5.5, 7.0, 12.0]) == pytest.approx(
        [0.0, 7 / 6, 35 / 6, 35 / 6 + 7 / 24, 7.0, 7.0 + 35 / 6], rel=1e-14
    )
    assert QUIET_WEEKENDS.inverse([7 / 6, 35 / 6 + 7 / 24, 14 - 7 / 24]) == pytest.approx(
        [1.0, 5.5, 13.5], rel=1e-14
    )


def test_afternoons_by_hand():
    assert AFTERNOONS.rate([0.0, 0.49, 0.5, 0.99, 1.0]) == pytest.approx([0.0, 0.0, 2.0, 2.0, 0.0])
    assert AFTERNOONS.cumulative([0.25, 0.5, 0.75, 1.0, 1.5]) == pytest.approx(
        [0.0, 0.0, 0.5, 1.0, 1.0], rel=1e-14
    )
    assert AFTERNOONS.inverse([0.0, 0.5, 1.5]) == pytest.approx([0.5, 0.75, 1.75], rel=1e-14)


@given(patterns)
def test_a_week_holds_seven_operational_days(pattern):
    assert pattern.cumulative([0.0, 7.0, 21.0]).tolist() == [0.0, 7.0, 21.0]
    assert pattern.rate(WEEK).mean() == pytest.approx(1.0, rel=1e-12)


@each_pattern
def test_cumulative_is_the_integral_of_the_rate(pattern):
    hours = np.concatenate([[0.0], np.cumsum(pattern.rate(np.arange(336) / 24 + 1 / 48)) / 24])
    assert pattern.cumulative(np.arange(337) / 24) == pytest.approx(hours, rel=1e-12, abs=1e-12)


@pytest.mark.parametrize(
    "pattern", [WeeklyPattern(), WeeklyPattern((2.0,) * 24, (0.3,) * 7), WeeklyPattern(None, (5,) * 7)]
)
def test_equal_weights_are_no_pattern_to_the_last_bit(pattern):
    operational = np.random.default_rng(5).random(1000) * 100
    assert pattern.is_constant
    assert np.array_equal(pattern.inverse(operational), operational)
    assert np.array_equal(pattern.cumulative(operational), operational)
    assert np.array_equal(pattern.rate(operational), np.ones(1000))
    plain = arrival_times(stream(11), 2.3, WeeklyPattern(), 50.0)
    assert np.array_equal(arrival_times(stream(11), 2.3, pattern, 50.0), plain)


@each_pattern
def test_uneven_weights_are_a_pattern(pattern):
    assert not pattern.is_constant


# --- the inverse, to the last bit --------------------------------------------------------------------------


def hours_of(times):
    """Hour of the week, found by comparing with the hours' boundaries."""
    boundaries = np.arange(168 * 200 + 1) / 24
    return (np.searchsorted(boundaries, times, side="right") - 1) % 168


@settings(deadline=None)
@given(patterns, st.lists(st.floats(0.0, 1000.0), min_size=1, max_size=20))
def test_inverse_rises_and_keeps_out_of_hours_of_weight_zero(pattern, operational):
    near = np.array([(value, np.nextafter(value, 0.0), np.nextafter(value, 2000.0)) for value in operational])
    operational = np.sort(np.concatenate([near.ravel(), pattern.cumulative(WEEK)]))
    times = pattern.inverse(operational)
    assert np.all(np.diff(times) >= 0.0)
    assert np.all(pattern.rate(times) > 0.0)
    hour, day = hours_of(times) % 24, hours_of(times) // 24
    assert np.all(np.array(pattern.hour_of_day or (1.0,) * 24)[hour] > 0.0)
    assert np.all(np.array(pattern.day_of_week or (1.0,) * 7)[day] > 0.0)
    assert pattern.cumulative(times) == pytest.approx(operational, rel=1e-12, abs=1e-12)


@each_pattern
def test_inverse_never_rounds_past_the_end_of_its_hour(pattern):
    # The last operational moment, one unit in the last place, before the end of every hour of 150 weeks.
    within = pattern.cumulative(np.arange(1, 169) / 24)
    ends = (within + 7.0 * np.arange(150)[:, None]).ravel()
    last, used = pattern.inverse(np.nextafter(ends, 0.0)), np.tile(pattern.rate(WEEK) > 0.0, 150)
    hour = np.arange(168 * 150)
    assert np.all(last[used] < (hour[used] + 1) / 24)
    assert np.all(last[used] >= hour[used] / 24)
    assert np.all(pattern.inverse(ends) >= last)


def test_an_hour_starts_at_the_double_nearest_to_its_boundary():
    hour = np.arange(1, 168 * 150)
    assert np.array_equal(UNEVEN.rate(hour / 24), UNEVEN.rate((hour % 168 + 0.5) / 24))
    assert np.array_equal(
        UNEVEN.rate(np.nextafter(hour / 24, 0.0)), UNEVEN.rate(((hour - 1) % 168 + 0.5) / 24)
    )


@each_pattern
def test_cumulative_rises_to_the_last_bit(pattern):
    boundaries = np.arange(1, 700) / 24
    times = np.sort(
        np.concatenate([boundaries, np.nextafter(boundaries, 0.0), np.nextafter(boundaries, 99.0)])
    )
    assert np.all(np.diff(pattern.cumulative(times)) >= 0.0)


# --- arrival times -----------------------------------------------------------------------------------------


def test_first_arrivals_by_hand():
    # Uniforms exp(-1), exp(-1/2), exp(-2): unit-rate times 1, 3/2, 7/2; at 2 a day operational 1/2, 3/4, 7/4,
    # which fall in the afternoons at 3/4, 7/8 and 15/8.
    numbers = iter(np.exp([-1.0, -0.5, -2.0, -50.0]))
    times = arrival_times(
        lambda n: np.array([next(numbers) for _ in range(n)]), 2.0, AFTERNOONS, 3.0, block=1
    )
    assert times == pytest.approx([0.75, 0.875, 1.875], rel=1e-14)


@each_pattern
@pytest.mark.parametrize("block", [1, 7, 64, 5000])
def test_blocks_change_no_bit(pattern, block):
    expected = arrival_times(stream(3), 3.1, pattern, 200.0)
    assert np.array_equal(arrival_times(stream(3), 3.1, pattern, 200.0, block=block), expected)
    assert expected.size > 500


@each_pattern
def test_a_longer_horizon_only_adds_arrivals(pattern):
    short, long = (arrival_times(stream(4), 1.7, pattern, horizon) for horizon in (30.0, 300.0))
    assert np.array_equal(long[: short.size], short)
    assert short[-1] < 30.0 <= long[short.size]


def test_the_horizon_itself_is_out():
    times = arrival_times(stream(8), 1.0, UNEVEN, 30.0)
    assert np.array_equal(arrival_times(stream(8), 1.0, UNEVEN, float(times[9])), times[:9])


def test_demand_divides_operational_time():
    single, double = (arrival_times(stream(9), per_day, UNEVEN, 100.0) for per_day in (1.5, 3.0))
    operational = -np.log(stream(9)(double.size)).cumsum()
    assert np.array_equal(double, UNEVEN.inverse(operational / 3.0))
    assert np.array_equal(single, UNEVEN.inverse(operational[: single.size] / 1.5))


def test_no_demand_draws_nothing():
    def refuse(n):
        raise AssertionError("a number was drawn")

    assert arrival_times(refuse, 0.0, UNEVEN, 100.0).size == 0


def test_hours_of_weight_zero_get_no_arrivals():
    times = arrival_times(stream(21), 40.0, WORKING_HOURS, 700.0)
    hours = hours_of(times)
    assert set(hours // 24) == set(range(5))
    assert set(hours % 24) == set(range(8, 17))


# Kolmogorov and Smirnov's test (scipy.stats.kstest), fixed seeds, false-alarm rate 0.001 for each p-value. A
# Poisson process in operational time has unit exponential gaps; over whole weeks its points are uniform.


def p_values(times, per_day, pattern):
    operational = pattern.cumulative(times)
    gaps = np.diff(operational, prepend=0.0) * per_day
    return stats.kstest(gaps, "expon").pvalue, stats.kstest(
        operational % 7.0, "uniform", args=(0.0, 7.0)
    ).pvalue


@each_pattern
def test_arrivals_are_poisson_in_operational_time(pattern):
    times = arrival_times(stream(77), 12.0, pattern, 1400.0)
    assert min(p_values(times, 12.0, pattern)) > 0.001
    # The count is Poisson with mean 16,800: within 3.3 standard deviations, false-alarm rate 0.001.
    assert abs(times.size - 16800) < 3.3 * math.sqrt(16800)


@pytest.mark.parametrize("pattern", [QUIET_WEEKENDS, UNEVEN], ids=["weekends", "uneven"])
def test_a_pattern_late_by_a_day_is_caught(pattern):
    late = WeeklyPattern(pattern.hour_of_day, (pattern.day_of_week[-1], *pattern.day_of_week[:-1]))
    times = arrival_times(stream(77), 12.0, late, 1400.0)
    assert max(p_values(times, 12.0, pattern)) < 0.001


def test_arrivals_without_the_pattern_are_caught():
    times = arrival_times(stream(77), 12.0, WeeklyPattern(), 1400.0)
    assert max(p_values(times, 12.0, UNEVEN)) < 0.001


# --- refusals ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "make",
    [
        lambda: WeeklyPattern(hour_of_day=(1.0,) * 23),
        lambda: WeeklyPattern(day_of_week=(1.0,) * 8),
        lambda: WeeklyPattern(day_of_week=()),
        lambda: WeeklyPattern(day_of_week=(0.0,) * 7),
        lambda: WeeklyPattern(day_of_week=(1.0,) * 6 + (-1.0,)),
        lambda: WeeklyPattern(hour_of_day=(1.0,) * 23 + (math.nan,)),
        lambda: arrival_times(stream(1), -1.0, UNEVEN, 10.0),
        lambda: arrival_times(stream(1), math.inf, UNEVEN, 10.0),
        lambda: arrival_times(stream(1), 1.0, UNEVEN, 0.0),
        lambda: arrival_times(stream(1), 1.0, UNEVEN, math.nan),
    ],
)
def test_bad_arguments_are_refused(make):
    with pytest.raises(ValueError, match="need|must"):
        make()


def test_patterns_of_equal_weights_given_as_lists_are_equal():
    assert WeeklyPattern([1] * 24) == WeeklyPattern((1.0,) * 24)
    assert hash(WeeklyPattern([1] * 24)) == hash(WeeklyPattern((1.0,) * 24))
