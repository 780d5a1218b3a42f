"""Equilibria in mixed strategies: found by published methods, certified by regret, never said to be all lightly.

A mix reads as thresholds that are drawn anew each long period, because payoffs are mixed here, not utilisations.
Every solver works on a copy of the game with duplicate and strictly dominated strategies taken out and payoffs
scaled to about 1, for tolerances are absolute; every answer is certified on the original payoffs by its regret.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np

from analysis.equilibria import DEFAULT_TOLERANCE, Mix, as_costs, mixed_regrets, pure_equilibria
from analysis.goals import Sense
from analysis.supports import (
    Support,
    count_supports,
    distance,
    extreme_equilibria,
    newton,
    on_support,
    supports,
    system,
    widened,
)

READS = (
    "a mixed equilibrium reads as closure thresholds drawn anew, with these probabilities, each long period (payoffs "
    "are mixed, not utilisations)"
)
MAY_BE_INCOMPLETE = "the list of mixed equilibria may be incomplete"
MOST_SYSTEMS = 100_000  # of two players: all supports of 9 by 9 strategies, pairs in a table of 17 by 21
MOST_BY_VERTICES = 12  # strategies a player; 12 by 12 took a tenth of a second, more grows without bound
MOST_SUPPORTS = 400  # of three players or more
MOST_CELLS_FOR_A_SIMPLICIAL_SEARCH = 64
MOST_ON_A_SUPPORT = 8
MOST_EQUILIBRIA = 200
ROUNDING = 1e-9  # regret and ties on payoffs of about 1
SAME = 1e-6
SEED = 1962  # of the starts: the same answer on every run


@dataclass(frozen=True)
class MixedEquilibrium:
    """A certified mix. mix: probabilities by player. regret: (players,), in the goal's unit.

    in_continuum: whether other equilibria lie arbitrarily near.
    """

    mix: Mix
    regret: np.ndarray
    in_continuum: bool


@dataclass(frozen=True)
class MixedSearch:
    """What was found in mixed strategies, how, and what the search cannot promise.

    equilibria: those in which some player mixes; the pure ones are `equilibria.pure_equilibria`'s to find.
    """

    equilibria: tuple[MixedEquilibrium, ...]
    method: str
    notes: tuple[str, ...]

    @property
    def may_be_incomplete(self) -> bool:
        """Whether an equilibrium may have been missed."""
        return any(note.startswith(MAY_BE_INCOMPLETE) for note in self.notes)


def mixed_equilibria(
    payoffs: np.ndarray, sense: Sense, *, tolerance: float = DEFAULT_TOLERANCE
) -> MixedSearch:
    """The equilibria of a table, (players, *shape), in which at least one player mixes, each certified by its regret.

    tolerance: regret still allowed, in the goal's unit. The method goes by size; where a table is too large for a
    whole search the notes say what was not tried.
    """
    costs = scaled(as_costs(np.asarray(payoffs, float), sense))
    kept = reduced(costs)
    small = costs[np.ix_(range(len(costs)), *kept)]
    found, method, notes = _searched(small)
    allowed = max(tolerance, ROUNDING * float(np.ptp(as_costs(payoffs, sense), axis=None) or 1.0))
    certified = _certified(found, small, kept, payoffs, sense, allowed)
    if _has_ties(small):
        notes.append(f"{MAY_BE_INCOMPLETE}: payoffs tie")
    if len(certified) > MOST_EQUILIBRIA:
        notes.append(f"{len(certified):,} were found, the first {MOST_EQUILIBRIA} are listed")
    listed = certified[:MOST_EQUILIBRIA]
    near = _continua(
        [one for one, _ in listed],
        payoffs,
        sense,
        allowed,
        pure_equilibria(payoffs, sense, tolerance=allowed),
    )
    if any(near):
        notes.append("some lie on a continuum of equilibria, of which only single points are listed")
    rows = zip(listed, near, strict=True)
    return MixedSearch(
        tuple(MixedEquilibrium(mix, regret, joined) for (mix, regret), joined in rows), method, tuple(notes)
    )


def scaled(costs: np.ndarray) -> np.ndarray:
    """Each player's costs from 0 to 1: the same game, for an increasing affine change of costs moves no equilibrium."""
    flat = costs.reshape(len(costs), -1)
    least, spread = flat.min(axis=1), np.ptp(flat, axis=1)
    spread[spread == 0] = 1
    return ((flat - least[:, None]) / spread[:, None]).reshape(costs.shape)


def reduced(costs: np.ndarray) -> list[np.ndarray]:
    """The strategies of each player that are left without duplicates and, again and again, strictly dominated ones.

    Of strategies that pay everybody the same whatever others do, the first is kept. No equilibrium plays a strictly
    dominated strategy.
    """
    kept = [_distinct(costs, player) for player in range(len(costs))]
    while True:
        before = [len(mine) for mine in kept]
        for player in range(len(costs)):
            own = costs[np.ix_([player], *kept)][0]
            kept[player] = kept[player][
                _undominated(np.moveaxis(own, player, 0).reshape(len(kept[player]), -1))
            ]
        if [len(mine) for mine in kept] == before:
            return kept


def _distinct(costs: np.ndarray, player: int) -> np.ndarray:
    rows = np.moveaxis(costs, player + 1, 0).reshape(costs.shape[player + 1], -1)
    first: list[int] = []
    for row in range(len(rows)):
        if not any(np.abs(rows[row] - rows[other]).max() <= 1e-12 for other in first):
            first.append(row)
    return np.array(first)


def _undominated(own: np.ndarray) -> np.ndarray:
    """own: costs (strategies, others' choices). True where no other strategy is better by a clear margin throughout."""
    worse = np.array([(own[:, None] - own[None, row] > ROUNDING).all(axis=(1, 2)) for row in range(len(own))])
    return ~worse.any(axis=0)


def _searched(costs: np.ndarray) -> tuple[list[Mix], str, list[str]]:
    """Candidates on the reduced game, the method in words, and notes."""
    shape = costs.shape[1:]
    if max(shape) == 1:
        return (
            [],
            "none needed: without strictly dominated strategies, and of like ones but one, one profile is left",
            [],
        )
    if len(shape) == 1:
        return [], "none needed: one player has no reason to mix", []
    if len(shape) == 2:
        return _two_players(costs)
    return _all_supports(costs)


def _two_players(costs: np.ndarray) -> tuple[list[Mix], str, list[str]]:
    rows, columns = shape = costs.shape[1:]
    size, budget = 1, MOST_SYSTEMS
    while size < min(shape):
        budget -= math.comb(rows, size + 1) * math.comb(columns, size + 1)
        if budget < 0:
            break
        size += 1
    found = extreme_equilibria(costs, size) if size > 1 else []
    if size == min(shape):
        return found, "enumeration of all extreme equilibria by supports", []
    if max(shape) <= MOST_BY_VERTICES:
        return [*found, *_by_vertices(costs)], "vertex enumeration, and supports of few strategies", []
    if size == 1:
        note = f"{MAY_BE_INCOMPLETE}: none was tried, for {rows} by {columns} strategies are too many"
        return [], "not tried", [note]
    note = (
        f"{MAY_BE_INCOMPLETE}: with {rows} by {columns} strategies left, only mixes of up to {size} thresholds a "
        "player were tried"
    )
    return found, f"enumeration of supports of up to {size} strategies", [note]


def _by_vertices(costs: np.ndarray) -> list[Mix]:
    """Pairs of vertices of the best-reply polytopes, found by convex hulls."""
    from quantecon.game_theory import NormalFormGame, Player, vertex_enumeration

    game = NormalFormGame((Player(2 - costs[0]), Player(2 - costs[1].T)))
    return [tuple(map(np.asarray, mix)) for mix in vertex_enumeration(game)]


def _all_supports(costs: np.ndarray) -> tuple[list[Mix], str, list[str]]:
    shape = costs.shape[1:]
    size = next((k for k in range(max(shape), 1, -1) if count_supports(shape, k) <= MOST_SUPPORTS), 1)
    if size == 1:
        return _one_by_simplices(costs)
    rng = np.random.default_rng(SEED)
    found = [
        mix
        for support in supports(shape, size)
        for mix in _few(on_support(costs, support, rng), MOST_ON_A_SUPPORT)
    ]
    notes = [f"{MAY_BE_INCOMPLETE}: systems of three players or more are solved from random starts"]
    if size < max(shape):
        notes = [f"{notes[0]}, and only mixes of up to {size} thresholds a player"]
    return found, "enumeration of supports by Newton's method", notes


def _few(found: list[Mix], most: int) -> list[Mix]:
    """All solutions on a support, or three where there are so many that they must be points of a continuum."""
    return found if len(found) <= most else found[:3]


def _one_by_simplices(costs: np.ndarray) -> tuple[list[Mix], str, list[str]]:
    strategies = " by ".join(map(str, costs.shape[1:]))
    if math.prod(costs.shape[1:]) > MOST_CELLS_FOR_A_SIMPLICIAL_SEARCH:
        note = f"{MAY_BE_INCOMPLETE}: none was tried, for {strategies} strategies are too many"
        return [], "not tried", [note]
    note = f"{MAY_BE_INCOMPLETE}: with {strategies} strategies one equilibrium was looked for, which may be a pure one"
    return _simplicial(costs), "simplicial search for one equilibrium", [note]


def _simplicial(costs: np.ndarray) -> list[Mix]:
    """One equilibrium by a simplicial search (McLennan and Tourky 2006, from memory), made sharp on its support."""
    from quantecon.game_theory import NormalFormGame, Player, mclennan_tourky

    players = range(len(costs))
    turned = [np.transpose(2 - costs[i], [(i + k) % len(costs) for k in players]) for i in players]
    rough = mclennan_tourky(NormalFormGame(tuple(Player(np.ascontiguousarray(one)) for one in turned)))
    support: Support = tuple(tuple(map(int, np.flatnonzero(one > 0.01))) for one in rough)
    inner = costs[np.ix_(players, *support)]
    sharp, residual = newton(inner, [one[list(mine)][None] for one, mine in zip(rough, support, strict=True)])
    return [widened(tuple(one[0] for one in sharp), support, costs.shape[1:])] if residual[0] < 1e-9 else []


def _certified(
    found: Iterable[Mix],
    small: np.ndarray,
    kept: list[np.ndarray],
    payoffs: np.ndarray,
    sense: Sense,
    allowed: float,
) -> list[tuple[Mix, np.ndarray]]:
    """The candidates that mix, each once, over all strategies, whose regret is within what is allowed."""
    certified: list[tuple[Mix, np.ndarray]] = []
    for mix in found:
        if max(mixed_regrets(small, "cost", mix), default=0) > 1e-6:
            continue  # far off, and cheap to see on the small game
        support = tuple(tuple(mine.tolist()) for mine in kept)
        whole = widened(tuple(_cleaned(one) for one in mix), support, payoffs.shape[1:])
        regret = mixed_regrets(payoffs, sense, whole)
        known = any(distance(whole, other) < SAME for other, _ in certified)
        if regret.max() <= allowed and not known and not _is_pure(whole):
            certified.append((whole, regret))
    return certified


def _cleaned(mine: np.ndarray) -> np.ndarray:
    positive = np.where(mine > 1e-9, mine, 0.0)
    return positive / positive.sum()


def _is_pure(mix: Mix) -> bool:
    return all(one.max() == 1 for one in mix)


def _has_ties(costs: np.ndarray) -> bool:
    """Whether a player has two strategies of one cost against some choice of the others."""
    for player, cost in enumerate(costs):
        own = np.sort(cost, axis=player)
        if (np.diff(own, axis=player) <= ROUNDING).any():
            return True
    return False


def _continua(
    mixes: list[Mix], payoffs: np.ndarray, sense: Sense, allowed: float, pure: list[tuple[int, ...]]
) -> list[bool]:
    """Whether each mix has other equilibria arbitrarily near, as far as two signs tell.

    Half-way to another equilibrium that differs in one player's mix only lies an equilibrium; or, where the system
    of its support is singular, a small step along the solutions leads to another certified one.
    """
    shape = payoffs.shape[1:]
    points = [*mixes, *(tuple(np.eye(n)[k] for n, k in zip(shape, one, strict=True)) for one in pure)]

    def holds(mix: Mix) -> bool:
        return float(mixed_regrets(payoffs, sense, mix).max()) <= allowed

    def between(mix: Mix) -> Iterator[Mix]:
        for other in points:
            moved = [k for k, (a, b) in enumerate(zip(mix, other, strict=True)) if np.abs(a - b).max() > SAME]
            if len(moved) == 1:
                yield tuple((a + b) / 2 for a, b in zip(mix, other, strict=True))

    costs = scaled(as_costs(np.asarray(payoffs, float), sense))
    return [any(map(holds, itertools.chain(between(mix), _moved(costs, mix)))) for mix in mixes]


def _moved(costs: np.ndarray, mix: Mix, far: float = 1e-3) -> Iterator[Mix]:
    """Other solutions on the support of a mix, a small step away along each direction in which its system is flat."""
    support: Support = tuple(tuple(map(int, np.flatnonzero(one))) for one in mix)
    inner = costs[np.ix_(range(len(costs)), *support)]
    here = [one[list(mine)][None] for one, mine in zip(mix, support, strict=True)]
    _, sizes, directions = np.linalg.svd(system(inner, here)[1][0])
    cuts = np.cumsum([one.shape[1] for one in here])[:-1]
    for direction in directions[sizes < 1e-7 * max(1.0, sizes.max())]:
        step = np.split(direction / np.abs(direction).max() * far, cuts)
        for sign in (1, -1):
            there, residual = newton(inner, [one + sign * part for one, part in zip(here, step, strict=True)])
            moved = max(float(np.abs(a - b).max()) for a, b in zip(there, here, strict=True))
            inside = min(float(one.min()) for one in there) > 0
            if residual[0] < 1e-10 and moved > far / 2 and inside:
                yield widened(tuple(one[0] for one in there), support, costs.shape[1:])
