"""Transfers take time and may lengthen the stay: the bed is reserved while the patient is on the road."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, Annotated

from pydantic import Field

from sim.durations import Delay
from sim.rules.declaration import Lowered, Rule
from sim.tables import NotNegative, Table

if TYPE_CHECKING:
    from sim.scenario import Policy, Scenario

DELAY = 3  # the purpose of each patient's delay
TRANSFER_ARRIVAL = 20  # the place of a transferred patient's arrival in the order of events
_EXAMPLE = 'delay = { family = "lognormal", mean_hours = 2.5, cv = 0.5 }'


class DiversionKeys(Table):
    """`delay`: hours on the road, none if absent. `extra_days`: added to a transferred patient's stay."""

    delay: Annotated[Delay | None, Field(examples=[_EXAMPLE])] = None
    extra_days: Annotated[NotNegative, Field(le=365, examples=["extra_days = 0.5"])] = 0.0


def lower(scenario: Scenario) -> Lowered:
    """extra_days: 0 where a transfer does not lengthen the stay."""
    return {"extra_days": float(scenario.diversion.extra_days)}


def plan(scenario: Scenario) -> Lowered:
    """delay_hours: the delay's distribution, None where transfers take no time."""
    delay = scenario.diversion.delay
    return {"delay_hours": None if delay is None else delay.distribution()}


def reads(scenario: Scenario, policy: Policy) -> str | None:
    """What a transfer costs in time."""
    delay, extra = scenario.diversion.delay, scenario.diversion.extra_days
    parts = []
    if delay is not None:
        hours = delay.distribution()
        parts.append(
            f"a transfer takes {hours.mean():.2f} h on average ({delay.family}, cv {hours.cv():.2f})"
        )
    if extra > 0:
        parts.append(f"it adds {extra:g} days to the stay")
    return "; ".join(parts) or None


def chain_refuses(scenario: Scenario, policy: Policy) -> Iterator[str]:
    """Nobody is on the road in the chain, and every stay keeps its rate."""
    diversion = scenario.diversion
    # No delay is ever negative, so a mean of 0 is a delay that is always 0.
    hours = diversion.delay.distribution().mean() if diversion.delay is not None else 0.0
    if hours > 0:
        family = diversion.delay.family
        yield f"diversion.delay: transfers must take no time, got {family} with a mean of {hours:g} hours"
    if diversion.extra_days > 0:
        got = f"got {diversion.extra_days:g} days"
        yield f"diversion.extra_days: a transfer must not lengthen the stay, {got}"


RULE = Rule(
    "transfers",
    reads,
    diversion_keys=DiversionKeys,
    lower_network=lower,
    plan=plan,
    purposes={"delay": DELAY},
    event_kinds={"arrival by transfer": TRANSFER_ARRIVAL},
    record_columns=("on_road_at_start", "on_road_at_end"),
    chain_refuses=chain_refuses,
)
