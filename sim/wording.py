"""A fault in plain words: rule, value and remedy of what pydantic found, and values as people read them."""

from __future__ import annotations

import datetime
import difflib
import re
import unicodedata
from collections.abc import Iterable, Mapping
from typing import Any

from pydantic.fields import FieldInfo

from sim.tables import LONGEST_NAME

Words = tuple[str, str, str]  # rule, value, remedy

_LONGEST_SHOWN = 80
_MOST_NAMED = 12
_MUST_BE = {
    "int_type": "a whole number", "int_from_float": "a whole number", "float_type": "a number",
    "string_type": "text in quotes", "tuple_type": "an array",
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
        return f"did you mean `{as_written(near[0])}`?"
    named = ", ".join(f"`{as_written(name)}`" for name in known[:_MOST_NAMED]) or "nothing"
    return f"known here: {named}" + (
        f" and {len(known) - _MOST_NAMED} more" if len(known) > _MOST_NAMED else ""
    )


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
    return _shortened(repr(value))


def _shortened(text: str, longest: int = _LONGEST_SHOWN) -> str:
    return text if len(text) <= longest else text[: longest - 3] + "..."


def as_written(text: str) -> str:
    """A name or key as it stands, or in quotes where a terminal would not show it so."""
    plain = text.isprintable() and text and text == text.strip()
    return _shortened(text if plain else repr(text), LONGEST_NAME)


def in_words(
    error: Mapping[str, Any], key: str, value: str, field: FieldInfo | None, fields: Iterable[str]
) -> Words:
    """Rule, value and remedy of one pydantic error.

    `key`: the key at fault, `value`: what stands there, as shown; `field`: what the key may be, None where it
    is not known; `fields`: the keys known beside it.
    """
    kind, got, example = error["type"], f"got {value}", _example(field, key)
    if kind == "breach":
        said = error["ctx"]
        return said["rule"], f"got {_shortened(said['value'], LONGEST_NAME)}", said["remedy"]
    if kind == "missing":
        return "is required", "missing", f"add for example `{example}`" if example else "add it"
    if kind == "extra_forbidden":
        return "is not a known key of this table", got, nearest(key, fields)
    if kind == "union_tag_not_found":
        return "is required", "missing", f"add `{key} = ...`"
    if kind in ("union_tag_invalid", "literal_error"):
        return _choice(error, got)
    if kind in ("too_short", "too_long"):
        return _length(kind, error["ctx"], len(error["input"]))
    if kind in _BOUNDS:
        rule, remedy = _BOUNDS[kind]
        return rule.format(**{name: _number(bound) for name, bound in error["ctx"].items()}), got, remedy
    rule, remedy = _of_kind(error, key)
    return rule, got, f"write for example `{example}`" if example else remedy


def _of_kind(error: Mapping[str, Any], key: str) -> tuple[str, str]:
    """Rule and remedy where a value is of the wrong kind."""
    kind = error["type"]
    if kind == "float_type" and type(error["input"]) is int:
        return "must be a number of reasonable size", "correct it"
    if kind == "dict_type":
        return "must be a table", f"write `{key} = {{ UNIT = ... }}`"
    if kind in _MUST_BE:
        return f"must be {_MUST_BE[kind]}", f"write {_MUST_BE[kind]}"
    return error["msg"][0].lower() + error["msg"][1:], "correct it"


def _choice(error: Mapping[str, Any], got: str) -> Words:
    """A key that takes one word of a list."""
    context = error["ctx"]
    known = re.findall(r"'([^']+)'", context.get("expected_tags") or context["expected"])
    quoted = ", ".join(f'"{one}"' for one in known)
    if len(known) == 1:
        return f"must be {quoted}", got, f"write {quoted}"
    given = context.get("tag", error["input"])
    remedy = nearest(given, known) if isinstance(given, str) else ""
    return f"must be one of {quoted}", got, remedy if remedy.startswith("did") else "choose one of these"


def _length(kind: str, context: Mapping[str, Any], entries: int) -> Words:
    """An array with too few or too many entries."""
    if kind == "too_long":
        return f"must have at most {context['max_length']:,} entries", f"got {entries:,}", "remove some"
    if context["min_length"] == 1:
        return "must not be empty", "got []", "add an entry"
    return f"must have at least {context['min_length']:,} entries", f"got {entries:,}", "add the others"


def _number(bound: Any) -> str:
    if isinstance(bound, float):
        return f"{bound:,.9f}".rstrip("0").rstrip(".")
    return f"{bound:,}" if isinstance(bound, int) else str(bound)


def _example(field: FieldInfo | None, key: str) -> str | None:
    """How the key may be written; keys that name their unit serve stays and delays alike."""
    if field is not None and field.examples:
        return field.examples[0]
    values = {"mean": "3.9", "rates": "[0.8, 0.2]"}
    known = [value for start, value in values.items() if field and key.startswith(f"{start}_")]
    return f"{key} = {known[0]}" if known else None


def count(whole: int) -> str:
    """A count, in full or, where it is vast, as a power of ten."""
    return f"{whole:,}" if whole < 10**12 else f"about 10^{len(str(whole)) - 1}"


def about(seconds: float) -> str:
    """An estimated length of time."""
    return "less than a second" if seconds < 1 else f"about {duration(seconds)}"


def duration(seconds: float) -> str:
    """A length of time as a person says it."""
    if seconds < 90:
        return f"{seconds:.0f} s"
    if seconds < 5400:
        return f"{seconds / 60:.0f} min"
    return f"{seconds / 3600:.1f} h"


_HIDDEN = (
    "\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069"  # they change the direction of what follows
)


def visible(text: str) -> str:
    """A text in which nothing acts unseen: control characters, and those that turn text round, as escapes."""
    return "".join(
        f"\\u{ord(one):04x}" if one in _HIDDEN or unicodedata.category(one) in ("Cc", "Cs") else one
        for one in text
    )


def in_spreadsheet(text: str) -> str:
    """A text as a cell of a CSV file: one that a spreadsheet would take for a formula gets an apostrophe before it."""
    return f"'{text}" if text[:1] in ("=", "+", "-", "@", "\t", "\r") else text
