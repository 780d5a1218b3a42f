"""Reviews: a unit's gates move only at fixed hours, not with every change of its load."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Annotated

import numpy as np
from pydantic import Field

from sim.rules.declaration import Lowered, Rule, in_words, of_units
from sim.tables import MOST_REVIEWS, NotNegative, Table

if TYPE_CHECKING:
    from sim.scenario import Policy, Scenario
    from sim.scenario.crosschecks import Draft

REVIEW = 40  # the place of a review in the order of events
ReviewHours = Annotated[NotNegative, Field(le=24 * 366, examples=["review_hours = 8"])]


class UnitKeys(Table):
    """0: gates act at once."""

    review_hours: ReviewHours = 0.0


class PolicyKeys(Table):
    """A policy's own hours."""

    review_hours: dict[str, ReviewHours] = {}


@dataclass(frozen=True)
class Parameters:
    """review_hours: review k happens at (k * review_hours) / 24 days."""

    review_hours: float


@dataclass(frozen=True)
class Reviews:
    """Every review in the order it happens: times (days) and units. reviewed: whose gates wait, (units,)."""

    times: np.ndarray
    units: np.ndarray
    reviewed: np.ndarray


def check(draft: Draft) -> None:
    """Reviews every second would never end."""
    days = draft.run_days
    paths = [("units", row, "review_hours") for row in draft.rows("units")]
    paths += [path for row in draft.rows("policies") for path in draft.below("policies", row, "review_hours")]
    paths += [
        place
        for unit in draft.below("game", "strategies")
        for place in draft.below(*unit, "review_hours", "values")
    ]
    for path in paths:
        hours = draft.read(*path)
        if days is not None and hours and days * 24 / hours > MOST_REVIEWS:
            rule = f"a replication may hold at most {MOST_REVIEWS:,} reviews of a unit"
            remedy = "review less often, or give 0: gates act at once"
            draft.fault(path, rule, f"got about {days * 24 / hours:,.6g}", remedy)


def lower(scenario: Scenario, policy: Policy) -> Lowered:
    """reviews: None where every unit's gates act at once."""
    hours = [policy.units[name].review_hours for name in scenario.unit_names]
    return {"reviews": timetable(hours, scenario.run.warm_up_days + scenario.run.measured_days)}


def timetable(review_hours: list[float], horizon_days: float) -> Reviews | None:
    """All reviews before the horizon, by time, then unit; None where no unit has any."""
    times, units = [], []
    for unit, hours in enumerate(review_hours):
        if hours > 0:
            count = int(horizon_days * 24 / hours) + 1
            at = (np.arange(1, count + 1) * hours) / 24
            times.append(at[at < horizon_days])
            units.append(np.full(len(times[-1]), unit, np.int64))
    if not times:
        return None
    all_times, all_units = np.concatenate(times), np.concatenate(units)
    order = np.lexsort((all_units, all_times))
    return Reviews(all_times[order], all_units[order], np.array([hours > 0 for hours in review_hours]))


def reads(scenario: Scenario, policy: Policy) -> str | None:
    """Units that keep to reviews."""
    return in_words(of_units(policy, "review_hours"), lambda hours: f"moves its gates every {hours:g} h only")


def chain_refuses(scenario: Scenario, policy: Policy) -> Iterator[str]:
    """A review is no event of a Markov chain at constant rates."""
    for name, hours in of_units(policy, "review_hours").items():
        if hours > 0:
            yield f"units.{name}.review_hours: gates must act at once, got a review every {hours:g} hours"


RULE = Rule(
    "reviews",
    reads,
    unit_keys=UnitKeys,
    policy_keys=PolicyKeys,
    parameters=Parameters,
    check=check,
    lower_policy=lower,
    event_kinds={"review": REVIEW},
    chain_refuses=chain_refuses,
)
