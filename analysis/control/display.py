"""The best rule as a person reads it: a grid of letters for two units, a row a state for any number."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from analysis.control.rule import ControlResult
from analysis.control.states import Choice, ControlProblem, Places, Stream
from sim.wording import in_spreadsheet

if TYPE_CHECKING:
    import pandas as pd

HOME, AWAY = "H", "-"


@dataclass(frozen=True)
class RuleMap:
    """What is done with the arrivals of some groups, by occupied beds of the first and of the second unit.

    groups: those of one home and mean stay, for whom the rule is the same. rows: a row for each number of
    occupied beds of the first unit, from 0, and in it a letter for each of the second. letters: their meaning.
    """

    groups: tuple[str, ...]
    home: str
    rows: tuple[str, ...]
    letters: dict[str, str]

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return {
            "groups": list(self.groups),
            "home": self.home,
            "rows": list(self.rows),
            "letters": self.letters,
        }


def rule_maps(result: ControlResult) -> list[RuleMap]:
    """A map for each kind of arrival; none where two numbers do not tell a state."""
    problem = result.problem
    units = [kind.unit for kind in problem.kinds]
    if len(units) != 2 or len(set(units)) != 2 or len(problem.beds) != 2:
        return []
    return [_map(result, alike) for alike in _alike(problem.streams)]


def _alike(streams: tuple[Stream, ...]) -> list[list[int]]:
    """The streams' numbers, those of one home and mean stay together."""
    found: dict[tuple[str, float], list[int]] = {}
    for number, stream in enumerate(streams):
        found.setdefault((stream.home, stream.mean_stay_days), []).append(number)
    return list(found.values())


def _map(result: ControlResult, alike: list[int]) -> RuleMap:
    problem, first = result.problem, alike[0]
    stream = problem.streams[first]
    letters = [_letter(choice, stream.home, list(problem.beds)) for choice in stream.choices]
    shape = [beds + 1 for beds in problem.beds.values()]
    grid = np.array(letters)[result.rule[first]].reshape(shape)
    meaning = dict(zip(letters, map(_reads, stream.choices), strict=True))
    groups = tuple(problem.streams[number].group for number in alike)
    return RuleMap(groups, stream.home, tuple("".join(row) for row in grid.tolist()), meaning)


def _letter(choice: Choice, home: str, units: list[str]) -> str:
    """H for the home, the unit's initial where it can mean nothing else, its number in the file otherwise."""
    if choice is None:
        return AWAY
    if choice == home:
        return HOME
    initials = [name[0].upper() for name in units]
    own = choice[0].upper()
    plain = own.isalpha() and own.isascii() and own != HOME and initials.count(own) == 1
    return own if plain else str(units.index(choice) + 1)


def _reads(choice: Choice) -> str:
    return "turned away" if choice is None else choice


def rule_frame(result: ControlResult) -> pd.DataFrame:
    """The rule, one row a state: patients by unit (and mean stay there, where it tells them), action by group."""
    import pandas as pd

    problem = result.problem
    columns: dict[str, Any] = dict(zip(_kind_names(problem), problem.patients.T, strict=True))
    for stream, chosen in zip(problem.streams, result.rule, strict=True):
        columns[f"action {stream.group}"] = _words(stream, chosen)
    return pd.DataFrame(columns)


def _kind_names(problem: ControlProblem) -> Iterator[str]:
    units = [kind.unit for kind in problem.kinds]
    for kind in problem.kinds:
        stay = f", mean stay {1 / kind.discharge_rate:.6g} days" if units.count(kind.unit) > 1 else ""
        yield f"occupied {kind.unit}{stay}"


def _words(stream: Stream, chosen: Places) -> np.ndarray:
    return np.array([in_spreadsheet(_reads(choice)) for choice in stream.choices], dtype=object)[chosen]
