"""The engines by name, loaded when they are needed, and the choice between them.

Both give the same records to the last bit; the reference engine is the specification, the compiled one the fast
one. Without a wish, a small job goes to the reference engine where loading or compiling the other would cost more
than it saves.
"""

from __future__ import annotations

import importlib
import importlib.util
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

from sim.intake import Intake
from sim.lowering import IntakePlan, Network, Rules
from sim.record import Record
from sim.trace import Trace

ENGINES = {"compiled": "sim.compiled", "reference": "sim.reference"}
LOADING_SECONDS = 1.5
COMPILING_SECONDS = 8.0


class Engine(Protocol):
    """What an engine can do."""

    def run(self, network: Network, rules: Rules, intake: Intake, *, trace: Trace | None = None) -> Record:
        """One replication under one policy."""
        ...

    def run_table(self, network: Network, rules: Sequence[Rules], intake: Intake) -> list[Record]:
        """One replication under every policy."""
        ...

    def warm(self, network: Network, rules: Sequence[Rules], plan: IntakePlan) -> None:
        """Everything that should happen once, before workers start."""
        ...


@dataclass(frozen=True)
class Choice:
    """An engine and why it was chosen."""

    name: str
    reason: str


def load(name: str) -> Engine:
    """The engine of that name; KeyError where there is none."""
    return importlib.import_module(ENGINES[name])  # type: ignore[return-value]


def choose(asked: str | None, reference_seconds: float) -> Choice:
    """The engine for a job that would take the reference engine so long, unless one was asked for."""
    if asked is not None:
        return Choice(asked, "asked for")
    if importlib.util.find_spec("numba") is None:
        return Choice("reference", "numba, which the compiled engine needs, is not installed")
    if reference_seconds < LOADING_SECONDS:
        return Choice("reference", "a small job: loading the compiled engine would cost more than running")
    if reference_seconds < COMPILING_SECONDS and not is_compiled():
        return Choice("reference", "a small job: compiling the compiled engine would cost more than running")
    return Choice("compiled", "the faster one for this job")


def is_compiled() -> bool:
    """Whether an earlier run has left the compiled engine's kernels on this machine."""
    from sim.compiled import cache

    return cache.is_kept()
