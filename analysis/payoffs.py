"""The table of a game: every profile, run or solved, with payoffs and welfare in scenario order."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from analysis.goals import Goal, Welfare
from analysis.measures import unit_sums
from analysis.profiles import MOST_CELLS, Profiles, profiles_of
from sim.replicate import Failure, Run
from sim.scenario import Scenario

__all__ = ["MOST_CELLS", "Outcomes", "PayoffTable", "Profiles", "TableSums", "exact_table", "profiles_of"]


class TableSums:
    """The sums of every run of a table, by replication and cell, filled as runs arrive in any order.

    Arrays are (replications, cells, units), `period_occupied_days` (replications, cells, periods, units).
    """

    def __init__(self, scenario: Scenario, cells: int, replications: int) -> None:
        self._beds = np.array([unit.beds for unit in scenario.units], float)
        self._days = scenario.run.measured_days
        self._shape = (replications, cells)
        self._arrays: dict[str, np.ndarray] = {}
        self._arrived = np.zeros(self._shape, bool)
        self.failures: list[Failure] = []
        self.record_hashes: dict[tuple[int, int], str] = {}

    def add(self, reply: list[Run] | Failure) -> int:
        """Takes what a task yielded; returns the number of runs that are settled by it."""
        if isinstance(reply, Failure):
            self.failures.append(reply)
            return len(reply.cells)
        sums = unit_sums([run.record for run in reply], self._beds, self._days)
        for name in sums.keys() - {"occupancy_days"}:
            if name not in self._arrays:
                self._arrays[name] = np.full(self._shape + sums[name].shape[1:], np.nan)
            for row, run in enumerate(reply):
                self._arrays[name][run.replication, run.cell] = sums[name][row]
        for run in reply:
            self._arrived[run.replication, run.cell] = True
            self.record_hashes[run.replication, run.cell] = run.record.hash
        return len(reply)

    @property
    def complete(self) -> np.ndarray:
        """The replications that every cell has."""
        return np.flatnonzero(self._arrived.all(axis=1))

    def sums(self) -> dict[str, np.ndarray]:
        """The sums over complete replications only, so that every contrast is paired."""
        return {name: array[self.complete] for name, array in self._arrays.items()}


@dataclass(frozen=True)
class Outcomes:
    """What happens in every cell, means a day or shares: what stands beside each ratio.

    All (cells, units). turned_away, diverted_out, arrived by home, admitted by treating unit: a day. closed_free:
    share of time closed with a free bed. utilisation: of staffed bed-time.
    """

    turned_away: np.ndarray
    diverted_out: np.ndarray
    admitted: np.ndarray
    arrived: np.ndarray
    closed_free: np.ndarray
    utilisation: np.ndarray


@dataclass(frozen=True)
class PayoffTable:
    """A labelled payoff table.

    payoffs: (players, *shape). replicates: pseudo-values (replications, players, *shape), None where exact.
    low, high: pointwise interval ends of the payoffs, None where exact. welfare: (*shape), a day;
    welfare_replicates: (replications, *shape) or None. outcomes: by cell.
    """

    profiles: Profiles
    goal: Goal
    welfare_goal: Welfare
    payoffs: np.ndarray
    welfare: np.ndarray
    outcomes: Outcomes
    replicates: np.ndarray | None = None
    low: np.ndarray | None = None
    high: np.ndarray | None = None
    welfare_replicates: np.ndarray | None = None

    @property
    def replications(self) -> int | None:
        """The number of replications behind the table; None where it is exact."""
        return None if self.replicates is None else len(self.replicates)

    def by_player(self, cells: np.ndarray) -> np.ndarray:
        """(..., cells, players) laid out as (..., players, *shape)."""
        return _by_player(cells, self.profiles.shape)


def _by_player(cells: np.ndarray, shape: tuple[int, ...]) -> np.ndarray:
    moved = np.moveaxis(cells, -1, -2)
    return moved.reshape(*moved.shape[:-1], *shape)


def simulated_table(
    profiles: Profiles, goal: Goal, welfare: Welfare, sums: Mapping[str, np.ndarray], confidence: float
) -> PayoffTable:
    """The table estimated from paired replications; `sums` as TableSums gives them, at least one replication."""
    point, pseudo = goal.estimate(sums)
    low, high = goal.interval(sums, confidence)
    a_day = {name: sums[name] / sums["days"] for name in _RATES}
    worth = welfare.value(*(a_day[name].sum(axis=-1) for name in ("admitted", "turned_away", "diverted_out")))
    outcomes = Outcomes(
        **{name: rate.mean(axis=0) for name, rate in a_day.items() if name != "closed_free_days"},
        closed_free=a_day["closed_free_days"].mean(axis=0),
        utilisation=sums["occupied_days"].mean(axis=0) / np.maximum(sums["bed_days"].mean(axis=0), 1e-300),
    )
    shape = profiles.shape
    return PayoffTable(
        profiles, goal, welfare,
        payoffs=_by_player(point, shape),
        welfare=worth.mean(axis=0).reshape(shape),
        outcomes=outcomes,
        replicates=_by_player(pseudo, shape),
        low=_by_player(low, shape),
        high=_by_player(high, shape),
        welfare_replicates=worth.reshape(len(worth), *shape),
    )  # fmt: skip


_RATES = ("admitted", "turned_away", "diverted_out", "arrived", "closed_free_days")


EXACT_MEASURES = {
    "turned_away": "turned_away_per_day",
    "diverted_out": "diverted_out_per_day",
    "admitted": "admissions_per_day",
    "arrived": "arrivals_per_day",
    "closed_free": "closed_with_free_bed_fraction",
    "utilisation": "utilisation",
}


def exact_outcomes(units: Sequence[Sequence[Mapping[str, float]]]) -> Outcomes:
    """What happens in each cell, from exact measures: `units[cell][unit]` maps measure names to values."""
    return Outcomes(
        **{
            name: np.array([[unit[measure] for unit in cell] for cell in units])
            for name, measure in EXACT_MEASURES.items()
        }
    )


def measure_arrays(
    units: Sequence[Sequence[Mapping[str, float]]], names: Sequence[str]
) -> dict[str, np.ndarray]:
    """Exact measures, `units[cell][unit]` by name, as arrays (cells, units)."""
    return {name: np.array([[unit[name] for unit in cell] for cell in units]) for name in names}


def exact_table(
    profiles: Profiles, goal: Goal, welfare: Welfare, units: Sequence[Sequence[Mapping[str, float]]]
) -> PayoffTable:
    """The table from exact measures: `units[cell][unit]` maps measure names to values."""

    outcomes = exact_outcomes(units)
    worth = welfare.value(
        *(rate.sum(axis=-1) for rate in (outcomes.admitted, outcomes.turned_away, outcomes.diverted_out))
    )
    payoffs = goal.exact(measure_arrays(units, goal.exact_measures))
    return PayoffTable(
        profiles, goal, welfare, _by_player(payoffs, profiles.shape), worth.reshape(profiles.shape), outcomes
    )
