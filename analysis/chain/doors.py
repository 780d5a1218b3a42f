"""Where arrivals go by the doors that they meet, in networks whose units' states are their occupancies.

With one discharge rate a unit and no gap, what a unit shows to an arrival is one of four doors, and the routes
depend on the state through the units' doors only.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.chain.routing import Doors, Split, split_arrivals
from sim.scenario import Policy, Scenario, UnitRules

Numbers = NDArray[np.float64]
Places = NDArray[np.int64]

OPEN, OWN_ONLY, CLOSED, FULL = range(4)


def doors_by_load(rules: UnitRules, beds: int, most: int) -> Places:
    """The door of a unit with 0 to `most` occupied beds, shape (most + 1,)."""
    load = np.arange(most + 1)
    door = np.where(load < rules.closure_threshold, OWN_ONLY, CLOSED)
    door = np.where(load < rules.incoming, OPEN, door)
    return np.where(load >= beds, FULL, door)


@dataclass(frozen=True)
class DoorTable:
    """The routes by every combination of doors, the last unit's door changing fastest.

    names: units in file order. doors: each unit's door, (units, combinations). arrived: home -> arrivals a day.
    homes: home -> its arrivals split over the units, by combination.
    """

    names: tuple[str, ...]
    doors: Places
    arrived: Mapping[str, float]
    homes: Mapping[str, Split]

    def admissions(self) -> Numbers:
        """Admissions a day to each unit, by combination, (units, combinations)."""
        total = np.zeros(self.doors.shape)
        for home, split in self.homes.items():
            for unit, share in split.admitted.items():
                total[self.names.index(unit)] += self.arrived[home] * share
        return total


def door_table(scenario: Scenario, policy: Policy, shown: Sequence[Sequence[int]]) -> DoorTable:
    """The routes of a policy's rules other than thresholds. shown: the doors that each unit can show."""
    names = scenario.unit_names
    doors = np.array(np.meshgrid(*shown, indexing="ij"), dtype=np.int64).reshape(len(names), -1)
    met = {
        name: Doors(free=door < FULL, own_open=door <= OWN_ONLY, incoming_open=door == OPEN)
        for name, door in zip(names, doors, strict=True)
    }
    arrived: dict[str, float] = {}
    for group in scenario.patients:
        arrived[group.home] = arrived.get(group.home, 0.0) + group.per_day
    homes = {
        name: split_arrivals(name, policy.units[name], policy.when_all_closed, met)
        for name in names
        if name in arrived
    }
    return DoorTable(tuple(names), doors, arrived, homes)
