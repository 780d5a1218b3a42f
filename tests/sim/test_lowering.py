"""Words made numbers: what the keys of a scenario and a policy mean to an engine."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from sim.lowering import LAST_RESORTS, NOBODY, lower_network, lower_policy, plan_intake
from sim.rules.reviews import timetable
from sim.scenario import Scenario, parse_scenario

THREE_UNITS = """
schema = 1
run = {{ seed = 3, warm_up_days = 7, measured_days = {measured_days} }}
units = [
    {{ name = "Ashgill", beds = 6 {ashgill} }},
    {{ name = "Norbeck", beds = 8, stay_factor = 1.5 }},
    {{ name = "Crag", beds = 4 }},
]
diversion = {{ extra_days = 0.5 {diversion} }}
{rest}
[[patients]]
group = "Norbeck emergencies"
home = "Norbeck"
per_day = 2
stay = {{ family = "exponential", mean_days = 3 }}
"""


def scenario(
    *, ashgill: str = "", diversion: str = "", rest: str = "", measured_days: float = 28
) -> Scenario:
    """Three units; keys of the first one, of the diversion table, and more tables as TOML."""
    parts = {"ashgill": ashgill and f", {ashgill}", "diversion": diversion and f", {diversion}"}
    return parse_scenario(THREE_UNITS.format(**parts, rest=rest, measured_days=measured_days))


def ashgill_gates(one: Scenario, policy=None) -> tuple[int, int, int, int]:
    """The levels at which the first unit's gates close and reopen: own, own, incoming, incoming."""
    rules = lower_policy(one, policy or one.policy())
    names = ("own_closes", "own_reopens", "incoming_closes", "incoming_reopens")
    return tuple(int(getattr(rules, name)[0]) for name in names)


@pytest.mark.parametrize(
    ("keys", "levels"),
    [
        ("", (6, 5, 6, 5)),  # closes only when full, open exactly while load < 6
        ("closure_threshold = 4", (4, 3, 4, 3)),  # the incoming threshold follows
        ("closure_threshold = 4, incoming_threshold = 2", (4, 3, 2, 1)),
        ("closure_threshold = 4, incoming_threshold = 2, reopening_gap = 2", (4, 2, 2, 0)),
        ("closure_threshold = 4, reopening_gap = 9", (4, 0, 4, 0)),  # a gap may exceed the threshold
        ("closure_threshold = 0", (0, 0, 0, 0)),
    ],
)
def test_thresholds_and_gap(keys, levels):
    assert ashgill_gates(scenario(ashgill=keys)) == levels


def test_a_policys_closure_threshold_takes_the_incoming_one_along_or_caps_it():
    follows = scenario(ashgill="closure_threshold = 5, reopening_gap = 2")
    assert ashgill_gates(follows, follows.policy().with_thresholds({"Ashgill": 3})) == (3, 1, 3, 1)
    apart = scenario(ashgill="closure_threshold = 5, incoming_threshold = 4")
    assert ashgill_gates(apart, apart.policy().with_thresholds({"Ashgill": 6})) == (6, 5, 4, 3)
    assert ashgill_gates(apart, apart.policy().with_thresholds({"Ashgill": 2})) == (2, 1, 2, 1)


def test_a_named_policy_changes_what_it_names():
    row = """
[[policies]]
name = "hold back"
closure_threshold = { Ashgill = 3 }
reopening_gap = { Ashgill = 2 }
referral_order = { Crag = ["Norbeck"] }
when_all_closed = "any_bed"
"""
    one = scenario(rest=row)
    before, after = (lower_policy(one, one.policy(name)) for name in (None, "hold back"))
    assert after.own_closes.tolist() == [3, 8, 4] and after.own_reopens.tolist() == [1, 7, 3]
    assert before.own_closes.tolist() == [6, 8, 4]
    assert after.referral_order.tolist() == [[1, 2], [2, 0], [1, NOBODY]]
    assert LAST_RESORTS[before.last_resort] == "home_bed" and LAST_RESORTS[after.last_resort] == "any_bed"


def test_the_default_referral_order_is_cyclic_from_the_next_unit_and_an_empty_one_is_nobody():
    everyone = lower_policy(scenario(), scenario().policy())
    assert everyone.referral_order.tolist() == [[1, 2], [2, 0], [0, 1]]
    for keys, first in (("[]", [NOBODY, NOBODY]), ('["Crag"]', [2, NOBODY]), ('["Crag", "Norbeck"]', [2, 1])):
        one = scenario(ashgill=f"referral_order = {keys}")
        assert lower_policy(one, one.policy()).referral_order.tolist() == [first, [2, 0], [0, 1]]


@pytest.mark.parametrize("word", LAST_RESORTS)
def test_last_resorts(word):
    one = scenario(diversion=f'when_all_closed = "{word}"')
    assert LAST_RESORTS[lower_policy(one, one.policy()).last_resort] == word


def test_soft_closure_and_reviews_are_each_units_own():
    one = scenario(ashgill="admit_while_closed = 0.25, review_hours = 8")
    rules = lower_policy(one, one.policy())
    assert rules.admit_while_closed.tolist() == [0.25, 0.0, 0.0]
    assert rules.reviews.reviewed.tolist() == [True, False, False]
    assert set(rules.reviews.units.tolist()) == {0}
    # Review k at (k * 8) / 24, to the last bit, all before day 35.
    assert rules.reviews.times.tolist() == [(k * 8.0) / 24 for k in range(1, 105)]


def test_reviews_of_several_units_go_by_time_then_unit():
    reviews = timetable([12.0, 0.0, 8.0, 12.0], 1.25)
    times, units = reviews.times, reviews.units
    expected = [(8 / 24, 2), (0.5, 0), (0.5, 3), (16 / 24, 2), (1.0, 0), (1.0, 2), (1.0, 3)]
    assert list(zip(times.tolist(), units.tolist(), strict=True)) == expected


@pytest.mark.parametrize("hours", [0.1, 0.7, 1.1, 6.0, 7.3, 24.0, 100.0])
def test_the_last_review_is_the_last_before_the_end(hours):
    times = timetable([hours], 30.0).times
    k = len(times)
    assert times.tolist() == [(i * hours) / 24 for i in range(1, k + 1)]
    assert (k * hours) / 24 < 30.0 <= ((k + 1) * hours) / 24


def test_stay_classes_are_the_distinct_stay_factors():
    network, plan = lower_network(scenario()), plan_intake(scenario())
    assert plan.stay_factors == (1.0, 1.5)
    assert network.stay_class.tolist() == [0, 1, 0]
    assert (network.beds.tolist(), network.extra_days) == ([6, 8, 4], 0.5)
    assert (plan.groups[0].home, plan.horizon_days, plan.delay_hours) == (1, 35.0, None)


def test_the_window_is_split_into_judged_periods_only_for_a_squared_goal():
    plain = scenario()
    assert lower_network(plain).edges.tolist() == [7.0, 35.0]
    judged = 'game = { goal = { kind = "target_utilisation", shape = "squared", judged_over_days = 10 } }'
    assert lower_network(scenario(rest=judged)).edges.tolist() == [
        7.0,
        17.0,
        27.0,
        35.0,
    ]  # and a rest of 8 days
    whole = scenario(rest=judged, measured_days=20)
    assert lower_network(whole).edges.tolist() == [7.0, 17.0, 27.0]


def test_a_policy_leaves_the_network_and_the_intake_alone():
    one = scenario()
    before = lower_network(one)
    policy = dataclasses.replace(one.policy().with_thresholds({"Ashgill": 1}), when_all_closed="turned_away")
    assert lower_policy(one, policy).own_closes.tolist() == [1, 8, 4]
    for field in dataclasses.fields(before):
        assert np.array_equal(getattr(lower_network(one), field.name), getattr(before, field.name))
