"""The compiled event loop: the model of `sim.reference` over plain arrays, resumable between patients.

It only adds, subtracts and compares, in the order in which the reference engine does, so that records are
equal to the last bit. What a rule needs comes as None where no cell uses the rule, and numba then compiles the
loop without it, unless the rule is asked about so rarely that it costs nothing anyway. Arrays are passed one by
one, and what happens at every event stands in one function: numba counts references wherever an array is handed
on, which would cost more than the simulation. Nothing here imports the reference engine, nor it this one.
"""

from __future__ import annotations

import numpy as np

from sim.compiled.cache import compiled
from sim.compiled.calendar import NONE, ONE, kind_of, pack, pop_heap, push_heap, sequence_of, unit_of

DISCHARGE, TRANSFER_ARRIVAL = 10, 20
TURNED_AWAY, ANY_BED = 0, 2
NO_TIMER, STAFFING, REVIEW = 0, 30, 40
NOBODY = -1
NEVER = np.inf

# Columns of `whole`, (units, 11): what the rules say of a unit, and its state.
(
    BEDS, STAY_CLASS, OWN_CLOSES, OWN_REOPENS, INCOMING_CLOSES, INCOMING_REOPENS, LAST_RESORT, REVIEWED, OCCUPIED, LOAD,
    GATE_STATE,
) = range(11)  # fmt: skip
COLUMNS = 11
# Columns of `since`, (units, 3): when the present number of occupied beds, the gate state, the staffed beds began.
SINCE_OCCUPIED, SINCE_GATES, SINCE_STAFFED = range(3)
# Bits of a gate state.
OWN_CLOSED, INCOMING_CLOSED, FULL = 1, 2, 4
# Columns of `counts`, (units, 4 + 2 units): by home or unit; diverted and admitted go by home and unit.
ARRIVED, TURNED, ON_ROAD_AT_START, ON_ROAD_AT_END, PAIRS = range(5)
# Entries of `counters`: events pending, next review, next change of staffed beds, period (-1 until the window
# opens), events noted.
PENDING, NEXT_REVIEW, NEXT_STAFFING, PERIOD, NOTED = range(5)
# What a trace calls each event, as places in sim.trace.KINDS.
(
    ARRIVES, ADMITTED, TRANSFERRED, IS_TURNED_AWAY, DISCHARGED, REVIEWS, OWN_OPENS, OWN_CLOSES_NOW, INCOMING_OPENS,
    INCOMING_CLOSES_NOW, STAFFING_CHANGES,
) = range(11)  # fmt: skip


@compiled
def advance(
    arrival, home_of, stay, delay, gate, staffing_times, staffing_units, staffing_beds,
    edges, extra_days, referral, soft, review_times, review_units,
    whole, since, times, keys, counters, in_heap,
    occupancy_days, staffed_days, gate_days, counts, note_times, notes,
    first, last,
):  # fmt: skip
    """Runs patients `first` to `last` and all events before the last of them; the last block runs to the end.

    arrival, home_of, delay, gate: (patients,); stay: (classes, patients); soft: (units,). staffing_*, staffed_days,
    review_*, note_times, notes: None where no rule (or nobody) asks for them. The rest: see the columns.
    """
    end = edges[-1]
    units = len(whole)
    to_the_end = last == len(arrival)
    period = counters[PERIOD]
    pending = counters[PENDING]
    next_edge = edges[period + 1] if period + 1 < len(edges) else NEVER
    patient = first
    while patient < last or to_the_end:
        # Which event is next: the first of the pending ones, a change of staffed beds, a review or a new arrival,
        # in this order at one time.
        now = arrival[patient] if patient < last else NEVER
        place = np.uintp(0 if in_heap else pending - 1)
        is_queued = pending > 0 and times[place] <= now
        if is_queued:
            now = times[place]
        timer = timer_before(now, is_queued, staffing_times, review_times, counters)
        if timer != NO_TIMER:
            now = timer_time(timer, staffing_times, review_times, counters)
        if now >= end:
            break
        while now >= next_edge:
            cross_edge(whole, since, occupancy_days, staffed_days, gate_days, counts, period, next_edge)
            period += 1
            next_edge = edges[period + 1]
        counts_now = period >= 0

        # What it does to the load and the occupied beds of which unit.
        more_load, more_occupied, length, due = 0, 0, 0.0, 0
        if timer == STAFFING:
            who = NOBODY
            unit = change_staffing(
                staffing_units, staffing_beds, counters, staffed_days, whole, since, period, now
            )
            note(note_times, notes, counters, now, STAFFING_CHANGES, NOBODY, unit)
        elif timer == REVIEW:
            who, unit = NOBODY, review_unit(review_units, counters)
            note(note_times, notes, counters, now, REVIEWS, NOBODY, unit)
        elif is_queued:
            key = keys[place]
            if in_heap:
                pop_heap(times, keys, pending)
            pending -= 1
            who, unit = sequence_of(key), unit_of(key)
            if kind_of(key) == DISCHARGE:
                more_load, more_occupied = -1, -1
            else:
                more_occupied, due = 1, DISCHARGE
                length = stay[whole[unit, STAY_CLASS], who] + extra_days
        else:
            who = patient
            patient += 1
            home = home_of[who]
            if counts_now:
                counts[home, ARRIVED] += 1
            note(note_times, notes, counters, now, ARRIVES, who, home)
            # The home, if its gate lets the patient in; else the first unit asked; else the last resort.
            state = whole[home, GATE_STATE]
            free_at_home = state & FULL == 0
            unit = NOBODY
            if free_at_home and (state & OWN_CLOSED == 0 or gate[who] < soft[home]):
                unit = home
            else:
                last_resort = whole[home, LAST_RESORT]
                if free_at_home and last_resort != TURNED_AWAY:
                    unit = home
                for asked in range(referral.shape[1]):
                    other = referral[home, asked]
                    if other == NOBODY:
                        break
                    others_state = whole[other, GATE_STATE]
                    if others_state & (INCOMING_CLOSED | FULL) == 0:
                        unit = other
                        break
                    if unit == NOBODY and last_resort == ANY_BED and others_state & FULL == 0:
                        unit = other  # unless a unit asked later is open
            if unit == NOBODY:
                if counts_now:
                    counts[home, TURNED] += 1
                note(note_times, notes, counters, now, IS_TURNED_AWAY, who, home)
                continue
            more_load, more_occupied, due = 1, 1, DISCHARGE
            length = stay[whole[unit, STAY_CLASS], who]
            if unit != home:
                if counts_now:
                    counts[home, PAIRS + unit] += 1
                note(note_times, notes, counters, now, TRANSFERRED, who, unit)
                if delay[who] > 0:
                    more_occupied, due, length = 0, TRANSFER_ARRIVAL, delay[who]
                else:
                    length += extra_days

        if more_occupied != 0:
            occupied = whole[unit, OCCUPIED]
            if counts_now:
                occupancy_days[period, unit, occupied] += now - since[unit, SINCE_OCCUPIED]
                since[unit, SINCE_OCCUPIED] = now
                if more_occupied > 0:
                    counts[home_of[who], PAIRS + units + unit] += 1
            whole[unit, OCCUPIED] = occupied + more_occupied
            note(note_times, notes, counters, now, ADMITTED if more_occupied > 0 else DISCHARGED, who, unit)
        load = whole[unit, LOAD] + more_load
        whole[unit, LOAD] = load

        # The gates follow the load at once, or at reviews; time is added only where the gate state changes.
        state = whole[unit, GATE_STATE]
        own, incoming = state & OWN_CLOSED, state & INCOMING_CLOSED
        if timer == REVIEW or (timer == NO_TIMER and whole[unit, REVIEWED] == 0):
            if load >= whole[unit, OWN_CLOSES]:
                own = OWN_CLOSED
            elif load <= whole[unit, OWN_REOPENS]:
                own = 0
            if load >= whole[unit, INCOMING_CLOSES]:
                incoming = INCOMING_CLOSED
            elif load <= whole[unit, INCOMING_REOPENS]:
                incoming = 0
        new_state = own | incoming | (FULL if load >= whole[unit, BEDS] else 0)
        if new_state != state:
            if counts_now:
                gate_days[unit, state] += now - since[unit, SINCE_GATES]
                since[unit, SINCE_GATES] = now
            whole[unit, GATE_STATE] = new_state
            note_gates(note_times, notes, counters, now, unit, state, new_state)

        if due != 0:
            time, key = now + length, pack(due, who, unit)
            if in_heap:
                push_heap(times, keys, pending, time, key)
            else:  # held latest first, so that the next one stands at the end
                free = np.uintp(pending)
                while free > NONE and (
                    times[free - ONE] < time or (times[free - ONE] == time and keys[free - ONE] < key)
                ):
                    times[free] = times[free - ONE]
                    keys[free] = keys[free - ONE]
                    free -= ONE
                times[free] = time
                keys[free] = key
            pending += 1

    if to_the_end:
        while period + 1 < len(edges):
            cross_edge(
                whole, since, occupancy_days, staffed_days, gate_days, counts, period, edges[period + 1]
            )
            period += 1
    counters[PERIOD] = period
    counters[PENDING] = pending


@compiled
def advance_table(
    arrival, home_of, stay, delay, gate, staffing_times, staffing_units, staffing_beds,
    edges, extra_days, referral, soft, review_times, review_units,
    whole, since, times, keys, counters, in_heap,
    occupancy_days, staffed_days, gate_days, counts,
    first, last, block,
):  # fmt: skip
    """Runs patients `first` to `last` of every cell, in blocks, so that a block of patients stays in the cache.

    Arrays of state and rules have cells in front.
    """
    while True:
        until = min(first + block, last)
        for cell in range(len(whole)):
            advance(
                arrival, home_of, stay, delay, gate, staffing_times, staffing_units, staffing_beds,
                edges, extra_days, referral[cell], soft[cell], review_times, review_units,
                whole[cell], since[cell], times[cell], keys[cell], counters[cell], in_heap,
                occupancy_days[cell], cell_of(staffed_days, cell), gate_days[cell], counts[cell], None, None,
                first, until,
            )  # fmt: skip
        first = until
        if first >= last:
            break


@compiled
def cell_of(array, cell):
    """One cell's part, or None for a rule that no cell uses."""
    if array is None:
        return None
    return array[cell]


@compiled
def cross_edge(whole, since, occupancy_days, staffed_days, gate_days, counts, period, edge):
    """Opens the measured window, or closes one of its periods."""
    for unit in range(len(whole)):
        on_road = whole[unit, LOAD] - whole[unit, OCCUPIED]
        if period < 0:
            since[unit, SINCE_OCCUPIED] = edge
            since[unit, SINCE_GATES] = edge
            since[unit, SINCE_STAFFED] = edge
            counts[unit, ON_ROAD_AT_START] = on_road
        else:
            occupancy_days[period, unit, whole[unit, OCCUPIED]] += edge - since[unit, SINCE_OCCUPIED]
            gate_days[unit, whole[unit, GATE_STATE]] += edge - since[unit, SINCE_GATES]
            since[unit, SINCE_OCCUPIED] = edge
            since[unit, SINCE_GATES] = edge
            settle_staffed(staffed_days, whole, since, period, unit, edge)
            counts[unit, ON_ROAD_AT_END] = on_road


# numba leaves out what follows `is None` only where the argument itself is None: hence these small functions.


@compiled
def next_time(timetable, counters, which):
    """When the next event of a timetable is due."""
    if timetable is None:
        return NEVER
    place = counters[which]
    return timetable[place] if place < len(timetable) else NEVER


@compiled
def timer_before(now, is_queued, staffing_times, review_times, counters):
    """Which timer comes before the event at `now`: after a pending event of one time, before a new arrival."""
    if staffing_times is None and review_times is None:
        return NO_TIMER
    staffing = next_time(staffing_times, counters, NEXT_STAFFING)
    review = next_time(review_times, counters, NEXT_REVIEW)
    first = min(staffing, review)
    if first > now or (first == now and is_queued):
        return NO_TIMER
    return STAFFING if staffing <= review else REVIEW


@compiled
def timer_time(timer, staffing_times, review_times, counters):
    """When that timer is due."""
    if timer == STAFFING:
        return next_time(staffing_times, counters, NEXT_STAFFING)
    return next_time(review_times, counters, NEXT_REVIEW)


@compiled
def change_staffing(staffing_units, staffing_beds, counters, staffed_days, whole, since, period, now):
    """Sets the staffed beds of the unit whose turn it is."""
    if staffing_units is None:
        return NOBODY
    place = counters[NEXT_STAFFING]
    counters[NEXT_STAFFING] = place + 1
    unit = staffing_units[place]
    if period >= 0:
        settle_staffed(staffed_days, whole, since, period, unit, now)
    whole[unit, BEDS] = staffing_beds[place]
    return unit


@compiled
def settle_staffed(staffed_days, whole, since, period, unit, now):
    """Adds the time at the present number of staffed beds, before it changes."""
    if staffed_days is not None:
        staffed_days[period, unit, whole[unit, BEDS]] += now - since[unit, SINCE_STAFFED]
        since[unit, SINCE_STAFFED] = now


@compiled
def review_unit(review_units, counters):
    """Whose review it is; the next one is then due."""
    if review_units is None:
        return NOBODY
    review = counters[NEXT_REVIEW]
    counters[NEXT_REVIEW] = review + 1
    return review_units[review]


@compiled
def note(note_times, notes, counters, time, kind, patient, unit):
    """One line of the trace, where there is one: its time, and kind, patient and unit."""
    if note_times is not None:
        place = counters[NOTED]
        note_times[place] = time
        notes[place, 0] = kind
        notes[place, 1] = patient
        notes[place, 2] = unit
        counters[NOTED] = place + 1


@compiled
def note_gates(note_times, notes, counters, time, unit, before, after):
    """The gates that moved, where there is a trace."""
    if note_times is not None:
        moved = before ^ after
        if moved & OWN_CLOSED:
            note(
                note_times,
                notes,
                counters,
                time,
                OWN_CLOSES_NOW if after & OWN_CLOSED else OWN_OPENS,
                NOBODY,
                unit,
            )
        if moved & INCOMING_CLOSED:
            kind = INCOMING_CLOSES_NOW if after & INCOMING_CLOSED else INCOMING_OPENS
            note(note_times, notes, counters, time, kind, NOBODY, unit)
