"""`brimline game` by racing: looks at 10, 20, 40, ... replications, and only what is undecided is run further."""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import click

from analysis.command.deadline import BUDGET, TIME, Deadline
from analysis.command.entry import say
from analysis.command.options import Request
from analysis.command.output import count
from analysis.command.progress import SECONDS_BETWEEN_LINES, about, duration
from analysis.command.rounds import INTERRUPTED

TABLE_SECONDS = 60.0  # a whole table that takes longer is raced
QUICK = 5_000_000  # patients in all runs of a table that needs no timing
MOST_BYTES = 2_000_000_000  # that a race keeps of its runs
EARLY = 0.05  # of a look's runs, which tell little of how long the others take
LEAST = 20  # replications, below which a race has one look and saves nothing
DECIDED, REPLICATIONS, FAILED = "decided", "replications", "failed"
WHY = {
    DECIDED: "it ended, for all is decided",
    REPLICATIONS: "it ended at the most replications that were asked for",
    TIME: "its time was over",
    BUDGET: "its budget of runs was used up",
    INTERRUPTED: "it was interrupted",
    FAILED: "it ended, for runs failed",
}

race_option = click.option(
    "--race/--no-race", default=None,
    help="Simulated: run on only what is undecided, or the whole table [default: by cost].",
)  # fmt: skip


@dataclass(frozen=True)
class Choice:
    """Race or whole table. chosen_by: `cost`, `batch`, or an option such as `--race`. seconds: of the whole table, None
    where the choice needed no timing."""

    race: bool
    chosen_by: str
    seconds: float | None
    reads: str


def choose(
    request: Request, wanted: bool | None, bounds: dict[str, Any], *, exact: bool, counterpart: bool
) -> Choice | None:
    """How the table comes about; None where it is exact.

    bounds: `until`, `hours`, `minutes`, `budget` as given; these need a race.
    """
    asked = [f"--{name}" for name, value in bounds.items() if value is not None]
    if exact:
        _refuse("is for simulated games; --exact solves every cell", [*asked, *_flag(wanted)])
        return None
    if wanted is False:
        _refuse("needs a race; leave --no-race out, or the bound", asked)
        return Choice(False, "--no-race", None, "Whole table, as asked")
    if counterpart:
        _refuse(
            "cannot be had with --counterpart, which runs the whole table",
            [*asked, *(["--race"] if wanted else [])],
        )
        return Choice(False, "--counterpart", None, "Whole table, for --counterpart needs it")
    if request.kept is not None:
        return Choice(False, "batch", None, "Whole table, as a batch runs it")
    if wanted or asked:
        _require_a_look(request, asked[0] if asked and not wanted else "--race")
        by = "--race" if wanted else asked[0]
        return Choice(True, by, None, f"Raced, for {by} was given")
    return _by_cost(request)


def _flag(wanted: bool | None) -> list[str]:
    return [] if wanted is None else ["--race" if wanted else "--no-race"]


def _refuse(rule: str, options: list[str]) -> None:
    if options:
        raise click.UsageError(f"{', '.join(options)} {rule}")


def _require_a_look(request: Request, option: str) -> None:
    from analysis.racing import FIRST
    from sim.errors import Fault, ScenarioError

    got = request.scenario.run.replications
    if got < FIRST:
        rule, remedy = (
            f"needs at least {FIRST} replications, for a race looks first after these",
            "raise --replications",
        )
        raise ScenarioError([Fault(None, option, rule, f"got {got}", remedy)], request.scenario.source.file)


def _by_cost(request: Request) -> Choice:
    from analysis.command.running import effort
    from analysis.profiles import profiles_of

    scenario, run = request.scenario, request.scenario.run
    cells = profiles_of(scenario, request.policy).cells
    size = f"{count(cells)} cells of {run.replications:,} replications"
    days = run.warm_up_days + run.measured_days
    patients = run.replications * cells * days * sum(group.per_day for group in scenario.patients)
    if run.replications < LEAST or cells < 2 or patients <= QUICK:
        return Choice(False, "cost", None, f"Whole table, for it is small: {size}")
    planned = effort(request, run.replications, cells)
    seconds = planned.pace.seconds(run.replications, cells) / planned.count
    how = "Raced" if seconds > TABLE_SECONDS else "Whole table"
    reads = (
        f"{how}: {size} take {about(seconds)} in full, the limit is {duration(TABLE_SECONDS)} "
        "(--race and --no-race override)"
    )
    return Choice(seconds > TABLE_SECONDS, "cost", float(f"{seconds:.1g}"), reads)


# ---- running ----


def raced(
    request: Request, choice: Choice, deadline: Deadline, *, controls: bool, epsilon: float | None, tolerance: float
) -> tuple[Any, Any, dict[str, Any]]:  # fmt: skip
    """The analysis, how it was run, and what the document says besides."""
    from analysis.command.running import Ran, effort, require
    from analysis.raced_game import analyse_raced, analyse_unlooked
    from sim.record import hash_records

    racing = _racing(request, controls, epsilon)
    run, policies = request.scenario.run, list(racing.tables.profiles.policies(request.policy))
    if racing.most < run.replications:
        say(
            f"a race looks at 10, 20, 40, ... replications: at most {racing.most:,} of {run.replications:,} are run"
        )
    with ExitStack() as stack:
        job = _job(stack, request, policies, racing)
        planned = effort(request, racing.most, len(policies))
        if job is not None:
            _begin(job, request, planned.engine.name)
        done = _run(request, racing, policies, planned, job, deadline)
        if job is not None:
            from sim.provenance import now

            job.end(
                now().isoformat(timespec="seconds"),
                needs_no_more=done.stopped(racing) in (DECIDED, REPLICATIONS),
            )
    sums, looked = racing.tables.sums, bool(racing.state.looks)
    if not looked:
        require(len(sums.complete), done.why == INTERRUPTED)
    stopped = done.stopped(racing)
    if done.why == INTERRUPTED:
        say("interrupted; every whole look counts, and the rest is told as undecided")
    analysis = (
        analyse_raced(racing, tolerance=tolerance) if looked
        else analyse_unlooked(racing, tolerance=tolerance)
    )  # fmt: skip
    used = analysis.race.replications
    hashes = [sums.record_hashes[at] for at in sorted(sums.record_hashes) if at[0] < used[at[1]]]
    ran = Ran(
        planned.engine, done.failures, done.why == INTERRUPTED, *(() if job is None else (job.computed, job.reused))
    )  # fmt: skip
    told = {
        "replications": int(used.max()), "confidence": run.confidence, "seed": run.seed,
        "record_hash": hash_records(hashes),
    } | ran.to_dict()  # fmt: skip
    return analysis, ran, told | {"race_choice": asdict(choice), "stopped_by": stopped}


def tell(document: dict[str, Any], analysis: Any) -> None:
    """Moves what was told of a race into its place in the document, with sentences."""
    from analysis.raced_document import race_sentences

    stopped = document.pop("stopped_by")
    reads = list(race_sentences(analysis.race, 1 - analysis.confidence, WHY[stopped]))
    document["racing"] |= {"stopped_by": stopped, "reads": reads}


def _racing(request: Request, controls: bool, epsilon: float | None) -> Any:
    """The race before its first look."""
    from analysis.game_tables import axes_of
    from analysis.payoffs import TableSums
    from analysis.raced_game import Racing
    from analysis.raced_table import RacedTables
    from analysis.racing import FIRST, look_sizes
    from sim.scenario.describe import advice

    axes = axes_of(request.scenario, request.policy)
    for said in advice(request.scenario):
        say(f"advice: {said}")
    run = request.scenario.run
    most = _within_memory(request, axes.profiles.cells, max(look_sizes(run.replications)))
    sums = TableSums(request.scenario, axes.profiles.cells, most, at_first=FIRST)
    tables = RacedTables(request.scenario, axes.profiles, axes.goal, axes.welfare, sums, controls)
    return Racing(tables, most, 1 - run.confidence, run.seed, epsilon)


def _within_memory(request: Request, cells: int, most: int) -> int:
    """The most replications of a cell whose sums fit into memory; never below the first look."""
    from analysis.command.running import BYTES_PER_CELL_UNIT
    from analysis.racing import FIRST

    fitting, each = most, cells * len(request.scenario.units) * BYTES_PER_CELL_UNIT
    while fitting > FIRST and fitting * each > MOST_BYTES:
        fitting //= 2
    if fitting < most:
        say(f"a table of {count(cells)} cells has room for {fitting:,} replications of a cell")
    return fitting


def _job(stack: ExitStack, request: Request, policies: list[Any], racing: Any) -> Any:
    """With --out the job beside its store, whose runs are taken first."""
    from sim.provenance import fingerprint
    from sim.resuming import Job
    from sim.store import Store

    if request.out is None:
        return None
    store = stack.enter_context(Store(request.out, write=True))
    here = json.dumps(fingerprint(), sort_keys=True)
    others = request.cluster is not None
    job = Job(store, request.scenario, policies, racing.most, fingerprint=here, others=others)
    for runs in job.kept_runs():
        racing.tables.sums.add(runs)
    if job.reused:
        say(f"{job.reused:,} runs are in {store.folder} already")
    return job


def _begin(job: Any, request: Request, engine: str) -> None:
    from analysis.command.provenance import provenance

    job.begin(provenance(request, "game", engine=engine) | {"cwd": str(Path.cwd())})


@dataclass
class _Done:
    """How the rounds of a race ended."""

    why: str | None
    failures: list[Any]

    def stopped(self, racing: Any) -> str:
        """Why there is no further look."""
        if not racing.state.needed.any():
            return DECIDED
        if racing.size is None:
            return REPLICATIONS
        return self.why or FAILED


def _run(
    request: Request, racing: Any, policies: list[Any], planned: Any, job: Any, deadline: Deadline
) -> _Done:
    """Runs round after round, each followed by its look."""
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
    return _Done(ended.why, ended.failures)


def _rounds(
    request: Request, racing: Any, policies: list[Any], planned: Any, job: Any, screen: Screen
) -> Iterator[Any]:
    """The missing runs of each look; when they have arrived, the look."""
    from analysis.command.rounds import Round

    while (size := racing.size) is not None:
        needed = racing.state.needed
        cells = frozenset(map(int, needed.nonzero()[0]))
        shares = job.shares(cells, size) if job is not None else _fresh(cells, racing.state.reached, size)
        round_ = Round(request.scenario, policies, shares, planned, job)
        screen.begin(size, len(cells), round_.runs)
        yield round_
        if not _is_whole(racing, needed, size):
            return
        racing.look()
        screen.show(at_once=True)


def _fresh(cells: frozenset[int], reached: int, size: int) -> list[Any]:
    from sim.replicate import Share

    return [Share(tuple(sorted(cells)), range(reached, size))]


def _is_whole(racing: Any, needed: Any, size: int) -> bool:
    """Whether every replication of the look is there, or has failed, and at least two are there."""
    sums = racing.tables.sums
    there = len(sums.among(needed, size))
    failed = {one.replication for one in sums.failures if one.replication < size}
    return there >= 2 and there + len(failed) >= size


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
