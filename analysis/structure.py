"""What the solved cells of a game show of its structure, and what theory promises from it.

Where a unit's utilisation rises strictly in its own threshold and never rises in the others', its distance
from a target has single crossing differences (Milgrom & Shannon, "Monotone comparative statics", 1994): a
higher threshold that is preferred stays so as the others open. Then its least and greatest best replies never
fall, a pure equilibrium exists, and there is a least and a greatest one (Topkis, "Equilibrium points in
nonzero-sum n-person submodular games", 1979; both from memory). If each rise exceeds the tolerance, the same
holds of replies and equilibria within the tolerance: of two thresholds, a preference for the higher by more
than the tolerance is kept as the others open, on one side of the target because the rise is too large to
vanish, across it because the sum of the two utilisations only falls. On a plateau below the target the least
reply may fall, above it the greatest, so a plateau voids the promise.

All of it is a statement on the cells at hand: on every cell of a table, or on those that a search visited.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from analysis.anarchy import cost_of_selfishness
from analysis.confidence import Estimate
from analysis.equilibria import DEFAULT_TOLERANCE, Profile, as_costs
from analysis.goals import Sense
from analysis.payoffs import PayoffTable

ROUNDING = 1e-10  # a chain's utilisations are not told apart below this
TOLERANCES = (0.0, 1e-9, 1e-6, 1e-4, 1e-3)
MOST_WITNESSES = 5


@dataclass(frozen=True)
class Cells:
    """Solved cells of a game, each once, in any order.

    shape: strategies of each player. profiles: strategy numbers, (cells, players). utilisation, costs: of each
    player, (cells, players). welfare: a day, (cells,), of the given sense. of_distances: whether every cost is the
    distance of a utilisation from its target, which is what single crossing speaks of.
    """

    shape: tuple[int, ...]
    profiles: np.ndarray
    utilisation: np.ndarray
    costs: np.ndarray
    welfare: np.ndarray
    welfare_sense: Sense
    of_distances: bool = True

    @property
    def is_complete(self) -> bool:
        """Whether every cell of the table is here."""
        return len(self.profiles) == math.prod(self.shape)

    def profile(self, row: int) -> Profile:
        """The profile of a row."""
        return tuple(map(int, self.profiles[row]))


def cells_of(table: PayoffTable) -> Cells:
    """Every cell of an exact table whose players choose one threshold each."""
    shape = table.profiles.shape
    profiles = np.stack(np.unravel_index(np.arange(table.profiles.cells), shape), axis=1)
    costs = as_costs(table.payoffs, table.goal.sense).reshape(len(shape), -1).T
    sense = table.welfare_goal.sense
    return Cells(
        shape,
        profiles,
        table.outcomes.utilisation,
        costs,
        table.welfare.ravel(),
        sense,
        table.goal.is_distance,
    )


@dataclass(frozen=True)
class Step:
    """Two cells compared: how much higher a number of `player` is in the upper one than in the lower one."""

    player: int
    lower: Profile
    upper: Profile
    change: float


@dataclass(frozen=True)
class Trend:
    """How a number changes from lower to upper cells.

    comparisons: how many pairs. rises, level, falls: how many of each. least, most: the steps with the least
    and the greatest change, None without a pair. failing: a few steps that break the rule asked for.
    """

    comparisons: int = 0
    rises: int = 0
    level: int = 0
    falls: int = 0
    least: Step | None = None
    most: Step | None = None
    failing: tuple[Step, ...] = ()


@dataclass(frozen=True)
class AtTolerance:
    """The equilibria within one tolerance: how many, the least and the greatest where there are such, the price.

    Where cells are missing, the number is of those that can be certified, and it and the price are lower bounds.
    """

    tolerance: float
    equilibria: int
    least: Profile | None
    greatest: Profile | None
    price_of_anarchy: Estimate


@dataclass(frozen=True)
class Structure:
    """What the cells show.

    own: utilisation over neighbours in the own threshold; it is strict where every step rises by more than
    the tolerance. others: over pairs where others' thresholds rise and the own one stays. replies: the least
    and the greatest replies over pairs of the others' thresholds.
    """

    cells: int
    of_cells: int
    tolerance: float
    rounding: float
    own: Trend
    others: Trend
    replies: Trend
    at_tolerances: tuple[AtTolerance, ...]
    of_distances: bool = True

    @property
    def is_complete(self) -> bool:
        """Whether every cell of the table was at hand."""
        return self.cells == self.of_cells

    @property
    def single_crossing(self) -> bool:
        """Whether the costs are distances from targets and, at every comparison, utilisation rose in the own threshold
        and never in the others'."""
        crossing = self.own.rises == self.own.comparisons and self.others.rises == 0
        return self.of_distances and crossing

    @property
    def replies_monotone(self) -> bool:
        """Whether the least and the greatest reply never fell."""
        return self.replies.falls == 0

    @property
    def promises_equilibrium(self) -> bool:
        """Whether theory promises a pure equilibrium: only where the whole table shows monotone replies."""
        return self.is_complete and (self.single_crossing or self.replies_monotone)

    @property
    def here(self) -> AtTolerance:
        """The equilibria at the game's own tolerance."""
        return next(one for one in self.at_tolerances if one.tolerance == self.tolerance)


def structure_of(
    cells: Cells, *, tolerance: float = DEFAULT_TOLERANCE, rounding: float = ROUNDING
) -> Structure:
    """What the cells show of monotone utilisation and replies, and the equilibria at several tolerances.

    tolerance: of the game, in the goal's unit. rounding: changes of a utilisation up to this size count as none.
    """
    players = range(len(cells.shape))
    replies, regrets = zip(
        *(_replies_and_regrets(cells, player, tolerance) for player in players), strict=True
    )
    return Structure(
        len(cells.profiles),
        math.prod(cells.shape),
        tolerance,
        rounding,
        own=_joined(_own(cells, player, max(tolerance, rounding), rounding) for player in players),
        others=_joined(part for player in players for part in _others(cells, player, rounding)),
        replies=_joined(replies),
        at_tolerances=tuple(
            _at_tolerance(cells, np.stack(regrets, axis=1), one) for one in sorted({*TOLERANCES, tolerance})
        ),
        of_distances=cells.of_distances,
    )


def _own(cells: Cells, player: int, least_rise: float, rounding: float) -> Trend:
    lower, upper = _neighbours(cells.profiles, player)
    change = cells.utilisation[upper, player] - cells.utilisation[lower, player]
    return _trend(cells, player, (lower, upper), change, (-rounding, least_rise), change <= least_rise)


def _others(cells: Cells, player: int, rounding: float) -> Iterator[Trend]:
    """One part for each own strategy: pairs of cells that have it."""
    for own in range(cells.shape[player]):
        rows = np.flatnonzero(cells.profiles[:, player] == own)
        others = np.delete(cells.profiles[rows], player, axis=1)
        lower, upper = (rows[places] for places in _ordered_pairs(others, cells.is_complete))
        change = cells.utilisation[upper, player] - cells.utilisation[lower, player]
        yield _trend(cells, player, (lower, upper), change, (-rounding, rounding), change > rounding)


def _replies_and_regrets(cells: Cells, player: int, tolerance: float) -> tuple[Trend, np.ndarray]:
    """How the player's least and greatest replies move, and the regret in each cell, NaN where it is not known."""
    rows = _columns(cells, player)
    costs = cells.costs[rows, player]
    regret = costs - costs.min(axis=1, keepdims=True)
    known = np.full(len(cells.profiles), np.nan)
    known[rows] = regret
    is_best = regret <= tolerance
    least = is_best.argmax(axis=1)
    greatest = cells.shape[player] - 1 - is_best[:, ::-1].argmax(axis=1)
    others = np.delete(cells.profiles[rows[:, 0]], player, axis=1)
    lower, upper = _ordered_pairs(others, cells.is_complete)
    trends = []
    for reply in (least, greatest):
        at = rows[np.arange(len(rows)), reply]
        change = reply[upper] - reply[lower]
        trends.append(_trend(cells, player, (at[lower], at[upper]), change, (0, 0), change < 0))
    return _joined(trends), known


def _columns(cells: Cells, player: int) -> np.ndarray:
    """The rows of every whole column, all strategies of the player against fixed others: (columns, strategies)."""
    strategies = cells.shape[player]
    others = np.delete(cells.profiles, player, axis=1)
    order = np.lexsort((cells.profiles[:, player], *others.T))
    others = others[order]
    starts = np.flatnonzero(np.r_[True, (others[1:] != others[:-1]).any(axis=1)])
    whole = starts[np.diff(np.r_[starts, len(order)]) == strategies]
    return order[whole[:, None] + np.arange(strategies)]


def _ordered_pairs(points: np.ndarray, is_complete: bool) -> tuple[np.ndarray, np.ndarray]:
    """Pairs of points (points, axes), the first nowhere above the second and not equal to it.

    On a complete grid neighbours along each axis are enough, the rest follows; else every such pair.
    """
    if is_complete:
        steps = [_neighbours(points, axis) for axis in range(points.shape[1])]
        empty = np.empty(0, int)
        return tuple(np.concatenate([empty, *parts]) for parts in zip(*steps, strict=True)) or (empty, empty)
    below = ~np.eye(len(points), dtype=bool)
    for along in points.T:
        below &= along[:, None] <= along[None, :]
    return np.nonzero(below)


def _neighbours(points: np.ndarray, axis: int) -> tuple[np.ndarray, np.ndarray]:
    """Pairs of points next to each other, among those at hand, on a line along the axis."""
    others = np.delete(points, axis, axis=1)
    order = np.lexsort((points[:, axis], *others.T))
    same = (others[order[1:]] == others[order[:-1]]).all(axis=1)
    return order[:-1][same], order[1:][same]


def _trend(
    cells: Cells,
    player: int,
    pairs: tuple[np.ndarray, np.ndarray],
    change: np.ndarray,
    level: tuple[float, float],
    fails: np.ndarray,
) -> Trend:
    """pairs: rows of the lower and of the upper cells. level: what counts as no change. fails: by pair."""
    if not len(change):
        return Trend()

    def step(place: int) -> Step:
        lower, upper = (cells.profile(rows[place]) for rows in pairs)
        return Step(player, lower, upper, float(change[place]))

    rises, falls = int((change > level[1]).sum()), int((change < level[0]).sum())
    return Trend(
        len(change),
        rises,
        len(change) - rises - falls,
        falls,
        step(int(change.argmin())),
        step(int(change.argmax())),
        tuple(map(step, np.flatnonzero(fails)[:MOST_WITNESSES].tolist())),
    )


def _joined(trends: Iterable[Trend]) -> Trend:
    """Several trends as one."""
    parts = [trend for trend in trends if trend.comparisons]
    if not parts:
        return Trend()
    counts = (
        sum(getattr(part, name) for part in parts) for name in ("comparisons", "rises", "level", "falls")
    )
    return Trend(
        *counts,
        min((part.least for part in parts), key=_change),
        max((part.most for part in parts), key=_change),
        tuple(step for part in parts for step in part.failing)[:MOST_WITNESSES],
    )


def _change(step: Step) -> float:
    return step.change


def certified(regrets: np.ndarray, tolerance: float) -> np.ndarray:
    """The rows that are equilibria: every regret known and within the tolerance. regrets: (cells, players)."""
    return np.flatnonzero((regrets <= tolerance).all(axis=1))  # NaN, not known, is not within


def regrets_of(cells: Cells) -> np.ndarray:
    """What each player gains at most by deviating alone, (cells, players); NaN where a deviation is not at hand."""
    return np.stack([_replies_and_regrets(cells, p, 0.0)[1] for p in range(len(cells.shape))], axis=1)


def _at_tolerance(cells: Cells, regrets: np.ndarray, tolerance: float) -> AtTolerance:
    rows = certified(regrets, tolerance)
    cost = cost_of_selfishness(cells.welfare, cells.welfare_sense, [(int(row),) for row in rows])
    found = cells.profiles[rows]
    ends = (_end(found, found.min(axis=0)), _end(found, found.max(axis=0))) if len(rows) else (None, None)
    return AtTolerance(tolerance, len(rows), *ends, cost.price_of_anarchy)


def _end(found: np.ndarray, bound: Sequence[int]) -> Profile | None:
    """The bound of all equilibria found, if it is one of them."""
    return tuple(map(int, bound)) if (found == bound).all(axis=1).any() else None
