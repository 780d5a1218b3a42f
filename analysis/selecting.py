"""The stages of a sequential selection: which policies to run next, and until which replication."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from analysis.anarchy import DAYS_A_YEAR
from analysis.comparison import Comparison, Group, WelfareRuns, grouped
from analysis.selection import Selection, next_look, select


@dataclass(frozen=True)
class Stage:
    """What to run: groups of policies still in, from replication `start` to their scenarios' own number."""

    groups: Sequence[Group]
    taker: Callable[[int], Any]
    start: int


class Race:
    """One selection, begun with the replications of a comparison, whose numbers are given.

    difference: the indifference zone, a day. found: what the procedure said last, None before its first stage.
    """

    def __init__(
        self,
        comparison: Comparison,
        replications: Sequence[int],
        difference_a_year: float,
        first_stage: int,
        most: int,
    ) -> None:
        self.names, self.confidence = comparison.names, comparison.confidence
        self.difference = difference_a_year / DAYS_A_YEAR
        self.found: Selection | None = None
        self._cases, self._first_stage = comparison.cases, first_stage
        self._done = comparison.cases[0].scenario.run.replications
        self._most = max(most, first_stage, self._done)
        self._worth = WelfareRuns(comparison.cases, self._most)
        self._worth.start_from(replications, comparison.welfare)
        self._alive: Sequence[int] = range(len(self.names))

    def next_stage(self) -> Stage | None:
        """The runs that the next look needs; None where the selection is made, or the budget is spent."""
        until = self._first_stage
        if self._done >= self._first_stage:
            if not self._look() or self._done >= self._most:
                return None
            until = next_look(self.found, self._most)  # type: ignore[arg-type]
        start, self._done = self._done, until
        groups = self._groups(until)
        return Stage(groups, lambda place: self._worth.taker(groups[place]), start)

    def _look(self) -> bool:
        """Asks the procedure; whether more replications are needed."""
        values = self._worth.paired(self._alive)
        if len(values) < self._first_stage:
            return False  # too many failures
        self.found = select(
            values, self.difference, 1 - self.confidence, first_stage=self._first_stage
        )  # fmt: skip
        self._alive = self.found.alive
        return self.found.selected is None

    def _groups(self, until: int) -> list[Group]:
        """The policies still in, by network, to run up to so many replications."""
        alive = [
            replace(case, scenario=case.scenario.with_run(replications=until))
            for case in (self._cases[place] for place in self._alive)
        ]
        return [
            Group(one.scenario, tuple(self._alive[place] for place in one.places), one.policies)
            for one in grouped(alive)
        ]

    def first_stage_values(self) -> np.ndarray:
        """The first stage's welfare a day, (replications, policies)."""
        return self._worth.paired(range(len(self.names)))[: self._first_stage]
