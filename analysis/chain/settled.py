"""A network's chain together with its certified stationary distribution."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from analysis.chain.certificate import certify
from analysis.chain.gth import band_of, stationary
from analysis.chain.limits import Limits
from analysis.chain.network_states import NetworkChain, network_chain
from analysis.chain.scope import OutOfScope, refusals
from sim.scenario import Policy, Scenario

Settled = tuple[NetworkChain, NDArray[np.float64]]  # a chain and a distribution over its states, (states,)


def settled(scenario: Scenario, policy: Policy, limits: Limits) -> Settled:
    """The chain of a network and its long-run distribution.

    scenario: the network. policy: the rules that it is run by. limits: the largest chain to attempt.
    Raises OutOfScope with every reason, ChainTooLarge, and RunError where the certificate fails.
    """
    if reasons := refusals(scenario, policy):
        raise OutOfScope(reasons)
    chain = network_chain(scenario, policy, limits)
    band = band_of(chain.moves)
    limits.check_band(band.states, width=band.width, work=band.work, size=band.bytes)
    probability = stationary(chain.moves, band)
    certify(chain, probability)
    return chain, probability
