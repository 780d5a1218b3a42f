"""What the stationary distribution says about each unit and about the network."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from analysis.chain.network_states import NetworkChain, UnitView
from sim.scenario import Policy, Scenario

Numbers = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class UnitMeasures:
    """Exact long-run measures of one unit; rates a day, shares 0 to 1.

    utilisation: occupied over staffed beds. mean_occupied: beds. full_fraction: time without a free bed.
    closed_fraction, incoming_closed_fraction: with the own gate, or the incoming gate, closed.
    closed_with_free_bed_fraction: with the own gate closed although a bed is free.
    occupancy: probability of 0 to `beds` occupied beds, shape (beds + 1,).
    admissions_per_day, diverted_in_per_day: patients treated here, and those among them from other homes.
    arrivals_per_day, diverted_out_per_day, turned_away_per_day: of patients whose home this is.
    moved_share, turned_away_share: the last two over the arrivals; None where this is nobody's home.
    """

    utilisation: float
    mean_occupied: float
    full_fraction: float
    closed_fraction: float
    incoming_closed_fraction: float
    closed_with_free_bed_fraction: float
    occupancy: Numbers
    admissions_per_day: float
    diverted_out_per_day: float
    diverted_in_per_day: float
    turned_away_per_day: float
    arrivals_per_day: float
    moved_share: float | None
    turned_away_share: float | None

    def to_dict(self) -> dict[str, Any]:
        """The measures by name, in plain numbers and lists."""
        return {**vars(self), "occupancy": self.occupancy.tolist()}


@dataclass(frozen=True)
class NetworkMeasures:
    """Exact long-run measures of the network, patients a day; throughput counts each treated patient once."""

    throughput_per_day: float
    transfers_per_day: float
    turned_away_per_day: float
    arrivals_per_day: float


@dataclass(frozen=True, eq=False)
class ExactResult:
    """What the chain says of a scenario under one policy.

    scenario: its title. thresholds: unit -> closure threshold. units, network: the measures.
    states: the number of states of the chain.
    """

    scenario: str
    thresholds: Mapping[str, int]
    units: Mapping[str, UnitMeasures]
    network: NetworkMeasures
    states: int

    def to_dict(self) -> dict[str, Any]:
        """The result as the tree of `exact --json`, in plain numbers, lists and dicts."""
        return {
            "scenario": self.scenario,
            "thresholds": dict(self.thresholds),
            "units": {name: unit.to_dict() for name, unit in self.units.items()},
            "network": dataclasses.asdict(self.network),
            "states": self.states,
        }


@dataclass(frozen=True)
class Flows:
    """Mean numbers of patients a day. arrived, turned_away: by home. admitted: (home, unit) -> number."""

    arrived: Mapping[str, float]
    turned_away: Mapping[str, float]
    admitted: Mapping[tuple[str, str], float]

    def treated(self, unit: str) -> float:
        """Patients admitted to `unit` a day, of any home."""
        return sum((number for (_, place), number in self.admitted.items() if place == unit), 0.0)

    def moved_from(self, home: str) -> float:
        """Patients of `home` who are treated elsewhere, a day."""
        return sum((number for (who, unit), number in self.admitted.items() if who == home != unit), 0.0)

    def moved_to(self, unit: str) -> float:
        """Patients of other homes admitted to `unit`, a day."""
        return sum((number for (home, place), number in self.admitted.items() if place == unit != home), 0.0)


def measured(scenario: Scenario, policy: Policy, chain: NetworkChain, probability: Numbers) -> ExactResult:
    """The measures of a chain. probability: its stationary distribution, shape (states,)."""
    flows = _flows(scenario, chain, probability)
    units = {view.layout.name: _unit_measures(view, flows, probability) for view in chain.units}
    network = NetworkMeasures(
        throughput_per_day=sum(flows.admitted.values()),
        transfers_per_day=sum(map(flows.moved_from, flows.arrived)),
        turned_away_per_day=sum(flows.turned_away.values()),
        arrivals_per_day=sum(flows.arrived.values()),
    )
    return ExactResult(scenario.title, policy.thresholds, units, network, len(probability))


def _flows(scenario: Scenario, chain: NetworkChain, probability: Numbers) -> Flows:
    arrived = dict.fromkeys(chain.homes, 0.0)
    for group in scenario.patients:
        arrived[group.home] += group.per_day
    admitted = {
        (home, unit): arrived[home] * float(share @ probability)
        for home, split in chain.homes.items()
        for unit, share in split.admitted.items()
    }
    lost = {home: arrived[home] * float(split.left @ probability) for home, split in chain.homes.items()}
    return Flows(arrived, lost, admitted)


def _unit_measures(view: UnitView, flows: Flows, probability: Numbers) -> UnitMeasures:
    name, beds, doors = view.layout.name, view.layout.beds, view.doors
    occupancy = np.bincount(view.load, weights=probability, minlength=beds + 1)
    occupancy.setflags(write=False)
    mean = float(np.arange(beds + 1) @ occupancy)
    arrived, lost = flows.arrived.get(name, 0.0), flows.turned_away.get(name, 0.0)
    moved = flows.moved_from(name)
    return UnitMeasures(
        utilisation=mean / beds,
        mean_occupied=mean,
        full_fraction=float(occupancy[beds]),
        closed_fraction=_total(probability, ~doors.own_open),
        incoming_closed_fraction=_total(probability, ~doors.incoming_open),
        closed_with_free_bed_fraction=_total(probability, ~doors.own_open & doors.free),
        occupancy=occupancy,
        admissions_per_day=flows.treated(name),
        diverted_out_per_day=moved,
        diverted_in_per_day=flows.moved_to(name),
        turned_away_per_day=lost,
        arrivals_per_day=arrived,
        moved_share=moved / arrived if arrived else None,
        turned_away_share=lost / arrived if arrived else None,
    )


def _total(probability: Numbers, where: NDArray[np.bool_]) -> float:
    return float(probability[where].sum())
