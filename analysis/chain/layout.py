"""Which patients a unit can come to treat, and what that leaves for the chain to count."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping
from dataclasses import dataclass

from analysis.chain.unit_states import COUNTED, UnitSpace
from sim.scenario import Policy, Scenario, UnitRules
from sim.scenario.units import Unit

Demand = Mapping[tuple[str, float], float]  # home, mean stay in days -> arrivals a day


@dataclass(frozen=True)
class UnitLayout:
    """One unit as the chain sees it.

    name, beds: the unit and its staffed beds.
    discharge_rates: the distinct rates at which its patients leave, per day, shape (rates,).
    arrivals: home unit -> arrivals a day by discharge rate, (rates,), of patients who can be treated here.
    space: what bounds its states.
    """

    name: str
    beds: int
    discharge_rates: tuple[float, ...]
    arrivals: Mapping[str, tuple[float, ...]]
    space: UnitSpace


def layout(scenario: Scenario, policy: Policy) -> tuple[UnitLayout, ...]:
    """Every unit of the scenario in file order, under the policy's rules."""
    demand: dict[tuple[str, float], float] = defaultdict(float)
    for group in scenario.patients:
        demand[group.home, group.mean_stay_days] += group.per_day
    return tuple(_unit_layout(policy, demand, unit) for unit in scenario.units)


def state_bound(units: tuple[UnitLayout, ...]) -> int:
    """An upper bound of the number of states: the units' own multiplied; COUNTED where that is more."""
    bound = 1
    for unit in units:
        bound *= unit.space.size
        if bound >= COUNTED:
            return COUNTED
    return bound


def _unit_layout(policy: Policy, demand: Demand, unit: Unit) -> UnitLayout:
    most = _most_by_home(policy, unit.name, unit.beds)
    per_day: dict[tuple[str, float], float] = defaultdict(float)
    for (home, mean_stay_days), arrivals in demand.items():
        if most.get(home, 0) > 0:
            per_day[home, 1 / (mean_stay_days * unit.stay_factor)] += arrivals
    rates = tuple(sorted({rate for _, rate in per_day}))
    arrivals = {home: tuple(per_day.get((home, rate), 0.0) for rate in rates) for home, _ in per_day}
    held = max((most[home] for home in arrivals), default=0)
    space = _space(policy.units[unit.name], held, len(rates))
    return UnitLayout(unit.name, unit.beds, rates, arrivals, space)


def _space(rules: UnitRules, most: int, rates: int) -> UnitSpace:
    return UnitSpace(most, rates, rules.closure_threshold, rules.incoming, rules.reopening_gap)


def _most_by_home(policy: Policy, name: str, beds: int) -> dict[str, int]:
    """Home -> the most patients that this unit can hold after it took one from there."""
    rules, resort = policy.units[name], policy.when_all_closed
    takes_when_closed = rules.admit_while_closed > 0 or resort != "turned_away"
    own = beds if takes_when_closed else rules.closure_threshold
    incoming = beds if resort == "any_bed" else rules.incoming
    referring = {home for home, others in policy.units.items() if name in others.referral_order}
    return dict.fromkeys(referring, incoming) | {name: own}
