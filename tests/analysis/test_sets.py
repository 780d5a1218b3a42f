"""Possible and confirmed sets: small cases by hand, exact ties, and coverage with planted errors.

Coverage is checked on games whose truth is known because their payoffs are made: means of our own choosing plus normal
noise that is common to the cells, so no simulator and no chain can be at fault.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy import stats

from analysis import contrasts, sets
from analysis.contrasts import Masks, blocks, masks_of, paired_costs, paired_distances
from analysis.sets import confirmed, holm, possible, regret_bounds, spend

LEVEL = 0.05


def rng(seed=1):
    return np.random.default_rng(seed)


def a_game(costs, replications, spread=0.1, seed=1):
    """Costs (players, *shape) with independent normal noise by replication."""
    noise = rng(seed).normal(scale=spread, size=(replications, *costs.shape))
    return costs + noise


# ---- by hand ----


def test_contrasts_are_every_two_cells_in_a_players_line():
    """2 x 3: player 0 has 3 lines of one pair, player 1 has 2 lines of three."""
    evidence = paired_costs(a_game(np.zeros((2, 2, 3)), 12))
    found = {
        (block.player, *map(int, pair))
        for block in blocks(evidence, masks_of(evidence, None, None))
        for pair in zip(block.first, block.second, strict=True)
    }
    down = {(0, cell, cell + 3) for cell in range(3)}
    across = {(1, row + a, row + b) for row in (0, 3) for a, b in itertools.combinations(range(3), 2)}
    assert found == down | across


def test_three_players_have_lines_on_every_axis():
    evidence = paired_costs(a_game(np.zeros((3, 2, 3, 4)), 12))
    found = list(blocks(evidence, masks_of(evidence, None, None)))
    assert [sum(len(b.first) for b in found if b.player == one) for one in range(3)] == [12, 24, 36]


def test_one_player_of_two_strategies_is_a_one_sided_t_test():
    """The gain of moving is .1 on average; it excludes exactly where Student's t does (scipy)."""
    for seed in range(40):
        costs = a_game(np.array([[0.06, 0.0]]), 12, seed=seed)
        p = stats.ttest_1samp(costs[:, 0, 0] - costs[:, 0, 1], 0, alternative="greater").pvalue
        found = possible(paired_costs(costs), LEVEL, rng(), draws=20_000)
        assert found.statistic[0] == pytest.approx(
            stats.ttest_1samp(costs[:, 0, 0] - costs[:, 0, 1], 0).statistic
        )
        if not 0.01 < p < 0.04:  # two contrasts, one the other's reverse: each has half the level, about
            assert found.mask[0] == (p > 0.025)


def test_the_statistic_of_distances_by_hand():
    """Two cells: D = V_b - V_a, S = V_a + V_b; against a min(tD, -tS) or min(-tD, tS), whichever is more."""
    signed = a_game(np.array([[-0.3, -0.1]]), 15, seed=3)
    a, b = signed[:, 0, 0], signed[:, 0, 1]
    t_d, t_s = (stats.ttest_1samp(values, 0).statistic for values in (b - a, a + b))
    found = possible(paired_distances(signed), LEVEL, rng()).statistic
    assert found[0] == pytest.approx(max(min(t_d, -t_s), min(-t_d, t_s)))
    assert found[1] == pytest.approx(max(min(t_d, t_s), min(-t_d, -t_s)))
    assert t_d > 0 > t_s and found[0] > 0 > found[1]  # b is nearer to the target


def test_a_prisoners_dilemma_keeps_its_one_equilibrium():
    """Textbook: to defect (1) is better whatever the other does."""
    costs = np.array([[[1.0, 3.0], [0.0, 2.0]], [[1.0, 0.0], [3.0, 2.0]]])
    found = possible(paired_costs(a_game(costs, 20)), LEVEL, rng())
    assert found.mask.tolist() == [[False, False], [False, True]]
    sure = confirmed(paired_costs(a_game(costs, 20)), 0.1, LEVEL)
    assert sure.mask.tolist() == found.mask.tolist()
    assert "1 of 4" in str(found) and "1 of 4" in str(sure)


def test_matching_pennies_has_no_possible_profile():
    """Textbook: no pure equilibrium."""
    mine = np.array([[0.0, 1.0], [1.0, 0.0]])
    found = possible(paired_costs(a_game(np.stack([mine, 1 - mine]), 20)), LEVEL, rng())
    assert not found.mask.any()


def test_steps_down_exclude_more_than_one_step():
    costs = np.add.outer(np.linspace(0, 1, 12), np.zeros(12))
    values = a_game(np.stack([costs, costs.T]), 15, spread=0.2, seed=5)
    found = possible(paired_costs(values), LEVEL, rng())
    assert found.steps > 1 and found.mask[0, 0]
    evidence = paired_costs(values)
    first = sets._critical(evidence, masks_of(evidence, None, None), sets.sign_flips(rng(), 1000, 15), LEVEL)
    assert found.critical < first


def test_confirmed_by_hand_with_holm():
    """Holm 1979 on p = .01, .02, .03, .6 at .05: .01 <= .05/4, then .02 > .05/3 ends it (Wikipedia's rule, by hand)."""
    assert holm(np.array([0.03, 0.01, 0.6, 0.02]), 0.05).tolist() == [False, True, False, False]
    assert holm(np.array([0.001, 0.001]), 0.05).all() and not holm(np.array([0.5, 0.04]), 0.05).any()


def test_the_p_of_a_regret_is_the_largest_over_deviations():
    costs = a_game(np.array([[0.0, 0.02, 0.3]]), 20, seed=7)
    gains = costs[:, 0, :1] - costs[:, 0, 1:]
    p = [stats.ttest_1samp(gain, 0.05, alternative="less").pvalue for gain in gains.T]
    assert confirmed(paired_costs(costs), 0.05, LEVEL).p[0] == pytest.approx(max(p))


def test_upper_bounds_share_the_level_over_profiles():
    costs = a_game(np.array([[0.0, 0.2, 0.3]]), 20, seed=8)
    gain = costs[:, 0, 2] - costs[:, 0, 0]
    high = regret_bounds(paired_costs(costs), LEVEL).high[0, 2]
    assert high == pytest.approx(gain.mean() + stats.t.isf(LEVEL / 3, 19) * stats.sem(gain))


def test_a_distances_gain_may_use_either_side_of_the_target():
    """Far from the target the sign is plain, and bounds are those of plain costs |V|."""
    signed = a_game(np.array([[-0.5, -0.9, 0.7]]), 20, spread=0.02, seed=9)
    costs = signed * np.sign([-0.5, -0.9, 0.7])
    for at_most in (0.0, 0.1):
        one, other = (
            confirmed(paired_distances(signed), at_most, LEVEL),
            confirmed(paired_costs(costs), at_most, LEVEL),
        )
        assert one.p == pytest.approx(other.p, abs=1e-12)
    bounds = [regret_bounds(made, LEVEL).high for made in (paired_distances(signed), paired_costs(costs))]
    assert bounds[0] == pytest.approx(bounds[1])


def test_half_the_level_for_each_set_and_all_looks_together_no_more():
    assert spend(0.05) == (0.025, 0.025)
    assert sum(sum(spend(0.05, look=look)) for look in range(1, 20_000)) == pytest.approx(0.05, rel=1e-3)


# ---- ties and masks ----


@pytest.mark.parametrize("replications", [10, 20, 50])
def test_exact_ties_exclude_nothing(replications):
    """A plateau: strategies 0 to 2 are the very same, 3 is worse; every profile of the plateau is an equilibrium."""
    mine = rng(replications).normal(size=(replications, 1, 4, 1))
    costs = np.concatenate([mine, mine, mine, mine + 5 + rng(2).normal(size=mine.shape)], axis=1)
    values = np.stack([costs[:, :, 0, 0], costs[:, :, 0, 0]], axis=1)  # (replications, 2, 4)
    table = np.zeros((replications, 2, 4, 4))
    table[:, 0] = values[:, 0][:, :, None]
    table[:, 1] = values[:, 1][:, None, :]
    for evidence in (paired_costs(table), paired_distances(table + 100)):
        found = possible(evidence, LEVEL, rng())
        assert found.mask.sum() == 9 and found.mask[:3, :3].all()
        assert confirmed(evidence, 0.1, LEVEL).mask.tolist() == found.mask.tolist()


def test_few_differences_exclude_nothing_however_steady():
    costs = np.zeros((50, 1, 2))
    costs[:9, 0, 1] = 1.0
    assert possible(paired_costs(costs), LEVEL, rng()).mask.all()
    costs[:30, 0, 1] = 1.0
    assert possible(paired_costs(costs), LEVEL, rng()).mask.tolist() == [True, False]


def test_ties_are_judged_before_control_variates():
    """Adjusting gives a column that differs in 9 replications a difference in all of them."""
    raw = np.zeros((50, 1, 2))
    raw[:9, 0, 1] = 1.0
    adjusted = raw + rng().normal(scale=0.01, size=raw.shape) + [0.0, 0.2]
    assert possible(paired_costs(adjusted, raw=raw, degrees=45), LEVEL, rng()).mask.all()
    assert not possible(paired_costs(adjusted, degrees=45), LEVEL, rng()).mask.all()


def test_a_profile_that_is_not_alive_is_not_judged_and_costs_nothing():
    costs = a_game(np.linspace(0, 1, 30)[None], 15, spread=0.3, seed=11)
    whole = possible(paired_costs(costs), LEVEL, rng())
    again = possible(paired_costs(costs), LEVEL, rng(), alive=whole.mask)
    assert again.mask.tolist() == whole.mask.tolist() and again.steps == 1
    assert again.critical == pytest.approx(whole.critical)
    sure = confirmed(paired_costs(costs), 2.0, LEVEL, alive=whole.mask)
    assert sure.mask.tolist() == whole.mask.tolist()  # the others were not judged


def test_a_dropped_strategy_needs_no_values():
    """Cells that are neither alive nor needed may be missing."""
    costs = a_game(np.array([[[0.0, 1.0, 2.0]] * 2, [[0.0, 1.0, 2.0]] * 2]), 20, seed=12)
    alive, dropped = np.ones((2, 3), bool), np.zeros((2, 2, 3), bool)
    alive[:, 2], dropped[:, :, 2] = False, True
    full = possible(paired_costs(costs), LEVEL, rng())
    costs[:, :, :, 2] = np.nan
    for evidence in (paired_costs(costs), paired_distances(costs)):
        with np.errstate(all="raise"):
            found = possible(evidence, LEVEL, rng(), alive=alive, dropped=dropped)
            sure = confirmed(evidence, 0.5, LEVEL, alive=alive, dropped=dropped)
        assert found.mask.tolist() == full.mask.tolist() == sure.mask.tolist()


def test_blocks_change_nothing(monkeypatch):
    costs = a_game(rng(3).normal(size=(3, 4, 5, 3)), 15, spread=0.5)
    whole = possible(paired_costs(costs), LEVEL, rng())
    monkeypatch.setattr(contrasts, "AT_ONCE", 2000)
    parts = possible(paired_costs(costs), LEVEL, rng())
    assert parts.mask.tolist() == whole.mask.tolist()
    assert parts.critical == pytest.approx(whole.critical)


# ---- coverage ----

EXPERIMENTS = 300
# At a true coverage of .95 fewer than .905 of 300 has a probability below 1e-3 (binomial).
LEAST = 0.905


def tied_game(shape=(6, 7)):
    """A game in which every profile is an equilibrium: the hardest, for nothing may be excluded."""
    return np.zeros((len(shape), *shape))


def coverage(replications, judge, *, distances=False, seed=21):
    """The share of experiments in which no profile of a game of ties is excluded, noise correlated over cells."""
    draw, held = rng(seed), 0
    truth = tied_game()
    mix = draw.normal(size=(truth.size, truth.size)) / np.sqrt(truth.size)
    for _ in range(EXPERIMENTS):
        noise = (draw.normal(size=(replications, truth.size)) @ mix).reshape(replications, *truth.shape)
        values = (
            noise + (np.where(np.arange(truth[0].size) % 2, 3.0, -3.0).reshape(truth[0].shape)) * distances
        )
        held += judge(paired_distances(values) if distances else paired_costs(values), draw)
    return held / EXPERIMENTS


def whole_is_kept(evidence, draw):
    return possible(evidence, LEVEL, draw, draws=400).mask.all()


def test_every_equilibrium_is_kept_at_ten_replications():
    assert coverage(10, whole_is_kept) >= LEAST


def test_every_equilibrium_is_kept_with_distances_on_both_sides_of_the_target():
    assert coverage(12, whole_is_kept, distances=True) >= LEAST


def test_planted_no_student_map_is_caught(monkeypatch):
    """A sum of flipped scores is nearly standard normal; taken for the critical value it covers about .05."""
    monkeypatch.setattr(sets, "flip_to_student", lambda flipped, replications, degrees: flipped)
    assert coverage(10, whole_is_kept) < LEAST


def test_planted_pointwise_tests_are_caught():
    def pointwise(evidence, draw):
        strongest = sets.strongest(evidence, masks_of(evidence, None, None)).max(axis=0)
        return (strongest <= stats.t.isf(LEVEL, evidence.degrees)).all()

    assert coverage(10, pointwise) < LEAST


def _unpaired(evidence, draw):
    """The contrasts of shuffled replications: what is lost where cells do not meet the same patients."""
    values = evidence.values.copy()
    for cell in range(evidence.cells):
        values[:, :, cell] = values[draw.permutation(len(values)), :, cell]
    return values.reshape(*values.shape[:2], *evidence.shape)


def test_planted_unpaired_contrasts_are_caught():
    """Noise common to all cells, ten times the gaps: paired, one profile is left; unpaired, nearly all."""
    costs = np.add.outer(np.linspace(0, 1, 5), np.zeros(5))
    common = rng(5).normal(scale=10, size=(30, 1, 1, 1))
    values = np.stack([costs, costs.T]) + common + rng(6).normal(scale=0.1, size=(30, 2, 5, 5))
    paired = paired_costs(values)
    assert possible(paired, LEVEL, rng()).mask.sum() == 1
    assert possible(paired_costs(_unpaired(paired, rng(7))), LEVEL, rng()).mask.sum() > 20


def near_target(draw, replications):
    """One player, five cells, true signed distances around nought; costs are their sizes."""
    truth = np.array([0.1, -0.1, 0.12, -0.3, 0.5])
    common = draw.normal(scale=0.3, size=(replications, 1))
    return truth, (truth + common + draw.normal(scale=0.02, size=(replications, 5)))[:, None]


def false_confirmations(judge, epsilon=0.019):
    """The share of experiments in which a profile with more regret than epsilon is confirmed; .02 and more are true."""
    draw, false = rng(31), 0
    for _ in range(EXPERIMENTS):
        truth, signed = near_target(draw, 12)
        regret = np.abs(truth) - np.abs(truth).min()
        false += bool((judge(signed, epsilon) & (regret > epsilon)).any())
    return false / EXPERIMENTS


# At a true rate of .05 more than .095 of 300 has a probability below 1e-3 (binomial).
MOST = 0.095


def test_no_profile_is_confirmed_falsely_near_the_target():
    assert false_confirmations(lambda v, e: confirmed(paired_distances(v), e, LEVEL).mask) <= MOST


def test_planted_plug_in_confirmation_is_caught():
    def plug_in(signed, epsilon):
        costs = np.abs(signed.mean(axis=0)[0])
        return costs - costs.min() <= epsilon

    assert false_confirmations(plug_in) > MOST


def test_upper_bounds_of_regret_hold_for_all_profiles_at_once():
    draw, held = rng(41), 0
    for _ in range(EXPERIMENTS):
        truth, signed = near_target(draw, 12)
        regret = np.abs(truth) - np.abs(truth).min()
        held += bool((regret_bounds(paired_distances(signed), LEVEL).high[0] >= regret).all())
    assert held / EXPERIMENTS >= LEAST


def test_masks_say_which_direction_counts():
    masks = Masks(np.array([True, True, False]), np.array([[False, True, False]]))
    use = masks.pairs(0, np.array([0, 0, 1]), np.array([1, 2, 2]))
    assert use.tolist() == [[False, True, True], [True, False, False]]


# ---- ties on few replications ----


@pytest.mark.parametrize("make", [paired_costs, paired_distances])
def test_a_tie_on_few_replications_proves_nothing(make):
    """A gain that shows in one replication of five is missed by few in many experiments: no spread, no proof."""
    for replications in (2, 9):
        tied = make(np.repeat(a_game(np.zeros((1, 1)), replications), 3, axis=2))
        assert not confirmed(tied, 0.01, LEVEL).mask.any()
        assert (regret_bounds(tied, LEVEL).high > 0.01).all()
    tied = make(np.repeat(a_game(np.zeros((1, 1)), 10), 3, axis=2))
    assert confirmed(tied, 0.01, LEVEL).mask.all() and not regret_bounds(tied, LEVEL).high.any()


def test_who_has_no_choice_needs_no_replications():
    assert confirmed(paired_costs(a_game(np.zeros((1, 1)), 2)), 0.01, LEVEL).mask.all()
