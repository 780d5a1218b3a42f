"""Where tasks run: in this process or in local worker processes, behind one small interface.

A pool takes a function and addressed tasks and yields replies as they finish, in any order. A task that
raises costs only itself: its reply carries the traceback. Other machines stand behind the same interface
(`sim.cluster`).
"""

from __future__ import annotations

import atexit
import os
import signal
import sys
import threading
import time
import traceback
from collections import deque
from collections.abc import Callable, Hashable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, Future, wait
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from typing import Any, NamedTuple, Protocol

# A worker that is stopped or stuck is told by that, for it neither answers nor uses the processor.
LEAST_PATIENCE_SECONDS, PATIENCE_TASKS = 60.0, 20
LONG_TASK_SECONDS = 5.0
SUSPECTS_PER_PROCESS = 2  # so many wait for their trial at most, before all else rests
SECONDS_BETWEEN_LOOKS = 2.0
# What the libraries of linear algebra and numba read, when they are loaded.
THREADS = (
    "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS", "VECLIB_MAXIMUM_THREADS",
    "NUMBA_NUM_THREADS", "NUMEXPR_NUM_THREADS",
)  # fmt: skip


@dataclass(frozen=True)
class Reply:
    """What became of one task. `value` where it succeeded, else `failure`, the traceback as text.

    seconds: that it took where it ran; 0 where that is not known.
    fingerprint: of the machine that ran it, as text, where it may be another one.
    handed_back: it was not run, for no machine of the bits that its binding asked for came.
    """

    key: Hashable
    value: Any = None
    failure: str | None = None
    seconds: float = 0.0
    fingerprint: str | None = None
    handed_back: bool = False


Task = tuple[Hashable, tuple]


class Binding(NamedTuple):
    """What a task belongs to, where workers may differ in bits.

    group: its tasks must all come from one kind of bits. weight, size: how much of the group the task is, and how much
    there is in all. bits: which ones, where that is settled.
    """

    group: Hashable
    weight: int = 1
    size: int = 1
    bits: str | None = None


class Workers(Protocol):
    """Runs tasks somewhere."""

    def run(self, function: Callable[..., Any], tasks: Iterable[Task]) -> Iterator[Reply]:
        """Replies to `function(*arguments)` for every (key, arguments), as they finish."""
        ...


class ThisProcess:
    """One task after the other, here."""

    count = 1

    def run(self, function: Callable[..., Any], tasks: Iterable[Task]) -> Iterator[Reply]:
        """See Workers."""
        for key, arguments in tasks:
            yield _guarded(function, key, arguments)


class LocalProcesses:
    """loky's processes on this machine, each with one BLAS thread and a short line of tasks of its own.

    Tasks are taken from the iterable as workers become free. A worker that dies, or that for `patience` seconds
    (default: max(60, 20 times the longest task so far)) neither answers nor computes, costs only the task that it
    was at: that one is run again once all else rests, and reported as failed if it fells its worker once more.
    """

    def __init__(self, count: int, *, patience: float | None = None) -> None:
        self.count = max(1, count)
        self._patience = patience

    def run(self, function: Callable[..., Any], tasks: Iterable[Task]) -> Iterator[Reply]:
        """See Workers."""
        crew, finished = _Crew(function, tasks, self.count, self._patience), False
        try:
            while crew.hand_out():
                yield from crew.answers()
            finished = True
        finally:
            crew.dismiss(kill=not finished)  # interrupted, or nobody wants the rest


class _Crew:
    """The processes of one run, and the tasks that are under way, returned, or suspected.

    A suspect was under way when its worker was lost; a task behind it in the line is only returned. A suspect is on
    trial once every line is empty, so that neither takes others down nor runs short of memory because of them.
    """

    def __init__(
        self, function: Callable[..., Any], tasks: Iterable[Task], count: int, patience: float | None
    ) -> None:
        self._function, self._tasks, self._patience = function, iter(tasks), patience
        self._processes = [_hired() for _ in range(count)]
        self._returned: deque[Task] = deque()
        self._suspects: deque[Task] = deque()
        self._on_trial = False
        self._longest = 0.0
        self._looked = time.monotonic()

    def hand_out(self) -> bool:
        """Fills the lines; False where nothing is left to be done."""
        if not self._on_trial and len(self._suspects) < SUSPECTS_PER_PROCESS * len(self._processes):
            for length in range(1, self._line + 1):
                for process in self._processes:
                    if len(process.line) < length and (task := self._next()) is not None:
                        process.give(self._function, task)
        if self._suspects and not self._busy:
            self._on_trial = True
            self._processes[0].give(self._function, self._suspects.popleft())
        return self._busy

    @property
    def _busy(self) -> bool:
        return any(process.line for process in self._processes)

    @property
    def _line(self) -> int:
        """A second task waits at every worker, unless tasks are so long that it could wait in vain."""
        return 2 if 0 < self._longest < LONG_TASK_SECONDS else 1

    def _next(self) -> Task | None:
        return self._returned.popleft() if self._returned else next(self._tasks, None)

    def answers(self) -> Iterator[Reply]:
        """The replies that are there, after a wait for the first of them; lost workers are replaced."""
        tick = min(1.0, self._limit / 5)
        wait(
            [future for process in self._processes for _, future in process.line],
            timeout=tick,
            return_when=FIRST_COMPLETED,
        )
        now = time.monotonic()
        elapsed, self._looked = min(now - self._looked, 2 * tick), now  # no more, if this process was stopped
        for place, process in enumerate(self._processes):
            process.watch(elapsed, self._limit)
            yield from self._settled(place, process)

    @property
    def _limit(self) -> float:
        """Seconds for which a worker may neither answer nor compute."""
        return self._patience or max(LEAST_PATIENCE_SECONDS, PATIENCE_TASKS * self._longest)

    def _settled(self, place: int, process: _Process) -> Iterator[Reply]:
        while process.line and process.line[0][1].done():
            task, future = process.line.popleft()
            process.quiet = 0.0
            error = future.exception()
            if isinstance(error, BrokenExecutor):
                yield from self._lost(place, task, f"{error}\nthe worker process died")
                return
            self._on_trial = False
            reply = future.result() if error is None else Reply(task[0], failure=_as_text(error))
            self._longest = max(self._longest, reply.seconds)
            yield reply
        if process.line and process.quiet > self._limit:
            task, _ = process.line.popleft()
            said = f"the worker process gave no answer and did not compute for {process.quiet:.0f} s"
            yield from self._lost(place, task, said)

    def _lost(self, place: int, task: Task, said: str) -> Iterator[Reply]:
        """A new worker in the place of one that is lost; its task is suspected, or found guilty."""
        lost = self._processes[place]
        self._returned.extend(waiting for waiting, _ in lost.line)
        lost.dismiss()
        self._processes[place] = _hired()
        if self._on_trial:
            self._on_trial = False
            yield Reply(task[0], failure=f"{said}, with no other task beside this one (out of memory?)")
        else:
            self._suspects.append(task)

    def dismiss(self, *, kill: bool) -> None:
        """Ends the processes, or keeps them for the next run."""
        for process in self._processes:
            if kill:
                process.dismiss()
            else:
                _resting.append(process)


class _Process:
    """One worker process: a pool of one, so that nothing else dies with it.

    line: the tasks given and not settled, in order. quiet: seconds without an answer or a sign of work.
    """

    def __init__(self) -> None:
        from joblib.externals.loky.process_executor import ProcessPoolExecutor

        self._pool = ProcessPoolExecutor(
            1, initializer=_begin, initargs=(os.getpid(),), env=dict.fromkeys(THREADS, "1")
        )
        with _interrupts_ignored():  # or it would tell of Ctrl-C in a traceback while it imports
            self._pool.submit(int)  # starts it
        self.line: deque[tuple[Task, Future]] = deque()
        self.quiet = 0.0
        self._used: float | None = None

    def give(self, function: Callable[..., Any], task: Task) -> None:
        """One more task in the line."""
        try:
            future = self._pool.submit(_guarded, function, *task)
        except RuntimeError as error:  # it died while it had nothing to do
            future = Future()
            future.set_exception(BrokenExecutor(str(error)))
        self.line.append((task, future))

    def watch(self, elapsed: float, limit: float) -> None:
        """Counts quiet seconds; work of the processor ends the quiet, where the system tells of it."""
        self.quiet = self.quiet + elapsed if self.line else 0.0
        if self.quiet < limit / 4:
            return
        used = self._processor_seconds()
        if used != self._used:
            self._used, self.quiet = used, 0.0

    def _processor_seconds(self) -> float | None:
        try:
            [number] = self._numbers()
            with open(f"/proc/{number}/stat", encoding="utf-8") as opened:
                fields = opened.read().rpartition(")")[2].split()
        except (OSError, ValueError):
            return None
        return float(fields[11]) + float(fields[12])  # of user and system, in ticks

    def _numbers(self) -> list[int]:
        """The one process's number; none where it has ended."""
        return list(self._pool._processes or ())

    def dismiss(self) -> None:
        """Ends the process at once, whatever it is doing."""
        if sys.platform == "win32":
            self._pool.shutdown(wait=False, kill_workers=True)
            return
        for number in self._numbers():  # the pool then finds itself broken, and ends in good order
            with suppress(ProcessLookupError):
                os.kill(number, signal.SIGKILL)


_resting: list[_Process] = []  # processes without a task, kept for the next run
atexit.register(_resting.clear)  # loky has ended them by then


def _hired() -> _Process:
    if not _resting:
        return _Process()
    return _resting.pop()


def stop_processes() -> None:
    """Stops the worker processes that rest."""
    while _resting:
        _resting.pop().dismiss()


def _begin(parent: int) -> None:
    """In a new worker: Ctrl-C and a closed terminal are the parent's to handle, and it ends with the parent."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    if hasattr(signal, "SIGHUP"):
        signal.signal(signal.SIGHUP, signal.SIG_IGN)
    if hasattr(os, "getppid") and sys.platform != "win32":
        threading.Thread(target=_end_with, args=(parent,), daemon=True).start()


def _end_with(parent: int) -> None:
    while os.getppid() == parent:
        time.sleep(SECONDS_BETWEEN_LOOKS)
    os._exit(1)


def _as_text(error: BaseException) -> str:
    return "".join(traceback.format_exception(error))


@contextmanager
def _interrupts_ignored() -> Iterator[None]:
    """Ctrl-C is ignored for the moment in which processes start, and by those processes for good."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)


def _guarded(function: Callable[..., Any], key: Hashable, arguments: tuple) -> Reply:
    started = time.perf_counter()
    try:
        value = function(*arguments)
    except Exception:
        return Reply(key, failure=traceback.format_exc())
    return Reply(key, value, seconds=time.perf_counter() - started)


def available_cores() -> int:
    """The cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def local_workers(count: int) -> Workers:
    """This process for one worker, local processes for more."""
    return ThisProcess() if count == 1 else LocalProcesses(count)
