"""The exact measures of a scenario under one policy."""

from __future__ import annotations

from analysis.chain.certificate import certify
from analysis.chain.gth import band_of, stationary
from analysis.chain.layout import layout, state_bound
from analysis.chain.limits import DEFAULT, Limits
from analysis.chain.measures import ExactResult, measured
from analysis.chain.network_states import network_chain
from analysis.chain.scope import OutOfScope, refusals
from sim.scenario import Policy, Scenario


def solve(scenario: Scenario, policy: Policy, *, limits: Limits = DEFAULT) -> ExactResult:
    """The exact long-run measures of a network whose stays are all made of exponential phases.

    scenario: the network. policy: the rules that it is run by. limits: the largest chain to attempt.
    Returns the measures, certified by the chain's own balance equations.
    Raises OutOfScope with every reason, ChainTooLarge, and RunError where the certificate fails.
    """
    if reasons := refusals(scenario, policy):
        raise OutOfScope(reasons)
    chain = network_chain(scenario, policy, limits)
    band = band_of(chain.moves)
    limits.check_band(band.states, width=band.width, work=band.work, size=band.bytes)
    probability = stationary(chain.moves, band)
    certify(chain, probability)
    return measured(scenario, policy, chain, probability)


def chain_size(scenario: Scenario, policy: Policy) -> int | None:
    """An upper bound of the states that `solve` would count, without building any; None if out of scope.

    Most often it is the number itself. 10**15 stands for itself and all above.
    """
    return None if refusals(scenario, policy) else state_bound(layout(scenario, policy))
