"""The game of a scenario, analysed: equilibria with their regret, best responses, optimum and prices."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from analysis.anarchy import Cost, TurningWeight, cost_of_selfishness, turning_weight
from analysis.confidence import ONE_REPLICATION, TIES_ON_FEW, Estimate, mean_estimate
from analysis.contrasts import evidence_of
from analysis.equilibria import (
    DEFAULT_TOLERANCE,
    BestResponse,
    Profile,
    best_responses,
    pure_equilibria,
    regrets,
)
from analysis.noticing import YEARS, noticeable_gain, yearly_spread
from analysis.payoffs import Outcomes, PayoffTable
from analysis.prices import projected_cost, projected_turning
from analysis.racing import Race
from analysis.sets import ConfirmedSet, PossibleSet, RegretBounds, confirmed, possible, regret_bounds, spend

EXACT, ESTIMATED, POSSIBLE, CONFIRMED = "exact", "estimated", "possible", "confirmed"


@dataclass(frozen=True)
class Equilibrium:
    """A profile where no player gains by deviating alone, as far as the table tells.

    regret: player -> the most that the player gains by deviating alone. welfare: a day.
    """

    profile: Profile
    thresholds: Mapping[str, int]
    verdict: str
    regret: Mapping[str, Estimate]
    welfare: Estimate
    kind: str = "pure"


@dataclass(frozen=True)
class Place:
    """What happens at one profile: rates a day and shares, by unit (or home) and over the network."""

    thresholds: Mapping[str, int]
    turned_away_per_day: Mapping[str, float]
    diverted_out_per_day: Mapping[str, float]
    closed_with_free_bed_fraction: Mapping[str, float]
    utilisation: Mapping[str, float]
    throughput_per_day: float


@dataclass(frozen=True)
class Sets:
    """What replications support: the two sets at half the level each, and every regret's bounds.

    origin: where epsilon comes from. spread: of a player's own measure over a year, (players, *shape).
    """

    possible: PossibleSet
    confirmed: ConfirmedSet
    bounds: RegretBounds
    origin: str
    spread: np.ndarray


@dataclass(frozen=True)
class GameAnalysis:
    """All that the table says. sets: None where it is exact, or of one replication. equilibria: where there are
    sets, every possible profile; else those of the table. found: the equilibria of the table as it stands. race: how a
    raced table came about, None for a whole one."""

    table: PayoffTable
    equilibria: tuple[Equilibrium, ...]
    best_responses: tuple[BestResponse, ...]
    cost: Cost
    turning: TurningWeight
    tolerance: float
    confidence: float
    found: tuple[Profile, ...] = ()
    sets: Sets | None = None
    race: Race | None = None

    @property
    def possible(self) -> np.ndarray | None:
        """Profiles that may be equilibria, bool (*shape); None without sets."""
        return None if self.sets is None else self.sets.possible.mask

    @property
    def confirmed(self) -> np.ndarray | None:
        """Profiles confirmed within epsilon, bool (*shape), possible ones or not; None without sets."""
        return None if self.sets is None else self.sets.confirmed.mask

    @property
    def undecided(self) -> tuple[Equilibrium, ...]:
        """The possible profiles that are not confirmed."""
        return tuple(one for one in self.equilibria if one.verdict == POSSIBLE)

    @property
    def is_exact(self) -> bool:
        """Whether the table comes from the exact chain."""
        return self.table.replicates is None

    def place(self, profile: Profile) -> Place:
        """What happens at a profile."""
        cell = int(np.ravel_multi_index(profile, self.table.profiles.shape))
        return place_at(self.table.outcomes, cell, self.table.profiles.thresholds(profile))


def place_at(outcomes: Outcomes, cell: int, thresholds: Mapping[str, int]) -> Place:
    """What happens in a cell, whose thresholds are given by player."""

    def by_unit(values: np.ndarray) -> dict[str, float]:
        return dict(zip(thresholds, values[cell].tolist(), strict=True))

    return Place(
        thresholds, by_unit(outcomes.turned_away), by_unit(outcomes.diverted_out), by_unit(outcomes.closed_free),
        by_unit(outcomes.utilisation), float(outcomes.admitted[cell].sum()),
    )  # fmt: skip


def analyse(
    table: PayoffTable,
    *,
    tolerance: float = DEFAULT_TOLERANCE,
    confidence: float = 0.95,
    epsilon: float | None = None,
    seed: int = 0,
) -> GameAnalysis:
    """The pure equilibria of the table, or what its replications say of them, and what they cost the network.

    tolerance: regret still allowed in an exact table, in the goal's unit, inclusive (the optimum's ties, in the
    welfare's unit, have a tolerance of their own). confidence: of both sets together, and of the paired intervals.
    epsilon: the regret up to which a simulated equilibrium is confirmed, in the goal's unit (default: the gain that
    takes a manager 10 years of own data to notice). seed: of the multipliers.
    """
    sense = table.goal.sense
    found = pure_equilibria(table.payoffs, sense, tolerance=tolerance)
    sets = _sets(table, confidence, epsilon, seed)
    listed = found if sets is None else profiles_in(sets.possible.mask)
    shape = table.profiles.shape
    network = [
        values.sum(axis=-1).reshape(shape)
        for values in (table.outcomes.turned_away, table.outcomes.diverted_out)
    ]
    cost = cost_of_selfishness(
        table.welfare,
        table.welfare_goal.sense,
        listed,
        replicates=table.welfare_replicates,
        degrees=table.degrees,
        confidence=confidence,
    )
    turning = turning_weight(*network, cost.worst)
    if sets is not None:
        known = (found, table, sets.possible.mask, 1 - confidence, seed)
        cost, turning = projected_cost(cost, *known), projected_turning(*known)
    regret = regrets(table.payoffs, sense)
    return GameAnalysis(
        table,
        tuple(equilibrium_at(table, profile, regret, sets, confidence) for profile in listed),
        tuple(best_responses(table.payoffs, sense, tolerance=tolerance)),
        cost,
        turning,
        tolerance,
        confidence,
        tuple(found),
        sets,
    )


def profiles_in(mask: np.ndarray) -> list[Profile]:
    """The profiles of a mask over the table's shape."""
    return [tuple(map(int, profile)) for profile in np.argwhere(mask)]


def _sets(table: PayoffTable, confidence: float, epsilon: float | None, seed: int) -> Sets | None:
    """Both sets, half the level each; None without at least two replications."""
    if table.replicates is None or len(table.replicates) < 2:
        return None
    evidence, (for_possible, for_confirmed) = evidence_of(table), spend(1 - confidence)
    spread = yearly_spread(table.unadjusted, table.measured_days)
    allowed, origin = allowed_regret(epsilon, spread)
    rng = np.random.default_rng([seed, len(table.replicates)])
    return Sets(
        possible(evidence, for_possible, rng),
        confirmed(evidence, allowed, for_confirmed),
        regret_bounds(evidence, for_confirmed),
        origin,
        spread,
    )


def allowed_regret(epsilon: float | None, spread: np.ndarray) -> tuple[float, str]:
    """Epsilon and where it comes from; spread: of a year, (players, *shape)."""
    if epsilon is not None:
        return epsilon, "asked for"
    return max(
        noticeable_gain(spread), DEFAULT_TOLERANCE
    ), f"the gain that takes a manager {YEARS:g} years to notice"


def equilibrium_at(
    table: PayoffTable, profile: Profile, regret: np.ndarray, sets: Sets | None, confidence: float
) -> Equilibrium:
    """A listed profile; regret: the point estimates, (players, *shape)."""
    players = table.profiles.players
    estimates = {
        player: regret_estimate(table, float(regret[(place, *profile)]), (place, *profile), sets)
        for place, player in enumerate(players)
    }
    return Equilibrium(
        profile,
        table.profiles.thresholds(profile),
        _verdict(table, profile, sets),
        estimates,
        welfare_estimate(table, profile, confidence),
    )


def _verdict(table: PayoffTable, profile: Profile, sets: Sets | None) -> str:
    if sets is None:
        return EXACT if table.replicates is None else ESTIMATED
    return CONFIRMED if sets.confirmed.mask[profile] else POSSIBLE


def welfare_estimate(table: PayoffTable, profile: Profile, confidence: float) -> Estimate:
    """The welfare a day at a profile, with its interval where it comes from replications."""
    if table.welfare_replicates is None:
        return Estimate(float(table.welfare[profile]))
    if table.welfare_low is not None and table.welfare_high is not None:
        return Estimate(
            *(float(one[profile]) for one in (table.welfare, table.welfare_low, table.welfare_high))
        )
    values = table.welfare_replicates[(slice(None), *profile)]
    return mean_estimate(values, confidence, degrees=table.degrees)


def regret_estimate(table: PayoffTable, point: float, place: tuple[int, ...], sets: Sets | None) -> Estimate:
    """A player's regret at a profile, `place` (player, *profile), around its point; from replications with bounds.

    The upper end holds for all profiles at once: with the set's confidence no profile's regret is above its
    players' largest.
    """
    if table.replicates is None:
        return Estimate(point)
    if sets is None:
        return Estimate(point, reason=ONE_REPLICATION)
    low, high = float(sets.bounds.low[place]), float(sets.bounds.high[place])
    if math.isinf(high):
        return Estimate(point, reason=TIES_ON_FEW)
    return Estimate(point, min(point, low), max(point, high))
