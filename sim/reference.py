"""The reference engine: the network as a SimPy model, written to be read. It is the specification.

A run is a pure function of a lowered network, one policy's rules and an intake. Nothing is drawn and nothing
is multiplied here. Events happen in the order (time, kind, sequence), where the sequence is the patient's
index in the intake, or the unit's for reviews and changes of staffed beds; what is scheduled for now happens
next, whatever its kind.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from heapq import heappush

import numpy as np
import simpy

from sim.intake import Intake
from sim.lowering import ANY_BED, NOBODY, TURNED_AWAY, IntakePlan, Network, Rules
from sim.record import FULL, GATE_STATES, INCOMING_CLOSED, OWN_CLOSED, Record
from sim.rules.out_of_use import STAFFING
from sim.rules.reviews import REVIEW
from sim.rules.transfer import TRANSFER_ARRIVAL
from sim.trace import Trace

WINDOW_EDGE, DISCHARGE, NEW_ARRIVAL = 1, 10, 50


class Calendar(simpy.Environment):
    """SimPy's environment, able to schedule at an absolute time and in the model's order of events."""

    def at(
        self, time: float, kind: int, sequence: int, *actions: Callable[[simpy.Event], None]
    ) -> simpy.Event:
        """An event at exactly `time` (`now + (time - now)` need not be); its value is the sequence."""
        event = simpy.Event(self)
        event._ok, event._value = True, sequence
        event.callbacks.extend(actions)
        heappush(self._queue, (time, (kind << 40) + sequence, next(self._eid), event))
        return event


class Unit:
    """The state of one unit and the time it has spent in each state since counting began."""

    def __init__(self, place: int, network: Network, rules: Rules) -> None:
        self.place = place
        self.beds = int(network.beds[place])
        self.stay_class = int(network.stay_class[place])
        self.own_closes, self.own_reopens = int(rules.own_closes[place]), int(rules.own_reopens[place])
        self.incoming_closes = int(rules.incoming_closes[place])
        self.incoming_reopens = int(rules.incoming_reopens[place])
        soft = rules.admit_while_closed
        self.admit_while_closed = 0.0 if soft is None else float(soft[place])
        self.reviewed = rules.reviews is not None and bool(rules.reviews.reviewed[place])
        self.asks = [int(other) for other in rules.referral_order[place] if other != NOBODY]
        self.occupied = self.reserved = 0
        self.own_open, self.incoming_open = self.own_closes > 0, self.incoming_closes > 0

    @property
    def load(self) -> int:
        """Beds occupied or held for a patient on the road."""
        return self.occupied + self.reserved

    @property
    def has_free_bed(self) -> bool:
        """Whether a bed is neither occupied nor reserved."""
        return self.occupied + self.reserved < self.beds

    @property
    def gate_state(self) -> int:
        """The unit's gates and fullness as bits."""
        return (
            (not self.own_open) * OWN_CLOSED
            | (not self.incoming_open) * INCOMING_CLOSED
            | (not self.has_free_bed) * FULL
        )

    def set_gates(self) -> None:
        """Closes or reopens the gates for the present load; between the two levels they stay as they are."""
        if self.load >= self.own_closes:
            self.own_open = False
        elif self.load <= self.own_reopens:
            self.own_open = True
        if self.load >= self.incoming_closes:
            self.incoming_open = False
        elif self.load <= self.incoming_reopens:
            self.incoming_open = True


class Tally:
    """The record in the making. Before the window opens nothing is counted.

    staffed_days: None where all beds are always staffed.
    """

    def __init__(self, units: list[Unit], periods: int, most_beds: int, *, staffing_changes: bool) -> None:
        self.units, n = units, len(units)
        self.open = False
        self.period = 0
        self.occupancy_days = np.zeros((periods, n, most_beds + 1))
        self.staffed_days = np.zeros((periods, n, most_beds + 1)) if staffing_changes else None
        self.gate_days = np.zeros((n, GATE_STATES))
        self.arrived, self.turned_away = np.zeros(n, np.int64), np.zeros(n, np.int64)
        self.diverted, self.admitted = np.zeros((n, n), np.int64), np.zeros((n, n), np.int64)
        self.occupied_since, self.staffed_since, self.gates_since = [0.0] * n, [0.0] * n, [0.0] * n
        self.gate_state = [unit.gate_state for unit in units]

    def begin(self, now: float) -> None:
        """The measured window opens."""
        self.open = True
        n = len(self.units)
        self.occupied_since, self.staffed_since, self.gates_since = [now] * n, [now] * n, [now] * n
        self.on_road_at_start = np.array([unit.reserved for unit in self.units], np.int64)

    def close_period(self, now: float) -> None:
        """Cuts every integral at a window edge."""
        for unit in self.units:
            self.occupied_changes(unit, now)
            self.staffed_changes(unit, now)
            self.add_gate_time(unit, now)
        self.period += 1

    def occupied_changes(self, unit: Unit, now: float) -> None:
        """To be called before the number of occupied beds changes."""
        if self.open:
            self.occupancy_days[self.period, unit.place, unit.occupied] += (
                now - self.occupied_since[unit.place]
            )
            self.occupied_since[unit.place] = now

    def staffed_changes(self, unit: Unit, now: float) -> None:
        """To be called before the number of staffed beds changes."""
        if self.open and self.staffed_days is not None:
            self.staffed_days[self.period, unit.place, unit.beds] += now - self.staffed_since[unit.place]
            self.staffed_since[unit.place] = now

    def gates_may_have_changed(self, unit: Unit, now: float) -> None:
        """To be called after a change of load or gates; adds time only where the gate state did change."""
        if unit.gate_state != self.gate_state[unit.place]:
            self.add_gate_time(unit, now)
            self.gate_state[unit.place] = unit.gate_state

    def add_gate_time(self, unit: Unit, now: float) -> None:
        """Adds the time spent in the gate state that was last seen."""
        if self.open:
            self.gate_days[unit.place, self.gate_state[unit.place]] += now - self.gates_since[unit.place]
            self.gates_since[unit.place] = now

    def count(self, counts: np.ndarray, *place: int) -> None:
        """Counts one event, once the window is open."""
        if self.open:
            counts[place] += 1


class Model:
    """The units, their patients and the rules by which a patient finds a bed."""

    def __init__(self, network: Network, rules: Rules, intake: Intake, trace: Trace | None) -> None:
        self.network, self.rules, self.staffing, self.trace = network, rules, intake.staffing, trace
        self.arrival, self.home = intake.arrival.tolist(), intake.home.tolist()
        self.stay, self.delay, self.gate = intake.stay.tolist(), intake.delay.tolist(), intake.gate.tolist()
        self.calendar = Calendar()
        self.units = [Unit(place, network, rules) for place in range(len(network.beds))]
        periods, most_beds = len(network.edges) - 1, int(network.beds.max())
        self.tally = Tally(self.units, periods, most_beds, staffing_changes=self.staffing is not None)
        self.discharges = [self._discharge_from(unit) for unit in self.units]
        self.transfer_arrivals = [self._transfer_arrival_at(unit) for unit in self.units]

    def run(self) -> Record:
        """Runs to the end of the measured window; what is due at its end does not happen."""
        for process in (self.window(), self.new_arrivals(), self.reviews(), self.staffing_changes()):
            self.calendar.process(process)
        end = float(self.network.edges[-1])
        self.calendar.run(until=end)
        self.tally.close_period(end)
        return self.record()

    def window(self) -> Iterator[simpy.Event]:
        """Opens the measured window and closes its judged periods."""
        start, *inner = self.network.edges[:-1].tolist()
        yield self.calendar.at(start, WINDOW_EDGE, 0)
        self.tally.begin(start)
        for edge in inner:
            yield self.calendar.at(edge, WINDOW_EDGE, 0)
            self.tally.close_period(edge)

    def new_arrivals(self) -> Iterator[simpy.Event]:
        """Patients fall ill at the times of the intake."""
        for patient, time in enumerate(self.arrival):
            yield self.calendar.at(time, NEW_ARRIVAL, patient)
            self.arrive(patient)

    def reviews(self) -> Iterator[simpy.Event]:
        """Units with review hours set their gates only now."""
        reviews = self.rules.reviews
        if reviews is None:
            return
        for time, place in zip(reviews.times.tolist(), reviews.units.tolist(), strict=True):
            yield self.calendar.at(time, REVIEW, place)
            self.note("review", NOBODY, place)
            self.set_gates(self.units[place])

    def staffing_changes(self) -> Iterator[simpy.Event]:
        """Beds go out of use and come back; nobody leaves for it, and the thresholds stay as they are."""
        staffing = self.staffing
        if staffing is None:
            return
        for time, place, beds in zip(*(column.tolist() for column in vars(staffing).values()), strict=True):
            yield self.calendar.at(time, STAFFING, place)
            self.tally.staffed_changes(self.units[place], time)
            self.units[place].beds = beds
            self.note("staffing", NOBODY, place)
            self.tally.gates_may_have_changed(self.units[place], time)

    def arrive(self, patient: int) -> None:
        """A patient falls ill: admitted at home, transferred, or turned away."""
        home = self.units[self.home[patient]]
        self.tally.count(self.tally.arrived, home.place)
        self.note("arrival", patient, home.place)
        unit = self.choose_unit(patient, home)
        if unit is None:
            self.tally.count(self.tally.turned_away, home.place)
            self.note("turned away", patient, home.place)
        elif unit is home:
            self.occupy(patient, unit, self.stay[unit.stay_class][patient])
        else:
            self.transfer(patient, unit)

    def choose_unit(self, patient: int, home: Unit) -> Unit | None:
        """The unit that takes the patient, or None."""
        if home.has_free_bed and (home.own_open or self.gate[patient] < home.admit_while_closed):
            return home
        for place in home.asks:
            asked = self.units[place]
            if asked.incoming_open and asked.has_free_bed:
                return asked
        return self.last_resort(home)

    def last_resort(self, home: Unit) -> Unit | None:
        """Where the patient goes when every unit asked is closed or full."""
        if self.rules.last_resort == TURNED_AWAY:
            return None
        if home.has_free_bed:
            return home
        if self.rules.last_resort == ANY_BED:
            return next((self.units[place] for place in home.asks if self.units[place].has_free_bed), None)
        return None

    def transfer(self, patient: int, unit: Unit) -> None:
        """Reserves the bed now; the patient occupies it after the delay, which may be none."""
        self.tally.count(self.tally.diverted, self.home[patient], unit.place)
        self.note("transfer", patient, unit.place)
        if self.delay[patient] > 0:
            unit.reserved += 1
            self.load_changed(unit)
            time = self.calendar.now + self.delay[patient]
            self.calendar.at(time, TRANSFER_ARRIVAL, patient, self.transfer_arrivals[unit.place])
        else:
            self.occupy(patient, unit, self.stay[unit.stay_class][patient] + self.network.extra_days)

    def _transfer_arrival_at(self, unit: Unit) -> Callable[[simpy.Event], None]:
        def arrives(event: simpy.Event) -> None:
            # Reservation to occupation is one step: the load stays, no gate moves.
            unit.reserved -= 1
            self.occupy(event.value, unit, self.stay[unit.stay_class][event.value] + self.network.extra_days)

        return arrives

    def occupy(self, patient: int, unit: Unit, stay: float) -> None:
        """The patient takes a bed of the unit for the stay."""
        now = self.calendar.now
        self.tally.occupied_changes(unit, now)
        unit.occupied += 1
        self.tally.count(self.tally.admitted, self.home[patient], unit.place)
        self.note("admission", patient, unit.place)
        self.load_changed(unit)
        self.calendar.at(now + stay, DISCHARGE, patient, self.discharges[unit.place])

    def _discharge_from(self, unit: Unit) -> Callable[[simpy.Event], None]:
        def leaves(event: simpy.Event) -> None:
            self.tally.occupied_changes(unit, self.calendar.now)
            unit.occupied -= 1
            self.note("discharge", event.value, unit.place)
            self.load_changed(unit)

        return leaves

    def load_changed(self, unit: Unit) -> None:
        """The gates follow the load at once, unless the unit keeps to reviews."""
        if unit.reviewed:
            self.tally.gates_may_have_changed(unit, self.calendar.now)  # it may have become full
        else:
            self.set_gates(unit)

    def set_gates(self, unit: Unit) -> None:
        """Sets the unit's gates for its present load."""
        before = unit.own_open, unit.incoming_open
        unit.set_gates()
        self.tally.gates_may_have_changed(unit, self.calendar.now)
        if self.trace is not None:
            self.note_gates(unit, *before)

    def note(self, kind: str, patient: int, place: int) -> None:
        """One line of the trace, where there is one."""
        if self.trace is not None:
            self.trace.note(self.calendar.now, kind, patient, place)

    def note_gates(self, unit: Unit, own_was_open: bool, incoming_was_open: bool) -> None:
        """The gates that moved."""
        for gate, was, now_open in (
            ("own gate", own_was_open, unit.own_open),
            ("incoming gate", incoming_was_open, unit.incoming_open),
        ):
            if was != now_open:
                self.note(f"{gate} {'opens' if now_open else 'closes'}", NOBODY, unit.place)

    def record(self) -> Record:
        """What was measured."""
        tally = self.tally
        return Record(
            occupancy_days=tally.occupancy_days, gate_days=tally.gate_days, arrived=tally.arrived,
            turned_away=tally.turned_away, diverted=tally.diverted, admitted=tally.admitted,
            on_road_at_start=tally.on_road_at_start,
            on_road_at_end=np.array([unit.reserved for unit in self.units], np.int64),
            staffed_days=tally.staffed_days,
        )  # fmt: skip


def run(network: Network, rules: Rules, intake: Intake, *, trace: Trace | None = None) -> Record:
    """One replication under one policy.

    network, rules: from `sim.lowering`. intake: from `sim.intake`. trace: filled with every event if given.
    """
    return Model(network, rules, intake, trace).run()


def run_table(network: Network, rules: Sequence[Rules], intake: Intake) -> list[Record]:
    """One replication under every policy."""
    return [run(network, one, intake) for one in rules]


def warm(network: Network, rules: Sequence[Rules], plan: IntakePlan) -> None:
    """Nothing has to happen before this engine runs."""
