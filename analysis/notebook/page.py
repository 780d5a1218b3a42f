"""HTML for a notebook: headings, sentences and tables. Every text is escaped here, whatever a unit is called."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from html import escape
from typing import Any

from analysis.caution import CAUTION

MOST_ROWS = 60
NONE = "–"
_LEFT, _RIGHT = "text-align:left", "text-align:right"


@dataclass(frozen=True)
class Grid:
    """A table: the first column is a name, the others are numbers or short words."""

    title: str
    columns: Sequence[str]
    rows: Sequence[Sequence[Any]]


def page(heading: str, sentences: Iterable[str], grids: Iterable[Grid], notices: Iterable[str] = ()) -> str:
    """One result as an HTML fragment, ending with the caution. Sentences and notices are plain text."""
    return "\n".join(
        [
            "<div>",
            f"<h4>{escape(heading)}</h4>",
            *(f"<p>{escape(said)}</p>" for said in sentences),
            *(_table(grid) for grid in grids),
            *(f"<p><em>{escape(said)}</em></p>" for said in notices),
            f"<p><small>{escape(CAUTION)}</small></p>",
            "</div>",
        ]
    )


def _table(grid: Grid) -> str:
    left = len(grid.rows) - MOST_ROWS
    more = f"<p>{left:,} more rows are in the frame.</p>" if left > 0 else ""
    head = "".join(
        f'<th style="{_side(place)}">{escape(name)}</th>' for place, name in enumerate(grid.columns)
    )
    body = "\n".join(_row(row) for row in grid.rows[:MOST_ROWS])
    return (
        f"<table>\n<caption>{escape(grid.title)}</caption>\n<thead><tr>{head}</tr></thead>\n"
        f"<tbody>\n{body}\n</tbody>\n</table>{more}"
    )


def _row(row: Sequence[Any]) -> str:
    cells = (f'<td style="{_side(place)}">{escape(text(cell))}</td>' for place, cell in enumerate(row))
    return f"<tr>{''.join(cells)}</tr>"


def _side(place: int) -> str:
    return _RIGHT if place else _LEFT


def text(value: Any) -> str:
    """A value as a table shows it; an estimate as `mean (low to high)`."""
    if isinstance(value, dict):
        return interval(value)
    if value is None:
        return NONE
    if isinstance(value, bool):
        return "yes" if value else "no"
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def interval(estimate: dict[str, Any]) -> str:
    """`mean (low to high)`, or what there is of it."""
    mean, low, high = (estimate.get(key) for key in ("mean", "low", "high"))
    if mean is None or low is None or high is None:
        return text(mean)
    return f"{text(mean)} ({text(low)} to {text(high)})"
