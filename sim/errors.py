"""What can go wrong, as a small tree: the description, the run, or the stored results are at fault."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


class BrimlineError(Exception):
    """Base of every error that this program raises on purpose."""

    def _render_traceback_(self) -> list[str]:
        """What a notebook shows in the place of a traceback: what is at fault, a line each."""
        return [f"{type(self).__name__}:", *str(self).splitlines()]


@dataclass(frozen=True, order=True)
class Fault:
    """One fault of a scenario, its data or a command line.

    line: line of the file, from 1; None where the fault has no place in a file.
    key: what is at fault, rows by their names (`units.Norbeck.beds`).
    rule, value, remedy: what must hold, what stands there, and what to do.
    """

    line: int | None
    key: str
    rule: str
    value: str
    remedy: str

    def located(self, file: str) -> str:
        """The fault as one line, `FILE:LINE: KEY: rule, value, remedy`."""
        place = f"{file}:{self.line}: " if self.line is not None else ""
        return f"{place}{self.key}: {self.rule}, {self.value}, {self.remedy}"


class ScenarioError(BrimlineError):
    """A scenario, its data or an override is at fault; holds every fault found."""

    def __init__(self, faults: Iterable[Fault], file: str = "") -> None:
        self.faults = tuple(faults)
        self.file = file
        super().__init__("\n".join(fault.located(file) for fault in self.faults))

    def __reduce__(self):  # exceptions with more than one argument do not unpickle by themselves
        return type(self), (self.faults, self.file)


class RunError(BrimlineError):
    """A computation failed although its input was sound."""


class StoreError(BrimlineError):
    """A result folder cannot be read or written."""
