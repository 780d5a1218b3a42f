"""What a simulated game says of its sets and prices claims no more than they allow."""

from __future__ import annotations

import json

import numpy as np
import pytest

from analysis.confidence import Estimate
from analysis.findings import findings_of
from analysis.game_document import game_document
from analysis.games import analyse
from analysis.goals import TargetGoal, Welfare
from analysis.payoffs import Outcomes, PayoffTable, Profiles
from analysis.prices_document import NO_PROOF
from analysis.sets_document import NO_GAIN, NO_LATEST

# A textbook prisoner's dilemma, as costs: to defect (the second) is better whatever the other does.
DILEMMA = np.array([[[0.10, 0.30], [0.05, 0.20]], [[0.10, 0.05], [0.30, 0.20]]])


def table_of(costs, worth, *, replications=20, sense="gain", spread=0.001):
    """Payoffs and welfare as given, with independent noise by replication."""
    costs, worth = np.asarray(costs, float), np.asarray(worth, float)
    noise = np.random.default_rng(1)
    replicates = costs + noise.normal(0, spread, (replications, *costs.shape))
    welfare = worth + noise.normal(0, spread, (replications, *worth.shape))
    names = tuple("ABC"[: len(costs)])
    profiles = Profiles(names, tuple(tuple(range(1, count + 1)) for count in worth.shape))
    refused = worth.max() - worth if sense == "gain" else worth
    rates = np.repeat(refused.reshape(-1, 1) / len(costs), len(costs), axis=1)
    away = refused + noise.normal(0, spread, (replications, *worth.shape))
    return PayoffTable(
        profiles,
        TargetGoal(np.zeros(len(costs)), "absolute", 365.0),
        Welfare("throughput") if sense == "gain" else Welfare("loss", 0.0),
        payoffs=replicates.mean(axis=0),
        welfare=welfare.mean(axis=0),
        outcomes=Outcomes(rates, 0 * rates, 1 + rates, 1 + rates, 0 * rates, 0 * rates),
        replicates=replicates,
        low=replicates.mean(axis=0),
        high=replicates.mean(axis=0),
        welfare_replicates=welfare,
        turned_away_replicates=away,
        transfers_replicates=np.zeros(away.shape),
    )


def said_of(table, **how):
    return [one.statement for one in findings_of(analyse(table, **how))]


def test_epsilon_is_said_in_the_goals_unit_and_held_against_the_table():
    """Regrets are 0, .05 and .10: within .06 there are two profiles of the four by the estimates, (1, 1) and (2, 2)."""
    said = said_of(table_of(DILEMMA, [[10, 9], [9, 8]]), epsilon=0.06)
    (epsilon,) = (one for one in said if one.startswith("Epsilon"))
    assert "6 percentage points of utilisation" in epsilon and "2 of 4 profiles" in epsilon
    narrow = next(
        one
        for one in said_of(table_of(DILEMMA, [[10, 9], [9, 8]]), epsilon=0.01)
        if one.startswith("Epsilon")
    )
    assert "1 percentage points" in narrow and "1 of 4 profiles" in narrow


def test_confirmed_profiles_do_not_prove_that_prices_exist():
    """Where profiles nearly tie, all may be left for a small gain; of the dilemma all gains are below 0 for sure."""
    near = said_of(table_of(np.zeros((2, 2, 2)), [[10, 9], [9, 8]]), epsilon=0.01)
    assert any("4 of these are confirmed" in one for one in near) and NO_PROOF in near
    sure = said_of(table_of(DILEMMA, [[10, 9], [9, 8]]), epsilon=0.01)
    assert any("1 of these is confirmed" in one for one in sure) and NO_PROOF not in sure


def test_who_chooses_alone_has_an_equilibrium():
    said = said_of(table_of([[0.3, 0.1, 0.2]], [9, 10, 8]), epsilon=0.01)
    assert NO_PROOF not in said and not any("no pure equilibrium" in one for one in said)


@pytest.mark.parametrize(
    ("sense", "words"), [("gain", "forgoes between"), ("cost", "costs the network between")]
)
def test_a_loss_is_not_forgone(sense, words):
    said = said_of(table_of(DILEMMA, [[2, 3], [3, 4]], sense=sense), epsilon=0.01)
    (lost,) = (one for one in said if one.startswith("The worst equilibrium"))
    assert words in lost and (" more a year of (patients turned away" in lost) == (sense == "cost")


def test_nought_has_no_minus_sign():
    said = said_of(
        table_of(np.zeros((2, 2, 2)), np.full((2, 2), 3.0), sense="cost", spread=1e-7), epsilon=0.01
    )
    assert not any("-0.0" in one for one in said)


def test_the_verdict_is_of_the_estimated_equilibrium_not_of_the_worst_possible_one():
    """Three profiles are possible; the only one of the estimated table turns fewest away, the others many."""
    costs, worth = np.zeros((2, 2, 2)), np.array([[3.0, 2.0], [2.0, 1.0]])
    table = table_of(costs, worth, sense="cost", spread=0.05)
    game = analyse(table, epsilon=0.01)
    assert len(game.equilibria) == 4 and len(game.found) < 4
    (turning,) = (one for one in said_of(table, epsilon=0.01) if "verdict" in one)
    assert "listed" not in turning and "estimated table" in turning
    assert "listed" not in (game.turning.reason or "")


def test_years_say_which_end_is_missing_and_why():
    document = game_document(analyse(table_of(DILEMMA, [[10, 9], [9, 8]]), epsilon=0.3))
    (sure,) = document["equilibria"]
    assert sure["years_to_notice"]["A"] == Estimate(None, reason=NO_GAIN).to_dict()
    near = game_document(analyse(table_of(np.zeros((2, 2, 2)), [[10, 9], [9, 8]]), epsilon=0.3))
    years = [one["years_to_notice"]["A"] for one in near["equilibria"]]
    assert len(years) == 4 and all(one["low"] > 0 and one["reason"] == NO_LATEST for one in years)


def test_few_replications_are_not_resampled():
    from analysis.prices import TOO_FEW, simulated_study

    def study(replications):
        table = table_of(DILEMMA, [[10, 9], [9, 8]], replications=replications)
        mask = np.ones((2, 2), bool)
        return simulated_study(table, [(1, 1)], mask, mask, 0.1, confidence=0.95, tolerance=0, seed=1)

    assert study(9).bootstrap is None and study(9).bootstrap_reason == TOO_FEW
    assert study(10).bootstrap is not None


# Matching pennies, as costs (textbook: no equilibrium in pure strategies).
PENNIES = np.array([[[0.0, 1.0], [1.0, 0.0]], [[1.0, 0.0], [0.0, 1.0]]])


@pytest.mark.parametrize("replications", [2, 9, 10, 40])
@pytest.mark.parametrize(
    "costs", [PENNIES, DILEMMA, np.zeros((2, 2, 2)), np.zeros((1, 1)), np.zeros((3, 1, 2, 1))]
)
@pytest.mark.parametrize("spread", [0.0, 0.01])
def test_a_document_is_finite_whatever_the_table(replications, costs, spread):
    table = table_of(costs, np.zeros(costs.shape[1:]), replications=replications, spread=spread)
    game = analyse(table)
    json.dumps([game_document(game), said_of(table)], allow_nan=False)
    assert game.possible.all() or replications >= 10


def test_where_no_profile_is_possible_nothing_is_priced():
    game = analyse(table_of(PENNIES, [[3, 2], [2, 1]]))
    said = [one.statement for one in findings_of(game)]
    assert not game.equilibria and game.cost.price_of_anarchy.mean is None
    assert any(one.startswith("No profile can be a pure equilibrium") for one in said)
    assert any(one.startswith("No price of anarchy") for one in said) and NO_PROOF not in said
