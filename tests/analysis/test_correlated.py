"""Correlated equilibria: the published games, what they enclose, and obedience by hand."""

from __future__ import annotations

import numpy as np
import pytest

from analysis import correlated
from analysis.correlated import NO_SIZE, correlated_bounds, disobedience
from analysis.equilibria import pure_equilibria
from analysis.mixed import mixed_equilibria

CHICKEN = np.array([[[6, 2], [7, 0]], [[6, 7], [2, 0]]], float)  # Aumann 1974 (from memory)


def test_aumanns_game_of_chicken():
    """Aumann 1974 (from memory): the best correlated equilibrium pays 10.5 together, half the time (6, 6) and a quarter
    each (7, 2) and (2, 7); the three Nash equilibria pay 9, 9 and 28/3."""
    found = correlated_bounds(CHICKEN, "gain", CHICKEN.sum(axis=0), "gain")
    assert found.best.welfare == pytest.approx(10.5)
    assert dict(found.best.likeliest()) == pytest.approx({(0, 0): 0.5, (0, 1): 0.25, (1, 0): 0.25})
    assert found.price_of_stability == pytest.approx(12 / 10.5)


def test_its_worst_is_a_vertex_that_can_be_worked_out_by_hand():
    """p = (pCC, pCD, pDC, pDD): obeying C needs 2 pCD >= pCC, obeying D needs pDC >= 2 pDD, and the same turned round.

    With 12 pCC + 9 (pCD + pDC) least: pCC = 0 and pDD = pDC / 2, so 2/5, 2/5, 1/5, which pays 36/5.
    """
    found = correlated_bounds(CHICKEN, "gain", CHICKEN.sum(axis=0), "gain")
    assert found.worst.welfare == pytest.approx(36 / 5)
    assert found.worst.probabilities.ravel() == pytest.approx([0, 0.4, 0.4, 0.2])
    assert found.price_of_anarchy == pytest.approx(12 / 7.2)


def test_matching_pennies_has_only_its_mixed_equilibrium():
    payoffs = np.array([[[1, -1], [-1, 1]], [[-1, 1], [1, -1]]], float)
    found = correlated_bounds(payoffs, "gain", np.array([[4.0, 1], [2, 3]]), "gain")
    for one in (found.best, found.worst):
        assert one.probabilities.ravel() == pytest.approx([0.25] * 4) and one.welfare == pytest.approx(2.5)


@pytest.mark.parametrize("seed", range(6))
def test_every_pure_and_mixed_equilibrium_lies_between(seed):
    rng = np.random.default_rng(seed)
    payoffs, welfare = rng.random((2, 4, 3)), 1 + rng.random((4, 3))
    found = correlated_bounds(payoffs, "cost", welfare, "gain")
    worths = [welfare[one] for one in pure_equilibria(payoffs, "cost")]
    worths += [one.mix[0] @ welfare @ one.mix[1] for one in mixed_equilibria(payoffs, "cost").equilibria]
    assert worths and found.worst.welfare - 1e-8 <= min(worths) and max(worths) <= found.best.welfare + 1e-8
    assert max(found.worst.gain, found.best.gain) < 1e-8


def test_for_a_loss_the_best_is_the_least():
    found = correlated_bounds(CHICKEN, "gain", CHICKEN.sum(axis=0), "cost")
    assert found.best.welfare == pytest.approx(36 / 5) and found.worst.welfare == pytest.approx(10.5)
    assert found.price_of_anarchy == pytest.approx(0 + 10.5 / 0.1, rel=1) or found.price_of_anarchy is None


def test_disobedience_by_hand():
    """Told to swerve where both always swerve, each gains 1 by not doing so."""
    always = np.array([[1.0, 0], [0, 0]])
    assert disobedience(-CHICKEN, always) == 1
    assert disobedience(-CHICKEN, np.array([[0, 0.5], [0.5, 0]])) == 0


def test_planted_obedience_of_one_player_only_is_caught(monkeypatch):
    """With the second player's rows left out the programs find what the certificate rejects."""
    whole = correlated.obedience
    monkeypatch.setattr(
        correlated, "obedience", lambda costs: whole(costs)[: costs.shape[1] * (costs.shape[1] - 1)]
    )
    found = correlated_bounds(CHICKEN, "gain", CHICKEN.sum(axis=0), "gain")
    assert max(found.best.gain, found.worst.gain) > 0.1


def test_a_table_too_large_and_a_welfare_of_nought_have_reasons(monkeypatch):
    zero = correlated_bounds(CHICKEN, "gain", np.zeros((2, 2)), "gain")
    assert zero.price_of_anarchy is None and "not above 0" in zero.reason and zero.best.welfare == 0
    monkeypatch.setattr(correlated, "MOST_ENTRIES", 7)
    assert correlated_bounds(CHICKEN, "gain", np.ones((2, 2)), "gain").reason == NO_SIZE


def test_a_player_without_a_choice_obeys():
    found = correlated_bounds(np.array([[[1.0], [2]], [[0], [0]]]), "cost", np.array([[3.0], [5]]), "gain")
    assert found.best.welfare == 3 == found.worst.welfare
