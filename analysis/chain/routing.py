"""Where an arriving patient goes, for all states of the network at once."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sim.scenario import UnitRules

Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class Doors:
    """What an arriving patient meets at one unit, by state of the network, shape (states,) each.

    free: a bed is free. own_open, incoming_open: the gates.
    """

    free: Flags
    own_open: Flags
    incoming_open: Flags


class Split:
    """The patients of one home, split over the units that take them, by state of the network.

    admitted: unit -> share of this home's arrivals, shape (states,). left: share that nobody has taken yet.
    """

    def __init__(self, states: int) -> None:
        self.left = np.ones(states)
        self.admitted: dict[str, NDArray[np.float64]] = {}

    def send(self, unit: str, where: Flags, share: float = 1.0) -> None:
        """Admits `share` of those left to `unit` in the states `where` it takes them."""
        taken = self.left * where * share
        self.admitted[unit] = self.admitted.get(unit, 0.0) + taken
        self.left = self.left * np.where(where, 1 - share, 1.0)


def split_arrivals(home: str, rules: UnitRules, resort: str, doors: Mapping[str, Doors]) -> Split:
    """Where the patients of `home` go in each state; whoever is left is turned away.

    rules: the home's rules. resort: `when_all_closed` of the policy. doors: every unit's, by name.
    """
    own = doors[home]
    split = Split(len(own.free))
    split.send(home, own.free & own.own_open)
    split.send(home, own.free & ~own.own_open, rules.admit_while_closed)
    for unit in rules.referral_order:
        split.send(unit, doors[unit].free & doors[unit].incoming_open)
    if resort in ("home_bed", "any_bed"):
        split.send(home, own.free)
    if resort == "any_bed":
        for unit in rules.referral_order:
            split.send(unit, doors[unit].free)
    return split
