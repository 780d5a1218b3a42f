"""How a command runs replications: workers, engine, progress, failures and Ctrl-C."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from analysis.command.entry import CheckFailed, Interrupted, say
from analysis.command.options import Request
from analysis.command.progress import progress, until_interrupted
from sim import engines
from sim.errors import RunError
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.replicate import Failure, Pace, Run, pace_of, replicate
from sim.workers import Workers, available_cores, local_workers

WORTH_PROCESSES_SECONDS = 3.0
BYTES_PER_CELL_UNIT = 16 * 8  # the sums that a table keeps of each run


@dataclass(frozen=True)
class Effort:
    """How a job is done: the engine and why, its pace here, and the workers."""

    engine: engines.Choice
    pace: Pace
    workers: Workers
    count: int


def effort(request: Request, replications: int, cells: int) -> Effort:
    """Engine and workers for a job: one process where starting more would cost more than it saves."""
    pace = pace_of(request.scenario, request.policy, engine="reference")
    choice = engines.choose(request.engine, pace.seconds(replications, cells))
    if choice.name == "compiled":
        _announce_compiling()
        pace = pace_of(request.scenario, request.policy, engine="compiled")
    count = request.workers
    if count is None:
        count = available_cores() if pace.seconds(replications, cells) > WORTH_PROCESSES_SECONDS else 1
    return Effort(choice, pace, local_workers(count), count)


def _announce_compiling() -> None:
    from sim.compiled.cache import cache_folder, folder_is_writable

    if not folder_is_writable():
        say(f"compiling the engine; {cache_folder()} cannot be written, so nothing is kept for the next run")
    elif not engines.is_compiled():
        say("compiling the engine, once on this machine (some seconds)")


def expected(request: Request, cells: int) -> dict[str, Any]:
    """Expected seconds and bytes of `simulate`, and of a `game` of so many cells (null where it is too large)."""
    from analysis.payoffs import MOST_CELLS

    replications = request.scenario.run.replications
    feasible = cells <= MOST_CELLS
    planned = effort(request, replications, cells if feasible else 1)
    return {
        "engine": planned.engine.name,
        "seconds_per_run": planned.pace.running,
        "simulate_seconds": planned.pace.seconds(replications, 1),
        "game_seconds": planned.pace.seconds(replications, cells) / planned.count if feasible else None,
        "game_bytes": replications * cells * len(request.scenario.units) * BYTES_PER_CELL_UNIT
        if feasible
        else None,
        "workers": planned.count,
        **(
            {}
            if feasible
            else {"reason": f"a game may have at most {MOST_CELLS:,} cells: list fewer thresholds"}
        ),
    }


@dataclass(frozen=True)
class Ran:
    """How replications were run, and what went wrong."""

    engine: engines.Choice
    failures: list[Failure]
    interrupted: bool

    def to_dict(self) -> dict[str, Any]:
        """What a result says of it."""
        failed = [
            {
                "seed": one.seed,
                "replication": one.replication,
                "cells": list(one.cells),
                "traceback": one.traceback,
            }
            for one in self.failures
        ]
        return {
            "engine": self.engine.name,
            "engine_choice": self.engine.reason,
            "failed": failed,
            "interrupted": self.interrupted,
        }


def run_replications(request: Request, policies: Sequence[Any], *, label: str, take: Any) -> Ran:
    """Runs every replication of the request under every policy and hands each reply to `take`."""
    scenario = request.scenario
    count, cells = scenario.run.replications, len(policies)
    planned = effort(request, count, cells)
    rules = [lower_policy(scenario, policy) for policy in policies]
    engines.load(planned.engine.name).warm(lower_network(scenario), rules, plan_intake(scenario))
    replies = until_interrupted(
        replicate(
            scenario, policies, range(count), engine=planned.engine.name, workers=planned.workers,
            task_size=planned.pace.task_size(count, cells, planned.count),
        )
    )  # fmt: skip
    failures = []
    with replies, progress(label, count * cells, "runs") as bar:
        for reply in replies:
            take(reply)
            if isinstance(reply, Failure):
                failures.append(reply)
                say(f"failed: {reply}")
            bar.advance(len(reply.cells) if isinstance(reply, Failure) else len(reply))
    return Ran(planned.engine, failures, replies.interrupted)


def collect_runs(request: Request, *, label: str, least: int = 1) -> tuple[list[Run], Ran]:
    """The finished runs of the request's policy by replication, at least so many, and how they were run."""
    runs: list[Run] = []
    ran = run_replications(
        request,
        [request.policy],
        label=label,
        take=lambda reply: runs.extend(reply if isinstance(reply, list) else []),
    )
    require(len(runs), ran.interrupted, least=least)
    return sorted(runs, key=lambda run: run.replication), ran


def require(done: int, interrupted: bool, *, least: int = 1) -> None:
    """A result needs at least so many finished replications; with fewer the command ends here."""
    if done >= least:
        if interrupted:
            say(f"interrupted; {done} whole replications are kept")
        return
    if interrupted:
        say("interrupted before enough replications were finished; there is nothing to show")
        raise Interrupted
    raise RunError(f"{done} replications were finished, but at least {least} are needed to show anything")


def finish(ran: Ran) -> None:
    """Ends a command whose result has been handed over, with the status that it deserves."""
    if ran.interrupted:
        raise Interrupted
    if ran.failures:
        raise CheckFailed
