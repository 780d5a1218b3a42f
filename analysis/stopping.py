"""When to stop: replications until every named measure is known to a given relative precision.

Source: Law and Kelton, Simulation Modeling and Analysis (sequential procedure for a relative error; from memory). A
half-width of at most g / (1 + g) of the estimate keeps the relative error of the estimate within g, at the interval's
confidence. The first look comes after 20 replications: earlier ones stop too soon, by the luck of a small spread, and
the intervals then cover too rarely. Later looks come where the spread so far says that the aim may be met, at most
doubling, so that they are few; where they lie depends on the runs alone.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.confidence import Estimate
from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES, Measure, network_sums, unit_sums
from analysis.simulation import estimate_measure, of_unit
from sim.record import Record
from sim.scenario import Scenario

FIRST_LOOK = 20
DEFAULT_MEASURES = ("throughput_per_day", "utilisation", "turned_away_per_day")
MOST_REPLICATIONS = 10_000
LEAST_GROWTH = 0.1
NETWORK = "network"
NOTHING_YET = "it is 0 in every replication, and 0 has no relative precision"

_NETWORK = {measure.name: measure for measure in NETWORK_MEASURES}
_UNIT = {measure.name: measure for measure in UNIT_MEASURES}
MEASURES = tuple(dict.fromkeys((*_NETWORK, *_UNIT)))


@dataclass(frozen=True)
class Aim:
    """What is to be known, and how well.

    relative: the largest relative error, such as 0.01. where: (place, measure) pairs, a place a unit or NETWORK.
    first, most: replications, of the first look and at which to stop in any case.
    """

    relative: float
    where: tuple[tuple[str, str], ...]
    most: int = MOST_REPLICATIONS
    first: int = FIRST_LOOK

    @property
    def target(self) -> float:
        """The half-width aimed at, relative to the estimate: g / (1 + g)."""
        return self.relative / (1 + self.relative)


def places_of(name: str, scenario: Scenario) -> tuple[tuple[str, str], ...]:
    """What a name stands for: `UNIT=MEASURE` is that unit's, a bare measure the network's, else every unit's.

    KeyError with the unknown measure or unit.
    """
    unit, given, measure = name.rpartition("=")
    if given:
        if unit not in scenario.unit_names:
            raise KeyError(unit)
        return ((unit, _known(measure, _UNIT)),)
    if name in _NETWORK:
        return ((NETWORK, name),)
    return tuple((one, _known(name, _UNIT)) for one in scenario.unit_names)


def _known(measure: str, measures: dict[str, Measure]) -> str:
    if measure not in measures:
        raise KeyError(measure)
    return measure


@dataclass(frozen=True)
class Precision:
    """How well one measure is known.

    relative: half-width over the estimate; None, with a reason, where there is none. reached: whether that is what
    was aimed at; None for a measure that is 0 throughout, which nothing waits for.
    """

    where: str
    measure: str
    mean: float | None
    half_width: float | None
    relative: float | None
    reached: bool | None
    reason: str | None = None

    def to_dict(self) -> dict[str, Any]:
        """Plain values; the reason only where it is needed."""
        plain = dict(vars(self))
        return plain if self.reason is not None else {k: v for k, v in plain.items() if k != "reason"}


def precision_of(where: str, measure: str, estimate: Estimate, target: float) -> Precision:
    """An estimate's precision, held against the target."""
    if estimate.mean is None or estimate.low is None:
        return Precision(where, measure, estimate.mean, None, None, False, estimate.reason)
    half = (estimate.high - estimate.low) / 2
    if estimate.mean == 0:
        return Precision(where, measure, 0.0, half, None, None, NOTHING_YET)
    relative = half / abs(estimate.mean)
    return Precision(where, measure, estimate.mean, half, relative, relative <= target)


def precisions(records: Sequence[Record], scenario: Scenario, aim: Aim) -> list[Precision]:
    """The precision of everything aimed at, from the records of one policy, at least one."""
    beds = np.array([unit.beds for unit in scenario.units], float)
    sums = unit_sums(records, beds, scenario.run.measured_days)
    whole, confidence = network_sums(sums), scenario.run.confidence

    def of(where: str, measure: str) -> Estimate:
        if where == NETWORK:
            return estimate_measure(_NETWORK[measure], whole, confidence)
        return estimate_measure(_UNIT[measure], of_unit(sums, scenario.place_of(where)), confidence)

    return [precision_of(where, measure, of(where, measure), aim.target) for where, measure in aim.where]


def next_look(done: int, relatives: Sequence[float], aim: Aim) -> int | None:
    """Replications at the next look; None where the aim is met or no more are allowed.

    done: replications of this look. relatives: relative half-widths; one that cannot be told counts as inf.
    """
    widest = max(relatives, default=0.0)
    if widest <= aim.target or done >= aim.most:
        return None
    least = done + math.ceil(LEAST_GROWTH * done)
    needed = 2 * done if math.isinf(widest) else math.ceil(min(done * (widest / aim.target) ** 2, 2 * done))
    return min(aim.most, max(least, needed))


def next_size(done: int, found: Sequence[Precision], aim: Aim) -> int | None:
    """`next_look` of measures; those that are 0 throughout are not waited for."""
    return next_look(done, [_width(one) for one in found if one.reached is not None], aim)


def _width(one: Precision) -> float:
    return math.inf if one.relative is None else one.relative


def precision_document(found: Sequence[Precision], aim: Aim, *, interrupted: bool) -> dict[str, Any]:
    """What a result says of its precision: the aim, what ended the run, and each measure."""
    met = not interrupted and all(one.reached is not False for one in found)
    ended = "interrupt" if interrupted else "precision" if met else "most_replications"
    return {
        "relative": aim.relative, "target": aim.target, "first_look": aim.first, "most_replications": aim.most,
        "reached": met, "ended_by": ended, "measures": [one.to_dict() for one in found],
    }  # fmt: skip
