"""Goals that are weighted sums of a player's measures: by hand, beside the target goal, simulated and exact."""

import json
import math

import numpy as np
import pytest

from analysis.chain import solve
from analysis.confidence import critical_value
from analysis.equilibria import pure_equilibria
from analysis.exact_tables import solve_cells
from analysis.goals import TargetGoal, goal_of, welfare_of
from analysis.payoffs import TableSums, exact_table, profiles_of
from sim.replicate import replicate
from tests.analysis.builders import memoryless
from tests.analysis.conftest import written

UNITS = (
    {"name": "A", "beds": 2, "per_day": 0.7, "target_utilisation": 0.5},
    {"name": "B", "beds": 6, "per_day": 1.6, "target_utilisation": 0.6},
)
DAYS = 10.0
BEDS = np.array([2.0, 6.0])
T_975_2 = 4.302653  # Student's t, 2 degrees of freedom, .975 (standard tables)


def goal(own=None, *, players=(), units=UNITS, **goals):
    """The goal of two units: `own` for all, `goals` by unit or player."""
    game = {"goals": goals, "players": players} | ({} if own is None else {"goal": own})
    return goal_of(memoryless(*units, game=game))


def sums(**values):
    """Sums of one cell and three replications over 10 days: each a row a replication, a number a unit."""
    names = (
        "full_days",
        "closed_days",
        "turned_away",
        "diverted_out",
        "diverted_in",
        "admitted",
        "occupied_days",
    )
    arrays = {name: np.array(values.get(name, [[0.0, 0.0]] * 3), float)[:, None, :] for name in names}
    shape = arrays["full_days"].shape
    return arrays | {"days": np.full(shape, DAYS), "bed_days": np.broadcast_to(BEDS * DAYS, shape)}


def used(*shares):
    """Occupied days that give these utilisations, a row a replication."""
    return {"occupied_days": np.array(shares) * BEDS * DAYS}


# ---- one measure of one unit ----


@pytest.mark.parametrize(
    ("kind", "total", "values", "expected"),
    [
        ("turned_away", "turned_away", [[1, 4], [2, 4], [3, 1]], [0.2, 0.3]),
        ("own_moved", "diverted_out", [[1, 0], [1, 0], [4, 3]], [0.2, 0.1]),
        ("diversions_in", "diverted_in", [[6, 0], [0, 3], [0, 0]], [0.2, 0.1]),
        ("throughput", "admitted", [[10, 20], [20, 20], [30, 50]], [2.0, 3.0]),
        ("closed_time", "closed_days", [[1, 0], [2, 3], [3, 0]], [0.2, 0.1]),
        ("free_bed", "full_days", [[1, 0], [2, 3], [3, 0]], [0.8, 0.9]),
    ],
)
def test_a_goal_of_one_measure_by_hand(kind, total, values, expected):
    """Means a day, or shares of 10 days; these are linear, so pseudo-values are the replications' own."""
    found = goal({"kind": kind})
    point, pseudo = found.estimate(sums(**{total: values}))
    assert point[0] == pytest.approx(expected)
    own = np.array(values) / DAYS
    assert pseudo[:, 0] == pytest.approx(1 - own if kind == "free_bed" else own)
    assert found.sense == ("gain" if kind in ("free_bed", "throughput") else "cost")
    assert found.without_exact_mean is None


def test_an_interval_of_a_count_is_students():
    """1, 2, 3 a run of 10 days: mean .2, standard error .1 / sqrt(3)."""
    low, high = goal({"kind": "throughput"}).interval(sums(admitted=[[1, 1], [2, 1], [3, 1]]), 0.95)
    half = T_975_2 * 0.1 / math.sqrt(3)
    assert (low[0, 0], high[0, 0]) == (pytest.approx(0.2 - half), pytest.approx(0.2 + half))
    assert (low[0, 1], high[0, 1]) == (pytest.approx(0.1), pytest.approx(0.1))


# ---- one side of a target ----

ABOVE = {"shape": "above", "tie_breaker": {"measure": "turned_away", "weight": 0.01}}


def test_only_what_is_above_the_target_counts_and_the_tie_breaker():
    """A at .6 of a target of .5 pays .1, B at .5 of .6 nothing; .2 and .3 turned away a day at .01 each."""
    found = sums(turned_away=[[2, 3]] * 3, **used([0.6, 0.5], [0.5, 0.4], [0.7, 0.6]))
    point, _ = goal(ABOVE).estimate(found)
    assert point[0] == pytest.approx([0.102, 0.003])


def test_below_the_target_the_excess_may_still_be_above_0():
    """.45, .49, .53 of a target of .5: mean .49, standard error .04 / sqrt(3); the upper branch reaches above."""
    low, high = goal(ABOVE).interval(sums(**used([0.45, 0.0], [0.49, 0.0], [0.53, 0.0])), 0.95)
    assert low[0, 0] == 0
    assert high[0, 0] == pytest.approx(-0.01 + T_975_2 * 0.04 / math.sqrt(3))
    assert low[0, 1] == high[0, 1] == 0


# ---- weighted sums ----

WEIGHTED = {"kind": "weighted", "weights": {"target_distance": 1, "closed_fraction": 0.16}}


def test_a_distance_and_closed_time_by_hand():
    """A: |.6 - .5| + .16 x .2 = .132; B: |.4 - .6| + .16 x .1 = .216."""
    found = sums(closed_days=[[1, 0], [2, 3], [3, 0]], **used([0.6, 0.4], [0.5, 0.4], [0.7, 0.4]))
    point, pseudo = goal(WEIGHTED).estimate(found)
    assert point[0] == pytest.approx([0.132, 0.216])
    # Away from the target both parts are linear: .1 + .016, .0 + .032, .2 + .048.
    assert pseudo[:, 0, 0] == pytest.approx([0.116, 0.032, 0.248])


def test_weights_may_differ_and_a_gain_has_a_weight_below_0():
    found = goal(
        A={"kind": "weighted", "weights": {"closed_time": 0.5, "closed_fraction": 0.25}},
        B={"kind": "weighted", "weights": {"throughput": -2.0}},
    )
    point, _ = found.estimate(sums(closed_days=[[2, 0]] * 3, admitted=[[0, 30]] * 3))
    assert point[0] == pytest.approx([0.15, -6.0]) and found.sense == "cost"


def test_gains_beside_costs_are_counted_as_costs_below_0_and_that_is_said():
    found = goal(A={"kind": "throughput"}, B={"kind": "turned_away"})
    point, _ = found.estimate(sums(admitted=[[20, 0]] * 3, turned_away=[[0, 1]] * 3))
    assert found.sense == "cost" and point[0] == pytest.approx([-2.0, 0.1])
    assert found.reads == (
        "A: most patients treated a day (a gain, counted as a cost below 0); B: least own patients turned away a day"
    )


# ---- several units ----


def test_over_several_units_shares_are_averaged_by_beds_and_patients_added_up():
    """2 and 6 beds: distances .1 and .2 make (2 x .1 + 6 x .2) / 8; .2 and .3 turned away a day make .5."""
    trust = [{"name": "trust", "units": ["B", "A"]}]
    values = sums(turned_away=[[2, 3]] * 3, **used(*[[0.6, 0.4]] * 3))
    assert goal(players=trust).estimate(values)[0] == pytest.approx(np.array([[0.175]]))
    assert goal({"kind": "turned_away"}, players=trust).estimate(values)[0] == pytest.approx(
        np.array([[0.5]])
    )


def test_a_units_own_goal_goes_before_its_players_and_that_before_the_games():
    trust = [{"name": "trust", "units": ["A", "B"]}]
    found = goal(
        {"kind": "own_moved"}, players=trust, trust={"kind": "turned_away"}, A={"kind": "diversions_in"}
    )
    values = sums(turned_away=[[5, 3]] * 3, diverted_in=[[4, 9]] * 3, diverted_out=[[50, 50]] * 3)
    assert found.estimate(values)[0] == pytest.approx(np.array([[0.7]]))


# ---- against the goal of one target each ----


@pytest.mark.parametrize("target_b", [0.3, 0.55, 0.9])
def test_with_a_tie_breaker_of_weight_0_it_is_the_target_goal(target_b):
    rng = np.random.default_rng(3)
    shares = rng.uniform(0.4, 0.7, (12, 2))
    values = {
        "occupied_days": (shares * BEDS * DAYS)[:, None, :],
        "bed_days": np.broadcast_to(BEDS * DAYS, (12, 1, 2)),
        "days": np.full((12, 1, 2), DAYS),
        "turned_away": np.zeros((12, 1, 2)),
    }
    units = (UNITS[0], UNITS[1] | {"target_utilisation": target_b})
    mine = goal({"tie_breaker": {"measure": "turned_away", "weight": 0.0}}, units=units)
    plain = goal(units=units)
    assert isinstance(plain, TargetGoal) and not isinstance(mine, TargetGoal)
    for one, other in zip(mine.estimate(values), plain.estimate(values), strict=True):
        assert one == pytest.approx(other, abs=1e-12)
    for one, other in zip(mine.interval(values, 0.9), plain.interval(values, 0.9), strict=True):
        assert one == pytest.approx(other, abs=1e-12)


def test_a_squared_goal_with_a_tie_breaker_adds_the_measure():
    """Periods of 5 days at .6 and .8 (target .5): (.01 + .09) / 2 = .05; .2 turned away a day at .1."""
    periods = np.full((3, 1, 2, 2), 0.0)
    periods[..., 0] = [0.6, 0.8]
    staffed = np.broadcast_to(BEDS * 5.0, periods.shape)
    values = sums(turned_away=[[2, 0]] * 3) | {
        "period_occupied_days": periods * staffed,
        "period_bed_days": staffed,
    }
    squared = {
        "shape": "squared",
        "judged_over_days": 5.0,
        "tie_breaker": {"measure": "turned_away", "weight": 0.1},
    }
    found = goal(squared)
    point, pseudo = found.estimate(values)
    assert point[0] == pytest.approx([0.07, 0.36])  # B stands empty: .6 squared
    assert pseudo.mean(axis=0) == pytest.approx(point)
    assert found.without_exact_mean is not None


def test_more_branches_than_can_be_tried_stand_for_the_one_at_the_estimate():
    """One player with seven units, each .1 above its target: the interval of a sum of linear parts."""
    units = [{"name": f"U{n}", "beds": 1, "per_day": 0.5, "target_utilisation": 0.5} for n in range(7)]
    found = goal(players=[{"name": "all", "units": [one["name"] for one in units]}], units=units)
    rows = np.array([0.55, 0.6, 0.65])[:, None, None] * np.ones((3, 1, 7)) * DAYS
    values = {"occupied_days": rows, "bed_days": np.full(rows.shape, DAYS), "days": np.full(rows.shape, DAYS)}
    low, high = found.interval(values, 0.95)
    half = T_975_2 * 0.05 / math.sqrt(3)
    assert low[0, 0] == pytest.approx(max(0.0, 0.1 - half), abs=1e-6)
    assert high[0, 0] == pytest.approx(0.1 + half, abs=1e-6)


# ---- exact ----


@pytest.mark.parametrize(("threshold", "blocked"), [(1, 1 / 2), (2, 1 / 5), (3, 1 / 16)])
def test_a_unit_alone_is_a_loss_system(threshold, blocked):
    """Erlang's loss formula at a load of 1: B(1) = 1/2, B(2) = 1/5, B(3) = 1/16 (Erlang 1917; by hand)."""
    lone = {"name": "A", "beds": 3, "per_day": 0.5, "target_utilisation": 0.5}
    for kind, expected in (
        ("turned_away", 0.5 * blocked),
        ("throughput", 0.5 * (1 - blocked)),
        ("closed_time", blocked),
        ("free_bed", 1 - blocked if threshold == 3 else 1.0),
    ):
        scenario = memoryless(
            lone, diversion={"when_all_closed": "turned_away"}, game={"goal": {"kind": kind}}
        )
        units = solve(scenario, scenario.policy().with_thresholds({"A": threshold})).units
        table = exact_table(
            profiles_of(scenario), goal_of(scenario), welfare_of(scenario), [[vars(units["A"])]] * 3
        )
        assert table.payoffs[0, 0] == pytest.approx(expected, abs=1e-12)


GOALS = {
    "distance": {"tie_breaker": {"measure": "free_bed", "weight": -0.01}},
    "above": ABOVE,
    **{
        kind: {"kind": kind}
        for kind in ("turned_away", "own_moved", "diversions_in", "closed_time", "free_bed")
    },
    "throughput": {"kind": "throughput"},
    "weighted": WEIGHTED,
    "gates": {
        "kind": "weighted",
        "weights": {"incoming_closed_fraction": 1, "closed_with_free_bed_fraction": 2},
    },
}
REPLICATIONS = 30
TRUST = ({"name": "trust", "units": ["A", "B"]},)


def network(players=(), demand=1.0, **game):
    """Targets stand away from every utilisation: at a target the plug-in distance is biased, and Student's law off."""
    run = {"seed": 11, "warm_up_days": 60.0, "measured_days": 400.0, "replications": REPLICATIONS}
    strategies = {"A": {"values": [1, 2]}, "B": {"closure": {"values": [4, 6]}, "incoming": {"values": [3]}}}
    units = (UNITS[0] | {"target_utilisation": 0.3}, UNITS[1] | {"target_utilisation": 0.75})
    return memoryless(
        *units, run=run, game={"strategies": strategies, "players": players, **game}
    ).with_demand(demand)


@pytest.fixture(scope="module")
def simulated_sums():
    scenario = network()
    policies = list(profiles_of(scenario).policies(scenario.policy()))
    kept = TableSums(scenario, len(policies), REPLICATIONS)
    for reply in replicate(scenario, policies, range(REPLICATIONS), engine="reference"):
        kept.add(reply)
    return kept.sums()


@pytest.fixture(scope="module")
def exact_cells():
    return {demand: exact_units(network(demand=demand)) for demand in (1.0, 1.1)}


def exact_units(scenario):
    policies = list(profiles_of(scenario).policies(scenario.policy()))
    return [units for _, units in sorted(solve_cells(scenario, policies))]


def worst_z(found, values, units):
    """The largest |z| of simulated against exact payoffs, over cells and players."""
    point, pseudo = found.estimate(values)
    measures = {m: np.array([[u[m] for u in cell] for cell in units]) for m in found.exact_measures}
    error = pseudo.std(axis=0, ddof=1) / math.sqrt(len(pseudo))
    return float(np.abs((pseudo.mean(axis=0) - found.exact(measures)) / error).max()), point.size


@pytest.mark.parametrize("players", [(), TRUST], ids=["units", "trust"])
@pytest.mark.parametrize("name", GOALS)
def test_simulated_payoffs_agree_with_the_chain(name, players, simulated_sums, exact_cells):
    """At most 8 payoffs a case, 20 cases: false-alarm rate at most .01 over all (Bonferroni, Student, 29 degrees)."""
    found = goal_of(network(players, goal=GOALS[name]))
    worst, compared = worst_z(found, simulated_sums, exact_cells[1.0])
    assert worst < critical_value(0.99, REPLICATIONS - 1, comparisons=20 * compared)


@pytest.mark.parametrize("name", GOALS)
def test_a_chain_of_a_tenth_more_patients_is_caught(name, simulated_sums, exact_cells):
    """Planted: the exact side sees 1.1 times the demand."""
    found = goal_of(network(goal=GOALS[name]))
    worst, compared = worst_z(found, simulated_sums, exact_cells[1.1])
    assert worst > critical_value(0.99, REPLICATIONS - 1, comparisons=20 * compared)


# ---- what a game of such goals shows ----

NO_PURE = """
schema = 1
title = "No pure equilibrium (invented)"

[[units]]
name = "A"
beds = 2
target_utilisation = 0.64
stay_factor = 1.8

[[units]]
name = "B"
beds = 4
target_utilisation = 0.34
stay_factor = 0.6

[[patients]]
group = "A emergencies"
home = "A"
per_day = 0.2
stay = { family = "exponential", mean_days = 1.0 }

[[patients]]
group = "B emergencies"
home = "B"
per_day = 6.3
stay = { family = "exponential", mean_days = 1.0 }

[game.goals]
A = { kind = "weighted", weights = { target_distance = 1, closed_fraction = 0.16 } }
B = { kind = "weighted", weights = { target_distance = 1, closed_fraction = 0.09 } }
"""


def test_closed_time_beside_a_target_may_leave_no_pure_equilibrium(tmp_path, call):
    """Round and round: every profile is left by someone, by more than a rounding error."""
    status, document = call("game", written(tmp_path / "s.toml", NO_PURE), "--exact")
    assert status == 0 and document["sense"] == "cost"
    assert [one["kind"] for one in document["equilibria"]] == ["mixed"]  # it is looked for unasked
    assert document["price_of_anarchy"] is None and "no equilibrium" in document["reason"]
    payoffs = np.array([document["payoffs"][player] for player in "AB"])
    assert pure_equilibria(payoffs, "cost", tolerance=1e-3) == []
    assert not document["structure"]["single_crossing"]


def test_without_closed_time_the_same_network_has_one(tmp_path, call):
    """The guard of the test above: it is the goal that leaves none."""
    plain = written(tmp_path / "s.toml", NO_PURE.split("[game.goals]")[0])
    status, document = call("game", plain, "--exact")
    assert status == 0 and document["equilibria"]


def test_a_player_that_runs_all_units_for_throughput_is_central_planning(tmp_path, call):
    """Its best profile is the optimum, so selfishness costs nothing; and no theorem is claimed."""
    game = '[game]\ngoal = { kind = "throughput" }\n[[game.players]]\nname = "All"\nunits = ["A", "B"]\n'
    path = written(tmp_path / "s.toml", NO_PURE.split("[game.goals]")[0] + game)
    status, document = call("game", path, "--exact")
    assert status == 0 and document["players"] == ["All"] and document["sense"] == "gain"
    assert document["strategies"]["All"][:2] == [{"A": 1, "B": 1}, {"A": 1, "B": 2}]
    assert [one["thresholds"] for one in document["equilibria"]] == document["optimum"]["thresholds"]
    assert document["price_of_anarchy"] == pytest.approx(1, abs=1e-9)
    assert document["structure"]["theorem"] is None
    assert "No theorem is at hand" in document["structure"]["reads"][0]


SEVERAL = """
[game]
goal = { shape = "above", tie_breaker = { measure = "turned_away", weight = 0.001 } }
goals = { B = { kind = "throughput" } }
strategies.A = { reopening_gap = { values = [1, 2] } }
strategies.B = { closure = { from = 3, to = 4 }, incoming = { from = 3, to = 4 } }

[run]
warm_up_days = 7
measured_days = 28
"""


def test_two_parameters_are_a_strategy_and_documents_say_which(tmp_path, call):
    path = written(tmp_path / "s.toml", NO_PURE.split("[game.goals]")[0] + SEVERAL)
    status, document = call("game", path, "--exact")
    assert status == 0
    assert document["strategies"] == {
        "A": [{"A": {"reopening_gap": 1}}, {"A": {"reopening_gap": 2}}],
        "B": [{"B": {"closure": k, "incoming": m}} for k, m in ((3, 3), (4, 3), (4, 4))],
    }
    assert document["sense"] == "cost" and "counted as a cost" in document["goals"]["B"]
    for one in document["equilibria"]:
        assert one["thresholds"]["A"] == 2 and one["strategies"]["B"] in document["strategies"]["B"]
    assert document["worst_equilibrium_strategies"] in [one["strategies"] for one in document["equilibria"]]
    simulated, estimated = call(
        "game", path, "--replications", "2", "--engine", "reference", "--out", tmp_path / "o"
    )
    assert simulated == 0 and estimated["strategies"] == document["strategies"]
    assert (tmp_path / "o" / "payoffs-2.png").exists()
    header = (tmp_path / "o" / "table.csv").read_text(encoding="utf-8").splitlines()[0]
    assert header.startswith("strategy A,strategy B,payoff A")
    assert json.loads((tmp_path / "o" / "result.json").read_text(encoding="utf-8"))["players"] == ["A", "B"]


def test_a_search_refuses_what_has_no_order(tmp_path, call):
    path = written(tmp_path / "s.toml", NO_PURE.split("[game.goals]")[0] + SEVERAL)
    status, document = call("game", path, "--exact", "--search", "best_reply")
    assert status == 2 and document["faults"][0]["key"] == "--search"


def test_a_search_of_another_goal_certifies_what_it_finds_and_claims_no_bracket(tmp_path, call):
    game = '[game]\ngoal = { kind = "own_moved" }\n'
    path = written(tmp_path / "s.toml", NO_PURE.split("[game.goals]")[0] + game)
    _, table = call("game", path, "--exact")
    status, found = call("game", path, "--exact", "--search", "best_reply")
    assert status == 0
    listed = [one["thresholds"] for one in table["equilibria"]]
    assert found["equilibria"] and all(one["thresholds"] in listed for one in found["equilibria"])
    assert not found["bracket"]["shown"] and "not the distance" in found["bracket"]["failing"][0]
