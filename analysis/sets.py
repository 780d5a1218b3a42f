"""The two sets that a simulated game supports: possible equilibria, and confirmed equilibria within a regret.

*Possible*: a step-down by the largest t (Romano and Wolf 2005, "Stepwise multiple testing as formalized data
snooping", applied to equilibrium as moment inequalities, compare Romano, Shaikh and Wolf 2014, "A practical two-step
method for testing moment inequalities"; both from memory). With the stated confidence it holds every pure equilibrium.
The joint null flips the signs of whole replications: normal multipliers, even with Student's tail, covered .88 to .91
at ten replications where every profile of a table is an equilibrium, sign flips .93 to .95.
*Confirmed*: Holm 1979, "A simple sequentially rejective multiple test procedure" (from memory), over profiles, each by
intersection-union over deviations. With the stated confidence every member has a regret of at most epsilon.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from analysis.confidence import t_quantile
from analysis.contrasts import Evidence, Masks, blocks, masks_of
from analysis.simultaneous import DRAWS, flip_to_student, sign_flips

LEAST_BEYOND = 10  # draws expected beyond a critical value
MOST_SIGNS = 30_000_000  # draws x replications, beyond which Bonferroni replaces the joint null


@dataclass(frozen=True)
class PossibleSet:
    """Profiles that may be equilibria. mask: bool, (*shape). statistic: the strongest t against each profile, (*shape),
    -inf where nothing could speak against it. critical: what the last step compared it with. beaten: bool
    (players, *shape), where that player has a better strategy against the others' for sure: at the same level, all of
    these are right (by the first step's critical value, which counts every contrast)."""

    mask: np.ndarray
    statistic: np.ndarray
    critical: float
    level: float
    steps: int
    beaten: np.ndarray

    def __str__(self) -> str:
        return (
            f"{int(self.mask.sum())} of {self.mask.size} profiles may be equilibria "
            f"({100 * (1 - self.level):g} % confidence)"
        )


def possible(
    evidence: Evidence,
    level: float,
    rng: np.random.Generator,
    *,
    alive: np.ndarray | None = None,
    dropped: np.ndarray | None = None,
    draws: int | None = None,
) -> PossibleSet:
    """The profiles among `alive` that may be pure equilibria; all that are, with probability 1 - level.

    level: chance that an equilibrium is missing. alive: bool (*shape), default all. dropped: bool (players, *shape),
    cells no longer needed as that player's deviation (values there may be missing).
    draws: of the joint null (default: 1000, or more for a level below .01). At least 2 replications.
    """
    wanted = draws or max(DRAWS, math.ceil(LEAST_BEYOND / level))
    replications = len(evidence.values)
    rows = sign_flips(rng, wanted, replications) if wanted * replications <= MOST_SIGNS else None
    masks = masks_of(evidence, alive, dropped)
    by_player, critical, first, steps = strongest(evidence, masks), math.inf, math.inf, 0
    statistic = by_player.max(axis=0)
    while masks.alive.any():
        critical, steps = _critical(evidence, masks, rows, level), steps + 1
        first = critical if steps == 1 else first
        kept = masks.alive & ~(statistic > critical)
        if kept.sum() == masks.alive.sum():
            break
        masks = Masks(kept, masks.dropped)
    shape = evidence.shape
    return PossibleSet(
        masks.alive.reshape(shape), statistic.reshape(shape), critical, level, steps,
        (by_player > first).reshape(-1, *shape),
    )  # fmt: skip


def strongest(evidence: Evidence, masks: Masks) -> np.ndarray:
    """The strongest t against each profile through each player, (players, cells); -inf where there is none."""
    most = np.full((evidence.values.shape[1], evidence.cells), -np.inf)
    for block in blocks(evidence, masks):
        against = np.where(block.use, block.statistics(), -np.inf)
        for direction, cells in block.judged:
            np.maximum.at(most[block.player], cells, against[direction])
    return most


def _critical(evidence: Evidence, masks: Masks, rows: np.ndarray | None, level: float) -> float:
    """What the strongest t against any profile alive passes with probability `level` where all are equilibria."""
    if rows is None:
        return _by_bonferroni(evidence, masks, level)
    most = np.full(len(rows), -np.inf)
    for block in blocks(evidence, masks, draws=len(rows)):
        np.maximum(most, block.largest_null(rows), out=most)
    if np.isneginf(most).all():
        return math.inf
    beyond = float(np.quantile(most, 1 - level, method="higher"))
    return flip_to_student(beyond, len(evidence.values), evidence.degrees)


def _by_bonferroni(evidence: Evidence, masks: Masks, level: float) -> float:
    """The same without the joint null; where payoffs bend a pair may err in several ways."""
    used = sum(int(block.use.sum()) * block.ways for block in blocks(evidence, masks))
    if not used:
        return math.inf
    return float(t_quantile(1 - level / used, evidence.degrees))


@dataclass(frozen=True)
class ConfirmedSet:
    """Profiles whose regret is at most epsilon. mask: bool, (*shape). p: of "the regret is more", (*shape); 1 where a
    profile was not judged."""

    mask: np.ndarray
    p: np.ndarray
    epsilon: float
    level: float

    def __str__(self) -> str:
        return (
            f"{int(self.mask.sum())} of {self.mask.size} profiles are equilibria within a regret of {self.epsilon:.3g} "
            f"({100 * (1 - self.level):g} % confidence)"
        )


def confirmed(
    evidence: Evidence,
    epsilon: float,
    level: float,
    *,
    alive: np.ndarray | None = None,
    dropped: np.ndarray | None = None,
) -> ConfirmedSet:
    """The profiles among `alive` whose regret is at most epsilon, all of them with probability 1 - level.

    epsilon: in the goal's unit. Holm counts every profile of the table, however few are still alive, for which ones
    are is the data's doing. alive, dropped: as for `possible`.
    """
    p = regret_p(evidence, epsilon, masks_of(evidence, alive, dropped))
    return ConfirmedSet(holm(p, level).reshape(evidence.shape), p.reshape(evidence.shape), epsilon, level)


def regret_p(evidence: Evidence, epsilon: float, masks: Masks) -> np.ndarray:
    """p of "some deviation gains more than epsilon": the largest over deviations, (cells,); 1 where not judged."""
    p = np.zeros(evidence.cells)
    for block in blocks(evidence, masks, ties=True):
        for direction, cells in block.judged:
            used = block.use[direction]
            mine = block.not_below(direction, epsilon, evidence.degrees)
            np.maximum.at(p, cells[used], mine[used])
    return np.where(masks.alive, p, 1.0)


def holm(p: np.ndarray, level: float) -> np.ndarray:
    """Which of the hypotheses are rejected, by Holm's step-down; same shape."""
    order = np.argsort(p, kind="stable")
    passed = p[order] <= level / (len(p) - np.arange(len(p)))
    rejected = np.zeros(len(p), bool)
    rejected[order[: len(p) if passed.all() else int(np.argmin(passed))]] = True
    return rejected


@dataclass(frozen=True)
class RegretBounds:
    """Bounds of every player's regret, (players, *shape), never below 0.

    high: with the stated confidence no profile's regret, over all profiles, is above its largest. low: of this
    player's regret at this profile alone.
    """

    low: np.ndarray
    high: np.ndarray


def regret_bounds(
    evidence: Evidence, level: float, *, alive: np.ndarray | None = None, dropped: np.ndarray | None = None
) -> RegretBounds:
    """Bounds of regrets from paired gains, each end at `level`; 0 for a player without a choice.

    high = max over deviations of mean + t_(1 - level / profiles) x error; low is Bonferroni over the deviations.
    """
    masks = masks_of(evidence, alive, dropped)
    players = evidence.values.shape[1]
    low, high = np.zeros((2, players, evidence.cells))
    for block in blocks(evidence, masks, ties=True):
        others = evidence.shape[block.player] - 1
        for direction, cells in block.judged:
            used = block.use[direction]
            above = block.upper(direction, level / evidence.cells, evidence.degrees)
            below = block.lower(direction, level / others, evidence.degrees)
            np.maximum.at(high[block.player], cells[used], above[used])
            np.maximum.at(low[block.player], cells[used], below[used])
    return RegretBounds(low.reshape(players, *evidence.shape), high.reshape(players, *evidence.shape))


def spend(level: float, *, look: int | None = None) -> tuple[float, float]:
    """The levels of the possible and of the confirmed set, half each, where a sentence uses both.

    look: the number of the look, from 1, at a growing sample; 6 / (pi look)^2 of the level then, so that any number
    of looks spends no more than the whole.
    """
    mine = level if look is None else level * 6 / (math.pi * look) ** 2
    return mine / 2, mine / 2
