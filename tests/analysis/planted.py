"""Games whose utilisations are written down, and small networks solved cell by cell, for tests of the search."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from hypothesis import strategies as st

from analysis.chain import solve
from analysis.equilibria import Profile
from analysis.goals import TargetGoal, Welfare, goal_of, welfare_of
from analysis.payoffs import EXACT_MEASURES, PayoffTable, Profiles, exact_table, profiles_of
from analysis.search import Search, best_reply_search
from sim.scenario import Scenario
from tests.analysis.builders import memoryless


@dataclass
class Game:
    """A game of which every cell is known.

    measures: profile -> each unit's measures. asked: the profiles that a search has asked for, in order.
    """

    profiles: Profiles
    goal: TargetGoal
    welfare: Welfare
    measures: dict[Profile, list[dict[str, float]]]
    asked: list[Profile]

    @property
    def table(self) -> PayoffTable:
        """The full table."""
        cells = [self.measures[p] for p in itertools.product(*map(range, self.profiles.shape))]
        return exact_table(self.profiles, self.goal, self.welfare, cells)

    def solver(self, wanted: Sequence[Profile]) -> list[list[dict[str, float]]]:
        """The measures of the cells asked for."""
        self.asked += wanted
        return [self.measures[profile] for profile in wanted]

    def search(self, **how: Any) -> Search:
        """A best-reply search that solves its cells through `solver`."""
        return best_reply_search(self.profiles, self.goal, self.welfare, self.solver, **how)


def planted(utilisation: Any, targets: Sequence[float], admitted: Any = None) -> Game:
    """A game with these utilisations, (players, *shape), and patients admitted, (*shape), 1 a day by default.

    Strategies are thresholds 1, 2, ...; what else a chain would tell is 0.
    """
    utilisation = np.asarray(utilisation, float)
    players, *shape = utilisation.shape
    admitted = np.ones(shape) if admitted is None else np.asarray(admitted, float)
    names = tuple("ABCDEF"[:players])
    measures = {}
    for profile in itertools.product(*map(range, shape)):
        measures[profile] = [
            dict.fromkeys(EXACT_MEASURES.values(), 0.0)
            | {
                "utilisation": utilisation[(player, *profile)],
                "admissions_per_day": admitted[profile] / players,
            }
            for player in range(players)
        ]
    strategies = tuple(tuple(range(1, count + 1)) for count in shape)
    goal = TargetGoal(np.array(targets, float), "absolute", 365.0)
    return Game(Profiles(names, strategies), goal, Welfare("throughput"), measures, [])


def solved(scenario: Scenario) -> Game:
    """A small network with every cell solved by the exact chain."""
    profiles, policy = profiles_of(scenario), scenario.policy()
    measures = {}
    for profile in itertools.product(*map(range, profiles.shape)):
        units = solve(scenario, policy.with_thresholds(profiles.thresholds(profile))).units
        measures[profile] = [vars(units[name]) for name in scenario.unit_names]
    return Game(profiles, goal_of(scenario), welfare_of(scenario), measures, [])


def small_network(
    beds: Sequence[int], per_day: Sequence[float], targets: Sequence[float], resort: str, **of_units: Any
) -> Scenario:
    """A network of units A, B, ... with equal stays. of_units: further keys of the units, one value a unit."""
    units = [
        {"name": name, "beds": b, "per_day": rate, "target_utilisation": target}
        for name, b, rate, target in zip("ABC", beds, per_day, targets, strict=False)
    ]
    for key, values in of_units.items():
        for unit, value in zip(units, values, strict=True):
            unit[key] = min(value, unit["beds"]) if key == "incoming_threshold" else value
    return memoryless(*units, diversion={"when_all_closed": resort})


def monotone(weights: Sequence[np.ndarray]) -> np.ndarray:
    """Utilisations that never fall in the own and never rise in others' strategies, (players, *shape), 0 to 1.

    weights: non-negative, (*shape) for each player; the own steps are strict where all are positive.
    """
    rows = []
    for player, weight in enumerate(weights):
        total = np.cumsum(weight, axis=player)
        for axis in set(range(weight.ndim)) - {player}:
            total = np.flip(np.cumsum(np.flip(total, axis), axis=axis), axis)
        rows.append(total / max(1.0, total.max()))
    return np.array(rows)


@st.composite
def monotone_games(draw: st.DrawFn, least: int = 0) -> Game:
    """Two or three players with up to four strategies each; `least` 1 makes every own step strict."""
    shape = tuple(draw(st.lists(st.integers(1, 4), min_size=2, max_size=3)))
    size = int(np.prod(shape))
    numbers = st.lists(st.integers(least, 3), min_size=size, max_size=size)
    utilisation = monotone([np.reshape(draw(numbers), shape).astype(float) for _ in shape])
    targets = draw(st.lists(st.sampled_from(np.linspace(0, 1, 21)), min_size=len(shape), max_size=len(shape)))
    return planted(utilisation, targets)
