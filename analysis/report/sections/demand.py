"""Costs over demand and targets, and targets that align: what a sweep or an alignment leaves, as far as it goes."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from analysis.report.blocks import Block, Points, Table, Text, table
from analysis.report.contents import Figures, Headline, Results
from analysis.report.words import estimate, sentence

TITLE = "Over demand and targets"


def headlines(results: Results) -> Iterator[Headline]:
    for one in results.of("sweep", "align"):
        yield from (Headline(35, found["statement"], one) for found in one.document.get("findings", [])[:1])


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    found = results.of("sweep", "align")
    for one in found:
        yield from results.heading(one, found)
        said = [sentence(finding["statement"]) for finding in one.document.get("findings", [])]
        if said:
            yield Points(tuple(said))
        for key, rows in one.document.items():
            if (
                key != "findings"
                and isinstance(rows, list)
                and rows
                and all(isinstance(row, dict) for row in rows)
            ):
                yield rows_of(key.replace("_", " "), rows)
    if found:
        yield Text(
            "Each row is a network of its own: its interval holds for it alone unless the result says otherwise."
        )


def rows_of(caption: str, rows: list[Mapping[str, Any]]) -> Table:
    """Any list of plain rows as a table, numbers with their intervals."""
    columns = [key for key, value in rows[0].items() if not isinstance(value, list)]
    return table(caption, [column.replace("_", " ") for column in columns],
                 [[_cell(row.get(column)) for column in columns] for row in rows])  # fmt: skip


def _cell(value: Any) -> str:
    if isinstance(value, Mapping):
        return (
            estimate(value, 4)
            if "mean" in value
            else "; ".join(f"{key} {_cell(one)}" for key, one in value.items())
        )
    if isinstance(value, bool) or value is None or isinstance(value, str):
        return {None: "-", True: "yes", False: "no"}.get(value, str(value))
    return f"{value:.6g}"
