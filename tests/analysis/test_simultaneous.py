"""Simultaneous critical values by multipliers: special cases with known answers, coverage, and planted errors."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from analysis import simultaneous
from analysis.simultaneous import critical_max_t, simultaneous_bands, studentise, to_student


def test_one_contrast_gives_students_critical_value():
    values = np.random.default_rng(1).normal(size=(12, 1))
    found = critical_max_t(studentise(values).scores, 0.05, np.random.default_rng(2), draws=100_000)
    assert found == pytest.approx(2.201, abs=0.03)  # t .975 at 11, any printed table


def test_independent_contrasts_give_sidaks_value():
    values = np.random.default_rng(3).normal(size=(400, 20))
    found = critical_max_t(studentise(values).scores, 0.05, np.random.default_rng(4), draws=50_000)
    one = 1 - 0.95 ** (1 / 20)  # Sidak 1967
    assert found == pytest.approx(stats.t.isf(one / 2, 399), abs=0.05)


def test_copies_of_one_contrast_cost_nothing():
    values = np.repeat(np.random.default_rng(5).normal(size=(30, 1)), 50, axis=1)
    found = critical_max_t(studentise(values).scores, 0.05, np.random.default_rng(6), draws=50_000)
    assert found == pytest.approx(stats.t.isf(0.025, 29), abs=0.04)


def test_student_map_keeps_the_tail():
    assert to_student(stats.norm.isf(1e-12), 9) == pytest.approx(stats.t.isf(1e-12, 9), rel=1e-6)


def test_a_contrast_without_spread_has_no_error_and_no_score():
    parts = studentise(np.column_stack([np.full(5, 2.0), np.arange(5.0)]))
    assert parts.error[0] == 0 and not parts.scores[:, 0].any() and parts.mean[0] == 2.0


def test_blocks_of_contrasts_give_what_one_block_gives(monkeypatch):
    scores = studentise(np.random.default_rng(7).normal(size=(10, 30))).scores
    whole = critical_max_t(scores, 0.05, np.random.default_rng(8))
    monkeypatch.setattr(simultaneous, "CELLS_AT_ONCE", 3000)
    assert critical_max_t(scores, 0.05, np.random.default_rng(8)) == pytest.approx(whole, rel=1e-12)


EXPERIMENTS = 400
# At a true coverage of .95 fewer than .913 of 400 has a probability below 1e-3 (binomial); the planted errors
# cover about .83 (no Student map) and .55 (pointwise).
LEAST = 0.913


def _coverage(critical) -> float:
    rng, held = np.random.default_rng(11), 0
    mix = rng.normal(size=(15, 15))
    for _ in range(EXPERIMENTS):
        parts = studentise(rng.normal(size=(10, 15)) @ mix)
        held += np.all(np.abs(parts.mean) <= critical(parts, rng) * parts.error)
    return held / EXPERIMENTS


def test_coverage_at_ten_replications():
    assert _coverage(lambda parts, rng: critical_max_t(parts.scores, 0.05, rng)) >= LEAST


def test_planted_no_student_map_is_caught():
    def unmapped(parts, rng):
        rows = simultaneous.multipliers(rng, 1000, 10)
        return np.quantile(simultaneous.largest(parts.scores, rows, two_sided=True), 0.95)

    assert _coverage(unmapped) < LEAST


def test_planted_pointwise_bands_are_caught():
    assert _coverage(lambda parts, rng: stats.t.isf(0.025, 9)) < LEAST


def test_bands_are_symmetric_around_the_mean():
    values = np.random.default_rng(12).normal(size=(20, 4))
    mean, low, high = simultaneous_bands(values, 0.9, np.random.default_rng(13))
    assert np.allclose(mean - low, high - mean) and np.all(high > mean)
