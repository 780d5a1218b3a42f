"""Invented networks for timing, of any size."""

from __future__ import annotations

import itertools
from collections.abc import Sequence

from sim.lowering import IntakePlan, Network, Rules, lower_network, lower_policy, plan_intake
from sim.scenario import Scenario, parse_scenario


def network_of(
    beds: Sequence[int], *, warm_up: float = 63, measured: float = 364, load: float = 0.78
) -> Scenario:
    """Units with these beds, lognormal stays of 3.9 days and a transfer delay; `load` is offered per bed."""
    units = "\n".join(f'[[units]]\nname = "Unit {i}"\nbeds = {b}\n' for i, b in enumerate(beds))
    stay = 'stay = { family = "lognormal", mean_days = 3.9, cv = 1.4 }'
    groups = "\n".join(
        f'[[patients]]\ngroup = "Group {i}"\nhome = "Unit {i}"\nper_day = {load * b / 3.9:.6f}\n{stay}\n'
        for i, b in enumerate(beds)
    )
    run = f"[run]\nseed = 1\nwarm_up_days = {warm_up}\nmeasured_days = {measured}\n"
    road = '[diversion]\ndelay = { family = "lognormal", mean_hours = 2.5, cv = 0.5 }\n'
    return parse_scenario(f"schema = 1\n{run}\n{units}\n{groups}\n{road}")


def lowered(scenario: Scenario, cells: int) -> tuple[Network, list[Rules], IntakePlan]:
    """The scenario's arrays, and the first `cells` threshold profiles from half the beds up."""
    ranges = [range(max(1, unit.beds // 2), unit.beds + 1) for unit in scenario.units]
    profiles = itertools.islice(itertools.cycle(itertools.product(*ranges)), cells)
    base, names = scenario.policy(), scenario.unit_names
    rules = [
        lower_policy(scenario, base.with_thresholds(dict(zip(names, one, strict=True)))) for one in profiles
    ]
    return lower_network(scenario), rules, plan_intake(scenario)


def two_units() -> tuple[Network, list[Rules], IntakePlan]:
    """The yardstick: 17 x 21 thresholds of two units of 16 and 20 beds, 60 + 365 days, 1,200 admissions a unit-year."""
    scenario = network_of([16, 20], warm_up=60, measured=365)
    base, names = scenario.policy(), scenario.unit_names
    profiles = itertools.product(range(17), range(21))
    rules = [
        lower_policy(scenario, base.with_thresholds(dict(zip(names, one, strict=True)))) for one in profiles
    ]
    return lower_network(scenario), rules, plan_intake(scenario)
