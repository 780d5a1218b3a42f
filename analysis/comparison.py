"""Policies side by side on common intakes: paired differences with bands that hold for all of them at once.

Bands: the largest t over every pair and measure (`analysis.simultaneous`), below 40 replications Bonferroni. Which
could be best: multiple comparisons with the best in Edwards and Hsu's form for unequal and correlated errors (Edwards
and Hsu 1983, "Multiple comparisons with the best treatment"; Hsu 1984; both from memory), here with a max-t value a
candidate.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from analysis.confidence import Estimate, critical_value, t_quantile
from analysis.goals import Welfare, welfare_of
from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES, Measure, Sums, network_sums, unit_sums
from analysis.named_policies import Case
from analysis.payoffs import TableSums
from analysis.simulation import of_unit
from analysis.simultaneous import critical_max_t, studentise
from sim.replicate import Failure, Run
from sim.scenario import Policy, Scenario

NETWORK = "network"
SHOWN_OF_NETWORK = ("throughput_per_day", "transfers_per_day", "turned_away_per_day")
SHOWN_OF_UNIT = (
    "utilisation", "closed_with_free_bed_fraction", "diverted_out_per_day", "turned_away_per_day"
)  # fmt: skip
TELLING = 10  # replications that must differ before a difference that is mostly 0 is judged
ENOUGH_FOR_MAX_T = 40  # replications; on a small network max-t covered .90 at 10, .93 at 20 of a promised .95
TOLD_APART, NOT_TOLD_APART = "told apart", "cannot be told apart"


@dataclass(frozen=True)
class Group:
    """Cases of one network: they share intakes and can be run together. places: among all cases."""

    scenario: Scenario
    places: tuple[int, ...]
    policies: tuple[Policy, ...]


def grouped(cases: Sequence[Case]) -> list[Group]:
    """The cases by network, in order of first use."""
    found: list[tuple[Scenario, list[int]]] = []
    for place, case in enumerate(cases):
        for scenario, places in found:
            if scenario == case.scenario:
                places.append(place)
                break
        else:
            found.append((case.scenario, [place]))
    return [
        Group(scenario, tuple(places), tuple(cases[place].policy for place in places))
        for scenario, places in found
    ]


class PairedRuns:
    """The sums of every run, filled as they arrive; only replications that every case has are compared.

    levels: whether the time at each number of occupied beds is kept too, which takes several times the memory.
    """

    def __init__(self, cases: Sequence[Case], replications: int, *, levels: bool = False) -> None:
        self._levels: dict[tuple[int, int], np.ndarray] | None = {} if levels else None
        self.groups = grouped(cases)
        self._cases = cases
        self._sums = [TableSums(one.scenario, len(one.places), replications) for one in self.groups]

    def taker(self, group: int) -> Callable[[list[Run] | Failure], int]:
        """What takes the replies of one group's runs."""
        places, table = self.groups[group].places, self._sums[group]

        def take(reply: list[Run] | Failure) -> int:
            if self._levels is not None and not isinstance(reply, Failure):
                for run in reply:
                    self._levels[places[run.cell], run.replication] = run.record.occupancy_days.sum(axis=0)
            return table.add(reply)

        return take

    @property
    def complete(self) -> list[int]:
        """The replications that every case has."""
        return sorted(set.intersection(*({*one.complete.tolist()} for one in self._sums)))

    def sums(self) -> list[Sums]:
        """Each case's sums over the complete replications, (replications, units)."""
        found: list[Sums] = [{} for _ in self._cases]
        for group, table in zip(self.groups, self._sums, strict=True):
            kept = np.isin(table.complete, self.complete)
            whole = {name: values[kept] for name, values in table.sums().items()}
            for column, place in enumerate(group.places):
                found[place] = {name: values[:, column] for name, values in whole.items()}
                if self._levels is not None:
                    days = [self._levels[place, replication] for replication in self.complete]
                    found[place]["occupancy_days"] = np.stack(days)
        return found

    def hashes(self) -> list[str]:
        """The record hashes, case by case, by replication."""
        return [
            table.record_hashes[address] for table in self._sums for address in sorted(table.record_hashes)
        ]


def welfare_a_day(welfare: Welfare, sums: Sums) -> np.ndarray:
    """The welfare a day of each replication, larger better whatever its sense, (replications,)."""
    admitted, away, moved = (
        (sums[name] / sums["days"]).sum(axis=-1) for name in ("admitted", "turned_away", "diverted_out")
    )
    worth = welfare.value(admitted, away, moved)
    return worth if welfare.sense == "gain" else -worth


class WelfareRuns:
    """Welfare by replication and case, larger better; NaN where there is no run (yet)."""

    def __init__(self, cases: Sequence[Case], replications: int) -> None:
        self.values = np.full((replications, len(cases)), np.nan)

    def paired(self, places: Sequence[int]) -> np.ndarray:
        """The replications that each of these cases has, (replications, cases); of the others whatever is there."""
        return self.values[~np.isnan(self.values[:, list(places)]).any(axis=1)]

    def start_from(self, replications: Sequence[int], values: np.ndarray) -> None:
        """The replications that are there already, by number."""
        self.values[list(replications)] = values

    def taker(self, group: Group) -> Callable[[list[Run] | Failure], None]:
        """What takes the replies of one group's runs."""
        scenario, welfare = group.scenario, welfare_of(group.scenario)
        beds = np.array([unit.beds for unit in scenario.units], float)

        def take(reply: list[Run] | Failure) -> None:
            if not isinstance(reply, Failure):
                sums = unit_sums([run.record for run in reply], beds, scenario.run.measured_days)
                for run, worth in zip(reply, welfare_a_day(welfare, sums), strict=True):
                    self.values[run.replication, group.places[run.cell]] = worth

        return take


# ---- differences ----


@dataclass(frozen=True)
class Column:
    """One number that policies are compared by: a measure of a unit (or of the network)."""

    where: str
    measure: Measure


def columns_of(scenario: Scenario) -> list[Column]:
    """What is compared: the network's measures, then each unit's."""
    of_network = [Column(NETWORK, one) for one in NETWORK_MEASURES if one.name in SHOWN_OF_NETWORK]
    of_units = [
        Column(name, one)
        for name in scenario.unit_names
        for one in UNIT_MEASURES
        if one.name in SHOWN_OF_UNIT
    ]
    return of_network + of_units


def column_values(columns: Sequence[Column], scenario: Scenario, sums: Sums) -> np.ndarray:
    """Each column by replication, (replications, columns); of a ratio its linear part (delta method)."""
    whole = network_sums(sums)
    parts = {NETWORK: whole} | {name: of_unit(sums, place) for place, name in enumerate(scenario.unit_names)}
    return np.column_stack([_linear(one.measure, parts[one.where]) for one in columns])


def _linear(measure: Measure, sums: Sums) -> np.ndarray:
    totals, bases = sums[measure.total], sums[measure.base]
    if bases.sum() <= 0:
        return np.zeros(len(totals))
    ratio = totals.sum() / bases.sum()
    return ratio + (totals - ratio * bases) / bases.mean()


@dataclass(frozen=True)
class Difference:
    """One policy less another, in one column. estimate: with the simultaneous band, where there is one."""

    policy: str
    against: str
    column: Column
    estimate: Estimate

    @property
    def verdict(self) -> str:
        """Whether the band leaves 0 out."""
        low, high = self.estimate.low, self.estimate.high
        told = low is not None and high is not None and not low <= 0 <= high
        return TOLD_APART if told else NOT_TOLD_APART


@dataclass(frozen=True)
class Comparison:
    """Policies side by side. values: (replications, policies, columns). welfare: a day, larger better,
    (replications, policies). critical: the largest t that chance gives, at the confidence. differences: every
    later policy against every earlier one."""

    cases: tuple[Case, ...]
    columns: tuple[Column, ...]
    values: np.ndarray
    welfare: np.ndarray
    confidence: float
    critical: float
    differences: tuple[Difference, ...]

    @property
    def names(self) -> list[str]:
        """The policies' names, the base first."""
        return [case.name for case in self.cases]

    def difference(self, policy: str, against: str, where: str, measure: str) -> Difference:
        """One difference by its names."""
        return self._by_names[policy, against, where, measure]

    @cached_property
    def _by_names(self) -> dict[tuple[str, str, str, str], Difference]:
        return {
            (one.policy, one.against, one.column.where, one.column.measure.name): one
            for one in self.differences
        }


def compare(
    cases: Sequence[Case], sums: Sequence[Sums], confidence: float, rng: np.random.Generator
) -> Comparison:
    """Compares policies run on common intakes, at least two replications. sums: of each case."""
    columns = columns_of(cases[0].scenario)
    values = np.stack(
        [column_values(columns, case.scenario, own) for case, own in zip(cases, sums, strict=True)], axis=1
    )
    welfare = welfare_of(cases[0].scenario)
    worth = np.column_stack([welfare_a_day(welfare, own) for own in sums])
    critical, differences = _differences([case.name for case in cases], columns, values, confidence, rng)
    return Comparison(
        tuple(cases), tuple(columns), values, worth, confidence, critical, tuple(differences)
    )  # fmt: skip


def _differences(
    names: Sequence[str], columns: Sequence[Column], values: np.ndarray, confidence: float,
    rng: np.random.Generator,
) -> tuple[float, list[Difference]]:  # fmt: skip
    pairs = list(itertools.combinations(range(len(names)), 2))
    if not pairs:
        return 0.0, []
    paired = np.concatenate([values[:, later] - values[:, earlier] for earlier, later in pairs], axis=1)
    critical, estimates = banded(paired, confidence, rng)
    labels = ((names[later], names[earlier], column) for earlier, later in pairs for column in columns)
    return critical, [Difference(*label, estimate) for label, estimate in zip(labels, estimates, strict=True)]


def banded(paired: np.ndarray, confidence: float, rng: np.random.Generator) -> tuple[float, list[Estimate]]:
    """The critical value and the band of each paired difference, (replications, differences).

    Differences that are alike in every replication, or 0 in most and not 0 in fewer than ten, get no band: a rare
    difference is not normal, and no spread is no proof of none.
    """
    parts = studentise(paired)
    counts = np.count_nonzero(paired, axis=0)
    rare = is_rare(paired) | is_constant(paired)
    critical = _critical(np.where(rare, 0.0, parts.scores), confidence, rng)
    half = critical * parts.error
    return critical, [
        _no_band(mean, count, len(paired)) if scarce else Estimate(mean, mean - h, mean + h)
        for mean, h, count, scarce in zip(
            parts.mean.tolist(), half.tolist(), counts.tolist(), rare.tolist(), strict=True
        )
    ]


def _critical(scores: np.ndarray, confidence: float, rng: np.random.Generator) -> float:
    """By max-t; with few replications, whose correlations tell little, by Bonferroni over what varies."""
    if len(scores) >= ENOUGH_FOR_MAX_T:
        return critical_max_t(scores, 1 - confidence, rng)
    varying = np.count_nonzero(scores.any(axis=0))
    return critical_value(confidence, len(scores) - 1, comparisons=max(1, varying))


def _critical_one_sided(scores: np.ndarray, confidence: float, rng: np.random.Generator) -> float:
    """As `_critical`, for limits on one side."""
    if len(scores) >= ENOUGH_FOR_MAX_T:
        return critical_max_t(scores, 1 - confidence, rng, two_sided=False)
    varying = np.count_nonzero(scores.any(axis=0))
    return float(t_quantile(1 - (1 - confidence) / max(1, varying), len(scores) - 1))


def is_constant(paired: np.ndarray) -> np.ndarray:
    """Which differences are alike in every replication but for rounding, (differences,): no spread is no proof."""
    return np.ptp(paired, axis=0) <= 1e-12 * np.abs(paired).max(axis=0, initial=0.0)


def is_rare(paired: np.ndarray) -> np.ndarray:
    """Which differences are 0 in most replications and not 0 in fewer than ten, (differences,)."""
    counts = np.count_nonzero(paired, axis=0)
    return (counts < TELLING) & (counts < len(paired) / 2)


def _no_band(mean: float, count: int, replications: int) -> Estimate:
    if count == 0:
        return Estimate(mean, reason=f"the same in each of {replications} replications")
    if count == replications:
        return Estimate(mean, reason=f"differs by as much in each of {replications} replications: no band")
    return Estimate(mean, reason=f"differs in {count} of {replications} replications only: no band")


# ---- which could be best ----


@dataclass(frozen=True)
class Chance:
    """Whether a policy could be the best. ahead: its welfare less the best other's, a day, larger better."""

    policy: str
    could_be_best: bool
    ahead: Estimate


def could_be_best(
    names: Sequence[str], welfare: np.ndarray, confidence: float, rng: np.random.Generator
) -> list[Chance]:
    """Multiple comparisons with the best: the truly best is among those that could be, at the confidence.

    welfare: paired, larger better, (replications, policies). Each candidate is compared with all others by
    one-sided max-t limits of its own. A policy with no limit (see `banded`) excludes nobody.
    """
    if len(names) == 1:
        return [Chance(names[0], True, Estimate(None, reason="there is no other policy"))]
    sides = [_against_others(welfare, place, confidence, rng) for place in range(len(names))]
    highs = [max(0.0, float((mean + half).min())) for mean, half in sides]
    could = [bool((mean + half).min() >= 0) for mean, half in sides]
    lows = _lows(welfare, sides, could)
    return [
        Chance(name, can, _ahead(mean, low, high))
        for name, can, (mean, _), low, high in zip(names, could, sides, lows, highs, strict=True)
    ]


def _against_others(
    welfare: np.ndarray, place: int, confidence: float, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """The policy less each other, means and half widths of one-sided limits, (others,)."""
    paired = welfare[:, [place]] - np.delete(welfare, place, axis=1)
    parts, counts = studentise(paired), np.count_nonzero(paired, axis=0)
    rare = (is_rare(paired) | is_constant(paired)) & (counts > 0)
    critical = _critical_one_sided(np.where(rare, 0.0, parts.scores), confidence, rng)
    return parts.mean, np.where(rare, np.inf, max(critical, 0.0) * parts.error)


def _lows(
    welfare: np.ndarray, sides: Sequence[tuple[np.ndarray, np.ndarray]], could: Sequence[bool]
) -> list[float]:
    """How far behind the best other each may be: by the limits of those that could be best."""
    policies = welfare.shape[1]
    return [
        0.0
        if [place for place in range(policies) if could[place]] == [own]
        else min(0.0, *(_less(sides[other], other, own) for other in range(policies) if other != own and could[other]))
        for own in range(policies)
    ]  # fmt: skip


def _less(side: tuple[np.ndarray, np.ndarray], other: int, own: int) -> float:
    """A lower limit of `own` less `other`, from what is known of `other` less the rest."""
    at = own if own < other else own - 1
    return float(-(side[0][at] + side[1][at]))


def _ahead(mean: np.ndarray, low: float, high: float) -> Estimate:
    point = float(mean.min())
    if not np.isfinite([low, high]).all():
        return Estimate(point, reason="the policies differ in too few replications")
    return Estimate(point, min(low, point), max(high, point))
