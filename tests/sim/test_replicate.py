"""Replications and their workers: the same numbers however they are split, every failure with its address."""

from __future__ import annotations

import itertools
import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest

from sim import reference
from sim.intake import draw_intake
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.record import hash_records
from sim.replicate import Failure, Pace, Run, TaskSize, pace_of, replicate, trace_replication
from sim.scenario import parse_scenario
from sim.workers import LocalProcesses, ThisProcess, local_workers

SCENARIO_TEXT = """
schema = 1
title = "Two units by the sea (invented)"
run = { seed = 5, warm_up_days = 7, measured_days = 28 }
units = [{ name = "Ashgill", beds = 4 }, { name = "Norbeck", beds = 5, stay_factor = 1.2 }]

[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 1.1
stay = { family = "lognormal", mean_days = 3.5, cv = 1.2 }

[[patients]]
group = "Norbeck emergencies"
home = "Norbeck"
per_day = 1.3
stay = { family = "exponential", mean_days = 3.0 }
"""
SCENARIO = parse_scenario(SCENARIO_TEXT)
POLICIES = [SCENARIO.policy().with_thresholds({"Ashgill": k, "Norbeck": k}) for k in (2, 3, 4)]
CELLS = [(replication, cell) for replication in range(4) for cell in range(3)]


def hashes(replies: Iterator[list[Run] | Failure]) -> dict[tuple[int, int], tuple[str, str]]:
    """(replication, cell) -> the hashes of its record and of the intake it met; no failure among them."""
    runs = [run for reply in replies for run in reply]
    found = {(run.replication, run.cell): (run.record.hash, run.intake_hash) for run in runs}
    assert len(found) == len(runs)
    return found


@pytest.fixture(scope="module")
def plain() -> dict[tuple[int, int], tuple[str, str]]:
    return hashes(replicate(SCENARIO, POLICIES, range(4)))


# --- replications -----------------------------------------------------------------------------------------


def test_a_cell_is_the_run_of_its_intake_under_its_policy(plain):
    assert sorted(plain) == CELLS
    intake = draw_intake(plan_intake(SCENARIO), 2)
    record = reference.run(lower_network(SCENARIO), lower_policy(SCENARIO, POLICIES[1]), intake)
    assert plain[2, 1] == (record.hash, intake.hash)


def test_all_policies_of_a_replication_meet_the_same_patients(plain):
    for replication in range(4):
        assert len({plain[replication, cell][1] for cell in range(3)}) == 1
        assert len({plain[replication, cell][0] for cell in range(3)}) == 3
    assert len({plain[replication, 0][1] for replication in range(4)}) == 4


@pytest.mark.parametrize("size", [1, 2, 3, 100])
def test_the_size_of_tasks_changes_no_number(plain, size):
    assert hashes(replicate(SCENARIO, POLICIES, range(4), task_size=TaskSize(cells=size))) == plain


def test_the_number_of_workers_changes_no_number(plain):
    assert hashes(replicate(SCENARIO, POLICIES, range(4), workers=local_workers(1))) == plain
    assert (
        hashes(replicate(SCENARIO, POLICIES, range(4), workers=local_workers(2), task_size=TaskSize(cells=2)))
        == plain
    )


def test_a_replication_alone_is_the_same_as_in_a_longer_run(plain):
    assert hashes(replicate(SCENARIO, POLICIES, [3, 1])) == {
        cell: plain[cell] for cell in CELLS if cell[0] in (1, 3)
    }


def test_replications_are_run_as_they_are_asked_for():
    runs = replicate(SCENARIO, POLICIES, iter(range(10**9)))
    assert [run.replication for run in next(runs)] == [0, 0, 0]
    assert [run.replication for run in next(runs)] == [1, 1, 1]


def test_a_trace_is_of_the_replication_asked_for(plain):
    trace, intake = trace_replication(SCENARIO, POLICIES[0], 2)
    assert intake.hash == plain[2, 0][1]
    arrivals = [time for time, kind, _, _ in trace.events if kind == "arrival"]
    assert arrivals == intake.arrival.tolist()


def test_tasks_take_about_a_second():
    assert Pace(0.0, 0.1).task_size(8, 1000, 2) == TaskSize(1, 10, 1)
    assert Pace(0.0, 60.0).task_size(8, 1000, 2) == TaskSize(1, 1, 1)
    assert Pace(0.01, 0.01).task_size(1000, 4, 2) == TaskSize(20, 4, 125)  # 0.05 s a replication
    assert Pace(0.01, 0.01).task_size(16, 4, 2) == TaskSize(2, 4, 2)  # every worker gets its share
    assert Pace(0.5, 0.1).seconds(10, 5) == pytest.approx(10.0)
    for engine in ("reference", "compiled"):
        pace = pace_of(SCENARIO, POLICIES[0], engine=engine)
        assert pace.drawing > 0 and pace.running > 0


class Timed:
    """Workers that take so many seconds for a run, as their replies say; notes the runs of every task."""

    def __init__(self, seconds_per_run):
        self.seconds_per_run, self.runs = seconds_per_run, []

    def run(self, function, tasks):
        for reply in ThisProcess().run(function, tasks):
            runs = len(reply.key[0]) * len(reply.key[1])
            self.runs.append(runs)
            yield replace(reply, seconds=runs * self.seconds_per_run)


@pytest.mark.parametrize("seconds", [0.01, 0.06, 0.9])
@pytest.mark.parametrize("size", [TaskSize(1, 1, 8), TaskSize(8, 3, 8)])
def test_tasks_are_sized_anew_where_the_pace_proves_another(plain, seconds, size):
    """In the end a task takes 0.5 to 2 s, or is as large or as small as it may be."""
    workers = Timed(seconds)
    runs = [
        run
        for reply in replicate(SCENARIO, POLICIES, range(60), workers=workers, task_size=size)
        for run in reply
    ]
    assert len({(run.replication, run.cell) for run in runs}) == len(runs) == 60 * len(POLICIES)
    assert all(plain[run.replication, run.cell][0] == run.record.hash for run in runs if run.replication < 4)
    taken = workers.runs[-2] * seconds  # the last one may be what was left over
    assert 0.5 <= taken <= 2 or workers.runs[-2] == 8 * len(POLICIES)


# --- failures ---------------------------------------------------------------------------------------------


class Sabotage:
    """Workers that spoil the task of one address before they hand it on: there is no engine of that name."""

    def __init__(self, workers, address):
        self.workers, self.address = workers, address

    def run(self, function, tasks):
        spoilt = (
            (key, (*args[:-1], "no such engine") if key == self.address else args) for key, args in tasks
        )
        return self.workers.run(function, spoilt)


@pytest.mark.parametrize("count", [1, 2])
def test_a_failing_task_is_reported_with_its_address_and_the_rest_is_kept(plain, count):
    workers = Sabotage(local_workers(count), address=((1,), (2, 3)))
    replies = list(replicate(SCENARIO, POLICIES * 2, range(3), workers=workers, task_size=TaskSize(cells=2)))
    failures = [reply for reply in replies if isinstance(reply, Failure)]
    assert [(one.seed, one.replication, one.cells) for one in failures] == [(5, 1, (2,)), (5, 1, (3,))]
    assert "KeyError" in failures[0].traceback and "run_cells" in failures[0].traceback
    assert str(failures[1]) == "seed 5, replication 1, cell 3: KeyError: 'no such engine'"
    kept = hashes(reply for reply in replies if not isinstance(reply, Failure))
    assert sorted(kept) == [
        (k, cell) for k in range(3) for cell in range(6) if (k, cell) not in ((1, 2), (1, 3))
    ]
    assert all(hash == plain[k, cell % 3] for (k, cell), hash in kept.items())


def test_a_record_that_breaks_its_own_laws_is_a_failure(monkeypatch):
    engine = reference.run

    def forgetful(network, rules, intake):
        record = engine(network, rules, intake)
        record.turned_away[:] += 1
        return record

    monkeypatch.setattr(reference, "run", forgetful)
    [failure] = replicate(SCENARIO, POLICIES[:1], [7], engine="reference")
    assert (failure.replication, failure.cells) == (7, (0,))
    assert str(failure).startswith("seed 5, replication 7, cell 0: ")
    assert "arrived + on the road at the start differs" in str(failure)


def half(number: int) -> float:
    """A task: an even number's half. 13 kills its process; any other odd number is refused."""
    if number == 13:
        os._exit(3)
    if number % 2:
        raise ValueError(f"{number} is odd")
    return number / 2


def test_a_task_that_raises_costs_only_itself():
    for workers in (ThisProcess(), LocalProcesses(2)):
        replies = {reply.key: reply for reply in workers.run(half, [(str(n), (n,)) for n in (2, 3, 4)])}
        assert (replies["2"].value, replies["4"].value) == (1.0, 2.0)
        assert replies["2"].failure is None and replies["3"].value is None
        assert replies["3"].failure.strip().endswith("ValueError: 3 is odd")


def test_a_process_that_dies_costs_only_its_task():
    numbers = [*range(0, 20, 2), 13, *range(20, 60, 2)]
    replies = {reply.key: reply for reply in LocalProcesses(2).run(half, [(n, (n,)) for n in numbers])}
    assert sorted(replies) == sorted(numbers)
    assert "worker process died" in replies.pop(13).failure.splitlines()[-1]
    assert {key: reply.value for key, reply in replies.items()} == {n: n / 2 for n in numbers if n != 13}


def test_tasks_are_taken_only_as_workers_become_free():
    for workers in (ThisProcess(), LocalProcesses(2)):
        replies = workers.run(half, ((n, (n,)) for n in itertools.count(0, 2)))  # without end
        assert len({next(replies).key for _ in range(50)}) == 50
        replies.close()


def own_process_after(seconds: float) -> int:
    """A task: sleeps, and tells which process it ran in."""
    time.sleep(seconds)
    return os.getpid()


def test_an_interrupted_pool_stops_its_processes():
    # Both processes answer at once, then start on tasks of ten minutes.
    replies = LocalProcesses(2).run(own_process_after, [(n, (0.2 if n < 4 else 600.0,)) for n in range(8)])
    processes = {next(replies).value for _ in range(4)}
    assert os.getpid() not in processes
    replies.close()
    for _ in range(100):
        if not any(is_running(process) for process in processes):
            return
        time.sleep(0.1)
    pytest.fail(f"still running after 10 s: {processes}")


def is_running(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    return True


# --- Ctrl-C -----------------------------------------------------------------------------------------------

ROOT = Path(__file__).resolve().parents[2]
# The command as it is, but for a line of progress every 0.2 s, not 5 s: the first one is the signal's cue.
COMMAND = """
import analysis.command.progress
analysis.command.progress.SECONDS_BETWEEN_LINES = 0.2
from analysis.command import main
main()
"""


@pytest.mark.parametrize("workers", [1, 2])
def test_ctrl_c_keeps_what_was_computed(tmp_path, workers):
    path = tmp_path / "by the sea.toml"
    path.write_text(SCENARIO_TEXT, encoding="utf-8")
    options = ["--replications", "100000", "--workers", str(workers), "--json", "--per-replication"]
    process = subprocess.Popen(
        [sys.executable, "-c", COMMAND, "simulate", str(path), *options],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, cwd=ROOT, start_new_session=True,
    )  # fmt: skip
    said = []
    while not said or (said[-1] and not said[-1].startswith("simulate: ")):
        said.append(process.stderr.readline())
    os.killpg(process.pid, signal.SIGINT)  # as a terminal does: to the command and to its workers
    out, err = process.communicate(timeout=60)
    assert process.returncode == 130, "".join(said) + err
    document = json.loads(out)
    assert document["interrupted"] is True
    assert 0 < document["replications"] < 100_000
    assert document["failed"] == []
    assert "interrupted" in err and "Traceback" not in err and "Warning" not in err
    # What is kept is sound: the replications are those that an uninterrupted run would have had.
    kept = document["per_replication"]
    assert len(kept) == document["replications"]
    assert document["record_hash"] == hash_records([run["record_hash"] for run in kept])
    last = kept[-1]
    [[again]] = replicate(SCENARIO, [SCENARIO.policy()], [last["replication"]])
    assert (again.record.hash, again.intake_hash) == (last["record_hash"], last["intake_hash"])
