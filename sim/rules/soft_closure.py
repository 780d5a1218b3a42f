"""Soft closure: a closed unit with a free bed still takes some of its own patients, by their gate numbers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Annotated

import numpy as np
from pydantic import Field

from sim.rules.declaration import Lowered, Rule, in_words, of_units
from sim.tables import Share, Table

if TYPE_CHECKING:
    from sim.scenario import Policy, Scenario

GATE = 4  # the purpose of each patient's gate number


class UnitKeys(Table):
    """The share of own patients still taken while the own gate is closed."""

    admit_while_closed: Annotated[Share, Field(examples=["admit_while_closed = 0.2"])] = 0.0


class PolicyKeys(Table):
    """A policy's own shares."""

    admit_while_closed: dict[str, Share] = {}


@dataclass(frozen=True)
class Parameters:
    """admit_while_closed: a patient with a gate number below it is admitted at the closed home."""

    admit_while_closed: float


def lower(scenario: Scenario, policy: Policy) -> Lowered:
    """admit_while_closed: (units,), None where it is 0 everywhere."""
    shares = np.array([policy.units[name].admit_while_closed for name in scenario.unit_names], float)
    return {"admit_while_closed": shares if shares.any() else None}


def reads(scenario: Scenario, policy: Policy) -> str | None:
    """Units that close softly."""
    return in_words(
        of_units(policy, "admit_while_closed"), lambda share: f"still takes {100 * share:g} % of its own"
    )


RULE = Rule(
    "soft closure",
    reads,
    unit_keys=UnitKeys,
    policy_keys=PolicyKeys,
    parameters=Parameters,
    lower_policy=lower,
    purposes={"gate number": GATE},
)
