"""What an intake offers to the units in the measured window: patients, and bed-days of work, with their exact means.

Both are known to every replication before it is run, and their means follow from the demand and the stays alone, so
they can serve as control variates. No policy changes them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sim.intake import Intake, draw_intake
from sim.lowering import plan_intake
from sim.scenario import Scenario


@dataclass(frozen=True)
class Offered:
    """By home unit, (units,): patients who arrive in the measured window, and the sum of their drawn stays, days."""

    arrivals: np.ndarray
    work: np.ndarray


def expected_offer(scenario: Scenario) -> Offered:
    """The exact means: the demand's integral over the window, times the mean stay (before any unit's factor)."""
    start, end = _window(scenario)
    arrivals, work = np.zeros(len(scenario.units)), np.zeros(len(scenario.units))
    for group in plan_intake(scenario).groups:
        patients = group.per_day * float(group.pattern.cumulative(end) - group.pattern.cumulative(start))
        arrivals[group.home] += patients
        work[group.home] += patients * group.stay.mean()
    return Offered(arrivals, work)


def drawn_offer(scenario: Scenario, replication: int) -> Offered:
    """What the intake of that replication offers: drawn by its address, so no run and no store is needed."""
    return _offer(draw_intake(plan_intake(scenario), replication), scenario)


def _offer(intake: Intake, scenario: Scenario) -> Offered:
    start, end = _window(scenario)
    first, last = np.searchsorted(
        intake.arrival, [start, end]
    )  # an event at the start counts, at the end none
    home, units = intake.home[first:last], len(scenario.units)
    return Offered(
        np.bincount(home, minlength=units).astype(float),
        np.bincount(home, weights=intake.drawn_stay[first:last], minlength=units),
    )


def _window(scenario: Scenario) -> tuple[float, float]:
    start = scenario.run.warm_up_days
    return start, start + scenario.run.measured_days
