"""One policy's measures with intervals, from two records made by hand."""

import json
import math

import numpy as np
import pytest

from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES
from analysis.simulation import summarise
from tests.analysis.builders import memoryless, record

T_975_1 = 12.706205  # Student's t, 1 degree of freedom, .975 (standard tables)
SCENARIO = memoryless(
    {"name": "A", "beds": 1, "per_day": 1.0},
    {"name": "B", "beds": 2, "per_day": 0.0},
    run={"measured_days": 10.0},
)


def replication(busy_days, turned_away, arrived):
    """A is busy so many of 10 days; B, nobody's home, has one bed occupied throughout."""
    return record(
        [[[10 - busy_days, busy_days, 0], [0, 10, 0]]],
        gate_days=[[10 - busy_days, 0, 0, 0, 0, 0, 0, busy_days], [10, 0, 0, 0, 0, 0, 0, 0]],
        arrived=[arrived, 0],
        turned_away=[turned_away, 0],
        diverted=[[0, 1], [0, 0]],
        admitted=[[arrived - turned_away - 1, 1], [0, 0]],
    )


RECORDS = [replication(4, 1, 8), replication(6, 3, 8)]


@pytest.fixture
def result():
    return summarise(RECORDS, SCENARIO, confidence=0.95)


def test_a_measure_by_hand(result):
    """Utilisations .4 and .6: mean .5, standard error .1."""
    found = result.units["A"]["utilisation"]
    assert found.mean == pytest.approx(0.5)
    assert (found.low, found.high) == pytest.approx((0.0, 0.5 + T_975_1 * 0.1), abs=1e-6)  # cut at nought


def test_a_share_by_hand(result):
    """4 turned away of 16; residuals over the mean base: -1/8 and 1/8, standard error 1/8."""
    found = result.units["A"]["turned_away_share"]
    assert found.mean == pytest.approx(0.25)
    assert (found.low, found.high) == (0.0, 1.0)  # 0.25 -/+ 1.59, cut at what a share can be


def test_network_rates_add_up_over_units(result):
    """7 and 5 patients treated in 10 days, one of them in B each time; 1 and 3 turned away; 8 arrived."""
    assert [result.units[name]["admissions_per_day"].mean for name in "AB"] == pytest.approx([0.5, 0.1])
    assert result.network["throughput_per_day"].mean == pytest.approx(0.6)
    assert result.network["transfers_per_day"].mean == pytest.approx(0.1)
    assert result.network["turned_away_per_day"].mean == pytest.approx(0.2)
    assert result.network["arrivals_per_day"].mean == pytest.approx(0.8)


def test_occupancy_has_a_share_for_every_number_of_beds_of_that_unit(result):
    assert [level.mean for level in result.occupancy["A"]] == pytest.approx([0.5, 0.5])
    assert [level.mean for level in result.occupancy["B"]] == pytest.approx([0, 1, 0])
    assert (result.occupancy["A"][1].low, result.occupancy["A"][1].high) == (0.0, 1.0)  # 0.5 -/+ 1.27, cut


def test_a_unit_that_is_nobodys_home_has_no_shares_but_a_reason(result):
    share = result.units["B"]["moved_share"]
    assert share.mean is None and "nothing to take a share of" in share.reason


def test_the_tree_has_every_measure_as_mean_low_and_high(result):
    tree = json.loads(json.dumps(result.to_dict(), allow_nan=False))
    assert set(tree) == {"units", "network"} and list(tree["units"]) == ["A", "B"]
    for unit in tree["units"].values():
        assert set(unit) == {measure.name for measure in UNIT_MEASURES} | {"occupancy"}
    assert set(tree["network"]) == {measure.name for measure in NETWORK_MEASURES}
    assert set(tree["units"]["A"]["utilisation"]) == {"mean", "low", "high"}


def test_one_replication_has_means_only():
    tree = summarise(RECORDS[:1], SCENARIO, confidence=0.95).to_dict()
    assert tree["units"]["A"]["utilisation"] == {
        "mean": 0.4,
        "low": None,
        "high": None,
        "reason": "one replication gives no interval",
    }


def test_higher_confidence_widens_every_interval(result):
    wide = summarise(RECORDS, SCENARIO, confidence=0.99)
    quantile = math.tan(
        math.pi * (0.995 - 0.5)
    )  # Student's t with 1 degree of freedom is Cauchy's distribution
    for found, level in ((result, T_975_1), (wide, quantile)):
        utilisation = found.units["A"]["utilisation"]
        assert utilisation.high - utilisation.mean == pytest.approx(level * 0.1, rel=1e-6)
        assert utilisation.low == 0.0  # an interval ends where the measure does
    assert np.isclose(wide.units["A"]["utilisation"].mean, 0.5)
