"""Hysteresis: a gate that has closed at k reopens only when the load is down to k - gap."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Annotated

import numpy as np
from pydantic import Field

from sim.rules.declaration import Lowered, Rule, of_units
from sim.tables import MOST_BEDS, Table

if TYPE_CHECKING:
    from sim.scenario import Policy, Scenario

Gap = Annotated[int, Field(ge=1, le=MOST_BEDS, examples=["reopening_gap = 1"])]


class UnitKeys(Table):
    """The gap travels with the threshold in policies and games; it may exceed it."""

    reopening_gap: Gap = 1


class PolicyKeys(Table):
    """A policy's own gaps."""

    reopening_gap: dict[str, Gap] = {}


@dataclass(frozen=True)
class Parameters:
    """reopening_gap: beds between closing and reopening, at least 1."""

    reopening_gap: int


def lower(scenario: Scenario, policy: Policy) -> Lowered:
    """own_reopens, incoming_reopens: the loads at which the gates reopen, (units,), never below 0."""

    def reopens(closes: str) -> np.ndarray:
        rules = (policy.units[name] for name in scenario.unit_names)
        return np.array([max(0, getattr(one, closes) - one.reopening_gap) for one in rules], np.int64)

    return {"own_reopens": reopens("closure_threshold"), "incoming_reopens": reopens("incoming")}


def reads(scenario: Scenario, policy: Policy) -> str | None:
    """Units whose gates reopen late."""
    wide = {name: gap for name, gap in of_units(policy, "reopening_gap").items() if gap > 1}
    return "; ".join(f"{name} reopens {gap} below its thresholds" for name, gap in wide.items()) or None


RULE = Rule(
    "reopening gap",
    reads,
    unit_keys=UnitKeys,
    policy_keys=PolicyKeys,
    parameters=Parameters,
    lower_policy=lower,
)
