"""`brimline report`: one page for the network's board, from the folders that other commands left."""

from __future__ import annotations

from pathlib import Path

import click

from analysis.command.caution import CAUTION
from analysis.command.output import put_caution, put_json, put_text

FORMATS = {"html": ".html", "md": ".md"}


@click.command(epilog=CAUTION)
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
    from analysis.report.writing import answer_of, form_of, written

    form = form or form_of(out)
    out = out or Path(f"report{FORMATS[form]}")
    if pdf and form != "html":
        raise click.UsageError("--pdf prints the page: leave --format md out")
    printed = out.with_suffix(".pdf") if pdf else None
    read, report = written(results, out, form=form, also=[] if printed is None else [printed])
    if printed is not None:
        from analysis.report.paper import write_pdf

        write_pdf(out, printed)
    files = [str(file) for file in (out, printed) if file is not None]
    answer = answer_of(report)
    if as_json:
        put_json({"written": files, "kinds": {one.label: one.kind for one in read}, "answer": answer})
        return
    put_text(*answer, "", f"Written: {', '.join(files)}")
    put_caution()
