"""A plan file: what a batch runs, of which scenarios, under which demand, targets and policies, in what order.

A plan is TOML, `schema = 1`. Its lists multiply: every scenario under every demand, target, policy and form of stays
is a part for every analysis. `[[parts]]` rows have lists of their own; what a row does not give it takes from the top.
"""

from __future__ import annotations

import difflib
import itertools
import math
import re
import shlex
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Annotated, Any, Literal, TypeVar

from pydantic import AfterValidator, Field, ValidationError

from sim.errors import Fault, ScenarioError
from sim.scenario.faults import Collector
from sim.scenario.load import read_toml
from sim.scenario.positions import key_lines
from sim.scenario.units import Line
from sim.tables import Positive, Row, Table, breach
from sim.wording import shown

MOST_PARTS = 1_000
LONGEST_FOLDER = 80
ANALYSES = ("simulate", "game")
_LISTS = ("scenarios", "demand", "targets", "policies", "exponential", "analyses")
_Key = tuple[str | int, ...]
T = TypeVar("T")


def _once(values: tuple[Any, ...]) -> tuple[Any, ...]:
    for place, value in enumerate(values):
        if value in values[:place]:
            raise breach("must not repeat an entry", f"{shown(value)} again", "remove it", key=(place,))
    return values


def _several(entry: Any, example: str) -> Any:
    form = Field(min_length=1, examples=[example])
    return Annotated[
        tuple[entry, ...] | None, Row, form, AfterValidator(lambda values: values and _once(values))
    ]


def known_schema(number: int) -> int:
    """A plan's `schema`, where it is one that is known."""
    if number != 1:
        raise breach("must be 1, the only form of plan files so far", shown(number), "write `schema = 1`")
    return number


class PartRow(Table):
    """One of `[[parts]]`: lists that multiply, and how soon it is wanted (1 before 2)."""

    name: Annotated[Line, Field(min_length=1, examples=['name = "winter"'])] | None = None
    scenarios: _several(Annotated[Line, Field(min_length=1)], 'scenarios = ["region.toml"]') = None
    demand: _several(Positive, "demand = [0.8, 1.0]") = None
    targets: _several(Annotated[float, Field(gt=0, le=1)], "targets = [0.7, 0.8]") = None
    policies: _several(Line, 'policies = ["close only when full"]') = None
    exponential: _several(bool, "exponential = [false, true]") = None
    analyses: _several(Literal["simulate", "game"], 'analyses = ["simulate", "game"]') = None
    replications: Annotated[int, Field(ge=1, le=1_000_000, examples=["replications = 40"])] | None = None
    priority: Annotated[int, Field(ge=1, le=1_000, examples=["priority = 1"])] = 1


class PlanFile(PartRow):
    """The whole file; beside `[[parts]]` its lists are what rows without their own take."""

    schema_: Annotated[int, Field(alias="schema", examples=["schema = 1"]), AfterValidator(known_schema)]
    title: Annotated[Line, Field(examples=['title = "Winter plans (invented)"'])] = ""
    parts: Annotated[
        tuple[PartRow, ...] | None,
        Row,
        Field(min_length=1, examples=['[[parts]]` with `scenarios = ["region.toml"]']),
    ] = None


@dataclass(frozen=True)
class Part:
    """One analysis of one network.

    name: of its folder. scenario: the file. None where something is as in the file. replications: the most a cell gets.
    places: what an option of `arguments` (or `scenario`) stands for in the plan.
    """

    analysis: str
    scenario: str
    demand: float | None = None
    target: float | None = None
    policy: str | None = None
    exponential: bool = False
    replications: int | None = None
    priority: int = 1
    name: str = ""
    places: Mapping[str, _Key] = field(default_factory=dict, compare=False, repr=False)

    @property
    def arguments(self) -> list[str]:
        """The command line that runs this part alone, without the program's name."""
        given = {"--demand": self.demand, "--target": self.target, "--policy": self.policy,
                 "--replications": self.replications}  # fmt: skip
        options = [(option, f"{value}") for option, value in given.items() if value is not None]
        return [
            self.analysis,
            self.scenario,
            *itertools.chain(*options),
            *(["--exponential"] * self.exponential),
        ]

    @property
    def reads(self) -> str:
        """The part in words: its own command line."""
        return shlex.join(self.arguments)


@dataclass(frozen=True)
class Plan:
    """A title and its parts in the order in which they are wanted, each with what was made of it."""

    title: str
    parts: tuple[tuple[Part, Any], ...]


def is_plan(path: str | Path) -> bool:
    """Whether a TOML file is a plan rather than a scenario, by its tables; ScenarioError where it cannot be read."""
    keys = set(read_toml(path)[1])
    if keys & {"units", "patients"} or not keys:
        return False
    return any(difflib.get_close_matches(key, ("parts", *_LISTS), n=1, cutoff=0.6) for key in keys)


def read_plan(path: str | Path, make: Callable[[Part], Any]) -> Plan:
    """The plan in a TOML file.

    make: what is to be made of each part; its ScenarioErrors become faults of the plan.
    Raises ScenarioError with every fault of the plan and of its scenarios.
    """
    text, data = read_toml(path)
    collector = Collector(data, key_lines(text))
    try:
        PlanFile.model_validate(data)
    except ValidationError as error:
        collector.add_all(error, PlanFile)
    made = _made(_expanded(collector, Path(path).parent), make, collector)
    if collector.faults:
        raise ScenarioError(
            sorted(collector.faults, key=lambda fault: (fault.line or 0, fault.key)), str(path)
        )
    return Plan(data.get("title", ""), tuple(_in_order(made)))


def plan_of_scenario(path: str | Path, make: Callable[[Part], Any]) -> Plan:
    """The plan that a scenario by itself stands for: its game's whole table."""
    [part] = _named([Part("game", str(path))])
    made = make(part)
    return Plan(made.scenario.title, ((part, made),))


def _in_order(made: list[tuple[Part, T]]) -> list[tuple[Part, T]]:
    names = _named([part for part, _ in made])
    pairs = [(part, thing) for part, (_, thing) in zip(names, made, strict=True)]
    return sorted(pairs, key=lambda pair: pair[0].priority)


# ---- from rows to parts ----


def _expanded(collector: Collector, folder: Path) -> list[Part]:
    """The parts of whatever rows and entries are sound."""
    rows: list[_Key] = [()]
    if isinstance(collector.value(("parts",)), list):
        rows = [("parts", place) for place in range(len(collector.value(("parts",))))]
    lists = [_lists(collector, row) for row in rows]
    size = sum(math.prod(len(entries) for entries in one.values()) for one in lists)
    if size > MOST_PARTS:
        collector.add(
            (),
            f"must give at most {MOST_PARTS:,} parts",
            f"got {size:,}",
            "split the plan, or shorten its lists",
        )
        return []
    return [
        part
        for row, one in zip(rows, lists, strict=True)
        for part in _multiplied(collector, row, one, folder)
    ]


def _lists(collector: Collector, row: _Key) -> dict[str, list[_Key | None]]:
    """Key -> the paths of its sound entries; [None] where nothing is given, so that it stays as in the file."""
    found: dict[str, list[_Key | None]] = {}
    for key in _LISTS:
        path = _given_at(collector, row, key)
        entries = collector.value(path) if collector.standing(path) else []
        if entries is None and key == "scenarios" and not collector.misspelt(key):
            collector.add(
                (*row, key), "is required", "missing", 'add for example `scenarios = ["region.toml"]`'
            )
        listed = isinstance(entries, list) and collector.standing(path)
        paths = [(*path, place) for place in range(len(entries))] if listed else []
        found[key] = [one for one in paths if collector.readable(one)]
        if entries is None and key != "scenarios":
            found[key] = [None]
    return found


def _given_at(collector: Collector, row: _Key, key: str) -> _Key:
    """Where a row's key stands: in the row, else at the top."""
    return (*row, key) if collector.value((*row, key)) is not None else (key,)


def _multiplied(
    collector: Collector, row: _Key, lists: Mapping[str, list[_Key | None]], folder: Path
) -> Iterator[Part]:
    def one(path: _Key | None, default: Any = None) -> Any:
        return default if path is None else collector.value(path)

    scalars = {key: _scalar(collector, row, key) for key in ("replications", "priority")}
    for analysis, targets in _with_targets(lists, collector.value):
        others = (targets if key == "targets" else lists[key] for key in _LISTS[:-1])
        for scenario, demand, target, policy, exponential in itertools.product(*others):
            places = {"scenario": scenario, "--demand": demand, "--target": target, "--policy": policy}
            yield Part(
                one(analysis, "game"), str(folder / one(scenario)), one(demand), one(target), one(policy),
                one(exponential, False), scalars["replications"], scalars["priority"] or 1,
                places={option: path for option, path in places.items() if path is not None},
            )  # fmt: skip


def _with_targets(
    lists: Mapping[str, list[_Key | None]], analysis_of: Callable[[_Key], Any]
) -> Iterator[tuple[_Key | None, list[_Key | None]]]:
    """Each analysis with the targets that it needs: one policy's measures depend on none."""
    for path in lists["analyses"]:
        simulated = path is not None and analysis_of(path) == "simulate"
        yield path, [None] if simulated else lists["targets"]


def _scalar(collector: Collector, row: _Key, key: str) -> Any:
    path = _given_at(collector, row, key)
    return collector.value(path) if collector.readable(path) else None


def _named(parts: Iterable[Part]) -> list[Part]:
    """The parts with names that can stand as folders, no two alike."""
    named, taken = [], set()
    for part in parts:
        stem = name = _folder_name(part)
        number = itertools.count(2)
        while name.casefold() in taken:
            name = f"{stem}-{next(number)}"
        taken.add(name.casefold())
        named.append(replace(part, name=name))
    return named


def _folder_name(part: Part) -> str:
    words = [Path(part.scenario).stem, part.analysis]
    words += [f"demand-{part.demand:g}"] if part.demand is not None else []
    words += [f"target-{part.target:g}"] if part.target is not None else []
    words += [part.policy] if part.policy is not None else []
    words += ["exponential"] if part.exponential else []
    return re.sub(r"[^\w.-]+", "-", "-".join(words)).strip("-.")[:LONGEST_FOLDER]


# ---- faults of what the parts name ----


def _made(parts: list[Part], make: Callable[[Part], T], collector: Collector) -> list[tuple[Part, T]]:
    """Each part with what was made of it; faults go to the entries that are behind them."""
    made = []
    for part in parts:
        try:
            made.append((part, make(part)))
        except ScenarioError as error:
            for fault in error.faults:
                _blame(collector, part, fault, error.file)
    return made


def _blame(collector: Collector, part: Part, fault: Fault, file: str) -> None:
    if fault.key in part.places:
        where = f"{fault.rule} ({part.scenario})"
        collector.add(part.places[fault.key], where, fault.value, fault.remedy)
        return
    place = f"{file}:{fault.line}: " if fault.line is not None else ""
    key = part.places.get("scenario", ("scenarios",))
    collector.add(key, f"{place}{fault.key}: {fault.rule}", fault.value, fault.remedy)
