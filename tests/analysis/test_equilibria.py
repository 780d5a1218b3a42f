"""Regret, best responses and pure equilibria against games whose answers are known.

Values marked "from memory" were recalled, not read; those marked "computed" were worked out apart from this
project. A game is written as a function of the strategies that the players choose.
"""

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.equilibria import as_costs, best_responses, deviations, pure_equilibria, regrets
from tests.analysis.builders import table


def bimatrix(*rows):
    """Payoffs of two players from rows of pairs (row player, column player)."""
    return np.moveaxis(np.array(rows, float), -1, 0)


# ---- games with known pure equilibria ----


def test_the_prisoners_dilemma_has_both_defecting_as_its_only_equilibrium():
    """Nisan, Roughgarden, Tardos and Vazirani, Algorithmic Game Theory (2007), figure 1.1 (from memory)."""
    dilemma = bimatrix([(2, 2), (5, 1)], [(1, 5), (4, 4)])  # strategies: cooperate, defect
    assert pure_equilibria(dilemma, "cost") == [(1, 1)]
    assert regrets(dilemma, "cost")[:, 0, 0].tolist() == [1, 1]  # from 2 to 1 by defecting alone


def test_the_sense_of_the_payoffs_turns_the_answer():
    """The same numbers read as gains: now the first strategy is the better one whatever the other does."""
    dilemma = bimatrix([(2, 2), (5, 1)], [(1, 5), (4, 4)])
    assert pure_equilibria(dilemma, "gain") == [(0, 0)]
    assert pure_equilibria(-dilemma, "gain") == pure_equilibria(dilemma, "cost")
    assert np.array_equal(as_costs(dilemma, "gain"), -dilemma)


def test_matching_pennies_has_no_pure_equilibrium():
    """Textbook; one player wins 1 where the pennies match, the other where they do not."""
    assert pure_equilibria(bimatrix([(1, -1), (-1, 1)], [(-1, 1), (1, -1)]), "gain") == []


def test_the_battle_of_the_sexes_has_two_pure_equilibria():
    """Nau, Gomez Canovas and Hansen, "On the geometry of Nash equilibria and correlated equilibria" (2004).

    Section 3: the pure ones are top left and bottom right.
    """
    assert pure_equilibria(bimatrix([(3, 2), (0, 0)], [(0, 0), (2, 3)]), "gain") == [(0, 0), (1, 1)]


def test_the_pure_ones_of_the_game_with_nine_equilibria():
    """McKelvey and McLennan, "Computation of equilibria in finite games" (1996): 3 players, 2 choices each.

    Of its nine equilibria four are pure: all choose the first strategy, or exactly one player does.
    """
    gains = {(0, 0, 0): (9, 8, 12), (1, 1, 0): (9, 8, 2), (0, 1, 1): (3, 4, 6), (1, 0, 1): (3, 4, 4)}
    game = table((2, 2, 2), lambda *profile: gains.get(profile, (0, 0, 0)))
    assert pure_equilibria(game, "gain") == [(0, 0, 0), (0, 1, 1), (1, 0, 1), (1, 1, 0)]


def test_jordans_three_player_matching_pennies_has_no_pure_equilibrium():
    """Jordan, "Three problems in learning mixed-strategy Nash equilibria" (1993; from memory).

    The first wants to match the second, the second the third, and the third to differ from the first.
    """
    game = table((2, 2, 2), lambda a, b, c: (a == b, b == c, c != a))
    assert pure_equilibria(game, "gain") == []


def test_a_three_player_game_with_one_irrational_equilibrium_has_no_pure_one():
    """Nau, Gomez Canovas and Hansen (2004), section 4; profiles listed with the first player fastest."""
    listed = [(3, 0, 2), (0, 1, 0), (0, 2, 0), (1, 0, 0), (1, 0, 0), (0, 3, 0), (0, 1, 0), (2, 0, 3)]
    game = table((2, 2, 2), lambda a, b, c: listed[a + 2 * b + 4 * c])
    assert pure_equilibria(game, "gain") == []


@pytest.mark.parametrize(
    ("intercept", "unit_cost", "grid", "expected"),
    [
        (120, 0, range(121), [(39, 41), (40, 40), (41, 39), (119, 119), (119, 120), (120, 119), (120, 120)]),
        (100, 10, range(91), [(29, 31), (30, 30), (31, 29)]),
        (
            120,
            0,
            range(0, 121, 10),
            [(30, 50), (40, 40), (50, 30), (110, 110), (110, 120), (120, 110), (120, 120)],
        ),
    ],
    ids=["price 120 - Q", "price 100 - Q at cost 10", "grid of ten"],
)
def test_cournots_duopoly_on_a_grid_has_ties_that_the_continuous_one_has_not(
    intercept, unit_cost, grid, expected
):
    """Cournot's duopoly with whole quantities (computed): ties beside the textbook's one equilibrium.

    A price does not fall below 0, so both flooding the market is a degenerate equilibrium where a flood costs
    nothing.
    """
    quantities = list(grid)

    def profits(a, b):
        price = max(intercept - quantities[a] - quantities[b], 0)
        return (price - unit_cost) * quantities[a], (price - unit_cost) * quantities[b]

    game = table((len(quantities),) * 2, profits)
    found = [tuple(quantities[place] for place in profile) for profile in pure_equilibria(game, "gain")]
    assert found == expected


def test_the_minimum_effort_game_has_seven_strict_equilibria():
    """Van Huyck, Battalio and Beil, "Tacit coordination games" (1990; from memory): here two players."""
    game = table((7, 7), lambda a, b: [0.2 * (min(a, b) + 1) - 0.1 * (own + 1) + 0.6 for own in (a, b)])
    assert pure_equilibria(game, "gain") == [(effort, effort) for effort in range(7)]
    assert all(
        len(reply.best) == 1 for reply in best_responses(game, "gain")
    )  # strict: no other reply is as good
    assert [round(float(game[0, e, e]), 9) for e in range(7)] == [0.7, 0.8, 0.9, 1.0, 1.1, 1.2, 1.3]


def test_the_six_drivers_of_braess_gain_nothing_alone():
    """Braess's network (1968) with whole drivers: links a(x) = 10x and 50 + x, a short cut 10 + x; 6 drivers.

    Known (from memory): without the short cut three drivers go each way at 83 minutes each; with it two use
    each of the three ways, at 92 minutes.
    """

    def minutes(*ways):
        upper, lower, short = (ways.count(way) for way in range(3))
        first, last = 10 * (upper + short), 10 * (lower + short)
        cost = (first + 50 + upper, 50 + lower + last, first + 10 + short + last)
        return [cost[way] for way in ways]

    without = table((2,) * 6, minutes)
    found = pure_equilibria(without, "cost")
    assert {profile.count(0) for profile in found} == {3}
    assert {float(without[player][profile]) for profile in found for player in range(6)} == {83}
    with_short_cut = table((3,) * 6, minutes)
    found = pure_equilibria(with_short_cut, "cost")
    assert {tuple(profile.count(way) for way in range(3)) for profile in found} == {(2, 2, 2)}
    assert {float(with_short_cut[player][profile]) for profile in found for player in range(6)} == {92}


# ---- ties and tolerance ----


def test_the_tolerance_is_inclusive_and_absolute():
    game = bimatrix([(1.0, 0.0)], [(0.75, 0.0)])  # the row player's first strategy costs a quarter more
    assert pure_equilibria(game, "cost", tolerance=0.25) == [(0, 0), (1, 0)]
    assert pure_equilibria(game, "cost", tolerance=np.nextafter(0.25, 0)) == [(1, 0)]
    assert pure_equilibria(1000 * game, "cost", tolerance=0.25) == [(1, 0)]


def test_the_default_tolerance_forgives_rounding_only():
    assert pure_equilibria(bimatrix([(0.1 + 0.2, 0.0)], [(0.3, 0.0)]), "cost") == [(0, 0), (1, 0)]
    assert pure_equilibria(bimatrix([(0.3 + 1e-8, 0.0)], [(0.3, 0.0)]), "cost") == [(1, 0)]


def test_best_responses_list_every_tie_and_name_the_others_choices():
    game = table((2, 3, 2), lambda a, b, c: (0, abs(b - 1) * c, a + c))
    replies = best_responses(game, "cost")
    first = [reply for reply in replies if reply.player == 0]
    assert [reply.others for reply in first] == [(None, b, c) for b in range(3) for c in range(2)]
    assert {reply.best for reply in first} == {(0, 1)}
    second = {reply.others: reply.best for reply in replies if reply.player == 1}
    assert second == {(a, None, c): (0, 1, 2) if c == 0 else (1,) for a in range(2) for c in range(2)}
    third = {reply.others: reply.best for reply in replies if reply.player == 2}
    assert third == {(a, b, None): (0,) for a in range(2) for b in range(3)}


def test_best_responses_take_the_tolerance_inclusively_too():
    game = table((2, 1), lambda a, b: (0.25 * a, 0))
    for tolerance, best in ((0.0, (0,)), (0.25, (0, 1))):
        first = best_responses(game, "cost", tolerance=tolerance)[0]
        assert (first.player, first.others, first.best) == (0, (None, 0), best)
    tied = table((2, 1), lambda a, b: (1, 0))
    assert best_responses(tied, "cost", tolerance=0)[0].best == (0, 1)


def test_a_player_with_one_strategy_has_no_regret():
    game = table((1, 3), lambda a, b: (7, b))
    assert regrets(game, "cost")[0].tolist() == [[0, 0, 0]]
    assert pure_equilibria(game, "cost") == [(0, 0)]
    assert deviations((0, 0), 0, 1) == []


# ---- properties ----

SHAPES = st.lists(st.integers(1, 4), min_size=1, max_size=3)
SENSES = st.sampled_from(["cost", "gain"])


@st.composite
def games(draw):
    """Tables of whole numbers from a short range, so that ties are common."""
    shape = tuple(draw(SHAPES))
    count = len(shape) * int(np.prod(shape))
    return np.reshape(
        draw(st.lists(st.integers(-3, 3), min_size=count, max_size=count)), (len(shape), *shape)
    ).astype(float)


def nobody_improves_alone(payoffs, sense, profile):
    """The definition, written out: no player has a unilateral deviation that pays more than the tolerance."""
    for player, mine in enumerate(profile):
        for other in range(payoffs.shape[1 + player]):
            there = profile[:player] + (other,) + profile[player + 1 :]
            change = payoffs[player][there] - payoffs[player][profile]
            if other != mine and (change if sense == "gain" else -change) > 1e-9:
                return False
    return True


@given(games(), SENSES)
def test_a_profile_is_an_equilibrium_if_and_only_if_nobody_improves_alone(payoffs, sense):
    every = list(itertools.product(*map(range, payoffs.shape[1:])))
    assert pure_equilibria(payoffs, sense) == [p for p in every if nobody_improves_alone(payoffs, sense, p)]


@given(games(), SENSES)
def test_equilibria_are_the_profiles_where_everybody_replies_best(payoffs, sense):
    replies = {(reply.player, reply.others): reply.best for reply in best_responses(payoffs, sense)}
    for profile in itertools.product(*map(range, payoffs.shape[1:])):
        best = [
            profile[player] in replies[player, (*profile[:player], None, *profile[player + 1 :])]
            for player in range(len(profile))
        ]
        assert all(best) == (profile in pure_equilibria(payoffs, sense))


@given(games(), SENSES, st.randoms(use_true_random=False))
def test_renaming_players_renames_the_equilibria(payoffs, sense, random):
    order = list(range(len(payoffs)))
    random.shuffle(order)
    renamed = np.transpose(payoffs[order], [0, *(1 + player for player in order)])
    expected = {tuple(profile[player] for player in order) for profile in pure_equilibria(payoffs, sense)}
    assert set(pure_equilibria(renamed, sense)) == expected


@given(games(), SENSES, st.randoms(use_true_random=False))
def test_renaming_strategies_renames_the_equilibria(payoffs, sense, random):
    orders = [random.sample(range(count), count) for count in payoffs.shape[1:]]
    renamed = payoffs[np.ix_(range(len(payoffs)), *orders)]
    found = {
        tuple(o[place] for o, place in zip(orders, p, strict=True)) for p in pure_equilibria(renamed, sense)
    }
    assert found == set(pure_equilibria(payoffs, sense))


@given(games(), SENSES, st.randoms(use_true_random=False))
def test_what_the_others_choices_alone_give_a_player_changes_nothing(payoffs, sense, random):
    """A constant added to a player's whole column, whatever the player does there, is no incentive."""
    moved = payoffs.copy()
    for player in range(len(payoffs)):
        columns = np.moveaxis(moved[player], player, 0)  # a view: first axis the player's own strategies
        for others in np.ndindex(columns.shape[1:]):
            columns[(slice(None), *others)] += random.randint(-20, 20)
    assert pure_equilibria(moved, sense) == pure_equilibria(payoffs, sense)
    assert np.allclose(regrets(moved, sense), regrets(payoffs, sense))


@given(games(), SENSES)
def test_regret_is_what_the_best_deviation_gains(payoffs, sense):
    regret = regrets(payoffs, sense)
    assert regret.shape == payoffs.shape
    for profile in itertools.product(*map(range, payoffs.shape[1:])):
        for player in range(len(payoffs)):
            here = payoffs[player][profile]
            others = [payoffs[player][p] for p in deviations(profile, player, payoffs.shape[1 + player])]
            gain = max((o - here if sense == "gain" else here - o for o in others), default=0.0)
            assert regret[player][profile] == max(gain, 0.0)
