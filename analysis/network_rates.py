"""Refusals and transfers of the whole network at a profile of a simulated game, and paired against another's."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from analysis.confidence import Estimate, mean_estimate
from analysis.equilibria import Profile
from analysis.payoffs import PayoffTable

LEFT_BEFORE = "the race had left one of the profiles before its last look"


def network_rates(table: PayoffTable, profile: Profile, confidence: float) -> dict[str, Any]:
    """Patients turned away and moved a day at a profile, `{}` where the table is exact.

    Each interval holds by itself. Plain values, as documents have them.
    """
    return {
        name: _estimate(values[(slice(None), *profile)], table, confidence).within(0.0, math.inf).to_dict()
        for name, values in _replicates(table).items()
    }


def rates_against(table: PayoffTable, profile: Profile, other: Profile, confidence: float) -> dict[str, Any]:
    """How many more a day are turned away and moved at a profile than at another, on the same patients."""
    return {
        name: _estimate(
            values[(slice(None), *profile)] - values[(slice(None), *other)], table, confidence
        ).to_dict()
        for name, values in _replicates(table).items()
    }


def _replicates(table: PayoffTable) -> dict[str, np.ndarray]:
    """Rates a day by replication, (replications, *shape), after control variates."""
    found = {
        "turned_away_per_day": table.turned_away_replicates,
        "transfers_per_day": table.transfers_replicates,
    }
    return {name: values for name, values in found.items() if values is not None}


def _estimate(values: np.ndarray, table: PayoffTable, confidence: float) -> Estimate:
    if np.isnan(values).any():
        return Estimate(None, reason=LEFT_BEFORE)
    return mean_estimate(values, confidence, degrees=table.degrees)
