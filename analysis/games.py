"""The game of a scenario, analysed: equilibria with their regret, best responses, optimum and prices."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from analysis.anarchy import Cost, TurningWeight, cost_of_selfishness, turning_weight
from analysis.confidence import ONE_REPLICATION, Estimate, critical_value, mean_estimate, standard_error
from analysis.equilibria import (
    DEFAULT_TOLERANCE,
    BestResponse,
    Profile,
    as_costs,
    best_responses,
    deviations,
    pure_equilibria,
    regrets,
)
from analysis.payoffs import Outcomes, PayoffTable

EXACT, ESTIMATED = "exact", "estimated"


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
class GameAnalysis:
    """All that the table says."""

    table: PayoffTable
    equilibria: tuple[Equilibrium, ...]
    best_responses: tuple[BestResponse, ...]
    cost: Cost
    turning: TurningWeight
    tolerance: float
    confidence: float

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
    table: PayoffTable, *, tolerance: float = DEFAULT_TOLERANCE, confidence: float = 0.95
) -> GameAnalysis:
    """The pure equilibria of the table and what they cost the network.

    tolerance: regret still allowed, in the goal's unit, inclusive (the optimum's ties, in the welfare's unit,
    have a tolerance of their own). confidence: of the paired intervals, each
    regret's Bonferroni over the player's deviations.
    """
    sense = table.goal.sense
    found = pure_equilibria(table.payoffs, sense, tolerance=tolerance)
    shape = table.profiles.shape
    network = [
        values.sum(axis=-1).reshape(shape)
        for values in (table.outcomes.turned_away, table.outcomes.diverted_out)
    ]
    cost = cost_of_selfishness(
        table.welfare,
        table.welfare_goal.sense,
        found,
        replicates=table.welfare_replicates,
        confidence=confidence,
    )
    return GameAnalysis(
        table,
        tuple(_equilibrium(table, profile, confidence) for profile in found),
        tuple(best_responses(table.payoffs, sense, tolerance=tolerance)),
        cost,
        turning_weight(*network, cost.worst),
        tolerance,
        confidence,
    )


def _equilibrium(table: PayoffTable, profile: Profile, confidence: float) -> Equilibrium:
    players = table.profiles.players
    regret = {
        player: regret_estimate(table, profile, place, confidence) for place, player in enumerate(players)
    }
    verdict = EXACT if table.replicates is None else ESTIMATED
    return Equilibrium(
        profile,
        table.profiles.thresholds(profile),
        verdict,
        regret,
        welfare_estimate(table, profile, confidence),
    )


def welfare_estimate(table: PayoffTable, profile: Profile, confidence: float) -> Estimate:
    """The welfare a day at a profile, with its interval where it comes from replications."""
    if table.welfare_replicates is None:
        return Estimate(float(table.welfare[profile]))
    return mean_estimate(table.welfare_replicates[(slice(None), *profile)], confidence)


def regret_estimate(table: PayoffTable, profile: Profile, player: int, confidence: float) -> Estimate:
    """A player's regret at a profile; from replications with a paired interval over all the player's deviations.

    The upper end is the largest upper end of any deviation's gain, so it holds for all of them at once.
    """
    point = float(regrets(table.payoffs, table.goal.sense)[(player, *profile)])
    others = deviations(profile, player, table.profiles.shape[player])
    if table.replicates is None:
        return Estimate(point)
    if not others:
        return Estimate(point, point, point)
    if len(table.replicates) < 2:
        return Estimate(point, reason=ONE_REPLICATION)
    costs = as_costs(table.replicates[:, player], table.goal.sense)
    critical = critical_value(confidence, len(costs) - 1, comparisons=len(others))
    gains = [costs[(slice(None), *profile)] - costs[(slice(None), *other)] for other in others]
    means = np.array([gain.mean() for gain in gains])
    halves = critical * np.array([standard_error(gain) for gain in gains])
    low, high = float((means - halves).max()), float((means + halves).max())
    return Estimate(point, min(point, max(0.0, low)), max(point, high))
