"""A job of replications, whoever asks for it: engine and workers by its size, kept in a store where one is named.

Commands and notebooks differ in whom they tell and in how they are stopped; that is in `Manner`.
"""

from __future__ import annotations

import contextlib
import json
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from sim import engines
from sim.errors import RunError
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.provenance import fingerprint, now
from sim.replicate import Failure, Pace, Run, Share, pace_of, replicate_shares
from sim.resuming import Job, run_whole
from sim.scenario import Policy, Scenario
from sim.store import Store
from sim.workers import Workers, available_cores, local_workers

WORTH_PROCESSES_SECONDS = 3.0
BYTES_PER_CELL_UNIT = 16 * 8  # the sums that a table keeps of each run

Take = Callable[[Any], Any]
Origin = Callable[[str], Mapping[str, Any]]


class Silent:
    """Progress that nobody watches."""

    def __enter__(self) -> Silent:
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def advance(self, count: int = 1) -> None:
        """`count` more are done."""

    def note(self, text: str) -> None:
        """Who is at work."""


class Uninterrupted(contextlib.closing):
    """The replies as they come, closed at the end; Ctrl-C is the caller's, as KeyboardInterrupt."""

    interrupted = False

    def __enter__(self) -> Uninterrupted:
        return self

    def __iter__(self) -> Iterator[Any]:
        return self.thing


@dataclass(frozen=True)
class Manner:
    """How a job is to be run, and who is told.

    engine: asked for, else by the size of the job. count: worker processes, else the cores where they are worth it.
    remote: makes the workers of other machines, which go before. say: takes a notice. progress: `(label, total, unit)`
    -> a context manager as `Silent`. stoppable: replies -> a context manager over them that knows whether it was
    `interrupted`.
    """

    engine: str | None = None
    count: int | None = None
    remote: Callable[[], Any] | None = None
    say: Callable[[str], None] = lambda text: None
    progress: Callable[[str, int, str], Any] = lambda label, total, unit: Silent()
    stoppable: Callable[[Iterator[Any]], Any] = Uninterrupted


@dataclass(frozen=True)
class Effort:
    """How a job is done: the engine and why, its pace here, and the workers."""

    engine: engines.Choice
    pace: Pace
    workers: Workers
    count: int


def effort(scenario: Scenario, policy: Policy, manner: Manner, replications: int, cells: int) -> Effort:
    """Engine and workers for a job: one process where starting more would cost more than it saves."""
    pace = pace_of(scenario, policy, engine="reference")
    choice = engines.choose(manner.engine, pace.seconds(replications, cells))
    if choice.name == "compiled":
        _announce_compiling(manner)
        pace = pace_of(scenario, policy, engine="compiled")
    if manner.remote is not None:
        workers = manner.remote()
        return Effort(choice, pace, workers, workers.count)
    count = manner.count
    if count is None:
        count = available_cores() if pace.seconds(replications, cells) > WORTH_PROCESSES_SECONDS else 1
    return Effort(choice, pace, local_workers(count), count)


def _announce_compiling(manner: Manner) -> None:
    from sim.compiled.cache import cache_folder, folder_is_writable

    if not folder_is_writable():
        said = (
            f"compiling the engine; {cache_folder()} cannot be written, so nothing is kept for the next run"
        )
        manner.say(said)
    elif not engines.is_compiled():
        manner.say("compiling the engine, once on this machine (some seconds)")


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


@dataclass(frozen=True)
class Asked:
    """Every replication of a scenario's run table under some policies. label: of the progress.

    base: the policy by whose pace the job is measured. first: replications below it have been run before; without a
    store they are left out.
    """

    scenario: Scenario
    base: Policy
    policies: Sequence[Policy]
    label: str
    first: int = 0


def run_job(
    asked: Asked, manner: Manner, *, take: Take, folder: Path | None = None, origin: Origin | None = None
) -> Ran:
    """Runs every replication under every policy and hands each reply (runs, or a Failure) to `take`.

    folder: runs are kept in its store as they arrive, and those that are there are not run again. origin: engine ->
    the provenance to note there. Raises StoreError where the store fails.
    """
    if folder is None:
        whole = [
            Share(tuple(range(len(asked.policies))), range(asked.first, asked.scenario.run.replications))
        ]
        return run_shares(asked, whole, _effort(asked, manner, whole), manner, take)
    assert origin is not None, "what is kept says where it came from"
    with Store(folder, write=True) as store:
        return _run_beside(store, asked, manner, take, origin)


def _run_beside(store: Store, asked: Asked, manner: Manner, take: Take, origin: Origin) -> Ran:
    """Takes what the store has, then runs and keeps what is missing; a later part does not tell what is there."""
    job = Job(
        store, asked.scenario, asked.policies, asked.scenario.run.replications,
        fingerprint=json.dumps(fingerprint(), sort_keys=True), others=manner.remote is not None,
    )  # fmt: skip
    if job.restarted:
        said = "replications were begun on a machine with other bits and are run again whole"
        manner.say(f"{len(job.restarted)} {said}")
    for runs in job.kept_runs():
        if runs[0].replication not in job.unsure:  # what may begin again is taken at the end
            take(runs)
    if job.reused and not asked.first:
        manner.say(f"{job.reused:,} of {job.asked:,} runs are in {store.folder} already")
    shares = job.shares()
    planned = _effort(asked, manner, shares)
    engine = planned.engine.name
    job.begin(dict(origin(engine)) | {"cwd": str(Path.cwd())})

    def keep_then_take(reply: list[Run] | Failure) -> None:
        job.keep(reply, engine)
        if isinstance(reply, Failure) or reply[0].replication not in job.unsure:
            take(reply)

    ran = run_shares(asked, shares, planned, manner, keep_then_take, job)
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


def _effort(asked: Asked, manner: Manner, shares: Sequence[Share]) -> Effort:
    return effort(asked.scenario, asked.base, manner, *size_of(shares))


def run_shares(
    asked: Asked, shares: Sequence[Share], planned: Effort, manner: Manner, take: Take, job: Job | None = None
) -> Ran:
    """Runs the shares and hands each reply to `take`; job: whose they are, where they are kept."""
    engine = planned.engine.name
    if shares:
        rules = [lower_policy(asked.scenario, policy) for policy in asked.policies]
        engines.load(engine).warm(lower_network(asked.scenario), rules, plan_intake(asked.scenario))

    def run(some: Sequence[Share]) -> Any:
        return replicate_shares(
            asked.scenario, asked.policies, some, engine=engine, workers=planned.workers,
            task_size=planned.pace.task_size(*size_of(some), planned.count),
        )  # fmt: skip

    replies = manner.stoppable(run_whole(shares, run, job))
    runs = sum(len(share.replications) * len(share.cells) for share in shares)
    with replies, manner.progress(asked.label, runs, "runs") as bar:
        if manner.remote is not None:
            planned.workers.watch = bar.note
        failures = hand_over(replies, bar, take, manner)
    return Ran(planned.engine, failures, replies.interrupted)


def hand_over(replies: Any, bar: Any, take: Take, manner: Manner) -> list[Failure]:
    """Hands each reply to `take` and counts its runs; returns the failures, each of which is told."""
    failures = []
    for reply in replies:
        take(reply)
        if isinstance(reply, Failure):
            failures.append(reply)
            manner.say(f"failed: {reply}")
        bar.advance(len(reply.cells) if isinstance(reply, Failure) else len(reply))
    return failures


def too_few(done: int, least: int) -> RunError:
    """The error of a result that would rest on fewer finished replications than it needs."""
    return RunError(f"{done} replications were finished, but at least {least} are needed to show anything")
