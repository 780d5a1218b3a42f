"""The chain of a whole network: its states, who goes where in each, and its transitions."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from analysis.chain.gth import Transitions
from analysis.chain.layout import UnitLayout, layout, state_bound
from analysis.chain.limits import Limits
from analysis.chain.routing import Doors, Split, split_arrivals
from analysis.chain.unit_states import UnitStates, unit_states
from sim.errors import RunError
from sim.scenario import Policy, Scenario

Places = NDArray[np.int64]
Homes = Mapping[str, Split]
Moves = tuple[Places, Places, NDArray[np.float64]]


@dataclass(frozen=True)
class UnitView:
    """One unit in every state of the network.

    layout, own: the unit and its own states. place: which of these it is in, shape (states,).
    """

    layout: UnitLayout
    own: UnitStates
    place: Places

    @property
    def load(self) -> NDArray[np.int64]:
        """Occupied beds, (states,)."""
        return self.own.load[self.place]

    @property
    def doors(self) -> Doors:
        """What an arriving patient meets."""
        free = self.load < self.layout.beds
        return Doors(free, self.own.own_open[self.place], self.own.incoming_open[self.place])


@dataclass(frozen=True)
class NetworkChain:
    """The chain of a network over the states that it can reach from the empty one.

    units: each unit in file order. homes: home unit -> where its arrivals go. moves: the transitions.
    """

    units: tuple[UnitView, ...]
    homes: Homes
    moves: Transitions


def network_chain(scenario: Scenario, policy: Policy, limits: Limits) -> NetworkChain:
    """The chain of a scenario within the chain's scope, its states in an order that keeps its band narrow.

    Raises ChainTooLarge where it has more states than the limits allow.
    """
    units = layout(scenario, policy)
    limits.check_bound(state_bound(units))
    spaces = [unit_states(unit.space) for unit in units]
    strides = _strides(spaces)
    every = np.arange(strides[0] * spaces[0].size)
    places = [every // stride % own.size for stride, own in zip(strides, spaces, strict=True)]
    views = tuple(map(UnitView, units, spaces, places))
    moves = _moves(views, strides, _homes(scenario, policy, views))
    chosen = _ordered_states(moves, len(every), limits)
    kept = tuple(replace(view, place=view.place[chosen]) for view in views)
    return NetworkChain(kept, _homes(scenario, policy, kept), _renumbered(moves, chosen, len(every)))


def _strides(spaces: Sequence[UnitStates]) -> list[int]:
    """How far apart two states of the network are that differ by one in a unit's place."""
    strides = [1]
    for own in reversed(spaces[1:]):
        strides.insert(0, strides[0] * own.size)
    return strides


def _homes(scenario: Scenario, policy: Policy, views: Sequence[UnitView]) -> Homes:
    doors = {view.layout.name: view.doors for view in views}
    homes = {group.home for group in scenario.patients}
    names = [name for name in scenario.unit_names if name in homes]
    return {name: split_arrivals(name, policy.units[name], policy.when_all_closed, doors) for name in names}


def _moves(views: Sequence[UnitView], strides: Sequence[int], homes: Homes) -> Moves:
    """Every admission, discharge and step to a next phase, from any state whether reached or not."""
    none = np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64), np.empty(0)
    parts = (none, *_admissions(views, strides, homes), *_discharges(views, strides), *_steps(views, strides))
    origin, target, rate = map(np.concatenate, zip(*parts, strict=True))
    return origin, target, rate


def _admissions(views: Sequence[UnitView], strides: Sequence[int], homes: Homes) -> Iterator[Moves]:
    for view, stride in zip(views, strides, strict=True):
        for home, per_day in view.layout.arrivals.items():
            share = homes[home].admitted[view.layout.name]
            origin = np.flatnonzero(share)
            for phase, arrivals in enumerate(per_day):
                if arrivals > 0:
                    target = _target(view, stride, origin, view.own.after_admission[:, phase])
                    yield origin, target, arrivals * share[origin]


def _discharges(views: Sequence[UnitView], strides: Sequence[int]) -> Iterator[Moves]:
    for view, stride in zip(views, strides, strict=True):
        for phase, per_day in enumerate(view.layout.discharge_rates):
            if per_day > 0:
                yield _ended(view, stride, phase, per_day, view.own.after_discharge[:, phase])


def _steps(views: Sequence[UnitView], strides: Sequence[int]) -> Iterator[Moves]:
    for view, stride in zip(views, strides, strict=True):
        for place, (phase, after) in enumerate(view.layout.space.steps):
            per_day = view.layout.phase_rates[phase] * view.layout.onward[phase, after]
            yield _ended(view, stride, phase, per_day, view.own.after_step[:, place])


def _ended(view: UnitView, stride: int, phase: int, per_day: float, after: Places) -> Moves:
    """The moves of patients who leave a phase in one way, each `per_day`. after: as for `_target`."""
    patients = view.own.counts[view.place, phase]
    origin = np.flatnonzero(patients)
    return origin, _target(view, stride, origin, after), per_day * patients[origin]


def _target(view: UnitView, stride: int, origin: Places, after: Places) -> Places:
    """The states that a change of one unit leads to. after: its own next state, shape (own states,)."""
    place = view.place[origin]
    if (after[place] < 0).any():
        raise RunError(f"the chain placed a patient in {view.layout.name} where it has no state for one")
    return origin + (after[place] - place) * stride


def _ordered_states(moves: Moves, states: int, limits: Limits) -> Places:
    """The states that can be reached from the empty network, neighbours close to each other in the order.

    The order of Cuthill & McKee, "Reducing the bandwidth of sparse symmetric matrices", ACM (1969), and not
    its usual reverse, because the elimination starts from the last state.
    """
    from scipy.sparse import csgraph, csr_array

    origin, target, rate = moves
    graph = csr_array((rate, (origin, target)), shape=(states, states))
    reached = np.sort(csgraph.breadth_first_order(graph, 0, return_predecessors=False))
    limits.check_states(len(reached))
    return reached[csgraph.reverse_cuthill_mckee(graph[reached][:, reached])[::-1]]


def _renumbered(moves: Moves, chosen: Places, states: int) -> Transitions:
    """The transitions among the chosen states, these numbered in their order."""
    number = np.full(states, -1)
    number[chosen] = np.arange(len(chosen))
    origin, target, rate = moves
    kept = number[origin] >= 0
    return Transitions(number[origin[kept]], number[target[kept]], rate[kept], len(chosen))
