"""A store's file: damaged and foreign ones are refused and left alone, older ones are brought up."""

from __future__ import annotations

import os
import sqlite3
import subprocess
import sys
from contextlib import closing
from pathlib import Path

import pytest

from sim.errors import StoreError
from sim.store import Store
from sim.store_file import FILE, STEPS
from sim.store_rows import by_unit, pack
from tests.sim.stored import filled, record_of, row

ROOT = Path(__file__).resolve().parents[2]


def cut(file: Path) -> None:
    os.truncate(file, file.stat().st_size - 5000)


def scribble(file: Path) -> None:
    content = bytearray(file.read_bytes())
    content[4096:] = bytes(byte ^ 0x5A for byte in content[4096:])
    file.write_bytes(content)


def blank_a_page_within(file: Path) -> None:
    content = bytearray(file.read_bytes())
    middle = len(content) // 8192 * 4096
    content[middle : middle + 4096] = bytes(4096)
    file.write_bytes(content)


def spoil_the_header(file: Path) -> None:
    content = bytearray(file.read_bytes())
    content[:100] = bytes(reversed(content[:100]))
    file.write_bytes(content)


DAMAGE = {
    "a blank page": blank_a_page_within,
    "a spoilt header": spoil_the_header,
    "emptied": lambda file: file.write_bytes(b""),
    "cut": cut,
    "scribbled over": scribble,
    "no database": lambda file: file.write_text("{}"),
}


@pytest.mark.parametrize("write", [False, True])
@pytest.mark.parametrize("harm", DAMAGE)
def test_a_damaged_file_is_refused_in_plain_words_and_left_as_it_is(tmp_path, harm, write):
    filled(tmp_path, [row(replication=number) for number in range(20)])
    DAMAGE[harm](tmp_path / FILE)
    left = (tmp_path / FILE).read_bytes()
    for _ in range(2):  # the lock of a refused writer is let go
        with pytest.raises(StoreError, match="is damaged .* left as it is"):
            Store(tmp_path, write=write)
    assert (tmp_path / FILE).read_bytes() == left


HALF_WRITTEN = """
import os, sys
from pathlib import Path
from sim.store import Store
from tests.sim.stored import row
store = Store(Path(sys.argv[1]), write=True)
for number in range(1, 9):
    store.put([row(replication=number)])
os._exit(9)
"""


def test_a_log_that_is_cut_or_scribbled_over_costs_only_what_it_held(tmp_path):
    """A process dies with commits in the log; then the log loses its end, or all its sense."""
    for name, harm in {
        "cut": lambda log: os.truncate(log, log.stat().st_size * 2 // 3),
        "scribble": scribble,
    }.items():
        folder = tmp_path / name
        folder.mkdir()
        filled(folder, [row()])
        ended = subprocess.run([sys.executable, "-c", HALF_WRITTEN, str(folder)], cwd=ROOT, check=False)
        assert ended.returncode == 9
        harm(folder / (FILE + "-wal"))
        with Store(folder, write=True) as store:
            kept = [one.key.replication for one in store.rows()]
        assert kept == list(range(len(kept))) and 1 <= len(kept) < 9, "whole commits, in order"
        filled(folder, [row(replication=number) for number in range(9)])
        (tmp_path / f"whole {name}").mkdir()
        again = filled(tmp_path / f"whole {name}", [row(replication=number) for number in range(9)])
        with Store(folder) as store:
            assert store.table_hash() == again


def test_a_row_whose_bits_have_changed_is_refused(tmp_path):
    filled(tmp_path, [row()])
    with closing(sqlite3.connect(tmp_path / FILE)) as db, db:
        (blob,) = db.execute("SELECT arrays FROM runs").fetchone()
        db.execute("UPDATE runs SET arrays = ?", (blob[:-1] + bytes([blob[-1] ^ 1]),))
    with Store(tmp_path) as store:
        with pytest.raises(StoreError, match="damaged"):
            store.get(row().key)
        with pytest.raises(StoreError, match=r"replication 0, cell c is damaged"):
            store.records("s", ["c"], range(1))


def test_another_programs_database_is_refused(tmp_path):
    with closing(sqlite3.connect(tmp_path / FILE)) as db, db:
        db.execute("CREATE TABLE guests (name)")
    with pytest.raises(StoreError, match="not a store"):
        Store(tmp_path, write=True)


def test_no_store_is_told(tmp_path):
    with pytest.raises(StoreError, match="holds no results"):
        Store(tmp_path)


OLDER = """
PRAGMA application_id = 1112689996;
CREATE TABLE scenarios (id INTEGER PRIMARY KEY, hash TEXT NOT NULL UNIQUE, units TEXT NOT NULL);
CREATE TABLE cells (id INTEGER PRIMARY KEY, hash TEXT NOT NULL UNIQUE, thresholds TEXT NOT NULL);
CREATE TABLE fingerprints (id INTEGER PRIMARY KEY, text TEXT NOT NULL UNIQUE);
CREATE TABLE replications (scenario INTEGER, replication INTEGER, fingerprint INTEGER, intake_hash TEXT,
    PRIMARY KEY (scenario, replication)) WITHOUT ROWID;
CREATE TABLE runs (id INTEGER PRIMARY KEY, scenario INTEGER, cell INTEGER, replication INTEGER, engine TEXT,
    seconds REAL, record_hash TEXT, arrays BLOB, UNIQUE (scenario, cell, replication));
CREATE TABLE units (run INTEGER, unit INTEGER, arrived INTEGER, admitted INTEGER, diverted_out INTEGER,
    diverted_in INTEGER, turned_away INTEGER, occupied_days REAL, full_days REAL, closed_days REAL,
    closed_free_days REAL, incoming_closed_days REAL, PRIMARY KEY (run, unit)) WITHOUT ROWID;
INSERT INTO scenarios VALUES (1, 's', '["A", "B"]');
INSERT INTO cells VALUES (1, 'c', '[1, 2]');
INSERT INTO fingerprints VALUES (1, 'here');
INSERT INTO replications VALUES (1, 0, 1, 'intake 0');
PRAGMA user_version = 1;
"""


@pytest.mark.parametrize("write", [False, True])
def test_a_file_of_an_older_layout_is_brought_up_and_keeps_its_rows(tmp_path, write):
    """The file is written here, as layout 1 was: without failures and commands."""
    record = record_of(1.0)
    with closing(sqlite3.connect(tmp_path / FILE)) as db, db:
        db.executescript(OLDER)
        db.execute(
            "INSERT INTO runs VALUES (1, 1, 1, 0, 'reference', 0.5, ?, ?)", (record.hash, pack(record))
        )
        db.executemany(
            "INSERT INTO units VALUES (1, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
            [(unit, *numbers) for unit, numbers in enumerate(by_unit(record))],
        )
    with Store(tmp_path, write=write) as store:
        assert store.get(row().key).record.hash == record.hash
        assert store.commands() == [] and store.failures() == []
    (tmp_path / "new").mkdir()
    assert filled(tmp_path, []) == filled(tmp_path / "new", [row()])
    with closing(sqlite3.connect(tmp_path / FILE)) as db:
        assert db.execute("PRAGMA user_version").fetchone() == (len(STEPS),)
        left = {name for (name,) in db.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}
    assert {"failures", "commands"} <= left


def test_a_file_of_a_newer_layout_is_left_alone(tmp_path):
    filled(tmp_path, [row()])
    with closing(sqlite3.connect(tmp_path / FILE)) as db, db:
        db.execute("PRAGMA user_version = 99")
    for write in (False, True):
        with pytest.raises(StoreError, match="newer brimline"):
            Store(tmp_path, write=write)
