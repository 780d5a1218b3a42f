"""What one run measured: time integrals and counts over the measured window, nothing derived."""

from __future__ import annotations

from dataclasses import dataclass, fields
from functools import cached_property

import numpy as np

from sim.intake import hash_arrays

# The gate state of a unit, as bits: what `gate_days` counts time by.
OWN_CLOSED, INCOMING_CLOSED, FULL = 1, 2, 4
GATE_STATES = 8


@dataclass(frozen=True)
class Record:
    """One replication under one policy, all within the measured window.

    occupancy_days: days with n beds occupied, (periods, units, most beds + 1).
    gate_days: days in each gate state (bits OWN_CLOSED, INCOMING_CLOSED, FULL), (units, 8).
    arrived, turned_away: patients by home, (units,).
    diverted: transfers decided, by home and by unit, (units, units).
    admitted: beds occupied, by home and by treating unit, (units, units).
    on_road_at_start, on_road_at_end: beds reserved, by unit, (units,).
    staffed_days: days with n beds staffed, (periods, units, most beds + 1); None where all always are.
    """

    occupancy_days: np.ndarray
    gate_days: np.ndarray
    arrived: np.ndarray
    turned_away: np.ndarray
    diverted: np.ndarray
    admitted: np.ndarray
    on_road_at_start: np.ndarray
    on_road_at_end: np.ndarray
    staffed_days: np.ndarray | None = None

    @cached_property
    def hash(self) -> str:
        """SHA-256 over every array, names and shapes included."""
        return hash_arrays(self.arrays())

    def arrays(self) -> dict[str, np.ndarray]:
        """Every array by name; those of rules that are off are left out."""
        return {name: array for name in _NAMES if (array := getattr(self, name)) is not None}

    def faults(self, measured_days: float) -> list[str]:
        """Broken invariants in words; empty for a sound record."""
        broken = []
        admitted = self.admitted.sum()
        if self.arrived.sum() + self.on_road_at_start.sum() != (
            admitted + self.turned_away.sum() + self.on_road_at_end.sum()
        ):
            broken.append(
                "arrived + on the road at the start differs from admitted + turned away + on the road"
            )
        for name, array in self.arrays().items():
            if not name.endswith("_days"):
                continue
            days = array.sum(axis=tuple(axis for axis in range(array.ndim) if axis != array.ndim - 2))
            if not np.allclose(days, measured_days, rtol=1e-9, atol=1e-9):
                broken.append(f"{name.removesuffix('_days')} days do not add up to the measured days")
        if any(np.any(array < 0) for array in self.arrays().values()):
            broken.append("a count or a time is negative")
        if np.any(np.diagonal(self.diverted)):
            broken.append("a patient was diverted to the own home")
        return broken


_NAMES = tuple(field.name for field in fields(Record))


def hash_records(hashes: list[str]) -> str:
    """One hash over the hashes of several records, in the order given."""
    return hash_arrays({"records": np.frombuffer("".join(hashes).encode(), np.uint8)})
