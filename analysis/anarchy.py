"""What selfish rules cost: the optimum over all profiles, prices of anarchy and stability, patients a year.

The price of anarchy is best welfare over all profiles / worst over equilibria (for a loss: worst equilibrium
/ best), so at least 1 (Koutsoupias and Papadimitriou 1999, "Worst-case equilibria"; price of stability:
Anshelevich et al. 2004; both from memory). Here it is the ratio of this one network, not a supremum over a
class of networks, and the best is the best static rule.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from analysis.confidence import ONE_REPLICATION, Estimate, critical_value, mean_estimate, standard_error
from analysis.equilibria import DEFAULT_TOLERANCE, Profile
from analysis.goals import Sense

DAYS_A_YEAR = 365.0
NO_EQUILIBRIUM = "no equilibrium is listed"
LISTED = "the worst listed equilibrium"
OF_ESTIMATED = "the worst equilibrium of the estimated table"
NONE_ESTIMATED = "the estimated table has no pure equilibrium"
NOT_POSITIVE = "a welfare is not above 0, so a ratio says nothing"
MAY_BE_NOUGHT = "a mean welfare may be 0 or less, as far as the replications show, so a ratio says nothing"


@dataclass(frozen=True)
class Cost:
    """What selfish rules cost.

    optimum: every profile within the tolerance of the best welfare. worst, best: the equilibria with the
    lowest and the highest welfare (None without one). lost_per_year: welfare forgone at the worst, a year.
    is_projected: whether intervals hold over all equilibria that are possible, not for the listed profiles alone.
    """

    optimum: tuple[Profile, ...]
    worst: Profile | None
    best: Profile | None
    price_of_anarchy: Estimate
    price_of_stability: Estimate
    lost_per_year: Estimate
    is_projected: bool = False


def cost_of_selfishness(
    welfare: np.ndarray,
    sense: Sense,
    equilibria: Sequence[Profile],
    *,
    replicates: np.ndarray | None = None,
    degrees: int | None = None,
    confidence: float = 0.95,
    tolerance: float = DEFAULT_TOLERANCE,
) -> Cost:
    """The cost of the listed equilibria against the optimum.

    welfare: mean a day, (*shape). replicates: the same by replication, (replications, *shape); None where the
    welfare is exact. degrees: of freedom of their errors (default: replications - 1).
    tolerance: within which the optimum is tied, in the welfare's unit, inclusive. The
    intervals are paired, for the profiles that the point estimate selects; that it may select wrong ones is
    not in them.
    """
    gains = welfare if sense == "gain" else -welfare
    optimum = tuple(_numbers(profile) for profile in np.argwhere(gains >= gains.max() - tolerance))
    if not equilibria:
        none = Estimate(None, reason=NO_EQUILIBRIUM)
        return Cost(optimum, None, None, none, none, none)
    ranked = sorted(equilibria, key=lambda profile: float(gains[profile]))
    best = _numbers(
        np.unravel_index(np.argmax(gains), gains.shape)
    )  # no tie: a tie may be worse by a rounding error
    pair = _Pair(welfare, sense, replicates, confidence, best, degrees)
    return Cost(
        optimum,
        ranked[0],
        ranked[-1],
        pair.ratio(ranked[0]),
        pair.ratio(ranked[-1]),
        pair.lost_a_year(ranked[0]),
    )


def _numbers(profile: Iterable[int]) -> Profile:
    return tuple(map(int, profile))


@dataclass(frozen=True)
class _Pair:
    """Compares an equilibrium with the optimum on common replications."""

    welfare: np.ndarray
    sense: Sense
    replicates: np.ndarray | None
    confidence: float
    optimum: Profile
    degrees: int | None = None

    def ratio(self, profile: Profile) -> Estimate:
        """Better welfare over worse, with an interval on the log ratio by the delta method."""
        better, worse = (self.optimum, profile) if self.sense == "gain" else (profile, self.optimum)
        above, below = float(self.welfare[better]), float(self.welfare[worse])
        if below <= 0 or above <= 0:
            return Estimate(None, reason=NOT_POSITIVE)
        point = above / below
        if self.replicates is None:
            return Estimate(point)
        n = len(self.replicates)
        if n < 2:
            return Estimate(point, reason=ONE_REPLICATION)
        log_ratio = self._of(better) / above - self._of(worse) / below
        half = critical_value(self.confidence, self.degrees or n - 1) * standard_error(log_ratio)
        return Estimate(point, max(1.0, point * np.exp(-half)), point * np.exp(half))

    def lost_a_year(self, profile: Profile) -> Estimate:
        """Welfare forgone a year, in the welfare's unit (patients, for throughput)."""
        sign = DAYS_A_YEAR if self.sense == "gain" else -DAYS_A_YEAR
        if self.replicates is None:
            return Estimate(float(sign * (self.welfare[self.optimum] - self.welfare[profile])) + 0.0)
        lost = sign * (self._of(self.optimum) - self._of(profile))
        return mean_estimate(lost, self.confidence, degrees=self.degrees)

    def _of(self, profile: Profile) -> np.ndarray:
        return self.replicates[(slice(None), *profile)]  # type: ignore[index]


@dataclass(frozen=True)
class TurningWeight:
    """The transfer weight at which coordinating for throughput stops paying; None with a reason where it never does.

    low, high: its interval, where replications give one.
    """

    weight: float | None
    reason: str | None = None
    low: float | None = None
    high: float | None = None


def turning_weight(
    turned_away: np.ndarray, transfers: np.ndarray, worst: Profile | None, *, who: str = LISTED
) -> TurningWeight:
    """The weight of a transfer at which the verdict turns.

    Below it the profile with the fewest patients turned away has a lower loss (turned away + weight x
    transfers) than the worst equilibrium; above it the equilibrium is no worse. Both arrays: mean a day,
    (*shape). `worst`: the equilibrium judged; `who`: what it is, in words.
    """
    if worst is None:
        return TurningWeight(None, NO_EQUILIBRIUM)
    fewest = np.flatnonzero(turned_away.ravel() <= turned_away.min() + DEFAULT_TOLERANCE)
    place = fewest[
        np.argmin(transfers.ravel()[fewest])
    ]  # of those that turn fewest away, the one that moves fewest
    saved = float(turned_away[worst] - turned_away.ravel()[place])
    moved = float(transfers.ravel()[place] - transfers[worst])
    if saved <= DEFAULT_TOLERANCE:
        return TurningWeight(
            None,
            f"{who} turns no more patients away than the profile that turns fewest away",
        )
    if moved <= 0:
        return TurningWeight(
            None,
            f"the profile that turns fewest patients away moves no more of them than {who}, so it is better at any "
            "weight",
        )
    return TurningWeight(saved / moved)
