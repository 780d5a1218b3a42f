"""The occupancies of any number of units as a box of states, for networks with one rate in each and no gap."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.chain.doors import DoorTable, door_table, doors_by_load
from analysis.chain.layout import UnitLayout
from analysis.chain.occupancy_measures import Observed
from sim.scenario import Policy, Scenario

Numbers = NDArray[np.float64]
Places = NDArray[np.int64]


def is_box(units: Sequence[UnitLayout]) -> bool:
    """Whether the occupancies tell all: one discharge rate at most in every unit, and no gap above 1."""
    return all(len(unit.discharge_rates) <= 1 and unit.space.reopening_gap == 1 for unit in units)


@dataclass(frozen=True)
class Box:
    """The transitions of a network by its occupancies, none of them stored.

    table: where arrivals go, by combination of doors. sizes: loads that each unit can have, (units,), the last
    unit's changing fastest. codes: what a unit's load adds to the number of the combination, (units, most
    loads). births: admissions a day to each unit, (units, combinations). leaving: discharge rates, (units,).
    beds: staffed beds of each unit.
    """

    table: DoorTable
    sizes: Places
    codes: Places
    births: Numbers
    leaving: Numbers
    beds: tuple[int, ...]

    @property
    def transitions(self) -> tuple[Places, Places, Numbers, Numbers]:
        """What the kernels take."""
        return self.sizes, self.codes, self.births, self.leaving

    def reached(self) -> NDArray[np.bool_]:
        """Whether the empty network reaches each state, (states of the box,)."""
        from analysis.chain.kernels.grid import reachable

        return reachable(self.sizes, self.codes, self.births)

    def guess(self) -> Numbers:
        """A first distribution, to within a factor: each unit a loss system of its own; every entry positive."""
        from scipy.special import gammaln

        guess = np.ones(1)
        for size, births, leaving in zip(self.sizes, self.births, self.leaving, strict=True):
            load, offered = np.arange(size), (births[0] or births.max()) / leaving
            weight = load * np.log(offered) - gammaln(load + 1) if size > 1 else np.zeros(1)
            guess = np.multiply.outer(guess, np.exp(np.maximum(weight - weight.max(), -200.0))).ravel()
        return np.maximum(guess / guess.sum(), 1e-250)

    def observe(self, probability: Numbers, states: int) -> Observed:
        """What a distribution over the box tells of the network. states: how many of them are reached."""
        from analysis.chain.kernels.grid import observe, worst_balance

        occupancy, time = observe(probability, self.sizes, self.codes, self.births.shape[1])
        return Observed(
            self.table,
            [_by_beds(row, beds) for row, beds in zip(occupancy, self.beds, strict=True)],
            time[None],
            np.array([states]),
            np.array([probability.sum()]),
            np.array([worst_balance(probability, *self.transitions)]),
            self.leaving,
        )


def box_of(scenario: Scenario, policy: Policy, units: Sequence[UnitLayout]) -> Box:
    """The box of a network for which `is_box(units)` holds. units: `layout(scenario, policy)`."""
    doors = [doors_by_load(policy.units[unit.name], unit.beds, unit.space.most) for unit in units]
    shown = [np.unique(of_unit) for of_unit in doors]
    sizes = np.array([len(of_unit) for of_unit in doors])
    table = door_table(scenario, policy, shown)
    codes, step = np.zeros((len(units), sizes.max()), dtype=np.int64), 1
    for place in range(len(units) - 1, -1, -1):
        codes[place, : sizes[place]] = step * np.searchsorted(shown[place], doors[place])
        step *= len(shown[place])
    leaving = np.array([unit.discharge_rates[0] if unit.discharge_rates else 1.0 for unit in units])
    return Box(table, sizes, codes, table.admissions(), leaving, tuple(unit.beds for unit in units))


def _by_beds(occupancy: Numbers, beds: int) -> Numbers:
    """One row over 0 to `beds`, (1, beds + 1), of an occupancy that may be longer or shorter."""
    row = np.zeros((1, beds + 1))
    held = min(len(occupancy), beds + 1)
    row[0, :held] = occupancy[:held]
    return row
