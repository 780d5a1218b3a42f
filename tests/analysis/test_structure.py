"""What the cells show of a game's structure, against the definitions written out and against what is known.

Theory (from memory): single crossing differences and monotone replies, Milgrom & Shannon, "Monotone
comparative statics" (1994); monotone replies give a least and a greatest pure equilibrium, Topkis,
"Equilibrium points in nonzero-sum n-person submodular games" (1979).
"""

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.equilibria import best_responses, pure_equilibria
from analysis.structure import TOLERANCES, Cells, Structure, cells_of, structure_of
from tests.analysis.planted import monotone, monotone_games, planted, small_network, solved

# A's utilisation by A's strategy (rows) and B's (columns): it rises with B's threshold at one place only.
RISES_ONCE = [[[0.30, 0.25, 0.20], [0.50, 0.45, 0.46]], [[0.3, 0.5, 0.6], [0.2, 0.4, 0.5]]]


def structure(game, **how) -> Structure:
    return structure_of(cells_of(game.table), **how)


@st.composite
def any_games(draw):
    """No structure at all: levels from a short range, so that ties are common."""
    shape = tuple(draw(st.lists(st.integers(1, 3), min_size=2, max_size=3)))
    size = len(shape) * math.prod(shape)
    levels = draw(st.lists(st.integers(0, 4), min_size=size, max_size=size))
    return planted(np.reshape(levels, (len(shape), *shape)) / 4, [0.5] * len(shape))


# ---- single crossing ----


def crosses_once(costs, player):
    """The definition: a higher strategy preferred, weakly or strictly, stays so when others go up."""
    mine = np.moveaxis(costs[player], player, 0)
    every = list(np.ndindex(mine.shape[1:]))
    for low, high in itertools.product(every, every):
        if not all(a <= b for a, b in zip(low, high, strict=True)):
            continue
        for less, more in itertools.combinations(range(len(mine)), 2):
            gain_low = mine[(less, *low)] - mine[(more, *low)]
            gain_high = mine[(less, *high)] - mine[(more, *high)]
            if (gain_low >= 0 > gain_high) or (gain_low > 0 >= gain_high):
                return False
    return True


@settings(max_examples=60, deadline=None, derandomize=True)
@given(st.one_of(any_games(), monotone_games(), monotone_games(least=1)))
def test_where_single_crossing_is_claimed_the_definition_holds(game):
    """Costs are rounded, for a tie must not be broken by a rounding error."""
    if structure(game).single_crossing:
        costs = np.round(game.table.payoffs, 12)
        assert all(crosses_once(costs, player) for player in range(len(costs)))


@settings(max_examples=40, deadline=None, derandomize=True)
@given(monotone_games(least=1))
def test_strict_tables_have_single_crossing_and_so_monotone_replies_and_an_equilibrium(game):
    shown = structure(game)
    assert shown.single_crossing and shown.replies_monotone and shown.promises_equilibrium
    assert shown.here.least is not None and shown.here.greatest is not None


def test_the_definition_can_fail_where_the_claim_is_not_made():
    """On an own plateau below the target the least reply falls, so single crossing does not hold."""
    game = planted([[[0.2, 0.2], [0.4, 0.2]], [[0.5, 0.6], [0.4, 0.5]]], (0.5, 0.5))
    shown = structure(game)
    assert not crosses_once(game.table.payoffs, 0)
    assert not shown.single_crossing and not shown.promises_equilibrium
    assert shown.own.level == 1 and shown.replies.falls == 1


def test_a_planted_rise_in_the_others_threshold_is_found_and_named():
    shown = structure(planted(RISES_ONCE, (0.5, 0.5)))
    assert shown.others.rises == 1 and not shown.single_crossing
    (witness,) = shown.others.failing
    assert (witness.player, witness.lower, witness.upper) == (0, (1, 1), (1, 2))
    assert witness.change == pytest.approx(0.01) and witness == shown.others.most
    assert shown.own.rises == shown.own.comparisons == 3 + 4


@settings(max_examples=60, deadline=None, derandomize=True)
@given(any_games())
def test_every_count_and_witness_is_that_of_a_loop_of_its_own(game):
    """Own steps one at a time; the others' on a grid one axis at a time."""
    shown, utilisation = structure(game), game.table.by_player(game.table.outcomes.utilisation)
    own, others = [], []
    for player, axis in itertools.product(range(len(utilisation)), repeat=2):
        (own if player == axis else others).extend(np.diff(utilisation[player], axis=axis).ravel().tolist())
    for trend, steps in ((shown.own, own), (shown.others, others)):
        signs = [sum(step > 0 for step in steps), steps.count(0), sum(step < 0 for step in steps)]
        assert [trend.rises, trend.level, trend.falls] == signs and trend.comparisons == len(steps)
        for witness in (*trend.failing, *filter(None, (trend.least, trend.most))):
            ends = [utilisation[(witness.player, *profile)] for profile in (witness.lower, witness.upper)]
            assert witness.change == ends[1] - ends[0]
    assert len(shown.own.failing) == min(5, shown.own.level + shown.own.falls)


# ---- replies and the promise ----


@settings(max_examples=60, deadline=None, derandomize=True)
@given(any_games())
def test_replies_are_called_monotone_just_where_no_least_or_greatest_one_falls(game):
    replies = best_responses(game.table.payoffs, "cost")
    falls = any(
        all(a is None or a <= b for a, b in zip(one.others, other.others, strict=True))
        and (min(other.best) < min(one.best) or max(other.best) < max(one.best))
        for one, other in itertools.permutations(replies, 2)
        if one.player == other.player
    )
    assert structure(game).replies_monotone == (not falls)


@pytest.mark.parametrize(
    "utilisation",
    [[[0.2, 0.2], [0.4, 0.2]], [[0.7, 0.6], [0.7, 0.65]]],
    ids=["below the target the least", "above it the greatest"],
)
def test_a_plateau_makes_one_reply_fall(utilisation):
    shown = structure(planted([utilisation, [[0.4, 0.5], [0.4, 0.5]]], (0.5, 0.5)))
    assert shown.replies.falls == 1 and shown.replies.level == 3 and not shown.replies_monotone


@settings(max_examples=150, deadline=None, derandomize=True)
@given(st.one_of(any_games(), monotone_games()))
def test_where_an_equilibrium_is_promised_there_is_one(game):
    if structure(game).promises_equilibrium:
        assert pure_equilibria(game.table.payoffs, "cost")


def test_a_game_without_an_equilibrium_gets_no_promise():
    chase = planted([[[0.5, 0.3], [0.9, 0.5]], [[0.3, 0.5], [0.5, 0.9]]], (0.5, 0.5))
    shown = structure(chase)
    assert not shown.promises_equilibrium and shown.here.equilibria == 0 and shown.here.least is None


def test_some_cells_of_a_table_promise_nothing_of_the_rest():
    """Without the cells that break it, the rule holds on those at hand; the promise is for whole tables only."""
    cells = cells_of(planted(RISES_ONCE, (0.5, 0.5)).table)
    kept = ~((cells.profiles[:, 0] == 1) & (cells.profiles[:, 1] == 2))
    some = structure_of(chosen(cells, np.flatnonzero(kept)))
    assert some.single_crossing and not some.is_complete and not some.promises_equilibrium
    assert (some.cells, some.of_cells) == (5, 6)


def chosen(cells: Cells, rows) -> Cells:
    parts = {name: getattr(cells, name)[rows] for name in ("profiles", "utilisation", "costs", "welfare")}
    return replace(cells, **parts)


def test_pairs_that_are_no_neighbours_are_compared_where_cells_are_missing():
    """A keeps its threshold while B and C both open, one cell to the other: the rise between them is seen."""
    flat = np.full((1, 2, 2), 0.5)
    rising = flat + [[[0.0, 0.0], [0.0, 0.1]]]
    cells = cells_of(planted([rising, flat, flat], (0.5, 0.5, 0.5)).table)
    some = structure_of(chosen(cells, [3, 0]))
    assert some.others.rises == some.others.comparisons == 1
    assert some.others.most.change == pytest.approx(0.1)
    assert (some.others.most.lower, some.others.most.upper) == ((0, 0, 0), (0, 1, 1))


def test_the_order_of_the_cells_changes_nothing():
    rng = np.random.default_rng(4)
    game = planted(monotone(rng.integers(0, 3, (3, 3, 4, 3)).astype(float)), (0.4, 0.5, 0.6))
    cells = cells_of(game.table)
    one, other = structure_of(cells), structure_of(chosen(cells, rng.permutation(36)))
    for trend in ("own", "others", "replies"):
        for count in ("comparisons", "rises", "level", "falls"):
            assert getattr(getattr(one, trend), count) == getattr(getattr(other, trend), count)
    assert one.at_tolerances == other.at_tolerances


# ---- ties and tolerances ----


def test_the_number_of_equilibria_over_tolerances_where_payoffs_tie():
    """A alone decides: two exact ties (0.25 and 0.75 around 0.5) and others worse by 5e-10, 5e-7, 5e-5, 5e-4."""
    worse = [0, 5e-10, 5e-7, 5e-5, 5e-4]
    utilisation = [*sorted(0.25 - step for step in worse), 0.75]
    admitted = [[10.0 + place] for place in range(5)] + [[20.0]]
    shown = structure(planted([[[u] for u in utilisation], [[0.5]] * 6], (0.5, 0.5), admitted))
    assert tuple(one.tolerance for one in shown.at_tolerances) == TOLERANCES
    assert [one.equilibria for one in shown.at_tolerances] == [2, 3, 4, 5, 6]
    prices = [one.price_of_anarchy.mean for one in shown.at_tolerances]
    assert prices == pytest.approx([20 / 14, 20 / 13, 20 / 12, 20 / 11, 20 / 10])
    assert [one.least for one in shown.at_tolerances] == [(4, 0), (3, 0), (2, 0), (1, 0), (0, 0)]
    assert {one.greatest for one in shown.at_tolerances} == {(5, 0)}


def test_a_tolerance_of_the_games_own_is_listed_with_the_others():
    shown = structure(planted(RISES_ONCE, (0.5, 0.5)), tolerance=0.05)
    assert [one.tolerance for one in shown.at_tolerances] == [*TOLERANCES, 0.05]
    assert shown.here.tolerance == 0.05 and shown.here.equilibria >= shown.at_tolerances[0].equilibria


def test_a_rise_within_the_tolerance_is_no_strict_rise():
    game = planted([[[0.4], [0.4 + 5e-4]], [[0.5], [0.5]]], (0.5, 0.5))
    assert structure(game).own.rises == 1
    assert structure(game, tolerance=1e-3).own.level == 1


def test_two_equilibria_that_no_single_one_bounds_have_no_least_and_no_greatest():
    game = planted([[[0.9, 0.5], [0.5, 0.9]], [[0.9, 0.5], [0.5, 0.9]]], (0.5, 0.5))
    assert pure_equilibria(game.table.payoffs, "cost") == [(0, 1), (1, 0)]
    here = structure(game).here
    assert here.equilibria == 2 and here.least is None and here.greatest is None


# ---- what is known of such networks ----


@pytest.mark.parametrize("resort", ["turned_away", "home_bed"])
def test_networks_without_soft_closure_have_single_crossing(resort):
    shown = structure(solved(small_network((4, 5), (1.2, 1.5), (0.5, 0.6), resort)))
    assert shown.single_crossing and shown.promises_equilibrium and shown.is_complete


def price(resort, demand, targets):
    beds = (5, 7)
    per_day = tuple(demand * b / 2.0 for b in beds)  # at demand 1 as many patients as fill every bed
    shown = structure(solved(small_network(beds, per_day, targets, resort)))
    return shown.here.price_of_anarchy.mean


def test_under_home_bed_the_price_of_anarchy_over_demand_has_a_hump():
    """At low demand no closure pays; at the highest every bed is full whatever the thresholds, so 1 again."""
    low, *hump, vast = (price("home_bed", d, (0.7, 0.7)) for d in (0.4, 0.8, 1.0, 1.4, 2.0, 3.0, 200.0))
    assert low == pytest.approx(1, abs=1e-9)
    assert 1.01 < hump[0] < hump[1]  # rises ...
    assert all(a > b for a, b in itertools.pairwise(hump[1:]))  # ... and falls
    assert hump[1] - 1 < 3 * (hump[-1] - 1)  # slowly: at three times the demand a third is left
    assert vast == pytest.approx(1, abs=1e-3)


def test_under_turned_away_the_price_of_anarchy_rises_to_a_plateau_that_is_known():
    """With every open bed taken, a unit's utilisation is threshold / beds: 3 of 5 and 4 of 7 are nearest to 0.6.

    Patients treated are then the open beds over the mean stay: 12 with all open, 7 at the equilibrium (by hand).
    """
    prices = [price("turned_away", d, (0.6, 0.6)) for d in (0.4, 0.8, 1.0, 1.4, 2.0, 3.0, 4.0)]
    assert prices[0] == pytest.approx(1, abs=1e-9) and prices[1] > 1.05
    assert all(a <= b for a, b in itertools.pairwise(prices))
    assert prices[-1] - prices[-2] < 0.01 < prices[2] - prices[1]
    assert price("turned_away", 2000.0, (0.6, 0.6)) == pytest.approx(12 / 7, rel=1e-3)


def test_under_any_bed_with_equal_stays_it_is_1_at_any_demand():
    prices = [price("any_bed", demand, (0.6, 0.7)) for demand in (0.4, 0.8, 1.2, 2.0)]
    assert prices == pytest.approx([1, 1, 1, 1], abs=1e-9)
