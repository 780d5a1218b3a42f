"""Selection of one policy: constants against printed tables, the promised chance of a right one, planted errors."""

from __future__ import annotations

import numpy as np
import pytest

from analysis.selection import (
    dudewicz_dalal,
    next_look,
    rinott,
    select,
    sequential_constants,
    two_stage_replications,
)

# Law and Kelton, Simulation Modeling and Analysis, table of h1 (from memory; recomputed and equal to three digits).
H1 = {
    (0.90, 20): (1.896, 2.342, 2.583, 2.747, 2.870, 2.969, 3.051, 3.121, 3.182),
    (0.90, 40): (1.852, 2.283, 2.514, 2.669, 2.785, 2.878, 2.954, 3.019, 3.076),
    (0.95, 20): (2.452, 2.872, 3.101, 3.258, 3.377, 3.472, 3.551, 3.619, 3.679),
    (0.95, 40): (2.386, 2.786, 3.003, 3.150, 3.260, 3.349, 3.422, 3.484, 3.539),
}
# Rinott 1978 (computed apart from this project; k = 4, n0 = 20, .90 is printed in Goldsman, Nelson and Schmeiser 1991,
# from memory: 2.720).
H = {
    (0.90, 10): (1.999, 2.587, 2.913, 3.137, 3.307, 3.445, 3.560, 3.659, 3.746),
    (0.90, 20): (1.896, 2.431, 2.720, 2.916, 3.064, 3.182, 3.280, 3.364, 3.437),
    (0.95, 30): (2.407, 2.874, 3.129, 3.303, 3.434, 3.539, 3.626, 3.701, 3.766),
    (0.99, 20): (3.540, 3.954, 4.188, 4.350, 4.474, 4.574, 4.658, 4.731, 4.794),
}


@pytest.mark.parametrize(("chance", "first_stage"), H1)
def test_dudewicz_and_dalals_table(chance, first_stage):
    found = [dudewicz_dalal(k, first_stage, chance) for k in (2, 5, 10)]
    assert found == pytest.approx([H1[chance, first_stage][k - 2] for k in (2, 5, 10)], abs=6e-4)


@pytest.mark.parametrize(("chance", "first_stage"), H)
def test_rinotts_table(chance, first_stage):
    found = [rinott(k, first_stage, chance) for k in (2, 4, 10)]
    assert found == pytest.approx([H[chance, first_stage][k - 2] for k in (2, 4, 10)], abs=6e-4)


def test_for_two_policies_both_constants_are_one():
    assert rinott(2, 20, 0.95) == pytest.approx(dudewicz_dalal(2, 20, 0.95), abs=1e-9)


@pytest.mark.parametrize(  # eta and h squared by the formula of Kim and Nelson 2001 (from memory), computed apart
    ("policies", "first_stage", "eta", "h_squared"),
    [(2, 10, 0.3341, 6.0129), (5, 10, 0.6350, 11.4294), (10, 20, 0.3029, 11.5115), (10, 24, 0.2394, 11.0143)],
)
def test_kim_and_nelsons_constants(policies, first_stage, eta, h_squared):
    assert sequential_constants(policies, first_stage, 0.05) == pytest.approx((eta, h_squared), abs=6e-5)


def _paired(rng, replications, means, common=2.0):
    """Normal observations that share what a common intake brings."""
    return means + common * rng.normal(size=(replications, 1)) + rng.normal(size=(replications, len(means)))


def _correct(experiments, decide):
    """Share of right selections in the least favourable case: all others worse by exactly the difference."""
    rng, means = np.random.default_rng(3), np.array([0.0, 0.5, 0.0, 0.0])
    return sum(decide(_paired(rng, 600, means)) == 1 for _ in range(experiments)) / experiments


EXPERIMENTS = 300
LEAST = 0.91  # at a true .95, fewer than that of 300 has a probability below 2e-3 (binomial)


def test_the_best_is_selected_as_often_as_promised():
    assert _correct(EXPERIMENTS, lambda values: select(values, 0.5, 0.05, first_stage=10).selected) >= LEAST


def test_planted_choice_of_the_first_stages_mean_is_caught():
    assert _correct(EXPERIMENTS, lambda values: int(values[:10].mean(axis=0).argmax())) < LEAST


def test_a_common_intake_makes_selection_cheaper():
    rng, means = np.random.default_rng(4), np.array([0.0, 0.5])
    alone = select(rng.normal(size=(4000, 2)) * np.sqrt(5) + means, 0.5, 0.05).used
    assert select(_paired(rng, 4000, means), 0.5, 0.05).used < alone


def test_the_shape_of_what_is_dropped_and_undecided():
    values = _paired(np.random.default_rng(5), 40, np.array([0.0, 0.02, -5.0]))
    found = select(values, 0.3, 0.05)
    assert found.selected is None and found.alive == (0, 1) and set(found.dropped) == {2}
    assert next_look(found, 100) == 80 and next_look(found, 50) == 50
    values[found.dropped[2] :, 2] = np.nan  # nobody runs what is dropped
    assert select(values, 0.3, 0.05) == found


def test_fewer_than_the_first_stage_is_refused():
    with pytest.raises(ValueError, match="fewer than the first stage"):
        select(np.zeros((5, 2)), 1.0, 0.05)


def test_two_stages_by_hand():
    values = np.tile([[1.0, 0.0], [-1.0, 0.0]], (10, 1))  # variance 20/19 and 0
    h = rinott(2, 20, 0.95)
    assert two_stage_replications(values, 0.1, 0.05) == [int(np.ceil(h**2 * (20 / 19) / 0.01)), 20]
