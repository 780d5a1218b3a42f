"""Beds out of use: staffed beds fall for a while, on known days or at random.

Nobody leaves for it: a unit with more patients than staffed beds is full until it empties. Thresholds stay as
they are, and utilisation is against staffed bed-time. Outages of a unit that overlap add up, to no more than its
beds.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Annotated

import numpy as np
from pydantic import Field, model_validator

from sim.demand import WeeklyPattern, arrival_times
from sim.rules.declaration import Lowered, Rule
from sim.stays import Exponential
from sim.tables import MOST_BEDS, MOST_DAYS, NotNegative, Positive, Row, Table, breach

if TYPE_CHECKING:
    from sim.scenario import Policy, Scenario
    from sim.scenario.crosschecks import Draft
    from sim.scenario.units import Unit

STAFFING = 30  # the place of a change of staffed beds in the order of events
OUTAGE_START, OUTAGE_LENGTH = 5, 6  # the purposes of random outages
DAYS_A_YEAR = 365.0
MOST_OUTAGES = 100_000
UniformSource = Callable[[int], np.ndarray]


class OutOfUse(Table):
    """One row: dated (`from_day`, `days`) or random (`per_year`, `mean_days`, exponential), and how many `beds`."""

    beds: Annotated[int, Field(ge=1, le=MOST_BEDS, examples=["beds = 2"])]
    from_day: Annotated[NotNegative | None, Field(le=MOST_DAYS, examples=["from_day = 200"])] = None
    days: Annotated[Positive | None, Field(le=MOST_DAYS, examples=["days = 14"])] = None
    per_year: Annotated[NotNegative | None, Field(le=10_000, examples=["per_year = 6"])] = None
    mean_days: Annotated[Positive | None, Field(le=3_650, examples=["mean_days = 3"])] = None

    @model_validator(mode="after")
    def _one_kind(self):
        dated, random = (self.from_day, self.days), (self.per_year, self.mean_days)
        if (None in dated) == (None in random) or any(
            value is not None for value in (random if None not in dated else dated)
        ):
            said = [key for key, value in self if value is not None and key != "beds"]
            raise breach(
                "needs either both `from_day` and `days`, or both `per_year` and `mean_days`",
                ", ".join(f"`{key}`" for key in said) or "neither",
                "give one of the two pairs",
            )
        return self

    @property
    def can_happen(self) -> bool:
        """Whether it takes a bed at all."""
        return self.is_dated or self.per_year > 0

    @property
    def is_dated(self) -> bool:
        """Whether it happens on known days."""
        return self.from_day is not None


class UnitKeys(Table):
    """`[[units.out_of_use]]` rows below a unit. Days count from the start of the warm-up."""

    out_of_use: Annotated[tuple[OutOfUse, ...], Row, Field(max_length=1_000)] = ()


@dataclass(frozen=True)
class Outage:
    """One row as the intake needs it. address: names its streams. unit: the unit's place."""

    unit: int
    address: str
    row: OutOfUse


@dataclass(frozen=True)
class Staffing:
    """Every change of staffed beds, by time (days), then unit: how many are staffed from then on."""

    times: np.ndarray
    units: np.ndarray
    beds: np.ndarray


def check(draft: Draft) -> None:
    """No row takes more beds than the unit has, nor more outages than a run can hold."""
    for row in draft.rows("units"):
        beds = draft.read("units", row, "beds")
        for path in draft.below("units", row, "out_of_use"):
            out, per_year, days = draft.read(*path, "beds"), draft.read(*path, "per_year"), draft.run_days
            if None not in (out, beds) and out > beds:
                rule = "must not be above the unit's beds"
                draft.fault((*path, "beds"), rule, f"got {out} for {beds} beds", f"choose from 1 to {beds}")
            if None not in (per_year, days) and per_year * days / DAYS_A_YEAR > MOST_OUTAGES:
                rule = f"a replication may hold at most {MOST_OUTAGES:,} outages of a row"
                got = f"got about {per_year * days / DAYS_A_YEAR:,.6g}"
                draft.fault((*path, "per_year"), rule, got, "lower it")


def plan(scenario: Scenario) -> Lowered:
    """outages: every row that can take a bed; None where there is none. staffed_beds: (units,), undisturbed."""
    outages = tuple(
        Outage(place, f"{unit.name}\x1f{number}", row)
        for place, unit in enumerate(scenario.units)
        for number, row in enumerate(unit.out_of_use)
        if row.can_happen
    )
    return {"outages": outages or None, "staffed_beds": tuple(unit.beds for unit in scenario.units)}


def timetable(
    outages: tuple[Outage, ...],
    beds: tuple[int, ...],
    horizon_days: float,
    stream: Callable[[str, int], UniformSource],
) -> Staffing:
    """Every change of staffed beds before the horizon.

    stream: (address, purpose) -> the addressed uniforms of this replication.
    """
    changes: dict[tuple[float, int], int] = {}
    for outage in outages:
        for start, end in _spans(outage, horizon_days, stream):
            for time, out in ((start, outage.row.beds), (end, -outage.row.beds)):
                if time < horizon_days:
                    changes[time, outage.unit] = changes.get((time, outage.unit), 0) + out
    out_now, rows = [0] * len(beds), []
    for (time, unit), more in sorted(changes.items()):
        out_now[unit] += more
        rows.append((time, unit, max(0, beds[unit] - out_now[unit])))
    times, units, staffed = zip(*rows, strict=True) if rows else ((), (), ())
    return Staffing(np.array(times, float), np.array(units, np.int64), np.array(staffed, np.int64))


def _spans(
    outage: Outage, horizon_days: float, stream: Callable[[str, int], UniformSource]
) -> Iterator[tuple[float, float]]:
    """Start and end of every outage of a row, in days."""
    row = outage.row
    if row.is_dated:
        yield row.from_day, row.from_day + row.days
        return
    source = stream(outage.address, OUTAGE_START)
    starts = arrival_times(source, row.per_year / DAYS_A_YEAR, WeeklyPattern(None, None), horizon_days)
    lengths = Exponential(row.mean_days).quantile(stream(outage.address, OUTAGE_LENGTH)(len(starts)))
    yield from zip(starts.tolist(), (starts + lengths).tolist(), strict=True)


def reads(scenario: Scenario, policy: Policy) -> str | None:
    """Which beds are out, when."""
    said = [f"{unit.name}: {_row_reads(row)}" for unit, row in _rows(scenario)]
    return "; ".join(said) or None


def _rows(scenario: Scenario) -> Iterator[tuple[Unit, OutOfUse]]:
    """Every row that can take a bed, with its unit."""
    yield from ((unit, row) for unit in scenario.units for row in unit.out_of_use if row.can_happen)


def _row_reads(row: OutOfUse) -> str:
    beds = f"{row.beds} bed{'s' if row.beds > 1 else ''} out"
    if row.is_dated:
        return f"{beds} from day {row.from_day:g} for {row.days:g} days"
    return f"{beds} {row.per_year:g} times a year for {row.mean_days:g} days on average"


def chain_refuses(scenario: Scenario, policy: Policy) -> Iterator[str]:
    """The chain's beds are fixed."""
    for unit, row in _rows(scenario):
        yield f"units.{unit.name}.out_of_use: staffed beds must stay the same, got {_row_reads(row)}"


RULE = Rule(
    "beds out of use",
    reads,
    unit_keys=UnitKeys,
    check=check,
    plan=plan,
    purposes={"outage start": OUTAGE_START, "outage length": OUTAGE_LENGTH},
    event_kinds={"staffing": STAFFING},
    record_columns=("staffed_days",),
    chain_refuses=chain_refuses,
)
