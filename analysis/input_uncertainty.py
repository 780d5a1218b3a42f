"""What of an error comes from the records, and no replication can take away: a bootstrap of the data.

The recorded times are resampled, each file's column as one sample whatever groups read it, and every resampling is
run on the same few replications. The variance between resamplings, less what their runs scatter anyway, is the
input's. Sources: Cheng and Holland 1997, "Sensitivity of computer simulation experiments to errors in input data";
Ankenman and Nelson 2012, "A quick assessment of input uncertainty" (both from memory). As replications are common
to all resamplings, the scatter is what is left in a two-way layout.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from analysis.anarchy import DAYS_A_YEAR
from analysis.comparison import NETWORK, Comparison, Group, grouped, welfare_a_day
from analysis.confidence import Estimate, critical_value
from analysis.goals import welfare_of
from analysis.measures import unit_sums
from analysis.named_policies import Case
from sim.errors import Fault, ScenarioError
from sim.replicate import Failure, Run
from sim.scenario import Scenario

PURPOSE = 8  # beside the seed: resampling shares no stream with anything else
WORTHWHILE = (
    0.05  # of the interval's width: what more replications must promise at most, lest they be pointless
)
COUNTS = {"turned_away_per_day": "turned_away", "transfers_per_day": "diverted_out"}
WELFARE = "welfare"
MEASURES = (WELFARE, *COUNTS)


def require_observed(scenario: Scenario) -> None:
    """ScenarioError where no stay and no delay is taken from records."""
    if not scenario.observed():
        rule, got = "needs stays or delays taken from records", "got none of the family empirical"
        remedy = 'leave it out, or give a group `stay = { family = "empirical", file = ..., column = ... }`'
        fault = Fault(None, "--input-uncertainty", rule, got, remedy)
        raise ScenarioError([fault], scenario.source.file)


class Resampling:
    """The runs on resampled records, and what they measured.

    values: (resamplings, replications, policies, MEASURES), a day, welfare larger better; NaN where there is no run.
    """

    def __init__(self, cases: Sequence[Case], resamples: int, runs_each: int) -> None:
        self.replications = range(runs_each)
        self.values = np.full((resamples, runs_each, len(cases), len(MEASURES)), np.nan)
        self._groups = grouped(cases)

    @property
    def runs(self) -> int:
        """The number of runs in all."""
        return self.values[..., 0].size

    def networks(self) -> Iterator[tuple[tuple[int, int], Group]]:
        """((resampling, group), the group on resampled records), one after another."""
        seed = self._groups[0].scenario.run.seed
        for one in range(len(self.values)):
            for place, group in enumerate(self._groups):
                rng = np.random.default_rng([seed, PURPOSE, one])
                yield (one, place), replace(group, scenario=resampled(group.scenario, rng))

    def take(self, key: tuple[int, int], reply: list[Run] | Failure) -> None:
        """Takes the runs of one replication on one resampling."""
        if isinstance(reply, Failure):
            return
        one, place = key
        group = self._groups[place]
        measured = _measured(group.scenario, reply)
        for run, row in zip(reply, measured, strict=True):
            self.values[one, run.replication, group.places[run.cell]] = row

    def complete(self) -> np.ndarray:
        """The resamplings that have all their runs, as `values`."""
        return self.values[~np.isnan(self.values).any(axis=(1, 2, 3))]


def resampled(scenario: Scenario, rng: np.random.Generator) -> Scenario:
    """The scenario on records drawn from its own with replacement, as many."""
    records = {
        key: tuple(rng.choice(np.array(values), size=len(values)).tolist())
        for key, values in sorted(scenario.observed().items())
    }
    return scenario.with_observed(records)


def _measured(scenario: Scenario, runs: Sequence[Run]) -> np.ndarray:
    """Each run's MEASURES, (runs, measures)."""
    beds = np.array([unit.beds for unit in scenario.units], float)
    sums = unit_sums([run.record for run in runs], beds, scenario.run.measured_days)
    counts = [(sums[name] / sums["days"]).sum(axis=-1) for name in COUNTS.values()]
    return np.column_stack([welfare_a_day(welfare_of(scenario), sums), *counts])


@dataclass(frozen=True)
class Share:
    """How a mean's error splits. Variances are of the mean. narrower: by how much of its width the whole interval
    can still shrink, had there been replications without end."""

    mean: float
    of_input: float
    of_simulation: float
    interval: Estimate

    @property
    def share(self) -> float | None:
        """The input's share of the variance; None where nothing varies."""
        whole = self.of_input + self.of_simulation
        return self.of_input / whole if whole > 0 else None

    @property
    def narrower(self) -> float | None:
        """1 - sqrt(share)."""
        return None if self.share is None else 1 - math.sqrt(self.share)


def input_variance(values: np.ndarray) -> float:
    """The variance between resamplings of what they would measure at length; values: (resamplings, replications)."""
    resamples, runs = values.shape
    by_resampling = values.mean(axis=1, keepdims=True)
    left = values - by_resampling - values.mean(axis=0, keepdims=True) + values.mean()
    scatter = float(np.square(left).sum() / ((resamples - 1) * (runs - 1)))
    return max(0.0, float(by_resampling.var(ddof=1)) - scatter / runs)


def split(main: np.ndarray, resampled_values: np.ndarray, confidence: float) -> Share:
    """The split of a mean's error. main: (replications,) of the scenario itself; resampled_values as above."""
    mean, of_simulation = float(main.mean()), float(main.var(ddof=1) / len(main))
    of_input = input_variance(resampled_values)
    degrees = min(len(main), len(resampled_values)) - 1
    half = critical_value(confidence, degrees) * math.sqrt(of_input + of_simulation)
    return Share(mean, of_input, of_simulation, Estimate(mean, mean - half, mean + half))


def input_document(resampling: Resampling, comparison: Comparison) -> dict[str, Any] | None:
    """The splits of every policy's numbers and of every difference from the base; None with too few resamplings."""
    values = resampling.complete()
    if len(values) < 2:
        return None
    signs = np.ones(len(MEASURES))
    signs[0] = 1 if welfare_of(comparison.cases[0].scenario).sense == "gain" else -1  # in its own sense again
    rows = list(_rows(values * signs, _main(comparison) * signs, comparison))
    widest = max((row["can_shrink_by"] or 0.0 for row in rows), default=0.0)
    return {
        "resamples": len(values), "runs_each": len(resampling.replications), "rows": rows,
        "more_replications_are_pointless": widest <= WORTHWHILE,
        "statement": _reads(widest),
    }  # fmt: skip


def _reads(widest: float) -> str:
    shown = f"{100 * widest:.0f} %"
    if widest <= WORTHWHILE:
        return (
            f"More replications are pointless: without end they would narrow no interval below by more than {shown}; "
            "the rest is the records', and only more records can take it away"
        )
    return f"More replications can narrow an interval below by up to {shown}; the rest is the records'"


def _main(comparison: Comparison) -> np.ndarray:
    """The comparison's own (replications, policies, MEASURES)."""
    at = {one.measure.name: place for place, one in enumerate(comparison.columns) if one.where == NETWORK}
    return np.stack([comparison.welfare, *(comparison.values[:, :, at[name]] for name in COUNTS)], axis=2)


def _rows(values: np.ndarray, main: np.ndarray, comparison: Comparison) -> Iterator[dict[str, Any]]:
    for place, name in enumerate(comparison.names):
        for column, measure in enumerate(MEASURES):
            yield _row(name, None, measure, main[:, place, column], values[:, :, place, column], comparison)
            if place:
                yield _row(
                    name, comparison.names[0], measure, main[:, place, column] - main[:, 0, column],
                    values[:, :, place, column] - values[:, :, 0, column], comparison,
                )  # fmt: skip


def _row(
    name: str, against: str | None, measure: str, main: np.ndarray, values: np.ndarray, comparison: Comparison
) -> dict[str, Any]:
    """One split in numbers a year."""
    found = split(main * DAYS_A_YEAR, values * DAYS_A_YEAR, comparison.confidence)
    reason = {} if found.share is not None else {"reason": "nothing varies"}
    return {
        "policy": name, "against": against, "measure": f"{measure.removesuffix('_per_day')}_per_year",
        **found.interval.to_dict(), "input_variance": found.of_input, "simulation_variance": found.of_simulation,
        "input_share": found.share, "can_shrink_by": found.narrower, **reason,
    }  # fmt: skip
