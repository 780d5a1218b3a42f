"""Sets of possible best replies: coverage, planted errors, and what refutes that replies never fall."""

from __future__ import annotations

import numpy as np
import pytest

from analysis import reply_bands as module
from analysis.contrasts import paired_costs, paired_distances
from analysis.reply_bands import ReplyBands, exact_bands, first_fall, reply_bands

# U - T of two players: rising in the own strategy, falling in the other's, so best replies never fall.
OWN, OTHER = np.arange(5)[:, None], np.arange(6)[None, :]
FIRST = 0.08 * (OWN - 2) - 0.03 * (OTHER - 2.5)
SECOND = 0.06 * (OTHER - 2.3) - 0.05 * (OWN - 2)
TRUE = np.stack([FIRST, SECOND])


def best_of(signed):
    costs = np.abs(signed)
    return np.stack([costs[player] <= costs[player].min(axis=player, keepdims=True) for player in (0, 1)])


def bands_of(draw, noise=0.05, replications=20):
    signed = TRUE + draw.normal(0, noise, (replications, 2, 5, 6))
    return reply_bands(paired_distances(signed), best_of(signed.mean(axis=0)), 0.05, draw, draws=200)


EXPERIMENTS = 100
LEAST = 0.87  # at a true coverage of .95 fewer of 100 have a probability below 1e-3 (binomial)


def coverage(sets):
    draw, true = np.random.default_rng(3), best_of(TRUE)
    return np.mean([bool((sets(bands_of(draw)) | ~true).all()) for _ in range(EXPERIMENTS)])


def test_all_true_best_replies_are_in_their_sets():
    assert coverage(lambda bands: bands.possible) >= LEAST


def test_planted_point_estimates_are_caught():
    assert coverage(lambda bands: bands.estimated) < LEAST


def all_kept_where_all_tie() -> float:
    """How often every strategy stays in its set in a game where all strategies cost the same: the hardest truth."""
    draw, kept = np.random.default_rng(9), 0
    for _ in range(EXPERIMENTS):
        costs = draw.normal(size=(20, 2, 5, 6))
        bands = reply_bands(paired_costs(costs), np.ones((2, 5, 6), bool), 0.05, draw, draws=200)
        kept += bool(bands.possible.all())
    return kept / EXPERIMENTS


def test_where_all_strategies_tie_all_are_kept():
    assert all_kept_where_all_tie() >= LEAST


def test_planted_comparisons_one_at_a_time_are_caught(monkeypatch):
    """Student's .95 quantile at 19 degrees of freedom (any printed table), for every contrast by itself."""
    monkeypatch.setattr(module, "flip_to_student", lambda *_: 1.729)
    assert all_kept_where_all_tie() < LEAST


def test_the_point_curve_falls_where_the_sets_refute_nothing():
    draw = np.random.default_rng(4)
    runs = [bands_of(draw, noise=0.15) for _ in range(60)]
    shown = [
        first_fall(exact_bands(bands.estimated), 0) or first_fall(exact_bands(bands.estimated), 1)
        for bands in runs
    ]
    refuted = [first_fall(bands, 0) or first_fall(bands, 1) for bands in runs]
    assert (
        sum(map(bool, shown)) > 15 and sum(map(bool, refuted)) <= 9
    )  # of 60 at .05: above 9 is rarer than 1e-3


def test_a_true_fall_is_found():
    signed = np.stack([TRUE[0][:, ::-1], TRUE[1]]) + np.random.default_rng(5).normal(0, 1e-3, (20, 2, 5, 6))
    bands = reply_bands(
        paired_distances(signed), best_of(signed.mean(axis=0)), 0.05, np.random.default_rng(6)
    )
    fall = first_fall(bands, 0)
    assert fall is not None and fall.before > fall.after and fall.lower < fall.upper
    assert first_fall(bands, 1) is None


def test_enough_replications_leave_the_true_best_replies_alone():
    bands = bands_of(np.random.default_rng(7), noise=1e-4)
    assert (bands.possible == best_of(TRUE)).all()
    assert (bands.crossings == best_of(TRUE).all(axis=0)).all()


def test_ends_and_falls_by_hand_with_two_others():
    """Player 0 of three; replies 2 against (0, 0), at most 1 against (1, 1): the running maximum shows it."""
    possible = np.zeros((3, 3, 2, 2), bool)
    for (a, b), replies in {(0, 0): [2], (0, 1): [1, 2], (1, 0): [0, 2], (1, 1): [0, 1]}.items():
        possible[0, replies, a, b] = True
    bands = ReplyBands(possible, possible, 0.05)
    least, greatest = bands.ends(0)
    assert least.tolist() == [[2, 1], [0, 0]] and greatest.tolist() == [[2, 2], [2, 1]]
    fall = first_fall(bands, 0)
    assert (fall.lower, fall.upper, fall.before, fall.after) == ((0, 0), (1, 1), 2, 1)
    possible[0, 2, 1, 1] = True
    assert first_fall(bands, 0) is None


@pytest.mark.parametrize("player", [0, 1])
def test_an_exact_table_has_its_best_replies(player):
    bands = exact_bands(best_of(TRUE))
    least, greatest = bands.ends(player)
    assert (least <= greatest).all() and (np.diff(least) >= 0).all()
