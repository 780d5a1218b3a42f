"""The simulation held against the chain: what must pass, what must be caught, how often chance fails."""

import dataclasses
import json
from pathlib import Path

import numpy as np
import pytest
from scipy.special import ndtri

from analysis.chain import solve
from analysis.command.entry import run
from analysis.confidence import critical_value
from analysis.verification import FALSE_ALARM_RATE, LEAST_VISITS, pools, verify
from sim import reference
from sim.record import FULL, INCOMING_CLOSED, OWN_CLOSED
from sim.replicate import replicate
from sim.scenario import parse_scenario, read_scenario
from tests.analysis.builders import memoryless, record

DEMO = Path(__file__).parents[2] / "scenarios" / "exponential.toml"
CLOSES_EARLY = {"Ewe": 4, "Tern": 6}
REPLICATIONS = 12


@pytest.fixture(scope="module")
def demo():
    return read_scenario(DEMO)


def records_of(scenario, policy, replications=REPLICATIONS):
    replies = replicate(scenario, [policy], range(replications), engine="reference")
    return [reply[0].record for reply in replies]


def held(scenario, policy, *, exact=None):
    """The engine's records of a policy against the chain's measures of it (or of another one)."""
    return verify(records_of(scenario, policy), exact or solve(scenario, policy), scenario)


def off(result):
    """(where, measure) of everything that does not agree."""
    return {(one.where, one.measure) for one in result.measures if not one.agrees}


# ---- a right engine and a right chain ----


def test_the_reference_engine_agrees_with_the_chain(demo):
    """False-alarm rate at most 1 % for either policy; the seeds are fixed."""
    for policy in (demo.policy(), demo.policy().with_thresholds(CLOSES_EARLY)):
        result = held(demo, policy)
        assert result.agrees and off(result) == set()
        assert result.false_alarm_rate == FALSE_ALARM_RATE and result.replications == REPLICATIONS
        tested = [one for one in result.measures if one.z is not None]
        assert all(abs(one.z) <= result.critical for one in tested) and len(tested) > 30


def test_limits_are_students_bonferroni_over_what_was_tested(demo):
    result = held(demo, demo.policy())
    tested = [one for one in result.measures if one.reason is None]
    assert result.critical == critical_value(0.99, REPLICATIONS - 1, comparisons=len(tested))
    for one in tested:
        assert one.low <= one.mean <= one.high
        if one.high > one.low:
            error = (one.high - one.low) / 2 / result.critical
            assert one.z == pytest.approx((one.mean - one.exact) / error)


# ---- planted errors, each of which must be caught ----


def closes_a_bed_late(unit):
    if unit.load > unit.own_closes:
        unit.own_open = False
    elif unit.load <= unit.own_reopens:
        unit.own_open = True
    unit.incoming_open = unit.load < unit.incoming_closes


def test_a_gate_that_closes_a_bed_late_is_caught(demo, monkeypatch):
    monkeypatch.setattr(reference.Unit, "set_gates", closes_a_bed_late)
    assert ("Ewe", "closed_fraction") in off(held(demo, demo.policy().with_thresholds(CLOSES_EARLY)))


def test_a_gate_that_never_closes_a_full_unit_is_caught(demo, monkeypatch):
    """Nothing moves but the time closed: a full unit admits nobody either way."""
    monkeypatch.setattr(reference.Unit, "set_gates", closes_a_bed_late)
    caught = off(held(demo, demo.policy()))
    assert caught == {("Ewe", "closed_fraction"), ("Tern", "closed_fraction")}


def test_a_forgotten_last_resort_is_caught(demo, monkeypatch):
    monkeypatch.setattr(reference.Model, "last_resort", lambda model, home: None)
    caught = off(held(demo, demo.policy().with_thresholds(CLOSES_EARLY)))
    assert ("network", "turned_away_per_day") in caught


def test_a_wrong_mean_stay_is_caught(demo):
    longer = parse_scenario(DEMO.read_text().replace("mean_days = 3.5", "mean_days = 4.2"))
    assert longer.patients != demo.patients
    records = records_of(longer, longer.policy())
    assert ("Tern", "mean_occupied") in off(verify(records, solve(demo, demo.policy()), demo))


def test_a_wrong_referral_order_is_caught():
    """Three units; the chain asks B before C, the simulation C before B."""
    named = [{"name": "A", "beds": 3, "per_day": 1.5}, {"name": "B", "beds": 4, "per_day": 0.6}]
    named.append({"name": "C", "beds": 4, "per_day": 0.6})
    scenario = memoryless(*named, run={"warm_up_days": 21.0, "measured_days": 400.0})
    right = scenario.policy()
    assert held(scenario, right).agrees
    wrong = right.with_rule("referral_order", {"A": ("C", "B")})
    caught = off(held(scenario, wrong, exact=solve(scenario, right)))
    assert ("B", "diverted_in_per_day") in caught and ("network", "arrivals_per_day") not in caught


def test_a_chain_of_another_threshold_is_caught(demo):
    policy = demo.policy()
    result = held(demo, policy, exact=solve(demo, policy.with_thresholds({"Ewe": 5})))
    assert not result.agrees and ("Ewe", "closed_with_free_bed_fraction") in off(result)


def test_one_impossible_event_is_caught(demo):
    """Where the chain says never, a single transfer in all replications is one too many."""
    alone = demo.policy().with_rule("referral_order", {"Ewe": (), "Tern": ()})
    records = records_of(demo, alone)
    exact = solve(demo, alone)
    assert verify(records, exact, demo).agrees
    records[3] = dataclasses.replace(records[3], diverted=np.array([[0, 1], [0, 0]]))
    caught = {one for one in off(verify(records, exact, demo)) if one[0] == "network"}
    assert caught == {("network", "transfers_per_day")}


def test_the_command_says_so_with_its_status(monkeypatch, capsys):
    """Status 0 where all holds, 1 where it does not; the document is the same in form."""
    command = [
        "verify",
        str(DEMO),
        "--json",
        "--replications",
        "8",
        "--workers",
        "1",
        "--engine",
        "reference",
    ]
    assert run(command) == 0
    assert json.loads(capsys.readouterr().out)["agrees"] is True
    monkeypatch.setattr(reference.Unit, "set_gates", closes_a_bed_late)
    assert run(command) == 1
    assert json.loads(capsys.readouterr().out)["agrees"] is False


# ---- what can be tested ----


def test_levels_are_pooled_with_their_neighbours_until_each_pool_has_enough():
    """By hand, at least .2 in a pool: .05 + .1 + .1, .3, .2, and what is left, .15 + .1, joins no more."""
    shares = [0.05, 0.1, 0.1, 0.3, 0.2, 0.15, 0.1]
    assert pools(shares, lambda share: share >= 0.2) == [(0, 2), (3, 3), (4, 4), (5, 6)]


def test_what_is_left_at_the_end_joins_the_last_pool():
    assert pools([0.5, 0.4, 0.1], lambda share: share >= 0.2) == [(0, 0), (1, 2)]
    assert pools([0.1, 0.05], lambda share: share >= 0.2) == [(0, 1)]


def test_a_pool_expects_20_visits_one_a_mean_stay(demo):
    """5 replications of 91 days hold 130 mean stays of 3.5 days, so a pool has at least 20/130 of the time.

    Every level is in one pool, and no pool holds more levels than it needs, but for the last one.
    """
    short, policy = demo.with_run(measured_days=91.0), demo.policy()
    shares = solve(short, policy).units["Tern"].occupancy
    result = verify(records_of(short, policy, 5), solve(short, policy), short)
    pooled = [one for one in result.measures if one.where == "Tern" and one.measure.startswith("occupancy")]
    expected, held_so_far = [], 0.0
    for share in shares:
        held_so_far += share
        if held_so_far >= LEAST_VISITS / 130:
            expected.append(held_so_far)
            held_so_far = 0.0
    expected[-1] += held_so_far
    assert [one.exact for one in pooled] == pytest.approx(expected)
    assert sum(expected) == pytest.approx(1) and 1 < len(expected) < len(shares)


def test_a_measure_too_rare_to_test_is_listed_but_not_tested():
    """10 beds for half a bed's worth of patients: hardly ever full."""
    scenario = memoryless({"name": "A", "beds": 10, "per_day": 0.25}, run={"measured_days": 56.0})
    result = held(scenario, scenario.policy())
    full = next(one for one in result.measures if one.measure == "full_fraction")
    assert 0 < full.exact < 1e-6 and full.z is None and full.agrees
    assert full.reason.startswith("not tested: 0.0 occasions")
    assert result.agrees


def test_a_measure_without_spread_must_be_exact():
    """A unit that never admits is closed all the time, in the chain and in every replication."""
    scenario = memoryless(
        {"name": "A", "beds": 2, "per_day": 1.0, "closure_threshold": 0}, run={"measured_days": 56.0}
    )
    scenario = scenario.model_copy(
        update={"diversion": scenario.diversion.model_copy(update={"when_all_closed": "turned_away"})}
    )
    policy = scenario.policy()
    result = held(scenario, policy)
    closed = next(one for one in result.measures if one.measure == "closed_fraction")
    assert (closed.exact, closed.mean, closed.z, closed.agrees) == (1.0, 1.0, 0.0, True)
    never_closed = [
        dataclasses.replace(one, gate_days=one.gate_days[:, ::-1]) for one in records_of(scenario, policy)
    ]
    caught = verify(never_closed, solve(scenario, policy), scenario)
    assert ("A", "full_fraction") in off(caught)
    full = next(one for one in caught.measures if one.measure == "full_fraction")
    assert full.z is None and full.reason


# ---- how often it errs by chance ----

NULL = memoryless(
    {"name": "A", "beds": 3, "per_day": 1.0, "referral_order": []},
    {"name": "B", "beds": 5, "per_day": 2.0, "referral_order": []},
    run={"measured_days": 364.0},
    diversion={"when_all_closed": "turned_away"},
)
EXPERIMENTS, RATE = 300, 0.1
# Binomial(300, .1) exceeds 52 with a chance of 3e-5 (computed): the most of a criterion that keeps its word.
MOST_REFUSED = 52


def null_record(exact, rng):
    """A record drawn at random with exactly the chain's means: two separate loss units, closed when full."""
    days, n = NULL.run.measured_days, 2
    occupancy, gates = np.zeros((1, n, 6)), np.zeros((n, 8))
    arrived, lost = np.zeros(n, int), np.zeros(n, int)
    for place, (name, unit) in enumerate(exact.units.items()):
        shares = rng.dirichlet(unit.occupancy * days / 2.0)  # as spread as so many independent visits
        occupancy[0, place, : len(shares)] = shares * days
        gates[place, [0, FULL | OWN_CLOSED | INCOMING_CLOSED]] = (1 - shares[-1]) * days, shares[-1] * days
        arrived[place] = rng.poisson(NULL.patients[NULL.place_of(name)].per_day * days)
        lost[place] = rng.binomial(arrived[place], unit.occupancy[-1])
    return record(
        occupancy, gate_days=gates, arrived=arrived, turned_away=lost, admitted=np.diag(arrived - lost)
    )


@pytest.fixture(scope="module")
def under_the_null():
    exact, rng = solve(NULL, NULL.policy()), np.random.default_rng(20)
    drawn = ([null_record(exact, rng) for _ in range(6)] for _ in range(EXPERIMENTS))
    return [verify(records, exact, NULL, false_alarm_rate=RATE) for records in drawn]


def refused_beyond(results, critical):
    """How many experiments would be refused at this critical value."""
    return sum(
        max(abs(one.z) for one in result.measures if one.z is not None) > critical for result in results
    )


def test_a_right_engine_is_refused_no_more_often_than_stated(under_the_null):
    refused = sum(not result.agrees for result in under_the_null)
    assert refused <= MOST_REFUSED
    assert refused == refused_beyond(under_the_null, under_the_null[0].critical)


def test_a_criterion_without_the_correction_for_many_measures_fails_the_same_check(under_the_null):
    assert refused_beyond(under_the_null, critical_value(1 - RATE, 5)) > MOST_REFUSED


def test_a_criterion_with_the_normal_quantile_at_six_replications_fails_the_same_check(under_the_null):
    tested = sum(one.z is not None for one in under_the_null[0].measures)
    assert refused_beyond(under_the_null, ndtri(1 - RATE / 2 / tested)) > MOST_REFUSED


# ---- the document ----


def test_the_document_is_plain_and_complete(demo):
    document = json.loads(json.dumps(held(demo, demo.policy()).to_dict(), allow_nan=False))
    assert {"agrees", "measures", "false_alarm_rate", "confidence", "replications"} <= set(document)
    for one in document["measures"]:
        assert {"where", "measure", "exact", "mean", "low", "high", "z"} <= set(one)
        assert one["z"] is not None or one["reason"]
    assert {one["where"] for one in document["measures"]} == {"Ewe", "Tern", "network"}
