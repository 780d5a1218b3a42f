"""The registry: every declared rule comes with all that a rule must bring, in both engines, and is free when off."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given, settings

from analysis.chain import refusals, solve
from analysis.verification import verify
from sim import compiled, reference
from sim.errors import ScenarioError
from sim.intake import ARRIVAL, STAY, draw_intake
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.record import Record
from sim.reference import DISCHARGE, NEW_ARRIVAL
from sim.replicate import replicate
from sim.rules import RULES, tables
from sim.scenario import Scenario, parse_scenario
from sim.scenario.describe import describe
from sim.scenario.policies import UnitRules
from sim.trace import Trace
from tests.builders import Case, traced
from tests.judge import Account, Judge, RuleBroken, differences
from tests.sim.rule_cases import CASES
from tests.strategies import cases

NAMES = [rule.name for rule in RULES]
each_rule = pytest.mark.parametrize("name", NAMES)


def scenario(unit: str = "", diversion: str = "", *, measured_days: int = 91) -> Scenario:
    """Two invented units of 4 and 5 beds with exponential stays; the keys go to the first unit and the diversion."""
    return parse_scenario(
        f"""
        schema = 1
        run = {{ seed = 12, warm_up_days = 21, measured_days = {measured_days}, replications = 30 }}
        units = [{{ name = "Ashgill", beds = 4{", " * bool(unit)}{unit} }}, {{ name = "Norbeck", beds = 5 }}]
        diversion = {{ {diversion} }}
        [[patients]]
        group = "Ashgill emergencies"
        home = "Ashgill"
        per_day = 1.4
        stay = {{ family = "exponential", mean_days = 2.5 }}
        [[patients]]
        group = "Norbeck emergencies"
        home = "Norbeck"
        per_day = 1.5
        stay = {{ family = "exponential", mean_days = 2.5 }}
        """
    )


def records(one: Scenario, replication: int = 0) -> list[Record]:
    """The same replication by every engine."""
    network, rules = lower_network(one), lower_policy(one, one.policy())
    drawn = draw_intake(plan_intake(one), replication)
    return [engine.run(network, rules, drawn) for engine in (reference, compiled)]


def test_every_declared_rule_has_its_case_and_every_case_its_rule():
    assert sorted(CASES) == sorted(NAMES)


@each_rule
def test_the_rule_acts_and_both_engines_implement_it_alike(name):
    on, off = records(scenario(**CASES[name].on)), records(scenario(**CASES[name].off))
    assert on[0].hash == on[1].hash
    assert off[0].hash == off[1].hash
    assert on[0].hash != off[0].hash


@each_rule
def test_off_gives_the_same_bits_as_absent(name):
    case = CASES[name]
    off, absent = scenario(**case.off), scenario(**case.needs)
    assert draw_intake(plan_intake(off), 3).hash == draw_intake(plan_intake(absent), 3).hash
    assert [one.hash for one in records(off)] == [one.hash for one in records(absent)]


@each_rule
@pytest.mark.parametrize("engine", [reference, compiled], ids=["reference", "compiled"])
def test_the_hand_worked_event_log(name, engine):
    case, trace = CASES[name].case, Trace()
    record = engine.run(case.network, case.rules, case.intake, trace=trace)
    assert trace.events == list(CASES[name].log)
    assert record.faults(case.network.measured_days) == []
    assert differences(record, Account(case).of(trace.events)) == []


def broken(case: Case) -> bool:
    """Whether judge or accountant find fault with the reference engine's run."""
    try:
        log, record = traced(case)
        Judge(case).follow(log)
    except (RuleBroken, IndexError):
        return True
    return differences(record, Account(case).of(log)) != []


@each_rule
def test_a_planted_fault_is_caught(name, monkeypatch):
    case = CASES[name].case
    assert not broken(case)
    CASES[name].plant(monkeypatch)
    assert broken(case)
    log, _ = traced(case)
    assert log != list(CASES[name].log)


def test_the_random_networks_put_every_rule_in_force():
    seen = dict.fromkeys(NAMES, 0)

    @settings(max_examples=150, deadline=None, derandomize=True, database=None)
    @given(cases())
    def look(case):
        for name in NAMES:
            seen[name] += CASES[name].in_force(case)

    look()
    assert min(seen.values()) >= 10, seen


@each_rule
def test_what_the_exact_chain_makes_of_it(name):
    """Refused in words, or modelled: then the simulation agrees with the chain (false-alarm rate 1e-3 a rule)."""
    case = CASES[name]
    one = scenario(**case.on, measured_days=182)
    reasons = refusals(one, one.policy())
    assert bool(reasons) == case.chain_refuses, reasons
    if not reasons:
        replies = replicate(one, [one.policy()], range(30), engine="compiled")
        found = [run.record for reply in replies for run in reply]
        assert verify(found, solve(one, one.policy()), one, false_alarm_rate=1e-3).agrees
        # A chain without the rule must be told apart, or the agreement says nothing.
        plain = scenario(**case.off, measured_days=182)
        assert not verify(found, solve(plain, plain.policy()), one, false_alarm_rate=1e-3).agrees


@each_rule
def test_it_reads_back_in_words_when_on_and_not_when_off(name):
    on, off = scenario(**CASES[name].on), scenario(**CASES[name].off)
    assert describe(on, on.policy())["rules"][name]
    if name != "last resort":  # there always is one
        assert name not in describe(off, off.policy())["rules"]


# ---- the declarations together ----


def test_purposes_and_kinds_are_numbered_once():
    purposes = [ARRIVAL, STAY, *itertools.chain(*(rule.purposes.values() for rule in RULES))]
    assert len(set(purposes)) == len(purposes)
    kinds = [DISCHARGE, NEW_ARRIVAL, *itertools.chain(*(rule.event_kinds.values() for rule in RULES))]
    assert len(set(kinds)) == len(kinds)
    assert {rule.name: list(rule.event_kinds.values()) for rule in RULES if rule.event_kinds} == {
        "transfers": [20], "beds out of use": [30], "reviews": [40]
    }  # fmt: skip


def test_keys_and_record_columns_are_declared_once():
    for which in ("unit_keys", "policy_keys", "diversion_keys"):
        keys = [key for table in tables(which) for key in table.model_fields]
        assert len(set(keys)) == len(keys)
    columns = [column for rule in RULES for column in rule.record_columns]
    assert len(set(columns)) == len(columns) and set(columns) <= set(Record.__dataclass_fields__)
    parameters = {name for table in tables("parameters") for name in table.__dataclass_fields__}
    assert set(UnitRules.__dataclass_fields__) == parameters | {"closure_threshold", "referral_order"}


# ---- beds out of use: its keys and its draws ----


@pytest.mark.parametrize(
    ("row", "key"),
    [
        ("{ beds = 1 }", "units.Ashgill.out_of_use.1"),
        ("{ beds = 1, from_day = 3 }", "units.Ashgill.out_of_use.1"),
        ("{ beds = 1, from_day = 3, days = 2, per_year = 4 }", "units.Ashgill.out_of_use.1"),
        ("{ beds = 9, from_day = 3, days = 2 }", "units.Ashgill.out_of_use.1.beds"),
        ("{ beds = 0, from_day = 3, days = 2 }", "units.Ashgill.out_of_use.1.beds"),
        ("{ beds = 1, from_day = -3, days = 2 }", "units.Ashgill.out_of_use.1.from_day"),
        ("{ beds = 1, per_year = 4, mean_days = 0 }", "units.Ashgill.out_of_use.1.mean_days"),
        ("{ beds = 1, per_year = 4, mean_day = 2 }", "units.Ashgill.out_of_use.1.mean_day"),
    ],
)
def test_faults_of_beds_out_of_use(row, key):
    with pytest.raises(ScenarioError) as caught:
        scenario(unit=f"out_of_use = [{row}]")
    assert key in [fault.key for fault in caught.value.faults]


def test_outages_that_overlap_add_up_to_no_more_than_the_beds():
    one = scenario(
        unit="out_of_use = [{ from_day = 5, days = 10, beds = 3 }, { from_day = 8, days = 4, beds = 3 },"
        " { from_day = 15, days = 1, beds = 4 }]"
    )
    staffing = draw_intake(plan_intake(one), 0).staffing
    assert list(zip(*(column.tolist() for column in vars(staffing).values()), strict=True)) == [
        (5.0, 0, 1), (8.0, 0, 0), (12.0, 0, 1), (15.0, 0, 0), (16.0, 0, 4)
    ]  # fmt: skip


def test_random_outages_have_their_rate_and_length():
    """12 a year for 5 days on average: over 60 replications of 112 days, 220.9 outages expected.

    Both bounds are 4.9 standard errors wide: a false alarm of 1e-6 each; a rate 1.5 times as high fails them.
    """

    def outages(per_year: float) -> tuple[int, float]:
        one = scenario(unit=f"out_of_use = [{{ per_year = {per_year}, mean_days = 5, beds = 1 }}]")
        staffings = [draw_intake(plan_intake(one), replication).staffing for replication in range(60)]
        out_days = sum(_days_out(staffing, beds=4, horizon=112.0) for staffing in staffings)
        falls = sum(int((staffing.beds < [4, *staffing.beds[:-1]]).sum()) for staffing in staffings)
        return falls, out_days

    falls, out_days = outages(12)
    assert abs(falls - 220.9) < 4.9 * 220.9**0.5
    assert abs(out_days / falls - 5) < 1.65
    assert abs(outages(18)[0] - 220.9) > 4.9 * 220.9**0.5


def _days_out(staffing, *, beds: int, horizon: float) -> float:
    times = [*staffing.times.tolist(), horizon]
    return sum(
        (end - start) * (beds - now)
        for start, end, now in zip(times, times[1:], staffing.beds.tolist(), strict=False)
    )


def test_adding_a_row_or_an_outage_leaves_every_other_draw_as_it_was():
    row = "{ per_year = 40, mean_days = 2, beds = 1 }"
    one, two = (
        scenario(unit=f"out_of_use = [{row}]"),
        scenario(unit=f"out_of_use = [{row}, {{ from_day = 1, days = 0.5, beds = 1 }}]"),
    )
    first, second = (draw_intake(plan_intake(each), 0) for each in (one, two))
    plain = draw_intake(plan_intake(scenario()), 0)
    for drawn in (first, second):
        assert (drawn.arrival == plain.arrival).all() and (drawn.drawn_stay == plain.drawn_stay).all()
    assert set(first.staffing.times.tolist()) <= set(second.staffing.times.tolist())


def test_utilisation_is_against_staffed_bed_time():
    """Half the beds out for the whole run: the same patients fill half the bed-time."""
    from analysis.simulation import summarise

    one = scenario(unit="out_of_use = [{ from_day = 0, days = 1000, beds = 2 }]")
    record = records(one)[1]
    measures = summarise([record], one, confidence=0.95).units["Ashgill"]
    assert record.staffed_days[0, 0].tolist() == [0, 0, 91.0, 0, 0, 0]
    assert measures["utilisation"].mean == pytest.approx(measures["mean_occupied"].mean / 2)
