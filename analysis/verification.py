"""The simulation held against the exact chain, measure by measure, with a simultaneous criterion.

Every measure's mean over replications is compared with its exact value by Student's t, Bonferroni over all
measures tested, so that a correct engine fails with at most the stated false-alarm rate. Agreement is
verification of the program (it computes what the model says), not a statement about any real network.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.chain import ExactResult
from analysis.confidence import Estimate, critical_value, mean_estimate
from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES, network_sums, unit_sums
from analysis.simulation import estimate_measure, of_unit
from sim.errors import Fault, ScenarioError
from sim.record import Record
from sim.scenario import Scenario
from sim.scenario.describe import mean_stay_days

FALSE_ALARM_RATE = 0.01
LEAST_VISITS = 20
LEAST_REPLICATIONS = 5


@dataclass(frozen=True)
class Comparison:
    """One measure: its exact value, its simulated mean with simultaneous limits, and z = (mean - exact) / se.

    z is None, with a reason, where the measure was not tested, or where it has no spread and is not the exact value.
    """

    where: str
    measure: str
    exact: float | None
    mean: float | None
    low: float | None
    high: float | None
    z: float | None
    agrees: bool
    reason: str | None = None

    def to_dict(self) -> dict[str, Any]:
        """Plain values; the reason only where there is one."""
        plain = {key: value for key, value in vars(self).items() if key != "reason"}
        return plain if self.reason is None else plain | {"reason": self.reason}


@dataclass(frozen=True)
class Verification:
    """All comparisons. agrees: every tested measure holds. critical: the |z| beyond which one does not."""

    agrees: bool
    measures: tuple[Comparison, ...]
    false_alarm_rate: float
    critical: float
    replications: int

    def to_dict(self) -> dict[str, Any]:
        """The document of `verify`."""
        return {
            "agrees": self.agrees,
            "measures": [one.to_dict() for one in self.measures],
            "false_alarm_rate": self.false_alarm_rate,
            "confidence": 1 - self.false_alarm_rate,
            "critical_z": self.critical,
            "replications": self.replications,
        }


@dataclass(frozen=True)
class _Pair:
    """A measure before it is judged. visits: the independent occasions expected in all replications."""

    where: str
    measure: str
    exact: float | None
    estimate: Any  # (comparisons, confidence) -> Estimate
    visits: float


def verify(
    records: Sequence[Record],
    exact: ExactResult,
    scenario: Scenario,
    *,
    false_alarm_rate: float = FALSE_ALARM_RATE,
) -> Verification:
    """Compares the records of one policy, at least two replications, with the exact measures.

    Measures with fewer than 20 independent occasions expected are listed but not tested; occupancy levels
    are pooled until they have as many.
    """
    pairs = list(_pairs(records, exact, scenario))
    tested = sum(pair.exact is not None and pair.visits >= LEAST_VISITS for pair in pairs)
    confidence = 1 - false_alarm_rate
    critical = critical_value(confidence, len(records) - 1, comparisons=max(tested, 1))
    comparisons = tuple(_judge(pair, confidence, max(tested, 1), critical) for pair in pairs)
    agrees = all(one.agrees for one in comparisons)
    return Verification(agrees, comparisons, false_alarm_rate, critical, len(records))


def require_replications(scenario: Scenario) -> None:
    """ScenarioError where the run table asks for too few replications to judge a simulator by."""
    given = scenario.run.replications
    if given < LEAST_REPLICATIONS:
        rule, got = f"must be at least {LEAST_REPLICATIONS} to verify", f"got {given}"
        raise ScenarioError(
            [Fault(None, "run.replications", rule, got, "raise it, for example --replications 30")]
        )


def alike(
    records: Sequence[Record], exact: ExactResult, scenario: Scenario, confidence: float
) -> list[Estimate]:
    """The measures of `verify`, in its order, from records of a scenario that the chain does not answer.

    Pointwise intervals; nothing is held against anything.
    """
    return [pair.estimate(confidence, 1) for pair in _pairs(records, exact, scenario)]


def _pairs(records: Sequence[Record], exact: ExactResult, scenario: Scenario) -> Iterator[_Pair]:
    beds = np.array([unit.beds for unit in scenario.units], float)
    days = scenario.run.measured_days
    sums = unit_sums(records, beds, days)
    occasions = _Occasions(days * len(records), mean_stay_days(scenario))
    tree = exact.to_dict()
    for place, unit in enumerate(scenario.units):
        mine, values = of_unit(sums, place), tree["units"][unit.name]
        for measure in UNIT_MEASURES:
            value = values[measure.name]
            yield _pair(
                unit.name,
                measure,
                value,
                mine,
                occasions.of(measure.name, value, values.get("arrivals_per_day")),
            )
        yield from _levels(
            unit.name,
            sums["occupancy_days"][:, place, : unit.beds + 1] / days,
            values["occupancy"],
            occasions,
        )
    whole = network_sums(sums)
    for measure in NETWORK_MEASURES:
        value = tree["network"][measure.name]
        yield _pair("network", measure, value, whole, occasions.of(measure.name, value, None))


@dataclass(frozen=True)
class _Occasions:
    """Independent occasions expected: events for a rate, one a mean stay for a share of time."""

    days: float
    mean_stay: float

    def of(self, measure: str, value: float | None, arrivals_per_day: float | None) -> float:
        """Occasions behind a measure with this exact value; an exact 0 can always be tested."""
        if value is None:
            return 0.0
        if value == 0:
            return math.inf
        if measure.endswith("_per_day"):
            return value * self.days
        if measure.endswith("_share"):
            return value * (arrivals_per_day or 0.0) * self.days
        return self.of_time(value)

    def of_time(self, share: float) -> float:
        """Occasions of a state that holds for this share of the time."""
        return share * self.days / self.mean_stay


def _pair(where: str, measure: Any, exact: float | None, sums: Any, visits: float) -> _Pair:
    def estimate(confidence: float, comparisons: int) -> Estimate:
        return estimate_measure(measure, sums, confidence, comparisons=comparisons)

    return _Pair(where, measure.name, exact, estimate, visits)


def _levels(where: str, shares: np.ndarray, exact: Sequence[float], occasions: _Occasions) -> Iterator[_Pair]:
    """Occupancy, levels pooled with their neighbours until each pool has enough occasions."""
    for first, last in pools(exact, lambda share: occasions.of_time(share) >= LEAST_VISITS):
        name = f"occupancy {first}" if first == last else f"occupancy {first} to {last}"
        pooled = shares[:, first : last + 1].sum(axis=1)
        value = float(math.fsum(exact[first : last + 1]))

        def estimate(confidence: float, comparisons: int, pooled: np.ndarray = pooled) -> Estimate:
            return mean_estimate(pooled, confidence, comparisons=comparisons)

        yield _Pair(where, name, value, estimate, occasions.of_time(value))


def pools(shares: Sequence[float], enough: Any) -> list[tuple[int, int]]:
    """Ranges of neighbouring levels, each with enough; what is left over at the end joins the last range."""
    ranges: list[tuple[int, int]] = []
    first, held = 0, 0.0
    for level, share in enumerate(shares):
        held += share
        if enough(held):
            ranges.append((first, level))
            first, held = level + 1, 0.0
    last = len(shares) - 1
    if first <= last:
        start = ranges.pop()[0] if ranges else first
        ranges.append((start, last))
    return ranges


def _judge(pair: _Pair, confidence: float, comparisons: int, critical: float) -> Comparison:
    estimate = pair.estimate(confidence, comparisons)
    facts = (pair.where, pair.measure, pair.exact, estimate.mean, estimate.low, estimate.high)
    if pair.exact is None or estimate.mean is None:
        return Comparison(*facts, z=None, agrees=True, reason="no patients of its own, so no share")
    if pair.visits < LEAST_VISITS:
        return Comparison(
            *facts, z=None, agrees=True, reason=f"not tested: {pair.visits:.1f} occasions expected in all"
        )
    if estimate.low is None:
        return Comparison(*facts, z=None, agrees=True, reason=estimate.reason)
    off, half = estimate.mean - pair.exact, (estimate.high - estimate.low) / 2
    slack = 1e-9 * max(1.0, abs(pair.exact))  # rounding of time integrals
    if pair.exact == 0 and off > slack:  # however rare: chance does not explain the impossible
        return Comparison(*facts, z=None, agrees=False, reason="seen, although the chain says never")
    if half <= slack:
        return Comparison(*facts, z=0.0 if abs(off) <= slack else None, agrees=abs(off) <= slack,
                          reason=None if abs(off) <= slack else "no spread, and not the exact value")  # fmt: skip
    return Comparison(*facts, z=off / half * critical, agrees=abs(off) <= half)
