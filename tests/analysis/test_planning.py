"""The intervals to expect before anything runs, and what `check` says of them."""

import math

import numpy as np
import pytest
from scipy import stats

from analysis.chain import Limits, variance
from analysis.planning import expected_precision, half_width_of, replications_needed
from analysis.simulation import summarise
from sim.replicate import replicate
from sim.scenario import Scenario
from tests.analysis.builders import memoryless
from tests.analysis.conftest import TWO


def test_students_half_width():
    """t(0.975, 9) = 2.2622 (Student's table; from memory)."""
    assert half_width_of(0.02, 10, 0.95) == pytest.approx(2.26216 * 0.02 / math.sqrt(10), rel=1e-5)
    assert half_width_of(0.02, 1, 0.95) is None


@pytest.mark.parametrize("half_width", [1e-4, 0.003, 0.01, 0.5])
def test_the_least_number_of_replications(half_width):
    needed = replications_needed(0.02, half_width, 0.95)
    assert half_width_of(0.02, needed, 0.95) <= half_width
    assert needed == 2 or half_width_of(0.02, needed - 1, 0.95) > half_width


def test_more_than_a_million_is_not_counted():
    assert replications_needed(0.02, 1e-9, 0.95) is None


def test_a_unit_with_plenty_of_beds():
    """M/M/infinity: utilisation of a run of m days has a variance of 2 lambda / (mu^2 beds^2 m) (Whitt 1989, from
    memory)."""
    run = {"measured_days": 500.0, "replications": 10, "warm_up_days": 30.0}
    scenario = memoryless({"name": "Ewe", "beds": 50, "per_day": 3.0}, stay_days=2.0, run=run)
    found = expected_precision(scenario, scenario.policy(), half_width=0.001)
    spread = math.sqrt(2 * 3.0 * 4.0 / 50**2 / 500)
    expected = found.units["Ewe"]["utilisation"]
    assert found.memoryless and found.reason is None and found.states == 51
    assert expected.half_width == pytest.approx(2.26216 * spread / math.sqrt(10), rel=1e-5)
    assert expected.replications_needed == replications_needed(spread, 0.001, 0.95)


REPLICATIONS = 600


@pytest.fixture(scope="module")
def widening():
    """How much wider than expected of the counterpart: a unit that never closes, whose stays have a cv of 1.5."""
    run = {"seed": 3, "measured_days": 400.0, "replications": REPLICATIONS, "warm_up_days": 28.0}
    stay = {"family": "hyperexponential", "mean_days": 1.0, "cv": 1.5}
    group = {"group": "Ewe emergencies", "home": "Ewe", "per_day": 5.0, "stay": stay}
    plain = {"schema": 1, "run": run, "units": [{"name": "Ewe", "beds": 40}], "patients": [group]}
    varied = Scenario.model_validate(plain)
    runs = replicate(varied, [varied.policy()], range(REPLICATIONS), engine="compiled")
    found = summarise([one.record for reply in runs for one in reply], varied, confidence=0.95).units["Ewe"]
    expected = expected_precision(varied, varied.policy())
    assert not expected.memoryless
    half_width = (found["utilisation"].high - found["utilisation"].low) / 2
    return half_width / expected.units["Ewe"]["utilisation"].half_width


@pytest.mark.parametrize(("factor", "right"), [(math.sqrt((1 + 1.5**2) / 2), True), (1.0, False)])
def test_other_stays_widen_the_interval_as_check_says(widening, factor, right):
    """(R - 1) times the squared ratio of half-widths is chi-squared: a false alarm has a chance of 0.001, and 2 % are
    allowed for runs of no more than 400 mean stays. Planted: no factor at all."""
    low, high = stats.chi2.ppf([0.0005, 0.9995], REPLICATIONS - 1)
    assert (low * 0.98 < (REPLICATIONS - 1) * (widening / factor) ** 2 < high * 1.02) == right


def test_check_gives_the_expected_intervals(call, show, delayed):
    status, document = call("check", delayed, "--half-width", 0.01)
    precision = document["precision"]
    assert status == 0 and precision["basis"] == "exponential counterpart"
    assert (precision["memoryless"], precision["half_width"], precision["reason"]) == (False, 0.01, None)
    assert set(precision["units"]) == {"A", "B=b"} and precision["states"] == 12
    unit = precision["units"]["A"]["utilisation"]
    assert unit["mean"] == pytest.approx(
        call("exact", delayed, "--exponential")[1]["units"]["A"]["utilisation"]
    )
    more = call("check", delayed, "--replications", unit["replications_needed"])[1]["precision"]
    assert more["units"]["A"]["utilisation"]["half_width"] <= 0.01 < unit["half_width"]
    assert more["units"]["A"]["utilisation"]["replications_needed"] is None
    _, out, _ = show("check", delayed, "--half-width", 0.01)
    assert "exponential counterpart" in out and "sqrt((1 + cv^2) / 2)" in out
    assert f" {unit['replications_needed']} " in out


def test_one_replication_gives_no_interval(call, two):
    unit = call("check", two, "--replications", 1)[1]["precision"]["units"]["A"]["utilisation"]
    assert unit["half_width"] is None and unit["mean"] > 0


def test_a_failed_certificate_is_a_reason_and_does_not_end_check(call, two, monkeypatch):
    right = variance._bias
    monkeypatch.setattr(variance, "_bias", lambda *arguments: right(*arguments) + np.arange(12)[:, None] ** 2)
    status, document = call("check", two)
    assert status == 0 and "failed its check" in document["precision"]["reason"]


def test_check_says_why_it_expects_nothing(call, tmp_path, two, monkeypatch):
    reviewed = tmp_path / "reviewed.toml"
    reviewed.write_text(TWO.replace("beds = 2\n", "beds = 2\nreview_hours = 12\n", 1), encoding="utf-8")
    precision = call("check", reviewed)[1]["precision"]
    assert precision["units"] == {} and "review" in precision["reason"]
    monkeypatch.setattr("analysis.planning.QUICK", Limits(states=1))
    precision = call("check", two)[1]["precision"]
    assert precision["units"] == {} and "too large" in precision["reason"]
