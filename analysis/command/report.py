"""`brimline report`: one page for the network's board, from the folders that other commands left."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import click

from analysis.command.caution import CAUTION
from analysis.command.entry import CheckFailed
from analysis.command.options import require_folder
from analysis.command.output import put_caution, put_json, put_text
from analysis.command.usage import Checked

FORMATS = {"html": ".html", "md": ".md"}


@click.command(cls=Checked, epilog=CAUTION)
@click.argument("results", nargs=-1, type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path),
              help="The file [default: report.html or .md]; with --from a folder [default: results/PLAN].")  # fmt: skip
@click.option("--from", "plan", type=click.Path(path_type=Path), metavar="PLAN",
              help="Run the commands of a report plan whose results are missing, then write.")  # fmt: skip
@click.option(
    "--format", "form", type=click.Choice(tuple(FORMATS)), help="[default: by the file's name, else html]"
)
@click.option("--pdf", is_flag=True, help="Also a PDF beside the page, by a Chromium that is installed.")
@click.option(
    "--json", "as_json", is_flag=True, help="What was written and the answer, as one JSON document."
)
def command(
    results: tuple[Path, ...], out: Path | None, plan: Path | None, form: str | None, pdf: bool, as_json: bool
) -> None:
    """One self-contained page from RESULTS, folders written with --out; or every page of a report plan.

    Every number stands with its interval, is called exact, or is said to have no interval; what only the analyst
    can say is marked as a gap.
    """
    from analysis.report.writing import form_of

    if bool(results) == (plan is not None):
        raise click.UsageError("give RESULTS, or --from PLAN" + (", not both" if results else ""))
    form = form or form_of(out)
    if pdf and form != "html":
        raise click.UsageError("--pdf prints the page: leave --format md out")
    if plan is not None:
        _from_plan(plan, out, form, pdf, as_json)
        return
    told = _reported(results, out or Path(f"report{FORMATS[form]}"), form, pdf)
    if as_json:
        put_json(told)
        return
    _show(told)
    put_caution()


def _from_plan(plan: Path, out: Path | None, form: str, pdf: bool, as_json: bool) -> None:
    """Every report of a plan, each written as soon as its results are there."""
    from analysis.command.batch_documents import folder_of
    from analysis.command.report_plan import build

    folder = out or folder_of(plan)
    require_folder(folder)
    told = []
    for built in build(plan, folder):
        page = folder / f"{built.name}{FORMATS[form]}"
        told.append(_reported(built.folders, page, form, pdf) | {"failed": list(built.failed)})
        if not as_json:
            _show(told[-1])
    if as_json:
        put_json({"reports": told})
    else:
        put_caution()
    if any(one["failed"] for one in told):
        raise CheckFailed


def _reported(results: Sequence[Path], out: Path, form: str, pdf: bool) -> dict[str, Any]:
    """Writes one report; what was written, of which kinds, and its answer."""
    from analysis.report.writing import answer_of, written

    printed = out.with_suffix(".pdf") if pdf else None
    read, report = written(results, out, form=form, also=[] if printed is None else [printed])
    if printed is not None:
        from analysis.report.paper import write_pdf

        write_pdf(out, printed)
    files = [str(file) for file in (out, printed) if file is not None]
    answer = answer_of(report)
    return {"written": files, "kinds": {one.label: one.kind for one in read}, "answer": answer}


def _show(told: dict[str, Any]) -> None:
    put_text(*told["answer"], "", f"Written: {', '.join(told['written'])}")
    for name in told.get("failed", []):
        put_text(f"`{name}` did not hold, and the report says so.")
