"""Everything that can be lost: workers, nannies, the scheduler, the client; and those who come late or poison."""

from __future__ import annotations

import itertools
import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections import Counter

import psutil
import pytest

from analysis.command.entry import run
from tests.cluster import tasks
from tests.cluster.site import ROOT, wait_for
from tests.sim.test_replicate import SCENARIO_TEXT

pytestmark = pytest.mark.by_hand
OFTEN = """
import analysis.command.progress
analysis.command.progress.SECONDS_BETWEEN_LINES = 0.2
from analysis.command import main
main()
"""
CALL = [sys.executable, "-c", OFTEN]


def numbers(count, seconds=0.2):
    return [(n, (2 * n, seconds)) for n in range(count)]


def check(replies, count):
    """Every task exactly once, each with its answer."""
    assert Counter(reply.key for reply in replies) == Counter(range(count))
    assert all(reply.value == reply.key for reply in replies), [one.failure for one in replies if one.failure]


def test_a_killed_nanny_costs_nothing(own_site):
    own_site.join("north")
    own_site.join("south")
    replies = own_site.ready("north", "south").run(tasks.half, numbers(30))
    done = list(itertools.islice(replies, 3))
    own_site.kill("north")
    check([*done, *replies], 30)
    assert any("north is gone" in said for said in own_site.said)


def test_a_killed_scheduler_is_waited_for_and_everyone_comes_back(own_site):
    own_site.join("north")
    own_site.join("south")
    replies = own_site.ready("north", "south").run(tasks.half, numbers(40))
    done = list(itertools.islice(replies, 3))
    own_site.kill("scheduler")
    own_site.processes["scheduler"].wait()
    time.sleep(1.0)
    own_site.start_scheduler()
    check([*done, *replies], 40)
    assert any("out of reach" in said for said in own_site.said)


def test_a_stopped_worker_is_given_up_its_tasks_go_elsewhere_and_it_comes_back(own_site):
    own_site.join("north")
    own_site.join("south")
    cluster = own_site.ready("north", "south")
    replies = cluster.run(tasks.half, numbers(30))
    done = list(itertools.islice(replies, 3))
    for worker in own_site.workers_of("north"):
        worker.suspend()
    check([*done, *replies], 30)
    again = own_site.ready("north", "south")
    check(list(again.run(tasks.half, numbers(10))), 10)


def test_whoever_joins_late_finds_work(own_site):
    own_site.join("north")
    replies = own_site.ready("north").run(tasks.who, ((n, (0.2,)) for n in itertools.count()))
    done = [next(replies) for _ in range(3)]
    own_site.join("south")
    until = time.monotonic() + 240
    while len({reply.value for reply in done}) < 2 and time.monotonic() < until:
        done.append(next(replies))
    replies.close()
    assert len({reply.value for reply in done}) == 2


def test_a_poisoned_task_is_isolated_and_all_others_are_done(own_site):
    own_site.join("north")
    own_site.join("south")
    replies = {
        one.key: one
        for one in own_site.ready("north", "south").run(tasks.poison, [(n, (n,)) for n in range(20)])
    }
    assert "3 workers were lost while they ran this task" in replies.pop(13).failure
    assert {key: one.value for key, one in replies.items()} == {n: n for n in range(20) if n != 13}


def test_a_late_answer_is_asked_for_again_elsewhere(own_site, tmp_path):
    """One task hangs with its worker stopped; at the end the other machine is asked for it."""
    own_site.ttl = 300.0
    own_site.kill("scheduler")
    own_site.processes["scheduler"].wait()
    own_site.start_scheduler()
    own_site.join("north")
    own_site.join("south")
    cluster = own_site.ready("north", "south")
    replies = cluster.run(tasks.note_and_sleep, [(n, (str(tmp_path), n, 0.2)) for n in range(8)])
    done = [next(replies)]
    for worker in own_site.workers_of("north"):
        worker.suspend()
    done += list(replies)
    assert sorted(reply.key for reply in done) == list(range(8))


def test_nobody_there_is_said_and_ctrl_c_still_ends_it(own_site, monkeypatch):
    monkeypatch.setattr("sim.cluster.NOBODY_SECONDS", 1.0)
    own_site.await_scheduler()
    replies = own_site.cluster().run(tasks.half, numbers(2))
    threading.Timer(4.0, lambda: os.kill(os.getpid(), signal.SIGINT)).start()
    with pytest.raises(KeyboardInterrupt):
        next(replies)
    assert any("no worker for a minute" in said for said in own_site.said)


def command(site, *arguments):
    environment = os.environ | {"BRIMLINE_CLUSTER_DIR": str(site.keys), "PYTHONPATH": str(ROOT)}
    return subprocess.Popen(
        [*CALL, *map(str, arguments)], cwd=ROOT, env=environment, text=True,
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, start_new_session=True,
    )  # fmt: skip


def await_line(process, part):
    said = []
    while not said or (said[-1] and part not in said[-1]):
        said.append(process.stderr.readline())
    assert said[-1], "".join(said)


@pytest.fixture
def long_job(tmp_path):
    path = tmp_path / "scenario.toml"
    path.write_text(SCENARIO_TEXT, encoding="utf-8")
    return ["simulate", path, "--json", "--engine", "reference", "--replications", "1500", "--out"]


def test_a_killed_client_resumes_to_the_same_result(own_site, long_job, tmp_path, capsys):
    own_site.join("north", 2)
    own_site.ready("north").close()
    first = command(own_site, *long_job, tmp_path / "there", "--cluster", own_site.address)
    await_line(first, "1500 runs")
    first.kill()
    first.communicate()
    second = command(own_site, *long_job, tmp_path / "there", "--cluster", own_site.address)
    out, err = second.communicate(timeout=200)
    assert second.returncode == 0, err
    document = json.loads(out)
    assert 0 < document["reused"] < 1500 and document["reused"] + document["computed"] == 1500
    assert run([*map(str, long_job), str(tmp_path / "here")]) == 0
    here = json.loads(capsys.readouterr().out)
    for name in ("reused", "computed"):
        del here[name], document[name]
    assert document == here


def test_ctrl_c_keeps_what_was_computed(own_site, long_job, tmp_path):
    own_site.join("north", 2)
    own_site.ready("north").close()
    process = command(own_site, *long_job, tmp_path / "there", "--cluster", own_site.address)
    await_line(process, "1500 runs")
    os.killpg(process.pid, signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 130 and "Traceback" not in err, err
    assert 0 < json.loads(out)["replications"] < 1500


def test_join_and_host_start_again_what_died_and_end_with_ctrl_c(own_site):
    own_site.kill("scheduler")
    own_site.processes["scheduler"].wait()
    host = command(own_site, "cluster", "host", "--host", "127.0.0.1", "--port", own_site.port)
    join = command(own_site, "cluster", "join", own_site.address, "--workers", "1", "--name", "tarn")
    try:
        check(list(own_site.ready("tarn").run(tasks.half, numbers(5))), 5)
        for process in (join, host):
            [child] = psutil.Process(process.pid).children()
            child.kill()
        wait_for(lambda: all(psutil.Process(one.pid).children() for one in (host, join)), "new processes")
        check(list(own_site.ready("tarn").run(tasks.half, numbers(5))), 5)
    finally:
        children = [
            one for parent in (host, join) for one in psutil.Process(parent.pid).children(recursive=True)
        ]
        for process in (join, host):
            os.killpg(process.pid, signal.SIGINT)
    for process in (join, host):
        _, err = process.communicate(timeout=60)
        assert process.returncode == 130 and "Traceback" not in err, err
    wait_for(lambda: not any(one.is_running() for one in children), "the end of every child")


def test_killed_parents_take_their_children_with_them(own_site):
    join = command(own_site, "cluster", "join", own_site.address, "--workers", "1", "--name", "tarn")
    own_site.ready("tarn").close()
    children = psutil.Process(join.pid).children(recursive=True)
    join.kill()
    join.communicate()
    wait_for(lambda: not any(one.is_running() for one in children), "the end of every child")
