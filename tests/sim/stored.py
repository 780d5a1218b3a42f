"""Rows that no engine made, and a store filled with them."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from sim.record import Record
from sim.store import Store
from sim.store_rows import Key, Row


def record_of(seed: float, units: int = 2, staffed: bool = False) -> Record:
    """A record that no engine made, of awkward numbers."""
    days = np.array([[[seed, 0.1, -0.0], [5e-324, 1 / 3, 1e300]]])[:, :units]
    counts = np.arange(units)
    return Record(
        days, np.full((units, 8), seed / 7), counts, counts + 1, np.eye(units, dtype=np.int64)[::-1],
        np.ones((units, units), np.int64), counts, counts, days * 2 if staffed else None,
    )  # fmt: skip


def row(scenario="s", cell="c", replication=0, *, seed=1.0, intake=None, machine="here") -> Row:
    intake = f"intake {replication}" if intake is None else intake
    return Row(Key(scenario, cell, replication), record_of(seed), intake, "reference", machine)


def filled(folder: Path, rows, *, command=None) -> str:
    """Puts the rows, one commit each; gives the table's hash."""
    with Store(folder, write=True) as store:
        for one in rows:
            store.describe(one.key.scenario, ["A", "B"], {one.key.cell: [1, 2]})
            store.put([one], command=command)
        return store.table_hash()
