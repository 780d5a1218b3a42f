"""The report in Markdown: the same blocks, with descriptions in the place of pictures."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator

from analysis.report.blocks import Block, Code, Figure, Heading, Points, Table, Terms, Text
from analysis.report.contents import Report


def to_markdown(report: Report) -> str:
    """The whole report; the same report gives the same bytes."""
    parts = [f"# {escaped(report.title)}"]
    for section in report.sections:
        parts += [f"## {escaped(section.title)}", *(_set(block) for block in section.blocks)]
    return "\n\n".join(part for part in parts if part) + "\n"


def escaped(text: str) -> str:
    """A text that Markdown shows as it stands: no markup, no HTML, no line of its own."""
    return re.sub(r"([\\`*_\[\]<>#|~$&!])", r"\\\1", " ".join(text.split()))


def _opening(text: str) -> str:
    """A text at the start of a line, where a number or a sign must not open a list, a heading or a rule."""
    return re.sub(r"^(\d+)([.)])(?=\s|$)|^([-+=])", _guarded, escaped(text))


def _guarded(found: re.Match[str]) -> str:
    return f"{found[1]}\\{found[2]}" if found[1] else f"\\{found[3]}"


def _set(block: Block) -> str:
    return _SETTERS[type(block)](block)


def _text(block: Text) -> str:
    return f"> **{escaped(block.text)}**" if block.warns else _opening(block.text)


def _points(block: Points) -> str:
    marks = (f"{place}." if block.ordered else "-" for place in range(1, len(block.points) + 1))
    return "\n".join(f"{mark} {_opening(one)}" for mark, one in zip(marks, block.points, strict=True))


def _table(block: Table) -> str:
    return "\n".join([f"{escaped(block.caption)}:", "", *_rows(block)])


def _rows(block: Table) -> Iterator[str]:
    yield _row(block.columns)
    yield _row(["---", *["---:"] * (len(block.columns) - 1)], plain=True)
    yield from map(_row, block.rows)


def _row(cells: object, *, plain: bool = False) -> str:
    return "| " + " | ".join(cell if plain else escaped(cell) for cell in cells) + " |"


def _figure(block: Figure) -> str:
    return f"**Figure: {escaped(block.title)}.** {escaped(block.description)}"


def _terms(block: Terms) -> str:
    return "\n".join(f"- **{escaped(term)}**: {escaped(said)}" for term, said in block.items)


def _code(block: Code) -> str:
    """Indented, so that no fence in the text can end it."""
    return f"{escaped(block.label)}:\n\n" + "\n".join(
        f"    {line}".rstrip() for line in block.text.split("\n")
    )


_SETTERS: dict[type, Callable[..., str]] = {
    Text: _text,
    Heading: lambda block: f"### {escaped(block.text)}",
    Points: _points,
    Table: _table,
    Figure: _figure,
    Terms: _terms,
    Code: _code,
}
