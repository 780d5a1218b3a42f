"""What a game's table says beyond its pure equilibria: mixed and correlated ones, dynamics, possible best replies."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np

from analysis.anarchy import cost_of_selfishness
from analysis.confidence import Estimate
from analysis.contrasts import evidence_of
from analysis.correlated import Correlated, CorrelatedBounds, correlated_bounds
from analysis.dynamics import CYCLE, EQUILIBRIUM, RULES, TABLES, Path, Reached, reached_shares
from analysis.equilibria import Mix, Profile, expected, regrets
from analysis.games import ESTIMATED, EXACT, GameAnalysis
from analysis.mixed import READS, MixedEquilibrium, MixedSearch, mixed_equilibria
from analysis.price_bands import resampling_weights
from analysis.prices import PriceStudy, exact_study, resampled_costs, simulated_study
from analysis.prices_document import study_document
from analysis.profiles import Profiles, chosen_at, nearest_profile, text_of, told
from analysis.raced_prices import raced_study
from analysis.reply_bands import NO_THEOREM, ReplyBands, exact_bands, first_fall, reply_bands
from sim.scenario import Policy

MOST_HELD = 20_000_000  # numbers of all resampled tables together
MOST_SHOWN = 20
MOST_CELLS_FOR_BANDS = 5_000  # of a simulated table, for best-reply sets
WARNING_OF_TIME = "best replies are models of how thresholds might move, not forecasts"


@dataclass(frozen=True)
class Wanted:
    """What was asked for. mixed: None is the default, where an exact game of two has no pure equilibrium."""

    mixed: bool | None = None
    correlated: bool = False
    dynamics: bool = False

    def mixes(self, game: GameAnalysis) -> bool:
        """Whether to look for mixed equilibria."""
        if self.mixed is not None:
            return self.mixed
        return game.is_exact and not game.equilibria and len(game.table.profiles.players) == 2


@dataclass(frozen=True)
class Beyond:
    """All of it; None where not asked for."""

    game: GameAnalysis
    study: PriceStudy
    bands: ReplyBands | None
    mixed: MixedSearch | None = None
    correlated: CorrelatedBounds | None = None
    start: Profile | None = None
    paths: Mapping[str, Path] | None = None
    reached: Mapping[str, Reached] | None = None


def beyond(game: GameAnalysis, wanted: Wanted, present: Policy, seed: int) -> Beyond:
    """What the table says beyond its pure equilibria. present: the rules now in force."""
    table, sense = game.table, game.table.goal.sense
    start = paths = reached = None
    if wanted.dynamics:
        start = nearest_profile(table.profiles, present)
        paths = {
            name: rule(table.payoffs, sense, start, tolerance=game.tolerance) for name, rule in RULES.items()
        }
        reached = _reached(game, start, seed)
    return Beyond(
        game,
        _study(game, seed),
        _bands(game, seed),
        mixed_equilibria(table.payoffs, sense, tolerance=game.tolerance) if wanted.mixes(game) else None,
        correlated_bounds(table.payoffs, sense, table.welfare, table.welfare_goal.sense)
        if wanted.correlated
        else None,
        start,
        paths,
        reached,
    )


def _study(game: GameAnalysis, seed: int) -> PriceStudy:
    if game.race is not None:
        return raced_study(game.table, game.found)
    if game.sets is None:
        return exact_study(game.table, game.found)
    sets = game.sets
    return simulated_study(
        game.table, game.found, sets.possible.mask, sets.confirmed.mask, sets.confirmed.epsilon,
        confidence=game.confidence, tolerance=game.tolerance, seed=seed,
    )  # fmt: skip


def _bands(game: GameAnalysis, seed: int) -> ReplyBands | None:
    best = regrets(game.table.payoffs, game.table.goal.sense) <= game.tolerance
    if game.is_exact:
        return exact_bands(best)
    if game.sets is None or game.race is not None or best[0].size > MOST_CELLS_FOR_BANDS:
        return None
    rng = np.random.default_rng([seed, 4])
    return reply_bands(evidence_of(game.table), best, 1 - game.confidence, rng)


def _reached(game: GameAnalysis, start: Profile, seed: int) -> dict[str, Reached] | None:
    """Over resampled tables; None where the table is exact, of one replication, or too large."""
    if game.sets is None or game.race is not None or game.table.payoffs.size * TABLES > MOST_HELD:
        return None
    weights = resampling_weights(np.random.default_rng([seed, 5]), TABLES, len(game.table.replicates))
    return reached_shares(resampled_costs(game.table, weights), "cost", start, tolerance=game.tolerance)


# ---- the document ----


def beyond_document(found: Beyond) -> dict[str, Any]:
    """The document's keys. `equilibria` gets the mixed ones, after the pure ones, by `with_mixed`."""
    game = found.game
    document = study_document(found.study, exact=game.is_exact)
    if found.bands is not None:
        document["possible_best_responses"] = _bands_document(game, found.bands)
    if found.mixed is not None:
        document["mixed"] = _mixed_document(game, found.mixed)
    if found.correlated is not None:
        document["correlated"] = _correlated_document(game, found.correlated)
    if found.paths is not None:
        document["dynamics"] = _dynamics_document(found)
    return document


def with_mixed(equilibria: list[dict[str, Any]], found: Beyond) -> list[dict[str, Any]]:
    """The listed equilibria, the mixed ones after the pure ones."""
    if found.mixed is None:
        return equilibria
    return [*equilibria, *(_mixed_row(found.game, one) for one in found.mixed.equilibria)]


def _mixed_row(game: GameAnalysis, one: MixedEquilibrium) -> dict[str, Any]:
    profiles = game.table.profiles
    one_threshold = profiles.is_plain
    welfare = float(expected(game.table.welfare, one.mix))

    def number(value: float) -> Any:
        reason = "of the estimated table; no interval is worked out"
        return value if game.is_exact else Estimate(value, reason=reason).to_dict()

    return {
        "thresholds": {
            player: [
                {"threshold" if one_threshold else "strategy": strategy, "probability": float(share)}
                for strategy, share in zip(mine, mix, strict=True)
                if share > 0
            ]
            for (player, mine), mix in zip(profiles.plain().items(), one.mix, strict=True)
        },
        "kind": "mixed",
        "verdict": EXACT if game.is_exact else ESTIMATED,
        "regret": {
            player: number(float(regret)) for player, regret in zip(profiles.players, one.regret, strict=True)
        },
        "welfare": number(welfare),
        "in_continuum": one.in_continuum,
    }


def _mixed_document(game: GameAnalysis, search: MixedSearch) -> dict[str, Any]:
    worths = [float(expected(game.table.welfare, one.mix)) for one in search.equilibria]
    return {
        "found": len(search.equilibria),
        "method": search.method,
        "notes": list(search.notes),
        "may_be_incomplete": search.may_be_incomplete,
        "reads": READS,
        "of": "the exact table" if game.is_exact else "the estimated table",
    } | _prices_with(game, worths)


def _prices_with(game: GameAnalysis, worths: list[float]) -> dict[str, Any]:
    """Prices over the pure and the mixed equilibria of the table together."""
    welfare = np.concatenate([game.table.welfare.ravel(), worths])
    pure = [(int(np.ravel_multi_index(one, game.table.welfare.shape)),) for one in game.found]
    mixed = [(place,) for place in range(game.table.welfare.size, len(welfare))]
    sense = game.table.welfare_goal.sense
    cost = cost_of_selfishness(welfare, sense, [*pure, *mixed])
    prices = {"anarchy": cost.price_of_anarchy, "stability": cost.price_of_stability}
    found: dict[str, Any] = {f"price_of_{name}_with_mixed": one.mean for name, one in prices.items()}
    reason = cost.price_of_anarchy.reason
    return found | ({} if cost.price_of_anarchy.mean is not None else {"reason": reason})


def _correlated_document(game: GameAnalysis, bounds: CorrelatedBounds) -> dict[str, Any]:
    return {
        "of": "the exact table" if game.is_exact else "the estimated table, without intervals",
        "best": _one_correlated(game, bounds.best),
        "worst": _one_correlated(game, bounds.worst),
        "price_of_anarchy": bounds.price_of_anarchy,
        "price_of_stability": bounds.price_of_stability,
    } | ({} if bounds.reason is None else {"reason": bounds.reason})


def _one_correlated(game: GameAnalysis, one: Correlated | None) -> dict[str, Any] | None:
    if one is None:
        return None
    return {
        "welfare": one.welfare,
        "likeliest": [
            chosen_at(game.table.profiles, profile) | {"probability": share}
            for profile, share in one.likeliest()
        ],
        "largest_gain_from_disobeying": one.gain,
    }


def _dynamics_document(found: Beyond) -> dict[str, Any]:
    game, named = found.game, partial(told, found.game.table.profiles)
    assert found.paths is not None and found.start is not None
    rules = {}
    for name, path in found.paths.items():
        rules[name] = {
            "reads": path.rule,
            "ends": path.ends,
            "rounds": path.rounds,
            "reached": named(path.last) if path.ends == EQUILIBRIUM else None,
            "visited": [named(profile) for profile in path.visited[:MOST_SHOWN]],
            "cycle": [named(profile) for profile in path.cycle],
        }
        if path.shares is not None:
            rules[name]["shares"] = _shares(game, path.shares)
        if found.reached is not None:
            rules[name]["resampled"] = _reached_document(game, found.reached[name])
    return {"start": named(found.start), "rules": rules, "reads": WARNING_OF_TIME}


def _shares(game: GameAnalysis, mix: Mix) -> dict[str, list[float]]:
    return {
        player: [float(share) for share in mine]
        for player, mine in zip(game.table.profiles.players, mix, strict=True)
    }


def _reached_document(game: GameAnalysis, one: Reached) -> dict[str, Any]:
    return {
        "tables": one.tables,
        "reached": [
            chosen_at(game.table.profiles, profile) | {"share": share}
            for profile, share in list(one.shares.items())[:MOST_SHOWN]
        ],
        "cycling": one.cycling,
        "unsettled": one.unsettled,
    }


def _bands_document(game: GameAnalysis, bands: ReplyBands) -> dict[str, Any]:
    profiles = game.table.profiles
    rows: dict[str, Any] = {}
    for player, name in enumerate(profiles.players):
        names, strategies = (_without(part, player) for part in (profiles.players, _plain(profiles)))
        own = np.moveaxis(bands.possible[player], player, -1)
        rows[name] = {
            "replies": [
                {
                    "others": {other: s[k] for other, s, k in zip(names, strategies, others, strict=True)},
                    "possible": [_plain(profiles)[player][k] for k in np.flatnonzero(own[others])],
                }
                for others in np.ndindex(own.shape[:-1])
            ],
            "falls": _fall(game, bands, player),
        }
    return rows


def _plain(profiles: Profiles) -> tuple[list[Any], ...]:
    """Every player's strategies as documents have them."""
    return tuple(profiles.plain().values())


def _without(things: tuple[Any, ...], player: int) -> tuple[Any, ...]:
    return things[:player] + things[player + 1 :]


def _fall(game: GameAnalysis, bands: ReplyBands, player: int) -> dict[str, Any] | None:
    fall, profiles = first_fall(bands, player), game.table.profiles
    if fall is None:
        return None
    names, strategies = (_without(part, player) for part in (profiles.players, _plain(profiles)))
    lower, upper = (
        {other: mine[k] for other, mine, k in zip(names, strategies, place, strict=True)}
        for place in (fall.lower, fall.upper)
    )
    own = _plain(profiles)[player]
    return {"from": lower, "at_least": own[fall.before], "to": upper, "at_most": own[fall.after]}


# ---- sentences ----


def beyond_sentences(found: Beyond) -> Iterator[str]:
    """What was found, in plain words."""
    if found.mixed is not None:
        yield from _mixed_sentences(found)
    if found.correlated is not None:
        yield _correlated_sentence(found.game, found.correlated)
    if found.paths is not None:
        yield from _dynamics_sentences(found)
    if found.bands is not None and not found.game.is_exact:
        yield from _bands_sentences(found.game, found.bands)


def _mixed_sentences(found: Beyond) -> Iterator[str]:
    search, game = found.mixed, found.game
    assert search is not None
    count = len(search.equilibria)
    of = "" if game.is_exact else " of the estimated table"
    yield (
        f"{count} mixed {'equilibrium' if count == 1 else 'equilibria'}{of} ({search.method})"
        + (f": {READS}" if count else "")
        + "."
    )
    for note in search.notes:
        yield note[0].upper() + note[1:] + "."


def _correlated_sentence(game: GameAnalysis, bounds: CorrelatedBounds) -> str:
    if bounds.best is None or bounds.worst is None:
        return f"No correlated equilibria: {bounds.reason}."
    of = "" if game.is_exact else " of the estimated table"
    ratio = "" if bounds.price_of_anarchy is None else (
        f"; no equilibrium of any kind has a price above {bounds.price_of_anarchy:.4f} or below "
        f"{bounds.price_of_stability:.4f}"
    )  # fmt: skip
    return (
        f"Correlated equilibria{of} (a mediator draws the thresholds, nobody gains by disobeying) have a welfare from "
        f"{bounds.worst.welfare:.4f} (worst) to {bounds.best.welfare:.4f} (best){ratio}."
    )


def _dynamics_sentences(found: Beyond) -> Iterator[str]:
    assert found.paths is not None and found.start is not None
    yield f"From {_said(found.game, found.start)} ({WARNING_OF_TIME}):"
    for name, path in found.paths.items():
        if path.ends == EQUILIBRIUM:
            end = f"{_said(found.game, path.last)} after {path.rounds} rounds"
        elif path.ends == CYCLE:
            end = f"round {len(path.cycle)} profiles for ever"
        else:
            end = f"not settled in {path.rounds} rounds"
        yield f"  {path.rule}: {end}" + _resampled(found, name) + "."


def _resampled(found: Beyond, name: str) -> str:
    if found.reached is None:
        return ""
    one = found.reached[name]
    parts = [
        f"{100 * share:.0f} % {_said(found.game, profile)}" for profile, share in list(one.shares.items())[:3]
    ]
    rest = 1 - sum(list(one.shares.values())[:3])
    return f" (of {one.tables} resampled tables: {', '.join(parts)}{', ' if parts else ''}{100 * rest:.0f} % elsewhere)"


def _said(game: GameAnalysis, profile: Profile) -> str:
    return _pairs(told(game.table.profiles, profile))


def _bands_sentences(game: GameAnalysis, bands: ReplyBands) -> Iterator[str]:
    players = game.table.profiles.players
    if len(players) == 1:
        return  # nobody else's thresholds to reply to
    falls = {name: _fall(game, bands, player) for player, name in enumerate(players)}
    for name, fall in falls.items():
        if fall is not None:
            yield (
                f"Best replies of {name} fall somewhere: at least {fall['at_least']} against {_pairs(fall['from'])}, "
                f"at most {fall['at_most']} against {_pairs(fall['to'])}."
            )
    if not any(falls.values()):
        yield "Nothing in the replications refutes that best replies never fall as the others' thresholds rise."
    yield NO_THEOREM


def _pairs(chosen: Mapping[str, Any]) -> str:
    return ", ".join(f"{name} {text_of(k)}" for name, k in chosen.items())
