"""Small tables, scenarios and records made by hand, for the tests of what the runs mean."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from sim.record import GATE_STATES, Record
from sim.scenario import Scenario


def table(shape: Sequence[int], payoffs_of: Callable[..., Sequence[float]]) -> np.ndarray:
    """Payoffs (players, *shape) from a function of a profile of strategy numbers."""
    payoffs = np.empty((len(shape), *shape))
    for profile in itertools.product(*map(range, shape)):
        payoffs[(slice(None), *profile)] = payoffs_of(*profile)
    return payoffs


def memoryless(*units: dict[str, Any], stay_days: float = 2.0, **tables: Any) -> Scenario:
    """A scenario with exponential stays, within the scope of the exact chain.

    units: tables of the file, each with the `per_day` of its own patients too. tables: the file's others.
    """
    rows = [{key: value for key, value in unit.items() if key != "per_day"} for unit in units]
    groups = [
        {
            "group": f"{unit['name']} emergencies",
            "home": unit["name"],
            "per_day": unit["per_day"],
            "stay": {"family": "exponential", "mean_days": stay_days},
        }
        for unit in units
        if unit["per_day"]
    ]
    return Scenario.model_validate({"schema": 1, "units": rows, "patients": groups, **tables})


def no_constants(name: str) -> None:
    """For `json.loads(..., parse_constant=no_constants)`: NaN and Infinity have no place in JSON."""
    raise AssertionError(f"{name} stands in the JSON")


def record(occupancy_days: Any, **counts: Any) -> Record:
    """A record from its occupancy, (periods, units, most beds + 1), and whatever else is not nought."""
    occupancy = np.array(occupancy_days, float)
    n = occupancy.shape[1]
    shapes = {"gate_days": (n, GATE_STATES), "diverted": (n, n), "admitted": (n, n)}
    names = (
        "gate_days",
        "arrived",
        "turned_away",
        "diverted",
        "admitted",
        "on_road_at_start",
        "on_road_at_end",
    )
    return Record(
        occupancy, **{name: np.array(counts.get(name, np.zeros(shapes.get(name, n)))) for name in names}
    )
