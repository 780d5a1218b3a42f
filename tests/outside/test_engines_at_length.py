"""The compiled engine at length: 2,000 unit-years against Erlang's loss formula, and 1 to 4 units against the chain.

False-alarm rates: 1e-4 for the loss system (one Student test), 1e-3 for each chain (simultaneous over all its
measures). The same checks refuse a mean stay 2 % off.
"""

from __future__ import annotations

import numpy as np
import pytest

from analysis.chain import solve
from analysis.confidence import critical_value
from analysis.verification import verify
from sim.replicate import replicate
from sim.scenario import Scenario, parse_scenario
from tests.outside.teletraffic import erlang_b

YEARS, REPLICATIONS = 20, 100  # 2,000 unit-years
BEDS, PER_DAY, MEAN_STAY = 12, 2.4, 4.0


def network(units: int, *, stay: float = MEAN_STAY, measured_days: float, **keys: object) -> Scenario:
    """Invented units alike but for their beds and rates."""
    beds = [BEDS, 6, 4, 5][:units]
    rows = "\n".join(
        f'[[units]]\nname = "U{i}"\nbeds = {n}\n' + "".join(f"{k} = {v}\n" for k, v in keys.items())
        for i, n in enumerate(beds)
    )
    groups = "\n".join(
        f'[[patients]]\ngroup = "g{i}"\nhome = "U{i}"\nper_day = {PER_DAY * n / BEDS}\n'
        f'stay = {{ family = "exponential", mean_days = {stay} }}\n'
        for i, n in enumerate(beds)
    )
    run = f"[run]\nseed = 31\nwarm_up_days = 56\nmeasured_days = {measured_days}\n"
    return parse_scenario(f"schema = 1\n{run}{rows}{groups}")


def records(scenario: Scenario, replications: int) -> list:
    """One record a replication, by the compiled engine."""
    replies = replicate(scenario, [scenario.policy()], range(replications), engine="compiled")
    return [run.record for reply in replies for run in reply]


def lost_share_is(expected: float, scenario: Scenario) -> bool:
    """Whether the share of patients turned away agrees with `expected` (a ratio of means over replications)."""
    found = records(scenario, REPLICATIONS)
    arrived = np.array([one.arrived.sum() for one in found], float)
    lost = np.array([one.turned_away.sum() for one in found], float)
    ratio = lost.sum() / arrived.sum()
    errors = (lost - ratio * arrived) / arrived.mean()
    return (
        abs(ratio - expected)
        <= critical_value(1 - 1e-4, REPLICATIONS - 1) * errors.std(ddof=1) / REPLICATIONS**0.5
    )


def test_2000_unit_years_against_erlangs_loss_formula():
    """A. K. Erlang 1917 (formula; recursion in tests/outside/teletraffic.py, itself held to printed tables)."""
    expected = erlang_b(BEDS, PER_DAY * MEAN_STAY)
    assert lost_share_is(expected, network(1, measured_days=YEARS * 365))
    assert not lost_share_is(expected, network(1, measured_days=YEARS * 365, stay=1.02 * MEAN_STAY))


@pytest.mark.parametrize("units", [1, 2, 3, 4])
def test_the_chain_of_1_to_4_units(units):
    keys = {"closure_threshold": 4, "incoming_threshold": 3, "admit_while_closed": 0.25}
    scenario = network(units, measured_days=728, **keys)
    exact = solve(scenario, scenario.policy())
    assert verify(records(scenario, 30), exact, scenario, false_alarm_rate=1e-3).agrees
    longer = network(units, measured_days=728, stay=1.1 * MEAN_STAY, **keys)
    assert not verify(records(longer, 30), exact, scenario, false_alarm_rate=1e-3).agrees
