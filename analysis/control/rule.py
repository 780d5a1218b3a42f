"""The best rule of control for a scenario's welfare, and what comes with it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from analysis.control.solver import Bounds, long_run, optimum
from analysis.control.states import ControlProblem, Numbers, Places, Stream, control_problem
from analysis.goals import Welfare
from sim.scenario import Policy, Scenario


@dataclass(frozen=True)
class ControlOutcome:
    """What happens under the best rule: rates a day by home, utilisation by unit.

    refused_with_free_bed_per_day: turned away although a bed was free within the home's reach.
    """

    turned_away_per_day: dict[str, float]
    refused_with_free_bed_per_day: dict[str, float]
    diverted_out_per_day: dict[str, float]
    utilisation: dict[str, float]
    throughput_per_day: float


@dataclass(frozen=True, eq=False)
class ControlResult:
    """The best rule that sees the whole network's state.

    welfare: bounds of the best welfare a day, which hold for the rule's own too. rule: number of the choice,
    shape (streams, states), into `problem.streams[...].choices`.
    """

    problem: ControlProblem
    welfare_goal: Welfare
    welfare: Bounds
    rule: Places
    outcome: ControlOutcome


def best_control(scenario: Scenario, policy: Policy, welfare: Welfare) -> ControlResult:
    """The best admission and placement rule for the network's welfare, in the long run.

    policy: its referral orders are the roads that the controller has too; its gates do not bind it.
    Raises OutOfScope and ChainTooLarge as the exact chain does, RunError where the bounds do not meet.
    """
    problem = control_problem(scenario, policy)
    best = optimum(problem, [worth(stream, welfare) for stream in problem.streams])
    gain = best.gain
    if welfare.sense == "cost":
        gain = Bounds(-gain.high, -gain.low)
    return ControlResult(problem, welfare, gain, best.rule, _outcome(problem, best.rule))


def worth(stream: Stream, welfare: Welfare) -> Numbers:
    """What one patient of a stream adds to the welfare by each choice, (choices,), more always being better."""
    sign = 1.0 if welfare.sense == "gain" else -1.0
    treated = np.array([choice is not None for choice in stream.choices], float)
    moved = np.array([choice not in (None, stream.home) for choice in stream.choices], float)
    return sign * welfare.value(treated, 1 - treated, moved)


def _outcome(problem: ControlProblem, rule: Places) -> ControlOutcome:
    columns = dict(_columns(problem, rule))
    means = long_run(problem, rule, np.stack(list(columns.values()), axis=1))
    found = dict(zip(columns, (bounds.middle for bounds in means), strict=True))

    def table(measure: str) -> dict[str, float]:
        return {name: max(0.0, found[measure, name]) for name in problem.beds if (measure, name) in found}

    away = table("turned away")
    return ControlOutcome(
        turned_away_per_day=away,
        refused_with_free_bed_per_day=table("refused"),
        diverted_out_per_day=table("moved"),
        utilisation=table("utilisation"),
        throughput_per_day=problem.arrivals_per_day - sum(away.values()),
    )


def _columns(problem: ControlProblem, rule: Places) -> Iterator[tuple[tuple[str, str], Numbers]]:
    """What each state counts a day, (states,), by measure and home or unit."""
    for name, beds in problem.beds.items():
        yield ("utilisation", name), problem.occupied(name) / beds
        away, refused, moved = (np.zeros(problem.states) for _ in range(3))
        for stream, chosen in zip(problem.streams, rule, strict=True):
            if stream.home == name:
                nobody = chosen == len(stream.choices) - 1
                away += stream.per_day * nobody
                refused += stream.per_day * (nobody & (stream.after[:-1] >= 0).any(axis=0))
                moved += stream.per_day * (~nobody & (chosen > 0))
        yield ("turned away", name), away
        yield ("refused", name), refused
        yield ("moved", name), moved
