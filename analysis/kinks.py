"""Contrasts of payoffs that bend: the largest of several branches, each linear in means.

A weighted goal with distances from targets is, for every choice of their signs, a linear sum of means (a branch), and
as a cost it is the largest of these. Pseudo-values of the whole follow one branch near a bend, where the estimate is
too large, and what is concluded from them errs far more often than it promises. So a gain, max over s of B_s(a) less
max over s' of B_s'(b), is judged through every B_s(a) - B_s'(b): some s must pass against all s'. With one distance and
nothing else these are the D and S of `contrasts`.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy.special import stdtr

from analysis.confidence import t_quantile
from analysis.simultaneous import Studentised, flip_scores, studentise

PLAIN = 6.0  # a t beyond which one branch is taken to be below another


@dataclass(frozen=True)
class KinkedBlock:
    """As `contrasts.Block`, for payoffs that are the largest of branches.

    parts: (branch of the first, branch of the second) -> the first's less the second's, (replications, pairs). live:
    whether each branch may be the largest in each of the two cells, (2, branches, pairs). same: an error that is
    rounding only. few: replications below which no spread proves nothing.
    """

    player: int
    first: np.ndarray
    second: np.ndarray
    use: np.ndarray
    parts: Mapping[tuple[int, int], Studentised]
    live: np.ndarray
    same: float
    few: int

    @property
    def judged(self) -> tuple[tuple[int, np.ndarray], ...]:
        """The cells judged in each of the two directions."""
        return (0, self.first), (1, self.second)

    @property
    def ways(self) -> int:
        """How many linear contrasts a pair stands for."""
        return len(self.parts)

    def statistics(self) -> np.ndarray:
        """How strongly each pair speaks against its first cell, and against its second; (2, pairs)."""
        return np.stack([self._strongest(direction) for direction in (0, 1)])

    def _strongest(self, direction: int) -> np.ndarray:
        mean, error = self.gains(direction)
        weakest = ratio(mean, error).min(axis=1)
        return np.where(self.live[direction], weakest, -np.inf).max(axis=0)

    def largest_null(self, rows: np.ndarray) -> np.ndarray:
        """The largest null statistic of the pairs in use for each row of signs, (draws,)."""
        most = np.full(len(rows), -np.inf)
        for (mine, theirs), part in self.parts.items():
            alive = self.live[0, mine] & self.live[1, theirs]
            for use, side in zip(self.use, (1.0, -1.0), strict=True):
                if (used := use & alive).any():
                    np.maximum(most, (rows @ (side * flip_scores(part)[:, used])).max(axis=1), out=most)
        return most

    def gains(self, direction: int) -> tuple[np.ndarray, np.ndarray]:
        """Means and errors of what moving gains: (branches of the cell left, of the cell moved to, pairs)."""
        count = self.live.shape[1]
        mean, error = (
            np.stack(
                [
                    np.stack([getattr(self.parts[mine, theirs], name) for theirs in range(count)])
                    for mine in range(count)
                ]
            )
            for name in ("mean", "error")
        )
        return (mean, error) if direction == 0 else (-mean.swapaxes(0, 1), error.swapaxes(0, 1))

    def not_below(self, direction: int, epsilon: float, degrees: int) -> np.ndarray:
        """One-sided p-value of each pair's "the gain is more than epsilon", (pairs,)."""
        mean, error = self.gains(direction)
        p = np.where(self._tied(error), 1.0, stdtr(degrees, ratio(mean - epsilon, error)))
        least = np.where(self.live[1 - direction], p, np.inf).min(axis=1)
        return np.minimum(1.0, self._choices(direction) * least).max(axis=0)

    def upper(self, direction: int, level: float, degrees: int) -> np.ndarray:
        """Upper bound of each pair's gain, one-sided at `level`, (pairs,)."""
        mean, error = self.gains(direction)
        critical = t_quantile(1 - level / self._choices(direction), degrees)
        ends = mean + critical * np.where(self._tied(error), np.inf, error)
        return np.where(self.live[1 - direction], ends, np.inf).min(axis=1).max(axis=0)

    def lower(self, direction: int, level: float, degrees: int) -> np.ndarray:
        """Lower bound of each pair's gain, one-sided at `level`, (pairs,)."""
        mean, error = self.gains(direction)
        return (mean - t_quantile(1 - level / len(mean), degrees) * error).min(axis=1).max(axis=0)

    def _choices(self, direction: int) -> np.ndarray:
        """How many branches may be the largest in the cell moved to, (pairs,); they share a level."""
        return self.live[1 - direction].sum(axis=0)

    def _tied(self, error: np.ndarray) -> np.ndarray:
        part = next(iter(self.parts.values()))
        return (error <= self.same) & (len(part.scores) < self.few)


def kinked_block(
    branches: np.ndarray,
    player: int,
    first: np.ndarray,
    second: np.ndarray,
    use: np.ndarray,
    same: float,
    few: int,
) -> KinkedBlock:
    """The block of one player's pairs. branches: (branches, replications, cells), costs whose largest mean is paid."""
    ways = range(len(branches))
    parts = {
        (mine, theirs): studentise(branches[mine][:, first] - branches[theirs][:, second])
        for mine, theirs in itertools.product(ways, ways)
    }
    live = np.stack([may_be_largest(branches[:, :, cells]) for cells in (first, second)])
    return KinkedBlock(player, first, second, use, parts, live, same, few)


def may_be_largest(branches: np.ndarray) -> np.ndarray:
    """Whether no other branch is plainly above, (branches, cells); branches (branches, replications, cells)."""
    live = np.ones((len(branches), branches.shape[2]), bool)
    for mine, other in itertools.permutations(range(len(branches)), 2):
        above = studentise(branches[other] - branches[mine])
        live[mine] &= ~(ratio(above.mean, above.error) > PLAIN)
    return live


def ratio(mean: np.ndarray, error: np.ndarray) -> np.ndarray:
    """mean / error; without an error infinite with the mean's sign, and 0 where the mean is 0."""
    sure = np.where(mean == 0, 0.0, np.copysign(np.inf, mean))
    return np.divide(mean, error, out=sure, where=error > 0)
