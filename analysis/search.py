"""Equilibria by best-reply search, for games whose full table would be too dear.

From all-lowest, each player in turn takes its least best reply; from all-highest, its greatest. Where the
game is monotone the first path rises to the least pure equilibrium and the second falls to the greatest
(Topkis 1979; Milgrom & Roberts, "Rationalizability, learning, and equilibrium in games with strategic
complementarities", 1990; from memory); structure.py tells whether the visited cells show that. Every
equilibrium is certified by its regret over all of its players' own deviations, whatever the structure.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from analysis.anarchy import Cost, cost_of_selfishness
from analysis.equilibria import DEFAULT_TOLERANCE, Profile, as_costs
from analysis.goals import Goal, Welfare
from analysis.payoffs import EXACT_MEASURES, Outcomes, Profiles, exact_outcomes, measure_arrays
from analysis.structure import Cells, Structure, certified, regrets_of, structure_of
from sim.scenario import Policy, Scenario

MOST_VISITED = 20_000

Measures = Sequence[Mapping[str, float]]  # of each unit in scenario order, by name
Solver = Callable[[Sequence[Profile]], Iterable[Measures]]
End = Literal["lowest", "highest"]
Ending = Literal["equilibrium", "cycle", "stopped"]
ENDS: tuple[End, End] = ("lowest", "highest")


def chain_solver(scenario: Scenario, base: Policy, profiles: Profiles) -> Solver:
    """Solves cells by the exact chain, one by one, under `base` with what each cell's players choose."""
    from analysis.chain import solve

    def solved(wanted: Sequence[Profile]) -> Iterable[Measures]:
        for profile in wanted:
            units = solve(scenario, profiles.policy(base, profile)).units
            yield [vars(units[name]) for name in scenario.unit_names]

    return solved


class _Full(Exception):
    """As many cells are kept as may be."""


class Visited:
    """The cells solved so far, each solved once and kept.

    profiles: the axes. goal: what each player pursues. solver: gives the measures of new cells. most: cells
    that are kept at most. on_solved: told of each new cell.
    """

    def __init__(
        self,
        profiles: Profiles,
        goal: Goal,
        solver: Solver,
        *,
        most: int = MOST_VISITED,
        on_solved: Callable[[], None] = lambda: None,
    ) -> None:
        self.profiles, self._goal = profiles, goal
        self._solver, self._most, self._on_solved = solver, most, on_solved
        self._known: dict[Profile, list[dict[str, float]]] = {}

    def __len__(self) -> int:
        return len(self._known)

    def costs(self, wanted: Sequence[Profile]) -> np.ndarray:
        """Every player's cost in each cell, (cells, players); solves what is not known yet."""
        new = [profile for profile in wanted if profile not in self._known]
        if len(self._known) + len(new) > self._most:
            raise _Full
        kept = {*EXACT_MEASURES.values(), *self._goal.exact_measures}
        for profile, units in zip(new, self._solver(new), strict=True):
            self._known[profile] = [{name: float(unit[name]) for name in kept} for unit in units]
            self._on_solved()
        measures = measure_arrays([self._known[profile] for profile in wanted], self._goal.exact_measures)
        return as_costs(self._goal.exact(measures), self._goal.sense)

    def replies(self, profile: Profile, player: int, tolerance: float) -> np.ndarray:
        """The player's best replies to the others at a profile, ties within the tolerance included, rising."""
        every = [
            (*profile[:player], own, *profile[player + 1 :]) for own in range(self.profiles.shape[player])
        ]
        costs = self.costs(every)[:, player]
        return np.flatnonzero(costs - costs.min() <= tolerance)

    def outcomes(self) -> Outcomes:
        """What happens in each known cell, in the order in which they were solved."""
        return exact_outcomes(list(self._known.values()))

    def cells(self, welfare: Welfare) -> Cells:
        """The known cells, in the order in which they were solved."""
        outcomes, order = self.outcomes(), list(self._known)
        rates = (
            rate.sum(axis=-1) for rate in (outcomes.admitted, outcomes.turned_away, outcomes.diverted_out)
        )
        costs, worth = self.costs(order), welfare.value(*rates)
        return Cells(
            self.profiles.shape, np.array(order), outcomes.utilisation, costs, worth, welfare.sense,
            self._goal.is_distance,
        )  # fmt: skip


@dataclass(frozen=True)
class Walk:
    """A best-reply search from one end.

    path: the profile at the start and after each round. ended: at an equilibrium, in a cycle, or stopped.
    """

    start: End
    path: tuple[Profile, ...]
    ended: Ending

    @property
    def last(self) -> Profile:
        """Where it ended."""
        return self.path[-1]


@dataclass(frozen=True)
class Bracket:
    """Whether the two ends are shown, by the visited cells, to have every pure equilibrium between them.

    failing: why not, in words; empty where it is shown.
    """

    least: Profile | None
    greatest: Profile | None
    failing: tuple[str, ...]

    @property
    def shown(self) -> bool:
        """Whether the visited cells show it."""
        return not self.failing


@dataclass(frozen=True)
class Search:
    """What a best-reply search found; the cells are those visited, in the order in which they were solved.

    regrets: (cells, players), NaN where some deviation was not visited. equilibria: rows of the certified
    cells. cost: of these equilibria, its optimum the best visited; profiles in it are (row,). stopped: why
    the search ended early, None where it did not.
    """

    profiles: Profiles
    goal: Goal
    welfare_goal: Welfare
    tolerance: float
    cells: Cells
    outcomes: Outcomes
    walks: tuple[Walk, ...]
    regrets: np.ndarray
    equilibria: tuple[int, ...]
    cost: Cost
    structure: Structure
    bracket: Bracket
    stopped: str | None
    interrupted: bool

    @property
    def payoffs(self) -> np.ndarray:
        """Every player's payoff in each cell, (cells, players)."""
        return as_costs(self.cells.costs, self.goal.sense)  # the sign turns back


def best_reply_search(
    profiles: Profiles,
    goal: Goal,
    welfare: Welfare,
    solver: Solver,
    *,
    tolerance: float = DEFAULT_TOLERANCE,
    most_cells: int = MOST_VISITED,
    on_solved: Callable[[], None] = lambda: None,
) -> Search:
    """Searches from both ends and says what the visited cells show.

    solver: gives the measures of each unit for a list of profiles. tolerance: of a best reply and of an
    equilibrium, in the goal's unit. most_cells: the search stops before it keeps more. on_solved: called
    after each solved cell. Ctrl-C ends the search and keeps what is known; it passes on where that is nothing.
    """
    visited = Visited(profiles, goal, solver, most=most_cells, on_solved=on_solved)
    paths = {end: [_start(profiles.shape, end)] for end in ENDS}
    ended: dict[End, Ending] = dict.fromkeys(ENDS, "stopped")
    stopped, interrupted = None, False
    try:
        for end, path in paths.items():
            ended[end] = _walk(visited, end, path, tolerance)
    except _Full:
        stopped = f"the limit of {most_cells:,} visited cells was reached"
    except KeyboardInterrupt:
        stopped, interrupted = "interrupted", True
    if not len(visited):
        raise KeyboardInterrupt if interrupted else ValueError("most_cells leaves no room for one column")
    walks = tuple(Walk(end, tuple(paths[end]), ended[end]) for end in ENDS)
    return _result(visited, goal, welfare, walks, tolerance, stopped, interrupted)


def _start(shape: Sequence[int], end: End) -> Profile:
    return tuple(0 if end == "lowest" else strategies - 1 for strategies in shape)


def _walk(visited: Visited, end: End, path: list[Profile], tolerance: float) -> Ending:
    """Rounds of replies, player by player, added to the path until one changes nothing or comes back."""
    place = 0 if end == "lowest" else -1
    while True:
        profile = path[-1]
        for player in range(len(profile)):
            reply = int(visited.replies(profile, player, tolerance)[place])
            profile = (*profile[:player], reply, *profile[player + 1 :])
        if profile == path[-1]:
            return "equilibrium"
        path.append(profile)
        if profile in path[:-1]:
            return "cycle"


def _result(
    visited: Visited,
    goal: Goal,
    welfare: Welfare,
    walks: tuple[Walk, ...],
    tolerance: float,
    stopped: str | None,
    interrupted: bool,
) -> Search:
    cells = visited.cells(welfare)
    structure = structure_of(cells, tolerance=tolerance)
    regrets = regrets_of(cells)
    found = tuple(certified(regrets, tolerance).tolist())
    cost = cost_of_selfishness(cells.welfare, welfare.sense, [(row,) for row in found])
    return Search(
        visited.profiles, goal, welfare, tolerance, cells, visited.outcomes(), walks, regrets, found, cost,
        structure, _bracket(walks, structure), stopped, interrupted,
    )  # fmt: skip


def _bracket(walks: Sequence[Walk], structure: Structure) -> Bracket:
    ends = {walk.start: walk.last for walk in walks if walk.ended == "equilibrium"}
    return Bracket(ends.get("lowest"), ends.get("highest"), tuple(_gaps(ends, structure)))


def _gaps(ends: Mapping[End, Profile], structure: Structure) -> Iterable[str]:
    """What keeps the bracket from being shown."""
    for end in ENDS:
        if end not in ends:
            yield f"the search from all-{end} came to no equilibrium"
    own, others = structure.own, structure.others
    if not structure.of_distances:
        yield "a goal is not the distance of a utilisation from its target"
    if own.level:
        yield f"utilisation stood still in the own threshold at {own.level} of {own.comparisons} steps"
    if own.falls:
        yield f"utilisation fell in the own threshold at {own.falls} of {own.comparisons} steps"
    if others.rises:
        yield f"utilisation rose in the others' thresholds at {others.rises} of {others.comparisons} pairs"
    if structure.replies.falls:
        yield f"best replies fell at {structure.replies.falls} of {structure.replies.comparisons} pairs"
