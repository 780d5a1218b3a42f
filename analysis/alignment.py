"""Aligning targets: the lowest at which every possible equilibrium is near the optimum, at every demand of a range.

For a target the statement "at every demand all equilibria lose at most delta, and units can reach their targets" is an
intersection: it is made only where each part passes its own test, so where it is false some false part has passed,
and no part needs more than the statement's own level (Berger 1982, "Multiparameter hypothesis testing and acceptance
sampling"; from memory). Targets share the level (Bonferroni), so whichever are picked, all that is said of them holds
with the confidence.

- *Loss*: the upper end over the possible equilibria of `price_bands.projected`, on the welfare itself.
- *Reach*: some profile's utilisation has its lower limit (Bonferroni over profiles) at the target or above.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.anarchy import DAYS_A_YEAR, cost_of_selfishness
from analysis.confidence import Estimate, t_quantile
from analysis.contrasts import evidence_of
from analysis.equilibria import Profile, pure_equilibria
from analysis.games import Place, place_at
from analysis.goal_sums import influence
from analysis.goals import Welfare
from analysis.payoffs import PayoffTable
from analysis.price_bands import absolute_worth, difference_band
from analysis.sets import possible
from analysis.sweeping import EXACT, Filled, with_weight
from sim.lowering import lower_network, plan_intake
from sim.scenario import Scenario
from sim.store_rows import scenario_hash

DEFAULT_SHARE = 0.005  # of the patients who arrive
MOST_COMBINATIONS = 144  # of targets by unit
ROUNDING = 1e-9
NONE_TO_SPEAK_OF = "no pure equilibrium is possible, so nothing can be said of the equilibria"

Targets = tuple[float, ...]  # by unit, in scenario order


@dataclass(frozen=True)
class Delta:
    """The loss that still counts as near the optimum, in the welfare's unit a year.

    a_year: absolute, None where it is `share` of the patients who arrive at the demand in question.
    """

    share: float | None = DEFAULT_SHARE
    a_year: float | None = None

    def at(self, scenario: Scenario) -> float:
        """The loss a year allowed in this network."""
        if self.a_year is not None:
            return self.a_year
        assert self.share is not None
        return self.share * DAYS_A_YEAR * math.fsum(group.per_day for group in scenario.patients)

    @property
    def reads(self) -> str:
        """The loss in words."""
        if self.a_year is not None:
            return f"{self.a_year:g} patients a year"
        return f"{100 * (self.share or 0):g} % of the patients who arrive"


@dataclass(frozen=True)
class Loss:
    """What the equilibria at some targets lose against the optimum, in one network.

    targets: by unit. possible: how many profiles may be equilibria. lost: welfare a year at the worst of them, high at
    the level of the statement; low = high = mean where exact. allowed: delta. out_of_reach: units that no
    profile brings to their target. worst, optimum: what happens there (worst: None without an equilibrium).
    """

    targets: Targets
    demand: float
    method: str
    possible: int
    lost: Estimate
    allowed: float
    out_of_reach: tuple[str, ...]
    worst: Place | None
    optimum: Place

    @property
    def is_near(self) -> bool:
        """Whether every possible equilibrium is shown to be within delta of the optimum."""
        return self.possible > 0 and self.lost.high is not None and self.lost.high <= self.allowed + ROUNDING

    @property
    def holds(self) -> bool:
        """Whether that is so and every unit can reach its target."""
        return self.is_near and not self.out_of_reach

    @property
    def verdict(self) -> str:
        """In words."""
        if self.out_of_reach:
            return "out of reach"
        if not self.possible:
            return "no equilibrium"
        if self.is_near:
            return "within delta"
        return "beyond delta" if self.method == EXACT else "not shown"


def combinations(targets: Sequence[float], units: int, *, per_unit: bool) -> list[Targets]:
    """The targets that are tried: one for all, or every combination by unit."""
    if per_unit:
        return list(itertools.product(targets, repeat=units))
    return [(target,) * units for target in targets]


def number_of_combinations(targets: Sequence[float], units: int) -> int:
    """How many combinations by unit there are."""
    return len(targets) ** units


def level_of(confidence: float, tries: int) -> float:
    """The level of the statement on one set of targets, so that all of them hold at the confidence."""
    return (1 - confidence) / tries


def is_exponential(scenario: Scenario) -> bool:
    """Whether a scenario is its own exponential counterpart."""
    mine, other = (
        scenario_hash(lower_network(one), plan_intake(one)) for one in (scenario, scenario.exponential())
    )
    return mine == other


@dataclass(frozen=True)
class Ruler:
    """What a loss is measured by.

    level: of one statement, on one set of targets. tolerance: regret of an exact equilibrium.
    """

    delta: Delta
    level: float
    confidence: float
    tolerance: float


def losses_of(filled: Filled, targets: Targets, weights: Sequence[float | None], ruler: Ruler) -> list[Loss]:
    """The loss at one set of targets in one network, for each welfare: a transfer weight, or None for the file's."""
    scenario = filled.network.scenario
    table = filled.table(dict(zip(scenario.unit_names, targets, strict=True)), ruler.confidence)
    reach = highest_utilisation(filled, ruler.level)
    beyond = tuple(
        name
        for name, target, most in zip(scenario.unit_names, targets, reach, strict=True)
        if most < target - ROUNDING
    )
    found = pure_equilibria(table.payoffs, table.goal.sense, tolerance=ruler.tolerance)
    mask = _possible(table, found, ruler.level, scenario.run.seed)
    return [
        _loss(filled, table if weight is None else with_weight(table, weight), targets, found, mask, beyond, ruler)
        for weight in weights
    ]  # fmt: skip


def _possible(table: PayoffTable, found: Sequence[Profile], level: float, seed: int) -> np.ndarray:
    """The profiles that may be equilibria, at half the level; the equilibria themselves where exact."""
    if table.replicates is None:
        mask = np.zeros(table.profiles.shape, bool)
        for profile in found:
            mask[profile] = True
        return mask
    return possible(evidence_of(table), level / 2, np.random.default_rng([seed, len(table.replicates)])).mask


def _loss(
    filled: Filled, table: PayoffTable, targets: Targets, found: Sequence[Profile], mask: np.ndarray,
    beyond: tuple[str, ...], ruler: Ruler,
) -> Loss:  # fmt: skip
    scenario, sense = filled.network.scenario, table.welfare_goal.sense
    listed = [tuple(map(int, profile)) for profile in np.argwhere(mask)]
    cost = cost_of_selfishness(table.welfare, sense, listed)
    point = cost_of_selfishness(table.welfare, sense, found).lost_per_year
    lost = _banded(table, point, mask, ruler.level, scenario.run.seed)
    places = [None if one is None else _place(table, one) for one in (cost.worst, cost.optimum[0])]
    return Loss(
        targets, filled.network.setting.demand, filled.network.method, len(listed), lost,
        ruler.delta.at(scenario), beyond, places[0], places[1],
    )  # fmt: skip


def _banded(table: PayoffTable, point: Estimate, mask: np.ndarray, level: float, seed: int) -> Estimate:
    if not mask.any():
        return Estimate(None, reason=NONE_TO_SPEAK_OF)
    if table.welfare_replicates is None:
        return Estimate(point.mean, point.mean, point.mean)
    worth = absolute_worth(table.welfare_replicates, table.welfare_goal.sense, degrees=table.degrees)
    return difference_band(point, worth, mask, level, np.random.default_rng([seed, 11]))


def _place(table: PayoffTable, profile: Profile) -> Place:
    cell = int(np.ravel_multi_index(profile, table.profiles.shape))
    return place_at(table.outcomes, cell, table.profiles.thresholds(profile))


def highest_utilisation(filled: Filled, level: float) -> np.ndarray:
    """The utilisation that some profile brings each unit to, (units,): exact, or a lower limit at the level."""
    if filled.cells is not None:
        return np.array([[unit["utilisation"] for unit in cell] for cell in filled.cells]).max(axis=0)
    assert filled.sums is not None
    values = influence(filled.sums["occupied_days"], filled.sums["bed_days"])
    values = values if filled.controls is None else filled.controls.adjust(values)
    n, cells = values.shape[:2]
    degrees = n - 1 if filled.controls is None else filled.controls.degrees
    error = values.std(axis=0, ddof=1) / np.sqrt(n)
    return (values.mean(axis=0) - t_quantile(1 - level / cells, degrees) * error).max(axis=0)


# ---- the answer ----


@dataclass(frozen=True)
class Answer:
    """Which targets hold at every demand. lowest: none of those that hold is lower in every unit; by mean, weighted by
    beds. reason: why there is none. not_above: targets no lower than the first of these at which it does not hold."""

    lowest: tuple[Targets, ...]
    reason: str | None = None
    not_above: tuple[Targets, ...] = ()


def answer_of(losses: Sequence[Loss], beds: Sequence[int]) -> Answer:
    """The lowest targets that hold at every demand of the losses."""
    by_targets: dict[Targets, list[Loss]] = {}
    for loss in losses:
        by_targets.setdefault(loss.targets, []).append(loss)
    holding = [targets for targets, mine in by_targets.items() if all(loss.holds for loss in mine)]
    minimal = [one for one in holding if not any(_is_lower(other, one) for other in holding)]
    if not minimal:
        return Answer((), _why_none(by_targets))
    weights = np.asarray(beds, float) / np.sum(beds)
    ranked = tuple(sorted(minimal, key=lambda one: (float(weights @ np.array(one)), one)))
    failing = (targets for targets in by_targets if targets not in holding and _is_lower(ranked[0], targets))
    return Answer(ranked, not_above=tuple(failing))


def _is_lower(one: Targets, other: Targets) -> bool:
    return one != other and all(mine <= theirs for mine, theirs in zip(one, other, strict=True))


def _why_none(by_targets: Mapping[Targets, Sequence[Loss]]) -> str:
    near = [mine for mine in by_targets.values() if all(loss.is_near for loss in mine)]
    if near:
        return (
            "every target at which all possible equilibria are within delta is out of some unit's reach at some "
            "demand: no thresholds bring it that full, so as a target it only says never to close early"
        )
    exact = all(loss.method == EXACT for mine in by_targets.values() for loss in mine)
    return "at no target tried are all equilibria within delta at every demand" + (
        "" if exact else ", as far as the replications show"
    )


@dataclass(frozen=True)
class Advice:
    """The advice at one weight of a transfer."""

    weight: float
    answer: Answer


def turning_of(advice: Sequence[Advice]) -> Advice | None:
    """The first advice that differs from that at the lowest weight."""
    return next((one for one in advice[1:] if one.answer.lowest != advice[0].answer.lowest), None)


@dataclass(frozen=True)
class Busiest:
    """The unit that is fullest where nobody closes early, at the highest demand."""

    unit: str
    utilisation: float
    demand: float


def busiest_of(filled: Sequence[Filled]) -> Busiest | None:
    """The busiest unit where every unit has its highest closure threshold; None where not all go up to their beds."""
    last = max(filled, key=lambda one: one.network.setting.demand)
    profiles, cell = last.network.profiles, _nobody_closes(last)
    if cell is None:
        return None
    table = last.table(None, 0.95)
    utilisation = table.outcomes.utilisation[cell]
    place = int(np.argmax(utilisation))
    return Busiest(profiles.units[place], float(utilisation[place]), last.network.setting.demand)


def _nobody_closes(filled: Filled) -> int | None:
    """The cell in which every unit closes only when full."""
    profiles = filled.network.profiles
    beds = {unit.name: unit.beds for unit in filled.network.scenario.units}
    shape = profiles.shape
    places = []
    for mine in profiles.strategies:
        open_ = [at for at, one in enumerate(mine) if _is_open(one.choices, beds)]
        if not open_:
            return None
        places.append(open_[0])
    if dict(profiles.closures) != {unit: beds[unit] for unit, _ in profiles.closures}:
        return None
    return int(np.ravel_multi_index(places, shape))


def _is_open(choices: Sequence[tuple[str, str, Any]], beds: Mapping[str, int]) -> bool:
    thresholds = ("closure_threshold", "incoming_threshold")
    return all(value == beds[unit] for unit, field, value in choices if field in thresholds)


@dataclass(frozen=True)
class Row:
    """One way of taking the stays (as in the file, or exponential): everything that was found for it.

    losses: by the file's welfare, targets slowest. advice: over the weights of a transfer.
    """

    stays: str
    filled: tuple[Filled, ...]
    losses: tuple[Loss, ...]
    answer: Answer
    advice: tuple[Advice, ...]
    busiest: Busiest | None

    @property
    def welfare(self) -> Welfare:
        """The file's welfare."""
        from analysis.goals import welfare_of

        return welfare_of(self.filled[0].network.scenario)


def tried(
    filled: Sequence[Filled], targets: Sequence[Targets], weights: Sequence[float], ruler: Ruler
) -> Iterator[list[Loss]]:
    """Losses of every set of targets in every network, by the file's welfare and then by each weight."""
    for one in targets:
        for network in filled:
            yield losses_of(network, one, (None, *weights), ruler)


def whole(losses: Sequence[Sequence[Loss]], networks: int) -> list[Sequence[Loss]]:
    """Those of whole sets of targets: an interruption may have left the last one at some demands only."""
    return list(losses[: len(losses) - len(losses) % networks])


def row_of(
    stays: str, filled: Sequence[Filled], losses: Sequence[Sequence[Loss]], weights: Sequence[float]
) -> Row:
    """The row from what `tried` gave, whole sets of targets only."""
    beds = [unit.beds for unit in filled[0].network.scenario.units]
    columns = list(zip(*losses, strict=True))
    advice = [
        Advice(weight, answer_of(mine, beds)) for weight, mine in zip(weights, columns[1:], strict=True)
    ]
    return Row(
        stays,
        tuple(filled),
        tuple(columns[0]),
        answer_of(columns[0], beds),
        tuple(advice),
        busiest_of(filled),
    )
