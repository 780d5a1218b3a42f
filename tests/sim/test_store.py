"""The store: exact bits, keys, one writer, and replications of one machine only."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import tempfile
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sim.errors import StoreError
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.record import Record
from sim.replicate import Failure, Run, Share, Stranded, replicate, replicate_shares
from sim.resuming import Job, run_whole
from sim.scenario import parse_scenario
from sim.store import Store
from sim.store_bulk import unpack_all
from sim.store_file import FILE
from sim.store_rows import Key, by_unit, cell_hash, pack, scenario_hash, unpack
from tests.sim.stored import filled, record_of, row

ROOT = Path(__file__).resolve().parents[2]
TEXT = """
schema = 1
title = "Two units by the river (invented)"
run = { seed = 5, warm_up_days = 7, measured_days = 28 }
units = [{ name = "Ashgill", beds = 3 }, { name = "Norbeck", beds = 4 }]

[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 1.1
stay = { family = "lognormal", mean_days = 3.5, cv = 1.2 }

[[patients]]
group = "Norbeck emergencies"
home = "Norbeck"
per_day = 1.3
stay = { family = "exponential", mean_days = 3.0 }
"""
SCENARIO = parse_scenario(TEXT)
POLICIES = [SCENARIO.policy().with_thresholds({"Ashgill": k, "Norbeck": k}) for k in (1, 2, 3)]


# ---- bits ----


@given(
    st.lists(st.floats(allow_nan=False), min_size=6, max_size=6),
    st.lists(st.integers(-(2**63), 2**63 - 1), min_size=4, max_size=4),
    st.booleans(),
)
def test_a_record_comes_back_bit_for_bit(days, counts, staffed):
    days = np.array(days).reshape(1, 2, 3)
    table = np.array(counts).reshape(2, 2)
    record = Record(
        days, days[0], table[0], table[1], table, table.T, table[0], table[1], days if staffed else None
    )
    back = unpack(pack(record))
    assert back.hash == record.hash and pack(back) == pack(record)
    for name, array in record.arrays().items():
        assert getattr(back, name).tobytes() == np.ascontiguousarray(array).tobytes()
        assert getattr(back, name).dtype == array.dtype


@pytest.mark.parametrize("harm", [lambda b: b[:-1], lambda b: b + b"\0", lambda b: b[:3], lambda b: b[4:]])
def test_bytes_that_are_no_record_are_refused(harm):
    with pytest.raises(ValueError):
        unpack(harm(pack(record_of(1.0))))


def test_rows_of_several_shapes_read_at_once_are_those_read_alone_and_damage_is_seen():
    """A flipped bit anywhere behind the head, a row cut short and one too long: each tells of itself only."""
    wide = replace(record_of(3.0), staffed_days=record_of(3.0).occupancy_days)
    records = [record_of(1.0), wide, record_of(2.0), record_of(1.0)]
    blobs, hashes = [pack(one) for one in records], [one.hash for one in records]
    found = unpack_all(blobs, hashes)
    assert [pack(one) for one in found] == blobs and [one.hash for one in found] == hashes
    assert all(
        left.dtype == right.dtype and left.shape == right.shape
        for one, other in zip(found, records, strict=True)
        for left, right in zip(one.arrays().values(), other.arrays().values(), strict=True)
    )
    blob = blobs[0]
    start = 4 + int.from_bytes(blob[:4], "little")
    harmed = [
        blob[:place] + bytes([blob[place] ^ 1]) + blob[place + 1 :] for place in range(start, len(blob))
    ]
    harmed += [blob[:-1], blob + b"\0", blob[:3], b"", blob[4:]]
    found = unpack_all([*harmed, blob], hashes[:1] * (len(harmed) + 1))
    assert found[:-1] == [None] * len(harmed) and found[-1].hash == hashes[0]


def test_plain_numbers_by_unit_add_up_as_counted_by_hand():
    record = Record(
        occupancy_days=np.array([[[1.0, 2.0, 3.0]], [[0.0, 4.0, 0.0]]]),
        gate_days=np.array([[1.0, 2.0, 4.0, 8.0, 16.0, 32.0, 64.0, 128.0]]),
        arrived=np.array([9]), turned_away=np.array([2]), diverted=np.array([[0]]), admitted=np.array([[7]]),
        on_road_at_start=np.array([0]), on_road_at_end=np.array([0]),
    )  # fmt: skip
    # own closed: states 1, 3, 5, 7; of these not full: 1, 3; incoming closed: 2, 3, 6, 7; full: 4 to 7
    assert by_unit(record) == [(9, 7, 0, 0, 2, 12.0, 240.0, 170.0, 10.0, 204.0)]


# ---- keys ----

KEYS = st.builds(
    Key, st.sampled_from(["s", "s2", "ü"]), st.sampled_from(["c", "d", "s"]), st.integers(0, 10**6)
)


@settings(max_examples=8)
@given(st.dictionaries(KEYS, st.floats(0.5, 2), min_size=1, max_size=6), st.randoms())
def test_what_was_put_is_had_again_and_the_order_of_putting_does_not_matter(table, random):
    rows = [row(*vars(key).values(), seed=seed) for key, seed in table.items()]
    with tempfile.TemporaryDirectory() as first, tempfile.TemporaryDirectory() as second:
        hashed = filled(Path(first), rows)
        with Store(Path(first)) as store:
            for one in rows:
                got = store.get(one.key)
                assert replace(got, record=one.record) == one and got.record.hash == one.record.hash
            assert [one.key for one in store.rows()] == sorted(table)
            assert store.get(Key("none", "c", 0)) is None
        random.shuffle(rows)
        assert filled(Path(second), rows) == hashed
        rows[0] = replace(rows[0], key=replace(rows[0].key, replication=10**6 + 1))
        with tempfile.TemporaryDirectory() as third:
            assert filled(Path(third), rows) != hashed


def scenario_key(text: str) -> str:
    scenario = parse_scenario(text)
    return scenario_hash(lower_network(scenario), plan_intake(scenario))


def test_a_key_holds_what_records_depend_on_and_nothing_else():
    same = [("by the river", "by the sea"), ("run = {", "run = { replications = 3, confidence = 0.9,"),
            ("beds = 3 }", "beds = 3, closure_threshold = 2, target_utilisation = 0.5 }")]  # fmt: skip
    other = [("seed = 5", "seed = 6"), ("per_day = 1.1", "per_day = 1.2"), ("beds = 3", "beds = 2"),
             ("cv = 1.2", "cv = 1.3"), ("Norbeck emergencies", "Norbeck patients"), ("= 28", "= 29"),
             ("warm_up_days = 7", "warm_up_days = 8"), ('"exponential"', '"constant"')]  # fmt: skip
    assert {scenario_key(TEXT.replace(*change)) for change in same} == {scenario_key(TEXT)}
    assert len({scenario_key(TEXT.replace(*change)) for change in other} | {scenario_key(TEXT)}) == 9
    assert len({cell_hash(lower_policy(SCENARIO, policy)) for policy in POLICIES}) == 3


def test_beds_out_of_use_have_a_place_in_a_key():
    out = lambda row: TEXT.replace("beds = 3", f"beds = 3, out_of_use = [{row}]")  # noqa: E731
    rows = ["{ beds = 1, per_year = 6, mean_days = 3 }", "{ beds = 1, per_year = 7, mean_days = 3 }",
            "{ beds = 2, per_year = 6, mean_days = 3 }", "{ beds = 1, from_day = 20, days = 3 }"]  # fmt: skip
    keys = [scenario_key(TEXT), *(scenario_key(out(row)) for row in rows)]
    assert len(set(keys)) == 5 and keys[1] == scenario_key(out(rows[0]))


def test_a_second_putting_must_have_the_same_bits(tmp_path):
    hashed = filled(tmp_path, [row(), row()])
    for other in (row(seed=2.0), row(cell="d", intake="other patients")):
        with pytest.raises(StoreError):
            filled(tmp_path, [other])
    assert filled(tmp_path, []) == hashed


def test_a_batch_is_kept_whole_or_not_at_all(tmp_path):
    filled(tmp_path, [row()])
    with Store(tmp_path, write=True) as store:
        with pytest.raises(StoreError):
            store.put([row(replication=1), row(seed=2.0)])
        assert store.counts()["rows"] == 1
        store.put([row(replication=1)])
        assert store.counts() == {
            "rows": 2, "unit_rows": 4, "exact_cells": 0, "scenarios": 1, "failed": 0
        }  # fmt: skip


# ---- one machine a replication ----


def test_fingerprints_are_never_mixed_within_a_replication(tmp_path):
    filled(tmp_path, [row(), row(cell="d"), row(replication=1)])
    filled(tmp_path, [row(seed=2.0, intake="theirs", machine="there")])
    with Store(tmp_path) as store:
        assert store.held("s") == {0: ("there", {"c"}), 1: ("here", {"c"})}
        assert store.counts()["unit_rows"] == 4


def job(folder: Path, replications: int, machine: str = "here", policies=POLICIES):
    """Runs what is missing and keeps it; gives what was asked for, reused, restarted, and the records' hashes."""
    with Store(folder, write=True) as store:
        one = Job(store, SCENARIO, policies, replications, fingerprint=machine)
        runs = [run for kept in one.kept_runs() for run in kept]
        one.begin({"started": "now"})
        for reply in replicate_shares(SCENARIO, policies, one.shares()):
            one.keep(reply, "reference")
            runs += reply
        hashes = {(run.replication, run.cell): run.record.hash for run in runs}
        assert len(hashes) == len(runs)
        return one, hashes


def test_a_job_runs_only_what_is_missing_and_gives_the_bits_of_one_run_at_once(tmp_path):
    first, _ = job(tmp_path, 2, policies=POLICIES[1:2])
    second, _ = job(tmp_path, 2)
    third, hashes = job(tmp_path, 4)
    assert [(one.asked, one.reused, one.missing) for one in (first, second, third)] == [
        (2, 0, 2), (6, 2, 4), (12, 6, 6)
    ]  # fmt: skip
    plain = [run for reply in replicate(SCENARIO, POLICIES, range(4)) for run in reply]
    assert hashes == {(run.replication, run.cell): run.record.hash for run in plain}


def test_a_replication_begun_elsewhere_is_run_again_whole_and_a_complete_one_is_not(tmp_path):
    job(tmp_path, 2, policies=POLICIES[:2])
    complete, _ = job(tmp_path, 2, "there", POLICIES[:2])
    begun, _ = job(tmp_path, 3, "there")
    assert (complete.reused, complete.restarted) == (4, ())
    assert (begun.reused, begun.missing, begun.restarted) == (0, 9, (0, 1))
    with Store(tmp_path) as store:
        assert {fingerprint for fingerprint, _ in store.held(begun.scenario).values()} == {"there"}


def stranding(shares, present):
    """As workers of which none has these bits: what names another fingerprint is stranded."""
    for share in shares:
        if share.fingerprint in (None, present):
            for reply in replicate_shares(SCENARIO, POLICIES, [share]):
                yield [replace(run, fingerprint=present) for run in reply]
        else:
            yield from (Stranded((one,), share.cells) for one in share.replications)


@pytest.mark.parametrize("present", ["there", "here"])
def test_where_others_may_come_what_they_began_is_theirs_or_begins_again_whole(tmp_path, present):
    """By rounds, as a batch: cells that a replication got in an earlier round are run again too."""
    job(tmp_path, 2, "there", POLICIES[:2])
    with Store(tmp_path, write=True) as store:
        one = Job(store, SCENARIO, POLICIES, 3, fingerprint="here", others=True)
        assert (one.missing, one.restarted, one.unsure) == (5, (), {0, 1})
        one.begin({"started": "now"})
        for cells in ({1, 2}, {0, 1, 2}):
            for reply in run_whole(one.shares(cells), lambda some: stranding(some, present), one):
                one.keep(reply, "reference")
        assert one.count_missing({0, 1, 2}, 3) == 0
        assert one.computed == {"there": 5, "here": 9}[present]
        by = {replication: fingerprint for replication, (fingerprint, _) in store.held(one.scenario).items()}
        assert by == dict.fromkeys(range(3), present)
        kept = {(run.replication, run.cell): run.record.hash for runs in one.kept_runs() for run in runs}
    plain = [run for reply in replicate(SCENARIO, POLICIES, range(3)) for run in reply]
    assert kept == {(run.replication, run.cell): run.record.hash for run in plain}


def test_rounds_of_one_job_name_whoever_began_a_replication_in_an_earlier_round(tmp_path):
    with Store(tmp_path, write=True) as store:
        one = Job(store, SCENARIO, POLICIES, 2, fingerprint="here", others=True)
        [first] = replicate_shares(SCENARIO, POLICIES, [Share((0,), (1,))])
        one.keep([replace(run, fingerprint="there") for run in first], "reference")
        assert {share.replications: share.fingerprint for share in one.shares()} == {
            (0,): None,
            (1,): "there",
        }
        [other] = replicate_shares(SCENARIO, POLICIES, [Share((1,), (1,))])
        one.keep(other, "reference")  # under other bits: the store drops the first, and the job knows
        assert one.count_missing({0, 1, 2}, 2) == 5
        assert [len(runs) for runs in one.kept_runs()] == [1]


def test_failures_are_noted_and_a_later_success_takes_the_note_away(tmp_path):
    with Store(tmp_path, write=True) as store:
        one = Job(store, SCENARIO, POLICIES, 1, fingerprint="here")
        one.begin({"started": "now"})
        one.keep(Failure(5, 0, (1, 2), "Traceback\nMemoryError: oh"), "reference")
        assert store.counts()["failed"] == 2 and store.commands()[-1]["failed"] == 2
        assert [failure["thresholds"] for failure in store.failures()] == [[2, 2], [3, 3]]
    again, _ = job(tmp_path, 1)
    assert again.missing == 3
    with Store(tmp_path) as store:
        assert store.failures() == []


# ---- one writer, many readers ----

HOLD = """
import sys
from pathlib import Path
from sim.store import Store
store = Store(Path(sys.argv[1]), write=True)
print("held", flush=True)
sys.stdin.read()
"""


def test_a_second_writer_is_refused_readers_are_not_and_a_killed_writers_lock_is_stale(tmp_path):
    filled(tmp_path, [row()])
    command = [sys.executable, "-c", HOLD, str(tmp_path)]
    with subprocess.Popen(
        command, cwd=ROOT, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    ) as other:
        assert other.stdout.readline() == "held\n"
        with pytest.raises(StoreError, match=f"process {other.pid} on "):
            Store(tmp_path, write=True)
        with Store(tmp_path) as store:
            assert store.counts()["rows"] == 1
        other.send_signal(signal.SIGKILL)
    assert "pid" in (tmp_path / "runs.lock").read_text()  # left behind, and means nothing
    filled(tmp_path, [row(replication=1)])


def test_a_reader_sees_one_moment_while_another_writes(tmp_path):
    filled(tmp_path, [row()])
    with Store(tmp_path) as early:
        assert early.counts()["rows"] == 1
        filled(tmp_path, [row(replication=1)])
        assert early.counts()["rows"] == 1
    with Store(tmp_path) as late:
        assert late.counts()["rows"] == 2


def test_a_reader_cannot_write(tmp_path):
    filled(tmp_path, [row()])
    with Store(tmp_path) as store, pytest.raises(StoreError):
        store.put([row(replication=1)])


def test_a_folder_that_cannot_be_written_can_be_read(tmp_path, monkeypatch):
    filled(tmp_path, [row()])
    monkeypatch.setattr("sim.store_file.os.access", lambda *_: False)
    with Store(tmp_path) as store:
        assert store.counts()["rows"] == 1
    assert not (tmp_path / f"{FILE}-shm").exists()


def test_a_folder_that_cannot_be_made_is_refused(tmp_path):
    (tmp_path / "file").write_text("x")
    with pytest.raises(StoreError, match="cannot be"):
        Store(tmp_path / "file" / "folder", write=True)


def test_a_full_disk_is_told_and_loses_nothing_that_was_committed(tmp_path):
    hashed = filled(tmp_path, [row()])
    with Store(tmp_path, write=True) as store:
        (pages,) = store._connection.execute("PRAGMA page_count").fetchone()
        store._connection.execute(f"PRAGMA max_page_count = {pages + 1}")
        with pytest.raises(StoreError, match="full.*what was committed before is kept"):
            store.put([row(replication=number) for number in range(1, 200)])
    assert filled(tmp_path, []) == hashed


def test_unit_rows_name_what_they_count(tmp_path):
    filled(tmp_path, [row()])
    with Store(tmp_path) as store:
        rows = list(store.unit_rows())
    assert [(one["unit"], one["closure_threshold"], one["arrived"]) for one in rows] == [
        ("A", 1, 0),
        ("B", 2, 1),
    ]
    assert json.dumps(rows)


def test_a_run_knows_its_seconds_but_is_not_told_apart_by_them():
    assert Run(0, 0, None, "x", 1.0) == Run(0, 0, None, "x", 2.0)
