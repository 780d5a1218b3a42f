"""The chain of a network that starts anywhere: with patients whom its rules would not have let in.

A unit that closes earlier than it did still holds the patients that it has, until they leave. So states are
counted over all that can be reached from the start, not from the empty network alone.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from analysis.chain import network_states
from analysis.chain.gth import Transitions
from analysis.chain.layout import UnitLayout, layout, state_bound
from analysis.chain.limits import Limits
from analysis.chain.network_states import NetworkChain, UnitView
from analysis.chain.scope import OutOfScope
from analysis.chain.settled import Settled
from analysis.chain.unit_states import Gates, UnitSpace, unit_states
from sim.scenario import Policy, Scenario

Numbers = NDArray[np.float64]
Places = NDArray[np.int64]


def chain_from(
    start: Settled | None, long_run: Settled, scenario: Scenario, policy: Policy, limits: Limits
) -> tuple[NetworkChain, Numbers, Numbers]:
    """The chain over every state that can be reached from a start.

    start: where the network stands when the rules come into force; None where it is empty. long_run: its own
    chain and stationary distribution. scenario, policy: the network and these rules. limits: the largest chain.
    Returns the chain, the distribution at the start, and the long-run one, (states,) each.
    """
    units = layout(scenario, policy)
    if start is not None:
        units = tuple(_holding(unit, view) for unit, view in zip(units, start[0].units, strict=True))
    limits.check_bound(state_bound(units))
    whole = _whole_chain(scenario, policy, units)
    first = _empty(whole) if start is None else _carried(start, whole)
    chosen = _reached(whole.moves, first)
    limits.check_states(len(chosen))
    return _part(scenario, policy, whole, chosen), first[chosen], _carried(long_run, whole)[chosen]


@dataclass(frozen=True)
class StartedSpace(UnitSpace):
    """What bounds the states of a unit that need not have been empty at first.

    started: the loads, each with gates, that it may start with besides. Rules that have long been in force may
    never bring these about: a gate that was closed stays so until its unit is empty enough.
    """

    started: tuple[tuple[int, Gates], ...] = ()

    def levels(self) -> list[tuple[int, Gates]]:
        """Each load with each position of the gates that it can have, least load first."""
        ahead, found = list(self.started), set(super().levels())
        while ahead:
            load, gates = level = ahead.pop()
            if level not in found and 0 <= load <= self.most:
                found.add(level)
                ahead += [(other, self.gates(other, gates)) for other in (load - 1, load + 1)]
        return sorted(found, key=lambda level: (level[0], level[1].own_open, level[1].incoming_open))


def _holding(unit: UnitLayout, before: UnitView) -> UnitLayout:
    """The unit with room in its states for the patients and the gates that it had before."""
    rates, arrivals = _phases_of_both(unit, before.layout)
    space = replace(unit.space, most=max(unit.space.most, before.layout.space.most), phases=len(rates))
    started = dict.fromkeys(zip(before.own.load.tolist(), _gates_now(before, space), strict=True))
    return replace(
        unit,
        phase_rates=rates,
        arrivals=arrivals,
        space=StartedSpace(**vars(space), started=tuple(started)),
    )


def _phases_of_both(
    unit: UnitLayout, before: UnitLayout
) -> tuple[tuple[float, ...], Mapping[str, tuple[float, ...]]]:
    """The rates of every phase that a unit's patients are in or were in before, and its arrivals by them.

    Raises OutOfScope where the two differ and stays have phases that lead on: such phases are not matched.
    """
    if (unit.phase_rates, unit.onward) == (before.phase_rates, before.onward):
        return unit.phase_rates, unit.arrivals
    if unit.onward or before.onward:
        raise OutOfScope(
            [
                f"units.{unit.name}: patients in other phases than before could be treated there, and phases that "
                "lead on are not matched; start from the empty network, or give exponential stays (--exponential)"
            ]
        )
    rates = tuple(sorted({*unit.phase_rates, *before.phase_rates}))
    per_day = {home: dict(zip(unit.phase_rates, each, strict=True)) for home, each in unit.arrivals.items()}
    return rates, {home: tuple(each.get(rate, 0.0) for rate in rates) for home, each in per_day.items()}


def _gates(view: UnitView) -> Iterator[Gates]:
    """The gates in each of a unit's own states."""
    return map(Gates, view.own.own_open.tolist(), view.own.incoming_open.tolist())


def _gates_now(view: UnitView, space: UnitSpace) -> Iterator[Gates]:
    """The same once the rules of another space come into force."""
    return map(space.gates, view.own.load.tolist(), _gates(view))


def _whole_chain(scenario: Scenario, policy: Policy, units: tuple[UnitLayout, ...]) -> NetworkChain:
    """The chain over every combination of the units' states, the last unit's running fastest."""
    spaces = [unit_states(unit.space) for unit in units]
    places = np.indices([own.size for own in spaces]).reshape(len(spaces), -1)
    views = tuple(map(UnitView, units, spaces, places))
    homes = network_states._homes(scenario, policy, views)
    moves = network_states._moves(views, network_states._strides(spaces), homes)
    return NetworkChain(views, homes, Transitions(*moves, places.shape[1]))


def _empty(whole: NetworkChain) -> Numbers:
    probability = np.zeros(whole.moves.states)
    probability[0] = 1.0
    return probability


def _carried(source: Settled, whole: NetworkChain) -> Numbers:
    """A distribution of another chain over the states of this one, gates moved as the rules here say."""
    chain, probability = source
    place = np.zeros(len(probability), dtype=np.int64)
    for view, own in zip(chain.units, whole.units, strict=True):
        place = place * own.own.size + _places(view, own)[view.place]
    return np.bincount(place, weights=probability, minlength=whole.moves.states)


def _places(view: UnitView, target: UnitView) -> Places:
    """The state of the target that each of a unit's own states becomes, (own states,)."""
    known = _numbered(target)
    mine, theirs = view.layout.phase_rates, target.layout.phase_rates
    columns = list(range(len(mine))) if mine == theirs else [theirs.index(rate) for rate in mine]
    counts = np.zeros((view.own.size, len(theirs)), dtype=np.int64)
    counts[:, columns] = view.own.counts
    gates = _gates_now(view, target.layout.space)
    return np.array([known[tuple(row), now] for row, now in zip(counts.tolist(), gates, strict=True)])


def _numbered(view: UnitView) -> Mapping[tuple[tuple[int, ...], Gates], int]:
    """Patients by rate and gates -> the unit's own state."""
    states = zip(map(tuple, view.own.counts.tolist()), _gates(view), strict=True)
    return {state: number for number, state in enumerate(states)}


def _reached(moves: Transitions, start: Numbers) -> Places:
    """The states that can be reached from any with a chance at the start, in ascending order."""
    from scipy.sparse import csgraph, csr_array

    beginning, outside = np.flatnonzero(start), moves.states  # one state more, from which all of them follow
    origin = np.append(moves.origin, np.full(len(beginning), outside))
    target = np.append(moves.target, beginning)
    graph = csr_array((np.ones(len(origin)), (origin, target)), shape=(outside + 1, outside + 1))
    return np.sort(csgraph.breadth_first_order(graph, outside, return_predecessors=False)[1:])


def _part(scenario: Scenario, policy: Policy, whole: NetworkChain, chosen: Places) -> NetworkChain:
    """The chain over some of its states only, which no move leaves."""
    views = tuple(replace(view, place=view.place[chosen]) for view in whole.units)
    moves = whole.moves
    kept = network_states._renumbered((moves.origin, moves.target, moves.rate), chosen, moves.states)
    return NetworkChain(views, network_states._homes(scenario, policy, views), kept)
