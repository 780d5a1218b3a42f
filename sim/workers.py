"""Where tasks run: in this process or in local worker processes, behind one small interface.

A pool takes a function and addressed tasks and yields replies as they finish, in any order. A task that
raises costs only itself: its reply carries the traceback. Other machines stand behind the same interface
(`sim.cluster`).
"""

from __future__ import annotations

import os
import signal
import threading
import traceback
import warnings
from collections.abc import Callable, Hashable, Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any, NamedTuple, Protocol


@dataclass(frozen=True)
class Reply:
    """What became of one task. `value` where it succeeded, else `failure`, the traceback as text.

    fingerprint: of the machine that ran it, as text, where it may be another one.
    """

    key: Hashable
    value: Any = None
    failure: str | None = None
    fingerprint: str | None = None


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
    """joblib's loky processes on this machine.

    Tasks are taken from the iterable as workers become free. A worker that dies takes down the tasks then
    under way. Each of those is run again alone, and reported as failed if its worker dies once more; all
    other tasks go on.
    """

    def __init__(self, count: int) -> None:
        self.count = max(2, count)  # with one, joblib would run the tasks in this process

    def run(self, function: Callable[..., Any], tasks: Iterable[Task]) -> Iterator[Reply]:
        """See Workers."""
        from joblib.externals.loky.process_executor import TerminatedWorkerError

        waiting, under_way = iter(tasks), {}

        def handed_out() -> Iterator[Task]:
            for key, arguments in waiting:
                under_way[key] = arguments
                yield key, arguments

        while True:
            try:
                for reply in self._replies(function, handed_out()):
                    del under_way[reply.key]
                    yield reply
                return
            except TerminatedWorkerError:
                stop_processes()
            for key in list(under_way):
                yield self._alone(function, key, under_way.pop(key))

    def _alone(self, function: Callable[..., Any], key: Hashable, arguments: tuple) -> Reply:
        from joblib.externals.loky.process_executor import TerminatedWorkerError

        try:
            [reply] = self._replies(function, [(key, arguments)])
            return reply
        except TerminatedWorkerError as error:
            stop_processes()
            said = "the worker process died, with no other task beside this one (out of memory?)"
            return Reply(key, failure=f"{error}\n{said}")

    def _replies(self, function: Callable[..., Any], tasks: Iterable[Task]) -> Iterator[Reply]:
        from joblib import Parallel, delayed

        pool = Parallel(n_jobs=self.count, backend="loky", batch_size=1, return_as="generator_unordered")
        with _interrupts_ignored():  # or they would tell of it in tracebacks while they import
            replies = pool(delayed(_in_worker)(function, key, arguments) for key, arguments in tasks)
        finished = False
        try:
            for reply in replies:  # noqa: UP028 - `yield from` would close joblib's generator with a warning
                yield reply
            finished = True
        finally:
            if not finished:  # interrupted, or nobody wants the rest
                with warnings.catch_warnings():
                    warnings.simplefilter("ignore")  # joblib's, that tasks were cancelled
                    replies.close()
                stop_processes()


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


def stop_processes() -> None:
    """Stops the local worker processes at once, whatever they are doing."""
    from joblib.externals.loky import get_reusable_executor

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        get_reusable_executor().shutdown(wait=False, kill_workers=True)


def _in_worker(function: Callable[..., Any], key: Hashable, arguments: tuple) -> Reply:
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C is the parent's to handle
    return _guarded(function, key, arguments)


def _guarded(function: Callable[..., Any], key: Hashable, arguments: tuple) -> Reply:
    try:
        return Reply(key, function(*arguments))
    except Exception:
        return Reply(key, failure=traceback.format_exc())


def available_cores() -> int:
    """The cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def local_workers(count: int) -> Workers:
    """This process for one worker, local processes for more."""
    return ThisProcess() if count == 1 else LocalProcesses(count)
