"""The intake: everything that chance decides about the patients of one replication, drawn before the run.

Streams are addressed, never consumed in turn: every (replication, group, purpose) has a Philox stream of its
own, so that adding a group or a purpose leaves every other draw as it was, and any replication can be had
alone on any machine (Salmon, Moraes, Dror and Shaw, "Parallel random numbers: as easy as 1, 2, 3", 2011, for
the generator). Arrivals are found by inversion of the cumulative rate.
"""

from __future__ import annotations

import csv
import hashlib
import unicodedata
from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields
from functools import cached_property, lru_cache
from pathlib import Path

import numpy as np

from sim.demand import arrival_times
from sim.lowering import GroupDraws, IntakePlan
from sim.rules import out_of_use
from sim.rules.out_of_use import Staffing
from sim.rules.soft_closure import GATE
from sim.rules.transfer import DELAY
from sim.wording import in_spreadsheet

# Purposes are numbered once for all; those of optional rules stand in their declarations (`sim/rules`).
ARRIVAL, STAY = 1, 2

UniformSource = Callable[[int], np.ndarray]


@dataclass(frozen=True)
class Intake:
    """The patients of one replication in order of arrival; one entry a patient, (patients,).

    arrival: days from the start of the warm-up. group, home: places in scenario order.
    stay: days by stay class, (classes, patients). delay: days on the road. gate: in (0, 1).
    drawn_stay: days before any unit's stay factor. staffing: None where all beds are always staffed.
    """

    arrival: np.ndarray
    group: np.ndarray
    home: np.ndarray
    drawn_stay: np.ndarray
    stay: np.ndarray
    delay: np.ndarray
    gate: np.ndarray
    staffing: Staffing | None = None

    def __len__(self) -> int:
        return len(self.arrival)

    @cached_property
    def hash(self) -> str:
        """SHA-256 over every array, names and shapes included."""
        arrays = {field.name: getattr(self, field.name) for field in fields(self) if field.name != "staffing"}
        if self.staffing is not None:
            arrays |= {f"staffing_{name}": array for name, array in vars(self.staffing).items()}
        return hash_arrays(arrays)


def hash_arrays(arrays: dict[str, np.ndarray]) -> str:
    """SHA-256 over named arrays: name, type, shape and bytes (little-endian) of each in turn."""
    digest = hashlib.sha256()
    for name, array in arrays.items():
        plain = np.ascontiguousarray(array).astype(array.dtype.newbyteorder("<"), copy=False)
        digest.update(f"{name}:{plain.dtype.str}:{plain.shape};".encode())
        digest.update(plain.tobytes())
    return digest.hexdigest()


def uniforms(seed: int, replication: int, group: str, purpose: int) -> UniformSource:
    """The addressed stream of uniforms on (0, 1); each call gives the next `n` of them.

    A uniform is (i + 1/2) * 2**-52 with i of 52 random bits, so never 0 or 1.
    """
    address = np.random.SeedSequence(seed, spawn_key=(replication, *_words(group), purpose))
    bits = np.random.Philox(address)

    def next_uniforms(n: int) -> np.ndarray:
        return ((bits.random_raw(n) >> np.uint64(12)).astype(np.float64) + 0.5) * 2.0**-52

    return next_uniforms


@lru_cache(maxsize=10_000)
def _words(group: str) -> tuple[int, int]:
    """The first eight bytes of the SHA-256 of the NFC name, as two 32-bit words, the first byte highest."""
    digest = hashlib.sha256(unicodedata.normalize("NFC", group).encode()).digest()
    return int.from_bytes(digest[:4], "big"), int.from_bytes(digest[4:8], "big")


def draw_intake(plan: IntakePlan, replication: int) -> Intake:
    """The intake of one replication, the same for every policy, on any machine of one fingerprint."""
    drawn = [_draw_group(plan, place, replication) for place in range(len(plan.groups))]
    arrival, group, home, stay, delay, gate = (np.concatenate(column) for column in zip(*drawn, strict=True))
    # Stable: by time, then group order in the file, then draw number.
    order = np.argsort(arrival, kind="stable")
    stay = stay[order]
    return Intake(
        arrival=arrival[order],
        group=group[order],
        home=home[order],
        drawn_stay=stay,
        stay=np.stack([stay * factor for factor in plan.stay_factors]),
        delay=delay[order],
        gate=gate[order],
        staffing=_draw_staffing(plan, replication),
    )


def _draw_staffing(plan: IntakePlan, replication: int) -> Staffing | None:
    if plan.outages is None:
        return None
    return out_of_use.timetable(
        plan.outages, plan.staffed_beds, plan.horizon_days,
        lambda address, purpose: uniforms(plan.seed, replication, address, purpose),
    )  # fmt: skip


def _draw_group(plan: IntakePlan, place: int, replication: int) -> tuple[np.ndarray, ...]:
    group: GroupDraws = plan.groups[place]

    def stream(purpose: int) -> UniformSource:
        return uniforms(plan.seed, replication, group.name, purpose)

    arrival = arrival_times(stream(ARRIVAL), group.per_day, group.pattern, plan.horizon_days)
    n = len(arrival)
    delay = np.zeros(n) if plan.delay_hours is None else plan.delay_hours.quantile(stream(DELAY)(n)) / 24
    return (
        arrival, np.full(n, place, np.int64), np.full(n, group.home, np.int64),
        group.stay.quantile(stream(STAY)(n)), delay, stream(GATE)(n),
    )  # fmt: skip


def write_staffing(staffing: Staffing, path: Path, units: Sequence[str]) -> None:
    """Writes every change of staffed beds as CSV: time_days, unit, staffed_beds (from then on)."""
    with path.open("w", newline="", encoding="utf-8") as file:
        rows = csv.writer(file)
        rows.writerow(["time_days", "unit", "staffed_beds"])
        columns = (staffing.times, staffing.units, staffing.beds)
        for time, unit, beds in zip(*(column.tolist() for column in columns), strict=True):
            rows.writerow([time, in_spreadsheet(units[unit]), beds])


def write_intake(intake: Intake, path: Path, *, groups: list[str], units: list[str]) -> None:
    """Writes an intake as CSV, numbers in full precision, so that an outsider can run an engine of their own.

    Columns: patient, arrival_days, group, home, kind, stay_days (before any stay factor), delay_days, gate.
    """
    with path.open("w", newline="", encoding="utf-8") as file:
        rows = csv.writer(file)
        rows.writerow(["patient", "arrival_days", "group", "home", "kind", "stay_days", "delay_days", "gate"])
        columns = (intake.arrival, intake.group, intake.home, intake.drawn_stay, intake.delay, intake.gate)
        for patient, (at, group, home, stay, delay, gate) in enumerate(
            zip(*map(np.ndarray.tolist, columns), strict=True)
        ):
            names = in_spreadsheet(groups[group]), in_spreadsheet(units[home])
            rows.writerow([patient, at, *names, "emergency", stay, delay, gate])
