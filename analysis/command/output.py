"""What commands print and write: tables for a person, one JSON document for a program, files in a folder."""

from __future__ import annotations

import shutil
import sys
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

from analysis.command.caution import CAUTION
from analysis.result_files import to_json as to_json
from analysis.result_files import write_result as write_result
from sim.wording import count as count

PLAIN_WIDTH = 132
WRITTEN = (
    "result.json", "provenance.json", "table.csv", "control.csv", "payoffs-*.*", "verification.*", "warm-up.*",
    "hour-of-week.*", "replies.*", "price-over-weights.*", "comparison-*.*", "ledger.*", "points.csv",
    "sweep-*.*", "align*.*",
)  # fmt: skip


def put_json(document: Any) -> None:
    """The one document on standard output; names in escapes where the output cannot take them as written."""
    utf8 = (sys.stdout.encoding or "").lower().replace("-", "").startswith("utf")
    print(to_json(document, ensure_ascii=not utf8))


def put_heading(document: dict[str, Any]) -> None:
    """What was run: the scenario's title, and what the command line changed of it."""
    put_text(document["scenario"] or "(no title)")
    if document["changes"]:
        put_text("Changed for this run: " + "; ".join(document["changes"]) + ".")


def console() -> Any:
    """rich's console on standard output; wide where it is no terminal, so that tables do not wrap."""
    from rich.console import Console

    return Console(highlight=False, markup=False, width=None if sys.stdout.isatty() else PLAIN_WIDTH)


def put_table(title: str, columns: Sequence[str], rows: Iterable[Sequence[Any]]) -> None:
    """One table; the first column is a name, the others are numbers or short words.

    Where it is too wide, columns go on in further blocks, each with the first column again.
    """
    from sim.wording import visible

    texts = [[visible(cell if isinstance(cell, str) else number(cell)) for cell in row] for row in rows]
    columns = [visible(column) for column in columns]
    screen = console()
    for place, block in enumerate(_blocks(columns, texts, screen.width)):
        picked = [[line[column] for column in block] for line in (columns, *texts)]
        put_text(title if place == 0 else f"{title} (continued)")
        screen.print(_table(*picked))


def _blocks(columns: Sequence[str], rows: Sequence[Sequence[str]], width: int) -> list[list[int]]:
    """Columns that fit side by side, the first one in every block; a column's heading may take several lines."""
    needs = [
        max(max((len(word) for word in column.split()), default=0), *(len(row[place]) for row in rows), 0)
        for place, column in enumerate(columns)
    ]
    blocks, used = [[0]], needs[0]
    for place in range(1, len(columns)):
        if used + needs[place] + 3 > width and len(blocks[-1]) > 1:
            blocks.append([0])
            used = needs[0]
        blocks[-1].append(place)
        used += needs[place] + 3
    return blocks


def _table(columns: Sequence[str], *rows: Sequence[str]) -> Any:
    from rich import box
    from rich.table import Table
    from rich.text import Text

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for place, column in enumerate(columns):
        table.add_column(Text(column), justify="left" if place == 0 else "right", overflow="fold")
    for row in rows:
        table.add_row(*map(Text, row))
    return table


def put_grid(title: str, header: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """A dense grid of short numbers: every column as narrow as its widest entry, never wrapped."""
    from sim.wording import visible

    lines = [[visible(cell) for cell in line] for line in (header, *rows)]
    widths = [max(len(line[place]) for line in lines) for place in range(len(header))]
    put_text(title)
    for line in lines:
        print(" ".join(cell.rjust(width) for cell, width in zip(line, widths, strict=True)))
    print()


def put_text(*lines: str) -> None:
    """Lines of text, wrapped at the terminal's width."""
    from sim.wording import visible

    for line in (part for text in lines for part in text.split("\n")):
        console().print(visible(line), soft_wrap=not sys.stdout.isatty())


def put_caution() -> None:
    """What the figures are not for."""
    put_text("", CAUTION)


def number(value: Any, digits: int = 3) -> str:
    """A number as a table shows it; a dash for none."""
    if value is None:
        return "-"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int):
        return str(value)
    return f"{value:.{digits}f}"


def interval(estimate: dict[str, Any], digits: int = 3) -> str:
    """`mean (low to high)`, or the bare number where there is no interval."""
    if estimate["mean"] is None:
        return "-"
    if estimate["low"] is None:
        return number(estimate["mean"], digits)
    low, high = number(estimate["low"], digits), number(estimate["high"], digits)
    return f"{number(estimate['mean'], digits)} ({low} to {high})"


def prepare_folder(folder: Path) -> Path:
    """Makes the folder; what an earlier run left there is kept, moved into `earlier/N`. Other files stay put."""
    folder.mkdir(parents=True, exist_ok=True)
    left = [path for pattern in WRITTEN for path in folder.glob(pattern)]
    if left:
        earlier = folder / "earlier"
        taken = (
            [int(path.name) for path in earlier.glob("*") if path.name.isdecimal()]
            if earlier.exists()
            else []
        )
        shelf = earlier / str(max(taken, default=0) + 1)
        shelf.mkdir(parents=True)
        for path in left:
            shutil.move(path, shelf / path.name)
    return folder
