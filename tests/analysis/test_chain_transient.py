"""Networks day by day: against closed forms, and a plain construction with scipy's matrix exponential."""

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from scipy import stats
from scipy.linalg import expm

from analysis.chain import ChainTooLarge, Limits, OutOfScope, solve
from analysis.chain.transient import Before, transient
from tests.analysis.builders import memoryless
from tests.analysis.conftest import TWO, written
from tests.analysis.test_chain_random import (
    RESORTS,
    RULES,
    Plain,
    as_scenario,
    largest_gap,
    networks,
    plain_measures,
    walked,
)


def test_a_unit_with_plenty_of_beds_fills_as_a_poisson_number():
    """M/M/infinity from empty: Poisson with mean (lambda / mu) (1 - exp(-mu t)) (Riordan, Stochastic Service
    Systems, 1962; from memory). 60 beds are never filled by 6 patients."""
    scenario = memoryless({"name": "Ewe", "beds": 60, "per_day": 3.0}, stay_days=2.0)
    days = [0.0, 0.1, 1.0, 4.0, 11.0, 365.0]
    found = transient(scenario, scenario.policy(), days)
    for day in found.days:
        unit, mean = day.measures.units["Ewe"], 6.0 * -np.expm1(-day.day / 2.0)
        exact = stats.poisson.pmf(np.arange(61), mean)
        assert np.abs(unit.occupancy - exact).sum() <= day.error_bound + 1e-14
        assert unit.mean_occupied == pytest.approx(mean, abs=60 * day.error_bound)
        assert day.error_bound < 3e-11
    assert found.days[-1].distance_to_long_run < 1e-12 < 0.99 < found.days[0].distance_to_long_run


def changed(thresholds, incoming=None, gaps=None):
    """The network of every rule with other thresholds."""
    units = [{**unit, "closure_threshold": thresholds[place]} for place, unit in enumerate(RULES["units"])]
    for place, unit in enumerate(units):
        unit["reopening_gap"] = (gaps or {}).get(place, unit.get("reopening_gap", 1))
        unit.pop("incoming_threshold", None)
        if incoming is not None:
            unit["incoming_threshold"] = incoming[place]
    return {**RULES, "units": units}


def walk_from(network, starts):
    """The states reached from several, and the events among them."""
    states, ahead, events = {state: place for place, state in enumerate(starts)}, list(starts), []
    for state in ahead:
        for target, rate, home, unit in network.events(state):
            if target not in states:
                states[target] = len(states)
                ahead.append(target)
            events.append((states[state], states[target], rate, home, unit))
    return list(states), events


def dense_rates(states, events):
    matrix = np.zeros((len(states), len(states)))
    for origin, target, rate, _, _ in events:
        matrix[origin, target] += rate
        matrix[origin, origin] -= rate
    return matrix


def long_run_of(plain):
    """States and probabilities of a plain network in its long run."""
    states, events = walk_from(Plain(plain), [Plain(plain).start()])
    matrix = dense_rates(states, events).T
    matrix[0] = 1.0
    return states, np.linalg.solve(matrix, np.eye(len(states))[0])


def under_new_rules(network, state):
    """A state as the gates stand once the new rules come into force."""
    now = []
    for (patients, own, incoming), name in zip(state, network.names, strict=True):
        load = sum(patients)
        own = network.gate(name, network.own_threshold(name), load, own)
        incoming = network.gate(name, network.incoming_threshold(name), load, incoming)
        now.append((patients, own, incoming))
    return tuple(now)


def plainly_after(old, new, days):
    """The plain trees of measures at each time after a change from old to new, and the number of states."""
    network, (before, probability) = Plain(new), long_run_of(old)
    moved = [under_new_rules(network, state) for state in before]
    states, events = walk_from(network, list(dict.fromkeys(moved)))
    start = np.zeros(len(states))
    np.add.at(start, [states.index(state) for state in moved], probability)
    rates = dense_rates(states, events)
    trees = [plain_measures(network, states, events, start @ expm(rates * time)) for time in days]
    return trees, len(states)


def alone(plain):
    """The network with no unit asked for another's patients: each keeps one of the three stays it had."""
    units = [{**unit, "referral_order": []} for unit in plain["units"]]
    return {**plain, "resort": "turned_away", "units": units}


def three_stays(plain):
    """The network with patients of the third unit too, who stay shorter."""
    return {**plain, "patients": [*plain["patients"], ("Cotterdale", 0.4, 0.7)]}


CHANGES = {
    "closing earlier": (changed([3, 2, 2]), changed([1, 1, 0])),
    "closing later": (changed([1, 1, 1]), changed([3, 2, 2])),
    "other gaps and incoming thresholds": (
        changed([3, 2, 2], gaps={0: 3}),
        changed([2, 2, 1], [1, 0, 1], {0: 2, 1: 2}),
    ),
    "a surge": (RULES, {**RULES, "patients": [("Ashgill", 4.2, 1.0), ("Norbeck", 0.4, 1.3)]}),
    "nobody moved any more": (three_stays(changed([1, 1, 1])), alone(three_stays(changed([2, 2, 1])))),
}


@pytest.mark.parametrize("change", CHANGES)
def test_a_change_against_a_plain_construction(change):
    """The network by its rules, patient by patient, and scipy's matrix exponential; shares no code with the chain."""
    old, new = CHANGES[change]
    days = [0.0, 0.8]
    before, after = as_scenario(old), as_scenario(new)
    found = transient(after, after.policy(), days, before=Before(before, before.policy()))
    trees, states = plainly_after(old, new, days)
    assert found.states == states
    for day, expected in zip(found.days, trees, strict=True):
        assert largest_gap(day.measures, expected) < 1e-11


@st.composite
def changes(draw):
    """A random network and the same with other rules."""
    old = draw(networks())
    units = [
        {key: value for key, value in unit.items() if key != "incoming_threshold"} for unit in old["units"]
    ]
    for unit in units:
        unit["closure_threshold"] = own = draw(st.integers(0, unit["beds"]))
        unit["reopening_gap"] = draw(st.integers(1, 3))
        if draw(st.booleans()):
            unit["incoming_threshold"] = draw(st.integers(0, own))
    return old, {**old, "units": units, "resort": draw(st.sampled_from(RESORTS))}


@given(changes())
@settings(
    max_examples=40, derandomize=True, deadline=None, suppress_health_check=[HealthCheck.filter_too_much]
)
def test_random_changes_against_a_plain_construction(change):
    old, new = change
    assume(all((found := walked(Plain(plain))) and len(found[0]) < 200 for plain in change))
    before, after = as_scenario(old), as_scenario(new)
    found = transient(after, after.policy(), [0.0, 0.7], before=Before(before, before.policy()))
    assume(found.states < 300)
    trees, _ = plainly_after(old, new, [0.0, 0.7])
    for day, expected in zip(found.days, trees, strict=True):
        assert largest_gap(day.measures, expected) < 1e-11


def test_a_gate_that_no_lasting_rule_would_leave_so_is_kept():
    """Two beds, never open to others; then open to them below 2, and once closed again at 0 only. With one occupied
    bed others find the gate closed, own patients find theirs open: the new rules alone never bring this about."""
    unit = {"name": "Ewe", "beds": 2, "per_day": 1.0}
    then = memoryless({**unit, "incoming_threshold": 0}, stay_days=1.0)
    now = memoryless({**unit, "incoming_threshold": 2, "reopening_gap": 2}, stay_days=1.0)
    day = (
        transient(now, now.policy(), [0.0], before=Before(then, then.policy())).days[0].measures.units["Ewe"]
    )
    assert day.occupancy == pytest.approx(np.array([2, 2, 1]) / 5)  # Erlang's formula, offered load 1
    assert day.incoming_closed_fraction == pytest.approx(3 / 5) and day.closed_fraction == pytest.approx(
        1 / 5
    )


def test_patients_stay_when_their_unit_closes_earlier():
    scenario = as_scenario(changed([3, 2, 2]))
    now, early = scenario.policy(), scenario.policy().with_thresholds({"Ashgill": 1})
    found = transient(scenario, early, [0.0, 1.0, 1e4], before=Before(scenario, now))
    first, later, last = (day.measures.units["Ashgill"] for day in found.days)
    assert first.occupancy == pytest.approx(solve(scenario, now).units["Ashgill"].occupancy, abs=1e-12)
    assert first.closed_fraction == pytest.approx(1 - first.occupancy[0], abs=1e-12)
    assert first.mean_occupied > later.mean_occupied > last.mean_occupied
    settled = solve(scenario, early).units["Ashgill"]
    assert last.occupancy == pytest.approx(settled.occupancy, abs=1e-11)
    assert last.diverted_out_per_day == pytest.approx(settled.diverted_out_per_day, abs=1e-11)


def test_the_long_run_stays_as_it_is():
    scenario = as_scenario(RULES)
    before = Before(scenario, scenario.policy())
    for day in transient(scenario, scenario.policy(), [0.0, 5.0, 365.0], before=before).days:
        assert day.distance_to_long_run < 1e-12


def test_a_year_of_thousands_of_states_is_told_in_few_steps():
    units = [{"name": name, "beds": 16, "per_day": 6.0} for name in ("Ewe", "Tern", "Wey")]
    scenario = memoryless(*units, stay_days=2.5)
    found = transient(scenario, scenario.policy(), [1.0, 365.0])
    exact = solve(scenario, scenario.policy())
    assert found.states == exact.states == 17**3
    assert found.steps < 37 * 365 / 5  # the chain can move about 37 times a day
    assert found.days[1].error_bound < 1e-10
    assert found.days[1].measures.units["Tern"].occupancy == pytest.approx(
        exact.units["Tern"].occupancy, abs=1e-10
    )


def test_what_is_out_of_scope_or_too_large_is_refused():
    scenario = as_scenario(RULES)
    slow = scenario.model_copy(
        update={"diversion": scenario.diversion.model_copy(update={"extra_days": 1.0})}
    )
    with pytest.raises(OutOfScope, match="extra_days"):
        transient(scenario, scenario.policy(), [1.0], before=Before(slow, slow.policy()))
    with pytest.raises(ChainTooLarge):
        transient(scenario, scenario.policy(), [1.0], limits=Limits(states=3))


# ---- the command ----


def test_exact_after_days_gives_each_day_and_the_long_run(call, two):
    status, document = call("exact", two, "--after-days", "0,2.5,400")
    long_run = call("exact", two)[1]
    assert status == 0
    assert list(document) == [
        "scenario",
        "thresholds",
        "start",
        "days",
        "long_run",
        "states",
        "steps",
        "changes",
    ]
    assert document["start"] == {
        "network": "empty",
        "policy": None,
        "thresholds": None,
        "arrivals_per_day": None,
    }
    assert [day["day"] for day in document["days"]] == [0.0, 2.5, 400.0]
    keys = {"day", "error_bound", "distance_to_long_run", "units", "network"}
    assert all(
        set(day) == keys and set(day["units"]["A"]) == set(long_run["units"]["A"]) for day in document["days"]
    )
    assert document["days"][0]["units"]["A"]["mean_occupied"] == 0.0
    assert document["long_run"] == {key: long_run[key] for key in ("units", "network")}
    treated = [day["network"]["throughput_per_day"] for day in (*document["days"], document["long_run"])]
    assert treated[0] == pytest.approx(1.6) and treated[-2] == pytest.approx(treated[-1], abs=1e-11)


def test_exact_starts_where_it_is_told(call, two, tmp_path):
    early = call("exact", two, "--after-days", "0", "--policy-before", "early")[1]
    assert early["start"]["thresholds"] == {"A": 1, "B=b": 2} and early["thresholds"] == {"A": 2, "B=b": 3}
    assert early["days"][0]["units"]["A"]["occupancy"] == pytest.approx(
        [*call("exact", two, "--policy", "early")[1]["units"]["A"]["occupancy"]], abs=1e-12
    )
    quiet = call("exact", two, "--after-days", "0,1", "--demand", 1.5, "--demand-before", 0.5)[1]
    assert quiet["start"]["arrivals_per_day"] == pytest.approx(0.5 * 1.6)
    calm = call("exact", two, "--demand", 0.5)[1]["units"]["A"]["mean_occupied"]
    assert quiet["days"][0]["units"]["A"]["mean_occupied"] == pytest.approx(calm)
    assert quiet["days"][1]["units"]["A"]["mean_occupied"] > calm
    back = call("exact", two, "--policy", "early", "--after-days", "0", "--policy-before", "file")[1]
    assert back["start"]["policy"] == "as in the file" and back["start"]["thresholds"] == {"A": 2, "B=b": 3}
    named = written(tmp_path / "named.toml", TWO.replace('name = "early"', 'name = "file"'))
    assert (
        call("exact", named, "--after-days", "0", "--policy-before", "file")[1]["start"]["thresholds"]["A"]
        == 1
    )


@pytest.mark.parametrize(
    ("options", "key"),
    [
        (["--after-days", "1,x"], "--after-days"),
        (["--after-days", "nan"], "--after-days"),
        (["--after-days", "-1"], "--after-days"),
        (["--after-days", "1e9"], "--after-days"),
        (["--after-days", "1", "--demand-before", "0"], "--demand-before"),
        (["--after-days", "1", "--policy-before", "erly"], "--policy-before"),
        (["--policy-before", "early"], "command line"),
    ],
)
def test_exact_refuses_what_it_cannot_start_from(call, two, options, key):
    status, document = call("exact", two, *options)
    assert status == 2 and [fault["key"] for fault in document["faults"]] == [key]


def test_a_person_reads_days_as_rows(show, two):
    status, out, _ = show("exact", two, "--after-days", "1,7", "--demand-before", 2)
    assert status == 0 and "For planning only" in out
    assert "From the long run" in out and "3.2 arrivals a day" in out and "off by more than" in out
    first = [line.split()[0] for line in out.splitlines() if line.split()]
    assert first.count("1") == first.count("7") == 3  # two units and the network
