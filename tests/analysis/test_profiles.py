"""Players and their strategies: which there are, what policy each makes, and how documents and axes name them."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.profiles import (
    Profiles,
    Strategy,
    choice_columns,
    chosen_at,
    closure,
    nearest_profile,
    profiles_of,
    text_of,
)
from sim.errors import ScenarioError
from sim.scenario.strategies import listed_strategies, number_of_strategies
from tests.analysis.builders import memoryless
from tests.strategies import rule_parameters

UNITS = (
    {"name": "A", "beds": 2, "per_day": 1.0},
    {"name": "B", "beds": 3, "per_day": 1.0, "closure_threshold": 2},
    {"name": "C", "beds": 2, "per_day": 1.0},
)
TRUST = [{"name": "trust", "units": ["C", "A"]}]


def axes(strategies=None, players=(), base=None):
    scenario = memoryless(*UNITS, game={"strategies": strategies or {}, "players": players})
    return profiles_of(scenario, base), scenario.policy()


def pairs(closures, incoming):
    table = {"closure": closures, "incoming": incoming}
    profiles, _ = axes({"B": table})
    return [tuple(one.rules["B"].values()) for one in profiles.strategies[1]]


# ---- who plays ----


def test_every_unit_plays_by_itself_unless_a_player_runs_it():
    """A player stands where its first unit does, and its strategies are the product, the last unit's fastest."""
    profiles, base = axes(players=TRUST)
    assert profiles.players == ("trust", "B") and profiles.units == ("A", "B", "C")
    assert profiles.shape == (4, 3)
    assert [one.to_plain() for one in profiles.strategies[0]][:3] == [
        {"A": 1, "C": 1}, {"A": 1, "C": 2}, {"A": 2, "C": 1},
    ]  # fmt: skip
    assert profiles.thresholds((2, 2)) == {"A": 2, "B": 3, "C": 1}
    listed = [policy.thresholds for policy in profiles.policies(base)]
    assert listed == [profiles.thresholds(profile) for profile in np.ndindex(4, 3)]
    assert not profiles.is_plain and not profiles.is_ordered and profiles.unordered == ("trust",)


def test_a_unit_under_another_name_is_still_one_threshold():
    profiles, _ = axes(players=[{"name": "East", "units": ["B"]}])
    assert profiles.players == ("A", "East", "C") and profiles.is_ordered and not profiles.is_plain
    assert profiles.plain()["East"] == [1, 2, 3]
    assert chosen_at(profiles, (0, 2, 1)) == {
        "thresholds": {"A": 1, "B": 3, "C": 2},
        "strategies": {"A": 1, "East": 3, "C": 2},
    }


# ---- what may be chosen ----


def test_pairs_with_the_incoming_above_the_closure_threshold_are_left_out():
    every = pairs({"from": 1, "to": 3}, {"from": 1, "to": 3})
    assert every == [(1, 1), (2, 1), (2, 2), (3, 1), (3, 2), (3, 3)]
    assert pairs({"values": [3, 1]}, {"values": [2, 0]}) == [(3, 2), (3, 0), (1, 0)]


def test_incoming_thresholds_alone_leave_the_units_own_closure_threshold():
    profiles, base = axes({"B": {"incoming": {"from": 0, "to": 3}}})
    assert [one.rules for one in profiles.strategies[1]] == [
        {"B": {"incoming_threshold": m}} for m in (0, 1, 2)
    ]
    assert profiles.thresholds((0, 1, 0)) == {"A": 1, "B": 2, "C": 1}
    chosen = profiles.policy(base, (0, 1, 0)).units["B"]
    assert (chosen.closure_threshold, chosen.incoming) == (2, 1)
    assert profiles.is_ordered and not profiles.is_plain


def test_another_policys_closure_threshold_counts_where_none_is_chosen():
    strategies = {"B": {"incoming": {"from": 0, "to": 3}}}
    _, base = axes(strategies)
    profiles, _ = axes(strategies, base=base.with_thresholds({"B": 1}))
    assert profiles.shape[1] == 2 and profiles.thresholds((0, 0, 0))["B"] == 1


def test_any_listed_rule_parameter_is_a_strategy():
    table = {"admit_while_closed": {"values": [0.0, 0.5]}, "review_hours": {"values": [0, 12]}}
    profiles, base = axes({"A": table})
    assert [one.label for one in profiles.strategies[0]] == ["0/0", "0/12", "0.5/0", "0.5/12"]
    chosen = profiles.policy(base, (3, 0, 0)).units["A"]
    assert (chosen.admit_while_closed, chosen.review_hours, chosen.closure_threshold) == (0.5, 12, 2)


def test_nothing_left_to_choose_and_too_much_of_it_are_faults():
    with pytest.raises(ScenarioError, match="something to choose"):
        axes({"B": {"incoming": {"values": [3]}}})
    many = [{"name": f"U{n}", "beds": 40, "per_day": 1.0} for n in range(8)]
    all_of_them = [{"name": "all", "units": [one["name"] for one in many]}]
    with pytest.raises(ScenarioError, match=r"got 6,553,600,000,000 for all"):
        profiles_of(memoryless(*many, game={"players": all_of_them}))


@given(rule_parameters(6), st.integers(0, 6))
def test_strategies_are_counted_as_they_are_listed(parameters, own):
    listed = [dict(one) for one in listed_strategies(parameters, own)]
    assert number_of_strategies(parameters, own) == len(listed)
    assert all(one.get("incoming_threshold", 0) <= one.get("closure_threshold", own) for one in listed)
    assert all(one.keys() == parameters.keys() for one in listed)
    assert len({tuple(one.items()) for one in listed}) == len(listed)


# ---- how they are named ----


def test_labels_axes_and_columns():
    strategies = {"A": {"closure": {"values": [2]}, "incoming": {"values": [0, 1]}}, "C": {"values": [1]}}
    profiles, _ = axes(strategies, TRUST)
    assert profiles.labels == (("2/0, 1", "2/1, 1"), ("1", "2", "3"))
    assert profiles.reads(0) == "closure threshold/incoming threshold of A, closure threshold of C (trust)"
    assert profiles.reads(1) == "closure threshold of B"
    assert [text_of(one) for one in profiles.plain()["trust"]] == list(profiles.labels[0])
    columns = choice_columns(profiles, np.array([[1, 2]]))
    assert {name: list(values) for name, values in columns.items()} == {
        "strategy trust": ["2/1, 1"],
        "threshold B": [3],
    }


def test_a_bare_number_is_the_closure_threshold_of_the_unit_with_the_players_name():
    profiles = Profiles(("A", "B"), ((3, 5), (4,)))
    assert profiles.strategies == ((closure("A", 3), closure("A", 5)), (closure("B", 4),))
    assert profiles.is_plain and profiles.plain() == {"A": [3, 5], "B": [4]}
    assert Strategy((("A", "closure_threshold", 3),)).rules == {"A": {"closure_threshold": 3}}


# ---- the present rules ----


def test_the_profile_nearest_to_the_present_rules_is_found_player_by_player_the_lower_of_two():
    present = memoryless(
        {"name": "A", "beds": 9, "per_day": 1.0}, {"name": "B", "beds": 9, "per_day": 1.0}
    ).policy()
    profiles = Profiles(("A", "B"), ((2, 4, 6), (1, 9)))
    assert nearest_profile(profiles, present.with_thresholds({"A": 5, "B": 7})) == (1, 1)
    assert nearest_profile(profiles, present.with_thresholds({"A": 9, "B": 2})) == (2, 0)


def test_the_present_rules_of_several_units_count_together():
    profiles, base = axes({"B": {"closure": {"values": [1, 2, 3]}, "incoming": {"values": [0, 2]}}}, TRUST)
    now = nearest_profile(profiles, base.with_thresholds({"A": 1, "C": 2}))
    assert profiles.policy(base, now).thresholds == {"A": 1, "B": 2, "C": 2}
    assert profiles.policy(base, now).units["B"].incoming == 2
