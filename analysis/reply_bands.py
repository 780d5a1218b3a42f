"""Which strategies may be best replies: a set for every choice of the others, all at once, and what refutes monotony.

One max-t over all players, columns and pairs of strategies: with the stated confidence every true best reply is in its
set. A curve of estimated best replies falls somewhere in most samples even where the true one never does; so
"non-decreasing" is refuted only where a set lies wholly below one at lower thresholds of the others.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from analysis.contrasts import Evidence, blocks, masks_of
from analysis.simultaneous import DRAWS, flip_to_student, sign_flips

NO_THEOREM = (
    "Rising replies are promised by single crossing only where each unit's utilisation rises strictly in its own "
    "threshold and never in the others'; on a plateau below the target the least reply may fall, above it the "
    "greatest, and searches from both ends may then miss equilibria. For players with several units, or two "
    "parameters, no theorem is at hand."
)


@dataclass(frozen=True)
class ReplyBands:
    """Possible best replies.

    possible: bool (players, *shape), whether the player's strategy there may be a best reply to the others' there.
    estimated: the same for the point estimate. level: the chance that any true best reply is missing; 0 if exact.
    """

    possible: np.ndarray
    estimated: np.ndarray
    level: float

    def ends(self, player: int) -> tuple[np.ndarray, np.ndarray]:
        """The least and the greatest possible reply (strategy numbers) to each choice of the others, (*others)."""
        own = np.moveaxis(self.possible[player], player, 0)
        return own.argmax(axis=0), len(own) - 1 - own[::-1].argmax(axis=0)

    @property
    def crossings(self) -> np.ndarray:
        """Profiles in which every strategy may be a best reply, bool (*shape)."""
        return self.possible.all(axis=0)


def reply_bands(
    evidence: Evidence, best: np.ndarray, level: float, rng: np.random.Generator, *, draws: int = DRAWS
) -> ReplyBands:
    """The sets at the given level. best: the point estimate's best replies, bool (players, *shape)."""
    masks = masks_of(evidence, None, None)
    rows = sign_flips(rng, draws, len(evidence.values))
    most = np.full(draws, -np.inf)
    for block in blocks(evidence, masks, draws=draws):
        np.maximum(most, block.largest_null(rows), out=most)
    beaten = np.zeros((len(best), evidence.cells), bool)
    if not np.isneginf(most).all():
        beyond = float(np.quantile(most, 1 - level, method="higher"))
        critical = flip_to_student(beyond, len(evidence.values), evidence.degrees)
        for block in blocks(evidence, masks):
            against = block.statistics() > critical
            for direction, cells in block.judged:
                np.logical_or.at(beaten[block.player], cells, against[direction])
    return ReplyBands(~beaten.reshape(best.shape), best, level)


def exact_bands(best: np.ndarray) -> ReplyBands:
    """The best replies of an exact table, ties within the tolerance included."""
    return ReplyBands(best, best, 0.0)


@dataclass(frozen=True)
class Fall:
    """Where replies provably fall: at least `before` against `lower`, at most `after` against `upper`.

    All strategy numbers; lower and upper are the others', lower nowhere above upper.
    """

    player: int
    lower: tuple[int, ...]
    upper: tuple[int, ...]
    before: int
    after: int


def first_fall(bands: ReplyBands, player: int) -> Fall | None:
    """A place that refutes "this player's least and greatest best replies never fall as others' thresholds rise".

    Refuted only if a running maximum of lower ends exceeds an upper end; None otherwise, which proves nothing.
    """
    least, greatest = bands.ends(player)
    running = least
    for axis in range(least.ndim):
        running = np.maximum.accumulate(running, axis=axis)
    falls = np.argwhere(running > greatest)
    if not len(falls):
        return None
    upper = tuple(map(int, falls[0]))
    below = least[tuple(slice(0, end + 1) for end in upper)]
    lower = tuple(map(int, np.unravel_index(int(below.argmax()), below.shape)))
    return Fall(player, lower, upper, int(least[lower]), int(greatest[upper]))
