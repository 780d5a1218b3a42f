"""Tiny networks, rules and intakes made by hand, in the form that an engine reads, and how to play them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sim import reference
from sim.intake import Intake
from sim.lowering import HOME_BED, NOBODY, Network, Rules
from sim.record import FULL, GATE_STATES, INCOMING_CLOSED, OWN_CLOSED, Record
from sim.rules.out_of_use import Staffing
from sim.rules.reviews import Reviews
from sim.trace import Trace

A, B, C = range(3)  # units
FOREVER = 1000.0  # a stay that outlasts every run
Event = tuple[float, str, int, int]  # time in days, what happened, patient or NOBODY, unit's place
Each = float | Sequence[float] | None  # one value for every unit, or one a unit


@dataclass(frozen=True)
class Patient:
    """One patient of a hand-made intake: times in days, `home` a unit's place, `gate` in (0, 1)."""

    arrival: float
    home: int = 0
    stay: float = 1.0
    delay: float = 0.0
    gate: float = 0.5


@dataclass(frozen=True)
class Case:
    """Everything that one run depends on."""

    network: Network
    rules: Rules
    intake: Intake


def network(
    beds: Sequence[int],
    *,
    edges: Sequence[float] = (0.0, 10.0),
    extra_days: float = 0.0,
    stay_class: Sequence[int] | None = None,
) -> Network:
    """Units A, B, C, ... with so many staffed beds, measured from the first edge to the last (days)."""
    return Network(
        unit_names=tuple("ABCDEFGHIJ"[: len(beds)]),
        beds=np.array(beds, np.int64),
        stay_class=np.array(stay_class or [0] * len(beds), np.int64),
        extra_days=float(extra_days),
        edges=np.array(edges, float),
    )


def rules(
    of: Network,
    *,
    own: Each = None,
    incoming: Each = None,
    gap: Each = 1,
    admit_while_closed: Each = 0.0,
    review_hours: Each = 0.0,
    asks: Sequence[Sequence[int]] | None = None,
    last_resort: int = HOME_BED,
) -> Rules:
    """Rules in words made numbers, with the model's defaults.

    own, incoming: thresholds (default: the beds; the own one). asks: each home's referral order, as places
    (default: the other units, cyclic from the next).
    """
    n = len(of.beds)
    own_closes = _whole(of.beds if own is None else own, n)
    incoming_closes = np.minimum(_whole(own_closes if incoming is None else incoming, n), own_closes)
    gaps = _whole(gap, n)
    hours = np.broadcast_to(np.asarray(review_hours, float), n)
    reviews = sorted(
        review for unit in range(n) for review in _reviews(unit, float(hours[unit]), float(of.edges[-1]))
    )
    times = np.array([time for time, _ in reviews], float)
    units = np.array([unit for _, unit in reviews], np.int64)
    soft = np.array(np.broadcast_to(np.asarray(admit_while_closed, float), n))
    return Rules(
        own_closes=own_closes,
        own_reopens=np.maximum(own_closes - gaps, 0),
        incoming_closes=incoming_closes,
        incoming_reopens=np.maximum(incoming_closes - gaps, 0),
        referral_order=_places(
            [[(u + i) % n for i in range(1, n)] for u in range(n)] if asks is None else asks
        ),
        last_resort=last_resort,
        admit_while_closed=soft if soft.any() else None,
        reviews=Reviews(times, units, hours > 0) if hours.any() else None,
    )


def intake(
    *patients: Patient,
    stay_factors: Sequence[float] = (1.0,),
    staffing: Sequence[tuple[float, int, int]] | None = None,
) -> Intake:
    """The patients in order of arrival, those of one instant in the order given; one stay class a factor.

    staffing: (time, unit, staffed beds from then on), in order of time, then unit.
    """
    ordered = sorted(patients, key=lambda patient: patient.arrival)
    stay = np.array([patient.stay for patient in ordered], float)
    return Intake(
        arrival=np.array([patient.arrival for patient in ordered], float),
        group=np.array([patient.home for patient in ordered], np.int64),
        home=np.array([patient.home for patient in ordered], np.int64),
        drawn_stay=stay,
        stay=np.stack([stay * factor for factor in stay_factors]),
        delay=np.array([patient.delay for patient in ordered], float),
        gate=np.array([patient.gate for patient in ordered], float),
        staffing=None if staffing is None else _staffing(staffing),
    )


def _staffing(changes: Sequence[tuple[float, int, int]]) -> Staffing:
    times, units, beds = zip(*changes, strict=True) if changes else ((), (), ())
    return Staffing(np.array(times, float), np.array(units, np.int64), np.array(beds, np.int64))


def play(
    of: Network,
    by: Rules,
    *patients: Patient,
    stay_factors: Sequence[float] = (1.0,),
    staffing: Sequence[tuple[float, int, int]] | None = None,
) -> tuple[list[Event], Record]:
    """The reference engine's event log and its record, which must be sound."""
    log, record = traced(Case(of, by, intake(*patients, stay_factors=stay_factors, staffing=staffing)))
    assert record.faults(of.measured_days) == []
    return log, record


def traced(case: Case) -> tuple[list[Event], Record]:
    """The reference engine's event log and its record."""
    trace = Trace()
    record = reference.run(case.network, case.rules, case.intake, trace=trace)
    return trace.events, record


def gate_days(**of_state: float) -> list[float]:
    """A record's `gate_days` of one unit; letters spell a state: o own closed, i incoming closed, f full."""
    bits = {"o": OWN_CLOSED, "i": INCOMING_CLOSED, "f": FULL}
    row = [0.0] * GATE_STATES
    for letters, days in of_state.items():
        row[0 if letters == "open" else sum(bits[letter] for letter in letters)] = days
    return row


def both_gates(time: float, move: str, unit: int) -> list[Event]:
    """The two lines of a unit whose gates move together, own gate first."""
    return [(time, f"own gate {move}", NOBODY, unit), (time, f"incoming gate {move}", NOBODY, unit)]


def _whole(values: Each, n: int) -> np.ndarray:
    return np.array(np.broadcast_to(np.asarray(values, np.int64), n))


def _reviews(unit: int, hours: float, end: float) -> list[tuple[float, int]]:
    """Review k at (k * hours) / 24, before the end."""
    found, k = [], 1
    while hours > 0 and (k * hours) / 24 < end:
        found.append(((k * hours) / 24, unit))
        k += 1
    return found


def _places(orders: Sequence[Sequence[int]]) -> np.ndarray:
    places = np.full((len(orders), max(len(orders) - 1, 1)), NOBODY, np.int64)
    for unit, order in enumerate(orders):
        places[unit, : len(order)] = order
    return places
