"""A raced game, analysed: what its looks decided, what is left, and what selfish rules cost."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from analysis.confidence import Estimate
from analysis.equilibria import DEFAULT_TOLERANCE, best_responses
from analysis.games import POSSIBLE, GameAnalysis, Sets, allowed_regret, analyse, equilibrium_at, profiles_in
from analysis.noticing import yearly_spread
from analysis.payoffs import PayoffTable
from analysis.raced_prices import NO_LOOK, raced_cost, raced_turning
from analysis.raced_table import RacedTables, raced_table
from analysis.racing import FIRST, Race, judge, start
from analysis.sets import ConfirmedSet, PossibleSet, RegretBounds, spend


@dataclass
class Racing:
    """A race of a scenario's game while its runs arrive.

    most: replications that a cell may get. level: of both sets together. epsilon: as asked for; else the first look
    fixes it. seed: of the joint nulls. state: after the looks so far.
    """

    tables: RacedTables
    most: int
    level: float
    seed: int
    epsilon: float | None = None

    def __post_init__(self) -> None:
        self.asked = self.epsilon
        self.origin = ""
        self.spread: np.ndarray | None = None
        profiles = self.tables.profiles
        self.state = start(profiles.shape, len(profiles.players))

    @property
    def size(self) -> int | None:
        """Replications of the next look; None where the race is over."""
        return self.state.next_look(self.most)

    def look(self) -> Race:
        """The race after its next look, whose runs must be there."""
        size = self.size
        assert size is not None
        if self.spread is None:
            self._fix_epsilon(self.tables.at(FIRST, self.state.needed))
        evidence = self.tables.evidence(size, self.state.needed)
        assert self.epsilon is not None
        self.state = judge(self.state, evidence, epsilon=self.epsilon, level=self.level, seed=self.seed)
        return self.state

    def _fix_epsilon(self, table: PayoffTable) -> None:
        assert table.unadjusted is not None
        spread = yearly_spread(table.unadjusted, table.measured_days)
        self.epsilon, self.origin = allowed_regret(self.asked, spread)
        self.spread = spread


def analyse_raced(racing: Racing, *, tolerance: float = DEFAULT_TOLERANCE) -> GameAnalysis:
    """The game after at least one look. Listed is every possible profile; each verdict is of its own last look."""
    race, level = racing.state, racing.level
    looks = racing.tables.of_looks(race)
    shape, confidence = race.shape, 1 - level
    table = raced_table(looks, race.replications.reshape(shape), confidence)
    sets, regret = _sets(racing), race.regret.reshape(-1, *shape)
    listed = profiles_in(sets.possible.mask)
    found = [one for one in listed if (regret[(slice(None), *one)] <= tolerance).all()]
    return GameAnalysis(
        table,
        tuple(equilibrium_at(table, profile, regret, sets, confidence) for profile in listed),
        tuple(best_responses(table.payoffs, table.goal.sense, tolerance=tolerance)),
        raced_cost(table, looks, sets.possible.mask, found, level),
        raced_turning(table, found),
        tolerance,
        confidence,
        tuple(found),
        sets,
        race,
    )


def _sets(racing: Racing) -> Sets:
    """Both sets as the looks left them, each at half the level."""
    race, (for_possible, for_confirmed) = racing.state, spend(racing.level)
    assert racing.epsilon is not None and racing.spread is not None

    def laid_out(cells: np.ndarray) -> np.ndarray:
        return cells.reshape(*cells.shape[:-1], *race.shape)

    last = race.looks[-1]
    return Sets(
        PossibleSet(
            laid_out(race.possible), laid_out(race.statistic), last.critical, for_possible, last.number,
            laid_out(race.dropped),
        ),
        ConfirmedSet(laid_out(race.confirmed), laid_out(race.p), racing.epsilon, for_confirmed),
        RegretBounds(laid_out(race.low), laid_out(race.high)),
        racing.origin,
        racing.spread,
    )  # fmt: skip


def analyse_unlooked(racing: Racing, *, tolerance: float = DEFAULT_TOLERANCE) -> GameAnalysis:
    """The game of a race that ended before its first look: the table of what is there, and nothing decided.

    At least one replication must be there for every cell.
    """
    tables = racing.tables
    rows = tables.sums.complete
    everywhere = np.ones(tables.profiles.cells, bool)
    table = tables.at(int(rows[-1]) + 1, everywhere)
    whole = analyse(
        table, tolerance=tolerance, confidence=1 - racing.level, epsilon=racing.epsilon, seed=racing.seed
    )
    state = replace(racing.state, replications=np.full(len(everywhere), len(rows)))
    return replace(whole, race=state, **_undecided(whole))


def _undecided(whole: GameAnalysis) -> dict[str, Any]:
    """What has to be replaced so that no set and no price says anything: no look has spent any level."""

    def bare(one: Estimate) -> Estimate:
        return Estimate(one.mean, reason=one.reason or NO_LOOK)

    cost = whole.cost
    prices = {
        name: bare(getattr(cost, name))
        for name in ("price_of_anarchy", "price_of_stability", "lost_per_year")
    }
    told: dict[str, Any] = {
        "cost": replace(cost, **prices),
        "turning": replace(whole.turning, low=None, high=None),
    }
    if whole.sets is None:
        return told
    sets = whole.sets
    nothing = replace(sets.confirmed, mask=np.zeros_like(sets.confirmed.mask))
    everything = replace(sets.possible, mask=np.ones_like(sets.possible.mask))
    unbounded = RegretBounds(np.zeros_like(sets.bounds.low), np.full_like(sets.bounds.high, np.inf))
    told["sets"] = replace(sets, confirmed=nothing, possible=everything, bounds=unbounded)
    told["equilibria"] = tuple(
        replace(one, verdict=POSSIBLE, regret={player: bare(regret) for player, regret in one.regret.items()})
        for one in whole.equilibria
    )
    return told
