"""The exact measures of a scenario under one policy."""

from __future__ import annotations

from analysis.chain.box import box_of, is_box
from analysis.chain.certificate import certify
from analysis.chain.gth import band_of, stationary
from analysis.chain.layout import UnitLayout, layout, state_bound
from analysis.chain.limits import DEFAULT, ChainTooLarge, Limits
from analysis.chain.measures import ExactResult, measured
from analysis.chain.network_states import network_chain
from analysis.chain.occupancy_measures import results
from analysis.chain.relaxation import relaxed
from analysis.chain.scope import OutOfScope, refusals
from sim.errors import RunError
from sim.scenario import Policy, Scenario

ELIMINATED = 2_000  # states up to which the elimination is quick enough where relaxation would do


def solve(scenario: Scenario, policy: Policy, *, limits: Limits = DEFAULT) -> ExactResult:
    """The exact long-run measures of a network whose stays are all made of exponential phases.

    scenario: the network. policy: the rules that it is run by. limits: the largest chain to attempt.
    Returns the measures, certified by the chain's own balance equations. Chains of occupancies alone are
    relaxed where they are large, all others eliminated.
    Raises OutOfScope with every reason, ChainTooLarge, and RunError where no method gives a certified answer.
    """
    if reasons := refusals(scenario, policy):
        raise OutOfScope(reasons)
    units = layout(scenario, policy)
    if len(units) == 1 or not is_box(units) or state_bound(units) <= ELIMINATED:
        return _eliminated(scenario, policy, limits)
    try:
        return _relaxed(scenario, policy, units, limits)
    except RunError as failure:
        return _eliminated_instead(scenario, policy, limits, failure)


def _eliminated(scenario: Scenario, policy: Policy, limits: Limits) -> ExactResult:
    chain = network_chain(scenario, policy, limits)
    band = band_of(chain.moves)
    limits.check_band(band.states, width=band.width, work=band.work, size=band.bytes)
    probability = stationary(chain.moves, band)
    certify(chain, probability)
    return measured(scenario, policy, chain, probability)


def _relaxed(
    scenario: Scenario, policy: Policy, units: tuple[UnitLayout, ...], limits: Limits
) -> ExactResult:
    limits.check_bound(state_bound(units), relaxed=True)
    box = box_of(scenario, policy, units)
    reached = box.reached()
    limits.check_states(int(reached.sum()), relaxed=True)
    (result,) = results(scenario, [policy], relaxed(box, reached))
    return result


def _eliminated_instead(scenario: Scenario, policy: Policy, limits: Limits, failure: RunError) -> ExactResult:
    """Where no relaxation is certified: by elimination, or that failure where this would be too large."""
    try:
        return _eliminated(scenario, policy, limits)
    except ChainTooLarge:
        raise failure from None


def chain_size(scenario: Scenario, policy: Policy) -> int | None:
    """An upper bound of the states that `solve` would count, without building any; None if out of scope.

    Most often it is the number itself. 10**15 stands for itself and all above.
    """
    return None if refusals(scenario, policy) else state_bound(layout(scenario, policy))
