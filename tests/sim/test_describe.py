"""The scenario read back: loads and stays worked out by hand, and what an analyst is advised.

Offered load is arrivals a day times mean stay in days, in beds: Little's law (Little, "A proof for the
queuing formula L = λW", Operations Research 9, 1961; from memory). Networks are invented.
"""

import json
import math

import pytest

from sim.scenario import parse_scenario
from sim.scenario.describe import advice, describe

TEXT = """
schema = 1
title = "Three invented units"
[run]
warm_up_days = 126
measured_days = 728
replications = 4
[[units]]
name = "A"
beds = 10
closure_threshold = 9
target_utilisation = 0.75
stay_factor = 1.5
[[units]]
name = "B"
beds = 20
target_utilisation = 0.8
[[units]]
name = "C"
beds = 3
target_utilisation = 0.8
[[patients]]
group = "A long"
home = "A"
per_day = 0.5
stay = { family = "lognormal", mean_days = 8, cv = 2 }
[[patients]]
group = "B"
home = "B"
per_day = 4
hour_of_day = [1, 1, 1, 1, 1, 1, 1, 1, 2, 2, 2, 2, 2, 2, 2, 2, 1, 1, 1, 1, 1, 1, 1, 1]
stay = { family = "exponential", mean_days = 3 }
[[patients]]
group = "A short"
home = "A"
per_day = 2
stay = { family = "erlang", mean_days = 1, stages = 4 }
[diversion]
delay = { family = "constant", mean_hours = 2 }
extra_days = 0.25
[game]
strategies = { A = { from = 5, to = 10 }, B = { values = [20, 10] } }
[[policies]]
name = "C takes nobody"
incoming_threshold = { C = 0 }
"""
SCENARIO = parse_scenario(TEXT)
DOCUMENT = describe(SCENARIO, SCENARIO.policy())


def test_offered_load_by_hand():
    """A: (0.5 x 8 + 2 x 1) beds, half as long again in A; B: 4 x 3 beds; C has no patients of its own."""
    loads = {name: unit["offered_load_beds"] for name, unit in DOCUMENT["units"].items()}
    assert loads == pytest.approx({"A": 9.0, "B": 12.0, "C": 0.0})
    shares = {name: unit["offered_load_per_bed"] for name, unit in DOCUMENT["units"].items()}
    assert shares == pytest.approx({"A": 0.9, "B": 0.6, "C": 0.0})
    arrivals = {name: unit["arrivals_per_day"] for name, unit in DOCUMENT["units"].items()}
    assert arrivals == pytest.approx({"A": 2.5, "B": 4.0, "C": 0.0})


def test_offered_load_follows_demand_and_not_the_weekly_shape():
    more = SCENARIO.with_demand(1.25)
    assert describe(more, more.policy())["units"]["B"]["offered_load_beds"] == pytest.approx(15.0)
    plain = SCENARIO.exponential()
    assert describe(plain, plain.policy())["units"]["A"]["offered_load_beds"] == pytest.approx(9.0)


def test_stays_in_days_by_hand():
    """Medians: lognormal mean / sqrt(1 + cv^2), exponential mean x log 2 (textbook formulas)."""
    long, b, short = (DOCUMENT["patients"][name] for name in ("A long", "B", "A short"))
    assert (long["family"], long["mean_days"], long["cv"]) == ("lognormal", 8.0, 2.0)
    assert long["median_days"] == pytest.approx(8 / math.sqrt(5))
    assert b["median_days"] == pytest.approx(3 * math.log(2))
    assert (short["mean_days"], short["cv"]) == pytest.approx((1.0, 0.5))
    assert [(g["varies_by_hour"], g["varies_by_weekday"]) for g in (long, b)] == [
        (False, False),
        (True, False),
    ]


def test_delays_in_hours():
    assert DOCUMENT["diversion"] == {
        "when_all_closed": "home_bed",
        "delay": {"family": "constant", "mean_hours": 2.0, "cv": 0.0, "median_hours": 2.0},
        "extra_days": 0.25,
    }
    plain = SCENARIO.exponential()
    assert describe(plain, plain.policy())["diversion"]["delay"] is None


def test_rules_are_those_of_the_policy():
    assert DOCUMENT["units"]["A"]["closure_threshold"] == 9
    assert DOCUMENT["units"]["B"]["referral_order"] == ["C", "A"]
    other = describe(SCENARIO, SCENARIO.policy("C takes nobody").with_thresholds({"A": 3}))
    assert [other["units"][name]["incoming_threshold"] for name in "ABC"] == [3, 20, 0]
    assert DOCUMENT["policies"] == ["C takes nobody"]


def test_the_size_of_the_game_by_hand():
    """A chooses among 5..10, B between two, C among 1..3; every cell is run 4 times."""
    game = DOCUMENT["game"]
    assert game["strategies"] == {"A": [5, 6, 7, 8, 9, 10], "B": [20, 10], "C": [1, 2, 3]}
    assert (game["cells"], game["runs"]) == (36, 144)


def test_the_document_is_json():
    assert json.loads(json.dumps(DOCUMENT, allow_nan=False)) == DOCUMENT


def advised(old="", new=""):
    """What is advised of the scenario with `old` written anew."""
    assert TEXT.count(old) == 1 or not old
    return advice(parse_scenario(TEXT.replace(old, new) if old else TEXT))


def test_nothing_is_advised_where_nothing_is_amiss():
    assert advised() == DOCUMENT["advice"] == []


def test_a_short_warm_up():
    """The longest mean stay is 8 days, 12 in A, and five of them are 60 days; 63 is the next whole week."""
    assert advised("warm_up_days = 126", "warm_up_days = 60") == []
    (said,) = advised("warm_up_days = 126", "warm_up_days = 59")
    assert said == (
        "run.warm_up_days is 59, less than 5 mean stays (60.0 days): measures will lean towards the empty "
        "network that a run starts from; raise it to at least 63"
    )


def test_weeks_that_are_not_whole():
    unequal, equal = "day_of_week = [1, 1, 1, 1, 1, 1, 0.5]\n", "day_of_week = [2, 2, 2, 2, 2, 2, 2]\n"
    run = "warm_up_days = 126\nmeasured_days = 728\n"
    cut = "warm_up_days = 127.5\nmeasured_days = 729\n"
    assert advised(run, cut) == []
    for week, number in ((unequal, 2), (equal, 0)):
        text = TEXT.replace(run, cut).replace("per_day = 4\n", f"per_day = 4\n{week}")
        said = advice(parse_scenario(text))
        assert len(said) == number
    said = advice(parse_scenario(TEXT.replace(run, cut).replace("per_day = 4\n", f"per_day = 4\n{unequal}")))
    assert said[0] == (
        "run.warm_up_days is 127.5, no multiple of 7, and demand varies by weekday: some weekdays weigh more "
        "than others"
    )
    assert said[1].startswith("run.measured_days is 729, no multiple of 7")


def test_a_missing_target_matters_to_a_game():
    (said,) = advised("beds = 20\ntarget_utilisation = 0.8\n", "beds = 20\n")
    assert said == (
        "no target_utilisation for B: `game` needs one for every unit whose goal has a target (or --target)"
    )
    assert advice(parse_scenario(TEXT.replace("target_utilisation = 0.8\n", "")).with_target(0.8)) == []


def test_one_replication():
    (said,) = advised("replications = 4", "replications = 1")
    assert said == "run.replications is 1: one replication gives no interval"


def test_all_that_is_amiss_is_said_at_once():
    run = "warm_up_days = 126\nmeasured_days = 728\nreplications = 4\n"
    text = TEXT.replace(run, "warm_up_days = 1\nreplications = 1\n").replace("target_utilisation = 0.8\n", "")
    assert len(advice(parse_scenario(text))) == 3
