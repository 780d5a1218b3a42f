"""What is said of a table from replications, by hand: regrets with intervals, and outcomes by profile."""

import math

import numpy as np
import pytest

from analysis.contrasts import evidence_of
from analysis.games import analyse, welfare_estimate
from analysis.goals import TargetGoal, Welfare
from analysis.payoffs import Outcomes, PayoffTable, Profiles
from analysis.sets import regret_bounds

PROFILES = Profiles(("A", "B"), ((3, 5, 8), (4,)))  # B has no choice
COSTS = np.array([[1.0, 2.0, 3.0], [0.0, 1.0, 1.0], [3.0, 3.0, 3.0]])  # of A: (strategies, replications)


def table_of(costs, payoffs=None):
    """A table in which A's costs vary by replication and B's are nought."""
    replicates = np.zeros((costs.shape[1], 2, 3, 1))
    replicates[:, 0, :, 0] = costs.T
    rates = Outcomes(*(np.arange(6.0).reshape(3, 2) + 10 * place for place in range(6)))
    return PayoffTable(
        PROFILES,
        TargetGoal(np.zeros(2), "absolute", 365.0),
        Welfare("throughput"),
        payoffs=replicates.mean(axis=0) if payoffs is None else payoffs,
        welfare=np.array([[4.0], [6.0], [5.0]]),
        outcomes=rates,
        replicates=replicates,
        low=replicates.min(axis=0),
        high=replicates.max(axis=0),
        welfare_replicates=np.array([[[3.0], [6.1], [5.0]], [[4.0], [5.9], [5.2]], [[5.0], [6.0], [4.8]]]),
    )


def students_2(probability):
    """Student's t with 2 degrees of freedom, by its closed form (textbook)."""
    a = 2 * probability - 1
    return a * math.sqrt(2 / (1 - a * a))


LEVEL = 0.025  # of either set, and of either end of a regret, where both together have 95 %


def bounds_of(costs):
    found = regret_bounds(evidence_of(table_of(costs)), LEVEL)
    return found.low[:, :, 0], found.high[:, :, 0]


def test_a_regrets_bounds_are_paired_and_share_the_level_as_they_must():
    """A gains 1, 1, 2 by moving to 5: mean 4/3, standard error 1/3. By moving to 8 it gains -2, -1, 0.

    The upper end is the larger of the gains' upper ends, three profiles sharing the level; at the lower end the two
    deviations share it.
    """
    low, high = bounds_of(COSTS)
    above = students_2(1 - LEVEL / 3)
    assert high[0, 0] == pytest.approx(max(4 / 3 + above / 3, -1 + above / math.sqrt(3)))
    assert low[0, 0] == 0  # 4/3 - students_2(1 - LEVEL / 2) / 3 is below the least that a regret can be


def test_a_regret_that_is_sure_has_a_lower_end_above_nought():
    steady = np.array([[1.0, 2.0, 3.0], [0.5, 1.5, 2.4], [3.0, 3.0, 3.0]])
    half = students_2(1 - LEVEL / 2) * np.std([0.5, 0.5, 0.6], ddof=1) / math.sqrt(3)
    assert bounds_of(steady)[0][0, 0] == pytest.approx(1.6 / 3 - half)


def test_the_plug_in_regret_of_an_equilibrium_is_0_but_its_upper_end_is_not():
    found = {one.profile: one for one in analyse(table_of(COSTS)).equilibria}[1, 0].regret["A"]
    assert found.mean == 0 and found.low == 0 and found.high > 0


def test_the_interval_always_holds_its_point():
    """Pseudo-values may lean away from the plug-in payoffs near a target; the ends make room for it."""
    payoffs = np.zeros((2, 3, 1))
    payoffs[0, :, 0] = [0.01, 0.0, 9.0]
    lean = np.array([[1.0, 1.01, 0.99], [0.5, 0.495, 0.505], [3.0, 3.0, 3.1]])
    found = analyse(table_of(lean, payoffs)).equilibria[0].regret["A"]
    assert found.mean == found.low == pytest.approx(0.01)
    assert found.high == pytest.approx(0.5 + students_2(1 - LEVEL / 3) * 0.015 / math.sqrt(3))


def test_a_player_without_a_choice_regrets_nothing_for_certain():
    found = analyse(table_of(COSTS)).equilibria[0].regret["B"]
    assert (found.mean, found.low, found.high, found.reason) == (0, 0, 0, None)


def test_the_welfare_of_a_profile_by_hand():
    """3, 4, 5 treated a day: mean 4, standard error 1 / sqrt(3)."""
    found = welfare_estimate(table_of(COSTS), (0, 0), 0.95)
    assert found.mean == 4
    assert found.high == pytest.approx(4 + students_2(0.975) / math.sqrt(3))


def test_an_analysis_names_what_it_found_by_thresholds():
    """Three replications exclude nothing; the table's own equilibrium is kept beside."""
    game = analyse(table_of(COSTS))
    assert [one.thresholds for one in game.equilibria] == [{"A": k, "B": 4} for k in (3, 5, 8)]
    assert {(one.kind, one.verdict) for one in game.equilibria} == {("pure", "possible")}
    assert game.possible.all() and not game.confirmed.any() and len(game.undecided) == 3
    assert game.found == ((1, 0),)
    assert not game.is_exact and game.cost.optimum == ((1, 0),)
    assert (
        game.cost.price_of_stability.mean == 1 == game.cost.price_of_anarchy.mean
    )  # of (1, 0), the estimated one
    assert game.cost.is_projected and game.cost.price_of_anarchy.high > 1.5  # of (0, 0), which is possible


def test_one_replication_leaves_point_estimates():
    game = analyse(table_of(COSTS[:, :1]))
    assert game.sets is None and game.possible is None and game.undecided == ()
    assert [(one.profile, one.verdict) for one in game.equilibria] == [((1, 0), "estimated")]


def test_what_happens_at_a_profile_is_its_own_row_by_unit():
    place = analyse(table_of(COSTS)).place((1, 0))
    assert place.thresholds == {"A": 5, "B": 4}
    assert place.turned_away_per_day == {"A": 2, "B": 3}
    assert place.diverted_out_per_day == {"A": 12, "B": 13}
    assert place.throughput_per_day == 22 + 23
    assert place.closed_with_free_bed_fraction == {"A": 42, "B": 43}
    assert place.utilisation == {"A": 52, "B": 53}
