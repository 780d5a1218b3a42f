"""Whole scenarios changed along one dimension: beds, the transfer delay, the variation of stays, targets by unit."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from sim.durations import Duration, Mixture
from sim.scenario.game import Game
from sim.scenario.scenario import Scenario
from sim.scenario.strategies import CLOSURE, Thresholds, UnitStrategies
from sim.scenario.units import Unit


def with_targets(scenario: Scenario, targets: Mapping[str, float]) -> Scenario:
    """Other target utilisations, by unit name."""
    units = (
        unit.model_copy(update={"target_utilisation": targets[unit.name]}) if unit.name in targets else unit
        for unit in scenario.units
    )
    return scenario.changed(units=tuple(units))


def with_beds(scenario: Scenario, beds: Mapping[str, int]) -> Scenario:
    """Other staffed beds, by unit name.

    A threshold at the file's beds, and a listed range of them that ends there, follow the beds; any other stays as it
    is, and none stays above the beds.
    """
    units = tuple(_with_beds(unit, beds.get(unit.name, unit.beds)) for unit in scenario.units)
    return scenario.changed(units=units, game=_with_listed(scenario, beds))


def follows(threshold: int, before: int, after: int) -> int:
    """The threshold after the unit's beds have changed."""
    return after if threshold == before else min(threshold, after)


def _with_beds(unit: Unit, beds: int) -> Unit:
    changes: dict[str, Any] = {"beds": beds}
    for key in ("closure_threshold", "incoming_threshold"):
        threshold = getattr(unit, key)
        if threshold is not None:
            changes[key] = follows(threshold, unit.beds, beds)
    return unit.model_copy(update=changes)


def _with_listed(scenario: Scenario, beds: Mapping[str, int]) -> Game:
    """The game with the listed thresholds of the changed units changed too."""
    listed = dict(scenario.game.strategies)
    for name, after in beds.items():
        if name in listed:
            listed[name] = _relisted(listed[name], scenario.unit(name).beds, after)
    return scenario.game.model_copy(update={"strategies": listed})


def _relisted(mine: UnitStrategies, before: int, after: int) -> UnitStrategies:
    tables = {key: getattr(mine, key) for key in ("closure", "incoming")}
    changes = {key: _within(table, before, after) for key, table in tables.items() if table is not None}
    if not changes and CLOSURE in mine.parameters():
        return _within(mine, before, after)
    return mine.model_copy(update=changes)


def _within(table: Any, before: int, after: int) -> Any:
    """Listed thresholds none of which is above the beds."""
    own: Thresholds = table
    if own.values is not None:
        return own.model_copy(update={"values": tuple(value for value in own.values if value <= after)})
    assert own.from_ is not None and own.to is not None
    last = follows(own.to, before, after)
    return own.model_copy(update={"from_": min(own.from_, last), "to": last})


def with_delay_factor(scenario: Scenario, factor: float) -> Scenario:
    """The transfer delay times a factor; 0 is no delay."""
    delay = scenario.diversion.delay
    scaled = None if delay is None or factor == 0 else _scaled(delay, factor)
    return scenario.changed(diversion=scenario.diversion.model_copy(update={"delay": scaled}))


def _scaled(duration: Any, factor: float) -> Any:
    """The same shape, each time `factor` times as long."""
    if isinstance(duration, Mixture):
        parts = tuple(_scaled(part, factor) for part in duration.parts)
        return duration.model_copy(update={"parts": parts})
    if hasattr(duration, "with_values"):
        return duration.with_values(tuple(factor * value for value in duration.values))
    if hasattr(duration, "rates"):
        return duration.model_copy(update={"rates": tuple(rate / factor for rate in duration.rates)})
    return duration.model_copy(update={"mean": factor * duration.mean})


def has_cv(duration: Duration) -> bool:
    """Whether a family takes its coefficient of variation as a key."""
    return hasattr(duration, "cv")


def with_stay_cv(scenario: Scenario, cv: float) -> Scenario:
    """The stays that have a coefficient of variation as a key, with another one; other stays are left alone."""
    groups = (
        group.model_copy(update={"stay": group.stay.model_copy(update={"cv": cv})})
        if has_cv(group.stay)
        else group
        for group in scenario.patients
    )
    return scenario.changed(patients=tuple(groups))
