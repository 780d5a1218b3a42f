"""The prices of a simulated table, projected over its possible equilibria, with what else the table says of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from analysis.anarchy import (
    NONE_ESTIMATED,
    OF_ESTIMATED,
    Cost,
    TurningWeight,
    cost_of_selfishness,
    turning_weight,
)
from analysis.confidence import Estimate
from analysis.contrasts import evidence_of
from analysis.equilibria import Profile
from analysis.payoffs import PayoffTable
from analysis.price_bands import (
    BootstrapPrices,
    EpsilonPrice,
    absolute_worth,
    bootstrap_prices,
    difference_band,
    epsilon_price,
    log_worth,
    ratio_band,
    resampled_means,
    resampling_weights,
)
from analysis.transfer_weights import (
    NO_HIGH_END,
    AtWeight,
    banded_over_weights,
    price_over_weights,
    weight_interval,
)

TABLES = 1000
LEAST_TABLES = 100
LEAST_REPLICATIONS = 10  # to resample: of fewer too many resamples are nearly alike
TOO_FEW = f"fewer than {LEAST_REPLICATIONS} replications are too few to be resampled"
MOST_HELD = 40_000_000  # numbers of all resampled tables together


def projected_cost(
    cost: Cost, found: Sequence[Profile], table: PayoffTable, possible: np.ndarray, alpha: float, seed: int
) -> Cost:
    """The cost with the prices of the table's own equilibria, and intervals over all possible ones.

    found: equilibria of the estimated table. possible: bool (*shape), at alpha/2 of the level alpha.
    """
    welfare, sense = table.welfare_replicates, table.welfare_goal.sense
    assert welfare is not None
    rng = np.random.default_rng([seed, 1])
    point = cost_of_selfishness(table.welfare, sense, found)
    if not found:
        none = Estimate(None, reason=NONE_ESTIMATED)
        point = replace(point, price_of_anarchy=none, price_of_stability=none, lost_per_year=none)
    worth = log_worth(welfare, sense, alpha, degrees=table.degrees)
    price = ratio_band(point.price_of_anarchy, worth, possible, alpha, rng)
    kindest = point.price_of_stability
    stability = replace(price, mean=kindest.mean) if price.mean is not None else price
    plain = absolute_worth(welfare, sense, degrees=table.degrees)
    lost = difference_band(point.lost_per_year, plain, possible, alpha, rng)
    return replace(
        cost, price_of_anarchy=price, price_of_stability=stability, lost_per_year=lost, is_projected=True
    )


@dataclass(frozen=True)
class PriceStudy:
    """What stands beside the prices.

    over_weights: the price where a transfer counts more and more. within_epsilon, bootstrap: from replications only.
    """

    over_weights: tuple[AtWeight, ...]
    within_epsilon: EpsilonPrice | None = None
    bootstrap: BootstrapPrices | None = None
    bootstrap_reason: str | None = None


def projected_turning(
    found: Sequence[Profile], table: PayoffTable, possible: np.ndarray, alpha: float, seed: int
) -> TurningWeight:
    """The weight at which the verdict turns in the estimated table, with an interval over all possible equilibria."""
    worst = cost_of_selfishness(table.welfare, table.welfare_goal.sense, found).worst
    turning = turning_at(table, worst)
    if not possible.any() or table.turned_away_replicates is None:
        return turning
    ends = weight_interval(
        table.turned_away_replicates, table.transfers_replicates, possible, alpha, np.random.default_rng([seed, 3]),
        degrees=table.degrees,
    )  # fmt: skip
    return turning if ends is None else _with_interval(turning, *ends)


def turning_at(table: PayoffTable, worst: Profile | None) -> TurningWeight:
    """The weight at which the verdict turns for the worst equilibrium of the estimated table."""
    if worst is None:
        return TurningWeight(None, NONE_ESTIMATED)
    return turning_weight(*_network(table), worst, who=OF_ESTIMATED)


def exact_study(table: PayoffTable, equilibria: Sequence[Profile]) -> PriceStudy:
    """The study of an exact table, or of the point estimate."""
    return PriceStudy(tuple(price_over_weights(*_network(table), equilibria)))


def simulated_study(
    table: PayoffTable,
    found: Sequence[Profile],
    possible: np.ndarray,
    confirmed: np.ndarray,
    epsilon: float,
    *,
    confidence: float,
    tolerance: float,
    seed: int,
) -> PriceStudy:
    """The study of a table from replications; both sets at half of 1 - confidence each."""
    alpha, rng = 1 - confidence, np.random.default_rng([seed, 2])
    away, moved = table.turned_away_replicates, table.transfers_replicates
    rows = price_over_weights(*_network(table), found)
    if possible.any():
        rows = banded_over_weights(rows, away, moved, possible, alpha, rng, degrees=table.degrees)
    worth = log_worth(table.welfare_replicates, table.welfare_goal.sense, alpha, degrees=table.degrees)
    within = epsilon_price(worth, confirmed, epsilon, alpha, rng)
    if len(table.replicates) < LEAST_REPLICATIONS:
        return PriceStudy(tuple(rows), within, None, TOO_FEW)
    tables = min(TABLES, MOST_HELD // max(1, table.payoffs.size))
    if tables < LEAST_TABLES:
        return PriceStudy(tuple(rows), within, None, "the table is too large to be resampled")
    weights = resampling_weights(rng, tables, len(table.replicates))
    worths = resampled_means(table.welfare_replicates, weights)
    boot = bootstrap_prices(
        resampled_costs(table, weights), worths, table.welfare_goal.sense, confidence, tolerance=tolerance
    )
    return PriceStudy(tuple(rows), within, boot)


def resampled_costs(table: PayoffTable, weights: np.ndarray) -> np.ndarray:
    """Costs of resampled tables, (tables, players, *shape); weights (tables, replications)."""
    evidence = evidence_of(table)
    costs = evidence.costs_at(lambda values: resampled_means(values, weights))
    return costs.reshape(len(weights), -1, *evidence.shape)


def _network(table: PayoffTable) -> tuple[np.ndarray, np.ndarray]:
    """Patients turned away and moved a day over the network, (*shape) each."""
    shape = table.profiles.shape
    away, moved = (
        rate.sum(axis=-1).reshape(shape) for rate in (table.outcomes.turned_away, table.outcomes.diverted_out)
    )
    return away, moved


def _with_interval(turning: TurningWeight, low: float, high: float | None) -> TurningWeight:
    reason = turning.reason or (NO_HIGH_END if high is None else None)
    weight = turning.weight
    if weight is not None:
        low, high = min(low, weight), None if high is None else max(high, weight)
    return TurningWeight(weight, reason, low, high)
