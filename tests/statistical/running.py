"""All studies by name; running them here or in worker processes; the table."""

from __future__ import annotations

import json
import time
from collections.abc import Iterator, Sequence
from pathlib import Path

from sim.workers import local_workers
from tests.statistical import intervals, outsider, prices, racing, sets
from tests.statistical.core import LARGE, Bench, Effort, Outcome, Study

STUDIES: list[Study] = [
    *sets.STUDIES, *prices.STUDIES, *intervals.STUDIES, *racing.STUDIES, *outsider.STUDIES
]  # fmt: skip
BY_NAME = {study.name: study for study in STUDIES}


def chosen(parts: Sequence[str]) -> list[Study]:
    """The studies whose names hold any of these parts; all without one."""
    return [study for study in STUDIES if not parts or any(part in study.name for part in parts)]


def run(name: str, bench: Bench) -> Outcome:
    """One study."""
    study, began = BY_NAME[name], time.monotonic()
    figures = tuple(study.run(bench))
    return Outcome(study.name, study.what, study.planted, figures, time.monotonic() - began)


def run_here(name: str, folder: Path, effort: Effort) -> dict:
    """One study in a worker process, which reads the pools that are kept."""
    return run(name, Bench(folder, effort)).to_dict()


def pools(studies: Sequence[Study], effort: Effort) -> list[tuple[str, int]]:
    """The pools that these studies need, the largest of each game."""
    sizes: dict[str, int] = {}
    for study in studies:
        for game, replications in study.needs:
            size = effort.pool if game in LARGE else replications * effort.experiments
            sizes[game] = max(size, sizes.get(game, 0))
    return list(sizes.items())


def outcomes(studies: Sequence[Study], folder: Path, effort: Effort, workers: int) -> Iterator[Outcome]:
    """The outcomes as they come, in any order; RuntimeError with what a study said where one fails."""
    tasks = (((number,), (study.name, folder, effort)) for number, study in enumerate(studies))
    for reply in local_workers(workers).run(run_here, tasks):
        if reply.failure is not None:
            raise RuntimeError(reply.failure)
        yield Outcome.of(reply.value)


def written(outcome: Outcome) -> str:
    """One line of the file of outcomes."""
    return json.dumps(outcome.to_dict(), allow_nan=False)


def lines(outcome: Outcome) -> list[str]:
    """A study's rows of the table."""
    verdict = "pass" if outcome.passed else "FAIL"
    if outcome.planted:
        verdict = "caught" if outcome.passed else "NOT CAUGHT"
    head = [f"{outcome.name:36} {outcome.what:32} {verdict}"]
    return head + [f"    {_figure(one)}" for one in outcome.figures]


def _figure(one) -> str:
    alarm = "" if one.false_alarm is None else f"   false alarm {one.false_alarm:.2g}"
    mark = {None: " ", True: "+", False: "-"}[one.passed]
    return f"{mark} {one.what:56} {one.value:8.4f}   {one.bar}{alarm}"
