"""Incoming thresholds: a unit may close to other units' patients before it closes to its own."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Annotated

import numpy as np
from pydantic import Field

from sim.rules.declaration import Lowered, Rule
from sim.tables import Table, Threshold

if TYPE_CHECKING:
    from sim.scenario import Policy, Scenario
    from sim.scenario.crosschecks import Draft


class UnitKeys(Table):
    """Default: as the closure threshold, and then following it."""

    incoming_threshold: Annotated[Threshold | None, Field(examples=["incoming_threshold = 9"])] = None


class PolicyKeys(Table):
    """A policy's own incoming thresholds."""

    incoming_threshold: dict[str, Threshold] = {}


@dataclass(frozen=True)
class Parameters:
    """incoming_threshold: None where it follows the closure threshold."""

    incoming_threshold: int | None


def check(draft: Draft) -> None:
    """The file's own incoming threshold must not be above the closure threshold (a run uses the lower one)."""
    for row in draft.rows("units"):
        path = ("units", row, "incoming_threshold")
        own, incoming = draft.read("units", row, "closure_threshold"), draft.read(*path)
        own_holds = draft.within_beds(("units", row, "closure_threshold"), draft.read("units", row, "beds"))
        if own_holds and None not in (own, incoming) and incoming > own:
            rule = "must not be above the closure threshold (units close to others first)"
            remedy = f"lower it to {own} or less, or raise the closure threshold"
            draft.fault(path, rule, f"got {incoming} above {own}", remedy)
        else:
            draft.fault_above_beds(path, draft.read("units", row, "beds"))


def lower(scenario: Scenario, policy: Policy) -> Lowered:
    """incoming_closes: the load at which the incoming gate closes, (units,)."""
    return {
        "incoming_closes": np.array([policy.units[name].incoming for name in scenario.unit_names], np.int64)
    }


def reads(scenario: Scenario, policy: Policy) -> str | None:
    """Where units close to others first."""
    early = {
        name: rules.incoming
        for name, rules in policy.units.items()
        if rules.incoming < rules.closure_threshold
    }
    return "; ".join(f"{name} closes to others at {threshold}" for name, threshold in early.items()) or None


RULE = Rule(
    "incoming thresholds",
    reads,
    unit_keys=UnitKeys,
    policy_keys=PolicyKeys,
    parameters=Parameters,
    check=check,
    lower_policy=lower,
)
