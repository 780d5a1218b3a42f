"""What goals take from the sums of replications: ratios of means, their intervals, squared distances by period."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from analysis.confidence import critical_value


def ratio(total: np.ndarray, base: np.ndarray) -> np.ndarray:
    """Total over base; 0 where the base is 0 (no bed was ever staffed)."""
    return np.divide(total, base, out=np.zeros(np.shape(total)), where=base > 0)


def influence(total: np.ndarray, base: np.ndarray) -> np.ndarray:
    """Values by replication whose mean is the ratio of the means, and whose spread is its error (delta method).

    total, base: (replications, ...). Source: Law, Simulation Modeling and Analysis (ratio estimators; from memory).
    """
    point = ratio(total.sum(axis=0), base.sum(axis=0))
    return point + (total - point * base) / np.maximum(base.mean(axis=0), np.finfo(float).tiny)


def t_interval(values: np.ndarray, confidence: float) -> tuple[np.ndarray, np.ndarray]:
    """Student's interval of the mean over replications, (replications, ...); NaN from one replication."""
    n, mean = len(values), values.mean(axis=0)
    if n < 2:
        return np.full_like(mean, np.nan), np.full_like(mean, np.nan)
    half = critical_value(confidence, n - 1) * values.std(axis=0, ddof=1) / np.sqrt(n)
    return mean - half, mean + half


def squared_distances(sums: Mapping[str, np.ndarray], targets: np.ndarray, judged_days: float) -> np.ndarray:
    """Mean over whole judged periods of (utilisation - target)^2, (replications, cells, units).

    targets: (units,). judged_days: length of a period; what is left of the window is not judged.
    """
    whole = int(round(sums["days"].flat[0] / judged_days, 9))
    periods = ratio(sums["period_occupied_days"][:, :, :whole], sums["period_bed_days"][:, :, :whole])
    return np.square(periods - targets).mean(axis=2)
