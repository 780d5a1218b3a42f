"""Central control beside the exact game: how the loss splits, the map of the rule, and the command.

What is known. Patients treated, equal stays, every bed within everybody's reach: the units pool, and Erlang's
loss formula (1917) gives the best throughput. No fixed thresholds beat control, and no equilibrium beats the
best fixed thresholds.
"""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.control import Bounds, best_control, compared
from analysis.control.display import rule_maps
from analysis.exact_tables import solve_cells
from analysis.games import analyse
from analysis.goals import goal_of, welfare_of
from analysis.payoffs import exact_table, profiles_of
from sim.errors import RunError
from tests.analysis.builders import memoryless
from tests.analysis.control_cases import CLOSE, THROUGHPUT, TINY, erlang_loss, network

# ---- beside the exact game ----


def exact_game(scenario):
    profiles = profiles_of(scenario)
    cells = dict(solve_cells(scenario, profiles.policies(scenario.policy())))
    units = [cells[cell] for cell in range(profiles.cells)]
    return analyse(exact_table(profiles, goal_of(scenario), welfare_of(scenario), units))


def beside(scenario):
    result = best_control(scenario, scenario.policy(), welfare_of(scenario))
    return compared(result, exact_game(scenario))


@settings(max_examples=20, deadline=None, derandomize=True)
@given(
    beds=st.tuples(st.integers(1, 3), st.integers(1, 4)),
    rates=st.tuples(st.floats(0.2, 2.5), st.floats(0.2, 2.5)),
    means=st.sampled_from([(2.0, 2.0), (1.0, 4.0)]),
    targets=st.tuples(st.floats(0.2, 0.9), st.floats(0.2, 0.9)),
    resort=st.sampled_from(["turned_away", "home_bed", "any_bed"]),
    weight=st.sampled_from([None, 0.0, 0.3, 1.2]),
)
def test_control_beats_fixed_thresholds_and_these_beat_equilibria(
    beds, rates, means, targets, resort, weight
):
    welfare = {"kind": "throughput"} if weight is None else {"kind": "loss", "transfer_weight": weight}
    patients = [(home, rate, mean) for home, rate, mean in zip("AB", rates, means, strict=True)]
    found = beside(
        network(beds, patients, game={"welfare": welfare}, resort=resort, target_utilisation=targets)
    )
    sign = 1 if weight is None else -1
    ends = [sign * found.control.low, sign * found.control.high]
    assert max(ends) >= sign * found.best_static - 1e-12
    assert 0 <= found.static_thresholds.low <= found.static_thresholds.high
    if found.worst_equilibrium is None:
        assert found.selfishness is None
        return
    assert sign * found.best_static >= sign * found.best_equilibrium >= sign * found.worst_equilibrium
    steps = found.static_thresholds.middle + found.selfishness
    assert steps == pytest.approx(sum(ends) / 2 - sign * found.worst_equilibrium, abs=CLOSE)


def test_an_answer_below_fixed_thresholds_is_never_handed_out():
    """Planted: bounds moved down by a thousandth of a patient."""
    scenario = memoryless(
        {"name": "A", "beds": 2, "per_day": 0.8, "target_utilisation": 0.6},
        {"name": "B", "beds": 2, "per_day": 0.9, "target_utilisation": 0.6},
        diversion={"when_all_closed": "any_bed"},
    )
    result, game = best_control(scenario, scenario.policy(), THROUGHPUT), exact_game(scenario)
    compared(result, game)
    lower = replace(result, welfare=Bounds(result.welfare.low - 1e-3, result.welfare.high - 1e-3))
    with pytest.raises(RunError, match="fixed thresholds beat"):
        compared(lower, game)


def test_units_that_pool_leave_control_nothing_to_gain():
    scenario = network(
        (3, 4), [("A", 1.2, 2.0), ("B", 1.6, 2.0)], resort="any_bed", target_utilisation=(0.5, 0.5)
    )
    found = beside(scenario)
    pooled = 2.8 * (1 - erlang_loss(2.8 * 2.0, 7))
    assert found.control.low - 1e-12 <= pooled <= found.control.high + 1e-12
    assert found.static_thresholds.high <= 1e-8 and found.selfishness == pytest.approx(0, abs=1e-8)
    assert [one.rows for one in rule_maps(found.result)] == [
        ("HHHHH",) * 3 + ("BBBB-",),
        ("HHHHA",) * 3 + ("HHHH-",),
    ]


def test_control_gains_where_transfers_cost_and_where_stays_differ():
    """Outside pooling there is something to gain: neither step of the split is nought by construction."""
    costly = network(
        (3, 4), [("A", 1.6, 2.0), ("B", 2.1, 2.0)], target_utilisation=(0.5, 0.5),
        game={"welfare": {"kind": "loss", "transfer_weight": 0.4}},
    )  # fmt: skip
    slow = network((3, 3), [("A", 1.8, 1.0), ("B", 0.4, 8.0)], target_utilisation=(0.5, 0.5))
    for scenario in (costly, slow):
        assert beside(scenario).static_thresholds.low > 1e-3
    refused = best_control(slow, slow.policy(), THROUGHPUT).outcome.refused_with_free_bed_per_day
    assert refused["A"] == pytest.approx(0, abs=CLOSE) and refused["B"] > 0.01


# ---- the map ----


@pytest.mark.parametrize(
    ("names", "letters"), [(("Ewe", "Tern"), "TE"), (("Tern", "Teal"), "21"), (("Hay", "Ewe"), "E1")]
)
def test_letters_of_the_map_mean_one_thing_each(names, letters):
    units = [{"name": name, "beds": 2, "per_day": 1.0} for name in names]
    scenario = memoryless(*units)
    maps = rule_maps(best_control(scenario, scenario.policy(), THROUGHPUT))
    for one, letter, other in zip(maps, letters, reversed(names), strict=True):
        assert one.letters == {"H": one.home, letter: other, "-": "turned away"}
    assert [row[0] for row in maps[0].rows] == ["H", "H", letters[0]]


def test_groups_alike_share_a_map_and_others_have_none():
    same = network((1, 1), [("A", 0.5, 2.0), ("B", 0.5, 2.0), ("A", 0.1, 2.0)])
    maps = rule_maps(best_control(same, same.policy(), THROUGHPUT))
    assert [one.groups for one in maps] == [("g0", "g2"), ("g1",)]
    for scenario in (TINY["unequal stays"], network((1, 1, 1), [("A", 0.5, 2.0)])):
        assert rule_maps(best_control(scenario, scenario.policy(), THROUGHPUT)) == []


# ---- the command ----


def test_the_document_splits_the_loss(call, two):
    status, document = call("game", two, "--exact", "--control", "--target", "0.3")
    control = document["control"]
    assert status == 0 and control["states"] == 12
    assert control["best_static_welfare"] == pytest.approx(document["optimum"]["welfare"])
    assert control["static_thresholds"]["per_day"]["low"] >= 0
    selfish = control["selfishness"]
    assert selfish["per_year"] == pytest.approx(document["lost_per_year"]) and selfish["per_day"] > 0
    assert selfish["per_year"] == pytest.approx(365 * selfish["per_day"])
    assert [len(one["rows"]) for one in control["maps"]] == [3, 3]
    assert "control" not in call("game", two, "--exact")[1]


def test_the_rule_is_shown_and_written(show, three, two, tmp_path):
    status, text, _ = show("game", two, "--exact", "--control", "--out", tmp_path / "out")
    assert status == 0 and "Best rule for A emergencies (home A): H A, B B=b, - turned away" in text
    assert "2 B B B -" in text
    written = (tmp_path / "out" / "control.csv").read_text(encoding="utf-8").splitlines()
    assert written[0] == "occupied A,occupied B=b,action A emergencies,action B emergencies"
    assert len(written) == 13 and written[-1] == "2,3,turned away,turned away"
    assert "--out writes it to control.csv" in show("game", three, "--exact", "--control")[1]


def test_an_earlier_rule_is_kept_apart(show, two, tmp_path):
    show("game", two, "--exact", "--control", "--out", tmp_path / "out")
    show("game", two, "--exact", "--out", tmp_path / "out")
    assert not (tmp_path / "out" / "control.csv").exists()
    assert (tmp_path / "out" / "earlier" / "1" / "control.csv").exists()


def test_control_needs_the_exact_game(show, two):
    status, text, said = show("game", two, "--control")
    assert status == 2 and not text and "--control: needs --exact" in said


def test_no_equilibrium_leaves_selfishness_open():
    """An empty list of equilibria gives a reason, never a number."""
    scenario = TINY["equal stays"]
    result = best_control(scenario, scenario.policy(), THROUGHPUT)
    table = SimpleNamespace(welfare=np.array([[1.0, 1.1]]), welfare_goal=THROUGHPUT)
    game = SimpleNamespace(table=table, cost=SimpleNamespace(best=None, worst=None))
    tree = compared(result, game).to_dict()
    assert tree["selfishness"] is None and tree["reason"] == "selfishness: no equilibrium is listed"
