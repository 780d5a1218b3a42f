"""What a race says of itself, as a document and in plain sentences."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from analysis.games import GameAnalysis
from analysis.raced_prices import NO_LOOK
from analysis.racing import Look, MoreNeeded, Race, more_needed

ROUGH = (
    "a rough guess from present errors and gains, as if every estimate stayed as it is; the truth may be several times "
    "less or more"
)
NO_POINT = "for some profiles nothing points to a decision yet"
PAYOFFS = (
    "each cell's payoff and interval come from its own replications, so that only cells with the same number may be "
    "compared; verdicts and regrets compare paired replications"
)


def raced_document(game: GameAnalysis) -> dict[str, Any]:
    """The document's key `racing`; nothing where the table is whole."""
    race = game.race
    if race is None:
        return {}
    more = more_needed(race, level=1 - game.confidence)
    return {
        "racing": {
            "looks": [look_document(look) for look in race.looks],
            "runs": race.runs,
            "runs_of_full_table": race.runs_of_full_table if race.looks else None,
            "saved": race.saved,
            **({} if race.looks else {"reason": NO_LOOK}),
            "undecided": int(race.undecided.sum()),
            "more_needed": more_document(more),
            "replications": race.replications.reshape(race.shape).tolist(),
            "payoffs_are": PAYOFFS,
        }
    }


def look_document(look: Look) -> dict[str, Any]:
    """A look; its critical value is null where nothing was left to judge."""
    return vars(look) | {"critical": look.critical if np.isfinite(look.critical) else None}


def more_document(more: MoreNeeded) -> dict[str, Any]:
    """What an undecided race would still take."""
    told = {"replications": more.replications, "runs": more.runs, "label": ROUGH}
    return told | ({"reason": NO_POINT} if more.profiles else {})


def race_sentences(race: Race, level: float, stopped: str) -> Iterator[str]:
    """The race in words. stopped: why it ended, in words."""
    cells, left = len(race.possible), int(race.undecided.sum())
    if not race.looks:
        yield f"The race ended before its first look, at 10 replications of every cell: {stopped}. Nothing is decided."
        return
    yield (
        f"Raced in {len(race.looks)} looks, up to {race.reached:,} replications of a cell: {race.runs:,} runs, "
        f"{race.saved or 1:.1f} times fewer than a table of {cells:,} cells with as many each; {stopped}."
    )
    if not left:
        yield "Every profile is decided: excluded, or confirmed within epsilon."
        return
    more = more_needed(race, level=level)
    who = f"{left} profile{' is' if left == 1 else 's are'} undecided"
    if more.replications is None:
        yield f"{who}, and their estimates point to no decision yet."
        return
    but = "" if not more.profiles else f", and for {more.profiles} of them nothing points to a decision yet"
    yield (
        f"{who}: up to about {more.replications:,} replications ({more.runs:,} runs more) are still needed{but}. This "
        "is a rough guess: it takes today's estimates for the truth."
    )
