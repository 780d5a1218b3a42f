"""Payoffs that are weighted sums of measures of the player's units.

Each unit's goal is such a sum (`sim.scenario.goals`). Over several units, shares of time and distances from targets
are averaged by beds, and numbers of patients are added up; so a unit that plays alone has its own goal.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

import numpy as np

from analysis.confidence import jackknife
from analysis.goal_sums import influence, ratio, squared_distances, t_interval
from analysis.measures import UNIT_MEASURES
from sim.scenario import Scenario
from sim.scenario.goals import SQUARED_DISTANCE, TARGET_DISTANCE, TARGET_EXCESS, Sense

MOST_BRANCHES = 64
# Of what is not linear in a mean: its slopes in utilisation on the two sides of the target.
SLOPES = {TARGET_DISTANCE: (1.0, -1.0), TARGET_EXCESS: (1.0, 0.0)}
_BASES = {one.name: (one.total, one.base) for one in UNIT_MEASURES} | {
    SQUARED_DISTANCE: (SQUARED_DISTANCE, "days")
}
_CONSTANTS = {"free_bed_fraction": ("full_fraction", 1.0)}  # one less a measure

Means = Callable[[str], np.ndarray]  # a measure's name -> its means, (..., units)


@dataclass(frozen=True)
class Term:
    """A measure of a unit, by its place, and its weight in the payoff."""

    unit: int
    measure: str
    weight: float


@dataclass(frozen=True)
class WeightedGoal:
    """Every player's payoff is a weighted sum of measures of its units.

    terms: of each player. targets: (units,), NaN where a unit needs none. judged_days: of a squared term, None
    where there is none. reads: all goals in words; by_player: each player's own. display_scale: the factor by
    which a dense table multiplies payoffs, and the unit that they then have.
    """

    terms: tuple[tuple[Term, ...], ...]
    targets: np.ndarray
    judged_days: float | None
    sense: Sense
    reads: str
    by_player: tuple[str, ...]
    display_scale: tuple[float, str]

    def reads_of(self, player: int) -> str:
        """A player's goal in words."""
        return self.by_player[player]

    @property
    def is_distance(self) -> bool:
        """Whether every payoff is the distance of one mean utilisation from its target."""
        return False

    @property
    def exact_measures(self) -> tuple[str, ...]:
        """The exact measures of a unit that `exact` reads."""
        names = (_mean_of(term.measure) for mine in self.terms for term in mine)
        return tuple(dict.fromkeys(names))

    @property
    def without_exact_mean(self) -> str | None:
        """Why the chain has no exact payoff for it; None where it has."""
        return None if self.judged_days is None else "a squared distance over judged periods"

    def exact(self, measures: Mapping[str, np.ndarray]) -> np.ndarray:
        """Payoffs (cells, players) from exact measures, each (cells, units)."""
        return self._paid(lambda name: measures[name])

    def estimate(self, sums: Mapping[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
        """Payoffs (cells, players) and their pseudo-values (replications, cells, players) from replications."""
        sums = self._with_squares(sums)
        point = self._paid(lambda name: ratio(*(sums[part].sum(axis=0) for part in _BASES[name])))
        if len(sums["days"]) < 2:
            return point, point[None]
        others = self._paid(
            lambda name: ratio(*(sums[part].sum(axis=0) - sums[part] for part in _BASES[name]))
        )
        return point, jackknife(point, others)

    def interval(self, sums: Mapping[str, np.ndarray], confidence: float) -> tuple[np.ndarray, np.ndarray]:
        """Lower and upper ends of the payoffs, (cells, players) each, at pointwise confidence.

        A distance is the greater of its two branches, so the ends are the greatest ends over the branches; near
        a target that is cautious. With more than 64 branches the one at the point estimate stands for all.
        """
        sums = self._with_squares(sums)
        ends = [self._ends(mine, sums, confidence) for mine in self.terms]
        low, high = (np.stack(one, axis=-1) for one in zip(*ends, strict=True))
        return low, high

    def signed(self, sums: Mapping[str, np.ndarray]) -> None:
        """None: no payoff here is the absolute value of one mean."""
        return

    def branches(self, sums: Mapping[str, np.ndarray]) -> tuple[np.ndarray | None, ...] | None:
        """By player (branches, replications, cells): costs linear in means, the largest of whose means is the payoff.

        None for a player without distances, or with more than 64 branches; None for all where nobody has any.
        """
        sums = self._with_squares(sums)
        found = tuple(self._branches_of(mine, sums) for mine in self.terms)
        return None if all(one is None for one in found) else found

    def _branches_of(self, mine: tuple[Term, ...], sums: Mapping[str, np.ndarray]) -> np.ndarray | None:
        kinks = [term for term in mine if term.measure in SLOPES and term.weight]
        if not kinks or 2 ** len(kinks) > MOST_BRANCHES:
            return None
        return np.stack(list(self._linear(mine, sums)))

    def _linear(self, mine: tuple[Term, ...], sums: Mapping[str, np.ndarray]) -> Iterator[np.ndarray]:
        """A player's branches as costs, by replication, (replications, cells) each."""
        sign = 1.0 if self.sense == "cost" else -1.0  # the greater of two branches is so as a cost
        kinks = [term for term in mine if term.measure in SLOPES and term.weight]
        plain = [
            sign * term.weight * self._value(term, _influence_in(sums))
            for term in mine
            if term.measure not in SLOPES
        ]
        bent = [self._distance(term, sums) for term in kinks]
        weights = [sign * term.weight for term in kinks]
        for slopes in _branches(kinks, bent):
            yield sum(plain) + sum(w * s * d for w, s, d in zip(weights, slopes, bent, strict=True))

    def _paid(self, mean: Means) -> np.ndarray:
        paid = (sum(term.weight * self._value(term, mean) for term in mine) for mine in self.terms)
        return np.stack(list(paid), axis=-1)

    def _value(self, term: Term, mean: Means) -> np.ndarray:
        """A term's measure, its weight apart, (...,)."""
        value = mean(_mean_of(term.measure))[..., term.unit]
        if term.measure in SLOPES:
            return _kinked(term.measure, value - self.targets[term.unit])
        return _CONSTANTS[term.measure][1] - value if term.measure in _CONSTANTS else value

    def _ends(
        self, mine: tuple[Term, ...], sums: Mapping[str, np.ndarray], confidence: float
    ) -> tuple[np.ndarray, np.ndarray]:
        """A player's interval, (cells,) each."""
        ends = [t_interval(branch, confidence) for branch in self._linear(mine, sums)]
        low, high = (np.max([one[place] for one in ends], axis=0) for place in (0, 1))
        low = np.maximum(low, 0) if self._never_below_0(mine) else low
        return (low, high) if self.sense == "cost" else (-high, -low)

    def _distance(self, term: Term, sums: Mapping[str, np.ndarray]) -> np.ndarray:
        """Utilisation less the target, by replication, (replications, cells)."""
        return _influence_in(sums)("utilisation")[..., term.unit] - self.targets[term.unit]

    def _never_below_0(self, mine: tuple[Term, ...]) -> bool:
        return self.sense == "cost" and all(term.weight >= 0 for term in mine)

    def _with_squares(self, sums: Mapping[str, np.ndarray]) -> Mapping[str, np.ndarray]:
        if self.judged_days is None:
            return sums
        squares = squared_distances(sums, self.targets, self.judged_days)
        return {**sums, SQUARED_DISTANCE: squares * sums["days"]}


def _mean_of(measure: str) -> str:
    """The measure whose mean is looked up."""
    return "utilisation" if measure in SLOPES else _CONSTANTS.get(measure, (measure,))[0]


def _kinked(measure: str, distance: np.ndarray) -> np.ndarray:
    return np.maximum(*(slope * distance for slope in SLOPES[measure]))


def _influence_in(sums: Mapping[str, np.ndarray]) -> Means:
    return lambda name: influence(*(sums[part] for part in _BASES[name]))


def _branches(kinks: list[Term], bent: list[np.ndarray]) -> Iterator[tuple]:
    """Slopes of every kink, all combinations; where these are too many, those at the point estimate, by cell."""
    if 2 ** len(kinks) <= MOST_BRANCHES:
        yield from itertools.product(*(SLOPES[term.measure] for term in kinks))
        return
    means = [distance.mean(axis=0) for distance in bent]
    yield tuple(np.where(mean >= 0, *SLOPES[term.measure]) for term, mean in zip(kinks, means, strict=True))


# ---- from a scenario ----


def weighted_goal_of(scenario: Scenario) -> WeightedGoal:
    """The goals that the scenario's game names, in one sense: where some are gains and some costs, all are costs.

    Every unit whose goal needs a target has one.
    """
    goals = {unit.name: scenario.game.goal_of(unit.name) for unit in scenario.units}
    senses = {goal.sense for goal in goals.values()}
    sense: Sense = "cost" if len(senses) > 1 else senses.pop()
    terms, by_player = [], []
    for units in scenario.players().values():
        own = tuple(term for name in units for term in _terms(scenario, name, units, sense))
        terms.append(own)
        by_player.append(_joined({name: _in_sense(goals[name], sense) for name in units}, len(units) > 1))
    targets = [unit.target_utilisation for unit in scenario.units]
    squared = any(term.measure == SQUARED_DISTANCE for mine in terms for term in mine)
    return WeightedGoal(
        tuple(terms),
        np.array([np.nan if target is None else target for target in targets]),
        scenario.game.judged_over_days if squared else None,
        sense,
        _joined(dict(zip(scenario.players(), by_player, strict=True))),
        tuple(by_player),
        _scale({term.measure for mine in terms for term in mine if term.weight}),
    )


def _terms(scenario: Scenario, name: str, units: tuple[str, ...], sense: Sense) -> Iterator[Term]:
    goal, beds = scenario.game.goal_of(name), scenario.unit(name).beds
    sign = 1.0 if goal.sense == sense else -1.0
    share = beds / sum(scenario.unit(one).beds for one in units)
    for measure, weight in goal.terms.items():
        added_up = measure.endswith("_per_day")
        yield Term(scenario.place_of(name), measure, sign * weight * (1.0 if added_up else share))


def _in_sense(goal, sense: Sense) -> str:
    return goal.reads if goal.sense == sense else f"{goal.reads} (a gain, counted as a cost below 0)"


def _joined(reads: Mapping[str, str], several: bool = False) -> str:
    """One goal in words where all have it, else each by its name."""
    if len(set(reads.values())) == 1:
        return next(iter(reads.values())) + (
            " (shares averaged by beds, patients added up)" if several else ""
        )
    return "; ".join(f"{name}: {said}" for name, said in reads.items())


def _scale(measures: set[str]) -> tuple[float, str]:
    """Rates by the year, shares in percent; where both count, hundredths."""
    if measures == {SQUARED_DISTANCE}:
        return 10_000.0, "squared percentage points of utilisation"
    if measures <= {TARGET_DISTANCE, TARGET_EXCESS, "utilisation"}:
        return 100.0, "percentage points of utilisation"
    rates = {one for one in measures if one.endswith("_per_day")}
    if rates == measures:
        return 365.0, "patients a year"
    return (100.0, "hundredths of the goal's unit") if rates else (100.0, "percentage points")
