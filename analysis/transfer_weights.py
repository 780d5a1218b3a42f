"""What the weight of a transfer does to the verdict: the price over weights, and the weight at which it turns.

Loss is patients turned away + weight x transfers. The turning weight solves a - w b = 0, a what the worst equilibrium
turns away beyond the profile that turns fewest away, b what the latter moves beyond the former. Its interval joins
Fieller's sets (1954, "Some problems in interval estimation", from memory) over everything that either profile may be.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from analysis.anarchy import cost_of_selfishness
from analysis.confidence import Estimate, t_quantile
from analysis.equilibria import Profile
from analysis.price_bands import (
    MOST_DRAWN,
    Worth,
    absolute_worth,
    at_level,
    difference_band,
    log_worth,
    ratio_band,
    run_throughout,
)
from analysis.simultaneous import DRAWS, critical_max_t

WEIGHTS = tuple(k / 20 for k in range(21))
NO_HIGH_END = "the replications set no upper end: the verdict may never turn"
MOST_NUMBERS = 20_000_000_000


@dataclass(frozen=True)
class AtWeight:
    """The price where a transfer counts as `weight` patients turned away, and the loss a year at the worst equilibrium
    over the least loss."""

    weight: float
    price_of_anarchy: Estimate
    lost_per_year: Estimate


def weight_interval(
    turned_away: np.ndarray,
    transfers: np.ndarray,
    possible: np.ndarray,
    alpha: float,
    rng: np.random.Generator,
    *,
    degrees: int | None = None,
) -> tuple[float, float | None] | None:
    """The interval of the weight at which the verdict turns, at level alpha, of which `possible` has spent a half.

    Both arrays: a day by replication, (replications, *shape). The weight solves a - w b = 0, a what the worst
    equilibrium turns away beyond the profile that turns fewest away, b what the latter moves beyond the former.
    Fieller's set at alpha/4 for every possible equilibrium and every profile that may turn fewest away (a max-t set at
    alpha/4), joined. The high end is None where the data set none; all is None where the work is
    too much.
    """
    away = absolute_worth(turned_away, "cost", degrees=degrees)
    moved = np.asarray(transfers, float).reshape(len(away.values), -1)
    known = ~np.isnan(away.values).any(axis=0)
    if away.values.size * int(known.sum()) > MOST_NUMBERS:
        return None
    fewest = np.flatnonzero(known)[fewest_set(run_throughout(away), alpha / 4, rng)]
    critical = float(t_quantile(1 - alpha / 8, away.degrees))
    low, high = np.inf, 0.0
    for base in np.flatnonzero(np.asarray(possible, bool).ravel() & known):
        others = fewest[fewest != base]
        a = away.values[:, others] - away.values[:, [base]]  # of minus the patients turned away
        b = moved[:, others] - moved[:, [base]]
        least, most = _fieller(a, b, critical)
        low, high = min(low, least), max(high, most)
    if not np.isfinite(low):
        return 0.0, None
    return float(low), None if np.isinf(high) else float(high)


def price_over_weights(
    turned_away: np.ndarray,
    transfers: np.ndarray,
    equilibria: Sequence[Profile],
    *,
    weights: Sequence[float] = WEIGHTS,
) -> list[AtWeight]:
    """The price at each weight, where both arrays, a day, (*shape), are exact or stand as point estimates."""
    rows = []
    for weight in weights:
        cost = cost_of_selfishness(turned_away + weight * transfers, "cost", equilibria)
        rows.append(AtWeight(float(weight), cost.price_of_anarchy, cost.lost_per_year))
    return rows


def banded_over_weights(
    rows: Sequence[AtWeight], turned_away: np.ndarray, transfers: np.ndarray, possible: np.ndarray, alpha: float,
    rng: np.random.Generator, *, degrees: int | None = None,
) -> list[AtWeight]:  # fmt: skip
    """The same with bands from replications, (replications, *shape); each band holds at its own weight."""
    banded = []
    for row in rows:
        loss = turned_away + row.weight * transfers
        worth = log_worth(loss, "cost", alpha, degrees=degrees)
        plain = absolute_worth(loss, "cost", degrees=degrees)
        banded.append(
            AtWeight(
                row.weight,
                ratio_band(row.price_of_anarchy, worth, possible, alpha, rng),
                difference_band(row.lost_per_year, plain, possible, alpha, rng),
            )
        )
    return banded


def fewest_set(worth: Worth, level: float, rng: np.random.Generator, *, draws: int = DRAWS) -> np.ndarray:
    """The profiles that may be the best: numbers; the best is among them with probability 1 - level.

    A profile stays unless another is better by more than its own max-t critical value.
    """
    cells = len(worth.mean)
    sure, cautious = at_level(level, worth), at_level(level / max(1, cells - 1), worth)
    kept = []
    for base in range(cells):
        gap = worth.against(base)
        critical = sure
        if gap.lower(sure) > 0 and gap.lower(cautious) == 0 and gap.scores.size <= MOST_DRAWN:
            critical = critical_max_t(
                gap.scores, level, rng, two_sided=False, draws=draws, degrees=worth.degrees
            )
        elif gap.lower(sure) > 0:
            critical = cautious
        if gap.lower(critical) == 0:
            kept.append(base)
    return np.array(kept)


def _fieller(a: np.ndarray, b: np.ndarray, critical: float) -> tuple[float, float]:
    """The hull, from 0 on, of all w at which some pair's mean a - w b is within its error: (least, most).

    a, b: (replications, pairs). Infinity and 0 where there is none.
    """
    if not a.shape[1]:
        return np.inf, 0.0
    n = len(a)
    centred = a - a.mean(axis=0), b - b.mean(axis=0)
    scale = critical**2 / (n * (n - 1))
    aa, ab, bb = ((one * other).sum(axis=0) * scale for one, other in _pairs_of(centred))
    mean_a, mean_b = a.mean(axis=0), b.mean(axis=0)
    lead, middle, free = mean_b**2 - bb, mean_a * mean_b - ab, mean_a**2 - aa
    root = np.sqrt(np.maximum(middle**2 - lead * free, 0))
    real = middle**2 - lead * free >= 0
    with np.errstate(divide="ignore", invalid="ignore"):
        roots = np.stack([(middle - root) / lead, (middle + root) / lead])
    roots = np.where(real & np.isfinite(roots) & (roots >= 0), roots, np.nan)
    least = np.where(free <= 0, 0.0, np.fmin(*roots))
    most = np.where(lead <= 0, np.inf, np.fmax(*roots))
    empty = np.isnan(least) | np.isnan(most)
    least, most = np.where(empty, np.inf, least), np.where(empty, 0.0, most)
    return float(least.min()), float(most.max())


def _pairs_of(centred: tuple[np.ndarray, np.ndarray]) -> Iterator[tuple[np.ndarray, np.ndarray]]:
    a, b = centred
    yield from ((a, a), (a, b), (b, b))
