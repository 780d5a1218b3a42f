"""The measures of a unit and of the network, defined once: each is a sum from the record over a base.

Rates are per day, shares run from 0 to 1. The base of most measures is a constant (days); staffed bed-time
and the number of arrivals may be random, so measures are ratios of two sums.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from sim.record import FULL, INCOMING_CLOSED, OWN_CLOSED, Record

Sums = dict[str, np.ndarray]


@dataclass(frozen=True)
class Measure:
    """A measure as `total / base`, both names of sums, and how it reads."""

    name: str
    total: str
    base: str
    reads: str
    by_home: bool = False

    @property
    def most(self) -> float:
        """What it can be at most: 1 for a share, no bound for a rate, a mean or a utilisation of beds out of use."""
        return 1.0 if self.name.endswith(("_fraction", "_share")) else math.inf


UNIT_MEASURES = (
    Measure("utilisation", "occupied_days", "bed_days", "utilisation"),
    Measure("mean_occupied", "occupied_days", "days", "mean occupied beds"),
    Measure("full_fraction", "full_days", "days", "time full"),
    Measure("closed_fraction", "closed_days", "days", "time closed"),
    Measure("closed_with_free_bed_fraction", "closed_free_days", "days", "time closed with a free bed"),
    Measure("incoming_closed_fraction", "incoming_closed_days", "days", "time closed to others"),
    Measure("arrivals_per_day", "arrived", "days", "arrivals a day", by_home=True),
    Measure("admissions_per_day", "admitted", "days", "admissions a day"),
    Measure("diverted_out_per_day", "diverted_out", "days", "diverted out a day", by_home=True),
    Measure("diverted_in_per_day", "diverted_in", "days", "diverted in a day"),
    Measure("turned_away_per_day", "turned_away", "days", "turned away a day", by_home=True),
    Measure("moved_share", "diverted_out", "arrived", "share moved", by_home=True),
    Measure("turned_away_share", "turned_away", "arrived", "share turned away", by_home=True),
)
NETWORK_MEASURES = (
    Measure("throughput_per_day", "admitted", "days", "patients treated a day"),
    Measure("transfers_per_day", "diverted_out", "days", "transfers a day"),
    Measure("turned_away_per_day", "turned_away", "days", "turned away a day"),
    Measure("arrivals_per_day", "arrived", "days", "arrivals a day"),
)

# Of one record, or of several side by side: by unit, whatever axes stand before.
_TOTALS: dict[str, Callable[[Record], np.ndarray]] = {
    "full_days": lambda record: _gate_days(record, lambda state: state & FULL),
    "closed_days": lambda record: _gate_days(record, lambda state: state & OWN_CLOSED),
    "closed_free_days": lambda record: _gate_days(
        record, lambda state: state & OWN_CLOSED and not state & FULL
    ),
    "incoming_closed_days": lambda record: _gate_days(record, lambda state: state & INCOMING_CLOSED),
    "arrived": lambda record: record.arrived,
    "admitted": lambda record: record.admitted.sum(axis=-2),
    "diverted_out": lambda record: record.diverted.sum(axis=-1),
    "diverted_in": lambda record: (
        record.admitted.sum(axis=-2) - np.diagonal(record.admitted, axis1=-2, axis2=-1)
    ),
    "turned_away": lambda record: record.turned_away,
}


def _gate_days(record: Record, counts: Callable[[int], int]) -> np.ndarray:
    states = [state for state in range(record.gate_days.shape[-1]) if counts(state)]
    return record.gate_days[..., states].sum(axis=-1)


def unit_sums(records: Sequence[Record], beds: np.ndarray, measured_days: float) -> Sums:
    """Every sum that a unit's measures need, per replication and unit: name -> (replications, units).

    beds: (units,), staffed where the record does not say otherwise. Besides: `occupancy_days` (replications,
    units, most beds + 1), and `period_occupied_days` and `period_bed_days` (replications, periods, units).
    """
    stacked = _side_by_side(records)
    sums: Sums = {name: total(stacked).astype(float) for name, total in _TOTALS.items()}
    occupancy = stacked.occupancy_days
    levels = np.arange(occupancy.shape[-1])
    sums["period_occupied_days"] = occupancy @ levels
    sums["occupancy_days"] = occupancy.sum(axis=1)
    sums["occupied_days"] = sums["occupancy_days"] @ levels
    sums["days"] = np.full(sums["arrived"].shape, measured_days)
    sums["period_bed_days"] = _bed_days(stacked, beds)
    if stacked.staffed_days is None:
        sums["bed_days"] = np.broadcast_to(beds * measured_days, sums["days"].shape).astype(float)
    else:
        sums["bed_days"] = sums["period_bed_days"].sum(axis=1)
    return sums


def _side_by_side(records: Sequence[Record]) -> Record:
    """All records as one, every array with one more axis in front."""
    columns = zip(*(record.arrays().values() for record in records), strict=True)
    stacked = (np.concatenate(column).reshape(len(records), *column[0].shape) for column in columns)
    return Record(**dict(zip(records[0].arrays(), stacked, strict=True)))


def _bed_days(record: Record, beds: np.ndarray) -> np.ndarray:
    """Staffed bed-time by period and unit, (..., periods, units)."""
    if record.staffed_days is None:
        return record.occupancy_days.sum(axis=-1) * beds
    return record.staffed_days @ np.arange(record.staffed_days.shape[-1])


def network_sums(sums: Sums) -> Sums:
    """The same sums over all units, (replications,); days are not added up."""
    return {name: sums[name].sum(axis=1) for name in _TOTALS} | {"days": sums["days"][:, 0]}


def combine(measure: Measure, sums: Sums) -> np.ndarray:
    """The measure of each replication; NaN where its base is 0."""
    base = sums[measure.base]
    return np.divide(sums[measure.total], base, out=np.full(base.shape, np.nan), where=base > 0)
