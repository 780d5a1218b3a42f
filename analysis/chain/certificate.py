"""An answer is handed on only with a proof: balance in every state, and of every rate in every unit."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from analysis.chain.gth import Transitions
from analysis.chain.network_states import NetworkChain, UnitView
from analysis.chain.occupancy_measures import Observed
from sim.errors import RunError

Numbers = NDArray[np.float64]

RELATIVE = 1e-9
RELAXED = 1e-11  # admissions and discharges where sweeps, not an elimination, gave the answer
# Below this the range of a float, not the elimination, limits the relative accuracy of a probability.
NEGLIGIBLE = 1e-280


def certify(chain: NetworkChain, probability: Numbers) -> None:
    """Raises RunError unless `probability`, shape (states,), solves the chain.

    It must be a distribution; the flow into each state must equal that out of it, relative to itself, by the
    transitions and not by what the elimination made of them; and in each unit the patients a day who begin a
    phase of their stay must be the mean number of patients in it times the rate at which it ends (Little's law).
    """
    if not (probability >= 0).all():
        raise RunError("the chain's answer holds an undefined probability; please report this scenario")
    _equal("the probabilities do not add up to 1", probability.sum(), 1.0)
    _equal("the flows into and out of a state differ", *_state_flows(chain.moves, probability))
    for view in chain.units:
        complaint = f"admissions and discharges of {view.layout.name} differ"
        _equal(complaint, *_phase_flows(view, chain, probability))


def _state_flows(moves: Transitions, probability: Numbers) -> tuple[Numbers, Numbers]:
    """Moves a day into and out of each state, (states,) each."""
    flow = probability[moves.origin] * moves.rate
    into = np.bincount(moves.target, weights=flow, minlength=moves.states)
    return into, np.bincount(moves.origin, weights=flow, minlength=moves.states)


def _phase_flows(view: UnitView, chain: NetworkChain, probability: Numbers) -> tuple[Numbers, Numbers]:
    """Patients a day who begin a phase, by admission or after another, and who end it, (phases,) each."""
    ended = (probability @ view.own.counts[view.place]) * np.array(view.layout.phase_rates)
    begun = np.zeros(len(ended))
    for home, per_day in view.layout.arrivals.items():
        share = chain.homes[home].admitted[view.layout.name]
        begun += np.array(per_day) * (share @ probability)
    for (phase, after), share in view.layout.onward.items():
        begun[after] += share * ended[phase]
    return begun, ended


def is_certified(observed: Observed) -> NDArray[np.bool_]:
    """Whether each of several solutions, (cells,), passes the same checks."""
    admitted, discharged = admissions_and_discharges(observed)
    positive = (observed.time >= 0).all(axis=1)
    flows = (_gap(admitted, discharged) <= RELATIVE).all(axis=0)
    return positive & (_gap(observed.total, 1.0) <= RELATIVE) & (observed.imbalance <= RELATIVE) & flows


def certify_observed(observed: Observed) -> None:
    """Raises RunError unless a relaxed solution passes: as `certify`, with less allowed in admissions.

    Balance in each state says little where a chain settles slowly; what comes into and leaves a unit says more.
    """
    if not ((observed.time >= 0).all() and (np.concatenate(observed.occupancy, axis=1) >= 0).all()):
        raise RunError("a share of time is negative or undefined")
    _equal("the probabilities do not add up to 1", observed.total, 1.0)
    _equal("the flows into and out of a state differ", 1 + observed.imbalance, 1.0)
    admitted, discharged = admissions_and_discharges(observed)
    for name, *flows in zip(observed.table.names, admitted, discharged, strict=True):
        _equal(f"admissions and discharges of {name} differ", *flows, limit=RELAXED)


def admissions_and_discharges(observed: Observed) -> tuple[Numbers, Numbers]:
    """Admissions by the routes and discharges by the occupancy, a day, (units, cells) each."""
    return observed.table.admissions() @ observed.time.T, observed.mean_occupied() * observed.leaving[:, None]


def _gap(found: Numbers | float, expected: Numbers | float) -> Numbers:
    return np.abs(found - expected) / np.maximum(np.abs(expected), NEGLIGIBLE)


def _equal(
    complaint: str, found: Numbers | float, expected: Numbers | float, limit: float = RELATIVE
) -> None:
    worst = float(np.max(_gap(found, expected), initial=0.0))
    if not worst <= limit:
        raise RunError(
            f"the chain's answer failed its check: {complaint} by {worst:.1e} of their size, "
            f"the limit is {limit:.0e}; please report this scenario, and simulate instead"
        )
