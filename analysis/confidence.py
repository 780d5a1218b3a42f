"""Point estimates with their intervals, from independent replications."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import stdtrit


@dataclass(frozen=True)
class Estimate:
    """A number with its interval; `low` and `high` are None, with a `reason`, where there is none."""

    mean: float | None
    low: float | None = None
    high: float | None = None
    reason: str | None = None

    def within(self, least: float, most: float) -> Estimate:
        """The same, its interval too, cut to what the number can be."""
        if self.low is None or self.high is None or self.mean is None:
            return self
        return Estimate(
            min(max(self.mean, least), most),
            min(max(self.low, least), most),
            max(min(self.high, most), least),
            self.reason,
        )

    def to_dict(self) -> dict[str, float | str | None]:
        """Plain values; the reason only where it is needed."""
        plain: dict[str, float | str | None] = {"mean": self.mean, "low": self.low, "high": self.high}
        return plain if self.reason is None else plain | {"reason": self.reason}


ONE_REPLICATION = "one replication gives no interval"
TIES_ON_FEW = "profiles tie in each of fewer than 10 replications, which is no proof that they are equal"


def t_quantile(probability: float | np.ndarray, degrees: int) -> float | np.ndarray:
    """Quantile of Student's t."""
    return stdtrit(degrees, probability)


def critical_value(confidence: float, degrees: int, *, comparisons: int = 1) -> float:
    """Two-sided critical value of Student's t, Bonferroni over `comparisons`."""
    return float(t_quantile(1 - (1 - confidence) / (2 * comparisons), degrees))


def mean_estimate(
    values: np.ndarray, confidence: float, *, comparisons: int = 1, degrees: int | None = None
) -> Estimate:
    """Mean of independent values, (replications,), with Student's interval.

    degrees: of freedom of the error (default: replications - 1).
    """
    values = np.asarray(values, float)
    return _estimate(float(values.mean()), values, confidence, comparisons, degrees)


def ratio_estimate(
    totals: np.ndarray, bases: np.ndarray, confidence: float, *, comparisons: int = 1
) -> Estimate:
    """Ratio of two means over replications, (replications,) each, with an interval by the delta method.

    The ratio of means estimates the long-run share; a mean of ratios would be biased. Source: Law, Simulation
    Modeling and Analysis (ratio estimators; from memory).
    """
    totals, bases = np.asarray(totals, float), np.asarray(bases, float)
    if bases.sum() <= 0:
        return Estimate(None, reason="nothing to take a share of")
    values = ratio_values(totals, bases)
    return _estimate(float(totals.sum() / bases.sum()), values, confidence, comparisons)


def ratio_values(totals: np.ndarray, bases: np.ndarray) -> np.ndarray:
    """Values by replication whose mean is the ratio of means and whose spread is its error (delta method)."""
    ratio = totals.sum() / bases.sum()
    return ratio + (totals - ratio * bases) / bases.mean()


def _estimate(
    point: float, values: np.ndarray, confidence: float, comparisons: int, degrees: int | None = None
) -> Estimate:
    """The interval around `point` from the spread of per-replication values."""
    if len(values) < 2:
        return Estimate(point, reason=ONE_REPLICATION)
    left = len(values) - 1 if degrees is None else degrees
    half = critical_value(confidence, left, comparisons=comparisons) * standard_error(values)
    return Estimate(point, point - half, point + half)


def standard_error(values: np.ndarray) -> float:
    """Standard error of the mean of independent values."""
    return float(values.std(ddof=1) / math.sqrt(len(values)))


def jackknife(point: np.ndarray, leave_one_out: np.ndarray) -> np.ndarray:
    """Pseudo-values of a statistic: (replications, ...) from its value and its values with one left out.

    Their mean estimates the statistic with less bias, their spread its error. Source: Tukey 1958, "Bias and
    confidence in not quite large samples" (from memory).
    """
    n = len(leave_one_out)
    return n * point - (n - 1) * leave_one_out
