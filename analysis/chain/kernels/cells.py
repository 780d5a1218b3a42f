"""The cells of a table that differ in one unit's closure threshold only, with what each has to tell.

Names as in `levels`. Reached states and balance are found from the transitions, apart from the elimination.
"""

import numpy as np

from analysis.chain.kernels import compiled
from analysis.chain.kernels.levels import climb, descend, distribution, door_of

NEGLIGIBLE = 1e-280


@compiled
def solve_line(thresholds, incoming, beds, to_level, to_phase, doors, leaving):
    """Cells by the level unit's threshold: occupancies, time by doors, states, total, greatest imbalance.

    thresholds: of the unit of the levels, (cells,). incoming: its incoming threshold, or `beds` where it
    follows. to_level, to_phase: admissions a day by the doors of both, (4, 4). doors: of the other unit, by phase.
    Returns (cells, beds + 1), (cells, phases), (cells, 4, 4), (cells,), (cells,), (cells,).
    """
    cells, size = len(thresholds), len(doors)
    passing, local = to_level[:, doors], to_phase[:, doors]
    up, reached = climb(thresholds.max(), incoming, passing, local, leaving)
    down = descend(thresholds.min(), beds, passing, local, leaving)
    of_level, of_phase = np.zeros((cells, beds + 1)), np.zeros((cells, size))
    time, states = np.zeros((cells, 4, 4)), np.empty(cells, dtype=np.int64)
    total, imbalance = np.empty(cells), np.empty(cells)
    level_doors = np.empty(beds + 1, dtype=np.int64)
    for cell in range(cells):
        for level in range(beds + 1):
            level_doors[level] = door_of(level, thresholds[cell], incoming, beds)
        weights = distribution(thresholds[cell], incoming, up, reached, down, passing, local, leaving)
        observe(weights, level_doors, doors, of_level[cell], of_phase[cell], time[cell])
        total[cell] = of_level[cell].sum()
        states[cell] = count(level_doors, passing, local)
        imbalance[cell] = worst_balance(weights, level_doors, passing, local, leaving)
    return of_level, of_phase, time, states, total, imbalance


@compiled
def observe(weights, level_doors, doors, of_level, of_phase, time):
    """Adds up the occupancies of both units, and the time that they spend at each pair of doors."""
    for level in range(len(level_doors)):
        at = time[level_doors[level]]
        for phase in range(len(doors)):
            of_phase[phase] += weights[level, phase]
            of_level[level] += weights[level, phase]
            at[doors[phase]] += weights[level, phase]


@compiled
def count(level_doors, passing, local):
    """The number of states that the empty network reaches: with each, all that hold fewer patients."""
    levels, phases = len(level_doors), passing.shape[1]
    tops, changed = np.full(levels, -1), True  # the highest phase reached at each level
    tops[0] = 0
    while changed:
        changed = False
        for level in range(levels):
            door = level_doors[level]
            if 0 <= tops[level] < phases - 1 and local[door, tops[level]] > 0.0:
                tops[level], changed = climb_phases(tops[level], local[door]), True
            if level + 1 < levels:
                above = highest(tops[level], passing[door])
                if above > tops[level + 1]:
                    tops[level + 1], changed = above, True
        for level in range(levels - 1, 0, -1):
            if tops[level] > tops[level - 1]:
                tops[level - 1], changed = tops[level], True
    return (tops + 1).sum()


@compiled
def climb_phases(phase, local):
    """The highest phase that admissions lead to."""
    while phase + 1 < len(local) and local[phase] > 0.0:
        phase += 1
    return phase


@compiled
def highest(phase, passing):
    """The highest phase up to this one from which the level above is entered; -1 where there is none."""
    while phase >= 0 and not passing[phase] > 0.0:
        phase -= 1
    return phase


@compiled
def worst_balance(weights, level_doors, passing, local, leaving):
    """The greatest difference of the flows into and out of a state, relative to the flow out of it."""
    levels, phases = weights.shape
    into = np.zeros((levels + 1, phases + 1))
    worst = 0.0
    for level in range(levels):
        up, along = passing[level_doors[level]], local[level_doors[level]]
        for phase in range(phases):
            weight = weights[level, phase]
            into[level + 1, phase] += weight * up[phase]
            into[level, phase + 1] += weight * along[phase]
            into[level - 1, phase] += weight * (level * leaving[0])
            into[level, phase - 1] += weight * (phase * leaving[1])
    for level in range(levels):
        up, along = passing[level_doors[level]], local[level_doors[level]]
        for phase in range(phases):
            rate = up[phase] + along[phase] + level * leaving[0] + phase * leaving[1]
            out = weights[level, phase] * rate
            gap = abs(into[level, phase] - out)
            if not gap <= worst * max(out, NEGLIGIBLE):
                worst = gap / max(out, NEGLIGIBLE)
                if np.isnan(worst):
                    return worst
    return worst
