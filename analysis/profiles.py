"""The axes of a game's table: players, what each may choose, and the policy that a profile of choices makes."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from sim.errors import Fault, ScenarioError
from sim.scenario import Policy, Scenario
from sim.scenario.strategies import CLOSURE, INCOMING, PARAMETERS, listed_strategies

MOST_CELLS = 200_000
_KEYS = {field: key for key, field in PARAMETERS.items()}  # as the file names a parameter
_WORDS = {field: field.replace("_", " ") for field in PARAMETERS.values()}


@dataclass(frozen=True)
class Strategy:
    """What a player may choose: values of rule parameters for its units.

    choices: (unit, field of UnitRules, value), units in scenario order, parameters in the file's order.
    """

    choices: tuple[tuple[str, str, Any], ...]

    @property
    def rules(self) -> dict[str, dict[str, Any]]:
        """Unit -> field of UnitRules -> value."""
        rules: dict[str, dict[str, Any]] = {}
        for unit, field, value in self.choices:
            rules.setdefault(unit, {})[field] = value
        return rules

    @property
    def is_closure_of_one(self) -> bool:
        """Whether it is the closure threshold of a single unit and nothing else."""
        return len(self.choices) == 1 and self.choices[0][1] == CLOSURE

    @property
    def label(self) -> str:
        """Short text for tables and axes: parameters of a unit apart by `/`, units by a comma."""
        units = ("/".join(f"{value:g}" for value in mine.values()) for mine in self.rules.values())
        return ", ".join(units)

    def to_plain(self) -> Any:
        """As documents have it: a closure threshold bare, those of several units by unit, else by parameter too."""
        if self.is_closure_of_one:
            return self.choices[0][2]
        return {
            unit: mine[CLOSURE]
            if mine.keys() == {CLOSURE}
            else {_KEYS[field]: v for field, v in mine.items()}
            for unit, mine in self.rules.items()
        }


def closure(unit: str, threshold: int) -> Strategy:
    """The strategy of one unit that chooses its closure threshold."""
    return Strategy(((unit, CLOSURE, threshold),))


@dataclass(frozen=True)
class Profiles:
    """The axes of a table: players and their strategies, in scenario order. Cells are numbered in C order.

    strategies: of each player; a bare number is the closure threshold of the unit that has the player's name.
    units: every unit, in scenario order; default: the players. closures: the closure thresholds of units that
    choose none, by unit.
    """

    players: tuple[str, ...]
    strategies: tuple[tuple[Strategy, ...], ...]
    units: tuple[str, ...] = ()
    closures: tuple[tuple[str, int], ...] = ()

    def __post_init__(self) -> None:
        named = (
            tuple(one if isinstance(one, Strategy) else closure(player, one) for one in mine)
            for player, mine in zip(self.players, self.strategies, strict=True)
        )
        object.__setattr__(self, "strategies", tuple(named))
        object.__setattr__(self, "units", self.units or self.players)

    @property
    def shape(self) -> tuple[int, ...]:
        """Number of strategies of each player."""
        return tuple(len(mine) for mine in self.strategies)

    @property
    def cells(self) -> int:
        """Number of profiles."""
        return math.prod(self.shape)

    @cached_property
    def is_plain(self) -> bool:
        """Whether every unit plays by itself for its closure threshold, so that thresholds tell a profile."""
        closures_only = all(one.is_closure_of_one for mine in self.strategies for one in mine)
        return closures_only and self.players == self.units

    @cached_property
    def is_ordered(self) -> bool:
        """Whether every player chooses one threshold of one unit: what theory speaks of."""
        return not self.unordered

    @cached_property
    def unordered(self) -> tuple[str, ...]:
        """The players who choose more, or something else, than one threshold of one unit."""
        return tuple(
            player
            for player, mine in zip(self.players, self.strategies, strict=True)
            if any(len(one.choices) != 1 or one.choices[0][1] not in (CLOSURE, INCOMING) for one in mine)
        )

    @cached_property
    def labels(self) -> tuple[tuple[str, ...], ...]:
        """Every player's strategies as short texts."""
        return tuple(tuple(one.label for one in mine) for mine in self.strategies)

    def plain(self) -> dict[str, list[Any]]:
        """Player -> its strategies as documents have them."""
        return {
            p: [one.to_plain() for one in mine] for p, mine in zip(self.players, self.strategies, strict=True)
        }

    def reads(self, player: int) -> str:
        """What a player chooses, in the order of a label: `closure threshold of Ashgill`."""
        what = {
            unit: "/".join(_WORDS[field] for field in mine)
            for unit, mine in self.strategies[player][0].rules.items()
        }
        alike = len(set(what.values())) == 1
        said = (
            [f"{next(iter(what.values()))} of {', '.join(what)}"]
            if alike
            else [f"{w} of {u}" for u, w in what.items()]
        )
        runs_one = tuple(what) == (self.players[player],)
        return ", ".join(said) + ("" if runs_one else f" ({self.players[player]})")

    def chosen(self, profile: Sequence[int]) -> dict[str, Strategy]:
        """Player -> strategy, for a profile of strategy numbers."""
        return {
            player: mine[place]
            for player, mine, place in zip(self.players, self.strategies, profile, strict=True)
        }

    def thresholds(self, profile: Sequence[int]) -> dict[str, int]:
        """Unit -> closure threshold, for a profile of strategy numbers."""
        known = dict(self.closures) | {
            unit: value
            for one in self.chosen(profile).values()
            for unit, field, value in one.choices
            if field == CLOSURE
        }
        return {unit: known[unit] for unit in self.units}

    def policy(self, base: Policy, profile: Sequence[int]) -> Policy:
        """`base` with what a profile of strategy numbers chooses."""
        return _changed(base, self.chosen(profile).values())

    def policies(self, base: Policy) -> Iterator[Policy]:
        """The policy of every cell: `base` with what the cell's players choose."""
        return (_changed(base, chosen) for chosen in itertools.product(*self.strategies))


def _changed(base: Policy, chosen: Sequence[Strategy]) -> Policy:
    by_rule: dict[str, dict[str, Any]] = {}
    for strategy in chosen:
        for unit, field, value in strategy.choices:
            by_rule.setdefault(field, {})[unit] = value
    for field, values in by_rule.items():
        base = base.with_rule(field, values)
    return base


def profiles_of(scenario: Scenario, base: Policy | None = None) -> Profiles:
    """The axes that the scenario's game names; base: the policy whose rules stand where none are chosen (the file's).

    Raises ScenarioError where a player has too many strategies to list, or none.
    """
    base = base or scenario.policy()
    if faults := list(_faults(scenario, base)):
        raise ScenarioError(faults, scenario.source.file)
    choices, players = scenario.choices(), scenario.players()
    by_unit = {name: list(listed_strategies(mine, base.thresholds[name])) for name, mine in choices.items()}
    strategies = (
        tuple(_joined(units, one) for one in itertools.product(*(by_unit[name] for name in units)))
        for units in players.values()
    )
    fixed = ((name, base.thresholds[name]) for name, mine in choices.items() if CLOSURE not in mine)
    return Profiles(tuple(players), tuple(strategies), scenario.unit_names, tuple(fixed))


def _joined(units: Sequence[str], chosen: Sequence[tuple[tuple[str, Any], ...]]) -> Strategy:
    pairs = zip(units, chosen, strict=True)
    return Strategy(tuple((unit, field, value) for unit, mine in pairs for field, value in mine))


def _faults(scenario: Scenario, base: Policy) -> Iterator[Fault]:
    counts: Mapping[str, int] = scenario.strategies_of_players(base)
    for player, number in counts.items():
        if number > MOST_CELLS:
            rule, remedy = (
                f"must give a player at most {MOST_CELLS:,} strategies",
                "list fewer values for its units",
            )
            yield Fault(None, "game.strategies", rule, f"got {number:,} for {player}", remedy)
        if number == 0:
            rule = "must leave a player something to choose (incoming above closure thresholds are left out)"
            remedy = "list lower incoming thresholds, or raise the closure threshold"
            yield Fault(None, "game.strategies", rule, f"got nothing for {player}", remedy)


def nearest_profile(profiles: Profiles, present: Policy) -> tuple[int, ...]:
    """The strategy numbers nearest to the rules now in force, player by player; of two as near, the lower values."""

    def key(one: Strategy) -> tuple[Any, ...]:
        values = [value for _, _, value in one.choices]
        return (
            sum(abs(value - _in_force(present, unit, field)) for unit, field, value in one.choices),
            values,
        )

    return tuple(min(range(len(mine)), key=lambda place: key(mine[place])) for mine in profiles.strategies)


def _in_force(present: Policy, unit: str, field: str) -> float:
    rules = present.units[unit]
    return rules.incoming if field == INCOMING else getattr(rules, field)


# ---- in documents and tables ----


def chosen_at(profiles: Profiles, profile: Sequence[int]) -> dict[str, Any]:
    """`thresholds` (unit -> closure threshold) and, where these do not tell the profile, `strategies` by player."""
    thresholds = profiles.thresholds(profile)
    if profiles.is_plain:
        return {"thresholds": thresholds}
    strategies = {player: one.to_plain() for player, one in profiles.chosen(profile).items()}
    return {"thresholds": thresholds, "strategies": strategies}


def told(profiles: Profiles, profile: Sequence[int]) -> dict[str, Any]:
    """What tells a profile from others: its thresholds by unit, or its strategies by player where these do not."""
    chosen = chosen_at(profiles, profile)
    return chosen.get("strategies", chosen["thresholds"])


def chooses(profiles: Profiles) -> str:
    """What the players choose, in words."""
    return "; ".join(profiles.reads(player) for player in range(len(profiles.players)))


def text_of(plain: Any) -> str:
    """A strategy of a document as its label."""
    if not isinstance(plain, Mapping):
        return f"{plain:g}"
    units = (
        "/".join(map(text_of, one.values())) if isinstance(one, Mapping) else text_of(one)
        for one in plain.values()
    )
    return ", ".join(units)


def choice_columns(profiles: Profiles, cells: np.ndarray) -> dict[str, np.ndarray]:
    """A column for each player: `threshold NAME`, or `strategy NAME` with labels where it is more than that.

    cells: strategy numbers, (cells, players).
    """
    columns = {}
    for place, player in enumerate(profiles.players):
        mine = profiles.strategies[place]
        is_plain = all(one.is_closure_of_one for one in mine)
        values = np.array([one.choices[0][2] if is_plain else one.label for one in mine])
        columns[f"{'threshold' if is_plain else 'strategy'} {player}"] = values[cells[:, place]]
    return columns
