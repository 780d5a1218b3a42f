"""The table of a game: every profile, run or solved, with payoffs and welfare in scenario order."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from analysis.confidence import critical_value
from analysis.controls import Controls, no_controls
from analysis.counterpart import TableCounterpart
from analysis.goals import Goal, Sense, Welfare
from analysis.measures import unit_sums
from analysis.profiles import MOST_CELLS, Profiles, profiles_of
from sim.replicate import Failure, Run
from sim.scenario import Scenario

__all__ = ["MOST_CELLS", "Outcomes", "PayoffTable", "Profiles", "TableSums", "exact_table", "profiles_of"]


class TableSums:
    """The sums of every run of a table, by replication and cell, filled as runs arrive in any order.

    Arrays are (replications, cells, units), `period_occupied_days` (replications, cells, periods, units). at_first: so
    many replications get their memory when the first run arrives (default: all), further ones when they come.
    """

    def __init__(
        self, scenario: Scenario, cells: int, replications: int, *, at_first: int | None = None
    ) -> None:
        self._at_first = replications if at_first is None else min(at_first, replications)
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
            self._make_room(name, max(run.replication for run in reply), sums[name].shape[1:])
            for row, run in enumerate(reply):
                self._arrays[name][run.replication, run.cell] = sums[name][row]
        for run in reply:
            self._arrived[run.replication, run.cell] = True
            self.record_hashes[run.replication, run.cell] = run.record.hash
        return len(reply)

    def _make_room(self, name: str, replication: int, of_a_cell: tuple[int, ...]) -> None:
        """Memory up to that replication, twice as much as before where there is too little."""
        there = self._arrays.get(name)
        rows = self._at_first if there is None else len(there)
        while rows <= replication:
            rows = min(2 * rows, self._shape[0])
        if there is None or rows > len(there):
            self._arrays[name] = np.full((rows, self._shape[1], *of_a_cell), np.nan)
            if there is not None:
                self._arrays[name][: len(there)] = there

    @property
    def complete(self) -> np.ndarray:
        """The replications that every cell has."""
        return np.flatnonzero(self._arrived.all(axis=1))

    def among(self, cells: np.ndarray, first: int) -> np.ndarray:
        """Those of the first so many replications that each of these cells (bool, (cells,)) has."""
        return np.flatnonzero(self._arrived[:first, cells].all(axis=1))

    def sums(self) -> dict[str, np.ndarray]:
        """The sums over complete replications only, so that every contrast is paired."""
        return self.sums_of(self.complete)

    def sums_of(self, replications: Sequence[int]) -> dict[str, np.ndarray]:
        """The sums of these replications, in that order."""
        return {name: array[replications] for name, array in self._arrays.items()}


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
    welfare_replicates: (replications, *shape) or None. outcomes: by cell. All replicates are after control variates,
    where there are any (`controls`), such that their plain mean and error hold with `degrees` degrees of freedom.
    signed_replicates: for goals |E U - T|, U - T by replication, (replications, units, *shape); None for other goals.
    branches: of goals that bend otherwise, by player (branches, replications, *shape), costs the largest of whose means
    is the payoff; None for other goals. raw_replicates: signed_replicates, or else replicates, before control variates.
    turned_away_replicates, transfers_replicates: the network's a day, as welfare_replicates. measured_days: of each
    replication.
    counts: of a raced table, int (*shape), the replications behind each cell's means and intervals; replicates are
    then those of its last look, NaN in cells that were left before. welfare_low, welfare_high: with counts, (*shape).
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
    signed_replicates: np.ndarray | None = None
    raw_replicates: np.ndarray | None = None
    turned_away_replicates: np.ndarray | None = None
    transfers_replicates: np.ndarray | None = None
    controls: Controls | None = None
    beside_counterpart: bool = False
    measured_days: float = 365.0
    counts: np.ndarray | None = None
    welfare_low: np.ndarray | None = None
    welfare_high: np.ndarray | None = None
    branches: tuple[np.ndarray | None, ...] | None = None

    @property
    def unadjusted(self) -> np.ndarray | None:
        """Replicates before control variates: signed where the goal has that form."""
        return self.replicates if self.raw_replicates is None else self.raw_replicates

    @property
    def degrees(self) -> int:
        """Degrees of freedom of every error; 0 where the table is exact."""
        if self.replicates is None:
            return 0
        left = len(self.replicates) - 1 if self.controls is None else self.controls.degrees
        return left - self.beside_counterpart

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
    profiles: Profiles,
    goal: Goal,
    welfare: Welfare,
    sums: Mapping[str, np.ndarray],
    confidence: float,
    *,
    controls: Controls | None = None,
    counterpart: TableCounterpart | None = None,
) -> PayoffTable:
    """The table estimated from paired replications; `sums` as TableSums gives them, at least one replication.

    controls, counterpart: of the same replications; payoffs, welfare and outcomes are then the adjusted ones
    (outcomes by `controls` alone).
    """
    point, pseudo = goal.estimate(sums)
    low, high = goal.interval(sums, confidence)
    signed = goal.signed(sums)
    raw = pseudo if signed is None else signed
    a_day = {name: sums[name] / sums["days"] for name in _RATES}

    def worth_of(sums: Mapping[str, np.ndarray]) -> np.ndarray:
        rates = ("admitted", "turned_away", "diverted_out")
        return welfare.value(*((sums[name] / sums["days"]).sum(axis=-1) for name in rates))

    worth = worth_of(sums)
    bent = _bent(goal, sums, controls)
    if counterpart is not None and controls is None:
        controls = no_controls(len(raw))
    if controls is not None:
        own, own_worth = (None, None) if counterpart is None else counterpart.known(goal.signed, worth_of)
        pseudo, worth = controls.adjust(pseudo), controls.adjust(worth, own_worth)
        signed = None if signed is None else controls.adjust(signed, own)
        degrees = controls.degrees - (counterpart is not None)
        point, low, high = _adjusted_payoffs(pseudo if signed is None else signed, raw, confidence, degrees)
        if signed is not None:
            point, low, high = _folded(point, low, high)
        elif bent is not None:
            point, low, high = _bent_payoffs(bent, goal.sense, confidence, degrees, raw, (point, low, high))
    shape = profiles.shape
    away, moved = (_network(a_day[name], controls, shape) for name in ("turned_away", "diverted_out"))
    return PayoffTable(
        profiles, goal, welfare,
        payoffs=_by_player(point, shape),
        welfare=worth.mean(axis=0).reshape(shape),
        outcomes=_outcomes(a_day, sums, controls),
        replicates=_by_player(pseudo, shape),
        low=_by_player(low, shape),
        high=_by_player(high, shape),
        welfare_replicates=worth.reshape(len(worth), *shape),
        signed_replicates=None if signed is None else _by_player(signed, shape),
        raw_replicates=_by_player(raw, shape),
        turned_away_replicates=away,
        transfers_replicates=moved,
        controls=controls,
        beside_counterpart=counterpart is not None,
        measured_days=float(sums["days"].flat[0]),
        branches=None if bent is None else tuple(
            None if one is None else one.reshape(*one.shape[:2], *shape) for one in bent
        ),
    )  # fmt: skip


def _bent(
    goal: Goal, sums: Mapping[str, np.ndarray], controls: Controls | None
) -> tuple[np.ndarray | None, ...] | None:
    """The branches of payoffs after control variates, by player (branches, replications, cells); None without any."""
    found = goal.branches(sums)
    if found is None or len(sums["days"]) < 2:
        return None

    def adjusted(values: np.ndarray) -> np.ndarray:
        return values if controls is None else np.stack([controls.adjust(one) for one in values])

    return tuple(None if one is None else adjusted(one) for one in found)


def _bent_payoffs(
    bent: Sequence[np.ndarray | None],
    sense: Sense,
    confidence: float,
    degrees: int,
    raw: np.ndarray,
    found: Sequence[np.ndarray],
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Payoffs and ends, (cells, players) each, of players whose payoffs bend from their branches; others as found."""
    point, low, high = (np.array(one) for one in found)
    floor = np.where((raw >= 0).all(axis=0), 0.0, -np.inf)
    for player, branches in enumerate(bent):
        if branches is None:
            continue
        mean, error = branches.mean(axis=1), branches.std(axis=1, ddof=1) / np.sqrt(branches.shape[1])
        half = critical_value(confidence, degrees) * error
        cost, least, most = (ends.max(axis=0) for ends in (mean, mean - half, mean + half))
        ends = (cost, least, most) if sense == "cost" else (-cost, -most, -least)
        point[:, player], low[:, player], high[:, player] = np.maximum(ends, [floor[:, player]] * 3)
    return point, low, high


def _network(rates: np.ndarray, controls: Controls | None, shape: tuple[int, ...]) -> np.ndarray:
    """A rate's sum over the units by replication, (replications, *shape)."""
    total = rates.sum(axis=-1)
    return (total if controls is None else controls.adjust(total)).reshape(len(rates), *shape)


def _adjusted_payoffs(
    values: np.ndarray, raw: np.ndarray, confidence: float, degrees: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Means and interval ends of adjusted values; what is never negative in a replication is not so in the mean."""
    mean, error = values.mean(axis=0), values.std(axis=0, ddof=1) / np.sqrt(len(values))
    half = critical_value(confidence, degrees) * error
    least = np.where((raw >= 0).all(axis=0), 0.0, -np.inf)
    return np.maximum(mean, least), np.maximum(mean - half, least), mean + half


def _folded(mean: np.ndarray, low: np.ndarray, high: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """A distance and its interval from a signed one's."""
    nearest = np.where((low <= 0) & (high >= 0), 0.0, np.minimum(np.abs(low), np.abs(high)))
    return np.abs(mean), nearest, np.maximum(np.abs(low), np.abs(high))


def _outcomes(
    a_day: Mapping[str, np.ndarray], sums: Mapping[str, np.ndarray], controls: Controls | None
) -> Outcomes:
    """Means by cell, adjusted where there are controls, and never below 0."""

    def mean(values: np.ndarray) -> np.ndarray:
        if controls is None:
            return values.mean(axis=0)
        return np.maximum(np.tensordot(controls.weights, values, axes=1), 0.0)

    return Outcomes(
        **{name: mean(rate) for name, rate in a_day.items() if name != "closed_free_days"},
        closed_free=mean(a_day["closed_free_days"]),
        utilisation=mean(sums["occupied_days"]) / np.maximum(mean(sums["bed_days"]), 1e-300),
    )


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
