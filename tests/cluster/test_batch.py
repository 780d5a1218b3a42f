"""A batch over a cluster: the same table, an end in time whoever answers, and replications that others began."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time

import pytest

from analysis.command import batch as batch_command
from analysis.command import deadline
from analysis.command.entry import run
from sim import replicate
from sim.provenance import fingerprint
from sim.store import Store
from tests.cluster.site import ROOT, wait_for
from tests.cluster.test_bits import odd  # noqa: F401 - a fixture
from tests.endurance import SCENARIO, hash_of, rows_in

PLAN = """
schema = 1
title = "Two demands (invented)"
scenarios = ["two.toml"]
demand = [0.9, 1.1]
replications = 20
analyses = ["simulate", "game"]
"""
RUNS = 2 * 6 * 20
SLOWLY = """
import sys, time, sim.replicate
sim.replicate.SECONDS_PER_TASK, sim.replicate.LEAST_TASK_SECONDS = 1e-9, 0.0
from analysis.command.entry import main
main()
"""


@pytest.fixture(autouse=True)
def no_pictures(monkeypatch):
    monkeypatch.setattr("analysis.figures.save_payoffs", lambda *_: None)


@pytest.fixture
def plan(tmp_path):
    (tmp_path / "two.toml").write_text(SCENARIO, encoding="utf-8")
    (tmp_path / "plan.toml").write_text(PLAN, encoding="utf-8")
    return tmp_path / "plan.toml"


def told(folder):
    return json.loads((folder / "batch.json").read_text())


def batch(site, plan, folder, *options):
    """A batch over the cluster in a process of its own, every run a task of its own."""
    command = [sys.executable, "-c", SLOWLY, "batch", plan, "--out", folder, "--engine", "reference",
               "--cluster", site.address, *options]  # fmt: skip
    environment = os.environ | {"BRIMLINE_CLUSTER_DIR": str(site.keys)}
    return subprocess.Popen(
        [*map(str, command)], cwd=ROOT, env=environment, stderr=subprocess.PIPE, stdout=subprocess.DEVNULL,
        text=True,
    )  # fmt: skip


def local(plan, folder):
    assert run(["batch", str(plan), "--out", str(folder), "--engine", "reference", "--workers", "1"]) == 0


def test_a_batch_over_the_cluster_leaves_the_table_of_a_local_one(site, plan, tmp_path, monkeypatch, capsys):
    monkeypatch.setenv("BRIMLINE_CLUSTER_DIR", str(site.keys))
    asked = ["batch", str(plan), "--out", str(tmp_path / "there"), "--cluster", site.address]
    assert run(asked) == 0
    local(plan, tmp_path / "here")
    assert hash_of(tmp_path / "there") == hash_of(tmp_path / "here")
    there, here = told(tmp_path / "there"), told(tmp_path / "here")
    assert (there["state"], there["workers"], there["runs"]["missing"]) == ("complete", 2, 0)
    assert "north (1)" in there["machines"] and here["machines"] is None
    for part in here["parts"]:
        documents = [json.loads((tmp_path / name / part["result"]).read_text()) for name in ("here", "there")]
        for one in documents:
            one.pop("engine"), one.pop("engine_choice")
        assert documents[0] == documents[1]
    capsys.readouterr()


def test_a_deadline_holds_while_nobody_answers_and_the_batch_goes_on_here(
    site, plan, tmp_path, monkeypatch, capsys
):
    """Every worker is stopped under way, and the scheduler still counts them as there; then the hours are over."""
    folder, shift = tmp_path / "there", [0.0]
    monkeypatch.setenv("BRIMLINE_CLUSTER_DIR", str(site.keys))
    clock = deadline.Clock(seconds=lambda: time.monotonic() + shift[0])
    monkeypatch.setattr(batch_command, "deadline_of", lambda *bounds: deadline.deadline_of(*bounds, clock))
    monkeypatch.setattr(replicate, "SECONDS_PER_TASK", 1e-9)
    monkeypatch.setattr(replicate, "LEAST_TASK_SECONDS", 0.0)
    monkeypatch.setattr("sim.cluster.LAST_SECONDS", 1.0)
    workers = [one for name in ("north", "south") for one in site.workers_of(name)]

    def stop_everybody():
        while rows_in(folder) < 8:
            time.sleep(0.02)
        for one in workers:
            one.suspend()
        shift[0] = 1e6

    threading.Thread(target=stop_everybody, daemon=True).start()
    asked = ["batch", str(plan), "--out", str(folder), "--engine", "reference", "--cluster", site.address]
    try:
        assert run([*asked, "--hours", "1"]) in (0, 1)
    finally:
        for one in workers:
            one.resume()
    document, said = told(folder), capsys.readouterr().err
    assert (document["state"], document["ended_because"], len(workers)) == ("stopped", "time", 2)
    assert 8 <= document["runs"]["computed"] == rows_in(folder) < RUNS
    assert f"the time is over; {document['runs']['missing']} runs are missing" in said
    local(plan, folder)
    local(plan, tmp_path / "here")
    assert hash_of(folder) == hash_of(tmp_path / "here")


@pytest.mark.by_hand
@pytest.mark.parametrize("how", [signal.SIGKILL, signal.SIGSTOP])
def test_a_deadline_holds_with_everybody_gone(own_site, plan, tmp_path, how):
    """Workers, nannies and the scheduler."""
    own_site.join("north", 2)
    own_site.ready("north").close()
    process = batch(own_site, plan, tmp_path / "there", "--minutes", "0.5")
    wait_for(lambda: rows_in(tmp_path / "there") >= 8 or process.poll() is not None, "some runs")
    for name in ("north", "scheduler"):
        own_site.kill(name, how)
    _, said = process.communicate(timeout=120)
    for name in ("north", "scheduler"):
        own_site.kill(name, signal.SIGCONT)
    document = told(tmp_path / "there")
    assert (document["state"], document["ended_because"], "Traceback" in said) == ("stopped", "time", False)
    assert document["runs"]["computed"] == rows_in(tmp_path / "there") < RUNS
    local(plan, tmp_path / "there")
    local(plan, tmp_path / "here")
    assert hash_of(tmp_path / "there") == hash_of(tmp_path / "here")


@pytest.mark.by_hand
def test_a_batch_on_machines_of_two_kinds_mixes_nothing(own_site, odd, plan, tmp_path, monkeypatch):  # noqa: F811
    """By rounds, parts sharing cells: each replication of a network is whole and of one kind; then one kind is gone."""
    own_site.join("plain")
    own_site.join("odd", path=[odd])
    own_site.ready("plain", "odd").close()
    folder = tmp_path / "there"
    process = batch(own_site, plan, folder, "--budget", "90")
    _, said = process.communicate(timeout=240)
    assert "Traceback" not in said, said
    kinds = by_whom(folder)
    assert len(set(kinds.values())) == 2 and hash_of(folder)
    own_site.kill("odd", signal.SIGTERM)
    monkeypatch.setattr("sim.machines.desk.PATIENCE_SECONDS", 1.0)
    monkeypatch.setenv("BRIMLINE_CLUSTER_DIR", str(own_site.keys))
    asked = ["batch", str(plan), "--out", str(folder), "--engine", "reference", "--cluster", own_site.address]
    assert run(asked) == 0
    assert (told(folder)["state"], told(folder)["runs"]["missing"]) == ("complete", 0)
    local(plan, tmp_path / "here")
    assert hash_of(folder) == hash_of(tmp_path / "here")
    assert set(by_whom(folder)) == set(by_whom(tmp_path / "here"))


def by_whom(folder):
    """(scenario, replication) -> fingerprint; the store itself holds one a replication."""
    with Store(folder) as store:
        rows = list(store.rows())
    found = {}
    for row in rows:
        found.setdefault((row.key.scenario, row.key.replication), set()).add(row.fingerprint)
    assert all(len(some) == 1 for some in found.values())
    return {address: json.loads(some.pop()) == fingerprint() for address, some in found.items()}
