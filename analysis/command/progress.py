"""Progress with time left: a bar on a terminal, plain lines otherwise, on standard error."""

from __future__ import annotations

import os
import signal
import stat
import sys
import time
from collections.abc import Iterator
from contextlib import suppress
from types import TracebackType
from typing import Any, Protocol

from sim.wording import about as about
from sim.wording import duration as duration

SECONDS_BETWEEN_LINES = 5.0


class Progress(Protocol):
    """Counts what is done of a known total."""

    def advance(self, count: int = 1) -> None:
        """`count` more are done."""
        ...

    def note(self, text: str) -> None:
        """Who is at work, shown beside what is done."""
        ...


class _Lines:
    """A plain line every few seconds."""

    def __init__(self, label: str, total: int, unit: str) -> None:
        self._label, self._total, self._unit = label, total, unit
        self._done = 0
        self._note = ""
        self._started = self._last = time.monotonic()

    def __enter__(self) -> _Lines:
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def note(self, text: str) -> None:
        self._note = text
        self.advance(0)

    def advance(self, count: int = 1) -> None:
        self._done += count
        now = time.monotonic()
        if now - self._last >= SECONDS_BETWEEN_LINES:
            self._last = now
            if self._note:
                print(f"{self._label}: {self._note}", file=sys.stderr, flush=True)
            if not self._done:
                return
            early = self._done < 0.01 * self._total  # one reply tells little of the rest
            left = (now - self._started) / self._done * (self._total - self._done)
            when = "time left not known yet" if early else f"{about(left)} left"
            done = f"{self._done} of {self._total} {self._unit}, {100 * self._done // self._total} %"
            print(f"{self._label}: {done}, {when}", file=sys.stderr, flush=True)


class _Bar:
    """rich's bar."""

    def __init__(self, label: str, total: int, unit: str) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
        from rich.progress import Progress as RichProgress
        from rich.text import Text

        class WithNote(RichProgress):
            """The bar, and below it who is at work."""

            said = ""

            def get_renderables(self) -> Iterator[Any]:
                yield from super().get_renderables()
                if self.said:
                    yield Text(self.said)

        columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TextColumn(unit))
        self._bar = WithNote(*columns, TimeRemainingColumn(), console=Console(stderr=True), transient=True)
        self._task = self._bar.add_task(label, total=total)

    def __enter__(self) -> _Bar:
        self._bar.__enter__()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._bar.__exit__(kind, error, trace)

    def advance(self, count: int = 1) -> None:
        self._bar.advance(self._task, count)

    def note(self, text: str) -> None:
        self._bar.said = text


def progress(label: str, total: int, unit: str) -> Any:
    """A context manager whose `advance(count)` tells how far the work is."""
    return (_Bar if sys.stderr.isatty() else _Lines)(label, total, unit)


_HANG_UP = getattr(signal, "SIGHUP", None)  # the terminal was closed
_ENDING = tuple(one for one in (signal.SIGINT, signal.SIGTERM, _HANG_UP) if one is not None)


class until_interrupted:  # noqa: N801 - reads as a function in a `with` and a `for`
    """The replies as they come; Ctrl-C (or a polite request to end, or a terminal that is closed) ends them, and
    `interrupted` tells that it did.

    Inside the `with` block a signal can break only the wait for the next reply, never the handling of one, so
    nothing that has arrived is lost.
    """

    def __init__(self, replies: Iterator[Any]) -> None:
        self._replies = replies
        self._waiting = False
        self.interrupted = False

    def __enter__(self) -> until_interrupted:
        heard = [
            one for one in _ENDING if one != _HANG_UP or signal.getsignal(one) != signal.SIG_IGN
        ]  # nohup
        self._before = {one: signal.signal(one, self._on_interrupt) for one in heard}
        return self

    def __exit__(self, *_: object) -> None:
        for one, handler in self._before.items():
            if signal.getsignal(one) != signal.SIG_IGN:  # `_leave_terminal`
                signal.signal(one, handler)
        self._replies.close()  # type: ignore[attr-defined] - after an error in handling a reply

    def __iter__(self) -> Iterator[Any]:
        return self

    def __next__(self) -> Any:
        if self.interrupted:
            self._stop()
        self._waiting = True
        try:
            return next(self._replies)
        except KeyboardInterrupt:
            self.interrupted = True
            self._stop()
        finally:
            self._waiting = False

    def _on_interrupt(self, number: int, _: object) -> None:
        self.interrupted = True
        if number == _HANG_UP:
            _leave_terminal()
        if self._waiting:
            raise KeyboardInterrupt

    def _stop(self) -> None:
        self._replies.close()  # type: ignore[attr-defined]
        raise StopIteration


def _leave_terminal() -> None:
    """Nothing more can be said there; a second hang-up (the shell's) must not break off what is being written."""
    signal.signal(_HANG_UP, signal.SIG_IGN)  # type: ignore[arg-type]
    nowhere = os.open(os.devnull, os.O_WRONLY)
    for number in (1, 2):
        with suppress(OSError):
            if stat.S_ISCHR(os.fstat(number).st_mode):
                os.dup2(nowhere, number)
    os.close(nowhere)
