"""Any number of units, each state an occupancy vector, as a box without any stored transition.

Arguments that return: `sizes`, loads that each unit can have, (units,), the last unit's load changing fastest;
`codes`, what each unit's load adds to the number of the combination of doors, (units, most loads);
`births`, admissions a day to each unit by combination, (units, combinations); `leaving`, discharge rates, (units,).
A probability, or a flag, is an array over the box.
"""

import numpy as np

from analysis.chain.kernels import compiled

NEGLIGIBLE = 1e-280


@compiled
def strides_of(sizes):
    """How far apart in the box two states are that differ by one patient in a unit, (units,)."""
    strides = np.ones(len(sizes), dtype=np.int64)
    for unit in range(len(sizes) - 2, -1, -1):
        strides[unit] = strides[unit + 1] * sizes[unit + 1]
    return strides


@compiled
def loads_at(state, strides, loads):
    """The loads of a state, into `loads`."""
    for unit in range(len(strides)):
        loads[unit] = state // strides[unit]
        state -= loads[unit] * strides[unit]


@compiled
def advance(loads, sizes):
    """The loads of the next state, in place."""
    for unit in range(len(sizes) - 1, -1, -1):
        loads[unit] += 1
        if loads[unit] < sizes[unit]:
            return
        loads[unit] = 0


@compiled
def retreat(loads, sizes):
    """The loads of the state before, in place."""
    for unit in range(len(sizes) - 1, -1, -1):
        loads[unit] -= 1
        if loads[unit] >= 0:
            return
        loads[unit] = sizes[unit] - 1


@compiled
def combination(loads, codes):
    """The number of the combination of doors."""
    number = 0
    for unit in range(len(loads)):
        number += codes[unit, loads[unit]]
    return number


@compiled
def reachable(sizes, codes, births):
    """Whether the empty network reaches each state: by admissions forwards and discharges backwards in turn."""
    strides, states = strides_of(sizes), sizes.prod()
    reached, loads = np.zeros(states, dtype=np.bool_), np.zeros(len(sizes), dtype=np.int64)
    reached[0], found, before = True, 1, 0
    while found > before:
        before = found
        loads[:] = 0
        for state in range(states):
            if reached[state]:
                number = combination(loads, codes)
                for unit in range(len(sizes)):
                    if births[unit, number] > 0.0 and loads[unit] + 1 < sizes[unit]:
                        found += not reached[state + strides[unit]]
                        reached[state + strides[unit]] = True
            advance(loads, sizes)
        for state in range(states - 1, -1, -1):
            retreat(loads, sizes)
            if reached[state]:
                for unit in range(len(sizes)):
                    if loads[unit] > 0:
                        found += not reached[state - strides[unit]]
                        reached[state - strides[unit]] = True
    return reached


@compiled
def worst_balance(probability, sizes, codes, births, leaving):
    """The greatest difference of the flows into and out of a state, relative to the flow out of it.

    Flows are sent out state by state, the other way round than the solvers gather them. A move that leaves the
    box counts as lost, and shows.
    """
    strides, states = strides_of(sizes), len(probability)
    into, out = np.zeros(states), np.zeros(states)
    loads = np.zeros(len(sizes), dtype=np.int64)
    for state in range(states):
        weight, number = probability[state], combination(loads, codes)
        for unit in range(len(sizes)):
            if loads[unit] > 0:
                flow = weight * loads[unit] * leaving[unit]
                into[state - strides[unit]] += flow
                out[state] += flow
            if births[unit, number] > 0.0:
                flow = weight * births[unit, number]
                out[state] += flow
                if loads[unit] + 1 < sizes[unit]:
                    into[state + strides[unit]] += flow
        advance(loads, sizes)
    worst = 0.0
    for state in range(states):
        gap = abs(into[state] - out[state]) / max(out[state], NEGLIGIBLE)
        if np.isnan(gap):
            return gap
        worst = max(worst, gap)
    return worst


@compiled
def observe(probability, sizes, codes, combinations):
    """The units' occupancies, (units, most loads), and the time at each combination of doors."""
    occupancy, time = np.zeros(codes.shape), np.zeros(combinations)
    loads = np.zeros(len(sizes), dtype=np.int64)
    for state in range(len(probability)):
        time[combination(loads, codes)] += probability[state]
        for unit in range(len(sizes)):
            occupancy[unit, loads[unit]] += probability[state]
        advance(loads, sizes)
    return occupancy, time
