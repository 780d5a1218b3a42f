"""Relaxation of the balance equations of a box: sweeps, and aggregation by the load of each unit.

Names as in `grid`. Successive over-relaxation: Young (1950); aggregation between sweeps: Takahashi (1975),
Koury, McAllister & Stewart (1984). From memory.
"""

import numpy as np

from analysis.chain.kernels import compiled
from analysis.chain.kernels.grid import NEGLIGIBLE, advance, combination, loads_at, strides_of


@compiled
def neighbours(loads, sizes, codes, strides, lower, apart, upper):
    """Fills in where the states of a row, all loads of the last unit, get patients from by the other units.

    lower: distance to the state with one patient fewer, 0 where there is none. apart: the difference of its
    combination's number. upper: distance to the state with one patient more, 0 where there is none.
    """
    for unit in range(len(sizes) - 1):
        load = loads[unit]
        lower[unit] = strides[unit] if load > 0 else 0
        apart[unit] = codes[unit, load] - codes[unit, load - 1] if load > 0 else 0
        upper[unit] = strides[unit] if load + 1 < sizes[unit] else 0


@compiled
def relax(probability, state, flow, out, weight):
    """Moves a state's probability towards its inflow over its rate out; the change, relative and absolute."""
    if out == 0.0:  # nobody comes to an empty network
        return 0.0, 0.0
    before = probability[state]
    change = weight * (flow / out - before)
    probability[state] = before + change
    return abs(change) / max(before, NEGLIGIBLE), abs(change)


@compiled
def sweep_row(probability, reached, start, row, around, rates, doors, births, total, weight, backward):
    """One sweep over the states of a row; the greatest relative change, and the sum of all.

    start: the row's first state. row: its other units' part of the combination's number. around: lower, apart,
    upper as `neighbours` fills them. rates: of discharges with one patient more, by unit, (the last one's for a
    single patient), then of all discharges of the other units.
    """
    (lower, apart, upper), last, length, worst, moved = around, len(rates) - 2, len(doors), 0.0, 0.0
    for step in range(length):
        load = length - 1 - step if backward else step
        state, number, flow = start + load, row + doors[load], 0.0
        if not reached[state]:
            continue
        if load > 0:
            flow += probability[state - 1] * births[last, row + doors[load - 1]]
        if load + 1 < length:
            flow += probability[state + 1] * ((load + 1) * rates[last])
        for unit in range(last):
            if lower[unit] > 0:
                flow += probability[state - lower[unit]] * births[unit, number - apart[unit]]
            if upper[unit] > 0:
                flow += probability[state + upper[unit]] * rates[unit]
        out = total[number] + rates[last + 1] + load * rates[last]
        relative, change = relax(probability, state, flow, out, weight)
        worst, moved = max(worst, relative), moved + change
    return worst, moved


@compiled
def sweep(probability, reached, sizes, codes, births, leaving, weight, backward):
    """One sweep over all states, in place; `weight` 1 is Gauss-Seidel, above it over-relaxation.

    backward: from the last state to the first.
    Returns the greatest change of a probability relative to itself, and the sum of all changes.
    """
    strides, last = strides_of(sizes), len(sizes) - 1
    length, loads, rates = sizes[last], np.zeros_like(sizes), np.zeros(last + 2)
    around = (np.zeros_like(sizes), np.zeros_like(sizes), np.zeros_like(sizes))
    doors, total, worst, moved = codes[last, :length], births.sum(axis=0), 0.0, 0.0
    rows = len(probability) // length
    for turn in range(rows):
        start = (rows - 1 - turn if backward else turn) * length
        loads_at(start, strides, loads)
        neighbours(loads, sizes, codes, strides, *around)
        rates[:-1] = (loads + 1) * leaving
        rates[last + 1] = (loads * leaving).sum()
        row = combination(loads, codes) - doors[0]
        changes = sweep_row(
            probability, reached, start, row, around, rates, doors, births, total, weight, backward
        )
        worst, moved = max(worst, changes[0]), moved + changes[1]
    return worst, moved


@compiled
def cuts(probability, sizes, codes, births, unit):
    """The weight of the states of each load of one unit, and the admissions a day to it from there."""
    last, row_length = len(sizes) - 1, sizes[-1]
    mass, flow = np.zeros(sizes[unit]), np.zeros(sizes[unit])
    loads = np.zeros(len(sizes), dtype=np.int64)
    for start in range(0, len(probability), row_length):
        loads[last] = 0
        row = combination(loads, codes) - codes[last, 0]
        for load in range(row_length):
            at = load if unit == last else loads[unit]
            mass[at] += probability[start + load]
            flow[at] += probability[start + load] * births[unit, row + codes[last, load]]
        loads[last] = row_length - 1
        advance(loads, sizes)
    return mass, flow


@compiled
def aggregate(probability, sizes, codes, births, leaving, unit):
    """Rescales the states of each load of one unit, so that as many patients a day enter it as leave it.

    The loads of one unit alone make a birth-and-death chain, solved at once: flows across each cut are equal.
    """
    stride, size = strides_of(sizes)[unit], sizes[unit]
    mass, flow = cuts(probability, sizes, codes, births, unit)
    factor, total = np.zeros(size), mass[0]
    factor[0] = 1.0
    for load in range(1, size):
        if mass[load] > 0.0:
            factor[load] = factor[load - 1] * flow[load - 1] / (mass[load] * load * leaving[unit])
        total += factor[load] * mass[load]
    factor /= total
    for start in range(0, len(probability), stride):
        probability[start : start + stride] *= factor[start // stride % size]
