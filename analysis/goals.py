"""What each player pursues and what the network values, from exact means or from replications.

A goal is a cost to minimise or a gain to maximise. From replications it gives a point estimate and
pseudo-values, whose paired differences carry the error of any contrast (jackknife, Tukey 1958).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from analysis.confidence import critical_value, jackknife
from sim.errors import Fault, ScenarioError
from sim.scenario import Scenario

Sense = Literal["cost", "gain"]


@dataclass(frozen=True)
class TargetGoal:
    """Every unit wants its utilisation at its own target.

    targets: (units,). shape: `absolute` is |E U - T|, `squared` is E (U over a judged period - T)^2.
    judged_days: length of a judged period, for `squared`.
    """

    targets: np.ndarray
    shape: Literal["absolute", "squared"]
    judged_days: float
    sense: Sense = "cost"

    @property
    def reads(self) -> str:
        """The goal in words."""
        if self.shape == "absolute":
            return "distance of mean utilisation from the target"
        return f"mean squared distance from the target of the utilisation over {self.judged_days:g} days"

    @property
    def display_scale(self) -> tuple[float, str]:
        """The factor by which a dense table multiplies payoffs, and the unit that they then have."""
        if self.shape == "absolute":
            return 100.0, "percentage points of utilisation"
        return 10_000.0, "squared percentage points of utilisation"

    def exact(self, utilisation: np.ndarray) -> np.ndarray:
        """Payoffs from exact mean utilisations, both (cells, units)."""
        return np.abs(utilisation - self.targets)

    def estimate(self, sums: Mapping[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
        """Payoffs (cells, units) and their pseudo-values (replications, cells, units) from replications."""
        if self.shape == "squared":
            values = self._squared(sums)
            return values.mean(axis=0), values
        occupied, staffed = sums["occupied_days"], sums["bed_days"]
        point = np.abs(_utilisation(occupied.sum(axis=0), staffed.sum(axis=0)) - self.targets)
        if len(occupied) < 2:
            return point, point[None]
        others = _utilisation(occupied.sum(axis=0) - occupied, staffed.sum(axis=0) - staffed)
        return point, jackknife(point, np.abs(others - self.targets))

    def signed(self, sums: Mapping[str, np.ndarray]) -> np.ndarray | None:
        """Utilisation less target by replication, (replications, cells, units), where the payoff is |E U - T|.

        Where staffed bed-time varies the ratio of means is linearised (delta method). None for the squared goal.
        """
        if self.shape == "squared":
            return None
        occupied, staffed = sums["occupied_days"], sums["bed_days"]
        return _linearised(occupied, staffed) - self.targets

    def interval(self, sums: Mapping[str, np.ndarray], confidence: float) -> tuple[np.ndarray, np.ndarray]:
        """Lower and upper ends of the payoffs, (cells, units) each, at pointwise confidence."""
        if self.shape == "squared":
            low, high = _t_interval(self._squared(sums), confidence)
            return np.maximum(low, 0), high
        low, high = _ratio_interval(sums["occupied_days"], sums["bed_days"], confidence)
        below, above = low - self.targets, high - self.targets
        nearest = np.where((below <= 0) & (above >= 0), 0.0, np.minimum(np.abs(below), np.abs(above)))
        return nearest, np.maximum(np.abs(below), np.abs(above))

    def _squared(self, sums: Mapping[str, np.ndarray]) -> np.ndarray:
        """Mean over judged periods of the squared distance, (replications, cells, units)."""
        whole = int(round(sums["days"].flat[0] / self.judged_days, 9))
        periods = _utilisation(
            sums["period_occupied_days"][:, :, :whole], sums["period_bed_days"][:, :, :whole]
        )
        return np.square(periods - self.targets).mean(axis=2)


def _utilisation(occupied: np.ndarray, staffed: np.ndarray) -> np.ndarray:
    """Occupied over staffed bed-time; 0 where no bed was ever staffed."""
    return np.divide(occupied, staffed, out=np.zeros(np.shape(occupied)), where=staffed > 0)


def _ratio_interval(
    occupied: np.ndarray, staffed: np.ndarray, confidence: float
) -> tuple[np.ndarray, np.ndarray]:
    """Student's interval for a ratio of means over replications, by the delta method."""
    return _t_interval(_linearised(occupied, staffed), confidence)


def _linearised(occupied: np.ndarray, staffed: np.ndarray) -> np.ndarray:
    """Values by replication whose mean is the ratio of means, and whose spread is its error (delta method)."""
    ratio = _utilisation(occupied.sum(axis=0), staffed.sum(axis=0))
    base = np.maximum(staffed.mean(axis=0), np.finfo(float).tiny)
    return ratio + (occupied - ratio * staffed) / base


def _t_interval(values: np.ndarray, confidence: float) -> tuple[np.ndarray, np.ndarray]:
    n, mean = len(values), values.mean(axis=0)
    if n < 2:
        return np.full_like(mean, np.nan), np.full_like(mean, np.nan)
    half = critical_value(confidence, n - 1) * values.std(axis=0, ddof=1) / np.sqrt(n)
    return mean - half, mean + half


def goal_of(scenario: Scenario) -> TargetGoal:
    """The goal that the scenario's game names; ScenarioError where a unit lacks the target it needs."""
    missing = [unit.name for unit in scenario.units if unit.target_utilisation is None]
    if missing:
        raise ScenarioError(
            [
                Fault(
                    None, f"units.{name}.target_utilisation", "is required by the game's goal", "missing",
                    "add it to the file, or give every unit one with --target",
                )
                for name in missing
            ],
            scenario.source.file,
        )  # fmt: skip
    goal = scenario.game.goal
    return TargetGoal(
        targets=np.array([unit.target_utilisation for unit in scenario.units]),
        shape=goal.shape,
        judged_days=goal.judged_over_days,
    )


@dataclass(frozen=True)
class Welfare:
    """What the network values, a day: patients treated (a gain), or a loss (a cost)."""

    kind: Literal["throughput", "loss"]
    transfer_weight: float = 0.0

    @property
    def sense(self) -> Sense:
        """Whether more is better (gain) or worse (cost)."""
        return "gain" if self.kind == "throughput" else "cost"

    @property
    def reads(self) -> str:
        """The welfare in words."""
        if self.kind == "throughput":
            return "patients treated a day"
        return f"patients turned away a day + {self.transfer_weight:g} x transfers a day"

    def value(self, throughput: np.ndarray, turned_away: np.ndarray, transfers: np.ndarray) -> np.ndarray:
        """Welfare a day from the network's rates a day, any shape."""
        if self.kind == "throughput":
            return np.asarray(throughput)
        return np.asarray(turned_away) + self.transfer_weight * np.asarray(transfers)


def welfare_of(scenario: Scenario) -> Welfare:
    """The welfare that the scenario's game names."""
    welfare = scenario.game.welfare
    return Welfare(welfare.kind, getattr(welfare, "transfer_weight", 0.0))
