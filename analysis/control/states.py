"""What a central controller sees and may do: the network's states, and for each arrival the places open to it.

The states are the chain's without gates: patients by unit and discharge rate. When a patient arrives, the
controller admits at the home, places in any unit of the home's referral order that has a free bed (the roads
that the units have themselves), or turns away, with a free bed or without. Nobody is moved later on. Built
here from the scenario alone, apart from the chain's own construction, so that the two guard each other.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array, csr_array

from analysis.chain import ChainTooLarge, OutOfScope, refusals
from sim.scenario import Policy, Scenario

Places = NDArray[np.int64]
Numbers = NDArray[np.float64]
Choice = str | None  # a unit's name, None for turning the patient away

MOST_STATES = 200_000
NO_STATE = -1


@dataclass(frozen=True, eq=False)
class Stream:
    """The arrivals of one group, and what may be done with each.

    choices: the home, the units of its referral order, and last None: turned away.
    after: the network's state once the choice is made, shape (choices, states); NO_STATE: no bed is free.
    """

    group: str
    home: str
    per_day: float
    mean_stay_days: float
    choices: tuple[Choice, ...]
    after: Places


@dataclass(frozen=True)
class Kind:
    """Patients that the state counts together: those of one unit who leave at one rate a day."""

    unit: str
    discharge_rate: float


@dataclass(frozen=True, eq=False)
class ControlProblem:
    """Every state of a network, what happens in it, and what may be decided.

    beds: unit -> staffed beds. kinds: what a state counts. patients: their numbers, shape (states, kinds).
    after_discharge: the state that a discharge leads to, (kinds, states); NO_STATE: nobody to discharge.
    streams: the arrivals. State 0 is the empty network.
    """

    beds: dict[str, int]
    kinds: tuple[Kind, ...]
    patients: Places
    after_discharge: Places
    streams: tuple[Stream, ...]

    @property
    def states(self) -> int:
        """The number of states."""
        return len(self.patients)

    @property
    def arrivals_per_day(self) -> float:
        """Arrivals a day over all groups."""
        return sum(stream.per_day for stream in self.streams)

    def occupied(self, unit: str) -> Places:
        """Occupied beds of a unit, (states,)."""
        return self.patients[:, [kind.unit == unit for kind in self.kinds]].sum(axis=1)

    @cached_property
    def discharges(self) -> csr_array:
        """Discharges a day from each state to each other one, (states, states)."""
        kind, origin = np.nonzero(self.after_discharge >= 0)
        rates = np.array([one.discharge_rate for one in self.kinds])
        flow = self.patients[origin, kind] * rates[kind]
        shape = (self.states, self.states)
        return coo_array((flow, (origin, self.after_discharge[kind, origin])), shape=shape).tocsr()


def control_problem(scenario: Scenario, policy: Policy) -> ControlProblem:
    """The states and choices of a network.

    policy: only its referral orders matter, the controller needs no gates.
    Raises OutOfScope where the exact chain refuses, or a stay is not exponential; ChainTooLarge.
    """
    if reasons := refusals(scenario, policy) or tuple(_with_memory(scenario)):
        raise OutOfScope(reasons)
    rates = _rates(scenario, policy)
    beds = {unit.name: unit.beds for unit in scenario.units}
    _check_size(math.prod(math.comb(beds[name] + len(mine), len(mine)) for name, mine in rates.items()))
    network = _Network({name: _UnitStates.of(beds[name], len(mine)) for name, mine in rates.items()})
    kinds = tuple(Kind(name, rate) for name, mine in rates.items() for rate in mine)
    streams = tuple(_streams(scenario, policy, rates, network))
    return ControlProblem(beds, kinds, network.patients, network.after_discharge, streams)


def _with_memory(scenario: Scenario) -> Iterator[str]:
    """Stays that the chain may model by phases, which no controller sees."""
    uniforms = np.array([0.1, 0.5, 0.9, 0.999])
    for group in scenario.patients:
        stay = group.stay.distribution()
        if not np.allclose(stay.quantile(uniforms), -stay.mean() * np.log1p(-uniforms), rtol=1e-9, atol=0):
            rule = "the stay must be exponential for the best rule of control"
            yield f"patients.{group.group}.stay: {rule}, got {group.stay.family}"


def _check_size(states: int) -> None:
    if states > MOST_STATES:
        limit = f"the best rule of control is sought among at most {MOST_STATES:,}"
        raise ChainTooLarge(states, f"{states:,} states, {limit}")


def _choices(policy: Policy, home: str) -> tuple[str, ...]:
    return (home, *policy.units[home].referral_order)


def _rates(scenario: Scenario, policy: Policy) -> dict[str, list[float]]:
    """Unit -> the distinct discharge rates a day of all whom it may treat."""
    rates: dict[str, set[float]] = {name: set() for name in scenario.unit_names}
    for group in scenario.patients:
        for unit in _choices(policy, group.home):
            rates[unit].add(_rate(scenario, unit, group.mean_stay_days))
    return {name: sorted(mine) for name, mine in rates.items()}


def _rate(scenario: Scenario, unit: str, mean_stay_days: float) -> float:
    return 1 / (mean_stay_days * scenario.unit(unit).stay_factor)


def _streams(
    scenario: Scenario, policy: Policy, rates: dict[str, list[float]], network: _Network
) -> Iterator[Stream]:
    for group in scenario.patients:
        units = _choices(policy, group.home)
        kinds = [rates[unit].index(_rate(scenario, unit, group.mean_stay_days)) for unit in units]
        placed = [network.after_admission(unit, kind) for unit, kind in zip(units, kinds, strict=True)]
        after = np.stack([*placed, np.arange(network.size)])
        yield Stream(group.group, group.home, group.per_day, group.mean_stay_days, (*units, None), after)


@dataclass(frozen=True, eq=False)
class _UnitStates:
    """One unit by itself. counts: (states, rates); after_admission, after_discharge: (rates, states)."""

    counts: Places
    after_admission: Places
    after_discharge: Places

    @classmethod
    def of(cls, beds: int, rates: int) -> _UnitStates:
        # Bars among stars: each choice of `rates` bars out of beds + rates places is one state.
        bars = list(combinations(range(beds + rates), rates))
        counts = np.diff(np.array(bars, dtype=np.int64).reshape(len(bars), rates), axis=1, prepend=-1) - 1
        place = {tuple(row): index for index, row in enumerate(counts.tolist())}

        def after(change: int) -> Places:
            moved = [counts + change * (np.arange(rates) == rate) for rate in range(rates)]
            rows = [[place.get(tuple(row), NO_STATE) for row in one.tolist()] for one in moved]
            return np.array(rows, dtype=np.int64).reshape(rates, len(counts))

        return cls(counts, after(+1), after(-1))


class _Network:
    """The units' states combined, the last unit's changing fastest."""

    def __init__(self, units: dict[str, _UnitStates]) -> None:
        self._units = units
        sizes = [len(own.counts) for own in units.values()]
        self.size = math.prod(sizes)
        places = np.unravel_index(np.arange(self.size), sizes)
        self._place = dict(zip(units, places, strict=True))
        steps = [math.prod(sizes[index + 1 :]) for index in range(len(sizes))]
        self._step = dict(zip(units, steps, strict=True))

    @property
    def patients(self) -> Places:
        return np.hstack([own.counts[self._place[name]] for name, own in self._units.items()])

    @property
    def after_discharge(self) -> Places:
        return np.vstack([self._after(name, own.after_discharge) for name, own in self._units.items()])

    def after_admission(self, unit: str, kind: int) -> Places:
        return self._after(unit, self._units[unit].after_admission[kind])

    def _after(self, unit: str, after: Places) -> Places:
        """The network's states once a unit has changed to `after`, (..., own states)."""
        place = self._place[unit]
        own = after[..., place]
        return np.where(own >= 0, np.arange(self.size) + (own - place) * self._step[unit], NO_STATE)
