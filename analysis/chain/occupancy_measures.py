"""The measures of many policies at once, from how long each combination of doors was shown."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.chain.doors import CLOSED, OPEN, DoorTable
from analysis.chain.measures import ExactResult, NetworkMeasures, UnitMeasures
from sim.scenario import Policy, Scenario

Numbers = NDArray[np.float64]


@dataclass(frozen=True)
class Observed:
    """What the stationary distributions of several policies, cells, say of one network.

    table: where arrivals go. occupancy: for each unit, probability of each number of occupied beds, (cells, beds + 1).
    time: share of time of each combination of doors, (cells, combinations). states: of each chain, (cells,).
    total, imbalance: sum of the probabilities, and the greatest difference of the flows into and out of a
    state relative to itself, (cells,). leaving: discharge rate of each unit, (units,).
    """

    table: DoorTable
    occupancy: Sequence[Numbers]
    time: Numbers
    states: NDArray[np.int64]
    total: Numbers
    imbalance: Numbers
    leaving: Numbers

    def mean_occupied(self) -> Numbers:
        """Mean occupied beds, (units, cells)."""
        return np.array([one @ np.arange(one.shape[1]) for one in self.occupancy])


def results(scenario: Scenario, policies: Sequence[Policy], observed: Observed) -> Iterator[ExactResult]:
    """The exact result of each policy."""
    units = [list(_unit_rows(scenario, observed, place)) for place in range(len(scenario.units))]
    networks = _network_rows(observed)
    names, states = scenario.unit_names, observed.states.tolist()
    for cell, policy in enumerate(policies):
        measures = {name: rows[cell] for name, rows in zip(names, units, strict=True)}
        yield ExactResult(scenario.title, policy.thresholds, measures, networks[cell], states[cell])


def _flows(observed: Observed) -> tuple[dict[tuple[str, str], Numbers], dict[str, Numbers]]:
    """Admitted a day by (home, unit), and turned away by home, (cells,) each."""
    arrived = observed.table.arrived
    admitted = {
        (home, unit): arrived[home] * (observed.time @ share)
        for home, split in observed.table.homes.items()
        for unit, share in split.admitted.items()
    }
    lost = {
        home: arrived[home] * (observed.time @ split.left) for home, split in observed.table.homes.items()
    }
    return admitted, lost


def _sum(flows: Sequence[Numbers], observed: Observed) -> Numbers:
    return np.sum(flows, axis=0) if flows else np.zeros(len(observed.time))


def _unit_rows(scenario: Scenario, observed: Observed, place: int) -> Iterator[UnitMeasures]:
    name, beds = scenario.units[place].name, scenario.units[place].beds
    admitted, lost = _flows(observed)
    treated = _sum([flow for (_, unit), flow in admitted.items() if unit == name], observed)
    out = _sum([flow for (home, unit), flow in admitted.items() if home == name != unit], observed)
    into = _sum([flow for (home, unit), flow in admitted.items() if home != name == unit], observed)
    away = lost.get(name, np.zeros(len(treated)))
    arrived = observed.table.arrived.get(name, 0.0)
    door, time = observed.table.doors[place], observed.time
    occupancy = observed.occupancy[place]
    occupancy.setflags(write=False)
    mean = observed.mean_occupied()[place]
    nobody = [None] * len(time)
    columns = (
        mean / beds, mean, occupancy[:, beds],
        time @ (door >= CLOSED), time @ (door != OPEN), time @ (door == CLOSED),
        occupancy, treated, out, into, away, np.full(len(time), arrived),
        out / arrived if arrived else nobody, away / arrived if arrived else nobody,
    )  # fmt: skip
    plain = (column if column is occupancy or column is nobody else column.tolist() for column in columns)
    return map(UnitMeasures, *plain)


def _network_rows(observed: Observed) -> list[NetworkMeasures]:
    admitted, lost = _flows(observed)
    throughput = _sum(list(admitted.values()), observed).tolist()
    moved = _sum([flow for (home, unit), flow in admitted.items() if home != unit], observed).tolist()
    away = _sum(list(lost.values()), observed).tolist()
    arrived = [float(sum(observed.table.arrived.values()))] * len(throughput)
    return list(map(NetworkMeasures, throughput, moved, away, arrived))
