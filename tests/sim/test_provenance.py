"""Where a result came from: what must be there, and that the fingerprint is the machine's own."""

from __future__ import annotations

import datetime
import hashlib
import json
import platform
import subprocess
import sys
from importlib.metadata import version
from pathlib import Path

import numpy as np

from sim import intake
from sim.provenance import fingerprint, now, provenance
from sim.scenario import read_scenario

ROOT = Path(__file__).resolve().parents[2]
TEXT = """
schema = 1
run = { seed = 77 }
units = [{ name = "Ashgill", beds = 4 }]

[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 1
stay = { family = "empirical", file = "stays.csv", column = "days" }
"""


def test_the_fingerprint_is_the_same_in_another_process():
    code = "import json; from sim.provenance import fingerprint; print(json.dumps(fingerprint()))"
    command = [sys.executable, "-c", code]
    others = [
        subprocess.run(
            command, cwd=ROOT, env={"PYTHONHASHSEED": seed}, capture_output=True, text=True, check=True
        )
        for seed in ("1", "2")
    ]
    assert [json.loads(other.stdout) for other in others] == [fingerprint()] * 2
    assert set(fingerprint()) == {"numpy", "scipy", "probe_intake"}
    assert fingerprint()["numpy"] == np.__version__


def test_the_fingerprint_sees_another_last_bit(monkeypatch):
    before = fingerprint.__wrapped__()  # not the remembered one
    assert before == fingerprint()
    drawn = intake.arrival_times

    def one_bit_later(*arguments):
        times = drawn(*arguments)
        times[-1] = np.nextafter(times[-1], np.inf)
        return times

    monkeypatch.setattr(intake, "arrival_times", one_bit_later)
    assert fingerprint.__wrapped__()["probe_intake"] != before["probe_intake"]


def test_provenance_holds_all_that_repeats_a_result(tmp_path):
    path, data = tmp_path / "ashgill.toml", b"days\n1.5\n4\n"
    path.write_text(TEXT, encoding="utf-8")
    (tmp_path / "stays.csv").write_bytes(data)
    started = now()
    found = provenance(
        read_scenario(path), command=["brimline", "simulate"], engine="reference", started=started
    )
    assert json.loads(json.dumps(found)) == found  # plain values
    assert (found["command"], found["engine"], found["seed"]) == (["brimline", "simulate"], "reference", 77)
    assert found["scenario"]["file"] == str(path)
    assert found["scenario"]["text"] == TEXT
    assert found["scenario"]["sha256"] == hashlib.sha256(path.read_bytes()).hexdigest()
    assert found["scenario"]["data_sha256"] == {"stays.csv": hashlib.sha256(data).hexdigest()}
    assert found["versions"]["python"] == platform.python_version()
    assert found["versions"]["numpy"] == version("numpy") and found["versions"]["simpy"] == version("simpy")
    assert found["machine"]["fingerprint"] == fingerprint()
    assert found["program"]["name"] == "brimline" and "commit" in found["program"]


def test_times_are_utc_and_in_order(tmp_path):
    (tmp_path / "ashgill.toml").write_text(TEXT, encoding="utf-8")
    (tmp_path / "stays.csv").write_text("days\n2\n", encoding="utf-8")
    scenario = read_scenario(tmp_path / "ashgill.toml")
    found = provenance(scenario, command=[], engine="reference", started=now())
    started, ended = (datetime.datetime.fromisoformat(found[key]) for key in ("started", "ended"))
    assert started.utcoffset() == ended.utcoffset() == datetime.timedelta(0)
    assert started <= ended
