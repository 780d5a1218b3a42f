"""The file of a store: its layout and how older ones are brought up to it, its soundness, and its one writer.

The layout is a list of steps; a file's `user_version` counts the steps it has had, so a new file takes all of them
and an older one those that it lacks.
"""

from __future__ import annotations

import json
import os
import platform
import sqlite3
import sys
import time
from contextlib import suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import IO, Any

from sim.errors import StoreError

FILE = "runs.sqlite"
LOCK = "runs.lock"
APPLICATION = 0x42524D4C  # marks the file as this program's
HEADER = b"SQLite format 3\0"
LOOK_SECONDS = 0.05

STEPS = (
    """
    CREATE TABLE scenarios (id INTEGER PRIMARY KEY, hash TEXT NOT NULL UNIQUE, units TEXT NOT NULL);
    CREATE TABLE cells (id INTEGER PRIMARY KEY, hash TEXT NOT NULL UNIQUE, thresholds TEXT NOT NULL);
    CREATE TABLE fingerprints (id INTEGER PRIMARY KEY, text TEXT NOT NULL UNIQUE);
    CREATE TABLE replications (
        scenario INTEGER NOT NULL REFERENCES scenarios, replication INTEGER NOT NULL,
        fingerprint INTEGER NOT NULL REFERENCES fingerprints, intake_hash TEXT NOT NULL,
        PRIMARY KEY (scenario, replication)) WITHOUT ROWID;
    CREATE TABLE runs (
        id INTEGER PRIMARY KEY, scenario INTEGER NOT NULL REFERENCES scenarios,
        cell INTEGER NOT NULL REFERENCES cells, replication INTEGER NOT NULL, engine TEXT NOT NULL,
        seconds REAL NOT NULL, record_hash TEXT NOT NULL, arrays BLOB NOT NULL,
        UNIQUE (scenario, cell, replication));
    CREATE TABLE units (
        run INTEGER NOT NULL REFERENCES runs, unit INTEGER NOT NULL,
        arrived INTEGER NOT NULL, admitted INTEGER NOT NULL, diverted_out INTEGER NOT NULL,
        diverted_in INTEGER NOT NULL, turned_away INTEGER NOT NULL, occupied_days REAL NOT NULL,
        full_days REAL NOT NULL, closed_days REAL NOT NULL, closed_free_days REAL NOT NULL,
        incoming_closed_days REAL NOT NULL, PRIMARY KEY (run, unit)) WITHOUT ROWID;
    """,
    """
    CREATE TABLE failures (
        scenario INTEGER NOT NULL REFERENCES scenarios, cell INTEGER NOT NULL REFERENCES cells,
        replication INTEGER NOT NULL, traceback TEXT NOT NULL,
        PRIMARY KEY (scenario, cell, replication)) WITHOUT ROWID;
    CREATE TABLE commands (
        id INTEGER PRIMARY KEY, scenario INTEGER NOT NULL REFERENCES scenarios, provenance TEXT NOT NULL,
        asked INTEGER NOT NULL, reused INTEGER NOT NULL, computed INTEGER NOT NULL DEFAULT 0,
        failed INTEGER NOT NULL DEFAULT 0, began TEXT NOT NULL, ended TEXT);
    """,
    """
    CREATE TABLE exact (
        id INTEGER PRIMARY KEY, scenario INTEGER NOT NULL REFERENCES scenarios,
        cell INTEGER NOT NULL REFERENCES cells, fingerprint INTEGER NOT NULL REFERENCES fingerprints,
        value_hash TEXT NOT NULL, vals BLOB NOT NULL, UNIQUE (scenario, cell));
    """,
)


def connect_to_read(file: Path) -> sqlite3.Connection:
    """A connection that cannot write, to a sound file of this program; else StoreError, the file left as it is."""
    _require_whole(file)
    try:
        connection = _open_to_read(file)
        _require_sound(connection, file)
    except sqlite3.OperationalError as error:
        raise StoreError(f"{file} cannot be read: {error}") from error
    except sqlite3.Error as error:
        raise StoreError(_damaged(file, str(error))) from error
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    if version > len(STEPS):
        connection.close()
        raise StoreError(f"{file} was written by a newer brimline (layout {version}): use that one")
    return connection


def _open_to_read(file: Path) -> sqlite3.Connection:
    """In a folder that cannot be written SQLite must be told that nobody else writes, which then holds."""
    log = file.with_name(file.name + "-wal")
    alone = not os.access(file.parent, os.W_OK) and not (log.exists() and log.stat().st_size)
    address = f"{file.resolve().as_uri()}?mode=ro{'&immutable=1' if alone else ''}"
    return sqlite3.connect(address, uri=True, timeout=30, isolation_level=None)


def _require_whole(file: Path) -> None:
    try:
        with file.open("rb") as opened:
            start = opened.read(len(HEADER))
    except FileNotFoundError:
        raise StoreError(f"{file.parent} holds no results ({file.name} is missing)") from None
    except OSError as error:
        raise StoreError(f"{file} cannot be read: {error.strerror}") from error
    if start != HEADER:
        raise StoreError(_damaged(file, "it does not begin as a store does"))


def _require_sound(connection: sqlite3.Connection, file: Path) -> None:
    if connection.execute("PRAGMA application_id").fetchone()[0] != APPLICATION:
        raise StoreError(f"{file} is not a store of brimline; it was left as it is: choose another folder")
    (verdict,) = connection.execute("PRAGMA quick_check(1)").fetchone()
    if verdict != "ok":
        raise StoreError(_damaged(file, " ".join(verdict.split())))


def _damaged(file: Path, why: str) -> str:
    return f"{file} is damaged ({why}); it was left as it is: move it away, or put a sound copy in its place"


def connect_to_write(file: Path) -> sqlite3.Connection:
    """A connection that writes; the file is made, checked, and brought up to the present layout."""
    if not file.exists():
        _make(file)
    connect_to_read(file).close()
    if not os.access(file, os.W_OK):  # SQLite would tell at the first row only
        raise StoreError(f"{file} cannot be written: make it writable, or choose another folder")
    try:
        connection = sqlite3.connect(file, timeout=30, isolation_level=None)
        connection.execute("PRAGMA journal_mode = WAL")
        connection.execute("PRAGMA synchronous = NORMAL")
        migrate(connection)
    except sqlite3.Error as error:
        raise StoreError(cannot_be_written(file, error)) from error
    return connection


def cannot_be_written(file: Path, error: sqlite3.Error) -> str:
    """What stands in the way, and what to do about it."""
    said = str(error)
    if "readonly" in said:
        remedy = "make it writable, or choose another folder"
    elif "full" in said or "disk I/O" in said:
        remedy = "free some space (or raise the limit on a file's size) and give the same command again"
    else:
        remedy = "see to that and give the same command again"
    return f"{file} cannot be written: {said}; what was committed before is kept: {remedy}"


def _make(file: Path) -> None:
    """A new file takes its name only when it is whole, so that an empty one is always a damaged one."""
    half = file.with_name(f"{file.name}.part")
    half.unlink(missing_ok=True)
    try:
        connection = sqlite3.connect(half, isolation_level=None)
        connection.execute(f"PRAGMA application_id = {APPLICATION}")
        migrate(connection)
        connection.close()
        half.replace(file)
    except (sqlite3.Error, OSError) as error:
        raise StoreError(
            f"{file} cannot be made: {error}: free some space, or choose another folder"
        ) from error


def migrate(connection: sqlite3.Connection) -> None:
    """Takes the steps that the file lacks, each whole or not at all."""
    done = connection.execute("PRAGMA user_version").fetchone()[0]
    for number in range(done, len(STEPS)):
        connection.executescript(f"BEGIN; {STEPS[number]} PRAGMA user_version = {number + 1}; COMMIT;")


class WriterLock:
    """Keeps two writers off one folder: a lock of the operating system, which ends with its process however that dies.

    The file beside it says who holds it, for the message to the other. Left behind it keeps nobody off.
    left_by: in words, who held it and ended without letting go (killed, or the machine stopped); None for nobody.
    """

    def __init__(self, folder: Path) -> None:
        self._file: IO[str] | None = None
        self.left_by: str | None = None
        path = folder / LOCK
        try:
            opened = path.open("a+", encoding="utf-8")
        except OSError as error:
            raise StoreError(
                f"{folder} cannot be written: {error.strerror}: choose another folder"
            ) from error
        if not _take(opened) and not _take_again(opened):
            opened.seek(0)
            holder = _holder(opened.read())
            opened.close()
            raise StoreError(f"{folder} is being written by {holder}: wait for it, or choose another folder")
        opened.seek(0)
        self.left_by = _holder(said) if (said := opened.read()) else None
        try:
            opened.truncate(0)
            opened.write(json.dumps(_myself()))
            opened.flush()
        except OSError as error:
            raise StoreError(f"{path} cannot be written: {error.strerror}: free some space") from error
        self._file = opened

    def release(self) -> None:
        """Lets another writer in."""
        if self._file is not None:
            self._file.truncate(0)
            self._file.close()
            self._file = None


def _take_again(opened: IO[str]) -> bool:
    """A moment later, for it may only be `is_written` that looked."""
    time.sleep(LOOK_SECONDS)
    return _take(opened)


def is_written(folder: Path) -> bool:
    """Whether some process is writing the folder's store at this moment."""
    try:
        with (folder / LOCK).open(encoding="utf-8") as opened:
            return not _take(opened)  # and closing it lets it go
    except OSError:
        return False


def _myself() -> dict[str, Any]:
    now = datetime.now(UTC).isoformat(timespec="seconds")
    return {"pid": os.getpid(), "host": platform.node(), "since": now}


def _holder(text: str) -> str:
    with suppress(ValueError, KeyError, TypeError):
        said = json.loads(text)
        return f"process {said['pid']} on {said['host']} since {said['since']}"
    return "another process"


def _take(opened: IO[str]) -> bool:
    """The lock, without waiting; False where another has it."""
    try:
        if sys.platform == "win32":
            import msvcrt

            opened.seek(2**20)  # beyond the text, which others must be able to read
            msvcrt.locking(opened.fileno(), msvcrt.LK_NBLCK, 1)
        else:
            import fcntl

            fcntl.flock(opened, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True
