"""Where words become numbers: a scenario and a policy as the arrays that the engines read.

Everything that an engine would otherwise have to multiply or look up by name is settled here, once.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from sim.demand import WeeklyPattern
from sim.scenario import Policy, Scenario
from sim.stays import Distribution

LAST_RESORTS = ("turned_away", "home_bed", "any_bed")
TURNED_AWAY, HOME_BED, ANY_BED = range(3)
NOBODY = -1


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
    admit_while_closed: chance of admission at the own closed gate, (units,).
    reviewed: whether the unit's gates may change only at reviews, (units,).
    review_times, review_units: every review in the order it happens.
    referral_order: (units, units - 1), padded with -1. last_resort: index into LAST_RESORTS.
    """

    own_closes: np.ndarray
    own_reopens: np.ndarray
    incoming_closes: np.ndarray
    incoming_reopens: np.ndarray
    admit_while_closed: np.ndarray
    reviewed: np.ndarray
    review_times: np.ndarray
    review_units: np.ndarray
    referral_order: np.ndarray
    last_resort: int


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

    stay_factors: one per stay class. delay_hours: None where transfers take no time. horizon_days: arrivals
    fall before it.
    """

    seed: int
    groups: tuple[GroupDraws, ...]
    stay_factors: tuple[float, ...]
    delay_hours: Distribution | None
    horizon_days: float = field(default=0.0)


def lower_network(scenario: Scenario) -> Network:
    """The part of a scenario that no policy changes."""
    factors = stay_factors(scenario)
    return Network(
        unit_names=scenario.unit_names,
        beds=np.array([unit.beds for unit in scenario.units], np.int64),
        stay_class=np.array([factors.index(unit.stay_factor) for unit in scenario.units], np.int64),
        extra_days=float(scenario.diversion.extra_days),
        edges=window_edges(scenario),
    )


def stay_factors(scenario: Scenario) -> tuple[float, ...]:
    """The distinct stay factors of the units, in order of first use: the stay classes."""
    return tuple(dict.fromkeys(unit.stay_factor for unit in scenario.units))


def window_edges(scenario: Scenario) -> np.ndarray:
    """Start of the measured window, ends of whole judged periods (for a squared goal only), and its end."""
    start, length = scenario.run.warm_up_days, scenario.run.measured_days
    goal = scenario.game.goal
    inner = []
    if getattr(goal, "shape", None) == "squared":
        whole = int(length // goal.judged_over_days)
        inner = [start + goal.judged_over_days * (period + 1) for period in range(whole)]
    return np.array([start, *(edge for edge in inner if edge < start + length), start + length])


def lower_policy(scenario: Scenario, policy: Policy) -> Rules:
    """The rules of one policy, in scenario order."""
    rules = [policy.units[name] for name in scenario.unit_names]
    own = np.array([unit.closure_threshold for unit in rules], np.int64)
    incoming = np.array([unit.incoming for unit in rules], np.int64)
    gap = np.array([unit.reopening_gap for unit in rules], np.int64)
    hours = [unit.review_hours for unit in rules]
    times, units = review_timetable(hours, scenario.run.warm_up_days + scenario.run.measured_days)
    return Rules(
        own_closes=own,
        own_reopens=np.maximum(0, own - gap),
        incoming_closes=incoming,
        incoming_reopens=np.maximum(0, incoming - gap),
        admit_while_closed=np.array([unit.admit_while_closed for unit in rules], float),
        reviewed=np.array([hour > 0 for hour in hours]),
        review_times=times,
        review_units=units,
        referral_order=_referral_places(scenario, rules),
        last_resort=LAST_RESORTS.index(policy.when_all_closed),
    )


def review_timetable(review_hours: list[float], horizon_days: float) -> tuple[np.ndarray, np.ndarray]:
    """Times (days) and units of all reviews before the horizon; review k of a unit is at (k * hours) / 24."""
    times, units = [], []
    for unit, hours in enumerate(review_hours):
        if hours > 0:
            count = int(horizon_days * 24 / hours) + 1
            at = (np.arange(1, count + 1) * hours) / 24
            times.append(at[at < horizon_days])
            units.append(np.full(len(times[-1]), unit, np.int64))
    if not times:
        return np.empty(0), np.empty(0, np.int64)
    all_times, all_units = np.concatenate(times), np.concatenate(units)
    order = np.lexsort((all_units, all_times))
    return all_times[order], all_units[order]


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
    delay = scenario.diversion.delay
    return IntakePlan(
        seed=scenario.run.seed,
        groups=tuple(groups),
        stay_factors=stay_factors(scenario),
        delay_hours=None if delay is None else delay.distribution(),
        horizon_days=scenario.run.warm_up_days + scenario.run.measured_days,
    )
