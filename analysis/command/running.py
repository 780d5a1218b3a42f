"""How a command runs replications: workers, engine, progress, failures and Ctrl-C."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from analysis.command.entry import CheckFailed, Interrupted, say
from analysis.command.options import Request
from analysis.command.progress import progress, until_interrupted
from sim.errors import RunError
from sim.replicate import Failure, cells_per_task, replicate, seconds_per_run
from sim.workers import Workers, available_cores, local_workers

WORTH_PROCESSES_SECONDS = 3.0
BYTES_PER_CELL_UNIT = 14 * 8  # the sums that a table keeps of each run


@dataclass(frozen=True)
class Effort:
    """How much work is ahead, and how it is split."""

    seconds_per_run: float
    workers: Workers
    count: int


def effort(request: Request, runs: int) -> Effort:
    """The workers for so many runs: one process where starting more would cost more than it saves."""
    each = seconds_per_run(request.scenario, request.policy, engine=request.engine)
    count = request.workers
    if count is None:
        count = available_cores() if each * runs > WORTH_PROCESSES_SECONDS else 1
    return Effort(each, local_workers(count), count)


def expected(request: Request) -> dict[str, Any]:
    """Expected seconds and bytes of `simulate` and `game`."""
    from sim.scenario.describe import describe

    replications = request.scenario.run.replications
    runs = describe(request.scenario, request.policy)["game"]["runs"]
    planned = effort(request, runs)
    return {
        "seconds_per_run": planned.seconds_per_run,
        "simulate_seconds": planned.seconds_per_run * replications / min(planned.count, replications),
        "game_seconds": planned.seconds_per_run * runs / planned.count,
        "game_bytes": runs * len(request.scenario.units) * BYTES_PER_CELL_UNIT,
        "workers": planned.count,
    }


def run_replications(
    request: Request, policies: Sequence[Any], *, label: str, take: Any, scenario: Any = None, replications: int | None = None
) -> tuple[list[Failure], bool]:
    """Runs every replication under every policy and hands each reply to `take`.

    Returns the failures, and whether Ctrl-C ended it early. `scenario`, `replications`: instead of the
    request's own.
    """
    scenario = scenario or request.scenario
    count = replications or scenario.run.replications
    planned = effort(request, count * len(policies))
    replies = until_interrupted(
        replicate(
            scenario, policies, range(count), engine=request.engine, workers=planned.workers,
            cells_per_task=cells_per_task(planned.seconds_per_run, len(policies)),
        )
    )  # fmt: skip
    failures = []
    with replies, progress(label, count * len(policies), "runs") as bar:
        for reply in replies:
            take(reply)
            if isinstance(reply, Failure):
                failures.append(reply)
                say(f"failed: {reply}")
            bar.advance(len(reply.cells) if isinstance(reply, Failure) else len(reply))
    if replies.interrupted:
        say("interrupted; what was computed is kept")
    return failures, replies.interrupted


def require(done: int, interrupted: bool, *, least: int = 1) -> None:
    """A result needs at least so many finished replications; with fewer the command ends here."""
    if done >= least:
        return
    if interrupted:
        raise Interrupted
    raise RunError(f"{done} replications were finished, but at least {least} are needed to show anything")


def finish(failures: Sequence[Failure], interrupted: bool) -> None:
    """Ends a command whose result has been handed over, with the status that it deserves."""
    if interrupted:
        raise Interrupted
    if failures:
        raise CheckFailed
