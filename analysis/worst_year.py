"""A bad year: what is reached or passed in one year of ten, with an interval that assumes no distribution.

Source: order statistics as limits of a quantile (Thompson 1936, "On confidence ranges for the median and other
expectation distributions"; David and Nagaraja, Order Statistics; both from memory).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy.special import bdtr

from analysis.anarchy import DAYS_A_YEAR
from analysis.confidence import Estimate
from analysis.measures import Sums
from analysis.named_policies import Case
from sim.scenario import Scenario

ONE_IN = 10.0
SHARE = 1 - 1 / ONE_IN


def places(years: int, share: float, confidence: float) -> tuple[int | None, int | None]:
    """The order statistics (from 1) between which a quantile lies at `confidence`; None where years are too few.

    Each end errs with at most half of what the confidence leaves: P(the l-th value is above the quantile) is
    P(fewer than l of the years are at or below it), a binomial chance.
    """
    half = (1 - confidence) / 2
    at_most = bdtr(
        np.arange(years), years, share
    )  # P(no more than k of the years below), k = 0 ... years - 1
    low = int(np.searchsorted(at_most, half, side="right"))  # P(fewer than l) <= half for every l up to it
    high = int(np.searchsorted(at_most, 1 - half, side="left")) + 1  # P(fewer than u) >= 1 - half
    return (low or None), (high if high <= years else None)


def years_needed(share: float, confidence: float) -> int:
    """The fewest years that give the quantile an upper limit: the largest of them is one, share ** n at its risk."""
    return math.ceil(math.log((1 - confidence) / 2) / math.log(share))


def worst_year(values: np.ndarray, confidence: float, *, share: float = SHARE) -> Estimate:
    """The `share` quantile of independent years, (years,), by order statistics; mean stands for the point."""
    ordered, n = np.sort(np.asarray(values, float)), len(values)
    low, high = places(n, share, confidence)
    point = float(ordered[min(n - 1, math.ceil(n * share) - 1)])
    if low is None or high is None:
        needed = years_needed(share, confidence)
        reason = (
            f"{n} years are too few for an interval of one year in {1 / (1 - share):g}: {needed} are needed"
        )
        return Estimate(point, reason=reason)
    return Estimate(point, float(ordered[low - 1]), float(ordered[high - 1]))


@dataclass(frozen=True)
class BadYear:
    """A policy's bad year at one place. mean: a year, on average. bad: reached or passed one year in ten."""

    policy: str
    where: str
    measure: str
    mean: float
    bad: Estimate
    years: np.ndarray

    def to_dict(self) -> dict[str, Any]:
        """Plain values, patients a year."""
        named = {"policy": self.policy, "where": self.where, "measure": self.measure}
        return named | {"mean_year": self.mean, "bad_year": self.bad.to_dict()}


COUNTED = {"turned_away": "turned away", "diverted_out": "moved"}


def bad_years(
    names: Sequence[str], scenario: Scenario, sums: Sequence[Sums], confidence: float
) -> list[BadYear]:
    """Patients turned away and moved in a bad year, by policy, for the network and each home.

    sums: of each policy, over replications that measure a year each.
    """
    return [
        BadYear(name, where, reads, float(values.mean()), worst_year(values, confidence), values)
        for name, own in zip(names, sums, strict=True)
        for count, reads in COUNTED.items()
        for where, values in _by_place(scenario, own[count])
    ]


def _by_place(scenario: Scenario, counts: np.ndarray) -> list[tuple[str, np.ndarray]]:
    """The network's and each home's counts, (replications,) each."""
    return [("network", counts.sum(axis=1)), *zip(scenario.unit_names, counts.T, strict=True)]


def one_year_each(cases: Sequence[Case], years: int) -> list[Case]:
    """The same policies on runs that measure one year each, so many of them."""
    return [
        replace(case, scenario=case.scenario.with_run(measured_days=DAYS_A_YEAR, replications=years))
        for case in cases
    ]


def measures_a_year(scenario: Scenario) -> bool:
    """Whether a replication of the scenario measures one year, to a day."""
    return abs(scenario.run.measured_days - DAYS_A_YEAR) <= 1
