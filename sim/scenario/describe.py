"""The scenario read back in numbers before anything runs: offered load, stays, rules, game, advice."""

from __future__ import annotations

import math
from typing import Any

from sim.rules import RULES
from sim.scenario.policies import Policy
from sim.scenario.scenario import Scenario
from sim.scenario.strategies import CLOSURE

WARM_UP_STAYS = 5


def describe(scenario: Scenario, policy: Policy) -> dict[str, Any]:
    """Plain values, ready for JSON: `run`, `units`, `patients`, `diversion`, `rules`, `game`, `policies`, `advice`.

    Loads are in beds, stays in days, delays in hours.
    """
    return {
        "title": scenario.title,
        "run": scenario.run.model_dump(),
        "units": {unit.name: _unit(scenario, policy, unit.name) for unit in scenario.units},
        "patients": {group.group: _group(group) for group in scenario.patients},
        "diversion": _diversion(scenario, policy),
        "rules": {rule.name: said for rule in RULES if (said := rule.reads(scenario, policy)) is not None},
        "game": _game(scenario),
        "policies": [row.name for row in scenario.policies],
        "advice": advice(scenario),
    }


def _unit(scenario: Scenario, policy: Policy, name: str) -> dict[str, Any]:
    unit, rules = scenario.unit(name), policy.units[name]
    own = [group for group in scenario.patients if group.home == name]
    load = sum((group.per_day * group.mean_stay_days * unit.stay_factor for group in own), 0.0)
    return {
        "beds": unit.beds,
        "arrivals_per_day": sum((group.per_day for group in own), 0.0),
        "offered_load_beds": load,
        "offered_load_per_bed": load / unit.beds,
        "closure_threshold": rules.closure_threshold,
        "incoming_threshold": rules.incoming,
        "reopening_gap": rules.reopening_gap,
        "admit_while_closed": rules.admit_while_closed,
        "review_hours": rules.review_hours,
        "target_utilisation": unit.target_utilisation,
        "referral_order": list(rules.referral_order),
        "stay_factor": unit.stay_factor,
    }


def _group(group: Any) -> dict[str, Any]:
    stay = group.stay.distribution()
    return {
        "home": group.home,
        "kind": group.kind,
        "per_day": group.per_day,
        "varies_by_hour": _varies(group.hour_of_day),
        "varies_by_weekday": _varies(group.day_of_week),
        "family": group.stay.family,
        "mean_days": stay.mean(),
        "cv": stay.cv(),
        "median_days": stay.median(),
    }


def _varies(weights: tuple[float, ...] | None) -> bool:
    return len(set(weights or ())) > 1


def _diversion(scenario: Scenario, policy: Policy) -> dict[str, Any]:
    delay = scenario.diversion.delay
    known = None if delay is None else delay.distribution()
    return {
        "when_all_closed": policy.when_all_closed,
        "delay": None if known is None else {
            "family": delay.family, "mean_hours": known.mean(), "cv": known.cv(),
            "median_hours": known.median(),
        },
        "extra_days": scenario.diversion.extra_days,
    }  # fmt: skip


def _game(scenario: Scenario) -> dict[str, Any]:
    cells = math.prod(scenario.strategies_of_players().values())
    return {
        "goal": scenario.game.goal.model_dump(),
        "goals": {name: scenario.game.goal_of(name).reads for name in scenario.unit_names},
        "welfare": scenario.game.welfare.model_dump(),
        "players": {name: list(units) for name, units in scenario.players().items()},
        "strategies": {name: _choices(mine) for name, mine in scenario.choices().items()},
        "cells": cells,
        "runs": cells * scenario.run.replications,
    }


def _choices(parameters: dict[str, tuple[Any, ...]]) -> Any:
    """Closure thresholds as a list; anything else by parameter."""
    if parameters.keys() == {CLOSURE}:
        return list(parameters[CLOSURE])
    return {name: list(values) for name, values in parameters.items()}


def mean_stay_days(scenario: Scenario) -> float:
    """The longest mean stay of any group in any unit, in days: what a warm-up is measured by."""
    factor = max(unit.stay_factor for unit in scenario.units)
    return max(group.mean_stay_days for group in scenario.patients) * factor


def advice(scenario: Scenario) -> list[str]:
    """What an analyst should know before running this scenario; empty where nothing is amiss."""
    return [
        said
        for rule in (_warm_up, _whole_weeks, _whole_periods, _targets, _one_replication)
        for said in rule(scenario)
    ]


def _warm_up(scenario: Scenario) -> list[str]:
    least = WARM_UP_STAYS * mean_stay_days(scenario)
    given = scenario.run.warm_up_days
    if given >= least:
        return []
    return [
        f"run.warm_up_days is {given:g}, less than {WARM_UP_STAYS} mean stays ({least:.1f} days): measures "
        "will lean towards the empty network that a run starts from; raise it to at least "
        f"{7 * math.ceil(least / 7)}"
    ]


def _whole_weeks(scenario: Scenario) -> list[str]:
    if not any(_varies(group.day_of_week) for group in scenario.patients):
        return []
    lengths = {key: getattr(scenario.run, key) for key in ("warm_up_days", "measured_days")}
    return [
        f"run.{key} is {days:g}, no multiple of 7, and demand varies by weekday: some weekdays weigh "
        "more than others"
        for key, days in lengths.items()
        if days % 7
    ]


def _whole_periods(scenario: Scenario) -> list[str]:
    judged, days = scenario.game.judged_over_days, scenario.run.measured_days
    left = 0.0 if judged is None else days - judged * int(days / judged + 1e-9)
    if left < 1e-6:
        return []
    return [
        f"the last {left:g} of {days:g} measured days make no whole period of {judged:g} days and are "
        "not judged by the squared goal"
    ]


def _targets(scenario: Scenario) -> list[str]:
    missing = scenario.units_without_target()
    if not missing:
        return []
    return [
        f"no target_utilisation for {', '.join(missing)}: `game` needs one for every unit whose goal has a target "
        "(or --target)"
    ]


def _one_replication(scenario: Scenario) -> list[str]:
    return (
        ["run.replications is 1: one replication gives no interval"] if scenario.run.replications == 1 else []
    )
