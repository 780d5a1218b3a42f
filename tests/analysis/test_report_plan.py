"""Report plans: every fault at once, what is missing is run, and what is there is not run again."""

import json

import pytest

from analysis.command import report_plan
from analysis.command.entry import AT_FAULT, DONE, FAILED, INTERRUPTED, run
from tests.analysis.conftest import TWO

PLAN = """
schema = 1
title = "Two tiny reports (invented)"

[[reports]]
name = "first"
scenario = "two.toml"
commands = ["exact", "exact --after-days 9"]

[[reports]]
name = "second"
scenario = "two.toml"
commands = ["ledger --policy early"]
"""


@pytest.fixture
def plan(tmp_path, monkeypatch):
    monkeypatch.setattr("sim.provenance._commit", lambda: "c0ffee")
    (tmp_path / "two.toml").write_text(TWO, encoding="utf-8")
    file = tmp_path / "plan.toml"
    file.write_text(PLAN, encoding="utf-8")
    return file


def built(plan, *options):
    return run(["report", "--from", str(plan), "--out", str(plan.parent / "out"), *options])


def test_one_command_builds_every_page_and_again_runs_nothing(plan, capsys, monkeypatch):
    assert built(plan, "--json") == DONE
    told = json.loads(capsys.readouterr().out)["reports"]
    out = plan.parent / "out"
    assert [one["written"] for one in told] == [[str(out / "first.html")], [str(out / "second.html")]]
    assert told[0]["kinds"] == {"exact": "exact", "exact-2": "transient"}
    first = (out / "first.html").read_bytes()
    monkeypatch.setattr(report_plan, "run", lambda line: pytest.fail(f"{line} was run again"))
    assert built(plan) == DONE
    assert capsys.readouterr().err.count("its result is there") == 3
    assert (out / "first.html").read_bytes() == first


def test_a_changed_scenario_or_command_is_run_again(plan, capsys):
    assert built(plan) == DONE
    (plan.parent / "two.toml").write_text(TWO.replace("per_day = 0.7", "per_day = 0.8"), encoding="utf-8")
    capsys.readouterr()
    assert built(plan) == DONE
    assert "its result is there" not in capsys.readouterr().err
    plan.write_text(PLAN.replace("days 9", "days 8"), encoding="utf-8")
    assert built(plan) == DONE
    assert capsys.readouterr().err.count("its result is there") == 2


def test_a_checkout_with_changes_trusts_no_earlier_result(plan, capsys, monkeypatch):
    monkeypatch.setattr("sim.provenance._commit", lambda: "c0ffee+")
    assert built(plan) == DONE and built(plan) == DONE
    assert "its result is there" not in capsys.readouterr().err


def test_every_fault_is_told_before_anything_runs(plan, capsys):
    plan.write_text(
        PLAN.replace('"exact", ', '"exakt", "game \'", "game --no-such", "game --out x", ')
        .replace('name = "second"', 'name = "first"')
        .replace("schema = 1", "schema = 2"),
        encoding="utf-8",
    )
    assert built(plan) == AT_FAULT
    told = capsys.readouterr().err
    assert len(told.splitlines()) == 6
    for words in ("schema: must be 1", "must begin with one of verify, game", "No closing quotation".lower(),
                  "No such option", "must leave out what the plan gives", "must not be given twice"):  # fmt: skip
        assert words in told
    assert all(line.startswith(f"{plan}:") for line in told.splitlines())
    assert not (plan.parent / "out").exists() or not list((plan.parent / "out").iterdir())


def test_faults_of_a_scenario_are_told_with_their_line(plan, capsys):
    (plan.parent / "two.toml").write_text(TWO.replace("beds = 2", "beds = -2"), encoding="utf-8")
    assert built(plan) == AT_FAULT
    told = capsys.readouterr().err
    assert "reports.first.scenario" in told and "two.toml:13: units.A.beds" in told


def test_a_check_that_does_not_hold_is_reported_on_and_told(plan, capsys, monkeypatch):
    plan.write_text(PLAN.replace('"exact", ', ""), encoding="utf-8")
    real = report_plan.run
    monkeypatch.setattr(
        report_plan, "run", lambda line: max(real(line), FAILED if line[0] == "ledger" else DONE)
    )
    assert built(plan) == FAILED
    assert "`ledger` did not hold" in capsys.readouterr().out
    assert (plan.parent / "out" / "second.html").exists()


def test_a_command_that_leaves_nothing_ends_it_and_an_interrupt_too(plan, capsys, monkeypatch):
    monkeypatch.setattr(report_plan, "run", lambda line: FAILED)
    assert built(plan) == FAILED
    assert "left no result" in capsys.readouterr().err
    monkeypatch.setattr(report_plan, "run", lambda line: INTERRUPTED)
    assert built(plan) == INTERRUPTED


def test_results_and_a_plan_exclude_each_other(plan, capsys):
    assert run(["report"]) == AT_FAULT
    assert built(plan, str(plan.parent)) == AT_FAULT
    assert "RESULTS, or --from PLAN" in capsys.readouterr().err
