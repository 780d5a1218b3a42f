"""The JSON document of a game, and its table as a DataFrame."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

import numpy as np

from analysis.confidence import ONE_REPLICATION, Estimate
from analysis.equilibria import Profile
from analysis.findings import findings_of
from analysis.games import Equilibrium, GameAnalysis, welfare_estimate
from analysis.network_rates import network_rates, rates_against
from analysis.profiles import Profiles, choice_columns, chooses, chosen_at
from analysis.raced_document import raced_document
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
        "goals": {player: table.goal.reads_of(place) for place, player in enumerate(players)},
        "sense": table.goal.sense,
        "welfare": {
            "kind": table.welfare_goal.kind,
            "reads": table.welfare_goal.reads,
            "sense": table.welfare_goal.sense,
        },
        "strategies": table.profiles.plain(),
        **({} if table.profiles.is_plain else {"chooses": chooses(table.profiles)}),
        "payoffs": {player: _payoffs(game, place) for place, player in enumerate(players)},
        "equilibria": [_equilibrium(game, one) for one in game.equilibria],
        "best_responses": _best_responses(game),
        "optimum": {
            "thresholds": [table.profiles.thresholds(profile) for profile in cost.optimum],
            **_of_ties(table.profiles, cost.optimum),
            "welfare": _number(game, welfare_estimate(table, cost.optimum[0], game.confidence)),
            "outcome": asdict(game.place(cost.optimum[0])),
            **_with_intervals(game, cost.optimum[0]),
        },
        "worst_equilibrium": None if cost.worst is None else table.profiles.thresholds(cost.worst),
        "best_equilibrium": None if cost.best is None else table.profiles.thresholds(cost.best),
        **_of_extremes(table.profiles, {"worst": cost.worst, "best": cost.best}),
        **{name: _number(game, estimate) for name, estimate in prices.items()},
        **_reason(prices),
        "transfer_weight_at_which_the_verdict_turns": asdict(game.turning),
        "tolerance": game.tolerance,
        **sets_document(game),
        **raced_document(game),
        "findings": [finding.to_dict() for finding in findings_of(game)],
    }


def _with_intervals(game: GameAnalysis, profile: Profile) -> dict[str, Any]:
    """Refusals and transfers of a simulated game's network with intervals, and paired against the optimum."""
    if game.is_exact:
        return {}
    found = {"network": network_rates(game.table, profile, game.confidence)}
    best = game.cost.optimum[0]
    if profile != best:
        found["more_than_at_the_optimum"] = rates_against(game.table, profile, best, game.confidence)
    return found


def _of_ties(profiles: Profiles, ties: Sequence[Profile]) -> dict[str, Any]:
    """The strategies at tied profiles, where thresholds do not tell them."""
    return (
        {} if profiles.is_plain else {"strategies": [chosen_at(profiles, one)["strategies"] for one in ties]}
    )


def _of_extremes(profiles: Profiles, extremes: Mapping[str, Profile | None]) -> dict[str, Any]:
    """The strategies at the extreme equilibria, where thresholds do not tell them."""
    if profiles.is_plain:
        return {}
    return {
        f"{name}_equilibrium_strategies": None if one is None else chosen_at(profiles, one)["strategies"]
        for name, one in extremes.items()
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
    counts = () if table.counts is None else (table.counts,)
    return _nested(table.payoffs[player], table.low[player], table.high[player], *counts)


def _nested(mean: np.ndarray, low: np.ndarray, high: np.ndarray, *counts: np.ndarray) -> Any:
    if mean.ndim:
        return [_nested(*parts) for parts in zip(mean, low, high, *counts, strict=True)]
    if np.isnan(low):
        return Estimate(float(mean), reason=ONE_REPLICATION).to_dict()
    told = Estimate(float(mean), float(low), float(high)).to_dict()
    return told | {"replications": int(counts[0])} if counts else told


def _equilibrium(game: GameAnalysis, one: Equilibrium) -> dict[str, Any]:
    return {
        **chosen_at(game.table.profiles, one.profile),
        "kind": one.kind,
        "verdict": one.verdict,
        "regret": {player: _number(game, regret) for player, regret in one.regret.items()},
        "welfare": _number(game, one.welfare),
        "outcome": asdict(game.place(one.profile)),
        **_with_intervals(game, one.profile),
    } | years_document(game, one)


def _best_responses(game: GameAnalysis) -> dict[str, list[dict[str, Any]]]:
    profiles = game.table.profiles
    replies: dict[str, list[dict[str, Any]]] = {player: [] for player in profiles.players}
    for reply in game.best_responses:
        others = {
            player: mine[place].to_plain()
            for player, mine, place in zip(profiles.players, profiles.strategies, reply.others, strict=True)
            if place is not None
        }
        best = [profiles.strategies[reply.player][place].to_plain() for place in reply.best]
        replies[profiles.players[reply.player]].append({"others": others, "best": best})
    return replies


def game_frame(game: GameAnalysis) -> pd.DataFrame:
    """The table, one row a profile: thresholds or strategies, payoffs with limits, regrets, welfare, then by unit."""
    import pandas as pd

    from analysis.equilibria import regrets

    table = game.table
    profiles = table.profiles
    cells = np.stack(np.unravel_index(np.arange(profiles.cells), profiles.shape), axis=1)
    columns: dict[str, Any] = choice_columns(profiles, cells)
    regret = regrets(table.payoffs, table.goal.sense)
    for place, player in enumerate(profiles.players):
        columns[f"payoff {player}"] = table.payoffs[place].ravel()
        if table.low is not None and table.high is not None:
            columns[f"payoff {player} low"], columns[f"payoff {player} high"] = (
                table.low[place].ravel(),
                table.high[place].ravel(),
            )
        columns[f"regret {player}"] = regret[place].ravel()
    if table.counts is not None:
        columns["replications"] = table.counts.ravel()
    columns["welfare"] = table.welfare.ravel()
    for name, values in vars(table.outcomes).items():
        for place, unit in enumerate(profiles.units):
            columns[f"{name} {unit}"] = values[:, place]
    return pd.DataFrame(columns)
