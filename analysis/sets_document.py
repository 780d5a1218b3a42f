"""What the two sets of a simulated game say, as a document and in plain sentences."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from analysis.confidence import Estimate
from analysis.controls import controls_document, variance_ratio
from analysis.equilibria import regrets
from analysis.games import Equilibrium, GameAnalysis, Sets
from analysis.noticing import years_to_notice
from analysis.payoffs import PayoffTable
from analysis.profiles import chosen_at, told

NO_GAIN = "nothing to notice: no gain from deviating"
NO_LATEST = "no latest: the gain from deviating may be none"
FEW = 10  # replications, below which nothing is excluded


def sets_document(game: GameAnalysis) -> dict[str, Any]:
    """The document's keys on what is possible, confirmed and undecided."""
    if game.is_exact:
        return {"undecided": []}
    if game.sets is None:
        return {
            "undecided": None,
            "undecided_reason": "one replication decides nothing; every verdict is `estimated`",
        }
    return {
        "undecided": [_undecided(game, one) for one in game.undecided],
        "possible": int(game.sets.possible.mask.sum()),
        "confirmed": int((game.sets.confirmed.mask & game.sets.possible.mask).sum()),
        "confirmed_only": [told(game.table.profiles, profile) for profile in _confirmed_only(game.sets)],
        "epsilon": {"value": game.sets.confirmed.epsilon, "origin": game.sets.origin},
        "set_confidence": {
            "both": game.confidence,
            "possible": 1 - game.sets.possible.level,
            "confirmed": 1 - game.sets.confirmed.level,
        },
        "estimated_equilibria": [told(game.table.profiles, profile) for profile in game.found],
        "controls": controls_document(game.table.controls, _won(game.table)),
    }


def _confirmed_only(sets: Sets) -> list[tuple[int, ...]]:
    """Profiles within epsilon that cannot be exact equilibria."""
    return [tuple(map(int, one)) for one in np.argwhere(sets.confirmed.mask & ~sets.possible.mask)]


def _undecided(game: GameAnalysis, one: Equilibrium) -> dict[str, Any]:
    return {
        **chosen_at(game.table.profiles, one.profile),
        "regret": {player: regret.to_dict() for player, regret in one.regret.items()},
    } | years_document(game, one)


def years_document(game: GameAnalysis, one: Equilibrium) -> dict[str, Any]:
    """Years to notice by player, where replications tell."""
    if game.sets is None:
        return {}
    return {"years_to_notice": {player: years.to_dict() for player, years in _years_of(game, one).items()}}


def _years_of(game: GameAnalysis, one: Equilibrium) -> dict[str, Estimate]:
    """Player -> years of own data until the regret shows; the soonest (low) belongs to its upper end."""
    assert game.sets is not None
    spreads = game.sets.spread[(slice(None), *one.profile)]
    return {
        player: _years(regret, float(spread))
        for (player, regret), spread in zip(one.regret.items(), spreads, strict=True)
    }


def _years(regret: Estimate, spread: float) -> Estimate:
    if regret.high is None:
        return Estimate(None, reason=regret.reason)
    mean, late, soon = (years_to_notice(end or 0.0, spread) for end in (regret.mean, regret.low, regret.high))
    return Estimate(mean, soon, late, NO_GAIN if soon is None else NO_LATEST if late is None else None)


def _won(table: PayoffTable) -> dict[str, Any]:
    """The middle variance ratio over profiles of what each player's payoff rests on; null where none is left."""
    after = table.replicates if table.signed_replicates is None else table.signed_replicates
    ratios = variance_ratio(table.unadjusted, after)
    return {player: _middle(mine) for player, mine in zip(table.profiles.players, ratios, strict=True)}


def _middle(ratios: np.ndarray) -> float | None:
    known = ratios[~np.isnan(ratios)]
    return float(np.median(known)) if known.size else None


def sets_sentences(game: GameAnalysis) -> Iterator[str]:
    """The sets in plain words."""
    sets = game.sets
    assert sets is not None
    listed, both = len(game.equilibria), len(game.equilibria) - len(game.undecided)
    confidence, epsilon = 100 * game.confidence, sets.confirmed.epsilon
    if not listed:
        yield f"No profile can be a pure equilibrium of this game ({confidence:g} % confidence)"
    else:
        yield (
            f"{listed} of {sets.possible.mask.size} profiles may be equilibria, and every pure equilibrium is among "
            f"them; {both} of these {'is' if both == 1 else 'are'} confirmed within a regret of {epsilon:.2g} "
            f"({sets.origin}); the two statements together hold with {confidence:g} % confidence"
        )
    yield from _epsilon(game, sets)
    others = len(_confirmed_only(sets))
    if others:
        yield f"{others} more {'is' if others == 1 else 'are'} within that regret, but no exact equilibrium"
    if (game.table.replications or 0) < FEW:
        yield f"With fewer than {FEW} replications no profile is excluded, and none that ties with another is confirmed"


def _epsilon(game: GameAnalysis, sets: Sets) -> Iterator[str]:
    """What epsilon is in the goal's unit, and how much of the table has no larger regret anyway."""
    epsilon, (scale, unit) = sets.confirmed.epsilon, game.table.goal.display_scale
    within, cells = int((_largest_regrets(game) <= epsilon).sum()), sets.possible.mask.size
    yield (
        f"Epsilon is {scale * epsilon:.2g} {unit}; by the estimates {within} of {cells} profiles have no larger "
        "regret. Confirmed means that nobody gains more than that by leaving alone, which is less than to be an "
        "equilibrium: a smaller --epsilon confirms fewer profiles and says more of them"
    )


def _largest_regrets(game: GameAnalysis) -> np.ndarray:
    """Each profile's largest estimated regret, of paired replications, (cells,)."""
    if game.race is not None and game.race.looks:
        return game.race.regret.max(axis=0)
    return regrets(game.table.payoffs, game.table.goal.sense).max(axis=0).ravel()
