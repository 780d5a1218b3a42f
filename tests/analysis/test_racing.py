"""Racing: looks by hand, a state that depends on the data alone, and coverage and savings on made games.

Games are made: means of our own choosing plus normal noise, so that the truth is known and no simulator is at fault.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from analysis import racing
from analysis.contrasts import paired_costs, paired_distances
from analysis.equilibria import pure_equilibria, regrets
from analysis.price_bands import Worth
from analysis.raced_prices import Layer, projected_over_looks
from analysis.racing import Race, judge, look_sizes, more_needed, race, start

LEVEL = 0.05


def rng(seed=1):
    return np.random.default_rng(seed)


def noisy(costs, replications, spread=0.1, seed=1):
    """Costs (players, *shape) with independent normal noise by replication."""
    return costs + rng(seed).normal(scale=spread, size=(replications, *costs.shape))


def a_race(values, *, most=None, epsilon=0.0, distances=False, seed=1, hide=False):
    """A race over arrays; hide: cells that are not needed are not there."""
    made = paired_distances if distances else paired_costs

    def at(size, needed):
        first = values[:size]
        return made(np.where(needed.reshape(values.shape[2:]), first, np.nan) if hide else first)

    return race(
        at,
        values.shape[2:],
        values.shape[1],
        most=most or len(values),
        epsilon=epsilon,
        level=LEVEL,
        seed=seed,
    )


def same(one: Race, other: Race) -> bool:
    return all(
        np.array_equal(mine, vars(other)[name], equal_nan=True) if isinstance(mine, np.ndarray)
        else mine == vars(other)[name]
        for name, mine in vars(one).items()
    )  # fmt: skip


# ---- by hand ----


def test_looks_double_from_ten():
    assert list(look_sizes(100)) == [10, 20, 40, 80] and list(look_sizes(9)) == []
    begun = start((2, 2), 2)
    assert (begun.next_look(10), begun.next_look(9), begun.saved) == (10, None, None)


def test_the_looks_levels_by_hand_add_up_to_no_more_than_the_level(monkeypatch):
    """6 / (pi j)^2 adds up to 1 (Euler), so .05 is spent as .0304, .0076, .00338, ..., half on each set."""
    spent = []

    def spend(level, *, look):
        spent.append(sum(true_spend(level, look=look)))
        return true_spend(level, look=look)

    true_spend = racing.spend
    monkeypatch.setattr(racing, "spend", spend)
    a_race(noisy(np.zeros((1, 3)), 80))
    assert spent == pytest.approx([0.0303964, 0.0075991, 0.0033774, 0.0018998], rel=1e-4)
    assert sum(true_spend(LEVEL, look=j)[0] for j in range(1, 2000)) < LEVEL / 2


def test_one_player_by_hand():
    """Costs 0, .02 and 3 with noise .1: the last is beaten at the first look, and only the first two go on."""
    values = noisy(np.array([[0.0, 0.02, 3.0]]), 20, seed=4)
    after = judge(start((3,), 1), paired_costs(values[:10]), epsilon=0.01, level=LEVEL, seed=1)
    assert after.possible.tolist() == [True, True, False] and after.dropped.tolist() == [[False, False, True]]
    assert after.needed.tolist() == [True, True, False] and not after.confirmed.any()
    assert (after.runs, after.runs_of_full_table) == (30, 30)
    again = judge(after, paired_costs(values), epsilon=0.01, level=LEVEL, seed=1)
    assert again.replications.tolist() == [20, 20, 10]
    assert (again.runs, again.runs_of_full_table, again.saved) == (50, 60, 1.2)


def test_the_verdicts_of_two_strategies_are_students_at_the_looks_level():
    """Two strategies: confirmed where scipy's one-sided t test of "the gain is more than epsilon" says so, by Holm."""
    level = LEVEL * 6 / math.pi**2 / 2
    seen = set()
    for seed in range(40):
        values = noisy(np.array([[0.0, 0.1]]), 10, seed=seed)
        after = judge(start((2,), 1), paired_costs(values), epsilon=0.05, level=LEVEL, seed=1)
        gain = values[:, 0, 0] - values[:, 0, 1]
        p = [stats.ttest_1samp(one, 0.05, alternative="less").pvalue for one in (gain, -gain)]
        sure = min(p) <= level / 2
        assert after.confirmed.tolist() == [sure and p[0] < p[1], sure and p[1] < p[0]] or max(p) <= level
        seen.add(sure)
    assert seen == {True, False}


def test_a_profile_that_is_excluded_stays_as_a_deviation_of_others():
    """In row 1 column 0 is bad for player 1, all else ties: (1, 0) goes, but player 0 at (0, 0) may move to it."""
    costs = np.zeros((2, 2, 2))
    costs[1, 1, 0] = 5.0
    after = judge(start((2, 2), 2), paired_costs(noisy(costs, 10)), epsilon=0.0, level=LEVEL, seed=1)
    assert after.possible.reshape(2, 2).tolist() == [[True, True], [False, True]]
    assert after.dropped.reshape(2, 2, 2).tolist() == [[[False] * 2] * 2, [[False] * 2, [True, False]]]
    assert after.needed.all()


def test_a_column_without_an_undecided_profile_is_left():
    """Player 1's last strategy is bad whatever player 0 does: nobody needs that column any more."""
    costs = np.zeros((2, 2, 3))
    costs[1, :, 2] = 5.0
    after = judge(start((2, 3), 2), paired_costs(noisy(costs, 10)), epsilon=0.0, level=LEVEL, seed=1)
    assert after.needed.reshape(2, 3).tolist() == [[True, True, False]] * 2


def test_what_is_decided_ends_the_race():
    """Textbook: in a prisoner's dilemma to defect (1) is better whatever the other does."""
    costs = np.array([[[1.0, 3.0], [0.0, 2.0]], [[1.0, 0.0], [3.0, 2.0]]])
    done = a_race(noisy(costs, 80), epsilon=0.1)
    assert (
        done.possible.reshape(2, 2).tolist()
        == done.confirmed.reshape(2, 2).tolist()
        == [[False] * 2, [False, True]]
    )
    assert not done.needed.any() and done.reached < 80
    assert (more_needed(done, level=LEVEL).runs, more_needed(done, level=LEVEL).profiles) == (0, 0)


def test_matching_pennies_ends_with_nothing_possible():
    """Textbook: no pure equilibrium."""
    mine = np.array([[0.0, 1.0], [1.0, 0.0]])
    done = a_race(noisy(np.stack([mine, 1 - mine]), 20))
    assert not done.possible.any() and len(done.looks) == 1


def test_what_more_it_takes_by_hand():
    """t grows as the root of replications: half of the critical value at 10 replications needs 40."""
    begun = judge(start((2,), 1), paired_costs(noisy(np.zeros((1, 2)), 10)), epsilon=0.0, level=LEVEL, seed=1)
    looks = (replace(begun.looks[0], critical=4.0),)
    halfway = replace(begun, looks=looks, statistic=np.array([2.0, 2.0]), p=np.ones(2))
    assert (more_needed(halfway, level=LEVEL).replications, more_needed(halfway, level=LEVEL).runs) == (
        40,
        60,
    )
    lost = replace(halfway, statistic=np.array([-1.0, -1.0]))
    assert (more_needed(lost, level=LEVEL).replications, more_needed(lost, level=LEVEL).profiles) == (None, 2)


def test_the_price_of_a_pair_is_compared_on_what_both_have_by_hand():
    """Two cells of 20 and 10 replications: the first 10 of both, Student's t with 9 degrees at that look's share."""
    values = rng(3).normal(size=(20, 2)) + [0.0, 0.5]
    layers = [
        Layer(number, size, Worth(values[:size].mean(axis=0), values[:size], size - 1))
        for number, size in ((1, 10), (2, 20))
    ]
    low, high = projected_over_looks(layers, np.array([20, 10]), np.array([True, False]), 0.2)
    gain, t = values[:10, 1] - values[:10, 0], stats.t.isf(0.05 * 6 / math.pi**2, 9)
    assert high == pytest.approx(gain.mean() + t * stats.sem(gain))
    assert low == pytest.approx(max(0.0, gain.mean() - t * stats.sem(gain)))


# ---- a pure function of the data ----


def test_a_race_stopped_and_continued_is_the_one_that_was_not():
    values = noisy(np.add.outer([0.0, 0.05], [0.0, 0.02, 0.3])[None].repeat(2, axis=0), 160, seed=6)
    whole = a_race(values, epsilon=0.01)
    stopped = a_race(values, most=35, epsilon=0.01)
    assert stopped.reached == 20 < whole.reached and stopped.looks == whole.looks[:2]
    while (size := stopped.next_look(160)) is not None:
        stopped = judge(stopped, paired_costs(values[:size]), epsilon=0.01, level=LEVEL, seed=1)
    assert same(stopped, whole)


@pytest.mark.parametrize("distances", [False, True])
def test_cells_that_are_left_never_count(distances):
    """The same state whether a cell that is not needed goes on or is not there at all."""
    game = threshold_game()
    for seed in range(3):
        values = game.draws(80, rng(seed))
        values = values if distances else np.abs(values)
        kept, hidden = (
            a_race(values, epsilon=1e-3, distances=distances, hide=hide) for hide in (False, True)
        )
        assert same(kept, hidden) and kept.saved > 1.5


# ---- coverage and savings on made games ----


class Made:
    """Two players with signed distances of known means; noise common to all cells, and a little of each cell's own."""

    def __init__(self, means, common=0.012, own=0.002):
        self.means, self.common, self.own = means, common, own
        costs = np.abs(means)
        self.regret = regrets(costs, "cost").max(axis=0).ravel()
        self.equilibria = np.zeros(means.shape[1:], bool)
        for profile in pure_equilibria(costs, "cost"):
            self.equilibria[profile] = True
        self.equilibria = self.equilibria.ravel()

    def draws(self, replications, generator):
        shared = generator.normal(scale=self.common, size=(replications, len(self.means), 1, 1))
        return self.means + shared + generator.normal(scale=self.own, size=(replications, *self.means.shape))


def threshold_game():
    """Thresholds 0 to 10 each; utilisation rises with the own, falls with the other's, the target lies inside."""
    own, other = np.meshgrid(np.arange(11.0), np.arange(11.0), indexing="ij")
    first = 0.02 * (own - 0.55 * other - 2.3)
    second = 0.02 * (other - 0.6 * own - 2.1)
    return Made(np.stack([first, second]))


@pytest.mark.parametrize(("epsilon", "bar"), [(1e-3, 3.0), (2e-4, 6.0)])
def test_races_save_and_keep_every_equilibrium(epsilon, bar):
    """Bars: 3 times at a loose, 6 times at a tight epsilon; an equilibrium is lost with probability .025 at most, so
    that more than 2 of 12 races losing one has a false-alarm rate of .003 (binomial)."""
    game, runs, full, lost, wrong = threshold_game(), 0, 0, 0, 0
    assert game.equilibria.any()
    for seed in range(12):
        done = a_race(game.draws(320, rng(seed)), epsilon=epsilon, distances=True, seed=seed, hide=True)
        runs, full = runs + done.runs, full + done.runs_of_full_table
        lost += not (done.possible | ~game.equilibria).all()
        wrong += not (game.regret[done.confirmed] <= epsilon).all()
    assert full / runs >= bar
    assert lost <= 2 and wrong <= 2


def races_that_lose_an_equilibrium(races):
    """All profiles tie, so all are equilibria; how many races exclude one."""
    lost = 0
    for seed in range(races):
        done = a_race(noisy(np.zeros((2, 2, 3)), 40, seed=seed), seed=seed)
        lost += not done.possible.all()
    return lost


TIED, AT_MOST = 150, 10  # races; the binomial (150, .025) passes 10 with probability .001


def test_where_all_tie_few_races_lose_an_equilibrium():
    assert races_that_lose_an_equilibrium(TIED) <= AT_MOST


def test_planted_error_looks_that_each_spend_the_whole_level_are_found(monkeypatch):
    """Three looks at .05 each, as if each were the only one, lose far too many."""
    monkeypatch.setattr(racing, "spend", lambda level, look: (level, level))
    assert races_that_lose_an_equilibrium(TIED) > AT_MOST
