"""Mean occupied beds by hour of the week, 168 points a unit, with bands that hold all of a unit's points at once.

From 20 replications the critical value is that of the largest t of all points in resampled replications (sup-t by
bootstrap-t: Efron and Tibshirani 1993, "An Introduction to the Bootstrap"; Montiel Olea and Plagborg-Moller 2019,
"Simultaneous confidence bands"; both from memory); with fewer it is Bonferroni's. Bands of a single point each would
hold all 168 at once far less often than they promise.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.confidence import ONE_REPLICATION, Estimate, critical_value
from analysis.paths import Grid, Path, hours_of_week, occupied_by_replication
from analysis.simultaneous import Studentised, studentise
from sim.scenario import Scenario

LEAST_RESAMPLED = 20  # replications
DRAWS = 2000
STREAM = 168  # of the draws' own generator, beside the scenario's seed
GRID = "week"
RESAMPLED, BONFERRONI = "largest t, bootstrap-t", "Bonferroni"


@dataclass(frozen=True)
class WeekBand:
    """One unit's week: an estimate for each hour, Monday 00:00 first, (168,), and how its band was made.

    method: None from one replication, which has no band.
    """

    hours: Sequence[Estimate]
    method: str | None


@dataclass(frozen=True)
class HourOfWeek:
    """The week of every unit; each unit's 168 points are held at once with this confidence, units one by one."""

    units: Mapping[str, WeekBand]
    replications: int
    confidence: float

    def to_dict(self) -> dict[str, Any]:
        """`hour_of_week`: unit -> 168 times `hour`, `mean`, `low`, `high`; `hour_of_week_basis`: how."""
        return {
            "hour_of_week": {
                name: [{"hour": hour} | one.to_dict() for hour, one in enumerate(band.hours)]
                for name, band in self.units.items()
            },
            "hour_of_week_basis": {
                "replications": self.replications,
                "confidence": self.confidence,
                "simultaneous_over": "the 168 hours of a unit",
                "method": {name: band.method for name, band in self.units.items()},
            },
        }


def week_grid(scenario: Scenario) -> Grid:
    """The hours of the week over the measured window; ValueError where that is shorter than a week."""
    start = scenario.run.warm_up_days
    return hours_of_week(start, start + scenario.run.measured_days)


def week_of(paths: Sequence[Path], scenario: Scenario) -> HourOfWeek:
    """The week of every unit from paths that hold the grid of `week_grid` under the name GRID."""
    values, confidence = occupied_by_replication(paths, GRID), scenario.run.confidence
    rng = np.random.default_rng([scenario.run.seed, STREAM])
    units = {
        unit.name: _band(values[:, place], unit.beds, confidence, rng)
        for place, unit in enumerate(scenario.units)
    }
    return HourOfWeek(units, len(values), confidence)


def _band(values: np.ndarray, beds: int, confidence: float, rng: np.random.Generator) -> WeekBand:
    """The band of one unit's hours, (replications, 168), cut to what occupied beds can be."""
    if len(values) < 2:
        return WeekBand([Estimate(float(one), reason=ONE_REPLICATION) for one in values[0]], None)
    parts = studentise(values)
    critical, method = critical_of(values, confidence, rng)
    half = critical * parts.error
    hours = [
        Estimate(float(mean), float(mean - h), float(mean + h)).within(0.0, float(beds))
        for mean, h in zip(parts.mean, half, strict=True)
    ]
    return WeekBand(hours, method)


def critical_of(
    values: np.ndarray, confidence: float, rng: np.random.Generator, *, draws: int = DRAWS
) -> tuple[float, str]:
    """The critical value for all means of values, (replications, points), at once, and how it was found.

    Bonferroni's also where too many resamples leave a point without spread (it moved in a few replications only).
    """
    replications, points = values.shape
    if replications >= LEAST_RESAMPLED:
        found = float(np.quantile(_largest_resampled(values, rng, draws), confidence, method="higher"))
        if np.isfinite(found):
            return found, RESAMPLED
    return critical_value(confidence, replications - 1, comparisons=points), BONFERRONI


def _largest_resampled(values: np.ndarray, rng: np.random.Generator, draws: int) -> np.ndarray:
    """The largest |t| over points of each resample of whole replications, (draws,); inf where one has no spread."""
    parts: Studentised = studentise(values)
    n, moving = len(values), parts.error > 0
    if not moving.any():
        return np.zeros(draws)
    scores = (values[:, moving] - parts.mean[moving]) / parts.error[moving]
    shares = rng.multinomial(n, np.full(n, 1 / n), size=draws) / n
    mean = _product(shares, scores)
    variance = (_product(shares, np.square(scores)) - np.square(mean)) / (n - 1)
    error = np.sqrt(np.where(variance > 1e-12, variance, 0.0))
    t = np.divide(np.abs(mean), error, out=np.full_like(mean, np.inf), where=error > 0)
    return t.max(axis=1)


def _product(left: np.ndarray, right: np.ndarray) -> np.ndarray:
    """A matrix product summed in one order, so that its bits do not depend on how many threads share it."""
    return np.einsum("dr,rp->dp", left, right)
