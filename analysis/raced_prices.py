"""Prices of a raced table: projected over the possible equilibria, each pair of profiles on what both were run for.

As in `price_bands`, but a cell that was left early has few replications, and how many is the data's doing. So each pair
is compared on the replications of the last look that both had, and the level is shared over the looks as the race
shares its own, 6 / (pi j)^2 to the j-th: whichever look a pair ends at, its comparison holds. The low end is Bonferroni
over profiles besides. What rests on all cells having the same replications (bands over the weight of a transfer, the
bootstrap, the ratio within epsilon) is not given.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from analysis.anarchy import (
    DAYS_A_YEAR,
    MAY_BE_NOUGHT,
    NONE_ESTIMATED,
    Cost,
    TurningWeight,
    cost_of_selfishness,
)
from analysis.confidence import Estimate, t_quantile
from analysis.equilibria import Profile
from analysis.payoffs import PayoffTable
from analysis.price_bands import NONE_POSSIBLE, Worth, absolute_worth, gaps, log_worth
from analysis.prices import PriceStudy, turning_at
from analysis.transfer_weights import price_over_weights

RACED = "a race leaves cells early, so that this is not worked out; --no-race runs the whole table"
NO_LOOK = "no look was reached"


@dataclass(frozen=True)
class Layer:
    """One look's comparisons. number: of the look. replications: nominal ones. worth: of cells (NaN where left)."""

    number: int
    replications: int
    worth: Worth


def raced_cost(
    table: PayoffTable, looks: Sequence[tuple[int, PayoffTable]], possible: np.ndarray, found: Sequence[Profile],
    alpha: float,
) -> Cost:  # fmt: skip
    """The cost at the estimated equilibria `found`, with intervals over all possible ones.

    looks: nominal replications and table of every look, in order. possible: bool (*shape), at alpha/2 of the level.
    """
    sense, listed = table.welfare_goal.sense, [tuple(map(int, one)) for one in np.argwhere(possible)]
    cost = replace(cost_of_selfishness(table.welfare, sense, listed), is_projected=True)
    point = cost_of_selfishness(table.welfare, sense, found)
    if not found:
        none = Estimate(None, reason=NONE_ESTIMATED)
        point = replace(point, price_of_anarchy=none, price_of_stability=none, lost_per_year=none)

    assert table.counts is not None
    counts = table.counts

    def band(
        one: Estimate, worth_of: Callable[..., Worth | None], scale: Callable[[float], float]
    ) -> Estimate:
        layers = [
            (number, size, worth_of(each.welfare_replicates, sense, degrees=each.degrees))
            for number, (size, each) in enumerate(looks, start=1)
        ]
        return _banded(one, layers, counts, possible, alpha, scale)

    logs = partial(log_worth, alpha=alpha)
    return replace(
        cost,
        price_of_anarchy=band(point.price_of_anarchy, logs, math.exp),
        price_of_stability=band(point.price_of_stability, logs, math.exp),
        lost_per_year=band(point.lost_per_year, absolute_worth, lambda a_day: DAYS_A_YEAR * a_day),
    )


def _banded(
    point: Estimate, layers: Sequence[tuple[int, int, Worth | None]], counts: np.ndarray, possible: np.ndarray,
    alpha: float, scale: Callable[[float], float],
) -> Estimate:  # fmt: skip
    if not layers or not possible.any():
        return Estimate(point.mean, reason=NO_LOOK if not layers else NONE_POSSIBLE)
    if any(worth is None for _, _, worth in layers):
        return Estimate(None, reason=MAY_BE_NOUGHT)
    made = [Layer(number, size, worth) for number, size, worth in layers if worth is not None]
    low, high = (scale(end) for end in projected_over_looks(made, counts.ravel(), possible.ravel(), alpha))
    if point.mean is None:
        return Estimate(None, low, high, point.reason)
    return Estimate(point.mean, min(low, point.mean), max(high, point.mean))


def projected_over_looks(
    layers: Sequence[Layer], counts: np.ndarray, possible: np.ndarray, alpha: float
) -> tuple[float, float]:
    """Low and high of the price on the scale of the worths, at level alpha, of which `possible` has spent a half.

    counts: int (cells,), replications at each cell's last look. possible: bool (cells,), at least one.
    """
    bases = np.flatnonzero(possible)
    ends = np.array([_ends(layers, counts, base, alpha / 4) for base in bases])
    return float(ends[:, 0].min()), float(ends[:, 1].max())


def _ends(layers: Sequence[Layer], counts: np.ndarray, base: int, level: float) -> tuple[float, float]:
    """The largest lower and the largest upper end of any profile against one; at least 0."""
    low, high, others = 0.0, 0.0, max(1, len(counts) - 1)
    common = np.minimum(counts, counts[base])
    for layer in layers:
        cells = np.flatnonzero(common == layer.replications)
        if not cells.size:
            continue
        mine, worth = level * 6 / (math.pi * layer.number) ** 2, layer.worth
        gap = gaps(worth.mean[cells] - worth.mean[base], worth.values[:, cells] - worth.values[:, [base]])
        low = max(low, gap.lower(float(t_quantile(1 - mine / others, worth.degrees))))
        high = max(high, gap.upper(float(t_quantile(1 - mine, worth.degrees))))
    return low, high


def raced_turning(table: PayoffTable, found: Sequence[Profile]) -> TurningWeight:
    """The weight at which the verdict turns, in the estimated table; without an interval."""
    worst = cost_of_selfishness(table.welfare, table.welfare_goal.sense, found).worst
    turning = turning_at(table, worst)
    return turning if turning.weight is None else replace(turning, reason=RACED)


def raced_study(table: PayoffTable, found: Sequence[Profile]) -> PriceStudy:
    """The prices over the weight of a transfer, as point estimates; nothing else."""
    rows = [
        replace(
            row,
            price_of_anarchy=_without_band(row.price_of_anarchy),
            lost_per_year=_without_band(row.lost_per_year),
        )
        for row in price_over_weights(*_network(table), found)
    ]
    return PriceStudy(tuple(rows), None, None, RACED)


def _without_band(one: Estimate) -> Estimate:
    return one if one.mean is None else Estimate(one.mean, reason=RACED)


def _network(table: PayoffTable) -> tuple[np.ndarray, np.ndarray]:
    shape, outcomes = table.profiles.shape, table.outcomes
    away, moved = (rate.sum(axis=-1).reshape(shape) for rate in (outcomes.turned_away, outcomes.diverted_out))
    return away, moved
