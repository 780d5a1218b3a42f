"""Policies by name: what each means, beds of their own, games as their source, and faults."""

from __future__ import annotations

import json

import pytest

from analysis.named_policies import BEST, OPTIMUM, WORST, cases_of
from sim.errors import ScenarioError
from sim.intake import draw_intake
from sim.lowering import plan_intake
from sim.scenario import parse_scenario

TEXT = """
schema = 1
[run]
warm_up_days = 5
measured_days = 20
[[units]]
name = "A"
beds = 4
closure_threshold = 3
incoming_threshold = 2
target_utilisation = 0.4
[[units]]
name = "B"
beds = 5
closure_threshold = 4
target_utilisation = 0.4
[[patients]]
group = "a"
home = "A"
per_day = 1
stay = { family = "exponential", mean_days = 2 }
[[patients]]
group = "b"
home = "B"
per_day = 1
stay = { family = "exponential", mean_days = 2 }
[[policies]]
name = "fewer, and earlier"
closure_threshold = { A = 2 }
[[policies]]
name = "more beds"
beds = { A = 6 }
target_utilisation = { A = 0.3 }
closure_threshold = { A = 6 }
"""
SCENARIO = parse_scenario(TEXT)


def _cases(*names, **more):
    return {one.name: one for one in cases_of(SCENARIO, SCENARIO.policy(), names, **more)}


def _rules(case):
    return {name: (one.closure_threshold, one.incoming) for name, one in case.policy.units.items()}


def test_without_names_all_rows_follow_the_base():
    assert list(_cases()) == ["as in the file", "fewer, and earlier", "more beds"]


def test_what_the_names_mean():
    found = _cases("nobody closes early,own patients never refused", "no sharing")
    assert list(found) == [
        "as in the file",
        "nobody closes early",
        "own patients never refused",
        "no sharing",
    ]
    assert _rules(found["nobody closes early"]) == {"A": (4, 4), "B": (5, 5)}
    assert _rules(found["own patients never refused"]) == {"A": (4, 2), "B": (5, 4)}
    assert _rules(found["no sharing"]) == {"A": (3, 2), "B": (4, 4)}
    assert all(one.referral_order == () for one in found["no sharing"].policy.units.values())


def test_a_name_with_a_comma_is_one_name_and_no_name_comes_twice():
    assert list(_cases("fewer, and earlier", "more beds,more beds")) == [
        "as in the file", "fewer, and earlier", "more beds"
    ]  # fmt: skip


def test_a_row_goes_before_a_built_one():
    row = '\n[[policies]]\nname = "no sharing"\nclosure_threshold = { A = 1 }\n'
    scenario = parse_scenario(TEXT + row)
    found = cases_of(scenario, scenario.policy(), ["no sharing"])[1]
    assert _rules(found)["A"] == (1, 1) and found.policy.units["A"].referral_order == ("B",)


def test_beds_of_a_policy_change_the_network_and_no_patient():
    found = _cases("more beds")["more beds"]
    assert [unit.beds for unit in found.scenario.units] == [6, 5]
    assert found.scenario.unit("A").target_utilisation == 0.3
    assert _rules(found) == {"A": (6, 2), "B": (4, 4)}
    drawn = [draw_intake(plan_intake(one), 3).hash for one in (SCENARIO, found.scenario)]
    assert drawn[0] == drawn[1]


def test_a_closure_threshold_that_is_not_given_follows_the_policys_beds():
    scenario = parse_scenario(
        TEXT.replace("closure_threshold = 4\n", "") + '\n[[policies]]\nname = "b"\nbeds = { B = 9 }\n'
    )
    assert scenario.policy("b").units["B"].closure_threshold == 9


@pytest.mark.parametrize(
    ("row", "said"),
    [
        ("beds = { A = 2 }", "policies.x.beds.A: must not be below the unit's own closure_threshold"),
        (
            "beds = { A = 2 }\nclosure_threshold = { A = 2 }\nincoming_threshold = { A = 3 }",
            "must not be above the unit's beds, got 3 for 2 beds",
        ),
        ("beds = { C = 2 }", "policies.x.beds.C: must be the name of a unit"),
        ("beds = { A = 0 }", "must be at least 1"),
    ],
)  # fmt: skip
def test_faults_of_beds(row, said):
    with pytest.raises(ScenarioError, match=".") as caught:
        parse_scenario(TEXT + f'\n[[policies]]\nname = "x"\n{row}\n')
    assert said in str(caught.value)


def test_all_unknown_names_at_once_with_the_nearest():
    with pytest.raises(ScenarioError) as caught:
        _cases("no shering", "zebra")
    first, second = caught.value.faults
    assert first.key == "--policies" and first.remedy == "did you mean `no sharing`?"
    assert "known here" in second.remedy


def test_equilibria_and_optimum_solved_exactly():
    found = _cases(WORST, BEST, OPTIMUM)
    from analysis.chain import solve

    treated = {
        name: solve(one.scenario, one.policy).to_dict()["network"]["throughput_per_day"]
        for name, one in found.items()
    }
    assert treated[OPTIMUM] >= treated[BEST] >= treated[WORST]


def _document(**changes):
    def equilibrium(a, b, welfare):
        return {"thresholds": {"A": a, "B": b}, "kind": "pure", "welfare": {"mean": welfare}}

    return {
        "equilibria": [equilibrium(1, 1, 3.0), equilibrium(2, 2, 1.0), equilibrium(3, 3, 2.0)],
        "welfare": {"sense": "cost"}, "optimum": {"thresholds": [{"A": 4, "B": 5}]},
    } | changes  # fmt: skip


def test_a_games_result_is_read(tmp_path):
    (tmp_path / "result.json").write_text(json.dumps(_document()), encoding="utf-8")
    found = _cases(WORST, BEST, OPTIMUM, game_folder=tmp_path)
    thresholds = {name: tuple(one.policy.thresholds.values()) for name, one in found.items()}
    assert thresholds == {"as in the file": (3, 4), WORST: (1, 1), BEST: (2, 2), OPTIMUM: (4, 5)}


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (None, "must hold a game's result"),
        ("{", "must hold the game of this scenario's units"),
        (json.dumps(_document(equilibria=[])), "the game must have a pure equilibrium"),
        (json.dumps(_document(optimum={"thresholds": [{"A": 9, "B": 1}]})), "A has no threshold 9"),
        (json.dumps(_document(optimum={"thresholds": [{"C": 1}]})), "its players are C"),
    ],
)
def test_faults_of_a_game(tmp_path, text, said):
    if text is not None:
        (tmp_path / "game.json").write_text(text, encoding="utf-8")
    with pytest.raises(ScenarioError) as caught:
        _cases(OPTIMUM, game_folder=tmp_path)
    assert caught.value.faults[0].key == "--game" and said in str(caught.value)
