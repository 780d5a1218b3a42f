"""The subtraction-free elimination, and the certificate that follows it, against answers known otherwise."""

import mpmath
import numpy as np
import pytest

from analysis.chain import exact, solve
from analysis.chain.certificate import certify
from analysis.chain.gth import LARGEST_BLOCK, Transitions, band_of, stationary
from analysis.chain.limits import DEFAULT
from analysis.chain.network_states import network_chain
from sim.errors import RunError
from sim.scenario import Scenario


def reversible(log_weights, reach, rng):
    """A reversible chain: symmetric conductances up to `reach` states apart fix its distribution beforehand.

    With rates c(i, j) * sqrt(w(j) / w(i)), c symmetric, detailed balance holds for the weights w.
    """
    states = len(log_weights)
    below, above = np.triu_indices(states, 1)
    near = above - below <= reach
    below, above = below[near], above[near]
    kept = (rng.random(len(below)) < 0.2) | (above == below + 1)
    below, above = below[kept], above[kept]
    conductance = rng.uniform(0.1, 10.0, len(below))
    up = conductance * np.exp((log_weights[above] - log_weights[below]) / 2)
    down = conductance * np.exp((log_weights[below] - log_weights[above]) / 2)
    ends = np.append(below, above), np.append(above, below)
    return Transitions(*ends, np.append(up, down), states)


def distribution(log_weights):
    weights = np.exp(log_weights - log_weights.max())
    return weights / weights.sum()


CHAINS = [(2, 1), (40, 1), (150, 7), (400, 60), (900, 25 * LARGEST_BLOCK)]


@pytest.mark.parametrize(("states", "reach"), CHAINS)
def test_reversible_chains(states, reach):
    """From single states to blocks of the largest size, every probability relative to itself."""
    rng = np.random.default_rng(5)
    log_weights = rng.uniform(-3.0, 3.0, states)
    moves = reversible(log_weights, reach, rng)
    found = stationary(moves, band_of(moves))
    np.testing.assert_allclose(found, distribution(log_weights), rtol=1e-11, atol=0)


@pytest.mark.parametrize("shape", ["rising", "falling", "valley", "peak"])
def test_weights_beyond_the_range_of_a_float(shape):
    """Weights that span 10^1300; probabilities below the range of a float are 0, the others right."""
    slope = np.linspace(0.0, 3000.0, 400)
    log_weights = {
        "rising": slope,
        "falling": -slope,
        "valley": np.abs(slope - 1500.0),
        "peak": -np.abs(slope - 1500.0),
    }[shape]
    moves = reversible(log_weights, 30, np.random.default_rng(6))
    found, expected = stationary(moves, band_of(moves)), distribution(log_weights)
    likely = expected > 1e-290
    np.testing.assert_allclose(found[likely], expected[likely], rtol=1e-10, atol=0)
    assert (found[expected < 1e-320] < 1e-300).all()


def test_a_chain_of_one_state():
    nothing = np.empty(0, dtype=np.int64)
    moves = Transitions(nothing, nothing, np.empty(0), 1)
    assert stationary(moves, band_of(moves)).tolist() == [1.0]


def exponential(mean_days):
    return {"family": "exponential", "mean_days": mean_days}


def stiff_network():
    """Two units, stays from 15 minutes to 100 days, and a gate with a gap."""
    units = [
        {"name": "A", "beds": 2, "reopening_gap": 2},
        {"name": "B", "beds": 2, "incoming_threshold": 1, "stay_factor": 1.5},
    ]
    stays = [("A", 20.0, 0.01), ("B", 0.02, 100.0)]
    groups = [
        {"group": f"{mean:g} days", "home": home, "per_day": rate, "stay": exponential(mean)}
        for home, rate, mean in stays
    ]
    return Scenario.model_validate({"schema": 1, "units": units, "patients": groups})


def fifty_digits(moves):
    """The stationary distribution by a dense solve with 50 digits."""
    with mpmath.workdps(50):
        matrix = mpmath.zeros(moves.states)
        for origin, target, rate in zip(moves.origin, moves.target, moves.rate, strict=True):
            matrix[int(target), int(origin)] += mpmath.mpf(float(rate))
            matrix[int(origin), int(origin)] -= mpmath.mpf(float(rate))
        for state in range(moves.states):
            matrix[0, state] = 1
        right = mpmath.zeros(moves.states, 1)
        right[0] = 1
        return np.array([float(value) for value in mpmath.lu_solve(matrix, right)])


def test_stiff_rates():
    scenario = stiff_network()
    moves = network_chain(scenario, scenario.policy(), DEFAULT).moves
    found = stationary(moves, band_of(moves))
    assert moves.states == 40
    assert found.max() / found.min() > 1e8
    np.testing.assert_allclose(found, fifty_digits(moves), rtol=1e-12, atol=0)


def two_units():
    units = [{"name": "A", "beds": 4, "closure_threshold": 3}, {"name": "B", "beds": 5}]
    groups = [{"group": name, "home": name, "per_day": 2.0, "stay": exponential(1.5)} for name in "AB"]
    return Scenario.model_validate({"schema": 1, "units": units, "patients": groups})


def blurred(probability):
    """A distribution that is wrong by a millionth in two states."""
    wrong = probability.copy()
    wrong[0] *= 1 + 1e-6
    wrong[1] -= wrong[0] - probability[0]
    return wrong


@pytest.mark.parametrize(
    ("spoil", "complaint"),
    [
        (blurred, "into and out of a state differ"),
        (lambda probability: 2 * probability, "do not add up to 1"),
        (lambda probability: probability * np.nan, "undefined"),
        (lambda probability: 0 * probability + 1 / len(probability), "into and out of a state differ"),
    ],
)
def test_no_wrong_answer_is_handed_on(monkeypatch, spoil, complaint):
    scenario = two_units()
    monkeypatch.setattr(exact, "stationary", lambda moves, band: spoil(stationary(moves, band)))
    with pytest.raises(RunError, match=complaint):
        solve(scenario, scenario.policy())


def test_transitions_that_do_not_follow_the_routes_are_found_out():
    """A distribution may solve its transitions and yet not be the network's; admissions then tell."""
    scenario = two_units()
    chain = network_chain(scenario, scenario.policy(), DEFAULT)
    certify(chain, stationary(chain.moves, band_of(chain.moves)))
    rate = np.where(chain.moves.rate == 2.0, 2.1, chain.moves.rate)
    moves = Transitions(chain.moves.origin, chain.moves.target, rate, chain.moves.states)
    object.__setattr__(chain, "moves", moves)
    with pytest.raises(RunError, match="admissions and discharges of A differ"):
        certify(chain, stationary(moves, band_of(moves)))
