"""One full set of rules: from the file, from a row of `[[policies]]`, and changed for a game or a command.

Networks are invented.
"""

import pytest

from sim.scenario import parse_scenario

TEXT = """
schema = 1
[[units]]
name = "A"
beds = 12
closure_threshold = 11
incoming_threshold = 9
reopening_gap = 3
admit_while_closed = 0.2
review_hours = 8
referral_order = ["C"]
[[units]]
name = "B"
beds = 18
[[units]]
name = "C"
beds = 6
closure_threshold = 4
[[units]]
name = "D"
beds = 2
referral_order = []
[[patients]]
group = "all"
home = "A"
per_day = 1
stay = { family = "exponential", mean_days = 1 }
[diversion]
when_all_closed = "turned_away"
[[policies]]
name = "close only when full"
closure_threshold = { A = 12, C = 6 }
[[policies]]
name = "everything else"
incoming_threshold = { A = 11, B = 5 }
reopening_gap = { A = 1 }
admit_while_closed = { A = 0, B = 0.5 }
review_hours = { A = 0, D = 24 }
referral_order = { A = [], B = ["D", "A"] }
when_all_closed = "any_bed"
"""
SCENARIO = parse_scenario(TEXT)
FILE = SCENARIO.policy()


def incoming(policy):
    """Unit name -> the incoming threshold that a run uses."""
    return {name: rules.incoming for name, rules in policy.units.items()}


def test_the_files_own_rules_with_their_defaults():
    assert FILE.name == "as in the file"
    assert FILE.when_all_closed == "turned_away"
    assert list(FILE.units) == ["A", "B", "C", "D"]
    assert FILE.thresholds == {"A": 11, "B": 18, "C": 4, "D": 2}
    assert incoming(FILE) == {"A": 9, "B": 18, "C": 4, "D": 2}
    a, b = FILE.units["A"], FILE.units["B"]
    assert (a.reopening_gap, a.admit_while_closed, a.review_hours) == (3, 0.2, 8.0)
    assert (b.reopening_gap, b.admit_while_closed, b.review_hours) == (1, 0.0, 0.0)


def test_the_default_referral_order_is_cyclic_from_the_next_unit():
    orders = {name: rules.referral_order for name, rules in FILE.units.items()}
    assert orders == {"A": ("C",), "B": ("C", "D", "A"), "C": ("D", "A", "B"), "D": ()}


def test_a_row_changes_what_it_names_and_nothing_else():
    policy = SCENARIO.policy("close only when full")
    assert policy.name == "close only when full"
    assert policy.thresholds == {"A": 12, "B": 18, "C": 6, "D": 2}
    assert policy.when_all_closed == "turned_away"
    assert policy.units["A"].reopening_gap == 3
    assert {name: policy.units[name].referral_order for name in policy.units} == {
        name: FILE.units[name].referral_order for name in FILE.units
    }


def test_a_row_may_change_every_rule():
    policy = SCENARIO.policy("everything else")
    a, b, d = (policy.units[name] for name in "ABD")
    assert policy.when_all_closed == "any_bed"
    assert (a.reopening_gap, a.admit_while_closed, a.review_hours, a.referral_order) == (1, 0.0, 0.0, ())
    assert (b.admit_while_closed, b.review_hours, b.referral_order) == (0.5, 0.0, ("D", "A"))
    assert d.review_hours == 24.0
    assert policy.thresholds == FILE.thresholds
    assert incoming(policy) == {"A": 11, "B": 5, "C": 4, "D": 2}


def test_an_incoming_threshold_follows_where_the_file_gives_none():
    policy = FILE.with_thresholds({"B": 7, "C": 6})
    assert policy.thresholds == {"A": 11, "B": 7, "C": 6, "D": 2}
    assert incoming(policy) == {"A": 9, "B": 7, "C": 6, "D": 2}


def test_an_incoming_threshold_of_its_own_stays_but_never_above_the_closure_threshold():
    """`min(incoming, k)`: lowered with k, and itself again where k rises."""
    lowered = FILE.with_thresholds({"A": 5})
    assert incoming(lowered)["A"] == 5
    assert lowered.units["A"].incoming_threshold == 9
    assert incoming(lowered.with_thresholds({"A": 12}))["A"] == 9
    assert incoming(FILE.with_thresholds({"A": 0}))["A"] == 0


def test_the_gap_travels_with_the_threshold():
    for k in range(13):
        assert FILE.with_thresholds({"A": k}).units["A"].reopening_gap == 3


def test_later_changes_hold_over_earlier_ones():
    """`--threshold` over `--policy` over the file; `--incoming` beside them."""
    policy = SCENARIO.policy("close only when full").with_thresholds({"A": 8})
    assert policy.thresholds == {"A": 8, "B": 18, "C": 6, "D": 2}
    assert incoming(policy)["A"] == 8
    with_incoming = policy.with_rule("incoming_threshold", {"A": 2, "B": 17})
    assert incoming(with_incoming) == {"A": 2, "B": 17, "C": 6, "D": 2}
    assert with_incoming.thresholds == policy.thresholds


def test_changes_leave_the_policy_they_start_from():
    before = dict(FILE.units)
    FILE.with_thresholds({"A": 1}).with_rule("referral_order", {"A": ()})
    assert dict(FILE.units) == before
    assert SCENARIO.policy() == FILE


def test_no_change_gives_an_equal_policy():
    assert FILE.with_thresholds({}) == FILE
    assert FILE.with_thresholds(FILE.thresholds) == FILE
    assert SCENARIO.with_demand(2.0).policy() == FILE


def test_there_is_no_policy_of_another_name():
    with pytest.raises(KeyError, match="close when full"):
        SCENARIO.policy("close when full")
