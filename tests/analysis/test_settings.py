"""Ranges from the command line, and the networks that they make: by hand."""

from __future__ import annotations

import pytest

from analysis.settings import (
    FACTORS,
    TARGETS,
    Grid,
    Setting,
    Texts,
    demand_bounds,
    grid_of,
    read_beds,
    read_delta,
    read_range,
)
from sim.scenario import Scenario
from sim.scenario.varied import with_beds, with_delay_factor, with_stay_cv, with_targets
from tests.analysis.builders import memoryless

A, B = {"name": "A", "beds": 4, "per_day": 1.0}, {"name": "B", "beds": 6, "per_day": 2.0}


def realistic(**tables) -> Scenario:
    """Two units with stays that have a cv, and a delay."""
    groups = [
        {"group": name, "home": name, "per_day": 1.0, "stay": stay}
        for name, stay in (
            ("A", {"family": "lognormal", "mean_days": 2.0, "cv": 1.4}),
            ("B", {"family": "exponential", "mean_days": 3.0}),
        )
    ]
    units = [{"name": "A", "beds": 4}, {"name": "B", "beds": 6, "closure_threshold": 5}]
    delay = {"family": "gamma", "mean_hours": 2.0, "cv": 0.5}
    given = {"schema": 1, "units": units, "patients": groups, "diversion": {"delay": delay}}
    return Scenario.model_validate(given | tables)


@pytest.mark.parametrize(
    ("text", "values"),
    [
        ("0.6:1.4:9", (0.6, 0.7, 0.8, 0.9, 1.0, 1.1, 1.2, 1.3, 1.4)),
        ("0:1:2", (0.0, 1.0)),
        ("0.75", (0.75,)),
        ("1e0:2:3", (1.0, 1.5, 2.0)),
    ],
)
def test_a_range_has_both_ends_and_round_values(text, values):
    faults = []
    assert read_range("--demand", text, FACTORS, faults) == values and faults == []


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("0.6:1.4", ["FROM:TO:POINTS"]),
        ("a:b:c", ["FROM:TO:POINTS"]),
        ("", ["FROM:TO:POINTS"]),
        ("nan", ["FROM:TO:POINTS"]),
        ("inf:1:3", ["FROM:TO:POINTS"]),
        ("0.9:0.5:3", ["begin below its end"]),
        ("0.5:0.5:3", ["begin below its end"]),
        ("0.5:0.9:1", ["from 2 to 1,000"]),
        ("0.5:0.9:2.5", ["from 2 to 1,000"]),
        ("0.5:0.9:1001", ["from 2 to 1,000"]),
        ("0:1.5:1", ["above 0 and at most 1", "above 0 and at most 1", "from 2 to 1,000"]),
    ],
)
def test_every_fault_of_a_range_is_told_at_once(text, said):
    faults = []
    assert read_range("--target", text, TARGETS, faults) == ()
    assert len(faults) == len(said)
    assert all(part in fault.rule for part, fault in zip(said, faults, strict=True))
    assert all(fault.key == "--target" and fault.remedy for fault in faults)


def test_beds():
    faults = []
    assert read_beds(["A=3:5", "B=6"], memoryless(A, B), faults) == (("A", (3, 4, 5)), ("B", (6,)))
    assert faults == []
    assert read_beds(["A=5:3", "A=x", "C=3", "A=3", "A=4", "A"], memoryless(A, B), faults) == (("A", (3,)),)
    assert len(faults) == 5


def test_a_loss_allowed_is_a_share_or_patients():
    faults = []
    assert read_delta("0.5%", faults) == (0.005, None) and read_delta("25", faults) == (None, 25.0)
    assert faults == []
    for wrong in ("-1", "200%", "few", "nan"):
        read_delta(wrong, faults)
    assert len(faults) == 4


def test_faults_of_all_axes_come_together():
    faults = []
    texts = Texts(
        demand="0:1:2", target="2", beds=["C=1"], delay="1:2:2", cv="1:2:2", soft="2", transfer_weight="-1"
    )
    grid_of(texts, memoryless(A, B), faults)
    keys = [fault.key for fault in faults]
    assert keys.count("--delay") == 1 and keys.count("--cv") == 1, (
        "no delay and no cv in a memoryless network"
    )
    assert set(keys) == {
        "--demand",
        "--target",
        "--beds",
        "--delay",
        "--cv",
        "--soft",
        "--transfer-weight",
    }


def test_a_grid_too_large_is_refused():
    faults = []
    texts = Texts(demand="0.5:1.5:1000", beds=["A=1:4"], target="0.1:0.9:1000")
    grid = grid_of(texts, memoryless(A, B), faults)
    assert grid.networks == 4_000 and grid.points == 4_000_000 and [one.key for one in faults] == ["the grid"]


def test_a_hyperexponential_stay_needs_a_cv_of_one():
    faults = []
    stay = {"family": "hyperexponential", "mean_days": 2.0, "cv": 1.4}
    network = realistic(patients=[{"group": "A", "home": "A", "per_day": 1.0, "stay": stay}])
    grid_of(Texts(cv="0.5:2:4"), network, faults)
    assert ["at least 1" in fault.rule for fault in faults] == [True]


def test_demand_bounds_are_those_of_the_common_option():
    bounds = demand_bounds(memoryless(A, B))
    assert bounds.least == 1e-9 and bounds.holds(1.0) and not bounds.holds(float("nan"))


def test_settings_are_every_combination_demand_slowest():
    grid = Grid((0.9, 1.1), (0.5, 0.6, 0.7), (("A", (3, 4)),), softs=(0.0, 0.5))
    settings = grid.settings()
    assert len(settings) == grid.networks == 8 and grid.points == 24
    assert settings[0] == Setting(0.9, (("A", 3),), None, None, 0.0)
    assert settings[1].soft == 0.5 and settings[2].beds == (("A", 4),) and settings[4].demand == 1.1


def test_beds_take_thresholds_along_that_stood_at_them():
    game = {"strategies": {"A": {"from": 2, "to": 4}, "B": {"values": [3, 6]}}}
    network = realistic(game=game)
    more, fewer = with_beds(network, {"A": 6, "B": 8}), with_beds(network, {"A": 1, "B": 5})
    assert more.strategies() == {"A": (2, 3, 4, 5, 6), "B": (3, 6)}
    assert fewer.strategies() == {"A": (1,), "B": (3,)}
    assert more.unit("B").closure_threshold == 5 and fewer.unit("B").closure_threshold == 5
    assert with_beds(network, {"B": 4}).unit("B").closure_threshold == 4
    setting = Setting(beds=(("A", 6), ("B", 4)))
    assert setting.policy(network, network.policy()).thresholds == {"A": 6, "B": 4}


def test_a_delay_is_scaled_and_its_shape_kept():
    network = realistic()
    longer = with_delay_factor(network, 3.0).diversion.delay
    assert longer.distribution().mean() == pytest.approx(6.0) and longer.cv == 0.5
    assert with_delay_factor(network, 0.0).diversion.delay is None


@pytest.mark.parametrize(
    "delay",
    [
        {"family": "constant", "mean_hours": 2.0},
        {"family": "coxian", "rates_per_hour": [1.0, 2.0], "goes_on": [0.5]},
        {
            "family": "mixture",
            "parts": [
                {"family": "exponential", "mean_hours": 1.0, "weight": 1},
                {"family": "erlang", "mean_hours": 3.0, "stages": 2, "weight": 2},
            ],
        },
    ],
)
def test_every_family_of_delay_is_scaled(delay):
    network = realistic(diversion={"delay": delay})
    before = network.diversion.delay.distribution()
    after = with_delay_factor(network, 2.5).diversion.delay.distribution()
    for probability in (0.1, 0.5, 0.9):
        assert after.quantile(probability) == pytest.approx(2.5 * before.quantile(probability))


def test_a_cv_changes_the_stays_that_have_one():
    changed = with_stay_cv(realistic(), 0.7)
    assert changed.patients[0].stay.cv == 0.7 and changed.patients[0].mean_stay_days == pytest.approx(2.0)
    assert changed.patients[1].stay == realistic().patients[1].stay


def test_targets_by_unit():
    changed = with_targets(realistic(), {"B": 0.7})
    assert [unit.target_utilisation for unit in changed.units] == [None, 0.7]


def test_a_soft_closure_is_every_units():
    network = realistic()
    policy = Setting(soft=0.25).policy(network, network.policy())
    assert [rules.admit_while_closed for rules in policy.units.values()] == [0.25, 0.25]
