"""Rounds: shares of runs, one after the other, kept as they arrive, until they are done or a deadline is over.

A batch gives rounds in the order of its plan. Whoever decides after each round what to run next gives an iterator that
looks at what `take` has been handed: the next round is asked for only when every reply to the last one has been kept.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

from analysis.command.deadline import BUDGET, Deadline
from analysis.command.progress import until_interrupted
from analysis.command.running import Effort, size_of
from sim import engines
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.replicate import Failure, Run, Share, Stranded, replicate_shares
from sim.resuming import Job, run_whole

INTERRUPTED = "interrupted"
Reply = list[Run] | Failure


@dataclass(frozen=True)
class Round:
    """Shares of one scenario that run together.

    shares: with replications as sequences; their cells are places among `policies`. job: keeps the replies, None where
    nothing is kept. mark: whatever the giver knows the round by.
    """

    scenario: Any
    policies: Sequence[Any]
    shares: Sequence[Share]
    effort: Effort
    job: Job | None = None
    mark: Any = None

    @property
    def runs(self) -> int:
        """The number of runs in it."""
        return sum(len(share.cells) * len(share.replications) for share in self.shares)  # type: ignore[arg-type]


@dataclass
class Ended:
    """How rounds came to their end.

    why: None where all were run, else TIME, BUDGET or INTERRUPTED. failures: the runs that failed.
    """

    why: str | None = None
    failures: list[Failure] = field(default_factory=list)


def run_rounds(rounds: Iterable[Round], *, take: Callable[[Round, Reply], None], deadline: Deadline) -> Ended:
    """Runs them; each reply is kept by its round's job, then handed to `take`.

    At the deadline no further task is handed out, and those under way (of about a second each) still arrive, unless
    they are at machines that do not answer. Ctrl-C, a polite request to end or a closed terminal stops them at once.
    Whatever arrived is kept whole.
    """
    ended = Ended()
    with until_interrupted(_replies(rounds, deadline, ended)) as replies:
        for current, reply in replies:
            if current.job is not None:
                current.job.keep(reply, current.effort.engine.name)
            deadline.count(count_of(reply))
            if isinstance(reply, Failure):
                ended.failures.append(reply)
            take(current, reply)
    if replies.interrupted:
        ended.why = INTERRUPTED
    return ended


def count_of(reply: Reply) -> int:
    """The number of runs that a reply settles."""
    return len(reply.cells) if isinstance(reply, Failure) else len(reply)


def _replies(rounds: Iterable[Round], deadline: Deadline, ended: Ended) -> Iterator[tuple[Round, Reply]]:
    def go_on() -> bool:
        """Asked where there is more to do, so that a no always leaves something undone."""
        ended.why = ended.why or deadline.over
        return ended.why is None

    warmed: set[int] = set()
    for current in rounds:
        if current.runs == 0:
            continue
        if not go_on():
            return
        if id(current.policies) not in warmed:
            _warm(current)
            warmed.add(id(current.policies))
        most = deadline.runs_left
        for reply in _run(current, deadline, go_on):
            yield current, reply
        if most is not None and most < current.runs:
            ended.why = ended.why or BUDGET
        if ended.why is not None:
            return


def _warm(current: Round) -> None:
    scenario = current.scenario
    rules = [lower_policy(scenario, policy) for policy in current.policies]
    engines.load(current.effort.engine.name).warm(lower_network(scenario), rules, plan_intake(scenario))


def _run(current: Round, deadline: Deadline, go_on: Callable[[], bool]) -> Iterator[Reply]:
    effort = current.effort

    def run(shares: Sequence[Share]) -> Iterator[Reply | Stranded]:
        most = deadline.runs_left
        some = shares if most is None else within(shares, most)
        return replicate_shares(
            current.scenario, current.policies, some, engine=effort.engine.name, workers=effort.workers,
            task_size=effort.pace.task_size(*size_of(some), effort.count), go_on=go_on,
        )  # fmt: skip

    return run_whole(current.shares, run, current.job)


def within(shares: Sequence[Share], most: int) -> list[Share]:
    """As much of the shares as makes at most so many runs: whole replications, then some cells of one more."""
    kept: list[Share] = []
    for share in shares:
        whole, rest = divmod(most, len(share.cells))
        kept.append(Share(share.cells, tuple(share.replications)[:whole]))
        most -= len(kept[-1].replications) * len(share.cells)  # type: ignore[arg-type]
        if whole < len(share.replications):  # type: ignore[arg-type]
            kept.append(Share(share.cells[:rest], tuple(share.replications)[whole : whole + 1]))
            break
    return [share for share in kept if share.cells and share.replications]
