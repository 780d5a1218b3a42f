"""Whole tables of policies of two units, cells that differ in one closure threshold solved together.

One unit's occupancy is the level. Below its closure threshold a level sees it open, above it closed, and never
which threshold that was; so one climb and one descent, for each set of the other rules, serve all cells.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, fields
from operator import attrgetter

import numpy as np

from analysis.chain.certificate import is_certified
from analysis.chain.doors import DoorTable, door_table, doors_by_load
from analysis.chain.exact import ELIMINATED, solve
from analysis.chain.limits import DEFAULT, Limits
from analysis.chain.measures import ExactResult
from analysis.chain.occupancy_measures import Observed, results
from analysis.chain.scope import refusals
from sim.scenario import Policy, Scenario, UnitRules

SWEEPS = 2_000  # multiply-adds that relaxing takes for each state
_OTHER_RULES = attrgetter(*(one.name for one in fields(UnitRules) if one.name != "closure_threshold"))


def solve_table(
    scenario: Scenario, policies: Sequence[Policy], *, limits: Limits = DEFAULT
) -> list[ExactResult]:
    """The exact measures under each policy, together where the structure of the network allows it.

    Equal to `solve` of each policy to rounding, certified as there. scenario, limits: as in `solve`.
    policies: in any order. Raises as `solve`.
    """
    together = solved_together(scenario, policies, limits=limits)
    return [
        together[cell] if cell in together else solve(scenario, policy, limits=limits)
        for cell, policy in enumerate(policies)
    ]


def solved_together(
    scenario: Scenario, policies: Sequence[Policy], *, limits: Limits = DEFAULT
) -> dict[int, ExactResult]:
    """The policies, by their place, that are solved together: two units, one rate in each, gaps of 1.

    Left out, for `solve`: what has no such structure, is out of scope, or failed its certificate here.
    """
    found: dict[int, ExactResult] = {}
    if len(scenario.units) != 2:
        return found
    for cells in _alike(policies):
        first = policies[cells[0]]
        if (plan := _plan(scenario, first, limits)) is not None:
            found |= _solved(scenario, policies, cells, plan)
    return found


def can_be_solved_together(scenario: Scenario, policy: Policy, *, limits: Limits = DEFAULT) -> bool:
    """Whether tables of closure thresholds around this policy have the structure that `solved_together` uses."""
    return len(scenario.units) == 2 and _plan(scenario, policy, limits) is not None


def _alike(policies: Iterable[Policy]) -> list[list[int]]:
    """Places of the policies whose rules are the same but for the closure thresholds."""
    groups: dict[tuple, list[int]] = defaultdict(list)
    for place, policy in enumerate(policies):
        groups[policy.when_all_closed, *map(_OTHER_RULES, policy.units.values())].append(place)
    return list(groups.values())


@dataclass(frozen=True)
class Plan:
    """How policies that are alike are solved.

    level: the place of the unit whose occupancy is the level. table: where arrivals go. passing, local:
    admissions a day to the level's unit and to the other by the doors of both, (4, 4), the level's first.
    leaving: discharge rates of both, the level's first, (2,).
    """

    level: int
    table: DoorTable
    passing: np.ndarray
    local: np.ndarray
    leaving: np.ndarray


def _plan(scenario: Scenario, policy: Policy, limits: Limits) -> Plan | None:
    """None where the structure is not there, or the passages would not fit in memory."""
    rates = one_rate_each(scenario, policy)
    gaps = {rules.reopening_gap for rules in policy.units.values()}
    beds = [unit.beds for unit in scenario.units]
    size = 16 * (max(beds) + 1) * (min(beds) + 1) ** 2
    if rates is None or gaps != {1} or size > limits.bytes or refusals(scenario, policy):
        return None
    level = int(beds[1] > beds[0])
    table = door_table(scenario, policy, [range(4)] * 2)
    admissions = table.admissions().reshape(2, 4, 4)
    if level:
        admissions = admissions[::-1].transpose(0, 2, 1)
    passing, local = np.ascontiguousarray(admissions)
    return Plan(level, table, passing, local, np.array([rates[level], rates[1 - level]]))


def one_rate_each(scenario: Scenario, policy: Policy) -> list[float] | None:
    """The discharge rate of each unit, whatever the thresholds (1 where nobody can come); None where several."""
    rates = []
    for unit in scenario.units:
        asks = {name for name, rules in policy.units.items() if unit.name in (name, *rules.referral_order)}
        stays = {group.mean_stay_days * unit.stay_factor for group in scenario.patients if group.home in asks}
        if len(stays) > 1:
            return None
        rates.append(1 / stays.pop() if stays else 1.0)
    return rates


def _solved(
    scenario: Scenario, policies: Sequence[Policy], cells: Sequence[int], plan: Plan
) -> dict[int, ExactResult]:
    lines = _lines(scenario, policies, cells, plan)
    if not lines:
        return {}
    observed, order = _observed(scenario, policies, lines, plan)
    kept = is_certified(observed).tolist()
    found = results(scenario, [policies[cell] for cell in order], observed)
    return {cell: result for cell, result, good in zip(order, found, kept, strict=True) if good}


def _lines(
    scenario: Scenario, policies: Sequence[Policy], cells: Sequence[int], plan: Plan
) -> list[list[int]]:
    """Cells with one threshold of the unit of the phases, line by line; none where each alone takes less work."""
    lines: dict[int, list[int]] = defaultdict(list)
    other = scenario.units[1 - plan.level]
    for cell in cells:
        thresholds = policies[cell].thresholds
        if all(thresholds[unit.name] <= unit.beds for unit in scenario.units):
            lines[thresholds[other.name]].append(cell)
    states, phases = math.prod(unit.beds + 1 for unit in scenario.units), other.beds + 1
    passages, sweeps = 2 * states * phases**2 * len(lines), SWEEPS * states * len(cells)
    return [] if states > ELIMINATED and passages > sweeps else list(lines.values())


def _observed(
    scenario: Scenario, policies: Sequence[Policy], lines: Sequence[Sequence[int]], plan: Plan
) -> tuple[Observed, list[int]]:
    """All cells, line after line, and their places among the policies."""
    parts = [_line(scenario, [policies[cell] for cell in line], plan) for line in lines]
    of_level, of_phase, time, states, total, imbalance = map(np.concatenate, zip(*parts, strict=True))
    occupancy = (of_level, of_phase)
    if plan.level:
        occupancy, time = (of_phase, of_level), time.transpose(0, 2, 1)
    leaving = plan.leaving[::-1] if plan.level else plan.leaving
    time = time.reshape(len(states), 16)
    observed = Observed(plan.table, occupancy, time, states, total, imbalance, leaving)
    return observed, [cell for line in lines for cell in line]


def _line(scenario: Scenario, policies: Sequence[Policy], plan: Plan) -> tuple[np.ndarray, ...]:
    from analysis.chain.kernels.cells import solve_line

    unit, other = scenario.units[plan.level], scenario.units[1 - plan.level]
    rules = policies[0].units
    incoming = rules[unit.name].incoming_threshold
    thresholds = np.array([policy.units[unit.name].closure_threshold for policy in policies])
    doors = doors_by_load(rules[other.name], other.beds, other.beds)
    cap = unit.beds if incoming is None else incoming
    return solve_line(thresholds, cap, unit.beds, plan.passing, plan.local, doors, plan.leaving)
