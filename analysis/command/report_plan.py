"""Running a report plan: each command that its reports rest on, unless its result is there already."""

from __future__ import annotations

import hashlib
import io
import json
from collections.abc import Iterator, Sequence
from contextlib import redirect_stdout
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import click

from analysis.command.entry import AT_FAULT, DONE, INTERRUPTED, Interrupted, run, say
from analysis.report_plan import PlannedReport, Step, read_report_plan
from sim.errors import Fault, RunError, ScenarioError


@dataclass(frozen=True)
class Built:
    """A report's results. failed: commands that ended with status 1, such as a verification that disagrees."""

    name: str
    folders: tuple[Path, ...]
    failed: tuple[str, ...]


def build(plan: Path, folder: Path) -> Iterator[Built]:
    """Runs what is missing, report by report.

    Raises ScenarioError with every fault before anything runs, RunError where a command leaves no result, Interrupted.
    """
    planned = read_report_plan(plan, _check)
    whole, number = sum(len(one.steps) for one in planned), 0
    for report in planned:
        failed = []
        for step in report.steps:
            number += 1
            at = folder / report.name / step.name
            if _run(step, report, at, f"{number} of {whole}") != DONE:
                failed.append(step.name)
        yield Built(
            report.name, tuple(folder / report.name / one.name for one in report.steps), tuple(failed)
        )


def _check(step: Step) -> None:
    """ScenarioError where the command would refuse its scenario or its options before running."""
    from analysis.command.entry import brimline
    from sim.scenario import read_scenario

    name, scenario, *options = step.arguments
    read_scenario(scenario)
    try:
        brimline.get_command(None, name).make_context(name, [scenario, *options])  # type: ignore[arg-type]
    except click.UsageError as error:
        fault = Fault(
            None, f"brimline {name}", "must be a valid use", error.format_message(), "see its --help"
        )
        raise ScenarioError([fault]) from None


def _run(step: Step, report: PlannedReport, folder: Path, which: str) -> int:
    """Runs one command unless its result is there; its status."""
    line = step.line(folder)
    said = f"{which}: {' '.join(step.arguments)}"
    if _is_there(line, report.scenario, folder) and not _is_being_changed():
        say(f"{said} (its result is there)")
        return DONE
    say(said)
    with redirect_stdout(io.StringIO()):
        status = run(line)
    if status == INTERRUPTED:
        raise Interrupted
    if status == AT_FAULT or not _is_there(line, report.scenario, folder):
        raise RunError(f"`brimline {' '.join(line)}` left no result: see above")
    return status


def _is_there(line: Sequence[str], scenario: Path, folder: Path) -> bool:
    """Whether a whole result of this very command, scenario and program stands in the folder."""
    from sim.provenance import program
    from sim.scenario import read_scenario

    result, origin = (_read(folder / name) for name in ("result.json", "provenance.json"))
    if result is None or origin is None or result.get("interrupted"):
        return False
    source = read_scenario(scenario).source
    expected = {
        "command": ["brimline", *line],
        "program": program(),
    }
    text = {"sha256": hashlib.sha256(source.text.encode()).hexdigest(), "data_sha256": dict(source.data)}
    kept = origin.get("scenario", {})
    return all(origin.get(key) == value for key, value in expected.items()) and all(
        kept.get(key) == value for key, value in text.items()
    )


def _is_being_changed() -> bool:
    """Whether the program runs from a checkout with changes that its commit does not tell of."""
    from sim.provenance import program

    return (program()["commit"] or "").endswith("+")


def _read(file: Path) -> Any:
    try:
        found = json.loads(file.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    return found if isinstance(found, dict) else None
