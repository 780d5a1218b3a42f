"""Numbers and names in words: every number with its interval, no name able to do anything but be read."""

from __future__ import annotations

import unicodedata
from collections.abc import Mapping, Sequence
from typing import Any

from sim.wording import visible

DAYS_A_YEAR = 365
EXACT = "exact"
OPEN, CLOSE = "\u2068", "\u2069"  # isolates: a name of another direction leaves the sentence in order
GAP = "to be filled in by the analyst: "
NEVER_SAID = (
    "optimal occupancy", "behaves selfishly", "lives saved", "units will settle at", "no difference",
    "safe to close", "validated",
)  # fmt: skip


def clean(value: Any) -> Any:
    """A document in which no text acts unseen: controls are shown as escapes, in keys too."""
    if isinstance(value, str):
        return visible(value)
    if isinstance(value, Mapping):
        return {visible(str(key)): clean(one) for key, one in value.items()}
    return [clean(one) for one in value] if isinstance(value, list | tuple) else value


def name(text: str) -> str:
    """A name as a sentence can hold it: right-to-left letters leave what stands around them in its place."""
    if any(unicodedata.bidirectional(letter) in ("R", "AL", "AN") for letter in text):
        return f"{OPEN}{text}{CLOSE}"
    return text


def estimate(value: Any, digits: int = 1, scale: float = 1.0, unit: str = "") -> str:
    """A number of a document: `62.2 (exact)`, `5.25 (5.23 to 5.28)`, or why there is none."""
    if not isinstance(value, Mapping):
        return "not known" if value is None else f"{_digits(value * scale, digits)}{unit} ({EXACT})"
    if value.get("mean") is None:
        return "not known" + _because(value)
    point = _digits(value["mean"] * scale, digits) + unit
    low, high = value.get("low"), value.get("high")
    if low is None and high is None:
        return f"{point} (no interval{_because(value)})"
    if high is None:
        return f"{point} ({_digits(low * scale, digits)} or more{_because(value)})"
    if low is None:
        return f"{point} ({_digits(high * scale, digits)} or less{_because(value)})"
    return f"{point} ({_digits(low * scale, digits)} to {_digits(high * scale, digits)})"


def between(value: Any, digits: int = 1, scale: float = 1.0) -> str | None:
    """`between 8.6 and 72.4`, or `62.2 (exact)`; None where there is no such statement."""
    if isinstance(value, Mapping):
        if value.get("low") is None or value.get("high") is None:
            return None
        return f"between {_digits(value['low'] * scale, digits)} and {_digits(value['high'] * scale, digits)}"
    return None if value is None else estimate(value, digits, scale)


def a_year(value: Any, digits: int = 1) -> str:
    """A rate a day as one a year."""
    return estimate(value, digits, DAYS_A_YEAR)


def share(value: Any, digits: int = 1) -> str:
    """A share from 0 to 1 in per cent."""
    return estimate(value, digits, 100.0, " %")


def point(value: float | None, digits: int = 1, scale: float = 1.0) -> str:
    """A bare number for a table whose caption says what it is."""
    return "-" if value is None else _digits(value * scale, digits)


def listed(words: Sequence[str], last: str = "and") -> str:
    """`a, b and c`."""
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} {last} {words[-1]}" if words else ""


def counted(number: int, noun: str, plural: str = "") -> str:
    """`1 unit`, `2 units`."""
    return f"{number} {noun if number == 1 else plural or noun + 's'}"


def sentence(text: str) -> str:
    """A statement with its full stop and a capital first letter."""
    text = text.strip()
    return (text[:1].upper() + text[1:]).rstrip(".") + "."


def profile(chosen: Mapping[str, Any]) -> str:
    """`Ashgill 5, Norbeck 7`; a strategy of several parameters in its own words."""
    return ", ".join(f"{name(who)} {_chosen(what)}" for who, what in chosen.items())


def _chosen(what: Any) -> str:
    if isinstance(what, Mapping):
        return (
            "(" + ", ".join(f"{str(key).replace('_', ' ')} {_chosen(one)}" for key, one in what.items()) + ")"
        )
    return f"{what:g}" if isinstance(what, float) else str(what)


def _digits(number: float, digits: int) -> str:
    text = f"{number:,.{digits}f}"
    return text[1:] if text.startswith("-") and not text.strip("-0.,") else text  # no minus before a zero


def _because(value: Mapping[str, Any]) -> str:
    reason = value.get("reason")
    return f": {reason}" if reason else ""
