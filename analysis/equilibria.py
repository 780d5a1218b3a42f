"""Best responses, regret and pure equilibria of a payoff table with any number of players.

Payoffs are arrays (players, *shape): one axis per player's strategies, in scenario order. One predicate
certifies every equilibrium: the regret, the most a player gains by deviating alone.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from analysis.goals import Sense

DEFAULT_TOLERANCE = 1e-9
Profile = tuple[int, ...]  # a strategy number per player


def as_costs(payoffs: np.ndarray, sense: Sense) -> np.ndarray:
    """The payoffs as costs to minimise."""
    return payoffs if sense == "cost" else -payoffs


def regrets(payoffs: np.ndarray, sense: Sense) -> np.ndarray:
    """What each player would gain at most by deviating alone, (players, *shape), never below 0."""
    costs = as_costs(np.asarray(payoffs, float), sense)
    return np.stack([cost - cost.min(axis=player, keepdims=True) for player, cost in enumerate(costs)])


def pure_equilibria(
    payoffs: np.ndarray, sense: Sense, *, tolerance: float = DEFAULT_TOLERANCE
) -> list[Profile]:
    """Every profile where no player gains more than the tolerance by deviating alone, in table order.

    tolerance: absolute, in the goal's unit, inclusive.
    """
    certified = np.all(regrets(payoffs, sense) <= tolerance, axis=0)
    return [tuple(map(int, profile)) for profile in np.argwhere(certified)]


@dataclass(frozen=True)
class BestResponse:
    """A player's best strategies against the others' (numbers; the player's own entry of `others` is None)."""

    player: int
    others: tuple[int | None, ...]
    best: tuple[int, ...]


def best_responses(
    payoffs: np.ndarray, sense: Sense, *, tolerance: float = DEFAULT_TOLERANCE
) -> list[BestResponse]:
    """Every player's best responses to every choice of the others, ties within the tolerance included."""
    replies = []
    for player, regret in enumerate(regrets(payoffs, sense)):
        is_best = np.moveaxis(regret <= tolerance, player, -1)
        for others in np.ndindex(is_best.shape[:-1]):
            best = tuple(map(int, np.flatnonzero(is_best[others])))
            replies.append(BestResponse(player, (*others[:player], None, *others[player:]), best))
    return replies


def deviations(profile: Profile, player: int, strategies: int) -> list[Profile]:
    """The profiles that the player can reach alone."""
    return [
        (*profile[:player], one, *profile[player + 1 :])
        for one in range(strategies)
        if one != profile[player]
    ]


Mix = tuple[np.ndarray, ...]  # a probability per strategy, for each player


def expected(cost: np.ndarray, mix: Sequence[np.ndarray], *, keep: Sequence[int] = ()) -> np.ndarray:
    """The mean of one player's cost, (*shape), over the others' draws; axes of the players in `keep` stay."""
    for player in reversed(range(len(mix))):
        if player not in keep:
            cost = np.tensordot(cost, mix[player], axes=(player, 0))
    return cost


def mixed_regrets(payoffs: np.ndarray, sense: Sense, mix: Mix) -> np.ndarray:
    """What each player would gain at most by deviating alone from a mix of strategies, (players,), never below 0.

    payoffs: (players, *shape). mix: probabilities of each player's strategies. A pure profile has the same regret
    as in `regrets`.
    """
    gains = []
    for player, cost in enumerate(as_costs(np.asarray(payoffs, float), sense)):
        own = expected(cost, mix, keep=(player,))
        gains.append(max(0.0, float(own @ mix[player] - own.min())))
    return np.array(gains)
