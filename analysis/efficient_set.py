"""The efficient set of policies: refusals against transfers, with the uncertainty of a comparison's bands."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from analysis.comparison import NETWORK, Comparison
from analysis.confidence import Estimate, mean_estimate

EFFICIENT, INEFFICIENT, UNDECIDED = "efficient", "not efficient", "cannot be told"


@dataclass(frozen=True)
class Efficiency:
    """Whether no other policy has both fewer patients turned away and fewer transfers.

    by: the policies that are surely no worse in both and better in one. on_estimate: by the means alone.
    """

    policy: str
    turned_away: Estimate
    transfers: Estimate
    verdict: str
    on_estimate: bool
    by: tuple[str, ...]


AWAY, MOVED = "turned_away_per_day", "transfers_per_day"


def efficient_set(comparison: Comparison) -> list[Efficiency]:
    """Refusals against transfers: every verdict holds at once, for it rests on the comparison's bands."""
    signed = dict(_both_ways(comparison))
    names = comparison.names
    found = []
    for name in names:
        others = [other for other in names if other != name]
        worse = [signed[name, other] for other in others]  # this policy less each other: (away, moved)
        by = tuple(other for other, pair in zip(others, worse, strict=True) if _surely_dominated(pair))
        safe = all(any(_high(one) < 0 for one in pair) for pair in worse)
        beaten = any(
            all(one.mean >= 0 for one in pair) and any(one.mean > 0 for one in pair) for pair in worse
        )
        verdict = INEFFICIENT if by else EFFICIENT if safe else UNDECIDED
        found.append(Efficiency(name, *_levels(comparison, name), verdict, not beaten, by))
    return found


def _surely_dominated(pair: tuple[Estimate, Estimate]) -> bool:
    lows = [-np.inf if one.low is None else one.low for one in pair]
    return min(lows) >= 0 and max(lows) > 0


def _high(one: Estimate) -> float:
    return np.inf if one.high is None else one.high


def _both_ways(comparison: Comparison) -> Iterator[tuple[tuple[str, str], tuple[Estimate, Estimate]]]:
    for earlier, later in itertools.combinations(comparison.names, 2):
        pair = tuple(
            comparison.difference(later, earlier, NETWORK, measure).estimate for measure in (AWAY, MOVED)
        )
        yield (later, earlier), pair
        yield (earlier, later), tuple(map(negated, pair))


def negated(one: Estimate) -> Estimate:
    """The same difference taken the other way."""
    mean = None if one.mean is None else -one.mean
    return Estimate(
        mean, None if one.high is None else -one.high, None if one.low is None else -one.low, one.reason
    )


def _levels(comparison: Comparison, name: str) -> list[Estimate]:
    """The policy's own rates, with simultaneous bands over policies and both rates (Bonferroni)."""
    place, count = comparison.names.index(name), 2 * len(comparison.names)
    at = {one.measure.name: column for column, one in enumerate(comparison.columns) if one.where == NETWORK}
    values = comparison.values[:, place]
    return [
        mean_estimate(values[:, at[rate]], comparison.confidence, comparisons=count).within(0.0, np.inf)
        for rate in (AWAY, MOVED)
    ]
