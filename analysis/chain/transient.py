"""A network some days after a start: from empty, or from the long run of another policy or demand.

"A change of policy" and "a surge" are the same thing here: until day 0 one chain, from day 0 on another.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.chain.limits import DEFAULT, Limits
from analysis.chain.measures import ExactResult, measured
from analysis.chain.scope import OutOfScope, refusals
from analysis.chain.settled import settled
from analysis.chain.start import chain_from
from analysis.chain.uniformisation import distributions
from sim.scenario import Policy, Scenario


@dataclass(frozen=True)
class Before:
    """How the network was run, for long, until day 0: the same units under this demand and this policy."""

    scenario: Scenario
    policy: Policy

    def to_dict(self) -> dict[str, Any]:
        """Plain values; arrivals a day of the whole network."""
        arrivals = sum(group.per_day for group in self.scenario.patients)
        return {
            "network": "long run",
            "policy": self.policy.name,
            "thresholds": self.policy.thresholds,
            "arrivals_per_day": arrivals,
        }


EMPTY = {"network": "empty", "policy": None, "thresholds": None, "arrivals_per_day": None}


@dataclass(frozen=True)
class Day:
    """The network at one time.

    day: days after the start. measures: rates and shares at that time, not since the start. error_bound: given
    where it starts, no probability or share is further from the exact one; a mean number of occupied beds by no
    more than that times the beds, a rate a day by that times the arrivals a day. distance_to_long_run: half the
    sum of the distances from the long-run probabilities, 0 to 1: no share is further from its long-run value.
    """

    day: float
    error_bound: float
    distance_to_long_run: float
    measures: ExactResult

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        head = {key: getattr(self, key) for key in ("day", "error_bound", "distance_to_long_run")}
        return head | _measures(self.measures)


@dataclass(frozen=True)
class Transient:
    """A network day by day after a start.

    scenario, thresholds: its title and the closure thresholds in force. before: how it was run until day 0, None
    where it starts empty. days: in the order asked for. long_run: where it goes. states: of the chain. steps:
    matrix products done.
    """

    scenario: str
    thresholds: Mapping[str, int]
    before: Before | None
    days: tuple[Day, ...]
    long_run: ExactResult
    states: int
    steps: int

    def to_dict(self) -> dict[str, Any]:
        """The tree of `exact --after-days --json`.

        `start`: `network` (`empty` or `long run`) with the `policy`, `thresholds` and `arrivals_per_day` before
        day 0. `days`: a list, each with `day`, `error_bound`, `distance_to_long_run`, and the `units` and
        `network` of `exact` at that time. `long_run`: these two as days go on. `states`, `steps`: of the chain.
        """
        return {
            "scenario": self.scenario,
            "thresholds": dict(self.thresholds),
            "start": EMPTY if self.before is None else self.before.to_dict(),
            "days": [day.to_dict() for day in self.days],
            "long_run": _measures(self.long_run),
            "states": self.states,
            "steps": self.steps,
        }


def transient(
    scenario: Scenario,
    policy: Policy,
    days: Sequence[float],
    *,
    before: Before | None = None,
    limits: Limits = DEFAULT,
) -> Transient:
    """The exact measures of a network at given times after a start, within a stated error.

    scenario, policy: the network and its rules from day 0 on. days: the times, each 0 or more. before: how it was
    run, for long, until day 0; None where it starts empty. limits: the largest chain to attempt.
    Raises OutOfScope with every reason, ChainTooLarge, and RunError where a certificate fails.
    """
    old = () if before is None else refusals(before.scenario, before.policy)
    if reasons := tuple(dict.fromkeys((*refusals(scenario, policy), *old))):
        raise OutOfScope(reasons)
    long_run = settled(scenario, policy, limits)
    start = None if before is None else settled(before.scenario, before.policy, limits)
    chain, first, last = chain_from(start, long_run, scenario, policy, limits)
    found = distributions(chain.moves, first, days, long_run=last)
    return Transient(
        scenario=scenario.title,
        thresholds=policy.thresholds,
        before=before,
        days=tuple(
            Day(
                time,
                float(bound),
                float(np.abs(now - last).sum() / 2),
                measured(scenario, policy, chain, now),
            )
            for time, bound, now in zip(days, found.error_bound, found.probability, strict=True)
        ),
        long_run=measured(scenario, policy, *long_run),
        states=chain.moves.states,
        steps=found.steps,
    )


def _measures(result: ExactResult) -> dict[str, Any]:
    plain = result.to_dict()
    return {key: plain[key] for key in ("units", "network")}
