"""`python -m tests.benchmarks.store`: workers and the store, in figures: speed-up, overhead, rate, size, resuming.

Work for workers is plain arithmetic that the processor alone limits. The large store holds a million runs of two units,
their records made up but of the real shape; `--rows N` for another size.
"""

from __future__ import annotations

import argparse
import multiprocessing
import os
import sqlite3
import tempfile
import time
from collections.abc import Callable
from contextlib import closing
from dataclasses import replace
from pathlib import Path

from analysis.payoffs import TableSums
from sim.replicate import replicate
from sim.resuming import Job
from sim.scenario import parse_scenario
from sim.store import UNIT_COLUMNS, Store
from sim.store_file import FILE
from sim.workers import LocalProcesses, ThisProcess
from tests.endurance import SCENARIO as TEXT

TASKS, ROUNDS, CELLS, HERE = 8, 3, 100, "here"
SCENARIO = parse_scenario(TEXT)


def spin(steps: int) -> int:
    """A task of so many steps of arithmetic."""
    total = 0
    for step in range(steps):
        total += step * step % 7
    return total


def seconds_of(work: Callable[[], object]) -> float:
    """Wall seconds of a piece of work."""
    started = time.perf_counter()
    work()
    return time.perf_counter() - started


def processor_seconds_of(work: Callable[[], object]) -> float:
    """Processor seconds of a piece of work in this process."""
    started = time.process_time()
    work()
    return time.process_time() - started


def _run(count: int, steps: int, tasks: int) -> None:
    for _ in LocalProcesses(count).run(spin, [(number, (steps,)) for number in range(tasks)]):
        pass


def _bare(steps: int) -> None:
    """The same tasks in two processes without a pool: what the machine has to give at this moment."""
    processes = [multiprocessing.Process(target=_spins, args=(steps, TASKS // 2)) for _ in range(2)]
    for process in processes:
        process.start()
    for process in processes:
        process.join()


def _spins(steps: int, tasks: int) -> None:
    for _ in range(tasks):
        spin(steps)


def workers() -> None:
    """Two workers against one, and what a task costs besides its work."""
    steps = int(1e6 / seconds_of(lambda: spin(1_000_000)))
    for count in (1, 2):
        _run(count, 1, count)  # started
    ratios = []
    for _ in range(ROUNDS):
        one, two = (seconds_of(lambda count=count: _run(count, steps, TASKS)) for count in (1, 2))
        ratios.append((one / two, one / seconds_of(lambda: _bare(steps))))
    for name, found in zip(("two workers", "two bare processes"), zip(*ratios, strict=True), strict=True):
        least, median, most = sorted(found)
        print(
            f"{name} against one worker, {TASKS} tasks: {median:.2f} times as fast ({least:.2f} to {most:.2f})"
        )
    print(f"load of the machine: {os.getloadavg()[0]:.1f} on {os.cpu_count()} cores")
    many = 2_000
    empty = seconds_of(lambda: _run(2, 1, many)) / many
    here = seconds_of(lambda: list(ThisProcess().run(spin, [(n, (1,)) for n in range(many)]))) / many
    print(f"overhead a task: {1e3 * empty:.2f} ms with two workers, {1e3 * here:.4f} ms in this process")


def policies() -> list:
    """So many policies, told apart by the share of patients still taken while closed."""
    base = SCENARIO.policy()
    return [
        replace(
            base, units={name: replace(one, admit_while_closed=n / CELLS) for name, one in base.units.items()}
        )
        for n in range(CELLS)
    ]


def rate(folder: Path) -> None:
    """Rows put, in the batches that tasks bring."""
    some = policies()[:20]
    replies = list(replicate(SCENARIO, some, range(100)))
    for size in (1, 20):
        with Store(folder / str(size), write=True) as store:
            job = Job(store, SCENARIO, some, 100, fingerprint=HERE)
            job.begin({"started": "now"})
            batches = [[run] for reply in replies for run in reply] if size == 1 else replies
            taken = processor_seconds_of(
                lambda batches=batches, job=job: [job.keep(one, "reference") for one in batches]
            )
        print(
            f"store, {size} rows a commit: {2_000 / taken:,.0f} rows a CPU second, {1e3 * taken / 2_000:.3f} ms a row"
        )


def resuming(folder: Path, rows: int) -> None:
    """Size, and the time to open and to plan, on a store of so many rows."""
    some, replications = policies(), rows // CELLS
    with Store(folder, write=True) as store:
        job = Job(store, SCENARIO, some, 1, fingerprint=HERE)
        for reply in replicate(SCENARIO, some, [0]):
            job.keep(reply, "reference")
    began = time.perf_counter()
    _fill(folder / FILE, replications)
    print(f"filled by copying in {time.perf_counter() - began:.0f} s")
    size = sum(file.stat().st_size for file in folder.iterdir())
    print(f"store of {rows:,} rows of two units: {size / 1e9:.2f} GB, {size / rows:,.0f} bytes a row")
    opened: list[Store] = []
    print(
        f"opened to write in {processor_seconds_of(lambda: opened.append(Store(folder, write=True))):.2f} s of CPU"
    )
    jobs: list[Job] = []
    taken = processor_seconds_of(
        lambda: jobs.append(Job(opened[0], SCENARIO, some, replications + 1, fingerprint=HERE))
    )
    print(f"what is missing found in {taken:.2f} s of CPU ({jobs[0].missing} of {jobs[0].asked:,})")
    taken = processor_seconds_of(lambda: sum(len(runs) for runs in jobs[0].kept_runs()))
    print(f"all kept runs read and their hashes held against their bits in {taken:.1f} s of CPU")
    sums = TableSums(SCENARIO, CELLS, replications + 1)
    taken = processor_seconds_of(lambda: [sums.add(runs) for runs in jobs[0].kept_runs()])
    print(f"read again, and added up into the table of a game, in {taken:.1f} s of CPU")
    opened[0].close()


def _fill(file: Path, replications: int) -> None:
    """Copies replication 0 under other numbers, by SQL."""
    with closing(sqlite3.connect(file)) as db, db:
        numbers = "WITH RECURSIVE n(r) AS (SELECT 1 UNION ALL SELECT r + 1 FROM n WHERE r < ?)"
        last = (replications - 1,)
        db.execute(f"{numbers} INSERT INTO replications SELECT scenario, r, fingerprint, intake_hash"
                   " FROM n, replications WHERE replication = 0", last)  # fmt: skip
        columns = "engine, seconds, record_hash, arrays"
        db.execute(f"{numbers} INSERT INTO runs (scenario, cell, replication, {columns})"
                   f" SELECT scenario, cell, r, {columns} FROM n, runs WHERE replication = 0", last)  # fmt: skip
        units = ", ".join(UNIT_COLUMNS)
        db.execute(f"INSERT INTO units (run, unit, {units}) SELECT runs.id, unit, {units} FROM runs"
                   " JOIN runs AS first ON first.cell = runs.cell AND first.scenario = runs.scenario"
                   " AND first.replication = 0 JOIN units ON units.run = first.id"
                   " WHERE runs.replication > 0")  # fmt: skip


def main() -> None:
    """Everything, in turn."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--rows", type=int, default=1_000_000)
    parser.add_argument("--store-only", action="store_true", help="nothing about workers")
    asked = parser.parse_args()
    rows = asked.rows
    if not asked.store_only:
        workers()
    with tempfile.TemporaryDirectory() as place:
        rate(Path(place))
        resuming(Path(place) / "large", rows)


if __name__ == "__main__":
    main()
