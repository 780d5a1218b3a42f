"""Worker processes survive what can befall them: killers, stops, the parent's death; real processes, real signals."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest

from sim.workers import THREADS, LocalProcesses, stop_processes

ROOT = Path(__file__).resolve().parents[2]
POSIX = pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")


def hurt(number: int) -> float:
    """A task: 100 and above kill its process, 90 to 99 stop it, any other sleeps a moment and is halved."""
    if number >= 100:
        os.kill(os.getpid(), signal.SIGKILL)
    if number >= 90:
        os.kill(os.getpid(), signal.SIGSTOP)
    time.sleep(0.01)
    return number / 2


def replies(numbers, **options):
    found = list(LocalProcesses(2, **options).run(hurt, [(n, (n,)) for n in numbers]))
    assert sorted(reply.key for reply in found) == sorted(numbers), "one reply a task"
    return {reply.key: reply for reply in found}


@POSIX
@pytest.mark.parametrize(
    "numbers",
    [
        [100, *range(9), 101, 102, *range(9, 20), 103],  # the first task, two at once, the last
        [100, 101],  # nothing else
    ],
)
def test_killers_are_found_out_and_everything_else_is_done(numbers):
    found = replies(numbers)
    for number, reply in found.items():
        if number < 90:
            assert (reply.value, reply.failure) == (number / 2, None)
        else:
            assert "worker process died" in reply.failure and "SIGKILL" in reply.failure


@POSIX
def test_a_killer_is_run_twice_and_no_other_task_more_than_needed(tmp_path):
    """Each task leaves a mark a run: what waited behind a killer had not begun."""
    numbers = [*range(10), 100, *range(10, 20)]
    list(LocalProcesses(2).run(marked, [(n, (n, str(tmp_path))) for n in numbers]))
    runs = {n: len(list(tmp_path.glob(f"{n}-*"))) for n in numbers}
    assert runs.pop(100) == 2
    assert set(runs.values()) == {1}


def marked(number: int, folder: str) -> None:
    (Path(folder) / f"{number}-{time.monotonic_ns()}").touch()
    hurt(number)


def once_in(folder: str, number: int, what: int) -> int:
    """A task: does `what` to its process the first time only."""
    mark = Path(folder) / str(number)
    if not mark.exists():
        mark.touch()
        os.kill(os.getpid(), what)
    return number


@POSIX
@pytest.mark.parametrize("what", [signal.SIGKILL, signal.SIGSTOP])
def test_a_worker_that_is_killed_or_stopped_once_costs_nothing(tmp_path, what):
    tasks = [(n, (str(tmp_path), n, what if n == 3 else signal.SIGCONT)) for n in range(8)]
    found = list(LocalProcesses(2, patience=1.0).run(once_in, tasks))
    assert sorted(reply.value for reply in found) == list(range(8))


@POSIX
def test_a_task_that_always_stops_its_worker_is_told_and_the_rest_is_done():
    found = replies([*range(6), 90, *range(6, 12)], patience=1.0)
    assert "gave no answer and did not compute" in found.pop(90).failure
    assert all(reply.value == key / 2 for key, reply in found.items())


def busy(seconds: float) -> bool:
    until = time.monotonic() + seconds
    while time.monotonic() < until:
        pass
    return True


@pytest.mark.skipif(
    not Path("/proc/self/stat").exists(), reason="only here the system tells of a process's work"
)
def test_a_long_task_that_computes_is_left_alone():
    found = list(LocalProcesses(2, patience=0.5).run(busy, [(0, (3.0,)), (1, (0.01,))]))
    assert all(reply.value for reply in found)


def test_patience_follows_the_longest_task_and_is_never_short():
    from sim.workers import _Crew

    crew = _Crew(hurt, [], 0, None)
    assert crew._limit == 60
    crew._longest = 10.0
    assert crew._limit == 200


def threads() -> int:
    folder = Path("/proc/self/task")
    return len(list(folder.iterdir())) if folder.exists() else 0


def environment() -> tuple[dict[str, str | None], int]:
    """A task: what libraries read, and the threads that come with linear algebra and a product of large matrices."""
    before = threads()
    import numpy as np

    np.ones((800, 800)) @ np.ones((800, 800))
    return {name: os.environ.get(name) for name in THREADS}, threads() - before


def test_a_worker_has_one_thread_for_linear_algebra(monkeypatch):
    for name in THREADS:
        monkeypatch.setenv(name, "4")  # whatever the parent has
    stop_processes()
    [one] = LocalProcesses(1).run(environment, [(0, ())])
    values, more = one.value
    assert values == dict.fromkeys(THREADS, "1")
    assert more == 0
    text = "from tests.sim.test_workers import environment; print(environment()[1])"
    several = subprocess.run(
        [sys.executable, "-c", text], env=os.environ | dict.fromkeys(THREADS, "4"), cwd=ROOT, capture_output=True,
        text=True, check=True,
    )  # fmt: skip
    if int(several.stdout) == 0:
        pytest.skip(
            "with four threads allowed there is one: the count of threads shows nothing on this machine"
        )


def test_a_task_that_cannot_be_sent_fails_alone():
    tasks = [(0, (0,)), (1, (threading.Lock(),)), (2, (2,))]
    found = {reply.key: reply for reply in LocalProcesses(2).run(hurt, tasks)}
    assert "pickle" in found[1].failure and (found[0].value, found[2].value) == (0, 1)


ORPHANS = """
import os, time
from sim.workers import LocalProcesses
def pid(seconds):
    time.sleep(seconds)
    return os.getpid()
for reply in LocalProcesses(2).run(pid, [(n, (0.2 if n < 2 else 600.0,)) for n in range(4)]):
    print(reply.value, flush=True)
"""


@POSIX
def test_workers_end_with_a_parent_that_is_killed():
    with subprocess.Popen(
        [sys.executable, "-c", ORPHANS], cwd=ROOT, stdout=subprocess.PIPE, text=True
    ) as parent:
        workers = {int(parent.stdout.readline()) for _ in range(2)}
        parent.kill()
    until = time.monotonic() + 30
    while any(map(is_running, workers)):
        assert time.monotonic() < until, "still running after 30 s"
        time.sleep(0.1)


def is_running(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    state = Path(f"/proc/{process}/stat")
    return not state.exists() or state.read_text().rpartition(")")[2].split()[0] != "Z"
