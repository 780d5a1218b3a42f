"""Where each key of a TOML file stands: tomllib gives values without places, a syntax tree has them."""

from __future__ import annotations

import tomllib
import unicodedata
from collections.abc import Mapping

import tree_sitter
import tree_sitter_toml

Path = tuple[str | int, ...]
_LANGUAGE = tree_sitter.Language(tree_sitter_toml.language())
_TABLES = ("table", "table_array_element")


class _Finder:
    """Walks the tree once and notes the line of every key path; rows of arrays are numbered from 0."""

    def __init__(self) -> None:
        self.lines: dict[Path, int] = {(): 1}
        self.rows: dict[Path, int] = {}

    def document(self, root: tree_sitter.Node) -> None:
        for node in root.named_children:
            if node.type == "pair":
                self.pair(node, ())
            elif node.type in _TABLES:
                self.table(node)

    def table(self, node: tree_sitter.Node) -> None:
        header, *pairs = [child for child in node.named_children if child.type != "comment"]
        *parents, last = _keys(header)
        base = (*self.entered((), parents, header), last)
        if node.type == "table_array_element":
            self.rows[base] = self.rows.get(base, -1) + 1
            self.lines.setdefault(base, _line(header))
            base = (*base, self.rows[base])
        self.lines.setdefault(base, _line(header))
        for pair in pairs:
            self.pair(pair, base)

    def entered(self, base: Path, keys: list[str], node: tree_sitter.Node) -> Path:
        """The path below `base`, standing in the latest row wherever a key names an array of tables."""
        for key in keys:
            base = (*base, key)
            if base in self.rows:
                base = (*base, self.rows[base])
            self.lines.setdefault(base, _line(node))
        return base

    def pair(self, node: tree_sitter.Node, base: Path) -> None:
        key, value = [child for child in node.named_children if child.type != "comment"][:2]
        *parents, last = _keys(key)
        path = (*self.entered(base, parents, key), last)
        self.lines[path] = _line(key)
        self.value(value, path)

    def value(self, node: tree_sitter.Node, path: Path) -> None:
        if node.type == "inline_table":
            for child in node.named_children:
                if child.type == "pair":
                    self.pair(child, path)
        elif node.type == "array":
            for place, child in enumerate(c for c in node.named_children if c.type != "comment"):
                self.lines[(*path, place)] = _line(child)
                self.value(child, (*path, place))


def _line(node: tree_sitter.Node) -> int:
    return node.start_point[0] + 1


def _keys(node: tree_sitter.Node) -> list[str]:
    """The parts of a bare, quoted or dotted key, read as TOML reads them, in NFC."""
    keys, level = [], tomllib.loads(f"{node.text.decode()} = 0")
    while isinstance(level, dict):
        key, level = next(iter(level.items()))
        keys.append(unicodedata.normalize("NFC", key))
    return keys


def key_lines(text: str) -> Mapping[Path, int]:
    """The line (from 1) of every key path of a TOML text that tomllib accepts."""
    tree = tree_sitter.Parser(_LANGUAGE).parse(text.encode())
    finder = _Finder()
    finder.document(tree.root_node)
    return finder.lines


def line_of(lines: Mapping[Path, int], path: Path) -> int:
    """The line of `path`, or of the nearest table above it that the file holds."""
    while path not in lines:
        path = path[:-1]
    return lines[path]
