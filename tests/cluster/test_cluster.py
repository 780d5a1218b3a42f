"""The core, with real processes and TLS: the same answers as here, and what must be refused is refused.

The rest, from killed schedulers to a link that is down, is marked `by_hand` in the other modules.
"""

from __future__ import annotations

import json
import os
import shutil
import socket
import ssl

import pytest

from analysis.command.entry import run
from sim.cluster import Cluster
from sim.errors import RunError
from sim.machines import keys
from sim.machines.hello import bits
from sim.replicate import TaskSize, replicate
from tests.cluster import tasks
from tests.cluster.site import ROOT, wait_for
from tests.sim.test_replicate import POLICIES, SCENARIO, hashes

TWO_UNITS = str(ROOT / "scenarios" / "two-units.toml")


@pytest.mark.parametrize("engine", ["reference", "compiled"])
def test_records_are_those_of_a_local_run(site, engine):
    here = hashes(replicate(SCENARIO, POLICIES, range(6), engine=engine))
    workers = site.ready("north", "south")
    replies = list(
        replicate(SCENARIO, POLICIES, range(6), engine=engine, workers=workers, task_size=TaskSize(cells=2))
    )
    assert hashes(replies) == here
    assert {run.fingerprint for reply in replies for run in reply} == {bits()}


def test_a_command_prints_the_same_document_and_names_the_machines(site, monkeypatch, capsys):
    monkeypatch.setenv("BRIMLINE_CLUSTER_DIR", str(site.keys))
    monkeypatch.setattr("analysis.command.progress.SECONDS_BETWEEN_LINES", 0.0)
    asked = ["simulate", TWO_UNITS, "--json", "--replications", "8", "--engine", "reference"]
    assert run([*asked, "--cluster", site.address]) == 0
    there = capsys.readouterr()
    assert run(asked) == 0
    assert json.loads(there.out) == json.loads(capsys.readouterr().out)
    assert "north (1) " in there.err and "tasks/s, last answer" in there.err
    assert run(["cluster", "status", site.address, "--json"]) == 0
    rows = {row["machine"]: row for row in json.loads(capsys.readouterr().out)["machines"]}
    assert rows["south"] == {
        "machine": "south",
        "workers": 1,
        "may_help": True,
        "reason": None,
        "same_bits": True,
    }


def test_a_task_that_raises_costs_only_itself(site):
    replies = {
        reply.key: reply for reply in site.ready("north").run(tasks.half, [(n, (n,)) for n in range(6)])
    }
    assert {key: reply.value for key, reply in replies.items()} == {
        0: 0,
        1: None,
        2: 1,
        3: None,
        4: 2,
        5: None,
    }
    assert replies[3].failure.strip().endswith("ValueError: 3 is odd")


def test_strangers_are_refused(site, tmp_path):
    """Plain tcp, no certificate, another authority's, and keys that are missing."""
    import distributed

    with pytest.raises(OSError, match=r"(?s)."):
        distributed.Client(f"tcp://127.0.0.1:{site.port}", timeout=2)
    bare = ssl.create_default_context(cafile=str(site.keys / keys.AUTHORITY))
    bare.check_hostname = False
    with (
        pytest.raises((ssl.SSLError, ConnectionError)),
        socket.create_connection(("127.0.0.1", site.port), timeout=5) as plain,
        bare.wrap_socket(plain) as secured,
    ):
        secured.sendall(b"x" * 64)  # a refusal arrives after TLS 1.3's own handshake
        if secured.recv(1) == b"":
            raise ConnectionError("the scheduler hung up")
    keys.create(tmp_path / "foreign")
    with pytest.raises(RunError, match="every machine needs the same folder of keys"):
        Cluster(site.address, tmp_path / "foreign")
    wait_for(lambda: len(site.ready("north").look()) == 2, "the machines, which are there still")


def test_a_killed_worker_costs_nothing(site):
    cluster = site.ready("north", "south")
    replies = cluster.run(tasks.who, [(n, (0.3,)) for n in range(16)])
    first = next(replies)
    os.kill(first.value, 9)
    rest = list(replies)
    assert sorted(reply.key for reply in [first, *rest]) == list(range(16))
    assert all(reply.failure is None for reply in rest)


def test_another_version_is_refused_by_name(site, tmp_path):
    shutil.copytree(ROOT / "sim", tmp_path / "sim", ignore=shutil.ignore_patterns("__pycache__"))
    with open(tmp_path / "sim" / "intake.py", "a") as source:
        source.write("# one more line\n")
    site.join("older", cwd=tmp_path)
    cluster = site.ready("north")
    wait_for(lambda: "older" in {row["machine"] for row in cluster.look()}, "the older one")
    [row] = [row for row in cluster.look() if row["machine"] == "older"]
    assert row["may_help"] is False and row["reason"].startswith("brimline 0.1.0 (")
    replies = list(cluster.run(tasks.half, [(n, (n,)) for n in range(0, 20, 2)]))
    assert len(replies) == 10 and all(reply.failure is None for reply in replies)
    assert any(said.startswith("older is refused: brimline") for said in site.said)
    assert "older" not in cluster.machines
