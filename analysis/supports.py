"""Equilibria in mixed strategies by the strategies they use: for each choice of supports, what makes all equal.

Within its support a player is indifferent, so an equilibrium solves, for given supports, a system that is linear
for two players and multilinear for more (Nash 1951, "Non-cooperative games"; Dickhaut and Kaplan 1991, "A program
for finding Nash equilibria"; McKelvey and McLennan 1996, "Computation of equilibria in finite games"; all from
memory). Two players: solved. More: Newton's method from many starts, so a solution may be missed. Nothing here is
certified; `analysis.mixed` does that.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator

import numpy as np

from analysis.equilibria import Mix

Support = tuple[tuple[int, ...], ...]
STARTS = 40
STEPS = 30
SOLVED = 1e-11  # costs are about 1
POSITIVE = 1e-8  # a probability below this belongs to a smaller support
SAME = 1e-6
VERTEX = 1e-9  # costs are about 1
SYSTEMS_AT_ONCE = 20_000


def count_supports(shape: tuple[int, ...], most: int) -> int:
    """How many choices of supports there are, of at most `most` strategies each."""
    return math.prod(sum(math.comb(n, k) for k in range(1, min(n, most) + 1)) for n in shape)


def supports(shape: tuple[int, ...], most: int) -> Iterator[Support]:
    """Every choice of supports in which some player mixes, of at most `most` strategies each, small ones first."""
    sizes = itertools.product(*(range(1, min(n, most) + 1) for n in shape))
    for wanted in sorted(sizes, key=sum):
        if max(wanted) > 1:
            yield from itertools.product(
                *(itertools.combinations(range(n), k) for n, k in zip(shape, wanted, strict=True))
            )


def on_support(costs: np.ndarray, support: Support, rng: np.random.Generator) -> list[Mix]:
    """The distinct mixes over exactly this support that leave every player indifferent within it.

    costs: (players, *shape), about 1 in size. Isolated solutions as far as Newton's method from random starts
    finds them; of a continuum, some of its points.
    """
    inner = costs[np.ix_(range(len(costs)), *support)]
    starts = [rng.dirichlet(np.ones(len(mine)), STARTS) for mine in support]
    mixes, residual = newton(inner, starts)
    good = (residual < SOLVED) & np.all([mix.min(axis=1) > POSITIVE for mix in mixes], axis=0)
    found: list[Mix] = []
    for place in np.flatnonzero(good):
        mix = tuple(np.asarray(one[place]) for one in mixes)
        if not any(distance(mix, other) < SAME for other in found):
            found.append(mix)
    return [widened(mix, support, costs.shape[1:]) for mix in found]


def distance(one: Mix, other: Mix) -> float:
    """The largest difference of any probability."""
    return max(float(np.abs(a - b).max()) for a, b in zip(one, other, strict=True))


def widened(mix: Mix, support: Support, shape: tuple[int, ...]) -> Mix:
    """A mix over the support as one over all strategies."""
    whole = tuple(np.zeros(n) for n in shape)
    for full, mine, part in zip(whole, support, mix, strict=True):
        full[list(mine)] = part
    return whole


def newton(costs: np.ndarray, starts: list[np.ndarray]) -> tuple[list[np.ndarray], np.ndarray]:
    """Newton's method with least-norm steps on the indifference of all strategies, from each start.

    costs: (players, *shape). starts: (starts, strategies) of each player. Returns the mixes reached and the
    largest residual of each, (starts,); infinity where a run went astray.
    """
    mixes = [one.copy() for one in starts]
    cuts = np.cumsum([one.shape[1] for one in mixes])[:-1]
    for _ in range(STEPS):
        residual, jacobian = system(costs, mixes)
        step = (np.linalg.pinv(jacobian, rcond=1e-9) @ residual[..., None])[..., 0]
        step *= np.minimum(1.0, 0.5 / np.maximum(np.abs(step).max(axis=1, keepdims=True), 1e-300))
        mixes = [one - part for one, part in zip(mixes, np.split(step, cuts, axis=1), strict=True)]
        mixes = [np.clip(one, -2.0, 3.0) for one in mixes]  # far outside nothing is wanted
    return mixes, np.abs(system(costs, mixes)[0]).max(axis=1)


def system(costs: np.ndarray, mixes: list[np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    """Residuals (starts, unknowns) and their Jacobian (starts, unknowns, unknowns) of the indifference equations.

    By player: each strategy's expected cost less the first one's, then the probabilities' sum less 1.
    """
    players = range(len(costs))
    rows, residuals = [], []
    for player in players:
        own = _mean(costs[player], mixes, (player,))
        residuals += [own[:, 1:] - own[:, :1], mixes[player].sum(axis=1, keepdims=True) - 1]
        blocks = [_block(costs[player], mixes, player, other) for other in players]
        rows.append(np.concatenate(blocks, axis=2))
    return np.concatenate(residuals, axis=1), np.concatenate(rows, axis=1)


def _block(cost: np.ndarray, mixes: list[np.ndarray], player: int, other: int) -> np.ndarray:
    """The derivatives of a player's equations in another's probabilities, (starts, own strategies, the other's)."""
    starts, strategies = mixes[other].shape
    block = np.zeros((starts, mixes[player].shape[1], strategies))
    if other == player:
        block[:, -1] = 1
        return block
    both = _mean(cost, mixes, (player, other))
    if other < player:
        both = both.swapaxes(1, 2)
    block[:, :-1] = both[:, 1:] - both[:, :1]
    return block


def _mean(cost: np.ndarray, mixes: list[np.ndarray], keep: tuple[int, ...]) -> np.ndarray:
    """A cost's mean over the players not in `keep`, for each start: (starts, *strategies of those kept)."""
    mean = np.broadcast_to(cost, (len(mixes[0]), *cost.shape))
    for player in reversed(range(len(mixes))):
        if player not in keep:
            mean = np.einsum("b...k,bk->b...", np.moveaxis(mean, player + 1, -1), mixes[player])
    return mean


def extreme_equilibria(costs: np.ndarray, most: int) -> list[Mix]:
    """The extreme equilibria of two players whose mixes use at most `most` strategies, ties or not.

    costs: (2, rows, columns), about 1. An extreme equilibrium is a pair of vertices of the two best-reply polytopes
    (Mangasarian 1964, "Equilibrium points of bimatrix games", from memory). A vertex mixes k strategies so that k
    strategies of the other player are best replies at once, which is a regular linear system; all such are solved.
    """
    x, y = (
        _vertices(costs[1].T, most),
        _vertices(costs[0], most),
    )  # a player's mix makes the other indifferent
    if not len(x) or not len(y):
        return []
    paid = costs[0] @ y.T, costs[1].T @ x.T
    gain = (x @ paid[0] - paid[0].min(axis=0)), (y @ paid[1] - paid[1].min(axis=0)).T
    return [(x[one], y[other]) for one, other in np.argwhere(np.maximum(*gain) <= VERTEX)]


def _vertices(costs: np.ndarray, most: int) -> np.ndarray:
    """The mixes of the columns, (vertices, columns), that are vertices of the rows' best-reply polytope."""
    found = [np.eye(costs.shape[1])]
    for size in range(2, most + 1):
        pairs = itertools.product(*(itertools.combinations(range(n), size) for n in costs.shape))
        while block := list(itertools.islice(pairs, SYSTEMS_AT_ONCE)):
            rows, columns = (np.array([pair[side] for pair in block]) for side in (0, 1))
            part = _indifferent(costs[rows[:, :, None], columns[:, None, :]])
            inside = part.min(axis=1) > POSITIVE
            mixes = np.zeros((int(inside.sum()), costs.shape[1]))
            np.put_along_axis(mixes, columns[inside], part[inside], axis=1)
            paid = mixes @ costs.T
            tied = np.take_along_axis(paid, rows[inside], axis=1).max(axis=1)
            found.append(mixes[tied <= paid.min(axis=1) + VERTEX])
    whole = np.concatenate(found)
    return whole[np.unique(np.round(whole, 9), axis=0, return_index=True)[1]]


def _indifferent(costs: np.ndarray) -> np.ndarray:
    """The mix of the columns that gives all rows one cost, (systems, size); -1 where the system is singular."""
    systems, size = costs.shape[:2]
    matrix = np.ones((systems, size + 1, size + 1))
    matrix[:, :size, :size] = costs
    matrix[:, :size, size], matrix[:, size, size] = -1, 0
    singular = np.abs(np.linalg.det(matrix)) < 1e-13
    matrix[singular] = np.eye(size + 1)
    right = np.zeros((systems, size + 1, 1))
    right[:, size] = 1
    mixes = np.linalg.solve(matrix, right)[:, :size, 0]
    mixes[singular] = -1
    return mixes
