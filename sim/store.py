"""Results that survive a crash: one SQLite file a folder, one writer, as many readers as like.

Every run is kept under its key with the exact bits of its record, so that payoffs can be derived again for other
targets, goals and welfares with no new run. What was put is committed when `put` returns. All runs of a scenario's
replication come from one machine fingerprint: a run under another one drops what an earlier one left of it.
"""

from __future__ import annotations

import hashlib
import json
import sqlite3
import sys
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sim.errors import StoreError
from sim.record import Record
from sim.store_bulk import unpack_all
from sim.store_file import FILE, STEPS, WriterLock, cannot_be_written, connect_to_read, connect_to_write
from sim.store_rows import (
    COUNTS,
    DAYS,
    Key,
    Measures,
    Row,
    by_unit,
    pack,
    pack_measures,
    unpack,
    unpack_measures,
)

UNIT_COLUMNS = COUNTS + DAYS
# In this order the indices give key order, with nothing to sort.
_KEYED = """
    FROM scenarios CROSS JOIN cells
    CROSS JOIN runs ON runs.scenario = scenarios.id AND runs.cell = cells.id
    CROSS JOIN replications
        ON replications.scenario = runs.scenario AND replications.replication = runs.replication
    CROSS JOIN fingerprints ON fingerprints.id = replications.fingerprint
"""
_EXACT = """
    FROM exact JOIN scenarios ON scenarios.id = exact.scenario JOIN cells ON cells.id = exact.cell
    JOIN fingerprints ON fingerprints.id = exact.fingerprint
"""
_ROW = "scenarios.hash, cells.hash, runs.replication, arrays, intake_hash, engine, text, seconds, record_hash"
_IN_ORDER = "ORDER BY scenarios.hash, cells.hash, runs.replication"


class Store:
    """The store of one folder; a context manager. Every method raises StoreError where the file fails it.

    write: whether to write; the folder is made, and another writer refused. Without it the store must be there, and
    everything read is of one moment.
    """

    def __init__(self, folder: Path, *, write: bool = False) -> None:
        self.folder, self.file = folder, folder / FILE
        self._lock: WriterLock | None = None
        self._ids: dict[tuple[str, str], int] = {}
        if write:
            self._open_to_write()
        else:
            self._open_to_read()

    def _open_to_write(self) -> None:
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise StoreError(f"{self.folder} cannot be made: {error.strerror}") from error
        self._lock = WriterLock(self.folder)
        try:
            self._connection = connect_to_write(self.file)
        except BaseException:
            self._lock.release()
            raise

    def _open_to_read(self) -> None:
        self._connection = connect_to_read(self.file)
        if self._connection.execute("PRAGMA user_version").fetchone()[0] < len(STEPS):
            self._connection.close()
            Store(self.folder, write=True).close()  # which brings it up to the present layout
            self._connection = connect_to_read(self.file)
        self._connection.execute("BEGIN")  # so that everything read is of one moment

    @property
    def left_by(self) -> str | None:
        """In words, the writer before this one where it ended without closing (killed, or the machine stopped)."""
        return None if self._lock is None else self._lock.left_by

    def __enter__(self) -> Store:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Closes the file and lets another writer in."""
        self._connection.close()
        if self._lock is not None:
            self._lock.release()

    # ---- writing ----

    def describe(self, scenario: str, units: Sequence[str], cells: Mapping[str, Sequence[int]]) -> None:
        """Words for the hashes, before runs are put: unit names, and cell hash -> closure thresholds by unit."""
        with self._whole() as db:
            db.execute(
                "INSERT OR IGNORE INTO scenarios (hash, units) VALUES (?, ?)",
                (scenario, json.dumps(list(units))),
            )
            db.executemany(
                "INSERT OR IGNORE INTO cells (hash, thresholds) VALUES (?, ?)",
                [(cell, json.dumps(list(thresholds))) for cell, thresholds in cells.items()],
            )

    def put(self, rows: Sequence[Row], *, command: int | None = None) -> None:
        """Keeps runs, all of them or none; a key that is there already must have the same bits.

        command: whose they are, as `begin` gave it.
        """
        with self._whole() as db:
            for row in rows:
                self._put(db, row)
            db.execute("UPDATE commands SET computed = computed + ? WHERE id = ?", (len(rows), command))

    def _put(self, db: sqlite3.Connection, row: Row) -> None:
        scenario, cell, replication = self._place(row.key)
        self._of_one_machine(db, row, scenario)
        address = (scenario, cell, replication)
        where = "scenario = ? AND cell = ? AND replication = ?"
        kept = db.execute(f"SELECT record_hash FROM runs WHERE {where}", address).fetchone()
        if kept is not None and kept[0] != row.record.hash:
            raise StoreError(f"{self.file}: a second run of replication {replication} gave other bits")
        if kept is None:
            values = (*address, row.engine, row.seconds, row.record.hash, pack(row.record))
            columns = "scenario, cell, replication, engine, seconds, record_hash, arrays"
            run = db.execute(f"INSERT INTO runs ({columns}) VALUES (?, ?, ?, ?, ?, ?, ?)", values).lastrowid
            marks = ", ".join("?" * (len(UNIT_COLUMNS) + 2))
            units = [(run, unit, *numbers) for unit, numbers in enumerate(by_unit(row.record))]
            db.executemany(
                f"INSERT INTO units (run, unit, {', '.join(UNIT_COLUMNS)}) VALUES ({marks})", units
            )
        db.execute(f"DELETE FROM failures WHERE {where}", address)

    def _of_one_machine(self, db: sqlite3.Connection, row: Row, scenario: int) -> None:
        """Sees to it that a replication's runs have one fingerprint and met one intake."""
        address = (scenario, row.key.replication)
        where = "WHERE scenario = ? AND replication = ?"
        kept = db.execute(
            f"SELECT text, intake_hash FROM replications JOIN fingerprints ON id = fingerprint {where}",
            address,
        ).fetchone()
        if kept is not None and kept[0] != row.fingerprint:
            runs = f"{where} AND cell IN (SELECT id FROM cells)"  # for the index's sake
            db.execute(f"DELETE FROM units WHERE run IN (SELECT id FROM runs {runs})", address)
            db.execute(f"DELETE FROM runs {runs}", address)
            db.execute(f"DELETE FROM replications {where}", address)
            kept = None
        if kept is None:
            values = (*address, self._machine(db, row.fingerprint), row.intake_hash)
            db.execute("INSERT INTO replications VALUES (?, ?, ?, ?)", values)
        elif kept[1] != row.intake_hash:
            raise StoreError(f"{self.file}: replication {row.key.replication} met other patients before")

    def _machine(self, db: sqlite3.Connection, fingerprint: str) -> int:
        db.execute("INSERT OR IGNORE INTO fingerprints (text) VALUES (?)", (fingerprint,))
        return db.execute("SELECT id FROM fingerprints WHERE text = ?", (fingerprint,)).fetchone()[0]

    def put_exact(
        self,
        scenario: str,
        cell: str,
        units: Sequence[Measures],
        fingerprint: str,
        *,
        command: int | None = None,
    ) -> None:
        """Keeps the exact measures of a cell by unit, in the place of those of another machine."""
        blob = pack_measures(units)
        with self._whole() as db:
            values = (
                self._id("scenarios", scenario), self._id("cells", cell), self._machine(db, fingerprint),
                hashlib.sha256(blob).hexdigest(), blob,
            )  # fmt: skip
            columns = "scenario, cell, fingerprint, value_hash, vals"
            db.execute(f"INSERT OR REPLACE INTO exact ({columns}) VALUES (?, ?, ?, ?, ?)", values)
            db.execute("UPDATE commands SET computed = computed + 1 WHERE id = ?", (command,))

    def fail(self, keys: Sequence[Key], traceback: str, *, command: int | None = None) -> None:
        """Notes runs that failed; a later success takes the note away."""
        with self._whole() as db:
            db.executemany(
                "INSERT OR REPLACE INTO failures (scenario, cell, replication, traceback) VALUES (?, ?, ?, ?)",
                [(*self._place(key), traceback) for key in keys],
            )
            db.execute("UPDATE commands SET failed = failed + ? WHERE id = ?", (len(keys), command))

    def begin(self, scenario: str, provenance: Mapping[str, Any], *, asked: int, reused: int) -> int:
        """Notes a command that starts, the runs that it asks for and those that are here already; gives its number."""
        with self._whole() as db:
            return db.execute(
                "INSERT INTO commands (scenario, provenance, asked, reused, began)"
                " VALUES ((SELECT id FROM scenarios WHERE hash = ?), ?, ?, ?, ?)",
                (scenario, json.dumps(provenance), asked, reused, provenance["started"]),
            ).lastrowid

    def end(self, command: int, at: str, *, asked: int | None = None) -> None:
        """Notes that a command has ended by itself; asked: the runs that it turned out to need."""
        with self._whole() as db:
            db.execute(
                "UPDATE commands SET ended = ?, asked = coalesce(?, asked) WHERE id = ?", (at, asked, command)
            )

    def _place(self, key: Key) -> tuple[int, int, int]:
        return self._id("scenarios", key.scenario), self._id("cells", key.cell), key.replication

    def _id(self, table: str, value: str) -> int:
        if (table, value) not in self._ids:
            found = self._connection.execute(f"SELECT id FROM {table} WHERE hash = ?", (value,)).fetchone()
            if found is None:
                raise StoreError(f"{self.file}: {value[:12]} is not described among the {table}")
            self._ids[table, value] = found[0]
        return self._ids[table, value]

    @contextmanager
    def _whole(self) -> Iterator[sqlite3.Connection]:
        """One transaction: committed at its end, undone by any error."""
        db = self._connection
        try:
            db.execute("BEGIN IMMEDIATE")
            yield db
            db.execute("COMMIT")
        except BaseException as error:
            if db.in_transaction:
                db.execute("ROLLBACK")
            if isinstance(error, sqlite3.Error):
                raise StoreError(cannot_be_written(self.file, error)) from error
            raise

    # ---- reading ----

    def get(self, key: Key) -> Row | None:
        """One run, or None; StoreError where its bytes do not have its hash."""
        where = "WHERE scenarios.hash = ? AND cells.hash = ? AND runs.replication = ?"
        found = self._ask(f"SELECT {_ROW} {_KEYED} {where}", (key.scenario, key.cell, key.replication))
        return next((self._row(one) for one in found), None)

    def rows(self) -> Iterator[Row]:
        """Every run in key order."""
        return (self._row(one) for one in self._ask(f"SELECT {_ROW} {_KEYED} {_IN_ORDER}"))

    def _row(self, found: tuple[Any, ...]) -> Row:
        scenario, cell, replication, blob, intake_hash, engine, fingerprint, seconds, record_hash = found
        try:
            record = unpack(blob)
        except ValueError:
            record = None
        if record is None or record.hash != record_hash:
            raise StoreError(self._is_damaged(replication, cell))
        return Row(Key(scenario, cell, replication), record, intake_hash, engine, fingerprint, seconds)

    def exact(self, scenario: str, fingerprint: str | None = None) -> Iterator[tuple[str, list[Measures]]]:
        """The exact cells of a scenario (of one machine), cell hash and measures by unit; StoreError on damage."""
        asked = (
            f"SELECT cells.hash, value_hash, vals {_EXACT} WHERE scenarios.hash = ? AND (? IS NULL OR text = ?)"
            " ORDER BY cells.hash"
        )
        for cell, value_hash, blob in self._ask(asked, (scenario, fingerprint, fingerprint)):
            if hashlib.sha256(blob).hexdigest() != value_hash:
                raise StoreError(f"{self.file}: the exact cell {cell[:12]} is damaged: choose another folder")
            yield cell, unpack_measures(blob)

    def exact_hashes(self) -> dict[Key, str]:
        """Key (replication 0) of each exact cell -> hash of its measures, in key order."""
        found = self._ask(
            f"SELECT scenarios.hash, cells.hash, vals {_EXACT} ORDER BY scenarios.hash, cells.hash"
        )
        return {Key(*key, 0): hashlib.sha256(blob).hexdigest() for *key, blob in found}

    def sample_exact(self, count: int) -> list[Key]:
        """So many keys (replication 0) of exact cells at random."""
        found = self._ask(
            f"SELECT scenarios.hash, cells.hash, 0 {_EXACT} ORDER BY random() LIMIT ?", (count,)
        )
        return [Key(*one) for one in found]

    def whole(self, scenario: str, cells: Sequence[str]) -> set[int]:
        """The replications of a scenario that are here for every one of those cells."""
        wanted = sorted(set(cells))
        asked = (
            "SELECT replication FROM runs WHERE scenario = (SELECT id FROM scenarios WHERE hash = ?)"
            " AND cell IN (SELECT id FROM cells WHERE hash IN (SELECT value FROM json_each(?)))"
            " GROUP BY replication HAVING count(*) = ?"
        )
        return {one for (one,) in self._ask(asked, (scenario, json.dumps(wanted), len(wanted)))}

    def held(self, scenario: str, but: Iterable[int] = ()) -> dict[int, tuple[str, set[str]]]:
        """What is here of a scenario, but for some replications: replication -> the fingerprint and the cells."""
        found: dict[int, tuple[str, set[str]]] = {}
        asked = (
            f"SELECT runs.replication, text, cells.hash {_KEYED} WHERE scenarios.hash = ?"
            " AND runs.replication NOT IN (SELECT value FROM json_each(?))"
        )
        for replication, fingerprint, cell in self._ask(asked, (scenario, json.dumps(list(but)))):
            found.setdefault(replication, (fingerprint, set()))[1].add(sys.intern(cell))
        return found

    def records(
        self, scenario: str, cells: Sequence[str], replications: range
    ) -> dict[int, dict[str, tuple[Record, str]]]:
        """What is here of these cells and replications: replication -> cell -> record and hash of its intake.

        StoreError where bytes do not have their hash. Ask for some thousand runs at a time.
        """
        bounds = (scenario, replications.start, replications.stop - 1)
        where = "scenario = (SELECT id FROM scenarios WHERE hash = ?) AND replication BETWEEN ? AND ?"
        met = dict(self._ask(f"SELECT replication, intake_hash FROM replications WHERE {where}", bounds))
        asked = (
            "SELECT replication, hash, record_hash, arrays FROM json_each(?) AS wanted"
            f" CROSS JOIN cells ON cells.hash = wanted.value CROSS JOIN runs ON cell = cells.id AND {where}"
        )
        rows = list(self._ask(asked, (json.dumps(sorted(set(cells))), *bounds)))
        records = unpack_all([row[3] for row in rows], [row[2] for row in rows])
        found: dict[int, dict[str, tuple[Record, str]]] = {}
        for (replication, cell, _, _), record in zip(rows, records, strict=True):
            if record is None:
                raise StoreError(self._is_damaged(replication, cell))
            found.setdefault(replication, {})[cell] = record, met[replication]
        return found

    def _is_damaged(self, replication: int, cell: str) -> str:
        return f"{self.file}: the row of replication {replication}, cell {cell[:12]} is damaged"

    def sample(self, count: int) -> list[Key]:
        """So many keys at random."""
        columns = "scenarios.hash, cells.hash, runs.replication"
        found = self._ask(f"SELECT {columns} {_KEYED} ORDER BY random() LIMIT ?", (count,))
        return [Key(*one) for one in found]

    def hashes(self) -> dict[Key, str]:
        """Key -> record hash, in key order."""
        columns = "scenarios.hash, cells.hash, runs.replication, record_hash"
        return {Key(*one[:3]): one[3] for one in self._ask(f"SELECT {columns} {_KEYED} {_IN_ORDER}")}

    def table_hash(self) -> str:
        """SHA-256 over keys, intakes, records and exact measures: the same for the same bits, wherever from."""
        digest = hashlib.sha256()
        columns = "scenarios.hash, cells.hash, runs.replication, intake_hash, arrays"
        for *key, blob in self._ask(f"SELECT {columns} {_KEYED} {_IN_ORDER}"):
            digest.update(f"{' '.join(map(str, key))} {len(blob)}:".encode())
            digest.update(blob)
        for key, value_hash in self.exact_hashes().items():
            digest.update(f"exact {key.scenario} {key.cell} {value_hash}".encode())
        return digest.hexdigest()

    def counts(self) -> dict[str, int]:
        """How many runs (`rows`), rows by unit, exact cells, scenarios, and runs that failed."""
        tables = {"rows": "runs", "unit_rows": "units", "exact_cells": "exact", "scenarios": "scenarios",
                  "failed": "failures"}  # fmt: skip
        return {name: next(self._ask(f"SELECT count(*) FROM {table}"))[0] for name, table in tables.items()}

    def failures(self) -> list[dict[str, Any]]:
        """The runs that failed and have not succeeded since: thresholds, replication and traceback."""
        asked = "SELECT thresholds, replication, traceback FROM failures JOIN cells ON cells.id = cell"
        return [
            {"thresholds": json.loads(thresholds), "replication": replication, "traceback": text}
            for thresholds, replication, text in self._ask(asked)
        ]

    def commands(self) -> list[dict[str, Any]]:
        """The commands that wrote here, the last one last: provenance, counts of runs, began and ended."""
        columns = ("provenance", "asked", "reused", "computed", "failed", "began", "ended")
        found = self._ask(f"SELECT {', '.join(columns)} FROM commands ORDER BY id")
        return [dict(zip(columns, one, strict=True)) | {"provenance": json.loads(one[0])} for one in found]

    def unit_rows(self) -> Iterator[dict[str, Any]]:
        """Every run by unit in key order, as plain values: key, thresholds, counts, days and hashes."""
        numbers = ", ".join(UNIT_COLUMNS)
        columns = (
            f"scenarios.hash, cells.hash, thresholds, runs.replication, scenarios.units, unit, {numbers}"
        )
        asked = (
            f"SELECT {columns}, engine, intake_hash, record_hash {_KEYED} JOIN units ON units.run = runs.id"
        )
        for found in self._ask(f"{asked} {_IN_ORDER}, unit"):
            scenario, cell, thresholds, replication, names, unit, *rest = found
            name = json.loads(names)[unit]
            head = {"scenario": scenario, "cell": cell, "replication": replication, "unit": name}
            head["closure_threshold"] = json.loads(thresholds)[unit]
            yield head | dict(zip((*UNIT_COLUMNS, "engine", "intake_hash", "record_hash"), rest, strict=True))

    def _ask(self, query: str, values: Sequence[Any] = ()) -> Iterator[tuple[Any, ...]]:
        try:
            yield from self._connection.execute(query, values)
        except sqlite3.Error as error:
            raise StoreError(f"{self.file} cannot be read: {error}") from error
