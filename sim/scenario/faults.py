"""Faults of a scenario, collected all at once: what pydantic found and what the cross-checks found, in plain words."""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Mapping
from typing import Any, get_args

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

from sim.errors import Fault
from sim.scenario.positions import Path, line_of

_NAMED_ROWS = {"units": "name", "patients": "group", "policies": "name"}
_TAGS = ("family", "kind")
_MUST_BE = {
    "int_type": "a whole number", "int_from_float": "a whole number", "float_type": "a number",
    "string_type": "text in quotes", "bool_type": "true or false", "tuple_type": "an array",
    "dict_type": "a table", "model_type": "a table", "model_attributes_type": "a table",
    "finite_number": "a finite number",
}  # fmt: skip
_BOUNDS = {
    "greater_than": ("must be above {gt}", "raise it"),
    "greater_than_equal": ("must be at least {ge}", "raise it"),
    "less_than": ("must be below {lt}", "lower it"),
    "less_than_equal": ("must be at most {le}", "lower it"),
    "too_short": ("needs at least {min_length} entries", "add entries"),
    "too_long": ("takes at most {max_length} entries", "remove entries"),
    "string_too_short": ("must not be empty", "write something"),
}


def nearest(word: str, known: Iterable[str]) -> str:
    """A remedy that names the known word most like `word`, or all of them."""
    known = sorted(known)
    near = difflib.get_close_matches(word, known, n=1, cutoff=0.6)
    if near:
        return f"did you mean `{near[0]}`?"
    return "known here: " + (", ".join(f"`{name}`" for name in known) or "nothing")


def shown(value: Any) -> str:
    """A value as a fault shows it, shortened where it is long."""
    if isinstance(value, Mapping):
        return "a table"
    text = f"{value!r}".lower() if isinstance(value, bool) else repr(value)
    return text if len(text) <= 80 else text[:77] + "..."


class Collector:
    """Collects faults of one file's data, each with its line and its key in words."""

    def __init__(self, data: Mapping[str, Any], lines: Mapping[Path, int]) -> None:
        self.data = data
        self.lines = lines
        self.faults: list[Fault] = []
        self.paths: set[Path] = set()

    def add(self, path: Path, rule: str, value: str, remedy: str) -> None:
        """One fault at `path` (keys, and row numbers from 0)."""
        fault = Fault(line_of(self.lines, path), self.key(path), rule, value, remedy)
        if fault not in self.faults:
            self.faults.append(fault)
        self.paths.add(path)

    def add_all(self, error: ValidationError, model: type[BaseModel]) -> None:
        """Every error of a failed validation of the whole file against `model`."""
        for one in error.errors(include_url=False):
            if one["type"] == "too_short" and len(one["input"]) >= one["ctx"]["min_length"]:
                continue  # pydantic counts only the sound entries; the others have faults of their own
            path = self._path(one["loc"])
            if one["type"] == "breach":
                path += one["ctx"]["key"]
            fields = _fields_at(model, self.data, path[:-1])
            self.add(path, *_in_words(one, str(path[-1]) if path else "", fields))

    def readable(self, path: Path) -> bool:
        """Whether neither `path`, nor anything above or below it, has been found at fault."""
        return not any(bad[: len(path)] == path or path[: len(bad)] == bad for bad in self.paths)

    def key(self, path: Path) -> str:
        """`units.Norbeck.beds` for ("units", 1, "beds"); a row without a name goes by its number from 1."""
        words, level = [], self.data
        for depth, part in enumerate(path):
            level = _step(level, part)
            if isinstance(part, str):
                words.append(part if part.isprintable() and part else repr(part))
                continue
            label = level.get(_NAMED_ROWS.get(path[0], "")) if depth == 1 and isinstance(level, Mapping) else None
            words.append(label if isinstance(label, str) and label.strip() else f"{part + 1}")
        return ".".join(words) or "file"

    def _path(self, loc: tuple[str | int, ...]) -> Path:
        """The file's own path of a pydantic location, which also names the tags of unions."""
        path: list[str | int] = []
        level: Any = self.data
        for part in loc:
            is_tag = isinstance(level, Mapping) and part not in level and part in (level.get(tag) for tag in _TAGS)
            if is_tag or part == "[key]":
                continue
            path.append(part)
            level = _step(level, part)
        return tuple(path)


def _step(level: Any, part: str | int) -> Any:
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
        level = _step(level, part)
        below = [
            inner for table in models for key, field in _written(table).items() if key == part
            for inner in _models_in(field.annotation)
        ]  # fmt: skip
        models = below or models
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
    return all(_step(level, tag) in get_args(model.model_fields[tag].annotation) for tag in tags)


def _in_words(error: Mapping[str, Any], key: str, fields: Mapping[str, FieldInfo]) -> tuple[str, str, str]:
    """Rule, value and remedy of one pydantic error."""
    kind, context = error["type"], error.get("ctx", {})
    value = f"got {shown(error['input'])}"
    example = next((f"write for example `{one}`" for one in _examples(fields.get(key), key)), "correct it")
    if kind == "breach":
        return context["rule"], f"got {context['value']}", context["remedy"]
    if kind == "missing":
        return "is required", "missing", example.replace("write", "add", 1)
    if kind == "extra_forbidden":
        return "is not a known key of this table", value, nearest(key, fields)
    if kind in ("union_tag_invalid", "union_tag_not_found", "literal_error"):
        return _choice(error, context, value)
    if kind in _BOUNDS:
        rule, remedy = _BOUNDS[kind]
        return rule.format(**context), value, remedy
    if kind in _MUST_BE:
        return f"must be {_MUST_BE[kind]}", value, example
    return error["msg"][0].lower() + error["msg"][1:], value, example


def _choice(error: Mapping[str, Any], context: Mapping[str, Any], value: str) -> tuple[str, str, str]:
    """A key that takes one word of a list."""
    if error["type"] == "union_tag_not_found":
        tag = context["discriminator"].strip("'")
        return f"needs the key `{tag}`", value, f"add `{tag} = ...` inside its braces"
    tag = context.get("discriminator", "").strip("'")
    expected = re.findall(r"'([^']+)'", context.get("expected_tags") or context["expected"])
    given = context.get("tag", error["input"])
    rule = f"`{tag}` must be one of " if tag else "must be one of "
    remedy = nearest(str(given), expected)
    return rule + ", ".join(expected), f"got {shown(given)}", remedy if remedy.startswith("did") else "choose one of these"


def _examples(field: FieldInfo | None, key: str) -> list[str]:
    if field is None:
        return []
    return field.examples or ([f"{key} = 3.9"] if key.startswith("mean_") else [])
