"""A bad year: textbook order statistics, the binomial coverage that they promise, and planted errors."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from analysis.worst_year import places, worst_year, years_needed


def test_the_medians_limits_of_ten_observations_are_the_second_and_the_ninth():
    assert places(10, 0.5, 0.95) == (2, 9)  # any table of nonparametric limits (from memory): confidence .979


def test_the_fewest_years_for_one_in_ten():
    assert years_needed(0.9, 0.95) == 36  # .9 ** 36 = .0225 <= .025 < .9 ** 35
    assert places(36, 0.9, 0.95)[1] == 36 and places(35, 0.9, 0.95)[1] is None


@pytest.mark.parametrize("years", [36, 40, 77, 100, 500])
def test_each_end_errs_with_half_and_is_the_closest_that_does(years):
    low, high = places(years, 0.9, 0.95)
    below = stats.binom(years, 0.9)
    assert below.cdf(low - 1) <= 0.025 < below.cdf(low)
    assert below.sf(high - 1) <= 0.025 < below.sf(high - 2)


def test_too_few_years_say_so():
    found = worst_year(np.arange(12.0), 0.95)
    assert found.mean == 10.0 and found.low is None and found.high is None
    assert "12 years are too few" in found.reason and "36 are needed" in found.reason


def test_values_in_any_order():
    years = np.random.default_rng(1).permutation(100) + 1.0
    found = worst_year(years, 0.95)
    assert (found.mean, found.low, found.high) == (90.0, 84.0, 96.0)


EXPERIMENTS, YEARS = 1000, 50
# At the .95 or more that is promised, fewer than .93 of 1000 has a probability below 3e-3 (binomial).
LEAST = 0.93


def _coverage(limits):
    """How often limits hold the true quantile of a skewed distribution (exponential)."""
    rng, truth = np.random.default_rng(2), -np.log(0.1)
    return np.mean(
        [
            low <= truth <= high
            for low, high in (limits(rng.exponential(size=YEARS)) for _ in range(EXPERIMENTS))
        ]
    )


def test_coverage():
    def limits(years):
        found = worst_year(years, 0.95)
        return found.low, found.high

    assert _coverage(limits) >= LEAST


def test_planted_limits_of_the_mean_are_caught():
    def of_the_mean(years):
        half = 2 * years.std(ddof=1) / np.sqrt(len(years))
        return np.quantile(years, 0.9) - half, np.quantile(years, 0.9) + half

    assert _coverage(of_the_mean) < LEAST
