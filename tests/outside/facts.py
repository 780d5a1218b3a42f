"""Networks written as scenario files, simulated, and held against facts from outside the project.

A fact is a number that a measure must have in expectation. It is refuted where it lies outside an interval
that misses the truth of a correct simulator once in two million (Student's t over independent replications),
so that a file with at most 200 facts raises a false alarm with probability 1 in 10,000. Seeds are fixed.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from scipy import stats

from analysis.confidence import Estimate
from analysis.simulation import Simulation, summarise
from sim.record import Record
from sim.replicate import Failure, replicate
from sim.scenario import Scenario, parse_scenario

FALSE_ALARM = 5e-7  # of one fact
REPLICATIONS = 40

Where = tuple[str, str]  # a unit, or "network", and a measure; of a unit also "occupancy n"


def network(
    units: Sequence[Mapping[str, Any]],
    patients: Sequence[Mapping[str, Any]],
    *,
    days: tuple[float, float],
    resort: str = "turned_away",
    seed: int = 2718,
    folder: str | Path = ".",
    **diversion: Any,
) -> Scenario:
    """The scenario with these rows; `days`: warm-up and measured days; `folder`: where its data files lie."""
    tables = {
        "schema": 1,
        "run": {
            "seed": seed,
            "warm_up_days": days[0],
            "measured_days": days[1],
            "replications": REPLICATIONS,
        },
        "units": units,
        "patients": patients,
        "diversion": {"when_all_closed": resort, **diversion},
    }
    return parse_scenario(
        "\n".join(f"{key} = {in_toml(value)}" for key, value in tables.items()), folder=folder
    )


def in_toml(value: Any) -> str:
    """A value as TOML writes it in one line; strings, numbers and truth values are those of JSON."""
    if isinstance(value, Mapping):
        return (
            "{ " + ", ".join(f"{json.dumps(key)} = {in_toml(inner)}" for key, inner in value.items()) + " }"
        )
    if isinstance(value, list | tuple):
        return "[" + ", ".join(map(in_toml, value)) + "]"
    return json.dumps(value)


def patients_of(home: str, per_day: float, stay: Mapping[str, Any], **keys: Any) -> dict[str, Any]:
    """A row of patients; one group a home unless `group` is given."""
    return {"group": f"{home} patients", "home": home, "per_day": per_day, "stay": stay} | keys


def records_of(scenario: Scenario, *, replications: int = REPLICATIONS) -> list[Record]:
    """The records of the file's own policy, one a replication."""
    records = []
    for reply in replicate(scenario, [scenario.policy()], range(replications)):
        assert not isinstance(reply, Failure), str(reply)
        records += [run.record for run in reply]
    return records


def refuted(
    facts: Mapping[Where, float], scenario: Scenario, *, records: Sequence[Record] | None = None
) -> list[str]:
    """The facts outside their intervals, in words; empty where all hold."""
    records = records_of(scenario) if records is None else records
    simulation = summarise(records, scenario, confidence=1 - FALSE_ALARM)
    judged = ((place, value, estimate_at(place, simulation)) for place, value in facts.items())
    return [
        f"{place}: {value:.6g} is expected, {seen} was simulated"
        for place, value, seen in judged
        if misses(seen, value)
    ]


def estimate_at(place: Where, simulation: Simulation) -> Estimate:
    """What the simulation says of one measure."""
    where, measure = place
    if measure.startswith("occupancy "):
        return simulation.occupancy[where][int(measure.split()[1])]
    return (simulation.network if where == "network" else simulation.units[where])[measure]


def misses(estimate: Estimate, value: float) -> bool:
    """Whether the value lies outside the interval; rounding of sums of times is allowed for."""
    assert None not in (estimate.low, estimate.high), estimate
    slack = 1e-9 * max(1.0, abs(value))
    return not estimate.low - slack <= value <= estimate.high + slack


def differs(values: np.ndarray, expected: float = 0.0) -> bool:
    """Whether the mean of independent values, (replications,), is significantly not the expected one."""
    return bool(stats.ttest_1samp(values, expected).pvalue < FALSE_ALARM)
