"""CPU time of competing pieces of work, taken in turn in one run, so that a noisy machine disturbs all alike."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable, Mapping


def in_turn(work: Mapping[str, Callable[[], object]], *, rounds: int = 5) -> dict[str, list[float]]:
    """CPU seconds of every piece, once a round, in turn; one uncounted round first."""
    taken: dict[str, list[float]] = {name: [] for name in work}
    for counted in range(-1, rounds):
        for name, piece in work.items():
            started = time.process_time()
            piece()
            if counted >= 0:
                taken[name].append(time.process_time() - started)
    return taken


def ratio(
    taken: Mapping[str, list[float]], slow: str, fast: str, *, slow_share: float = 1.0
) -> tuple[float, float, float]:
    """Median, least and greatest ratio, round by round; `slow_share`: the part of the fast one's work that slow did."""
    ratios = [a / slow_share / b for a, b in zip(taken[slow], taken[fast], strict=True)]
    return statistics.median(ratios), min(ratios), max(ratios)
