"""The records' share of an error: known variances, coverage where intervals without it fail, and the resampling."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from analysis.confidence import mean_estimate
from analysis.input_uncertainty import Resampling, input_variance, require_observed, resampled, split
from analysis.named_policies import Case
from sim.errors import ScenarioError
from sim.replicate import replicate_networks
from sim.scenario import parse_scenario
from tests.analysis.builders import memoryless

RECORDED = """
schema = 1
[run]
warm_up_days = 5
measured_days = 20
[[units]]
name = "A"
beds = 2
[[units]]
name = "B"
beds = 2
[[patients]]
group = "a"
home = "A"
per_day = 1
stay = { family = "empirical", file = "stays.csv", column = "days" }
[[patients]]
group = "b"
home = "B"
per_day = 1
stay = { family = "mixture", parts = [{ family = "empirical", file = "stays.csv", column = "days", weight = 1 },
         { family = "constant", mean_days = 1.0, weight = 1 }] }
"""


@pytest.fixture
def recorded(tmp_path):
    (tmp_path / "stays.csv").write_text(
        "days\n" + "\n".join(f"{k / 4}" for k in range(1, 21)), encoding="utf-8"
    )
    return parse_scenario(RECORDED, folder=tmp_path)


def test_the_variance_between_resamplings_is_found():
    """400 resamplings: a variance estimate has a relative error of about .07, so .25 is beyond 3 of them."""
    rng = np.random.default_rng(1)
    values = rng.normal(size=(400, 1)) * 2 + rng.normal(size=(1, 5)) * 10 + rng.normal(size=(400, 5)) * 3
    assert input_variance(values) == pytest.approx(4.0, rel=0.25)
    assert input_variance(values - values.mean(axis=1, keepdims=True)) == 0.0


def test_planted_scatter_left_in_is_caught():
    rng = np.random.default_rng(2)
    values = rng.normal(size=(400, 5)) * 3  # nothing from the records
    assert input_variance(values) < 0.25 < values.mean(axis=1).var(ddof=1)


EXPERIMENTS, RECORDS, REPLICATIONS = 300, 60, 40


def _covered(interval_of):
    """How often the truth, a mean stay of 1, is held by an analysis of 60 recorded exponential stays."""
    rng, held = np.random.default_rng(3), 0
    for _ in range(EXPERIMENTS):
        data = rng.exponential(size=RECORDS)
        main = data.mean() + 0.3 * rng.normal(size=REPLICATIONS)
        means = rng.choice(data, size=(100, RECORDS)).mean(axis=1, keepdims=True)
        found = interval_of(main, means + 0.3 * rng.normal(size=(100, 5)))
        held += found.low <= 1.0 <= found.high
    return held / EXPERIMENTS


def test_the_whole_interval_covers():
    """About .92, for the bootstrap of 60 skewed records is itself a little narrow; .87 is 3 standard errors below."""
    assert _covered(lambda main, values: split(main, values, 0.95).interval) >= 0.87


def test_planted_interval_without_the_records_error_is_caught():
    assert _covered(lambda main, values: mean_estimate(main, 0.95)) < 0.87


def test_the_share_and_what_replications_can_still_do():
    main = np.array([1.0, -1.0] * 8)  # variance of the mean 1/15
    found = split(main, np.tile(np.array([[1.0], [-1.0]]) * np.sqrt(1 / 15), (50, 4)), 0.95)
    assert found.share == pytest.approx(0.5, abs=0.01)
    assert found.narrower == pytest.approx(1 - np.sqrt(0.5), abs=0.01)
    assert split(np.zeros(5), np.zeros((5, 5)), 0.95).share is None


def test_all_groups_that_read_a_column_get_the_same_resampling(recorded):
    found = resampled(recorded, np.random.default_rng(4))
    [values] = found.observed().values()
    [before] = recorded.observed().values()
    assert len(values) == len(before) and set(values) <= set(before) and values != before
    assert found.patients[0].stay.values == values and found.patients[1].stay.parts[0].values == values
    assert recorded.observed()["stays.csv", "days"] == before, "the scenario itself stays as it was"
    assert found.patients[0].stay.distribution().mean() == pytest.approx(np.mean(values))


def test_every_resampling_is_run_under_every_policy(recorded):
    base = recorded.policy()
    early = dataclasses.replace(base.with_thresholds({"A": 1, "B": 1}), name="early")
    resampling = Resampling([Case(one.name, recorded, one) for one in (base, early)], 3, 2)
    jobs = ((key, group.scenario, group.policies) for key, group in resampling.networks())
    for key, reply in replicate_networks(jobs, resampling.replications):
        resampling.take(key, reply)
    values = resampling.complete()
    assert values.shape == (3, 2, 2, 3) and resampling.runs == 12
    assert len({row.tobytes() for row in values}) == 3, "each resampling is another network"


def test_without_records_it_is_refused():
    with pytest.raises(ScenarioError, match="--input-uncertainty: needs stays or delays taken from records"):
        require_observed(memoryless({"name": "A", "beds": 2, "per_day": 1.0}))
