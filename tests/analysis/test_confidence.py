"""Intervals against tables of Student's t, hand-worked numbers and their own coverage on made-up data.

A coverage check counts how often intervals of 95 % hold a known truth, with a fixed seed. It states the
chance that a correct procedure fails it, and a wrong procedure that must fail it too stands beside it.
"""

import math

import numpy as np
import pytest
from scipy.special import ndtr, ndtri

from analysis.confidence import (
    Estimate,
    critical_value,
    jackknife,
    mean_estimate,
    ratio_estimate,
    standard_error,
    t_quantile,
)

EXPERIMENTS = 4000
FALSE_ALARM = 1e-4  # of each coverage check, two-sided


# ---- Student's t ----


@pytest.mark.parametrize(
    ("probability", "degrees", "expected"),
    [
        (0.95, 9, 1.833113),  # standard tables of Student's t
        (0.975, 9, 2.262157),  # the same
        (1 - 0.05 / 6, 9, 2.933324),  # three intervals at 95 %, Bonferroni (computed)
        (0.975, 1, 12.706205),  # standard tables
        (0.975, 2, 4.302653),  # standard tables
        (0.5, 7, 0.0),
    ],
)
def test_t_quantiles_are_those_of_the_tables(probability, degrees, expected):
    assert t_quantile(probability, degrees) == pytest.approx(expected, abs=1e-6)


def test_critical_values_are_two_sided_and_shared_among_comparisons():
    assert critical_value(0.95, 9) == pytest.approx(2.262157, abs=1e-6)
    assert critical_value(0.90, 9) == pytest.approx(1.833113, abs=1e-6)
    assert critical_value(0.95, 9, comparisons=3) == pytest.approx(2.933324, abs=1e-6)


# ---- by hand ----


def test_the_interval_of_a_mean_by_hand():
    """Values 1, 2, 6: mean 3, variance 7, standard error sqrt(7/3), t.975 with 2 degrees 4.302653."""
    found = mean_estimate(np.array([1.0, 2.0, 6.0]), 0.95)
    half = 4.302653 * math.sqrt(7 / 3)
    assert standard_error(np.array([1.0, 2.0, 6.0])) == pytest.approx(math.sqrt(7 / 3))
    assert found.mean == 3
    assert (found.low, found.high) == (pytest.approx(3 - half, abs=1e-6), pytest.approx(3 + half, abs=1e-6))


def test_the_interval_of_a_ratio_by_hand():
    """Turned away 1, 3, 2 of 10, 20, 30 patients: ratio 6/60, not the mean 11/90 of the three shares.

    Residuals total - ratio * base are 0, 1, -1; over the mean base 20 they are 0, 1/20, -1/20, with standard
    error (1/20) / sqrt(3).
    """
    found = ratio_estimate(np.array([1, 3, 2]), np.array([10, 20, 30]), 0.95)
    half = 4.302653 * 0.05 / math.sqrt(3)
    assert found.mean == pytest.approx(0.1)
    assert found.low == pytest.approx(0.1 - half, abs=1e-6)
    assert found.high == pytest.approx(0.1 + half, abs=1e-6)


def test_a_ratio_over_equal_bases_is_the_mean_of_the_shares():
    totals = np.array([1.0, 4.0, 2.0, 2.0])
    ratio, mean = ratio_estimate(totals, np.full(4, 8.0), 0.9), mean_estimate(totals / 8, 0.9)
    assert (ratio.mean, ratio.low, ratio.high) == pytest.approx((mean.mean, mean.low, mean.high))


def test_more_comparisons_widen_an_interval():
    values = np.arange(10.0)
    one, three = mean_estimate(values, 0.95), mean_estimate(values, 0.95, comparisons=3)
    assert (three.high - three.low) / (one.high - one.low) == pytest.approx(2.933324 / 2.262157, abs=1e-6)


def test_one_replication_gives_no_interval_and_says_why():
    for found in (
        mean_estimate(np.array([4.0]), 0.95),
        ratio_estimate(np.array([4.0]), np.array([1.0]), 0.95),
    ):
        plain = found.to_dict()
        assert plain["mean"] == 4 and plain["low"] is None and plain["high"] is None
        assert plain["reason"] == "one replication gives no interval"


def test_a_share_of_no_patients_is_null_with_a_reason():
    plain = ratio_estimate(np.zeros(3), np.zeros(3), 0.95).to_dict()
    assert plain["mean"] is None and "nothing to take a share of" in plain["reason"]


def test_a_full_estimate_carries_no_reason():
    assert Estimate(1.0, 0.5, 1.5).to_dict() == {"mean": 1.0, "low": 0.5, "high": 1.5}


# ---- jackknife ----


def leave_one_out(statistic, values):
    return np.array([statistic(np.delete(values, place)) for place in range(len(values))])


def test_pseudo_values_of_a_mean_are_the_values():
    """Tukey (1958): a mean's pseudo-values are the observations themselves."""
    values = np.array([2.0, 3.0, 5.0, 11.0])
    assert jackknife(values.mean(), leave_one_out(np.mean, values)) == pytest.approx(values)


def test_the_jackknife_takes_the_bias_out_of_the_plug_in_variance():
    """Textbook: the pseudo-values of the variance with n have the variance with n - 1 as their mean."""
    values = np.array([2.0, 3.0, 5.0, 11.0])
    pseudo = jackknife(np.var(values), leave_one_out(np.var, values))
    assert pseudo.mean() == pytest.approx(np.var(values, ddof=1))


# ---- coverage ----


def covers_as_promised(intervals, truth, promised=0.95):
    """Whether the share of intervals that hold the truth is what was promised, within chance."""
    held = sum(low <= truth <= high for low, high in intervals)
    z = (held - len(intervals) * promised) / math.sqrt(len(intervals) * promised * (1 - promised))
    return abs(z) <= ndtri(1 - FALSE_ALARM / 2)


def means_of(replications, interval, seed):
    """Intervals from experiments of a few normal replications, mean 7."""
    values = np.random.default_rng(seed).normal(7.0, 3.0, (EXPERIMENTS, replications))
    return [interval(row) for row in values]


def students(values):
    found = mean_estimate(values, 0.95)
    return found.low, found.high


def normal_theory(values):
    """The planted error: a normal quantile where Student's belongs."""
    half = ndtri(0.975) * standard_error(values)
    return values.mean() - half, values.mean() + half


@pytest.mark.parametrize("replications", [2, 5, 20])
def test_students_interval_holds_the_mean_as_often_as_promised(replications):
    """False-alarm rate 1e-4 for each number of replications; exact for normal values."""
    assert covers_as_promised(means_of(replications, students, seed=replications), 7.0)


def test_a_normal_quantile_at_five_replications_is_caught():
    assert not covers_as_promised(means_of(5, normal_theory, seed=5), 7.0)


def pairs_of(interval, seed):
    """Intervals for a difference of 1 between two policies that meet the same patients (correlation .9)."""
    rng = np.random.default_rng(seed)
    shared = rng.normal(0, 3, (EXPERIMENTS, 10))
    a, b = shared + rng.normal(8, 1, shared.shape), shared + rng.normal(7, 1, shared.shape)
    return [interval(*rows) for rows in zip(a, b, strict=True)]


def paired(a, b):
    return students(a - b)


def unpaired(a, b):
    """The planted error: two policies on common patients compared as if each had patients of its own."""
    half = critical_value(0.95, 18) * math.hypot(standard_error(a), standard_error(b))
    return a.mean() - b.mean() - half, a.mean() - b.mean() + half


def test_a_paired_difference_holds_the_truth_as_often_as_promised():
    """False-alarm rate 1e-4."""
    assert covers_as_promised(pairs_of(paired, seed=11), 1.0)


def test_an_unpaired_difference_of_paired_runs_is_caught():
    assert not covers_as_promised(pairs_of(unpaired, seed=11), 1.0)


def shares_of(interval, seed):
    """Intervals for a share of .1 turned away, where busy replications turn away more than theirs.

    Patients vary from replication to replication with a coefficient of variation of .4; the share of a
    replication is proportional to them.
    """
    rng = np.random.default_rng(seed)
    patients = rng.gamma(6.25, 1000 / 6.25, (EXPERIMENTS, 60))
    turned_away = 0.1 * patients * patients / (1000 * 1.16)  # E patients^2 = 1000^2 * 1.16
    return [interval(*rows) for rows in zip(turned_away, patients, strict=True)]


def of_ratio(totals, bases):
    found = ratio_estimate(totals, bases, 0.95)
    return found.low, found.high


def mean_of_shares(totals, bases):
    """The planted error: the mean of the replications' shares, which is biased for the long-run share."""
    return students(totals / bases)


def base_taken_as_fixed(totals, bases):
    """Another: the number of patients treated as a constant."""
    return students(totals / bases.mean())


def nearly_covers(intervals, truth):
    """As `covers_as_promised`, less 2 % for the delta method, which is right for many replications only."""
    return any(covers_as_promised(intervals, truth, promised) for promised in (0.93, 0.94, 0.95))


def test_a_ratio_holds_the_long_run_share_as_often_as_promised():
    """False-alarm rate at most 1e-4 where the true coverage is between .93 and .95."""
    assert nearly_covers(shares_of(of_ratio, seed=3), 0.1)


@pytest.mark.parametrize("wrong", [mean_of_shares, base_taken_as_fixed])
def test_wrong_intervals_of_a_ratio_are_caught(wrong):
    assert not nearly_covers(shares_of(wrong, seed=3), 0.1)


def test_the_false_alarm_rate_of_a_coverage_check_is_what_it_says():
    """The check itself: it fails beyond 3.89 standard deviations, by chance once in 10,000 times."""
    assert 2 * ndtr(-ndtri(1 - FALSE_ALARM / 2)) == pytest.approx(FALSE_ALARM)
    edge = ndtri(1 - FALSE_ALARM / 2) * math.sqrt(EXPERIMENTS * 0.95 * 0.05)
    for off, holds in ((0.95 * edge, True), (1.05 * edge, False)):
        held = round(EXPERIMENTS * 0.95 - off)
        intervals = [(0.0, 2.0)] * held + [(2.0, 3.0)] * (EXPERIMENTS - held)
        assert covers_as_promised(intervals, 1.0) == holds
