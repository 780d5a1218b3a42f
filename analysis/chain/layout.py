"""Which patients a unit can come to treat, and what that leaves for the chain to count."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from analysis.chain.unit_states import UnitSpace
from sim.scenario import Policy, Scenario, UnitRules


@dataclass(frozen=True)
class UnitLayout:
    """One unit as the chain sees it.

    beds: staffed beds. rules: its part of the policy.
    discharge_rates: the distinct rates at which its patients leave, per day, shape (rates,).
    arrivals: home unit -> arrivals a day by discharge rate, (rates,), of patients who can be treated here.
    space: what bounds its states.
    """

    name: str
    beds: int
    rules: UnitRules
    discharge_rates: tuple[float, ...]
    arrivals: Mapping[str, tuple[float, ...]]
    space: UnitSpace


def layout(scenario: Scenario, policy: Policy) -> tuple[UnitLayout, ...]:
    """Every unit of the scenario in file order, under the policy's rules."""
    return tuple(_unit_layout(scenario, policy, unit.name) for unit in scenario.units)


def state_bound(units: tuple[UnitLayout, ...]) -> int:
    """An upper bound of the number of states: the units' own numbers multiplied."""
    return math.prod(unit.space.size for unit in units)


def _unit_layout(scenario: Scenario, policy: Policy, name: str) -> UnitLayout:
    unit, rules = scenario.unit(name), policy.units[name]
    most = _most_by_home(scenario, policy, name)
    per_day: dict[tuple[str, float], float] = {}
    for group in scenario.patients:
        if most.get(group.home, 0) > 0:
            key = group.home, 1 / (group.mean_stay_days * unit.stay_factor)
            per_day[key] = per_day.get(key, 0.0) + group.per_day
    rates = tuple(sorted({rate for _, rate in per_day}))
    arrivals = {home: tuple(per_day.get((home, rate), 0.0) for rate in rates) for home, _ in per_day}
    space = UnitSpace(
        most=max((most[home] for home in arrivals), default=0),
        rates=len(rates),
        closure_threshold=rules.closure_threshold,
        incoming_threshold=rules.incoming,
        reopening_gap=rules.reopening_gap,
    )
    return UnitLayout(name, unit.beds, rules, rates, arrivals, space)


def _most_by_home(scenario: Scenario, policy: Policy, name: str) -> dict[str, int]:
    """Home -> the most patients that this unit can hold after it took one from there."""
    beds, rules, resort = scenario.unit(name).beds, policy.units[name], policy.when_all_closed
    takes_when_closed = rules.admit_while_closed > 0 or resort != "turned_away"
    most = {name: beds if takes_when_closed else rules.closure_threshold}
    incoming = beds if resort == "any_bed" else rules.incoming
    return most | {home: incoming for home, others in policy.units.items() if name in others.referral_order}
