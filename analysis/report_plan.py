"""A report plan: which commands a report rests on, so that one command builds it from its scenarios.

A report plan is TOML, `schema = 1`, with one of `[[reports]]` for each page: a name, a scenario, and command lines
without the scenario and without `--out`.
"""

from __future__ import annotations

import shlex
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any

from pydantic import AfterValidator, Field, ValidationError

from analysis.plan import known_schema
from sim.errors import ScenarioError
from sim.scenario.faults import Collector
from sim.scenario.load import read_toml
from sim.scenario.positions import key_lines
from sim.scenario.units import Line
from sim.tables import Row, Table
from sim.wording import nearest, shown

COMMANDS = ("verify", "game", "compare", "ledger", "sweep", "align", "simulate", "exact")
GIVEN = ("--out", "--json", "--help", "-h")  # a plan's own, or of no use in one
ROW = 'name = "valleys"`, `scenario = "valleys.toml"` and `commands = ["verify", "game"]'


class ReportRow(Table):
    """One of `[[reports]]`. name: of its page and of the folder of its results."""

    name: Annotated[
        str, Field(pattern=r"^[\w-]+$", min_length=1, max_length=80, examples=['name = "valleys"'])
    ]
    scenario: Annotated[Line, Field(min_length=1, examples=['scenario = "valleys.toml"'])]
    commands: Annotated[
        tuple[Annotated[Line, Field(min_length=1)], ...],
        Row,
        Field(min_length=1, examples=['commands = ["verify", "game"]']),
    ]


class ReportPlanFile(Table):
    """The whole file."""

    schema_: Annotated[int, Field(alias="schema", examples=["schema = 1"]), AfterValidator(known_schema)]
    title: Annotated[Line, Field(examples=['title = "Gallery (invented)"'])] = ""
    reports: Annotated[
        tuple[ReportRow, ...], Row, Field(min_length=1, examples=[f"[[reports]]` with `{ROW}"])
    ]


@dataclass(frozen=True)
class Step:
    """One command of a report. arguments: its command line, without the program's name and `--out`."""

    name: str
    arguments: tuple[str, ...]

    def line(self, folder: Path) -> list[str]:
        """The command line that leaves its result in `folder`."""
        return [*self.arguments, "--out", str(folder)]


@dataclass(frozen=True)
class PlannedReport:
    """A page and the steps that it rests on, each in a folder by its name below the page's own."""

    name: str
    scenario: Path
    steps: tuple[Step, ...]


def read_report_plan(path: str | Path, check: Callable[[Step], Any]) -> tuple[PlannedReport, ...]:
    """The reports of the plan in a TOML file.

    check: gets every step; its ScenarioErrors become faults of the plan.
    Raises ScenarioError with every fault of the plan and of its scenarios.
    """
    text, data = read_toml(path)
    collector = Collector(data, key_lines(text))
    try:
        ReportPlanFile.model_validate(data)
    except ValidationError as error:
        collector.add_all(error, ReportPlanFile)
    planned = tuple(_planned(collector, Path(path).parent, check))
    if collector.faults:
        raise ScenarioError(sorted(collector.faults, key=lambda one: (one.line or 0, one.key)), str(path))
    return planned


def _planned(collector: Collector, folder: Path, check: Callable[[Step], Any]) -> Iterator[PlannedReport]:
    """The sound reports; faults go to the entries that are behind them."""
    rows = collector.value(("reports",))
    seen: set[str] = set()
    for place in range(len(rows) if isinstance(rows, list) else 0):
        path = ("reports", place)
        if not collector.readable(path):
            continue
        row = ReportRow.model_validate(collector.value(path))
        if row.name.casefold() in seen:
            remedy = "give each report a name of its own"
            collector.add((*path, "name"), "must not be given twice", f"got {shown(row.name)}", remedy)
        seen.add(row.name.casefold())
        yield PlannedReport(
            row.name, folder / row.scenario, tuple(_steps(collector, path, row, folder, check))
        )


def _steps(
    collector: Collector, path: tuple[Any, ...], row: ReportRow, folder: Path, check: Callable[[Step], Any]
) -> Iterator[Step]:
    taken: list[str] = []
    for place, line in enumerate(row.commands):
        where = (*path, "commands", place)
        words = _words(collector, where, line)
        if not words:
            continue
        taken.append(words[0])
        again = taken.count(words[0])
        step = Step(f"{words[0]}-{again}" if again > 1 else words[0],
                    (words[0], str(folder / row.scenario), *words[1:]))  # fmt: skip
        try:
            check(step)
        except ScenarioError as error:
            for fault in error.faults:
                at = f"{error.file}:{fault.line}: " if fault.line is not None else ""
                of_file = bool(error.file) and not fault.key.startswith("--")
                collector.add((*path, "scenario") if of_file else where, f"{at}{fault.key}: {fault.rule}",
                              fault.value, fault.remedy)  # fmt: skip
        yield step


def _words(collector: Collector, where: tuple[Any, ...], line: str) -> list[str]:
    """A command line's words; none where it cannot be one."""
    try:
        words = shlex.split(line)
    except ValueError as error:
        collector.add(where, "must be a command line", str(error).lower(), "close every quotation mark")
        return []
    if not words or words[0] not in COMMANDS:
        rule, got = f"must begin with one of {', '.join(COMMANDS)}", f"got {shown(line)}"
        collector.add(where, rule, got, nearest(words[0] if words else "", COMMANDS))
        return []
    given = [word for word in words if word.split("=")[0] in GIVEN]
    if given:
        collector.add(where, "must leave out what the plan gives", f"got {shown(given[0])}", "leave it out")
        return []
    return words
