"""The structure of a game and the result of a search as plain values and as sentences.

The sentences claim no more than the cells show: what was visited is named, bounds are called bounds.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

import numpy as np

from analysis.equilibria import Profile
from analysis.games import EXACT, place_at
from analysis.profiles import Profiles, Strategy, choice_columns, chooses, chosen_at
from analysis.search import Search
from analysis.structure import AtTolerance, Step, Structure, Trend

if TYPE_CHECKING:
    import pandas as pd

LOWER_BOUND = "lower bound"
THEORY = "Topkis 1979; Milgrom & Shannon 1994"
NOT_BOUNDED = "not every cell is solved, so it is bounded on neither side"


def structure_document(structure: Structure, profiles: Profiles) -> dict[str, Any]:
    """The structure in plain values; `reads` holds the sentences."""
    here = structure.here
    return {
        "cells": structure.cells,
        "of_cells": structure.of_cells,
        "complete": structure.is_complete,
        "tolerance": structure.tolerance,
        "rounding": structure.rounding,
        "own": _trend(structure.own, profiles),
        "own_strictly_increasing": structure.own.rises == structure.own.comparisons,
        "others": _trend(structure.others, profiles),
        "others_non_increasing": structure.others.rises == 0,
        "single_crossing": structure.single_crossing,
        "best_replies": _trend(structure.replies, profiles),
        "best_replies_monotone": structure.replies_monotone,
        "pure_equilibrium_must_exist": structure.promises_equilibrium,
        "least_equilibrium": _thresholds(here.least, profiles),
        "greatest_equilibrium": _thresholds(here.greatest, profiles),
        "at_tolerances": [_at_tolerance(one, structure, profiles) for one in structure.at_tolerances],
        "reads": list(_reads(structure, profiles)),
    }


def structure_unknown(profiles: Profiles) -> dict[str, Any]:
    """The structure where strategies have no order that a theorem speaks of: nothing is claimed."""
    reason = f"{', '.join(profiles.unordered)}: several units, several rule parameters, or no threshold, in a strategy"
    return {
        "cells": profiles.cells,
        "of_cells": profiles.cells,
        "complete": True,
        "theorem": None,
        "pure_equilibrium_must_exist": None,
        "reason": reason,
        "reads": [
            f"No theorem is at hand on whether a pure equilibrium must exist ({reason}): the table alone tells."
        ],
    }


def _trend(trend: Trend, profiles: Profiles) -> dict[str, Any]:
    return {
        **{name: getattr(trend, name) for name in ("comparisons", "rises", "level", "falls")},
        "least": _step(trend.least, profiles),
        "most": _step(trend.most, profiles),
        "failing": [_step(step, profiles) for step in trend.failing],
    }


def _step(step: Step | None, profiles: Profiles) -> dict[str, Any] | None:
    if step is None:
        return None
    return {
        "player": profiles.players[step.player],
        "from": profiles.thresholds(step.lower),
        "to": profiles.thresholds(step.upper),
        "change": step.change,
    }


def _thresholds(profile: Profile | None, profiles: Profiles) -> dict[str, int] | None:
    return None if profile is None else profiles.thresholds(profile)


def _at_tolerance(one: AtTolerance, structure: Structure, profiles: Profiles) -> dict[str, Any]:
    price = one.price_of_anarchy
    return {
        "tolerance": one.tolerance,
        "equilibria": one.equilibria,
        "least": _thresholds(one.least, profiles),
        "greatest": _thresholds(one.greatest, profiles),
        "price_of_anarchy": price.mean,
        **({"reason": price.reason} if price.mean is None else {}),
        **({} if structure.is_complete else {"bound": LOWER_BOUND}),
    }


# ---- sentences ----


def _reads(structure: Structure, profiles: Profiles) -> Iterator[str]:
    at = (
        f"all {structure.cells:,}"
        if structure.is_complete
        else f"{structure.cells:,} of {structure.of_cells:,}"
    )
    yield f"Structure, from {at} cells: {_own(structure, profiles)}; {_others(structure, profiles)}."
    yield _replies(structure, profiles)
    yield _ends(structure, profiles)
    yield _counts(structure)


def _own(structure: Structure, profiles: Profiles) -> str:
    own = structure.own
    if own.least is None:
        return "no unit has two thresholds to compare"
    least = f"least change {own.least.change:.2g}, {_where(own.least, profiles)}"
    if own.rises == own.comparisons:
        return f"utilisation rises with the own threshold at each of {own.comparisons:,} steps ({least})"
    return (
        f"utilisation does not always rise with the own threshold: it stands still at {own.level:,} and falls at "
        f"{own.falls:,} of {own.comparisons:,} steps ({least})"
    )


def _others(structure: Structure, profiles: Profiles) -> str:
    others = structure.others
    if others.most is None:
        return "no two choices of the others to compare"
    if others.rises == 0:
        return f"it never rises with the others' ({others.comparisons:,} pairs)"
    most = f"most {others.most.change:.2g}, {_where(others.most, profiles)}"
    return f"it rises with the others' at {others.rises:,} of {others.comparisons:,} pairs ({most})"


def _where(step: Step, profiles: Profiles) -> str:
    """Whose number it is, and between which thresholds of all the units, in scenario order."""
    ends = ("-".join(map(str, profiles.thresholds(profile).values())) for profile in (step.lower, step.upper))
    return f"{profiles.players[step.player]} from {' to '.join(ends)}"


def _replies(structure: Structure, profiles: Profiles) -> str:
    replies = structure.replies
    cells = "this table" if structure.is_complete else "the visited cells"
    if replies.falls and replies.least is not None:
        seen = (
            f"best replies fall as the others open at {replies.falls:,} of {replies.comparisons:,} comparisons "
            f"({_where(replies.least, profiles)})"
        )
        return f"On {cells} {seen}, so theory promises no pure equilibrium here."
    why = (
        "single crossing holds there"
        if structure.single_crossing
        else "found reply by reply; single crossing is not shown"
    )
    seen = f"On {cells} best replies never fall as the others open ({why})"
    if structure.is_complete:
        return f"{seen}, so a pure equilibrium must exist ({THEORY})."
    return f"{seen}; were it so on every cell, a pure equilibrium would have to exist ({THEORY})."


def _ends(structure: Structure, profiles: Profiles) -> str:
    here = structure.here
    known = "" if structure.is_complete else "certified "
    if not here.equilibria:
        return f"No {known}pure equilibrium within {structure.tolerance:g}."
    named = (
        f"the {name} {known}equilibrium is {_shown(profile, profiles)}"
        if profile is not None
        else f"no {known}equilibrium is {name} in every threshold"
        for name, profile in (("least", here.least), ("greatest", here.greatest))
    )
    said = "; ".join(named)
    return said[0].upper() + said[1:] + "."


def _shown(profile: Profile, profiles: Profiles) -> str:
    return ", ".join(f"{player} {k}" for player, k in profiles.thresholds(profile).items())


def _counts(structure: Structure) -> str:
    at_least = "" if structure.is_complete else "at least "
    counts = (
        f"{one.equilibria:,} at {one.tolerance:g}"
        + ("" if one.price_of_anarchy.mean is None else f" ({at_least}{one.price_of_anarchy.mean:.4f})")
        for one in structure.at_tolerances
    )
    what = "Equilibria" if structure.is_complete else "Certified equilibria among the visited cells"
    return f"{what} by tolerance (price of anarchy): {', '.join(counts)}."


# ---- a search ----


def search_document(search: Search) -> dict[str, Any]:
    """The keys of a game's document, as far as a search can fill them, what is a bound called so."""
    profiles, cost, stability = search.profiles, search.cost, search.cost.price_of_stability
    prices = {"price_of_anarchy": cost.price_of_anarchy, "lost_per_year": cost.lost_per_year}
    missing = {name: one.reason for name, one in prices.items() if one.mean is None}
    row = cost.optimum[0][0]
    return {
        "players": list(profiles.players),
        "goal": search.goal.reads,
        "goals": {player: search.goal.reads_of(place) for place, player in enumerate(profiles.players)},
        "sense": search.goal.sense,
        "welfare": {name: getattr(search.welfare_goal, name) for name in ("kind", "reads", "sense")},
        "strategies": profiles.plain(),
        **({} if profiles.is_plain else {"chooses": chooses(profiles)}),
        "payoffs": None,
        "payoffs_reason": "a best-reply search solves no full table; `visited` lists what it solved",
        "equilibria": [_equilibrium(search, one) for one in search.equilibria],
        "best_responses": _best_responses(search),
        "optimum": {
            "thresholds": [profiles.thresholds(search.cells.profile(tie)) for (tie,) in cost.optimum],
            "welfare": float(search.cells.welfare[row]),
            "outcome": _outcome(search, row),
            "is": "the best visited; a cell that was not visited may be better",
        },
        **_extremes_told(search),
        "worst_equilibrium": _at_row(search, cost.worst),
        "best_equilibrium": _at_row(search, cost.best),
        **{name: one.mean for name, one in prices.items()},
        "price_of_stability": None,
        "bounds": {name: LOWER_BOUND for name, one in prices.items() if one.mean is not None},
        "reason": "; ".join(
            f"{name}: {reason}"
            for name, reason in {**missing, "price_of_stability": stability.reason or NOT_BOUNDED}.items()
        ),
        "tolerance": search.tolerance,
        "undecided": [],
        "stopped": search.stopped,
        "interrupted": search.interrupted,
        "walks": [_walk(walk, profiles) for walk in search.walks],
        "bracket": _bracket(search),
        "visited": [_cell(search, row) for row in range(len(search.cells.profiles))],
        "structure": structure_document(search.structure, profiles),
        "findings": list(_findings(search)),
    }


def _cell(search: Search, row: int) -> dict[str, Any]:
    return {
        "thresholds": search.profiles.thresholds(search.cells.profile(row)),
        "payoffs": dict(zip(search.profiles.players, search.payoffs[row].tolist(), strict=True)),
        "welfare": float(search.cells.welfare[row]),
    }


def _outcome(search: Search, row: int) -> dict[str, Any]:
    return asdict(place_at(search.outcomes, row, search.profiles.thresholds(search.cells.profile(row))))


def _at_row(search: Search, place: Profile | None) -> dict[str, int] | None:
    return None if place is None else search.profiles.thresholds(search.cells.profile(place[0]))


def _extremes_told(search: Search) -> dict[str, Any]:
    """The strategies at the extreme equilibria, where thresholds do not tell them."""
    if search.profiles.is_plain:
        return {}
    rows = {"worst": search.cost.worst, "best": search.cost.best}
    return {
        f"{name}_equilibrium_strategies": None
        if row is None
        else chosen_at(search.profiles, search.cells.profile(row[0]))["strategies"]
        for name, row in rows.items()
    }


def _equilibrium(search: Search, row: int) -> dict[str, Any]:
    return {
        **chosen_at(search.profiles, search.cells.profile(row)),
        "kind": "pure",
        "verdict": EXACT,
        "regret": dict(zip(search.profiles.players, search.regrets[row].tolist(), strict=True)),
        "welfare": float(search.cells.welfare[row]),
        "outcome": _outcome(search, row),
    }


def _best_responses(search: Search) -> dict[str, list[dict[str, Any]]]:
    """Each player's best replies to those choices of the others that were visited against every own one."""
    replies: dict[str, list[dict[str, Any]]] = {}
    for player, name in enumerate(search.profiles.players):
        by_others: dict[tuple[tuple[str, Strategy], ...], list[int]] = {}
        for row in np.flatnonzero(search.regrets[:, player] <= search.tolerance).tolist():
            profile = search.cells.profile(row)
            others = search.profiles.chosen(profile)
            del others[name]
            by_others.setdefault(tuple(others.items()), []).append(profile[player])
        mine = search.profiles.strategies[player]
        replies[name] = [
            {
                "others": {other: strategy.to_plain() for other, strategy in key},
                "best": [mine[place].to_plain() for place in sorted(best)],
            }
            for key, best in by_others.items()
        ]
    return replies


def _walk(walk: Any, profiles: Profiles) -> dict[str, Any]:
    return {
        "from": f"all-{walk.start}",
        "ended": walk.ended,
        "path": [profiles.thresholds(profile) for profile in walk.path],
    }


def _bracket(search: Search) -> dict[str, Any]:
    bracket = search.bracket
    return {
        "shown": bracket.shown,
        "least": _thresholds(bracket.least, search.profiles),
        "greatest": _thresholds(bracket.greatest, search.profiles),
        "failing": list(bracket.failing),
        "reads": _bracket_reads(search),
    }


def _bracket_reads(search: Search) -> str:
    bracket, own, others = search.bracket, search.structure.own, search.structure.others
    if not bracket.shown:
        return "That the two ends bracket every pure equilibrium is not shown: " + "; ".join(bracket.failing)
    ends = " and ".join(
        f"({_shown(end, search.profiles)})" for end in (bracket.least, bracket.greatest) if end
    )
    rise = "" if own.least is None else f" by {own.least.change:.2g} or more"
    unseen = search.structure.of_cells - search.structure.cells
    rest = f", if the {unseen:,} cells not visited behave as these do" if unseen else ""
    return (
        f"The two ends {ends} bracket every pure equilibrium{rest}: at each of {own.comparisons:,} steps utilisation "
        f"rose in the own threshold{rise}, and at none of {others.comparisons:,} pairs in the others'"
    )


def _findings(search: Search) -> Iterator[dict[str, Any]]:
    cost, structure = search.cost, search.structure
    count = len(search.equilibria)
    noun = "equilibrium" if count == 1 else "equilibria"
    visited = f"{structure.cells:,} of {structure.of_cells:,} cells visited"
    if search.stopped is not None:
        yield _finding(f"The search ended early: {search.stopped}", None, "cells")
    yield _finding(
        f"{count} pure {noun} certified within a regret of {search.tolerance:g}; {visited}", count, "profiles"
    )
    yield _finding(_bracket_reads(search), None, "profiles")
    if cost.price_of_anarchy.mean is None:
        yield _finding(f"No price of anarchy: {cost.price_of_anarchy.reason}", None, "ratio")
    else:
        price = cost.price_of_anarchy.mean
        yield _finding(
            f"Price of anarchy at least {price:.4f} (a lower bound, against the best visited)", price, "ratio"
        )
    if cost.lost_per_year.mean is not None:
        lost = cost.lost_per_year.mean
        what = "patients" if search.welfare_goal.kind == "throughput" else "units of loss"
        said = f"The worst equilibrium found forgoes at least {lost:.1f} {what} a year"
        yield _finding(said, lost, f"{what} a year")


def _finding(statement: str, value: float | None, unit: str) -> dict[str, Any]:
    return {
        "statement": statement,
        "value": value,
        "unit": unit,
        "basis": "exact Markov chain, best-reply search",
    }


def search_frame(search: Search) -> pd.DataFrame:
    """The visited cells, one row each: thresholds, payoffs, regrets where known, welfare, rates and shares by unit."""
    import pandas as pd

    columns: dict[str, Any] = {}
    chosen = choice_columns(search.profiles, search.cells.profiles)
    for place, (player, column) in enumerate(zip(search.profiles.players, chosen.items(), strict=True)):
        columns[column[0]] = column[1]
        columns[f"payoff {player}"] = search.payoffs[:, place]
        columns[f"regret {player}"] = search.regrets[:, place]
    columns["welfare"] = search.cells.welfare
    for name, values in vars(search.outcomes).items():
        for place, unit in enumerate(search.profiles.units):
            columns[f"{name} {unit}"] = values[:, place]
    return pd.DataFrame(columns)
