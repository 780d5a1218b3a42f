"""The `[game]` table: players, goals of units, strategies of any rule parameter; every fault at once, by its key."""

import pytest

from sim.errors import ScenarioError
from sim.lowering import lower_network
from sim.scenario import parse_scenario
from sim.scenario.describe import advice, describe

TEXT = """schema = 1
[run]
measured_days = 100
[[units]]
name = "Ashgill"
beds = 4
[[units]]
name = "Norbeck"
beds = 5
target_utilisation = 0.7
[[patients]]
group = "a"
home = "Ashgill"
per_day = 1.2
stay = { family = "exponential", mean_days = 2.0 }
[[patients]]
group = "n"
home = "Norbeck"
per_day = 1.6
stay = { family = "exponential", mean_days = 2.0 }
[game]
"""


def read(game):
    return parse_scenario(TEXT + game)


def keys(game):
    """The keys at fault, in the order of the file."""
    with pytest.raises(ScenarioError) as error:
        read(game)
    return [fault.key for fault in error.value.faults]


def fault(game):
    """The only fault."""
    with pytest.raises(ScenarioError) as error:
        read(game)
    (one,) = error.value.faults
    return f"{one.key}: {one.rule}, {one.value}, {one.remedy}"


# ---- goals ----


def test_a_unit_has_its_own_goal_its_players_or_the_games():
    scenario = read(
        "goal = { kind = 'own_moved' }\ngoals = { trust = { kind = 'throughput' }, Norbeck = { shape = 'squared', "
        "judged_over_days = 50 } }\nplayers = [{ name = 'trust', units = ['Norbeck', 'Ashgill'] }]\n"
    )
    assert scenario.game.goal_of("Ashgill").terms == {"admissions_per_day": 1.0}
    assert scenario.game.goal_of("Norbeck").terms == {"squared_distance": 1.0}
    assert scenario.players() == {"trust": ("Ashgill", "Norbeck")}
    assert lower_network(scenario).edges.tolist() == [126.0, 176.0, 226.0]
    assert read("goal = { kind = 'own_moved' }\n").game.goal_of("Ashgill").terms == {
        "diverted_out_per_day": 1.0
    }


def test_only_goals_with_a_target_need_one():
    assert read("").units_without_target() == ["Ashgill"]
    assert "Ashgill" in advice(read(""))[0]
    assert read("goals = { Ashgill = { kind = 'turned_away' } }\n").units_without_target() == []
    weighted = "goals = { Ashgill = { kind = 'weighted', weights = { target_excess = 1 } } }\n"
    assert read(weighted).units_without_target() == ["Ashgill"]


def test_the_goals_in_words():
    weighted = "goal = { kind = 'weighted', weights = { target_distance = 1, closed_fraction = 0.16 } }\n"
    assert (
        read(weighted).game.goal.reads == "least distance of utilisation from the target + 0.16 x time closed"
    )
    above = "goal = { shape = 'above', tie_breaker = { measure = 'turned_away', weight = 0.001 } }\n"
    assert read(above).game.goal.reads == (
        "mean utilisation not above the target, + 0.001 x own patients turned away a day"
    )
    assert read("goal = { kind = 'free_bed' }\n").game.goal.reads == "most time with a free bed"


def test_every_fault_of_the_goals_is_reported_at_once():
    assert keys(
        """goal = { shape = "above" }
[game.goals]
Ashgil = { kind = "turned_away" }
Ashgill = { kind = "turnd_away" }
Norbeck = { kind = "weighted", weights = { target_distance = -1, clsoed_fraction = 2 } }
trust = { kind = "weighted", weights = {} }
East = { shape = "squared", tie_breaker = { measure = "foo" } }
[[game.players]]
name = "trust"
units = ["Ashgill"]
[[game.players]]
name = "East"
units = ["Norbeck"]
"""
    ) == [
        "game.goal.tie_breaker", "game.goals.Ashgil", "game.goals.Ashgill.kind",
        "game.goals.Norbeck.weights.clsoed_fraction", "game.goals.Norbeck.weights.target_distance",
        "game.goals.trust.weights", "game.goals.East.judged_over_days", "game.goals.East.tie_breaker.measure",
        "game.goals.East.tie_breaker.weight",
    ]  # fmt: skip


def test_a_misspelt_goal_or_measure_names_the_nearest():
    assert fault("goals = { Ashgill = { kind = 'turnd_away' } }\n").endswith("did you mean `turned_away`?")
    weights = "goal = { kind = 'weighted', weights = { clsoed_fraction = 2 } }\n"
    assert fault(weights).endswith("did you mean `closed_fraction`?")
    assert fault("goal = { shap = 'above' }\n").endswith("did you mean `shape`?")


def test_squared_goals_are_judged_over_periods_of_one_length():
    squared = "{{ shape = 'squared', judged_over_days = {} }}"
    goals = f"goals = {{ Ashgill = {squared.format(20)}, Norbeck = {squared.format(50)} }}\n"
    assert fault(goals) == (
        "game.goals.Norbeck.judged_over_days: must be the same for every squared goal, got 50 beside 20, "
        "give 20 days everywhere"
    )


# ---- players ----


@pytest.mark.parametrize(
    ("players", "expected"),
    [
        ("{ name = 'x', units = ['Norbeck', 'Ashgil'] }",
         "game.players.x.units.2: must be the name of a unit, got 'Ashgil', did you mean `Ashgill`?"),
        ("{ name = 'x', units = ['Ashgill'] }, { name = 'y', units = ['Ashgill'] }",
         "game.players.y.units.1: must not be a unit that a player runs already, got 'Ashgill', run by 'x', "
         "name it once"),
        ("{ name = 'x', units = ['Ashgill', 'Ashgill'] }",
         "game.players.x.units.2: must not be a unit that a player runs already, got 'Ashgill', run by 'x', "
         "name it once"),
        ("{ name = 'x', units = ['Ashgill'] }, { name = 'x', units = ['Norbeck'] }",
         "game.players.x.name: must not be the name of an earlier player too, got 'x' again, rename one"),
        ("{ name = 'Norbeck', units = ['Ashgill'] }",
         "game.players.Norbeck.name: must not be the name of a unit, but where the player runs that unit alone, "
         "got 'Norbeck', choose another name"),
        ("{ name = 'network', units = ['Ashgill'] }",
         "game.players.network.name: is a reserved word (it stands for all units together), got 'network', "
         "choose another name"),
        ("{ name = 'x', units = [] }", "game.players.x.units: must not be empty, got [], add an entry"),
    ],
)  # fmt: skip
def test_faults_of_players(players, expected):
    assert fault(f"players = [{players}]\n") == expected


def test_a_player_may_bear_the_name_of_the_only_unit_that_it_runs():
    assert read("players = [{ name = 'Norbeck', units = ['Norbeck'] }]\n").players() == {
        "Ashgill": ("Ashgill",),
        "Norbeck": ("Norbeck",),
    }


# ---- strategies ----


def test_a_table_for_each_parameter_or_closure_thresholds_alone():
    scenario = read(
        "strategies = { Ashgill = { closure = { from = 2, to = 3 }, incoming = { values = [1] }, "
        "reopening_gap = { values = [1, 2] } } }\n"
    )
    assert scenario.choices()["Ashgill"] == {
        "closure_threshold": (2, 3), "incoming_threshold": (1,), "reopening_gap": (1, 2),
    }  # fmt: skip
    assert scenario.strategies_of_players() == {"Ashgill": 4, "Norbeck": 5}
    assert scenario.strategies()["Norbeck"] == (1, 2, 3, 4, 5)


@pytest.mark.parametrize(
    ("table", "expected"),
    [
        ("from = 1, closure = { from = 2, to = 3 }",
         "game.strategies.Ashgill: needs either thresholds of its own, or a table for each parameter, got `from` "
         "beside `closure`, put the closure thresholds into `closure = { ... }`"),
        ("closure = { from = 2, to = 9 }",
         "game.strategies.Ashgill.closure.to: must not be above the unit's beds, got 9 for 4 beds, choose a "
         "threshold from 0 to 4"),
        ("closure = { from = 2 }",
         "game.strategies.Ashgill.closure: needs either both `from` and `to`, or `values`, got `from`, give one of "
         "the two"),
        ("incoming = { values = [5] }",
         "game.strategies.Ashgill.incoming.values.1: must not be above the unit's beds, got 5 for 4 beds, choose a "
         "threshold from 0 to 4"),
        ("closure = { values = [1] }, incoming = { values = [2, 3] }",
         "game.strategies.Ashgill.incoming: must not all be above every closure threshold (such pairs are left out), "
         "got 2 or more above 1, list lower ones"),
        ("reopening_gap = { values = [1, 1] }",
         "game.strategies.Ashgill.reopening_gap.values.2: must not repeat a value, got 1 again, remove it"),
        ("reopening_gap = { values = [0] }",
         "game.strategies.Ashgill.reopening_gap.values.1: must be at least 1, got 0, raise it"),
        ("admit_while_closed = { values = [1.5] }",
         "game.strategies.Ashgill.admit_while_closed.values.1: must be at most 1, got 1.5, lower it"),
        ("review_hours = { values = [0.0001] }",
         "game.strategies.Ashgill.review_hours.values.1: a replication may hold at most 1,000,000 reviews of a unit, "
         "got about 5.424e+07, review less often, or give 0: gates act at once"),
        ("incomin = { values = [1] }",
         "game.strategies.Ashgill.incomin: is not a known key of this table, got a table, did you mean `incoming`?"),
    ],
)  # fmt: skip
def test_faults_of_strategies(table, expected):
    assert fault(f"strategies = {{ Ashgill = {{ {table} }} }}\n") == expected


def test_describe_tells_who_plays_for_what_with_which_strategies():
    scenario = read(
        "goal = { kind = 'own_moved' }\nstrategies = { Norbeck = { incoming = { values = [0, 5] } } }\n"
        "players = [{ name = 'trust', units = ['Ashgill'] }]\n"
    )
    game = describe(scenario, scenario.policy())["game"]
    assert game["players"] == {"trust": ["Ashgill"], "Norbeck": ["Norbeck"]}
    assert game["goals"] == dict.fromkeys(("Ashgill", "Norbeck"), "least own patients moved a day")
    assert game["strategies"] == {"Ashgill": [1, 2, 3, 4], "Norbeck": {"incoming_threshold": [0, 5]}}
    assert game["cells"] == 8
