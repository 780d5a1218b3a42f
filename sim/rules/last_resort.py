"""The last resort: where a patient goes when every unit asked is closed or full."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, Literal

from pydantic import Field

from sim.rules.declaration import Lowered, Rule
from sim.tables import Table

if TYPE_CHECKING:
    from sim.scenario import Policy, Scenario

LastResort = Literal["turned_away", "home_bed", "any_bed"]
LAST_RESORTS = ("turned_away", "home_bed", "any_bed")
TURNED_AWAY, HOME_BED, ANY_BED = range(3)
_READS = {
    "turned_away": "the patient is turned away",
    "home_bed": "the patient is admitted at home if a bed is free there, else turned away",
    "any_bed": "the patient is admitted at home or, in the referral order, wherever a bed is free, else turned away",
}


class DiversionKeys(Table):
    """`turned_away`; `home_bed`: the own bed; `any_bed`: then any free bed, whatever the gates."""

    when_all_closed: Annotated[LastResort, Field(examples=['when_all_closed = "home_bed"'])] = "home_bed"


class PolicyKeys(Table):
    """A policy's own last resort."""

    when_all_closed: LastResort | None = None


def lower(scenario: Scenario, policy: Policy) -> Lowered:
    """last_resort: a place in LAST_RESORTS."""
    return {"last_resort": LAST_RESORTS.index(policy.when_all_closed)}


def reads(scenario: Scenario, policy: Policy) -> str:
    """The last resort in words."""
    return f"when every unit asked is closed or full, {_READS[policy.when_all_closed]}"


RULE = Rule("last resort", reads, diversion_keys=DiversionKeys, policy_keys=PolicyKeys, lower_policy=lower)
