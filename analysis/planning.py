"""What a scenario's run length and replications will give: the intervals to expect, before anything runs.

The spread of a run's averages is taken from the exact chain of the exponential counterpart (`analysis.chain`);
runs are independent, so Student's interval over them follows. Another shape of stay changes it: in a unit that
never closes (M/G/infinity) the covariance at lag s is the arrival rate times the mean stay left beyond s, so the
variance is the arrival rate times the stay's second moment, (1 + cv^2) / 2 times that of exponential stays.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from analysis.chain import ChainTooLarge, Limits, refusals
from analysis.chain.phases import PhaseBook
from analysis.chain.variance import TimeAverage, asymptotic_variances
from analysis.confidence import critical_value
from sim.errors import RunError
from sim.scenario import Policy, Scenario
from sim.scenario.run import Run

QUICK = Limits(states=5_000, work=5e8)  # a second or two
PLANNED = ("utilisation", "full_fraction", "closed_fraction", "admissions_per_day", "turned_away_per_day")
MOST_REPLICATIONS = 1_000_000


@dataclass(frozen=True)
class Expected:
    """A measure's long-run mean, and the half-width to expect of its interval; None from one replication.

    replications_needed: for the half-width asked for; None where none was, or where a million would not do.
    """

    mean: float
    half_width: float | None
    replications_needed: int | None = None


@dataclass(frozen=True)
class Precision:
    """The intervals to expect.

    units: unit -> measure -> expectation; empty, with a reason, where the chain does not tell. half_width: the one
    asked for, of utilisation; None where none was. states: of the chain. memoryless: whether the scenario is its
    own exponential counterpart.
    """

    units: Mapping[str, Mapping[str, Expected]]
    half_width: float | None
    memoryless: bool
    states: int | None = None
    reason: str | None = None

    def to_dict(self) -> dict[str, Any]:
        """The tree of `check --json` at `precision`.

        `units`: unit -> measure -> `mean`, `half_width` and `replications_needed`; besides `half_width` (the one
        asked for), `memoryless`, `states`, `reason` and `basis`.
        """
        units = {name: {m: vars(one) for m, one in each.items()} for name, each in self.units.items()}
        return {**vars(self), "basis": "exponential counterpart", "units": units}


def _is_memoryless(scenario: Scenario, policy: Policy) -> bool:
    """Whether the scenario is its own exponential counterpart: within the chain's scope, every stay of one phase."""
    if refusals(scenario, policy):
        return False
    book = PhaseBook()
    return all(len(list(book.reached(book.starts(group.stay)))) == 1 for group in scenario.patients)


def expected_precision(scenario: Scenario, policy: Policy, *, half_width: float | None = None) -> Precision:
    """The intervals that the scenario's own replications, measured days and confidence will give.

    scenario, policy: the network and its rules. half_width: of each unit's utilisation, for which to count the
    replications needed. The variance of a run's average is the asymptotic one over the measured days, which holds
    for runs of many mean stays.
    """
    counterpart, memoryless = scenario.exponential(), _is_memoryless(scenario, policy)
    if reasons := refusals(counterpart, policy):
        return Precision({}, half_width, memoryless, reason="; ".join(reasons))
    try:
        found = asymptotic_variances(counterpart, policy, limits=QUICK)
    except (ChainTooLarge, RunError) as error:
        return Precision({}, half_width, memoryless, reason=str(error))
    run = scenario.run
    units = {
        name: {measure: _expected(each[measure], run, half_width if measure == "utilisation" else None)
               for measure in PLANNED}
        for name, each in found.units.items()
    }  # fmt: skip
    return Precision(units, half_width, memoryless, found.states)


def _expected(average: TimeAverage, run: Run, wanted: float | None) -> Expected:
    spread = math.sqrt(average.variance / run.measured_days)
    needed = None if wanted is None else replications_needed(spread, wanted, run.confidence)
    return Expected(average.mean, half_width_of(spread, run.replications, run.confidence), needed)


def half_width_of(spread: float, replications: int, confidence: float) -> float | None:
    """Half the width of Student's interval of a mean; None for one replication.

    spread: standard deviation of a run's average. replications: independent runs. confidence: of the interval.
    """
    if replications < 2:
        return None
    return critical_value(confidence, replications - 1) * spread / math.sqrt(replications)


def replications_needed(spread: float, half_width: float, confidence: float) -> int | None:
    """The least number of replications whose interval is expected to be within `half_width` of its mean.

    spread, confidence: as in `half_width_of`. Returns None where a million would not do. The half-width of a
    single study varies about its expectation, so somewhat more are needed to be sure of it.
    """
    low, high = 1, MOST_REPLICATIONS
    if half_width_of(spread, high, confidence) > half_width:
        return None
    while high - low > 1:  # it falls as replications rise: too few at `low`, enough at `high`
        middle = (low + high) // 2
        enough = half_width_of(spread, middle, confidence) <= half_width
        low, high = (low, middle) if enough else (middle, high)
    return high
