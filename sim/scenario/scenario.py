"""`Scenario`: the frozen description of a network, and the ways to change it as a whole."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Annotated, Any

from pydantic import AfterValidator, Field, PrivateAttr

from sim.durations import Observed, observed, with_observed
from sim.scenario.diversion import Diversion
from sim.scenario.game import Game
from sim.scenario.patients import PatientGroup
from sim.scenario.policies import Policy, PolicyRow, policy_of_file
from sim.scenario.run import Run
from sim.scenario.strategies import CLOSURE, number_of_strategies
from sim.scenario.units import Line, Unit
from sim.tables import Row, Table, breach
from sim.wording import shown


@dataclass(frozen=True)
class Source:
    """Where a scenario came from. `data`: data file -> SHA-256 of its bytes."""

    file: str = ""
    text: str = ""
    data: Mapping[str, str] = field(default_factory=dict)


def _known_schema(number: int) -> int:
    if number != 1:
        rule = "must be 1, the only form of scenario files so far"
        raise breach(rule, shown(number), "write `schema = 1`")
    return number


class Scenario(Table):
    """A network, its patients, its rules and its game, as one scenario file describes them."""

    schema_: Annotated[int, Field(alias="schema", examples=["schema = 1"]), AfterValidator(_known_schema)]
    title: Annotated[Line, Field(examples=['title = "Two invented units"'])] = ""
    run: Annotated[Run, Field(examples=["[run]"])] = Run()
    units: Annotated[
        tuple[Unit, ...],
        Row,
        Field(min_length=1, max_length=200, examples=['[[units]]` with `name = "Ashgill"']),
    ]
    patients: Annotated[
        tuple[PatientGroup, ...],
        Row,
        Field(min_length=1, max_length=5_000, examples=['[[patients]]` with `group = "Ashgill emergencies"']),
    ]
    diversion: Annotated[Diversion, Field(examples=["[diversion]"])] = Diversion()
    game: Annotated[Game, Field(examples=["[game]"])] = Game()
    policies: Annotated[
        tuple[PolicyRow, ...], Row, Field(examples=['[[policies]]` with `name = "close only when full"'])
    ] = ()
    _source: Source = PrivateAttr(Source())

    @property
    def source(self) -> Source:
        """The file that this scenario was read from."""
        return self._source

    @property
    def unit_names(self) -> tuple[str, ...]:
        """The units' names in file order."""
        return tuple(unit.name for unit in self.units)

    def unit(self, name: str) -> Unit:
        """The unit of that name; KeyError where there is none."""
        return self.units[self.place_of(name)]

    def place_of(self, name: str) -> int:
        """A unit's place in file order; KeyError where there is none."""
        try:
            return self.unit_names.index(name)
        except ValueError:
            raise KeyError(name) from None

    def policy(self, name: str | None = None) -> Policy:
        """The file's own rules, or a named policy; KeyError where there is none of that name.

        A policy that changes beds is for `under(name)`, the network that has them.
        """
        own = policy_of_file(self.under(name).units, self.diversion.when_all_closed)
        return own if name is None else own.after(self._row(name))

    def under(self, name: str | None) -> Scenario:
        """The network that a named policy is for: with the beds and targets that its row gives, if any.

        The patients of a replication are the same. KeyError where there is no policy of that name.
        """
        if name is None:
            return self
        row = self._row(name)
        changes = {key: getattr(row, key) for key in ("beds", "target_utilisation")}
        if not any(changes.values()):
            return self
        return self.changed(units=tuple(_with(unit, changes) for unit in self.units))

    def _row(self, name: str) -> PolicyRow:
        return {row.name: row for row in self.policies}[name]

    def strategies(self) -> dict[str, tuple[int, ...]]:
        """Unit name -> the closure thresholds that it may choose in the game, for every unit that chooses one."""
        return {name: mine[CLOSURE] for name, mine in self.choices().items() if CLOSURE in mine}

    def choices(self) -> dict[str, dict[str, tuple[Any, ...]]]:
        """Unit name -> field of UnitRules -> the values that it may choose in the game."""
        chosen = self.game.strategies
        return {
            unit.name: chosen[unit.name].parameters()
            if unit.name in chosen
            else {CLOSURE: tuple(range(1, unit.beds + 1))}
            for unit in self.units
        }

    def players(self) -> dict[str, tuple[str, ...]]:
        """Player -> the units that it runs, both in file order of the units; a unit that no row names runs itself."""
        runs = {unit: row.name for row in self.game.players for unit in row.units}
        players: dict[str, list[str]] = {}
        for unit in self.unit_names:
            players.setdefault(runs.get(unit, unit), []).append(unit)
        return {name: tuple(units) for name, units in players.items()}

    def strategies_of_players(self, policy: Policy | None = None) -> dict[str, int]:
        """Player -> how many strategies it has, without listing them. policy: default the file's own rules."""
        closures, choices = (policy or self.policy()).thresholds, self.choices()
        return {
            player: math.prod(number_of_strategies(choices[unit], closures[unit]) for unit in units)
            for player, units in self.players().items()
        }

    def units_without_target(self) -> list[str]:
        """The units whose goal needs a target utilisation that they do not have."""
        return [
            unit.name
            for unit in self.units
            if unit.target_utilisation is None and self.game.goal_of(unit.name).needs_target
        ]

    def with_run(self, **changes: Any) -> Scenario:
        """The same scenario with other values in its run table (already checked)."""
        return self.changed(run=self.run.model_copy(update=changes))

    def with_demand(self, factor: float) -> Scenario:
        """Every arrival rate times `factor`; each patient keeps the other draws."""
        groups = (group.model_copy(update={"per_day": group.per_day * factor}) for group in self.patients)
        return self.changed(patients=tuple(groups))

    def with_target(self, target: float) -> Scenario:
        """Every unit's target utilisation set to `target`."""
        units = (unit.model_copy(update={"target_utilisation": target}) for unit in self.units)
        return self.changed(units=tuple(units))

    def observed(self) -> Observed:
        """Every record that stays and delays are taken from: (file, column) -> times."""
        durations = [*(group.stay for group in self.patients), self.diversion.delay]
        return {key: values for one in durations for key, values in observed(one).items()}

    def with_observed(self, records: Observed) -> Scenario:
        """The same scenario with other records in the place of its own, all of them: a resampling."""
        delay = self.diversion.delay
        groups = (
            group.model_copy(update={"stay": with_observed(group.stay, records)}) for group in self.patients
        )
        moved = None if delay is None else with_observed(delay, records)
        return self.changed(
            patients=tuple(groups), diversion=self.diversion.model_copy(update={"delay": moved})
        )

    def exponential(self) -> Scenario:
        """The exponential counterpart: exponential stays of the same means, transfers that take no time and
        add no days, constant demand. Closure rules stay as they are."""
        plain = self.diversion.model_copy(update={"delay": None, "extra_days": 0.0})
        groups = tuple(group.in_constant_exponential_form() for group in self.patients)
        return self.changed(patients=groups, diversion=plain)

    def changed(self, **tables: Any) -> Scenario:
        """The same scenario with other tables (already checked)."""
        copy = self.model_copy(update=tables)
        copy._source = self._source
        return copy

    def from_source(self, source: Source) -> Scenario:
        """The same scenario, knowing its file."""
        copy = self.model_copy()
        copy._source = dataclasses.replace(source)
        return copy


def _with(unit: Unit, changes: Mapping[str, Mapping[str, Any]]) -> Unit:
    """The unit with its own values of some keys, each given by unit name."""
    return unit.model_copy(
        update={key: named[unit.name] for key, named in changes.items() if unit.name in named}
    )
