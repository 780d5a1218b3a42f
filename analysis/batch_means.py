"""Intervals from one long run, by the means of its batches.

Source: Law, Simulation Modeling and Analysis, chapter 9 (batch means; from memory). Replications are better wherever
they can be had: batches of one run are dependent, and a run has one start.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from analysis.confidence import Estimate, mean_estimate
from analysis.paths import Grid, Path, even_bins
from sim.scenario import Scenario
from sim.scenario.describe import mean_stay_days

BATCH_STAYS = 8  # a batch is at least so many mean stays long
FEWEST, MOST = 5, 30  # batches
MOST_CORRELATION = 0.1
GRID = "batches"


@dataclass(frozen=True)
class BatchMeans:
    """A mean with its interval from batches, and their correlation with the next; None where they are all equal."""

    estimate: Estimate
    batches: int
    lag1_correlation: float | None

    @property
    def is_doubtful(self) -> bool:
        """Whether the batches depend on each other so much that the interval is too narrow."""
        return self.lag1_correlation is not None and self.lag1_correlation > MOST_CORRELATION

    def to_dict(self) -> dict[str, Any]:
        """The estimate with `batches`, `lag1_correlation` and `doubtful`."""
        return self.estimate.to_dict() | {
            "batches": self.batches, "lag1_correlation": self.lag1_correlation, "doubtful": self.is_doubtful,
        }  # fmt: skip


def batch_means(means: np.ndarray, confidence: float) -> BatchMeans:
    """Mean and Student's interval from the means of equally long batches in order, (batches,), at least 2."""
    means = np.asarray(means, float)
    if len(means) < 2:
        raise ValueError(f"batch means need at least 2 batches, got {len(means)}")
    return BatchMeans(mean_estimate(means, confidence), len(means), lag1_correlation(means))


def lag1_correlation(means: np.ndarray) -> float | None:
    """Correlation of neighbours in a series, (batches,), about its one mean; None where nothing varies."""
    centred = np.asarray(means, float) - np.mean(means)
    spread = float(centred @ centred)
    return (
        None
        if spread <= 1e-24 * max(1.0, float(np.abs(means).max()))
        else float(centred[1:] @ centred[:-1]) / spread
    )


def batch_grid(scenario: Scenario) -> Grid | None:
    """At most 30 batches of at least 8 mean stays over the measured window; None where not even 5 fit."""
    run = scenario.run
    longest = BATCH_STAYS * mean_stay_days(scenario)
    count = MOST if longest <= 0 else min(MOST, int(run.measured_days / longest))
    if count < FEWEST:
        return None
    return even_bins(run.warm_up_days, run.warm_up_days + run.measured_days, run.measured_days / count)


def batch_document(path: Path, scenario: Scenario, grid: Grid) -> dict[str, Any]:
    """Batch means of one run: `units` (mean occupied beds, patients a day), `network`, `batch_days`, `doubtful`.

    path: holds the grid of `batch_grid` under the name GRID. Intervals end at 0, for nothing here can be less.
    """
    confidence, found = scenario.run.confidence, path.grids[GRID]
    rates = {
        "admissions_per_day": found.admitted / grid.days,
        "turned_away_per_day": found.turned_away / grid.days,
    }
    units = {
        name: {"mean_occupied": batch_means(found.occupied[place], confidence)}
        | {measure: batch_means(values[place], confidence) for measure, values in rates.items()}
        for place, name in enumerate(scenario.unit_names)
    }
    network = {
        "throughput_per_day": batch_means(rates["admissions_per_day"].sum(axis=0), confidence),
        "turned_away_per_day": batch_means(rates["turned_away_per_day"].sum(axis=0), confidence),
    }
    places = units | {"network": network}
    return {
        "batches": len(grid.days),
        "batch_days": float(grid.days[0]),
        "units": {name: _plain(each) for name, each in units.items()},
        "network": _plain(network),
        "doubtful": [f"{where}: {m}" for where, each in places.items() for m, one in each.items() if one.is_doubtful],
    }  # fmt: skip


def _plain(measures: Mapping[str, BatchMeans]) -> dict[str, Any]:
    cut = {name: replace(one, estimate=one.estimate.within(0.0, math.inf)) for name, one in measures.items()}
    return {name: one.to_dict() for name, one in cut.items()}


def too_short(scenario: Scenario) -> str:
    """Why there are no batch means."""
    least = math.ceil(FEWEST * BATCH_STAYS * mean_stay_days(scenario))
    return (
        f"batch means need {FEWEST} batches of {BATCH_STAYS} mean stays: run.measured_days of {least} or more"
    )
