"""The JSON document of a game, and its table as a DataFrame."""

from __future__ import annotations

from dataclasses import asdict
from typing import TYPE_CHECKING, Any

import numpy as np

from analysis.confidence import ONE_REPLICATION, Estimate
from analysis.findings import findings_of
from analysis.games import Equilibrium, GameAnalysis, welfare_estimate
from analysis.sets_document import sets_document, years_document

if TYPE_CHECKING:
    import pandas as pd


def game_document(game: GameAnalysis) -> dict[str, Any]:
    """Plain values: numbers bare where exact, `{"mean", "low", "high"}` from simulation."""
    table, cost = game.table, game.cost
    players = table.profiles.players
    prices = {
        "price_of_anarchy": cost.price_of_anarchy,
        "price_of_stability": cost.price_of_stability,
        "lost_per_year": cost.lost_per_year,
    }
    return {
        "players": list(players),
        "goal": table.goal.reads,
        "sense": table.goal.sense,
        "welfare": {
            "kind": table.welfare_goal.kind,
            "reads": table.welfare_goal.reads,
            "sense": table.welfare_goal.sense,
        },
        "strategies": {
            player: list(mine) for player, mine in zip(players, table.profiles.strategies, strict=True)
        },
        "payoffs": {player: _payoffs(game, place) for place, player in enumerate(players)},
        "equilibria": [_equilibrium(game, one) for one in game.equilibria],
        "best_responses": _best_responses(game),
        "optimum": {
            "thresholds": [table.profiles.thresholds(profile) for profile in cost.optimum],
            "welfare": _number(game, welfare_estimate(table, cost.optimum[0], game.confidence)),
            "outcome": asdict(game.place(cost.optimum[0])),
        },
        "worst_equilibrium": None if cost.worst is None else table.profiles.thresholds(cost.worst),
        "best_equilibrium": None if cost.best is None else table.profiles.thresholds(cost.best),
        **{name: _number(game, estimate) for name, estimate in prices.items()},
        **_reason(prices),
        "transfer_weight_at_which_the_verdict_turns": asdict(game.turning),
        "tolerance": game.tolerance,
        **sets_document(game),
        "findings": [finding.to_dict() for finding in findings_of(game)],
    }


def _number(game: GameAnalysis, estimate: Estimate) -> Any:
    return estimate.mean if game.is_exact else estimate.to_dict()


def _reason(prices: dict[str, Estimate]) -> dict[str, str]:
    """Why a number is null, where one is."""
    reasons = {name: one.reason for name, one in prices.items() if one.mean is None and one.reason}
    return {"reason": "; ".join(f"{name}: {reason}" for name, reason in reasons.items())} if reasons else {}


def _payoffs(game: GameAnalysis, player: int) -> Any:
    """The player's payoffs as nested lists in scenario order."""
    table = game.table
    if game.is_exact:
        return table.payoffs[player].tolist()
    return _nested(table.payoffs[player], table.low[player], table.high[player])


def _nested(mean: np.ndarray, low: np.ndarray, high: np.ndarray) -> Any:
    if mean.ndim:
        return [_nested(*parts) for parts in zip(mean, low, high, strict=True)]
    if np.isnan(low):
        return Estimate(float(mean), reason=ONE_REPLICATION).to_dict()
    return Estimate(float(mean), float(low), float(high)).to_dict()


def _equilibrium(game: GameAnalysis, one: Equilibrium) -> dict[str, Any]:
    return {
        "thresholds": dict(one.thresholds),
        "kind": one.kind,
        "verdict": one.verdict,
        "regret": {player: _number(game, regret) for player, regret in one.regret.items()},
        "welfare": _number(game, one.welfare),
        "outcome": asdict(game.place(one.profile)),
    } | years_document(game, one)


def _best_responses(game: GameAnalysis) -> dict[str, list[dict[str, Any]]]:
    profiles = game.table.profiles
    replies: dict[str, list[dict[str, Any]]] = {player: [] for player in profiles.players}
    for reply in game.best_responses:
        others = {
            player: mine[place]
            for player, mine, place in zip(profiles.players, profiles.strategies, reply.others, strict=True)
            if place is not None
        }
        best = [profiles.strategies[reply.player][place] for place in reply.best]
        replies[profiles.players[reply.player]].append({"others": others, "best": best})
    return replies


def game_frame(game: GameAnalysis) -> pd.DataFrame:
    """The table, one row a profile: thresholds, payoffs with limits, regrets, welfare, rates and shares by unit."""
    import pandas as pd

    from analysis.equilibria import regrets

    table = game.table
    profiles = table.profiles
    columns: dict[str, Any] = {}
    grids = np.meshgrid(*profiles.strategies, indexing="ij")
    for player, grid in zip(profiles.players, grids, strict=True):
        columns[f"threshold {player}"] = grid.ravel()
    regret = regrets(table.payoffs, table.goal.sense)
    for place, player in enumerate(profiles.players):
        columns[f"payoff {player}"] = table.payoffs[place].ravel()
        if table.low is not None and table.high is not None:
            columns[f"payoff {player} low"], columns[f"payoff {player} high"] = (
                table.low[place].ravel(),
                table.high[place].ravel(),
            )
        columns[f"regret {player}"] = regret[place].ravel()
    columns["welfare"] = table.welfare.ravel()
    for name, values in vars(table.outcomes).items():
        for place, player in enumerate(profiles.players):
            columns[f"{name} {player}"] = values[:, place]
    return pd.DataFrame(columns)
