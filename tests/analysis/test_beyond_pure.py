"""What a game says beyond its pure equilibria: through the command, and on a threshold game without a pure one."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest

from analysis.beyond_pure import Wanted, beyond, beyond_document, beyond_sentences, with_mixed
from analysis.chain import solve
from analysis.equilibria import pure_equilibria
from analysis.games import analyse
from analysis.goals import TargetGoal, Welfare
from analysis.payoffs import PayoffTable, Profiles, exact_outcomes
from sim.scenario import Scenario
from tests.analysis.builders import memoryless


@pytest.fixture(scope="module")
def without_pure():
    """An exact table without a pure equilibrium: distance from the target + weight x share of time closed.

    Found by a search of our own over small networks: 2 and 4 beds, targets .64 and .34, weights .16 and .09.
    """
    scenario = Scenario.model_validate(
        {
            "schema": 1,
            "units": [
                {"name": "Low", "beds": 2, "target_utilisation": 0.64, "stay_factor": 1.8},
                {"name": "High", "beds": 4, "target_utilisation": 0.34, "stay_factor": 0.6},
            ],
            "patients": [
                {"group": f"{home} emergencies", "home": home, "per_day": a_day,
                 "stay": {"family": "exponential", "mean_days": 1.0}}
                for home, a_day in (("Low", 0.2), ("High", 6.3))
            ],
        }
    )  # fmt: skip
    profiles = Profiles(("Low", "High"), ((1, 2), (1, 2, 3, 4)))
    policy = scenario.policy()
    cells = []
    for thresholds in product((1, 2), (1, 2, 3, 4)):
        here = policy.with_thresholds(dict(zip(profiles.players, thresholds, strict=True)))
        found = solve(scenario, here).units
        cells.append([found[name].to_dict() for name in profiles.players])
    outcomes = exact_outcomes(cells)
    closed = np.array([[unit["closed_fraction"] for unit in cell] for cell in cells])
    costs = np.abs(outcomes.utilisation - [0.64, 0.34]) + closed * [0.16, 0.09]
    goal = TargetGoal(np.array([0.64, 0.34]), "absolute", 365.0)
    return PayoffTable(
        profiles, goal, Welfare("throughput"), costs.T.reshape(2, 2, 4),
        outcomes.admitted.sum(axis=1).reshape(2, 4), outcomes,
    )  # fmt: skip


def test_a_threshold_game_without_a_pure_equilibrium_gets_mixed_ones_unasked(without_pure):
    assert pure_equilibria(without_pure.payoffs, "cost") == []
    game = analyse(without_pure)
    found = beyond(game, Wanted(), {"Low": 2, "High": 4}, seed=1)
    rows = with_mixed([], found)
    assert found.mixed is not None and len(rows) >= 1
    for row in rows:
        assert (row["kind"], row["verdict"]) == ("mixed", "exact") and max(row["regret"].values()) < 1e-9
        for mix in row["thresholds"].values():
            assert sum(part["probability"] for part in mix) == pytest.approx(1)
        assert max(len(mix) for mix in row["thresholds"].values()) > 1
    document = beyond_document(found)
    assert (
        document["mixed"]["price_of_anarchy_with_mixed"]
        >= document["mixed"]["price_of_stability_with_mixed"]
        >= 1
    )
    assert any("drawn anew" in said for said in beyond_sentences(found))


def test_its_best_replies_go_round(without_pure):
    present = memoryless(
        {"name": "Low", "beds": 9, "per_day": 1.0},
        {"name": "High", "beds": 9, "per_day": 1.0, "closure_threshold": 3},
    ).policy()
    found = beyond(analyse(without_pure), Wanted(dynamics=True, correlated=True), present, seed=1)
    document = beyond_document(found)
    assert document["dynamics"]["start"] == {"Low": 2, "High": 3}
    rules = document["dynamics"]["rules"]
    assert rules["in_turn"]["ends"] == rules["all_at_once"]["ends"] == "cycle" and rules["in_turn"]["cycle"]
    assert rules["in_turn"]["reached"] is None
    welfare = [row["welfare"] for row in with_mixed([], found)]
    bounds = document["correlated"]
    assert (
        bounds["worst"]["welfare"] - 1e-7 <= min(welfare) <= max(welfare) <= bounds["best"]["welfare"] + 1e-7
    )


# ---- through the command ----


def test_an_exact_game_is_as_it_was_unless_more_is_asked_for(call, two):
    document = call("game", two, "--exact")[1]
    assert not {"mixed", "correlated", "dynamics"} & set(document)
    assert all(one["kind"] == "pure" for one in document["equilibria"])
    curve = document["price_over_transfer_weights"]
    assert [row["weight"] for row in curve][:3] == [0, 0.05, 0.1] and isinstance(
        curve[0]["lost_per_year"], float
    )
    for player, replies in document["best_responses"].items():
        possible = document["possible_best_responses"][player]
        assert [row["possible"] for row in possible["replies"]] == [row["best"] for row in replies]


def test_all_that_can_be_asked_for(call, three):
    status, document = call("game", three, "--exact", "--mixed", "--correlated", "--dynamics")
    assert status == 0
    kinds = [one["kind"] for one in document["equilibria"]]
    assert kinds == sorted(kinds, reverse=True)  # pure, then mixed
    assert document["mixed"]["found"] == kinds.count("mixed")
    assert document["correlated"]["worst"]["welfare"] <= document["correlated"]["best"]["welfare"] + 1e-9
    assert document["dynamics"]["start"] == {"A": 2, "B=b": 3, "C": 2}
    reached = document["dynamics"]["rules"]["in_turn"]["reached"]
    assert reached in [one["thresholds"] for one in document["equilibria"]]


def test_a_simulated_game_has_bands_that_hold_its_points(call, two):
    status, document = call("game", two, "--replications", "12", "--dynamics", "--mixed", "--correlated")
    assert status == 0
    for name in ("price_of_anarchy", "price_of_stability", "lost_per_year"):
        one = document[name]
        assert one["low"] <= one["high"] and (one["mean"] is None or one["low"] <= one["mean"] <= one["high"])
    assert (
        document["price_of_anarchy"]["low"] >= 1 and "approximate" in document["prices_by_bootstrap"]["label"]
    )
    assert {"low", "high"} <= set(document["transfer_weight_at_which_the_verdict_turns"])
    for row in document["price_over_transfer_weights"]:
        assert row["lost_per_year"]["low"] <= row["lost_per_year"]["high"]
    for rule in document["dynamics"]["rules"].values():
        shares = [one["share"] for one in rule["resampled"]["reached"]]
        assert sum(shares) + rule["resampled"]["cycling"] + rule["resampled"]["unsettled"] == pytest.approx(1)
    listed = [one["thresholds"] for one in document["equilibria"] if one["kind"] == "pure"]
    possible = document["possible_best_responses"]
    for profile in listed:  # each strategy of a possible equilibrium is a possible best reply
        for player, rows in possible.items():
            others = {k: v for k, v in profile.items() if k != player}
            assert profile[player] in next(r["possible"] for r in rows["replies"] if r["others"] == others)


def test_one_replication_still_gives_a_document(call, two):
    status, document = call("game", two, "--replications", "1", "--dynamics")
    assert status == 0 and "resampled" not in document["dynamics"]["rules"]["in_turn"]
    assert "possible_best_responses" not in document


def test_a_person_reads_of_it_and_gets_pictures(show, two, tmp_path):
    out = tmp_path / "out"
    status, text, _ = show(
        "game", two, "--replications", "12", "--dynamics", "--correlated", "--mixed", "--out", out
    )
    assert status == 0
    for said in (
        "lies between",
        "resampled tables",
        "Correlated equilibria of the estimated table",
        "approximate",
    ):
        assert said in text
    for name in ("replies", "price-over-weights"):
        assert all((out / f"{name}.{extension}").stat().st_size > 1000 for extension in ("png", "svg"))


def test_what_needs_a_table_is_refused_with_a_search(show, two):
    status, _, errors = show("game", two, "--exact", "--search", "best_reply", "--dynamics")
    assert status == 2 and "--dynamics" in errors and "table" in errors
