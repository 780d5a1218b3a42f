"""What selfish rules cost, with intervals that also hold for not knowing which profiles are the equilibria.

The plug-in price is biased low, for the worst equilibrium of an estimated table is often not the worst one. Here the
price is projected over C, a set of profiles that holds every pure equilibrium with probability 1 - alpha/2. Let
g(s) = max over s' of v(s') - v(s), v the logarithm of the welfare (or the welfare itself, for patients a year), signed
so that more is better. The price of anarchy is the largest g over the equilibria, that of stability the smallest.

- *High*: the largest, over s in C and s', of mean + t(1 - alpha/4) x error. For the true pair this one comparison
  errs with probability alpha/4, whatever else is tried, so nothing is lost to multiplicity.
- *Low*: the smallest, over s in C, of the largest over s' of mean - c(s) x error, and at least 0; c(s) is the max-t
  critical value at alpha/4 over all s' against this s. For the true s all comparisons hold at once.

The price of stability is g of *some* equilibrium, and which profiles of C are equilibria is not known, so its
projection has the same two ends. Confirmed equilibria within a regret of epsilon (K) say more about the price among
these: every member of K is one, so the largest g over K is at most the price of anarchy, and the smallest at least the
price of stability, within epsilon.

Sources: projection of a confidence set, Dufour 1997, "Some impossibility theorems in econometrics"; the ratio of two
means, Fieller 1954, "Some problems in interval estimation"; bootstrap, Efron 1979 (all from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from analysis.anarchy import DAYS_A_YEAR, MAY_BE_NOUGHT, NOT_POSITIVE
from analysis.confidence import ONE_REPLICATION, TIES_ON_FEW, Estimate, t_quantile
from analysis.goals import Sense
from analysis.simultaneous import DRAWS, critical_max_t, studentise

LEAST_DIFFERENCES = (
    10  # non-zero ones, below which two profiles count as tied: nothing is concluded from them
)
MOST_NUMBERS = (
    20_000_000_000  # comparisons x replications, beyond which no band is worked out (about a minute)
)
MOST_DRAWN = 5_000_000  # cells x replications, beyond which Bonferroni replaces max-t
TOO_LARGE = "the possible equilibria are too many for a band over all of them"
NONE_POSSIBLE = "no profile may be a pure equilibrium, at this confidence"
SAME = 1e-12
MOST_PAIRS = 10_000_000  # pairs of profiles x replications compared at once for confirmed equilibria


@dataclass(frozen=True)
class Worth:
    """What profiles are worth, larger is better; differences are what is compared.

    mean: (cells,). values: (replications, cells), whose paired differences carry the error of differences of `mean`.
    degrees: of every error. Cells with a NaN were not run throughout, and take no part.
    """

    mean: np.ndarray
    values: np.ndarray
    degrees: int

    def against(self, base: int) -> Gaps:
        """Every profile against one."""
        return gaps(self.mean - self.mean[base], self.values - self.values[:, [base]])


@dataclass(frozen=True)
class Gaps:
    """Differences with their joint error: mean, error (contrasts,), scores (replications, contrasts)."""

    mean: np.ndarray
    error: np.ndarray
    scores: np.ndarray
    told_apart: np.ndarray

    def lower(self, critical: float) -> float:
        """The largest lower end, at least 0."""
        ends = np.where(self.told_apart, self.mean - critical * self.error, 0.0)
        return max(0.0, float(ends.max(initial=0.0)))

    def upper(self, critical: float) -> float:
        """The largest upper end, at least 0."""
        return max(0.0, float((self.mean + critical * self.error).max(initial=0.0)))


def gaps(mean: np.ndarray, differences: np.ndarray) -> Gaps:
    """From means of differences and their values by replication, (replications, contrasts)."""
    parts = studentise(differences)
    largest = float(np.abs(differences).max(initial=0.0))
    told = (np.abs(differences) > SAME * largest).sum(axis=0) >= LEAST_DIFFERENCES
    return Gaps(mean, parts.error, parts.scores, told)


def absolute_worth(replicates: np.ndarray, sense: Sense, *, degrees: int | None = None) -> Worth:
    """Welfare itself; replicates (replications, *shape)."""
    flat = np.asarray(replicates, float).reshape(len(replicates), -1)
    signed = flat if sense == "gain" else -flat
    return Worth(signed.mean(axis=0), signed, len(flat) - 1 if degrees is None else degrees)


def log_worth(
    replicates: np.ndarray, sense: Sense, alpha: float, *, degrees: int | None = None
) -> Worth | None:
    """The logarithm of welfare, by the delta method; None where, at level alpha, a mean may be 0 or less."""
    flat = np.asarray(replicates, float).reshape(len(replicates), -1)
    df = len(flat) - 1 if degrees is None else degrees
    mean, error = flat.mean(axis=0), flat.std(axis=0, ddof=1) / np.sqrt(len(flat))
    least = mean + t_quantile(alpha / flat.shape[1], df) * error
    if np.nanmin(least) <= 0:
        return None
    sign = 1.0 if sense == "gain" else -1.0
    return Worth(sign * np.log(mean), sign * flat / mean, df)


def run_throughout(worth: Worth) -> Worth:
    """Only the cells that every replication ran (a race leaves some early)."""
    known = ~np.isnan(worth.values).any(axis=0)
    return Worth(worth.mean[known], worth.values[:, known], worth.degrees)


def projected(
    worth: Worth, possible: np.ndarray, alpha: float, rng: np.random.Generator, *, draws: int = DRAWS
) -> tuple[float, float] | None:
    """Low and high of the price on the scale of `worth`, at level alpha, of which `possible` has spent a half.

    possible: bool, (*shape) or (cells,), holds every equilibrium with probability 1 - alpha/2 and at least one
    profile. None where that is too much work.
    """
    known = ~np.isnan(worth.values).any(axis=0)
    inside = np.cumsum(known) - 1
    bases = inside[np.flatnonzero(np.asarray(possible, bool).ravel() & known)]
    worth = run_throughout(worth)
    if len(bases) * worth.values.size > MOST_NUMBERS:
        return None
    high = max(worth.against(base).upper(at_level(alpha / 4, worth)) for base in bases)
    return _least(worth, bases, alpha / 4, rng, draws), high


def ties_on_few(worth: Worth) -> bool:
    """Whether some two profiles differ by the same in every replication, and these are fewer than ten."""
    if len(worth.values) >= LEAST_DIFFERENCES:
        return False
    values = run_throughout(worth).values
    largest = float(np.abs(values).max(initial=0.0)) or 1.0
    centred = np.round((values - values.mean(axis=0)) / largest, 12) + 0.0  # + 0.0: one nought only
    return len(np.unique(centred, axis=1).T) < centred.shape[1]


def at_level(level: float, worth: Worth) -> float:
    """One comparison's one-sided critical value."""
    return float(t_quantile(1 - level, worth.degrees))


def _least(worth: Worth, bases: np.ndarray, level: float, rng: np.random.Generator, draws: int) -> float:
    """The smallest lower bound of any base; only those that can be it have their max-t critical value worked out."""
    others = max(1, len(worth.mean) - 1)
    if any(worth.against(base).lower(at_level(level, worth)) == 0 for base in bases):
        return 0.0  # no critical value is smaller than one comparison's
    cautious = at_level(level / others, worth)
    bounds = np.array([worth.against(base).lower(cautious) for base in bases])
    least = np.inf
    for place in np.argsort(bounds, kind="stable"):
        if bounds[place] >= least:
            break
        least = min(least, _lower(worth.against(bases[place]), level, worth, rng, draws, cautious))
    return float(least)


def _lower(
    gap: Gaps, level: float, worth: Worth, rng: np.random.Generator, draws: int, cautious: float
) -> float:
    if gap.scores.size > MOST_DRAWN:
        return gap.lower(cautious)
    critical = critical_max_t(gap.scores, level, rng, two_sided=False, draws=draws, degrees=worth.degrees)
    return gap.lower(min(critical, cautious))  # Bonferroni holds too


@dataclass(frozen=True)
class EpsilonPrice:
    """What confirmed equilibria within a regret of epsilon prove, with the stated confidence.

    confirmed: how many. anarchy_at_least, stability_at_most: of the prices among all equilibria within epsilon;
    None with a reason where nothing is confirmed or a ratio says nothing.
    """

    epsilon: float
    confirmed: int
    anarchy_at_least: float | None
    stability_at_most: float | None
    reason: str | None = None


def epsilon_price(
    worth: Worth | None, confirmed: np.ndarray, epsilon: float, alpha: float, rng: np.random.Generator
) -> EpsilonPrice:
    """The two one-sided bounds from confirmed equilibria, of which `confirmed` has spent alpha/2.

    Membership of K is the data's doing, so a quarter of alpha covers every pair of profiles at once (max-t over all
    pairs, Bonferroni where they are too many) for the first bound, and every profile against the true best (Bonferroni
    over profiles) for the second.
    """
    members = np.asarray(confirmed, bool).ravel()
    count = int(members.sum())
    if worth is None or not count:
        reason = "no profile is confirmed within this regret" if worth is not None else MAY_BE_NOUGHT
        return EpsilonPrice(epsilon, count, None, None, reason)
    known = ~np.isnan(worth.values).any(axis=0)
    bases = (np.cumsum(known) - 1)[np.flatnonzero(members & known)]
    worth = run_throughout(worth)
    critical = _all_pairs(worth, alpha / 4, rng)
    low = max(worth.against(base).lower(critical) for base in bases)
    above = at_level(alpha / 4 / len(worth.mean), worth)
    high = min(worth.against(base).upper(above) for base in bases)
    return EpsilonPrice(epsilon, count, float(np.exp(low)), float(np.exp(high)))


def _all_pairs(worth: Worth, level: float, rng: np.random.Generator) -> float:
    cells = len(worth.mean)
    pairs = cells * (cells - 1) // 2
    cautious = at_level(level / max(1, 2 * pairs), worth)
    if not pairs or pairs * len(worth.values) > MOST_PAIRS:
        return cautious
    one, other = np.triu_indices(cells, 1)
    scores = studentise(worth.values[:, one] - worth.values[:, other]).scores
    return min(cautious, critical_max_t(scores, level, rng, degrees=worth.degrees))


# ---- the bootstrap, approximate ----


def resampled_means(values: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Means of resampled replications: values (replications, ...), weights (tables, replications) -> (tables, ...)."""
    return np.tensordot(weights, values, axes=1)


def resampling_weights(rng: np.random.Generator, tables: int, replications: int) -> np.ndarray:
    """The share of each replication in each resample, (tables, replications)."""
    return rng.multinomial(replications, np.full(replications, 1 / replications), size=tables) / replications


@dataclass(frozen=True)
class BootstrapPrices:
    """Percentile intervals with the equilibria selected anew in every resample: approximate, and often too narrow.

    without: share of resamples that have no pure equilibrium; they are left out.
    """

    price_of_anarchy: Estimate
    price_of_stability: Estimate
    tables: int
    without: float


def bootstrap_prices(
    costs: np.ndarray, welfare: np.ndarray, sense: Sense, confidence: float, *, tolerance: float
) -> BootstrapPrices:
    """Prices of resampled tables. costs: (tables, players, *shape), to minimise. welfare: (tables, *shape), a day."""
    stable = np.ones(welfare.shape, bool)
    for player in range(costs.shape[1]):
        own = costs[:, player]
        stable &= own <= own.min(axis=player + 1, keepdims=True) + tolerance
    flat, stable = welfare.reshape(len(welfare), -1), stable.reshape(len(welfare), -1)
    some = stable.any(axis=1)
    gains = flat if sense == "gain" else -flat
    best = gains.max(axis=1)
    worst = np.where(stable, gains, np.inf).min(axis=1)
    kindest = np.where(stable, gains, -np.inf).max(axis=1)
    estimates = (_percentiles(best[some], one[some], sense, confidence) for one in (worst, kindest))
    return BootstrapPrices(*estimates, len(flat), float(1 - some.mean()))


def _percentiles(best: np.ndarray, reached: np.ndarray, sense: Sense, confidence: float) -> Estimate:
    if not len(best):
        return Estimate(None, reason="no resampled table has a pure equilibrium")
    if (best * reached <= 0).any():
        return Estimate(None, reason=NOT_POSITIVE)
    ratios = best / reached if sense == "gain" else reached / best
    tail = (1 - confidence) / 2
    return Estimate(float(np.median(ratios)), *map(float, np.quantile(ratios, [tail, 1 - tail])))


# ---- estimates as a document has them ----


def ratio_band(
    point: Estimate, worth: Worth | None, possible: np.ndarray, alpha: float, rng: np.random.Generator
) -> Estimate:
    """The price as point and band; the band holds the point."""
    if worth is None:
        return Estimate(None, reason=MAY_BE_NOUGHT)
    return _banded(point, worth, possible, alpha, rng, np.exp)


def difference_band(
    point: Estimate, worth: Worth, possible: np.ndarray, alpha: float, rng: np.random.Generator
) -> Estimate:
    """Welfare forgone a year as point and band."""
    return _banded(point, worth, possible, alpha, rng, lambda a_day: DAYS_A_YEAR * a_day)


def _banded(
    point: Estimate, worth: Worth, possible: np.ndarray, alpha: float, rng: np.random.Generator,
    scale: Callable[[float], float],
) -> Estimate:  # fmt: skip
    if not np.any(possible):
        return Estimate(point.mean, reason=NONE_POSSIBLE)
    if len(worth.values) < 2:
        return Estimate(point.mean, reason=ONE_REPLICATION)
    if ties_on_few(worth):
        return Estimate(point.mean, reason=TIES_ON_FEW)
    ends = projected(worth, possible, alpha, rng)
    if ends is None:
        return Estimate(point.mean, reason=TOO_LARGE)
    low, high = (float(scale(end)) for end in ends)
    if point.mean is None:
        return Estimate(None, low, high, point.reason)
    return Estimate(point.mean, min(low, point.mean), max(high, point.mean))
