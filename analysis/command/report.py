"""`brimline report`: one page for the network's board, from the folders that other commands left."""

from __future__ import annotations

import os
from pathlib import Path

import click

from analysis.command.caution import CAUTION
from analysis.command.output import put_caution, put_json, put_text
from analysis.command.usage import Checked
from sim.errors import Fault, ScenarioError

FORMATS = {"html": ".html", "md": ".md"}


@click.command(cls=Checked, epilog=CAUTION)
@click.argument("results", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), help="The file [default: report.html, or report.md].")
@click.option(
    "--format", "form", type=click.Choice(tuple(FORMATS)), help="[default: by the file's name, else html]"
)
@click.option("--pdf", is_flag=True, help="Also a PDF beside the page, by a Chromium that is installed.")
@click.option(
    "--json", "as_json", is_flag=True, help="What was written and the answer, as one JSON document."
)
def command(results: tuple[Path, ...], out: Path | None, form: str | None, pdf: bool, as_json: bool) -> None:
    """One self-contained page from RESULTS, folders written with --out.

    Every number stands with its interval, is called exact, or is said to have no interval; what only the analyst
    can say is marked as a gap.
    """
    from analysis.report import read_results, report_of, to_html, to_markdown

    form = form or ("md" if out is not None and out.suffix.lower() in (".md", ".markdown") else "html")
    out = out or Path(f"report{FORMATS[form]}")
    if pdf and form != "html":
        raise click.UsageError("--pdf prints the page: leave --format md out")
    printed = out.with_suffix(".pdf") if pdf else None
    faults = [
        fault for file in (out, printed) if file is not None for fault in _cannot_be_written(file, results)
    ]
    try:
        read = read_results(results)
    except ScenarioError as error:
        raise ScenarioError([*error.faults, *faults]) from None
    if faults:
        raise ScenarioError(faults)
    written = report_of(read)
    _write(out, to_html(written) if form == "html" else to_markdown(written))
    if printed is not None:
        from analysis.report.paper import write_pdf

        write_pdf(out, printed)
    files = [str(file) for file in (out, printed) if file is not None]
    answer = next(section.blocks[0].points for section in written.sections if section.anchor == "answer")
    if as_json:
        put_json({"written": files, "kinds": {one.label: one.kind for one in read}, "answer": list(answer)})
        return
    put_text(*answer, "", f"Written: {', '.join(files)}")
    put_caution()


def _cannot_be_written(file: Path, results: tuple[Path, ...]) -> list[Fault]:
    """A fault where the file cannot be written, or would take the place of a result."""
    rule = ""
    if file.is_dir():
        rule = "must be a file, not a folder"
    elif not file.parent.is_dir() or not os.access(file.parent, os.W_OK) or (
        file.exists() and not os.access(file, os.W_OK)
    ):  # fmt: skip
        rule = "must be in a folder that can be written"
    elif file.name in ("result.json", "provenance.json", "runs.sqlite") and file.parent.resolve() in {
        one.resolve() for one in results
    }:
        rule = "must not take the place of a result"
    return [Fault(None, "--out", rule, f"got {str(file)!r}", "choose another file")] if rule else []


def _write(file: Path, text: str) -> None:
    """Whole or not at all."""
    half = file.with_name(f"{file.name}.part")
    half.write_text(text, encoding="utf-8", newline="\n")
    half.replace(file)
