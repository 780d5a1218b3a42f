"""How a command runs replications: workers, engine, progress, failures and Ctrl-C."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from analysis.command.entry import CheckFailed, Interrupted, say
from analysis.command.options import Request
from analysis.command.progress import progress, until_interrupted
from analysis.command.provenance import provenance
from sim import engines
from sim.errors import RunError
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.provenance import fingerprint, now
from sim.replicate import Failure, Pace, Run, Share, pace_of, replicate_networks, replicate_shares
from sim.resuming import Job, run_whole
from sim.store import Store
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
    if request.cluster is not None:
        workers = cluster_workers(request.cluster)
        return Effort(choice, pace, workers, workers.count)
    count = request.workers
    if count is None:
        count = available_cores() if pace.seconds(replications, cells) > WORTH_PROCESSES_SECONDS else 1
    return Effort(choice, pace, local_workers(count), count)


def cluster_workers(address: str, **options: Any) -> Any:
    """The workers behind the scheduler at that address, what they have to say going to standard error."""
    from sim.cluster import Cluster
    from sim.machines.keys import default_folder

    return Cluster(address, default_folder(), **{"notice": say, **options})


def _announce_compiling() -> None:
    from sim.compiled.cache import cache_folder, folder_is_writable

    if not folder_is_writable():
        say(f"compiling the engine; {cache_folder()} cannot be written, so nothing is kept for the next run")
    elif not engines.is_compiled():
        say("compiling the engine, once on this machine (some seconds)")


def expected(request: Request, cells: int) -> dict[str, Any]:
    """Expected seconds and bytes of `simulate`, and of a `game` of so many cells (null where it is too large)."""
    from analysis.payoffs import MOST_CELLS

    address, request = request.cluster, replace(request, cluster=None)
    replications = request.scenario.run.replications
    feasible = cells <= MOST_CELLS
    planned = effort(request, replications, cells if feasible else 1)
    threads = None if address is None else _threads(address)
    planned = planned if threads is None else replace(planned, count=threads)
    return {
        "estimated_for": "this machine" if threads is None else "the cluster, at this machine's pace",
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


def _threads(address: str) -> int | None:
    """The threads of the cluster's machines; None, said, where nobody is there: reading a scenario needs no cluster."""
    try:
        workers = cluster_workers(address)
    except RunError as error:
        say(f"{error}; the estimate is for this machine")
        return None
    try:
        count = workers.count
        there = bool(workers.machines)
    finally:
        workers.close()
    if not there:
        say(f"no machine at {address} that may help yet; the estimate is for this machine")
    return count if there else None


@dataclass(frozen=True)
class Ran:
    """How replications were run, and what went wrong.

    computed, reused: runs done now, and runs that a store had; None where there is no store.
    """

    engine: engines.Choice
    failures: list[Failure]
    interrupted: bool
    computed: int | None = None
    reused: int | None = None

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
        } | ({} if self.reused is None else {"computed": self.computed, "reused": self.reused})


def run_replications(
    request: Request, policies: Sequence[Any], *, label: str, take: Any, keep: bool = False, first: int = 0
) -> Ran:
    """Runs every replication of the request under every policy and hands each reply to `take`.

    keep: with --out, runs are kept in the folder's store as they arrive, and those that are there are not run again.
    first: replications below it have been run by this command; without a store they are left out.
    """
    if request.kept is not None:
        return request.kept(policies, take)
    if not keep or request.out is None:
        whole = [Share(tuple(range(len(policies))), range(first, request.scenario.run.replications))]
        return _run(request, policies, whole, _effort(request, whole), label=label, take=take)
    with Store(request.out, write=True) as store:
        return _run_beside(store, request, policies, label=label, take=take, quiet=first > 0)


def _run_beside(
    store: Store, request: Request, policies: Sequence[Any], *, label: str, take: Any, quiet: bool
) -> Ran:
    """Takes what the store has, then runs and keeps what is missing; quiet: without telling what is there."""
    job = Job(
        store, request.scenario, policies, request.scenario.run.replications,
        fingerprint=json.dumps(fingerprint(), sort_keys=True), others=request.cluster is not None,
    )  # fmt: skip
    if job.restarted:
        said = "replications were begun on a machine with other bits and are run again whole"
        say(f"{len(job.restarted)} {said}")
    for runs in job.kept_runs():
        if runs[0].replication not in job.unsure:  # what may begin again is taken at the end
            take(runs)
    if job.reused and not quiet:
        say(f"{job.reused:,} of {job.asked:,} runs are in {store.folder} already")
    shares = job.shares()
    planned = _effort(request, shares)
    engine = planned.engine.name
    job.begin(provenance(request, label, engine=engine) | {"cwd": str(Path.cwd())})

    def keep_then_take(reply: list[Run] | Failure) -> None:
        job.keep(reply, engine)
        if isinstance(reply, Failure) or reply[0].replication not in job.unsure:
            take(reply)

    ran = _run(request, policies, shares, planned, label=label, take=keep_then_take, job=job)
    for runs in job.kept_runs() if job.unsure else ():
        if runs[0].replication in job.unsure:
            take(runs)
    job.end(now().isoformat(timespec="seconds"))
    return replace(ran, computed=job.computed, reused=job.reused)


def size_of(shares: Sequence[Share]) -> tuple[int, int]:
    """Replications, and policies of each on average, at least one."""
    replications = sum(len(share.replications) for share in shares)
    runs = sum(len(share.replications) * len(share.cells) for share in shares)
    return max(1, replications), max(1, -(-runs // max(1, replications)))


def _effort(request: Request, shares: Sequence[Share]) -> Effort:
    return effort(request, *size_of(shares))


def _run(
    request: Request,
    policies: Sequence[Any],
    shares: Sequence[Share],
    planned: Effort,
    *,
    label: str,
    take: Any,
    job: Job | None = None,
) -> Ran:
    """Runs the shares and hands each reply to `take`; job: whose they are, where they are kept."""
    scenario, engine = request.scenario, planned.engine.name
    rules = [lower_policy(scenario, policy) for policy in policies]
    if shares:
        engines.load(engine).warm(lower_network(scenario), rules, plan_intake(scenario))

    def run(some: Sequence[Share]) -> Any:
        return replicate_shares(
            scenario, policies, some, engine=engine, workers=planned.workers,
            task_size=planned.pace.task_size(*size_of(some), planned.count),
        )  # fmt: skip

    replies = until_interrupted(run_whole(shares, run, job))
    failures = []
    runs = sum(len(share.replications) * len(share.cells) for share in shares)
    with replies, progress(label, runs, "runs") as bar:
        if request.cluster is not None:
            planned.workers.watch = bar.note
        for reply in replies:
            take(reply)
            if isinstance(reply, Failure):
                failures.append(reply)
                say(f"failed: {reply}")
            bar.advance(len(reply.cells) if isinstance(reply, Failure) else len(reply))
    return Ran(planned.engine, failures, replies.interrupted)


def run_resampled(request: Request, resampling: Any) -> Ran:
    """Runs the few replications of every resampling; none of them is kept in a store."""
    cells = resampling.runs // len(resampling.replications)
    planned = effort(request, len(resampling.replications), cells)
    engine, failures = planned.engine.name, []
    engines.load(engine).warm(
        lower_network(request.scenario),
        [lower_policy(request.scenario, request.policy)],
        plan_intake(request.scenario),
    )
    jobs = ((key, group.scenario, group.policies) for key, group in resampling.networks())
    replies = until_interrupted(
        replicate_networks(jobs, resampling.replications, engine=engine, workers=planned.workers)
    )
    with replies, progress("resampled records", resampling.runs, "runs") as bar:
        for key, reply in replies:
            resampling.take(key, reply)
            if isinstance(reply, Failure):
                failures.append(reply)
                say(f"failed: {reply}")
            bar.advance(len(reply.cells) if isinstance(reply, Failure) else len(reply))
    return Ran(planned.engine, failures, replies.interrupted)


def collect_runs(
    request: Request, *, label: str, least: int = 1, keep: bool = False
) -> tuple[list[Run], Ran]:
    """The finished runs of the request's policy by replication, at least so many, and how they were run."""
    runs: list[Run] = []
    ran = run_replications(
        request,
        [request.policy],
        label=label,
        take=lambda reply: runs.extend(reply if isinstance(reply, list) else []),
        keep=keep,
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
