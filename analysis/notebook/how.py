"""How a step of a notebook is run, and what is at fault with it."""

from __future__ import annotations

import dataclasses
import numbers
import os
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from analysis.overrides import LIMITS
from sim.errors import Fault, ScenarioError
from sim.wording import nearest, shown

ENGINES = ("compiled", "reference")


@dataclass(frozen=True, kw_only=True)
class How:
    """How a step is run; what is None follows the file, or the size of the job.

    replications: 1 to 1,000,000. seed: of every draw. confidence: of every interval, between 0 and 1. workers: worker
    processes. engine: "compiled" or "reference" (the same numbers). out: a folder whose store keeps every run as it
    finishes, and in which the same step goes on after an interrupt. progress: called with (label, done, total) as runs
    finish.
    """

    replications: int | None = None
    seed: int | None = None
    confidence: float | None = None
    workers: int | None = None
    engine: str | None = None
    out: str | os.PathLike[str] | None = None
    progress: Callable[[str, int, int], Any] | None = None

    @property
    def folder(self) -> Path | None:
        """Where runs are kept; None where they are not."""
        return None if self.out is None else Path(self.out)


def faults_of(how: How) -> list[Fault]:
    """Everything that no step can be run with."""
    faults = []
    for key, (least, most) in LIMITS.items():
        value = getattr(how, key)
        whole = isinstance(value, numbers.Integral) and not isinstance(value, bool)
        if value is not None and not (whole and least <= value <= most):
            rule = f"must be a whole number from {least:,} to {most:,}"
            faults.append(Fault(None, key, rule, f"got {value!r}", "give another number, or leave it out"))
    level = how.confidence
    if level is not None and not (isinstance(level, numbers.Real) and 0 < level < 1):
        rule, remedy = "must be between 0 and 1", "give a share such as 0.95"
        faults.append(Fault(None, "confidence", rule, f"got {level!r}", remedy))
    if how.engine is not None and how.engine not in ENGINES:
        rule = "must be one of compiled, reference"
        faults.append(Fault(None, "engine", rule, f"got {shown(how.engine)}", nearest(how.engine, ENGINES)))
    return [*faults, *folder_faults(how.folder, "out")]


def folder_faults(folder: Path | None, key: str) -> list[Fault]:
    """A folder in which nothing can be kept, before hours are spent on it."""
    if folder is None:
        return []
    above = folder
    while not above.exists() and above != above.parent:
        above = above.parent
    if above.is_dir() and os.access(above, os.W_OK):
        return []
    rule, remedy = "must be a folder that can be written", "choose another folder"
    return [Fault(None, key, rule, f"got {str(folder)!r}", remedy)]


def named(faults: Iterable[Fault], file: str) -> ScenarioError:
    """The error of faults whose keys are options of a command line, which have no dashes here."""
    return ScenarioError(
        (dataclasses.replace(fault, key=fault.key.removeprefix("--")) for fault in faults), file
    )
