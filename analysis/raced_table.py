"""The table of a race: each cell's means and intervals from its own replications, contrasts from the look's."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial
from operator import attrgetter
from typing import Any

import numpy as np

from analysis.confidence import critical_value
from analysis.contrasts import Evidence, evidence_of
from analysis.controls import offered_controls
from analysis.goals import Goal, Welfare
from analysis.payoffs import Outcomes, PayoffTable, TableSums, simulated_table
from analysis.profiles import Profiles
from analysis.racing import Race
from sim.scenario import Scenario


@dataclass(frozen=True)
class RacedTables:
    """Makes a race's tables from the sums of its runs. controls: whether control variates are wanted."""

    scenario: Scenario
    profiles: Profiles
    goal: Goal
    welfare: Welfare
    sums: TableSums
    controls: bool

    def at(self, size: int, needed: np.ndarray) -> PayoffTable:
        """The table of the first `size` replications; only the needed cells (bool, (cells,)) are to be used.

        A replication that failed in one of them is left out for all.
        """
        rows = self.sums.among(needed, size)
        sums = self.sums.sums_of(rows)
        sums["days"] = np.nan_to_num(sums["days"], nan=self.scenario.run.measured_days)
        known = offered_controls(self.scenario, rows) if self.controls else None
        with np.errstate(invalid="ignore", divide="ignore"):
            return simulated_table(
                self.profiles, self.goal, self.welfare, sums, self.scenario.run.confidence, controls=known
            )

    def evidence(self, size: int, needed: np.ndarray) -> Evidence:
        """What the replications say of the needed cells."""
        return evidence_of(self.at(size, needed))

    def of_looks(self, race: Race) -> list[tuple[int, PayoffTable]]:
        """Replications and table of every look."""
        sizes = [look.replications for look in race.looks]
        return [(size, self.at(size, race.replications >= size)) for size in sizes]


def raced_table(
    looks: Sequence[tuple[int, PayoffTable]], counts: np.ndarray, confidence: float
) -> PayoffTable:
    """The table with each cell's means and intervals from its own last look.

    looks: as `of_looks` gives them, at least one. counts: int (*shape), replications at each cell's last look.
    """
    last = looks[-1][1]
    over_shape = [counts == size for size, _ in looks]
    over_cells = [mask.reshape(-1, 1) for mask in over_shape]

    def own(part: Callable[[PayoffTable], Any], masks: list[np.ndarray]) -> np.ndarray:
        merged = np.array(part(looks[0][1]), float)
        for mask, (_, table) in zip(masks[1:], looks[1:], strict=True):
            merged = np.where(mask, part(table), merged)
        return merged

    names = ("payoffs", "low", "high", "welfare")
    return replace(
        last,
        **{name: own(attrgetter(name), over_shape) for name in names},
        welfare_low=own(partial(_welfare_end, confidence=confidence, side=-1), over_shape),
        welfare_high=own(partial(_welfare_end, confidence=confidence, side=+1), over_shape),
        outcomes=Outcomes(
            **{name: own(attrgetter(f"outcomes.{name}"), over_cells) for name in vars(last.outcomes)}
        ),
        counts=counts,
    )


def _welfare_end(table: PayoffTable, *, confidence: float, side: int) -> np.ndarray:
    values = table.welfare_replicates
    assert values is not None
    half = values.std(axis=0, ddof=1) / np.sqrt(len(values))
    return table.welfare + side * critical_value(confidence, table.degrees) * half
