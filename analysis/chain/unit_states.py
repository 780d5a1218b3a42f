"""Every state that one unit can be in, and what an admission or a discharge makes of it."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

Counts = tuple[int, ...]  # patients by phase
Change = Mapping[int, int]  # phase -> so many patients more

COUNTED = 10**15  # no chain of so many states is ever built, so nobody counts further


@dataclass(frozen=True)
class Gates:
    """Whether a unit takes its own patients, and other units'."""

    own_open: bool
    incoming_open: bool


@dataclass(frozen=True)
class UnitSpace:
    """What bounds the states of one unit.

    most: patients that it can hold under its rules. phases: number of phases that they can be in.
    closure_threshold, incoming_threshold, reopening_gap: as in the policy.
    steps: pairs of phases, the first of which can lead to the second.
    """

    most: int
    phases: int
    closure_threshold: int
    incoming_threshold: int
    reopening_gap: int
    steps: tuple[tuple[int, int], ...] = ()

    def gates(self, load: int, before: Gates) -> Gates:
        """The gates once `load` beds are occupied, given those before."""
        return Gates(
            self._gate(load, self.closure_threshold, before.own_open),
            self._gate(load, self.incoming_threshold, before.incoming_open),
        )

    def _gate(self, load: int, threshold: int, was_open: bool) -> bool:
        if load >= threshold:
            return False
        return load <= max(0, threshold - self.reopening_gap) or was_open

    def levels(self) -> list[tuple[int, Gates]]:
        """Each load with each position of the gates that it can have, least load first."""
        ahead, found = [(0, self.gates(0, Gates(True, True)))], set()
        while ahead:
            load, gates = level = ahead.pop()
            if level not in found and 0 <= load <= self.most:
                found.add(level)
                ahead += [(other, self.gates(other, gates)) for other in (load - 1, load + 1)]
        return sorted(found, key=lambda level: (level[0], level[1].own_open, level[1].incoming_open))

    @property
    def size(self) -> int:
        """The number of states, a load spread over the phases in any way; COUNTED where that is more."""
        if math.comb(self.most + self.phases, self.phases) >= COUNTED:
            return COUNTED
        return min(sum(_ways(load, self.phases) for load, _ in self.levels()), COUNTED)


def _ways(patients: int, phases: int) -> int:
    return math.comb(patients + phases - 1, patients) if phases else int(patients == 0)


def _spread(patients: int, phases: int) -> Iterator[tuple[int, ...]]:
    """Every way to have so many patients among so many phases: bars between them, in rising order."""
    if phases <= 1:
        yield (patients,) * phases
        return
    places = patients + phases - 1
    for bars in itertools.combinations(range(places), phases - 1):
        yield tuple(after - before - 1 for before, after in itertools.pairwise((-1, *bars, places)))


@dataclass(frozen=True)
class UnitStates:
    """The states of one unit as arrays.

    load: occupied beds, shape (states,). counts: patients by phase, (states, phases).
    own_open, incoming_open: the gates, (states,).
    after_admission, after_discharge: the state that a patient of a phase leads to, (states, phases); -1: none.
    after_step: the state after a patient's step from one phase to the next, (states, steps); -1: none.
    """

    load: NDArray[np.int64]
    counts: NDArray[np.int64]
    own_open: NDArray[np.bool_]
    incoming_open: NDArray[np.bool_]
    after_admission: NDArray[np.int64]
    after_discharge: NDArray[np.int64]
    after_step: NDArray[np.int64]

    @property
    def size(self) -> int:
        """The number of states."""
        return len(self.load)


@lru_cache(maxsize=64)  # a game meets the same few spaces in every cell
def unit_states(space: UnitSpace) -> UnitStates:
    """The states of a unit, state 0 the empty one; the arrays are shared and must not be written to."""
    states = [(counts, gates) for load, gates in space.levels() for counts in _spread(load, space.phases)]
    place = {state: index for index, state in enumerate(states)}
    counts = np.array([counts for counts, _ in states], dtype=np.int64).reshape(len(states), space.phases)

    def table(changes: list[Change]) -> NDArray[np.int64]:
        found = np.full((len(states), len(changes)), -1, dtype=np.int64)
        for column, change in enumerate(changes):
            for row in np.flatnonzero(_possible(counts, change, space.most)):
                found[row, column] = place.get(_changed(space, *states[row], change), -1)
        return found

    return UnitStates(
        load=counts.sum(axis=1),
        counts=counts,
        own_open=np.array([gates.own_open for _, gates in states]),
        incoming_open=np.array([gates.incoming_open for _, gates in states]),
        after_admission=table([{phase: +1} for phase in range(space.phases)]),
        after_discharge=table([{phase: -1} for phase in range(space.phases)]),
        after_step=table([{before: -1, after: +1} for before, after in space.steps]),
    )


def _possible(counts: NDArray[np.int64], change: Change, most: int) -> NDArray[np.bool_]:
    """Where no phase is left with fewer than no patients, nor the unit with too many, shape (states,)."""
    room = counts.sum(axis=1) + sum(change.values()) <= most
    return np.all([room, *(counts[:, phase] + more >= 0 for phase, more in change.items())], axis=0)


def _changed(space: UnitSpace, counts: Counts, gates: Gates, change: Change) -> tuple[Counts, Gates]:
    """Counts and gates after so many more patients of some phases; a step leaves the gates as they are."""
    changed = list(counts)
    for phase, more in change.items():
        changed[phase] += more
    return tuple(changed), space.gates(sum(changed), gates)
