"""Writing the report to a file: whole or not at all, and never in a result's place."""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from pathlib import Path

from analysis.report.contents import Report, report_of
from analysis.report.markdown import to_markdown
from analysis.report.page import to_html
from analysis.report.reading import Result, read_results
from sim.errors import Fault, ScenarioError

HTML, MARKDOWN = "html", "md"
NOT_TO_BE_REPLACED = ("result.json", "provenance.json", "runs.sqlite")


def form_of(file: Path | None) -> str:
    """The form that a file's name asks for."""
    return MARKDOWN if file is not None and file.suffix.lower() in (".md", ".markdown") else HTML


def written(
    folders: Sequence[Path], file: Path, *, form: str | None = None, also: Sequence[Path] = (), option: str = "--out"
) -> tuple[list[Result], Report]:  # fmt: skip
    """Reads the folders and writes their report; returns the results and the report.

    form: else by the file's name. also: further files that are to be written later. Raises ScenarioError with every
    fault of the folders and the files; option: what a file is called in it.
    """
    faults = [fault for one in (file, *also) for fault in file_faults(one, folders, option)]
    try:
        read = read_results(folders)
    except ScenarioError as error:
        raise ScenarioError([*error.faults, *faults]) from None
    if faults:
        raise ScenarioError(faults)
    report = report_of(read)
    _write(file, to_html(report) if (form or form_of(file)) == HTML else to_markdown(report))
    return list(read), report


def answer_of(report: Report) -> list[str]:
    """The sentences of its answer."""
    return list(next(section.blocks[0].points for section in report.sections if section.anchor == "answer"))


def file_faults(file: Path, folders: Sequence[Path], option: str) -> Iterator[Fault]:
    """A fault where the file cannot be written, or would take the place of a result."""
    rule = ""
    if file.is_dir():
        rule = "must be a file, not a folder"
    elif not file.parent.is_dir() or not os.access(file.parent, os.W_OK) or (
        file.exists() and not os.access(file, os.W_OK)
    ):  # fmt: skip
        rule = "must be in a folder that can be written"
    elif file.name in NOT_TO_BE_REPLACED and file.parent.resolve() in {one.resolve() for one in folders}:
        rule = "must not take the place of a result"
    if rule:
        yield Fault(None, option, rule, f"got {str(file)!r}", "choose another file")


def _write(file: Path, text: str) -> None:
    half = file.with_name(f"{file.name}.part")
    half.write_text(text, encoding="utf-8", newline="\n")
    half.replace(file)
