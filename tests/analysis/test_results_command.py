"""Runs kept with --out: they go on where they stopped, survive kill -9, and `results` tells what is there."""

from __future__ import annotations

import csv
import importlib.util
import json
import os
import signal
import sqlite3
import subprocess
import sys
import time
from contextlib import closing
from pathlib import Path

import pytest

from analysis.command.entry import run
from sim import reference
from sim.errors import StoreError
from sim.store import Store
from sim.store_file import FILE

ROOT = Path(__file__).resolve().parents[2]
TOLD_OF_THE_STORE = {"computed", "reused", "engine", "engine_choice", "race_choice"}


def numbers(document):
    """A document without what it says of the store and of how it was chosen to run."""
    return {name: value for name, value in document.items() if name not in TOLD_OF_THE_STORE}


# ---- going on ----


@pytest.mark.parametrize("command", ["simulate", "game"])
def test_a_run_goes_on_with_more_replications_and_gives_the_same_bits(call, two, tmp_path, command):
    cells = 6 if command == "game" else 1
    plain = call(command, two, "--replications", 5)[1]
    assert not {"computed", "reused"} & set(plain)
    for replications, computed in ((2, 2), (5, 3)):
        status, document = call(command, two, "--replications", replications, "--out", tmp_path / "r")
        assert status == 0
        assert (document["computed"], document["reused"]) == (
            computed * cells, (replications - computed) * cells
        )  # fmt: skip
    assert numbers(document) == numbers(plain)
    again = call(command, two, "--replications", 2, "--out", tmp_path / "r")[1]
    assert again["computed"] == 0
    assert numbers(again) == numbers(call(command, two, "--replications", 2)[1])


def test_commands_share_cells_and_other_targets_and_welfares_need_no_new_run(call, two, tmp_path):
    folder = tmp_path / "r"
    assert (
        call("simulate", two, "--threshold", "A=1", "--threshold", "B=b=3", "--out", folder)[1]["computed"]
        == 4
    )
    game = call("game", two, "--out", folder)[1]
    assert (game["computed"], game["reused"]) == (20, 4)
    again = call("game", two, "--target", 0.7, "--out", folder)[1]
    assert (again["computed"], again["reused"]) == (0, 24)
    assert numbers(again) == numbers(call("game", two, "--target", 0.7)[1])
    text = Path(two).read_text() + '\n[game]\nwelfare = { kind = "loss", transfer_weight = 0.3 }\n'
    Path(two).write_text(text)
    assert call("game", two, "--out", folder)[1]["computed"] == 0
    assert call("game", two, "--demand", 1.1, "--out", folder)[1]["computed"] == 24
    assert call("results", "show", folder)[1]["scenarios"] == 2


def test_worker_processes_share_the_store_too(call, two, tmp_path):
    for workers in (1, 2):
        assert call("game", two, "--workers", workers, "--out", tmp_path / str(workers))[0] == 0
    first, second = (call("results", "show", tmp_path / name)[1] for name in ("1", "2"))
    assert first["table_hash"] == second["table_hash"] and first["rows"] == 24


def test_an_earlier_result_is_put_away_but_the_store_stays(call, two, tmp_path):
    for _ in range(2):
        call("simulate", two, "--out", tmp_path / "r")
    assert {path.name for path in (tmp_path / "r" / "earlier" / "1").iterdir()} == {
        "result.json", "provenance.json"
    }  # fmt: skip
    assert (tmp_path / "r" / FILE).exists()


def test_verify_never_reads_a_store(call, two, tmp_path):
    """It must test the program as it is now."""
    assert call("verify", two, "--replications", 6, "--out", tmp_path / "r")[0] == 0
    assert not (tmp_path / "r" / FILE).exists()


def test_a_failed_run_is_recorded_and_tried_again(call, two, tmp_path, monkeypatch):
    folder, run_table = tmp_path / "r", reference.run_table

    def broken(network, rules, intake):
        if any(one.own_closes[0] == 1 for one in rules):
            raise MemoryError("planted")
        return run_table(network, rules, intake)

    monkeypatch.setattr(reference, "run_table", broken)
    call_status = run(["game", two, "--engine", "reference", "--out", str(folder)])
    monkeypatch.undo()
    assert call_status == 1
    with Store(folder) as store:
        assert store.counts()["failed"] == 12 and store.counts()["rows"] == 12
        assert "MemoryError: planted" in store.failures()[0]["traceback"]
    status, document = call("game", two, "--out", folder)
    shown = call("results", "show", folder)[1]
    assert (status, document["computed"], document["reused"]) == (0, 12, 12)
    assert (shown["failed"], shown["complete"], shown["failures"]) == (0, True, [])


# ---- kill -9 ----

CLIENT = """
import sys, sim.replicate
sim.replicate.SECONDS_PER_TASK = 1e-9  # every run a task, so that there are many moments to be killed at
from analysis.command.entry import main
main()
"""


def client(*arguments):
    command = [sys.executable, "-c", CLIENT, *map(str, arguments), "--engine", "reference", "--workers", "1"]
    return subprocess.Popen(command, cwd=ROOT, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)


def rows_in(folder):
    try:
        with Store(folder) as store:
            return store.counts()["rows"]
    except StoreError:  # not there yet
        return -1


def test_kill_9_at_any_moment_then_resume_gives_the_table_of_an_uninterrupted_run(call, two, tmp_path):
    asked = ("game", two, "--replications", 60)
    whole, folder = tmp_path / "whole", tmp_path / "killed"
    assert call(*asked, "--out", whole)[0] == 0
    reached, expected = [], call("results", "show", whole)[1]
    for moment in (0, 261):  # at random ones: test_endurance.py
        killed = client(*asked, "--out", folder)
        while rows_in(folder) < moment and killed.poll() is None:
            time.sleep(0.005)
        killed.send_signal(signal.SIGKILL)
        assert killed.wait() == -signal.SIGKILL, "the client must not have ended by itself"
        reached.append(rows_in(folder))
    shown = call("results", "show", folder)[1]
    assert reached == sorted(reached) and 261 <= reached[-1] < 360
    assert (shown["complete"], shown["rows"], shown["ended"]) == (False, reached[-1], None)
    assert shown["computed"] + shown["reused"] == reached[-1]
    status, document = call(*asked, "--out", folder)
    assert (status, document["reused"], document["computed"]) == (0, reached[-1], 360 - reached[-1])
    shown = call("results", "show", folder)[1]
    assert (shown["table_hash"], shown["rows"], shown["complete"]) == (expected["table_hash"], 360, True)
    assert numbers(json.loads((folder / "result.json").read_text())) == numbers(
        json.loads((whole / "result.json").read_text())
    )


def test_ctrl_c_keeps_what_was_computed_and_the_next_run_goes_on(call, two, tmp_path):
    asked, folder = ("game", two, "--replications", 60), tmp_path / "r"
    interrupted = client(*asked, "--out", folder)
    while rows_in(folder) < 30 and interrupted.poll() is None:
        time.sleep(0.005)
    interrupted.send_signal(signal.SIGINT)
    assert interrupted.wait() == 130
    shown = call("results", "show", folder)[1]
    assert shown["complete"] is False and shown["ended"] is not None and 30 <= shown["rows"] < 360
    assert call(*asked, "--out", folder)[1]["reused"] == shown["rows"]


def test_a_second_command_is_kept_off_a_folder_that_is_being_written(two, tmp_path, show):
    folder = tmp_path / "r"
    with Store(folder, write=True):
        status, _, said = show("simulate", two, "--out", folder)
    assert status == 1 and f"being written by process {os.getpid()}" in said
    assert show("simulate", two, "--out", folder)[0] == 0


def test_a_damaged_store_is_told_by_every_command_and_not_touched(two, tmp_path, show):
    folder = tmp_path / "r"
    show("simulate", two, "--out", folder)
    os.truncate(folder / FILE, 9000)
    left = (folder / FILE).read_bytes()
    for arguments in (("simulate", two, "--out", folder), ("results", "show", folder),
                      ("results", "verify", folder), ("results", "repeat", folder)):  # fmt: skip
        status, out, said = show(*arguments)
        assert (status, out) == (1, "") and "is damaged" in said and "Traceback" not in said
    assert (folder / FILE).read_bytes() == left


# ---- results ----


@pytest.fixture
def folder(two, tmp_path, show):
    """A folder with the results of `game`."""
    assert show("game", two, "--out", tmp_path / "done")[0] == 0
    return tmp_path / "done"


def spoil(folder):
    """Another bit in every record, with the hash to match it: a planted error."""
    from sim.store_rows import pack, unpack

    with closing(sqlite3.connect(folder / FILE)) as db, db:
        for number, blob in db.execute("SELECT id, arrays FROM runs").fetchall():
            record = unpack(blob)
            record.arrived[0] += 1
            db.execute(
                "UPDATE runs SET arrays = ?, record_hash = ? WHERE id = ?",
                (pack(record), record.hash, number),
            )


def test_show_tells_what_is_there(call, show, folder, two):
    document = call("results", "show", folder)[1]
    wanted = {
        "rows": 24,
        "unit_rows": 48,
        "failed": 0,
        "complete": True,
        "computed": 24,
        "reused": 0,
        "asked": 24,
    }
    assert {name: document[name] for name in wanted} == wanted
    assert len(document["table_hash"]) == 64
    origin = document["provenance"]
    assert origin["command"] == ["brimline", "game", two, "--out", str(folder)]
    assert {"engine", "seed", "versions", "machine", "program", "started"} <= set(origin)
    assert origin["scenario"]["text"] == Path(two).read_text()
    status, out, _ = show("results", "show", folder)
    assert status == 0 and document["table_hash"] in out


def test_list_names_every_folder_and_what_is_wrong_with_one(call, show, folder, tmp_path):
    (tmp_path / "bad").mkdir()
    (tmp_path / "bad" / FILE).write_bytes(b"")
    bad, good = call("results", "list", tmp_path)[1]["folders"]
    assert "is damaged" in bad["fault"]
    assert (good["folder"], good["rows"], good["complete"]) == (str(folder), 24, True)
    status, out, said = show("results", "list", tmp_path)
    assert status == 0 and "done" in out and "is damaged" in said


def test_export_gives_every_run_by_unit_and_agrees_with_the_result(call, folder, tmp_path, two):
    file = tmp_path / "runs.csv"
    assert run(["results", "export", str(folder), str(file)]) == 0
    with file.open(newline="", encoding="utf-8") as opened:
        rows = list(csv.DictReader(opened))
    assert len(rows) == 48
    assert {(row["unit"], row["closure_threshold"]) for row in rows} == {
        ("A", "1"), ("A", "2"), ("B=b", "1"), ("B=b", "2"), ("B=b", "3")
    }  # fmt: skip
    measures = call("simulate", two)[1]["units"]["A"]
    with Store(folder) as store:
        own = [row for row in store.unit_rows() if row["unit"] == "A" and row["closure_threshold"] == 2]
    cell = next(
        row["cell"] for row in store_rows(folder) if (row["unit"], row["closure_threshold"]) == ("B=b", 3)
        and row["cell"] in {one["cell"] for one in own}
    )  # fmt: skip
    mine = [row for row in own if row["cell"] == cell]
    for measure, column in (
        ("mean_occupied", "occupied_days"), ("full_fraction", "full_days"), ("closed_fraction", "closed_days"),
        ("closed_with_free_bed_fraction", "closed_free_days"), ("admissions_per_day", "admitted"),
        ("incoming_closed_fraction", "incoming_closed_days"), ("diverted_in_per_day", "diverted_in"),
        ("diverted_out_per_day", "diverted_out"), ("turned_away_per_day", "turned_away"),
    ):  # fmt: skip
        assert sum(row[column] for row in mine) / 4 / 56 == pytest.approx(measures[measure]["mean"])


def store_rows(folder):
    with Store(folder) as store:
        return list(store.unit_rows())


def test_parquet_holds_the_same_or_its_absence_is_told(folder, tmp_path, show, monkeypatch):
    file = tmp_path / "runs.parquet"
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    status, _, said = show("results", "export", folder, file)
    assert status == 1 and "brimline[parquet]" in said and not file.exists()
    monkeypatch.undo()
    if importlib.util.find_spec("pyarrow") is None:
        pytest.skip("pyarrow is not installed")
    from pyarrow import parquet

    assert run(["results", "export", str(folder), str(file)]) == 0
    assert parquet.read_table(file).to_pylist() == store_rows(folder)


def test_export_to_anything_else_is_a_fault(folder, tmp_path, show):
    assert show("results", "export", folder, tmp_path / "runs.xlsx")[0] == 2


def test_verify_computes_rows_again_and_catches_a_planted_error(call, folder):
    status, document = call("results", "verify", folder)
    assert (status, document["agrees"], document["checked"]) == (0, True, 20)
    spoil(folder)
    status, document = call("results", "verify", folder, "--sample", 3)
    assert (status, document["agrees"], len(document["different"])) == (1, False, 3)


def test_repeat_runs_the_command_again_and_catches_a_planted_error(call, folder):
    before = (folder / "result.json").read_bytes()
    status, document = call("results", "repeat", folder)
    assert (status, document["agrees"], document["compared"], document["missing"]) == (0, True, 24, 0)
    assert (folder / "result.json").read_bytes() == before
    spoil(folder)
    status, document = call("results", "repeat", folder)
    assert (status, document["agrees"], len(document["different"])) == (1, False, 24)


@pytest.mark.parametrize("command", ["verify", "repeat"])
def test_a_scenario_that_has_changed_cannot_be_run_again(folder, two, show, command):
    Path(two).write_text(Path(two).read_text() + "\n# another line\n")
    status, out, said = show("results", command, folder)
    assert (status, out) == (1, "") and "changed since" in said


def test_a_folder_without_results_is_told(tmp_path, show):
    status, _, said = show("results", "show", tmp_path)
    assert status == 1 and "holds no results" in said
    assert show("results", "show", tmp_path / "none")[0] == 2
    assert show("results", "no-such-command")[0] == 2


def test_list_names_folders_of_every_kind_and_says_where_there_is_none(call, show, folder, two, tmp_path):
    call("exact", two, "--out", tmp_path / "exact")
    (tmp_path / "odd").mkdir()
    (tmp_path / "odd" / "provenance.json").write_text("[]")
    (tmp_path / "empty").mkdir()
    found = {Path(one["folder"]).name: one for one in call("results", "list", tmp_path)[1]["folders"]}
    assert set(found) == {"exact", "odd", folder.name}
    assert found["exact"]["command"].startswith("brimline exact") and found["exact"]["began"]
    assert "is not what a command wrote" in found["odd"]["fault"]
    assert "No results in" in show("results", "list", tmp_path / "empty")[1]
    status, out, said = show("results", "list", tmp_path / "nowhere", tmp_path / "nor here")
    assert (status, out, said.count("must be a folder that is there")) == (2, "", 2)


@pytest.mark.parametrize("command", ["show", "watch", "verify", "repeat"])
def test_a_folder_without_results_is_told_in_json_too(tmp_path, capsys, command):
    assert run(["results", command, str(tmp_path), "--json"]) == 1
    captured = capsys.readouterr()
    assert "missing" in json.loads(captured.out)["failed"] and "missing" in captured.err


def test_export_into_a_folder_that_is_not_there_is_a_fault(folder, tmp_path, show):
    status, out, said = show("results", "export", folder, tmp_path / "nowhere" / "runs.csv")
    assert (status, out) == (2, "") and said.startswith("FILE: must be in a folder that is there")
