"""Replications: each drawn by its address, run under every policy asked for, and streamed as it finishes."""

from __future__ import annotations

import time
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

from sim import reference
from sim.errors import RunError
from sim.intake import Intake, draw_intake
from sim.lowering import IntakePlan, Network, Rules, lower_network, lower_policy, plan_intake
from sim.record import Record
from sim.scenario import Policy, Scenario
from sim.trace import Trace
from sim.workers import ThisProcess, Workers

ENGINES = {"reference": reference.run}
DEFAULT_ENGINE = "reference"
SECONDS_PER_TASK = 1.0


@dataclass(frozen=True)
class Run:
    """One finished run: its address, its record, and the hash of the intake it met."""

    replication: int
    cell: int
    record: Record
    intake_hash: str


@dataclass(frozen=True)
class Failure:
    """Runs that failed: their address and the traceback."""

    seed: int
    replication: int
    cells: tuple[int, ...]
    traceback: str

    def __str__(self) -> str:
        cells = f"cells {self.cells[0]} to {self.cells[-1]}" if len(self.cells) > 1 else f"cell {self.cells[0]}"
        return f"seed {self.seed}, replication {self.replication}, {cells}: {self.traceback.strip().splitlines()[-1]}"


def replicate(
    scenario: Scenario,
    policies: Sequence[Policy],
    replications: Iterable[int],
    *,
    engine: str = DEFAULT_ENGINE,
    workers: Workers | None = None,
    cells_per_task: int | None = None,
) -> Iterator[list[Run] | Failure]:
    """Runs every replication under every policy; all policies of a replication meet the same intake.

    replications: their numbers, from 0; each can be had alone. cells_per_task: how many policies of one
    replication make a task (default: all). Yields the runs of each task as it finishes, in any order; the
    numbers depend neither on the workers nor on the tasks' size.
    """
    network, plan = lower_network(scenario), plan_intake(scenario)
    rules = [lower_policy(scenario, policy) for policy in policies]
    size = cells_per_task or len(rules)
    tasks = (
        ((replication, first), (network, plan, replication, first, rules[first : first + size], engine))
        for replication in replications
        for first in range(0, len(rules), size)
    )
    for reply in (workers or ThisProcess()).run(run_cells, tasks):
        if reply.failure is None:
            yield reply.value
        else:
            replication, first = reply.key
            cells = tuple(range(first, min(first + size, len(rules))))
            yield Failure(plan.seed, replication, cells, reply.failure)


def run_cells(
    network: Network, plan: IntakePlan, replication: int, first: int, rules: Sequence[Rules], engine: str
) -> list[Run]:
    """The runs of consecutive cells of one replication; `first` is the number of the first cell."""
    intake = draw_intake(plan, replication)
    return [
        Run(replication, first + place, _sound(ENGINES[engine](network, one, intake), network), intake.hash)
        for place, one in enumerate(rules)
    ]


def _sound(record: Record, network: Network) -> Record:
    faults = record.faults(network.measured_days)
    if faults:
        raise RunError("the engine broke its own invariants: " + "; ".join(faults))
    return record


def trace_replication(
    scenario: Scenario, policy: Policy, replication: int, *, engine: str = DEFAULT_ENGINE
) -> tuple[Trace, Intake]:
    """Every event of one replication, and the intake that it met."""
    intake, trace = draw_intake(plan_intake(scenario), replication), Trace()
    ENGINES[engine](lower_network(scenario), lower_policy(scenario, policy), intake, trace=trace)
    return trace, intake


def seconds_per_run(scenario: Scenario, policy: Policy, *, engine: str = DEFAULT_ENGINE) -> float:
    """An estimate of one run's time on this machine, from a trial of a few simulated weeks."""
    whole = scenario.run.warm_up_days + scenario.run.measured_days
    trial_days = min(whole, 28.0)
    trial = scenario.with_run(warm_up_days=0.0, measured_days=trial_days)
    network, rules = lower_network(trial), lower_policy(trial, policy)
    intake = draw_intake(plan_intake(trial), 0)
    started, runs = time.perf_counter(), 0
    while runs == 0 or (time.perf_counter() - started < 0.05 and runs < 20):
        ENGINES[engine](network, rules, intake)
        runs += 1
    return (time.perf_counter() - started) / runs * whole / trial_days


def cells_per_task(seconds: float, cells: int) -> int:
    """How many cells make a task of about a second."""
    return max(1, min(cells, round(SECONDS_PER_TASK / max(seconds, 1e-6))))
