"""Rules between keys: each broken rule is told once, and none is a mere consequence of another fault.

Networks are invented.
"""

import json

import pytest

from sim.errors import ScenarioError
from sim.scenario import parse_scenario

STAY = 'stay = { family = "exponential", mean_days = 4 }\n'


def row(table, **keys):
    """A row of an array of tables, one key a line."""
    lines = [f"{key} = {json.dumps(value, ensure_ascii=False)}" for key, value in keys.items()]
    return f"[[{table}]]\n" + "\n".join(lines) + "\n"


def unit(name, beds=12, **keys):
    return row("units", name=name, beds=beds, **keys)


def patients(*homes, per_day=1):
    return "".join(row("patients", group=f"from {home}", home=home, per_day=per_day) + STAY for home in homes)


def said(*tables):
    """What is told of a scenario of these tables, `KEY: rule, value, remedy`, in the order of the lines."""
    try:
        parse_scenario("schema = 1\n" + "".join(tables), file="s.toml")
    except ScenarioError as error:
        return [fault.located("").split(": ", 1)[1] for fault in error.faults]
    return []


ABOVE_BEDS = "must not be above the unit's beds"
ABOVE_OWN = "must not be above the closure threshold (units close to others first)"


def alone(**keys):
    """A network of one unit of 12 beds with these keys."""
    return unit("A", **keys) + patients("A")


def test_a_threshold_may_be_anything_from_0_to_the_beds():
    assert said(alone(closure_threshold=12)) == said(alone(closure_threshold=0)) == []
    assert said(alone(closure_threshold=13)) == [
        f"units.A.closure_threshold: {ABOVE_BEDS}, got 13 for 12 beds, choose a threshold from 0 to 12"
    ]


def test_an_incoming_threshold_may_not_be_above_the_own():
    assert said(alone(closure_threshold=9, incoming_threshold=9)) == []
    told = [
        f"units.A.incoming_threshold: {ABOVE_OWN}, got 10 above 9, "
        "lower it to 9 or less, or raise the closure threshold"
    ]
    assert said(alone(closure_threshold=9, incoming_threshold=10)) == told


def test_an_incoming_threshold_may_not_be_above_the_beds_where_the_own_defaults_to_them():
    assert said(alone(incoming_threshold=12)) == []
    assert said(alone(incoming_threshold=13)) == [
        f"units.A.incoming_threshold: {ABOVE_BEDS}, got 13 for 12 beds, choose a threshold from 0 to 12"
    ]


def test_two_thresholds_above_the_beds_are_two_faults():
    assert len(said(alone(closure_threshold=13, incoming_threshold=14))) == 2


def test_a_fault_of_the_beds_is_no_fault_of_the_thresholds():
    beds = "units.A.beds: must be at least 1, got 0, raise it"
    assert said(alone(beds=0, closure_threshold=3, incoming_threshold=2)) == [beds]
    assert said(
        alone(beds=0, closure_threshold=3),
        "[game]\nstrategies = { A = { from = 1, to = 9 } }\n",
        '[[policies]]\nname = "p"\nclosure_threshold = { A = 4 }\n',
    ) == [beds]


def test_a_fault_of_the_beds_hides_no_fault_between_the_thresholds():
    told = said(alone(beds="12", closure_threshold=3, incoming_threshold=4))
    assert [one.split(":")[0] for one in told] == ["units.A.beds", "units.A.incoming_threshold"]


def test_a_fault_of_one_threshold_is_none_of_the_other():
    told = said(alone(closure_threshold=-1, incoming_threshold=0))
    assert told == ["units.A.closure_threshold: must be at least 0, got -1, raise it"]


def test_referral_orders_name_other_units_once():
    order = ["Norbec", "A", "Norbeck", "Norbeck", "Elsewhere"]
    told = said(unit("A", referral_order=order), unit("Norbeck"), patients("A", "Norbeck"))
    assert told == [
        "units.A.referral_order.1: must be the name of a unit, got 'Norbec', did you mean `Norbeck`?",
        "units.A.referral_order.2: must not name the unit itself, got 'A', remove it",
        "units.A.referral_order.4: must not name a unit twice, got 'Norbeck' again, remove it",
        "units.A.referral_order.5: must be the name of a unit, got 'Elsewhere', known here: `A`, `Norbeck`",
    ]


def test_a_faulted_entry_hides_no_other():
    told = said(unit("A", referral_order=[3, "Norbec"]), unit("Norbeck"), patients("A", "Norbeck"))
    assert [one.split(":")[0] for one in told] == ["units.A.referral_order.1", "units.A.referral_order.2"]


def test_a_home_must_be_a_unit():
    told = said(unit("Ashgill"), patients("Ashgill", "Ashgil"))
    assert told == [
        "patients.from Ashgil.home: must be the name of a unit, got 'Ashgil', did you mean `Ashgill`?"
    ]
    assert "known here: `A`, `B`" in said(unit("A"), unit("B"), patients("A", "Elsewhere"))[0]


def test_of_many_units_a_remedy_names_some():
    units = [unit(f"U{number:02}", 1) for number in range(40)]
    (told,) = said(*units, patients("U00", "Elsewhere"))
    assert told.endswith("`U09`, `U10`, `U11` and 28 more")


def test_a_unit_without_its_name_makes_no_stranger_of_its_patients():
    """Norbeck's patients may well be the nameless unit's; only what looks like Ashgill is surely a slip."""
    told = said(unit("Ashgill"), "[[units]]\nbeds = 18\n", patients("Ashgill", "Norbeck", "Ashgil"))
    assert [one.split(":")[0] for one in told] == ["units.2.name", "patients.from Ashgil.home"]


@pytest.mark.parametrize(("header", "slip"), [("[[units]]", "[[unit]]"), ("[[patients]]", "[[patient]]")])
def test_rows_astray_under_a_misspelt_header_are_the_only_fault(header, slip):
    before, after = (unit(name, referral_order=[]) + patients(name) for name in "AB")
    told = said(before, after.replace(header, slip))
    assert len(told) == 1
    assert told[0].endswith(f"did you mean `{header.strip('[]')}`?")


def test_a_fault_of_one_unit_hides_no_stranger_among_the_homes():
    told = said(unit("A", 0), patients("A", "Elsewhere"))
    assert [one.split(":")[0] for one in told] == ["units.A.beds", "patients.from Elsewhere.home"]


def test_without_units_nothing_is_said_of_homes():
    told = said(patients("A"), "[game]\nstrategies = { A = { from = 1, to = 9 } }\n")
    assert [one.split(":")[0] for one in told] == ["units"]


ISOLATED = (
    "must be some group's home or stand in some referral order, got neither, "
    "add a group with this home, or refer patients to it"
)


def test_a_unit_that_no_patient_can_reach_is_a_fault():
    others = unit("A", referral_order=["B"]), unit("B", referral_order=[])
    assert said(*others, unit("Lone"), patients("A", "B")) == [f"units.Lone: {ISOLATED}"]


@pytest.mark.parametrize(
    "tables",
    [
        (unit("A", referral_order=["Lone"]), unit("B", referral_order=[]), unit("Lone"), patients("A", "B")),
        (unit("A"), unit("B", referral_order=[]), unit("Lone"), patients("A", "B")),
        (unit("A", referral_order=[]), unit("Lone"), patients("A", "Lone")),
        (
            unit("A", referral_order=[]), unit("Lone"), patients("A"),
            '[[policies]]\nname = "p"\nreferral_order = { A = ["Lone"] }\n',
        ),
    ],
    ids=["it is referred to", "by default everyone is referred to", "it is a home", "a policy refers to it"],
)  # fmt: skip
def test_a_unit_that_some_patient_can_reach_is_none(tables):
    assert said(*tables) == []


def test_a_unit_alone_needs_patients():
    told = said(unit("A"), patients("B"))
    assert [one.split(":")[0] for one in told] == ["patients.from B.home"]
    assert said(unit("A"), unit("B", referral_order=[]), patients("B")) == [f"units.A: {ISOLATED}"]


def test_a_unit_whose_thresholds_admit_nobody_is_legal():
    assert said(unit("A", closure_threshold=0), unit("B"), patients("A", "B")) == []
    assert said(unit("A"), unit("B", incoming_threshold=0), patients("A")) == []


def test_strategies_lie_between_0_and_the_beds():
    game = "[game]\nstrategies = { A = { from = 0, to = 13 }, B = { values = [4, 19, 18, 30] } }\n"
    remedy = "choose a threshold from 0 to"
    assert said(unit("A"), unit("B", 18), patients("A", "B"), game) == [
        f"game.strategies.A.to: {ABOVE_BEDS}, got 13 for 12 beds, {remedy} 12",
        f"game.strategies.B.values.2: {ABOVE_BEDS}, got 19 for 18 beds, {remedy} 18",
        f"game.strategies.B.values.4: {ABOVE_BEDS}, got 30 for 18 beds, {remedy} 18",
    ]
    assert said(alone(), "[game]\nstrategies = { A = { from = 12, to = 12 } }\n") == []
    told = said(alone(), "[game]\nstrategies = { A = { from = 13, to = 14 } }\n")
    assert [one.split(":")[0] for one in told] == ["game.strategies.A.from", "game.strategies.A.to"]


def test_strategies_of_an_unknown_unit_with_a_fault_inside():
    told = said(alone(), "[game]\nstrategies = { Aa = { from = -1, to = 9 } }\n")
    assert [one.split(":")[0] for one in told] == ["game.strategies.Aa", "game.strategies.Aa.from"]
    assert "did you mean `A`?" in told[0]


def test_policies_keep_to_units_and_beds():
    policies = """
[[policies]]
name = "p"
closure_threshold = { A = 12, Bb = 3 }
incoming_threshold = { A = 13 }
reopening_gap = { C = 1 }
referral_order = { A = ["B", "A"], B = ["Q"] }
"""
    told = said(unit("A"), unit("B"), patients("A", "B"), policies)
    assert told == [
        "policies.p.closure_threshold.Bb: must be the name of a unit, got 'Bb', did you mean `B`?",
        f"policies.p.incoming_threshold.A: {ABOVE_BEDS}, got 13 for 12 beds, choose a threshold from 0 to 12",
        "policies.p.reopening_gap.C: must be the name of a unit, got 'C', known here: `A`, `B`",
        "policies.p.referral_order.A.2: must not name the unit itself, got 'A', remove it",
        "policies.p.referral_order.B.1: must be the name of a unit, got 'Q', known here: `A`, `B`",
    ]


def test_a_policy_may_set_an_incoming_threshold_above_the_own():
    """A run uses the lower of the two; only the file's own pair must agree."""
    policy = '[[policies]]\nname = "p"\nincoming_threshold = { A = 12 }\n'
    assert said(alone(closure_threshold=3, incoming_threshold=2), policy) == []


def test_names_differ():
    policies = '[[policies]]\nname = "p"\n[[policies]]\nname = "p"\n'
    told = said(unit("A"), unit("A", 18), patients("A", "A"), policies)
    assert told == [
        "units.A.name: must not be the name of an earlier unit too, got 'A' again, rename one of them",
        "patients.from A.group: must not be the name of an earlier group too, got 'from A' again, "
        "rename one of them",
        "policies.p.name: must not be the name of an earlier policy too, got 'p' again, rename one of them",
    ]


def test_beds_of_two_units_of_one_name_judge_no_threshold():
    told = said(
        unit("A", 3), unit("A", 18), patients("A"), "[game]\nstrategies = { A = { from = 1, to = 9 } }\n"
    )
    assert len(told) == 1


@pytest.mark.parametrize("typed", ["e\u0301", "e\\u0301"], ids=["as two characters", "as an escape"])
def test_names_that_only_look_different_are_the_same(typed):
    """One letter of two characters is the letter of one character (Unicode Standard Annex 15, form NFC)."""
    told = said(unit("\u00e9"), unit("X", 18).replace("X", typed), patients("\u00e9"))
    assert told == [
        "units.\u00e9.name: must not be the name of an earlier unit too, got '\u00e9' again, "
        "rename one of them"
    ]


def goal(**keys):
    return "[game.goal]\n" + "".join(f"{key} = {json.dumps(value)}\n" for key, value in keys.items())


def test_a_squared_goal_is_judged_within_the_measured_days():
    short = "[run]\nmeasured_days = 300\n"
    told = "game.goal.judged_over_days: must not be longer than the measured days, got"
    assert said(short, alone(), goal(shape="squared", judged_over_days=300)) == []
    assert said(short, alone(), goal(shape="squared", judged_over_days=300.5)) == [
        f"{told} 300.5 over 300, give 300 or less, or raise `run.measured_days`"
    ]
    assert said(short, alone(), goal(shape="squared")) == [
        f"{told} 365 (the default) over 300, give 300 or less, or raise `run.measured_days`"
    ]
    assert said(alone(), goal(shape="squared", judged_over_days=1000)) == [
        f"{told} 1,000 over 728, give 728 or less, or raise `run.measured_days`"
    ]
    assert said(short, alone(), goal(shape="absolute", judged_over_days=1000)) == []
    assert said(short, alone(), goal(judged_over_days=1000)) == []


def test_a_fault_of_the_measured_days_is_none_of_the_goal():
    told = said("[run]\nmeasured_days = -3\n", alone(), goal(shape="squared"))
    assert told == ["run.measured_days: must be above 0, got -3, raise it"]


def test_a_replication_must_fit_into_memory():
    run = "[run]\nwarm_up_days = 0\nmeasured_days = 100_000\n"
    assert said(run, unit("A"), patients("A", per_day=500)) == []
    told = said(run, unit("A"), patients("A", per_day=500) + patients("A", per_day=1).replace("from", "to"))
    assert told == [
        "run.measured_days: a replication may hold at most 50,000,000 patients, got about 50,100,000, "
        "shorten the run or lower the rates"
    ]
    assert said(run, alone(review_hours=2.4)) == []
    (one,) = said(run, alone(review_hours=2.0))
    assert one.startswith("units.A.review_hours: a replication may hold at most 1,000,000 reviews of a unit")
    policy = '[[policies]]\nname = "p"\nreview_hours = { A = 1e-300 }\n'
    (one,) = said(run, alone(), policy)
    assert one.startswith(
        "policies.p.review_hours.A: a replication may hold at most 1,000,000 reviews of a unit"
    )


MANY = """\
schema = 2                                                      #! schema
titel = "misspelt"                                              #! titel
[run]
warm_up_days = nan                                              #! run.warm_up_days
[[units]]                                                       #! units.1.name
beds = 18
[[units]]
name = "Ashgill"
beds = 12.5                                                     #! units.Ashgill.beds
closure_threshold = 40
admit_while_closed = 2                                          #! units.Ashgill.admit_while_closed
[[units]]
name = "Norbeck"
beds = 18
closure_threshold = 19                                          #! units.Norbeck.closure_threshold
referral_order = ["Norbeck", "Ashgil"]      #! units.Norbeck.referral_order.1 units.Norbeck.referral_order.2
[[units]]
name = "Norbeck"                                                #! units.Norbeck.name
beds = 3
[[patients]]
group = "N"
home = "Norbek"                                                 #! patients.N.home
per_day = -3                                                    #! patients.N.per_day
stay = { family = "gamma", mean_days = 0 }     #! patients.N.stay.cv patients.N.stay.mean_days
[[patients]]                                                    #! patients.A.home
group = "A"
per_day = 2
stay = { family = "empirical", file = "no.csv", column = "x" }  #! patients.A.stay.file
[diversion]
when_all_closed = "homebed"                                     #! diversion.when_all_closed
[game.strategies.Ashgill]
from = 1
to = 40
[game.strategies.Nobreck]                                       #! game.strategies.Nobreck
values = []                                                     #! game.strategies.Nobreck.values
[[policies]]
name = "p"
reopening_gap = { Ashgill = 0 }                                 #! policies.p.reopening_gap.Ashgill
"""


def test_every_fault_of_a_file_is_told_at_once_at_its_line():
    """Every marked key, and no other: the unsound beds make no fault of a threshold of 40."""
    lines = enumerate(MANY.split("\n"), start=1)
    marked = [(line, key) for line, content in lines for key in content.partition("#! ")[2].split()]
    with pytest.raises(ScenarioError) as caught:
        parse_scenario(MANY, file="s.toml")
    faults = caught.value.faults
    assert [(fault.line, fault.key) for fault in faults] == marked
    assert str(caught.value).split("\n") == [fault.located("s.toml") for fault in faults]
    assert all(fault.rule and fault.value and fault.remedy for fault in faults)
