"""How long a warm-up should be: where the average path of runs from an empty network stops to climb.

Sources: White 1997, "An effective truncation heuristic for bias reduction in simulation output"; White, Cobb and
Spratt 2000, "A comparison of five steady-state truncation heuristics for simulation" (both from memory): MSER-5. Cuts
of single runs are erratic, so it is the average of runs that is cut; and no advice is less than five mean stays.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.paths import Grid, Path, even_bins, occupied_by_replication
from sim.scenario import Scenario
from sim.scenario.describe import WARM_UP_STAYS, mean_stay_days

BATCH = 5  # observations
OBSERVATION_DAYS = 7 / BATCH  # so that a batch is a week, which evens out every rhythm of demand
LEAST_KEPT = 5  # batches: the spread of fewer says nothing
LEAST_WEEKS = 2 * LEAST_KEPT
GRID = "start"


@dataclass(frozen=True)
class Cut:
    """Where a series is cut: so many observations are dropped; rejected where that is in its second half."""

    observations: int
    rejected: bool


def mser5(series: np.ndarray) -> Cut:
    """The cut of MSER-5: batches of 5, the cut that makes the squared error of the mean of the rest least.

    series: (observations,), of at least 10 batches, else ValueError; observations after the last whole batch are
    left out. The least of sum (Z_j - mean)^2 / (k - d)^2 over the k - d batches after the cut; of equals the first.
    """
    means = _batches(np.asarray(series, float))
    cut = int(np.argmin([_squared_error(means[drop:]) for drop in range(len(means) - LEAST_KEPT + 1)]))
    return Cut(cut * BATCH, cut > len(means) / 2)


def _batches(series: np.ndarray) -> np.ndarray:
    whole = len(series) // BATCH
    if whole < LEAST_WEEKS:
        raise ValueError(f"{len(series)} observations are fewer than {LEAST_WEEKS} batches of {BATCH}")
    return series[: whole * BATCH].reshape(whole, BATCH).mean(axis=1)


def _squared_error(means: np.ndarray) -> float:
    return float(np.square(means - means.mean()).sum() / len(means) ** 2)


@dataclass(frozen=True)
class WarmUpAdvice:
    """The warm-up to be had, in days from the empty network.

    days: the advice, whole weeks; None, with a reason, where the runs are too short to tell. cut_days: each unit's
    own cut by MSER-5, None where it was rejected. mean_stays_days: five mean stays. present_days: the scenario's.
    path: mean occupied beds of each unit in pieces of `observation_days`, averaged over the replications.
    """

    days: float | None
    present_days: float
    mean_stays_days: float
    cut_days: Mapping[str, float | None]
    path: Mapping[str, Sequence[float]]
    replications: int
    reason: str | None = None
    observation_days: float = OBSERVATION_DAYS

    @property
    def is_met(self) -> bool | None:
        """Whether the present warm-up is as long as the advice; None where there is none."""
        return None if self.days is None else self.present_days >= self.days

    @property
    def notice(self) -> str | None:
        """What the analyst is to be told; None where nothing is amiss."""
        if self.days is None:
            return f"no warm-up can be advised: {self.reason}"
        if self.is_met:
            return None
        return (
            f"run.warm_up_days is {self.present_days:g}, less than the {self.days:g} advised from the runs' own "
            "start: measures lean towards the empty network; raise it"
        )

    def to_dict(self) -> dict[str, Any]:
        """Plain values, with `is_met` and `notice`."""
        return vars(self) | {"is_met": self.is_met, "notice": self.notice}


def start_grid(scenario: Scenario) -> Grid | None:
    """The grid of a whole run from time 0; None where it has not even the ten weeks that MSER-5 needs here."""
    days = scenario.run.warm_up_days + scenario.run.measured_days
    return even_bins(0.0, days, OBSERVATION_DAYS) if days >= 7 * LEAST_WEEKS else None


def advise_warm_up(paths: Sequence[Path], scenario: Scenario) -> WarmUpAdvice:
    """The advice from paths that hold the grid of `start_grid` under the name GRID; none where there is no grid."""
    run, least = scenario.run, WARM_UP_STAYS * mean_stay_days(scenario)
    if start_grid(scenario) is None:
        cuts, path, reason = {}, {}, _too_short(run.warm_up_days + run.measured_days, least)
    else:
        mean = occupied_by_replication(paths, GRID).mean(axis=0)
        path = {name: mean[place].tolist() for place, name in enumerate(scenario.unit_names)}
        cuts = {name: _cut_days(np.array(series)) for name, series in path.items()}
        reason = _rejected(cuts)
    days = None if reason else 7.0 * math.ceil(max(least, *cuts.values()) / 7 - 1e-9)
    return WarmUpAdvice(days, run.warm_up_days, least, cuts, path, len(paths), reason)


def _cut_days(series: np.ndarray) -> float | None:
    cut = mser5(series)
    return None if cut.rejected else cut.observations * OBSERVATION_DAYS


def _too_short(days: float, least: float) -> str:
    return (
        f"a run of {days:g} days in all is too short: at least {7 * LEAST_WEEKS} are needed; raise run.measured_days "
        f"(five mean stays are {least:.1f} days)"
    )


def _rejected(cuts: Mapping[str, float | None]) -> str | None:
    units = [name for name, cut in cuts.items() if cut is None]
    if not units:
        return None
    return (
        f"the best cut lies in the second half of the run for {', '.join(units)}: runs are too short or too few for "
        "their start to be told from the rest, or the unit never settles (an outage on known days?); raise "
        "run.measured_days or --replications"
    )
