"""A race about to be run and what is told of it: race or whole table, the first look's start, shares, the end.

Commands and notebooks differ in who bounds a race and who watches it; all that decides its numbers is here.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from sim.errors import Fault, ScenarioError
from sim.wording import about, count, duration

if TYPE_CHECKING:
    from analysis.raced_game import Racing
    from analysis.running import Asked, Manner, Origin, Ran
    from sim.resuming import Job
    from sim.scenario import Policy, Scenario

TABLE_SECONDS = 60.0  # a whole table that takes longer is raced
QUICK = 5_000_000  # patients in all runs of a table that needs no timing
MOST_BYTES = 2_000_000_000  # that a race keeps of its runs
LEAST = 20  # replications, below which a race has one look and saves nothing
DECIDED, REPLICATIONS, FAILED = "decided", "replications", "failed"
TIME, BUDGET, INTERRUPTED = "time", "budget", "interrupted"  # as a command names what ended its runs
WHY = {
    DECIDED: "it ended, for all is decided",
    REPLICATIONS: "it ended at the most replications that were asked for",
    TIME: "its time was over",
    BUDGET: "its budget of runs was used up",
    INTERRUPTED: "it was interrupted",
    FAILED: "it ended, for runs failed",
}
Say = Callable[[str], Any]


@dataclass(frozen=True)
class Choice:
    """Race or whole table. chosen_by: `cost`, `batch`, or an option such as `--race`. seconds: of the whole table, None
    where the choice needed no timing."""

    race: bool
    chosen_by: str
    seconds: float | None
    reads: str


def as_asked(race: bool, by: str) -> Choice:
    """The choice of whoever gave an option."""
    return Choice(race, by, None, f"Raced, for {by} was given" if race else "Whole table, as asked")


def by_cost(scenario: Scenario, policy: Policy, manner: Manner) -> Choice:
    """A race where the whole table would take long."""
    from analysis.profiles import profiles_of
    from analysis.running import effort

    run, cells = scenario.run, profiles_of(scenario, policy).cells
    size = f"{count(cells)} cells of {run.replications:,} replications"
    days = run.warm_up_days + run.measured_days
    patients = run.replications * cells * days * sum(group.per_day for group in scenario.patients)
    if run.replications < LEAST or cells < 2 or patients <= QUICK:
        return Choice(False, "cost", None, f"Whole table, for it is small: {size}")
    planned = effort(scenario, policy, manner, run.replications, cells)
    seconds = planned.pace.seconds(run.replications, cells) / planned.count
    how = "Raced" if seconds > TABLE_SECONDS else "Whole table"
    reads = (
        f"{how}: {size} take {about(seconds)} in full, the limit is {duration(TABLE_SECONDS)} "
        "(--race and --no-race override)"
    )
    return Choice(seconds > TABLE_SECONDS, "cost", float(f"{seconds:.1g}"), reads)


def require_a_look(scenario: Scenario, option: str) -> None:
    """ScenarioError where there are not enough replications for a race's first look."""
    from analysis.racing import FIRST

    got = scenario.run.replications
    if got < FIRST:
        rule, remedy = (
            f"needs at least {FIRST} replications, for a race looks first after these",
            "ask for more replications",
        )
        raise ScenarioError([Fault(None, option, rule, f"got {got}", remedy)], scenario.source.file)


# ---- running ----


def start(scenario: Scenario, policy: Policy, *, controls: bool, epsilon: float | None, say: Say) -> Racing:
    """The race before its first look."""
    from analysis.game_tables import axes_of
    from analysis.payoffs import TableSums
    from analysis.raced_game import Racing
    from analysis.raced_table import RacedTables
    from analysis.racing import FIRST, look_sizes

    axes, run = axes_of(scenario, policy), scenario.run
    most = _within_memory(scenario, axes.profiles.cells, max(look_sizes(run.replications)), say)
    if most < run.replications:
        say(f"a race looks at 10, 20, 40, ... replications: at most {most:,} of {run.replications:,} are run")
    sums = TableSums(scenario, axes.profiles.cells, most, at_first=FIRST)
    tables = RacedTables(scenario, axes.profiles, axes.goal, axes.welfare, sums, controls)
    return Racing(tables, most, 1 - run.confidence, run.seed, epsilon)


def _within_memory(scenario: Scenario, cells: int, most: int, say: Say) -> int:
    """The most replications of a cell whose sums fit into memory; never below the first look."""
    from analysis.racing import FIRST
    from analysis.running import BYTES_PER_CELL_UNIT

    fitting, each = most, cells * len(scenario.units) * BYTES_PER_CELL_UNIT
    while fitting > FIRST and fitting * each > MOST_BYTES:
        fitting //= 2
    if fitting < most:
        say(f"a table of {count(cells)} cells has room for {fitting:,} replications of a cell")
    return fitting


def job_in(
    store: Any, scenario: Scenario, policies: list[Policy], racing: Racing, *, others: bool, say: Say
) -> Job:
    """The job beside its store, whose runs are taken first. others: whether other machines may run some of it."""
    from sim.provenance import fingerprint
    from sim.resuming import Job

    here = json.dumps(fingerprint(), sort_keys=True)
    job = Job(store, scenario, policies, racing.most, fingerprint=here, others=others)
    for runs in job.kept_runs():
        racing.tables.sums.add(runs)
    if job.reused:
        say(f"{job.reused:,} runs are in {store.folder} already")
    return job


def shares_of(racing: Racing, job: Job | None, size: int) -> list[Any]:
    """What is missing for the look at so many replications."""
    from sim.replicate import Share

    cells = frozenset(map(int, racing.state.needed.nonzero()[0]))
    if job is not None:
        return job.shares(cells, size)
    return [Share(tuple(sorted(cells)), range(racing.state.reached, size))]


def is_whole(racing: Racing, needed: Any, size: int) -> bool:
    """Whether every replication of the look is there, or has failed, and at least two are there."""
    sums = racing.tables.sums
    there = len(sums.among(needed, size))
    failed = {one.replication for one in sums.failures if one.replication < size}
    return there >= 2 and there + len(failed) >= size


def stopped(racing: Racing, why: str | None) -> str:
    """Why there is no further look; why: what ended the runs before they were all there."""
    if not racing.state.needed.any():
        return DECIDED
    if racing.size is None:
        return REPLICATIONS
    return why or FAILED


def run_race(racing: Racing, asked: Asked, manner: Manner, *, folder: Path | None, origin: Origin) -> Ran:
    """Runs look after look, without a bound but the replications; an interrupt is the caller's.

    folder: runs are kept in its store, and those that are there are not run again. origin: as in `running.run_job`.
    """
    from contextlib import ExitStack
    from dataclasses import replace

    from analysis import running
    from sim.provenance import now
    from sim.store import Store

    with ExitStack() as stack:
        job, policies = None, list(asked.policies)
        if folder is not None:
            store = stack.enter_context(Store(folder, write=True))
            others = manner.remote is not None
            job = job_in(store, asked.scenario, policies, racing, others=others, say=manner.say)
        planned = running.effort(asked.scenario, asked.base, manner, racing.most, len(policies))
        engine = planned.engine.name
        if job is not None:
            job.begin(dict(origin(engine)) | {"cwd": str(Path.cwd())})

        def take(reply: Any) -> None:
            if job is not None:
                job.keep(reply, engine)
            racing.tables.sums.add(reply)

        failures = []
        while (size := racing.size) is not None:
            needed = racing.state.needed
            failures += running.run_shares(
                asked, shares_of(racing, job, size), planned, manner, take, job
            ).failures
            if not is_whole(racing, needed, size):
                break
            racing.look()
        ran = running.Ran(planned.engine, failures, False)
        if job is None:
            return ran
        more = stopped(racing, None) not in (DECIDED, REPLICATIONS)
        job.end(now().isoformat(timespec="seconds"), needs_no_more=not more)
        return replace(ran, computed=job.computed, reused=job.reused)


# ---- as a document ----


def analysed(racing: Racing, tolerance: float) -> Any:
    """The analysis of what the looks decided, or of what is there before the first."""
    from analysis.raced_game import analyse_raced, analyse_unlooked

    return (analyse_raced if racing.state.looks else analyse_unlooked)(racing, tolerance=tolerance)


def race_document(
    racing: Racing, analysis: Any, ran: Ran, choice: Choice, scenario: Scenario
) -> dict[str, Any]:
    """What a document says of a race's runs: how many, what repeats them, and why it was raced."""
    from sim.record import hash_records

    sums, used, run = racing.tables.sums, analysis.race.replications, scenario.run
    hashes = [sums.record_hashes[at] for at in sorted(sums.record_hashes) if at[0] < used[at[1]]]
    return {
        "replications": int(used.max()), "confidence": run.confidence, "seed": run.seed,
        "record_hash": hash_records(hashes),
    } | ran.to_dict() | {"race_choice": asdict(choice)}  # fmt: skip


def tell(document: dict[str, Any], analysis: Any) -> None:
    """Moves `stopped_by` into the race's place in the document, with sentences."""
    from analysis.raced_document import race_sentences

    why = document.pop("stopped_by")
    reads = list(race_sentences(analysis.race, 1 - analysis.confidence, WHY[why]))
    document["racing"] |= {"stopped_by": why, "reads": reads}
