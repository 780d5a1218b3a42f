"""The cost of selfishness against games whose prices of anarchy and stability are known.

Values marked "from memory" were recalled, not read; those marked "computed" were worked out apart from this
project.
"""

import itertools
import math
from collections import Counter

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.anarchy import NO_EQUILIBRIUM, NOT_POSITIVE, cost_of_selfishness, turning_weight
from analysis.equilibria import pure_equilibria
from tests.analysis.builders import table

T_975_2 = 4.302653  # Student's t, 2 degrees of freedom, .975 (standard tables)


def social_cost(payoffs, sense, welfare=None):
    """The cost of the game's pure equilibria, with the sum of the payoffs as welfare."""
    welfare = payoffs.sum(axis=0) if welfare is None else welfare
    return cost_of_selfishness(welfare, sense, pure_equilibria(payoffs, sense))


# ---- games with known prices ----


def test_the_prisoners_dilemma_costs_twice_the_optimum():
    """Nisan, Roughgarden, Tardos and Vazirani (2007), figure 1.1 (from memory): 8 years in all against 4."""
    cost = social_cost(np.array([[[2, 5], [1, 4]], [[2, 1], [5, 4]]]), "cost")
    assert cost.optimum == ((0, 0),)
    assert cost.worst == cost.best == (1, 1)
    assert cost.price_of_anarchy.mean == cost.price_of_stability.mean == 2
    assert cost.lost_per_year.mean == 365 * 4


def test_minimum_effort_has_a_price_of_anarchy_of_13_sevenths_and_of_stability_of_1():
    """Van Huyck, Battalio and Beil (1990; from memory), two players, efforts 1 to 7, in gains."""
    game = table((7, 7), lambda a, b: [0.2 * (min(a, b) + 1) - 0.1 * (own + 1) + 0.6 for own in (a, b)])
    cost = social_cost(game, "gain")
    assert cost.worst == (0, 0) and cost.best == (6, 6)
    assert cost.price_of_anarchy.mean == pytest.approx(13 / 7, abs=1e-12)
    assert cost.price_of_stability.mean == pytest.approx(1, abs=1e-12)


def pigou(travellers, degree=1):
    """A slow road that takes 1, and a fast one that takes (share of travellers on it) ** degree."""

    def costs(*roads):
        fast = (roads.count(0) / len(roads)) ** degree
        return [fast if road == 0 else 1.0 for road in roads]

    return table((2,) * travellers, costs)


def test_pigous_price_of_anarchy_tends_to_4_thirds():
    """Roughgarden and Tardos, "How bad is selfish routing?" (2002): at most 4/3 for linear latencies."""
    prices = {n: social_cost(pigou(n), "cost").price_of_anarchy.mean for n in (1, 3, 5, 9, 10)}
    assert prices[1] == 1 and prices[3] == pytest.approx(9 / 7)
    assert prices[1] < prices[3] < prices[5] < prices[9] < 4 / 3
    assert prices[10] == pytest.approx(4 / 3, abs=1e-12)  # an even number can split as the optimum asks


def test_pigous_price_of_anarchy_grows_with_the_degree():
    """Roughgarden (2003), degree 2: 1.625752 (from memory, and computed), with a continuum of travellers."""
    assert social_cost(pigou(12, degree=2), "cost").price_of_anarchy.mean == pytest.approx(1.625752, abs=1e-3)


@pytest.mark.parametrize(("machines", "jobs"), [(2, (2, 2, 1, 1)), (3, (3, 3, 1, 1, 1, 1, 1, 1))])
def test_balancing_loads_on_equal_machines_costs_at_most_2_less_2_over_m_plus_1(machines, jobs):
    """Finn and Horowitz (1979; from memory): worst equilibrium over the least makespan."""
    loads = table((machines,) * len(jobs), lambda *chosen: [load_of(chosen, jobs)[place] for place in chosen])
    cost = social_cost(loads, "cost", welfare=loads.max(axis=0))
    assert cost.price_of_anarchy.mean == pytest.approx(2 - 2 / (machines + 1), abs=1e-12)
    assert cost.price_of_stability.mean == 1


def load_of(chosen, jobs):
    loads = Counter()
    for machine, job in zip(chosen, jobs, strict=True):
        loads[machine] += job
    return loads


def test_three_players_of_an_affine_congestion_game_reach_5_halves():
    """Christodoulou and Koutsoupias (2005), Awerbuch, Azar and Epstein (2005): 5/2 is attained (from memory).

    Player i takes {h_i, g_i} or {h_i-1, h_i+1, g_i+1}; a facility costs the number of players on it.
    """

    def costs(*ways):
        taken = [
            [f"h{i}", f"g{i}"] if way == 0 else [f"h{(i - 1) % 3}", f"h{(i + 1) % 3}", f"g{(i + 1) % 3}"]
            for i, way in enumerate(ways)
        ]
        load = Counter(itertools.chain(*taken))
        return [sum(load[facility] for facility in mine) for mine in taken]

    cost = social_cost(table((2, 2, 2), costs), "cost")
    assert cost.optimum == ((0, 0, 0),) and cost.worst == (1, 1, 1)
    assert cost.price_of_anarchy.mean == 2.5 and cost.price_of_stability.mean == 1


# ---- by hand ----


def test_every_tie_of_the_optimum_is_listed():
    welfare = np.array([[5.0, 3.0], [5.0 - 5e-10, 4.0]])
    cost = cost_of_selfishness(welfare, "gain", [(1, 1), (0, 1)])
    assert cost.optimum == ((0, 0), (1, 0))
    assert (cost.worst, cost.best) == ((0, 1), (1, 1))
    assert cost.price_of_anarchy.mean == 5 / 3 and cost.price_of_stability.mean == 5 / 4
    assert cost.lost_per_year.mean == 365 * 2


def test_a_tie_that_is_worse_by_a_rounding_error_never_lowers_a_price_below_1():
    welfare = np.array([5.0 - 5e-10, 5.0])
    cost = cost_of_selfishness(welfare, "gain", [(1,)])
    assert cost.optimum == ((0,), (1,))
    assert cost.price_of_anarchy.mean == 1 and cost.lost_per_year.mean == 0


def test_a_loss_counts_the_other_way():
    loss = np.array([[0.5, 0.8], [0.2, 0.6]])
    cost = cost_of_selfishness(loss, "cost", [(0, 0), (0, 1)])
    assert cost.optimum == ((1, 0),) and (cost.worst, cost.best) == ((0, 1), (0, 0))
    assert cost.price_of_anarchy.mean == pytest.approx(4)
    assert cost.price_of_stability.mean == pytest.approx(2.5)
    assert cost.lost_per_year.mean == pytest.approx(365 * 0.6)


def test_without_an_equilibrium_there_is_no_price_but_a_reason():
    cost = cost_of_selfishness(np.ones((2, 2)), "gain", [])
    assert cost.worst is None and cost.best is None and len(cost.optimum) == 4
    for number in (cost.price_of_anarchy, cost.price_of_stability, cost.lost_per_year):
        assert number.to_dict() == {"mean": None, "low": None, "high": None, "reason": NO_EQUILIBRIUM}


@pytest.mark.parametrize("best", [0.0, -1.0])
def test_a_welfare_not_above_0_gives_no_ratio_but_the_patients_lost(best):
    cost = cost_of_selfishness(np.array([best, 0.25]), "cost", [(1,)])
    assert cost.price_of_anarchy.mean is None and cost.price_of_anarchy.reason == NOT_POSITIVE
    assert cost.lost_per_year.mean == 365 * (0.25 - best)


@given(
    st.lists(st.floats(0.1, 10), min_size=2, max_size=12),
    st.sampled_from(["gain", "cost"]),
    st.data(),
)
def test_prices_are_at_least_1_and_anarchy_costs_no_less_than_stability(welfare, sense, data):
    equilibria = data.draw(st.lists(st.integers(0, len(welfare) - 1), min_size=1, unique=True))
    cost = cost_of_selfishness(np.array(welfare), sense, [(place,) for place in equilibria])
    assert cost.price_of_anarchy.mean >= cost.price_of_stability.mean >= 1
    assert cost.lost_per_year.mean >= 0


# ---- intervals from replications ----

REPLICATES = np.array([[10.0, 9.0], [12.0, 10.0], [14.0, 14.0]])  # (replications, profiles)


def test_patients_lost_have_a_paired_interval():
    """By hand: the differences 1, 2 and 0 a day have mean 1 and standard error 1 / sqrt(3)."""
    cost = cost_of_selfishness(REPLICATES.mean(axis=0), "gain", [(1,)], replicates=REPLICATES)
    half = T_975_2 / math.sqrt(3)
    assert cost.lost_per_year.mean == pytest.approx(365)
    assert cost.lost_per_year.low == pytest.approx(365 * (1 - half), rel=1e-6)
    assert cost.lost_per_year.high == pytest.approx(365 * (1 + half), rel=1e-6)


def test_what_both_profiles_share_is_not_in_the_interval():
    """Only the profiles' difference is uncertain: a shared swing of the demand, however wide, cancels."""
    swing = np.array([[-5.0], [0.0], [5.0]])
    steady = np.array([[12.0, 11.0]] * 3)
    cost = cost_of_selfishness(np.array([12.0, 11.0]), "gain", [(1,)], replicates=steady + swing)
    assert (cost.lost_per_year.low, cost.lost_per_year.high) == (365, 365)


def test_the_price_of_anarchy_has_a_paired_interval_on_the_log_scale():
    """By hand: influence values best/12 - worst/11, their standard error, and the ends 12/11 exp(-+ t se)."""
    influence = [10 / 12 - 9 / 11, 12 / 12 - 10 / 11, 14 / 12 - 14 / 11]
    mean = sum(influence) / 3
    error = math.sqrt(sum((one - mean) ** 2 for one in influence) / 2 / 3)
    price = cost_of_selfishness(
        REPLICATES.mean(axis=0), "gain", [(1,)], replicates=REPLICATES
    ).price_of_anarchy
    assert price.mean == pytest.approx(12 / 11)
    assert price.low == 1  # 12/11 exp(-t se) is below the least that a price can be
    assert price.high == pytest.approx(12 / 11 * math.exp(T_975_2 * error), rel=1e-6)


def test_a_price_far_above_1_keeps_both_ends():
    replicates = np.array([[20.0, 9.9], [22.0, 11.0], [24.0, 12.1]])
    price = cost_of_selfishness(
        replicates.mean(axis=0), "gain", [(1,)], replicates=replicates
    ).price_of_anarchy
    influence = [20 / 22 - 9.9 / 11, 0.0, 24 / 22 - 12.1 / 11]
    error = math.sqrt(sum(one**2 for one in influence) / 2 / 3)
    assert price.mean == pytest.approx(2)
    assert price.low == pytest.approx(2 * math.exp(-T_975_2 * error), rel=1e-6)


def test_one_replication_gives_a_price_without_an_interval_and_says_why():
    cost = cost_of_selfishness(REPLICATES[0], "gain", [(1,)], replicates=REPLICATES[:1])
    for number in (cost.price_of_anarchy, cost.price_of_stability, cost.lost_per_year):
        assert number.mean is not None and number.low is None and number.high is None
        assert "one replication" in number.reason


# ---- the transfer weight at which the verdict turns ----


def test_the_verdict_turns_where_patients_saved_equal_transfers_added():
    """By hand: the best profile turns 0.3 fewer away at 1.2 more transfers, so it wins below 1/4."""
    turned_away, transfers = np.array([0.1, 0.4]), np.array([1.5, 0.3])
    weight = turning_weight(turned_away, transfers, (1,)).weight
    assert weight == pytest.approx(0.25)
    for sure, best_profile in ((weight - 0.01, 0), (weight + 0.01, 1)):
        assert np.argmin(turned_away + sure * transfers) == best_profile


def test_of_profiles_that_turn_equally_few_away_the_one_with_fewest_transfers_is_judged():
    turned_away, transfers = np.array([[0.1, 0.1], [0.5, 0.4]]), np.array([[9.0, 0.7], [0.0, 0.1]])
    assert turning_weight(turned_away, transfers, (1, 1)).weight == pytest.approx(0.3 / 0.6)


@pytest.mark.parametrize(
    ("turned_away", "transfers", "worst", "reason"),
    [
        ([0.1, 0.4], [1.5, 0.3], None, "no equilibrium"),
        ([0.1, 0.1], [0.2, 0.9], (1,), "no more patients away"),
        ([0.1, 0.4], [0.3, 0.3], (1,), "better at any weight"),
    ],
)
def test_where_no_weight_turns_the_verdict_the_reason_is_given(turned_away, transfers, worst, reason):
    turning = turning_weight(np.array(turned_away), np.array(transfers), worst)
    assert turning.weight is None and reason in turning.reason
