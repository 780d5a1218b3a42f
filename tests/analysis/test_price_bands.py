"""Prices projected over the possible equilibria: by hand, by coverage, and with errors planted."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from analysis import price_bands
from analysis.anarchy import MAY_BE_NOUGHT, cost_of_selfishness
from analysis.confidence import TIES_ON_FEW, Estimate
from analysis.contrasts import paired_costs
from analysis.equilibria import pure_equilibria
from analysis.price_bands import (
    NONE_POSSIBLE,
    absolute_worth,
    bootstrap_prices,
    difference_band,
    epsilon_price,
    log_worth,
    projected,
    ratio_band,
    resampled_means,
    resampling_weights,
)
from analysis.sets import possible
from analysis.transfer_weights import fewest_set, price_over_weights, weight_interval


def rng(seed=1):
    return np.random.default_rng(seed)


# ---- by hand ----


def test_the_high_end_is_one_comparisons_at_a_quarter_of_the_level():
    welfare = rng().normal(10, 1, (12, 1)) + rng(2).normal(0, 0.1, (12, 3)) + np.array([0.0, 1.0, 0.4])
    worth = log_worth(welfare, "gain", 0.05)
    low, high = projected(worth, np.array([True, False, False]), 0.05, rng(3))
    mean = welfare.mean(axis=0)
    ends = []
    for other in (1, 2):
        influence = welfare[:, other] / mean[other] - welfare[:, 0] / mean[0]
        error = influence.std(ddof=1) / math.sqrt(12)
        ends.append(math.log(mean[other] / mean[0]) + stats.t.isf(0.05 / 4, 11) * error)
    assert high == pytest.approx(max(ends)) and 0 < low < math.log(mean[1] / mean[0])


def test_the_worst_possible_profile_gives_the_high_end_and_the_best_the_low_end():
    welfare = np.array([9.0, 8.0, 10.0, 9.5]) + rng().normal(0, 0.01, (40, 4))
    mask = np.array([True, True, False, True])
    low, high = projected(log_worth(welfare, "gain", 0.05), mask, 0.05, rng())
    assert high == pytest.approx(math.log(10 / 8), abs=0.01) and low == pytest.approx(
        math.log(10 / 9.5), abs=0.01
    )


def test_a_loss_has_the_ratio_the_other_way():
    loss = np.array([2.0, 4.0, 1.0]) + rng().normal(0, 0.01, (40, 3))
    low, high = projected(log_worth(loss, "cost", 0.05), np.array([True, True, False]), 0.05, rng())
    assert (low, high) == (pytest.approx(math.log(2), abs=0.02), pytest.approx(math.log(4), abs=0.02))


def test_a_welfare_that_may_be_nought_gives_no_ratio_but_a_difference():
    loss = np.abs(rng().normal(0, 1, (20, 3))) * np.array([1.0, 1.0, 0.0])
    assert log_worth(loss, "cost", 0.05) is None
    mask = np.array([True, False, False])
    point = Estimate(2.0)
    assert ratio_band(point, None, mask, 0.05, rng()) == Estimate(None, reason=MAY_BE_NOUGHT)
    year = difference_band(Estimate(100.0), absolute_worth(loss, "cost"), mask, 0.05, rng())
    assert 0 <= year.low <= 100 <= year.high


def test_without_a_possible_profile_there_is_a_reason():
    worth = log_worth(np.ones((12, 2)) + rng().normal(0, 0.01, (12, 2)), "gain", 0.05)
    assert ratio_band(Estimate(1.1), worth, np.zeros(2, bool), 0.05, rng()).reason == NONE_POSSIBLE


def test_fewer_than_ten_differences_conclude_nothing():
    """Two profiles differ in three replications only: no low end above 0, whatever their size."""
    welfare = np.full((40, 2), 5.0)
    welfare[:3, 1] = [9.0, 9.1, 9.2]
    assert projected(absolute_worth(welfare, "gain"), np.array([True, False]), 0.05, rng())[0] == 0


def test_cells_that_a_race_left_take_no_part():
    welfare = np.array([9.0, 8.0, 10.0, 99.0]) + rng().normal(0, 0.01, (40, 4))
    welfare[5:, 3] = np.nan
    low, high = projected(absolute_worth(welfare, "gain"), np.array([True, False, False, True]), 0.05, rng())
    assert (low, high) == (pytest.approx(1, abs=0.02), pytest.approx(1, abs=0.02))


def test_confirmed_equilibria_bound_the_prices_within_epsilon():
    welfare = np.array([9.0, 8.0, 10.0, 9.5]) + rng().normal(0, 0.01, (40, 4))
    found = epsilon_price(
        log_worth(welfare, "gain", 0.05), np.array([True, True, False, False]), 0.1, 0.05, rng()
    )
    assert found.confirmed == 2
    assert found.anarchy_at_least == pytest.approx(10 / 8, abs=0.02) and found.anarchy_at_least < 10 / 8
    assert found.stability_at_most == pytest.approx(10 / 9, abs=0.02) and found.stability_at_most > 10 / 9
    none = epsilon_price(log_worth(welfare, "gain", 0.05), np.zeros(4, bool), 0.1, 0.05, rng())
    assert none.anarchy_at_least is None and "confirmed" in none.reason


def test_large_tables_take_bonferroni_and_are_wider(monkeypatch):
    welfare = 5 + rng().normal(0, 0.1, (20, 30))
    welfare[:, 0] -= 0.3
    worth, mask = absolute_worth(welfare, "gain"), np.arange(30) == 0
    by_max_t = projected(worth, mask, 0.05, rng())
    monkeypatch.setattr(price_bands, "MOST_DRAWN", 1)
    plain = projected(worth, mask, 0.05, rng())
    assert plain[0] <= by_max_t[0] and plain[1] == by_max_t[1]
    monkeypatch.setattr(price_bands, "MOST_NUMBERS", 1)
    assert projected(worth, mask, 0.05, rng()) is None


# ---- coverage ----

EXPERIMENTS = 200
LEAST = 0.895  # at a true coverage of .95 fewer of 200 have a probability below 1e-3 (binomial)
# A game of two with three equilibria on the diagonal, near-ties beside them, and welfare that rises along it.
COSTS = np.array(
    [[0.0, 0.004, 0.5, 0.5], [0.003, 0.0, 0.004, 0.5], [0.5, 0.003, 0.0, 0.5], [0.5, 0.5, 0.004, 0.6]]
)
WELFARE = 10 + 0.1 * np.add.outer(np.arange(4), np.arange(4))


def experiments(replications=20):
    """Costs and welfare by replication of independent experiments on the game above."""
    draw = rng(7)
    for _ in range(EXPERIMENTS):
        shared = draw.normal(0, 0.5, (replications, 1, 1))
        noise = draw.normal(0, 0.01, (replications, 2, 4, 4))
        costs = np.stack([COSTS, COSTS.T]) + noise
        yield costs, WELFARE + shared + draw.normal(0, 0.05, (replications, 4, 4)) - 4 * noise[:, 0]


def truth():
    equilibria = pure_equilibria(np.stack([COSTS, COSTS.T]), "cost")
    assert equilibria == [(0, 0), (1, 1), (2, 2)]
    cost = cost_of_selfishness(WELFARE, "gain", equilibria)
    return cost.price_of_anarchy.mean, cost.price_of_stability.mean


@pytest.fixture(scope="module")
def coverages():
    """The share of experiments in which each interval held both true prices (plug-in: that of anarchy)."""
    (anarchy, stability), held = truth(), np.zeros(2)
    for costs, welfare in experiments():
        mask = possible(paired_costs(costs), 0.025, rng(8), draws=400).mask
        low, high = np.exp(projected(log_worth(welfare, "gain", 0.05), mask, 0.05, rng(9), draws=400))
        found = pure_equilibria(costs.mean(axis=0), "cost")
        plug_in = cost_of_selfishness(
            welfare.mean(axis=0), "gain", found, replicates=welfare
        ).price_of_anarchy
        held += [low <= stability <= anarchy <= high, bool(found) and plug_in.low <= anarchy <= plug_in.high]
    return held / EXPERIMENTS


def test_projected_intervals_hold_both_true_prices(coverages):
    assert coverages[0] >= LEAST


def test_the_planted_plug_in_interval_is_caught(coverages):
    assert coverages[1] < LEAST


def _false_low_ends():
    """How often the low end is above 0 where all 40 profiles are worth the same, and the only equilibrium is known."""
    draw, mask = rng(11), np.arange(40) == 0
    ends = [
        projected(absolute_worth(draw.normal(5, 1, (15, 40)), "gain"), mask, 0.2, draw, draws=400)[0]
        for _ in range(300)
    ]
    return float(np.mean(np.array(ends) > 0))


# At a true rate of .05 (a quarter of .2) more than .095 of 300 have a probability below 1e-3 (binomial).
MOST_FALSE = 0.095


def test_the_low_end_is_rarely_above_1_where_nothing_is_lost():
    assert _false_low_ends() <= MOST_FALSE


def test_planted_comparisons_one_at_a_time_are_caught(monkeypatch):
    monkeypatch.setattr(
        price_bands, "critical_max_t", lambda scores, level, *_, degrees, **__: stats.t.isf(level, degrees)
    )
    assert _false_low_ends() > MOST_FALSE


# ---- the bootstrap ----


def test_resampled_means_are_means_of_resamples():
    values = np.arange(6.0).reshape(3, 2)
    weights = np.array([[1, 0, 0], [1 / 3, 1 / 3, 1 / 3], [0, 2 / 3, 1 / 3]])
    assert resampled_means(values, weights)[2] == pytest.approx((2 * values[1] + values[2]) / 3)
    drawn = resampling_weights(rng(), 50, 7)
    assert drawn.shape == (50, 7) and np.allclose(drawn.sum(axis=1), 1) and np.ptp(drawn) > 0


def test_the_bootstrap_selects_equilibria_anew():
    """By hand: in one table (0, 0) is the only equilibrium, in the other (1, 1); without one a table is left out."""
    costs = np.zeros((3, 2, 2, 2))
    costs[0, :, 1, :] = costs[0, :, :, 1] = 1
    costs[1, :, 0, :] = costs[1, :, :, 0] = 1
    costs[2] = [[[1, 0], [0, 1]], [[0, 1], [1, 0]]]
    welfare = np.array([[[4.0, 8], [8, 8]], [[8, 8], [8, 5.0]], [[1, 1], [1, 1]]])
    found = bootstrap_prices(costs, welfare, "gain", 0.9, tolerance=1e-9)
    assert found.without == pytest.approx(1 / 3) and found.price_of_anarchy.mean == pytest.approx(
        (2 + 1.6) / 2
    )


# ---- the weight of a transfer ----


def test_the_turning_weights_interval_closes_on_the_answer_by_hand():
    """0.3 fewer turned away at 1.2 more transfers: 1/4."""
    away = np.array([0.1, 0.4]) + rng().normal(0, 1e-4, (30, 2))
    moved = np.array([1.5, 0.3]) + rng(2).normal(0, 1e-4, (30, 2))
    low, high = weight_interval(away, moved, np.array([False, True]), 0.05, rng())
    assert low < 0.25 < high and high - low < 1e-3


def test_every_profile_that_may_turn_fewest_away_and_every_possible_equilibrium_widen_it():
    away = np.array([0.1, 0.1, 0.4, 0.7]) + rng().normal(0, 1e-3, (30, 4))
    moved = np.array([1.5, 0.9, 0.3, 0.3]) + rng(2).normal(0, 1e-4, (30, 4))
    low, high = weight_interval(away, moved, np.array([False, False, True, True]), 0.05, rng())
    assert low == pytest.approx(0.25, abs=0.01) and high == pytest.approx(
        1.0, abs=0.02
    )  # 0.3/1.2 and 0.6/0.6


def test_transfers_that_may_not_differ_leave_no_high_end():
    away = np.array([0.1, 0.4]) + rng().normal(0, 1e-3, (30, 2))
    moved = np.array([0.31, 0.3]) + rng(2).normal(0, 0.5, (30, 2))
    low, high = weight_interval(away, moved, np.array([False, True]), 0.05, rng())
    assert high is None and low > 0


def test_the_weights_interval_covers():
    """300 experiments at level .2, of which the known equilibrium spends nothing: covers at least .9 - 3.1 x .017."""
    draw, held = rng(5), 0
    away, moved = np.array([0.10, 0.11, 0.4]), np.array([1.5, 1.4, 0.3])
    for _ in range(300):
        a, m = away + draw.normal(0, 0.03, (15, 3)), moved + draw.normal(0, 0.3, (15, 3))
        low, high = weight_interval(a, m, np.array([False, False, True]), 0.2, draw)
        held += low <= 0.25 and (high is None or high >= 0.25)
    assert held / 300 >= 0.845


def test_the_set_of_the_fewest_turned_away_holds_what_cannot_be_told_apart():
    values = np.array([0.1, 0.1, 0.5]) + rng().normal(0, 0.01, (30, 3))
    assert fewest_set(absolute_worth(values, "cost"), 0.05, rng()).tolist() == [0, 1]


def test_the_price_over_weights_by_hand():
    """Turned away 0.1 and 0.4, moved 1.5 and 0.3; the second is the equilibrium. At 1/2 it costs 0.55 to 0.85."""
    rows = price_over_weights(np.array([0.1, 0.4]), np.array([1.5, 0.3]), [(1,)], weights=(0.0, 0.1, 0.5))
    assert [row.price_of_anarchy.mean for row in rows] == pytest.approx([4.0, 0.43 / 0.25, 1.0])
    assert rows[1].lost_per_year.mean == pytest.approx(365 * 0.18)


def test_profiles_that_tie_on_few_replications_have_no_band():
    """Nobody was turned away in any of these few runs, under either rule: that is no proof that nobody ever is."""
    mask, tied = np.array([True, False]), np.tile(rng().normal(5, 1, (9, 1)), 2)
    band = difference_band(Estimate(0.0), absolute_worth(tied, "cost"), mask, 0.05, rng())
    assert band == Estimate(0.0, reason=TIES_ON_FEW)
    enough = np.tile(rng().normal(5, 1, (10, 1)), 2)
    assert difference_band(Estimate(0.0), absolute_worth(enough, "cost"), mask, 0.05, rng()).high == 0
    apart = tied + rng(2).normal(0, 1, (9, 2))
    assert difference_band(Estimate(0.0), absolute_worth(apart, "cost"), mask, 0.05, rng()).high > 0
