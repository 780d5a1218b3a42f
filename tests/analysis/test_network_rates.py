"""Refusals and transfers of a simulated game's network: means, paired differences, and what cannot be told.

The expected numbers are worked out by hand: a mean of 1, 2, 3 has standard error 1/sqrt(3), and Student's two-sided
95 % value at 2 degrees of freedom is 4.303 (any printed table of t; from memory).
"""

from dataclasses import replace

import numpy as np
import pytest

from analysis.goals import goal_of, welfare_of
from analysis.network_rates import network_rates, rates_against
from analysis.payoffs import PayoffTable
from analysis.profiles import profiles_of
from sim.scenario import parse_scenario
from tests.analysis.conftest import TWO

T = 4.3027


@pytest.fixture
def table():
    """2 by 3 profiles, three replications: turned away 1, 2, 3 in the first profile, 4 more in the last."""
    scenario = parse_scenario(TWO)
    away = np.tile(np.array([1.0, 2.0, 3.0])[:, None, None], (1, 2, 3))
    away[:, 1, 2] += 4.0
    whole = np.zeros((3, 2, 2, 3))
    return PayoffTable(
        profiles_of(scenario), goal_of(scenario), welfare_of(scenario), payoffs=whole[0], welfare=whole[0, 0],
        outcomes=None, replicates=whole, turned_away_replicates=away, transfers_replicates=2 * away,
    )  # fmt: skip


def test_each_rate_has_students_interval(table):
    found = network_rates(table, (0, 0), 0.95)["transfers_per_day"]
    assert found["mean"] == 4.0
    assert found["high"] == pytest.approx(4.0 + 2 * T / np.sqrt(3), abs=1e-3)
    assert found["low"] == 0.0  # below it nothing can be


def test_a_difference_is_paired(table):
    """The replications differ alike in both profiles: unpaired, the interval would be wide."""
    found = rates_against(table, (1, 2), (0, 0), 0.95)["turned_away_per_day"]
    assert (found["mean"], found["low"], found["high"]) == (4.0, 4.0, 4.0)


def test_what_a_race_left_has_no_number(table):
    left = table.turned_away_replicates.copy()
    left[2, 1, 2] = np.nan
    found = rates_against(replace(table, turned_away_replicates=left), (1, 2), (0, 0), 0.95)
    assert found["turned_away_per_day"]["mean"] is None and "race" in found["turned_away_per_day"]["reason"]


def test_an_exact_table_has_none(table):
    exact = replace(table, replicates=None, turned_away_replicates=None, transfers_replicates=None)
    assert network_rates(exact, (0, 0), 0.95) == {}
