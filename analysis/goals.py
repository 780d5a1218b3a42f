"""What each player pursues and what the network values, from exact means or from replications.

A goal is a cost to minimise or a gain to maximise. From replications it gives a point estimate and
pseudo-values, whose paired differences carry the error of any contrast (jackknife, Tukey 1958).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np

from analysis.confidence import jackknife
from analysis.goal_sums import influence, ratio, squared_distances, t_interval
from analysis.weighted_goals import weighted_goal_of
from sim.errors import Fault, ScenarioError
from sim.scenario import Scenario
from sim.scenario.goals import Sense, TargetUtilisation


class Goal(Protocol):
    """What every goal can do; `TargetGoal` says the most common one, with the shapes."""

    @property
    def sense(self) -> Sense:
        """Whether payoffs are costs to minimise or gains to maximise."""

    @property
    def reads(self) -> str:
        """The goal in words."""

    @property
    def display_scale(self) -> tuple[float, str]:
        """The factor by which a dense table multiplies payoffs, and the unit that they then have."""

    @property
    def is_distance(self) -> bool:
        """Whether every payoff is the distance of one mean utilisation from its target: what theory speaks of."""

    @property
    def exact_measures(self) -> tuple[str, ...]:
        """The exact measures of a unit that `exact` reads."""

    @property
    def without_exact_mean(self) -> str | None:
        """What in it has no exact mean; None where `exact` gives its payoffs."""

    def reads_of(self, player: int) -> str:
        """A player's goal in words."""

    def exact(self, measures: Mapping[str, np.ndarray]) -> np.ndarray:
        """Payoffs (cells, players) from exact measures, each (cells, units)."""

    def estimate(self, sums: Mapping[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
        """Payoffs (cells, players) and their pseudo-values (replications, cells, players) from replications."""

    def signed(self, sums: Mapping[str, np.ndarray]) -> np.ndarray | None:
        """Values (replications, cells, players) where the payoff is the distance of their mean from 0, else None."""

    def branches(self, sums: Mapping[str, np.ndarray]) -> tuple[np.ndarray | None, ...] | None:
        """By player (branches, replications, cells), costs the largest of whose means is the payoff; None without."""

    def interval(self, sums: Mapping[str, np.ndarray], confidence: float) -> tuple[np.ndarray, np.ndarray]:
        """Lower and upper ends of the payoffs, (cells, players) each, at pointwise confidence."""


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

    def reads_of(self, player: int) -> str:
        """A player's goal in words: all have the same."""
        return self.reads

    @property
    def is_distance(self) -> bool:
        """Whether every payoff is the distance of one mean utilisation from its target."""
        return self.shape == "absolute"

    @property
    def exact_measures(self) -> tuple[str, ...]:
        """The exact measures of a unit that `exact` reads."""
        return ("utilisation",)

    @property
    def without_exact_mean(self) -> str | None:
        """What in it has no exact mean; None for a distance."""
        return "a squared distance over judged periods" if self.shape == "squared" else None

    def exact(self, measures: Mapping[str, np.ndarray]) -> np.ndarray:
        """Payoffs (cells, units) from exact measures, each (cells, units)."""
        return np.abs(measures["utilisation"] - self.targets)

    def estimate(self, sums: Mapping[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
        """Payoffs (cells, units) and their pseudo-values (replications, cells, units) from replications."""
        if self.shape == "squared":
            values = self._squared(sums)
            return values.mean(axis=0), values
        occupied, staffed = sums["occupied_days"], sums["bed_days"]
        point = np.abs(ratio(occupied.sum(axis=0), staffed.sum(axis=0)) - self.targets)
        if len(occupied) < 2:
            return point, point[None]
        others = ratio(occupied.sum(axis=0) - occupied, staffed.sum(axis=0) - staffed)
        return point, jackknife(point, np.abs(others - self.targets))

    def signed(self, sums: Mapping[str, np.ndarray]) -> np.ndarray | None:
        """Utilisation less target by replication, (replications, cells, units), where the payoff is |E U - T|.

        Where staffed bed-time varies the ratio of means is linearised (delta method). None for the squared goal.
        """
        if self.shape == "squared":
            return None
        occupied, staffed = sums["occupied_days"], sums["bed_days"]
        return influence(occupied, staffed) - self.targets

    def branches(self, sums: Mapping[str, np.ndarray]) -> None:
        """None: the signed values say it all."""
        return

    def interval(self, sums: Mapping[str, np.ndarray], confidence: float) -> tuple[np.ndarray, np.ndarray]:
        """Lower and upper ends of the payoffs, (cells, units) each, at pointwise confidence."""
        if self.shape == "squared":
            low, high = t_interval(self._squared(sums), confidence)
            return np.maximum(low, 0), high
        low, high = t_interval(influence(sums["occupied_days"], sums["bed_days"]), confidence)
        below, above = low - self.targets, high - self.targets
        nearest = np.where((below <= 0) & (above >= 0), 0.0, np.minimum(np.abs(below), np.abs(above)))
        return nearest, np.maximum(np.abs(below), np.abs(above))

    def _squared(self, sums: Mapping[str, np.ndarray]) -> np.ndarray:
        """Mean over judged periods of the squared distance, (replications, cells, units)."""
        return squared_distances(sums, self.targets, self.judged_days)


def goal_of(scenario: Scenario) -> Goal:
    """The goals that the scenario's game names; ScenarioError where a unit lacks the target it needs."""
    if missing := scenario.units_without_target():
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
    if not _is_plain(scenario):
        return weighted_goal_of(scenario)
    goal = scenario.game.goal_of(scenario.unit_names[0])
    return TargetGoal(
        targets=np.array([unit.target_utilisation for unit in scenario.units]),
        shape=goal.shape,
        judged_days=goal.judged_over_days,
    )


def _is_plain(scenario: Scenario) -> bool:
    """Whether every unit plays alone, and all for a target in the same shape, with nothing to break ties."""
    goals = [scenario.game.goal_of(name) for name in scenario.unit_names]
    plain = (
        isinstance(goals[0], TargetUtilisation) and goals[0].shape != "above" and goals[0].tie_breaker is None
    )
    return plain and all(goal == goals[0] for goal in goals) and len(scenario.players()) == len(goals)


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
