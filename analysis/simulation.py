"""One policy's measures with intervals, from independent replications."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.confidence import Estimate, mean_estimate, ratio_estimate, ratio_values
from analysis.controls import Controls, controls_document, no_controls, variance_ratio
from analysis.counterpart import Counterpart
from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES, Measure, Sums, combine, network_sums, unit_sums
from sim.record import Record, hash_records
from sim.replicate import Run
from sim.scenario import Policy, Scenario


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
    records: Sequence[Record],
    scenario: Scenario,
    *,
    confidence: float,
    controls: Controls | None = None,
    counterpart: Counterpart | None = None,
) -> Simulation:
    """The measures over the records of one policy, one a replication.

    controls, counterpart: of the same replications in the same order; every mean and interval is then adjusted.
    """
    beds = np.array([unit.beds for unit in scenario.units], float)
    sums = unit_sums(records, beds, scenario.run.measured_days)
    whole = network_sums(sums)
    if counterpart is not None and controls is None:
        controls = no_controls(len(records))
    judge = _Judge(confidence, controls, counterpart)
    return Simulation(
        units={
            unit.name: {m.name: judge.shown(m, of_unit(sums, place), unit.name) for m in UNIT_MEASURES}
            for place, unit in enumerate(scenario.units)
        },
        occupancy={
            unit.name: judge.occupancy(
                sums["occupancy_days"][:, place, : unit.beds + 1].T / scenario.run.measured_days, unit.name
            )
            for place, unit in enumerate(scenario.units)
        },
        network={m.name: judge.shown(m, whole, None) for m in NETWORK_MEASURES},
        replications=len(records),
        confidence=confidence,
        controls=controls,
        variance_ratio=None if controls is None else _variance_ratios(sums, whole, scenario, judge),
    )


def simulation_document(
    result: Simulation, scenario: Scenario, policy: Policy, runs: Sequence[Run]
) -> dict[str, Any]:
    """What a simulation says as plain values: under which policy, its measures, and what repeats it."""
    return {"policy": policy.name, "thresholds": policy.thresholds} | result.to_dict() | {
        "replications": result.replications,
        "confidence": result.confidence,
        "seed": scenario.run.seed,
        "record_hash": hash_records([run.record.hash for run in runs]),
        "controls": controls_document(result.controls, result.variance_ratio),
    }  # fmt: skip


@dataclass(frozen=True)
class _Judge:
    """Turns sums into estimates, adjusted where there are controls."""

    confidence: float
    controls: Controls | None
    counterpart: Counterpart | None

    def shown(self, measure: Measure, sums: Sums, unit: str | None) -> Estimate:
        """A measure, with its interval, cut to what the measure can be."""
        if self.controls is None or sums[measure.base].sum() <= 0:
            return estimate_measure(measure, sums, self.confidence).within(0.0, measure.most)
        own = self._own(measure, unit)
        return self._adjusted(self.plain(measure, sums), own).within(0.0, measure.most)

    def occupancy(self, shares: np.ndarray, unit: str) -> list[Estimate]:
        """Shares of time, (levels, replications), with intervals."""
        if self.controls is None:
            return [mean_estimate(share, self.confidence).within(0.0, 1.0) for share in shares]
        owns = [None] * len(shares) if self.counterpart is None else list(self.counterpart.levels(unit))
        return [self._adjusted(share, own).within(0.0, 1.0) for share, own in zip(shares, owns, strict=True)]

    def won(self, measure: Measure, sums: Sums, unit: str | None) -> float | None:
        """How many times smaller the variance became; None where nothing is left of it."""
        if self.controls is None or sums[measure.base].sum() <= 0:
            return None
        values = self.plain(measure, sums)
        ratio = float(variance_ratio(values, self.controls.adjust(values, self._own(measure, unit))))
        return None if np.isnan(ratio) else ratio

    def plain(self, measure: Measure, sums: Sums) -> np.ndarray:
        """A measure's values by replication."""
        return ratio_values(sums[measure.total], sums[measure.base])

    def _own(self, measure: Measure, unit: str | None) -> np.ndarray | None:
        return None if self.counterpart is None else self.counterpart.measure(unit, measure)

    def _adjusted(self, values: np.ndarray, own: np.ndarray | None) -> Estimate:
        assert self.controls is not None
        degrees = self.controls.degrees - (own is not None)
        return mean_estimate(self.controls.adjust(values, own), self.confidence, degrees=degrees)


def of_unit(sums: Sums, place: int) -> Sums:
    """One unit's sums, (replications,) each."""
    return {name: values[:, place] for name, values in sums.items() if values.ndim == 2}


def _variance_ratios(
    sums: Sums, whole: Sums, scenario: Scenario, judge: _Judge
) -> dict[str, dict[str, float | None]]:
    """How many times smaller the variance of each measure's mean became."""
    units = {
        name: {m.name: judge.won(m, of_unit(sums, place), name) for m in UNIT_MEASURES}
        for place, name in enumerate(scenario.unit_names)
    }
    return units | {"network": {m.name: judge.won(m, whole, None) for m in NETWORK_MEASURES}}


def estimate_measure(measure: Measure, sums: Sums, confidence: float, *, comparisons: int = 1) -> Estimate:
    """A measure over replications, with Student's interval."""
    return ratio_estimate(sums[measure.total], sums[measure.base], confidence, comparisons=comparisons)


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
