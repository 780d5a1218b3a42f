"""Faults of a scenario, collected all at once: what pydantic found and what the cross-checks found, in plain words."""

from __future__ import annotations

import datetime
import difflib
import re
from collections.abc import Iterable, Mapping
from typing import Any, get_args

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

from sim.errors import Fault
from sim.scenario.positions import Path, line_of
from sim.scenario.tables import LONGEST_NAME

_NAMED_ROWS = {"units": "name", "patients": "group", "policies": "name"}
_TAGS = ("family", "kind")
_UNIONS = ("stay", "delay", "welfare")
_LONGEST_SHOWN = 80
_MOST_NAMED = 12
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
    "string_too_short": ("must not be empty", "write something"),
}


def nearest(word: str, known: Iterable[str]) -> str:
    """A remedy that names the known word most like `word`, or what is known."""
    known = sorted(known)
    near = difflib.get_close_matches(word, known, n=1, cutoff=0.6)
    if near:
        return f"did you mean `{_word(near[0])}`?"
    named = ", ".join(f"`{_word(name)}`" for name in known[:_MOST_NAMED]) or "nothing"
    return f"known here: {named}" + (f" and {len(known) - _MOST_NAMED} more" if len(known) > _MOST_NAMED else "")


def shown(value: Any) -> str:
    """A value as a fault shows it, on one line and shortened where it is long."""
    if isinstance(value, list):
        inner = ("[...]" if isinstance(one, list) and one else shown(one) for one in value[:_LONGEST_SHOWN])
        return _shortened(f"[{', '.join(inner)}]")
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, bool):
        return f"{value}".lower()
    if isinstance(value, datetime.date | datetime.time):
        return value.isoformat()
    try:
        return _shortened(repr(value))
    except ValueError:  # Python writes out no integer of more than 4300 digits
        return "a number of thousands of digits"


def _shortened(text: str, longest: int = _LONGEST_SHOWN) -> str:
    return text if len(text) <= longest else text[: longest - 3] + "..."


def _word(text: str) -> str:
    """A name or key as it stands, or in quotes where a terminal would not show it so."""
    return _shortened(text if text.isprintable() and text.strip() else repr(text), LONGEST_NAME)


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
            self.add(path, *_in_words(one, key, shown(self.value(path)), fields.get(key), fields))

    def readable(self, path: Path) -> bool:
        """Whether neither `path`, nor anything above or below it, has been found at fault."""
        return path not in self._above_bad and all(path[:depth] not in self._bad for depth in range(len(path) + 1))

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
                named = depth == 1 and isinstance(level, Mapping)
                label = level.get(_NAMED_ROWS.get(path[0], "")) if named else None
                part = label if isinstance(label, str) and label.strip() else f"{part + 1}"
            words.append(_word(part))
        return ".".join(words) or "file"

    def _path(self, loc: tuple[str | int, ...]) -> Path:
        """The file's own path of a pydantic location, which also names the chosen member below a union."""
        path: list[str | int] = []
        for place, part in enumerate(loc):
            below_union = place > 0 and (loc[place - 1] in _UNIONS or loc[place - 2 : place - 1] == ("parts",))
            level = self.value(tuple(path))
            if not (below_union and isinstance(level, Mapping) and part in (level.get(tag) for tag in _TAGS)):
                path.append(part)
        return tuple(path)


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
    return all(step(level, tag) in get_args(model.model_fields[tag].annotation) for tag in tags)


def _in_words(
    error: Mapping[str, Any], key: str, value: str, field: FieldInfo | None, fields: Iterable[str]
) -> tuple[str, str, str]:
    """Rule, value and remedy of one pydantic error; `field` is the key's own, `fields` are known beside it."""
    kind, context = error["type"], error.get("ctx", {})
    got, example = f"got {value}", next(iter(_examples(field, key)), None)
    write = f"write for example `{example}`" if example else "correct it"
    if kind == "breach":
        return context["rule"], f"got {_shortened(context['value'], LONGEST_NAME)}", context["remedy"]
    if kind == "missing":
        return "is required", "missing", write.replace("write", "add", 1) if example else "add it"
    if kind == "extra_forbidden":
        return "is not a known key of this table", got, nearest(key, fields)
    if kind in ("union_tag_invalid", "union_tag_not_found", "literal_error"):
        return _choice(error, key, got)
    if kind in _BOUNDS:
        rule, remedy = _BOUNDS[kind]
        return rule.format(**{name: _number(bound) for name, bound in context.items()}), got, remedy
    if kind in ("too_short", "too_long"):
        return _length(kind, context, len(error["input"]))
    if kind == "float_type" and type(error["input"]) is int:
        return "must be a number of reasonable size", got, write
    if kind == "dict_type" and not example:
        return "must be a table", got, f"write `{key} = {{ UNIT = ... }}`"
    if kind in _MUST_BE:
        return f"must be {_MUST_BE[kind]}", got, write if example else f"write {_MUST_BE[kind]}"
    return error["msg"][0].lower() + error["msg"][1:], got, write


def _choice(error: Mapping[str, Any], key: str, got: str) -> tuple[str, str, str]:
    """A key that takes one word of a list."""
    if error["type"] == "union_tag_not_found":
        return "is required", "missing", f"add `{key} = ...`"
    context = error["ctx"]
    known = re.findall(r"'([^']+)'", context.get("expected_tags") or context["expected"])
    rule = ("must be one of " if len(known) > 1 else "must be ") + ", ".join(f'"{word}"' for word in known)
    given = context.get("tag", error["input"])
    remedy = nearest(given, known) if isinstance(given, str) else ""
    return rule, got, remedy if remedy.startswith("did") else "choose one of these" if len(known) > 1 else "write this"


def _length(kind: str, context: Mapping[str, Any], entries: int) -> tuple[str, str, str]:
    """An array with too few or too many entries."""
    if kind == "too_long":
        return f"must have at most {_number(context['max_length'])} entries", f"got {entries:,}", "remove some"
    if context["min_length"] == 1:
        return "must not be empty", "got []", "add an entry"
    return f"must have at least {_number(context['min_length'])} entries", f"got {entries:,}", "add the others"


def _number(bound: Any) -> str:
    return f"{bound:,}" if isinstance(bound, int) else f"{bound:,.12g}" if isinstance(bound, float) else str(bound)


def _examples(field: FieldInfo | None, key: str) -> list[str]:
    """How the key may be written; keys that name their unit serve stays and delays alike."""
    if field is None:
        return []
    values = {"mean": "3.9", "rates": "[0.8, 0.2]"}
    return field.examples or [f"{key} = {value}" for start, value in values.items() if key.startswith(start + "_")]
