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
def sweep(probability, reached, sizes, codes, births, leaving, weight, backward):
    """One sweep over all states, in place; `weight` 1 is Gauss-Seidel, above it over-relaxation.

    backward: from the last state to the first.
    Returns the greatest change of a probability relative to itself, and the sum of all changes.
    """
    strides, last = strides_of(sizes), len(sizes) - 1
    loads, row_length, worst, moved = np.zeros(len(sizes), dtype=np.int64), sizes[last], 0.0, 0.0
    lower, apart, upper = np.zeros_like(sizes), np.zeros_like(sizes), np.zeros_like(sizes)
    total, doors = births.sum(axis=0), codes[last]
    rows = len(probability) // row_length
    for turn in range(rows):
        start = (rows - 1 - turn if backward else turn) * row_length
        loads_at(start, strides, loads)
        neighbours(loads, sizes, codes, strides, lower, apart, upper)
        row, discharges = combination(loads, codes) - doors[0], 0.0
        for unit in range(last):
            discharges += loads[unit] * leaving[unit]
        for step in range(row_length):
            load = row_length - 1 - step if backward else step
            state = start + load
            if not reached[state]:
                continue
            number, into = row + doors[load], 0.0
            if load > 0:
                into += probability[state - 1] * births[last, row + doors[load - 1]]
            if load + 1 < row_length:
                into += probability[state + 1] * ((load + 1) * leaving[last])
            for unit in range(last):
                if lower[unit] > 0:
                    into += probability[state - lower[unit]] * births[unit, number - apart[unit]]
                if upper[unit] > 0:
                    into += probability[state + upper[unit]] * ((loads[unit] + 1) * leaving[unit])
            out = total[number] + discharges + load * leaving[last]
            if out == 0.0:  # nobody comes to an empty network
                continue
            before = probability[state]
            change = weight * (into / out - before)
            probability[state] = before + change
            moved += abs(change)
            if abs(change) > worst * max(before, NEGLIGIBLE):
                worst = abs(change) / max(before, NEGLIGIBLE)
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
