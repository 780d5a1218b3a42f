"""Dynamics worked by hand: paths, cycles, fictitious play, starts, and shares over resampled tables."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from analysis.dynamics import (
    CYCLE,
    EQUILIBRIUM,
    RULES,
    UNSETTLED,
    all_at_once,
    fictitious_play,
    in_turn,
    reached_shares,
)
from analysis.equilibria import pure_equilibria, regrets
from tests.analysis.builders import table

PENNIES = np.array([[[1, -1], [-1, 1]], [[-1, 1], [1, -1]]], float)
MEETING = np.array(
    [[[2, 0], [0, 1]], [[2, 0], [0, 1]]], float
)  # both want to be in one place, the first rather


def test_matching_pennies_goes_round_in_turn():
    """By hand from (0, 0): 1 stays, 2 moves; then 1 moves, 2 moves; then 1 moves, 2 moves: (0, 1) again."""
    path = in_turn(PENNIES, "gain", (0, 0))
    assert path.ends == CYCLE and set(path.cycle) == {(0, 0), (0, 1), (1, 0), (1, 1)}
    assert path.visited[:5] == ((0, 0), (0, 1), (1, 1), (1, 0), (0, 0))


def test_matching_pennies_goes_round_all_at_once():
    path = all_at_once(PENNIES, "gain", (0, 0))
    assert path.ends == CYCLE and path.cycle == ((0, 0), (0, 1), (1, 1), (1, 0)) and path.rounds == 4


def test_matching_pennies_in_fictitious_play_tends_to_one_half():
    """Robinson 1951, "An iterative method of solving a game": in zero-sum games shares converge (from memory)."""
    path = fictitious_play(PENNIES, "gain", (0, 0), rounds=4000)
    assert path.ends == UNSETTLED
    assert all(np.abs(mine - 0.5).max() < 0.03 for mine in path.shares)


def test_meeting_apart_all_at_once_never_meets_but_in_turn_does():
    """By hand: from (0, 1) both follow the other and swap for ever; in turn 1 joins 2 in the second place."""
    assert all_at_once(MEETING, "gain", (0, 1)).cycle == ((0, 1), (1, 0))
    path = in_turn(MEETING, "gain", (0, 1))
    assert (path.ends, path.last, path.visited) == (EQUILIBRIUM, (1, 1), ((0, 1), (1, 1)))


def test_meeting_apart_in_fictitious_play():
    """By hand: round 1 both reply to the other's one place: (1, 0); shares are then 1/2 each, and the first place pays
    2 x 1/2 > 1 x 1/2, so both go there, a strict equilibrium."""
    path = fictitious_play(MEETING, "gain", (0, 1))
    assert path.visited == ((0, 1), (1, 0), (0, 0)) and path.ends == EQUILIBRIUM


def test_shapleys_game_does_not_settle_in_fictitious_play():
    """Shapley 1964, "Some topics in two-person games" (from memory): shares cycle with ever longer runs."""
    one = [[2, 0, 1], [1, 2, 0], [0, 1, 2]]
    other = [[1, 0, 2], [2, 1, 0], [0, 2, 1]]
    path = fictitious_play(np.array([one, other], float), "gain", (0, 0))
    assert path.ends == UNSETTLED and max(float(np.abs(mine - 1 / 3).max()) for mine in path.shares) > 0.1


def test_who_is_content_stays_and_ties_go_to_the_first():
    payoffs = table((3, 1), lambda a, b: ([5.0, 1.0, 1.0][a], 0.0))
    for rule in RULES.values():
        assert rule(payoffs, "cost", (2, 0)).last == (2, 0)
        assert rule(payoffs, "cost", (0, 0)).last == (1, 0)


def test_rising_replies_climb_to_the_least_equilibrium_from_below_and_the_greatest_from_above():
    """Topkis 1979 (from memory): three efforts, replies min(other, own best), equilibria on the diagonal."""
    payoffs = table((4, 4), lambda a, b: (abs(a - max(b, 1)), abs(b - max(a, 1))))
    for rule in (in_turn, all_at_once):
        assert rule(payoffs, "cost", (0, 0)).last == (1, 1)
        assert rule(payoffs, "cost", (3, 3)).last == (3, 3)


def test_shares_over_tables_count_every_table_once():
    tables = np.stack([MEETING, MEETING, PENNIES, MEETING[:, ::-1]])
    found = reached_shares(tables, "gain", (0, 1))
    turn = found["in_turn"]
    assert turn.shares == {(1, 1): 0.5, (0, 1): 0.25} and (turn.cycling, turn.unsettled) == (0.25, 0)
    for one in found.values():
        assert sum(one.shares.values()) + one.cycling + one.unsettled == pytest.approx(1)


@settings(max_examples=60, deadline=None)
@given(
    arrays(float, (2, 3, 3), elements=st.integers(0, 5).map(float)),
    st.tuples(st.integers(0, 2), st.integers(0, 2)),
)
def test_what_is_called_an_equilibrium_is_one_and_cycles_come_round(payoffs, start):
    for name, rule in RULES.items():
        path = (
            rule(payoffs, "cost", start)
            if name != "fictitious_play"
            else rule(payoffs, "cost", start, rounds=60)
        )
        assert path.visited[0] == start
        if path.ends == EQUILIBRIUM:
            assert path.last in pure_equilibria(payoffs, "cost")
        if path.ends == CYCLE:
            assert any((regrets(payoffs, "cost")[(slice(None), *one)] > 0).any() for one in path.cycle)


def test_three_players_play_too():
    payoffs = table((2, 2, 2), lambda a, b, c: (float(a != b), float(b != c), float(c != 1)))
    for rule in RULES.values():
        assert rule(payoffs, "cost", (0, 0, 0)).last == (1, 1, 1)
