"""One policy's measures with intervals, from independent replications."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.confidence import Estimate, mean_estimate, ratio_estimate, ratio_values
from analysis.controls import Controls, variance_ratio
from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES, Measure, Sums, combine, network_sums, unit_sums
from sim.record import Record
from sim.replicate import Run
from sim.scenario import Scenario


@dataclass(frozen=True)
class Simulation:
    """Measures of one policy.

    units: unit -> measure -> estimate. occupancy: unit -> an estimate for each number of occupied beds.
    network: measure -> estimate. variance_ratio: unit, or `network` -> measure -> how many times smaller control
    variates made the variance (None where nothing is left of it, or where it has none); None without them.
    """

    units: Mapping[str, Mapping[str, Estimate]]
    occupancy: Mapping[str, Sequence[Estimate]]
    network: Mapping[str, Estimate]
    replications: int
    confidence: float
    controls: Controls | None = None
    variance_ratio: Mapping[str, Mapping[str, float | None]] | None = None

    def to_dict(self) -> dict[str, Any]:
        """The tree of `exact`, each number as `{"mean", "low", "high"}`."""
        units = {
            name: {measure: estimate.to_dict() for measure, estimate in measures.items()}
            | {"occupancy": [estimate.to_dict() for estimate in self.occupancy[name]]}
            for name, measures in self.units.items()
        }
        return {
            "units": units,
            "network": {name: estimate.to_dict() for name, estimate in self.network.items()},
        }


def summarise(
    records: Sequence[Record], scenario: Scenario, *, confidence: float, controls: Controls | None = None
) -> Simulation:
    """The measures over the records of one policy, one a replication.

    controls: of the same replications in the same order; every mean and interval is then adjusted by them.
    """
    beds = np.array([unit.beds for unit in scenario.units], float)
    sums = unit_sums(records, beds, scenario.run.measured_days)
    whole = network_sums(sums)
    return Simulation(
        units={
            unit.name: {m.name: _shown(m, of_unit(sums, place), confidence, controls) for m in UNIT_MEASURES}
            for place, unit in enumerate(scenario.units)
        },
        occupancy={
            unit.name: _occupancy(
                sums["occupancy_days"][:, place, : unit.beds + 1], scenario, confidence, controls
            )
            for place, unit in enumerate(scenario.units)
        },
        network={m.name: _shown(m, whole, confidence, controls) for m in NETWORK_MEASURES},
        replications=len(records),
        confidence=confidence,
        controls=controls,
        variance_ratio=None if controls is None else _variance_ratios(sums, whole, scenario, controls),
    )


def of_unit(sums: Sums, place: int) -> Sums:
    """One unit's sums, (replications,) each."""
    return {name: values[:, place] for name, values in sums.items() if values.ndim == 2}


def _shown(measure: Measure, sums: Sums, confidence: float, controls: Controls | None) -> Estimate:
    """A measure, with its interval, cut to what the measure can be."""
    if controls is None or sums[measure.base].sum() <= 0:
        return estimate_measure(measure, sums, confidence).within(0.0, measure.most)
    values = ratio_values(sums[measure.total], sums[measure.base])
    return _adjusted(values, confidence, controls).within(0.0, measure.most)


def _adjusted(values: np.ndarray, confidence: float, controls: Controls) -> Estimate:
    return mean_estimate(controls.adjust(values), confidence, degrees=controls.degrees)


def _variance_ratios(
    sums: Sums, whole: Sums, scenario: Scenario, controls: Controls
) -> dict[str, dict[str, float | None]]:
    """How many times smaller the controls made the variance of each measure's mean."""

    def won(measure: Measure, mine: Sums) -> float | None:
        if mine[measure.base].sum() <= 0:
            return None
        values = ratio_values(mine[measure.total], mine[measure.base])
        ratio = float(variance_ratio(values, controls.adjust(values)))
        return None if np.isnan(ratio) else ratio

    units = {
        name: {m.name: won(m, of_unit(sums, place)) for m in UNIT_MEASURES}
        for place, name in enumerate(scenario.unit_names)
    }
    return units | {"network": {m.name: won(m, whole) for m in NETWORK_MEASURES}}


def estimate_measure(measure: Measure, sums: Sums, confidence: float, *, comparisons: int = 1) -> Estimate:
    """A measure over replications, with Student's interval."""
    return ratio_estimate(sums[measure.total], sums[measure.base], confidence, comparisons=comparisons)


def _occupancy(
    days: np.ndarray, scenario: Scenario, confidence: float, controls: Controls | None
) -> list[Estimate]:
    shares = days.T / scenario.run.measured_days
    if controls is None:
        return [mean_estimate(share, confidence).within(0.0, 1.0) for share in shares]
    return [_adjusted(share, confidence, controls).within(0.0, 1.0) for share in shares]


def per_replication_measures(runs: Sequence[Run], scenario: Scenario) -> list[dict[str, Any]]:
    """Raw measures of every run: what an outsider needs to reckon again. A share of no arrivals is None."""
    beds = np.array([unit.beds for unit in scenario.units], float)
    sums = unit_sums([run.record for run in runs], beds, scenario.run.measured_days)
    whole = network_sums(sums)
    units = {
        name: {m.name: _plain(combine(m, of_unit(sums, place))) for m in UNIT_MEASURES}
        for place, name in enumerate(scenario.unit_names)
    }
    network = {m.name: _plain(combine(m, whole)) for m in NETWORK_MEASURES}
    return [
        {
            "replication": run.replication,
            "units": {
                name: {m: values[row] for m, values in measures.items()} for name, measures in units.items()
            },
            "network": {m: values[row] for m, values in network.items()},
            "record_hash": run.record.hash,
            "intake_hash": run.intake_hash,
        }
        for row, run in enumerate(runs)
    ]


def _plain(values: np.ndarray) -> list[float | None]:
    return [None if np.isnan(value) else value for value in values.tolist()]
