"""Racing: a game is sampled in growing looks, and only what is undecided is sampled further.

Looks come at 10, 20, 40, 80, ... replications; the j-th spends 6 / (pi j)^2 of the level, half each on the possible and
on the confirmed set, so that all looks together spend no more than the level, however often a run is stopped and
continued. The number of a look follows from its replications alone. Each look excludes profiles by step-down, drops a
strategy from a player's column where it is beaten there for sure, and confirms equilibria within epsilon; what is
excluded or confirmed is decided and never judged again. The next look needs undecided profiles and their deviations
that are not dropped; a cell that is left behind never comes back, so every comparison is paired, on the same
replications. Whole strategies that are beaten drop out as in races of models (Maron and Moore 1994, "Hoeffding races";
the looks' shares of the level as in sequential testing; both from memory).

A state is a pure function of the replications: one that is stopped and continued has the looks of one that is not.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import ndtri

from analysis.contrasts import Evidence
from analysis.sets import confirmed, possible, regret_bounds, spend

FIRST = 10  # replications of the first look


@dataclass(frozen=True)
class Look:
    """What one look found. number: from 1. replications: of every cell in it. cells: sampled up to it. runs: of the
    race so far. possible, confirmed, undecided: profiles after it. critical: of its step-down."""

    number: int
    replications: int
    cells: int
    runs: int
    possible: int
    confirmed: int
    undecided: int
    critical: float


@dataclass(frozen=True)
class Race:
    """A race after some looks; cells are numbered in scenario order.

    replications: int (cells,), of each cell at its last look. possible, confirmed: bool (cells,). dropped: bool
    (players, cells), no longer needed as that player's deviation. regret, low, high: (players, cells), paired estimate
    and bounds at the last look at which the profile was judged. statistic, p: (cells,), of that look, as in `sets`.
    """

    shape: tuple[int, ...]
    replications: np.ndarray
    possible: np.ndarray
    confirmed: np.ndarray
    dropped: np.ndarray
    regret: np.ndarray
    low: np.ndarray
    high: np.ndarray
    statistic: np.ndarray
    p: np.ndarray
    looks: tuple[Look, ...] = ()

    @property
    def undecided(self) -> np.ndarray:
        """Profiles that are possible and not confirmed, bool (cells,)."""
        return self.possible & ~self.confirmed

    @property
    def needed(self) -> np.ndarray:
        """Cells of the next look, bool (cells,): undecided profiles and their deviations that are not dropped."""
        open_ = self.undecided.reshape(self.shape)
        needed = open_.copy()
        for player, dropped in enumerate(self.dropped):
            needed |= open_.any(axis=player, keepdims=True) & ~dropped.reshape(self.shape)
        return needed.ravel()

    @property
    def runs(self) -> int:
        """Runs that the looks so far have used."""
        return int(self.replications.sum())

    @property
    def reached(self) -> int:
        """Replications of the last look; 0 before the first."""
        return self.looks[-1].replications if self.looks else 0

    @property
    def runs_of_full_table(self) -> int:
        """Runs of a table with the last look's replications in every cell."""
        return self.reached * len(self.possible)

    @property
    def saved(self) -> float | None:
        """How many times fewer runs than the full table; None before the first look."""
        return self.runs_of_full_table / self.runs if self.looks else None

    def next_look(self, most: int) -> int | None:
        """Replications of the next look; None where all is decided or it would need more than `most`."""
        size = FIRST if not self.looks else 2 * self.reached
        return size if size <= most and self.needed.any() else None


def start(shape: tuple[int, ...], players: int) -> Race:
    """A race before its first look: everything is possible."""
    cells = int(np.prod(shape))
    nothing, none = np.zeros((players, cells)), np.zeros(cells, bool)
    return Race(
        shape, np.zeros(cells, int), ~none, none, np.zeros((players, cells), bool), nothing, nothing,
        np.full((players, cells), np.inf), np.full(cells, -np.inf), np.ones(cells),
    )  # fmt: skip


def look_sizes(most: int) -> Iterator[int]:
    """Replications of every look up to `most`."""
    size = FIRST
    while size <= most:
        yield size
        size *= 2


def judge(race: Race, evidence: Evidence, *, epsilon: float, level: float, seed: int) -> Race:
    """The race after one more look.

    evidence: of the next look's replications; cells that are not needed may be missing (NaN). epsilon: regret that an
    equilibrium may have, in the goal's unit. level: of the whole race. seed: of the look's joint null.
    """
    size, number = FIRST if not race.looks else 2 * race.reached, len(race.looks) + 1
    for_possible, for_confirmed = spend(level, look=number)
    judged, shape = race.undecided, race.shape
    rng = np.random.default_rng([seed, size])
    left = possible(evidence, for_possible, rng, alive=judged, dropped=race.dropped)
    dropped = race.dropped | left.beaten.reshape(race.dropped.shape)
    sure = confirmed(evidence, epsilon, for_confirmed, alive=left.mask, dropped=dropped)
    bounds = regret_bounds(evidence, for_confirmed, alive=judged, dropped=dropped)
    found = point_regrets(evidence, dropped)

    def at_judged(new: np.ndarray, old: np.ndarray) -> np.ndarray:
        return np.where(judged, new.reshape(old.shape), old)

    after = replace(
        race,
        replications=np.where(race.needed, size, race.replications),
        possible=at_judged(left.mask, race.possible),
        confirmed=race.confirmed | sure.mask.ravel(),
        dropped=dropped,
        regret=at_judged(found, race.regret),
        low=at_judged(bounds.low, race.low),
        high=at_judged(bounds.high, race.high),
        statistic=at_judged(left.statistic, race.statistic),
        p=at_judged(sure.p, race.p),
    )
    counts = (int(mask.sum()) for mask in (after.possible, after.confirmed, after.undecided))
    look = Look(number, size, int(race.needed.sum()), after.runs, *counts, left.critical)
    assert shape == evidence.shape
    return replace(after, looks=(*race.looks, look))


def point_regrets(evidence: Evidence, dropped: np.ndarray) -> np.ndarray:
    """The paired estimate of every player's regret against deviations that are there and not dropped, (players, cells);
    NaN where the profile itself is missing."""
    costs = evidence.costs
    rivals = np.where(np.isnan(costs) | dropped, np.inf, costs)
    regrets = [
        np.maximum(0.0, mine - others.reshape(evidence.shape).min(axis=player, keepdims=True))
        for player, (mine, others) in enumerate(zip(costs.reshape(-1, *evidence.shape), rivals, strict=True))
    ]
    return np.stack(regrets).reshape(costs.shape)


def race(
    evidence_at: Callable[[int, np.ndarray], Evidence],
    shape: tuple[int, ...],
    players: int,
    *,
    most: int,
    epsilon: float,
    level: float,
    seed: int = 0,
) -> Race:
    """A whole race. evidence_at: gives the first so many replications of the needed cells (bool, (cells,)).

    most: replications of a cell, from which on nothing more is sampled. See `judge` for the others.
    """
    state = start(shape, players)
    while (size := state.next_look(most)) is not None:
        state = judge(state, evidence_at(size, state.needed), epsilon=epsilon, level=level, seed=seed)
    return state


@dataclass(frozen=True)
class MoreNeeded:
    """About what an undecided race still takes, from present errors and gains; a coarse guess, not a promise.

    replications: at which the last undecided profile would be decided, if its estimates stayed as they are; None where
    they point to no decision. profiles: undecided ones for which they do not. runs: of what is needed now, up to there.
    """

    replications: int | None
    runs: int | None
    profiles: int


def more_needed(race: Race, *, level: float) -> MoreNeeded:
    """Each t grows as the square root of replications; the nearer of both decisions counts for each profile."""
    open_ = race.undecided
    if not race.looks:
        return MoreNeeded(None, None, int(open_.sum()))
    if not open_.any():
        return MoreNeeded(race.reached, 0, 0)
    next_level = spend(level, look=len(race.looks) + 1)[1] / len(open_)
    sure, critical = -ndtri(next_level), race.looks[-1].critical
    critical = critical if np.isfinite(critical) else sure
    score = np.maximum(-ndtri(race.p[open_]) / sure, race.statistic[open_] / critical)
    points = score > 0
    if not points.any():
        return MoreNeeded(None, None, len(score))
    times = float(np.max(1 / np.square(np.minimum(score[points], 1.0))))
    at = int(min(np.ceil(race.reached * max(times, 1.0)), 1e15))
    size = race.reached
    while size < at:
        size *= 2
    runs = int(race.needed.sum()) * (max(size, 2 * race.reached) - race.reached)
    return MoreNeeded(max(size, 2 * race.reached), runs, int((~points).sum()))
