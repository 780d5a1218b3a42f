"""Two units, one as the level and one as the phase: passages up and down, joined where the level closes.

The states (level, phase) make a chain that moves by one level at a time. First-passage matrices between
neighbouring levels: Neuts, "Matrix-Geometric Solutions in Stochastic Models" (1981); reduction of one level after
another: Latouche & Ramaswami, "Introduction to Matrix Analytic Methods in Stochastic Modeling" (1999); without
a subtraction: Grassmann, Taksar & Heyman, Operations Research 33 (1985). All from memory.

Arguments that return: `passing`, `local`, (4, phases): admissions a day to the unit of the levels and to that of
the phases, by the door of the former and the phase; `leaving`, (2,): discharge rates of both. Doors: 0 open to
all, 1 open to its own, 2 closed with a bed free, 3 full.
"""

import math

import numpy as np

from analysis.chain.kernels import compiled

FADED = 2.0**-664  # about 1e-200


@compiled
def door_of(level, threshold, incoming, beds):
    """The door of the unit of the levels."""
    if level < threshold:
        return 0 if level < incoming else 1
    return 2 if level < beds else 3


@compiled
def fill(rates, local, leaving):
    """Moves within one level, between neighbouring phases. local: up from each, at the level's door."""
    rates[:] = 0.0
    for phase in range(len(local) - 1):
        rates[phase, phase + 1] = local[phase]
        rates[phase + 1, phase] = (phase + 1) * leaving


@compiled
def add_excursions(rates, away, days, back):
    """Adds the phases in which excursions to a neighbouring level end.

    away: rate of leaving for there, by phase. days: spent there before coming back, (phases, phases). back:
    rate of coming back, by phase there.
    """
    for phase in range(len(away)):
        for end in range(len(away)):
            rates[phase, end] += away[phase] * (days[phase, end] * back[end])


@compiled
def eliminate(rates, exits, inverse, gone):
    """Takes a phase out of those that remain, below it; False where it cannot be left."""
    out = exits[gone]
    for other in range(gone):
        out += rates[gone, other]
    rates[gone, gone] = out
    if not out > 0.0:
        return False
    for row in range(gone):
        share = rates[row, gone] / out
        if share > 0.0:
            exits[row] += share * exits[gone]
            for other in range(gone):
                rates[row, other] += share * rates[gone, other]
            for other in range(gone, len(exits)):
                inverse[row, other] += share * inverse[gone, other]
    return True


@compiled
def invert(rates, exits, inverse):
    """Days spent in each phase before the exit, from each: (phases, phases) into `inverse`; False if none exits.

    rates: moves between phases, overwritten. exits: the rates of leaving them all, overwritten. No subtraction:
    the rate out of a phase is the sum of those to the phases that remain, and the exit.
    """
    size = len(exits)
    inverse[:] = 0.0
    for gone in range(size - 1, -1, -1):
        inverse[gone, gone] = 1.0
        if not eliminate(rates, exits, inverse, gone):
            return False
    for row in range(size):
        for other in range(row):
            weight = rates[row, other]
            for column in range(size):
                inverse[row, column] += weight * inverse[other, column]
        scale = 1.0 / rates[row, row]
        for column in range(size):
            inverse[row, column] *= scale
    return True


@compiled
def climb(top, incoming, passing, local, leaving):
    """Days in each open level before the one above, (levels, phases, phases), and the highest level reached."""
    size = passing.shape[1]
    days, rates = np.empty((top, size, size)), np.empty((size, size))
    exits, down = np.empty(size), np.empty(size)
    for level in range(top):
        door = door_of(level, top, incoming, top)
        fill(rates, local[door], leaving[1])
        if level > 0:
            down[:] = level * leaving[0]
            add_excursions(rates, down, days[level - 1], passing[door_of(level - 1, top, incoming, top)])
        exits[:] = passing[door]
        if not invert(rates, exits, days[level]):
            return days, level
    return days, top


@compiled
def descend(bottom, beds, passing, local, leaving):
    """Days in each closed level above `bottom` before the one below, (beds + 1, phases, phases)."""
    size = passing.shape[1]
    days, rates = np.empty((beds + 1, size, size)), np.empty((size, size))
    exits, down = np.empty(size), np.empty(size)
    for level in range(beds, bottom, -1):
        fill(rates, local[door_of(level, 0, 0, beds)], leaving[1])
        if level < beds:
            down[:] = (level + 1) * leaving[0]
            add_excursions(rates, passing[2], days[level + 1], down)
        exits[:] = level * leaving[0]
        invert(rates, exits, days[level])
    return days


@compiled
def rest(rates, weights):
    """The stationary weights of the phases among themselves, into `weights`; `rates` is overwritten."""
    size = len(weights)
    for gone in range(size - 1, 0, -1):
        out = 0.0
        for other in range(gone):
            out += rates[gone, other]
        for row in range(gone):
            rates[row, gone] /= out
            share = rates[row, gone]
            if share > 0.0:
                for other in range(gone):
                    rates[row, other] += share * rates[gone, other]
    weights[0] = 1.0
    for phase in range(1, size):
        for other in range(phase):
            weights[phase] += weights[other] * rates[other, phase]
        if weights[phase] > 1e200:
            weights[: phase + 1] *= FADED


@compiled
def step(weights, source, scale, days, power):
    """weights = scale * source @ days, from one level to the next, kept near 1 by a power of two.

    scale: rate of the move, by phase. power: that of the source. Returns that of the weights.
    """
    size, total = len(source), 0.0
    for phase in range(size):
        come = source[phase] * scale[phase]
        if come > 0.0:
            for column in range(size):
                weights[column] += come * days[phase, column]
    for phase in range(size):
        total += weights[phase]
    if 1e-100 < total < 1e100 or total == 0.0:
        return power
    change = min(max(math.frexp(total)[1], -1000), 1000)
    weights *= math.ldexp(1.0, -change)
    return power + change


@compiled
def middle_level(level, is_closed, door, incoming, up, down, passing, local, leaving):
    """The stationary weights of the level where both passages meet, to within a factor, (phases,)."""
    size = passing.shape[1]
    rates, scale, weights = np.empty((size, size)), np.empty(size), np.zeros(size)
    fill(rates, local[door], leaving[1])
    if level > 0:
        scale[:] = level * leaving[0]
        below = door_of(level - 1, level, incoming, level)
        add_excursions(rates, scale, up[level - 1], passing[below])
    if is_closed and level + 1 < len(down):
        scale[:] = (level + 1) * leaving[0]
        add_excursions(rates, passing[2], down[level + 1], scale)
    rest(rates, weights)
    return weights


@compiled
def distribution(threshold, incoming, up, reached, down, passing, local, leaving):
    """The stationary probabilities of one cell, (beds + 1, phases).

    threshold, incoming: of the unit of the levels. up, reached: from `climb`. down: from `descend`.
    """
    beds, size = len(down) - 1, passing.shape[1]
    middle = min(threshold, reached)
    is_closed = middle == threshold
    door = door_of(middle, threshold, incoming, beds)
    weights, scale = np.zeros((beds + 1, size)), np.empty(size)
    power = np.zeros(beds + 1, dtype=np.int64)
    weights[middle] = middle_level(middle, is_closed, door, incoming, up, down, passing, local, leaving)
    for level in range(middle - 1, -1, -1):
        scale[:] = (level + 1) * leaving[0]
        power[level] = step(weights[level], weights[level + 1], scale, up[level], power[level + 1])
    for level in range(middle + 1, beds + 1 if is_closed else middle + 1):
        power[level] = step(weights[level], weights[level - 1], passing[2], down[level], power[level - 1])
    greatest = power.max()
    if power.min() < greatest:
        for level in range(beds + 1):
            weights[level] *= math.ldexp(1.0, max(power[level] - greatest, -2000))
    weights /= weights.sum()
    return weights
