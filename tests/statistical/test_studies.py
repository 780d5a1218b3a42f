"""The studies at a reduced size: promises held, and every planted error caught.

False-alarm rates: a procedure that keeps its promise exactly misses a bar with the probability that stands in its
`false_alarm` (binomial; at most .005 each, .025 with the few commands); seeds are fixed, so that a green suite stays
green.
"""

from __future__ import annotations

import json

import numpy as np
import pytest

from analysis.measures import unit_sums
from analysis.profiles import profiles_of
from sim.replicate import replicate
from tests.statistical.__main__ import main
from tests.statistical.core import Bench, Effort, Outcome, Truth, at_least, at_most, within
from tests.statistical.networks import contested, crowd, plateau, small
from tests.statistical.pool import KEPT, disjoint, experiments_of, overlapping, pool_of, sums_of
from tests.statistical.running import BY_NAME, STUDIES, run

pytestmark = pytest.mark.slow
EXPERIMENTS = 60
MORE = {"planted-no-student-map": 150}  # a tail of .01 takes more of them
LARGEST_FALSE_ALARM = {"command-contested-20": 0.025}


@pytest.fixture(scope="session")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("pools")


@pytest.mark.parametrize("name", [study.name for study in STUDIES if study.reduced])
def test_study(name, folder):
    outcome = run(name, Bench(folder, Effort(MORE.get(name, EXPERIMENTS), 0)))
    assert outcome.passed, outcome
    assert all((one.false_alarm or 0) <= LARGEST_FALSE_ALARM.get(name, 0.005) for one in outcome.figures)
    assert any(one.passed is not None for one in outcome.figures)


# ---- the studies' own parts ----


def test_the_games_are_what_they_are_said_to_be():
    """By the exact chain: three equilibria; ties by halves; six contrasts of nought; a plateau of exact ties."""
    assert Truth(small()).equilibria.sum() == 3
    assert Truth(contested()).equilibria.sum() == 4
    six = Truth(crowd())
    assert six.equilibria[1, 1, 1, 1, 1, 1]
    payoffs = six.table.payoffs
    for player in range(6):
        closed = tuple(0 if place == player else 1 for place in range(6))
        assert payoffs[(player, *closed)] == pytest.approx(payoffs[(player, *(1,) * 6)], abs=1e-9)
    assert Truth(plateau()).equilibria.sum() == 18


def test_the_plateau_ties_in_every_replication(folder):
    """Strategies of A that differ in the incoming threshold only give the same bits."""
    pool = pool_of(plateau(), 100, folder)
    used = pool.arrays["occupied_days"].reshape(100, *pool.profiles.shape, 2)
    chosen = [tuple(one.rules["A"].values()) for one in pool.profiles.strategies[0]]
    closure = np.array([pair[0] for pair in chosen])
    for value in np.unique(closure):
        same = used[:, closure == value]
        assert same.shape[1] > 1 and (same == same[:, :1]).all()


def test_a_pools_sums_are_those_of_the_tool():
    scenario = small()
    policies = list(profiles_of(scenario).policies(scenario.policy()))
    (reply,) = list(replicate(scenario, policies, [3], engine="compiled"))
    records = [run.record for run in sorted(reply, key=lambda run: run.cell)]
    found, wanted = sums_of(records, scenario), unit_sums(records, np.array([3.0, 4.0]), 60.0)
    for name in KEPT:
        assert found[name] == pytest.approx(wanted[name], abs=1e-9), name


def test_a_pool_goes_on_where_it_was(folder, monkeypatch):
    whole = pool_of(small(), 200, folder)
    monkeypatch.setattr("tests.statistical.pool._replications", lambda *_: pytest.fail("run again"))
    again = pool_of(small(), 150, folder)
    assert np.array_equal(again.arrays["admitted"], whole.arrays["admitted"][:150])


def test_experiments_are_disjoint_where_they_can_be():
    assert disjoint(100, 10, 5).chosen.ravel().tolist() == list(range(50))
    assert experiments_of(100, 10, 10, 1).effective == 10
    few = experiments_of(100, 10, 40, 1)
    assert few.effective == pytest.approx(1 / (10 / 100 + 1 / 40)) and few.chosen.shape == (40, 10)
    assert all(len(set(one)) == 10 for one in few.chosen.tolist())


def test_the_error_of_overlapping_experiments_is_no_smaller_than_it_is():
    """Signs of means of 10 out of 50 normal numbers, 200 subsets: their share's spread over 400 pools (own
    computation; the ratio of spreads has a standard error of .035)."""
    rng, shares = np.random.default_rng(6), []
    for seed in range(400):
        values = rng.normal(size=50)
        shares.append(np.mean(values[overlapping(50, 10, 200, seed).chosen].mean(axis=1) > 0))
    stated = overlapping(50, 10, 200, 0).error(0.5)
    assert np.std(shares) <= 1.1 * stated
    naive = np.sqrt(0.25 / 200)
    assert np.std(shares) > 2 * naive, "as if the experiments were independent"


def test_bars_stand_three_standard_errors_away():
    sample = disjoint(1000, 10, 100)
    error = np.sqrt(0.05 * 0.95 / 100)
    assert at_least("", 0.95 - 2.9 * error, 0.95, sample).passed
    assert not at_least("", 0.95 - 3.1 * error, 0.95, sample).passed
    assert at_most("", 0.05 + 2.9 * error, 0.05, sample).passed
    assert not at_most("", 0.05 + 3.1 * error, 0.05, sample).passed
    assert not within("", 0.5, (0.93, 0.96), sample).passed
    assert at_least("", 1.0, 0.95, sample).false_alarm == pytest.approx(
        0.0043, abs=0.0001
    )  # Binomial(100, .95) < 89


def test_a_planted_error_that_meets_every_bar_is_not_caught():
    good = at_least("", 1.0, 0.95, disjoint(1000, 10, 100))
    assert not Outcome("x", "", True, (good,), 0.0).passed and Outcome("x", "", False, (good,), 0.0).passed


# ---- as a command ----


def test_a_run_that_was_stopped_goes_on(tmp_path, capsys, monkeypatch):
    asked = ["controls-small-20", "--experiments", "12", "--folder", str(tmp_path)]
    assert main(asked) == 0
    first = capsys.readouterr().out
    assert "controls-small-20" in first and "1 of 1 studies, 0 missed" in first
    (kept,) = tmp_path.glob("outcomes-*.jsonl")
    assert json.loads(kept.read_text())["name"] == "controls-small-20"
    monkeypatch.setitem(BY_NAME, "controls-small-20", None)  # would fail if it were run again
    assert main(asked) == 0 and capsys.readouterr().out == first


def test_names_select_and_an_unknown_one_is_told(capsys):
    assert main(["planted", "--list"]) == 0
    assert set(capsys.readouterr().out.split()) == {one.name for one in STUDIES if one.planted}
    assert main(["nonsense", "--list"]) == 2 and "nonsense" in capsys.readouterr().out


def test_names_are_unique():
    assert len(BY_NAME) == len(STUDIES)
