"""`simulate` with a precision, an advice on the warm-up, hours of the week, and batch means of a single run."""

from __future__ import annotations

import json
import signal

import pytest

from analysis.command import precise
from analysis.command.entry import AT_FAULT, DONE, FAILED, INTERRUPTED
from analysis.command.running import run_replications

LONG = ("--replications", 3)


# ---- precision ----


def test_precision_runs_until_it_is_reached(call, two):
    status, document = call("simulate", two, "--precision", 0.2)
    found = document["precision"]
    assert status == DONE and found["reached"] and found["ended_by"] == "precision"
    assert document["replications"] >= 20 and found["most_replications"] == 10_000
    assert found["target"] == pytest.approx(0.2 / 1.2)
    assert [(one["where"], one["measure"]) for one in found["measures"]] == [
        ("network", "throughput_per_day"), ("A", "utilisation"), ("B=b", "utilisation"),
        ("network", "turned_away_per_day"),
    ]  # fmt: skip
    assert all(one["relative"] <= found["target"] for one in found["measures"])


def test_the_numbers_are_those_of_a_plain_run_of_as_many(call, two):
    _, document = call("simulate", two, "--precision", 0.04, "--precise", "utilisation")
    _, plain = call("simulate", two, "--replications", document["replications"])
    assert document["replications"] > 20
    assert document["record_hash"] == plain["record_hash"] and document["units"] == plain["units"]


def test_the_most_replications_end_it_and_the_result_says_so(call, show, two):
    status, document = call("simulate", two, "--precision", 0.001, "--replications", 25)
    found = document["precision"]
    assert status == DONE and document["replications"] == 25
    assert (found["reached"], found["ended_by"]) == (False, "most_replications")
    _, text, notices = show("simulate", two, "--precision", 0.001, "--replications", 25)
    assert "Stopped at the most replications (25)" in text and "going on to 25" in notices


def test_a_store_runs_only_what_is_missing(call, two, tmp_path):
    aim = ("--precision", 0.04, "--precise", "utilisation", "--out", tmp_path / "kept")
    _, plain = call("simulate", two, *aim[:-2])
    call("simulate", two, "--replications", 7, *aim[-2:])
    _, first = call("simulate", two, *aim)
    _, again = call("simulate", two, *aim)
    assert first["record_hash"] == again["record_hash"] == plain["record_hash"]
    assert (first["reused"], first["computed"]) == (7, first["replications"] - 7)
    assert (again["reused"], again["computed"]) == (again["replications"], 0)
    _, held = call("results", "show", tmp_path / "kept")
    assert held["complete"] and held["rows"] == plain["replications"]


@pytest.mark.parametrize("inside", [True, False])
def test_an_interrupt_keeps_what_is_there(call, two, monkeypatch, inside):
    """Ctrl-C in the second round, while it runs or before its first run."""

    def interrupted(request, *arguments, first, take, **how):
        if first and not inside:
            raise KeyboardInterrupt

        def then_interrupt(reply):
            take(reply)
            if first:
                signal.raise_signal(signal.SIGINT)

        return run_replications(request, *arguments, first=first, take=then_interrupt, **how)

    monkeypatch.setattr("analysis.command.running.run_replications", interrupted)
    status, document = call("simulate", two, "--precision", 0.01, "--hour-of-week")
    assert status == INTERRUPTED and document["interrupted"]
    assert 20 <= document["replications"] < 40
    assert document["precision"]["ended_by"] == "interrupt" and not document["precision"]["reached"]
    assert "hour_of_week" not in document


def test_every_fault_of_a_precision_is_told_at_once(call, two):
    status, document = call(
        "simulate", two, "--precision", 0.1, "--replications", 5, "--precise", "utilization",
        "--precise", "D=utilisation",
    )  # fmt: skip
    assert status == AT_FAULT
    assert [fault["key"] for fault in document["faults"]] == ["--replications", "--precise", "--precise"]
    assert "utilisation" in document["faults"][1]["remedy"]


@pytest.mark.parametrize("given", [0, 1, -0.1, "nan", "x"])
def test_a_precision_is_a_share(call, two, given):
    assert call("simulate", two, "--precision", given)[0] == AT_FAULT


def test_precise_without_a_precision_is_a_fault(call, two):
    status, document = call("simulate", two, "--precise", "utilisation")
    assert status == AT_FAULT and "--precision" in document["faults"][0]["remedy"]


def test_a_network_that_turns_nobody_away_does_not_wait_for_it(call, two):
    status, document = call("simulate", two, "--precision", 0.3, "--demand", 0.01)
    last = document["precision"]["measures"][-1]
    assert status == DONE and document["precision"]["ended_by"] in ("precision", "most_replications")
    assert last["measure"] == "turned_away_per_day" and last["reached"] is None and last["reason"]


def test_the_default_most_is_the_modules(call, two, monkeypatch):
    monkeypatch.setattr("analysis.stopping.MOST_REPLICATIONS", 22)
    assert call("simulate", two, "--precision", 0.0001)[1]["replications"] == 22
    assert precise.LEAST_RELATIVE > 0


# ---- the start of a run and the hours of the week ----


def test_advice_and_week_with_their_pictures(call, two, tmp_path):
    out = tmp_path / "out"
    status, document = call("simulate", two, *LONG, "--warm-up-advice", "--hour-of-week", "--out", out)
    assert status == DONE
    advice, week = document["warm_up_advice"], document["hour_of_week"]
    assert advice["present_days"] == 14 and advice["mean_stays_days"] == 10 and advice["replications"] == 3
    assert list(week) == ["A", "B=b"] and all(len(hours) == 168 for hours in week.values())
    assert document["hour_of_week_basis"]["method"]["A"] == "Bonferroni"
    pictures = {"warm-up.png", "warm-up.svg", "hour-of-week.png", "hour-of-week.svg"}
    assert pictures <= {path.name for path in out.iterdir()}
    assert json.loads((out / "result.json").read_text(encoding="utf-8"))["hour_of_week"] == week
    call("simulate", two, *LONG, "--out", out)
    assert not pictures & {path.name for path in out.iterdir()}  # moved with the result that they show
    assert pictures <= {path.name for path in (out / "earlier" / "1").iterdir()}


def test_a_warm_up_shorter_than_the_advice_is_noticed(show, two, tmp_path):
    text = (tmp_path / "two.toml").read_text(encoding="utf-8")
    (tmp_path / "two.toml").write_text(
        text.replace("warm_up_days = 14", "warm_up_days = 3.5"), encoding="utf-8"
    )
    text = text.replace("measured_days = 56", "measured_days = 200").replace(
        "warm_up_days = 14", "warm_up_days = 3.5"
    )
    (tmp_path / "two.toml").write_text(text, encoding="utf-8")
    status, shown, notices = show("simulate", two, *LONG, "--warm-up-advice")
    assert status == DONE and "Warm-up: 3.5 days in the scenario; advised" in shown
    assert "run.warm_up_days is 3.5, less than the" in notices


def test_a_run_too_short_for_an_advice_says_so(call, two, tmp_path):
    text = (tmp_path / "two.toml").read_text(encoding="utf-8")
    (tmp_path / "two.toml").write_text(
        text.replace("measured_days = 56", "measured_days = 20"), encoding="utf-8"
    )
    out = tmp_path / "out"
    status, document = call("simulate", two, *LONG, "--warm-up-advice", "--out", out)
    assert status == DONE and document["warm_up_advice"]["days"] is None
    assert "too short" in document["warm_up_advice"]["reason"]
    assert not (out / "warm-up.png").exists()


def test_a_week_needs_a_week(call, two, tmp_path):
    text = (tmp_path / "two.toml").read_text(encoding="utf-8")
    (tmp_path / "two.toml").write_text(
        text.replace("measured_days = 56", "measured_days = 6"), encoding="utf-8"
    )
    status, document = call("simulate", two, "--hour-of-week")
    assert status == AT_FAULT and document["faults"][0]["key"] == "run.measured_days"


def test_tables_for_a_person(show, two):
    status, shown, _ = show("simulate", two, *LONG, "--hour-of-week", "--warm-up-advice", "--precision", 0.5,
                            "--replications", 20)  # fmt: skip
    assert status == DONE
    for said in (
        "Mean occupied beds of A by hour of the week",
        "Sunday",
        "Cut by MSER-5",
        "Precision:",
        "planning only",
    ):
        assert said in shown


def test_workers_and_engines_change_no_week(call, two):
    one, two_workers, compiled = (
        call("simulate", two, *LONG, "--hour-of-week", *how)[1]["hour_of_week"]
        for how in ([], ["--workers", 2], ["--engine", "compiled"])
    )
    assert one == two_workers == compiled


def tracing(monkeypatch, then):
    """Puts `then(scenario, policy, replication)` before every tracing of a replication."""
    from analysis import paths

    trace = paths.trace_replication

    def traced(scenario, policy, replication, **how):
        then(replication)
        return trace(scenario, policy, replication, **how)

    monkeypatch.setattr("analysis.paths.trace_replication", traced)


def test_an_interrupt_while_tracing_keeps_what_was_traced(call, two, monkeypatch):
    tracing(monkeypatch, lambda replication: replication == 2 and signal.raise_signal(signal.SIGINT))
    status, document = call("simulate", two, "--replications", 4, "--hour-of-week")
    assert status == INTERRUPTED and document["interrupted"]
    assert document["replications"] == 4 and document["hour_of_week_basis"]["replications"] == 2


def test_an_interrupt_before_anything_was_traced_says_so(call, show, two, monkeypatch):
    tracing(monkeypatch, lambda replication: signal.raise_signal(signal.SIGINT))
    status, document = call("simulate", two, *LONG, "--hour-of-week", "--warm-up-advice")
    assert status == INTERRUPTED and document["replications"] == 3
    assert "before any replication was traced" in document["paths_missing"] and "hour_of_week" not in document


def test_a_replication_that_cannot_be_traced_is_told_and_left_out(call, two, monkeypatch):
    def fail(replication):
        if replication == 1:
            raise RuntimeError("planted")

    tracing(monkeypatch, fail)
    status, document = call("simulate", two, *LONG, "--hour-of-week")
    assert status == FAILED
    assert [(one["replication"], "planted" in one["traceback"]) for one in document["failed"]] == [(1, True)]
    assert document["hour_of_week_basis"]["replications"] == 2 and document["replications"] == 3


# ---- a single run ----


def test_a_single_run_gets_batch_means(call, show, two, tmp_path):
    text = (tmp_path / "two.toml").read_text(encoding="utf-8")
    (tmp_path / "two.toml").write_text(
        text.replace("measured_days = 56", "measured_days = 200"), encoding="utf-8"
    )
    status, document = call("simulate", two, "--replications", 1)
    found = document["batch_means"]
    assert status == DONE and found["batches"] == 12
    for name in ("A", "B=b"):
        one = found["units"][name]["mean_occupied"]
        assert one["low"] < one["mean"] < one["high"]
        assert one["mean"] == pytest.approx(document["units"][name]["mean_occupied"]["mean"], rel=1e-9)
        assert document["units"][name]["mean_occupied"]["low"] is None
    assert found["network"]["throughput_per_day"]["mean"] == pytest.approx(
        document["network"]["throughput_per_day"]["mean"]
    )
    assert "Batch means of the one run: 12 batches" in show("simulate", two, "--replications", 1)[1]


def test_a_single_short_run_says_what_batches_need(call, show, two):
    found = call("simulate", two, "--replications", 1)[1]["batch_means"]
    assert found["batches"] is None and "run.measured_days of 80 or more" in found["reason"]
    assert "batch_means" not in call("simulate", two)[1]
    assert "No intervals: batch means need 5 batches" in show("simulate", two, "--replications", 1)[1]
