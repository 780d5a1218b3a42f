"""A pool of replications of one game, simulated once and kept, from which experiments are drawn.

The pool is made in chunks, each a file of a folder named by a digest of the scenario and of `sim`'s sources, so that
a study that was stopped goes on where it was.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np

import sim
from analysis.controls import Controls
from analysis.goals import goal_of, welfare_of
from analysis.payoffs import PayoffTable, Profiles, profiles_of, simulated_table
from sim import engines
from sim.intake import draw_intake
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.offered import drawn_offer, expected_offer
from sim.record import FULL, OWN_CLOSED, Record
from sim.scenario import Scenario
from sim.workers import local_workers

CHUNK = 100  # replications of one file
KEPT = (
    "occupied_days", "bed_days", "admitted", "turned_away", "diverted_out", "arrived", "closed_free_days", "days"
)  # fmt: skip
CONTROLS = "controls"


@dataclass(frozen=True)
class Pool:
    """Replications of every profile of a game. arrays: `KEPT`, (replications, cells, units), and `controls`,
    (replications, controls), less their known means."""

    scenario: Scenario
    arrays: dict[str, np.ndarray]

    @property
    def size(self) -> int:
        """Number of replications."""
        return len(self.arrays[CONTROLS])

    @cached_property
    def profiles(self) -> Profiles:
        """Who plays and what each may choose."""
        return profiles_of(self.scenario)

    def table(self, chosen: np.ndarray, *, controls: bool, confidence: float = 0.95) -> PayoffTable:
        """The table that `brimline game` would make of these replications."""
        sums = {name: self.arrays[name][chosen] for name in KEPT}
        return simulated_table(
            self.profiles, goal_of(self.scenario), welfare_of(self.scenario), sums, confidence,
            controls=self.controls(chosen) if controls else None,
        )  # fmt: skip

    def controls(self, chosen: np.ndarray) -> Controls:
        """The control variates of these replications, without one that nothing moves."""
        columns = self.arrays[CONTROLS][chosen]
        moving = np.flatnonzero(columns.any(axis=0))
        return Controls(tuple(f"control {place}" for place in moving), columns[:, moving])


def pool_of(
    scenario: Scenario,
    size: int,
    folder: Path,
    *,
    workers: int = 1,
    told: Callable[[int], None] = lambda _: None,
) -> Pool:
    """The first `size` replications; chunks that the folder lacks are run and kept. told: of replications done."""
    kept = folder / _digest(scenario)
    kept.mkdir(parents=True, exist_ok=True)
    firsts = range(0, size, CHUNK)
    missing = [first for first in firsts if not _file(kept, first).exists()]
    told(min(size, CHUNK * (len(firsts) - len(missing))))
    if missing:
        _warm(scenario)
    tasks = (((first,), (scenario, first, kept)) for first in missing)
    for reply in local_workers(min(workers, max(1, len(missing)))).run(_run_chunk, tasks):
        if reply.failure is not None:
            raise RuntimeError(reply.failure)
        told(CHUNK)
    parts = [dict(np.load(_file(kept, first))) for first in firsts]
    return Pool(scenario, {name: np.concatenate([one[name] for one in parts])[:size] for name in parts[0]})


def _digest(scenario: Scenario) -> str:
    whole = hashlib.sha256(scenario.model_dump_json().encode())
    for source in sorted(Path(sim.__file__).parent.rglob("*.py")):
        whole.update(source.read_bytes())
    return whole.hexdigest()[:16]


def _file(folder: Path, first: int) -> Path:
    return folder / f"{first}.npz"


def _warm(scenario: Scenario) -> None:
    """Compiles in this process, so that workers only load."""
    rules = [lower_policy(scenario, scenario.policy())]
    engines.load("compiled").warm(lower_network(scenario), rules, plan_intake(scenario))


def _run_chunk(scenario: Scenario, first: int, folder: Path) -> int:
    """Runs one chunk and writes its file, whole or not at all."""
    rows = list(_replications(scenario, range(first, first + CHUNK)))
    part = folder / f"{first}.{os.getpid()}.part.npz"
    np.savez(part, **{name: np.stack([row[name] for row in rows]) for name in rows[0]})
    part.replace(_file(folder, first))
    return first


def _replications(scenario: Scenario, numbers: Sequence[int]) -> Iterator[dict[str, np.ndarray]]:
    network, plan, engine = lower_network(scenario), plan_intake(scenario), engines.load("compiled")
    policies = profiles_of(scenario).policies(scenario.policy())
    rules = [lower_policy(scenario, one) for one in policies]
    mean = expected_offer(scenario)
    for number in numbers:
        records = engine.run_table(network, rules, draw_intake(plan, number))
        drawn = drawn_offer(scenario, number)
        offered = np.concatenate([drawn.arrivals - mean.arrivals, drawn.work - mean.work])
        yield sums_of(records, scenario) | {CONTROLS: offered}


def sums_of(records: Sequence[Record], scenario: Scenario) -> dict[str, np.ndarray]:
    """The sums `KEPT` of one replication's records, (cells, units), as `unit_sums` has them but ten times sooner."""
    occupancy = np.stack([one.occupancy_days for one in records]).sum(axis=1)
    gates, diverted = (
        np.stack([one.gate_days for one in records]),
        np.stack([one.diverted for one in records]),
    )
    idle = [state for state in range(gates.shape[-1]) if state & OWN_CLOSED and not state & FULL]
    days = np.full(occupancy.shape[:2], scenario.run.measured_days)
    return {
        "occupied_days": occupancy @ np.arange(occupancy.shape[-1]),
        "bed_days": days * [float(unit.beds) for unit in scenario.units],
        "admitted": np.stack([one.admitted for one in records]).sum(axis=1).astype(float),
        "turned_away": np.stack([one.turned_away for one in records]).astype(float),
        "diverted_out": diverted.sum(axis=2).astype(float),
        "arrived": np.stack([one.arrived for one in records]).astype(float),
        "closed_free_days": gates[..., idle].sum(axis=-1),
        "days": days,
    }


# ---- experiments ----


@dataclass(frozen=True)
class Experiments:
    """Which replications each experiment has, (experiments, replications).

    Disjoint subsets are independent. Random ones overlap; the variance of a share of them is then at most
    p (1 - p) (R / N + 1 / experiments), by Hoeffding 1948, "A class of statistics with asymptotically normal
    distribution" (a U-statistic's variance is at most R / N of its kernel's; from memory), and of subsets drawn at
    random (Blom 1976, "Some properties of incomplete U-statistics"; from memory).
    """

    chosen: np.ndarray
    effective: float

    def error(self, share: float) -> float:
        """The standard error of a share of the experiments whose true value is `share`."""
        return float(np.sqrt(share * (1 - share) / self.effective))


def disjoint(size: int, replications: int, most: int) -> Experiments:
    """As many subsets without overlap as there are, at most `most`."""
    count = min(most, size // replications)
    return Experiments(np.arange(count * replications).reshape(count, replications), float(count))


def overlapping(size: int, replications: int, count: int, seed: int) -> Experiments:
    """Random subsets, each without repetition."""
    rng = np.random.default_rng(seed)
    chosen = np.stack([rng.choice(size, replications, replace=False) for _ in range(count)])
    return Experiments(chosen, 1 / (replications / size + 1 / count))


def experiments_of(size: int, replications: int, most: int, seed: int) -> Experiments:
    """Disjoint subsets where the pool has at least so many, else random ones."""
    if size // replications >= most:
        return disjoint(size, replications, most)
    return overlapping(size, replications, most, seed)
