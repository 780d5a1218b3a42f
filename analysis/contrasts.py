"""The paired contrasts of a game: for every profile, player and deviation, what the replications say of the gain.

Two forms. *Costs*: each replication gives values whose mean is the payoff (pseudo-values, for functions of means), and
a contrast is a difference of two. *Distances*, for |E U - T|: each replication gives V = U - T, and b beats a exactly
where D and S have opposite signs, D = V_b - V_a and S = V_a + V_b; both are linear in means, so nothing breaks near
the target. Contrasts are made block by block, so that memory is bounded.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from scipy.special import stdtr

from analysis.confidence import t_quantile
from analysis.equilibria import as_costs
from analysis.kinks import PLAIN, KinkedBlock, kinked_block, ratio
from analysis.payoffs import PayoffTable
from analysis.simultaneous import Studentised, flip_scores, studentise

LEAST_DIFFERENCES = 10  # non-zero ones, below which two profiles count as tied
SAME = 1e-12  # a difference of rounding only, against the largest value
AT_ONCE = 1_000_000  # numbers held by one block of draws x contrasts


@dataclass(frozen=True)
class Evidence:
    """Paired replications of a game.

    values: (replications, players, cells), costs or signed distances, after control variates. raw: the same before
    them, in which ties are exact. degrees: of every error. distances: whether a player's cost is |mean of values|.
    branches: by player (branches, replications, cells), costs whose largest mean is the player's, where that has bends;
    None for a player, or for all, where `values` say it all.
    """

    values: np.ndarray
    raw: np.ndarray
    shape: tuple[int, ...]
    distances: bool
    degrees: int
    branches: tuple[np.ndarray | None, ...] | None = None

    @property
    def cells(self) -> int:
        """Number of profiles."""
        return self.values.shape[2]

    @property
    def costs(self) -> np.ndarray:
        """The estimated costs, (players, cells)."""
        return self.costs_at(lambda values: values.mean(axis=0)[None])[0]

    def costs_at(self, mean: Callable[[np.ndarray], np.ndarray]) -> np.ndarray:
        """Costs by means of one's own, (tables, players, cells); `mean` takes (replications, ...) to (tables, ...)."""
        means = mean(self.values)
        costs = np.abs(means) if self.distances else means
        for player, bent in enumerate(self.branches or ()):
            if bent is not None:
                costs[:, player] = np.max([mean(one) for one in bent], axis=0)
        return costs

    @cached_property
    def same(self) -> float:
        """The largest difference that is rounding only."""
        return SAME * float(np.nanmax(np.abs(self.raw), initial=0.0))

    @cached_property
    def signs(self) -> tuple[np.ndarray, np.ndarray]:
        """For distances: whether the sign of each mean is plain, and whether it is below 0; (players, cells) each."""
        with np.errstate(invalid="ignore"):
            parts = [studentise(self.values[:, player]) for player in range(self.values.shape[1])]
            t = np.stack([_t(part) for part in parts])
            return np.abs(t) > PLAIN, t < 0


def paired_costs(costs: np.ndarray, *, raw: np.ndarray | None = None, degrees: int | None = None) -> Evidence:
    """Evidence from costs to minimise, (replications, players, *shape). raw: before control variates."""
    return _evidence(costs, raw, degrees, distances=False)


def paired_distances(
    signed: np.ndarray, *, raw: np.ndarray | None = None, degrees: int | None = None
) -> Evidence:
    """Evidence from signed distances U - T, (replications, players, *shape), whose costs are |E U - T|."""
    return _evidence(signed, raw, degrees, distances=True)


def _evidence(
    values: np.ndarray, raw: np.ndarray | None, degrees: int | None, *, distances: bool
) -> Evidence:
    flat = (*values.shape[:2], -1)
    return Evidence(
        values.reshape(flat), (values if raw is None else raw).reshape(flat), values.shape[2:], distances,
        len(values) - 1 if degrees is None else degrees,
    )  # fmt: skip


def evidence_of(table: PayoffTable) -> Evidence:
    """The evidence of a simulated table, in the better form that its goal has."""
    sense = table.goal.sense
    assert table.replicates is not None
    if table.signed_replicates is not None:
        return paired_distances(table.signed_replicates, raw=table.raw_replicates, degrees=table.degrees)
    raw = None if table.raw_replicates is None else as_costs(table.raw_replicates, sense)
    found = paired_costs(as_costs(table.replicates, sense), raw=raw, degrees=table.degrees)
    return found if table.branches is None else with_branches(found, table.branches)


def with_branches(evidence: Evidence, branches: Sequence[np.ndarray | None]) -> Evidence:
    """The same of payoffs that bend. branches: by player (branches, replications, *shape), None without a bend."""
    flat = tuple(None if one is None else one.reshape(*one.shape[:2], -1) for one in branches)
    return replace(evidence, branches=flat)


@dataclass(frozen=True)
class Masks:
    """Which contrasts count. alive: (cells,), profiles judged. dropped: (players, cells), cells that are no longer
    needed as a deviation of that player."""

    alive: np.ndarray
    dropped: np.ndarray

    def pairs(self, player: int, first: np.ndarray, second: np.ndarray) -> np.ndarray:
        """Whether `first` is judged against the deviation `second`, and the reverse; (2, pairs)."""
        dropped = self.dropped[player]
        return np.stack([self.alive[first] & ~dropped[second], self.alive[second] & ~dropped[first]])


def masks_of(evidence: Evidence, alive: np.ndarray | None, dropped: np.ndarray | None) -> Masks:
    """Masks over cells from masks over the table's shape; None is everything judged, nothing dropped."""
    players = evidence.values.shape[1]
    return Masks(
        np.ones(evidence.cells, bool) if alive is None else np.asarray(alive, bool).ravel().copy(),
        np.zeros((players, evidence.cells), bool) if dropped is None else
        np.asarray(dropped, bool).reshape(players, evidence.cells),
    )  # fmt: skip


@dataclass(frozen=True)
class Block:
    """Contrasts of one player between cells, `first` and `second`, that differ in the own strategy only.

    use: (2, pairs), whether the first is judged against the second, and the reverse. D: second less first, for costs
    first less second (the gain of moving). S: the sum, for distances. plain, below: what is known of the sign of the
    cell moved to, (2, pairs). same: an error that is rounding only.
    """

    player: int
    first: np.ndarray
    second: np.ndarray
    use: np.ndarray
    D: Studentised
    S: Studentised | None
    plain: np.ndarray | None
    below: np.ndarray | None
    same: float = 0.0

    @property
    def ways(self) -> int:
        """How many linear contrasts a pair stands for."""
        return 1 if self.S is None else 2

    @property
    def judged(self) -> tuple[tuple[int, np.ndarray], ...]:
        """The cells judged in each of the two directions."""
        return (0, self.first), (1, self.second)

    def statistics(self) -> np.ndarray:
        """How strongly each pair speaks against its first cell, and against its second; (2, pairs)."""
        d = _t(self.D)
        if self.S is None:
            return np.stack([d, -d])
        s = _t(self.S)
        return np.stack(
            [
                np.maximum(np.minimum(d, -s), np.minimum(-d, s)),
                np.maximum(np.minimum(d, s), np.minimum(-d, -s)),
            ]
        )

    def largest_null(self, rows: np.ndarray) -> np.ndarray:
        """The largest null statistic of the pairs in use for each row of signs, (draws,), as sums of flipped scores.

        For distances with a plain sign of D only S can err, and on one side; else both may, on either side.
        """
        if self.S is None:
            return self._largest_one_sided(rows, self.D, np.ones(len(self.first)))
        d = _t(self.D)
        known = np.abs(d) > PLAIN
        most = self._largest_one_sided(rows, self.S, -np.sign(d), among=known)
        if not known.all():
            open_ = ~known
            for part in (self.D, self.S):
                null = rows @ flip_scores(part)[:, open_]
                np.maximum(most, null.max(axis=1), out=most)
                np.maximum(most, -null.min(axis=1), out=most)
        return most

    def _largest_one_sided(
        self, rows: np.ndarray, part: Studentised, sign: np.ndarray, *, among: np.ndarray | bool = True
    ) -> np.ndarray:
        """The largest of sign x null where the first is judged, and of its reverse where the second is."""
        one, other = self.use[0] & among, self.use[1] & among
        most, scores = np.full(len(rows), -np.inf), flip_scores(part)
        for used, side in ((one, sign), (other, -sign)):
            if used.any():
                np.maximum(most, (rows @ (scores[:, used] * side[used])).max(axis=1), out=most)
        return most

    def gains(self, direction: int) -> tuple[np.ndarray, np.ndarray]:
        """Means and errors of what moving may gain: (signs of the cell left, signs of the cell moved to, pairs).

        For costs one of each. For distances the gain |V_a| - |V_b| is the largest over the first axis of the smallest
        over the second of sign x V_a - sign x V_b.
        """
        if self.S is None:
            sign = 1.0 if direction == 0 else -1.0
            return sign * self.D.mean[None, None], self.D.error[None, None]
        d = -self.D.mean if direction == 0 else self.D.mean  # V_a - V_b
        s = self.S.mean
        return np.array([[d, s], [-s, -d]]), np.array(
            [[self.D.error, self.S.error], [self.S.error, self.D.error]]
        )

    def settled(
        self, direction: int, values: np.ndarray, doubtful: np.ndarray, worst: np.ufunc
    ) -> np.ndarray:
        """One value a pair: for the sign moved to, the plain one's, else `doubtful`; then the worst sign left."""
        if self.plain is None or self.below is None:
            return worst.reduce(values[:, 0], axis=0)
        likely = np.where(self.below[direction], values[:, 1], values[:, 0])
        return worst.reduce(np.where(self.plain[direction], likely, doubtful), axis=0)

    def not_below(self, direction: int, epsilon: float, degrees: int) -> np.ndarray:
        """One-sided p-value of each pair's "the gain is more than epsilon", (pairs,)."""
        mean, error = self.gains(direction)
        p = np.where(self._tied(error), 1.0, stdtr(degrees, ratio(mean - epsilon, error)))
        return self.settled(direction, p, np.minimum(1.0, p.shape[1] * p.min(axis=1)), np.maximum)

    def upper(self, direction: int, level: float, degrees: int) -> np.ndarray:
        """Upper bound of each pair's gain, one-sided at `level`, (pairs,)."""
        mean, error = self.gains(direction)
        error = np.where(self._tied(error), np.inf, error)
        sure = mean + t_quantile(1 - level, degrees) * error
        split = mean + t_quantile(1 - level / mean.shape[1], degrees) * error
        return self.settled(direction, sure, split.min(axis=1), np.maximum)

    def _tied(self, error: np.ndarray) -> np.ndarray:
        """Where there is no spread in so few replications that this proves nothing."""
        return (error <= self.same) & (len(self.D.scores) < LEAST_DIFFERENCES)

    def lower(self, direction: int, level: float, degrees: int) -> np.ndarray:
        """Lower bound of each pair's gain, one-sided at `level`, (pairs,)."""
        mean, error = self.gains(direction)
        critical = t_quantile(1 - level / len(mean), degrees)
        return (mean - critical * error).min(axis=1).max(axis=0)


def _t(parts: Studentised) -> np.ndarray:
    return ratio(parts.mean, parts.error)


def pairs(shape: tuple[int, ...], player: int, at_once: int) -> Iterator[tuple[np.ndarray, np.ndarray]]:
    """Cell numbers of every two cells that differ in the player's strategy only, about `at_once` pairs at a time."""
    columns = np.moveaxis(np.arange(int(np.prod(shape))).reshape(shape), player, 0).reshape(shape[player], -1)
    low, high = np.triu_indices(len(columns), 1)
    step = max(1, at_once // columns.shape[1])
    for start in range(0, len(low), step):
        yield columns[low[start : start + step]].ravel(), columns[high[start : start + step]].ravel()


def blocks(
    evidence: Evidence, masks: Masks, *, draws: int = 1, ties: bool = False
) -> Iterator[Block | KinkedBlock]:
    """Every contrast that counts, in blocks for so many draws.

    ties: whether pairs with fewer than 10 non-zero differences are there too; they exclude nothing.
    """
    at_once = max(1, AT_ONCE // max(draws, len(evidence.values)))
    for player in range(evidence.values.shape[1]):
        bent = None if evidence.branches is None else evidence.branches[player]
        few_at_once = at_once if bent is None else max(1, at_once // len(bent) ** 2)
        for first, second in pairs(evidence.shape, player, few_at_once):
            use = masks.pairs(player, first, second)
            wanted = use.any(axis=0)
            if not ties:
                wanted[wanted] = _differ(evidence, player, first[wanted], second[wanted])
            if wanted.any():
                yield _block(evidence, player, first[wanted], second[wanted], use[:, wanted])


def _differ(evidence: Evidence, player: int, first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Whether enough replications tell the two cells apart."""
    values = evidence.raw[:, player]
    return (np.abs(values[:, second] - values[:, first]) > evidence.same).sum(axis=0) >= LEAST_DIFFERENCES


def _block(
    evidence: Evidence, player: int, first: np.ndarray, second: np.ndarray, use: np.ndarray
) -> Block | KinkedBlock:
    if evidence.branches is not None and (bent := evidence.branches[player]) is not None:
        return kinked_block(bent, player, first, second, use, evidence.same, LEAST_DIFFERENCES)
    one, other = evidence.values[:, player, first], evidence.values[:, player, second]
    if not evidence.distances:
        return Block(player, first, second, use, studentise(one - other), None, None, None, evidence.same)
    plain, below = (known[player] for known in evidence.signs)
    moved_to = (second, first)
    return Block(
        player, first, second, use, studentise(other - one), studentise(one + other),
        np.stack([plain[cells] for cells in moved_to]), np.stack([below[cells] for cells in moved_to]),
        evidence.same,
    )  # fmt: skip
