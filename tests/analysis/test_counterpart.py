"""The exponential counterpart beside a simulation: narrower, unbiased, refused where it should be, and a check."""

import numpy as np
import pytest

from analysis.chain import solve
from analysis.controls import Controls, no_controls
from analysis.counterpart import counterpart_of, table_counterpart
from analysis.simulation import summarise
from sim.replicate import replicate
from tests.analysis.builders import memoryless

UNITS = ({"name": "A", "beds": 3, "per_day": 1.2}, {"name": "B", "beds": 4, "per_day": 1.5})
SCENARIO = memoryless(*UNITS, run={"seed": 6, "warm_up_days": 28.0, "measured_days": 140.0})


def records_of(scenario, replications):
    replies = replicate(scenario, [scenario.policy()], range(replications))
    return [run.record for reply in replies for run in reply]


def test_an_own_control_is_a_column_of_the_regression():
    """Against numpy's least squares with both columns."""
    rng = np.random.default_rng(1)
    x, own = rng.normal(size=(20, 2)), rng.normal(size=(20, 3)) + 0.3
    values = x[:, :1] - own + rng.normal(size=(20, 3))
    adjusted = Controls(("a", "b"), x).adjust(values, own)
    for place in range(3):
        design = np.column_stack([np.ones(20), x, own[:, place]])
        beta, rest, *_ = np.linalg.lstsq(design, values[:, place], rcond=None)
        error = np.sqrt(rest[0] / 16 * np.linalg.inv(design.T @ design)[0, 0])
        assert adjusted[:, place].mean() == pytest.approx(beta[0])
        assert adjusted[:, place].std(ddof=1) / np.sqrt(20) == pytest.approx(error)


def test_no_control_is_the_plain_mean():
    values = np.random.default_rng(2).normal(size=(7, 2))
    assert no_controls(7).adjust(values) == pytest.approx(values)


def test_a_network_that_is_its_own_counterpart_gets_its_exact_values():
    records, exact = records_of(SCENARIO, 8), solve(SCENARIO, SCENARIO.policy())
    found = summarise(
        records, SCENARIO, confidence=0.95, counterpart=counterpart_of(records, exact, SCENARIO)
    )
    for name in "AB":
        for measure in ("utilisation", "full_fraction", "moved_share"):
            one = found.units[name][measure]
            assert (one.mean, one.low, one.high) == pytest.approx([getattr(exact.units[name], measure)] * 3)
        assert [level.mean for level in found.occupancy[name]] == pytest.approx(exact.units[name].occupancy)


def test_planted_another_demand_is_caught_by_the_check():
    """The chain of a tenth more patients does not fit; its own does (false-alarm rate .01, fixed seed)."""
    from analysis.exact_tables import solve_block
    from analysis.payoffs import TableSums

    sums = TableSums(SCENARIO, 1, 40)
    for reply in replicate(SCENARIO, [SCENARIO.policy()], range(40)):
        sums.add(reply)
    right = solve_block(SCENARIO, [SCENARIO.policy()])
    wrong = solve_block(SCENARIO.with_demand(1.2), [SCENARIO.policy()])
    assert table_counterpart(sums.sums(), right).check()["agrees"]
    assert not table_counterpart(sums.sums(), wrong).check()["agrees"]


@pytest.mark.parametrize("command", ["simulate", "game"])
def test_the_command_tells_how_the_counterpart_stood(call, delayed, command):
    status, document = call(command, delayed, "--counterpart", "--replications", 12)
    told = document["counterpart"]
    assert status == 0 and told["used"] and told["agrees"] and told["largest_z"] < told["critical_z"]
    assert document["controls"]["used"] and told["measures_tested"] > 0


@pytest.mark.parametrize("command", ["simulate", "game"])
def test_a_network_that_the_chain_answers_needs_no_counterpart(call, two, command):
    assert call(command, two, "--counterpart")[0] == 2


def test_a_counterpart_beyond_the_chain_is_refused_with_its_reasons(call, delayed):
    from pathlib import Path

    text = Path(delayed).read_text(encoding="utf-8")
    Path(delayed).write_text(text.replace("beds =", "review_hours = 8\nbeds =", 1), encoding="utf-8")
    status, document = call("simulate", delayed, "--counterpart")
    assert status == 2 and any("review" in reason for reason in document["reasons"])


# ---- verify ----


def test_verify_shows_the_scenario_itself_beside_its_counterpart(call, delayed):
    """Tested is what `--exponential` tests; beside it stands what `simulate` gives for the scenario."""
    status, document = call("verify", delayed, "--counterpart", "--replications", 6)
    _, alone = call("verify", delayed, "--exponential", "--replications", 6)
    assert status == 0 and document["measures"] == alone["measures"] and "scenario_itself" not in alone
    _, simulated = call("simulate", delayed, "--replications", 6, "--no-controls")
    itself = document["scenario_itself"]
    assert itself["replications"] == 6 and len(itself["measures"]) == len(document["measures"])
    for tested, own in zip(document["measures"], itself["measures"], strict=True):
        if tested["measure"] == "utilisation":
            assert own == pytest.approx(simulated["units"][tested["where"]]["utilisation"])
            assert own["mean"] != tested["mean"]


def test_the_table_of_verify_has_a_column_for_the_scenario_itself(show, delayed):
    _, out, _ = show("verify", delayed, "--counterpart", "--replications", 6)
    assert "scenario itself" in out and "is not tested" in out


def test_verify_needs_no_counterpart_where_the_chain_answers_and_takes_no_fit_with_it(call, two, delayed):
    assert call("verify", two, "--counterpart", "--replications", 6)[0] == 2
    assert call("verify", delayed, "--counterpart", "--phase-fit", 3, "--replications", 6)[0] == 2
