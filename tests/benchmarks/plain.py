"""A plain SimPy script of the same network, as one would write it first: a process and a resource request a patient.

The yardstick for both engines. It has closure thresholds, the referral order, `home_bed` and transfer delays, and
no other rule; it counts the same events, so that the benchmark can check that it simulates the same thing.
"""

from __future__ import annotations

import simpy

from sim.intake import Intake
from sim.lowering import NOBODY, Network, Rules


class PlainUnit:
    """A unit as a resource with one slot a bed."""

    def __init__(self, environment: simpy.Environment, beds: int, threshold: int) -> None:
        self.beds = simpy.Resource(environment, beds)
        self.threshold = threshold
        self.reserved = 0
        self.occupied_days = 0.0
        self.since = 0.0

    @property
    def load(self) -> int:
        """Beds occupied or reserved."""
        return self.beds.count + self.reserved

    @property
    def is_open(self) -> bool:
        """Whether it takes patients."""
        return self.load < self.threshold


def run(network: Network, rules: Rules, intake: Intake) -> tuple[list[float], int, int]:
    """Occupied days by unit, transfers and patients turned away in the measured window."""
    environment = simpy.Environment()
    pairs = zip(network.beds.tolist(), rules.own_closes.tolist(), strict=True)
    units = [PlainUnit(environment, beds, threshold) for beds, threshold in pairs]
    start, end = float(network.edges[0]), float(network.edges[-1])
    counts = {"transfers": 0, "turned away": 0}

    def settle(unit: PlainUnit) -> None:
        now = min(max(environment.now, start), end)
        unit.occupied_days += unit.beds.count * (now - unit.since)
        unit.since = now

    def count(what: str) -> None:
        if environment.now >= start:
            counts[what] += 1

    def patient(number: int):
        home = units[intake.home[number]]
        asked = [units[place] for place in rules.referral_order[intake.home[number]] if place != NOBODY]
        unit = home if home.is_open else next((other for other in asked if other.is_open), None)
        if unit is None and home.load < home.beds.capacity:
            unit = home
        if unit is None:
            count("turned away")
            return
        if unit is not home:
            count("transfers")
            unit.reserved += 1
            yield environment.timeout(intake.delay[number])
            unit.reserved -= 1
        settle(unit)
        with unit.beds.request() as bed:
            yield bed
            yield environment.timeout(intake.stay[network.stay_class[units.index(unit)], number])
            settle(unit)

    def arrivals():
        for number, time in enumerate(intake.arrival):
            yield environment.timeout(max(0.0, time - environment.now))
            environment.process(patient(number))

    environment.process(arrivals())
    for unit in units:
        unit.since = start
    environment.run(until=end)
    for unit in units:
        settle(unit)
    return [unit.occupied_days for unit in units], counts["transfers"], counts["turned away"]
