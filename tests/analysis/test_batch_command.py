"""`brimline batch` as real processes that are interrupted, killed and started twice; and its folder afterwards."""

from __future__ import annotations

import itertools
import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from analysis.command.batch_state import LOG, SNAPSHOT
from analysis.command.progress import until_interrupted
from analysis.command.watching import snapshot
from sim import reference, replicate
from sim.store_file import LOCK
from tests.analysis.conftest import TWO
from tests.analysis.test_results_command import CLIENT, numbers, rows_in

PLAN = """
schema = 1
title = "Two demands (invented)"
scenarios = ["two.toml"]
demand = [0.9, 1.1]
targets = [0.5, 0.6]
replications = 30
analyses = ["simulate", "game"]
"""
ROOT = Path(__file__).resolve().parents[2]
RUNS = 2 * 6 * 30
KILLED_AT = (0, 200)  # `python -m tests.batch_endurance` has twenty moments


# Drawing would take most of the time.
WITHOUT_PICTURES = """
import sys
class Undrawn:
    def __getattr__(self, name):
        if name.startswith("__"):
            raise AttributeError(name)
        return lambda *_, **__: None
for room in ("figures", "figures_replies", "figures_paths"):
    sys.modules["analysis." + room] = Undrawn()
"""


@pytest.fixture(autouse=True)
def no_pictures(monkeypatch, request):
    if request.node.name != "test_a_scenario_by_itself_is_its_games_whole_table":
        monkeypatch.setattr("analysis.figures.save_payoffs", lambda *_: None)


@pytest.fixture
def plan(tmp_path):
    (tmp_path / "two.toml").write_text(TWO, encoding="utf-8")
    (tmp_path / "plan.toml").write_text(PLAN, encoding="utf-8")
    return tmp_path / "plan.toml"


def client(*arguments):
    """A batch in a process of its own, every run a task of its own."""
    command = [sys.executable, "-c", WITHOUT_PICTURES + CLIENT, *map(str, arguments), "--engine", "reference",
               "--workers", "1"]  # fmt: skip
    return subprocess.Popen(command, cwd=ROOT, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)


def wait_for(process, folder, rows):
    while rows_in(folder) < rows and process.poll() is None:
        time.sleep(0.005)


def test_a_plan_is_run_whole_every_part_has_its_commands_own_result_and_results_knows_it(
    call, plan, tmp_path
):
    folder = tmp_path / "r"
    status, document = call("batch", plan, "--out", folder)
    assert (status, document["state"], document["ended_because"]) == (0, "complete", None)
    assert document["runs"] == {"asked": RUNS, "reused": 0, "computed": RUNS, "failed": 0, "missing": 0}
    assert len(document["parts"]) == 6 and all(part["complete"] for part in document["parts"])
    assert json.loads((folder / SNAPSHOT).read_text())["parts"] == document["parts"]
    for part in document["parts"]:
        kept = json.loads((folder / part["result"]).read_text())
        assert part["reached"] == 30
        if part in document["parts"][::2]:
            assert numbers(kept) == numbers(call(*part["command"][1:])[1])
        origin = json.loads((folder / part["name"] / "provenance.json").read_text())
        assert origin["command"] == [*part["command"], "--out", str(folder / part["name"])]
    again = call("batch", plan, "--out", folder)[1]
    assert (again["runs"]["computed"], again["runs"]["reused"], again["state"]) == (0, RUNS, "complete")
    shown = call("results", "show", folder)[1]
    assert (shown["complete"], shown["rows"], shown["scenarios"]) == (True, RUNS, 2)
    assert call("results", "verify", folder)[1]["checked"] == 20
    assert call("results", "repeat", folder)[1] | {"command": None} == {
        "agrees": True, "command": None, "compared": RUNS, "missing": 0, "different": [],
    }  # fmt: skip


def test_a_scenario_by_itself_is_its_games_whole_table(call, two, tmp_path):
    status, document = call("batch", two, "--out", tmp_path / "r")
    [part] = document["parts"]
    assert (status, part["command"][1:], part["replications"], document["runs"]["asked"]) == (
        0,
        ["game", two],
        4,
        24,
    )
    assert numbers(json.loads((tmp_path / "r" / part["result"]).read_text())) == numbers(call("game", two)[1])
    assert (tmp_path / "r" / part["name"] / "payoffs-1.png").exists()


def test_without_out_it_goes_to_a_folder_of_the_plans_name(plan, call, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert call("batch", plan, "--budget", 5)[0] == 0
    assert (tmp_path / "results" / "plan" / SNAPSHOT).exists()


def test_a_budget_leaves_a_useful_answer_and_says_what_remains(call, show, plan, tmp_path):
    folder = tmp_path / "r"
    status, document = call("batch", plan, "--out", folder, "--budget", 120)
    assert (status, document["state"], document["ended_because"]) == (0, "stopped", "budget")
    assert document["runs"]["computed"] == 120 and document["runs"]["missing"] == RUNS - 120
    assert [part["reached"] for part in document["parts"]] == [10] * 6
    assert all(part["seconds_left"] > 0 and not part["complete"] for part in document["parts"])
    game = next(part for part in document["parts"] if part["analysis"] == "game")
    kept = json.loads((folder / game["result"]).read_text())
    assert (kept["replications"], kept["interrupted"]) == (10, True)
    status, out, said = show("batch", plan, "--out", folder, "--budget", 1)
    assert status == 0 and "239 runs are missing" in said and "10 of 30" in out
    assert "360 different runs (its parts ask for 780; they share the others)" in said
    assert "not for decisions on a patient" in " ".join(out.split())


def test_an_estimate_runs_nothing(call, show, plan, tmp_path):
    folder = tmp_path / "r"
    status, document = call("batch", plan, "--out", folder, "--estimate")
    assert (status, document["runs"]["missing"], document["state"]) == (0, RUNS, "planned")
    assert document["seconds_left"] > 0 and all(part["result"] is None for part in document["parts"])
    assert rows_in(folder) == 0


def test_time_ends_it_and_the_same_command_goes_on(call, plan, tmp_path, monkeypatch):
    """Whenever the clock is looked at a second has passed, so that nothing depends on this machine's pace."""
    from analysis.command import batch, deadline

    clock = deadline.Clock(seconds=map(float, itertools.count()).__next__)
    monkeypatch.setattr(batch, "deadline_of", lambda *bounds: deadline.deadline_of(*bounds, clock))
    monkeypatch.setattr(replicate, "SECONDS_PER_TASK", 1e-9)
    monkeypatch.setattr(replicate, "LEAST_TASK_SECONDS", 0.0)  # tasks stay as small as they are
    document = call("batch", plan, "--out", tmp_path / "r", "--minutes", 1, "--workers", 1)[1]
    assert (document["state"], document["ended_because"]) == ("stopped", "time")
    first = document["runs"]["computed"]
    assert 0 < first < RUNS, "a minute of looks is less than the whole"
    assert call("batch", plan, "--out", tmp_path / "r", "--budget", 10)[1]["runs"]["reused"] == first


def test_a_failed_run_costs_only_itself_and_is_told(call, plan, tmp_path, monkeypatch):
    run_table = reference.run_table

    def broken(network, rules, intake):
        if any(one.own_closes[0] == 1 for one in rules):
            raise MemoryError("planted")
        return run_table(network, rules, intake)

    monkeypatch.setattr(reference, "run_table", broken)
    folder = tmp_path / "r"
    status, document = call("batch", plan, "--out", folder, "--engine", "reference", "--workers", 1)
    monkeypatch.undo()
    assert (status, document["state"], document["runs"]["failed"]) == (1, "failed", RUNS // 2)
    reached = {part["analysis"]: (part["reached"], part["result"]) for part in document["parts"]}
    assert reached["simulate"][0] == 30 and reached["game"] == (0, None)
    assert "MemoryError: planted" in (folder / LOG).read_text()
    assert call("batch", plan, "--out", folder)[1]["state"] == "complete"


# ---- real processes ----


def test_kill_9_at_any_moment_then_resume_gives_the_store_of_an_uninterrupted_batch(call, plan, tmp_path):
    whole, folder, reached = tmp_path / "whole", tmp_path / "killed", []
    assert call("batch", plan, "--out", whole)[0] == 0
    for moment in KILLED_AT:
        killed = client("batch", plan, "--out", folder)
        wait_for(killed, folder, moment)
        killed.send_signal(signal.SIGKILL)
        assert killed.wait() == -signal.SIGKILL, "the batch must not have ended by itself"
        reached.append(rows_in(folder))
    assert reached == sorted(reached) and KILLED_AT[-1] <= reached[-1] < RUNS
    gone = snapshot(folder)
    assert (gone["state"], "run the batch again" in gone["ended_because"]) == ("gone", True)
    document = call("batch", plan, "--out", folder)[1]
    assert (document["runs"]["reused"], document["runs"]["computed"]) == (reached[-1], RUNS - reached[-1])
    assert "ended without closing; what it had kept is here" in (folder / LOG).read_text()
    first, second = (call("results", "show", place)[1] for place in (whole, folder))
    assert (first["table_hash"], first["rows"]) == (second["table_hash"], second["rows"])
    for part in document["parts"]:
        results = [json.loads((place / part["result"]).read_text()) for place in (whole, folder)]
        assert numbers(results[0]) | {"reused": 0} == numbers(results[1]) | {"reused": 0}


@pytest.mark.skipif(not hasattr(signal, "SIGHUP"), reason="terminals of POSIX")
def test_every_way_to_ask_for_an_end_is_heard_and_a_hang_up_is_not_heard_under_nohup():
    """The second hang-up, a shell's beside the terminal's, must not break off what is being written."""
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        before = signal.getsignal(number)
        with until_interrupted(signalled(number)) as replies:
            assert list(replies) == [0]
        with until_interrupted(one for one in range(3)) as again:
            if number == signal.SIGHUP:
                signal.raise_signal(number)
            assert list(again) == [0, 1, 2]
        assert replies.interrupted and not again.interrupted
        assert signal.getsignal(number) == (signal.SIG_IGN if number == signal.SIGHUP else before)
    with until_interrupted(signalled(signal.SIGHUP)) as replies:  # it is ignored now, as under nohup
        assert list(replies) == [0, 1]
    signal.signal(signal.SIGHUP, signal.SIG_DFL)


def signalled(number):
    yield 0
    signal.raise_signal(number)
    yield 1


@pytest.mark.parametrize("number", [signal.SIGINT, getattr(signal, "SIGHUP", signal.SIGTERM)])
def test_a_request_to_end_keeps_what_was_computed_and_writes_the_results(call, plan, tmp_path, number):
    folder = tmp_path / "r"
    ended = client("batch", plan, "--out", folder)
    wait_for(ended, folder, 150)
    ended.send_signal(number)
    assert ended.wait() == 130
    document = json.loads((folder / SNAPSHOT).read_text())
    assert (document["state"], document["ended_because"]) == ("stopped", "interrupted")
    assert 150 <= document["runs"]["computed"] == rows_in(folder) < RUNS
    assert all(part["reached"] >= 10 and (folder / part["result"]).exists() for part in document["parts"])
    assert (folder / LOG).read_text().endswith("ended: stopped\n")
    assert call("batch", plan, "--out", folder)[1]["runs"]["reused"] == document["runs"]["computed"]


def test_a_second_batch_is_kept_off_and_told_whose_the_folder_is_and_a_watcher_sees_the_first(
    call, show, plan, tmp_path
):
    folder = tmp_path / "r"
    first = client("batch", plan, "--out", folder)
    try:
        wait_for(first, folder, 15)
        first.send_signal(signal.SIGSTOP)
        status, _, said = show("batch", plan, "--out", folder)
        assert status == 1 and f"is being written by process {first.pid} on " in said
        status, seen = call("results", "watch", folder)
        assert (status, seen["state"], seen["process"]["pid"]) == (0, "running", first.pid)
        assert seen["store"]["rows"] >= 15 and seen["now"]["part"] in {part["name"] for part in seen["parts"]}
    finally:
        first.send_signal(signal.SIGCONT)
        first.send_signal(signal.SIGKILL)
        first.wait()


def test_a_lock_left_by_a_process_that_died_keeps_nobody_off(call, plan, tmp_path):
    folder = tmp_path / "r"
    folder.mkdir()
    (folder / LOCK).write_text(
        json.dumps({"pid": 2**22 + 1, "host": "elsewhere", "since": "2026-01-01T00:00:00+00:00"})
    )
    assert call("batch", plan, "--out", folder, "--budget", 5)[0] == 0
    assert (
        "the writer before (process 4194305 on elsewhere since 2026-01-01T00:00:00+00:00) ended"
        in (folder / LOG).read_text()
    )
    assert call("batch", plan, "--out", folder, "--budget", 5)[0] == 0
    assert (folder / LOG).read_text().count("ended without closing") == 1


def test_watching_ends_with_the_batch_and_changes_nothing(show, call, plan, tmp_path):
    folder = tmp_path / "r"
    running = client("batch", plan, "--out", folder)
    wait_for(running, folder, 15)
    status, out, said = show("results", "watch", folder)
    assert (status, out) == (0, "") and "batch complete: 360 of 360 runs, 100 %; nothing left" in said
    assert running.wait() == 0
    before = {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()}
    assert show("results", "watch", folder)[0] == 0
    assert {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()} == before


def test_a_folder_without_a_batch_cannot_be_watched(show, two, tmp_path):
    assert show("simulate", two, "--out", tmp_path / "r")[0] == 0
    status, _, said = show("results", "watch", tmp_path / "r")
    assert status == 1 and "holds no batch" in said


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root can write everywhere")
def test_a_read_only_folder_is_told(plan, show, tmp_path):
    folder = Path(tmp_path / "r")
    folder.mkdir(mode=0o500)
    status, _, said = show("batch", plan, "--out", folder)
    assert status == 2 and "--out: must be a folder that can be written" in said
