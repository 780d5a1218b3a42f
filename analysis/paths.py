"""What happened over time in one replication, from its trace: occupied beds and counts on any grid of time.

A record holds sums over the whole measured window; whoever asks about the hours of the week, the start of a run or
the batches of a long one asks here. Only a few numbers of each trace leave the process that ran it.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from sim.replicate import DEFAULT_ENGINE, Failure, trace_replication
from sim.scenario import Policy, Scenario
from sim.trace import Trace
from sim.workers import ThisProcess, Workers

HOURS_A_WEEK = 168
HOURS_A_DAY = 24
_KINDS = ("admission", "discharge", "turned away")


@dataclass(frozen=True)
class Steps:
    """A unit's occupied beds as a step function that starts at 0: `occupied` from each of `times` on, (changes,)."""

    times: np.ndarray
    occupied: np.ndarray

    def bed_days(self, edges: np.ndarray) -> np.ndarray:
        """The integral of occupied beds between neighbouring edges in days, (edges - 1,)."""
        times, occupied = np.append(0.0, self.times), np.append(0, self.occupied)
        until = np.append(0.0, np.cumsum(occupied[:-1] * np.diff(times)))
        at = np.searchsorted(times, edges, side="right") - 1
        return np.diff(until[at] + occupied[at] * (edges - times[at]))


@dataclass(frozen=True)
class Happened:
    """Times in days of what a unit's path needs, ascending: beds taken and left, and patients turned away, by home."""

    admissions: np.ndarray
    discharges: np.ndarray
    turned_away: np.ndarray

    @property
    def steps(self) -> Steps:
        """The unit's occupied beds."""
        times = np.append(self.admissions, self.discharges)
        order = np.argsort(times, kind="stable")
        changes = np.repeat([1, -1], [len(self.admissions), len(self.discharges)])
        return Steps(times[order], np.cumsum(changes[order]))


def happened(trace: Trace, units: int) -> list[Happened]:
    """What happened in each of so many units, by its place."""
    times: dict[tuple[str, int], list[float]] = {(kind, unit): [] for kind in _KINDS for unit in range(units)}
    for time, kind, _, unit in trace.events:
        if kind in _KINDS:
            times[kind, unit].append(time)
    return [Happened(*(np.array(times[kind, unit], float) for kind in _KINDS)) for unit in range(units)]


@dataclass(frozen=True)
class Grid:
    """Bins of time, each gathered into a slot.

    edges: days from the run's start, ascending, (bins + 1,). slots: the slot of each bin, (bins,), from 0.
    """

    edges: np.ndarray
    slots: np.ndarray

    @property
    def days(self) -> np.ndarray:
        """The time that falls into each slot, (slots,)."""
        return self.gather(np.diff(self.edges))

    def gather(self, values: np.ndarray) -> np.ndarray:
        """Sums of bins, (bins,), as sums of slots, (slots,)."""
        return np.bincount(self.slots, values, minlength=int(self.slots.max()) + 1)


def even_bins(start: float, end: float, width: float) -> Grid:
    """As many whole bins of that width, in days, as fit between start and end; ValueError where none does."""
    bins = int((end - start) / width + 1e-9)
    if bins < 1:
        raise ValueError(f"no bin of {width:g} days fits into {end - start:g} days")
    return Grid(start + width * np.arange(bins + 1), np.arange(bins))


def hours_of_week(start: float, end: float) -> Grid:
    """The 168 hours of the week, Monday 00:00 first, over a window of at least a week; ValueError where shorter.

    Every hour's time in the window counts, also of weeks and hours that are not whole.
    """
    if end - start < 7:
        raise ValueError("a window of less than a week has not all hours of the week")
    first, last = int(np.floor(start * HOURS_A_DAY)), int(np.ceil(end * HOURS_A_DAY))
    edges = np.clip(np.arange(first, last + 1) / HOURS_A_DAY, start, end)
    return Grid(edges, np.arange(first, last) % HOURS_A_WEEK)


@dataclass(frozen=True)
class Binned:
    """One replication on a grid, (units, slots) each.

    occupied: mean occupied beds. admitted: beds taken, by treating unit. turned_away: patients, by home.
    """

    occupied: np.ndarray
    admitted: np.ndarray
    turned_away: np.ndarray


@dataclass(frozen=True)
class Path:
    """One replication on every grid asked for, by the grid's name."""

    replication: int
    grids: Mapping[str, Binned]


def binned(units: Sequence[Happened], grid: Grid) -> Binned:
    """What happened in every unit, on a grid."""
    occupied = np.array([grid.gather(unit.steps.bed_days(grid.edges)) for unit in units])
    return Binned(
        occupied / grid.days,
        np.array([_counts(unit.admissions, grid) for unit in units]),
        np.array([_counts(unit.turned_away, grid) for unit in units]),
    )


def _counts(times: np.ndarray, grid: Grid) -> np.ndarray:
    """Events by slot; one at an edge counts in the bin that it opens, at the last edge in none."""
    return grid.gather(np.diff(np.searchsorted(times, grid.edges, side="left")))


def measure_paths(
    scenario: Scenario,
    policy: Policy,
    replications: Iterable[int],
    grids: Mapping[str, Grid],
    *,
    engine: str = DEFAULT_ENGINE,
    workers: Workers | None = None,
) -> Iterator[Path | Failure]:
    """Traces every replication by its number and gives its path on the grids, as they finish, in any order.

    The numbers depend neither on the workers nor on the engine; a replication that fails costs only itself.
    """
    tasks = ((number, (scenario, policy, number, grids, engine)) for number in replications)
    for reply in (workers or ThisProcess()).run(_path_of, tasks):
        if reply.failure is None:
            yield reply.value
        else:
            yield Failure(scenario.run.seed, reply.key, (0,), reply.failure)


def _path_of(
    scenario: Scenario, policy: Policy, replication: int, grids: Mapping[str, Grid], engine: str
) -> Path:
    trace, _ = trace_replication(scenario, policy, replication, engine=engine)
    units = happened(trace, len(scenario.units))
    return Path(replication, {name: binned(units, grid) for name, grid in grids.items()})


def occupied_by_replication(paths: Sequence[Path], grid: str) -> np.ndarray:
    """Mean occupied beds on one of the grids, (replications, units, slots), replications in order."""
    return np.array([path.grids[grid].occupied for path in sorted(paths, key=lambda path: path.replication)])
