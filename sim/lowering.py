"""Where words become numbers: a scenario and a policy as the arrays that the engines read.

Everything that an engine would otherwise have to multiply or look up by name is settled here, once.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from sim.demand import WeeklyPattern
from sim.rules import RULES
from sim.rules.last_resort import ANY_BED, HOME_BED, LAST_RESORTS, TURNED_AWAY
from sim.rules.out_of_use import Outage
from sim.rules.reviews import Reviews
from sim.scenario import Policy, Scenario
from sim.stays import Distribution

NOBODY = -1

__all__ = [
    "ANY_BED", "HOME_BED", "LAST_RESORTS", "NOBODY", "TURNED_AWAY", "GroupDraws", "IntakePlan", "Network", "Rules",
    "lower_network", "lower_policy", "plan_intake", "stay_factors", "window_edges",
]  # fmt: skip


@dataclass(frozen=True)
class Network:
    """What every policy shares. Arrays have one entry per unit, in scenario order.

    beds: staffed beds. stay_class: which row of an intake's stays holds for patients treated in the unit.
    extra_days: added to the stay of a transferred patient.
    edges: the measured window's start, the ends of its judged periods, and its end, in days.
    """

    unit_names: tuple[str, ...]
    beds: np.ndarray
    stay_class: np.ndarray
    extra_days: float
    edges: np.ndarray

    @property
    def measured_days(self) -> float:
        """The length of the measured window."""
        return float(self.edges[-1] - self.edges[0])


@dataclass(frozen=True)
class Rules:
    """One policy. A gate closes at `load >= closes` and reopens at `load <= reopens`.

    own_closes, own_reopens, incoming_closes, incoming_reopens: loads, (units,).
    referral_order: (units, units - 1), padded with -1. last_resort: a place in LAST_RESORTS.
    admit_while_closed: chance of admission at the own closed gate, (units,); None where it is 0 everywhere.
    reviews: None where all gates act at once.
    """

    own_closes: np.ndarray
    own_reopens: np.ndarray
    incoming_closes: np.ndarray
    incoming_reopens: np.ndarray
    referral_order: np.ndarray
    last_resort: int
    admit_while_closed: np.ndarray | None = None
    reviews: Reviews | None = None


@dataclass(frozen=True)
class GroupDraws:
    """What an intake needs to know of one group. `home`: the unit's place; `per_day`: weekly mean."""

    name: str
    home: int
    per_day: float
    pattern: WeeklyPattern
    stay: Distribution


@dataclass(frozen=True)
class IntakePlan:
    """Everything that the draws of a replication depend on.

    stay_factors: one per stay class. horizon_days: arrivals fall before it. delay_hours: None where transfers
    take no time. outages: None where all beds are always staffed; staffed_beds: (units,), undisturbed.
    """

    seed: int
    groups: tuple[GroupDraws, ...]
    stay_factors: tuple[float, ...]
    delay_hours: Distribution | None
    horizon_days: float
    outages: tuple[Outage, ...] | None = None
    staffed_beds: tuple[int, ...] = ()


def lower_network(scenario: Scenario) -> Network:
    """The part of a scenario that no policy changes."""
    factors = stay_factors(scenario)
    return Network(
        unit_names=scenario.unit_names,
        beds=np.array([unit.beds for unit in scenario.units], np.int64),
        stay_class=np.array([factors.index(unit.stay_factor) for unit in scenario.units], np.int64),
        edges=window_edges(scenario),
        **_lowered("lower_network", scenario),
    )


def _lowered(how: str, *of: object) -> dict[str, Any]:
    """What every rule adds, by its function of that name."""
    return {name: value for rule in RULES for name, value in getattr(rule, how)(*of).items()}


def stay_factors(scenario: Scenario) -> tuple[float, ...]:
    """The distinct stay factors of the units, in order of first use: the stay classes."""
    return tuple(dict.fromkeys(unit.stay_factor for unit in scenario.units))


def window_edges(scenario: Scenario) -> np.ndarray:
    """Start of the measured window, ends of whole judged periods (for a squared goal only), and its end."""
    start, length = scenario.run.warm_up_days, scenario.run.measured_days
    judged, inner = scenario.game.judged_over_days, []
    if judged is not None:
        whole = int(length // judged)
        inner = [start + judged * (period + 1) for period in range(whole)]
    return np.array([start, *(edge for edge in inner if edge < start + length), start + length])


def lower_policy(scenario: Scenario, policy: Policy) -> Rules:
    """The rules of one policy, in scenario order."""
    rules = [policy.units[name] for name in scenario.unit_names]
    return Rules(
        own_closes=np.array([unit.closure_threshold for unit in rules], np.int64),
        referral_order=_referral_places(scenario, rules),
        **_lowered("lower_policy", scenario, policy),
    )


def _referral_places(scenario: Scenario, rules: list) -> np.ndarray:
    places = np.full((len(rules), max(len(rules) - 1, 1)), NOBODY, np.int64)
    for unit, rule in enumerate(rules):
        asked = [scenario.place_of(name) for name in rule.referral_order]
        places[unit, : len(asked)] = asked
    return places


def plan_intake(scenario: Scenario) -> IntakePlan:
    """What the draws of this scenario's replications depend on."""
    groups = (
        GroupDraws(
            group.group, scenario.place_of(group.home), group.per_day, group.pattern, group.stay.distribution()
        )
        for group in scenario.patients
    )  # fmt: skip
    return IntakePlan(
        seed=scenario.run.seed,
        groups=tuple(groups),
        stay_factors=stay_factors(scenario),
        horizon_days=scenario.run.warm_up_days + scenario.run.measured_days,
        **_lowered("plan", scenario),
    )
