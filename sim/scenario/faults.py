"""Faults of a scenario, collected all at once: what pydantic found and what the cross-checks found."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from typing import Any, get_args

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

from sim.errors import Fault
from sim.scenario.goals import DEFAULT_KIND
from sim.scenario.positions import Path, line_of
from sim.wording import as_written, in_words, nearest, shown

__all__ = ["Collector", "nearest", "shown", "step"]

_NAMED_ROWS = {
    ("units",): "name", ("patients",): "group", ("policies",): "name", ("game", "players"): "name",
    ("parts",): "name", ("reports",): "name",
}  # fmt: skip
_TAGS = ("family", "kind")
_UNIONS = ("stay", "delay", "welfare", "goal")
_TABLES_OF_UNIONS = (("parts",), ("goals",))


class Collector:
    """Collects faults of one file's data, each with its line and its key in words."""

    def __init__(self, data: Mapping[str, Any], lines: Mapping[Path, int]) -> None:
        self.data = data
        self.lines = lines
        self._found: dict[Fault, None] = {}
        self._bad: set[Path] = set()
        self._above_bad: set[Path] = set()

    @property
    def faults(self) -> list[Fault]:
        """Every fault found so far, each once."""
        return list(self._found)

    def add(self, path: Path, rule: str, value: str, remedy: str) -> None:
        """One fault at `path` (keys, and row numbers from 0)."""
        self._found[Fault(line_of(self.lines, path), self.key(path), rule, value, remedy)] = None
        self._bad.add(path)
        self._above_bad.update(path[:depth] for depth in range(len(path)))

    def add_all(self, error: ValidationError, model: type[BaseModel]) -> None:
        """Every error of a failed validation of the whole file against `model`."""
        for one in error.errors(include_url=False):
            if one["type"] == "too_short" and len(one["input"]) >= one["ctx"]["min_length"]:
                continue  # pydantic counts only the sound entries; the others have faults of their own
            path = self._path(one["loc"])
            if one["type"] == "breach":
                path += one["ctx"]["key"]
            elif one["type"].startswith("union_tag"):
                path += (one["ctx"]["discriminator"].strip("'"),)
            fields = _fields_at(model, self.data, path[:-1])
            key = str(path[-1]) if path else ""
            self.add(path, *in_words(one, key, shown(self.value(path)), fields.get(key), fields))

    def standing(self, path: Path) -> bool:
        """Whether neither `path` nor anything above it has been found at fault; entries below may be."""
        return all(path[:depth] not in self._bad for depth in range(len(path) + 1))

    def readable(self, path: Path) -> bool:
        """Whether neither `path`, nor anything above or below it, has been found at fault."""
        return path not in self._above_bad and self.standing(path)

    def misspelt(self, table: str) -> bool:
        """Whether some unknown key of the file looks like `table`."""
        unknown = [path[0] for path in self._bad if len(path) == 1 and path != (table,)]
        return bool(difflib.get_close_matches(table, map(str, unknown), n=1, cutoff=0.6))

    def value(self, path: Path) -> Any:
        """What the file has at `path`, sound or not; None where it has nothing."""
        level: Any = self.data
        for part in path:
            level = step(level, part)
        return level

    def key(self, path: Path) -> str:
        """`units.Norbeck.beds` for ("units", 1, "beds"); a row without a name goes by its number from 1."""
        words, level = [], self.data
        for depth, part in enumerate(path):
            level = step(level, part)
            if isinstance(part, int):
                named = isinstance(level, Mapping)
                label = level.get(_NAMED_ROWS.get(path[:depth], "")) if named else None
                part = label if isinstance(label, str) and label else f"{part + 1}"
            words.append(as_written(part))
        return ".".join(words) or "file"

    def _path(self, loc: tuple[str | int, ...]) -> Path:
        """The file's own path of a pydantic location, which also names the chosen member below a union."""
        path: list[str | int] = []
        for place, part in enumerate(loc):
            below_union = place > 0 and (
                loc[place - 1] in _UNIONS or loc[place - 2 : place - 1] in _TABLES_OF_UNIONS
            )
            level = self.value(tuple(path))
            if not (below_union and isinstance(level, Mapping) and _is_member(part, level)):
                path.append(part)
        return tuple(path)


def _is_member(part: str | int, level: Mapping[str, Any]) -> bool:
    """Whether `part` of a location names the member of a union that the table `level` is, by its tag or by default."""
    by_default = part == DEFAULT_KIND and "kind" not in level
    return by_default or part in (level.get(tag) for tag in _TAGS)


def step(level: Any, part: str | int) -> Any:
    """What stands at `part` of a table or an array; None where nothing does."""
    if isinstance(level, Mapping):
        return level.get(part)
    if isinstance(level, list) and isinstance(part, int) and part < len(level):
        return level[part]
    return None


def _fields_at(model: type[BaseModel], data: Any, path: Path) -> dict[str, FieldInfo]:
    """The keys, as written in the file, that the table at `path` may hold."""
    models, level = [model], data
    for part in path:
        level = step(level, part)
        held = [field for table in models for key, field in _written(table).items() if key == part]
        if held:  # else a row's number or a unit's name: what it holds is of the same kind
            models = [inner for field in held for inner in _models_in(field.annotation)]
    fitting = [table for table in models if _tag_fits(table, level)] or models
    return {key: field for table in fitting for key, field in _written(table).items()}


def _written(model: type[BaseModel]) -> dict[str, FieldInfo]:
    return {field.alias or name: field for name, field in model.model_fields.items()}


def _models_in(annotation: Any) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [model for inner in get_args(annotation) for model in _models_in(inner)]


def _tag_fits(model: type[BaseModel], level: Any) -> bool:
    tags = [tag for tag in _TAGS if tag in model.model_fields]
    given = {tag: step(level, tag) for tag in tags}
    return all(
        given[tag] in get_args(model.model_fields[tag].annotation)
        or (given[tag] is None and not model.model_fields[tag].is_required())
        for tag in tags
    )
