"""Statements with their numbers: what a result says, in words that claim no more than it can."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from analysis.anarchy import LISTED, NO_EQUILIBRIUM, OF_ESTIMATED
from analysis.confidence import Estimate
from analysis.games import ESTIMATED, GameAnalysis
from analysis.prices_document import projected_sentences, turning_interval
from analysis.sets_document import sets_sentences

POINT_ESTIMATE_WARNING = (
    "These are the equilibria of an ESTIMATED table. The point estimate of a game is often wrong: sampling error "
    "hides true equilibria and shows false ones, above all where payoffs nearly tie. One replication cannot tell: "
    "repeat with more before relying on any of them."
)
SETS_NOTE = (
    "A profile listed as possible is one that the replications cannot exclude, and need not be an equilibrium. A "
    "confirmed one has, with the stated confidence, no gain from deviating above epsilon. Best responses "
    "and payoffs in the table are point estimates. More replications shorten the list."
)
NO_INTERVAL = "a point estimate; no interval is worked out"
SELECTION_CAVEAT = (
    ", for the profiles listed here only: that these may be the wrong ones is not in the interval"
)
ONE_NETWORK = (
    "The price of anarchy is the ratio of this one network under the stated goals, not a bound over a class of "
    "networks; 'best' means the best fixed thresholds, and a rule that looks at the whole network's state could do "
    "better still."
)


@dataclass(frozen=True)
class Finding:
    """One statement. value: the number it rests on, with its interval. unit: of that number. basis: where from."""

    statement: str
    value: Estimate | None
    unit: str
    basis: str

    def to_dict(self) -> dict[str, Any]:
        """Plain values; an exact number is bare."""
        value = None if self.value is None else self.value.to_dict()
        if value is not None and value["low"] is None and self.value.reason is None:
            value = value["mean"]
        return {"statement": self.statement, "value": value, "unit": self.unit, "basis": self.basis}


def findings_of(game: GameAnalysis) -> list[Finding]:
    """What the analysis of a game says, most important first."""
    return list(_findings(game))


def _findings(game: GameAnalysis) -> Iterator[Finding]:
    basis = _basis(game)
    if game.sets is not None:
        yield from (Finding(said, None, "profiles", basis) for said in sets_sentences(game))
        yield from _prices(game, basis)
        yield _turning(game, basis)
        return
    count = len(game.equilibria)
    verdict = "in the estimated table " if not game.is_exact else ""
    noun = "equilibrium" if count == 1 else "equilibria"
    said = f"{count} pure {noun} {verdict}within a regret of {game.tolerance:g}"
    yield Finding(said, None, "profiles", basis)
    yield from _prices(game, basis)
    yield _turning(game, basis)


def _basis(game: GameAnalysis) -> str:
    if game.is_exact:
        return "exact Markov chain"
    raced = "" if game.race is None else "a race up to "
    said = f"{raced}{game.table.replications} paired replications, {100 * game.confidence:g} % intervals"
    return said + (f", {ESTIMATED}" if game.sets is None else "")


def _prices(game: GameAnalysis, basis: str) -> Iterator[Finding]:
    cost, welfare = game.cost, game.table.welfare_goal
    if cost.is_projected:
        yield from (Finding(*one, basis) for one in projected_sentences(cost, welfare, game.sets))
        return
    if cost.worst is None:
        yield Finding(f"No price of anarchy: {NO_EQUILIBRIUM}", None, "ratio", basis)
        return
    ratio = cost.price_of_anarchy
    lost = cost.lost_per_year
    caveat = "" if game.is_exact else SELECTION_CAVEAT
    if ratio.mean is None:
        yield Finding(f"No price of anarchy: {ratio.reason}", None, "ratio", basis)
    else:
        yield Finding(f"Price of anarchy {_words(ratio, 4)}{caveat}", ratio, "ratio", basis)
        yield Finding(
            f"Price of stability {_words(cost.price_of_stability, 4)}{caveat}",
            cost.price_of_stability,
            "ratio",
            basis,
        )
    if welfare.kind == "throughput":
        said, unit = (
            f"The worst listed equilibrium forgoes {_words(lost, 1)} patients a year",
            "patients a year",
        )
    else:
        unit = f"a year of ({welfare.reads.replace(' a day', '')})"
        said = f"The worst listed equilibrium costs the network {_words(lost, 1)} more {unit}"
    yield Finding(said + caveat, lost, unit, basis)


def _turning(game: GameAnalysis, basis: str) -> Finding:
    turning = game.turning
    where = "" if game.is_exact else " in the estimated table"
    judged = LISTED if game.sets is None else OF_ESTIMATED
    if turning.weight is None:
        said = f"No transfer weight turns the verdict{where}: {turning.reason}" + turning_interval(turning)
        return Finding(said, None, "weight", basis)
    return Finding(
        f"The verdict turns{where} at a transfer weight of {turning.weight:.3f}: where one transfer counts for more "
        "than that many patients turned away, the profile that turns fewest away is no better than "
        f"{judged}{turning_interval(turning)}",
        Estimate(turning.weight, turning.low, turning.high, None if game.is_exact else turning.reason or NO_INTERVAL),
        "patients turned away per transfer",
        basis,
    )  # fmt: skip


def _words(estimate: Estimate, digits: int) -> str:
    point = f"{estimate.mean:.{digits}f}"
    if estimate.low is None or estimate.high is None:
        return point
    return f"{point} ({estimate.low:.{digits}f} to {estimate.high:.{digits}f})"
