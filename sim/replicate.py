"""Replications: each drawn by its address, run under every policy asked for, and streamed as it finishes."""

from __future__ import annotations

import itertools
import time
import traceback
from collections.abc import Callable, Hashable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field, replace

from sim import engines
from sim.errors import RunError
from sim.intake import Intake, draw_intake
from sim.lowering import IntakePlan, Network, Rules, lower_network, lower_policy, plan_intake
from sim.record import Record
from sim.scenario import Policy, Scenario
from sim.trace import Trace
from sim.workers import Binding, Reply, Task, ThisProcess, Workers

DEFAULT_ENGINE = "reference"
SECONDS_PER_TASK = 1.0
LEAST_TASK_SECONDS, MOST_TASK_SECONDS = 0.5, 2.0  # beyond them tasks are sized anew
TASKS_PER_WORKER = 4


@dataclass(frozen=True)
class Run:
    """One finished run: its address, its record, the hash of the intake it met, and the seconds it took.

    fingerprint: of the machine that ran it, as text, where that may be another one.
    """

    replication: int
    cell: int
    record: Record
    intake_hash: str
    seconds: float = field(default=0.0, compare=False)
    fingerprint: str | None = field(default=None, compare=False)


@dataclass(frozen=True)
class Failure:
    """Runs that failed: their address and the traceback."""

    seed: int
    replication: int
    cells: tuple[int, ...]
    traceback: str

    def __str__(self) -> str:
        cells = (
            f"cells {self.cells[0]} to {self.cells[-1]}" if len(self.cells) > 1 else f"cell {self.cells[0]}"
        )
        return f"seed {self.seed}, replication {self.replication}, {cells}: {self.traceback.strip().splitlines()[-1]}"


@dataclass(frozen=True)
class Stranded:
    """Cells of replications that were not run: the machines that the share names did not come."""

    replications: tuple[int, ...]
    cells: tuple[int, ...]


@dataclass(frozen=True)
class TaskSize:
    """How many replications, and how many policies of each (None: all), make a task.

    most: replications that a task may grow to where tasks prove quick; None where the size is fixed.
    """

    replications: int = 1
    cells: int | None = None
    most: int | None = None

    def after(self, seconds: float, cells: int) -> TaskSize:
        """The size for the next tasks, when a full one of some of so many cells took so long (0: not known)."""
        if self.most is None or seconds <= 0 or LEAST_TASK_SECONDS <= seconds <= MOST_TASK_SECONDS:
            return self
        now = min(self.cells or cells, cells)
        if seconds > MOST_TASK_SECONDS:
            if self.replications > 1:
                return replace(self, replications=self.replications // 2)
            return replace(self, cells=max(1, now // 2))
        if now < cells:
            return replace(self, cells=min(cells, 2 * now))
        return replace(self, replications=max(self.replications, min(self.most, 2 * self.replications)))


@dataclass(frozen=True)
class Share:
    """Replications that are to run under the same policies: `cells` are places among the policies.

    fingerprint: of the machines that may run them, where others have run a part already.
    """

    cells: tuple[int, ...]
    replications: Iterable[int]
    fingerprint: str | None = None


def replicate(
    scenario: Scenario,
    policies: Sequence[Policy],
    replications: Iterable[int],
    *,
    engine: str = DEFAULT_ENGINE,
    workers: Workers | None = None,
    task_size: TaskSize | None = None,
) -> Iterator[list[Run] | Failure]:
    """Runs every replication under every policy; all policies of a replication meet the same intake.

    replications: their numbers, from 0; each can be had alone. task_size: default one replication under all
    policies. Yields the runs of one replication's block of policies at a time as they finish, in any order;
    the numbers depend neither on the workers nor on the tasks' size.
    """
    whole = Share(tuple(range(len(policies))), replications)
    return replicate_shares(scenario, policies, [whole], engine=engine, workers=workers, task_size=task_size)


def replicate_shares(
    scenario: Scenario,
    policies: Sequence[Policy],
    shares: Iterable[Share],
    *,
    engine: str = DEFAULT_ENGINE,
    workers: Workers | None = None,
    task_size: TaskSize | None = None,
    go_on: Callable[[], bool] = lambda: True,
) -> Iterator[list[Run] | Failure | Stranded]:
    """As `replicate`, but each replication under the policies of its share only.

    go_on: asked before each task is handed out; once it says no, only what is under way still arrives. A Stranded
    comes only of shares that name another machine's fingerprint, from workers on other machines.
    """
    network, plan = lower_network(scenario), plan_intake(scenario)
    rules = [lower_policy(scenario, policy) for policy in policies]
    cut = _Cut(shares, task_size or TaskSize())
    tasks = (
        ((batch, cells), (network, plan, batch, cells, [rules[cell] for cell in cells], engine))
        for batch, cells in cut
    )
    wanted = itertools.takewhile(lambda _: go_on(), tasks)
    for reply in _run_on(workers or ThisProcess(), wanted, cut, go_on):
        cut.learn(reply)
        if reply.handed_back:
            yield Stranded(*reply.key)  # type: ignore[misc]
        elif reply.failure is None:
            yield from (_stamped(one, reply.fingerprint) for one in reply.value)
        else:
            batch, cells = reply.key
            yield from (Failure(plan.seed, replication, cells, reply.failure) for replication in batch)


def _run_on(workers: Workers, tasks: Iterable[Task], cut: _Cut, go_on: Callable[[], bool]) -> Iterator[Reply]:
    """The replies; workers elsewhere are told which cells belong together, and may be left before they answer."""
    if getattr(workers, "binds", False):
        return workers.run(run_batch, tasks, binding=cut.binding, go_on=go_on)  # type: ignore[call-arg]
    return workers.run(run_batch, tasks)


def _stamped(reply: list[Run] | Failure, fingerprint: str | None) -> list[Run] | Failure:
    if fingerprint is None or isinstance(reply, Failure):
        return reply
    return [replace(run, fingerprint=fingerprint) for run in reply]


class _Cut:
    """Shares cut into tasks, (replications, cells) each, as they are asked for; the size follows the pace."""

    def __init__(self, shares: Iterable[Share], size: TaskSize) -> None:
        self._shares, self._size = shares, size
        self._of: dict[Hashable, tuple[TaskSize, Share]] = {}

    def __iter__(self) -> Iterator[tuple[tuple[int, ...], tuple[int, ...]]]:
        for share in self._shares:
            replications = iter(share.replications)
            while batch := tuple(itertools.islice(replications, self._size.replications)):
                first = 0
                while cells := share.cells[first : first + (self._size.cells or len(share.cells))]:
                    self._of[batch, cells] = self._size, share
                    first += len(cells)
                    yield batch, cells

    def binding(self, key: Hashable) -> Binding:
        """What a task that is under way belongs to: all cells of a replication must come from the same bits."""
        (batch, cells), (_, share) = key, self._of[key]  # type: ignore[misc]
        return Binding(batch, len(cells), len(share.cells), share.fingerprint)

    def learn(self, reply: Reply) -> None:
        """Sizes the next tasks by a reply to a full one of the present size."""
        (batch, cells), (size, share) = reply.key, self._of.pop(reply.key)
        of = len(share.cells)
        full = len(batch) == size.replications and len(cells) == min(size.cells or of, of)
        if size == self._size and (full or reply.seconds > MOST_TASK_SECONDS):
            self._size = size.after(reply.seconds, of)


def replicate_networks(
    jobs: Iterable[tuple[Hashable, Scenario, Sequence[Policy]]],
    replications: Sequence[int],
    *,
    engine: str = DEFAULT_ENGINE,
    workers: Workers | None = None,
) -> Iterator[tuple[Hashable, list[Run] | Failure]]:
    """A few replications of each of many networks, one network a task; yields (the job's key, what became of it).

    jobs: (key, scenario, policies); lowered only when a worker is free for it.
    """
    seeds: dict[Hashable, tuple[int, int]] = {}

    def handed_out() -> Iterator[tuple[Hashable, tuple]]:
        for key, scenario, policies in jobs:
            seeds[key] = scenario.run.seed, len(policies)
            yield key, _whole_task(scenario, policies, replications, engine)

    for reply in (workers or ThisProcess()).run(run_batch, handed_out()):
        if reply.failure is None:
            yield from ((reply.key, one) for one in reply.value)
        else:
            seed, cells = seeds[reply.key]
            failed = (Failure(seed, one, tuple(range(cells)), reply.failure) for one in replications)
            yield from ((reply.key, one) for one in failed)


def _whole_task(
    scenario: Scenario, policies: Sequence[Policy], replications: Sequence[int], engine: str
) -> tuple:
    rules = [lower_policy(scenario, policy) for policy in policies]
    cells = tuple(range(len(policies)))
    return lower_network(scenario), plan_intake(scenario), tuple(replications), cells, rules, engine


def run_batch(
    network: Network,
    plan: IntakePlan,
    replications: Sequence[int],
    cells: Sequence[int],
    rules: Sequence[Rules],
    engine: str,
) -> list[list[Run] | Failure]:
    """Some cells of several replications: their numbers, and the rules of each.

    A run that fails costs only itself.
    """
    replies: list[list[Run] | Failure] = []
    for replication in replications:
        try:
            replies.append(_run_cells(network, plan, replication, cells, rules, engine))
        except Exception:
            replies += _run_each(network, plan, replication, cells, rules, engine)
    return replies


def _run_cells(
    network: Network,
    plan: IntakePlan,
    replication: int,
    cells: Sequence[int],
    rules: Sequence[Rules],
    engine: str,
) -> list[Run]:
    started = time.perf_counter()
    intake = draw_intake(plan, replication)
    records = engines.load(engine).run_table(network, rules, intake)
    seconds = (time.perf_counter() - started) / len(rules)
    return [
        Run(replication, cell, _sound(record, network), intake.hash, seconds)
        for cell, record in zip(cells, records, strict=True)
    ]


def _run_each(
    network: Network,
    plan: IntakePlan,
    replication: int,
    cells: Sequence[int],
    rules: Sequence[Rules],
    engine: str,
) -> Iterator[list[Run] | Failure]:
    """The cells one by one, so that only those at fault are lost."""
    for cell, own in zip(cells, rules, strict=True):
        try:
            yield _run_cells(network, plan, replication, [cell], [own], engine)
        except Exception:
            yield Failure(plan.seed, replication, (cell,), traceback.format_exc())


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
    engines.load(engine).run(lower_network(scenario), lower_policy(scenario, policy), intake, trace=trace)
    return trace, intake


@dataclass(frozen=True)
class Pace:
    """Seconds on this machine: to draw one replication's intake, and to run it under one policy."""

    drawing: float
    running: float

    def seconds(self, replications: int, cells: int) -> float:
        """One worker's time for so many replications of so many policies."""
        return replications * (self.drawing + cells * self.running)

    def task_size(self, replications: int, cells: int, workers: int) -> TaskSize:
        """Tasks of about a second, and enough of them for every worker."""
        block = max(1, min(cells, int(SECONDS_PER_TASK / max(self.running, 1e-9))))
        fair = max(1, -(-replications // (TASKS_PER_WORKER * workers)))
        if block < cells:
            return TaskSize(1, block, fair)
        in_a_second = int(SECONDS_PER_TASK / max(self.seconds(1, cells), 1e-9))
        return TaskSize(max(1, min(in_a_second, fair)), cells, fair)


def pace_of(scenario: Scenario, policy: Policy, *, engine: str = DEFAULT_ENGINE) -> Pace:
    """An estimate of the pace on this machine, from a trial: a few simulated weeks, or for the compiled engine a
    whole run."""
    whole = scenario.run.warm_up_days + scenario.run.measured_days
    days = whole if engine == "compiled" else min(whole, 28.0)
    trial = scenario.with_run(warm_up_days=0.0, measured_days=days)
    network, rules, plan = lower_network(trial), lower_policy(trial, policy), plan_intake(trial)
    loaded = engines.load(engine)
    loaded.warm(network, [rules], plan)
    drawing = _seconds(lambda: draw_intake(plan, 0))
    intake = draw_intake(plan, 0)
    return Pace(
        drawing * whole / days, _seconds(lambda: loaded.run_table(network, [rules], intake)) * whole / days
    )


def _seconds(work) -> float:
    """Time of one call, averaged over about a twentieth of a second."""
    started, calls = time.perf_counter(), 0
    while calls == 0 or (time.perf_counter() - started < 0.05 and calls < 20):
        work()
        calls += 1
    return (time.perf_counter() - started) / calls
