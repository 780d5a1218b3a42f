"""`brimline game` by racing: looks at 10, 20, 40, ... replications, and only what is undecided is run further."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import click

from analysis.command.deadline import Deadline
from analysis.command.entry import say
from analysis.command.options import Request
from analysis.command.progress import SECONDS_BETWEEN_LINES, about
from analysis.race_job import (
    DECIDED,
    INTERRUPTED,
    REPLICATIONS,
    Choice,
    analysed,
    as_asked,
    by_cost,
    is_whole,
    job_in,
    race_document,
    require_a_look,
    shares_of,
    start,
    stopped,
)
from analysis.race_job import tell as tell

EARLY = 0.05  # of a look's runs, which tell little of how long the others take

race_option = click.option(
    "--race/--no-race", default=None,
    help="Simulated: run on only what is undecided, or the whole table [default: by cost].",
)  # fmt: skip


def choose(
    request: Request, wanted: bool | None, bounds: dict[str, Any], *, exact: bool, counterpart: bool
) -> Choice | None:
    """How the table comes about; None where it is exact.

    bounds: `until`, `hours`, `minutes`, `budget` as given; these need a race.
    """
    from analysis.command.running import manner_of

    asked = [f"--{name}" for name, value in bounds.items() if value is not None]
    if exact:
        _refuse("is for simulated games; --exact solves every cell", [*asked, *_flag(wanted)])
        return None
    if wanted is False:
        _refuse("needs a race; leave --no-race out, or the bound", asked)
        return as_asked(False, "--no-race")
    if counterpart:
        _refuse(
            "cannot be had with --counterpart, which runs the whole table",
            [*asked, *(["--race"] if wanted else [])],
        )
        return Choice(False, "--counterpart", None, "Whole table, for --counterpart needs it")
    if request.kept is not None:
        return Choice(False, "batch", None, "Whole table, as a batch runs it")
    if wanted or asked:
        require_a_look(request.scenario, asked[0] if asked and not wanted else "--race")
        return as_asked(True, "--race" if wanted else asked[0])
    return by_cost(request.scenario, request.policy, manner_of(request))


def _flag(wanted: bool | None) -> list[str]:
    return [] if wanted is None else ["--race" if wanted else "--no-race"]


def _refuse(rule: str, options: list[str]) -> None:
    if options:
        raise click.UsageError(f"{', '.join(options)} {rule}")


# ---- running ----


def raced(
    request: Request, choice: Choice, deadline: Deadline, *, controls: bool, epsilon: float | None, tolerance: float
) -> tuple[Any, Any, dict[str, Any]]:  # fmt: skip
    """The analysis, how it was run, and what the document says besides."""
    from analysis.command.running import Ran, effort, require

    racing = _racing(request, controls, epsilon)
    policies = list(racing.tables.profiles.policies(request.policy))
    with ExitStack() as stack:
        job = _job(stack, request, policies, racing)
        planned = effort(request, racing.most, len(policies))
        if job is not None:
            _begin(job, request, planned.engine.name)
        done = _run(request, racing, policies, planned, job, deadline)
        why = stopped(racing, done.why)
        if job is not None:
            from sim.provenance import now

            job.end(now().isoformat(timespec="seconds"), needs_no_more=why in (DECIDED, REPLICATIONS))
    if not racing.state.looks:
        require(len(racing.tables.sums.complete), done.why == INTERRUPTED)
    if done.why == INTERRUPTED:
        say("interrupted; every whole look counts, and the rest is told as undecided")
    analysis = analysed(racing, tolerance)
    ran = Ran(
        planned.engine, done.failures, done.why == INTERRUPTED, *(() if job is None else (job.computed, job.reused))
    )  # fmt: skip
    return analysis, ran, race_document(racing, analysis, ran, choice, request.scenario) | {"stopped_by": why}


def _racing(request: Request, controls: bool, epsilon: float | None) -> Any:
    """The race before its first look."""
    from sim.scenario.describe import advice

    for said in advice(request.scenario):
        say(f"advice: {said}")
    return start(request.scenario, request.policy, controls=controls, epsilon=epsilon, say=say)


def _job(stack: ExitStack, request: Request, policies: list[Any], racing: Any) -> Any:
    """With --out the job beside its store, whose runs are taken first."""
    from sim.store import Store

    if request.out is None:
        return None
    store = stack.enter_context(Store(request.out, write=True))
    return job_in(store, request.scenario, policies, racing, others=request.cluster is not None, say=say)


def _begin(job: Any, request: Request, engine: str) -> None:
    from analysis.command.provenance import provenance

    job.begin(provenance(request, "game", engine=engine) | {"cwd": str(Path.cwd())})


def _run(
    request: Request, racing: Any, policies: list[Any], planned: Any, job: Any, deadline: Deadline
) -> Any:
    """Runs round after round, each followed by its look; returns how they ended."""
    from analysis.command.rounds import count_of, run_rounds

    with Screen(racing, deadline) as screen:

        def take(_: Any, reply: Any) -> None:
            racing.tables.sums.add(reply)
            screen.advance(count_of(reply))
            if not isinstance(reply, list):
                say(f"failed: {reply}")

        rounds = _rounds(request, racing, policies, planned, job, screen)
        ended = run_rounds(rounds, take=take, deadline=deadline)
    if deadline.clock_moved:
        say(deadline.clock_moved)
    return ended


def _rounds(
    request: Request, racing: Any, policies: list[Any], planned: Any, job: Any, screen: Screen
) -> Iterator[Any]:
    """The missing runs of each look; when they have arrived, the look."""
    from analysis.command.rounds import Round

    while (size := racing.size) is not None:
        needed = racing.state.needed
        round_ = Round(request.scenario, policies, shares_of(racing, job, size), planned, job)
        screen.begin(size, int(needed.sum()), round_.runs)
        yield round_
        if not is_whole(racing, needed, size):
            return
        racing.look()
        screen.show(at_once=True)


class Screen:
    """How a race stands, on standard error: redrawn in place on a terminal, else a line at looks and now and then."""

    def __init__(self, racing: Any, deadline: Deadline, clock: Callable[[], float] = time.monotonic) -> None:
        self._racing, self._deadline, self._clock = racing, deadline, clock
        self._live: Any = None
        self._began = self._last = clock()
        self._size = self._cells = self._of = self._done = self._all = 0

    def __enter__(self) -> Screen:
        if sys.stderr.isatty():
            from rich.console import Console
            from rich.live import Live

            console = Console(stderr=True, highlight=False, markup=False)
            self._live = Live(console=console, auto_refresh=False, transient=True)
            self._live.__enter__()
        return self

    def __exit__(self, *error: Any) -> None:
        if self._live is not None:
            self._live.__exit__(*error)

    def begin(self, size: int, cells: int, runs: int) -> None:
        """The runs of another look start."""
        self._size, self._cells, self._of, self._done = size, cells, runs, 0
        self.show()

    def advance(self, runs: int) -> None:
        """So many more have arrived."""
        self._done += runs
        self._all += runs
        self.show()

    def show(self, *, at_once: bool = False) -> None:
        """Tells how it stands, where it is time to."""
        now, pause = self._clock(), 0.5 if self._live is not None else SECONDS_BETWEEN_LINES
        if now - self._last < pause and not at_once:
            return
        self._last = now
        if self._live is None:
            print("game: " + "; ".join(self.lines()), file=sys.stderr, flush=True)
        else:
            from rich.text import Text

            self._live.update(Text("\n".join(self.lines())), refresh=True)

    def lines(self) -> list[str]:
        """How the race stands: after the last look, and on the way to the next."""
        race = self._racing.state
        said = []
        if race.looks:
            last = race.looks[-1]
            said.append(
                f"{last.replications:,} replications: {last.possible:,} possible, {last.confirmed:,} confirmed, "
                f"{last.undecided:,} undecided; {race.runs:,} runs, {race.runs_of_full_table - race.runs:,} saved"
            )
        if self._racing.size == self._size and self._of:
            said.append(
                f"{self._cells:,} cells to {self._size:,} replications, {self._done:,} of {self._of:,} runs, "
                f"{self._left()}"
            )
        if self._deadline.seconds_left is not None:
            said.append(f"ends in {about(self._deadline.seconds_left)} at the latest")
        return said

    def _left(self) -> str:
        if self._all < EARLY * self._of:
            return "time left not known yet"
        left = (self._clock() - self._began) / self._all * (self._of - self._done)
        return f"{about(left)} left to this look"
