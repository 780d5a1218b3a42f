"""What a section is made of: plain blocks without markup, which the page and the Markdown form both set."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True)
class Text:
    """One paragraph. warns: it is a caution that must not be missed."""

    text: str
    warns: bool = False


@dataclass(frozen=True)
class Heading:
    """The title of a part of a section."""

    text: str


@dataclass(frozen=True)
class Points:
    """A list of short statements. ordered: it is numbered."""

    points: tuple[str, ...]
    ordered: bool = False


@dataclass(frozen=True)
class Table:
    """Rows under headings; the first cell of a row names it. caption: what is counted, in which unit."""

    caption: str
    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


@dataclass(frozen=True)
class Figure:
    """A picture as inline SVG, with its title and a description that stands in its place."""

    svg: str
    title: str
    description: str


@dataclass(frozen=True)
class Terms:
    """Items of a checklist with what stands for each. A gap is what only the analyst can say."""

    items: tuple[tuple[str, str], ...]


@dataclass(frozen=True)
class Code:
    """Text to be copied as it is: a command, a scenario file."""

    text: str
    label: str


Block = Text | Heading | Points | Table | Figure | Terms | Code


@dataclass(frozen=True)
class Section:
    """One section. anchor: its place within the page."""

    title: str
    anchor: str
    blocks: tuple[Block, ...]


def table(caption: str, columns: Sequence[str], rows: Sequence[Sequence[str]]) -> Table:
    """A table from any sequences."""
    return Table(caption, tuple(columns), tuple(tuple(row) for row in rows))
