"""`brimline results`: what runs with --out have left in their folders."""

from __future__ import annotations

import csv
import io
import itertools
import json
from collections.abc import Callable
from contextlib import chdir, redirect_stdout
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import click

from analysis.command.caution import CAUTION
from analysis.command.entry import INTERRUPTED, CheckFailed, Interrupted, run, say
from analysis.command.output import put_json, put_table, put_text
from analysis.command.usage import Checked
from sim.errors import Fault, ScenarioError, StoreError

PARQUET_BATCH = 50_000
ORIGIN, SHELF = "provenance.json", "earlier"


@click.group(epilog=CAUTION)
def command() -> None:
    """What runs with --out have left in their folders (nothing here changes it)."""


FOLDER = click.argument("folder", type=click.Path(path_type=Path, exists=True, file_okay=False))
JSON = click.option("--json", "as_json", is_flag=True, help="One JSON document on standard output.")


def _store(folder: Path) -> Any:
    from sim.store import Store

    return Store(folder)


# ---- list and show ----


@command.command("list", cls=Checked, short_help="Name the folders with results.")
@click.argument("folders", nargs=-1, type=click.Path(path_type=Path))
@JSON
def list_(folders: tuple[Path, ...], as_json: bool) -> None:
    """The folders with results in FOLDERS or below them [default: results]."""
    from sim.store_file import FILE

    if missing := [folder for folder in folders if not folder.is_dir()]:
        raise ScenarioError(map(_no_folder, missing))
    places = folders or (Path("results"),)
    stores = {file.parent for folder in places for file in folder.rglob(FILE)}
    alone = {file.parent for folder in places for file in folder.rglob(ORIGIN)} - stores
    lines = [*map(_line, stores), *(_line_of_a_document(one) for one in alone if SHELF not in one.parts)]
    document = {"folders": sorted(lines, key=lambda line: line["folder"])}
    if as_json:
        put_json(document)
        return
    if not lines:
        put_text(f"No results in {', '.join(map(str, places))}; commands leave them with --out FOLDER.")
        return
    put_table(
        "Results",
        ("folder", "command", "rows", "complete", "failed", "began (UTC)"),
        [[one.get(name, "-") for name in ("folder", "command", "rows", "complete", "failed", "began")]
         for one in document["folders"]],
    )  # fmt: skip
    for one in document["folders"]:
        if "fault" in one:
            say(one["fault"])


def _no_folder(folder: Path) -> Fault:
    rule, remedy = "must be a folder that is there", "correct it, or leave it out for `results`"
    return Fault(None, "FOLDERS", rule, f"got {str(folder)!r}", remedy)


def _line_of_a_document(folder: Path) -> dict[str, Any]:
    """A folder that holds a result and no runs, as of `exact`, `verify`, or a part of a batch."""
    nothing = dict.fromkeys(("rows", "complete", "failed"))
    try:
        origin = json.loads((folder / ORIGIN).read_text(encoding="utf-8"))
        said = {"command": " ".join(origin["command"]), "began": origin["started"], "ended": origin["ended"]}
    except (OSError, ValueError, LookupError, TypeError, RecursionError):
        return {"folder": str(folder), "fault": f"{folder / ORIGIN} is not what a command wrote"}
    return {"folder": str(folder)} | said | nothing


def _line(folder: Path) -> dict[str, Any]:
    """One folder in short; a damaged one is named with its fault."""
    try:
        with _store(folder) as store:
            document = _summary(store)
    except StoreError as error:
        return {"folder": str(folder), "fault": str(error)}
    names = ("command", "rows", "complete", "failed", "began", "ended")
    return {"folder": str(folder)} | {name: document[name] for name in names}


def _summary(store: Any) -> dict[str, Any]:
    """What is there, and what the last command did of it."""
    commands = store.commands()
    last = commands[-1] if commands else None
    document = store.counts()
    if last is None:
        return document | {"command": "", "complete": False, "asked": 0, "computed": 0, "reused": 0,
                           "began": "", "ended": None, "engine": None}  # fmt: skip
    numbers = {name: last[name] for name in ("asked", "computed", "reused", "began", "ended")}
    return document | numbers | {
        "command": " ".join(last["provenance"]["command"]),
        "complete": last["computed"] + last["reused"] == last["asked"],
        "engine": last["provenance"]["engine"],
    }  # fmt: skip


@command.command(cls=Checked, short_help="What a folder holds, and whether it is complete.")
@FOLDER
@JSON
def show(folder: Path, as_json: bool) -> None:
    """How much is there, whether it is complete, what failed, and the hash over all of it."""
    with _store(folder) as store:
        document = _summary(store) | {"table_hash": store.table_hash(), "failures": store.failures()}
        commands = store.commands()
    document["commands"] = commands
    document["provenance"] = commands[-1]["provenance"] if commands else None
    if as_json:
        put_json(document)
        return
    names = ("command", "engine", "rows", "unit_rows", "exact_cells", "asked", "computed", "reused", "complete",
             "failed", "began", "ended", "table_hash")  # fmt: skip
    put_table(f"Results in {folder}", ("what", "value"), [(name, document[name]) for name in names])
    for one in document["failures"]:
        last_line = one["traceback"].strip().splitlines()[-1]
        put_text(f"failed: thresholds {one['thresholds']}, replication {one['replication']}: {last_line}")


@command.command(cls=Checked, short_help="How far a batch is, from another terminal.")
@FOLDER
@JSON
def watch(folder: Path, as_json: bool) -> None:
    """How far a batch is, until it ends or Ctrl-C (with --json: once); the batch is not touched."""
    from analysis.command.watching import watch as follow

    follow(folder, as_json)


# ---- export ----


@command.command(cls=Checked, short_help="Every run by unit, as CSV or Parquet.")
@FOLDER
@click.argument("file", type=click.Path(path_type=Path, dir_okay=False))
def export(folder: Path, file: Path) -> None:
    """Every run by unit into FILE, .csv or .parquet: counts of patients, times in days."""
    writers: dict[str, Callable[[Any, Path], None]] = {".csv": _write_csv, ".parquet": _write_parquet}
    if file.suffix not in writers:
        raise click.BadParameter("must end in .csv or .parquet", param_hint="FILE")
    if not file.parent.is_dir():
        rule, remedy = "must be in a folder that is there", "make the folder, or choose another"
        raise ScenarioError([Fault(None, "FILE", rule, f"got {str(file)!r}", remedy)])
    half = file.with_name(f"{file.name}.part")
    with _store(folder) as store:
        writers[file.suffix](store, half)
    half.replace(file)


def _write_csv(store: Any, file: Path) -> None:
    """Numbers in full precision."""
    from sim.wording import in_spreadsheet

    with file.open("w", newline="", encoding="utf-8") as opened:
        rows = store.unit_rows()
        first = next(rows, None)
        if first is not None:
            lines = csv.DictWriter(opened, first)
            lines.writeheader()
            lines.writerows(
                row | {"unit": in_spreadsheet(row["unit"])} for row in itertools.chain([first], rows)
            )


def _write_parquet(store: Any, file: Path) -> None:
    try:
        import pyarrow
        from pyarrow import parquet
    except ImportError:
        said = "Parquet needs pyarrow: pip install 'brimline[parquet]', or export to .csv"
        raise StoreError(said) from None
    rows = store.unit_rows()
    table = pyarrow.Table.from_pylist(list(itertools.islice(rows, PARQUET_BATCH)))
    with parquet.ParquetWriter(file, table.schema) as writer:
        while table.num_rows:
            writer.write_table(table)
            table = pyarrow.Table.from_pylist(list(itertools.islice(rows, PARQUET_BATCH)), table.schema)


# ---- verify and repeat ----


@command.command(cls=Checked, short_help="Compute a sample again and compare every bit.")
@FOLDER
@click.option(
    "--sample",
    type=click.IntRange(1, 1_000_000),
    default=20,
    show_default=True,
    help="Rows to compute again.",
)
@JSON
def verify(folder: Path, sample: int, as_json: bool) -> None:
    """Compute a random sample of rows again and compare every bit; status 1 if any differs."""
    from analysis.command.recorded import differing_exact_cells, differs, recipes

    with _store(folder) as store:
        found, reasons = recipes(store)
        keys = store.sample(sample)
        known = [key for key in keys if key.scenario in found and key.cell in found[key.scenario].rules]
        different = {key: said for key in known if (said := differs(store, key, found[key.scenario]))}
        exact, other = differing_exact_cells(store, sample)
    for reason in reasons:
        say(reason)
    if not known and not exact:
        raise StoreError(f"no row of {folder} could be computed again")
    different |= other
    document = {
        "agrees": not different, "checked": len(known), "exact_checked": exact,
        "not_computed": len(keys) - len(known),
        "different": [vars(key) | {"reads": said} for key, said in different.items()],
    }  # fmt: skip
    cells = f" and {exact} exact cells" if exact else ""
    _conclude(document, f"{len(known)} rows{cells} computed again, {len(different)} differ.", as_json)


@command.command(cls=Checked, short_help="Run the last command again and compare.")
@FOLDER
@JSON
def repeat(folder: Path, as_json: bool) -> None:
    """Run the last recorded command again, beside the old results, and compare; status 1 on different bits."""
    from analysis.command.recorded import parts_of, request_again

    with _store(folder) as store:
        commands, before = store.commands(), store.hashes() | store.exact_hashes()
    if not commands:
        raise StoreError(f"{folder} records no command")
    origin = commands[-1]["provenance"]
    for part in parts_of(origin):
        request_again(part)  # refuses a scenario that is not what it was
    again = _hashes_again(origin)
    different = [key for key, found in again.items() if before.get(key, found) != found]
    missing = sum(key not in before for key in again)
    document = {
        "agrees": not different, "command": origin["command"], "compared": len(again) - missing,
        "missing": missing, "different": [vars(key) for key in different],
    }  # fmt: skip
    said = f"{len(again) - missing} runs compared, {len(different)} differ, {missing} were not there before."
    _conclude(document, said, as_json)


def _hashes_again(origin: dict[str, Any]) -> dict[Any, str]:
    """The record hashes of the recorded command, run into a folder of its own."""
    from analysis.command.recorded import arguments_of

    arguments = arguments_of(origin)
    place = arguments.index("--") if "--" in arguments else len(arguments)
    with TemporaryDirectory() as fresh:
        arguments[place:place] = ["--out", fresh]  # the last --out holds
        with chdir(origin["cwd"]), redirect_stdout(io.StringIO()):
            status = run(arguments)
        if status == INTERRUPTED:
            raise Interrupted
        with _store(Path(fresh)) as store:
            return store.hashes() | store.exact_hashes()


def _conclude(document: dict[str, Any], said: str, as_json: bool) -> None:
    if as_json:
        put_json(document)
    else:
        put_text(said)
    if not document["agrees"]:
        raise CheckFailed
