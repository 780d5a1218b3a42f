"""How a command runs replications: workers, engine, progress, failures and Ctrl-C."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from functools import partial
from typing import Any

from analysis import running
from analysis.command.entry import CheckFailed, Interrupted, say
from analysis.command.options import Request
from analysis.command.progress import progress, until_interrupted
from analysis.command.provenance import provenance
from analysis.running import BYTES_PER_CELL_UNIT, WORTH_PROCESSES_SECONDS, Effort, Ran, size_of
from sim import engines
from sim.errors import RunError
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.replicate import Run, replicate_networks

__all__ = [
    "WORTH_PROCESSES_SECONDS", "Effort", "Ran", "cluster_workers", "collect_runs", "effort", "expected", "finish",
    "manner_of", "require", "run_replications", "run_resampled", "size_of",
]  # fmt: skip


def manner_of(request: Request) -> running.Manner:
    """How the request is to be run: told on standard error, and stopped by Ctrl-C with what it has."""
    remote = None if request.cluster is None else partial(cluster_workers, request.cluster)
    return running.Manner(request.engine, request.workers, remote, say, progress, until_interrupted)


def effort(request: Request, replications: int, cells: int) -> Effort:
    """Engine and workers for a job of this request."""
    return running.effort(request.scenario, request.policy, manner_of(request), replications, cells)


def cluster_workers(address: str, **options: Any) -> Any:
    """The workers behind the scheduler at that address, what they have to say going to standard error."""
    from sim.cluster import Cluster
    from sim.machines.keys import default_folder

    return Cluster(address, default_folder(), **{"notice": say, **options})


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


def run_replications(
    request: Request, policies: Sequence[Any], *, label: str, take: Any, keep: bool = False, first: int = 0
) -> Ran:
    """Runs every replication of the request under every policy and hands each reply to `take`.

    keep: with --out, runs are kept in the folder's store as they arrive, and those that are there are not run again.
    first: replications below it have been run by this command; without a store they are left out.
    """
    if request.kept is not None:
        return request.kept(policies, take)
    asked = running.Asked(request.scenario, request.policy, policies, label, first)
    return running.run_job(
        asked,
        manner_of(request),
        take=take,
        folder=request.out if keep else None,
        origin=lambda engine: provenance(request, label, engine=engine),
    )


def run_resampled(request: Request, resampling: Any) -> Ran:
    """Runs the few replications of every resampling; none of them is kept in a store."""
    cells = resampling.runs // len(resampling.replications)
    manner, planned = manner_of(request), effort(request, len(resampling.replications), cells)
    engine = planned.engine.name
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
        failures = []
        for key, reply in replies:
            failures += running.hand_over([reply], bar, partial(resampling.take, key), manner)
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
        say(
            "interrupted before enough replications were finished; there is nothing to show (with --out what was run "
            "is kept, and the same command goes on)"
        )
        raise Interrupted
    raise running.too_few(done, least)


def finish(ran: Ran) -> None:
    """Ends a command whose result has been handed over, with the status that it deserves."""
    if ran.interrupted:
        raise Interrupted
    if ran.failures:
        raise CheckFailed
