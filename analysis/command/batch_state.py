"""What a batch tells of itself while it runs: a snapshot as one document, and a log with times, both in its folder."""

from __future__ import annotations

import os
import platform
import time
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path
from typing import Any

from analysis.batch import Batch, Piece, Speed, Stock
from analysis.command.deadline import Deadline
from analysis.command.output import to_json
from sim.provenance import now
from sim.replicate import Failure

SNAPSHOT, LOG = "batch.json", "batch.log"
SECONDS_BETWEEN_SNAPSHOTS = 2.0
SHARE_OF_TIME = 0.02  # that snapshots may take
WHY = {
    "time": "the time is over",
    "budget": "the budget of runs is used",
    "interrupted": "it was interrupted",
}
NOT_WRITTEN = {"result": None, "reason": "results are written when the batch ends"}


class State:
    """How far a batch is. command: its command line. plan: its file.

    failures: with the stock whose policies they number. state: running, writing, complete, stopped or failed.
    """

    def __init__(
        self, batch: Batch, folder: Path, deadline: Deadline, *, plan: str, title: str, command: list[str]
    ) -> None:
        self.batch, self.folder, self.deadline = batch, folder, deadline
        self.failures: list[tuple[Stock, Failure]] = []
        self.state, self.why, self.workers = "running", None, 1
        self.results: dict[str, dict[str, Any]] = {}
        self.asked, self.reused = batch.asked, batch.asked - batch.missing
        self.computed = 0
        self._about = {"title": title, "plan": plan, "command": command}
        self._began, self._ended = now(), None
        self._at: tuple[int, Piece] | None = None
        self.speed, self._closed = Speed(), None
        self._next = 0.0
        self.machines: str | None = None

    # ---- what happens ----

    def log(self, text: str) -> None:
        """One line with the time; where the log cannot be written, the runs that can be kept matter more."""
        with suppress(OSError), (self.folder / LOG).open("a", encoding="utf-8") as opened:
            opened.write(f"{now().isoformat(timespec='seconds')} {text}\n")

    def start_work(self, workers: int) -> None:
        """The first round is about to begin."""
        self.workers = workers

    def enter(self, replications: int, piece: Piece) -> None:
        """A round of a part begins."""
        first, self._at = self._at is None, (replications, piece)
        if first:
            self.save()
        self.log(f"{piece.part.name}: up to {min(replications, piece.replications)} replications")

    def settle(self, stock: Stock, runs: int, failure: Failure | None) -> None:
        """A reply has been kept."""
        if failure is None:
            self.computed += runs
        else:
            self.failures.append((stock, failure))
            self.log(f"failed: {failure}")
        self.speed.add(time.monotonic(), runs, stock.seconds(runs))
        if time.monotonic() >= self._next:
            self.save()

    def note(self, machines: str) -> None:
        """How the machines of a cluster do; told from time to time even where nobody answers."""
        self.machines = machines
        if time.monotonic() >= self._next:
            self.save()

    def close(self, state: str, why: str | None) -> None:
        """No more will be run: `state` and why."""
        self.state, self.why, self._at = state, why, None
        self._closed = self._closed or time.monotonic()

    def end(self) -> None:
        """All is written."""
        self._ended = now()
        self.save()

    def save(self) -> None:
        """The snapshot, whole or not at all; seldom enough to cost little."""
        began = time.monotonic()
        half = self.folder / f"{SNAPSHOT}.part"
        with suppress(OSError):  # as in `log`
            half.write_text(to_json(self.document()) + "\n", encoding="utf-8")
            half.replace(self.folder / SNAPSHOT)
        cost = time.monotonic() - began
        self._next = time.monotonic() + max(SECONDS_BETWEEN_SNAPSHOTS, cost / SHARE_OF_TIME)

    # ---- what is told ----

    def document(self) -> dict[str, Any]:
        """The snapshot: times are UTC, `seconds_left` null where nothing can be said, with a reason."""
        moment = (
            self._closed or time.monotonic()
        )  # what is written after the last run says nothing of the pace
        left = self._seconds_left(self.batch.seconds, moment)
        failed = sum(len(one.cells) for _, one in self.failures)
        return self._about | {
            "state": self.state, "ended_because": self.why,
            "began": _told(self._began), "updated": _told(now()), "ended": _told(self._ended),
            "process": {"pid": os.getpid(), "host": platform.node()},
            "bounds": self.deadline.reads, "clock": self.deadline.clock_moved,
            "runs": {
                "asked": self.asked, "reused": self.reused, "computed": self.computed, "failed": failed,
                "missing": self.batch.missing,
            },
            "runs_per_second": self.speed.runs_per_second(moment), "workers": self.workers,
            "machines": self.machines,
            "seconds_left": left, **({} if left is not None else {"reason": "no run has been finished lately"}),
            "seconds_to_deadline": self.deadline.seconds_left,
            "now": None if self._at is None else {
                "part": self._at[1].part.name, "replications": min(self._at[0], self._at[1].replications)
            },
            "results_written": len(self.results), "parts": list(self._parts(moment)),
        }  # fmt: skip

    def _seconds_left(self, work: float, moment: float) -> float | None:
        return self.speed.seconds_for(work, moment, self.workers)

    def _parts(self, moment: float) -> Iterator[dict[str, Any]]:
        for piece in self.batch.pieces:
            missing, part = piece.missing, piece.part
            yield {
                "name": part.name, "analysis": part.analysis, "priority": part.priority,
                "command": ["brimline", *part.arguments],
                "replications": piece.replications, "reached": piece.reached, "complete": missing == 0,
                "missing": missing,
                "seconds_left": self._seconds_left(piece.stock.seconds(missing), moment),
            } | self.results.get(part.name, NOT_WRITTEN)  # fmt: skip


def _told(moment: Any) -> str | None:
    return None if moment is None else moment.isoformat(timespec="seconds")
