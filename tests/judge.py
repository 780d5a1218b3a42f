"""Two outsiders who know an engine's run only by its event log: a judge of the rules, and an accountant.

Both are slow and plain on purpose, and share no code with an engine.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from sim.lowering import ANY_BED, NOBODY, TURNED_AWAY
from sim.record import FULL, GATE_STATES, INCOMING_CLOSED, OWN_CLOSED, Record
from tests.builders import Case, Event

DISCHARGE, TRANSFER_ARRIVAL, STAFFING, REVIEW, NEW_ARRIVAL = 10, 20, 30, 40, 50
IN_THE_LOG = {
    DISCHARGE: "discharge", TRANSFER_ARRIVAL: "admission", STAFFING: "staffing", REVIEW: "review",
    NEW_ARRIVAL: "arrival",
}  # fmt: skip


class RuleBroken(AssertionError):  # noqa: N818 - what it says is the finding, not a mishap
    """The log breaks the model; the message begins with the name of the broken rule."""


@dataclass
class Ward:
    """One unit as the judge keeps it."""

    beds: int
    own_open: bool
    incoming_open: bool
    occupied: int = 0
    reserved: int = 0

    @property
    def load(self) -> int:
        return self.occupied + self.reserved

    @property
    def free(self) -> bool:
        return self.load < self.beds


class Judge:
    """Follows an event log and holds every line of it against the rules."""

    def __init__(self, case: Case) -> None:
        self.case, self.rules = case, case.rules
        self.end = case.network.edges[-1]
        self.wards = [
            Ward(int(beds), bool(own > 0), bool(incoming > 0))
            for beds, own, incoming in zip(
                case.network.beds, case.rules.own_closes, case.rules.incoming_closes, strict=True
            )
        ]
        # Whatever is still to come, as (time, kind, sequence, unit): the next event is the least of it.
        arrivals = zip(case.intake.arrival.tolist(), case.intake.home.tolist(), strict=True)
        self.due = [(time, NEW_ARRIVAL, patient, home) for patient, (time, home) in enumerate(arrivals)]
        self.due += [(time, REVIEW, unit, unit) for time, unit in _timetable(case.rules.reviews)]
        self.due += [(time, STAFFING, unit, unit) for time, unit in _timetable(case.intake.staffing)]
        self.staffed = deque([] if case.intake.staffing is None else case.intake.staffing.beds.tolist())
        self.implied: deque[tuple[str, Event]] = deque()  # what must follow at once, and by which rule

    def follow(self, log: list[Event]) -> None:
        """Raises RuleBroken at the first line that breaks a rule, or where the log ends too early."""
        for line in log:
            if self.implied:
                rule, expected = self.implied.popleft()
                if line != expected:
                    raise RuleBroken(f"{rule}: {expected} must come next, the log has {line}")
                if line[1] == "admission":
                    self.occupy(*line)
            else:
                self.happens(line)
        left = [event for event in self.due if event[0] < self.end]
        if self.implied or left:
            raise RuleBroken(f"next event: the log ends before {[*self.implied, *sorted(left)][0]}")

    def happens(self, line: Event) -> None:
        """The next event of the calendar."""
        coming = min(self.due, default=None)
        if coming is None or coming[0] >= self.end or line != self.as_logged(coming):
            raise RuleBroken(f"next event: {coming} is due, the log has {line}")
        self.due.remove(coming)
        time, kind, sequence, unit = coming
        if kind == DISCHARGE:
            self.wards[unit].occupied -= 1
            self.implied.extend(self.moves_at_once(time, unit))
        elif kind == TRANSFER_ARRIVAL:
            self.wards[unit].reserved -= 1
            self.occupy(*line, reserved=True)
        elif kind == STAFFING:
            self.wards[unit].beds = self.staffed.popleft()
        elif kind == REVIEW:
            self.implied.extend(self.gate_moves(time, unit))
        else:
            self.implied.extend(self.decision(time, sequence, unit))

    def as_logged(self, event: tuple[float, int, int, int]) -> Event:
        """The line of the log that tells of a due event."""
        time, kind, sequence, unit = event
        return time, IN_THE_LOG[kind], NOBODY if kind in (REVIEW, STAFFING) else sequence, int(unit)

    def decision(self, time: float, patient: int, home: int) -> list[tuple[str, Event]]:
        """What must become of an arriving patient, by the four steps of the model."""
        unit = self.place_for(patient, home)
        if unit is None:
            return [("decision", (time, "turned away", patient, int(home)))]
        if unit == home:
            return [("decision", (time, "admission", patient, int(home)))]
        delay = float(self.case.intake.delay[patient])
        transfer = ("decision", (time, "transfer", patient, int(unit)))
        if delay == 0:
            return [transfer, ("transfer delay", (time, "admission", patient, int(unit)))]
        self.wards[unit].reserved += 1
        self.due.append((time + delay, TRANSFER_ARRIVAL, patient, unit))
        return [transfer, *self.moves_at_once(time, unit)]

    def place_for(self, patient: int, home: int) -> int | None:
        """The unit that must take the patient; None: turned away."""
        own, asked = (
            self.wards[home],
            [unit for unit in self.rules.referral_order[home].tolist() if unit != NOBODY],
        )
        chances = self.rules.admit_while_closed
        soft = chances is not None and self.case.intake.gate[patient] < chances[home]
        willing = [unit for unit in asked if self.wards[unit].incoming_open and self.wards[unit].free]
        any_free = [unit for unit in asked if self.wards[unit].free]
        if own.free and (own.own_open or soft):
            return home
        if willing:
            return willing[0]
        if own.free and self.rules.last_resort != TURNED_AWAY:
            return home
        if any_free and self.rules.last_resort == ANY_BED:
            return any_free[0]
        return None

    def occupy(self, time: float, _: str, patient: int, unit: int, *, reserved: bool = False) -> None:
        """A bed is taken; the discharge is due after the stay in that unit."""
        ward, intake = self.wards[unit], self.case.intake
        if ward.load >= ward.beds and not reserved:  # a reserved bed is kept even where staffed beds fall
            raise RuleBroken(
                f"free bed: patient {patient} was put into unit {unit}, which was full at {time}"
            )
        stay = float(intake.stay[self.case.network.stay_class[unit], patient])
        if unit != intake.home[patient]:
            stay += self.case.network.extra_days
        ward.occupied += 1
        self.due.append((time + stay, DISCHARGE, patient, unit))
        self.implied.extend(self.moves_at_once(time, unit))

    def moves_at_once(self, time: float, unit: int) -> list[tuple[str, Event]]:
        """What the gates do when the load has changed: nothing where they wait for a review."""
        reviews = self.rules.reviews
        return [] if reviews is not None and reviews.reviewed[unit] else self.gate_moves(time, unit)

    def gate_moves(self, time: float, unit: int) -> list[tuple[str, Event]]:
        """The gate lines that the load of a unit calls for now."""
        ward, rules, moves = self.wards[unit], self.rules, []
        for gate, closes, reopens in (
            ("own", rules.own_closes[unit], rules.own_reopens[unit]),
            ("incoming", rules.incoming_closes[unit], rules.incoming_reopens[unit]),
        ):
            is_open = getattr(ward, f"{gate}_open")
            must_close = is_open and ward.load >= closes
            must_open = not is_open and ward.load <= reopens and ward.load < closes
            if must_close or must_open:
                setattr(ward, f"{gate}_open", not is_open)
                word = "closes" if is_open else "opens"
                moves.append(("gates", (time, f"{gate} gate {word}", NOBODY, int(unit))))
        return moves


def _timetable(events) -> list[tuple[float, int]]:
    """(time, unit) of reviews or changes of staffed beds; empty where the rule is off."""
    return [] if events is None else list(zip(events.times.tolist(), events.units.tolist(), strict=True))


class Account:
    """The record of a run as an accountant draws it up from the event log alone."""

    def __init__(self, case: Case) -> None:
        network, n = case.network, len(case.network.beds)
        self.beds, self.edges, self.home = network.beds.copy(), network.edges, case.intake.home
        staffing = case.intake.staffing
        self.staffed = deque([] if staffing is None else staffing.beds.tolist())
        levels = (len(self.edges) - 1, n, int(network.beds.max()) + 1)
        self.occupied, self.reserved = np.zeros(n, np.int64), np.zeros(n, np.int64)
        self.closed = {"own": case.rules.own_closes == 0, "incoming": case.rules.incoming_closes == 0}
        self.on_road: set[int] = set()
        self.now = 0.0
        self.book = Record(
            occupancy_days=np.zeros(levels),
            gate_days=np.zeros((n, GATE_STATES)),
            **{name: np.zeros(n, np.int64) for name in ("arrived", "turned_away", "on_road_at_start")},
            **{name: np.zeros((n, n), np.int64) for name in ("diverted", "admitted")},
            on_road_at_end=self.reserved,
            staffed_days=None if staffing is None else np.zeros(levels),
        )

    def of(self, log: list[Event]) -> Record:
        """The record of a whole log."""
        for time, kind, patient, unit in log:
            self.pass_time(time)
            self.enter(kind, patient, unit, counted=time >= self.edges[0])
        self.pass_time(self.edges[-1])
        return self.book

    def pass_time(self, until: float) -> None:
        """Books the time since the last event, split at the window's edges."""
        units = np.arange(len(self.beds))
        state = OWN_CLOSED * self.closed["own"] + INCOMING_CLOSED * self.closed["incoming"]
        state = state + FULL * (self.occupied + self.reserved >= self.beds)
        for period, (start, end) in enumerate(pairwise(self.edges)):
            days = max(0.0, min(until, end) - max(self.now, start))
            self.book.occupancy_days[period, units, self.occupied] += days
            self.book.gate_days[units, state] += days
            if self.book.staffed_days is not None:
                self.book.staffed_days[period, units, self.beds] += days
        if self.now < self.edges[0] <= until:
            self.book.on_road_at_start[:] = self.reserved
        self.now = until

    def enter(self, kind: str, patient: int, unit: int, *, counted: bool) -> None:
        """Books one line of the log."""
        if kind == "arrival":
            self.book.arrived[unit] += counted
        elif kind == "turned away":
            self.book.turned_away[unit] += counted
        elif kind == "transfer":
            self.book.diverted[self.home[patient], unit] += counted
            self.reserved[unit] += 1
            self.on_road.add(patient)
        elif kind == "admission":
            self.book.admitted[self.home[patient], unit] += counted
            self.occupied[unit] += 1
            self.reserved[unit] -= patient in self.on_road
            self.on_road.discard(patient)
        elif kind == "discharge":
            self.occupied[unit] -= 1
        elif kind == "staffing":
            self.beds[unit] = self.staffed.popleft()
        elif kind != "review":
            gate, _, move = kind.split()
            self.closed[gate][unit] = move == "closes"


def differences(record: Record, book: Record) -> list[str]:
    """Where a record departs from the accountant's: times by more than 1e-9 days, counts at all."""
    if record.arrays().keys() != book.arrays().keys():
        return [f"measured {list(record.arrays())}, booked {list(book.arrays())}"]
    return [
        f"{name}: measured {measured.tolist()}, booked {book.arrays()[name].tolist()}"
        for name, measured in record.arrays().items()
        if not np.allclose(
            measured, book.arrays()[name], rtol=0, atol=1e-9 if measured.dtype.kind == "f" else 0
        )
    ]
